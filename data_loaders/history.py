"""Prices, vol, dividends and rates of a user's files, aligned on the trading days of the price file (C1)."""

from __future__ import annotations

import datetime as dt
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pandas as pd

from . import alignment, checks, repairs
from .cells import Dates, Floats, Mask
from .csv_files import Table, columns_of, read_table
from .errors import Problems
from .repairs import Repair
from .schema import FILES, SCHEMA_VERSION, Kind, normal_name, tenor_days
from .words import counted

#: A rates file that never reaches this many percent may hold decimals; it is remarked on.
SMALL_RATE_PERCENT = 0.25


@dataclass(frozen=True, slots=True, kw_only=True)
class SourceFile:
    """One file a history was made from.

    Attributes
    ----------
    kind : str
        ``prices``, ``vol``, ``dividends`` or ``rates``.
    file : str
        Name without folders.
    sha256 : str
        Of the file's bytes, hexadecimal.
    rows : int
        Rows with data, those outside the span asked for included.
    first, last : date
        First and last date of the file.
    columns : tuple of (str, str)
        What was taken for what: our name, the file's name.
    unit : str or None
        ``percent`` or ``decimal`` for vol, ``percent`` for rates, as the file has it.
    """

    kind: Kind
    file: str
    sha256: str
    rows: int
    first: dt.date
    last: dt.date
    columns: tuple[tuple[str, str], ...]
    unit: str | None = None


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class History:
    """A checked history.

    Attributes
    ----------
    frame : DataFrame
        One row per trading day of the price file, index ``date`` (datetime64[ns], increasing, no repeats). Columns, all
        float64, as far as the files bring them: ``close``, ``open``, ``high``, ``low``, ``volume``;
        ``dividend``, cash per share on its ex-date, else 0.0; ``rate``, annual effective, decimal; ``vol``, or
        ``vol_30``, ``vol_93``, ... by tenor in days, decimal a year. Vols and rates are at most 5 calendar days
        old and never from a later day; NaN where there is none.
    sources : tuple of SourceFile
    repairs : tuple of Repair
        Every change made to what the files say.
    notes : tuple of str
        What the user should know of, in sentences.
    usable_from : date
        First trading day on which every series has a value.
    """

    frame: pd.DataFrame
    sources: tuple[SourceFile, ...]
    repairs: tuple[Repair, ...]
    notes: tuple[str, ...]
    usable_from: dt.date
    schema_version: int = SCHEMA_VERSION

    def __eq__(self, other: object) -> bool:
        if not isinstance(other, History):
            return NotImplemented
        same_facts = all(
            getattr(self, name) == getattr(other, name)
            for name in ("sources", "repairs", "notes", "usable_from", "schema_version")
        )
        return same_facts and self.frame.equals(other.frame) and self.frame.index.name == other.frame.index.name

    __hash__ = None  # type: ignore[assignment]  # holds a frame

    @property
    def vol_columns(self) -> tuple[str, ...]:
        """Names of the vol columns, shortest tenor first."""
        return tuple(name for name in self.frame.columns if name == "vol" or name.startswith("vol_"))


def load_history(
    *,
    prices: Path,
    vol: Path | None = None,
    dividends: Path | None = None,
    rates: Path | None = None,
    vol_unit: checks.Unit | None = None,
    needed_to: dt.date | None = None,
    last_day: dt.date | None = None,
    first_day: dt.date | None = None,
) -> History:
    """Read, check and align a user's CSV files.

    Parameters
    ----------
    prices : Path
        Columns ``date, close``, optional ``open, high, low, volume, dividend``.
    vol : Path, optional
        ``date, vol``, or a column per tenor named by its days; an index file's ``close`` will do.
    dividends : Path, optional
        ``date, dividend``: ex-date and cash per share.
    rates : Path, optional
        ``date, rate``: annual effective, percent a year.
    vol_unit : {"percent", "decimal"}, optional
        Found from the values where it is plain (:func:`~data_loaders.checks.vol_unit`).
    needed_to : date, optional
        Vol and rates must reach up to here only, not to the last price.
    first_day, last_day : date, optional
        Keep only the prices of this span. Outside it numbers may be missing or not positive; dates and text in
        numbers are judged everywhere.

    Raises
    ------
    DataProblems
        With everything wrong in all of the files.
    ValueError
        For a `vol_unit` that is neither of the two.
    """
    if vol_unit not in (None, "percent", "decimal"):
        raise ValueError(f"vol_unit is {vol_unit!r}; it must be 'percent', 'decimal' or None")
    loading = _Loading(vol_unit=vol_unit)
    paths: dict[Kind, Path | None] = {"prices": prices, "vol": vol, "dividends": dividends, "rates": rates}
    for kind, path in paths.items():
        if path is not None:
            loading.read(kind, Path(path), first_day, last_day)
    days = loading.trading_days(first_day, last_day)
    if days is None:
        loading.problems.raise_if_any()
        raise AssertionError("a price file without a usable day is a problem")
    columns = loading.aligned(days, needed_to)
    loading.problems.raise_if_any()
    return loading.history(days, columns)


#: Files whose values are carried to the trading days, in the order of the frame.
_CARRIED: tuple[Kind, ...] = ("rates", "vol")


