"""Expiry dates and rolls of C2 and C3.

Rung: independent library (third Fridays by ``calendar``, Good Fridays by ``dateutil``), published value (days on
which the exchange was closed), hand-worked (schedules on small histories), twin (plain loops over a list of days that
goes on past both ends of the file), behaviour (messages).
"""

from __future__ import annotations

import calendar
from bisect import bisect_right
from datetime import date, timedelta
from typing import Any

import numpy as np
import numpy.typing as npt
import pandas as pd
import pytest
from dateutil.easter import easter  # type: ignore[import-untyped]

from backtest import OverlayError, PlanError
from backtest.calendar import Schedule, inception_position, leg_schedule
from backtest.cycles import ListedCycle, listed_expiry, third_friday

Dates = npt.NDArray[np.datetime64]
MONTH, QUARTER, HALF, YEAR = (ListedCycle(months=n) for n in (1, 3, 6, 12))


def third_friday_of(year: int, month: int) -> date:
    """By the calendar module's weeks, Monday first."""
    return [date(year, month, week[4]) for week in calendar.monthcalendar(year, month) if week[4]][2]


def weekdays(first: str, last: str, *closed: str) -> Dates:
    """Weekdays from first to last, without the days the exchange was closed."""
    days = pd.bdate_range(first, last).difference(pd.DatetimeIndex(closed))
    return days.to_numpy().astype("datetime64[D]")


def month_number(*months: str) -> npt.NDArray[np.int64]:
    return np.array(months, dtype="datetime64[M]").astype(np.int64)


def at(dates: Dates, day: str) -> int:
    """Row of a day that is in the file."""
    (row,) = np.flatnonzero(dates == np.datetime64(day))
    return int(row)


def expiry(dates: Dates, month: str, shift_days: int = 0) -> tuple[str, int]:
    days, positions = listed_expiry(dates, month_number(month), shift_days)
    return str(days[0]), int(positions[0])


def words(dates: Dates, schedule: Schedule) -> list[str]:
    """One line a roll: opened, expiry, closed, and how it ends."""
    ends = ["live" if live else "settles" if s else "sold" for s, live in zip(schedule.settles, schedule.live)]
    expiries = schedule.expiry_day.astype("datetime64[D]")
    assert not (schedule.settles & schedule.live).any()
    return [
        f"{dates[a]} {e} {dates[c]} {end}" for a, e, c, end in zip(schedule.opened, expiries, schedule.closed, ends)
    ]


# ---------------------------------------------------------------- third Fridays


def test_third_fridays_by_the_calendar_module() -> None:
    months = np.arange("1950-01", "2041-01", dtype="datetime64[M]").astype(np.int64)
    expected = [third_friday_of(year, month) for year in range(1950, 2041) for month in range(1, 13)]
    assert len(months) == 1092
    assert third_friday(months).tolist() == expected


def test_earliest_and_latest_third_friday() -> None:
    # 1 March 2013 was a Friday, so the third is the 15th; 1 March 2008 a Saturday, so it is the 21st
    assert third_friday(month_number("2013-03", "2008-03")).astype(str).tolist() == ["2013-03-15", "2008-03-21"]


# The third Fridays of 1990 to 2018 on which the exchange was closed, all of them Good Fridays, and the day before
# (exchange closures of the time; in 2008 the quarterly options expired on Thursday the 20th).
CLOSED_THIRD_FRIDAYS = [
    ("1992-04-17", "1992-04-16"),
    ("2000-04-21", "2000-04-20"),
    ("2003-04-18", "2003-04-17"),
    ("2008-03-21", "2008-03-20"),
    ("2014-04-18", "2014-04-17"),
]


def test_the_closed_third_fridays_are_the_good_fridays() -> None:
    fridays = [easter(year) - timedelta(days=2) for year in range(1990, 2019)]
    both = [str(day) for day in fridays if day == third_friday_of(day.year, day.month)]
    assert both == [friday for friday, _ in CLOSED_THIRD_FRIDAYS]


@pytest.mark.parametrize(("friday", "thursday"), CLOSED_THIRD_FRIDAYS)
def test_good_friday_moves_the_expiry_to_thursday(friday: str, thursday: str) -> None:
    around = str(np.datetime64(friday) - 30), str(np.datetime64(friday) + 30)
    dates = weekdays(*around, friday)
    assert expiry(dates, friday[:7]) == (thursday, at(dates, thursday))
    # with the exchange open it is the Friday
    assert expiry(weekdays(*around), friday[:7])[0] == friday


