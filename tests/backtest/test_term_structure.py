"""The mean-reverting term structure of a single vol (C7).

Rung: identity (numbers worked by hand, limits, no look-ahead bit for bit), independent library (pandas' rolling mean of
ten years; scipy's quadrature of the expected variance) and behaviour (messages, the caution that goes away).
"""

from __future__ import annotations

import math
from collections.abc import Callable
from typing import Any

import numpy as np
import numpy.typing as npt
import pandas as pd
import pytest
from scipy import integrate

from backtest import Leg, Market, Overlay, PercentOfSpot, Volatility, replay
from backtest.engine.checks import long_term_warning
from backtest.errors import MarketError, OverlayError
from backtest.volatility import FLAT, INDEX, ImpliedSurface, RealisedVolatility
from backtest.volatility.term_structure import long_run_variance, mean_reverting

Array = npt.NDArray[np.float64]


def market(vols: dict[str, Any], days: int = 4, close: Any = 100.0) -> Market:
    index = pd.bdate_range("2001-01-01", periods=days)
    return Market.from_frame(pd.DataFrame({"close": close, **vols}, index=index))


def theta(volatility: Volatility, on: Market, day: list[int], tau_days: list[float]) -> Array:
    """At-the-money total variances."""
    tau = np.array(tau_days) / 365.0
    return volatility.on(on).slice(np.array(day), tau).total_variance(np.zeros(len(day)))


REVERTING = Volatility(smile=FLAT, term_structure="mean reverting")


def test_by_hand() -> None:
    # squared vols 4, 9, 16 and 1 percent: means so far 4, 6.5, 29/3, 7.5 percent. kappa 2: half a year is kappa T = 1
    on = market({"vol": [0.2, 0.3, 0.4, 0.1]})
    left = 1.0 - math.exp(-1.0)
    means = [0.04, 0.065, 0.29 / 3, 0.075]
    expected = [0.5 * (m + (v - m) * left) for m, v in zip(means, (0.04, 0.09, 0.16, 0.01))]
    np.testing.assert_allclose(theta(REVERTING, on, [0, 1, 2, 3], [182.5] * 4), expected, rtol=1e-13)
    # kappa 4 and a quarter of a year the same share, of half the time; a slice of days is the days in it
    quick = Volatility(smile=FLAT, term_structure="mean reverting", kappa=4.0)
    np.testing.assert_allclose(theta(quick, on, [3, 1], [91.25] * 2), [expected[3] / 2, expected[1] / 2], rtol=1e-13)
    sliced = REVERTING.on(on).slice(slice(1, 3), np.array([0.5, 0.5])).total_variance(np.zeros(2))
    np.testing.assert_allclose(sliced, expected[1:3], rtol=1e-13)


def test_at_the_tenor_of_the_quote_the_variance_is_nearer_to_the_mean() -> None:
    """What sigma is: the vol of the shortest options. 30 days of kappa 2 leave 92.2% of the gap."""
    on = market({"vol": [0.2, 0.4, 0.3, 0.3]})
    share = (theta(REVERTING, on, [1], [30])[0] * 365 / 30 - 0.10) / (0.16 - 0.10)
    assert share == pytest.approx((1 - math.exp(-2 * 30 / 365)) / (2 * 30 / 365), rel=1e-12)
    assert share == pytest.approx(0.922, abs=5e-4)


@pytest.mark.parametrize("vol", [0.1, 0.3])
def test_limits(vol: float) -> None:
    """The vol itself for the shortest options, the mean for the longest, and total variance always rises."""
    on = market({"vol": [0.2, 0.2, 0.2, vol]})
    mean = (3 * 0.04 + vol**2) / 4
    short, long = theta(REVERTING, on, [3, 3], [1e-4, 365e7])
    assert short * 365e4 == pytest.approx(vol**2, rel=1e-6)
    assert long / 1e7 == pytest.approx(mean, rel=1e-6)
    assert theta(REVERTING, on, [3], [0])[0] <= 1e-250
    days = np.linspace(1, 4000, 200)
    assert (np.diff(theta(REVERTING, on, [3] * 200, days.tolist())) > 0).all()


