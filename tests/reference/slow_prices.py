"""What the slow twin knows of dates, prices and vols: raw columns, listed expiries, Black, SSVI (C1, C2, C5, C7).

Plain Python, borrowing nothing from ``backtest``; see ``slow_twin.py``.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, field
from datetime import date, timedelta
from functools import cache
from itertools import pairwise
from typing import Any

from scipy.optimize import brentq

MONTHS_IN_ROLL = {"month": 1, "quarter": 3, "half": 6, "year": 12}


@dataclass
class History:
    """Raw columns as lists over trading days; rates and yields continuously compounded."""

    days: list[date]
    close: list[float]
    dividend: list[float]  # cash on the ex-date
    rate: list[float]
    dividend_yield: list[float]
    vols: dict[int, list[float]]  # tenor in days -> decimal quotes


def history_from_frame(frame: Any, rate: float | None = None, dividend_yield: float | None = None) -> History:
    """The same frame and constants that the engine's ``Market.from_frame`` takes."""
    days = [stamp.date() for stamp in frame.index]
    close = [float(v) for v in frame["close"]]
    n = len(days)
    effective = [float(v) for v in frame["rate"]] if "rate" in frame else [0.0] * n
    if rate is not None:
        effective = [rate] * n
    cash = [float(v) for v in frame["dividend"]] if "dividend" in frame else [0.0] * n
    if dividend_yield is None:
        # C5: cash dividends with ex-dates in the 365 days up to and including the day
        paid = [(day, amount) for day, amount in zip(days, cash) if amount != 0.0]
        carry = []
        for day, spot in zip(days, close):
            last_year = math.fsum(amount for ex, amount in paid if day - timedelta(days=365) < ex <= day)
            carry.append(math.log(1.0 + last_year / spot))
    else:
        carry = [math.log(1.0 + dividend_yield)] * n
        if "dividend" not in frame:  # then the share pays the constant yield, a little every day
            for t in range(1, n):
                cash[t] = close[t] * (math.exp(carry[t] * (days[t] - days[t - 1]).days / 365.0) - 1.0)
    vols = {}
    for name in frame.columns:
        if name == "vol" or name.startswith("vol_"):
            vols[30 if name == "vol" else int(name[4:])] = [float(v) for v in frame[name]]
    continuous = [math.log(1.0 + y) for y in effective]  # C5
    return History(days=days, close=close, dividend=cash, rate=continuous, dividend_yield=carry, vols=vols)


# ---------------------------------------------------------------- dates (C1, C2)


