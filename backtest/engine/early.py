"""Early rules: options that are replaced before their roll date, found in steps over all rolls at once.

An early rule looks at one option only, from its open to its roll date, so the rolls of a leg do not wait for each
other: all first options are priced in one go and each is cut at the first day on which a rule holds; then all their
replacements together, and so on until none is cut. There are as many steps as one roll ever sees replacements, and
nothing loops over days. What comes out is a schedule, which is priced like any other.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

from ..calendar import BY_DELTA, BY_LOW_VALUE, BY_PROFIT, Schedule
from .opens import day_state, strike_legs
from .plan import Plan, PricingGroup

if TYPE_CHECKING:
    from .legs import LegPaths

Array = npt.NDArray[np.float64]
Days = npt.NDArray[np.intp]


def early_schedule(plan: Plan, group: PricingGroup, legs: Sequence[LegPaths | None]) -> Schedule:
    """The schedule of a leg with its early rules carried out."""
    now, done, gate = group.schedule, [], group.key[0].gate
    # what its gate would not let it open is not replaced either
    lets_open = None if gate is None else gate.condition.on(plan.market)
    while True:
        cut, reason = _first_days(plan, group, now, legs, lets_open)
        hit = cut >= 0
        done.append(
            replace(
                now,
                closed=np.where(hit, cut, now.closed),
                settles=now.settles & ~hit,
                live=now.live & ~hit,
                reason=np.where(hit, reason, now.reason),
            )
        )
        if not hit.any():
            return _in_order(done)
        now = Schedule(
            opened=cut[hit],
            closed=now.closed[hit],
            expiry_day=now.expiry_day[hit],
            settles=now.settles[hit],
            live=now.live[hit],
            stub=np.zeros(int(hit.sum()), dtype=bool),
            reason=now.reason[hit],
        )


def _first_days(
    plan: Plan,
    group: PricingGroup,
    schedule: Schedule,
    legs: Sequence[LegPaths | None],
    lets_open: npt.NDArray[np.bool_] | None,
) -> tuple[Days, npt.NDArray[np.int64]]:
    """Position of the day on which each option is replaced, -1 for none, and why."""
    rules, market = group.early, plan.market
    assert rules is not None
    options = len(schedule.opened)
    cut, why = np.full(options, -1, dtype=np.intp), np.zeros(options, dtype=np.int64)
    # a rule may hold from the day after the open to the last day whose trade still comes before the roll date
    until = np.where(schedule.live, schedule.closed + 1, schedule.closed) - group.lag
    counts = np.maximum(until - schedule.opened - 1, 0)
    if not counts.any():
        return cut, why
    option = np.repeat(np.arange(options), counts)
    starts = np.cumsum(counts) - counts
    day = schedule.opened[option] + 1 + np.arange(len(option)) - starts[option]

    strike = strike_legs(plan, group, schedule, legs)[0][0]
    sign = group.signs[0]
    at_open = day_state(market, group, schedule.opened, schedule.expiry_day)
    premium = at_open.value_and_delta(strike, sign)[0]
    value, delta = day_state(market, group, day, schedule.expiry_day[option]).value_and_delta(strike[option], sign)
    reason = np.zeros(len(day), dtype=np.int64)
    if rules.value_below is not None:
        reason[value < rules.value_below * premium[option]] = BY_LOW_VALUE
    if rules.value_above is not None:
        reason[value > rules.value_above * premium[option]] = BY_PROFIT
    if rules.delta_below is not None:
        risen = market.spot[day] > market.spot[schedule.opened[option]]
        reason[risen & (np.abs(delta) < rules.delta_below)] = BY_DELTA
    if lets_open is not None:
        reason[~lets_open[day]] = 0
    reason[schedule.expiry_day[option] - market.day_number[day] < rules.days_left] = 0

    hits = np.flatnonzero(reason)
    which, first = np.unique(option[hits], return_index=True)
    cut[which] = day[hits[first]] + group.lag
    why[which] = reason[hits[first]]
    return cut, why


def _in_order(parts: list[Schedule]) -> Schedule:
    order = np.argsort(np.concatenate([part.opened for part in parts]), kind="stable")
    names = ("opened", "closed", "expiry_day", "settles", "live", "stub", "reason")
    return Schedule(**{name: np.concatenate([getattr(part, name) for part in parts])[order] for name in names})
