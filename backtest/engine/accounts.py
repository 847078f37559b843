"""Leg paths -> wealth, units and cash (C9).

Both accounts are linear in the legs, so each distinct leg is booked once for its
anchor and an overlay's wealth is a weighted sum of book rows:

``resize``
    Between two anchor rolls, the value of one unit is that of a share with its
    dividends plus, per leg, its mark and the cash it has thrown off since the last
    anchor roll. Value at the end of a period over price at its start chains by
    cumulative product; nothing scans over days.
``cash``
    The number of units is known beforehand, so a leg's cash is a sum of flows, each
    divided by the growth of cash up to its day and multiplied by that up to today's.

Times two: ``before`` an anchor roll's trades and after them. Daily paths are after
the day's trades. The first day's wealth is 1 before the first trade's costs, which
therefore show in the first day's return.
"""

from __future__ import annotations

from dataclasses import dataclass, field, replace

import numpy as np
import numpy.typing as npt

from .exact_accounts import ExactAccount
from .legs import LegPaths
from .plan import BookKey, Family, Plan
from .trades import at_anchors, counted_flows, leg_trades

Array = npt.NDArray[np.float64]
Days = npt.NDArray[np.intp]

#: Overlay-days handled in one pass over the wealth paths, for the cache's sake.
BLOCK_VALUES = 65_536


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Books:
    """The books of a family: one row per distinct leg, direction and costs.

    Attributes
    ----------
    path : ndarray, shape (book, day)
        Contribution of one option per unit to the value of a unit, after the day's trades: signed mark plus
        the cash the leg has thrown off (since the last anchor roll in ``resize``, since inception in ``cash``,
        where both are in units of the first day's).
    before : ndarray, shape (book, anchor roll)
        The same just before the trades of each anchor roll: old options at what they settle or sell for.
    price : ndarray, shape (book, anchor roll)
        What one option costs in the package's price: signed mid, plus cost if it is opened there.
    """

    path: Array
    before: Array
    price: Array


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class FamilyState:
    """What all members of a family share; positions are counted from the window's first day.

    ``units_cash`` are the units of the cash account at each anchor roll in terms of the first day's,
    and ``shares`` the shares of a unit bought at the last anchor roll, with reinvested dividends.
    """

    anchor_day: Days  # (anchor roll,)
    anchor_of_day: Days  # (day,)
    days_held: Days  # (anchor roll,), days from each anchor roll to the next
    spot: Array  # (day,)
    cash_growth: Array  # (day,)
    share_growth: Array  # (day,)
    shares: Array  # (day,), resize account: after trades
    shares_before: Array  # (anchor roll,)
    units_cash: Array  # (anchor roll,)
    hold: Array  # (day,), growth of 1 in the share alone
    rate_return: Array  # (day,), zero on the first


def family_state(plan: Plan, family: Family) -> FamilyState:
    """Work out what depends on market and anchor alone."""
    window = slice(plan.start, plan.end + 1)
    market = plan.market
    anchor_day = family.anchor.opened - plan.start
    days = plan.end - plan.start + 1
    days_held = np.diff(anchor_day, append=days)
    anchor_of_day = np.repeat(np.arange(len(anchor_day)), days_held)
    share_growth = market.share_growth[window] / market.share_growth[plan.start]
    cash_growth = market.cash_growth[window] / market.cash_growth[plan.start]
    spot = market.spot[window]
    at_anchor = share_growth[anchor_day]
    return FamilyState(
        anchor_day=anchor_day,
        anchor_of_day=anchor_of_day,
        days_held=days_held,
        spot=spot,
        cash_growth=cash_growth,
        share_growth=share_growth,
        shares=share_growth / at_anchor[anchor_of_day],
        shares_before=np.concatenate([[1.0], at_anchor[1:] / at_anchor[:-1]]),
        units_cash=at_anchor,
        hold=share_growth * (spot / spot[0]),
        rate_return=np.concatenate([[0.0], cash_growth[1:] / cash_growth[:-1] - 1.0]),
    )


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class BookRolls:
    """What one book row has cost per option, shape ``(roll,)``, its cash, shape ``(day,)``, and what it brought."""

    open_cost: Array
    exit_cost: Array
    cash: Array
    net: float = np.nan  # what all options of the row brought after costs, in spots at their opens; live ones at mark


