"""The legs of an overlay as the slow twin carries them: ladders split, legs numbered, labelled and linked.

Plain Python, borrowing nothing from ``backtest`` but the fields of its legs; see ``slow_twin.py``.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

from .slow_calendar import MONTHS_IN_ROLL

TRADING_DAYS_IN_MONTH = 21


@dataclass(frozen=True)
class Line:
    """A leg, or one tranche of a ladder: what is carried by itself."""

    label: str
    leg: Any  # as in the overlay file
    number: int  # of the leg in the file, from 1
    tranche: int  # from 0
    ratio: float  # options per share
    phase: int
    shift_days: int
    gate: Any

    @property
    def sign(self) -> float:
        return 1.0 if self.leg.position == "long" else -1.0

    @property
    def held(self) -> float:
        """Options held per share: of a reference none (it lends its strike and its cost to others)."""
        return 0.0 if self.leg.reference else self.ratio


def roll_months(leg: Any) -> float:
    """Length of a leg's roll in months."""
    return leg.every / TRADING_DAYS_IN_MONTH if leg.roll == "days" else MONTHS_IN_ROLL[leg.roll]


def stagger(leg: Any, k: int) -> tuple[int, int]:
    """Phase and shift of the k-th tranche of a ladder, the rungs spread evenly over one roll."""
    if not leg.stagger or k == 0:
        return leg.phase, leg.shift_days
    if leg.roll == "days":
        return (leg.phase + round(k * leg.every / leg.ladder)) % leg.every, leg.shift_days
    months = MONTHS_IN_ROLL[leg.roll]
    if months % leg.ladder == 0:
        return (leg.phase + k * months // leg.ladder) % months, leg.shift_days
    return leg.phase, leg.shift_days + round(k * TRADING_DAYS_IN_MONTH * months / leg.ladder)


def lines_of(overlay: Any) -> list[Line]:
    """Every leg, each ladder split into equal tranches, in the order of the file."""
    tranches = [(n, leg, k) for n, leg in enumerate(overlay.legs, start=1) for k in range(leg.ladder)]
    names = labels([leg.right for _, leg, _ in tranches])
    lines = []
    for name, (number, leg, k) in zip(names, tranches):
        phase, shift_days = stagger(leg, k)
        gate = leg.gate if leg.gate is not None else overlay.gate
        lines.append(Line(name, leg, number, k, leg.ratio / leg.ladder, phase, shift_days, gate))
    return lines


def labels(rights: list[str]) -> list[str]:
    """``put`` and ``call``, numbered where a right occurs more than once."""
    return [r if rights.count(r) == 1 else f"{r}_{rights[: i + 1].count(r)}" for i, r in enumerate(rights)]


def anchor_of(lines: list[Line]) -> Line:
    """The line with the longest roll, the first listed among equals (C3).

    A leg of ratio zero and a reference, of which nothing is held, take no part.
    """
    held = [line for line in lines if line.held > 0.0]
    longest = max(roll_months(line.leg) for line in held)
    return next(line for line in held if roll_months(line.leg) == longest)


def linked_line(lines: list[Line], line: Line, number: int) -> Line:
    """The line that another one names: of a ladder the same rung, else the leg itself."""
    rungs = [other for other in lines if other.number == number]
    return rungs[line.tranche] if len(rungs) > 1 else rungs[0]


def named_legs(strike: Any) -> list[int]:
    """Numbers of the legs whose strike or cost a strike rule needs."""
    if hasattr(strike, "rule"):  # a wrapper: its own leg and those of the rule inside
        own = [] if strike.not_below_leg is None else [strike.not_below_leg]
        return own + named_legs(strike.rule)
    if hasattr(strike, "legs"):
        return list(strike.legs)
    return [strike.leg] if hasattr(strike, "leg") else []
