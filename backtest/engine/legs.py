"""A distinct leg -> its marks and deltas over all days, its premiums and settlements over all rolls.

Priced once however many overlays use it. Everything that depends on the day alone
(forward, discount, the smile's day part) is worked out once per group of legs with
the same rolls, then broadcast over the strikes.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Any

import numpy as np
import numpy.typing as npt

from ..errors import OverlayError
from ..market import DAYS_IN_YEAR, Market
from ..overlay import Costs
from ..pricing.black import black, black_with_delta
from ..strikes import OpenState, StrikeRule
from ..volatility.smile import SmileSlice
from .plan import GroupKey, Plan, PricingGroup

Array = npt.NDArray[np.float64]
Days = npt.NDArray[np.intp]

#: Values priced in one broadcast call: small enough for a core's second cache, large enough to hide numpy's overhead.
BLOCK_VALUES = 32_768


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class DayState:
    """What pricing needs of some days, shared by all strikes; every array has shape ``(day,)``."""

    forward: Array
    log_forward: Array
    discount: Array
    growth: Array
    tau_years: Array
    smile: SmileSlice
    vol_shift: float

    @property
    def root_tau(self) -> Array:
        """Square root of the years to expiry."""
        return np.sqrt(self.tau_years)

    def stdev(self, strike: Array) -> Array:
        """Total standard deviation at each strike, shape ``(leg, day)``."""
        return self.stdev_at(np.log(strike) - self.log_forward)

    def stdev_at(self, log_moneyness: Array) -> Array:
        """Total standard deviation at each ``ln(K/F)``; NaN where the shift leaves no vol."""
        stdev: Array = np.sqrt(self.smile.total_variance(log_moneyness))
        if self.vol_shift != 0.0:
            stdev = stdev + self.vol_shift * self.root_tau
            stdev[stdev <= 0.0] = np.nan
        return stdev


def day_state(market: Market, group: PricingGroup, day: Days | slice, expiry_day: npt.NDArray[np.int64]) -> DayState:
    """Forward, discount and smile on each day for its own expiry (C5, C7).

    A slice of days is looked at in place; positions are gathered.
    """
    tau = (expiry_day - market.day_number[day]) / DAYS_IN_YEAR
    # in place where it can be: on a few thousand days numpy's overhead is a good part of the cost
    interest, carry = market.rate[day] * tau, market.dividend_yield[day] * tau
    discount, growth = np.exp(-interest), np.exp(-carry)
    forward = market.spot[day] * growth
    forward /= discount
    log_forward = interest
    log_forward -= carry
    log_forward += market.log_spot[day]
    return DayState(
        forward=forward,
        log_forward=log_forward,
        discount=discount,
        growth=growth,
        tau_years=tau,
        smile=group.volatility.slice(day, tau),
        vol_shift=group.vol_shift,
    )


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class LegPaths:
    """The priced legs of one group.

    Attributes
    ----------
    strike, premium, close_value, vol_open, delta_open : ndarray, shape (leg, roll)
        ``premium`` is the mid at the open; ``close_value`` the intrinsic value where the option settles, the
        model value where it is closed early or still live.
    mark, delta : ndarray, shape (leg, day)
        Mid and spot delta of the option held after the day's trades.
    roll_of_day : ndarray of int, shape (day,)
        Which roll is held after the day's trades.
    """

    group: PricingGroup
    signs: Array
    roll_of_day: Days
    strike: Array
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

    def open_cost(self, costs: Costs) -> Array:
        """Cost per option at each open (C8), shape ``(leg, roll)``."""
        return _trading_cost(costs, self.premium, self.strike, self.open_state, self.signs)

    def exit_cost(self, costs: Costs) -> Array:
        """Cost per option at each close (C8), shape ``(leg, roll)``: zero for an option still live."""
        cost = np.zeros(self.strike.shape)
        if self.close_state is not None:
            value, strike = self.close_value[:, self.early], self.strike[:, self.early]
            cost[:, self.early] = _trading_cost(costs, value, strike, self.close_state, self.signs)
        if costs.settlement_fee > 0:
            in_the_money = self.group.schedule.settles & (self.close_value > 0)
            cost[in_the_money] = costs.settlement_fee / costs.multiplier
        return cost


#: Arrays of a leg that :class:`PricedLegs` keeps, first axis leg.
KEPT = ("strike", "premium", "close_value", "vol_open", "delta_open", "mark", "delta")
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
        self._rows: dict[tuple[int, int, GroupKey], dict[tuple[float, StrikeRule], tuple[LegPaths, int]]] = {}

    def group(self, plan: Plan, group: PricingGroup) -> LegPaths:
        """The paths of a group, those not known yet priced in one go."""
        if plan.market is not self.market:
            raise OverlayError("these legs were priced on another market")
        rows = self._rows.setdefault((plan.start, plan.end, group.key), {})
        wanted = list(zip(group.signs, group.rules, strict=True))
        new = [leg for leg in wanted if leg not in rows]
        if new:
            fresh = _price(plan, replace(group, signs=[sign for sign, _ in new], rules=[rule for _, rule in new]))
            rows.update({leg: (fresh, row) for row, leg in enumerate(new)})
            self.priced += len(new)
            self._kept += len(new) * (plan.end - plan.start + 1)
        found = [rows[leg] for leg in wanted]
        if self._kept > self._most:
            self._rows, self._kept = {}, 0
        first = found[0][0]
        if len(new) == len(wanted):
            return first
        arrays: dict[str, Any] = {name: np.stack([getattr(paths, name)[row] for paths, row in found]) for name in KEPT}
        return replace(first, group=group, signs=np.array(group.signs)[:, np.newaxis], **arrays)


def price_group(plan: Plan, group: PricingGroup, priced: PricedLegs | None = None) -> LegPaths:
    """All legs of a group over the plan's window, from ``priced`` where they are in it."""
    return _price(plan, group) if priced is None else priced.group(plan, group)


