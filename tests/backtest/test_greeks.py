"""Gamma, vega, theta and rho of the package: their units, and the days on which there is nothing to measure.

Rung: hand-worked (two days of a put and a sold call), identity (thetas add up to what an option loses while nothing
moves) and behaviour. Bumped prices and QuantLib: ``tests/reference/test_greeks_*.py``.
"""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest

from backtest import (
    FLAT,
    NO_COSTS,
    Costs,
    Gate,
    Leg,
    Market,
    Overlay,
    PercentOfSpot,
    Replay,
    SignalOn,
    Volatility,
    replay,
    replay_many,
)
from backtest.analytics import Greeks, greeks_of

NAMES = ["gamma", "vega", "theta", "rho"]
PUT = Leg(position="long", right="put", roll="month", strike=PercentOfSpot(95))
CALL = Leg(position="short", right="call", roll="month", strike=PercentOfSpot(110), ratio=0.5)

# ---------------------------------------------------------------- two days by hand


def two_days(*legs: Leg, close: tuple[float, ...] = (100.0, 98.0, 99.0), points: float = 0.0) -> Replay:
    """``points`` are added to the vol."""
    days = pd.to_datetime(["2021-01-15", "2021-01-18", "2021-01-19"])
    market = Market.from_frame(pd.DataFrame({"close": close, "vol": 0.20}, index=days), rate=0.05)
    volatility = Volatility(smile=FLAT, put_shift=points, call_shift=points)
    return replay(market, Overlay(legs=legs, account="cash", costs=NO_COSTS), volatility=volatility)


#: The 95 put of 19 February 2021 on 15 January (35 days, 100) and 18 January (32 days, 98): vol 20, rate 5%. Value,
#: delta, gamma, vega (of 1.00), theta (of a year) and rho (of 1.00) by QuantLib's BlackCalculator.
BY_CALCULATOR = [
    (
        0.600497834571023,
        -0.174965468605314,
        0.041616858311057,
        7.981315292531429,
        -7.440413880555782,
        -1.735333052955025,
    ),
    (
        0.965808360856071,
        -0.265377174238676,
        0.056480439130244,
        9.511244053161478,
        -9.53275680165828,
        -2.364736125917484,
    ),
]


def test_two_days_of_a_put_by_hand() -> None:
    found = two_days(PUT).to_frame()
    (p0, d0, g0, v0, t0, r0), (p1, d1, g1, v1, t1, r1) = BY_CALCULATOR
    # a hundredth of a share and of a put for each 1 of wealth; three days of interest on the premium that was paid
    wealth = 0.98 + 0.01 * p1 - 0.01 * p0 * 1.05 ** (3 / 365)
    assert found["overlay"].iloc[1] == pytest.approx(wealth, rel=1e-13)
    by_hand = {
        "delta": [1.0 + d0, 0.98 * (1.0 + d1) / wealth],
        # 1% of 100 is a price of 1, and 0.01 puts at 100 are a dollar delta of 1: so the option's own gamma
        "gamma": [g0, 0.01 * g1 * 0.98 * 98.0 / wealth],
        "vega": [0.01 * v0 / 100, 0.01 * v1 / 100 / wealth],
        "theta": [0.01 * t0 / 365, 0.01 * t1 / 365 / wealth],
        "rho": [0.01 * r0 / 100, 0.01 * r1 / 100 / wealth],
    }
    # the first day in plain numbers, to be compared with what comes out without any library
    assert by_hand["vega"][0] == pytest.approx(0.00079813, rel=1e-5)
    assert by_hand["theta"][0] == pytest.approx(-0.00020385, rel=1e-4)
    assert by_hand["rho"][0] == pytest.approx(-0.00017353, rel=1e-4)
    for name, values in by_hand.items():
        np.testing.assert_allclose(found[name].iloc[:2], values, rtol=1e-12, err_msg=name)


def test_money_of_small_moves() -> None:
    """A hundredth of a vol point more, and 0.1% of spot more, by replays of their own."""
    found = two_days(PUT, CALL)
    greeks = {name: values[1] for name, values in found.greeks.package().items()}
    wealth, delta = found.wealth[1], found.delta[1]
    dearer = two_days(PUT, CALL, points=0.01).option_value[1] - found.option_value[1]
    assert dearer / wealth == pytest.approx(0.01 * greeks["vega"], rel=1e-3)
    higher = two_days(PUT, CALL, close=(100.0, 98.0 * 1.001, 99.0)).wealth[1] - found.wealth[1]
    assert higher / wealth == pytest.approx(0.1 / 100 * (delta + greeks["gamma"] * 0.1 / 2), rel=3e-5)
    # delta alone is a hundred times further off
    assert abs(higher / wealth / (0.1 / 100 * delta) - 1) > 3e-3


# ---------------------------------------------------------------- time alone


