"""Charts of many overlays: what is drawn, read back from the matplotlib objects.

Rung: hand-worked (grids of a few cells, quartiles of a few values) and identity (which overlays none other beats,
against every pair).
"""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from matplotlib.collections import LineCollection, PolyCollection
from matplotlib.colors import to_hex
from matplotlib.figure import Figure

from backtest.charts import HOLD, MIX, OVERLAY
from backtest.charts import grids as g

NAN = float("nan")


def fresh() -> Any:
    """Empty axes; matplotlib's own types are too wide to read values back through."""
    return Figure().subplots()


def line(axes: Any, label: str) -> tuple[list[float], list[float]]:
    """Places and values of the only line of this name."""
    (found,) = (one for one in axes.lines if one.get_label() == label)
    return np.asarray(found.get_xdata(), float).tolist(), np.asarray(found.get_ydata(), float).tolist()


def legend(axes: Any) -> list[str]:
    made = axes.get_legend()
    return [] if made is None else [text.get_text() for text in made.get_texts()]


# ---------------------------------------------------------------- heat map


def test_a_heat_map_shows_every_cell_scaled_with_zero_in_the_middle_and_a_gap_as_a_gap() -> None:
    axes = fresh()
    values = np.array([[0.01, -0.04, NAN], [0.0, 0.02, 0.03]])
    g.heat_map(axes, ["90", "95", "99"], ["month", "year"], values, titles=("put", "roll"), unit="points", scale=100.0)
    (image,) = axes.images
    drawn = np.ma.getdata(image.get_array())
    assert np.ma.getmaskarray(image.get_array()).tolist() == [[False, False, True], [False] * 3]
    np.testing.assert_allclose(drawn[0, :2], [1.0, -4.0], rtol=1e-15)
    assert image.get_clim() == (-4.0, 4.0)  # the farthest from zero to both sides
    assert [text.get_text() for text in axes.texts] == ["+1.00", "−4.00", "0.00", "+2.00", "+3.00"]
    # by hand: 4 of 4 is more than 0.72 of full colour, 3 of 4 too, 2 of 4 is not
    white = [text.get_color() == "#ffffff" for text in axes.texts]
    assert white == [False, True, False, False, True]
    assert [text.get_text() for text in axes.get_xticklabels()] == ["90", "95", "99"]
    assert [text.get_text() for text in axes.get_yticklabels()] == ["month", "year"]
    assert (axes.get_xlabel(), axes.get_ylabel()) == ("put", "roll")
    (bar,) = (one for one in axes.figure.axes if one is not axes)
    assert bar.get_ylabel() == "points"


def test_colours_fade_to_nothing_at_zero_and_are_blue_above_and_orange_below() -> None:
    axes = fresh()
    g.heat_map(axes, ["a", "b", "c"], ["d"], np.array([[-1.0, 0.0, 1.0]]), titles=("x", "y"), unit="u")
    colours = axes.images[0].cmap
    assert to_hex(colours(0.0)) == g.BELOW
    assert to_hex(colours(1.0)) == g.ABOVE
    assert colours(0.0)[3] == colours(1.0)[3] == 1.0
    assert max(colours(0.499)[3], colours(0.501)[3]) < 0.01
    assert colours(0.25)[3] == pytest.approx(0.5, abs=0.01)
    assert colours.get_bad()[3] == pytest.approx(g.MISSING[3])


def test_own_and_best_are_outlined_where_cells_hold_numbers_and_marked_where_they_do_not() -> None:
    small = fresh()
    g.heat_map(small, ["a", "b"], ["c", "d"], np.ones((2, 2)), titles=("x", "y"), unit="u", own=(1, 0), best=(0, 1))
    assert legend(small) == ["your overlay", "best of all"]
    named = {str(patch.get_label()): patch for patch in small.patches if not str(patch.get_label()).startswith("_")}
    own, best = named["your overlay"], named["best of all"]
    # by hand: a frame of 0.94 by 0.9 in the middle of its cell
    assert (own.get_x() + 0.47, own.get_y() + 0.45) == pytest.approx((1, 0), abs=1e-12)
    assert (best.get_x() + 0.47, best.get_y() + 0.45) == pytest.approx((0, 1), abs=1e-12)
    assert own.get_linestyle() != best.get_linestyle()

    large = fresh()
    labels = [str(n) for n in range(13)]
    g.heat_map(large, labels, labels, np.ones((13, 13)), titles=("x", "y"), unit="u", own=(3, 4), best=(12, 0))
    assert not large.texts
    assert line(large, "_your overlay") == ([3.0], [4.0])
    assert line(large, "_best of all") == ([12.0], [0.0])
    assert legend(large) == ["your overlay", "best of all"]


