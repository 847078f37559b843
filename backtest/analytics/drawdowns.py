"""Drawdowns on daily closes (C11)."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

Array = npt.NDArray[np.float64]


def drawdown_path(wealth: Array) -> Array:
    """``W / running max(W) - 1`` along the last axis; zero or negative, same shape.

    Examples
    --------
    >>> drawdown_path(np.array([1.0, 2.0, 1.5, 3.0]))
    array([ 0.  ,  0.  , -0.25,  0.  ])
    """
    return wealth / np.maximum.accumulate(wealth, axis=-1) - 1.0


@dataclass(frozen=True, slots=True, kw_only=True)
class Drawdown:
    """The deepest fall from a peak; positions in the path.

    ``recovery`` is the first day at or above the peak again, None if there is none; without any fall all
    positions are None.
    """

    depth: float
    peak: int | None
    trough: int | None
    recovery: int | None


def deepest_drawdown(wealth: Array) -> Drawdown:
    """Maximum drawdown of one path, shape ``(day,)``, with its peak, trough and recovery.

    The first of equally deep ones; the peak is the last day at the level it falls from.

    Examples
    --------
    >>> deepest_drawdown(np.array([1.0, 2.0, 1.0, 1.5, 2.0, 1.9]))
    Drawdown(depth=-0.5, peak=1, trough=2, recovery=4)
    """
    path = drawdown_path(wealth)
    if not np.isfinite(path).all():
        return Drawdown(depth=float("nan"), peak=None, trough=None, recovery=None)
    trough = int(np.argmin(path))
    depth = float(path[trough])
    if depth == 0.0:
        return Drawdown(depth=0.0, peak=None, trough=None, recovery=None)
    before = wealth[: trough + 1]
    peak = trough - int(np.argmax(before[::-1]))
    back = np.flatnonzero(wealth[trough:] >= wealth[peak])
    return Drawdown(depth=depth, peak=peak, trough=trough, recovery=trough + int(back[0]) if back.size else None)
