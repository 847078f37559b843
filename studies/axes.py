"""The axes of a study: what varies, and over which values."""

from __future__ import annotations

from collections.abc import Hashable, Iterator, Mapping, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from fractions import Fraction
from math import prod
from typing import Any

from .batches import FIGURES, SPAN
from .errors import StudyFileError
from .expansion import field_path, overlap
from .toml_text import KeyPath, KeyProblem, key_words, plain, same_key, table_of, toml

#: Before any are left out.
MOST_COMBINATIONS = 1_000_000
MOST_AXES = 20
LONGEST_NAME = 60
#: No field takes a larger number; from, to and step of a range stay below the square root of it.
LARGEST_NUMBER = 1e300
#: As many labels are listed in an error.
MOST_LISTED = 12

RANGE_KEYS = ("from", "to", "step")
#: Columns of the results before those of the axes.
SETTINGS = ("number", "history")


@contextmanager
def told(*above: str | int) -> Iterator[None]:
    """Every problem inside becomes a StudyFileError, its key under the ones above."""
    try:
        yield
    except (KeyProblem, StudyFileError) as problem:
        path = (*above, *problem.path)
        raise StudyFileError(
            file="study", line=None, key=key_words(path) or None, problem=problem.problem, path=path
        ) from None


@dataclass(frozen=True, slots=True, kw_only=True)
class Axis:
    """One thing that varies.

    Parameters
    ----------
    name : str
    fields : tuple of str
        What is set, together: paths such as ``leg.1.strike.percent_of_spot``, legs counted from 1.
    values : tuple
        Numbers, texts or tables, all distinct.
    labels : tuple of str, optional
        A word for each value, all distinct; made of the values if not given.

    Raises
    ------
    StudyFileError
        If there are no fields or values, or two of the same.

    Examples
    --------
    >>> axis = Axis(name="put", fields=("leg.1.strike",), values=({"percent_of_spot": 95}, {"percent_of_forward": 95}))
    >>> axis.labels
    ('percent of spot 95', 'percent of forward 95')
    """

    name: str
    fields: tuple[str, ...]
    values: tuple[Any, ...]
    labels: tuple[str, ...] = ()

    def __post_init__(self) -> None:
        with told():
            _check_name(self.name)
            fields = texts(("fields",), self.fields, 'a list of fields, such as ["leg.1.ratio"]')
            values = _values(self.values)
            labels = texts(("labels",), self.labels, "a list of texts, one for each value")
            if not fields:
                raise KeyProblem(("fields",), "is empty; an axis needs a field")
            if labels and len(labels) != len(values):
                raise KeyProblem(("labels",), f"has {len(labels)} labels for {len(values)} values")
            if any(not label.strip() or not label.isprintable() for label in labels):
                raise KeyProblem(("labels",), "holds an empty label, or one with a line break; it takes words")
            known = labels or tuple(_label(value) for value in values)
            twice = first_twice(known)
            if twice is not None:
                hint = "" if labels else "; give labels that tell the values apart"
                raise KeyProblem(("labels",), f"has {toml(known[twice])} twice{hint}")
            words = {value for value in values if isinstance(value, str)}
            for number, label in enumerate(known):
                if label in words and values[number] != label:
                    raise KeyProblem(
                        ("labels",), f"has {toml(label)} for {toml(values[number])}, and it is a value too"
                    )
            for key, item in (("fields", fields), ("values", values), ("labels", known)):
                object.__setattr__(self, key, item)

    @property
    def is_numeric(self) -> bool:
        """Whether every value is a number."""
        return all(isinstance(value, int | float) and not isinstance(value, bool) for value in self.values)

    def position_of(self, value: Any) -> int | None:
        """Position of a value, or of a label that is no value; None if it is neither."""
        wanted = same_key(value)
        found = next((number for number, known in enumerate(self.values) if same_key(known) == wanted), None)
        if found is None and value in self.labels:
            return self.labels.index(value)
        return found

    def some_labels(self) -> str:
        """The labels in a sentence, the middle of many left out."""
        if len(self.labels) <= MOST_LISTED:
            return ", ".join(self.labels)
        first = ", ".join(self.labels[: MOST_LISTED // 2])
        return f"{first}, ..., {self.labels[-1]} ({len(self.labels):,} values)"


def check_axes(axes: Sequence[Axis], legs: int) -> None:
    """Names that differ, fields that there are and that do not overlap, not too many of anything.

    An axis becomes a column of the results, and so has the name of no other column there.

    Raises
    ------
    KeyProblem
        At ``axis`` and the number of the axis.
    """
    if not axes:
        raise KeyProblem(("axis",), "a study needs at least one [[axis]]")
    taken: list[tuple[str, Any, int]] = []
    for number, axis in enumerate(axes):
        path: KeyPath = ("axis", number)
        if not isinstance(axis, Axis):
            raise KeyProblem(path, f"is {axis!r}; it takes an Axis")
        earlier = [other.name for other in axes[:number]]
        if axis.name in earlier:
            raise KeyProblem((*path, "name"), f"{axis.name} is also the name of axis {earlier.index(axis.name) + 1}")
        if axis.name in (*SETTINGS, *SPAN, *FIGURES):
            problem = f"{axis.name} is the name of a column of the results; give the axis another"
            raise KeyProblem((*path, "name"), problem)
        for field in axis.fields:
            try:
                where = field_path(field, legs)
            except KeyProblem as problem:
                raise KeyProblem((*path, "fields"), problem.problem) from None
            for other, place, owner in taken:
                if overlap(where, place):
                    by = "this axis" if owner == number else f"axis {axes[owner].name}"
                    raise KeyProblem((*path, "fields"), f"{field} is set already by {by}, as {other}")
            taken.append((field, where, number))
    check_count([len(axis.values) for axis in axes])


def check_count(sizes: Sequence[int]) -> None:
    """Raise KeyProblem if axes of these numbers of values have too many combinations; nothing is made for it."""
    if len(sizes) > MOST_AXES:
        raise KeyProblem(("axis",), f"there are {len(sizes)} axes; the limit is {MOST_AXES}")
    count = prod(sizes)
    if count > MOST_COMBINATIONS:
        factors = " x ".join(_counted(size) for size in sizes)
        raise KeyProblem(
            ("axis",),
            f"{factors} = {_counted(count)} combinations; the limit is {MOST_COMBINATIONS:,}, before any are left out. "
            "Take wider steps or fewer axes",
        )


def _counted(count: int) -> str:
    return f"{count:,}" if count < 10**15 else f"about 10^{int(count.bit_length() * 0.30103)}"


def count_of(path: KeyPath, values: Any) -> int:
    """Number of values, without making those of a range."""
    if isinstance(values, dict):
        _, _, steps = _range(path, values)
        return steps + 1
    if not isinstance(values, list | tuple):
        raise KeyProblem(path, f"is {values!r}; it takes a list, or {{ from = 80, to = 99, step = 1 }}")
    return len(values)


def range_values(path: KeyPath, values: Mapping[str, Any]) -> tuple[int | float, ...]:
    """``from``, ``from + step``, ... as far as ``to``, reckoned as exactly as the numbers are written.

    Examples
    --------
    >>> range_values((), {"from": 80, "to": 80.3, "step": 0.1})
    (80.0, 80.1, 80.2, 80.3)
    """
    first, step, steps = _range(path, values)
    whole = all(isinstance(values[key], int) for key in RANGE_KEYS)
    return tuple(int(first + k * step) if whole else float(first + k * step) for k in range(steps + 1))


def _range(path: KeyPath, values: Mapping[str, Any]) -> tuple[Fraction, Fraction, int]:
    """First value, step and number of steps."""
    table_of(path, values, RANGE_KEYS)
    numbers = []
    for key in RANGE_KEYS:
        if key not in values:
            raise KeyProblem(path, f"has no {key}; a range needs from, to and step")
        value = values[key]
        if isinstance(value, bool) or not isinstance(value, int | float) or not abs(value) <= LARGEST_NUMBER**0.5:
            raise KeyProblem((*path, key), f"is {toml(value)}; it takes a number")
        numbers.append(Fraction(str(value)))
    first, last, step = numbers
    if step == 0:
        raise KeyProblem((*path, "step"), "is 0; it takes a step from one value to the next")
    if (last - first) * step < 0:
        way = "up" if last > first else "down"
        raise KeyProblem(
            (*path, "step"), f"is {toml(values['step'])}, but from {values['from']} to {values['to']} it goes {way}"
        )
    return first, step, int((last - first) // step)


def texts(path: KeyPath, value: Any, takes: str) -> tuple[str, ...]:
    """The value as a tuple of texts."""
    if not isinstance(value, list | tuple):
        raise KeyProblem(path, f"is {value!r}; it takes {takes}")
    for number, item in enumerate(value):
        if not isinstance(item, str):
            raise KeyProblem((*path, number), f"is {item!r}; it takes a text in quotes")
    return tuple(value)


def first_twice(items: Sequence[Hashable]) -> int | None:
    """Position of the first item that has come before."""
    seen = set()
    for number, item in enumerate(items):
        if item in seen:
            return number
        seen.add(item)
    return None


def _check_name(name: Any) -> None:
    if not isinstance(name, str) or not name.strip() or name != name.strip() or not name.isprintable():
        raise KeyProblem(("name",), f"is {name!r}; it takes a few words in quotes")
    if len(name) > LONGEST_NAME:
        raise KeyProblem(("name",), f"has {len(name)} characters; the limit is {LONGEST_NAME}")


def _values(given: Any) -> tuple[Any, ...]:
    path: KeyPath = ("values",)
    if not isinstance(given, list | tuple):
        raise KeyProblem(path, f"is {given!r}; it takes a list of values")
    if not given:
        raise KeyProblem(path, "is empty; an axis needs a value")
    values = plain(path, given)
    for value in values:
        if isinstance(value, list):
            raise KeyProblem(path, f"holds {toml(value)}; a value is a number, a text or a table")
        if isinstance(value, int | float) and not abs(value) <= LARGEST_NUMBER:
            raise KeyProblem(path, f"holds {toml(value)}; it takes numbers of at most {LARGEST_NUMBER:g}")
    twice = first_twice([same_key(value) for value in values])
    if twice is not None:
        raise KeyProblem(path, f"holds {toml(values[twice])} twice")
    return tuple(values)


def _label(value: Any) -> str:
    if isinstance(value, dict):
        return ", ".join(f"{key.replace('_', ' ')} {_label(item)}" for key, item in value.items()) or "whole"
    if isinstance(value, float) and value.is_integer() and abs(value) < 1e15:
        return str(int(value))
    return value if isinstance(value, str) else toml(value)
