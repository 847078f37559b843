"""Rung: identity. No look-ahead (C4) in the whole language: strikes, limits, links, early rules, gates, the day before.

As ``test_no_look_ahead.py`` does for plain legs: values after a day are changed, dates are kept.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pandas as pd
from hypothesis import assume, event, given
from hypothesis import strategies as st

from backtest import Delta, Leg, LegReplay, Overlay, Replay, Volatility
from backtest.calendar import REASON_WORDS

from .language_strategies import financed_scenarios, language_scenarios
from .strategies import FEWER, RICH, History, Scenario, assert_same_bits, daily_outputs, leg_outputs
from .test_no_look_ahead import KNOWN_AT_CLOSE, KNOWN_AT_OPEN, NAMES, changed_after, flags_at_open


def another_future(history: History, position: int, seed: int) -> History:
    """Every value after ``position`` is a different one, the signal drawn anew."""
    changed = changed_after(history, position, seed)
    rng = np.random.default_rng([seed, 2])
    after = np.arange(len(history.frame)) > position
    drawn = np.where(rng.random(len(after)) < 0.3, rng.choice([0.0, 1.0], len(after)), np.nan)
    signal = np.where(after, drawn, history.frame["signal"].to_numpy())
    return replace(changed, frame=changed.frame.assign(signal=signal))


def known_at_open(text: str) -> list[str]:
    """Without why an option was closed, which nobody knew then."""
    return [word for word in flags_at_open(text) if word not in REASON_WORDS.values()]


def assert_same_rolls(found: Replay, expected: Replay, last: pd.Timestamp, names: list[str]) -> None:
    """The same options opened up to ``last``, alike in ``names``."""
    rows, wanted = (rolls[rolls["opened"] <= last] for rolls in (found.rolls_frame(), expected.rolls_frame()))
    pd.testing.assert_frame_equal(rows[NAMES], wanted[NAMES])
    assert [known_at_open(text) for text in rows["flag"]] == [known_at_open(text) for text in wanted["flag"]]
    for name in names:
        assert_same_bits(rows[name], wanted[name], name)


def assert_same_up_to(found: Replay, expected: Replay, day: int) -> None:
    """All outputs up to ``day``, counted from inception, and every option opened, or closed, up to it."""
    assert found.dates[0] == expected.dates[0]
    for name, values in daily_outputs(expected).items():
        assert_same_bits(daily_outputs(found)[name][: day + 1], values[: day + 1], name)
    for mine, theirs in zip(leg_outputs(found), leg_outputs(expected), strict=True):
        for name, values in theirs.items():
            assert_same_bits(mine[name][: day + 1], values[: day + 1], name)
    last = pd.Timestamp(expected.dates[day])
    assert_same_rolls(found, expected, last, KNOWN_AT_OPEN)
    closed, wanted = (rolls[rolls["closed"] <= last] for rolls in (found.rolls_frame(), expected.rolls_frame()))
    assert closed["closed"].tolist() == wanted["closed"].tolist()
    assert closed["flag"].tolist() == wanted["flag"].tolist()
    for name in KNOWN_AT_CLOSE:
        assert_same_bits(closed[name], wanted[name], name)


@RICH
@given(scenario=language_scenarios(), share=st.floats(0.0, 0.99), seed=st.integers(0, 2**32 - 1))
def test_another_future_changes_no_output_up_to_the_day(scenario: Scenario, share: float, seed: int) -> None:
    expected = scenario.run()
    day = int(share * (len(expected) - 1))
    found = scenario.run(history=another_future(scenario.history, expected.window.start + day, seed))
    assert_same_up_to(found, expected, day)
    assert found.spot[day + 1] != expected.spot[day + 1]


def days_of_interest(found: Replay) -> list[int]:
    """Days on which options are opened or closed, early ones and those of gates among them, but the last."""
    days = np.unique(np.concatenate([np.concatenate([leg.opened, leg.closed]) for leg in found.legs]))
    return list(days[days < len(found) - 1].tolist())


@RICH
@given(scenario=language_scenarios(), data=st.data())
def test_another_future_after_a_day_of_trades(scenario: Scenario, data: st.DataObject) -> None:
    expected = scenario.run()
    days = days_of_interest(expected)
    assume(days)
    day = data.draw(st.sampled_from(days), label="day")
    for leg in expected.legs:
        for reason in leg.schedule.reason[leg.closed == day].tolist():
            event(REASON_WORDS.get(reason, "as scheduled"))
    found = scenario.run(history=another_future(scenario.history, expected.window.start + day, seed=day))
    assert_same_up_to(found, expected, day)


@FEWER
@given(scenario=language_scenarios(), share=st.floats(0.0, 1.0))
def test_where_the_window_ends_changes_nothing_before(scenario: Scenario, share: float) -> None:
    expected = scenario.run()
    day = 1 + int(share * (len(expected) - 2))
    found = scenario.run(window=scenario.window | {"end": expected.dates[day]})
    assert len(found) == day + 1
    assert_same_up_to(found, expected, day)


# ---------------------------------------------------------------- decided on the day before


@RICH
@given(scenario=language_scenarios(decide_lag=1), data=st.data())
def test_what_is_decided_the_day_before_does_not_see_today(scenario: Scenario, data: st.DataObject) -> None:
    """With every value of today and later another one, today's options are the same: which, when, at what strike."""
    expected = scenario.run()
    days = days_of_interest(expected)
    assume(days)
    today = data.draw(st.sampled_from(days), label="today")
    position = expected.window.start + today
    found = scenario.run(history=another_future(scenario.history, position - 1, seed=today))
    event("inception" if today == 0 else "later")
    assert found.dates[0] == expected.dates[0]
    if today:
        assert_same_up_to(found, expected, today - 1)
    last = pd.Timestamp(expected.dates[today])
    rows, wanted = (rolls[rolls["opened"] <= last] for rolls in (found.rolls_frame(), expected.rolls_frame()))
    pd.testing.assert_frame_equal(rows[NAMES], wanted[NAMES])
    assert_same_bits(rows["strike"], wanted["strike"], "strike")
    # what is closed today is closed for the same reasons
    for mine, theirs in zip(found.legs, expected.legs, strict=True):
        assert closes(mine, today) == closes(theirs, today)


