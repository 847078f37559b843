"""A study's combinations -> overlays, their volatilities and their windows.

An overlay is made of parts: each leg, the account, the costs; beside it stand the volatility and the window. A part
is built once for each distinct combination of the axes that touch it, however many overlays it is in: a grid of 100
put strikes by 100 call strikes builds 200 legs.
"""

from __future__ import annotations

import datetime as dt
import re
from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from functools import partial
from itertools import repeat
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt

from backtest import Overlay, Volatility
from backtest.strikes import STRIKE_RULES

from .errors import StudyFileError
from .leave_out import Mask, left_out
from .overlay_files import (
    COST_KEYS,
    LEG_KEYS,
    SMILE_KEYS,
    VOLATILITY_KEYS,
    account_from_value,
    costs_from_value,
    leg_from_value,
    volatility_from_value,
)
from .toml_text import KeyPath, KeyProblem, key_words, near, table_of, toml

if TYPE_CHECKING:
    import pandas as pd

    from .study import Axis, Study

Points = npt.NDArray[np.int32]

#: Of a window; either may be missing.
WINDOW_KEYS = ("from", "to")
#: Other values of an axis that are tried when an error looks for what is to blame.
MOST_TRIED = 100

_ISO_DAY = re.compile(r"\d{4}-\d\d-\d\d")


@dataclass(frozen=True, slots=True, kw_only=True)
class Point:
    """One combination of a study, made.

    Attributes
    ----------
    overlay : Overlay
        Without a name.
    volatility : Volatility
    start, end : str or None
        First and last day of the window, ISO; None where the history's own.
    """

    overlay: Overlay
    volatility: Volatility
    start: str | None = None
    end: str | None = None


def known_fields(legs: int) -> dict[str, KeyPath]:
    """Every field that an axis may touch, with its path in the table of an overlay.

    Examples
    --------
    >>> known_fields(2)["leg.2.strike.percent_of_spot"]
    ('leg', 1, 'strike', 'percent_of_spot')
    """
    paths: list[KeyPath] = [("account",)]
    for number in range(legs):
        paths += [("leg", number, key) for key in LEG_KEYS]
        paths += [("leg", number, "strike", rule) for rule in STRIKE_RULES]
    paths += [("costs", key) for key in COST_KEYS]
    paths += [("volatility", key) for key in VOLATILITY_KEYS]
    paths += [("volatility", "smile", key) for key in SMILE_KEYS]
    paths += [("window",), *(("window", key) for key in WINDOW_KEYS)]
    return {key_words(path): path for path in paths}


def field_path(field: str, legs: int) -> KeyPath:
    """Path of a field, or KeyProblem with the fields there are."""
    known = known_fields(legs)
    if field in known:
        return known[field]
    hint = near(field, tuple(known), ".")
    legs_known = "leg.1" if legs == 1 else f"leg.1 to leg.{legs}"
    raise KeyProblem(
        (),
        f"there is no field {field}{hint} Known here: account, {legs_known} (.{', .'.join(LEG_KEYS)}), costs "
        f"(.{', .'.join(COST_KEYS)}), volatility (.{', .'.join(VOLATILITY_KEYS)}), window (.from, .to)",
    )


def overlap(one: KeyPath, other: KeyPath) -> bool:
    """Whether two fields are the same, or one is inside the other."""
    shared = min(len(one), len(other))
    return one[:shared] == other[:shared]


def points(study: Study) -> Points:
    """Positions of the axis values of every combination that is kept, shape ``(overlay, axis)``.

    The first axis is the slowest.

    Examples
    --------
    >>> from studies.study import Axis, Study
    >>> put = {"position": "long", "right": "put", "strike": {"percent_of_spot": 95}}
    >>> study = Study(
    ...     question="Which?",
    ...     histories=("demo",),
    ...     overlay={"leg": [put]},
    ...     axes=(
    ...         Axis(name="strike", fields=("leg.1.strike.percent_of_spot",), values=(90, 95)),
    ...         Axis(name="ratio", fields=("leg.1.ratio",), values=(0.5, 1)),
    ...     ),
    ...     leave_out=("strike == 95 and ratio < 1",),
    ... )
    >>> points(study).tolist()
    [[0, 0], [0, 1], [1, 1]]
    """
    return np.argwhere(~left_out(study.axes, study.leave_out)).astype(np.int32)


