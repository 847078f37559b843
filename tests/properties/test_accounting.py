"""Rung: identity. Accounting and attribution as equations that hold on every day (C9, C12).

Change in wealth = stock + dividends + options + interest - costs. The right-hand side is rebuilt here from what a
replay shows the world (the daily frame, the roll table, units and shares) and from the raw history; nothing
of the engine is called for it.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt
import pandas as pd
from hypothesis import assume, event, given

from backtest import Replay
from backtest.analytics import attribute

from .strategies import RICH, Array, Scenario, scenarios

# of the starting wealth, which is 1: sums of a few numbers of that size
TIGHT = 1e-12


@dataclass(frozen=True, kw_only=True)
class Books:
    """What moved the wealth, rebuilt; shape ``(day,)`` and ``(leg, day)``, the first day being the inception.

    ``assets`` is what is owned after the day's trades.
    """

    stock: Array
    dividends: Array
    options: Array
    interest: Array
    rate_return: Array
    costs: Array
    assets: Array
    option_values: Array


def rebuild(scenario: Scenario, found: Replay) -> Books:
    daily, rolls = found.to_frame(), found.rolls_frame()
    days, labels = len(daily), list(dict.fromkeys(rolls["leg"]))
    raw = scenario.history.frame.loc[daily.index]
    spot = raw["close"].to_numpy()
    gap = calendar_days(daily.index)
    annual_rate = raw["rate"].to_numpy() if scenario.history.rate is None else np.full(days, scenario.history.rate)
    dividend = dividends_per_share(scenario, raw, spot, gap)
    units, shares, cash = (daily[name].to_numpy() for name in ("units", "shares", "cash"))

    stock, dividends, interest, rate_return, costs = (np.zeros(days) for _ in range(5))
    position = {date: day for day, date in enumerate(daily.index)}
    options, values = np.zeros((len(labels), days)), np.zeros((len(labels), days))
    for day in range(1, days):
        stock[day] = shares[day - 1] * (spot[day] - spot[day - 1])
        dividends[day] = shares[day - 1] * dividend[day]
        rate_return[day] = (1.0 + annual_rate[day - 1]) ** (gap[day] / 365.0) - 1.0
        interest[day] = cash[day - 1] * rate_return[day]

    for row, label in enumerate(labels):
        mark = daily[f"{label}_mark"].to_numpy()
        mine = rolls[rolls["leg"] == label]
        ratio = float(mine["ratio"].iloc[0])
        signed = ratio if mine["position"].iloc[0] == "long" else -ratio
        # an option held overnight is worth its mark next day, or on a roll day what it was settled or sold for
        worth = mark.copy()
        roll: Any
        for roll in mine.itertuples():
            opened = position[roll.opened]
            costs[opened] += units[opened] * ratio * roll.cost
            if not pd.isna(roll.closed):
                closed = position[roll.closed]
                worth[closed] = roll.settled
                costs[closed] += units[closed - 1] * ratio * roll.exit_cost
        options[row, 1:] = units[:-1] * signed * (worth[1:] - mark[:-1])
        values[row] = units * signed * mark

    if scenario.overlay.account == "resize":
        # before the first day's trades all wealth is in shares; later, what the dividends have left of yesterday's
        before = np.concatenate([[1.0 / spot[0]], shares[:-1] * (1.0 + dividend[1:] / spot[1:])])
        costs += scenario.overlay.costs.stock_bps / 1e4 * spot * np.abs(shares - before)
    return Books(
        stock=stock,
        dividends=dividends,
        options=options,
        interest=interest,
        rate_return=rate_return,
        costs=costs,
        assets=shares * spot + cash + values.sum(axis=0),
        option_values=values,
    )


def calendar_days(dates: pd.Index) -> npt.NDArray[np.int64]:
    """Since the trading day before; zero on the first."""
    number = dates.to_numpy().astype("datetime64[D]").astype(np.int64)
    return np.concatenate([[0], number[1:] - number[:-1]])


def dividends_per_share(scenario: Scenario, raw: pd.DataFrame, spot: Array, gap: npt.NDArray[np.int64]) -> Array:
    """Cash on the ex-date; a constant yield without a dividend file is paid a little every day."""
    if "dividend" in raw.columns:
        return raw["dividend"].to_numpy()
    if scenario.history.dividend_yield is None:
        return np.zeros(len(spot))
    return spot * ((1.0 + scenario.history.dividend_yield) ** (gap / 365.0) - 1.0)


def solvent(found: Replay) -> int:
    """Number of days before the wealth is lost, if it is."""
    lost = np.isnan(found.wealth)
    return int(np.argmax(lost)) if lost.any() else len(lost)


def assert_equal(actual: Array, expected: Array, name: str, days: int) -> None:
    np.testing.assert_allclose(
        actual[..., :days], expected[..., :days], rtol=0.0, atol=TIGHT * gross(expected[..., :days]), err_msg=name
    )


def gross(values: Array) -> float:
    """1, or the largest value where wealth has grown: rounding is of what is added up."""
    return max(1.0, float(np.max(np.abs(values))))


@RICH
@given(scenario=scenarios())
def test_change_in_wealth_is_stock_dividends_options_interest_less_costs(scenario: Scenario) -> None:
    found = scenario.run()
    books, days = rebuild(scenario, found), solvent(found)
    event(f"{scenario.overlay.account}, {len(scenario.overlay.legs)} legs, {scenario.history.drawn['payout']}")
    assert found.wealth[0] == 1.0
    gains = books.stock + books.dividends + books.options.sum(axis=0) + books.interest - books.costs
    gains[1] -= books.costs[0]  # the first wealth is counted before its trades, so their cost shows on the next day
    change = np.diff(found.wealth, prepend=1.0)
    gains[0] = 0.0
    assert_equal(change, gains, "change in wealth", days)
    # and wealth is what is owned: on the first day less what its trades have cost
    owned = books.assets.copy()
    owned[0] += books.costs[0]
    assert_equal(found.wealth, owned, "wealth", days)
    # the replay's own daily lines are these
    for name, values in (
        ("stock_profit", books.stock + books.dividends),
        ("leg_profit", books.options),
        ("interest", books.interest),
        ("trading_cost", books.costs),
        ("rate_return", books.rate_return),
        ("leg_value", books.option_values),
        ("option_value", books.option_values.sum(axis=0)),
    ):
        assert_equal(getattr(found, name), values, name, days)


@RICH
@given(scenario=scenarios())
def test_holdings_change_only_as_the_account_says(scenario: Scenario) -> None:
    """C9: dividends into shares at the ex-date close; whole packages at the anchor's rolls; interest on cash."""
    found = scenario.run()
    daily, rolls, days = found.to_frame(), found.rolls_frame(), solvent(found)
    raw = scenario.history.frame.loc[daily.index]
    spot = raw["close"].to_numpy()
    reinvested = 1.0 + dividends_per_share(scenario, raw, spot, calendar_days(daily.index)) / spot
    units, shares, cash = (daily[name].to_numpy() for name in ("units", "shares", "cash"))
    label = list(dict.fromkeys(rolls["leg"]))
    opened = {name: set(rolls.loc[rolls["leg"] == name, "opened"]) for name in label}
    resized = opened[found.legs[scenario.overlay.legs.index(scenario.overlay.anchor)].label]
    traded = set().union(*opened.values())
    assert units[0] > 0.0
    for day, date in enumerate(daily.index[:days]):
        if date in resized:
            assert abs(units[day] - shares[day]) * spot[day] <= TIGHT  # whole packages
            if scenario.overlay.account == "resize":
                assert cash[day] == 0.0
        if day == 0:
            continue
        free = scenario.overlay.account == "resize" and date in resized
        if not free:
            assert abs(shares[day] - shares[day - 1] * reinvested[day]) * spot[day] <= TIGHT * gross(
                found.wealth[:days]
            )
        if date not in resized:
            assert units[day] == units[day - 1]
        if date not in traded:
            growth = 1.0 + found.rate_return[day]
            assert abs(cash[day] - cash[day - 1] * growth) <= TIGHT * gross(cash[:days])
    if scenario.overlay.account == "cash":  # one share per starting share, and what its dividends have bought
        reinvested[0] = 1.0
        np.testing.assert_allclose(shares, np.cumprod(reinvested) / spot[0], rtol=TIGHT, atol=0.0)


