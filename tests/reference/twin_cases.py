"""The replays that engine and twin are compared on, and the two markets they run on."""

from __future__ import annotations

import functools
import warnings
from dataclasses import dataclass
from datetime import date
from pathlib import Path
from typing import Any, Literal

import pandas as pd

from backtest import (
    FLAT,
    INDEX,
    MILD,
    NO_COSTS,
    STEEP,
    Costs,
    Leg,
    Overlay,
    PercentOfForward,
    PercentOfSpot,
    RealisedVolatility,
    SSVISmile,
    Volatility,
)
from data_loaders.demo_market import write_demo_market

# ---------------------------------------------------------------- the two markets


@functools.cache
def demo_frame(folder: Path) -> pd.DataFrame:
    files = write_demo_market(folder)
    prices = pd.read_csv(files.prices, parse_dates=["date"], index_col="date")
    vol = pd.read_csv(files.vol, parse_dates=["date"], index_col="date")["vol"] / 100.0
    rate = pd.read_csv(files.rates, parse_dates=["date"], index_col="date")["rate"].dropna() / 100.0
    dividend = pd.read_csv(files.dividends, parse_dates=["date"], index_col="date")["dividend"]
    frame = prices[["open", "close"]].copy()
    frame["vol"] = vol.reindex(frame.index, method="ffill")
    frame["rate"] = rate.reindex(frame.index, method="ffill")
    frame["dividend"] = dividend.reindex(frame.index).fillna(0.0)
    assert frame["dividend"].gt(0).sum() == len(dividend)
    return frame


def three_tenors(frame: pd.DataFrame) -> pd.DataFrame:
    """The demo's one vol drawn towards 19% with the tenor."""
    vol = frame["vol"]
    longer = {"vol_93": 0.65 * vol + 0.35 * 0.19, "vol_180": 0.45 * vol + 0.55 * 0.19}
    return frame.rename(columns={"vol": "vol_30"}).assign(**longer)


@functools.cache
def sp500_frame() -> pd.DataFrame:
    """Opens and closes of 1999 to 2018, with the 30-day index where the package has it (2014 on)."""
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")  # the package's own reading of its files is not under test
        from arch.data import sp500, vix

        prices, index_vol = sp500.load(), vix.load()["vix"].dropna() / 100.0
    frame = pd.DataFrame({"open": prices["Open"], "close": prices["Close"]})
    frame["vol"] = index_vol.reindex(frame.index, method="ffill")
    return frame


def market_frame(name: str, folder: Path) -> pd.DataFrame:
    """The frame of a case; ``folder`` is where the demo market may be written."""
    if name.startswith("demo"):
        frame = demo_frame(folder)
        if name == "demo tenors":
            return three_tenors(frame)
        if name == "demo late vol and rate":
            frame = frame.copy()
            frame.loc[:"2001-03-16", "vol"] = float("nan")  # to the first roll of that March, included
            frame.loc[:"2001-07-02", "rate"] = float("nan")
        return frame
    frame = sp500_frame().dropna() if name.startswith("sp500 index vol") else sp500_frame()[["open", "close"]]
    if " from " in name:
        return frame.loc[name.split(" from ")[1] :]
    if " to " in name:
        return frame.loc[: name.split(" to ")[1]]
    return frame


# ---------------------------------------------------------------- the replays


@dataclass(frozen=True, kw_only=True)
class Case:
    """One replay to compare."""

    name: str
    market: str
    overlay: Overlay
    volatility: Volatility
    start: date | None = None
    end: date | None = None
    inception: date | None = None
    rate: float | None = None
    dividend_yield: float | None = None


def put(position: Literal["long", "short"] = "long", **kw: Any) -> Leg:
    kw.setdefault("strike", PercentOfSpot(95))
    return Leg(position=position, right="put", **kw)


def call(position: Literal["long", "short"] = "short", **kw: Any) -> Leg:
    kw.setdefault("strike", PercentOfSpot(110))
    kw.setdefault("roll", "month")
    return Leg(position=position, right="call", **kw)


