"""Rung: measurement. Speed as ratios taken in one run, alternating, so that a noisy machine slows both sides.

Not part of the default run: ``python -m pytest tests/benchmarks -s`` prints the ratios.
"""

from __future__ import annotations

import time
from collections.abc import Callable

import numpy as np
import pandas as pd
import pytest
from scipy.special import ndtr

from backtest import Leg, Market, Overlay, PercentOfSpot, Volatility, replay, replay_many
from backtest.analytics import greeks_of
from backtest.engine.legs import price_groups
from backtest.engine.plan import make_plans
from tests.reference.slow_prices import history_from_frame
from tests.reference.slow_twin import replay_slowly

DAYS = 5_000
VOLATILITY = Volatility(quote="variance swap")


def best_times(*functions: Callable[[], object], rounds: int = 7, calls: int = 1) -> list[float]:
    """Least seconds a call of each function, taken in turns."""
    best = [float("inf")] * len(functions)
    for _ in range(rounds):
        for number, function in enumerate(functions):
            began = time.perf_counter()
            for _ in range(calls):
                function()
            best[number] = min(best[number], (time.perf_counter() - began) / calls)
    return best


def leg(right: str, percent: float, roll: str) -> Leg:
    position = "long" if right == "put" else "short"
    return Leg(position=position, right=right, roll=roll, strike=PercentOfSpot(percent))


BAND = Overlay(legs=(leg("put", 95, "quarter"), leg("call", 110, "month")))


@pytest.fixture(scope="module")
def frame() -> pd.DataFrame:
    rng = np.random.default_rng(7)
    days = pd.bdate_range("2000-01-03", periods=DAYS, name="date")
    close = 100 * np.exp(np.cumsum(rng.normal(0.0002, 0.01, DAYS)))
    vol = 0.2 * np.exp(0.3 * np.sin(np.arange(DAYS) / 100))
    return pd.DataFrame({"close": close, "vol": vol}, index=days)


@pytest.fixture(scope="module")
def market(frame: pd.DataFrame) -> Market:
    return Market.from_frame(frame, rate=0.03, dividend_yield=0.02)


def test_one_replay_against_the_slow_twin(frame: pd.DataFrame, market: Market) -> None:
    history = history_from_frame(frame, rate=0.03, dividend_yield=0.02)
    began = time.perf_counter()
    slow = replay_slowly(history, BAND, VOLATILITY)
    twin = time.perf_counter() - began
    (fast,) = best_times(lambda: replay(market, BAND, volatility=VOLATILITY), rounds=10, calls=5)
    assert len(slow.wealth) == len(replay(market, BAND, volatility=VOLATILITY))
    print(f"\nslow twin {twin * 1e3:.0f} ms, engine {fast * 1e3:.2f} ms: {twin / fast:.0f} times faster")
    assert twin / fast >= 20


def test_marks_against_bare_black(market: Market) -> None:
    """The engine's marks, from planned rolls to mid and delta of each leg and day, against bare numpy pricing.

    The bare side is handed strike, expiry and vol of each value and prices it by Black's formula; the engine
    works out strikes, forwards, the smile's vols, deltas, premiums and settlements besides.
    """
    (plan,) = make_plans(market, [BAND], [VOLATILITY], start=None, end=None, inception=None)
    result = replay(market, BAND, volatility=VOLATILITY)
    inputs = []
    for one in result.legs:
        roll = np.searchsorted(one.opened, np.arange(len(result)), side="right") - 1
        tau = (one.schedule.expiry_day[roll] - market.day_number[result.window]) / 365.0
        sign = 1.0 if one.leg.right == "call" else -1.0
        inputs.append((result.spot, one.daily_strike, tau, one.vol[roll], sign))
    rate, carry = market.rate[result.window], market.dividend_yield[result.window]

    def bare() -> None:
        for spot, strike, tau, sigma, sign in inputs:
            forward = spot * np.exp((rate - carry) * tau)
            stdev = sigma * np.sqrt(tau)
            d1 = np.log(forward / strike) / stdev + 0.5 * stdev
            np.exp(-rate * tau) * sign * (forward * ndtr(sign * d1) - strike * ndtr(sign * (d1 - stdev)))

    marks, black = best_times(lambda: price_groups(plan), bare, rounds=15, calls=10)
    print(f"\nmarks {marks * 1e6:.0f} us, bare Black {black * 1e6:.0f} us: {marks / black:.2f} times")
    assert marks / black <= 2.5


def test_greeks_against_marks(market: Market) -> None:
    """Gamma, vega, theta and rho of 20 years against the marks and deltas they belong to."""
    (plan,) = make_plans(market, [BAND], [VOLATILITY], start=None, end=None, inception=None)
    result = replay(market, BAND, volatility=VOLATILITY)
    assert len(result.legs) == 2  # made now, as they would be by whatever else is asked of a replay
    greeks, marks = best_times(lambda: greeks_of(result), lambda: price_groups(plan), rounds=15, calls=10)
    print(f"\ngreeks {greeks * 1e6:.0f} us, marks {marks * 1e6:.0f} us: {greeks / marks:.2f} times")
    assert greeks / marks <= 3.0


def test_a_grid_against_single_replays(market: Market) -> None:
    puts = [leg("put", p, "quarter") for p in np.linspace(80, 99, 20).tolist()]
    calls = [leg("call", c, "month") for c in np.linspace(101, 120, 20).tolist()]
    grid = [Overlay(legs=(put, call)) for put in puts for call in calls]
    together, apart = best_times(
        lambda: replay_many(market, grid, volatility=VOLATILITY),
        lambda: [replay(market, overlay, volatility=VOLATILITY) for overlay in grid],
        rounds=3,
    )
    print(
        f"\n400 overlays: together {together * 1e3:.0f} ms, singly {apart * 1e3:.0f} ms: {apart / together:.0f} times"
    )
    assert apart / together >= 10