@RICH
@given(scenario=scenarios())
def test_attribution_adds_up_to_the_excess_return_of_every_day(scenario: Scenario) -> None:
    """C12: passive equity + equity timing + volatility of each leg + cost = X, each part by its definition."""
    found = scenario.run()
    assume(bool((found.wealth > 0.1).all()))  # parts are divided by wealth
    books, parts = rebuild(scenario, found), attribute(found)
    before = found.wealth[:-1]
    rf = books.rate_return[1:]
    excess = found.wealth[1:] / before - 1.0 - rf
    assert_same(parts.excess, excess, "excess")
    total = parts.passive_equity + parts.equity_timing + parts.volatility.sum(axis=0) + parts.cost
    assert_same(total, excess, "sum of parts")

    # the hold's excess from the raw history, the day's dividend included
    spot = found.spot
    raw = scenario.history.frame.loc[found.to_frame().index]
    dividend = dividends_per_share(scenario, raw, spot, calendar_days(raw.index))
    hold_excess = (spot[1:] + dividend[1:]) / spot[:-1] - 1.0 - rf
    leg_delta = np.array(
        [
            found.units * (1.0 if leg.leg.position == "long" else -1.0) * leg.leg.ratio * leg.daily_delta * spot
            for leg in found.legs
        ]
    )
    delta = (found.shares * spot + leg_delta.sum(axis=0))[:-1] / before
    mean_delta = float(np.mean(delta))
    assert_same(parts.passive_equity, mean_delta * hold_excess, "passive equity")
    assert_same(parts.equity_timing, (delta - mean_delta) * hold_excess, "equity timing")
    volatility = books.options[:, 1:] - rf * books.option_values[:, :-1] - leg_delta[:, :-1] * hold_excess
    assert_same(parts.volatility, volatility / before, "volatility")
    cost = books.costs[1:].copy()
    cost[0] += books.costs[0] * (1.0 + rf[0])  # the first trades' cost, and a day's interest on it
    assert_same(parts.cost, -cost / before, "cost")
    # yearly means times 252 add up as the days do
    annual = parts.annual()
    whole = annual.pop("excess_return")
    np.testing.assert_allclose(sum(annual.values()), whole, rtol=0.0, atol=252 * TIGHT)
    assert set(annual) == {"passive_equity", "equity_timing", "cost"} | {
        f"volatility_{leg.label}" for leg in found.legs
    }


def assert_same(actual: Array, expected: Array, name: str) -> None:
    np.testing.assert_allclose(actual, expected, rtol=0.0, atol=TIGHT, err_msg=name)
