"""The cost ledger: every flow in money.

Rung: hand-worked (three rolls of a put and a call), twin (every bar rebuilt in plain loops from the daily frame, the
roll table and the raw history) and identity (bars sum to the overlay's gain, years to the whole).
"""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt
import pandas as pd
import pytest

from backtest import FLAT, NO_COSTS, Costs, Leg, Market, Overlay, PercentOfSpot, Replay, Volatility, replay
from backtest.analytics.ledger import Ledger, whole_ledger, yearly_ledger

Array = npt.NDArray[np.float64]

TIGHT = 1e-12

# ---------------------------------------------------------------- worked by hand

# Vol 20 at every strike, no rate, no dividend. A month's 95 put bought and 105 call sold, per 100 of spot:
#   35 days: put 0.690032128, call 0.779180147     28 days: put 0.516789161, call 0.590284727
#   (Black and Scholes with a table of the normal distribution, as in tests/reference/test_hand_worked.py)
# 15 January 100, 19 February 90, 19 March 99, 16 April 100.98: the put of January pays 5, the call of February 4.5.
ROLL_DAYS = ["2021-01-15", "2021-02-19", "2021-03-19", "2021-04-16"]
SPOT = [100.0, 90.0, 99.0, 100.98]
PUT = [0.690032128, 0.9 * 0.516789161, 0.99 * 0.516789161, 1.0098 * 0.690032128]
CALL = [0.779180147, 0.9 * 0.590284727, 0.99 * 0.590284727, 1.0098 * 0.779180147]
# units of the resize account: wealth over the package's price, 1 / 99.910851981, 0.950847661853 / 89.933853991,
# 0.999124357043 / 98.927239390, and on the last day 1.019856393408 / (100.98 + PUT[3] - CALL[3] = 100.889978330)
RESIZED = [0.010008922756, 0.010572744519, 0.010099587972, 1.019856393408 / 100.889978330]


def band(account: str, costs: Costs = NO_COSTS) -> Replay:
    days = pd.bdate_range("2021-01-11", "2021-04-16", name="date")
    fixed = pd.Series([98.0, *SPOT], index=pd.to_datetime(["2021-01-11", *ROLL_DAYS]))
    frame = pd.DataFrame({"close": fixed.reindex(days).interpolate(), "vol": 0.20}, index=days)
    legs = (
        Leg(position="long", right="put", roll="month", strike=PercentOfSpot(95)),
        Leg(position="short", right="call", roll="month", strike=PercentOfSpot(105)),
    )
    return replay(
        Market.from_frame(frame), Overlay(legs=legs, account=account, costs=costs), volatility=Volatility(smile=FLAT)
    )


@pytest.mark.parametrize("account", ["cash", "resize"])
def test_three_rolls_by_hand(account: str) -> None:
    ledger = whole_ledger(band(account))
    units = RESIZED if account == "resize" else [0.01] * 4
    # the shares: 100 to 90, to 99, to 100.98; the hold's gain is 0.98 of 100
    stock = units[0] * -10.0 + units[1] * 9.0 + units[2] * 1.98
    wealth = {"resize": 1.019856393408, "cash": 1.01708054638}[account]
    by_hand = {
        "hold": 0.0098,
        "put premium": -sum(u * p for u, p in zip(units, PUT, strict=True)),
        "put settled": units[0] * 5.0,
        "put live": units[3] * PUT[3],  # opened on the last day, still there
        "call premium": sum(u * p for u, p in zip(units, CALL, strict=True)),
        "call settled": -units[1] * 4.5,
        "call live": -units[3] * CALL[3],
        "spread and fees": 0.0,
        "interest": 0.0,
        "shares": stock - 0.0098,
    }
    assert ledger.lines == tuple(by_hand)
    np.testing.assert_allclose(ledger.money, [list(by_hand.values())], rtol=0.0, atol=2e-11)
    assert sum(by_hand.values()) == pytest.approx(wealth - 1.0, abs=2e-11)  # the hand's own bars add up
    assert ledger.overlay == pytest.approx([wealth - 1.0], abs=2e-11)
    assert ledger.labels == ("whole",)
    assert (ledger.start_wealth.tolist(), ledger.start_hold.tolist()) == ([1.0], [1.0])