def test_september_2001() -> None:
    # closed from Tuesday the 11th to Friday the 14th; the third Friday was the 21st and the exchange was open again.
    # Days from the 4th (Labor Day was the 3rd): 4 5 6 7 10 are rows 0 to 4, 17 18 19 20 21 are rows 5 to 9.
    dates = weekdays("2001-09-04", "2001-09-28", "2001-09-11", "2001-09-12", "2001-09-13", "2001-09-14")
    assert expiry(dates, "2001-09") == ("2001-09-21", 9)
    # five trading days earlier is the 10th: closed days do not count
    assert expiry(dates, "2001-09", -5) == ("2001-09-10", 4)


def test_an_expiry_goes_back_over_several_closed_days() -> None:
    # third Friday 19 June 2020; Wednesday to Friday left out
    dates = weekdays("2020-06-01", "2020-06-30", "2020-06-17", "2020-06-18", "2020-06-19")
    assert expiry(dates, "2020-06") == ("2020-06-16", 11)


# ---------------------------------------------------------------- the ends of the file


@pytest.mark.parametrize(
    ("dates", "month", "expected"),
    [
        # the file ends: rows count from 0, so its length is the position "after the last price"
        pytest.param(weekdays("2008-03-03", "2008-03-20"), "2008-03", ("2008-03-21", 14), id="ends the day before"),
        pytest.param(weekdays("2008-03-03", "2008-03-21"), "2008-03", ("2008-03-21", 14), id="ends on it"),
        pytest.param(
            weekdays("2008-03-03", "2008-03-24", "2008-03-21"), "2008-03", ("2008-03-20", 13), id="ends the day after"
        ),
        pytest.param(weekdays("2008-03-03", "2008-03-20"), "2014-04", ("2014-04-18", 14), id="years later, a holiday"),
        pytest.param(weekdays("2008-03-21", "2008-04-30"), "2008-03", ("2008-03-21", 0), id="starts on it"),
        pytest.param(weekdays("2008-03-20", "2008-04-30", "2008-03-21"), "2008-03", ("2008-03-20", 0), id="the eve"),
    ],
)
def test_third_fridays_at_the_ends(dates: Dates, month: str, expected: tuple[str, int]) -> None:
    assert expiry(dates, month) == expected


@pytest.mark.parametrize("start", ["2008-03-22", "2008-03-24", "2008-04-01"])
def test_a_third_friday_before_the_first_price_has_no_roll(start: str) -> None:
    dates = weekdays(start, "2008-06-30")
    assert expiry(dates, "2008-03")[1] == -1
    assert dates[QUARTER.roll_positions(dates)].astype(str).tolist() == ["2008-06-20"]


@pytest.mark.parametrize("last", ["2008-03-14", "2008-03-15", "2008-03-16"], ids=["Friday", "Saturday", "Sunday"])
def test_a_file_whose_last_price_is_of_a_weekend(last: str) -> None:
    """C1: trading days are the dates of the file, whatever weekday; C2: afterwards the third Friday as it falls."""
    dates = np.append(weekdays("2008-03-03", "2008-03-13"), np.datetime64(last))
    assert expiry(dates, "2008-03") == ("2008-03-21", 10)


# March 2008 without Good Friday: 3-7 are rows 0-4, 10-14 rows 5-9, 17-20 rows 10-13, 24-28 rows 14-18, 31 row 19.
# Beyond the ends weekdays count: April's Friday the 18th is 14 weekdays after 31 March (row 33, so to say), and
# February's Friday the 15th is 11 weekdays before 3 March (15, 18-22, 25-29; row -11).
MARCH_2008 = weekdays("2008-03-03", "2008-03-31", "2008-03-21")


