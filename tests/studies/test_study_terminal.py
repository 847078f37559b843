"""What a study says on a terminal of 80 columns: its table whatever the axes, and that there was nothing to resume.

Rung: behaviour (every figure stands whole beside its overlay, no line of a table is wider than the terminal) and
identity (the figures are those of the study's rows, written here a second time).
"""

from __future__ import annotations

import io
import math
from collections.abc import Callable
from pathlib import Path

import pandas as pd
import pytest
from rich.cells import cell_len
from rich.console import Console

from studies.study import parse_study
from studies.study_answer import GroupAnswer, StudyAnswer
from studies.study_folder import run_study
from studies.study_terminal import show_study

from .small_studies import LEGS, axis, store_history
from .study_command import STUDY, Here

LONG = "strike of the put that is bought, in percent of the spot"  # 56 letters
PUT, CALL = "leg.1.strike.percent_of_spot", "leg.2.strike.percent_of_spot"
PUTS = axis("put strike", PUT, "[90, 95, 97.5]")
CALLS = axis("call strike", CALL, "[105, 110]")
ROLLS = axis("roll", "leg.1.roll", '["quarter", "half"]')
LONG_PUTS = axis(LONG, PUT, "[90, 95, 97.5]")
SMILES = axis("smile", "volatility.smile", '["flat", { rho = -0.6, eta = 1.1, gamma = 0.5 }]')
YEARS = axis("years", "window", '[{ from = "2008-01-01", to = "2009-03-31" }, { from = "2009-04-01" }]')


@pytest.fixture(scope="module")
def store(tmp_path_factory: pytest.TempPathFactory) -> Path:
    folder = tmp_path_factory.mktemp("histories")
    store_history(folder, "one")
    return folder


def run(store: Path, axes: str, own: str = "") -> StudyAnswer:
    head = 'question = "Which?"\nhistories = ["one"]\nresamples = 0\n'
    return run_study(parse_study(f"{head}{LEGS}{axes}{own}"), store=store)


def shown(found: StudyAnswer, width: int = 80) -> list[str]:
    """The lines of the terminal, without blanks at their ends."""
    console = Console(file=io.StringIO(), width=width)
    show_study(found, console=console)
    assert isinstance(console.file, io.StringIO)
    return [line.rstrip() for line in console.file.getvalue().splitlines()]


def table_after(lines: list[str], heading: str) -> list[str]:
    """The lines between the heading of a history and window and the sentence under its table."""
    begin = lines.index(heading) + 1
    end = next(at for at in range(begin, len(lines)) if lines[at].startswith("The best of"))
    return lines[begin:end]


def figures(row: pd.Series) -> list[str]:
    """The five figures of a row as the table has them: percents with one digit, ratios with two, no sign on zero."""
    percents = [f"{100 * row[name]:.1f}%" for name in ("annual_return", "max_drawdown", "return_less_hold")]
    said = [percents[0], f"{row['sharpe']:.2f}", percents[1], percents[2], f"{row['information_ratio']:.2f}"]
    return [{"-0.0%": "0.0%", "-0.00": "0.00"}.get(one, one) for one in said]


def ranked(found: StudyAnswer, group: GroupAnswer) -> pd.DataFrame:
    """The five best by information ratio, ties in the order of the study."""
    rows = found.overlays.iloc[group.rows]
    order = sorted(rows.index, key=lambda at: (-rows.loc[at, "information_ratio"], at))
    return rows.loc[order[:5]]


# ---------------------------------------------------------------- a column an axis


@pytest.mark.parametrize(
    ("axes", "names"),
    [(PUTS, ["put strike"]), (PUTS + CALLS, ["put strike", "call strike"]),
     (PUTS + CALLS + ROLLS, ["put strike", "call strike", "roll"])],
    ids=["one", "two", "three"],
)  # fmt: skip
def test_axes_that_fit_have_a_column_each(store: Path, axes: str, names: list[str]) -> None:
    found = run(store, axes)
    (group,) = found.groups
    table = table_after(shown(found), f"On one, {group.first} to {group.last}")
    assert max(map(cell_len, table)) <= 80
    best = ranked(found, group)
    rows = table[-len(best) :]
    for place, (line, (_, row)) in enumerate(zip(rows, best.iterrows(), strict=True), start=1):
        settings = [f"{row[name]:g}" if isinstance(row[name], float) else str(row[name]) for name in names]
        assert line.split() == [str(place), *settings, *figures(row)]
    # no word of a title is broken
    titles = {word for line in table[: -len(best)] for word in line.split()}
    assert titles == {
        *" ".join(names).split(), "return", "a", "year", "Sharpe", "ratio", "maximum", "drawdown", "less", "hold",
        "information",
    }  # fmt: skip


