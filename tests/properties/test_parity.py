"""Rung: identity. Put-call parity: stock, long put and short call of one strike and roll earn the rate exactly.

Without dividends a European put less the call of its strike is ``K exp(-r tau) - S`` under any smile
(Stoll, 1969, "The relationship between put and call option prices"; C5), so the package is worth
``K exp(-r tau)`` whatever the spot does.
"""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np
import numpy.typing as npt
import pandas as pd
from hypothesis import given
from hypothesis import strategies as st

from backtest import NO_COSTS, Leg, Overlay, PercentOfSpot, Replay, Volatility, replay

from .strategies import FEWER, RICH, History, histories, legs, volatilities

TIGHT = 1e-12


@st.composite
def conversions(draw: st.DrawFn, *, account: str, term_is_roll: bool = False) -> Overlay:
    put = replace(draw(legs(ratio=1.0)), position="long", right="put")
    if term_is_roll:
        put = replace(put, term_months=put.cycle.months)
    call = replace(put, position="short", right="call")
    return Overlay(
        legs=tuple(draw(st.permutations([put, call]))), account=account, costs=NO_COSTS, name=f"{put.roll} {put.term}"
    )


def log_rate(history: History, dates: npt.ArrayLike) -> Any:
    """Continuously compounded rate of days of the file, ``ln(1 + y)``."""
    if history.rate is not None:
        return np.full(np.shape(dates), np.log(1.0 + history.rate))
    return np.log(1.0 + history.frame["rate"].loc[pd.DatetimeIndex(np.asarray(dates))].to_numpy())


def years(first: Any, last: Any) -> Any:
    return (pd.DatetimeIndex(last) - pd.DatetimeIndex(first)).days.to_numpy() / 365.0


@RICH
@given(
    history=histories(least_days=420, payouts=("none",)),
    overlay=conversions(account="resize"),
    volatility=volatilities(shifts=False),
    shift=st.sampled_from([0.0, 1.5]),
)
def test_resized_conversion_earns_the_rate_of_each_open_over_each_life(
    history: History, overlay: Overlay, volatility: Volatility, shift: float
) -> None:
    """With rates that change: a package bought for ``K exp(-r0 tau0)`` is worth ``K exp(-r tau)`` on each day.

    So the growth from open to day t is ``exp(r0 tau0 - r tau)``, and over a life held to expiry ``exp(r0 tau0)``;
    growth chains over rolls, since all wealth goes into new packages. A shift of both vols alike changes nothing.
    """
    shifted = replace(volatility, put_shift=shift, call_shift=shift)
    found = replay(history.market(), overlay, volatility=shifted)
    rolls = found.rolls_frame()
    puts = rolls[rolls["right"] == "put"]
    start, growth = 1.0, np.full(len(found), np.nan)
    dates = pd.DatetimeIndex(found.dates)
    roll: Any
    for roll in puts.itertuples():
        last = dates[-1] if pd.isna(roll.closed) else roll.closed
        held = (dates >= roll.opened) & (dates <= last)
        locked = log_rate(history, [roll.opened])[0] * years([roll.opened], [roll.expiry])[0]
        left = log_rate(history, dates[held]) * years(dates[held], np.full(held.sum(), roll.expiry))
        growth[held] = start * np.exp(locked - left)
        start = growth[held][-1]
    np.testing.assert_allclose(found.wealth, growth, rtol=TIGHT, atol=0.0)
    # the money is all in packages and none of it moves with spot: no delta is left
    np.testing.assert_allclose(found.delta, 0.0, rtol=0.0, atol=TIGHT)


def held_to_expiry(found: Replay) -> pd.DataFrame:
    rolls = found.rolls_frame()
    return rolls[(rolls["right"] == "put") & (rolls["closed"] == rolls["expiry"])]


@RICH
@given(
    history=histories(least_days=420, payouts=("none",), constant_rate=True),
    account=st.sampled_from(["resize", "cash"]),
    data=st.data(),
    volatility=volatilities(shifts=False),
)
def test_conversion_at_a_constant_rate_is_cash_in_both_accounts(
    history: History, account: str, data: st.DataObject, volatility: Volatility
) -> None:
    """At one rate package and cash account both grow by ``(1 + y)^(days/365)``, through every roll and early close."""
    overlay = data.draw(conversions(account=account))
    found = replay(history.market(), overlay, volatility=volatility)
    assert history.rate is not None
    days = (pd.DatetimeIndex(found.dates) - pd.Timestamp(found.dates[0])).days.to_numpy()
    np.testing.assert_allclose(found.wealth, (1.0 + history.rate) ** (days / 365.0), rtol=TIGHT, atol=0.0)


@FEWER
@given(
    history=histories(least_days=420, payouts=("yield",)),
    account=st.sampled_from(["resize", "cash"]),
    data=st.data(),
    volatility=volatilities(shifts=False),
)
def test_conversion_on_a_share_with_a_constant_yield_earns_the_rate_over_a_life(
    history: History, account: str, data: st.DataObject, volatility: Volatility
) -> None:
    """The share turns into ``exp(q tau)`` shares by the expiry, so that many puts and calls are held per share.

    Put less call is ``K exp(-r tau) - S exp(-q tau)``; times ``exp(q tau0)`` it takes away, on every day, just the
    shares that reinvesting has made. One life at a time: the ratio is that life's own.
    """
    overlay = data.draw(conversions(account=account, term_is_roll=True))
    market = history.market()
    lives = held_to_expiry(replay(market, overlay, volatility=volatility))
    assert history.dividend_yield is not None
    life: Any
    for life in lives.iloc[:3].itertuples():
        tau = years([life.opened], [life.expiry])[0]
        ratio = (1.0 + history.dividend_yield) ** tau
        matched = replace(overlay, legs=tuple(replace(leg, ratio=ratio) for leg in overlay.legs))
        found = replay(market, matched, volatility=volatility, inception=life.opened, end=life.closed)
        earned = np.exp(log_rate(history, [life.opened])[0] * tau)
        if account == "resize":
            np.testing.assert_allclose(found.wealth[-1], earned, rtol=TIGHT, atol=0.0)
            continue
        # cash account: what the package leaves over earns the rate of each day instead
        package = ratio * life.strike / life.spot_open / earned  # its value at the open, per 1 of wealth
        step = np.diff(found.dates).astype(np.int64) / 365.0
        daily = np.exp(np.sum(log_rate(history, found.dates[:-1]) * step))
        expected = package * earned + (1.0 - package) * daily
        np.testing.assert_allclose(found.wealth[-1], expected, rtol=TIGHT, atol=0.0)


def test_lives_held_to_expiry_occur() -> None:
    """The loop above is not empty for want of lives that reach their expiry."""
    days = pd.bdate_range("2018-01-01", "2019-12-31", name="date")
    frame = pd.DataFrame({"close": 100.0 + np.arange(len(days)) % 7, "vol": 0.2, "rate": 0.02}, index=days)
    market = History(frame=frame, drawn={}, dividend_yield=0.02).market()
    put = Leg(position="long", right="put", strike=PercentOfSpot(97), roll="quarter")
    overlay = Overlay(legs=(put, replace(put, position="short", right="call")), costs=NO_COSTS)
    # third Fridays of March 2018 to December 2019: eight opens, of which the last is not closed
    assert len(held_to_expiry(replay(market, overlay))) == 7
