"""A study's answer as one self-contained HTML page, and its pictures as figures."""

from __future__ import annotations

import base64
import hashlib
from collections.abc import Mapping
from functools import cache
from importlib.resources import files
from pathlib import Path

from jinja2 import DictLoader, Environment, StrictUndefined
from markupsafe import Markup
from matplotlib.figure import Figure

from ..study_answer import StudyAnswer, overlay_names
from . import study_cautions, study_groups, study_sections
from .build import _style as report_style
from .study_blocks import Part
from .study_data import explorer_data
from .study_pictures import drawing, file_figures, named
from .study_view import MixLine, View, mix_line, one_replay, views_of
from .words import DASH, counted, date

#: Histories and windows that have sections and pictures of their own; of more there is a table.
MOST_GROUPS = 6


def build_study_page(found: StudyAnswer, *, command: str) -> str:
    """The page as one HTML text: no network, light and dark, phone and paper; its one script is allowed by its hash.

    Parameters
    ----------
    found : StudyAnswer
    command : str
        What gives the same folder again.
    """
    study = found.plan.study
    views = views_of(found, overlay_names(found))
    detailed = views if len(views) <= MOST_GROUPS else []
    data = explorer_data(detailed)
    first_replay = one_replay(found, views[0])
    with drawing():
        parts = [] if detailed else [study_groups.groups(found, views, most_told=MOST_GROUPS)]
        parts.append(study_sections.tried(found, views, first_replay))
        for view in detailed:
            parts += _parts(found, view, alone=len(detailed) == 1, explored=data is not None)
    parts += [study_cautions.cautions(found, views, first_replay), study_sections.again(command)]
    keys = study_sections.key_figures(views[0], study.comparison) if len(views) == 1 else []
    script = _file("study.js")
    return (
        _environment()
        .get_template("study.html.j2")
        .render(
            question=study.question,
            subject=_subject(found, views),
            keys=keys,
            dash=_why_dash(keys),
            answer=study_groups.answer_blocks(found, views, most_told=MOST_GROUPS),
            parts=parts,
            data=data or "",
            style=Markup(report_style() + _file("study.css")),  # our own files
            script=Markup(script),
            script_hash=base64.b64encode(hashlib.sha256(script.encode()).digest()).decode(),
        )
    )


def study_figures(found: StudyAnswer) -> dict[str, Figure]:
    """The pictures of a study as figures, for files.

    ``heat_map`` (``lines`` for one axis), ``frontier``, ``boxes`` and ``halves``. With several histories or windows
    each name has the number of its own, ``heat_map_1``; with more than :data:`MOST_GROUPS` there are none. What cannot
    be drawn is not among them.
    """
    views = views_of(found, overlay_names(found))
    if len(views) > MOST_GROUPS:
        return {}
    return named([file_figures(view, _line(found, view)) for view in views])


def save_figures(figures: Mapping[str, Figure], folder: Path) -> None:
    """Write every figure as a PNG file, quiet about letters that the drawing font has not."""
    with drawing():
        for name, figure in figures.items():
            figure.savefig(folder / f"{name}.png", metadata={"Software": None})


def _why_dash(keys: list[tuple[str, str, str]]) -> str:
    missing = any(figure == DASH for _, figure, _ in keys)
    return f"A dash ({DASH}): cannot be had; the sections below say why." if missing else ""


def _parts(found: StudyAnswer, view: View, *, alone: bool, explored: bool) -> list[Part]:
    prefix = "" if alone else f"g{view.number}-"
    parts = study_sections.parts_of(found, view, _line(found, view), prefix, explored=explored)
    if alone:
        return parts
    days = f"{date(view.group.first)} to {date(view.group.last)}, {counted(len(view), 'overlay')}"
    return [study_sections.joined(parts, anchor=f"g{view.number}", title=view.title, question=days)]


def _line(found: StudyAnswer, view: View) -> MixLine | None:
    return mix_line(one_replay(found, view))


def _subject(found: StudyAnswer, views: list[View]) -> str:
    """How many overlays, on what, over which days."""
    first, last = min(view.group.first for view in views), max(view.group.last for view in views)
    histories = found.plan.study.histories
    on = f"on {histories[0]}" if len(histories) == 1 else f"on {len(histories):,} histories"
    return f"{counted(found.plan.overlays, 'overlay')} {on}, {date(first)} to {date(last)}"


@cache
def _environment() -> Environment:
    """The study's template, and the report's own blocks: what stands before its page begins."""
    blocks, _ = _file("report.html.j2").split("<!DOCTYPE html>", 1)
    return Environment(
        loader=DictLoader({"study.html.j2": _file("study.html.j2"), "blocks": blocks}),
        autoescape=True,
        undefined=StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
    )


@cache
def _file(name: str) -> str:
    return files(__package__).joinpath(name).read_text(encoding="utf-8")
