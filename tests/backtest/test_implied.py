"""Rung: identity, and independent library. The total deviation that a Black price implies (C5).

Deviation to price and back is asserted against what the price can tell: ``EPSILON`` of the numbers it is made of, over
vega. The reference prices come from an integral with no cancellation, so that it is known which digits are right;
QuantLib and scipy stand beside on random grids.
"""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt
import pytest
import QuantLib as ql  # type: ignore[import-untyped]
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.integrate import quad
from scipy.optimize import brentq

from backtest.pricing.black import black
from backtest.pricing.implied import ImpliedStatus, implied_stdev

Array = npt.NDArray[np.float64]

EPSILON = float(np.finfo(np.float64).eps)
EXAMPLES = settings(max_examples=150, deadline=None, derandomize=True, database=None)


def log_vega(forward: Array, strike: Array, stdev: Array) -> Array:
    """Logarithm of the change of an undiscounted price with the total deviation."""
    d1 = np.log(forward / strike) / stdev + 0.5 * stdev
    return np.log(forward) - 0.5 * d1**2 - 0.5 * np.log(2.0 * np.pi)


def random_prices(seed: int, count: int, most: float) -> dict[str, Array]:
    """Strikes up to ``most`` deviations away, total deviations from 1e-5 to 8, both rights."""
    rng = np.random.default_rng(seed)
    stdev = np.exp(rng.uniform(np.log(1e-5), np.log(8.0), count))
    strike = np.exp(rng.uniform(np.log(0.1), np.log(5e4), count))
    forward = strike * np.exp(np.clip(rng.uniform(-most, most, count) * stdev, -30.0, 30.0))
    return {"forward": forward, "strike": strike, "stdev": stdev, "sign": rng.choice([-1.0, 1.0], count)}


def priced(grid: dict[str, Array]) -> Array:
    return black(grid["forward"], grid["strike"], grid["stdev"], grid["sign"])


# ---------------------------------------------------------------- there and back


def test_there_and_back() -> None:
    """100,000 prices of our own Black, which is good to a few roundings of forward and strike."""
    grid = random_prices(71, 100_000, most=6.0)
    found = implied_stdev(priced(grid), grid["forward"], grid["strike"], grid["sign"])
    assert found.ok.sum() > 90_000
    assert set(found.status.tolist()) == {ImpliedStatus.OK, ImpliedStatus.NO_TIME_VALUE}
    larger = np.maximum(grid["forward"], grid["strike"])
    with np.errstate(over="ignore"):
        told = 2.0 * EPSILON * larger / np.exp(log_vega(grid["forward"], grid["strike"], grid["stdev"]))
    off = np.abs(found.total_stdev - grid["stdev"])
    assert (off <= told + 25.0 * EPSILON * grid["stdev"])[found.ok].all()
    # where nothing is told, less than a few roundings of the price are left of the time value
    by_parity = black(grid["forward"], grid["strike"], grid["stdev"], np.where(grid["forward"] > grid["strike"], -1, 1))
    silent = found.status == ImpliedStatus.NO_TIME_VALUE
    assert (by_parity <= 10.0 * EPSILON * larger)[silent].all()


def exact_price(forward: float, strike: float, stdev: float) -> float:
    """Undiscounted price of the option out of the money, as the integral of vega: nothing is subtracted."""
    gap = (forward - strike) / strike
    x = abs(np.log1p(gap) if abs(gap) < 0.5 else np.log(forward / strike))

    def slope(t: float) -> float:  # t = ln(s)
        s = np.exp(t)
        return s * np.exp(-0.5 * (x / s) ** 2 - 0.125 * s * s)

    top = np.log(stdev)
    # below this the integrand is under 1e-17 of its value at the top
    bottom = top - 40.0 if x == 0.0 else np.log(x / np.sqrt((x / stdev) ** 2 + 90.0))
    area = quad(slope, bottom, top, epsabs=0.0, epsrel=1e-13, limit=200)[0]
    return float(np.sqrt(forward * strike / (2.0 * np.pi)) * area)


def test_digits_far_out_of_the_money() -> None:
    """Prices down to 1e-250 of the forward, total deviations from 1e-6 to 5: twelve digits of the deviation."""
    rng = np.random.default_rng(72)
    for _ in range(400):
        stdev = float(np.exp(rng.uniform(np.log(1e-6), np.log(5.0))))
        away = float(rng.uniform(0.0, 30.0)) * stdev
        if rng.random() < 0.1:
            away = 0.0
        sign = rng.choice([-1.0, 1.0])
        forward = 100.0 * np.exp(-sign * away)
        found = implied_stdev(exact_price(forward, 100.0, stdev), forward, 100.0, sign)
        assert bool(found.ok)
        assert float(found.total_stdev) == pytest.approx(stdev, rel=1e-12)
        # vega falls by no more than exp(-s^2/8) on the way to s
        assert float(found.uncertainty) <= EPSILON * np.exp(stdev**2 / 8.0) * (1.0 + 1e-9)