def keep_books(plan: Plan, family: Family, legs: list[LegPaths]) -> tuple[FamilyState, Books, list[BookRolls]]:
    """Book every distinct leg of a family once."""
    state = family_state(plan, family)
    books = list(family.books)
    days, anchors = len(state.spot), len(state.anchor_day)
    path, before, price = (
        np.empty((len(books), days)),
        np.empty((len(books), anchors)),
        np.empty((len(books), anchors)),
    )
    rolls = []
    costs = {}
    for number, key in enumerate(books):
        leg = legs[key.group]
        cost_key = (key.group, key.costs)
        if cost_key not in costs:
            costs[cost_key] = (leg.open_cost(key.costs), leg.exit_cost(key.costs))
        open_cost, exit_cost = (c[key.row] for c in costs[cost_key])
        keep = _keep_resize if family.account == "resize" else _keep_cash
        kept = keep(plan, state, leg, key, open_cost, exit_cost, path[number], before[number], price[number])
        profit = key.direction * (leg.close_value[key.row] - leg.premium[key.row]) - open_cost - exit_cost
        rolls.append(replace(kept, net=float(np.sum(profit / plan.market.spot[leg.schedule.opened]))))
    return state, Books(path=path, before=before, price=price), rolls


def _keep_resize(
    plan: Plan, state: FamilyState, leg: LegPaths, key: BookKey,
    open_cost: Array, exit_cost: Array, path: Array, before: Array, price: Array,
) -> BookRolls:  # fmt: skip
    trades = leg_trades(plan, leg, key, open_cost, exit_cost)
    np.multiply(leg.mark[key.row], key.direction, out=path)
    before[:], price[:], flow = at_anchors(state.anchor_day, path, trades)
    if not flow.any():
        return BookRolls(open_cost=open_cost, exit_cost=exit_cost, cash=np.broadcast_to(0.0, path.shape))
    held_cash = np.cumsum(flow / state.cash_growth)
    at_anchor = held_cash[state.anchor_day]
    previous = np.concatenate([[0.0], at_anchor[:-1]])
    before += state.cash_growth[state.anchor_day] * (at_anchor - previous)
    cash = state.cash_growth * (held_cash - at_anchor[state.anchor_of_day])
    path += cash
    return BookRolls(open_cost=open_cost, exit_cost=exit_cost, cash=cash)


def _keep_cash(
    plan: Plan, state: FamilyState, leg: LegPaths, key: BookKey,
    open_cost: Array, exit_cost: Array, path: Array, before: Array, price: Array,
) -> BookRolls:  # fmt: skip
    units = state.units_cash[state.anchor_of_day]
    mark = key.direction * leg.mark[key.row]
    trades = leg_trades(plan, leg, key, open_cost, exit_cost)
    flow = counted_flows(state.anchor_day, state.anchor_of_day, mark, trades, state.units_cash)
    cash = np.cumsum(flow / state.cash_growth) * state.cash_growth
    np.add(cash, units * mark, out=path)
    before[:] = price[:] = np.nan  # the cash account has no packages to price
    return BookRolls(open_cost=open_cost, exit_cost=exit_cost, cash=cash)


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Accounts:
    """Wealth of all members of a family.

    Attributes
    ----------
    wealth : ndarray, shape (overlay, day)
        Growth of 1 after the day's trades; NaN from the first day on which it is not positive.
    units : ndarray, shape (overlay, anchor roll)
        Units held from each anchor roll on, per 1 of starting wealth.
    stock_cost : ndarray, shape (overlay, anchor roll)
        Cost of stock traded at each anchor roll, in money per 1 of starting wealth.
    exact : dict of int to ExactAccount
        The accounts of overlays that are carried by themselves, by their row here.
    """

    wealth: Array
    units: Array
    stock_cost: Array
    exact: dict[int, ExactAccount] = field(default_factory=dict)

    def replaced(self, exact: dict[int, ExactAccount]) -> Accounts:
        """The same with some overlays carried by themselves."""
        if not exact:
            return self
        wealth, units, stock_cost = self.wealth.copy(), np.array(self.units), np.array(self.stock_cost)
        for row, account in exact.items():
            wealth[row], units[row], stock_cost[row] = account.wealth, account.units, account.stock_cost
        _blank_ruin(wealth)
        return Accounts(wealth=wealth, units=units, stock_cost=stock_cost, exact=exact)


