"""Studies over the wider language: every field may be an axis, strike tables are swapped whole, legs may name each other.

Rung: twin (every combination on its own, in plain loops: a table is copied, its fields are set, and it is read as an
overlay file is), and identity (files of a few lines, with what is wrong in them).
"""

# ruff: noqa: E501  one case stays on one or two lines, so that the table can be read

from __future__ import annotations

import copy
import itertools
from dataclasses import fields
from typing import Any

import pytest

from backtest import Costs, Early, Gate, Leg, Overlay, PriceMean, RealisedVolatility, Volatility
from backtest.gates import GATE_KEYS
from backtest.strikes import STRIKE_KEYS
from studies.errors import StudyFileError
from studies.expansion import Expansion, Point, known_fields, points
from studies.overlay_files import VOLATILITY_KEYS, overlay_from_table
from studies.runner import DECIDES_THE_FIRST_DAY
from studies.study import Axis, Study, parse_study, study_from_table, study_to_table, study_to_toml

# both legs have a rule of their own kind, so that any key of a strike can be set in one of them
PUT: dict[str, Any] = {"position": "long", "right": "put", "strike": {"delta": 0.25}}
CALL: dict[str, Any] = {
    "position": "short", "right": "call", "roll": "days", "every": 21,
    "strike": {"financed_share": 1, "of_legs": [1]},
    "early": {"value_below": 0.2}, "gate": {"vol_above_percentile": 80},
}  # fmt: skip
TABLE: dict[str, Any] = {"leg": [PUT, CALL], "gate": {"price_below_mean": 200}}


def study_of(*axes: Axis, leave_out: tuple[str, ...] = (), table: dict[str, Any] = TABLE) -> Study:
    return Study(question="?", histories=("demo",), overlay=table, axes=axes, leave_out=leave_out)


def axis(field: str, *values: Any, name: str = "x") -> Axis:
    return Axis(name=name, fields=(field,), values=values)


def twins(study: Study, table: dict[str, Any]) -> list[Point]:
    """All combinations, each through the reader of overlay files."""
    found = []
    for values in itertools.product(*(list(one.values) for one in study.axes)):
        changed = copy.deepcopy(table)
        for one, value in zip(study.axes, values, strict=True):
            for field in one.fields:
                *way, last = [int(word) - 1 if word.isdigit() else word for word in field.split(".")]
                place: Any = changed
                for step in way:
                    place = place[step] if isinstance(step, int) else place.setdefault(step, {})
                place[last] = copy.deepcopy(value)
        made = overlay_from_table({**changed, "name": "", "crossed": True})
        found.append(Point(overlay=made.overlay, volatility=made.volatility))
    return found


AXES: dict[str, tuple[Any, ...]] = {
    "decide_lag": (0, 1),
    "portfolio": (100_000, "none", 1e6),
    "gate": ("none", {"signal": True}, {"vol_above_percentile": 80, "window": 252}, {"price_above_mean": 50}),
    "gate.price_below_mean": (50, 200),
    "gate.when_off": ("run out", "close"),
    "gate.when_on": ("next roll", "at once"),
    "leg.1.position": ("long", "short"),
    "leg.1.right": ("put", "call"),
    "leg.1.roll_day": ("third friday", "last trading day"),
    "leg.1.term": ("none", 6, 12),
    "leg.1.close_before": (0, 5),
    "leg.1.settlement": ("close", "open"),
    "leg.2.every": (10, 21, 42),
    "leg.2.term_days": (42, 63, "none"),
    "leg.2.ladder": (1, 3),
    "leg.2.stagger": (True, False),
    "leg.1.early": ("none", {"delta_below": 0.1}, {"value_above": 3, "days_left": 20}),
    "leg.1.early.delta_below": (0.05, 0.1),
    "leg.2.early.value_above": ("none", 3, 5),
    "leg.2.early.value_below": (0.1, 0.2),
    "leg.2.early.days_left": (0, 30),
    "leg.1.gate": ("none", {"signal": True}, {"price_below_mean": 200, "when_off": "close"}),
    "leg.1.gate.price_above_mean": (50, 100),
    "leg.2.gate.vol_above_percentile": (50, 80),
    "leg.2.gate.window": (252, 756),
    "leg.2.gate.when_off": ("run out", "close"),
    "leg.1.reference": (False, True),
    "leg.1.strike": (
        {"percent_of_spot": 95}, {"delta": 0.25}, {"deviations": 1}, {"premium_percent": 0.5, "ratchet": True},
        {"delta": 0.1, "not_below": 80, "strike_step": 5},
    ),
    "leg.1.strike.delta": (0.1, 0.25),
    "leg.1.strike.ratchet": (True, False),
    "leg.1.strike.kept_until_moved": (2, 5),
    "leg.1.strike.not_below": ("none", 80, 90),
    "leg.1.strike.not_above": (95, 99),
    "leg.1.strike.strike_step": (1, 5),
    "leg.2.strike": (
        {"percent_of_spot": 105}, {"financed_share": 1}, {"mirrored_leg": 1}, {"financed_share": 0.5, "of_legs": [1]},
    ),
    "leg.2.strike.financed_share": (0.5, 1),
    "leg.2.strike.not_below_leg": ("none", 1),
    "costs.borrow_spread": (0, 1.5),
    "volatility.put_shift": (-1, 0, 1),
    "volatility.source": ("auto", "implied", "surface", "realised"),
    "volatility.term_structure": ("flat", "mean reverting"),
    "volatility.kappa": (1, 2),
}  # fmt: skip


