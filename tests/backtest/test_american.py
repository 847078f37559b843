"""Rung: independent library, twin and identity. American options with cash dividends (C5).

The error of the lattice is stated in ``american.py``, in millionths of the strike; ``TYPICAL`` (root mean square) and
``WORST`` below are that statement, rounded up. All options here have a strike of 100.
"""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt
import pytest
import QuantLib as ql  # type: ignore[import-untyped]
from hypothesis import given, settings
from hypothesis import strategies as st

from backtest.pricing.american import AmericanValues, CashDividends, american, american_value_and_delta
from backtest.pricing.black import european
from tests.reference.slow_american import call_with_one_dividend, leisen_reimer

Array = npt.NDArray[np.float64]
Options = dict[str, Any]

STRIKE = 100.0
TYPICAL, WORST = 3e-6 * STRIKE, 1e-4 * STRIKE
EXAMPLES = settings(max_examples=60, deadline=None, derandomize=True, database=None)


def random_options(seed: int, count: int, dividends: int = 0) -> Options:
    """Spot 80 to 120% of strike, 1 day to 2 years, vol 10 to 60%, rate -1 to 10%, yield none or up to 8%."""
    rng = np.random.default_rng(seed)
    days = np.rint(np.exp(rng.uniform(0.0, np.log(730.0), count)))
    ex_days = np.floor(rng.random((count, dividends)) * days[:, None]) + 1.0
    cash = rng.uniform(0.1, 3.0, (count, dividends)) * (np.arange(dividends) < rng.integers(1, 5, count)[:, None])
    return {
        "spot": STRIKE * rng.uniform(0.8, 1.2, count), "strike": np.full(count, STRIKE), "tau_years": days / 365.0,
        "rate": rng.uniform(-0.01, 0.10, count),
        "dividend_yield": rng.choice([0.0, 1.0], count) * rng.uniform(0.0, 0.08, count),
        "total_stdev": rng.uniform(0.1, 0.6, count) * np.sqrt(days / 365.0), "sign": rng.choice([-1.0, 1.0], count),
        "dividends": CashDividends(years=ex_days / 365.0, amounts=cash) if dividends else None,
    }  # fmt: skip


def by_black(options: Options) -> Array:
    named = {name: value for name, value in options.items() if name not in ("total_stdev", "dividends")}
    return european(**named, vol_annual=options["total_stdev"] / np.sqrt(options["tau_years"])).value


def one(options: Options, number: int) -> tuple[float, ...]:
    """Spot, strike, years, rate, yield, annual vol and sign of one option."""
    s, k, tau, r, q, stdev, sign, _ = (None if a is None else a if isinstance(a, CashDividends) else float(a[number])
                                       for a in options.values())  # fmt: skip
    return s, k, tau, r, q, stdev / tau**0.5, sign


# ---------------------------------------------------------------- QuantLib


def quantlib_option(
    s: float, k: float, tau: float, r: float, q: float, vol: float, sign: float
) -> tuple[ql.VanillaOption, ql.BlackScholesMertonProcess, ql.SimpleQuote, ql.Date]:
    today, daycount = ql.Date(2, 1, 2020), ql.Actual365Fixed()
    ql.Settings.instance().evaluationDate = today
    spot = ql.SimpleQuote(s)
    process = ql.BlackScholesMertonProcess(
        ql.QuoteHandle(spot),
        ql.YieldTermStructureHandle(ql.FlatForward(today, q, daycount)),
        ql.YieldTermStructureHandle(ql.FlatForward(today, r, daycount)),
        ql.BlackVolTermStructureHandle(ql.BlackConstantVol(today, ql.NullCalendar(), vol, daycount)),
    )
    exercise = ql.AmericanExercise(today, today + round(tau * 365))
    right = ql.Option.Call if sign > 0 else ql.Option.Put
    return ql.VanillaOption(ql.PlainVanillaPayoff(right, k), exercise), process, spot, today


def test_spectral_engine() -> None:
    """150 options without dividends through the integral equation of the boundary (Andersen, Lake and Offengenden)."""
    options = random_options(51, 150)
    expected = []
    for number in range(150):
        option, process, spot, _ = quantlib_option(*one(options, number))
        option.setPricingEngine(ql.QdFpAmericanEngine(process, ql.QdFpAmericanEngine.highPrecisionScheme()))
        at, value = spot.value(), option.NPV()
        spot.setValue(1.0005 * at)
        above = option.NPV()
        spot.setValue(0.9995 * at)
        expected.append((value, (above - option.NPV()) / (0.001 * at)))
    values, deltas = np.array(expected).T
    found = american(**options)
    error = found.value - values
    assert np.abs(error).max() < WORST
    assert (error**2).mean() ** 0.5 < TYPICAL
    off = found.delta - deltas
    assert np.abs(off).max() < 2e-2
    assert np.quantile(np.abs(off), 0.98) < 5e-4


