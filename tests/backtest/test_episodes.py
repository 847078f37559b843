"""Falls and rallies of the hold, and what others did in them.

Rung: hand-worked (short paths; a market of straight lines whose turns are known), independent library (pandas) and
twin (plain loops on random paths, leg profits rebuilt from the roll table and the marks).
"""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt
import pandas as pd
import pytest

from backtest import Costs, Leg, Market, Overlay, PercentOfSpot, Replay, replay
from backtest.analytics.episodes import EPISODE_DEPTH, Fall, episodes, falls, rallies, without_worst

Array = npt.NDArray[np.float64]


def fall(peak: int, trough: int, recovery: int | None, depth: float) -> Fall:
    return Fall(peak=peak, trough=trough, recovery=recovery, depth=depth)


# ---------------------------------------------------------------- falls, by hand

# halves and quarters are exact in binary, so a limit can be touched exactly
BY_HAND = {
    "one, not recovered": ([4, 8, 2, 4], [fall(1, 2, None, -0.75)]),
    "several, the last not recovered": (
        [4, 2, 4, 8, 6, 4, 8, 16, 4],
        [fall(0, 1, 2, -0.5), fall(3, 5, 6, -0.5), fall(7, 8, None, -0.75)],
    ),
    "back at the peak exactly is a recovery": ([8, 4, 8, 2, 9], [fall(0, 1, 2, -0.5), fall(2, 3, 4, -0.75)]),
    "just under the peak is none": ([8, 4, 7.5, 2, 9], [fall(0, 3, 4, -0.75)]),
    "the peak is the last day at its level": ([8, 8, 8, 4, 8, 8], [fall(2, 3, 4, -0.5)]),
    "the trough is the first day at its level": ([8, 2, 4, 2, 8], [fall(0, 1, 4, -0.75)]),
    "recovered beyond the peak": ([8, 4, 32, 16, 32], [fall(0, 1, 2, -0.5), fall(2, 3, 4, -0.5)]),
    "as deep as the limit is not deeper": ([8, 6, 8, 5, 8], [fall(2, 3, 4, -0.375)]),
    "shallow ones are left out": ([8, 7, 8, 16, 13, 16], []),
    "constant": ([3, 3, 3, 3], []),
    "only rising": ([1, 2, 3, 4], []),
    "only falling": ([8, 4, 2, 1], [fall(0, 3, None, -0.875)]),
    "one day": ([1], []),
}


@pytest.mark.parametrize("name", BY_HAND)
def test_falls_by_hand(name: str) -> None:
    path, expected = BY_HAND[name]
    assert falls(np.array(path, dtype=float), deeper_than=0.25) == expected


def test_the_usual_limit_is_a_tenth() -> None:
    assert EPISODE_DEPTH == 0.10
    assert falls(np.array([1.0, 0.9001, 1.0])) == []
    assert [f.trough for f in falls(np.array([1.0, 0.8999, 1.0]))] == [1]
    assert falls(np.array([10.0, 9.0, 10.0])) == []  # exactly a tenth


@pytest.mark.parametrize("seed", range(6))
def test_falls_in_a_plain_loop(seed: int) -> None:
    steps = np.random.default_rng(seed).normal(0.0006, 0.013, 1500)
    # rounded, so that levels are touched again exactly
    path: Array = np.round(np.exp(np.cumsum(steps)), 2).astype(np.float64)
    expected: list[tuple[int, int, int | None]] = []
    top, low, under = 0, 0, False
    for day in range(1, len(path)):
        if path[day] >= path[top]:
            if under:
                expected.append((top, low, day))
            top, under = day, False
        elif not under or path[day] < path[low]:
            low, under = day, True
    if under:
        expected.append((top, low, None))
    deep = [e for e in expected if path[e[1]] / path[e[0]] - 1.0 < -0.1]
    found = falls(path)
    assert [(f.peak, f.trough, f.recovery) for f in found] == deep
    assert len(deep) > 0
    assert [f.depth for f in found] == [path[b] / path[a] - 1.0 for a, b, _ in deep]


# ---------------------------------------------------------------- a market of straight lines

# 100 up to 125, down a fifth to 100, back at 125 on the last day of March and on to 160, down 30% to 112, up to 133
TURNS = {
    "2015-03-20": 100.0, "2015-06-30": 125.0, "2015-09-30": 100.0, "2016-03-31": 125.0, "2016-08-31": 160.0,
    "2016-10-31": 112.0, "2017-05-31": 133.0,
}  # fmt: skip
PUT = Leg(position="long", right="put", roll="quarter", strike=PercentOfSpot(95), ratio=0.75)
CALL = Leg(position="short", right="call", roll="month", strike=PercentOfSpot(104), ratio=0.5)


