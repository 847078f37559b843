"""Where vols come from: smiles, quotes of one or several tenors (C7); realised vol is in ``test_realised.py``.

Rung: identity (points of smiles and term structures worked by hand), independent library (scipy's quadrature of two
integrals of the fair variance that share no code with the product) and behaviour (messages).
"""

from __future__ import annotations

import math
from collections.abc import Callable
from itertools import pairwise
from typing import Any

import numpy as np
import numpy.typing as npt
import pandas as pd
import pytest
from scipy import integrate

from backtest import Market, Volatility
from backtest.errors import MarketError, OverlayError
from backtest.volatility import (
    FLAT,
    INDEX,
    MILD,
    SMILE_LADDER,
    STEEP,
    FlatSmile,
    ImpliedSeries,
    RealisedVolatility,
    SSVISmile,
)
from backtest.volatility.smile import fair_variance

Array = npt.NDArray[np.float64]
AnySmile = FlatSmile | SSVISmile

GENTLE = SSVISmile(rho=-0.3, eta=1.2, gamma=0.25)
RIGHT = SSVISmile(rho=0.5, eta=1.05, gamma=0.5)  # wings to the other side
SMILES = {**SMILE_LADDER, "gamma of a quarter": GENTLE, "rho above zero": RIGHT}


def market(vols: dict[str, Any], days: int = 4, close: Any = 100.0) -> Market:
    index = pd.bdate_range("2021-01-04", periods=days)
    return Market.from_frame(pd.DataFrame({"close": close, **vols}, index=index))


def at_the_money(volatility: Volatility, on: Market, day: list[int], tau_days: list[float]) -> Array:
    """Total variances at ``x = 0``."""
    tau = np.array(tau_days) / 365.0
    return volatility.on(on).slice(np.array(day), tau).total_variance(np.zeros(len(day)))


# ---------------------------------------------------------------- smiles


@pytest.mark.parametrize(
    ("smile", "theta", "x", "expected"),
    [
        # theta = 1/3: sqrt(theta (1 + theta)) = 2/3, so phi = 1.5; 1 - rho^2 = .64
        # phi x = 1.2: sqrt(.6^2 + .64) = 1,     w = 1/6 (1 - .72 + 1)    = .64/3
        pytest.param(SSVISmile(rho=-0.6, eta=1.0, gamma=0.5), 1 / 3, 0.8, 0.64 / 3, id="call wing"),
        # phi x = -.9: sqrt(1.5^2 + .64) = 1.7,  w = 1/6 (1 + .54 + 1.7)  = .54
        pytest.param(SSVISmile(rho=-0.6, eta=1.0, gamma=0.5), 1 / 3, -0.6, 0.54, id="put wing"),
        pytest.param(SSVISmile(rho=-0.6, eta=1.0, gamma=0.5), 1 / 3, 0.0, 1 / 3, id="at the money"),
        # theta = 1, gamma = 1/4: phi = eta / 2^(3/4), with eta = 2^(-1/4) one half
        pytest.param(SSVISmile(rho=-0.6, eta=2**-0.25, gamma=0.25), 1.0, 2.4, 0.64, id="gamma 1/4, call wing"),
        pytest.param(SSVISmile(rho=-0.6, eta=2**-0.25, gamma=0.25), 1.0, -1.8, 1.62, id="gamma 1/4, put wing"),
        # no correlation: even in x. phi = 1.5, phi x = .75: sqrt(.5625 + 1) = 1.25, w = 1/6 (1 + 1.25) = .375
        pytest.param(SSVISmile(rho=0.0, eta=1.0, gamma=0.5), 1 / 3, 0.5, 0.375, id="rho nil, above"),
        pytest.param(SSVISmile(rho=0.0, eta=1.0, gamma=0.5), 1 / 3, -0.5, 0.375, id="rho nil, below"),
        pytest.param(FLAT, 0.09, -0.7, 0.09, id="flat"),
    ],
)
def test_total_variance_by_hand(smile: AnySmile, theta: float, x: float, expected: float) -> None:
    assert float(smile.slice(np.array(theta)).total_variance(np.array(x))) == pytest.approx(expected, rel=1e-14)


