"""The coming roll: what every leg opens next, as if it were opened on the newest day's data (C2, C3, C6, C8).

The replay up to the newest day says which options are live. The market is then lengthened by weekdays on which price,
vols, rate and dividend yield stay those of the newest day, the legs go on rolling on it, and each coming option is read
off there. So it is struck and priced by the engine's own code, with the time to expiry that it will have at its roll;
ratchets see the option that is live, and a rule that names another leg sees the option that the leg then holds.

What is not foreseen: early rules that hold, and gates that change, before the roll. A gate counts as it stands on the
newest day (on the day before, where the newest day is itself a roll date decided a day before).
"""

from __future__ import annotations

import math
from dataclasses import dataclass, fields, replace

import numpy as np

from ..calendar import Schedule, leg_schedule
from ..leg import Leg
from ..market import Market
from ..overlay import Costs, Overlay
from ..strikes import flag_words
from ..volatility.sources import Volatility
from .coming_package import HeldOption, Package
from .exact_accounts import contracts_of
from .families import FamilyReplay, replay_families
from .leg_replay import leg_labels
from .legs import LegPaths, price_groups
from .plan import Plan, PricingGroup
from .result import Replay
from .standing import StandingVolatility, lengthened

#: Weekdays of a month, and a few more: no two roll dates of a cycle lie further apart than these allow.
WEEKDAYS_OF_MONTH, SOME_MORE = 22, 10


@dataclass(frozen=True, slots=True, kw_only=True)
class NewOption:
    """An option to be opened; prices are for one option.

    ``decided`` is the day whose close sets the strike. ``premium`` is the mid, ``cost`` that of trading it (C8),
    ``delta`` the spot delta of one option, ``flags`` what happened to the strike on its way from the rule.
    """

    decided: np.datetime64
    strike: float
    flags: tuple[str, ...]
    forward: float
    vol: float
    premium: float
    cost: float
    delta: float


@dataclass(frozen=True, slots=True, kw_only=True)
class LiveOption:
    """An option that is held after the newest day's trades; ``value`` is its mid on that day."""

    opened: np.datetime64
    expiry: np.datetime64
    strike: float
    value: float
    delta: float


@dataclass(frozen=True, slots=True, kw_only=True)
class ComingLeg:
    """A leg and its coming roll.

    Attributes
    ----------
    roll, expiry : datetime64
        Its first roll date after the newest day, or that day itself; and the expiry of the option opened there.
    option : NewOption or None
        None where its gate is off: by today's data nothing is opened.
    live : LiveOption or None
        The option held until then. None for a flat leg, and where the newest day is the roll: that one is gone.
    """

    label: str
    leg: Leg
    roll: np.datetime64
    expiry: np.datetime64
    option: NewOption | None
    live: LiveOption | None

    @property
    def days(self) -> int:
        """Calendar days from the roll to the expiry."""
        return int((self.expiry - self.roll).astype(np.int64))

    @property
    def after_cost(self) -> float:
        """What one option costs when bought, mid and cost; what it brings when sold, mid less cost (C8)."""
        return math.nan if self.option is None else self.option.premium + self.leg.direction * self.option.cost

    @property
    def cash(self) -> float:
        """What the option moves into cash per share: minus what is paid, plus what is received; zero for none."""
        return -self.leg.direction * self.leg.held_ratio * self.after_cost if self.is_opened else 0.0

    @property
    def is_opened(self) -> bool:
        """Whether an option is really opened: the gate is on, and the leg is held."""
        return self.option is not None and self.leg.held_ratio > 0.0


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class ComingRoll:
    """All legs' coming rolls by the data of the newest day.

    Attributes
    ----------
    replay : Replay
        The same overlay up to and including the newest day.
    newest : datetime64
    spot : float
        Its close.
    legs : tuple of ComingLeg
        In the order of ``overlay.carried``.
    package : Package or None
        Share and options after the trades of the first coming roll; None where nothing would be opened at all.
    """

    replay: Replay
    newest: np.datetime64
    spot: float
    legs: tuple[ComingLeg, ...]
    package: Package | None

    @property
    def overlay(self) -> Overlay:
        """What was agreed."""
        return self.replay.overlay

    @property
    def rolling(self) -> tuple[ComingLeg, ...]:
        """The legs that open an option at the first coming roll."""
        return tuple(leg for leg in self.legs if self.package and leg.is_opened and leg.roll == self.package.date)

    @property
    def net(self) -> float:
        """Cash per share at the first coming roll: minus a debit, plus a credit."""
        return sum(leg.cash for leg in self.rolling)


