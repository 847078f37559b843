"""Files of any dialect -> typed columns; every row keeps its place in the file.

What is wrong is put into a :class:`~data_loaders.errors.Problems`, and reading goes on where it can.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc

from .cells import Dates, Floats, Lines, Mask, text_of
from .csv_files import TextTable, read_text
from .dates import ISO, PIVOT, DatesRead, read_dates
from .dialect import Dialect
from .errors import KEPT_PER_CODE, Place, Problems, quoted
from .extra_rows import comments, repeated_headers, rows_below
from .header import report_header
from .number_columns import read_number_columns
from .parquet_files import dates_of, is_number, is_temporal, read_parquet
from .reading import PLAIN, Reading
from .schema import FILES, FIRST_DATE, LAST_DATE, Column, FileSchema, Kind, Matched, is_adjusted, match_header
from .sources import Refused, read_source
from .symbols import Symbols, find_symbols
from .words import counted

_PLAIN_DIALECT = Dialect()


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Table:
    """A file as typed columns; rows whose date cannot be read are left out.

    Attributes
    ----------
    dates : ndarray of datetime64[D], shape (row,)
    lines : ndarray of int64, shape (row,)
        Line of each row in the file, or its row where a file has no lines.
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
        The cells, to quote from.
    dialect : Dialect
        How the file is written.
    percent : bool
        Every value has a percent sign.
    symbols : pyarrow array or None
        Of a file that holds many series one below the other: the symbol of each row.
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
    dialect: Dialect = _PLAIN_DIALECT
    percent: bool = False
    symbols: pa.Array | None = None
    symbol_column: str | None = None

    @property
    def place(self) -> Place:
        """What ``lines`` count."""
        return "row" if self.dialect.separator is None else "line"

    def cell(self, role: str, row: int) -> str:
        """Text of one cell as the file has it."""
        return text_of(self.texts[role], row)

    def report(self, problems: Problems, code: str, role: str, rows: Mask | Lines, **facts: Any) -> None:
        """Note the same problem for each of the offending rows (a mask or positions)."""
        positions = np.flatnonzero(rows) if rows.dtype == np.bool_ else rows
        if len(positions) > KEPT_PER_CODE:
            problems.count_rest(code, len(positions) - KEPT_PER_CODE)
        for row in positions[:KEPT_PER_CODE]:
            problems.add(
                code, file=self.file, kind=self.kind, line=int(self.lines[row]), place=self.place,
                column=self.names[role], value=self.cell(role, row), **facts,
            )  # fmt: skip

    def rows(self, chosen: Lines | Mask | slice) -> Table:
        """The same with some of the rows, or in another order."""
        taken: Any = chosen if isinstance(chosen, slice) else pa.array(np.asarray(chosen))

        def of(column: pa.Array) -> pa.Array:
            if isinstance(taken, slice):
                return column[taken]
            return column.filter(taken) if pa.types.is_boolean(taken.type) else column.take(taken)

        return replace(
            self,
            dates=self.dates[chosen],
            lines=self.lines[chosen],
            numbers={role: values[chosen] for role, values in self.numbers.items()},
            missing={role: mask[chosen] for role, mask in self.missing.items()},
            texts={role: of(column) for role, column in self.texts.items()},
            symbols=None if self.symbols is None else of(self.symbols),
        )

    def told(self) -> tuple[tuple[str, str], ...]:
        """What was taken for what, as pairs of a word and a description."""
        columns = [role if role == name else f"{role} from {name!r}" for role, name in self.names.items()]
        if self.symbol_column is not None:
            columns.append(f"symbol from {self.symbol_column!r}")
        unused = [
            f"{name!r}{' (adjusted for splits or dividends; prices are those traded)' if is_adjusted(name) else ''}"
            for name in self.ignored
            if name.strip()
        ]
        found = dict(self.dialect.told())
        found["columns"] = ", ".join(columns)
        if unused:
            found["not used"] = ", ".join(unused)
        order = ("text", "dates", "columns", "not used", "left out")
        return tuple((word, found[word]) for word in order if word in found)


def read_table(path: Path, kind: Kind, problems: Problems, reading: Reading = PLAIN) -> Table | None:
    """Read one file of a kind; None if nothing of it can be used. Problems are noted, never raised."""
    source = read_source(path, kind, problems)
    if source is None:
        return None
    try:
        text = read_parquet(source, kind) if source.is_parquet else read_text(source, kind, reading)
        del source
        return _table(text, reading, problems)
    except Refused as refused:
        problems.add(refused.code, file=path.name, kind=kind, **refused.facts)
        return None


def _table(text: TextTable, reading: Reading, problems: Problems) -> Table | None:
    """Match the header, set apart what is no row of the table, and convert the rest."""
    schema = FILES[text.kind]
    matched = match_header(schema, text.header, reading.columns)
    if matched.problems or matched.unknown:
        report_header(text, schema, matched, problems)
    if "date" not in matched.taken:
        _report_ragged(text, frozenset(), problems)
        return None
    return _typed(text, schema, matched, reading, problems)


