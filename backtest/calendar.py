"""Roll and expiry dates as integer positions in the trading days (C1 to C3).

The only date logic of the engine. Outside are dates, inside are positions found
with ``searchsorted``: the position of a day is its row in the price file, and
``len(dates)`` stands for "after the last price".
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from .arguments import whole_number
from .errors import OverlayError, PlanError

Dates = npt.NDArray[np.datetime64]
Positions = npt.NDArray[np.intp]

#: Months between the rolls of each named cycle (C2).
ROLL_MONTHS = {"month": 1, "quarter": 3, "half": 6, "year": 12}

#: A cycle moves by a year of trading days at most.
LARGEST_SHIFT_DAYS = 252

_EPOCH_WEEKDAY = 3  # 1970-01-01 was a Thursday; Monday is 0
_FRIDAY = 4


def third_friday(month: npt.ArrayLike) -> Dates:
    """Third Friday of each month.

    Parameters
    ----------
    month : array_like of int
        Months since January 1970 (the integer behind ``datetime64[M]``).

    Examples
    --------
    >>> third_friday(np.array(["2008-03"], dtype="datetime64[M]").astype(int))
    array(['2008-03-21'], dtype='datetime64[D]')
    """
    first = np.asarray(month, dtype=np.int64).astype("datetime64[M]").astype("datetime64[D]")
    weekday = (first.astype(np.int64) + _EPOCH_WEEKDAY) % 7
    return (first.astype(np.int64) + (_FRIDAY - weekday) % 7 + 14).astype("datetime64[D]")


def listed_expiry(dates: Dates, month: npt.ArrayLike, shift_days: int = 0) -> tuple[Dates, Positions]:
    """Expiry date of the listed cycle for each month, and its position (C2).

    A third Friday that is not a trading day but lies inside the range of ``dates``
    moves to the last trading day before it; one after the last date is taken as it
    falls and has the position ``len(dates)``; one before the first has -1. ``shift_days``
    then moves every date by that many trading days; outside the file, weekdays stand for them.
    """
    friday = third_friday(month)
    last = len(dates) - 1
    # a count of trading days that goes on past both ends of the file, where weekdays stand in
    count = np.searchsorted(dates, friday, side="right").astype(np.int64) - 1
    after, before = friday > dates[-1], friday < dates[0]
    # weekdays after the last day, the Friday included: the last day itself may be of a weekend
    count[after] = last + np.busday_count(dates[-1] + 1, friday[after] + 1)
    count[before] = -np.busday_count(friday[before], dates[0])
    count += shift_days
    inside = (count >= 0) & (count <= last)
    expiry = np.where(inside, dates[np.clip(count, 0, last)], friday)
    late = count > last
    expiry[late] = np.busday_offset(dates[-1], count[late] - last, roll="backward")
    return expiry, np.where(late, last + 1, np.where(inside, count, -1))


@dataclass(frozen=True, slots=True, kw_only=True)
class ListedCycle:
    """Third Fridays of every ``months``-th month, moved by ``phase`` months (C2).

    ``months=3`` is March, June, September and December; with ``phase=1`` it is
    January, April, July and October. ``shift_days`` moves every date by that many
    trading days.

    Raises
    ------
    OverlayError
        If ``months`` is not 1, 3, 6 or 12, or ``phase`` is not from 0 to ``months - 1``.
    """

    months: int
    phase: int = 0
    shift_days: int = 0

    def __post_init__(self) -> None:
        if self.months not in ROLL_MONTHS.values():
            raise OverlayError(
                f"a listed cycle rolls every 1, 3, 6 or 12 months, not every {self.months!r}", field="roll"
            )
        whole_number("phase", self.phase, least=0, most=self.months - 1, unit=f" for a cycle of {self.months} month(s)")
        whole_number("shift_days", self.shift_days, least=-LARGEST_SHIFT_DAYS, most=LARGEST_SHIFT_DAYS)

    def month_numbers(self, first: int, last: int) -> npt.NDArray[np.int64]:
        """The cycle's months from ``first`` to ``last`` inclusive, as months since January 1970."""
        # January 1970 is month 0, so December is 11: a quarter without phase has months 2, 5, 8, 11
        start = first + (self.months - 1 + self.phase - first) % self.months
        return np.arange(start, last + 1, self.months, dtype=np.int64)

    def roll_positions(self, dates: Dates) -> Positions:
        """Positions in ``dates`` of every roll date inside their range, increasing and without repeats."""
        return _roll_months(dates, self)[1]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Schedule:
    """The rolls of one leg as arrays of shape ``(roll,)``.

    ``opened`` and ``closed`` are positions in the market's trading days; the last
    roll is still live at the window's end (``live[-1]``) and its ``closed`` is that
    end. ``expiry_day`` counts days since 1970-01-01. ``settles`` is true where the
    option expires on the day it is closed.
    """

    opened: Positions
    closed: Positions
    expiry_day: npt.NDArray[np.int64]
    settles: npt.NDArray[np.bool_]
    live: npt.NDArray[np.bool_]


