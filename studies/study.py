"""A study is data: one overlay, the axes along which it varies, and what it is compared with; TOML in and out.

The normal form names every field (but a leg's ``term``, which follows its roll unless given, what belongs to realised
vol only, and ``crossed``, which every overlay of a study is allowed to be), so that two files that mean the same give
the same :class:`Study`.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from math import prod
from pathlib import Path
from typing import Any

from data_loaders.errors import StoreError
from data_loaders.store import check_name

from .axes import Axis, check_axes, check_count, count_of, first_twice, range_values, texts, told
from .errors import StudyFileError
from .leave_out import left_out
from .leg_files import OPTIONAL, TERM_KEYS, without_none
from .overlay_files import LARGEST_FILE_BYTES, REALISED_KEYS, overlay_from_table, overlay_to_table, table_to_toml
from .toml_text import (
    KeyPath,
    KeyProblem,
    key_words,
    known_keys,
    line_of,
    near,
    nearest_line,
    parse_toml,
    plain,
    read_toml_text,
    table_of,
    toml,
    toml_key,
)
from .tried_values import check_values

#: What the overlays of a study are judged against (C10).
COMPARISONS = ("same-beta mix", "hold")
#: Their draws take 8 bytes a resample and day: 400 MB for this many and twenty years.
MOST_RESAMPLES = 10_000
LARGEST_SEED = 2**32 - 1

STUDY_KEYS = (
    "question", "histories", "comparison", "seed", "resamples", "leave_out", "overlay", "axis", "own",
)  # fmt: skip
AXIS_KEYS = ("name", "field", "fields", "values", "labels")


@dataclass(frozen=True, slots=True, kw_only=True)
class Study:
    """What a study asks.

    Parameters
    ----------
    question : str
    histories : tuple of str
        Names of stored histories, at least one.
    overlay : dict
        The table of an overlay file, complete; kept in normal form and not to be changed.
    axes : tuple of Axis
        From 1 to 20, with at most 1,000,000 combinations.
    leave_out : tuple of str
        Combinations for which any of these holds are left out: ``put strike >= call strike``.
    comparison : {"same-beta mix", "hold"}
    own : dict, optional
        The reader's own overlay among the combinations: a value (or label) for each axis.
    seed, resamples : int
        Of the tests that allow for the search.

    Raises
    ------
    StudyFileError
        For anything outside what is said above, and for a value with which no overlay can be made.
    """

    question: str
    histories: tuple[str, ...]
    overlay: dict[str, Any]
    axes: tuple[Axis, ...]
    leave_out: tuple[str, ...] = ()
    comparison: str = "same-beta mix"
    own: dict[str, Any] | None = None
    seed: int = 1
    resamples: int = 500

    def __post_init__(self) -> None:
        with told():
            if not isinstance(self.question, str) or not self.question.strip():
                raise KeyProblem(("question",), f"is {toml(self.question)}; it takes a text in quotes")
            object.__setattr__(self, "histories", _histories(self.histories))
            if self.comparison not in COMPARISONS:
                raise KeyProblem(("comparison",), f"is {self.comparison!r}; it takes one of: {', '.join(COMPARISONS)}")
            _check_whole(("seed",), self.seed, LARGEST_SEED)
            _check_whole(("resamples",), self.resamples, MOST_RESAMPLES)
            rules = texts(("leave_out",), self.leave_out, 'a list of texts, such as ["put strike >= call strike"]')
            object.__setattr__(self, "leave_out", rules)
            object.__setattr__(self, "overlay", _normal_overlay(self.overlay))
            object.__setattr__(self, "axes", tuple(self.axes))
            check_axes(self.axes, len(self.overlay["leg"]))
            kept = ~left_out(self.axes, self.leave_out)
            if not kept.any():
                raise KeyProblem(("leave_out",), f"leaves out all of the {self.combinations:,} combinations")
            check_values(self.overlay, self.axes, kept)
            if self.own is not None:
                object.__setattr__(self, "own", _normal_own(self.own, self.axes))
                if not kept[self.own_point]:
                    raise KeyProblem(("own",), "is a combination that leave_out leaves out")

    @property
    def combinations(self) -> int:
        """Number of combinations, before any are left out."""
        return prod(len(axis.values) for axis in self.axes)

    @property
    def own_point(self) -> tuple[int, ...] | None:
        """The reader's own overlay as positions of axis values."""
        if self.own is None:
            return None
        found = [axis.position_of(self.own[axis.name]) for axis in self.axes]
        return tuple(position for position in found if position is not None)  # each is: looked up when it was made