def test_without_any_value_there_is_an_empty_map() -> None:
    axes = fresh()
    g.heat_map(axes, ["a"], ["b"], np.array([[NAN]]), titles=("x", "y"), unit="u")
    assert np.ma.getmaskarray(axes.images[0].get_array()).all()
    assert not axes.texts


def test_labels_are_few_and_cut_and_slanted_only_where_all_are_shown() -> None:
    axes = fresh()
    many = [f"{100 + n / 4:g}" for n in range(100)]
    g.lines_over_axis(axes, many, {"one": np.zeros(100)}, title="call", unit="u")
    shown = [text.get_text() for text in axes.get_xticklabels()]
    assert 5 <= len(shown) <= g.MOST_TICKS
    assert sum(len(text) + 2 for text in shown) <= g.LETTERS_ACROSS
    assert {text.get_rotation() for text in axes.get_xticklabels()} == {0.0}
    assert [many.index(text) for text in shown] == axes.get_xticks().tolist()
    axes = fresh()
    words = ["a very long label of an axis value", "another one that is no shorter", "a third one of these", "4th"]
    g.lines_over_axis(axes, words, {"one": np.zeros(4)}, title="t" * 99, unit="u")
    assert [len(text.get_text()) for text in axes.get_xticklabels()] == [18, 18, 18, 3]
    assert {text.get_rotation() for text in axes.get_xticklabels()} == {40.0}
    assert axes.get_xlabel() == "t" * 53 + "…"


# ---------------------------------------------------------------- frontier


def test_the_frontier_draws_overlays_steps_mixes_and_marks() -> None:
    axes = fresh()
    cost, removed = np.array([1.0, 2.0, 0.5, 3.0, NAN]), np.array([5.0, 9.0, 6.0, 8.0, 7.0])
    mix_cost, mix_removed = np.array([0.0, 2.0, 4.0]), np.array([0.0, 10.0, 20.0])
    assert g.frontier(axes, cost, removed, mix_cost=mix_cost, mix_removed=mix_removed, own=3, best=2) is axes
    assert line(axes, "overlays") == ([5.0, 9.0, 6.0, 8.0], [1.0, 2.0, 0.5, 3.0])
    # by hand: for up to 6 points the third at 0.5; beyond that the second at 2 beats the fourth at 3
    assert line(axes, "least cost for as much") == ([6.0, 9.0], [0.5, 2.0])
    (steps,) = (one for one in axes.lines if one.get_label() == "least cost for as much")
    assert steps.get_drawstyle() == "steps-pre"  # between 6 and 9 points one pays for 9
    assert line(axes, "less stock, more cash") == ([0.0, 10.0, 20.0], [0.0, 2.0, 4.0])
    assert line(axes, "_your overlay") == ([8.0], [3.0])
    assert line(axes, "_best of all") == ([6.0], [0.5])
    assert axes.get_ylabel() == "points of return given up a year"
    assert axes.get_xlabel() == "points off the hold's deepest fall"
    assert set(legend(axes)) == {
        "overlays", "least cost for as much", "less stock, more cash", "your overlay", "best of all",
    }  # fmt: skip


def test_a_mark_without_figures_is_left_out_and_totals_are_not_a_year() -> None:
    axes = fresh()
    nothing = np.array([0.0])
    g.frontier(axes, np.array([NAN]), np.array([1.0]), mix_cost=nothing, mix_removed=nothing, own=0, each_year=False)
    assert "your overlay" not in legend(axes)
    assert axes.get_ylabel() == "points of return given up"


