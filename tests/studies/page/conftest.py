"""Reports with their real pages, and a small reader of HTML that knows nothing of how they were made."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, field
from html.parser import HTMLParser

import pytest

from backtest import Leg, Market, Overlay, PercentOfSpot, Volatility
from data_loaders import History
from studies.page.build import build_report
from studies.page.health import DataHealth
from studies.replay_history import answer
from studies.report import Report, make_report

BAND = (
    Leg(position="long", right="put", roll="quarter", strike=PercentOfSpot(95)),
    Leg(position="short", right="call", roll="month", strike=PercentOfSpot(110)),
)
#: Eight years of the demo market with six falls.
FIRST, LAST = "2009", "2016"
NAME = "quarterly 95 put, monthly 110 call"
HISTORY = "Torvane Coast 40"
COMMAND = "rollband replay demo --overlay overlay.toml --out results"

#: Elements of HTML that have no end tag.
VOID = frozenset({"br", "col", "hr", "img", "input", "link", "meta", "source", "wbr"})


@dataclass
class Node:
    """An element: its tag, attributes, and what is inside."""

    tag: str
    attributes: dict[str, str] = field(default_factory=dict)
    inside: list[Node | str] = field(default_factory=list)

    def walk(self) -> Iterator[Node]:
        """This element and all under it, in the order of the page."""
        yield self
        for one in self.inside:
            if isinstance(one, Node):
                yield from one.walk()

    def all(self, *tags: str) -> list[Node]:
        """All elements of these tags under this one."""
        return [node for node in self.walk() if node.tag in tags and node is not self]

    def one(self, tag: str) -> Node:
        """The only element of a tag under this one."""
        (found,) = self.all(tag)
        return found

    def having(self, name: str, value: str) -> Node:
        """The only element with this attribute."""
        (found,) = (node for node in self.walk() if node.attributes.get(name) == value)
        return found

    @property
    def texts(self) -> list[str]:
        """All pieces of text under this element that are shown, style sheets left out."""
        if self.tag in ("style", "title"):
            return []
        return [text for one in self.inside for text in ([one] if isinstance(one, str) else one.texts)]

    @property
    def text(self) -> str:
        """The text under this element as it is."""
        return "".join(self.texts)

    @property
    def words(self) -> str:
        """The text with every run of white space as one space."""
        return " ".join(" ".join(self.texts).split())


class _Reader(HTMLParser):
    def __init__(self) -> None:
        super().__init__(convert_charrefs=True)
        self.root = Node("document")
        self._open = [self.root]

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        names = [name for name, _ in attrs]
        assert len(names) == len(set(names)), f"an attribute twice in <{tag}> at {self.getpos()}"
        node = Node(tag, {name: value or "" for name, value in attrs})
        self._open[-1].inside.append(node)
        if tag not in VOID:
            self._open.append(node)

    def handle_startendtag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.handle_starttag(tag, attrs)
        if tag not in VOID:
            self._open.pop()

    def handle_endtag(self, tag: str) -> None:
        assert self._open[-1].tag == tag, f"</{tag}> at {self.getpos()} closes <{self._open[-1].tag}>"
        self._open.pop()

    def handle_data(self, data: str) -> None:
        self._open[-1].inside.append(data)

    def close(self) -> None:
        super().close()
        assert self._open == [self.root], f"<{self._open[-1].tag}> is never closed"


def read_page(text: str) -> Node:
    """The page as a tree; fails where a tag is closed out of turn or never."""
    reader = _Reader()
    reader.feed(text)
    reader.close()
    return reader.root


def table_of(where: Node, caption: str) -> list[list[str]]:
    """The cells of the table whose caption begins so, its head first."""
    (region,) = (n for n in where.walk() if n.tag == "div" and n.attributes.get("aria-label", "").startswith(caption))
    return [[cell.words for cell in row.all("th", "td")] for row in region.all("tr")]


@pytest.fixture(autouse=True)
def _no_pictures() -> None:
    """In this package pictures, tables and page are the real ones."""


@pytest.fixture(scope="session")
def report(demo_history: History) -> Report:
    """The demo's band on eight years of its market."""
    market = Market.from_frame(demo_history.frame.loc[FIRST:LAST])
    found = answer(market, Overlay(legs=BAND, name=NAME), volatility=Volatility(quote="variance swap"))
    return make_report(found, resamples=100)


@pytest.fixture(scope="session")
def page(report: Report, demo_history: History) -> str:
    """Its page, with everything that a page can have."""
    return build_report(
        report.answer,
        report.findings,
        report.inference,
        report.clauses,
        history=HISTORY,
        how_to_run=COMMAND,
        data_health=DataHealth.of(demo_history),
    )


@pytest.fixture(scope="session")
def tree(page: str) -> Node:
    """The page read back."""
    return read_page(page)
