"""What the default of whoever owes the options' payoff takes.

Rung: hand-worked (options worth what they would pay, on chosen days) and twin (plain loops over the roll table).
"""

from __future__ import annotations

import datetime as dt
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
    PercentOfSpot,
    Replay,
    SignalOn,
    Volatility,
    replay,
)
from backtest.analytics.counterparty import Stress, counterparty_stress
from backtest.beside import Counterparty

# ---------------------------------------------------------------- worked by hand

# An index at 100 from the third Friday of January 2021 on; other closes are given for a day and all that follow it.
# With a vol of 0.1% and no rate an option 5% or more away from the price is worth what it would pay, nothing or the
# difference to its strike, to more than twelve digits. A monthly 95 put so costs nothing: 0.01 units for 1 of wealth.
FIRST, FEBRUARY, MARCH = "2021-01-15", "2021-02-19", "2021-03-19"
EXACT = {"rel": 1e-12, "abs": 1e-14}


def leg(position: Any, right: Any, percent: float, **rest: Any) -> Leg:
    return Leg(position=position, right=right, strike=PercentOfSpot(percent), **({"roll": "month"} | rest))


PUT = leg("long", "put", 95)


def chosen(
    closes: dict[str, float], *legs: Leg, end: str = "2021-03-26", account: str = "resize", costs: Costs = NO_COSTS
) -> Replay:
    days = pd.bdate_range("2021-01-11", "2021-06-30", name="date")
    close = pd.Series(100.0, index=days)
    for day, value in closes.items():
        close[day:] = value
    # a signal that comes on with the first of February
    frame = pd.DataFrame({"close": close, "vol": 0.001, "signal": 1.0 * (days >= "2021-02-01")}, index=days)
    overlay = Overlay(legs=legs or (PUT,), account=account, costs=costs, crossed=True)
    return replay(Market.from_frame(frame), overlay, volatility=Volatility(smile=FLAT), inception=FIRST, end=end)


def stressed(found: Replay, *dates: str, recovery: float = 0.4) -> Stress:
    return counterparty_stress(found, Counterparty(recovery=recovery, default=dates or "worst put payoff"))


def events(found: Stress) -> list[tuple[str, Any, Any]]:
    return [(str(e.date), pytest.approx(e.exposure, **EXACT), pytest.approx(e.loss, **EXACT)) for e in found.events]


def on(found: Replay, path: Any, day: str) -> float:
    return float(path[found.dates.astype(str).tolist().index(day)])


def test_at_a_payoff() -> None:
    # 19 February at 80: the put pays 15, wealth is 0.01 x 95 = 0.95, and 0.6 x 0.15 = 0.09 of it does not come: 0.86
    found = chosen({FEBRUARY: 80.0})
    answer = stressed(found, FEBRUARY)
    assert events(answer) == [(FEBRUARY, 0.15 / 0.95, 0.09 / 0.95)]
    assert on(found, answer.wealth, "2021-02-18") == 1.0
    for day in (FEBRUARY, MARCH, "2021-03-26"):
        assert on(found, found.wealth, day) == pytest.approx(0.95, **EXACT)
        assert on(found, answer.wealth, day) == pytest.approx(0.86, **EXACT)
    # under a year returns are totals
    assert answer.annual_return == pytest.approx(-0.14, **EXACT)
    assert answer.annual_return_difference == pytest.approx(-0.09, **EXACT)
    assert answer.max_drawdown == pytest.approx(-0.14, **EXACT)
    assert answer.max_drawdown_difference == pytest.approx(-0.09, **EXACT)
    assert answer.outside == ()
    assert answer.as_dict() == {
        "recovery": 0.4,
        "default": [FEBRUARY],
        "events": [{"date": np.datetime64(FEBRUARY), "exposure": 0.15 / 0.95, "loss": pytest.approx(0.09 / 0.95)}],
        "outside": [],
        "annual_return": answer.annual_return,
        "max_drawdown": answer.max_drawdown,
        "annual_return_difference": answer.annual_return_difference,
        "max_drawdown_difference": answer.max_drawdown_difference,
    }


