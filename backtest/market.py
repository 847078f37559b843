"""The one door in from pandas: a frozen ``Market`` of numpy arrays (C1, C5).

Everything the engine needs of a history and nothing else: trading days, spot,
cash dividends, rate, trailing dividend yield, vol quotes, and the growth of cash
and of a share with its dividends reinvested.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from numbers import Real
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt

from .errors import MarketError

if TYPE_CHECKING:
    import pandas as pd

    from .volatility.surface import SurfaceQuotes

Array = npt.NDArray[np.float64]
Dates = npt.NDArray[np.datetime64]

DAYS_IN_YEAR = 365.0
#: Tenor of a vol column that does not name one: the common 30-day index (common practice).
DEFAULT_TENOR_DAYS = 30
#: A decimal vol above this, or a decimal rate above 1, is taken for a percent by mistake.
HIGHEST_VOL = 5.0
HIGHEST_RATE = 1.0


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Market:
    """A history as arrays over trading days; make one with :meth:`from_frame`.

    Attributes
    ----------
    dates : ndarray of datetime64[D], shape (day,)
        Trading days, increasing: the dates of the price file and nothing else (C1).
    spot : ndarray, shape (day,)
        Closing prices.
    dividend : ndarray, shape (day,)
        Cash per share on the ex-date, else zero.
    rate : ndarray, shape (day,)
        Continuously compounded annual rate of the day; NaN before the first known one.
    dividend_yield : ndarray, shape (day,)
        Continuously compounded trailing yield used for forwards (C5).
    vol_quotes : ndarray, shape (tenor, day)
        Decimal annual vols; no rows when the history has none.
    vol_tenor_days : ndarray, shape (tenor,)
        Calendar days of each row, increasing.
    open, high, low : ndarray, shape (day,), optional
        Opening, highest and lowest prices, NaN where there is none.
    signal : ndarray of bool, shape (day,), optional
        The user's own signal, for gates; between its dates the last one counts, before the first it is off.
    surface : SurfaceQuotes, optional
        Quoted implied vols by expiry and strike, of these trading days.
    day_number : ndarray of int64, shape (day,)
        Days since 1970-01-01.
    log_spot : ndarray, shape (day,)
        Natural logarithm of ``spot``.
    cash_growth, share_growth : ndarray, shape (day,)
        Growth since the first day of one unit of cash, ``exp(r_{t-1} days/365)`` a day, and of the number
        of shares, ``1 + d/S`` at each ex-date close (C9, C11).
    """

    dates: Dates
    spot: Array
    dividend: Array
    rate: Array
    dividend_yield: Array
    vol_quotes: Array
    vol_tenor_days: npt.NDArray[np.int64]
    open: Array | None = None
    signal: npt.NDArray[np.bool_] | None = None
    high: Array | None = None
    low: Array | None = None
    surface: SurfaceQuotes | None = None
    day_number: npt.NDArray[np.int64] = field(init=False)
    cash_growth: Array = field(init=False)
    share_growth: Array = field(init=False)
    log_spot: Array = field(init=False)

    def __post_init__(self) -> None:
        _check_arrays(self)
        day_number = self.dates.astype(np.int64)
        days = np.diff(day_number, prepend=day_number[0])
        # a day without a rate lies before the usable span: it must not spoil the product behind it
        earned = np.concatenate([[0.0], np.nan_to_num(self.rate[:-1])]) * days / DAYS_IN_YEAR
        object.__setattr__(self, "day_number", day_number)
        object.__setattr__(self, "log_spot", np.log(self.spot))
        object.__setattr__(self, "cash_growth", np.cumprod(np.exp(earned)))
        object.__setattr__(self, "share_growth", np.cumprod(1.0 + self.dividend / self.spot))
        for name in ("dates", "spot", "dividend", "rate", "dividend_yield", "vol_quotes", "vol_tenor_days"):
            getattr(self, name).setflags(write=False)
        for name in ("day_number", "log_spot", "cash_growth", "share_growth"):
            getattr(self, name).setflags(write=False)
        for optional in (self.open, self.high, self.low, self.signal):
            if optional is not None:
                optional.setflags(write=False)

    def __len__(self) -> int:
        return len(self.dates)

    @property
    def has_vol(self) -> bool:
        """Whether the history brings implied vols."""
        return len(self.vol_tenor_days) > 0

    @classmethod
    def from_frame(
        cls,
        frame: pd.DataFrame,
        *,
        rate: float | None = None,
        dividend_yield: float | None = None,
        surface: SurfaceQuotes | None = None,
    ) -> Market:
        """Make a market from a pandas frame.

        Parameters
        ----------
        frame : DataFrame
            Index of increasing dates. Columns: ``close``; optional ``dividend`` (cash on the ex-date),
            ``rate`` (annual effective, decimal), and ``vol`` or ``vol_30``, ``vol_93``, ... (decimal
            annual vols, the number being the tenor in calendar days); ``open`` for morning settlement, and with
            ``high`` and ``low`` for the vol estimators that read them (NaN where there is none); ``signal`` (zero
            is off, another number on, none keeps the last) for gates. Other columns are not looked at.
        rate : float, optional
            Constant annual effective rate, decimal, in place of the column; zero if neither is given.
        dividend_yield : float, optional
            Constant annual dividend yield, decimal, for the forwards. Without a ``dividend`` column it is
            also what the share pays, a little every day, so that stock and forward agree.
        surface : SurfaceQuotes, optional
            Quoted vols of the same trading days, from :meth:`~backtest.volatility.SurfaceQuotes.from_frame`.

        Raises
        ------
        MarketError
            For a missing close, dates out of order or repeated, values that are not positive and finite,
            or a vol or rate that looks like a percent; the first such date is named.

        Examples
        --------
        >>> import pandas as pd
        >>> days = pd.bdate_range("2020-01-01", periods=3, name="date")
        >>> frame = pd.DataFrame({"close": [100.0, 101.0, 102.0], "vol": 0.2}, index=days)
        >>> market = Market.from_frame(frame, rate=0.03)
        >>> len(market), market.has_vol, float(market.cash_growth[-1].round(8))
        (3, True, 1.00016198)
        """
        if "close" not in frame.columns:
            raise MarketError(f"the frame has no column 'close'; its columns are: {', '.join(map(str, frame.columns))}")
        for name, value in (("rate", rate), ("dividend_yield", dividend_yield)):
            if value is not None and not isinstance(value, Real):
                raise MarketError(f"{name} is {value!r}; it takes a decimal number (0.05 is 5%)")
        dates = _dates(frame)
        spot = number_column(frame, "close")
        day_number = dates.astype(np.int64)
        if rate is None:
            annual_rate = number_column(frame, "rate") if "rate" in frame.columns else np.zeros(len(dates))
        else:
            annual_rate = np.full(len(dates), float(rate))
        bad = ~np.isnan(annual_rate) & ((annual_rate <= -1) | (annual_rate > HIGHEST_RATE))
        if bad.any():
            raise MarketError(
                f"rate on {dates[bad][0]} is {annual_rate[bad][0]:g}; a decimal rate is above -1 and at most "
                f"{HIGHEST_RATE:g} (0.05 is 5%)"
            )
        dividend = number_column(frame, "dividend") if "dividend" in frame.columns else np.zeros(len(dates))
        if dividend_yield is None:
            carry = trailing_dividend_yield(day_number, spot, dividend)
        else:
            if not -0.5 < dividend_yield <= HIGHEST_RATE:
                raise MarketError(
                    f"dividend yield is {dividend_yield:g}; a decimal yield is above -0.5 and at most "
                    f"{HIGHEST_RATE:g} (0.02 is 2%)"
                )
            carry = np.full(len(dates), np.log1p(dividend_yield))
            if "dividend" not in frame.columns:
                dividend = spot * np.expm1(carry * np.diff(day_number, prepend=day_number[0]) / DAYS_IN_YEAR)
        tenors, quotes = _vol_columns(frame)
        return cls(
            dates=dates,
            spot=spot,
            dividend=dividend,
            rate=np.log1p(annual_rate),
            dividend_yield=carry,
            vol_quotes=quotes,
            vol_tenor_days=tenors,
            **{name: number_column(frame, name) for name in ("open", "high", "low") if name in frame.columns},
            surface=surface,
            signal=_signal(number_column(frame, "signal")) if "signal" in frame.columns else None,
        )


def trailing_dividend_yield(day_number: npt.NDArray[np.int64], spot: Array, dividend: Array) -> Array:
    """``q = ln(1 + D/S)``, ``D`` the cash dividends of the 365 days up to and including the day (C5)."""
    paid = np.concatenate([[0.0], np.cumsum(dividend)])
    first = np.searchsorted(day_number, day_number - 365, side="right")
    with np.errstate(divide="ignore", invalid="ignore"):  # what makes no sense is named by the checks of the market
        return np.log1p((paid[1:] - paid[first]) / spot)


def as_dates(values: Any, what: str) -> Dates:
    """Days of a pandas index; ``what`` begins the sentence of the error.

    Raises
    ------
    MarketError
        If they are no dates.
    """
    if values.dtype.kind in "iufb":
        raise MarketError(f"{what} is not dates: it holds numbers such as {values[0]}")
    if getattr(values, "tz", None) is not None:
        values = values.tz_localize(None)
    try:
        dates: Dates = values.to_numpy().astype("datetime64[D]")
    except (TypeError, ValueError) as error:
        raise MarketError(f"{what} is not dates: {error}") from None
    return dates


def _dates(frame: pd.DataFrame) -> Dates:
    dates = as_dates(frame.index, "the frame's index")
    if len(dates) < 2:
        raise MarketError(f"the frame has {len(dates)} row(s); a market needs at least 2 trading days")
    if np.isnat(dates).any():
        raise MarketError(f"row {int(np.flatnonzero(np.isnat(dates))[0]) + 1} of the frame has no date")
    if (bad := np.flatnonzero(np.diff(dates.astype(np.int64)) <= 0)).size:
        raise MarketError(
            f"dates must increase without repeats, but {dates[bad[0] + 1]} follows {dates[bad[0]]}: sort the frame "
            "and drop repeats"
        )
    return dates


def number_column(frame: pd.DataFrame, name: str) -> Array:
    """A column of a frame as numbers, NaN where there is none; raises MarketError if it holds anything else."""
    try:
        return np.array(frame[name].to_numpy(), dtype=np.float64)
    except (TypeError, ValueError) as error:
        raise MarketError(f"column '{name}' is not all numbers: {error}") from None


def _signal(values: Array) -> npt.NDArray[np.bool_]:
    """The last known value of each day, off before the first."""
    known = ~np.isnan(values)
    last = np.maximum.accumulate(np.where(known, np.arange(len(values)), -1))
    return (last >= 0) & (values[last] != 0.0)


def _vol_columns(frame: pd.DataFrame) -> tuple[npt.NDArray[np.int64], Array]:
    """Tenors in days and quotes; a plain ``vol`` column has the default tenor."""
    named: dict[int, Any] = {}
    for name in map(str, frame.columns):
        if name == "vol":
            tenor = DEFAULT_TENOR_DAYS
        elif name.startswith("vol_") and name[4:].isdigit() and int(name[4:]) > 0:
            tenor = int(name[4:])
        else:
            continue
        if tenor in named:
            raise MarketError(f"two vol columns of {tenor} days; a column 'vol' means {DEFAULT_TENOR_DAYS} days")
        named[tenor] = name
    tenors = np.array(sorted(named), dtype=np.int64)
    quotes = np.array([number_column(frame, named[t]) for t in tenors.tolist()]).reshape(len(tenors), len(frame))
    return tenors, quotes


def _check_arrays(market: Market) -> None:
    n = len(market.dates)
    for name in ("spot", "dividend", "rate", "dividend_yield"):
        if getattr(market, name).shape != (n,):
            raise MarketError(
                f"{name} has shape {getattr(market, name).shape}; it must be ({n},), one value a trading day"
            )
    if market.vol_quotes.shape != (len(market.vol_tenor_days), n):
        raise MarketError(
            f"vol_quotes has shape {market.vol_quotes.shape}; it must be ({len(market.vol_tenor_days)}, {n})"
        )
    for name, values, bad, rule in (
        ("close", market.spot, ~(np.isfinite(market.spot) & (market.spot > 0)), "above 0"),
        (
            "dividend",
            market.dividend,
            ~(np.isfinite(market.dividend) & (market.dividend > -market.spot)),
            "above minus the price",
        ),
        (
            "dividend_yield",
            market.dividend_yield,
            ~np.isfinite(market.dividend_yield),
            "(a year's dividends add up to more than minus the price)",
        ),
    ):
        if bad.any():
            raise MarketError(
                f"{name} on {market.dates[bad][0]} is {values[bad][0]:g}; it must be a finite number {rule}"
            )
    for name in ("open", "high", "low"):
        values = getattr(market, name)
        if values is not None and values.shape != (n,):
            raise MarketError(f"{name} has shape {values.shape}; it must be ({n},), one value a trading day")
        if values is not None and (bad := values <= 0).any():
            raise MarketError(f"{name} on {market.dates[bad][0]} is {values[bad][0]:g}; it must be a number above 0")
    if market.surface is not None and not np.array_equal(market.surface.dates, market.dates):
        raise MarketError("the surface was made for other trading days than those of the prices")
    known = ~np.isnan(market.vol_quotes)
    wrong = known & ~((market.vol_quotes > 0) & (market.vol_quotes <= HIGHEST_VOL))
    if wrong.any():
        day = int(np.flatnonzero(wrong.any(axis=0))[0])
        shown = market.vol_quotes[wrong[:, day], day][0]
        raise MarketError(
            f"vol on {market.dates[day]} is {shown:g}; a decimal vol is above 0 and at most "
            f"{HIGHEST_VOL:g} (0.20 is 20%)"
        )
