"""The lock of a store: one writer over threads and processes, patience, and nothing left by a killed holder.

Rung: identity (a count that is read, waited on and written loses nothing) and behaviour (processes that are killed).
"""

from __future__ import annotations

import errno
import fcntl
import os
import signal
import stat
import subprocess
import sys
import threading
import time
from pathlib import Path
from typing import IO

import pytest

from data_loaders import StoreError, read_history, write_history
from data_loaders.locks import LOCK_FILE, only_writer
from data_loaders.store import read_version, store_history
from data_loaders.versions import all_versions
from tests.data_loaders.small_histories import walk

ROOT = Path(__file__).parents[2]

#: Adds to a number in a file, slowly: two at once would lose some.
COUNT = """\
import sys, time
from pathlib import Path
from data_loaders.locks import only_writer
folder, times = Path(sys.argv[1]), int(sys.argv[2])
for _ in range(times):
    with only_writer(folder, patience=60) as held:
        assert held
        number = int((folder / "count").read_text())
        time.sleep(0.001)
        (folder / "count").write_text(str(number + 1))
"""
#: Holds the lock of a folder until it is killed.
HOLD = """\
import sys, time
from pathlib import Path
from data_loaders.locks import only_writer
with only_writer(Path(sys.argv[1])):
    print("held", flush=True)
    time.sleep(600)
"""
#: The same, with a child that was forked while it was held, and lets go when it is told to.
FORK = """\
import os, sys, time
from pathlib import Path
from data_loaders.locks import only_writer
with only_writer(Path(sys.argv[1])):
    if os.fork() == 0:
        time.sleep(600)
    print("held", flush=True)
    sys.stdin.readline()
print("let go", flush=True)
time.sleep(600)
"""


def started(script: str, *arguments: object) -> subprocess.Popen[str]:
    command = [sys.executable, "-c", script, *map(str, arguments)]
    return subprocess.Popen(
        command, cwd=ROOT, stdin=subprocess.PIPE, stdout=subprocess.PIPE, text=True, start_new_session=True
    )


def line(stream: IO[str] | None) -> str:
    assert stream is not None
    return stream.readline()


def killed(process: subprocess.Popen[str]) -> None:
    """End a process and those it has forked, which are a group of their own."""
    os.killpg(process.pid, signal.SIGKILL)
    process.communicate()


