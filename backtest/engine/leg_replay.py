"""One leg of one replay: its options and its days."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from ..calendar import REASON_WORDS, Schedule
from ..overlay import Leg, Overlay
from ..strikes import flag_words

Array = npt.NDArray[np.float64]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class LegReplay:
    """One leg of one replay.

    Arrays of shape ``(roll,)`` unless said otherwise; prices are per option, ``units`` per 1 of starting
    wealth. ``close_value`` is intrinsic where the option settled, the model's mid where it was closed early
    or is still live.
    """

    label: str
    leg: Leg
    schedule: Schedule
    opened: npt.NDArray[np.intp]  # counted from the first day of the replay
    closed: npt.NDArray[np.intp]
    strike: Array
    strike_flags: npt.NDArray[np.int64]
    forward: Array
    vol: Array
    premium: Array
    delta: Array
    open_cost: Array
    close_value: Array
    exit_cost: Array
    units: Array
    count: Array  # (day,), options held per 1 of starting wealth, unsigned
    flat: npt.NDArray[np.bool_]  # (day,), the leg holds no option after the day's trades
    daily_strike: Array  # (day,), NaN while flat
    daily_mark: Array  # (day,)
    daily_delta: Array  # (day,), spot delta of one option, unsigned by position

    @property
    def done(self) -> npt.NDArray[np.bool_]:
        """Whether each option has been closed."""
        return ~self.schedule.live

    @property
    def signed_ratio(self) -> float:
        """Options per unit, negative when sold; zero for a leg that only lends its strikes."""
        return self.leg.direction * self.leg.held_ratio

    @property
    def profit(self) -> Array:
        """Profit of each option held per unit, signed, after its costs; a live one at its mark."""
        gained = held(self.signed_ratio, self.close_value - self.premium)
        return gained - held(self.leg.held_ratio, self.open_cost + self.exit_cost)

    def flags(self) -> list[str]:
        """A word for each roll that is not the ordinary case."""
        words: list[list[str]] = [flag_words(flags) for flags in self.strike_flags.tolist()]
        schedule = self.schedule
        for roll in np.flatnonzero(schedule.stub):
            words[roll].insert(0, "stub")
        if self.leg.direction < 0:
            for roll in np.flatnonzero(self.premium < self.open_cost):
                words[roll].append("proceeds below zero")
        for roll in np.flatnonzero(schedule.reason):
            words[roll].append(REASON_WORDS[int(schedule.reason[roll])])
        for roll in np.flatnonzero(schedule.live):
            words[roll].append("open")
        return ["; ".join(w) for w in words]


def of_day(values: Array, roll_of_day: npt.NDArray[np.intp]) -> Array:
    """The value of the option held on each day; NaN while there is none."""
    return np.append(values, np.nan)[roll_of_day]


def counted(count: Array, values: Array) -> Array:
    """``count * values``; what is not held counts for nothing, even where it has no price."""
    return np.where(count == 0.0, 0.0, count * values)


def held(ratio: float, values: Array) -> Array:
    """``ratio * values``; what is held at ratio zero counts for nothing, even where it has no price."""
    return ratio * values if ratio != 0.0 else np.zeros_like(values)


def leg_labels(overlay: Overlay) -> list[str]:
    """``put`` and ``call``, numbered where a right occurs more than once."""
    rights = [leg.right for leg in overlay.carried]
    seen: dict[str, int] = {}
    labels = []
    for right in rights:
        seen[right] = seen.get(right, 0) + 1
        labels.append(right if rights.count(right) == 1 else f"{right}_{seen[right]}")
    return labels
