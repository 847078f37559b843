"""The solver behind solved strikes.

Rung: independent library (scipy's ``brentq`` on thousands of random functions) and identity (roots known beforehand,
signs on both sides of a root, ends, functions without a root).
"""

from __future__ import annotations

from collections.abc import Callable
from functools import partial
from typing import Any

import numpy as np
import numpy.typing as npt
import pytest
from scipy.optimize import brentq

from backtest.strikes.solve import MOST_STEPS, solve

Array = npt.NDArray[np.float64]

#: What a root is good to: the solver's own last bracket, a unit in the last place of the functions added.
CLOSE = 4e-15


def shapes(rng: np.random.Generator, size: int) -> tuple[list[Callable[[Array], Array]], Array]:
    """Increasing functions of many shapes, each with one root, and those roots."""
    root = rng.uniform(-5.0, 5.0, size)
    steep, flat = np.exp(rng.uniform(-3.0, 4.0, size)), np.exp(rng.uniform(-2.0, 2.0, size))
    lift = np.tanh(rng.uniform(-0.9, 0.9, size))
    return [
        lambda x: steep * (x - root),
        lambda x: (x - root) * (1.0 + flat * (x - root) ** 2),
        lambda x: np.expm1(flat * (x - root)),
        lambda x: -np.expm1(-flat * (x - root)),
        lambda x: np.arctan(steep * (x - root)),
        lambda x: np.clip(steep * (x - root), -0.01, 0.5),  # flat at both ends
        lambda x: np.maximum(steep * (x - root), -1e-3 * flat),  # flat below
        lambda x: (x - root) + 0.99 * np.sin(x - root),  # wavy
        lambda x: np.where(x < root, 1e-9, 1e9) * (x - root),  # a kink of 18 orders of magnitude
        lambda x: np.log(np.maximum(x + 10.0, 1e-250) / (root + 10.0)),
        lambda x: np.sign(x - root) * np.sqrt(np.abs(x - root)),  # infinitely steep at the root
        lambda x: np.arctan(steep * (x - root) + lift) - np.arctan(lift),
    ], root


@pytest.mark.parametrize("number", range(12))
@pytest.mark.parametrize("rising", [1.0, -1.0], ids=["rising", "falling"])
def test_roots_by_brentq(number: int, rising: float) -> None:
    rng = np.random.default_rng([number, int(rising > 0)])
    size = 400
    functions, root = shapes(rng, size)
    low, high = root - rng.exponential(3.0, size) - 1e-6, root + rng.exponential(3.0, size) + 1e-6

    def function(x: Array) -> Array:
        return rising * functions[number](x)

    def single(x: float, row: int) -> float:
        return float(function(np.full(size, x))[row])

    found = solve(function, low, high)
    wanted = np.array([brentq(single, low[n], high[n], args=(n,), xtol=1e-15, rtol=1e-15) for n in range(size)])
    scale = 1.0 + np.abs(root)
    assert np.max(np.abs(found - wanted) / scale) < CLOSE
    # whatever brentq says: the root lies within a hair
    assert (rising * function(found - CLOSE * scale) <= 0.0).all()
    assert (rising * function(found + CLOSE * scale) >= 0.0).all()
    # ends that are known change nothing but the steps
    known = solve(function, low, high, ends=(function(low), function(high)))
    assert np.max(np.abs(known - wanted) / scale) < CLOSE
    # nor does the order of the ends
    assert np.max(np.abs(solve(function, high, low) - wanted) / scale) < CLOSE


@pytest.mark.parametrize("number", range(12))
def test_it_is_done_within_its_steps(number: int) -> None:
    rng = np.random.default_rng(number)
    functions, root = shapes(rng, 2_000)
    calls = 0

    def function(x: Array) -> Array:
        nonlocal calls
        calls += 1
        return functions[number](x)

    solve(function, root - rng.uniform(1e-3, 20.0, 2_000), root + rng.uniform(1e-3, 20.0, 2_000))
    assert calls - 2 < MOST_STEPS  # two for the ends


