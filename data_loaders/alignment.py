"""Tables -> columns on the trading days of the price file (C1), and what does not fit there.

Values are carried forward only, and at most :data:`~data_loaders.schema.CARRY_DAYS` calendar days: what a day
shows was known on it (C4).
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np

from . import checks
from .cells import Dates, Floats, Lines, Mask
from .errors import Problems
from .schema import CARRY_DAYS, FILES, Kind
from .tables import Table
from .words import counted, some

#: Rows lost to these would make dates look missing that are in the file.
_LOST_ROWS = ("bad-date", "date-out-of-range", "ragged-row")


def is_carried(name: str) -> bool:
    """Whether a column of the frame is a carried series: ``rate``, ``vol``, ``vol_<days>``."""
    return name in ("rate", "vol") or name.startswith("vol_")


def price_columns(table: Table, days: Dates) -> dict[str, Floats]:
    """Columns of the price file on the trading days, in the order of the schema."""
    rows = np.searchsorted(table.dates, days)
    roles = [column.role for column in FILES["prices"].value_columns if column.role in table.numbers]
    columns = {role: table.numbers[role][rows] for role in roles}
    if "dividend" in columns:
        columns["dividend"] = np.where(table.missing["dividend"][rows], 0.0, columns["dividend"])
    return columns


def dividend_column(
    table: Table, prices: Table, days: Dates, problems: Problems, notes: list[str]
) -> dict[str, Floats]:
    """Column ``dividend`` from a dividends file: cash on the ex-date, else 0.0.

    An ex-date between the first and the last trading day must be a trading day; others are counted in `notes`.
    """
    if "dividend" not in table.numbers:
        return {}
    if "dividend" in prices.names:
        problems.add("dividends-twice", file=table.file, kind=table.kind, price_column=prices.names["dividend"])
        return {}
    if not problems.any_in("prices", _LOST_ROWS):
        for row in np.flatnonzero(checks.off_calendar(table.dates, days)):
            next_day = days[np.searchsorted(days, table.dates[row])]
            table.report(problems, "ex-date-not-a-trading-day", "date", np.array([row]), next_day=next_day)
    _note_unused(table, "dividend", np.ones(len(table.dates), dtype=np.bool_), days, notes)
    dividend = np.zeros(len(days))
    known = np.isin(table.dates, days)
    dividend[np.searchsorted(days, table.dates[known])] = table.numbers["dividend"][known]
    return {"dividend": dividend}


def signal_column(table: Table, days: Dates) -> dict[str, Floats]:
    """Column ``signal``: on each trading day the last value up to it, however old; NaN before the first."""
    if "signal" not in table.numbers:
        return {}
    known = ~table.missing["signal"]
    dates, values = table.dates[known], table.numbers["signal"][known]
    last = np.searchsorted(dates, days, side="right") - 1
    return {"signal": np.append(values, np.nan)[last]}


def carried_columns(
    table: Table, days: Dates, until: np.datetime64, problems: Problems, notes: list[str]
) -> dict[str, Floats]:
    """Columns of a vol or rates file: on each trading day the last value of at most 5 calendar days ago.

    NaN before a series starts. A trading day up to `until` that has no such value is part of a gap, a problem.
    """
    present = np.zeros(len(table.dates), dtype=np.bool_)
    for missing in table.missing.values():
        present |= ~missing
    what = "rate" if table.kind == "rates" else table.kind
    off = table.dates[present & checks.off_calendar(table.dates, days)]
    if len(off):
        be, day = ("is", "a trading day") if len(off) == 1 else ("are", "trading days")
        notes.append(
            f"{table.file}: {counted(len(off), f'{what} date')} {be} not {day} of the price file ({some(off)}); "
            "a value there serves only a next trading day without its own."
        )
    _note_unused(table, f"{what} date", present, days, notes)
    return {role: _carried(table, role, days, until, problems, notes) for role in table.numbers}


def add_never_together(
    tables: Mapping[Kind, Table], columns: Mapping[str, Floats], days: Dates, problems: Problems
) -> None:
    """Note that no trading day has a value of every series, with the span of each."""
    spans = []
    for name, values in columns.items():
        if is_carried(name):
            known = days[np.isfinite(values)]
            spans.append(f"'{name}' from {known[0]} to {known[-1]}")
    table = tables.get("vol") or tables["rates"]
    problems.add("never-together", file=table.file, kind=table.kind, spans=", ".join(spans))


def _carried(
    table: Table, role: str, days: Dates, until: np.datetime64, problems: Problems, notes: list[str]
) -> Floats:
    present = ~table.missing[role]
    value_days, values = table.dates[present], table.numbers[role][present]
    carried = np.full(len(days), np.nan)
    position = np.searchsorted(value_days, days, side="right") - 1
    fresh = position >= 0
    fresh[fresh] = (days[fresh] - value_days[position[fresh]]).astype(np.int64) <= CARRY_DAYS
    carried[fresh] = values[position[fresh]]
    if len(value_days) and not problems.any_in(table.kind, _LOST_ROWS):
        if fresh.any():
            _add_gaps(table, role, days, until, problems)
        else:
            problems.add(
                "no-values-in-span", file=table.file, kind=table.kind, column=table.names[role], role=role,
                first=days[0], last=days[-1], value_first=value_days[0], value_last=value_days[-1],
            )  # fmt: skip
    _note_coverage(table, role, days, fresh, fresh & ~np.isin(days, value_days), notes)
    return carried


def _add_gaps(table: Table, role: str, days: Dates, until: np.datetime64, problems: Problems) -> None:
    present = ~table.missing[role]
    value_days: Dates = table.dates[present]
    lines: Lines = table.lines[present]
    for gap in checks.gaps(days[days <= until], value_days, CARRY_DAYS):
        facts: dict[str, Any] = {"start": gap.before, "count": counted(gap.count, "trading day"), "first": gap.first}
        if gap.after is None:
            end = gap.last
            # a day that can be served lies before: the series has started
            last_served = days[days <= gap.before + CARRY_DAYS]
            advice = f"Add the later values, or end with --to {last_served[-1]}." if len(last_served) else ""
        else:
            end = gap.after
            advice = (
                f"Add the values between, or begin with --from {days[days >= end][0]}." if (days >= end).any() else ""
            )
        line = int(lines[np.searchsorted(value_days, gap.before)])
        problems.add(
            "gap-too-long", file=table.file, kind=table.kind, line=line, place=table.place,
            column=table.names[role], role=role, end=end, days=int((end - gap.before).astype(np.int64)),
            limit=CARRY_DAYS, advice=advice, **facts,
        )  # fmt: skip


def _note_unused(table: Table, what: str, present: Mask, days: Dates, notes: list[str]) -> None:
    outside = present & ((table.dates < days[0]) | (table.dates > days[-1]))
    if count := int(np.count_nonzero(outside)):
        notes.append(
            f"{table.file}: {counted(count, what)} before {days[0]} or after {days[-1]}, outside the prices, not used."
        )


def _note_coverage(table: Table, role: str, days: Dates, known: Mask, older: Mask, notes: list[str]) -> None:
    if count := int(np.count_nonzero(older)):
        own, take = ("its", "takes") if count == 1 else ("their", "take")
        notes.append(
            f"{table.file}: {counted(count, 'trading day')} without a {role} of {own} own ({some(days[older])}) "
            f"{take} the last one, at most {CARRY_DAYS} calendar days old."
        )
    served = np.flatnonzero(known)
    if not len(served):
        return
    if before := int(served[0]):
        notes.append(
            f"{table.file}: {role} starts on {days[before]}; {counted(before, 'earlier trading day')} without one."
        )
    if after := int(len(days) - 1 - served[-1]):
        notes.append(
            f"{table.file}: {role} serves up to {days[served[-1]]}; {counted(after, 'later trading day')} without one."
        )
