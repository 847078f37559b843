"""Cycles beyond third Fridays: last trading days, every so many trading days, rolls before the cycle's dates (C2, C3).

Rung: hand-worked (dates around year ends, holidays and the ends of a file) and twin (plain loops over a list of days
that goes on past the end of the file). Third Fridays are in ``test_calendar.py``, gates in ``test_gates.py``.
"""

from __future__ import annotations

import calendar
from datetime import date, timedelta
from typing import Any

import numpy as np
import numpy.typing as npt
import pandas as pd
import pytest

from backtest import OverlayError
from backtest.calendar import Schedule, leg_schedule
from backtest.cycles import DaysCycle, LastDayCycle, ListedCycle, last_day_expiry

Dates = npt.NDArray[np.datetime64]


def weekdays(first: str, last: str, *closed: str) -> Dates:
    """Weekdays from first to last, without the days the exchange was closed."""
    days = pd.bdate_range(first, last).difference(pd.DatetimeIndex(closed))
    return days.to_numpy().astype("datetime64[D]")


def month_number(*months: str) -> npt.NDArray[np.int64]:
    return np.array(months, dtype="datetime64[M]").astype(np.int64)


def last_day(dates: Dates, month: str, shift_days: int = 0) -> tuple[str, int]:
    days, positions = last_day_expiry(dates, month_number(month), shift_days)
    return str(days[0]), int(positions[0])


def words(dates: Dates, schedule: Schedule) -> list[str]:
    """One line a roll: opened, expiry, closed, and how it ends."""
    ends = ["live" if live else "settles" if s else "sold" for s, live in zip(schedule.settles, schedule.live)]
    expiries = schedule.expiry_day.astype("datetime64[D]")
    return [
        f"{dates[a]} {e} {dates[c]} {end}" for a, e, c, end in zip(schedule.opened, expiries, schedule.closed, ends)
    ]


# ---------------------------------------------------------------- last trading days

# days on which the New York exchange was closed (its calendar of the time)
LAST_DAYS = [
    ("2007-12", "2007-12-31", "a Monday"),
    ("2005-12", "2005-12-30", "a Friday, the 31st being a Saturday"),
    ("2006-12", "2006-12-29", "a Friday, the 31st being a Sunday"),
    ("2008-02", "2008-02-29", "a leap day"),
    ("2010-05", "2010-05-28", "Monday the 31st is Memorial Day"),
    ("2013-03", "2013-03-28", "Friday the 29th is Good Friday"),
    ("2012-11", "2012-11-30", "a Friday"),
]
CLOSED = ("2007-12-25", "2008-01-01", "2010-05-31", "2013-03-29", "2012-11-22")


@pytest.mark.parametrize(("month", "expected", "why"), LAST_DAYS, ids=[why for *_, why in LAST_DAYS])
def test_last_trading_days(month: str, expected: str, why: str) -> None:
    dates = weekdays("2005-01-03", "2013-12-31", *CLOSED)
    day, position = last_day(dates, month)
    assert day == expected
    assert str(dates[position]) == expected


def test_a_month_whose_last_weeks_are_missing() -> None:
    # closed from Tuesday 11 September 2001 to the 14th in truth; here to the end of the month
    dates = weekdays("2001-08-01", "2001-11-30", *map(str, pd.bdate_range("2001-09-11", "2001-09-28").date))
    assert last_day(dates, "2001-09")[0] == "2001-09-10"


# Days from Monday 3 to Thursday 20 March 2008: 14 rows, 0 to 13
MARCH_2008 = weekdays("2008-03-03", "2008-03-20")


@pytest.mark.parametrize(
    ("month", "shift_days", "expected"),
    [
        pytest.param("2008-03", 0, ("2008-03-31", 14), id="the file ends within the month: its last weekday, Monday"),
        pytest.param("2008-04", 0, ("2008-04-30", 14), id="the month after"),
        pytest.param("2008-05", 0, ("2008-05-30", 14), id="a Friday, the 31st being a Saturday"),
        pytest.param("2008-03", 2, ("2008-04-02", 14), id="two weekdays later"),
        pytest.param("2008-03", -6, ("2008-03-21", 14), id="six weekdays earlier: still beyond the file"),
        pytest.param("2008-03", -7, ("2008-03-20", 13), id="seven: the file's last day"),
        pytest.param("2008-03", -8, ("2008-03-19", 12), id="eight: the day before it"),
        pytest.param("2008-02", 1, ("2008-03-03", 0), id="Friday 29 February and one more day"),
        pytest.param("2008-02", 3, ("2008-03-05", 2), id="and three"),
        pytest.param("2008-01", 22, ("2008-03-03", 0), id="22 weekdays after Thursday 31 January"),
    ],
)
def test_around_the_ends_of_the_file(month: str, shift_days: int, expected: tuple[str, int]) -> None:
    assert last_day(MARCH_2008, month, shift_days) == expected