def test_escrowed_finite_differences() -> None:
    """Ten options with one to three dividends; twice the finer grid less the coarser: the error goes with the step."""
    options = random_options(52, 10, dividends=3)
    options["tau_years"] = np.array([30, 60, 91, 120, 182, 250, 365, 365, 500, 720]) / 365.0
    options["rate"] = np.abs(options["rate"])
    options["dividend_yield"] = np.tile([0.0, 0.03], 5)
    known = options["dividends"]
    expected = []
    for number in range(10):
        option, process, _, today = quantlib_option(*one(options, number))
        paid = [
            (today + round(years * 365), cash)
            for years, cash in zip(known.years[number], known.amounts[number])
            if cash > 0 and years <= options["tau_years"][number]
        ]
        grids = []
        for steps in (200, 400):
            option.setPricingEngine(
                ql.FdBlackScholesVanillaEngine(
                    process, ql.DividendVector(*map(list, zip(*paid))) if paid else ql.DividendVector([], []),
                    steps, 4 * steps, 0, ql.FdmSchemeDesc.Douglas(), False, -1e300,
                    ql.FdBlackScholesVanillaEngine.Escrowed,
                )
            )  # fmt: skip
            grids.append(option.NPV())
        expected.append(2.0 * grids[1] - grids[0])
    error = american(**options).value - np.array(expected)
    assert np.abs(error).max() < 2e-5 * STRIKE
    assert np.quantile(np.abs(error), 0.8) < TYPICAL


# ---------------------------------------------------------------- our own slow ones


def test_calls_with_one_dividend_exactly() -> None:
    rng = np.random.default_rng(53)
    found, expected = [], []
    for _ in range(120):
        s, tau, vol = rng.uniform(85, 125), rng.uniform(0.05, 2.0), rng.uniform(0.1, 0.6)
        r, ex, cash = rng.uniform(0.0, 0.1), tau * rng.uniform(0.02, 0.99), rng.uniform(0.2, 4.0)
        known = CashDividends(years=np.array([ex]), amounts=np.array([cash]))
        found.append(american(spot=s, strike=STRIKE, tau_years=tau, rate=r, dividend_yield=0.0,
                              total_stdev=vol * tau**0.5, sign=1.0, dividends=known).value)  # fmt: skip
        expected.append(call_with_one_dividend(s, STRIKE, tau, r, vol, ex, cash))
    error = np.array(found) - np.array(expected)
    assert np.abs(error).max() < 0.2 * WORST
    assert (error**2).mean() ** 0.5 < 0.3 * TYPICAL


@pytest.mark.parametrize("sign", [1.0, -1.0], ids=["call", "put"])
@pytest.mark.parametrize("q", [0.0, 0.04], ids=["no yield", "yield"])
def test_leisen_reimer_with_dividends_on_its_steps(sign: float, q: float) -> None:
    steps, tau, r, vol = 2001, 0.8, 0.06, 0.3
    ex = tau * np.array([100, 700, 1900]) / steps
    cash = np.array([1.5, 0.8, 2.0])
    known = CashDividends(years=ex, amounts=cash)
    for s in (85.0, 100.0, 118.0):
        found = american(spot=s, strike=STRIKE, tau_years=tau, rate=r, dividend_yield=q, total_stdev=vol * tau**0.5,
                         sign=sign, dividends=known)  # fmt: skip
        expected = leisen_reimer(s, STRIKE, tau, r, q, vol, sign, steps, tuple(zip(ex, cash)))
        assert float(found.value) == pytest.approx(expected, abs=2e-5 * STRIKE, rel=0)


# ---------------------------------------------------------------- never exercised early


def test_without_reason_to_exercise_it_is_black_s_formula() -> None:
    options = random_options(54, 400)
    options["dividend_yield"] = np.zeros(400)
    call, rate = options["sign"] > 0, options["rate"]
    options["rate"] = np.where(call, np.abs(rate), -np.abs(rate))
    found = american(**options)
    np.testing.assert_allclose(found.value, by_black(options), rtol=1e-12, atol=1e-12)
    np.testing.assert_array_equal(found.value, found.held)


def test_a_dividend_below_the_interest_on_the_strike() -> None:
    # 100 (1 - exp(-.05/4)) = 1.2422: a quarterly dividend of 1.24 is not worth exercising for, one of 1.25 may be
    ex = np.array([0.25, 0.5, 0.75])
    option = {"spot": 130.0, "strike": STRIKE, "tau_years": 1.0, "rate": 0.05, "dividend_yield": 0.0,
              "total_stdev": 0.05, "sign": 1.0}  # fmt: skip
    escrowed = {cash: 130.0 - float((cash * np.exp(-0.05 * ex)).sum()) for cash in (1.24, 1.25)}
    for cash, exact in ((1.24, True), (1.25, False)):
        found = american(**option, dividends=CashDividends(years=ex, amounts=np.full(3, cash))).value
        black = by_black({**option, "spot": escrowed[cash]})
        assert (abs(float(found) - float(black)) < 1e-12) is exact
        # exercise for the first of 1.25 brings S - K exp(-r/4), held to the end S* - K exp(-r), 0.015 less
        assert float(found) >= float(black) - 1e-12


