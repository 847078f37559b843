"""The report's verdict and pictures as one PDF file, a page each."""

from __future__ import annotations

import textwrap
from collections.abc import Iterator, Sequence
from pathlib import Path
from typing import TYPE_CHECKING

from matplotlib import rc_context
from matplotlib.backends.backend_pdf import PdfPages
from matplotlib.figure import Figure

from ..assumptions import CAUTION
from .blocks import Block, Fold, Section, Shown
from .build import sections_of
from .pictures import INK, STYLE, Picture
from .words import date, typographic, upper_first

if TYPE_CHECKING:
    from ..report import Report

#: Landscape, a shape that both A4 and letter paper take without scaling down much.
PAGE_INCHES = (10.0, 7.0)
#: Left, bottom, width and height of what a page holds, in parts of it.
MARGINS = (0.03, 0.03, 0.94, 0.94)
LINE = 108


def write_pdf(report: Report, path: Path, *, history: str) -> None:
    """Write the file; the same report gives the same bytes."""
    found = report.answer
    title = found.replay.overlay.name or "overlay"
    shown = pictures_of(sections_of(found, report.findings, report.inference, history, "", None))
    about = {"Title": title[:200], "CreationDate": None, "ModDate": None}
    with rc_context(STYLE), PdfPages(path, metadata=about) as pages:
        pages.savefig(_first_page(report, title=title, history=history))
        for picture in shown:
            pages.savefig(_page(picture))


def pictures_of(sections: Sequence[Section]) -> list[Picture]:
    """Every picture of the page, in its order, those under a fold too."""
    return [picture for section in sections for picture in _pictures(section.blocks)]


def _pictures(blocks: Sequence[Block]) -> Iterator[Picture]:
    for block in blocks:
        if isinstance(block, Shown):
            yield block.picture
        elif isinstance(block, Fold):
            yield from _pictures(block.blocks)


def _first_page(report: Report, *, title: str, history: str) -> Figure:
    replay = report.answer.replay
    figure = Figure(figsize=PAGE_INCHES)
    head = f"{_short(title)}\non {_short(history)}, {date(replay.dates[0])} to {date(replay.dates[-1])}"
    figure.text(0.06, 0.93, head, va="top", fontsize=13.0, color=INK)
    said = []
    for clause in report.clauses:
        words = f"{clause.title} ({clause.finding}): {typographic(clause.sentence)}"
        said.append(textwrap.fill(words, LINE))
    figure.text(0.06, 0.80, "\n\n".join(said), va="top", fontsize=9.5, linespacing=1.35, color=INK)
    figure.text(0.06, 0.05, textwrap.fill(upper_first(CAUTION), LINE + 12), va="bottom", fontsize=8.5, color=INK)
    return figure


def _page(picture: Picture) -> Figure:
    """The chart drawn for the page, on a sheet of its own with its title and its reading."""
    figure = picture.figure
    figure.set_size_inches(*PAGE_INCHES)
    engine = figure.get_layout_engine()
    if engine is not None:
        engine.set(rect=MARGINS)  # type: ignore[call-arg]  # of the constrained layout, which all charts have
    figure.suptitle(picture.title, x=0.04, ha="left", fontsize=11.0)
    figure.supxlabel(textwrap.fill(picture.reading, LINE), x=0.04, ha="left", fontsize=8.8)
    return figure


def _short(text: str) -> str:
    return text if len(text) <= 90 else f"{text[:89]}…"