@pytest.mark.parametrize(
    ("month", "shift_days", "expected"),
    [
        ("2008-03", 0, ("2008-03-20", 13)),
        ("2008-03", 1, ("2008-03-24", 14)),
        ("2008-03", -1, ("2008-03-19", 12)),
        ("2008-03", 6, ("2008-03-31", 19)),
        ("2008-03", 7, ("2008-04-01", 20)),
        ("2008-03", 11, ("2008-04-07", 20)),
        ("2008-03", -13, ("2008-03-03", 0)),
        ("2008-04", 0, ("2008-04-18", 20)),
        ("2008-04", 1, ("2008-04-21", 20)),
        ("2008-04", -1, ("2008-04-17", 20)),
        ("2008-04", -13, ("2008-04-01", 20)),
        ("2008-04", -14, ("2008-03-31", 19)),
        ("2008-04", -27, ("2008-03-11", 6)),
        ("2008-02", 11, ("2008-03-03", 0)),
        ("2008-02", 12, ("2008-03-04", 1)),
    ],
)
def test_shifts_count_trading_days(month: str, shift_days: int, expected: tuple[str, int]) -> None:
    assert expiry(MARCH_2008, month, shift_days) == expected


@pytest.mark.parametrize(("month", "shift_days"), [("2008-03", -14), ("2008-02", 10), ("2008-02", 0), ("2008-02", -3)])
def test_shifts_to_before_the_first_price(month: str, shift_days: int) -> None:
    assert expiry(MARCH_2008, month, shift_days)[1] == -1


# ---------------------------------------------------------------- cycles

CYCLES = {
    (1, 0): [*range(1, 13)],
    (3, 0): [3, 6, 9, 12],
    (3, 1): [1, 4, 7, 10],
    (3, 2): [2, 5, 8, 11],
    (6, 0): [6, 12],
    (6, 1): [1, 7],
    (6, 2): [2, 8],
    (6, 3): [3, 9],
    (6, 4): [4, 10],
    (6, 5): [5, 11],
    (12, 0): [12],
    **{(12, phase): [phase] for phase in range(1, 12)},
}


@pytest.mark.parametrize("first_year", [1966, 2005], ids=["around 1970", "around 2008"])
@pytest.mark.parametrize(("months", "phase"), CYCLES, ids=str)
def test_months_of_every_cycle_and_phase(months: int, phase: int, first_year: int) -> None:
    days = weekdays(f"{first_year}-01-01", f"{first_year + 5}-12-31", "2008-03-21")
    expected = [
        str(third_friday_of(year, month)).replace("2008-03-21", "2008-03-20")
        for year in range(first_year, first_year + 6)
        for month in CYCLES[months, phase]
    ]
    assert days[ListedCycle(months=months, phase=phase).roll_positions(days)].astype(str).tolist() == expected


def test_months_from_first_to_last_inclusive() -> None:
    march, december = month_number("2008-03", "2008-12")
    expected = month_number("2008-03", "2008-06", "2008-09", "2008-12")
    assert QUARTER.month_numbers(march, december).tolist() == expected.tolist()
    assert QUARTER.month_numbers(march + 1, december - 1).tolist() == expected[1:3].tolist()
    assert QUARTER.month_numbers(march + 1, march + 2).tolist() == []


@pytest.mark.parametrize(
    ("fields", "message", "field"),
    [
        ((2, 0, 0), "a listed cycle rolls every 1, 3, 6 or 12 months, not every 2", "roll"),
        ((3, 3, 0), "phase is 3; it takes a whole number from 0 to 2 for a cycle of 3 month(s)", "phase"),
        ((1, -1, 0), "phase is -1; it takes a whole number from 0 to 0 for a cycle of 1 month(s)", "phase"),
        ((3, 0, 253), "shift_days is 253; it takes a whole number from -252 to 252", "shift_days"),
        ((3, 0, -1.5), "shift_days is -1.5; it takes a whole number from -252 to 252", "shift_days"),
    ],
)
def test_cycles_that_are_none(fields: tuple[Any, Any, Any], message: str, field: str) -> None:
    months, phase, shift_days = fields
    with pytest.raises(OverlayError) as caught:
        ListedCycle(months=months, phase=phase, shift_days=shift_days)
    assert str(caught.value) == message
    assert caught.value.field == field


# ---------------------------------------------------------------- the rolls of a leg, by hand

# Third Fridays: 2007-12-21, 2008-01-18, 02-15, 03-21 (closed), 04-18, 05-16, 06-20, 09-19, 12-19, 2009-03-20.
YEAR_2008 = weekdays("2007-12-03", "2008-12-31", "2007-12-25", "2008-01-01", "2008-03-21")


