"""Standard errors of Sharpe ratios and of their differences (C13).

Rung: twin (the estimator of Ledoit and Wolf 2008 in plain matrices and loops), independent library (statsmodels, arch),
published value (Lo 2002), closed forms, and behaviour.
"""

from __future__ import annotations

from dataclasses import astuple
from typing import Any

import numpy as np
import numpy.typing as npt
import pytest
from arch.covariance.kernel import QuadraticSpectral
from scipy import stats
from scipy.signal import lfilter
from statsmodels.stats.sandwich_covariance import S_hac_simple  # type: ignore[import-untyped]
from statsmodels.tsa.ar_model import AutoReg  # type: ignore[import-untyped]
from statsmodels.tsa.vector_ar.var_model import VAR  # type: ignore[import-untyped]

from backtest.analytics.performance import sharpe_ratio
from backtest.analytics.sharpe_tests import (
    FEWEST_PERIODS,
    andrews_bandwidth,
    ledoit_wolf_sharpe_difference,
    long_run_error,
    quadratic_spectral_weights,
    sharpe_standard_error,
)

Array = npt.NDArray[np.float64]
NAN = float("nan")


def pair(days: int, seed: int, *, rho: float = 0.0, spells: float = 0.0) -> tuple[Array, Array]:
    """Two correlated series of excess returns with fat tails, autocorrelation and spells of volatility."""
    rng = np.random.default_rng(seed)
    spell = np.exp(spells * lfilter([0.3], [1.0, -0.95], rng.normal(size=days)))
    shocks = 0.01 * spell * rng.standard_t(7, size=(2, days))
    a, b = lfilter([1.0], [1.0, -rho], shocks, axis=1)
    return 0.0004 + a, 0.0002 + 0.4 * a + 0.3 * b


def quadratic_spectral(x: float) -> float:
    """Andrews (1991), equation 2.7."""
    return 25 / (12 * np.pi**2 * x**2) * (np.sin(1.2 * np.pi * x) / (1.2 * np.pi * x) - np.cos(1.2 * np.pi * x))


def parzen(x: float) -> float:
    """Andrews (1991), equation 2.7: the Parzen kernel."""
    return 1 - 6 * x**2 + 6 * x**3 if x <= 0.5 else 2 * (1 - x) ** 3 if x <= 1 else 0.0


def plain_error(a: Array, b: Array, *, kernel: Any = quadratic_spectral) -> float:
    """Ledoit and Wolf (2008), section 3.1: delta method on the four moments, prewhitened kernel estimator.

    Each series in units of its own deviation, as here; four by four matrices, lags summed one by one.
    """
    days = len(a)
    a, b = a / np.std(a), b / np.std(b)
    moments = np.column_stack([a, b, a**2, b**2])
    centred = moments - moments.mean(axis=0)
    mean_a, mean_b, square_a, square_b = moments.mean(axis=0)
    var_a, var_b = square_a - mean_a**2, square_b - mean_b**2
    gradient = np.array(
        [square_a / var_a**1.5, -square_b / var_b**1.5, -mean_a / (2 * var_a**1.5), mean_b / (2 * var_b**1.5)]
    )
    # Andrews and Monahan (1992): VAR(1) without intercept, by least squares, singular values held under .97
    fitted = VAR(centred).fit(1, trend="n").coefs[0]
    left, singular, right = np.linalg.svd(fitted)
    memory = left @ np.diag(np.minimum(singular, 0.97)) @ right
    whitened = np.array([centred[t] - memory @ centred[t - 1] for t in range(1, days)])
    # Andrews (1991), equations 6.4 and 6.2 (1.3221 for this kernel, 2.6614 for Parzen's)
    above = below = 0.0
    for one in whitened.T:
        rho = float(np.clip(AutoReg(one, 1, trend="n").fit().params[0], -0.97, 0.97))
        variance = np.mean((one[1:] - rho * one[:-1]) ** 2)
        above += 4 * rho**2 * variance**2 / (1 - rho) ** 8
        below += variance**2 / (1 - rho) ** 4
    count = len(whitened)
    bandwidth = (1.3221 if kernel is quadratic_spectral else 2.6614) * (above / below * count) ** 0.2
    lags = [kernel(lag / bandwidth) for lag in range(1, count)]
    psi = S_hac_simple(whitened, nlags=count - 1, weights_func=lambda _: np.array([1.0, *lags])) / count
    recolour = np.linalg.inv(np.eye(4) - memory)
    psi = count / (count - 4) * recolour @ psi @ recolour.T
    return float(np.sqrt(gradient @ psi @ gradient / days))


CASES = {
    "independent": pair(300, 1),
    "autocorrelated": pair(700, 2, rho=0.3),
    "reversing": pair(250, 3, rho=-0.4),
    "spells of volatility": pair(1500, 4, rho=0.05, spells=0.8),
    "near a random walk": pair(400, 5, rho=0.995),
    "fewest days": pair(FEWEST_PERIODS, 6),
}


