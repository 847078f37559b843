"""What a study found, and how far its search alone explains it (C13)."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from itertools import pairwise
from typing import Any

import numpy as np
import numpy.typing as npt
import pandas as pd
from scipy import stats

from backtest import Replay
from backtest.analytics.headline import headline_figures
from backtest.analytics.performance import TRADING_DAYS, daily_excess
from backtest.analytics.reality_check import RealityCheck, p_values
from backtest.analytics.resampling import FEWEST_DAYS
from backtest.analytics.selection import DeflatedSharpe, deflated_sharpe
from backtest.analytics.subperiods import BlockSums, block_sums

from .batches import BLOCK_COLUMNS, FIGURES, SAME_BETA, SPAN, replay_point
from .expansion import Expansion
from .runner import SETTINGS, Group, Rows, StudyPlan, market_of

Array = npt.NDArray[np.float64]

#: A p-value above this, or a probability of skill below one less it, and the best is not told from luck.
LEVEL = 0.05


@dataclass(frozen=True, slots=True, kw_only=True)
class Step:
    """One step of a walk-forward: chosen on the days before, judged on the days after.

    Differences of Sharpe ratios to the hold's on the same days (a mix of constant share has the hold's).
    ``median_out`` is that of all overlays, what choosing at random would have given in the middle;
    ``better_out`` the share of them that did better than the one chosen.
    """

    chosen: int
    chosen_from: np.datetime64
    chosen_to: np.datetime64
    judged_to: np.datetime64
    inside: float
    outside: float
    median_out: float
    better_out: float


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Stability:
    """Does a ranking in one part of the days hold in the next?

    ``first`` and ``second`` are differences of Sharpe ratios to the hold, shape ``(overlay,)``; ``rank_correlation``
    is Spearman's over the overlays, NaN where it cannot be had.
    """

    first_name: str
    second_name: str
    first: Array
    second: Array
    rank_correlation: float


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class GroupAnswer:
    """What was found on one history and one window.

    ``rows`` are its rows in the study's tables; ``best`` is the row with the highest information ratio against the
    comparison, None where there is none. ``own`` is the reader's own overlay, where the study names it.
    """

    history: str
    first: np.datetime64
    last: np.datetime64
    rows: slice
    tried: int
    ruined: int
    best: int | None
    own: int | None
    deflated: DeflatedSharpe
    check: RealityCheck | None
    steps: tuple[Step, ...]
    halves: Stability
    decades: tuple[Stability, ...]

    @property
    def distinguished(self) -> bool | None:
        """Whether the best can be told from luck after so many trials; None where a test cannot be had."""
        said = []
        if self.check is not None:
            if not np.isfinite(self.check.luck):
                return None
            said.append(self.check.luck <= LEVEL)
        if np.isfinite(self.deflated.probability):
            said.append(self.deflated.probability >= 1.0 - LEVEL)
        return all(said) if said else None


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class StudyAnswer:
    """A whole study: ``overlays`` has a row an overlay, ``periods`` the sums of its blocks of days."""

    plan: StudyPlan
    overlays: pd.DataFrame
    periods: pd.DataFrame
    groups: tuple[GroupAnswer, ...]


def answer_study(plan: StudyPlan, rows: Rows) -> StudyAnswer:
    """Judge the rows of a finished run."""
    expansion = Expansion(plan.study)
    settings = pd.concat([expansion.settings(group.points) for group in plan.groups], ignore_index=True)
    histories = np.repeat([group.history for group in plan.groups], [len(group.points) for group in plan.groups])
    overlays = pd.concat(
        [
            pd.DataFrame(dict(zip(SETTINGS, (np.arange(plan.overlays), histories), strict=True))),
            settings,
            pd.DataFrame({name: rows.columns[name] for name in (*SPAN, *FIGURES)}),
        ],
        axis=1,
    )
    blocks = [name for name in rows.columns if name.rsplit("_", 1)[0] in BLOCK_COLUMNS]
    periods = pd.DataFrame({"number": np.arange(plan.overlays)} | {name: rows.columns[name] for name in blocks})
    groups = tuple(
        _judge(plan, rows, expansion, group, None if part is None else p_values(part))
        for group, part in zip(plan.groups, rows.partials, strict=True)
    )
    return StudyAnswer(plan=plan, overlays=overlays, periods=periods, groups=groups)


def _judge(plan: StudyPlan, rows: Rows, expansion: Expansion, group: Group, check: RealityCheck | None) -> GroupAnswer:
    span, chosen = group.span, slice(group.first_row, group.first_row + len(group.points))
    ratios = np.asarray(rows.columns["information_ratio"][chosen], dtype=np.float64)
    known = np.isfinite(ratios)
    best = int(np.nanargmax(ratios)) if known.any() else None
    sums = BlockSums(
        returns=np.diff(span.edges),
        **{
            name: np.column_stack(
                [rows.columns[f"{name}_{block}"][chosen] for block in range(1, len(span.edges))]
            ).astype(np.float64)
            for name in BLOCK_COLUMNS
        },
    )
    hold, dates = _hold_sums(plan, expansion, group)
    own = plan.study.own_point
    of_own = np.flatnonzero((group.points == np.array(own)).all(axis=1)) if own is not None else np.array([])
    halves = _halves(sums, hold, group)
    return GroupAnswer(
        history=group.history,
        first=span.first,
        last=span.last,
        rows=chosen,
        tried=len(group.points),
        ruined=int(np.count_nonzero(~np.isfinite(rows.columns["annual_return"][chosen]))),
        best=None if best is None else chosen.start + best,
        own=chosen.start + int(of_own[0]) if of_own.size else None,
        deflated=_deflated(plan, expansion, group, ratios, best),
        check=check,
        steps=tuple(_steps(sums, hold, group, dates)),
        halves=halves,
        decades=tuple(_decades(sums, hold, group)),
    )


def _hold_sums(plan: StudyPlan, expansion: Expansion, group: Group) -> tuple[BlockSums, npt.NDArray[np.datetime64]]:
    """Sums of the hold over the same blocks, and the common days."""
    found = replay_member(plan, expansion, group, 0)
    return block_sums(found.hold[np.newaxis], rate_return=found.rate_return, edges=group.span.edges), found.dates


def replay_member(plan: StudyPlan, expansion: Expansion, group: Group, member: int) -> Replay:
    """One overlay of a group as a single replay, on the days of the group."""
    (point,) = expansion.many(group.points[member : member + 1])
    return replay_point(market_of(plan, group), point, group.span)


def _deflated(plan: StudyPlan, expansion: Expansion, group: Group, ratios: Array, best: int | None) -> DeflatedSharpe:
    """Probability of skill of the best information ratio, given how many were tried."""
    if best is None:
        return DeflatedSharpe(hurdle=float("nan"), probability=float("nan"))
    found = replay_member(plan, expansion, group, best)
    market = daily_excess(found.hold, found.rate_return)
    share = 1.0
    if plan.study.comparison == SAME_BETA:
        shared: dict[str, Any] = {"hold": found.hold, "rate_return": found.rate_return, "dates": found.dates}
        share = float(headline_figures(found.wealth[np.newaxis], **shared)["beta"][0])
    difference = daily_excess(found.wealth, found.rate_return) - share * market
    if len(difference) < FEWEST_DAYS:
        return DeflatedSharpe(hurdle=float("nan"), probability=float("nan"))
    daily = ratios[np.isfinite(ratios)] / np.sqrt(TRADING_DAYS)
    return deflated_sharpe(
        float(ratios[best] / np.sqrt(TRADING_DAYS)),
        periods=len(difference),
        trials=len(daily),
        trial_variance=float(np.var(daily, ddof=1)) if len(daily) > 1 else 0.0,
        skewness=float(stats.skew(difference)),
        kurtosis=float(stats.kurtosis(difference, fisher=False)),
    )


def _gain(sums: BlockSums, hold: BlockSums, blocks: slice) -> Array:
    """Sharpe ratio less the hold's over some blocks, shape ``(overlay,)``."""
    return sums.sharpe(blocks) - hold.sharpe(blocks)[0]


