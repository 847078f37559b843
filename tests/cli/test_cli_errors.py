"""Commands that cannot be done: the exit code, the sentence, and nothing written.

Rung: identity (every case is made by hand).
"""

# ruff: noqa: E501  one case stays on one line, so that the table can be read

from __future__ import annotations

import re
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest

from studies.demo import DEMO_OVERLAY

Run = Callable[..., Any]


def tree(folder: Path) -> dict[str, bytes | None]:
    return {
        str(path.relative_to(folder)): path.read_bytes() if path.is_file() else None
        for path in sorted(folder.rglob("*"))
    }


@pytest.fixture
def refused(home: Path, rollband: Run) -> Callable[..., str]:
    """Run a command that must fail: give its message when code, empty output and an untouched folder are right."""

    def run(code: int, *arguments: object) -> str:
        before = tree(home)
        ran = rollband(*arguments)
        assert (ran.code, ran.out) == (code, "")
        assert tree(home) == before
        assert "Traceback" not in ran.err
        return ran.err

    return run


Refused = Callable[..., str]


# ---------------------------------------------------------------- bad data: 3


def test_all_problems_of_all_files_at_once(refused: Refused, home: Path) -> None:
    (home / "p.csv").write_text(
        "date,close\n2020-01-02,100\n2020-01-03,-5\n2020-01-06,abc\n2020-13-07,1\n2020-01-02,9\n"
    )
    (home / "v.csv").write_text("date,vol\n2020-01-02,20\n2020-01-03,x\n")
    (home / "d.csv").write_text("date,dividend\n2020-01-04,1\n2020-01-06,-1\n")
    (home / "r.csv").write_text("date,rate\n2020-01-02,400\n")
    files = ["--prices", "p.csv", "--vol", "v.csv", "--dividends", "d.csv", "--rates", "r.csv"]
    for command in (["load", "mine"], ["replay", "--put", 95], ["replay", "--put", 95, "--json"]):
        said = refused(3, *command, *files)
        assert re.match(r"rollband: \d+ problems in 4 files; nothing was loaded\.\n", said)
        for place in (
            "p.csv, line 3, column close: '-5'", "p.csv, line 4, column close: 'abc'", "p.csv, line 5, column date: '2020-13-07'",
            "p.csv, line 6, column date: '2020-01-02'", "v.csv, line 3, column vol: 'x'", "d.csv, line 3, column dividend: '-1'",
            "r.csv, line 2, column rate: '400'",
        ):  # fmt: skip
            assert place in said


def test_a_load_that_fails_keeps_the_old_history(stored: Run, refused: Refused, home: Path) -> None:
    (home / "p.csv").write_text("date,close\n2020-01-02,0\n")
    said = refused(3, "load", "mine", "--prices", "p.csv")
    assert "p.csv, line 2, column close: '0' is not above 0" in said


def test_files_that_are_not_there(refused: Refused) -> None:
    said = refused(3, "load", "mine", "--prices", "no.csv", "--vol", "nor this.csv")
    assert "2 problems in 2 files" in said
    assert "no.csv: there is no such file" in said
    assert "nor this.csv: there is no such file" in said


@pytest.mark.parametrize("name", ["../mine", "/tmp/mine", "a/b", "", ".", "..", "a b", "x" * 65, "ü", "a\nb", "nul\x00", ".hidden"])  # fmt: skip
def test_hostile_names_of_histories(refused: Refused, files: list[object], name: str) -> None:
    for command in (["load", *files, "--", name], ["replay", "--put", 95, "--", name]):
        said = refused(3, *command)
        assert "cannot be the name of a history: use letters a-z, digits" in said
        assert "at most 64 characters" in said


def test_no_such_history(stored: Run, refused: Refused) -> None:
    said = refused(3, "replay", "nime", "--put", 95)
    assert said.startswith("rollband: there is no history 'nime'")
    assert "mine" in said


def test_a_history_that_is_none(refused: Refused, home: Path) -> None:
    (home / "histories").mkdir()
    (home / "histories" / "mine.parquet").write_bytes(b"PAR1 not really")
    assert "mine" in refused(3, "replay", "mine", "--put", 95)


# ---------------------------------------------------------------- wrong use: 2


