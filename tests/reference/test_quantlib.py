"""Rung: independent library, and identity. QuantLib against ``backtest.pricing.black`` on random grids (C5).

Everything agrees to 1e-10 relative. A value is the difference of two numbers of the size of forward and strike, so
each library loses a few roundings of those: where that exceeds 1e-10 of a tiny value, the floor ``FLOOR`` (times the
larger of forward and strike) decides. Gamma and vega are products and need no floor. Parity and the limits of no time
and no volatility are worked by hand.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt
import pytest
import QuantLib as ql  # type: ignore[import-untyped]

from backtest.pricing.black import EuropeanValues, black, black_with_delta, european

Array = npt.NDArray[np.float64]

RELATIVE = 1e-10
EPSILON = float(np.finfo(np.float64).eps)
#: Nine roundings of 2.2e-16: those of both libraries together.
FLOOR = 9 * EPSILON
QL_TYPE = {1.0: ql.Option.Call, -1.0: ql.Option.Put}
FIELDS = EuropeanValues._fields


def log_uniform(rng: np.random.Generator, low: float, high: float, count: int) -> Array:
    return np.exp(rng.uniform(np.log(low), np.log(high), count))


def random_options(seed: int, tau_years: Array, lowest_vol: float) -> dict[str, Array]:
    """Arguments of ``european``: strikes up to 5 deviations from the forward, rates and yields from -5% to 20%."""
    rng, count = np.random.default_rng(seed), len(tau_years)
    spot, vol = log_uniform(rng, 0.1, 5e4, count), log_uniform(rng, lowest_vol, 2.0, count)
    rate, carry = rng.uniform(-0.05, 0.20, (2, count))
    away = rng.uniform(-5.0, 5.0, count) * vol * np.sqrt(tau_years)
    return {
        "spot": spot, "strike": spot * np.exp((rate - carry) * tau_years + away), "tau_years": tau_years,
        "rate": rate, "dividend_yield": carry, "vol_annual": vol, "sign": rng.choice([1.0, -1.0], count),
    }  # fmt: skip


def floors(options: dict[str, Array]) -> dict[str, Array | float]:
    """Absolute floor of each figure, from its own size.

    Theta is a sum that may cancel: it is good to 1e-10 of its largest part, the decay of ``sigma^2 S^2 gamma / 2``,
    and to two roundings of a day's change, which QuantLib divides by the time.
    """
    larger, tau = np.maximum(options["spot"], options["strike"]), options["tau_years"]
    priced = european(**options)
    decay = 0.5 * (options["vol_annual"] * options["spot"]) ** 2 * priced.gamma
    theta = RELATIVE * decay + 2 * EPSILON * larger / np.maximum(tau, 1 / 365)
    return {"value": FLOOR * larger, "delta": FLOOR, "gamma": 0, "vega": 0, "theta": theta, "rho": FLOOR * larger * tau}


def assert_close(found: Array, expected: Array, floor: Array | float = 0.0) -> None:
    excess = np.abs(found - expected) - RELATIVE * np.abs(expected) - floor
    worst = int(np.argmax(excess))
    assert excess[worst] <= 0.0, f"case {worst}: {found[worst]!r} against {expected[worst]!r}"


# ---------------------------------------------------------------- undiscounted Black against blackFormula


@pytest.fixture(scope="module")
def grid() -> tuple[Array, Array, Array, Array]:
    """5,000 forwards, strikes up to 6 deviations away, total deviations from 1e-4 (an hour at 1%) to 3, and signs."""
    rng = np.random.default_rng(19)
    forward, stdev = log_uniform(rng, 0.1, 5e4, 5000), log_uniform(rng, 1e-4, 3.0, 5000)
    strike = forward * np.exp(rng.uniform(-6.0, 6.0, 5000) * stdev)
    return forward, strike, stdev, rng.choice([1.0, -1.0], 5000)


def test_black_formula(grid: tuple[Array, Array, Array, Array]) -> None:
    forward, strike, stdev, sign = grid
    expected = np.array([ql.blackFormula(QL_TYPE[g], k, f, s) for f, k, s, g in zip(*grid)])
    found = black(forward, strike, stdev, sign)
    larger = np.maximum(forward, strike)
    assert_close(found, expected, FLOOR * larger)
    # where an option is worth a ten-thousandth of its forward or strike, it needs no floor
    worthy = expected > 1e-4 * larger
    assert worthy.sum() > 3000
    assert_close(found[worthy], expected[worthy])


def test_forward_delta(grid: tuple[Array, Array, Array, Array]) -> None:
    forward, strike, stdev, sign = grid
    calculators = [ql.BlackCalculator(ql.PlainVanillaPayoff(QL_TYPE[g], k), f, s, 1.0) for f, k, s, g in zip(*grid)]
    value, delta = black_with_delta(forward, strike, np.log(strike / forward), stdev, sign)
    assert_close(delta, np.array([c.deltaForward() for c in calculators]), FLOOR)
    np.testing.assert_array_equal(value, black(forward, strike, stdev, sign))


# ---------------------------------------------------------------- value and greeks


def one_day_to_ten_years(seed: int = 20, count: int = 3000) -> dict[str, Array]:
    days = np.floor(log_uniform(np.random.default_rng(seed), 1.0, 3650.0, count))
    return random_options(seed + 100, days / 365.0, lowest_vol=0.01)


@pytest.fixture(scope="module")
def by_engine() -> tuple[dict[str, Array], EuropeanValues]:
    """3,000 options through QuantLib's analytic European engine, with dates of Actual/365 (C1)."""
    options = one_day_to_ten_years()
    today, daycount = ql.Date(2, 1, 2020), ql.Actual365Fixed()
    ql.Settings.instance().evaluationDate = today
    spot, rate, carry, vol = (ql.SimpleQuote(0.1) for _ in range(4))
    process = ql.BlackScholesMertonProcess(
        ql.QuoteHandle(spot),
        ql.YieldTermStructureHandle(ql.FlatForward(today, ql.QuoteHandle(carry), daycount)),
        ql.YieldTermStructureHandle(ql.FlatForward(today, ql.QuoteHandle(rate), daycount)),
        ql.BlackVolTermStructureHandle(ql.BlackConstantVol(today, ql.NullCalendar(), ql.QuoteHandle(vol), daycount)),
    )
    engine = ql.AnalyticEuropeanEngine(process)
    rows = []
    for s, k, tau, r, q, v, sign in zip(*options.values()):
        for quote, new in ((spot, s), (rate, r), (carry, q), (vol, v)):
            quote.setValue(new)
        expiry = ql.EuropeanExercise(today + round(tau * 365.0))
        priced = ql.VanillaOption(ql.PlainVanillaPayoff(QL_TYPE[sign], k), expiry)
        priced.setPricingEngine(engine)
        rows.append((priced.NPV(), priced.delta(), priced.gamma(), priced.vega(), priced.theta(), priced.rho()))
    return options, EuropeanValues(*np.array(rows).T)