def _steps(sums: BlockSums, hold: BlockSums, group: Group, dates: npt.NDArray[np.datetime64]) -> list[Step]:
    """Choose on all parts before, judge on the next, and so on."""
    cuts = group.span.equal
    made = []
    for step in range(1, len(cuts) - 1):
        inside, outside = _gain(sums, hold, slice(0, cuts[step])), _gain(sums, hold, slice(cuts[step], cuts[step + 1]))
        known = np.isfinite(inside) & np.isfinite(outside)
        if not known.any():
            continue
        chosen = int(np.flatnonzero(known)[np.argmax(inside[known])])
        made.append(
            Step(
                chosen=group.first_row + chosen,
                chosen_from=dates[0],
                chosen_to=dates[group.span.edges[cuts[step]]],
                judged_to=dates[group.span.edges[cuts[step + 1]]],
                inside=float(inside[chosen]),
                outside=float(outside[chosen]),
                median_out=float(np.median(outside[known])),
                better_out=float(np.mean(outside[known] > outside[chosen])),
            )
        )
    return made


def _halves(sums: BlockSums, hold: BlockSums, group: Group) -> Stability:
    cuts = group.span.equal
    middle = int(cuts[len(cuts) // 2])
    first, second = _gain(sums, hold, slice(0, middle)), _gain(sums, hold, slice(middle, int(cuts[-1])))
    return _stability("first half", "second half", first, second)


def _decades(sums: BlockSums, hold: BlockSums, group: Group) -> list[Stability]:
    """Each decade against the next."""
    gains = [(name, _gain(sums, hold, slice(begin, end))) for name, begin, end in group.span.decades]
    return [_stability(earlier, later, first, second) for (earlier, first), (later, second) in pairwise(gains)]


def _stability(first_name: str, second_name: str, first: Array, second: Array) -> Stability:
    known = np.isfinite(first) & np.isfinite(second)
    return Stability(
        first_name=first_name,
        second_name=second_name,
        first=first,
        second=second,
        rank_correlation=rank_correlation(first[known], second[known]),
    )


def rank_correlation(first: Array, second: Array) -> float:
    """Spearman's rank correlation; NaN for fewer than three pairs or where one side does not vary."""
    if len(first) < 3 or np.ptp(first) == 0 or np.ptp(second) == 0:
        return float("nan")
    return float(stats.spearmanr(first, second).statistic)


def overlay_names(found: StudyAnswer) -> list[str]:
    """The settings of each row in words: ``put strike 95, call strike 110``."""
    axes = [axis.name for axis in found.plan.study.axes]
    columns = [[f"{name} {setting_word(value)}" for value in found.overlays[name]] for name in axes]
    return [", ".join(words) for words in zip(*columns, strict=True)]


def setting_word(value: object) -> str:
    """A value of an axis as it is shown."""
    return f"{value:g}" if isinstance(value, float) else str(value)


def sentence_of(found: GroupAnswer, names: Sequence[str]) -> str:
    """Whether the best can be told from the rest, in plain words; ``names`` are those of the study's rows."""
    if found.best is None:
        return "No overlay of this study can be compared: none has a return that varies against its comparison."
    best = f"The best of {found.tried:,} ({names[found.best]})"
    if found.tried == 1:
        best = f"The only overlay ({names[found.best]})"
    if found.distinguished is None:
        return f"{best} cannot be tested: the days are too few."
    said = []
    if found.check is not None:
        least = 1.0 / found.check.resamples
        chance = _share(found.check.luck, LEVEL) if found.check.luck else f"under {least:.1%}"
        said.append(f"a search as wide as this finds one as good by luck with a chance of {chance}")
    if np.isfinite(found.deflated.probability):
        said.append(
            "after so many trials the probability that it has any advantage at all is "
            f"{_share(found.deflated.probability, 1.0 - LEVEL)}"
        )
    verdict = "can be told from luck" if found.distinguished else "cannot be told from luck"
    return f"{best} {verdict}: {' and '.join(said)}."


def _share(value: float, limit: float) -> str:
    """In percent; never rounded to certainty, nor on to the limit it is held against."""
    if value > 0.995:
        return "over 99%"
    if value < 0.01 or (abs(value - limit) < 0.005 and value != limit):
        return "under 0.1%" if value < 0.0005 else f"{value:.1%}"
    return f"{value:.0%}"
