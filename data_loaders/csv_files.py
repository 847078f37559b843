"""CSV text -> columns of text; every row keeps its line number in the file. No loop over good rows."""

from __future__ import annotations

import re
from collections import deque
from dataclasses import dataclass, field

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc
import pyarrow.csv as pacsv

from .cells import Lines, Mask, to_numpy
from .dialect import HEADER_BYTES, Dialect, Layout, as_utf8, find_layout
from .errors import KEPT_PER_CODE
from .reading import Reading
from .schema import Kind
from .sources import Refused, Source

#: Characters kept of a row that has too many or too few fields.
_RAGGED_CHARACTERS = 500
#: Of such rows at the end of a file, the text of so many is kept: they may be notes.
_LAST_RAGGED = 100
_QUOTED_POINTS = re.compile(rb'"\s*[-+]?[1-9]\d{0,2}\.\d{3}\s*"')


@dataclass(frozen=True, slots=True)
class Ragged:
    """A row with another number of fields than the header; ``text`` is None where there are too many to keep."""

    line: int
    came: int
    text: str | None


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class TextTable:
    """A file as columns: ``columns[i]`` holds the cells under ``header[i]``, ``lines`` each row's line in the file.

    The columns of a CSV file are text, those of a Parquet file whatever they are there, and ``lines`` its rows.
    """

    file: str
    kind: Kind
    sha256: str
    header: tuple[str, ...]
    header_line: int | None
    columns: tuple[pa.Array, ...]
    lines: Lines
    ragged: tuple[Ragged, ...]
    dialect: Dialect


def read_text(source: Source, kind: Kind, reading: Reading) -> TextTable:
    """Split a file into columns of text. Blank rows are counted and left out, ragged ones kept apart.

    Raises
    ------
    Refused
        If it is no text, or has no header or no rows.
    """
    data, encoding = as_utf8(source.data)
    layout, start = _layout(data, kind, reading)
    body = pa.py_buffer(data).slice(start)
    separator, width = layout.separator, len(layout.header)
    try:
        split = _split(body, separator, width)
        if _all_end_in_a_separator(split, separator, width):
            split = _split(body, separator, width + 1)
            split.columns.pop()
    except pa.ArrowInvalid as error:
        reason = str(error).splitlines()[0]
        if "block size" in reason:
            reason = "one row, or what stands in a pair of quotes, is longer than a mebibyte"
        raise Refused("unreadable-csv", reason=reason) from None
    # separators alone are a blank row, however many of them
    blank = {row.line for row in split.ragged if row.text is not None and not row.text.strip(f"{separator} \t\r\n")}
    filled = _filled(split.columns, len(split.lines))
    columns = split.columns
    if not filled.all():
        columns = [column.filter(pa.array(filled)) for column in columns]
    if not filled.any() and len(blank) == len(split.ragged):
        raise Refused("no-rows")
    _refuse_rows_in_quotes(columns, split.lines[filled] + layout.last_line, layout)
    return TextTable(
        file=source.file,
        kind=kind,
        sha256=source.sha256,
        header=layout.header,
        header_line=layout.last_line,
        columns=tuple(columns),
        lines=split.lines[filled] + layout.last_line,
        ragged=tuple(
            Ragged(row.line + layout.last_line, row.came, row.text) for row in split.ragged if row.line not in blank
        ),
        dialect=Dialect(
            packed=source.packed,
            encoding=encoding,
            separator=separator,
            above=tuple(line for line in layout.above if line.strip()),
            blank_rows=int(np.count_nonzero(~filled)) + len(blank),
            points_in_quotes=b'"' in data and _QUOTED_POINTS.search(data, start) is not None,
        ),
    )


def _layout(data: bytes | bytearray, kind: Kind, reading: Reading) -> tuple[Layout, int]:
    """Where the table begins, and the position of its first row."""
    first = re.search(rb"\S", data)
    if first is None:
        raise Refused("empty-file")
    # however many blank lines come first
    top = data.rfind(b"\n", 0, first.start()) + 1
    head = bytes(data[top : top + HEADER_BYTES])
    if len(data) > top + HEADER_BYTES and b"\n" not in head:
        raise Refused("unreadable-csv", reason=f"the header line is longer than {HEADER_BYTES:,} bytes")
    text = head.decode(errors="ignore")
    layout = find_layout(text, kind, reading, first_line=data.count(b"\n", 0, top) + 1)
    start = top + len(text[: layout.length].encode())
    above = top + len(text[: layout.begins].encode())
    if data.count(b'"', above) % 2:
        raise Refused("unclosed-quote", line=layout.first_line + _first_odd(data, above))
    return layout, start


def _first_odd(data: bytes | bytearray, start: int) -> int:
    """Lines from `start` on before the first with an odd number of quotes."""
    number = 0
    while start < len(data):
        end = data.find(b"\n", start) + 1 or len(data)
        if data.count(b'"', start, end) % 2:
            return number
        start, number = end, number + 1
    return number


