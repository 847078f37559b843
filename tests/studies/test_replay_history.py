"""One overlay on one history: every figure of the results folder, recomputed from its own Parquet files.

Rung: independent library (pandas works out from ``daily.parquet`` and ``rolls.parquet`` what ``summary.json`` says)
and identity (the same folder twice, mixes that have the figure they were made for, parts that add up).
"""

from __future__ import annotations

import json
import re
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest

from backtest import (
    STEEP,
    Costs,
    Leg,
    Market,
    Overlay,
    PercentOfForward,
    PercentOfSpot,
    SSVISmile,
    Volatility,
    replay,
)
from backtest.volatility import SMILE_LADDER
from data_loaders import History
from studies.answer_folder import make_answer_folder
from studies.errors import ResultsError
from studies.overlay_files import OverlayFile, overlay_from_table, shorthand_overlay
from studies.replay_history import Answer, answer, daily_frame, summary
from studies.results import json_text
from tests.studies.conftest import without_pictures

PUT = Leg(position="long", right="put", roll="quarter", strike=PercentOfSpot(95))
CALL = Leg(position="short", right="call", roll="month", strike=PercentOfSpot(110))
BAND = Overlay(name="band", legs=(PUT, CALL))
SWAP = Volatility(quote="variance swap")

# what every figures object of the summary must hold, and the mixes' own addition
FIGURES = {
    "annual_return", "volatility", "sharpe", "sortino", "max_drawdown", "max_drawdown_peak", "max_drawdown_trough",
    "max_drawdown_recovery", "calmar", "ulcer", "beta", "alpha", "leland_beta", "leland_alpha", "stutzer",
    "capture_up", "capture_down", "expected_shortfall_daily", "expected_shortfall_monthly", "skewness",
    "excess_kurtosis",
}  # fmt: skip
MIXES = ["mix_same_beta", "mix_same_volatility", "mix_same_return", "mix_same_drawdown", "mix_same_delta"]
OBJECTS = ["overlay", "hold", *MIXES, "put_only", "call_only"]
GREEKS = ["delta", "gamma", "vega", "theta", "rho"]
DAILY = ["date", "overlay", "hold", *MIXES, "put_only", "call_only", *GREEKS, "cash", "option_value", "shares", "units"]
ROLLS = [
    "leg", "right", "position", "ratio", "opened", "expiry", "closed", "spot_open", "forward", "strike", "vol",
    "premium", "cost", "units", "delta", "spot_close", "settled", "exit_cost", "profit", "flag",
]  # fmt: skip

CASES = {
    "band": OverlayFile(overlay=BAND, volatility=SWAP),
    "cash band": OverlayFile(overlay=Overlay(name="cash band", legs=(PUT, CALL), account="cash"), volatility=SWAP),
    "long terms, ratios, costs": OverlayFile(
        overlay=Overlay(
            name="long terms",
            legs=(
                Leg(position="long", right="put", roll="quarter", term_months=12, ratio=1.5, strike=PercentOfSpot(90)),
                Leg(position="short", right="put", roll="half", phase=1, ratio=0.5, strike=PercentOfForward(80)),
                Leg(position="short", right="call", roll="month", term_months=3, ratio=0.75, strike=PercentOfSpot(106)),
            ),
            costs=Costs(half_spread_percent=3, commission=1.0, settlement_fee=2.0, stock_bps=2.0),
        ),
        volatility=Volatility(smile=SSVISmile(rho=-0.4, eta=1.2, gamma=0.35)),
    ),
    "sold calls": OverlayFile(overlay=Overlay(name="calls", legs=(CALL,)), volatility=Volatility(smile=STEEP)),
}


@dataclass(frozen=True, kw_only=True)
class Made:
    """A results folder read back."""

    history: History
    found: Answer
    folder: Path
    summary: dict[str, Any]
    manifest: dict[str, Any]
    daily: pd.DataFrame
    rolls: pd.DataFrame

    @property
    def cash_return(self) -> pd.Series:
        """Return on cash from day to day: the previous day's annual effective rate over calendar days (C5, C11)."""
        dates = self.daily["date"]
        rate = self.history.frame["rate"].reindex(dates).to_numpy()
        days = dates.diff().dt.days
        return pd.Series((1 + np.r_[np.nan, rate[:-1]]) ** (days / 365) - 1)

    def excess(self, name: str) -> pd.Series:
        """Daily return less that on cash, from the second day on."""
        return (self.daily[name].pct_change() - self.cash_return).iloc[1:]


