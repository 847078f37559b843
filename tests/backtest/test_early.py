"""Early rules: options that are replaced before their roll date.

Rung: hand-worked (small price paths, Black's formula written out with ``statistics.NormalDist``), identity (a rule that
never holds), behaviour (messages).
"""

from __future__ import annotations

import math
from statistics import NormalDist
from typing import Any

import numpy as np
import pandas as pd
import pytest

from backtest import (
    FLAT,
    Costs,
    Early,
    Gate,
    Leg,
    Market,
    Overlay,
    OverlayError,
    PercentOfSpot,
    Replay,
    SignalOn,
    Volatility,
    replay,
)

N = NormalDist().cdf

# Weekdays from Monday 1 June 2020: rows 0 to 4, then the weekend. An option opened on row 0 expires on row 10, Monday
# the 15th, 14 calendar days later; rows 1 to 9 have 13, 12, 11, 10, 7, 6, 5, 4 and 3 days left.
DAYS_LEFT = [14, 13, 12, 11, 10, 7, 6, 5, 4, 3, 0]


def worth(right: str, spot: float, strike: float, days: int, vol: float = 0.2) -> tuple[float, float]:
    """Mid and absolute delta without rate or yield (C5)."""
    stdev = vol * math.sqrt(days / 365)
    d1 = math.log(spot / strike) / stdev + stdev / 2
    if right == "call":
        return spot * N(d1) - strike * N(d1 - stdev), N(d1)
    return strike * N(stdev - d1) - spot * N(-d1), N(-d1)


def run(
    close: list[float],
    early: Early | None,
    *,
    right: Any = "put",
    position: Any = "long",
    strike: float = 100,
    vol: float | list[float] = 0.2,
    signal: list[float] | None = None,
    costs: Costs | None = None,
    decide_lag: int = 0,
    end: str | None = None,
    **leg: Any,
) -> Replay:
    """One leg that rolls every ten trading days, opened on row 0 unless there is a lag or a phase."""
    columns = {"close": close, "vol": vol} | ({} if signal is None else {"signal": signal})
    days = pd.bdate_range("2020-06-01", periods=len(close), name="date")
    market = Market.from_frame(pd.DataFrame(columns, index=days))
    one = Leg(
        position=position, right=right, strike=PercentOfSpot(strike), early=early,
        **{"roll": "days", "every": 10, **leg},
    )  # fmt: skip
    overlay = Overlay(legs=(one,), costs=costs or Costs(half_spread_vol=0.0), decide_lag=decide_lag)
    return replay(market, overlay, volatility=Volatility(smile=FLAT), end=end)


def lines(found: Replay) -> list[str]:
    """Rows on which each option is opened and closed, its strike, and what is said of it."""
    (leg,) = found.legs
    first = found.window.start
    words = leg.flags()
    return [
        f"{leg.opened[n] + first}-{leg.closed[n] + first} at {leg.strike[n]:.6g}"
        + (f": {words[n]}" if words[n] else "")
        for n in range(len(leg.opened))
    ]


def path(*changes: tuple[int, float], size: int = 11, start: float = 100.0) -> list[float]:
    """A price that keeps its level from each given row on."""
    close = np.full(size, start)
    for row, level in changes:
        close[row:] = level
    return close.tolist()


# ---------------------------------------------------------------- delta


def test_delta_below_replaces_on_the_first_day_that_fulfils_it() -> None:
    close = path((2, 102.0), (4, 104.0))
    # 102 on row 2, 12 days left: 0.29; 104 on row 4, 10 days left: 0.11
    assert worth("put", 102, 100, 12)[1] == pytest.approx(0.2863, abs=1e-4)
    assert worth("put", 104, 100, 10)[1] == pytest.approx(0.1148, abs=1e-4)
    found = run(close, Early(delta_below=0.2, days_left=0))
    assert lines(found) == ["0-4 at 100: replaced, delta low", "4-10 at 104", "10-10 at 104: open"]
    rolls = found.rolls_frame()
    # the same expiry, Monday 15 June; sold at its mid, opened at the same close
    assert rolls["expiry"].dt.strftime("%m-%d").tolist()[:2] == ["06-15", "06-15"]
    assert rolls["settled"][0] == pytest.approx(worth("put", 104, 100, 10)[0], rel=1e-12)
    assert rolls["premium"][1] == pytest.approx(worth("put", 104, 104, 10)[0], rel=1e-12)
    # already on row 2 with a higher limit, then again on row 4: 104 is above 102, where a delta of 0.27 is left
    assert worth("put", 104, 102, 10)[1] == pytest.approx(0.2732, abs=1e-4)
    found = run(close, Early(delta_below=0.29, days_left=0))
    assert lines(found)[:3] == [
        "0-2 at 100: replaced, delta low",
        "2-4 at 102: replaced, delta low",
        "4-10 at 104",
    ]


