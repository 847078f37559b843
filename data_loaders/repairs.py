"""The few changes we make to what a file says. Each is recorded, so that a history can tell what it holds."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Literal

import numpy as np

from .tables import Table

RepairKind = Literal["sorted", "unit", "appended"]


@dataclass(frozen=True, slots=True, kw_only=True)
class Repair:
    """One change: to which file, of what sort, in how many rows, and in words."""

    file: str
    kind: RepairKind
    rows: int
    what: str


def sort_by_date(table: Table) -> tuple[Table, Repair | None]:
    """Rows in the order of their dates; equal dates keep the order of the file."""
    order = np.argsort(table.dates, kind="stable")
    moved = int(np.count_nonzero(order != np.arange(len(order))))
    if not moved:
        return table, None
    newest_first = bool((table.dates[1:] < table.dates[:-1]).all())
    what = "rows were newest first" if newest_first else "rows were out of order"
    table = table.rows(order)
    return table, Repair(file=table.file, kind="sorted", rows=moved, what=f"{what}; sorted by date, oldest first")


def percent_to_decimal(table: Table, what: str) -> tuple[Table, Repair]:
    """All values divided by 100."""
    rows = int(sum(np.count_nonzero(np.isfinite(values)) for values in table.numbers.values()))
    values = {role: values / 100.0 for role, values in table.numbers.items()}
    repair = Repair(file=table.file, kind="unit", rows=rows, what=f"{what}: percent a year turned into decimals")
    return replace(table, numbers=values), repair