def test_close_to_the_upper_bound() -> None:
    # a deviation of 10 leaves 5.7e-7 of the forward: 2 N(-5). The price has 16 digits, so that 9 are left of it
    for stdev in (6.0, 10.0, 14.0):
        price = black(100.0, 100.0, stdev, 1.0)
        found = implied_stdev(price, 100.0, 100.0, 1.0)
        assert float(found.total_stdev) == pytest.approx(stdev, rel=float(found.uncertainty) * 1.01 + 4.0 * EPSILON)
    assert float(found.uncertainty) > 1e-7


def test_uncertainty_is_the_price_s_rounding_over_vega() -> None:
    # a call of 60 with a forward of 100 and s = .1: five deviations in. Its 40 has a rounding of 2^-52 x 40
    price = float(black(100.0, 60.0, 0.1, 1.0))
    found = implied_stdev(price, 100.0, 60.0, 1.0)
    vega = float(np.exp(log_vega(np.array(100.0), np.array(60.0), np.array(0.1))))
    assert float(found.uncertainty) == pytest.approx(price * EPSILON / (vega * 0.1), rel=1e-6)
    # a cent on the price, for an option at the money: .01 over a vega of 39.8, over s
    found = implied_stdev(black(100.0, 100.0, 0.1, 1.0), 100.0, 100.0, 1.0, price_error=0.01)
    assert float(found.uncertainty) == pytest.approx(0.01 / (100.0 * 0.398942 * np.exp(-0.00125) * 0.1), rel=1e-5)


# ---------------------------------------------------------------- others' solvers


def test_quantlib_and_scipy() -> None:
    """1,500 prices with something left to tell: to 1e-9 of the deviation, what their own search is asked for."""
    grid = random_prices(73, 1500, most=3.0)
    price = priced(grid)
    found = implied_stdev(price, grid["forward"], grid["strike"], grid["sign"])
    compared = 0
    for number in range(1500):
        forward, strike, stdev, sign = (float(grid[name][number]) for name in ("forward", "strike", "stdev", "sign"))
        if not found.ok[number] or not 1e-3 < stdev < 4.0 or found.uncertainty[number] > 1e-12:
            continue
        value, mine = float(price[number]), float(found.total_stdev[number])
        kind = ql.Option.Call if sign > 0 else ql.Option.Put
        theirs = ql.blackFormulaImpliedStdDev(kind, strike, forward, value, 1.0, 0.0, stdev * 1.3, 1e-12, 1000)
        assert mine == pytest.approx(theirs, rel=1e-9)
        by_brentq = brentq(lambda s: float(black(forward, strike, s, sign)) - value, 1e-6, 20.0, xtol=1e-14)  # noqa: B023
        assert mine == pytest.approx(by_brentq, rel=1e-9)
        compared += 1
    assert compared > 500


# ---------------------------------------------------------------- properties


@EXAMPLES
@given(
    st.floats(-20.0, 20.0), st.floats(1e-4, 6.0), st.sampled_from([-1.0, 1.0]), st.floats(-3.0, 3.0),
    st.floats(0.5, 1.0),
)  # fmt: skip
def test_the_price_comes_back(log_forward: float, stdev: float, sign: float, moved: float, discount: float) -> None:
    """Whatever the price, the deviation found gives it again, discounted or not, to roundings of forward and strike."""
    forward, strike = np.exp(log_forward), np.exp(log_forward + moved)
    undiscounted = float(black(forward, strike, stdev, sign))
    found = implied_stdev(undiscounted * discount, forward, strike, sign, discount=discount)
    if found.ok:
        again = float(black(forward, strike, found.total_stdev, sign))
        assert again == pytest.approx(undiscounted, abs=16.0 * EPSILON * max(forward, strike))


