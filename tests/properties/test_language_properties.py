"""Rung: identity. What the words of the overlay language promise, on random markets and overlays.

Ladders, gates, financed and mirrored strikes, ratchets, the unit of money, who else is replayed. No look-ahead is in
``test_language_look_ahead.py``.
"""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np
import numpy.typing as npt
from hypothesis import assume, given
from hypothesis import strategies as st

from backtest import Adjusted, Gate, Leg, LegReplay, Mirrored, Overlay, Replay, SignalOn, replay, replay_many
from backtest.engine.families import replay_families
from backtest.engine.legs import PricedLegs

from .language_strategies import (
    cycles,
    financed_scenarios,
    gates,
    language_overlays,
    language_scenarios,
    strikes,
    with_signal,
)
from .strategies import (
    FEWER,
    RICH,
    TENORS,
    Scenario,
    assert_same_bits,
    daily_outputs,
    histories,
    leg_outputs,
    solvent_days,
    volatilities,
)
from .test_invariance import TIGHT, assert_replays_equal, in_another_unit

Array = npt.NDArray[np.float64]


def same_paths(found: Replay, expected: Replay) -> None:
    days = solvent_days(expected)
    for name, values in daily_outputs(expected).items():
        mine = daily_outputs(found)[name]
        np.testing.assert_allclose(mine[days], values[days], rtol=TIGHT, atol=TIGHT, err_msg=name)


# ---------------------------------------------------------------- ladders


@RICH
@given(
    scenario=language_scenarios(laddered=False, exact=False) | financed_scenarios(decide_lag=0, exact=False),
    rungs=st.integers(2, 4),
    data=st.data(),
)
def test_a_ladder_without_stagger_is_the_plain_leg(scenario: Scenario, rungs: int, data: st.DataObject) -> None:
    """Whether all legs are cut, or some that name none that are: each tranche pays for its part of what it finances."""
    overlay = scenario.overlay
    named = {number for leg in overlay.legs for number in leg.named_legs}
    cut = data.draw(st.sampled_from(["all", "those that are not named"]), label="cut")
    legs = tuple(
        replace(leg, ladder=rungs, stagger=False) if cut == "all" or number not in named else leg
        for number, leg in enumerate(overlay.legs, start=1)
    )
    expected, found = scenario.run(), scenario.run(overlay=replace(overlay, legs=legs))
    same_paths(found, expected)
    place = 0
    for plain, leg in zip(expected.legs, legs, strict=True):
        for tranche in found.legs[place : place + leg.ladder]:
            assert tranche.opened.tolist() == plain.opened.tolist()
            np.testing.assert_allclose(tranche.strike, plain.strike, rtol=TIGHT)
        place += leg.ladder


# ---------------------------------------------------------------- gates


@RICH
@given(scenario=language_scenarios(gated=False), data=st.data())
def test_a_gate_that_is_always_on_changes_nothing(scenario: Scenario, data: st.DataObject) -> None:
    """Bit for bit, whatever it would do when it went off."""
    gate = replace(data.draw(gates(on_vol=False), label="gate"), condition=SignalOn())
    frame = scenario.history.frame.assign(signal=1.0)
    found = scenario.run(history=replace(scenario.history, frame=frame), overlay=replace(scenario.overlay, gate=gate))
    expected = scenario.run()
    for name, values in daily_outputs(expected).items():
        assert_same_bits(daily_outputs(found)[name], values, name)
    for mine, theirs in zip(leg_outputs(found), leg_outputs(expected), strict=True):
        for name, values in theirs.items():
            assert_same_bits(mine[name], values, name)
    assert found.rolls_frame()["flag"].tolist() == expected.rolls_frame()["flag"].tolist()


@FEWER
@given(scenario=language_scenarios(gated=False, exact=False), when_on=st.sampled_from(["next roll", "at once"]))
def test_a_gate_that_is_never_on_is_the_hold(scenario: Scenario, when_on: str) -> None:
    frame = scenario.history.frame.assign(signal=0.0)
    gate = Gate(condition=SignalOn(), when_on=when_on)
    found = scenario.run(history=replace(scenario.history, frame=frame), overlay=replace(scenario.overlay, gate=gate))
    assert len(found.rolls_frame()) == 0
    np.testing.assert_allclose(found.wealth, found.hold, rtol=TIGHT)


