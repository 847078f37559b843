"""Which block length a dependent bootstrap of a series needs (C13)."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

Array = npt.NDArray[np.float64]

#: An autocorrelation counts as nil within ``BAND sqrt(log10(n) / n)``, and this many in a row at least must be nil.
BAND, FEWEST_NIL = 2.0, 5


def optimal_block_length(series: Array) -> float:
    """Mean block length for the stationary bootstrap of a series' mean, in days.

    Parameters
    ----------
    series : ndarray, shape (day,)
        Its scale and level do not matter.

    Returns
    -------
    float
        Not rounded, and under one for a series with next to no autocorrelation; never above the smaller of
        ``3 sqrt(n)`` and ``n / 3``, rounded up. NaN for a series that is constant, not finite, or shorter than the
        lags that have to be looked at (11 days).

    Notes
    -----
    Politis and White (2004), "Automatic block-length selection for the dependent bootstrap", Econometric Reviews
    23(1), section 3.2 for the lag at which the autocorrelations die out, with the constants of the correction by
    Patton, Politis and White (2009), Econometric Reviews 28(4). Their open choices (autocorrelations over the
    overlapping stretch of both series, the largest lag) are those of ``arch.bootstrap``, to compare with.

    Examples
    --------
    >>> optimal_block_length(np.ones(100))
    nan
    >>> round(optimal_block_length(np.sin(np.arange(100.0) ** 2)), 2)
    1.87
    """
    series = np.asarray(series, dtype=np.float64)
    days = series.size
    run = max(FEWEST_NIL, int(np.log10(max(days, 1))))
    last_lag = int(np.ceil(np.sqrt(days))) + run
    if days < last_lag + 2 or not np.isfinite(series).all():
        return float("nan")
    centred = series - np.mean(series)
    size = float(np.max(np.abs(centred)))
    if not size > 1e-14 * float(np.max(np.abs(series))):
        return float("nan")
    centred /= size  # the answer has no unit, and the squares of tiny numbers stay clear of underflow
    products = np.array([centred[lag:] @ centred[: days - lag] for lag in range(last_lag + 1)])
    longest = float(np.ceil(min(3.0 * np.sqrt(days), days / 3.0)))
    kept = _last_lag_that_matters(centred, products, run)
    return min(block_length_formula(products[: kept + 1] / days, days), longest)


def block_length_formula(autocovariances: Array, days: int) -> float:
    """Block length that minimises the mean squared error of the bootstrap variance of a mean.

    ``(2 g^2 / d)^(1/3) n^(1/3)`` with ``d = 2 s^2``, ``g`` the sum over all lags of ``h(k/m) |k| R(k)``, ``s`` that of
    ``h(k/m) R(k)`` and ``h`` the flat-top window ``min(1, 2 (1 - |k/m|))``. Politis and White (2004),
    section 3.2; ``d`` for the stationary bootstrap from Patton, Politis and White (2009).

    Parameters
    ----------
    autocovariances : ndarray, shape (lag,)
        From lag 0 to ``m``.
    days : int
        Length of the sample.
    """
    last = len(autocovariances) - 1
    lags = np.arange(1, last + 1)
    weighted = 2.0 * np.minimum(1.0, 2.0 * (1.0 - lags / last)) * autocovariances[1:]
    slope, level = float(np.sum(lags * weighted)), float(autocovariances[0] + np.sum(weighted))
    if level == 0.0:  # over-differenced to the last digit: no length is long enough
        return float("inf")
    return float((slope / level) ** 2 * days) ** (1.0 / 3.0)


def _last_lag_that_matters(centred: Array, products: Array, run: int) -> int:
    """``m``: twice the first lag that begins a row of ``run`` nil autocorrelations, or the largest lag if less."""
    days, last_lag = centred.size, len(products) - 1
    squares = np.concatenate([[0.0], np.cumsum(centred * centred)])
    lags = np.arange(last_lag + 1)
    # each sum leaves out lag + 1 values, not lag: the published program does, and so does the library we compare with
    late, early = squares[-1] - squares[lags + 1], squares[days - lags - 1]
    scale = np.sqrt(late * early)
    correlation = np.divide(np.abs(products), scale, out=np.full(last_lag + 1, np.inf), where=scale > 0)
    nil = correlation < BAND * np.sqrt(np.log10(days) / days)
    windows = np.lib.stride_tricks.sliding_window_view(nil[:last_lag], run).all(axis=-1)
    found = int(np.argmax(windows)) if windows.any() else None
    return last_lag if found is None else min(2 * max(found, 1), last_lag)
