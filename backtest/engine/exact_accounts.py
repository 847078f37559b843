"""Accounts that are not linear in the legs: whole contracts, and a dearer rate on negative cash (C9).

The number of contracts depends on the wealth of the day it is set, and interest on the sign of the cash. So each such
overlay is carried by itself, from one anchor roll to the next and inside that from trade to trade: a scan over rolls,
never over days.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from itertools import pairwise
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

from ..overlay import Overlay
from .trades import Trades, at_anchors, counted_flows, leg_trades

if TYPE_CHECKING:
    from .accounts import FamilyState
    from .legs import LegPaths
    from .plan import BookKey, Plan

Array = npt.NDArray[np.float64]

#: A count this close to the next whole number is that number: what rounding has taken off it is no contract less.
CONTRACT_TOLERANCE = 1e-9


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class ExactAccount:
    """One overlay's account, all per 1 of starting wealth.

    Attributes
    ----------
    wealth, cash, borrow_charge : ndarray, shape (day,)
        After the day's trades; ``borrow_charge`` is what negative cash cost over each day above the rate.
    units, stock_cost : ndarray, shape (anchor roll,)
    count : ndarray, shape (leg, anchor roll)
        Options of each leg from each anchor roll on, whether or not it then holds any.
    """

    wealth: Array
    cash: Array
    borrow_charge: Array
    units: Array
    stock_cost: Array
    count: Array


def is_exact(overlay: Overlay) -> bool:
    """Whether an overlay needs an account of its own."""
    return overlay.portfolio is not None or overlay.costs.borrow_spread > 0.0


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class HeldLeg:
    """A leg as an account sees it."""

    paths: LegPaths
    key: BookKey
    ratio: float
    trades: Trades


def held_legs(
    plan: Plan,
    overlay: Overlay,
    legs: Sequence[LegPaths],
    keys: Sequence[BookKey],
    costs: Sequence[tuple[Array, Array]],
) -> list[HeldLeg]:
    """The legs of an overlay with their trades; ``costs`` are those of each leg's opens and closes."""
    return [
        HeldLeg(
            paths=legs[key.group],
            key=key,
            ratio=leg.held_ratio,
            trades=leg_trades(plan, legs[key.group], key, *cost),
        )
        for leg, key, cost in zip(overlay.carried, keys, costs, strict=True)
    ]


def carry(plan: Plan, state: FamilyState, overlay: Overlay, legs: Sequence[HeldLeg]) -> ExactAccount:
    """Carry one overlay through its window."""
    borrowing = np.log1p(overlay.costs.borrow_spread / 100.0) / 365.0
    days = plan.market.day_number[plan.start : plan.end + 1]
    borrow_growth = state.cash_growth * np.exp(borrowing * (days - days[0]))
    account = _resized if overlay.account == "resize" else _fixed_shares
    return account(state, overlay, legs, borrow_growth)


def contracts_of(overlay: Overlay, units: float, ratio: float) -> float:
    """Options of a leg per 1 of starting wealth for so many units: whole contracts where there is a portfolio."""
    wanted = units * ratio
    if overlay.portfolio is None:
        return wanted
    per_contract = overlay.costs.multiplier / overlay.portfolio
    return float(np.floor(wanted / per_contract + CONTRACT_TOLERANCE)) * per_contract


def _fixed_shares(state: FamilyState, overlay: Overlay, legs: Sequence[HeldLeg], borrow_growth: Array) -> ExactAccount:
    """The cash account: shares are known beforehand, and with them the options."""
    units = state.units_cash / state.spot[0]
    count = np.array([[contracts_of(overlay, one, leg.ratio) for one in units.tolist()] for leg in legs])
    flow = np.zeros(len(state.spot))
    for leg, held in zip(legs, count, strict=True):
        if leg.ratio:
            flow += counted_flows(state.anchor_day, state.anchor_of_day, _signed_mark(leg), leg.trades, held)
    cash = carried_cash(flow, state.cash_growth, borrow_growth)
    wealth = state.share_growth / state.spot[0] * state.spot + cash + _options(state, legs, count)
    wealth[0] = 1.0
    return ExactAccount(
        wealth=wealth,
        cash=cash,
        borrow_charge=_charge(cash, state.cash_growth, borrow_growth),
        units=units,
        stock_cost=np.zeros(len(units)),
        count=count,
    )


