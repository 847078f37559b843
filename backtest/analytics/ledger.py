"""The cost ledger: every flow of the overlay in money, adding up to its difference from the hold.

Money is counted per 1 of starting wealth. Over any span the overlay's gain is

    shares + premiums and settlements of each leg + interest on cash - spread and fees,

and the bars of the waterfall put the hold's gain first and, instead of the shares,
what they gained more or less than the hold: fewer shares are left where premiums
were paid before. All bars sum exactly to the overlay's gain.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from ..engine.leg_replay import LegReplay, counted
from ..engine.result import Replay

Array = npt.NDArray[np.float64]
Dates = npt.NDArray[np.datetime64]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Ledger:
    """Money by span and line.

    Attributes
    ----------
    lines : tuple of str
        Names of the bars, hold first: ``hold``, ``<leg> premium``, ``<leg> settled``, ``<leg> live`` (change in
        the value of options still or already held at the ends of the span, less what was put into live ones when
        packages were resized), ``spread and fees``, ``interest``,
        ``shares`` (the shares' gain less the hold's).
    money : ndarray, shape (span, line)
        Per 1 of starting wealth.
    overlay : ndarray, shape (span,)
        The overlay's gain: the sum of the row.
    start_wealth, start_hold : ndarray, shape (span,)
        Growth of 1 at the start of each span.
    labels : tuple of str
    """

    lines: tuple[str, ...]
    money: Array
    overlay: Array
    start_wealth: Array
    start_hold: Array
    labels: tuple[str, ...]

    def basis_points(self) -> Array:
        """Money in basis points of the overlay's wealth at the start of each span, shape ``(span, line)``."""
        return 1e4 * self.money / self.start_wealth[:, np.newaxis]


def yearly_ledger(found: Replay) -> Ledger:
    """The ledger by calendar year (the first and last may be parts)."""
    year = found.dates.astype("datetime64[Y]")
    ends = np.append(np.flatnonzero(year[1:] != year[:-1]), len(year) - 1)
    starts = np.concatenate([[0], ends[:-1]])
    keep = ends > starts
    return _ledger(found, starts[keep], ends[keep], tuple(str(y) for y in year[ends[keep]]))


def whole_ledger(found: Replay) -> Ledger:
    """The ledger of the whole replay, one span."""
    return _ledger(found, np.array([0]), np.array([len(found) - 1]), ("whole",))


def _ledger(found: Replay, starts: npt.NDArray[np.intp], ends: npt.NDArray[np.intp], labels: tuple[str, ...]) -> Ledger:
    lines: dict[str, Array] = {}
    hold_gain = np.concatenate([[0.0], np.diff(found.hold)])
    lines["hold"] = hold_gain
    for row, leg in enumerate(found.legs):
        premium, settled = _leg_flows(found, leg)
        lines[f"{leg.label} premium"] = premium
        lines[f"{leg.label} settled"] = settled
        # what is neither paid nor settled in the span is the change of what is held at its ends
        lines[f"{leg.label} live"] = found.leg_profit[row] - premium - settled
    cost = found.trading_cost.copy()
    # the first day's costs are paid after its wealth is counted, and so belong to the next day's gain
    if len(cost) > 1:
        cost[1] += cost[0]
        cost[0] = 0.0
    lines["spread and fees"] = -cost
    lines["interest"] = found.interest
    lines["shares"] = found.stock_profit - hold_gain
    daily = np.array(list(lines.values()))
    total = np.concatenate([np.zeros((len(daily), 1)), np.cumsum(daily, axis=1)], axis=1)
    money = (total[:, ends + 1] - total[:, starts + 1]).T
    return Ledger(
        lines=tuple(lines),
        money=money,
        overlay=found.wealth[ends] - found.wealth[starts],
        start_wealth=found.wealth[starts],
        start_hold=found.hold[starts],
        labels=labels,
    )


def _leg_flows(found: Replay, leg: LegReplay) -> tuple[Array, Array]:
    """Signed premium and settlement at mid on each day, shape ``(day,)`` each; a premium paid is negative.

    The first day's premium is carried to the next, as its costs are.
    """
    premium, settled = np.zeros(len(found)), np.zeros(len(found))
    opened_on = np.maximum(leg.opened, 1)
    np.add.at(premium, opened_on, -leg.leg.direction * counted(leg.count[leg.opened], leg.premium))
    done = ~leg.schedule.live
    closed = leg.closed[done]
    np.add.at(settled, closed, leg.leg.direction * counted(leg.count[closed - 1], leg.close_value[done]))
    return premium, settled
