"""The invented market: identities of its files, and figures in the ranges its model is meant to give.

Rung: identity (bytes, bars, calendar, gaps); the ranges of the statistics are a specification, not evidence.
"""

from __future__ import annotations

import time
from dataclasses import FrozenInstanceError
from pathlib import Path
from typing import NamedTuple

import numpy as np
import pandas as pd
import pytest
from scipy import stats

from data_loaders import demo_market
from data_loaders.demo_market import DemoMarket, write_demo_market

FILES = ("prices", "vol", "dividends", "rates")
OTHER_SEEDS = (1, 2, 3)


class Tables(NamedTuple):
    prices: pd.DataFrame
    vol: pd.Series
    dividends: pd.Series
    rates: pd.Series


def read(demo: DemoMarket) -> Tables:
    frames = [pd.read_csv(getattr(demo, name), parse_dates=["date"], index_col="date") for name in FILES]
    return Tables(frames[0], frames[1]["vol"], frames[2]["dividend"], frames[3]["rate"])


def content(demo: DemoMarket) -> list[bytes]:
    return [getattr(demo, name).read_bytes() for name in FILES]


def hold_returns(tables: Tables) -> pd.Series:
    """Daily total returns, dividends taken at the ex-date close."""
    close = tables.prices["close"]
    paid = tables.dividends.reindex(close.index).fillna(0.0)
    return ((close + paid) / close.shift() - 1.0).iloc[1:]


def drawdowns(returns: pd.Series) -> pd.Series:
    """The depth of each spell below the high, deepest first."""
    wealth = pd.concat([pd.Series([1.0]), (1.0 + returns).cumprod()])
    fall = wealth / wealth.cummax() - 1.0
    spell = (fall == 0.0).cumsum()
    return fall.groupby(spell).min().sort_values()


def third_fridays(first_year: int, years: int, months: tuple[int, ...] = tuple(range(1, 13))) -> pd.DatetimeIndex:
    firsts = [f"{year}-{month:02d}" for year in range(first_year, first_year + years) for month in months]
    days = np.busday_offset(np.array(firsts, dtype="datetime64[M]"), 2, roll="forward", weekmask="Fri")
    return pd.DatetimeIndex(days)


def days_of(table: pd.DataFrame | pd.Series) -> pd.DatetimeIndex:
    return pd.DatetimeIndex(table.index)


def longest_gap(table: pd.DataFrame | pd.Series) -> int:
    """Calendar days between two rows that follow each other."""
    return int(np.diff(table.index.to_numpy().astype("datetime64[D]").astype(int)).max())


@pytest.fixture(scope="module")
def demo(tmp_path_factory: pytest.TempPathFactory) -> DemoMarket:
    return write_demo_market(tmp_path_factory.mktemp("demo"))


@pytest.fixture(scope="module")
def tables(demo: DemoMarket) -> Tables:
    return read(demo)


@pytest.fixture(scope="module", params=OTHER_SEEDS)
def other(request: pytest.FixtureRequest, tmp_path_factory: pytest.TempPathFactory) -> Tables:
    return read(write_demo_market(tmp_path_factory.mktemp("other"), seed=request.param))


# -- files ------------------------------------------------------------------------------------------


def test_same_seed_same_bytes_and_files_are_replaced(demo: DemoMarket, tmp_path: Path) -> None:
    folder = tmp_path / "not" / "there yet"
    write_demo_market(folder, seed=5)
    again = write_demo_market(folder)
    assert content(again) == content(demo)
    assert sorted(path.name for path in folder.iterdir()) == ["dividends.csv", "prices.csv", "rates.csv", "vol.csv"]


def test_different_seed_different_market(demo: DemoMarket, tmp_path: Path) -> None:
    other = write_demo_market(tmp_path, seed=5)
    assert all(ours != theirs for ours, theirs in zip(content(demo), content(other)))


