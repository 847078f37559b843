"""Histories and overlays at the edge: a page, tables and a summary in plain words, whatever cannot be had.

Rung: behaviour. No traceback, no warning (they are errors here), nothing that looks like a missing value of a program.
"""

from __future__ import annotations

import csv
import io
import json
import math
import re
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from rich.console import Console

from backtest import Leg, Market, Overlay, PercentOfSpot, RealisedVolatility, Volatility
from data_loaders import History
from studies.answer_folder import whole_summary
from studies.page.build import build_report
from studies.page.costs import steps
from studies.replay_history import answer
from studies.report import Report, make_report
from studies.tables_csv import write_tables
from studies.terminal import show_summary
from tests.studies.page.conftest import BAND, Node, read_page, table_of
from tests.studies.page.test_page import LEAKS, SECTIONS

PUT, CALL = BAND
ENDS = "the overlay's wealth ends before the history does"


def leg(position: str, right: str, percent: float, roll: str = "quarter", **more: float) -> Leg:
    return Leg(position=position, right=right, strike=PercentOfSpot(percent), roll=roll, **more)  # type: ignore[arg-type]


def path(close: np.ndarray, vol: float) -> pd.DataFrame:
    """A made-up price on weekdays from 2010 on, under one vol."""
    days = pd.bdate_range("2010-01-04", periods=len(close), name="date")
    return pd.DataFrame({"close": close, "vol": vol}, index=days)


def still_month(demo: pd.DataFrame) -> pd.DataFrame:
    """Two years in which the price stands still for a month, quoted at a hundredth of a vol point."""
    frame = demo.loc["2005":"2006", ["close", "vol", "rate"]].copy()
    march = (frame.index >= "2006-03-01") & (frame.index < "2006-04-01")
    frame.loc[march, "close"] = float(frame["close"].loc[:"2006-02"].iloc[-1])
    frame.loc[march, "vol"] = 0.0001
    return frame


@dataclass(frozen=True)
class Case:
    """A history cut from the demo's, an overlay, and what the page must say of it, by section."""

    history: Callable[[pd.DataFrame], pd.DataFrame]
    overlay: Overlay
    said: dict[str, str]
    volatility: Volatility | None = None
    short: bool = False  # under a year


EIGHT = (
    leg("long", "put", 95), leg("short", "put", 90), leg("long", "put", 97, "month"), leg("long", "put", 80, "year"),
    leg("short", "call", 110, "month"), leg("short", "call", 105), leg("long", "call", 120, "half"),
    leg("short", "call", 103, "month"),
)  # fmt: skip
TRADING_DAY = np.arange(700)

