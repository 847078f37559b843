"""Rung: identity. What must not matter: the unit of money, legs of ratio zero, how a leg is cut, who else is replayed.

Markets and overlays are random (see ``strategies.py``); each property is a statement about two replays.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pandas as pd
import pytest
from hypothesis import given
from hypothesis import strategies as st

from backtest import (
    FLAT,
    Costs,
    Leg,
    Market,
    Overlay,
    PercentOfSpot,
    Replay,
    Volatility,
    replay,
    replay_many,
)

from .strategies import (
    FEWER,
    RICH,
    History,
    Scenario,
    assert_same_bits,
    daily_outputs,
    histories,
    leg_outputs,
    legs,
    overlays,
    scenarios,
    solvent_days,
    volatilities,
)

# a few hundred rounded steps; 1e-12 is some thousands of units in the last place
TIGHT = 1e-12


def with_legs(overlay: Overlay, changed: list[Leg]) -> Overlay:
    return replace(overlay, legs=tuple(changed))


# ---------------------------------------------------------------- the unit of money


def in_another_unit(scenario: Scenario, factor: float) -> Scenario:
    """Everything that is money times ``factor``: prices, cash dividends, least half-spread, commission, fee."""
    frame, costs = scenario.history.frame.copy(), scenario.overlay.costs
    for name in {"close", "dividend"} & set(frame.columns):
        frame[name] *= factor
    scaled = {name: factor * getattr(costs, name) for name in ("half_spread_min", "commission", "settlement_fee")}
    return replace(
        scenario,
        history=replace(scenario.history, frame=frame),
        overlay=replace(scenario.overlay, costs=replace(costs, **scaled)),
    )


@RICH
@given(scenario=scenarios(), factor=st.one_of(st.just(10.0), st.floats(1e-3, 1e3)))
def test_prices_times_a_factor_change_no_return(scenario: Scenario, factor: float) -> None:
    one, other = scenario.run(), in_another_unit(scenario, factor).run()
    days = solvent_days(one)
    paths, others = daily_outputs(one), daily_outputs(other)
    for name in ("wealth", "hold"):  # gross returns, the last of them up to the last solvent day
        before, after = (p[name][days][1:] / p[name][days][:-1] for p in (paths, others))
        np.testing.assert_allclose(after, before, rtol=TIGHT, atol=0.0, err_msg=name)
        np.testing.assert_allclose(others[name][days], paths[name][days], rtol=TIGHT, atol=0.0, err_msg=name)
    # shares and options per 1 of wealth are fewer by the factor; money per 1 of wealth is the same
    for name in ("units", "shares"):
        np.testing.assert_allclose(others[name][days] * factor, paths[name][days], rtol=TIGHT, atol=0.0, err_msg=name)
    for name in ("cash", "option_value", "trading_cost", "interest", "stock_profit"):
        np.testing.assert_allclose(others[name][days], paths[name][days], rtol=0.0, atol=TIGHT, err_msg=name)
    for mine, theirs in zip(leg_outputs(other), leg_outputs(one), strict=True):
        np.testing.assert_allclose(mine["strike"] / factor, theirs["strike"], rtol=TIGHT, atol=0.0)
        floor = TIGHT * np.max(one.spot)  # a far option is worth a tiny part of what it is a difference of
        np.testing.assert_allclose(mine["mark"] / factor, theirs["mark"], rtol=0.0, atol=floor)


def test_costs_in_money_are_seen_to_change_returns_when_not_scaled() -> None:
    """The property above would be empty if the costs in money weighed nothing."""
    history = History(frame=_sine_frame(), drawn={})
    put = Leg(position="long", right="put", roll="month", strike=PercentOfSpot(95))
    overlay = Overlay(legs=(put,), costs=Costs(half_spread_vol=0.0, half_spread_min=0.05))
    scenario = Scenario(history=history, overlay=overlay, volatility=Volatility(smile=FLAT), window={})
    cheap = replace(history, frame=history.frame.assign(close=history.frame["close"] / 10.0))
    assert scenario.run(history=cheap).wealth[-1] < scenario.run().wealth[-1] - 0.01


# ---------------------------------------------------------------- legs of ratio zero


@RICH
@given(scenario=scenarios(), data=st.data())
def test_a_leg_of_ratio_zero_changes_nothing(scenario: Scenario, data: st.DataObject) -> None:
    """Bit for bit: it adds exact zeros and takes no part in choosing the anchor."""
    held = list(scenario.overlay.legs)
    place = data.draw(st.integers(0, len(held)), label="place")
    idle = data.draw(legs(ratio=0.0), label="idle leg")
    expected = scenario.run()
    found = scenario.run(overlay=with_legs(scenario.overlay, [*held[:place], idle, *held[place:]]))
    assert found.dates.tolist() == expected.dates.tolist()
    for name, values in daily_outputs(expected).items():
        # a sum that begins with a signed zero may lose the sign: compare values there
        assert_same_bits(daily_outputs(found)[name] + 0.0, values + 0.0, name)
    others = leg_outputs(found)
    del others[place]
    for mine, theirs in zip(others, leg_outputs(expected), strict=True):
        for name, values in theirs.items():
            assert_same_bits(mine[name], values, name)


@RICH
@given(scenario=scenarios(ratio=0.0))
def test_legs_all_of_ratio_zero_are_the_hold(scenario: Scenario) -> None:
    found = scenario.run()
    np.testing.assert_allclose(found.wealth, found.hold, rtol=TIGHT, atol=0.0)
    np.testing.assert_allclose(found.shares * found.spot, found.hold, rtol=TIGHT, atol=0.0)
    np.testing.assert_allclose(found.delta, 1.0, rtol=TIGHT, atol=0.0)
    for name in ("cash", "option_value", "trading_cost"):
        np.testing.assert_allclose(getattr(found, name), 0.0, rtol=0.0, atol=TIGHT, err_msg=name)
    # hold is known without the engine: one share and its dividends, reinvested at the ex-date close
    market, hold = found.market, 1.0
    for day in range(found.window.start + 1, found.window.stop):
        hold *= (market.spot[day] + market.dividend[day]) / market.spot[day - 1]
        assert found.wealth[day - found.window.start] == pytest.approx(hold, rel=TIGHT)


@pytest.mark.parametrize("account", ["resize", "cash"])
def test_a_leg_of_ratio_zero_without_a_price_changes_nothing(account: str) -> None:
    """Puts have no price here, nothing being left of their vol, and none is held."""
    market = Market.from_frame(_sine_frame(), rate=0.02)
    call = Leg(position="short", right="call", strike=PercentOfSpot(110))
    idle = Leg(position="long", right="put", strike=PercentOfSpot(95), ratio=0.0)
    no_put_price = Volatility(smile=FLAT, put_shift=-50.0)
    alone = replay(market, Overlay(legs=(call,), account=account), volatility=no_put_price)
    beside = replay(market, Overlay(legs=(call, idle), account=account), volatility=no_put_price)
    assert np.isfinite(alone.wealth).all()
    assert_same_bits(beside.wealth, alone.wealth, "wealth")


# ---------------------------------------------------------------- how a leg is cut


@RICH
@given(scenario=scenarios(), data=st.data())
def test_a_leg_in_two_halves_changes_nothing(scenario: Scenario, data: st.DataObject) -> None:
    held = list(scenario.overlay.legs)
    place = data.draw(st.integers(0, len(held) - 1), label="leg")
    half = replace(held[place], ratio=held[place].ratio / 2)
    expected = scenario.run()
    found = scenario.run(overlay=with_legs(scenario.overlay, [*held[:place], half, half, *held[place + 1 :]]))
    days = solvent_days(expected)
    for name, values in daily_outputs(expected).items():
        mine, wanted = daily_outputs(found)[name][days], values[days]
        np.testing.assert_allclose(mine, wanted, rtol=TIGHT, atol=TIGHT, err_msg=name)
    whole, halves = leg_outputs(expected)[place], leg_outputs(found)[place : place + 2]
    assert_same_bits(halves[0]["mark"], whole["mark"], "mark")
    both = halves[0]["leg profit"] + halves[1]["leg profit"]
    np.testing.assert_allclose(both[days], whole["leg profit"][days], rtol=0.0, atol=TIGHT)


# ---------------------------------------------------------------- who else is replayed


def assert_replays_equal(found: Replay, expected: Replay) -> None:
    assert found.overlay is expected.overlay
    assert found.dates.tolist() == expected.dates.tolist()
    for name, values in daily_outputs(expected).items():
        assert_same_bits(daily_outputs(found)[name], values, name)
    pd.testing.assert_frame_equal(found.to_frame(), expected.to_frame(), check_exact=True)
    pd.testing.assert_frame_equal(found.rolls_frame(), expected.rolls_frame(), check_exact=True)


@FEWER
@given(
    history=histories(least_days=420),
    several=st.lists(overlays(), min_size=2, max_size=7),
    assumptions=st.lists(volatilities(), min_size=7, max_size=7),
    one_volatility=st.booleans(),
)
def test_many_replays_are_the_single_ones_bit_for_bit(
    history: History, several: list[Overlay], assumptions: list[Volatility], one_volatility: bool
) -> None:
    """Bit for bit, not 1e-13: all shared work is elementwise and each overlay adds its legs in its own order.

    Overlays share priced legs, books and blocks of memory with the others, none of which changes the order of a sum.
    """
    market = history.market()
    # the second overlay has one leg of the first among its own, so that something is shared
    several[1] = with_legs(several[1], [several[0].legs[0], *several[1].legs])
    chosen = [assumptions[0]] * len(several) if one_volatility else assumptions[: len(several)]
    together = replay_many(market, several, volatility=chosen[0] if one_volatility else chosen)
    assert len(together) == len(several)
    for found, overlay, volatility in zip(together, several, chosen, strict=True):
        assert_replays_equal(found, replay(market, overlay, volatility=volatility))


@pytest.mark.parametrize("account", ["resize", "cash"])
def test_an_overlay_without_a_price_leaves_the_others_alone(account: str) -> None:
    """The first overlay's puts have no price; the others hold none, and one of them has fewer legs than another."""
    market = Market.from_frame(_sine_frame(), rate=0.02)
    put = Leg(position="long", right="put", strike=PercentOfSpot(95))
    low, high = (Leg(position="short", right="call", strike=PercentOfSpot(p)) for p in (105, 120))
    several = [Overlay(legs=held, account=account) for held in ((put,), (low,), (low, high))]
    no_put_price = Volatility(smile=FLAT, put_shift=-50.0)
    together = replay_many(market, several, volatility=no_put_price)
    for found, overlay in zip(together, several, strict=True):
        alone = replay(market, overlay, volatility=no_put_price)
        assert_same_bits(found.wealth, alone.wealth, f"wealth with {len(overlay.legs)} legs")
    assert np.isfinite(together[2].wealth).all()
    assert np.isnan(together[0].wealth[1:]).all()


def _sine_frame() -> pd.DataFrame:
    days = pd.bdate_range("2018-01-01", "2019-12-31", name="date")
    close = 100 * np.exp(0.1 * np.sin(np.arange(len(days)) / 50))
    return pd.DataFrame({"close": close, "vol": 0.20}, index=days)
