"""Sharpe ratios after a search: how likely is skill, given how many rules were looked at (C13)."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from scipy.special import ndtr, ndtri

#: What the last digits of moments and of their sums may be off by.
ROUNDING = 1e-9


@dataclass(frozen=True, slots=True, kw_only=True)
class DeflatedSharpe:
    """``hurdle``: the Sharpe ratio per period that the best of so many trials reaches by luck alone.

    ``probability``: that the true Sharpe ratio of the one chosen is above nil once that is allowed for.
    """

    hurdle: float
    probability: float


def probabilistic_sharpe(
    sharpe: float, *, periods: int, hurdle: float = 0.0, skewness: float = 0.0, kurtosis: float = 3.0
) -> float:
    """Probability that the true Sharpe ratio lies above ``hurdle``.

    Bailey and Lopez de Prado (2012), "The Sharpe ratio efficient frontier", Journal of Risk 15(2):
    ``Phi((SR - hurdle) sqrt(n - 1) / sqrt(1 - skew SR + (kurtosis - 1)/4 SR^2))``.

    Parameters
    ----------
    sharpe, hurdle : float
        Per period, not annual.
    periods : int
        Number of returns.
    skewness, kurtosis : float
        Of the returns; raw kurtosis, 3 for the normal law.

    Returns
    -------
    float
        NaN with fewer than two periods, for figures that are not numbers, and for moments that no distribution has
        (kurtosis is at least one plus the square of the skewness).

    Examples
    --------
    >>> round(probabilistic_sharpe(0.458, periods=24), 4)
    0.9817
    """
    if periods < 2 or not all(map(math.isfinite, (sharpe, hurdle, skewness, kurtosis))):
        return float("nan")
    variance = 1.0 - skewness * sharpe + (kurtosis - 1.0) / 4.0 * sharpe**2
    if kurtosis - 1.0 - skewness**2 < -ROUNDING * kurtosis or not variance > ROUNDING:
        return float("nan")
    return float(ndtr((sharpe - hurdle) * math.sqrt((periods - 1) / variance)))


def deflated_sharpe(
    sharpe: float, *, periods: int, trials: int, trial_variance: float, skewness: float = 0.0, kurtosis: float = 3.0
) -> DeflatedSharpe:
    """:func:`probabilistic_sharpe` against the best Sharpe ratio that luck alone brings in so many trials.

    Bailey and Lopez de Prado (2014), "The deflated Sharpe ratio", Journal of Portfolio Management 40(5):
    ``hurdle = sqrt(V) ((1 - g) Phi^-1(1 - 1/N) + g Phi^-1(1 - 1/(N e)))``, ``g`` Euler's constant; nil for one trial.

    Parameters
    ----------
    sharpe : float
        Of the one chosen, per period.
    periods, skewness, kurtosis
        As for :func:`probabilistic_sharpe`.
    trials : int
        How many independent rules were looked at.
    trial_variance : float
        Variance of their Sharpe ratios, per period.
    """
    if trials < 1 or not 0.0 <= trial_variance < math.inf:
        return DeflatedSharpe(hurdle=float("nan"), probability=float("nan"))
    luck = 0.0
    if trials > 1:  # Phi^-1(1 - x) is -Phi^-1(x), which keeps its digits for many trials
        luck = -(1.0 - np.euler_gamma) * ndtri(1.0 / trials) - np.euler_gamma * ndtri(1.0 / (trials * math.e))
    hurdle = float(math.sqrt(trial_variance) * luck)
    return DeflatedSharpe(
        hurdle=hurdle,
        probability=probabilistic_sharpe(sharpe, periods=periods, hurdle=hurdle, skewness=skewness, kurtosis=kurtosis),
    )


def lo_annualisation(rho: float, periods: int) -> float:
    """Factor from a Sharpe ratio per period to one over ``periods``, for first-order autocorrelated returns.

    Lo (2002), "The statistics of Sharpe ratios", Financial Analysts Journal 58(4):
    ``sqrt(q) (1 + 2 rho/(1 - rho) (1 - (1 - rho^q)/(q (1 - rho))))^(-1/2)``; ``sqrt(q)`` without autocorrelation.
    NaN unless ``-1 < rho < 1`` and ``periods`` is at least 1, and where ``rho`` is so near -1 that nothing is left.

    Examples
    --------
    >>> round(lo_annualisation(0.2, 12), 3)
    2.879
    """
    if not -1.0 < rho < 1.0 or periods < 1:
        return float("nan")
    lags = np.arange(1, periods)
    inflation = 1.0 + 2.0 * float(np.sum((1.0 - lags / periods) * rho**lags))  # keeps its digits for rho close to 1
    return math.sqrt(periods / inflation) if inflation > ROUNDING else float("nan")
