"""Many American options at once on lattices of seven branches, one option a column (C5).

The share without the dividends known, ``S*``, follows a geometric Brownian motion. In ``y``, its logarithm less the
drift in units of the total deviation, it is the same Brownian motion for all options, whose steps differ only in how
the option's life is cut into them. An exercise date is the end of every step; in between the option is European.

- **Steps.** The life is cut evenly, then the cuts next to ex-dates are moved onto them, so that exercise just before a
  share goes ex (a call's) or just after (a put's) is seen at its own time. The first step is cut twice more, for
  shares at which exercise is near. The finer lattice halves every step of the coarser one.
- **A step** goes from a node to seven, with the weights that match the first seven moments of the normal
  distribution (heptanomial; Alford and Webber 2001, "Very high order lattice methods for one factor models", from
  memory). With a step's variance between 0.37 and 1.63 squared distances of nodes all weights are positive; a
  shorter step leaves some slightly below zero, and stays stable.
- **The last step** before expiry is Black's formula at every node (Broadie and Detemple 1996, "American option
  valuation: new bounds, approximations, and a comparison of existing methods"), so the kink of the payoff at the
  strike is not sampled. Where an ex-date makes that step too short for it, :func:`_apart` sees to it.
- **The kink where exercise begins** is sampled, by a sum over nodes that is off by what the Euler-Maclaurin formula
  says: one way with the kink at a node, the other with it between two. This is what makes trees and lattices jump
  about as their number of steps grows. It is worked out from the values at the four nodes around and put right at the
  two next to it, which leaves about a tenth of that error.
- **Too few exercise dates** cost a part that falls like one over the number of steps; twice the finer lattice's value
  less the coarser one's is free of it (Geske and Johnson 1984, "The American put option valued analytically").
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from .black import SMALLEST_STDEV, black

Array = npt.NDArray[np.float64]
Count = npt.NDArray[np.int64]
Flags = npt.NDArray[np.bool_]

#: How far nodes reach to either side, in deviations to expiry.
REACH = 4.8
#: Variance of a step in squared distances of nodes: of an even one, and at most.
EVEN_STEP, LONGEST_STEP = 1.0, 1.6
BRANCHES = 3  # to either side
#: More exercise dates, as parts of the first step.
SOONER = (0.25, 0.5)
#: Part of an even step: a shorter last one leaves more of a kink than nodes can see.
SHORT_STEP = 0.5
#: Nodes around one, places around it in nodes, and from values there to those that the nodes carry: cubic interpolation
#: turned around, so that a sum over the nodes keeps the moments up to the third. A place reaches two nodes either side.
AROUND = np.arange(-6, 7)[:, None]
FINE = np.arange(-8.0, 8.0625, 0.125)[:, None]
_AWAY = np.abs(AROUND - FINE.T)
CARRIED = 0.125 * np.where(
    _AWAY < 1.0,
    (1.0 - _AWAY**2) * (2.0 - _AWAY) / 2.0,
    np.where(_AWAY < 2.0, (1.0 - _AWAY) * (2.0 - _AWAY) * (3.0 - _AWAY) / 6.0, 0.0),
)
#: Of the strike, where a dividend at expiry is larger than it.
SMALLEST_STRIKE = 1e-12


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Contracts:
    """Options on a share without its known dividends; arrays of shape ``(option,)``, dividends ``(option, dividend)``.

    ``spot`` is ``S*``, escrowed. Dividends are sorted, ex within the life; those that do not exist have the time
    ``tau_years`` and the amount zero. No NaN, ``tau_years`` and ``total_stdev`` positive.
    """

    spot: Array
    strike: Array
    tau_years: Array
    rate: Array
    dividend_yield: Array
    total_stdev: Array
    sign: Array
    ex_years: Array
    dividends: Array

    def part(self, rows: Count) -> Contracts:
        """Some of the options."""
        return Contracts(**{name: getattr(self, name)[rows] for name in self.__slots__})


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Held:
    """What an option is worth to one who does not exercise it now, and its first two derivatives by the spot."""

    value: Array
    delta: Array
    gamma: Array


def held(contracts: Contracts, *, steps: int, together: int) -> Held:
    """Lattices of ``steps`` (and a few) and half as many, extrapolated; ``together`` options share a pass over memory.

    An option with more than one dividend to every eight steps has twice as many steps, or four times and so on. What
    an option is worth does not depend, to the last bit, on those beside it.
    """
    if steps < 16 or steps % 2:
        raise ValueError(f"a lattice has an even number of steps, 16 at least: not {steps}")
    crowd = np.maximum(8.0 * (contracts.dividends > 0.0).sum(axis=1) / steps, 1.0)
    finer = steps * 2 ** np.ceil(np.log2(crowd)).astype(np.int64)
    found = np.empty((3, len(finer)))
    for its_steps in np.unique(finer):
        alike = np.flatnonzero(finer == its_steps)
        for start in range(0, len(alike), together):
            rows = alike[start : start + together]
            found[:, rows] = _extrapolated(contracts.part(rows), int(its_steps))
    return Held(value=found[0], delta=found[1], gamma=found[2])


def _extrapolated(options: Contracts, steps: int) -> Array:
    """Value, delta and gamma without what falls like one over the number of steps: shape ``(3, option)``."""
    times, ex_index = _cuts(options, steps // 2)
    short = options.tau_years - times[-2] < SHORT_STEP * options.tau_years / (steps // 2)
    finer = np.empty((2 * len(times) - 1, times.shape[1]))
    finer[::2], finer[1::2] = times, 0.5 * (times[1:] + times[:-1])
    # a last step that is short stays whole, and the first is cut in three: then the rows are as many
    thirds = np.array([0.0, 1.0, 2.0])[:, None] / 3.0 * times[1]
    finer = np.where(short, np.concatenate((thirds, finer[2:-2], finer[-1:])), finer)
    last = len(finer) - 1
    finer_index = 2 * ex_index + (short[:, None] & (2 * ex_index < last))
    return 2.0 * _roll_back(options, finer, finer_index, short) - _roll_back(options, times, ex_index, short)


def _cuts(options: Contracts, steps: int) -> tuple[Array, Count]:
    """Times of the exercise dates in years, shape ``(date, option)``, and which of them each ex-date is."""
    tau, ex_years = options.tau_years, options.ex_years
    exists = (options.dividends > 0.0) & (ex_years < tau[:, None])
    left = np.cumsum(exists[:, ::-1], axis=1)[:, ::-1]  # how many from here on
    rows = np.arange(steps + 1)[:, None]
    times = rows * (tau / steps)
    index = np.where(options.dividends > 0.0, steps, -steps)  # at expiry, or never
    before, time_before = np.zeros(len(tau), dtype=np.int64), np.zeros(len(tau))
    for k in range(ex_years.shape[1]):
        nearest = np.rint(ex_years[:, k] / tau * steps).astype(np.int64)
        nearest = np.where(exists[:, k], np.clip(nearest, before + 1, steps - left[:, k]), before)
        time = np.where(exists[:, k], ex_years[:, k], time_before)
        each = (time - time_before) / np.maximum(nearest - before, 1)
        times = np.where((rows > before) & (rows < nearest), time_before + (rows - before) * each, times)
        each = (tau - time) / (steps - nearest)  # evenly to expiry, for as long as no other dividend follows
        times = np.where((rows >= nearest) & (rows < steps), time + (rows - nearest) * each, times)
        index[:, k] = np.where(exists[:, k], nearest, index[:, k])
        before, time_before = nearest, time
    times[-1] = tau
    sooner = np.array(SOONER)[:, None] * times[1]
    return np.concatenate((times[:1], sooner, times[1:])), index + len(SOONER)


def _roll_back(options: Contracts, times: Array, ex_index: Count, short: Flags) -> Array:
    """Value now if not exercised now, its delta and gamma: shape ``(3, option)``."""
    steps = len(times) - 1
    tau, rate, sign, stdev, strike = (
        options.tau_years, options.rate, options.sign, options.total_stdev, options.strike
    )  # fmt: skip
    share = np.diff(times, axis=0) / tau
    apart = np.sqrt(np.maximum(1.0 / (EVEN_STEP * steps), share.max(axis=0) / LONGEST_STEP))
    reach = int(np.ceil(REACH * np.sqrt(EVEN_STEP * steps)))
    weights = _branch_weights(share / apart**2) * np.exp(-rate * np.diff(times, axis=0))
    # in the order of nodes an option is deepest in the money at the first; BRANCHES more at either end
    nodes = np.arange(-reach - BRANCHES, reach + BRANCHES + 1.0)[:, None]
    shape = sign * options.spot * np.exp(nodes * (apart * stdev * -sign))
    drift = rate - options.dividend_yield - 0.5 * stdev**2 / tau
    moved = np.exp(drift * times)
    # what is paid beside the share: the dividends not yet paid, less the strike
    beside = sign * (_to_come(options, times, ex_index) - strike)

    last = tau - times[-2]
    forward = shape * (sign * moved[-2] * np.exp((rate - options.dividend_yield) * last))
    last_stdev = np.maximum(stdev * np.sqrt(share[-1]), SMALLEST_STDEV)
    # a call on a share that goes ex at expiry is exercised before the drop, so that much less is paid
    paid = np.where(sign > 0.0, np.where(ex_index == steps, options.dividends, 0.0).sum(axis=1), 0.0)
    due = np.maximum(strike - paid, SMALLEST_STRIKE * strike)
    cont = black(forward, due, last_stdev, sign) + np.maximum(paid - strike, 0.0)
    cont *= np.exp(-rate * last)

    value, work = np.empty_like(cont), np.empty_like(cont)
    inner = slice(BRANCHES, -BRANCHES)
    columns = np.arange(len(tau))
    short = short & (due > SMALLEST_STRIKE * strike)
    if short.any():
        whole, kink, rest = _apart(options, times, due, short, apart, nodes[0, 0], moved[-3:-1], beside[-2])
        short_columns = np.flatnonzero(short)
    for step in range(steps - 1, 0, -1):
        np.multiply(shape, moved[step], out=value)
        value += beside[step]
        np.subtract(value, cont, out=work)  # what exercise brings more
        node, change, next_change = _kink_correction(work, columns)
        tail = value[: BRANCHES + 1] - value[BRANCHES]
        part = short.any() and step == steps - 1
        if part:
            european = cont[:, short]
        np.maximum(value, cont, out=value)
        value[node - 1, columns] += change
        value[node, columns] += next_change
        if part:
            value[:, short] -= european
            # where exercise begins farther from the strike than four nodes, the nodes there see to it as ever
            seen_to = (np.abs(node[short] - kink[6]) <= 4) | (np.abs(AROUND) <= 2)
            value[kink, short_columns] = np.where(seen_to, rest, value[kink, short_columns])
        w = weights[:, step - 1]
        core, spare = cont[inner], work[inner]
        np.multiply(value[inner], w[0], out=core)
        for k in range(1, BRANCHES + 1):
            upper = value.shape[0] - BRANCHES + k
            np.add(value[BRANCHES + k : upper], value[BRANCHES - k : upper - 2 * k], out=spare)
            spare *= w[k]
            core += spare
        if part:
            core[:, short] += whole[inner]
        cont[:BRANCHES] = cont[BRANCHES] + tail[:BRANCHES]  # deep in the money it changes as exercise does
        cont[-BRANCHES:] = cont[-BRANCHES - 1]  # far out of it, not at all
    return _at_the_middle(cont, options, apart)


def _branch_weights(variance: Array) -> Array:
    """Weights of the middle and of one to three nodes away, shape ``(4, ...)``; variance in squared distances."""
    second, fourth, sixth = variance, 3.0 * variance**2, 15.0 * variance**3
    three = (sixth - 5.0 * fourth + 4.0 * second) / 720.0
    two = -(sixth - 10.0 * fourth + 9.0 * second) / 120.0
    one = (sixth - 13.0 * fourth + 36.0 * second) / 48.0
    return np.stack((1.0 - 2.0 * (one + two + three), one, two, three))


def _to_come(options: Contracts, times: Array, ex_index: Count) -> Array:
    """Worth at each time of the dividends not yet paid, shape ``(time, option)``.

    One that goes ex then is still to come for a call, which is exercised before the drop, and paid for a put, which is
    exercised after it.
    """
    rows = np.arange(len(times))[:, None] + np.where(options.sign > 0.0, 0, 1)
    carry = options.rate - options.dividend_yield
    total = np.zeros_like(times)
    for k in range(ex_index.shape[1]):
        today = options.dividends[:, k] * np.exp(-carry * options.ex_years[:, k])
        total += np.where(rows <= ex_index[:, k], today, 0.0)
    return total * np.exp(carry * times)


def _kink_correction(gain: Array, columns: Count) -> tuple[Count, Array, Array]:
    """First node of each option where it is held, and what to add to the node before it and to that node.

    ``gain`` falls from exercised to held through zero at ``u`` nodes after the one before. With ``h`` the gain as a
    function of the distance from there, the sum over the nodes where it is positive exceeds the integral by
    ``-B2(u)/2 h' - B3(u)/6 h'' - B4(u)/24 h'''``, and the sum weighted with the distance by ``-B3(u)/3 h' - B4(u)/8
    h''``; ``Bm`` are Bernoulli's polynomials.
    """
    last = gain.shape[0] - 2
    node = np.clip((gain > 0.0).sum(axis=0), 2, last)
    g0, g1, g2, g3 = (gain[node + k, columns] for k in (-2, -1, 0, 1))
    crosses = (g1 > 0.0) & (g2 <= 0.0)
    g1, g2 = np.where(crosses, g1, 1.0), np.where(crosses, g2, -1.0)
    # cubic through the four, in nodes from the one before
    third = g3 - 3.0 * g2 + 3.0 * g1 - g0
    second = g0 - 2.0 * g1 + g2
    first = 0.5 * (g2 - g0) - third / 6.0
    u = g1 / (g1 - g2)
    for _ in range(2):
        slope = np.minimum(first + u * (second + 0.5 * u * third), -1e-300)
        u = np.clip(u - (g1 + u * (first + u * (0.5 * second + u * third / 6.0))) / slope, 0.0, 1.0)
    h1, h2, h3 = -(first + u * (second + 0.5 * u * third)), second + u * third, -third
    b2, b3, b4 = u * (u - 1.0) + 1.0 / 6.0, u * (u - 0.5) * (u - 1.0), (u * (u - 1.0)) ** 2 - 1.0 / 30.0
    excess = -(b2 / 2.0 * h1 + b3 / 6.0 * h2 + b4 / 24.0 * h3)
    moment = -(b3 / 3.0 * h1 + b4 / 8.0 * h2)
    after = np.where(crosses, moment - u * excess, 0.0)
    return node, np.where(crosses, -excess, 0.0) - after, after


def _apart(
    options: Contracts, times: Array, due: Array, short: Flags, apart: Array, first: float, moved: Array, beside: Array
) -> tuple[Array, Count, Array]:
    """What to do where a share goes ex so soon before expiry that the last step leaves a kink between the nodes.

    Of the value at that ex-date the European one is taken off, and only the rest, what exercise then brings more, goes
    through the branches; the European value is added a step earlier. The rest bends at the strike within less than the
    nodes are apart: what they carry there comes from many places between them (``CARRIED``).

    Returns
    -------
    whole : ndarray
        European values one step before, ``(node, short)``.
    kink, rest : ndarray
        Nodes around the strike, and the rest there, ``(13, short)``.
    """
    stdev, rate, tau, end, before, strike, spot, sign, distance = (
        a[short]
        for a in (
            options.total_stdev, options.rate, options.tau_years, times[-2], times[-3], due, options.spot,
            options.sign, apart,
        )
    )  # fmt: skip
    carry = rate - options.dividend_yield[short]
    node_move = distance * stdev * -sign

    def european(at: Array, move: Array, start: Array) -> Array:
        left = tau - start
        forward = spot * np.exp(at * node_move) * move * np.exp(carry * left)
        total_stdev = np.maximum(stdev * np.sqrt(left / tau), SMALLEST_STDEV)
        return black(forward, strike, total_stdev, sign) * np.exp(-rate * left)

    count = round(-2.0 * first) + 1
    nodes: Array = np.arange(float(count))[:, None] + first
    whole = european(nodes, moved[0, short], before)

    place: Array = np.log(strike / (spot * moved[1, short])) / node_move - first
    kink = np.clip(np.rint(place), 6, count - 7).astype(np.int64) + AROUND
    at: Array = kink[6] + first + FINE
    exercised = sign * spot * np.exp(at * node_move) * moved[1, short] + beside[short]
    rest = np.maximum(exercised - european(at, moved[1, short], end), 0.0)
    carried = np.zeros(kink.shape)
    for parts, values in zip(CARRIED.T, rest):  # not a matrix product, whose roundings depend on its size
        carried += parts[:, None] * values
    return whole, kink, carried


def _at_the_middle(cont: Array, options: Contracts, apart: Array) -> Array:
    """Value and derivatives by the spot at the middle node.

    Plain differences: what they are off by goes with the square of the distance of nodes, which is one over the number
    of steps, and is extrapolated away; and they are the narrowest, for where exercise is near.
    """
    middle = cont.shape[0] // 2
    lower, here, upper = cont[middle - 1], cont[middle], cont[middle + 1]
    by_node, twice = 0.5 * (upper - lower), upper + lower - 2.0 * here
    log_step = apart * options.total_stdev * -options.sign
    slope = by_node / log_step
    return np.stack((here, slope / options.spot, (twice / log_step**2 - slope) / options.spot**2))
