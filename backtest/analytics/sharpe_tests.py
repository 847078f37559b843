"""Is the difference between two Sharpe ratios more than luck (Ledoit and Wolf 2008, C13)."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy.special import ndtr, ndtri

from ..volatility.realised import TRADING_DAYS
from .performance import sharpe_ratio

Array = npt.NDArray[np.float64]

#: Fewer periods than this and no standard error is given.
FEWEST_PERIODS = 60
#: Singular values of the prewhitening matrix, and first autocorrelations, are kept below this.
LARGEST_PERSISTENCE = 0.97
#: A daily deviation from the Sharpe ratios under this (in units of the returns' own deviation) is rounding.
NO_DEVIATION = 1e-10


@dataclass(frozen=True, slots=True, kw_only=True)
class SharpeDifference:
    """Sharpe ratio of a less that of b; annual, save ``p_value`` (two-sided) and ``level``.

    All NaN, with a plain ``reason``, where they cannot be had.
    """

    difference: float
    standard_error: float
    low: float
    high: float
    p_value: float
    level: float
    reason: str | None = None


def ledoit_wolf_sharpe_difference(
    excess_a: Array, excess_b: Array, *, level: float = 0.90, periods_per_year: float = TRADING_DAYS
) -> SharpeDifference:
    """Test of equal Sharpe ratios that allows for fat tails, correlation and serial dependence.

    Ledoit and Wolf (2008), "Robust performance hypothesis testing with the Sharpe ratio", Journal of Empirical
    Finance 15(5), section 3.1: the delta method on the first two moments of both series, their long-run covariance
    from :func:`long_run_error`. The interval and the p-value are the normal ones.

    Parameters
    ----------
    excess_a, excess_b : ndarray, shape (period,)
        Returns less the cash return, on the same days.
    level : float
        Coverage of the interval.
    periods_per_year : float
        Difference, error and interval are times its square root (1: per period), as in C11.

    Examples
    --------
    >>> flat = ledoit_wolf_sharpe_difference(np.zeros(100), np.zeros(100))
    >>> flat.difference, flat.reason
    (nan, 'an excess return that does not vary has no Sharpe ratio')
    """
    excess = np.stack([np.asarray(excess_a, dtype=np.float64), np.asarray(excess_b, dtype=np.float64)])
    reason = _why_not(excess)
    if reason is not None:
        return _without(reason, level)
    annual = float(np.sqrt(periods_per_year))
    ratios = sharpe_ratio(excess) / np.sqrt(TRADING_DAYS) * annual
    difference = float(ratios[0] - ratios[1])
    error = annual * _moment_error(excess, signs=np.array([1.0, -1.0]))
    if error == 0.0 and abs(difference) > NO_DEVIATION * annual:
        return _without("the two series leave nothing to judge their difference by", level)
    reach = float(ndtri(0.5 + level / 2.0)) * error
    return SharpeDifference(
        difference=difference,
        standard_error=error,
        low=difference - reach,
        high=difference + reach,
        p_value=float(2.0 * ndtr(-abs(difference) / error)) if error > 0 else 1.0,
        level=level,
    )


def sharpe_standard_error(excess: Array, *, serial: bool = True, periods_per_year: float = TRADING_DAYS) -> float:
    """Standard error of one Sharpe ratio, annual; NaN where it cannot be had.

    Lo (2002), "The statistics of Sharpe ratios", Financial Analysts Journal 58(4): by generalised moments (his
    appendix) with serial dependence as in :func:`long_run_error`, or with ``serial=False`` for independent
    returns of any distribution, which for normal ones is his equation 9, ``sqrt((1 + SR^2/2) / T)``.
    """
    excess = np.asarray(excess, dtype=np.float64)[np.newaxis]
    if _why_not(excess) is not None:
        return float("nan")
    return float(np.sqrt(periods_per_year)) * _moment_error(excess, signs=np.ones(1), serial=serial)


def long_run_error(deviations: Array, gradient: Array) -> float:
    """Standard error of ``gradient`` times the means of serially dependent series.

    Prewhitened quadratic-spectral estimator: a first-order vector autoregression whose singular values are kept
    under 0.97 (Andrews and Monahan 1992, Econometrica 60(4), section 3), then the kernel of Andrews (1991),
    Econometrica 59(3), equation 2.7, with the bandwidth of his equations 6.2 and 6.4 (first-order autoregressions,
    equal weights), and ``T / (T - k)`` for the ``k`` means that were estimated (Ledoit and Wolf 2008, section 3.1).

    Parameters
    ----------
    deviations : ndarray, shape (series, period)
        The series less their means. Equal weights in the bandwidth want them of like scale.
    gradient : ndarray, shape (series,)
    """
    count, periods = deviations.shape
    before, now = deviations[:, :-1], deviations[:, 1:]
    left, singular, right = np.linalg.svd(np.linalg.lstsq(before.T, now.T, rcond=None)[0].T)
    memory = (left * np.minimum(singular, LARGEST_PERSISTENCE)) @ right
    whitened = now - memory @ before
    # only one combination of the recoloured covariance is wanted, so the kernel can be laid on that combination
    combined = np.linalg.solve(np.eye(count) - memory.T, gradient) @ whitened
    length = combined.size
    power = np.abs(np.fft.rfft(combined, 2 * length)) ** 2
    autocovariances = np.fft.irfft(power, 2 * length)[:length] / length
    weights = quadratic_spectral_weights(length, andrews_bandwidth(whitened))
    variance = autocovariances[0] + 2.0 * float(np.sum(weights[1:] * autocovariances[1:]))
    return float(np.sqrt(max(variance, 0.0) * length / (length - count) / periods))


def quadratic_spectral_weights(count: int, bandwidth: float) -> Array:
    """Kernel weights of lags 0 to ``count - 1``; Andrews (1991), equation 2.7."""
    weights = np.zeros(count)
    weights[0] = 1.0
    if bandwidth > 0:
        angle = 1.2 * np.pi * np.arange(1, count) / bandwidth
        weights[1:] = 3.0 / angle**2 * (np.sin(angle) / angle - np.cos(angle))
    return weights


def andrews_bandwidth(series: Array) -> float:
    """Bandwidth of the quadratic-spectral kernel, in periods; Andrews (1991), equations 6.2 and 6.4.

    Shape ``(series, period)``; each is taken for a first-order autoregression, all weigh the same.
    """
    before, now = series[:, :-1], series[:, 1:]
    energy = np.sum(before * before, axis=-1)
    rho = np.divide(np.sum(before * now, axis=-1), energy, out=np.zeros_like(energy), where=energy > 0)
    rho = np.clip(rho, -LARGEST_PERSISTENCE, LARGEST_PERSISTENCE)
    spread = np.mean((now - rho[:, np.newaxis] * before) ** 2, axis=-1) ** 2
    level = float(np.sum(spread / (1.0 - rho) ** 4))
    curvature = float(np.sum(4.0 * rho**2 * spread / (1.0 - rho) ** 8))
    return 1.3221 * (curvature / level * series.shape[-1]) ** 0.2 if level > 0 else 0.0


def _without(reason: str, level: float) -> SharpeDifference:
    nan = float("nan")
    return SharpeDifference(
        difference=nan, standard_error=nan, low=nan, high=nan, p_value=nan, level=level, reason=reason
    )


def _moment_error(excess: Array, *, signs: Array, serial: bool = True) -> float:
    """Standard error per period of the signed sum of Sharpe ratios; shape of ``excess`` is ``(series, period)``."""
    # in units of its own deviation a series weighs the same whether quoted in decimals or percent
    scaled = excess / np.std(excess, axis=-1, keepdims=True)
    mean, square = np.mean(scaled, axis=-1), np.mean(scaled**2, axis=-1)
    cube = (square - mean**2) ** 1.5
    gradient = np.concatenate([signs * square / cube, -0.5 * signs * mean / cube])
    deviations = np.concatenate([scaled - mean[:, np.newaxis], scaled**2 - square[:, np.newaxis]])
    spread = float(np.std(gradient @ deviations))
    if spread < NO_DEVIATION:
        return 0.0
    return long_run_error(deviations, gradient) if serial else spread / float(np.sqrt(excess.shape[-1]))


def _why_not(excess: Array) -> str | None:
    """Why there is no standard error, in words for the reader; None when there is one."""
    periods = excess.shape[-1]
    if periods < FEWEST_PERIODS:
        return f"{periods} returns are too few for a standard error; at least {FEWEST_PERIODS} are needed"
    if not np.isfinite(excess).all():
        return "some returns are missing"
    if not np.isfinite(sharpe_ratio(excess)).all():
        return "an excess return that does not vary has no Sharpe ratio"
    return None