def _price(plan: Plan, group: PricingGroup) -> LegPaths:
    market, rolls = plan.market, group.schedule
    window = slice(plan.start, plan.end + 1)
    days_held = np.append(rolls.opened[1:], plan.end + 1) - rolls.opened
    roll_of_day = np.repeat(np.arange(len(rolls.opened)), days_held)
    signs = np.array(group.signs)[:, np.newaxis]

    opens = day_state(market, group, rolls.opened, rolls.expiry_day)
    strike = _strikes(market, group, opens)
    stdev_open = opens.stdev(strike)
    daily = day_state(market, group, window, rolls.expiry_day[roll_of_day])
    mark, delta = _marks(daily, strike, roll_of_day, signs)
    at_open = rolls.opened - plan.start

    spot_close = market.spot[rolls.closed]
    close_value = np.maximum((spot_close - strike) * signs, 0.0)
    early = np.flatnonzero(~rolls.settles & ~rolls.live)
    close_state = None
    if early.size:
        close_state = day_state(market, group, rolls.closed[early], rolls.expiry_day[early])
        close_value[:, early], _ = _value_and_delta(close_state, strike[:, early], signs)
    close_value[:, -1] = mark[:, -1]
    return LegPaths(
        group=group,
        signs=signs,
        roll_of_day=roll_of_day,
        strike=strike,
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


def _strikes(market: Market, group: PricingGroup, opens: DayState) -> Array:
    """Strikes by each leg's rule, shape ``(leg, roll)`` (C6)."""
    spot = market.spot[group.schedule.opened]
    strike = np.empty((len(group.rules), len(spot)))
    for row, (rule, sign) in enumerate(zip(group.rules, group.signs, strict=True)):
        state = OpenState(spot=spot, forward=opens.forward, tau_years=opens.tau_years, smile=opens.smile, sign=sign)
        strike[row] = rule.strikes(state)
    return strike


def _marks(daily: DayState, strike: Array, roll_of_day: Days, signs: Array) -> tuple[Array, Array]:
    """Mid and delta of every leg on every day, in blocks that fit the cache."""
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


def _value_and_delta(state: DayState, strike: Array, signs: Array) -> tuple[Array, Array]:
    value, forward_delta = black_with_delta(
        state.forward, strike, np.log(strike) - state.log_forward, state.stdev(strike), signs
    )
    return value * state.discount, forward_delta * state.growth


def _trading_cost(costs: Costs, mid: Array, strike: Array, state: DayState, signs: Array) -> Array:
    """The largest of the three half-spreads, plus commission (C8).

    The half-spread in vol points is the rise in value when the option is repriced
    that much higher; bought and sold legs pay the same.
    """
    stdev = state.stdev(strike)
    cost = np.full(mid.shape, costs.half_spread_min, dtype=np.float64)
    if costs.half_spread_percent > 0:
        np.maximum(cost, mid * (costs.half_spread_percent / 100.0), out=cost)
    if costs.half_spread_vol > 0:
        bumped = black(state.forward, strike, stdev + costs.half_spread_vol / 100.0 * state.root_tau, signs)
        np.maximum(cost, bumped * state.discount - mid, out=cost)
    return cost + costs.commission / costs.multiplier
