"""How a file is written: its encoding, what separates its columns, where its table begins. Found, and then told.

:func:`as_utf8` and :func:`find_layout` are pure: bytes and text in, a finding out. What can only be seen from whole
columns (dates, the decimal mark) is added to the :class:`Dialect` by :mod:`~data_loaders.tables`.
"""

from __future__ import annotations

import codecs
import csv
import io
import re
from collections.abc import Sequence
from dataclasses import dataclass, replace

from .numbers import MARK_NAMES
from .reading import Decimal, Reading
from .schema import FILES, FileSchema, Kind, match_header
from .sources import Refused
from .words import counted

SEPARATORS = {",": "comma", ";": "semicolon", "\t": "tab", "|": "vertical bar"}
#: A header is looked for in so many bytes and lines of the start of a file.
HEADER_BYTES, HEADER_LINES = 65_536, 100
#: A line above the header that is blank where columns have no name of their own takes names from so many lines above.
_MORE_HEADER_LINES = 3
#: Lines left out above or below the table that are told word for word, and how many of their characters.
_SHOWN_LINES, _SHOWN_CHARACTERS = 3, 40
_WINDOW = 1 << 22

_DATE_LIKE = re.compile(
    r"\s*(\d{1,4}[-/. ]\d{1,2}[-/. ]\d{1,4}|\d{8}|\d{5}"
    r"|\d{1,2}[- ]?[A-Za-z]{3,9}[- ,]*\d{2,4}|[A-Za-z]{3,9} \d{1,2},? \d{4})\s*(?:[T ,].*)?"
)
_NUMBER_LIKE = re.compile(r"\s*[-+($€£¥₹]*\s*\d[\d.,'’\s]*([eE][-+]?\d+)?\s*[)%$€£¥₹]*\s*")


@dataclass(frozen=True, slots=True, kw_only=True)
class Dialect:
    """How a file is written.

    Attributes
    ----------
    packed : str or None
        ``gzip``, ``zip`` and so on.
    encoding : str
    separator : str or None
        Between columns; None for Parquet.
    decimal : {"point", "comma"} or None
        None where no number has one.
    thousands : tuple of str
        Marks found between thousands.
    dates : str
        Form of the dates as ``--date-format`` takes it; ``dates_settled_by`` the text that no other form could read.
    decimal_settled_by : str or None
        The text that no other decimal mark could read.
    above, below, comments : tuple of str
        Lines left out above the header, below the last row, and between rows.
    repeated_headers, blank_rows : int
    points_in_quotes : bool
        Numbers such as ``"1.234"`` stand in quotes.
    two_digit_years, timed : bool
    """

    packed: str | None = None
    encoding: str = "UTF-8"
    separator: str | None = ","
    decimal: Decimal | None = None
    decimal_settled_by: str | None = None
    thousands: tuple[str, ...] = ()
    dates: str = "YYYY-MM-DD"
    dates_settled_by: str | None = None
    two_digit_years: bool = False
    timed: bool = False
    above: tuple[str, ...] = ()
    below: tuple[str, ...] = ()
    comments: tuple[str, ...] = ()
    repeated_headers: int = 0
    blank_rows: int = 0
    points_in_quotes: bool = False

    def told(self) -> tuple[tuple[str, str], ...]:
        """What was found, as pairs of a word and a description.

        >>> for word, description in Dialect(separator=";", decimal="comma", above=("Kurse", "")).told():
        ...     print(f"{word}: {description}")
        text: UTF-8, columns separated by semicolons, decimal comma
        dates: YYYY-MM-DD
        left out: 2 lines above the header ('Kurse')
        """
        text = [f"packed with {self.packed}"] if self.packed else []
        if self.separator is None:
            text.append("Parquet")
        else:
            text += [self.encoding, f"columns separated by {SEPARATORS[self.separator]}s"]
        if self.decimal is not None:
            settled = f" (settled by '{self.decimal_settled_by}')" if self.decimal_settled_by else ""
            text.append(f"decimal {self.decimal}{settled}")
        if self.thousands:
            marks = dict.fromkeys(MARK_NAMES[mark] for mark in self.thousands)
            text.append(f"{' and '.join(marks)} between thousands")
        dates = [self.dates + (f", settled by '{self.dates_settled_by}'" if self.dates_settled_by else "")]
        if self.two_digit_years:
            dates.append("years 69 to 99 as 1969 to 1999, 00 to 68 as 2000 to 2068")
        if self.timed:
            dates.append("the day as written; times and zones not used")
        found = [("text", ", ".join(text)), ("dates", "; ".join(dates))]
        return (*found, *([("left out", left)] if (left := self._left_out()) else []))

    def _left_out(self) -> str:
        parts = [
            f"{counted(len(lines), 'line')} {where}{_shown(lines)}"
            for lines, where in (
                (self.above, "above the header"), (self.below, "below the last row"), (self.comments, "of comment"),
            )
            if lines
        ]  # fmt: skip
        if self.repeated_headers:
            parts.append(counted(self.repeated_headers, "repeated header"))
        if self.blank_rows:
            parts.append(counted(self.blank_rows, "blank row"))
        return ", ".join(parts)


