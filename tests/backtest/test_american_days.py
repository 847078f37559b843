"""Rung: behaviour, and hand-worked. American options marked day by day, and their limits.

Daily marks of one leg through a schedule of ex-dates; what does not count as a dividend; limits with the numbers
written out; and what is refused (C5).
"""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt
import pytest

from backtest.pricing.american import CashDividends, american, american_value_and_delta
from backtest.pricing.black import european
from tests.reference.slow_american import call_with_one_dividend

Array = npt.NDArray[np.float64]


def a_year_of_days(days: int = 250) -> tuple[dict[str, Any], Array, Array]:
    """One call to its expiry, the numbers of its days, and five ex-dates, two of them around expiry."""
    rng = np.random.default_rng(61)
    today = np.arange(1000.0, 1000.0 + days)
    return (
        {
            "spot": 100.0 * np.exp(np.cumsum(rng.normal(0.0, 0.015, days))), "strike": 98.0,
            "tau_years": (1000.0 + days - today) / 365.0, "rate": rng.uniform(0.0, 0.06, days), "dividend_yield": 0.0,
            "total_stdev": 0.25 * np.sqrt((1000.0 + days - today) / 365.0), "sign": 1.0,
        },
        today,
        np.array([990.0, 1070.0, 1160.0, 1248.0, 1251.0]),
    )  # fmt: skip


def test_every_day_is_priced_by_itself() -> None:
    """A year of daily marks in one call, and each day alone: the same to the last bit."""
    option, today, ex_days = a_year_of_days()
    amounts = np.array([0.9, 1.1, 1.2, 1.3, 1.4])
    known = CashDividends.on_days(ex_days=ex_days, amounts=amounts, today=today)
    value, delta = american_value_and_delta(**option, dividends=known)
    for day in (0, 69, 70, 159, 160, 247, 248, 249):
        alone = {name: a[day] if np.ndim(a) else a for name, a in option.items()}
        one = american(**alone, dividends=CashDividends(years=known.years[day], amounts=amounts))
        assert (float(one.value), float(one.delta)) == (value[day], delta[day])
        assert one.value.shape == ()


def test_what_becomes_known_later_changes_no_earlier_day() -> None:
    """Amounts a day: a special dividend announced on the 100th day, for a date before expiry (C4)."""
    option, today, ex_days = a_year_of_days()
    before = np.tile([0.9, 1.1, 1.2, 1.3, 1.4], (250, 1))
    after = np.concatenate((before, np.where(today < 1100.0, 0.0, 5.0)[:, None]), axis=1)
    ex_after = np.append(ex_days, 1200.0)
    marks = [
        american(**option, dividends=CashDividends.on_days(ex_days=ex, amounts=amounts, today=today)).value
        for ex, amounts in ((ex_days, before), (ex_after, after))
    ]
    np.testing.assert_array_equal(marks[0][:100], marks[1][:100])
    assert (marks[1][100:200] < marks[0][100:200]).all()  # a call loses part of it until the ex-date
    np.testing.assert_array_equal(marks[0][200:], marks[1][200:])


def test_many_dividends_beside_few() -> None:
    """An option with forty dividends gets more steps, and those beside it do not."""
    weekly = CashDividends(years=np.arange(1.0, 41.0) * 7.0 / 365.0, amounts=np.full((2, 40), 0.1))
    weekly.amounts[1, 1:] = 0.0
    option = {"spot": np.array([95.0, 95.0]), "strike": 100.0, "tau_years": 1.0, "rate": 0.05, "dividend_yield": 0.0,
              "total_stdev": 0.3, "sign": -1.0}  # fmt: skip
    both = american(**option, dividends=weekly).value
    first = CashDividends(years=weekly.years[:1], amounts=np.array([0.1]))
    few = american(**option, dividends=first).value
    assert both[1] == few[1]
    finer = american(**option, dividends=weekly, steps=2048).value
    assert both[0] == pytest.approx(finer[0], abs=1e-3)
    assert both[0] > both[1] + 0.5


