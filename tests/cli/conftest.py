"""The command line in this process: the user's own entry point, in an empty folder, without pictures."""

from __future__ import annotations

import sys
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

import pytest

from data_loaders.demo_market import write_demo_market
from studies.cli import main
from tests.studies.conftest import without_pictures


@dataclass(frozen=True)
class Ran:
    """What a command gave back."""

    code: int
    out: str
    err: str


Run = Callable[..., Ran]


@pytest.fixture(scope="session")
def market(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A folder with the CSV files of an invented market: prices, vol, dividends, rates."""
    folder = tmp_path_factory.mktemp("market")
    write_demo_market(folder)
    return folder


@pytest.fixture
def home(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    """An empty folder to work in."""
    folder = tmp_path / "home"
    folder.mkdir()
    monkeypatch.chdir(folder)
    monkeypatch.setenv("COLUMNS", "100")
    return folder


@pytest.fixture
def rollband(home: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]) -> Run:
    """Run a command as the installed script does, and catch its exit."""
    without_pictures(monkeypatch)

    def run(*arguments: object) -> Ran:
        monkeypatch.setattr(sys, "argv", ["rollband", *map(str, arguments)])
        capsys.readouterr()
        with pytest.raises(SystemExit) as exited:
            main()
        captured = capsys.readouterr()
        code = exited.value.code
        return Ran(code if isinstance(code, int) else 0 if code is None else 1, captured.out, captured.err)

    return run


@pytest.fixture
def files(market: Path) -> list[object]:
    """The market's files as options."""
    return [part for kind in ("prices", "vol", "dividends", "rates") for part in (f"--{kind}", market / f"{kind}.csv")]


@pytest.fixture
def stored(rollband: Run, files: list[object]) -> Run:
    """The same, with the market already loaded as ``mine``."""
    assert rollband("load", "mine", *files).code == 0
    return rollband
