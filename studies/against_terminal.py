"""How a study compares with another, on the terminal."""

from __future__ import annotations

from collections.abc import Iterator
from typing import Any

from rich.console import Console
from rich.table import Table

from .against import BEST_BY
from .differences import plain_text, shown
from .terminal import NOT_TO_BE_HAD

#: Figures of the table, their titles, and whether they are percents; all others are in the file.
SHOWN = (
    ("annual_return", "return a year", True),
    ("volatility", "volatility", True),
    ("sharpe", "Sharpe ratio", False),
    ("max_drawdown", "maximum drawdown", True),
    ("return_less_hold", "return less hold", True),
    ("sharpe_less_mix", "Sharpe ratio less mix", False),
    (BEST_BY, "information ratio", False),
)


def show_against(made: dict[str, Any], *, console: Console | None = None) -> None:
    """Print what ``against.json`` holds: what differs between the studies, a short table, and the best."""
    console = console or Console()
    for line in _heading(made):
        console.print(line, highlight=False, markup=False, soft_wrap=True)
    if made["rows"]["both"]:
        table = Table(box=None, padding=(0, 2, 0, 0))
        for title in ("", "changed", "median change", "largest", "of", "to"):
            table.add_column(title, justify="right" if title else "left", no_wrap=True)
        for name, title, is_percent in SHOWN:
            if name in made["figures"]:
                table.add_row(*_row(title, made["figures"][name], is_percent))
        console.print(table)
    for line in _ending(made):
        console.print(line, highlight=False, markup=False, soft_wrap=True)


def _heading(made: dict[str, Any]) -> Iterator[str]:
    yield ""
    yield f"Against {made['against']}"
    comparison, axes, rows = made["comparison"], made["axes"], made["rows"]
    if comparison["here"] != comparison["there"]:
        yield f"Another comparison: {comparison['here']} here, {comparison['there']} there"
    for entry in made["inputs"]:
        here, there = (f"sha256 {entry[side][:12]}..." if entry[side] else "none" for side in ("here", "there"))
        yield f"Another history '{plain_text(entry['history'])}': {here} here, {there} there"
    for entry in made["settings"]:
        yield f"Another setting: {entry['key']} is {shown(entry['here'])} here, {shown(entry['there'])} there"
    for side in ("here", "there"):
        if axes[f"only_{side}"]:
            yield f"Varied only {side}: {', '.join(map(plain_text, axes[f'only_{side}']))}"
    if rows["not_matched"] is not None:
        yield f"{rows['not_matched'][0].upper()}{rows['not_matched'][1:]}."
        return
    yield f"Overlays: {rows['both']:,} in both, {rows['only_here']:,} only here, {rows['only_there']:,} only there"
    if made["other_days"]:
        yield f"{made['other_days']:,} of those in both begin or end on another day"


def _row(title: str, figure: dict[str, Any], is_percent: bool) -> tuple[str, ...]:
    def number(value: float | None, sign: str = "") -> str:
        if value is None:
            return NOT_TO_BE_HAD
        return f"{100 * value + 0.0:{sign}.2f}%" if is_percent else f"{value + 0.0:{sign}.3f}"

    largest = figure["largest_change"] or {"change": None, "here": None, "there": None}
    return (
        title, f"{figure['changed']:,}", number(figure["median_change"], "+"), number(largest["change"], "+"),
        number(largest["there"]), number(largest["here"]),
    )  # fmt: skip


def _largest(made: dict[str, Any]) -> Iterator[str]:
    """Where the largest changes are, figures with the same place together."""
    at: dict[str, list[str]] = {}
    for name, title, _ in SHOWN:
        largest = made["figures"].get(name, {}).get("largest_change")
        if largest is not None:
            at.setdefault(largest["settings"], []).append(title)
    for settings, titles in at.items():
        yield f"Largest change of {', '.join(titles)}: {settings}"


def _ending(made: dict[str, Any]) -> Iterator[str]:
    yield from _largest(made)
    for entry in made["best"]:
        on = " ".join(word for word in (entry["history"], entry["window"]) if word)
        here, there = (_best_words(made, entry, side) for side in ("here", "there"))
        if entry["same"]:
            yield f"The best on {on} is the same: {here} here, {entry['there'][BEST_BY]:.3f} there"
        else:
            yield f"The best on {on} is another: {here} here; {there} there"
    correlation = made["rank_correlation"]
    if correlation is not None:
        yield f"Rank correlation of the information ratio, overlays in both: {correlation:+.3f}"


def _best_words(made: dict[str, Any], entry: dict[str, Any], side: str) -> str:
    one = entry[side]
    if one is None:
        return "none"
    only = "" if one["in_both"] or made["rows"]["both"] is None else f", only {side}"
    return f"{one['settings']} (information ratio {one[BEST_BY]:.3f}{only})"
