"""Names of strike rules and of what is laid around them in overlay files.

Rung: identity (a rule written as a table and read again is the same) and behaviour (every message).
"""

from __future__ import annotations

import tomllib
from dataclasses import dataclass, fields
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from backtest import (
    Adjusted,
    Delta,
    Deviations,
    Financed,
    Mirrored,
    OverlayError,
    PercentOfForward,
    PercentOfSpot,
    PremiumPercent,
)
from backtest.strikes import STRIKE_KEYS, STRIKE_RULES, OpenState, StrikeRule, strike_from_table, strike_to_table

RULES = st.one_of(
    st.builds(PercentOfSpot, st.floats(1.0, 1000.0)),
    st.builds(PercentOfForward, st.integers(1, 1000)),
    st.builds(Deviations, st.floats(-10.0, 10.0)),
    st.builds(Delta, st.floats(0.001, 0.999)),
    st.builds(PremiumPercent, st.floats(0.001, 90.0)),
    st.builds(Financed, st.floats(0.0001, 10.0), st.lists(st.integers(1, 200), min_size=1, unique=True).map(tuple)),
    st.builds(Mirrored, st.integers(1, 200)),
)


def maybe(values: st.SearchStrategy[Any]) -> st.SearchStrategy[Any]:
    return st.none() | values


LIMITED = st.builds(
    Adjusted,
    rule=RULES,
    kept_until_moved=maybe(st.floats(0.0, 1000.0)),
    ratchet=st.booleans(),
    not_below=maybe(st.floats(1.0, 100.0)),
    not_above=maybe(st.floats(100.0, 1000.0)),
    not_below_leg=maybe(st.integers(1, 200)),
    strike_step=maybe(st.floats(1e-6, 1e6)),
)


@settings(max_examples=400, deadline=None, derandomize=True, database=None)
@given(rule=RULES | LIMITED)
def test_written_and_read_again_it_is_the_same(rule: StrikeRule) -> None:
    table = strike_to_table(rule)
    again = strike_from_table(table)
    if isinstance(rule, Adjusted) and rule == Adjusted(rule=rule.rule):
        assert again == rule.rule  # nothing is laid around it
    else:
        assert again == rule
    assert set(table) <= set(STRIKE_KEYS)
    assert strike_to_table(again) == table


TABLES = [
    ("percent_of_spot = 95", PercentOfSpot(95)),
    ("percent_of_forward = 102.5", PercentOfForward(102.5)),
    ("deviations = -1.5", Deviations(-1.5)),
    ("delta = 0.25", Delta(0.25)),
    ("premium_percent = 1.0", PremiumPercent(1.0)),
    ("financed_share = 0.5", Financed(0.5)),
    ("financed_share = 0.5, of_legs = [1, 3]", Financed(0.5, (1, 3))),
    ("mirrored_leg = 2", Mirrored(2)),
    (
        "delta = 0.25, ratchet = true, not_below = 80, strike_step = 5",
        Adjusted(rule=Delta(0.25), ratchet=True, not_below=80, strike_step=5),
    ),
    (
        "of_legs = [2], not_above = 120, not_below_leg = 1, kept_until_moved = 3, financed_share = 1",
        Adjusted(rule=Financed(1, (2,)), not_above=120, not_below_leg=1, kept_until_moved=3),
    ),
    ("delta = 0.25, kept_until_moved = 0", Adjusted(rule=Delta(0.25), kept_until_moved=0)),
    ("delta = 0.25, ratchet = false", Adjusted(rule=Delta(0.25))),
]


@pytest.mark.parametrize(("text", "rule"), TABLES, ids=[text for text, _ in TABLES])
def test_as_in_a_file(text: str, rule: StrikeRule) -> None:
    assert strike_from_table(tomllib.loads(f"strike = {{ {text} }}")["strike"]) == rule


def test_what_is_not_set_is_not_written() -> None:
    assert strike_to_table(PercentOfSpot(95)) == {"percent_of_spot": 95}
    assert strike_to_table(Financed(1.0)) == {"financed_share": 1.0, "of_legs": [1]}
    assert strike_to_table(Adjusted(rule=Delta(0.3), kept_until_moved=0)) == {"delta": 0.3, "kept_until_moved": 0}
    assert strike_to_table(Adjusted(rule=Delta(0.3), not_above=120)) == {"delta": 0.3, "not_above": 120}


def test_every_rule_and_key_has_its_name() -> None:
    assert {
        "percent_of_spot": PercentOfSpot,
        "percent_of_forward": PercentOfForward,
        "deviations": Deviations,
        "delta": Delta,
        "premium_percent": PremiumPercent,
        "financed_share": Financed,
        "mirrored_leg": Mirrored,
    } == STRIKE_RULES
    limits = ("kept_until_moved", "ratchet", "not_below", "not_above", "not_below_leg", "strike_step")
    assert (*STRIKE_RULES, "of_legs", *limits) == STRIKE_KEYS
    assert [field.name for field in fields(Adjusted)] == ["rule", *limits]


ALL = "percent_of_spot, percent_of_forward, deviations, delta, premium_percent, financed_share, mirrored_leg"


@pytest.mark.parametrize(
    ("table", "message", "field"),
    [
        ({}, f"names no rule; it takes one of: {ALL}", None),
        ({"ratchet": True}, f"names no rule; it takes one of: {ALL}", None),
        ({"delta": 0.2, "percent_of_spot": 95}, f"names delta and percent_of_spot; it takes one of: {ALL}", None),
        ({"percent_of_spot": 95, "step": 5}, "step is no key of a strike", "step"),
        ({"percent_of_spot": 95, "rule": 1}, "rule is no key of a strike", "rule"),
        ({"percent_of_spot": 95, "legs": [1]}, "legs is no key of a strike", "legs"),
        (
            {"percent_of_spot": 95, "of_legs": [1]},
            "of_legs belongs to financed_share; leave it out beside percent_of_spot",
            "of_legs",
        ),
        ({"delta": 25}, "delta is 25; it takes a number from 0.001 to 0.999 (0.25 is a 25-delta option)", "delta"),
        (
            {"financed_share": 1, "of_legs": 1},
            "of_legs is 1; it takes numbers of legs, such as [1]",
            "of_legs",
        ),
        (
            {"financed_share": 1, "of_legs": []},
            "of_legs is []; it takes numbers of legs, such as [1]",
            "of_legs",
        ),
        ({"delta": 0.25, "ratchet": "yes"}, "ratchet is 'yes'; it takes true or false", "ratchet"),
        (
            {"delta": 0.25, "not_below": 90, "not_above": 80},
            "not_below is 90 and not_above 80; no strike fits between",
            "not_below",
        ),
    ],
    ids=str,
)
def test_tables_that_are_none(table: dict[str, Any], message: str, field: str | None) -> None:
    with pytest.raises(OverlayError) as caught:
        strike_from_table(table)
    assert (str(caught.value), caught.value.field) == (message, field)


def test_a_rule_of_the_callers_own_has_no_name() -> None:
    @dataclass(frozen=True)
    class Fixed:
        level: float

        def strikes(self, state: OpenState) -> Any:
            return np.full(len(state.spot), self.level)

    for rule in (Fixed(95.0), Adjusted(rule=Fixed(95.0), ratchet=True)):
        with pytest.raises(OverlayError, match=r"has no name in an overlay file$") as caught:
            strike_to_table(rule)
        assert caught.value.field == "strike"
