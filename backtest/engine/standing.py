"""A market that stands still: days after the newest one, on which its price, vols, rate and yield stay what they are.

What a roll in some days would cost by today's data is then priced by the engine itself, on days like any other.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from ..market import Market
from ..volatility.smile import SmileSlice
from ..volatility.sources import BoundVolatility, Days

Array = npt.NDArray[np.float64]
Dates = npt.NDArray[np.datetime64]
Positions = npt.NDArray[np.intp]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class StandingVolatility:
    """The volatility of a market, looked up on other days; ``day_of`` is the market's day for each of them."""

    bound: BoundVolatility
    day_of: Positions

    @property
    def first_day(self) -> int:
        """Position of the first day that has a volatility."""
        known = np.flatnonzero(self.day_of >= self.bound.first_day)
        return int(known[0]) if known.size else len(self.day_of)

    def slice(self, day: Days, tau_years: Array) -> SmileSlice:
        """The smile on each day for its time to expiry."""
        return self.bound.slice(self.day_of[day], tau_years)

    def missing(self, first: int, last: int) -> int | None:
        """Position of the first day without a volatility from ``first`` to ``last``, or None."""
        for day in range(first, last + 1):
            looked_up = int(self.day_of[day])
            if self.bound.missing(looked_up, looked_up) is not None:
                return day
        return None


def weekdays_after(newest: np.datetime64, count: int) -> Dates:
    """The next weekdays, which stand for trading days beyond a price file (C2).

    Examples
    --------
    >>> [str(day) for day in weekdays_after(np.datetime64("2024-12-20"), 2)]
    ['2024-12-23', '2024-12-24']
    """
    days: Dates = np.busday_offset(newest, np.arange(1, count + 1), roll="backward")
    return days


def lengthened(market: Market, days: int) -> tuple[Market, Positions]:
    """The market with so many weekdays more, on which nothing moves; and its own day behind each of its days."""
    newest = len(market) - 1
    day_of = np.minimum(np.arange(len(market) + days), newest)
    dates = np.concatenate([market.dates, weekdays_after(market.dates[newest], days)])
    return _looked_up(market, day_of, dates, market.spot[day_of]), day_of


def on_one_day(market: Market, date: np.datetime64, spot: Array) -> tuple[Market, Positions]:
    """A market whose rows are one and the same later date at other prices, shape ``(price,)``; all else stays."""
    day_of = np.full(len(spot), len(market) - 1)
    return _looked_up(market, day_of, np.full(len(spot), date), np.array(spot, dtype=np.float64)), day_of


def _looked_up(market: Market, day_of: Positions, dates: Dates, spot: Array) -> Market:
    return Market(
        dates=dates,
        spot=spot,
        # what is paid on the way moves accounts, not options: they see the yield
        dividend=np.zeros(len(dates)),
        rate=market.rate[day_of],
        dividend_yield=market.dividend_yield[day_of],
        vol_quotes=market.vol_quotes[:, day_of],
        vol_tenor_days=market.vol_tenor_days,
        open=None if market.open is None else market.open[day_of],
        signal=None if market.signal is None else market.signal[day_of],
    )
