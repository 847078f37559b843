"""One batch of a study: overlays of one history and one window -> a row of figures each.

A batch knows nothing of the other batches, and no figure depends on which overlays share it.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from backtest import Market, Replay, Volatility, replay
from backtest.analytics.block_length import optimal_block_length
from backtest.analytics.headline import HEADLINE, Headline, SameBetaMixes, headline_figures
from backtest.analytics.performance import TRADING_DAYS, daily_excess, years_between
from backtest.analytics.reality_check import OVERLAYS_AT_ONCE, Draws, Partial, check_batch, combine
from backtest.analytics.subperiods import BlockSums, block_edges, empty_sums
from backtest.engine.checks import as_day, first_position, last_position
from backtest.engine.families import FamilyReplay, replay_families
from backtest.engine.legs import PricedLegs
from backtest.volatility.sources import BoundVolatility

from .expansion import Point

Array = npt.NDArray[np.float64]
Dates = npt.NDArray[np.datetime64]

#: Columns of figures of an overlay, in their order; decimals.
FIGURES = (
    *HEADLINE,
    "options_net_a_year",
    "hold_annual_return",
    "hold_volatility",
    "hold_sharpe",
    "hold_max_drawdown",
    "mix_annual_return",
    "mix_sharpe",
    "return_less_hold",
    "sharpe_less_hold",
    "drawdown_removed",
    "return_less_mix",
    "sharpe_less_mix",
    "information_ratio",
)
#: Columns of dates.
SPAN = ("inception", "end")
#: The comparison of C10 whose share of stock is the overlay's beta; the other is the hold.
SAME_BETA = "same-beta mix"
#: Sums kept for each block of days.
BLOCK_COLUMNS = ("growth", "total", "square")
#: Overlays whose differences are asked for a block length.
ASKED = 12
#: Overlays whose paths are at work together: of twenty years they are 5 MB.
AT_ONCE = 256
#: Overlays replayed together for the common span.
ASKED_AT_ONCE = 500


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Span:
    """The days on which all overlays of one history and one window live, and what is the same for all of them.

    An overlay whose first roll day came earlier begins on the first of these days with options already under way
    (stubs of C9), so that no figure of one overlay stands on other days than that of another.

    Attributes
    ----------
    first, last : datetime64
        The latest of the first roll days of the overlays, and the window's end.
    edges : ndarray of int, shape (block + 1,)
        Blocks of the daily returns of those days: cut into equal parts, and at every turn of a decade.
    equal : ndarray of int, shape (part + 1,)
        Where in ``edges`` the equal parts begin and end.
    decades : tuple of (str, int, int)
        Name of each decade, and where in ``edges`` it begins and ends.
    block_length : float
        Mean days in a row of the tests that allow for the search.
    """

    first: np.datetime64
    last: np.datetime64
    edges: npt.NDArray[np.intp]
    equal: npt.NDArray[np.intp]
    decades: tuple[tuple[str, int, int], ...]
    block_length: float

    @property
    def days(self) -> int:
        """Number of daily returns."""
        return int(self.edges[-1])


def columns_of(span: Span) -> tuple[str, ...]:
    """Columns of a batch of this span, in their order."""
    blocks = range(1, len(span.edges))
    return (*SPAN, *FIGURES, *(f"{name}_{block}" for block in blocks for name in BLOCK_COLUMNS))


def common_span(market: Market, asked: Sequence[Point], *, comparison: str) -> Span:
    """The span that overlays of one window have in common.

    ``asked`` holds one overlay for each roll calendar and volatility among them, and some more.

    Raises
    ------
    BacktestError
        If one of them cannot be replayed on this market.
    """
    differences: list[Array] = []
    dates: Dates | None = None
    for begin in range(0, len(asked), ASKED_AT_ONCE):
        for found in _families(market, asked[begin : begin + ASKED_AT_ONCE], priced=None):
            # a few paths of each, not all of them
            differences += list(_some_differences(found, comparison))
            if dates is None or found.dates[0] > dates[0]:
                dates = found.dates
    assert dates is not None
    first, last = dates[0], dates[-1]
    lengths = [1.0]
    for difference in differences:
        # all end on the same day
        common = difference[len(difference) - (len(dates) - 1) :]
        if common.size > 1 and np.isfinite(common).all():
            lengths.append(optimal_block_length(common))
    days = max(len(dates) - 1, 1)
    # an edge is the first return of a block: that over the first day of a decade
    decade = dates[1:].astype("datetime64[Y]").astype(np.int64) // 10 * 10 + (1970 // 10 * 10)
    turns = np.flatnonzero(decade[1:] != decade[:-1]) + 1
    parts = block_edges(days)
    edges = np.unique(np.concatenate([parts, turns]))
    cuts = np.searchsorted(edges, np.concatenate([[0], turns, [days]]))
    names = [f"{one}s" for one in decade[np.concatenate([[0], turns])]] if len(dates) > 1 else []
    return Span(
        first=first,
        last=last,
        edges=edges,
        equal=np.searchsorted(edges, parts),
        decades=tuple(zip(names, cuts[:-1].tolist(), cuts[1:].tolist(), strict=True)) if names else (),
        block_length=float(min(np.nanmax(lengths), days)),
    )


def replay_batch(
    market: Market,
    points: Sequence[Point],
    span: Span,
    *,
    comparison: str,
    draws: Draws | None,
    first_number: int = 0,
    priced: PricedLegs | None = None,
) -> tuple[dict[str, npt.NDArray[np.generic]], Partial | None]:
    """Figures of a batch.

    Parameters
    ----------
    points : sequence of Point
        Overlays of one window.
    comparison : {"same-beta mix", "hold"}
        What the information ratio and the tests are against.
    draws : Draws, optional
        For the tests that allow for the search; none without.
    first_number : int
        Number of the first overlay in the whole study, by which the tests tell overlays apart.
    priced : PricedLegs, optional
        Legs priced before on this market.

    Returns
    -------
    columns : dict of str to ndarray, shape (overlay,)
        ``SPAN``, ``FIGURES``, and for each block ``growth_1``, ``total_1``, ``square_1``, ...
    partial : Partial or None
    """
    _check_first_days(market, points, span)
    count, blocks = len(points), len(span.edges) - 1
    columns: dict[str, npt.NDArray[np.generic]] = {name: np.full(count, np.nan) for name in columns_of(span)}
    columns |= {name: np.empty(count, dtype="datetime64[D]") for name in SPAN}
    parts: list[Partial] = []
    against: _Hold | None = None
    for found in _families(market, points, priced=priced, inception=span.first):
        numbers = np.array(found.numbers)
        # the parts of a family follow each other
        if against is None or found.hold is not against.days["hold"]:
            against = _Hold(found)
        sums = empty_sums(len(numbers), span.edges)
        figures = _figures(found, against, comparison=comparison, blocks=sums)
        for name in (*SPAN, *FIGURES):
            columns[name][numbers] = figures[name]
        for name in BLOCK_COLUMNS:
            for block in range(blocks):
                columns[f"{name}_{block + 1}"][numbers] = getattr(sums, name)[:, block]
        if draws is not None:
            beta = figures["beta"].astype(np.float64)
            for begin in range(0, len(numbers), OVERLAYS_AT_ONCE):
                some = slice(begin, begin + OVERLAYS_AT_ONCE)
                differences = _differences(found, found.wealth[some], beta[some], comparison)
                parts.append(check_batch(draws, differences.T, first_number + numbers[some]))
    return columns, combine(parts) if parts else None


def _check_first_days(market: Market, points: Sequence[Point], span: Span) -> None:
    """Raise AssertionError if an overlay's own first roll day is not there yet when the common days begin.

    The plan was made without it then, as if no axis moved that day.
    """
    start, last = as_day(points[0].start, "start"), last_position(market, as_day(points[0].end, "end"))
    bound: dict[Volatility, BoundVolatility] = {}
    # legs and volatilities are few and shared; to hash them takes longer than to tell the objects apart
    looked_at: set[tuple[int, int, int]] = set()
    firsts: set[Any] = set()
    for point in points:
        overlay, volatility, anchor = point.overlay, point.volatility, point.overlay.anchor
        objects = (id(volatility), id(anchor), overlay.decide_lag)
        if objects in looked_at:
            continue
        looked_at.add(objects)
        key = (volatility, anchor.cycle, anchor.close_before, overlay.decide_lag)
        if key in firsts:
            continue
        firsts.add(key)
        if volatility not in bound:
            bound[volatility] = volatility.on(market)
        own = first_position(market, overlay, bound[volatility], start=start, last=last, inception=None)
        if market.dates[own] > span.first:
            raise AssertionError(
                f"an overlay's own first roll day is {market.dates[own]}, and the common days begin on {span.first}"
            )


def _families(
    market: Market,
    points: Sequence[Point],
    *,
    priced: PricedLegs | None,
    inception: np.datetime64 | None = None,
) -> Iterator[FamilyReplay]:
    """Overlays of one window replayed, each from ``inception`` or else from its own first roll day."""
    return replay_families(
        market,
        [point.overlay for point in points],
        volatility=[point.volatility for point in points],
        start=points[0].start,
        end=points[0].end,
        inception=inception,
        priced=priced,
        at_once=AT_ONCE,
    )


def replay_point(market: Market, point: Point, span: Span) -> Replay:
    """One overlay of a batch as a single replay, on the same days."""
    return replay(market, point.overlay, volatility=point.volatility, end=point.end, inception=span.first)


class _Hold:
    """The hold that overlays of a family are compared with, and its mixes with cash; the same for all its parts."""

    def __init__(self, found: FamilyReplay) -> None:
        self.days: dict[str, Any] = {"hold": found.hold, "rate_return": found.rate_return, "dates": found.dates}
        self.headline = Headline(**self.days)
        own = self.headline.figures(found.hold[np.newaxis])
        self.figures = {name: float(values[0]) for name, values in own.items()}
        self.mixes = SameBetaMixes(**self.days)
        market = daily_excess(found.hold, found.rate_return)
        self.excess_mean, self.excess_variance = float(np.mean(market)), float(np.var(market, ddof=1))


def _figures(
    found: FamilyReplay, against: _Hold, *, comparison: str, blocks: BlockSums
) -> dict[str, npt.NDArray[np.generic]]:
    made: dict[str, npt.NDArray[np.generic]] = {}
    own = against.headline.figures(found.wealth, blocks=blocks)
    hold = against.figures
    # a mix of the same beta holds stock: below a beta of zero there is none to be compared with
    mix = {
        name: np.where(own["beta"] > 0.0, values, np.nan) for name, values in against.mixes.figures(own["beta"]).items()
    }
    made |= own
    made["options_net_a_year"] = found.options_net() / years_between(found.dates)
    for name in ("annual_return", "volatility", "sharpe", "max_drawdown"):
        made[f"hold_{name}"] = np.full(len(found.wealth), hold[name])
    made |= {f"mix_{name}": values for name, values in mix.items()}
    made["return_less_hold"] = own["annual_return"] - hold["annual_return"]
    made["sharpe_less_hold"] = own["sharpe"] - hold["sharpe"]
    made["drawdown_removed"] = own["max_drawdown"] - hold["max_drawdown"]
    made["return_less_mix"] = own["annual_return"] - mix["annual_return"]
    made["sharpe_less_mix"] = own["sharpe"] - mix["sharpe"]
    made["information_ratio"] = _information_ratio(against, own, comparison)
    made["inception"] = np.full(len(found.wealth), found.dates[0])
    made["end"] = np.full(len(found.wealth), found.dates[-1])
    return made


def _information_ratio(against: _Hold, own: dict[str, Array], comparison: str) -> Array:
    """Mean of ``X - w e`` over its deviation, annual, from the moments at hand; ``w`` is beta, or 1 for the hold."""
    share = own["beta"] if comparison == SAME_BETA else np.ones(len(own["beta"]))
    mean = own["excess_mean"] - share * against.excess_mean
    variation = own["excess_deviation"] ** 2
    variance = variation + share * (share - 2.0 * own["beta"]) * against.excess_variance
    # what rounding leaves of an overlay that is its own comparison is no deviation
    varies = variance > 1e-12 * variation
    ratio = mean / np.sqrt(np.where(varies, variance, 1.0)) * np.sqrt(TRADING_DAYS)
    return np.where(varies, ratio, np.nan)


def _some_differences(found: FamilyReplay, comparison: str) -> Array:
    """Differences of the first few overlays of a family, shape ``(overlay, day - 1)``."""
    wealth = found.wealth[:ASKED]
    own = headline_figures(wealth, hold=found.hold, rate_return=found.rate_return, dates=found.dates)
    return _differences(found, wealth, own["beta"], comparison)


def _differences(found: FamilyReplay, wealth: Array, beta: Array, comparison: str) -> Array:
    """Daily returns less those of the comparison, shape ``(overlay, day - 1)``."""
    market = daily_excess(found.hold, found.rate_return)
    excess = daily_excess(wealth, found.rate_return)
    excess -= (beta[:, np.newaxis] if comparison == SAME_BETA else 1.0) * market
    return excess
