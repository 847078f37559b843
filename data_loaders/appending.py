"""New days put after a stored history, where the days in common agree."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, replace

import numpy as np
import pandas as pd

from .alignment import is_carried
from .cells import Dates, Floats, Mask
from .errors import AppendRefused
from .history import History, SourceFile
from .repairs import Repair
from .revisions import Days
from .schema import Kind
from .words import counted

#: Two values of a day in common agree if they are no further apart than this part of the larger one: vendors round.
TOLERANCE = 1e-6
#: Notes of the files that were appended last begin so.
NOTE = "Appended: "


@dataclass(frozen=True, slots=True, kw_only=True)
class Appended:
    """A history with new days after its own.

    Attributes
    ----------
    history : History
        Its rows of before keep their values to the last bit, but for what ``replaced`` says.
    added : Days
    in_common : int
        Days that both had, and on which they agree.
    replaced : tuple of str
        Values of the last days that had been carried from a day before and now have their own, in words.
    left_out : tuple of str
        Columns of the files that the history does not have.
    """

    history: History
    added: Days
    in_common: int
    replaced: tuple[str, ...]
    left_out: tuple[str, ...]

    @property
    def nothing_new(self) -> bool:
        """Whether the history is what it was."""
        return self.added.count == 0 and not self.replaced


def appended(former: History, new: History, *, name: str) -> Appended:
    """Put the days of `new` that follow the last day of `former` after it.

    On the days in common the values of `former` stay. Its vols and rates of days after the end of their file had been
    carried there from the days before: there the new ones are taken.

    Parameters
    ----------
    former : History
    new : History
        From files that hold the new days, and as many of those before as one likes.
    name : str
        Of the history, for messages.

    Raises
    ------
    AppendRefused
        If the two do not agree on the days in common within :data:`TOLERANCE` (every difference is named), a new day
        does not follow, a column is missing, or a new day has no vol or rate.
    """
    columns = list(former.frame.columns)
    missing = [column for column in columns if column not in new.frame.columns]
    if missing:
        raise AppendRefused(
            f"{name} holds {', '.join(missing)}, and the files do not: {_wanted(missing)}; nothing was written"
        )
    before, fresh = _days(former), _days(new)
    last = before[-1]
    refused = list(_days_apart(before, fresh))
    _, old_rows, new_rows = np.intersect1d(before, fresh, assume_unique=True, return_indices=True)
    frame = former.frame.copy()
    replaced = []
    for column in columns:
        was, now = (_values(history, column)[rows] for history, rows in ((former, old_rows), (new, new_rows)))
        known = np.isfinite(_values(new, column))
        taken = _was_carried(former, column, before[old_rows]) & np.isfinite(now) & ~_agree(was, now)
        # a series of the files may begin after their first day
        not_given = np.cumsum(known)[new_rows] == 0 if is_carried(column) else np.zeros(len(was), dtype=np.bool_)
        wrong = ~_agree(was, now) & ~taken & ~not_given
        refused += _differences(column, before[old_rows][wrong], was[wrong], now[wrong])
        if taken.any():
            values = _values(former, column).copy()
            values[old_rows[taken]] = now[taken]
            frame[column] = values
            replaced += [
                f"{column} on {day}: carried there as {old:.10g}, {own:.10g} of its own"
                for day, old, own in zip(before[old_rows][taken], was[taken], now[taken])
            ]
    if refused:
        raise AppendRefused(
            f"the files do not agree with what is stored as {name}; nothing was written. If the files are right, load "
            f"the whole history again without --append.{_factor(former, new, old_rows, new_rows)}",
            differences=tuple(refused),
        )
    following = fresh > last
    _check_whole(new, following, columns)
    added = Days.of(fresh[following])
    result = Appended(
        history=former, added=added, in_common=len(old_rows), replaced=tuple(replaced),
        left_out=tuple(column for column in new.frame.columns if column not in columns),
    )  # fmt: skip
    if result.nothing_new:
        return result
    rows = new.frame.loc[following, columns]
    frame = pd.concat([frame, rows]) if len(rows) else frame
    return replace(result, history=_joined(former, new, frame, added))


def _joined(former: History, new: History, frame: pd.DataFrame, added: Days) -> History:
    """The whole: what is told of the first load stays, and of what was appended only the last files are told."""
    of_before = [number for number, repair in enumerate(former.repairs) if repair.kind == "appended"]
    base = former.repairs[: of_before[0]] if of_before else former.repairs
    rows = added.count + (former.repairs[of_before[0]].rows if of_before else 0)
    frame.index.name = "date"
    what = "vols or rates of the last days came later"
    if rows:
        what = f"{counted(rows, 'day')} from {frame.index[len(frame) - rows].date()} on came later and were appended"
    later = Repair(file=new.sources[0].file, kind="appended", rows=rows, what=what)
    seen: dict[Kind, SourceFile] = {}
    for source in former.sources:
        seen.setdefault(source.kind, source)
    return replace(
        former,
        frame=frame,
        sources=(*seen.values(), *new.sources),
        repairs=(*base, later, *new.repairs),
        notes=(
            *(note for note in former.notes if not note.startswith(NOTE)),
            *(f"{NOTE}{note}" for note in new.notes),
        ),
    )


def _days(history: History) -> Dates:
    return history.frame.index.to_numpy().astype("datetime64[D]")


def _values(history: History, column: str) -> Floats:
    return history.frame[column].to_numpy(dtype=np.float64)


def _agree(was: Floats, now: Floats) -> Mask:
    larger = np.maximum(np.abs(was), np.abs(now))
    return np.asarray((np.abs(was - now) <= TOLERANCE * larger) | (np.isnan(was) & np.isnan(now)))


def _was_carried(former: History, column: str, days: Dates) -> Mask:
    """Days after the last one of the file that the column came from last."""
    if not is_carried(column):
        return np.zeros(len(days), dtype=np.bool_)
    kind = "rates" if column == "rate" else "vol"
    ends = [source.last for source in former.sources if source.kind == kind]
    # of files that were appended, the last stands last
    return np.asarray(days > np.datetime64(ends[-1], "D")) if ends else np.zeros(len(days), dtype=np.bool_)


def _days_apart(before: Dates, fresh: Dates) -> Iterator[tuple[str, str]]:
    """Days that only one of the two has, as far as both reach."""
    for day in np.setdiff1d(fresh[fresh <= before[-1]], before, assume_unique=True):
        yield "date", f"{day} is in the files and not stored, and does not follow the last stored day, {before[-1]}"
    inside = (before >= fresh[0]) & (before <= fresh[-1])
    for day in np.setdiff1d(before[inside], fresh, assume_unique=True):
        yield "date", f"{day} is stored and not in the files, which run from {fresh[0]} to {fresh[-1]}"


def _differences(column: str, days: Dates, was: Floats, now: Floats) -> Iterator[tuple[str, str]]:
    for day, old, new in zip(days, was, now):
        yield column, f"{day} {column}: stored {_shown(old)}, in the files {_shown(new)}"


def _shown(value: float) -> str:
    return "nothing" if np.isnan(value) else f"{value:.10g}"


def _factor(former: History, new: History, old_rows: np.ndarray, new_rows: np.ndarray) -> str:
    """What to say where all closes differ by one factor."""
    ratio = _values(new, "close")[new_rows] / _values(former, "close")[old_rows]
    if len(ratio) < 2 or abs(ratio[0] - 1.0) <= TOLERANCE or not np.allclose(ratio, ratio[0], rtol=TOLERANCE, atol=0.0):
        return ""
    return f" Every close is {ratio[0]:.6g} times the one stored: the prices have been adjusted, as after a split."


def _check_whole(new: History, following: Mask, columns: list[str]) -> None:
    """Raise AppendRefused if a new day lacks a vol or a rate."""
    for column in columns:
        bare = following & ~np.isfinite(_values(new, column)) if is_carried(column) else following[:0]
        if bare.any():
            days = _days(new)[bare]
            raise AppendRefused(
                f"{column} has no value on {days[0]}"
                + (f" and {counted(len(days) - 1, 'more new day')}" if len(days) > 1 else "")
                + f": {_wanted([column])} that begins on that day or before; nothing was written"
            )


def _wanted(columns: list[str]) -> str:
    """Which options bring the columns."""
    options = {"dividend": "--dividends", "rate": "--rates"}
    wanted = dict.fromkeys(options.get(name, "--vol" if is_carried(name) else "--prices") for name in columns)
    return f"give a file with {'it' if len(columns) == 1 else 'them'} ({', '.join(wanted)})"
