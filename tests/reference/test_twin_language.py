"""Rung: twin. The overlay language, rule by rule, account by account and combined: the engine against plain loops.

Tolerances are those of ``twin_comparisons.py``: wealth every day within 1e-12 relative, strikes as well (solved ones
are asked to be exact to 1e-10), roll dates and flags exactly.
"""

from __future__ import annotations

from dataclasses import replace
from datetime import date

import pytest

from backtest import Leg, Overlay

from . import twin_comparisons as twins
from .slow_calendar import Calendar
from .slow_lines import lines_of
from .slow_rules import percentile
from .slow_strikes import nearest_listed
from .twin_cases import Case, put
from .twin_comparisons import Pair, demo_folder
from .twin_language_cases import CASES
from .twin_language_markets import market_frame


def name_of(case: Case) -> str:
    return case.name


@pytest.fixture(scope="module", params=CASES, ids=name_of)
def pair(request: pytest.FixtureRequest, tmp_path_factory: pytest.TempPathFactory) -> Pair:
    return twins.replay_both(request.param, market_frame(request.param.market, demo_folder(tmp_path_factory)))


# ---------------------------------------------------------------- day by day


def test_days(pair: Pair) -> None:
    twins.check_days(pair)


def test_wealth_every_day(pair: Pair) -> None:
    twins.check_wealth(pair)


def test_holdings_cash_options_and_delta_every_day(pair: Pair) -> None:
    for name in twins.HOLDINGS + twins.SMALL_DIFFERENCES:
        twins.check_daily(pair, name)


# ---------------------------------------------------------------- roll by roll


def test_roll_legs_and_dates(pair: Pair) -> None:
    twins.check_legs_and_dates(pair)


def test_roll_flags(pair: Pair) -> None:
    twins.check_flags(pair)


def test_roll_quantities(pair: Pair) -> None:
    for name in twins.ROLL_QUANTITIES:
        twins.check_roll_quantity(pair, name)


def test_roll_amounts(pair: Pair) -> None:
    for name in twins.ROLL_AMOUNTS:
        twins.check_roll_amount(pair, name)


def test_roll_delta(pair: Pair) -> None:
    twins.check_roll_delta(pair)


# ---------------------------------------------------------------- what the cases are chosen for

# a flag, and the cases in which the twin must have set it
HAPPENS = {
    "no solution": [
        "delta without a solution: the discount of the dividends alone is lower",
        "premium percent, a tiny one, and one that ten years of dividends put out of reach",
        "financed cannot be: the floor binds, or there is no root at all",
        "no solution, and a ratchet that has a strike to offer",
        "no solution, and a strike that is kept",
        "gate: mirrored, financed and bounded by legs that are not there",
    ],
    "lowest strike": ["bounds of both kinds", "financed cannot be: the floor binds, or there is no root at all"],
    "highest strike": [
        "bounds of both kinds",
        "kept until moved under a ratchet, bounds and a step, decided a day before",
    ],
    "lifted over the put": ["a financed call not below the put"],
    "ratchet": [
        "ratchet with strike step",
        "ratchet down a fall: let go once above spot",
        "no solution, and a ratchet that has a strike to offer",
        "ladder of puts in a half-year with a ratchet",
    ],
    "strike kept": ["kept until moved", "kept until moved under a ratchet, bounds and a step, decided a day before"],
    "stub": ["shifted third Fridays", "ladder of three, resize", "gate: signal, run out, at once"],
    "replaced, delta low": [
        "early: delta put that has risen out of reach",
        "early: decided a day before",
        "early: all of them, in both legs, on the S&P 500",
    ],
    "replaced, profit taken": ["early: take profit", "early: decided a day before"],
    "replaced, value low": [
        "early: a sold call that has lost four fifths",
        "whole contracts of ten, two thirds of a put, an inner roll and a gate",
    ],
    "closed by its gate": [
        "gate: signal, close, at once",
        "gate: signal, close, next roll",
        "gate: price below its mean, on all legs, one with its own",
        "gate: decided a day before, with a ladder and an early rule",
    ],
    "proceeds below zero": ["whole contracts of ten, two thirds of a put, an inner roll and a gate"],
}


def test_what_is_under_test_happens(pair: Pair) -> None:
    flags = set().union(*pair.twin_rolls["flag"])
    assert {flag for flag, cases in HAPPENS.items() if pair.case.name in cases} <= flags


