"""States of the market at the opens of options, for tests of strike rules: from spot, rate, yield and vol by C5."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np
import numpy.typing as npt

from backtest import FLAT, Costs
from backtest.pricing.day_state import DayState
from backtest.strikes import LinkedOption, OpenState

Array = npt.NDArray[np.float64]


def open_state(
    *,
    spot: npt.ArrayLike,
    rate: npt.ArrayLike = 0.0,
    carry: npt.ArrayLike = 0.0,
    tau: npt.ArrayLike = 0.25,
    vol: npt.ArrayLike = 0.2,
    smile: Any = FLAT,
    vol_shift: float = 0.0,
    sign: float = -1.0,
    follows: npt.ArrayLike | None = None,
    linked: Mapping[int, LinkedOption] | None = None,
    costs: Costs | None = None,
    ratio: float = 1.0,
    months: float = 1.0,
) -> OpenState:
    """Rates and yields continuously compounded, vols at the money; each option but the first follows one."""
    given = _floats(np.atleast_1d(spot), rate, carry, tau, vol)
    s, r, q, t, sigma = (np.array(one) for one in np.broadcast_arrays(*given))
    forward = s * np.exp((r - q) * t)
    return OpenState(
        day=DayState(
            spot=s,
            forward=forward,
            log_forward=np.log(forward),
            discount=np.exp(-r * t),
            growth=np.exp(-q * t),
            tau_years=t,
            smile=smile.slice(sigma**2 * t),
            vol_shift=vol_shift,
        ),
        sign=sign,
        follows=np.arange(len(s)) > 0 if follows is None else np.asarray(follows, dtype=bool),
        linked={} if linked is None else linked,
        costs=costs,
        ratio=ratio,
        months=months,
    )


def linked_option(
    *,
    strike: npt.ArrayLike = 100.0,
    premium: npt.ArrayLike = 0.0,
    cost: npt.ArrayLike = 0.0,
    direction: float = 1.0,
    ratio: float = 1.0,
    months: float = 3.0,
) -> LinkedOption:
    """The option live in another leg: bought, three months from roll to roll, unless given."""
    arrays = (np.array(one) for one in np.broadcast_arrays(*_floats(np.atleast_1d(strike), premium, cost)))
    k, mid, half_spread = arrays
    return LinkedOption(strike=k, premium=mid, cost=half_spread, direction=direction, ratio=ratio, months=months)


def _floats(*values: npt.ArrayLike) -> list[Array]:
    return [np.asarray(value, dtype=np.float64) for value in values]
