"""Strikes that depend on the option live in another leg: financed and mirrored (C6)."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt

from ..arguments import number, whole_number
from ..errors import OverlayError
from .solved import SMALLEST_PRICE, by_sign, solve_strikes
from .state import ABOVE_ALL, BELOW_ALL, OpenState, Together

if TYPE_CHECKING:
    from ..overlay import Costs

Array = npt.NDArray[np.float64]

#: Legs are named by their number in the overlay, counted from 1.
HIGHEST_LEG = 200


@dataclass(frozen=True, slots=True)
class Financed(Together):
    """The sold strike whose proceeds after cost pay ``share`` of what other legs cost, half-spread included (C6).

    Both sides count at the ratios of their legs and pro rata of the roll lengths: a monthly call that finances a
    quarterly put brings a third of the put's cost each month. A sold leg among those named lowers what is to be
    paid. Their cost is that at the open of the option that is live in them; where none is, nothing is to be paid and no
    strike fits.

    Parameters
    ----------
    share : float
        1 for a band without net premium.
    legs : tuple of int
        The legs to be paid for, by number from 1.
    """

    share: float
    legs: tuple[int, ...] = (1,)

    def __post_init__(self) -> None:
        number("financed_share", self.share, least=0.0001, most=10.0, unit=" (1 pays for all of it)")
        if isinstance(self.legs, (str, bytes)) or not isinstance(self.legs, Sequence) or not self.legs:
            raise OverlayError(f"of_legs is {self.legs!r}; it takes numbers of legs, such as [1]", field="of_legs")
        object.__setattr__(self, "legs", tuple(self.legs))
        for leg in self.legs:
            whole_number("of_legs", leg, least=1, most=HIGHEST_LEG, unit=" (the number of a leg)")
        if len(set(self.legs)) < len(self.legs):
            raise OverlayError(f"of_legs is {list(self.legs)!r}; each leg once", field="of_legs")

    @property
    def named_legs(self) -> tuple[int, ...]:
        """Numbers of the legs to be paid for."""
        return self.legs

    def target(self, state: OpenState) -> Array:
        """What one option has to bring after its cost, shape ``(roll,)``; zero where there is nothing to pay."""
        due = np.zeros(len(state.spot))
        for name in self.legs:
            paid = state.linked[name]
            cost = paid.ratio * (paid.direction * paid.premium + paid.cost) * (state.months / paid.months)
            due = due + np.nan_to_num(cost)
        return np.asarray(self.share * due / state.ratio)

    @classmethod
    def together(cls, rules: Sequence[Any], states: Sequence[OpenState]) -> Array:
        """Strikes of many financed legs, shape ``(leg, roll)``."""
        day = states[0].day
        target = np.stack([rule.target(state) for rule, state in zip(rules, states, strict=True)])
        strike = np.empty(target.shape)
        for sign, rows in by_sign(states):
            for costs in dict.fromkeys(states[row].costs for row in rows):
                some = [row for row in rows if states[row].costs == costs]

                def height(x: Array, sign: float = sign, costs: Costs | None = costs) -> Array:
                    at = np.exp(x + day.log_forward)
                    proceeds = day.value_and_delta(at, sign)[0]
                    if costs is not None:
                        proceeds = proceeds - day.trading_cost(costs, proceeds, at, sign)
                    return np.asarray(np.log(np.maximum(proceeds, SMALLEST_PRICE)))

                due = target[some] > 0.0
                solved = solve_strikes(height, np.log(np.where(due, target[some], 1.0)), states[0], sign)
                strike[some] = np.where(due, solved, ABOVE_ALL if sign > 0 else BELOW_ALL)
        return strike


@dataclass(frozen=True, slots=True)
class Mirrored:
    """``K = F F / K_other``, as far from the forward in logarithms as the strike of another leg (C6)."""

    leg: int

    def __post_init__(self) -> None:
        whole_number("mirrored_leg", self.leg, least=1, most=HIGHEST_LEG, unit=" (the number of a leg)")

    @property
    def named_legs(self) -> tuple[int, ...]:
        """Number of the other leg."""
        return (self.leg,)

    def strikes(self, state: OpenState) -> Array:
        """Strike per roll, shape ``(roll,)``; none where the other leg holds no option."""
        other = state.linked[self.leg].strike
        nothing = ABOVE_ALL if state.sign > 0 else BELOW_ALL
        return np.where(np.isnan(other), nothing, state.forward * state.forward / other)
