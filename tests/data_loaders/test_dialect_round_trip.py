"""Any valid table written in any dialect that is read comes back identical, or is asked about; never another number.

Rung: identity (hypothesis; what writes the tables, `dialect_writer`, shares nothing with what reads them), twin (a
reader of numbers that goes a character at a time, `strptime`) and independent library (pandas on spreadsheet numbers).
"""

from __future__ import annotations

import tempfile
from datetime import date, datetime, timedelta
from pathlib import Path
from typing import Any

import pandas as pd
import pyarrow as pa
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from data_loaders import DataProblems, History, load_history, read_history, readings, write_history
from data_loaders.dates import asked_dates, read_dates
from data_loaders.numbers import number_cells, read_numbers
from tests.data_loaders.dialect_writer import DATE_FORMS, Style, write_table

#: Two-digit years are read as 1969 to 2068, and not later than today.
SHORT_DAYS = st.dates(date(1969, 1, 1), date(2024, 12, 31))
#: Five-digit spreadsheet numbers.
SERIAL_DAYS = st.dates(date(1927, 5, 18), date(2173, 10, 13))
DAYS = st.dates(date(1800, 1, 1), date(2199, 12, 31))
#: As files have them: a few digits after the mark, or whatever a double needs.
VALUES = st.one_of(
    st.integers(1, 10_000_000).map(float),
    st.builds(lambda n, d: n / 10**d, st.integers(1, 10**9), st.integers(1, 4)),
    st.floats(1e-6, 1e12),
)
ENCODINGS = ("utf-8", "utf-8-sig", "utf-16", "utf-16-le", "utf-16-be", "utf-32", "cp1252")
TITLES = ("Prices of an index", "Source: made up, in points", "", "# remark", "As of;2020-01-02", "sep=;", "Währung: €")
NOTES = ("Total,12", "* closing prices", "", "Quelle: frei erfunden.", "All rights reserved, 2020.")


@st.composite
def styles(draw: st.DrawFn) -> Style:
    """Any dialect: one whose decimal comma is also the separator has its numbers quoted by the writer."""
    decimal = draw(st.sampled_from(["point", "comma"]))
    other = "," if decimal == "point" else "."
    encoding = draw(st.sampled_from(ENCODINGS))
    marks = ["", other, " ", "'", "\u00a0", "\u2019"] + ([] if encoding == "cp1252" else ["\u2009", "\u202f"])
    lines = st.lists(st.sampled_from(TITLES), max_size=3).map(tuple)
    return Style(
        separator=draw(st.sampled_from(",;\t|")),
        decimal=decimal,
        thousands=draw(st.sampled_from(marks)),
        dates=draw(st.sampled_from(sorted(DATE_FORMS))),
        encoding=encoding,
        line_end=draw(st.sampled_from(["\n", "\r\n", "\r"])),
        quote_all=draw(st.booleans()),
        spaces=draw(st.sampled_from(["", " "])),
        sign=draw(st.sampled_from(["", "$", "€"])),
        missing=draw(st.sampled_from(["", "-", "N/A", ".", "null", "\u2013"])),
        above=draw(lines),
        below=tuple(draw(st.lists(st.sampled_from(NOTES), max_size=2))),
        blank_rows=draw(st.booleans()),
        comment=draw(st.sampled_from(["", "# a remark", "#2020-01-02,1,2"])),
        repeat_header=draw(st.booleans()),
        packed=draw(st.sampled_from([None, None, None, "gzip", "bzip2", "xz", "zstd", "zip"])),
    )


def days_for(form: str) -> st.SearchStrategy[date]:
    if DATE_FORMS[form][1].count("Y") == 2:
        return SHORT_DAYS
    return SERIAL_DAYS if form.startswith("serial") else DAYS


def load(path: Path, style: Style) -> tuple[History, bool]:
    """The history, with nothing said if the file settles everything; and whether something had to be said."""
    asked: dict[str, Any] = {}
    for _ in range(3):
        try:
            return load_history(prices=path, readings=readings(**asked)), bool(asked)
        except DataProblems as problems:
            codes = set(problems.totals)
            if codes == {"date-form-unclear"} and "date_formats" not in asked:
                asked["date_formats"] = [DATE_FORMS[style.dates][1]]
            elif codes == {"decimal-unclear"} and "decimals" not in asked:
                asked["decimals"] = [style.decimal]
            else:
                raise
    raise AssertionError("asked twice for the same")


@settings(max_examples=400, deadline=None, suppress_health_check=[HealthCheck.too_slow, HealthCheck.data_too_large])
@given(data=st.data())
def test_any_table_in_any_dialect_reads_back_identical(data: st.DataObject) -> None:
    style = data.draw(styles())
    days = data.draw(st.lists(days_for(style.dates), unique=True, min_size=1, max_size=20))
    names = ["Close", *data.draw(st.lists(st.sampled_from(["Open", "High", "Low", "Volume"]), unique=True, max_size=3))]
    names = data.draw(st.permutations(names))
    columns: dict[str, list[float | None]] = {}
    for name in names:
        values = VALUES if name == "Close" else st.one_of(st.none(), VALUES)
        columns[name] = data.draw(st.lists(values, min_size=len(days), max_size=len(days)))
    if style.sign and "Volume" in columns:
        del columns["Volume"]  # a number of shares has no currency
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "prices.csv"
        path.write_bytes(write_table(style, days, columns))
        history, _ = load(path, style)
        order = sorted(range(len(days)), key=lambda i: days[i])
        assert [stamp.date() for stamp in history.frame.index] == [days[i] for i in order]
        assert set(history.frame.columns) == {name.lower() for name in columns}
        for name, values in columns.items():
            read = [None if value != value else value for value in history.frame[name.lower()].tolist()]
            # the shortest text of a double reads back as the same double
            assert read == [values[i] for i in order]
        write_history(history, Path(folder), "h")
        assert read_history(Path(folder), "h") == history


