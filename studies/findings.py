"""What a committee asks beyond the headline figures, worked out from an answer."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from backtest.analytics.episodes import Episode, Rally, WithoutEpisode, episodes, rallies, without_worst
from backtest.analytics.ledger import Ledger, whole_ledger, yearly_ledger
from backtest.analytics.periods import (
    CalendarTable,
    Extreme,
    Rolling,
    best_and_worst,
    calendar_table,
    rolling_figures,
)
from backtest.analytics.robustness import BreakEvens, RollDayLuck, break_evens, roll_day_luck, sharpe_gain

from .replay_history import Answer

Array = npt.NDArray[np.float64]

#: Lengths of the stretches in the table of best and worst, in months.
STRETCHES = {"month": 1, "quarter": 3, "12 months": 12}
ROLLING_YEARS = (1, 3)


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Findings:
    """Everything of the report that is not in the answer itself.

    ``calendar``, ``extremes`` and ``rolling`` are by name of the path (``overlay``, ``hold``, ``mix_same_beta``);
    ``rolling`` then by years. ``ladder_gains`` is the Sharpe difference to the same-beta mix by smile.
    """

    episodes: list[Episode]
    rallies: list[Rally]
    without_worst: list[WithoutEpisode]
    ledger: Ledger
    ledger_by_year: Ledger
    calendar: dict[str, CalendarTable]
    extremes: dict[str, dict[str, tuple[Extreme, Extreme] | None]]
    rolling: dict[str, dict[int, Rolling]]
    luck: RollDayLuck
    break_evens: BreakEvens
    ladder_gains: dict[str, float]


def find(answer: Answer, *, progress: Callable[[str], None] = lambda step: None) -> Findings:
    """Work out everything for the report; ``progress`` is told the name of each long step."""
    replay = answer.replay
    paths = {name: path for name, path in answer.paths.items() if np.isfinite(path).all()}
    names: tuple[str, ...] = ("overlay", "hold", "mix_same_beta")
    shown = {name: paths[name] for name in names if name in paths}
    progress("falls, rallies and ledger")
    rate = replay.rate_return
    extremes = {
        name: {length: best_and_worst(path, replay.dates, months=months) for length, months in STRETCHES.items()}
        for name, path in shown.items()
    }
    rolling = {
        name: {years: rolling_figures(path, hold=replay.hold, rate_return=rate, years=years) for years in ROLLING_YEARS}
        for name, path in shown.items()
    }
    ledger, by_year = whole_ledger(replay), yearly_ledger(replay)
    progress("other roll days")
    luck = roll_day_luck(replay)
    progress("break-even prices")
    turning = break_evens(replay)
    return Findings(
        episodes=episodes(replay, paths),
        rallies=rallies(replay, paths),
        without_worst=without_worst(replay, paths),
        ledger=ledger,
        ledger_by_year=by_year,
        calendar={name: calendar_table(path, replay.dates) for name, path in shown.items()},
        extremes=extremes,
        rolling=rolling,
        luck=luck,
        break_evens=turning,
        ladder_gains={
            name: sharpe_gain(rung.replay.wealth, hold=replay.hold, rate_return=rate)
            for name, rung in answer.ladder.items()
        },
    )