def closes(leg: LegReplay, today: int) -> list[tuple[int, int]]:
    """When options were closed up to today, and why."""
    done = leg.done & (leg.closed <= today)
    return list(zip(leg.closed[done].tolist(), leg.schedule.reason[done].tolist(), strict=True))


@RICH
@given(scenario=financed_scenarios(decide_lag=1), data=st.data())
def test_what_is_financed_the_day_before_does_not_see_todays_premiums(scenario: Scenario, data: st.DataObject) -> None:
    """What opens beside it on the same day costs, for this purpose, what it looked like costing the day before."""
    expected = scenario.run()
    *paid, seller = expected.legs
    opened = seller.opened[seller.opened < len(expected) - 1]
    assume(opened.size)
    beside = np.intersect1d(opened, np.concatenate([leg.opened for leg in paid]))
    today = data.draw(st.sampled_from((beside if beside.size else opened).tolist()), label="today")
    event("beside one that it pays for" if beside.size else "alone")
    found = scenario.run(history=another_future(scenario.history, expected.window.start + today - 1, seed=today))
    mine, theirs = (run.legs[-1] for run in (found, expected))
    for name in ("strike", "strike_flags"):
        now, then = (getattr(leg, name)[leg.opened <= today] for leg in (mine, theirs))
        assert_same_bits(now, then, name)


def test_the_day_before_matters() -> None:
    """The property above would be empty if strikes saw neither day: without the lag, today's spot does change them."""
    scenario = _one_put()
    expected = scenario.run()
    today = int(expected.legs[0].opened[1])
    history = another_future(scenario.history, expected.window.start + today - 1, seed=1)
    assert scenario.run(history=history).legs[0].strike[1] != expected.legs[0].strike[1]
    before = another_future(scenario.history, expected.window.start + today - 2, seed=1)
    lagged = replace(scenario, overlay=replace(scenario.overlay, decide_lag=1))
    assert lagged.run(history=before).legs[0].strike[1] != lagged.run().legs[0].strike[1]
    assert lagged.run(history=history).legs[0].strike[1] == lagged.run().legs[0].strike[1]


def _one_put() -> Scenario:
    days = pd.bdate_range("2018-01-01", "2019-12-31", name="date")
    close = 100 * np.exp(0.1 * np.sin(np.arange(len(days)) / 50))
    frame = pd.DataFrame({"close": close, "vol": 0.20, "signal": 1.0}, index=days)
    put = Leg(position="long", right="put", roll="month", strike=Delta(0.25))
    return Scenario(
        history=History(frame=frame, drawn={}), overlay=Overlay(legs=(put,)), volatility=Volatility(), window={}
    )