def read_study(path: Path) -> Study:
    """Read a study file.

    Raises
    ------
    StudyFileError
        If the file cannot be read, is no TOML, has an unknown key, or a value outside its limits.
    """
    text = read_toml_text(path, error=StudyFileError, what="study file", largest=LARGEST_FILE_BYTES)
    return parse_study(text, file=path.name)


def parse_study(text: str, *, file: str = "study") -> Study:
    """Parse the text of a study file; see :func:`read_study`.

    Examples
    --------
    >>> study = parse_study('''
    ... question = "Which put would have helped?"
    ... histories = ["demo"]
    ... [[overlay.leg]]
    ... position = "long"
    ... right = "put"
    ... strike = { percent_of_spot = 95 }
    ... [[axis]]
    ... name = "put strike"
    ... field = "leg.1.strike.percent_of_spot"
    ... values = { from = 80, to = 81, step = 0.5 }
    ... ''')
    >>> study.axes[0].values, study.combinations
    ((80.0, 80.5, 81.0), 3)
    """
    table = parse_toml(text, file=file, error=StudyFileError)
    try:
        return study_from_table(table)
    except StudyFileError as error:
        path = error.path
        line = line_of(text, path)
        if line is None and path[-1:] == ("fields",):  # one field may be written as such
            path = (*path[:-1], "field")
            line = line_of(text, path)
        line = nearest_line(text, path) if line is None else line
        key = key_words(path) or None
        raise StudyFileError(file=file, line=line, key=key, problem=error.problem, path=path) from None


def study_from_table(table: Mapping[str, Any]) -> Study:
    """A study from the parsed table of a file, or from :func:`study_to_table`."""
    with told():
        known_keys((), table, STUDY_KEYS)
        _needed((), table, ("question", "histories", "overlay", "axis"), "a study")
        axes = table["axis"]
        if not isinstance(axes, list) or not axes:
            raise KeyProblem(("axis",), "a study needs at least one [[axis]]")
        if not isinstance(table["overlay"], dict):
            raise KeyProblem(("overlay",), "is no table; write the overlay under [overlay] and [[overlay.leg]]")
        for number, axis in enumerate(axes):
            path = ("axis", number)
            table_of(path, axis, AXIS_KEYS)
            _needed(path, axis, ("name", "values"), "an axis")
            if ("field" in axis) == ("fields" in axis):
                raise KeyProblem(path, "takes either field, with one path, or fields, with a list of them")
            if not isinstance(axis.get("field", ""), str):
                raise KeyProblem((*path, "field"), f"is {axis['field']!r}; it takes a text in quotes")
        check_count([count_of(("axis", number, "values"), axis["values"]) for number, axis in enumerate(axes)])
        made = []
        for number, axis in enumerate(axes):
            fields: Any = [axis["field"]] if "field" in axis else axis["fields"]
            with told("axis", number):
                values = axis["values"]
                values = range_values(("values",), values) if isinstance(values, dict) else values
                made.append(Axis(name=axis["name"], fields=fields, values=values, labels=axis.get("labels", ())))
        rest = {key: table[key] for key in STUDY_KEYS if key in table and key != "axis"}
        return Study(axes=tuple(made), **rest)


def study_to_table(study: Study) -> dict[str, Any]:
    """The normal form: plain values, from which :func:`study_from_table` makes the same study again."""
    table: dict[str, Any] = {
        "question": study.question,
        "histories": list(study.histories),
        "comparison": study.comparison,
        "seed": study.seed,
        "resamples": study.resamples,
        "leave_out": list(study.leave_out),
        "overlay": plain((), study.overlay),
        "axis": [
            {"name": axis.name, "fields": list(axis.fields), "values": plain((), axis.values), "labels": [*axis.labels]}
            for axis in study.axes
        ],
    }
    return table if study.own is None else {**table, "own": plain((), study.own)}


