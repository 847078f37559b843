"""What sold options may require as margin, as a share of wealth.

Rung: hand-worked (four days on which options are worth what they would pay) and twin (plain loops over the roll table,
one option after the other). The rule itself is that of the exchanges' margin manuals, from memory.
"""

from __future__ import annotations

from typing import Any

import numpy as np
import pandas as pd
import pytest

from backtest import (
    FLAT,
    NO_COSTS,
    Costs,
    Gate,
    Leg,
    Market,
    Overlay,
    PercentOfForward,
    PercentOfSpot,
    PriceMean,
    Replay,
    Volatility,
    replay,
)
from backtest.analytics.margin import Margin, margin

# ---------------------------------------------------------------- worked by hand

# Four days from a third Friday on, closes 100, 120, 60, 100. With a vol of 0.1% and no rate an option that is 5% or
# more away from the price is worth what it would pay, to far more than twelve digits: nothing, or spot less strike.
DAYS = ["2021-01-15", "2021-01-18", "2021-01-19", "2021-01-20"]
CLOSES = [100.0, 120.0, 60.0, 100.0]
EXACT = {"rel": 1e-12, "abs": 1e-14}


def call(percent: float, **rest: Any) -> Leg:
    return Leg(position="short", right="call", strike=PercentOfSpot(percent), **({"roll": "month"} | rest))


def put(position: Any, percent: float, **rest: Any) -> Leg:
    return Leg(position=position, right="put", strike=PercentOfSpot(percent), **({"roll": "month"} | rest))


def four_days(*legs: Leg, closes: list[float] = CLOSES, account: str = "resize") -> Replay:
    days = pd.bdate_range("2021-01-11", "2021-06-30", name="date")
    close = pd.Series(100.0, index=days)
    close[pd.to_datetime(DAYS)] = closes
    frame = pd.DataFrame({"close": close, "vol": 0.001}, index=days)
    overlay = Overlay(legs=legs, account=account, costs=NO_COSTS, crossed=True)
    market = Market.from_frame(frame)
    return replay(market, overlay, volatility=Volatility(smile=FLAT), inception=DAYS[0], end=DAYS[-1])


def required(*legs: Leg, **rest: Any) -> Margin:
    found = margin(four_days(*legs, **rest))
    assert found is not None
    return found


def test_a_call_on_the_share() -> None:
    # premium nothing, so a unit is one share of 100: 0.01 of them, and wealth is a hundredth of spot less the call
    #   at 100, strike 105: 0 + the larger of 20 - 5 and 10 = 15
    #   at 120:            15 + the larger of 24 - 0 and 12 = 39, of wealth 0.01 x (120 - 15) = 1.05
    #   at  60:             0 + the larger of 12 - 45 and 6 = 6
    found = required(call(105))
    assert found.alone.tolist() == pytest.approx([0.15, 0.39, 0.06, 0.15], **EXACT)
    assert found.peak_alone.share == pytest.approx(0.39 / 1.05, **EXACT)
    assert str(found.peak_alone.day) == "2021-01-18"
    # one call on each share: nothing is required, on no day
    assert found.covered.tolist() == [0.0] * 4
    assert (found.peak_covered.share, found.peak_covered.day) == (0.0, None)
    assert found.as_dict() == {
        "unit": "decimal of the day's wealth",
        "shares_as_cover": {"peak": 0.0, "day": None},
        "no_shares_counted": {"peak": found.peak_alone.share, "day": np.datetime64("2021-01-18")},
    }


def test_more_calls_than_shares() -> None:
    # one and a half calls a share: half a call is bare. At 120 wealth is 0.01 x (120 - 1.5 x 15) = 0.975.
    found = required(call(105, ratio=1.5))
    assert found.alone.tolist() == pytest.approx([0.225, 0.585, 0.09, 0.225], **EXACT)
    assert found.covered.tolist() == pytest.approx([0.075, 0.195, 0.03, 0.075], **EXACT)
    assert found.peak_alone.share == pytest.approx(0.6, **EXACT)
    assert found.peak_covered.share == pytest.approx(0.2, **EXACT)
    assert str(found.peak_covered.day) == "2021-01-18"