pairs = st.lists(
    st.tuples(st.sampled_from([0.0, 0.5, 1.0, 2.0, NAN]), st.sampled_from([-1.0, 0.0, 3.0, 4.0, NAN])), max_size=9
)


@given(pairs)
def test_cheapest_are_those_that_none_other_beats(found: list[tuple[float, float]]) -> None:
    cost, removed = (np.array([pair[side] for pair in found]) for side in (0, 1))
    chosen = g.cheapest(cost, removed).tolist()
    known = [n for n, pair in enumerate(found) if np.isfinite(pair).all()]
    # against every pair: another that costs no more and removes no less, and differs
    unbeaten = {
        (cost[n], removed[n]) for n in known
        if not any(cost[m] <= cost[n] and removed[m] >= removed[n] and (cost[m], removed[m]) != (cost[n], removed[n])
                   for m in known)
    }  # fmt: skip
    assert {(cost[n], removed[n]) for n in chosen} == unbeaten
    assert len(chosen) == len(unbeaten)
    assert sorted(removed[chosen].tolist()) == removed[chosen].tolist()


def test_dots_on_one_another_are_drawn_once_and_far_ones_all() -> None:
    generator = np.random.default_rng(5)
    first, second = generator.normal(size=(2, 50_000))
    shown = g.distinct_dots(first, second)
    assert len(shown) <= g.DOTS_ACROSS * g.DOTS_DOWN
    assert len(np.unique(shown)) == len(shown)
    assert {first[shown].min(), first[shown].max()} == {first.min(), first.max()}
    # every dot has a drawn one within one part of each side
    across, down = np.ptp(first) / g.DOTS_ACROSS, np.ptp(second) / g.DOTS_DOWN
    for n in generator.integers(0, 50_000, 300):
        near = (np.abs(first[shown] - first[n]) <= across) & (np.abs(second[shown] - second[n]) <= down)
        assert near.any()
    assert g.distinct_dots(np.array([NAN]), np.array([1.0])).size == 0
    assert g.distinct_dots(np.ones(3), np.ones(3)).tolist() == [0]


# ---------------------------------------------------------------- boxes and lines


def test_boxes_show_median_middle_half_and_range() -> None:
    axes = fresh()
    groups = {"month": np.array([0.01, 0.02, 0.03, 0.04, 0.09, NAN]), "year": np.array([NAN])}
    g.boxes(axes, groups, title="put roll", unit="points", scale=100.0)
    reach, middle = axes.lines[:2]
    # by hand: of 1, 2, 3, 4, 9 the quartiles are 2, 3 and 4
    np.testing.assert_allclose(reach.get_xdata(), [1.0, 9.0], rtol=1e-14)
    np.testing.assert_allclose(middle.get_xdata(), [3.0, 3.0], rtol=1e-14)
    (box,) = axes.patches
    assert (box.get_x(), box.get_width()) == pytest.approx((2.0, 2.0), rel=1e-14)
    assert [text.get_text() for text in axes.get_yticklabels()] == ["month", "year"]
    assert [text.get_text() for text in axes.texts] == ["none has this figure"]
    low, high = axes.get_ylim()
    assert low > high  # the first value on top
    assert (axes.get_xlabel(), axes.get_ylabel()) == ("points", "put roll")


def test_lines_keep_their_gaps_and_are_told_apart_without_colour() -> None:
    axes = fresh()
    series = {"Sharpe": np.array([0.1, NAN, 0.3]), "return": np.array([1.0, 2.0, 3.0])}
    g.lines_over_axis(axes, ["a", "b", "c"], series, title="axis", unit="u", scale=2.0, own=1)
    np.testing.assert_array_equal(line(axes, "Sharpe")[1], [0.2, NAN, 0.6])
    assert line(axes, "return") == ([0.0, 1.0, 2.0], [2.0, 4.0, 6.0])
    assert line(axes, "your overlay")[0] == [1.0, 1.0]
    drawn = [one for one in axes.lines if one.get_label() in series]
    assert len({(one.get_marker(), one.get_linestyle()) for one in drawn}) == 2
    assert legend(axes) == ["your overlay", "Sharpe", "return"]
    alone = fresh()
    g.lines_over_axis(alone, ["a"], {"Sharpe": np.array([0.1])}, title="axis", unit="u")
    assert legend(alone) == []


