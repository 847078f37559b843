"""(Market, overlays) -> plans: every roll's dates and the list of distinct legs.

Everything that can be wrong is found here, before money moves. A plan covers one
window (inception to end); overlays with another inception go into another plan.
Inside it, legs that are the same option held on the same dates under the same
volatility are planned once, whatever their position, ratio and costs, and
overlays that share anchor and account form a family whose books are kept together.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field
from typing import TypeAlias

import numpy as np
import numpy.typing as npt

from ..calendar import ListedCycle, Schedule, inception_position, leg_schedule
from ..errors import MarketError, OverlayError, PlanError
from ..market import Market
from ..overlay import Costs, Leg, Overlay
from ..strikes import StrikeRule
from ..volatility.sources import BoundVolatility, ImpliedSeries, Volatility

#: C7: beyond about four months one short-dated vol is not enough.
LONG_TERM_MONTHS = 4
SHORT_TENOR_DAYS = 120


#: Cycle, term in months, volatility and shift of a group of legs.
GroupKey: TypeAlias = tuple[ListedCycle, int, Volatility, float]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class PricingGroup:
    """Distinct legs with the same rolls and the same volatility; they share all that depends on the day alone.

    ``key`` tells groups of one window apart; ``vol_shift`` is added to every vol, decimal.
    """

    key: GroupKey
    schedule: Schedule
    volatility: BoundVolatility
    vol_shift: float = 0.0
    rules: list[StrikeRule] = field(default_factory=list)
    signs: list[float] = field(default_factory=list)


@dataclass(frozen=True, slots=True)
class BookKey:
    """One row of a family's books: a planned leg with the direction and costs of whoever holds it."""

    group: int
    row: int
    direction: float
    costs: Costs


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Family:
    """Overlays with the same anchor and account, and the distinct books they hold.

    ``members`` are positions in the caller's list; ``holdings[i]`` are the book rows
    of member i's legs, in the order of its legs.
    """

    anchor: Schedule
    account: str
    books: dict[BookKey, int] = field(default_factory=dict)
    members: list[int] = field(default_factory=list)
    holdings: list[tuple[int, ...]] = field(default_factory=list)


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Plan:
    """One window: positions of its first and last day, groups of legs, families of overlays."""

    market: Market
    start: int
    end: int
    groups: list[PricingGroup]
    families: list[Family]


def make_plans(
    market: Market,
    overlays: Sequence[Overlay],
    volatilities: Sequence[Volatility],
    *,
    start: np.datetime64 | None,
    end: np.datetime64 | None,
    inception: np.datetime64 | None,
) -> list[Plan]:
    """Plan overlays, one plan for each inception that occurs among them (C3).

    Parameters
    ----------
    start, end : datetime64, optional
        The window; its first roll date of each overlay's anchor is that overlay's inception.
    inception : datetime64, optional
        Open every overlay on this trading day instead, whether or not its anchor rolls on it.

    Raises
    ------
    PlanError, MarketError
        If the window is empty, holds no roll date of an anchor, or lacks a vol or a rate.
    """
    # a grid has few legs and many overlays: what was looked up for one object is found by the object itself after
    # that, as to hash a leg or a volatility takes longer than all else that is done for an overlay here
    seen = {id(volatility): volatility for volatility in volatilities}
    bound = {volatility: volatility.on(market) for volatility in dict.fromkeys(seen.values())}
    last = _last_position(market, end)
    builders: dict[int, _PlanBuilder] = {}
    inceptions: dict[tuple[Volatility, ListedCycle], int] = {}
    of_objects: dict[tuple[int, int], _PlanBuilder] = {}
    for number, (overlay, volatility) in enumerate(zip(overlays, volatilities, strict=True)):
        anchor = overlay.anchor
        builder = of_objects.get((id(volatility), id(anchor)))
        if builder is None:
            key = (volatility, anchor.cycle)
            if key not in inceptions:
                inceptions[key] = _inception(
                    market, overlay, bound[volatility], start=start, last=last, inception=inception
                )
            first = inceptions[key]
            if first not in builders:
                builders[first] = _PlanBuilder(market, first, last, bound)
            builder = of_objects[id(volatility), id(anchor)] = builders[first]
        builder.add(number, overlay, volatility, anchor)
    return [builder.plan for builder in builders.values()]


