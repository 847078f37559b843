"""What the rolls cost and brought, in units of spot.

Rung: hand-worked (four opens of a put and a call) and twin (plain loops over the roll table, many kinds of legs).
"""

from __future__ import annotations

from dataclasses import fields
from typing import Any

import numpy as np
import pandas as pd
import pytest

from backtest import FLAT, Costs, Leg, Market, Overlay, PercentOfSpot, Replay, Volatility, replay
from backtest.analytics.roll_costs import LegCosts, payoffs_at_close, roll_costs

SUMS = [
    "premium_paid", "premium_received", "trading_cost", "settled_received", "settled_paid", "open_value", "net",
]  # fmt: skip

# ---------------------------------------------------------------- worked by hand

# Vol 20 at every strike, no rate. Per 1 of spot, by Black and Scholes with a table of the normal distribution (worked
# in tests/reference/test_hand_worked.py):
#   35 days: 95 put 0.00690032128, 105 call 0.00779180147     28 days: put 0.00516789161, call 0.00590284727
# opened 15 January at 100, 19 February at 90 and 19 March at 99 for 35, 28 and 28 days, and on the last day, 16 April,
# at 100.98 for 35. The put of January pays 95 - 90 = 5, 0.05 of its 100; the call of February 99 - 94.5 = 4.5, 0.05
# of its 90. Each open costs 0.25 an option, and a settlement in the money 20 / 100 = 0.20.
OPENS = 0.25 / 100 + 0.25 / 90 + 0.25 / 99 + 0.25 / 100.98
PUT = 2 * 0.00690032128 + 2 * 0.00516789161
CALL = 2 * 0.00779180147 + 2 * 0.00590284727
PUT_COST, CALL_COST = OPENS + 0.20 / 100, OPENS + 0.20 / 90


def band(account: str, *, ratio: float = 1.0) -> Replay:
    days = pd.bdate_range("2021-01-11", "2021-04-16", name="date")
    turns = ["2021-01-11", "2021-01-15", "2021-02-19", "2021-03-19", "2021-04-16"]
    fixed = pd.Series([98.0, 100.0, 90.0, 99.0, 100.98], index=pd.to_datetime(turns))
    frame = pd.DataFrame({"close": fixed.reindex(days).interpolate(), "vol": 0.20}, index=days)
    legs = (
        Leg(position="long", right="put", roll="month", strike=PercentOfSpot(95)),
        Leg(position="short", right="call", roll="month", strike=PercentOfSpot(105), ratio=ratio),
    )
    costs = Costs(half_spread_vol=0.0, half_spread_min=0.25, settlement_fee=20.0)
    overlay = Overlay(legs=legs, account=account, costs=costs)
    return replay(Market.from_frame(frame), overlay, volatility=Volatility(smile=FLAT))


def sums(leg: LegCosts) -> dict[str, float]:
    return {name: getattr(leg, name) for name in SUMS}


@pytest.mark.parametrize("account", ["resize", "cash"])
@pytest.mark.parametrize("ratio", [1.0, 0.4])
def test_four_opens_by_hand(account: str, ratio: float) -> None:
    found = roll_costs(band(account, ratio=ratio))
    put, call = found.legs
    assert sums(put) == pytest.approx(
        {
            "premium_paid": PUT,
            "premium_received": 0.0,
            "trading_cost": PUT_COST,
            "settled_received": 0.05,
            "settled_paid": 0.0,
            "open_value": 0.00690032128,  # the one just opened
            "net": -PUT - PUT_COST + 0.05 + 0.00690032128,
        },
        abs=1e-11,
    )
    assert sums(call) == pytest.approx(
        {
            "premium_paid": 0.0,
            "premium_received": ratio * CALL,
            "trading_cost": ratio * CALL_COST,
            "settled_received": 0.0,
            "settled_paid": ratio * 0.05,
            "open_value": -ratio * 0.00779180147,
            "net": ratio * (CALL - CALL_COST - 0.05 - 0.00779180147),
        },
        abs=1e-11,
    )
    for leg, label in ((put, "put"), (call, "call")):
        assert (leg.label, leg.rolls, leg.open_rolls, leg.paid_off) == (label, 4, 1, 1)
    # 16 days of January, 28, 31 and 16 days
    assert found.years == pytest.approx(91 / 365.25, rel=1e-15)
    assert found.net_a_year == pytest.approx((put.net + call.net) / (91 / 365.25), rel=1e-14)


def test_a_year_and_a_roll_by_hand() -> None:
    answer: Any = roll_costs(band("resize")).as_dict()
    assert answer["unit"] == "decimal of the spot at each open"
    assert answer["years"] == pytest.approx(91 / 365.25, rel=1e-15)
    assert list(answer["legs"]) == ["put", "call"]
    put = answer["legs"]["put"]
    assert (put["rolls"], put["open_rolls"], put["paid_off"]) == (4, 1, 1)
    assert list(put["whole"]) == list(put["a_year"]) == list(put["a_roll"]) == list(answer["all_a_year"]) == SUMS
    assert put["whole"]["premium_paid"] == pytest.approx(PUT, abs=1e-11)
    assert put["a_year"]["premium_paid"] == pytest.approx(PUT * 365.25 / 91, abs=1e-10)
    assert put["a_roll"]["premium_paid"] == pytest.approx(PUT / 4, abs=1e-11)
    both = answer["all_a_year"]
    assert both["premium_paid"] == pytest.approx(PUT * 365.25 / 91, abs=1e-10)
    assert both["premium_received"] == pytest.approx(CALL * 365.25 / 91, abs=1e-10)
    assert both["open_value"] == pytest.approx((0.00690032128 - 0.00779180147) * 365.25 / 91, abs=1e-10)


