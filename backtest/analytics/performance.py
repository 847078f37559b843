"""Performance figures of one wealth path (C11).

Daily figures use simple returns; monthly figures use whole calendar months only,
so the stretch from inception to the first month-end, and an unfinished last month,
are left out of them. A figure that cannot be had (no variation, too few months) is NaN.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy import stats
from scipy.optimize import minimize_scalar

from ..volatility.realised import TRADING_DAYS
from .drawdowns import Drawdown, deepest_drawdown, drawdown_path

Array = npt.NDArray[np.float64]
Dates = npt.NDArray[np.datetime64]

DAYS_IN_CALENDAR_YEAR = 365.25
MONTHS_IN_YEAR = 12
#: Fewer whole months than this and no monthly figure is given.
FEWEST_MONTHS = 12
#: A power of Leland's under this is taken for zero.
SMALLEST_POWER = 1e-8
#: A standard deviation under this is rounding, not variation.
SMALLEST_SPREAD = 1e-13
#: The worst share of returns that an expected shortfall averages.
TAIL = 0.05


@dataclass(frozen=True, slots=True, kw_only=True)
class Performance:
    """Figures of C11; decimals, annual where the name says so or C11 does.

    ``expected_shortfall_*`` are returns (negative when a loss); ``stutzer`` is per month;
    ``capture_up`` and ``capture_down`` are ratios to the hold's.
    """

    annual_return: float
    volatility: float
    sharpe: float
    sortino: float
    max_drawdown: float
    max_drawdown_peak: np.datetime64 | None
    max_drawdown_trough: np.datetime64 | None
    max_drawdown_recovery: np.datetime64 | None
    calmar: float
    ulcer: float
    beta: float
    alpha: float
    leland_beta: float
    leland_alpha: float
    stutzer: float
    capture_up: float
    capture_down: float
    expected_shortfall_daily: float
    expected_shortfall_monthly: float
    skewness: float
    excess_kurtosis: float
    months: int


def performance(wealth: Array, *, dates: Dates, rate_return: Array, hold: Array) -> Performance:
    """All figures of C11 for one path.

    Parameters
    ----------
    wealth, hold : ndarray, shape (day,)
        Growth of 1 of the path and of buy-and-hold on the same days.
    dates : ndarray of datetime64[D], shape (day,)
    rate_return : ndarray, shape (day,)
        Return on cash over each day; the first is not used.
    """
    excess, hold_excess = daily_excess(wealth, rate_return), daily_excess(hold, rate_return)
    returns = wealth[1:] / wealth[:-1] - 1.0
    deepest = deepest_drawdown(wealth)
    annual = annual_return(wealth, dates)
    beta = regression_beta(excess, hold_excess)
    months, monthly = _monthly_figures(wealth, dates=dates, rate_return=rate_return, hold=hold)
    return Performance(
        annual_return=annual,
        volatility=float(annual_volatility(returns)),
        sharpe=float(sharpe_ratio(excess)),
        sortino=_sortino(excess),
        max_drawdown=deepest.depth,
        max_drawdown_peak=_date(dates, deepest.peak),
        max_drawdown_trough=_date(dates, deepest.trough),
        max_drawdown_recovery=_date(dates, deepest.recovery),
        calmar=_calmar(annual, deepest),
        ulcer=float(np.sqrt(np.mean(drawdown_path(wealth) ** 2))),
        beta=beta,
        alpha=float(TRADING_DAYS * (np.mean(excess) - beta * np.mean(hold_excess))),
        expected_shortfall_daily=expected_shortfall(returns),
        months=months,
        **monthly,
    )


def years_between(dates: Dates) -> float:
    """Calendar years from the first to the last day, ``days / 365.25`` (C11)."""
    return float((dates[-1] - dates[0]) / np.timedelta64(1, "D")) / DAYS_IN_CALENDAR_YEAR


def annual_return(wealth: Array, dates: Dates) -> float:
    """``(W_end / W_0)^(1/years) - 1``; under one year the total return, never annualised (C11)."""
    years = years_between(dates)
    total = wealth[-1] / wealth[0]
    return float(total ** (1.0 / years) - 1.0) if years >= 1.0 else float(total - 1.0)


def annual_volatility(returns: Array) -> Array:
    """``std(R, ddof=1) sqrt(252)`` along the last axis; NaN for fewer than two returns (C11)."""
    return sample_spread(returns) * np.sqrt(TRADING_DAYS)


def sample_spread(values: Array) -> Array:
    """Sample standard deviation along the last axis; NaN for fewer than two values."""
    if values.shape[-1] < 2:
        return np.full(values.shape[:-1], np.nan)
    return np.std(values, axis=-1, ddof=1)


def sharpe_ratio(excess: Array) -> Array:
    """``mean(X) / std(X, ddof=1) sqrt(252)`` along the last axis; NaN without variation (Sharpe 1994, C11)."""
    spread = sample_spread(excess)
    varies = spread > SMALLEST_SPREAD
    ratio = np.divide(np.mean(excess, axis=-1), spread, out=np.full(np.shape(spread), np.nan), where=varies)
    return ratio * np.sqrt(TRADING_DAYS)


def daily_excess(wealth: Array, rate_return: Array) -> Array:
    """``X = R - rf`` along the last axis, one shorter than ``wealth`` (C11)."""
    return wealth[..., 1:] / wealth[..., :-1] - 1.0 - rate_return[1:]


def regression_beta(excess: Array, hold_excess: Array) -> float:
    """Slope of the regression of ``excess`` on ``hold_excess``; NaN when the latter does not vary."""
    centred = hold_excess - np.mean(hold_excess)
    variation = float(np.mean(centred * centred))
    if not variation > SMALLEST_SPREAD**2:
        return float("nan")
    return float(np.mean(centred * (excess - np.mean(excess)))) / variation


def expected_shortfall(returns: Array) -> float:
    """Mean of the worst 5% of returns, at least one of them; NaN for none (C11).

    The number averaged is 5% of the sample rounded up.
    """
    if returns.size == 0 or not np.isfinite(returns).all():
        return float("nan")
    worst = int(np.ceil(TAIL * returns.size - 1e-9))
    return float(np.mean(np.partition(returns, worst - 1)[:worst]))


def month_ends(dates: Dates) -> npt.NDArray[np.intp]:
    """Positions of the last trading day of each finished calendar month, increasing.

    The last month counts as finished when no weekday of it is left after the last date.
    """
    month = dates.astype("datetime64[M]")
    ends = np.flatnonzero(month[1:] != month[:-1])
    weekday_after = np.busday_offset(dates[-1], 1, roll="backward")
    if weekday_after.astype("datetime64[M]") != month[-1]:
        ends = np.append(ends, len(dates) - 1)
    return ends


@dataclass(frozen=True, slots=True, kw_only=True)
class MonthlyReturns:
    """Returns over whole calendar months, shape ``(month,)``, and the cash return of the same months."""

    returns: Array
    cash: Array
    months: npt.NDArray[np.datetime64]


def monthly_returns(wealth: Array, *, dates: Dates, rate_return: Array) -> MonthlyReturns:
    """Returns from month-end to month-end; empty when there is no whole month."""
    ends = month_ends(dates)
    cash = np.cumprod(1.0 + np.concatenate([[0.0], rate_return[1:]]))
    at_end, cash_at_end = wealth[ends], cash[ends]
    return MonthlyReturns(
        returns=at_end[1:] / at_end[:-1] - 1.0,
        cash=cash_at_end[1:] / cash_at_end[:-1] - 1.0,
        months=dates[ends[1:]].astype("datetime64[M]"),
    )


def _sortino(excess: Array) -> float:
    downside = float(np.sqrt(np.mean(np.minimum(excess, 0.0) ** 2)))
    if not downside > SMALLEST_SPREAD:
        return float("nan")
    return float(np.mean(excess) * TRADING_DAYS / (downside * np.sqrt(TRADING_DAYS)))


def _calmar(annual: float, deepest: Drawdown) -> float:
    return annual / abs(deepest.depth) if deepest.depth < 0 else float("nan")


def _date(dates: Dates, position: int | None) -> np.datetime64 | None:
    return None if position is None else dates[position]


def _monthly_figures(wealth: Array, *, dates: Dates, rate_return: Array, hold: Array) -> tuple[int, dict[str, float]]:
    """The number of whole months, and the figures of C11 that stand on monthly returns."""
    own = monthly_returns(wealth, dates=dates, rate_return=rate_return)
    market = monthly_returns(hold, dates=dates, rate_return=rate_return)
    names = (
        "leland_beta", "leland_alpha", "stutzer", "capture_up", "capture_down",
        "expected_shortfall_monthly", "skewness", "excess_kurtosis",
    )  # fmt: skip
    figures: dict[str, float] = dict.fromkeys(names, float("nan"))
    months = len(own.returns)
    if months < FEWEST_MONTHS or not np.isfinite(own.returns).all():
        return months, figures
    figures["leland_beta"], figures["leland_alpha"] = leland(own.returns, market.returns, own.cash)
    log_excess = np.log1p(own.returns) - np.log1p(own.cash)
    figures["stutzer"] = stutzer_index(log_excess)
    figures["capture_up"] = _capture(own.returns, market.returns, market.returns > 0)
    figures["capture_down"] = _capture(own.returns, market.returns, market.returns < 0)
    figures["expected_shortfall_monthly"] = expected_shortfall(own.returns)
    log_returns = np.log1p(own.returns)
    if np.std(log_returns) > 1e-12:
        figures["skewness"] = float(stats.skew(log_returns, bias=False))
        figures["excess_kurtosis"] = float(stats.kurtosis(log_returns, bias=False))
    return months, figures


def leland(returns: Array, market: Array, cash: Array) -> tuple[float, float]:
    """Beta and annual alpha of Leland (1999), from monthly returns (C11).

    "Beyond mean-variance: performance measurement in a nonsymmetrical world", Financial Analysts Journal
    55(1), equations 5 to 7: ``b = (ln E[1+R_m] - ln(1+rf)) / Var[ln(1+R_m)]``,
    ``beta = cov(R, -(1+R_m)^-b) / cov(R_m, -(1+R_m)^-b)``,
    ``alpha = E[R] - beta (E[R_m] - rf) - rf``, ``rf`` the mean cash return.
    """
    rate = float(np.mean(cash))
    spread = float(np.var(np.log1p(market), ddof=1))
    if not spread > SMALLEST_SPREAD**2:
        return float("nan"), float("nan")
    power = (np.log1p(np.mean(market)) - np.log1p(rate)) / spread
    # a market that earns what cash does has a power of zero, and weights all alike: their limit is the logarithm
    weight = -((1.0 + market) ** -power) if abs(power) > SMALLEST_POWER else np.log1p(market)
    weight = weight - np.mean(weight)
    beta = float(np.sum(weight * returns) / np.sum(weight * market))
    alpha = float(np.mean(returns) - beta * (np.mean(market) - rate) - rate)
    return beta, alpha * MONTHS_IN_YEAR


def stutzer_index(log_excess: Array) -> float:
    """Performance index of Stutzer (2000), per period.

    "A portfolio performance index", Financial Analysts Journal 56(3): ``sign(mean) sqrt(2 I)`` with
    ``I = max over theta of -ln mean(exp(theta x))``. For normal returns it is the Sharpe ratio. NaN when
    all returns have one sign (the maximum is then at infinity).
    """
    mean, spread = float(np.mean(log_excess)), float(np.std(log_excess))
    if not spread > 0 or log_excess.min() >= 0 or log_excess.max() <= 0:
        return float("nan")
    if mean == 0:
        return 0.0
    centre = -mean / spread**2  # the answer for normal returns

    def negative_rate(scale: float) -> float:
        exponent = scale * centre * log_excess
        peak = float(exponent.max())
        return peak + float(np.log(np.mean(np.exp(exponent - peak))))

    found = minimize_scalar(negative_rate, bracket=(0.0, 1.0), method="brent", options={"xtol": 1e-12})
    return float(np.sign(mean) * np.sqrt(max(0.0, -2.0 * found.fun)))


def _capture(returns: Array, market: Array, chosen: npt.NDArray[np.bool_]) -> float:
    """Geometric mean monthly return over the chosen months, as a ratio to the hold's."""
    if not chosen.any():
        return float("nan")
    own, other = (float(np.expm1(np.mean(np.log1p(r[chosen])))) for r in (returns, market))
    return own / other if other != 0 else float("nan")
