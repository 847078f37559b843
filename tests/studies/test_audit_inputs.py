"""Audits when inputs have moved, have changed or are gone; what is no results folder.

Rung: behaviour (folders made here and changed by hand; sentences and hashes are asserted).
"""

from __future__ import annotations

import os
from dataclasses import replace
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from data_loaders import DataProblems, History, load_history
from data_loaders.store import prune_versions, write_history
from studies.answer_folder import make_answer_folder
from studies.audit import DIFFERS, OTHER_DATA, SAME, audit_folder
from studies.audited import KeptVersion
from studies.errors import ResultsError
from studies.results import sha256_of
from tests.studies.audit_homes import BAND, copy_home, inputs_of, make_home, two_years


@pytest.fixture(scope="module")
def history(demo_history: History) -> History:
    return two_years(demo_history)


@pytest.fixture(scope="module")
def made(tmp_path_factory: pytest.TempPathFactory, history: History) -> Path:
    home = tmp_path_factory.mktemp("made")
    make_home(home, history)
    return home


@pytest.fixture
def home(made: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    return copy_home(made, tmp_path, monkeypatch)


# ---------------------------------------------------------------- a stored history


def test_a_store_that_has_moved(home: Path) -> None:
    (home / "histories").rename(home / "elsewhere")
    with pytest.raises(ResultsError) as refused:
        audit_folder(Path("results"))
    assert str(refused.value) == (
        "results cannot be made again: there is no histories/demo.parquet; go to the folder in which it was made, or "
        "say with --store DIR where the histories are now"
    )
    assert audit_folder(Path("results"), store=Path("elsewhere")).verdict == SAME


def load_anew(home: Path, history: History) -> None:
    """Store the history with one other close, from another price file."""
    frame = history.frame.copy()
    frame["close"] = np.where(np.arange(len(frame)) == 300, 1.01, 1.0) * frame["close"]
    sources = (replace(history.sources[0], sha256="ab" * 32), *history.sources[1:])
    write_history(replace(history, frame=frame, sources=sources), home / "histories", "demo")


def test_a_stored_history_that_has_been_loaded_anew(home: Path, history: History) -> None:
    file = home / "histories" / "demo.parquet"
    then = sha256_of(file)
    os.utime(file, (1_600_000_000, 1_600_000_000))  # 2020-09-13 12:26:40 UTC
    load_anew(home, history)
    found = audit_folder(Path("results"))
    assert (found.verdict, found.changed, found.differences) == (SAME, (), ())
    (kept,) = found.kept
    assert kept == KeptVersion(
        history="demo", file=f"histories/.versions/demo/000001-20200913T122640Z-{then}.parquet", sha256=then,
        loaded="2020-09-13 12:26", now=sha256_of(file),
    )  # fmt: skip
    # leave to go on with what has changed is not needed, and changes nothing
    assert audit_folder(Path("results"), anyway=True) == found
    # of two versions of then, the one whose content is right
    kept_file = home / kept.file
    kept_file.rename(home / "aside")
    kept_file.write_bytes(b"another file of that name")
    kept_file.with_name(f"000007-20210101T000000Z-{then}.parquet").write_bytes((home / "aside").read_bytes())
    (kept,) = audit_folder(Path("results")).kept
    assert kept.loaded == "2021-01-01 00:00"
    # back to what it was: no version is needed
    write_history(history, home / "histories", "demo")
    assert audit_folder(Path("results")).kept == ()
    # and without the history itself
    file.unlink()
    found = audit_folder(Path("results"))
    assert (found.verdict, [one.now for one in found.kept]) == (SAME, [None])


def test_a_stored_history_of_which_the_version_is_not_kept(home: Path, history: History) -> None:
    file = home / "histories" / "demo.parquet"
    then = sha256_of(file)
    load_anew(home, history)
    (kept,) = audit_folder(Path("results")).kept
    # a version that is not what it is called is none
    (home / kept.file).write_bytes(b"PAR1 half a file")
    assert audit_folder(Path("results")).verdict == OTHER_DATA
    prune_versions(home / "histories", ["demo"], 0)
    found = audit_folder(Path("results"))
    assert (found.verdict, found.compared, found.differences, found.kept) == (OTHER_DATA, (), (), ())
    assert [(one.file, one.then, one.now) for one in found.changed] == [
        ("histories/demo.parquet", then, sha256_of(file)),
        ("prices.csv", history.sources[0].sha256, "ab" * 32),
    ]
    found = audit_folder(Path("results"), anyway=True)
    assert (found.verdict, len(found.changed)) == (DIFFERS, 2)
    assert {one.file for one in found.differences} == {"daily.parquet", "summary.json"}
    day = history.frame.index[300].date()
    assert str(found.differences[0]).startswith(f"daily.parquet: 'overlay' on {day} is ")


def test_options_that_do_nothing_are_refused(home: Path) -> None:
    with pytest.raises(ResultsError, match="results was made from a stored history: give --store, not --inputs"):
        audit_folder(Path("results"), inputs=Path())
    with pytest.raises(ResultsError, match="results holds one replay: --sample is for the many rows of a study"):
        audit_folder(Path("results"), sample=3)


# ---------------------------------------------------------------- files

ROWS = [
    f"{day:%Y-%m-%d},{100 + 5 * np.sin(number / 9):.4f}"
    for number, day in enumerate(pd.bdate_range("2019-01-01", periods=400))
]


@pytest.fixture
def direct(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    """A replay of a price file alone, typed as ``in/p.csv``."""
    folder = tmp_path / "direct"
    (folder / "in").mkdir(parents=True)
    monkeypatch.chdir(folder)
    (folder / "in" / "p.csv").write_text("\n".join(["date,close", *ROWS]))
    history = load_history(prices=Path("in/p.csv"))
    make_answer_folder(
        history.frame, BAND, label="p", inputs=inputs_of(history), notes=history.notes, out=folder / "results",
        source={"files": {"prices": "in/p.csv"}, "vol_unit": None}, resamples=100,
    )  # fmt: skip
    return folder


def test_files_that_moved_or_changed(direct: Path) -> None:
    assert audit_folder(Path("results")).verdict == SAME
    then = sha256_of(Path("in/p.csv"))
    (direct / "now" / "a").mkdir(parents=True)
    (direct / "now" / "b").mkdir()
    Path("in/p.csv").rename("now/b/p.csv")
    Path("now/a/p.csv").write_text("another file of that name")
    with pytest.raises(ResultsError) as refused:
        audit_folder(Path("results"))
    gone = "go to the folder in which it was made, or say with --inputs DIR where the files are now"
    assert str(refused.value) == f"results cannot be made again: there is no in/p.csv; {gone}"
    with pytest.raises(ResultsError) as refused:
        audit_folder(Path("results"), inputs=Path("in"))
    assert str(refused.value) == f"results cannot be made again: there is no in/p.csv (nor below in); {gone}"
    # of two files of that name, the one with the right content
    assert audit_folder(Path("results"), inputs=Path("now")).verdict == SAME
    with pytest.raises(ResultsError, match="results was made from files: give --inputs, not --store"):
        audit_folder(Path("results"), store=Path("now"))
    with pytest.raises(ResultsError, match="--inputs nowhere is no folder"):
        audit_folder(Path("results"), inputs=Path("nowhere"))

    # a line break more is another file with the same numbers
    Path("in/p.csv").write_text("\n".join(["date,close", *ROWS, ""]))
    found = audit_folder(Path("results"))
    now = sha256_of(Path("in/p.csv"))
    assert [(one.file, one.then, one.now) for one in found.changed] == [("in/p.csv", then, now)]
    assert (found.verdict, found.compared) == (OTHER_DATA, ())
    found = audit_folder(Path("results"), anyway=True)
    assert (found.verdict, len(found.changed), found.differences) == (SAME, 1, ())

    Path("in/p.csv").write_text("date,close\n2019-01-01,-5\n")
    assert audit_folder(Path("results")).verdict == OTHER_DATA
    with pytest.raises(DataProblems, match=r"p\.csv, line 2, column close: '-5' is not above 0"):
        audit_folder(Path("results"), anyway=True)


def test_what_is_no_results_folder(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.chdir(tmp_path)
    with pytest.raises(ResultsError) as refused:
        audit_folder(Path("no"))
    assert str(refused.value) == "there is no folder no: give the results folder of a replay or a study"
    Path("no").mkdir()
    with pytest.raises(ResultsError) as refused:
        audit_folder(Path("no"))
    assert str(refused.value) == "no cannot be made again: it has no manifest.json, so it is no results folder"