@pytest.mark.parametrize("smile", SMILES.values(), ids=SMILES)
def test_slices_broadcast_and_leave_their_arguments(smile: AnySmile) -> None:
    theta, x = np.array([0.01, 0.04, 0.0]), np.array([[-0.2], [0.1]])
    found = smile.slice(theta).total_variance(x)
    assert found.shape == (2, 3)
    assert found[1, 0] == float(smile.slice(theta[0]).total_variance(x[1, 0]))
    assert (theta.tolist(), x.tolist()) == ([0.01, 0.04, 0.0], [[-0.2], [0.1]])
    # on the day of expiry no variance is left (the wings of a power law die slowest), and nothing is nan
    assert (found[:, 2] <= 1e-100).all()


def test_the_ladder() -> None:
    parameters = {name: (s.rho, s.eta, s.gamma) for name, s in SMILE_LADDER.items() if isinstance(s, SSVISmile)}
    assert parameters == {"mild": (-0.6, 0.55, 0.5), "index": (-0.6, 1.1, 0.5), "steep": (-0.75, 1.14, 0.5)}
    assert list(SMILE_LADDER) == ["flat", "mild", "index", "steep"]
    assert [smile.name for smile in (FLAT, MILD, INDEX, STEEP)] == list(SMILE_LADDER)
    assert GENTLE.name == "rho -0.3, eta 1.2, gamma 0.25"
    assert Volatility().smile is INDEX


@pytest.mark.parametrize(
    ("rho", "eta", "gamma", "message"),
    [
        (-1.0, 1.0, 0.5, "rho is -1; a smile takes rho above -1 and below 1"),
        (1.2, 1.0, 0.5, "rho is 1.2; a smile takes rho above -1 and below 1"),
        (-0.6, 0.0, 0.5, "eta is 0; a smile takes eta above 0 (use the flat smile for none)"),
        (-0.6, 1.0, 0.0, "gamma is 0; a smile takes gamma above 0 and at most 0.5"),
        (-0.6, 1.0, 0.51, "gamma is 0.51; a smile takes gamma above 0 and at most 0.5"),
        # 1.3 x 1.6 = 2.08
        (-0.6, 1.3, 0.5, "eta (1 + |rho|) is 2.08; a smile takes at most 2, above it the wings allow arbitrage"),
        (0.6, 1.3, 0.5, "eta (1 + |rho|) is 2.08; a smile takes at most 2, above it the wings allow arbitrage"),
    ],
)
def test_smiles_that_are_not_admissible(rho: float, eta: float, gamma: float, message: str) -> None:
    with pytest.raises(OverlayError) as caught:
        SSVISmile(rho=rho, eta=eta, gamma=gamma)
    assert str(caught.value) == message
    assert caught.value.field == "smile"


def test_smiles_on_the_boundary_are_admissible() -> None:
    assert SSVISmile(rho=0.0, eta=2.0, gamma=0.5).eta * 1.0 == 2.0
    assert SSVISmile(rho=-0.6, eta=1.25, gamma=1e-3).eta * 1.6 == 2.0


@pytest.mark.parametrize("name", ["rho", "eta", "gamma"])
@pytest.mark.parametrize("value", [math.nan, "steep", None], ids=["nan", "text", "nothing"])
def test_smile_parameters_that_are_no_numbers(name: str, value: Any) -> None:
    with pytest.raises(OverlayError, match=rf"^{name} is {value!r}; it takes a number from -1e\+06 to 1e\+06$"):
        SSVISmile(**{"rho": -0.6, "eta": 1.0, "gamma": 0.5, name: value})


# ---------------------------------------------------------------- fair variance


def normal(z: float) -> float:
    return 0.5 * math.erfc(-z / math.sqrt(2.0))


def variance_and_slope(smile: AnySmile, theta: float, x: float) -> tuple[float, float]:
    """Total variance and its derivative by ``x``, from the formula of C7."""
    if isinstance(smile, FlatSmile):
        return theta, 0.0
    rho, phi = smile.rho, smile.eta / (theta**smile.gamma * (1.0 + theta) ** (1.0 - smile.gamma))
    root = math.sqrt((phi * x + rho) ** 2 + 1.0 - rho**2)
    return theta / 2 * (1.0 + rho * phi * x + root), theta / 2 * phi * (rho + (phi * x + rho) / root)


