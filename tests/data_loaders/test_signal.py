"""Rung: hand-worked, and behaviour. A signal on the trading days: the last value counts, none before the first."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from backtest import Gate, Leg, Market, MarketError, Overlay, PercentOfSpot, SignalOn, replay
from data_loaders import DataProblems, load_history
from data_loaders.store import read_history, write_history

PRICES = "date,close\n2020-01-02,100\n2020-01-03,101\n2020-01-06,102\n2020-01-07,103\n2020-02-03,104\n"


def files(folder: Path, signal: str) -> dict[str, Path]:
    (folder / "prices.csv").write_text(PRICES)
    (folder / "signal.csv").write_text(signal)
    return {"prices": folder / "prices.csv", "signal": folder / "signal.csv"}


def test_the_last_value_counts_however_old(tmp_path: Path) -> None:
    # a Saturday's value serves from Monday on; it stays for weeks, unlike a vol
    history = load_history(**files(tmp_path, "date,on\n2020-01-03,0\n2020-01-04,1\n2020-02-03,0\n"))
    assert np.array_equal(history.frame["signal"], [np.nan, 0.0, 1.0, 1.0, 0.0], equal_nan=True)
    market = Market.from_frame(history.frame)
    assert market.signal is not None
    assert market.signal.tolist() == [False, False, True, True, False]


def test_an_empty_cell_keeps_the_value_before(tmp_path: Path) -> None:
    history = load_history(**files(tmp_path, "day,active\n2020-01-02,1\n2020-01-03,\n2020-01-07,0\n"))
    assert history.frame["signal"].tolist() == [1.0, 1.0, 1.0, 0.0, 0.0]


def test_it_is_stored_with_its_history(tmp_path: Path) -> None:
    history = load_history(**files(tmp_path, "date,on\n2020-01-03,1\n"))
    write_history(history, tmp_path / "store", "mine")
    again = read_history(tmp_path / "store", "mine")
    assert np.array_equal(again.frame["signal"], history.frame["signal"], equal_nan=True)
    assert [source.kind for source in again.sources] == ["prices", "signal"]


@pytest.mark.parametrize(
    ("signal", "code", "line"),
    [
        ("date,on\n2020-01-03,yes\n", "not-a-number", 2),
        ("date,on\n2020-01-03,1\n2020-01-03,0\n", "duplicate-date", 3),
        ("date,on\n2020-01-03,\n", "empty-column", None),
    ],
)
def test_what_is_wrong_in_it(tmp_path: Path, signal: str, code: str, line: int | None) -> None:
    with pytest.raises(DataProblems) as found:
        load_history(**files(tmp_path, signal))
    (problem,) = found.value.problems
    assert (problem.kind, problem.code, problem.line) == ("signal", code, line)


def test_a_gate_without_a_signal_says_what_to_give(tmp_path: Path) -> None:
    history = load_history(prices=files(tmp_path, "")["prices"])
    put = Leg(
        position="long", right="put", roll="days", every=2, strike=PercentOfSpot(95), gate=Gate(condition=SignalOn())
    )
    frame = history.frame.assign(vol=0.2)
    with pytest.raises(MarketError) as said:
        replay(Market.from_frame(frame), Overlay(legs=(put,)))
    assert str(said.value) == "a gate asks for a signal, and the history has none: give one with --signal FILE"
