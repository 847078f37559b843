"""Strike rules: one small frozen class per rule of C6, and a catalogue of them.

A rule sees the state of the market at the opens of one leg, as arrays of shape
``(roll,)``, and answers with a strike for each. A new rule is one class here and
one entry in :data:`STRIKE_RULES`; the engine asks only for ``strikes``.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Protocol

import numpy as np
import numpy.typing as npt

from .arguments import number
from .volatility.smile import SmileSlice

Array = npt.NDArray[np.float64]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class OpenState:
    """What is known at the close on which each option is opened; every array has shape ``(roll,)``.

    ``forward`` and ``smile`` are those of the option's own expiry; nothing here is
    dated after the open (C4).
    """

    spot: Array
    forward: Array
    tau_years: Array
    smile: SmileSlice
    sign: float


class StrikeRule(Protocol):
    """What the engine asks of a strike rule."""

    def strikes(self, state: OpenState) -> Array:
        """Strike per roll, shape ``(roll,)``, in price units."""
        ...


def _check_percent(name: str, percent: float) -> None:
    number(name, percent, least=1.0, most=1000.0, unit=", in percent (95 is five percent below)")


@dataclass(frozen=True, slots=True)
class PercentOfSpot:
    """``K = S p / 100`` (C6).

    Examples
    --------
    >>> PercentOfSpot(95)
    PercentOfSpot(percent=95)
    """

    percent: float

    def __post_init__(self) -> None:
        _check_percent("percent_of_spot", self.percent)

    def strikes(self, state: OpenState) -> Array:
        """Strike per roll, shape ``(roll,)``."""
        return state.spot * (self.percent / 100.0)


@dataclass(frozen=True, slots=True)
class PercentOfForward:
    """``K = F p / 100`` with the forward to the option's expiry (C6)."""

    percent: float

    def __post_init__(self) -> None:
        _check_percent("percent_of_forward", self.percent)

    def strikes(self, state: OpenState) -> Array:
        """Strike per roll, shape ``(roll,)``."""
        return state.forward * (self.percent / 100.0)


#: The name of each rule in an overlay file, with its class; the class's one field takes the number.
STRIKE_RULES: dict[str, type[PercentOfSpot] | type[PercentOfForward]] = {
    "percent_of_spot": PercentOfSpot,
    "percent_of_forward": PercentOfForward,
}
