"""Names of histories, and where in a store each has its file: a name never leads out of the store."""

from __future__ import annotations

import re
from pathlib import Path

from .errors import StoreError, quoted

SUFFIX = ".parquet"
LONGEST_NAME = 64
_NAME = re.compile(r"[A-Za-z0-9_-](?:[A-Za-z0-9_.-]*[A-Za-z0-9_-])?")


def is_name(name: str) -> bool:
    """Whether a history may be called so; see :func:`check_name`."""
    return len(name) <= LONGEST_NAME and _NAME.fullmatch(name) is not None


def check_name(name: str) -> str:
    """Return `name` if a history may be called so.

    Letters a to z, digits, ``_`` and ``-``, with points inside, at most 64 characters: a name never leads out of
    the store, and never begins with a point, as the store's own folder does.

    Raises
    ------
    StoreError
        For any other name.

    Examples
    --------
    >>> check_name("spx-1990.v2")
    'spx-1990.v2'
    """
    if is_name(name):
        return name
    raise StoreError(
        f"{quoted(name)} ({len(name)} characters) cannot be the name of a history: use letters a-z, digits, "
        f"'_' and '-', with '.' inside only, at most {LONGEST_NAME} characters, for example 'spx-1990'"
    )


def history_file(folder: Path, name: str) -> Path:
    """The Parquet file of the history that now goes by a name.

    Raises
    ------
    StoreError
        For a name that cannot be used.
    """
    return Path(folder) / f"{check_name(name)}{SUFFIX}"


def history_names(folder: Path) -> tuple[str, ...]:
    """Names of the histories in a store, sorted; none if the folder does not exist."""
    folder = Path(folder)
    if not folder.is_dir():
        return ()
    names = (path.name.removesuffix(SUFFIX) for path in folder.glob(f"*{SUFFIX}") if path.is_file())
    return tuple(sorted(name for name in names if is_name(name)))
