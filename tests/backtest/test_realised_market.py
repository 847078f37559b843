"""Realised volatility as a source on a market: markups, gaps, no look-ahead, bars that are none (C7a).

Rung: identity (no look-ahead bit for bit, variances by the estimator alone) and behaviour (messages; the opens of the
S&P 500, most of which are none before 2006).
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import arch.data.sp500
import numpy as np
import pandas as pd
import pytest

from backtest import Market, Volatility
from backtest.errors import MarketError, OverlayError
from backtest.volatility import FLAT, RealisedVolatility
from backtest.volatility.realised import (
    ESTIMATORS,
    close_to_close,
    exponentially_weighted,
    rogers_satchell,
    yang_zhang,
)

HALF_LIFE = {name: 5 if name == "ewma" else None for name in ESTIMATORS}


def source(estimator: str, **arguments: Any) -> RealisedVolatility:
    return RealisedVolatility(estimator=estimator, half_life=HALF_LIFE[estimator], **arguments)


def random_bars(count: int = 400, seed: int = 5) -> pd.DataFrame:
    """Bars that can be: nights and days of fat tails, ranges around them."""
    rng = np.random.default_rng(seed)
    night, day = 0.006 * rng.standard_t(4, count), 0.012 * rng.standard_t(4, count)
    close = np.log(100.0) + np.cumsum(night + day)
    open_ = close - day
    high = np.maximum(open_, close) + 0.005 * rng.random(count)
    low = np.minimum(open_, close) - 0.005 * rng.random(count)
    columns = {"open": open_, "high": high, "low": low, "close": close}
    return np.exp(pd.DataFrame(columns, index=pd.bdate_range("2021-01-04", periods=count)))


# ---------------------------------------------------------------- on a market


def test_a_window_of_63_unless_given() -> None:
    close = random_bars(70)["close"].to_numpy()
    np.testing.assert_array_equal(close_to_close(close), close_to_close(close, window=63))
    assert RealisedVolatility() == RealisedVolatility(
        window=63, markup=1.0, estimator="close", half_life=None, markup_points=0.0
    )


@pytest.mark.parametrize(("closes", "known"), [(5, 0), (6, 1), (3, 0), (1, 0)])
def test_short_histories(closes: int, known: int) -> None:
    bars = {name: values.to_numpy() for name, values in random_bars(closes).items()}
    args = (bars["open"], bars["high"], bars["low"], bars["close"])
    assert np.isfinite(close_to_close(bars["close"], 5)).sum() == known
    assert np.isfinite(exponentially_weighted(bars["close"], 3, 5)).sum() == known
    assert np.isfinite(yang_zhang(*args, 5)).sum() == known
    # bars need no close before them
    assert np.isfinite(rogers_satchell(*args, 5)).sum() == max(closes - 4, 0)


@pytest.mark.parametrize("estimator", ESTIMATORS)
def test_no_look_ahead(estimator: str) -> None:
    bars = random_bars(120)
    changed = bars.copy()
    changed.iloc[60:] *= 1.7
    changed.iloc[60:, 1] *= 1.1
    a, b = (source(estimator, window=21).quotes(Market.from_frame(frame))[1][0] for frame in (bars, changed))
    np.testing.assert_array_equal(a[:60], b[:60])
    assert a[60] != b[60]


def test_on_a_market() -> None:
    bars = random_bars(40)
    bound = Volatility(source=RealisedVolatility(window=21, markup=1.1), smile=FLAT).on(Market.from_frame(bars))
    assert bound.first_day == 21
    assert (bound.missing(21, 39), bound.missing(15, 39), bound.missing(20, 20)) == (None, 15, 20)
    # one vol for every tenor: total variance is (1.1 realised)^2 tau
    day, tau = np.array([21, 30, 39]), np.array([0.1, 0.5, 2.0])
    expected = (1.1 * close_to_close(bars["close"].to_numpy(), 21)[day]) ** 2 * tau
    np.testing.assert_allclose(bound.slice(day, tau).total_variance(np.array([-0.3, 0.0, 0.2])), expected, rtol=1e-14)


def test_realised_vol_is_never_converted() -> None:
    market = Market.from_frame(random_bars(30))
    day, tau = np.array([15]), np.array([30 / 365])
    read = [
        Volatility(source=RealisedVolatility(window=10), quote=quote)
        .on(market)
        .slice(day, tau)
        .total_variance(0.0 * tau)
        for quote in ("at the money", "variance swap")
    ]
    np.testing.assert_array_equal(read[0], read[1])
    assert read[0][0] == pytest.approx(close_to_close(market.spot, 10)[15] ** 2 * 30 / 365, rel=1e-14)


def test_markup_as_a_factor_then_in_points() -> None:
    # plain 20% to 30%: times 1.1 and 2 points more
    market = Market.from_frame(random_bars(60))
    plain = source("yang-zhang", window=21).quotes(market)[1]
    marked = source("yang-zhang", window=21, markup=1.1, markup_points=2.0).quotes(market)[1]
    np.testing.assert_allclose(marked, plain * 1.1 + 0.02, rtol=1e-14)
    # where nothing is left the day has no vol
    level = float(np.nanmedian(plain))
    less = source("yang-zhang", window=21, markup_points=-100 * level).quotes(market)[1]
    np.testing.assert_array_equal(np.isnan(less), np.isnan(plain) | (plain <= level))


def test_bars_with_gaps() -> None:
    bars = random_bars(60)
    bars.iloc[30, 1] = np.nan  # a day without a high
    bound = Volatility(source=source("parkinson", window=10)).on(Market.from_frame(bars))
    # windows that end on it or on one of the nine days after it
    assert (bound.missing(9, 59), bound.missing(9, 29), bound.missing(40, 59)) == (30, None, None)
    assert bound.missing(39, 59) == 39


# ---------------------------------------------------------------- bars that are none


def refusal(make: Callable[[], object], error: type[Exception]) -> str:
    with pytest.raises(error) as caught:
        make()
    return str(caught.value)


@pytest.mark.parametrize(
    ("estimator", "dropped", "message"),
    [
        ("parkinson", ["high"], "needs the columns high, low, and the history has no high"),
        ("parkinson", ["high", "low"], "needs the columns high, low, and the history has no high and no low"),
        ("garman-klass", ["open"], "needs the columns open, high, low, and the history has no open"),
        ("rogers-satchell", ["low"], "needs the columns open, high, low, and the history has no low"),
        (
            "yang-zhang", ["open", "high", "low"],
            "needs the columns open, high, low, and the history has no open and no high and no low",
        ),
    ],
)  # fmt: skip
def test_columns_that_are_not_there(estimator: str, dropped: list[str], message: str) -> None:
    market = Market.from_frame(random_bars(80).drop(columns=dropped))
    found = refusal(lambda: Volatility(source=source(estimator)).on(market), MarketError)
    assert found == f'estimator = "{estimator}" {message}'


def with_repeated_opens(days: int, repeated: range) -> Market:
    bars = random_bars(days)
    rows = np.array(repeated)
    bars.iloc[rows, 0] = bars["close"].to_numpy()[rows - 1]
    bars["high"] = bars.max(axis=1)
    bars["low"] = bars.min(axis=1)
    return Market.from_frame(bars)


@pytest.mark.parametrize("estimator", ["garman-klass", "rogers-satchell", "yang-zhang"])
def test_opens_that_repeat_the_close_before(estimator: str) -> None:
    """Nine of the ten opens of a window that ends on day 30; eight of ten are let pass."""
    market = with_repeated_opens(60, range(22, 31))
    bound = Volatility(source=source(estimator, window=10)).on(market)
    assert refusal(lambda: bound.missing(20, 59), MarketError) == (
        f'estimator = "{estimator}" needs real opening prices, and 90% of those from 2021-02-02 to 2021-02-15 only '
        "repeat the close before: choose another estimator, or a window with real ones"
    )
    assert [str(market.dates[day]) for day in (21, 30)] == ["2021-02-02", "2021-02-15"]
    # day 29 sees eight repeats of ten, 31 nine, and 32 eight again
    assert bound.missing(20, 29) is None
    assert bound.missing(32, 59) is None
    assert "from 2021-02-03 to 2021-02-16" in refusal(lambda: bound.missing(31, 59), MarketError)
    # those that do not look at opens take the same bars
    for other in ("close", "ewma", "parkinson"):
        assert Volatility(source=source(other, window=10)).on(market).missing(20, 59) is None


def test_highs_and_lows_that_are_one_price() -> None:
    bars = random_bars(60)
    bars.iloc[20:30, :3] = bars.iloc[20:30, [3]].to_numpy()  # early index files: one price for all four
    bound = Volatility(source=source("parkinson", window=10)).on(Market.from_frame(bars))
    assert refusal(lambda: bound.missing(15, 59), MarketError) == (
        'estimator = "parkinson" needs real highs and lows, and 90% of those from 2021-01-29 to 2021-02-11 are one and '
        "the same price: choose another estimator, or a window with real ones"
    )
    assert (bound.missing(15, 27), bound.missing(31, 59)) == (None, None)


@pytest.mark.parametrize(
    ("estimator", "prices", "shown"),
    [
        ("parkinson", (100.0, 101.0, 102.0, 101.5), "high 101, low 102, close 101.5"),
        ("parkinson", (100.0, 101.0, 99.0, 101.5), "high 101, low 99, close 101.5"),
        ("yang-zhang", (98.0, 101.0, 99.0, 100.5), "open 98, high 101, low 99, close 100.5"),
    ],
    ids=["high below low", "close outside", "open outside"],
)
def test_bars_that_cannot_be(estimator: str, prices: tuple[float, ...], shown: str) -> None:
    bars = random_bars(60)
    bars.iloc[30] = prices
    bound = Volatility(source=source(estimator, window=10)).on(Market.from_frame(bars))
    assert refusal(lambda: bound.missing(15, 59), MarketError) == (
        f'estimator = "{estimator}" needs bars that can be, and that of 2021-02-15 has {shown}: correct it'
    )
    # outside every window that is used it harms nobody; an open that is not read neither
    assert (bound.missing(15, 29), bound.missing(40, 59)) == (None, None)
    if "open" in shown:
        assert Volatility(source=source("parkinson", window=10)).on(Market.from_frame(bars)).missing(15, 59) is None


def test_opens_of_the_sp500() -> None:
    """Up to 2005 the file's opens are the closes before, 97 of 100; from 2008 to 2012 they are real, then mixed."""
    frame = arch.data.sp500.load()
    frame = frame.rename(columns=str.lower)[["open", "high", "low", "close"]]
    market = Market.from_frame(frame)
    bound = Volatility(source=RealisedVolatility(estimator="yang-zhang")).on(market)
    early, first, last = np.searchsorted(market.dates, np.array(["2000-01-03", "2008-01-02", "2012-12-31"], "M8[D]"))
    assert bound.missing(int(first), int(last)) is None
    assert refusal(lambda: bound.missing(int(early), int(last)), MarketError).startswith(
        'estimator = "yang-zhang" needs real opening prices, and 97% of those from 1999-10-05 to 2000-01-03 only repeat'
    )


