"""Whether the combinations of a study make overlays, tried part by part; which axis is to blame where they do not."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt

from backtest import Leg, Overlay

from .expansion import Part, part_of, parts_of
from .leave_out import Mask
from .leg_files import build, leg_from_value
from .toml_text import KeyProblem, key_words, toml

if TYPE_CHECKING:
    from .study import Axis

#: Other values of an axis that are tried when an error looks for what is to blame.
MOST_TRIED = 100


def check_values(overlay: Mapping[str, Any], axes: Sequence[Axis], kept: Mask) -> None:
    """Try every distinct part of the combinations that are kept, and every way in which legs name each other.

    Raises
    ------
    KeyProblem
        At ``axis``, its number and ``values``, for the first that makes no overlay.
    """
    ties: dict[tuple[tuple[int, ...], int], int] = {}
    tied: npt.NDArray[np.intp] = np.zeros((1,) * len(axes), dtype=np.intp)  # equal where legs are tied in the same way
    for part in parts_of(overlay, axes):
        elsewhere = tuple(number for number in range(len(axes)) if number not in part.axes)
        codes = np.zeros(part.sizes, dtype=np.intp)
        for positions in np.argwhere(kept.any(axis=elsewhere)).tolist() if part.axes else [[]]:
            try:
                made = part.build(positions)
            except KeyProblem as problem:
                raise _blamed(part, positions, problem, axes) from None
            if isinstance(made, Leg):
                codes[tuple(positions)] = ties.setdefault((made.named_legs, made.ladder), len(ties))
        if codes.any():
            laid = codes.reshape([size if n in part.axes else 1 for n, size in enumerate(kept.shape)])
            mixed = tied * len(ties) + laid
            tied = np.unique(mixed, return_inverse=True)[1].reshape(mixed.shape)
    whole = _legs_together(overlay, axes)
    place = np.flatnonzero(kept)
    _, first = np.unique(np.broadcast_to(tied, kept.shape)[kept], return_index=True)
    for point in np.column_stack(np.unravel_index(place[first], kept.shape)).tolist():
        positions = [point[number] for number in whole.axes]
        if (untied := whole.problem(positions)) is not None:
            raise _blamed(whole, positions, untied, axes)


def _legs_together(overlay: Mapping[str, Any], axes: Sequence[Axis]) -> Part:
    """All legs as one part, which makes an overlay of them: legs may name others that are not there."""

    def make(tables: Mapping[int, Any]) -> Overlay:
        legs = tuple(leg_from_value(table, number) for number, table in tables.items())
        return build((), Overlay, legs=legs, crossed=True)

    return part_of(("leg",), dict(enumerate(overlay["leg"])), make, axes, len(overlay["leg"]))


def _blamed(part: Part, positions: list[int], problem: KeyProblem, axes: Sequence[Axis]) -> KeyProblem:
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
