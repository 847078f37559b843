"""The pictures of a study: for its page, each with the line it is read by, and as files beside it."""

from __future__ import annotations

import warnings
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from typing import Any

import numpy as np
import numpy.typing as npt
from matplotlib import rc_context
from matplotlib.figure import Figure, FigureBase

from backtest.charts import grids

from ..axes import Axis
from .pictures import Picture, new_figure, page_style, picture_of
from .study_view import (
    REMOVED,
    RETURN_GAIN,
    SHARPE_GAIN,
    FigureWords,
    MixLine,
    View,
    any_known,
    better_than_mixes,
)
from .words import counted, listed, number, ratio, upper_first

Array = npt.NDArray[np.float64]

#: Drawn over the first two axes.
MAPPED = (SHARPE_GAIN, RETURN_GAIN, REMOVED)
#: Axes of this kind have boxes; with none of them, axes of few values.
BOXED_FIELDS = ("roll", "term")
FEW_VALUES, MOST_BOXES = 12, 24
SHIFTED = "shift_days"
#: Pixels an inch of what is drawn as pixels in a page: cells of large maps keep their edges.
CELL_DPI = 200
FILE_STYLE: dict[Any, object] = {"text.parse_math": False, "font.size": 10.0, "axes.titlesize": 10.0}


@contextmanager
def drawing() -> Iterator[None]:
    """Letters that the drawing font has not are no cause for a warning: a page shows them in its own."""
    with warnings.catch_warnings():
        warnings.filterwarnings("ignore", message="Glyph .* missing from")
        yield


def figure_title(figure: FigureWords, view: View) -> str:
    """The title of a figure; under a year returns are totals."""
    return figure.title.replace("return a year", "return, whole span") if view.under_a_year else figure.title


def figure_unit(figure: FigureWords, view: View) -> str:
    """The unit of a figure; under a year returns are totals."""
    return figure.unit.replace("points a year", "points") if view.under_a_year else figure.unit


# ---------------------------------------------------------------- maps


def map_pictures(view: View, prefix: str) -> list[Picture]:
    """The figures over the first two axes, or over the only one."""
    figures = [figure for figure in MAPPED if any_known(view.figure(figure.field))]
    if not view.axes or not figures:
        return []
    made = []
    for figure in figures:
        with page_style():
            drawn = new_figure(_map_height(view))
            drawn.set_dpi(CELL_DPI)
            _map(drawn, view, figure)
            title = upper_first(figure_title(figure, view))
            over = listed(axis.name for axis in view.axes[:2])
            made.append(
                picture_of(drawn, f"{prefix}map-{figure.field.replace('_', '-')}", f"{title}, by {over}",
                           _map_reading(view, figure))
            )  # fmt: skip
    return made


def _map_height(view: View) -> float:
    if len(view.axes) == 1:
        return 2.6
    return float(np.clip(1.5 + 0.27 * len(view.axes[1].values), 2.3, 4.3))


def _map(drawn: FigureBase, view: View, figure: FigureWords) -> None:
    """A heat map, or a line where there is one axis."""
    values, unit = view.figure(figure.field), figure_unit(figure, view)
    axes = drawn.subplots()
    if len(view.axes) == 1:
        line, _ = view.by_setting(0, values)
        own = None if view.own is None else int(view.positions[view.own, 0])
        grids.lines_over_axis(
            axes, view.axes[0].labels, {"overlays": line[0]}, title=view.axes[0].name, unit=unit,
            scale=figure.scale, own=own,
        )  # fmt: skip
        return
    across, down = view.axes[:2]
    grids.heat_map(
        axes, across.labels, down.labels, view.median_grid(0, 1, values), titles=(across.name, down.name), unit=unit,
        scale=figure.scale, digits=figure.digits, own=_cell(view, view.own), best=_cell(view, view.best),
    )  # fmt: skip


def _cell(view: View, row: int | None) -> tuple[int, int] | None:
    return None if row is None else (int(view.positions[row, 0]), int(view.positions[row, 1]))


