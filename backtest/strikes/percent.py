"""Strikes in percent of spot or forward, and in deviations from the forward (C6)."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from ..arguments import number
from .state import OpenState

Array = npt.NDArray[np.float64]


def check_percent(name: str, percent: float) -> None:
    """Raise OverlayError unless it is a strike in percent that makes sense."""
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
        check_percent("percent_of_spot", self.percent)

    def strikes(self, state: OpenState) -> Array:
        """Strike per roll, shape ``(roll,)``."""
        return state.spot * (self.percent / 100.0)


@dataclass(frozen=True, slots=True)
class PercentOfForward:
    """``K = F p / 100`` with the forward to the option's expiry (C6)."""

    percent: float

    def __post_init__(self) -> None:
        check_percent("percent_of_forward", self.percent)

    def strikes(self, state: OpenState) -> Array:
        """Strike per roll, shape ``(roll,)``."""
        return state.forward * (self.percent / 100.0)


@dataclass(frozen=True, slots=True)
class Deviations:
    """So many at-the-money deviations out of the money, counted from the forward (C6).

    ``K = F exp(-z sigma_atm sqrt(tau))`` for a put, with a plus for a call; a negative number is in the money.
    """

    deviations: float

    def __post_init__(self) -> None:
        number("deviations", self.deviations, least=-10.0, most=10.0, unit=" (at-the-money standard deviations)")

    def strikes(self, state: OpenState) -> Array:
        """Strike per roll, shape ``(roll,)``."""
        at_the_money = state.day.stdev_at(np.zeros(len(state.forward)))
        return np.asarray(state.forward * np.exp(state.sign * self.deviations * at_the_money))
