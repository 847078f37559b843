"""The command ``rollband study`` for tests: in a process of its own, and in this one."""

from __future__ import annotations

import os
import subprocess
import sys
import time
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

import pytest

from studies.cli import main
from studies.jobs import Context, Job, run_job

from .small_studies import grid_text, write_tables

ROOT = Path(__file__).parents[2]
#: 900 overlays in 90 batches, each of which takes some milliseconds.
STUDY = grid_text(30, 30, head="resamples = 60")
#: The command in a process of its own, with small batches and a page left out; more can be done to it first.
COMMAND = """
import signal, sys
signal.signal(signal.SIGINT, signal.default_int_handler)  # a job in the background is started without it
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


class Here:
    """The command in this process, in small batches too; ``done`` are the first overlays of those that it does."""

    def __init__(self, home: Home, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]) -> None:
        self.home, self._patch, self._capsys = home, monkeypatch, capsys
        self.done: list[int] = []
        monkeypatch.chdir(home)
        monkeypatch.setattr("studies.study_folder.write_study", write_tables)
        monkeypatch.setattr("studies.runner.BATCH", 10)

    def __call__(
        self, *arguments: object, workers: int | None = 1, stop_at: int = 1000, error: BaseException | None = None
    ) -> Ran:
        """Run it, and have it stop with an error at an overlay; without ``workers`` nothing is counted or stopped."""
        self.done.clear()

        def counted(context: Context, job: Job) -> object:
            if job.first_number >= stop_at:
                raise error or AssertionError("a batch is done too many")
            self.done.append(job.first_number)
            return run_job(context, job)

        self._patch.setattr("studies.runner.run_job", run_job if workers is None else counted)
        more = [] if workers is None else ["--workers", workers]
        asked = ["study", "which.toml", "--out", "out", *more, *arguments]
        self._patch.setattr(sys, "argv", ["rollband", *map(str, asked)])
        self._capsys.readouterr()
        with pytest.raises(SystemExit) as exited:
            main()
        said = self._capsys.readouterr()
        return Ran(exited.value.code if isinstance(exited.value.code, int) else 0, said.out, said.err)
