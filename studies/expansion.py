"""A study's combinations -> overlays, their volatilities and their windows.

An overlay is made of parts: each leg, the account, the costs and so on; beside it stand the volatility and the window.
A part is built once for each distinct combination of the axes that touch it, however many overlays it is in: a grid of
100 put strikes by 100 call strikes builds 200 legs.

A grid asks about a sold call under a bought put as about anything else, and ``leave_out`` is there for those who do not
want it: so every overlay of a study has ``crossed = True``.
"""

from __future__ import annotations

import datetime as dt
import re
from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from functools import lru_cache, partial
from itertools import repeat
from types import MappingProxyType
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt

from backtest import Costs, Gate, Leg, Overlay, Volatility
from backtest.gates import GATE_KEYS
from backtest.strikes import STRIKE_KEYS

from .errors import StudyFileError
from .leave_out import left_out
from .leg_files import EARLY_KEYS, LEG_KEYS, NONE, build, gate_from_value, leg_from_value
from .overlay_files import (
    COST_KEYS,
    SMILE_KEYS,
    VOLATILITY_KEYS,
    account_from_value,
    costs_from_value,
    lag_from_value,
    portfolio_from_value,
    volatility_from_value,
)
from .toml_text import KeyPath, KeyProblem, key_words, near, table_of, toml

if TYPE_CHECKING:
    import pandas as pd

    from .study import Axis, Study

Points = npt.NDArray[np.int32]

#: Of a window; either may be missing.
WINDOW_KEYS = ("from", "to")
#: Tables in a leg, with their keys.
LEG_TABLES = {"strike": STRIKE_KEYS, "early": EARLY_KEYS, "gate": GATE_KEYS}

_ISO_DAY = re.compile(r"\d{4}-\d\d-\d\d")


@dataclass(frozen=True, slots=True, kw_only=True)
class Point:
    """One combination of a study, made.

    Attributes
    ----------
    overlay : Overlay
        Without a name, and with consent to a call under the put.
    volatility : Volatility
    start, end : str or None
        First and last day of the window, ISO; None where the history's own.
    """

    overlay: Overlay
    volatility: Volatility
    start: str | None = None
    end: str | None = None


@lru_cache(maxsize=8)
def known_fields(legs: int) -> Mapping[str, KeyPath]:
    """Every field that an axis may touch, with its path in the table of an overlay.

    Examples
    --------
    >>> known_fields(2)["leg.2.strike.percent_of_spot"]
    ('leg', 1, 'strike', 'percent_of_spot')
    """
    paths: list[KeyPath] = [("account",), ("decide_lag",), ("portfolio",)]
    paths += [("gate",), *(("gate", key) for key in GATE_KEYS)]
    for number in range(legs):
        paths += [("leg", number, key) for key in LEG_KEYS]
        for table, keys in LEG_TABLES.items():
            paths += [("leg", number, table, key) for key in keys]
    paths += [("costs", key) for key in COST_KEYS]
    paths += [("volatility", key) for key in VOLATILITY_KEYS]
    paths += [("volatility", "smile", key) for key in SMILE_KEYS]
    paths += [("window",), *(("window", key) for key in WINDOW_KEYS)]
    return MappingProxyType({key_words(path): path for path in paths})


