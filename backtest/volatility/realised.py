"""Realised volatility from past prices (C7a). Trailing windows only: the value of day t uses days up to t.

Six estimators. Those from closes see the whole day; Parkinson, Garman-Klass and Rogers-Satchell see the hours of
trading only, so they lie below the others by what happens overnight; Yang-Zhang adds the night. All that read highs and
lows take the price to be watched without a pause: seen at intervals its range is smaller, and they come out low.

Sources: Parkinson (1980), "The extreme value method for estimating the variance of the rate of return"; Garman and
Klass (1980), "On the estimation of security price volatilities from historical data"; Rogers and Satchell (1991),
"Estimating variance from high, low and closing prices"; Yang and Zhang (2000), "Drift-independent volatility
estimation based on high, low, open, and close prices".
"""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt
from scipy.signal import lfilter

from ..bars import bars, check_bars

if TYPE_CHECKING:
    from ..market import Market

Array = npt.NDArray[np.float64]

#: Trading days in a year for annualising daily figures (C1).
TRADING_DAYS = 252.0

#: What each estimator reads besides the close.
ESTIMATORS: dict[str, tuple[str, ...]] = {
    "close": (),
    "ewma": (),
    "parkinson": ("high", "low"),
    "garman-klass": ("open", "high", "low"),
    "rogers-satchell": ("open", "high", "low"),
    "yang-zhang": ("open", "high", "low"),
}


def realised_vol(market: Market, estimator: str, window: int, half_life: int | None = None) -> Array:
    """Decimal annual vol of each day by the named estimator, shape ``(day,)``; NaN until the window is full.

    Raises
    ------
    MarketError
        If the market lacks the open, high or low that the estimator reads.
    """
    held = bars(market, ESTIMATORS[estimator], _why(estimator))
    close = market.spot
    if estimator == "close":
        return close_to_close(close, window)
    if estimator == "ewma":
        assert half_life is not None
        return exponentially_weighted(close, half_life, window)
    if estimator == "parkinson":
        return parkinson(held["high"], held["low"], window)
    by_name = {"garman-klass": garman_klass, "rogers-satchell": rogers_satchell, "yang-zhang": yang_zhang}
    return by_name[estimator](held["open"], held["high"], held["low"], close, window)


def check_windows(market: Market, estimator: str, window: int, first: int, last: int) -> None:
    """Raise MarketError unless the bars read for the days from ``first`` to ``last`` are real ones.

    Refused: bars that cannot be; windows in which more than 80% of the opens just repeat the close before, or of the
    bars have no range.
    """
    if needed := ESTIMATORS[estimator]:
        check_bars(market, needed, window=window, first=first, last=last, why=_why(estimator))


def _why(estimator: str) -> str:
    return f'estimator = "{estimator}"'


def close_to_close(close: Array, window: int = 63) -> Array:
    """Sample standard deviation of log returns, annualised with 252 days.

    Parameters
    ----------
    close : ndarray, shape (day,)
        Positive closes.
    window : int
        Log returns in the window, at least 2; the one of day t is the last.

    Returns
    -------
    ndarray, shape (day,)
        Decimal annual vol; NaN until the window is full, on the first ``window`` days.

    Examples
    --------
    >>> close_to_close(np.array([100.0, 110.0, 99.0, 108.9]), window=3).round(4)
    array([   nan,    nan,    nan, 1.8392])
    """
    vol = np.full(close.shape, np.nan)
    if len(close) > window:
        returns = np.diff(np.log(close))
        windows = np.lib.stride_tricks.sliding_window_view(returns, window)
        vol[window:] = windows.std(axis=-1, ddof=1) * np.sqrt(TRADING_DAYS)
    return vol


def exponentially_weighted(close: Array, half_life: int, window: int = 63) -> Array:
    """Squared log returns, each weighing half of the one ``half_life`` trading days after it; annualised.

    With ``decay = 2^(-1/half_life)`` the variance follows ``v(t) = decay v(t-1) + (1 - decay) r(t)^2``. It starts on
    the day on which the window is full, at the plain mean of the first ``window`` squared returns. The mean return is
    taken as zero, as is usual for this estimator.

    Parameters
    ----------
    close : ndarray, shape (day,)
    half_life : int
        Trading days.
    window : int
        Log returns of the start.

    Examples
    --------
    Half-life 1 after returns of 1% and 1%, then 3%: the variance is (1 + 9) / 2 squared percents.

    >>> daily = exponentially_weighted(np.exp([0.0, 0.01, 0.02, 0.05]), half_life=1, window=2) / np.sqrt(252)
    >>> (daily**2 * 1e4).round(6)
    array([nan, nan,  1.,  5.])
    """
    vol = np.full(close.shape, np.nan)
    if len(close) > window:
        squares = np.diff(np.log(close)) ** 2
        decay = 0.5 ** (1.0 / half_life)
        start = squares[:window].mean()
        later, _ = lfilter([1.0 - decay], [1.0, -decay], squares[window:], zi=[decay * start])
        vol[window:] = np.sqrt(np.concatenate([[start], later]) * TRADING_DAYS)
    return vol


