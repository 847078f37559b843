"""If the counterparty of a band dealt off-exchange defaults.

All options are taken to be dealt with one counterparty under a netting agreement and without collateral. On the day of
a default everything dealt with it is closed out at mid before that day's trades: options held overnight are worth what
they are at that close, those that end on the day what they settle or sell for, and sold ones count against bought
ones. Of a sum that is owed to the holder the share ``1 - recovery`` is lost; of one that the holder owes, nothing. The
loss is met by selling of all that is held pro rata at no cost, and the options are dealt anew at mid with another
counterparty. So from that day on wealth is what it would have been less the share lost, fractions of contracts or not;
a second default takes its share of what the first has left.
"""

from __future__ import annotations

import datetime as dt
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from ..beside import Counterparty
from ..engine.leg_replay import counted
from ..engine.result import Replay
from .drawdowns import deepest_drawdown
from .performance import annual_return

Array = npt.NDArray[np.float64]


@dataclass(frozen=True, slots=True, kw_only=True)
class Default:
    """One default; decimals of the wealth just before it.

    ``exposure`` is the net value of all options, zero where the holder owes it; ``loss`` what of it is lost.
    """

    date: np.datetime64
    exposure: float
    loss: float


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Stress:
    """The replay with its defaults.

    Attributes
    ----------
    asked : Counterparty
    events : tuple of Default
        In order; none where the worst payoff of a bought put was asked for and none paid.
    outside : tuple of date
        Dates asked for that lie before the first day, or after the last day on which there is wealth.
    wealth : ndarray, shape (day,)
        Growth of 1 after each day's trades; NaN from a default on that takes everything.
    annual_return, max_drawdown : float
        Of that path (C11).
    annual_return_difference, max_drawdown_difference : float
        The same less those of the replay without a default.
    """

    asked: Counterparty
    events: tuple[Default, ...]
    outside: tuple[dt.date, ...]
    wealth: Array
    annual_return: float
    max_drawdown: float
    annual_return_difference: float
    max_drawdown_difference: float

    def as_dict(self) -> dict[str, object]:
        """Plain values; decimals of wealth."""
        default = self.asked.default
        return {
            "recovery": self.asked.recovery,
            "default": default if isinstance(default, str) else [day.isoformat() for day in default],
            "events": [{"date": one.date, "exposure": one.exposure, "loss": one.loss} for one in self.events],
            "outside": [day.isoformat() for day in self.outside],
            "annual_return": self.annual_return,
            "max_drawdown": self.max_drawdown,
            "annual_return_difference": self.annual_return_difference,
            "max_drawdown_difference": self.max_drawdown_difference,
        }


def counterparty_stress(replay: Replay, counterparty: Counterparty) -> Stress:
    """The replay's wealth if the counterparty of all its options defaults.

    A default on a day without trading happens on the next trading day; two that fall on the same day are one.
    """
    # before the day's trades; nothing has been dealt before those of the first day
    before = replay.wealth + replay.trading_cost
    exposure = np.maximum(value_at_close(replay), 0.0) / before
    outside: list[dt.date] = []
    if isinstance(counterparty.default, str):
        worst = _worst_put_payoff(replay, before)
        days = [] if worst is None else [worst]
    else:
        days, outside = _trading_days(replay, counterparty.default)
    lost = (1.0 - counterparty.recovery) * exposure
    events = tuple(
        Default(date=replay.dates[day], exposure=float(exposure[day]), loss=float(lost[day])) for day in days
    )
    kept = np.ones(len(replay))
    for day, event in zip(days, events, strict=True):
        kept[day:] *= 1.0 - event.loss if event.loss < 1.0 else np.nan
    wealth = replay.wealth * kept
    annual, depth = annual_return(wealth, replay.dates), deepest_drawdown(wealth).depth
    return Stress(
        asked=counterparty,
        events=events,
        outside=tuple(outside),
        wealth=wealth,
        annual_return=annual,
        max_drawdown=depth,
        annual_return_difference=annual - annual_return(replay.wealth, replay.dates),
        max_drawdown_difference=depth - deepest_drawdown(replay.wealth).depth,
    )


def value_at_close(replay: Replay) -> Array:
    """Signed value at each close of all options held overnight, before that day's trades, shape ``(day,)``.

    Per 1 of starting wealth; those that end on the day at what they settle or sell for. Zero on the first day.
    """
    value = np.zeros(len(replay))
    for leg in replay.legs:
        ending = leg.daily_mark.copy()
        ending[leg.opened] = 0.0  # dealt at this close, not held overnight
        ending[leg.closed[leg.done]] = leg.close_value[leg.done]
        value[1:] += leg.leg.direction * counted(leg.count[:-1], ending[1:])
    return value


def _worst_put_payoff(replay: Replay, before: Array) -> int | None:
    """The close of the bought put that was worth most at its end, as a share of wealth; None where none paid."""
    most, found = 0.0, None
    for leg in replay.legs:
        if leg.leg.right != "put" or leg.signed_ratio <= 0:
            continue
        closed = leg.closed[leg.done]
        paid = counted(leg.count[closed - 1], leg.close_value[leg.done]) / before[closed]
        for day, value in zip(closed.tolist(), paid.tolist(), strict=True):
            if value > most:
                most, found = value, day
    return found


def _trading_days(replay: Replay, asked: tuple[dt.date, ...]) -> tuple[list[int], list[dt.date]]:
    """Positions of the defaults, each once, and the dates for which there is none."""
    # wealth that is lost is so for good
    dates = replay.dates[np.isfinite(replay.wealth)]
    days: dict[int, None] = {}
    outside = []
    for date in asked:
        day = int(np.searchsorted(dates, np.datetime64(date, "D")))
        if np.datetime64(date, "D") < dates[0] or day == len(dates):
            outside.append(date)
        else:
            days[day] = None
    return list(days), outside
