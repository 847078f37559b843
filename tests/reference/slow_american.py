"""What the tests know of American options: trees, an integral, and two published approximations, one option at a time.

Borrowing nothing from ``backtest``. ``dividends`` are pairs of years and cash; the share without them, ``S*``, has the
vol, and the others are worth ``D exp(-(r - q) (t_i - t))``. At an ex-date a call is exercised before the drop and a
put after it. Sources: Cox, Ross and Rubinstein (1979); Leisen and Reimer (1996), their second inversion after Peizer
and Pratt; Barone-Adesi and Whaley (1987); Bjerksund and Stensland (1993), all in the notation of Haug's handbook, from
memory: they stand because they give the printed figures of ``test_published_american.py``.
"""

from __future__ import annotations

from math import exp, inf, log, pi, sqrt

import numpy as np
from scipy.integrate import quad
from scipy.optimize import brentq
from scipy.special import ndtr

Dividends = tuple[tuple[float, float], ...]


def european(s: float, k: float, tau: float, r: float, b: float, vol: float, sign: float) -> float:
    """Black-Scholes-Merton with cost of carry ``b``."""
    d1 = (log(s / k) + (b + 0.5 * vol**2) * tau) / (vol * sqrt(tau))
    d2 = d1 - vol * sqrt(tau)
    return sign * (s * exp((b - r) * tau) * float(ndtr(sign * d1)) - k * exp(-r * tau) * float(ndtr(sign * d2)))


def _tree(
    s: float, k: float, tau: float, r: float, q: float, sign: float, dividends: Dividends,
    up: float, down: float, chance: float, steps: int,
) -> float:  # fmt: skip
    dt, carry = tau / steps, r - q
    escrowed = s - sum(cash * exp(-carry * ex) for ex, cash in dividends)
    values = None
    for step in range(steps, -1, -1):
        now = step * dt
        limit = now - 1e-9 if sign > 0 else now + 1e-9
        to_come = sum(cash * exp(-carry * (ex - now)) for ex, cash in dividends if ex > limit)
        ups = np.arange(step + 1)
        share = escrowed * np.exp(ups * log(up) + (step - ups) * log(down))
        exercised = np.maximum(sign * (share + to_come - k), 0.0)
        if values is None:
            values = exercised
        else:
            values = np.maximum(exercised, exp(-r * dt) * (chance * values[1:] + (1.0 - chance) * values[:-1]))
    assert values is not None
    return float(values[0])


def cox_ross_rubinstein(
    s: float, k: float, tau: float, r: float, q: float, vol: float, sign: float, steps: int, dividends: Dividends = ()
) -> float:
    up = exp(vol * sqrt(tau / steps))
    chance = (exp((r - q) * tau / steps) - 1.0 / up) / (up - 1.0 / up)
    return _tree(s, k, tau, r, q, sign, dividends, up, 1.0 / up, chance, steps)


def leisen_reimer(
    s: float, k: float, tau: float, r: float, q: float, vol: float, sign: float, steps: int, dividends: Dividends = ()
) -> float:
    """``steps`` is odd."""
    escrowed = s - sum(cash * exp(-(r - q) * ex) for ex, cash in dividends)
    d1 = (log(escrowed / k) + (r - q + 0.5 * vol**2) * tau) / (vol * sqrt(tau))

    def chance_of(z: float) -> float:
        inner = (z / (steps + 1 / 3 + 0.1 / (steps + 1))) ** 2 * (steps + 1 / 6)
        return 0.5 + np.copysign(0.5, z) * sqrt(1.0 - exp(-inner))

    chance, of_share = chance_of(d1 - vol * sqrt(tau)), chance_of(d1)
    growth = exp((r - q) * tau / steps)
    up = growth * of_share / chance
    down = (growth - chance * up) / (1.0 - chance)
    return _tree(s, k, tau, r, q, sign, dividends, up, down, chance, steps)


