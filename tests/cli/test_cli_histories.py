"""``rollband histories``, and loading again or appending, as a person types them: texts, JSON, exit codes.

Rung: behaviour (small files written out here; what is said of them is worked out by hand).
"""

from __future__ import annotations

import json
import os
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest

from data_loaders import read_history
from studies.results import sha256_of

Run = Callable[..., Any]
#: 2020-09-13 12:26:40 UTC.
THEN = 1_600_000_000


@pytest.fixture
def write(home: Path) -> Callable[..., str]:
    """Write a CSV file of a header and rows."""

    def written(name: str, header: str, *rows: str) -> str:
        (home / name).write_text("\n".join([header, *rows]) + "\n")
        return name

    return written


@pytest.fixture
def twice(rollband: Run, write: Any, home: Path) -> Run:
    """A history ``x`` that has been loaded twice, the first time on 2020-09-13."""
    first = write("p.csv", "date,close,volume", "2020-01-02,100,7", "2020-01-03,101,8", "2020-01-06,102,9")
    assert rollband("load", "x", "--prices", first).code == 0
    os.utime(home / "histories" / "x.parquet", (THEN, THEN))
    write("p.csv", "date,close,open", "2020-01-02,100,1", "2020-01-06,102.5,1", "2020-01-07,103,1", "2020-01-08,104,1")
    return rollband


def version(home: Path, name: str = "x", store: str = "histories") -> str:
    """The sha256 of a history as it is now."""
    return sha256_of(home / store / f"{name}.parquet")


# ---------------------------------------------------------------- loaded again


def test_loading_again_says_what_is_different(twice: Run, home: Path) -> None:
    then = version(home)
    ran = twice("load", "x", "--prices", "p.csv")
    assert (ran.code, ran.err) == (0, "")
    assert ran.out.endswith(
        "The history that was stored as x before is replaced.\n"
        "  rows: 2 (2020-01-07 to 2020-01-08) added, 1 (2020-01-03) gone\n"
        "  new: open\n"
        "  no longer there: volume\n"
        "  close: 1 value revised, on 2020-01-06 from 102 to 102.5\n"
        f"  the one of 2020-09-13 12:26 is kept as version {then[:12]}: rollband histories x\n"
        "Stored as histories/x.parquet\n"
        "Next: rollband replay x --put 95 --call 110\n"
    )
    ran = twice("load", "x", "--prices", "p.csv")
    assert "Nothing has changed: histories/x.parquet holds exactly this already.\n" in ran.out
    assert "replaced" not in ran.out


def test_loading_over_a_damaged_one(twice: Run, home: Path) -> None:
    (home / "histories" / "x.parquet").write_bytes(b"no such thing")
    ran = twice("load", "x", "--prices", "p.csv")
    assert ran.code == 0
    assert "  what is different cannot be said: history 'x' (histories/x.parquet) cannot be read: " in ran.out
    assert len(list((home / "histories" / ".versions" / "x").iterdir())) == 1


