"""Rung: twin. The engine against the slow twin of plain loops, on the demo market and on the S&P 500.

Every day's wealth within 1e-12 relative; every roll's dates exactly and its amounts to the tolerances
below. One case is replayed once by each and then compared from several sides.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from datetime import date
from itertools import pairwise
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from scipy.integrate import quad

from backtest import INDEX, MILD, Costs, Market, Overlay, PercentOfSpot, Replay, SSVISmile, Volatility, replay

from .slow_prices import Calendar, black, fair_total_variance, history_from_frame, smile_total_variance, third_friday
from .slow_twin import TwinReplay, replay_slowly
from .twin_cases import CASES, Case, call, market_frame

# Wealth grows from 1 through a few hundred rounded steps; 1e-12 is some thousands of units in the last place.
RTOL = 1e-12
# A premium is a difference of two numbers of the size of spot, and a far option is worth a tiny part of it:
# what is claimed of prices is 1e-12 of spot, not of the premium.
ATOL_OF_SPOT = 1e-12
# Cash is what is left of sums of the size of wealth.
ATOL_CASH = 1e-12


@dataclass(frozen=True)
class Pair:
    """One case as replayed by both."""

    case: Case
    engine: Replay
    twin: TwinReplay


def demo_folder(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return tmp_path_factory.getbasetemp() / "twin_demo_market"


@pytest.fixture(scope="module", params=CASES, ids=lambda case: case.name)
def pair(request: pytest.FixtureRequest, tmp_path_factory: pytest.TempPathFactory) -> Pair:
    case: Case = request.param
    frame = market_frame(case.market, demo_folder(tmp_path_factory))
    constants = {"rate": case.rate, "dividend_yield": case.dividend_yield}
    window = {"start": case.start, "end": case.end, "inception": case.inception}
    engine = replay(Market.from_frame(frame, **constants), case.overlay, volatility=case.volatility, **window)
    twin = replay_slowly(history_from_frame(frame, **constants), case.overlay, case.volatility, **window)
    return Pair(case, engine, twin)


# ---------------------------------------------------------------- day by day


def test_days(pair: Pair) -> None:
    assert pair.engine.dates.astype(object).tolist() == pair.twin.days
    assert len(pair.twin.days) > 500


def test_wealth_every_day(pair: Pair) -> None:
    assert pair.engine.wealth[0] == pair.twin.wealth[0] == 1.0
    assert np.min(pair.twin.wealth) > 0.05
    np.testing.assert_allclose(pair.engine.wealth, pair.twin.wealth, rtol=RTOL, atol=0.0)


@pytest.mark.parametrize("name", ["shares", "units"])
def test_holdings_every_day(pair: Pair, name: str) -> None:
    np.testing.assert_allclose(getattr(pair.engine, name), getattr(pair.twin, name), rtol=RTOL, atol=0.0)


@pytest.mark.parametrize("name", ["cash", "option_value", "delta"])
def test_cash_options_and_delta_every_day(pair: Pair, name: str) -> None:
    np.testing.assert_allclose(getattr(pair.engine, name), getattr(pair.twin, name), rtol=RTOL, atol=ATOL_CASH)


def test_daily_frame(pair: Pair) -> None:
    frame = pair.engine.to_frame()
    assert [stamp.date() for stamp in frame.index] == pair.twin.days
    np.testing.assert_allclose(frame["overlay"], pair.twin.wealth, rtol=RTOL, atol=0.0)
    np.testing.assert_allclose(frame["delta"], pair.twin.delta, rtol=RTOL, atol=ATOL_CASH)


# ---------------------------------------------------------------- roll by roll


@dataclass(frozen=True)
class Rolls:
    """Both lists of rolls as frames of the same rows."""

    engine: pd.DataFrame
    twin: pd.DataFrame


@pytest.fixture(scope="module")
def rolls(pair: Pair) -> Rolls:
    twin = pd.DataFrame(pair.twin.rolls)
    for name in ("opened", "expiry", "closed"):
        twin[name] = pd.to_datetime(twin[name])
    return Rolls(pair.engine.rolls_frame(), twin)


def test_roll_legs_and_dates(rolls: Rolls) -> None:
    assert len(rolls.twin) > 5
    for name in ("leg", "right", "position", "ratio"):
        assert rolls.engine[name].tolist() == rolls.twin[name].tolist()
    for name in ("opened", "expiry", "closed"):
        theirs, ours = (frame[name].dt.date.astype(object).tolist() for frame in (rolls.engine, rolls.twin))
        assert [str(day) for day in theirs] == [str(day) for day in ours]
    assert rolls.engine["flag"].str.contains("stub").tolist() == rolls.twin["stub"].tolist()
    assert rolls.engine["flag"].str.contains("open").tolist() == rolls.twin["closed"].isna().tolist()


@pytest.mark.parametrize("name", ["spot_open", "forward", "strike", "vol", "units", "spot_close"])
def test_roll_quantities(rolls: Rolls, name: str) -> None:
    np.testing.assert_allclose(rolls.engine[name], rolls.twin[name], rtol=RTOL, atol=0.0)


@pytest.mark.parametrize("name", ["premium", "cost", "settled", "exit_cost", "open_value", "profit"])
def test_roll_amounts(rolls: Rolls, name: str) -> None:
    floor = ATOL_OF_SPOT * rolls.twin["spot_open"].to_numpy()
    theirs, ours = rolls.engine[name].to_numpy(), rolls.twin[name].to_numpy()
    assert np.isnan(theirs).tolist() == np.isnan(ours).tolist()
    excess = np.abs(theirs - ours) - floor - RTOL * np.abs(ours)
    assert np.nan_to_num(excess, nan=-1.0).max() <= 0.0


def test_roll_delta(rolls: Rolls) -> None:
    np.testing.assert_allclose(rolls.engine["delta"], rolls.twin["delta"], rtol=0.0, atol=RTOL)


# ---------------------------------------------------------------- ruin


@pytest.mark.parametrize("account", ["resize", "cash"])
def test_ruin_on_the_same_day(account: str, tmp_path_factory: pytest.TempPathFactory) -> None:
    """Wealth is NaN from the first day on which nothing is left, whatever the legs do afterwards."""
    overlay = Overlay(
        legs=(call(roll="quarter", ratio=12.0, strike=PercentOfSpot(100)),),
        account=account,
        costs=Costs(half_spread_vol=0.25),
    )
    frame, volatility = market_frame("demo", demo_folder(tmp_path_factory)), Volatility(smile=INDEX)
    window = {"start": date(2003, 1, 1), "end": date(2006, 12, 31)}
    engine = replay(Market.from_frame(frame), overlay, volatility=volatility, **window)
    twin = replay_slowly(history_from_frame(frame), overlay, volatility, **window)
    lost = np.isnan(twin.wealth)
    assert 0 < lost.sum() < len(lost)
    # near ruin wealth is a small difference of large positions, hence the floor
    np.testing.assert_allclose(engine.wealth, twin.wealth, rtol=RTOL, atol=RTOL, equal_nan=True)


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
