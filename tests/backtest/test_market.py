"""A market made from a frame (C1, C5, C9, C11).

Rung: hand-worked (yields, growth of cash and of shares), twin (trailing dividends by a loop over dates), behaviour
(columns, messages, arrays that cannot change).
"""

from __future__ import annotations

import dataclasses
import math
from datetime import date, timedelta
from typing import Any

import numpy as np
import pandas as pd
import pytest

from backtest import Market
from backtest.errors import MarketError

# Thursday, Friday, Monday, Tuesday: 1, 3 and 1 calendar days apart
DAYS = pd.DatetimeIndex(["2020-01-02", "2020-01-03", "2020-01-06", "2020-01-07"])
EVERY_ARRAY = [f.name for f in dataclasses.fields(Market) if f.name != "surface"]


def frame(**columns: Any) -> pd.DataFrame:
    """Four days with closes 100, 102, 99, 101, and what is given."""
    return pd.DataFrame({"close": [100.0, 102.0, 99.0, 101.0], **columns}, index=DAYS)


def history(dividends: dict[str, float], first: str, last: str, close: float = 100.0) -> pd.DataFrame:
    """Every calendar day from first to last at one price, with dividends on their ex-dates."""
    days = pd.date_range(first, last)
    paid = pd.Series(0.0, index=days)
    for day, amount in dividends.items():
        paid[day] = amount
    return pd.DataFrame({"close": close, "dividend": paid}, index=days)


# ---------------------------------------------------------------- columns


def test_a_close_alone() -> None:
    market = Market.from_frame(frame())
    assert market.dates.dtype == np.dtype("datetime64[D]")
    assert market.dates.tolist() == [date(2020, 1, 2), date(2020, 1, 3), date(2020, 1, 6), date(2020, 1, 7)]
    assert market.spot.tolist() == [100.0, 102.0, 99.0, 101.0]
    assert len(market) == 4
    assert not market.has_vol
    assert market.vol_quotes.shape == (0, 4)
    assert market.vol_tenor_days.shape == (0,)
    # no rate and no dividend: cash and shares stay what they are
    assert market.rate.tolist() == market.dividend_yield.tolist() == market.dividend.tolist() == [0.0] * 4
    assert market.cash_growth.tolist() == market.share_growth.tolist() == [1.0] * 4
    # 2020-01-01 is 50 years of 365 days and 12 leap days after 1970-01-01
    assert market.day_number.tolist() == [18263, 18264, 18267, 18268]
    np.testing.assert_allclose(market.log_spot, [math.log(s) for s in (100, 102, 99, 101)], rtol=1e-15)


def test_other_columns_and_the_order_of_columns_do_not_matter() -> None:
    plain = frame(vol=0.2, rate=0.01, dividend=0.1, open=100.5, high=103.0, low=98.0, signal=1.0)
    more = plain.assign(opening="x", volatility=99.0, vol_index=50.0, vol_=7.0, vol_0=7.0, VOL=7.0, signals="x")[
        ["VOL", "vol_0", "vol_", "vol_index", "volatility", "opening", "signals", "signal", "low", "high", "open",
         "dividend", "rate", "vol", "close"]
    ]  # fmt: skip
    a, b = Market.from_frame(plain), Market.from_frame(more)
    for name in EVERY_ARRAY:
        np.testing.assert_array_equal(getattr(a, name), getattr(b, name))


def test_a_vol_column_without_a_tenor_is_of_30_days() -> None:
    vols = [0.2, np.nan, 1.5019, 5.0]  # 150.19 is the index of 1987-10-19; a day may be missing
    market = Market.from_frame(frame(vol=vols))
    assert market.has_vol
    assert market.vol_tenor_days.tolist() == [30]
    np.testing.assert_array_equal(market.vol_quotes, [vols])


def test_several_tenors_are_sorted_by_days_not_by_name() -> None:
    market = Market.from_frame(frame(vol_93=0.22, vol_9=0.25, vol_365=0.21, vol=0.2))
    assert market.vol_tenor_days.tolist() == [9, 30, 93, 365]
    np.testing.assert_array_equal(market.vol_quotes, np.repeat([[0.25], [0.2], [0.22], [0.21]], 4, axis=1))


