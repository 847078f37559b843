"""Rung: identity. The greeks of the package are the slopes of its value, by central differences of repriced packages.

First the whole package is revalued day by day by Black's formula with the spot, rate, vols or time of that day moved
and the vol of each strike where it was, against all five greeks of every case. Then the engine itself replays bumped
markets: strikes that are percents of spot do not look at rate and vol, and under a flat smile each keeps its vol.

Differences are taken over seven points (weights of sixth order: Abramowitz and Stegun, table 25.2, from memory; the
first test shows that they have that order), with steps that are a part of the day's smallest total deviation.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace as changed

import numpy as np
import numpy.typing as npt
import pytest

from backtest import FLAT, LegReplay, Market, Overlay, Replay, Volatility, replay
from backtest.pricing.black import black

from .greek_cases import BY_NAME, CASES, SEVERAL, history

Array = npt.NDArray[np.float64]
Along = Callable[[Array], Array]

#: Weights of the values one, two and three steps up (less those down), and of the value itself and those around it.
SLOPE = (3 / 4, -3 / 20, 1 / 60)
BEND = (-49 / 18, 3 / 2, -3 / 20, 1 / 90)


def slope(value: Along, step: Array) -> Array:
    """First derivative at zero of ``value`` of a bump, day by day."""
    steps = [(weight, number * step) for number, weight in enumerate(SLOPE, start=1)]
    return sum(weight * (value(bump) - value(-bump)) for weight, bump in steps) / step


def bend(value: Along, step: Array) -> Array:
    """Second derivative at zero."""
    around = [weight * (value(n * step) + value(-n * step)) for n, weight in enumerate(BEND) if n]
    return (BEND[0] * value(0.0 * step) + sum(around)) / step**2


def days_to_expiry(found: Replay, leg: LegReplay) -> Array:
    """Calendar days that the option opened last has left on each day."""
    roll = np.searchsorted(leg.opened, np.arange(len(found)), side="right") - 1
    return leg.schedule.expiry_day[roll] - found.dates.astype(np.int64)


def test_the_weights_have_sixth_order() -> None:
    for power in range(7):
        exact = [1.0 if power == order else 0.0 for order in (1, 2)]
        step = np.array([0.5])
        assert slope(lambda x, power=power: x**power, step)[0] == pytest.approx(exact[0], abs=1e-13)
        assert bend(lambda x, power=power: x**power, step)[0] / 2 == pytest.approx(exact[1], abs=1e-13)
    assert slope(lambda x: x**7, np.array([0.5]))[0] == pytest.approx(36 / 64, rel=1e-12)  # not zero: (3!)^2 / 2^6


# ---------------------------------------------------------------- the package by Black's formula


class Package:
    """Every option of a replay on every day that it is held, its own vol fixed; and the shares and cash beside it."""

    def __init__(self, found: Replay) -> None:
        self.found = found
        self.rate, self.carry = (a[found.window] for a in (found.market.rate, found.market.dividend_yield))
        self.held = []
        self.stdev = np.full(len(found), 0.2)  # where no option is held, a step for the shares
        for row, leg in enumerate(found.legs):
            days, state = found.held_days(row)
            assert days.tolist() == np.flatnonzero(~leg.flat).tolist()
            tau = days_to_expiry(found, leg)[days] / 365.0
            assert (tau > 0).all()
            sigma = state.stdev(leg.daily_strike[days]) / np.sqrt(tau)
            self.held.append((leg, days, tau, sigma))
            self.stdev[days] = np.minimum(self.stdev[days], sigma * np.sqrt(tau))

    def value(
        self, *, log_spot: Array | float = 0.0, vol: Array | float = 0.0, rate: Array | float = 0.0,
        time: Array | float = 0.0,
    ) -> Array:  # fmt: skip
        """Value over wealth, shape ``(day,)``, with bumps of each day: in logs of spot, vol, rate, years gone by."""
        found = self.found
        log_spot, vol, rate, time = (np.broadcast_to(bump, len(found)) for bump in (log_spot, vol, rate, time))
        spot = found.spot * np.exp(log_spot)
        total = found.shares * spot + found.cash
        for leg, days, tau, sigma in self.held:
            left, r, q = tau - time[days], (self.rate + rate)[days], self.carry[days]
            forward = spot[days] * np.exp((r - q) * left)
            sign = 1.0 if leg.leg.right == "call" else -1.0
            worth = black(forward, leg.daily_strike[days], (sigma + vol[days]) * np.sqrt(left), sign)
            side = 1.0 if leg.leg.position == "long" else -1.0
            total[days] += side * np.where(leg.count[days] == 0, 0, leg.count[days] * np.exp(-r * left) * worth)
        return total / found.wealth

    def years_left(self) -> Array:
        """Years to the first expiry of each day."""
        least = np.ones(len(self.found))
        for _, days, tau, _ in self.held:
            least[days] = np.minimum(least[days], tau)
        return least


@pytest.fixture(scope="module", params=CASES, ids=lambda case: case.name)
def package(request: pytest.FixtureRequest) -> Package:
    return Package(request.param.run())


def test_the_package_is_the_engines(package: Package) -> None:
    value = package.value()
    np.testing.assert_allclose(value[1:], 1.0, rtol=1e-12)
    # on the first day wealth is counted before the trades' costs, which the cash has paid
    found = package.found
    assert value[0] == pytest.approx(1.0 - found.trading_cost[0], rel=1e-12)


def test_delta_and_gamma(package: Package) -> None:
    """In logs of spot the slope is the dollar delta, and the bend that of the dollar delta: ``S V' + S^2 V''``."""
    step = 0.02 * package.stdev

    def along(bump: Array) -> Array:
        return package.value(log_spot=bump)

    dollar_delta = slope(along, step)
    np.testing.assert_allclose(package.found.delta, dollar_delta, rtol=0, atol=2e-11)
    gamma = package.found.greeks.package()["gamma"]
    np.testing.assert_allclose(gamma, 0.01 * (bend(along, step) - dollar_delta), rtol=1e-7, atol=1e-9)
    assert np.abs(gamma).max() > 0.02