@pytest.mark.parametrize(("recovery", "left"), [(0.0, 0.80), (0.4, 0.86), (1.0, 0.95)])
def test_what_is_recovered(recovery: float, left: float) -> None:
    answer = stressed(chosen({FEBRUARY: 80.0}), FEBRUARY, recovery=recovery)
    assert answer.wealth[-1] == pytest.approx(left, **EXACT)


def test_costs_of_the_day_come_after_the_loss() -> None:
    # 15 of the 95 that a unit is worth before the day's trades, however dear the new option is to open
    found = chosen({FEBRUARY: 80.0}, costs=Costs(half_spread_vol=0.0, half_spread_min=0.25, stock_bps=10.0))
    answer = stressed(found, FEBRUARY)
    assert events(answer) == [(FEBRUARY, 15 / 95, 9 / 95)]
    assert answer.wealth[-1] == pytest.approx(found.wealth[-1] * 86 / 95, **EXACT)


def test_in_mid_life_the_option_is_owed_at_its_mark() -> None:
    # from 1 February at 80 the put is worth 15; the default takes 9 of 95, and the payoff of the new one comes in full
    found = chosen({"2021-02-01": 80.0})
    answer = stressed(found, "2021-02-01")
    assert events(answer) == [("2021-02-01", 15 / 95, 9 / 95)]
    assert on(found, answer.wealth, "2021-02-02") == pytest.approx(0.86, **EXACT)
    assert answer.wealth[-1] == pytest.approx(0.86, **EXACT)


def test_without_trading_on_the_day_it_is_the_next_trading_day() -> None:
    # 30 January 2021 is a Saturday
    for given in ("2021-01-30", "2021-01-31", "2021-02-01"):
        assert events(stressed(chosen({"2021-02-01": 80.0}), given)) == [("2021-02-01", 15 / 95, 9 / 95)]
    # Saturday and Sunday fall on the same Monday: one default
    both = stressed(chosen({"2021-02-01": 80.0}), "2021-01-30", "2021-01-31")
    assert events(both) == [("2021-02-01", 15 / 95, 9 / 95)]


def test_defaults_chain() -> None:
    # the second takes 9 of 95 of what the first has left; on 19 March the put is at 76 and nothing is owed
    found = chosen({"2021-02-01": 80.0})
    answer = stressed(found, MARCH, "2021-02-01", FEBRUARY)
    assert events(answer) == [("2021-02-01", 15 / 95, 9 / 95), (FEBRUARY, 15 / 95, 9 / 95), (MARCH, 0.0, 0.0)]
    assert on(found, answer.wealth, "2021-02-18") == pytest.approx(0.86, **EXACT)
    assert answer.wealth[-1] == pytest.approx(0.95 * (86 / 95) ** 2, **EXACT)


def test_sold_options_count_against_bought_ones() -> None:
    # at 80 the 95 put is worth 15 and the sold 90 put 10: of 80 + 5 the 5 are owed
    found = chosen({FEBRUARY: 80.0}, PUT, leg("short", "put", 90))
    assert events(stressed(found, FEBRUARY)) == [(FEBRUARY, 5 / 85, 3 / 85)]
    # at 120 the sold call is worth 15 to the counterparty: the holder owes, and loses nothing
    found = chosen({FEBRUARY: 120.0}, PUT, leg("short", "call", 105))
    answer = stressed(found, FEBRUARY)
    assert events(answer) == [(FEBRUARY, 0.0, 0.0)]
    assert answer.wealth.tolist() == found.wealth.tolist()