@dataclass(frozen=True, slots=True, kw_only=True)
class Holding:
    """The same in money, for a holding of shares with whole contracts beside it.

    ``contracts`` and ``cash`` (money out of the pocket below zero) are for each leg, in their order; ``net`` is the
    cash of the legs that open an option at the first coming roll.
    """

    money: float
    shares: float
    multiplier: float
    contracts: tuple[int, ...]
    cash: tuple[float, ...]
    net: float


def coming_roll(
    market: Market, overlay: Overlay, *, volatility: Volatility | None = None, start: object = None
) -> ComingRoll:
    """The coming roll of every leg by the data of the market's newest day.

    Parameters
    ----------
    market : Market
    overlay : Overlay
    volatility : Volatility, optional
        As :func:`backtest.replay` takes it.
    start : date, optional
        The replay that says which options are live begins on the first roll date of the longest leg from here on.

    Raises
    ------
    PlanError, MarketError, OverlayError
        As :func:`backtest.replay`: the history must hold a roll date of the longest leg.

    Examples
    --------
    >>> import pandas as pd
    >>> from backtest import NO_COSTS, Leg, PercentOfSpot
    >>> days = pd.bdate_range("2023-01-02", "2024-01-31", name="date")
    >>> market = Market.from_frame(pd.DataFrame({"close": 100.0, "vol": 0.20}, index=days))
    >>> put = Leg(position="long", right="put", roll="quarter", strike=PercentOfSpot(95))
    >>> (leg,) = coming_roll(market, Overlay(legs=(put,), costs=NO_COSTS)).legs
    >>> str(leg.roll), str(leg.expiry), leg.option.strike, round(leg.option.premium, 4)
    ('2024-03-15', '2024-06-21', 95.0, 2.6134)
    """
    found = next(replay_families(market, [overlay], volatility=volatility, start=start))
    plan = _lengthened(found, overlay)
    ahead = [_ahead(plan, group, newest=len(market) - 1) for group in plan.groups]
    plan = replace(
        plan,
        groups=[
            replace(group, schedule=_continued(group, past.schedule, coming, plan.market, market), early=None)
            for group, past, coming in zip(plan.groups, found.legs, ahead, strict=True)
        ],
    )
    paths = price_groups(plan)
    keys = list(found.family.books)
    places = [(keys[book].group, keys[book].row) for book in found.family.holdings[0]]
    legs = tuple(
        _coming_leg(plan, paths[group], row, ahead[group], leg, label, overlay.costs, newest=len(market) - 1)
        for (group, row), leg, label in zip(places, overlay.carried, leg_labels(overlay), strict=True)
    )
    first = min((leg.roll for leg in legs if leg.is_opened), default=None)
    package = None
    if first is not None:
        held = tuple(
            option
            for (group, row), leg in zip(places, legs, strict=True)
            if (option := _held(plan, paths[group], row, leg, overlay.costs, first)) is not None
        )
        package = Package(market=market, volatility=found.plan.groups[0].volatility, date=first, held=held)
    return ComingRoll(
        replay=Replay(found, 0, overlay),
        newest=market.dates[-1],
        spot=float(market.spot[-1]),
        legs=legs,
        package=package,
    )


def for_holding(coming: ComingRoll, money: float) -> Holding:
    """The coming roll for a holding worth so much: shares at the newest close, and whole contracts of each leg (C9).

    Raises
    ------
    OverlayError
        If ``money`` is no number of at least 1.
    """
    multiplier = coming.overlay.costs.multiplier
    valued = replace(coming.overlay, portfolio=money)
    per_contract = multiplier / money
    contracts = tuple(
        round(contracts_of(valued, 1.0 / coming.spot, leg.leg.held_ratio) / per_contract) for leg in coming.legs
    )
    cash = tuple(
        -leg.leg.direction * count * multiplier * leg.after_cost if leg.is_opened else 0.0
        for leg, count in zip(coming.legs, contracts, strict=True)
    )
    first = {leg.label for leg in coming.rolling}
    return Holding(
        money=money,
        shares=money / coming.spot,
        multiplier=multiplier,
        contracts=contracts,
        cash=cash,
        net=sum(part for leg, part in zip(coming.legs, cash, strict=True) if leg.label in first),
    )