SWAP = Volatility(quote="variance swap")
BAND = (put(), call())
CASES = [
    Case(
        name="band, resize, variance swap",
        market="demo",
        overlay=Overlay(legs=BAND),
        volatility=SWAP,
        start=date(2006, 1, 10),
        end=date(2013, 11, 5),
    ),
    Case(
        name="band, cash account, variance swap",
        market="demo",
        overlay=Overlay(legs=BAND, account="cash"),
        volatility=SWAP,
        start=date(2006, 1, 10),
        end=date(2013, 11, 5),
    ),
    Case(
        name="month put, whole history, storms and closed third Fridays",
        market="demo",
        overlay=Overlay(legs=(put(roll="month", strike=PercentOfForward(97.5)),)),
        volatility=Volatility(smile=MILD),
    ),
    Case(
        name="year put with month call, cash, all costs",
        market="demo",
        overlay=Overlay(
            legs=(put(roll="year", strike=PercentOfSpot(90)), call(strike=PercentOfSpot(104))),
            account="cash",
            costs=Costs(
                half_spread_percent=5.0, half_spread_min=0.4, commission=1.5, settlement_fee=2.0, stock_bps=3.0
            ),
        ),
        volatility=Volatility(smile=STEEP),
        end=date(2012, 6, 27),
    ),
    Case(
        name="half with phase and month call, resize, stock cost and settlement fee",
        market="demo",
        overlay=Overlay(
            legs=(put(roll="half", phase=2), call(strike=PercentOfSpot(103))),
            costs=Costs(stock_bps=10.0, settlement_fee=50.0, commission=0.65),
        ),
        volatility=Volatility(smile=FLAT),
    ),
    Case(
        name="quarter anchor phase 0 with quarter phase 1, a stub",
        market="demo",
        overlay=Overlay(legs=(put(), call(roll="quarter", phase=1, strike=PercentOfForward(106))), account="resize"),
        volatility=Volatility(smile=INDEX),
        start=date(2014, 1, 1),
    ),
    Case(
        name="half anchor with quarter phase 2 and a longer term in the stub, cash",
        market="demo",
        overlay=Overlay(
            legs=(put(roll="half"), put("short", phase=2, term_months=9, strike=PercentOfSpot(85))), account="cash"
        ),
        volatility=SWAP,
        start=date(2015, 2, 3),
        end=date(2021, 8, 31),
    ),
    Case(
        name="twelve-month put rolled every quarter, half-spread percent",
        market="demo",
        overlay=Overlay(
            legs=(put(term_months=12), call()), costs=Costs(half_spread_vol=0.0, half_spread_percent=4.0, stock_bps=2.0)
        ),
        volatility=Volatility(smile=MILD, quote="variance swap"),
        start=date(2001, 5, 30),
        end=date(2007, 3, 16),
    ),
    Case(
        name="three-month call replaced monthly, twelve-month put replaced quarterly, cash",
        market="demo",
        overlay=Overlay(legs=(put(term_months=12), call(term_months=3)), account="cash"),
        volatility=Volatility(smile=STEEP, quote="variance swap"),
        start=date(2017, 1, 1),
    ),
    Case(
        name="phase-shifted long-term legs under a year anchor, resize",
        market="demo",
        overlay=Overlay(
            legs=(
                put(roll="year", phase=5),
                put("short", roll="half", phase=1, term_months=12, strike=PercentOfSpot(80)),
                call(roll="quarter", phase=2, term_months=6),
            ),
            costs=Costs(stock_bps=5.0),
        ),
        volatility=Volatility(smile=SSVISmile(rho=-0.4, eta=1.2, gamma=0.35)),
    ),
    Case(
        name="least half-spread dominates",
        market="demo",
        overlay=Overlay(legs=(put(strike=PercentOfSpot(70)), call()), costs=Costs(half_spread_min=2.5)),
        volatility=Volatility(smile=SSVISmile(rho=0.2, eta=0.9, gamma=0.25), quote="variance swap"),
        start=date(1999, 1, 1),
        end=date(2004, 12, 31),
    ),
    Case(
        name="three legs, put spread financed by a call, three tenors",
        market="demo tenors",
        overlay=Overlay(legs=(put(), put("short", strike=PercentOfSpot(85)), call(strike=PercentOfSpot(108)))),
        volatility=Volatility(smile=INDEX),
        start=date(2003, 7, 1),
    ),
    Case(
        name="four legs with ratios, cash, three tenors as variance swaps",
        market="demo tenors",
        overlay=Overlay(
            legs=(
                put(roll="half", ratio=0.5),
                put("short", ratio=0.5, strike=PercentOfSpot(88)),
                call(ratio=0.5, strike=PercentOfSpot(105)),
                call("long", ratio=2.0, strike=PercentOfSpot(118)),
            ),
            account="cash",
            costs=Costs(commission=1.0, multiplier=50.0),
        ),
        volatility=SWAP,
        start=date(2018, 3, 1),
    ),
    Case(
        name="two puts a share, realised vol with a markup",
        market="demo",
        overlay=Overlay(legs=(put(ratio=2.0), call(ratio=0.5))),
        volatility=Volatility(source=RealisedVolatility(window=63, markup=1.15), smile=INDEX, quote="variance swap"),
        end=date(2009, 9, 18),
    ),
    Case(
        name="constant dividend yield beside the dividend column, constant rate",
        market="demo",
        overlay=Overlay(legs=BAND, costs=NO_COSTS),
        volatility=Volatility(smile=FLAT),
        rate=-0.004,
        dividend_yield=0.031,
        start=date(2010, 4, 20),
    ),
    Case(
        name="begun on a given day between rolls, ended inside a term",
        market="demo",
        overlay=Overlay(legs=(put(term_months=6), call())),
        volatility=Volatility(smile=INDEX),
        inception=date(2010, 5, 5),
        end=date(2016, 5, 4),
    ),
    Case(
        name="a leg of ratio zero with the longest roll",
        market="demo",
        overlay=Overlay(legs=(put(roll="year", ratio=0.0), put(), call())),
        volatility=Volatility(smile=INDEX),
        start=date(2012, 1, 1),
        end=date(2015, 12, 31),
    ),
    Case(
        name="S&P 500 band on realised vol, September 2001 and March 2008",
        market="sp500",
        overlay=Overlay(legs=BAND),
        volatility=Volatility(smile=INDEX),
        rate=0.02,
        dividend_yield=0.018,
    ),
    Case(
        name="S&P 500 at-the-money put spread, cash, inception on the closed Friday of March 2008",
        market="sp500",
        overlay=Overlay(
            legs=(put(strike=PercentOfSpot(100)), put("short", roll="month", strike=PercentOfForward(94))),
            account="cash",
            costs=Costs(half_spread_vol=1.0, settlement_fee=10.0),
        ),
        volatility=Volatility(source=RealisedVolatility(window=21), smile=FLAT),
        start=date(2008, 3, 18),
        end=date(2012, 12, 21),
    ),
    Case(
        name="S&P 500 month call, last day is a roll",
        market="sp500",
        overlay=Overlay(legs=(call(strike=PercentOfSpot(101)),), costs=Costs(stock_bps=4.0)),
        volatility=Volatility(smile=MILD),
        rate=0.03,
        start=date(2001, 8, 20),
        end=date(2005, 3, 18),
    ),
    Case(
        name="S&P 500 band on the 30-day index as a variance swap",
        market="sp500 index vol",
        overlay=Overlay(legs=BAND),
        volatility=SWAP,
        rate=0.005,
        dividend_yield=0.02,
    ),
    Case(
        name="S&P 500 half-year put on the 30-day index at the money, cash",
        market="sp500 index vol",
        overlay=Overlay(legs=(put(roll="half", term_months=12), call(term_months=2)), account="cash"),
        volatility=Volatility(smile=INDEX),
        rate=0.005,
    ),
    Case(
        name="S&P 500 file that begins on a third Friday, inception on its first day",
        market="sp500 index vol from 2014-03-21",
        overlay=Overlay(legs=(put(roll="quarter"), call("long"))),
        volatility=Volatility(smile=INDEX),
        end=date(2016, 9, 2),
    ),
    Case(
        name="S&P 500 file that begins on the eve of a closed third Friday, inception on its first day",
        market="sp500 index vol from 2014-04-17",
        overlay=Overlay(legs=(call(), put(roll="month", term_months=2))),
        volatility=Volatility(smile=STEEP),
        end=date(2016, 9, 2),
    ),
    Case(
        name="S&P 500 file that begins in September 2001, begun between two rolls",
        market="sp500 from 2001-09-21",
        overlay=Overlay(legs=(put(roll="quarter"), call("long"))),
        volatility=Volatility(source=RealisedVolatility(window=5), smile=INDEX),
        inception=date(2001, 9, 28),
        end=date(2004, 1, 2),
    ),
    Case(
        name="S&P 500 file that begins between a closed third Friday and the next roll",
        market="sp500 from 2000-04-24",
        overlay=Overlay(legs=(call(), put(roll="month", term_months=2))),
        volatility=Volatility(source=RealisedVolatility(window=10), smile=STEEP),
        end=date(2002, 9, 30),
    ),
    Case(
        name="S&P 500 file that ends on the eve of a closed third Friday",
        market="sp500 to 2008-03-20",
        overlay=Overlay(legs=BAND, account="cash"),
        volatility=Volatility(smile=INDEX),
        dividend_yield=0.02,
        start=date(2005, 1, 1),
    ),
    Case(
        name="the whole demo file, inception waits for the vol and the rate to begin",
        market="demo late vol and rate",
        overlay=Overlay(legs=BAND, account="cash"),
        volatility=Volatility(smile=FLAT, quote="variance swap"),
        end=date(2006, 6, 14),
    ),
]
