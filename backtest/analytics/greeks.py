"""Gamma, vega, theta and rho of the whole package, day by day (C5, C7).

The greeks are those of the prices a replay is marked at, and sticky strike: each option has the vol of its own strike,
shifts included, and keeps it while spot, rate or time move. So they are those of Black, Scholes and Merton at that vol,
as ``Replay.delta`` is (C5), and what the smile would do to the vol of a strike when spot moves is in none of them.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

from ..engine.leg_replay import counted
from ..market import DAYS_IN_YEAR
from ..pricing.black import european

if TYPE_CHECKING:
    from ..engine.result import Replay

Array = npt.NDArray[np.float64]

#: One percent of spot, one vol point, one percentage point of rate.
ONE_PERCENT = 0.01


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Greeks:
    """Money per unit of wealth after each day's trades, of each leg, shape ``(leg, day)``; :meth:`package` adds up.

    Zero while a leg holds no option, NaN where wealth is. Spot, rate, dividend yield, vols and time are each moved
    alone. Times the wealth of the day it is money: on a million, a vega of -0.002 is a loss of 2,000 a point.

    Attributes
    ----------
    gamma : ndarray
        Change of the dollar delta when spot rises by 1%: ``0.01 * spot^2 * d2V/dS2 / wealth``. The shares that must be
        sold to have the delta of before are valued at the spot of the day, so a share by itself has none, though it
        is worth more after the rise. With ``delta``, a move of ``m`` percent brings about
        ``m/100 * (delta + gamma * m/2)`` of wealth.
    vega : ndarray
        Gain when the vol of every option rises by 1 point (0.01): ``0.01 * dV/dsigma / wealth``.
    theta : ndarray
        Gain by the passing of 1 calendar day: ``dV/dt / 365 / wealth``, the slope of the day and not the whole step,
        which differ in an option's last days. Interest on cash and dividends on the shares are not in it.
    rho : ndarray
        Gain when the continuously compounded rate rises by 1 percentage point (0.01), for all expiries alike and with
        the dividend yield as it is: ``0.01 * dV/dr / wealth``. The share has none, and neither has cash, which is
        lent overnight.
    """

    gamma: Array
    vega: Array
    theta: Array
    rho: Array

    def package(self) -> dict[str, Array]:
        """Each greek of all legs together by its name, shape ``(day,)``; shares and cash have none."""
        # a sold leg without any leaves a zero with a minus
        return {name: getattr(self, name).sum(axis=0) + 0.0 for name in ("gamma", "vega", "theta", "rho")}


def greeks_of(replay: Replay) -> Greeks:
    """The greeks of a replay, for every day; ``replay.greeks`` keeps them."""
    rate, carry = replay.market.rate[replay.window], replay.market.dividend_yield[replay.window]
    gamma, vega, theta, rho = found = np.zeros((4, len(replay.legs), len(replay)))
    for row, leg in enumerate(replay.legs):
        days, state = replay.held_days(row)
        strike, count = leg.daily_strike[days], leg.leg.direction * leg.count[days]
        option = european(
            spot=state.spot,
            strike=strike,
            tau_years=state.tau_years,
            rate=rate[days],
            dividend_yield=carry[days],
            vol_annual=state.stdev(strike) / state.root_tau,
            sign=leg.leg.sign,
        )
        gamma[row, days] = counted(count, option.gamma * state.spot**2 * ONE_PERCENT)
        vega[row, days] = counted(count, option.vega * ONE_PERCENT)
        theta[row, days] = counted(count, option.theta / DAYS_IN_YEAR)
        rho[row, days] = counted(count, option.rho * ONE_PERCENT)
    found /= replay.wealth
    return Greeks(gamma=gamma, vega=vega, theta=theta, rho=rho)
