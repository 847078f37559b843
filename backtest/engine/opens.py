"""Strikes of all legs of a group at their opens, rules of one kind worked out together (C6)."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

from ..calendar import Schedule
from ..market import DAYS_IN_YEAR, Market
from ..pricing.day_state import DayState
from ..strikes import Adjusted, LinkedOption, OpenState, limit_strikes
from .plan import LegSpec, Plan, PricingGroup

if TYPE_CHECKING:
    from .legs import LegPaths

Array = npt.NDArray[np.float64]
Days = npt.NDArray[np.intp]
Flags = npt.NDArray[np.int64]


def day_state(market: Market, group: PricingGroup, day: Days | slice, expiry_day: npt.NDArray[np.int64]) -> DayState:
    """Forward, discount and smile on each day for its own expiry (C5, C7).

    A slice of days is looked at in place; positions are gathered.
    """
    tau = (expiry_day - market.day_number[day]) / DAYS_IN_YEAR
    # in place where it can be: on a few thousand days numpy's overhead is a good part of the cost
    interest, carry = market.rate[day] * tau, market.dividend_yield[day] * tau
    discount, growth = np.exp(-interest), np.exp(-carry)
    spot = market.spot[day]
    forward = spot * growth
    forward /= discount
    log_forward = interest
    log_forward -= carry
    log_forward += market.log_spot[day]
    return DayState(
        spot=spot,
        forward=forward,
        log_forward=log_forward,
        discount=discount,
        growth=growth,
        tau_years=tau,
        smile=group.volatility.slice(day, tau),
        vol_shift=group.vol_shift,
    )


def strike_legs(
    plan: Plan,
    group: PricingGroup,
    schedule: Schedule,
    legs: Sequence[LegPaths | None],
    opens: DayState | None = None,
) -> tuple[Array, Flags]:
    """Strikes and their flags by each leg's rule, shape ``(leg, roll)``.

    Parameters
    ----------
    legs : sequence of LegPaths
        Priced groups of the plan; those that a leg of this group names are among them.
    opens : DayState, optional
        Of the days of the opens, if it is known already.
    """
    decision = schedule.opened - group.lag
    known = opens if group.lag == 0 else None
    day = known or day_state(plan.market, group, decision, schedule.expiry_day)
    follows = schedule.follows
    states = [
        OpenState(
            day=day,
            sign=spec.sign,
            follows=follows,
            linked=_linked(plan, spec, links, schedule.opened, legs) if links else {},
            costs=spec.costs,
            ratio=spec.ratio,
            months=spec.months,
        )
        for spec, links in zip(group.specs, group.links, strict=True)
    ]
    shape = (len(group.specs), len(decision))
    strike, flags = np.empty(shape), np.zeros(shape, dtype=np.int64)
    if not len(decision):
        return strike, flags
    kinds: dict[type, list[int]] = {}
    for row, spec in enumerate(group.specs):
        kinds.setdefault(type(_inner(spec)), []).append(row)
    for kind, rows in kinds.items():
        rules = [_inner(group.specs[row]) for row in rows]
        together = getattr(kind, "together", None)
        if together is not None:
            raw = together(rules, [states[row] for row in rows])
        else:
            raw = np.stack([rule.strikes(states[row]) for rule, row in zip(rules, rows, strict=True)])
        for row, from_rule in zip(rows, raw, strict=True):
            strike[row], flags[row] = limit_strikes(group.specs[row].rule, from_rule, states[row])
    return strike, flags


def _inner(spec: LegSpec):  # type: ignore[no-untyped-def]  # any rule, of the catalogue or the caller's own
    return spec.rule.rule if isinstance(spec.rule, Adjusted) else spec.rule


def _linked(
    plan: Plan,
    spec: LegSpec,
    links: Sequence[tuple[int, int]],
    opened: Days,
    legs: Sequence[LegPaths | None],
) -> dict[int, LinkedOption]:
    """The options live in the legs that a leg names, after the trades of each day on which it opens one."""
    assert spec.costs is not None
    found = {}
    for link, (group, row) in zip(spec.linked, links, strict=True):
        paths = legs[group]
        assert paths is not None
        held = paths.roll_of_day[opened - plan.start]
        live = held >= 0
        strike, premium, cost = (np.full(len(opened), np.nan) for _ in range(3))
        strike[live] = paths.strike[row, held[live]]
        premium[live] = paths.premium[row, held[live]]
        cost[live] = paths.open_cost(spec.costs)[row, held[live]]
        if spec.lag:
            _as_decided(plan, paths, row, spec, opened, held, premium, cost)
        found[link.number] = LinkedOption(
            strike=strike, premium=premium, cost=cost, direction=link.direction, ratio=link.ratio, months=link.months
        )
    return found


def _as_decided(
    plan: Plan, paths: LegPaths, row: int, spec: LegSpec, opened: Days, held: Days, premium: Array, cost: Array
) -> None:
    """Where both options open on the same day, what the other costs as it looked on the day of the decision."""
    assert spec.costs is not None
    schedule = paths.schedule
    live = np.flatnonzero(held >= 0)
    same = live[schedule.opened[held[live]] == opened[live]]
    if same.size == 0:
        return
    day = day_state(plan.market, paths.group, opened[same] - spec.lag, schedule.expiry_day[held[same]])
    strike, sign = paths.strike[row, held[same]], paths.group.signs[row]
    premium[same] = day.value_and_delta(strike, sign)[0]
    cost[same] = day.trading_cost(spec.costs, premium[same], strike, sign)
