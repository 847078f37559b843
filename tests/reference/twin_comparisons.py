"""How a replay of the engine is compared with one of the slow twin: every day, every roll, every flag.

A test file gives a fixture ``pair`` and calls :func:`check_days`, :func:`check_daily` and so on.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest

from backtest import Market, Replay, replay

from .slow_prices import history_from_frame
from .slow_twin import TwinReplay, replay_slowly
from .twin_cases import Case

# Wealth grows from 1 through a few hundred rounded steps; 1e-12 is some thousands of units in the last place.
RTOL = 1e-12
# A premium is a difference of two numbers of the size of spot, and a far option is worth a tiny part of it:
# what is claimed of prices is 1e-12 of spot, not of the premium.
ATOL_OF_SPOT = 1e-12
# Cash is what is left of sums of the size of wealth.
ATOL_CASH = 1e-12

HOLDINGS = ["shares", "units"]
SMALL_DIFFERENCES = ["cash", "option_value", "delta"]
ROLL_QUANTITIES = ["spot_open", "forward", "strike", "vol", "units", "spot_close"]
ROLL_AMOUNTS = ["premium", "cost", "settled", "exit_cost", "open_value", "profit"]


@dataclass(frozen=True)
class Pair:
    """One case as replayed by both."""

    case: Case
    frame: pd.DataFrame
    engine: Replay
    twin: TwinReplay

    @cached_property
    def engine_rolls(self) -> pd.DataFrame:
        return self.engine.rolls_frame()

    @cached_property
    def twin_rolls(self) -> pd.DataFrame:
        rolls = pd.DataFrame(self.twin.rolls)
        for name in ("opened", "expiry", "closed"):
            rolls[name] = pd.to_datetime(rolls[name])
        return rolls


def demo_folder(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return tmp_path_factory.getbasetemp() / "twin_demo_market"


def _constants(case: Case) -> dict[str, Any]:
    return {"rate": case.rate, "dividend_yield": case.dividend_yield}


def _window(case: Case) -> dict[str, Any]:
    return {"start": case.start, "end": case.end, "inception": case.inception}


def replay_twin(case: Case, frame: pd.DataFrame) -> TwinReplay:
    history = history_from_frame(frame, **_constants(case))
    return replay_slowly(history, case.overlay, case.volatility, **_window(case))


def replay_both(case: Case, frame: pd.DataFrame) -> Pair:
    market = Market.from_frame(frame, **_constants(case))
    engine = replay(market, case.overlay, volatility=case.volatility, **_window(case))
    return Pair(case, frame, engine, replay_twin(case, frame))


# ---------------------------------------------------------------- day by day


def check_days(pair: Pair) -> None:
    assert pair.engine.dates.astype(object).tolist() == pair.twin.days
    assert len(pair.twin.days) > 500


def check_wealth(pair: Pair) -> None:
    assert pair.engine.wealth[0] == pair.twin.wealth[0] == 1.0
    assert np.min(pair.twin.wealth) > 0.05
    np.testing.assert_allclose(pair.engine.wealth, pair.twin.wealth, rtol=RTOL, atol=0.0)


def check_daily(pair: Pair, name: str) -> None:
    """One of ``HOLDINGS`` or ``SMALL_DIFFERENCES``."""
    atol = ATOL_CASH if name in SMALL_DIFFERENCES else 0.0
    theirs, ours = getattr(pair.engine, name), getattr(pair.twin, name)
    np.testing.assert_allclose(theirs, ours, rtol=RTOL, atol=atol, err_msg=name)


def check_daily_frame(pair: Pair) -> None:
    frame = pair.engine.to_frame()
    assert [stamp.date() for stamp in frame.index] == pair.twin.days
    np.testing.assert_allclose(frame["overlay"], pair.twin.wealth, rtol=RTOL, atol=0.0)
    np.testing.assert_allclose(frame["delta"], pair.twin.delta, rtol=RTOL, atol=ATOL_CASH)


# ---------------------------------------------------------------- roll by roll


def check_legs_and_dates(pair: Pair) -> None:
    assert len(pair.twin_rolls) > 5
    for name in ("leg", "right", "position", "ratio"):
        assert pair.engine_rolls[name].tolist() == pair.twin_rolls[name].tolist()
    for name in ("opened", "expiry", "closed"):
        theirs, ours = (rolls[name].dt.date.astype(object).tolist() for rolls in (pair.engine_rolls, pair.twin_rolls))
        assert [str(day) for day in theirs] == [str(day) for day in ours]


def check_flags(pair: Pair) -> None:
    theirs = [set(flag.split("; ")) if flag else set() for flag in pair.engine_rolls["flag"]]
    assert theirs == pair.twin_rolls["flag"].tolist()


def check_roll_quantity(pair: Pair, name: str) -> None:
    """One of ``ROLL_QUANTITIES``."""
    np.testing.assert_allclose(pair.engine_rolls[name], pair.twin_rolls[name], rtol=RTOL, atol=0.0, err_msg=name)


def check_roll_amount(pair: Pair, name: str) -> None:
    """One of ``ROLL_AMOUNTS``."""
    floor = ATOL_OF_SPOT * pair.twin_rolls["spot_open"].to_numpy()
    theirs, ours = pair.engine_rolls[name].to_numpy(), pair.twin_rolls[name].to_numpy()
    assert np.isnan(theirs).tolist() == np.isnan(ours).tolist(), name
    excess = np.abs(theirs - ours) - floor - RTOL * np.abs(ours)
    assert np.nan_to_num(excess, nan=-1.0).max() <= 0.0, name


def check_roll_delta(pair: Pair) -> None:
    np.testing.assert_allclose(pair.engine_rolls["delta"], pair.twin_rolls["delta"], rtol=0.0, atol=RTOL)
