"""What a section of a study's page is made of, beside the blocks of every report."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field
from typing import TypeAlias

from .blocks import Block


@dataclass(frozen=True, slots=True)
class Heading:
    """A title inside a section."""

    anchor: str
    text: str
    question: str = ""
    kind: str = field(default="heading", init=False)


@dataclass(frozen=True, slots=True)
class SortCell:
    """A cell with what it is sorted by, empty for none."""

    text: str
    key: str


@dataclass(frozen=True, slots=True, kw_only=True)
class Sortable:
    """A table that can be sorted by its heads; ``sorted_by`` is the column it comes sorted by, from the highest down.

    ``words`` are the columns whose cells hold text, ``marked`` the rows of the reader's own overlay.
    """

    caption: str
    head: Sequence[str]
    rows: Sequence[Sequence[SortCell]]
    sorted_by: int | None
    words: frozenset[int]
    marked: frozenset[int]
    notes: Sequence[str] = ()
    kind: str = field(default="sortable", init=False)


@dataclass(frozen=True, slots=True)
class Explorer:
    """A map that the reader turns; its data are in the page under ``key``."""

    key: str
    kind: str = field(default="explorer", init=False)


StudyBlock: TypeAlias = "Block | Heading | Sortable | Explorer"


@dataclass(frozen=True, slots=True, kw_only=True)
class Part:
    """One section of the page: as :class:`~studies.page.blocks.Section`, with the blocks of a study."""

    anchor: str
    title: str
    blocks: Sequence[StudyBlock]
    question: str = ""