CASES = {
    "one settled roll": Case(
        lambda demo: demo.loc["2008-09-01":"2008-12-19"],
        Overlay(legs=(PUT,)),
        {
            "luck": "The bought put never paid off in 1 finished roll", "periods": "too few whole months",
            "rolling": "shorter than a year and a day", "cautions": "Less than a year: returns are totals",
            "cost": "Cost, whole span", "rolls": "2 options opened, 1 still open at the end",
        },
        short=True,
    ),
    "two days": Case(
        lambda demo: demo.loc["2008-09-19":"2008-09-22"],
        Overlay(legs=BAND),
        {
            "luck": "The bought put finished no roll", "verdict": "A dash (–): cannot be had from this history.",
            "contest": "return, whole span", "prices": "cannot be compared with its same-beta mix under any smile",
            "episodes": "never fell more than 10%", "band": "0 of 0 of the bought put",
        },
        short=True,
    ),
    "no payoff": Case(  # up 16% a year with a ripple of a fifth of a percent: no put of 95% is ever reached
        lambda demo: path(100 * np.exp(0.0006 * TRADING_DAY + 0.002 * np.sin(TRADING_DAY)), 0.15),
        Overlay(legs=BAND),
        {
            "luck": "The bought put never paid off in 9 finished rolls", "episodes": "nothing was there to protect",
            "cautions": "No put paid off in this window", "cost": "there is none: no drawdown was removed",
        },
    ),
    "even growth": Case(  # every day the same return: no variation at all, but for rounding
        lambda demo: path(100 * np.exp(0.0006 * TRADING_DAY), 0.15),
        Overlay(legs=BAND),
        {"episodes": "nothing was there to protect", "prices": "cannot be compared", "figures": "no variation"},
    ),
    "a still month": Case(
        still_month, Overlay(legs=BAND), {"rolls": "0.3%", "cautions": "No dividends are known"},
    ),
    "a still market": Case(
        lambda demo: path(np.full(700, 100.0), 0.0001),
        Overlay(legs=BAND),
        {
            "growth": "1.00 became 1.00 in the overlay and 1.00 in the hold.",
            "luck": "in runs of 1 day on average", "cost": "the overlay 0.0%.",
        },
    ),
    "a flat hold": Case(  # options cost 15 points of vol and nothing happens
        lambda demo: path(np.full(700, 100.0), 0.15),
        Overlay(legs=BAND),
        {
            "cost": "there is none: no drawdown was removed", "growth": "The hold fell 0.0% at its deepest",
            "luck": "does not vary", "prices": "could not be searched",
        },
    ),
    "ruin": Case(
        lambda demo: demo.loc["2007":"2009"],
        Overlay(legs=(leg("short", "put", 100, ratio=8.0),), account="cash"),
        {
            "verdict": f"1 grew to nothing hold 0.71 A dash (–): {ENDS}", "cautions": "loses everything on 2007-06-04",
            "figures": ENDS, "growth": "became nothing in the overlay", "contest": f"No comparison can be had: {ENDS}",
            "cost": f"No waterfall can be drawn: {ENDS}", "attribution": f"No attribution can be had: {ENDS}",
            "luck": "returns of the overlay, of the hold or of cash are missing",
        },
    ),
    "call only": Case(
        lambda demo: demo.loc["2007":"2008"], Overlay(legs=(CALL,)),
        {"prices": "The puts alone there is no put", "assumed": "struck at 110% of spot", "band": "of the sold call"},
    ),
    "put only": Case(
        lambda demo: demo.loc["2007":"2008"], Overlay(legs=(PUT,)),
        {
            "assumed": "Buys a put, 1 per share; every quarter on the third Friday, 3 months to expiry; struck at 95%",
            "luck": "separate time", "band": "of the bought put.",
        },
    ),
    "eight legs": Case(
        lambda demo: demo.loc["2006":"2008"], Overlay(legs=EIGHT),
        {
            "luck": "; the put 4 ", "cautions": "An option of 12 months is priced off a single vol of 30 days",
            "cost": "calls: premium",
            "assumed": "Call 4 Sells a call, 1 per share; every month on the third Friday, 1 month to expiry; struck",
        },
    ),
    "one year of data": Case(
        lambda demo: demo.loc["2008-01-01":"2008-12-31"], Overlay(legs=BAND),
        {"figures": "return, whole span", "luck": "return, whole span", "rolling": "shorter than a year and a day"},
        short=True,
    ),
    "realised vol": Case(
        lambda demo: demo.loc["2006":"2008"].drop(columns="vol"), Overlay(legs=BAND),
        {"assumed": "Realised close-to-close of 63 trading days", "cautions": "priced off realised volatility"},
        Volatility(source=RealisedVolatility()),
    ),
    "options of none": Case(  # ratio zero: the overlay is the hold, but for rounding
        lambda demo: demo.loc["2007":"2009"], Overlay(legs=(leg("long", "put", 95, ratio=0.0),)),
        {
            "prices": "Overlay and same-beta mix are level, whatever the smile.",
            "contest": ", 0 clear below,", "band": "of the bought put",
            "episodes": "did better than the hold in 0 of 1 fall (0.0 points", "cost": "0.0 points off the deepest",
        },
    ),
}  # fmt: skip


@dataclass(frozen=True)
class Shown:
    """A case with all that is written of it."""

    case: Case
    report: Report
    page: Node
    tables: Path
    terminal: str


@pytest.fixture(scope="module", params=list(CASES.values()), ids=list(CASES))
def shown(request: pytest.FixtureRequest, demo_history: History, tmp_path_factory: pytest.TempPathFactory) -> Shown:
    case: Case = request.param
    found = answer(Market.from_frame(case.history(demo_history.frame)), case.overlay, volatility=case.volatility)
    report = make_report(found, resamples=100)
    page = build_report(found, report.findings, report.inference, report.clauses, history="H", how_to_run="rollband")
    tables = tmp_path_factory.mktemp("case") / "tables"
    write_tables(report, tables)
    lines = io.StringIO()
    summary = whole_summary(report)
    json.dumps(summary, allow_nan=False)
    show_summary(Console(file=lines, width=110), summary, history="H")
    return Shown(case, report, read_page(page), tables, lines.getvalue())


def test_the_page_has_its_sections_and_says_what_is_missing(shown: Shown) -> None:
    sections = shown.page.all("section")
    assert tuple(section.one("h2").words for section in sections) == SECTIONS
    for section in sections:
        assert section.all("p", "table", "figure", "dl", "pre")
        assert section.words.removeprefix(section.one("h2").words).strip()
    for where, words in shown.case.said.items():
        assert words in shown.page.having("id", where).words