def read_back(history: History, found: Answer, folder: Path) -> Made:
    return Made(
        history=history,
        found=found,
        folder=folder,
        summary=json.loads((folder / "summary.json").read_text(encoding="utf-8"), parse_constant=no_constants),
        manifest=json.loads((folder / "manifest.json").read_text(encoding="utf-8"), parse_constant=no_constants),
        daily=pd.read_parquet(folder / "daily.parquet"),
        rolls=pd.read_parquet(folder / "rolls.parquet"),
    )


def no_constants(word: str) -> float:
    raise AssertionError(f"{word} is no JSON")


@pytest.fixture(scope="module")
def make(demo_history: History, tmp_path_factory: pytest.TempPathFactory) -> Callable[[str], Made]:
    """Make the folder of a case once."""
    kept: dict[str, Made] = {}

    def made(case: str) -> Made:
        if case not in kept:
            with pytest.MonkeyPatch.context() as patch:
                without_pictures(patch)
                report, folder = make_answer_folder(
                    demo_history.frame, CASES[case], label="demo", inputs=[], notes=demo_history.notes,
                    out=tmp_path_factory.mktemp("made") / "out", command="rollband replay demo", resamples=100,
                )  # fmt: skip
            kept[case] = read_back(demo_history, report.answer, folder)
        return kept[case]

    return made


@pytest.fixture(params=CASES)
def made(make: Callable[[str], Made], request: pytest.FixtureRequest) -> Made:
    return make(request.param)


@pytest.fixture
def band(make: Callable[[str], Made]) -> Made:
    return make("band")


# ---------------------------------------------------------------- the schema


def test_summary_has_every_key(made: Made) -> None:
    found = made.summary
    assert found["schema"] == 1
    for name in (
        "inception",
        "end",
        "years",
        "rolls",
        "open_legs",
        "roll_cost",
        "attribution",
        "smile_ladder",
        "warnings",
    ):
        assert found[name] not in (None, "", {})
    absent = {name for name in OBJECTS if found[name] is None}
    assert absent == ({"put_only"} if found["name"] == "calls" else set())
    for name in set(OBJECTS) - absent:
        figures = found[name]
        assert set(figures) >= FIGURES
        # a fall that is not recovered by the end has no recovery date; every other figure is there
        assert {name for name in FIGURES if figures[name] is None} <= {"max_drawdown_recovery"}
        assert all(np.isfinite(value) for value in figures.values() if isinstance(value, float))


def test_summary_is_decimals_and_iso_dates(made: Made) -> None:
    for name in OBJECTS:
        if (figures := made.summary[name]) is not None:
            assert 0 < figures["volatility"] < 0.5
            assert -1 < figures["max_drawdown"] < 0
            assert -0.2 < figures["annual_return"] < 0.5
            assert -0.5 < figures["expected_shortfall_monthly"] < 0
            for which in ("peak", "trough"):
                assert re.fullmatch(r"\d{4}-\d{2}-\d{2}", figures[f"max_drawdown_{which}"])
    days = made.daily["date"]
    assert (made.summary["inception"], made.summary["end"]) == (str(days.iloc[0].date()), str(days.iloc[-1].date()))
    assert made.summary["years"] == pytest.approx((days.iloc[-1] - days.iloc[0]).days / 365.25, rel=1e-15)


def test_daily_columns(made: Made) -> None:
    legs = [leg.label for leg in made.found.replay.legs]
    expected = [name for name in DAILY if made.summary.get(name, 0) is not None]
    expected += [f"{leg}_{what}" for leg in legs for what in ("strike", "mark")]
    assert made.daily.columns.tolist() == expected
    assert not made.daily.isna().to_numpy().any()
    assert made.daily["date"].is_monotonic_increasing
    assert made.daily["date"].is_unique
    for name in ("overlay", "hold"):
        assert made.daily[name].iloc[0] == 1.0


def test_rolls_columns(made: Made) -> None:
    assert [name for name in made.rolls.columns if name in ROLLS] == ROLLS
    assert made.summary["rolls"] == len(made.rolls)
    live = made.rolls["closed"].isna()
    assert made.summary["open_legs"] == live.sum() == len(made.found.replay.legs)
    always = [name for name in ROLLS if name not in ("closed", "spot_close", "settled", "exit_cost")]
    assert not made.rolls[always].isna().to_numpy().any()
    assert not made.rolls.loc[~live, ROLLS].isna().to_numpy().any()
    assert made.rolls.loc[live, "flag"].str.contains("open").all()


