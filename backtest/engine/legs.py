"""A distinct leg -> its marks and deltas over all days, its premiums and settlements over all rolls.

Priced once however many overlays use it. Everything that depends on the day alone
(forward, discount, the smile's day part) is worked out once per group of legs with
the same rolls, then broadcast over the strikes.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field, replace
from typing import Any

import numpy as np
import numpy.typing as npt

from ..calendar import Schedule
from ..errors import OverlayError
from ..market import Market
from ..overlay import Costs
from ..pricing.black import black_with_delta
from ..pricing.day_state import DayState
from .early import early_schedule
from .opens import day_state, strike_legs
from .plan import GroupKey, LegSpec, Plan, PricingGroup

Array = npt.NDArray[np.float64]
Days = npt.NDArray[np.intp]

#: Values priced in one broadcast call: small enough for a core's second cache, large enough to hide numpy's overhead.
BLOCK_VALUES = 32_768


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class LegPaths:
    """The priced legs of one group.

    Attributes
    ----------
    strike, premium, close_value, vol_open, delta_open : ndarray, shape (leg, roll)
        ``premium`` is the mid at the open; ``close_value`` the intrinsic value where the option settles, the
        model value where it is closed early or still live.
    schedule : Schedule
        Opens and closes, early ones among them.
    flags : ndarray of int, shape (leg, roll)
        What happened to each strike on its way from the rule; see :func:`backtest.strikes.flag_words`.
    mark, delta : ndarray, shape (leg, day)
        Mid and spot delta of the option held after the day's trades; zero while the leg is flat.
    roll_of_day : ndarray of int, shape (day,)
        Which roll is held after the day's trades; -1 while the leg is flat.
    """

    group: PricingGroup
    schedule: Schedule
    signs: Array
    roll_of_day: Days
    strike: Array
    flags: npt.NDArray[np.int64]
    premium: Array
    close_value: Array
    vol_open: Array
    delta_open: Array
    forward_open: Array
    mark: Array
    delta: Array
    spot_close: Array
    open_state: DayState
    close_state: DayState | None
    early: Days  # rolls closed before expiry, shape (early,)
    known_costs: dict[tuple[str, Costs], Array] = field(default_factory=dict)

    def open_cost(self, costs: Costs) -> Array:
        """Cost per option at each open (C8), shape ``(leg, roll)``."""
        key = ("open", costs)
        if key not in self.known_costs:
            self.known_costs[key] = self.open_state.trading_cost(costs, self.premium, self.strike, self.signs)
        return self.known_costs[key]

    def exit_cost(self, costs: Costs) -> Array:
        """Cost per option at each close (C8), shape ``(leg, roll)``: zero for an option still live."""
        key = ("exit", costs)
        if key not in self.known_costs:
            self.known_costs[key] = self._exit_cost(costs)
        return self.known_costs[key]

    def _exit_cost(self, costs: Costs) -> Array:
        cost = np.zeros(self.strike.shape)
        if self.close_state is not None:
            value, strike = self.close_value[:, self.early], self.strike[:, self.early]
            cost[:, self.early] = self.close_state.trading_cost(costs, value, strike, self.signs)
        if costs.settlement_fee > 0:
            in_the_money = self.schedule.settles & (self.close_value > 0)
            cost[in_the_money] = costs.settlement_fee / costs.multiplier
        return cost


#: Arrays of a leg that :class:`PricedLegs` keeps, first axis leg.
KEPT = ("strike", "flags", "premium", "close_value", "vol_open", "delta_open", "mark", "delta")
#: What :class:`PricedLegs` holds at most, in marks and deltas: 400 MB.
MOST_KEPT = 25_000_000


class PricedLegs:
    """Legs of one market that are priced already, so that the batches of a grid price each leg once.

    ``priced`` counts the legs that had to be priced. What is kept is bounded: when it grows past ``most`` values,
    all of it is let go.
    """

    def __init__(self, market: Market, *, most: int = MOST_KEPT) -> None:
        self.market = market
        self.priced = 0
        self._most, self._kept = most, 0
        self._rows: dict[tuple[int, int, GroupKey], dict[LegSpec, tuple[LegPaths, int]]] = {}

    def group(self, plan: Plan, group: PricingGroup, legs: Sequence[LegPaths | None]) -> LegPaths:
        """The paths of a group, those not known yet priced in one go."""
        if plan.market is not self.market:
            raise OverlayError("these legs were priced on another market")
        rows = self._rows.setdefault((plan.start, plan.end, group.key), {})
        new = [number for number, spec in enumerate(group.specs) if spec not in rows]
        if new:
            specs, links = [group.specs[n] for n in new], [group.links[n] for n in new]
            fresh = _price(plan, replace(group, specs=specs, links=links), legs)
            rows.update({spec: (fresh, row) for row, spec in enumerate(specs)})
            self.priced += len(new)
            self._kept += len(new) * (plan.end - plan.start + 1)
        found = [rows[spec] for spec in group.specs]
        if self._kept > self._most:
            self._rows, self._kept = {}, 0
        first = found[0][0]
        if len(new) == len(group.specs):
            return first
        arrays: dict[str, Any] = {name: np.stack([getattr(paths, name)[row] for paths, row in found]) for name in KEPT}
        return replace(first, group=group, signs=np.array(group.signs)[:, np.newaxis], known_costs={}, **arrays)


def price_groups(plan: Plan, priced: PricedLegs | None = None) -> list[LegPaths]:
    """All legs of a plan over its window, from ``priced`` where they are in it; those that others name come first."""
    legs: list[LegPaths | None] = [None] * len(plan.groups)
    for number in sorted(range(len(legs)), key=lambda number: plan.groups[number].level):
        group = plan.groups[number]
        legs[number] = _price(plan, group, legs) if priced is None else priced.group(plan, group, legs)
    return [paths for paths in legs if paths is not None]


def _price(plan: Plan, group: PricingGroup, legs: Sequence[LegPaths | None]) -> LegPaths:
    market = plan.market
    rolls = group.schedule if group.early is None else early_schedule(plan, group, legs)
    roll_of_day = rolls.option_of_day(plan.start, plan.end)
    signs = np.array(group.signs)[:, np.newaxis]

    opens = day_state(market, group, rolls.opened, rolls.expiry_day)
    strike, flags = strike_legs(plan, group, rolls, legs, opens)
    stdev_open = opens.stdev(strike)
    mark, delta = _marks(plan, group, rolls, strike, roll_of_day, signs)
    at_open = rolls.opened - plan.start

    spot_close = market.spot[rolls.closed]
    settled_at = spot_close
    if group.settlement == "open":
        assert market.open is not None
        settled_at = market.open[rolls.closed]
    close_value = np.maximum((settled_at - strike) * signs, 0.0)
    early = np.flatnonzero(~rolls.settles & ~rolls.live)
    close_state = None
    if early.size:
        close_state = day_state(market, group, rolls.closed[early], rolls.expiry_day[early])
        close_value[:, early], _ = close_state.value_and_delta(strike[:, early], signs)
    close_value[:, rolls.live] = mark[:, -1:]
    return LegPaths(
        group=group,
        schedule=rolls,
        signs=signs,
        roll_of_day=roll_of_day,
        strike=strike,
        flags=flags,
        premium=mark[:, at_open],
        close_value=close_value,
        vol_open=stdev_open / opens.root_tau,
        delta_open=delta[:, at_open],
        forward_open=opens.forward,
        mark=mark,
        delta=delta,
        spot_close=spot_close,
        open_state=opens,
        close_state=close_state,
        early=early,
    )


def _marks(
    plan: Plan, group: PricingGroup, rolls: Schedule, strike: Array, roll_of_day: Days, signs: Array
) -> tuple[Array, Array]:
    """Mid and delta of every leg on every day; zero on days on which it is flat."""
    if roll_of_day.min() >= 0:
        daily = day_state(plan.market, group, slice(plan.start, plan.end + 1), rolls.expiry_day[roll_of_day])
        return _held_marks(daily, strike, roll_of_day, signs)
    held = np.flatnonzero(roll_of_day >= 0)
    mark, delta = np.zeros((2, len(strike), len(roll_of_day)))
    if held.size:
        daily = day_state(plan.market, group, held + plan.start, rolls.expiry_day[roll_of_day[held]])
        mark[:, held], delta[:, held] = _held_marks(daily, strike, roll_of_day[held], signs)
    return mark, delta


def held_days(plan: Plan, paths: LegPaths) -> tuple[Days, DayState]:
    """The days on which the legs of a group hold an option after the day's trades, and what pricing needs of those.

    Returns
    -------
    days : ndarray of int
        Counted from the first day of the window.
    """
    days = np.flatnonzero(paths.roll_of_day >= 0)
    expiry_day = paths.schedule.expiry_day[paths.roll_of_day[days]]
    return days, day_state(plan.market, paths.group, days + plan.start, expiry_day)


def _held_marks(daily: DayState, strike: Array, roll_of_day: Days, signs: Array) -> tuple[Array, Array]:
    """Mid and delta on days that all have an option, in blocks that fit the cache."""
    legs, days = strike.shape[0], len(roll_of_day)
    mark, delta = np.empty((legs, days)), np.empty((legs, days))
    # the logarithm of a strike is taken once per roll, not once per day
    log_strike = np.log(strike)
    step = max(1, BLOCK_VALUES // days)
    for first in range(0, legs, step):
        rows = slice(first, first + step)
        log_moneyness = log_strike[rows].take(roll_of_day, axis=1)
        log_moneyness -= daily.log_forward
        stdev = daily.stdev_at(log_moneyness)
        value, forward_delta = black_with_delta(
            daily.forward, strike[rows].take(roll_of_day, axis=1), log_moneyness, stdev, signs[rows]
        )
        np.multiply(value, daily.discount, out=mark[rows])
        np.multiply(forward_delta, daily.growth, out=delta[rows])
    return mark, delta
