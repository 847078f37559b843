"""Audits of a study's folder: all rows or some of them, tampered tables and summaries, hostile manifests.

Rung: behaviour (folders made here and changed by hand; every sentence is asserted). That rows drawn alone come out as
in the whole study is an identity.
"""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest

from data_loaders import History
from data_loaders.store import prune_versions, write_history
from studies.audit import DIFFERS, OTHER_DATA, SAME, audit_folder
from studies.errors import ResultsError
from studies.results import sha256_of, write_parquet
from studies.study import Axis, Study
from studies.study_folder import make_study_folder
from tests.studies.audit_homes import copy_home, edit, sentences, without_study_page

STUDY = Study(
    question="Which put?",
    histories=("late", "early"),
    overlay={"leg": [{"position": "long", "right": "put", "strike": {"percent_of_spot": 95}}]},
    axes=(
        Axis(name="put strike", fields=("leg.1.strike.percent_of_spot",), values=(85, 90, 95)),
        Axis(name="roll", fields=("leg.1.roll",), values=("month", "quarter")),
    ),
    resamples=100,
)
#: Of each history, and of both.
EACH, ROWS = 6, 12


@pytest.fixture(scope="module")
def made(tmp_path_factory: pytest.TempPathFactory, demo_history: History) -> Path:
    """A study on two histories; the first spans a turn of decade and so has a block of days more."""
    home = tmp_path_factory.mktemp("study")
    for name, frame in (
        ("late", demo_history.frame.loc["2018":"2021"]),
        ("early", demo_history.frame.loc["2011":"2013"]),
    ):
        write_history(replace(demo_history, frame=frame), home / "histories", name)
    with pytest.MonkeyPatch.context() as patch:
        without_study_page(patch)
        patch.chdir(home)
        make_study_folder(STUDY, Path("results"), store=Path("histories"))
    return home


