"""What is coming by data cut at a roll date, or before it, is what the replay of the longer history then opens.

Rung: identity (the engine asked in another way: strike, premium, cost, vol, delta and flags to 1e-12, for all kinds of
rules; dates read from the cycles on the file as it is).
"""

from __future__ import annotations

import functools
from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd
import pytest

from backtest import (
    Adjusted,
    Costs,
    Delta,
    Deviations,
    Early,
    Financed,
    Gate,
    Leg,
    Market,
    Mirrored,
    Overlay,
    PercentOfForward,
    PercentOfSpot,
    PremiumPercent,
    PriceMean,
    RealisedVolatility,
    SignalOn,
    Volatility,
    replay,
)
from backtest.engine.coming import ComingRoll, coming_roll
from backtest.volatility import ImpliedSurface, SurfaceQuotes


def put(position: str = "long", **kw: Any) -> Leg:
    kw.setdefault("strike", PercentOfSpot(95))
    return Leg(position=position, right="put", **kw)  # type: ignore[arg-type]


def call(position: str = "short", **kw: Any) -> Leg:
    kw.setdefault("strike", PercentOfSpot(110))
    kw.setdefault("roll", "month")
    return Leg(position=position, right="call", **kw)  # type: ignore[arg-type]


@functools.cache
def moving_frame() -> pd.DataFrame:
    """Four years of prices, vols, rates, dividends and a signal, on every weekday.

    A closed day would be known to the longer file alone: the shorter one counts on the weekday (C2).
    """
    days = pd.bdate_range("2019-01-02", "2023-03-31", name="date")
    chance = np.random.default_rng(11)
    count = len(days)
    vol = 0.2 + 0.08 * np.sin(np.arange(count) / 70) + 0.01 * chance.standard_normal(count)
    close = 1000 * np.exp(np.cumsum(0.011 * chance.standard_normal(count)))
    frame = pd.DataFrame({"close": close, "vol_30": vol, "vol_93": 0.5 * vol + 0.1}, index=days)
    frame["rate"] = 0.01 + 0.03 * np.arange(count) / count
    frame["dividend"] = np.where(np.arange(count) % 63 == 20, 4.0, 0.0)
    frame["signal"] = np.where(np.arange(count) % 97 < 60, 1.0, 0.0)
    return frame


SWAP = Volatility(quote="variance swap")


@dataclass(frozen=True)
class Rule:
    name: str
    overlay: Overlay
    volatility: Volatility = SWAP


DEAR = Costs(half_spread_vol=0.8, half_spread_percent=4.0, half_spread_min=0.05, commission=1.5)
RULES = [
    Rule("band", Overlay(legs=(put(), call()), costs=DEAR)),
    Rule("band, cash account, realised vol", Overlay(legs=(put(), call()), account="cash"),
         Volatility(source=RealisedVolatility(window=42))),
    Rule("percent of forward, term over roll", Overlay(legs=(put(strike=PercentOfForward(97), term_months=12),))),
    Rule("delta", Overlay(legs=(put(strike=Delta(0.25)), call(strike=Delta(0.15))), costs=DEAR)),
    Rule("deviations, premium percent",
         Overlay(legs=(put(strike=Deviations(1.0)), call(strike=PremiumPercent(0.4))))),
    Rule("financed", Overlay(legs=(put(), call(strike=Financed(1.0))), costs=DEAR, crossed=True)),
    Rule("financed the same day", Overlay(legs=(put(), call(roll="quarter", strike=Financed(0.7))), crossed=True)),
    Rule("mirrored", Overlay(legs=(put(strike=PercentOfSpot(93)), call(strike=Mirrored(1))))),
    Rule("ratchet and step", Overlay(legs=(
        put(roll="month", term_months=3, strike=Adjusted(rule=Delta(0.3), ratchet=True, strike_step=5)),))),
    Rule("kept until moved", Overlay(legs=(
        put(roll="month", strike=Adjusted(rule=PercentOfSpot(95), kept_until_moved=4.0)),))),
    Rule("bounds, and a call over the put", Overlay(legs=(
        put(strike=Adjusted(rule=Deviations(1.0), not_below=92, not_above=95)),
        call(strike=Adjusted(rule=Financed(1.0), not_below_leg=1, not_above=108)),))),
    Rule("decided a day before", Overlay(legs=(put(strike=Delta(0.25)), call()), decide_lag=1, costs=DEAR)),
    Rule("decided a day before, financed and ratchet", Overlay(legs=(
        put(roll="month", strike=Adjusted(rule=PercentOfSpot(94), ratchet=True)), call(strike=Financed(1.0))),
        decide_lag=1, crossed=True)),
    Rule("ladder", Overlay(legs=(put(ladder=3, term_months=6), call(ladder=2, strike=Delta(0.2))))),
    Rule("last trading day, closed before", Overlay(legs=(
        put(roll_day="last trading day", close_before=3), call(shift_days=4)))),
    Rule("days", Overlay(legs=(put(roll="days", every=21, term_days=63), call(roll="days", every=10, phase=3)))),
    Rule("early", Overlay(legs=(put(early=Early(delta_below=0.12)), call(early=Early(value_below=0.3))))),
    Rule("gates", Overlay(legs=(
        put(roll="month", gate=Gate(condition=PriceMean(window=60, above=True))),
        call(gate=Gate(condition=SignalOn(), when_off="close", when_on="at once"))))),
    Rule("whole contracts", Overlay(legs=(put(), call()), portfolio=1e6)),
]  # fmt: skip
RULES += [
    Rule(
        "mean reverting term structure",
        Overlay(legs=(put(strike=Delta(0.3), term_months=6), call())),
        Volatility(quote="variance swap", term_structure="mean reverting"),
    ),
    Rule(
        "quoted surface",
        Overlay(legs=(put(strike=Delta(0.25)), call(strike=Financed(1.0))), costs=DEAR, crossed=True),
        Volatility(source=ImpliedSurface()),
    ),
]
RULE = pytest.mark.parametrize("rule", RULES, ids=lambda rule: rule.name)