def test_cases_named_above_exist() -> None:
    names = [case.name for case in CASES]
    assert len(names) == len(set(names))
    assert {name for cases in HAPPENS.values() for name in cases} <= set(names)


IN_CONTRACTS = [case for case in CASES if case.overlay.portfolio is not None]
BORROWING = [case for case in CASES if case.overlay.costs.borrow_spread > 0.0]


@pytest.mark.parametrize("case", IN_CONTRACTS, ids=name_of)
def test_rounding_to_whole_contracts_bites(case: Case, tmp_path_factory: pytest.TempPathFactory) -> None:
    frame = market_frame(case.market, demo_folder(tmp_path_factory))
    in_fractions = replace(case, overlay=replace(case.overlay, portfolio=None))
    rounded, unrounded = twins.replay_twin(case, frame), twins.replay_twin(in_fractions, frame)
    assert abs(rounded.wealth[-1] / unrounded.wealth[-1] - 1.0) > 1e-3


@pytest.mark.parametrize("case", BORROWING, ids=name_of)
def test_cash_below_zero_is_borrowed(case: Case, tmp_path_factory: pytest.TempPathFactory) -> None:
    assert min(twins.replay_twin(case, market_frame(case.market, demo_folder(tmp_path_factory))).cash) < -0.02


# ---------------------------------------------------------------- what the twin itself stands on, worked by hand


@pytest.mark.parametrize(
    ("strike", "step", "spot", "expected"),
    [
        (97.4, 5.0, 100.0, 95.0),
        (97.6, 5.0, 100.0, 100.0),
        (97.5, 5.0, 100.0, 95.0),  # half-way, below spot: down
        (102.5, 5.0, 100.0, 105.0),  # half-way, above spot: up
        (1.0, 5.0, 100.0, 5.0),  # nothing is listed at zero
    ],
)
def test_nearest_listed_strike(strike: float, step: float, spot: float, expected: float) -> None:
    assert nearest_listed(strike, step, spot) == expected


def test_percentile_is_linear_between_order_statistics() -> None:
    assert percentile([3.0, 1.0, 2.0], 50) == 2.0
    assert percentile([4.0, 1.0, 2.0, 3.0], 50) == 2.5
    assert percentile([10.0, 20.0, 30.0, 40.0, 50.0], 80) == 42.0  # place 3.2 of 0 to 4


def test_calendar_beyond_the_end_of_the_file() -> None:
    """A file of three days, the last Thursday 2008-03-20: Friday the 21st is position 3, Monday the 24th is 4."""
    calendar = Calendar([date(2008, 3, 18), date(2008, 3, 19), date(2008, 3, 20)])
    assert [calendar.at(p) for p in (2, 3, 4, -1)] == [date(2008, 3, 20), date(2008, 3, 21), date(2008, 3, 24), None]
    assert [calendar.position(day) for day in (date(2008, 3, 18), date(2008, 3, 21), date(2008, 3, 25))] == [0, 3, 5]
    march, may = 12 * 2008 + 2, 12 * 2008 + 4
    assert calendar.month_end(march) == date(2008, 3, 31)
    assert calendar.month_end(may) == date(2008, 5, 30)  # the 31st is a Saturday
    assert calendar.month_end(march - 1) is None
    assert calendar.expiry(march) == date(2008, 3, 21)


@pytest.mark.parametrize(
    ("leg", "rungs"),
    [
        (put(ladder=3, roll="quarter", phase=1), [(1, 0), (2, 0), (0, 0)]),
        (put(ladder=2, roll="quarter", shift_days=1), [(0, 1), (0, 33)]),  # 63 / 2 = 31.5, to the even 32
        (put(ladder=2, roll="month"), [(0, 0), (0, 10)]),  # 21 / 2 = 10.5, to the even 10
        (put(ladder=4, roll="days", every=10, phase=6), [(6, 0), (8, 0), (1, 0), (4, 0)]),  # 2.5 to 2, 5, 7.5 to 8
        (put(ladder=2, roll="half", stagger=False), [(0, 0), (0, 0)]),
    ],
)
def test_rungs_of_a_ladder(leg: Leg, rungs: list[tuple[int, int]]) -> None:
    lines = lines_of(Overlay(legs=(leg,)))
    assert [(line.phase, line.shift_days) for line in lines] == rungs
    assert [line.ratio for line in lines] == [1.0 / len(rungs)] * len(rungs)