def test_titles_take_the_fewest_lines_that_fit(store: Path) -> None:
    """Of a put and a call: two lines on 80 columns, one on 120."""
    found = run(store, PUTS + CALLS)
    (group,) = found.groups
    heading = f"On one, {group.first} to {group.last}"
    assert len(table_after(shown(found), heading)) == 2 + 5
    assert len(table_after(shown(found, 120), heading)) == 1 + 5


def test_nothing_is_cut_at_any_width(store: Path) -> None:
    """From the width of the five figures alone: 5 letters of a place, 6, 6, 8, 6 and 11 of titles, 5 gaps of 2."""
    found = run(store, PUTS + CALLS + ROLLS, '[own]\n"put strike" = 95\n"call strike" = 110\nroll = "half"\n')
    (group,) = found.groups
    rows = [*(row for _, row in ranked(found, group).iterrows()), found.overlays.iloc[group.own]]
    layouts = set()
    for width in range(5 + 6 + 6 + 8 + 6 + 11 + 5 * 2, 130):
        table = table_after(shown(found, width), f"On one, {group.first} to {group.last}")
        assert max(map(cell_len, table)) <= width
        assert "…" not in "".join(table)
        numbers = table[: table.index("")] if "" in table else table
        assert [line.split()[-5:] for line in numbers[-len(rows) :]] == [figures(row) for row in rows]
        layouts.add(("" in table, len(numbers) - len(rows)))
    assert layouts == {(True, 3), (True, 2), (False, 3), (False, 2), (False, 1)}


# ---------------------------------------------------------------- settings in words


@pytest.mark.parametrize(
    ("axes", "own", "names"),
    [
        (LONG_PUTS + CALLS + ROLLS, f'[own]\n"{LONG}" = 95\n"call strike" = 110\nroll = "quarter"\n',
         [LONG, "call strike", "roll"]),
        (PUTS + SMILES, "", ["put strike", "smile"]),
        (LONG_PUTS + CALLS + ROLLS + SMILES, "", [LONG, "call strike", "roll", "smile"]),
        (axis("x" * 60, PUT, "[90, 95]"), "", ["x" * 60]),
    ],
    ids=["a long name", "a long value", "four", "one word"],
)  # fmt: skip
def test_axes_that_do_not_fit_are_told_in_words_underneath(store: Path, axes: str, own: str, names: list[str]) -> None:
    found = run(store, axes, own)
    (group,) = found.groups
    table = table_after(shown(found), f"On one, {group.first} to {group.last}")
    assert max(map(cell_len, table)) <= 80
    numbers, words = table[: table.index("")], table[table.index("") + 1 :]
    rows = {str(place): row for place, (_, row) in enumerate(ranked(found, group).iterrows(), start=1)}
    if group.own is not None:
        rows["yours"] = found.overlays.iloc[group.own]
    assert [line.split() for line in numbers[-len(rows) :]] == [[place, *figures(row)] for place, row in rows.items()]
    told: dict[str, str] = {}
    for line in words:
        if not line.startswith(" "):
            place, _, rest = line.partition(" ")
            told[place] = rest.strip()
        else:
            told[place] += f" {line.strip()}"
    assert told == {
        place: ", ".join(f"{n} {row[n]:g}" if isinstance(row[n], float) else f"{n} {row[n]}" for n in names)
        for place, row in rows.items()
    }


