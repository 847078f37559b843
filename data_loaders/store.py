"""Histories as Parquet files in one folder, a file per name, written so that the old or the new one is there.

A file ``<name>.parquet`` holds the frame of a :class:`~data_loaders.history.History` with ``date`` as its first
column; everything else (sources with sha256, repairs, notes, versions) is JSON in its metadata. The file of before is
kept (:mod:`~data_loaders.versions`). There is one writer at a time (:mod:`~data_loaders.locks`); a reader reads one
file in one go, and so the old or the new one.
"""

from __future__ import annotations

import datetime as dt
import difflib
import hashlib
import json
import os
from collections.abc import Callable, Iterable, Iterator, Sequence
from contextlib import ExitStack, contextmanager, suppress
from dataclasses import asdict, dataclass, replace
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.parquet as pq

from .appending import Appended, appended
from .disk import flush, remove_unfinished, written_beside
from .errors import StoreError
from .history import History, SourceFile
from .locks import PATIENCE, only_writer
from .names import LONGEST_NAME, SUFFIX, check_name, history_file, history_names
from .reading import Reading
from .repairs import Repair
from .revisions import Changes, changes_between
from .schema import SCHEMA_VERSION
from .versions import Version, keep, prune

__all__ = [
    "LONGEST_NAME", "SUFFIX", "Stored", "append_history", "check_name", "history_names", "prune_versions",
    "read_history", "read_stored", "read_version", "store_histories", "store_history", "write_history",
]  # fmt: skip

#: Key of what is told of a history in the metadata of its file.
METADATA_KEY = b"rollband.history"
#: Histories written before the disk is waited for.
GROUP = 64


@dataclass(frozen=True, slots=True, kw_only=True)
class Stored:
    """What came of storing a history.

    Attributes
    ----------
    path : Path
        Its file.
    written : bool
        Whether anything was: an equal history stays as it is, and counts as loaded anew.
    former : Version or None
        The one of before, which is kept; None if there was none, or nothing was written.
    changes : Changes or None
        What is different from the one of before; None without one that can be read.
    unreadable : str or None
        Why the one of before could not be read.
    """

    path: Path
    written: bool
    former: Version | None = None
    changes: Changes | None = None
    unreadable: str | None = None


def write_history(history: History, folder: Path, name: str) -> Path:
    """Store a history under a name and return its file; see :func:`store_history`."""
    return store_history(history, folder, name).path


def store_history(history: History, folder: Path, name: str, *, patience: float = PATIENCE) -> Stored:
    """Store a history under a name, in place of one that is there, which is kept as a former version.

    The file is written beside the old one, flushed to disk and moved over it in one step. Equal histories give
    equal bytes. The folder is made if need be.

    Parameters
    ----------
    patience : float
        Seconds to wait for another load to end.

    Raises
    ------
    StoreError
        For a name that cannot be used, if the disk refuses, or another load does not end; an old history is then
        untouched.
    """
    check_name(name)
    return store_histories([(name, history)], folder, patience=patience)[0]


def store_histories(
    histories: Iterable[tuple[str, History]],
    folder: Path,
    *,
    patience: float = PATIENCE,
    progress: Callable[[int], None] = lambda done: None,
) -> list[Stored]:
    """Store many histories, each as :func:`store_history` does, and no other load between them.

    If one fails, or the program ends, some are stored and some are not, each whole.

    Parameters
    ----------
    histories : iterable of (str, History)
        May be made on the way: they are let go as they are stored, a few at a time.
    progress : callable
        Called with the number stored.

    Raises
    ------
    StoreError
    """
    done: list[Stored] = []
    with _writing(Path(folder), patience):
        for group in _groups(histories):
            done += _store(group, Path(folder))
            progress(len(done))
    return done


def append_history(
    new: History, folder: Path, name: str, *, patience: float = PATIENCE
) -> tuple[Stored, Appended]:  # fmt: skip
    """Put new days after a stored history; see :func:`~data_loaders.appending.appended`.

    Raises
    ------
    StoreError
        As :func:`store_history`, and if there is no such history, or (AppendRefused) the two do not go together;
        the stored history is then untouched.
    """
    folder = Path(folder)
    read_history(folder, name)  # before a folder is made for it
    with _writing(folder, patience):
        found = appended(read_history(folder, name), new, name=name)
        return _store([(name, found.history)], folder)[0], found


def prune_versions(folder: Path, names: Iterable[str], most: int, *, patience: float = PATIENCE) -> list[Version]:
    """Let go of all former versions of these histories but the newest ``most`` of each; those that went.

    Raises
    ------
    StoreError
    """
    gone: list[Version] = []
    with _writing(Path(folder), patience):
        for name in names:
            with _refused(name, history_file(folder, name)):
                gone += prune(folder, name, most)
    return gone


def read_history(folder: Path, name: str) -> History:
    """Read a stored history.

    Raises
    ------
    StoreError
        For a name that is unknown (the message lists the known ones) or cannot be used, a file that is no history
        or is damaged, or one written by another version.
    """
    return read_stored(folder, name)[0]


