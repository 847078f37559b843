"""The installed command in a process of its own: its start, its streams, its pictures.

Rung: identity.
"""

from __future__ import annotations

import json
import subprocess
import sys
import time
from pathlib import Path

import pytest

from studies.assumptions import CAUTION

RUN = "from studies.cli import main; main()"


def run(*arguments: object, cwd: Path) -> subprocess.CompletedProcess[str]:
    """The command with every warning an error, as the script of the package starts it."""
    command = [sys.executable, "-W", "error", "-c", RUN, *map(str, arguments)]
    return subprocess.run(command, cwd=cwd, capture_output=True, text=True, timeout=120, check=False)


def test_help_says_what_it_is_for_and_the_caution_once(tmp_path: Path) -> None:
    ran = run("--help", cwd=tmp_path)
    assert ran.returncode == 0
    said = " ".join(ran.stdout.split())
    assert "Start with: rollband demo" in said
    for command in ("load", "replay", "demo"):
        assert f" {command} " in said
    # the caution of the reports, but for its first words
    assert said.count(CAUTION.partition(",")[0].removeprefix("Option prices here")) == 1
    for part in ("the past is not the future", "risk documents of your exchange", "tax and regulation are local"):
        assert said.count(part) == 1
    assert said.count("licensed adviser") == 1
    assert list(tmp_path.iterdir()) == []


@pytest.mark.parametrize("command", ["load", "replay", "show", "demo"])
def test_help_of_every_command(tmp_path: Path, command: str) -> None:
    ran = run(command, "--help", cwd=tmp_path)
    assert (ran.returncode, ran.stderr) == (0, "")
    assert "--help" in ran.stdout


def test_help_imports_nothing_heavy(tmp_path: Path) -> None:
    script = (
        "import sys\n"
        "from studies.cli import main\n"
        "sys.argv = ['rollband', '--help']\n"
        "try:\n    main()\nexcept SystemExit:\n    pass\n"
        "heavy = 'numpy pandas scipy pyarrow matplotlib backtest data_loaders'.split()\n"
        "print('loaded:', sorted(set(heavy) & set(sys.modules)))\n"
    )
    ran = subprocess.run(
        [sys.executable, "-c", script], cwd=tmp_path, capture_output=True, text=True, timeout=60, check=True
    )
    assert ran.stdout.endswith("loaded: []\n")
    times = []
    for _ in range(3):
        started = time.perf_counter()
        run("--help", cwd=tmp_path)
        times.append(time.perf_counter() - started)
    print(f"\nrollband --help: {min(times):.2f} s, the best of three")


def test_without_a_command_it_helps(tmp_path: Path) -> None:
    ran = run(cwd=tmp_path)
    assert "Start with: rollband demo" in ran.stdout + ran.stderr


def test_demo_with_its_pictures(tmp_path: Path) -> None:
    ran = run("demo", "here", cwd=tmp_path)
    assert (ran.returncode, ran.stderr) == (0, "")
    results = tmp_path / "here" / "results"
    assert sorted(path.name for path in results.iterdir()) == [
        "band.png", "daily.parquet", "drawdown.png", "growth.png", "manifest.json", "report.html", "rolls.parquet",
        "summary.json", "tables",
    ]  # fmt: skip
    for name in ("band", "drawdown", "growth"):
        assert (results / f"{name}.png").read_bytes().startswith(b"\x89PNG\r\n\x1a\n")
        assert f"{name}.png" in ran.stdout
    before = {path.name: path.read_bytes() for path in results.iterdir() if path.is_file()}
    # another process gives the same bytes, whatever its hash seed
    again = run(
        "replay", "demo", "--store", "here/histories", "--overlay", "here/overlay.toml", "--out", "again", cwd=tmp_path
    )
    assert again.returncode == 0
    for name in ("daily.parquet", "rolls.parquet", "summary.json", "band.png"):
        assert (tmp_path / "again" / name).read_bytes() == before[name]


def test_streams_and_exit_codes(tmp_path: Path) -> None:
    rows = "".join(f"2020-{month:02d}-{day:02d},{100 + month}\n" for month in range(1, 13) for day in range(1, 29))
    (tmp_path / "p.csv").write_text("date,close\n" + rows)
    ran = run("replay", "--prices", "p.csv", "--put", 95, "--roll", "month", "--json", "--out", "o", cwd=tmp_path)
    assert ran.returncode == 0
    assert json.loads(ran.stdout)["schema"] == 1
    assert ran.stderr == "Results: o\n"
    for code, *command in (
        (2, "replay", "--put", "95"),
        (3, "load", "mine", "--prices", "no.csv"),
        (5, "replay", "--prices", "p.csv", "--put", "95", "--from", "2031-01-01"),
    ):
        ran = run(*command, cwd=tmp_path)
        assert (ran.returncode, ran.stdout) == (code, "")
        assert "Traceback" not in ran.stderr
    assert sorted(path.name for path in tmp_path.iterdir()) == ["o", "p.csv"]