@pytest.mark.parametrize("field", AXES)
def test_every_field_against_its_twin(field: str) -> None:
    study = study_of(axis(field, *AXES[field]))
    expected = twins(study, TABLE)
    found = Expansion(study).many(points(study))
    assert found == expected
    assert len({repr(point) for point in found}) == len(AXES[field])
    assert study_from_table(study_to_table(study)) == study
    assert parse_study(study_to_toml(study)) == study


def test_axes_together_against_their_twins() -> None:
    wanted = ("leg.1.strike", "gate.when_off", "leg.2.strike", "leg.1.early", "decide_lag", "portfolio")
    # a ratchet beside early rules is no overlay
    study = study_of(
        *(axis(field, *AXES[field], name=field) for field in wanted),
        leave_out=("leg.1.strike == 'premium percent 0.5, ratchet true' and leg.1.early != 'none'",),
    )
    found = Expansion(study).many(points(study))
    chosen = [[*range(len(AXES[field]))] for field in wanted]
    kept = [at for at in itertools.product(*chosen) if not (at[0] == 3 and at[3] != 0)]
    assert points(study).tolist() == [list(at) for at in kept]
    few = [number for number in range(len(kept)) if number % 7 == 0]
    for number in few:
        at = kept[number]
        alone = study_of(
            *(axis(field, AXES[field][position], name=field) for field, position in zip(wanted, at, strict=True))
        )
        assert [found[number]] == twins(alone, TABLE)


def test_no_field_of_the_language_is_left_out_of_the_axes() -> None:
    known = set(known_fields(1))
    of_leg = {"term" if field.name == "term_months" else field.name for field in fields(Leg) if field.init}
    assert {f"leg.1.{name}" for name in of_leg} < known
    assert {f"leg.1.strike.{key}" for key in STRIKE_KEYS} < known
    assert {f"leg.1.early.{field.name}" for field in fields(Early)} < known
    assert {f"{above}gate.{key}" for key in GATE_KEYS for above in ("", "leg.1.")} < known
    assert {f"costs.{field.name}" for field in fields(Costs)} < known
    assert {f"volatility.{field.name}" for field in (*fields(Volatility), *fields(RealisedVolatility))} < known
    # legs are named one by one, a name is not of the study, and a call under the put is always agreed to
    of_overlay = {field.name for field in fields(Overlay) if field.init} - {"legs", "name", "costs", "crossed"}
    assert of_overlay < known


# ---------------------------------------------------------------- a call under the put