def test_gamma_is_the_change_of_delta(package: Package) -> None:
    """The slope of the engine's greek of the other order: shares' worth of delta, at the spot of the day."""
    found, step = package.found, 0.02 * package.stdev
    inner = 0.3 * step

    def delta_in_shares(bump: Array) -> Array:
        """Dollar delta at the bumped spot, brought back to the spot of the day."""
        return slope(lambda further: package.value(log_spot=bump + further), inner) * np.exp(-bump)

    np.testing.assert_allclose(
        found.greeks.package()["gamma"], 0.01 * slope(delta_in_shares, step), rtol=1e-6, atol=1e-8
    )


def test_vega(package: Package) -> None:
    vega = package.found.greeks.package()["vega"]
    expected = 0.01 * slope(lambda bump: package.value(vol=bump), np.full(len(package.found), 0.0005))
    np.testing.assert_allclose(vega, expected, rtol=1e-9, atol=1e-13)
    assert np.abs(vega).max() > 0.0005


def test_theta(package: Package) -> None:
    theta = package.found.greeks.package()["theta"]
    expected = slope(lambda bump: package.value(time=bump), 0.01 * package.years_left()) / 365.0
    np.testing.assert_allclose(theta, expected, rtol=1e-8, atol=1e-12)
    assert np.abs(theta).max() > 0.0001


def test_rho(package: Package) -> None:
    rho = package.found.greeks.package()["rho"]
    expected = 0.01 * slope(lambda bump: package.value(rate=bump), np.full(len(package.found), 0.002))
    np.testing.assert_allclose(rho, expected, rtol=1e-9, atol=1e-13)
    assert np.abs(rho).max() > 0.0003


# ---------------------------------------------------------------- bumped markets, replayed by the engine

PERCENT_CASES = [case for case in CASES if "solved" not in case.name and "gate" not in case.name]


def gains(found: Replay, other: Replay, row: int) -> Array:
    """What the options of a leg, as held in ``found``, are worth in ``other`` over wealth, shape ``(day,)``."""
    leg, moved = found.legs[row], other.legs[row]
    assert moved.opened.tolist() == leg.opened.tolist()
    assert moved.strike.tolist() == leg.strike.tolist()
    side = 1.0 if leg.leg.position == "long" else -1.0
    return side * found.leg_count[row] * moved.daily_mark / found.wealth


