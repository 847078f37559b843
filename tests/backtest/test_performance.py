"""Figures of C11.

Rung: identity (series of a few numbers, worked by hand in the comments), independent library (pandas, scipy,
statsmodels on random series) and published value (Leland 1999, Stutzer 2000).
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt
import pandas as pd
import pytest
import statsmodels.api as sm
from scipy import optimize, stats

from backtest.analytics import drawdown_path, performance
from backtest.analytics.performance import (
    Performance,
    annual_return,
    annual_volatility,
    expected_shortfall,
    leland,
    month_ends,
    monthly_returns,
    regression_beta,
    sharpe_ratio,
    stutzer_index,
    years_between,
)

Array = npt.NDArray[np.float64]

ROOT_252 = 252**0.5


def days(*dates: str) -> npt.NDArray[np.datetime64]:
    return np.array(dates, dtype="datetime64[D]")


def grown(returns: list[float] | Array) -> Array:
    """Growth of 1 from simple returns."""
    return np.cumprod(np.concatenate([[1.0], 1.0 + np.asarray(returns)]))


# ---------------------------------------------------------------- five days, worked by hand

# returns        .20   .10  -.10  -.10     mean .025, deviations .175 .075 -.125 -.125,
# cash           .01   .01   .01   .01     squares .030625 .005625 .015625 .015625, sum .0675, over 3 .0225, root .15
# excess         .19   .09  -.11  -.11     mean .015, the same deviation .15
# wealth   1.0  1.2   1.32  1.188 1.0692   drawdowns 0 0 0 -.1 -.19
# hold's excess  .20   .10  -.10  -.20     mean 0, sum of squares .04 + .01 + .01 + .04 = .10
FOUR_YEARS = days("2000-01-01", "2000-06-01", "2001-06-01", "2002-06-01", "2004-01-01")  # 1461 days
RETURNS = [0.20, 0.10, -0.10, -0.10]
HOLD = grown([0.21, 0.11, -0.09, -0.19])
CASH = np.array([np.nan, 0.01, 0.01, 0.01, 0.01])  # the first is not used


@pytest.fixture(scope="module")
def five() -> Performance:
    return performance(grown(RETURNS), dates=FOUR_YEARS, rate_return=CASH, hold=HOLD)


def test_five_days_return_and_risk(five: Performance) -> None:
    assert five.annual_return == pytest.approx(1.0692 ** (1 / 4) - 1, rel=1e-14)
    assert five.volatility == pytest.approx(0.15 * ROOT_252, rel=1e-14)
    # .015 / .15 is one tenth
    assert five.sharpe == pytest.approx(0.1 * ROOT_252, rel=1e-13)
    # two excess returns of -.11: mean square 2 x .0121 / 4 = .00605
    assert five.sortino == pytest.approx(0.015 * 252 / (0.00605**0.5 * ROOT_252), rel=1e-13)
    # the worst 5% of four returns is one of them
    assert five.expected_shortfall_daily == pytest.approx(-0.10, rel=1e-14)


def test_five_days_drawdown(five: Performance) -> None:
    assert five.max_drawdown == pytest.approx(-0.19, rel=1e-14)
    assert five.max_drawdown_peak == np.datetime64("2001-06-01")
    assert five.max_drawdown_trough == np.datetime64("2004-01-01")
    assert five.max_drawdown_recovery is None
    assert five.calmar == pytest.approx((1.0692 ** (1 / 4) - 1) / 0.19, rel=1e-14)
    # mean square over the five days: (.01 + .0361) / 5 = .00922
    assert five.ulcer == pytest.approx(0.00922**0.5, rel=1e-14)


def test_five_days_beta(five: Performance) -> None:
    # .19 x .20 + .09 x .10 + .11 x .10 + .11 x .20 = .038 + .009 + .011 + .022 = .080, over .10
    assert five.beta == pytest.approx(0.8, rel=1e-13)
    # the hold's mean excess is zero, so alpha is the own mean: .015 x 252
    assert five.alpha == pytest.approx(3.78, rel=1e-12)


def test_too_few_months_give_no_monthly_figures(five: Performance) -> None:
    assert five.months == 3
    for name in (
        "leland_beta", "leland_alpha", "stutzer", "capture_up", "capture_down", "expected_shortfall_monthly",
        "skewness", "excess_kurtosis",
    ):  # fmt: skip
        assert np.isnan(getattr(five, name))


def test_never_annualised_under_a_year() -> None:
    wealth = np.array([1.0, 1.1])
    assert annual_return(wealth, days("2019-01-01", "2019-12-31")) == pytest.approx(0.1, rel=1e-14)
    # 365 days are 365/365.25 of a year, under one; 366 days are over
    assert annual_return(wealth, days("2019-01-01", "2020-01-01")) == pytest.approx(0.1, rel=1e-14)
    assert annual_return(wealth, days("2019-01-01", "2020-01-02")) == pytest.approx(
        1.1 ** (365.25 / 366) - 1, rel=1e-14
    )
    assert years_between(days("2000-01-01", "2004-01-01")) == 4.0


# ---------------------------------------------------------------- thirteen month-ends, worked by hand

MONTH_ENDS = pd.bdate_range("2018-12-01", "2019-12-31", freq="BME").to_numpy().astype("datetime64[D]")
HOLD_MONTHS = [0.10, -0.10] * 6
OWN_MONTHS = [0.05, -0.08] * 6


@pytest.fixture(scope="module")
def year() -> Performance:
    return performance(grown(OWN_MONTHS), dates=MONTH_ENDS, rate_return=np.zeros(13), hold=grown(HOLD_MONTHS))


def test_twelve_months(year: Performance) -> None:
    assert year.months == 12
    # every up month of the hold is +10% and the own +5%; down -10% and -8%
    assert year.capture_up == pytest.approx(0.5, rel=1e-12)
    assert year.capture_down == pytest.approx(0.8, rel=1e-12)
    # 5% of 12 months is 0.6, rounded up to one month
    assert year.expected_shortfall_monthly == pytest.approx(-0.08, rel=1e-12)
    # two values equally often: no skew, excess kurtosis -2, bias-corrected with n = 12:
    # (n - 1) / ((n - 2)(n - 3)) ((n + 1) (-2) + 6) = 11 / 90 x -20
    assert year.skewness == pytest.approx(0.0, abs=1e-12)
    assert year.excess_kurtosis == pytest.approx(-220 / 90, rel=1e-12)
    # two equal log returns a = ln 1.05 and -b = ln .92: the tilted probability q = b / (a + b) has mean zero, and the
    # rate is its relative entropy to one half: q ln 2q + (1 - q) ln 2(1 - q)
    a, b = np.log(1.05), -np.log(0.92)
    q = b / (a + b)
    rate = q * np.log(2 * q) + (1 - q) * np.log(2 * (1 - q))
    assert year.stutzer == pytest.approx(-((2 * rate) ** 0.5), rel=1e-9)


def test_leland_of_two_values() -> None:
    # hold +15% and -10%, own +5% and -8%, both equally often: any weight that falls with the hold gives the ratio of
    # the spreads, .13 / .25 = .52, and alpha = (-.015 - .52 x .025) x 12
    beta, alpha = leland(np.array(OWN_MONTHS), np.array([0.15, -0.10] * 6), np.zeros(12))
    assert beta == pytest.approx(0.52, rel=1e-12)
    assert alpha == pytest.approx((-0.015 - 0.52 * 0.025) * 12, rel=1e-12)


def test_leland_of_a_market_that_earns_what_cash_does() -> None:
    # b is zero and the weights are all alike: none, or the limit .13 / .50 of b to zero, but no complaint from below
    beta, _ = leland(np.array(OWN_MONTHS), np.array([0.25, -0.25] * 6), np.zeros(12))
    assert np.isnan(beta) or beta == pytest.approx(0.26, rel=1e-12)


@pytest.mark.parametrize(
    ("last", "expected"),
    [
        ("2020-05-28", ["2020-01-31", "2020-02-28", "2020-03-31", "2020-04-30"]),  # a Thursday: Friday is left
        ("2020-05-29", ["2020-01-31", "2020-02-28", "2020-03-31", "2020-04-30", "2020-05-29"]),  # a weekend is left
        ("2020-03-30", ["2020-01-31", "2020-02-28"]),
    ],
)
def test_months_that_are_finished(last: str, expected: list[str]) -> None:
    dates = pd.bdate_range("2020-01-15", last).to_numpy().astype("datetime64[D]")
    assert dates[month_ends(dates)].astype(str).tolist() == expected


def test_the_first_stretch_is_no_month() -> None:
    dates = pd.bdate_range("2020-01-15", "2020-04-15")
    wealth = np.linspace(1.0, 2.0, len(dates))
    rate = np.full(len(dates), 0.001)
    found = monthly_returns(wealth, dates=dates.to_numpy().astype("datetime64[D]"), rate_return=rate)
    ends = pd.Series(wealth, index=dates).resample("ME").last().iloc[:3]
    np.testing.assert_allclose(found.returns, ends.pct_change().dropna(), rtol=1e-12)
    assert found.months.astype(str).tolist() == ["2020-02", "2020-03"]
    # 20 and 22 trading days
    np.testing.assert_allclose(found.cash, [1.001**20 - 1, 1.001**22 - 1], rtol=1e-12)


# ---------------------------------------------------------------- the tail


@pytest.mark.parametrize(("count", "worst"), [(1, 1), (20, 1), (21, 2), (40, 2), (41, 3), (60, 3), (100, 5), (252, 13)])
def test_expected_shortfall_averages_five_percent_rounded_up(count: int, worst: int) -> None:
    returns = np.random.default_rng(1).permutation(np.arange(count, dtype=float))
    assert expected_shortfall(returns) == pytest.approx((worst - 1) / 2, abs=1e-12)


# ---------------------------------------------------------------- random series against libraries


def random_paths(seed: int) -> tuple[npt.NDArray[np.datetime64], Array, Array, Array]:
    """Six years of days, cash, a fat-tailed hold and something that follows it."""
    rng = np.random.default_rng(seed)
    dates = pd.bdate_range("2010-03-17", "2016-06-22").to_numpy().astype("datetime64[D]")
    count = len(dates)
    cash = np.concatenate([[0.0], np.full(count - 1, 0.02 / 252) + rng.normal(0, 1e-5, count - 1)])
    hold = rng.standard_t(4, count - 1) * 0.008 + 0.0004
    own = 0.6 * hold + rng.normal(0.0001, 0.004, count - 1)
    return dates, cash, grown(own), grown(hold)


@pytest.mark.parametrize("seed", range(5))
def test_against_pandas_scipy_and_statsmodels(seed: int) -> None:
    dates, cash, wealth, hold = random_paths(seed)
    found = performance(wealth, dates=dates, rate_return=cash, hold=hold)
    frame = pd.DataFrame({"own": wealth, "hold": hold, "cash": np.cumprod(1 + cash)}, index=pd.DatetimeIndex(dates))
    returns = frame.pct_change().iloc[1:]
    excess = returns[["own", "hold"]].sub(returns["cash"], axis=0)
    assert found.volatility == pytest.approx(returns["own"].std() * ROOT_252, rel=1e-10)
    assert found.sharpe == pytest.approx(excess["own"].mean() / excess["own"].std() * ROOT_252, rel=1e-10)
    downside = (excess["own"].clip(upper=0) ** 2).mean() ** 0.5
    assert found.sortino == pytest.approx(excess["own"].mean() / downside * ROOT_252, rel=1e-10)
    drawdown = frame["own"] / frame["own"].cummax() - 1
    assert found.max_drawdown == pytest.approx(drawdown.min(), rel=1e-12)
    assert found.max_drawdown_trough == np.datetime64(drawdown.idxmin().date())
    assert found.max_drawdown_peak == np.datetime64(frame["own"][: drawdown.idxmin()].idxmax().date())
    assert found.ulcer == pytest.approx((drawdown**2).mean() ** 0.5, rel=1e-12)
    fitted = sm.OLS(excess["own"].to_numpy(), sm.add_constant(excess["hold"].to_numpy())).fit()
    assert found.beta == pytest.approx(fitted.params[1], rel=1e-10)
    assert found.alpha == pytest.approx(fitted.params[0] * 252, rel=1e-8)
    # from March 2010 to June 2016: April 2010 is the first whole month, May 2016 the last
    months = frame.resample("ME").last().iloc[:-1].pct_change().iloc[1:]
    assert found.months == len(months) == 74
    logs = np.log1p(months["own"])
    assert found.skewness == pytest.approx(logs.skew(), rel=1e-10)
    assert found.excess_kurtosis == pytest.approx(logs.kurt(), rel=1e-10)
    assert found.expected_shortfall_monthly == pytest.approx(months["own"].nsmallest(4).mean(), rel=1e-10)
    assert found.expected_shortfall_daily == pytest.approx(returns["own"].nsmallest(82).mean(), rel=1e-10)
    for name, chosen in (("capture_up", months["hold"] > 0), ("capture_down", months["hold"] < 0)):
        own, other = (stats.gmean(1 + months.loc[chosen, who]) - 1 for who in ("own", "hold"))
        assert getattr(found, name) == pytest.approx(own / other, rel=1e-10)
    weight = -((1 + months["hold"]) ** -leland_power(months["hold"], months["cash"].mean()))
    beta = months["own"].cov(weight) / months["hold"].cov(weight)
    rate = months["cash"].mean()
    assert found.leland_beta == pytest.approx(beta, rel=1e-10)
    alpha = months["own"].mean() - rate - beta * (months["hold"].mean() - rate)
    assert found.leland_alpha == pytest.approx(alpha * 12, rel=1e-8, abs=1e-12)
    assert found.stutzer == pytest.approx(stutzer_by_root(logs - np.log1p(months["cash"])), rel=1e-7)


def leland_power(market: pd.Series, rate: float) -> float:
    return float((np.log(1 + market.mean()) - np.log(1 + rate)) / np.log(1 + market).var())


def stutzer_by_root(log_excess: pd.Series) -> float:
    """The index from the root of the derivative of ``ln mean exp(theta x)``."""
    x = log_excess.to_numpy()
    theta = optimize.brentq(lambda t: np.mean(x * np.exp(t * x)), -2000.0, 2000.0, xtol=1e-12)
    return float(np.sign(x.mean()) * (-2 * np.log(np.mean(np.exp(theta * x)))) ** 0.5)


def test_rows_at_once_are_rows_one_by_one() -> None:
    returns = np.random.default_rng(3).normal(0.0005, 0.01, (4, 300))
    np.testing.assert_allclose(sharpe_ratio(returns), [sharpe_ratio(row) for row in returns], rtol=1e-13)
    np.testing.assert_allclose(annual_volatility(returns), [annual_volatility(row) for row in returns], rtol=1e-13)
    wealth = np.cumprod(1 + returns, axis=-1)
    np.testing.assert_array_equal(drawdown_path(wealth), [drawdown_path(row) for row in wealth])


def test_hold_against_itself() -> None:
    dates, cash, _, hold = random_paths(7)
    found = performance(hold, dates=dates, rate_return=cash, hold=hold)
    assert found.beta == pytest.approx(1.0, rel=1e-14)
    assert found.alpha == pytest.approx(0.0, abs=1e-14)
    assert found.leland_beta == pytest.approx(1.0, rel=1e-12)
    assert found.leland_alpha == pytest.approx(0.0, abs=1e-14)
    assert found.capture_up == found.capture_down == 1.0


# ---------------------------------------------------------------- Stutzer (2000)


def test_stutzer_of_normal_returns_is_their_sharpe_ratio() -> None:
    # Stutzer (2000): for normal returns the index is mean over standard deviation
    quantiles = stats.norm.ppf((np.arange(200_000) + 0.5) / 200_000)
    for ratio in (0.05, 0.1, -0.2, 0.4):
        x = 0.04 * (ratio + quantiles)
        assert stutzer_index(x) == pytest.approx(ratio, rel=2e-4)


@pytest.mark.parametrize(("up", "down", "chance"), [(1.0, 1.0, 60), (2.0, 1.0, 50), (1.0, 3.0, 70), (0.01, 0.2, 97)])
def test_stutzer_of_two_values_is_a_relative_entropy(up: float, down: float, chance: int) -> None:
    # +up with probability p, -down with 1 - p: the tilt that makes the mean zero gives up the probability
    # q = down / (up + down), and the decay rate is q ln(q/p) + (1-q) ln((1-q)/(1-p))
    p, q = chance / 100, down / (up + down)
    rate = q * np.log(q / p) + (1 - q) * np.log((1 - q) / (1 - p))
    x = np.repeat([up, -down], [chance, 100 - chance])
    sign = np.sign(p * up - (1 - p) * down)
    assert stutzer_index(x) == pytest.approx(sign * (2 * rate) ** 0.5, rel=1e-7)
    assert stutzer_index(-x) == pytest.approx(-stutzer_index(x), rel=1e-7)
    assert stutzer_index(3.0 * x) == pytest.approx(stutzer_index(x), rel=1e-7)


# ---------------------------------------------------------------- Leland (1999)

# a one-year lognormal market of mean 12% and standard deviation 15%, cash at 5%: midpoints of a million quantiles
COUNT = 1_000_000
LOG_VARIANCE = np.log1p((0.15 / 1.12) ** 2)
SIGMA = LOG_VARIANCE**0.5
MARKET = 1.12 * np.exp(-LOG_VARIANCE / 2 + SIGMA * stats.norm.ppf((np.arange(COUNT) + 0.5) / COUNT))


def fair(strike: float, sign: int) -> float:
    """Black and Scholes, spot 1, one year at 5%."""
    d1 = (np.log(1.05 / strike) + LOG_VARIANCE / 2) / SIGMA
    return float(sign * (stats.norm.cdf(sign * d1) - strike / 1.05 * stats.norm.cdf(sign * (d1 - SIGMA))))


STRATEGIES = {
    "at-the-money covered call": (1 - fair(1.0, 1), np.minimum(MARKET, 1.0), 0.1769, 0.00672, 0.2728),
    "stock plus 95 put": (1 + fair(0.95, -1), np.maximum(MARKET, 0.95), 0.8993, -0.00418, 0.8396),
    "95/110 collar": (1 + fair(0.95, -1) - fair(1.1, 1), np.clip(MARKET, 0.95, 1.1), 0.3138, 0.00427, 0.3749),
}


def test_leland_power() -> None:
    assert leland_power(pd.Series(MARKET - 1), 0.05) == pytest.approx(3.63027, abs=5e-6)


@pytest.mark.parametrize("name", STRATEGIES)
def test_leland_of_fair_options(name: str) -> None:
    """Fair options have no Leland alpha, while the usual alpha flatters sold calls and punishes bought puts."""
    price, payoff, usual_beta, usual_alpha, leland_beta = STRATEGIES[name]
    returns = payoff / price - 1
    beta, alpha = leland(returns, MARKET - 1, np.full(COUNT, 0.05))
    assert beta == pytest.approx(leland_beta, abs=5e-5)
    # annual returns given as if they were monthly: undo the factor of twelve
    assert alpha / 12 == pytest.approx(0.0, abs=5e-6)
    usual = regression_beta(returns, MARKET - 1)
    assert usual == pytest.approx(usual_beta, abs=5e-5)
    assert np.mean(returns) - 0.05 - usual * (np.mean(MARKET) - 1.05) == pytest.approx(usual_alpha, abs=5e-6)


# ---------------------------------------------------------------- nothing to say


TWO_YEARS = pd.bdate_range("2018-01-01", "2019-12-31").to_numpy().astype("datetime64[D]")
WAVE = 1 + 0.05 * np.sin(np.arange(len(TWO_YEARS)) / 9)


def test_nothing_moves() -> None:
    still = np.ones(len(TWO_YEARS))
    found = performance(still, dates=TWO_YEARS, rate_return=np.zeros(len(TWO_YEARS)), hold=still)
    assert (found.annual_return, found.volatility, found.max_drawdown, found.ulcer) == (0.0, 0.0, 0.0, 0.0)
    assert found.max_drawdown_peak is found.max_drawdown_trough is found.max_drawdown_recovery is None
    assert (found.expected_shortfall_daily, found.expected_shortfall_monthly) == (0.0, 0.0)
    for name in (
        "sharpe", "sortino", "calmar", "beta", "alpha", "leland_beta", "leland_alpha", "stutzer", "capture_up",
        "capture_down", "skewness", "excess_kurtosis",
    ):  # fmt: skip
        assert np.isnan(getattr(found, name))


def test_cash_itself_has_no_ratios() -> None:
    # its excess return is nothing but rounding, and rounding has no ratio
    cash = np.concatenate([[0.0], np.full(len(TWO_YEARS) - 1, 0.0001)])
    found = performance(np.cumprod(1 + cash), dates=TWO_YEARS, rate_return=cash, hold=WAVE)
    assert np.isnan(found.sharpe)
    assert np.isnan(found.sortino)
    assert found.beta == pytest.approx(0.0, abs=1e-12)


def test_only_gains_have_no_calmar_and_no_stutzer() -> None:
    steps = np.concatenate([[0.0], 0.001 + 0.0005 * np.sin(np.arange(len(TWO_YEARS) - 1))])
    found = performance(np.cumprod(1 + steps), dates=TWO_YEARS, rate_return=np.zeros(len(TWO_YEARS)), hold=WAVE)
    assert found.max_drawdown == 0.0
    assert found.max_drawdown_peak is None
    assert np.isnan(found.calmar)
    assert np.isnan(found.sortino)
    assert np.isnan(found.stutzer)
    assert found.sharpe > 0


def test_lost_wealth_is_nan_everywhere() -> None:
    wealth = np.where(np.arange(len(TWO_YEARS)) > 300, np.nan, WAVE)
    found = performance(wealth, dates=TWO_YEARS, rate_return=np.zeros(len(TWO_YEARS)), hold=WAVE)
    for name in Performance.__dataclass_fields__:
        if name.startswith("max_drawdown_"):
            assert getattr(found, name) is None
        elif name != "months":
            assert np.isnan(getattr(found, name))


def test_a_market_that_never_varies_gives_no_beta() -> None:
    # the same gain every day, but for rounding in the last place
    steady = 1.001 ** np.arange(len(TWO_YEARS))
    excess = steady[1:] / steady[:-1] - 1
    assert np.isnan(regression_beta(np.sin(np.arange(len(excess))), excess))
    assert np.isnan(leland(np.sin(np.arange(24)), np.full(24, 0.01), np.zeros(24))).all()
    found = performance(WAVE, dates=TWO_YEARS, rate_return=np.zeros(len(TWO_YEARS)), hold=steady)
    assert np.isnan([found.beta, found.alpha]).all()
    # its months do vary: they differ in length
    assert np.isfinite(found.leland_beta)


def test_two_days() -> None:
    found = performance(
        np.array([1.0, 1.1]), dates=days("2020-01-02", "2020-01-03"), rate_return=np.zeros(2), hold=np.array([1.0, 1.2])
    )
    assert found.annual_return == pytest.approx(0.1)
    assert np.isnan([found.volatility, found.sharpe, found.beta, found.alpha]).all()
    assert found.months == 0


def test_no_returns_no_shortfall() -> None:
    assert np.isnan(expected_shortfall(np.array([])))
    assert np.isnan(expected_shortfall(np.array([0.1, np.nan])))
