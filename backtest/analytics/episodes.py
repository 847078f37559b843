"""Did it protect when it mattered? The hold's falls and rallies, and what the overlay did in them."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from ..engine.result import Replay
from .drawdowns import drawdown_path
from .performance import TRADING_DAYS, daily_excess, sharpe_ratio

Array = npt.NDArray[np.float64]
Dates = npt.NDArray[np.datetime64]

#: A fall of the hold deeper than this is an episode.
EPISODE_DEPTH = 0.10


@dataclass(frozen=True, slots=True, kw_only=True)
class Fall:
    """A drawdown by positions: peak, trough, and recovery (None if there is none)."""

    peak: int
    trough: int
    recovery: int | None
    depth: float


def falls(wealth: Array, *, deeper_than: float = EPISODE_DEPTH) -> list[Fall]:
    """All drawdowns of one path deeper than a limit, in order of time.

    A drawdown runs from the last day at a peak until the path is back there.

    Examples
    --------
    >>> falls(np.array([1.0, 0.8, 1.0, 1.2, 1.1, 0.9]))
    [Fall(peak=0, trough=1, recovery=2, depth=-0.19999999999999996), Fall(peak=3, trough=5, recovery=None, depth=-0.25)]
    """
    path = drawdown_path(wealth)
    under = np.concatenate([[False], path < 0.0, [False]])
    edges = np.flatnonzero(under[1:] != under[:-1])
    found = []
    for start, stop in zip(edges[::2].tolist(), edges[1::2].tolist(), strict=True):
        trough = start + int(np.argmin(path[start:stop]))
        if path[trough] < -deeper_than:
            recovery = stop if stop < len(wealth) else None
            found.append(Fall(peak=start - 1, trough=trough, recovery=recovery, depth=float(path[trough])))
    return found


@dataclass(frozen=True, slots=True, kw_only=True)
class Episode:
    """One fall of the hold and what others did between its peak and its trough.

    ``returns`` from peak to trough by name. ``put_profit`` and ``call_profit`` are the profits at mid of those
    legs over the same days, ``call_profit_in_recovery`` those of the calls from trough to recovery (or the end),
    each over the overlay's wealth at the start of its stretch. ``days_under_water`` counts calendar days until
    a path is back for good (as far as the hold's recovery) at its level of the hold's peak, None if it does not get
    there.
    """

    peak: np.datetime64
    trough: np.datetime64
    recovery: np.datetime64 | None
    returns: dict[str, float]
    put_profit: float
    call_profit: float
    call_profit_in_recovery: float
    recovery_returns: dict[str, float]
    days_under_water: dict[str, int | None]


def episodes(found: Replay, paths: Mapping[str, Array]) -> list[Episode]:
    """The hold's falls deeper than 10%, worst first; ``paths`` are growths of 1 by name."""
    dates = found.dates
    made = []
    for fall in sorted(falls(found.hold), key=lambda fall: fall.depth):
        end = fall.recovery if fall.recovery is not None else len(dates) - 1
        made.append(
            Episode(
                peak=dates[fall.peak],
                trough=dates[fall.trough],
                recovery=None if fall.recovery is None else dates[fall.recovery],
                returns=_returns(paths, fall.peak, fall.trough),
                put_profit=_leg_profit(found, "put", fall.peak, fall.trough),
                call_profit=_leg_profit(found, "call", fall.peak, fall.trough),
                call_profit_in_recovery=_leg_profit(found, "call", fall.trough, end),
                recovery_returns=_returns(paths, fall.trough, end),
                days_under_water={name: _days_under(path, dates, fall) for name, path in paths.items()},
            )
        )
    return made


@dataclass(frozen=True, slots=True, kw_only=True)
class Rally:
    """A rise of the hold between two of its falls, with the same figures."""

    first: np.datetime64
    last: np.datetime64
    returns: dict[str, float]
    put_profit: float
    call_profit: float


def rallies(found: Replay, paths: Mapping[str, Array], *, most: int = 5) -> list[Rally]:
    """The hold's strongest rises from the trough of one fall (or the start) to the peak of the next (or the end)."""
    dips = falls(found.hold)
    starts = [0] + [fall.trough for fall in dips]
    stops = [fall.peak for fall in dips] + [len(found.dates) - 1]
    spans = [(a, b) for a, b in zip(starts, stops, strict=True) if b > a and found.hold[b] > found.hold[a]]
    spans.sort(key=lambda span: found.hold[span[0]] / found.hold[span[1]])
    return [
        Rally(
            first=found.dates[a],
            last=found.dates[b],
            returns=_returns(paths, a, b),
            put_profit=_leg_profit(found, "put", a, b),
            call_profit=_leg_profit(found, "call", a, b),
        )
        for a, b in spans[:most]
    ]


@dataclass(frozen=True, slots=True, kw_only=True)
class WithoutEpisode:
    """Figures with one fall's days, peak to trough, left out; annual and arithmetic, so that days can be left out."""

    left_out: tuple[np.datetime64, np.datetime64] | None
    mean_return: dict[str, float]
    sharpe: dict[str, float]


def without_worst(found: Replay, paths: Mapping[str, Array], *, most: int = 3) -> list[WithoutEpisode]:
    """The whole sample, then the sample without each of the worst falls in turn."""
    rate = found.rate_return
    worst = sorted(falls(found.hold), key=lambda fall: fall.depth)[:most]
    made = []
    for fall in [None, *worst]:
        keep = np.ones(len(rate) - 1, dtype=bool)
        if fall is not None:
            keep[fall.peak : fall.trough] = False
        if keep.sum() < 2:
            continue
        excess = {name: daily_excess(path, rate)[keep] for name, path in paths.items()}
        made.append(
            WithoutEpisode(
                left_out=None if fall is None else (found.dates[fall.peak], found.dates[fall.trough]),
                mean_return={name: float(np.mean(x + rate[1:][keep]) * TRADING_DAYS) for name, x in excess.items()},
                sharpe={name: float(sharpe_ratio(x)) for name, x in excess.items()},
            )
        )
    return made


def _returns(paths: Mapping[str, Array], start: int, stop: int) -> dict[str, float]:
    return {name: float(path[stop] / path[start] - 1.0) for name, path in paths.items()}


def _leg_profit(found: Replay, right: str, start: int, stop: int) -> float:
    rows = [row for row, leg in enumerate(found.overlay.carried) if leg.right == right]
    profit = found.leg_profit[rows, start + 1 : stop + 1].sum()
    return float(profit / found.wealth[start])


def _days_under(path: Array, dates: Dates, fall: Fall) -> int | None:
    """Calendar days from the hold's peak until the path is back for good at its level of that day.

    For good means until the hold itself has recovered: a touch of the old level on the way down ends nothing. 0 if
    never under it; None if not back by the end.
    """
    below = path[fall.peak + 1 :] < path[fall.peak]
    within = below[: (len(path) if fall.recovery is None else fall.recovery + 1) - fall.peak - 1]
    if not within.any():
        return 0
    last = int(np.flatnonzero(within)[-1])
    back = np.flatnonzero(~below[last:])
    if back.size == 0:
        return None
    day = fall.peak + 1 + last + int(back[0])
    return int((dates[day] - dates[fall.peak]) / np.timedelta64(1, "D"))