@pytest.mark.parametrize(
    "index",
    [
        pytest.param(DAYS.strftime("%Y-%m-%d"), id="text"),
        pytest.param(pd.Index(DAYS.date, dtype=object), id="dates of Python"),
        pytest.param(DAYS + pd.Timedelta(hours=16), id="closing time"),
        pytest.param(DAYS.as_unit("s"), id="seconds"),
    ],
)
def test_dates_in_other_forms(index: pd.Index) -> None:
    assert Market.from_frame(frame().set_index(index)).dates.tolist() == [stamp.date() for stamp in DAYS]


def test_a_day_of_another_time_zone_stays_the_day() -> None:
    market = Market.from_frame(frame().set_index(DAYS.tz_localize("Asia/Tokyo")))
    assert market.dates.tolist() == [stamp.date() for stamp in DAYS]


# ---------------------------------------------------------------- rate and cash (C1, C5, C11)


def test_interest_on_calendar_days_at_the_rate_of_the_day_before() -> None:
    # a year's interest of 5%, 10%, 2%, 50%: over 1 day at 5%, 3 at 10%, 1 at 2%; the last day's rate earns nothing yet
    market = Market.from_frame(frame(rate=[0.05, 0.10, 0.02, 0.50]))
    np.testing.assert_allclose(market.rate, [math.log(1 + y) for y in (0.05, 0.10, 0.02, 0.50)], rtol=1e-15)
    growth = [1.0, 1.05 ** (1 / 365), 1.05 ** (1 / 365) * 1.10 ** (3 / 365)]
    growth.append(growth[-1] * 1.02 ** (1 / 365))
    np.testing.assert_allclose(market.cash_growth, growth, rtol=1e-15)


@pytest.mark.parametrize("rate", [0.05, 0.0, -0.005, 1.0])
def test_a_constant_rate_takes_the_column_s_place(rate: float) -> None:
    market = Market.from_frame(frame(rate=[0.3, np.nan, 0.1, 0.2]), rate=rate)
    np.testing.assert_allclose(market.rate, [math.log(1 + rate)] * 4, rtol=1e-15)
    np.testing.assert_allclose(market.cash_growth, [(1 + rate) ** (d / 365) for d in (0, 1, 4, 5)], rtol=1e-15)


def test_days_before_the_first_rate_are_unknown_and_earn_nothing() -> None:
    market = Market.from_frame(frame(rate=[np.nan, np.nan, 0.02, 0.02]))
    np.testing.assert_array_equal(np.isnan(market.rate), [True, True, False, False])
    np.testing.assert_allclose(market.cash_growth, [1.0, 1.0, 1.0, 1.02 ** (1 / 365)], rtol=1e-15)


# ---------------------------------------------------------------- dividends (C5, C9)


def test_shares_grow_by_dividend_over_close_at_the_ex_date() -> None:
    # 2.04 on the second day at 102 is 2%; 0.99 on the third at 99 is 1%
    market = Market.from_frame(frame(dividend=[0.0, 2.04, 0.99, 0.0]))
    np.testing.assert_allclose(market.share_growth, [1.0, 1.02, 1.02 * 1.01, 1.02 * 1.01], rtol=1e-15)
    # D is 0, 2.04, 3.03, 3.03, over the price of the day itself
    expected = [0.0, math.log(1 + 2.04 / 102), math.log(1 + 3.03 / 99), math.log(1 + 3.03 / 101)]
    np.testing.assert_allclose(market.dividend_yield, expected, rtol=1e-14)
    assert market.dividend.tolist() == [0.0, 2.04, 0.99, 0.0]


@pytest.mark.parametrize(
    ("day", "paid"),
    [
        pytest.param("2019-03-13", 0.0, id="the eve of the first"),
        pytest.param("2019-03-14", 1.0, id="the first ex-date"),
        pytest.param("2019-06-13", 1.0, id="the eve of the second"),
        pytest.param("2019-06-14", 3.0, id="the second ex-date"),
        pytest.param("2020-03-12", 3.0, id="364 days after the first"),  # 2020-02-29 is one of them
        pytest.param("2020-03-13", 2.0, id="365 days after the first: it is outside"),
        pytest.param("2020-06-12", 2.0, id="364 days after the second"),
        pytest.param("2020-06-13", 0.0, id="365 days after the second"),
    ],
)
def test_dividends_of_the_365_days_up_to_and_including_the_day(day: str, paid: float) -> None:
    # the 365 days up to and including t are t - 364 to t
    table = history({"2019-03-14": 1.0, "2019-06-14": 2.0}, "2019-01-01", "2020-12-31", close=50.0)
    market = Market.from_frame(table)
    row = table.index.get_loc(day)
    assert market.dividend_yield[row] == pytest.approx(math.log(1 + paid / 50), rel=1e-14, abs=1e-15)


