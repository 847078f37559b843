"""CSV text -> typed columns with explicit types; every row keeps its line number in the file.

Two steps. :func:`read_text` splits bytes into columns of text (one dialect today: UTF-8, comma, point).
:func:`read_table` matches the header with a schema and converts text to dates and numbers. Both put what is
wrong into a :class:`~data_loaders.errors.Problems` and go on where they can. No loop over good rows.
"""

from __future__ import annotations

import csv
import hashlib
import io
import stat
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc
import pyarrow.csv as pacsv

from .cells import Dates, Floats, Lines, Mask, dates_from_text, numbers_from_text
from .errors import KEPT_PER_CODE, Problems, quoted
from .schema import (
    FILES,
    FIRST_DATE,
    LAST_DATE,
    Column,
    FileSchema,
    Kind,
    Matched,
    match_header,
    normal_name,
)
from .words import counted

_BINARY_STARTS = (
    (b"PK\x03\x04", "a zip archive or a spreadsheet workbook"),
    (b"\xd0\xcf\x11\xe0", "a spreadsheet workbook of the old kind"),
    (b"PAR1", "a Parquet file"),
    (b"\x1f\x8b", "a gzip archive"),
    (b"%PDF", "a PDF document"),
    (b"\xff\xfe", "UTF-16 text"),
    (b"\xfe\xff", "UTF-16 text"),
)
_HEADER_BYTES = 65_536
#: Names of a header that a message repeats.
_SHOWN_NAMES = 20


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class TextTable:
    """A file as text: ``columns[i]`` holds the cells under ``header[i]``, ``lines`` each row's line in the file."""

    file: str
    kind: Kind
    sha256: str
    header: tuple[str, ...]
    header_line: int
    columns: tuple[pa.Array, ...]
    lines: Lines
    blank_rows: int


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Table:
    """A file as typed columns; rows whose date cannot be read are left out.

    Attributes
    ----------
    dates : ndarray of datetime64[D], shape (row,)
    lines : ndarray of int64, shape (row,)
        Line of each row in the file.
    numbers : dict of role -> ndarray, shape (row,)
        NaN where a cell holds no number.
    missing : dict of role -> bool ndarray, shape (row,)
        Cells that say that there is no value. A cell that is NaN and not missing is a problem already noted.
    names : dict of role -> str
        The column of the file taken for each role, as spelt there; also for ``date``.
    ignored : tuple of str
        Columns not used.
    guessed : str or None
        Role of the one value column of a file that names it in a way we do not know.
    texts : dict of role -> pyarrow array
        The text of the cells, to quote from.
    """

    file: str
    kind: Kind
    sha256: str
    dates: Dates
    lines: Lines
    numbers: dict[str, Floats]
    missing: dict[str, Mask]
    names: dict[str, str]
    ignored: tuple[str, ...]
    guessed: str | None
    blank_rows: int
    texts: dict[str, pa.Array]

    def cell(self, role: str, row: int) -> str:
        """Text of one cell as the file has it."""
        return str(self.texts[role][int(row)].as_py())

    def report(self, problems: Problems, code: str, role: str, rows: Mask | Lines, **facts: Any) -> None:
        """Note the same problem for each of the offending rows (a mask or positions)."""
        positions = np.flatnonzero(rows) if rows.dtype == np.bool_ else rows
        if len(positions) > KEPT_PER_CODE:
            problems.count_rest(code, len(positions) - KEPT_PER_CODE)
        for row in positions[:KEPT_PER_CODE]:
            problems.add(
                code, file=self.file, kind=self.kind, line=int(self.lines[row]), column=self.names[role],
                value=self.cell(role, row), **facts,
            )  # fmt: skip


def read_table(path: Path, kind: Kind, problems: Problems) -> Table | None:
    """Read one file of a kind; None if nothing of it can be used. Problems are noted, never raised."""
    text = read_text(path, kind, problems)
    if text is None:
        return None
    schema = FILES[kind]
    matched = match_header(schema, text.header)
    if matched.problems:
        _report_header(text, schema, matched, problems)
    if "date" not in matched.taken:
        return None
    return _typed(text, schema, matched, problems)


