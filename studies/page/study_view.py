"""A study's answer as its page looks at it: one view a history and window, with figures by name and axes that vary."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
import pandas as pd

from backtest import Replay
from backtest.analytics.comparisons import mix_wealth
from backtest.analytics.drawdowns import drawdown_path
from backtest.analytics.performance import DAYS_IN_CALENDAR_YEAR, annual_return, daily_excess
from backtest.analytics.resampling import TIE

from ..axes import Axis
from ..batches import FIGURES
from ..expansion import Expansion
from ..study_answer import GroupAnswer, StudyAnswer, replay_member
from .words import number

Array = npt.NDArray[np.float64]
Positions = npt.NDArray[np.intp]

#: Shares of stock of the mixes that are the line to beat.
MIX_SHARES = np.linspace(1.0, 0.0, 101)


@dataclass(frozen=True, slots=True, kw_only=True)
class FigureWords:
    """A figure of an overlay, and how it is written.

    ``head`` is its title over a column, ``unit`` what it is drawn in, ``scale`` the factor to that unit.
    """

    field: str
    title: str
    head: str
    unit: str
    scale: float = 1.0
    digits: int = 2
    sign: bool = True

    def written(self, value: float) -> str:
        """The value in a cell, with a percent sign where that is its unit."""
        return number(self.scale * value, self.digits, sign=self.sign, unit="%" if self.unit == "percent" else "")


SHARPE_GAIN = FigureWords(
    field="sharpe_less_mix", title="Sharpe ratio less the same-beta mix's", head="Sharpe less mix's",
    unit="Sharpe ratio",
)  # fmt: skip
SHARPE_GAIN_ON_HOLD = FigureWords(
    field="sharpe_less_hold", title="Sharpe ratio less the hold's", head="Sharpe less hold's", unit="Sharpe ratio"
)
RETURN_GAIN = FigureWords(
    field="return_less_hold", title="return a year less the hold's", head="return less hold's, points",
    unit="points a year", scale=100.0,
)  # fmt: skip
RETURN_MIX = FigureWords(
    field="return_less_mix", title="return a year less the same-beta mix's", head="return less mix's, points",
    unit="points a year", scale=100.0,
)  # fmt: skip
REMOVED = FigureWords(
    field="drawdown_removed", title="drawdown removed", head="drawdown removed, points", unit="points", scale=100.0,
    digits=1,
)  # fmt: skip
INFORMATION = FigureWords(
    field="information_ratio", title="information ratio", head="information ratio", unit="information ratio"
)
RETURN = FigureWords(
    field="annual_return", title="return a year", head="return a year", unit="percent", scale=100.0, digits=1,
    sign=False,
)  # fmt: skip
VOLATILITY = FigureWords(
    field="volatility", title="volatility a year", head="volatility a year", unit="percent", scale=100.0, digits=1,
    sign=False,
)  # fmt: skip
SHARPE = FigureWords(field="sharpe", title="Sharpe ratio", head="Sharpe ratio", unit="Sharpe ratio", sign=False)
DRAWDOWN = FigureWords(
    field="max_drawdown", title="maximum drawdown", head="maximum drawdown", unit="percent", scale=100.0, digits=1,
    sign=False,
)  # fmt: skip
BETA = FigureWords(field="beta", title="beta to the hold", head="beta", unit="beta", sign=False)


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class View:
    """One history and one window.

    Attributes
    ----------
    number : int
        From 1 on.
    title : str
        The history, and the window where the study has several.
    group : GroupAnswer
    axes : tuple of Axis
        Those that vary here.
    positions : ndarray of int, shape (overlay, axis)
        Place of each overlay on them.
    frame : DataFrame
        Figures, a row an overlay.
    names : sequence of str
        Settings of each overlay in words.
    all_names : sequence of str
        The same for the whole study.
    own, best : int or None
        Rows of the reader's own overlay and of the best.
    """

    number: int
    title: str
    group: GroupAnswer
    axes: tuple[Axis, ...]
    positions: Positions
    frame: pd.DataFrame
    all_names: Sequence[str]
    own: int | None
    best: int | None

    @property
    def names(self) -> Sequence[str]:
        """Settings of each overlay of this view in words."""
        return self.all_names[self.group.rows]

    def __len__(self) -> int:
        return len(self.positions)

    def figure(self, field: str) -> Array:
        """A figure of every overlay, shape ``(overlay,)``, NaN where it cannot be had."""
        return self.frame[field].to_numpy(dtype=np.float64)

    def worth(self, field: str, row: int | None) -> float:
        """A figure of one overlay; NaN for none."""
        return float("nan") if row is None else float(self.figure(field)[row])

    @property
    def under_a_year(self) -> bool:
        """Whether returns are totals (C11)."""
        return self.days < DAYS_IN_CALENDAR_YEAR

    @property
    def days(self) -> int:
        """Calendar days that all overlays have in common."""
        return int((self.group.last - self.group.first) / np.timedelta64(1, "D"))

    @property
    def ranking(self) -> Positions:
        """Rows from the highest information ratio down; rows without one come last, in the order of the study."""
        return np.argsort(-self.figure("information_ratio"), kind="stable")  # NaN is sorted to the end

    def median_grid(self, across: int, down: int, values: Array) -> Array:
        """Median of values over the overlays of each pair of axis values, shape ``(down, across)``."""
        sizes = (len(self.axes[down].values), len(self.axes[across].values))
        cell = self.positions[:, down] * sizes[1] + self.positions[:, across]
        middle = pd.Series(values).groupby(cell).median()
        made = np.full(sizes[0] * sizes[1], np.nan)
        made[middle.index.to_numpy()] = middle.to_numpy()
        return made.reshape(sizes)

    def by_setting(self, axis: int, values: Array) -> tuple[Array, Positions]:
        """Values by the setting of all other axes and the place on one: shape ``(setting, label)``; settings by row."""
        others = [place for place in range(len(self.axes)) if place != axis]
        _, setting = np.unique(self.positions[:, others], axis=0, return_inverse=True)
        setting = np.ravel(setting)
        made = np.full((int(setting.max()) + 1, len(self.axes[axis].values)), np.nan)
        made[setting, self.positions[:, axis]] = values
        return made, setting


def views_of(found: StudyAnswer, names: Sequence[str]) -> list[View]:
    """A view of each group; ``names`` are the settings of the study's rows in words."""
    study = found.plan.study
    windows = [n for n, axis in enumerate(study.axes) if any(f.startswith("window") for f in axis.fields)]
    figures = found.overlays[list(FIGURES)]
    made = []
    for count, (group, planned) in enumerate(zip(found.groups, found.plan.groups, strict=True), start=1):
        points = planned.points
        varying = [n for n in range(len(study.axes)) if np.ptp(points[:, n]) > 0]
        of_window = [f"{study.axes[n].name} {study.axes[n].labels[points[0, n]]}" for n in windows]
        first = group.rows.start
        made.append(
            View(
                number=count,
                title=", ".join([group.history, *of_window]),
                group=group,
                axes=tuple(study.axes[n] for n in varying),
                positions=points[:, varying].astype(np.intp),
                frame=figures.iloc[group.rows],
                all_names=names,
                own=None if group.own is None else group.own - first,
                best=None if group.best is None else group.best - first,
            )
        )
    return made