@pytest.mark.parametrize(
    ("years", "amounts"),
    [
        pytest.param([0.0, 0.5], [2.0, 1.0], id="ex today"),
        pytest.param([-0.2, 0.5], [2.0, 1.0], id="ex before"),
        pytest.param([0.5, 1.01], [1.0, 2.0], id="ex after expiry"),
        pytest.param([0.5, 0.7], [1.0, 0.0], id="none"),
        pytest.param([0.5, 0.7], [1.0, np.nan], id="not known"),
        pytest.param([0.5, np.nan], [1.0, 2.0], id="no date"),
    ],
)
@pytest.mark.parametrize("sign", [1.0, -1.0], ids=["call", "put"])
def test_what_is_no_dividend(sign: float, years: list[float], amounts: list[float]) -> None:
    option = {"spot": 100.0, "strike": 95.0, "tau_years": 1.0, "rate": 0.02, "dividend_yield": 0.01,
              "total_stdev": 0.3, "sign": sign}  # fmt: skip
    with_it = american(**option, dividends=CashDividends(years=np.array(years), amounts=np.array(amounts)))
    without = american(**option, dividends=CashDividends(years=np.array([0.5]), amounts=np.array([1.0])))
    assert float(with_it.value) == float(without.value)
    assert float(with_it.delta) == float(without.delta)


def test_order_of_dividends() -> None:
    option = {"spot": 100.0, "strike": 95.0, "tau_years": 1.0, "rate": 0.02, "dividend_yield": 0.0, "total_stdev": 0.3}
    for sign in (1.0, -1.0):
        ways = [
            float(american(**option, sign=sign, dividends=CashDividends(years=y, amounts=a)).value)
            for y, a in (
                (np.array([0.2, 0.6, 1.0]), np.array([1.0, 2.0, 0.5])),
                (np.array([1.0, 0.2, 0.6]), np.array([0.5, 1.0, 2.0])),
            )
        ]
        assert ways[0] == ways[1]


# ---------------------------------------------------------------- close to expiry


def european_value(option: dict[str, Any]) -> Array:
    named = {name: value for name, value in option.items() if name != "total_stdev"}
    return european(**named, vol_annual=option["total_stdev"] / np.sqrt(option["tau_years"])).value


def test_a_call_on_a_share_that_goes_ex_on_the_day_of_expiry() -> None:
    """Exercised before the drop of 0.8 it is a European call of 100 - 0.8, at spots all along the nodes."""
    spots = np.linspace(85.0, 115.0, 61)
    option = {"spot": spots, "strike": 100.0, "tau_years": 0.7, "rate": 0.04, "dividend_yield": 0.0,
              "total_stdev": np.full(61, 0.25 * 0.7**0.5), "sign": 1.0}  # fmt: skip
    known = CashDividends(years=np.array([0.7]), amounts=np.array([0.8]))
    escrowed = spots - 0.8 * np.exp(-0.04 * 0.7)
    expected = european_value({**option, "spot": escrowed, "strike": 100.0 - 0.8})
    np.testing.assert_allclose(american(**option, dividends=known).value, expected, rtol=0, atol=2e-4)


@pytest.mark.parametrize("days_before", [0.001, 1.0, 3.0, 6.0])
def test_a_share_that_goes_ex_right_before_expiry(days_before: float) -> None:
    """Kinks between the nodes, at spots all along them.

    A put at a rate of 1e-6 is a European one but for 100 times that. A call is exact by its integral, with dividends
    about as large as what a day's vol is worth at the money, 100 x 0.3 x 0.4 / sqrt(365) = 0.63, and large
    ones, which take the price at which exercise begins a few nodes away from the strike.
    """
    spots, ex = np.linspace(85.0, 115.0, 61), 1.0 - days_before / 365.0
    option = {"spot": spots, "strike": 100.0, "tau_years": 1.0, "rate": 1e-6, "dividend_yield": 0.0,
              "total_stdev": np.full(61, 0.3), "sign": -1.0}  # fmt: skip
    known = CashDividends(years=np.array([ex]), amounts=np.array([1.0]))
    expected = european_value({**option, "spot": spots - 1.0})
    np.testing.assert_allclose(american(**option, dividends=known).value, expected, rtol=0, atol=4e-4)
    spots = spots[::4]
    for cash in (0.05, 0.63, 1.0, 3.0, 10.0, 13.0):
        known = CashDividends(years=np.array([ex]), amounts=np.array([cash]))
        option = {**option, "spot": spots, "total_stdev": 0.3, "rate": 0.03, "sign": 1.0}
        expected = np.array([call_with_one_dividend(s, 100.0, 1.0, 0.03, 0.3, ex, cash) for s in spots])
        np.testing.assert_allclose(american(**option, dividends=known).value, expected, rtol=0, atol=2e-3)


def test_a_little_interest_is_enough_for_a_put() -> None:
    # 100 exp(-.0005) - 40 is less than 60 now
    option = {"spot": 40.0, "strike": 100.0, "tau_years": 1.0, "dividend_yield": 0.0, "total_stdev": 0.1, "sign": -1.0}
    assert float(american(**option, rate=0.0005).value) == 60.0
    assert float(american(**option, rate=0.0005).held) < 60.0
    assert float(american(**option, rate=-0.0005).value) == pytest.approx(100.0 * np.exp(0.0005) - 40.0, rel=1e-12)


