"""Smiles: SSVI, the flat smile, and the conversion of a variance-swap quote (C7).

A smile turns the at-the-money total variance ``theta = sigma_atm^2 tau`` into the
total variance at log-moneyness ``x = ln(K/F)``. It is used in two steps, because
the first is shared by all legs with the same dates: ``smile.slice(theta)`` works
out what depends on the day alone, ``.total_variance(x)`` what depends on the strike.

Sources: Gatheral and Jacquier (2014), "Arbitrage-free SVI volatility surfaces";
Demeterfi, Derman, Kamal and Zou (1999), "More than you ever wanted to know about
volatility swaps", for the fair variance.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import lru_cache
from typing import Protocol

import numpy as np
import numpy.typing as npt
from scipy.interpolate import BSpline, make_interp_spline

from ..arguments import number
from ..errors import OverlayError
from ..pricing.black import black

Array = npt.NDArray[np.float64]

#: Stands in for a total variance of zero, small enough to change nothing and large enough to divide by.
SMALLEST_VARIANCE = 1e-280


class SmileSlice(Protocol):
    """A smile with its days fixed."""

    def total_variance(self, log_moneyness: Array) -> Array:
        """Total variance at ``ln(K/F)``, broadcast against the days of the slice."""
        ...


class Smile(Protocol):
    """What the engine asks of a smile."""

    @property
    def name(self) -> str:
        """The word used for it in files and reports."""
        ...

    def slice(self, theta: Array) -> SmileSlice:
        """Fix the at-the-money total variances."""
        ...

    def atm_variance_of_swap(self, swap_variance: Array) -> Array:
        """At-the-money total variance whose smile has the given total fair variance."""
        ...


@dataclass(frozen=True, slots=True)
class _FlatSlice:
    theta: Array

    def total_variance(self, log_moneyness: Array) -> Array:
        return np.broadcast_to(self.theta, np.broadcast_shapes(self.theta.shape, log_moneyness.shape))


@dataclass(frozen=True, slots=True)
class FlatSmile:
    """The same volatility at every strike."""

    @property
    def name(self) -> str:
        """``"flat"``."""
        return "flat"

    def slice(self, theta: Array) -> SmileSlice:
        """Fix the at-the-money total variances, any shape."""
        return _FlatSlice(np.maximum(theta, SMALLEST_VARIANCE))

    def atm_variance_of_swap(self, swap_variance: Array) -> Array:
        """Under a flat smile the fair variance is the variance itself."""
        return np.asarray(swap_variance, dtype=np.float64)


@dataclass(frozen=True, slots=True)
class _SSVISlice:
    half_theta: Array
    phi: Array
    rho: float

    def total_variance(self, log_moneyness: Array) -> Array:
        scaled = log_moneyness * self.phi
        shifted = scaled + self.rho
        shifted *= shifted
        shifted += 1.0 - self.rho * self.rho
        shifted = np.sqrt(shifted)
        scaled *= self.rho
        shifted += scaled
        shifted += 1.0
        shifted *= self.half_theta
        return shifted


@dataclass(frozen=True, slots=True, kw_only=True)
class SSVISmile:
    """Surface SVI of Gatheral and Jacquier (2014) with the power-law ``phi`` of C7.

    ``phi = eta / (theta^gamma (1 + theta)^(1 - gamma))`` and
    ``w(x) = theta/2 (1 + rho phi x + sqrt((phi x + rho)^2 + 1 - rho^2))``.

    Raises
    ------
    OverlayError
        Unless ``|rho| < 1``, ``eta > 0``, ``0 < gamma <= 1/2`` and ``eta (1 + |rho|) <= 2``,
        which together exclude static arbitrage (their Corollary 4.1 and Remark 4.4).

    Examples
    --------
    >>> smile = SSVISmile(rho=-0.6, eta=1.1, gamma=0.5)
    >>> theta = np.array(0.2**2 * 0.25)  # 20 vol, three months
    >>> w = smile.slice(theta).total_variance(np.log(np.array([0.9, 1.0, 1.1])))
    >>> (np.sqrt(w / 0.25) * 100).round(2)
    array([26.9 , 20.  , 16.05])
    """

    rho: float
    eta: float
    gamma: float

    def __post_init__(self) -> None:
        for name in ("rho", "eta", "gamma"):
            number(name, getattr(self, name), least=-1e6, most=1e6)
        if not abs(self.rho) < 1:
            raise OverlayError(f"rho is {self.rho:g}; a smile takes rho above -1 and below 1", field="smile")
        if not self.eta > 0:
            raise OverlayError(
                f"eta is {self.eta:g}; a smile takes eta above 0 (use the flat smile for none)", field="smile"
            )
        if not 0 < self.gamma <= 0.5:
            raise OverlayError(f"gamma is {self.gamma:g}; a smile takes gamma above 0 and at most 0.5", field="smile")
        slope = self.eta * (1 + abs(self.rho))
        if slope > 2:
            raise OverlayError(
                f"eta (1 + |rho|) is {slope:.4g}; a smile takes at most 2, above it the wings allow arbitrage",
                field="smile",
            )

    @property
    def name(self) -> str:
        """The ladder's word for it, or its parameters."""
        for name, smile in SMILE_LADDER.items():
            if smile == self:
                return name
        return f"rho {self.rho:g}, eta {self.eta:g}, gamma {self.gamma:g}"

    def slice(self, theta: Array) -> SmileSlice:
        """Fix the at-the-money total variances, any shape."""
        theta = np.maximum(theta, SMALLEST_VARIANCE)
        if self.gamma == 0.5:
            phi = self.eta / np.sqrt(theta * (1.0 + theta))
        else:
            phi = self.eta / (theta**self.gamma * (1.0 + theta) ** (1.0 - self.gamma))
        return _SSVISlice(half_theta=0.5 * theta, phi=phi, rho=float(self.rho))

    def atm_variance_of_swap(self, swap_variance: Array) -> Array:
        """At-the-money total variance whose smile has the given total fair variance.

        One table per smile serves every day and tenor, since the fair total variance
        is an increasing function of ``theta`` alone; the table is read with a quintic
        spline in logarithms (relative error under 1e-12 for the ladder, up to 5e-9 as rho nears -1 or 1).

        Parameters
        ----------
        swap_variance : ndarray
            ``quote^2 tau`` at the quote's own tenor; any shape, NaN passes through.
        """
        swap_variance = np.asarray(swap_variance, dtype=np.float64)
        log_swap = np.log(np.maximum(swap_variance, SMALLEST_VARIANCE))
        return swap_variance * np.exp(_swap_table(self)(np.maximum(log_swap, _LOG_THETA[0])))


