"""Study files: what they say, the exact round trip through the normal form, and the standing studies.

Rung: identity (round trip under hypothesis; small files and the objects they mean).
"""

from __future__ import annotations

import json
import pickle
import tomllib
from dataclasses import FrozenInstanceError, replace
from decimal import Decimal
from typing import Any

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from studies.axes import SETTINGS
from studies.batches import FIGURES, SPAN
from studies.errors import StudyFileError
from studies.study import Axis, Study, parse_study, study_from_table, study_to_table, study_to_toml

EVERYTHING = """\
question = "Which?"
histories = ["demo", "spx-1990"]
comparison = "hold"
seed = 7
resamples = 0
leave_out = ["put strike == 80 and rule == 'forward'"]

[overlay]
name = "band"
account = "cash"
[[overlay.leg]]
position = "long"
right = "put"
strike = { percent_of_spot = 95 }
[[overlay.leg]]
position = "short"
right = "call"
roll = "month"
term = 6
strike = { percent_of_spot = 110 }
[overlay.costs]
commission = 1
[overlay.volatility]
quote = "variance swap"

[[axis]]
name = "put strike"
field = "leg.1.strike.percent_of_spot"
values = { from = 80, to = 90, step = 5 }

[[axis]]
name = "both rolls"
fields = ["leg.1.roll", "leg.2.roll"]
values = ["month", "quarter"]

[[axis]]
name = "rule"
field = "leg.2.strike"
values = [{ percent_of_spot = 105 }, { percent_of_forward = 105 }]
labels = ["spot", "forward"]

[[axis]]
name = "decade"
field = "window"
values = [{ from = "2000-01-01", to = "2009-12-31" }, { from = 2010-01-01 }, {}]

[own]
"decade" = "whole"
"rule" = { percent_of_forward = 105.0 }
"both rolls" = "month"
"put strike" = 85
"""
PUT: dict[str, Any] = {"position": "long", "right": "put", "strike": {"percent_of_spot": 95}}


def study_of(*axes: Axis, leave_out: tuple[str, ...] = (), **overlay: Any) -> Study:
    return Study(
        question="?", histories=("demo",), overlay={"leg": [PUT], **overlay}, axes=axes, leave_out=leave_out
    )  # fmt: skip


def ladder(values: str) -> tuple[Any, ...]:
    """Values of an axis as they are written in a file."""
    cost = '[[axis]]\nname = "x"\nfield = "costs.commission"\nvalues = '
    head = 'question = "?"\nhistories = ["demo"]\n[[overlay.leg]]\nposition = "long"\nright = "put"\n'
    return parse_study(f"{head}strike.percent_of_spot = 95\n{cost}{values}\n").axes[0].values


# ---------------------------------------------------------------- what a file says


def test_every_key_is_read() -> None:
    study = parse_study(EVERYTHING)
    assert (study.question, study.histories, study.comparison) == ("Which?", ("demo", "spx-1990"), "hold")
    assert (study.seed, study.resamples) == (7, 0)
    assert study.leave_out == ("put strike == 80 and rule == 'forward'",)
    assert study.axes == (
        Axis(name="put strike", fields=("leg.1.strike.percent_of_spot",), values=(80, 85, 90)),
        Axis(name="both rolls", fields=("leg.1.roll", "leg.2.roll"), values=("month", "quarter")),
        Axis(
            name="rule",
            fields=("leg.2.strike",),
            values=({"percent_of_spot": 105}, {"percent_of_forward": 105}),
            labels=("spot", "forward"),
        ),
        Axis(
            name="decade",
            fields=("window",),
            values=({"from": "2000-01-01", "to": "2009-12-31"}, {"from": "2010-01-01"}, {}),
        ),
    )
    assert study.axes[0].labels == ("80", "85", "90")
    assert study.axes[3].labels == ("from 2000-01-01, to 2009-12-31", "from 2010-01-01", "whole")
    assert study.combinations == 3 * 2 * 2 * 3
    # by value, by text, by a table equal in its numbers, by label; in the order of the axes
    assert study.own_point == (1, 0, 1, 2)
    assert study.own == {"put strike": 85, "both rolls": "month", "rule": "forward", "decade": "whole"}