class _PlanBuilder:
    """Collects overlays of one inception, giving each distinct leg and book its number."""

    def __init__(self, market: Market, start: int, end: int, bound: dict[Volatility, BoundVolatility]) -> None:
        self.plan = Plan(market=market, start=start, end=end, groups=[], families=[])
        self._bound = bound
        self._schedules: dict[tuple[ListedCycle, int], Schedule] = {}
        self._groups: dict[GroupKey, int] = {}
        self._legs: dict[tuple[int, str, StrikeRule], int] = {}
        self._families: dict[tuple[ListedCycle, str], Family] = {}
        self._checked: set[Volatility] = set()
        # by identity of the objects, all of which the caller holds
        self._family_of: dict[tuple[int, str], Family] = {}
        self._row_of: dict[tuple[int, int, int, int], int] = {}

    def add(self, number: int, overlay: Overlay, volatility: Volatility, anchor: Leg) -> None:
        family = self._family_of.get((id(anchor), overlay.account))
        if family is None:
            family = self._family_of[id(anchor), overlay.account] = self._family(anchor, overlay.account)
        rows = []
        for leg in overlay.legs:
            key = (id(family), id(leg), id(volatility), id(overlay.costs))
            row = self._row_of.get(key)
            if row is None:
                row = self._row_of[key] = self._row(family, leg, volatility, overlay.costs)
            rows.append(row)
        family.members.append(number)
        family.holdings.append(tuple(rows))

    def _family(self, anchor: Leg, account: str) -> Family:
        key = (anchor.cycle, account)
        if key not in self._families:
            # the anchor's own term plays no part in when packages are resized
            schedule = self._schedule(anchor.cycle, anchor.cycle.months)
            self._families[key] = Family(anchor=schedule, account=account)
            self.plan.families.append(self._families[key])
        return self._families[key]

    def _row(self, family: Family, leg: Leg, volatility: Volatility, costs: Costs) -> int:
        """The row of a leg in the books of a family."""
        if volatility not in self._checked:
            _check_data(self.plan, self._bound[volatility])
            self._checked.add(volatility)
        group, row = self._leg(leg, volatility)
        return family.books.setdefault(BookKey(group, row, leg.direction, costs), len(family.books))

    def _leg(self, leg: Leg, volatility: Volatility) -> tuple[int, int]:
        vol_shift = volatility.shift(leg.right)
        group_key = (leg.cycle, leg.term, volatility, vol_shift)
        if group_key not in self._groups:
            self._groups[group_key] = len(self.plan.groups)
            schedule = self._schedule(leg.cycle, leg.term)
            self.plan.groups.append(
                PricingGroup(key=group_key, schedule=schedule, volatility=self._bound[volatility], vol_shift=vol_shift)
            )
        number = self._groups[group_key]
        group = self.plan.groups[number]
        leg_key = (number, leg.right, leg.strike)
        if leg_key not in self._legs:
            self._legs[leg_key] = len(group.rules)
            group.rules.append(leg.strike)
            group.signs.append(1.0 if leg.right == "call" else -1.0)
        return number, self._legs[leg_key]

    def _schedule(self, cycle: ListedCycle, term_months: int) -> Schedule:
        key = (cycle, term_months)
        if key not in self._schedules:
            self._schedules[key] = leg_schedule(
                self.plan.market.dates,
                cycle=cycle,
                term_months=term_months,
                start=self.plan.start,
                end=self.plan.end,
            )
        return self._schedules[key]


