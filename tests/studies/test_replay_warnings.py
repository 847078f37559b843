"""Windows, constants, ruin, and the sentences that warn of what may mislead.

Rung: identity (markets cut or changed so that exactly one sentence is due).
"""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from backtest import Leg, Market, Overlay, PercentOfSpot, RealisedVolatility, Volatility
from data_loaders import History
from studies.answer_folder import make_answer_folder
from studies.overlay_files import OverlayFile
from studies.page.luck import payoff_words
from studies.replay_history import answer, daily_frame, summary
from studies.report import put_payoffs
from studies.results import json_text

PUT = Leg(position="long", right="put", roll="quarter", strike=PercentOfSpot(95))
CALL = Leg(position="short", right="call", roll="month", strike=PercentOfSpot(110))
BAND = Overlay(name="band", legs=(PUT, CALL))
SWAP = Volatility(quote="variance swap")
AGREED = OverlayFile(overlay=BAND, volatility=SWAP)


# ---------------------------------------------------------------- windows


def test_a_window(demo_history: History, tmp_path: Path) -> None:
    _, folder = make_answer_folder(
        demo_history.frame,
        AGREED,
        label="x",
        inputs=[],
        start="2005-01-01",
        end="2010-03-01",
        out=tmp_path / "o",
    )
    told = json.loads((folder / "summary.json").read_text(encoding="utf-8"))
    assert (told["inception"], told["end"]) == ("2005-03-18", "2010-03-01")
    daily = pd.read_parquet(folder / "daily.parquet")
    assert (daily["overlay"].iloc[0], str(daily["date"].iloc[-1].date())) == (1.0, "2010-03-01")
    manifest = json.loads((folder / "manifest.json").read_text(encoding="utf-8"))
    assert (manifest["settings"]["from"], manifest["settings"]["to"]) == ("2005-01-01", "2010-03-01")


@pytest.mark.parametrize("days", [2, 3, 4, 15])
def test_a_few_days(demo_history: History, days: int) -> None:
    # whatever can be said of so short a window is said without a complaint from below
    frame = demo_history.frame.loc["2010-03-19":].iloc[:days]
    found = answer(Market.from_frame(frame), BAND, volatility=SWAP)
    told = json.loads(json_text(summary(found)))
    assert len(daily_frame(found)) == days
    assert told["overlay"]["annual_return"] == pytest.approx(found.replay.wealth[-1] - 1, rel=1e-12)
    assert told["overlay"]["expected_shortfall_monthly"] is None
    assert "less than a year: returns are totals, not annualised" in told["warnings"]


def test_constants_are_percents(demo_history: History, tmp_path: Path) -> None:
    frame = demo_history.frame[["close", "vol"]]
    report, folder = make_answer_folder(
        frame, AGREED, label="x", inputs=[], rate=3.0, dividend_yield=1.5, out=tmp_path / "o", resamples=100
    )
    found = report.answer
    assert found.replay.market.rate[0] == pytest.approx(np.log(1.03), rel=1e-15)
    assert found.replay.market.dividend_yield[0] == pytest.approx(np.log(1.015), rel=1e-15)
    manifest = json.loads((folder / "manifest.json").read_text(encoding="utf-8"))
    assert (manifest["settings"]["rate"], manifest["settings"]["dividend_yield"]) == (3.0, 1.5)
    assert found.assumptions["rate"] == "3.00% throughout"
    assert found.assumptions["dividend_yield"] == "1.50% throughout"


# ---------------------------------------------------------------- ruin


def test_an_overlay_that_loses_everything(demo_history: History) -> None:
    naked = Overlay(
        name="naked", legs=(Leg(position="short", right="put", ratio=8, strike=PercentOfSpot(100)),), account="cash"
    )
    found = answer(Market.from_frame(demo_history.frame), naked, volatility=SWAP)
    wealth = daily_frame(found)["overlay"]
    lost = int(wealth.isna().to_numpy().argmax())
    assert lost > 0
    assert wealth[lost:].isna().all()
    told = json.loads(json_text(summary(found)))
    assert told["overlay"]["annual_return"] is None
    assert told["mix_same_beta"] is None
    assert told["hold"]["annual_return"] > 0
    day = str(daily_frame(found)["date"][lost].date())
    assert f"the overlay loses everything on {day}: figures after that day do not exist" in told["warnings"]


# ---------------------------------------------------------------- warnings


REALISED = "options are priced off realised volatility; real ones are commonly dearer than the past was volatile"
AT_THE_MONEY = (
    "the vol series is read as at-the-money vol; if it is an index of the variance-swap kind, say "
    "--vol-quote variance-swap, or options come out about a fifth too dear in vol"
)
NO_DIVIDENDS = "no dividends are known: hold and overlay both go without them"
NO_RATE = "no rate is known: cash earns nothing and forwards carry no interest"
UNDER_A_YEAR = "less than a year: returns are totals, not annualised"
NO_PAYOFF = "no put paid off in this window: it says nothing about protection"
LONG_TERM = (
    "an option of 12 months is priced off a single vol of 30 days; beyond about 4 months one short-dated number is not "
    "enough, and in quiet times such options come out too cheap"
)
YEAR_PUT = Leg(position="long", right="put", roll="quarter", term_months=12, strike=PercentOfSpot(90))