def leg_schedule(dates: Dates, *, cycle: ListedCycle, term_months: int, start: int, end: int) -> Schedule:
    """Open, close and expiry of every roll of a leg from ``start`` to ``end`` (C3).

    On ``start`` the leg opens even if it is not one of its roll dates: a stub,
    held to the leg's own next date, with the expiry of the option that the rule
    would already be holding (so with equal roll and term the stub expires on that
    next date). A roll date that falls on ``end`` is carried out.
    """
    around, their_position = _months_around(dates, cycle)
    first_month = int(around[their_position <= start][-1])
    month, position = _roll_months(dates, cycle)
    inside = (position > start) & (position <= end)
    open_month = np.concatenate([[first_month], month[inside]])
    opened = np.concatenate([[start], position[inside]])
    closed = np.concatenate([opened[1:], [end]])
    expiry, expiry_position = listed_expiry(dates, open_month + term_months, cycle.shift_days)
    live = np.zeros(len(opened), dtype=bool)
    live[-1] = True
    settles = (expiry_position <= closed) & ~live
    return Schedule(
        opened=opened.astype(np.intp),
        closed=closed.astype(np.intp),
        expiry_day=expiry.astype(np.int64),
        settles=settles,
        live=live,
    )


def inception_position(dates: Dates, *, cycle: ListedCycle, earliest: int, latest: int) -> int:
    """The first roll date of the anchor's cycle at or after position ``earliest`` (C3).

    Raises
    ------
    PlanError
        If there is none before ``latest``.
    """
    positions = cycle.roll_positions(dates)
    fits = positions[(positions >= earliest) & (positions < latest)]
    if fits.size == 0:
        raise PlanError(
            f"no roll date of the longest leg (every {cycle.months} month(s), third Friday) between {dates[earliest]} "
            f"and the day before {dates[latest]}: give a longer window, or a leg that rolls more often"
        )
    return int(fits[0])


def _roll_months(dates: Dates, cycle: ListedCycle) -> tuple[npt.NDArray[np.int64], Positions]:
    """Months of the cycle whose date lies in the file, with their positions."""
    month, position = _months_around(dates, cycle)
    inside = (position >= 0) & (position < len(dates))
    month, position = month[inside], position[inside]
    # a hole of weeks in the price file can put two cycle dates on one day: that is one roll, of the later month
    last_of_day = np.append(position[1:] != position[:-1], True) if position.size else np.zeros(0, dtype=bool)
    return month[last_of_day], position[last_of_day]


def _months_around(dates: Dates, cycle: ListedCycle) -> tuple[npt.NDArray[np.int64], Positions]:
    """The cycle's months over the file and as far beyond as its shift reaches, with their positions."""
    first, last = (int(d.astype("datetime64[M]").astype(np.int64)) for d in (dates[0], dates[-1]))
    # a month has at least 20 weekdays; one cycle more on each side holds the roll before and the roll after
    reach = cycle.months + 1 + abs(cycle.shift_days) // 20
    month = cycle.month_numbers(first - reach, last + reach)
    return month, listed_expiry(dates, month, cycle.shift_days)[1]
