"""Daily attribution into passive equity, equity timing, volatility and cost (C12).

After Israelov and Nielsen (2015), "Covered calls uncovered", Financial Analysts
Journal 71(6). All parts are in units of the previous day's wealth and sum to the
excess return of every day at machine precision.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from ..engine.result import Replay
from ..volatility.realised import TRADING_DAYS
from .performance import daily_excess

Array = npt.NDArray[np.float64]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Attribution:
    """Parts of the excess return, each of shape ``(day - 1,)``; ``volatility`` is ``(leg, day - 1)``.

    ``cost`` is negative. The first day's trading cost is charged, with its financing, to the first return.
    """

    excess: Array
    passive_equity: Array
    equity_timing: Array
    volatility: Array
    cost: Array
    labels: tuple[str, ...]

    def parts(self) -> dict[str, Array]:
        """Every part by name, ``volatility_<leg>`` per leg, then the whole as ``excess_return``."""
        parts = {"passive_equity": self.passive_equity, "equity_timing": self.equity_timing}
        parts |= {f"volatility_{label}": part for label, part in zip(self.labels, self.volatility, strict=True)}
        return parts | {"cost": self.cost, "excess_return": self.excess}

    def annual(self) -> dict[str, float]:
        """Mean of each part times 252."""
        return {name: float(np.mean(part) * TRADING_DAYS) for name, part in self.parts().items()}

    def risk_shares(self) -> dict[str, float]:
        """Share of each part in the variance of the whole; the parts sum to one (NaN where nothing varies)."""
        return {name: self.risk_share(part) for name, part in self.parts().items()}

    def risk_share(self, part: Array) -> float:
        """Covariance of a part with the excess return over the variance of that, as parts of a sum share its risk."""
        whole = self.excess - np.mean(self.excess)
        variance = float(np.mean(whole**2))
        return float(np.mean(part * whole) / variance) if variance > 0 else float("nan")


def attribute(replay: Replay) -> Attribution:
    """Split every day's excess return of a replay as C12 says."""
    rate = replay.rate_return[1:]
    hold_excess = daily_excess(replay.hold, replay.rate_return)
    before = replay.wealth[:-1]
    delta = replay.delta[:-1]
    leg_profit = replay.leg_profit[:, 1:] / before
    leg_value = replay.leg_value[:, :-1] / before
    volatility = leg_profit - rate * leg_value - replay.leg_dollar_delta[:, :-1] * hold_excess
    cost = (replay.trading_cost[1:] + replay.borrow_charge[1:]) / before
    # the first wealth is counted before its trades: their cost is missing from the money at work on the next day
    cost[0] += replay.trading_cost[0] * (1.0 + rate[0]) / before[0]
    mean_delta = np.mean(delta)
    return Attribution(
        excess=daily_excess(replay.wealth, replay.rate_return),
        passive_equity=mean_delta * hold_excess,
        equity_timing=(delta - mean_delta) * hold_excess,
        volatility=volatility,
        cost=-cost,
        labels=tuple(leg.label for leg in replay.legs),
    )