# fmt: off
SCHEDULES: dict[str, tuple[ListedCycle, int, str, list[str]]] = {
    "quarters from a roll date": (QUARTER, 3, "2007-12-21 2008-12-31", [
        "2007-12-21 2008-03-20 2008-03-20 settles",
        "2008-03-20 2008-06-20 2008-06-20 settles",
        "2008-06-20 2008-09-19 2008-09-19 settles",
        "2008-09-19 2008-12-19 2008-12-19 settles",
        "2008-12-19 2009-03-20 2008-12-31 live",
    ]),
    "a stub, and an end on the eve of a roll": (QUARTER, 3, "2008-01-02 2008-06-19", [
        "2008-01-02 2008-03-20 2008-03-20 settles",
        "2008-03-20 2008-06-20 2008-06-19 live",
    ]),
    "a stub of a day, and a roll on the last day": (QUARTER, 3, "2008-03-19 2008-06-20", [
        "2008-03-19 2008-03-20 2008-03-20 settles",
        "2008-03-20 2008-06-20 2008-06-20 settles",
        "2008-06-20 2008-09-19 2008-06-20 live",
    ]),
    "a year's term every quarter": (QUARTER, 12, "2007-12-21 2008-06-30", [
        "2007-12-21 2008-12-19 2008-03-20 sold",
        "2008-03-20 2009-03-20 2008-06-20 sold",
        "2008-06-20 2009-06-19 2008-06-30 live",
    ]),
    # the rule would be holding the option of December 2007
    "a stub of a year's term": (QUARTER, 12, "2008-01-02 2008-06-30", [
        "2008-01-02 2008-12-19 2008-03-20 sold",
        "2008-03-20 2009-03-20 2008-06-20 sold",
        "2008-06-20 2009-06-19 2008-06-30 live",
    ]),
    # the holiday also moves the expiry of the option opened two months before
    "two months' term every month": (MONTH, 2, "2008-01-18 2008-03-24", [
        "2008-01-18 2008-03-20 2008-02-15 sold",
        "2008-02-15 2008-04-18 2008-03-20 sold",
        "2008-03-20 2008-05-16 2008-03-24 live",
    ]),
    "a term that is no number of rolls": (QUARTER, 4, "2008-03-20 2008-06-30", [
        "2008-03-20 2008-07-18 2008-06-20 sold",
        "2008-06-20 2008-10-17 2008-06-30 live",
    ]),
    # not the 21st: the file, not the window, says which days there were
    "a window that ends before the only roll": (QUARTER, 3, "2007-12-24 2008-03-10", [
        "2007-12-24 2008-03-20 2008-03-10 live",
    ]),
    "halves moved by three months": (ListedCycle(months=6, phase=3), 6, "2008-01-02 2008-10-01", [
        "2008-01-02 2008-03-20 2008-03-20 settles",
        "2008-03-20 2008-09-19 2008-09-19 settles",
        "2008-09-19 2009-03-20 2008-10-01 live",
    ]),
    # two trading days before 20 March, 20 June and 19 September
    "two days before": (ListedCycle(months=3, shift_days=-2), 3, "2008-03-03 2008-06-20", [
        "2008-03-03 2008-03-18 2008-03-18 settles",
        "2008-03-18 2008-06-18 2008-06-18 settles",
        "2008-06-18 2008-09-17 2008-06-20 live",
    ]),
}
# fmt: on


@pytest.mark.parametrize(("cycle", "term", "window", "expected"), SCHEDULES.values(), ids=SCHEDULES)
def test_schedules(cycle: ListedCycle, term: int, window: str, expected: list[str]) -> None:
    start, end = (at(YEAR_2008, day) for day in window.split())
    schedule = leg_schedule(YEAR_2008, cycle=cycle, term_months=term, start=start, end=end)
    assert words(YEAR_2008, schedule) == expected