def read_text(path: Path, kind: Kind, problems: Problems) -> TextTable | None:
    """Split a file into columns of text. Blank rows are counted and left out, ragged ones noted."""
    data = _read_bytes(path, kind, problems)
    if data is None:
        return None
    where: dict[str, Any] = {"file": path.name, "kind": kind}
    head = _read_header(data.removeprefix(b"\xef\xbb\xbf"), problems, where)
    if head is None:
        return None
    body, header, lines_above = head
    try:
        columns, lines, ragged = _split(body, len(header))
    except pa.ArrowInvalid as error:
        problems.add("unreadable-csv", reason=str(error).splitlines()[0], **where)
        return None
    # separators alone are a blank row, however many of them
    uneven = [(line, came, row) for line, came, row in ragged if row.strip(", \t\r\n")]
    for line, came, row in uneven:
        problems.add(
            "ragged-row", line=line + lines_above, value=row, came=counted(came, "field"), expected=len(header), **where
        )
    filled = _filled(columns, len(lines))
    blank_rows = int(np.count_nonzero(~filled)) + len(ragged) - len(uneven)
    if not filled.all():
        columns = [column.filter(pa.array(filled)) for column in columns]
    if not filled.any() and not uneven:
        problems.add("no-rows", **where)
        return None
    return TextTable(
        file=path.name,
        kind=kind,
        sha256=hashlib.sha256(data).hexdigest(),
        header=header,
        header_line=lines_above,
        columns=tuple(columns),
        lines=lines[filled] + lines_above,
        blank_rows=blank_rows,
    )


def _read_bytes(path: Path, kind: Kind, problems: Problems) -> bytes | None:
    """The bytes of a regular text file, or None with a problem noted."""
    where: dict[str, Any] = {"file": path.name or str(path), "kind": kind}
    try:
        mode = path.stat().st_mode
        if not stat.S_ISREG(mode):
            # reading a pipe or a device could wait for ever
            what = "a folder" if stat.S_ISDIR(mode) else "a pipe, socket or device"
            problems.add("not-a-file", what=what, **where)
            return None
        data = path.read_bytes()
    except FileNotFoundError:
        problems.add("missing-file", path=path, **where)
        return None
    except (OSError, ValueError) as error:
        problems.add("unreadable-file", reason=getattr(error, "strerror", None) or error, **where)
        return None
    other = next((name for start, name in _BINARY_STARTS if data.startswith(start)), None)
    if other is None and b"\0" in data:
        other = "binary data"
    if other is not None:
        problems.add("binary-file", what=other, **where)
        return None
    try:
        data.decode()
    except UnicodeDecodeError as error:
        line = data.count(b"\n", 0, error.start) + 1
        problems.add("not-utf-8", line=line, byte=f"0x{data[error.start]:02x}", **where)
        return None
    return data


def _read_header(body: bytes, problems: Problems, where: dict[str, Any]) -> tuple[bytes, tuple[str, ...], int] | None:
    """The rows below the header, the names in it, and how many lines stand above the rows."""
    blank = body[: len(body) - len(body.lstrip())]
    start = max(blank.rfind(b"\n"), blank.rfind(b"\r")) + 1
    lines_above = max(blank[:start].count(b"\n"), blank[:start].count(b"\r"))
    body = body[start:]
    if not body.strip():
        problems.add("empty-file", **where)
        return None
    if len(body) > _HEADER_BYTES and len(body[:_HEADER_BYTES].splitlines()) == 1:
        problems.add("unreadable-csv", reason=f"the header line is longer than {_HEADER_BYTES:,} bytes", **where)
        return None
    try:
        reader = csv.reader(io.StringIO(body[:_HEADER_BYTES].decode(errors="ignore"), newline=""))
        header = tuple(next(reader))
    except (csv.Error, StopIteration) as error:
        problems.add("unreadable-csv", reason=str(error) or "no header", **where)
        return None
    if len(header) == 1 and (separator := _other_separator(header[0])):
        problems.add("not-comma-separated", line=lines_above + 1, separator=separator, **where)
        return None
    if body.count(b'"') % 2:
        odd = next(i for i, line in enumerate(body.splitlines()) if line.count(b'"') % 2)
        problems.add("unclosed-quote", line=lines_above + odd + 1, **where)
        return None
    # a quoted name may run over several lines
    lines = body[:_HEADER_BYTES].splitlines(keepends=True)[: reader.line_num]
    return body[sum(map(len, lines)) :], header, lines_above + len(lines)


def _split(body: bytes, width: int) -> tuple[list[pa.Array], Lines, list[tuple[int, int, str]]]:
    """Columns of text, the line of each row, and the rows with another number of fields (line, fields, text)."""
    rejected: list[tuple[int, int, str]] = []

    def reject(row: pacsv.InvalidRow) -> str:
        rejected.append((row.number, row.actual_columns, row.text))
        return "skip"

    names = [str(i) for i in range(width)]
    # one thread: only then does the parser number the rows it rejects
    read = pacsv.ReadOptions(use_threads=False, column_names=names)
    parse = pacsv.ParseOptions(newlines_in_values=True, ignore_empty_lines=False, invalid_row_handler=reject)
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
    numbers = np.array([number for number, _, _ in rejected], dtype=np.int64)
    count = table.num_rows + len(rejected)
    row_numbers = np.arange(1, count + 1)
    is_rejected = np.isin(row_numbers, numbers)
    # a quoted cell may run over several lines; rows below it stand that much lower in the file
    breaks = np.zeros(count, dtype=np.int64)
    if b'"' in body:
        for column in columns:
            breaks[~is_rejected] += pc.count_substring(column, "\n").to_numpy(zero_copy_only=False)
        breaks[is_rejected] += np.array([text.count("\n") for _, _, text in rejected], dtype=np.int64)
    lines = row_numbers + np.concatenate([[0], np.cumsum(breaks)])[:-1] if count else row_numbers
    ragged = [(int(line), came, text) for line, (_, came, text) in zip(lines[is_rejected], rejected)]
    return columns, lines[~is_rejected], ragged


