"""Margin, a counterparty that defaults and a sale instead: from the overlay file to summary, terminal, page and tables.

Rung: independent library (pandas works out from the folder's Parquet files what the summary says) and behaviour (what
is told where it is asked for, and nothing where it is not).
"""

from __future__ import annotations

import json
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest
from rich.console import Console

from data_loaders import History
from studies.answer_folder import make_answer_folder, make_numbers_again
from studies.options import Account
from studies.overlay_files import OverlayFile, overlay_from_table, parse_overlay
from studies.page.build import build_report
from studies.report import Report
from studies.tables_csv import tables_of
from studies.terminal import show_summary
from studies.wiring import with_options
from tests.studies.conftest import without_pictures
from tests.studies.page.conftest import Node, read_page, table_of

PUT = '[[leg]]\nposition = "long"\nright = "put"\nstrike = { percent_of_spot = 95 }\n'
CALL = '[[leg]]\nposition = "short"\nright = "call"\nroll = "month"\nstrike = { percent_of_spot = 105 }\n'
SOLD_PUT = '[[leg]]\nposition = "short"\nright = "put"\nstrike = { percent_of_spot = 85 }\nratio = 0.5\n'
DATES = '[counterparty]\nrecovery = 0.25\ndefault = ["2018-12-22", "2020-03-20", "1999-12-31"]\n'
WORST = "[counterparty]\n"
SALE = "[sale]\ngain_percent = 60\ntax_percent = 25\ncost_bps = 5\n"

CASES = {
    "band": PUT + CALL,
    "band, all asked": PUT + CALL + DATES + SALE,
    "puts, worst payoff": PUT + WORST,
    "put alone": PUT,
    "sold put": PUT + SOLD_PUT + SALE,
}


@dataclass(frozen=True, kw_only=True)
class Made:
    """A results folder read back, and what it was made of."""

    agreed: OverlayFile
    report: Report
    folder: Path

    @property
    def summary(self) -> dict[str, Any]:
        return json.loads((self.folder / "summary.json").read_text(encoding="utf-8"))

    @property
    def daily(self) -> pd.DataFrame:
        return pd.read_parquet(self.folder / "daily.parquet").set_index("date")

    @property
    def rolls(self) -> pd.DataFrame:
        return pd.read_parquet(self.folder / "rolls.parquet")

    @property
    def years(self) -> float:
        return (self.daily.index[-1] - self.daily.index[0]).days / 365.25


@pytest.fixture(scope="module")
def years(demo_history: History) -> pd.DataFrame:
    """Five years of the demo in which bought puts pay and calls are reached."""
    return demo_history.frame.loc["2017":"2021"]


@pytest.fixture(scope="module")
def make(years: pd.DataFrame, tmp_path_factory: pytest.TempPathFactory) -> Callable[[str], Made]:
    """Make the folder of a case once."""
    kept: dict[str, Made] = {}

    def made(case: str) -> Made:
        if case not in kept:
            agreed = parse_overlay(CASES[case])
            with pytest.MonkeyPatch.context() as patch:
                without_pictures(patch)
                report, folder = make_answer_folder(
                    years, agreed, label="demo", inputs=[], out=tmp_path_factory.mktemp("made") / "out", resamples=100
                )
            kept[case] = Made(agreed=agreed, report=report, folder=folder)
        return kept[case]

    return made


def page_of(made: Made) -> Node:
    report = made.report
    return read_page(
        build_report(
            report.answer, report.findings, report.inference, report.clauses, history="demo", how_to_run="rollband"
        )
    )


def told(made: Made) -> list[str]:
    """The lines on the terminal that a line of ours begins."""
    console = Console(width=300, record=True, file=None, quiet=False)
    with console.capture() as shown:
        show_summary(console, made.summary, history="demo")
    begins = ("margin, ", "if the counterparty", "sale instead: ")
    return [line for line in shown.get().splitlines() if line.startswith(begins)]


# ---------------------------------------------------------------- what is said where


def test_keys_are_there_where_they_are_asked_for(make: Callable[[str], Made]) -> None:
    keys = ("margin", "counterparty", "mix_sale")
    found = {case: [key for key in keys if key in make(case).summary] for case in CASES}
    assert found == {
        "band": ["margin"],
        "band, all asked": ["margin", "counterparty", "mix_sale"],
        "puts, worst payoff": ["counterparty"],
        "put alone": [],
        "sold put": ["margin", "mix_sale"],
    }
    for case in CASES:
        assert ("mix_sale" in make(case).daily.columns) == ("mix_sale" in found[case])
        tables = tables_of(make(case).report)
        assert ("counterparty" in tables) == ("counterparty" in found[case])
        page = page_of(make(case))
        titles = [section.one("h2").words for section in page.all("section")]
        assert titles.count("If the counterparty defaults") == ("counterparty" in found[case])
        assert ("Margin that the sold options may require" in page.words) == ("margin" in found[case])
        assert ("Sale instead" in page.words) == ("mix_sale" in found[case])
        assert len(told(make(case))) == len(found[case])


