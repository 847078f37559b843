"""Conditions of gates, and gates as they stand in files. What a schedule becomes is in ``test_gated_schedule.py``.

Rung: twin (conditions against plain loops), identity (changing later data changes nothing; levels that rounding must
not decide), behaviour (messages).
"""

from __future__ import annotations

import math
from fractions import Fraction
from typing import Any

import numpy as np
import numpy.typing as npt
import pandas as pd
import pytest

from backtest import Gate, Market, MarketError, OverlayError, PriceMean, SignalOn, VolPercentile
from backtest.gates import GATE_CONDITIONS, GATE_KEYS, gate_from_table, gate_to_table

BOTH = [False, True]


def market(**columns: Any) -> Market:
    size = len(next(iter(columns.values())))
    frame = pd.DataFrame({"close": np.full(size, 100.0), **columns})
    frame.index = pd.bdate_range("2015-01-01", periods=size, name="date")
    return Market.from_frame(frame)


def walk(seed: int, size: int) -> npt.NDArray[np.float64]:
    return np.asarray(100.0 * np.exp(np.cumsum(np.random.default_rng(seed).normal(0.0, 0.01, size))))


@pytest.mark.parametrize("window", [2, 3, 50, 200])
@pytest.mark.parametrize("above", BOTH)
def test_price_against_its_mean_by_plain_loops(window: int, above: bool) -> None:
    close = walk(window, 400)
    expected = []
    for day in range(400):
        if day + 1 < window:
            expected.append(False)
            continue
        mean = math.fsum(close[day + 1 - window : day + 1]) / window
        expected.append(bool(close[day] > mean if above else close[day] < mean))
    assert PriceMean(window=window, above=above).on(market(close=close)).tolist() == expected
    assert 0.15 < sum(expected) / (401 - window) < 0.85


@pytest.mark.parametrize("percent", [0, 5, 37.5, 50, 90, 100])
@pytest.mark.parametrize("window", [2, 11, 101])
@pytest.mark.parametrize("above", BOTH)
def test_vol_against_its_percentile_by_plain_loops(percent: float, window: int, above: bool) -> None:
    vol = walk(5, 300) / 500.0
    far = walk(6, 300) / 400.0  # the shortest tenor counts, whatever the order of the columns
    expected = []
    for day in range(300):
        ordered = sorted(vol[max(day + 1 - window, 0) : day + 1].tolist())
        place = Fraction(percent) / 100 * (window - 1)
        low = math.floor(place)
        full = len(ordered) == window
        level = ordered[low] + float(place - low) * (ordered[min(low + 1, window - 1)] - ordered[low]) if full else 0.0
        expected.append(full and (vol[day] > level if above else vol[day] < level))
    found = VolPercentile(percent=percent, above=above, window=window).on(market(vol_90=far, vol_30=vol))
    assert found.tolist() == expected


@pytest.mark.parametrize(
    "condition", [PriceMean(window=20, above=True), VolPercentile(percent=80, above=False, window=20)]
)
@pytest.mark.parametrize(("days", "full"), [(19, False), (20, True), (21, True)])
def test_off_until_the_window_is_full(condition: Any, days: int, full: bool) -> None:
    rising = np.linspace(100.0, 120.0, days)
    on = condition.on(market(close=rising, vol=0.3 - rising / 1000.0))
    assert on.tolist() == [False] * 19 + [True] * (days - 19)
    assert on.any() == full


@pytest.mark.parametrize("window", [2, 3, 7, 20, 200])
@pytest.mark.parametrize("above", BOTH)
def test_a_value_on_its_level_is_neither_above_nor_below(window: int, above: bool) -> None:
    """The mean of closes that are all alike is that close, which its rounding must not hide."""
    for price in np.random.default_rng(window).uniform(1.0, 3000.0, 50).round(2):
        level = np.full(window + 3, price)
        assert not PriceMean(window=window, above=above).on(market(close=level)).any()
        assert not VolPercentile(percent=70, above=above, window=window).on(market(vol=level / 3000.0)).any()
    # 101 is the mean of 100, 102 and itself, in cents as in whole units
    for unit in (1.0, 0.01, 0.1):
        close = np.array([100.0, 102.0, 101.0]) * unit
        assert not PriceMean(window=3, above=above).on(market(close=close)).any()


def test_a_vol_that_is_unknown_is_neither() -> None:
    vol = walk(1, 60) / 500.0
    vol[[0, 30]] = np.nan
    on = VolPercentile(percent=0, above=True, window=10).on(market(vol=vol))
    assert not on[:10].any()
    assert not on[30:40].any()
    assert on[10:30].any()
    assert on[40:].any()


@pytest.mark.parametrize(
    "condition",
    [
        SignalOn(),
        PriceMean(window=30, above=True),
        PriceMean(window=7, above=False),
        VolPercentile(percent=60, above=True, window=40),
        VolPercentile(percent=25.5, above=False, window=13),
    ],
    ids=repr,
)
def test_later_data_change_nothing(condition: Any) -> None:
    rng = np.random.default_rng(11)
    close, vol, signal = walk(2, 250), walk(3, 250) / 500.0, rng.choice([0.0, 1.0, np.nan], 250)
    before = condition.on(market(close=close, vol=vol, signal=signal))
    for day in (5, 38, 39, 100, 249):
        after = np.arange(250) > day
        changed = market(
            close=np.where(after, walk(9, 250), close),
            vol=np.where(after, walk(8, 250) / 300.0, vol),
            signal=np.where(after, rng.choice([0.0, 1.0, np.nan], 250), signal),
        )
        found = condition.on(changed)
        assert found[: day + 1].tolist() == before[: day + 1].tolist()
    assert found.any()
    assert not found.all()


