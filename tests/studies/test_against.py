"""A study compared with another's folder: which rows match, what changed, and what is said of it.

Rung: hand-worked (tables of a few rows, every number reckoned in a comment), behaviour (texts and refusals).
"""

from __future__ import annotations

import io
import json
from pathlib import Path
from types import SimpleNamespace
from typing import Any

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.parquet as pq
import pytest
from rich.console import Console

from studies.against import compare, read_other
from studies.against_terminal import show_against
from studies.batches import FIGURES
from studies.errors import ResultsError
from studies.results import plain, write_json, write_parquet
from studies.study import Axis, Study, study_to_table

PUT: dict[str, Any] = {"position": "long", "right": "put", "strike": {"percent_of_spot": 95}}
NAN = float("nan")


def strikes(*values: Any) -> Axis:
    return Axis(name="strike", fields=("leg.1.strike.percent_of_spot",), values=values)


def study(
    *axes: Axis, histories: tuple[str, ...] = ("demo",), comparison: str = "same-beta mix", **overlay: Any
) -> Study:
    return Study(
        question="Which?", histories=histories, overlay={"leg": [PUT], **overlay}, axes=axes, comparison=comparison
    )  # fmt: skip


def overlays(settings: dict[str, list[Any]], history: str | list[str] = "demo", **figures: list[float]) -> pd.DataFrame:
    """A study's table; figures that are not given are 1."""
    rows = len(next(iter(settings.values())))
    given = {name: figures.get(name, [1.0] * rows) for name in FIGURES}
    days = {name: pd.to_datetime([day] * rows) for name, day in (("inception", "2001-03-16"), ("end", "2009-12-31"))}
    return pd.DataFrame({"number": range(rows), "history": history, **settings, **days, **given})


def answer(asked: Study, table: pd.DataFrame, sums: dict[str, str] | None = None) -> Any:
    """As much of a study's answer as is compared."""
    entries = [{"history": name, "sha256": (sums or {}).get(name, "aa")} for name in asked.histories]
    return SimpleNamespace(plan=SimpleNamespace(study=asked, inputs=tuple(entries)), overlays=table)


def write(folder: Path, asked: Study, table: pd.DataFrame, sums: dict[str, str] | None = None) -> Path:
    """The same as a results folder."""
    folder.mkdir()
    write_parquet(folder / "overlays.parquet", table)
    entries = [{"kind": "history", **entry} for entry in answer(asked, table, sums).plan.inputs]
    settings = {"study": study_to_table(asked), "store": "histories"}
    write_json(folder / "manifest.json", {"schema": 1, "kind": "study", "inputs": entries, "settings": settings})
    return folder


def said(made: dict[str, Any]) -> list[str]:
    console = Console(file=io.StringIO(), width=100)
    show_against(json.loads(json.dumps(plain(made))), console=console)
    file: Any = console.file
    return [line.rstrip() for line in file.getvalue().splitlines()]


HERE = study(strikes(80, 85, 90, 95), costs={"half_spread_vol": 1.0})
#: Of 80, 85, 90, 95: the third is best.
TABLE = overlays(
    {"strike": [80, 85, 90, 95]},
    information_ratio=[0.10, 0.25, 0.40, 0.30],
    sharpe=[0.5, 0.5, NAN, 0.7],
    annual_return=[0.01, 0.02, 0.03, 0.05],
)
#: The same strikes but for the first, and one more, in another order and as decimals: the one of 99 is best.
THERE = study(strikes(99.0, 95.0, 90.0, 85.0), costs={"half_spread_vol": 0.5})
OTHER = overlays(
    {"strike": [99.0, 95.0, 90.0, 85.0]},
    information_ratio=[0.60, 0.35, 0.40, 0.20],
    sharpe=[0.1, 0.5, 0.6, 0.5],
    annual_return=[0.01, 0.08, 0.03, 0.02],
)


