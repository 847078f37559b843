"""The replays whose greeks are compared with bumped prices and with QuantLib, and the market they run on."""

from __future__ import annotations

import functools
from dataclasses import dataclass

import numpy as np
import pandas as pd

from backtest import (
    FLAT,
    INDEX,
    STEEP,
    Costs,
    Delta,
    Early,
    Financed,
    Gate,
    Leg,
    Market,
    Overlay,
    PercentOfSpot,
    PriceMean,
    Replay,
    SSVISmile,
    Volatility,
    replay,
)

DAYS = pd.bdate_range("2015-01-05", "2017-12-29", name="date")


@functools.cache
def history(tenors: int) -> pd.DataFrame:
    """Three years with deep falls, changing rates (below zero at times), four dividends a year, one or three vols."""
    count, rng = len(DAYS), np.random.default_rng(5)
    along = np.arange(count)
    frame = pd.DataFrame(
        {
            "close": 1500 * np.exp(np.cumsum(rng.normal(0, 0.01, count)) - 0.15 * np.sin(along / 60)),
            "rate": 0.02 + 0.03 * np.sin(along / 130),
            "dividend": np.where(along % 63 == 20, 9.0 + along / 200, 0.0),
        },
        index=DAYS,
    )
    frame["open"] = frame["close"] * np.exp(rng.normal(0, 0.004, count))
    vol = 0.18 + 0.1 * np.sin(along / 60) + 0.02 * rng.random(count)
    if tenors == 1:
        return frame.assign(vol=vol)
    return frame.assign(vol_30=vol, vol_91=0.6 * vol + 0.4 * 0.2, vol_365=0.3 * vol + 0.7 * 0.21)


@dataclass(frozen=True, kw_only=True)
class GreekCase:
    """One replay; ``tenors`` is the number of vol columns."""

    name: str
    overlay: Overlay
    volatility: Volatility
    tenors: int = 1

    @property
    def frame(self) -> pd.DataFrame:
        return history(self.tenors)

    def run(self) -> Replay:
        return replay(Market.from_frame(self.frame), self.overlay, volatility=self.volatility)


def put(percent: float = 95.0, **fields) -> Leg:
    return Leg(**{"position": "long", "right": "put", "strike": PercentOfSpot(percent), **fields})


def call(percent: float = 106.0, **fields) -> Leg:
    return Leg(**{"position": "short", "right": "call", "roll": "month", "strike": PercentOfSpot(percent), **fields})


BAND = (put(), call())
AT_THE_MONEY = Volatility(smile=INDEX)
SWAP = Volatility(quote="variance swap")
BELOW_MEAN = Gate(condition=PriceMean(window=60, above=False), when_off="close", when_on="at once")
SEVERAL = (
    put(97, roll="half", ratio=0.8),
    put(84, position="short", roll="quarter", term_months=6, ratio=0.5),
    call(104, ratio=0.7, term_months=2),
    call(112, position="long", roll="quarter", phase=2, ratio=0.3),
)

CASES = [
    GreekCase(name="a bought put", overlay=Overlay(legs=(put(),)), volatility=Volatility(smile=FLAT)),
    GreekCase(name="a sold put", overlay=Overlay(legs=(put(position="short"),)), volatility=AT_THE_MONEY),
    GreekCase(name="a sold call", overlay=Overlay(legs=(call(),)), volatility=AT_THE_MONEY),
    GreekCase(
        name="a bought call in the money",
        overlay=Overlay(legs=(call(88, position="long"),)),
        volatility=AT_THE_MONEY,
    ),
    GreekCase(
        name="four legs, three tenors, variance swap", overlay=Overlay(legs=SEVERAL), volatility=SWAP, tenors=3
    ),
    GreekCase(
        name="four legs, cash account, all costs",
        overlay=Overlay(
            legs=SEVERAL, account="cash", costs=Costs(half_spread_percent=3, commission=2, settlement_fee=3)
        ),
        volatility=Volatility(smile=SSVISmile(rho=0.3, eta=0.9, gamma=0.3)),
        tenors=3,
    ),
    GreekCase(
        name="ladders of three",
        overlay=Overlay(legs=(put(ladder=3, term_months=6), call(ladder=3))),
        volatility=SWAP,
    ),
    GreekCase(
        name="gates, flat days",
        overlay=Overlay(legs=(put(gate=BELOW_MEAN), call(gate=Gate(condition=PriceMean(window=60, above=True))))),
        volatility=AT_THE_MONEY,
    ),
    GreekCase(
        name="a gate over all, cash account",
        overlay=Overlay(legs=BAND, gate=BELOW_MEAN, account="cash"),
        volatility=AT_THE_MONEY,
        tenors=3,
    ),
    GreekCase(
        name="whole contracts",
        overlay=Overlay(legs=(put(ratio=2 / 3), call()), portfolio=1_000_000.0, costs=Costs(multiplier=100.0)),
        volatility=AT_THE_MONEY,
    ),
    GreekCase(
        name="whole contracts, cash account, dear cash",
        overlay=Overlay(
            legs=BAND, portfolio=1_000_000.0, account="cash", costs=Costs(multiplier=50.0, borrow_spread=4.0)
        ),
        volatility=SWAP,
        tenors=3,
    ),
    GreekCase(
        name="vols shifted, puts up and calls down",
        overlay=Overlay(legs=BAND),
        volatility=Volatility(smile=STEEP, put_shift=2.5, call_shift=-1.5),
        tenors=3,
    ),
    GreekCase(
        name="mean-reverting vols and long terms",
        overlay=Overlay(legs=(put(90, roll="quarter", term_months=12), call(term_months=6))),
        volatility=Volatility(quote="variance swap", term_structure="mean reverting", kappa=3.0, call_shift=1.0),
    ),
    GreekCase(
        name="solved strikes, early rules, a reference leg",
        overlay=Overlay(
            legs=(
                put(strike=Delta(0.3), early=Early(value_above=2.0)),
                put(80, reference=True),
                call(strike=Financed(0.6, legs=(1,))),
            )
        ),
        volatility=SWAP,
    ),
    GreekCase(
        name="rolls of days, morning settlement, decided the day before",
        overlay=Overlay(
            legs=(put(roll="days", every=21, settlement="open"), call(roll="days", every=5)), decide_lag=1
        ),
        volatility=AT_THE_MONEY,
        tenors=3,
    ),
]  # fmt: skip
BY_NAME = {case.name: case for case in CASES}