def test_threads_and_processes_take_turns(tmp_path: Path) -> None:
    (tmp_path / "count").write_text("0")
    processes = [started(COUNT, tmp_path, 40) for _ in range(2)]

    def count() -> None:
        for _ in range(40):
            with only_writer(tmp_path, patience=60) as held:
                assert held
                number = int((tmp_path / "count").read_text())
                time.sleep(0.001)
                (tmp_path / "count").write_text(str(number + 1))

    threads = [threading.Thread(target=count) for _ in range(3)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    for process in processes:
        process.communicate()
        assert process.returncode == 0
    assert (tmp_path / "count").read_text() == str(5 * 40)
    # nothing is left behind
    assert [path.name for path in tmp_path.iterdir()] == ["count"]


def test_patience_and_its_end(tmp_path: Path) -> None:
    write_history(walk(1), tmp_path, "spx")
    before = {path: path.read_bytes() for path in tmp_path.rglob("*") if path.is_file()}
    with only_writer(tmp_path):
        began = time.monotonic()
        with pytest.raises(StoreError) as refused:
            store_history(walk(2), tmp_path, "spx", patience=0.2)
        assert 0.2 <= time.monotonic() - began < 5.0
        # who only reads need not wait
        assert read_history(tmp_path, "spx") == walk(1)
    assert str(refused.value) == (
        f"another load is writing to {tmp_path}, and has not come to its end in 0.2 seconds: wait for it, or end it if "
        "it hangs, and load again; nothing was written"
    )
    assert {path: path.read_bytes() for path in tmp_path.rglob("*") if path.is_file()} == before
    # another store is another lock
    with only_writer(tmp_path):
        store_history(walk(2), tmp_path / "other", "spx", patience=0.0)
    store_history(walk(2), tmp_path, "spx", patience=0.0)


def test_who_waits_gets_it(tmp_path: Path) -> None:
    held, got = threading.Event(), []

    def wait() -> None:
        held.wait()
        got.append(store_history(walk(1), tmp_path, "spx", patience=30.0))

    waiting = threading.Thread(target=wait)
    waiting.start()
    with only_writer(tmp_path):
        held.set()
        time.sleep(0.1)
        assert got == []
    waiting.join()
    assert got[0].written


def test_a_killed_holder_leaves_no_lock(tmp_path: Path) -> None:
    holder = started(HOLD, tmp_path)
    try:
        assert line(holder.stdout) == "held\n"
        with pytest.raises(StoreError, match="another load is writing"):
            store_history(walk(1), tmp_path, "spx", patience=0.0)
    finally:
        killed(holder)
    assert store_history(walk(1), tmp_path, "spx", patience=0.0).written


def test_a_process_forked_meanwhile_does_not_keep_it(tmp_path: Path) -> None:
    holder = started(FORK, tmp_path)
    try:
        assert line(holder.stdout) == "held\n"
        with pytest.raises(StoreError, match="another load is writing"), only_writer(tmp_path, patience=0.0):
            pass
        assert holder.stdin is not None
        holder.stdin.write("\n")
        holder.stdin.flush()
        assert line(holder.stdout) == "let go\n"
        with only_writer(tmp_path, patience=0.0) as held:
            assert held
    finally:
        killed(holder)


def test_an_error_lets_go(tmp_path: Path) -> None:
    with pytest.raises(KeyboardInterrupt), only_writer(tmp_path):
        raise KeyboardInterrupt
    with only_writer(tmp_path, patience=0.0) as held:
        assert held
    with pytest.raises(FileNotFoundError), only_writer(tmp_path / "no"):
        pass


# ---------------------------------------------------------------- other systems


def test_where_a_folder_cannot_be_locked_a_file_is(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    real = fcntl.flock

    def only_files(handle: int, what: int) -> None:
        if stat.S_ISDIR(os.fstat(handle).st_mode):
            raise OSError(errno.EBADF, "Bad file descriptor")
        real(handle, what)

    monkeypatch.setattr(fcntl, "flock", only_files)
    with only_writer(tmp_path, patience=0.0) as held:
        assert held
        with pytest.raises(StoreError, match="another load is writing"), only_writer(tmp_path, patience=0.0):
            pass
    assert [path.name for path in tmp_path.iterdir()] == [LOCK_FILE]
    with only_writer(tmp_path, patience=0.0) as held:
        assert held


def test_where_there_are_no_locks_it_is_said(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    (tmp_path / ".spx.0123456789abcdef.tmp").write_bytes(b"perhaps of one at work")

    def none(handle: int, what: int) -> None:
        raise OSError(errno.ENOLCK, "No locks available")

    monkeypatch.setattr(fcntl, "flock", none)
    with only_writer(tmp_path) as held:
        assert not held
    write_history(walk(1), tmp_path, "spx")
    # whose file it is cannot be known
    assert (tmp_path / ".spx.0123456789abcdef.tmp").exists()
    monkeypatch.setattr("data_loaders.locks.fcntl", None)
    with only_writer(tmp_path) as held:
        assert not held


# ---------------------------------------------------------------- loads at once

LOAD = """\
import sys
from pathlib import Path
from data_loaders.store import store_history
from tests.data_loaders.small_histories import walk
for seed in range(int(sys.argv[2]), int(sys.argv[3])):
    store_history(walk(seed), Path(sys.argv[1]), "spx", patience=60)
"""


def test_of_loads_at_once_none_is_lost(tmp_path: Path) -> None:
    spans = ((0, 15), (15, 30), (30, 45))
    processes = [started(LOAD, tmp_path, *span) for span in spans]

    def load(first: int) -> None:
        for seed in range(first, first + 15):
            store_history(walk(seed), tmp_path, "spx", patience=60)

    threads = [threading.Thread(target=load, args=(first,)) for first in (45, 60)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    for process in processes:
        process.communicate()
        assert process.returncode == 0
    versions = all_versions(tmp_path, "spx")
    assert len(versions) == 75
    left = [walk(seed) for seed in range(75)]
    for version in versions:
        left.remove(read_version(version))
    assert left == []
    assert sorted(path.name for path in tmp_path.iterdir()) == [".versions", "spx.parquet"]
