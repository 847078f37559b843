"""A study that is killed, stopped or refused at any moment: a plain message, and nothing done is lost.

Rung: behaviour (real processes and signals); identity (the bytes after ``--resume`` are those of an unbroken run).
"""

from __future__ import annotations

import os
import signal
import subprocess
import sys
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path

import pytest

from studies.study import parse_study
from studies.study_folder import make_study_folder
from studies.working_folder import working_folder

from .small_studies import bytes_of, children_of, grid_text, is_running, store_history, write_tables

ROOT = Path(__file__).parents[2]
#: 900 overlays in 90 batches, each of which takes some milliseconds.
STUDY = grid_text(30, 30, head="resamples = 60")
#: The command in a process of its own, with small batches and a page left out; more can be done to it first.
COMMAND = """
import sys
from studies import runner, study_folder
from studies.local_workers import LocalWorkers
from tests.studies.small_studies import write_tables
study_folder.write_study = write_tables
runner.BATCH, runner.WORTH_STARTING = 10, -1.0
LocalWorkers.up = True  # this process does not go on meanwhile
{first}
from studies.cli import main
main()
"""

Home = Path


@dataclass(frozen=True)
class Ran:
    code: int
    out: str
    err: str


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


def start(home: Home, *arguments: object, first: str = "") -> subprocess.Popen[str]:
    return subprocess.Popen(
        [sys.executable, "-W", "error", "-c", COMMAND.format(first=first), "study", "which.toml", "--out", "out",
         *map(str, arguments)],
        cwd=home, env=os.environ | {"PYTHONPATH": str(ROOT)}, text=True, start_new_session=True,
        stdout=subprocess.PIPE, stderr=subprocess.PIPE,
    )  # fmt: skip


def end(process: subprocess.Popen[str]) -> Ran:
    out, err = process.communicate(timeout=120)
    return Ran(process.returncode, out, err)


def run(home: Home, *arguments: object, first: str = "") -> Ran:
    return end(start(home, *arguments, first=first))


def kept(home: Home) -> int:
    return len(list((home / ".out.unfinished").glob("batch-*")))


def until(holds: Callable[[], object], process: subprocess.Popen[str]) -> None:
    """Wait for something while a process is at work."""
    deadline = time.monotonic() + 60
    while not holds():
        assert process.poll() is None, process.communicate()
        assert time.monotonic() < deadline
        time.sleep(0.001)


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


def resume(home: Home, unbroken: dict[str, bytes], *, done: int = 2) -> None:
    """Go on: what was done is not done again, and the bytes are those of an unbroken run."""
    assert not (home / "out").exists()
    there = kept(home)
    assert done <= there < 90
    refused = run(home)
    assert (refused.code, refused.out) == (5, "")
    assert f"there is an unfinished run of this study for out ({there} batches are done): go on with" in refused.err
    assert kept(home) == there
    counting = "usual = runner.run_job\nrunner.run_job = lambda *a: print('a batch', file=sys.stderr) or usual(*a)"
    resumed = run(home, "--workers", 1, "--resume", first=counting)
    assert resumed.code == 0, resumed.err
    assert resumed.err.splitlines() == ["a batch"] * (90 - there)
    assert bytes_of(home / "out") == unbroken
    assert sorted(path.name for path in home.iterdir()) == ["histories", "out", "which.toml"]


@pytest.mark.parametrize("workers", [1, 2])
def test_the_whole_run_is_killed(home: Home, unbroken: dict[str, bytes], workers: int) -> None:
    with at_work(home, "--workers", workers) as (process, helpers):
        assert len(helpers) == (0 if workers == 1 else workers)
        process.kill()
        assert end(process).code == -signal.SIGKILL
    resume(home, unbroken)


def test_a_worker_is_killed(home: Home, unbroken: dict[str, bytes]) -> None:
    with at_work(home, "--workers", 2) as (process, helpers):
        os.kill(helpers[0], signal.SIGKILL)
        ran = end(process)
    assert (ran.code, ran.out) == (5, "")
    assert ran.err == (
        "rollband: a worker process was killed by signal 9; what was done is kept: go on with --resume, if memory is "
        "short with fewer --workers\n"
    )
    resume(home, unbroken)


