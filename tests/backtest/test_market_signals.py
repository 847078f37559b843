"""Opening prices and the user's own signal in a market: what may be missing, and what a signal means between its dates.

Rung: hand-worked (four days, every value written out).
"""

from __future__ import annotations

from typing import Any

import numpy as np
import pandas as pd
import pytest

from backtest import Market, MarketError


def frame(**columns: Any) -> pd.DataFrame:
    """Four days from 2020-01-02, a Thursday, to the Tuesday, and what is given."""
    days = pd.bdate_range("2020-01-02", periods=4, name="date")
    return pd.DataFrame({"close": [100.0, 102.0, 99.0, 101.0], **columns}, index=days)


def test_a_history_need_not_have_opens_or_a_signal() -> None:
    market = Market.from_frame(frame())
    assert market.open is None
    assert market.signal is None


def test_opens_are_taken_as_they_are_and_may_be_missing() -> None:
    market = Market.from_frame(frame(open=[99.5, np.nan, 101.0, 100.25]))
    assert market.open is not None
    np.testing.assert_array_equal(market.open, [99.5, np.nan, 101.0, 100.25])


@pytest.mark.parametrize("value", [0.0, -100.0])
def test_an_open_that_is_no_price(value: float) -> None:
    with pytest.raises(MarketError) as caught:
        Market.from_frame(frame(open=[99.5, value, 101.0, 100.25]))
    assert str(caught.value) == f"open on 2020-01-03 is {value:g}; it must be a number above 0"


@pytest.mark.parametrize(
    ("given", "on"),
    [
        ([1.0, 0.0, 1.0, 0.0], [True, False, True, False]),
        # off before the first value, then as the last one was; any number but zero is on
        ([np.nan, 0.5, np.nan, 0.0], [False, True, True, False]),
        ([np.nan, np.nan, -1.0, np.nan], [False, False, True, True]),
        ([np.nan] * 4, [False] * 4),
        ([True, False, False, True], [True, False, False, True]),
    ],
)
def test_a_signal_lasts_until_the_next(given: list[float], on: list[bool]) -> None:
    market = Market.from_frame(frame(signal=given))
    assert market.signal is not None
    assert market.signal.tolist() == on


@pytest.mark.parametrize("column", ["open", "signal"])
def test_opens_and_signals_are_numbers(column: str) -> None:
    with pytest.raises(MarketError, match=f"^column '{column}' is not all numbers"):
        Market.from_frame(frame(**{column: "x"}))
