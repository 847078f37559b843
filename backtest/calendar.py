"""When the options of one leg are opened, closed and expire, as positions in the trading days (C1 to C3).

With the cycles (``cycles.py``) the only date logic of the engine.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from .cycles import Cycle, Dates, Positions, rolls_inside
from .errors import PlanError

Flags = npt.NDArray[np.bool_]

#: Why an option was closed before its time; zero for one that was not.
BY_GATE, BY_DELTA, BY_PROFIT, BY_LOW_VALUE = 1, 2, 3, 4
REASON_WORDS = {
    BY_GATE: "closed by its gate",
    BY_DELTA: "replaced, delta low",
    BY_PROFIT: "replaced, profit taken",
    BY_LOW_VALUE: "replaced, value low",
}


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Schedule:
    """The options of one leg as arrays of shape ``(roll,)``, in order of their opens.

    ``opened`` and ``closed`` are positions in the market's trading days; an option still live at the window's end
    (only the last can be) has that end as ``closed``. Between a close and the next open the leg is flat.
    ``expiry_day`` counts days since 1970-01-01. ``settles`` is true where the option expires on the day it is closed,
    ``stub`` where it is opened between two roll dates. ``reason`` says why it was closed before its roll date.
    """

    opened: Positions
    closed: Positions
    expiry_day: npt.NDArray[np.int64]
    settles: Flags
    live: Flags
    stub: Flags
    reason: npt.NDArray[np.int64]

    @property
    def follows(self) -> Flags:
        """Whether an option takes the place of one that is closed on the same day."""
        follows = np.zeros(len(self.opened), dtype=bool)
        follows[1:] = self.opened[1:] == self.closed[:-1]
        return follows

    def option_of_day(self, start: int, end: int) -> Positions:
        """Which option is held after each day's trades from ``start`` to ``end``; -1 where the leg is flat."""
        days = end - start + 1
        if not len(self.opened):
            return np.full(days, -1, dtype=np.intp)
        held = np.cumsum(np.bincount(self.opened - start, minlength=days)) - 1
        last = np.where(self.live, end, self.closed - 1)
        # before the first option this looks at the last one, which is not over then
        held[np.arange(start, end + 1) > last[held]] = -1
        return held


def leg_schedule(
    dates: Dates, *, cycle: Cycle, term_months: int, start: int, end: int, close_before: int = 0
) -> Schedule:
    """Open, close and expiry of every roll of a leg from ``start`` to ``end`` (C3).

    On ``start`` the leg opens even if it is not one of its roll dates: a stub,
    held to the leg's own next date, with the expiry of the option that the rule
    would already be holding (so with equal roll and term the stub expires on that
    next date). A roll date that falls on ``end`` is carried out.

    ``term_months`` is in trading days for a cycle of days. With ``close_before`` the leg rolls that many trading days
    before the cycle's dates, on which its options expire.
    """
    rolling = cycle.moved(-close_before) if close_before else cycle
    around, their_position = rolling.around(dates)
    number, position = rolls_inside(dates, rolling)
    inside = (position > start) & (position <= end)
    open_number = np.concatenate([[int(around[their_position <= start][-1])], number[inside]])
    opened = np.concatenate([[start], position[inside]])
    closed = np.concatenate([opened[1:], [end]])
    expiry, expiry_position = cycle.expiries(dates, open_number, term_months)
    live = np.zeros(len(opened), dtype=bool)
    live[-1] = True
    stub = np.zeros(len(opened), dtype=bool)
    stub[0] = start not in position
    return Schedule(
        opened=opened.astype(np.intp),
        closed=closed.astype(np.intp),
        expiry_day=expiry.astype(np.int64),
        settles=(expiry_position <= closed) & ~live,
        live=live,
        stub=stub,
        reason=np.zeros(len(opened), dtype=np.int64),
    )


def gated_schedule(schedule: Schedule, on: Flags, *, close_when_off: bool, open_at_once: bool) -> Schedule:
    """A schedule of which only what a gate lets through is held.

    Parameters
    ----------
    on : ndarray of bool, shape (day,)
        Whether the gate lets an option be opened on each trading day of the market.
    close_when_off : bool
        Close a live option on the first day on which the gate is off, instead of letting it run.
    open_at_once : bool
        Open on the first day on which the gate is on again, to the close of the option that would be held, instead of
        waiting for the next roll date.
    """
    held: list[tuple[int, int, int, bool, bool, int]] = []  # roll, opened, closed, live, stub, reason
    for number, (opened, closed, live) in enumerate(
        zip(schedule.opened.tolist(), schedule.closed.tolist(), schedule.live.tolist(), strict=True)
    ):
        day, until = opened, closed + 1 if live else closed  # days on which something may still be done
        while day < until:
            if not on[day]:
                if not open_at_once:
                    break
                later = np.flatnonzero(on[day:until])
                if later.size == 0:
                    break
                day += int(later[0])
            off = np.flatnonzero(~on[day:until]) if close_when_off else np.zeros(0, dtype=np.intp)
            stub = bool(schedule.stub[number]) or day > opened
            if off.size == 0:
                held.append((number, day, closed, live, stub, int(schedule.reason[number])))
                break
            held.append((number, day, day + int(off[0]), False, stub, BY_GATE))
            day += int(off[0])
    columns: npt.NDArray[np.int64] = np.array(held, dtype=np.int64).reshape(len(held), 6)
    roll, opened_at, closed_at, live_at, stub_at, reason = (columns[:, place] for place in range(6))
    return Schedule(
        opened=opened_at.astype(np.intp),
        closed=closed_at.astype(np.intp),
        expiry_day=schedule.expiry_day[roll],
        settles=schedule.settles[roll] & (closed_at == schedule.closed[roll]),
        live=live_at.astype(bool),
        stub=stub_at.astype(bool),
        reason=reason,
    )


def inception_position(dates: Dates, *, cycle: Cycle, earliest: int, latest: int) -> int:
    """The first roll date of the anchor's cycle at or after position ``earliest`` (C3).

    Raises
    ------
    PlanError
        If there is none before ``latest``.
    """
    _, positions = rolls_inside(dates, cycle)
    fits = positions[(positions >= earliest) & (positions < latest)]
    if fits.size == 0:
        raise PlanError(
            f"no roll date of the longest leg ({cycle.words}) between {dates[earliest]} "
            f"and the day before {dates[latest]}: give a longer window, or a leg that rolls more often"
        )
    return int(fits[0])