def test_what_is_asked_beside_changes_no_other_figure(make: Callable[[str], Made]) -> None:
    plain, asked = make("band").summary, make("band, all asked").summary
    for key in ("counterparty", "mix_sale"):
        asked.pop(key)
    assert asked == plain
    pd.testing.assert_frame_equal(make("band, all asked").daily.drop(columns="mix_sale"), make("band").daily)


def test_the_manifest_makes_the_folder_again(make: Callable[[str], Made], years: pd.DataFrame, tmp_path: Path) -> None:
    made = make("band, all asked")
    manifest = json.loads((made.folder / "manifest.json").read_text(encoding="utf-8"))
    again = overlay_from_table(manifest["settings"]["overlay"])
    assert again == made.agreed
    assert again.counterparty is not None
    assert again.sale is not None
    make_numbers_again(years, again, tmp_path, seed=1, resamples=100, label="demo", inputs=[])
    for name in ("daily.parquet", "rolls.parquet", "summary.json"):
        assert (tmp_path / name).read_bytes() == (made.folder / name).read_bytes()


def test_options_of_the_command_line_leave_it_as_it_is() -> None:
    agreed = parse_overlay(CASES["band, all asked"])
    changed = with_options(
        agreed, account=Account.cash, vol_quote=None, smile="flat", portfolio=2e6, costs={"stock_bps": 2.0}
    )
    assert (changed.overlay.account, changed.overlay.portfolio) == ("cash", 2e6)
    assert (changed.counterparty, changed.sale) == (agreed.counterparty, agreed.sale)


# ---------------------------------------------------------------- figures from the Parquet files


def test_margin(make: Callable[[str], Made], years: pd.DataFrame) -> None:
    made = make("band")
    daily, spot = made.daily, years["close"].reindex(made.daily.index)
    outside = (daily["call_strike"] - spot).clip(lower=0)
    each = daily["call_mark"] + np.maximum(0.2 * spot - outside, 0.1 * spot)
    share = each * daily["units"] / daily["overlay"]
    found = made.summary["margin"]
    assert found["no_shares_counted"]["peak"] == pytest.approx(share.max(), rel=1e-12)
    assert found["no_shares_counted"]["day"] == str(share.idxmax().date())
    assert found["shares_as_cover"] == {"peak": 0.0, "day": None}
    # half a put at 85 sold beside one at 95 bought, to the same dates, needs nothing
    assert {one["peak"] for name, one in make("sold put").summary["margin"].items() if name != "unit"} == {0.0}


def test_counterparty_on_dates(make: Callable[[str], Made]) -> None:
    made = make("band, all asked")
    found, daily, rolls = made.summary["counterparty"], made.daily, made.rolls
    assert (found["recovery"], found["outside"]) == (0.25, ["1999-12-31"])
    assert found["default"] == ["1999-12-31", "2018-12-22", "2020-03-20"]
    # 22 December 2018 is a Saturday
    assert [event["date"] for event in found["events"]] == ["2018-12-24", "2020-03-20"]
    wealth = daily["overlay"].copy()
    for event in found["events"]:
        today = pd.Timestamp(event["date"])
        before = daily.index[daily.index.get_loc(today) - 1]
        held = rolls[(rolls["opened"] <= before) & ~(rolls["closed"] <= before)]
        marks = [daily.loc[today, f"{leg}_mark"] for leg in held["leg"]]
        worth = np.where(held["closed"] == today, held["settled"], marks) * np.where(held["position"] == "long", 1, -1)
        paid = (rolls["cost"] * (rolls["opened"] == today)).sum() * daily.loc[today, "units"]
        paid += (rolls["exit_cost"].fillna(0) * (rolls["closed"] == today)).sum() * daily.loc[before, "units"]
        exposure = max(0.0, worth.sum() * daily.loc[before, "units"]) / (daily.loc[today, "overlay"] + paid)
        assert event["exposure"] == pytest.approx(exposure, rel=1e-12)
        assert event["loss"] == pytest.approx(0.75 * exposure, rel=1e-12)
        wealth.loc[today:] *= 1 - event["loss"]
    assert max(event["loss"] for event in found["events"]) > 0.01
    compare(found, wealth, made)


