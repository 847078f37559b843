"""What a schedule becomes under a gate: every pair of what happens when it goes off and when it is on again.

Rung: hand-worked. The conditions of gates are in ``test_gates.py``.
"""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest

from backtest.calendar import BY_GATE, Schedule, gated_schedule, leg_schedule
from backtest.cycles import DaysCycle

# 14 weekdays from Monday 1 June 2020; an option every five of them, the last live on row 13
DAYS = pd.bdate_range("2020-06-01", periods=14, name="date")
PLAIN = leg_schedule(DAYS.to_numpy().astype("datetime64[D]"), cycle=DaysCycle(every=5), term_months=5, start=0, end=13)


def gated(on: str, *, close: bool, at_once: bool, schedule: Schedule = PLAIN) -> list[str]:
    """A line an option: opened, closed, expiry, and how it ends; ``on`` has a letter a day, ``x`` for on."""
    flags = np.array([letter == "x" for letter in on.replace(" ", "")])
    assert len(flags) == 14
    found = gated_schedule(schedule, flags, close_when_off=close, open_at_once=at_once)
    first = int(schedule.expiry_day[0]) - 7  # the first option expires a week after Monday 1 June
    lines = []
    for n in range(len(found.opened)):
        end = "live" if found.live[n] else "settles" if found.settles[n] else "sold"
        by_gate = " by gate" if found.reason[n] == BY_GATE else ""
        stub = " stub" if found.stub[n] else ""
        days = int(found.expiry_day[n]) - first  # calendar days: rows 5, 10 and 15 are 7, 14 and 21
        lines.append(f"{found.opened[n]}-{found.closed[n]} to {days // 7 * 5} {end}{by_gate}{stub}")
    return lines


ALWAYS = ["0-5 to 5 settles", "5-10 to 10 settles", "10-13 to 15 live"]
BOTH = [False, True]


@pytest.mark.parametrize("close", BOTH, ids=["run out", "close"])
@pytest.mark.parametrize("at_once", BOTH, ids=["next roll", "at once"])
def test_a_gate_always_on_changes_nothing(close: bool, at_once: bool) -> None:
    found = gated_schedule(PLAIN, np.ones(14, dtype=bool), close_when_off=close, open_at_once=at_once)
    for name in ("opened", "closed", "expiry_day", "settles", "live", "stub", "reason"):
        assert getattr(found, name).tolist() == getattr(PLAIN, name).tolist(), name
        assert getattr(found, name).dtype == getattr(PLAIN, name).dtype, name


@pytest.mark.parametrize("close", BOTH, ids=["run out", "close"])
@pytest.mark.parametrize("at_once", BOTH, ids=["next roll", "at once"])
def test_a_gate_never_on_holds_nothing(close: bool, at_once: bool) -> None:
    assert gated("." * 14, close=close, at_once=at_once) == []
    found = gated_schedule(PLAIN, np.zeros(14, dtype=bool), close_when_off=close, open_at_once=at_once)
    assert found.follows.shape == (0,)
    assert found.option_of_day(0, 13).tolist() == [-1] * 14


