"""Quotes of a surface: how they come in, what is refused, and replays on them (C7).

Rung: identity (a surface that is flat, or holds the SSVI smile, replays as that smile does) and behaviour (messages).
"""

from __future__ import annotations

import dataclasses
from collections.abc import Callable
from typing import Any

import numpy as np
import pandas as pd
import pytest

from backtest import Delta, Leg, Market, Overlay, PercentOfSpot, Volatility, replay
from backtest.errors import MarketError, PlanError
from backtest.volatility import FLAT, INDEX, ImpliedSurface, SurfaceQuotes

SURFACE = Volatility(source=ImpliedSurface())
DAYS = pd.bdate_range("2021-01-04", periods=4, name="date")
DATES = DAYS.to_numpy()


def table(column: str = "percent_of_spot", **changed: Any) -> pd.DataFrame:
    """Two quotes of the first day and one of the third."""
    rows = {"date": DAYS[[0, 0, 2]], "days": [30, 30, 91], column: [90.0, 100.0, 100.0], "vol": [0.24, 0.20, 0.21]}
    if column == "delta":
        rows[column] = [-0.25, 0.5, 0.5]
    return pd.DataFrame({**rows, **changed})


def quotes(column: str = "percent_of_spot", **changed: Any) -> SurfaceQuotes:
    return SurfaceQuotes.from_frame(table(column, **changed), DATES)


def message(make: Callable[[], object], error: type[Exception] = MarketError) -> str:
    with pytest.raises(error) as caught:
        make()
    return str(caught.value)


# ---------------------------------------------------------------- the door


def test_a_long_frame() -> None:
    found = quotes(
        date=DAYS[[2, 0, 0]], days=[91, 30, 30], percent_of_spot=[100, 100, 90], vol=[0.21, 0.2, 0.24], note="x"
    )
    assert (found.kind, len(found)) == ("percent of spot", 3)
    assert found.day.tolist() == [0, 0, 2]
    assert found.tenor_days.tolist() == [30.0, 30.0, 91.0]
    assert found.value.tolist() == [90.0, 100.0, 100.0]
    assert found.vol.tolist() == [0.24, 0.20, 0.21]
    for name in ("day", "tenor_days", "value", "vol"):
        with pytest.raises(ValueError, match="read-only"):
            getattr(found, name)[:] = 1


@pytest.mark.parametrize(
    "date",
    [
        pytest.param(["2021-01-04", "2021-01-04", "2021-01-06"], id="text"),
        pytest.param(DAYS[[0, 0, 2]] + pd.Timedelta(hours=16), id="closing time"),
        pytest.param(DAYS[[0, 0, 2]].tz_localize("Asia/Tokyo"), id="another zone"),
    ],
)
def test_dates_in_other_forms(date: Any) -> None:
    assert quotes(date=date).day.tolist() == [0, 0, 2]


def test_rows_without_a_vol_are_left_out() -> None:
    found = quotes(vol=[np.nan, 0.2, 0.21], percent_of_spot=[np.nan, 100.0, 100.0])
    assert found.vol.tolist() == [0.2, 0.21]


def test_a_market_with_its_surface() -> None:
    frame = pd.DataFrame({"close": 100.0}, index=DAYS)
    surface = quotes()
    assert Market.from_frame(frame, surface=surface).surface is surface
    assert Market.from_frame(frame).surface is None
    other = SurfaceQuotes.from_frame(table(), pd.bdate_range("2021-01-01", periods=5).to_numpy())
    assert message(lambda: Market.from_frame(frame, surface=other)) == (
        "the surface was made for other trading days than those of the prices"
    )
    assert message(lambda: SURFACE.on(Market.from_frame(frame))) == (
        "the history has no quoted surface: load one, or use another source of vol"
    )