def compare(found: dict[str, Any], wealth: pd.Series, made: Made) -> None:
    """Return and drawdown of a path, and their difference to the overlay's."""
    annual = wealth.iloc[-1] ** (1 / made.years) - 1
    depth = (wealth / wealth.cummax() - 1).min()
    assert found["annual_return"] == pytest.approx(annual, abs=1e-12)
    assert found["max_drawdown"] == pytest.approx(depth, abs=1e-12)
    own = made.summary["overlay"]
    assert found["annual_return_difference"] == pytest.approx(annual - own["annual_return"], abs=1e-12)
    assert found["max_drawdown_difference"] == pytest.approx(depth - own["max_drawdown"], abs=1e-12)


def test_counterparty_at_the_worst_payoff(make: Callable[[str], Made]) -> None:
    made = make("puts, worst payoff")
    found, daily = made.summary["counterparty"], made.daily
    ended = made.rolls[made.rolls["closed"].notna()]
    shares = {}
    for one in ended.itertuples():
        today = daily.index.get_loc(one.closed)
        dealt = made.rolls.loc[made.rolls["opened"] == one.closed, "cost"].sum() * daily["units"].iloc[today]
        paid: Any = one.settled
        shares[one.closed] = daily["units"].iloc[today - 1] * paid / (daily["overlay"].iloc[today] + dealt)
    worst = max(shares, key=lambda day: shares[day])
    assert shares[worst] > 0
    assert found["default"] == "worst put payoff"
    assert found["events"] == [
        {
            "date": str(worst.date()),
            "exposure": pytest.approx(shares[worst], rel=1e-12),
            "loss": pytest.approx(0.6 * shares[worst], rel=1e-12),
        }
    ]
    wealth = daily["overlay"].copy()
    wealth.loc[worst:] *= 1 - 0.6 * shares[worst]
    compare(found, wealth, made)


@pytest.mark.parametrize("case", ["band, all asked", "sold put"])
def test_sale(make: Callable[[str], Made], years: pd.DataFrame, case: str) -> None:
    made = make(case)
    found, daily = made.summary["mix_sale"], made.daily
    kept = made.summary["mix_same_beta"]["share_of_stock"]
    assert 0 < kept < 1
    assert found["share_of_stock"] == kept
    assert found["charge"] == pytest.approx(0.0005 + 0.25 * 0.60, rel=1e-14)
    rate = years["rate"].reindex(daily.index).shift()
    days = daily.index.to_series().diff().dt.days
    cash = ((1 + rate) ** (days / 365)).fillna(1.0).cumprod()
    wealth = kept * daily["hold"] + (1 - kept) * (1 - 0.1505) * cash
    np.testing.assert_allclose(daily["mix_sale"].iloc[1:], wealth.iloc[1:], rtol=1e-12)
    assert daily["mix_sale"].iloc[0] == 1.0
    assert found["annual_return"] == pytest.approx(wealth.iloc[-1] ** (1 / made.years) - 1, abs=1e-12)
    assert found["volatility"] == pytest.approx(daily["mix_sale"].pct_change().std() * 252**0.5, rel=1e-10)
    assert set(found) == set(made.summary["mix_same_beta"]) | {"charge"}


def test_a_charge_of_the_first_day_is_not_drawn_again(make: Callable[[str], Made]) -> None:
    made = make("band, all asked")
    assert "mix_sale" not in made.report.inference.comparisons
    assert "mix_sale" not in made.summary["inference"]["overlay_less"]
    contest = table_of(page_of(made), "Overlay less each comparison")
    assert [row[0] for row in contest[1:]] == [
        f"less {name}" for name in (
            "hold", "same-beta mix", "same-volatility mix", "same-return mix", "same-drawdown mix", "same-delta mix",
        )
    ]  # fmt: skip


# ---------------------------------------------------------------- terminal, page and tables


def test_terminal(make: Callable[[str], Made]) -> None:
    made = make("band, all asked")
    found = made.summary
    margin, default, sale = told(made)
    peak = found["margin"]["no_shares_counted"]
    assert margin == (
        "margin, by the exchanges' simple rule (your broker's own holds): nothing with the shares as cover, at most "
        f"{100 * peak['peak']:.1f}% of wealth ({peak['day']}) with none of them counted"
    )
    stress = found["counterparty"]
    left = np.prod([1 - event["loss"] for event in stress["events"]])
    assert default == (
        f"if the counterparty defaults 2 times from 2018-12-24, 25% recovered: {100 * (1 - left):.1f}% of wealth lost, "
        f"{100 * stress['annual_return_difference']:+.2f} points of return a year, "
        f"{100 * stress['max_drawdown_difference']:+.2f} on the maximum drawdown; outside the replay: 1999-12-31"
    )
    assert sale == (
        f"sale instead: {100 * found['mix_sale']['share_of_stock']:.0f}% of the shares kept, the rest sold at once; "
        "15.05% of that goes in cost and tax as you stated them (no tax rule is in here)"
    )
    (default,) = told(make("puts, worst payoff"))
    day = make("puts, worst payoff").summary["counterparty"]["events"][0]["date"]
    assert default.startswith(f"if the counterparty defaults {day}, 40% recovered: ")