def test_a_month_before_the_file_that_ends_on_a_weekend() -> None:
    # 31 August 2008 is a Sunday: the trading day after Friday the 29th is Monday 1 September, the file's first
    dates = weekdays("2008-09-01", "2008-09-30")
    assert last_day(dates, "2008-08", 1) == ("2008-09-01", 0)
    assert last_day(dates, "2008-08", 2) == ("2008-09-02", 1)


@pytest.mark.parametrize(("month", "shift_days"), [("2008-02", 0), ("2008-02", -5), ("2008-01", 21), ("2007-06", 0)])
def test_before_the_file_there_is_none(month: str, shift_days: int) -> None:
    assert last_day(MARCH_2008, month, shift_days)[1] == -1


@pytest.mark.parametrize(
    ("last", "expected"),
    [
        pytest.param("2008-02-29", ("2008-02-29", 20), id="on the last weekday"),
        pytest.param("2008-02-28", ("2008-02-29", 20), id="a day before it"),
        pytest.param("2008-03-03", ("2008-02-29", 20), id="in the next month"),
    ],
)
def test_a_file_that_ends_about_the_end_of_the_month(last: str, expected: tuple[str, int]) -> None:
    # 21 weekdays in February 2008
    assert last_day(weekdays("2008-02-01", last), "2008-02") == expected


def test_a_file_that_ends_on_a_weekend() -> None:
    # Saturday 29 November 2008 is traded in this file, and later than the month's last weekday
    dates = np.append(weekdays("2008-11-03", "2008-11-28"), np.datetime64("2008-11-29"))
    assert last_day(dates, "2008-11") == ("2008-11-29", 20)
    assert last_day(dates, "2008-12") == ("2008-12-31", 21)


def test_cycles_of_last_days() -> None:
    dates = weekdays("2007-11-01", "2008-08-29", *CLOSED)
    quarters = LastDayCycle(months=3).roll_positions(dates)
    assert dates[quarters].astype(str).tolist() == ["2007-12-31", "2008-03-31", "2008-06-30"]
    phased = LastDayCycle(months=3, phase=1, shift_days=-2).roll_positions(dates)
    # two trading days before 31 January, 30 April and 31 July
    assert dates[phased].astype(str).tolist() == ["2008-01-29", "2008-04-28", "2008-07-29"]
    assert LastDayCycle(months=1).words == "every 1 month(s), last trading day"
    assert LastDayCycle(months=6) != ListedCycle(months=6)


def slow_last_day(days: list[date], year: int, month: int, shift: int) -> date | None:
    """The last day of a list up to a month's end, and so many days on in it; weekdays follow the list's last day."""
    end = date(year, month, calendar.monthrange(year, month)[1])
    weekday = end
    while weekday.weekday() > 4:
        weekday -= timedelta(days=1)
    if end < days[0]:
        return None
    longer = list(days)
    while len(longer) < len(days) + 600:
        following = longer[-1] + timedelta(days=1)
        while following.weekday() > 4:
            following += timedelta(days=1)
        longer.append(following)
    aim = weekday if weekday > days[-1] else end
    place = max(n for n, day in enumerate(longer) if day <= aim) + shift
    return longer[place] if place >= 0 else None