@pytest.mark.parametrize("name", CASES)
def test_against_the_plain_estimator(name: str) -> None:
    a, b = CASES[name]
    error = plain_error(a, b) * np.sqrt(252)
    found = ledoit_wolf_sharpe_difference(a, b)
    assert found.standard_error == pytest.approx(error, rel=1e-8)
    assert found.difference == pytest.approx(float(sharpe_ratio(a) - sharpe_ratio(b)), rel=1e-14)
    half = stats.norm.ppf(0.95) * error
    assert [found.low, found.high] == pytest.approx([found.difference - half, found.difference + half], rel=1e-7)
    assert found.p_value == pytest.approx(2 * stats.norm.sf(abs(found.difference) / error), rel=1e-6)
    assert (found.level, found.reason) == (0.90, None)


@pytest.mark.parametrize("name", ["independent", "autocorrelated", "spells of volatility"])
def test_parzen_kernel_of_the_paper_agrees(name: str) -> None:
    # the authors' other kernel is another estimate of the same thing; on whitened series the two lie close
    a, b = CASES[name]
    found = ledoit_wolf_sharpe_difference(a, b, periods_per_year=1).standard_error
    assert found == pytest.approx(plain_error(a, b, kernel=parzen), rel=0.01)


def test_near_a_random_walk_the_singular_values_are_held() -> None:
    # or the case above would not see it
    a, _ = CASES["near a random walk"]
    assert AutoReg(a - a.mean(), 1, trend="n").fit().params[0] > 0.97


def test_normal_independent_pairs() -> None:
    # Jobson and Korkie (1981) as corrected by Memmel (2003): T var = 2 - 2 rho + (Sa^2 + Sb^2 - 2 Sa Sb rho^2) / 2.
    # Estimated long-run variances scatter: 200,000 pairs bring them within 1%.
    draws = np.random.default_rng(8).normal(size=(2, 200_000))
    a, b = 0.5 + draws[0], 0.2 + 0.6 * draws[0] + 0.8 * draws[1]
    found = ledoit_wolf_sharpe_difference(a, b, periods_per_year=1)
    variance = 2 - 2 * 0.6 + 0.5 * (0.25 + 0.04 - 2 * 0.1 * 0.36)
    assert found.standard_error == pytest.approx(np.sqrt(variance / 200_000), rel=0.01)


@pytest.mark.parametrize(("ratio", "printed"), [(1.5, 0.188), (3.0, 0.303)])
def test_independent_normal_returns_as_published(ratio: float, printed: float) -> None:
    # Lo (2002), table 1: sqrt((1 + SR^2/2)/60). These sixty numbers have the moments of the normal law:
    # mean 0, variance 2 (1/6) 3 = 1, skewness 0, kurtosis 2 (1/6) 9 = 3.
    normal = np.repeat([np.sqrt(3.0), -np.sqrt(3.0), 0.0], [10, 10, 40])
    found = sharpe_standard_error(ratio + normal, serial=False, periods_per_year=1)
    assert found == pytest.approx(printed, abs=5e-4)
    assert found == pytest.approx(np.sqrt((1 + ratio**2 / 2) / 60), rel=1e-13)
    annual = sharpe_standard_error(ratio + normal, serial=False, periods_per_year=12)
    assert annual == pytest.approx(np.sqrt(12) * found, rel=1e-14)


def test_independent_skewed_returns() -> None:
    # any law: T var = 1 - skew SR + (kurtosis - 1) SR^2 / 4; Mertens (2002), from the same moments
    a = stats.skewnorm.rvs(6, loc=0.1, size=500, random_state=3)
    ratio = np.mean(a) / np.std(a)
    variance = 1 - stats.skew(a) * ratio + (stats.kurtosis(a, fisher=False) - 1) / 4 * ratio**2
    found = sharpe_standard_error(a, serial=False, periods_per_year=1)
    assert found == pytest.approx(np.sqrt(variance / 500), rel=1e-12)


@pytest.mark.parametrize("rho", [0.0, 0.6, -0.4])
def test_serial_error_of_an_autoregression(rho: float) -> None:
    # without a mean the Sharpe ratio errs as the mean does: sqrt((1 + rho)/(1 - rho) / T); 100,000 days, within 2%
    a = lfilter([1.0], [1.0, -rho], np.random.default_rng(9).normal(size=100_500))[500:]
    a = a - a.mean()
    exact = np.sqrt((1 + rho) / (1 - rho) / a.size)
    assert sharpe_standard_error(a, periods_per_year=1) == pytest.approx(exact, rel=0.02)
    assert sharpe_standard_error(a, serial=False, periods_per_year=1) == pytest.approx(a.size**-0.5, rel=1e-9)


