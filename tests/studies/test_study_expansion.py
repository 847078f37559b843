"""From a study to its overlays: which combinations are kept, and what each of them is.

Rung: twin (every combination on its own, in plain loops: a table is copied, its fields are set, and it is read as an
overlay file is), and hand-worked grids of a few points.
"""

from __future__ import annotations

import copy
import itertools
import time
from collections.abc import Callable
from typing import Any

import numpy as np
import pandas as pd
import pytest
from hypothesis import given
from hypothesis import strategies as st

from studies.errors import StudyFileError
from studies.expansion import Expansion, Point, known_fields, overlap, points
from studies.leave_out import AxisTerm, Comparison, parse_rule
from studies.overlay_files import overlay_from_table
from studies.study import Axis, Study

TABLE: dict[str, Any] = {
    "leg": [
        {"position": "long", "right": "put", "strike": {"percent_of_spot": 95}},
        {"position": "short", "right": "call", "roll": "month", "strike": {"percent_of_spot": 110}},
    ],
    "costs": {"commission": 1},
    "volatility": {"quote": "variance swap", "smile": {"rho": -0.5, "eta": 1.0, "gamma": 0.5}},
}
PUT = Axis(name="put", fields=("leg.1.strike.percent_of_spot",), values=(80, 90, 97.5))
CALL = Axis(
    name="call strike",
    fields=("leg.2.strike",),
    values=({"percent_of_spot": 105}, {"percent_of_forward": 90}),
    labels=("spot", "fwd"),
)
ROLLS = Axis(name="both rolls", fields=("leg.1.roll", "leg.2.roll"), values=("quarter", "month"))
TERM = Axis(name="term", fields=("leg.1.term",), values=(3, 12))
ACCOUNT = Axis(name="account", fields=("account",), values=("cash", "resize"))
COST = Axis(name="cost", fields=("costs.half_spread_vol",), values=(0, 0.5, 2))
RHO = Axis(name="rho", fields=("volatility.smile.rho",), values=(0, -0.5))
QUOTE = Axis(name="quote", fields=("volatility.quote",), values=("at the money", "variance swap"))
WINDOW = Axis(name="decade", fields=("window",), values=({"to": "2009-12-31"}, {}, {"from": "2010-01-01"}))
FROM = Axis(name="from", fields=("window.from",), values=("2000-01-03", "2005-01-03"))
TO = Axis(name="to", fields=("window.to",), values=("2004-12-31", "2010-12-31"))


def study_of(*axes: Axis, leave_out: tuple[str, ...] = ()) -> Study:
    return Study(question="?", histories=("demo",), overlay=TABLE, axes=axes, leave_out=leave_out)


def chosen_of(axes: tuple[Axis, ...], at: tuple[int, ...]) -> list[Any]:
    return [list(axis.values)[position] for axis, position in zip(axes, at)]


# ---------------------------------------------------------------- which are kept


def test_the_first_axis_is_the_slowest() -> None:
    found = points(study_of(PUT, ROLLS))
    assert found.dtype == np.int32
    assert found.tolist() == [[0, 0], [0, 1], [1, 0], [1, 1], [2, 0], [2, 1]]


# put 80, 90, 97.5 (positions 0, 1, 2) by cost 0, 0.5, 2 and by rolls quarter, month: what is left out, by hand
RULES: list[tuple[str, Callable[[float, float, str], bool]]] = [
    ("put < 90", lambda put, cost, roll: put < 90),
    ("put <= 90", lambda put, cost, roll: put <= 90),
    ("put>90", lambda put, cost, roll: put > 90),
    ("90 <= put", lambda put, cost, roll: put >= 90),
    ("put == 97.5", lambda put, cost, roll: put == 97.5),
    ("put == 97.500", lambda put, cost, roll: put == 97.5),
    ("put != +9.0e1", lambda put, cost, roll: put != 90),
    ("  put  ==  90  and  cost  >  .4  ", lambda put, cost, roll: put == 90 and cost > 0.4),
    ("both rolls == 'month'", lambda put, cost, roll: roll == "month"),
    ('"month" != both rolls', lambda put, cost, roll: roll != "month"),
    ("put == '97.5'", lambda put, cost, roll: put == 97.5),
    ("put < 95 and both rolls == 'month'", lambda put, cost, roll: put < 95 and roll == "month"),
    ("put<95 and cost<2 and cost!=0", lambda put, cost, roll: put < 95 and cost == 0.5),
    ("cost > -1 and put > 1000", lambda put, cost, roll: False),
    ("put > cost and cost >= 2", lambda put, cost, roll: cost >= 2),
]  # fmt: skip


@pytest.mark.parametrize("number", range(len(RULES)), ids=[rule for rule, _ in RULES])
def test_a_rule_against_plain_python(number: int) -> None:
    rule, leaves_out = RULES[number]
    axes = (PUT, COST, ROLLS)
    kept = [list(at) for at in itertools.product(range(3), range(3), range(2)) if not leaves_out(*chosen_of(axes, at))]
    assert points(study_of(*axes, leave_out=(rule,))).tolist() == kept