def lines(turns: dict[str, float], *legs: Leg, account: str = "resize") -> Replay:
    days = pd.bdate_range(min(turns), max(turns), name="date")
    close = pd.Series(turns.values(), index=pd.to_datetime(list(turns))).reindex(days).interpolate()
    rate = 0.02 + 0.01 * np.sin(np.arange(len(days)) / 100)
    frame = pd.DataFrame({"close": close, "vol": 0.18, "rate": rate}, index=days)
    overlay = Overlay(legs=legs, account=account, costs=Costs(half_spread_vol=0.5))
    return replay(Market.from_frame(frame), overlay, inception=min(turns))


@pytest.fixture(scope="module", params=["resize", "cash"])
def found(request: pytest.FixtureRequest) -> Replay:
    return lines(TURNS, PUT, CALL, account=request.param)


def day(text: str) -> np.datetime64:
    return np.datetime64(text, "D")


def leg_profit(found: Replay, label: str, first: str, last: str) -> float:
    """From the roll table and the marks: each option at what it was bought for or worth at first, and ended at."""
    rolls = found.rolls_frame()
    mark, wealth = (found.to_frame()[name].to_dict() for name in (f"{label}_mark", "overlay"))
    begin, end = pd.Timestamp(first), pd.Timestamp(last)
    profit = 0.0
    roll: Any
    for roll in rolls[rolls["leg"] == label].itertuples():
        if roll.opened >= end or roll.closed <= begin:
            continue
        entry = roll.premium if roll.opened > begin else mark[begin]
        leaving = roll.settled if roll.closed <= end else mark[end]
        profit += (1.0 if roll.position == "long" else -1.0) * roll.ratio * roll.units * (leaving - entry)
    return profit / wealth[begin]


def test_two_episodes_worst_first(found: Replay) -> None:
    two = episodes(found, {"overlay": found.wealth, "hold": found.hold})
    assert [(e.peak, e.trough, e.recovery) for e in two] == [
        (day("2016-08-31"), day("2016-10-31"), None),
        (day("2015-06-30"), day("2015-09-30"), day("2016-03-31")),
    ]
    # 112 / 160, 100 / 125; then 133 / 112 to the end, 125 / 100
    assert [e.returns["hold"] for e in two] == pytest.approx([-0.3, -0.2], abs=1e-15)
    assert [e.recovery_returns["hold"] for e in two] == pytest.approx([0.1875, 0.25], abs=1e-15)
    wealth = found.to_frame()["overlay"]
    for e, back in zip(two, ("2017-05-31", "2016-03-31"), strict=True):
        peak, trough = str(e.peak), str(e.trough)
        assert e.returns["overlay"] == pytest.approx(wealth[trough] / wealth[peak] - 1.0, abs=1e-15)
        assert e.recovery_returns["overlay"] == pytest.approx(wealth[back] / wealth[trough] - 1.0, abs=1e-15)
        assert e.put_profit == pytest.approx(leg_profit(found, "put", peak, trough), abs=1e-12)
        assert e.call_profit == pytest.approx(leg_profit(found, "call", peak, trough), abs=1e-12)
        assert e.call_profit_in_recovery == pytest.approx(leg_profit(found, "call", trough, back), abs=1e-12)
        assert e.put_profit > 0.02  # three quarters of a 95 put in a fall of a fifth or more
        assert e.call_profit > 0.005
        assert e.call_profit_in_recovery != 0.0


def test_days_under_water_by_hand(found: Replay) -> None:
    dates = found.dates

    def path(*steps: tuple[str, float]) -> Array:
        """One until a day, then the level given from that day on."""
        level = np.ones(len(dates))
        for since, value in steps:
            level[dates >= day(since)] = value
        return level

    paths = {
        "hold": found.hold,
        "never": path(),
        "above": path(("2015-07-01", 1.1)),
        "late": path(("2015-08-03", 1.2), ("2015-09-01", 0.9), ("2015-12-31", 1.0), ("2016-01-04", 0.8)),
        "at once": path(("2015-07-01", 0.9), ("2015-07-02", 1.0)),
        "the second only": path(("2016-09-01", 0.9), ("2017-03-01", 1.0)),
    }
    second, first = (e.days_under_water for e in episodes(found, paths))
    # 30 June 2015 to 31 March 2016: 31 + 31 + 30 + 31 + 30 + 31 + 31 + 29 + 31 = 275; "late" is back on 31 December,
    # below again when the hold has recovered, and then for ever; what falls after that is not of this fall
    assert first == {"hold": 275, "never": 0, "above": 0, "late": None, "at once": 2, "the second only": 0}
    # 31 August 2016 to 1 March 2017: 30 + 31 + 30 + 31 + 31 + 28 + 1 = 182; a path at 0.8 since January is not under it
    assert second == {"hold": None, "never": 0, "above": 0, "late": 0, "at once": 0, "the second only": 182}