def test_kernel_weights_against_arch_and_bandwidth_by_hand() -> None:
    series = lfilter([1.0], [1.0, -0.5], np.random.default_rng(10).normal(size=400))
    for bandwidth in (0.7, 3.0, 25.0):
        theirs = QuadraticSpectral(series, bandwidth=bandwidth).kernel_weights
        assert quadratic_spectral_weights(len(theirs), bandwidth) == pytest.approx(np.asarray(theirs), abs=1e-13)
    assert quadratic_spectral_weights(4, 0.0).tolist() == [1.0, 0.0, 0.0, 0.0]
    # 1, 2, 1, 2: rho = (2 + 2 + 2)/(1 + 4 + 1) = 1, held at .97; alone, its spread cancels: 4 .97^2/.03^4 = 4646420
    found = andrews_bandwidth(np.array([[1.0, 2.0, 1.0, 2.0]]))
    assert found == pytest.approx(1.3221 * (4 * 0.97**2 / 0.03**4 * 4) ** 0.2, rel=1e-12)
    # two series weigh by the squares of their variances: 4, 2, 1, .5 has rho .5 and no spread at all
    assert andrews_bandwidth(np.array([[1.0, 2.0, 1.0, 2.0], [4.0, 2.0, 1.0, 0.5]])) == pytest.approx(found, rel=1e-12)
    assert andrews_bandwidth(np.zeros((2, 9))) == 0.0


def test_one_series_against_arch() -> None:
    # the mean of fat-tailed noise: the kernel on the whitened series, undone by 1/(1 - rho)
    series = np.random.default_rng(11).standard_t(6, size=500)
    series = series - series.mean()
    rho = float(AutoReg(series, 1, trend="n").fit().params[0])
    whitened = series[1:] - rho * series[:-1]
    bandwidth = andrews_bandwidth(whitened[np.newaxis])
    variance = float(np.asarray(QuadraticSpectral(whitened, bandwidth=bandwidth, center=False).cov.long_run).item())
    expected = np.sqrt(variance * 499 / 498 / 500) / (1 - rho)
    assert long_run_error(series[np.newaxis], np.ones(1)) == pytest.approx(expected, rel=1e-9)


def test_order_scale_and_units() -> None:
    a, b = CASES["autocorrelated"]
    found, turned = ledoit_wolf_sharpe_difference(a, b), ledoit_wolf_sharpe_difference(b, a)
    assert astuple(turned)[:5] == pytest.approx(
        (-found.difference, found.standard_error, -found.high, -found.low, found.p_value), rel=1e-9
    )
    assert astuple(ledoit_wolf_sharpe_difference(100 * a, 0.01 * b))[:6] == pytest.approx(astuple(found)[:6], rel=1e-9)
    monthly = ledoit_wolf_sharpe_difference(a, b, periods_per_year=12, level=0.5)
    assert monthly.difference == pytest.approx(found.difference * np.sqrt(12 / 252), rel=1e-12)
    assert monthly.p_value == pytest.approx(found.p_value, rel=1e-12)
    half = stats.norm.ppf(0.75) * found.standard_error * np.sqrt(12 / 252)
    assert monthly.high - monthly.low == pytest.approx(2 * half, rel=1e-12)


@pytest.mark.parametrize("factor", [1.0, 0.5, 7.0])
def test_the_same_series_leveraged_is_no_difference(factor: float) -> None:
    a, _ = CASES["spells of volatility"]
    found = ledoit_wolf_sharpe_difference(factor * a, a)
    assert [found.difference, found.low, found.high, found.standard_error] == pytest.approx([0.0] * 4, abs=1e-12)
    assert (found.p_value, found.reason) == (1.0, None)


STEADY = np.random.default_rng(12).normal(size=100)
FLAT = "an excess return that does not vary has no Sharpe ratio"
MISSING = "some returns are missing"


@pytest.mark.parametrize(
    ("a", "b", "reason"),
    [
        (STEADY[:0], STEADY[:0], "0 returns are too few for a standard error; at least 60 are needed"),
        (STEADY[:59], STEADY[:59], "59 returns are too few for a standard error; at least 60 are needed"),
        (np.where(STEADY > 2, np.nan, STEADY), STEADY, MISSING),
        (STEADY, np.where(STEADY > 2, np.inf, STEADY), MISSING),
        (np.zeros(100), STEADY, FLAT),
        (STEADY, np.full(100, 0.1), FLAT),
        (
            np.tile([1.0, -1.0], 50), np.tile([1.1, -0.9], 50),
            "the two series leave nothing to judge their difference by",
        ),
    ],
    ids=["empty", "short", "missing", "infinite", "zero", "constant", "two values"],
)  # fmt: skip
def test_nothing_but_a_reason(a: Array, b: Array, reason: str) -> None:
    found = ledoit_wolf_sharpe_difference(a, b, level=0.8)
    assert np.isnan([found.difference, found.standard_error, found.low, found.high, found.p_value]).all()
    assert (found.level, found.reason) == (0.8, reason)
    for serial in (True, False):
        single = [sharpe_standard_error(x, serial=serial) for x in (a, b)]
        assert np.isnan(single).any() or "two series" in reason


def test_a_single_day_of_movement_has_an_error() -> None:
    # its square is the same series again, so the regressions are singular; no warning, no traceback
    lonely = np.where(np.arange(100) == 50, 0.01, 0.0)
    found = ledoit_wolf_sharpe_difference(lonely, 0.01 * STEADY)
    assert 0 < found.standard_error < np.inf
    assert 0 < sharpe_standard_error(lonely) < np.inf
