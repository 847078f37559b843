"""What a history was before: each time it is stored anew, the file of before is kept in the store.

``STORE/NAME.parquet`` is the history as it is now; ``STORE/.versions/NAME/NUMBER-TIME-SHA256.parquet`` are the ones
that were, to the byte, oldest first by NUMBER; TIME is when it was last loaded, UTC. A version is known by the sha256
of its file, which results note in their manifest. All are kept until :func:`prune` is asked to let some go.
"""

from __future__ import annotations

import datetime as dt
import os
import re
import shutil
from dataclasses import dataclass
from pathlib import Path

from .disk import flush, sha256_of, written_beside
from .names import SUFFIX, check_name, history_file

#: Folder of the versions in a store; no history can be called so.
FOLDER = ".versions"
#: Digits of a version that are commonly enough to tell it from others.
SHORT = 12
_TIME = "%Y%m%dT%H%M%SZ"
_FILE = re.compile(rf"(\d{{6,}})-(\d{{8}}T\d{{6}}Z)-([0-9a-f]{{64}}){re.escape(SUFFIX)}")


@dataclass(frozen=True, slots=True, kw_only=True)
class Version:
    """One state of a stored history.

    Attributes
    ----------
    name : str
    sha256 : str
        Of its file, hexadecimal; equal histories give equal files.
    loaded : datetime
        When it was last loaded, UTC, whole seconds.
    path : Path
    size : int
        Bytes.
    current : bool
        Whether it is the history as it is now.
    """

    name: str
    sha256: str
    loaded: dt.datetime
    path: Path
    size: int
    current: bool

    @property
    def short(self) -> str:
        """The first digits of its sha256."""
        return self.sha256[:SHORT]


def current_version(store: Path, name: str) -> Version | None:
    """The history as it is now; None if there is none.

    Raises
    ------
    StoreError
        For a name that cannot be used.
    OSError
    """
    path = history_file(store, name)
    try:
        told = path.stat()
        return Version(
            name=name, sha256=sha256_of(path), path=path, size=told.st_size, current=True,
            loaded=dt.datetime.fromtimestamp(int(told.st_mtime), dt.UTC),
        )  # fmt: skip
    except FileNotFoundError:
        return None


def former_versions(store: Path, name: str) -> tuple[Version, ...]:
    """The versions kept of a history, oldest first, as their files are called: that they are whole is not looked at.

    Raises
    ------
    StoreError
        For a name that cannot be used.
    """
    return tuple(version for _, version in _kept(store, name))


def all_versions(store: Path, name: str) -> tuple[Version, ...]:
    """The versions kept, oldest first, then the current one; each content once.

    Raises
    ------
    StoreError
        For a name that cannot be used.
    OSError
    """
    now = current_version(store, name)
    former = former_versions(store, name)
    if now is None:
        return former
    return (*(version for version in former if version.sha256 != now.sha256), now)


def find_version(store: Path, name: str, sha256: str) -> Version | None:
    """The version whose file has this sum, by its content and not by what it is called; None if it is not kept.

    Raises
    ------
    StoreError
        For a name that cannot be used.
    OSError
    """
    now = current_version(store, name)
    if now is not None and now.sha256 == sha256:
        return now
    named = (version for version in reversed(former_versions(store, name)) if version.sha256 == sha256)
    return next((version for version in named if _is_whole(version)), None)


def keep(store: Path, name: str) -> Version | None:
    """Keep the history as it is now among the versions, and in its place; None if there is none. For the only writer.

    That the disk holds it is for the caller to see to: the folder of the version, and the two above it.

    Raises
    ------
    StoreError
        For a name that cannot be used.
    OSError
    """
    now = current_version(store, name)
    if now is None:
        return None
    kept = _kept(store, name)
    there = [version for _, version in kept if version.sha256 == now.sha256 and _is_whole(version)]
    if there:
        return there[-1]
    number = kept[-1][0] + 1 if kept else 1
    folder = _folder(store, name)
    folder.mkdir(parents=True, exist_ok=True)
    path = folder / f"{number:06d}-{now.loaded.strftime(_TIME)}-{now.sha256}{SUFFIX}"
    try:
        os.link(now.path, path)
    except OSError:  # a file system without links
        with now.path.open("rb") as source, written_beside(
            folder, name, lambda file: shutil.copyfileobj(source, file)
        ) as fresh:  # fmt: skip
            flush([fresh])
            fresh.replace(path)
    return Version(name=name, sha256=now.sha256, loaded=now.loaded, path=path, size=now.size, current=False)


def prune(store: Path, name: str, most: int) -> tuple[Version, ...]:
    """Let go of all former versions but the newest ``most``; those that went. For the only writer.

    Raises
    ------
    StoreError
        For a name that cannot be used.
    OSError
    """
    kept = former_versions(store, name)
    gone = kept[: max(len(kept) - most, 0)]
    for version in gone:
        version.path.unlink(missing_ok=True)
    return gone


def _folder(store: Path, name: str) -> Path:
    return Path(store) / FOLDER / check_name(name)


def _kept(store: Path, name: str) -> list[tuple[int, Version]]:
    """Number and version of each file that is called as a version is, oldest first."""
    folder = _folder(store, name)
    found = []
    for path in folder.iterdir() if folder.is_dir() else ():
        told = _FILE.fullmatch(path.name)
        if told is None:
            continue
        try:
            loaded = dt.datetime.strptime(told[2], _TIME).replace(tzinfo=dt.UTC)
            size = path.stat().st_size if path.is_file() else None
        except (ValueError, OSError):  # no such time, or it went meanwhile
            continue
        if size is not None:
            version = Version(name=name, sha256=told[3], loaded=loaded, path=path, size=size, current=False)
            found.append((int(told[1]), version))
    return sorted(found, key=lambda one: (one[0], one[1].path.name))


def _is_whole(version: Version) -> bool:
    try:
        return sha256_of(version.path) == version.sha256
    except OSError:
        return False
