"""Legs and overlays of the whole language that are refused, and those at their limits.

Rung: behaviour (every message with its field). What they become is in ``test_overlay_language.py``; plain legs, costs
and overlays are in ``test_overlay.py``.
"""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np
import pytest

from backtest import (
    Adjusted,
    Costs,
    Delta,
    Deviations,
    Early,
    Financed,
    Gate,
    Leg,
    Overlay,
    OverlayError,
    PercentOfSpot,
    SignalOn,
)

GATE = Gate(condition=SignalOn())


def put(**fields: Any) -> Leg:
    return Leg(**{"position": "long", "right": "put", "strike": PercentOfSpot(95), **fields})


def call(**fields: Any) -> Leg:
    return Leg(**{"position": "short", "right": "call", "roll": "month", "strike": PercentOfSpot(105), **fields})


def refusal(make: Any, *arguments: Any, **fields: Any) -> tuple[str, str | None]:
    with pytest.raises(OverlayError) as caught:
        make(*arguments, **fields)
    return str(caught.value), caught.value.field


# ---------------------------------------------------------------- legs that are refused

TRUTH = "it takes true or false"
LEG_ERRORS: list[tuple[dict[str, Any], str, str]] = [
    ({"roll": "weekly"}, "roll is 'weekly'; it takes one of: month, quarter, half, year, days", "roll"),
    ({"roll": "days"}, 'roll is "days"; say how many with every, such as every = 21', "every"),
    ({"every": 21}, 'every belongs to roll = "days"; leave it out beside "quarter"', "every"),
    ({"term_days": 21}, 'term_days belongs to roll = "days"; leave it out beside "quarter"', "term_days"),
    (
        {"roll": "days", "every": 21, "term_months": 3},
        'term is in months; beside roll = "days" give term_days',
        "term",
    ),
    (
        {"roll": "days", "every": 21, "roll_day": "last trading day"},
        'roll_day is a day of the month; leave it out beside roll = "days"',
        "roll_day",
    ),
    ({"roll_day": "friday"}, "roll_day is 'friday'; it takes one of: third friday, last trading day", "roll_day"),
    (
        {"roll": "days", "every": 21, "term_days": 20},
        "term_days is 20; it takes a whole number from 21 to 2520 trading days, at least its roll",
        "term_days",
    ),
    ({"term_months": 2}, "term is 2; it takes a whole number from 3 to 120 months, at least its roll", "term"),
    (
        {"roll": "days", "every": 5, "phase": 5},
        "phase is 5; it takes a whole number from 0 to 4 for a cycle of 5 days",
        "phase",
    ),
    ({"settlement": "noon"}, "settlement is 'noon'; it takes one of: close, open", "settlement"),
    ({"close_before": 46}, "close_before is 46; it takes a whole number from 0 to 45 trading days", "close_before"),
    (
        {"roll": "year", "close_before": 61},
        "close_before is 61; it takes a whole number from 0 to 60 trading days",
        "close_before",
    ),
    (
        {"roll": "days", "every": 5, "close_before": 5},
        "close_before is 5; it takes a whole number from 0 to 4 trading days",
        "close_before",
    ),
    ({"ladder": 0}, "ladder is 0; it takes a whole number from 1 to 60 tranches", "ladder"),
    ({"ladder": 61}, "ladder is 61; it takes a whole number from 1 to 60 tranches", "ladder"),
    ({"ladder": 2.0}, "ladder is 2.0; it takes a whole number from 1 to 60 tranches", "ladder"),
    (
        {"roll": "year", "ladder": 5, "shift_days": 51},
        "shift_days is 51, and the last of 5 staggered tranches comes 202 trading days later; together at most 252",
        "shift_days",
    ),
    ({"stagger": 1}, f"stagger is 1; {TRUTH}", "stagger"),
    ({"reference": "yes"}, f"reference is 'yes'; {TRUTH}", "reference"),
    ({"early": 0.1}, "early is 0.1; give a backtest.Early", "early"),
    ({"gate": "signal"}, "gate is 'signal'; give a backtest.Gate", "gate"),
    (
        {"early": Early(value_above=2), "strike": Adjusted(rule=Delta(0.3), ratchet=True)},
        "early rules replace an option by the rule alone; leave out ratchet and kept_until_moved beside them",
        "early",
    ),
    (
        {"early": Early(value_above=2), "strike": Adjusted(rule=Delta(0.3), kept_until_moved=5)},
        "early rules replace an option by the rule alone; leave out ratchet and kept_until_moved beside them",
        "early",
    ),
    ({"strike": Financed(1.0)}, "only a sold leg can finance another; this one is bought", "strike"),
    (
        {"strike": Adjusted(rule=Financed(1.0, (2,)), not_above=120)},
        "only a sold leg can finance another; this one is bought",
        "strike",
    ),
    (
        {"strike": Financed(1.0), "position": "short", "ratio": 0},
        "a financed leg of ratio 0 can pay for nothing; give it a ratio",
        "ratio",
    ),
    ({"ratio": -1}, "ratio is -1; it takes a number from 0 to 100", "ratio"),
]