@pytest.mark.parametrize(
    ("cycle", "term", "stub_expiry"),
    [
        pytest.param(QUARTER, 3, "2008-03-21", id="as it falls, though a holiday"),
        pytest.param(QUARTER, 6, "2008-06-20", id="longer term"),
        pytest.param(HALF, 6, "2008-06-20", id="half"),
        pytest.param(YEAR, 12, "2008-12-19", id="year"),
        pytest.param(ListedCycle(months=12, phase=1), 12, "2009-01-16", id="this January's was before the start"),
        pytest.param(ListedCycle(months=3, shift_days=-10), 3, "2008-03-07", id="ten weekdays before"),
        pytest.param(ListedCycle(months=3, shift_days=252), 3, "2008-03-06", id="a year after"),
        pytest.param(ListedCycle(months=12, shift_days=-252), 12, "2008-12-31", id="a year before"),
    ],
)
def test_a_stub_whose_roll_lies_after_the_file(cycle: ListedCycle, term: int, stub_expiry: str) -> None:
    # The file: 3 December 2007 (row 0) to 29 February 2008 (row 62), start on 22 January.
    # A year after: 2007-03-16 is 186 weekdays before row 0, so row 66, the fourth weekday after 29 February; the one
    # before, 2006-12-15, is 251 before, so row 1. A year before: 2008-12-19 is row 62 + 210, so row 20 (2 January);
    # the next, 2009-12-18, is 260 weekdays on, row 280: 218 weekdays, 43 weeks and 3 days, after 29 February.
    dates = YEAR_2008[: at(YEAR_2008, "2008-02-29") + 1]
    start = at(dates, "2008-01-22")
    schedule = leg_schedule(dates, cycle=cycle, term_months=term, start=start, end=len(dates) - 1)
    assert words(dates, schedule) == [f"2008-01-22 {stub_expiry} 2008-02-29 live"]


# No prices from 17 February to 24 April 2020: the Fridays 21 February, 20 March and 17 April are all 14 February,
# which is one roll, of the last of them.
HOLE_2020 = np.concatenate([weekdays("2020-01-02", "2020-02-14"), weekdays("2020-04-27", "2020-06-30")])


def test_a_hole_that_swallows_several_expiries() -> None:
    dates = HOLE_2020
    rolls = dates[MONTH.roll_positions(dates)].astype(str).tolist()
    assert rolls == ["2020-01-17", "2020-02-14", "2020-05-15", "2020-06-19"]
    schedule = leg_schedule(dates, cycle=MONTH, term_months=1, start=at(dates, "2020-01-30"), end=len(dates) - 1)
    assert words(dates, schedule) == [
        "2020-01-30 2020-02-14 2020-02-14 settles",
        "2020-02-14 2020-05-15 2020-05-15 settles",
        "2020-05-15 2020-06-19 2020-06-19 settles",
        "2020-06-19 2020-07-17 2020-06-30 live",
    ]


@pytest.mark.parametrize("start", ["2020-01-17", "2020-01-30"], ids=["from its roll", "a stub"])
def test_an_option_that_expires_in_the_hole(start: str) -> None:
    # two months' term: on 30 January the rule holds the option of 17 January, which expires in March, so 14 February
    dates = HOLE_2020
    schedule = leg_schedule(dates, cycle=MONTH, term_months=2, start=at(dates, start), end=at(dates, "2020-05-01"))
    assert words(dates, schedule) == [
        f"{start} 2020-02-14 2020-02-14 settles",
        "2020-02-14 2020-06-19 2020-05-01 live",
    ]


# ---------------------------------------------------------------- inception


@pytest.mark.parametrize(
    ("cycle", "earliest", "latest", "expected"),
    [
        pytest.param(QUARTER, "2007-12-03", "2008-12-31", "2007-12-21", id="from the file's first day"),
        pytest.param(QUARTER, "2007-12-21", "2008-12-31", "2007-12-21", id="on a roll date"),
        pytest.param(QUARTER, "2007-12-24", "2008-12-31", "2008-03-20", id="the day after"),
        pytest.param(QUARTER, "2008-03-24", "2008-06-23", "2008-06-20", id="on the day before the last"),
        pytest.param(MONTH, "2008-03-24", "2008-12-31", "2008-04-18", id="month"),
        pytest.param(YEAR, "2007-12-24", "2008-12-31", "2008-12-19", id="year"),
        pytest.param(ListedCycle(months=3, shift_days=-1), "2007-12-24", "2008-12-31", "2008-03-19", id="shifted"),
    ],
)
def test_inception_is_the_first_roll_of_the_anchor(
    cycle: ListedCycle, earliest: str, latest: str, expected: str
) -> None:
    row = inception_position(YEAR_2008, cycle=cycle, earliest=at(YEAR_2008, earliest), latest=at(YEAR_2008, latest))
    assert row == at(YEAR_2008, expected)


