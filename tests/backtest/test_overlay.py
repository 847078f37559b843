"""Legs, costs and overlays: what they refuse, what they take for granted, which leg is the anchor (C3, C8, C9).

Rung: behaviour (messages with their field, defaults, values that compare and cannot change) and hand-worked (the
anchor of each set of legs).
"""

from __future__ import annotations

import dataclasses
import math
from typing import Any

import numpy as np
import pytest

from backtest import Costs, Leg, Overlay, OverlayError, PercentOfForward, PercentOfSpot
from backtest.cycles import ListedCycle
from backtest.overlay import ACCOUNTS, NO_COSTS


def leg(**fields: Any) -> Leg:
    """A bought quarterly 95% put, but for what is given."""
    return Leg(**{"position": "long", "right": "put", "strike": PercentOfSpot(95), **fields})


def refusal(make: Any, **fields: Any) -> tuple[str, str | None]:
    with pytest.raises(OverlayError) as caught:
        make(**fields)
    return str(caught.value), caught.value.field


# ---------------------------------------------------------------- legs


def test_defaults_of_a_leg() -> None:
    plain = leg()
    given = (plain.roll, plain.term_months, plain.phase, plain.shift_days, plain.ratio)
    assert given == ("quarter", 3, 0, 0, 1.0)
    assert plain.cycle == ListedCycle(months=3, phase=0, shift_days=0)


@pytest.mark.parametrize(("roll", "months"), [("month", 1), ("quarter", 3), ("half", 6), ("year", 12)])
def test_the_term_is_the_roll_unless_given(roll: str, months: int) -> None:
    assert leg(roll=roll).term == leg(roll=roll).cycle.months == months
    assert leg(roll=roll, term_months=months).term == months
    assert leg(roll=roll, term_months=120).term == 120
    assert leg(roll=roll, term_months=120).cycle.months == months


def test_the_cycle_has_the_phase_and_the_shift() -> None:
    moved = leg(roll="half", phase=5, shift_days=-252)
    assert moved.cycle == ListedCycle(months=6, phase=5, shift_days=-252)
    assert leg(shift_days=np.int64(252), phase=np.int64(2)).cycle == ListedCycle(months=3, phase=2, shift_days=252)


@pytest.mark.parametrize("right", ["put", "call"])
def test_direction(right: str) -> None:
    assert leg(position="long", right=right).direction == 1.0
    assert leg(position="short", right=right).direction == -1.0


LEG_ERRORS = [
    ({"position": "bought"}, "position is 'bought'; it takes one of: long, short", "position"),
    ({"position": None}, "position is None; it takes one of: long, short", "position"),
    ({"right": "puts"}, "right is 'puts'; it takes one of: put, call", "right"),
    ({"roll": "weekly"}, "roll is 'weekly'; it takes one of: month, quarter, half, year, days", "roll"),
    ({"roll": 3}, "roll is 3; it takes one of: month, quarter, half, year, days", "roll"),
    ({"roll": ["month"]}, "roll is ['month']; it takes one of: month, quarter, half, year, days", "roll"),
    ({"strike": 95}, "strike is 95; give a strike rule such as PercentOfSpot(95)", "strike"),
    ({"strike": None}, "strike is None; give a strike rule such as PercentOfSpot(95)", "strike"),
    ({"phase": 3}, "phase is 3; it takes a whole number from 0 to 2 for a cycle of 3 month(s)", "phase"),
    (
        {"roll": "month", "phase": 1},
        "phase is 1; it takes a whole number from 0 to 0 for a cycle of 1 month(s)",
        "phase",
    ),
    (
        {"roll": "year", "phase": -1},
        "phase is -1; it takes a whole number from 0 to 11 for a cycle of 12 month(s)",
        "phase",
    ),
    ({"shift_days": 253}, "shift_days is 253; it takes a whole number from -252 to 252", "shift_days"),
    ({"shift_days": -253}, "shift_days is -253; it takes a whole number from -252 to 252", "shift_days"),
    ({"shift_days": 0.5}, "shift_days is 0.5; it takes a whole number from -252 to 252", "shift_days"),
    ({"term_months": 2}, "term is 2; it takes a whole number from 3 to 120 months, at least its roll", "term"),
    (
        {"roll": "year", "term_months": 11},
        "term is 11; it takes a whole number from 12 to 120 months, at least its roll",
        "term",
    ),
    ({"term_months": 121}, "term is 121; it takes a whole number from 3 to 120 months, at least its roll", "term"),
    ({"term_months": 0}, "term is 0; it takes a whole number from 3 to 120 months, at least its roll", "term"),
    ({"term_months": 6.0}, "term is 6.0; it takes a whole number from 3 to 120 months, at least its roll", "term"),
    ({"ratio": -0.5}, "ratio is -0.5; it takes a number from 0 to 100", "ratio"),
    ({"ratio": 100.5}, "ratio is 100.5; it takes a number from 0 to 100", "ratio"),
    ({"ratio": math.nan}, "ratio is nan; it takes a number from 0 to 100", "ratio"),
    ({"ratio": "1"}, "ratio is '1'; it takes a number from 0 to 100", "ratio"),
]