@pytest.mark.parametrize("field", FIELDS)
def test_analytic_european_engine(field: str, by_engine: tuple[dict[str, Array], EuropeanValues]) -> None:
    options, expected = by_engine
    assert (options["rate"] < 0).sum() > 400  # negative rates are among them
    assert (options["tau_years"] < 2 / 365).sum() > 100  # and the last day
    assert_close(getattr(european(**options), field), getattr(expected, field), floors(options)[field])


@pytest.mark.parametrize("field", FIELDS)
def test_the_last_day(field: str) -> None:
    """2,000 options with a minute to a day to go, which dates cannot express.

    With less vol than 10% the roundings of ``ln(K/F)`` alone would move QuantLib's far options by 1e-10. Its theta
    takes ``ln(F/S) / tau``, which has no digits to spare this close to expiry: the one expected here comes from its
    value, delta and gamma by the equation of Black, Scholes and Merton,
    ``theta = r V - (r - q) S delta - sigma^2 S^2 gamma / 2``.
    """
    tau = log_uniform(np.random.default_rng(21), 1.0 / (365 * 24 * 60), 1.0 / 365, 2000)
    options = random_options(22, tau, lowest_vol=0.1)
    expected = []
    for s, k, t, r, q, vol, sign in zip(*options.values()):
        c = ql.BlackCalculator(
            ql.PlainVanillaPayoff(QL_TYPE[sign], k), s * np.exp((r - q) * t), vol * t**0.5, np.exp(-r * t)
        )
        theta = r * c.value() - (r - q) * s * c.delta(s) - 0.5 * vol**2 * s**2 * c.gamma(s)
        figures = (c.value(), c.delta(s), c.gamma(s), c.vega(t), theta, c.rho(t))
        expected.append(figures[FIELDS.index(field)])
    assert_close(getattr(european(**options), field), np.array(expected), floors(options)[field])


# ---------------------------------------------------------------- parity


def test_parity() -> None:
    """``C - P = S exp(-q tau) - K exp(-r tau)``, and its derivative by each input."""
    options = one_day_to_ten_years(seed=23)
    call = european(**{**options, "sign": np.array(1.0)})
    put = european(**{**options, "sign": np.array(-1.0)})
    s, k, tau, r, q, *_ = options.values()
    growth, discount = np.exp(-q * tau), np.exp(-r * tau)
    scale = 2e-15 * np.maximum(s * growth, k * discount)
    assert (np.abs(call.value - put.value - (s * growth - k * discount)) <= scale).all()
    assert (np.abs(call.delta - put.delta - growth) <= 1e-15 * growth).all()
    np.testing.assert_array_equal(call.gamma, put.gamma)
    np.testing.assert_array_equal(call.vega, put.vega)
    assert (
        np.abs(call.theta - put.theta - (q * s * growth - r * k * discount)) <= scale + 2e-15 * abs(call.theta)
    ).all()
    assert (np.abs(call.rho - put.rho - tau * k * discount) <= tau * scale).all()


def test_undiscounted_parity(grid: tuple[Array, Array, Array, Array]) -> None:
    forward, strike, stdev, _ = grid
    gap = black(forward, strike, stdev, 1.0) - black(forward, strike, stdev, -1.0) - (forward - strike)
    assert (np.abs(gap) <= 1e-15 * np.maximum(forward, strike)).all()