def test_headers_decimals_and_line_ends(demo: DemoMarket) -> None:
    assert [path.split(b"\n", 1)[0] for path in content(demo)] == [
        b"date,open,high,low,close,volume",
        b"date,vol",
        b"date,dividend",
        b"date,rate",
    ]
    for text in content(demo):
        assert b"\r" not in text
        assert text.endswith(b"\n")
    row = r"\d{4}-\d\d-\d\d(,\d+\.\d\d){4},\d+"
    lines = demo.prices.read_text().splitlines()[1:]
    assert pd.Series(lines).str.fullmatch(row).all()


def test_the_paths_cannot_be_changed(demo: DemoMarket) -> None:
    with pytest.raises(FrozenInstanceError):
        demo.name = "another"  # type: ignore[misc]


def test_it_is_fast(tmp_path: Path) -> None:
    started = time.process_time()
    write_demo_market(tmp_path)
    assert time.process_time() - started < 0.5


@pytest.mark.parametrize(
    ("span", "message"),
    [
        ({"years": 0}, "years is 0; a demo market has at least 1 year"),
        ({"first_year": 1899}, "first_year 1899 with 25 years ends in 1923; a demo market lies within 1900 to 2200"),
        ({"first_year": 2190, "years": 12}, "first_year 2190 with 12 years ends in 2201"),
    ],
)
def test_a_span_that_cannot_be_written_is_refused(tmp_path: Path, span: dict[str, int], message: str) -> None:
    with pytest.raises(ValueError, match=message):
        write_demo_market(tmp_path, **span)
    assert not list(tmp_path.iterdir())


@pytest.mark.parametrize(("first_year", "years"), [(2023, 1), (1950, 3), (1999, 60)])
def test_other_spans(tmp_path: Path, first_year: int, years: int) -> None:
    prices, vol, dividends, rates = read(write_demo_market(tmp_path, first_year=first_year, years=years))
    assert (days_of(prices)[0].year, days_of(prices)[-1].year) == (first_year, first_year + years - 1)
    assert len(prices) == pytest.approx(252.5 * years, abs=3.0 * years + 5)
    assert len(dividends) == 4 * years
    assert (prices["low"] > 0).all()
    assert longest_gap(vol) < 5
    assert longest_gap(rates.dropna()) < 5


# -- calendar ---------------------------------------------------------------------------------------


def test_trading_days_are_unique_rising_weekdays_over_the_whole_span(tables: Tables) -> None:
    days = days_of(tables.prices)
    assert days.is_unique
    assert days.is_monotonic_increasing
    assert (days.day_of_week < 5).all()
    assert str(days[0].date()) == "1999-01-04"
    assert str(days[-1].date()) == "2023-12-29"
    a_year = days.to_series().groupby(days.year).size()
    assert a_year.between(246, 256).all()


def test_some_third_fridays_are_closed_and_one_is_a_quarterly_one(tables: Tables) -> None:
    closed = third_fridays(1999, 25).difference(days_of(tables.prices))
    assert 3 <= len(closed) <= 8
    quarterly = third_fridays(1999, 25, (3, 6, 9, 12)).difference(days_of(tables.prices))
    assert 1 <= len(quarterly) <= len(closed)
    # the exchange traded on the day before, so the expiry has somewhere to go
    assert (closed - pd.Timedelta(days=1)).isin(tables.prices.index).all()


def test_a_storm_closes_the_exchange_from_a_tuesday_to_a_friday(tables: Tables) -> None:
    days = days_of(tables.prices)
    gap = np.diff(days.to_numpy()).astype("timedelta64[D]").astype(int)
    before = int(gap.argmax())
    assert gap[before] >= 7
    lost = pd.bdate_range(days[before], days[before + 1])[1:-1]
    assert set(lost.day_of_week) >= {1, 2, 3, 4}
    # banks stayed open, and the vol index was quoted: this was not a holiday
    assert tables.rates.reindex(lost).notna().sum() >= 4
    assert tables.vol.reindex(lost).notna().sum() >= 4
    assert np.delete(gap, before).max() <= 5