@pytest.mark.parametrize(
    ("frame", "expected"),
    [
        pytest.param(
            table().drop(columns="days"),
            "the surface has no column 'days'; its columns are: date, percent_of_spot, vol", id="no tenors",
        ),
        pytest.param(
            table().drop(columns="percent_of_spot"),
            "the surface takes one of the columns percent_of_spot, percent_of_forward, delta; its columns are: "
            "date, days, vol", id="no strikes",
        ),
        pytest.param(
            table(delta=0.5),
            "the surface takes one of the columns percent_of_spot, percent_of_forward, delta; its columns are: "
            "date, days, percent_of_spot, vol, delta", id="two kinds of strikes",
        ),
        pytest.param(table().iloc[:0], "the surface has no rows", id="empty"),
        pytest.param(table(vol=np.nan), "the surface has no quotes", id="no vols"),
        pytest.param(
            table(date=pd.to_datetime(["2021-01-04", "2021-01-09", "2021-01-10"])),
            "the surface has quotes on 2021-01-09, which is no trading day of the prices: drop such rows (2 of 3)",
            id="a weekend",
        ),
        pytest.param(
            table(date=[1, 2, 3]), "the column 'date' of the surface is not dates: it holds numbers such as 1",
            id="numbers for dates",
        ),
        pytest.param(table(date=[DAYS[0], None, DAYS[1]]), "a row of the surface has no date", id="no date"),
        pytest.param(
            table(days=[30, 0, 91]),
            "days of the surface on 2021-01-04 is 0; days to expiry are above 0 and at most 10000", id="no days",
        ),
        pytest.param(
            table(percent_of_spot=[0.9, 1.0, 1.0]),
            "percent_of_spot of the surface on 2021-01-04 is 0.9; percent of spot is from 3 to 1000 (90 is 90%)",
            id="decimals for percents",
        ),
        pytest.param(
            table("percent_of_forward", percent_of_forward=[90.0, np.nan, 100.0]),
            "percent_of_forward of the surface on 2021-01-04 is nan; percent of forward is from 3 to 1000 (90 is 90%)",
            id="no strike",
        ),
        pytest.param(
            table("delta", delta=[-25.0, 0.5, 0.5]),
            "delta of the surface on 2021-01-04 is -25; a decimal delta lies between -1 and 1 and is not 0",
            id="percents for deltas",
        ),
        pytest.param(
            table(vol=[0.2, 0.2, 21.0]),
            "vol of the surface on 2021-01-06 is 21; a decimal vol is above 0 and at most 5 (0.20 is 20%)",
            id="percents for vols",
        ),
        pytest.param(
            table(percent_of_spot=90.0),
            "the surface has two quotes for 90 percent of spot at 30 days on 2021-01-04: keep one", id="twice",
        ),
        pytest.param(
            table("delta", delta=[0.25, 0.25, 0.5]),
            "the surface has two quotes for a delta of 0.25 at 30 days on 2021-01-04: keep one", id="a delta twice",
        ),
        pytest.param(
            table(vol="x"), "column 'vol' is not all numbers: could not convert string to float: 'x'", id="text"
        ),
    ],
)  # fmt: skip
def test_frames_that_are_refused(frame: pd.DataFrame, expected: str) -> None:
    assert message(lambda: SurfaceQuotes.from_frame(frame, DATES)) == expected


@pytest.mark.parametrize(
    ("changed", "expected"),
    [
        (
            {"kind": "strike"},
            "the kind of a surface is 'strike'; it is one of: percent of spot, percent of forward, delta",
        ),
        ({"vol": np.array([0.2])}, "vol has shape (1,); it must be (3,), one a quote"),
        ({"day": np.array([0, 0, 4])}, "the days of the quotes are positions from 0 to 3"),
    ],
)
def test_arrays_that_are_refused(changed: dict[str, Any], expected: str) -> None:
    assert message(lambda: dataclasses.replace(quotes(), **changed)) == expected


# ---------------------------------------------------------------- deltas that say nothing


def test_a_delta_that_no_strike_has() -> None:
    # a yield of 5% for a year leaves a call at most exp(-ln 1.05) = .9524
    frame = pd.DataFrame({"close": 100.0}, index=DAYS)
    surface = quotes("delta", days=365, delta=[0.94, 0.96, 0.5])
    market = Market.from_frame(frame, dividend_yield=0.05, surface=surface)
    assert message(lambda: SURFACE.on(market)) == (
        "no strike has a delta of 0.96 at 365 days on 2021-01-04: with the dividends to expiry the most is 0.9524"
    )
    assert SURFACE.on(Market.from_frame(frame, dividend_yield=0.04, surface=surface)).first_day == 0


def test_a_put_and_a_call_of_one_strike() -> None:
    """Without dividends the half-delta put and call have the same d1, zero; at one vol that is one strike."""
    frame = pd.DataFrame({"close": 100.0}, index=DAYS)
    agreed = quotes("delta", date=DAYS[0], days=30, delta=[-0.5, 0.5, 0.25], vol=[0.2, 0.2, 0.18])
    bound = SURFACE.on(Market.from_frame(frame, surface=agreed))
    tau, x = np.array([30 / 365]), np.array([[-0.2], [0.02 * 30 / 365], [0.01]])
    found = np.sqrt(bound.slice(np.array([0]), tau).total_variance(x) / tau)[:, 0]
    assert found[:2].tolist() == pytest.approx([0.2, 0.2], rel=1e-14)
    assert 0.18 < found[2] < 0.2


# ---------------------------------------------------------------- replays


def history(days: int = 400) -> pd.DataFrame:
    rng = np.random.default_rng(2)
    index = pd.bdate_range("2020-01-01", periods=days, name="date")
    close = 100 * np.exp(np.cumsum(rng.normal(0, 0.01, days)))
    return pd.DataFrame(
        {"close": close, "vol": 0.2 * np.exp(0.2 * np.sin(np.arange(days) / 30)), "rate": 0.03}, index=index
    )