@pytest.mark.parametrize("workers", [1, 2])
def test_ctrl_c(home: Home, unbroken: dict[str, bytes], workers: int) -> None:
    with at_work(home, "--workers", workers) as (process, _):
        os.killpg(process.pid, signal.SIGINT)
        ran = end(process)
    assert (ran.code, ran.out) == (130, "")
    assert ran.err == "\nrollband: stopped; what was done is kept: go on with --resume\n"
    resume(home, unbroken)


def test_ctrl_c_while_workers_start(home: Home) -> None:
    process = start(home, "--workers", 3)
    until(lambda: children_of(process.pid), process)
    os.killpg(process.pid, signal.SIGINT)
    workers = children_of(process.pid)
    ran = end(process)
    assert (ran.code, ran.out) == (130, "")
    assert ran.err == "\nrollband: stopped; what was done is kept: go on with --resume\n"
    assert [worker for worker in workers if is_running(worker)] == []


def test_terminated_politely(home: Home, unbroken: dict[str, bytes]) -> None:
    """As by a shutdown, or a queue whose time is over."""
    with at_work(home, "--workers", 2) as (process, _):
        process.terminate()
        assert end(process).code == -signal.SIGTERM
    resume(home, unbroken)


def test_killed_between_the_last_batch_and_the_results(home: Home, unbroken: dict[str, bytes]) -> None:
    killed = run(
        home, "--workers", 1, first="import os\nstudy_folder.answer_study = lambda *a: os.kill(os.getpid(), 9)"
    )
    assert killed.code == -signal.SIGKILL
    assert kept(home) == 90
    resumed = run(home, "--workers", 1, "--resume", first="runner.run_job = None")
    assert resumed.code == 0, resumed.err
    assert bytes_of(home / "out") == unbroken
    assert sorted(path.name for path in home.iterdir()) == ["histories", "out", "which.toml"]


def test_a_disk_that_is_full(home: Home, unbroken: dict[str, bytes]) -> None:
    """The system itself refuses a file above some size: that of a batch from the third on."""
    limit = (
        "import resource\nusual = runner.run_job\n"
        "def run_job(context, job):\n"
        "    if job.first_number >= 20:\n"
        "        resource.setrlimit(resource.RLIMIT_FSIZE, (1000, 1000))\n"
        "    return usual(context, job)\n"
        "runner.run_job = run_job"
    )
    ran = run(home, "--workers", 1, first=limit)
    assert (ran.code, ran.out) == (5, "")
    said = ran.err.replace(str(home.resolve()), "HOME")
    assert said == (
        "rollband: batch 3 cannot be kept in HOME/.out.unfinished: File too large; what was done before is kept: make "
        "room and go on with --resume\n"
    )
    assert sorted(path.name for path in (home / ".out.unfinished").iterdir())[-1] == "plan.json"
    resume(home, unbroken)


def test_a_disk_that_is_full_at_the_end(home: Home, unbroken: dict[str, bytes]) -> None:
    """All batches are done; the results do not fit."""
    full = "from pathlib import Path\nimport errno\nusual = study_folder.write_study\n"
    full += "def write_study(found, folder, *, command):\n    usual(found, folder, command=command)\n"
    full += "    raise OSError(errno.ENOSPC, 'No space left on device')\nstudy_folder.write_study = write_study"
    ran = run(home, "--workers", 1, first=full)
    assert ran.code == 5
    assert ran.err.startswith("rollband: cannot write out: ")
    assert "No space left on device" in ran.err
    assert kept(home) == 90
    assert run(home, "--resume", first="runner.run_job = None").code == 0
    assert bytes_of(home / "out") == unbroken


