"""What the rolls cost and brought, in units of spot: per leg, a roll and a year.

Every option opened is counted once, per option and share, divided by the spot at
its open: premium at mid, spread and commission at open and early close, and what it
settled for. An option still live is counted at its mark, apart from the settled ones.
The units held play no part, so the figures do not lean on how wealth grew.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from ..engine.leg_replay import LegReplay, held
from ..engine.result import Replay
from .performance import years_between


@dataclass(frozen=True, slots=True, kw_only=True)
class LegCosts:
    """Sums over the rolls of one leg, times its ratio, decimals of the spot at each open.

    ``net`` is settlements and open value less premiums less costs for a bought leg, and the reverse for
    a sold one: positive when the leg brought money.
    """

    label: str
    rolls: int
    open_rolls: int
    premium_paid: float
    premium_received: float
    trading_cost: float
    settled_received: float
    settled_paid: float
    open_value: float
    net: float
    paid_off: int


@dataclass(frozen=True, slots=True, kw_only=True)
class RollCosts:
    """Costs of all legs, with the years they were spread over."""

    years: float
    legs: tuple[LegCosts, ...]

    @property
    def net_a_year(self) -> float:
        """What all legs brought a year after costs, decimal of spot; negative when they cost."""
        return sum(leg.net for leg in self.legs) / self.years

    def as_dict(self) -> dict[str, object]:
        """Per leg and in all, sums, a year, and a roll; decimals of spot."""
        total = {name: sum(getattr(leg, name) for leg in self.legs) for name in MONEY_FIELDS}
        return {
            "unit": "decimal of the spot at each open",
            "years": self.years,
            "legs": {leg.label: _spread(leg, self.years) for leg in self.legs},
            "all_a_year": {name: value / self.years for name, value in total.items()},
        }


MONEY_FIELDS = (
    "premium_paid",
    "premium_received",
    "trading_cost",
    "settled_received",
    "settled_paid",
    "open_value",
    "net",
)


def roll_costs(replay: Replay) -> RollCosts:
    """Add up what each leg's rolls cost and brought; a leg that is never held only lends its strikes, and has none."""
    held_legs = [leg for leg in replay.legs if not leg.leg.reference]
    return RollCosts(years=years_between(replay.dates), legs=tuple(_leg_costs(replay, leg) for leg in held_legs))


def payoffs_at_close(replay: Replay, leg: LegReplay) -> npt.NDArray[np.float64]:
    """Intrinsic value of each finished option of a leg on the day it was closed, in price, shape ``(finished roll,)``.

    For one that settled this is what it paid; one sold before expiry was worth more, but protected by no more. Where no
    whole contract was held nothing was paid to anybody: zero.
    """
    done = leg.done
    intrinsic = np.maximum(leg.leg.sign * (replay.spot[leg.closed[done]] - leg.strike[done]), 0.0)
    paid = np.where(leg.schedule.settles[done], leg.close_value[done], intrinsic)
    if replay.overlay.portfolio is None:
        return paid
    return np.where(leg.count[leg.closed[done] - 1] == 0.0, 0.0, paid)


def _leg_costs(replay: Replay, leg: LegReplay) -> LegCosts:
    spot = replay.spot[leg.opened]
    live = leg.schedule.live
    ratio = leg.leg.held_ratio
    premium = float(np.sum(held(ratio, leg.premium) / spot))
    closing = held(ratio, leg.close_value) / spot
    settled = float(np.sum(closing[~live]))
    bought = leg.leg.direction > 0
    return LegCosts(
        label=leg.label,
        rolls=len(leg.opened),
        open_rolls=int(live.sum()),
        premium_paid=premium if bought else 0.0,
        premium_received=0.0 if bought else premium,
        trading_cost=float(np.sum(held(ratio, leg.open_cost + leg.exit_cost) / spot)),
        settled_received=settled if bought else 0.0,
        settled_paid=0.0 if bought else settled,
        open_value=leg.leg.direction * float(np.sum(closing[live])),
        net=float(np.sum(leg.profit / spot)),
        paid_off=int(np.count_nonzero(leg.close_value[~live] > 0)),
    )


def _spread(leg: LegCosts, years: float) -> dict[str, object]:
    sums = {name: getattr(leg, name) for name in MONEY_FIELDS}
    return {
        "rolls": leg.rolls,
        "open_rolls": leg.open_rolls,
        "paid_off": leg.paid_off,
        "whole": sums,
        "a_year": {name: value / years for name, value in sums.items()},
        "a_roll": {name: value / max(leg.rolls, 1) for name, value in sums.items()},
    }
