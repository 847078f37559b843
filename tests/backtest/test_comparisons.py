"""Mixes of holding and cash (C10).

Rung: identity (a mix must find itself, and has the figure it was made for) and hand-worked numbers.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt
import pytest
from hypothesis import given
from hypothesis import strategies as st

from backtest.analytics import drawdown_path, mixes
from backtest.analytics.comparisons import mix_wealth
from backtest.analytics.performance import daily_excess, regression_beta

Array = npt.NDArray[np.float64]
NAMES = ["same_beta", "same_volatility", "same_return", "same_drawdown", "same_delta"]


def market(seed: int, days: int = 1000, drift: float = 0.0006) -> tuple[Array, Array]:
    """A hold and the return on cash, both random."""
    rng = np.random.default_rng(seed)
    cash = np.concatenate([[0.0], rng.uniform(0, 0.0002, days - 1)])
    steps = np.concatenate([[0.0], rng.normal(drift, 0.011, days - 1)])
    return np.cumprod(1 + steps), cash


def test_a_mix_by_hand() -> None:
    # cash 1% a day, hold +21%, -9%: excess +20%, -10%; half of it is 1% + 10% and 1% - 5%
    np.testing.assert_allclose(
        mix_wealth(0.5, np.array([0.20, -0.10]), np.array([0.01, 0.01])), [1.0, 1.11, 1.11 * 0.96], rtol=1e-15
    )
    # a share a day: none, then all
    np.testing.assert_allclose(
        mix_wealth(np.array([0.0, 1.0]), np.array([0.20, -0.10]), np.array([0.01, 0.01])), [1.0, 1.01, 1.01 * 0.91],
        rtol=1e-15,
    )  # fmt: skip


@given(share=st.floats(0.05, 1.5), seed=st.integers(0, 20))
def test_a_mix_finds_itself(share: float, seed: int) -> None:
    hold, cash = market(seed, days=300, drift=0.001)
    own = mix_wealth(share, daily_excess(hold, cash), cash[1:])
    found = mixes(own, hold=hold, rate_return=cash, delta=np.full(len(hold), share))
    for name in ("same_beta", "same_volatility", "same_drawdown", "same_delta"):
        mix = getattr(found, name)
        assert mix is not None
        assert mix.share == pytest.approx(share, rel=1e-9)
        np.testing.assert_allclose(mix.wealth, own, rtol=1e-9)
    # two shares may grow alike; the smaller one is given
    assert found.same_return is not None
    assert found.same_return.share <= share * (1 + 1e-9)
    assert found.same_return.wealth[-1] == pytest.approx(own[-1], rel=1e-10)


@pytest.mark.parametrize("seed", range(4))
def test_each_mix_has_the_figure_it_was_made_for(seed: int) -> None:
    hold, cash = market(seed)
    rng = np.random.default_rng(100 + seed)
    excess = daily_excess(hold, cash)
    own = np.cumprod(np.concatenate([[1.0], 1 + cash[1:] + 0.5 * excess + rng.normal(0, 0.003, len(excess))]))
    delta = rng.uniform(0.2, 0.9, len(hold))
    found = mixes(own, hold=hold, rate_return=cash, delta=delta)
    assert [name for name, mix in found.items() if mix is not None] == NAMES
    wealth = {name: mix.wealth for name, mix in found.items() if mix is not None}
    beta = [regression_beta(daily_excess(w, cash), excess) for w in (own, wealth["same_beta"])]
    assert beta[0] == pytest.approx(beta[1], abs=1e-12)
    spread = [np.std(w[1:] / w[:-1], ddof=1) for w in (own, wealth["same_volatility"])]
    assert spread[0] == pytest.approx(spread[1], rel=1e-12)
    assert own[-1] == pytest.approx(wealth["same_return"][-1], rel=1e-12)
    assert drawdown_path(own).min() == pytest.approx(drawdown_path(wealth["same_drawdown"]).min(), abs=1e-12)
    by_hand = 1.0
    for day in range(1, len(hold)):
        by_hand *= 1 + cash[day] + delta[day - 1] * excess[day - 1]
    assert wealth["same_delta"][-1] == pytest.approx(by_hand, rel=1e-12)
    assert found.same_delta is not None
    assert found.same_delta.share == pytest.approx(delta[:-1].mean(), rel=1e-14)
    assert all(w[0] == 1.0 for w in wealth.values())


def test_the_smaller_share_of_equal_return_and_the_larger_of_equal_volatility() -> None:
    # hold +50% or -1/3 in turn, cash nothing: two days grow by (1 + w/2)(1 - w/3) = 1 + w/6 - w^2/6, the same for w and
    # 1 - w. Wanted is the growth of a quarter, which three quarters have as well.
    hold = np.cumprod(np.concatenate([[1.0], np.tile([1.5, 1 / 1.5], 10)]))
    cash = np.zeros(len(hold))
    own = mix_wealth(0.75, daily_excess(hold, cash), cash[1:])
    found = mixes(own, hold=hold, rate_return=cash, delta=np.full(len(hold), 0.75))
    assert found.same_return is not None
    assert found.same_return.share == pytest.approx(0.25, rel=1e-9)
    # volatility is the same for plus and minus three quarters
    assert found.same_volatility is not None
    assert found.same_volatility.share == pytest.approx(0.75, rel=1e-12)


def test_no_share_grows_so_much() -> None:
    # the best growth of the market above is at a half: 1 + 1/12 - 1/24 = 1.041667 in two days
    hold = np.cumprod(np.concatenate([[1.0], np.tile([1.5, 1 / 1.5], 10)]))
    cash = np.zeros(len(hold))
    own = np.cumprod(np.concatenate([[1.0], np.tile([1.042, 1.0], 10)]))
    assert mixes(own, hold=hold, rate_return=cash, delta=np.ones(len(hold))).same_return is None
    own = np.cumprod(np.concatenate([[1.0], np.tile([1.0416, 1.0], 10)]))
    assert mixes(own, hold=hold, rate_return=cash, delta=np.ones(len(hold))).same_return is not None


def test_no_share_falls_so_deep() -> None:
    # five times a hold that never falls by more than 1% falls by 5% at most on a day, and recovers at once
    hold = np.cumprod(np.concatenate([[1.0], np.tile([1.01, 0.99, 1.02], 20)]))
    cash = np.zeros(len(hold))
    own = np.concatenate([np.ones(30), np.full(len(hold) - 30, 0.5)])
    found = mixes(own, hold=hold, rate_return=cash, delta=np.ones(len(hold)))
    assert found.same_drawdown is None


def test_no_fall_is_no_stock() -> None:
    hold, cash = market(3)
    own = np.cumprod(1 + cash) * np.linspace(1, 1.5, len(hold))
    found = mixes(own, hold=hold, rate_return=cash, delta=np.ones(len(hold)))
    assert found.same_drawdown is not None
    assert found.same_drawdown.share == 0.0


def test_a_mix_that_loses_everything_is_none() -> None:
    # three times the hold loses 120% on the second day
    hold = np.array([1.0, 1.1, 0.66, 0.7, 0.72])
    cash = np.zeros(5)
    own = np.array([1.0, 1.3, 0.2, 0.24, 0.26])
    found = mixes(own, hold=hold, rate_return=cash, delta=np.full(5, 3.0))
    assert found.same_delta is None
    assert found.same_beta is not None
    assert found.same_beta.wealth.min() > 0


def test_lost_wealth_has_no_mixes() -> None:
    hold, cash = market(3)
    own = np.where(np.arange(len(hold)) > 500, np.nan, hold)
    found = mixes(own, hold=hold, rate_return=cash, delta=np.ones(len(hold)))
    assert [mix for _, mix in found.items()] == [None] * 5


def test_a_market_that_only_rises_or_only_falls_has_a_share_of_equal_return() -> None:
    # half of +1%, +2%, +3% grows by 1.005 x 1.01 x 1.015, and no other share does
    for sign in (1.0, -1.0):
        hold = np.cumprod(1 + sign * np.array([0.0, 0.01, 0.02, 0.03]))
        cash = np.zeros(4)
        own = mix_wealth(0.5, daily_excess(hold, cash), cash[1:])
        found = mixes(own, hold=hold, rate_return=cash, delta=np.full(4, 0.5))
        assert found.same_return is not None
        assert found.same_return.share == pytest.approx(0.5, rel=1e-9)


@pytest.mark.parametrize("days", [2, 3])
def test_a_few_days(days: int) -> None:
    # one return has no spread: whatever cannot be had is none, without a complaint from below
    hold, own = np.array([1.0, 1.02, 0.99])[:days], np.array([1.0, 1.01, 1.0])[:days]
    found = mixes(own, hold=hold, rate_return=np.full(days, 0.0001), delta=np.full(days, 0.5))
    assert found.same_delta is not None
    if days == 2:
        assert found.same_beta is None
        assert found.same_volatility is None