def test_a_signal_counts_until_the_next() -> None:
    nan = math.nan
    on = SignalOn().on(market(signal=np.array([nan, nan, 1.0, nan, nan, 0.0, nan, -2.5, nan])))
    assert on.tolist() == [False, False, True, True, True, False, False, True, True]


def test_conditions_on_markets_without_what_they_look_at() -> None:
    bare = market(close=np.full(5, 100.0))
    with pytest.raises(MarketError, match=r"^a gate asks for a signal, and the history has none: give one with --sig"):
        SignalOn().on(bare)
    with pytest.raises(MarketError, match=r"^a gate asks for the vol level, and the history has no implied vols$"):
        VolPercentile(percent=50, above=True).on(bare)


# ---------------------------------------------------------------- gates as values and tables


@pytest.mark.parametrize(
    ("make", "message", "field"),
    [
        (
            lambda: VolPercentile(percent=101, above=True),
            "vol_above_percentile is 101; it takes a number from 0 to 100",
            "vol_above_percentile",
        ),
        (
            lambda: VolPercentile(percent=-1, above=False),
            "vol_below_percentile is -1; it takes a number from 0 to 100",
            "vol_below_percentile",
        ),
        (
            lambda: VolPercentile(percent=50, above=True, window=1),
            "window is 1; it takes a whole number from 2 to 2520 trading days",
            "window",
        ),
        (
            lambda: PriceMean(window=2521, above=True),
            "price_above_mean is 2521; it takes a whole number from 2 to 2520 trading days",
            "price_above_mean",
        ),
        (
            lambda: Gate(condition=SignalOn),
            "condition is <class 'backtest.gates.SignalOn'>; give one such as PriceMean(window=200, above=False)",
            "gate",
        ),
        (
            lambda: Gate(condition=SignalOn(), when_off="sell"),
            "when_off is 'sell'; it takes one of: run out, close",
            "when_off",
        ),
        (
            lambda: Gate(condition=SignalOn(), when_on=True),  # type: ignore[arg-type]
            "when_on is True; it takes one of: next roll, at once",
            "when_on",
        ),
    ],
)
def test_gates_that_are_none(make: Any, message: str, field: str) -> None:
    with pytest.raises(OverlayError) as caught:
        make()
    assert (str(caught.value), caught.value.field) == (message, field)


ALL = "signal, vol_above_percentile, vol_below_percentile, price_above_mean, price_below_mean"


@pytest.mark.parametrize(
    ("table", "message", "field"),
    [
        ({}, f"names no condition; a gate takes one of: {ALL}", None),
        ({"when_off": "close"}, f"names no condition; a gate takes one of: {ALL}", None),
        (
            {"signal": True, "price_above_mean": 50},
            f"names signal and price_above_mean; a gate takes one of: {ALL}",
            None,
        ),
        ({"signal": True, "when": "close"}, "when is no key of a gate", "when"),
        ({"signal": False}, "signal is False; it takes true, the signal itself comes with --signal", "signal"),
        (
            {"price_above_mean": 50, "window": 60},
            "window belongs to vol percentiles; leave it out beside price_above_mean",
            "window",
        ),
        (
            {"vol_below_percentile": 50, "window": 1},
            "window is 1; it takes a whole number from 2 to 2520 trading days",
            "window",
        ),
    ],
    ids=str,
)
def test_tables_that_are_no_gate(table: dict[str, Any], message: str, field: str | None) -> None:
    with pytest.raises(OverlayError) as caught:
        gate_from_table(table)
    assert (str(caught.value), caught.value.field) == (message, field)


@pytest.mark.parametrize("when_off", ["run out", "close"])
@pytest.mark.parametrize("when_on", ["next roll", "at once"])
@pytest.mark.parametrize(
    "condition",
    [
        SignalOn(),
        VolPercentile(percent=80, above=True),
        VolPercentile(percent=20.5, above=False, window=252),
        PriceMean(window=200, above=False),
        PriceMean(window=50, above=True),
    ],
    ids=repr,
)
def test_written_and_read_again_it_is_the_same(condition: Any, when_off: str, when_on: str) -> None:
    gate = Gate(condition=condition, when_off=when_off, when_on=when_on)
    table = gate_to_table(gate)
    assert gate_from_table(table) == gate
    assert set(table) <= set(GATE_KEYS)
    assert len(set(table) & set(GATE_CONDITIONS)) == 1


def test_a_condition_of_the_callers_own_has_no_name() -> None:
    class Always:
        def on(self, market: Market) -> npt.NDArray[np.bool_]:
            return np.ones(len(market), dtype=bool)

    with pytest.raises(OverlayError, match=r"has no name in an overlay file$"):
        gate_to_table(Gate(condition=Always()))