def leg_slopes(found: Replay, other: Callable[[float], Replay], step: float) -> Array:
    """Slope of each leg's worth along a bump of the engine's input, shape ``(leg, day)``."""
    moved = {n: other(n * step) for n in (-3, -2, -1, 1, 2, 3)}
    return np.array(
        [
            sum(w * (gains(found, moved[n], row) - gains(found, moved[-n], row)) for n, w in enumerate(SLOPE, start=1))
            / step
            for row in range(len(found.legs))
        ]
    )


@pytest.mark.parametrize("name", [case.name for case in PERCENT_CASES])
def test_vega_of_replays_with_shifted_vols(name: str) -> None:
    """Under any smile and quote: a shift of all vols, in points, moves no strike that is a percent of spot."""
    case = BY_NAME[name]
    found, market = case.run(), Market.from_frame(case.frame)
    own = case.volatility

    def shifted(points: float) -> Replay:
        moved = changed(own, put_shift=own.put_shift + points, call_shift=own.call_shift + points)
        return replay(market, case.overlay, volatility=moved)

    expected = leg_slopes(found, shifted, 0.05)
    np.testing.assert_allclose(found.greeks.vega, expected, rtol=1e-8, atol=1e-13)
    np.testing.assert_allclose(found.greeks.package()["vega"], expected.sum(axis=0), rtol=1e-8, atol=1e-13)


@pytest.mark.parametrize("account", ["resize", "cash"])
def test_rho_of_replays_at_other_rates(account: str) -> None:
    market, overlay = Market.from_frame(history(3)), Overlay(legs=SEVERAL, account=account)
    found = replay(market, overlay, volatility=Volatility(smile=FLAT))

    def at_rate(points: float) -> Replay:
        return replay(changed(market, rate=market.rate + points / 100), overlay, volatility=Volatility(smile=FLAT))

    np.testing.assert_allclose(found.greeks.rho, leg_slopes(found, at_rate, 0.2), rtol=1e-8, atol=1e-13)


@pytest.mark.parametrize("account", ["resize", "cash"])
def test_delta_and_gamma_of_replays_at_other_prices(account: str) -> None:
    """Spot is moved on the days on which no option is opened, so that every strike stays; so does the yield."""
    market, overlay = Market.from_frame(history(3)), Overlay(legs=SEVERAL, account=account)
    found = replay(market, overlay, volatility=Volatility(smile=FLAT))
    moved_days = np.ones(len(market), dtype=bool)
    for leg in found.legs:
        moved_days[leg.opened + found.window.start] = False
    inside = moved_days[found.window]
    assert inside.mean() > 0.9

    def at_prices(percent: float) -> Replay:
        spot = np.where(moved_days, market.spot * (1 + percent / 100), market.spot)
        return replay(changed(market, spot=spot), overlay, volatility=Volatility(smile=FLAT))

    # a call at 104% that expires on the next day bends within half a percent: those days have no such step
    calm = inside & np.all([days_to_expiry(found, leg) > 5 for leg in found.legs], axis=0)
    assert calm.sum() > 400
    worth = leg_slopes(found, at_prices, 0.02)[:, calm] * 100  # per 100%, which is a dollar delta
    np.testing.assert_allclose(found.leg_dollar_delta[:, calm], worth, rtol=1e-8, atol=1e-10)

    step = 0.05
    around = {n: at_prices(n * step) for n in range(-3, 4)}
    for row in range(len(found.legs)):
        values = {n: gains(found, other, row) for n, other in around.items()}
        bent = (BEND[0] * values[0] + sum(BEND[n] * (values[n] + values[-n]) for n in (1, 2, 3))) / step**2
        # in percent of spot: 1% of spot once for the money, once for the move, so 0.01 S^2 V'' is a hundred of it
        np.testing.assert_allclose(found.greeks.gamma[row, calm], 100 * bent[calm], rtol=1e-6, atol=1e-9)
