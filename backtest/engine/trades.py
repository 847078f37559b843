"""The trades of one leg and the money they move, per option."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from .legs import LegPaths
from .plan import BookKey, Plan

Array = npt.NDArray[np.float64]
Days = npt.NDArray[np.intp]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Trades:
    """Trades of one option: days from the window's first, what an open takes and a close brings, after cost."""

    opened: Days  # (roll,)
    taken: Array
    closed: Days  # (closed roll,)
    brought: Array


def leg_trades(plan: Plan, leg: LegPaths, key: BookKey, open_cost: Array, exit_cost: Array) -> Trades:
    """The trades of a book row; an option still live is not closed."""
    schedule = leg.schedule
    done = ~schedule.live
    return Trades(
        opened=schedule.opened - plan.start,
        taken=key.direction * leg.premium[key.row] + open_cost,
        closed=schedule.closed[done] - plan.start,
        brought=key.direction * leg.close_value[key.row, done] - exit_cost[done],
    )


def counted_flows(anchor_day: Days, anchor_of_day: Days, mark: Array, trades: Trades, count: Array) -> Array:
    """Money that each day's trades bring when ``count`` options are held from each anchor roll on, shape ``(day,)``.

    At an anchor roll that is not the leg's own, the count of a live option changes at mid without cost; ``mark`` is
    the signed mid after each day's trades, zero while the leg is flat.
    """
    of_day = count[anchor_of_day]
    # the old option was held in the count of the day before; an anchor roll on the same day has changed it since
    before = of_day[np.maximum(trades.closed - 1, 0)]
    flow = np.zeros(len(anchor_of_day))
    flow[trades.closed] = before * trades.brought
    flow[trades.opened] -= of_day[trades.opened] * trades.taken
    through = ~np.isin(anchor_day, trades.opened)
    flow[anchor_day] -= np.where(through, np.diff(count, prepend=count[0]) * mark[anchor_day], 0.0)
    return flow


def at_anchors(anchor_day: Days, mark: Array, trades: Trades) -> tuple[Array, Array, Array]:
    """What an option counts for at anchor rolls, and the flows of all other days.

    Returns
    -------
    before : ndarray, shape (anchor roll,)
        Just before the trades: what it is closed for there, its signed mid, or nothing.
    price : ndarray, shape (anchor roll,)
        In the package's price: signed mid, plus cost where it is opened there.
    flow : ndarray, shape (day,)
        Money that trades on other days bring.
    """
    place = np.full(len(mark), -1, dtype=np.intp)
    place[anchor_day] = np.arange(len(anchor_day))
    opened, closed = place[trades.opened], place[trades.closed]
    on_open, on_close = opened >= 0, closed >= 0
    before, price = mark[anchor_day], mark[anchor_day]
    before[opened[on_open]] = 0.0
    before[closed[on_close]] = trades.brought[on_close]
    price[opened[on_open]] = trades.taken[on_open]
    flow = np.zeros(len(mark))
    flow[trades.closed[~on_close]] = trades.brought[~on_close]
    flow[trades.opened[~on_open]] -= trades.taken[~on_open]
    return before, price, flow