class Expansion:
    """Makes the overlays of a study, a batch at a time; what batches share is built once.

    Parameters
    ----------
    study : Study
    """

    def __init__(self, study: Study) -> None:
        self.study = study
        self._parts = tuple(_parts(study.overlay, study.axes))
        self._made: list[dict[int, Any]] = [{} for _ in self._parts]

    def many(self, points: npt.ArrayLike) -> list[Point]:
        """The overlays of some combinations, in their order.

        Parameters
        ----------
        points : array_like of int
            Positions of axis values, shape ``(overlay, axis)``, such as rows of :func:`points`.

        Raises
        ------
        ValueError
            If a row does not hold a position of each axis.
        StudyFileError
            If a combination makes no overlay; the study leaves it out then.
        """
        rows = self._checked(points)
        try:
            account, *legs, costs, volatility, window = (self._of_part(n, rows) for n in range(len(self._parts)))
        except KeyProblem as problem:
            raise StudyFileError(
                file="study", line=None, key=key_words(problem.path), problem=problem.problem, path=problem.path
            ) from None
        return [
            Point(overlay=Overlay(legs=held, account=word, costs=paid), volatility=vol, start=start, end=end)
            for held, word, paid, vol, (start, end), _ in zip(zip(*legs), account, costs, volatility, window, rows)
        ]

    def settings(self, points: npt.ArrayLike) -> pd.DataFrame:
        """A column for each axis: its values where they are numbers, else its labels.

        Parameters
        ----------
        points : array_like of int
            As in :meth:`many`.
        """
        import pandas as pd

        rows = self._checked(points)
        told = {}
        for number, axis in enumerate(self.study.axes):
            shown = np.array(axis.values) if axis.is_numeric else np.array(axis.labels, dtype=object)
            told[axis.name] = shown[rows[:, number]]
        return pd.DataFrame(told)

    def _checked(self, points: npt.ArrayLike) -> npt.NDArray[np.intp]:
        rows = np.asarray(points)
        sizes = [len(axis.values) for axis in self.study.axes]
        if rows.size == 0:
            rows = np.zeros((0, len(sizes)), dtype=np.intp)
        if rows.ndim != 2 or rows.shape[1] != len(sizes) or rows.dtype.kind not in "iu":
            raise ValueError(
                f"points are whole numbers of shape (overlay, {len(sizes)}), not {rows.dtype} {rows.shape}"
            )
        if ((rows < 0) | (rows >= sizes)).any():
            raise ValueError(f"points lie outside the axes, which have {sizes} values")
        return rows.astype(np.intp, copy=False)

    def _of_part(self, number: int, rows: npt.NDArray[np.intp]) -> Any:
        """One part of each combination; endlessly the same one if no axis touches it."""
        part, made = self._parts[number], self._made[number]
        if not part.axes:
            if 0 not in made:
                made[0] = part.build(())
            return repeat(made[0])
        codes = np.ravel_multi_index(tuple(rows[:, list(part.axes)].T), part.sizes)
        distinct, first = np.unique(codes, return_index=True)
        for code, row in zip(distinct.tolist(), first.tolist()):
            if code not in made:
                made[code] = part.build(rows[row, list(part.axes)].tolist())
        return map(made.__getitem__, codes.tolist())


@dataclass(frozen=True, slots=True, kw_only=True)
class _Part:
    """What one table of an overlay makes, and the axes that touch it."""

    path: KeyPath
    base: Any
    make: Callable[[Any], Any]
    axes: tuple[int, ...]
    choices: tuple[Sequence[Any], ...]
    inside: tuple[tuple[KeyPath, ...], ...]  # of each of these axes, the paths inside the part that it sets

    @property
    def sizes(self) -> tuple[int, ...]:
        return tuple(len(values) for values in self.choices)

    def build(self, positions: Sequence[int]) -> Any:
        """The part, with each of its axes at one of its values."""
        table = self.base
        for values, paths, position in zip(self.choices, self.inside, positions):
            for path in paths:
                table = _with(table, path, values[position], self.path)
        return self.make(table)

    def problem(self, positions: Sequence[int]) -> KeyProblem | None:
        """What is wrong with a combination, if anything."""
        try:
            self.build(positions)
        except KeyProblem as problem:
            return problem
        return None