def test_wealth_is_its_parts(made: Made) -> None:
    daily = made.daily.merge(made.history.frame["close"], left_on="date", right_index=True)
    parts = daily["shares"] * daily["close"] + daily["cash"] + daily["option_value"]
    np.testing.assert_allclose(parts[1:], daily["overlay"][1:], rtol=1e-12)
    # on the first day wealth is taken before the costs of the first trade
    rolls = made.rolls[made.rolls["opened"] == daily["date"].iloc[0]]
    stock = abs(daily["shares"].iloc[0] - 1 / daily["close"].iloc[0]) * daily["close"].iloc[0]
    bps = made.found.replay.overlay.costs.stock_bps if made.found.replay.overlay.account == "resize" else 0.0
    costs = (rolls["units"] * rolls["ratio"] * rolls["cost"]).sum() + bps / 1e4 * stock
    assert parts.iloc[0] == pytest.approx(1.0 - costs, rel=1e-12)


def test_manifest(band: Made) -> None:
    manifest = band.manifest
    assert set(manifest) >= {"schema", "versions", "command", "inputs", "settings", "seed"}
    assert set(manifest["versions"]) == {"numpy", "pandas", "pyarrow", "scipy", "python"}
    assert overlay_from_table(manifest["settings"]["overlay"]) == CASES["band"]
    assert manifest["command"] == "rollband replay demo"


def test_the_folder_holds_nothing_else(band: Made) -> None:
    assert sorted(path.name for path in band.folder.iterdir()) == [
        "daily.parquet", "manifest.json", "report.html", "rolls.parquet", "summary.json", "tables",
    ]  # fmt: skip


# ---------------------------------------------------------------- the same again


def test_the_same_bytes_again(made: Made, tmp_path: Path) -> None:
    agreed = CASES[next(name for name, case in CASES.items() if case.overlay is made.found.replay.overlay)]
    _, again = make_answer_folder(
        made.history.frame.copy(), agreed, label="demo", inputs=[], notes=made.history.notes, out=tmp_path / "again",
        command="rollband replay demo", resamples=100,
    )  # fmt: skip
    for name in ("daily.parquet", "rolls.parquet", "summary.json", "manifest.json"):
        assert (again / name).read_bytes() == (made.folder / name).read_bytes()


def test_a_free_folder_is_found_and_reused(demo_history: History, tmp_path: Path) -> None:
    def go(put: int, rate: float | None = None) -> str:
        agreed = shorthand_overlay(put=put, call=None)
        _, folder = make_answer_folder(
            demo_history.frame.iloc[:400], agreed, label="../demo", inputs=[], rate=rate, results=tmp_path / "results",
        )  # fmt: skip
        return folder.name

    assert [go(90), go(95), go(90)] == ["demo-quarterly-90-put", "demo-quarterly-95-put", "demo-quarterly-90-put"]
    assert [go(90, rate=2.0), go(90, rate=2.0), go(90)] == [
        "demo-quarterly-90-put-2", "demo-quarterly-90-put-2", "demo-quarterly-90-put",
    ]  # fmt: skip


def test_a_foreign_folder_is_refused_before_any_work(demo_history: History, tmp_path: Path) -> None:
    (tmp_path / "mine.txt").write_text("mine")
    with pytest.raises(ResultsError, match="holds other files"):
        # the frame is no market: had any work begun, the complaint would be another
        make_answer_folder(demo_history.frame[["volume"]], CASES["band"], label="x", inputs=[], out=tmp_path)
    assert [path.name for path in tmp_path.iterdir()] == ["mine.txt"]


# ---------------------------------------------------------------- comparisons (C10)


def test_same_beta_mix(made: Made) -> None:
    def beta(name: str) -> float:
        own, hold = made.excess(name), made.excess("hold")
        return own.cov(hold) / hold.var()

    assert beta("mix_same_beta") == pytest.approx(beta("overlay"), abs=1e-10)
    assert made.summary["overlay"]["beta"] == pytest.approx(beta("overlay"), abs=1e-10)
    assert made.summary["mix_same_beta"]["share_of_stock"] == pytest.approx(beta("overlay"), abs=1e-10)


def test_same_volatility_mix(made: Made) -> None:
    def volatility(name: str) -> float:
        return made.daily[name].pct_change().std() * 252**0.5

    assert volatility("mix_same_volatility") == pytest.approx(volatility("overlay"), abs=1e-10)
    assert made.summary["overlay"]["volatility"] == pytest.approx(volatility("overlay"), abs=1e-10)


