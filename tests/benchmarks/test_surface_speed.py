"""Rung: measurement. Marks off a quoted surface against marks off a flat smile, as a ratio taken in one run.

Not part of the default run: ``python -m pytest tests/benchmarks/test_surface_speed.py -s`` prints it.
"""

from __future__ import annotations

import time
from collections.abc import Callable

import numpy as np
import pandas as pd
import pytest

from backtest import Leg, Market, Overlay, PercentOfSpot, Volatility
from backtest.engine.legs import price_groups
from backtest.engine.plan import Plan, make_plans
from backtest.volatility import FLAT, ImpliedSurface, SurfaceQuotes

DAYS, LEGS = 5_000, 200
TENORS = np.array([7.0, 30.0, 60.0, 91.0, 182.0, 273.0, 365.0, 730.0])


def best_of_turns(*functions: Callable[[], object], rounds: int = 5) -> list[float]:
    best = [float("inf")] * len(functions)
    for _ in range(rounds):
        for number, function in enumerate(functions):
            began = time.perf_counter()
            function()
            best[number] = min(best[number], time.perf_counter() - began)
    return best


@pytest.mark.parametrize(("strikes", "most"), [(9, 3.0), (17, 3.0), (40, 4.0), (120, 8.0)])
def test_marks_off_a_surface(strikes: int, most: float) -> None:
    """5,000 days by 200 strikes; eight tenors of so many strikes quoted every day."""
    rng = np.random.default_rng(7)
    index = pd.bdate_range("2000-01-03", periods=DAYS, name="date")
    vol = 0.2 * np.exp(0.3 * np.sin(np.arange(DAYS) / 100))
    close = 100 * np.exp(np.cumsum(rng.normal(0.0002, 0.01, DAYS)))
    day = np.repeat(np.arange(DAYS), len(TENORS) * strikes)
    value = np.tile(np.linspace(50.0, 150.0, strikes), DAYS * len(TENORS))
    surface = SurfaceQuotes(
        dates=index.to_numpy().astype("datetime64[D]"),
        kind="percent of spot",
        day=day,
        tenor_days=np.tile(np.repeat(TENORS, strikes), DAYS),
        value=value,
        vol=vol[day] * (1.0 - 0.3 * np.log(value / 100.0)),
    )
    frame = pd.DataFrame({"close": close, "vol": vol}, index=index)
    market = Market.from_frame(frame, rate=0.03, dividend_yield=0.02, surface=surface)
    puts = [
        Overlay(legs=(Leg(position="long", right="put", roll="quarter", strike=PercentOfSpot(p)),))
        for p in np.linspace(70.0, 105.0, LEGS).tolist()
    ]

    def plan(volatility: Volatility) -> Plan:
        (made,) = make_plans(market, puts, [volatility] * LEGS, start=None, end=None, inception=None)
        return made

    off_surface, off_flat = plan(Volatility(source=ImpliedSurface())), plan(Volatility(smile=FLAT))
    quoted, flat = best_of_turns(lambda: price_groups(off_surface), lambda: price_groups(off_flat))
    print(f"\n{strikes} strikes: {quoted * 1e3:.0f} ms, flat smile {flat * 1e3:.0f} ms: {quoted / flat:.2f} times")
    assert quoted / flat <= most