def test_trailing_dividends_by_a_loop_over_dates() -> None:
    rng = np.random.default_rng(5)
    days = pd.bdate_range("2003-01-01", "2007-12-31")
    days = days[rng.random(len(days)) > 0.05]
    paid = np.where(rng.random(len(days)) < 0.02, rng.uniform(0.1, 3.08, len(days)), 0.0)
    close = rng.uniform(20.0, 40.0, len(days))
    market = Market.from_frame(pd.DataFrame({"close": close, "dividend": paid}, index=days))
    dates = [stamp.date() for stamp in days]
    gone = [(day, amount) for day, amount in zip(dates, paid.tolist()) if amount]
    assert len(gone) > 15
    expected = [
        math.log1p(math.fsum(a for ex, a in gone if ex <= day and ex > day - timedelta(days=365)) / price)
        for day, price in zip(dates, close.tolist())
    ]
    np.testing.assert_allclose(market.dividend_yield, expected, rtol=1e-12, atol=1e-14)


@pytest.mark.parametrize("constant", [0.02, 0.0, -0.01])
def test_a_constant_yield_without_dividends_is_paid_a_little_every_day(constant: float) -> None:
    market = Market.from_frame(frame(), dividend_yield=constant)
    np.testing.assert_allclose(market.dividend_yield, [math.log(1 + constant)] * 4, rtol=1e-15)
    # 2% effective a year over 0, 1, 4 and 5 days
    growth = [(1 + constant) ** (days / 365) for days in (0, 1, 4, 5)]
    np.testing.assert_allclose(market.share_growth, growth, rtol=1e-15)
    step = [(1 + constant) ** (days / 365) - 1 for days in (0, 1, 3, 1)]
    np.testing.assert_allclose(market.dividend, [s * d for s, d in zip((100, 102, 99, 101), step)], rtol=1e-10)


def test_a_constant_yield_beside_dividends_is_for_the_forwards_only() -> None:
    market = Market.from_frame(frame(dividend=[0.0, 2.04, 0.0, 0.0]), dividend_yield=0.03)
    np.testing.assert_allclose(market.dividend_yield, [math.log(1.03)] * 4, rtol=1e-15)
    assert market.dividend.tolist() == [0.0, 2.04, 0.0, 0.0]
    np.testing.assert_allclose(market.share_growth, [1.0, 1.02, 1.02, 1.02], rtol=1e-15)


# ---------------------------------------------------------------- nothing changes


@pytest.mark.parametrize("name", EVERY_ARRAY)
def test_arrays_are_read_only(name: str) -> None:
    market = Market.from_frame(frame(vol=0.2, rate=0.01, dividend=0.1, open=100.5, high=103.0, low=98.0, signal=1.0))
    with pytest.raises(ValueError, match="read-only"):
        getattr(market, name)[:] = getattr(market, name)
    with pytest.raises(dataclasses.FrozenInstanceError):
        setattr(market, name, getattr(market, name))


def test_the_frame_is_neither_changed_nor_shared() -> None:
    table = frame(vol=0.2, rate=0.01, dividend=0.1)
    before = table.copy(deep=True)
    market = Market.from_frame(table)
    Market.from_frame(table, rate=0.05, dividend_yield=0.02)
    pd.testing.assert_frame_equal(table, before)
    # and a later change of the frame does not reach the market
    table.loc[:, :] = 7.0
    assert market.spot.tolist() == [100.0, 102.0, 99.0, 101.0]
    assert market.dividend.tolist() == [0.1] * 4
    assert market.vol_quotes.tolist() == [[0.2] * 4]


# ---------------------------------------------------------------- what is refused


def with_value(column: str, row: int, value: Any) -> pd.DataFrame:
    """The frame with a vol, a rate and a dividend, and one cell changed."""
    table = frame(vol=0.2, rate=0.01, dividend=0.1).astype(object if isinstance(value, str) else float)
    table.loc[DAYS[row], column] = value
    return table