def integral(function: Callable[[float], float], knots: list[float]) -> float:
    pieces = [integrate.quad(function, a, b, epsabs=1e-18, epsrel=1e-13, limit=200)[0] for a, b in pairwise(knots)]
    return math.fsum(pieces)


#: Where to cut the integrals, in at-the-money deviations: beyond the last nothing is left at these variances.
CUTS = [0.0, 0.5, 1.0, 2.0, 3.0, 4.0, 6.0, 8.0, 12.0, 16.0, 24.0, 32.0, 48.0, 64.0, 100.0, 160.0]


def fair_by_options(smile: AnySmile, theta: float) -> float:
    """C7 to the letter: twice the integral of out-of-the-money price over ``K^2``, undiscounted, ``F = 1``."""

    def price_over_square(k: float) -> float:
        stdev = math.sqrt(variance_and_slope(smile, theta, math.log(k))[0])
        d1 = -math.log(k) / stdev + stdev / 2
        d2 = d1 - stdev
        return (normal(d1) - k * normal(d2) if k > 1.0 else k * normal(-d2) - normal(-d1)) / k**2

    above = [math.exp(cut * math.sqrt(theta)) for cut in CUTS]
    return 2.0 * integral(price_over_square, [1.0 / k for k in reversed(above)] + above[1:])


def fair_by_d2(smile: AnySmile, theta: float) -> float:
    """The mean total variance under the normal law of ``d2`` (Gatheral 2006, *The Volatility Surface*, chapter 11)."""

    def weighted(x: float) -> float:
        w, slope = variance_and_slope(smile, theta, x)
        d2 = -x / math.sqrt(w) - math.sqrt(w) / 2
        change = -1.0 / math.sqrt(w) + x * slope / (2.0 * w**1.5) - slope / (4.0 * math.sqrt(w))
        return math.exp(-(d2**2) / 2) / math.sqrt(2.0 * math.pi) * w * -change

    above = [cut * math.sqrt(theta) for cut in CUTS]
    return integral(weighted, [-x for x in reversed(above)] + above[1:])


# 2% and 20% over 30 days, 20% over a year, 100% over a year
THETAS = {"2% a month": 0.02**2 * 30 / 365, "20% a month": 0.04 * 30 / 365, "20% a year": 0.04, "100% a year": 1.0}


@pytest.mark.parametrize("theta", THETAS.values(), ids=THETAS)
@pytest.mark.parametrize("smile", SMILES.values(), ids=SMILES)
def test_fair_variance(smile: AnySmile, theta: float) -> None:
    found = float(fair_variance(smile, theta))
    assert found == pytest.approx(fair_by_options(smile, theta), rel=1e-12)
    assert found == pytest.approx(fair_by_d2(smile, theta), rel=1e-12)


def test_fair_variance_of_a_flat_smile_is_the_variance() -> None:
    thetas = np.array([[1e-6, 1e-3], [0.1, 2.0]])
    np.testing.assert_allclose(fair_variance(FLAT, thetas), thetas, rtol=1e-12)
    np.testing.assert_array_equal(FLAT.atm_variance_of_swap(thetas), thetas)


@pytest.mark.parametrize("smile", SMILES.values(), ids=SMILES)
def test_conversion_and_back(smile: AnySmile) -> None:
    # quotes from 3% to 300%, tenors from a week to two years
    swap = np.geomspace(0.03, 3.0, 40)[:, np.newaxis] ** 2 * np.array([7, 30, 93, 365, 730]) / 365
    theta = smile.atm_variance_of_swap(swap)
    np.testing.assert_allclose(fair_variance(smile, theta), swap, rtol=1e-12)
    assert (np.diff(theta, axis=0) > 0).all()


def test_conversion_passes_missing_quotes() -> None:
    found = INDEX.atm_variance_of_swap(np.array([np.nan, 0.01]))
    assert np.isnan(found).tolist() == [True, False]


# ---------------------------------------------------------------- quotes on a market


