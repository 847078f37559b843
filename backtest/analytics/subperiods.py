"""Figures of parts of a history for many paths at once: what was found in one part, does it hold in the other?

A history is cut into blocks of equally many days; growth and the sums of the excess return and of its square over
each block are kept, and the Sharpe ratio of any union of blocks follows from them.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from ..volatility.realised import TRADING_DAYS
from .performance import SMALLEST_SPREAD, daily_excess

Array = npt.NDArray[np.float64]

BLOCKS = 8


def block_edges(days: int, blocks: int = BLOCKS) -> npt.NDArray[np.intp]:
    """Positions that cut ``days`` daily returns into blocks as equal as can be, shape ``(block + 1,)``.

    Fewer returns than blocks give one block a return.

    Examples
    --------
    >>> block_edges(10, 4).tolist()
    [0, 2, 5, 7, 10]
    """
    blocks = max(1, min(blocks, days))
    return np.arange(blocks + 1) * days // blocks


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class BlockSums:
    """Per path and block; shapes ``(overlay, block)``, and ``(block,)`` for ``returns``.

    ``growth`` of wealth over the block, sums of the daily excess return and of its square, and the number of
    returns.
    """

    growth: Array
    total: Array
    square: Array
    returns: npt.NDArray[np.intp]

    def rows(self, rows: slice) -> BlockSums:
        """Some of the paths, as views."""
        return BlockSums(
            growth=self.growth[rows], total=self.total[rows], square=self.square[rows], returns=self.returns
        )

    def fill(self, wealth: Array, excess: Array, working: Array) -> None:
        """Write the sums of some paths, over as many of their last days as the blocks have.

        Parameters
        ----------
        wealth, excess : ndarray, shapes (overlay, day) and (overlay, day - 1)
        working : ndarray, shape (overlay, day - 1)
            Is overwritten.
        """
        edges = np.concatenate([[0], np.cumsum(self.returns)])
        last, working = excess[:, -edges[-1] :], working[:, -edges[-1] :]
        np.add.reduceat(last, edges[:-1], axis=1, out=self.total)
        np.multiply(last, last, out=working)
        np.add.reduceat(working, edges[:-1], axis=1, out=self.square)
        at_edge = wealth[:, wealth.shape[1] - 1 - edges[-1] + edges]
        np.divide(at_edge[:, 1:], at_edge[:, :-1], out=self.growth)

    def sharpe(self, chosen: slice | npt.NDArray[np.intp]) -> Array:
        """Sharpe ratio over the chosen blocks together, shape ``(overlay,)``; NaN without variation (C11)."""
        count = int(self.returns[chosen].sum())
        total, square = self.total[:, chosen].sum(axis=1), self.square[:, chosen].sum(axis=1)
        if count < 2:
            return np.full(total.shape, np.nan)
        mean = total / count
        # sums about zero: a spread within the rounding of the squares is none
        variance = (square - count * mean * mean) / (count - 1)
        varies = variance > np.maximum(SMALLEST_SPREAD**2, 1e-13 * square / count)
        spread = np.sqrt(np.where(varies, variance, 1.0))
        return np.where(varies, mean / spread, np.nan) * np.sqrt(TRADING_DAYS)


def empty_sums(overlays: int, edges: npt.NDArray[np.intp]) -> BlockSums:
    """Sums to be filled, for blocks between ``edges`` as :func:`block_edges` gives them."""
    growth, total, square = np.full((3, overlays, len(edges) - 1), np.nan)
    return BlockSums(growth=growth, total=total, square=square, returns=np.diff(edges))


def block_sums(wealth: Array, *, rate_return: Array, edges: npt.NDArray[np.intp]) -> BlockSums:
    """Growth and sums over blocks of days.

    Parameters
    ----------
    wealth : ndarray, shape (overlay, day)
        Growth of 1; NaN where a path has ended.
    rate_return : ndarray, shape (day,)
        Return on cash over each day; the first is not used.
    edges : ndarray of int, shape (block + 1,)
        As :func:`block_edges` gives them for ``day - 1`` returns.
    """
    sums = empty_sums(len(wealth), edges)
    excess = daily_excess(wealth, rate_return)
    sums.fill(wealth, excess, np.empty_like(excess))
    return sums
