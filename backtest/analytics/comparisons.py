"""What the overlay is compared with: mixes of holding and cash (C10).

The first four mixes have a constant share found with hindsight, so that one figure
of the mix equals the overlay's over the whole sample; the same-delta mix needs none.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy.optimize import brentq

from .drawdowns import drawdown_path
from .performance import SMALLEST_SPREAD, daily_excess, regression_beta

Array = npt.NDArray[np.float64]

#: Shares of stock searched for the same-drawdown mix: none to five times.
LARGEST_SHARE = 5.0
#: Where the same-return search ends when no day could lose everything.
UNBOUNDED_SHARE = 1e3


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Mix:
    """A mix of holding and cash, rebalanced daily.

    ``share`` is the constant share of stock found with hindsight, or the mean of the daily ones for the
    same-delta mix; ``wealth`` is growth of 1, shape ``(day,)``.
    """

    share: float
    wealth: Array


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Mixes:
    """The five mixes of C10; None where no share gives the figure."""

    same_beta: Mix | None
    same_volatility: Mix | None
    same_return: Mix | None
    same_drawdown: Mix | None
    same_delta: Mix | None

    def items(self) -> list[tuple[str, Mix | None]]:
        """Name and mix, in the order of C10."""
        return [(name, getattr(self, name)) for name in self.__dataclass_fields__]


def mixes(wealth: Array, *, hold: Array, rate_return: Array, delta: Array) -> Mixes:
    """Solve the mixes of C10 for one overlay.

    Parameters
    ----------
    wealth, hold : ndarray, shape (day,)
        Growth of 1 of overlay and hold.
    rate_return : ndarray, shape (day,)
        Return on cash over each day; the first is not used.
    delta : ndarray, shape (day,)
        Dollar delta over wealth after each day's trades.
    """
    if not np.isfinite(wealth).all() or len(wealth) < 2:
        return Mixes(same_beta=None, same_volatility=None, same_return=None, same_drawdown=None, same_delta=None)
    excess, cash = daily_excess(hold, rate_return), rate_return[1:]

    def mix(share: float | None) -> Mix | None:
        if share is None or not np.isfinite(share):
            return None
        grown = mix_wealth(share, excess, cash)
        return Mix(share=float(share), wealth=grown) if grown.min() > 0 else None

    same_delta = Mix(share=float(np.mean(delta[:-1])), wealth=mix_wealth(delta[:-1], excess, cash))
    return Mixes(
        same_beta=mix(regression_beta(daily_excess(wealth, rate_return), excess)),
        same_volatility=mix(_same_volatility(wealth, excess, cash)),
        same_return=mix(_same_return(wealth, excess, cash)),
        same_drawdown=mix(_same_drawdown(wealth, excess, cash)),
        same_delta=same_delta if same_delta.wealth.min() > 0 else None,
    )


def mix_wealth(share: float | Array, excess: Array, cash: Array) -> Array:
    """Growth of 1 of ``rf + w (hold - rf)`` a day; ``excess`` and ``cash`` have shape ``(day - 1,)``."""
    return np.concatenate([[1.0], np.cumprod(1.0 + cash + share * excess)])


def _same_volatility(wealth: Array, excess: Array, cash: Array) -> float | None:
    """Larger root of ``var(rf) + 2 w cov(rf, e) + w^2 var(e) = var(R)``."""
    if len(excess) < 2:
        return None
    target = np.var(wealth[1:] / wealth[:-1] - 1.0, ddof=1)
    covariance = np.cov(cash, excess, ddof=1)
    a, half_b, c = covariance[1, 1], covariance[0, 1], covariance[0, 0] - target
    discriminant = half_b * half_b - a * c
    if not a > SMALLEST_SPREAD**2 or discriminant < 0:
        return None
    return float((-half_b + np.sqrt(discriminant)) / a)


def _same_return(wealth: Array, excess: Array, cash: Array) -> float | None:
    """Smaller share whose growth over the whole sample equals the overlay's.

    Log growth is a concave function of the share, so there are two roots at most; the smaller lies to the
    left of the maximum.
    """
    target = float(np.log(wealth[-1] / wealth[0]))

    def gap(share: float) -> float:
        return float(np.sum(np.log1p(cash + share * excess))) - target

    def slope(share: float) -> float:
        return float(np.sum(excess / (1.0 + cash + share * excess)))

    lowest, highest = _ruin_bounds(excess, cash)
    if slope(lowest) * slope(highest) > 0:
        # a hold that only rises, or only falls, against cash: growth has no maximum in between, and one root at most
        return _root(gap, lowest, highest)
    top = brentq(slope, lowest, highest, xtol=1e-14)
    if gap(top) < 0:
        return None
    return _root(gap, lowest, top)


def _ruin_bounds(excess: Array, cash: Array) -> tuple[float, float]:
    """Shares just inside those at which some day loses everything, or a large share where no day does."""
    inside = 1.0 - 1e-9
    with np.errstate(divide="ignore"):
        limits = -(1.0 + cash) / excess
    lower, upper = limits[excess > 0], limits[excess < 0]
    return (
        float(lower.max()) * inside if lower.size else -UNBOUNDED_SHARE,
        float(upper.min()) * inside if upper.size else UNBOUNDED_SHARE,
    )


def _same_drawdown(wealth: Array, excess: Array, cash: Array) -> float | None:
    """Share from zero to five times whose maximum drawdown equals the overlay's."""
    target = float(drawdown_path(wealth).min())

    def gap(share: float) -> float:
        grown = mix_wealth(share, excess, cash)
        # a mix that loses everything is deeper than any overlay
        return (float(drawdown_path(grown).min()) if grown.min() > 0 else -1.0) - target

    return _root(gap, 0.0, LARGEST_SHARE)


def _root(function: Callable[[float], float], low: float, high: float) -> float | None:
    at_low, at_high = function(low), function(high)
    if at_low == 0.0:
        return low
    if at_low * at_high > 0:
        return None
    return float(brentq(function, low, high, xtol=1e-14, rtol=1e-14))