# name of the case, days on, and what is held: run out/next roll, run out/at once, close/next roll, close/at once
CASES: list[tuple[str, str, list[str], list[str], list[str], list[str]]] = [
    (
        "off within the first option, on within the second",
        "xxx.. ..xxx xxxx",
        ["0-5 to 5 settles", "10-13 to 15 live"],
        ["0-5 to 5 settles", "7-10 to 10 settles stub", "10-13 to 15 live"],
        ["0-3 to 5 sold by gate", "10-13 to 15 live"],
        ["0-3 to 5 sold by gate", "7-10 to 10 settles stub", "10-13 to 15 live"],
    ),
    (
        "off and on again within one option",
        "xxxxx x..xx xxxx",
        ALWAYS,
        ALWAYS,
        ["0-5 to 5 settles", "5-6 to 10 sold by gate", "10-13 to 15 live"],
        ["0-5 to 5 settles", "5-6 to 10 sold by gate", "8-10 to 10 settles stub", "10-13 to 15 live"],
    ),
    (
        "off on the first day",
        "..xxx xxxxx xxxx",
        ["5-10 to 10 settles", "10-13 to 15 live"],
        ["2-5 to 5 settles stub", "5-10 to 10 settles", "10-13 to 15 live"],
        ["5-10 to 10 settles", "10-13 to 15 live"],
        ["2-5 to 5 settles stub", "5-10 to 10 settles", "10-13 to 15 live"],
    ),
    (
        "off on the last day",
        "xxxxx xxxxx xxx.",
        ALWAYS,
        ALWAYS,
        [*ALWAYS[:2], "10-13 to 15 sold by gate"],
        [*ALWAYS[:2], "10-13 to 15 sold by gate"],
    ),
    (
        "on on the last day alone",
        "..... ..... ...x",
        [],
        ["13-13 to 15 live stub"],
        [],
        ["13-13 to 15 live stub"],
    ),
    (
        "off on a roll date alone",
        "xxxxx .xxxx xxxx",
        [ALWAYS[0], ALWAYS[2]],
        [ALWAYS[0], "6-10 to 10 settles stub", ALWAYS[2]],
        [ALWAYS[0], ALWAYS[2]],
        [ALWAYS[0], "6-10 to 10 settles stub", ALWAYS[2]],
    ),
    (
        "on on roll dates alone",
        "x.... x.... x...",
        ALWAYS,
        ALWAYS,
        ["0-1 to 5 sold by gate", "5-6 to 10 sold by gate", "10-11 to 15 sold by gate"],
        ["0-1 to 5 sold by gate", "5-6 to 10 sold by gate", "10-11 to 15 sold by gate"],
    ),
    (
        "every other day",
        "x.x.x .x.x. x.x.",
        ["0-5 to 5 settles", "10-13 to 15 live"],
        ["0-5 to 5 settles", "6-10 to 10 settles stub", "10-13 to 15 live"],
        ["0-1 to 5 sold by gate", "10-11 to 15 sold by gate"],
        [
            "0-1 to 5 sold by gate", "2-3 to 5 sold by gate stub", "4-5 to 5 settles stub",
            "6-7 to 10 sold by gate stub", "8-9 to 10 sold by gate stub",
            "10-11 to 15 sold by gate", "12-13 to 15 sold by gate stub",
        ],
    ),
    (
        "on on the day before a roll",
        "....x ..... ....",
        [],
        ["4-5 to 5 settles stub"],
        [],
        ["4-5 to 5 settles stub"],
    ),
]  # fmt: skip


@pytest.mark.parametrize(("name", "on", *[f"pair{n}" for n in range(4)]), CASES, ids=[case[0] for case in CASES])
def test_four_ways(name: str, on: str, pair0: list[str], pair1: list[str], pair2: list[str], pair3: list[str]) -> None:
    assert gated(on, close=False, at_once=False) == pair0
    assert gated(on, close=False, at_once=True) == pair1
    assert gated(on, close=True, at_once=False) == pair2
    assert gated(on, close=True, at_once=True) == pair3


def test_a_longer_term_and_a_stub_at_the_start() -> None:
    """Options of ten days, replaced every five; the replay begins on row 2, with the option of row 0."""
    dates = DAYS.to_numpy().astype("datetime64[D]")
    schedule = leg_schedule(dates, cycle=DaysCycle(every=5), term_months=10, start=2, end=13)
    found = gated_schedule(schedule, np.arange(14) != 4, close_when_off=True, open_at_once=True)
    assert found.opened.tolist() == [2, 5, 10]
    assert found.closed.tolist() == [4, 10, 13]
    # rows 10, 15 and 20: Mondays 15, 22 and 29 June
    expiries = found.expiry_day.astype("datetime64[D]").astype(str).tolist()
    assert expiries == ["2020-06-15", "2020-06-22", "2020-06-29"]
    assert found.stub.tolist() == [True, False, False]
    assert found.settles.tolist() == [False, False, False]
    assert found.follows.tolist() == [False, False, True]