def test_a_vol_that_never_changes_has_no_term_structure() -> None:
    on = market({"vol": 0.25})
    flat = theta(Volatility(smile=FLAT), on, [0, 3], [30, 900])
    np.testing.assert_allclose(theta(REVERTING, on, [0, 3], [30, 900]), flat, rtol=1e-14)


@pytest.mark.parametrize("tau", [0.02, 0.25, 1.0, 5.0])
def test_it_adds_up_the_expected_variance(tau: float) -> None:
    for variance, mean, kappa in ((0.09, 0.04, 2.0), (0.01, 0.05, 0.5), (0.04, 0.04, 7.0)):

        def expected(t: float, v: float = variance, m: float = mean, k: float = kappa) -> float:
            return m + (v - m) * math.exp(-k * t)

        by_quadrature = integrate.quad(expected, 0.0, tau, epsabs=0.0, epsrel=1e-13)[0]
        found = float(mean_reverting(np.array(variance), np.array(mean), kappa, np.array(tau)))
        assert found == pytest.approx(by_quadrature, rel=1e-12)


# ---------------------------------------------------------------- the long-run mean


def long_vols(days: int = 4_000) -> Array:
    rng = np.random.default_rng(3)
    vols = 0.2 * np.exp(np.cumsum(rng.normal(0, 0.03, days)) * 0.3)
    vols[rng.random(days) < 0.05] = np.nan
    vols[:7] = np.nan
    return vols


def test_ten_years_against_pandas() -> None:
    """Fifteen years with gaps: from the eleventh on the mean forgets its beginning."""
    vols = long_vols()
    on = market({"vol": vols}, len(vols))
    by_date = pd.Series(vols**2, index=pd.DatetimeIndex(on.dates))
    expected = by_date.rolling(pd.Timedelta(days=3652.5), min_periods=1).mean()
    found = long_run_variance(on.day_number, vols**2)
    np.testing.assert_allclose(found, expected, rtol=1e-12)
    assert np.isnan(found[:7]).all()
    assert np.isfinite(found[7:]).all()
    assert abs(found[-1] / np.nanmean(vols**2) - 1) > 0.01


def test_a_day_ten_years_back() -> None:
    # 3,652 days before is inside the ten years of 365.25 days, 3,653 before is not
    for gap, expected in ((3652, 0.03), (3653, 0.02)):
        assert long_run_variance(np.array([0, gap]), np.array([0.04, 0.02]))[1] == pytest.approx(expected, rel=1e-15)


def test_no_look_ahead() -> None:
    vols = long_vols(300)
    changed = vols.copy()
    changed[200:] *= 1.7
    day = np.flatnonzero(~np.isnan(vols))
    found = [theta(REVERTING, market({"vol": v}, 300), day.tolist(), [200.0] * len(day)) for v in (vols, changed)]
    np.testing.assert_array_equal(found[0][day < 200], found[1][day < 200])
    assert (found[0][day >= 200] != found[1][day >= 200]).all()


# ---------------------------------------------------------------- with the rest of the agreement


def test_a_variance_swap_quote_is_converted_first() -> None:
    """sigma and the mean are of at-the-money vols, not of quotes: 30 days as priced without a term structure."""
    vols = [0.2, 0.35, 0.15, 0.25]
    on = market({"vol": vols})
    plain = Volatility(smile=INDEX, quote="variance swap")
    atm = theta(plain, on, [0, 1, 2, 3], [30] * 4) * 365 / 30
    assert (atm < 0.8 * np.square(vols)).all()
    mean = atm.mean()
    found = theta(Volatility(quote="variance swap", term_structure="mean reverting"), on, [3], [365])
    assert found[0] == pytest.approx(mean + (atm[3] - mean) * (1 - math.exp(-2)) / 2, rel=1e-12)


def test_the_smile_lies_on_it() -> None:
    on = market({"vol": [0.2, 0.3, 0.4, 0.1]})
    at_once = Volatility(smile=INDEX, term_structure="mean reverting").on(on)
    tau, x = np.array([0.5]), np.array([-0.2])
    by_hand = np.array([0.5 * (0.065 + 0.025 * (1 - math.exp(-1)))])
    expected = INDEX.slice(by_hand).total_variance(x)
    np.testing.assert_allclose(at_once.slice(np.array([1]), tau).total_variance(x), expected, rtol=1e-13)