def warned(
    frame: pd.DataFrame, overlay: Overlay = BAND, volatility: Volatility = SWAP, **window: str
) -> tuple[str, ...]:
    return answer(Market.from_frame(frame), overlay, volatility=volatility, **window).warnings


def test_warning_of_long_terms_on_one_short_vol(demo_history: History) -> None:
    frame = demo_history.frame
    overlay = Overlay(legs=(YEAR_PUT, CALL))
    assert LONG_TERM in warned(frame, overlay)
    # a second tenor, or a long one alone, and there is nothing to say; nor for a quarter
    assert LONG_TERM not in warned(frame.rename(columns={"vol": "vol_30"}).assign(vol_365=0.2), overlay)
    assert not any("priced off a single vol" in w for w in warned(frame.rename(columns={"vol": "vol_365"}), overlay))
    assert not any("priced off a single vol" in w for w in warned(frame))


def test_warning_of_realised_vol(demo_history: History) -> None:
    assert REALISED in warned(demo_history.frame.drop(columns="vol"))
    assert REALISED in warned(demo_history.frame, volatility=Volatility(source=RealisedVolatility()))
    assert AT_THE_MONEY not in warned(demo_history.frame.drop(columns="vol"))
    assert REALISED not in warned(demo_history.frame)


def test_warning_of_the_reading_at_the_money(demo_history: History) -> None:
    assert AT_THE_MONEY in warned(demo_history.frame, volatility=Volatility())
    assert AT_THE_MONEY not in warned(demo_history.frame)


def test_warning_of_no_dividends_and_no_rate(demo_history: History) -> None:
    frame = demo_history.frame
    assert NO_DIVIDENDS in warned(frame.drop(columns="dividend"))
    assert NO_DIVIDENDS not in warned(frame)
    assert NO_RATE in warned(frame.drop(columns="rate"))
    assert NO_RATE not in warned(frame)
    paying = answer(Market.from_frame(frame.drop(columns="dividend"), dividend_yield=0.02), BAND, volatility=SWAP)
    assert NO_DIVIDENDS not in paying.warnings


def test_warning_of_a_first_year_of_dividends(demo_history: History) -> None:
    first_year = "dividends are known from 1999-01-04 only: until 2000-01-04 forwards use less than a year of them"
    assert first_year in warned(demo_history.frame)
    assert first_year not in warned(demo_history.frame, start="2000-01-05")


def test_warning_of_less_than_a_year(demo_history: History) -> None:
    assert UNDER_A_YEAR in warned(demo_history.frame, start="2010-03-19", end="2011-03-18")
    assert UNDER_A_YEAR not in warned(demo_history.frame, start="2010-03-19", end="2011-03-21")


def test_warning_of_no_payoff(demo_history: History) -> None:
    frame = demo_history.frame
    far = Overlay(legs=(Leg(position="long", right="put", strike=PercentOfSpot(40)),))
    assert NO_PAYOFF in warned(frame, far)
    assert NO_PAYOFF not in warned(frame)
    # sold puts protect nobody, and calls are no protection
    assert NO_PAYOFF not in warned(frame, Overlay(legs=(Leg(position="short", right="put", strike=PercentOfSpot(40)),)))
    two = Overlay(legs=(PUT, Leg(position="long", right="put", strike=PercentOfSpot(40))))
    assert "no put 2 paid off in this window: it says nothing about protection" in warned(frame, two)


def test_warning_of_proceeds_below_costs(demo_history: History) -> None:
    found = answer(Market.from_frame(demo_history.frame), BAND, volatility=SWAP)
    rolls = found.replay.rolls_frame()
    below = ((rolls["position"] == "short") & (rolls["premium"] < rolls["cost"])).sum()
    calls = (rolls["leg"] == "call").sum()
    assert below > 0
    assert f"{below} of {calls} sold options (call) brought less than they cost to trade" in found.warnings
    assert rolls["flag"].str.contains("proceeds below zero").sum() == below


# ---------------------------------------------------------------- put payoffs


def test_a_put_sold_before_expiry_counts_as_paid_only_in_the_money(demo_history: History) -> None:
    # a year's put, replaced every quarter: the model value at its sale is never zero, the fall below its strike is rare
    leg = Leg(position="long", right="put", roll="quarter", term_months=12, strike=PercentOfSpot(90))
    found = answer(Market.from_frame(demo_history.frame), Overlay(legs=(leg,)), volatility=SWAP)
    (held,) = found.replay.legs
    spot, closed = found.replay.spot, held.closed[:-1]
    below = [bool(spot[day] < strike) for day, strike in zip(closed, held.strike[:-1], strict=True)]
    starts = sum(now and not before for before, now in zip([False, *below], below, strict=False))
    assert (held.close_value[:-1] > 0).all()
    assert 0 < starts < len(below) // 4
    assert put_payoffs(found) == starts
    words = payoff_words(found)
    assert words is not None
    assert words.startswith(f"The bought put paid off in {sum(below)} rolls of {len(below)}, {starts} separate times")