def test_what_is_dealt_on_the_day_is_not_at_risk() -> None:
    # a 130 put costs 30 when it is dealt on the first day; nothing was held before
    deep = chosen({}, leg("long", "put", 130))
    assert events(stressed(deep, FIRST)) == [(FIRST, 0.0, 0.0)]
    # on the next day 30 of 100 + 30 are owed; on 19 February those 30 settle, and the new ones are not owed yet
    assert events(stressed(deep, "2021-01-18")) == [("2021-01-18", 30 / 130, 18 / 130)]
    assert events(stressed(deep, FEBRUARY)) == [(FEBRUARY, 30 / 130, 18 / 130)]
    # nor are they when the leg was flat until then: bought on 1 February with 30 of borrowed money
    gated = leg("long", "put", 130, gate=Gate(condition=SignalOn(), when_on="at once"))
    answer = stressed(chosen({}, gated), "2021-02-01", "2021-02-02")
    assert events(answer) == [("2021-02-01", 0.0, 0.0), ("2021-02-02", 0.30, 0.18)]


def test_the_count_is_that_held_overnight() -> None:
    # a quarterly put to 19 March, and a monthly one that rolls five days later, on 26 February and March. From 1 March
    # at 80 both are worth 15, of 80 + 30. On 19 March all goes into packages of a share, a new 76 put worth nothing and
    # the monthly one at 15: more of those than were held overnight. On Monday 15 of 95 are owed.
    legs = (leg("long", "put", 95, roll="quarter"), leg("long", "put", 95, shift_days=5))
    found = chosen({"2021-03-01": 80.0}, *legs)
    assert on(found, found.units, MARCH) == pytest.approx(0.01 * 110 / 95, **EXACT)
    answer = stressed(found, MARCH, "2021-03-22")
    assert events(answer) == [(MARCH, 30 / 110, 18 / 110), ("2021-03-22", 15 / 95, 9 / 95)]


def test_the_worst_payoff_is_the_largest_share_of_wealth() -> None:
    # 19 February at 80: 15 of 95. The put of February is struck at 76: on 19 March at 62 it pays 14, of 62 + 14 = 76
    found = chosen({FEBRUARY: 80.0, MARCH: 62.0})
    answer = stressed(found)
    assert events(answer) == [(MARCH, 14 / 76, 0.6 * 14 / 76)]
    assert answer.as_dict()["default"] == "worst put payoff"
    # at 65 it pays 11 of 76, which is less than 15 of 95
    assert events(stressed(chosen({FEBRUARY: 80.0, MARCH: 65.0}))) == [(FEBRUARY, 15 / 95, 9 / 95)]
    # twice as rich in April, 22 of 152 are more money and less of wealth
    rich = chosen({FEBRUARY: 80.0, MARCH: 160.0, "2021-04-16": 130.0}, end="2021-04-20")
    assert events(stressed(rich)) == [(FEBRUARY, 15 / 95, 9 / 95)]
    # a quarterly put beside the monthly one: on 19 February 15 of 80 + 15 + 10 are paid, on 19 March 13.5 of 76.5 +
    # 13.5 + 15. Had the new count of that day been paid, it would be 13.5 / 76.5, which is more
    both = chosen({FEBRUARY: 80.0, MARCH: 76.5}, PUT, leg("long", "put", 90, roll="quarter"))
    assert events(stressed(both)) == [(FEBRUARY, 25 / 105, 15 / 105)]


def test_the_worst_payoff_is_of_a_bought_put_that_has_ended() -> None:
    # still live on the last day, sold, only named, or a call: none of them
    live = chosen({"2021-02-01": 80.0}, end="2021-02-18")
    sold = chosen({FEBRUARY: 80.0}, leg("short", "put", 95))
    named = chosen({FEBRUARY: 80.0}, leg("long", "put", 95, reference=True), leg("short", "call", 105))
    called = chosen({FEBRUARY: 120.0}, leg("long", "call", 105))
    for found in (live, sold, named, called, chosen({})):
        answer = stressed(found)
        assert answer.events == ()
        assert answer.wealth.tolist() == found.wealth.tolist()
        assert (answer.annual_return_difference, answer.max_drawdown_difference) == (0.0, 0.0)
    # one that is sold back before its expiry has ended too: five trading days before 19 February
    early = chosen({"2021-02-01": 80.0}, leg("long", "put", 95, close_before=5))
    assert events(stressed(early)) == [("2021-02-12", 15 / 95, 9 / 95)]


