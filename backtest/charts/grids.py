"""Charts of many overlays: heat map, frontier, boxes, and one part of the days against another."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

from .style import HOLD, MIX, OVERLAY, PUT, bare, legend_above, plain, signed

if TYPE_CHECKING:
    from matplotlib.axes import Axes

Array = npt.NDArray[np.float64]

#: More cells a side than this and their numbers are left out.
MOST_NUMBERED = 12
#: Ticks a side at most.
MOST_TICKS = 11


def heat_map(
    axes: Axes,
    across: Sequence[str],
    down: Sequence[str],
    values: Array,
    *,
    titles: tuple[str, str],
    unit: str,
    scale: float = 1.0,
    digits: int = 2,
    diverging: bool = True,
    marked: tuple[int, int] | None = None,
) -> Axes:
    """A figure over two axes of a study.

    Parameters
    ----------
    axes : matplotlib Axes
    across, down : sequence of str
        Labels of the columns and the rows.
    values : ndarray, shape (down, across)
        NaN where there is no overlay.
    titles : (str, str)
        Names of the two axes, across first.
    unit : str
        For the colour bar.
    scale : float
        Factor from the values to the unit.
    digits : int
        Of the numbers in the cells, where there are few enough.
    diverging : bool
        Whether zero is the middle of the colours, blue above and orange below it.
    marked : (int, int), optional
        Column and row of the reader's own overlay.
    """
    drawn = scale * values
    known = drawn[np.isfinite(drawn)]
    low, high = (float(known.min()), float(known.max())) if known.size else (0.0, 1.0)
    if diverging:
        reach = max(abs(low), abs(high), 1e-12)
        low, high = -reach, reach
    image = axes.imshow(
        np.ma.masked_invalid(drawn), cmap=_colours(diverging), vmin=low, vmax=max(high, low + 1e-12), aspect="auto",
        interpolation="nearest",
    )  # fmt: skip
    for position, labels, place in ((0, across, axes.xaxis), (1, down, axes.yaxis)):
        step = max(1, int(np.ceil(len(labels) / MOST_TICKS)))
        place.set_ticks(range(0, len(labels), step), list(labels)[::step])
        place.set_label_text(titles[position])
    if max(drawn.shape) <= MOST_NUMBERED:
        for row, column in zip(*np.nonzero(np.isfinite(drawn)), strict=True):
            value = float(drawn[row, column])
            text = signed(value, digits) if diverging else plain(value, digits)
            # dark words on light cells, light ones on dark
            share = (value - low) / (high - low)
            dark = abs(share - 0.5) > 0.33 if diverging else share > 0.62
            axes.text(column, row, text, ha="center", va="center", color="#ffffff" if dark else "#1d2329")
    if marked is not None:
        axes.plot(marked[0], marked[1], "s", markersize=13, markerfacecolor="none", markeredgecolor="#1d2329", mew=1.8)
        axes.plot([], [], "s", markersize=8, markerfacecolor="none", markeredgecolor="#1d2329", label="your overlay")
        legend_above(axes)
    axes.figure.colorbar(image, ax=axes, label=unit, shrink=0.9)
    return axes


def frontier(
    axes: Axes,
    cost: Array,
    removed: Array,
    *,
    mix_cost: Array,
    mix_removed: Array,
    best: Array,
    own: tuple[float, float] | None,
) -> Axes:
    """Annual cost against drawdown removed, with the mixes of stock and cash as the line to beat.

    Parameters
    ----------
    cost, removed : ndarray, shape (overlay,)
        Points of return a year less than the hold, and points off its deepest fall.
    mix_cost, mix_removed : ndarray, shape (share,)
        The same of mixes with less and less stock.
    best : ndarray of int
        Overlays on the frontier, in order of their cost.
    own : (float, float), optional
        The reader's own.
    """
    axes.plot(removed, cost, "o", markersize=2.6, color=HOLD, alpha=0.6, markeredgewidth=0, label="overlays")
    axes.plot(
        removed[best], cost[best], "-o", color=OVERLAY, linewidth=1.2, markersize=3.4, label="cheapest for as much"
    )
    axes.plot(mix_removed, mix_cost, color=MIX, linewidth=1.6, dashes=(5, 1.5), label="less stock, more cash")
    if own is not None:
        axes.plot(own[1], own[0], "D", markersize=7, color=PUT, label="your overlay")
    axes.set_xlabel("points off the hold's deepest fall")
    axes.set_ylabel("points of return a year given up")
    axes.axhline(0.0, color=HOLD, linewidth=0.8)
    legend_above(axes)
    return bare(axes, keep=("left", "bottom"))


def boxes(axes: Axes, groups: Mapping[str, Array], *, title: str, unit: str, scale: float = 1.0) -> Axes:
    """How a figure is spread over the overlays of each value of one axis: median, middle half, and range."""
    drawn = {label: scale * values[np.isfinite(values)] for label, values in groups.items()}
    shown = {label: values for label, values in drawn.items() if values.size}
    axes.boxplot(
        list(shown.values()), orientation="horizontal", whis=(0, 100), widths=0.55, patch_artist=True,
        boxprops={"facecolor": OVERLAY, "alpha": 0.35, "edgecolor": OVERLAY},
        medianprops={"color": OVERLAY, "linewidth": 1.8}, whiskerprops={"color": HOLD}, capprops={"color": HOLD},
    )  # fmt: skip
    axes.set_yticks(range(1, len(shown) + 1), [f"{label} ({values.size})" for label, values in shown.items()])
    axes.invert_yaxis()
    axes.axvline(0.0, color=HOLD, linewidth=0.8)
    axes.set_xlabel(unit)
    axes.set_ylabel(title)
    return bare(axes, keep=("bottom",))


def one_against_other(
    axes: Axes, first: Array, second: Array, *, names: tuple[str, str], marked: Sequence[int] = ()
) -> Axes:
    """The same overlays in two parts of the days; on the slanted line both say the same."""
    known = np.isfinite(first) & np.isfinite(second)
    axes.plot(first[known], second[known], "o", markersize=2.6, color=OVERLAY, alpha=0.5, markeredgewidth=0)
    ends = np.array(
        [np.concatenate([first[known], second[known]]).min(), np.concatenate([first[known], second[known]]).max()]
    )
    axes.plot(ends, ends, color=HOLD, linewidth=0.8, dashes=(1.5, 1.0))
    for position in marked:
        if known[position]:
            axes.plot(first[position], second[position], "D", markersize=6, color=MIX)
    axes.set_xlabel(names[0])
    axes.set_ylabel(names[1])
    return bare(axes, keep=("left", "bottom"))


def lines_over_axis(axes: Axes, labels: Sequence[str], series: Mapping[str, Array], *, title: str, unit: str) -> Axes:
    """Median of a figure over one axis of a study, a line each, with dots at its values."""
    places = np.arange(len(labels))
    for (name, values), colour in zip(series.items(), (OVERLAY, MIX, PUT), strict=False):
        axes.plot(places, values, "-o", color=colour, linewidth=1.2, markersize=3.0, label=name)
    step = max(1, int(np.ceil(len(labels) / MOST_TICKS)))
    axes.set_xticks(places[::step], list(labels)[::step])
    axes.set_xlabel(title)
    axes.set_ylabel(unit)
    axes.axhline(0.0, color=HOLD, linewidth=0.8)
    legend_above(axes)
    return bare(axes, keep=("left", "bottom"))


def cheapest(cost: Array, removed: Array) -> npt.NDArray[np.intp]:
    """Overlays that none other beats in both: removing as much for less; in order of drawdown removed.

    Examples
    --------
    >>> cheapest(np.array([1.0, 2.0, 0.5, 3.0]), np.array([5.0, 9.0, 6.0, 8.0])).tolist()
    [2, 1]
    """
    known = np.flatnonzero(np.isfinite(cost) & np.isfinite(removed))
    # from the most removed down; of equals the cheapest first
    order = known[np.lexsort((cost[known], -removed[known]))]
    least = np.minimum.accumulate(cost[order]) if order.size else cost[order]
    first = np.concatenate([[True], cost[order][1:] < least[:-1]]) if order.size else np.zeros(0, dtype=bool)
    return order[first][::-1]


def _colours(diverging: bool):  # type: ignore[no-untyped-def]
    from matplotlib.colors import LinearSegmentedColormap

    if diverging:
        return LinearSegmentedColormap.from_list("both sides", ["#b24a00", "#f6d3b8", "#f7f7f5", "#bcdcef", "#005a92"])
    return LinearSegmentedColormap.from_list("one side", ["#f7f7f5", "#bcdcef", "#005a92"])
