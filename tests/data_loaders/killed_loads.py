"""Processes that store histories until they are killed; run as a script it is the process that forks them.

They are forked from one that has everything imported, so that a test may kill many of them in little time. A forked
process stores in earnest: real files, real SIGKILL.
"""

from __future__ import annotations

import io
import json
import os
import signal
import subprocess
import sys
import traceback
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import replace
from pathlib import Path
from typing import Any

ROOT = Path(__file__).parents[2]
#: Pieces in which a file is written where each step is counted.
PIECES = 4
#: Said by a job when it begins in earnest.
BEGUN = b"begun\n"


class Loader:
    """The process that forks; made by :func:`loader`."""

    def __init__(self, process: subprocess.Popen[str]) -> None:
        self._process = process

    def start(self, job: str, store: Path, *, number: int = 0) -> int:
        """Start a job of :data:`JOBS`; its process id, once it has begun."""
        self._send({"job": job, "store": str(store), "number": number})
        return int(self._line())

    def end(self) -> tuple[int, list[int]]:
        """How the job ended (minus the signal), and the numbers that it has said are done."""
        self._send({"job": "end"})
        told = json.loads(self._line())
        return told["status"], told["done"]

    def _send(self, order: dict[str, Any]) -> None:
        assert self._process.stdin is not None
        self._process.stdin.write(json.dumps(order) + "\n")
        self._process.stdin.flush()

    def _line(self) -> str:
        assert self._process.stdout is not None
        return self._process.stdout.readline()


@contextmanager
def loader() -> Iterator[Loader]:
    """A process that forks jobs; ended with the block, and its jobs with it."""
    process = subprocess.Popen(
        [sys.executable, __file__], cwd=ROOT, env={**os.environ, "PYTHONPATH": str(ROOT), "OPENBLAS_NUM_THREADS": "1"},
        stdin=subprocess.PIPE, stdout=subprocess.PIPE, text=True, start_new_session=True,
    )  # fmt: skip
    try:
        yield Loader(process)
    finally:
        os.killpg(process.pid, signal.SIGKILL)
        process.communicate()


# ---------------------------------------------------------------- in the forked process


def store_many(store: Path, number: int, done: int) -> None:
    """Store one history after another, and say of each that it is done."""
    from data_loaders.store import store_history
    from tests.data_loaders.small_histories import walk

    _begin(store, done)
    while True:
        store_history(walk(number), store, "spx")
        os.write(done, f"{number}\n".encode())
        number += 1


def append_many(store: Path, number: int, done: int) -> None:
    """Append one day after another of a history, and say of each that it is done."""
    from data_loaders.store import append_history
    from tests.data_loaders.small_histories import walk

    whole = walk(0, days=5_000)
    _begin(store, done)
    while True:
        append_history(replace(whole, frame=whole.frame.iloc[number - 3 : number + 1]), store, "spx")
        os.write(done, f"{number}\n".encode())
        number += 1


def killed_at(store: Path, number: int, done: int) -> None:
    """Store history 2 and be killed before step ``number`` of all that it asks of the system."""
    import pyarrow.parquet as pq

    import data_loaders.locks
    from data_loaders.store import store_history
    from tests.data_loaders.small_histories import walk

    steps = 0

    def step() -> None:
        nonlocal steps
        if steps == number:
            os.kill(os.getpid(), signal.SIGKILL)
        steps += 1

    def counted(call: Any) -> Any:
        def with_step(*args: Any, **options: Any) -> Any:
            step()
            return call(*args, **options)

        return with_step

    whole = pq.write_table

    def in_pieces(table: Any, file: Any, **options: Any) -> None:
        buffer = io.BytesIO()
        whole(table, buffer, **options)
        content = buffer.getvalue()
        for piece in range(PIECES):
            step()
            file.write(content[piece * len(content) // PIECES : (piece + 1) * len(content) // PIECES])
            file.flush()

    pq.write_table = in_pieces
    os.write(done, BEGUN)
    data_loaders.locks.fcntl.flock = counted(data_loaders.locks.fcntl.flock)
    for name in ("open", "close", "link", "replace", "fsync", "unlink", "mkdir"):
        setattr(os, name, counted(getattr(os, name)))
    store_history(walk(2), store, "spx")
    os.write(done, f"{steps}\n".encode())


def _begin(store: Path, done: int) -> None:
    """Have everything ready that the first load of a process takes its time for, and say so."""
    from data_loaders.store import store_history
    from tests.data_loaders.small_histories import walk

    for number in (1, 2):
        store_history(walk(number), store.with_name(f"{store.name} of before"), "spx")
    os.write(done, BEGUN)


JOBS = {"store": store_many, "append": append_many, "killed at": killed_at}


def _forked(order: dict[str, Any]) -> tuple[int, int]:
    """Process id of a job, and where it says what is done."""
    reading, writing = os.pipe()
    child = os.fork()
    if child == 0:
        os.close(reading)
        status = 1
        try:
            JOBS[order["job"]](Path(order["store"]), order["number"], writing)
            status = 0
        finally:
            if status:
                traceback.print_exc()
            os._exit(status)
    os.close(writing)
    os.read(reading, len(BEGUN))
    return child, reading


def _serve() -> None:
    import data_loaders.store  # noqa: F401  imported once for all
    import tests.data_loaders.small_histories  # noqa: F401

    child, reading = 0, 0
    for line in sys.stdin:
        order = json.loads(line)
        if order["job"] == "end":
            _, status = os.waitpid(child, 0)
            with os.fdopen(reading) as stream:
                done = [int(number) for number in stream.read().split()]
            print(json.dumps({"status": os.waitstatus_to_exitcode(status), "done": done}), flush=True)
        else:
            child, reading = _forked(order)
            print(child, flush=True)


if __name__ == "__main__":
    _serve()