def test_dates_without_a_day() -> None:
    found = chosen({"2021-02-01": 80.0})
    answer = stressed(found, "2021-01-14", "2021-02-01", "2021-03-27")
    assert [str(event.date) for event in answer.events] == ["2021-02-01"]
    assert answer.outside == (dt.date(2021, 1, 14), dt.date(2021, 3, 27))
    assert answer.as_dict()["outside"] == ["2021-01-14", "2021-03-27"]
    # on the last day there still is one
    assert [str(event.date) for event in stressed(found, "2021-03-26").events] == ["2021-03-26"]


def test_more_is_owed_than_there_is() -> None:
    # a 200 put paid for with borrowed money: share 100, put 100, cash -100. On 1 February at 50 it is 50 + 150 - 100,
    # and 150 of that 100 are owed: nothing is left without recovery, and 0.1 with 0.4
    found = chosen({"2021-02-01": 50.0}, leg("long", "put", 200), account="cash")
    lost = stressed(found, "2021-02-01", recovery=0.0)
    assert events(lost) == [("2021-02-01", 1.5, 1.5)]
    assert on(found, lost.wealth, "2021-01-29") == pytest.approx(1.0, **EXACT)
    assert np.isnan(lost.wealth[found.dates >= np.datetime64("2021-02-01")]).all()
    assert np.isnan([lost.annual_return, lost.max_drawdown, lost.annual_return_difference]).all()
    assert stressed(found, "2021-02-01").wealth[-1] == pytest.approx(0.1, **EXACT)


def test_lost_wealth_owes_nothing() -> None:
    # two 95 puts sold on a share: at 60 it is 60 - 70. No default can take more on the days after
    found = chosen({"2021-02-01": 60.0}, leg("short", "put", 95, ratio=2.0))
    answer = stressed(found, "2021-01-20", "2021-02-01", FEBRUARY)
    assert [str(event.date) for event in answer.events] == ["2021-01-20"]
    assert answer.outside == (dt.date(2021, 2, 1), dt.date(2021, 2, 19))


# ---------------------------------------------------------------- in plain loops

LEGS = (
    Leg(position="long", right="put", roll="half", strike=PercentOfSpot(97)),
    Leg(position="long", right="put", roll="quarter", term_months=9, strike=PercentOfSpot(105), ratio=0.5),
    Leg(position="short", right="call", roll="month", strike=PercentOfSpot(102), ratio=0.7),
    Leg(position="short", right="put", roll="quarter", phase=1, strike=PercentOfSpot(80), ratio=1.5),
)
CASES: dict[str, dict[str, Any]] = {
    "resize": {"account": "resize"},
    "cash": {"account": "cash"},
    "whole contracts": {"account": "cash", "portfolio": 1_000_000.0},
}
ASKED = pd.date_range("2015-06-01", "2018-06-01", freq="37D")


def wandering(**overlay: Any) -> Replay:
    rng = np.random.default_rng(5)
    days = pd.bdate_range("2015-01-02", "2018-08-10", name="date")
    close = 100 * np.exp(np.cumsum(rng.normal(-0.0002, 0.012, len(days))))
    vol = 0.16 + 0.08 * np.abs(np.sin(np.arange(len(days)) / 70))
    frame = pd.DataFrame({"close": close, "vol": vol, "rate": 0.02}, index=days)
    costs = Costs(half_spread_percent=3.0, commission=1.0, settlement_fee=4.0)
    return replay(Market.from_frame(frame), Overlay(legs=LEGS, costs=costs, crossed=True, **overlay))


