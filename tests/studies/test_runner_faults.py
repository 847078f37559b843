"""A study that is killed, stopped or refused at any moment: a plain message, and nothing done is lost.

Rung: behaviour (real processes and signals); identity (the bytes after ``--resume`` are those of an unbroken run).
"""

from __future__ import annotations

import errno
import os
import signal
import subprocess
import time
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

import pytest

from studies.study import parse_study
from studies.study_answer import StudyAnswer
from studies.study_folder import make_study_folder
from studies.working_folder import working_folder

from .small_studies import bytes_of, children_of, grid_text, is_running, store_history, write_tables
from .study_command import STUDY, Here, Home, end, kept, run, start, until


@pytest.fixture(scope="module")
def store(tmp_path_factory: pytest.TempPathFactory) -> Path:
    folder = tmp_path_factory.mktemp("histories")
    store_history(folder, "one")
    return folder


@pytest.fixture(scope="module")
def unbroken(store: Path, tmp_path_factory: pytest.TempPathFactory) -> dict[str, bytes]:
    out = tmp_path_factory.mktemp("unbroken") / "out"
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr("studies.study_folder.write_study", write_tables)
        make_study_folder(parse_study(STUDY), out, store=store)
    return bytes_of(out)


@pytest.fixture
def home(tmp_path: Path, store: Path) -> Home:
    """A folder with the study's file."""
    (tmp_path / "which.toml").write_text(STUDY)
    (tmp_path / "histories").symlink_to(store)
    return tmp_path


@contextmanager
def at_work(home: Home, *arguments: object) -> Iterator[tuple[subprocess.Popen[str], list[int]]]:
    """A run that has kept its second batch, and its workers; all of them are gone afterwards."""
    process = start(home, *arguments)
    try:
        until(lambda: kept(home) >= 2, process)
        workers = children_of(process.pid)
        yield process, workers
        deadline = time.monotonic() + 10
        while left := [worker for worker in workers if is_running(worker)]:
            assert time.monotonic() < deadline, left
            time.sleep(0.01)
    finally:
        process.kill()
        process.communicate()


@pytest.fixture
def here(home: Home, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]) -> Here:
    return Here(home, monkeypatch, capsys)


def resume(here: Here, unbroken: dict[str, bytes], *, done: int = 2) -> None:
    """Go on: what was done is not done again, and the bytes are those of an unbroken run."""
    home, there = here.home, kept(here.home)
    assert not (home / "out").exists()
    assert done <= there < 90
    refused = here()
    assert (refused.code, refused.out) == (5, "")
    assert f"there is an unfinished run of this study for out ({there} batches are done): go on with" in refused.err
    assert kept(home) == there
    resumed = here("--resume")
    assert (resumed.code, resumed.err) == (0, "")
    assert len(here.done) == 90 - there
    assert bytes_of(home / "out") == unbroken
    assert sorted(path.name for path in home.iterdir()) == ["histories", "out", "which.toml"]


@pytest.mark.parametrize("workers", [1, 2])
def test_the_whole_run_is_killed(here: Here, unbroken: dict[str, bytes], workers: int) -> None:
    with at_work(here.home, "--workers", workers) as (process, helpers):
        assert len(helpers) == (0 if workers == 1 else workers)
        process.kill()
        assert end(process).code == -signal.SIGKILL
    resume(here, unbroken)


def test_a_worker_is_killed(here: Here, unbroken: dict[str, bytes]) -> None:
    with at_work(here.home, "--workers", 2) as (process, helpers):
        os.kill(helpers[0], signal.SIGKILL)
        ran = end(process)
    assert (ran.code, ran.out) == (5, "")
    assert ran.err == (
        "rollband: a worker process was killed by signal 9; what was done is kept: go on with --resume, if memory is "
        "short with fewer --workers\n"
    )
    resume(here, unbroken)


@pytest.mark.parametrize("workers", [1, 2])
def test_ctrl_c(here: Here, unbroken: dict[str, bytes], workers: int) -> None:
    with at_work(here.home, "--workers", workers) as (process, _):
        os.killpg(process.pid, signal.SIGINT)
        ran = end(process)
    assert (ran.code, ran.out) == (130, "")
    assert ran.err == "\nrollband: stopped; what was done is kept: go on with --resume\n"
    resume(here, unbroken)


def test_ctrl_c_while_workers_start(home: Home) -> None:
    process = start(home, "--workers", 3)
    until(lambda: children_of(process.pid), process)
    os.killpg(process.pid, signal.SIGINT)
    workers = children_of(process.pid)
    ran = end(process)
    assert (ran.code, ran.out) == (130, "")
    assert ran.err == "\nrollband: stopped; what was done is kept: go on with --resume\n"
    assert [worker for worker in workers if is_running(worker)] == []


