"""Replay a rolling option overlay on historical arrays: plan, price, account, measure.

Reads no files and prints nothing. A short tour:

>>> import numpy as np, pandas as pd
>>> from backtest import Costs, Leg, Market, Overlay, PercentOfSpot, Volatility, replay
>>> days = pd.bdate_range("2015-01-01", "2020-12-31", name="date")
>>> close = 100 * np.exp(0.15 * np.sin(np.arange(len(days)) / 120) + 0.0002 * np.arange(len(days)))
>>> market = Market.from_frame(pd.DataFrame({"close": close, "vol": 0.18}, index=days), rate=0.01)
>>> band = Overlay(
...     legs=(
...         Leg(position="long", right="put", roll="quarter", strike=PercentOfSpot(95)),
...         Leg(position="short", right="call", roll="month", strike=PercentOfSpot(110)),
...     ),
...     costs=Costs(half_spread_vol=0.5),
... )
>>> result = replay(market, band, volatility=Volatility(quote="variance swap"))
>>> result
<Replay overlay: 2015-03-20 to 2020-12-31, growth of 1 to 0.9742>
>>> put = result.rolls_frame().iloc[0]
>>> put.leg, str(put.expiry.date()), round(float(put.strike), 2)
('put', '2015-06-19', 102.78)
"""

from .engine.leg_replay import LegReplay
from .engine.replay import replay, replay_many
from .engine.result import Replay, Replays
from .errors import BacktestError, MarketError, OverlayError, PlanError
from .gates import Gate, PriceMean, SignalOn, VolPercentile
from .leg import Early, Leg
from .market import Market
from .overlay import NO_COSTS, Costs, Overlay
from .strikes import (
    Adjusted,
    Delta,
    Deviations,
    Financed,
    Mirrored,
    PercentOfForward,
    PercentOfSpot,
    PremiumPercent,
)
from .volatility import (
    FLAT,
    INDEX,
    MILD,
    SMILE_LADDER,
    STEEP,
    FlatSmile,
    ImpliedSeries,
    RealisedVolatility,
    SSVISmile,
    Volatility,
)

__all__ = [
    "FLAT",
    "INDEX",
    "MILD",
    "NO_COSTS",
    "SMILE_LADDER",
    "STEEP",
    "Adjusted",
    "BacktestError",
    "Costs",
    "Delta",
    "Deviations",
    "Early",
    "Financed",
    "FlatSmile",
    "Gate",
    "ImpliedSeries",
    "Leg",
    "LegReplay",
    "Market",
    "MarketError",
    "Mirrored",
    "Overlay",
    "OverlayError",
    "PercentOfForward",
    "PercentOfSpot",
    "PlanError",
    "PremiumPercent",
    "PriceMean",
    "RealisedVolatility",
    "Replay",
    "Replays",
    "SSVISmile",
    "SignalOn",
    "VolPercentile",
    "Volatility",
    "replay",
    "replay_many",
]