def _typed(
    text: TextTable, schema: FileSchema, matched: Matched, reading: Reading, problems: Problems
) -> Table | None:  # fmt: skip
    """Convert the matched columns; note every cell that is no date or no number."""
    date_at = matched.taken["date"]
    remarks, again = comments(text), repeated_headers(text, date_at)
    of_table = ~(remarks.rows | again)
    read = _dates(text, date_at, of_table, reading)
    dated = of_table & ~(read.bad | read.outside | read.too_late)
    below = rows_below(text, dated, text.dialect.separator)
    _report_ragged(text, remarks.ragged | below.ragged, problems)
    if read.unclear is not None:
        _report_unclear(text, date_at, read, problems)
        return None
    symbols = find_symbols(text, matched, reading, of_table & ~below.rows)
    wanted = of_table & ~below.rows if symbols is None else symbols.wanted
    _report_dates(text, date_at, read, wanted, problems)
    dialect = replace(
        text.dialect,
        dates=read.form.name,
        dates_settled_by=None if read.settled_by is None else text_of(text.columns[date_at], read.settled_by),
        two_digit_years=read.form.family != "serial" and read.form.years == 2,
        timed=read.form.timed,
        comments=remarks.texts,
        below=below.texts,
        repeated_headers=int(np.count_nonzero(again)),
    )
    whole = _columns(text, matched, dated & ~below.rows, read, dialect, symbols)
    return read_number_columns(whole, schema, reading, (wanted[dated & ~below.rows]), problems)


def _columns(
    text: TextTable, matched: Matched, kept: Mask, read: DatesRead, dialect: Dialect, symbols: Symbols | None
) -> Table:  # fmt: skip
    """The rows with a date, their numbers not yet read."""
    texts = {role: text.columns[at] for role, at in matched.taken.items()}
    several = None if symbols is None or symbols.one is not None else symbols.values
    if not kept.all():
        mask = pa.array(kept)
        texts = {role: column.filter(mask) for role, column in texts.items()}
        several = None if several is None else several.filter(mask)
    used = set(matched.taken.values()) | ({symbols.at} if symbols is not None else set())
    return Table(
        file=text.file,
        kind=text.kind,
        sha256=text.sha256,
        dates=read.dates if kept.all() else read.dates[kept],
        lines=text.lines if kept.all() else text.lines[kept],
        numbers={},
        missing={},
        names={role: text.header[at] for role, at in matched.taken.items()},
        ignored=tuple(name for at, name in enumerate(text.header) if at not in used),
        guessed=matched.guessed,
        blank_rows=text.dialect.blank_rows,
        texts=texts,
        dialect=dialect,
        symbols=several,
        symbol_column=None if symbols is None else text.header[symbols.at],
    )


def _dates(text: TextTable, date_at: int, rows: Mask, reading: Reading) -> DatesRead:
    """The dates of the column, whatever it is made of; rows that are none of the table do not count."""
    column = text.columns[date_at]
    if is_temporal(column.type):
        dates, bad = dates_of(column)
        outside = ~bad & ((dates < np.datetime64(FIRST_DATE)) | (dates > np.datetime64(LAST_DATE)))
        return DatesRead(dates=dates, bad=bad, outside=outside, too_late=np.zeros_like(bad), form=ISO)
    if is_number(column.type):
        column = pc.fill_null(pc.cast(column, pa.string()), "")
    if not pa.types.is_string(column.type):
        raise Refused("column-type", column=text.header[date_at], type=str(column.type), wanted="dates")
    return read_dates(column if rows.all() else pc.if_else(pa.array(rows), column, ""), reading.dates())


def _report_ragged(text: TextTable, extra: frozenset[int], problems: Problems) -> None:
    for i, row in enumerate(text.ragged):
        if i not in extra:
            problems.add(
                "ragged-row", file=text.file, kind=text.kind, line=row.line, value=row.text,
                came=counted(row.came, "field"), expected=len(text.header),
            )  # fmt: skip


def _report_unclear(text: TextTable, date_at: int, read: DatesRead, problems: Problems) -> None:
    """Dates that fit two forms alike, or as many one form as another."""
    found = read.unclear
    assert found is not None
    place: Place = "row" if text.dialect.separator is None else "line"
    where: dict[str, Any] = {
        "file": text.file, "kind": text.kind, "line": int(text.lines[found.row]), "place": place,
        "column": text.header[date_at], "value": text_of(text.columns[date_at], found.row),
        "form": found.form.name, "other": found.other.name,
    }  # fmt: skip
    if found.other_row is None:
        problems.add("date-form-unclear", date=found.date, other_date=found.other_date, **where)
        return
    other_value = text_of(text.columns[date_at], found.other_row)
    other_line = int(text.lines[found.other_row])
    problems.add("date-forms-mixed", other_value=quoted(other_value), other_line=other_line, **where)


def _report_dates(text: TextTable, date_at: int, read: DatesRead, wanted: Mask, problems: Problems) -> None:
    """Cells that are no date of the column's form, outside the range, or of a year that is to come."""
    place: Place = "row" if text.dialect.separator is None else "line"
    for code, mask in (("bad-date", read.bad), ("date-out-of-range", read.outside), ("two-digit-year", read.too_late)):
        rows = np.flatnonzero(mask & wanted & ~(read.outside if code == "two-digit-year" else np.zeros_like(mask)))
        if len(rows) > KEPT_PER_CODE:
            problems.count_rest(code, len(rows) - KEPT_PER_CODE)
        for row in rows[:KEPT_PER_CODE]:
            problems.add(
                code, file=text.file, kind=text.kind, line=int(text.lines[row]), place=place,
                column=text.header[date_at], value=text_of(text.columns[date_at], row), form=read.form.name,
                example=read.form.example, low=FIRST_DATE, high=LAST_DATE, date=read.dates[row], pivot=PIVOT,
            )  # fmt: skip


def columns_of(schema: FileSchema, table: Table) -> list[tuple[str, Column]]:
    """Each value role of a table with the declaration that rules it (tenor columns follow ``vol``)."""
    by_role = {column.role: column for column in schema.value_columns}
    return [(role, by_role.get(role, schema.value_columns[0])) for role in table.numbers]
