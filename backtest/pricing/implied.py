"""The total standard deviation that a Black price implies, for arrays, to what the price can tell (C5).

Out-of-the-money form: by parity only the time value counts, and with ``x = -abs(ln(F/K))`` and the time value over
``sqrt(F K)`` one function of two numbers is left, the normalised Black price

``b(x, s) = exp(x/2) N(x/s + s/2) - exp(-x/2) N(x/s - s/2)``,  rising in ``s`` from 0 to ``exp(x/2)``.

It is computed without cancellation that matters, as in Jaeckel (2015, "Let's be rational", Wilmott; the ideas from
memory, not his code): by scaled complementary error functions, by their Taylor series where ``s`` is small and
``x`` near zero, and by what is missing to the upper bound where the price is near that. ``db/ds`` is a density
proportional to ``exp(-x^2/(2 s^2) - s^2/8)``, which is log-concave, so both ``ln b`` and ``ln(exp(x/2) - b)`` are
concave in ``s`` and Newton's steps on them come from one side. Three branches, each with the unknown in which its
function is all but straight:

- below the inflection ``sqrt(2 abs(x))``: ``ln b`` against ``1/s^2``,
- above it, up to half the bound: ``b`` against ``s``,
- beyond: ``ln(exp(x/2) - b)`` against ``s``.

Every step is kept inside a bracket that shrinks, and halves it where Newton leaves it.

Error: at most 25 roundings of ``s`` (two or three as a rule), plus ``uncertainty``: what the price's own rounding
(2.2e-16 of it, and ``price_error`` if given) leaves open, that over vega and ``s``. For a price out of the money it is
2.2e-16 or less, and more only towards the upper bound; deep in the money the time value is a small difference of large
numbers, and it says how many digits are left.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from enum import IntEnum

import numpy as np
import numpy.typing as npt
from scipy.special import erfcx

Array = npt.NDArray[np.float64]
Flags = npt.NDArray[np.bool_]

EPSILON = float(np.finfo(np.float64).eps)
#: A time value of fewer roundings of its price than this tells nothing.
ROUNDINGS = 4.0
MOST_STEPS = 60
#: A Newton step this small, relative, leaves its square: the next would be rounding.
NEWTON_SETTLED = 1e-9
ROOT_HALF, ROOT_HALF_PI, ROOT_TWO_PI = 0.5**0.5, (0.5 * np.pi) ** 0.5, (2.0 * np.pi) ** 0.5


class ImpliedStatus(IntEnum):
    """What a price tells."""

    OK = 0
    BELOW_INTRINSIC = 1
    ABOVE_BOUND = 2  #: at or over the forward of a call, the strike of a put: no vol is high enough
    NO_TIME_VALUE = 3  #: intrinsic, as far as its digits go: any low vol gives it
    MISSING = 4  #: an argument is NaN, infinite, or not positive where it has to be


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class ImpliedStdev:
    """Implied total standard deviations, shape of the inputs.

    ``total_stdev`` is ``sigma * sqrt(tau)``: zero where no time value is left to tell, NaN where ``status`` is
    another than these two. ``uncertainty`` is its relative error from the rounding of the price.
    """

    total_stdev: Array
    uncertainty: Array
    status: npt.NDArray[np.int8]

    @property
    def ok(self) -> Flags:
        """Where a vol is implied."""
        return self.status == ImpliedStatus.OK

    def vol_annual(self, tau_years: npt.ArrayLike) -> Array:
        """Annual vol, decimal; NaN where no time is left."""
        tau = np.asarray(tau_years, dtype=np.float64)
        return self.total_stdev / np.sqrt(np.where(tau > 0.0, tau, np.nan))


def implied_stdev(
    price: npt.ArrayLike,
    forward: npt.ArrayLike,
    strike: npt.ArrayLike,
    sign: npt.ArrayLike,
    *,
    discount: npt.ArrayLike = 1.0,
    price_error: npt.ArrayLike = 0.0,
) -> ImpliedStdev:
    """Total standard deviation at which Black's formula gives a price; all arguments broadcast.

    Parameters
    ----------
    price : array_like
        Undiscounted, or discounted by ``discount``.
    forward, strike : array_like
        Positive.
    sign : array_like
        +1 for a call, -1 for a put.
    discount : array_like
        What one paid at expiry is worth now.
    price_error : array_like
        How far the price may be off, in its own units (half a tick, say); its own rounding is always allowed for.

    Examples
    --------
    >>> found = implied_stdev([7.965567455405804, 30.0, 29.0, 131.0], [100, 130, 130, 130], 100, 1)
    >>> found.total_stdev.round(12).tolist(), [ImpliedStatus(s).name for s in found.status]
    ([0.2, 0.0, nan, nan], ['OK', 'NO_TIME_VALUE', 'BELOW_INTRINSIC', 'ABOVE_BOUND'])
    """
    arguments = (price, forward, strike, sign, discount, price_error)
    p, f, k, sgn, df, error = np.broadcast_arrays(*(np.asarray(a, dtype=np.float64) for a in arguments))
    given = np.isfinite(p + f + k + sgn + df + error) & (f > 0.0) & (k > 0.0) & (df > 0.0) & (np.abs(sgn) == 1.0)
    p, error = (np.divide(a, df, out=np.full(a.shape, np.nan), where=given) for a in (p, error))
    intrinsic = np.maximum(sgn * (f - k), 0.0)
    time_value, to_bound = p - intrinsic, np.where(sgn > 0.0, f, k) - p
    rounding = EPSILON * np.abs(p) + error
    # out of the money a price has all its digits; in the money they are those of the larger intrinsic
    unreadable = np.where(intrinsic > 0.0, ROUNDINGS * EPSILON * np.abs(p), 0.0) + error
    conditions = (
        (~given, ImpliedStatus.MISSING),
        (time_value < -(ROUNDINGS * EPSILON * np.maximum(f, k) + error), ImpliedStatus.BELOW_INTRINSIC),
        (to_bound <= 0.0, ImpliedStatus.ABOVE_BOUND),
        (time_value <= unreadable, ImpliedStatus.NO_TIME_VALUE),
    )
    status = np.select([c for c, _ in conditions], [int(s) for _, s in conditions], int(ImpliedStatus.OK))
    stdev = np.where(status == ImpliedStatus.NO_TIME_VALUE, 0.0, np.nan)
    uncertainty = np.full(p.shape, np.nan)
    ok = status == ImpliedStatus.OK
    if ok.any():
        f, k = f[ok], k[ok]
        scale = np.sqrt(f) * np.sqrt(k)
        apart = (f - k) / k
        near = np.abs(apart) < 0.5  # log1p keeps the digits of a strike next to the forward
        x = -np.abs(np.where(near, np.log1p(np.where(near, apart, 0.0)), np.log(f) - np.log(k)))
        stdev[ok] = _solve(x, time_value[ok] / scale, to_bound[ok] / scale)
        vega = np.exp(_log_density(x, stdev[ok])) * scale
        with np.errstate(divide="ignore", over="ignore"):
            uncertainty[ok] = rounding[ok] / (vega * stdev[ok])
    return ImpliedStdev(total_stdev=stdev, uncertainty=uncertainty, status=status.astype(np.int8))


def _solve(x: Array, value: Array, to_bound: Array) -> Array:
    """``s`` with ``b(x, s) = value``; ``to_bound`` is ``exp(x/2) - value``, given because it has more digits."""
    inflection = np.sqrt(-2.0 * x)
    at_inflection = np.zeros(x.shape)
    away = x < 0.0
    at_inflection[away] = np.exp(_log_value(x[away], inflection[away]))
    low = value < at_inflection
    high = ~low & (value > to_bound)
    found = np.empty(x.shape)
    for branch, function, start in (
        (low, _low, inflection),
        (~low & ~high, _middle, inflection),
        (high, _high, np.maximum(inflection, 1.0)),
    ):
        target = to_bound[branch] if function is _high else value[branch]
        # with d1 at 40 deviations nothing is left to the bound, so no s is larger than this
        most = 40.0 + np.sqrt(1600.0 - 2.0 * x[branch])
        least = np.zeros(most.shape) if function is _low else inflection[branch]
        upper = inflection[branch] if function is _low else most
        found[branch] = _newton(function, x[branch], target, least, start[branch], upper)
    return found


#: Difference to the target (rising in s) and the next s by Newton's step.
Step = Callable[[Array, Array, Array], tuple[Array, Array]]


def _newton(step: Step, x: Array, target: Array, low: Array, s: Array, high: Array) -> Array:
    """Newton's steps kept in a bracket until they are roundings of ``s``."""
    found, left = s.copy(), np.arange(len(s))
    s = np.where(s > 0.0, s, ROOT_TWO_PI * target)  # at the money: slope at zero
    for _ in range(MOST_STEPS):
        if not len(left):
            break
        difference, following = step(x, target, s)
        low, high = np.where(difference < 0.0, s, low), np.where(difference > 0.0, s, high)
        inside = (following >= low) & (following <= high)
        following = np.where(difference == 0.0, s, np.where(inside, following, 0.5 * (low + high)))
        found[left] = following
        on = np.abs(following - s) > NEWTON_SETTLED * s
        left, x, target, s = left[on], x[on], target[on], following[on]
        low, high = low[on], high[on]
    return found


