"""The CSV tables of a results folder, read back and added up.

Rung: identity (rows that must sum, the same numbers as in the summary) and behaviour (cells made safe).
"""

from __future__ import annotations

import csv
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from backtest import Leg, Market, Overlay, PercentOfSpot
from data_loaders import History
from studies.replay_history import answer, summary
from studies.report import Report, make_report
from studies.tables_csv import safe_text, tables_of, write_tables

BAND = (
    Leg(position="long", right="put", roll="quarter", strike=PercentOfSpot(95)),
    Leg(position="short", right="call", roll="month", strike=PercentOfSpot(110)),
)


@pytest.fixture(scope="module")
def report(demo_history: History) -> Report:
    market = Market.from_frame(demo_history.frame)
    overlay = Overlay(legs=BAND, name='=HYPERLINK("x")')
    return make_report(answer(market, overlay, start="2005-01-01"), resamples=100)


@pytest.fixture(scope="module")
def written(report: Report, tmp_path_factory: pytest.TempPathFactory) -> Path:
    folder = tmp_path_factory.mktemp("out") / "tables"
    write_tables(report, folder)
    return folder


def test_every_table_is_a_file_that_reads_back(report: Report, written: Path) -> None:
    tables = tables_of(report)
    assert sorted(path.stem for path in written.iterdir()) == sorted(tables)
    for name, frame in tables.items():
        back = pd.read_csv(written / f"{name}.csv")
        assert list(back.columns) == list(frame.columns)
        assert len(back) == len(frame) > 0
        for column in frame.columns:
            if pd.api.types.is_float_dtype(frame[column]):
                np.testing.assert_array_equal(back[column].to_numpy(dtype=float), frame[column].to_numpy(dtype=float))


def test_the_ledger_of_every_year_adds_up_to_the_overlay(report: Report, written: Path) -> None:
    years = pd.read_csv(written / "ledger_by_year.csv")
    lines = years.drop(columns=["span", "overlay", "overlay_wealth_at_start"])
    np.testing.assert_allclose(lines.sum(axis=1), years["overlay"], rtol=0, atol=1e-12)
    assert years["overlay"].sum() == pytest.approx(report.answer.replay.wealth[-1] - 1, abs=1e-12)
    whole = pd.read_csv(written / "ledger.csv")
    np.testing.assert_allclose(lines.sum(axis=0), whole[lines.columns].iloc[0], rtol=0, atol=1e-12)


def test_attribution_and_its_risk_shares_add_up(written: Path) -> None:
    parts = pd.read_csv(written / "attribution.csv").set_index("part")
    whole = parts.loc["excess_return"]
    rest = parts.drop(index="excess_return").sum()
    np.testing.assert_allclose(rest, whole, rtol=0, atol=1e-12)
    assert whole["share_of_risk"] == pytest.approx(1, abs=1e-12)


def test_months_compound_to_years_and_years_to_the_whole(report: Report, written: Path) -> None:
    months = pd.read_csv(written / "calendar_months.csv")
    years = pd.read_csv(written / "calendar_years.csv")
    grown = (1 + months.set_index(["path", "year"])["return"]).groupby(level=[0, 1]).prod() - 1
    np.testing.assert_allclose(
        grown.loc[list(zip(years["path"], years["year"], strict=True))], years["return"], rtol=1e-9
    )
    whole = (1 + years.set_index("path")["return"]).groupby(level=0).prod()
    assert whole["overlay"] == pytest.approx(report.answer.replay.wealth[-1], rel=1e-12)


def test_figures_are_those_of_the_summary(report: Report, written: Path) -> None:
    figures = pd.read_csv(written / "figures.csv").set_index("path")
    told = summary(report.answer)
    for path in ("overlay", "hold", "mix_same_delta", "put_only"):
        assert figures.loc[path, "sharpe"] == told[path]["sharpe"]
        assert figures.loc[path, "max_drawdown_peak"] == str(told[path]["max_drawdown_peak"])


def test_the_users_own_text_is_no_formula(written: Path) -> None:
    with (written / "overlay.csv").open(encoding="utf-8", newline="") as file:
        assert list(csv.reader(file)) == [["overlay"], ['\'=HYPERLINK("x")']]


@pytest.mark.parametrize("text", ["=1+1", "+1", "-1", "@SUM(A1)", "\t=1", "\r=1", "  =1", "\n=1"])
def test_what_looks_like_a_formula_gets_an_apostrophe(text: str) -> None:
    assert safe_text(text) == "'" + text


@pytest.mark.parametrize("text", ["", "95 put", "a=1", "put - call", "'=1"])
def test_other_text_stays_as_it_is(text: str) -> None:
    assert safe_text(text) == text
