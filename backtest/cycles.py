"""Cycles of dates as integer positions in the trading days (C1, C2).

Outside are dates, inside are positions found with ``searchsorted``: the position of a day is its row in the price
file, and ``len(dates)`` stands for "after the last price". A cycle numbers its dates, and gives for each number the
date, its position, and the expiry of an option that is opened there.
"""

from __future__ import annotations

from copy import copy
from dataclasses import dataclass
from typing import ClassVar, Protocol, TypeVar

import numpy as np
import numpy.typing as npt

from .arguments import whole_number
from .errors import OverlayError

Dates = npt.NDArray[np.datetime64]
Positions = npt.NDArray[np.intp]
Numbers = npt.NDArray[np.int64]
AnyCycle = TypeVar("AnyCycle", "MonthCycle", "DaysCycle")

#: Months between the rolls of each named cycle (C2).
ROLL_MONTHS = {"month": 1, "quarter": 3, "half": 6, "year": 12}

#: A cycle moves by a year of trading days at most.
LARGEST_SHIFT_DAYS = 252
#: Trading days between the rolls of a cycle of days, at most: two years.
LONGEST_DAYS = 504
#: Trading days that count as a month (common practice).
DAYS_IN_MONTH = 21

_EPOCH_WEEKDAY = 3  # 1970-01-01 was a Thursday; Monday is 0
_FRIDAY = 4


class Cycle(Protocol):
    """What the planner asks of a cycle."""

    @property
    def length_months(self) -> float:
        """Months between two dates."""
        ...

    @property
    def words(self) -> str:
        """What it is, for messages."""
        ...

    def around(self, dates: Dates) -> tuple[Numbers, Positions]:
        """Numbers of the cycle's dates over the file and some beyond, with their positions (-1 before it)."""
        ...

    def expiries(self, dates: Dates, number: Numbers, term: int) -> tuple[Dates, Positions]:
        """Date and position at which options opened at the numbered dates expire."""
        ...

    def moved(self, days: int) -> Cycle:
        """The same cycle with every date so many trading days later."""
        ...


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
    return _placed(dates, friday, friday, shift_days)


def last_day_expiry(dates: Dates, month: npt.ArrayLike, shift_days: int = 0) -> tuple[Dates, Positions]:
    """Last trading day of each month, and its position (C2); otherwise as :func:`listed_expiry`.

    In the month of the last price, and after it, the last weekday stands for the last trading day.
    """
    after = (np.asarray(month, dtype=np.int64) + 1).astype("datetime64[M]").astype("datetime64[D]")
    return _placed(dates, after - 1, np.busday_offset(after, -1, roll="forward"), shift_days)


def _placed(dates: Dates, day: Dates, weekday: Dates, shift_days: int) -> tuple[Dates, Positions]:
    """The last trading days up to and including each ``day``, moved; outside the file ``weekday`` stands for it."""
    last = len(dates) - 1
    # a count of trading days that goes on past both ends of the file, where weekdays stand in
    count = np.searchsorted(dates, day, side="right").astype(np.int64) - 1
    after, before = weekday > dates[-1], day < dates[0]
    # weekdays after the last day, the day itself included: the last day may be of a weekend
    count[after] = last + np.busday_count(dates[-1] + 1, weekday[after] + 1)
    count[before] = -np.busday_count(weekday[before], dates[0])
    return _dated(dates, count + shift_days, weekday)


def _dated(dates: Dates, count: Numbers, before: Dates) -> tuple[Dates, Positions]:
    """Dates and positions of counts of trading days; ``before`` stands for those before the file."""
    last = len(dates) - 1
    inside = (count >= 0) & (count <= last)
    expiry = np.where(inside, dates[np.clip(count, 0, last)], before)
    late = count > last
    expiry[late] = np.busday_offset(dates[-1], count[late] - last, roll="backward")
    return expiry, np.where(late, last + 1, np.where(inside, count, -1))


