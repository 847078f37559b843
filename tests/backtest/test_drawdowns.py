"""Drawdowns on daily closes (C11).

Rung: identity (every pair of days; small paths by hand) and published value (Magdon-Ismail and others 2004).
"""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from backtest.analytics import deepest_drawdown, drawdown_path


def test_drawdown_by_hand() -> None:
    # a fall of a half from 2, back at 2, then a lesser one
    found = deepest_drawdown(np.array([1.0, 2.0, 2.0, 1.0, 1.5, 2.0, 1.9]))
    # the peak is the last day at the level it falls from
    assert (found.depth, found.peak, found.trough, found.recovery) == (-0.5, 2, 3, 5)
    assert drawdown_path(np.array([4.0, 3.0, 5.0, 4.0])).tolist() == [0.0, -0.25, 0.0, pytest.approx(-0.2)]


def test_the_first_of_equally_deep_falls() -> None:
    found = deepest_drawdown(np.array([4.0, 2.0, 4.0, 2.0, 1.0, 2.0]) ** 1.0)
    assert (found.depth, found.peak, found.trough, found.recovery) == (-0.75, 2, 4, None)
    found = deepest_drawdown(np.array([4.0, 2.0, 4.0, 2.0]))
    assert (found.depth, found.peak, found.trough, found.recovery) == (-0.5, 0, 1, 2)


def test_no_fall_and_no_answer() -> None:
    for rising in ([1.0, 1.0, 1.0], [1.0, 2.0, 3.0], [1.0]):
        found = deepest_drawdown(np.array(rising))
        assert (found.depth, found.peak, found.trough, found.recovery) == (0.0, None, None, None)
    found = deepest_drawdown(np.array([1.0, 0.5, np.nan]))
    assert np.isnan(found.depth)
    assert (found.peak, found.trough, found.recovery) == (None, None, None)


@given(st.lists(st.floats(0.01, 100), min_size=1, max_size=30))
def test_drawdown_against_every_pair_of_days(values: list[float]) -> None:
    wealth = np.array(values)
    pairs = [wealth[j] / wealth[i] - 1 for j in range(len(wealth)) for i in range(j + 1)]
    found = deepest_drawdown(wealth)
    assert found.depth == min(pairs)
    if found.peak is not None and found.trough is not None:
        assert wealth[found.trough] / wealth[found.peak] - 1 == found.depth
        assert wealth[found.peak] == wealth[: found.trough + 1].max()
        between = wealth[found.trough : found.recovery]
        assert (between < wealth[found.peak]).all()
        assert found.recovery is None or wealth[found.recovery] >= wealth[found.peak]


def test_expected_drawdown_of_a_random_walk() -> None:
    # Magdon-Ismail, Atiya, Pratap and Abu-Mostafa (2004): 1.2533 sigma sqrt(T) for a path without drift, in logarithms.
    # A walk seen at n points misses both extremes by 0.5826 sigma sqrt(T/n) on average (Chernoff and others).
    paths, points = 4000, 1000
    steps = np.random.default_rng(2004).normal(0, points**-0.5, (paths, points))
    log_wealth = np.concatenate([np.zeros((paths, 1)), np.cumsum(steps, axis=1)], axis=1)
    deepest = -np.log1p(drawdown_path(np.exp(log_wealth)).min(axis=1))
    expected = 1.2533 - 2 * 0.5826 * points**-0.5
    error = deepest.std() / paths**0.5
    assert error < 0.01
    assert abs(deepest.mean() - expected) < 4 * error
