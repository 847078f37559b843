"""``rollband audit`` and ``rollband study --against`` as a person types them: texts, streams, exit codes.

Rung: behaviour (what was made is spoilt by hand).
"""

from __future__ import annotations

import json
import os
import shutil
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest

from studies.results import sha256_of, write_parquet
from tests.studies.audit_homes import edit, without_study_page

Run = Callable[..., Any]

NOT_COMPARED = "Not compared: pages, pictures and what else is in the folder.\n"
IN_A_SAMPLE = "Not compared: summary.json, pages, pictures and what else is in the folder.\n"
STUDY = """\
question = "Which put?"
histories = ["mine"]
resamples = 0
[[overlay.leg]]
position = "long"
right = "put"
strike = { percent_of_spot = 95 }
[[axis]]
name = "put strike"
field = "leg.1.strike.percent_of_spot"
values = [85, 90, 95]
"""


@pytest.fixture
def short(rollband: Run, files: list[object], monkeypatch: pytest.MonkeyPatch) -> Run:
    """Two years of the market loaded as ``mine``."""
    without_study_page(monkeypatch)
    assert rollband("load", "mine", *files, "--from", "2020-01-01", "--to", "2021-12-31").code == 0
    return rollband


@pytest.fixture
def replayed(short: Run) -> Run:
    """A replay of it in ``o``."""
    assert short("replay", "mine", "--put", 95, "--out", "o", "--resamples", 100).code == 0
    return short


@pytest.fixture
def studied(short: Run, home: Path) -> Run:
    """A study of it in ``s``."""
    (home / "which.toml").write_text(STUDY)
    assert short("study", "which.toml", "--out", "s", "--workers", 1).code == 0
    return short


# ---------------------------------------------------------------- replays


def test_the_same_and_different(replayed: Run, home: Path) -> None:
    ran = replayed("audit", "o")
    assert (ran.code, ran.err) == (0, "")
    assert ran.out == (
        "Same: daily.parquet, rolls.parquet and summary.json of o come out again, value for value.\n" + NOT_COMPARED
    )
    # where the folder itself stands does not matter
    shutil.move(home / "o", home / "p")
    daily: Any = pd.read_parquet(home / "p" / "daily.parquet")
    was, day = float(daily.loc[3, "hold"]), daily.loc[3, "date"].date()
    daily.loc[3, "hold"] = was + 1.0
    write_parquet(home / "p" / "daily.parquet", daily)
    edit(home / "p" / "manifest.json", "versions", "numpy", value="1.0")
    ran = replayed("audit", "p")
    assert (ran.code, ran.err) == (4, "")
    assert ran.out == (
        "Different: p does not come out again from its manifest.\n"
        f"  daily.parquet: 'hold' on {day} is {was + 1.0!r} in the folder, {was!r} made again; 1 value differs, the "
        f"largest difference is 1 ('hold' on {day})\n"
        f"Versions differ: numpy 1.0, now {np.__version__}.\n" + NOT_COMPARED
    )
    ran = replayed("audit", "p", "--json")
    assert (ran.code, ran.err) == (4, "")
    told = json.loads(ran.out)
    assert {key: told[key] for key in ("schema", "folder", "kind", "verdict", "sample", "changed_inputs")} == {
        "schema": 1, "folder": "p", "kind": "replay", "verdict": "differs", "sample": None, "changed_inputs": [],
    }  # fmt: skip
    (one,) = told["differences"]
    assert (one["file"], one["where"], one["then"], one["now"]) == ("daily.parquet", f"'hold' on {day}", was + 1.0, was)
    assert told["other_versions"] == {"numpy": {"then": "1.0", "now": np.__version__}}


def test_a_version_that_the_store_has_kept(replayed: Run, home: Path, files: list[object]) -> None:
    file = home / "histories" / "mine.parquet"
    then = sha256_of(file)
    os.utime(file, (1_600_000_000, 1_600_000_000))  # 2020-09-13 12:26:40 UTC
    assert replayed("load", "mine", *files, "--from", "2020-01-01", "--to", "2021-11-30").code == 0
    now = sha256_of(file)
    ran = replayed("audit", "o")
    assert (ran.code, ran.err) == (0, "")
    same = "Same: daily.parquet, rolls.parquet and summary.json of o come out again, value for value.\n"
    version = f"  history: version {then[:12]} of mine, loaded 2020-09-13 12:26 UTC, which the store has kept; mine "
    assert ran.out == f"{same}{version}has been loaded anew since ({now[:12]} now)\n{NOT_COMPARED}"
    told = json.loads(replayed("audit", "o", "--json").out)
    assert (told["verdict"], told["changed_inputs"]) == ("same", [])
    assert told["kept_versions"] == [{
        "history": "mine", "file": f"histories/.versions/mine/000001-20200913T122640Z-{then}.parquet", "sha256": then,
        "loaded": "2020-09-13 12:26", "now": now,
    }]  # fmt: skip
    file.unlink()
    assert replayed("audit", "o").out == f"{same}{version}is no longer there itself\n{NOT_COMPARED}"


