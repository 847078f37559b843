"""Rung: identity. No look-ahead (C4): nothing dated after day t changes any output up to day t, bit for bit.

Values after a day are changed and dates are kept: the calendar of a file leans on where the file ends, so the
file is never cut. Ending the window on day t, which leaves the file whole, must change nothing either.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pandas as pd
from hypothesis import event, given
from hypothesis import strategies as st

from backtest import Replay

from .strategies import RICH, History, Scenario, assert_same_bits, daily_outputs, leg_outputs, scenarios

KNOWN_AT_OPEN = ["ratio", "spot_open", "forward", "strike", "vol", "premium", "cost", "units", "delta"]
KNOWN_AT_CLOSE = ["spot_close", "settled", "exit_cost", "profit"]
NAMES = ["leg", "right", "position", "opened", "expiry"]


def changed_after(history: History, position: int, seed: int) -> History:
    """Another future: every price, vol, rate and dividend after ``position`` is a different one."""
    rng = np.random.default_rng(seed)
    after = np.arange(len(history.frame)) > position
    size = len(after)
    close = history.frame["close"].to_numpy() * np.exp(after * (0.3 + np.cumsum(rng.normal(0.0, 0.02, size))))
    columns = {"close": np.where(after, close, history.frame["close"])}
    for name in history.frame.columns.drop("close"):
        old = history.frame[name].to_numpy()
        if name == "rate":
            new = rng.uniform(-0.01, 0.2, size)
        elif name == "dividend":
            new = close * np.where(rng.random(size) < 0.2, rng.uniform(0.0, 0.02, size), 0.0)
        else:
            new = old * rng.uniform(0.5, 2.0, size)
        columns[name] = np.where(after, new, old)
    return replace(history, frame=pd.DataFrame(columns, index=history.frame.index))


def flags_at_open(text: str) -> list[str]:
    """Without ``open``, which says that the option is live where the window ends."""
    return [word for word in text.split("; ") if word not in ("", "open")]


def assert_same_up_to(found: Replay, expected: Replay, day: int) -> None:
    """All outputs up to ``day``, counted from inception, and every option opened, or closed, up to it."""
    assert found.dates[0] == expected.dates[0]
    for name, values in daily_outputs(expected).items():
        assert_same_bits(daily_outputs(found)[name][: day + 1], values[: day + 1], name)
    for mine, theirs in zip(leg_outputs(found), leg_outputs(expected), strict=True):
        for name, values in theirs.items():
            assert_same_bits(mine[name][: day + 1], values[: day + 1], name)
    last = pd.Timestamp(expected.dates[day])
    rows, wanted = (rolls[rolls["opened"] <= last] for rolls in (found.rolls_frame(), expected.rolls_frame()))
    pd.testing.assert_frame_equal(rows[NAMES], wanted[NAMES])
    assert [flags_at_open(text) for text in rows["flag"]] == [flags_at_open(text) for text in wanted["flag"]]
    for name in KNOWN_AT_OPEN:
        assert_same_bits(rows[name], wanted[name], name)
    # a window that ends on the day itself carries out that day's rolls, so what is closed on it is closed in both
    closed, wanted_closed = rows[rows["closed"] <= last], wanted[wanted["closed"] <= last]
    assert closed["closed"].tolist() == wanted_closed["closed"].tolist()
    for name in KNOWN_AT_CLOSE:
        assert_same_bits(closed[name], wanted_closed[name], name)


@RICH
@given(scenario=scenarios(), share=st.floats(0.0, 0.99), seed=st.integers(0, 2**32 - 1))
def test_another_future_changes_no_output_up_to_the_day(scenario: Scenario, share: float, seed: int) -> None:
    expected = scenario.run()
    day = int(share * (len(expected) - 1))
    history = changed_after(scenario.history, expected.window.start + day, seed)
    found = scenario.run(history=history)
    assert_same_up_to(found, expected, day)
    # and it is another future: the very next day has another price
    assert found.spot[day + 1] != expected.spot[day + 1]
    assert found.hold[day + 1] != expected.hold[day + 1]


@RICH
@given(scenario=scenarios(), data=st.data())
def test_another_future_after_a_roll_day(scenario: Scenario, data: st.DataObject) -> None:
    """The day a roll is carried out on is where a look ahead would pay: strike, premium, units and cost."""
    expected = scenario.run()
    opened = np.unique(np.concatenate([leg.opened for leg in expected.legs]))
    opened = opened[opened < len(expected) - 1]
    day = int(data.draw(st.sampled_from(opened.tolist()), label="day"))
    event("inception" if day == 0 else "later roll")
    history = changed_after(scenario.history, expected.window.start + day, seed=day)
    assert_same_up_to(scenario.run(history=history), expected, day)


@RICH
@given(scenario=scenarios(), share=st.floats(0.0, 1.0))
def test_where_the_window_ends_changes_nothing_before(scenario: Scenario, share: float) -> None:
    expected = scenario.run()
    day = 1 + int(share * (len(expected) - 2))
    found = scenario.run(window=scenario.window | {"end": expected.dates[day]})
    assert len(found) == day + 1
    assert_same_up_to(found, expected, day)