def test_what_a_file_need_not_say() -> None:
    study = study_of(Axis(name="x", fields=("leg.1.ratio",), values=(1, 2)))
    assert (study.comparison, study.seed, study.resamples, study.leave_out) == ("same-beta mix", 1, 500, ())
    assert study.own is None
    assert study.own_point is None
    assert "own" not in study_to_table(study)


def test_the_overlay_in_normal_form() -> None:
    """Every field, but a term that follows its roll unless it is given, and what belongs to realised vol only."""
    table = parse_study(EVERYTHING).overlay
    assert list(table) == ["name", "account", "decide_lag", "leg", "costs", "volatility"]
    first, second = table["leg"]
    assert first == {
        **PUT, "roll": "quarter", "roll_day": "third friday", "phase": 0, "shift_days": 0, "close_before": 0,
        "settlement": "close", "ratio": 1.0, "ladder": 1, "stagger": True, "reference": False,
    }  # fmt: skip
    assert (second["roll"], second["term"]) == ("month", 6)
    assert (table["costs"]["commission"], table["costs"]["half_spread_vol"]) == (1, 0.5)
    assert table["volatility"] == {
        "smile": "index", "quote": "variance swap", "source": "auto", "put_shift": 0.0, "call_shift": 0.0,
        "term_structure": "flat", "kappa": 2.0,
    }  # fmt: skip
    said = study_of(
        Axis(name="x", fields=("volatility.smile.rho",), values=(-0.5, 0)),
        volatility={"smile": {"rho": -0.6, "eta": 1.1, "gamma": 0.5}, "source": "realised", "window": 21},
    ).overlay
    assert "name" not in said
    # a smile told by its numbers stays so, though these are the numbers of a word; the markup was not told
    assert said["volatility"]["smile"] == {"rho": -0.6, "eta": 1.1, "gamma": 0.5}
    assert {key for key in said["volatility"] if key in ("window", "markup")} == {"window"}


def test_two_spellings_of_one_study_are_the_same() -> None:
    other = EVERYTHING.replace("{ from = 80, to = 90, step = 5 }", "[80, 85.0, 90]")
    other = other.replace("2010-01-01 }", '"2010-01-01" }').replace(
        'right = "put"\n', 'right = "put"\nroll = "quarter"\n'
    )
    assert other.count('roll = "quarter"') == 1
    assert parse_study(other) == parse_study(EVERYTHING)
    assert parse_study(EVERYTHING.replace('roll = "month"\n', "")) != parse_study(EVERYTHING)


# ---------------------------------------------------------------- ranges


@pytest.mark.parametrize(
    ("written", "values"),
    [
        ("{ from = 80, to = 83, step = 1 }", (80, 81, 82, 83)),
        ("{ from = 83, to = 80, step = -2 }", (83, 81)),
        ("{ from = 80, to = 81, step = 0.1 }", (80.0, 80.1, 80.2, 80.3, 80.4, 80.5, 80.6, 80.7, 80.8, 80.9, 81.0)),
        ("{ from = 0.3, to = 0.1, step = -0.1 }", (0.3, 0.2, 0.1)),
        ("{ from = 0, to = 0.9, step = 0.3 }", (0.0, 0.3, 0.6, 0.9)),
        ("{ from = 1e-7, to = 3e-7, step = 1e-7 }", (1e-7, 2e-7, 3e-7)),
        ("{ from = 5, to = 5, step = 1 }", (5,)),
        ("{ from = 5, to = 5, step = -1 }", (5,)),
        ("{ from = 80, to = 81, step = 3 }", (80,)),
    ],
)
def test_a_range_is_the_numbers_one_would_type(written: str, values: tuple[float, ...]) -> None:
    found = ladder(written)
    assert found == values
    assert [type(value) for value in found] == [type(value) for value in values]


@given(first=st.integers(0, 9_999), step=st.integers(1, 500), count=st.integers(1, 30), places=st.integers(0, 6))
def test_a_range_is_exact_in_decimals(first: int, step: int, count: int, places: int) -> None:
    """Against Python's decimal numbers: each value is the float nearest to the decimal one would write."""
    unit = Decimal(1).scaleb(-places)
    wanted = [(first + k * step) * unit for k in range(count)]
    found = ladder(f"{{ from = {wanted[0]:f}, to = {wanted[-1]:f}, step = {step * unit:f} }}")
    assert found == tuple(float(value) for value in wanted)


