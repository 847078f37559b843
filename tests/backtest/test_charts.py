"""Charts of paths: what is drawn, read back from the matplotlib objects.

Rung: behaviour, on a replay small enough to know every roll.
"""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
from matplotlib.collections import LineCollection
from matplotlib.dates import date2num
from matplotlib.figure import Figure

from backtest import Leg, Market, Overlay, PercentOfSpot, Replay, charts, replay
from backtest.charts.paths import spread

PUT = Leg(position="long", right="put", roll="quarter", strike=PercentOfSpot(95))
CALL = Leg(position="short", right="call", roll="month", strike=PercentOfSpot(103))


def made(*legs: Leg, years: int = 2, name: str = "") -> Replay:
    """Legs on a price that falls by a fifth, then climbs back, each over half a year."""
    days = pd.bdate_range("2010-03-01", periods=260 * years + 30, name="date")
    close = 100 * np.exp(-0.2 * np.sin(np.pi * np.arange(len(days)) / 260) ** 2)
    market = Market.from_frame(pd.DataFrame({"close": close, "vol": 0.2}, index=days), rate=0.01)
    return replay(market, Overlay(legs=legs, name=name))


@pytest.fixture
def two_years() -> Replay:
    return made(PUT, CALL, name="a put and a call")


def lines_by_label(axes) -> dict[str, np.ndarray]:
    return {str(line.get_label()): np.asarray(line.get_ydata(), dtype=float) for line in axes.lines}


def test_growth_is_drawn_on_a_log_scale_with_the_name_and_value_at_each_end(two_years: Replay) -> None:
    axes = Figure().subplots()
    series = {"overlay": (charts.OVERLAY, two_years.wealth), "hold": (charts.HOLD, two_years.hold)}
    assert charts.growth_chart(axes, dates=two_years.dates, series=series) is axes
    drawn = lines_by_label(axes)
    np.testing.assert_array_equal(drawn["overlay"], two_years.wealth)
    np.testing.assert_array_equal(drawn["hold"], two_years.hold)
    assert axes.get_yscale() == "log"
    assert {text.get_text() for text in axes.texts} == {
        f"overlay {two_years.wealth[-1]:.2f}",
        f"hold {two_years.hold[-1]:.2f}",
    }
    overlay, hold = axes.lines
    assert overlay.get_zorder() > hold.get_zorder()
    assert overlay.get_linewidth() > hold.get_linewidth()


def test_a_ruined_path_ends_where_its_wealth_does() -> None:
    axes = Figure().subplots()
    dates = np.arange("2020-01-01", "2020-01-06", dtype="datetime64[D]")
    ruined = np.array([1.0, 0.5, 0.25, np.nan, np.nan])
    charts.growth_chart(axes, dates=dates, series={"overlay": (charts.OVERLAY, ruined)})
    assert [text.get_text() for text in axes.texts] == ["overlay 0.25"]


def test_drawdown_is_the_fall_below_the_highest_so_far_in_percent() -> None:
    axes = Figure().subplots()
    dates = np.arange("2020-01-01", "2020-01-05", dtype="datetime64[D]")
    charts.drawdown_chart(axes, dates=dates, series={"overlay": (charts.OVERLAY, np.array([1.0, 2.0, 1.0, 1.5]))})
    # by hand: at the peak, at the peak, half of 2, a quarter below 2
    np.testing.assert_allclose(lines_by_label(axes)["overlay"], [0, 0, -50, -25], rtol=1e-15)


def test_an_exposure_is_a_line_around_zero_in_its_unit() -> None:
    axes = Figure().subplots()
    dates = np.arange("2020-01-01", "2020-01-06", dtype="datetime64[D]")
    values = np.array([12.0, -3.0, 0.0, 7.5, np.nan])
    assert charts.exposure_chart(axes, dates=dates, values=values, unit="vega, basis points") is axes
    line, zero = axes.lines
    np.testing.assert_array_equal(np.asarray(line.get_ydata()), values)
    assert list(zero.get_ydata()) == [0.0, 0.0]
    assert axes.get_ylabel() == "vega, basis points"
    assert [axes.yaxis.get_major_formatter()(value) for value in (-20.0, 0.0, 2.5, 0.05)] == ["−20", "0", "2.5", "0.05"]


