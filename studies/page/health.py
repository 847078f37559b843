"""What the numbers were made from."""

from __future__ import annotations

import datetime as dt
from collections.abc import Sequence
from dataclasses import dataclass

from data_loaders import History
from data_loaders.history import SourceFile
from data_loaders.repairs import Repair

from .blocks import Block, Listing, Prose, Table
from .words import counted, number, typographic


@dataclass(frozen=True, slots=True, kw_only=True)
class DataHealth:
    """Sources, repairs and notes of a history, as its loader reports them."""

    sources: tuple[SourceFile, ...] = ()
    repairs: tuple[Repair, ...] = ()
    notes: tuple[str, ...] = ()
    usable_from: dt.date | None = None

    @classmethod
    def of(cls, history: History) -> DataHealth:
        """Of a stored or freshly loaded history."""
        return cls(
            sources=history.sources, repairs=history.repairs, notes=history.notes, usable_from=history.usable_from
        )


def health_blocks(health: DataHealth | None, notes: Sequence[str]) -> list[Block]:
    """Tables and lists of what is known about the data; ``notes`` where there is nothing else."""
    if health is None:
        said = [typographic(note) for note in notes]
        return [Listing(said)] if said else [Prose("Nothing is known about where the data came from.")]
    blocks: list[Block] = []
    if health.sources:
        blocks.append(_sources(health.sources))
    if health.usable_from is not None:
        blocks.append(Prose(f"Every series has a value from {health.usable_from} on."))
    if health.repairs:
        blocks.append(Prose("Changed before use, and nothing else:"))
        blocks.append(Listing([_repair(one) for one in health.repairs]))
    else:
        blocks.append(Prose("No value of the files was changed."))
    if health.notes:
        blocks.append(Prose("Worth knowing:"))
        blocks.append(Listing([typographic(note) for note in health.notes]))
    return blocks


def _sources(sources: Sequence[SourceFile]) -> Table:
    rows = [
        [
            source.kind, source.file, number(float(source.rows), 0), str(source.first), str(source.last),
            ", ".join(ours if ours == theirs else f"{ours} from '{theirs}'" for ours, theirs in source.columns),
            source.unit or "", source.sha256[:8],
        ]
        for source in sources
    ]  # fmt: skip
    return Table(
        caption="Files", head=("", "file", "rows", "first", "last", "columns taken", "unit", "sha256, start"),
        rows=rows, words=frozenset({0, 1, 3, 4, 5, 6, 7}), dense=True,
    )  # fmt: skip


def _repair(one: Repair) -> str:
    return f"{one.file}: {typographic(one.what)} ({counted(one.rows, 'row')})"