# ---------------------------------------------------------------- identities


def options_of(draw: st.DrawFn) -> Options:
    return random_options(draw(st.integers(0, 2**32 - 1)), 1, dividends=draw(st.sampled_from([0, 4])))


drawn = st.composite(options_of)()


@EXAMPLES
@given(drawn)
def test_between_european_and_share(options: Options) -> None:
    found = american(**options)
    s, k, sign = options["spot"], options["strike"], options["sign"]
    assert (found.value >= sign * (s - k)).all()
    assert (found.value >= found.held).all()
    assert (
        found.value <= np.where(sign > 0, s, k * np.exp(np.maximum(-options["rate"], 0) * options["tau_years"]))
    ).all()
    assert (found.value >= european_of(options) - 1e-12).all()
    assert (sign * found.delta >= -1e-6).all()
    assert (sign * found.delta <= np.where(options["dividend_yield"] >= 0, 1.0, np.inf) + 1e-3).all()


def european_of(options: Options) -> Array:
    """European value on the share without the dividends that go ex in time."""
    known, s = options["dividends"], options["spot"]
    if known is not None:
        carry = options["rate"] - options["dividend_yield"]
        within = known.years <= options["tau_years"][:, None]
        s = s - (within * known.amounts * np.exp(-carry[:, None] * known.years)).sum(axis=1)
    return by_black({**options, "spot": s})


@EXAMPLES
@given(drawn)
def test_monotone_and_convex_in_the_strike(options: Options) -> None:
    strikes = np.linspace(70.0, 130.0, 13)
    value = american(**{**options, "strike": strikes}).value
    slopes = np.diff(value) / 5.0
    allowed = 2.0 * WORST / 5.0  # two errors over the distance
    assert (-options["sign"] * slopes >= -allowed).all()
    assert (np.abs(slopes) <= 1.0 + allowed).all()
    assert (np.diff(slopes) >= -2.0 * allowed).all()


@pytest.mark.parametrize("dividends", [0, 4])
def test_slopes_add_up_to_the_change(dividends: int) -> None:
    """Simpson's rule over a tenth of a deviation either way: delta to value, gamma to delta."""
    options = random_options(58, 400, dividends)
    width = 0.1 * options["total_stdev"]
    low, here, high = (american(**{**options, "spot": (1.0 + k * width) * options["spot"]}) for k in (-1, 0, 1))
    for whole, slope, rms, worst in (("value", "delta", TYPICAL, WORST), ("delta", "gamma", 1e-3, 1e-2)):
        mean = (getattr(low, slope) + 4.0 * getattr(here, slope) + getattr(high, slope)) / 6.0
        gap = getattr(high, whole) - getattr(low, whole) - 2.0 * width * options["spot"] * mean
        assert (gap**2).mean() ** 0.5 < rms
        assert np.abs(gap).max() < worst


@EXAMPLES
@given(st.integers(0, 2**32 - 1))
def test_put_and_call_change_places(seed: int) -> None:
    """McDonald and Schroder (1998): spot and strike, rate and yield swapped, a put is a call."""
    options = random_options(seed, 5)
    swapped = {**options, "spot": options["strike"], "strike": options["spot"], "sign": -options["sign"],
               "rate": options["dividend_yield"], "dividend_yield": options["rate"]}  # fmt: skip
    np.testing.assert_allclose(american(**options).value, american(**swapped).value, rtol=0, atol=1.5 * WORST)


@EXAMPLES
@given(drawn, st.sampled_from([0.25, 8.0, 1024.0]))
def test_scale(options: Options, times: float) -> None:
    """All money counted in another coin, a power of two: the same to the last bit but for logarithms."""
    known = options["dividends"]
    other = {**options, "spot": times * options["spot"], "strike": times * options["strike"],
             "dividends": known and CashDividends(years=known.years, amounts=times * known.amounts)}  # fmt: skip
    here, there = american(**options), american(**other)
    np.testing.assert_allclose(there.value, times * here.value, rtol=1e-11)
    np.testing.assert_allclose(there.delta, here.delta, rtol=1e-9, atol=1e-12)


def test_the_values_are_what_the_pair_gives() -> None:
    options = random_options(55, 40, dividends=4)
    found = american(**options)
    value, delta = american_value_and_delta(**options)
    np.testing.assert_array_equal(value, found.value)
    np.testing.assert_array_equal(delta, found.delta)
    assert isinstance(found, AmericanValues)