def study_to_toml(study: Study) -> str:
    """The normal form as the text of a study file."""
    table = study_to_table(study)
    overlay = table.pop("overlay")
    axes, own = table.pop("axis"), table.pop("own", None)

    def lines(header: str, items: Mapping[str, Any]) -> list[str]:
        return ["", header, *(f"{toml_key(key)} = {toml(value)}" for key, value in items.items())]

    text = [f"{key} = {toml(value)}" for key, value in table.items()]
    text += ["", "[overlay]", *table_to_toml(overlay, above="overlay.").splitlines()]
    for axis in axes:
        text += lines("[[axis]]", axis)
    return "\n".join(text + (lines("[own]", own) if own is not None else [])) + "\n"


def _needed(path: KeyPath, table: Mapping[str, Any], keys: Sequence[str], what: str) -> None:
    for key in keys:
        if key not in table:
            raise KeyProblem(path, f"there is no {key}; {what} needs {', '.join(keys[:-1])} and {keys[-1]}")


def _check_whole(path: KeyPath, value: Any, most: int) -> None:
    if isinstance(value, bool) or not isinstance(value, int) or not 0 <= value <= most:
        raise KeyProblem(path, f"is {value!r}; it takes a whole number from 0 to {most}")


def _histories(value: Any) -> tuple[str, ...]:
    path: KeyPath = ("histories",)
    names = texts(path, value, 'a list of names of stored histories, such as ["demo"]')
    if not names:
        raise KeyProblem(path, "is empty; a study needs the name of a stored history")
    for number, name in enumerate(names):
        try:
            check_name(name)
        except StoreError as error:
            raise KeyProblem((*path, number), str(error)) from None
    twice = first_twice(names)
    if twice is not None:
        raise KeyProblem((*path, twice), f"has {names[twice]} twice")
    return names


def _normal_overlay(given: Any) -> dict[str, Any]:
    """The overlay's table with every field, but for those that must follow what an axis sets, and for ``crossed``."""
    path: KeyPath = ("overlay",)
    if not isinstance(given, Mapping):
        raise KeyProblem(path, "is no table; write the overlay under [overlay] and [[overlay.leg]]")
    table = plain(path, given)
    for key in ("counterparty", "sale"):
        if key in table:
            raise KeyProblem((*path, key), "is asked beside a single replay; leave it out of a study")
    if not isinstance(table.get("crossed", True), bool):
        raise KeyProblem((*path, "crossed"), f"is {table['crossed']!r}; it takes true or false")
    try:
        made = overlay_from_table({**table, "crossed": True})
    except KeyProblem as problem:
        raise KeyProblem((*path, *problem.path), problem.problem) from None
    full = overlay_to_table(made.overlay, made.volatility)
    del full["crossed"]
    if "name" not in table:
        del full["name"]
    for leg, said in zip(full["leg"], table["leg"]):
        for key in TERM_KEYS:
            if key not in said:
                leg.pop(key, None)
    told_vol = table.get("volatility", {})
    implied = {key: value for key, value in full["volatility"].items() if key not in REALISED_KEYS}
    return {**full, "volatility": implied | without_none(told_vol, OPTIONAL["volatility"])}


def _normal_own(given: Any, axes: Sequence[Axis]) -> dict[str, Any]:
    """For each axis in turn its value, or the label where the value is a table."""
    path: KeyPath = ("own",)
    if not isinstance(given, Mapping):
        raise KeyProblem(path, f"is {given!r}; it takes a table with a value for each axis")
    names = tuple(axis.name for axis in axes)
    for name in given:
        if name not in names:
            raise KeyProblem((*path, name), f"there is no such axis{near(name, names, '.')} Axes: {', '.join(names)}")
    own = {}
    for axis in axes:
        if axis.name not in given:
            raise KeyProblem(path, f"has no {axis.name}; it takes a value for each axis: {', '.join(names)}")
        value = plain((*path, axis.name), given[axis.name])
        position = axis.position_of(value)
        if position is None:
            raise KeyProblem((*path, axis.name), f"is {toml(value)}, no value of this axis: {axis.some_labels()}")
        own[axis.name] = axis.labels[position] if isinstance(axis.values[position], dict) else axis.values[position]
    return own
