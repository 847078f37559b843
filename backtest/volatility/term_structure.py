"""A term structure for a single at-the-money vol: the variance returns to its own long-run mean (C7).

``theta(T) / T = L + (sigma^2 - L) (1 - exp(-kappa T)) / (kappa T)``. Under it the variance expected at time T is
``L + (sigma^2 - L) exp(-kappa T)``, and ``theta(T)`` is what that adds up to.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

Array = npt.NDArray[np.float64]

#: How far back the long-run mean looks, in days: ten years.
LONG_RUN_DAYS = 10 * 365.25


def long_run_variance(day_number: npt.NDArray[np.int64], variance: Array) -> Array:
    """The mean variance of the ten years up to and including each day, ``L``; shorter where the history is.

    Parameters
    ----------
    day_number : ndarray of int, shape (day,)
        Calendar days, increasing.
    variance : ndarray, shape (day,)
        Annual variances; days without one (NaN) are left out of the mean.

    Returns
    -------
    ndarray, shape (day,)
        NaN until the first variance.

    Examples
    --------
    >>> long_run_variance(np.array([0, 1, 2, 3654]), np.array([np.nan, 0.01, 0.03, 0.05])).round(4)
    array([ nan, 0.01, 0.02, 0.04])
    """
    known = ~np.isnan(variance)
    total = np.concatenate([[0.0], np.cumsum(np.where(known, variance, 0.0))])
    count = np.concatenate([[0], np.cumsum(known)])
    first = np.searchsorted(day_number, day_number - LONG_RUN_DAYS, side="right")
    days = count[1:] - count[first]
    return np.divide(total[1:] - total[first], days, out=np.full(len(variance), np.nan), where=days > 0)


def mean_reverting(variance: Array, long_run: Array, kappa: float, tau_years: Array) -> Array:
    """At-the-money total variance ``theta(T)`` of each time to expiry; zero at no time.

    Parameters
    ----------
    variance, long_run : ndarray
        ``sigma^2`` and ``L``, annual, broadcast with ``tau_years``.
    kappa : float
        Speed per year: of a gap to the mean ``exp(-kappa)`` is left after one.

    Examples
    --------
    >>> float(mean_reverting(np.array(0.09), np.array(0.04), 2.0, np.array(0.5)).round(6))
    0.035803
    """
    return long_run * tau_years + (variance - long_run) * (-np.expm1(-kappa * tau_years) / kappa)