def test_other_data(replayed: Run, home: Path, files: list[object]) -> None:
    then = sha256_of(home / "histories" / "mine.parquet")
    assert replayed("load", "mine", *files, "--from", "2020-01-01", "--to", "2021-11-30").code == 0
    assert replayed("histories", "--prune", 0).code == 0
    now = sha256_of(home / "histories" / "mine.parquet")
    changed = f"  histories/mine.parquet: sha256 was {then}, is {now}\n"
    ran = replayed("audit", "o")
    assert (ran.code, ran.err) == (4, "")
    assert ran.out == (
        f"Other data: o was made from inputs that have changed since.\n{changed}"
        "Nothing was made again; --anyway does so with the inputs of now.\n"
    )
    told = json.loads(replayed("audit", "o", "--json").out)
    assert (told["verdict"], told["compared"], told["kept_versions"]) == ("other data", [], [])
    assert told["changed_inputs"] == [{"file": "histories/mine.parquet", "then": then, "now": now}]
    ran = replayed("audit", "o", "--anyway")
    assert ran.code == 4
    assert ran.out.startswith(
        f"Made again with inputs that have changed since:\n{changed}"
        "Different: o does not come out again from its manifest.\n"
        '  manifest.json: settings.history.last is "2021-12-31" in the folder, "2021-11-30" made again\n'
    )


def test_files_as_they_were_typed(short: Run, home: Path, market: Path) -> None:
    typed = []
    (home / "in").mkdir()
    for kind in ("prices", "vol", "dividends", "rates"):
        shutil.copy(market / f"{kind}.csv", home / "in")
        typed += [f"--{kind}", f"in/{kind}.csv"]
    # vols need not reach beyond --to
    vols = (market / "vol.csv").read_text().splitlines()
    (home / "in" / "vol.csv").write_text("\n".join(line for line in vols if line[:7] <= "2021-06" or "date" in line))
    window = ["--from", "2020-01-01", "--to", "2021-06-30", "--vol-unit", "percent", "--rate", 2]
    assert short("replay", *typed, *window, "--put", 90, "--out", "o", "--resamples", 100).code == 0
    source = json.loads((home / "o" / "manifest.json").read_text())["source"]
    assert source == {
        "files": {kind: f"in/{kind}.csv" for kind in ("prices", "vol", "dividends", "rates")}, "vol_unit": "percent",
    }  # fmt: skip
    assert short("audit", "o").code == 0
    (home / "in").rename(home / "moved")
    ran = short("audit", "o")
    assert (ran.code, ran.out) == (5, "")
    assert ran.err == (
        "rollband: o cannot be made again: there is no in/prices.csv and no in/vol.csv and no in/dividends.csv and no "
        "in/rates.csv; go to the folder in which it was made, or say with --inputs DIR where the files are now\n"
    )
    assert short("audit", "o", "--inputs", "moved").code == 0
    (home / "moved" / "rates.csv").write_text("date,rate\n2020-01-02,400\n")
    assert short("audit", "o", "--inputs", "moved").code == 4
    ran = short("audit", "o", "--inputs", "moved", "--anyway")
    assert (ran.code, ran.out) == (3, "")
    assert "rates.csv, line 2, column rate: '400' percent a year is out of range" in ran.err


def test_the_demo_can_be_audited(rollband: Run) -> None:
    assert rollband("demo", "d").code == 0
    source = json.loads(Path("d/results/manifest.json").read_text())["source"]
    assert source == {
        "history": "demo", "store": "d/histories", "sha256": sha256_of(Path("d/histories/demo.parquet")),
    }  # fmt: skip
    assert rollband("audit", "d/results").code == 0


def test_refusals(replayed: Run, home: Path) -> None:
    for code, said, *command in (
        (5, "there is no folder no: give the results folder of a replay or a study", "audit", "no"),
        (
            5,
            "histories cannot be made again: it has no manifest.json, so it is no results folder",
            "audit",
            "histories",
        ),
        (5, "o was made from a stored history: give --store, not --inputs", "audit", "o", "--inputs", "."),
        (5, "o holds one replay: --sample is for the many rows of a study", "audit", "o", "--sample", 2),
        (2, "it is of the rows that --sample draws; there is no --sample", "audit", "o", "--seed", 2),
        (2, "Invalid value for '--sample'", "audit", "o", "--sample", 0),
        (2, "it takes a whole number from 1 to 256", "audit", "o", "--workers", 0),
    ):
        ran = replayed(*command)
        assert (ran.code, ran.out) == (code, "")
        assert said in " ".join(ran.err.replace("│", " ").split())
    (home / "o" / "manifest.json").write_text('{"schema": 1, "settings": {"overlay": [' + "[" * 9999)
    ran = replayed("audit", "o", "--json")
    assert (ran.code, ran.out) == (5, "")
    assert ran.err == "rollband: o cannot be made again: its manifest.json holds tables in tables, more than 30 deep\n"


