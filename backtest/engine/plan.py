"""(Market, overlays) -> plans: every roll's dates and the list of distinct legs.

Everything that can be wrong is found here, before money moves. A plan covers one
window (inception to end); overlays with another inception go into another plan.
Inside it, legs that are the same option held on the same dates under the same
volatility are planned once, whatever their position, ratio and costs, and
overlays that share anchor and account form a family whose books are kept together.
A leg whose strikes depend on another leg is planned with it, and priced after it.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field
from typing import TypeAlias

import numpy as np

from ..calendar import Flags, Schedule, gated_schedule, leg_schedule
from ..cycles import Cycle
from ..gates import Condition
from ..leg import Early, Leg, Rolling
from ..market import Market
from ..overlay import Costs, Overlay
from ..strikes import StrikeRule
from ..volatility.sources import BoundVolatility, Volatility
from .checks import check_data, check_opens, first_position, last_position


@dataclass(frozen=True, slots=True)
class Linked:
    """A leg that another leg's strikes depend on, and the number by which it is named."""

    number: int
    spec: LegSpec
    direction: float
    ratio: float
    months: float


@dataclass(frozen=True, slots=True)
class LegSpec:
    """All that determines the options of a leg but its window and volatility.

    ``costs``, ``ratio`` and ``months`` are those of the leg itself; only a strike that depends on other legs sees them,
    else they stay as they are here.
    """

    rolling: Rolling
    right: str
    rule: StrikeRule
    settlement: str = "close"
    early: Early | None = None
    lag: int = 0
    linked: tuple[Linked, ...] = ()
    costs: Costs | None = None
    ratio: float = 1.0
    months: float = 1.0

    @property
    def sign(self) -> float:
        """+1.0 for a call, -1.0 for a put."""
        return 1.0 if self.right == "call" else -1.0

    @property
    def level(self) -> int:
        """0 for a leg that depends on no other, else one more than the legs that it depends on."""
        return 1 + max(link.spec.level for link in self.linked) if self.linked else 0


