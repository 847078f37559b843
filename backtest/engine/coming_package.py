"""Share and options after a coming roll: what they are worth at the first expiry, over prices of the share then.

Per share, against holding the share alone and against cash. What the options cost on the day of the roll, spread
included, pays the rate until then (C9's cash account); options that are live already stand in at their model value. An
option that expires later counts at its model value under the newest vols (C5, C7). Dividends, at the trailing yield,
and the rate play a part only against cash. Settlement fees are left out.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np
import numpy.typing as npt
from scipy.optimize import brentq

from ..leg import Leg
from ..market import Market
from ..pricing.day_state import DayState
from ..volatility.sources import BoundVolatility
from .opens import day_state
from .plan import PricingGroup
from .standing import StandingVolatility, on_one_day

Array = npt.NDArray[np.float64]

#: Prices between which curves are searched, and steps between them, in percent of the newest close.
LOWEST, HIGHEST, STEPS = 1.0, 400.0, 1596
#: Prices at the first expiry that are shown, in percent of the newest close, and steps between them.
SHOWN_FROM, SHOWN_TO, SHOWN_STEPS = 60.0, 140.0, 320
#: A difference under this part of spot is none: what is left of sums that cancel.
NO_DIFFERENCE = 1e-10


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class HeldOption:
    """An option that is held after the trades of a coming roll.

    ``value`` is its mid on that day, ``delta`` the spot delta of one option, ``cost`` that of opening it; zero for one
    that is live already.
    """

    label: str
    leg: Leg
    group: PricingGroup
    expiry: np.datetime64
    strike: float
    value: float
    delta: float
    cost: float
    is_new: bool


@dataclass(frozen=True, slots=True)
class Stretch:
    """Prices from ``low`` to ``high`` between which one side is ahead: +1 the package, -1 the other, 0 neither."""

    low: float
    high: float
    side: int


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Package:
    """A share and the options held beside it after the trades of ``date``, by the data of the market's newest day."""

    market: Market
    volatility: BoundVolatility
    date: np.datetime64
    held: tuple[HeldOption, ...]

    @property
    def spot(self) -> float:
        """The newest close."""
        return float(self.market.spot[-1])

    @property
    def delta(self) -> float:
        """Spot delta of the share and all options."""
        return 1.0 + sum(one.leg.direction * one.leg.held_ratio * one.delta for one in self.held)

    @property
    def stake(self) -> float:
        """What all options are worth on the day of the roll, and the cost of opening the new ones; signed."""
        return sum(one.leg.held_ratio * (one.leg.direction * one.value + one.cost) for one in self.held)

    @property
    def expiry(self) -> np.datetime64:
        """The first expiry among the options."""
        return min(one.expiry for one in self.held)

    @property
    def later(self) -> tuple[HeldOption, ...]:
        """Options that expire after the first expiry."""
        return tuple(one for one in self.held if one.expiry > self.expiry)

    @property
    def strikes(self) -> Array:
        """Strikes of the options that expire at the first expiry, rising."""
        return np.unique([one.strike for one in self.held if one.expiry == self.expiry])

    @property
    def interest(self) -> float:
        """Growth of cash from the roll to the first expiry."""
        return float(1.0 / self._carried().discount[0])

    @property
    def dividends(self) -> float:
        """What a share pays from the roll to the first expiry, at the trailing yield."""
        return self.spot * float(1.0 / self._carried().growth[0] - 1.0)

    @property
    def shown_ends(self) -> Array:
        """Prices at the first expiry from 60 to 140 percent of the newest close, strikes among them, rising."""
        strikes = np.array([one.strike for one in self.held]) * (100.0 / self.spot)
        inside = strikes[(strikes > SHOWN_FROM) & (strikes < SHOWN_TO)]
        shown = np.union1d(np.linspace(SHOWN_FROM, SHOWN_TO, SHOWN_STEPS + 1), inside)
        return np.asarray(shown * (self.spot / 100.0))

    @property
    def lowest_and_highest(self) -> tuple[float, float]:
        """Of what share and options are worth over :attr:`shown_ends`."""
        worth = self.value(self.shown_ends)
        return float(worth.min()), float(worth.max())

    def value(self, spot: Array) -> Array:
        """Share and options at the first expiry, less what the options cost, shape ``(price,)``, without dividends."""
        return spot + self._options(spot) - self.stake * self.interest

    def against_stock(self) -> tuple[Stretch, ...]:
        """Where the package ends ahead of the share alone."""
        return self._stretches(lambda spot: self.value(spot) - spot)

    def against_cash(self) -> tuple[Stretch, ...]:
        """Where the package, with the dividends, ends ahead of the newest close held in cash."""
        cash = self.spot * self.interest - self.dividends
        return self._stretches(lambda spot: self.value(spot) - cash)

    def _carried(self) -> DayState:
        """What pricing needs from the roll to the first expiry."""
        return self._state(self.held[0].group, self.date, np.array([self.spot]), self.expiry)

    def _state(self, group: PricingGroup, date: np.datetime64, spot: Array, expiry: np.datetime64) -> DayState:
        market, day_of = on_one_day(self.market, date, spot)
        standing = replace(group, volatility=StandingVolatility(bound=self.volatility, day_of=day_of))
        return day_state(market, standing, slice(0, len(spot)), np.full(len(spot), expiry.astype(np.int64)))

    def _options(self, spot: Array) -> Array:
        total = np.zeros(len(spot))
        for one in self.held:
            if one.expiry == self.expiry:
                worth = np.maximum(one.leg.sign * (spot - one.strike), 0.0)
            else:
                # no price is zero: the limit of a value does as well
                positive = np.maximum(spot, 1e-6 * self.spot)
                state = self._state(one.group, self.expiry, positive, one.expiry)
                worth = state.value_and_delta(np.full(len(spot), one.strike), one.leg.sign)[0]
            total += one.leg.direction * one.leg.held_ratio * worth
        return total

    def _stretches(self, gain: Callable[[Array], Array]) -> tuple[Stretch, ...]:
        none = NO_DIFFERENCE * self.spot
        if self.later:
            grid = np.linspace(LOWEST, HIGHEST, STEPS + 1) * (self.spot / 100.0)
            return stretches(gain, np.union1d(grid, self.strikes), scale=self.spot, none=none, is_linear=False)
        return stretches(gain, np.union1d([0.0], self.strikes), scale=self.spot, none=none, is_linear=True)


