"""Undiscounted Black in forward and total standard deviation, broadcasting.

Three layers that never merge: :func:`black` is the formula (no rates, no
dates), :func:`black_with_delta` shares its intermediate values with the delta,
and :func:`european` puts spot, rate, yield and vol into it (C5) and adds the
other greeks.

Sources: Black (1976), "The pricing of commodity contracts"; Merton (1973),
"Theory of rational option pricing".
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
import numpy.typing as npt
from scipy.special import ndtr

Array = npt.NDArray[np.float64]

#: Stands in for a total standard deviation of zero: d1 and d2 become huge (or zero at the money), so
#: that the formula itself gives the intrinsic value instead of 0/0.
SMALLEST_STDEV = 1e-300

#: +1 for a call, -1 for a put: the one place where a right becomes a sign.
RIGHT_SIGN = {"call": 1.0, "put": -1.0}


def black(forward: npt.ArrayLike, strike: npt.ArrayLike, total_stdev: npt.ArrayLike, sign: npt.ArrayLike) -> Array:
    """Undiscounted Black (1976) value.

    Parameters
    ----------
    forward, strike : array_like
        Positive, broadcast together.
    total_stdev : array_like
        ``sigma * sqrt(tau)``; zero gives the intrinsic value.
    sign : array_like
        +1 for a call, -1 for a put.

    Examples
    --------
    >>> round(float(black(100.0, 100.0, 0.2, 1.0)), 6)
    7.965567
    """
    forward = np.asarray(forward, dtype=np.float64)
    strike = np.asarray(strike, dtype=np.float64)
    total_stdev = np.asarray(total_stdev, dtype=np.float64)
    sign = np.asarray(sign, dtype=np.float64)
    value, _ = black_with_delta(forward, strike, np.log(strike / forward), total_stdev, sign)
    return value


def black_with_delta(
    forward: Array,
    strike: Array,
    log_moneyness: Array,
    total_stdev: Array,
    sign: Array,
) -> tuple[Array, Array]:
    """Undiscounted value and forward delta, sharing d1.

    ``log_moneyness`` is ``ln(K/F)``: the engine has it at hand as a difference of
    two logarithms, which spares one logarithm a value.

    Returns
    -------
    value, delta : ndarray
        ``sign (F N(sign d1) - K N(sign d2))`` and ``sign N(sign d1)``, broadcast shape.
    """
    stdev = np.maximum(total_stdev, SMALLEST_STDEV)
    d1 = 0.5 * stdev - log_moneyness / stdev
    d2 = d1 - stdev
    delta = ndtr(d1 * sign)
    delta *= sign
    exercised = ndtr(d2 * sign)
    exercised *= sign
    exercised *= strike
    value = delta * forward
    value -= exercised
    return value, delta


class EuropeanValues(NamedTuple):
    """Value and greeks of a European option, each with the broadcast shape of the inputs.

    ``vega`` and ``rho`` are per unit (1.00) of vol and rate, ``theta`` is per year.
    """

    value: Array
    delta: Array
    gamma: Array
    vega: Array
    theta: Array
    rho: Array


def european(
    *,
    spot: npt.ArrayLike,
    strike: npt.ArrayLike,
    tau_years: npt.ArrayLike,
    rate: npt.ArrayLike,
    dividend_yield: npt.ArrayLike,
    vol_annual: npt.ArrayLike,
    sign: npt.ArrayLike,
) -> EuropeanValues:
    """Generalised Black-Scholes-Merton value and greeks (C5).

    Parameters
    ----------
    spot, strike : array_like
        Positive.
    tau_years : array_like
        Years to expiry, at least zero; at zero the value is intrinsic.
    rate, dividend_yield : array_like
        Continuously compounded, annual.
    vol_annual : array_like
        Decimal, at least zero.
    sign : array_like
        +1 for a call, -1 for a put.

    Examples
    --------
    A European put on a stock index, Haug, *The Complete Guide to Option Pricing Formulas*:

    >>> put = european(spot=100, strike=95, tau_years=0.5, rate=0.10, dividend_yield=0.05,
    ...                vol_annual=0.20, sign=-1)
    >>> round(float(put.value), 4)
    2.4648
    """
    s, k, tau, r, q, vol, sgn = (
        np.asarray(a, dtype=np.float64) for a in (spot, strike, tau_years, rate, dividend_yield, vol_annual, sign)
    )
    growth, discount = np.exp(-q * tau), np.exp(-r * tau)
    forward = s * growth / discount
    root_tau = np.sqrt(tau)
    stdev = np.maximum(vol * root_tau, SMALLEST_STDEV)
    log_moneyness = np.log(k / forward)
    undiscounted, forward_delta = black_with_delta(forward, k, log_moneyness, stdev, sgn)
    d1 = 0.5 * stdev - log_moneyness / stdev
    # beyond 38 deviations the density is zero in double precision; capping spares an overflow in the square
    density = np.exp(-0.5 * np.minimum(np.abs(d1), 40.0) ** 2) / np.sqrt(2.0 * np.pi)
    value = discount * undiscounted
    delta = growth * forward_delta
    gamma = growth * density / (s * stdev)
    vega = s * growth * density * root_tau
    strike_part = delta * s - value  # sign * K * discount * N(sign d2)
    decay = np.divide(
        s * growth * density * vol,
        2.0 * root_tau,
        out=np.zeros(np.shape(s * density * vol * root_tau)),
        where=root_tau > 0,
    )
    theta = -decay - r * strike_part + q * s * delta
    rho = tau * strike_part
    return EuropeanValues(value, delta, gamma, vega, theta, rho)
