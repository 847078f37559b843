"""Loads that are really killed (SIGKILL), at every step and at random moments: the old one or the new one, never half.

Rung: identity. Whatever the moment, the store reads as a history that was loaded, with the hash of that one's file; the
one before is not lost; nothing stands in the way of the next load.
"""

from __future__ import annotations

import os
import random
import shutil
import signal
import subprocess
import sys
import threading
import time
from collections.abc import Iterator
from dataclasses import replace
from pathlib import Path

import pandas as pd
import pytest

from data_loaders import History, read_history, write_history
from data_loaders.disk import sha256_of
from data_loaders.store import read_stored, read_version, store_history
from data_loaders.versions import all_versions, find_version
from tests.data_loaders.killed_loads import PIECES, ROOT, Loader, loader
from tests.data_loaders.small_histories import walk

#: Kills of a process that stores one history after another, and of one that appends.
KILLS = 40
KILLS_APPENDING = 20
#: Seconds until a kill, at most; a load takes 0.01 to 0.05.
LONGEST_LOOK = 0.12
#: Of the command itself, which takes its time to start.
KILLS_OF_THE_COMMAND = 8


@pytest.fixture(scope="module")
def loads() -> Iterator[Loader]:
    with loader() as started:
        yield started


def leftovers(store: Path) -> list[str]:
    return sorted(path.name for path in store.rglob("*.tmp"))


def check_whole(store: Path, *, histories: dict[str, History]) -> list[History]:
    """Every version of ``spx`` is one of these, by hash and by content; all of them."""
    found = []
    for version in all_versions(store, "spx"):
        assert sha256_of(version.path) == version.sha256
        assert read_version(version) == histories[version.sha256]
        found.append(histories[version.sha256])
    return found


def test_killed_at_every_step(loads: Loader, tmp_path: Path) -> None:
    old, new = walk(1), walk(2)
    made = tmp_path / "made"
    old_sum = sha256_of(write_history(old, made, "spx"))
    new_sum = sha256_of(write_history(new, tmp_path / "other", "spx"))
    histories = {old_sum: old, new_sum: new}
    seen = []
    for number in range(200):
        store = tmp_path / f"at {number}"
        shutil.copytree(made, store)
        loads.start("killed at", store, number=number)
        status, done = loads.end()
        history, sha256 = read_stored(store, "spx")
        assert history == histories[sha256]
        assert old in check_whole(store, histories=histories)
        seen.append((sha256 == new_sum, bool(leftovers(store))))
        if status == 0:
            assert done == [number]
            break
        assert status == -signal.SIGKILL
        # the next load finds neither a lock nor what was left
        store_history(new, store, "spx", patience=0.0)
        assert leftovers(store) == []
        assert check_whole(store, histories=histories) == [old, new]
    else:
        raise AssertionError("the load has no end")
    replaced, left = [one for one, _ in seen], [other for _, other in seen]
    # old up to a step and new from it on; a half-written file for a while, and none at the end
    assert replaced == sorted(replaced)
    assert (replaced[0], replaced[-1]) == (False, True)
    assert sum(left) >= PIECES
    assert (left[0], left[-1]) == (False, False)


def test_killed_at_random_moments(loads: Loader, tmp_path: Path) -> None:
    moments = random.Random(7)
    store = tmp_path / "store"
    numbers: dict[str, int] = {}
    loaded: list[int] = []
    first = 0
    for _ in range(KILLS):
        pid = loads.start("store", store, number=first)
        time.sleep(moments.uniform(0.0, LONGEST_LOOK))
        os.kill(pid, signal.SIGKILL)
        status, done = loads.end()
        assert status == -signal.SIGKILL
        assert done == list(range(first, first + len(done)))
        loaded += done
        under_way = first + len(done)
        for number in range(first, under_way + 1):
            numbers[sha256_of(write_history(walk(number), tmp_path / "sums", "spx"))] = number
        found = [numbers[version.sha256] for version in all_versions(store, "spx")]
        # the one in whose middle, or just after which, it was killed: there or not
        if found != loaded:
            loaded.append(under_way)
        assert found == loaded
        if loaded:
            history, sha256 = read_stored(store, "spx")
            assert numbers[sha256] == loaded[-1]
            assert history == walk(loaded[-1])
        first = under_way + 1
    # of the loads some were finished, and some were not
    assert loaded
    assert sorted(numbers.values()) == list(range(first))
    assert len(loaded) < first
    check_whole(store, histories={sha256: walk(number) for sha256, number in numbers.items()})
    store_history(walk(first), store, "spx", patience=0.0)
    assert leftovers(store) == []


