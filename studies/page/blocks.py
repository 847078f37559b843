"""What a section of the page is made of; the template knows how to show each kind."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field
from typing import TypeAlias

from .pictures import Picture
from .words import DASH


@dataclass(frozen=True, slots=True)
class Cell:
    """One cell; ``tone`` is a shade by size and sign (``up1`` to ``up3``, ``down1`` to ``down3``), or nothing."""

    text: str
    tone: str = ""


@dataclass(frozen=True, slots=True, kw_only=True)
class Table:
    """A table: the first cell of a row names it, the others are figures.

    ``strong`` are the rows printed bold, by position. ``words`` are the columns that hold text rather than
    figures. A note on the dash is added where one occurs.
    """

    caption: str
    head: Sequence[str]
    rows: Sequence[Sequence[str | Cell]]
    notes: Sequence[str] = ()
    strong: frozenset[int] = frozenset()
    words: frozenset[int] = frozenset({0})
    dense: bool = False
    dash_means: str = "cannot be had from this history"

    kind: str = field(default="table", init=False)

    @property
    def all_notes(self) -> list[str]:
        """The notes, and what a dash means if there is one."""
        cells = (cell.text if isinstance(cell, Cell) else cell for row in self.rows for cell in row)
        explained = [f"A dash ({DASH}): {self.dash_means}."] if any(text == DASH for text in cells) else []
        return [*self.notes, *explained]


@dataclass(frozen=True, slots=True)
class Prose:
    """One paragraph; ``strong`` for a sentence that carries a section."""

    text: str
    strong: bool = False
    kind: str = field(default="prose", init=False)


@dataclass(frozen=True, slots=True)
class Listing:
    """A list of sentences."""

    items: Sequence[str]
    kind: str = field(default="listing", init=False)


@dataclass(frozen=True, slots=True)
class Definitions:
    """Terms and what they are here."""

    items: Sequence[tuple[str, str]]
    kind: str = field(default="definitions", init=False)


@dataclass(frozen=True, slots=True)
class Command:
    """A line to type."""

    text: str
    kind: str = field(default="command", init=False)


@dataclass(frozen=True, slots=True)
class Shown:
    """A picture in its place."""

    picture: Picture
    kind: str = field(default="picture", init=False)


@dataclass(frozen=True, slots=True, kw_only=True)
class Fold:
    """Blocks under a line that opens them; in print they are all open, unless ``printed`` is false."""

    summary: str
    blocks: Sequence[Block]
    printed: bool = True
    kind: str = field(default="fold", init=False)


Block: TypeAlias = "Table | Prose | Listing | Definitions | Command | Shown | Fold"


@dataclass(frozen=True, slots=True, kw_only=True)
class Section:
    """One section; ``anchor`` is its id, ``question`` the line under its title."""

    anchor: str
    title: str
    blocks: Sequence[Block]
    question: str = ""
