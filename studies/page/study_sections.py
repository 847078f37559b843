"""The sections of a study's page."""

from __future__ import annotations

from collections.abc import Sequence
from math import prod

from backtest import Replay

from ..assumptions import assumptions_of
from ..axes import Axis
from ..overlay_files import overlay_from_table
from ..study import Study
from ..study_answer import StudyAnswer
from . import study_pictures, study_tables
from .blocks import Command, Definitions, Prose, Shown
from .pictures import Picture
from .sections import TITLES, leg_words
from .study_blocks import Explorer, Heading, Part, StudyBlock
from .study_data import MOST_EXPLORED, key_of
from .study_search import chance, search
from .study_view import SHARPE_GAIN, SHARPE_GAIN_ON_HOLD, MixLine, View
from .words import counted, date, known, listed, percent, ratio, typographic, upper_first
from .words import span as length

#: Fields of a study file that an assumption in words stands for.
VARIED = {"smile": "volatility.smile", "cost": "costs", "account": "account", "volatility": "volatility"}


def _pictures(*found: Picture | None) -> list[StudyBlock]:
    return [Shown(picture) for picture in found if picture is not None]


# ---------------------------------------------------------------- the whole study


def key_figures(view: View, comparison: str) -> list[tuple[str, str, str]]:
    """What the page begins with: title, figure, what it is of."""
    group = view.group
    gain, over = (SHARPE_GAIN_ON_HOLD, "the hold") if comparison == "hold" else (SHARPE_GAIN, "its same-beta mix")
    sizes = " × ".join(f"{len(axis.values):,}" for axis in view.axes)
    check = group.check
    tested = check is not None and known(check.luck)
    return [
        ("Overlays tried", f"{group.tried:,}", sizes if len(view.axes) > 1 else ""),
        ("Gain of the best", gain.written(view.worth(gain.field, view.best)), f"of Sharpe ratio over {over}"),
        ("As good by luck", chance(check.luck, check.resamples) if check and tested else "–",
         "chance, the search allowed for"),
        ("Any advantage", percent(group.deflated.probability, 0), "probability after so many trials"),
        ("First half to second", ratio(group.halves.rank_correlation, sign=True), "rank correlation"),
    ]  # fmt: skip


def tried(found: StudyAnswer, views: Sequence[View], replay: Replay) -> Part:
    """Number, axes, what was left out, comparison, histories, days, and what all overlays share."""
    study = found.plan.study
    combinations = prod(len(axis.values) for axis in study.axes)
    each = sum(len(group.points) for group in found.plan.groups) // max(len(study.histories), 1)
    items = [("Overlays", _how_many(found, each))]
    items += [(f"Axis {number}", _axis_words(axis)) for number, axis in enumerate(study.axes, start=1)]
    if study.leave_out:
        rules = listed(study.leave_out)
        items.append(
            ("Left out", f"{combinations - each:,} of {counted(combinations, 'combination')}, wherever {rules}")
        )
    mix = study.comparison == "same-beta mix"
    items.append(
        ("Compared with", "its same-beta mix: less stock and more cash, at the overlay's beta" if mix else "the hold")
    )  # fmt: skip
    items += _days(views)
    base = overlay_from_table(study.overlay).overlay
    items += [
        (f"Leg {number}{', to begin with' if _touched(study, f'leg.{number}.') else ''}", leg_words(leg))
        for number, leg in enumerate(base.legs, start=1)
    ]
    for name, text in assumptions_of(replay).items():
        if len(study.histories) > 1 and name in ("rate", "dividend_yield"):
            continue
        title = TITLES.get(name, upper_first(name.replace("_", " ")))
        axes = _touched(study, VARIED.get(name, "?"), but="volatility.smile" if name == "volatility" else "?")
        value = f"varied by {listed(axes)}" if axes else upper_first(typographic(text))
        items.append((title, value))
    draws = f"{study.resamples:,} (seed {study.seed})" if study.resamples else "none were asked for"
    items.append(("Histories drawn for the tests", draws))
    return Part(anchor="tried", title="What was tried", blocks=[Definitions(items)])


def _how_many(found: StudyAnswer, each: int) -> str:
    histories = len(found.plan.study.histories)
    ruined = sum(group.ruined for group in found.groups)
    said = f"{found.plan.overlays:,}" if histories == 1 else f"{found.plan.overlays:,}: {each:,} on each history"
    return f"{said}; {ruined:,} lost everything and have no figures" if ruined else said


def _axis_words(axis: Axis) -> str:
    values = f"{len(axis.labels):,} values, {axis.labels[0]} to {axis.labels[-1]}"
    if not axis.is_numeric or len(axis.labels) <= 4:
        values = axis.some_labels()
    return f"{axis.name}: {values} ({listed(axis.fields)})"


def _days(views: Sequence[View]) -> list[tuple[str, str]]:
    """Each history and window with the days that its overlays have in common."""
    if len(views) > 6:
        first, last = min(view.group.first for view in views), max(view.group.last for view in views)
        return [("Days", f"of {len(views):,} histories and windows, within {date(first)} to {date(last)}")]
    return [
        (
            "Days" if len(views) == 1 else f"Days of {view.title}",
            (f"{view.title}: " if len(views) == 1 else "")
            + f"{date(view.group.first)} to {date(view.group.last)}, {length(view.group.first, view.group.last)}, "
            "the same for every overlay and the hold: from the latest of the overlays' first roll days on. One whose "
            "own came earlier begins with options under way (stubs), held to its next roll day",
        )
        for view in views
    ]


