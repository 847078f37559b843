"""Two states of a history against each other: rows added and gone, values revised."""

from __future__ import annotations

import datetime as dt
from dataclasses import dataclass

import numpy as np

from .cells import Dates, Floats
from .history import History


@dataclass(frozen=True, slots=True, kw_only=True)
class Days:
    """How many days, and the first and last of them; None where there are none."""

    count: int
    first: dt.date | None
    last: dt.date | None

    @classmethod
    def of(cls, days: Dates) -> Days:
        """Of increasing days."""
        if not len(days):
            return cls(count=0, first=None, last=None)
        return cls(count=len(days), first=days[0].item(), last=days[-1].item())

    def __str__(self) -> str:
        span = f"{self.first}" if self.count == 1 else f"{self.first} to {self.last}"
        return f"{self.count:,} ({span})" if self.count else "none"


@dataclass(frozen=True, slots=True, kw_only=True)
class Revised:
    """What became of a column's values on the days that both states have.

    Attributes
    ----------
    column : str
    changed : int
        Days on which both have a value, and not the same one, to the last bit.
    appeared, vanished : int
        Days on which only the new state, or only the former one, has a value.
    day : date or None
        Day of the largest change, the first of them if there are several; None if `changed` is 0.
    was, now : float or None
        The values on that day, as the frame has them.
    """

    column: str
    changed: int
    appeared: int
    vanished: int
    day: dt.date | None = None
    was: float | None = None
    now: float | None = None

    def __str__(self) -> str:
        said = []
        if self.was is not None and self.now is not None:
            was, now = f"{self.was:.10g}", f"{self.now:.10g}"
            if was == now:
                was, now = repr(self.was), repr(self.now)
            values, largest = ("1 value", "") if self.changed == 1 else (f"{self.changed:,} values", "the largest ")
            said.append(f"{values} revised, {largest}on {self.day} from {was} to {now}")
        if self.appeared:
            said.append(f"{self.appeared:,} where there was none")
        if self.vanished:
            said.append(f"{self.vanished:,} gone")
        return f"{self.column}: {'; '.join(said)}"


@dataclass(frozen=True, slots=True, kw_only=True)
class Changes:
    """What is different in a new state of a history.

    Attributes
    ----------
    added, gone : Days
        Rows that only the new state, or only the former one, has.
    columns_added, columns_gone : tuple of str
    revised : tuple of Revised
        Columns of both in which a value differs, in the order of the new state.
    other_facts : tuple of str
        What else differs: ``files``, ``repairs``, ``notes``, ``first usable day``.
    """

    added: Days
    gone: Days
    columns_added: tuple[str, ...]
    columns_gone: tuple[str, ...]
    revised: tuple[Revised, ...]
    other_facts: tuple[str, ...]

    @property
    def same_values(self) -> bool:
        """Whether rows, columns and values are the same."""
        return not (self.added.count or self.gone.count or self.columns_added or self.columns_gone or self.revised)

    def lines(self) -> list[str]:
        """In words, a line each; empty if nothing is different."""
        said = []
        if self.added.count or self.gone.count:
            said.append(f"rows: {self.added} added, {self.gone} gone")
        if self.columns_added:
            said.append(f"new: {', '.join(self.columns_added)}")
        if self.columns_gone:
            said.append(f"no longer there: {', '.join(self.columns_gone)}")
        said += [str(one) for one in self.revised]
        if self.same_values and self.other_facts:
            said.append(f"all values are the same; others are {', '.join(self.other_facts)}")
        return said


def changes_between(former: History, new: History) -> Changes:
    """What is different in the new state."""
    before, after = (history.frame.index.to_numpy().astype("datetime64[D]") for history in (former, new))
    _, rows_before, rows_after = np.intersect1d(before, after, assume_unique=True, return_indices=True)
    revised = []
    for column in new.frame.columns:
        if column in former.frame.columns:
            was = former.frame[column].to_numpy(dtype=np.float64)[rows_before]
            now = new.frame[column].to_numpy(dtype=np.float64)[rows_after]
            one = _revised(column, was, now, after[rows_after])
            if one.changed or one.appeared or one.vanished:
                revised.append(one)
    facts = {"files": "sources", "repairs": "repairs", "notes": "notes", "first usable day": "usable_from"}
    return Changes(
        added=Days.of(np.setdiff1d(after, before, assume_unique=True)),
        gone=Days.of(np.setdiff1d(before, after, assume_unique=True)),
        columns_added=tuple(name for name in new.frame.columns if name not in former.frame.columns),
        columns_gone=tuple(name for name in former.frame.columns if name not in new.frame.columns),
        revised=tuple(revised),
        other_facts=tuple(words for words, field in facts.items() if getattr(former, field) != getattr(new, field)),
    )


def _revised(column: str, was: Floats, now: Floats, days: Dates) -> Revised:
    known_before, known_now = np.isfinite(was), np.isfinite(now)
    changed = known_before & known_now & (was != now)
    largest = int(np.argmax(np.where(changed, np.abs(now - was), -1.0))) if changed.any() else None
    return Revised(
        column=column,
        changed=int(np.count_nonzero(changed)),
        appeared=int(np.count_nonzero(known_now & ~known_before)),
        vanished=int(np.count_nonzero(known_before & ~known_now)),
        day=None if largest is None else days[largest].item(),
        was=None if largest is None else float(was[largest]),
        now=None if largest is None else float(now[largest]),
    )
