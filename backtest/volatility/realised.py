"""Realised volatility from past prices (C7a). Trailing windows only: the value of day t uses days up to t."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

Array = npt.NDArray[np.float64]

#: Trading days in a year for annualising daily figures (C1).
TRADING_DAYS = 252.0


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
