"""What pricing needs of some days, and the prices and trading costs that follow (C5, C7, C8)."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

from .black import black, black_with_delta

if TYPE_CHECKING:
    from ..overlay import Costs
    from ..volatility.smile import SmileSlice

Array = npt.NDArray[np.float64]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class DayState:
    """What pricing needs of some days, shared by all strikes; every array has shape ``(day,)``.

    ``forward``, ``discount``, ``growth`` (of the yield) and ``smile`` are those to the expiry of the option held on
    the day; ``vol_shift`` is added to every vol, decimal.
    """

    spot: Array
    forward: Array
    log_forward: Array
    discount: Array
    growth: Array
    tau_years: Array
    smile: SmileSlice
    vol_shift: float

    @property
    def root_tau(self) -> Array:
        """Square root of the years to expiry."""
        return np.sqrt(self.tau_years)

    def stdev(self, strike: Array) -> Array:
        """Total standard deviation at each strike, shape ``(leg, day)``."""
        return self.stdev_at(np.log(strike) - self.log_forward)

    def stdev_at(self, log_moneyness: Array) -> Array:
        """Total standard deviation at each ``ln(K/F)``; NaN where the shift leaves no vol."""
        stdev: Array = np.sqrt(self.smile.total_variance(log_moneyness))
        if self.vol_shift != 0.0:
            stdev = stdev + self.vol_shift * self.root_tau
            stdev[stdev <= 0.0] = np.nan
        return stdev

    def value_and_delta(self, strike: Array, signs: Array | float) -> tuple[Array, Array]:
        """Mid and spot delta, shape ``(leg, day)``; ``signs`` is +1 for a call, -1 for a put."""
        value, forward_delta = black_with_delta(
            self.forward, strike, np.log(strike) - self.log_forward, self.stdev(strike), np.asarray(signs)
        )
        return value * self.discount, forward_delta * self.growth

    def trading_cost(self, costs: Costs, mid: Array, strike: Array, signs: Array | float) -> Array:
        """Cost of trading one option: the largest of the three half-spreads, plus commission (C8).

        The half-spread in vol points is the rise in value when the option is repriced
        that much higher; bought and sold legs pay the same.
        """
        cost = np.full(mid.shape, costs.half_spread_min, dtype=np.float64)
        if costs.half_spread_percent > 0:
            np.maximum(cost, mid * (costs.half_spread_percent / 100.0), out=cost)
        if costs.half_spread_vol > 0:
            stdev = self.stdev(strike) + costs.half_spread_vol / 100.0 * self.root_tau
            bumped = black(self.forward, strike, stdev, signs)
            np.maximum(cost, bumped * self.discount - mid, out=cost)
        return cost + costs.commission / costs.multiplier