def test_payoffs_by_hand() -> None:
    found = band("resize")
    np.testing.assert_allclose(payoffs_at_close(found, found.legs[0]), [5.0, 0.0, 0.0], rtol=1e-13, atol=0.0)
    np.testing.assert_allclose(payoffs_at_close(found, found.legs[1]), [0.0, 4.5, 0.0], rtol=1e-13, atol=0.0)


# ---------------------------------------------------------------- in plain loops

# a leg held to expiry, one sold early each quarter, inner rolls, and a stub
LEGS = (
    Leg(position="long", right="put", roll="half", strike=PercentOfSpot(97)),
    Leg(position="long", right="put", roll="quarter", term_months=9, strike=PercentOfSpot(85), ratio=0.5),
    Leg(position="short", right="call", roll="month", strike=PercentOfSpot(102), ratio=0.7),
    Leg(position="short", right="put", roll="quarter", phase=1, strike=PercentOfSpot(80), ratio=1.5),
    Leg(position="long", right="call", roll="year", strike=PercentOfSpot(120), ratio=0.0),
)


def wandering(account: str) -> Replay:
    rng = np.random.default_rng(3)
    days = pd.bdate_range("2015-01-02", "2018-08-10", name="date")
    close = 100 * np.exp(np.cumsum(rng.normal(0.0001, 0.012, len(days))))
    vol = 0.16 + 0.08 * np.abs(np.sin(np.arange(len(days)) / 70))
    dividend = np.where(np.arange(len(days)) % 63 == 40, 0.5, 0.0)
    frame = pd.DataFrame({"close": close, "vol": vol, "rate": 0.02, "dividend": dividend}, index=days)
    costs = Costs(half_spread_percent=3.0, commission=1.0, settlement_fee=4.0, stock_bps=5.0)
    return replay(Market.from_frame(frame), Overlay(legs=LEGS, account=account, costs=costs))


def test_many_legs_in_loops() -> None:
    found = wandering("resize")
    rolls = found.rolls_frame()
    early = rolls["closed"].notna() & (rolls["closed"] < rolls["expiry"])
    assert set(rolls.loc[early, "leg"]) == {"put_2"}
    answer = roll_costs(found)
    years = (rolls_end := pd.Timestamp("2018-08-10")) - pd.Timestamp(found.dates[0])
    assert answer.years == pytest.approx(years.days / 365.25, rel=1e-15)
    assert [leg.label for leg in answer.legs] == ["put_1", "put_2", "call_1", "put_3", "call_2"]
    for leg in answer.legs:
        expected = dict.fromkeys(SUMS, 0.0)
        counted = dict.fromkeys(("rolls", "open_rolls", "paid_off"), 0)
        roll: Any
        for roll in rolls[rolls["leg"] == leg.label].itertuples():
            bought, live = roll.position == "long", pd.isna(roll.closed)
            scale = roll.ratio / roll.spot_open
            expected["premium_paid" if bought else "premium_received"] += scale * roll.premium
            expected["trading_cost"] += scale * (roll.cost + (0.0 if live else roll.exit_cost))
            counted["rolls"] += 1
            if live:
                assert roll.expiry > rolls_end
                counted["open_rolls"] += 1
                expected["open_value"] += scale * roll.open_value * (1 if bought else -1)
            else:
                expected["settled_received" if bought else "settled_paid"] += scale * roll.settled
                counted["paid_off"] += roll.settled > 0
            expected["net"] += roll.profit / roll.spot_open
        assert sums(leg) == pytest.approx(expected, abs=1e-13)
        assert {name: getattr(leg, name) for name in counted} == counted
        brought = leg.premium_received + leg.settled_received + leg.open_value
        assert leg.net == pytest.approx(brought - leg.premium_paid - leg.settled_paid - leg.trading_cost, abs=1e-13)
    assert sums(answer.legs[-1]) == dict.fromkeys(SUMS, 0.0)  # none held


def test_units_play_no_part() -> None:
    resized, kept = (roll_costs(wandering(account)) for account in ("resize", "cash"))
    assert resized.years == kept.years
    for one, other in zip(resized.legs, kept.legs, strict=True):
        for field in fields(LegCosts):
            assert getattr(one, field.name) == getattr(other, field.name)


def test_an_option_sold_early_pays_no_more_than_its_intrinsic_value() -> None:
    found = wandering("resize")
    rolls = found.rolls_frame()
    for leg in found.legs:
        mine = rolls[(rolls["leg"] == leg.label) & rolls["closed"].notna()]
        sign = 1.0 if leg.leg.right == "call" else -1.0
        expected = [max(0.0, sign * (s - k)) for s, k in zip(mine["spot_close"], mine["strike"], strict=True)]
        found_here = payoffs_at_close(found, leg)
        np.testing.assert_allclose(found_here, expected, rtol=1e-14, atol=0.0)
        settled = mine["settled"].to_numpy()
        if leg.label == "put_2":  # sold with six months to go: worth more than it would pay
            assert (settled > found_here).all()
        else:
            np.testing.assert_array_equal(settled, found_here)
