"""Static arbitrage in a quoted surface: where quotes of one day contradict each other, whatever the model.

Three conditions, each looked at on the quoted strikes of each day that has quotes, undiscounted and with ``F = 1``:

- *calendar*: total variance does not fall with the time to expiry at equal ``x = ln(K/F)``. Looked at between
  neighbouring tenors, at the strikes of both that lie inside both ranges: flat wings are ours, not the market's.
- *crossing*: of two strikes in a tenor the higher one's call costs no more and its put no less.
- *butterfly*: the price is a convex function of the strike, of three neighbours the middle one is not above the line.

A replay prices what is quoted; this is the report that tells how well the quotes agree.

Sources: Carr and Madan (2005), "A note on sufficient conditions for no arbitrage"; Gatheral and Jacquier (2014),
"Arbitrage-free SVI volatility surfaces", for the calendar condition.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from ..errors import MarketError
from ..market import Market
from ..pricing.black import black
from .quoted import QuotedSurface, bind

Array = npt.NDArray[np.float64]
Counts = npt.NDArray[np.int64]
Positions = npt.NDArray[np.intp]

#: Smaller gaps are rounding, of prices as shares of the forward and of vols.
ROUNDING = 1e-12


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Violations:
    """How often and how far one condition fails.

    Attributes
    ----------
    compared, failed : ndarray of int, shape (quoted day,)
        Places looked at on each day, and those of them at which the condition fails.
    depth : ndarray, shape (quoted day,)
        The largest failure of each day, zero for none: decimal vol that the longer option lacks (calendar), or a
        price as a share of the forward (crossing, butterfly).
    """

    compared: Counts
    failed: Counts
    depth: Array

    @property
    def days(self) -> int:
        """Days on which the condition fails anywhere."""
        return int(np.count_nonzero(self.failed))

    @property
    def worst(self) -> int | None:
        """Place among the quoted days of the one with the largest failure, the first of them; None for none."""
        return int(np.argmax(self.depth)) if self.days else None


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class StaticArbitrage:
    """The report: days that have quotes, how many each has, and each condition on them."""

    dates: npt.NDArray[np.datetime64]
    quotes: Counts
    calendar: Violations
    crossing: Violations
    butterfly: Violations

    def worst_date(self, name: str) -> np.datetime64 | None:
        """Date on which the named condition fails furthest; None where it holds on all days."""
        violations: Violations = getattr(self, name)
        return None if violations.worst is None else np.datetime64(self.dates[violations.worst])


def static_arbitrage(market: Market) -> StaticArbitrage:
    """Report on the quoted surface of a market; quotes that cannot be placed for want of a rate are left out.

    Raises
    ------
    MarketError
        If the market has no surface, or one that cannot be bound to it.
    """
    if market.surface is None:
        raise MarketError("the history has no quoted surface: load one")
    surface = bind(market.surface, market)
    days, of_row = np.unique(surface.quoted_day, return_inverse=True)
    row = np.repeat(np.arange(len(surface.quoted_day)), np.diff(surface.first_quote))
    count = len(days)
    strike = np.exp(surface.x)
    call = black(1.0, strike, surface.vol * np.sqrt(surface.tenor_years[row]), 1.0)
    return StaticArbitrage(
        dates=market.dates[days],
        quotes=np.bincount(of_row[row], minlength=count),
        calendar=_calendar(surface, row, of_row, count),
        crossing=_crossing(row, of_row, strike, call, count),
        butterfly=_butterfly(row, of_row, strike, call, count),
    )


def _violations(day: Positions, gap: Array, count: int) -> Violations:
    """Counts of each day from the gaps found on it; above rounding a gap is a failure."""
    failed = gap > ROUNDING
    depth = np.zeros(count)
    np.maximum.at(depth, day[failed], gap[failed])
    return Violations(
        compared=np.bincount(day, minlength=count),
        failed=np.bincount(day[failed], minlength=count),
        depth=depth,
    )


def _calendar(surface: QuotedSurface, row: Positions, of_row: Positions, count: int) -> Violations:
    """Between each tenor and the next one of its day, at the strikes of either, each once."""
    first, last = surface.x[surface.first_quote[:-1]], surface.x[surface.first_quote[1:] - 1]
    followed = of_row[1:] == of_row[:-1]
    found = []
    for step, has_other in ((1, np.append(followed, False)), (-1, np.append(False, followed))):
        quote = np.flatnonzero(has_other[row])
        other, x = row[quote] + step, surface.x[quote]
        inside = (x >= first[other]) & (x <= last[other])
        quote, other, x = quote[inside], other[inside], x[inside]
        vols = (surface.vol[quote], surface.vol_at(other, x))
        found.append((np.maximum(row[quote], other), x, *(vols if step == 1 else vols[::-1])))
    far, x, near_vol, far_vol = (np.concatenate(parts) for parts in zip(*found, strict=True))
    order = np.lexsort((x, far))
    fresh = np.append(True, (np.diff(far[order]) != 0) | (np.diff(x[order]) != 0.0))[: len(order)]
    kept = order[fresh]
    far = far[kept]
    gap = near_vol[kept] * np.sqrt(surface.tenor_years[far - 1] / surface.tenor_years[far]) - far_vol[kept]
    return _violations(of_row[far], gap, count)


def _crossing(row: Positions, of_row: Positions, strike: Array, call: Array, count: int) -> Violations:
    """Between each strike and the next one of its tenor; the put of a strike is its call less 1 plus the strike."""
    pair = np.flatnonzero((row[1:] == row[:-1]) & (strike[1:] > strike[:-1]))
    rise, run = call[pair + 1] - call[pair], strike[pair + 1] - strike[pair]
    return _violations(of_row[row[pair]], np.maximum(rise, -rise - run), count)


def _butterfly(row: Positions, of_row: Positions, strike: Array, call: Array, count: int) -> Violations:
    """Of each three neighbouring strikes, how far the middle price lies above the line between the others."""
    kept = np.flatnonzero(np.append(True, (row[1:] != row[:-1]) | (strike[1:] > strike[:-1])))
    place = np.arange(1, len(kept) - 1)
    place = place[row[kept[place - 1]] == row[kept[place + 1]]]
    left, middle, right = (kept[place + step] for step in (-1, 0, 1))
    share = (strike[middle] - strike[left]) / (strike[right] - strike[left])
    gap = call[middle] - ((1.0 - share) * call[left] + share * call[right])
    return _violations(of_row[row[middle]], gap, count)