def _parts(overlay: Mapping[str, Any], axes: Sequence[Axis]) -> Iterator[_Part]:
    """Account, each leg, costs, volatility and window, in this order."""
    legs = overlay["leg"]
    choices = [axis.values for axis in axes]  # noqa: PD011  an Axis is no frame
    sets = [[field_path(field, len(legs)) for field in axis.fields] for axis in axes]

    def part(path: KeyPath, base: Any, make: Callable[[Any], Any]) -> _Part:
        inside = [tuple(field[len(path) :] for field in fields if field[: len(path)] == path) for fields in sets]
        touching = tuple(number for number, paths in enumerate(inside) if paths)
        return _Part(
            path=path, base=base, make=make, axes=touching,
            choices=tuple(choices[n] for n in touching), inside=tuple(inside[n] for n in touching),
        )  # fmt: skip

    yield part(("account",), overlay["account"], account_from_value)
    for number, leg in enumerate(legs):
        yield part(("leg", number), leg, partial(leg_from_value, number=number))
    yield part(("costs",), overlay["costs"], costs_from_value)
    yield part(("volatility",), overlay["volatility"], volatility_from_value)
    yield part(("window",), {}, window_from_value)


def _with(table: Any, path: KeyPath, value: Any, above: KeyPath) -> Any:
    """A copy of a table with one value in it set."""
    if not path:
        return value
    key, *rest = path
    if not isinstance(table, dict):
        raise KeyProblem(above, f"is {toml(table)}, which has no {key} to set; write it as a table in [overlay]")
    return {**table, key: _with(table.get(key, {}), tuple(rest), value, (*above, key))}


def window_from_value(value: Any) -> tuple[str | None, str | None]:
    """First and last day of a window, ISO, from its table; None where it says nothing."""
    path: KeyPath = ("window",)
    given = table_of(path, value, WINDOW_KEYS)
    for key, day in given.items():
        if not _is_day(day):
            raise KeyProblem((*path, key), f"is {toml(day)}; it takes a date such as 2009-12-31")
    start, end = (given.get(key) for key in WINDOW_KEYS)
    if start is not None and end is not None and start >= end:
        raise KeyProblem(path, f"ends on {end}, and begins on {start}; it takes a first day before its last")
    return start, end


def _is_day(value: Any) -> bool:
    if not isinstance(value, str) or not _ISO_DAY.fullmatch(value):
        return False
    try:
        dt.date.fromisoformat(value)
    except ValueError:
        return False
    return True


def check_values(overlay: Mapping[str, Any], axes: Sequence[Axis], kept: Mask) -> None:
    """Try every distinct part of the combinations that are kept.

    Raises
    ------
    KeyProblem
        At ``axis``, its number and ``values``, for the first that makes no overlay.
    """
    for part in _parts(overlay, axes):
        elsewhere = tuple(number for number in range(len(axes)) if number not in part.axes)
        if not part.axes:
            continue
        for positions in np.argwhere(kept.any(axis=elsewhere)).tolist():
            problem = part.problem(positions)
            if problem is not None:
                raise _blamed(part, positions, problem, axes)


def _blamed(part: _Part, positions: list[int], problem: KeyProblem, axes: Sequence[Axis]) -> KeyProblem:
    """The problem of a combination, in the words of the axes that another value would rid of it."""
    to_blame = []
    for place, size in enumerate(part.sizes):
        for other in range(min(size, MOST_TRIED)):
            tried = part.problem([*positions[:place], other, *positions[place + 1 :]])
            if tried is None or tried.problem != problem.problem:
                to_blame.append(place)
                break
    named = [part.axes[place] for place in to_blame or range(len(positions))]
    chosen = {axis: values[position] for axis, values, position in zip(part.axes, part.choices, positions)}
    words = [f"axis {axes[number].name}, value {toml(chosen[number])}" for number in named]
    hint = "; or leave the combination out with leave_out" if len(words) > 1 else ""
    said = f"{' with '.join(words)}: {key_words(problem.path)}: {problem.problem}{hint}"
    return KeyProblem(("axis", named[0], "values"), said)