def settle_accounts(
    state: FamilyState, books: Books, account: str, rows: Days, ratio: Array, stock_bps: Array
) -> Accounts:
    """Wealth of overlays that hold ``ratio[:, slot]`` of book ``rows[:, slot]``.

    Parameters
    ----------
    rows : ndarray of int, shape (overlay, slot)
        Book rows; unused slots point anywhere with ratio zero.
    ratio : ndarray, shape (overlay, slot)
    stock_bps : ndarray, shape (overlay,)
    """
    overlays, days = len(rows), len(state.spot)
    if account == "resize":
        units, stock_cost = _chain_units(state, books, rows, ratio, stock_bps)
        base = state.shares * state.spot
    else:
        # a book row already counts the units of each day in terms of the first day's
        units = np.broadcast_to(state.units_cash / state.spot[0], (overlays, len(state.anchor_day)))
        stock_cost = np.zeros(units.shape)
        base = state.share_growth * state.spot
    wealth = np.empty((overlays, days))
    step = max(1, BLOCK_VALUES // days)
    for first in range(0, overlays, step):
        block = slice(first, first + step)
        value = wealth[block]
        value[:] = base
        for slot in range(rows.shape[1]):
            value += _weighted(books.path.take(rows[block, slot], axis=0), ratio[block, slot])
        if account == "resize":
            value *= np.repeat(units[block], state.days_held, axis=1)
        else:
            value /= state.spot[0]
    wealth[:, 0] = 1.0
    _blank_ruin(wealth)
    return Accounts(wealth=wealth, units=units, stock_cost=stock_cost)


def _chain_units(state: FamilyState, books: Books, rows: Days, ratio: Array, stock_bps: Array) -> tuple[Array, Array]:
    """Units after each anchor roll, and the cost of the stock traded there, both per 1 of starting wealth.

    At each roll ``m`` new units per old one solve ``m * price = value - bps * S * |m - shares|``.
    The sign of the trade is known beforehand: shares are bought exactly when the old unit's value
    exceeds what its shares' worth of new packages costs.
    """
    spot = state.spot[state.anchor_day]
    value = np.broadcast_to(state.shares_before * spot, (len(rows), len(spot))).copy()
    price = np.broadcast_to(spot, value.shape).copy()
    for slot in range(rows.shape[1]):
        value += _weighted(books.before[rows[:, slot]], ratio[:, slot])
        price += _weighted(books.price[rows[:, slot]], ratio[:, slot])
    # before the first roll the holder has shares alone: one unit of wealth is one share's worth of spot
    value[:, 0] = spot[0]
    charge = stock_bps[:, np.newaxis] / 1e4 * spot
    side = np.where(value > state.shares_before * price, 1.0, -1.0)
    with np.errstate(divide="ignore", invalid="ignore"):
        growth = (value + side * charge * state.shares_before) / (price + side * charge)
        # a package with no positive price cannot be bought: units, and wealth with them, are unknown from there on
        growth[price + side * charge <= 0] = np.nan
    units = np.cumprod(growth, axis=1) / spot[0]
    held = np.concatenate([np.full((len(rows), 1), 1.0 / spot[0]), units[:, :-1]], axis=1) * state.shares_before
    return units, charge * np.abs(units - held)


def _weighted(rows: Array, ratio: Array) -> Array:
    """Each row times its ratio, in place; what is held at ratio zero counts for nothing, even without a price."""
    if (ratio == 1.0).all():
        return rows
    rows *= ratio[:, np.newaxis]
    rows[ratio == 0.0] = 0.0
    return rows


def _blank_ruin(wealth: Array) -> None:
    """From the first day on which wealth is not positive, it is NaN: no quiet clamp (and no rebirth)."""
    with np.errstate(invalid="ignore"):
        lost = ~(wealth > 0.0)
    if lost.any():
        wealth[np.logical_or.accumulate(lost, axis=1)] = np.nan