@pytest.mark.parametrize(("fields", "message", "field"), LEG_ERRORS, ids=[str(fields) for fields, *_ in LEG_ERRORS])
def test_legs_that_are_none(fields: dict[str, Any], message: str, field: str) -> None:
    assert refusal(leg, **fields) == (message, field)


def test_a_strike_rule_without_its_number() -> None:
    _, field = refusal(leg, strike=PercentOfSpot)
    assert field == "strike"


@pytest.mark.parametrize("ratio", [0, 0.0, 1e-9, 2.5, 100, np.float64(0.75)])
def test_ratios_at_and_inside_their_limits(ratio: float) -> None:
    assert leg(ratio=ratio).ratio == ratio


# ---------------------------------------------------------------- costs (C8)


def test_costs_by_default_and_none() -> None:
    # C8: half a point of vol, multiplier 100, nothing else
    expected = {
        "half_spread_vol": 0.5,
        "half_spread_percent": 0.0,
        "half_spread_min": 0.0,
        "commission": 0.0,
        "multiplier": 100.0,
        "settlement_fee": 0.0,
        "stock_bps": 0.0,
        "borrow_spread": 0.0,
    }
    assert dataclasses.asdict(Costs()) == expected
    assert dataclasses.asdict(NO_COSTS) == {**expected, "half_spread_vol": 0.0}


#: the upper limit of each, None where there is none but finiteness
COST_LIMITS: dict[str, float | None] = {
    "half_spread_vol": 100.0,
    "half_spread_percent": 100.0,
    "half_spread_min": None,
    "commission": None,
    "multiplier": None,
    "settlement_fee": None,
    "stock_bps": 1000.0,
    "borrow_spread": 100.0,
}
#: what else the message says
UNITS = {"borrow_spread": " percent a year"}


@pytest.mark.parametrize("name", COST_LIMITS)
@pytest.mark.parametrize("value", [-0.01, math.nan, math.inf, "1", None, True], ids=repr)
def test_costs_that_are_none(name: str, value: Any) -> None:
    most = COST_LIMITS[name]
    limit = "of at least 0" if most is None else f"from 0 to {most:g}"
    limit += UNITS.get(name, "")
    assert refusal(Costs, **{name: value}) == (f"{name} is {value!r}; it takes a number {limit}", name)


@pytest.mark.parametrize("name", COST_LIMITS)
def test_costs_at_their_limits(name: str) -> None:
    most = COST_LIMITS[name]
    if name != "multiplier":
        assert getattr(Costs(**{name: 0}), name) == 0
    assert getattr(Costs(**{name: most or 1e9}), name) == (most or 1e9)
    if most is not None:
        message = f"{name} is {most + 0.5}; it takes a number from 0 to {most:g}{UNITS.get(name, '')}"
        assert refusal(Costs, **{name: most + 0.5}) == (message, name)


def test_a_multiplier_of_zero() -> None:
    message = "multiplier is 0; it takes a number above 0 (100 shares a contract is common)"
    assert refusal(Costs, multiplier=0) == refusal(Costs, multiplier=0.0) == (message, "multiplier")


# ---------------------------------------------------------------- overlays


def test_defaults_of_an_overlay() -> None:
    overlay = Overlay(legs=(leg(),))
    assert (overlay.account, overlay.costs, overlay.name) == ("resize", Costs(), "")


@pytest.mark.parametrize("account", ["resize", "cash"])
def test_accounts(account: str) -> None:
    assert Overlay(legs=(leg(),), account=account).account == account
    assert ACCOUNTS == ("resize", "cash")


@pytest.mark.parametrize(
    ("fields", "message", "field"),
    [
        pytest.param({"legs": ()}, "an overlay needs at least one leg", "leg", id="no leg"),
        pytest.param({"legs": [leg()] * 201}, "an overlay of 201 legs; the limit is 200", "leg", id="201 legs"),
        pytest.param({"legs": (leg(), "put")}, "a leg is 'put'; give backtest.Leg objects", "leg", id="a word"),
        pytest.param(
            {"legs": (leg(),), "account": "margin"},
            "account is 'margin'; it takes one of: resize, cash",
            "account",
            id="another account",
        ),
        pytest.param(
            {"legs": (leg(),), "account": "Resize"},
            "account is 'Resize'; it takes one of: resize, cash",
            "account",
            id="a capital letter",
        ),
        pytest.param(
            {"legs": (leg(),), "costs": 0.5}, "costs is 0.5; give a backtest.Costs object", "costs", id="a number"
        ),
        pytest.param(
            {"legs": (leg(),), "costs": None}, "costs is None; give a backtest.Costs object", "costs", id="no costs"
        ),
    ],
)
def test_overlays_that_are_none(fields: dict[str, Any], message: str, field: str) -> None:
    assert refusal(Overlay, **fields) == (message, field)