def test_the_band_has_a_line_per_option_a_tick_per_roll_and_a_dot_where_it_paid(two_years: Replay) -> None:
    axes = Figure().subplots()
    charts.band_chart(axes, replay=two_years)
    collections = {str(c.get_label()): c for c in axes.collections if isinstance(c, LineCollection)}
    assert set(collections) == {"put bought", "call sold"}
    for name, leg in zip(("put bought", "call sold"), two_years.legs, strict=True):
        segments = np.array(collections[name].get_segments())
        np.testing.assert_array_equal(segments[:, 0, 1], leg.strike)
        np.testing.assert_array_equal(segments[:, 0, 0], date2num(two_years.dates[leg.opened]))
        np.testing.assert_array_equal(segments[:, 1, 0], date2num(two_years.dates[leg.closed]))
    ticks = [line for line in axes.lines if line.get_marker() == "|"]
    assert [len(t.get_xdata()) for t in ticks] == [len(leg.opened) for leg in two_years.legs]
    dots = [line for line in axes.lines if line.get_marker() == "o" and len(line.get_xdata())]  # not the legend's
    spot = two_years.spot
    for line, leg, sign in zip(dots, two_years.legs, (-1, 1), strict=True):
        ended = ~leg.schedule.live
        paid = sign * (spot[leg.closed] - leg.strike) > 0
        np.testing.assert_array_equal(np.asarray(line.get_ydata()), leg.strike[paid & ended])
        assert (paid & ended).any()


def test_the_band_from_a_later_day_begins_there(two_years: Replay) -> None:
    axes = Figure().subplots()
    first = 200
    charts.band_chart(axes, replay=two_years, first=first)
    start = date2num(two_years.dates[first])
    segments = np.concatenate([c.get_segments() for c in axes.collections if isinstance(c, LineCollection)])
    assert segments[:, 0, 0].min() == start
    live = sum(int(((leg.opened < first) & (leg.closed > first)).sum()) for leg in two_years.legs)
    rolled = sum(int((leg.opened >= first).sum()) for leg in two_years.legs)
    assert len(segments) == live + rolled
    assert sum(len(line.get_xdata()) for line in axes.lines if line.get_marker() == "|") == rolled
    assert axes.get_legend() is None


def test_many_legs_share_names_by_right_and_side_and_ratio_zero_is_not_drawn() -> None:
    lower = Leg(position="short", right="put", roll="quarter", strike=PercentOfSpot(80))
    second = Leg(position="long", right="put", roll="year", strike=PercentOfSpot(90))
    unused = Leg(position="long", right="call", roll="year", ratio=0.0, strike=PercentOfSpot(120))
    axes = Figure().subplots()
    charts.band_chart(axes, replay=made(PUT, lower, second, CALL, unused))
    labels = [text.get_text() for text in axes.get_legend().get_texts()]
    assert labels == ["price at the close", "put bought", "settled in the money", "put sold", "call sold"]


@pytest.mark.parametrize(("years", "panels"), [(2, 1), (8, 2)])
def test_the_three_pictures_of_a_results_folder(years: int, panels: int, tmp_path) -> None:
    hostile = "$a_{ <b>" + "x" * 300
    found = made(PUT, CALL, years=years, name=hostile)
    figures = charts.replay_figures(
        dates=found.dates, growth_paths={"overlay": found.wealth, "hold": found.hold}, replay=found, title=hostile
    )
    assert list(figures) == ["growth", "drawdown", "band"]
    assert [len(figure.axes) for figure in figures.values()] == [1, 1, panels]
    for name, figure in figures.items():
        title = figure.get_suptitle()
        assert title.startswith("$a_{ <b>xxx")
        assert len(title) < 100
        figure.savefig(tmp_path / f"{name}.png")
        assert (tmp_path / f"{name}.png").read_bytes().startswith(b"\x89PNG")


def test_labels_that_would_touch_are_moved_apart_and_no_further() -> None:
    assert spread([0.1, 0.5], 0.1) == [0.1, 0.5]
    # by hand: two at 0.5 stand 0.05 to either side; a third at 0.62 would be 0.07 from the upper: all three centre
    assert spread([0.5, 0.5, 0.62], 0.1) == pytest.approx([0.44, 0.54, 0.64], abs=1e-12)
    assert spread([], 0.1) == []