def parkinson_bar(high: Array, low: Array) -> Array:
    """Variance of one bar by Parkinson (1980): ``ln(H/L)^2 / (4 ln 2)``, for a price without drift.

    Examples
    --------
    >>> round(float(parkinson_bar(np.array(105.0), np.array(98.0))), 8)
    0.00171681
    """
    return np.log(high / low) ** 2 / (4.0 * math.log(2.0))


def garman_klass_bar(open_: Array, high: Array, low: Array, close: Array) -> Array:
    """Variance of one bar by Garman and Klass (1980): ``ln(H/L)^2 / 2 - (2 ln 2 - 1) ln(C/O)^2``.

    Their practical estimator, for a price without drift.

    Examples
    --------
    >>> round(float(garman_klass_bar(*map(np.array, (100.0, 105.0, 98.0, 103.0)))), 8)
    0.00204249
    """
    return 0.5 * np.log(high / low) ** 2 - (2.0 * math.log(2.0) - 1.0) * np.log(close / open_) ** 2


def rogers_satchell_bar(open_: Array, high: Array, low: Array, close: Array) -> Array:
    """Variance of one bar by Rogers and Satchell (1991): ``ln(H/C) ln(H/O) + ln(L/C) ln(L/O)``, for any drift.

    Examples
    --------
    >>> round(float(rogers_satchell_bar(*map(np.array, (100.0, 105.0, 98.0, 103.0)))), 8)
    0.00194362
    """
    return np.log(high / close) * np.log(high / open_) + np.log(low / close) * np.log(low / open_)


def parkinson(high: Array, low: Array, window: int = 63) -> Array:
    """Parkinson (1980) over a trailing window of bars, annualised; decimal, NaN on the first ``window - 1`` days.

    A bar without a high or a low leaves every window that holds it without a value.
    """
    return _annual(_mean_of_window(parkinson_bar(high, low), window))


def garman_klass(open_: Array, high: Array, low: Array, close: Array, window: int = 63) -> Array:
    """Garman and Klass (1980) over a trailing window of bars; shapes and gaps as for :func:`parkinson`."""
    return _annual(_mean_of_window(garman_klass_bar(open_, high, low, close), window))


def rogers_satchell(open_: Array, high: Array, low: Array, close: Array, window: int = 63) -> Array:
    """Rogers and Satchell (1991) over a trailing window of bars; shapes and gaps as for :func:`parkinson`."""
    return _annual(_mean_of_window(rogers_satchell_bar(open_, high, low, close), window))


def yang_zhang_weight(window: int) -> float:
    """``k = 0.34 / (1.34 + (n + 1) / (n - 1))``, which makes the variance of the estimator least.

    Examples
    --------
    >>> [round(yang_zhang_weight(n), 5) for n in (10, 21, 63, 252)]
    [0.1327, 0.13934, 0.14332, 0.14481]
    """
    return 0.34 / (1.34 + (window + 1) / (window - 1))


def yang_zhang(open_: Array, high: Array, low: Array, close: Array, window: int = 63) -> Array:
    """Yang and Zhang (2000): night, day and Rogers-Satchell together, for any drift; the gaps overnight are in it.

    ``V(night) + k V(open to close) + (1 - k) RS``: the sample variances (ddof 1) of ``ln(O/C before)`` and
    ``ln(C/O)`` and the mean of Rogers and Satchell's, over the same days. NaN on the first ``window`` days, as the
    first night needs a close before it.
    """
    night = np.concatenate([[np.nan], np.log(open_[1:] / close[:-1])])
    k = yang_zhang_weight(window)
    trading = k * _variance_of_window(np.log(close / open_), window)
    trading += (1.0 - k) * _mean_of_window(rogers_satchell_bar(open_, high, low, close), window)
    return _annual(_variance_of_window(night, window) + trading)


def _mean_of_window(values: Array, window: int) -> Array:
    mean = np.full(values.shape, np.nan)
    if len(values) >= window:
        mean[window - 1 :] = np.lib.stride_tricks.sliding_window_view(values, window).mean(axis=-1)
    return mean


def _variance_of_window(values: Array, window: int) -> Array:
    variance = np.full(values.shape, np.nan)
    if len(values) >= window:
        windows = np.lib.stride_tricks.sliding_window_view(values, window)
        variance[window - 1 :] = windows.var(axis=-1, ddof=1)
    return variance


def _annual(variance: Array) -> Array:
    """Decimal annual vol of a daily variance; NaN for one below zero, which only a bar that cannot be gives."""
    return np.sqrt(np.where(variance >= 0.0, variance, np.nan) * TRADING_DAYS)