def long_term_warning(market: Market, overlay: Overlay, volatility: Volatility) -> str | None:
    """The caution of C7 for a long option priced off a single short-dated vol, or None."""
    longest = max(leg.term for leg in overlay.legs)
    source = volatility.source_for(market)
    if longest <= LONG_TERM_MONTHS or not isinstance(source, ImpliedSeries):
        return None
    if len(market.vol_tenor_days) > 1 or int(market.vol_tenor_days[0]) > SHORT_TENOR_DAYS:
        return None
    return (
        f"an option of {longest} months is priced off a single vol of {int(market.vol_tenor_days[0])} days; beyond "
        f"about {LONG_TERM_MONTHS} months one short-dated number is not enough, and in quiet times such options come "
        "out too cheap"
    )


def _last_position(market: Market, end: np.datetime64 | None) -> int:
    if end is None:
        return len(market) - 1
    last = int(np.searchsorted(market.dates, end, side="right")) - 1
    if last < 0:
        raise PlanError(f"the window ends on {end}, before the first price on {market.dates[0]}")
    return last


def _inception(
    market: Market,
    overlay: Overlay,
    volatility: BoundVolatility,
    *,
    start: np.datetime64 | None,
    last: int,
    inception: np.datetime64 | None,
) -> int:
    """Position of the overlay's first day (C3)."""
    if inception is not None:
        first = int(np.searchsorted(market.dates, inception))
        if first >= last or market.dates[first] != inception:
            raise PlanError(f"inception {inception} is not a trading day before {market.dates[last]}")
        return first
    if start is not None and start > market.dates[last]:
        raise PlanError(f"the window begins on {start}, after it ends on {market.dates[last]}")
    earliest = 0 if start is None else int(np.searchsorted(market.dates, start))
    if earliest >= last:
        raise PlanError(
            f"the window from {start if start is not None else market.dates[0]} to {market.dates[last]} holds no two "
            f"trading days; the prices run from {market.dates[0]} to {market.dates[-1]}"
        )
    rate_known = np.flatnonzero(~np.isnan(market.rate))
    first_rate = int(rate_known[0]) if rate_known.size else len(market)
    usable = max(earliest, volatility.first_day, first_rate)
    if usable >= last:
        raise PlanError(
            f"no day before {market.dates[last]} has price, vol and rate together: "
            f"{_begins(market, 'vol', volatility.first_day)}, {_begins(market, 'rate', first_rate)} (realised vol "
            "needs the prices of its whole window first)"
        )
    return inception_position(market.dates, cycle=overlay.anchor.cycle, earliest=usable, latest=last)


def _check_data(plan: Plan, volatility: BoundVolatility) -> None:
    market = plan.market
    unknown = np.flatnonzero(np.isnan(market.rate[plan.start : plan.end + 1]))
    missing_rate = plan.start + int(unknown[0]) if unknown.size else None
    for what, position in (("vol", volatility.missing(plan.start, plan.end)), ("rate", missing_rate)):
        if position is not None:
            raise MarketError(
                f"no {what} on {market.dates[position]}, inside the window from {market.dates[plan.start]} to "
                f"{market.dates[plan.end]}: fill it or choose a window without it"
            )


def _begins(market: Market, what: str, position: int) -> str:
    return f"the {what} begins on {market.dates[position]}" if position < len(market) else f"no day has a {what}"


def as_day(value: object, name: str) -> np.datetime64 | None:
    """A date in any usual form as ``datetime64[D]``; None stays None.

    Raises
    ------
    OverlayError
        If it is not a date.
    """
    if value is None:
        return None
    try:
        day: npt.NDArray[np.datetime64] = np.array(value, dtype="datetime64[D]")
        if day.shape == () and not np.isnat(day):
            return np.datetime64(day.item(), "D")
    except (TypeError, ValueError):
        pass
    raise OverlayError(f"{name} is {value!r}; it takes a date such as 2008-03-20", field=name)