@pytest.fixture
def home(made: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    return copy_home(made, tmp_path, monkeypatch)


@pytest.fixture
def unrun(monkeypatch: pytest.MonkeyPatch) -> None:
    """No overlay may be replayed."""

    def refuse(*args: Any, **kwargs: Any) -> None:
        raise AssertionError("a study was run")

    monkeypatch.setattr("studies.audit.run_plan", refuse)


def test_the_same(home: Path) -> None:
    found = audit_folder(Path("results"))
    assert (found.kind, found.verdict, found.differences, found.sample, found.notes) == ("study", SAME, (), None, ())
    assert found.compared == ("overlays.parquet", "periods.parquet", "summary.json")
    # as many rows as there are is all of them
    assert audit_folder(Path("results"), sample=ROWS).compared == found.compared


@pytest.mark.parametrize("seed", range(4))
def test_rows_drawn_alone_are_the_same(home: Path, seed: int) -> None:
    periods = pd.read_parquet(home / "results" / "periods.parquet")
    # the early rows lack the last block: those drawn from them alone have fewer columns
    assert periods.iloc[EACH:, -1].isna().all()
    assert periods.iloc[:EACH].notna().all(axis=None)
    assert any(drawn(1, each)[0] >= EACH for each in range(4))
    for rows in (1, 5):
        found = audit_folder(Path("results"), sample=rows, seed=seed)
        assert (found.verdict, found.differences) == (SAME, ())
        assert found.sample == {"rows": rows, "of": ROWS, "seed": seed}
        assert found.compared == ("overlays.parquet", "periods.parquet")


def drawn(rows: int, seed: int) -> list[int]:
    return sorted(np.random.default_rng(seed).choice(ROWS, size=rows, replace=False).tolist())


def test_a_changed_overlay(home: Path) -> None:
    file = home / "results" / "overlays.parquet"
    overlays: Any = pd.read_parquet(file)
    row = drawn(2, seed=3)[1]
    was = float(overlays.loc[row, "sharpe"])
    overlays.loc[row, "sharpe"] = was + 0.25
    write_parquet(file, overlays)
    strike, roll = [85, 90, 95][row % EACH // 2], ["month", "quarter"][row % 2]
    place = f"of row {row} ({'late' if row < EACH else 'early'}, put strike {strike}, roll {roll})"
    said = (
        f"overlays.parquet: 'sharpe' {place} is {was + 0.25!r} in the folder, {was!r} made again; 1 value differs, "
        f"the largest difference is 0.25 ('sharpe' {place})"
    )
    for sample in (None, 2):
        found = audit_folder(Path("results"), sample=sample, seed=3)
        assert (found.verdict, sentences(found)) == (DIFFERS, [said])
    # and is not found where it is not drawn
    other = next(seed for seed in range(100) if row not in drawn(2, seed))
    assert audit_folder(Path("results"), sample=2, seed=other).verdict == SAME


@pytest.mark.parametrize("sample", [None, ROWS - 1])
def test_a_changed_block(home: Path, sample: int | None) -> None:
    file = home / "results" / "periods.parquet"
    periods: Any = pd.read_parquet(file)
    last, row = periods.columns[-1], drawn(ROWS - 1, seed=1)[-1]
    assert row >= EACH
    periods.loc[row, last] = 1.0  # where there is no such block
    write_parquet(file, periods)
    (said,) = sentences(audit_folder(Path("results"), sample=sample))
    assert said.startswith(f"periods.parquet: '{last}' of row {row} (early, ")
    assert said.endswith("is 1.0 in the folder, nothing made again; 1 value differs")


def test_a_changed_summary(home: Path) -> None:
    edit(home / "results" / "summary.json", "groups", value=[])
    edit(home / "results" / "summary.json", "question", value="Why?")
    assert sentences(audit_folder(Path("results"))) == [
        'summary.json: question is "Why?" in the folder, "Which put?" made again',
        "summary.json: groups has 0 entries in the folder, 2 made again",
    ]


@pytest.mark.parametrize("file", ["overlays.parquet", "periods.parquet"])
@pytest.mark.parametrize("sample", [None, 2])
def test_rows_are_counted_before_anything_is_run(home: Path, unrun: None, file: str, sample: int | None) -> None:
    path = home / "results" / file
    write_parquet(path, pd.read_parquet(path).iloc[1:])
    found = audit_folder(Path("results"), sample=sample)
    assert (found.verdict, found.sample) == (DIFFERS, None)
    assert sentences(found) == [f"{file}: has 11 rows, and the study in manifest.json has 12"]
    path.write_bytes(path.read_bytes()[:-9])
    (said,) = sentences(audit_folder(Path("results"), sample=sample))
    assert said.startswith(f"{file}: cannot be read: ")
    path.unlink()
    assert sentences(audit_folder(Path("results"), sample=sample)) == [f"{file}: is missing"]


def test_a_changed_setting(home: Path) -> None:
    manifest = home / "results" / "manifest.json"
    edit(manifest, "settings", "study", "overlay", "costs", "half_spread_vol", value=0.75)
    edit(manifest, "seed", value=5)
    found = audit_folder(Path("results"), sample=2)
    assert found.verdict == DIFFERS
    assert str(found.differences[0]) == "manifest.json: seed is 5 in the folder, 1 made again"
    assert [one.file for one in found.differences] == ["manifest.json", "overlays.parquet", "periods.parquet"]


LONG = {"from": 1, "to": 1000, "step": 1}
AXIS = {"fields": ["leg.1.strike.percent_of_spot"], "name": "a", "values": LONG}
HOSTILE: dict[str, tuple[tuple[str, ...], Any, str]] = {
    "10^9 combinations": (
        ("settings", "study", "axis"),
        [AXIS, {**AXIS, "name": "b"}, {**AXIS, "name": "c"}],
        "cannot be used: settings.study.axis: 1,000 x 1,000 x 1,000 = 1,000,000,000 combinations; the limit is "
        "1,000,000, before any are left out. Take wider steps or fewer axes",
    ),
    "no study": (("settings", "study"), "x", "has no table settings.study"),
    "no settings": (("settings",), None, "has no table settings"),
    "inputs": (("inputs",), {"a": 1}, "has no list of inputs"),
    "store": (("settings", "store"), 3, "cannot be used: store is 3, no path"),
    "resamples": (
        ("settings", "study", "resamples"),
        10**12,
        "cannot be used: settings.study.resamples: is 1000000000000; it takes a whole number from 0 to 10000",
    ),
    "outside": (
        ("settings", "study", "histories"),
        ["../late"],
        "cannot be used: settings.study.histories.1: '../late' (7 characters) cannot be the name of a history: use "
        "letters a-z, digits, '_' and '-', with '.' inside only, at most 64 characters, for example 'spx-1990'",
    ),
    "costs": (
        ("settings", "study", "overlay", "costs", "commission"),
        -1,
        "cannot be used: settings.study.overlay.costs.commission: commission is -1; it takes a number of at least 0",
    ),
}


@pytest.mark.parametrize("case", HOSTILE)
def test_a_hostile_manifest(home: Path, unrun: None, case: str) -> None:
    keys, value, problem = HOSTILE[case]
    edit(home / "results" / "manifest.json", *keys, value=value)
    with pytest.raises(ResultsError) as refused:
        audit_folder(Path("results"))
    assert str(refused.value) == f"results cannot be made again: its manifest.json {problem}"


def test_many_overlays_are_not_run_for_a_small_table(home: Path, unrun: None) -> None:
    axis = {"fields": ["costs.commission"], "name": "c", "values": {"from": 1, "to": 100_000, "step": 1}}
    edit(home / "results" / "manifest.json", "settings", "study", "axis", value=[axis])
    found = audit_folder(Path("results"))
    assert found.verdict == DIFFERS
    assert sentences(found)[-1] == "periods.parquet: has 12 rows, and the study in manifest.json has 200,000"


def load_early_anew(home: Path, demo_history: History) -> None:
    write_history(replace(demo_history, frame=demo_history.frame.loc["2011":"2014"]), home / "histories", "early")


@pytest.mark.parametrize("sample", [None, ROWS - 1])
def test_a_history_that_has_been_loaded_anew(home: Path, demo_history: History, sample: int | None) -> None:
    file = home / "histories" / "early.parquet"
    then = sha256_of(file)
    load_early_anew(home, demo_history)
    before = {path: path.read_bytes() for path in home.rglob("*") if path.is_file()}
    found = audit_folder(Path("results"), sample=sample)
    assert (found.verdict, found.changed, found.differences) == (SAME, (), ())
    assert [(one.history, one.sha256, one.now) for one in found.kept] == [("early", then, sha256_of(file))]
    assert {path: path.read_bytes() for path in home.rglob("*") if path.is_file()} == before
    file.unlink()
    assert [(one.history, one.now) for one in audit_folder(Path("results"), sample=1).kept] == [("early", None)]


def test_a_history_that_has_changed_or_is_gone(home: Path, demo_history: History) -> None:
    file = home / "histories" / "early.parquet"
    then = sha256_of(file)
    load_early_anew(home, demo_history)
    prune_versions(home / "histories", ["early"], 0)
    found = audit_folder(Path("results"))
    assert (found.verdict, found.compared) == (OTHER_DATA, ())
    assert [(one.file, one.then, one.now) for one in found.changed] == [
        ("histories/early.parquet", then, sha256_of(file))
    ]
    found = audit_folder(Path("results"), anyway=True, sample=ROWS - 1)
    assert (found.verdict, len(found.changed)) == (DIFFERS, 1)
    assert str(found.differences[0]).startswith("overlays.parquet: 'end' of row 6 (early, ")
    file.unlink()
    with pytest.raises(ResultsError) as refused:
        audit_folder(Path("results"))
    assert str(refused.value) == (
        "results cannot be made again: there is no histories/early.parquet; go to the folder in which it was made, or "
        "say with --store DIR where the histories are now"
    )
    with pytest.raises(ResultsError, match="results was made from stored histories: give --store, not --inputs"):
        audit_folder(Path("results"), inputs=Path())
