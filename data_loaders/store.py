"""Histories as Parquet files in one folder, a file per name, written so that the old or the new one is there.

A file ``<name>.parquet`` holds the frame of a :class:`~data_loaders.history.History` with ``date`` as its first
column; everything else (sources with sha256, repairs, notes, versions) is JSON in its metadata.
"""

from __future__ import annotations

import contextlib
import datetime as dt
import difflib
import json
import os
import re
import secrets
from dataclasses import asdict
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.parquet as pq

from .errors import StoreError, quoted
from .history import History, SourceFile
from .repairs import Repair
from .schema import SCHEMA_VERSION

SUFFIX = ".parquet"
LONGEST_NAME = 64
_METADATA_KEY = b"rollband.history"
_NAME = re.compile(r"[A-Za-z0-9_-](?:[A-Za-z0-9_.-]*[A-Za-z0-9_-])?")


def check_name(name: str) -> str:
    """Return `name` if a history may be called so.

    Letters a to z, digits, ``_`` and ``-``, with points inside, at most 64 characters: a name never leads out of
    the store.

    Raises
    ------
    StoreError
        For any other name.

    Examples
    --------
    >>> check_name("spx-1990.v2")
    'spx-1990.v2'
    """
    if _NAME.fullmatch(name) and len(name) <= LONGEST_NAME:
        return name
    raise StoreError(
        f"{quoted(name)} ({len(name)} characters) cannot be the name of a history: use letters a-z, digits, "
        f"'_' and '-', with '.' inside only, at most {LONGEST_NAME} characters, for example 'spx-1990'"
    )


def history_names(folder: Path) -> tuple[str, ...]:
    """Names of the histories in a store, sorted; none if the folder does not exist."""
    folder = Path(folder)
    if not folder.is_dir():
        return ()
    names = (path.name.removesuffix(SUFFIX) for path in folder.glob(f"*{SUFFIX}") if path.is_file())
    return tuple(sorted(name for name in names if _NAME.fullmatch(name) and len(name) <= LONGEST_NAME))


def write_history(history: History, folder: Path, name: str) -> Path:
    """Store a history under a name, in place of one that is there; return its file.

    The file is written beside the old one, flushed to disk and moved over it in one step. Equal histories give
    equal bytes. The folder is made if need be.

    Raises
    ------
    StoreError
        For a name that cannot be used, or if the disk refuses; an old history is then untouched.
    """
    folder = Path(folder)
    path = folder / f"{check_name(name)}{SUFFIX}"
    table = _to_arrow(history)
    # a leading point keeps a half-written file from ever counting as a history
    temporary = folder / f".{name}.{secrets.token_hex(8)}.tmp"
    try:
        folder.mkdir(parents=True, exist_ok=True)
        try:
            with temporary.open("xb") as file:
                pq.write_table(table, file, compression="zstd", version="2.6")
                file.flush()
                os.fsync(file.fileno())
            temporary.replace(path)
        except BaseException:
            with contextlib.suppress(OSError):
                temporary.unlink(missing_ok=True)
            raise
        _flush_folder(folder)
    except OSError as error:
        raise StoreError(
            f"history '{name}' could not be written to {path}: {error.strerror or error}; check the folder and the disk"
        ) from error
    return path


def read_history(folder: Path, name: str) -> History:
    """Read a stored history.

    Raises
    ------
    StoreError
        For a name that is unknown (the message lists the known ones) or cannot be used, a file that is no history
        or is damaged, or one written by another version.
    """
    folder = Path(folder)
    path = folder / f"{check_name(name)}{SUFFIX}"
    try:
        table = pq.read_table(pa.BufferReader(path.read_bytes()))
    except FileNotFoundError:
        raise StoreError(_unknown(folder, name)) from None
    except (OSError, pa.ArrowException) as error:
        reason = str(error).splitlines()[0] if str(error) else type(error).__name__
        raise StoreError(
            f"history '{name}' ({path}) cannot be read: {reason}; load it again from its CSV files"
        ) from error
    metadata = (table.schema.metadata or {}).get(_METADATA_KEY)
    if metadata is None:
        raise StoreError(f"{path} is a Parquet file but not a history; load '{name}' again from its CSV files")
    try:
        return _from_arrow(table, json.loads(metadata), path)
    except (KeyError, TypeError, ValueError, AttributeError) as error:
        raise StoreError(
            f"history '{name}' ({path}) is damaged ({type(error).__name__}: {error}); load it again from its CSV files"
        ) from error


def _to_arrow(history: History) -> pa.Table:
    frame = history.frame
    facts = {
        "schema_version": history.schema_version,
        "sources": [asdict(source) for source in history.sources],
        "repairs": [asdict(repair) for repair in history.repairs],
        "notes": list(history.notes),
        "usable_from": history.usable_from,
    }
    # no pandas metadata: it would tie the bytes to the versions of the day
    text = json.dumps(facts, default=_iso, sort_keys=True, ensure_ascii=False)
    columns = {"date": pa.array(frame.index.to_numpy().astype("datetime64[ns]"))}
    columns |= {name: pa.array(frame[name].to_numpy(dtype=np.float64)) for name in frame.columns}
    return pa.table(columns).replace_schema_metadata({_METADATA_KEY: text.encode()})


def _from_arrow(table: pa.Table, facts: dict[str, Any], path: Path) -> History:
    version = facts["schema_version"]
    if version != SCHEMA_VERSION:
        raise StoreError(
            f"{path} has schema version {version!r} and this program reads version {SCHEMA_VERSION}; "
            "load it again from its CSV files, or use the version of the program that wrote it"
        )
    columns = {name: table.column(name).to_numpy() for name in table.column_names}
    index = pd.DatetimeIndex(columns.pop("date").astype("datetime64[ns]"), name="date")
    return History(
        frame=pd.DataFrame({name: np.array(values, dtype=np.float64) for name, values in columns.items()}, index=index),
        sources=tuple(_source(entry) for entry in facts["sources"]),
        repairs=tuple(Repair(**entry) for entry in facts["repairs"]),
        notes=tuple(facts["notes"]),
        usable_from=dt.date.fromisoformat(facts["usable_from"]),
        schema_version=version,
    )


def _source(entry: dict[str, Any]) -> SourceFile:
    dates = {name: dt.date.fromisoformat(entry[name]) for name in ("first", "last")}
    columns = tuple((role, name) for role, name in entry["columns"])
    return SourceFile(**{**entry, **dates, "columns": columns})


def _iso(value: object) -> str:
    if isinstance(value, dt.date):
        return value.isoformat()
    raise TypeError(f"{type(value).__name__} has no place in the metadata of a history")


def _unknown(folder: Path, name: str) -> str:
    known = history_names(folder)
    if not known:
        return (
            f"there is no history '{name}': {folder} holds none yet; make one with 'rollband load {name} --prices FILE'"
        )
    nearest = difflib.get_close_matches(name, known, n=1)
    meant = f"; did you mean '{nearest[0]}'?" if nearest else ""
    return f"there is no history '{name}' in {folder}{meant or '.'} It holds: {', '.join(known)}"


def _flush_folder(folder: Path) -> None:
    """Make the move itself last through a power cut, where the system allows it."""
    if not hasattr(os, "O_DIRECTORY"):
        return
    handle = os.open(folder, os.O_RDONLY | os.O_DIRECTORY)
    try:
        os.fsync(handle)
    finally:
        os.close(handle)