def _map_reading(view: View, figure: FigureWords) -> str:
    values = view.figure(figure.field)
    known = values[np.isfinite(values)]
    top = int(np.nanargmax(values))
    scale = figure.scale
    said = (
        f"{'Blue is' if len(view.axes) > 1 else 'Above zero is'} better for the overlay. "
        f"{np.count_nonzero(known > 0):,} of {counted(len(view), 'overlay')} lie above zero; the highest has "
        f"{number(scale * values[top], figure.digits, sign=True)} ({view.names[top]}), the median "
        f"{number(scale * float(np.median(known)), figure.digits, sign=True)}"
    )
    if view.own is not None:
        own = number(scale * values[view.own], figure.digits, sign=True)
        said += f", yours {own}" if np.isfinite(values[view.own]) else "; yours has none"
    if len(view.axes) > 2:
        said += f". Each cell is the median over all settings of {listed(axis.name for axis in view.axes[2:])}"
    return f"{said}."


# ---------------------------------------------------------------- cost against drawdown removed


def frontier_picture(view: View, line: MixLine, prefix: str) -> Picture | None:
    """What protection costs, and what less stock would have cost."""
    if not any_known(view.figure("drawdown_removed") * view.figure("return_less_hold")):
        return None
    with page_style():
        drawn = new_figure(3.4)
        _frontier(drawn, view, line)
        return picture_of(
            drawn, f"{prefix}frontier", "Cost against drawdown removed", _frontier_reading(view, line)
        )  # fmt: skip


def _frontier(drawn: FigureBase, view: View, line: MixLine) -> None:
    grids.frontier(
        drawn.subplots(), -100 * view.figure("return_less_hold"), 100 * view.figure("drawdown_removed"),
        mix_cost=100 * line.cost, mix_removed=100 * line.removed, own=view.own, best=view.best,
        each_year=not view.under_a_year,
    )  # fmt: skip


def _frontier_reading(view: View, line: MixLine) -> str:
    under, of = better_than_mixes(view, line)
    said = (
        "Lower is cheaper, farther right is safer. Under the dashed line an overlay costs less than holding less "
        f"stock with as mild a deepest fall: {under:,} of the {of:,} that removed any drawdown"
        if of
        else "Lower is cheaper, farther right is safer; no overlay removed any drawdown"
    )
    if view.own is None:
        return f"{said}."
    removed, cost = view.worth("drawdown_removed", view.own), -view.worth("return_less_hold", view.own)
    if not np.isfinite(removed + cost):
        return f"{said}. Yours has no figures."
    each = "" if view.under_a_year else " a year"
    said += f". Yours gave up {number(100 * cost)} points{each} and took {number(100 * removed, 1)} points off the fall"
    mix = float(line.cost_of(np.array(removed)))
    return f"{said}; a mix that takes off as much gave up {number(100 * mix)}." if np.isfinite(mix) else f"{said}."


# ---------------------------------------------------------------- one axis at a time


def boxed_axes(view: View) -> list[int]:
    """Axes of rolls and terms; with none of them those of few values."""
    rolls = [
        place
        for place, axis in enumerate(view.axes)
        if any(field.rsplit(".", 1)[-1] in BOXED_FIELDS for field in axis.fields) and len(axis.values) <= MOST_BOXES
    ]
    return rolls or [place for place, axis in enumerate(view.axes) if len(axis.values) <= FEW_VALUES]


def axis_pictures(view: View, prefix: str) -> list[Picture]:
    """How the figures are spread over the values of one axis: boxes, or a line of them where there are many."""
    if len(view.axes) < 2 or not any_known(view.figure(SHARPE_GAIN.field)):
        return []  # of one axis the map is a line over it already
    boxed = boxed_axes(view)
    shifted = shifted_axis(view)
    made = []
    for place in boxed or [place for place in range(min(2, len(view.axes))) if place != shifted]:
        axis = view.axes[place]
        with page_style():
            if place in boxed:
                drawn = new_figure(0.85 + 0.3 * len(axis.values))
                _boxes(drawn, view, place)
            else:
                drawn = new_figure(2.8)
                _spread(drawn, view, place, SHARPE_GAIN)
            title = f"By {axis.name}, over all other settings"
            made.append(picture_of(drawn, f"{prefix}by-{place + 1}", title, _axis_reading(view, place)))
    return made


