"""The headline figures of C11 for many paths at once, in as few passes over memory as they need.

The same figures as :func:`backtest.analytics.performance`, which is the readable way for one path; here the last
axis is time and the first the overlay. Paths are worked on in blocks that fit a core's cache.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt
from numpy.polynomial import Chebyshev

from ..volatility.realised import TRADING_DAYS
from .performance import (
    FEWEST_MONTHS,
    SMALLEST_SPREAD,
    TAIL,
    daily_excess,
    month_ends,
    sharpe_ratio,
    years_between,
)
from .subperiods import BlockSums

Array = npt.NDArray[np.float64]
Dates = npt.NDArray[np.datetime64]

#: Values of a block: with its working copies it stays in a core's second cache.
BLOCK_VALUES = 32_768
#: Figures that :func:`headline_figures` gives, in its order.
HEADLINE = (
    "annual_return",
    "volatility",
    "sharpe",
    "sortino",
    "max_drawdown",
    "calmar",
    "ulcer",
    "beta",
    "alpha",
    "expected_shortfall_monthly",
)
#: Mean and sample deviation of the daily excess return, from which other ratios follow; also given.
MOMENTS = ("excess_mean", "excess_deviation")
#: Shares of stock between which returns of mixes are interpolated, the nodes it takes, and the narrowest ellipse of
#: analyticity for which it is exact to rounding. The span does not depend on who is asked about together with whom.
SHARES = (-0.25, 1.5)
NODES = 48
LEAST_ELLIPSE = 2.3


def headline_figures(wealth: Array, *, hold: Array, rate_return: Array, dates: Dates) -> dict[str, Array]:
    """Figures of many paths over the same days; see :class:`Headline`, which can be used again."""
    return Headline(hold=hold, rate_return=rate_return, dates=dates).figures(wealth)


class Headline:
    """Figures of many paths over the days of one hold.

    Parameters
    ----------
    hold, rate_return : ndarray, shape (day,)
        Growth of 1 of the hold, and the return on cash over each day (the first is not used).
    dates : ndarray of datetime64, shape (day,)
    """

    def __init__(self, *, hold: Array, rate_return: Array, dates: Dates) -> None:
        days = len(hold)
        self._dates, self._count = dates, days - 1
        self._growth_of_cash = 1.0 + rate_return[1:]
        cash, market = rate_return[1:], daily_excess(hold, rate_return)
        self._market, self._cash = market - market.mean(), cash - cash.mean()
        self._market_variation = float(self._market @ self._market)
        self._market_varies = self._market_variation / self._count > SMALLEST_SPREAD**2
        self._market_mean = float(market.mean())
        self._cash_variation = float(self._cash @ self._cash)
        self._ends = month_ends(dates)
        self._rows = max(1, BLOCK_VALUES // days)
        self._excess, self._other = np.empty((self._rows, self._count)), np.empty((self._rows, days))

    def figures(self, wealth: Array, *, blocks: BlockSums | None = None) -> dict[str, Array]:
        """Figures of some paths.

        Parameters
        ----------
        wealth : ndarray, shape (overlay, day)
            Growth of 1; a path may end in NaN, and then has no figures.
        blocks : BlockSums, optional
            Made by :func:`~backtest.analytics.subperiods.empty_sums`: filled with the sums over its blocks of the last
            days, as :func:`~backtest.analytics.subperiods.block_sums` has them, without a further pass.

        Returns
        -------
        dict of str to ndarray, shape (overlay,)
            The figures of ``HEADLINE``, then ``MOMENTS``; NaN where one cannot be had.
        """
        overlays, days = wealth.shape
        made = {name: np.full(overlays, np.nan) for name in HEADLINE + MOMENTS}
        if days < 3:
            return made
        for first in range(0, overlays, self._rows):
            rows = slice(first, first + self._rows)
            for name, values in self._of_rows(wealth[rows], None if blocks is None else blocks.rows(rows)).items():
                made[name][rows] = values
        with np.errstate(invalid="ignore", divide="ignore"):
            made["annual_return"] = _annual(wealth[:, -1] / wealth[:, 0], self._dates)
            falls = made["max_drawdown"] < 0
            np.divide(made["annual_return"], -made["max_drawdown"], out=made["calmar"], where=falls)
        return made

    def _of_rows(self, wealth: Array, blocks: BlockSums | None) -> dict[str, Array]:
        """Figures of a few paths that fit the cache, shape ``(row,)`` each; the sums of their blocks on the way."""
        rows, count = len(wealth), self._count
        excess, other = self._excess[:rows], self._other[:rows]
        np.divide(wealth[:, 1:], wealth[:, :-1], out=excess)
        excess -= self._growth_of_cash
        below = other[:, :count]
        if blocks is not None:
            blocks.fill(wealth, excess, below)
        np.minimum(excess, 0.0, out=below)
        downside = np.sqrt(np.einsum("ij,ij->i", below, below) / count)
        mean = excess.mean(axis=1)
        # squares about the mean: as a difference of two large sums they would not tell a flat path from a calm one
        excess -= mean[:, np.newaxis]
        variation = np.einsum("ij,ij->i", excess, excess)
        # not a matrix product: that may round a row by what else is in the matrix
        with_market = np.einsum("ij,j->i", excess, self._market)
        with_cash = np.einsum("ij,j->i", excess, self._cash)
        spread = np.sqrt(variation / (count - 1))
        # the return is excess and cash together
        whole = np.maximum(variation + 2.0 * with_cash + self._cash_variation, 0.0)
        yearly = np.sqrt(TRADING_DAYS)
        made = {
            "volatility": np.sqrt(whole / (count - 1)) * yearly,
            "sharpe": _ratio(mean, spread) * yearly,
            "sortino": _ratio(mean, downside) * yearly,
            "beta": with_market / self._market_variation if self._market_varies else np.full(rows, np.nan),
        }
        made |= {"excess_mean": mean, "excess_deviation": spread}
        made["alpha"] = TRADING_DAYS * (mean - made["beta"] * self._market_mean)
        np.maximum.accumulate(wealth, axis=1, out=other)
        np.divide(wealth, other, out=other)
        other -= 1.0
        made["max_drawdown"] = other.min(axis=1)
        made["ulcer"] = np.sqrt(np.einsum("ij,ij->i", other, other) / (count + 1))
        made["expected_shortfall_monthly"] = self._monthly_tail(wealth)
        return made

    def _monthly_tail(self, wealth: Array) -> Array:
        at_end = wealth[:, self._ends]
        months = at_end.shape[1] - 1
        if months < FEWEST_MONTHS:
            return np.full(len(wealth), np.nan)
        returns = at_end[:, 1:] / at_end[:, :-1] - 1.0
        worst = int(np.ceil(TAIL * months - 1e-9))
        tail = np.mean(np.partition(returns, worst - 1, axis=1)[:, :worst], axis=1)
        return np.where(np.isfinite(returns).all(axis=1), tail, np.nan)


class SameBetaMixes:
    """Annual return and Sharpe ratio of the mix of each beta, on the days of one hold (C10).

    The Sharpe ratio of ``rf + w (hold - rf)`` is that of the hold, with the sign of ``w``. Its log growth is an
    analytic function of ``w``, interpolated at Chebyshev nodes where that is exact to rounding, else summed.
    """

    def __init__(self, *, hold: Array, rate_return: Array, dates: Dates) -> None:
        self._cash, self._excess, self._dates = rate_return[1:], daily_excess(hold, rate_return), dates
        self._sharpe = float(sharpe_ratio(self._excess))
        self._curve: Chebyshev | None = None
        if _ellipse(*SHARES, self._cash, self._excess) > LEAST_ELLIPSE:
            self._curve = Chebyshev.interpolate(
                lambda shares: np.array([self._log_growth(one) for one in shares]), NODES - 1, SHARES
            )

    def figures(self, beta: Array) -> dict[str, Array]:
        """``annual_return`` and ``sharpe`` for each beta, shape ``(overlay,)``; NaN where a mix loses everything."""
        log_growth = np.full(beta.shape, np.nan)
        inside = (beta >= SHARES[0]) & (beta <= SHARES[1])
        if self._curve is not None:
            log_growth[inside] = self._curve(beta[inside])
        else:
            inside[:] = False
        rest = np.isfinite(beta) & ~inside
        log_growth[rest] = [self._log_growth(float(one)) for one in beta[rest]]
        return {
            "annual_return": _annual(np.exp(log_growth), self._dates),
            "sharpe": np.where(beta == 0.0, np.nan, np.sign(beta) * self._sharpe),
        }

    def _log_growth(self, share: float) -> float:
        daily = self._cash + share * self._excess
        return float(np.sum(np.log1p(daily))) if daily.min() > -1.0 else float("nan")


def _annual(total: Array, dates: Dates) -> Array:
    """Annual return of a growth over all days; under a year the total (C11)."""
    years = years_between(dates)
    return total ** (1.0 / years) - 1.0 if years >= 1.0 else total - 1.0


def _ellipse(low: float, high: float, cash: Array, excess: Array) -> float:
    """Sum of the half axes of the largest Bernstein ellipse around the shares without a ruinous day in it.

    Chebyshev interpolation at n nodes is off by about its inverse to the power n.
    """
    with np.errstate(divide="ignore"):
        ruin = -(1.0 + cash) / excess
    centre, half = (low + high) / 2.0, max((high - low) / 2.0, 1e-12)
    nearest = float(np.min(np.abs(ruin - centre))) / half
    return nearest + np.sqrt(nearest * nearest - 1.0) if nearest > 1.0 else 1.0


def _ratio(mean: Array, spread: Array) -> Array:
    """``mean / spread`` where there is a spread, else NaN."""
    return np.divide(mean, spread, out=np.full(mean.shape, np.nan), where=spread > SMALLEST_SPREAD)