@dataclass(frozen=True, slots=True, kw_only=True)
class MonthCycle:
    """A day of every ``months``-th month, moved by ``phase`` months (C2).

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

    day_words: ClassVar[str] = ""

    def __post_init__(self) -> None:
        if self.months not in ROLL_MONTHS.values():
            raise OverlayError(
                f"a listed cycle rolls every 1, 3, 6 or 12 months, not every {self.months!r}", field="roll"
            )
        whole_number("phase", self.phase, least=0, most=self.months - 1, unit=f" for a cycle of {self.months} month(s)")
        whole_number("shift_days", self.shift_days, least=-LARGEST_SHIFT_DAYS, most=LARGEST_SHIFT_DAYS)

    @property
    def length_months(self) -> float:
        """Months between two dates."""
        return float(self.months)

    @property
    def words(self) -> str:
        """What it is, for messages."""
        return f"every {self.months} month(s), {self.day_words}"

    def month_numbers(self, first: int, last: int) -> npt.NDArray[np.int64]:
        """The cycle's months from ``first`` to ``last`` inclusive, as months since January 1970."""
        # January 1970 is month 0, so December is 11: a quarter without phase has months 2, 5, 8, 11
        start = first + (self.months - 1 + self.phase - first) % self.months
        return np.arange(start, last + 1, self.months, dtype=np.int64)

    def around(self, dates: Dates) -> tuple[Numbers, Positions]:
        """Months of the cycle, counted since January 1970, over the file and beyond, with their positions."""
        first, last = (int(d.astype("datetime64[M]").astype(np.int64)) for d in (dates[0], dates[-1]))
        # a month has at least 20 weekdays; one cycle more on each side holds the roll before and the roll after
        reach = self.months + 1 + abs(self.shift_days) // 20
        month = self.month_numbers(first - reach, last + reach)
        return month, self._placed(dates, month)[1]

    def expiries(self, dates: Dates, number: Numbers, term: int) -> tuple[Dates, Positions]:
        """The cycle's own day ``term`` months later."""
        return self._placed(dates, number + term)

    def moved(self, days: int) -> MonthCycle:
        """The same cycle with every date so many trading days later."""
        return _moved(self, days)

    def roll_positions(self, dates: Dates) -> Positions:
        """Positions in ``dates`` of every roll date inside their range, increasing and without repeats."""
        return rolls_inside(dates, self)[1]

    def _placed(self, dates: Dates, month: Numbers) -> tuple[Dates, Positions]:
        raise NotImplementedError


@dataclass(frozen=True, slots=True, kw_only=True)
class ListedCycle(MonthCycle):
    """Third Fridays of every ``months``-th month (C2)."""

    day_words = "third Friday"

    def _placed(self, dates: Dates, month: Numbers) -> tuple[Dates, Positions]:
        return listed_expiry(dates, month, self.shift_days)


@dataclass(frozen=True, slots=True, kw_only=True)
class LastDayCycle(MonthCycle):
    """Last trading days of every ``months``-th month (C2)."""

    day_words = "last trading day"

    def _placed(self, dates: Dates, month: Numbers) -> tuple[Dates, Positions]:
        return last_day_expiry(dates, month, self.shift_days)


@dataclass(frozen=True, slots=True, kw_only=True)
class DaysCycle:
    """Every ``every`` trading days, counted from the file's first day, moved by ``phase`` and ``shift_days`` (C2)."""

    every: int
    phase: int = 0
    shift_days: int = 0

    def __post_init__(self) -> None:
        whole_number("every", self.every, least=1, most=LONGEST_DAYS, unit=" trading days")
        whole_number("phase", self.phase, least=0, most=self.every - 1, unit=f" for a cycle of {self.every} days")
        whole_number("shift_days", self.shift_days, least=-LARGEST_SHIFT_DAYS, most=LARGEST_SHIFT_DAYS)

    @property
    def length_months(self) -> float:
        """Months between two dates."""
        return self.every / DAYS_IN_MONTH

    @property
    def words(self) -> str:
        """What it is, for messages."""
        return f"every {self.every} trading days"

    def around(self, dates: Dates) -> tuple[Numbers, Positions]:
        """Numbers of the dates over the file and two beyond each end, with their positions."""
        offset = self.phase + self.shift_days
        number = np.arange(-offset // self.every - 2, (len(dates) - offset) // self.every + 3, dtype=np.int64)
        return number, np.clip(number * self.every + offset, -1, len(dates))

    def expiries(self, dates: Dates, number: Numbers, term: int) -> tuple[Dates, Positions]:
        """``term`` trading days later; weekdays beyond the file."""
        count = number * self.every + (self.phase + self.shift_days + term)
        return _dated(dates, count, np.broadcast_to(dates[0] - 1, count.shape))

    def moved(self, days: int) -> DaysCycle:
        """The same cycle with every date so many trading days later."""
        return _moved(self, days)

    def roll_positions(self, dates: Dates) -> Positions:
        """Positions in ``dates`` of every roll date inside their range, increasing."""
        return rolls_inside(dates, self)[1]


def _moved(cycle: AnyCycle, days: int) -> AnyCycle:
    # the limit of a shift is for what is agreed: a leg at that limit may still roll some days before its dates
    moved = copy(cycle)
    object.__setattr__(moved, "shift_days", cycle.shift_days + days)
    return moved


def rolls_inside(dates: Dates, cycle: Cycle) -> tuple[Numbers, Positions]:
    """Numbers of the cycle's dates that lie in the file, with their positions."""
    number, position = cycle.around(dates)
    inside = (position >= 0) & (position < len(dates))
    number, position = number[inside], position[inside]
    # a hole of weeks in the price file can put two dates on one day: that is one roll, of the later date
    last_of_day = np.append(position[1:] != position[:-1], True) if position.size else np.zeros(0, dtype=bool)
    return number[last_of_day], position[last_of_day]