def test_same_return_mix(made: Made) -> None:
    def annual(name: str) -> float:
        days = (made.daily["date"].iloc[-1] - made.daily["date"].iloc[0]).days
        return made.daily[name].iloc[-1] ** (365.25 / days) - 1

    assert annual("mix_same_return") == pytest.approx(annual("overlay"), abs=1e-10)
    assert made.summary["overlay"]["annual_return"] == pytest.approx(annual("overlay"), abs=1e-10)
    # the smaller root: any smaller share grows less
    share = made.summary["mix_same_return"]["share_of_stock"]
    for less in (0.0, 0.5 * share, 0.999 * share):
        grown = (1 + made.cash_return + less * made.excess("hold")).iloc[1:].prod()
        assert grown < made.daily["overlay"].iloc[-1]


def test_same_drawdown_mix(made: Made) -> None:
    def deepest(name: str) -> float:
        return (made.daily[name] / made.daily[name].cummax() - 1).min()

    assert deepest("mix_same_drawdown") == pytest.approx(deepest("overlay"), abs=1e-10)
    assert made.summary["overlay"]["max_drawdown"] == pytest.approx(deepest("overlay"), abs=1e-10)


def test_constant_mixes_hold_one_share_every_day(made: Made) -> None:
    hold = made.excess("hold")
    for name in MIXES[:4]:
        share = made.summary[name]["share_of_stock"]
        np.testing.assert_allclose(made.excess(name), share * hold, rtol=0, atol=1e-13)


def test_same_delta_mix_holds_the_delta_of_the_evening_before(made: Made) -> None:
    before = made.daily["delta"].shift().iloc[1:]
    np.testing.assert_allclose(made.excess("mix_same_delta"), before * made.excess("hold"), rtol=0, atol=1e-13)
    assert made.summary["mix_same_delta"]["share_of_stock"] == pytest.approx(before.mean(), rel=1e-12)


def test_hold_is_the_share_with_dividends(made: Made) -> None:
    frame = made.history.frame.loc[made.daily["date"].iloc[0] :]
    grown = frame["close"] * (1 + frame["dividend"] / frame["close"])
    expected = (grown / frame["close"].shift()).fillna(1.0).cumprod()
    np.testing.assert_allclose(made.daily["hold"], expected, rtol=1e-12)


def test_one_side_at_a_time_from_the_same_day(band: Made) -> None:
    found = band.found
    assert found.put_only is not None
    assert found.call_only is not None
    assert found.put_only.dates[0] == found.call_only.dates[0] == found.replay.dates[0]
    assert len(found.put_only) == len(found.call_only) == len(found.replay)
    assert found.put_only.overlay.legs == (PUT,)
    assert found.call_only.overlay.legs == (CALL,)
    for name, legs in (("put_only", (PUT,)), ("call_only", (CALL,))):
        alone = replay(found.replay.market, Overlay(legs=legs), volatility=SWAP, inception=found.replay.dates[0])
        np.testing.assert_array_equal(band.daily[name], alone.wealth)


def test_a_side_that_does_not_roll_on_inception_opens_with_a_stub(demo_history: History) -> None:
    # quarterly put on the listed months, quarterly call a month later: the call alone begins on the put's day
    call = Leg(position="short", right="call", roll="quarter", phase=1, strike=PercentOfSpot(105))
    found = answer(Market.from_frame(demo_history.frame), Overlay(legs=(PUT, call)))
    assert found.call_only is not None
    assert found.call_only.dates[0] == found.replay.dates[0]
    np.testing.assert_array_equal(found.call_only.legs[0].strike, found.replay.legs[1].strike)
    np.testing.assert_array_equal(found.call_only.legs[0].opened, found.replay.legs[1].opened)
    assert found.call_only.legs[0].flags()[0] == "stub"


def test_an_overlay_of_puts_has_no_calls(demo_history: History) -> None:
    found = answer(Market.from_frame(demo_history.frame), Overlay(name="put", legs=(PUT,)))
    told = json.loads(json_text(summary(found)))
    assert told["call_only"] is None
    assert told["put_only"] == told["overlay"]
    assert "call_only" not in daily_frame(found).columns
    assert not daily_frame(found).isna().to_numpy().any()


# ---------------------------------------------------------------- attribution, roll costs, ladder


