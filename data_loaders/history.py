"""A checked history: prices, vol, dividends and rates on the trading days of the price file (C1)."""

from __future__ import annotations

import datetime as dt
from dataclasses import dataclass

import pandas as pd

from .reading import PLAIN, Reading
from .repairs import Repair
from .schema import SCHEMA_VERSION, Kind


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
    taken : tuple of (str, str)
        How the file was read, as pairs of a word and a description: encoding, separator, decimal mark, dates, columns,
        lines left out.
    reading : Reading
        What the user said about the file, the names of its columns among it.
    """

    kind: Kind
    file: str
    sha256: str
    rows: int
    first: dt.date
    last: dt.date
    columns: tuple[tuple[str, str], ...]
    unit: str | None = None
    taken: tuple[tuple[str, str], ...] = ()
    reading: Reading = PLAIN


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