@pytest.mark.parametrize("order", [1, -1])
def test_the_shares_cover_the_dearest_calls(order: int) -> None:
    # strike 130: at 100 the larger of 20 - 30 and 10 = 10; at 120 that of 24 - 10 and 12 = 14; at 60, 6
    # strike 105 is dearer on all days but the third, on which both need 6
    found = required(*(call(105), call(130))[::order])
    assert found.alone.tolist() == pytest.approx([0.25, 0.53, 0.12, 0.25], **EXACT)
    assert found.covered.tolist() == pytest.approx([0.10, 0.14, 0.06, 0.10], **EXACT)


def test_parts_of_calls_that_add_up_to_the_shares_are_covered() -> None:
    # seven parts of a seventh: their sum is no whole number to the last bit
    found = required(*(call(105, ratio=1 / 7) for _ in range(7)))
    assert found.alone.tolist() == pytest.approx([0.15, 0.39, 0.06, 0.15], **EXACT)
    assert found.covered.tolist() == [0.0] * 4
    assert found.peak_covered.day is None


def test_a_put() -> None:
    # strike 80: at 100 the larger of 20 - 20 and 8 = 8; at 120 that of 24 - 40 and 8 = 8; at 60 it is worth 20 and
    # needs 20 + the larger of 12 and 8 = 32, of wealth 0.01 x (60 - 20) = 0.4. No share covers a put.
    found = required(put("short", 80))
    assert found.alone.tolist() == pytest.approx([0.08, 0.08, 0.32, 0.08], **EXACT)
    assert found.covered.tolist() == found.alone.tolist()
    assert found.peak_alone.share == pytest.approx(0.8, **EXACT)
    assert str(found.peak_alone.day) == "2021-01-19"


BARE = [0.08, 0.08, 0.32, 0.08]
SPREAD = [0.08, 0.08, 0.10, 0.08]  # at most 80 - 70
BESIDE = {
    "as many, the lower strike": ([put("long", 70)], SPREAD),
    "more of them": ([put("long", 70, ratio=2.0)], SPREAD),
    "the higher strike": ([put("long", 95)], [0.0] * 4),
    "the same strike": ([put("long", 80)], [0.0] * 4),
    "a strike so low that the rule without it is less": ([put("long", 45)], BARE),
    "a later expiry": ([put("long", 70, roll="quarter")], SPREAD),
    "fewer of them": ([put("long", 70, ratio=0.9)], BARE),
    "two halves are not one": ([put("long", 70, ratio=0.5), put("long", 70, ratio=0.5)], BARE),
    "one that is only named": ([put("long", 70, reference=True)], BARE),
    "the one that leaves least": ([put("long", 70), put("long", 75), put("long", 60)], [0.05, 0.05, 0.05, 0.05]),
    "a bought call": ([Leg(position="long", right="call", roll="month", strike=PercentOfSpot(130))], BARE),
}


@pytest.mark.parametrize("others", BESIDE)
def test_a_put_beside(others: str) -> None:
    bought, expected = BESIDE[others]
    for account in ("resize", "cash"):
        found = required(put("short", 80), *bought, account=account)
        assert found.alone.tolist() == pytest.approx(expected, **EXACT)


def test_an_earlier_expiry_is_no_cover() -> None:
    # sold to 19 March, bought to 19 February
    found = required(put("short", 80, roll="quarter"), put("long", 70))
    assert found.alone.tolist() == pytest.approx(BARE, **EXACT)


