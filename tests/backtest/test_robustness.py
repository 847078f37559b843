"""Roll-day luck and break-even prices.

Rung: twin (single replays of the shifted rules, figures by pandas and numpy; break-evens found by scipy's root finder
on repricing done here), hand-worked (ranks, roots of polynomials, words).
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from functools import lru_cache, partial
from typing import Any

import numpy as np
import numpy.typing as npt
import pandas as pd
import pytest
from scipy.optimize import brentq

from backtest import NO_COSTS, Costs, Leg, Market, Overlay, PercentOfSpot, Replay, Volatility, replay
from backtest.analytics import robustness
from backtest.analytics.robustness import BreakEven, BreakEvens, RollDayLuck, break_evens, roll_day_luck, sharpe_gain

Array = npt.NDArray[np.float64]

PUT = Leg(position="long", right="put", roll="quarter", strike=PercentOfSpot(95))
CALL = Leg(position="short", right="call", roll="month", strike=PercentOfSpot(103), ratio=0.8)


@lru_cache
def market(seed: int, *, count: int = 900) -> Market:
    rng = np.random.default_rng(seed)
    days = pd.bdate_range("2012-01-02", periods=count, name="date")
    close = 100 * np.exp(np.cumsum(rng.normal(0.0002, 0.01, count)))
    vol = 0.16 + 0.05 * np.sin(np.arange(count) / 60)
    return Market.from_frame(pd.DataFrame({"close": close, "vol": vol, "rate": 0.02}, index=days))


def figures(wealth: Array, found: Replay) -> dict[str, float]:
    """Of one path, with pandas and numpy: Sharpe ratio, its gain over the same-beta mix, annual return, drawdown."""
    frame = pd.DataFrame({"own": wealth, "hold": found.spot / found.spot[0]}, index=pd.DatetimeIndex(found.dates))
    days = np.diff(frame.index.to_numpy()).astype("timedelta64[D]").astype(float)
    cash = 1.02 ** (days / 365) - 1  # all markets here: 2% a year, no dividend
    excess = frame.pct_change().iloc[1:].sub(cash, axis=0)
    beta = float(np.polyfit(excess["hold"], excess["own"], 1)[0])
    excess["mix"] = beta * excess["hold"]
    sharpe = excess.mean() / excess.std() * 252**0.5
    return {
        "sharpe": sharpe["own"],
        "sharpe_gain": sharpe["own"] - sharpe["mix"],
        "annual_return": float(wealth[-1]) ** (365.25 / days.sum()) - 1,
        "max_drawdown": (frame["own"] / frame["own"].cummax() - 1).min(),
    }


# ---------------------------------------------------------------- roll days

FIGURES = ["annual_return", "sharpe", "sharpe_gain", "max_drawdown"]


def shifted(overlay: Overlay, by: int) -> Overlay:
    return replace(overlay, legs=tuple(replace(leg, shift_days=leg.shift_days + by) for leg in overlay.legs))


@pytest.mark.parametrize("account", ["resize", "cash"])
def test_every_roll_day_is_a_replay_of_its_own(account: str) -> None:
    legs = (replace(PUT, shift_days=4), replace(CALL, shift_days=-2))
    overlay, volatility = Overlay(legs=legs, account=account), Volatility(put_shift=1.0)
    history = market(3)
    found = replay(history, overlay, volatility=volatility, start="2012-06-01", end="2015-03-31")
    luck = roll_day_luck(found, offsets=9)
    assert luck.offsets.tolist() == list(range(9))
    paths = []
    for by in range(9):
        one = replay(history, shifted(overlay, by), volatility=volatility, inception=found.dates[0], end="2015-03-31")
        paths.append(one.wealth)
        for name, value in figures(one.wealth, found).items():
            assert getattr(luck, name)[by] == pytest.approx(value, abs=1e-10), (by, name)
    np.testing.assert_array_equal(paths[0], found.wealth)  # the first is the user's own
    assert len(set(luck.annual_return.tolist())) == 9
    # held side by side: a ninth of the money on each day, left alone
    ladder = np.array([sum(path[day] for path in paths) / 9 for day in range(len(found))])
    side_by_side = figures(ladder, found)
    assert luck.ladder_annual_return == pytest.approx(side_by_side["annual_return"], abs=1e-12)
    assert luck.ladder_sharpe == pytest.approx(side_by_side["sharpe"], abs=1e-10)
    assert luck.ladder_max_drawdown == pytest.approx(side_by_side["max_drawdown"], abs=1e-12)
    for name in FIGURES:
        values = getattr(luck, name).tolist()
        assert luck.rank(name) == sum(value < values[0] for value in values) / 9


def test_rank_by_hand() -> None:
    values = np.array([2.0, 1.0, 3.0, 2.0, 0.5])  # two of five are below the first, one equals it
    names = dict.fromkeys(("annual_return", "sharpe", "sharpe_gain"), values)
    luck = RollDayLuck(
        offsets=np.arange(5), **names, max_drawdown=-values, ladder_annual_return=0, ladder_sharpe=0,
        ladder_max_drawdown=0,
    )  # fmt: skip
    assert luck.rank("sharpe") == luck.rank("annual_return") == 0.4
    assert luck.rank("max_drawdown") == 0.2


@pytest.mark.parametrize(("roll", "shift", "days"), [("month", 0, 21), ("quarter", 5, 63), ("year", 10, 252)])
def test_as_many_roll_days_as_the_cycle_has(roll: str, shift: int, days: int) -> None:
    leg = replace(PUT, roll=roll, term_months=None, shift_days=shift)
    luck = roll_day_luck(replay(market(2, count=600), Overlay(legs=(leg,))))
    assert len(luck.offsets) == days
    assert np.isfinite(luck.sharpe).all()


def test_gain_over_the_same_beta_mix_by_hand() -> None:
    # no cash return; hold +1/4, -1/8, +1/4, -1/8; overlay half of that and 1/16 more on the first two days:
    # 3/16, 0, 1/8, -1/16. Means 1/16 and 1/16; products of deviations (3/16)(1/8) + (-3/16)(-1/16) + (3/16)(1/16) +
    # (-3/16)(-1/8) = 18/256, squares of the hold's 4 (3/16)^2 = 36/256: a beta of a half.
    # Sum of squares of the overlay's (1/8)^2 + (1/16)^2 + (1/16)^2 + (1/8)^2 = 10/256, of the mix's 9/256, over 3
    returns, hold = np.array([3 / 16, 0, 1 / 8, -1 / 16]), np.array([0.25, -0.125, 0.25, -0.125])
    wealth, held = (np.cumprod(np.concatenate([[1.0], 1 + r])) for r in (returns, hold))
    expected = (1 / 16 / (10 / 768) ** 0.5 - 1 / 32 / (9 / 768) ** 0.5) * 252**0.5
    assert sharpe_gain(wealth, hold=held, rate_return=np.zeros(5)) == pytest.approx(expected, rel=1e-12)
    assert np.isnan(sharpe_gain(wealth, hold=np.ones(5), rate_return=np.zeros(5)))
    # the other way round the beta is minus a half, and so is the mix's share
    short = np.cumprod(np.concatenate([[1.0], 1 - returns]))
    assert sharpe_gain(short, hold=held, rate_return=np.zeros(5)) == pytest.approx(-expected, rel=1e-12)


# ---------------------------------------------------------------- break-evens

QUESTIONS = {"sharpe": "sharpe_gain", "return": "annual_return"}
CASES = {
    "puts and calls": (1, (PUT, CALL), Volatility(), Costs()),
    "from the user's own shifts": (4, (PUT, CALL), Volatility(put_shift=2.5, call_shift=-1.0), Costs()),
    "puts alone, a wide spread": (1, (PUT,), Volatility(), Costs(half_spread_vol=2.0)),
    "calls alone": (2, (CALL,), Volatility(), NO_COSTS),
}


def priced(what: str, points: float, volatility: Volatility, costs: Costs) -> tuple[Volatility, Costs]:
    if what == "half_spread":
        return volatility, replace(costs, half_spread_vol=points)
    calls = volatility.call_shift + (points if what == "all_legs" else 0.0)
    return Volatility(put_shift=volatility.put_shift + points, call_shift=calls), costs


def gap(points: float, *, name: str, what: str, case: str) -> float:
    """Of the overlay to its same-beta mix, or to the hold, at other prices; NaN where an option has none."""
    seed, legs, volatility, costs = CASES[case]
    volatility, costs = priced(what, points, volatility, costs)
    found = replay(market(seed), Overlay(legs=legs, costs=costs), volatility=volatility)
    if not np.isfinite(found.wealth).all():
        return float("nan")
    of_hold = figures(found.spot / found.spot[0], found)["annual_return"] if name == "annual_return" else 0.0
    return figures(found.wealth, found)[name] - of_hold


@pytest.fixture(scope="module")
def answers() -> dict[str, BreakEvens]:
    return {
        case: break_evens(replay(market(seed), Overlay(legs=legs, costs=costs), volatility=volatility))
        for case, (seed, legs, volatility, costs) in CASES.items()
    }


@pytest.mark.parametrize("what", ["all_legs", "puts", "half_spread"])
@pytest.mark.parametrize("case", CASES)
def test_break_evens_by_repricing(case: str, what: str, answers: dict[str, BreakEvens]) -> None:
    if case == "calls alone" and what == "puts":
        nothing = BreakEven(value=None, searched=(0.0, 0.0))
        assert answers[case].sharpe_puts == answers[case].return_puts == nothing
        return
    start = CASES[case][3].half_spread_vol if what == "half_spread" else 0.0
    for question, name in QUESTIONS.items():
        found: BreakEven = getattr(answers[case], f"{question}_{what}")
        at = partial(gap, name=name, what=what, case=case)
        low, high = found.searched
        assert high == 20.0
        if what == "half_spread":
            assert low == 0.0
        else:  # the lowest whole shift at which every option still has a vol
            assert np.isfinite(at(low))
            assert np.isnan(at(low - 1))
        grid = np.linspace(low, high, 26)  # not the product's own grid
        values = [at(x) for x in grid]
        turns = [i for i in range(len(grid) - 1) if values[i] * values[i + 1] < 0]
        roots = [brentq(at, grid[i], grid[i + 1], xtol=1e-10) for i in turns]
        if found.value is None:
            assert roots == []
            continue
        assert found.value == pytest.approx(min(roots, key=lambda x: abs(x - start)), abs=2e-6)
        assert at(found.value) == pytest.approx(0.0, abs=2e-7)  # the two are equal at these prices


def test_both_answers_occur_and_calls_play_no_part_for_puts_alone(answers: dict[str, BreakEvens]) -> None:
    every = [getattr(a, name).value for a in answers.values() for name in BreakEvens.__dataclass_fields__]
    known = [value for value in every if value is not None]
    assert 8 <= len(known) <= len(every) - 8
    assert min(known) < 0 < max(known)
    alone = answers["puts alone, a wide spread"]
    assert alone.sharpe_puts == alone.sharpe_all_legs
    assert alone.return_puts == alone.return_all_legs
    assert alone.sharpe_puts.value is not None


def test_no_price_turns_a_put_in_a_crash() -> None:
    # the index loses 60% in the term of each put: far more than 20 points of vol can cost
    days = pd.bdate_range("2012-01-02", "2013-06-28", name="date")
    close = 100 * np.exp(-np.arange(len(days)) / 70 + 0.01 * np.sin(np.arange(len(days))))
    falling = Market.from_frame(pd.DataFrame({"close": close, "vol": 0.30}, index=days), rate=0.02)
    answer = break_evens(replay(falling, Overlay(legs=(PUT,))))
    assert answer.return_all_legs == answer.return_puts
    assert (answer.return_puts.value, answer.return_puts.searched[1]) == (None, 20.0)
    assert answer.return_half_spread.words() == "none from +0.0 to +20.0 vol points"


@pytest.mark.parametrize(
    ("function", "start", "expected"),
    [
        (lambda x: (x + 7.3) * (x - 2.2) * (x - 4.6), 0.0, 2.2),
        (lambda x: (x + 7.3) * (x - 2.2) * (x - 4.6), 4.0, 4.6),
        (lambda x: (x + 7.3) * (x - 2.2) * (x - 4.6), -3.0, -7.3),
        (lambda x: (x + 1.5) * (x - 3.0), 1.0, 3.0),  # zero on a point of the grid
        (lambda x: (x - 3.0) ** 2, 0.0, 3.0),  # touches
        (lambda x: x**2 + 1.0, 0.0, None),
        (lambda x: np.sqrt(x + 5.5) - 3.0 if x > -5.5 else float("nan"), 0.0, 3.5),
    ],
    ids=["near", "nearer above", "nearer below", "on the grid", "touching", "none", "unknown below"],
)
def test_the_nearest_root(function: Callable[[float], float], start: float, expected: float | None) -> None:
    points = np.linspace(-20.0, 20.0, 41)
    gaps = np.array([function(x) for x in points])
    found = robustness._nearest_root(points, gaps, function, start)
    assert found.value is None if expected is None else found.value == pytest.approx(expected, abs=2e-6)
    known = points[np.isfinite(gaps)]
    assert found.searched == (known[0], known[-1])


def test_nearest_to_the_prices_used(monkeypatch: pytest.MonkeyPatch) -> None:
    # two break-evens, near 1 and 3: vol shifts are counted from the prices used, the half-spread is 2.5 of them
    monkeypatch.setattr(robustness._Curve, "gaps", lambda _, points: np.array([(points - 1.01) * (points - 3.01)] * 2))
    found = break_evens(replay(market(1, count=200), Overlay(legs=(PUT,), costs=Costs(half_spread_vol=2.5))))
    values = [getattr(found, name).value for name in BreakEvens.__dataclass_fields__]
    assert values == pytest.approx([1.01, 1.01, 3.01, 1.01, 1.01, 3.01], abs=2e-6)


def test_nothing_known_and_words() -> None:
    unknown: Any = robustness._nearest_root(np.arange(3.0), np.full(3, np.nan), lambda _: float("nan"), 0.5)
    assert unknown == BreakEven(value=None, searched=(0.5, 0.5))
    assert BreakEven(value=1.236, searched=(-8.0, 20.0)).words() == "+1.24 vol points"
    assert BreakEven(value=-0.5, searched=(-8.0, 20.0)).words("points") == "-0.50 points"
    assert BreakEven(value=None, searched=(-8.0, 20.0)).words("points") == "none from -8.0 to +20.0 points"