def slow_exposure(found: Replay, day: int) -> float:
    """What is owed at a close before its trades, over wealth before its trades."""
    daily, labels = found.to_frame(), [leg.label for leg in found.legs]
    today, before = daily.index[day], daily.index[day - 1]
    value, cost = 0.0, 0.0
    roll: Any
    for roll in found.rolls_frame().itertuples():
        held, now = (found.leg_count[labels.index(roll.leg), place] for place in (day - 1, day))
        if found.overlay.portfolio is None:
            held, now = (roll.ratio * daily["units"].iloc[place] for place in (day - 1, day))
        if roll.opened == today:
            cost += now * roll.cost
        if roll.closed == today:
            cost += held * roll.exit_cost
        if roll.opened <= before and not (pd.notna(roll.closed) and roll.closed <= before):
            worth = roll.settled if roll.closed == today else daily[f"{roll.leg}_mark"].iloc[day]
            value += held * worth * (1 if roll.position == "long" else -1)
    return max(value, 0.0) / (daily["overlay"].iloc[day] + cost)


@pytest.mark.parametrize("case", CASES)
def test_many_defaults_in_loops(case: str) -> None:
    found = wandering(**CASES[case])
    asked = sorted({*ASKED.date, *(day.date() for day in found.rolls_frame()["closed"].dropna().unique()[::5])})
    answer = counterparty_stress(found, Counterparty(recovery=0.25, default=tuple(asked)))
    dates = [day.date() for day in found.to_frame().index]
    wealth, expected, losses = 1.0, [], []
    for place, day in enumerate(dates):
        due = [one for one in asked if one >= dates[0] and (one == day or (place and dates[place - 1] < one < day))]
        if due:
            losses.append(0.75 * slow_exposure(found, place) if place else 0.0)
            wealth *= 1 - losses[-1]
        expected.append(found.wealth[place] * wealth)
    np.testing.assert_allclose([event.loss for event in answer.events], losses, rtol=1e-12, atol=1e-14)
    np.testing.assert_allclose(answer.wealth, expected, rtol=1e-12)
    assert len(losses) > 30
    assert 0 < np.count_nonzero(losses) < len(losses)  # at times the holder owes
    years = (dates[-1] - dates[0]).days / 365.25
    assert answer.annual_return == pytest.approx(expected[-1] ** (1 / years) - 1, abs=1e-12)
    assert answer.annual_return_difference == pytest.approx(
        expected[-1] ** (1 / years) - found.wealth[-1] ** (1 / years), abs=1e-12
    )
    falls = [
        [path[later] / max(path[: later + 1]) - 1 for later in range(len(path))]
        for path in (expected, found.wealth.tolist())
    ]
    assert answer.max_drawdown == pytest.approx(min(falls[0]), abs=1e-12)
    assert answer.max_drawdown_difference == pytest.approx(min(falls[0]) - min(falls[1]), abs=1e-12)


@pytest.mark.parametrize("case", CASES)
def test_the_worst_put_payoff_in_loops(case: str) -> None:
    found = wandering(**CASES[case])
    rolls, daily = found.rolls_frame(), found.to_frame()
    labels = [leg.label for leg in found.legs]
    worst = (0.0, dt.date.min)
    bought = rolls[(rolls["right"] == "put") & (rolls["position"] == "long") & rolls["closed"].notna()]
    roll: Any
    for roll in bought.itertuples():
        day = daily.index.get_loc(roll.closed)
        cost = found.trading_cost[day]
        paid = found.leg_count[labels.index(roll.leg), day - 1] * roll.settled / (daily["overlay"].iloc[day] + cost)
        worst = max(worst, (paid, roll.closed.date()))
    answer = counterparty_stress(found, Counterparty())
    assert [event.date for event in answer.events] == [np.datetime64(worst[1], "D")]
    again = counterparty_stress(found, Counterparty(default=(worst[1],)))
    np.testing.assert_array_equal(answer.wealth, again.wealth)
    assert answer.events == again.events