def test_a_call_under_the_put_is_allowed_and_may_be_left_out() -> None:
    table = {
        "leg": [
            {"position": "long", "right": "put", "strike": {"percent_of_spot": 105}},
            {"position": "short", "right": "call", "strike": {"percent_of_spot": 100}},
        ]
    }
    axes = (
        axis("leg.1.strike.percent_of_spot", 95, 105, name="put"),
        axis("leg.2.strike.percent_of_spot", 100, 110, name="call"),
    )
    study = study_of(*axes, table=table)
    found = Expansion(study).many(points(study))
    assert [tuple(leg.strike.percent for leg in one.overlay.legs) for one in found] == [  # type: ignore[attr-defined]
        (95, 100), (95, 110), (105, 100), (105, 110),
    ]  # fmt: skip
    assert all(one.overlay.crossed for one in found)
    assert points(study_of(*axes, table=table, leave_out=("put > call",))).tolist() == [[0, 0], [0, 1], [1, 1]]
    # so there is no need to say so, and no way to say otherwise
    for word in (True, False):
        assert study_of(*axes, table={**table, "crossed": word}) == study
    assert "crossed" not in study.overlay


# ---------------------------------------------------------------- the normal form


def test_two_spellings_of_one_study_are_the_same() -> None:
    one = axis("costs.commission", 0, 1)
    short = study_of(one, table={"leg": [PUT], "gate": {"price_below_mean": 200}})
    full = study_of(one, table={
        "decide_lag": 0, "portfolio": "none", "gate": {"price_below_mean": 200, "when_on": "next roll", "when_off": "run out"},
        "leg": [{
            **PUT, "strike": {"delta": 0.25, "ratchet": False, "not_below": "none"}, "roll": "quarter", "ladder": 1,
            "roll_day": "third friday", "stagger": True, "early": "none", "gate": "none", "settlement": "close",
            "close_before": 0, "reference": False,
        }],
    })  # fmt: skip
    assert short == full
    assert full.overlay["gate"] == {"price_below_mean": 200, "when_off": "run out", "when_on": "next roll"}
    assert not {"portfolio", "crossed"} & set(full.overlay)
    assert not {"early", "gate", "term", "every", "term_days"} & set(full.overlay["leg"][0])


def test_a_term_in_days_follows_its_roll_unless_it_is_given() -> None:
    study = study_of(axis("leg.2.every", 10, 42))
    assert [point.overlay.legs[1].term_days for point in Expansion(study).many(points(study))] == [10, 42]
    said = {**TABLE, "leg": [PUT, {**CALL, "term_days": 63}]}
    study = study_of(axis("leg.2.every", 10, 42), table=said)
    assert [point.overlay.legs[1].term_days for point in Expansion(study).many(points(study))] == [63, 63]


def test_months_against_days() -> None:
    """What belongs to one of the rolls only is left out beside the other."""
    study = study_of(
        axis("leg.1.roll", "month", "days", name="roll"),
        axis("leg.1.every", "none", 21, name="every"),
        leave_out=("roll == 'month' and every != 'none'", "roll == 'days' and every == 'none'"),
    )
    legs = [point.overlay.legs[0] for point in Expansion(study).many(points(study))]
    assert [(leg.roll, leg.every, leg.term) for leg in legs] == [("month", None, 1), ("days", 21, 21)]


def test_estimators_with_what_belongs_to_one_of_them() -> None:
    study = study_of(
        axis("volatility.estimator", "close", "ewma", "parkinson", name="estimator"),
        axis("volatility.half_life", "none", 11, name="half-life"),
        leave_out=("estimator == 'ewma' and half-life == 'none'", "estimator != 'ewma' and half-life != 'none'"),
        table={"leg": [PUT], "volatility": {"source": "realised", "half_life": "none"}},
    )
    assert [point.volatility.source for point in Expansion(study).many(points(study))] == [
        RealisedVolatility(),
        RealisedVolatility(estimator="ewma", half_life=11),
        RealisedVolatility(estimator="parkinson"),
    ]


def test_a_gate_inside_what_was_none() -> None:
    table = {"leg": [{**PUT, "gate": "none"}], "gate": "none"}
    study = study_of(axis("leg.1.gate.price_below_mean", 50), axis("gate.price_above_mean", 200, name="y"), table=table)
    (found,) = Expansion(study).many([[0, 0]])
    assert found.overlay.legs[0].gate == Gate(condition=PriceMean(window=50, above=False))
    assert found.overlay.gate == Gate(condition=PriceMean(window=200, above=True))