# ---------------------------------------------------------------- studies


def test_a_study(studied: Run, home: Path) -> None:
    ran = studied("audit", "s")
    assert (ran.code, ran.err) == (0, "")
    assert ran.out == (
        "Same: overlays.parquet, periods.parquet and summary.json of s come out again, value for value.\n"
        + NOT_COMPARED
    )
    ran = studied("audit", "s", "--sample", 2, "--seed", 7)
    assert (ran.code, ran.err) == (0, "")
    assert ran.out == (
        "Same: 2 of 3 rows of overlays.parquet and periods.parquet (drawn with --seed 7) of s come out again, value "
        "for value.\n" + IN_A_SAMPLE
    )
    overlays: Any = pd.read_parquet(home / "s" / "overlays.parquet")
    was = float(overlays.loc[1, "beta"])
    overlays.loc[1, "beta"] = was + 0.5
    write_parquet(home / "s" / "overlays.parquet", overlays)
    for asked, heading in (
        ([], ""),
        (["--sample", 3], ""),
        (["--sample", 2], "Compared: 2 of 3 rows of overlays.parquet and periods.parquet (drawn with --seed 1).\n"),
    ):
        # seed 1 draws rows 0 and 1 of 3
        assert sorted(np.random.default_rng(1).choice(3, size=2, replace=False)) == [0, 1]
        ran = studied("audit", "s", *asked)
        assert ran.code == 4
        assert ran.out == (
            f"Different: s does not come out again from its manifest.\n{heading}"
            f"  overlays.parquet: 'beta' of row 1 (mine, put strike 90) is {was + 0.5!r} in the folder, {was!r} made "
            "again; 1 value differs, the largest difference is 0.5 ('beta' of row 1 (mine, put strike 90))\n"
            + (IN_A_SAMPLE if heading else NOT_COMPARED)
        )
    shutil.move(home / "histories", home / "kept")
    assert studied("audit", "s").code == 5
    assert studied("audit", "s", "--store", "kept", "--json").code == 4


def test_against(studied: Run, home: Path) -> None:
    (home / "dearer.toml").write_text(
        STUDY.replace("[85, 90, 95]", "[90, 95, 100]") + "[overlay.costs]\nhalf_spread_vol = 1.5\n"
    )
    ran = studied("study", "dearer.toml", "--out", "t", "--workers", 1, "--against", "s")
    assert (ran.code, ran.err) == (0, "")
    told = json.loads((home / "t" / "against.json").read_text())
    one, other = (pd.read_parquet(home / folder / "overlays.parquet").set_index("put strike") for folder in "ts")
    for name in ("annual_return", "information_ratio"):
        change = (one[name] - other[name]).dropna()
        assert len(change) == 2
        figure = told["figures"][name]
        assert figure["changed"] == 2
        assert figure["median_change"] == pytest.approx(change.median(), abs=1e-15)
        assert figure["largest_change"]["settings"] == f"put strike {change.abs().idxmax()}"
    assert told["settings"] == [{"key": "costs.half_spread_vol", "here": 1.5, "there": 0.5}]
    lines = [line.rstrip() for line in ran.out.splitlines()]
    start = lines.index("Against s")
    assert lines[start + 1 : start + 4] == [
        "Another setting: costs.half_spread_vol is 1.5 here, 0.5 there",
        "Overlays: 2 in both, 1 only here, 1 only there",
        "                       changed  median change  largest       of       to",
    ]
    assert lines[-1].endswith("against.json")
    # the comparison is no number of the study: an audit does not ask for it
    assert studied("audit", "t").code == 0
    # a study against what it replaces
    ran = studied("study", "dearer.toml", "--out", "t", "--workers", 1, "--against", "t")
    assert ran.code == 0
    assert "Overlays: 3 in both, 0 only here, 0 only there\n" in ran.out


def test_against_what_is_no_study_is_refused_before_anything_is_run(studied: Run, home: Path) -> None:
    before = sorted(path.name for path in home.iterdir())
    ran = studied("study", "which.toml", "--out", "t", "--against", "histories")
    assert (ran.code, ran.out) == (5, "")
    assert ran.err == "rollband: --against histories cannot be compared with: its manifest.json is missing\n"
    assert sorted(path.name for path in home.iterdir()) == before