def _boxes(drawn: FigureBase, view: View, place: int) -> None:
    panels = drawn.subplots(1, 2, sharey=True)
    for axes, figure in zip(panels, (SHARPE_GAIN, RETURN_GAIN), strict=True):
        title = view.axes[place].name if axes is panels[0] else ""
        grids.boxes(
            axes, by_value(view, place, view.figure(figure.field)), title=title, unit=_short_unit(figure, view),
            scale=figure.scale,
        )  # fmt: skip


def _short_unit(figure: FigureWords, view: View) -> str:
    unit = figure_unit(figure, view)
    return f"{unit} less the {'mix' if figure is SHARPE_GAIN else 'hold'}'s"


def by_value(view: View, place: int, values: Array) -> dict[str, Array]:
    """Values of the overlays of each value of an axis, by its label."""
    where = view.positions[:, place]
    return {label: values[where == number] for number, label in enumerate(view.axes[place].labels)}


def _axis_reading(view: View, place: int) -> str:
    values, labels = view.figure(SHARPE_GAIN.field), view.axes[place].labels
    groups = by_value(view, place, values)
    middle = np.array([np.median(part[np.isfinite(part)]) if any_known(part) else np.nan for part in groups.values()])
    top, low = int(np.nanargmax(middle)), int(np.nanargmin(middle))
    said = "Line the median, box the middle half, thin line the range"
    if place not in boxed_axes(view):
        dense = len(labels) > grids.MOST_BARS
        said = f"{'Line' if dense else 'Dot'} the median, {'bands' if dense else 'bars'} the middle half and the range"
    sizes = sorted({len(part) for part in groups.values() if len(part)})
    each = f"{sizes[0]:,}" if len(sizes) == 1 else f"{sizes[0]:,} to {sizes[-1]:,}"
    said += f", of {each} {'overlay' if sizes == [1] else 'overlays'} each"
    if top == low:
        return f"{said}. The median Sharpe gain over the same-beta mix is {ratio(middle[top], sign=True)} throughout."
    return (
        f"{said}. The median Sharpe gain over the same-beta mix is highest for {labels[top]} "
        f"({ratio(middle[top], sign=True)}) and lowest for {labels[low]} ({ratio(middle[low], sign=True)})."
    )


# ---------------------------------------------------------------- roll days


def shifted_axis(view: View) -> int | None:
    """The axis that moves roll days."""
    return next(
        (n for n, axis in enumerate(view.axes) if any(f.rsplit(".", 1)[-1] == SHIFTED for f in axis.fields)), None
    )


def roll_day_pictures(view: View, place: int, prefix: str) -> list[Picture]:
    """What only the roll day changes."""
    made = []
    for figure in (SHARPE_GAIN, RETURN_GAIN):
        if not any_known(view.figure(figure.field)):
            continue
        with page_style():
            drawn = new_figure(2.7)
            _spread(drawn, view, place, figure)
            title = f"{upper_first(figure_title(figure, view))}, by {view.axes[place].name}"
            name = f"{prefix}days-{figure.field.replace('_', '-')}"
            made.append(picture_of(drawn, name, title, _roll_day_reading(view, place, figure)))
    return made


def _spread(drawn: FigureBase, view: View, place: int, figure: FigureWords) -> None:
    axis: Axis = view.axes[place]
    values, setting = view.by_setting(place, view.figure(figure.field))
    shown = view.own if view.own is not None else view.best
    line = values[setting[shown]] if shown is not None and len(values) > 1 else None
    grids.spread_over_axis(
        drawn.subplots(), axis.labels, values, title=axis.name, unit=figure_unit(figure, view), scale=figure.scale,
        own=line, own_name="your other settings" if view.own is not None else "settings of the best",
    )  # fmt: skip


def _roll_day_reading(view: View, place: int, figure: FigureWords) -> str:
    values, _ = view.by_setting(place, view.figure(figure.field))
    scaled = figure.scale * values
    widths, across = _widths(scaled), _widths(scaled.T)
    unit = "points" if figure.scale != 1 else "of Sharpe ratio"
    if len(values) == 1:
        days = int(np.count_nonzero(np.isfinite(values)))
        return (
            f"The same rule on {counted(days, 'roll day')}: from the unluckiest to the luckiest lie "
            f"{number(float(widths[0]))} {unit}, and nobody knew beforehand which it would be."
        )
    said = (
        "With everything else the same, from the unluckiest to the luckiest roll day lie "
        f"{number(float(np.median(widths)))} {unit} (median of {counted(len(widths), 'setting')}); on one and the same "
        f"roll day, from the worst to the best setting lie {number(float(np.median(across)))}"
    )
    return f"{said}."


