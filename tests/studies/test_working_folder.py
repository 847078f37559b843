"""The folder of an unfinished study: batches are kept whole or not at all, and never mixed with those of another plan.

Rung: behaviour.
"""

from __future__ import annotations

import errno
import json
import os
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from backtest.analytics.reality_check import Draws, Partial, check_batch
from studies.errors import ResultsError, StudyError
from studies.working_folder import WorkingFolder, discard, working_folder

PLAN: dict[str, Any] = {
    "program": "rollband 1.0, numpy 2.0",
    "study": {"question": "Which?", "seed": 1, "resamples": 0, "histories": ["one", "two"]},
    "inputs": [{"history": "one", "sha256": "aa"}, {"history": "two", "sha256": "bb"}],
    "batch": 1000,
    "groups": [{"history": "one", "first": "2008-01-18"}],
}

COLUMNS = {
    "inception": np.array(["2008-01-18", "1899-12-31"], dtype="datetime64[D]"),
    "sharpe": np.array([0.1 + 0.2, np.nan]),
    "growth_1": np.array([-0.0, 5e-324]),
}


def part(**more: Any) -> Partial:
    rng = np.random.default_rng(2)
    found = check_batch(Draws(60, 3.5, 17, 9), rng.normal(size=(60, 4)), [7, 3, 12, 5])
    return Partial(**{name: getattr(found, name) for name in Partial.__slots__} | more)


@pytest.fixture
def folder(tmp_path: Path) -> WorkingFolder:
    return WorkingFolder(tmp_path)


def read(folder: WorkingFolder, number: int) -> tuple[dict[str, Any], Partial | None]:
    found = folder.read(number)
    assert found is not None
    return found


@pytest.mark.parametrize(
    "kept", [None, part(), part(best=None, best_studentised=None, best_mean=-np.inf), part(best=0)],
    ids=["none", "part", "nobody", "first"],
)  # fmt: skip
def test_a_batch_comes_back_bit_for_bit(folder: WorkingFolder, kept: Partial | None) -> None:
    folder.keep(3, COLUMNS, kept)
    columns, found = read(folder, 3)
    assert list(columns) == list(COLUMNS)
    for name, values in COLUMNS.items():
        assert columns[name].dtype == values.dtype
        assert columns[name].tobytes() == values.tobytes()
    if kept is None:
        assert found is None
        return
    for name in Partial.__slots__:
        one, other = getattr(found, name), getattr(kept, name)
        assert type(one) is type(other) or isinstance(other, np.generic), name
        np.testing.assert_array_equal(one, other, err_msg=name)
    assert (folder.kept(), folder.read(2)) == (1, None)


