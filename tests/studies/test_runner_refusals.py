"""What a study cannot be run with or into: one plain sentence, the exit code of its family, and nothing is touched.

Rung: behaviour.
"""

from __future__ import annotations

import errno
import json
from collections.abc import Callable
from pathlib import Path

import pytest

from studies.results import json_text
from studies.working_folder import PLAN

from .small_studies import store_history
from .study_command import STUDY, Here, Home, kept


@pytest.fixture(scope="module")
def store(tmp_path_factory: pytest.TempPathFactory) -> Path:
    folder = tmp_path_factory.mktemp("histories")
    store_history(folder, "one")
    return folder


@pytest.fixture
def home(tmp_path: Path, store: Path) -> Home:
    """A folder with the study's file."""
    (tmp_path / "which.toml").write_text(STUDY)
    (tmp_path / "histories").symlink_to(store)
    return tmp_path


@pytest.fixture
def here(home: Home, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]) -> Here:
    return Here(home, monkeypatch, capsys)


@pytest.fixture
def unfinished(here: Here) -> Here:
    """A run of which one batch is done."""
    assert here(stop_at=10, error=MemoryError()).code == 5
    assert kept(here.home) == 1
    return here


def test_a_study_that_has_changed(unfinished: Here) -> None:
    text = STUDY.replace("resamples = 60", "resamples = 61\nseed = 5").replace("= 95", "= 94")
    (unfinished.home / "which.toml").write_text(text)
    ran = unfinished("--resume")
    assert (ran.code, ran.out) == (5, "")
    assert "differs from this one in the study's seed and resamples and overlay: put that back" in ran.err
    assert kept(unfinished.home) == 1


def test_a_history_that_has_changed(unfinished: Here) -> None:
    (unfinished.home / "histories").unlink()
    store_history(unfinished.home / "histories", "one", seed=4)
    ran = unfinished("--resume")
    assert (ran.code, ran.out) == (5, "")
    assert "differs from this one in history 'one', which has been stored anew: put that back" in ran.err
    assert kept(unfinished.home) == 1


def test_batches_of_a_program_whose_overlays_began_on_days_of_their_own(unfinished: Here) -> None:
    """Its plan says nothing of the days; with all else as it is now its rows stand on other days than these would."""
    file = unfinished.home / ".out.unfinished" / PLAN
    plan = json.loads(file.read_text())
    assert plan.pop("days") == "in common"
    file.write_text(json_text(plan))
    ran = unfinished("--resume")
    assert (ran.code, ran.out) == (5, "")
    assert "differs from this one in the days: put that back" in ran.err
    assert kept(unfinished.home) == 1


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
        (make_others, 5, "out holds other files and no manifest.json"),
        (make_file, 5, "out is not a folder: give another --out"),
        (lose_history, 3, "there is no history 'one' in histories; did you mean 'on'? It holds: on"),
        (lose_store, 3, "there is no history 'one': histories holds none yet; make one with 'rollband load one"),
        (spoil_history, 3, "history 'one' (histories/one.parquet) cannot be read: "),
        (folder_as_history, 3, "history 'one' (histories/one.parquet) cannot be read: [Errno 21]"),
        (shorten, 5, "history 'one': no roll date of the longest leg (every 12 month(s), third Friday) between 2008-"),
    ],
    ids=["other-files", "file", "no-history", "no-store", "spoiled", "folder", "too-short"],
)
def test_refused_at_once(here: Here, prepare: Callable[[Home], None], code: int, said: str) -> None:
    prepare(here.home)
    before = {path for path in here.home.rglob("*") if path.name != "histories"}
    ran = here()
    assert (ran.code, ran.out) == (code, "")
    assert ran.err.startswith(f"rollband: {said}")
    assert len(ran.err.splitlines()) == 1
    assert {path for path in here.home.rglob("*") if path.name != "histories"} == before


@pytest.mark.parametrize(
    ("arguments", "said"),
    [
        (["--workers", "0"], "Invalid value for --workers: 0 is not a number from 1 to 256"),
        (["--workers", "257"], "Invalid value for --workers: 257 is not a number from 1 to 256"),
        (["--workers", "2", "--scheduler", "tcp://here:1"], "the scheduler has its own workers; leave --workers out"),
    ],
    ids=["none", "too-many", "both"],
)
def test_a_wrong_use(here: Here, arguments: list[str], said: str) -> None:
    ran = here(*arguments)
    assert (ran.code, ran.out) == (2, "")
    assert said in ran.err


def test_a_folder_in_which_nothing_may_be_written(here: Here, monkeypatch: pytest.MonkeyPatch) -> None:
    usual = Path.mkdir

    def refuse(self: Path, mode: int = 0o777, parents: bool = False, exist_ok: bool = False) -> None:
        if self.name == ".out.unfinished":
            raise PermissionError(errno.EACCES, "Permission denied")
        usual(self, mode, parents, exist_ok)

    monkeypatch.setattr(Path, "mkdir", refuse)
    ran = here()
    assert (ran.code, ran.out, ran.err) == (5, "", "rollband: cannot write beside out: Permission denied\n")