def market_of(rule: Rule, frame: pd.DataFrame, **given: Any) -> Market:
    """The frame as the volatility of the rule wants it: two tenors, one, or a quoted surface."""
    if rule.volatility.term_structure != "flat":
        return Market.from_frame(frame.drop(columns="vol_93"), **given)
    if rule.volatility.source == ImpliedSurface():
        quotes = [
            pd.DataFrame({"date": frame.index, "days": days, "percent_of_spot": percent,
                          "vol": frame["vol_30"] + 0.002 * (100 - percent) - 0.0001 * days})
            for days in (25, 95, 190) for percent in (85.0, 95.0, 100.0, 112.0)
        ]  # fmt: skip
        given["surface"] = SurfaceQuotes.from_frame(pd.concat(quotes), frame.index.to_numpy())
    return Market.from_frame(frame, **given)


def cut(rule: Rule, to: object) -> Market:
    return market_of(rule, moving_frame().loc[: str(to)])


def opened_at(rolls: pd.DataFrame, label: str, day: object) -> dict[str, Any] | None:
    own = rolls[(rolls["leg"] == label) & (rolls["opened"] == pd.Timestamp(str(day)))]
    assert len(own) <= 1
    return own.iloc[0].to_dict() if len(own) else None


def assert_same(found: ComingRoll, leg: int, row: dict[str, Any], *, rel: float = 1e-12) -> None:
    coming = found.legs[leg]
    option = coming.option
    assert option is not None
    assert coming.expiry == np.datetime64(row["expiry"], "D")
    assert option.strike == pytest.approx(row["strike"], rel=rel)
    assert option.premium == pytest.approx(row["premium"], rel=rel)
    assert option.cost == pytest.approx(row["cost"], rel=rel)
    assert option.vol == pytest.approx(row["vol"], rel=rel)
    assert option.delta == pytest.approx(row["delta"], rel=rel)
    assert option.forward == pytest.approx(row["forward"], rel=rel)
    others = ("stub", "proceeds below zero", "replaced", "closed by its gate", "open")
    words = [word for word in row["flag"].split("; ") if word and not word.startswith(others)]
    assert list(option.flags) == words


@RULE
def test_data_cut_at_a_roll_date_give_the_roll_that_the_whole_history_opened(rule: Rule) -> None:
    whole = replay(market_of(rule, moving_frame()), rule.overlay, volatility=rule.volatility)
    rolls, compared = whole.rolls_frame(), 0
    for day in pd.DatetimeIndex(rolls["opened"].unique())[6::4]:
        market = cut(rule, day.date())
        found = coming_roll(market, rule.overlay, volatility=rule.volatility)
        for number, leg in enumerate(found.legs):
            if str(leg.roll) != str(day.date()):
                continue
            row = opened_at(rolls, leg.label, day.date())
            if row is None:
                assert leg.option is None
                continue
            assert_same(found, number, row)
            assert leg.live is None
            assert leg.option is not None
            assert leg.option.decided == market.dates[-1 - rule.overlay.decide_lag]
            compared += 1
    assert compared >= 3


#: Vols that look back on days, and rules that would act on the way, do not stand still.
MOVING = ("gates", "early", "band, cash account, realised vol", "mean reverting term structure")
STANDING = [rule for rule in RULES if rule.name not in MOVING]


