"""What the options sold may require as margin, as a share of wealth.

The strategy-based rule that option exchanges publish in their margin manuals, in its simple form (common practice, put
down from memory; the broker's own rule holds). For an option sold, after each day's trades:

=====================  =====================================================================================
call on a share held   nothing
any other call         mid + the larger of 20% of spot less the amount out of the money, and 10% of spot
put                    mid + the larger of 20% of spot less the amount out of the money, and 10% of the strike
put beside a bought    no more than its strike less that of the bought one; nothing where the bought strike is
put                    the higher
=====================  =====================================================================================

A bought put stands beside a sold one when at least as many of it are left and it expires no earlier. Sold legs take
their bought leg in the overlay's order, each the one that leaves it the least margin, and what one has taken is not
there for the next. The shares cover the dearest calls first. A bought call is not counted against a sold one, and
20% is kept for indices too, of which the manuals ask less when they are broad: both err on the high side.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from ..engine.leg_replay import LegReplay
from ..engine.result import Replay

Array = npt.NDArray[np.float64]

#: Shares of spot that an option is margined with, and of spot (a call) or strike (a put) that are the least.
OF_SPOT, LEAST = 0.20, 0.10
#: Numbers of options that differ by less than this share are the same but for rounding.
ROUNDING = 1e-9


@dataclass(frozen=True, slots=True, kw_only=True)
class PeakMargin:
    """The largest requirement of a replay: a decimal share of that day's wealth, and the first day that has it.

    ``day`` is None where nothing is required on any day. The share is NaN where no package could be bought.
    """

    share: float
    day: np.datetime64 | None


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Margin:
    """What the sold options require.

    Attributes
    ----------
    covered, alone : ndarray, shape (day,)
        Money per 1 of starting wealth after each day's trades: with the shares counted as cover for sold calls, and
        with none of them counted, as for index options sold against a portfolio of stocks.
    peak_covered, peak_alone : PeakMargin
        Of the days on which there is wealth.
    """

    covered: Array
    alone: Array
    peak_covered: PeakMargin
    peak_alone: PeakMargin

    def as_dict(self) -> dict[str, object]:
        """Both peaks as plain values; decimals of that day's wealth."""
        peaks = {"shares_as_cover": self.peak_covered, "no_shares_counted": self.peak_alone}
        return {"unit": "decimal of the day's wealth"} | {
            name: {"peak": peak.share, "day": peak.day} for name, peak in peaks.items()
        }


def margin(replay: Replay) -> Margin | None:
    """What the sold options of a replay require on every day, and at most; None where no leg is sold."""
    sold = [_held(replay, leg) for leg in replay.legs if leg.signed_ratio < 0]
    if not sold:
        return None
    bought = [_held(replay, leg) for leg in replay.legs if leg.signed_ratio > 0 and leg.leg.right == "put"]
    puts = _put_margin(replay.spot, [one for one in sold if one.right == "put"], bought)
    calls = [one for one in sold if one.right == "call"]
    covered = puts + _call_margin(replay.spot, calls, shares=replay.shares)
    alone = puts + _call_margin(replay.spot, calls, shares=np.zeros(len(replay)))
    return Margin(
        covered=covered,
        alone=alone,
        peak_covered=_peak(covered, replay),
        peak_alone=_peak(alone, replay),
    )


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _Held:
    """The option of one leg on each day, shape ``(day,)``; a count, strike and mid of zero on days without one."""

    right: str
    count: Array
    strike: Array
    mid: Array
    expiry_day: npt.NDArray[np.int64]  # days since 1970-01-01


def _held(replay: Replay, leg: LegReplay) -> _Held:
    option = leg.schedule.option_of_day(replay.window.start, replay.window.stop - 1)
    there = option >= 0
    return _Held(
        right=leg.leg.right,
        count=np.where(there, leg.count, 0.0),
        strike=np.where(there, leg.daily_strike, 0.0),
        mid=leg.daily_mark,
        expiry_day=np.append(leg.schedule.expiry_day, 0)[option],
    )


def _put_margin(spot: Array, sold: list[_Held], bought: list[_Held]) -> Array:
    """Money for all sold puts, shape ``(day,)``."""
    left = [other.count.copy() for other in bought]
    total = np.zeros(len(spot))
    for one in sold:
        outside = np.maximum(spot - one.strike, 0.0)
        each = one.mid + np.maximum(OF_SPOT * spot - outside, LEAST * one.strike)
        beside = np.full(len(spot), -1)
        for number, other in enumerate(bought):
            enough = left[number] >= one.count * (1.0 - ROUNDING)
            spread = np.maximum(one.strike - other.strike, 0.0)
            less = enough & (other.expiry_day >= one.expiry_day) & (spread < each)
            each = np.where(less, spread, each)
            beside[less] = number
        for number in range(len(bought)):
            left[number] -= np.where(beside == number, one.count, 0.0)
        total += one.count * each
    return total


def _call_margin(spot: Array, sold: list[_Held], *, shares: Array) -> Array:
    """Money for the sold calls that no share covers, shape ``(day,)``."""
    if not sold:
        return np.zeros(len(spot))
    count = np.array([one.count for one in sold])
    outside = np.array([np.maximum(one.strike - spot, 0.0) for one in sold])
    each = np.array([one.mid for one in sold]) + np.maximum(OF_SPOT * spot - outside, LEAST * spot)
    order = np.argsort(-each, axis=0, kind="stable")
    count, each = np.take_along_axis(count, order, axis=0), np.take_along_axis(each, order, axis=0)
    before = np.cumsum(count, axis=0) - count
    bare = count - np.clip(shares - before, 0.0, count)
    bare[bare < ROUNDING * count] = 0.0
    return np.asarray(np.sum(bare * each, axis=0))


def _peak(required: Array, replay: Replay) -> PeakMargin:
    share = (required / replay.wealth)[np.isfinite(replay.wealth)]
    day = int(np.argmax(share))  # a NaN comes first
    return PeakMargin(share=float(share[day]), day=replay.dates[day] if share[day] > 0 else None)