def _shown(lines: Sequence[str]) -> str:
    said = [line.strip() for line in lines if line.strip()]
    shown = [
        repr(line if len(line) <= _SHOWN_CHARACTERS else line[:_SHOWN_CHARACTERS] + "...")
        for line in said[:_SHOWN_LINES]
    ]
    more = ["..."] if len(said) > _SHOWN_LINES else []
    return f" ({', '.join([*shown, *more])})" if shown else ""


@dataclass(frozen=True, slots=True, kw_only=True)
class Layout:
    """Where the table of a text begins.

    Attributes
    ----------
    separator : str
    header : tuple of str
    above : tuple of str
        Lines before the header.
    first_line, last_line : int
        Lines of the header, from 1; they differ where a quoted name runs on.
    begins, length : int
        Characters before the header, and up to the first row.
    """

    separator: str
    header: tuple[str, ...]
    above: tuple[str, ...]
    first_line: int
    last_line: int
    begins: int
    length: int


# ---------------------------------------------------------------- encoding


def as_utf8(data: bytes | bytearray) -> tuple[bytes | bytearray, str]:
    """Text of any encoding we know as UTF-8 without a byte order mark, lines ending in a line feed; and its encoding.

    A byte order mark decides, then zero bytes at every other place (UTF-16), then whether it is UTF-8. What is not is
    taken for Windows-1252, in which ``£`` and ``é`` of older spreadsheets come out right, if nothing speaks for UTF-8
    and every byte has a meaning there.

    Raises
    ------
    Refused
        ``not-utf-8``, ``damaged-text`` or ``binary-file``.

    Examples
    --------
    >>> as_utf8("é".encode("utf-16"))[1], as_utf8("é".encode("latin-1"))[1]
    ('UTF-16 (little-endian)', 'Windows-1252')
    """
    name, codec, start = _marked(data)
    if codec != "utf-8":
        data = _recoded(data[start:], codec, name)
    elif start:
        data = data[start:]
    if data.endswith(b"\x1a"):  # where old systems ended a text
        data = data[:-1]
    if b"\0" in data:
        raise Refused("binary-file", what="binary data")
    if codec == "utf-8" and (wrong := _not_utf8(data)) is not None:
        # a mark of UTF-8, or letters of it further up, and it is UTF-8 with a fault
        is_utf8 = start > 0 or re.search(rb"[\x80-\xff]", data[:wrong]) is not None
        try:
            recoded = _recoded(data, "cp1252", "Windows-1252")
        except Refused:
            recoded = bytearray()
        if not recoded or is_utf8 or re.search(rb"[\x01-\x08\x0e-\x1f]", data):
            line = data.count(b"\n", 0, wrong) + 1
            raise Refused("not-utf-8", line=line, byte=f"0x{data[wrong]:02x}")
        data, name = recoded, "Windows-1252"
    if data.count(b"\r") != data.count(b"\r\n"):
        data = data.replace(b"\r\n", b"\n").replace(b"\r", b"\n")
    return data, name