@pytest.mark.parametrize("quote", [0.10, 0.20, 0.40])
def test_a_variance_swap_index_lies_a_fifth_above_at_the_money(quote: float) -> None:
    """C7: by about a fifth under the index-like smile; the vol found gives the quote back at its own 30 days."""
    volatility = Volatility(smile=INDEX, quote="variance swap")
    theta = float(at_the_money(volatility, market({"vol": quote}), [2], [30])[0])
    assert fair_by_options(INDEX, theta) == pytest.approx(quote**2 * 30 / 365, rel=1e-12)
    assert 1.19 < quote / math.sqrt(theta * 365 / 30) < 1.22


@pytest.mark.parametrize(
    ("smile", "quote"),
    [pytest.param(INDEX, "at the money", id="at the money"), pytest.param(FLAT, "variance swap", id="flat smile")],
)
def test_a_quote_that_is_the_at_the_money_vol(smile: AnySmile, quote: str) -> None:
    found = at_the_money(Volatility(smile=smile, quote=quote), market({"vol": [0.1, 0.2, 0.3, 0.4]}), [1, 3], [30, 91])
    np.testing.assert_allclose(found, [0.04 * 30 / 365, 0.16 * 91 / 365], rtol=1e-14)


def test_each_tenor_is_converted_at_its_own_tenor() -> None:
    quotes = market({"vol_30": 0.2, "vol_365": 0.25})
    theta = at_the_money(Volatility(smile=STEEP, quote="variance swap"), quotes, [0, 0], [30, 365])
    for found, swap in zip(theta, (0.04 * 30 / 365, 0.0625)):
        assert fair_by_options(STEEP, float(found)) == pytest.approx(swap, rel=1e-12)


@pytest.mark.parametrize("tenor", [9, 30, 93, 365])
@pytest.mark.parametrize(
    ("smile", "within"),
    [*((smile, 1e-11) for smile in SMILES.values()), (SSVISmile(rho=-0.97, eta=1.0, gamma=0.5), 1e-8)],
    ids=[*SMILES, "nearly one-sided"],
)
def test_a_variance_swap_quote_against_direct_integration(smile: AnySmile, within: float, tenor: int) -> None:
    """The integral of C7, done numerically with the vol that a market's quote became, gives the quote back."""
    quotes = [0.09, 0.2, 0.45, 0.6]
    on = market({f"vol_{tenor}": quotes})
    theta = at_the_money(Volatility(smile=smile, quote="variance swap"), on, [0, 1, 2, 3], [tenor] * 4)
    for quote, found in zip(quotes, theta):
        assert fair_by_options(smile, float(found)) == pytest.approx(quote**2 * tenor / 365, rel=within)


# vols of 20%, 30% and 25% at 30, 90 and 180 days: total variances, times 365, of 1.2, 8.1 and 11.25
TERMS = {"vol_30": 0.20, "vol_90": [0.30, 0.30, 0.30, 0.20], "vol_180": 0.25}


@pytest.mark.parametrize(
    ("tau_days", "expected"),
    [
        pytest.param(0, 0.0, id="no time"),
        pytest.param(15, 0.04 * 15, id="before the first, flat"),
        pytest.param(30, 1.2, id="the first"),
        pytest.param(45, 1.2 + 6.9 / 4, id="a quarter of the way"),
        pytest.param(60, 4.65, id="half way"),
        pytest.param(90, 8.1, id="the second"),
        pytest.param(120, 8.1 + 3.15 / 3, id="a third of the way"),
        pytest.param(180, 11.25, id="the last"),
        pytest.param(720, 0.0625 * 720, id="beyond the last, flat"),
    ],
)
def test_total_variance_is_linear_between_tenors(tau_days: float, expected: float) -> None:
    found = at_the_money(Volatility(smile=INDEX), market(TERMS), [1], [tau_days])
    assert found[0] == pytest.approx(expected / 365, rel=1e-13, abs=1e-250)


