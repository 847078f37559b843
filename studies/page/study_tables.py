"""The tables of one history and window of a study."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import numpy.typing as npt

from .blocks import Cell, Table
from .study_blocks import Sortable, SortCell
from .study_pictures import shifted_axis
from .study_view import (
    BETA,
    DRAWDOWN,
    INFORMATION,
    REMOVED,
    RETURN,
    RETURN_GAIN,
    SHARPE,
    SHARPE_GAIN,
    VOLATILITY,
    FigureWords,
    View,
)
from .words import DASH, known, number, ratio

Array = npt.NDArray[np.float64]

#: Overlays in the short table and in the one that can be sorted.
BEST_SHOWN, MOST_SORTED = 5, 200
SHORT = (RETURN, RETURN_GAIN, SHARPE, SHARPE_GAIN, DRAWDOWN, REMOVED, INFORMATION)
LONG = (RETURN, RETURN_GAIN, VOLATILITY, SHARPE, SHARPE_GAIN, DRAWDOWN, REMOVED, BETA, INFORMATION)
NO_FIGURE = (
    "cannot be had: the overlay lost everything, or does not vary against its comparison, or has no beta above zero "
    "and so no mix of stock and cash beside it, or the days are too few"
)


def heads(figures: Sequence[FigureWords], view: View) -> list[str]:
    """Titles of figure columns; under a year returns are totals."""
    whole = "return, whole span"
    return [f.head.replace("return a year", whole) if view.under_a_year else f.head for f in figures]


def best_table(view: View, comparison: str) -> Table:
    """The best few, the reader's own with its rank, and the hold."""
    ranking = view.ranking
    ranked = [row for row in ranking[:BEST_SHOWN] if np.isfinite(view.worth(INFORMATION.field, int(row)))]
    rows = [_overlay_row(view, str(place), int(row)) for place, row in enumerate(ranked, start=1)]
    strong = frozenset[int]()
    if view.own is not None:
        place = int(np.flatnonzero(ranking == view.own)[0]) + 1
        ranked_too = known(view.worth(INFORMATION.field, view.own))
        rows.append(_overlay_row(view, f"yours ({place:,} of {len(view):,})" if ranked_too else "yours", view.own))
        strong = frozenset({len(rows) - 1})
    reference = next(row for row in (view.own, view.best, 0) if row is not None)
    hold = {f: view.worth(f"hold_{f}", reference) for f in ("annual_return", "sharpe", "max_drawdown")}
    rows.append(["hold", *[""] * len(view.axes), *(f.written(hold[f.field]) if f.field in hold else "" for f in SHORT)])
    against = "its same-beta mix" if comparison == "same-beta mix" else "the hold"
    return Table(
        caption="Ranked by information ratio",
        head=("", *(axis.name for axis in view.axes), *heads(SHORT, view)),
        rows=rows, strong=strong, dense=True, words=frozenset({0, *_worded(view, 1)}), dash_means=NO_FIGURE,
        notes=[
            f"The information ratio is against {against}: the mean daily difference over its deviation, annual. The "
            "mix is the same-beta mix: less stock and more cash, with the overlay's beta.",
        ],
    )  # fmt: skip


def _overlay_row(view: View, title: str, row: int) -> list[str]:
    return [title, *settings_of(view, row), *(figure.written(view.worth(figure.field, row)) for figure in SHORT)]


def settings_of(view: View, row: int) -> list[str]:
    """Values of the axes that vary, in words."""
    return [axis.labels[place] for axis, place in zip(view.axes, view.positions[row], strict=True)]


def _worded(view: View, first: int) -> list[int]:
    """Columns of axes whose values are words."""
    return [first + place for place, axis in enumerate(view.axes) if not axis.is_numeric]


def sortable_table(view: View) -> Sortable:
    """The best overlays, or all where they are few."""
    shown = view.ranking[:MOST_SORTED]
    figures = {figure: view.figure(figure.field) for figure in LONG}
    rows = []
    for rank, row in enumerate(shown.tolist(), start=1):
        cells = [SortCell(str(rank), str(rank))]
        cells += [
            SortCell(word, str(place)) for word, place in zip(settings_of(view, row), view.positions[row], strict=True)
        ]
        cells += [SortCell(figure.written(values[row]), sort_key(values[row])) for figure, values in figures.items()]
        rows.append(cells)
    everything = len(shown) == len(view)
    head = ["rank", *(axis.name for axis in view.axes), *heads(LONG, view)]
    notes = [] if everything else [f"The other {len(view) - len(shown):,} overlays are in overlays.parquet."]
    if any(cell.text == DASH for row in rows for cell in row):
        notes.append(f"A dash ({DASH}): {NO_FIGURE}.")
    return Sortable(
        caption=f"All {len(view):,} overlays" if everything else f"The best {len(shown):,} of {len(view):,} overlays",
        head=head, rows=rows, sorted_by=len(head) - 1, words=frozenset(_worded(view, 1)),
        marked=frozenset(n for n, row in enumerate(shown.tolist()) if row == view.own), notes=notes,
    )  # fmt: skip


def sort_key(value: float) -> str:
    """What a figure is sorted by; nothing where there is none."""
    return f"{value:.6g}" if known(value) else ""


def roll_day_table(view: View) -> Table | None:
    """One setting over all roll days."""
    place = shifted_axis(view)
    shown = view.own if view.own is not None else view.best
    if place is None or shown is None:
        return None
    rows = []
    for figure in (SHARPE_GAIN, RETURN_GAIN, REMOVED):
        values, setting = view.by_setting(place, view.figure(figure.field))
        line = values[setting[shown]]
        there = line[np.isfinite(line)]
        if not there.size:
            continue
        ends = (view.worth(figure.field, shown), there.min(), float(np.median(there)), there.max())
        wide = number(figure.scale * float(np.ptp(there)), figure.digits)
        better = f"{np.count_nonzero(there > ends[0]):,} of {there.size:,}"
        rows.append([heads([figure], view)[0], *(figure.written(float(value)) for value in ends), wide, better])
    if not rows:
        return None
    whose = "your roll day" if view.own is not None else "roll day of the best"
    same = "" if len(view.axes) == 1 else ", with your other settings" if view.own is not None else ", as the best else"
    return Table(
        caption=f"One rule on every roll day of the study{same}", rows=rows,
        head=("", whose, "lowest", "median", "highest", "highest less lowest", "roll days that did better"),
    )  # fmt: skip


def lasting_table(view: View) -> Table | None:
    """Rank correlations of one part of the days with the next."""
    parts = [part for part in (view.group.halves, *view.group.decades) if np.isfinite(part.rank_correlation)]
    if not parts:
        return None
    rows: list[list[str | Cell]] = [
        [f"{part.first_name} to {part.second_name}", Cell(ratio(part.rank_correlation, sign=True),
         _tone(part.rank_correlation))] for part in parts
    ]  # fmt: skip
    return Table(
        caption="Rank correlation of the overlays from one part of the days to the next", head=("", "rank correlation"),
        rows=rows,
        notes=["Of the Sharpe ratio less the hold's: +1 is the same order in both parts, 0 no relation, −1 the order "
               "turned round. Overlays that hardly differ keep their order easily."],
    )  # fmt: skip


def _tone(value: float) -> str:
    size = 1 + (abs(value) > 1 / 3) + (abs(value) > 2 / 3)
    return "" if abs(value) < 0.05 else f"{'up' if value > 0 else 'down'}{size}"