FLAT = FlatSmile()
MILD = SSVISmile(rho=-0.60, eta=0.55, gamma=0.50)
INDEX = SSVISmile(rho=-0.60, eta=1.10, gamma=0.50)
STEEP = SSVISmile(rho=-0.75, eta=1.14, gamma=0.50)

#: The standing ladder of C7, from the smile that flatters a put-bought, call-sold overlay most to the harshest.
SMILE_LADDER: dict[str, FlatSmile | SSVISmile] = {"flat": FLAT, "mild": MILD, "index": INDEX, "steep": STEEP}

# 1e-10 is below one day at 1% vol, 100 above ten years at 300%
_LOG_THETA = np.linspace(math.log(1e-10), math.log(100.0), 801)
# Half-width of the integration in at-the-money deviations: beyond it the price of any admissible wing is below 1e-16
_WIDEST = 160.0
_NODES, _WEIGHTS = np.polynomial.legendre.leggauss(120)


def fair_variance(smile: Smile, theta: npt.ArrayLike) -> Array:
    """Total fair variance ``2 * integral of out-of-the-money price / K^2 dK``, undiscounted with F = 1 (C7).

    Parameters
    ----------
    smile : Smile
    theta : array_like
        At-the-money total variance, positive; any shape.

    Notes
    -----
    In ``x = ln K`` the integrand is price times ``exp(-x)``. Each side of the money
    is integrated by Gauss-Legendre after ``x = sqrt(theta) sinh(u)``, which spreads
    the nodes evenly over core and wing.

    Examples
    --------
    >>> float(fair_variance(FLAT, 0.04).round(12))
    0.04
    """
    theta = np.asarray(theta, dtype=np.float64)[..., np.newaxis]
    widest = math.asinh(_WIDEST)
    u = 0.5 * widest * (_NODES + 1.0)
    width = np.sqrt(theta)
    total = np.zeros(theta.shape[:-1])
    for sign in (1.0, -1.0):
        # at 700 the price is zero in double precision for every admissible smile, and exp(x) still finite
        x = sign * np.minimum(width * np.sinh(u), 700.0)
        stdev = np.sqrt(smile.slice(theta).total_variance(x))
        # price / K: a put is N(-d2) - N(-d1)/K, a call N(d1)/K - N(d2); scaling both forward and strike by 1/K
        price_over_strike = black(np.exp(-x), 1.0, stdev, sign)
        weights = 0.5 * widest * _WEIGHTS * width * np.cosh(u)
        total = total + 2.0 * (price_over_strike * weights).sum(axis=-1)
    return total


@lru_cache(maxsize=64)
def _swap_table(smile: SSVISmile) -> BSpline:
    """Spline of ``ln(theta / fair variance)`` against ``ln(fair variance)``."""
    log_fair = np.log(fair_variance(smile, np.exp(_LOG_THETA)))
    return make_interp_spline(log_fair, _LOG_THETA - log_fair, k=5)
