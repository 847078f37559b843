"""Rung: twin. The engine against the slow twin of plain loops, on the demo market and on the S&P 500.

Every day's wealth within 1e-12 relative; every roll's dates exactly and its amounts to the tolerances
below. One case is replayed once by each and then compared from several sides.
"""

from __future__ import annotations

import math
from datetime import date
from itertools import pairwise
from pathlib import Path

import numpy as np
import pytest
from scipy.integrate import quad

from backtest import INDEX, MILD, Costs, Overlay, PercentOfSpot, SSVISmile, Volatility

from . import twin_comparisons as twins
from .slow_calendar import Calendar, third_friday
from .slow_prices import black, fair_total_variance, smile_total_variance
from .twin_cases import CASES, Case, call, market_frame
from .twin_comparisons import Pair, demo_folder


@pytest.fixture(scope="module", params=CASES, ids=lambda case: case.name)
def pair(request: pytest.FixtureRequest, tmp_path_factory: pytest.TempPathFactory) -> Pair:
    return twins.replay_both(request.param, market_frame(request.param.market, demo_folder(tmp_path_factory)))


# ---------------------------------------------------------------- day by day


def test_days(pair: Pair) -> None:
    twins.check_days(pair)


def test_wealth_every_day(pair: Pair) -> None:
    twins.check_wealth(pair)


@pytest.mark.parametrize("name", twins.HOLDINGS + twins.SMALL_DIFFERENCES)
def test_holdings_cash_options_and_delta_every_day(pair: Pair, name: str) -> None:
    twins.check_daily(pair, name)


def test_daily_frame(pair: Pair) -> None:
    twins.check_daily_frame(pair)


# ---------------------------------------------------------------- roll by roll


def test_roll_legs_and_dates(pair: Pair) -> None:
    twins.check_legs_and_dates(pair)


def test_roll_flags(pair: Pair) -> None:
    twins.check_flags(pair)


@pytest.mark.parametrize("name", twins.ROLL_QUANTITIES)
def test_roll_quantities(pair: Pair, name: str) -> None:
    twins.check_roll_quantity(pair, name)


@pytest.mark.parametrize("name", twins.ROLL_AMOUNTS)
def test_roll_amounts(pair: Pair, name: str) -> None:
    twins.check_roll_amount(pair, name)


def test_roll_delta(pair: Pair) -> None:
    twins.check_roll_delta(pair)


# ---------------------------------------------------------------- ruin


@pytest.mark.parametrize("account", ["resize", "cash"])
def test_ruin_on_the_same_day(account: str, tmp_path_factory: pytest.TempPathFactory) -> None:
    """Wealth is NaN from the first day on which nothing is left, whatever the legs do afterwards."""
    overlay = Overlay(
        legs=(call(roll="quarter", ratio=12.0, strike=PercentOfSpot(100)),),
        account=account,
        costs=Costs(half_spread_vol=0.25),
    )
    case = Case(
        name="ruin",
        market="demo",
        overlay=overlay,
        volatility=Volatility(smile=INDEX),
        start=date(2003, 1, 1),
        end=date(2006, 12, 31),
    )
    pair = twins.replay_both(case, market_frame("demo", demo_folder(tmp_path_factory)))
    lost = np.isnan(pair.twin.wealth)
    assert 0 < lost.sum() < len(lost)
    # near ruin wealth is a small difference of large positions, hence the floor
    np.testing.assert_allclose(pair.engine.wealth, pair.twin.wealth, rtol=twins.RTOL, atol=twins.RTOL, equal_nan=True)


# ---------------------------------------------------------------- what the markets are chosen for


def test_demo_market_closes_on_third_fridays(tmp_path_factory: pytest.TempPathFactory) -> None:
    days = [stamp.date() for stamp in market_frame("demo", demo_folder(tmp_path_factory)).index]
    months = range(12 * days[0].year, 12 * days[-1].year + 12)
    closed = [friday for friday in map(third_friday, months) if friday not in days]
    assert len(closed) >= 2
    for friday in closed:
        expiry = Calendar(days).expiry(12 * friday.year + friday.month - 1)
        assert expiry in days
        assert days[days.index(expiry) + 1] > friday > expiry


def test_sp500_days_of_september_2001_and_march_2008() -> None:
    days = [stamp.date() for stamp in market_frame("sp500", Path()).index]
    assert not {date(2001, 9, d) for d in (11, 12, 13, 14)} & set(days)
    calendar = Calendar(days)
    assert calendar.expiry(12 * 2001 + 8) == date(2001, 9, 21)
    assert third_friday(12 * 2008 + 2) == date(2008, 3, 21)
    assert calendar.expiry(12 * 2008 + 2) == date(2008, 3, 20)
    assert Calendar(days[: days.index(date(2008, 3, 20)) + 1]).expiry(12 * 2008 + 2) == date(2008, 3, 21)


# ---------------------------------------------------------------- the twin's own quadrature


@pytest.mark.parametrize("smile", [MILD, INDEX, SSVISmile(rho=0.3, eta=0.8, gamma=0.3)], ids=lambda smile: smile.name)
@pytest.mark.parametrize("theta", [1e-4, 3e-3, 0.1])
def test_fair_variance_of_the_twin_against_adaptive_quadrature(smile: SSVISmile, theta: float) -> None:
    def price_over_strike(x: float) -> float:
        right = "put" if x < 0.0 else "call"
        return black(right, 1.0, math.exp(x), math.sqrt(smile_total_variance(smile, theta, x))) * math.exp(-x)

    edges = [-150.0, -40.0, -10.0, -2.0, 0.0, 2.0, 10.0, 40.0]  # at-the-money deviations
    pieces = [quad(price_over_strike, a * theta**0.5, b * theta**0.5, epsrel=1e-12)[0] for a, b in pairwise(edges)]
    np.testing.assert_allclose(fair_total_variance(smile, theta), 2.0 * math.fsum(pieces), rtol=1e-12)
