"""What a study found, on the terminal."""

from __future__ import annotations

from rich.console import Console
from rich.table import Table
from rich.text import Text

from .assumptions import CAUTION
from .study_answer import GroupAnswer, StudyAnswer, overlay_names, sentence_of, setting_word
from .terminal import percent, ratio

#: Overlays shown, from the best down.
SHOWN = 5


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
        say(f"On {group.history}, {group.first} to {group.last}", "bold")
        console.print(_best_table(found, group))
        say(sentence_of(group, names))
        for line in _lines(group):
            say(line)
    say("")
    console.print(CAUTION, style="dim", highlight=False, markup=False)


def _best_table(found: StudyAnswer, group: GroupAnswer) -> Table:
    axes = [axis.name for axis in found.plan.study.axes]
    table = Table(box=None, padding=(0, 2, 0, 0))
    table.add_column("", no_wrap=True)
    titles = ("return a year", "Sharpe ratio", "maximum drawdown", "return less hold", "information ratio")
    for title in (*axes, *titles):
        # a name is text, not markup
        table.add_column(Text(title), justify="right", min_width=len(max(title.split(), key=len)))
    rows = found.overlays.iloc[group.rows].dropna(subset=["information_ratio"])
    ranked = rows.sort_values(["information_ratio", "number"], ascending=[False, True], kind="stable")["number"][:SHOWN]
    shown = [(str(place), int(number)) for place, number in enumerate(ranked, start=1)]
    if group.own is not None:
        shown.append(("yours", group.own))
    for title, number in shown:
        row = found.overlays.iloc[number]
        table.add_row(
            title,
            *(Text(setting_word(row[name])) for name in axes),
            percent(row["annual_return"]),
            ratio(row["sharpe"]),
            percent(row["max_drawdown"]),
            percent(row["return_less_hold"]),
            ratio(row["information_ratio"]),
        )
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