@given(chosen=st.lists(st.integers(0, len(RULES) - 1), max_size=3))
def test_any_of_several_rules_leaves_out(chosen: list[int]) -> None:
    axes = (PUT, COST, ROLLS)
    kept = [
        list(at)
        for at in itertools.product(range(3), range(3), range(2))
        if not any(RULES[n][1](*chosen_of(axes, at)) for n in chosen)
    ]
    rules = tuple(RULES[n][0] for n in chosen)
    if kept:
        assert points(study_of(*axes, leave_out=rules)).tolist() == kept
    else:
        with pytest.raises(StudyFileError, match="leaves out all of the 18 combinations"):
            study_of(*axes, leave_out=rules)


def test_two_axes_of_texts_or_tables_are_the_same_by_their_values() -> None:
    """Labels differ and values are written differently; what they mean is compared."""
    put = Axis(name="put roll", fields=("leg.1.roll",), values=("month", "year"), labels=("m", "y"))
    call = Axis(name="call roll", fields=("leg.2.roll",), values=("year", "month", "half"))
    assert points(study_of(put, call, leave_out=("put roll != call roll",))).tolist() == [[0, 1], [1, 0]]
    # a label may stand for its value
    rules = ("put roll == 'm'", "put roll == 'year' and call roll != 'half'")
    assert points(study_of(put, call, leave_out=rules)).tolist() == [[1, 2]]
    rule = Axis(name="rule", fields=("leg.1.strike",), values=({"percent_of_forward": 90.0}, {"percent_of_spot": 90}))
    assert points(study_of(rule, CALL, leave_out=("rule == call strike",))).tolist() == [[0, 0], [1, 0], [1, 1]]
    assert points(study_of(rule, CALL, leave_out=("call strike == 'fwd'",))).tolist() == [[0, 0], [1, 0]]


def test_the_longest_name_is_meant() -> None:
    names = ["put", "put strike", "put and call", "95"]
    assert parse_rule("put strike >= put and put and call != 95", names) == (
        Comparison(left=AxisTerm(1), operator=">=", right=AxisTerm(0)),
        Comparison(left=AxisTerm(2), operator="!=", right=AxisTerm(3)),
    )
    assert parse_rule("put == 'put' and 9 < put", names) == (
        Comparison(left=AxisTerm(0), operator="==", right="put"),
        Comparison(left=9.0, operator="<", right=AxisTerm(0)),
    )


def test_a_million_combinations_are_left_out_at_once() -> None:
    """1,000 by 1,000, kept where put < call: 1,000 * 999 / 2 = 499,500."""
    wide = tuple(range(1, 1001))
    put = Axis(name="put", fields=("leg.1.strike.percent_of_spot",), values=wide)
    call = Axis(name="call", fields=("leg.2.strike.percent_of_spot",), values=wide)
    found = points(study_of(put, call, leave_out=("put >= call",)))
    assert found.shape == (499_500, 2)
    assert (found[:, 0] < found[:, 1]).all()


# ---------------------------------------------------------------- what each of them is


def twin(study: Study, at: tuple[int, ...]) -> Point:
    """One combination on its own, through the reader of overlay files."""
    table = {**copy.deepcopy(TABLE), "window": {}}
    for axis, value in zip(study.axes, chosen_of(study.axes, at)):
        for field in axis.fields:
            *way, last = [int(word) - 1 if word.isdigit() else word for word in field.split(".")]
            place: Any = table
            for step in way:
                place = place[step]
            place[last] = copy.deepcopy(value)
    window = table.pop("window")
    made = overlay_from_table({**table, "name": "", "crossed": True})
    return Point(
        overlay=made.overlay, volatility=made.volatility, start=window.get("from"), end=window.get("to")
    )  # fmt: skip


GRIDS = {
    "strikes": (PUT, CALL),
    "legs moved together": (ROLLS, PUT, TERM),
    "account and costs": (ACCOUNT, COST),
    "volatility": (QUOTE, RHO),
    "windows": (WINDOW, PUT),
    "ends of windows": (TO, PUT, FROM),
    "everything": (PUT, WINDOW, RHO, COST, ROLLS, ACCOUNT, CALL, QUOTE),
}


@pytest.mark.parametrize("axes", GRIDS.values(), ids=GRIDS)
def test_every_overlay_against_its_twin(axes: tuple[Axis, ...]) -> None:
    backwards = "from == '2005-01-03' and to == '2004-12-31'"
    study = study_of(*axes, leave_out=(backwards,) if FROM in axes else ())
    found = points(study)
    expected = [twin(study, tuple(at)) for at in found.tolist()]
    assert Expansion(study).many(found) == expected
    assert len({repr(point) for point in expected}) == len(expected)  # no two of them are the same
    # in any order and in batches
    expansion, order = Expansion(study), np.random.default_rng(1).permutation(len(found))
    batches = [expansion.many(found[part]) for part in np.array_split(order, 3)]
    assert list(itertools.chain(*batches)) == [expected[number] for number in order]