def test_killed_while_appending(loads: Loader, tmp_path: Path) -> None:
    moments = random.Random(11)
    whole = walk(0, days=5_000)
    write_history(replace(whole, frame=whole.frame.iloc[:100]), tmp_path, "spx")
    days = 100
    for _ in range(KILLS_APPENDING):
        pid = loads.start("append", tmp_path, number=days)
        time.sleep(moments.uniform(0.0, LONGEST_LOOK))
        os.kill(pid, signal.SIGKILL)
        _, done = loads.end()
        assert done == list(range(days, days + len(done)))
        frame = read_history(tmp_path, "spx").frame
        # what was said is there; of the day in whose middle it was killed, all or nothing
        assert len(frame) in (days + len(done), days + len(done) + 1)
        pd.testing.assert_frame_equal(frame, whole.frame.iloc[: len(frame)], check_exact=True)
        days = len(frame)
    assert days > 100
    # each state that there was is kept, and is the beginning of the whole
    versions = all_versions(tmp_path, "spx")
    assert [len(read_version(version).frame) for version in versions] == list(range(100, days + 1))
    assert [find_version(tmp_path, "spx", version.sha256) for version in versions] == list(versions)


def test_who_reads_meanwhile_reads_a_whole_one(loads: Loader, tmp_path: Path) -> None:
    write_history(walk(0), tmp_path, "spx")
    pid = loads.start("store", tmp_path, number=1)
    read: list[tuple[History, str]] = []
    ended: list[bool] = []
    until = time.monotonic() + 1.0

    def look() -> None:
        while time.monotonic() < until:
            read.append(read_stored(tmp_path, "spx"))
        ended.append(True)

    threads = [threading.Thread(target=look) for _ in range(2)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    os.kill(pid, signal.SIGKILL)
    _, done = loads.end()
    assert ended == [True, True]
    by_sum = {sha256: history for history, sha256 in read}
    assert len(by_sum) > 3
    assert len(done) > 3
    for sha256, history in by_sum.items():
        version = find_version(tmp_path, "spx", sha256)
        assert version is not None
        assert read_version(version) == history


COMMAND = """\
import sys
import pyarrow.parquet, pandas, data_loaders.store
from studies.cli import main
print("ready", flush=True)
main()
"""


def command(*arguments: object, cwd: Path) -> subprocess.Popen[str]:
    return subprocess.Popen(
        [sys.executable, "-c", COMMAND, *map(str, arguments)], cwd=cwd, env={**os.environ, "PYTHONPATH": str(ROOT)},
        stdout=subprocess.PIPE, stderr=subprocess.STDOUT, text=True,
    )  # fmt: skip


def test_the_command_killed_at_random_moments(tmp_path: Path) -> None:
    moments = random.Random(3)
    store = tmp_path / "histories"
    for name, change in (("old", 0.0), ("new", 1.0)):
        walked = walk(4, days=3_000).frame["close"] + change
        lines = [f"{day.date()},{value!r}" for day, value in walked.items()]  # type: ignore[attr-defined]
        (tmp_path / f"{name}.csv").write_text("\n".join(["date,close", *lines]))
    sums = {}
    took = 0.0
    for name in ("new", "old"):
        process = command("load", "spx", "--prices", f"{name}.csv", cwd=tmp_path)
        assert process.stdout is not None
        process.stdout.readline()
        began = time.monotonic()
        said = process.communicate()[0]
        took = max(took, time.monotonic() - began)
        assert process.returncode == 0, said
        sums[sha256_of(store / "spx.parquet")] = name
    old, stopped = read_history(store, "spx"), 0
    for _ in range(KILLS_OF_THE_COMMAND):
        process = command("load", "spx", "--prices", "new.csv", cwd=tmp_path)
        assert process.stdout is not None
        process.stdout.readline()
        time.sleep(moments.uniform(0.0, 1.1 * took))
        process.kill()
        process.communicate()
        stopped += process.returncode == -signal.SIGKILL
        history, sha256 = read_stored(store, "spx")
        assert sha256 in sums
        assert history.sources[0].file == f"{sums[sha256]}.csv"
        write_history(old, store, "spx")
        assert sums[read_stored(store, "spx")[1]] == "old"
        assert leftovers(store) == []
    assert stopped
    assert {version.sha256 for version in all_versions(store, "spx")} == set(sums)
