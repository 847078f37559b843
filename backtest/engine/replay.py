"""The driver: plan, price, account. ``replay`` is ``replay_many`` of one."""

from __future__ import annotations

from collections.abc import Sequence

from ..market import Market
from ..overlay import Overlay
from ..volatility.sources import Volatility
from .families import replay_families
from .result import Replay, Replays


def replay(
    market: Market,
    overlay: Overlay,
    *,
    volatility: Volatility | None = None,
    start: object = None,
    end: object = None,
    inception: object = None,
) -> Replay:
    """Replay one overlay on one market; see :func:`replay_many` for parameters and errors.

    Examples
    --------
    A quarterly 95 put on an invented price path at 20 vol:

    >>> import numpy as np, pandas as pd
    >>> from backtest import Leg, Market, Overlay, PercentOfSpot, replay
    >>> days = pd.bdate_range("2018-01-01", "2020-12-31", name="date")
    >>> close = 100 * np.exp(0.1 * np.sin(np.arange(len(days)) / 50))
    >>> market = Market.from_frame(pd.DataFrame({"close": close, "vol": 0.20}, index=days), rate=0.02)
    >>> put = Leg(position="long", right="put", roll="quarter", strike=PercentOfSpot(95))
    >>> result = replay(market, Overlay(legs=(put,)))
    >>> result.dates[0], len(result.legs[0].strike)
    (np.datetime64('2018-03-16'), 12)
    >>> result.to_frame()[["overlay", "hold"]].iloc[-1].round(4).tolist()
    [0.8379, 0.92]
    """
    return replay_many(market, [overlay], volatility=volatility, start=start, end=end, inception=inception)[0]


def replay_many(
    market: Market,
    overlays: Sequence[Overlay],
    *,
    volatility: Volatility | Sequence[Volatility] | None = None,
    start: object = None,
    end: object = None,
    inception: object = None,
) -> Replays:
    """Replay many overlays on one market.

    Legs that occur in several overlays are priced once: a grid of 20 puts by 20 calls
    prices 40 legs, not 800.

    Parameters
    ----------
    market : Market
    overlays : sequence of Overlay
    volatility : Volatility, or one for each overlay, optional
        The market's own vols at the money under the index-like smile unless given.
    start, end : date, optional
        The window. Each overlay begins on the first roll date of its longest leg in the window on which
        price, vol and rate are known (C3), and ends on the window's last trading day.
    inception : date, optional
        Begin every overlay on this trading day instead, with stubs where a leg does not roll on it.

    Returns
    -------
    Replays
        In the order of ``overlays``.

    Raises
    ------
    PlanError
        If an overlay has no roll date in the window.
    MarketError
        If a vol or a rate is missing inside it.
    OverlayError
        If a date is none, or the number of volatilities is not that of the overlays.

    Examples
    --------
    >>> import numpy as np, pandas as pd
    >>> from backtest import Leg, Market, Overlay, PercentOfSpot, replay_many
    >>> days = pd.bdate_range("2018-01-01", "2020-12-31", name="date")
    >>> market = Market.from_frame(pd.DataFrame({"close": np.linspace(100, 130, len(days)), "vol": 0.20}, index=days))
    >>> puts = [Leg(position="long", right="put", strike=PercentOfSpot(p)) for p in (90, 95)]
    >>> results = replay_many(market, [Overlay(legs=(put,)) for put in puts])
    >>> [round(float(r.wealth[-1]), 4) for r in results]
    [1.0602, 0.9586]
    """
    overlays = list(overlays)
    replays: dict[int, Replay] = {}
    for found in replay_families(market, overlays, volatility=volatility, start=start, end=end, inception=inception):
        for member, number in enumerate(found.numbers):
            replays[number] = Replay(found, member, overlays[number])
    return Replays([replays[number] for number in range(len(overlays))])