def test_a_bought_put_stands_beside_one_sold_put_only() -> None:
    # the first takes it, whatever the second would have saved: strike 75 needs 20 - 25 or 7.5 = 7.5 at 100, 7.5 at 120,
    # and 15 + 12 = 27 at 60
    found = required(put("short", 80), put("short", 75), put("long", 95))
    assert found.alone.tolist() == pytest.approx([0.075, 0.075, 0.27, 0.075], **EXACT)
    found = required(put("short", 75), put("short", 80), put("long", 95))
    assert found.alone.tolist() == pytest.approx(BARE, **EXACT)
    # two of it are enough for both
    found = required(put("short", 80), put("short", 75), put("long", 95, ratio=2.0))
    assert found.alone.tolist() == [0.0] * 4


def test_tranches_take_each_its_own() -> None:
    # three tranches of each, together on the same days: as if they were whole
    sold, bought = (put(side, at, ladder=3, stagger=False) for side, at in (("short", 80), ("long", 70)))
    assert required(sold, bought).alone.tolist() == pytest.approx(SPREAD, **EXACT)
    # six parts use up one whole, though what is left for the last is no sixth to the last bit
    sold = put("short", 80, ladder=6, stagger=False)
    assert required(sold, put("long", 70)).alone.tolist() == pytest.approx(SPREAD, **EXACT)


def test_nothing_sold_is_no_margin() -> None:
    assert margin(four_days(put("long", 95))) is None
    assert margin(four_days(put("long", 95), call(105, reference=True))) is None
    assert margin(four_days(put("long", 95), call(105, ratio=0.0))) is None


def test_days_after_ruin_are_left_out() -> None:
    # three puts at 80 sold on a share: at 40 it is 0.01 x (40 - 3 x 40) < 0, and on the day before nothing has happened
    found = four_days(put("short", 80, ratio=3.0), closes=[100.0, 100.0, 40.0, 100.0])
    assert np.isfinite(found.wealth).tolist() == [True, True, False, False]
    answer = margin(found)
    assert answer is not None
    assert answer.peak_alone.share == pytest.approx(0.24, **EXACT)
    assert str(answer.peak_alone.day) == "2021-01-15"


def test_a_package_that_brings_more_than_it_costs_cannot_be_bought() -> None:
    # ten puts at 120 sold bring 200, the share costs 100: there are no units, and no margin is known for them
    answer = required(put("short", 120, ratio=10.0))
    for peak in (answer.peak_alone, answer.peak_covered):
        assert np.isnan(peak.share)
        assert peak.day is None


# ---------------------------------------------------------------- in plain loops

LEGS = (
    Leg(position="long", right="put", roll="half", strike=PercentOfSpot(97)),
    Leg(position="short", right="put", roll="month", strike=PercentOfSpot(85), ratio=0.6),
    Leg(position="short", right="put", roll="quarter", term_months=9, strike=PercentOfSpot(92), ratio=0.8),
    Leg(position="long", right="put", roll="quarter", strike=PercentOfSpot(80), ratio=0.7),
    Leg(position="short", right="call", roll="month", strike=PercentOfSpot(102), ratio=0.7),
    Leg(position="short", right="call", roll="quarter", phase=1, strike=PercentOfForward(104), ratio=0.8),
)
GATED = Gate(condition=PriceMean(window=40, above=False), when_off="close", when_on="at once")
CASES: dict[str, dict[str, Any]] = {
    "resize": {"legs": LEGS},
    "cash": {"legs": LEGS, "account": "cash"},
    "ladders and gates": {
        "legs": (
            Leg(position="long", right="put", roll="quarter", strike=PercentOfSpot(95), ladder=3, gate=GATED),
            Leg(position="short", right="put", roll="month", strike=PercentOfSpot(88), ratio=0.3),
            Leg(position="short", right="call", roll="month", strike=PercentOfSpot(103), ratio=1.2, ladder=2),
            Leg(position="short", right="call", roll="quarter", strike=PercentOfSpot(105), ratio=0.3, gate=GATED),
        ),
    },
    "whole contracts": {"legs": LEGS, "portfolio": 1_000_000.0, "account": "cash"},
}