@pytest.mark.parametrize("legs", [leg(), None, 5], ids=["a leg alone", "None", "a number"])
def test_legs_that_are_no_list(legs: Any) -> None:
    _, field = refusal(Overlay, legs=legs)
    assert field == "leg"


def test_two_hundred_legs_are_the_most() -> None:
    assert len(Overlay(legs=(leg(),) * 200).legs) == 200


def test_legs_of_any_iterable_become_a_tuple() -> None:
    legs = [leg(), leg(right="call", position="short")]
    overlay = Overlay(legs=legs)  # type: ignore[arg-type]
    legs.clear()
    assert overlay.legs == (leg(), leg(right="call", position="short"))
    assert Overlay(legs=(leg(ratio=r) for r in (1, 2))).legs == (leg(ratio=1), leg(ratio=2))  # type: ignore[arg-type]


# ---------------------------------------------------------------- the anchor (C3)


@pytest.mark.parametrize(
    ("legs", "anchor"),
    [
        pytest.param([{"roll": "month"}], 0, id="the only one"),
        pytest.param([{"roll": "month"}, {"roll": "quarter"}], 1, id="the longer roll"),
        pytest.param([{"roll": "quarter"}, {"roll": "month"}], 0, id="in the other order"),
        pytest.param([{"roll": "quarter"}, {"roll": "year"}, {"roll": "half"}], 1, id="of three"),
        pytest.param([{"roll": "month", "term_months": 24}, {"roll": "quarter"}], 1, id="the roll, not the term"),
        pytest.param([{"roll": "month", "ratio": 50.0}, {"roll": "quarter"}], 1, id="the roll, not the ratio"),
        pytest.param([{"phase": 1}, {"phase": 2}], 0, id="the first among equals"),
        pytest.param([{"roll": "month"}, {"phase": 2}, {"phase": 1}], 1, id="the first of the longest"),
        pytest.param([{"roll": "year", "ratio": 0}, {"roll": "month"}], 1, id="ratio zero takes no part"),
        pytest.param([{"phase": 1, "ratio": 0}, {"phase": 2}], 1, id="nor among equals"),
        pytest.param([{"roll": "year", "ratio": 1e-12}, {"roll": "month"}], 0, id="the smallest ratio does"),
        pytest.param([{"roll": "month", "ratio": 0}, {"roll": "year", "ratio": 0}], 1, id="all of ratio zero"),
    ],
)
def test_anchor(legs: list[dict[str, Any]], anchor: int) -> None:
    overlay = Overlay(legs=tuple(leg(**fields) for fields in legs))
    assert overlay.anchor is overlay.legs[anchor]


# ---------------------------------------------------------------- values


def test_a_term_written_out_is_the_same_leg() -> None:
    assert leg() == leg(roll="quarter", term_months=3, phase=0, shift_days=0, ratio=1)
    assert hash(leg()) == hash(leg(roll="quarter", term_months=3, phase=0, shift_days=0, ratio=1))


@pytest.mark.parametrize(
    "change",
    [
        {"position": "short"},
        {"right": "call"},
        {"strike": PercentOfSpot(94)},
        {"strike": PercentOfForward(95)},
        {"roll": "month"},
        {"term_months": 4},
        {"phase": 1},
        {"shift_days": 1},
        {"ratio": 0.5},
    ],
    ids=str,
)
def test_every_field_tells_legs_apart(change: dict[str, Any]) -> None:
    assert leg(**change) != leg()
    assert len({leg(**change), leg(), leg(**change)}) == 2


def test_overlays_are_values() -> None:
    legs = (leg(), leg(right="call"))
    assert Overlay(legs=legs) == Overlay(legs=list(legs))  # type: ignore[arg-type]
    assert hash(Overlay(legs=legs)) == hash(Overlay(legs=tuple(leg(right=r) for r in ("put", "call"))))
    others = [
        Overlay(legs=legs[::-1]),
        Overlay(legs=legs, account="cash"),
        Overlay(legs=legs, costs=NO_COSTS),
        Overlay(legs=legs, name="band"),
    ]
    assert len({Overlay(legs=legs), *others}) == 5


@pytest.mark.parametrize("value", [leg(), Costs(), Overlay(legs=(leg(),))], ids=["leg", "costs", "overlay"])
def test_values_cannot_change(value: Any) -> None:
    for field in dataclasses.fields(value):
        with pytest.raises(dataclasses.FrozenInstanceError):
            setattr(value, field.name, getattr(value, field.name))
    # a slotted class has no room for a name that is misspelt
    assert not hasattr(value, "__dict__")


def test_what_is_replaced_is_checked_again() -> None:
    yearly = dataclasses.replace(leg(), roll="year", term_months=None)
    assert (yearly.term, yearly.cycle.months) == (12, 12)
    with pytest.raises(OverlayError, match="term is 3; it takes a whole number from 12 to 120 months"):
        dataclasses.replace(leg(), roll="year")
    with pytest.raises(OverlayError, match="ratio is -1"):
        dataclasses.replace(leg(), ratio=-1)
