"""Share and options at the first expiry: break-evens, range of ends, delta, and the chart.

Rungs: identity (break-evens solved by hand from the premiums), independent library (scipy's normal distribution and a
root search over Black's formula written out here), behaviour (what is drawn, read back from matplotlib).
"""

from __future__ import annotations

import math
from typing import Any

import numpy as np
import pandas as pd
import pytest
from matplotlib.figure import Figure
from scipy.optimize import brentq
from scipy.stats import norm

from backtest import FLAT, NO_COSTS, Costs, Financed, Leg, Market, Overlay, PercentOfSpot, Volatility
from backtest.charts import MIX
from backtest.charts.coming import coming_chart, coming_figure
from backtest.engine.coming import coming_roll
from backtest.engine.coming_package import Package, Stretch, stretches

RATE, YIELD = 0.04, 0.02
#: 15 March to 21 June 2024.
DAYS = 98


def put(percent: float, position: Any = "long", **kw: Any) -> Leg:
    return Leg(position=position, right="put", strike=PercentOfSpot(percent), **kw)


def call(percent: float, position: Any = "short", **kw: Any) -> Leg:
    return Leg(position=position, right="call", strike=PercentOfSpot(percent), **kw)


def package_of(*legs: Leg, costs: Costs = NO_COSTS, spot: float = 100.0, **agreed: Any) -> Package:
    """Options beside a share under 20 vol, by the data of 31 January 2024."""
    days = pd.bdate_range("2022-06-01", "2024-01-31", name="date")
    market = Market.from_frame(pd.DataFrame({"close": spot, "vol": 0.20}, index=days), rate=RATE, dividend_yield=YIELD)
    found = coming_roll(market, Overlay(legs=legs, costs=costs, **agreed), volatility=Volatility(smile=FLAT))
    assert found.package is not None
    return found.package


def black(sign: int, strike: float, days: int, *, spot: float = 100.0, vol: float = 0.20) -> float:
    tau = days / 365
    growth, discount = (1 + YIELD) ** -tau, (1 + RATE) ** -tau
    deviation = vol * math.sqrt(tau)
    d1 = math.log(spot * growth / discount / strike) / deviation + deviation / 2
    return sign * (spot * growth * norm.cdf(sign * d1) - strike * discount * norm.cdf(sign * (d1 - deviation)))


INTEREST = (1 + RATE) ** (DAYS / 365)
DIVIDENDS = 100 * ((1 + YIELD) ** (DAYS / 365) - 1)


def edges(found: tuple[Stretch, ...]) -> list[float]:
    assert found[0].low == 0.0
    assert found[-1].high == math.inf
    assert [one.high for one in found[:-1]] == [one.low for one in found[1:]]
    return [one.high for one in found[:-1]]


def sides(found: tuple[Stretch, ...]) -> list[int]:
    return [one.side for one in found]


# ---------------------------------------------------------------- all options expire on one day: exact


def test_break_evens_of_a_band_that_costs() -> None:
    """Put at 95, call at 110, both to 21 June; what they cost grows at the rate until then."""
    package = package_of(put(95), call(110), costs=Costs(half_spread_vol=0.5))
    paid = black(-1, 95, DAYS, vol=0.205) - (2 * black(1, 110, DAYS) - black(1, 110, DAYS, vol=0.205))
    assert (str(package.date), str(package.expiry), package.later) == ("2024-03-15", "2024-06-21", ())
    assert package.stake == pytest.approx(paid, rel=1e-9)
    assert package.interest == pytest.approx(INTEREST, rel=1e-14)
    assert package.dividends == pytest.approx(DIVIDENDS, rel=1e-12)
    due = package.stake * INTEREST
    assert due > 0
    # under the put: 95 - S = due; between the strikes the share is ahead by due, over the call by more
    assert sides(package.against_stock()) == [1, -1]
    assert edges(package.against_stock()) == pytest.approx([95 - due], rel=1e-12)
    # S - due + dividends = 100 with interest
    assert sides(package.against_cash()) == [-1, 1]
    assert edges(package.against_cash()) == pytest.approx([100 * INTEREST + due - DIVIDENDS], rel=1e-12)
    # 95 - due at most is lost, 110 - due is the most there is
    assert package.lowest_and_highest == pytest.approx((95 - due, 110 - due), rel=1e-12)


