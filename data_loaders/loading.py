"""Files read, judged and put together into a history; or into many, of a file of many symbols."""

from __future__ import annotations

import datetime as dt
from collections.abc import Mapping
from dataclasses import replace
from pathlib import Path

import numpy as np
import pandas as pd
import pyarrow.compute as pc

from . import alignment, checks
from .cells import Dates, Floats, Mask, to_numpy
from .errors import Problems
from .history import History, SourceFile
from .preparing import Prepared, in_span, prepared
from .reading import PLAIN, Reading
from .repairs import Repair
from .schema import FILES, Kind
from .tables import Table, read_table
from .words import counted


def load_history(
    *,
    prices: Path,
    vol: Path | None = None,
    dividends: Path | None = None,
    rates: Path | None = None,
    signal: Path | None = None,
    vol_unit: checks.Unit | None = None,
    needed_to: dt.date | None = None,
    last_day: dt.date | None = None,
    first_day: dt.date | None = None,
    readings: Mapping[Kind, Reading] | None = None,
) -> History:
    """Read, check and align a user's files: CSV of any usual dialect, packed or not, or Parquet.

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
    signal : Path, optional
        ``date, on``: 1 from that day on, or 0, for gates; the last one counts between its dates.
    vol_unit : {"percent", "decimal"}, optional
        Found from the values where it is plain (:func:`~data_loaders.checks.vol_unit`).
    needed_to : date, optional
        Vol and rates must reach up to here only, not to the last price.
    first_day, last_day : date, optional
        Keep only the prices of this span. Outside it numbers may be missing or not positive; dates and text in
        numbers are judged everywhere.
    readings : dict of kind -> Reading, optional
        What the files themselves do not settle: the form of dates, the decimal mark, names of columns, a symbol.

    Raises
    ------
    DataProblems
        With everything wrong in all of the files.
    ValueError
        For a `vol_unit` that is neither of the two, or a column of symbols without a symbol.
    """
    said = _said(vol_unit, readings)
    if any(one.symbol_column is not None and one.symbol is None for one in said.values()):
        raise ValueError("a column of symbols without a symbol is for load_histories")
    problems = Problems()
    tables = _tables(
        {"prices": prices, "vol": vol, "dividends": dividends, "rates": rates, "signal": signal}, said, problems
    )
    loading = _Loading(problems)
    for kind, table in tables.items():
        loading.take(prepared(table, said[kind], problems, vol_unit, first_day, last_day))
    return loading.history(first_day, last_day, needed_to)


def load_histories(
    *,
    prices: Path,
    vol: Path | None = None,
    dividends: Path | None = None,
    rates: Path | None = None,
    signal: Path | None = None,
    vol_unit: checks.Unit | None = None,
    last_day: dt.date | None = None,
    first_day: dt.date | None = None,
    readings: Mapping[Kind, Reading] | None = None,
) -> dict[str, History]:
    """The histories of all symbols of a price file that holds them one below the other, by symbol.

    Another file that has a column of symbols too brings each symbol its own rows; one that has none is for all. A
    symbol without dividends in a file of dividends had none; one without vols or rates is a problem.

    Raises
    ------
    DataProblems
        With everything wrong in all of the files and symbols: then there is no history of any.
    ValueError
        As :func:`load_history`.
    """
    said = _said(vol_unit, readings)
    problems = Problems()
    tables = _tables(
        {"prices": prices, "vol": vol, "dividends": dividends, "rates": rates, "signal": signal}, said, problems
    )
    problems.raise_if_any()
    shared = {
        kind: prepared(table, said[kind], problems, vol_unit, first_day, last_day)
        for kind, table in tables.items()
        if table.symbols is None
    }
    problems.raise_if_any()
    parts = {kind: _by_symbol(table) for kind, table in tables.items() if table.symbols is not None}
    histories: dict[str, History] = {}
    for symbol in sorted(parts["prices"]):
        problems.symbol = symbol
        loading = _Loading(problems, known=len(problems.found))
        for kind, table in tables.items():
            if kind in shared:
                loading.take(shared[kind])
                continue
            reading = replace(said[kind], symbol=symbol)
            if (part := parts[kind].get(symbol)) is None:
                part = _without_rows(table, reading, problems)
            loading.take(prepared(part, reading, problems, vol_unit, first_day, last_day))
        history = loading.history_or_none(first_day, last_day, None)
        if history is not None:
            histories[symbol] = history
    problems.raise_if_any()
    return histories


def _said(vol_unit: checks.Unit | None, readings: Mapping[Kind, Reading] | None) -> dict[Kind, Reading]:
    if vol_unit not in (None, "percent", "decimal"):
        raise ValueError(f"vol_unit is {vol_unit!r}; it must be 'percent', 'decimal' or None")
    return {kind: (readings or {}).get(kind, PLAIN) for kind in FILES}