# fmt: off
CELLS: list[tuple[str, int, Any, str]] = [
    ("close", 1, 0.0, "close on 2020-01-03 is 0; it must be a finite number above 0"),
    ("close", 2, -99.5, "close on 2020-01-06 is -99.5; it must be a finite number above 0"),
    ("close", 0, math.nan, "close on 2020-01-02 is nan; it must be a finite number above 0"),
    ("close", 3, math.inf, "close on 2020-01-07 is inf; it must be a finite number above 0"),
    ("dividend", 1, math.nan, "dividend on 2020-01-03 is nan; it must be a finite number above minus the price"),
    ("dividend", 1, math.inf, "dividend on 2020-01-03 is inf; it must be a finite number above minus the price"),
    ("dividend", 1, -103.0, "dividend on 2020-01-03 is -103; it must be a finite number above minus the price"),
    ("rate", 2, 2.5, "rate on 2020-01-06 is 2.5; a decimal rate is above -1 and at most 1 (0.05 is 5%)"),
    ("rate", 2, -1.0, "rate on 2020-01-06 is -1; a decimal rate is above -1 and at most 1 (0.05 is 5%)"),
    ("rate", 2, math.inf, "rate on 2020-01-06 is inf; a decimal rate is above -1 and at most 1 (0.05 is 5%)"),
    ("vol", 3, 20.0, "vol on 2020-01-07 is 20; a decimal vol is above 0 and at most 5 (0.20 is 20%)"),
    ("vol", 0, 5.01, "vol on 2020-01-02 is 5.01; a decimal vol is above 0 and at most 5 (0.20 is 20%)"),
    ("vol", 1, 0.0, "vol on 2020-01-03 is 0; a decimal vol is above 0 and at most 5 (0.20 is 20%)"),
    ("vol", 1, -0.2, "vol on 2020-01-03 is -0.2; a decimal vol is above 0 and at most 5 (0.20 is 20%)"),
    ("vol", 1, math.inf, "vol on 2020-01-03 is inf; a decimal vol is above 0 and at most 5 (0.20 is 20%)"),
    *[
        (column, 1, "n/a", f"column '{column}' is not all numbers: could not convert string to float: 'n/a'")
        for column in ("close", "dividend", "rate", "vol")
    ],
]
# fmt: on


@pytest.mark.parametrize(
    ("column", "row", "value", "message"), CELLS, ids=[f"{column} {value}" for column, _, value, _ in CELLS]
)
def test_cells_that_cannot_be(column: str, row: int, value: Any, message: str) -> None:
    with pytest.raises(MarketError) as caught:
        Market.from_frame(with_value(column, row, value))
    assert str(caught.value) == message


@pytest.mark.parametrize(
    ("wrong", "message"),
    [
        (-0.1, "vol on 2020-01-03 is -0.1; a decimal vol is above 0 and at most 5 (0.20 is 20%)"),
        (0.0, "vol on 2020-01-03 is 0; a decimal vol is above 0 and at most 5 (0.20 is 20%)"),
        (20.0, "vol on 2020-01-03 is 20; a decimal vol is above 0 and at most 5 (0.20 is 20%)"),
    ],
)
@pytest.mark.parametrize("other", [0.3, math.nan])
def test_of_several_tenors_the_wrong_one_is_shown(wrong: float, message: str, other: float) -> None:
    with pytest.raises(MarketError) as caught:
        Market.from_frame(frame(vol_30=[0.2, wrong, 0.2, 0.2], vol_90=[0.2, other, 0.2, 0.2]))
    assert str(caught.value) == message


def test_the_first_of_several_is_named() -> None:
    with pytest.raises(MarketError, match="close on 2020-01-03 is nan;"):
        Market.from_frame(frame(close=[100.0, math.nan, 99.0, -1.0]))