@pytest.mark.parametrize("given", [False, True], ids=["ends unknown", "ends known"])
def test_roots_at_the_ends(given: bool) -> None:
    low, high = np.array([0.0, -1.0, 2.0, 5.0, 1.0]), np.array([1.0, 0.0, 3.0, 5.0, 2.0])
    roots = np.array([0.0, 0.0, 3.0, 5.0, 1.0])

    def function(x: Array) -> Array:
        return (x - roots) ** 3

    ends = (function(low), function(high)) if given else None
    assert solve(function, low, high, ends=ends).tolist() == roots.tolist()


def test_flat_at_zero_gives_a_point_at_zero() -> None:
    found = solve(lambda x: np.clip(x, 0.0, None) * np.ones(1), np.array([-1.0]), np.array([1.0]))
    assert found[0] <= 0.0
    both = solve(lambda x: 0.0 * x, np.array([-1.0]), np.array([1.0]))
    assert -1.0 <= both[0] <= 1.0


@pytest.mark.parametrize("given", [False, True], ids=["ends unknown", "ends known"])
def test_no_root_is_nan_and_leaves_the_others_alone(given: bool) -> None:
    lift = np.array([1.0, -0.25, -1e-300, np.nan, 0.0])

    def function(x: Array) -> Array:
        return x * x + lift

    low, high = np.zeros(5), np.ones(5)
    found = solve(function, low, high, ends=(function(low), function(high)) if given else None)
    assert np.isnan(found).tolist() == [True, False, False, True, False]
    assert found[1] == pytest.approx(0.5, abs=CLOSE)
    assert found[4] == 0.0


def test_a_bracket_that_is_shut() -> None:
    found = solve(lambda x: x - np.array([2.0, 3.0]), np.full(2, 2.0), np.full(2, 2.0))
    assert found[0] == 2.0
    assert np.isnan(found[1])


@pytest.mark.parametrize("given", [False, True], ids=["ends unknown", "ends known"])
def test_infinite_values_at_the_ends(given: bool) -> None:
    def function(x: Array) -> Array:
        with np.errstate(divide="ignore"):
            return np.log(x / (1.0 - x)) - np.array([0.0, 2.0, -3.0])

    low, high = np.zeros(3), np.ones(3)
    found = solve(function, low, high, ends=(function(low), function(high)) if given else None)
    np.testing.assert_allclose(found, 1.0 / (1.0 + np.exp(-np.array([0.0, 2.0, -3.0]))), rtol=0.0, atol=CLOSE)


def test_each_root_is_the_same_whoever_is_solved_beside_it() -> None:
    """Bit for bit: a leg's strikes may not depend on the other legs of a grid."""
    rng = np.random.default_rng(8)
    roots, steep = rng.uniform(-2.0, 2.0, (5, 60)), np.exp(rng.uniform(-3.0, 3.0, (5, 60)))
    hard = rng.random((5, 60)) < 0.3  # those take many more steps than the others

    def function(x: Array, rows: Any = slice(None), places: Any = slice(None)) -> Array:
        away = x - roots[rows, places]
        easy = np.arctan(steep[rows, places] * away)
        return np.where(hard[rows, places], np.sign(away) * np.abs(away) ** 0.2, easy)

    low, high = np.full((5, 60), -3.0), np.full((5, 60), 3.0)
    together = solve(function, low, high)
    for row in range(5):
        alone = solve(partial(function, rows=row), low[row], high[row])
        assert alone.tolist() == together[row].tolist()
        for place in range(60):
            one = slice(place, place + 1)
            by_itself = solve(partial(function, rows=row, places=one), low[row, one], high[row, one])
            assert by_itself[0] == together[row, place]


def test_the_brackets_are_left_as_they_are() -> None:
    low, high = np.zeros(3), np.full(3, 4.0)
    ends = (-np.ones(3), np.full(3, 3.0))
    solve(lambda x: x - 1.0, low, high, ends=ends)
    assert low.tolist() == [0.0] * 3
    assert high.tolist() == [4.0] * 3
    assert ends[0].tolist() == [-1.0] * 3
