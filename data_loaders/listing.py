"""What a store holds, told from the ends of its files: no column is read."""

from __future__ import annotations

import datetime as dt
import json
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import pyarrow as pa
import pyarrow.parquet as pq

from .alignment import is_carried
from .names import history_names, is_name
from .schema import SCHEMA_VERSION, tenor_days
from .store import METADATA_KEY
from .versions import FOLDER, Version, all_versions, former_versions


@dataclass(frozen=True, slots=True, kw_only=True)
class Told:
    """What one file of a history holds.

    Attributes
    ----------
    first, last : date
    days : int
    usable_from : date
        First day on which every series has a value.
    columns : tuple of str
    files : tuple of (str, str, str)
        Kind, name and sha256 of each file it was loaded from.
    """

    first: dt.date
    last: dt.date
    days: int
    usable_from: dt.date
    columns: tuple[str, ...]
    files: tuple[tuple[str, str, str], ...]

    @property
    def holds(self) -> str:
        """In words, such as ``prices (close, volume), dividends, vol of 30 and 93 days, rates``."""
        prices = [name for name in self.columns if not is_carried(name) and name != "dividend"]
        tenors = [str(tenor_days(name)) for name in self.columns if name.startswith("vol_")]
        said = [f"prices ({', '.join(prices)})"]
        if "dividend" in self.columns:
            said.append("dividends")
        if "vol" in self.columns:
            said.append("vol")
        if tenors:
            said.append(f"vol of {' and '.join(filter(None, [', '.join(tenors[:-1]), tenors[-1]]))} days")
        if "rate" in self.columns:
            said.append("rates")
        return ", ".join(said)


@dataclass(frozen=True, slots=True, kw_only=True)
class Listed:
    """One history of a store.

    Attributes
    ----------
    name : str
    told : Told or None
        Of the current version; None if that cannot be read or is gone.
    problem : str or None
        Why it cannot be read.
    versions : tuple of Version
        Oldest first; the current one is the last.
    """

    name: str
    told: Told | None
    problem: str | None
    versions: tuple[Version, ...]

    @property
    def current(self) -> Version | None:
        """The history as it is now; None if only former versions are left."""
        return next((version for version in self.versions if version.current), None)


def list_histories(store: Path) -> tuple[Listed, ...]:
    """All histories of a store by name, those of which only former versions are left among them.

    Raises
    ------
    OSError
        If a file of the store cannot be opened.
    """
    store = Path(store)
    kept = store / FOLDER
    names = set(history_names(store))
    if kept.is_dir():
        names |= {path.name for path in kept.iterdir() if path.is_dir() and _versions(store, path.name)}
    return tuple(list_history(store, name) for name in sorted(names))


def list_history(store: Path, name: str) -> Listed:
    """One history of a store.

    Raises
    ------
    StoreError
        For a name that cannot be used.
    OSError
    """
    versions = all_versions(store, name)
    now = versions[-1] if versions and versions[-1].current else None
    if now is None:
        problem = f"{name} is no longer there, only former versions of it are"
        return Listed(name=name, told=None, problem=problem, versions=versions)
    try:
        return Listed(name=name, told=tell(now.path), problem=None, versions=versions)
    except ValueError as error:
        return Listed(name=name, told=None, problem=str(error), versions=versions)


def tell(path: Path) -> Told:
    """What a history's file holds.

    Raises
    ------
    ValueError
        If it is damaged, no history, or of another schema; the message says what.
    """
    try:
        end = pq.read_metadata(path)
        facts = json.loads((end.metadata or {})[METADATA_KEY])
        version = facts["schema_version"]
        if version == SCHEMA_VERSION:
            return _told(end, facts)
    except (OSError, pa.ArrowException, LookupError, TypeError, ValueError, AttributeError, RecursionError) as error:
        reason = str(error).splitlines()[0] if str(error) else type(error).__name__
        raise ValueError(f"{path} cannot be read as a history ({reason}): load it again") from error
    raise ValueError(f"{path} has schema version {version!r} and this program reads {SCHEMA_VERSION}: load it again")


def _told(end: Any, facts: dict[str, Any]) -> Told:
    groups = [end.row_group(number).column(0).statistics for number in range(end.num_row_groups)]
    return Told(
        first=min(group.min for group in groups).date(),
        last=max(group.max for group in groups).date(),
        days=end.num_rows,
        usable_from=dt.date.fromisoformat(facts["usable_from"]),
        columns=tuple(end.schema.names[1:]),
        files=tuple((one["kind"], one["file"], one["sha256"]) for one in facts["sources"]),
    )


def _versions(store: Path, name: str) -> bool:
    return is_name(name) and bool(former_versions(store, name))