def call_with_one_dividend(s: float, k: float, tau: float, r: float, vol: float, ex: float, cash: float) -> float:
    """Exact: no yield and ``r >= 0``, so that the ex-date is the one time to exercise (Roll, Geske, Whaley 1977-81).

    The better of exercise just before it and the European call after it, over the normal density of ``S*`` by then.
    """
    escrowed, root = s - cash * exp(-r * ex), vol * sqrt(ex)

    def share(z: float) -> float:
        return escrowed * exp((r - 0.5 * vol**2) * ex + root * z)

    def gain(z: float) -> float:
        return share(z) + cash - k - european(share(z), k, tau - ex, r, r, vol, 1.0)

    bound = brentq(gain, -30.0, 30.0, xtol=1e-14) if gain(30.0) > 0.0 else inf
    density = lambda z: exp(-0.5 * z * z) / sqrt(2.0 * pi)  # noqa: E731
    at_strike = (log(k / escrowed) - (r - 0.5 * vol**2) * ex) / root
    held = 0.0
    for low, high in ((-10.0, at_strike), (at_strike, min(bound, 10.0))):
        low, high = max(low, -10.0), min(high, bound, 10.0)
        if low < high:
            held += quad(
                lambda z: european(share(z), k, tau - ex, r, r, vol, 1.0) * density(z),
                low,
                high,
                epsabs=1e-12,
                limit=200,
            )[0]
    exercised = escrowed * exp(r * ex) * float(ndtr(root - bound)) + (cash - k) * float(ndtr(-bound))
    return exp(-r * ex) * (held + exercised)


def barone_adesi_whaley(s: float, k: float, tau: float, r: float, b: float, vol: float, sign: float) -> float:
    """Quadratic approximation; a call needs ``b < r``."""
    m, n, shrink = 2.0 * r / vol**2, 2.0 * b / vol**2, 1.0 - exp(-r * tau)
    power = (1.0 - n + sign * sqrt((n - 1.0) ** 2 + 4.0 * m / shrink)) / 2.0

    def premium_slope(at: float) -> float:
        d1 = (log(at / k) + (b + 0.5 * vol**2) * tau) / (vol * sqrt(tau))
        return sign * (1.0 - exp((b - r) * tau) * float(ndtr(sign * d1))) * at / power

    def excess(at: float) -> float:
        return sign * (at - k) - european(at, k, tau, r, b, vol, sign) - premium_slope(at)

    critical = brentq(excess, k, 20.0 * k) if sign > 0 else brentq(excess, k / 1e3, k)
    if sign * (s - critical) >= 0.0:
        return sign * (s - k)
    return european(s, k, tau, r, b, vol, sign) + premium_slope(critical) * (s / critical) ** power


def bjerksund_stensland(s: float, k: float, tau: float, r: float, b: float, vol: float, sign: float) -> float:
    """The value of exercising at one fixed price: a lower bound. A call needs ``b < r``, a put ``r > 0``."""
    if sign < 0:
        return bjerksund_stensland(k, s, tau, r - b, -b, vol, 1.0)
    var = vol**2
    beta = 0.5 - b / var + sqrt((b / var - 0.5) ** 2 + 2.0 * r / var)
    at_last, at_first = max(k, r / (r - b) * k), beta / (beta - 1.0) * k
    trigger = at_last + (at_first - at_last) * (
        1.0 - exp(-(b * tau + 2.0 * vol * sqrt(tau)) * at_last / (at_first - at_last))
    )
    if s >= trigger:
        return s - k

    def phi(gamma: float, limit: float) -> float:
        root = vol * sqrt(tau)
        d = -(log(s / limit) + (b + (gamma - 0.5) * var) * tau) / root
        kappa = 2.0 * b / var + 2.0 * gamma - 1.0
        factor = exp((-r + gamma * b + 0.5 * gamma * (gamma - 1.0) * var) * tau) * s**gamma
        mirrored = (trigger / s) ** kappa * float(ndtr(d - 2.0 * log(trigger / s) / root))
        return factor * (float(ndtr(d)) - mirrored)

    alpha = (trigger - k) * trigger**-beta
    return (
        alpha * (s**beta - phi(beta, trigger))
        + phi(1.0, trigger) - phi(1.0, k)
        - k * (phi(0.0, trigger) - phi(0.0, k))
    )  # fmt: skip