def test_one_kind_of_leg_earns_nothing_for_the_other() -> None:
    puts, calls = (lines(TURNS, leg) for leg in (PUT, CALL))
    assert all(e.call_profit == e.call_profit_in_recovery == 0.0 < e.put_profit for e in episodes(puts, {}))
    assert all(e.put_profit == 0.0 < e.call_profit for e in episodes(calls, {}))
    # two puts, of which each brings what it brings alone
    both = lines(TURNS, PUT, PUT, account="cash")
    one = lines(TURNS, PUT, account="cash")
    for two, single in zip(episodes(both, {}), episodes(one, {}), strict=True):
        before = np.array([r.wealth[r.dates == two.peak][0] for r in (both, one)])
        assert two.put_profit * before[0] == pytest.approx(2.0 * single.put_profit * before[1], rel=1e-12)


def test_three_rallies_strongest_first(found: Replay) -> None:
    three = rallies(found, {"overlay": found.wealth, "hold": found.hold})
    spans = [("2015-09-30", "2016-08-31"), ("2015-03-20", "2015-06-30"), ("2016-10-31", "2017-05-31")]
    assert [(str(r.first), str(r.last)) for r in three] == spans
    # 160 / 100, 125 / 100, 133 / 112
    assert [r.returns["hold"] for r in three] == pytest.approx([0.6, 0.25, 0.1875], abs=1e-15)
    wealth = found.to_frame()["overlay"]
    for rally, (first, last) in zip(three, spans, strict=True):
        assert rally.returns["overlay"] == pytest.approx(wealth[last] / wealth[first] - 1.0, abs=1e-15)
        assert rally.put_profit == pytest.approx(leg_profit(found, "put", first, last), abs=1e-12)
        assert rally.call_profit == pytest.approx(leg_profit(found, "call", first, last), abs=1e-12)
    assert rallies(found, {}, most=1)[0].last == day("2016-08-31")
    assert len(rallies(found, {}, most=2)) == 2


def test_without_a_fall_and_with_nothing_else() -> None:
    rising = lines({"2015-03-20": 100.0, "2016-03-31": 150.0}, PUT)
    assert episodes(rising, {"hold": rising.hold}) == []
    (only,) = rallies(rising, {"hold": rising.hold})
    assert (str(only.first), str(only.last)) == ("2015-03-20", "2016-03-31")
    assert only.returns["hold"] == pytest.approx(0.5, abs=1e-15)
    assert [w.left_out for w in without_worst(rising, {"hold": rising.hold})] == [None]
    falling = lines({"2015-03-20": 100.0, "2016-03-31": 80.0}, PUT)
    assert rallies(falling, {}) == []
    assert len(episodes(falling, {})) == 1
    # no day would be left
    assert [w.left_out for w in without_worst(falling, {"hold": falling.hold})] == [None]


def test_without_the_worst_falls_in_pandas(found: Replay) -> None:
    half = 1.0 + 0.5 * (found.hold - 1.0)
    paths = {"overlay": found.wealth, "hold": found.hold, "half": half}
    rows = without_worst(found, paths)
    spans = [None, ("2016-08-31", "2016-10-31"), ("2015-06-30", "2015-09-30")]
    assert [r.left_out and tuple(map(str, r.left_out)) for r in rows] == spans
    frame = pd.DataFrame(paths, index=pd.DatetimeIndex(found.dates))
    rate = found.market.rate[:-1] * np.diff(found.dates).astype(int) / 365  # the market begins at inception
    cash = pd.Series(np.expm1(rate), index=frame.index[1:])
    for row, span in zip(rows, spans, strict=True):
        returns = frame.pct_change().iloc[1:]
        if span is not None:  # the peak's own day stays, the trough's goes
            returns = returns.drop(returns.index[(returns.index > span[0]) & (returns.index <= span[1])])
        excess = returns.sub(cash.loc[returns.index], axis=0)
        sharpe = excess.mean() / excess.std() * 252**0.5
        assert row.sharpe == pytest.approx(sharpe.to_dict(), rel=1e-10)
        assert row.mean_return == pytest.approx((returns.mean() * 252).to_dict(), rel=1e-10)
    # without a fall of the hold it did better
    assert rows[0].sharpe["hold"] < min(r.sharpe["hold"] for r in rows[1:])
    assert len(without_worst(found, paths, most=1)) == 2
    assert len(without_worst(found, paths, most=0)) == 1