#: Rolling, settlement, lag, volatility, vol shift and level of a group, and the leg itself where it has early rules.
GroupKey: TypeAlias = tuple[Rolling, str, int, Volatility, float, int, LegSpec | None]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class PricingGroup:
    """Distinct legs with the same rolls and the same volatility; they share all that depends on the day alone.

    ``key`` tells groups of one window apart; ``vol_shift`` is added to every vol, decimal. ``links`` has for each leg
    the group and row of every leg that it names. A leg with early rules is a group of its own, whose ``schedule`` is
    that without them.
    """

    key: GroupKey
    schedule: Schedule
    volatility: BoundVolatility
    vol_shift: float = 0.0
    lag: int = 0
    settlement: str = "close"
    level: int = 0
    early: Early | None = None
    specs: list[LegSpec] = field(default_factory=list)
    links: list[tuple[tuple[int, int], ...]] = field(default_factory=list)

    @property
    def signs(self) -> list[float]:
        """+1 for a call, -1 for a put, for each leg."""
        return [spec.sign for spec in self.specs]


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
        If the window is empty, holds no roll date of an anchor, or lacks a vol, a rate or whatever an overlay looks at.
    """
    # a grid has few legs and many overlays: what was looked up for one object is found by the object itself after
    # that, as to hash a leg or a volatility takes longer than all else that is done for an overlay here
    seen = {id(volatility): volatility for volatility in volatilities}
    bound = {volatility: volatility.on(market) for volatility in dict.fromkeys(seen.values())}
    last = last_position(market, end)
    builders: dict[int, _PlanBuilder] = {}
    inceptions: dict[tuple[Volatility, Cycle, int], int] = {}
    of_objects: dict[tuple[int, int, int], _PlanBuilder] = {}
    for number, (overlay, volatility) in enumerate(zip(overlays, volatilities, strict=True)):
        anchor = overlay.anchor
        builder = of_objects.get((id(volatility), id(anchor), overlay.decide_lag))
        if builder is None:
            key = (volatility, anchor.cycle.moved(-anchor.close_before), overlay.decide_lag)
            if key not in inceptions:
                inceptions[key] = first_position(
                    market, overlay, bound[volatility], start=start, last=last, inception=inception
                )
            first = inceptions[key]
            if first not in builders:
                builders[first] = _PlanBuilder(market, first, last, bound)
            builder = of_objects[id(volatility), id(anchor), overlay.decide_lag] = builders[first]
        builder.add(number, overlay, volatility)
    return [builder.plan for builder in builders.values()]


class _PlanBuilder:
    """Collects overlays of one inception, giving each distinct leg and book its number."""

    def __init__(self, market: Market, start: int, end: int, bound: dict[Volatility, BoundVolatility]) -> None:
        self.plan = Plan(market=market, start=start, end=end, groups=[], families=[])
        self._bound = bound
        self._schedules: dict[tuple[Rolling, int], Schedule] = {}
        self._groups: dict[GroupKey, int] = {}
        self._legs: dict[tuple[int, LegSpec], int] = {}
        self._families: dict[tuple[Cycle, str], Family] = {}
        self._checked: set[tuple[Volatility, int]] = set()
        self._opens_checked = False
        self._conditions: dict[Condition, Flags] = {}
        # by identity of the objects, all of which the caller holds
        self._family_of: dict[tuple[int, str], Family] = {}
        self._row_of: dict[tuple[int, ...], int] = {}

    def add(self, number: int, overlay: Overlay, volatility: Volatility) -> None:
        anchor = overlay.anchor
        family = self._family_of.get((id(anchor), overlay.account))
        if family is None:
            family = self._family_of[id(anchor), overlay.account] = self._family(anchor, overlay.account)
        rows = []
        for leg in overlay.carried:
            key: tuple[int, ...] = (id(family), id(leg), id(volatility), id(overlay.costs), overlay.decide_lag)
            if leg.named_legs:
                # what it names is found among the legs of this very overlay
                key += tuple(id(one) for one in overlay.carried)
            row = self._row_of.get(key)
            if row is None:
                row = self._row_of[key] = self._row(family, leg, overlay, volatility)
            rows.append(row)
        family.members.append(number)
        family.holdings.append(tuple(rows))

    def _family(self, anchor: Leg, account: str) -> Family:
        # neither the anchor's term nor its gate plays a part in when packages are resized
        cycle = anchor.cycle.moved(-anchor.close_before)
        key = (cycle, account)
        if key not in self._families:
            schedule = self._schedule(Rolling(cycle, anchor.term), 0)
            self._families[key] = Family(anchor=schedule, account=account)
            self.plan.families.append(self._families[key])
        return self._families[key]

    def _row(self, family: Family, leg: Leg, overlay: Overlay, volatility: Volatility) -> int:
        """The row of a leg in the books of a family."""
        lag = overlay.decide_lag
        if (volatility, lag) not in self._checked:
            check_data(self.plan.market, self._bound[volatility], self.plan.start - lag, self.plan.end)
            self._checked.add((volatility, lag))
        if leg.settlement == "open" and not self._opens_checked:
            check_opens(self.plan.market, self.plan.start, self.plan.end)
            self._opens_checked = True
        group, row = self._leg(leg_spec(leg, overlay), volatility)
        return family.books.setdefault(BookKey(group, row, leg.direction, overlay.costs), len(family.books))

    def _leg(self, spec: LegSpec, volatility: Volatility) -> tuple[int, int]:
        """Group and row of a leg; the legs that it names come first."""
        links = tuple(self._leg(link.spec, volatility) for link in spec.linked)
        vol_shift, level = volatility.shift(spec.right), spec.level
        alone = spec if spec.early is not None else None
        group_key = (spec.rolling, spec.settlement, spec.lag, volatility, vol_shift, level, alone)
        if group_key not in self._groups:
            self._groups[group_key] = len(self.plan.groups)
            self.plan.groups.append(
                PricingGroup(
                    key=group_key, schedule=self._schedule(spec.rolling, spec.lag), volatility=self._bound[volatility],
                    vol_shift=vol_shift, lag=spec.lag, settlement=spec.settlement, level=level, early=spec.early,
                )
            )  # fmt: skip
        number = self._groups[group_key]
        group = self.plan.groups[number]
        leg_key = (number, spec)
        if leg_key not in self._legs:
            self._legs[leg_key] = len(group.specs)
            group.specs.append(spec)
            group.links.append(links)
        return number, self._legs[leg_key]

    def _schedule(self, rolling: Rolling, lag: int) -> Schedule:
        key = (rolling, lag)
        if key not in self._schedules:
            market, gate = self.plan.market, rolling.gate
            schedule = leg_schedule(
                market.dates,
                cycle=rolling.cycle,
                term_months=rolling.term,
                start=self.plan.start,
                end=self.plan.end,
                close_before=rolling.close_before,
            )
            if gate is not None:
                if gate.condition not in self._conditions:
                    self._conditions[gate.condition] = gate.condition.on(market)
                schedule = gated_schedule(
                    schedule,
                    decided(self._conditions[gate.condition], lag),
                    close_when_off=gate.when_off == "close",
                    open_at_once=gate.when_on == "at once",
                )
            self._schedules[key] = schedule
        return self._schedules[key]


def decided(on: Flags, lag: int) -> Flags:
    """What was known ``lag`` trading days before each day; nothing before the first."""
    return on if lag == 0 else np.concatenate([np.zeros(lag, dtype=bool), on[:-lag]])


def leg_spec(leg: Leg, overlay: Overlay) -> LegSpec:
    """What determines the options of a leg of ``overlay.carried``, with the legs that its strikes depend on."""
    named = dict.fromkeys(leg.named_legs)
    linked = []
    for number in named:
        other = overlay.carried[number - 1]
        linked.append(
            Linked(number, leg_spec(other, overlay), other.direction, float(other.ratio), other.cycle.length_months)
        )
    own = {"costs": overlay.costs, "ratio": float(leg.ratio), "months": leg.cycle.length_months} if linked else {}
    return LegSpec(
        rolling=leg.rolling,
        right=leg.right,
        rule=leg.strike,
        settlement=leg.settlement,
        early=leg.early,
        lag=overlay.decide_lag,
        linked=tuple(linked),
        **own,  # type: ignore[arg-type]  # names and kinds as in the class
    )