# ---------------------------------------------------------------- what makes no overlay


def refused(*axes: Axis, table: dict[str, Any] = TABLE, leave_out: tuple[str, ...] = ()) -> str:
    with pytest.raises(StudyFileError) as caught:
        study_of(*axes, table=table, leave_out=leave_out)
    return str(caught.value)


WRONG: list[tuple[str, str, tuple[Any, ...], str]] = [
    ("lag", "decide_lag", (0, 2), "axis x, value 2: decide_lag: decide_lag is 2; it takes a whole number from 0 to 1 (trading day)"),
    ("portfolio", "portfolio", ("none", 0), "axis x, value 0: portfolio: portfolio is 0; it takes a number of at least 1 (money)"),
    ("gate", "gate", ({"price_below_mean": 1},), "axis x, value { price_below_mean = 1 }: gate.price_below_mean: price_below_mean is 1; it takes a whole number from 2 to 2520"),
    ("gate word", "gate", ("off",), "axis x, value \"off\": gate: is 'off'; it takes a table with keys: signal, vol_above_percentile"),
    ("two conditions", "gate.signal", (True,), "axis x, value true: gate: names price_below_mean and signal; a gate takes one of"),
    ("strike", "leg.1.strike", ({"delta": 25},), "axis x, value { delta = 25 }: leg.1.strike.delta: delta is 25; it takes a number from 0.001 to 0.999"),
    ("limit", "leg.1.strike.not_below", (80, -80), "axis x, value -80: leg.1.strike.not_below: not_below is -80; it takes a number from 1 to 1000"),
    ("limits", "leg.1.strike.of_legs", (1,), "axis x, value 1: leg.1.strike.of_legs: of_legs belongs to financed_share; leave it out beside delta"),
    ("early", "leg.2.early.days_left", (-1,), "axis x, value -1: leg.2.early.days_left: days_left is -1; it takes a whole number from 0 to 3650"),
    ("ratchet beside early rules", "leg.2.strike.ratchet", (True,), "axis x, value true: leg.2.early: early rules replace an option by the rule alone"),
    # legs together
    ("no such leg", "leg.2.strike", ({"mirrored_leg": 1}, {"mirrored_leg": 3}), "axis x, value { mirrored_leg = 3 }: leg.2: leg 2 names leg 3, and there are 2 leg(s)"),
    ("itself", "leg.2.strike.not_below_leg", (1, 2), "axis x, value 2: leg.2: leg 2 names itself"),
    ("circle", "leg.1.strike", ({"delta": 0.25}, {"mirrored_leg": 2}), "axis x, value { mirrored_leg = 2 }: leg.1: legs 1, 2 wait for each other's strikes"),
    ("ladder of the named", "leg.1.ladder", (1, 3), "axis x, value 3: leg.2: leg 2 of 2 tranche(s) names leg 1 of 3; give both the same ladder"),
    # crossed
    ("crossed", "crossed", (True, False), "crossed is true in every overlay of a study; leave out the combinations that you do not want to see"),
]  # fmt: skip


@pytest.mark.parametrize(("field", "values", "says"), [case[1:] for case in WRONG], ids=[case[0] for case in WRONG])
def test_values_that_make_no_overlay(field: str, values: tuple[Any, ...], says: str) -> None:
    table = {**TABLE, "leg": [PUT, {**CALL, "ladder": 2}]} if field == "leg.1.ladder" else TABLE
    said = refused(axis(field, *values), table=table)
    assert says in said