def test_memory_that_runs_out(home: Home, unbroken: dict[str, bytes]) -> None:
    short = (
        "usual = runner.run_job\n"
        "def run_job(context, job):\n"
        "    return usual(context, job) if job.first_number < 20 else bytes(1 << 60)\n"
        "runner.run_job = run_job"
    )
    ran = run(home, "--workers", 1, first=short)
    assert (ran.code, ran.out) == (5, "")
    assert ran.err == (
        "rollband: memory ran out; what was done is kept: go on with --resume, if memory is short with fewer "
        "--workers\n"
    )
    resume(home, unbroken)


def test_two_runs_at_once(home: Home, unbroken: dict[str, bytes]) -> None:
    with at_work(home, "--workers", 1) as (process, _):
        os.kill(process.pid, signal.SIGSTOP)
        there = kept(home)
        for more in ([], ["--resume"]):
            second = run(home, *more)
            assert (second.code, second.out) == (5, "")
            assert second.err == "rollband: another run is writing out: wait for it, or give another --out\n"
        assert kept(home) == there
        os.kill(process.pid, signal.SIGCONT)
        ran = end(process)
    assert ran.code == 0, ran.err
    assert bytes_of(home / "out") == unbroken


def test_batches_that_are_spoiled_are_done_again(home: Home, unbroken: dict[str, bytes]) -> None:
    stop = "usual = runner.run_job\n"
    stop += "runner.run_job = lambda c, job: usual(c, job) if job.first_number < 60 else bytes(1 << 60)"
    assert run(home, "--workers", 1, first=stop).code == 5
    assert kept(home) == 6
    files = sorted((home / ".out.unfinished").glob("batch-*"))
    whole = [file.read_bytes() for file in files]
    files[0].write_bytes(whole[0][: len(whole[0]) // 2])
    files[1].write_bytes(b"")
    files[2].write_bytes(whole[3])
    files[4].write_bytes(whole[4][:500] + bytes([whole[4][500] ^ 1]) + whole[4][501:])
    again = run(
        home, "--workers", 1, "--resume",
        first="usual = runner.run_job\n"
        "runner.run_job = lambda c, job: print(job.first_number, file=sys.stderr) or usual(c, job)",
    )  # fmt: skip
    assert again.code == 0, again.err
    assert again.err.split() == ["0", "10", "20", "40", *map(str, range(60, 900, 10))]
    assert bytes_of(home / "out") == unbroken


# ---------------------------------------------------------------- refusals


@pytest.fixture
def unfinished(home: Home) -> Home:
    """A folder with a run of which one batch is done."""
    stop = "usual = runner.run_job\n"
    stop += "runner.run_job = lambda c, job: usual(c, job) if job.first_number < 10 else bytes(1 << 60)"
    assert run(home, "--workers", 1, first=stop).code == 5
    assert kept(home) == 1
    return home


def test_a_study_that_has_changed(unfinished: Home) -> None:
    text = STUDY.replace("resamples = 60", "resamples = 61\nseed = 5").replace("= 95", "= 94")
    (unfinished / "which.toml").write_text(text)
    ran = run(unfinished, "--resume")
    assert (ran.code, ran.out) == (5, "")
    assert "differs from this one in the study's seed and resamples and overlay: put that back" in ran.err
    assert kept(unfinished) == 1


def test_a_history_that_has_changed(unfinished: Home) -> None:
    (unfinished / "histories").unlink()
    store_history(unfinished / "histories", "one", seed=4)
    ran = run(unfinished, "--resume")
    assert (ran.code, ran.out) == (5, "")
    assert "differs from this one in history 'one', which has been stored anew: put that back" in ran.err
    assert kept(unfinished) == 1


def make_others(home: Home) -> None:
    (home / "out").mkdir()
    (home / "out" / "mine.txt").write_text("keep")


def make_file(home: Home) -> None:
    (home / "out").write_text("keep")


def shorten(home: Home) -> None:
    """A history that begins in February of the year in which the study's anchor, yearly now, rolls in December."""
    (home / "histories").unlink()
    store_history(home / "histories", "one", years=1)
    text = STUDY.replace('roll = "quarter"', 'roll = "year"') + '\n[[axis]]\nname = "to"\nfield = "window.to"\n'
    (home / "which.toml").write_text(text + 'values = ["2008-11-28"]\n')


def lose_history(home: Home) -> None:
    (home / "histories").unlink()
    store_history(home / "histories", "on")


def lose_store(home: Home) -> None:
    (home / "histories").unlink()


def spoil_history(home: Home) -> None:
    (home / "histories").unlink()
    store_history(home / "histories", "one")
    (home / "histories" / "one.parquet").write_bytes(b"PAR1 and no more")


def folder_as_history(home: Home) -> None:
    (home / "histories").unlink()
    (home / "histories" / "one.parquet").mkdir(parents=True)


@pytest.mark.parametrize(
    ("prepare", "code", "said"),
    [
        (make_others, 5, "out holds other files and no manifest.json: give an empty or a new folder as --out"),
        (make_file, 5, "out is not a folder: give another --out"),
        (lose_history, 3, "there is no history 'one' in histories; did you mean 'on'? It holds: on"),
        (lose_store, 3, "there is no history 'one': histories holds none yet; make one with 'rollband load one"),
        (spoil_history, 3, "history 'one' (histories/one.parquet) cannot be read: "),
        (folder_as_history, 3, "history 'one' (histories/one.parquet) cannot be read: Is a directory"),
        (shorten, 5, "history 'one': the window"),
    ],
    ids=["other-files", "file", "no-history", "no-store", "spoiled", "folder", "too-short"],
)
def test_refused_at_once(
    home: Home, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str],
    prepare: Callable[[Home], None], code: int, said: str,
) -> None:  # fmt: skip
    prepare(home)
    before = {path for path in home.rglob("*") if path.name != "histories"}
    ran = run_here(home, monkeypatch, capsys)
    assert (ran.code, ran.out) == (code, "")
    assert ran.err.startswith(f"rollband: {said}") or said in ran.err
    assert "Traceback" not in ran.err
    assert {path for path in home.rglob("*") if path.name != "histories"} == before


def run_here(
    home: Home, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str], *arguments: str
) -> Ran:  # fmt: skip
    from studies.cli import main

    monkeypatch.chdir(home)
    monkeypatch.setattr("studies.study_folder.write_study", write_tables)
    monkeypatch.setattr(sys, "argv", ["rollband", "study", "which.toml", "--out", "out", *arguments])
    with pytest.raises(SystemExit) as exited:
        main()
    said = capsys.readouterr()
    return Ran(exited.value.code if isinstance(exited.value.code, int) else 0, said.out, said.err)


