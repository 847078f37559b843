"""How far an answer leans on the roll day and on the option prices.

Both are many replays of the same overlay: legs shared, prices cheap.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from functools import partial

import numpy as np
import numpy.typing as npt
from scipy.optimize import brentq

from ..cycles import DAYS_IN_MONTH, LARGEST_SHIFT_DAYS
from ..engine.replay import replay_many
from ..engine.result import Replay
from ..overlay import Overlay
from ..volatility.sources import Volatility
from .comparisons import mix_wealth
from .drawdowns import drawdown_path
from .performance import annual_return, daily_excess, regression_beta, sharpe_ratio

Array = npt.NDArray[np.float64]

#: Break-even shifts are looked for up to this many vol points either way.
WIDEST_SHIFT = 20.0


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class RollDayLuck:
    """The same rule on every possible roll day.

    Arrays of shape ``(offset,)``; offset 0 is the user's own day. ``sharpe_gain`` is the Sharpe ratio less that
    of the offset's own same-beta mix. All start on the same day, with stubs.
    ``ladder_*`` is the figure of holding all offsets side by side in equal parts.
    """

    offsets: npt.NDArray[np.int64]
    annual_return: Array
    sharpe: Array
    sharpe_gain: Array
    max_drawdown: Array
    ladder_annual_return: float
    ladder_sharpe: float
    ladder_max_drawdown: float

    def rank(self, figure: str) -> float:
        """Share of the offsets with a lower figure than the user's own day."""
        values = getattr(self, figure)
        return float(np.mean(values < values[0]))


def roll_day_luck(found: Replay, *, offsets: int | None = None) -> RollDayLuck:
    """Replay with every roll date moved by 0, 1, 2, ... trading days (C2 ``shift_days``).

    Parameters
    ----------
    found : Replay
        The user's own replay; all offsets run over its days, from its inception.
    offsets : int, optional
        How many; the trading days of the longest leg's cycle if not given (63 for a quarter).
    """
    overlay = found.overlay
    count = offsets or round(overlay.anchor.cycle.length_months * DAYS_IN_MONTH)
    shifted = [_shift(overlay, days, count) for days in range(count)]
    replays = replay_many(
        found.market, shifted, volatility=found.volatility, inception=found.dates[0], end=found.dates[-1]
    )
    wealth = np.array([one.wealth for one in replays])
    ladder = wealth.mean(axis=0)
    rate = found.rate_return
    return RollDayLuck(
        offsets=np.arange(count),
        annual_return=np.array([annual_return(row, found.dates) for row in wealth]),
        sharpe=sharpe_ratio(daily_excess(wealth, rate)),
        sharpe_gain=np.array([sharpe_gain(row, hold=found.hold, rate_return=rate) for row in wealth]),
        max_drawdown=drawdown_path(wealth).min(axis=-1),
        ladder_annual_return=annual_return(ladder, found.dates),
        ladder_sharpe=float(sharpe_ratio(daily_excess(ladder, rate))),
        ladder_max_drawdown=float(drawdown_path(ladder).min()),
    )


def sharpe_gain(wealth: Array, *, hold: Array, rate_return: Array) -> float:
    """Sharpe ratio of a path less that of its same-beta mix (C10); NaN where either cannot be had."""
    excess, hold_excess = daily_excess(wealth, rate_return), daily_excess(hold, rate_return)
    mix = mix_wealth(regression_beta(excess, hold_excess), hold_excess, rate_return[1:])
    return float(sharpe_ratio(excess) - sharpe_ratio(daily_excess(mix, rate_return)))


def _shift(overlay: Overlay, days: int, cycle_days: int) -> Overlay:
    """Every roll ``days`` later; past the furthest shift there is, a whole cycle earlier, which comes to the same."""
    furthest = max(leg.shift_days for leg in overlay.legs) + days
    moved = days if furthest <= LARGEST_SHIFT_DAYS else days - cycle_days
    legs = tuple(replace(leg, shift_days=leg.shift_days + moved) for leg in overlay.legs)
    return replace(overlay, legs=legs)


@dataclass(frozen=True, slots=True, kw_only=True)
class BreakEven:
    """Where an answer turns.

    ``value`` is the shift in vol points, or the half-spread in vol points, at which the two sides are equal;
    None if there is none. ``searched`` is the span that could be searched: beyond it some option has no vol left.
    """

    value: float | None
    searched: tuple[float, float]

    def words(self, unit: str = "vol points") -> str:
        """The answer in words."""
        if self.value is not None:
            return f"{self.value:+.2f} {unit}"
        return f"none from {self.searched[0]:+.1f} to {self.searched[1]:+.1f} {unit}"


