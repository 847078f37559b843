"""Calendar tables, best and worst periods, rolling figures.

Rung: hand-worked (a few days over a new year), independent library (pandas for months, years and windows; statsmodels
for rolling regressions) and twin (plain loops for extremes and drawdowns).
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt
import pandas as pd
import pytest
import statsmodels.api as sm  # type: ignore[import-untyped]
from statsmodels.regression.rolling import RollingOLS  # type: ignore[import-untyped]

from backtest.analytics.performance import regression_beta
from backtest.analytics.periods import Rolling, best_and_worst, calendar_table, rolling_figures

Array = npt.NDArray[np.float64]
Dates = npt.NDArray[np.datetime64]


def days(*dates: str) -> Dates:
    return np.array(dates, dtype="datetime64[D]")


def weekdays(first: str, last: str) -> Dates:
    return pd.bdate_range(first, last).to_numpy().astype("datetime64[D]")


def wandering(seed: int, count: int, spread: float = 0.01) -> Array:
    steps = np.random.default_rng(seed).normal(0.0003, spread, count - 1)
    return np.cumprod(np.concatenate([[1.0], 1.0 + steps]))


# ---------------------------------------------------------------- calendar tables


def test_a_winter_by_hand() -> None:
    dates = days("2019-11-15", "2019-11-29", "2019-12-31", "2020-01-02", "2020-01-31", "2020-02-14")
    table = calendar_table(np.array([1.0, 1.1, 1.32, 1.30, 1.65, 1.485]), dates)
    assert table.years.tolist() == [2019, 2020]
    # November from the 15th 1.1 / 1, December 1.32 / 1.1, January 1.65 / 1.32, February until the 14th 1.485 / 1.65
    expected = np.full((2, 12), np.nan)
    expected[0, 10:], expected[1, :2] = [0.1, 0.2], [0.25, -0.1]
    np.testing.assert_allclose(table.monthly, expected, rtol=0.0, atol=1e-15)
    # 1.32 / 1, 1.485 / 1.32
    np.testing.assert_allclose(table.yearly, [0.32, 0.125], rtol=0.0, atol=1e-15)
    # the first and the last are parts of a month
    assert np.argwhere(table.whole_month).tolist() == [[0, 11], [1, 0]]


SPANS = {
    "from the middle of a month to the middle of a month": ("2011-03-16", "2016-08-10"),
    "from a month's last day": ("2012-10-31", "2014-02-28"),
    "from a year's last day to a Friday before a month's last weekend": ("2009-12-31", "2015-05-29"),
    "to the day before a month's last weekday": ("2010-01-04", "2012-05-30"),
    "inside one month": ("2014-07-03", "2014-07-25"),
    "one year exactly": ("2013-01-01", "2013-12-31"),
}


@pytest.mark.parametrize("name", SPANS)
def test_calendar_table_against_pandas(name: str) -> None:
    dates = weekdays(*SPANS[name])
    wealth = wandering(len(name), len(dates))
    table = calendar_table(wealth, dates)
    path = pd.Series(wealth, index=pd.DatetimeIndex(dates))
    # the first value stands for the close before it
    at_ends = pd.concat([path.iloc[:1], path.resample("ME").last()])
    monthly = at_ends.pct_change().iloc[1:]
    if dates[0].astype("datetime64[M]") != dates[1].astype("datetime64[M]"):
        monthly = monthly.iloc[1:]  # a path from a month's last day has no return in that month
    grid = pd.DataFrame(np.nan, index=range(path.index[0].year, path.index[-1].year + 1), columns=range(1, 13))
    for when, value in zip(pd.DatetimeIndex(monthly.index), monthly, strict=True):
        grid.loc[when.year, when.month] = value
    np.testing.assert_allclose(table.monthly, grid.to_numpy(), rtol=0.0, atol=1e-12)
    assert table.years.tolist() == grid.index.tolist()
    yearly = pd.concat([path.iloc[:1], path.resample("YE").last()]).pct_change().iloc[1:]
    covered = np.isfinite(table.monthly).any(axis=1)  # a path from a year's last day has nothing in that year
    np.testing.assert_allclose(table.yearly[covered], yearly.to_numpy()[covered], rtol=0.0, atol=1e-12)
    assert np.prod(1.0 + table.yearly[covered]) == pytest.approx(wealth[-1], rel=1e-12)
    # whole: the month's first and last weekday's worth of returns are there
    for row, year in enumerate(table.years):
        for month in range(1, 13):
            first = pd.Timestamp(year, month, 1)
            last = first + pd.offsets.BMonthEnd(0)
            whole = path.index[0] < first and last <= path.index[-1]
            assert table.whole_month[row, month - 1] == whole, (year, month)


def test_a_hole_over_a_month() -> None:
    # no price in February: March runs from the end of January
    dates = np.concatenate([weekdays("2020-01-01", "2020-01-31"), weekdays("2020-03-02", "2020-03-31")])
    wealth = wandering(5, len(dates))
    table = calendar_table(wealth, dates)
    end_of_january = wealth[np.flatnonzero(dates == np.datetime64("2020-01-31"))[0]]
    assert np.isnan(table.monthly[0, 1])
    assert table.monthly[0, [0, 2]] == pytest.approx([end_of_january - 1, wealth[-1] / end_of_january - 1], abs=1e-15)
    assert table.yearly == pytest.approx([wealth[-1] - 1], abs=1e-15)


def test_lost_wealth_has_no_return() -> None:
    dates = weekdays("2010-01-01", "2012-12-31")
    wealth = np.where(dates < np.datetime64("2011-06-15"), wandering(2, len(dates)), np.nan)
    table = calendar_table(wealth, dates)
    assert np.isfinite(table.monthly.ravel()[:17]).all()
    assert np.isnan(table.monthly.ravel()[17:]).all()
    assert np.isfinite(table.yearly[0])
    assert np.isnan(table.yearly[1:]).all(), table.yearly


# ---------------------------------------------------------------- best and worst


@pytest.mark.parametrize("months", [1, 3, 12, 36])
@pytest.mark.parametrize(("first", "last"), [("2008-02-13", "2013-11-08"), ("2008-01-31", "2013-05-31")])
def test_best_and_worst_in_a_loop(first: str, last: str, months: int) -> None:
    dates = weekdays(first, last)
    wealth = wandering(months, len(dates), spread=0.02)
    ends = [
        day
        for day in range(len(dates))
        if pd.Timestamp(dates[day]) == pd.Timestamp(dates[day]) + pd.offsets.BMonthEnd(0)  # the last weekday
    ]
    every = [(wealth[stop] / wealth[start] - 1, start, stop) for start, stop in zip(ends, ends[months:])]
    found = best_and_worst(wealth, dates, months=months)
    assert found is not None
    for extreme, (value, start, stop) in zip(found, (max(every), min(every)), strict=True):
        assert (extreme.first, extreme.last) == (dates[start], dates[stop])
        assert extreme.value == pytest.approx(value, abs=1e-15)


def test_best_and_worst_month_by_hand() -> None:
    dates = days("2020-01-31", "2020-02-28", "2020-03-31", "2020-04-15", "2020-04-30", "2020-05-29", "2020-06-12")
    wealth = np.array([1.0, 1.25, 1.0, 0.1, 1.1, 1.1, 9.0])
    # +25%, -20%, +10%, 0; the low inside April and the June that is not over do not count
    found = best_and_worst(wealth, dates, months=1)
    assert found is not None
    best, worst = found
    assert (str(best.first), str(best.last), best.value) == ("2020-01-31", "2020-02-28", 0.25)
    assert (str(worst.first), str(worst.last)) == ("2020-02-28", "2020-03-31")
    assert worst.value == pytest.approx(-0.2, abs=1e-15)
    # five month-ends: one stretch of four months, none of five
    whole = best_and_worst(wealth, dates, months=4)
    assert whole is not None
    assert whole[0] == whole[1]
    assert whole[0].value == pytest.approx(0.1, abs=1e-15)
    assert best_and_worst(wealth, dates, months=5) is None
    assert best_and_worst(np.where(wealth == 1.1, np.nan, wealth), dates, months=1) is None


# ---------------------------------------------------------------- rolling


def rolled(seed: int, years: int, count: int = 1100) -> tuple[pd.DataFrame, Rolling]:
    rng = np.random.default_rng(seed)
    cash = np.concatenate([[0.0], rng.uniform(0.0, 2e-4, count - 1)])
    hold = wandering(seed + 50, count)
    market = hold[1:] / hold[:-1] - 1
    own = np.cumprod(np.concatenate([[1.0], 1.0 + 0.6 * market + rng.normal(0.0001, 0.003, count - 1)]))
    frame = pd.DataFrame({"own": own, "hold": hold, "cash": cash})
    return frame, rolling_figures(own, hold=hold, rate_return=cash, years=years)


@pytest.mark.parametrize("years", [1, 3])
@pytest.mark.parametrize("seed", range(3))
def test_rolling_figures_against_pandas_and_statsmodels(seed: int, years: int) -> None:
    frame, found = rolled(seed, years)
    window = 252 * years
    returns = frame[["own", "hold"]].pct_change()
    np.testing.assert_allclose(found.volatility, returns["own"].rolling(window).std() * 252**0.5, rtol=1e-9)
    growth = frame["own"] / frame["own"].shift(window)
    np.testing.assert_allclose(found.annual_return, growth ** (1 / years) - 1, rtol=0.0, atol=1e-13)
    excess = returns.sub(frame["cash"], axis=0).iloc[1:].reset_index(drop=True)
    fit = RollingOLS(excess["own"], sm.add_constant(excess["hold"]), window=window).fit()
    np.testing.assert_allclose(found.beta[1:], fit.params["hold"], rtol=1e-8)
    # and each window by itself, from the close before its first return
    drawdown = frame["own"].rolling(window + 1).apply(lambda w: (w / np.maximum.accumulate(w)).min() - 1, raw=True)
    np.testing.assert_allclose(found.max_drawdown, drawdown, rtol=0.0, atol=1e-15)
    for name in Rolling.__dataclass_fields__:
        values = getattr(found, name)
        assert values.shape == (len(frame),)
        assert np.isnan(values[:window]).all()
        assert np.isfinite(values[window:]).all()


def test_rolling_beta_is_that_of_each_window() -> None:
    frame, found = rolled(9, 1, count=300)
    own, hold = (frame[name].pct_change().to_numpy() - frame["cash"].to_numpy() for name in ("own", "hold"))
    for day in range(252, 300):
        beta = regression_beta(own[day - 251 : day + 1], hold[day - 251 : day + 1])
        assert found.beta[day] == pytest.approx(beta, rel=1e-12)


def test_a_year_by_hand() -> None:
    # 253 days: one window. Up by 1/8 on the first day, down by 1/9 on the second, level from there; hold twice that.
    own = np.ones(253)
    own[1] = 1.125
    returns = np.zeros(252)
    returns[:2] = 0.125, -1 / 9
    hold = np.cumprod(np.concatenate([[1.0], 1.0 + 2 * returns]))
    found = rolling_figures(own, hold=hold, rate_return=np.zeros(253), years=1)
    assert found.annual_return[-1] == 0.0
    assert found.beta[-1] == pytest.approx(0.5, rel=1e-12)
    assert found.max_drawdown[-1] == pytest.approx(-1 / 9, abs=1e-15)
    # sum of squares 1/64 + 1/81 = 145/5184, of returns whose sum is 1/72: less (1/72)^2 / 252, over 251, times 252
    variance = (145 / 5184 - 1 / 5184 / 252) / 251 * 252
    assert found.volatility[-1] == pytest.approx(variance**0.5, rel=1e-12)
    assert np.isnan(found.beta[:-1]).all()


def test_too_short_for_one_window() -> None:
    found = rolling_figures(np.ones(252), hold=wandering(1, 252), rate_return=np.zeros(252), years=1)
    assert all(np.isnan(getattr(found, name)).all() for name in Rolling.__dataclass_fields__)


@pytest.mark.parametrize("daily", [0.0, 0.001], ids=["still", "steady but for rounding"])
def test_a_hold_that_does_not_vary_gives_no_beta(daily: float) -> None:
    steady: Array = np.power(1.0 + daily, np.arange(300.0))
    own = wandering(4, 300)
    assert np.isnan(regression_beta(own[1:] / own[:-1], steady[1:] / steady[:-1]))  # as over the whole sample
    found = rolling_figures(own, hold=steady, rate_return=np.zeros(300), years=1)
    assert np.isnan(found.beta).all(), found.beta[252:]
    assert np.isfinite(found.volatility[252:]).all()