def stretches(
    gain: Callable[[Array], Array], knots: Array, *, scale: float, none: float, is_linear: bool
) -> tuple[Stretch, ...]:
    """Where a function of the price is above, below and at zero; from zero to infinity, without gaps.

    Parameters
    ----------
    gain : callable
        Of prices, shape ``(price,)``.
    knots : ndarray
        Rising prices. With ``is_linear`` the function is a straight line between them and beyond the last, and its
        roots are exact; else one root at most is looked for between two knots, and none beyond them.
    scale : float
        A price to step by beyond the last knot.
    none : float
        Values no larger than this count as zero.

    Examples
    --------
    A put at 95 bought for 2, beside nothing:

    >>> stretches(lambda s: np.maximum(95 - s, 0) - 2, np.array([0.0, 95.0]), scale=100, none=1e-8, is_linear=True)
    (Stretch(low=0.0, high=93.0, side=1), Stretch(low=93.0, high=inf, side=-1))
    """
    if is_linear:
        knots = np.append(knots, knots[-1] + scale)
    value = _no_less(gain(knots), none)
    points = [0.0, *knots[value == 0.0].tolist()]
    for low, high, at_low, at_high in zip(knots[:-1], knots[1:], value[:-1], value[1:], strict=True):
        if at_low * at_high < 0.0:
            if is_linear:
                points.append(float(low + (high - low) * at_low / (at_low - at_high)))
            else:
                points.append(float(brentq(lambda s: float(gain(np.array([s]))[0]), low, high, xtol=1e-12 * scale)))
    if is_linear and (value[-1] - value[-2]) * value[-1] < 0.0:
        # the line beyond the last knot comes back to zero
        points.append(float(knots[-1] + scale * value[-1] / (value[-2] - value[-1])))
    edges = np.unique(points)
    middle = np.append(0.5 * (edges[:-1] + edges[1:]), max(edges[-1], knots[-1]) + scale)
    if not is_linear:
        # beyond the knots nothing is known
        middle = np.clip(middle, knots[0], knots[-1])
    sides = np.sign(_no_less(gain(middle), none)).astype(int).tolist()
    found: list[Stretch] = []
    for low, high, side in zip(edges.tolist(), [*edges[1:].tolist(), np.inf], sides, strict=True):
        joined = found.pop().low if found and found[-1].side == side else low
        found.append(Stretch(joined, high, side))
    return tuple(found)


def _no_less(values: Array, none: float) -> Array:
    """Values of which the smallest are zero."""
    return np.where(np.abs(values) <= none, 0.0, values)
