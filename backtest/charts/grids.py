"""Charts of many overlays: heat map, frontier, boxes, lines over an axis, and one part of the days against another.

Colours fade into whatever lies behind them, so that a page may be light or dark; zero has no colour at all.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING, Any, TypeAlias

import numpy as np
import numpy.typing as npt

from .style import DASHES, HOLD, MIX, OVERLAY, PUT, bare, legend_above, plain_ink, signed

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.axis import Axis
    from matplotlib.colors import Colormap

Array = npt.NDArray[np.float64]
Positions = npt.NDArray[np.intp]
Dashes: TypeAlias = str | tuple[float, tuple[float, float]]

#: More cells a side than this and their numbers are left out.
MOST_NUMBERED = 12
#: Ticks a side at most, letters of one at most, and letters that stand side by side without touching.
MOST_TICKS, MOST_LETTERS, LETTERS_ACROSS = 11, 18, 54
#: Values of an axis beyond which ranges are drawn as bands, not as bars.
MOST_BARS = 30
#: Dots closer than one part in so many of a side are drawn once.
DOTS_ACROSS, DOTS_DOWN = 130, 90
#: Above this share of full colour a cell's number is white.
STRONG = 0.72
ABOVE, BELOW, MISSING = "#005a92", "#b24a00", (0.46, 0.46, 0.46, 0.3)
#: Around signs that may stand on dark cells; as good as white, and told apart from it by pages of another colour.
RIM = "#fefdfc"
#: Lines of one chart are told apart by colour, dash and marker.
LINES = ((OVERLAY, "o"), (MIX, "D"), (PUT, "s"))
OWN, BEST = "your overlay", "best of all"


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
    own: tuple[int, int] | None = None,
    best: tuple[int, int] | None = None,
) -> Axes:
    """A figure over two axes of a study: blue above zero, orange below, stronger the farther away; grey for none.

    Parameters
    ----------
    axes : matplotlib Axes
    across, down : sequence of str
        Labels of the columns and the rows; the first row is on top.
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
    own, best : (int, int), optional
        Column and row of the reader's own overlay and of the best one.
    """
    drawn = scale * values
    reach = max(float(np.max(np.abs(drawn), initial=0.0, where=np.isfinite(drawn))), 1e-12)
    image = axes.imshow(
        np.ma.masked_invalid(drawn), cmap=_colours(), vmin=-reach, vmax=reach, aspect="auto", interpolation="nearest",
    )  # fmt: skip
    _ticks(axes.xaxis, across, titles[0])
    _ticks(axes.yaxis, down, titles[1])
    if max(drawn.shape) <= MOST_NUMBERED:
        for row, column in np.argwhere(np.isfinite(drawn)).tolist():
            value = float(drawn[row, column])
            colour = "#ffffff" if abs(value) > STRONG * reach else plain_ink()
            axes.text(column, row, signed(value, digits), ha="center", va="center", color=colour)
    if max(drawn.shape) <= MOST_NUMBERED:
        _outline(axes, own, "-", OWN)
        _outline(axes, best, (0.0, (1.2, 1.2)), BEST)
    else:
        _mark(axes, own, "s", OWN)
        _mark(axes, best, "o", BEST)
    bar = axes.figure.colorbar(image, ax=axes, label=unit, shrink=0.9, pad=0.02)
    bar.solids.set_rasterized(True)  # type: ignore[union-attr]  # of an image there is one
    bar.outline.set_visible(False)
    axes.spines[:].set_visible(False)
    return axes


def frontier(
    axes: Axes,
    cost: Array,
    removed: Array,
    *,
    mix_cost: Array,
    mix_removed: Array,
    own: int | None = None,
    best: int | None = None,
    each_year: bool = True,
) -> Axes:
    """Annual cost against drawdown removed, with the mixes of stock and cash as the line to beat.

    Dots that would lie on one another are drawn once.

    Parameters
    ----------
    cost, removed : ndarray, shape (overlay,)
        Points of return a year less than the hold, and points off its deepest fall.
    mix_cost, mix_removed : ndarray, shape (share,)
        The same of mixes with less and less stock.
    own, best : int, optional
        Positions of the reader's own overlay and of the best one.
    each_year : bool
        Whether returns are annual; totals under one year (C11).
    """
    shown, line = distinct_dots(removed, cost), cheapest(cost, removed)
    axes.axhline(0.0, color=HOLD, linewidth=0.8)
    axes.plot(
        removed[shown], cost[shown], "o", markersize=2.6, color=HOLD, alpha=0.6, markeredgewidth=0, label="overlays"
    )
    axes.plot(
        removed[line], cost[line], "-o", color=OVERLAY, linewidth=1.2, markersize=2.8, drawstyle="steps-pre",
        label="least cost for as much",
    )  # fmt: skip
    axes.plot(mix_removed, mix_cost, color=MIX, linewidth=1.6, dashes=DASHES[MIX][1], label="less stock, more cash")
    for number, marker, name in ((best, "o", BEST), (own, "s", OWN)):
        at = None if number is None else (float(removed[number]), float(cost[number]))
        _mark(axes, at, marker, name)
    axes.set_xlabel("points off the hold's deepest fall")
    axes.set_ylabel("points of return given up" + (" a year" if each_year else ""))
    legend_above(axes, columns=3)
    return bare(axes, keep=("left", "bottom"))


def boxes(axes: Axes, groups: Mapping[str, Array], *, title: str, unit: str, scale: float = 1.0) -> Axes:
    """How a figure is spread over the overlays of each value of one axis: median, middle half, and range.

    A value whose overlays have no figure keeps its row, and says so.
    """
    for row, values in enumerate(groups.values()):
        known = scale * values[np.isfinite(values)]
        if not known.size:
            axes.annotate(
                "none has this figure", (0.5, row), xycoords=("axes fraction", "data"), ha="center", va="center"
            )
            continue
        low, first, middle, third, high = np.quantile(known, (0.0, 0.25, 0.5, 0.75, 1.0))
        axes.plot([low, high], [row, row], color=HOLD, linewidth=1.0, solid_capstyle="butt")
        axes.barh(row, third - first, left=first, height=0.56, facecolor=OVERLAY, alpha=0.4)
        axes.plot([middle, middle], [row - 0.28, row + 0.28], color=OVERLAY, linewidth=2.0, solid_capstyle="butt")
    axes.set_yticks(range(len(groups)), [clipped(label) for label in groups])
    axes.set_ylim(len(groups) - 0.5, -0.5)
    axes.axvline(0.0, color=HOLD, linewidth=0.8)
    axes.set_xlabel(unit)
    axes.set_ylabel(clipped(title, 3 * MOST_LETTERS))
    axes.locator_params(axis="x", nbins=6)
    return bare(axes, keep=("bottom",))


def one_against_other(
    axes: Axes, first: Array, second: Array, *, names: tuple[str, str], own: int | None = None, best: int | None = None
) -> Axes:
    """The same overlays in two parts of the days; on the slanted line both say the same.

    Dots that would lie on one another are drawn once.
    """
    shown = distinct_dots(first, second)
    axes.axhline(0.0, color=HOLD, linewidth=0.8)
    axes.axvline(0.0, color=HOLD, linewidth=0.8)
    axes.plot(first[shown], second[shown], "o", markersize=2.6, color=OVERLAY, alpha=0.5, markeredgewidth=0)
    if shown.size:
        both = np.concatenate([first[shown], second[shown]])
        ends = [float(both.min()), float(both.max())]
        axes.plot(ends, ends, color=HOLD, linewidth=0.9, dashes=DASHES[HOLD][1], label="the same in both")
    for number, marker, name in ((best, "o", BEST), (own, "s", OWN)):
        at = None if number is None else (float(first[number]), float(second[number]))
        _mark(axes, at, marker, name)
    axes.set_xlabel(names[0])
    axes.set_ylabel(names[1])
    legend_above(axes)
    return bare(axes, keep=("left", "bottom"))


def lines_over_axis(
    axes: Axes,
    labels: Sequence[str],
    series: Mapping[str, Array],
    *,
    title: str,
    unit: str,
    scale: float = 1.0,
    own: int | None = None,
) -> Axes:
    """A figure over one axis of a study, up to three lines with dots at its values.

    Parameters
    ----------
    axes : matplotlib Axes
    labels : sequence of str
        Of the axis.
    series : mapping
        Name of a line to its values, shape ``(label,)``; a gap where one is NaN.
    title, unit : str
    scale : float
        Factor from the values to the unit.
    own : int, optional
        Position of the reader's own overlay.
    """
    axes.axhline(0.0, color=HOLD, linewidth=0.8)
    places = np.arange(len(labels))
    if own is not None:
        axes.axvline(own, color=plain_ink(), linewidth=0.9, dashes=(1.5, 1.5), label=OWN)
    for (name, values), (colour, marker) in zip(series.items(), LINES, strict=False):
        axes.plot(
            places, scale * values, color=colour, linewidth=1.2, marker=marker, markersize=3.2, label=name,
            linestyle=DASHES.get(colour, (0, (4.0, 1.0, 1.0, 1.0))),
        )  # fmt: skip
    axes.set_xlim(-0.5, len(labels) - 0.5)
    axes.set_ylabel(unit)
    bare(axes, keep=("left", "bottom"))
    _ticks(axes.xaxis, labels, title)
    if own is not None or len(series) > 1:
        legend_above(axes)
    return axes


def spread_over_axis(
    axes: Axes,
    labels: Sequence[str],
    values: Array,
    *,
    title: str,
    unit: str,
    scale: float = 1.0,
    own: Array | None = None,
    own_name: str = OWN,
) -> Axes:
    """How a figure moves along one axis, over all settings of the others: median, middle half, and range.

    Parameters
    ----------
    axes : matplotlib Axes
    labels : sequence of str
        Of the axis.
    values : ndarray, shape (setting, label)
        NaN where there is none.
    title, unit : str
    scale : float
        Factor from the values to the unit.
    own : ndarray, shape (label,), optional
        One setting drawn as a line of its own, named ``own_name``.
    """
    axes.axhline(0.0, color=HOLD, linewidth=0.8)
    known = np.isfinite(values).any(axis=0)
    places = np.flatnonzero(known)
    if places.size:
        low, first, middle, third, high = scale * np.nanquantile(values[:, known], (0.0, 0.25, 0.5, 0.75, 1.0), axis=0)
        dense = len(labels) > MOST_BARS
        if len(values) > 1 and dense:
            axes.fill_between(places, low, high, color=HOLD, linewidth=0, alpha=0.25, label="all settings")
            axes.fill_between(places, first, third, color=OVERLAY, linewidth=0, alpha=0.3, label="middle half")
        elif len(values) > 1:
            axes.vlines(places, low, high, color=HOLD, linewidth=0.9, alpha=0.7, label="all settings")
            axes.vlines(places, first, third, color=OVERLAY, linewidth=4.0, alpha=0.35, label="middle half")
        axes.plot(
            places, middle, "-" if dense and len(values) > 1 else "o", color=OVERLAY, markersize=3.2, linewidth=1.8,
            label="median" if len(values) > 1 else "_one setting",
        )  # fmt: skip
    if own is not None:
        axes.plot(
            np.arange(len(labels)), scale * own, color=MIX, linewidth=1.3, dashes=DASHES[MIX][1],
            marker="" if len(labels) > MOST_BARS else "D", markersize=2.8, label=own_name,
        )  # fmt: skip
    axes.set_xlim(-0.5, len(labels) - 0.5)
    axes.set_ylabel(unit)
    bare(axes, keep=("left", "bottom"))
    _ticks(axes.xaxis, labels, title)
    if len(values) > 1 or own is not None:
        legend_above(axes)
    return axes


def cheapest(cost: Array, removed: Array) -> Positions:
    """Overlays that none other beats in both: removing as much for less; in order of drawdown removed.

    Examples
    --------
    >>> cheapest(np.array([1.0, 2.0, 0.5, 3.0]), np.array([5.0, 9.0, 6.0, 8.0])).tolist()
    [2, 1]
    """
    known = np.flatnonzero(np.isfinite(cost) & np.isfinite(removed))
    if not known.size:
        return known
    # from the most removed down; of equals the cheapest first
    order = known[np.lexsort((cost[known], -removed[known]))]
    least = np.minimum.accumulate(cost[order])
    first = np.concatenate([[True], cost[order][1:] < least[:-1]])
    return order[first][::-1]


def distinct_dots(first: Array, second: Array) -> Positions:
    """Positions to draw dots by, one of those that would lie on one another; the rims are kept.

    Examples
    --------
    >>> distinct_dots(np.array([0.0, 0.001, 1.0, np.nan]), np.array([0.0, 0.001, 1.0, 1.0])).tolist()
    [0, 2]
    """
    known = np.flatnonzero(np.isfinite(first) & np.isfinite(second))
    if not known.size:
        return known
    across, down = (
        np.floor((part - part.min()) / max(np.ptp(part), 1e-300) * (parts - 1e-9)).astype(np.int64)
        for part, parts in ((first[known], DOTS_ACROSS), (second[known], DOTS_DOWN))
    )
    _, chosen = np.unique(across * DOTS_DOWN + down, return_index=True)
    return known[np.sort(chosen)]


def clipped(label: str, most: int = MOST_LETTERS) -> str:
    """A label short enough for a tick."""
    return label if len(label) <= most else f"{label[: most - 1]}…"


def _ticks(place: Axis, labels: Sequence[str], title: str) -> None:
    """Few labels, and slanted where all are wanted and would touch."""
    across = place is place.axes.xaxis
    cut = [clipped(label) for label in labels]
    step = max(1, int(np.ceil(len(cut) / MOST_TICKS)))
    while across and step > 1 and _letters(cut[::step]) > LETTERS_ACROSS and len(cut) > 2 * step:
        step += 1
    place.set_ticks(range(0, len(cut), step), cut[::step])
    place.set_label_text(clipped(title, 3 * MOST_LETTERS))
    if across and _letters(cut[::step]) > LETTERS_ACROSS:
        for text in place.get_ticklabels():
            text.set(rotation=40, ha="right", rotation_mode="anchor")


def _letters(labels: Sequence[str]) -> int:
    return sum(len(label) + 2 for label in labels)


def _outline(axes: Axes, at: tuple[int, int] | None, style: Dashes, name: str) -> None:
    """A line around one cell, inside its edges, named over the axes; a rim keeps it clear of dark cells."""
    from matplotlib.patches import Rectangle

    if at is None:
        return
    corner = (at[0] - 0.47, at[1] - 0.45)
    axes.add_patch(Rectangle(corner, 0.94, 0.9, fill=False, edgecolor=RIM, linewidth=3.2))
    axes.add_patch(
        Rectangle(corner, 0.94, 0.9, fill=False, edgecolor=plain_ink(), linewidth=1.6, linestyle=style, label=name)
    )
    legend_above(axes)


def _mark(axes: Axes, at: tuple[float, float] | None, marker: str, name: str) -> None:
    """A hollow sign around one overlay, named over the axes."""
    if at is None or not np.isfinite(at).all():
        return
    shape: dict[str, Any] = {"marker": marker, "linestyle": "none", "markerfacecolor": "none"}
    ink: dict[str, Any] = {"markeredgecolor": plain_ink(), "markeredgewidth": 1.5}
    over: dict[str, Any] = {"markersize": 9, "zorder": 5.0, "clip_on": False}
    axes.plot([at[0]], [at[1]], markeredgecolor=RIM, markeredgewidth=3.2, label="_rim", **shape, **over)
    axes.plot([at[0]], [at[1]], label=f"_{name}", **shape, **ink, **over)
    axes.plot([], [], label=name, markersize=7, **shape, **ink)
    legend_above(axes)


def _colours() -> Colormap:
    from matplotlib.colors import LinearSegmentedColormap, to_rgba

    ends = [to_rgba(BELOW, 1.0), to_rgba(BELOW, 0.0), to_rgba(ABOVE, 0.0), to_rgba(ABOVE, 1.0)]
    made = LinearSegmentedColormap.from_list("both sides", list(zip((0.0, 0.5, 0.5, 1.0), ends, strict=True)))
    return made.with_extremes(bad=MISSING)
