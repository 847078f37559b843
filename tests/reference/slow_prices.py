"""What the slow twin knows of prices and vols: raw columns, Black, SSVI, values of options (C1, C5, C7, C8).

Plain Python, borrowing nothing from ``backtest``; see ``slow_twin.py``.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from datetime import date, timedelta
from functools import cache
from itertools import pairwise
from typing import Any

from scipy.optimize import brentq


@dataclass
class History:
    """Raw columns as lists over trading days; rates and yields continuously compounded."""

    days: list[date]
    close: list[float]
    dividend: list[float]  # cash on the ex-date
    rate: list[float]
    dividend_yield: list[float]
    vols: dict[int, list[float]]  # tenor in days -> decimal quotes
    open: list[float] | None = None
    signal: list[float] | None = None  # NaN where a day brings none


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
    opens, signal = ([float(v) for v in frame[name]] if name in frame else None for name in ("open", "signal"))
    return History(
        days=days,
        close=close,
        dividend=cash,
        rate=[math.log(1.0 + y) for y in effective],  # C5
        dividend_yield=carry,
        vols=vols,
        open=opens,
        signal=signal,
    )


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
        self.seen: dict[int, list[tuple[float, float]]] = {}
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
        """Pairs of tenor in years and annual at-the-money variance; worked out once a day."""
        if t not in self.seen:
            self.seen[t] = self.variances_of_the_day(t)
        return self.seen[t]

    def variances_of_the_day(self, t: int) -> list[tuple[float, float]]:
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


# ---------------------------------------------------------------- options (C5, C8)


@dataclass(frozen=True)
class Contract:
    """What an option pays, whoever holds it."""

    right: str
    expiry: date
    strike: float


@dataclass
class Pricer:
    """Values of options on a day, from the day's own data (C4, C5, C7, C8)."""

    history: History
    vols: Vols

    def tau(self, t: int, expiry: date) -> float:
        return (expiry - self.history.days[t]).days / 365.0

    def forward(self, t: int, expiry: date) -> float:
        h = self.history
        return h.close[t] * math.exp((h.rate[t] - h.dividend_yield[t]) * self.tau(t, expiry))

    def sigma(self, t: int, option: Contract) -> float:
        return self.vols.sigma(t, self.tau(t, option.expiry), self.forward(t, option.expiry), option.strike)

    def at_vol(self, t: int, option: Contract, sigma: float) -> float:
        tau = self.tau(t, option.expiry)
        value = black(option.right, self.forward(t, option.expiry), option.strike, sigma * math.sqrt(tau))
        return math.exp(-self.history.rate[t] * tau) * value

    def mid(self, t: int, option: Contract) -> float:
        if option.expiry == self.history.days[t]:
            return black(option.right, self.history.close[t], option.strike, 0.0)
        return self.at_vol(t, option, self.sigma(t, option))

    def delta(self, t: int, option: Contract) -> float:
        """Spot delta at the strike's own volatility (C5)."""
        tau, forward = self.tau(t, option.expiry), self.forward(t, option.expiry)
        stdev = self.sigma(t, option) * math.sqrt(tau)
        d1 = math.log(forward / option.strike) / stdev + 0.5 * stdev
        sign = 1.0 if option.right == "call" else -1.0
        return sign * math.exp(-self.history.dividend_yield[t] * tau) * normal(sign * d1)

    def trading_cost(self, t: int, option: Contract, costs: Any) -> float:
        """C8: per option, for bought and sold alike."""
        mid, sigma = self.mid(t, option), self.sigma(t, option)
        half_spread = max(
            costs.half_spread_percent / 100.0 * mid,
            self.at_vol(t, option, sigma + costs.half_spread_vol / 100.0) - mid,
            costs.half_spread_min,
        )
        return half_spread + costs.commission / costs.multiplier