def _marked(data: bytes | bytearray) -> tuple[str, str, int]:
    """Name and codec of an encoding by its mark or its zero bytes, and the length of the mark."""
    for mark, name, codec in (
        (codecs.BOM_UTF8, "UTF-8 with a byte order mark", "utf-8"),
        (codecs.BOM_UTF32_LE, "UTF-32 (little-endian)", "utf-32-le"),
        (codecs.BOM_UTF32_BE, "UTF-32 (big-endian)", "utf-32-be"),
        (codecs.BOM_UTF16_LE, "UTF-16 (little-endian)", "utf-16-le"),
        (codecs.BOM_UTF16_BE, "UTF-16 (big-endian)", "utf-16-be"),
    ):
        if data.startswith(mark):
            return name, codec, len(mark)
    head = data[:4096]
    even, odd = head[0::2].count(0), head[1::2].count(0)
    if min(even, odd) == 0 and max(even, odd) > len(head) // 4:
        return ("UTF-16 (little-endian)", "utf-16-le", 0) if odd else ("UTF-16 (big-endian)", "utf-16-be", 0)
    return "UTF-8", "utf-8", 0


def _recoded(data: bytes | bytearray, codec: str, name: str) -> bytearray:
    """The same text in UTF-8, a window at a time: the text is never held a third time."""
    decoder = codecs.getincrementaldecoder(codec)()
    view = memoryview(data)
    text = bytearray()
    for at in range(0, len(view) or 1, _WINDOW):
        window, last = bytes(view[at : at + _WINDOW]), at + _WINDOW >= len(view)
        try:
            text += decoder.decode(window, last).encode()
        except UnicodeError as error:
            text += window[: getattr(error, "start", 0)].decode(codec, errors="ignore").encode()
            raise Refused("damaged-text", encoding=name, line=text.count(b"\n") + 1) from None
    return text


def _not_utf8(data: bytes | bytearray) -> int | None:
    """Position of the first byte that is not UTF-8."""
    view = memoryview(data)
    decoder = codecs.getincrementaldecoder("utf-8")()
    for at in range(0, len(view), _WINDOW):
        held = len(decoder.getstate()[0])
        try:
            decoder.decode(bytes(view[at : at + _WINDOW]), at + _WINDOW >= len(view))
        except UnicodeDecodeError as error:
            return at - held + error.start
    return None


# ---------------------------------------------------------------- header


def find_layout(head: str, kind: Kind, reading: Reading, *, first_line: int = 1) -> Layout:
    """The separator and the header of a table, by the names that a file of its kind has.

    Of the first lines, read with each separator, the one that names most of what is needed is the header; the first
    such line where several do. Where none does, the line above the first one that looks like data is taken, and the
    names it lacks will be missed.

    Parameters
    ----------
    head : str
        The start of the text.
    first_line : int
        Number of its first line in the file.

    Raises
    ------
    Refused
        ``empty-file``, ``unreadable-csv``, ``no-header`` or ``rows-above-header``.
    """
    try:
        layout = _found_layout(head, kind, reading)
        _refuse_rows_above(layout)
    except Refused as refused:
        facts = {name: at + first_line - 1 for name, at in refused.facts.items() if name in ("line", "header_line")}
        raise Refused(refused.code, **{**refused.facts, **facts}) from None
    return replace(layout, first_line=layout.first_line + first_line - 1, last_line=layout.last_line + first_line - 1)


def _found_layout(head: str, kind: Kind, reading: Reading) -> Layout:
    lines = io.StringIO(head, newline="").readlines()
    whole = lines if head.endswith(("\n", "\r")) or len(lines) < 2 else lines[:-1]
    candidates = [i for i, line in enumerate(whole) if line.strip()][:HEADER_LINES]
    if not candidates:
        raise Refused("empty-file")
    schema = FILES[kind]
    found: list[tuple[int, int, int, str, list[str], int]] = []
    for separator in SEPARATORS:
        for i in candidates:
            if separator not in lines[i]:
                continue
            fields, count = _fields(lines[i:], separator)
            for names in (fields, *_completed(lines, i, fields, separator)):
                if (standing := _standing(schema, names, reading)) is not None:
                    found.append((standing, i, -len(names), separator, names, count))
    if not found:
        return _likeliest(lines, candidates)
    _, i, _, separator, names, count = min(found, key=lambda one: one[:3])
    return _layout(lines, i, separator, names, count)


