"""Files written whole or not at all, and their sums."""

from __future__ import annotations

import contextlib
import hashlib
import os
import re
import secrets
from collections.abc import Callable, Iterable, Iterator
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path
from typing import BinaryIO

#: What is being written, or was when its writer was killed: a leading point keeps it from counting as a history.
_UNFINISHED = re.compile(r"\.[A-Za-z0-9_.-]+\.[0-9a-f]{16}\.tmp")


#: Files flushed at a time: a disk takes many at once nearly as soon as one.
_AT_A_TIME = 16


@contextlib.contextmanager
def written_beside(folder: Path, name: str, write: Callable[[BinaryIO], object]) -> Iterator[Path]:
    """A new file in a folder, to be flushed and then moved to its place; removed if it is not moved.

    Raises
    ------
    OSError
    """
    fresh = folder / f".{name}.{secrets.token_hex(8)}.tmp"
    try:
        with fresh.open("xb") as file:
            write(file)
        yield fresh
    finally:
        with contextlib.suppress(OSError):
            fresh.unlink(missing_ok=True)


def flush(paths: Iterable[Path]) -> None:
    """Have the disk hold what files hold, and which files folders hold, before going on.

    Raises
    ------
    OSError
    """
    wanted = list(dict.fromkeys(paths))
    if len(wanted) <= 1:
        for path in wanted:
            _flush(path)
        return
    with ThreadPoolExecutor(_AT_A_TIME) as pool:
        for _ in pool.map(_flush, wanted):
            pass


def _flush(path: Path) -> None:
    if os.name == "nt" and path.is_dir():
        return  # a folder cannot be opened there
    handle = os.open(path, os.O_RDONLY if os.name != "nt" else os.O_RDWR)
    try:
        os.fsync(handle)
    finally:
        os.close(handle)


def remove_unfinished(folder: Path) -> None:
    """Remove what killed writers have left in a folder; for its only writer."""
    with contextlib.suppress(OSError):
        for path in folder.glob(".*.tmp"):
            if _UNFINISHED.fullmatch(path.name):
                path.unlink(missing_ok=True)


def sha256_of(path: Path) -> str:
    """Hexadecimal sha256 of a file, read in pieces.

    Raises
    ------
    OSError
    """
    with path.open("rb") as file:
        return hashlib.file_digest(file, "sha256").hexdigest()
