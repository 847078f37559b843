"""Sharpe ratios after a search (C13).

Rung: published value (Lo 2002; the worked examples of Bailey and Lopez de Prado, whose inputs are from memory and
whose results were recomputed), independent library (scipy, statsmodels, simulation) and behaviour.
"""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy import stats
from statsmodels.tsa.arima_process import arma_acovf  # type: ignore[import-untyped]

from backtest.analytics.selection import DeflatedSharpe, deflated_sharpe, lo_annualisation, probabilistic_sharpe

NAN, INF = float("nan"), float("inf")


@pytest.mark.parametrize(
    ("skewness", "kurtosis", "printed"), [(-2.448, 10.164, 0.9134), (0.0, 3.0, 0.9817)], ids=["skewed", "normal"]
)
def test_probabilistic_sharpe_as_published(skewness: float, kurtosis: float, printed: float) -> None:
    # Bailey and Lopez de Prado (2012), 24 months of a hedge fund index; inputs from memory, results recomputed
    found = probabilistic_sharpe(0.458, periods=24, skewness=skewness, kurtosis=kurtosis)
    assert found == pytest.approx(printed, abs=5e-5)


@pytest.mark.parametrize(("trials", "printed"), [(100, 0.9004), (46, 0.9505)])
def test_deflated_sharpe_as_published(trials: int, printed: float) -> None:
    # Bailey and Lopez de Prado (2014): 2.5 a year on 250 days, five years; inputs from memory, results recomputed
    found = deflated_sharpe(
        2.5 / math.sqrt(250), periods=1250, trials=trials, trial_variance=0.5 / 250, skewness=-3.0, kurtosis=10.0
    )
    assert found.probability == pytest.approx(printed, abs=5e-5)
    if trials == 100:
        assert found.hurdle == pytest.approx(0.1132, abs=5e-5)


@pytest.mark.parametrize(("rho", "printed"), [(0.2, 2.879), (0.5, 2.121), (-0.2, 4.171)], ids=str)
def test_annualisation_as_published(rho: float, printed: float) -> None:
    # Lo (2002), twelve months; recomputed
    assert lo_annualisation(rho, 12) == pytest.approx(printed, abs=5e-4)


@pytest.mark.parametrize("rho", [-0.95, -0.2, 0.0, 0.5, 0.99, 1 - 1e-9])
@pytest.mark.parametrize("periods", [1, 2, 12, 252])
def test_annualisation_is_the_spread_of_a_sum(rho: float, periods: int) -> None:
    # mean and variance of the sum of so many returns, by the covariance matrix of statsmodels
    covariance = arma_acovf([1.0, -rho], [1.0], periods) if abs(rho) < 0.999 else rho ** np.arange(periods)
    matrix = covariance[np.abs(np.subtract.outer(np.arange(periods), np.arange(periods)))] / covariance[0]
    assert lo_annualisation(rho, periods) == pytest.approx(periods / np.sqrt(matrix.sum()), rel=1e-10)


def test_probability_is_that_of_a_t_like_score() -> None:
    # Phi((.1 - .04) sqrt(99) / sqrt(1 + .5 .1 + (5 - 1)/4 .01)) = Phi(.596992/sqrt(1.06)) = Phi(.579849)
    found = probabilistic_sharpe(0.1, periods=100, hurdle=0.04, skewness=-0.5, kurtosis=5.0)
    assert found == pytest.approx(stats.norm.cdf(0.06 * np.sqrt(99 / 1.06)), rel=1e-14)
    assert probabilistic_sharpe(0.04, periods=100, hurdle=0.04) == 0.5


@pytest.mark.parametrize("trials", [2, 10, 100, 5000])
def test_hurdle_is_the_best_of_lucky_trials(trials: int) -> None:
    # the mean of the largest of N normal draws, by integrating x dPhi(x)^N; the formula is asymptotic: within 8% for
    # two, 1% for a hundred
    exact = stats.norm.expect(lambda x: trials * x * stats.norm.cdf(x) ** (trials - 1), lb=-10, ub=10)
    found = deflated_sharpe(0.1, periods=100, trials=trials, trial_variance=0.04)
    assert found.hurdle == pytest.approx(0.2 * exact, rel={2: 0.08, 10: 0.03}.get(trials, 0.01))
    assert found.probability == probabilistic_sharpe(0.1, periods=100, hurdle=found.hurdle)


def test_one_trial_or_equal_trials_need_no_hurdle() -> None:
    plain = probabilistic_sharpe(0.1, periods=100, skewness=-1.0, kurtosis=6.0)
    for trials, spread in ((1, 0.3), (50, 0.0)):
        found = deflated_sharpe(0.1, periods=100, trials=trials, trial_variance=spread, skewness=-1.0, kurtosis=6.0)
        assert found == DeflatedSharpe(hurdle=0.0, probability=plain)


def test_ever_more_trials_raise_the_hurdle() -> None:
    # 1 - 1/N is 1 in binary beyond 1e16; Phi^-1 of 1/N is not
    hurdles = [deflated_sharpe(0.1, periods=100, trials=10**k, trial_variance=1.0).hurdle for k in range(0, 31, 2)]
    assert (np.diff(hurdles) > 0.3).all()
    assert hurdles[-1] == pytest.approx(stats.norm.isf(1e-30), rel=0.03)


@pytest.mark.parametrize(
    "settings",
    [
        {"periods": 1}, {"periods": 0}, {"sharpe": NAN}, {"sharpe": INF}, {"hurdle": NAN}, {"skewness": NAN},
        {"kurtosis": INF}, {"skewness": 2.0, "kurtosis": 4.9}, {"sharpe": 1.0, "skewness": 2.0, "kurtosis": 5.0},
    ],
    ids=str,
)  # fmt: skip
def test_no_probability_and_no_warning(settings: dict[str, float]) -> None:
    # the last but one: kurtosis is at least 1 + skewness^2; the last: a two-point law whose score has no error at all
    settings = {"sharpe": np.float64(0.1), "periods": 100, **settings}
    assert np.isnan(probabilistic_sharpe(settings.pop("sharpe"), **settings))  # type: ignore[arg-type]


def test_moments_on_the_edge_of_what_is_possible_count() -> None:
    assert 0.5 < probabilistic_sharpe(0.1, periods=100, skewness=-3.0, kurtosis=10.0 - 1e-12) < 1


@pytest.mark.parametrize(
    "settings",
    [{"trials": 0}, {"trial_variance": -1e-9}, {"trial_variance": NAN}, {"trials": 1, "trial_variance": INF}],
    ids=str,
)
def test_no_hurdle_and_no_warning(settings: dict[str, float]) -> None:
    found = deflated_sharpe(0.1, **{"periods": 100, "trials": 10, "trial_variance": 0.01, **settings})  # type: ignore[arg-type]
    assert np.isnan([found.hurdle, found.probability]).all()


@pytest.mark.parametrize(
    ("rho", "periods"), [(1.0, 12), (-1.0, 12), (1.5, 12), (NAN, 12), (0.2, 0), (-1 + 1e-16, 12)], ids=str
)
def test_no_annualisation_and_no_warning(rho: float, periods: int) -> None:
    assert np.isnan(lo_annualisation(rho, periods))