def test_break_evens_of_a_band_that_brings() -> None:
    """Put at 90, call at 102: ahead of the share until the call has taken what the options brought."""
    package = package_of(put(90), call(102, roll="quarter"))
    brought = (black(1, 102, DAYS) - black(-1, 90, DAYS)) * INTEREST
    assert package.stake * INTEREST == pytest.approx(-brought, rel=1e-9)
    assert sides(package.against_stock()) == [1, -1]
    assert edges(package.against_stock()) == pytest.approx([102 + brought], rel=1e-9)
    assert package.lowest_and_highest == pytest.approx((90 + brought, 102 + brought), rel=1e-9)


def test_two_calls_sold_a_share_are_behind_cash_at_both_ends() -> None:
    """Beyond the strike a share and two sold calls fall by what the share rises."""
    package = package_of(call(105, ratio=2.0, roll="quarter"))
    brought = 2 * black(1, 105, DAYS) * INTEREST
    cash = 100 * INTEREST - DIVIDENDS
    assert sides(package.against_cash()) == [-1, 1, -1]
    assert edges(package.against_cash()) == pytest.approx([cash - brought, 210 + brought - cash], rel=1e-9)
    assert edges(package.against_stock()) == pytest.approx([105 + brought / 2], rel=1e-9)
    # at 140 they are worth 140 - 2 * 35 and what they brought
    assert package.lowest_and_highest == pytest.approx((60 + brought, 105 + brought), rel=1e-9)


def test_a_put_spread_with_a_call() -> None:
    package = package_of(put(95), put(80, "short"), call(104, roll="quarter"))
    due = package.stake * INTEREST
    assert due == pytest.approx((black(-1, 95, DAYS) - black(-1, 80, DAYS) - black(1, 104, DAYS)) * INTEREST, rel=1e-9)
    assert due < 0
    assert edges(package.against_stock()) == pytest.approx([104 - due], rel=1e-12)
    # below 80 the spread is worth 15, whatever the share
    assert package.value(np.array([0.0, 50.0, 80.0])) == pytest.approx([15 - due, 65 - due, 95 - due], rel=1e-12)


def test_a_band_that_costs_nothing_is_level_with_the_share_between_its_strikes() -> None:
    sold = Leg(position="short", right="call", roll="quarter", strike=Financed(1.0))
    package = package_of(put(95), sold, costs=Costs(half_spread_vol=0.5), crossed=True)
    strike = package.held[1].strike
    assert sides(package.against_stock()) == [1, 0, -1]
    assert edges(package.against_stock()) == pytest.approx([95, strike], rel=1e-12)


def test_delta_of_share_and_options() -> None:
    package = package_of(put(95, ratio=0.5), call(110, roll="quarter"))
    tau = DAYS / 365
    growth, forward = (1 + YIELD) ** -tau, 100 * ((1 + RATE) / (1 + YIELD)) ** tau
    deviation = 0.2 * math.sqrt(tau)
    of_put = -growth * norm.cdf(-(math.log(forward / 95) / deviation + deviation / 2))
    of_call = growth * norm.cdf(math.log(forward / 110) / deviation + deviation / 2)
    assert package.delta == pytest.approx(1 + 0.5 * of_put - of_call, rel=1e-12)


# ---------------------------------------------------------------- a later option stands at its model value


def test_break_evens_with_a_later_put_at_its_model_value() -> None:
    """The call is opened on 16 February to 15 March; the put of December, to 21 June, has 98 days left then."""
    package = package_of(
        put(94, term_months=6), call(102, roll="month"), costs=Costs(half_spread_vol=0.0, half_spread_percent=5.0)
    )
    assert (str(package.date), str(package.expiry)) == ("2024-02-16", "2024-03-15")
    assert [(one.label, str(one.expiry), one.is_new) for one in package.held] == [
        ("put", "2024-06-21", False),
        ("call", "2024-03-15", True),
    ]
    assert [one.label for one in package.later] == ["put"]
    # on 16 February: the put at its value, 126 days to go, the call at its premium less 5% of it, 28 days
    interest = (1 + RATE) ** (28 / 365)
    stake = black(-1, 94, 126) - 0.95 * black(1, 102, 28)
    assert package.stake == pytest.approx(stake, rel=1e-9)

    def gain(spot: float) -> float:
        return black(-1, 94, DAYS, spot=spot) - max(spot - 102, 0) - stake * interest

    level = brentq(gain, 60, 140, xtol=1e-13)
    assert sides(package.against_stock()) == [1, -1]
    assert edges(package.against_stock()) == pytest.approx([level], rel=1e-9)
    cash = 100 * interest - 100 * ((1 + YIELD) ** (28 / 365) - 1)
    first = brentq(lambda spot: spot + gain(spot) - cash, 60, 101, xtol=1e-13)
    assert edges(package.against_cash()) == pytest.approx([first], rel=1e-9)
    spots = np.array([60.0, 94.0, 102.0, 140.0])
    assert package.value(spots) == pytest.approx([spot + gain(spot) for spot in spots.tolist()], rel=1e-10)