def test_vol_misses_some_trading_days_has_some_others_and_no_long_gap(tables: Tables) -> None:
    traded, quoted = days_of(tables.prices), days_of(tables.vol)
    assert quoted.is_unique
    assert quoted.is_monotonic_increasing
    assert 5 <= len(traded.difference(quoted)) <= 60
    assert 5 <= len(quoted.difference(traded)) <= 40
    assert longest_gap(tables.vol) < 5
    assert quoted[0] <= traded[0]
    assert quoted[-1] == traded[-1]


def test_rates_are_blank_on_bank_holidays_only(tables: Tables) -> None:
    rates = tables.rates
    assert rates.index.equals(pd.bdate_range("1999-01-01", "2023-12-31", name="date"))
    blank = rates.index[rates.isna()]
    assert 6 * 25 <= len(blank) <= 8 * 25
    assert not blank.isin(tables.prices.index).any()
    assert longest_gap(rates.dropna()) < 5


# -- prices -----------------------------------------------------------------------------------------


def test_bars_hold_together(tables: Tables) -> None:
    bars = tables.prices
    assert (bars["high"] >= bars[["open", "close"]].max(axis=1)).all()
    assert (bars["low"] <= bars[["open", "close"]].min(axis=1)).all()
    assert (bars["low"] > 0).all()
    assert (bars["volume"] > 0).all()


def test_opens_are_no_copies_of_the_close_before(tables: Tables) -> None:
    opened, before = tables.prices["open"].iloc[1:], tables.prices["close"].shift().iloc[1:]
    assert (opened == before).mean() < 0.02
    overnight, day = np.log(opened / before), np.log(tables.prices["close"].iloc[1:] / opened)
    assert 0.10 < overnight.var() / (overnight.var() + day.var()) < 0.35


def test_range_and_close_to_close_agree_on_the_vol(tables: Tables) -> None:
    """Parkinson's range estimator of the day, plus the overnight part, against squared returns."""
    bars = tables.prices
    opened, high, low, close = (bars[name].to_numpy() for name in ("open", "high", "low", "close"))
    overnight, whole = np.log(opened[1:] / close[:-1]), np.log(close[1:] / close[:-1])
    parkinson = np.log(high / low) ** 2 / (4.0 * np.log(2.0))
    assert np.sqrt(parkinson.mean() + overnight.var()) / whole.std() == pytest.approx(1.0, abs=0.10)


def test_the_history_is_that_of_a_plausible_index(tables: Tables) -> None:
    returns = hold_returns(tables)
    days = days_of(tables.prices)
    years = (days[-1] - days[0]).days / 365.25
    assert 0.055 < float(np.prod(1.0 + returns.to_numpy())) ** (1.0 / years) - 1.0 < 0.085
    assert 0.15 < returns.std() * np.sqrt(252) < 0.19
    depths = drawdowns(returns)
    assert -0.56 < depths.to_numpy()[0] < -0.44
    assert 4 <= (depths < -0.10).sum() <= 7
    five_weeks = float(np.nanmin(tables.prices["close"].pct_change(25).to_numpy()))
    assert -0.40 < five_weeks < -0.25
    assert stats.kurtosis(returns.to_numpy()) > 3.0
    # no memory in the sign, memory in the size
    assert abs(returns.autocorr()) < 0.06
    assert returns.abs().autocorr() > 0.15


def test_expected_variance_is_the_mean_of_the_iterated_expectation() -> None:
    """Identity: the closed form against E[h'] = omega + persistence h, taken forward day by day."""
    tomorrow = np.array([0.3, 1.0, 25.0]) * 1e-4
    omega = (1.0 - demo_market.PERSISTENCE) * demo_market.LONG_RUN_VOL**2 / 252
    path = [tomorrow]
    for _ in range(demo_market.INDEX_HORIZON - 1):
        path.append(omega + demo_market.PERSISTENCE * path[-1])
    np.testing.assert_allclose(demo_market._expected_variance(tomorrow), np.mean(path, axis=0), rtol=1e-12)