def test_an_overlay_file_with_a_mistake(stored: Run, refused: Refused, home: Path) -> None:
    (home / "band.toml").write_text(DEMO_OVERLAY.replace("percent_of_spot = 110", "percent_of_spt = 110"))
    said = refused(2, "replay", "mine", "--overlay", "band.toml")
    assert said == (
        "rollband: band.toml, line 15, leg.2.strike.percent_of_spt: unknown key; did you mean percent_of_spot? "
        "Known here: percent_of_spot, percent_of_forward, deviations, delta, premium_percent, financed_share, "
        "mirrored_leg, of_legs, kept_until_moved, ratchet, not_below, not_above, not_below_leg, strike_step\n"
    )


@pytest.mark.parametrize(
    ("arguments", "says"),
    [
        (["replay", "mine"], "say what to replay: --put 95, --call 110, both, or --overlay FILE"),
        (["replay", "--put", 95], "say which history: a stored NAME, or --prices FILE"),
        (["replay", "--put", 95, "--vol", "v.csv"], "say which history: a stored NAME, or --prices FILE"),
        (["replay", "mine", "--put", 95, "--prices", "p.csv", "--vol", "v.csv"], "leave out --prices, --vol, or the name"),
        (["replay", "mine", "--overlay", "b.toml", "--put", 95], "leave out --put"),
        (["replay", "mine", "--overlay", "no.toml"], "rollband: no.toml: there is no such file"),
        (["replay", "mine", "--put", 0.95], "percent_of_spot is 0.95; it takes a number from 1 to 1000"),
        (["replay", "mine", "--put", "nan"], "percent_of_spot is nan; it takes a number from 1 to 1000"),
        (["replay", "mine", "--put", "95%"], "--put"),
        (["replay", "mine", "--put", 95, "--put-term", 2], "term is 2; it takes a whole number from 3 to 120 months"),
        (["replay", "mine", "--put", 95, "--roll", "week"], "--roll"),
        (["replay", "mine", "--put", 95, "--account", "margin"], "--account"),
        (["replay", "mine", "--put", 95, "--vol-quote", "bid"], "--vol-quote"),
        (["replay", "mine", "--put", 95, "--smile", "skew"], "--smile is 'skew'; it takes one of: flat, mild, index, steep"),
        (["replay", "mine", "--put", 95, "--smile", "0,3,0.5"], "eta (1 + |rho|) is 3; a smile takes at most 2"),
        (["replay", "mine", "--put", 95, "--half-spread-vol", -1], "half_spread_vol is -1.0; it takes a number from 0 to 100"),
        (["replay", "mine", "--put", 95, "--half-spread-percent", 101], "half_spread_percent is 101.0"),
        (["replay", "mine", "--put", 95, "--commission", "inf"], "commission is inf; it takes a number of at least 0"),
        (["replay", "mine", "--put", 95, "--multiplier", 0], "multiplier is 0; it takes a number above 0"),
        (["replay", "mine", "--put", 95, "--stock-bps", 1e4], "stock_bps is 10000.0; it takes a number from 0 to 1000"),
        (["replay", "mine", "--put", 95, "--from", "2010-02-30"], "--from"),
        (["replay", "mine", "--put", 95, "--to", "tomorrow"], "--to"),
        (["replay", "mine", "--put", 95, "--rate", 500], "500"),
        (["replay", "mine", "--put", 95, "--rate", "nan"], "rate is nan"),
        (["replay", "mine", "--put", 95, "--rate", -100], "-100"),
        (["replay", "mine", "--put", 95, "--dividend-yield", 500], "500"),
        (["replay", "mine", "--put", 95, "--dividend-yield", "nan"], "dividend"),
        (["load", "mine"], "--prices"),
        (["load", "--prices", "p.csv"], "name"),
        (["load", "mine", "--prices", "p.csv", "--vol-unit", "bps"], "--vol-unit"),
        (["replya"], "replya"),
        (["replay", "mine", "--put", 95, "--nonsense"], "--nonsense"),
    ],
)  # fmt: skip
def test_wrong_commands(stored: Run, refused: Refused, arguments: list[object], says: str) -> None:
    said = refused(2, *arguments)
    assert says in " ".join(said.split())