def test_attribution_adds_up(made: Made) -> None:
    parts = dict(made.summary["attribution"])
    legs = [f"volatility_{leg.label}" for leg in made.found.replay.legs]
    assert list(parts) == ["passive_equity", "equity_timing", *legs, "cost", "excess_return"]
    whole = parts.pop("excess_return")
    assert sum(parts.values()) == pytest.approx(whole, abs=1e-12)
    assert whole == pytest.approx(made.excess("overlay").mean() * 252, abs=1e-12)
    hold = made.excess("hold")
    delta = made.daily["delta"].shift().iloc[1:]
    assert parts["passive_equity"] == pytest.approx(delta.mean() * hold.mean() * 252, abs=1e-12)
    assert parts["equity_timing"] == pytest.approx(((delta - delta.mean()) * hold).mean() * 252, abs=1e-12)
    assert parts["cost"] < 0


def test_roll_costs_are_the_rolls(made: Made) -> None:
    rolls = made.rolls.fillna({"exit_cost": 0.0, "settled": 0.0, "open_value": 0.0})
    years = made.summary["years"]
    told = made.summary["roll_cost"]
    assert told["years"] == years
    assert list(told["legs"]) == [leg.label for leg in made.found.replay.legs]
    total = dict.fromkeys(told["all_a_year"], 0.0)
    for label, own in rolls.groupby("leg"):
        weight = own["ratio"] / own["spot_open"]
        bought = own["position"].iloc[0] == "long"
        premium = (weight * own["premium"]).sum()
        settled = (weight * own["settled"]).sum()
        open_value = (weight * own["open_value"]).sum() * (1 if bought else -1)
        cost = (weight * (own["cost"] + own["exit_cost"])).sum()
        expected = {
            "premium_paid": premium if bought else 0.0,
            "premium_received": 0.0 if bought else premium,
            "trading_cost": cost,
            "settled_received": settled if bought else 0.0,
            "settled_paid": 0.0 if bought else settled,
            "open_value": open_value,
            "net": (settled - premium) * (1 if bought else -1) + open_value - cost,
        }
        leg = told["legs"][label]
        assert (leg["rolls"], leg["open_rolls"]) == (len(own), own["closed"].isna().sum())
        assert leg["paid_off"] == (own["settled"] > 0).sum()
        for name, value in expected.items():
            assert leg["whole"][name] == pytest.approx(value, rel=1e-12, abs=1e-15)
            assert leg["a_year"][name] == pytest.approx(value / years, rel=1e-12, abs=1e-15)
            assert leg["a_roll"][name] == pytest.approx(value / len(own), rel=1e-12, abs=1e-15)
            total[name] += value / years
    for name, value in total.items():
        assert told["all_a_year"][name] == pytest.approx(value, rel=1e-12, abs=1e-15)
    profit = (rolls["profit"] / rolls["spot_open"]).sum()
    assert told["all_a_year"]["net"] == pytest.approx(profit / years, rel=1e-12)


def test_the_ladder_holds_the_smile_used(made: Made) -> None:
    ladder = made.summary["smile_ladder"]
    used = [name for name, rung in ladder.items() if rung["used"]]
    own = made.found.replay.volatility.smile.name
    standing = ["flat", "mild", "index", "steep"]
    assert used == [own if own in standing else "own"]
    assert list(ladder) == (standing if own in standing else [*standing, "own"])
    (rung,) = (ladder[name] for name in used)
    for name in ("annual_return", "volatility", "sharpe", "max_drawdown", "beta"):
        assert rung[name] == made.summary["overlay"][name]
    for name in ("annual_return", "sharpe"):
        assert rung[f"mix_same_beta_{name}"] == made.summary["mix_same_beta"][name]
    assert rung["net_roll_cost_a_year"] == made.summary["roll_cost"]["all_a_year"]["net"]


@pytest.mark.parametrize("smile", ["flat", "mild", "steep"])
def test_every_rung_is_a_replay_of_its_own(band: Made, smile: str) -> None:
    volatility = Volatility(smile=SMILE_LADDER[smile], quote="variance swap")
    alone = summary(answer(band.found.replay.market, BAND, volatility=volatility))
    assert alone["smile_ladder"][smile] == {**band.summary["smile_ladder"][smile], "used": True}
    assert alone["overlay"]["sharpe"] == band.summary["smile_ladder"][smile]["sharpe"]


def test_far_puts_cost_more_the_steeper_the_smile(band: Made) -> None:
    costs = [rung["net_roll_cost_a_year"] for rung in band.summary["smile_ladder"].values()]
    assert costs == sorted(costs, reverse=True)


def test_notes_of_the_history_are_passed_on(band: Made) -> None:
    assert band.summary["history_notes"] == list(band.history.notes)
    assert len(band.summary["history_notes"]) > 0