def third_friday(month: int) -> date:
    """Third Friday of a month counted as ``12 * year + (1..12) - 1``."""
    first = date(month // 12, month % 12 + 1, 1)
    return first + timedelta(days=(4 - first.weekday()) % 7 + 14)


@dataclass
class Calendar:
    """Listed expiries on the days of the price file."""

    days: list[date]
    known: set[date] = field(init=False)

    def __post_init__(self) -> None:
        self.known = set(self.days)

    def expiry(self, month: int) -> date | None:
        """C2; None for a third Friday before the file begins, where nothing can be known."""
        day = third_friday(month)
        if day > self.days[-1]:
            return day  # after the last price: taken as it falls
        if day < self.days[0]:
            return None
        while day not in self.known:
            day -= timedelta(days=1)
        return day

    def roll_months(self, leg: Any) -> list[int]:
        """Months in which the leg rolls, from before the file to well after it."""
        step = MONTHS_IN_ROLL[leg.roll]
        first, last = 12 * self.days[0].year, 12 * self.days[-1].year + 12 + 2 * step
        return [m for m in range(first, last) if (m % 12 + 1 - leg.phase) % step == 0]

    def roll_month_of(self, leg: Any, day: date) -> int | None:
        """The roll month whose roll date is ``day``, if there is one."""
        return next((m for m in self.roll_months(leg) if self.expiry(m) == day), None)

    def terms(self, leg: Any, day: date) -> tuple[date, date, bool]:
        """For an option opened on ``day``: its expiry, the day it is closed or settled, whether it is a stub (C3)."""
        step = MONTHS_IN_ROLL[leg.roll]
        month = self.roll_month_of(leg, day)
        stub = month is None
        if month is None:
            # held to the leg's next roll; the option is the one the rule would be holding already
            upcoming = next(m for m in self.roll_months(leg) if (e := self.expiry(m)) is not None and e > day)
            month = upcoming - step
        expiry, close = self.expiry(month + leg.term), self.expiry(month + step)
        assert expiry is not None
        assert close is not None
        return expiry, close, stub


# ---------------------------------------------------------------- prices (C5)


def normal(z: float) -> float:
    """Standard normal distribution function."""
    return 0.5 * math.erfc(-z / math.sqrt(2.0))


def black(right: str, forward: float, strike: float, stdev: float) -> float:
    """Undiscounted Black value; ``stdev`` is ``sigma sqrt(tau)``."""
    sign = 1.0 if right == "call" else -1.0
    if stdev == 0.0:
        return max(sign * (forward - strike), 0.0)
    d1 = math.log(forward / strike) / stdev + 0.5 * stdev
    return sign * (forward * normal(sign * d1) - strike * normal(sign * (d1 - stdev)))


# ---------------------------------------------------------------- volatility (C7)


def smile_total_variance(smile: Any, theta: float, x: float) -> float:
    """SSVI, or the same variance at every strike for a flat smile."""
    if not hasattr(smile, "rho"):
        return theta
    phi = smile.eta / (theta**smile.gamma * (1.0 + theta) ** (1.0 - smile.gamma))
    root = math.sqrt((phi * x + smile.rho) ** 2 + 1.0 - smile.rho**2)
    return 0.5 * theta * (1.0 + smile.rho * phi * x + root)


# x = exp(u - exp(-u)) in even steps of u integrates a smooth function with an exponential tail over (0, inf)
# to rounding error (Takahasi and Mori 1974); pairs of x and its weight
STEP = 1.0 / 24.0
NODES = [
    (x, x * (1.0 + math.exp(-u)) * STEP)
    for u in (STEP * i for i in range(-90, 120))
    for x in [math.exp(u - math.exp(-u))]
]


def fair_total_variance(smile: Any, theta: float) -> float:
    """C7: 2 * integral of out-of-the-money price / K^2 dK, undiscounted, F = 1; here over x = ln K."""
    width = math.sqrt(theta)
    total = 0.0
    for side in (-1.0, 1.0):  # puts below the forward, calls above
        for distance, weight in NODES:
            x = side * width * distance
            if abs(x) > 100.0:  # nothing is left there, and exp(-x) would run away
                continue
            stdev = math.sqrt(smile_total_variance(smile, theta, x))
            d1 = -x / stdev + 0.5 * stdev
            # the Black price over K, written so that a far strike does not cancel; dK / K = dx
            over_strike = side * (math.exp(-x) * normal(side * d1) - normal(side * (d1 - stdev)))
            total += over_strike * width * weight
    return 2.0 * total


@cache
def atm_total_variance_of_swap(smile: Any, swap: float) -> float:
    """The theta whose smile gives back a quoted fair total variance."""
    if not hasattr(smile, "rho"):
        return swap
    # solved for the share of the quote that is at the money, so that the tolerance is relative
    share = brentq(lambda x: fair_total_variance(smile, x * swap) / swap - 1.0, 0.2, 1.1, xtol=1e-15, rtol=1e-15)
    return float(share) * swap


@dataclass
class Vols:
    """At-the-money variances of each day and the smile on them."""

    history: History
    volatility: Any

    def __post_init__(self) -> None:
        source = self.volatility.source
        self.realised = None
        if hasattr(source, "window") or (source is None and not self.history.vols):
            self.realised = (source.window, source.markup) if source is not None else (63, 1.0)

    def known(self, t: int) -> bool:
        """Whether the day has a volatility for every tenor."""
        if self.realised is not None:
            return t >= self.realised[0]  # a window of log returns needs one close more
        return not any(math.isnan(series[t]) for series in self.history.vols.values())

    def atm_variances(self, t: int) -> list[tuple[float, float]]:
        """Pairs of tenor in years and annual at-the-money variance."""
        if self.realised is not None:
            window, markup = self.realised
            close = self.history.close
            returns = [math.log(close[i] / close[i - 1]) for i in range(t - window + 1, t + 1)]
            mean = math.fsum(returns) / window
            variance = math.fsum((x - mean) ** 2 for x in returns) / (window - 1)  # ddof 1
            return [(1.0, markup**2 * variance * 252.0)]  # C7a; always at the money
        pairs = []
        for tenor in sorted(self.history.vols):
            years, variance = tenor / 365.0, self.history.vols[tenor][t] ** 2
            if self.volatility.quote == "variance swap":
                variance = atm_total_variance_of_swap(self.volatility.smile, variance * years) / years
            pairs.append((years, variance))
        return pairs

    def sigma(self, t: int, tau: float, forward: float, strike: float) -> float:
        """Annual volatility at a strike."""
        pairs = self.atm_variances(t)
        if tau <= pairs[0][0]:
            theta = pairs[0][1] * tau  # flat before the first tenor
        elif tau >= pairs[-1][0]:
            theta = pairs[-1][1] * tau  # and beyond the last
        else:
            for (years0, var0), (years1, var1) in pairwise(pairs):
                if years0 <= tau <= years1:
                    share = (tau - years0) / (years1 - years0)
                    theta = (1.0 - share) * var0 * years0 + share * var1 * years1
        return math.sqrt(smile_total_variance(self.volatility.smile, theta, math.log(strike / forward)) / tau)