def test_a_term_follows_the_roll_unless_it_is_given() -> None:
    expansion = Expansion(study_of(Axis(name="roll", fields=("leg.1.roll",), values=("month", "half", "year"))))
    assert [point.overlay.legs[0].term for point in expansion.many([[0], [1], [2]])] == [1, 6, 12]


def test_overlays_have_no_name_and_windows_may_be_open() -> None:
    named = Study(question="?", histories=("demo",), overlay={**TABLE, "name": "band"}, axes=(WINDOW,))
    found = Expansion(named).many([[0], [1], [2]])
    assert [point.overlay.name for point in found] == ["", "", ""]
    assert [(point.start, point.end) for point in found] == [(None, "2009-12-31"), (None, None), ("2010-01-01", None)]


def test_parts_are_built_once() -> None:
    """3 puts by 2 calls by 3 costs by 2 quotes: 36 overlays hold 5 legs, 3 costs and 2 volatilities between them."""
    study = study_of(PUT, CALL, COST, QUOTE)
    expansion = Expansion(study)
    found = [*expansion.many(points(study)[:20]), *expansion.many(points(study)[20:])]
    assert len(found) == 36
    assert len({id(leg) for point in found for leg in point.overlay.legs}) == 5
    assert len({id(point.overlay.costs) for point in found}) == 3
    assert len({id(point.volatility) for point in found}) == 2


def test_ten_thousand_overlays_are_made_in_no_time() -> None:
    axes = [
        Axis(name=f"{leg}", fields=(f"leg.{leg}.strike.percent_of_spot",), values=tuple(range(50, 150)))
        for leg in (1, 2)
    ]  # fmt: skip
    study = study_of(*axes)
    asked = points(study)
    taken = []
    for _ in range(5):
        began = time.process_time()
        found = Expansion(study).many(asked)
        taken.append(time.process_time() - began)
    assert len({id(leg) for point in found for leg in point.overlay.legs}) == 200
    assert min(taken) < 0.15  # about 0.03 s


# ---------------------------------------------------------------- settings


def test_settings_are_numbers_where_they_can_be() -> None:
    whole = Axis(name="days", fields=("leg.1.shift_days",), values=(0, 21))
    expansion = Expansion(study_of(PUT, CALL, whole, WINDOW))
    found = expansion.settings([[2, 1, 1, 0], [0, 0, 0, 1]])
    expected = pd.DataFrame(
        {"put": [97.5, 80.0], "call strike": ["fwd", "spot"], "days": [21, 0], "decade": ["to 2009-12-31", "whole"]}
    )
    pd.testing.assert_frame_equal(found, expected)


def test_no_points() -> None:
    expansion = Expansion(study_of(PUT, CALL))
    assert expansion.many([]) == []
    assert list(expansion.settings(np.zeros((0, 2), dtype=np.int32)).columns) == ["put", "call strike"]


@pytest.mark.parametrize(
    ("asked", "says"),
    [
        ([[0]], r"shape \(overlay, 2\)"),
        ([0, 0], r"shape \(overlay, 2\)"),
        ([[0.0, 0.0]], "whole numbers"),
        ([[3, 0]], r"outside the axes, which have \[3, 2\] values"),
        ([[-1, 0]], "outside the axes"),
    ],
)
def test_points_that_are_none(asked: Any, says: str) -> None:
    expansion = Expansion(study_of(PUT, CALL))
    for make in (expansion.many, expansion.settings):
        with pytest.raises(ValueError, match=says):
            make(asked)


def test_a_combination_that_is_left_out_and_makes_no_overlay() -> None:
    half = Axis(name="roll", fields=("leg.1.roll",), values=("half", "quarter"))
    expansion = Expansion(study_of(half, TERM, leave_out=("roll == 'half' and term == 3",)))
    with pytest.raises(StudyFileError, match=r"leg\.1\.term: term is 3; it takes a whole number from 6 to 120 months"):
        expansion.many([[0, 0]])


# ---------------------------------------------------------------- fields


def test_fields_and_which_of_them_overlap() -> None:
    known = known_fields(2)
    assert known["leg.2.strike.percent_of_forward"] == ("leg", 1, "strike", "percent_of_forward")
    assert known["window.from"] == ("window", "from")
    assert not {"name", "leg", "leg.3.roll", "costs", "volatility"} & {*known}
    together = {pair for pair in itertools.combinations(known, 2) if overlap(known[pair[0]], known[pair[1]])}
    assert ("leg.1.strike", "leg.1.strike.percent_of_spot") in together
    assert {("volatility.smile", "volatility.smile.rho"), ("window", "window.to")} < together
    assert {
        ("gate", "gate.window"),
        ("leg.2.early", "leg.2.early.days_left"),
        ("leg.1.gate", "leg.1.gate.signal"),
    } < together
    # strike with 14 keys, early with 4 and gate with 8 on each of 2 legs, the gate of all with 8, smile with 3
    # parameters, window with 2 ends
    assert len(together) == 2 * (14 + 4 + 8) + 8 + 3 + 2
