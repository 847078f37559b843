"""A quoted surface on the days of a market: the vol of any option by interpolation, many days at once (C7).

In each tenor sigma is linear in ``x = ln(K/F)`` between the quoted strikes and flat beyond them; between tenors total
variance is linear in the time to expiry at equal ``x``, and beyond the first and last sigma is flat. A day without
quotes sees the last surface, at equal ``x`` and tenor, for at most five calendar days.

How it is kept: quotes stand one after the other, by day, tenor and ``x`` (a *row* is one tenor of one day), with an
index of where each row begins. For days that are asked for, the strikes of their two rows are laid side by side in an
array ``(strike, day)``, and a value's place among them is counted in as many passes as a row has strikes. Each pass
compares a whole block, which costs a fraction of a nanosecond a value.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from ..market import DAYS_IN_YEAR, Market
from .surface import SurfaceQuotes, log_moneyness

Array = npt.NDArray[np.float64]
Positions = npt.NDArray[np.intp]

#: Calendar days for which a day without quotes sees the last surface (C7).
MOST_CARRIED_DAYS = 5
#: With more strikes than this in a row, every eighth is counted first and the rest is halved three times.
MOST_COUNTED = 32
STRIDE = 8
#: Strikes laid side by side at once where every value has a row of its own.
MOST_AT_ONCE = 1_000_000


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class QuotedSurface:
    """The quotes of a surface on a market's days; made by :func:`bind`.

    Attributes
    ----------
    first_row, row_count : ndarray of int, shape (day,)
        The tenors that each trading day sees, shortest first; none where the count is zero.
    quoted_day : ndarray of int, shape (row,)
        Position of the day on which each tenor was quoted.
    tenor_years : ndarray, shape (row,)
    first_quote : ndarray of int, shape (row + 1,)
        Where the quotes of each row begin, and after the last one the number of quotes.
    x, vol : ndarray, shape (quote,)
        Log-moneyness, increasing in a row, and decimal vol.
    base_x, base_vol, slope : ndarray, shape (quote + row,)
        ``sigma = base_vol + slope (x - base_x)`` after so many strikes of a row as lie below ``x``: a row of n strikes
        has n + 1 entries, the first and the last of them flat.
    """

    first_row: Positions
    row_count: Positions
    quoted_day: Positions
    tenor_years: Array
    first_quote: Positions
    x: Array
    vol: Array
    base_x: Array
    base_vol: Array
    slope: Array

    @property
    def first_day(self) -> int:
        """Position of the first day that has a surface; the number of days if none has."""
        seen = np.flatnonzero(self.row_count)
        return int(seen[0]) if seen.size else len(self.row_count)

    def missing(self, first: int, last: int) -> int | None:
        """Position of the first day without a surface from ``first`` to ``last``, or None."""
        unseen = np.flatnonzero(self.row_count[first : last + 1] == 0)
        return first + int(unseen[0]) if unseen.size else None

    def slice(self, day: Positions | slice, tau_years: Array) -> QuotedSlice:
        """The smile on each day for its time to expiry."""
        tau = np.asarray(tau_years, dtype=np.float64)
        first, count = self.first_row[day], self.row_count[day]
        number = np.arange(max(count.max(initial=1), 1))[:, np.newaxis]
        tenors = np.where(number < count, self.tenor_years.take(first + number, mode="clip"), np.inf)
        passed = np.count_nonzero(tenors <= tau, axis=0)
        near = first + np.maximum(passed - 1, 0)
        far = first + np.clip(passed, 0, np.maximum(count - 1, 0))
        between = (passed > 0) & (passed < count)
        tau_near, tau_far = self.tenor_years[near], self.tenor_years[far]
        share = np.where(between, (tau - tau_near) / np.where(between, tau_far - tau_near, 1.0), 0.0)
        # beyond the first and the last tenor the weight is the time itself: the vol is flat there
        near_weight = np.where(between, tau_near * (1.0 - share), tau)
        return QuotedSlice(
            near=self._rows(near),
            near_weight=np.where(count > 0, near_weight, np.nan),
            far=self._rows(far) if share.any() else None,
            far_weight=tau_far * share,
        )

    def vol_at(self, row: Positions, log_moneyness: Array) -> Array:
        """Vol of each row at the ``x`` beside it, both of shape ``(value,)``."""
        found = np.empty(len(row))
        step = max(1, MOST_AT_ONCE // int(np.diff(self.first_quote).max(initial=1)))
        for first in range(0, len(row), step):
            some = slice(first, first + step)
            found[some] = self._rows(row[some]).vol(log_moneyness[some])
        return found

    def _rows(self, row: Positions) -> _Rows:
        first, count = self.first_quote[row], np.diff(self.first_quote)[row]
        most = int(count.max(initial=1))
        if most > MOST_COUNTED:
            most = -(-most // STRIDE) * STRIDE
        number = np.arange(most)[:, np.newaxis]
        strikes = np.where(number < count, self.x.take(first + number, mode="clip"), np.inf)
        return _Rows(strikes=strikes, entry=first + row, surface=self)


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class QuotedSlice:
    """The quoted smile with its days fixed: two tenors each, and how the variances of both are weighed."""

    near: _Rows
    near_weight: Array
    far: _Rows | None
    far_weight: Array

    def total_variance(self, log_moneyness: Array) -> Array:
        """Total variance at ``ln(K/F)``, last axis the days of the slice; NaN on days without a surface."""
        total = self.near.vol(log_moneyness)
        total *= total
        total *= self.near_weight
        if self.far is not None:
            far = self.far.vol(log_moneyness)
            far *= far
            far *= self.far_weight
            total += far
        return total


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _Rows:
    """One tenor a day: its strikes, shape ``(strike, day)`` and infinite after the last, and its first entry."""

    strikes: Array
    entry: Positions
    surface: QuotedSurface

    def vol(self, x: Array) -> Array:
        place = self._passed(x)
        place += self.entry
        surface = self.surface
        vol: Array = x - surface.base_x.take(place)
        vol *= surface.slope.take(place)
        vol += surface.base_vol.take(place)
        return vol

    def _passed(self, x: Array) -> Positions:
        """How many strikes of its day's row lie below each ``x``."""
        strikes = self.strikes
        halved = len(strikes) > MOST_COUNTED
        counted = strikes[::STRIDE] if halved else strikes
        shape = np.broadcast_shapes(x.shape, self.entry.shape)
        count = np.zeros(shape, dtype=np.uint8 if len(counted) < 256 else np.uint32)
        below = np.empty(shape, dtype=np.bool_)
        for row in counted:
            np.greater(x, row, out=below)
            # a byte of 0 or 1, which spares a conversion
            np.add(count, below.view(np.uint8), out=count)
        place = count.astype(np.intp)
        if halved:
            days = strikes.shape[1]
            flat, column = strikes.ravel(), np.arange(days)
            # of each eight, the first is known to lie below
            place *= STRIDE
            place -= STRIDE - 1
            np.maximum(place, 0, out=place)
            step = STRIDE // 2
            while step:
                probe = place + (step - 1)
                probe *= days
                probe += column
                place += step * (x > flat.take(probe))
                step //= 2
        return place