def _widths(rows: Array) -> Array:
    """Highest less lowest of each row that has a value."""
    rows = rows[np.isfinite(rows).any(axis=1)]
    return np.nanmax(rows, axis=1) - np.nanmin(rows, axis=1)


# ---------------------------------------------------------------- parts of the days


def halves_picture(view: View, prefix: str) -> Picture | None:
    """Each overlay in the first half of the days and in the second."""
    halves = view.group.halves
    if len(view) < 2 or not any_known(halves.first + halves.second):
        return None
    with page_style():
        drawn = new_figure(3.4)
        _halves(drawn, view)
        return picture_of(drawn, f"{prefix}halves", "First half of the days against the second", _halves_reading(view))


def _halves(drawn: FigureBase, view: View) -> None:
    halves = view.group.halves
    grids.one_against_other(
        drawn.subplots(), halves.first, halves.second, own=view.own, best=view.best,
        names=(f"Sharpe ratio less the hold's, {halves.first_name}", f"the same, {halves.second_name}"),
    )  # fmt: skip


def _halves_reading(view: View) -> str:
    first, second = view.group.halves.first, view.group.halves.second
    both = np.isfinite(first) & np.isfinite(second)
    leader = int(np.flatnonzero(both)[np.argmax(first[both])])
    behind = int(np.count_nonzero(second[both] > second[leader]))
    return (
        "A dot an overlay; on the dotted line it did as well in both halves. The best of the first half "
        f"({ratio(first[leader], sign=True)}) came to {ratio(second[leader], sign=True)} in the second, where "
        f"{behind:,} of {counted(int(both.sum()), 'overlay')} did better."
    )


# ---------------------------------------------------------------- files


def file_figures(view: View, line: MixLine | None) -> dict[str, Figure]:
    """The pictures of one view as figures of their own, by name."""
    made: dict[str, Figure] = {}
    with rc_context(FILE_STYLE), drawing():
        figures = [figure for figure in MAPPED if any_known(view.figure(figure.field))]
        if view.axes and figures:
            name = "heat_map" if len(view.axes) > 1 else "lines"
            made[name] = _file(view, "three figures over the axes", height=3.3 * len(figures) + 0.6)
            for part, figure in zip(made[name].subfigures(len(figures), squeeze=False)[:, 0], figures, strict=True):
                _map(part, view, figure)
                part.suptitle(upper_first(figure_title(figure, view)), x=0.01, ha="left", fontsize=10.0)
        if line is not None and any_known(view.figure("drawdown_removed") * view.figure("return_less_hold")):
            made["frontier"] = _file(view, "cost against drawdown removed", height=5.4)
            _frontier(made["frontier"], view, line)
        boxed = boxed_axes(view) if len(view.axes) > 1 and any_known(view.figure(SHARPE_GAIN.field)) else []
        if boxed:
            rows = [len(view.axes[place].values) + 2 for place in boxed]
            made["boxes"] = _file(view, "by one axis, over all other settings", height=0.6 + 0.36 * sum(rows))
            parts = made["boxes"].subfigures(len(boxed), squeeze=False, height_ratios=rows)[:, 0]
            for part, place in zip(parts, boxed, strict=True):
                _boxes(part, view, place)
        if len(view) > 1 and any_known(view.group.halves.first + view.group.halves.second):
            made["halves"] = _file(view, "first half of the days against the second", height=5.4)
            _halves(made["halves"], view)
    return made


def _file(view: View, words: str, *, height: float) -> Figure:
    figure = Figure(figsize=(9.0, height), dpi=150, layout="constrained")
    figure.suptitle(f"{grids.clipped(view.title, 70)}: {words}", x=0.01, ha="left", fontsize=12.0)
    return figure


def named(figures: Sequence[dict[str, Figure]]) -> dict[str, Figure]:
    """The pictures of all views, with the number of the view where there are several."""
    if len(figures) == 1:
        return figures[0]
    return {f"{name}_{count}": figure for count, part in enumerate(figures, 1) for name, figure in part.items()}