def test_a_spread_over_an_axis_shows_median_middle_half_range_and_one_setting() -> None:
    axes = fresh()
    values = np.array([[1.0, NAN, 4.0], [2.0, NAN, NAN], [3.0, NAN, NAN], [4.0, NAN, NAN], [9.0, NAN, NAN]])
    g.spread_over_axis(axes, ["0", "1", "2"], values, title="day", unit="u", own=values[1], own_name="yours")
    assert line(axes, "median") == ([0.0, 2.0], [3.0, 4.0])  # nothing at 1, where none has a value
    bars = {c.get_label(): np.array(c.get_segments()) for c in axes.collections if isinstance(c, LineCollection)}
    assert bars["all settings"][0, :, 1].tolist() == [1.0, 9.0]
    assert bars["middle half"][0, :, 1].tolist() == [2.0, 4.0]
    np.testing.assert_array_equal(line(axes, "yours")[1], [2.0, NAN, NAN])
    assert legend(axes) == ["all settings", "middle half", "median", "yours"]


def test_of_one_setting_there_are_dots_and_of_many_values_bands() -> None:
    axes = fresh()
    g.spread_over_axis(axes, ["0", "1"], np.array([[0.5, 0.7]]), title="day", unit="u", scale=100.0)
    assert line(axes, "_one setting") == ([0.0, 1.0], [50.0, 70.0])
    assert legend(axes) == []
    assert not axes.collections
    labels = [str(n) for n in range(g.MOST_BARS + 1)]
    dense = fresh()
    g.spread_over_axis(dense, labels, np.arange(62.0).reshape(2, 31), title="day", unit="u")
    bands = [c for c in dense.collections if isinstance(c, PolyCollection)]
    assert [c.get_label() for c in bands] == ["all settings", "middle half"]
    heights = np.asarray(bands[0].get_paths()[0].vertices)[:, 1]
    assert (heights.min(), heights.max()) == (0.0, 61.0)
    assert line(dense, "median")[1] == [15.5 + n for n in range(31)]  # halfway between n and 31 + n
    empty = fresh()
    g.spread_over_axis(empty, ["0"], np.array([[NAN]]), title="day", unit="u")
    assert not empty.collections


def test_one_half_against_the_other_has_the_line_of_no_change() -> None:
    axes = fresh()
    first, second = np.array([0.1, -0.2, NAN, 0.3]), np.array([0.4, 0.0, 1.0, NAN])
    g.one_against_other(axes, first, second, names=("early", "late"), own=2, best=0)
    dots = next(one for one in axes.lines if to_hex(one.get_color()) == OVERLAY and one.get_marker() == "o")
    assert (dots.get_xdata().tolist(), dots.get_ydata().tolist()) == ([0.1, -0.2], [0.4, 0.0])
    assert line(axes, "the same in both") == ([-0.2, 0.4], [-0.2, 0.4])
    assert line(axes, "_best of all") == ([0.1], [0.4])
    assert legend(axes) == ["the same in both", "best of all"]  # yours has no first half
    assert (axes.get_xlabel(), axes.get_ylabel()) == ("early", "late")
    nothing = fresh()
    g.one_against_other(nothing, np.array([NAN]), np.array([NAN]), names=("early", "late"))
    assert legend(nothing) == []


def test_the_colours_of_lines_are_apart() -> None:
    assert len({colour for colour, _ in g.LINES}) == len({marker for _, marker in g.LINES}) == 3
    assert g.LINES[:2] == ((OVERLAY, "o"), (MIX, "D"))
    assert len({HOLD, to_hex(g.ABOVE), to_hex(g.BELOW)}) == 3