def bind(quotes: SurfaceQuotes, market: Market) -> QuotedSurface:
    """Lay the quotes out on the market's days.

    Quotes whose strike wants a rate, on days before the first known one, are left out.

    Raises
    ------
    MarketError
        For a delta that no strike has.
    """
    x = log_moneyness(quotes, market)
    order = np.lexsort((x, quotes.tenor_days, quotes.day))
    order = order[~np.isnan(x[order])]
    day, tenor_days, vol = quotes.day[order], quotes.tenor_days[order], quotes.vol[order]
    x = x[order]
    begins = np.ones(len(x), dtype=bool)
    begins[1:] = (np.diff(day) != 0) | (np.diff(tenor_days) != 0.0)
    first_quote = np.append(np.flatnonzero(begins), len(x))
    row = np.cumsum(begins) - 1
    quoted_day = day[first_quote[:-1]]
    run, rise = np.diff(x), np.diff(vol)
    # a put and a call may be quoted at one strike: between them there is nothing to be put in
    inside = ~begins[1:] & (run > 0.0)
    slopes = np.divide(rise, run, out=np.zeros(len(run)), where=inside)

    entries = len(x) + len(quoted_day)
    at = np.arange(len(x)) + row + 1
    base_x, base_vol, slope = (np.zeros(entries) for _ in range(3))
    base_x[at], base_vol[at] = x, vol
    slope[at[:-1]] = slopes
    lead = first_quote[:-1] + np.arange(len(quoted_day))
    base_x[lead], base_vol[lead] = x[first_quote[:-1]], vol[first_quote[:-1]]

    first_row, row_count = _rows_of_days(quoted_day, market.day_number)
    return QuotedSurface(
        first_row=first_row,
        row_count=row_count,
        quoted_day=quoted_day,
        tenor_years=tenor_days[first_quote[:-1]] / DAYS_IN_YEAR,
        first_quote=first_quote,
        x=x,
        vol=vol,
        base_x=base_x,
        base_vol=base_vol,
        slope=slope,
    )


def _rows_of_days(quoted_day: Positions, day_number: npt.NDArray[np.int64]) -> tuple[Positions, Positions]:
    """First row and number of rows that each trading day sees: its own, or the last of at most five days before."""
    days, first, count = np.unique(quoted_day, return_index=True, return_counts=True)
    held = np.searchsorted(days, np.arange(len(day_number)), side="right") - 1
    seen = np.flatnonzero(held >= 0)
    seen = seen[day_number[seen] - day_number[days[held[seen]]] <= MOST_CARRIED_DAYS]
    first_row, row_count = np.zeros((2, len(day_number)), dtype=np.intp)
    first_row[seen], row_count[seen] = first[held[seen]], count[held[seen]]
    return first_row, row_count