@pytest.mark.parametrize("name", ["high", "low"])
def test_highs_and_lows_of_a_market(name: str) -> None:
    bars = random_bars(5)
    plain = Market.from_frame(bars)
    np.testing.assert_array_equal(getattr(plain, name), bars[name])
    assert getattr(Market.from_frame(bars[["close"]]), name) is None
    bars.loc[bars.index[2], name] = 0.0
    assert refusal(lambda: Market.from_frame(bars), MarketError) == (
        f"{name} on 2021-01-06 is 0; it must be a number above 0"
    )


# ---------------------------------------------------------------- arguments


@pytest.mark.parametrize(
    ("arguments", "field", "message"),
    [
        (
            {"estimator": "garch"}, "estimator",
            "estimator is 'garch'; it takes one of: close, ewma, parkinson, garman-klass, rogers-satchell, yang-zhang",
        ),
        (
            {"estimator": "ewma"}, "half_life",
            "half_life is None; it takes a whole number from 1 to 2520 trading days (11 is a common one)",
        ),
        (
            {"estimator": "ewma", "half_life": 0}, "half_life",
            "half_life is 0; it takes a whole number from 1 to 2520 trading days (11 is a common one)",
        ),
        (
            {"half_life": 11}, "half_life",
            "half_life belongs to estimator = \"ewma\", and the estimator is 'close': leave it out",
        ),
        (
            {"markup_points": 101.0}, "markup_points",
            "markup_points is 101.0; it takes a number from -100 to 100 vol points",
        ),
    ],
)  # fmt: skip
def test_arguments_that_make_no_sense(arguments: dict[str, Any], field: str, message: str) -> None:
    with pytest.raises(OverlayError) as caught:
        RealisedVolatility(**arguments)
    assert str(caught.value) == message
    assert caught.value.field == field
