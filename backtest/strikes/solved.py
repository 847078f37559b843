"""Strikes that are solved for: by delta, and by premium (C6).

Both look for ``x = ln(K/F)`` in functions that are nearly straight lines of ``x``, so that a few steps find it; all
rolls of all legs with the same dates are solved in one array.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt
from scipy.special import ndtri

from ..arguments import number
from .solve import solve
from .state import ABOVE_ALL, BELOW_ALL, OpenState, Together

Array = npt.NDArray[np.float64]

#: A solved strike lies between these, in percent of spot.
LOWEST, HIGHEST = 1.0, 1000.0
#: Stands in for a price of nothing where its logarithm is taken.
SMALLEST_PRICE = 1e-250
#: Places at which heights are known before a root is looked for, and legs that are solved in one array.
NODES = 48
LEGS_AT_ONCE = 64


def solve_strikes(height: Callable[[Array], Array], target: Array, state: OpenState, sign: float) -> Array:
    """Strikes at which ``height(x)`` reaches ``target``, shape ``(leg, roll)``, for legs of one right.

    All legs share the heights, so these are first taken at some ``x`` for each roll; every root is then looked for
    between two neighbours.

    Parameters
    ----------
    height : callable
        Of ``x = ln(K/F)``, shape ``(..., roll)``; rises with ``x`` for a put and falls for a call.
    target : ndarray, shape (leg, roll)
    sign : float
        +1 for calls, -1 for puts.

    Returns
    -------
    ndarray
        ``BELOW_ALL`` or ``ABOVE_ALL`` where even the lowest or highest strike is not enough; NaN without a price.
    """
    offset = np.log(state.spot) - state.day.log_forward
    lowest, highest = (np.log(end / 100.0) + offset for end in (LOWEST, HIGHEST))
    reach = np.clip(8.0 * np.nan_to_num(state.day.stdev_at(np.zeros(len(offset)))), 0.02, 20.0)
    inner = np.linspace(-1.0, 1.0, NODES)[:, np.newaxis] * reach
    nodes = np.concatenate([lowest[np.newaxis], np.clip(inner, lowest, highest), highest[np.newaxis]])
    heights = height(nodes)
    strike = np.empty(target.shape)
    for first in range(0, len(target), LEGS_AT_ONCE):
        some = slice(first, first + LEGS_AT_ONCE)
        strike[some] = _between(height, target[some], nodes, heights, state, sign)
    return strike


def _between(
    height: Callable[[Array], Array], target: Array, nodes: Array, heights: Array, state: OpenState, sign: float
) -> Array:
    """The strikes of some legs; ``heights`` are those at the nodes, shape ``(node, roll)``."""
    # how many nodes lie below the root: heights rise for puts and fall for calls
    passed = np.count_nonzero(-sign * heights < -sign * target[:, np.newaxis], axis=1)
    right = np.clip(passed, 1, len(nodes) - 1)
    low, high = np.take_along_axis(nodes, right - 1, axis=0), np.take_along_axis(nodes, right, axis=0)
    ends = [np.take_along_axis(heights, place, axis=0) - target for place in (right - 1, right)]
    found = solve(lambda x: height(x) - target, low, high, ends=(ends[0], ends[1]))
    nowhere = np.where(passed == 0, BELOW_ALL, ABOVE_ALL)
    strike = np.where((passed == 0) | (passed == len(nodes)), nowhere, np.exp(found + state.day.log_forward))
    return np.where(np.isnan(heights).any(axis=0) | np.isnan(target), np.nan, strike)


def by_sign(states: Sequence[OpenState]) -> list[tuple[float, list[int]]]:
    """The legs of each right: +1 for calls, -1 for puts, and their rows."""
    signs = [state.sign for state in states]
    return [(sign, [row for row, one in enumerate(signs) if one == sign]) for sign in dict.fromkeys(signs)]


@dataclass(frozen=True, slots=True)
class Delta(Together):
    """The strike at which the absolute spot delta, under the smile, is ``delta`` (C5, C6)."""

    delta: float

    def __post_init__(self) -> None:
        number("delta", self.delta, least=0.001, most=0.999, unit=" (0.25 is a 25-delta option)")

    @classmethod
    def together(cls, rules: Sequence[Any], states: Sequence[OpenState]) -> Array:
        """Strikes of many delta rules, shape ``(leg, roll)``."""
        day = states[0].day
        strike = np.empty((len(rules), len(day.spot)))
        for sign, rows in by_sign(states):
            # |delta| = growth N(sign d1): where the growth of the yield leaves too little, no strike has it
            wanted = np.array([[rules[row].delta] for row in rows]) / day.growth
            reached = wanted < 1.0
            score = ndtri(np.where(reached, wanted, 0.5))

            def height(x: Array, sign: float = sign) -> Array:
                stdev = day.stdev_at(x)
                return np.asarray(sign * (0.5 * stdev - x / stdev))

            solved = solve_strikes(height, score, states[0], sign)
            strike[rows] = np.where(reached, solved, BELOW_ALL if sign > 0 else ABOVE_ALL)
        return strike


@dataclass(frozen=True, slots=True)
class PremiumPercent(Together):
    """The strike at which the mid premium is ``percent`` percent of spot (C6)."""

    percent: float

    def __post_init__(self) -> None:
        number("premium_percent", self.percent, least=0.001, most=90.0, unit=" (percent of spot)")

    @classmethod
    def together(cls, rules: Sequence[Any], states: Sequence[OpenState]) -> Array:
        """Strikes of many premium rules, shape ``(leg, roll)``."""
        day = states[0].day
        strike = np.empty((len(rules), len(day.spot)))
        for sign, rows in by_sign(states):
            target = np.log(np.array([[rules[row].percent] for row in rows]) / 100.0 * day.spot)

            def height(x: Array, sign: float = sign) -> Array:
                mid = day.value_and_delta(np.exp(x + day.log_forward), sign)[0]
                return np.asarray(np.log(np.maximum(mid, SMALLEST_PRICE)))

            strike[rows] = solve_strikes(height, target, states[0], sign)
        return strike