@pytest.mark.parametrize(
    ("cycle", "earliest", "latest", "months"),
    [
        pytest.param(QUARTER, "2008-01-02", "2008-03-19", 3, id="no roll"),
        pytest.param(QUARTER, "2008-01-02", "2008-03-20", 3, id="a roll only on the last day"),
        pytest.param(YEAR, "2008-12-22", "2008-12-31", 12, id="year"),
    ],
)
def test_no_inception(cycle: ListedCycle, earliest: str, latest: str, months: int) -> None:
    with pytest.raises(PlanError) as caught:
        inception_position(YEAR_2008, cycle=cycle, earliest=at(YEAR_2008, earliest), latest=at(YEAR_2008, latest))
    assert str(caught.value) == (
        f"no roll date of the longest leg (every {months} month(s), third Friday) between {earliest} and the day "
        f"before {latest}: give a longer window, or a leg that rolls more often"
    )


# ---------------------------------------------------------------- the twin


def slow_schedule(days: list[date], cycle: ListedCycle, term: int, start: int, end: int) -> list[tuple[Any, ...]]:
    """C2 and C3 in plain loops: (opened, expiry, closed, settles, live) a roll.

    The days of the file are written out with the weekdays before and after them; a third Friday is the last such day
    up to it, and a shift is a step along the list.
    """
    around = [days[0] + timedelta(days=n) for n in range(-1300, 3300)]
    before = [day for day in around if day < days[0] and day.weekday() < 5]
    line = before + days + [day for day in around if day > days[-1] and day.weekday() < 5]

    def place(month: int) -> int:
        friday = third_friday_of(month // 12, month % 12 + 1)
        return bisect_right(line, friday) - 1 + cycle.shift_days - len(before)

    first = 12 * days[0].year - 24
    months = [m for m in range(first, first + 12 * 8) if (m % 12 + 1 - cycle.phase) % cycle.months == 0]
    rolls: dict[int, int] = {}  # row in the file -> month; the later month wins
    for month in months:
        if 0 <= place(month) < len(days):
            rolls[place(month)] = month
    # on the start the leg holds what it opened on its last roll, were that before the file
    opens = {start: max(m for m in months if place(m) <= start)}
    opens.update({row: month for row, month in rolls.items() if start < row <= end})
    rows = sorted(opens)
    found = []
    for row, following in zip(rows, [*rows[1:], None]):
        expires = place(opens[row] + term)
        closed = end if following is None else following
        settles = following is not None and expires <= closed
        found.append((row, line[expires + len(before)], closed, settles, following is None))
    return found


@pytest.mark.parametrize("longest_hole", [9, 80], ids=["a hole of days", "a hole of months"])
@pytest.mark.parametrize("seed", range(20))
def test_schedules_equal_plain_loops(seed: int, longest_hole: int) -> None:
    rng = np.random.default_rng([seed, longest_hole])
    for _ in range(10):
        dates = weekdays(f"{rng.integers(1960, 2030)}-{rng.integers(1, 13):02}-{rng.integers(1, 29):02}", "2040-12-31")
        dates = dates[: rng.integers(80, 700)]
        keep = rng.random(len(dates)) > 0.05
        hole = rng.integers(1, len(dates))
        keep[hole : hole + rng.integers(1, longest_hole)] = False
        dates = dates[keep]
        months = int(rng.choice([1, 3, 6, 12]))
        shift = int(rng.choice([0, 0, 0, 1, -1, 7, -12, 100, -252, 252]))
        cycle = ListedCycle(months=months, phase=int(rng.integers(months)), shift_days=shift)
        start, end = sorted(rng.choice(len(dates), 2, replace=False).tolist())
        if rng.random() < 0.5 and (rolls := cycle.roll_positions(dates)).size:
            start = min(int(rng.choice(rolls)), len(dates) - 2)
            end = max(end, start + 1)
        term = months + int(rng.choice([0, 0, 1, months]))
        got = leg_schedule(dates, cycle=cycle, term_months=term, start=start, end=end)
        expiries = got.expiry_day.astype("datetime64[D]").tolist()
        rows = [got.opened.tolist(), expiries, got.closed.tolist(), got.settles.tolist(), got.live.tolist()]
        assert list(zip(*rows)) == slow_schedule(dates.tolist(), cycle, term, start, end)