@dataclass(slots=True)
class _Rows:
    """What the parser made of the rows; lines are counted from the first row."""

    columns: list[pa.Array]
    lines: Lines
    ragged: list[Ragged]


@dataclass(slots=True)
class _Rejected:
    """Rows with another number of fields: their numbers, and the text of the first and the last of them."""

    numbers: list[int] = field(default_factory=list)
    came: list[int] = field(default_factory=list)
    breaks: list[int] = field(default_factory=list)
    first: list[str] = field(default_factory=list)
    last: deque[str] = field(default_factory=lambda: deque(maxlen=_LAST_RAGGED))

    def __call__(self, row: pacsv.InvalidRow) -> str:
        self.numbers.append(row.number)
        self.came.append(row.actual_columns)
        self.breaks.append(row.text.count("\n"))
        kept = self.first if len(self.first) < KEPT_PER_CODE else self.last
        kept.append(row.text[:_RAGGED_CHARACTERS])
        return "skip"

    def text(self, i: int) -> str | None:
        """The text of the i-th one, where it is kept."""
        if i < len(self.first):
            return self.first[i]
        from_end = i - (len(self.numbers) - len(self.last))
        return self.last[from_end] if from_end >= 0 else None


def _split(body: pa.Buffer, separator: str, width: int) -> _Rows:
    """Columns of text, the line of each row, and the rows with another number of fields."""
    rejected = _Rejected()
    names = [str(i) for i in range(width)]
    # one thread: only then does the parser number the rows it rejects
    read = pacsv.ReadOptions(use_threads=False, column_names=names)
    parse = pacsv.ParseOptions(
        delimiter=separator, newlines_in_values=True, ignore_empty_lines=False, invalid_row_handler=rejected
    )
    convert = pacsv.ConvertOptions(
        column_types=dict.fromkeys(names, pa.string()), strings_can_be_null=False, quoted_strings_can_be_null=False
    )
    try:
        table = pacsv.read_csv(pa.BufferReader(body), read_options=read, parse_options=parse, convert_options=convert)
    except pa.ArrowInvalid as error:
        if "Empty CSV file" not in str(error):
            raise
        table = pa.table({name: pa.array([], pa.string()) for name in names})
    columns = [pc.fill_null(column.combine_chunks(), "") for column in table.columns]
    count = table.num_rows + len(rejected.numbers)
    row_numbers = np.arange(1, count + 1)
    is_rejected = np.isin(row_numbers, np.array(rejected.numbers, dtype=np.int64))
    # a quoted cell may run over several lines; rows below it stand that much lower in the file
    breaks = np.zeros(count, dtype=np.int64)
    for column in columns:
        if pc.any(pc.match_substring(column, "\n")).as_py():
            breaks[~is_rejected] += to_numpy(pc.count_substring(column, "\n"))
    breaks[is_rejected] += np.array(rejected.breaks, dtype=np.int64)
    lines = row_numbers + np.concatenate([[0], np.cumsum(breaks)])[:-1] if count else row_numbers
    ragged = [
        Ragged(int(line), came, rejected.text(i))
        for i, (line, came) in enumerate(zip(lines[is_rejected], rejected.came))
    ]
    return _Rows(columns, lines[~is_rejected], ragged)


def _all_end_in_a_separator(split: _Rows, separator: str, width: int) -> bool:
    """Whether each row has a separator after its last field and the header has none."""
    if not split.ragged or _filled(split.columns, len(split.lines)).any():
        return False
    return all(
        row.came == width + 1 and (row.text is None or row.text.rstrip("\r\n").endswith(separator))
        for row in split.ragged
    )


def _filled(columns: list[pa.Array], count: int) -> Mask:
    """Rows in which at least one cell holds something."""
    filled = np.zeros(count, dtype=np.bool_)
    for column in columns:
        filled |= to_numpy(pc.not_equal(pc.utf8_trim_whitespace(column), ""))
        if filled.all():
            break
    return filled


def _refuse_rows_in_quotes(columns: list[pa.Array], lines: Lines, layout: Layout) -> None:
    """A quote too many, and another further down, make one cell of all the rows between: they would be lost."""
    separator = re.escape(layout.separator)
    date = rf"\d{{1,4}}[-/. ]\d|\d{{5,8}}{separator}|\d{{1,2}}[ -]?[A-Za-z]{{3}}|[A-Za-z]{{3,9}} \d"
    row = rf"\n\s*(?:{date})[^\n]*{separator}"
    for i, column in enumerate(columns):
        if not pc.any(pc.match_substring(column, "\n")).as_py():
            continue
        rows = np.flatnonzero(to_numpy(pc.match_substring_regex(column, row)))
        if len(rows):
            at = int(rows[0])
            raise Refused("rows-in-quotes", line=int(lines[at]), column=layout.header[i], value=column[at].as_py())