@settings(max_examples=60, deadline=None)
@given(
    form=st.sampled_from(["day first", "month first", "day first points", "month first dashes"]),
    start=st.dates(date(1950, 1, 1), date(2020, 1, 1)),
    count=st.integers(32, 80),
)
def test_a_month_of_days_settles_which_number_is_the_month(form: str, start: date, count: int) -> None:
    days = [start + timedelta(days=i) for i in range(count)]
    style = Style(dates=form)
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "prices.csv"
        path.write_bytes(write_table(style, days, {"Close": [1.0] * count}))
        history, asked = load(path, style)
    assert not asked
    assert [stamp.date() for stamp in history.frame.index] == days


@settings(max_examples=60, deadline=None)
@given(days=st.lists(st.dates(date(1950, 1, 1), date(2020, 12, 31)), min_size=1, max_size=12, unique=True))
def test_days_of_the_month_up_to_12_are_asked_about_unless_either_reading_is_the_same(days: list[date]) -> None:
    days = sorted({day.replace(day=min(day.day, 12)) for day in days})
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "prices.csv"
        path.write_bytes(write_table(Style(dates="day first"), days, {"Close": [1.0] * len(days)}))
        _, asked = load(path, Style(dates="day first"))
    assert asked == any(day.day != day.month for day in days)


# ---------------------------------------------------------------- cells against plain readers


def plain_number(text: str, mark: str) -> float | None:
    """A number with one decimal mark and thousands in threes, read a character at a time; None if it is none."""
    text = text.strip(" \t")
    sign = -1.0 if text[:1] in ("-", "\u2212") else 1.0
    body = text[1:] if text[:1] in ("-", "+", "\u2212") else text
    other = "," if mark == "." else "."
    groups = [group for group in (other, " ", "'", "\u2019", "\u00a0", "\u2009", "\u202f") if group in body]
    whole, point, rest = body.partition(mark)
    if groups:
        if len(groups) > 1 or groups[0] in rest:
            return None
        first, *threes = whole.split(groups[0])
        if not (0 < len(first) <= 3 and first[0] != "0" and all(len(three) == 3 for three in threes)):
            return None
        whole = first + "".join(threes)
        if not (whole.isascii() and whole.isdigit() and (rest == "" or (rest.isascii() and rest.isdigit()))):
            return None
    allowed = set("0123456789eE+-" if not groups else "0123456789")
    if not set(whole + rest) <= allowed or not any(letter.isdigit() for letter in whole + rest):
        return None
    try:
        value = float(f"{whole}{'.' if point else ''}{rest}")
    except ValueError:
        return None
    return sign * value if whole[:1] not in "+-" or whole == "" else None


@settings(max_examples=300, deadline=None)
@given(
    cells=st.lists(st.text("0123456789.,'\u00a0 -+e", min_size=1, max_size=9), min_size=1, max_size=12),
    mark=st.sampled_from([".", ","]),
)
def test_numbers_are_what_a_plain_reader_says(cells: list[str], mark: str) -> None:
    looked = number_cells("close", pa.array(cells), percent=False, money=False)
    read = read_numbers(looked, "point" if mark == "." else "comma")
    for i, cell in enumerate(cells):
        expected = plain_number(cell.strip("\u00a0 "), mark)
        if cell.strip("\u00a0 ") in ("", "-", ".", "--"):
            assert read.missing[i]
        elif expected is None:
            assert read.other[i], cell
        elif abs(expected) == float("inf"):
            assert read.infinite[i], cell
        else:
            assert read.values[i] == expected, cell  # noqa: PD011  no frame


NUMBERED = st.builds(
    lambda a, b, c, mark: f"{a:02d}{mark}{b:02d}{mark}{c}",
    st.integers(0, 33), st.integers(0, 33), st.integers(1700, 2300), st.sampled_from("////.-"),
)  # fmt: skip


@settings(max_examples=200, deadline=None)
@given(
    cells=st.lists(st.one_of(NUMBERED, st.just(""), st.just("soon")), min_size=1, max_size=12), day_first=st.booleans()
)
def test_days_and_months_are_what_the_calendar_says(cells: list[str], day_first: bool) -> None:
    cells = ["01/01/2020"] * 13 + cells  # the form of the column
    read = read_dates(pa.array(cells), asked_dates("DD/MM/YYYY" if day_first else "MM/DD/YYYY"))
    for i, cell in enumerate(cells):
        try:
            expected = datetime.strptime(cell, "%d/%m/%Y" if day_first else "%m/%d/%Y").date()
        except ValueError:
            assert read.bad[i], cell
            continue
        assert not read.bad[i]
        assert read.dates[i].item() == expected
        assert read.outside[i] == (not date(1800, 1, 1) <= expected <= date(2199, 12, 31))


@settings(max_examples=100, deadline=None)
@given(days=st.lists(st.dates(date(1900, 3, 1), date(2199, 12, 31)), min_size=1, max_size=20))
def test_spreadsheet_numbers_are_what_pandas_says(days: list[date]) -> None:
    """pandas' own way: days since 30 December 1899, or since 1 January 1904."""
    for name, origin in (("SERIAL", "1899-12-30"), ("SERIAL-1904", "1904-01-01")):
        numbers = [(pd.Timestamp(day) - pd.Timestamp(origin)).days for day in days]
        if min(numbers) < 0:
            continue
        read = read_dates(pa.array([str(number) for number in numbers]), asked_dates(name))
        expected = pd.to_datetime(numbers, unit="D", origin=origin)
        assert not read.bad.any()
        assert read.dates.tolist() == [stamp.date() for stamp in expected]
