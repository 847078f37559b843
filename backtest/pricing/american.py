"""American options on a share with known cash dividends, many at once, and when they are exercised early (C5).

Treatment
---------
Escrowed dividends (Hull, *Options, Futures, and Other Derivatives*, trees with known dollar dividends; from memory).
At ``t`` the share is worth ``S* + sum of D_i exp(-(r - q) (t_i - t))`` over the known dividends that go ex after ``t``
and up to expiry, the day itself included. ``S*`` carries the vol and grows at ``r - q``; European values are Black's on
its forward ``S* exp((r - q) tau)``, which is the share's. A dividend is discounted at ``r - q``, as the whole share
pays the yield. Exercise compares with the whole share: a call exercised just before ``t_i`` still receives ``D_i``, a
put exercised just after delivers a share without it. Both can be exercised at any time, and exactly at each ex-date.
Time runs from close to close (C1), so "just before" is the close of the ex-date but for the drop: a holder who has to
act by the close of the eve loses a day's interest on the strike.

An option that is never exercised early is Black's formula and nothing else: a call at ``r >= 0`` and ``q <= 0`` of
which no dividend exceeds ``K (1 - exp(-r dt))``, ``dt`` the years to the next one or to expiry (Hull, from memory); a
put at ``r <= 0`` and ``q >= 0``.

Method
------
One for all the others: two lattices of seven branches, extrapolated (``lattice.py``). In the share's own deviations all
options have the same nodes, and a step is a few operations on whole arrays. A Leisen-Reimer tree cannot put its
steps on ex-dates, which are others every day; exercise seen a step early or late is worth a step's interest on the
strike, 0.05 of 100 at 5% and a hundred steps a year. Finite differences can, but solve a system a step, node after
node, and have the same trouble with the kink where exercise begins.

Error
-----
In millionths of the strike: the middle one, root mean square, worst. Random options with spot at 80 to 120% of strike,
1 day to 2 years (evenly in logarithm), vol 10 to 60%, rate -1 to 10%, yield 0 or up to 8%, without dividends (432)
and with one to four of 0.1 to 3% of the strike (554), as far as they may be exercised early. Expected values without
dividends are QuantLib's ``QdFpAmericanEngine`` (high precision), with them the lattice at 1,024 steps, which
differs from the former by 0.7 at most where it can be compared, and from QuantLib's escrowed finite differences,
extrapolated from 200 and 400 steps, by 0.9.

===========================================  ===================  ===================
method                                       no dividends         one to four
===========================================  ===================  ===================
lattice, 32 steps                            0.02    5.2     67   0.14    6.6     58
**lattice, 64 steps, the one used**          0.01    1.8     19   0.05    2.3     19
lattice, 128 steps                           0.00    0.9      9   0.01    0.8      5
Leisen-Reimer, 101 steps                     0.39   29.3    258   4.31   66.1    559
Leisen-Reimer, 51 and 101, extrapolated      0.20   12.0    229   1.78   80.6    648
Leisen-Reimer, 2,001 steps                   0.01    1.4     10   0.24    3.3     28
===========================================  ===================  ===================

Delta, the slope of the same lattice, is off by 0.0002 (root mean square), in one case of a hundred by more than 0.0003,
at worst by 0.003. The error is largest at the price at which exercise begins (of 3,000 without dividends the worst is
31, and 0.008 in delta), most of all when a share near that price goes ex within days while expiry is far, as then a
step is long beside the days (of 3,000 with an ex-date in one to three days the root mean square is 4 and 0.0003, one in
a thousand is off by more than 56 and 0.003, the worst by 81 and 0.015). Beyond these ranges, vol 5% and a rate of 19%
for years, say, more steps are needed: a step's drift should not exceed its deviation by much. Gamma, from the same
nodes, costs nothing and is the least exact.

5,000 daily marks of a leg, up to a year to go, take 0.4 s on one core
(``tests/benchmarks/test_american_speed.py``).
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import partial

import numpy as np
import numpy.typing as npt

from .black import SMALLEST_STDEV, black_with_delta
from .lattice import Contracts, held

Array = npt.NDArray[np.float64]
Flags = npt.NDArray[np.bool_]

#: Steps of the finer of the two lattices.
STEPS = 64
#: Options that go through the lattice together: their nodes fit a processor's second-level cache.
TOGETHER = 512
#: A lattice needs some vol to stand on.
LEAST_STDEV = 1e-6


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class CashDividends:
    """The dividends known on each day, shapes broadcast to ``(day, dividend)``.

    ``years`` is the time from the day to the ex-date; what is not after the day, or after expiry, does not count.
    ``amounts`` are cash a share, as known on that day, so that a later announcement changes no earlier row; zero or NaN
    stands for none.
    """

    years: Array
    amounts: Array

    @classmethod
    def on_days(cls, *, ex_days: npt.ArrayLike, amounts: npt.ArrayLike, today: npt.ArrayLike) -> CashDividends:
        """From day numbers: ``ex_days`` ``(dividend,)``, ``amounts`` that or ``(day, dividend)``, ``today`` ``(day,)``.

        >>> known = CashDividends.on_days(ex_days=[105, 196], amounts=[0.5, 0.6], today=[100, 104, 105])
        >>> (known.years * 365).round().tolist()
        [[5.0, 96.0], [1.0, 92.0], [0.0, 91.0]]
        """
        days = np.asarray(ex_days, dtype=np.float64) - np.asarray(today, dtype=np.float64)[..., None]
        return cls(years=days / 365.0, amounts=np.asarray(amounts, dtype=np.float64))


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class AmericanValues:
    """Value and greeks by the spot, and ``held``, the value to one who does not exercise now; shape of the inputs."""

    value: Array
    delta: Array
    gamma: Array
    held: Array


def american(
    *,
    spot: npt.ArrayLike,
    strike: npt.ArrayLike,
    tau_years: npt.ArrayLike,
    rate: npt.ArrayLike,
    dividend_yield: npt.ArrayLike,
    total_stdev: npt.ArrayLike,
    sign: npt.ArrayLike,
    dividends: CashDividends | None = None,
    steps: int = STEPS,
) -> AmericanValues:
    """Value, delta and gamma; all arguments broadcast, dividends with one axis more.

    Parameters
    ----------
    spot, strike : array_like
        Positive. ``spot`` is the price on the day, ex what goes ex on it.
    tau_years : array_like
        Years to expiry, at least zero; at zero the value is intrinsic.
    rate, dividend_yield : array_like
        Continuously compounded, annual; the yield is paid beside the dividends.
    total_stdev : array_like
        ``sigma * sqrt(tau)`` of the share without the dividends known.
    sign : array_like
        +1 for a call, -1 for a put.
    dividends : CashDividends, optional
        Their worth must be less than the share's.
    steps : int
        Of the finer lattice.

    Returns
    -------
    AmericanValues
        NaN where an argument is. Never below the European value or intrinsic.

    Examples
    --------
    >>> put = american(spot=40, strike=45, tau_years=0.5833, rate=0.0488, dividend_yield=0,
    ...                total_stdev=0.4 * 0.5833**0.5, sign=-1)
    >>> round(float(put.value), 3)
    7.383
    """
    arguments = _together(dividends, spot, strike, tau_years, rate, dividend_yield, total_stdev, sign)
    shape = arguments[0].shape
    s, k, tau, r, q, stdev, sgn = (a.ravel() for a in arguments)
    ex_years, amounts = _in_the_life(dividends, shape, tau)
    escrowed = s.copy()
    for known, ex in zip(amounts.T, ex_years.T):  # one by one: what is known of others must not change a rounding
        escrowed -= known * np.exp(-(r - q) * ex)
    if (escrowed <= 0.0).any():
        first = int(np.argmax(escrowed <= 0.0))
        raise ValueError(f"the dividends known in option {first} are worth more than its share of {s[first]:g}")

    growth, discount = np.exp(-q * tau), np.exp(-r * tau)
    forward = escrowed * growth / discount
    small = np.maximum(stdev, SMALLEST_STDEV)
    log_moneyness = np.log(k / forward)
    undiscounted, forward_delta = black_with_delta(forward, k, log_moneyness, small, sgn)
    value, delta = discount * undiscounted, growth * forward_delta
    d1 = 0.5 * small - log_moneyness / small
    gamma = growth * np.exp(-0.5 * np.minimum(np.abs(d1), 40.0) ** 2) / (np.sqrt(2.0 * np.pi) * escrowed * small)

    early = np.isfinite(value) & (tau > 0.0) & ~_never_early(k, tau, r, q, sgn, ex_years, amounts)
    if early.any():
        some = Contracts(
            spot=escrowed[early], strike=k[early], tau_years=tau[early], rate=r[early], dividend_yield=q[early],
            total_stdev=np.maximum(stdev[early], LEAST_STDEV), sign=sgn[early],
            ex_years=ex_years[early], dividends=amounts[early],
        )  # fmt: skip
        found = held(some, steps=steps, together=TOGETHER)
        more = found.value > value[early]  # where early exercise is worth less than the lattice's error, it may not be
        value[early] = np.where(more, found.value, value[early])
        delta[early] = np.where(more, found.delta, delta[early])
        gamma[early] = np.where(more, found.gamma, gamma[early])
    intrinsic = sgn * (s - k)
    exercised = (early | (tau <= 0.0)) & (intrinsic >= value) & (intrinsic > 0.0)
    parts = (
        np.where(exercised, intrinsic, value),
        np.where(exercised, sgn, delta),
        np.where(exercised, 0.0, gamma),
        value,
    )
    return AmericanValues(**dict(zip(("value", "delta", "gamma", "held"), (a.reshape(shape) for a in parts))))


def american_value_and_delta(
    spot: npt.ArrayLike,
    strike: npt.ArrayLike,
    tau_years: npt.ArrayLike,
    rate: npt.ArrayLike,
    dividend_yield: npt.ArrayLike,
    total_stdev: npt.ArrayLike,
    sign: npt.ArrayLike,
    dividends: CashDividends | None = None,
) -> tuple[Array, Array]:
    """Value and spot delta of :func:`american`, as ``DayState.value_and_delta`` gives them for European options."""
    found = american(
        spot=spot, strike=strike, tau_years=tau_years, rate=rate, dividend_yield=dividend_yield,
        total_stdev=total_stdev, sign=sign, dividends=dividends,
    )  # fmt: skip
    return found.value, found.delta


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class EarlyAssignment:
    """Whether the holder of each option exercises at this close, and what the answer rests on; shape ``(day,)``.

    ``dividend`` is what goes ex before the next close. ``time_value`` is what a call still has over intrinsic once
    the share is without it, and what a put that is held has over intrinsic now; exercised is a call whose dividend
    exceeds it, and a put in the money that has none. ``can_be`` is the part of that which holds whatever the vol.
    """

    exercised: Flags
    dividend: Array
    time_value: Array
    can_be: Flags


def early_assignment(
    *,
    spot: npt.ArrayLike,
    strike: npt.ArrayLike,
    tau_years: npt.ArrayLike,
    rate: npt.ArrayLike,
    dividend_yield: npt.ArrayLike,
    total_stdev: npt.ArrayLike,
    sign: npt.ArrayLike,
    dividends: CashDividends,
    next_close_years: npt.ArrayLike,
) -> EarlyAssignment:
    """Which options are exercised early at this close, after the market's rule.

    A *call* is exercised on the eve of an ex-date only, if ``S - K`` now exceeds what the option will be worth at a
    share of ``S - D``, the American value with the dividends that are left. That is the same as: if the dividend
    exceeds the time value left after the drop, ``value - (S - D - K)``. Without a yield that is at least ``K (1 -
    exp(-r dt))``, ``dt`` the years to the next ex-date or else to expiry: a dividend no larger than this keeps the
    call alive whatever the vol, and ``can_be`` is false.

    A *put* is exercised when its American value is intrinsic, to the accuracy of :func:`american`; on the eve of an
    ex-date it is not, where the drop is worth more than a day's interest.

    Parameters
    ----------
    next_close_years : array_like
        Years to the next trading day's close: dividends that go ex up to then have their eve now.
    others
        As for :func:`american`.
    """
    s, k, tau, r, q, stdev, sgn, ahead = _together(
        dividends, spot, strike, tau_years, rate, dividend_yield, total_stdev, sign, next_close_years
    )
    price = partial(american, strike=k, tau_years=tau, rate=r, dividend_yield=q, total_stdev=stdev, sign=sgn)
    years, amounts = _in_the_life(dividends, s.shape, tau.ravel())
    years, amounts = (a.reshape(*s.shape, a.shape[-1]) for a in (years, amounts))
    goes_ex = years <= ahead[..., None]
    left = np.where(goes_ex, 0.0, amounts)
    dividend = np.where(goes_ex, amounts, 0.0).sum(axis=-1)

    bare = s - dividend
    after = price(spot=bare, dividends=CashDividends(years=years, amounts=left)).value
    now = price(spot=s, dividends=CashDividends(years=years, amounts=amounts)).held
    call, in_the_money = sgn > 0.0, sgn * (s - k) > 0.0
    time_value = np.where(call, after - (bare - k), now - (k - s))
    until = np.minimum(np.where(left > 0.0, years, np.inf).min(axis=-1, initial=np.inf), tau)
    least = bare * np.expm1(-q * until) - k * np.expm1(-r * until)  # less time value than this no call can have
    can_be = in_the_money & np.where(call, dividend > np.maximum(least, 0.0), True)
    exercised = can_be & (tau > 0.0) & np.where(call, dividend > time_value, time_value <= 0.0)
    return EarlyAssignment(exercised=exercised, dividend=dividend, time_value=time_value, can_be=can_be)


def _together(dividends: CashDividends | None, *arguments: npt.ArrayLike) -> tuple[Array, ...]:
    """All arguments in the shape of everything together, the last axis of the dividends left out."""
    arrays = [np.asarray(a, dtype=np.float64) for a in arguments]
    days = () if dividends is None else np.broadcast_shapes(dividends.years.shape, dividends.amounts.shape)[:-1]
    shape = np.broadcast_shapes(days, *(a.shape for a in arrays))
    return tuple(np.broadcast_to(a, shape) for a in arrays)


def _in_the_life(dividends: CashDividends | None, shape: tuple[int, ...], tau: Array) -> tuple[Array, Array]:
    """Ex-dates and amounts within each option's life, sorted, shape ``(option, dividend)``; the others are none at
    expiry."""
    if dividends is None:
        return np.zeros((len(tau), 0)), np.zeros((len(tau), 0))
    years, amounts = np.broadcast_arrays(dividends.years, dividends.amounts)
    years, amounts = (np.broadcast_to(a, (*shape, a.shape[-1])).reshape(len(tau), -1) for a in (years, amounts))
    if (amounts < 0.0).any():
        raise ValueError("a cash dividend is negative")
    counts = (amounts > 0.0) & (years > 0.0) & (years <= tau[:, None])
    years, amounts = np.where(counts, years, tau[:, None]), np.where(counts, amounts, 0.0)
    most = int(counts.sum(axis=1).max(initial=0))
    # those that count first where times are equal, so that cutting the row loses none
    order = np.lexsort((~counts, years), axis=1)[:, :most]
    return np.take_along_axis(years, order, axis=1), np.take_along_axis(amounts, order, axis=1)


def _never_early(k: Array, tau: Array, r: Array, q: Array, sign: Array, ex_years: Array, amounts: Array) -> Flags:
    """Where exercise before expiry is worth less than holding whatever the share does."""
    following = np.concatenate((ex_years[:, 1:], tau[:, None]), axis=1)[:, : ex_years.shape[1]]
    interest = k[:, None] * -np.expm1(-r[:, None] * (following - ex_years))
    call = (r >= 0.0) & (q <= 0.0) & (amounts <= interest).all(axis=1)
    put = (r <= 0.0) & (q >= 0.0)
    return np.where(sign > 0.0, call, put)
