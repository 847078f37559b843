"""What a strike rule sees, and what the engine asks of one."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Protocol

import numpy as np
import numpy.typing as npt

from ..pricing.day_state import DayState
from ..volatility.smile import SmileSlice

if TYPE_CHECKING:
    from ..overlay import Costs

Array = npt.NDArray[np.float64]

#: Stand for "no strike is low enough" and "none is high enough": a bound takes their place, and the roll is flagged.
BELOW_ALL, ABOVE_ALL = 0.0, np.inf


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class LinkedOption:
    """The option live in another leg at each open, shape ``(roll,)``; NaN where that leg holds none.

    ``premium`` and ``cost`` are those at that option's own open; ``months`` is the length of that leg's roll.
    """

    strike: Array
    premium: Array
    cost: Array
    direction: float
    ratio: float
    months: float


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class OpenState:
    """What is known when each option is struck; every array has shape ``(roll,)``.

    Nothing here is dated after the decision (C4).

    Attributes
    ----------
    day : DayState
        Spot, forward, smile and so on of the day of the decision, for the option's own expiry.
    sign : float
        +1 for a call, -1 for a put.
    follows : ndarray of bool
        Whether the option takes the place of one held up to its open.
    linked : mapping of int to LinkedOption
        Options of the legs that the rule names, by number of the leg counted from 1.
    costs : Costs, optional
        Of the overlay; only rules that name other legs see them, with the leg's own ``ratio`` and ``months``.
    """

    day: DayState
    sign: float
    follows: npt.NDArray[np.bool_]
    linked: Mapping[int, LinkedOption] = field(default_factory=dict)
    costs: Costs | None = None
    ratio: float = 1.0
    months: float = 1.0

    @property
    def spot(self) -> Array:
        """Closing price."""
        return self.day.spot

    @property
    def forward(self) -> Array:
        """Forward to the option's own expiry."""
        return self.day.forward

    @property
    def tau_years(self) -> Array:
        """Years to the option's own expiry."""
        return self.day.tau_years

    @property
    def smile(self) -> SmileSlice:
        """Smile for the option's own expiry."""
        return self.day.smile


class StrikeRule(Protocol):
    """What the engine asks of a strike rule.

    A rule may also have a class method ``together(rules, states)`` that gives the strikes of many rules of its kind
    with the same rolls at once, shape ``(leg, roll)``, and a property ``named_legs``, the numbers of other legs that it
    looks at.
    """

    def strikes(self, state: OpenState) -> Array:
        """Strike per roll, shape ``(roll,)``, in price units; zero or infinity where there is none."""
        ...


class Together:
    """Gives ``strikes`` to a rule that works out many at once."""

    __slots__ = ()

    @classmethod
    def together(cls, rules: Sequence[Together], states: Sequence[OpenState]) -> Array:
        """Strikes of many rules of this kind, all with the same rolls, shape ``(leg, roll)``."""
        raise NotImplementedError

    def strikes(self, state: OpenState) -> Array:
        """Strike per roll, shape ``(roll,)``."""
        found: Array = self.together([self], [state])[0]
        return found