@RICH
@given(scenario=language_scenarios())
def test_a_gate_opens_only_while_it_is_on(scenario: Scenario) -> None:
    """And with "close", holds only while it is on."""
    found = scenario.run()
    lag = scenario.overlay.decide_lag
    for leg in found.legs:
        gate = leg.leg.gate
        if gate is None:
            continue
        on = gate.condition.on(found.market)
        first = found.window.start - lag
        assert on[leg.opened + first].all()
        if gate.when_off == "close":
            held = ~np.isnan(leg.daily_strike)
            assert on[first : first + len(found)][held].all()


# ---------------------------------------------------------------- financed


def live_option(leg: LegReplay, day: int) -> int | None:
    """Which option a leg holds after the day's trades."""
    for number, (opened, closed, live) in enumerate(zip(leg.opened, leg.closed, leg.schedule.live, strict=True)):
        if opened <= day and (day < closed or live):
            return number
    return None


@RICH
@given(scenario=financed_scenarios(decide_lag=0))
def test_a_financed_strike_nets_to_its_target_at_every_roll(scenario: Scenario) -> None:
    found = scenario.run()
    *others, seller = found.legs
    months = [leg.leg.cycle.length_months for leg in found.legs]
    rule: Any = seller.leg.strike
    words = seller.flags()
    for roll, day in enumerate(seller.opened.tolist()):
        due, unknown = 0.0, False
        for number in rule.legs:
            other = others[number - 1]
            live = live_option(other, day)
            if live is not None:
                each = other.leg.direction * other.premium[live] + other.open_cost[live]
                unknown |= bool(np.isnan(each))
                due += other.leg.ratio * each * months[-1] / months[number - 1]
        target = rule.share * due / seller.leg.ratio
        net = seller.premium[roll] - seller.open_cost[roll]
        if unknown or np.isnan(seller.strike[roll]):
            continue  # no vol is left of a shifted one
        if "no solution" not in words[roll]:
            spot = found.spot[day]
            assert abs(net - target) <= 1e-10 * target
            assert 0.01 * spot <= seller.strike[roll] * (1 + 1e-12)
            assert seller.strike[roll] <= 10.0 * spot * (1 + 1e-12)
        elif target <= 0.0:
            cheapest = "highest strike" if seller.leg.right == "call" else "lowest strike"
            assert cheapest in words[roll]
        else:
            # even the dearest option brings too little
            dearest = "lowest strike" if seller.leg.right == "call" else "highest strike"
            assert (dearest in words[roll]) == (net < target)


# ---------------------------------------------------------------- mirrored


@FEWER
@given(scenario=language_scenarios(laddered=False, gated=False), data=st.data())
def test_a_mirrored_band_is_symmetric_in_logarithms(scenario: Scenario, data: st.DataObject) -> None:
    """Put and call of the same rolls, so of the same forward, which lies in the middle of their logarithms."""
    lag = scenario.overlay.decide_lag
    fields = data.draw(cycles(), label="cycle")
    strike = data.draw(strikes([], sold=False), label="strike")
    put = Leg(position="long", right="put", strike=strike, **fields)
    call = Leg(position="short", right="call", strike=Mirrored(1), **fields)
    found = scenario.run(overlay=replace(scenario.overlay, legs=(put, call)))
    one, other = found.legs
    assert one.opened.tolist() == other.opened.tolist()
    if lag == 0:
        forward = one.forward
    else:
        market, day = found.market, one.opened + found.window.start - lag
        tau = (one.schedule.expiry_day - market.day_number[day]) / 365.0
        forward = market.spot[day] * np.exp((market.rate[day] - market.dividend_yield[day]) * tau)
    known = ~np.isnan(one.strike) & np.array(["strike" not in words for words in other.flags()])
    assume(known.any())
    away, mirrored = np.log(one.strike / forward), np.log(other.strike / forward)
    np.testing.assert_allclose(mirrored[known], -away[known], rtol=0.0, atol=1e-13)