def test_delta_below_needs_spot_above_its_open() -> None:
    # a call that spot leaves below: its delta falls to 0.01, and yet it is not replaced
    assert worth("call", 92, 100, 11)[1] < 0.02
    found = run(path((3, 92.0)), Early(delta_below=0.2, days_left=0), right="call")
    assert lines(found)[0] == "0-10 at 100"
    # a put struck 5% below has a delta of 0.09 from the first day on, at the very spot of its open
    assert worth("put", 100, 95, 14)[1] < 0.1
    assert lines(run(path(), Early(delta_below=0.2, days_left=0), strike=95))[0] == "0-10 at 95"
    # a hair above it is enough
    found = run(path((5, 100.01)), Early(delta_below=0.2, days_left=0), strike=95)
    assert lines(found)[0] == "0-5 at 95: replaced, delta low"


def test_above_its_own_open_not_the_first() -> None:
    # replaced on row 2 at 104; 103 on row 4 is above the first open and below its own
    found = run(path((2, 104.0), (4, 103.0)), Early(delta_below=0.2, days_left=0), strike=97)
    assert lines(found)[:2] == ["0-2 at 97: replaced, delta low", "2-10 at 100.88"]


# ---------------------------------------------------------------- value


@pytest.mark.parametrize("position", ["long", "short"])
def test_value_above_a_multiple_of_the_premium(position: str) -> None:
    close = path((3, 97.0), (6, 94.0))
    premium, third = worth("put", 100, 100, 14)[0], worth("put", 97, 100, 11)[0]
    assert third / premium == pytest.approx(2.14, abs=0.01)
    multiple = third / premium
    # more than the multiple, not as much
    just_under = Early(value_above=multiple * (1 - 1e-9), days_left=0)
    just_over = Early(value_above=multiple * (1 + 1e-9), days_left=0)
    assert lines(run(close, just_under, position=position))[0] == "0-3 at 100: replaced, profit taken"
    assert lines(run(close, just_over, position=position))[0] == "0-6 at 100: replaced, profit taken"


def test_value_below_a_share_of_the_premium() -> None:
    # a sold call of 3% out: worth 0.52 at its open; time takes it
    premium = worth("call", 100, 103, 14)[0]
    shares = [worth("call", 100, 103, days)[0] / premium for days in DAYS_LEFT[:10]]
    first = next(row for row, share in enumerate(shares) if share < 0.25)
    assert first == 7
    found = run(path(), Early(value_below=0.25, days_left=0), right="call", position="short", strike=103)
    assert lines(found)[0] == "0-7 at 103: replaced, value low"


def test_the_new_option_is_measured_by_its_own_premium() -> None:
    """Several replacements in one roll, each when spot has risen by enough since the one before."""
    close = [100.0, 101.0, 102.0, 103.0, 104.0, 105.0, 106.0, 107.0, 108.0, 109.0, 110.0]
    expected, opened, spot, premium = [], 0, 100.0, worth("call", 100, 100, 14)[0]
    for row in range(1, 10):
        if worth("call", close[row], spot, DAYS_LEFT[row])[0] > 1.8 * premium:
            expected.append(f"{opened}-{row} at {spot:g}: replaced, profit taken")
            opened, spot, premium = row, close[row], worth("call", close[row], close[row], DAYS_LEFT[row])[0]
    expected.append(f"{opened}-10 at {spot:g}")
    assert len(expected) == 4
    found = run(close, Early(value_above=1.8, days_left=0), right="call")
    assert lines(found) == [*expected, "10-10 at 110: open"]
    assert set(found.rolls_frame()["expiry"][:4]) == {pd.Timestamp("2020-06-15")}


def test_each_roll_by_itself() -> None:
    """Options of two rolls, at prices that differ by four times, each measured by its own spot and premium."""
    close = path((3, 110.0), (10, 400.0), (14, 396.0), (17, 440.0), size=21)
    found = run(close, Early(value_above=2.0, days_left=0), right="call")
    # doubled: 110 for a strike of 100, then 440 for one of 400; 396 is far above 110, and no reason
    assert lines(found)[:4] == [
        "0-3 at 100: replaced, profit taken",
        "3-10 at 110",
        "10-17 at 400: replaced, profit taken",
        "17-20 at 440",
    ]


# ---------------------------------------------------------------- which reason, which days


