"""Rung: hand-worked, and identity. When the holder of an American option exercises early (C5)."""

from __future__ import annotations

import numpy as np
import pytest

from backtest.pricing.american import CashDividends, american, early_assignment
from backtest.pricing.black import black

ONE_DAY = 1.0 / 365.0


def tomorrow(*cash: float) -> CashDividends:
    """One dividend that goes ex on the next day, another amount for each option."""
    return CashDividends(years=np.array([ONE_DAY]), amounts=np.array(cash)[:, None])


def test_the_dividend_against_the_time_value_left() -> None:
    # Call of 90 with 90 days to go at 5%, share at 100, no vol to speak of. After a drop of D the call is worth
    # 100 - D - 90 exp(-.05 x 90/365) = 100 - D - 88.8971: a time value of 1.1029, the interest on the strike.
    found = early_assignment(
        spot=100.0, strike=90.0, tau_years=90 * ONE_DAY, rate=0.05, dividend_yield=0.0, total_stdev=1e-4, sign=1.0,
        dividends=tomorrow(1.10, 1.11, 0.0), next_close_years=ONE_DAY,
    )  # fmt: skip
    assert found.time_value == pytest.approx(90.0 * (1.0 - np.exp(-0.05 * 90 / 365)), rel=1e-9)
    assert found.dividend.tolist() == [1.10, 1.11, 0.0]
    assert found.can_be.tolist() == [False, True, False]
    assert found.exercised.tolist() == [False, True, False]


def test_the_time_value_of_a_vol() -> None:
    # With a vol of 20% it is that interest and the put of the same strike: as the last dividend, black's
    spots, tau, stdev = np.array([99.0, 103.0, 110.0]), 90 * ONE_DAY, 0.2 * np.sqrt(90 / 365)
    found = early_assignment(
        spot=spots, strike=90.0, tau_years=tau, rate=0.05, dividend_yield=0.0, total_stdev=stdev, sign=1.0,
        dividends=tomorrow(1.5, 1.5, 1.5), next_close_years=ONE_DAY,
    )  # fmt: skip
    discount = np.exp(-0.05 * tau)
    put = discount * black((spots - 1.5) / discount, 90.0, stdev, -1.0)
    assert found.time_value == pytest.approx(90.0 * (1.0 - discount) + put, rel=1e-9)
    assert found.exercised.tolist() == [False, False, True]
    assert found.can_be.all()


def test_the_next_dividend_shortens_the_wait() -> None:
    # A second dividend of 3 in 31 days: by then interest is 90 (1 - exp(-.05 x 31/365)) = 0.3814, and a dividend of
    # 0.5 tomorrow is worth exercising for although 90 days' interest is 1.1029
    def at(cash: float, later: float) -> tuple[bool, bool]:
        found = early_assignment(
            spot=100.0, strike=90.0, tau_years=90 * ONE_DAY, rate=0.05, dividend_yield=0.0, total_stdev=1e-4, sign=1.0,
            dividends=CashDividends(years=np.array([1.0, 31.0]) * ONE_DAY, amounts=np.array([cash, later])),
            next_close_years=ONE_DAY,
        )  # fmt: skip
        return bool(found.exercised), bool(found.can_be)

    assert at(0.5, 0.0) == (False, False)
    assert at(0.5, 3.0) == (True, True)
    assert at(0.38, 3.0) == (False, False)
    assert at(0.39, 3.0) == (True, True)


def test_the_eve_of_a_weekend() -> None:
    # ex on Monday: Friday is the eve, Thursday is not
    option = {"spot": 120.0, "strike": 90.0, "tau_years": 10 * ONE_DAY, "rate": 0.05, "dividend_yield": 0.0,
              "total_stdev": 0.03, "sign": 1.0}  # fmt: skip
    monday = CashDividends(years=np.array([[4.0], [3.0]]) * ONE_DAY, amounts=np.array([2.0]))
    found = early_assignment(**option, dividends=monday, next_close_years=np.array([1.0, 3.0]) * ONE_DAY)
    assert found.exercised.tolist() == [False, True]


def test_a_put_is_exercised_when_it_is_intrinsic() -> None:
    spots = np.array([100.0, 92.0, 70.0, 70.0, 110.0])
    paid = tomorrow(0.0, 0.0, 0.0, 0.5, 0.0)
    option = {"strike": 100.0, "tau_years": 90 * ONE_DAY, "rate": 0.06, "dividend_yield": 0.0, "total_stdev": 0.1,
              "sign": -1.0}  # fmt: skip
    found = early_assignment(spot=spots, **option, dividends=paid, next_close_years=ONE_DAY)
    # deep in the money it is exercised; with a drop of 0.5 to come for a day's interest of 0.016 it is not
    assert found.exercised.tolist() == [False, False, True, False, False]
    value = american(spot=spots, **option, dividends=paid).value
    np.testing.assert_array_equal(found.exercised, (value == 100.0 - spots) & (spots < 100.0))
    assert found.time_value[3] == pytest.approx(0.5 - 0.0164, abs=2e-3)


def test_never_against_the_necessary_condition() -> None:
    """Random eves: who exercises meets the condition that needs no model, and gives up less than it receives."""
    rng = np.random.default_rng(63)
    count = 1500
    spot, tau = rng.uniform(80.0, 140.0, count), rng.integers(2, 400, count) * ONE_DAY
    option = {"strike": 100.0, "tau_years": tau, "rate": rng.uniform(0.0, 0.1, count), "dividend_yield": 0.0,
              "total_stdev": rng.uniform(0.1, 0.5, count) * np.sqrt(tau), "sign": 1.0}  # fmt: skip
    cash = rng.uniform(0.05, 3.0, (count, 1))
    known = CashDividends(years=np.array([ONE_DAY]), amounts=cash)
    found = early_assignment(spot=spot, **option, dividends=known, next_close_years=ONE_DAY)
    assert 100 < found.exercised.sum() < found.can_be.sum() < count
    assert not (found.exercised & ~found.can_be).any()
    interest = 100.0 * (1.0 - np.exp(-option["rate"] * tau))
    np.testing.assert_array_equal(found.can_be, (cash[:, 0] > interest) & (spot > 100.0))
    # Clearly worth exercising, its American value is that of doing so just before the drop, a day later: intrinsic and
    # a day's interest.
    value = american(spot=spot, **option, dividends=known).value
    clearly = found.exercised & (found.time_value < 0.5 * found.dividend) & (option["total_stdev"] > 0.05)
    assert clearly.sum() > 50
    later = spot - 100.0 * np.exp(-option["rate"] * ONE_DAY)
    np.testing.assert_allclose(value[clearly], later[clearly], rtol=0, atol=1e-3)


def test_without_dividends_no_call_is_exercised() -> None:
    none = CashDividends(years=np.zeros(0), amounts=np.zeros(0))
    found = early_assignment(
        spot=np.array([90.0, 150.0]), strike=100.0, tau_years=0.3, rate=0.01, dividend_yield=0.08, total_stdev=0.1,
        sign=1.0, dividends=none, next_close_years=ONE_DAY,
    )  # fmt: skip
    assert not found.exercised.any()
    assert found.dividend.tolist() == [0.0, 0.0]