def written(value: float, digits: int, sign: str = "") -> str:
    """As the page writes it: a real minus, and none on zero."""
    text = f"{value:{sign}.{digits}f}"
    return (text if any(digit in "123456789" for digit in text) else text.lstrip("+-")).replace("-", "−")


def test_page(make: Callable[[str], Made]) -> None:
    made = make("band, all asked")
    found, page = made.summary, page_of(made)
    rows = {row[0]: row[1:] for row in table_of(page, "Overlay, hold and what holding less stock")}
    sale = found["mix_sale"]
    assert list(rows)[7:10] == ["same-delta mix", "sale instead", "put only"]
    assert rows["sale instead"][0] == f"{written(100 * sale['annual_return'], 1)}%"
    assert rows["sale instead"][-1] == f"{written(100 * sale['share_of_stock'], 0)}%"
    headline = page.having("id", "figures").words
    assert "15.05% of what is sold goes in cost and tax on the first day" in headline
    assert "no tax rule of any country is in here" in headline
    cost = page.having("id", "cost")
    peak = found["margin"]["no_shares_counted"]
    assert table_of(cost, "Margin that the sold options may require")[1:] == [
        ["with the shares as cover for sold calls", "0.0%", "never"],
        ["with none of the shares counted", f"{written(100 * peak['peak'], 1)}%", peak["day"]],
    ]
    assert "Your broker's own rule holds" in cost.words
    section, stress = page.having("id", "counterparty"), found["counterparty"]
    assert table_of(section, "Defaults")[1:] == [
        [one["date"], *(f"{written(100 * one[name], 2)}%" for name in ("exposure", "loss"))] for one in stress["events"]
    ]
    outcome = table_of(section, "The overlay without and with it")[1:]
    for row, title, name in zip(outcome, ("return a year", "maximum drawdown"), ("annual_return", "max_drawdown")):
        assert row == [
            title, f"{written(100 * found['overlay'][name], 1)}%", f"{written(100 * stress[name], 1)}%",
            written(100 * stress[f"{name}_difference"], 2, "+"),
        ]  # fmt: skip
    assert "25% of it is recovered" in section.words
    assert "1999-12-31 lies outside the days on which this replay has wealth" in section.words
    # what is asked a licensed adviser is said once on a page
    assert page.words.count("licensed adviser") == 1


def test_tables(make: Callable[[str], Made]) -> None:
    made = make("band, all asked")
    tables, found = tables_of(made.report), made.summary
    assert tables["counterparty"].to_dict("records") == found["counterparty"]["events"]
    assert "mix_sale" in tables["figures"]["path"].tolist()


# ---------------------------------------------------------------- where nothing can be had


def answered(years: pd.DataFrame, text: str, tmp_path: Path) -> Made:
    agreed = parse_overlay(text)
    report, folder = make_answer_folder(years, agreed, label="demo", inputs=[], out=tmp_path / "out", resamples=100)
    return Made(agreed=agreed, report=report, folder=folder)


def test_no_default_happens(years: pd.DataFrame, tmp_path: Path) -> None:
    far = PUT.replace("95", "30")
    made = answered(years, far + WORST, tmp_path / "worst")
    assert made.summary["counterparty"]["events"] == []
    assert told(made) == ["if the counterparty defaults: no bought put that ended paid off, nothing changes"]
    assert "No bought put that ended in this window paid off" in page_of(made).having("id", "counterparty").words
    assert len(tables_of(made.report)["counterparty"]) == 0
    made = answered(years, PUT + '[counterparty]\ndefault = ["1999-12-31", "2031-01-01"]\n', tmp_path / "outside")
    assert told(made) == ["if the counterparty defaults: nothing changes; outside the replay: 1999-12-31, 2031-01-01"]
    words = page_of(made).having("id", "counterparty").words
    assert "1999-12-31 and 2031-01-01 lie outside the days" in words
    assert "None of the dates asked about falls into this replay" in words


def test_an_overlay_that_loses_everything(years: pd.DataFrame, tmp_path: Path) -> None:
    ruin = SOLD_PUT.replace("0.5", "18").replace("85", "95")
    made = answered(years, ruin + WORST + SALE, tmp_path)
    found = made.summary
    assert not np.isfinite(made.daily["overlay"]).all()
    assert found["mix_sale"] is None
    assert found["margin"]["no_shares_counted"]["peak"] > 1
    assert found["counterparty"]["events"] == []
    assert found["counterparty"]["annual_return"] is None
    assert told(made)[-1] == "sale instead: cannot be had, there is no same-beta mix to take its share from"
    assert "Sale instead cannot be had" in page_of(made).words
