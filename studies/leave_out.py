"""Rules of a study file that leave combinations out: ``put strike >= call strike and roll == "month"``.

A rule is one comparison, or several joined by `` and ``. On each side stands the name of an axis, a number or a
text in quotes; nothing is ever evaluated as a program. An axis whose values are all numbers compares by them, and
any axis is compared with a text by its values and labels.
"""

from __future__ import annotations

import re
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt

from .toml_text import KeyProblem, near, same_key

if TYPE_CHECKING:
    from .study import Axis

Mask = npt.NDArray[np.bool_]

OPERATORS: dict[str, Callable[..., Any]] = {
    "<": np.less, "<=": np.less_equal, ">": np.greater, ">=": np.greater_equal, "==": np.equal, "!=": np.not_equal,
}  # fmt: skip
#: They ask for the same or not the same; the others ask for an order, which texts do not have.
SAMENESS = ("==", "!=")

#: Longer rules are taken for a mistake.
LONGEST_RULE = 1_000

_OPERATOR = re.compile(r"\s*(<=|>=|==|!=|<|>)\s*")
_AND = re.compile(r"\s+and\s+")
_NUMBER = re.compile(r"[+-]?(?:\d+\.?\d*|\.\d+)(?:[eE][+-]?\d+)?")
_TEXT = re.compile(r"\"[^\"]*\"|'[^']*'")
_WORDS = re.compile(r"(?:(?!\s+and\s)[^<>=!])*")
_ENDS = re.compile(r"\s*(?:[<>=!]|$)|\s+and\s")


@dataclass(frozen=True, slots=True)
class AxisTerm:
    """An axis, by its position among the axes."""

    number: int


Term = AxisTerm | float | str


@dataclass(frozen=True, slots=True, kw_only=True)
class Comparison:
    """One comparison of a rule."""

    left: Term
    operator: str
    right: Term


def left_out(axes: Sequence[Axis], rules: Sequence[str]) -> Mask:
    """Which combinations any of the rules leaves out, an array with a dimension for each axis.

    Raises
    ------
    KeyProblem
        At ``leave_out`` and the number of the rule, if it cannot be read or compares what cannot be compared.
    """
    out = np.zeros(tuple(len(axis.values) for axis in axes), dtype=bool)
    for number, rule in enumerate(rules):
        try:
            holds: Any = True
            for comparison in parse_rule(rule, [axis.name for axis in axes]):
                holds = holds & _holds(comparison, axes)
        except KeyProblem as problem:
            raise KeyProblem(("leave_out", number), f"in {_shown(rule)}: {problem.problem}") from None
        out |= holds
    return out


def _shown(rule: str) -> str:
    return repr(rule) if len(rule) <= 100 else f"{rule[:100]!r}..."


def parse_rule(rule: str, names: Sequence[str]) -> tuple[Comparison, ...]:
    """The comparisons of a rule, all of which must hold.

    A name is read as far as it goes: where there is a ``put`` and a ``put strike``, the longer one is meant.

    Examples
    --------
    >>> parse_rule("put strike >= 95", ["put", "put strike"])
    (Comparison(left=AxisTerm(number=1), operator='>=', right=95.0),)
    """
    if len(rule) > LONGEST_RULE:
        raise KeyProblem((), f"a rule of {len(rule):,} characters; the limit is {LONGEST_RULE:,}")
    found = []
    at = len(rule) - len(rule.lstrip())
    rule = rule.rstrip()
    while True:
        left, at = _term(rule, at, names)
        operator = _OPERATOR.match(rule, at)
        if operator is None:
            rest = rule[at:].strip() or "nothing"
            raise KeyProblem((), f"after {rule[:at].strip()} comes {rest}, and not one of {' '.join(OPERATORS)}")
        right, at = _term(rule, operator.end(), names)
        found.append(Comparison(left=left, operator=operator[1], right=right))
        if at == len(rule):
            return tuple(found)
        joined = _AND.match(rule, at)
        if joined is None:
            raise KeyProblem((), f"after {rule[:at].strip()} comes {rule[at:].strip()}; comparisons are joined by and")
        at = joined.end()


def _term(rule: str, at: int, names: Sequence[str]) -> tuple[Term, int]:
    """The term that begins at a place, and where it ends."""
    for number in sorted(range(len(names)), key=lambda number: -len(names[number])):
        end = at + len(names[number])
        if rule.startswith(names[number], at) and _ENDS.match(rule, end):
            return AxisTerm(number), end
    if (text := _TEXT.match(rule, at)) is not None and _ENDS.match(rule, text.end()):
        return text[0][1:-1], text.end()
    if (figure := _NUMBER.match(rule, at)) is not None and _ENDS.match(rule, figure.end()):
        return float(figure[0]), figure.end()
    words = _WORDS.match(rule, at)
    unknown = words[0].strip() if words else ""
    if not unknown:
        raise KeyProblem((), "one side of a comparison is missing; it takes an axis, a number or a text in quotes")
    hint = near(unknown, tuple(names), ".")
    raise KeyProblem((), f"there is no axis {unknown}{hint} Axes: {', '.join(names)}; a text is put in quotes")


def _holds(comparison: Comparison, axes: Sequence[Axis]) -> Mask:
    """Where a comparison holds, to be broadcast against the array of all combinations."""
    left, right, operator = comparison.left, comparison.right, comparison.operator
    sides = [axes[side.number] for side in (left, right) if isinstance(side, AxisTerm)]
    if not sides:
        raise KeyProblem((), "a comparison names at least one axis")
    texts = [side for side in (left, right) if isinstance(side, str)]
    of_texts = [axis.name for axis in sides if not axis.is_numeric]
    if operator not in SAMENESS and (texts or of_texts):
        what = f"the values of {of_texts[0]} are no numbers" if of_texts else f"{texts[0]!r} is a text"
        raise KeyProblem((), f"{operator} compares numbers, but {what}; use == or !=")
    if texts:
        (axis,) = sides
        position = axis.position_of(texts[0])
        if position is None:
            raise KeyProblem((), f"{texts[0]!r} is no value of {axis.name}; it has {axis.some_labels()}")
        here = next(side for side in (left, right) if isinstance(side, AxisTerm))
        return OPERATORS[operator](_along(np.arange(len(axis.values)), here, axes), position)
    if of_texts and len(of_texts) < 2:
        raise KeyProblem((), f"the values of {of_texts[0]} are no numbers; compare it with a text in quotes")
    if of_texts:
        known: dict[Any, int] = {}
        for axis in sides:
            for value in axis.values:
                known.setdefault(same_key(value), len(known))
        codes = [np.array([known[same_key(value)] for value in axis.values]) for axis in sides]
    else:
        codes = [np.array(axis.values, dtype=np.float64) for axis in sides]
    waiting = iter(codes)
    parts = [_along(next(waiting), side, axes) if isinstance(side, AxisTerm) else side for side in (left, right)]
    return OPERATORS[operator](*parts)


def _along(values: npt.NDArray[Any], axis: AxisTerm, axes: Sequence[Axis]) -> npt.NDArray[Any]:
    """Values of one axis, laid along its dimension of the array of all combinations."""
    shape = [1] * len(axes)
    shape[axis.number] = len(values)
    return values.reshape(shape)