def _touched(study: Study, field: str, *, but: str = "?") -> list[str]:
    """Names of the axes that set a field, or something in it."""
    return [
        axis.name
        for axis in study.axes
        if any((f"{f}.".startswith(f"{field.rstrip('.')}.")) and not f.startswith(but) for f in axis.fields)
    ]


def again(command: str) -> Part:
    """The command."""
    return Part(
        anchor="again", title="How to run it again",
        blocks=[
            Prose("From the folder in which it was run:"), Command(command),
            Prose("manifest.json in the results folder holds the checksums of the histories and the study in full; the "
                  "same inputs give the same figures. overlays.parquet has a row an overlay, with all its figures."),
        ],
    )  # fmt: skip


# ---------------------------------------------------------------- one history and window


def parts_of(found: StudyAnswer, view: View, line: MixLine | None, prefix: str, *, explored: bool) -> list[Part]:
    """The sections of one view, in their order."""
    made = [
        best(found, view, prefix), maps(view, prefix, explored=explored), cost(view, line, prefix), axes(view, prefix),
        roll_days(view, prefix), lasting(view, prefix), search(found, view, prefix), overlays(view, prefix),
    ]  # fmt: skip
    return [part for part in made if part is not None]


def best(found: StudyAnswer, view: View, prefix: str) -> Part:
    """The best few and the reader's own."""
    blocks: list[StudyBlock] = []
    if view.best is None:
        blocks.append(Prose("There is no best: no overlay here can be compared."))
    blocks.append(study_tables.best_table(view, found.plan.study.comparison))
    return Part(
        anchor=f"{prefix}best", title="The best and yours" if view.own is not None else "The best",
        question="Before asking whether it was luck: what did they do?", blocks=blocks,
    )  # fmt: skip


def maps(view: View, prefix: str, *, explored: bool) -> Part:
    """Figures over the axes."""
    pictures = study_pictures.map_pictures(view, prefix)
    blocks = _pictures(*pictures)
    if not blocks:
        why = "no axis varies here" if not view.axes else "no overlay has figures that could be drawn"
        blocks = [Prose(f"There is no map: {why}.")]
    elif len(view.axes) > 1 and explored:
        blocks.append(Explorer(key_of(view)))
    elif len(view.axes) > 1:
        blocks.append(
            Prose(f"A map for any two axes and any figure comes with studies of up to {MOST_EXPLORED:,} overlays.")
        )
    if len(view.axes) > 1 and pictures:
        blocks.insert(0, Prose("One good cell among bad ones is luck more often than a broad good region is."))
    return Part(
        anchor=f"{prefix}map", title="Over the axes", question="Where are the good ones, and do they lie together?",
        blocks=blocks,
    )  # fmt: skip


def cost(view: View, line: MixLine | None, prefix: str) -> Part:
    """What protection cost."""
    picture = None if line is None else study_pictures.frontier_picture(view, line, prefix)
    blocks = _pictures(picture)
    if picture is None:
        blocks = [Prose("It cannot be said: the days are too few, or no overlay has figures.")]
    else:
        blocks.append(
            Prose(
                "The dashed line holds from all stock (left) to none (right), over the days that all overlays have in "
                "common. The steps are the cheapest overlays for at least as much off the fall, found with hindsight."
            )
        )
    return Part(
        anchor=f"{prefix}cost", title="What protection cost", blocks=blocks,
        question="Would holding less stock have taken as much off the deepest fall for less?",
    )  # fmt: skip


def axes(view: View, prefix: str) -> Part | None:
    """One axis at a time."""
    pictures = study_pictures.axis_pictures(view, prefix)
    if not pictures:
        return None
    return Part(
        anchor=f"{prefix}axes", title="One axis at a time", question="Which choice matters, whatever the others are?",
        blocks=_pictures(*pictures),
    )  # fmt: skip


def roll_days(view: View, prefix: str) -> Part | None:
    """The spread over roll days."""
    place = study_pictures.shifted_axis(view)
    if place is None:
        return None
    blocks = _pictures(*study_pictures.roll_day_pictures(view, place, prefix))
    table = study_tables.roll_day_table(view)
    if table is not None:
        blocks.append(table)
    return Part(
        anchor=f"{prefix}days", title="The luck of the roll day",
        question="What changes when nothing but the day of the roll does?",
        blocks=blocks or [Prose("It cannot be said: no overlay has figures.")],
    )  # fmt: skip


def lasting(view: View, prefix: str) -> Part:
    """Does the order hold?"""
    table = study_tables.lasting_table(view)
    blocks = _pictures(study_pictures.halves_picture(view, prefix))
    if table is not None:
        blocks.append(table)
    if not blocks:
        why = (
            "there is one overlay, and no order"
            if len(view) == 1
            else "the days are too few, or no overlay has figures"
        )
        blocks = [Prose(f"It cannot be said: {why}.")]
    return Part(
        anchor=f"{prefix}lasting", title="Does it last?",
        question="Are the good ones of one part of the days the good ones of the next?", blocks=blocks,
    )  # fmt: skip


def overlays(view: View, prefix: str) -> Part:
    """The long table."""
    return Part(
        anchor=f"{prefix}overlays", title="The overlays", blocks=[study_tables.sortable_table(view)],
        question="In the order of the information ratio.",
    )  # fmt: skip


def joined(parts: Sequence[Part], *, anchor: str, title: str, question: str) -> Part:
    """The sections of one of several views as one, each under a title of its own."""
    blocks: list[StudyBlock] = []
    for part in parts:
        blocks += [Heading(part.anchor, part.title, part.question), *part.blocks]
    return Part(anchor=anchor, title=title, question=question, blocks=blocks)
