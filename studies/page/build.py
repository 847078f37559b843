"""An answer and its findings as one self-contained HTML page."""

from __future__ import annotations

import re
from collections.abc import Sequence
from functools import cache
from importlib.resources import files

from jinja2 import Environment, StrictUndefined, Template
from markupsafe import Markup

from backtest.analytics.resampling import Inference
from backtest.analytics.verdict import Clause

from ..findings import Findings
from ..replay_history import Answer
from . import beside, sections, tables
from .blocks import Section
from .health import DataHealth
from .luck import bootstrap_blocks, contest_of
from .words import DASH, date, span, typographic

FINDING_WORDS = {"yes": "yes", "no": "no", "open": "open"}


def build_report(
    answer: Answer,
    findings: Findings,
    inference: Inference | None = None,
    verdict: Sequence[Clause] = (),
    *,
    history: str,
    how_to_run: str,
    data_health: DataHealth | None = None,
) -> str:
    """The report as one HTML text: no network, no script, light and dark, phone and paper.

    Parameters
    ----------
    answer : Answer
    findings : Findings
        Of the same answer.
    inference : Inference, optional
        Its comparisons named as in ``answer.figures`` (``hold``, ``mix_same_beta``, ...); without it the page says
        that there are no intervals.
    verdict : sequence of Clause
        In the order in which they are to be read.
    history : str
        Name of the history, as its owner wrote it; any text will do.
    how_to_run : str
        The command that gives the same results again.
    data_health : DataHealth, optional
        Sources, repairs and notes; the answer's own notes if not given.
    """
    replay = answer.replay
    key_figures = sections.key_figures(answer)
    why_missing = tables.dash_means(answer, "cannot be had from this history")
    return _template().render(
        title=replay.overlay.name or "overlay",
        history=history,
        first=date(replay.dates[0]),
        last=date(replay.dates[-1]),
        length=span(replay.dates[0], replay.dates[-1]),
        clauses=[(clause.title, FINDING_WORDS[clause.finding], typographic(clause.sentence)) for clause in verdict],
        key_figures=key_figures,
        dash=f"A dash ({DASH}): {why_missing}." if any(DASH in figures for figures in key_figures) else "",
        cautions=len(answer.warnings),
        sections=sections_of(answer, findings, inference, history, how_to_run, data_health),
        style=Markup(_style()),  # our own file
    )


def sections_of(
    answer: Answer,
    findings: Findings,
    inference: Inference | None,
    history: str,
    how_to_run: str,
    data_health: DataHealth | None,
) -> list[Section]:
    """In the order of the page; the verdict stands before them."""
    default = beside.counterparty_section(answer)
    return [
        sections.assumed(answer, history),
        sections.figures(answer),
        sections.growth(answer),
        sections.band(answer),
        sections.contest(answer, contest_of(answer, inference), inference),
        sections.episodes(answer, findings),
        sections.ledger(answer, findings),
        sections.attribution(answer),
        sections.prices(answer, findings),
        *([] if default is None else [default]),
        sections.luck(answer, findings, bootstrap_blocks(answer, inference)),
        sections.calendar(answer, findings),
        sections.periods(answer, findings),
        sections.rolling(answer, findings),
        sections.rolls(answer),
        sections.health(answer, data_health),
        sections.cautions(answer),
        sections.again(how_to_run),
    ]


@cache
def _template() -> Template:
    environment = Environment(autoescape=True, undefined=StrictUndefined, trim_blocks=True, lstrip_blocks=True)
    return environment.from_string(files(__package__).joinpath("report.html.j2").read_text(encoding="utf-8"))


@cache
def _style() -> str:
    text = files(__package__).joinpath("report.css").read_text(encoding="utf-8")
    return re.sub(r"/\*.*?\*/\s*", "", text, flags=re.DOTALL)
