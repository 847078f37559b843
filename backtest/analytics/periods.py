"""Calendar tables, best and worst periods, and rolling figures (the last axis is time)."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from ..volatility.realised import TRADING_DAYS
from .performance import SMALLEST_SPREAD, annual_volatility, month_ends

Array = npt.NDArray[np.float64]
Dates = npt.NDArray[np.datetime64]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class CalendarTable:
    """Returns of calendar years and months.

    Attributes
    ----------
    years : ndarray of int, shape (year,)
    monthly : ndarray, shape (year, 12)
        Return of each month, NaN outside the path; the first and last may be parts of a month.
    yearly : ndarray, shape (year,)
        Return of each year, or of the part of it that the path covers.
    whole_month : ndarray of bool, shape (year, 12)
    """

    years: npt.NDArray[np.int64]
    monthly: Array
    yearly: Array
    whole_month: npt.NDArray[np.bool_]


def calendar_table(wealth: Array, dates: Dates) -> CalendarTable:
    """Returns by calendar year and month of one path, shape ``(day,)``; parts of months and years as they are.

    The months of a year compound to the year's return, and the years to the whole path's.
    """
    month = dates.astype("datetime64[M]").astype(np.int64)
    ends = np.append(np.flatnonzero(month[1:] != month[:-1]), len(dates) - 1)
    # a path that begins on the last day of a month has no return in that month
    starts = np.concatenate([[0], ends[:-1]])
    growth = wealth[ends] / wealth[starts]
    number = month[ends]
    first_year = int(number[0] // 12) + 1970
    years = np.arange(first_year, int(number[-1] // 12) + 1970 + 1)
    monthly = np.full((len(years), 12), np.nan)
    whole = np.zeros(monthly.shape, dtype=bool)
    row, column = number // 12 + 1970 - first_year, number % 12
    moved = ends > starts
    monthly[row[moved], column[moved]] = growth[moved] - 1.0
    finished = np.isin(ends, month_ends(dates))
    whole[row, column] = finished & (starts > 0)
    if len(ends) > 0 and ends[0] == 0:
        # ...but then the next month is whole: it begins on a month-end
        whole[row[1:2], column[1:2]] = finished[1:2]
    # months outside the path count for nothing; one without a return because wealth is lost leaves the year without
    inside = np.zeros(monthly.shape, dtype=bool)
    inside[row[moved], column[moved]] = True
    yearly = np.where(inside.any(axis=1), np.prod(np.where(inside, 1.0 + monthly, 1.0), axis=1) - 1.0, np.nan)
    return CalendarTable(years=years, monthly=monthly, yearly=yearly, whole_month=whole)


@dataclass(frozen=True, slots=True, kw_only=True)
class Extreme:
    """One stretch and its return."""

    first: np.datetime64
    last: np.datetime64
    value: float


def best_and_worst(wealth: Array, dates: Dates, *, months: int) -> tuple[Extreme, Extreme] | None:
    """Best and worst return over any ``months`` whole calendar months in a row; None if there are too few."""
    ends = month_ends(dates)
    if len(ends) <= months:
        return None
    start, stop = ends[:-months], ends[months:]
    returns = wealth[stop] / wealth[start] - 1.0
    if not np.isfinite(returns).all():
        return None
    high, low = int(np.argmax(returns)), int(np.argmin(returns))
    best, worst = (Extreme(first=dates[start[i]], last=dates[stop[i]], value=float(returns[i])) for i in (high, low))
    return best, worst


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Rolling:
    """Figures over trailing windows, each of shape ``(day,)``; NaN until the window is full."""

    annual_return: Array
    volatility: Array
    max_drawdown: Array
    beta: Array


def rolling_figures(wealth: Array, *, hold: Array, rate_return: Array, years: int) -> Rolling:
    """Return, volatility, drawdown and beta over the trailing ``years`` of 252 trading days each.

    The drawdown is the deepest inside the window; beta is that of C11 on the window's excess returns.
    """
    days = int(years * TRADING_DAYS)
    shape = wealth.shape
    nothing = np.full(shape, np.nan)
    found = {name: nothing.copy() for name in Rolling.__dataclass_fields__}
    if len(wealth) <= days:
        return Rolling(**found)
    returns = wealth[1:] / wealth[:-1] - 1.0
    excess, hold_excess = returns - rate_return[1:], hold[1:] / hold[:-1] - 1.0 - rate_return[1:]
    window = np.lib.stride_tricks.sliding_window_view
    found["annual_return"][days:] = (wealth[days:] / wealth[:-days]) ** (1.0 / years) - 1.0
    found["volatility"][days:] = annual_volatility(window(returns, days))
    own, other = window(excess, days), window(hold_excess, days)
    centred = other - other.mean(axis=-1, keepdims=True)
    variation = np.sum(centred * centred, axis=-1)
    covariation = np.sum(centred * own, axis=-1)
    varies = variation > days * SMALLEST_SPREAD**2
    found["beta"][days:] = np.divide(covariation, variation, out=np.full(len(variation), np.nan), where=varies)
    paths = window(wealth, days + 1)
    found["max_drawdown"][days:] = (paths / np.maximum.accumulate(paths, axis=-1)).min(axis=-1) - 1.0
    return Rolling(**found)