def test_two_axes_are_to_blame_for_legs_that_do_not_fit() -> None:
    put = axis("leg.1.ladder", 1, 2, 3, name="put tranches")
    call = axis("leg.2.ladder", 1, 2, 3, name="call tranches")
    cost = axis("costs.commission", 0, 1, name="cost")
    said = refused(put, call, cost)
    assert said.startswith(
        "study, axis.1.values: axis put tranches, value 2 with axis call tranches, value 1: leg.2: leg 2 of 1 "
        "tranche(s) names leg 1 of 2; give both the same ladder, or none to the leg that is named; or leave the "
        "combination out with leave_out"
    )
    fitting = study_of(put, call, cost, leave_out=("put tranches != call tranches and put tranches != 1",))
    assert len(Expansion(fitting).many(points(fitting))) == (3 + 1 + 1) * 2
    # what is left out for one cost only is still there for the other
    more = ("put tranches != call tranches and put tranches != 1 and cost == 1",)
    assert "put tranches, value 2 with axis call tranches, value 1" in refused(put, call, cost, leave_out=more)


def test_a_combination_that_is_left_out_and_makes_no_overlay() -> None:
    """What is asked of the expansion all the same is an error of ours, with its place."""
    table = {**TABLE, "leg": [PUT, {**CALL, "ladder": 2}]}
    study = study_of(axis("leg.1.ladder", 1, 3), table=table, leave_out=("x == 3",))
    with pytest.raises(StudyFileError, match=r"^study, leg\.2: leg 2 of 2 tranche\(s\) names leg 1 of 3"):
        Expansion(study).many([[1]])


@pytest.mark.parametrize("key", ["counterparty", "sale"])
def test_what_is_asked_beside_a_replay_is_not_asked_of_a_study(key: str) -> None:
    said = refused(axis("costs.commission", 0), table={**TABLE, key: {}})
    assert said == f"study, overlay.{key}: is asked beside a single replay; leave it out of a study"


def test_consent_is_yes_or_no() -> None:
    said = refused(axis("costs.commission", 0), table={**TABLE, "crossed": "yes"})
    assert said == "study, overlay.crossed: is 'yes'; it takes true or false"


@pytest.mark.parametrize(
    ("leg", "line", "key"),
    [
        ('roll = "days"', 3, "overlay.leg.1.every"),  # which is not written: the leg is pointed at
        ("[overlay.leg.strike]\ndelta = 25", 7, "overlay.leg.1.strike.delta"),
        ("strike = { mirrored_leg = 2 }", 3, "overlay.leg.1"),
    ],
)
def test_the_line_of_what_is_wrong_in_the_overlay(leg: str, line: int, key: str) -> None:
    strike = "" if "strike" in leg else "strike = { delta = 0.25 }\n"
    text = (
        f'question = "?"\nhistories = ["demo"]\n[[overlay.leg]]\nposition = "long"\nright = "put"\n{leg}\n{strike}'
        '[[axis]]\nname = "x"\nfield = "costs.commission"\nvalues = [0]\n'
    )
    with pytest.raises(StudyFileError) as caught:
        parse_study(text)
    assert (caught.value.line, caught.value.key) == (line, key)


# ---------------------------------------------------------------- fields on which the first day depends

#: Whatever they are, an overlay begins on the same day: first all that is in a leg, then what is not.
DO_NOT_DECIDE = {
    "leg.position", "leg.right", "leg.strike", "leg.term", "leg.term_days", "leg.settlement", "leg.early", "leg.gate",
    "account", "portfolio", "gate", "volatility.smile", "volatility.quote", "volatility.put_shift", "volatility.call_shift", "volatility.term_structure",
    "volatility.kappa", *(f"costs.{field.name}" for field in fields(Costs)),
    # its window is what groups of overlays are made by
    "window", "window.from", "window.to",
}  # fmt: skip


def test_of_every_field_it_is_known_whether_the_first_day_depends_on_it() -> None:
    """A new field has to be entered either in the runner or above."""
    assert not DO_NOT_DECIDE & set(DECIDES_THE_FIRST_DAY)
    # what is inside a strike, an early rule, a gate or a smile is as these are
    inside = ("strike", "early", "gate", "smile")
    known = {
        field.replace("leg.1.", "leg.")
        for field in known_fields(1)
        if not any(f"{table}." in field for table in inside)
    }
    assert known == DO_NOT_DECIDE | set(DECIDES_THE_FIRST_DAY)
    assert {f"volatility.{key}" for key in VOLATILITY_KEYS} < known