def test_nothing_leaks_anywhere(shown: Shown) -> None:
    assert LEAKS.findall(shown.page.words) == []
    assert [v for node in shown.page.walk() for v in node.attributes.values() if LEAKS.search(v)] == []
    assert LEAKS.findall(shown.terminal) == []


def test_no_sentence_is_left_without_its_figures(shown: Shown) -> None:
    for one in shown.page.all("p", "figcaption", "li", "dd"):
        sentence = " ".join(one.text.split())
        assert not re.search(r"(: \.|: ,| , | \.$|\( ?\)|\bbecame –|\bof –)", sentence), sentence
    # zero has no sign on the page; the verdict is worded elsewhere
    for section in shown.page.all("section")[1:]:
        assert re.findall(r"[−+-]0(?:\.0+)?(?![\d.])", section.words) == []


def test_the_bars_sum_to_the_gain_however_many_legs(shown: Shown) -> None:
    wealth = shown.report.answer.replay.wealth
    made = steps(shown.report.findings.ledger, shown.report.answer)
    if np.isfinite(wealth).all():
        assert made.money[0].sum() == pytest.approx(wealth[-1] - 1, abs=1e-12)


def test_every_dash_in_a_table_is_explained(shown: Shown) -> None:
    for block in (node for node in shown.page.all("div") if node.attributes.get("class") == "table"):
        dashes = [cell for cell in block.one("tbody").all("td") if cell.words == "–"]
        notes = [note.words for note in block.all("p") if note.words.startswith("A dash (–): ")]
        assert len(notes) == (1 if dashes else 0)


def test_table_cells_are_numbers_or_empty(shown: Shown) -> None:
    files = sorted(shown.tables.glob("*.csv"))
    assert len(files) == 18
    for file in files:
        head, *rows = list(csv.reader(io.StringIO(file.read_text(encoding="utf-8")))) or [[]]
        for row in rows:
            assert len(row) == len(head)
            for cell in row:
                assert not LEAKS.search(cell)
                if re.fullmatch(r"[-+]?\d[\d.]*(e[-+]?\d+)?", cell):
                    assert math.isfinite(float(cell))


def test_every_table_has_its_head(shown: Shown) -> None:
    # a table without rows is still one that a spreadsheet or pandas can read
    assert [file.name for file in sorted(shown.tables.glob("*.csv")) if not file.read_text(encoding="utf-8")] == []


def test_the_terminal_tells_the_same_figures_as_the_page(shown: Shown) -> None:
    own = table_of(shown.page, "Overlay, hold and")[1]
    line = next(line for line in shown.terminal.splitlines() if line.startswith("overlay  "))
    assert line.split()[1:] == [cell.replace("−", "-") for cell in own[1:7]]
    for warning in shown.report.answer.warnings:
        assert warning in shown.terminal


def test_the_terminal_gives_no_sign_to_zero(shown: Shown) -> None:
    summary = shown.terminal.replace("\n", " ")
    assert re.findall(r"[+-]0(?:\.0+)?%?(?![\d.])", summary) == []


def test_under_a_year_no_return_is_called_annual(shown: Shown) -> None:
    # C11: a total return then, not annualised
    annual = re.compile(r"returned \S+ points a year|return ran from \S+ to \S+ a year|(?<!excess )return a year")
    told = " ".join(shown.terminal.split())
    if shown.case.short:
        assert (annual.findall(shown.page.words), annual.findall(told)) == ([], [])
    else:
        assert "return a year" in shown.page.words
        assert "return a year" in told


def test_a_path_that_ends_is_not_said_to_have_had_no_fall(shown: Shown) -> None:
    gone = not np.isfinite(shown.report.answer.replay.wealth).all()
    falls = [line for line in shown.terminal.splitlines() if line.startswith("overlay: ")]
    assert len(falls) == 1
    if gone:
        assert "no fall" not in falls[0]


def test_the_verdict_denies_no_fall_that_the_page_shows(shown: Shown) -> None:
    said = shown.page.having("id", "verdict").words
    denied = "The hold had no fall over 10%" in said
    assert not (denied and shown.report.findings.episodes)


def test_the_verdict_finds_nothing_in_rounding(shown: Shown) -> None:
    # a difference under 1e-12 is rounding, here as in the resampling
    gains = shown.report.findings.ladder_gains.values()
    level = all(abs(gain) < 1e-12 for gain in gains)
    findings = {clause.title: clause.finding for clause in shown.report.clauses}
    if level:
        assert findings["Beats holding less"] == "open"
        assert findings["Holds under other smiles"] == "open"
        assert findings["Holds on other roll days"] == "open"
