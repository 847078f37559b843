"""Many overlays in batches: the same numbers as single replays, each leg priced once.

Rung: identity.
"""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest

from backtest import Costs, Leg, Market, Overlay, OverlayError, PercentOfForward, PercentOfSpot, Volatility, replay
from backtest.analytics import roll_costs
from backtest.engine.families import replay_families
from backtest.engine.legs import PricedLegs


@pytest.fixture(scope="module")
def market() -> Market:
    days = pd.bdate_range("2010-01-01", periods=900, name="date")
    rng = np.random.default_rng(5)
    close = 50 * np.exp(np.cumsum(rng.normal(0.0002, 0.012, len(days))))
    frame = pd.DataFrame({"close": close, "vol": 0.2 + 0.05 * np.sin(np.arange(len(days)) / 30)}, index=days)
    return Market.from_frame(frame, rate=0.02, dividend_yield=0.01)


def put(percent: float, **more) -> Leg:
    return Leg(position="long", right="put", roll="quarter", strike=PercentOfSpot(percent), **more)


def call(percent: float, **more) -> Leg:
    return Leg(position="short", right="call", roll="month", strike=PercentOfForward(percent), **more)


GRID = [Overlay(legs=(put(p), call(c))) for p in (85, 90, 95, 97) for c in (103, 105, 110)]
MIXED = [
    *GRID,
    Overlay(legs=(put(90, term_months=12),), costs=Costs(half_spread_percent=3, commission=1, settlement_fee=2)),
    Overlay(legs=(call(105, ratio=0.5), put(95), put(80, ratio=0.0)), account="cash"),
    Overlay(legs=(put(95), put(90, ratio=2.0)), costs=Costs(half_spread_vol=2, stock_bps=5)),
]


@pytest.mark.parametrize("size", [1, 5, 100])
def test_batches_give_the_wealth_of_single_replays_bit_for_bit(market: Market, size: int) -> None:
    priced = PricedLegs(market)
    seen = []
    for first in range(0, len(MIXED), size):
        batch = MIXED[first : first + size]
        for found in replay_families(market, batch, priced=priced):
            for member, number in enumerate(found.numbers):
                single = replay(market, batch[number])
                np.testing.assert_array_equal(found.wealth[member], single.wealth)
                np.testing.assert_array_equal(found.hold, single.hold)
                np.testing.assert_array_equal(found.rate_return, single.rate_return)
                np.testing.assert_array_equal(found.dates, single.dates)
                seen.append(first + number)
    assert sorted(seen) == list(range(len(MIXED)))


def test_a_grid_in_batches_prices_each_leg_once(market: Market) -> None:
    priced = PricedLegs(market)
    for first in range(0, len(GRID), 5):
        list(replay_families(market, GRID[first : first + 5], priced=priced))
    assert priced.priced == 4 + 3
    # other windows and volatilities are other legs
    list(replay_families(market, GRID, priced=priced, start="2011-01-01"))
    list(replay_families(market, GRID, priced=priced, volatility=Volatility(quote="variance swap")))
    assert priced.priced == 3 * (4 + 3)


def test_what_is_kept_is_bounded(market: Market) -> None:
    priced = PricedLegs(market, most=2 * len(market))
    wealth = [found.wealth.copy() for overlay in GRID for found in replay_families(market, [overlay], priced=priced)]
    assert priced.priced > 4 + 3
    for overlay, path in zip(GRID, wealth, strict=True):
        np.testing.assert_array_equal(path[0], replay(market, overlay).wealth)


def test_legs_of_another_market_are_refused(market: Market) -> None:
    days = pd.bdate_range("2010-01-01", periods=300, name="date")
    other = Market.from_frame(pd.DataFrame({"close": 100.0, "vol": 0.2}, index=days))
    with pytest.raises(OverlayError, match="priced on another market"):
        list(replay_families(other, GRID, priced=PricedLegs(market)))


def test_what_the_options_brought_is_that_of_the_roll_costs(market: Market) -> None:
    for found in replay_families(market, MIXED):
        for member, number in enumerate(found.numbers):
            by_leg = [leg.net for leg in roll_costs(replay(market, MIXED[number])).legs]
            assert found.options_net()[member] == pytest.approx(sum(by_leg), abs=1e-13)


def test_a_leg_without_a_price_spoils_only_those_who_hold_it(market: Market) -> None:
    # forty vol points off twenty leave no vol: that put has no price, and neither has what holds it
    without = Volatility(put_shift=-40)
    overlays = [Overlay(legs=(put(95),)), Overlay(legs=(call(105),)), Overlay(legs=(call(105), put(95, ratio=0.0)))]
    (first, second) = list(replay_families(market, overlays, volatility=without))
    by_number = {n: found.wealth[m] for found in (first, second) for m, n in enumerate(found.numbers)}
    assert np.isnan(by_number[0][1:]).all()
    alone = replay(market, Overlay(legs=(call(105),))).wealth
    np.testing.assert_array_equal(by_number[1], alone)
    np.testing.assert_array_equal(by_number[2], alone)


def test_a_whole_number_is_as_good_a_cost_as_any(market: Market) -> None:
    for costs, same in (
        (Costs(half_spread_min=1), Costs(half_spread_min=1.0)),
        (Costs(commission=2), Costs(commission=2.0)),
    ):
        whole, real = (replay(market, Overlay(legs=(put(95),), costs=c)).wealth for c in (costs, same))
        np.testing.assert_array_equal(whole, real)