@pytest.mark.parametrize("rule", STANDING, ids=lambda rule: rule.name)
def test_before_a_roll_date_they_give_the_roll_of_a_history_that_goes_on_without_moving(rule: Rule) -> None:
    """A constant yield stands for the dividends: the trailing ones would fall out of their year on the way."""
    frame = moving_frame().drop(columns="dividend")
    for newest in ("2021-07-13", "2022-02-17", "2022-09-30"):
        past = frame.loc[:newest]
        ahead = pd.bdate_range(pd.Timestamp(newest) + pd.Timedelta(days=1), periods=280)
        longer = pd.concat([past, pd.DataFrame({name: past[name].iloc[-1] for name in past}, index=ahead)])
        later_on, now = (market_of(rule, known, dividend_yield=0.021) for known in (longer, past))
        went_on = replay(later_on, rule.overlay, volatility=rule.volatility).rolls_frame()
        found = coming_roll(now, rule.overlay, volatility=rule.volatility)
        for number, leg in enumerate(found.legs):
            if leg.roll == found.newest:
                continue
            assert leg.roll > found.newest
            later = went_on[(went_on["leg"] == leg.label) & (went_on["opened"] > pd.Timestamp(newest))]
            assert str(leg.roll) == str(later["opened"].iloc[0].date())
            assert_same(found, number, later.iloc[0].to_dict(), rel=1e-11)


@RULE
def test_the_live_options_are_those_of_the_replay(rule: Rule) -> None:
    for newest in ("2021-07-13", "2022-09-30"):
        market = cut(rule, newest)
        found = coming_roll(market, rule.overlay, volatility=rule.volatility)
        rolls = replay(market, rule.overlay, volatility=rule.volatility).rolls_frame()
        for leg in found.legs:
            live = rolls[(rolls["leg"] == leg.label) & rolls["open_value"].notna()]
            if leg.live is None:
                assert live.empty or str(leg.roll) == newest
                continue
            row = live.iloc[0]
            assert np.datetime64(row["opened"], "D") == leg.live.opened
            assert np.datetime64(row["expiry"], "D") == leg.live.expiry
            assert leg.live.strike == pytest.approx(row["strike"], rel=1e-12)
            assert leg.live.value == pytest.approx(row["open_value"], rel=1e-11)


@pytest.mark.parametrize("strike", [PercentOfSpot(95), Delta(0.25), Deviations(1.0), PremiumPercent(2.0)])
def test_a_strike_decided_a_day_before_is_known_on_the_evening_before(strike: Any) -> None:
    overlay = Overlay(legs=(put(strike=strike),), decide_lag=1)
    rolls = replay(Market.from_frame(moving_frame()), overlay).rolls_frame()
    for row in rolls.iloc[5:12:3].to_dict("records"):
        day = row["opened"].date()
        found = coming_roll(Market.from_frame(moving_frame().loc[: str(day)].iloc[:-1]), overlay)
        assert str(found.legs[0].roll) == str(day)
        option = found.legs[0].option
        assert option is not None
        assert option.decided == found.newest
        assert option.strike == pytest.approx(row["strike"], rel=1e-12)
        # the premium is not: the day of the trade has another price
        assert option.premium != pytest.approx(row["premium"], rel=1e-3)


CLOSED = ["2020-06-19", "2021-09-17", "2022-04-15", "2022-06-30"]  # three third Fridays, one last day of a month


@RULE
@pytest.mark.parametrize("newest", ["2020-12-31", "2021-09-16", "2022-04-14", "2022-06-17", "2022-06-29", "2022-11-30"])
def test_dates_are_those_of_the_cycle_as_it_stands_on_the_newest_day(rule: Rule, newest: str) -> None:
    """Read from the cycle on the file as it is, without the days that are laid behind it."""
    market = market_of(rule, moving_frame().drop(pd.DatetimeIndex(CLOSED)).loc[:newest])
    found = coming_roll(market, rule.overlay, volatility=rule.volatility)
    for leg in found.legs:
        rolling = leg.leg.cycle.moved(-leg.leg.close_before)
        number, position = rolling.around(market.dates)
        which = int(np.flatnonzero(position >= len(market) - 1)[0])
        if position[which] == len(market) - 1:
            which = int(np.flatnonzero(position == len(market) - 1)[-1])
        coming = number[[which]]
        assert leg.roll == rolling.expiries(market.dates, coming, 0)[0][0]
        assert leg.expiry == leg.leg.cycle.expiries(market.dates, coming, leg.leg.term)[0][0]
