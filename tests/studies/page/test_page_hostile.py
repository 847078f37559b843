"""Names, commands and file names that would break a page if they were taken for markup.

Rung: behaviour. The page with a hostile text has the same elements and attributes as with a harmless one, and says
the text letter for letter.
"""

from __future__ import annotations

import datetime as dt
from collections import Counter
from collections.abc import Callable

import pytest
from markupsafe import Markup

from backtest import Market, Overlay, Volatility
from data_loaders import History
from data_loaders.history import SourceFile
from data_loaders.repairs import Repair
from studies.page.build import build_report
from studies.page.health import DataHealth
from studies.replay_history import Answer, answer
from studies.report import Report
from tests.studies.page.conftest import BAND, FIRST, LAST, Node, read_page

HARMLESS = "harmless"
HOSTILE = {
    "script": "<script>alert(1)</script>",
    "closes the page": "</bdi></h1></title></style></section></body></html><!--",
    "image": "<img src=x onerror=alert(1)>",
    "quotes": '"\' onmouseover="alert(1)" x=\'',
    "entities": "&lt;b&gt; &amp; &#60;i&#62; &nbsp;",
    "template": "{{7*7}} {% raw %} {# gone #} ${7*7}",
    "dollars": r"$\frac{1}{2}$ \alpha_1^2 100$",
    "long": "long" * 75,
    "long and in words": "a long name " * 25,
    "right to left": "הגנה רבעונית \u202eabc\u202c حماية",
    "emoji": "🙂👩‍👩‍👧 é 漢字 ﷽",
    "lines": "first\nsecond\tthird",
    "formula": "=cmd|' /C calc'!A0",
    "spaces": "  two  spaces  ",
    "comment": "--> <!-- ]]> <![CDATA[",
}

Build = Callable[[str], str]


@pytest.fixture(scope="module")
def renamed(demo_history: History) -> Callable[[str], Answer]:
    """The answer of the shared report under another name of its overlay."""
    market = Market.from_frame(demo_history.frame.loc[FIRST:LAST])
    quoted = Volatility(quote="variance swap")
    return lambda name: answer(market, Overlay(legs=BAND, name=name), volatility=quoted, history_notes=(name,))


@pytest.fixture(scope="module")
def build(report: Report, renamed: Callable[[str], Answer]) -> Build:
    """The page with a text everywhere that a user can put one."""

    def made(text: str) -> str:
        day = dt.date(2009, 1, 2)
        source = SourceFile(
            kind="prices",
            file=text,
            sha256="0" * 64,
            rows=2,
            first=day,
            last=day,
            columns=(("close", text),),
            unit=text,
        )
        health = DataHealth(
            sources=(source,), repairs=(Repair(file=text, kind="sorted", rows=1, what=text),), notes=(text,)
        )
        return build_report(
            renamed(text),
            report.findings,
            report.inference,
            report.clauses,
            history=text,
            how_to_run=text,
            data_health=health,
        )

    return made


def _undrawn(figure: object, *, name: str, alternative: str, **rest: object) -> Markup:
    return Markup('<svg role="img" aria-label="{}"></svg>').format(alternative)


@pytest.fixture(scope="module")
def build_undrawn(build: Build) -> Build:
    """The same without drawing, which takes most of the time; none of these texts goes into a picture."""

    def made(text: str) -> str:
        with pytest.MonkeyPatch.context() as patch:
            patch.setattr("studies.page.pictures.inline_svg", _undrawn)
            return build(text)

    return made


@pytest.fixture(scope="module")
def harmless(build_undrawn: Build) -> str:
    """The page with a plain word in all these places."""
    return build_undrawn(HARMLESS)


def shape(root: Node) -> Counter[tuple[str, ...]]:
    """How often each element comes with each set of attributes."""
    return Counter((node.tag, *sorted(node.attributes)) for node in root.walk())


@pytest.mark.parametrize("text", list(HOSTILE.values()), ids=list(HOSTILE))
def test_the_text_is_said_and_nothing_else_changes(build_undrawn: Build, harmless: str, text: str) -> None:
    root, plain = read_page(build_undrawn(text)), read_page(harmless)
    assert shape(root) == shape(plain)
    # letter for letter, wherever the harmless one stands
    assert root.one("h1").text == text
    assert root.one("code").text == text
    assert root.all("title")[0].inside == [f"{text}, {text}"]
    assert root.having("class", "span").one("bdi").text == text
    data = root.having("id", "assumed").all("dd")[0]
    assert data.text.startswith(f"{text}: 2009-03-20 to ")
    assert len(data.all("bdi")) == 1
    (files,) = root.having("id", "health").all("table")
    cells = [cell.text for cell in files.one("tbody").all("td")]
    assert cells[0] == text
    assert cells[4] == f"close from '{text}'"
    assert cells[5] == text
    assert sum(one.text.count(text) for one in root.having("id", "health").all("li")) >= 3  # repair twice, note once
    # every other word of the page is as it was
    assert root.words.count(HARMLESS) == 0
    kept = " ".join(plain.words.replace(HARMLESS, " ").split())
    assert " ".join(_without(root, text).split()) == kept


def _without(root: Node, text: str) -> str:
    """The words of the page where the text is cut out of every piece that holds it."""
    return " ".join(piece.replace(text, " ") for piece in root.texts)


def test_a_template_in_a_name_is_not_worked_out(build_undrawn: Build, harmless: str) -> None:
    written = build_undrawn("{{7*7}}")
    assert written.count("{{7*7}}") == harmless.count(HARMLESS)


def test_without_a_name_it_is_an_overlay(build_undrawn: Build) -> None:
    assert read_page(build_undrawn("")).one("h1").words == "overlay"


def test_the_drawn_page_with_all_of_them_at_once(build: Build, page: str) -> None:
    # with its pictures: they are the same bytes as those of the page with a plain name
    text = " ".join(HOSTILE.values())
    written = build(text)
    root = read_page(written)
    assert root.one("h1").text == text
    plain = read_page(page)
    assert [n.attributes for one in root.all("svg") for n in one.walk()] == [
        n.attributes for one in plain.all("svg") for n in one.walk()
    ]
    assert root.all("script", "img", "iframe") == []
    assert written.encode("utf-8").decode("utf-8") == written


def test_a_name_that_was_not_escaped_would_be_found(page: str) -> None:
    # shows that comparing shapes can fail
    broken = page.replace("<h1><bdi>", '<h1><bdi><img alt="">', 1)
    assert shape(read_page(broken)) != shape(read_page(page))
