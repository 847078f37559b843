"""Selling shares instead of protecting them.

Rung: hand-worked, twin (cash and shares carried from day to day) and identity (a free sale of nothing is the hold).
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt
import pytest
from hypothesis import given
from hypothesis import strategies as st

from backtest.analytics.performance import performance
from backtest.analytics.sale import sale_instead
from backtest.beside import Sale

Array = npt.NDArray[np.float64]
# hold +10%, then -50% of that; cash 1%, then 2%; what stands for the first day is not used
HOLD = np.array([1.0, 1.1, 0.55])
CASH = np.array([9.0, 0.01, 0.02])


def test_a_sale_by_hand() -> None:
    # three quarters kept. Of the quarter that is sold 20 basis points go in cost, and 25% of the 60% that are gain in
    # tax: 0.002 + 0.15 = 0.152, so 0.25 x 0.848 = 0.212 begin to earn interest
    #   day 1: 0.75 x 1.1  + 0.212 x 1.01        = 0.825  + 0.21412   = 1.03912
    #   day 2: 0.75 x 0.55 + 0.212 x 1.01 x 1.02 = 0.4125 + 0.2184024 = 0.6309024
    found = sale_instead(
        Sale(gain_percent=60.0, tax_percent=25.0, cost_bps=20.0), share=0.75, hold=HOLD, rate_return=CASH
    )
    assert found is not None
    assert found.share == 0.75
    assert found.charge == pytest.approx(0.152, rel=1e-14)
    np.testing.assert_allclose(found.wealth, [1.0, 1.03912, 0.6309024], rtol=1e-14)
    assert found.wealth[0] == 1.0


@pytest.mark.parametrize(
    ("sale", "charge"),
    [
        (Sale(), 0.0),
        (Sale(cost_bps=5.0), 0.0005),
        (Sale(gain_percent=100.0, tax_percent=30.0), 0.30),
        (Sale(gain_percent=40.0), 0.0),
        (Sale(tax_percent=40.0), 0.0),
        (Sale(gain_percent=50.0, tax_percent=50.0, cost_bps=1000.0), 0.35),
    ],
)
def test_charges_by_hand(sale: Sale, charge: float) -> None:
    found = sale_instead(sale, share=0.0, hold=HOLD, rate_return=CASH)
    assert found is not None
    assert found.charge == pytest.approx(charge, abs=1e-15)
    np.testing.assert_allclose(found.wealth[1:], [(1 - charge) * 1.01, (1 - charge) * 1.01 * 1.02], rtol=1e-14)


def test_the_share_is_kept_between_nothing_and_all() -> None:
    taxed = Sale(gain_percent=50.0, tax_percent=20.0)
    over = sale_instead(taxed, share=1.3, hold=HOLD, rate_return=CASH)
    assert over is not None
    assert over.share == 1.0
    np.testing.assert_array_equal(over.wealth, HOLD)  # nothing is sold, and nothing is paid
    under = sale_instead(taxed, share=-0.2, hold=HOLD, rate_return=CASH)
    assert under is not None
    assert under.share == 0.0
    np.testing.assert_allclose(under.wealth, [1.0, 0.9 * 1.01, 0.9 * 1.01 * 1.02], rtol=1e-14)


def test_no_share_is_no_sale() -> None:
    for share in (None, float("nan")):
        assert sale_instead(Sale(), share=share, hold=HOLD, rate_return=CASH) is None


def test_a_charge_that_leaves_nothing_is_no_sale() -> None:
    # all of a sale that is all gain goes in tax; with a cost on top, and no share kept, less than nothing is left
    dear = Sale(gain_percent=100.0, tax_percent=100.0, cost_bps=10.0)
    assert sale_instead(dear, share=0.0, hold=HOLD, rate_return=CASH) is None
    kept = sale_instead(dear, share=0.5, hold=HOLD, rate_return=CASH)
    assert kept is not None
    np.testing.assert_allclose(kept.wealth[1], 0.5 * 1.1 - 0.5 * 0.001 * 1.01, rtol=1e-14)


@given(
    seed=st.integers(0, 50),
    share=st.floats(-0.5, 1.5),
    gain=st.floats(0.0, 100.0),
    tax=st.floats(0.0, 90.0),
    bps=st.floats(0.0, 500.0),
)
def test_day_by_day(seed: int, share: float, gain: float, tax: float, bps: float) -> None:
    rng = np.random.default_rng(seed)
    step, rate = rng.normal(0.0005, 0.02, 250), rng.uniform(-0.0001, 0.0003, 250)
    hold = np.concatenate([[1.0], np.cumprod(1 + step)])
    found = sale_instead(
        Sale(gain_percent=gain, tax_percent=tax, cost_bps=bps), share=share, hold=hold,
        rate_return=np.concatenate([[0.0], rate]),
    )  # fmt: skip
    assert found is not None
    shares = min(max(share, 0.0), 1.0)
    sold = 1.0 - shares
    cash = sold - sold * bps / 10_000 - sold * gain / 100 * tax / 100
    worth, expected = shares, [1.0]
    for day in range(250):
        worth += worth * step[day]
        cash += cash * rate[day]
        expected.append(worth + cash)
    np.testing.assert_allclose(found.wealth, expected, rtol=1e-12)


def test_a_free_sale_that_is_not_rebalanced_is_no_mix() -> None:
    # half sold for nothing; the hold doubles and halves: 1.5 then 1, where a mix of halves is at 1.5 x 0.75 = 1.125
    hold = np.array([1.0, 2.0, 1.0])
    found = sale_instead(Sale(), share=0.5, hold=hold, rate_return=np.zeros(3))
    assert found is not None
    np.testing.assert_allclose(found.wealth, [1.0, 1.5, 1.0], rtol=1e-14)


def test_the_charge_is_a_loss_of_the_first_day() -> None:
    dates = np.arange("2021-01-04", "2021-01-08", dtype="datetime64[D]")
    flat = np.ones(4)
    found = sale_instead(Sale(cost_bps=100.0), share=0.5, hold=flat, rate_return=np.zeros(4))
    assert found is not None
    figures = performance(found.wealth, dates=dates, rate_return=np.zeros(4), hold=flat)
    assert figures.annual_return == pytest.approx(-0.005, rel=1e-12)
    assert figures.max_drawdown == pytest.approx(-0.005, rel=1e-12)