# ---------------------------------------------------------------- stretches of any function


def on_a_line(gain: Any, *knots: float) -> tuple[Stretch, ...]:
    return stretches(gain, np.array(knots), scale=100.0, none=1e-9, is_linear=True)


def test_stretches_worked_by_hand() -> None:
    assert on_a_line(lambda s: 0.0 * s, 0.0, 95.0) == (Stretch(0.0, math.inf, 0),)
    assert on_a_line(lambda s: 0.0 * s + 1.0, 0.0) == (Stretch(0.0, math.inf, 1),)
    # touches zero at 90 and stays above
    assert on_a_line(lambda s: np.abs(s - 90.0), 0.0, 90.0) == (Stretch(0.0, math.inf, 1),)
    # comes back to zero far beyond the last knot: 50 - (s - 100) / 100 = 0
    far = on_a_line(lambda s: 50.0 - np.maximum(s - 100.0, 0.0) / 100.0, 0.0, 100.0)
    assert sides(far) == [1, -1]
    assert edges(far) == pytest.approx([5100.0], rel=1e-12)


def test_stretches_of_a_curve() -> None:
    """(s - 30)(s - 70)(s - 110), searched on whole numbers from 1 to 150."""
    found = stretches(
        lambda s: (s - 30.0) * (s - 70.5) * (s - 110.25), np.arange(1.0, 151.0), scale=100.0, none=1e-9, is_linear=False
    )
    assert sides(found) == [-1, 1, -1, 1]
    assert edges(found) == pytest.approx([30.0, 70.5, 110.25], rel=1e-12)


# ---------------------------------------------------------------- the chart


def test_the_chart_has_both_lines_strikes_and_break_evens() -> None:
    package = package_of(put(95), put(50, "short"), call(110, roll="quarter"), spot=250.0)
    axes = Figure().subplots()
    assert coming_chart(axes, package=package) is axes
    drawn = {str(line.get_label()): line for line in axes.lines}
    ends = np.asarray(drawn["share alone"].get_xdata(), dtype=float)
    assert (ends[0], ends[-1]) == (60.0, 140.0)
    assert {95.0, 110.0} <= set(np.round(ends, 9))
    np.testing.assert_array_equal(drawn["share alone"].get_ydata(), ends)
    due = package.stake * INTEREST / 2.5
    by_hand = ends + np.maximum(95 - ends, 0) - np.maximum(50 - ends, 0) - np.maximum(ends - 110, 0) - due
    np.testing.assert_allclose(np.asarray(drawn["share and options"].get_ydata(), dtype=float), by_hand, rtol=1e-12)
    level = drawn["level with the share alone"]
    assert level.get_color() == MIX
    np.testing.assert_allclose(np.asarray(level.get_xdata(), dtype=float), [95 - due], rtol=1e-12)
    # the strike at 50 lies outside
    assert [text.get_text() for text in axes.texts] == ["put 237.50 bought, 95.0%", "call 275.00 sold, 110.0%"]


def test_the_figure_says_what_it_stands_on_whatever_the_name(tmp_path: Any) -> None:
    package = package_of(put(94, term_months=6), call(102, roll="month"))
    figure = coming_figure(package, title="$a_{ <b>" + "x" * 300)
    assert figure.get_suptitle().startswith("$a_{ <b>xxx")
    assert figure.get_suptitle().endswith("…: the roll of 2024-02-16")
    said = figure.get_supxlabel()
    assert "By the data of 2024-01-31, close 100.00: model values from past vols" in said
    assert "put 94.00 bought (to 2024-06-21)" in said
    figure.savefig(tmp_path / "a.png")
    assert (tmp_path / "a.png").read_bytes().startswith(b"\x89PNG")
