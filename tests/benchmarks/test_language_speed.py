"""Rung: measurement. What solved, financed, early and remembered strikes cost beside percents of spot.

Ratios are taken in one run, both sides in turns, as in ``test_speed.py``:
``python -m pytest tests/benchmarks/test_language_speed.py -s`` prints them.
"""

from __future__ import annotations

import time
from collections.abc import Callable
from typing import Any

import numpy as np
import pandas as pd
import pytest

from backtest import (
    Adjusted,
    Delta,
    Early,
    Financed,
    Leg,
    Market,
    Overlay,
    PercentOfSpot,
    Volatility,
    replay_many,
)

DAYS = 5_000
VOLATILITY = Volatility(quote="variance swap")
ASKED = 4.0


def put(strike: Any, **fields: Any) -> Leg:
    return Leg(position="long", right="put", roll="quarter", strike=strike, **fields)


def call(strike: Any, **fields: Any) -> Leg:
    return Leg(position="short", right="call", roll="month", strike=strike, **fields)


def grid(puts: list[Leg], calls: list[Leg]) -> list[Overlay]:
    """400 overlays: 20 puts by 20 calls."""
    assert len(puts) == len(calls) == 20
    return [Overlay(legs=(one, other), crossed=True) for one in puts for other in calls]


def spread(first: float, last: float) -> list[float]:
    return [float(value) for value in np.linspace(first, last, 20)]


PERCENTS = grid([put(PercentOfSpot(p)) for p in spread(80, 99)], [call(PercentOfSpot(c)) for c in spread(101, 120)])
#: As many different calls as financed shares of 20 puts make: 420 legs to price and book in place of 40.
AS_MANY_CALLS = [
    Overlay(
        legs=(
            put(PercentOfSpot(p)),
            call(PercentOfSpot(101 + number / 20 + step)),
        ),
        crossed=True,
    )
    for number, p in enumerate(spread(80, 99))
    for step in range(20)
]
GRIDS = {
    "20 delta puts by 20 delta calls": grid(
        [put(Delta(d)) for d in spread(0.05, 0.45)], [call(Delta(d)) for d in spread(0.05, 0.45)]
    ),
    "20 percent puts by 20 financed shares": grid(
        [put(PercentOfSpot(p)) for p in spread(80, 99)], [call(Financed(s)) for s in spread(0.2, 1.5)]
    ),
    "early rules in puts and calls": grid(
        [put(PercentOfSpot(p), early=Early(delta_below=0.05, value_above=3)) for p in spread(80, 99)],
        [call(PercentOfSpot(c), early=Early(value_below=0.2)) for c in spread(101, 120)],
    ),
    "ratchets in puts and calls": grid(
        [put(Adjusted(rule=PercentOfSpot(p), ratchet=True)) for p in spread(80, 99)],
        [call(Adjusted(rule=PercentOfSpot(c), ratchet=True)) for c in spread(101, 120)],
    ),
}


@pytest.fixture(scope="module")
def market() -> Market:
    rng = np.random.default_rng(7)
    days = pd.bdate_range("2000-01-03", periods=DAYS, name="date")
    close = 100 * np.exp(np.cumsum(rng.normal(0.0002, 0.01, DAYS)))
    vol = 0.2 * np.exp(0.3 * np.sin(np.arange(DAYS) / 100))
    return Market.from_frame(pd.DataFrame({"close": close, "vol": vol}, index=days), rate=0.03, dividend_yield=0.02)


def in_turns(*functions: Callable[[], object], rounds: int = 7) -> list[float]:
    """Least seconds of each function, taken in turns."""
    best = [float("inf")] * len(functions)
    for _ in range(rounds):
        for number, function in enumerate(functions):
            began = time.perf_counter()
            function()
            best[number] = min(best[number], time.perf_counter() - began)
    return best


@pytest.mark.parametrize("name", GRIDS)
def test_400_overlays_beside_percents_of_spot(market: Market, name: str) -> None:
    """The same number of overlays, and of legs as written; financed calls are 400 different ones, one for each put."""
    overlays = GRIDS[name]
    plain, alike, other = in_turns(
        lambda: replay_many(market, PERCENTS, volatility=VOLATILITY),
        lambda: replay_many(market, AS_MANY_CALLS, volatility=VOLATILITY),
        lambda: replay_many(market, overlays, volatility=VOLATILITY),
    )
    print(
        f"\n{name}: {other * 1e3:.0f} ms; percents {plain * 1e3:.0f} ms: {other / plain:.2f} times; "
        f"20 puts by 400 different percent calls {alike * 1e3:.0f} ms: {other / alike:.2f} times"
    )
    if "delta" in name:
        assert other / plain <= ASKED
    if "financed" in name:
        assert other / alike <= ASKED
