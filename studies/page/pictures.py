"""Figures as inline SVG: colours that follow the page, ids that collide with nothing, no text as outlines."""

from __future__ import annotations

import io
import re
from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt
from markupsafe import Markup, escape
from matplotlib import rc_context
from matplotlib.figure import Figure

from backtest import charts

Array = npt.NDArray[np.float64]
Positions = npt.NDArray[np.intp]

#: Colour as drawn, and the variable of the style sheet it becomes.
COLOURS = {
    charts.OVERLAY: "--overlay",
    charts.HOLD: "--hold",
    charts.MIX: "--mix",
    charts.PUT: "--put",
    charts.CALL: "--call",
    charts.COST: "--cost",
}
#: The three paths that charts compare, and their colours.
COMPARED = {"overlay": charts.OVERLAY, "hold": charts.HOLD, "mix_same_beta": charts.MIX}
#: Drawn in this, and written as the page's own text colour.
INK = "#010203"
#: Drawn in this, and written as the page's background.
PAPER = "#fefdfc"
WIDTH_INCHES = 5.8
#: Charts are laid out with text of the size it has on a phone; wider pages show it smaller (``--chart-text``).
FONT_POINTS = 9.4
_LONG_NUMBER = re.compile(r"(\d+\.\d{2})\d+")
_FONT_SHORTHAND = re.compile(r"font: (?:(bold|[1-9]00) )?([\d.]+)px [^;\"]*")
#: Lines of the page have about this many points.
MOST_POINTS = 1500

STYLE: dict[Any, object] = {
    "svg.fonttype": "none",
    "text.parse_math": False,  # a name with dollar signs is a name
    "font.size": FONT_POINTS,
    "axes.titlesize": FONT_POINTS,
    "axes.labelsize": FONT_POINTS,
    "xtick.labelsize": FONT_POINTS,
    "ytick.labelsize": FONT_POINTS,
    "legend.fontsize": FONT_POINTS,
    "text.color": INK,
    "axes.edgecolor": INK,
    "axes.labelcolor": INK,
    "axes.titlecolor": INK,
    "xtick.color": INK,
    "ytick.color": INK,
    "figure.facecolor": "none",
    "savefig.facecolor": "none",
    "axes.facecolor": "none",
    "axes.linewidth": 0.6,
    "legend.handletextpad": 0.5,
    "xtick.major.width": 0.6,
    "ytick.major.width": 0.6,
    "legend.frameon": False,
    "path.simplify_threshold": 0.3,
}


@dataclass(frozen=True, slots=True, kw_only=True)
class Picture:
    """A chart for the page: its markup, the figure it was made of, a title, and one line to read it by."""

    svg: Markup
    figure: Figure
    title: str
    reading: str


@contextmanager
def page_style() -> Iterator[None]:
    """The style all charts of the page are drawn under."""
    with rc_context(STYLE):
        yield


def new_figure(height: float, *, width: float = WIDTH_INCHES) -> Figure:
    """An empty figure of the page's width, in inches; call under :func:`page_style`."""
    return Figure(figsize=(width, height), layout="constrained")


def picture_of(figure: Figure, name: str, title: str, reading: str) -> Picture:
    """A drawn figure with its words, its colours following the page."""
    svg = inline_svg(figure, name=name, alternative=f"{title}. {reading}", colours=COLOURS)
    return Picture(svg=svg, figure=figure, title=title, reading=reading)


def inline_svg(figure: Figure, *, name: str, alternative: str, colours: Mapping[str, str]) -> Markup:
    """Write a figure as an ``<svg>`` element for an HTML page.

    Parameters
    ----------
    figure : matplotlib Figure
    name : str
        Letters, digits and hyphens; put before every id, so that no two charts share one.
    alternative : str
        What the chart shows, in words; escaped here.
    colours : mapping
        Colour as drawn (``#rrggbb``) to the name of the CSS variable it becomes.
    """
    written = io.StringIO()
    with rc_context({"svg.hashsalt": name}):
        figure.savefig(written, format="svg", metadata=dict.fromkeys(("Date", "Creator", "Format", "Type")))
    text = written.getvalue()
    body = text[text.index(">", text.index("<svg")) + 1 : text.rindex("</svg>")]
    body = _lean(body, name)
    for drawn, variable in colours.items():
        body = re.sub(re.escape(drawn), f"var({variable})", body, flags=re.IGNORECASE)
    body = body.replace(INK, "currentColor").replace(PAPER, "var(--paper)")
    width, height = (72 * inches for inches in figure.get_size_inches())
    head = f'<svg role="img" aria-label="{escape(alternative)}" viewBox="0 0 {width:g} {height:g}">'
    # what matplotlib writes is escaped by matplotlib; the alternative text is escaped above
    return Markup(head + body + "</svg>")


def _lean(body: str, name: str) -> str:
    """Drop what a page does not need, shorten numbers, and make ids the chart's own."""
    body = re.sub(r"<metadata>.*?</metadata>", "", body, flags=re.DOTALL)
    body = re.sub(r"<defs>\s*<style.*?</style>\s*</defs>", "", body, count=1, flags=re.DOTALL)
    body = re.sub(r"<!--.*?-->", "", body, flags=re.DOTALL)
    used = set(re.findall(r"""(?:url\(#|href="#)([^)"]+)""", body))
    body = re.sub(r' id="([^"]*)"', lambda found: f' id="{name}-{found[1]}"' if found[1] in used else "", body)
    body = re.sub(r"""(url\(#|href="#)""", rf"\g<1>{name}-", body)
    body = re.sub(r">\s+<", ">\n<", body).replace("xlink:href=", "href=")
    return re.sub(r"<[^>]*>", lambda tag: _lean_tag(tag[0]), body)


def _lean_tag(tag: str) -> str:
    """One tag with short numbers; text takes the page's font, and a size that grows on small screens."""
    tag = _LONG_NUMBER.sub(r"\1", tag)
    if tag.startswith("<text"):
        tag = _FONT_SHORTHAND.sub(_font_words, tag)
        tag = re.sub(r"font-family: [^;]*; ?", "", tag)
        tag = re.sub(r"font-size: ([\d.]+)px", r"font-size: calc(\1px*var(--chart-text,1))", tag)
        tag = re.sub(r' transform="rotate\(-?0 [^)]*\)"', "", tag)
    return re.sub(r"\s+", " ", tag)


def _font_words(found: re.Match[str]) -> str:
    weight = f"font-weight: {found[1]}; " if found[1] else ""
    return f"{weight}font-size: {found[2]}px"


def decimated(*paths: Array, most: int = MOST_POINTS) -> Positions:
    """Positions to draw lines by: few enough, first and last kept, and every path's extremes in each stretch.

    Examples
    --------
    >>> path = np.zeros(10_000)
    >>> path[4321] = 1.0
    >>> chosen = decimated(path, most=100)
    >>> len(chosen) <= 100, 4321 in chosen, 0 in chosen, 9_999 in chosen
    (True, True, True, True)
    """
    days = len(paths[0])
    if days <= most:
        return np.arange(days)
    stretches = max(1, (most - 2) // (2 * len(paths)))
    edges = np.linspace(0, days, stretches + 1).astype(np.intp)
    chosen = {0, days - 1}
    for path in paths:
        for start, stop in zip(edges[:-1].tolist(), edges[1:].tolist(), strict=True):
            part = path[start:stop]
            if np.isfinite(part).any():
                chosen.add(start + int(np.nanargmin(part)))
                chosen.add(start + int(np.nanargmax(part)))
            else:
                chosen.add(start)
    return np.array(sorted(chosen), dtype=np.intp)