@EXAMPLES
@given(st.floats(0.01, 3.0), st.floats(-4.0, 4.0), st.sampled_from([0.25, 1024.0]))
def test_scale_parity_and_order(stdev: float, deviations: float, times: float) -> None:
    strike = np.exp(deviations * stdev)
    call = implied_stdev(black(1.0, strike, stdev, 1.0), 1.0, strike, 1.0)
    put = implied_stdev(black(1.0, strike, stdev, -1.0), 1.0, strike, -1.0)
    assert call.ok
    assert put.ok
    both = float(call.uncertainty + put.uncertainty) * max(1.0, strike) / min(1.0, strike)
    assert float(call.total_stdev) == pytest.approx(float(put.total_stdev), rel=8.0 * both + 50.0 * EPSILON)
    # money in another coin: a power of two changes no digit
    scaled = implied_stdev(times * black(1.0, strike, stdev, 1.0), times, times * strike, 1.0)
    assert float(scaled.total_stdev) == pytest.approx(float(call.total_stdev), rel=4.0 * EPSILON)
    # a dearer option has more vol
    dearer = implied_stdev(1.001 * black(1.0, strike, stdev, 1.0), 1.0, strike, 1.0)
    if dearer.ok:
        assert dearer.total_stdev > call.total_stdev


# ---------------------------------------------------------------- what a price does not tell


@pytest.mark.parametrize(
    ("price", "forward", "sign", "status"),
    [
        pytest.param(9.99, 110.0, 1.0, "BELOW_INTRINSIC", id="call below intrinsic"),
        pytest.param(-0.01, 90.0, 1.0, "BELOW_INTRINSIC", id="less than nothing"),
        pytest.param(10.0, 110.0, 1.0, "NO_TIME_VALUE", id="intrinsic"),
        pytest.param(0.0, 90.0, 1.0, "NO_TIME_VALUE", id="nothing"),
        pytest.param(10.0 * (1.0 + 2.0 * EPSILON), 110.0, 1.0, "NO_TIME_VALUE", id="a rounding above intrinsic"),
        pytest.param(10.0 * (1.0 - 2.0 * EPSILON), 110.0, 1.0, "NO_TIME_VALUE", id="a rounding below intrinsic"),
        pytest.param(-1e-14, 90.0, 1.0, "NO_TIME_VALUE", id="a rounding below nothing"),
        pytest.param(110.0, 110.0, 1.0, "ABOVE_BOUND", id="call at its forward"),
        pytest.param(100.0, 110.0, -1.0, "ABOVE_BOUND", id="put at its strike"),
        pytest.param(101.0, 90.0, -1.0, "ABOVE_BOUND", id="put above its strike"),
        pytest.param(1e-300, 90.0, 1.0, "OK", id="a trace"),
        pytest.param(99.999, 110.0, -1.0, "OK", id="put just below its strike"),
        pytest.param(np.nan, 110.0, 1.0, "MISSING", id="no price"),
        pytest.param(5.0, np.inf, 1.0, "MISSING", id="no forward"),
        pytest.param(5.0, -1.0, 1.0, "MISSING", id="negative forward"),
        pytest.param(5.0, 110.0, 0.0, "MISSING", id="neither call nor put"),
    ],
)
def test_status(price: float, forward: float, sign: float, status: str) -> None:
    found = implied_stdev(price, forward, 100.0, sign)
    assert ImpliedStatus(int(found.status)).name == status
    assert bool(found.ok) is (status == "OK")
    if status == "OK":
        assert float(found.total_stdev) > 0.0
    elif status == "NO_TIME_VALUE":
        assert float(found.total_stdev) == 0.0
    else:
        assert np.isnan(found.total_stdev)


def test_a_tick_decides_what_is_told() -> None:
    # half a tick of .005: a call quoted at .004 may be worth nothing, one at 9.997 its intrinsic 10
    quotes: dict[str, Any] = {"forward": [90.0, 110.0, 110.0], "strike": 100.0, "sign": 1.0}
    found = implied_stdev([0.004, 9.997, 9.99], **quotes, price_error=0.005)
    assert [ImpliedStatus(int(s)).name for s in found.status] == ["NO_TIME_VALUE", "NO_TIME_VALUE", "BELOW_INTRINSIC"]
    assert implied_stdev(0.004, 90.0, 100.0, 1.0).ok


def test_vol_a_year_and_shapes() -> None:
    strikes, tau = np.array([90.0, 100.0, 110.0]), np.array([[0.25], [1.0]])
    price = 0.97 * black(100.0, strikes, 0.2 * np.sqrt(tau), -1.0)
    found = implied_stdev(price, 100.0, strikes, -1.0, discount=0.97)
    assert found.total_stdev.shape == (2, 3)
    np.testing.assert_allclose(found.vol_annual(tau), np.full((2, 3), 0.2), rtol=1e-13)
    assert np.isnan(found.vol_annual(0.0)).all()
    assert implied_stdev(np.zeros((0,)), 100.0, 100.0, 1.0).total_stdev.shape == (0,)
