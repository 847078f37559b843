"""The number columns of a file, read together: one decimal mark for all, and what is wrong with their cells."""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING, Any

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc

from .cells import Mask, to_numpy
from .errors import Problems
from .numbers import MARK_NAMES, DecimalMark, NumberCells, NumbersRead, decimal_mark, number_cells, read_numbers
from .parquet_files import floats_of, is_number
from .reading import Decimal, Reading
from .schema import FileSchema, Kind
from .sources import Refused

if TYPE_CHECKING:
    from .tables import Table

_PERCENT_FILES: tuple[Kind, ...] = ("vol", "rates")


def read_number_columns(
    table: Table, schema: FileSchema, reading: Reading, wanted: Mask, problems: Problems
) -> Table | None:  # fmt: skip
    """Read every value column; the whole file settles the decimal mark, problems are noted of the wanted rows.

    Returns
    -------
    Table or None
        The wanted rows; None if the decimal mark is not settled.
    """
    cells: dict[str, NumberCells] = {}
    read: dict[str, NumbersRead] = {}
    for role, column in table.texts.items():
        if role == "date":
            continue
        if is_number(column.type):
            read[role] = _stored(column)
        elif pa.types.is_string(column.type):
            cells[role] = number_cells(
                role, column, percent=table.kind in _PERCENT_FILES,
                money=table.kind not in _PERCENT_FILES and role != "volume",
            )  # fmt: skip
        else:
            raise Refused("column-type", column=table.names[role], type=str(column.type), wanted="numbers")
    found = _mark(table, list(cells.values()), reading)
    if found.unclear is not None:
        _report_unclear(table, cells[found.unclear[0]], found.unclear[1], problems)
        return None
    read |= {role: read_numbers(one, found.mark or "point") for role, one in cells.items()}
    thousands = tuple(dict.fromkeys(mark for one in read.values() for mark in one.thousands))
    settled = None if found.settled_by is None or _is_usual(table, found) else table.cell(*found.settled_by)
    dialect = replace(table.dialect, decimal=found.mark, thousands=thousands, decimal_settled_by=settled)
    is_nan = {role: one.nan for role, one in read.items()}
    table = replace(
        table,
        dialect=dialect,
        numbers={role: read[role].values for role in table.texts if role != "date"},
        missing={
            role: read[role].missing | is_nan[role] if schema.nan_is_missing else read[role].missing
            for role in table.texts
            if role != "date"
        },
    )
    faults = {
        role: {
            "not-a-number": one.other,
            "not-finite": one.infinite if schema.nan_is_missing else one.nan | one.infinite,
            "thousands-mixed": one.doubtful,
        }
        for role, one in read.items()
    }
    table = replace(table, percent=_percent(table, cells, faults))
    _currencies(table, cells, wanted, problems)
    if not wanted.all():
        table = table.rows(wanted)
    for role in table.numbers:
        for code, rows in faults[role].items():
            table.report(problems, code, role, rows[wanted], decimal=found.mark or "point", **_marks(found.mark))
    return table


def _stored(column: pa.Array) -> NumbersRead:
    """Numbers that a file holds as numbers."""
    values, missing, infinite = floats_of(column)
    none = np.zeros(len(values), dtype=np.bool_)
    return NumbersRead(
        values=values, missing=missing, nan=none, infinite=infinite, other=none, doubtful=none, thousands=()
    )


def _mark(table: Table, cells: list[NumberCells], reading: Reading) -> DecimalMark:
    if reading.decimal is not None:
        return DecimalMark(mark=reading.decimal)
    dialect = table.dialect
    return decimal_mark(cells, usual="point" if dialect.separator == "," and not dialect.points_in_quotes else None)


def _is_usual(table: Table, found: DecimalMark) -> bool:
    """Whether it is the decimal mark of nearly all files with commas: what settled it is not worth telling."""
    return table.dialect.separator == "," and found.mark == "point"


def _marks(mark: Decimal | None) -> dict[str, Any]:
    return {"mark": MARK_NAMES["." if mark == "comma" else ","]}


def _report_unclear(table: Table, cells: NumberCells, row: int, problems: Problems) -> None:
    """A number that could be two, and nothing in the file says which."""
    as_point, as_comma = (float(read_numbers(cells, mark).values[row]) for mark in ("point", "comma"))
    table.report(
        problems, "decimal-unclear", cells.role, np.array([row]), as_point=f"{as_point:.15g}",
        as_comma=f"{as_comma:.15g}",
    )  # fmt: skip


def _percent(table: Table, cells: dict[str, NumberCells], faults: dict[str, dict[str, Mask]]) -> bool:
    """Whether the values have percent signs; where only some have, the fewer are problems."""
    signs = {role: one.percent for role, one in cells.items()}
    numbers = {role: np.isfinite(table.numbers[role]) for role in cells}
    count = sum(int(np.count_nonzero(signs[role] & numbers[role])) for role in cells)
    if not count:
        return False
    rest = sum(int(np.count_nonzero(~signs[role] & numbers[role])) for role in cells)
    for role in cells:
        fewer = (signs[role] if count < rest else ~signs[role]) & numbers[role]
        faults[role]["percent-mixed"] = fewer if rest else np.zeros_like(fewer)
    return count >= rest


def _currencies(table: Table, cells: dict[str, NumberCells], wanted: Mask, problems: Problems) -> None:
    """Note a cell in another money than the rest; one history is in one."""
    seen: dict[str, tuple[str, int]] = {}
    for role, one in cells.items():
        if one.currency is None:
            continue
        signs = pc.if_else(pa.array(wanted), one.currency, "")
        for sign in pc.unique(signs).to_pylist():
            if sign and sign not in seen:
                seen[sign] = (role, int(np.argmax(to_numpy(pc.equal(signs, sign)))))
    if len(seen) > 1:
        (first, at), (other, other_at) = list(seen.items())[:2]
        table.report(
            problems, "currency-mixed", other_at[0], np.array([other_at[1]]), sign=other, first=first,
            first_line=int(table.lines[at[1]]),
        )  # fmt: skip