@pytest.mark.parametrize("percent", [90, 100, 107])
@pytest.mark.parametrize("right", ["put", "call"])
def test_thetas_add_up_to_what_time_takes(right: str, percent: float) -> None:
    """While nothing else moves, the value lost over some days is the integral of theta: Boole's rule over four days."""
    days = pd.date_range("2020-01-01", "2021-03-19")  # weekends among them
    frame = pd.DataFrame({"close": 100.0, "vol": 0.20, "dividend": 0.0}, index=days)
    market = Market.from_frame(frame, rate=0.04, dividend_yield=0.02)
    leg = Leg(position="long", right=right, roll="year", strike=PercentOfSpot(percent))
    overlay = Overlay(legs=(leg,), account="cash", costs=NO_COSTS)
    found = replay(market, overlay, volatility=Volatility(smile=FLAT), inception="2020-03-20")
    (theta,), (mark,) = found.greeks.theta * found.wealth / found.leg_count, [found.legs[0].daily_mark]
    four_days = (7 * theta[:-4] + 32 * theta[1:-3] + 12 * theta[2:-2] + 32 * theta[3:-1] + 7 * theta[4:]) / 22.5
    # the last weeks at the money are too bent for it
    until = int(found.legs[0].closed[0]) - 60
    np.testing.assert_allclose((mark[4:] - mark[:-4])[:until], four_days[:until], rtol=0, atol=1e-9)
    assert np.abs(four_days[:until]).min() > 1e-3


# ---------------------------------------------------------------- nothing to measure


def months(*legs: Leg, signal: float | pd.Series = 1.0, fall: float = 0.0, **fields) -> Replay:
    days = pd.bdate_range("2020-01-01", "2020-12-31", name="date")
    close = 100 * np.exp(0.05 * np.sin(np.arange(len(days)) / 9) - fall * (np.arange(len(days)) > 150))
    frame = pd.DataFrame({"close": close, "vol": 0.20, "signal": signal}, index=days)
    return replay(Market.from_frame(frame, rate=0.02), Overlay(legs=legs, **fields))


@pytest.mark.parametrize("account", ["resize", "cash"])
def test_days_without_an_option_have_none(account: str) -> None:
    days = pd.bdate_range("2020-01-01", "2020-12-31")
    signal = pd.Series(np.where((days >= "2020-05-04") & (days < "2020-09-07"), 0.0, 1.0), days)
    gate = Gate(condition=SignalOn(), when_off="close", when_on="at once")
    gated = Leg(position="long", right="put", roll="month", strike=PercentOfSpot(97), gate=gate)
    found = months(gated, CALL, signal=signal, account=account)
    flat, of_put = found.legs[0].flat, found.greeks
    assert found.dates[flat].min() == np.datetime64("2020-05-04")
    assert found.dates[flat].max() == np.datetime64("2020-09-04")
    for name in NAMES:
        put, call = getattr(of_put, name)
        assert not put[flat].any()
        assert put[~flat].all()
        # in the package there is the call alone then
        assert call.all()
        np.testing.assert_array_equal(found.to_frame()[name][flat], call[flat])


def test_what_is_not_held_has_none() -> None:
    idle = Leg(position="long", right="put", strike=PercentOfSpot(95), ratio=0.0)
    lender = Leg(position="short", right="call", strike=PercentOfSpot(108), reference=True)
    found = months(idle, lender)
    np.testing.assert_allclose(found.delta, 1.0, rtol=1e-14)  # the share
    for values in found.greeks.package().values():
        assert not values.any()
        assert not np.signbit(values).any()


def test_bought_and_sold_alike_have_none_together() -> None:
    sold = Leg(position="short", right="put", roll="month", strike=PercentOfSpot(95))
    found = months(PUT, sold, account="cash", crossed=True)
    for name, values in found.greeks.package().items():
        bought, sold_too = getattr(found.greeks, name)
        assert bought.all()
        np.testing.assert_array_equal(bought, -sold_too)
        assert not values.any()


def test_a_package_without_wealth_has_no_greeks() -> None:
    many = Leg(position="short", right="put", roll="month", strike=PercentOfSpot(99), ratio=5.0)
    found = months(many, fall=0.5)
    lost = np.isnan(found.wealth)
    assert 0 < lost.sum() < len(lost)
    for values in found.greeks.package().values():
        np.testing.assert_array_equal(np.isnan(values), lost)
    np.testing.assert_array_equal(np.isnan(found.delta), lost)


def test_whole_contracts_that_do_not_fit() -> None:
    """99 shares of the first day make no contract of 100; on a tenfold portfolio they make nine."""
    small, large = (
        months(PUT, portfolio=portfolio, account="cash", costs=Costs(half_spread_vol=0.0, multiplier=100.0))
        for portfolio in (9_000.0, 90_000.0)
    )
    shares = 90_000.0 / large.spot[0]
    assert 800 < shares < 1_000
    assert not small.greeks.vega.any()
    whole = months(PUT, account="cash", costs=NO_COSTS)
    part = np.floor(shares / 100) * 100 / shares
    assert large.greeks.vega[0, 0] == pytest.approx(part * whole.greeks.vega[0, 0], rel=1e-12)


# ---------------------------------------------------------------- when they are worked out


def test_they_are_worked_out_once_and_when_asked_for() -> None:
    market = two_days(PUT).market
    overlays = [Overlay(legs=(PUT,)), Overlay(legs=(PUT, CALL))]
    for found in replay_many(market, overlays):
        assert "greeks" not in vars(found)
        assert isinstance(found.greeks, Greeks)
        assert found.greeks is found.greeks
        again = greeks_of(found)
        for name in NAMES:
            assert getattr(again, name).shape == (len(found.legs), 3)
            np.testing.assert_array_equal(getattr(again, name), getattr(found.greeks, name))


def test_columns_beside_delta() -> None:
    columns = two_days(PUT).to_frame().columns.tolist()
    assert columns[columns.index("delta") :][:6] == ["delta", *NAMES, "cash"]
