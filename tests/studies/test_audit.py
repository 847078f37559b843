"""Results folders made again: the same, or what differs; inputs that moved, changed or are gone; folders tampered with.

Rung: behaviour (folders made here and changed by hand; every sentence is asserted).
"""

from __future__ import annotations

import json
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.parquet as pq
import pytest

from data_loaders import History
from studies.audit import DIFFERS, SAME, audit_folder
from studies.errors import ResultsError
from studies.results import write_parquet
from tests.studies.audit_homes import copy_home, edit, make_home, once, sentences, two_years

#: From the third Friday of March 2020, a roll date, to the end of 2021.
DAYS = 451
Change = Callable[[Path], None]


@pytest.fixture(scope="module")
def made(tmp_path_factory: pytest.TempPathFactory, demo_history: History) -> Path:
    home = tmp_path_factory.mktemp("made")
    make_home(home, two_years(demo_history))
    return home


@pytest.fixture
def home(made: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    """A folder to spoil."""
    monkeypatch.setattr("studies.audit.make_numbers_again", once(made / "kept"))
    return copy_home(made, tmp_path, monkeypatch)


# ---------------------------------------------------------------- the same


def test_the_same(home: Path) -> None:
    before = {path: path.read_bytes() for path in home.rglob("*") if path.is_file()}
    found = audit_folder(Path("results"))
    assert (found.kind, found.verdict, found.differences, found.changed) == ("replay", SAME, (), ())
    assert found.compared == ("daily.parquet", "rolls.parquet", "summary.json")
    assert (found.versions, found.notes) == ({}, ())
    assert {path: path.read_bytes() for path in home.rglob("*") if path.is_file()} == before


def test_other_bytes_of_the_same_values(home: Path) -> None:
    daily = home / "results" / "daily.parquet"
    pq.write_table(pq.read_table(daily), daily, compression="none")
    summary = home / "results" / "summary.json"
    summary.write_text(json.dumps(json.loads(summary.read_text())))
    found = audit_folder(Path("results"))
    assert found.verdict == SAME
    assert found.notes == (
        "daily.parquet holds the same values in other bytes", "summary.json holds the same values in other bytes",
    )  # fmt: skip


# ---------------------------------------------------------------- tampered tables


def test_one_changed_number(home: Path) -> None:
    daily: Any = pd.read_parquet(home / "results" / "daily.parquet")
    was, day = float(daily.loc[7, "overlay"]), str(daily.loc[7, "date"].date())
    daily.loc[7, "overlay"] = 2.0
    write_parquet(home / "results" / "daily.parquet", daily)
    found = audit_folder(Path("results"))
    assert found.verdict == DIFFERS
    assert sentences(found) == [
        f"daily.parquet: 'overlay' on {day} is 2.0 in the folder, {was!r} made again; 1 value differs, "
        f"the largest difference is {2.0 - was:.3g} ('overlay' on {day})"
    ]
    (one,) = found.differences
    assert (one.then, one.now, one.largest) == (2.0, was, abs(2.0 - was))


def test_the_largest_of_many(home: Path) -> None:
    rolls: Any = pd.read_parquet(home / "results" / "rolls.parquet")
    assert rolls.loc[3, "right"] == "call"
    was = rolls.copy()
    rolls.loc[3, "strike"] += 0.25
    rolls.loc[1, "premium"] -= 7.0  # further right, and larger
    rolls.loc[2, "premium"] = np.nan  # no number: counted, not measured
    rolls.loc[1, "delta"] += 0.5
    rolls.loc[0, "flag"] = "odd"
    write_parquet(home / "results" / "rolls.parquet", rolls)
    found = audit_folder(Path("results"))
    opened = {row: str(was.loc[row, "opened"].date()) for row in (1, 3)}
    leg = {row: was.loc[row, "leg"] for row in (1, 3)}
    assert sentences(found) == [
        f"rolls.parquet: 'strike' of row 4 ({leg[3]}, opened {opened[3]}) is {float(rolls.loc[3, 'strike'])!r} in the "
        f"folder, {float(was.loc[3, 'strike'])!r} made again; 5 values differ, the largest difference is 7 "
        f"('premium' of row 2 ({leg[1]}, opened {opened[1]}))"
    ]


def _frame(change: Callable[[pd.DataFrame], pd.DataFrame]) -> Change:
    return lambda file: write_parquet(file, change(pd.read_parquet(file)))


def _table(change: Callable[[pa.Table], pa.Table]) -> Change:
    return lambda file: pq.write_table(change(pq.read_table(file)), file)


def _as(kind: pa.DataType) -> Callable[[pa.Table], pa.Table]:
    def change(table: pa.Table) -> pa.Table:
        place = table.column_names.index("hold")
        values = pa.array([None] * len(table), type=kind)
        return table.set_column(place, "hold", values)

    return change


def _bytes(file: Path, content: bytes) -> None:
    file.write_bytes(content)


def _emptied(file: Path) -> None:
    file.unlink()
    file.mkdir()


TAMPERED: dict[str, tuple[Change, str]] = {
    "missing": (lambda file: file.unlink(), "is missing"),
    "a folder": (_emptied, "is missing"),
    "truncated": (
        lambda file: _bytes(file, file.read_bytes()[:-40]),
        "cannot be read: ",
    ),
    "empty": (lambda file: _bytes(file, b""), "cannot be read: "),
    "a row less": (_frame(lambda f: f.iloc[1:]), f"has {DAYS - 1} rows in the folder, {DAYS} made again"),
    "a column less": (
        _frame(lambda f: f.drop(columns="hold")),
        "has no column 'hold', which is there when made again",
    ),
    "a column more": (
        _frame(lambda f: f.assign(**{"x\x1b": 1.0})),
        "has a column 'x\\x1b', which is not there when made again",
    ),
    "another order": (_frame(lambda f: f[f.columns[::-1]]), "has its columns in another order than made again"),
    "text": (_table(_as(pa.string())), "column 'hold' holds text in the folder, double made again"),
    "lists": (
        _table(_as(pa.list_(pa.float64()))),
        "column 'hold' holds lists in the folder, double made again",
    ),
    "a zone": (
        _table(_as(pa.timestamp("us", "UTC"))),
        "column 'hold' holds timestamp[us, tz=UTC] in the folder, double made again",
    ),
    "a name twice": (_table(lambda t: t.append_column("hold", t["hold"])), "has two columns of one name"),
}


@pytest.mark.parametrize("case", TAMPERED)
def test_a_spoilt_table(home: Path, case: str) -> None:
    change, problem = TAMPERED[case]
    daily = home / "results" / "daily.parquet"
    assert pq.ParquetFile(daily).metadata.num_rows == DAYS
    change(daily)
    found = audit_folder(Path("results"))
    (said,) = sentences(found)
    assert found.verdict == DIFFERS
    # the reason that the library gives is in its own words
    assert (
        said.startswith(f"daily.parquet: {problem}") if problem.endswith(": ") else said == f"daily.parquet: {problem}"
    )


def test_another_date_and_a_missing_number(home: Path) -> None:
    daily: Any = pd.read_parquet(home / "results" / "daily.parquet")
    last = str(daily["date"].iloc[-1].date())
    daily.loc[DAYS - 1, "date"] = pd.Timestamp("2031-01-01")
    daily.loc[DAYS - 1, "delta"] = np.nan
    write_parquet(home / "results" / "daily.parquet", daily)
    (said,) = sentences(audit_folder(Path("results")))
    # a date has no size of difference, and neither has a number that is not there
    assert said == (
        f'daily.parquet: \'date\' on {last} is "2031-01-01" in the folder, "{last}" made again; 2 values differ'
    )


# ---------------------------------------------------------------- a tampered summary


def test_a_changed_summary(home: Path) -> None:
    file = home / "results" / "summary.json"
    told = json.loads(file.read_text())
    sharpe, beta = told["overlay"]["sharpe"], told["overlay"]["beta"]
    told["overlay"]["sharpe"] = float(np.nextafter(sharpe, 1.0))  # by the last bit
    told["name"] = "\x1b[31m" + "x" * 100
    del told["hold"]["ulcer"]
    told["overlay"]["beta"] = {"a": 1}
    told["odd"] = True
    told["smile_ladder"]["flat"]["used"] = 0  # was false
    file.write_text(json.dumps(told))
    found = audit_folder(Path("results"))
    assert found.verdict == DIFFERS
    assert sentences(found) == [
        f'summary.json: name is "\\x1b[31m{"x" * 69}..." in the folder, "quarterly 95 put, quarterly 110 call" made '
        "again",
        f"summary.json: overlay.sharpe is {told['overlay']['sharpe']!r} in the folder, {sharpe!r} made again",
        f"summary.json: overlay.beta is a table in the folder, {beta!r} made again",
        "summary.json: hold.ulcer is not in the folder",
        "summary.json: smile_ladder.flat.used is 0 in the folder, false made again",
        "summary.json: 1 more value differs",
    ]


def test_only_the_first_keys_are_told(home: Path) -> None:
    file = home / "results" / "summary.json"
    told = json.loads(file.read_text())
    changed = [key for key, value in told["hold"].items() if isinstance(value, float)]
    told["hold"] |= {key: told["hold"][key] + 1.0 for key in changed}
    file.write_text(json.dumps(told))
    found = sentences(audit_folder(Path("results")))
    assert len(found) == 6
    assert found[-1] == f"summary.json: {len(changed) - 5} more values differ"


@pytest.mark.parametrize(
    ("text", "problem"),
    [
        ("", "cannot be read: Expecting value: line 1 column 1 (char 0)"),
        ("[1]", "cannot be read: it holds no table"),
        ('{"a": NaN}', "cannot be read: NaN is no number in JSON"),
        ('{"a": 1e999}', "holds a number too large for any computer"),
        ('{"a": 99999999999999999999}', "holds a whole number of 20 digits or more"),
        ('{"a": ' + "[" * 60 + "]" * 60 + "}", "holds tables in tables, more than 30 deep"),
        ('{"a": ' + "[" * 100_000, "holds tables in tables, more than 30 deep"),
    ],
    ids=["empty", "list", "nan", "infinite", "digits", "deep", "abyss"],
)
def test_a_summary_that_is_none(home: Path, text: str, problem: str) -> None:
    (home / "results" / "summary.json").write_text(text)
    assert sentences(audit_folder(Path("results"))) == [f"summary.json: {problem}"]
    # the same of a manifest: then nothing can be had
    (home / "results" / "manifest.json").write_text(text)
    with pytest.raises(ResultsError) as refused:
        audit_folder(Path("results"))
    assert str(refused.value) == f"results cannot be made again: its manifest.json {problem}"


# ---------------------------------------------------------------- a changed manifest


@pytest.mark.parametrize(
    ("keys", "value", "files"),
    [
        (("seed",), 2, {"summary.json"}),
        (("settings", "rate"), 3.0, {"daily.parquet", "rolls.parquet", "summary.json"}),
        (("settings", "to"), "2021-06-30", {"daily.parquet", "rolls.parquet", "summary.json"}),
        (("settings", "overlay", "account"), "cash", {"daily.parquet", "rolls.parquet", "summary.json"}),
        (("settings", "history", "days"), 9, {"manifest.json"}),
        (("settings", "odd"), 9, {"manifest.json"}),
        (("history",), "other", {"manifest.json"}),
        (("inputs",), [], {"manifest.json"}),
    ],
    ids=lambda value: ".".join(value) if isinstance(value, tuple) else "",
)
def test_a_changed_setting(home: Path, keys: tuple[str, ...], value: Any, files: set[str]) -> None:
    edit(home / "results" / "manifest.json", *keys, value=value)
    found = audit_folder(Path("results"))
    assert (found.verdict, {one.file for one in found.differences}) == (DIFFERS, files)


def test_a_changed_setting_in_words(home: Path) -> None:
    edit(home / "results" / "manifest.json", "settings", "history", "days", value=9)
    edit(home / "results" / "manifest.json", "inputs", value=[])
    edit(home / "results" / "manifest.json", "versions", value={"numpy": "1.0\x1b", "pandas": 7})
    found = audit_folder(Path("results"))
    assert sentences(found) == [
        "manifest.json: inputs has 0 entries in the folder, 4 made again",
        "manifest.json: settings.history.days is 9 in the folder, 506 made again",
    ]
    assert found.versions["numpy"] == ("1.0\\x1b", np.__version__)
    assert found.versions["pandas"] == (None, pd.__version__)
    assert set(found.versions) == {"numpy", "pandas", "pyarrow", "scipy", "python"}


HOSTILE: dict[str, tuple[tuple[str, ...], Any, str]] = {
    "schema": (("schema",), 2, "is of schema 2; this version makes 1 again"),
    "schema true": (("schema",), True, "is of schema True; this version makes 1 again"),
    "no source": (("source",), None, "does not say where its data are: replay again, and audit that"),
    "settings": (("settings",), [1], "has no table settings"),
    "overlay": (("settings", "overlay"), 5, "has no table settings.overlay"),
    "unknown leg": (("settings", "overlay", "leg"), [7], "cannot be used: settings.overlay.leg.1: is 7; it takes a table with keys: position, right, strike, roll, roll_day, every, term, term_days, phase, shift_days, close_before, settlement, ratio, ladder, stagger, early, gate, reference"),  # noqa: E501
    "rate": (("settings", "rate"), 1e300, "asks for what cannot be replayed: --rate is 1e+300; it takes a number from -99 to 100 percent a year"),  # noqa: E501
    "resamples": (("settings", "resamples"), 10**9, "asks for what cannot be replayed: --resamples is 1000000000; it takes a whole number from 100 to 1000000"),  # noqa: E501
    "seed": (("seed",), "x", "asks for what cannot be replayed: --seed is 'x'; it takes a whole number from 0 to 4294967295"),  # noqa: E501
    "day": (("settings", "from"), "soon", 'cannot be used: settings.from: is "soon"; it takes a date such as 2009-12-31'),  # noqa: E501
    "window": (("settings", "to"), "1970-01-01", "asks for what cannot be replayed: "),
    "name outside": (("source", "history"), "../../demo", "cannot be used: '../../demo' is no name of a stored history"),  # noqa: E501
    "store": (("source", "store"), "a\0b", "cannot be used: store is 'a\\x00b', no path"),
    "files": (("source",), {"files": {"vol": "v.csv"}}, "cannot be used: source.files takes prices, vol, dividends, rates, signal, and prices at least"),  # noqa: E501
    "path": (("source",), {"files": {"prices": 3}}, "cannot be used: source.files.prices is 3, no path"),
    "unit": (("source",), {"files": {"prices": "p.csv"}, "vol_unit": 3}, "cannot be used: source.vol_unit is 3"),
}  # fmt: skip


@pytest.mark.parametrize("case", HOSTILE)
def test_a_hostile_manifest(home: Path, case: str) -> None:
    keys, value, problem = HOSTILE[case]
    edit(home / "results" / "manifest.json", *keys, value=value)
    with pytest.raises(ResultsError) as refused:
        audit_folder(Path("results"))
    assert str(refused.value).startswith(f"results cannot be made again: its manifest.json {problem}")
    assert len(str(refused.value)) < 500