def _resized(state: FamilyState, overlay: Overlay, legs: Sequence[HeldLeg], borrow_growth: Array) -> ExactAccount:
    """Whole packages at every anchor roll; what whole contracts leave over stays in cash until the next."""
    anchors, spot = state.anchor_day, state.spot
    rolls, days = len(anchors), len(spot)
    mark = [_signed_mark(leg) for leg in legs]
    before, price, inner = zip(
        *(at_anchors(anchors, one, leg.trades) for leg, one in zip(legs, mark, strict=True)), strict=True
    )
    count, units, stock_cost = np.zeros((len(legs), rolls)), np.zeros(rolls), np.zeros(rolls)
    cash = np.zeros(days)
    wealth_before, shares, fee = 1.0, 1.0 / spot[0], overlay.costs.stock_bps / 1e4
    ends = [*anchors[1:].tolist(), days]
    for roll, (first, end) in enumerate(zip(anchors.tolist(), ends, strict=True)):
        now = spot[first]
        per_unit = now + sum(leg.ratio * one[roll] for leg, one in zip(legs, price, strict=True) if leg.ratio)
        units[roll], stock_cost[roll] = _packages(wealth_before, per_unit, now, shares, fee)
        count[:, roll] = [contracts_of(overlay, units[roll], leg.ratio) for leg in legs]
        paid = sum(held * one[roll] for held, one in zip(count[:, roll], price, strict=True) if held)
        kept = wealth_before - stock_cost[roll] - units[roll] * now - paid
        # whole packages take all the money; what is left of it then is rounding
        flow = np.zeros(end - first)
        flow[0] = kept if overlay.portfolio is not None else 0.0
        for held, one in zip(count[:, roll], inner, strict=True):
            if held:
                flow[1:] += held * one[first + 1 : end]
        period = slice(first, end)
        cash[period] = carried_cash(flow, state.cash_growth[period], borrow_growth[period])
        if end == days:
            break
        grown = (borrow_growth if cash[end - 1] < 0.0 else state.cash_growth)[end - 1 : end + 1]
        options = sum(held * one[roll + 1] for held, one in zip(count[:, roll], before, strict=True) if held)
        shares = units[roll] * state.shares_before[roll + 1]
        wealth_before = float(shares * spot[end] + options + cash[end - 1] * grown[1] / grown[0])
        if not wealth_before > 0.0:
            units[roll + 1 :] = count[:, roll + 1 :] = np.nan
            cash[end:] = np.nan
            break
    held_units = units.take(state.anchor_of_day)
    wealth = held_units * state.shares * spot + cash + _options(state, legs, count)
    wealth[0] = 1.0
    return ExactAccount(
        wealth=wealth,
        cash=cash,
        borrow_charge=_charge(cash, state.cash_growth, borrow_growth),
        units=units,
        stock_cost=stock_cost,
        count=count,
    )


def _packages(wealth: float, per_unit: float, spot: float, shares: float, fee: float) -> tuple[float, float]:
    """Units, and what the stock traded costs: ``units per_unit = wealth - fee S |units - shares|``."""
    side = 1.0 if wealth > shares * per_unit else -1.0
    charged = per_unit + side * fee * spot
    units = (wealth + side * fee * spot * shares) / charged if charged > 0.0 else np.nan
    return units, fee * spot * abs(units - shares)


def _signed_mark(leg: HeldLeg) -> Array:
    return np.asarray(leg.key.direction * leg.paths.mark[leg.key.row])


def _options(state: FamilyState, legs: Sequence[HeldLeg], count: Array) -> Array:
    """Value of all options after each day's trades, shape ``(day,)``."""
    total = np.zeros(len(state.spot))
    for leg, held in zip(legs, count, strict=True):
        if leg.ratio:
            total += held.take(state.anchor_of_day) * _signed_mark(leg)
    return total


def carried_cash(flow: Array, lend: Array, borrow: Array) -> Array:
    """Cash after each day's flow, shape ``(day,)``: it grows with ``lend`` while above zero, with ``borrow`` below.

    Between two flows the sign stays what it is, so nothing is looked at but the days that have one.
    """
    cash = np.zeros(len(flow))
    events = np.flatnonzero(flow)
    for first, end in pairwise([*events.tolist(), len(flow)]):
        held = flow[first] + (_grown(cash, first, lend, borrow) if first > 0 else 0.0)
        growth = borrow if held < 0.0 else lend
        cash[first:end] = held * (growth[first:end] / growth[first])
    return cash


def _grown(cash: Array, day: int, lend: Array, borrow: Array) -> float:
    """The cash of the day before, grown by one day."""
    growth = borrow if cash[day - 1] < 0.0 else lend
    return float(cash[day - 1] * (growth[day] / growth[day - 1]))


def _charge(cash: Array, lend: Array, borrow: Array) -> Array:
    """What negative cash costs over each day above the rate, shape ``(day,)``."""
    charge = np.zeros(len(cash))
    dearer = borrow[1:] / borrow[:-1] - lend[1:] / lend[:-1]
    charge[1:] = np.maximum(-cash[:-1], 0.0) * dearer
    return charge