# ---------------------------------------------------------------- ratchets


@RICH
@given(scenario=language_scenarios(), step=st.sampled_from([None, 5.0]))
def test_a_ratchet_never_falls_while_below_spot(scenario: Scenario, step: float | None) -> None:
    legs = tuple(
        replace(leg, early=None, strike=Adjusted(rule=leg.rule, ratchet=True, strike_step=step))
        for leg in scenario.overlay.legs
    )
    found = scenario.run(overlay=replace(scenario.overlay, legs=legs))
    spot = found.market.spot
    for leg in found.legs:
        sign = leg.leg.sign
        decided = spot[leg.opened + found.window.start - scenario.overlay.decide_lag]
        before, after = leg.strike[:-1], leg.strike[1:]
        holds = leg.schedule.follows[1:] & (sign * (before - decided[1:]) > 0.0)
        assert (sign * (after - before)[holds] <= 0.0).all()


# ---------------------------------------------------------------- the unit of money


@RICH
@given(scenario=language_scenarios(steps=False), factor=st.sampled_from([10.0, 0.1, 8.0]))
def test_prices_times_a_factor_change_no_return(scenario: Scenario, factor: float) -> None:
    frame = scenario.history.frame
    other = in_another_unit(scenario, factor)
    other = replace(
        other, history=replace(other.history, frame=other.history.frame.assign(open=frame["open"] * factor))
    )
    if scenario.overlay.portfolio is not None:
        other = replace(other, overlay=replace(other.overlay, portfolio=factor * scenario.overlay.portfolio))
    expected, found = scenario.run(), other.run()
    for mine, theirs in zip(found.legs, expected.legs, strict=True):
        assert mine.opened.tolist() == theirs.opened.tolist()
        assert mine.schedule.reason.tolist() == theirs.schedule.reason.tolist()
        assert mine.strike_flags.tolist() == theirs.strike_flags.tolist()
        np.testing.assert_allclose(mine.strike / factor, theirs.strike, rtol=TIGHT)
    days = solvent_days(expected)
    np.testing.assert_allclose(found.wealth[days], expected.wealth[days], rtol=TIGHT)


# ---------------------------------------------------------------- who else is replayed


@FEWER
@given(
    history=histories(tenors=tuple(columns for columns in TENORS if columns)).map(with_signal),
    several=st.lists(language_overlays(on_vol=True), min_size=2, max_size=6),
    volatility=volatilities(),
)
def test_many_replays_are_the_single_ones_bit_for_bit(history: Any, several: list[Overlay], volatility: Any) -> None:
    """Also where legs are kept from one batch to the next, and solved or laddered legs of others stand beside them."""
    market = history.market()
    # legs of the first overlay occur in the second as well, with whatever they name
    several[1] = replace(several[1], legs=several[0].legs, decide_lag=several[0].decide_lag)
    together = replay_many(market, several, volatility=volatility)
    priced = PricedLegs(market)
    for overlay, found in zip(several, together, strict=True):
        alone = replay(market, overlay, volatility=volatility)
        assert_replays_equal(found, alone)
        (batch,) = replay_families(market, [overlay], volatility=volatility, priced=priced)
        assert_same_bits(batch.wealth[0], alone.wealth, "wealth of kept legs")


@FEWER
@given(scenario=language_scenarios(), data=st.data())
def test_a_reference_that_nobody_names_changes_nothing(scenario: Scenario, data: st.DataObject) -> None:
    """Bit for bit: it is not held, and takes no part in choosing the anchor."""
    legs = scenario.overlay.legs
    assume(any(not leg.reference for leg in legs))
    strike = data.draw(strikes([], sold=False), label="strike")
    idle = Leg(position="long", right="put", strike=strike, reference=True, **data.draw(cycles(), label="cycle"))
    expected = scenario.run()
    found = scenario.run(overlay=replace(scenario.overlay, legs=(*legs, idle)))
    assert found.dates.tolist() == expected.dates.tolist()
    for name, values in daily_outputs(expected).items():
        assert_same_bits(daily_outputs(found)[name] + 0.0, values + 0.0, name)