BAND = Overlay(
    legs=(
        Leg(position="long", right="put", strike=PercentOfSpot(95), roll="quarter"),
        Leg(position="short", right="call", strike=Delta(0.25), roll="month"),
    )
)


def test_a_flat_surface_replays_as_a_flat_smile() -> None:
    frame = history()
    rows = [(d, t, k, v) for d, v in frame["vol"].items() for t in (20, 50, 200) for k in (80.0, 100.0, 120.0)]
    long = pd.DataFrame(rows, columns=["date", "days", "percent_of_spot", "vol"])
    on = Market.from_frame(frame, surface=SurfaceQuotes.from_frame(long, frame.index.to_numpy()))
    surface, flat = (replay(on, BAND, volatility=v) for v in (SURFACE, Volatility(smile=FLAT)))
    np.testing.assert_allclose(surface.wealth, flat.wealth, rtol=1e-12)
    assert np.isfinite(surface.wealth).all()
    # a series stays what is used unless the surface is asked for
    plain = Market.from_frame(frame)
    np.testing.assert_array_equal(
        replay(on, BAND, volatility=Volatility()).wealth, replay(plain, BAND, volatility=Volatility()).wealth
    )


def test_a_surface_of_the_index_like_smile_replays_nearly_as_the_smile() -> None:
    """Quoted every 2% at the tenors of the options themselves: what is left is the line between two quotes."""
    frame = history()
    percents = np.arange(60.0, 141.0, 2.0)
    rows = []
    for day, vol in frame["vol"].items():
        for tenor in (1, 3, 7, 14, 21, 30, 45, 60, 75, 91, 120):
            w = INDEX.slice(np.array(vol**2 * tenor / 365)).total_variance(np.log(percents / 100))
            rows += [(day, tenor, p, s) for p, s in zip(percents, np.sqrt(w * 365 / tenor))]
    long = pd.DataFrame(rows, columns=["date", "days", "percent_of_forward", "vol"])
    on = Market.from_frame(frame, surface=SurfaceQuotes.from_frame(long, frame.index.to_numpy()))
    surface, smile = (replay(on, BAND, volatility=v) for v in (SURFACE, Volatility(smile=INDEX)))
    for quoted, laid in zip(surface.legs, smile.legs):
        np.testing.assert_allclose(quoted.strike, laid.strike, rtol=2e-3)
        np.testing.assert_allclose(quoted.vol, laid.vol, atol=2e-3)
    np.testing.assert_allclose(surface.wealth, smile.wealth, rtol=2e-3)


def test_a_struck_delta_is_priced_at_its_quote() -> None:
    """From quotes in deltas to the strike of a delta rule and back: the 25-delta put of a tenor has its quoted vol."""
    index = pd.bdate_range("2021-01-04", periods=90, name="date")
    # 63 days from the third Friday of January to that of March
    rows = [(index[9], 63, d, v) for d, v in ((-0.10, 0.31), (-0.25, 0.27), (-0.5, 0.22))]
    rows += [(day, 63, -0.25, 0.2) for day in index[10:]]
    long = pd.DataFrame(rows, columns=["date", "days", "delta", "vol"])
    on = Market.from_frame(
        pd.DataFrame({"close": np.linspace(100, 110, 90)}, index=index),
        rate=0.03, dividend_yield=0.02, surface=SurfaceQuotes.from_frame(long, index.to_numpy()),
    )  # fmt: skip
    put = Leg(position="long", right="put", strike=Delta(0.25), roll="month", term_months=2)
    result = replay(on, Overlay(legs=(put,)), volatility=SURFACE)
    assert str(result.dates[0]) == "2021-01-15"
    assert result.legs[0].vol[0] == pytest.approx(0.27, rel=1e-9)
    assert result.legs[0].delta[0] == pytest.approx(-0.25, rel=1e-9)


def test_days_without_a_surface_in_the_window() -> None:
    frame = history(120)
    rows = [(d, 30, 100.0, 0.2) for i, d in enumerate(frame.index) if i >= 20 and not 50 <= i < 60]
    long = pd.DataFrame(rows, columns=["date", "days", "percent_of_spot", "vol"])
    on = Market.from_frame(frame, surface=SurfaceQuotes.from_frame(long, frame.index.to_numpy()))
    monthly = Overlay(legs=(Leg(position="long", right="put", strike=PercentOfSpot(95), roll="month"),))
    # quotes end on 2020-03-10, a Tuesday, and are seen until Friday and over the weekend
    assert message(lambda: replay(on, monthly, volatility=SURFACE)) == (
        "no vol on 2020-03-16, inside the window from 2020-02-21 to 2020-06-16: fill it or choose a window without it"
    )
    # it begins with the surface, on the roll date after it
    found = replay(on, monthly, volatility=SURFACE, end="2020-03-13")
    assert str(found.dates[0]) == "2020-02-21"
    with pytest.raises(PlanError, match="the vol begins on 2020-01-29"):
        replay(on, monthly, volatility=SURFACE, end="2020-01-20")