@pytest.mark.parametrize(
    ("table", "message"),
    [
        pytest.param(pd.DataFrame(), "the frame has no column 'close'; its columns are: ", id="nothing"),
        pytest.param(
            frame().rename(columns={"close": "Close"}).assign(vol=0.2),
            "the frame has no column 'close'; its columns are: Close, vol",
            id="no close",
        ),
        pytest.param(frame()[:0], "the frame has 0 row(s); a market needs at least 2 trading days", id="no row"),
        pytest.param(frame()[:1], "the frame has 1 row(s); a market needs at least 2 trading days", id="one row"),
        pytest.param(
            frame().iloc[[0, 2, 1, 3]],
            "dates must increase without repeats, but 2020-01-03 follows 2020-01-06: sort the frame and drop repeats",
            id="unsorted",
        ),
        pytest.param(
            frame()[::-1],
            "dates must increase without repeats, but 2020-01-06 follows 2020-01-07: sort the frame and drop repeats",
            id="newest first",
        ),
        pytest.param(
            frame().iloc[[0, 1, 1, 2]],
            "dates must increase without repeats, but 2020-01-03 follows 2020-01-03: sort the frame and drop repeats",
            id="a date twice",
        ),
        pytest.param(
            frame().set_index(pd.date_range("2020-01-02 09:00", periods=4, freq="h")),
            "dates must increase without repeats, but 2020-01-02 follows 2020-01-02: sort the frame and drop repeats",
            id="hours of one day",
        ),
        pytest.param(
            frame(vol=0.2, vol_30=0.2), "two vol columns of 30 days; a column 'vol' means 30 days", id="vol and vol_30"
        ),
        pytest.param(
            frame(vol_90=0.2, vol_090=0.2), "two vol columns of 90 days; a column 'vol' means 30 days", id="vol_090"
        ),
    ],
)
def test_frames_that_are_no_market(table: pd.DataFrame, message: str) -> None:
    with pytest.raises(MarketError) as caught:
        Market.from_frame(table)
    assert str(caught.value) == message


@pytest.mark.parametrize(
    "index",
    [
        pytest.param(pd.Index(list("abcd")), id="words"),
        pytest.param(pd.RangeIndex(4), id="row numbers"),
        pytest.param(pd.Index([20200102, 20200103, 20200106, 20200107]), id="dates as whole numbers"),
        pytest.param(pd.DatetimeIndex([pd.NaT, *DAYS[1:]]), id="no first date"),
        pytest.param(pd.DatetimeIndex([*DAYS[:3], pd.NaT]), id="no last date"),
    ],
)
def test_an_index_that_is_no_dates(index: pd.Index) -> None:
    with pytest.raises(MarketError):
        Market.from_frame(frame().set_index(index))


@pytest.mark.parametrize(
    ("constants", "message"),
    [
        ({"rate": 5}, "rate on 2020-01-02 is 5; a decimal rate is above -1 and at most 1 (0.05 is 5%)"),
        ({"rate": -1}, "rate on 2020-01-02 is -1; a decimal rate is above -1 and at most 1 (0.05 is 5%)"),
        ({"dividend_yield": 2}, "dividend yield is 2; a decimal yield is above -0.5 and at most 1 (0.02 is 2%)"),
        ({"dividend_yield": -0.5}, "dividend yield is -0.5; a decimal yield is above -0.5 and at most 1 (0.02 is 2%)"),
        (
            {"dividend_yield": math.nan},
            "dividend yield is nan; a decimal yield is above -0.5 and at most 1 (0.02 is 2%)",
        ),
    ],
    ids=str,
)
def test_constants_that_cannot_be(constants: dict[str, Any], message: str) -> None:
    with pytest.raises(MarketError) as caught:
        Market.from_frame(frame(), **constants)
    assert str(caught.value) == message


@pytest.mark.parametrize("name", ["rate", "dividend_yield"])
def test_constants_of_another_type(name: str) -> None:
    constants: dict[str, Any] = {name: "2%"}
    with pytest.raises(MarketError):
        Market.from_frame(frame(), **constants)


def test_dividends_below_nothing_that_eat_the_price_within_a_year() -> None:
    """Each is above minus the price, but their sum is not: no yield can be had from it."""
    with pytest.raises(MarketError):
        Market.from_frame(frame(dividend=[0.0, -60.0, -60.0, 0.0]))


@pytest.mark.parametrize(
    ("name", "value", "message"),
    [
        ("spot", np.ones(3), "spot has shape (3,); it must be (4,), one value a trading day"),
        ("dividend", np.ones(5), "dividend has shape (5,); it must be (4,), one value a trading day"),
        ("rate", np.ones((1, 4)), "rate has shape (1, 4); it must be (4,), one value a trading day"),
        ("dividend_yield", np.ones(()), "dividend_yield has shape (); it must be (4,), one value a trading day"),
        ("vol_quotes", np.full((2, 4), 0.2), "vol_quotes has shape (2, 4); it must be (1, 4)"),
        ("vol_tenor_days", np.array([30, 90]), "vol_quotes has shape (1, 4); it must be (2, 4)"),
    ],
)
def test_arrays_of_another_shape(name: str, value: Any, message: str) -> None:
    market = Market.from_frame(frame(vol=0.2))
    with pytest.raises(MarketError) as caught:
        dataclasses.replace(market, **{name: value})
    assert str(caught.value) == message