# -- vol, dividends, rates --------------------------------------------------------------------------


def test_vol_reacts_to_falls(tables: Tables) -> None:
    both = pd.concat([tables.vol.reindex(tables.prices.index).diff(), hold_returns(tables)], axis=1).dropna()
    assert -0.9 < both.iloc[:, 0].corr(both.iloc[:, 1]) < -0.5


def test_vol_has_a_floor_peaks_and_a_premium_over_what_followed(tables: Tables) -> None:
    vol = tables.vol
    assert 8.5 < vol.min() < 11.0
    assert 60.0 < vol.max() < 90.0
    assert 16.0 < vol.mean() < 21.0
    squares = np.log(tables.prices["close"]).diff() ** 2
    followed = 100.0 * np.sqrt(252.0 * squares.rolling(21).mean().shift(-21))
    assert 2.5 < (vol.reindex(followed.index) - followed).mean() < 4.5
    assert np.log(vol).autocorr(21) < np.log(vol).autocorr(1) - 0.1  # it comes back


def test_dividends_fall_on_trading_days_four_times_a_year_and_grow_slowly(tables: Tables) -> None:
    dividends, close = tables.dividends, tables.prices["close"]
    assert dividends.index.isin(close.index).all()
    assert days_of(dividends).month.tolist() == [3, 6, 9, 12] * 25
    a_year = dividends.groupby(days_of(dividends).year).sum()
    average = (a_year / close.groupby(days_of(close).year).mean()).mean()
    assert 0.02 < average < 0.03
    assert dividends.pct_change().abs().max() < 0.12
    assert 0.01 < (a_year.iloc[-1] / a_year.iloc[0]) ** (1.0 / 24.0) - 1.0 < 0.09


def test_the_price_falls_by_the_dividend(tmp_path: Path) -> None:
    """Over many seeds the price return of ex-dates is below that of other days by about the dividend."""
    gaps, dividends = [], []
    for seed in range(12):
        tables = read(write_demo_market(tmp_path, seed=seed))
        change = tables.prices["close"].pct_change().iloc[1:]
        is_ex = change.index.isin(tables.dividends.index)
        gaps.append(change[is_ex].mean() - change[~is_ex].mean())
        dividends.append((tables.dividends / tables.prices["close"].shift().reindex(tables.dividends.index)).mean())
    standard_error = np.std(gaps, ddof=1) / np.sqrt(len(gaps))
    assert np.mean(gaps) == pytest.approx(-np.mean(dividends), abs=3.0 * standard_error)
    assert np.mean(gaps) < -2.0 * standard_error


def test_rates_go_through_cycles(tables: Tables) -> None:
    rates = tables.rates.dropna()
    assert 4.0 < rates.iloc[0] < 5.5
    assert 3.0 < rates.iloc[-1] < 5.5
    assert -0.8 < rates.min() < 0.5
    assert 0 < (rates < 0).sum() < 5 * 261
    middle = rates["2004":"2018"]
    assert middle.max() > middle.min() + 2.0
    assert rates.diff().abs().max() < 0.9  # no step past three quarters of a point and the noise


def test_any_seed_gives_a_usable_market(other: Tables) -> None:
    prices, vol, dividends, rates = other
    assert (prices["high"] >= prices[["open", "close"]].max(axis=1)).all()
    assert (prices["low"] <= prices[["open", "close"]].min(axis=1)).all()
    assert (prices["low"] > 0).all()
    assert longest_gap(vol) < 5
    assert vol.between(7.0, 115.0).all()
    assert (dividends > 0).all()
    assert dividends.index.isin(prices.index).all()
    assert rates.dropna().between(-1.0, 6.0).all()