def test_the_first_reason_is_named() -> None:
    """Delta before profit before low value, where several hold on the same day."""
    # spot and vol both up: the delta is 0.42, the value up by half
    vol = [0.2] * 3 + [0.4] * 8
    value, delta = worth("put", 101, 100, 11, 0.4)
    assert delta == pytest.approx(0.42, abs=0.01)
    ratio = value / worth("put", 100, 100, 14)[0]
    assert ratio > 1.2
    close = path((3, 101.0))
    both = Early(delta_below=0.45, value_above=1.2, days_left=0)
    assert lines(run(close, both, vol=vol))[0] == "0-3 at 100: replaced, delta low"
    assert lines(run(close, Early(value_above=1.2, days_left=0), vol=vol))[0] == "0-3 at 100: replaced, profit taken"
    # out of reach: delta and value are both low
    fallen = Early(delta_below=0.2, value_below=0.5, days_left=0)
    assert lines(run(path((3, 106.0)), fallen))[0] == "0-3 at 100: replaced, delta low"
    assert lines(run(path((3, 106.0)), Early(value_below=0.5, days_left=0)))[0] == "0-3 at 100: replaced, value low"


@pytest.mark.parametrize(("days_left", "replaced"), [(4, True), (5, False), (0, True), (10, False)])
def test_days_left(days_left: int, replaced: bool) -> None:
    # row 8, 4 days before expiry
    found = run(path((8, 110.0)), Early(delta_below=0.2, days_left=days_left))
    assert lines(found)[0] == ("0-8 at 100: replaced, delta low" if replaced else "0-10 at 100")


@pytest.mark.parametrize(("row", "replaced"), [(1, True), (9, True), (10, False)])
def test_strictly_between_the_open_and_the_scheduled_close(row: int, replaced: bool) -> None:
    found = run(path((row, 120.0)), Early(delta_below=0.2, days_left=0))
    assert lines(found)[0] == (f"0-{row} at 100: replaced, delta low" if replaced else "0-10 at 100")


def test_the_scheduled_close_may_come_before_expiry() -> None:
    # rolls two days before: the first option, opened on row 8 as that of row 10, is to be closed on row 18
    close = path((12, 110.0), (17, 125.0), (18, 140.0), size=21)
    found = run(close, Early(delta_below=0.2, days_left=0), close_before=2)
    assert lines(found) == [
        "8-12 at 100: replaced, delta low",
        "12-17 at 110: replaced, delta low",
        "17-18 at 125",
        "18-20 at 140: open",
    ]
    assert found.rolls_frame()["expiry"].dt.strftime("%m-%d").tolist() == ["06-29", "06-29", "06-29", "07-13"]


# ---------------------------------------------------------------- costs, the end, the day before


def test_closed_and_opened_at_cost() -> None:
    found = run(
        path((4, 110.0)), Early(delta_below=0.2, days_left=0), costs=Costs(half_spread_vol=0.0, half_spread_min=0.05)
    )
    rolls = found.rolls_frame()
    assert rolls["cost"].tolist() == [0.05, 0.05, 0.05]
    assert rolls["exit_cost"][:2].tolist() == [0.05, 0.0]  # the second is held to expiry
    profit = worth("put", 110, 100, 10)[0] - worth("put", 100, 100, 14)[0] - 0.1
    assert rolls["profit"][0] == pytest.approx(profit, rel=1e-12)


@pytest.mark.parametrize(
    ("end", "last"), [("2020-06-05", "0-4 at 100: replaced, delta low"), ("2020-06-04", "0-3 at 100: open")]
)
def test_a_live_option_is_replaced_on_the_last_day_too(end: str, last: str) -> None:
    # Friday 5 June is row 4
    found = lines(run(path((4, 110.0)), Early(delta_below=0.2, days_left=0), end=end))
    assert last in found
    assert found[1:] == (["4-4 at 110: open"] if end == "2020-06-05" else [])


def test_decided_the_day_before() -> None:
    """A condition of row 4 is traded on row 5, at the strike of row 4 and the prices of row 5."""
    close = path((5, 110.0), (6, 112.0), (8, 126.0), (9, 130.0), size=13)
    found = run(close, Early(delta_below=0.2, days_left=0), decide_lag=1, phase=2)
    # opened on row 2 by the spot of row 1; 110 on row 5; traded on 6 at a strike of 110; 126 on row 8, traded on row 9
    assert lines(found) == [
        "2-6 at 100: replaced, delta low",
        "6-9 at 110: replaced, delta low",
        "9-12 at 126",
        "12-12 at 130: open",
    ]
    rolls = found.rolls_frame()
    assert rolls["spot_open"].tolist() == [100.0, 112.0, 130.0, 130.0]
    # expiry on row 12, Wednesday 17 June: 8 days after Tuesday the 9th, row 6
    assert rolls["settled"][0] == pytest.approx(worth("put", 112, 100, 8)[0], rel=1e-12, abs=1e-14)
    assert rolls["premium"][1] == pytest.approx(worth("put", 112, 110, 8)[0], rel=1e-12)