def read_stored(folder: Path, name: str) -> tuple[History, str]:
    """Read a stored history, and the sha256 of the very bytes that were read: its version.

    Raises
    ------
    StoreError
        As :func:`read_history`.
    """
    path = history_file(folder, name)
    try:
        content = path.read_bytes()
    except FileNotFoundError:
        raise StoreError(_unknown(Path(folder), name)) from None
    except OSError as error:
        raise _unreadable(path, name, error) from error
    return _from_bytes(content, path, name), hashlib.sha256(content).hexdigest()


def read_version(version: Version) -> History:
    """Read one version of a history.

    Raises
    ------
    StoreError
        If it is damaged, no longer there, or of another schema.
    """
    try:
        content = version.path.read_bytes()
    except OSError as error:
        raise _unreadable(version.path, version.name, error) from error
    return _from_bytes(content, version.path, version.name)


@contextmanager
def _writing(folder: Path, patience: float) -> Iterator[None]:
    """Make the folder, and be its only writer."""
    with _refused("the histories", folder):
        folder.mkdir(parents=True, exist_ok=True)
    with ExitStack() as stack:
        with _refused("the histories", folder):
            if stack.enter_context(only_writer(folder, patience=patience)):
                remove_unfinished(folder)
        yield


@contextmanager
def _refused(what: str, path: Path) -> Iterator[None]:
    """What the disk says becomes an error of ours."""
    try:
        yield
    except OSError as error:
        raise StoreError(
            f"{what} could not be written to {path}: {error.strerror or error}; check the folder and the disk"
        ) from error


def _store(histories: Sequence[tuple[str, History]], folder: Path) -> list[Stored]:
    """Store histories of different names, as the only writer; the disk is waited for once for all."""
    made: list[tuple[str, Path, Path]] = []
    done: list[Stored] = []
    with ExitStack() as fresh_files:
        for name, history in histories:
            path = history_file(folder, name)
            before, unreadable = _before(folder, name)
            if before is not None and before == history:
                with suppress(OSError):  # of another user's file: then it keeps its time
                    os.utime(path)
                done.append(Stored(path=path, written=False))
                continue
            with _refused(f"history '{name}'", path):
                fresh = fresh_files.enter_context(written_beside(folder, name, _writer(history)))
            changes = None if before is None else changes_between(before, history)
            done.append(Stored(path=path, written=True, changes=changes, unreadable=unreadable))
            made.append((name, path, fresh))
        if not made:
            return done
        what, where = (f"history '{made[0][0]}'", made[0][1]) if len(made) == 1 else ("the histories", folder)
        with _refused(what, where):
            flush(fresh for _, _, fresh in made)
            # until the move, both names are of the old one
            former = {name: keep(folder, name) for name, _, _ in made}
            flush(above for one in former.values() if one is not None for above in (*one.path.parents[:2], folder))
            for _, path, fresh in made:
                fresh.replace(path)
            flush([folder])
    return [replace(one, former=former.get(one.path.name.removesuffix(SUFFIX))) for one in done]


def _writer(history: History) -> Callable[[Any], None]:
    """What writes a history into a file."""
    table = _to_arrow(history)
    return lambda file: pq.write_table(table, file, compression="zstd", version="2.6")


def _groups(histories: Iterable[tuple[str, History]]) -> Iterator[list[tuple[str, History]]]:
    """Histories that are stored together: not too many, and none of a name that is there."""
    group: dict[str, History] = {}
    for name, history in histories:
        if len(group) == GROUP or name in group:
            yield list(group.items())
            group = {}
        group[name] = history
    if group:
        yield list(group.items())


def _before(folder: Path, name: str) -> tuple[History | None, str | None]:
    """What is stored under a name now, or why it cannot be read; neither if there is nothing."""
    path = history_file(folder, name)
    if not path.exists():
        return None, None
    try:
        return read_history(folder, name), None
    except StoreError as error:
        return None, str(error)


def _from_bytes(content: bytes, path: Path, name: str) -> History:
    try:
        table = pq.read_table(pa.BufferReader(content))
    except (OSError, pa.ArrowException) as error:
        raise _unreadable(path, name, error) from error
    metadata = (table.schema.metadata or {}).get(METADATA_KEY)
    if metadata is None:
        raise StoreError(f"{path} is a Parquet file but not a history; load '{name}' again from its CSV files")
    try:
        return _from_arrow(table, json.loads(metadata), path)
    except (KeyError, TypeError, ValueError, AttributeError, RecursionError) as error:
        raise StoreError(
            f"history '{name}' ({path}) is damaged ({type(error).__name__}: {error}); load it again from its CSV files"
        ) from error


def _unreadable(path: Path, name: str, error: Exception) -> StoreError:
    reason = str(error).splitlines()[0] if str(error) else type(error).__name__
    return StoreError(f"history '{name}' ({path}) cannot be read: {reason}; load it again from its CSV files")


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
    return pa.table(columns).replace_schema_metadata({METADATA_KEY: text.encode()})


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
    pairs = {name: tuple((one, two) for one, two in entry.get(name, ())) for name in ("columns", "taken")}
    return SourceFile(**{**entry, **dates, **pairs, "reading": Reading.from_stored(entry.get("reading", {}))})


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
