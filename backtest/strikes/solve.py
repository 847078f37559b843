"""Roots of many functions at once: Chandrupatla's bracketing method, all of them in one array.

Source: Chandrupatla (1997), "A new hybrid quadratic/bisection algorithm for finding the zero of a nonlinear
function without using derivatives", Advances in Engineering Software 28.
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import numpy.typing as npt

Array = npt.NDArray[np.float64]

#: Half-width of the last bracket: strikes are looked for as logarithms, so this is relative.
TOLERANCE = 1e-15
#: Bisection alone would need about 55 steps from the widest bracket.
MOST_STEPS = 120


def solve(
    function: Callable[[Array], Array], low: Array, high: Array, *, ends: tuple[Array, Array] | None = None
) -> Array:
    """A root of each function between ``low`` and ``high``; NaN where their ends do not bracket one.

    Parameters
    ----------
    function : callable
        Gives the values of all functions at an array of the same shape as ``low``.
    low, high : ndarray
        Ends of the brackets, same shape.
    ends : tuple of ndarray, optional
        Values at ``low`` and ``high``, where they are known; the first step then follows the line between them.

    Examples
    --------
    >>> solve(lambda x: x * x - np.array([4.0, 9.0]), np.zeros(2), np.full(2, 10.0)).round(12).tolist()
    [2.0, 3.0]
    """
    # names of the paper: the newest point a, the end b across the root from it, the point c before
    a, b = high.astype(np.float64), low.astype(np.float64)
    with np.errstate(all="ignore"):
        value_b, value_a = ends if ends is not None else (function(b), function(a))
        bracketed = np.sign(value_a) * np.sign(value_b) <= 0.0
        c, value_c = a, value_a
        share = np.full(a.shape, 0.5)
        if ends is not None:
            share = np.clip(np.nan_to_num(value_a / (value_a - value_b), nan=0.5), 0.01, 0.99)
        best = np.where(np.abs(value_a) < np.abs(value_b), a, b)
        done = ~bracketed | (value_a == 0.0) | (value_b == 0.0)
        for _ in range(MOST_STEPS):
            if done.all():
                break
            tried = a + share * (b - a)
            value = function(tried)
            same = np.sign(value) == np.sign(value_a)
            c, value_c = np.where(same, a, b), np.where(same, value_a, value_b)
            b, value_b = np.where(same, b, a), np.where(same, value_b, value_a)
            a, value_a = tried, value
            nearest = np.where(np.abs(value_a) < np.abs(value_b), a, b)
            best = np.where(done, best, nearest)
            least = TOLERANCE * (1.0 + np.abs(nearest)) / np.abs(b - a)
            done |= (least > 0.5) | (value_a == 0.0) | (value_b == 0.0)
            place, height = (a - b) / (c - b), (value_a - value_b) / (value_c - value_b)
            # where the three points make a parabola on its side that stays in the bracket, its root, else the middle
            curved = (height**2 < place) & ((1.0 - height) ** 2 < 1.0 - place)
            inverse = value_a / (value_b - value_a) * value_c / (value_b - value_c) + (c - a) / (b - a) * value_a / (
                value_c - value_a
            ) * value_b / (value_c - value_b)
            share = np.clip(np.where(curved, inverse, 0.5), least, 1.0 - least)
            share = np.where(np.isfinite(share), share, 0.5)
    return np.where(bracketed, best, np.nan)