# ---------------------------------------------------------------- limits


def test_no_time_left() -> None:
    spots = np.array([90.0, 110.0])
    for sign, value, delta in ((1.0, [0.0, 10.0], [0.0, 1.0]), (-1.0, [10.0, 0.0], [-1.0, 0.0])):
        gone = CashDividends(years=np.array([0.0]), amounts=np.array([3.0]))
        found = american(spot=spots, strike=100.0, tau_years=0.0, rate=0.05, dividend_yield=0.02, total_stdev=0.0,
                         sign=sign, dividends=gone)  # fmt: skip
        np.testing.assert_array_equal(found.value, value)
        np.testing.assert_array_equal(found.delta, delta)


def test_exercised_at_once() -> None:
    # a put of 100 on a share of 40 at 8%: what is kept is interest, and no vol of 20% makes it worth waiting
    found = american(spot=40.0, strike=100.0, tau_years=0.5, rate=0.08, dividend_yield=0.0, total_stdev=0.14, sign=-1.0)
    assert (float(found.value), float(found.delta), float(found.gamma)) == (60.0, -1.0, 0.0)
    # whoever waits for the first exercise date, an eighth of a sixty-fourth of half a year, forgoes interest till then
    assert 0.0 < 60.0 - float(found.held) < 8.0 / 128.0


def test_a_share_without_risk() -> None:
    # 5% and no vol: the share grows to 100.5 in half a year and drops by 4, when a put of 100 is exercised
    spot = 100.5 * np.exp(-0.025)
    paid = CashDividends(years=np.array([0.5]), amounts=np.array([4.0]))
    found = american(spot=spot, strike=100.0, tau_years=1.0, rate=0.05, dividend_yield=0.0, total_stdev=1e-5, sign=-1.0,
                     dividends=paid)  # fmt: skip
    assert float(found.value) == pytest.approx(3.5 * np.exp(-0.025), abs=1e-6)
    # and a call of 90 just before: 100.5 - 90
    found = american(spot=spot, strike=90.0, tau_years=1.0, rate=0.05, dividend_yield=0.0, total_stdev=1e-5, sign=1.0,
                     dividends=CashDividends(years=np.array([0.5]), amounts=np.array([6.0])))  # fmt: skip
    assert float(found.value) == pytest.approx(10.5 * np.exp(-0.025), abs=1e-6)


def test_a_dividend_at_expiry_above_the_strike() -> None:
    # ex on the day of expiry, a call is exercised before the drop and brings the whole share less 2, whatever it does
    paid = CashDividends(years=np.array([1.0]), amounts=np.array([5.0]))
    found = american(spot=100.0, strike=2.0, tau_years=1.0, rate=0.05, dividend_yield=0.0, total_stdev=0.3, sign=1.0,
                     dividends=paid)  # fmt: skip
    assert float(found.value) == pytest.approx(100.0 - 2.0 * np.exp(-0.05), abs=1e-4)


@pytest.mark.parametrize("name", ["spot", "strike", "tau_years", "rate", "dividend_yield", "total_stdev"])
def test_what_is_missing_stays_missing(name: str) -> None:
    option = {"spot": 100.0, "strike": 95.0, "tau_years": 1.0, "rate": 0.02, "dividend_yield": 0.01, "total_stdev": 0.3}
    broken = {key: np.array([value, np.nan]) if key == name else value for key, value in option.items()}
    found = american(**broken, sign=-1.0)
    assert found.value[0] == american(**option, sign=-1.0).value
    assert np.isnan([found.value[1], found.delta[1]]).all()


def test_refusals() -> None:
    option = {"spot": np.array([100.0, 3.0]), "strike": 95.0, "tau_years": 1.0, "rate": 0.0, "dividend_yield": 0.0,
              "total_stdev": 0.3, "sign": 1.0}  # fmt: skip
    years = np.array([0.2, 0.6])
    with pytest.raises(ValueError, match="dividends known in option 1 are worth more than its share of 3"):
        american(**option, dividends=CashDividends(years=years, amounts=np.array([2.0, 1.0])))
    with pytest.raises(ValueError, match="a cash dividend is negative"):
        american(**option, dividends=CashDividends(years=years, amounts=np.array([2.0, -1.0])))
    for steps in (14, 63):
        with pytest.raises(ValueError, match=f"an even number of steps, 16 at least: not {steps}"):
            american(**{**option, "sign": -1.0, "rate": 0.05}, steps=steps)