def _fields(lines: list[str], separator: str) -> tuple[list[str], int]:
    """The fields of the first row, and how many lines it takes."""
    reader = csv.reader(lines, delimiter=separator)
    try:
        return next(reader), reader.line_num
    except (csv.Error, StopIteration) as error:
        raise Refused("unreadable-csv", reason=str(error) or "no header") from None


def _completed(lines: list[str], i: int, fields: list[str], separator: str) -> list[list[str]]:
    """A header with blanks, its blanks filled from one of the lines above: names may stand on several lines."""
    if all(name.strip() for name in fields) or not fields[0].strip():
        return []
    above = [_fields(lines[j:], separator)[0] for j in range(max(0, i - _MORE_HEADER_LINES), i) if lines[j].strip()]
    return [
        [own if own.strip() else higher for own, higher in zip(fields, row)] for row in above if len(row) == len(fields)
    ]


def _standing(schema: FileSchema, names: list[str], reading: Reading) -> int | None:
    """How good a header a row would be, 0 the best; None if it is none."""
    if len(names) > 1 and names[0].startswith("#"):
        commented = _standing(schema, [names[0].lstrip("# "), *names[1:]], reading)
        return None if commented is None else commented + 10
    if len(names) > 1 and all(_DATE_LIKE.fullmatch(name) or _NUMBER_LIKE.fullmatch(name) for name in names):
        return None
    matched = match_header(schema, names, reading.columns)
    required = {schema.date.role, *(column.role for column in schema.value_columns if column.required)}
    missing = {problem.column.role for problem in matched.problems if not problem.candidates}
    missing |= {role for role, _ in matched.unknown}
    if not missing:
        return 2 if matched.guessed or matched.unnamed_date else 1 if matched.problems else 0
    some = (required | {role for role, _ in reading.columns}) - missing
    return 3 if len(names) > 1 and some and not matched.unnamed_date else None


def _likeliest(lines: list[str], candidates: list[int]) -> Layout:
    """The line above the first that looks like data; where none does, the first line, as finely as it can be cut."""
    best: tuple[tuple[bool, int], int, str] | None = None
    for separator in SEPARATORS:
        for i in candidates:
            fields, _ = _fields(lines[i:], separator)
            if not _is_data(fields):
                continue
            before = [j for j in candidates if j < i]
            fits = not before or len(_fields(lines[before[-1] :], separator)[0]) == len(fields)
            if best is None or (fits, len(fields)) > best[0]:
                best = ((fits, len(fields)), i, separator)
            break
    if best is not None:
        _, first, separator = best
        above = [i for i in candidates if i < first]
        if not above:
            raise Refused("no-header", line=first + 1, value=lines[first].strip())
        fields, count = _fields(lines[above[-1] :], separator)
        return _layout(lines, above[-1], separator, fields, count)
    i = candidates[0]
    cut = {separator: _fields(lines[i:], separator) for separator in SEPARATORS}
    separator = max(cut, key=lambda mark: len(cut[mark][0]))
    return _layout(lines, i, separator, *cut[separator])


def _is_data(fields: Sequence[str]) -> bool:
    """A field that looks like a date, and another that looks like a number."""
    dates = [i for i, field in enumerate(fields) if _DATE_LIKE.fullmatch(field)]
    return bool(dates) and any(_NUMBER_LIKE.fullmatch(field) for i, field in enumerate(fields) if i != dates[0])


def _layout(lines: list[str], i: int, separator: str, names: list[str], count: int) -> Layout:
    if names and names[0].startswith("#"):
        names = [names[0].lstrip("# "), *names[1:]]
    return Layout(
        separator=separator,
        header=tuple(names),
        above=tuple(line.rstrip("\r\n") for line in lines[:i]),
        first_line=i + 1,
        last_line=i + count,
        begins=sum(map(len, lines[:i])),
        length=sum(map(len, lines[: i + count])),
    )


def _refuse_rows_above(layout: Layout) -> None:
    """What stands above the header and has its columns, with a date and a number, would be lost."""
    for number, line in enumerate(layout.above, start=1):
        if not line.strip():
            continue
        fields, _ = _fields([line], layout.separator)
        if len(fields) == len(layout.header) and _is_data(fields):
            raise Refused("rows-above-header", line=number, value=line.strip(), header_line=layout.first_line)