def test_terminated_politely(here: Here, unbroken: dict[str, bytes]) -> None:
    """As by a shutdown, or a queue whose time is over."""
    with at_work(here.home, "--workers", 2) as (process, _):
        process.terminate()
        assert end(process).code == -signal.SIGTERM
    resume(here, unbroken)


def test_killed_between_the_last_batch_and_the_results(here: Here, unbroken: dict[str, bytes]) -> None:
    home = here.home
    killing = "import os\nstudy_folder.answer_study = lambda *a: os.kill(os.getpid(), 9)"
    assert run(home, "--workers", 1, first=killing).code == -signal.SIGKILL
    assert kept(home) == 90
    resumed = here("--resume", stop_at=0)
    assert (resumed.code, resumed.err) == (0, "")
    assert bytes_of(home / "out") == unbroken
    assert sorted(path.name for path in home.iterdir()) == ["histories", "out", "which.toml"]


def test_a_disk_that_is_full(here: Here, unbroken: dict[str, bytes]) -> None:
    """The system itself refuses a file above some size: that of a batch from the third on."""
    limit = (
        "import resource\nusual = runner.run_job\n"
        "def run_job(context, job):\n"
        "    if job.first_number >= 20:\n"
        "        resource.setrlimit(resource.RLIMIT_FSIZE, (1000, 1000))\n"
        "    return usual(context, job)\n"
        "runner.run_job = run_job"
    )
    home = here.home
    ran = run(home, "--workers", 1, first=limit)
    assert (ran.code, ran.out) == (5, "")
    said = ran.err.replace(str(home.resolve()), "HOME")
    assert said == (
        "rollband: batch 3 cannot be kept in HOME/.out.unfinished: File too large; what was done before is kept: make "
        "room and go on with --resume\n"
    )
    assert sorted(path.name for path in (home / ".out.unfinished").iterdir())[-1] == "plan.json"
    resume(here, unbroken)


def test_a_disk_that_is_full_at_the_end(here: Here, unbroken: dict[str, bytes]) -> None:
    """All batches are done; the results do not fit."""

    def full(found: StudyAnswer, folder: Path, *, command: str) -> None:
        write_tables(found, folder, command=command)
        raise OSError(errno.ENOSPC, "No space left on device")

    with pytest.MonkeyPatch.context() as patch:
        patch.setattr("studies.study_folder.write_study", full)
        ran = here()
    assert ran.code == 5
    assert ran.err.startswith("rollband: cannot write out: ")
    assert "No space left on device" in ran.err
    assert kept(here.home) == 90
    assert here("--resume", stop_at=0).code == 0
    assert bytes_of(here.home / "out") == unbroken


def test_memory_that_runs_out(here: Here, unbroken: dict[str, bytes]) -> None:
    ran = here(stop_at=20, error=MemoryError())
    assert (ran.code, ran.out) == (5, "")
    assert ran.err == (
        "rollband: memory ran out; what was done is kept: go on with --resume, if memory is short with fewer "
        "--workers\n"
    )
    resume(here, unbroken)


def test_two_runs_at_once(here: Here, unbroken: dict[str, bytes]) -> None:
    home = here.home
    with at_work(home, "--workers", 1) as (process, _):
        os.kill(process.pid, signal.SIGSTOP)
        there = kept(home)
        for more in ([], ["--resume"]):
            second = here(*more)
            assert (second.code, second.out) == (5, "")
            assert second.err == "rollband: another run is writing out: wait for it, or give another --out\n"
        assert kept(home) == there
        os.kill(process.pid, signal.SIGCONT)
        ran = end(process)
    assert ran.code == 0, ran.err
    assert bytes_of(home / "out") == unbroken


def test_batches_that_are_spoiled_are_done_again(here: Here, unbroken: dict[str, bytes]) -> None:
    assert here(stop_at=60, error=MemoryError()).code == 5
    assert kept(here.home) == 6
    files = sorted((here.home / ".out.unfinished").glob("batch-*"))
    whole = [file.read_bytes() for file in files]
    files[0].write_bytes(whole[0][: len(whole[0]) // 2])
    files[1].write_bytes(b"")
    files[2].write_bytes(whole[3])
    files[4].write_bytes(whole[4][:500] + bytes([whole[4][500] ^ 1]) + whole[4][501:])
    assert here("--resume").code == 0
    assert here.done == [0, 10, 20, 40, *range(60, 900, 10)]
    assert bytes_of(here.home / "out") == unbroken


def test_a_run_holds_its_folder_from_beginning_to_end(home: Home, store: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Also while it writes its results."""
    seen = []

    def write(found: object, folder: Path, *, command: str) -> None:
        with pytest.raises(Exception, match="another run is writing"), working_folder(home / "out", {}, resume=True):
            raise AssertionError
        seen.append(folder)

    monkeypatch.setattr("studies.study_folder.write_study", write)
    make_study_folder(parse_study(grid_text(2, 2, head="resamples = 0")), home / "out", store=store)
    assert len(seen) == 1