def one_replay(found: StudyAnswer, view: View) -> Replay:
    """The reader's own overlay replayed, or else the best, or else the first."""
    planned = found.plan.groups[view.number - 1]
    row = next(row for row in (view.own, view.best, 0) if row is not None)
    return replay_member(found.plan, Expansion(found.plan.study), planned, row)


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class MixLine:
    """Mixes of stock and cash over the days that all overlays have in common, shape ``(share,)``: the line to beat.

    ``cost`` is the return a year less than the hold's, ``removed`` what is off its deepest fall; decimals.
    """

    share: Array
    cost: Array
    removed: Array

    def cost_of(self, removed: Array) -> Array:
        """What a mix costs that removes as much; NaN outside the mixes from all stock to none."""
        order = np.argsort(self.removed, kind="stable")
        return np.asarray(np.interp(removed, self.removed[order], self.cost[order], left=np.nan, right=np.nan))


def mix_line(found: Replay) -> MixLine | None:
    """The mixes of share 1 to 0; None where the days are too few."""
    hold, cash, dates = found.hold, found.rate_return, found.dates
    if len(dates) < 3:
        return None
    excess = daily_excess(hold, cash)
    grown = np.array([mix_wealth(float(share), excess, cash[1:]) for share in MIX_SHARES])
    returns = np.array([float(annual_return(path, dates)) for path in grown])
    falls = drawdown_path(grown).min(axis=1)
    return MixLine(share=MIX_SHARES, cost=returns[0] - returns, removed=falls - falls[0])


def better_than_mixes(view: View, line: MixLine) -> tuple[int, int]:
    """How many overlays cost less than the mix that removes as much, and of how many that can be said."""
    mixes = line.cost_of(view.figure("drawdown_removed"))
    cost = -view.figure("return_less_hold")
    both = np.isfinite(mixes) & np.isfinite(cost)
    return int(np.count_nonzero(cost[both] < mixes[both] - TIE)), int(np.count_nonzero(both))


def median(values: Array) -> float:
    """Median of the finite values; NaN without any."""
    there = values[np.isfinite(values)]
    return float(np.median(there)) if there.size else float("nan")


def any_known(values: Array) -> bool:
    """Whether there is a finite value."""
    return bool(np.isfinite(values).any())