def field_path(field: str, legs: int) -> KeyPath:
    """Path of a field, or KeyProblem with the fields there are."""
    known = known_fields(legs)
    if field in known:
        return known[field]
    if field == "crossed":
        raise KeyProblem(
            (), "crossed is true in every overlay of a study; leave out the combinations that you do not want to see"
        )
    hint = near(field, tuple(known), ".")
    legs_known = "leg.1" if legs == 1 else f"leg.1 to leg.{legs}"
    raise KeyProblem(
        (),
        f"there is no field {field}{hint} Known here: account, decide_lag, portfolio, gate (.{', .'.join(GATE_KEYS)}), "
        f"{legs_known} (.{', .'.join(LEG_KEYS)}), costs (.{', .'.join(COST_KEYS)}), volatility "
        f"(.{', .'.join(VOLATILITY_KEYS)}), window (.from, .to)",
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
        self._parts = tuple(parts_of(study.overlay, study.axes))
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
            account, lag, money, gate, *legs, costs, volatility, window = (
                self._ofpart_of(n, rows) for n in range(len(self._parts))
            )
            return [
                Point(overlay=_overlay(*held), volatility=vol, start=start, end=end)
                for *held, vol, (start, end), _ in zip(
                    zip(*legs), account, lag, money, gate, costs, volatility, window, rows
                )
            ]
        except KeyProblem as problem:
            raise StudyFileError(
                file="study", line=None, key=key_words(problem.path), problem=problem.problem, path=problem.path
            ) from None

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

    def _ofpart_of(self, number: int, rows: npt.NDArray[np.intp]) -> Any:
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


def _overlay(
    legs: tuple[Leg, ...], account: str, lag: int, portfolio: float | None, gate: Gate | None, costs: Costs
) -> Overlay:
    return build(
        (), Overlay, crossed=True,
        legs=legs, account=account, decide_lag=lag, portfolio=portfolio, gate=gate, costs=costs,
    )  # fmt: skip


@dataclass(frozen=True, slots=True, kw_only=True)
class Part:
    """What one table of an overlay makes, and the axes that touch it.

    Attributes
    ----------
    path, base, make
        Where the table is, its values where no axis sets them, and what makes something of it.
    axes : tuple of int
        Numbers of the axes that touch it; ``choices`` are their values, and ``inside`` the paths in it that each sets.
    """

    path: KeyPath
    base: Any
    make: Callable[[Any], Any]
    axes: tuple[int, ...]
    choices: tuple[Sequence[Any], ...]
    inside: tuple[tuple[KeyPath, ...], ...]

    @property
    def sizes(self) -> tuple[int, ...]:
        """Number of values of each of these axes."""
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


def parts_of(overlay: Mapping[str, Any], axes: Sequence[Axis]) -> Iterator[Part]:
    """Account, lag, portfolio, gate, each leg, costs, volatility and window, in this order."""
    legs = overlay["leg"]
    wanted: list[tuple[KeyPath, Any, Callable[[Any], Any]]] = [
        (("account",), overlay["account"], account_from_value),
        (("decide_lag",), overlay["decide_lag"], lag_from_value),
        (("portfolio",), overlay.get("portfolio", NONE), portfolio_from_value),
        (("gate",), overlay.get("gate", NONE), gate_from_value),
        *((("leg", number), leg, partial(leg_from_value, number=number)) for number, leg in enumerate(legs)),
        (("costs",), overlay["costs"], costs_from_value),
        (("volatility",), overlay["volatility"], volatility_from_value),
        (("window",), {}, window_from_value),
    ]
    for path, base, make in wanted:
        yield part_of(path, base, make, axes, len(legs))


def part_of(path: KeyPath, base: Any, make: Callable[[Any], Any], axes: Sequence[Axis], legs: int) -> Part:
    """The part at a path of an overlay's table, with the axes that touch it."""
    sets = [[field_path(field, legs) for field in axis.fields] for axis in axes]
    inside = [tuple(field[len(path) :] for field in fields if field[: len(path)] == path) for fields in sets]
    touching = tuple(number for number, paths in enumerate(inside) if paths)
    choices = tuple(axis.values for axis in axes)  # noqa: PD011  an Axis is no frame
    return Part(
        path=path, base=base, make=make, axes=touching,
        choices=tuple(choices[n] for n in touching), inside=tuple(inside[n] for n in touching),
    )  # fmt: skip


def _with(table: Any, path: KeyPath, value: Any, above: KeyPath) -> Any:
    """A copy of a table with one value in it set."""
    if not path:
        return value
    key, *rest = path
    if table == NONE:
        table = {}
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