@pytest.mark.parametrize(
    ("arguments", "said"),
    [
        (["--workers", "0"], "Invalid value for --workers: 0 is not a number from 1 to 256"),
        (["--workers", "257"], "Invalid value for --workers: 257 is not a number from 1 to 256"),
        (["--workers", "2", "--scheduler", "tcp://here:1"], "the scheduler has its own workers; leave --workers out"),
    ],
    ids=["none", "too-many", "both"],
)
def test_a_wrong_use(
    home: Home, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str], arguments: list[str], said: str
) -> None:
    ran = run_here(home, monkeypatch, capsys, *arguments)
    assert (ran.code, ran.out) == (2, "")
    assert said in ran.err


def test_a_folder_in_which_nothing_may_be_written(
    home: Home, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    usual = Path.mkdir

    def refuse(self: Path, mode: int = 0o777, parents: bool = False, exist_ok: bool = False) -> None:
        if self.name == ".out.unfinished":
            raise PermissionError(13, "Permission denied")
        usual(self, mode, parents, exist_ok)

    monkeypatch.setattr(Path, "mkdir", refuse)
    ran = run_here(home, monkeypatch, capsys)
    assert (ran.code, ran.out, ran.err) == (5, "", "rollband: cannot write beside out: Permission denied\n")


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