# ---------------------------------------------------------------- limits, by hand


@pytest.mark.parametrize(
    ("sign", "spot", "value", "delta"),
    [
        pytest.param(1.0, 110.0, 10.0, 1.0, id="call in the money"),
        pytest.param(1.0, 90.0, 0.0, 0.0, id="call out of the money"),
        pytest.param(1.0, 100.0, 0.0, 0.5, id="call at the money"),
        pytest.param(-1.0, 90.0, 10.0, -1.0, id="put in the money"),
        pytest.param(-1.0, 110.0, 0.0, 0.0, id="put out of the money"),
        pytest.param(-1.0, 100.0, 0.0, -0.5, id="put at the money"),
    ],
)
@pytest.mark.parametrize("vol", [0.0, 0.2], ids=["no vol", "vol"])
def test_no_time_left(sign: float, spot: float, value: float, delta: float, vol: float) -> None:
    # intrinsic; at the money half a share either way
    found = european(spot=spot, strike=100.0, tau_years=0.0, rate=0.05, dividend_yield=0.02, vol_annual=vol, sign=sign)
    assert float(found.value) == value
    assert float(found.delta) == delta
    assert float(found.vega) == float(found.rho) == 0.0
    if spot != 100.0:
        assert float(found.gamma) == 0.0
        # the share's yield is forgone and the strike's interest kept: q S - r K for a call, the reverse for a put
        assert float(found.theta) == pytest.approx(sign * (0.02 * spot - 5.0) if value else 0.0, rel=1e-14)


@pytest.mark.parametrize("sign", [1.0, -1.0], ids=["call", "put"])
def test_no_volatility(sign: float) -> None:
    # two years, r = 5%, q = 2%: the forward of 100 is 100 exp(.06) = 106.18, so a strike of 105 lies below it
    growth, discount = np.exp(-0.04), np.exp(-0.10)
    strikes = np.array([105.0, 107.0])
    found = european(spot=100.0, strike=strikes, tau_years=2.0, rate=0.05, dividend_yield=0.02, vol_annual=0, sign=sign)
    exercised = np.array([1.0, 0.0]) if sign > 0 else np.array([0.0, 1.0])
    np.testing.assert_allclose(found.value, exercised * sign * (100 * growth - strikes * discount), rtol=1e-13)
    np.testing.assert_allclose(found.delta, exercised * sign * growth, rtol=1e-15)
    np.testing.assert_allclose(
        found.theta, exercised * sign * (0.02 * 100 * growth - 0.05 * strikes * discount), rtol=1e-13
    )
    np.testing.assert_allclose(found.rho, exercised * sign * 2.0 * strikes * discount, rtol=1e-13)
    assert not found.gamma.any()
    assert not found.vega.any()


def test_limits_are_reached() -> None:
    """A millionth of a second, or of a vol point, from the limit: 5% in the money."""
    at = {"spot": 105.0, "strike": 100.0, "rate": 0.0, "dividend_yield": 0.0, "sign": 1.0}
    for tau, vol in ((3e-14, 0.2), (1.0, 1e-8)):
        found = european(tau_years=tau, vol_annual=vol, **at)
        assert float(found.value) == pytest.approx(5.0, rel=1e-15)
        assert [float(x) for x in found[1:5]] == [1.0, 0.0, 0.0, 0.0]


def test_decay_at_the_money_without_end() -> None:
    # a third of a second to go: theta is -S n(0) sigma / (2 sqrt(tau)) = -100 (.3989423) .2 / (2 x 1e-4)
    found = european(spot=100, strike=100, tau_years=1e-8, rate=0, dividend_yield=0, vol_annual=0.2, sign=-1)
    assert float(found.theta) == pytest.approx(-1e5 / (2 * np.pi) ** 0.5, rel=1e-9)


def test_zero_deviation_is_intrinsic() -> None:
    strikes = np.array([90.0, 100.0, 112.0])
    np.testing.assert_array_equal(black(100.0, strikes, 0.0, 1.0), [10.0, 0.0, 0.0])
    np.testing.assert_array_equal(black(100.0, strikes, 0.0, -1.0), [0.0, 0.0, 12.0])


def test_shapes_broadcast() -> None:
    strikes, vols, signs = (
        np.array([90.0, 100.0, 110.0]),
        np.array([[0.1], [0.3]]),
        np.array([1.0, -1.0])[:, None, None],
    )
    found = european(
        spot=100.0, strike=strikes, tau_years=0.5, rate=0.03, dividend_yield=0.01, vol_annual=vols, sign=signs
    )
    alone = european(spot=100.0, strike=110.0, tau_years=0.5, rate=0.03, dividend_yield=0.01, vol_annual=0.3, sign=-1.0)
    for field in ("value", "delta", "theta", "rho"):
        assert getattr(found, field).shape == (2, 2, 3)
        assert getattr(found, field)[1, 1, 2] == getattr(alone, field)
    for field in ("gamma", "vega"):  # the same for both rights
        assert getattr(found, field)[..., 1, 2] == getattr(alone, field)