def test_realised_vol_with_its_markup() -> None:
    close = 100 * np.exp(np.cumsum(np.random.default_rng(1).normal(0, 0.01, 60)))
    on = market({}, 60, close)
    source = RealisedVolatility(window=10, markup=1.2, markup_points=1.0)
    squared = source.quotes(on)[1][0] ** 2
    mean = np.nanmean(squared[:41])
    bound = Volatility(source=source, smile=FLAT, term_structure="mean reverting").on(on)
    assert (bound.first_day, bound.missing(10, 59)) == (10, None)
    found = bound.slice(np.array([40]), np.array([1.0])).total_variance(np.zeros(1))
    assert found[0] == pytest.approx(mean + (squared[40] - mean) * (1 - math.exp(-2)) / 2, rel=1e-12)


def test_the_caution_goes_away() -> None:
    """A year's option off a 30-day vol is warned about, unless the vol is given a term structure."""
    on = market({"vol": 0.2}, 600)
    year = Overlay(legs=(Leg(position="long", right="put", strike=PercentOfSpot(95), roll="year"),))
    caution = long_term_warning(on, year, Volatility())
    assert caution is not None
    assert caution.startswith("an option of 12 months is priced off a single vol of 30 days")
    assert long_term_warning(on, year, Volatility(term_structure="mean reverting")) is None


def test_in_quiet_times_long_puts_cost_more() -> None:
    """The point of it: years at 25%, then at 10%; a put of a year struck in the quiet is dearer."""
    vols = np.where(np.arange(1_500) < 1_000, 0.25, 0.10)
    on = market({"vol": vols}, 1_500)
    year = Overlay(legs=(Leg(position="long", right="put", strike=PercentOfSpot(95), roll="year"),))
    plain, reverting = (
        replay(on, year, volatility=v, start="2005-12-01").legs[0].premium[0]
        for v in (Volatility(smile=FLAT), REVERTING)
    )
    assert reverting > 1.5 * plain


def test_flat_unless_asked_for() -> None:
    assert Volatility() == Volatility(term_structure="flat", kappa=2.0)
    assert hash(Volatility()) == hash(Volatility(term_structure="flat"))
    assert Volatility(term_structure="mean reverting") != Volatility()
    assert {REVERTING: 1}[Volatility(smile=FLAT, term_structure="mean reverting", kappa=2.0)] == 1


# ---------------------------------------------------------------- messages


def test_several_tenors() -> None:
    on = market({"vol_30": 0.2, "vol_93": 0.21})
    with pytest.raises(MarketError) as caught:
        REVERTING.on(on)
    assert str(caught.value) == (
        'term_structure = "mean reverting" is for a single vol, and the history has vols of 30, 93 days, which are a '
        "term structure: leave it out"
    )


@pytest.mark.parametrize(
    ("make", "field", "message"),
    [
        (
            lambda: Volatility(term_structure="sloping"), "term_structure",
            "term_structure is 'sloping'; it takes one of: flat, mean reverting",
        ),
        (
            lambda: Volatility(kappa=0.0), "kappa",
            "kappa is 0.0; it takes a number from 0.01 to 100 a year",
        ),
        (
            lambda: Volatility(source=ImpliedSurface(), term_structure="mean reverting"), "term_structure",
            "term_structure is 'mean reverting', and a quoted surface has a vol for each strike and expiry: leave it "
            "out",
        ),
        (
            lambda: Volatility(source=ImpliedSurface(), quote="variance swap"), "quote",
            "quote is 'variance swap', and a quoted surface has a vol for each strike and expiry: leave it out",
        ),
    ],
    ids=["term structure", "kappa", "surface", "quote of a surface"],
)  # fmt: skip
def test_arguments_that_make_no_sense(make: Callable[[], object], field: str, message: str) -> None:
    with pytest.raises(OverlayError) as caught:
        make()
    assert str(caught.value) == message
    assert caught.value.field == field