def wandering(**overlay: Any) -> Replay:
    rng = np.random.default_rng(11)
    days = pd.bdate_range("2015-01-02", "2018-08-10", name="date")
    close = 100 * np.exp(np.cumsum(rng.normal(0.0001, 0.012, len(days))))
    vol = 0.16 + 0.08 * np.abs(np.sin(np.arange(len(days)) / 70))
    dividend = np.where(np.arange(len(days)) % 63 == 40, 0.5, 0.0)
    frame = pd.DataFrame({"close": close, "vol": vol, "rate": 0.02, "dividend": dividend}, index=days)
    costs = Costs(half_spread_percent=3.0, stock_bps=5.0)
    return replay(Market.from_frame(frame), Overlay(costs=costs, **overlay))


def options_of(found: Replay) -> list[list[dict[str, Any]]]:
    """What is held after each day's trades, an entry an option, from the tables."""
    daily, rolls = found.to_frame(), found.rolls_frame()
    days: list[list[dict[str, Any]]] = [[] for _ in daily.index]
    order = [leg.label for leg in found.legs]
    roll: Any
    for roll in rolls.sort_values("leg", key=lambda names: names.map(order.index), kind="stable").itertuples():
        for place, day in enumerate(daily.index):
            if roll.opened <= day and not (pd.notna(roll.closed) and roll.closed <= day):
                count = roll.ratio * daily["units"].iloc[place]
                if found.overlay.portfolio is not None:
                    count = found.leg_count[order.index(roll.leg), place]
                days[place].append(
                    {
                        "right": roll.right, "bought": roll.position == "long", "strike": roll.strike,
                        "expiry": roll.expiry, "count": count, "mid": daily[f"{roll.leg}_mark"].iloc[place],
                    }
                )  # fmt: skip
    return days


def slow_margin(options: list[dict[str, Any]], spot: float, shares: float) -> float:
    total = 0.0
    left = {number: one["count"] for number, one in enumerate(options) if one["bought"] and one["right"] == "put"}
    for one in options:
        if one["bought"] or one["right"] != "put":
            continue
        each = one["mid"] + max(0.2 * spot - max(spot - one["strike"], 0.0), 0.1 * one["strike"])
        chosen = None
        for number, count in left.items():
            other = options[number]
            spread = max(one["strike"] - other["strike"], 0.0)
            if count > one["count"] - 1e-12 and other["expiry"] >= one["expiry"] and spread < each:
                each, chosen = spread, number
        if chosen is not None:
            left[chosen] -= one["count"]
        total += each * one["count"]
    calls = []
    for one in options:
        if not one["bought"] and one["right"] == "call":
            outside = max(one["strike"] - spot, 0.0)
            calls.append((one["mid"] + max(0.2 * spot - outside, 0.1 * spot), one["count"]))
    for each, count in sorted(calls, reverse=True):
        taken = min(shares, count)
        shares -= taken
        total += each * (count - taken)
    return total


@pytest.mark.parametrize("case", CASES)
def test_many_legs_in_loops(case: str) -> None:
    found = wandering(**CASES[case])
    answer = margin(found)
    assert answer is not None
    daily = found.to_frame()
    options = options_of(found)
    covered, alone = (
        [slow_margin(held, spot, own) for held, spot, own in zip(options, found.spot.tolist(), shares, strict=True)]
        for shares in (daily["shares"].tolist(), [0.0] * len(daily))
    )
    np.testing.assert_allclose(answer.alone, alone, rtol=1e-12, atol=1e-14)
    np.testing.assert_allclose(answer.covered, covered, rtol=1e-12, atol=1e-14)
    for path, peak in ((alone, answer.peak_alone), (covered, answer.peak_covered)):
        shares_of_wealth = [value / wealth for value, wealth in zip(path, daily["overlay"].tolist(), strict=True)]
        assert peak.share == pytest.approx(max(shares_of_wealth), rel=1e-12)
        assert peak.day == found.dates[shares_of_wealth.index(max(shares_of_wealth))]
    # what is under test happens: puts spread and bare, calls bare and covered
    assert 0.0 < answer.peak_covered.share < answer.peak_alone.share
