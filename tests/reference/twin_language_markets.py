"""The markets and windows of the overlay language's replays, and how a case is written."""

from __future__ import annotations

import functools
from datetime import date
from pathlib import Path
from typing import Any

import pandas as pd

from backtest import INDEX, Costs, Overlay, RealisedVolatility, Volatility

from . import twin_cases
from .twin_cases import Case

# ---------------------------------------------------------------- the markets, with a signal


def invented_signal(frame: pd.DataFrame) -> pd.Series:
    """A value every 23 trading days from the 60th on, off every third time; nothing on the days between."""
    return pd.Series([float(i // 23 % 3) if i >= 60 and i % 23 == 0 else None for i in range(len(frame))], frame.index)


@functools.cache
def market_frame(name: str, folder: Path) -> pd.DataFrame:
    """The frame of a case; ``folder`` is where the demo market may be written."""
    if name == "demo in tens":  # so that strikes of some percent of spot lie half-way between listed ones
        frame = twin_cases.market_frame("demo", folder)
        frame = frame.assign(close=(frame["close"] / 10.0).round() * 10.0)
    else:
        frame = twin_cases.market_frame(name, folder)
    return frame.assign(signal=invented_signal(frame))


# ---------------------------------------------------------------- the replays


FALL = (date(2006, 11, 1), date(2009, 6, 30))  # 1,620 up to 1,720 and down to 910, vol from 14 to 60
RISE = (date(2002, 12, 1), date(2005, 12, 30))  # 820 up to 1,910
CRASH = (date(2016, 2, 1), date(2018, 12, 31))  # 1,900 down to 1,340 within weeks and back
AT_THE_MONEY = Volatility(smile=INDEX)


def case(
    name: str,
    *legs: Any,
    window: tuple[date, date] = FALL,
    market: str = "demo",
    volatility: Volatility = AT_THE_MONEY,
    rate: float | None = None,
    dividend_yield: float | None = None,
    inception: date | None = None,
    **overlay: Any,
) -> Case:
    return Case(
        name=name,
        market=market,
        overlay=Overlay(legs=legs, **overlay),
        volatility=volatility,
        start=window[0],
        end=window[1],
        inception=inception,
        rate=rate,
        dividend_yield=dividend_yield,
    )


SP500: dict[str, Any] = {"market": "sp500 index vol", "window": (date(2014, 9, 1), date(2017, 12, 29)), "rate": 0.008}
SP500_CRISIS: dict[str, Any] = {
    "market": "sp500",
    "window": (date(2007, 3, 1), date(2010, 6, 30)),
    "rate": 0.02,
    "dividend_yield": 0.018,
    "volatility": Volatility(source=RealisedVolatility(window=42), smile=INDEX),
}
DEAR = Costs(half_spread_vol=0.8, half_spread_percent=4.0, half_spread_min=0.05, commission=1.5, stock_bps=3.0)
