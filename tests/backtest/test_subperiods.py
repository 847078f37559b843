"""Figures of parts of a history.

Rung: twin (the same days cut out and put through the single-path functions) and hand-worked numbers.
"""

from __future__ import annotations

from itertools import pairwise

import numpy as np
import pytest

from backtest.analytics.headline import Headline
from backtest.analytics.performance import daily_excess, sharpe_ratio
from backtest.analytics.subperiods import block_edges, block_sums, empty_sums
from tests.backtest.test_headline import made


def test_edges_by_hand() -> None:
    assert block_edges(16, 8).tolist() == [0, 2, 4, 6, 8, 10, 12, 14, 16]
    assert block_edges(11, 3).tolist() == [0, 3, 7, 11]
    assert block_edges(3, 8).tolist() == [0, 1, 2, 3]
    assert block_edges(1, 8).tolist() == [0, 1]


@pytest.mark.parametrize("days", [10, 300, 2600])
def test_sums_growth_and_sharpe_ratios_are_those_of_the_days_cut_out(days: int) -> None:
    wealth, _, rate, _ = made(days, overlays=30)
    edges = block_edges(days - 1)
    found = block_sums(wealth, rate_return=rate, edges=edges)
    assert found.returns.sum() == days - 1
    excess = daily_excess(wealth, rate)
    for block, (start, stop) in enumerate(pairwise(edges)):
        np.testing.assert_allclose(found.growth[:, block], wealth[:, stop] / wealth[:, start], rtol=1e-14)
        np.testing.assert_allclose(found.total[:, block], excess[:, start:stop].sum(axis=1), rtol=0, atol=1e-15 * days)
        np.testing.assert_allclose(
            found.square[:, block], (excess[:, start:stop] ** 2).sum(axis=1), rtol=1e-12, atol=1e-18
        )
    if days < 100:
        return
    half = len(edges) // 2
    np.testing.assert_allclose(found.sharpe(slice(0, half)), sharpe_ratio(excess[:, : edges[half]]), rtol=1e-9)
    np.testing.assert_allclose(found.sharpe(slice(None)), sharpe_ratio(excess), rtol=1e-9)
    picked = np.array([0, 3])
    days_of = np.r_[edges[0] : edges[1], edges[3] : edges[4]]
    np.testing.assert_allclose(found.sharpe(picked), sharpe_ratio(excess[:, days_of]), rtol=1e-9)


def test_a_block_by_hand() -> None:
    # excess returns +1% and -1%, twice, without cash: no mean; then three times +1%: no spread
    wealth = np.cumprod([[1, 1.01, 0.99, 1.01, 0.99, 1.01, 1.01, 1.01]], axis=1)
    found = block_sums(wealth, rate_return=np.zeros(8), edges=np.array([0, 4, 7]))
    np.testing.assert_allclose(found.total, [[0, 0.03]], atol=1e-15)
    np.testing.assert_allclose(found.square, [[4e-4, 3e-4]], rtol=1e-12)
    assert found.sharpe(slice(0, 1))[0] == pytest.approx(0, abs=1e-10)
    assert np.isnan(found.sharpe(slice(1, 2))[0])


def test_a_ruined_path_has_figures_only_where_it_lives() -> None:
    wealth, _, rate, _ = made(400, overlays=3)
    wealth[1, 300:] = np.nan
    found = block_sums(wealth, rate_return=rate, edges=block_edges(399))
    assert np.isfinite(found.sharpe(slice(0, 4))).all()
    assert np.isnan(found.sharpe(slice(4, 8))).tolist() == [False, True, False]


def test_it_does_not_matter_which_paths_stand_beside_it() -> None:
    wealth, _, rate, _ = made(900, overlays=97)
    edges = block_edges(899)
    together, alone = (block_sums(w, rate_return=rate, edges=edges) for w in (wealth, wealth[41:42]))
    np.testing.assert_array_equal(together.total[41], alone.total[0])
    np.testing.assert_array_equal(together.square[41], alone.square[0])


@pytest.mark.parametrize("offset", [0, 130])
def test_sums_on_the_way_of_the_headline_figures_are_the_same(offset: int) -> None:
    wealth, hold, rate, dates = made(900, overlays=97)
    edges = block_edges(899 - offset)
    sums = empty_sums(97, edges)
    Headline(hold=hold, rate_return=rate, dates=dates).figures(wealth, blocks=sums)
    apart = block_sums(wealth[:, offset:], rate_return=rate[offset:], edges=edges)
    np.testing.assert_array_equal(sums.growth, apart.growth)
    # excess is return less (1 + cash) there, return less 1 less cash here
    np.testing.assert_allclose(sums.total, apart.total, rtol=0, atol=1e-13)
    np.testing.assert_allclose(sums.square, apart.square, rtol=1e-11)