def test_many_versions_are_remarked_on(twice: Run, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("studies.wiring_histories.MANY", 2)
    assert "former versions" not in twice("load", "x", "--prices", "p.csv").out
    ran = twice("load", "x", "--prices", "p.csv", "--to", "2020-01-07")
    assert "  2 former versions are kept (" in ran.out
    assert "rollband histories x --prune 20 lets all but the newest 20 go\n" in ran.out


# ---------------------------------------------------------------- appended


@pytest.fixture
def daily(rollband: Run, write: Any) -> Run:
    """A history ``x`` of prices and vols up to 2020-01-06."""
    prices = write("p.csv", "date,close", "2020-01-02,100", "2020-01-03,101", "2020-01-06,102")
    vol = write("v.csv", "date,vol", "2020-01-02,1.6", "2020-01-03,1.7", "2020-01-06,1.8")
    assert rollband("load", "x", "--prices", prices, "--vol", vol, "--vol-unit", "percent").code == 0
    return rollband


def test_a_day_is_appended(daily: Run, write: Any, home: Path) -> None:
    os.utime(home / "histories" / "x.parquet", (THEN, THEN))
    then = version(home)
    prices = write("p2.csv", "date,close,volume", "2020-01-06,102,9", "2020-01-07,103,9")
    # in which unit these are is not plain by themselves
    vol = write("v2.csv", "date,vol", "2020-01-06,1.8", "2020-01-07,1.9")
    ran = daily("load", "x", "--append", "--prices", prices, "--vol", vol)
    assert (ran.code, ran.err) == (0, "")
    assert ran.out.endswith(
        "  note: x has no volume: left out; a load without --append takes them\n"
        "Appended to x, days: 1 (2020-01-07); 1 day in common agrees within 1e-06 of the value.\n"
        f"  the one of 2020-09-13 12:26 is kept as version {then[:12]}: rollband histories x\n"
        "Stored as histories/x.parquet\n"
        "Next: rollband replay x --put 95 --call 110\n"
    )
    frame = read_history(home / "histories", "x").frame
    assert frame["close"].tolist() == [100.0, 101.0, 102.0, 103.0]
    assert frame["vol"].tolist() == [1.6 / 100, 1.7 / 100, 1.8 / 100, 1.9 / 100]
    ran = daily("load", "x", "--append", "--prices", prices, "--vol", vol)
    assert (
        "Nothing to append: the files end on 2020-01-07, which is stored already; 2 days in common agree within 1e-06 "
        "of the value.\n"
    ) in ran.out
    assert "Stored" not in ran.out
    # and in the other unit it would not agree
    assert daily("load", "x", "--append", "--prices", prices, "--vol", vol, "--vol-unit", "decimal").code == 3


def test_without_a_day_in_common(daily: Run, write: Any) -> None:
    prices = write("p2.csv", "date,close", "2020-01-07,103", "2020-01-08,104")
    vol = write("v2.csv", "date,vol", "2020-01-07,1.9")
    ran = daily("load", "x", "--append", "--prices", prices, "--vol", vol)
    assert (
        "Appended to x, days: 2 (2020-01-07 to 2020-01-08); there is no day in common, so nothing could be compared.\n"
    ) in ran.out
    # the vol of the 8th was carried; the day after it is there
    write("v2.csv", "date,vol", "2020-01-07,1.9", "2020-01-08,1.5")
    ran = daily("load", "x", "--append", "--prices", prices, "--vol", vol)
    assert "  vol on 2020-01-08: carried there as 0.019, 0.015 of its own\n" in ran.out


def test_what_does_not_agree_is_told_and_nothing_is_written(daily: Run, write: Any, home: Path) -> None:
    before = version(home)
    prices = write("p2.csv", "date,close", "2020-01-03,101.01", "2020-01-06,102", "2020-01-07,103")
    vol = write("v2.csv", "date,vol", "2020-01-03,1.7", "2020-01-06,1.75", "2020-01-07,1.9")
    ran = daily("load", "x", "--append", "--prices", prices, "--vol", vol)
    assert (ran.code, ran.out) == (3, "")
    assert ran.err == (
        "rollband: the files do not agree with what is stored as x; nothing was written. If the files are right, load "
        "the whole history again without --append.\n"
        "  2020-01-03 close: stored 101, in the files 101.01\n"
        "  2020-01-06 vol: stored 0.018, in the files 0.0175\n"
    )
    ran = daily("load", "x", "--append", "--prices", prices)
    assert (ran.code, ran.out) == (3, "")
    assert ran.err == (
        "rollband: x holds vol, and the files do not: give a file with it (--vol); nothing was written\n"
    )
    assert version(home) == before
    assert sorted(path.name for path in (home / "histories").iterdir()) == ["x.parquet"]
    ran = daily("load", "y", "--append", "--prices", prices)
    assert (ran.code, ran.out) == (3, "")
    assert ran.err == "rollband: there is no history 'y' in histories. It holds: x\n"


# ---------------------------------------------------------------- listed


def test_an_empty_store(rollband: Run, home: Path) -> None:
    ran = rollband("histories")
    assert (ran.code, ran.err) == (0, "")
    assert ran.out == "histories holds no history yet: rollband load NAME --prices FILE makes one.\n"
    ran = rollband("histories", "--store", "my store", "--json")
    assert json.loads(ran.out) == {"schema": 1, "store": "my store", "histories": []}
    ran = rollband("histories", "x")
    assert (ran.code, ran.out) == (3, "")
    assert "there is no history 'x': histories holds none yet" in ran.err
    assert rollband("histories", "../x").code == 3
    assert rollband("histories", "--prune", 3).code == 0
    assert list(home.iterdir()) == []


def test_the_list(twice: Run, home: Path, write: Any, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setenv("COLUMNS", "140")
    then = version(home)
    assert twice("load", "x", "--prices", "p.csv").code == 0
    vol = write("v.csv", "date,30,93", *(f"2020-01-0{day},20,21" for day in (2, 6, 7, 8)))
    assert twice("load", "with-vol", "--prices", "p.csv", "--vol", vol).code == 0
    os.utime(home / "histories" / "x.parquet", (THEN + 3600, THEN + 3600))
    os.utime(home / "histories" / "with-vol.parquet", (THEN + 7200, THEN + 7200))
    (home / "histories" / "bad.parquet").write_bytes(b"no such thing")
    (home / "histories" / "notes.txt").write_text("mine")
    os.utime(home / "histories" / "bad.parquet", (THEN, THEN))
    ran = twice("histories")
    assert (ran.code, ran.err) == (0, "")
    lines = [" ".join(line.split()) for line in ran.out.splitlines()]
    assert lines[0] == "from to days versions last loaded, UTC holds"
    assert lines[1] == "bad 1 2020-09-13 12:26 cannot be read"
    assert lines[2] == (
        "with-vol 2020-01-02 2020-01-08 4 1 2020-09-13 14:26 prices (close, open), vol of 30 and 93 days"
    )
    assert lines[3] == "x 2020-01-02 2020-01-08 4 2 2020-09-13 13:26 prices (close, open)"
    assert "\nbad: histories/bad.parquet cannot be read as a history (" in ran.out
    assert ran.out.endswith("rollband histories NAME lists those of one.\n")
    told = json.loads(twice("histories", "--json").out)
    assert [one["name"] for one in told["histories"]] == ["bad", "with-vol", "x"]
    assert told["histories"][0]["problem"].startswith("histories/bad.parquet cannot be read as a history (")
    kept = f"histories/.versions/x/000001-20200913T122640Z-{then}.parquet"
    assert told["histories"][2] == {
        "name": "x", "problem": None, "first": "2020-01-02", "last": "2020-01-08", "days": 4,
        "usable_from": "2020-01-02", "columns": ["close", "open"],
        "files": [{"kind": "prices", "file": "p.csv", "sha256": sha256_of(home / "p.csv")}],
        "last_loaded": "2020-09-13T13:26:40Z",
        "versions": [
            {
                "name": "x", "sha256": then, "loaded": "2020-09-13T12:26:40Z", "bytes": (home / kept).stat().st_size,
                "current": False, "file": kept,
            },
            {
                "name": "x", "sha256": version(home), "loaded": "2020-09-13T13:26:40Z",
                "bytes": (home / "histories" / "x.parquet").stat().st_size, "current": True,
                "file": "histories/x.parquet",
            },
        ],
    }  # fmt: skip


def test_one_history_with_its_versions(twice: Run, home: Path) -> None:
    then = version(home)
    assert twice("load", "x", "--prices", "p.csv").code == 0
    os.utime(home / "histories" / "x.parquet", (THEN + 3600, THEN + 3600))
    now = version(home)
    expected = (
        "x\n"
        "  holds: prices (close, open); every series has a value from 2020-01-02 on\n"
        f"  prices: p.csv, sha256 {sha256_of(home / 'p.csv')}\n"
        "\n"
        f"Version {then[:12]}, loaded 2020-09-13 12:26 UTC\n"
        f"  histories/.versions/x/000001-20200913T122640Z-{then}.parquet\n"
        "  2020-01-02 to 2020-01-06, 3 days\n"
        "\n"
        f"Version {now[:12]}, loaded 2020-09-13 13:26 UTC, the one in use\n"
        "  histories/x.parquet\n"
        "  2020-01-02 to 2020-01-08, 4 days\n"
        "  rows: 2 (2020-01-07 to 2020-01-08) added, 1 (2020-01-03) gone\n"
        "  new: open\n"
        "  no longer there: volume\n"
        "  close: 1 value revised, on 2020-01-06 from 102 to 102.5\n"
    )
    assert twice("histories", "x").out == expected
    # from another store, the same
    (home / "histories").rename(home / "moved")
    assert twice("histories", "x", "--store", "moved").out == expected.replace("histories/", "moved/")
    (home / "moved" / "x.parquet").unlink()
    ran = twice("histories", "x", "--store", "moved")
    assert ran.code == 0
    assert ran.out.startswith("x\n  x is no longer there, only former versions of it are\n\n")


def test_prune(twice: Run, home: Path, write: Any) -> None:
    for day in range(1, 5):
        write("q.csv", "date,close", f"2020-02-0{day},1")
        for name in ("x", "y"):
            assert twice("load", name, "--prices", "q.csv").code == 0

    def counts() -> dict[str, int]:
        return {one["name"]: len(one["versions"]) for one in json.loads(twice("histories", "--json").out)["histories"]}

    assert counts() == {"x": 5, "y": 4}
    ran = twice("histories", "x", "--prune", 2)
    assert ran.code == 0
    assert ran.out.startswith("2 former versions let go (")
    assert counts() == {"x": 3, "y": 4}
    told = json.loads(twice("histories", "--prune", 0, "--json").out)
    assert [one["name"] for one in told["pruned"]] == ["x", "x", "y", "y", "y"]
    assert counts() == {"x": 1, "y": 1}
    assert twice("histories", "--prune", 0).out.startswith("0 former versions let go (0 bytes).\n")
    assert twice("histories", "--prune", -1).code == 2
    assert read_history(home / "histories", "x").frame["close"].tolist() == [1.0]


# ---------------------------------------------------------------- what results say


def test_results_name_the_version_they_used(stored: Run, home: Path, files: list[object]) -> None:
    assert stored("replay", "mine", "--put", 95, "--out", "o").code == 0
    then = json.loads((home / "o" / "manifest.json").read_text())["source"]["sha256"]
    assert then == version(home, "mine")
    assert stored("load", "mine", *files, "--from", "2001-01-01").code == 0
    assert stored("replay", "mine", "--put", 95, "--out", "p").code == 0
    now = json.loads((home / "p" / "manifest.json").read_text())["source"]["sha256"]
    (mine,) = json.loads(stored("histories", "--json").out)["histories"]
    assert [(one["sha256"], one["current"]) for one in mine["versions"]] == [(then, False), (now, True)]


def test_a_load_between_reading_and_writing_is_not_named(
    stored: Run, home: Path, files: list[object], monkeypatch: pytest.MonkeyPatch
) -> None:
    """The manifest names what was read, even where the history is loaded anew while it is being replayed."""
    import studies.answer_folder

    then = version(home, "mine")
    replay_of = studies.answer_folder.replay_of

    def slow(frame: Any, *rest: Any, **named: Any) -> Any:
        (home / "histories" / "other.parquet").replace(home / "histories" / "mine.parquet")
        return replay_of(frame, *rest, **named)

    assert stored("load", "other", *files, "--from", "2001-01-01").code == 0
    monkeypatch.setattr(studies.answer_folder, "replay_of", slow)
    assert stored("replay", "mine", "--put", 95, "--out", "o").code == 0
    manifest = json.loads((home / "o" / "manifest.json").read_text())
    assert manifest["source"]["sha256"] == then != version(home, "mine")
    assert manifest["settings"]["history"]["first"] == "1999-01-04"
