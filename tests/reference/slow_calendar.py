"""What the slow twin knows of dates: trading days, cycles, rolls and expiries (C1, C2, C3).

Plain Python, borrowing nothing from ``backtest``; see ``slow_twin.py``. A *line* is a leg as it is carried
(``slow_lines.py``).
"""

from __future__ import annotations

from dataclasses import dataclass, field
from datetime import date, timedelta
from typing import Any

MONTHS_IN_ROLL = {"month": 1, "quarter": 3, "half": 6, "year": 12}


def third_friday(month: int) -> date:
    """Third Friday of a month counted as ``12 * year + (1..12) - 1``."""
    first = date(month // 12, month % 12 + 1, 1)
    return first + timedelta(days=(4 - first.weekday()) % 7 + 14)


def last_weekday(month: int) -> date:
    """Last Monday-to-Friday of a month counted in the same way."""
    day = date((month + 1) // 12, (month + 1) % 12 + 1, 1) - timedelta(days=1)
    while day.weekday() > 4:
        day -= timedelta(days=1)
    return day


@dataclass
class Calendar:
    """The days of the price file, with weekdays standing for trading days after its end."""

    days: list[date]
    positions: dict[date, int] = field(init=False)

    def __post_init__(self) -> None:
        self.positions = {day: p for p, day in enumerate(self.days)}

    def position(self, day: date) -> int:
        """Trading days from the file's first day."""
        p = len(self.days) - 1
        while day > self.days[-1]:
            p += day.weekday() < 5
            day -= timedelta(days=1)
        return self.positions[day] if p < len(self.days) else p

    def at(self, position: int) -> date | None:
        """The day of a position; None before the file, where nothing can be known."""
        if position < 0:
            return None
        if position < len(self.days):
            return self.days[position]
        day, still = self.days[-1], position - len(self.days) + 1
        while still > 0:
            day += timedelta(days=1)
            still -= day.weekday() < 5
        return day

    def on_or_before(self, day: date) -> date | None:
        """The day itself after the last price, else the last trading day up to it; None before the file."""
        if day > self.days[-1]:
            return day
        while day not in self.positions:
            if day < self.days[0]:
                return None
            day -= timedelta(days=1)
        return day

    def expiry(self, month: int) -> date | None:
        """C2: the listed expiry; a third Friday before the file's first day is no date of any cycle."""
        friday = third_friday(month)
        return None if friday < self.days[0] else self.on_or_before(friday)

    def month_end(self, month: int) -> date | None:
        """The last trading day of a month; the last weekday where that lies after the last price."""
        end = self.on_or_before(last_weekday(month))
        is_of_the_month = end is not None and 12 * end.year + end.month - 1 == month
        return end if is_of_the_month else None


@dataclass
class Cycle:
    """The dates of one line, each under an index: its month, or its trading day for a cycle of days.

    One roll is ``step`` further than the one before, and the expiry of an option ``term`` further than its roll.
    """

    calendar: Calendar
    line: Any
    step: int = field(init=False)
    term: int = field(init=False)
    rolls: list[tuple[int, date]] = field(init=False)
    roll_dates: set[date] = field(init=False)

    def __post_init__(self) -> None:
        leg, days = self.line.leg, self.calendar.days
        if leg.roll == "days":
            self.step = leg.every
            self.term = leg.every if leg.term_days is None else leg.term_days
            # one that is shifted or closed earlier may come from beyond either end of the file
            beyond = abs(self.line.shift_days) + leg.close_before + 3 * leg.every
            wanted = range(-beyond, len(days) + beyond)
            indices = [p for p in wanted if (p - self.line.phase) % self.step == 0]
        else:
            self.step = MONTHS_IN_ROLL[leg.roll]
            self.term = self.step if leg.term_months is None else leg.term_months
            wanted = range(12 * days[0].year, 12 * days[-1].year + 24 + 4 * self.step)
            indices = [m for m in wanted if (m % 12 + 1 - self.line.phase) % self.step == 0]
        self.rolls = [(i, day) for i in indices if (day := self.day(i, earlier=leg.close_before)) is not None]
        self.roll_dates = {day for _, day in self.rolls}

    def day(self, index: int, earlier: int = 0) -> date | None:
        """The cycle's date of an index (C2), or so many trading days before it."""
        leg, calendar = self.line.leg, self.calendar
        if leg.roll == "days":
            return calendar.at(index + self.line.shift_days - earlier)
        day = calendar.month_end(index) if leg.roll_day == "last trading day" else calendar.expiry(index)
        if day is None or self.line.shift_days == earlier:
            return day
        return calendar.at(calendar.position(day) + self.line.shift_days - earlier)

    def terms(self, today: date) -> tuple[date, date, bool]:
        """For an option opened today: its expiry, the day it is closed or settled, whether it is a stub (C3)."""
        index = next((i for i, day in self.rolls if day == today), None)
        stub = index is None
        if index is None:
            # held to the line's next roll; the option is the one the rule would be holding already
            index = next(i for i, day in self.rolls if day > today) - self.step
        expiry = self.day(index + self.term)
        closes = self.day(index + self.step, earlier=self.line.leg.close_before)
        assert expiry is not None
        assert closes is not None
        return expiry, closes, stub