def _filled(columns: list[pa.Array], count: int) -> Mask:
    """Rows in which at least one cell holds something."""
    filled = np.zeros(count, dtype=np.bool_)
    for column in columns:
        filled |= pc.not_equal(pc.utf8_trim_whitespace(column), "").to_numpy(zero_copy_only=False)
    return filled


def _other_separator(header: str) -> str | None:
    for mark, name in ((";", "semicolons"), ("\t", "tabs"), ("|", "vertical bars")):
        if mark in header:
            return name
    return None


def _report_header(text: TextTable, schema: FileSchema, matched: Matched, problems: Problems) -> None:
    line = text.header_line
    for wrong in matched.problems:
        column = wrong.column
        facts: dict[str, Any] = {"role": column.role, "meaning": column.meaning}
        if wrong.candidates:
            columns = ", ".join(map(repr, wrong.candidates))
            problems.add(
                "ambiguous-column", file=text.file, kind=text.kind, line=line, columns=columns, exact=column.exact[0],
                **facts,
            )  # fmt: skip
            continue
        adjusted = [name for name in text.header if normal_name(name).startswith("adj")]
        hint = ""
        if column.role == "close" and adjusted:
            hint = (
                f" {adjusted[0]!r} is adjusted for dividends and splits and is not taken for the price "
                "that was traded; if you mean it, rename it."
            )
        shown = text.header[:_SHOWN_NAMES]
        more = f" and {len(text.header) - len(shown)} more" if len(text.header) > len(shown) else ""
        header = ", ".join(quoted(name) if name.strip() else "a column without a name" for name in shown) + more
        names = f"'{column.exact[0]}'" + (
            " or by its tenor in days, such as '30'" if schema.tenors and column.role == "vol" else ""
        )
        problems.add(
            "missing-column", file=text.file, kind=text.kind, line=line, header=header, names=names, hint=hint, **facts
        )


def _typed(text: TextTable, schema: FileSchema, matched: Matched, problems: Problems) -> Table:
    """Convert the matched columns; note every cell that is no date or no number."""
    names = {role: text.header[i] for role, i in matched.taken.items()}
    where: dict[str, Any] = {"file": text.file, "kind": text.kind, "column": names["date"]}
    date_text = text.columns[matched.taken["date"]]
    dates, bad, outside = dates_from_text(date_text)
    for row in np.flatnonzero(bad):
        problems.add("bad-date", line=int(text.lines[row]), value=date_text[int(row)].as_py(), **where)
    for row in np.flatnonzero(outside):
        value = date_text[int(row)].as_py()
        problems.add(
            "date-out-of-range", line=int(text.lines[row]), value=value, low=FIRST_DATE, high=LAST_DATE, **where
        )
    dated = ~(bad | outside)
    texts = {role: text.columns[i] for role, i in matched.taken.items()}
    if not dated.all():
        texts = {role: column.filter(pa.array(dated)) for role, column in texts.items()}
    values: dict[str, Floats] = {}
    missing: dict[str, Mask] = {}
    not_numbers: dict[str, tuple[Mask, Mask]] = {}
    for role, column in texts.items():
        if role == "date":
            continue
        values[role], missing[role], nan, infinite, other = numbers_from_text(column)
        if schema.nan_is_missing:
            missing[role] = missing[role] | nan
            nan = np.zeros_like(nan)
        not_numbers[role] = (other, nan | infinite)
    table = Table(
        file=text.file,
        kind=text.kind,
        sha256=text.sha256,
        dates=dates[dated],
        lines=text.lines[dated],
        numbers=values,
        missing=missing,
        names=names,
        ignored=tuple(text.header[i] for i in matched.ignored),
        guessed=matched.guessed,
        blank_rows=text.blank_rows,
        texts=texts,
    )
    for role, (other, not_finite) in not_numbers.items():
        table.report(problems, "not-a-number", role, other)
        table.report(problems, "not-finite", role, not_finite)
    return table


def columns_of(schema: FileSchema, table: Table) -> list[tuple[str, Column]]:
    """Each value role of a table with the declaration that rules it (tenor columns follow ``vol``)."""
    by_role = {column.role: column for column in schema.value_columns}
    return [(role, by_role.get(role, schema.value_columns[0])) for role in table.numbers]