def test_spreads_and_fees_by_hand() -> None:
    # 0.25 an option and a fee of 20 / 100 where one settles in the money; one share of 100: 0.01 options of each.
    # four rolls of two options 4 x 2 x 0.25 = 2, two settle in the money 0.4: 0.024 of the 1 at the start
    costs = Costs(half_spread_vol=0.0, half_spread_min=0.25, settlement_fee=20.0)
    ledger = whole_ledger(band("cash", costs))
    assert ledger.money[0, ledger.lines.index("spread and fees")] == pytest.approx(-0.024, abs=1e-15)
    assert ledger.overlay[0] == pytest.approx(0.01708054638 - 0.024, abs=2e-11)


# ---------------------------------------------------------------- rebuilt in plain loops

SOME_COSTS = Costs(
    half_spread_vol=0.5,
    half_spread_percent=2.0,
    half_spread_min=0.02,
    commission=1.5,
    settlement_fee=3.0,
    stock_bps=8.0,
)
# 0: the anchor. 1: sold early each quarter. 2: inner rolls. 3: a stub, and live at every anchor roll.
LEGS = (
    Leg(position="long", right="put", roll="half", strike=PercentOfSpot(95)),
    Leg(position="long", right="put", roll="quarter", term_months=12, strike=PercentOfSpot(85), ratio=0.5),
    Leg(position="short", right="call", roll="month", strike=PercentOfSpot(103), ratio=0.7),
    Leg(position="long", right="call", roll="quarter", phase=1, strike=PercentOfSpot(108), ratio=0.4),
)
INCEPTIONS = {
    "on the anchor's roll": None,
    "the last day of a year": "2014-12-31",  # its costs and premiums belong to 2015: there is no 2014
    "the eve of a roll": "2015-03-19",
}


def history() -> pd.DataFrame:
    rng = np.random.default_rng(11)
    days = pd.bdate_range("2014-05-01", "2017-11-10", name="date")
    days = days[rng.random(len(days)) > 0.02].union(pd.to_datetime(["2014-12-31", "2015-03-19", "2015-03-20"]))
    days.name = "date"
    count = len(days)
    dividend = np.zeros(count)
    dividend[30::62] = 0.6
    return pd.DataFrame(
        {
            "close": 100 * np.exp(np.cumsum(rng.normal(0.0002, 0.012, count))),
            "vol": 0.15 + 0.1 * np.abs(np.sin(np.arange(count) / 90)),
            "rate": 0.02 + 0.015 * np.sin(np.arange(count) / 150),
            "dividend": dividend,
        },
        index=days,
    )


HISTORY = history()
MARKET = Market.from_frame(HISTORY)


def played(account: str, inception: str | None) -> Replay:
    return replay(MARKET, Overlay(legs=LEGS, account=account, costs=SOME_COSTS), inception=inception)


@pytest.fixture(
    scope="module",
    params=[(account, start) for account in ("resize", "cash") for start in INCEPTIONS],
    ids=lambda p: f"{p[0]}, {p[1]}",
)
def found(request: pytest.FixtureRequest) -> Replay:
    account, start = request.param
    return played(account, INCEPTIONS[start])