# ---------------------------------------------------------------- the normal form


def test_the_normal_form_comes_back_exactly() -> None:
    study = parse_study(EVERYTHING)
    table, text = study_to_table(study), study_to_toml(study)
    assert study_from_table(table) == study == parse_study(text)
    assert tomllib.loads(text) == table == json.loads(json.dumps(table))
    assert study_to_toml(parse_study(text)) == text
    assert pickle.loads(pickle.dumps(study)) == study


NUMBERS = st.one_of(st.integers(0, 10**18), st.floats(0, 1e300))
WORDS = st.text(min_size=1, max_size=20).filter(lambda word: word.isprintable() and word == word.strip())
#: An axis does not have the name of another column of the results.
AXIS_NAMES = WORDS.filter(lambda word: word not in (*SETTINGS, *SPAN, *FIGURES))


@given(
    question=st.text(min_size=1).filter(str.strip),
    names=st.lists(AXIS_NAMES, min_size=2, max_size=2, unique=True),
    numbers=st.lists(NUMBERS, min_size=1, max_size=4, unique=True),
    labels=st.lists(WORDS.map("l{}".format), min_size=4, max_size=4, unique=True),
    seed=st.integers(0, 2**32 - 1),
    own=st.integers(0, 3),
)  # fmt: skip
def test_round_trip(
    question: str, names: list[str], numbers: list[float], labels: list[str], seed: int, own: int
) -> None:
    smiles = ("flat", "mild", {"rho": -0.5, "eta": 1, "gamma": 0.25}, "index")
    study = Study(
        question=question,
        histories=("demo",),
        overlay={"leg": [PUT]},
        axes=(
            Axis(name=names[0], fields=("costs.commission",), values=tuple(numbers)),
            Axis(name=names[1], fields=("volatility.smile",), values=smiles, labels=tuple(labels)),
        ),
        own={names[0]: numbers[-1], names[1]: labels[own]},
        seed=seed,
    )
    assert study.own_point == (len(numbers) - 1, own)
    assert study_from_table(study_to_table(study)) == study
    assert parse_study(study_to_toml(study)) == study


def test_plain_values_of_numpy_and_a_study_that_cannot_be_changed() -> None:
    given = {"leg": [{**PUT, "ratio": np.float64(0.5)}]}
    axis = Axis(name="x", fields=("costs.commission",), values=tuple(np.arange(3)))
    study = Study(question="?", histories=("demo",), overlay=given, axes=(axis,))
    assert study.axes[0].values == (0, 1, 2)
    assert {type(value) for value in study.axes[0].values} == {int}
    assert type(study.overlay["leg"][0]["ratio"]) is float
    given["leg"][0]["ratio"] = 7
    study_to_table(study)["overlay"]["leg"][0]["ratio"] = 7
    assert study.overlay["leg"][0]["ratio"] == 0.5
    with pytest.raises(FrozenInstanceError):
        study.seed = 2  # type: ignore[misc]


def test_labels_of_values() -> None:
    values = (95, 97.0, 97.25, 1e-7, "month", {"percent_of_spot": 95.0}, {"rho": -0.6, "eta": 1.1})
    axis = Axis(name="x", fields=("leg.1.strike",), values=values)
    assert axis.labels == (
        "95", "97", "97.25", "1e-07", "month", "percent of spot 95", "rho -0.6, eta 1.1",
    )  # fmt: skip
    assert not axis.is_numeric
    assert [axis.position_of(sought) for sought in (97, 97.0, "97", "percent of spot 95", True, None, 96)] == [
        1, 1, 1, 5, None, None, None,
    ]  # fmt: skip
    assert axis.some_labels() == ", ".join(axis.labels)
    assert Axis(name="x", fields=("leg.1.ratio",), values=(1, 2)).position_of(True) is None


def test_own_is_looked_up_again_when_axes_change() -> None:
    study = parse_study(EVERYTHING)
    axes = (replace(study.axes[0], values=(70, 85), labels=()), *study.axes[1:])
    changed = replace(study, axes=axes, leave_out=())
    assert changed.own_point == (1, 0, 1, 2)
    with pytest.raises(StudyFileError, match="is 85, no value of this axis: 70"):
        replace(study, axes=(replace(axes[0], values=(70,), labels=()), *axes[1:]), leave_out=())