def _tables(paths: Mapping[Kind, Path | None], said: Mapping[Kind, Reading], problems: Problems) -> dict[Kind, Table]:
    """The files that could be read and have rows."""
    tables: dict[Kind, Table] = {}
    for kind, path in paths.items():
        if path is not None:
            table = read_table(Path(path), kind, problems, said[kind])
            if table is not None and len(table.dates):
                tables[kind] = table
    return tables


def _by_symbol(table: Table) -> dict[str, Table]:
    """The rows of each symbol, in the order of the file."""
    coded = pc.dictionary_encode(table.symbols)
    codes = to_numpy(coded.indices)
    order = np.argsort(codes, kind="stable")
    if (order[1:] < order[:-1]).any():
        table = table.rows(order)
    bounds = np.append(np.searchsorted(codes[order], np.arange(len(coded.dictionary))), len(codes))
    return {
        symbol: table.rows(slice(int(bounds[i]), int(bounds[i + 1])))
        for i, symbol in enumerate(coded.dictionary.to_pylist())
    }


def _without_rows(table: Table, reading: Reading, problems: Problems) -> Table:
    """No rows of a symbol that a file does not have."""
    if table.kind != "dividends":
        count = counted(len(pc.unique(table.symbols)), "symbol")
        problems.add(
            "unknown-symbol", file=table.file, kind=table.kind, column=table.symbol_column, symbol=reading.symbol,
            count=count, symbols="...", meant="",
        )  # fmt: skip
    return table.rows(slice(0, 0))


# ---------------------------------------------------------------- one history


#: Files whose values are carried to the trading days, in the order of the frame.
_CARRIED: tuple[Kind, ...] = ("rates", "vol")


class _Loading:
    """The state of one load: tables taken so far, and what is to be told of them."""

    def __init__(self, problems: Problems, *, known: int = 0) -> None:
        """`known` problems are of something else."""
        self.problems = problems
        self.known = known
        self.tables: dict[Kind, Table] = {}
        self.sources: list[SourceFile] = []
        self.repairs: list[Repair] = []
        self.notes: list[str] = []

    def take(self, ready: Prepared) -> None:
        """One file more."""
        self.tables[ready.table.kind] = ready.table
        if ready.source is not None:
            self.sources.append(ready.source)
        self.repairs += ready.repairs
        self.notes += ready.notes

    def history(self, first_day: dt.date | None, last_day: dt.date | None, needed_to: dt.date | None) -> History:
        """Everything put together, if nothing is wrong."""
        made = self.history_or_none(first_day, last_day, needed_to)
        self.problems.raise_if_any()
        if made is None:
            raise AssertionError("a price file without a usable day is a problem")
        return made

    def history_or_none(
        self, first_day: dt.date | None, last_day: dt.date | None, needed_to: dt.date | None
    ) -> History | None:  # fmt: skip
        """Everything put together, as far as it goes; None without a trading day or where something is wrong."""
        days = self._trading_days(first_day, last_day)
        if days is None:
            return None
        columns = self._aligned(days, needed_to)
        if len(self.problems.found) > self.known:
            return None
        return History(
            frame=pd.DataFrame(columns, index=pd.DatetimeIndex(days.astype("datetime64[ns]"), name="date")),
            sources=tuple(self.sources),
            repairs=tuple(self.repairs),
            notes=tuple(self.notes),
            usable_from=days[int(np.argmax(_complete(columns, len(days))))].item(),
        )

    def _trading_days(self, first_day: dt.date | None, last_day: dt.date | None) -> Dates | None:
        """The dates of the price file in the span asked for; None if there are none."""
        table = self.tables.get("prices")
        if table is None:
            return None
        days = np.unique(table.dates)
        kept: Dates = days[in_span(days, first_day, last_day)]
        if len(kept):
            return kept
        self.problems.add(
            "no-rows-in-span", file=table.file, kind="prices",
            first=first_day or "the start", last=last_day or "the end", file_first=days[0], file_last=days[-1],
        )  # fmt: skip
        return None

    def _aligned(self, days: Dates, needed_to: dt.date | None) -> dict[str, Floats]:
        """Every series on the trading days, in the order of the frame."""
        until = days[-1] if needed_to is None else min(days[-1], np.datetime64(needed_to, "D"))
        columns = alignment.price_columns(self.tables["prices"], days)
        if (table := self.tables.get("dividends")) is not None:
            columns |= alignment.dividend_column(table, self.tables["prices"], days, self.problems, self.notes)
        for kind in _CARRIED:
            if (table := self.tables.get(kind)) is not None and len(table.dates):
                columns |= alignment.carried_columns(table, days, until, self.problems, self.notes)
        if (table := self.tables.get("signal")) is not None:
            columns |= alignment.signal_column(table, days)
        if len(self.problems.found) == self.known and not _complete(columns, len(days)).any():
            alignment.add_never_together(self.tables, columns, days, self.problems)
        return columns


def _complete(columns: dict[str, Floats], count: int) -> Mask:
    """Days on which every carried series has a value."""
    complete = np.ones(count, dtype=np.bool_)
    for name, values in columns.items():
        if alignment.is_carried(name):
            complete &= np.isfinite(values)
    return complete