def _lengthened(found: FamilyReplay, overlay: Overlay) -> Plan:
    """The plan of the replay on the market with the days ahead."""
    longest = max(leg.cycle.length_months for leg in overlay.carried)
    market, day_of = lengthened(found.plan.market, math.ceil(WEEKDAYS_OF_MONTH * longest) + SOME_MORE)
    groups = [
        replace(group, volatility=StandingVolatility(bound=group.volatility, day_of=day_of))
        for group in found.plan.groups
    ]
    return replace(found.plan, market=market, end=len(market) - 1, groups=groups, families=[])


def _ahead(plan: Plan, group: PricingGroup, *, newest: int) -> Schedule:
    """The rolls of a leg from the newest day on, that day included whether or not it is one."""
    rolling = group.specs[0].rolling
    return leg_schedule(
        plan.market.dates,
        cycle=rolling.cycle,
        term_months=rolling.term,
        start=newest,
        end=plan.end,
        close_before=rolling.close_before,
    )


def _continued(
    group: PricingGroup, past: Schedule, ahead: Schedule, lengthened_market: Market, market: Market
) -> Schedule:
    """The options that were carried out up to the newest day, and those that follow if nothing moves."""
    following = ahead.opened[1]
    closed = np.where(past.live, following, past.closed)
    runs_out = past.expiry_day <= lengthened_market.day_number[following]
    gate = group.specs[0].rolling.gate
    is_on = gate is None or bool(gate.condition.on(market)[-1])
    later = slice(1, None) if is_on else slice(0, 0)
    done = replace(
        past, closed=closed, settles=np.where(past.live, runs_out, past.settles), live=np.zeros_like(past.live)
    )
    names = [one.name for one in fields(Schedule)]
    return Schedule(**{name: np.concatenate([getattr(done, name), getattr(ahead, name)[later]]) for name in names})


def _coming_leg(
    plan: Plan, paths: LegPaths, row: int, ahead: Schedule, leg: Leg, label: str, costs: Costs, *, newest: int
) -> ComingLeg:
    # the newest day opens a stub where it is no roll date
    which = int(ahead.stub[0])
    roll = int(ahead.opened[which])
    dates = plan.market.dates
    number = int(paths.roll_of_day[roll - plan.start])
    option = None
    if number >= 0 and paths.schedule.opened[number] == roll:
        option = NewOption(
            decided=dates[roll - paths.group.lag],
            strike=float(paths.strike[row, number]),
            flags=tuple(flag_words(int(paths.flags[row, number]))),
            forward=float(paths.forward_open[number]),
            vol=float(paths.vol_open[row, number]),
            premium=float(paths.premium[row, number]),
            cost=float(paths.open_cost(costs)[row, number]),
            delta=float(paths.delta_open[row, number]),
        )
    return ComingLeg(
        label=label,
        leg=leg,
        roll=dates[roll],
        expiry=ahead.expiry_day[which].astype("datetime64[D]"),
        option=option,
        live=_live(plan, paths, row, newest) if roll > newest else None,
    )


def _live(plan: Plan, paths: LegPaths, row: int, newest: int) -> LiveOption | None:
    day = newest - plan.start
    number = int(paths.roll_of_day[day])
    if number < 0:
        return None
    return LiveOption(
        opened=plan.market.dates[paths.schedule.opened[number]],
        expiry=paths.schedule.expiry_day[number].astype("datetime64[D]"),
        strike=float(paths.strike[row, number]),
        value=float(paths.mark[row, day]),
        delta=float(paths.delta[row, day]),
    )


def _held(
    plan: Plan, paths: LegPaths, row: int, leg: ComingLeg, costs: Costs, date: np.datetime64
) -> HeldOption | None:
    """The option that a leg holds after the trades of a day, at the newest day's data."""
    position = int(np.searchsorted(plan.market.dates, date))
    number = int(paths.roll_of_day[position - plan.start])
    if number < 0 or leg.leg.held_ratio == 0.0:
        return None
    is_new = bool(paths.schedule.opened[number] == position)
    return HeldOption(
        label=leg.label,
        leg=leg.leg,
        group=paths.group,
        expiry=paths.schedule.expiry_day[number].astype("datetime64[D]"),
        strike=float(paths.strike[row, number]),
        value=float(paths.mark[row, position - plan.start]),
        delta=float(paths.delta[row, position - plan.start]),
        cost=float(paths.open_cost(costs)[row, number]) if is_new else 0.0,
        is_new=is_new,
    )