def _low(x: Array, target: Array, s: Array) -> tuple[Array, Array]:
    log_value = _log_value(x, s)
    difference = log_value - np.log(target)
    slope = -0.5 * s**3 * np.exp(_log_density(x, s) - log_value)  # by 1/s^2
    with np.errstate(invalid="ignore"):  # a step beyond 1/s^2 = 0 is NaN, and halved
        return difference, 1.0 / np.sqrt(1.0 / s**2 - difference / slope)


def _middle(x: Array, target: Array, s: Array) -> tuple[Array, Array]:
    difference = np.exp(_log_value(x, s)) - target
    return difference, s - difference / np.exp(_log_density(x, s))


def _high(x: Array, target: Array, s: Array) -> tuple[Array, Array]:
    h, t = x / s, 0.5 * s
    log_density = _log_density(x, s)
    mills = _mills(-(h + t)) + _mills(h - t)  # what is missing to the bound, over the density
    difference = np.log(target) - log_density - np.log(mills)
    return difference, s - difference * mills


def _mills(z: Array) -> Array:
    """``N(z) / n(z)``."""
    return ROOT_HALF_PI * erfcx(-ROOT_HALF * z)


def _log_density(x: Array, s: Array) -> Array:
    """Logarithm of ``db/ds``."""
    return -0.5 * ((x / s) ** 2 + (0.5 * s) ** 2) - np.log(ROOT_TWO_PI)


def _log_value(x: Array, s: Array) -> Array:
    """Logarithm of ``b(x, s)``, for ``s`` up to a few; ``b`` is the density times a difference of Mills ratios."""
    h, t = x / s, 0.5 * s
    ratio = np.empty(s.shape)
    # apart, the two ratios lose 1e-16 / (s Y'), at most a few roundings of s but here
    near = (s < 0.5) & (x > -0.5)
    far = ~near
    ratio[far] = _mills(h[far] + t[far]) - _mills(h[far] - t[far])
    ratio[near] = _mills_difference(h[near], t[near])
    return _log_density(x, s) + np.log(ratio)


def _mills_difference(h: Array, t: Array) -> Array:
    """``Y(h + t) - Y(h - t)`` by Taylor's series in ``t``, up to 1/4: ``Y' = 1 + h Y``, ``Y'' = Y + h Y'`` and on."""
    even = _mills(h)
    odd = 1.0 + h * even
    total, power = odd.copy(), np.ones(t.shape)
    for n in range(1, 17, 2):
        even = n * even + h * odd
        odd = (n + 1) * odd + h * even
        power = power * t * t / ((n + 1) * (n + 2))
        total += odd * power
    return 2.0 * t * total
