"""One table made ready for a history: judged, sorted, in our units; what was done to it and what is worth knowing."""

from __future__ import annotations

import datetime as dt
import re
from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np

from . import checks, repairs
from .cells import Dates, Mask
from .errors import Problems
from .history import SourceFile
from .reading import Reading
from .repairs import Repair
from .schema import FILES, normal_name, tenor_days
from .tables import Table, columns_of
from .words import counted

#: A rates file that never reaches this many percent may hold decimals; it is remarked on.
SMALL_RATE_PERCENT = 0.25
#: Notes on how a file was read begin so, after its name.
_TOLD = re.compile(r": (?:column .* was taken as the|not used: column|[\d,]+ (?:blank row|line|repeated header)s? )")


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Prepared:
    """A table judged, sorted and in our units; what was done to it and what is worth knowing."""

    table: Table
    source: SourceFile | None
    repairs: tuple[Repair, ...]
    notes: tuple[str, ...]


def prepared(
    table: Table, reading: Reading, problems: Problems, vol_unit: checks.Unit | None, first_day: dt.date | None,
    last_day: dt.date | None,
) -> Prepared:  # fmt: skip
    """Judge a table; sort it and turn its unit into ours."""
    if not len(table.dates):
        return Prepared(table=table, source=None, repairs=(), notes=())
    rows = in_span(table.dates, first_day, last_day) if table.kind == "prices" else None
    checks.judge(table, problems, rows=rows)
    unit: str | None = "percent" if table.kind == "rates" else None
    notes: list[str] = []
    if table.kind == "vol":
        if table.percent and vol_unit == "decimal":
            problems.add("percent-unit", file=table.file, kind=table.kind)
        unit = checks.judge_vol(table, problems, "percent" if table.percent else vol_unit)
        notes += _unit_note(table, vol_unit)
    source = SourceFile(
        kind=table.kind,
        file=table.file,
        sha256=table.sha256,
        rows=len(table.dates),
        first=table.dates.min().item(),
        last=table.dates.max().item(),
        columns=tuple(table.names.items()),
        unit=unit,
        taken=table.told(),
        reading=reading,
    )
    notes += _file_notes(table)
    done: list[Repair] = []
    table, sorting = repairs.sort_by_date(table)
    if sorting is not None:
        done.append(sorting)
    if unit == "percent":
        table, turned = repairs.percent_to_decimal(table, table.kind)
        done.append(turned)
    return Prepared(table=table, source=source, repairs=tuple(done), notes=tuple(notes))


def _file_notes(table: Table) -> Iterator[str]:
    """What was taken for what, and what was left out."""

    def note(text: str) -> str:
        return f"{table.file}: {text}."

    for role, name in table.names.items():
        if role == table.guessed:
            yield note(f"its only other column, {name!r}, was taken as the {role}")
        elif normal_name(name) != role and tenor_days(name) is None:
            yield note(f"column {name!r} was taken as the {role}")
    if ignored := [repr(name) for name in table.ignored if name.strip()]:
        yield note(f"not used: column{'s' if len(ignored) > 1 else ''} {', '.join(ignored)}")
    if table.blank_rows:
        yield note(f"{counted(table.blank_rows, 'blank row')} left out")
    dialect = table.dialect
    for lines, where in ((dialect.above, "above the header"), (dialect.below, "below the last row")):
        if lines:
            yield note(f"{counted(len(lines), 'line')} {where} left out")
    if dialect.comments:
        yield note(f"{counted(len(dialect.comments), 'line')} of comment left out")
    if dialect.repeated_headers:
        yield note(f"{counted(dialect.repeated_headers, 'repeated header')} left out")
    for role, column in columns_of(FILES[table.kind], table):
        if column.missing == "absent" and (count := int(np.count_nonzero(table.missing[role]))):
            yield note(f"column {table.names[role]!r} has no value in {counted(count, 'row')}")
    if table.kind == "rates" and "rate" in table.numbers:
        largest = np.abs(table.numbers["rate"][np.isfinite(table.numbers["rate"])]).max(initial=0.0)
        if 0 < largest < SMALL_RATE_PERCENT and not table.percent:
            yield note(
                f"the largest rate is {largest:g} and was read as {largest:g} percent a year; "
                "if the file holds decimals, multiply them by 100"
            )


def is_told(note: str) -> bool:
    """Whether a note only repeats what the source's ``taken`` says.

    >>> is_told("p.csv: column 'Last' was taken as the close."), is_told("p.csv: column 'Open' has no value in 2 rows.")
    (True, False)
    """
    return _TOLD.search(note) is not None


def _unit_note(table: Table, vol_unit: checks.Unit | None) -> list[str]:
    """The unit asked for is taken, but not in silence where the values speak against it."""
    values = np.concatenate([*table.numbers.values(), np.empty(0)])
    looks = checks.vol_unit(values)
    if vol_unit is None or looks in (None, vol_unit):
        return []
    return [
        f"{table.file}: the vols were read as {vol_unit}, as asked, but look like {looks} "
        f"(median {np.median(values[values > 0]):g})."
    ]


def in_span(dates: Dates, first_day: dt.date | None, last_day: dt.date | None) -> Mask:
    """Dates from one day to another, both included."""
    inside = np.ones(len(dates), dtype=np.bool_)
    if first_day is not None:
        inside &= dates >= np.datetime64(first_day, "D")
    if last_day is not None:
        inside &= dates <= np.datetime64(last_day, "D")
    return inside
