"""One writer of a folder at a time, over threads and processes; the lock ends with the process that holds it.

The folder itself is locked (``flock``), so there is no lock file that a killed process could leave behind. Readers need
no lock: what they read is moved into its place in one step.
"""

from __future__ import annotations

import errno
import os
import time
from collections.abc import Iterator
from contextlib import contextmanager, suppress
from pathlib import Path

from .errors import StoreError

try:
    import fcntl
except ImportError:  # not on every system; two loads at once are then on the user
    fcntl = None  # type: ignore[assignment]

#: Seconds to wait for another writer, who commonly takes a few hundredths of one.
PATIENCE = 10.0
#: Seconds between two looks.
_LOOK_AGAIN = 0.02
#: Locked instead where a folder cannot be, as on some network file systems; never removed, and empty.
LOCK_FILE = ".lock"


@contextmanager
def only_writer(folder: Path, *, patience: float = PATIENCE) -> Iterator[bool]:
    """Be the only writer of an existing folder; whether the lock is held: there are file systems without locks.

    A thread must not ask for it again while it holds it: it would wait for itself.

    Raises
    ------
    StoreError
        If another writer is still at work after ``patience`` seconds.
    OSError
        If the folder cannot be opened.
    """
    if fcntl is None:
        yield False
        return
    handle, held = _locked(Path(folder), patience)
    try:
        yield held
    finally:
        # closing alone would leave the lock to a process that was forked meanwhile and has the handle too
        with suppress(OSError):
            fcntl.flock(handle, fcntl.LOCK_UN)
        os.close(handle)


def _locked(folder: Path, patience: float) -> tuple[int, bool]:
    """An open handle, and whether it is locked."""
    handle = os.open(folder, os.O_RDONLY)
    try:
        _wait_for(handle, folder, patience)
    except OSError as error:
        if error.errno != errno.EBADF:
            return handle, False
        os.close(handle)
    except BaseException:
        os.close(handle)
        raise
    else:
        return handle, True
    # only a file that is open for writing can be locked there
    handle = os.open(folder / LOCK_FILE, os.O_RDWR | os.O_CREAT | os.O_NOFOLLOW, 0o666)
    try:
        _wait_for(handle, folder, patience)
    except OSError:
        return handle, False
    except BaseException:
        os.close(handle)
        raise
    return handle, True


def _wait_for(handle: int, folder: Path, patience: float) -> None:
    given_up = time.monotonic() + patience
    while True:
        try:
            fcntl.flock(handle, fcntl.LOCK_EX | fcntl.LOCK_NB)
        except BlockingIOError:
            if time.monotonic() >= given_up:
                raise StoreError(
                    f"another load is writing to {folder}, and has not come to its end in {patience:g} seconds: wait "
                    "for it, or end it if it hangs, and load again; nothing was written"
                ) from None
            time.sleep(_LOOK_AGAIN)
        else:
            return
