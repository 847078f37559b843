"""Writes tables in any of the dialects that are read, cell by cell, with nothing of the code that reads them."""

from __future__ import annotations

import bz2
import csv
import gzip
import io
import lzma
import zipfile
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from datetime import date
from decimal import Decimal

import pyarrow as pa

MONTHS = ("Jan", "Feb", "Mar", "Apr", "May", "Jun", "Jul", "Aug", "Sep", "Oct", "Nov", "Dec")
LONG_MONTHS = (
    "January", "February", "March", "April", "May", "June", "July", "August", "September", "October", "November",
    "December",
)  # fmt: skip

#: Each way of writing a date: the day to its text, and what --date-format calls it.
DATE_FORMS: Mapping[str, tuple[Callable[[date], str], str]] = {
    "iso": (lambda d: f"{d.year:04d}-{d.month:02d}-{d.day:02d}", "YYYY-MM-DD"),
    "iso slashes": (lambda d: f"{d.year:04d}/{d.month:02d}/{d.day:02d}", "YYYY/MM/DD"),
    "iso loose": (lambda d: f"{d.year:04d}.{d.month}.{d.day}", "YYYY.MM.DD"),
    "iso midnight": (lambda d: f"{d.year:04d}-{d.month:02d}-{d.day:02d} 00:00:00", "YYYY-MM-DD"),
    "iso zone": (lambda d: f"{d.year:04d}-{d.month:02d}-{d.day:02d}T16:00:00-05:00", "YYYY-MM-DD"),
    "iso utc": (lambda d: f"{d.year:04d}-{d.month:02d}-{d.day:02d}T00:00:00.000Z", "YYYY-MM-DD"),
    "day first": (lambda d: f"{d.day:02d}/{d.month:02d}/{d.year:04d}", "DD/MM/YYYY"),
    "day first loose": (lambda d: f"{d.day}/{d.month}/{d.year:04d}", "DD/MM/YYYY"),
    "day first points": (lambda d: f"{d.day:02d}.{d.month:02d}.{d.year:04d}", "DD.MM.YYYY"),
    "month first": (lambda d: f"{d.month:02d}/{d.day:02d}/{d.year:04d}", "MM/DD/YYYY"),
    "month first dashes": (lambda d: f"{d.month:02d}-{d.day:02d}-{d.year:04d}", "MM-DD-YYYY"),
    "month first time": (lambda d: f"{d.month}/{d.day}/{d.year:04d} 4:00:00 PM", "MM/DD/YYYY"),
    "day first short": (lambda d: f"{d.day:02d}/{d.month:02d}/{d.year % 100:02d}", "DD/MM/YY"),
    "month first short": (lambda d: f"{d.month}/{d.day}/{d.year % 100:02d}", "MM/DD/YY"),
    "year first short": (lambda d: f"{d.year % 100:02d}-{d.month:02d}-{d.day:02d}", "YY-MM-DD"),
    "name": (lambda d: f"{d.day} {MONTHS[d.month - 1]} {d.year:04d}", "DD-MON-YYYY"),
    "long name": (lambda d: f"{LONG_MONTHS[d.month - 1]} {d.day}, {d.year:04d}", "MON-DD-YYYY"),
    "name short": (lambda d: f"{d.day:02d}-{MONTHS[d.month - 1].upper()}-{d.year % 100:02d}", "DD-MON-YY"),
    "name together": (lambda d: f"{d.day:02d}{MONTHS[d.month - 1].upper()}{d.year:04d}", "DD-MON-YYYY"),
    "weekday": (lambda d: f"{d:%A}, {LONG_MONTHS[d.month - 1]} {d.day}, {d.year:04d}", "MON-DD-YYYY"),
    "compact": (lambda d: f"{d.year:04d}{d.month:02d}{d.day:02d}", "YYYYMMDD"),
    # 1 January 2000 is day 36526 of the spreadsheets
    "serial": (lambda d: str(d.toordinal() - date(2000, 1, 1).toordinal() + 36526), "SERIAL"),
    "serial with time": (lambda d: f"{d.toordinal() - date(2000, 1, 1).toordinal() + 36526}.6875", "SERIAL"),
}


@dataclass(frozen=True, slots=True, kw_only=True)
class Style:
    """How a table is written."""

    separator: str = ","
    decimal: str = "point"
    thousands: str = ""
    dates: str = "iso"
    encoding: str = "utf-8"
    line_end: str = "\n"
    quote_all: bool = False
    spaces: str = ""
    sign: str = ""
    missing: str = ""
    above: tuple[str, ...] = ()
    below: tuple[str, ...] = ()
    blank_rows: bool = False
    comment: str = ""
    repeat_header: bool = False
    packed: str | None = None


def number_text(value: float, style: Style) -> str:
    """A number, written out in full."""
    text = format(Decimal(repr(value)), "f")
    sign, text = ("-", text[1:]) if text.startswith("-") else ("", text)
    whole, point, rest = text.partition(".")
    if style.thousands:
        groups = []
        while len(whole) > 3:
            groups.insert(0, whole[-3:])
            whole = whole[:-3]
        whole = style.thousands.join([whole, *groups])
    mark = "." if style.decimal == "point" else ","
    number = whole + (mark + rest if point else "")
    if style.sign == "%":
        return f"{sign}{number}%"
    return f"{sign}{style.sign}{number}" if style.sign else sign + number


def write_table(
    style: Style, days: Sequence[date], columns: Mapping[str, Sequence[float | None]], *, date_name: str = "Date"
) -> bytes:  # fmt: skip
    """The file: a date column, then the others in their order; None is a missing value."""
    text = io.StringIO()
    quoting = csv.QUOTE_ALL if style.quote_all else csv.QUOTE_MINIMAL
    writer = csv.writer(text, delimiter=style.separator, quoting=quoting, lineterminator=style.line_end)
    for line in style.above:
        text.write(line + style.line_end)
    header = [date_name, *columns]
    writer.writerow(header)
    form = DATE_FORMS[style.dates][0]
    for i, day in enumerate(days):
        if style.blank_rows and i % 3 == 1:
            text.write(style.line_end)
        if style.comment and i % 4 == 2:
            text.write(style.comment + style.line_end)
        if style.repeat_header and i and i % 5 == 0:
            writer.writerow(header)
        cells = [form(day)]
        for values in columns.values():
            value = values[i]
            cells.append(style.missing if value is None else number_text(value, style))
        writer.writerow([style.spaces + cell + style.spaces for cell in cells])
    for line in style.below:
        text.write(line + style.line_end)
    return packed(text.getvalue().encode(style.encoding), style.packed)


def packed(data: bytes, how: str | None) -> bytes:
    """The same, packed."""
    match how:
        case None:
            return data
        case "gzip":
            return gzip.compress(data, mtime=0)
        case "bzip2":
            return bz2.compress(data)
        case "xz":
            return lzma.compress(data)
        case "zstd":
            return bytes(pa.compress(data, codec="zstd", asbytes=True))
        case "zip":
            into = io.BytesIO()
            with zipfile.ZipFile(into, "w", zipfile.ZIP_DEFLATED) as archive:
                archive.writestr(zipfile.ZipInfo("folder/prices.csv", (2020, 1, 1, 0, 0, 0)), data)
            return into.getvalue()
    raise ValueError(how)