def bars(found: Replay, first: int, last: int) -> dict[str, float]:
    """Every bar from the close of day ``first`` to that of ``last``; the inception's trades belong to the day after."""
    daily, rolls = found.to_frame(), found.rolls_frame()
    raw = HISTORY.loc[daily.index]
    spot, dividend, rate = (raw[name].tolist() for name in ("close", "dividend", "rate"))
    units, shares, cash = (daily[name].tolist() for name in ("units", "shares", "cash"))
    number = {date: day for day, date in enumerate(daily.index)}

    def inside(day: int) -> bool:
        return first < max(day, 1) <= last

    hold, grown = 0.0, 1.0 / spot[0]
    stock = interest = cost = 0.0
    for day in range(1, last + 1):
        change = spot[day] + dividend[day] - spot[day - 1]
        if inside(day):
            hold += grown * change
            stock += shares[day - 1] * change
            calendar_days = (daily.index[day] - daily.index[day - 1]).days
            interest += cash[day - 1] * ((1.0 + rate[day - 1]) ** (calendar_days / 365.0) - 1.0)
        grown *= 1.0 + dividend[day] / spot[day]
    out = {"hold": hold}
    for label in ("put_1", "put_2", "call_1", "call_2"):
        mark, premium, settled, recount = daily[f"{label}_mark"].tolist(), 0.0, 0.0, 0.0
        mine = rolls[rolls["leg"] == label]
        signed = float(mine["ratio"].iloc[0]) * (1.0 if mine["position"].iloc[0] == "long" else -1.0)
        roll: Any
        for roll in mine.itertuples():
            opened = number[roll.opened]
            closed = last + 1 if pd.isna(roll.closed) else number[roll.closed]
            if inside(opened):
                premium -= units[opened] * signed * roll.premium
                cost += units[opened] * roll.ratio * roll.cost
            if first < closed <= last:
                settled += units[closed - 1] * signed * roll.settled
                cost += units[closed - 1] * roll.ratio * roll.exit_cost
            # a live option of which more (or fewer) are held from a day on: bought (or sold) at mid
            for day in range(max(opened, first) + 1, min(closed - 1, last) + 1):
                recount += (units[day] - units[day - 1]) * signed * mark[day]
        before = units[first] * signed * mark[first] if first > 0 else 0.0
        out[f"{label} premium"], out[f"{label} settled"] = premium, settled
        out[f"{label} live"] = units[last] * signed * mark[last] - before - recount
    if found.overlay.account == "resize":
        for day in range(last + 1):
            held = shares[day - 1] * (1.0 + dividend[day] / spot[day]) if day else 1.0 / spot[0]
            if inside(day):
                cost += SOME_COSTS.stock_bps / 1e4 * spot[day] * abs(shares[day] - held)
    return out | {"spread and fees": -cost, "interest": interest, "shares": stock - hold}


def assert_bars(ledger: Ledger, span: int, expected: dict[str, float]) -> None:
    assert ledger.lines == tuple(expected)
    np.testing.assert_allclose(ledger.money[span], list(expected.values()), rtol=0.0, atol=TIGHT)


def test_the_legs_are_of_every_kind(found: Replay) -> None:
    rolls = found.rolls_frame()
    early = rolls["closed"].notna() & (rolls["closed"] < rolls["expiry"])
    assert set(rolls.loc[early, "leg"]) == {"put_2"}
    assert "stub" in rolls["flag"].iloc[:4].tolist()
    assert (rolls["settled"] > 0).any()
    assert found.to_frame()["cash"].abs().max() > 1e-3


def test_whole_in_loops(found: Replay) -> None:
    assert_bars(whole_ledger(found), 0, bars(found, 0, len(found) - 1))


def test_years_in_loops(found: Replay) -> None:
    ledger = yearly_ledger(found)
    ends = {str(year): day for day, year in enumerate(pd.DatetimeIndex(found.dates).year)}  # the last day of each year
    if ends.get("2014") == 0:
        ends.pop("2014")
    assert ledger.labels == tuple(ends)
    starts = [0, *ends.values()]
    for span, last in enumerate(ends.values()):
        assert_bars(ledger, span, bars(found, starts[span], last))
        assert ledger.overlay[span] == pytest.approx(found.wealth[last] - found.wealth[starts[span]], abs=1e-15)
        assert ledger.start_wealth[span] == found.wealth[starts[span]]
        assert ledger.start_hold[span] == found.hold[starts[span]]


def test_bars_sum_to_the_gain_and_years_to_the_whole(found: Replay) -> None:
    years, whole = yearly_ledger(found), whole_ledger(found)
    for ledger in (years, whole):
        np.testing.assert_allclose(ledger.money.sum(axis=1), ledger.overlay, rtol=0.0, atol=TIGHT)
    np.testing.assert_allclose(years.money.sum(axis=0), whole.money[0], rtol=0.0, atol=TIGHT)
    assert years.overlay.sum() == pytest.approx(found.wealth[-1] - 1.0, abs=TIGHT)
    assert whole.money[0, 0] == pytest.approx(found.hold[-1] - 1.0, abs=TIGHT)
    # 1 basis point is a ten-thousandth of the wealth at the start of the year
    points = years.money * 10_000 / years.start_wealth.reshape(-1, 1)
    np.testing.assert_allclose(years.basis_points(), points, rtol=1e-14)