class _Loading:
    """The state of one load: tables read so far, and what is to be told of them."""

    def __init__(self, vol_unit: checks.Unit | None) -> None:
        self.problems = Problems()
        self.vol_unit = vol_unit
        self.tables: dict[Kind, Table] = {}
        self.sources: list[SourceFile] = []
        self.repairs: list[Repair] = []
        self.notes: list[str] = []

    def read(self, kind: Kind, path: Path, first_day: dt.date | None, last_day: dt.date | None) -> None:
        """Read and judge one file; keep its table sorted, in our units."""
        table = read_table(path, kind, self.problems)
        if table is None or len(table.dates) == 0:
            return
        rows = _in_span(table.dates, first_day, last_day) if kind == "prices" else None
        checks.judge(table, self.problems, rows=rows)
        unit: str | None = "percent" if kind == "rates" else None
        if kind == "vol":
            unit = checks.judge_vol(table, self.problems, self.vol_unit)
            self._note_unit(table)
        self.sources.append(_source(table, unit))
        self._note_file(table)
        table, sorting = repairs.sort_by_date(table)
        if sorting is not None:
            self.repairs.append(sorting)
        if unit == "percent":
            table, turned = repairs.percent_to_decimal(table, kind)
            self.repairs.append(turned)
        self.tables[kind] = table

    def _note_file(self, table: Table) -> None:
        """What was taken for what, and what was left out."""

        def note(text: str) -> None:
            self.notes.append(f"{table.file}: {text}.")

        for role, name in table.names.items():
            if role == table.guessed:
                note(f"its only other column, {name!r}, was taken as the {role}")
            elif normal_name(name) != role and tenor_days(name) is None:
                note(f"column {name!r} was taken as the {role}")
        if ignored := [repr(name) for name in table.ignored if name.strip()]:
            note(f"not used: column{'s' if len(ignored) > 1 else ''} {', '.join(ignored)}")
        if table.blank_rows:
            note(f"{counted(table.blank_rows, 'blank row')} left out")
        for role, column in columns_of(FILES[table.kind], table):
            if column.missing == "absent" and (count := int(np.count_nonzero(table.missing[role]))):
                note(f"column {table.names[role]!r} has no value in {counted(count, 'row')}")
        if table.kind == "rates" and "rate" in table.numbers:
            largest = np.abs(table.numbers["rate"][np.isfinite(table.numbers["rate"])]).max(initial=0.0)
            if 0 < largest < SMALL_RATE_PERCENT:
                note(
                    f"the largest rate is {largest:g} and was read as {largest:g} percent a year; "
                    "if the file holds decimals, multiply them by 100"
                )

    def _note_unit(self, table: Table) -> None:
        """The unit asked for is taken, but not in silence where the values speak against it."""
        values = np.concatenate([*table.numbers.values(), np.empty(0)])
        looks = checks.vol_unit(values)
        if self.vol_unit is not None and looks not in (None, self.vol_unit):
            self.notes.append(
                f"{table.file}: the vols were read as {self.vol_unit}, as asked, but look like {looks} "
                f"(median {np.median(values[values > 0]):g})."
            )

    def trading_days(self, first_day: dt.date | None, last_day: dt.date | None) -> Dates | None:
        """The dates of the price file in the span asked for; None if there are none."""
        table = self.tables.get("prices")
        if table is None:
            return None
        days = np.unique(table.dates)
        kept: Dates = days[_in_span(days, first_day, last_day)]
        if len(kept):
            return kept
        self.problems.add(
            "no-rows-in-span", file=table.file, kind="prices",
            first=first_day or "the start", last=last_day or "the end", file_first=days[0], file_last=days[-1],
        )  # fmt: skip
        return None

    def aligned(self, days: Dates, needed_to: dt.date | None) -> dict[str, Floats]:
        """Every series on the trading days, in the order of the frame."""
        until = days[-1] if needed_to is None else min(days[-1], np.datetime64(needed_to, "D"))
        columns = alignment.price_columns(self.tables["prices"], days)
        if (table := self.tables.get("dividends")) is not None:
            columns |= alignment.dividend_column(table, self.tables["prices"], days, self.problems, self.notes)
        for kind in _CARRIED:
            if (table := self.tables.get(kind)) is not None:
                columns |= alignment.carried_columns(table, days, until, self.problems, self.notes)
        if not self.problems.found and not _complete(columns, len(days)).any():
            alignment.add_never_together(self.tables, columns, days, self.problems)
        return columns

    def history(self, days: Dates, columns: dict[str, Floats]) -> History:
        """Everything put together."""
        index = pd.DatetimeIndex(days.astype("datetime64[ns]"), name="date")
        return History(
            frame=pd.DataFrame(columns, index=index),
            sources=tuple(self.sources),
            repairs=tuple(self.repairs),
            notes=tuple(self.notes),
            usable_from=days[int(np.argmax(_complete(columns, len(days))))].item(),
        )


def _complete(columns: dict[str, Floats], count: int) -> Mask:
    """Days on which every carried series has a value."""
    complete = np.ones(count, dtype=np.bool_)
    for name, values in columns.items():
        if alignment.is_carried(name):
            complete &= np.isfinite(values)
    return complete


def _source(table: Table, unit: str | None) -> SourceFile:
    return SourceFile(
        kind=table.kind,
        file=table.file,
        sha256=table.sha256,
        rows=len(table.dates),
        first=table.dates.min().item(),
        last=table.dates.max().item(),
        columns=tuple(table.names.items()),
        unit=unit,
    )


def _in_span(dates: Dates, first_day: dt.date | None, last_day: dt.date | None) -> Mask:
    inside = np.ones(len(dates), dtype=np.bool_)
    if first_day is not None:
        inside &= dates >= np.datetime64(first_day, "D")
    if last_day is not None:
        inside &= dates <= np.datetime64(last_day, "D")
    return inside