@pytest.mark.parametrize("seed", range(12))
def test_last_days_equal_plain_loops(seed: int) -> None:
    rng = np.random.default_rng(seed)
    dates = weekdays(f"{rng.integers(1960, 2030)}-{rng.integers(1, 13):02}-{rng.integers(1, 29):02}", "2045-12-31")
    dates = dates[: rng.integers(30, 400)]
    keep = rng.random(len(dates)) > 0.1
    hole = rng.integers(1, len(dates))
    keep[hole : hole + rng.integers(0, 40)] = False
    keep[0] = True
    dates = dates[keep]
    days = dates.tolist()
    shift = int(rng.choice([0, 0, 1, -1, 5, -17, 60]))
    first, last = (int(d.astype("datetime64[M]").astype(int)) for d in (dates[0], dates[-1]))
    month = np.arange(first, last + 5)
    found, position = last_day_expiry(dates, month, shift)
    for one, day, place in zip(month.tolist(), found.tolist(), position.tolist()):
        expected = slow_last_day(days, 1970 + one // 12, one % 12 + 1, shift)
        if expected is None:
            assert place == -1
            continue
        assert day == expected
        assert place == (days.index(expected) if expected in days else len(days))


# ---------------------------------------------------------------- every so many trading days

# Monday 1 to Friday 12 June 2020: 10 rows, 0 to 9
JUNE_2020 = weekdays("2020-06-01", "2020-06-12")


@pytest.mark.parametrize(
    ("fields", "expected"),
    [
        ({"every": 4}, [0, 4, 8]),
        ({"every": 4, "phase": 1}, [1, 5, 9]),
        ({"every": 4, "phase": 1, "shift_days": 2}, [3, 7]),
        ({"every": 4, "shift_days": -1}, [3, 7]),
        ({"every": 4, "phase": 3, "shift_days": 252}, [3, 7]),
        ({"every": 1}, list(range(10))),
        ({"every": 10}, [0]),
        ({"every": 504, "phase": 503}, []),
        ({"every": 504, "phase": 252, "shift_days": -250}, [2]),
    ],
    ids=str,
)
def test_days_are_counted_from_the_files_first(fields: dict[str, int], expected: list[int]) -> None:
    assert DaysCycle(**fields).roll_positions(JUNE_2020).tolist() == expected


def test_expiries_of_days_go_on_in_weekdays_after_the_file() -> None:
    cycle = DaysCycle(every=4, phase=1)
    number, position = cycle.around(JUNE_2020)
    inside = (position >= 0) & (position < 10)
    day, place = cycle.expiries(JUNE_2020, number[inside], 6)
    # opened on rows 1, 5, 9: rows 7 (Wednesday 10 June), 11 and 15, that is two and six weekdays after Friday 12 June
    assert day.astype(str).tolist() == ["2020-06-10", "2020-06-16", "2020-06-22"]
    assert place.tolist() == [7, 10, 10]


def test_a_schedule_of_days() -> None:
    found = leg_schedule(JUNE_2020, cycle=DaysCycle(every=4, phase=1), term_months=4, start=1, end=9)
    assert words(JUNE_2020, found) == [
        "2020-06-02 2020-06-08 2020-06-08 settles",
        "2020-06-08 2020-06-12 2020-06-12 settles",
        "2020-06-12 2020-06-18 2020-06-12 live",
    ]
    assert found.stub.tolist() == [False, False, False]


def test_a_schedule_of_days_with_a_shift() -> None:
    # rows 3 and 7; the option of row 7 expires on row 13, two weekdays after row 11
    found = leg_schedule(JUNE_2020, cycle=DaysCycle(every=4, phase=1, shift_days=2), term_months=6, start=3, end=9)
    assert words(JUNE_2020, found) == [
        "2020-06-04 2020-06-12 2020-06-10 sold",
        "2020-06-10 2020-06-18 2020-06-12 live",
    ]


def test_a_stub_of_days_with_a_longer_term() -> None:
    # the option of row 1, six days from it, is what the rule would hold on row 3
    found = leg_schedule(JUNE_2020, cycle=DaysCycle(every=4, phase=1), term_months=6, start=3, end=8)
    assert words(JUNE_2020, found) == [
        "2020-06-04 2020-06-10 2020-06-08 sold",
        "2020-06-08 2020-06-16 2020-06-11 live",
    ]
    assert found.stub.tolist() == [True, False]


def test_a_stub_before_the_first_date_of_the_cycle() -> None:
    # the option of four days before row 3, which is before the file
    found = leg_schedule(JUNE_2020, cycle=DaysCycle(every=4, phase=3), term_months=4, start=0, end=9)
    assert words(JUNE_2020, found)[0] == "2020-06-01 2020-06-04 2020-06-04 settles"


def test_days_closed_outside_the_file_do_not_count() -> None:
    # Friday 5 June closed: row 4 is Monday the 8th
    dates = weekdays("2020-06-01", "2020-06-12", "2020-06-05")
    assert dates[DaysCycle(every=4).roll_positions(dates)].astype(str).tolist() == [
        "2020-06-01", "2020-06-08", "2020-06-12",
    ]  # fmt: skip


def test_length_of_days_in_months() -> None:
    assert DaysCycle(every=63).length_months == 3.0
    assert DaysCycle(every=5).length_months == pytest.approx(5 / 21, rel=1e-15)
    assert DaysCycle(every=5).words == "every 5 trading days"


@pytest.mark.parametrize(
    ("fields", "message", "field"),
    [
        ({"every": 0}, "every is 0; it takes a whole number from 1 to 504 trading days", "every"),
        ({"every": 505}, "every is 505; it takes a whole number from 1 to 504 trading days", "every"),
        ({"every": 5.0}, "every is 5.0; it takes a whole number from 1 to 504 trading days", "every"),
        ({"every": 5, "phase": 5}, "phase is 5; it takes a whole number from 0 to 4 for a cycle of 5 days", "phase"),
        (
            {"every": 5, "shift_days": 253},
            "shift_days is 253; it takes a whole number from -252 to 252",
            "shift_days",
        ),
    ],
)
def test_cycles_of_days_that_are_none(fields: dict[str, Any], message: str, field: str) -> None:
    with pytest.raises(OverlayError) as caught:
        DaysCycle(**fields)
    assert (str(caught.value), caught.value.field) == (message, field)


# ---------------------------------------------------------------- rolls before the cycle's dates

# third Fridays 19 June, 17 July, 21 August and 18 September; closed on Friday 3 July 2020 and on Labor Day
SUMMER_2020 = weekdays("2020-06-01", "2020-09-30", "2020-07-03", "2020-09-07")


def test_rolls_before_expiry() -> None:
    start, end = np.searchsorted(SUMMER_2020, np.array(["2020-06-17", "2020-09-10"], "datetime64[D]"))
    found = leg_schedule(
        SUMMER_2020, cycle=ListedCycle(months=1), term_months=1, start=int(start), end=int(end), close_before=2
    )
    assert words(SUMMER_2020, found) == [
        "2020-06-17 2020-07-17 2020-07-15 sold",
        "2020-07-15 2020-08-21 2020-08-19 sold",
        "2020-08-19 2020-09-18 2020-09-10 live",
    ]
    assert not found.stub.any()


@pytest.mark.parametrize(
    ("start", "first"),
    [
        pytest.param("2020-06-16", "2020-06-16 2020-06-19 2020-06-17 sold", id="before the roll: the old expiry"),
        pytest.param("2020-06-18", "2020-06-18 2020-07-17 2020-07-15 sold", id="after it: the new one already"),
        pytest.param("2020-06-19", "2020-06-19 2020-07-17 2020-07-15 sold", id="on the expiry itself too"),
    ],
)
def test_stubs_before_expiry(start: str, first: str) -> None:
    place = int(np.searchsorted(SUMMER_2020, np.datetime64(start)))
    found = leg_schedule(SUMMER_2020, cycle=ListedCycle(months=1), term_months=1, start=place, end=80, close_before=2)
    assert words(SUMMER_2020, found)[0] == first
    assert found.stub[0]


def test_rolls_before_with_a_shift_and_a_longer_term() -> None:
    # a day after the last trading days 30 June, 31 July, 31 August: 1 July, 3 August, 1 September; rolls three before
    cycle = LastDayCycle(months=1, shift_days=1)
    found = leg_schedule(SUMMER_2020, cycle=cycle, term_months=2, start=18, end=70, close_before=3)
    assert words(SUMMER_2020, found) == [
        "2020-06-25 2020-08-03 2020-06-26 sold",
        "2020-06-26 2020-09-01 2020-07-29 sold",
        "2020-07-29 2020-10-01 2020-08-27 sold",
        "2020-08-27 2020-11-02 2020-09-09 live",
    ]


def test_days_rolled_before() -> None:
    # dates on rows 0, 5, ...; rolls on rows 4 and 9; ten days from date to expiry
    dates = weekdays("2020-06-01", "2020-06-19")
    found = leg_schedule(dates, cycle=DaysCycle(every=5), term_months=10, start=4, end=14, close_before=1)
    # row 4 belongs to the date of row 5 (Monday 8 June), whose option expires on row 15, a weekday after the file
    assert words(dates, found) == [
        "2020-06-05 2020-06-22 2020-06-12 sold",
        "2020-06-12 2020-06-29 2020-06-19 sold",
        "2020-06-19 2020-07-06 2020-06-19 live",
    ]


def test_a_date_after_the_file_whose_roll_is_in_it() -> None:
    # the file ends on Thursday 20 August 2020, the day before the third Friday
    dates = weekdays("2020-06-01", "2020-08-20", "2020-07-03")
    found = leg_schedule(
        dates, cycle=ListedCycle(months=1), term_months=1, start=13, end=len(dates) - 1, close_before=1
    )
    assert words(dates, found)[-2:] == [
        "2020-07-16 2020-08-21 2020-08-20 sold",
        "2020-08-20 2020-09-18 2020-08-20 live",
    ]


@pytest.mark.parametrize("cycle", [ListedCycle(months=1, shift_days=-252), DaysCycle(every=21, shift_days=-252)])
def test_the_largest_shift_can_still_be_rolled_before(cycle: Any) -> None:
    moved = cycle.moved(-5)
    assert moved.shift_days == -257
    assert cycle.shift_days == -252
    assert type(moved) is type(cycle)
    # the rolls of the moved cycle are five trading days before those of the cycle
    dates = weekdays("2018-01-01", "2020-12-31")
    before, after = moved.roll_positions(dates), cycle.roll_positions(dates)
    assert (before[before + 5 < len(dates)] + 5).tolist() == after[after >= 5].tolist()