@pytest.mark.parametrize(
    ("fields", "message", "field"), LEG_ERRORS, ids=[str(fields)[:60] for fields, *_ in LEG_ERRORS]
)
def test_legs_that_are_none(fields: dict[str, Any], message: str, field: str) -> None:
    assert refusal(put, **fields) == (message, field)


def test_legs_at_their_limits() -> None:
    assert put(roll="days", every=21).term == put(roll="days", every=21).term_days == 21
    assert put(roll="days", every=21, term_days=2520).length_months == 120.0
    assert put(close_before=45).rolling.close_before == 45
    assert put(roll="year", ladder=5, shift_days=50).ladder == 5
    assert put(roll="days", every=5, close_before=4, shift_days=-252).shift_days == -252
    assert put(roll="year", ladder=12, shift_days=252).ladder == 12
    assert put(early=Early(value_above=2), strike=Adjusted(rule=Delta(0.3), not_below=80)).early is not None
    assert (put(ratio=0.5).held_ratio, put(ratio=0.5, reference=True).held_ratio) == (0.5, 0.0)


# ---------------------------------------------------------------- overlays that are refused


@pytest.mark.parametrize(
    ("fields", "message", "field"),
    [
        ({"legs": ()}, "an overlay needs at least one leg", "leg"),
        ({"legs": (put(),) * 10_000}, "an overlay of 10000 legs; the limit is 200", "leg"),
        ({"legs": (put(ladder=60),) * 4}, "an overlay of 240 legs; the limit is 200", "leg"),
        ({"decide_lag": 2}, "decide_lag is 2; it takes 0 or 1 (trading day)", "decide_lag"),
        ({"decide_lag": True}, "decide_lag is True; it takes 0 or 1 (trading day)", "decide_lag"),
        ({"decide_lag": 1.0}, "decide_lag is 1.0; it takes 0 or 1 (trading day)", "decide_lag"),
        ({"decide_lag": None}, "decide_lag is None; it takes 0 or 1 (trading day)", "decide_lag"),
        ({"portfolio": 0}, "portfolio is 0; it takes a number of at least 1 (money)", "portfolio"),
        ({"portfolio": "1e6"}, "portfolio is '1e6'; it takes a number of at least 1 (money)", "portfolio"),
        ({"gate": SignalOn()}, "gate is SignalOn(); give a backtest.Gate", "gate"),
        ({"crossed": 1}, f"crossed is 1; {TRUTH}", "crossed"),
    ],
    ids=lambda value: str(value)[:40],
)
def test_overlays_that_are_none(fields: dict[str, Any], message: str, field: str) -> None:
    assert refusal(Overlay, **{"legs": (put(),), **fields}) == (message, field)


def test_what_an_overlay_takes() -> None:
    assert Overlay(legs=(put(),), decide_lag=np.int64(1)).decide_lag == 1  # type: ignore[arg-type]
    assert Overlay(legs=(put(ladder=40),) * 5).portfolio is None
    plain = Overlay(legs=(put(),))
    changes: list[dict[str, Any]] = [{"decide_lag": 1}, {"portfolio": 1e6}, {"gate": GATE}, {"crossed": True}]
    assert len({plain, *(replace(plain, **change) for change in changes)}) == 5


def test_a_spread_on_borrowed_cash() -> None:
    assert Costs().borrow_spread == 0.0
    message = "borrow_spread is 101; it takes a number from 0 to 100 percent a year"
    assert refusal(Costs, borrow_spread=101) == (message, "borrow_spread")


def test_deviations_and_deltas_of_both_sides_are_no_crossing() -> None:
    legs = (put(strike=Deviations(1)), call(strike=Deviations(1)))
    assert Overlay(legs=legs).carried == legs