def test_a_value_that_is_wider_than_the_terminal_is_folded_and_not_cut(store: Path) -> None:
    label = "a" * 100
    found = run(store, f"{ROLLS}labels = ['{label}', 'b']\n")
    (group,) = found.groups
    table = table_after(shown(found), f"On one, {group.first} to {group.last}")
    assert max(map(cell_len, table)) <= 80
    assert sum(line.count("a") for line in table[table.index("") :]) == 100  # no other word there has one
    assert "…" not in "".join(table)


def test_a_name_is_text_and_no_markup(store: Path) -> None:
    for name in ("[bold]x[/bold]", "[/]", "[bold]" + "x" * 45 + "[/bold]"):
        found = run(store, axis(name, PUT, "[90, 95]"))
        (group,) = found.groups
        said = " ".join(" ".join(table_after(shown(found), f"On one, {group.first} to {group.last}")).split())
        assert name in said


# ---------------------------------------------------------------- windows


def test_a_window_is_said_over_its_table_and_not_in_it(store: Path) -> None:
    found = run(store, PUTS + YEARS)
    lines = shown(found)
    first, second = found.groups
    told = ("from 2008-01-01, to 2009-03-31", "from 2009-04-01")
    for group, window in zip((first, second), told, strict=True):
        table = table_after(lines, f"On one, {group.first} to {group.last} (years {window})")
        best = ranked(found, group)
        assert len(best) == 3
        assert [line.split() for line in table[-3:]] == [
            [str(place), f"{row['put strike']:g}", *figures(row)]
            for place, (_, row) in enumerate(best.iterrows(), start=1)
        ]
        assert "from" not in " ".join(table)


# ---------------------------------------------------------------- overlays without figures


def test_an_own_overlay_without_figures_has_dashes(store: Path) -> None:
    """A hundred calls sold a share lose everything in the first rise."""
    own = "[own]\nratio = 100\ncall = 101\n"
    found = run(store, axis("ratio", "leg.2.ratio", "[1, 100]") + axis("call", CALL, "[101]"), own)
    (group,) = found.groups
    assert group.own == 1
    assert math.isnan(found.overlays["sharpe"].iloc[1])
    table = table_after(shown(found), f"On one, {group.first} to {group.last}")
    assert [line.split()[0] for line in table[-2:]] == ["1", "yours"]
    assert table[-1].split() == ["yours", "100", "101", *["–"] * 5]


# ---------------------------------------------------------------- the command itself


@pytest.fixture
def here(tmp_path: Path, store: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]) -> Here:
    (tmp_path / "which.toml").write_text(STUDY)
    (tmp_path / "histories").symlink_to(store)
    return Here(tmp_path, monkeypatch, capsys)


def test_the_command_on_a_terminal_of_80_columns(here: Here, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setenv("COLUMNS", "80")
    ran = here()
    assert (ran.code, ran.err) == (0, "")
    lines = [line.rstrip() for line in ran.out.splitlines()]
    heading = next(line for line in lines if line.startswith("On one, "))
    table = table_after(lines, heading)
    assert max(map(cell_len, table)) <= 80
    assert [len(line.split()) for line in table[-5:]] == [8] * 5


FRESH = "rollband: there is no unfinished run for out to go on with: starting afresh\n"


def lose_nothing(here: Here) -> None:
    """No run has been begun."""


def stop_at_once(here: Here) -> None:
    assert here(stop_at=0, error=MemoryError()).code == 5


def lose_the_plan(here: Here) -> None:
    """Batches of nobody knows which study are removed."""
    assert here(stop_at=20, error=MemoryError()).code == 5
    (here.home / ".out.unfinished" / "plan.json").unlink()


@pytest.mark.parametrize("before", [lose_nothing, stop_at_once, lose_the_plan], ids=["none", "no batch", "no plan"])
def test_resuming_where_nothing_is_unfinished_is_said(here: Here, before: Callable[[Here], None]) -> None:
    before(here)
    ran = here("--resume")
    assert (ran.code, ran.err) == (0, FRESH)
    assert here.done == list(range(0, 900, 10))


def test_resuming_what_is_unfinished_says_nothing(here: Here) -> None:
    assert here(stop_at=10, error=MemoryError()).code == 5
    ran = here("--resume")
    assert (ran.code, ran.err) == (0, "")
    assert here.done == list(range(10, 900, 10))