@pytest.mark.parametrize(
    ("options", "named"),
    [
        (["--overlay", "band.toml", "--roll", "month"], "--roll"),
        (["--overlay", "band.toml", "--put-roll", "month"], "--put-roll"),
        (["--overlay", "band.toml", "--call-term", 6], "--call-term"),
        (["--put", 95, "--call-roll", "month"], "--call-roll"),
        (["--put", 95, "--call-term", 6], "--call-term"),
        (["--call", 110, "--put-term", 6], "--put-term"),
        (["--put", 95, "--vol-unit", "decimal"], "--vol-unit"),
    ],
)
def test_options_that_would_do_nothing_are_refused(
    stored: Run, refused: Refused, home: Path, options: list[object], named: str
) -> None:
    (home / "band.toml").write_text(DEMO_OVERLAY)
    assert named in refused(2, "replay", "mine", *options)


# ---------------------------------------------------------------- cannot be had: 5


@pytest.mark.parametrize(
    ("options", "says"),
    [
        (["--from", "2010-01-04", "--to", "2010-02-26"], "no roll date of the longest leg"),
        (
            ["--from", "2012-01-01", "--to", "2010-01-01"],
            "the window begins on 2012-01-01, after it ends on 2009-12-31",
        ),
        (["--from", "2030-01-01"], "the window begins on 2030-01-01, after it ends on 2023-12-29"),
        (["--to", "1990-01-01"], "the window ends on 1990-01-01, before the first price on 1999-01-04"),
    ],
)
def test_windows_without_an_answer(stored: Run, refused: Refused, options: list[object], says: str) -> None:
    assert says in refused(5, "replay", "mine", "--put", 95, *options)


def test_a_foreign_folder_is_not_touched(stored: Run, refused: Refused, home: Path) -> None:
    (home / "thesis").mkdir()
    (home / "thesis" / "thesis.docx").write_text("mine")
    said = refused(5, "replay", "mine", "--put", 95, "--out", "thesis")
    assert said == (
        "rollband: thesis holds other files and no manifest.json of ours: give an empty or a new folder as --out\n"
    )
    assert "is not a folder: give another --out" in refused(
        5, "replay", "mine", "--put", 95, "--out", "thesis/thesis.docx"
    )
    assert "cannot write beside" in refused(5, "replay", "mine", "--put", 95, "--out", "thesis/thesis.docx/below")
    assert "rollband: . " in refused(5, "replay", "mine", "--put", 95, "--out", ".", "--json")


def test_the_folder_one_stands_in(rollband: Run, home: Path, market: Path) -> None:
    # an empty working folder as --out: filled, or refused with nothing left behind
    ran = rollband("replay", "--prices", market / "prices.csv", "--put", 95, "--out", ".")
    if ran.code == 0:
        assert sorted(tree(home)) == [
            "daily.parquet", "manifest.json", "report.html", "rolls.parquet", "summary.json", "tables",
        ]  # fmt: skip
    else:
        assert ran.code == 5
        assert tree(home) == {}


def test_demo_leaves_files_of_ones_own_alone(refused: Refused, home: Path) -> None:
    (home / "here").mkdir()
    (home / "here" / "prices.csv").write_text("date,close\n2020-01-02,1\n")
    said = refused(5, "demo", "here")
    assert said == ("rollband: here/prices.csv is not the demo's own file: give another folder, or move it away\n")
    assert "cannot write the demo into" in refused(5, "demo", "here/prices.csv")


def test_demo_leaves_results_of_ones_own_alone(rollband: Run, home: Path) -> None:
    (home / "here" / "results").mkdir(parents=True)
    (home / "here" / "results" / "thesis.docx").write_text("mine")
    ran = rollband("demo", "here")
    assert ran.code == 5
    assert "holds other files" in ran.err
    assert (home / "here" / "results" / "thesis.docx").read_text() == "mine"


# ---------------------------------------------------------------- short windows


def test_two_days_without_a_complaint_from_below(stored: Run, home: Path) -> None:
    ran = stored("replay", "mine", "--put", 95, "--from", "2010-03-19", "--to", "2010-03-22", "--out", "o")
    assert (ran.code, ran.err) == (0, "")
    assert "–" in ran.out
    assert "less than a year: returns are totals, not annualised" in ran.out
