"""Charts of comparison, cost and robustness: numbers in, drawn on an axes, the axes given back.

Nothing here makes a figure, opens a file or sets a global style. All values are decimals;
axes say their unit.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

from .style import DASHES, HOLD, MARKERS, MIX, OVERLAY, bare, legend_above, plain_ink, signed

if TYPE_CHECKING:
    from matplotlib.axes import Axes

Array = npt.NDArray[np.float64]


def interval_chart(
    axes: Axes, labels: Sequence[str], values: Array, lows: Array, highs: Array, *, unit: str, scale: float = 1.0
) -> Axes:
    """A difference and its interval per row, first row on top; a row without an interval has its point alone.

    Parameters
    ----------
    axes : matplotlib Axes
    labels : sequence of str, one a row
    values, lows, highs : ndarray, shape (row,)
    unit : str
        For the x axis.
    scale : float
        Factor from the values to the unit (100 for points).
    """
    rows = -np.arange(len(labels), dtype=float)
    known = np.isfinite(lows) & np.isfinite(highs)
    axes.axvline(0.0, color=HOLD, linewidth=0.8)
    axes.hlines(rows[known], scale * lows[known], scale * highs[known], color=OVERLAY, linewidth=2.2, alpha=0.55)
    clear = known & ((lows > 0) | (highs < 0))
    for chosen, face in ((clear, OVERLAY), (~clear, "none")):
        axes.plot(
            scale * values[chosen], rows[chosen], "o", markersize=5.0, markeredgecolor=OVERLAY, markerfacecolor=face,
            markeredgewidth=1.4,
        )  # fmt: skip
    axes.set_yticks(rows, labels)
    axes.set_ylim(rows[-1] - 0.6, 0.6)
    axes.locator_params(axis="x", nbins=5)
    axes.set_xlabel(unit)
    return bare(axes, keep=("bottom",))


def turning_bars(
    axes: Axes, labels: Sequence[str], values: Array, *, marked: int | None, sides: tuple[str, str], unit: str
) -> Axes:
    """Bars to both sides of zero: which side wins, and by how much. ``marked`` is drawn full, the others pale.

    ``sides`` are the words over the left and the right half.
    """
    rows = -np.arange(len(labels), dtype=float)
    known = np.isfinite(values)
    reach = 1.35 * max(float(np.max(np.abs(values[known]), initial=0.0)), 0.05)
    for row, value in zip(rows, values, strict=True):
        if not np.isfinite(value):
            axes.annotate("cannot be had", (0.0, row), xytext=(4, 0), textcoords="offset points", va="center")
            continue
        full = marked is not None and row == -marked
        colour = OVERLAY if value >= 0 else MIX
        axes.barh(
            row, value, height=0.56, color=colour, alpha=1.0 if full else 0.45, edgecolor=colour, linewidth=1.0,
        )  # fmt: skip
        axes.annotate(
            signed(float(value), 2), (float(value), row), xytext=(4 if value >= 0 else -4, 0),
            textcoords="offset points", va="center", ha="left" if value >= 0 else "right",
            fontweight="bold" if full else "normal",
        )  # fmt: skip
    axes.axvline(0.0, color=HOLD, linewidth=1.0)
    axes.set_xlim(-reach, reach)
    axes.set_ylim(rows[-1] - 0.6, 0.6)
    axes.set_yticks(rows, labels)
    for at, words, side in ((-0.02, sides[0], "right"), (0.02, sides[1], "left")):
        axes.annotate(words, (0.5 + at, 1.0), xycoords="axes fraction", ha=side, va="bottom", color=_side_colour(side))
    axes.set_xlabel(unit)
    return bare(axes, keep=("bottom",))


def _side_colour(alignment: str) -> str:
    return OVERLAY if alignment == "left" else MIX


def waterfall(axes: Axes, labels: Sequence[str], values: Array, *, total: str, unit: str, scale: float = 1.0) -> Axes:
    """Steps from the first value to the sum of all; the first and the last bar start at zero.

    Parameters
    ----------
    axes : matplotlib Axes
    labels : sequence of str
        One a value.
    values : ndarray, shape (step,)
        The bar of the total is their sum and not given.
    total : str
        Label of the last bar.
    unit : str
    scale : float
        Factor from the values to the unit.
    """
    ends = scale * np.cumsum(values)
    starts = np.concatenate([[0.0], ends[:-1]])
    rows = -np.arange(len(values) + 1, dtype=float)
    reach = max(float(np.max(np.abs(ends), initial=0.0)), 1e-9)
    low, high = min(0.0, float(ends.min())), max(0.0, float(ends.max()))
    for row, start, end, value in zip(rows, starts, ends, values, strict=False):
        colour = HOLD if row == 0 else OVERLAY if value >= 0 else MIX
        step = float(scale * value)
        _bar(axes, row, start, end, colour, signed(step, 1 if abs(step) >= 0.05 else 2), reach)
    _bar(axes, rows[-1], 0.0, float(ends[-1]), OVERLAY, signed(float(ends[-1]), 1), reach, strong=True)
    for row, end in zip(rows[:-1], ends, strict=True):
        axes.plot([end, end], [row - 0.3, row - 0.7], color=HOLD, linewidth=0.7)
    axes.axvline(0.0, color=HOLD, linewidth=0.8)
    axes.set_yticks(rows, [*labels, total])
    axes.set_ylim(rows[-1] - 0.6, 0.6)
    axes.set_xlim(low - (0.16 * reach if low < 0 else 0.0), high + 0.16 * reach)
    axes.set_xlabel(unit)
    return bare(axes, keep=("bottom",))


def _bar(
    axes: Axes, row: float, start: float, end: float, colour: str, words: str, reach: float, *, strong: bool = False
) -> None:
    axes.barh(row, end - start, left=start, height=0.6, color=colour, alpha=1.0 if strong else 0.75)
    right = max(start, end)
    axes.annotate(
        words, (right, row), xytext=(4, 0), textcoords="offset points", va="center",
        fontweight="bold" if strong else "normal",
    )  # fmt: skip


def span_dots(axes: Axes, labels: Sequence[str], series: Mapping[str, tuple[str, Array]], *, unit: str) -> Axes:
    """A row per stretch of time and a dot per path: returns over the same days.

    Parameters
    ----------
    axes : matplotlib Axes
    labels : sequence of str
    series : mapping of name to (colour, ndarray of shape (row,))
        Decimal returns; drawn in percent.
    unit : str
    """
    rows = -np.arange(len(labels), dtype=float)
    stacked = 100 * np.array([values for _, values in series.values()])
    lows, highs = stacked.min(axis=0), stacked.max(axis=0)
    axes.hlines(rows, lows, highs, color=HOLD, linewidth=1.0, alpha=0.6)
    axes.axvline(0.0, color=HOLD, linewidth=0.8)
    for (name, (colour, _)), values in zip(series.items(), stacked, strict=True):
        axes.plot(
            values, rows, MARKERS.get(colour, "o"), color=colour, markersize=5.2, label=name, linestyle="none",
        )  # fmt: skip
    axes.set_yticks(rows, labels)
    axes.set_ylim(rows[-1] - 0.6, 0.6)
    axes.set_xlabel(unit)
    legend_above(axes)
    return bare(axes, keep=("bottom",))


def yearly_bars(
    axes: Axes, years: Sequence[str], parts: Mapping[str, tuple[str, Array]], *, total: str, unit: str
) -> Axes:
    """Stacked bars by year, what came in above zero and what went out below, with a dot at their sum.

    ``parts`` by name: colour and ndarray of shape ``(year,)``.
    """
    places = np.arange(len(years))
    above, below = np.zeros(len(years)), np.zeros(len(years))
    for name, (colour, values) in parts.items():
        start = np.where(values >= 0, above, below)
        axes.bar(places, values, bottom=start, width=0.72, color=colour, alpha=0.8, label=name)
        above += np.maximum(values, 0.0)
        below += np.minimum(values, 0.0)
    axes.plot(places, above + below, "D", markersize=3.6, color=plain_ink(), label=total)
    axes.axhline(0.0, color=HOLD, linewidth=0.8)
    step = max(1, int(np.ceil(len(years) / 9)))
    axes.set_xticks(places[::step], list(years)[::step])
    axes.set_ylabel(unit)
    legend_above(axes)
    return bare(axes, keep=("left", "bottom"))


def contribution_bars(axes: Axes, labels: Sequence[str], values: Array, *, unit: str, scale: float = 1.0) -> Axes:
    """One bar a part, to the left where it took away."""
    rows = -np.arange(len(labels), dtype=float)
    drawn = scale * values
    reach = max(float(np.max(np.abs(drawn), initial=0.0)), 1e-9)
    axes.barh(rows, drawn, height=0.56, color=[OVERLAY if v >= 0 else MIX for v in drawn], alpha=0.8)
    for row, value in zip(rows, drawn, strict=True):
        axes.annotate(
            signed(float(value), 1), (float(value), row), xytext=(4 if value >= 0 else -4, 0),
            textcoords="offset points", va="center", ha="left" if value >= 0 else "right",
        )  # fmt: skip
    axes.axvline(0.0, color=HOLD, linewidth=0.8)
    low, high = min(0.0, float(drawn.min())), max(0.0, float(drawn.max()))
    axes.set_xlim(low - 0.2 * reach * (low < 0), high + 0.2 * reach * (high > 0))
    axes.set_yticks(rows, labels)
    axes.set_ylim(rows[-1] - 0.6, 0.6)
    axes.set_xlabel(unit)
    return bare(axes, keep=("bottom",))


def roll_day_dots(axes: Axes, offsets: npt.NDArray[np.int64], values: Array, *, ladder: float, unit: str) -> Axes:
    """The same rule by roll day: a dot an offset, the user's own day (offset 0) large, the laddered average a line."""
    known = np.isfinite(values)
    axes.plot(offsets[known], values[known], "o", markersize=2.8, color=HOLD, label="other roll days")
    if np.isfinite(ladder):
        axes.axhline(ladder, color=MIX, linewidth=1.2, dashes=DASHES[MIX][1], label="all roll days held side by side")
    if known.size and known[0]:
        axes.plot(offsets[:1], values[:1], "D", markersize=6.0, color=OVERLAY, label="your roll day", clip_on=False)
    axes.set_xlim(-0.02 * len(offsets) - 0.5, len(offsets) - 0.5)
    axes.set_ylabel(unit)
    axes.margins(y=0.15)
    return bare(axes, keep=("left", "bottom"))


def rolling_lines(
    axes: Axes, dates: npt.NDArray[np.datetime64], series: Mapping[str, tuple[str, Array]], *, unit: str
) -> Axes:
    """Lines over time, a gap where a value is NaN. ``series`` by name: colour and ndarray of shape ``(day,)``."""
    for name, (colour, values) in series.items():
        axes.plot(dates, values, color=colour, linewidth=1.2, linestyle=DASHES.get(colour, (0, ())), label=name)
    axes.set_ylabel(unit)
    return bare(axes, keep=("left", "bottom"))


def spread_bars(axes: Axes, edges: Array, counts: Array, *, zero_line: bool, unit: str) -> Axes:
    """How often each value came up: bars between ``edges``, shape ``(bin + 1,)``, as shares of all."""
    share = counts / max(float(counts.sum()), 1.0)
    axes.bar(edges[:-1], 100 * share, width=np.diff(edges), align="edge", color=OVERLAY, alpha=0.55)
    if zero_line:
        axes.axvline(0.0, color=HOLD, linewidth=1.0)
    axes.set_xlabel(unit)
    axes.set_ylabel("percent of resamples")
    return bare(axes, keep=("left", "bottom"))
