"""Quoted implied vols by expiry and strike: the door in from pandas, and the strikes that the quotes stand for (C7).

:class:`SurfaceQuotes` holds what is quoted, in long form; it is attached to a market as ``Market.surface``. What an
option's vol is between the quotes is worked out in ``quoted.py``.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt
from scipy.special import ndtri

from ..errors import MarketError
from ..market import DAYS_IN_YEAR, HIGHEST_VOL, Market, as_dates, number_column

if TYPE_CHECKING:
    import pandas as pd

Array = npt.NDArray[np.float64]
Dates = npt.NDArray[np.datetime64]
Positions = npt.NDArray[np.intp]

#: How the strike of a quote is given: the kind, and the column of a frame that brings it.
KINDS = {
    "percent of spot": "percent_of_spot",
    "percent of forward": "percent_of_forward",
    "delta": "delta",
}
#: Percents of spot or forward outside this are taken for decimals, or for strikes.
PERCENTS = (3.0, 1000.0)
#: The longest quoted option, in days.
LONGEST_DAYS = 10_000.0


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class SurfaceQuotes:
    """Implied vols quoted on trading days, one row a quote; tenors and strikes may differ from day to day.

    Attributes
    ----------
    dates : ndarray of datetime64[D], shape (day,)
        The trading days of the market that the quotes belong to.
    kind : {"percent of spot", "percent of forward", "delta"}
        What ``value`` is. A delta is the spot delta of C5 at the quote's own vol, decimal: above zero that of a call,
        below zero that of a put (-0.25 is a 25-delta put).
    day : ndarray of int, shape (quote,)
        Position of each quote's day in ``dates``.
    tenor_days : ndarray, shape (quote,)
        Calendar days to expiry.
    value : ndarray, shape (quote,)
        Percent (90 is 90%), or decimal delta.
    vol : ndarray, shape (quote,)
        Decimal annual vols.

    Quotes may come in any order; they are kept sorted by day, tenor and value.

    Raises
    ------
    MarketError
        For an unknown kind, a value or vol outside its limits, or two quotes of the same option; the quote is named.
    """

    dates: Dates
    kind: str
    day: Positions
    tenor_days: Array
    value: Array
    vol: Array

    def __post_init__(self) -> None:
        if self.kind not in KINDS:
            raise MarketError(f"the kind of a surface is {self.kind!r}; it is one of: {', '.join(KINDS)}")
        _check_quotes(self)
        order = np.lexsort((self.value, self.tenor_days, self.day))
        for name in ("day", "tenor_days", "value", "vol"):
            object.__setattr__(self, name, getattr(self, name)[order])
        same = np.flatnonzero(
            (np.diff(self.day) == 0) & (np.diff(self.tenor_days) == 0.0) & (np.diff(self.value) == 0.0)
        )
        if same.size:
            raise MarketError(f"the surface has two quotes for {self.words(int(same[0]))}: keep one")
        for name in ("day", "tenor_days", "value", "vol"):
            getattr(self, name).setflags(write=False)

    def __len__(self) -> int:
        return len(self.vol)

    def words(self, quote: int) -> str:
        """The day, tenor and strike of a quote, for messages."""
        value = self.value[quote]
        strike = f"a delta of {value:g}" if self.kind == "delta" else f"{value:g} {self.kind}"
        return f"{strike} at {self.tenor_days[quote]:g} days on {self.dates[self.day[quote]]}"

    @classmethod
    def from_frame(cls, frame: pd.DataFrame, dates: Dates) -> SurfaceQuotes:
        """Make a surface from a long pandas frame, a row a quote.

        Parameters
        ----------
        frame : DataFrame
            Columns ``date``, ``days`` (calendar days to expiry), ``vol`` (decimal a year; a row without one is left
            out) and one of ``percent_of_spot``, ``percent_of_forward``, ``delta``. Other columns are not looked at.
        dates : ndarray of datetime64
            Trading days of the price file, such as ``frame_of_prices.index.to_numpy()``.

        Raises
        ------
        MarketError
            For a missing column, a date that is no trading day, or a number outside its limits.

        Examples
        --------
        >>> import pandas as pd
        >>> days = pd.bdate_range("2020-01-01", periods=3)
        >>> rows = [(days[0], 30, 90, 0.24), (days[0], 30, 100, 0.20), (days[0], 91, 100, 0.21)]
        >>> quotes = SurfaceQuotes.from_frame(
        ...     pd.DataFrame(rows, columns=["date", "days", "percent_of_spot", "vol"]), days.to_numpy())
        >>> len(quotes), quotes.kind
        (3, 'percent of spot')
        """
        shown = ", ".join(map(str, frame.columns))
        for name in ("date", "days", "vol"):
            if name not in frame.columns:
                raise MarketError(f"the surface has no column '{name}'; its columns are: {shown}")
        kinds = [kind for kind, name in KINDS.items() if name in frame.columns]
        if len(kinds) != 1:
            raise MarketError(
                f"the surface takes one of the columns {', '.join(KINDS.values())}; its columns are: {shown}"
            )
        if not len(frame):
            raise MarketError("the surface has no rows")
        vol = number_column(frame, "vol")
        known = ~np.isnan(vol)
        trading_days = np.asarray(dates).astype("datetime64[D]")
        quoted = as_dates(frame.set_index("date").index, "the column 'date' of the surface")[known]
        if np.isnat(quoted).any():
            raise MarketError("a row of the surface has no date")
        day = np.minimum(np.searchsorted(trading_days, quoted), len(trading_days) - 1)
        if (other := trading_days[day] != quoted).any():
            raise MarketError(
                f"the surface has quotes on {quoted[other][0]}, which is no trading day of the prices: drop such rows "
                f"({int(np.count_nonzero(other))} of {len(quoted)})"
            )
        return cls(
            dates=trading_days,
            kind=kinds[0],
            day=day,
            tenor_days=number_column(frame, "days")[known],
            value=number_column(frame, KINDS[kinds[0]])[known],
            vol=vol[known],
        )


def _check_quotes(quotes: SurfaceQuotes) -> None:
    shape = quotes.day.shape
    for name in ("tenor_days", "value", "vol"):
        if getattr(quotes, name).shape != shape:
            raise MarketError(f"{name} has shape {getattr(quotes, name).shape}; it must be {shape}, one a quote")
    if not shape[0]:
        raise MarketError("the surface has no quotes")
    if (quotes.day < 0).any() or (quotes.day >= len(quotes.dates)).any():
        raise MarketError(f"the days of the quotes are positions from 0 to {len(quotes.dates) - 1}")
    days, value, vol = quotes.tenor_days, quotes.value, quotes.vol
    if quotes.kind == "delta":
        right, rule = (np.abs(value) < 1.0) & (value != 0.0), "a decimal delta lies between -1 and 1 and is not 0"
    else:
        right = (value >= PERCENTS[0]) & (value <= PERCENTS[1])
        rule = f"{quotes.kind} is from {PERCENTS[0]:g} to {PERCENTS[1]:g} (90 is 90%)"
    days_rule = f"days to expiry are above 0 and at most {LONGEST_DAYS:g}"
    vol_rule = f"a decimal vol is above 0 and at most {HIGHEST_VOL:g} (0.20 is 20%)"
    for name, values, fine, limit in (
        ("days", days, (days > 0.0) & (days <= LONGEST_DAYS), days_rule),
        (KINDS[quotes.kind], value, right, rule),
        ("vol", vol, (vol > 0.0) & (vol <= HIGHEST_VOL), vol_rule),
    ):
        if (wrong := np.flatnonzero(~fine)).size:
            date = quotes.dates[quotes.day[wrong[0]]]
            raise MarketError(f"{name} of the surface on {date} is {values[wrong[0]]:g}; {limit}")


def log_moneyness(quotes: SurfaceQuotes, market: Market) -> Array:
    """``x = ln(K/F)`` of each quote by the forward of its own day and tenor (C5), shape ``(quote,)``.

    With ``|delta| = exp(-q tau) N(+-d1)`` at the quote's own vol, ``d1`` is known, and so is
    ``x = s (s/2 - d1)`` with ``s = vol sqrt(tau)``: nothing has to be searched for.

    Returns
    -------
    ndarray
        NaN where the day has no rate and the strike wants one.

    Raises
    ------
    MarketError
        For a delta that no strike has, because the dividends to expiry leave less.
    """
    tau = quotes.tenor_days / DAYS_IN_YEAR
    if quotes.kind == "percent of forward":
        return np.log(quotes.value / 100.0)
    carry = market.dividend_yield[quotes.day] * tau
    if quotes.kind == "percent of spot":
        return np.log(quotes.value / 100.0) - (market.rate[quotes.day] * tau - carry)
    probability = np.abs(quotes.value) * np.exp(carry)
    if (beyond := np.flatnonzero(probability >= 1.0)).size:
        quote = int(beyond[0])
        most = float(np.exp(-carry[quote]))
        raise MarketError(f"no strike has {quotes.words(quote)}: with the dividends to expiry the most is {most:.4g}")
    stdev = quotes.vol * np.sqrt(tau)
    d1 = np.sign(quotes.value) * ndtri(probability)
    return stdev * (0.5 * stdev - d1)
