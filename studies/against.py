"""A study compared with the results folder of another: the same overlays, what changed in their figures, and the best.

Overlays are matched by history and by the settings that both studies vary. Changes are figures here less figures there.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt
import pandas as pd
import pyarrow as pa
import pyarrow.parquet as pq

from .batches import FIGURES, SPAN
from .differences import NoTable, different_keys, plain_text, read_table, rows_of, table_types, unequal
from .errors import ResultsError, StudyFileError
from .expansion import points
from .results import MANIFEST, SCHEMA
from .study import Study, study_from_table, study_to_table
from .study_answer import StudyAnswer, rank_correlation, setting_word
from .study_folder import OVERLAYS

Positions = npt.NDArray[np.intp]

#: The figure by which the best is chosen.
BEST_BY = "information_ratio"


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Other:
    """What is needed of another study: what it asked, its inputs, and the figures of its overlays."""

    folder: Path
    study: Study
    inputs: dict[str, str]
    overlays: pd.DataFrame


def read_other(folder: Path) -> Other:
    """The results folder of a study, to be compared with.

    Raises
    ------
    ResultsError
        If it is none, or is damaged.
    """
    try:
        manifest = read_table(folder / MANIFEST)
    except ResultsError as error:
        raise _cannot(folder, f"its {MANIFEST} {error}") from None
    settings, inputs = manifest.get("settings"), manifest.get("inputs")
    if manifest.get("kind") != "study" or not isinstance(settings, dict) or not isinstance(settings.get("study"), dict):
        raise _cannot(folder, "it is not the results folder of a study")
    try:
        study = study_from_table(settings["study"])
    except StudyFileError as error:
        raise _cannot(folder, f"the study in its {MANIFEST} cannot be used: {plain_text(str(error), 300)}") from None
    entries = [entry for entry in inputs if isinstance(entry, dict)] if isinstance(inputs, list) else []
    sums = {str(entry.get("history")): plain_text(str(entry.get("sha256"))) for entry in entries}
    return Other(folder=folder, study=study, inputs=sums, overlays=_overlays(folder, study))


def _overlays(folder: Path, study: Study) -> pd.DataFrame:
    rows = len(points(study)) * len(study.histories)
    try:
        there = rows_of(folder / OVERLAYS)
        if there != rows:
            raise NoTable(f"has {there:,} rows, and the study in its {MANIFEST} has {rows:,}")
        kinds = table_types(folder / OVERLAYS)
        numbers = ("double", "int64")
        wanted: dict[str, Sequence[str]] = {"history": ("text",)}
        wanted |= {axis.name: numbers if axis.is_numeric else ("text",) for axis in study.axes}
        wanted |= dict.fromkeys(SPAN, ("date",)) | {BEST_BY: ("double",)}
        wanted |= {name: ("double",) for name in FIGURES if name in kinds}
        for name, takes in wanted.items():
            if kinds.get(name) not in takes:
                raise NoTable(f"has no column '{name}' of {takes[0].replace('double', 'number')}s")
        with pq.ParquetFile(folder / OVERLAYS) as file:
            return file.read(columns=list(wanted)).to_pandas()
    except (NoTable, OSError, ValueError, pa.ArrowException) as error:
        problem = str(error) if isinstance(error, NoTable) else f"cannot be read: {plain_text(str(error))}"
        raise _cannot(folder, f"its {OVERLAYS} {problem}") from None


def _cannot(folder: Path, problem: str) -> ResultsError:
    return ResultsError(f"--against {folder} cannot be compared with: {problem}")


def compare(found: StudyAnswer, other: Other) -> dict[str, Any]:
    """The comparison as plain values; decimals, not percents."""
    here, there = found.plan.study, other.study
    axes = [axis.name for axis in here.axes]
    also = [axis.name for axis in there.axes]
    both = [name for name in axes if name in also]
    mine, theirs = _keys(found.overlays, other.overlays, both)
    reason = _not_unique(found.overlays, mine, "here", [name for name in axes if name not in both])
    reason = reason or _not_unique(other.overlays, theirs, "there", [name for name in also if name not in both])
    rows: dict[str, Any] = {"both": None, "only_here": None, "only_there": None, "not_matched": reason}
    row_here, row_there = np.empty(0, dtype=np.intp), np.empty(0, dtype=np.intp)
    if reason is None:
        matched = theirs.get_indexer(mine)
        row_here, row_there = np.flatnonzero(matched >= 0), matched[matched >= 0]
        common = len(row_here)
        rows |= {"both": common, "only_here": len(mine) - common, "only_there": len(theirs) - common}
    words = _Words(found.overlays, axes)
    return {
        "schema": SCHEMA,
        "against": str(other.folder),
        "question": {"here": here.question, "there": there.question},
        "comparison": {"here": here.comparison, "there": there.comparison},
        "inputs": _inputs(found, other),
        "settings": list(_settings(here, there)),
        "axes": {
            "both": both,
            "only_here": [name for name in axes if name not in both],
            "only_there": [name for name in also if name not in both],
        },
        "rows": rows,
        "other_days": _other_days(found.overlays, other.overlays, row_here, row_there),
        "figures": {
            name: _figure(found.overlays[name], other.overlays[name], row_here, row_there, words)
            for name in FIGURES
            if name in other.overlays
        },
        "best": _best(found, other, both, (mine, theirs), (row_here, row_there)),
        "rank_correlation": _rank_correlation(found.overlays, other.overlays, row_here, row_there),
    }


def _keys(here: pd.DataFrame, there: pd.DataFrame, both: list[str]) -> tuple[pd.MultiIndex, pd.MultiIndex]:
    """History and the settings in common, such that equal settings are equal."""
    columns: list[tuple[Any, Any]] = [(here["history"].astype(object), there["history"].astype(object))]
    for name in both:
        one, other = here[name], there[name]
        if one.dtype.kind in "iuf" and other.dtype.kind in "iuf":
            columns.append((one.astype(np.float64), other.astype(np.float64)))
        else:
            columns.append((_as_words(one), _as_words(other)))
    names = ["history", *both]
    mine, theirs = ([pair[side].to_numpy() for pair in columns] for side in (0, 1))
    return pd.MultiIndex.from_arrays(mine, names=names), pd.MultiIndex.from_arrays(theirs, names=names)


def _as_words(column: pd.Series) -> pd.Series:
    return pd.Series([setting_word(value) for value in column.tolist()], dtype=object)


def _not_unique(frame: pd.DataFrame, keys: pd.MultiIndex, where: str, only: list[str]) -> str | None:
    """Why rows cannot be matched one to one."""
    twice = keys.duplicated(keep=False)
    if not twice.any():
        return None
    codes, distinct = keys.factorize()
    first = codes[int(np.argmax(twice))]
    history, *values = distinct[first]
    settings = [f"{name} {setting_word(value)}" for name, value in zip(keys.names[1:], values)]
    words = plain_text(", ".join([str(history), *settings]), 200)
    by = f"by what only they vary ({', '.join(only)})" if only else "by nothing"
    return (
        f"rows cannot be matched one to one: {int((codes == first).sum()):,} overlays {where} are {words} and are told "
        f"apart {by}"
    )


class _Words:
    """The settings of rows in words, with the history where there are several."""

    def __init__(self, frame: pd.DataFrame, axes: list[str]) -> None:
        self.frame, self.axes = frame, axes
        self.several = len(frame["history"].unique()) > 1

    def of(self, row: int) -> str:
        one = self.frame.iloc[row]
        history = [str(one["history"])] if self.several else []
        return plain_text(", ".join([*history, *(f"{name} {setting_word(one[name])}" for name in self.axes)]), 200)


def _inputs(found: StudyAnswer, other: Other) -> list[dict[str, Any]]:
    """Histories of which the two studies saw different files, or only one saw any."""
    here = {entry["history"]: entry["sha256"] for entry in found.plan.inputs}
    names = [*here, *(name for name in other.study.histories if name not in here)]
    pairs = [(name, here.get(name), other.inputs.get(name)) for name in names]
    return [{"history": name, "here": one, "there": two} for name, one, two in pairs if one != two]


def _settings(here: Study, there: Study) -> Iterator[dict[str, Any]]:
    """What differs in the overlay from which all start, apart from what both studies vary."""
    varied = [{field for axis in study.axes for field in axis.fields} for study in (here, there)]
    one, other = (study_to_table(study)["overlay"] | {"name": None} for study in (here, there))
    if len(one["leg"]) != len(other["leg"]):
        yield {"key": "legs", "here": len(one.pop("leg")), "there": len(other.pop("leg"))}
    for key, _, then, now in different_keys(other, one):
        if not all(any(_touches(field, key) for field in fields) for fields in varied):
            yield {"key": key, "here": now, "there": then}


def _touches(field: str, key: str) -> bool:
    return f"{key}.".startswith(f"{field}.") or f"{field}.".startswith(f"{key}.")


def _other_days(here: pd.DataFrame, there: pd.DataFrame, row_here: Positions, row_there: Positions) -> int:
    """Rows in both that do not begin and end on the same days."""
    differs = np.zeros(len(row_here), dtype=np.bool_)
    for name in SPAN:
        differs |= _days(here[name])[row_here] != _days(there[name])[row_there]
    return int(differs.sum())


def _days(column: pd.Series) -> npt.NDArray[np.datetime64]:
    return column.to_numpy().astype("datetime64[D]")


def _figure(
    here: pd.Series, there: pd.Series, row_here: Positions, row_there: Positions, words: _Words
) -> dict[str, Any]:
    one, other = (column.to_numpy(dtype=np.float64)[rows] for column, rows in ((here, row_here), (there, row_there)))
    made: dict[str, Any] = {"changed": int(unequal(one, other).sum()), "median_change": None, "largest_change": None}
    known = np.flatnonzero(np.isfinite(one) & np.isfinite(other))
    if not known.size:
        return made
    change = one[known] - other[known]
    made["median_change"] = float(np.median(change))
    if change.any():
        at = int(np.argmax(np.abs(change)))
        row = int(row_here[known[at]])
        made["largest_change"] = {
            "change": float(change[at]),
            "here": float(one[known[at]]),
            "there": float(other[known[at]]),
            "number": row,
            "settings": words.of(row),
        }
    return made


def _best(
    found: StudyAnswer,
    other: Other,
    both: list[str],
    keys: tuple[pd.MultiIndex, pd.MultiIndex],
    rows: tuple[Positions, Positions],
) -> list[dict[str, Any]]:
    """The best of each history, and of each window where both studies vary it."""
    windows = [
        place
        for place, name in enumerate(both, start=1)
        if any(axis.name == name and axis.fields[0].startswith("window") for axis in found.plan.study.axes)
    ]
    mine, theirs = (one.droplevel([n for n in range(1, one.nlevels) if n not in windows]) for one in keys)
    codes, _ = mine.factorize()
    distinct = mine.unique()
    codes_there = distinct.get_indexer(theirs)
    sides = {
        "here": (found.overlays, _Words(found.overlays, [axis.name for axis in found.plan.study.axes]), codes),
        "there": (other.overlays, _Words(other.overlays, [axis.name for axis in other.study.axes]), codes_there),
    }
    made = []
    matched = {"here": set(rows[0].tolist()), "there": set(rows[1].tolist())}
    for code, key in enumerate(distinct):
        history, *window = key if isinstance(key, tuple) else (key,)
        entry: dict[str, Any] = {"history": str(history), "window": ", ".join(map(setting_word, window)) or None}
        best = []
        for side, (frame, words, of) in sides.items():
            row = _best_row(frame, of == code)
            best.append(row)
            if row is not None:
                value = float(frame[BEST_BY].iloc[row])
                also = {"number": row, "settings": words.of(row), BEST_BY: value, "in_both": row in matched[side]}
            entry[side] = None if row is None else also
        one, two = best
        entry["same"] = None if one is None or two is None else bool(keys[0][one] == keys[1][two])
        inside = codes[rows[0]] == code
        entry["rank_correlation"] = _rank_correlation(found.overlays, other.overlays, rows[0][inside], rows[1][inside])
        made.append(entry)
    return made


def _best_row(frame: pd.DataFrame, inside: npt.NDArray[np.bool_]) -> int | None:
    values = np.where(inside, frame[BEST_BY].to_numpy(dtype=np.float64), np.nan)
    return int(np.nanargmax(values)) if np.isfinite(values).any() else None


def _rank_correlation(here: pd.DataFrame, there: pd.DataFrame, row_here: Positions, row_there: Positions) -> float:
    one, other = here[BEST_BY].to_numpy()[row_here], there[BEST_BY].to_numpy()[row_there]
    known = np.isfinite(one) & np.isfinite(other)
    return rank_correlation(one[known], other[known])
