"""What a study found, on the terminal."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING

from rich.cells import cell_len
from rich.console import Console
from rich.table import Table
from rich.text import Text

from .assumptions import CAUTION
from .study_answer import GroupAnswer, StudyAnswer, overlay_names, sentence_of, setting_word
from .terminal import percent, ratio

if TYPE_CHECKING:
    import pandas as pd

#: Overlays shown, from the best down.
SHOWN = 5
#: Titles of the figures of each.
FIGURES = ("return a year", "Sharpe ratio", "maximum drawdown", "return less hold", "information ratio")
#: Lines of a title at the most; more, and the table has no column for an axis.
MOST_TITLE_LINES = 3
#: Blanks after a column.
GAP = 2


def show_study(found: StudyAnswer, *, console: Console | None = None) -> None:
    """Print the best overlays of each history and window, and how far the search alone explains them."""
    console = console or Console()

    def say(text: str, style: str | None = None) -> None:
        console.print(text, style=style, highlight=False, markup=False, soft_wrap=True)

    study, names = found.plan.study, overlay_names(found)
    say("")
    say(study.question, "bold")
    axes = " x ".join(f"{len(axis.values)} {axis.name}" for axis in study.axes)
    say(f"{found.plan.overlays:,} overlays ({axes}), compared with the {study.comparison}")
    for group in found.groups:
        say("")
        say(f"On {group.history}, {group.first} to {group.last}{_window_words(found, group)}", "bold")
        for part in _best_tables(found, group, console):
            console.print(part)
        say(sentence_of(group, names))
        for line in _lines(group):
            say(line)
    say("")
    console.print(CAUTION, style="dim", highlight=False, markup=False)


def _window_axes(found: StudyAnswer) -> list[str]:
    """Axes that set the window: of one value throughout a group, and so said over its table and not in it."""
    return [axis.name for axis in found.plan.study.axes if any(field.startswith("window") for field in axis.fields)]


def _window_words(found: StudyAnswer, group: GroupAnswer) -> str:
    row = found.overlays.iloc[group.rows.start]
    said = ", ".join(f"{name} {setting_word(row[name])}" for name in _window_axes(found))
    return f" ({said})" if said else ""


def _best_tables(found: StudyAnswer, group: GroupAnswer, console: Console) -> list[Table | str]:
    """The best overlays and the reader's own: a column an axis, or where that is too wide their settings in words."""
    windows = _window_axes(found)
    axes = [axis.name for axis in found.plan.study.axes if axis.name not in windows]
    rows = {place: found.overlays.iloc[number] for place, number in _shown(found, group)}
    settings = {place: [setting_word(row[name]) for name in axes] for place, row in rows.items()}
    whole = [[place, *settings[place], *_figures(row)] for place, row in rows.items()]
    if (table := _fitted(console, ["", *axes, *FIGURES], whole)) is not None:
        return [table]
    figures = [[place, *_figures(row)] for place, row in rows.items()]
    words = Table(box=None, padding=(0, GAP, 0, 0), show_header=False)
    words.add_column(width=max(map(cell_len, rows), default=0))
    words.add_column(overflow="fold")
    for place, values in settings.items():
        said = ", ".join(f"{name} {value}" for name, value in zip(axes, values, strict=True))
        words.add_row(place, Text(said))  # a name is text, not markup
    titles = ["", *FIGURES]
    narrowest = _table(titles, figures, _widths(console, titles, figures, MOST_TITLE_LINES))
    return [_fitted(console, titles, figures) or narrowest, "", words]


def _shown(found: StudyAnswer, group: GroupAnswer) -> list[tuple[str, int]]:
    """Place and number of the best few, and of the reader's own."""
    rows = found.overlays.iloc[group.rows].dropna(subset=["information_ratio"])
    ranked = rows.sort_values(["information_ratio", "number"], ascending=[False, True], kind="stable")["number"][:SHOWN]
    own = [] if group.own is None else [("yours", group.own)]
    return [*((str(place), int(number)) for place, number in enumerate(ranked, start=1)), *own]


def _figures(row: pd.Series) -> list[str]:
    """What :data:`FIGURES` are the titles of."""
    return [
        percent(row["annual_return"]), ratio(row["sharpe"]), percent(row["max_drawdown"]),
        percent(row["return_less_hold"]), ratio(row["information_ratio"]),
    ]  # fmt: skip


def _fitted(console: Console, titles: Sequence[str], rows: Sequence[Sequence[str]]) -> Table | None:
    """The table with its titles on as few lines as it fits in; None if it does not."""
    for lines in range(1, MOST_TITLE_LINES + 1):
        widths = _widths(console, titles, rows, lines)
        if sum(widths) + GAP * (len(widths) - 1) <= console.width:
            return _table(titles, rows, widths)
    return None


def _widths(console: Console, titles: Sequence[str], rows: Sequence[Sequence[str]], lines: int) -> list[int]:
    """The least width of each column at which no value and no word is broken, and its title takes so many lines."""
    made = []
    for column, title in enumerate(titles):
        width = max(map(cell_len, [*title.split(), *(row[column] for row in rows)]), default=0)
        while len(Text(title).wrap(console, width)) > lines:
            width += 1
        made.append(width)
    return made


def _table(titles: Sequence[str], rows: Sequence[Sequence[str]], widths: Sequence[int]) -> Table:
    table = Table(box=None, padding=(0, GAP, 0, 0), pad_edge=False)
    for title, width in zip(titles, widths, strict=True):
        # a name is text, not markup
        table.add_column(Text(title), width=width, justify="right" if title else "left")
    for row in rows:
        table.add_row(*map(Text, row))
    return table


def _lines(group: GroupAnswer) -> list[str]:
    said = []
    if group.steps:
        beaten = sum(step.outside > step.median_out for step in group.steps)
        mean_in = sum(step.inside for step in group.steps) / len(group.steps)
        mean_out = sum(step.outside for step in group.steps) / len(group.steps)
        said.append(
            f"Chosen on the days before and judged on the days after, {len(group.steps)} times: Sharpe ratio less the "
            f"hold's {mean_in:+.2f} inside, {mean_out:+.2f} outside; better than the median overlay {beaten} times."
        )
    halves = group.halves.rank_correlation
    if halves == halves:  # not NaN
        said.append(f"Rank correlation of the overlays from the first half of the days to the second: {halves:+.2f}.")
    if group.ruined:
        said.append(f"{group.ruined:,} overlays lose everything and have no figures.")
    return said