def test_days_and_tenors_go_together() -> None:
    """Each day with its own time; a slice of days is the days in it. On the last, 90 days are at 20%: 3.6."""
    bound = Volatility(smile=INDEX).on(market(TERMS))
    tau, x = np.array([15.0, 60.0, 120.0, 60.0]) / 365, np.zeros(4)
    expected = np.array([0.6, 4.65, 9.15, (1.2 + 3.6) / 2]) / 365
    np.testing.assert_allclose(bound.slice(np.arange(4), tau).total_variance(x), expected, rtol=1e-13)
    np.testing.assert_array_equal(
        bound.slice(slice(0, 4), tau).total_variance(x), bound.slice(np.arange(4), tau).total_variance(x)
    )
    np.testing.assert_allclose(
        bound.slice(slice(2, 4), tau[:2]).total_variance(x[:2]), [0.6 / 365, 2.4 / 365], rtol=1e-13
    )


def test_the_smile_lies_on_the_interpolated_variance() -> None:
    # the call wing worked above: theta 1/3, x = .8; a vol of 57.735% for a year
    smile = SSVISmile(rho=-0.6, eta=1.0, gamma=0.5)
    bound = Volatility(smile=smile).on(market({"vol_180": 3**-0.5, "vol_730": 3**-0.5}))
    found = bound.slice(np.array([1]), np.array([1.0])).total_variance(np.array([0.8]))
    assert found[0] == pytest.approx(0.64 / 3, rel=1e-14)


def test_days_without_every_tenor() -> None:
    quotes = market({"vol_30": [np.nan, 0.2, 0.2, 0.2], "vol_90": [0.2, np.nan, 0.2, np.nan]})
    bound = Volatility().on(quotes)
    assert bound.first_day == 2
    assert (bound.missing(0, 3), bound.missing(2, 2), bound.missing(2, 3)) == (0, None, 3)
    nothing = Volatility(source=RealisedVolatility(window=10)).on(market({}))
    assert nothing.first_day == 4


# ---------------------------------------------------------------- the agreement


def test_source_unless_given() -> None:
    assert isinstance(Volatility().source_for(market({"vol": 0.2})), ImpliedSeries)
    assert Volatility().source_for(market({})) == RealisedVolatility(window=63, markup=1.0)
    chosen = RealisedVolatility(window=21)
    assert Volatility(source=chosen).source_for(market({"vol": 0.2})) is chosen


def test_implied_vols_of_a_history_without_any() -> None:
    with pytest.raises(MarketError) as caught:
        Volatility(source=ImpliedSeries()).on(market({}))
    assert str(caught.value) == "the history has no implied vols: load a vol file, or use realised volatility"


def test_shifts_are_in_vol_points() -> None:
    volatility = Volatility(put_shift=2.0, call_shift=-1.5)
    assert (volatility.shift("put"), volatility.shift("call")) == (0.02, -0.015)


@pytest.mark.parametrize(
    ("make", "field", "message"),
    [
        (
            lambda: Volatility(quote="atm"), "quote",
            "quote is 'atm'; it takes one of: at the money, variance swap",
        ),
        (
            lambda: Volatility(smile="index"), "smile",  # type: ignore[arg-type]
            "smile is 'index'; give one of the ladder or an SSVISmile",
        ),
        (
            lambda: Volatility(put_shift=101.0), "put_shift",
            "put_shift is 101.0; it takes a number from -100 to 100 vol points",
        ),
        (
            lambda: Volatility(call_shift=math.nan), "call_shift",
            "call_shift is nan; it takes a number from -100 to 100 vol points",
        ),
        (
            lambda: RealisedVolatility(window=1), "window",
            "window is 1; it takes a whole number from 2 to 2520 trading days",
        ),
        (
            lambda: RealisedVolatility(window=21.0), "window",  # type: ignore[arg-type]
            "window is 21.0; it takes a whole number from 2 to 2520 trading days",
        ),
        (
            lambda: RealisedVolatility(markup=0.0), "markup",
            "markup is 0.0; it takes a number from 0.01 to 10 (a factor)",
        ),
    ],
    ids=["quote", "smile", "put shift", "call shift", "window", "window no whole number", "markup"],
)  # fmt: skip
def test_arguments_that_make_no_sense(make: Callable[[], object], field: str, message: str) -> None:
    with pytest.raises(OverlayError) as caught:
        make()
    assert str(caught.value) == message
    assert caught.value.field == field