def test_decided_the_day_before_needs_spot_above_that_of_the_trade() -> None:
    # decided at 100 on row 1, traded at 104 on row 2: 103 from row 3 on is above the first and not above the second
    found = run(path((2, 104.0), (3, 103.0), size=13), Early(delta_below=0.3, days_left=0), decide_lag=1, phase=2)
    assert lines(found)[0] == "2-12 at 100"


@pytest.mark.parametrize(("row", "first"), [(9, "1-10 at 100: replaced, delta low"), (10, "1-11 at 100")])
def test_decided_the_day_before_the_trade_still_comes_before_the_roll(row: int, first: str) -> None:
    # the option of row 1 is closed on row 11: what is decided on row 10 would be traded on it
    found = run(path((row, 120.0), size=13), Early(delta_below=0.2, days_left=0), decide_lag=1, phase=1)
    assert lines(found)[0] == first


@pytest.mark.parametrize(("row", "count"), [(11, 2), (12, 1)])
def test_decided_the_day_before_at_the_end(row: int, count: int) -> None:
    # the replay ends on row 12 with the option of row 11, or of row 5, live
    found = run(path((row, 140.0), size=13), Early(delta_below=0.2, days_left=0), decide_lag=1, phase=5, every=20)
    assert lines(found) == (
        ["5-12 at 100: replaced, delta low", "12-12 at 140: open"] if count == 2 else ["5-12 at 100: open"]
    )


# ---------------------------------------------------------------- beside other things


def test_what_a_gate_would_not_open_is_not_replaced() -> None:
    close, early = path((3, 110.0), (6, 125.0)), Early(delta_below=0.2, days_left=0)
    off_on_rows_2_to_5 = [1.0, 1.0, 0.0, 0.0, 0.0, 0.0, 1.0, 1.0, 1.0, 1.0, 1.0]
    found = run(close, early, signal=off_on_rows_2_to_5, gate=Gate(condition=SignalOn()))
    assert lines(found)[:2] == ["0-6 at 100: replaced, delta low", "6-10 at 125"]
    found = run(
        close, early, signal=off_on_rows_2_to_5, gate=Gate(condition=SignalOn(), when_off="close", when_on="at once")
    )
    assert lines(found)[:2] == ["0-2 at 100: closed by its gate", "6-10 at 125: stub"]


def test_a_rule_that_never_holds_changes_nothing() -> None:
    rng = np.random.default_rng(4)
    close = (100.0 * np.exp(np.cumsum(rng.normal(0.0, 0.02, 300)))).tolist()
    for decide_lag in (0, 1):
        with_rule = run(close, Early(value_above=1000.0), decide_lag=decide_lag)
        without = run(close, None, decide_lag=decide_lag)
        assert with_rule.wealth.tolist() == without.wealth.tolist()
        pd.testing.assert_frame_equal(with_rule.rolls_frame(), without.rolls_frame(), check_exact=True)


@pytest.mark.parametrize(
    ("fields", "message", "field"),
    [
        ({}, "early names no rule; it takes delta_below, value_above or value_below", "early"),
        ({"days_left": 5}, "early names no rule; it takes delta_below, value_above or value_below", "early"),
        ({"delta_below": 0}, "delta_below is 0; it takes a number from 0.001 to 0.999", "delta_below"),
        ({"delta_below": 1}, "delta_below is 1; it takes a number from 0.001 to 0.999", "delta_below"),
        (
            {"value_above": 1},
            "value_above is 1; it takes a number from 1.01 to 1000 (times the premium)",
            "value_above",
        ),
        (
            {"value_below": 1},
            "value_below is 1; it takes a number from 0.001 to 0.99 (a share of the premium)",
            "value_below",
        ),
        (
            {"value_below": 0.5, "days_left": -1},
            "days_left is -1; it takes a whole number from 0 to 3650 calendar days to expiry",
            "days_left",
        ),
    ],
    ids=str,
)
def test_rules_that_are_none(fields: dict[str, Any], message: str, field: str) -> None:
    with pytest.raises(OverlayError) as caught:
        Early(**fields)
    assert (str(caught.value), caught.value.field) == (message, field)