@pytest.fixture
def made(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> dict[str, Any]:
    monkeypatch.chdir(tmp_path)
    return compare(answer(HERE, TABLE), read_other(write(Path("other"), THERE, OTHER)))


def test_rows_and_figures(made: dict[str, Any]) -> None:
    assert made["rows"] == {"both": 3, "only_here": 1, "only_there": 1, "not_matched": None}
    assert made["axes"] == {"both": ["strike"], "only_here": [], "only_there": []}
    assert made["other_days"] == 0
    # 85, 90, 95: +0.05, 0, -0.05; the first of the two largest
    assert made["figures"]["information_ratio"] == {
        "changed": 2,
        "median_change": 0.0,
        "largest_change": {
            "change": pytest.approx(0.05, abs=1e-15), "here": 0.25, "there": 0.2, "number": 1, "settings": "strike 85",
        },
    }  # fmt: skip
    # 0, gone, +0.2: two have changed, the median of what both have is 0.1
    sharpe = made["figures"]["sharpe"]
    assert (sharpe["changed"], sharpe["median_change"]) == (2, pytest.approx(0.1, abs=1e-15))
    assert (sharpe["largest_change"]["number"], sharpe["largest_change"]["settings"]) == (3, "strike 95")
    # 0, 0, -0.03
    annual = made["figures"]["annual_return"]
    assert (annual["changed"], annual["median_change"]) == (1, 0.0)
    assert annual["largest_change"]["change"] == pytest.approx(-0.03, abs=1e-15)
    assert made["figures"]["beta"] == {"changed": 0, "median_change": 0.0, "largest_change": None}
    assert list(made["figures"]) == list(FIGURES)


def test_the_best_and_the_ranks(made: dict[str, Any]) -> None:
    (best,) = made["best"]
    assert (best["history"], best["window"], best["same"]) == ("demo", None, False)
    assert best["here"] == {"number": 2, "settings": "strike 90", "information_ratio": 0.4, "in_both": True}
    assert best["there"] == {"number": 0, "settings": "strike 99", "information_ratio": 0.6, "in_both": False}
    # 85, 90, 95: ranks 1 3 2 here, 1 3 2 there
    assert made["rank_correlation"] == best["rank_correlation"] == pytest.approx(1.0, abs=1e-15)


def test_what_differs_between_the_studies(made: dict[str, Any]) -> None:
    assert made["settings"] == [{"key": "costs.half_spread_vol", "here": 1.0, "there": 0.5}]
    assert made["inputs"] == []
    assert made["comparison"] == {"here": "same-beta mix", "there": "same-beta mix"}


def test_in_words(made: dict[str, Any]) -> None:
    assert said(made) == [
        "",
        "Against other",
        "Another setting: costs.half_spread_vol is 1.0 here, 0.5 there",
        "Overlays: 3 in both, 1 only here, 1 only there",
        "                       changed  median change  largest     of     to",
        "return a year                1         +0.00%   -3.00%  8.00%  5.00%",
        "volatility                   0         +0.00%        –      –      –",
        "Sharpe ratio                 2         +0.100   +0.200  0.500  0.700",
        "maximum drawdown             0         +0.00%        –      –      –",
        "return less hold             0         +0.00%        –      –      –",
        "Sharpe ratio less mix        0         +0.000        –      –      –",
        "information ratio            2         +0.000   +0.050  0.200  0.250",
        "Largest change of return a year, Sharpe ratio: strike 95",
        "Largest change of information ratio: strike 85",
        "The best on demo is another: strike 90 (information ratio 0.400) here; strike 99 (information ratio 0.600, "
        "only there) there",
        "Rank correlation of the information ratio, overlays in both: +1.000",
    ]


def test_the_same_study(tmp_path: Path) -> None:
    made = compare(answer(HERE, TABLE), read_other(write(tmp_path / "other", HERE, TABLE)))
    assert made["rows"] == {"both": 4, "only_here": 0, "only_there": 0, "not_matched": None}
    assert {name: figure["changed"] for name, figure in made["figures"].items()} == dict.fromkeys(FIGURES, 0)
    assert (made["settings"], made["inputs"], made["best"][0]["same"]) == ([], [], True)
    assert "The best on demo is the same: strike 90 (information ratio 0.400) here, 0.400 there" in said(made)


def test_other_inputs_comparison_days_and_legs(tmp_path: Path) -> None:
    call = {"position": "short", "right": "call", "strike": {"percent_of_spot": 110}}
    there = study(strikes(80, 85), histories=("spx", "demo"), comparison="hold", leg=[PUT, call])
    table = overlays({"strike": [80, 85, 80, 85]}, ["spx", "spx", "demo", "demo"])
    table["end"] = pd.to_datetime(["2009-12-31", "2009-12-31", "2009-12-31", "2010-06-30"])
    other = read_other(write(tmp_path / "other", there, table, {"demo": "b" * 64, "spx": "c" * 64}))
    here = answer(study(strikes(80, 85)), overlays({"strike": [80, 85]}), {"demo": "a" * 64})
    made = compare(here, other)
    assert made["inputs"] == [
        {"history": "demo", "here": "a" * 64, "there": "b" * 64},
        {"history": "spx", "here": None, "there": "c" * 64},
    ]
    assert made["rows"] == {"both": 2, "only_here": 0, "only_there": 2, "not_matched": None}
    assert (made["other_days"], made["settings"]) == (1, [{"key": "legs", "here": 1, "there": 2}])
    assert said(made)[2:8] == [
        "Another comparison: same-beta mix here, hold there",
        "Another history 'demo': sha256 aaaaaaaaaaaa... here, sha256 bbbbbbbbbbbb... there",
        "Another history 'spx': none here, sha256 cccccccccccc... there",
        "Another setting: legs is 1 here, 2 there",
        "Overlays: 2 in both, 0 only here, 2 only there",
        "1 of those in both begin or end on another day",
    ]


ROLLS = Axis(name="roll", fields=("leg.1.roll",), values=("month", "quarter"))


def test_axes_that_only_one_varies(tmp_path: Path) -> None:
    # one value alone tells nothing apart, and does no harm
    one = Axis(name="account", fields=("account",), values=("cash",))
    there = write(
        tmp_path / "one", study(strikes(80, 85), one), overlays({"strike": [80, 85], "account": ["cash"] * 2})
    )
    made = compare(answer(HERE, TABLE), read_other(there))
    assert made["axes"] == {"both": ["strike"], "only_here": [], "only_there": ["account"]}
    assert made["rows"]["both"] == 2
    assert "Varied only there: account" in said(made)

    table = overlays(
        {"strike": [80, 80, 85, 85], "roll": ["month", "quarter"] * 2}, information_ratio=[0.1, 0.2, 0.4, 0.3]
    )
    other = study(strikes(80, 85), ROLLS, leg=[PUT | {"strike": {"percent_of_spot": 90}, "roll": "month"}])
    there = write(tmp_path / "two", other, table)
    made = compare(answer(HERE, TABLE), read_other(there))
    # the strike both vary, so where they start from does not matter; the roll is varied there alone
    assert [entry["key"] for entry in made["settings"]] == ["leg.1.roll", "costs.half_spread_vol"]
    assert made["settings"][0] == {"key": "leg.1.roll", "here": "quarter", "there": "month"}
    reason = "rows cannot be matched one to one: 2 overlays there are demo, strike 80 and are told apart by what only they vary (roll)"  # noqa: E501
    assert made["rows"] == {"both": None, "only_here": None, "only_there": None, "not_matched": reason}
    assert {figure["changed"] for figure in made["figures"].values()} == {0}
    assert np.isnan(made["rank_correlation"])
    # the best can still be set side by side
    assert made["best"][0]["there"]["settings"] == "strike 85, roll month"
    assert made["best"][0]["same"] is False
    assert said(made)[4:] == [
        "Varied only there: roll",
        f"R{reason[1:]}.",
        "The best on demo is another: strike 90 (information ratio 0.400) here; strike 85, roll month (information "
        "ratio 0.400) there",
    ]
    # and the other way round
    made = compare(answer(other, table), read_other(write(tmp_path / "three", HERE, TABLE)))
    assert made["rows"]["not_matched"] == reason.replace("there", "here")
    assert made["axes"]["only_here"] == ["roll"]


def test_labels_meet_numbers(tmp_path: Path) -> None:
    labelled = Axis(
        name="strike",
        fields=("leg.1.strike",),
        values=({"percent_of_spot": 80}, {"percent_of_spot": 85}),
        labels=("80", "eighty-five"),
    )
    there = write(tmp_path / "other", study(labelled), overlays({"strike": ["80", "eighty-five"]}))
    made = compare(answer(HERE, TABLE), read_other(there))
    assert (made["rows"]["both"], made["rows"]["only_there"]) == (1, 1)


def test_each_history_and_window_has_a_best(tmp_path: Path) -> None:
    window = Axis(name="days", fields=("window",), values=({"to": "2005-12-31"}, {}), labels=("early", "all"))
    asked = study(window, strikes(80, 85), histories=("a", "b"))
    settings: dict[str, list[Any]] = {"days": (["early"] * 2 + ["all"] * 2) * 2, "strike": [80, 85] * 4}
    history = ["a"] * 4 + ["b"] * 4
    here = overlays(settings, history, information_ratio=[1.0, 2.0, 4.0, 3.0, 5.0, 6.0, NAN, NAN])
    there = overlays(settings, history, information_ratio=[2.0, 1.0, 4.0, 3.0, 6.0, 6.0, 1.0, 2.0])
    made = compare(answer(asked, here), read_other(write(tmp_path / "other", asked, there)))
    found = [
        (one["history"], one["window"], one["here"] and one["here"]["number"], one["there"]["number"], one["same"])
        for one in made["best"]
    ]
    # of equals the first
    assert found == [
        ("a", "early", 1, 0, False), ("a", "all", 2, 2, True), ("b", "early", 5, 4, False), ("b", "all", None, 7, None),
    ]  # fmt: skip
    assert "The best on b all is another: none here; b, days all, strike 85 (information ratio 2.000) there" in said(
        made
    )


# ---------------------------------------------------------------- refusals


def _manifest(folder: Path, **changes: Any) -> None:
    table = json.loads((folder / "manifest.json").read_text())
    (folder / "manifest.json").write_text(json.dumps(table | changes))


def _column(folder: Path, name: str, values: pa.Array | None) -> None:
    table = pq.read_table(folder / "overlays.parquet")
    place = table.column_names.index(name)
    table = table.remove_column(place)
    pq.write_table(table if values is None else table.append_column(name, values), folder / "overlays.parquet")


REFUSED: dict[str, tuple[Any, str]] = {
    "no manifest": (lambda f: (f / "manifest.json").unlink(), "its manifest.json is missing"),
    "a replay": (lambda f: _manifest(f, kind="replay"), "it is not the results folder of a study"),
    "no settings": (lambda f: _manifest(f, settings=3), "it is not the results folder of a study"),
    "no study": (lambda f: _manifest(f, settings={"study": {}}), "the study in its manifest.json cannot be used: study: there is no question; a study needs question, histories, overlay and axis"),  # noqa: E501
    "no table": (lambda f: (f / "overlays.parquet").unlink(), "its overlays.parquet is missing"),
    "rows": (lambda f: write_parquet(f / "overlays.parquet", OTHER.iloc[1:]), "its overlays.parquet has 3 rows, and the study in its manifest.json has 4"),  # noqa: E501
    "no ratio": (lambda f: _column(f, "information_ratio", None), "its overlays.parquet has no column 'information_ratio' of numbers"),  # noqa: E501
    "no axis": (lambda f: _column(f, "strike", None), "its overlays.parquet has no column 'strike' of numbers"),
    "no days": (lambda f: _column(f, "end", pa.array(["x"] * 4)), "its overlays.parquet has no column 'end' of dates"),
    "text": (lambda f: _column(f, "sharpe", pa.array(["x"] * 4)), "its overlays.parquet has no column 'sharpe' of numbers"),  # noqa: E501
    "lists": (lambda f: _column(f, "history", pa.array([["x"]] * 4)), "its overlays.parquet has no column 'history' of texts"),  # noqa: E501
}  # fmt: skip


@pytest.mark.parametrize("case", REFUSED)
def test_what_cannot_be_compared_with(tmp_path: Path, monkeypatch: pytest.MonkeyPatch, case: str) -> None:
    monkeypatch.chdir(tmp_path)
    spoil, problem = REFUSED[case]
    folder = write(Path("other"), THERE, OTHER)
    spoil(folder)
    with pytest.raises(ResultsError) as refused:
        read_other(folder)
    assert str(refused.value) == f"--against other cannot be compared with: {problem}"


def test_a_figure_that_only_one_has_is_left_out(tmp_path: Path) -> None:
    folder = write(tmp_path / "other", THERE, OTHER)
    _column(folder, "ulcer", None)
    made = compare(answer(HERE, TABLE), read_other(folder))
    assert "ulcer" not in made["figures"]
    assert len(made["figures"]) == len(FIGURES) - 1