def cut(content: bytes) -> bytes:
    return content[: len(content) // 2]


def turned(place: float) -> Callable[[bytes], bytes]:
    """One bit turned at a place between the first byte and the last."""

    def turn(content: bytes) -> bytes:
        at = int(place * (len(content) - 1))
        return content[:at] + bytes([content[at] ^ 4]) + content[at + 1 :]

    return turn


@pytest.mark.parametrize(
    "spoil",
    [cut, lambda content: b"", lambda content: b"a text" * 9, lambda content: content[:-1], turned(0.0), turned(1.0)],
    ids=["half", "empty", "other", "last-byte", "first-bit", "last-bit"],
)
def test_a_batch_that_cannot_be_read_counts_as_not_there(
    folder: WorkingFolder, spoil: Callable[[bytes], bytes]
) -> None:
    folder.keep(0, COLUMNS, part())
    folder.file(0).write_bytes(spoil(folder.file(0).read_bytes()))
    assert folder.read(0) is None


def test_a_turned_bit_is_noticed_wherever_it_is(folder: WorkingFolder) -> None:
    columns: dict[str, Any] = {"sharpe": np.random.default_rng(1).normal(size=500)}
    folder.keep(0, columns, part())
    content = folder.file(0).read_bytes()
    for place in np.linspace(0, 1, 300):
        folder.file(0).write_bytes(turned(place)(content))
        assert folder.read(0) is None
    folder.file(0).write_bytes(content)
    assert read(folder, 0)[0]["sharpe"].tobytes() == columns["sharpe"].tobytes()


def test_a_batch_under_the_number_of_another_counts_as_not_there(folder: WorkingFolder) -> None:
    folder.keep(0, COLUMNS, None)
    folder.file(0).rename(folder.file(1))
    assert folder.read(1) is None


@pytest.mark.parametrize("number", [errno.ENOSPC, errno.EDQUOT, errno.EIO])
def test_a_full_disk_keeps_what_was_kept(folder: WorkingFolder, monkeypatch: pytest.MonkeyPatch, number: int) -> None:
    folder.keep(0, COLUMNS, part())

    def full(path: Path, content: bytes) -> None:
        path.write_text("a part of it")
        raise OSError(number, "No room")

    monkeypatch.setattr(Path, "write_bytes", full)
    with pytest.raises(StudyError, match=r"^batch 2 cannot be kept in .*: No room; what was done before is kept: make"):
        folder.keep(1, COLUMNS, part())
    assert [path.name for path in folder.path.iterdir()] == ["batch-000000.kept"]
    read(folder, 0)


def test_a_batch_is_moved_into_its_place_whole(folder: WorkingFolder, monkeypatch: pytest.MonkeyPatch) -> None:
    """It is on the disk before it has its name; a power cut between the two leaves no batch."""
    flushed = []

    def fsync(handle: int) -> None:
        assert not folder.file(0).exists()
        flushed.append((os.fstat(handle).st_ino, os.fstat(handle).st_size))

    monkeypatch.setattr(os, "fsync", fsync)
    folder.keep(0, COLUMNS, part())
    there = folder.file(0).stat()
    assert flushed == [(there.st_ino, there.st_size)]


# ---------------------------------------------------------------- the plan


def keep_one(out: Path, plan: dict[str, Any] = PLAN) -> Path:
    with working_folder(out, plan, resume=False) as folder:
        folder.keep(0, COLUMNS, None)
    return folder.path


def changed(**more: Any) -> dict[str, Any]:
    return PLAN | more


@pytest.mark.parametrize(
    ("plan", "said"),
    [
        (changed(study=PLAN["study"] | {"seed": 2, "resamples": 5}), "the study's seed and resamples"),
        (changed(study=PLAN["study"] | {"own": {"put": 5}}), "the study's own"),
        (
            changed(inputs=[PLAN["inputs"][0], {"history": "two", "sha256": "cc"}], groups=[]),
            "history 'two', which has been stored anew",
        ),
        (
            changed(inputs=[{"history": name, "sha256": "cc"} for name in ("one", "two")]),
            "history 'one', which has been stored anew and history 'two', which has been stored anew",
        ),
        (
            changed(study=PLAN["study"] | {"histories": ["one", "three"]},
                    inputs=[PLAN["inputs"][0], {"history": "three", "sha256": "cc"}]),
            "the study's histories",
        ),
        (changed(batch=10), "the size of batches"),
        (changed(program="rollband 2.0"), r"the program \(then rollband 1.0, numpy 2.0\)"),
        (changed(groups=[{"history": "one", "first": "2008-02-15"}]), "the days"),
    ],
    ids=["study", "own", "history", "histories", "other-history", "batch", "program", "days"],
)  # fmt: skip
@pytest.mark.parametrize("resume", [True, False])
def test_batches_of_another_plan_are_not_touched(tmp_path: Path, plan: dict[str, Any], said: str, resume: bool) -> None:
    path = keep_one(tmp_path / "out")
    with (
        pytest.raises(ResultsError, match=rf"\(1 batch is done\) that differs from this one in {said}: put that back"),
        working_folder(tmp_path / "out", plan, resume=resume),
    ):
        raise AssertionError
    assert WorkingFolder(path).kept() == 1
    with working_folder(tmp_path / "out", PLAN, resume=True) as folder:
        read(folder, 0)


def test_an_unfinished_run_stands_in_the_way_of_a_new_one(tmp_path: Path) -> None:
    path = keep_one(tmp_path / "out")
    with (
        pytest.raises(
            ResultsError, match=r"unfinished run .* for .*out \(1 batch is done\): go on with --resume, or de"
        ),
        working_folder(tmp_path / "out", PLAN, resume=False),
    ):
        raise AssertionError
    assert WorkingFolder(path).kept() == 1


def test_without_a_batch_there_is_nothing_to_lose(tmp_path: Path) -> None:
    for plan in (PLAN, changed(batch=5), PLAN):
        with working_folder(tmp_path / "out", plan, resume=False) as folder:
            assert json.loads((folder.path / "plan.json").read_text()) == plan


@pytest.mark.parametrize("text", ["", "{", "[]", "\x00\xff"])
def test_a_plan_that_cannot_be_read_is_that_of_nobody(tmp_path: Path, text: str) -> None:
    path = keep_one(tmp_path / "out")
    (path / "plan.json").write_bytes(text.encode("latin-1"))
    with (
        pytest.raises(ResultsError, match="differs from this one in everything, as its plan cannot be read"),
        working_folder(tmp_path / "out", PLAN, resume=True),
    ):
        raise AssertionError


def test_batches_without_a_plan_are_removed(tmp_path: Path) -> None:
    """They may be of any study."""
    path = keep_one(tmp_path / "out")
    (path / "plan.json").unlink()
    with working_folder(tmp_path / "out", PLAN, resume=True) as folder:
        assert folder.kept() == 0


# ---------------------------------------------------------------- the lock


def test_two_runs_into_one_folder(tmp_path: Path) -> None:
    (tmp_path / "link").symlink_to(tmp_path)
    with working_folder(tmp_path / "out", PLAN, resume=False):
        for other in (tmp_path / "out", tmp_path / "link" / "out", tmp_path / "else" / ".." / "out"):
            with (
                pytest.raises(ResultsError, match=r"another run is writing .*out: wait for it, or give another --out$"),
                working_folder(other, PLAN, resume=True),
            ):
                raise AssertionError
        with working_folder(tmp_path / "other", PLAN, resume=False):
            pass
    with working_folder(tmp_path / "out", PLAN, resume=False):
        pass


def test_a_lock_that_was_removed_with_its_folder_is_none(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """A run that opened the lock just before another finished holds a file that is in no folder any more."""
    import fcntl

    path = keep_one(tmp_path / "out")
    usual = fcntl.flock
    calls: list[int] = []

    def flock(handle: Any, how: int) -> None:
        if not calls:
            discard(WorkingFolder(path))
        calls.append(how)
        usual(handle, how)

    monkeypatch.setattr("studies.working_folder.fcntl.flock", flock)
    with working_folder(tmp_path / "out", PLAN, resume=False) as folder:
        folder.keep(0, COLUMNS, None)
        assert len(calls) == 2
        with (
            pytest.raises(ResultsError, match="another run is writing"),
            working_folder(tmp_path / "out", PLAN, resume=True),
        ):
            raise AssertionError


def test_a_file_system_without_locks_is_used_all_the_same(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    def flock(handle: Any, how: int) -> None:
        raise OSError(errno.ENOLCK, "No locks available")

    monkeypatch.setattr("studies.working_folder.fcntl.flock", flock)
    assert keep_one(tmp_path / "out").is_dir()


def test_where_nothing_can_be_written(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    (tmp_path / "file").write_text("")
    with (
        pytest.raises(ResultsError, match=r"^cannot write beside .*out: Not a directory$"),
        working_folder(tmp_path / "file" / "out", PLAN, resume=False),
    ):
        raise AssertionError

    def refuse(self: Path, *args: Any, **named: Any) -> None:
        raise PermissionError(errno.EACCES, "Permission denied")

    monkeypatch.setattr(Path, "mkdir", refuse)
    with (
        pytest.raises(ResultsError, match=r"^cannot write beside .*out: Permission denied$"),
        working_folder(tmp_path / "out", PLAN, resume=False),
    ):
        raise AssertionError


@pytest.mark.parametrize("after", range(3))
def test_stopped_while_it_is_removed(tmp_path: Path, monkeypatch: pytest.MonkeyPatch, after: int) -> None:
    """Whatever is left, a batch is never there without its plan."""
    with working_folder(tmp_path / "out", PLAN, resume=False) as folder:
        for number in range(2):
            folder.keep(number, COLUMNS, None)
    usual, left = Path.unlink, [after]

    def unlink(self: Path, missing_ok: bool = False) -> None:
        if not left[0]:
            raise KeyboardInterrupt
        left[0] -= 1
        usual(self, missing_ok=missing_ok)

    with monkeypatch.context() as patch:
        patch.setattr(Path, "unlink", unlink)
        with pytest.raises(KeyboardInterrupt):
            discard(folder)
    assert (folder.path / "plan.json").is_file()
    assert folder.kept() == 2 - after
    with working_folder(tmp_path / "out", PLAN, resume=True) as again:
        assert again.kept() == 2 - after
    discard(folder)
    assert not folder.path.exists()