@dataclass(frozen=True, slots=True, kw_only=True)
class BreakEvens:
    """Break-even shifts of all legs, of the puts alone, and of the half-spread, for two questions.

    ``sharpe_*``: the overlay's Sharpe ratio equals that of its same-beta mix. ``return_*``: its annual return
    equals the hold's.
    """

    sharpe_all_legs: BreakEven
    sharpe_puts: BreakEven
    sharpe_half_spread: BreakEven
    return_all_legs: BreakEven
    return_puts: BreakEven
    return_half_spread: BreakEven


def break_evens(found: Replay) -> BreakEvens:
    """Find the price errors at which the answer turns, by repricing.

    The nearest break-even to the prices used is given where there are several.
    """
    widest = WIDEST_SHIFT
    volatility, overlay = found.volatility, found.overlay

    def shifted_all(points: float) -> tuple[Overlay, Volatility]:
        return overlay, replace(
            volatility, put_shift=volatility.put_shift + points, call_shift=volatility.call_shift + points
        )

    def shifted_puts(points: float) -> tuple[Overlay, Volatility]:
        return overlay, replace(volatility, put_shift=volatility.put_shift + points)

    def spread(points: float) -> tuple[Overlay, Volatility]:
        return replace(overlay, costs=replace(overlay.costs, half_spread_vol=points)), volatility

    has_put = any(leg.right == "put" for leg in overlay.legs)
    grid = np.linspace(-widest, widest, 41)
    spreads = np.linspace(0.0, widest, 41)
    own = overlay.costs.half_spread_vol
    answers: dict[str, BreakEven] = {}
    for what, make, points, start in (
        ("all_legs", shifted_all, grid, 0.0),
        ("puts", shifted_puts, grid, 0.0),
        ("half_spread", spread, spreads, own),
    ):
        if what == "puts" and not has_put:
            nothing = BreakEven(value=None, searched=(0.0, 0.0))
            answers |= {"sharpe_puts": nothing, "return_puts": nothing}
            continue
        curve = _Curve(found, make)
        gaps = curve.gaps(points)
        for row, question in enumerate(("sharpe", "return")):
            gap = partial(curve.gap, row)
            answers[f"{question}_{what}"] = _nearest_root(points, gaps[row], gap, start)
    return BreakEvens(**answers)


class _Curve:
    """Sharpe gap to the same-beta mix and return gap to hold, as functions of a price error."""

    def __init__(self, found: Replay, make: Callable[[float], tuple[Overlay, Volatility]]) -> None:
        self._found, self._make = found, make
        self._hold_return = annual_return(found.hold, found.dates)

    def gap(self, question: int, point: float) -> float:
        """One gap at one point, for a root finder."""
        return float(self.gaps(np.array([point]))[question, 0])

    def gaps(self, points: Array) -> Array:
        """Shape ``(question, point)``."""
        found = self._found
        overlays, volatilities = zip(*(self._make(float(x)) for x in points), strict=True)
        replays = replay_many(
            found.market, overlays, volatility=volatilities, inception=found.dates[0], end=found.dates[-1]
        )
        rate = found.rate_return
        gaps = np.full((2, len(points)), np.nan)
        for column, one in enumerate(replays):
            if not np.isfinite(one.wealth).all():
                continue
            gaps[0, column] = sharpe_gain(one.wealth, hold=found.hold, rate_return=rate)
            gaps[1, column] = annual_return(one.wealth, found.dates) - self._hold_return
        return gaps


def _nearest_root(points: Array, gaps: Array, gap: Callable[[float], float], start: float) -> BreakEven:
    known = np.isfinite(gaps)
    if not known.any():
        return BreakEven(value=None, searched=(start, start))
    # the span around the prices used in which every option still has a vol
    x, y = points[known], gaps[known]
    searched = (float(x[0]), float(x[-1]))
    turns = np.flatnonzero(np.sign(y[:-1]) * np.sign(y[1:]) < 0)
    zeros = x[y == 0.0]
    roots = [float(brentq(gap, x[i], x[i + 1], xtol=1e-6)) for i in turns] + [float(z) for z in zeros]
    if not roots:
        return BreakEven(value=None, searched=searched)
    return BreakEven(value=min(roots, key=lambda root: abs(root - start)), searched=searched)
