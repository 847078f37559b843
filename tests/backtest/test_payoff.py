"""Payoff at expiry: numbers against formulas written out here, and against a replay that lives through the picture.

Rung: twin (Black's formula by ``math.erf``, floor and cap by hand; the engine's own wealth on a history that ends at
the price in question), and behaviour for the chart.
"""

from __future__ import annotations

import math

import numpy as np
import pandas as pd
import pytest
from matplotlib.figure import Figure

from backtest import (
    FLAT,
    NO_COSTS,
    Adjusted,
    Costs,
    Delta,
    Early,
    Financed,
    Gate,
    Leg,
    Market,
    Mirrored,
    Overlay,
    OverlayError,
    PercentOfSpot,
    PremiumPercent,
    PriceMean,
    Volatility,
    replay,
)
from backtest.analytics.payoff import Payoff, payoff_at_expiry
from backtest.charts import payoff as charts

FLAT_VOL = Volatility(smile=FLAT)
RATE = math.log(1.02)
PUT = Leg(position="long", right="put", roll="quarter", strike=PercentOfSpot(95))
CALL = Leg(position="short", right="call", roll="quarter", strike=PercentOfSpot(110))
MONTHLY_CALL = Leg(position="short", right="call", roll="month", strike=PercentOfSpot(110))


def normal(x: float) -> float:
    return 0.5 * (1.0 + math.erf(x / math.sqrt(2.0)))


def black_scholes(right: str, spot: float, strike: float, years: float, vol: float = 0.2) -> float:
    """Without dividends, as any textbook has it."""
    deviation = vol * math.sqrt(years)
    d1 = (math.log(spot / strike) + (RATE + 0.5 * vol * vol) * years) / deviation
    call = spot * normal(d1) - strike * math.exp(-RATE * years) * normal(d1 - deviation)
    return call if right == "call" else call - spot + strike * math.exp(-RATE * years)


def made(*legs: Leg, costs: Costs = NO_COSTS, volatility: Volatility = FLAT_VOL, **overlay: object) -> Payoff:
    return payoff_at_expiry(Overlay(legs=legs, costs=costs, **overlay), volatility)  # type: ignore[arg-type]


def at(payoff: Payoff, *ends: float) -> list[float]:
    """Values at prices that are on the grid."""
    places = np.searchsorted(payoff.ends, ends)
    np.testing.assert_array_equal(payoff.ends[places], ends)
    return payoff.values[places].tolist()  # noqa: PD011  no frame


# ---------------------------------------------------------------- by hand


def test_floor_and_cap_of_a_band_are_its_strikes_less_the_net_premium() -> None:
    found = made(PUT, CALL)
    net = black_scholes("put", 100, 95, 0.25) - black_scholes("call", 100, 110, 0.25)
    assert found.net_premium == pytest.approx(net, rel=1e-12)
    paid = net * 1.02**0.25
    floor, cap = 95 - paid, 110 - paid
    assert at(found, 60, 75, 95) == pytest.approx([floor] * 3, rel=1e-12)
    assert at(found, 100, 105) == pytest.approx([100 - paid, 105 - paid], rel=1e-12)
    assert at(found, 110, 125, 140) == pytest.approx([cap] * 3, rel=1e-12)
    assert (found.years, found.replaced_years, found.replaced_values) == (0.25, None, None)
    assert (found.ends[0], found.ends[-1]) == (60.0, 140.0)


def test_half_spreads_are_in_the_net_premium() -> None:
    by_vol = made(PUT, CALL, costs=Costs(half_spread_vol=0.5))
    net = black_scholes("put", 100, 95, 0.25, 0.205)
    call = black_scholes("call", 100, 110, 0.25)
    net -= call - (black_scholes("call", 100, 110, 0.25, 0.205) - call)
    assert by_vol.net_premium == pytest.approx(net, rel=1e-12)
    by_percent = made(PUT, CALL, costs=Costs(half_spread_vol=0.0, half_spread_percent=10.0, commission=3.0))
    net = 1.1 * black_scholes("put", 100, 95, 0.25) + 0.03 - (0.9 * call - 0.03)
    assert by_percent.net_premium == pytest.approx(net, rel=1e-12)


def test_a_settlement_fee_is_paid_in_the_money_only() -> None:
    without, with_fee = made(PUT, CALL), made(PUT, CALL, costs=Costs(half_spread_vol=0.0, settlement_fee=20.0))
    lost = np.array(at(without, 60, 95, 100, 110, 140)) - at(with_fee, 60, 95, 100, 110, 140)
    assert lost == pytest.approx([0.2, 0.0, 0.0, 0.0, 0.2], abs=1e-12)


def test_a_call_on_half_of_the_shares_keeps_half_of_the_rise() -> None:
    half = Leg(position="short", right="call", strike=PercentOfSpot(110), ratio=0.5)
    found = made(half)
    brought = 0.5 * black_scholes("call", 100, 110, 0.25) * 1.02**0.25
    assert at(found, 110, 120, 140) == pytest.approx([110 + brought, 115 + brought, 125 + brought], rel=1e-12)


@pytest.mark.parametrize("smile", ["flat", "index"])
def test_a_call_that_pays_for_the_put_leaves_nothing_to_pay(smile: str) -> None:
    volatility = FLAT_VOL if smile == "flat" else Volatility()
    call = Leg(position="short", right="call", strike=Financed(1.0))
    found = made(PUT, call, costs=Costs(), volatility=volatility)
    assert abs(found.net_premium) < 1e-10
    strike = found.options[1].strike
    assert 100 < strike < 110
    assert found.options[1].flags == 0
    assert at(found, 60, 95, 97, 140) == pytest.approx([95, 95, 97, strike], abs=1e-9)


def test_a_monthly_call_pays_for_a_third_of_the_quarterly_put() -> None:
    call = Leg(position="short", right="call", roll="month", strike=Financed(1.0))
    found = made(PUT, call, costs=Costs())
    put, call_sold = found.options
    assert put.paid == pytest.approx(black_scholes("put", 100, 95, 0.25, 0.205), rel=1e-12)
    assert -call_sold.paid == pytest.approx(put.paid / 3, rel=1e-10)


@pytest.mark.parametrize("put_ladder", [1, 3])
def test_tranches_of_a_call_pay_for_the_put_together(put_ladder: int) -> None:
    put = Leg(position="long", right="put", strike=PercentOfSpot(95), ladder=put_ladder)
    call = Leg(position="short", right="call", strike=Financed(1.0), ladder=3)
    assert abs(made(put, call, costs=Costs()).net_premium) < 1e-10


def test_legs_are_opened_before_those_that_name_them() -> None:
    """The call stands first in the file and waits for both puts."""
    call = Leg(position="short", right="call", strike=Financed(1.0, legs=(2, 3)))
    lower = Leg(position="short", right="put", strike=PercentOfSpot(80))
    found = made(call, PUT, lower, costs=Costs(), volatility=Volatility())
    assert [option.number for option in found.options] == [1, 2, 3]
    assert abs(found.net_premium) < 1e-10
    assert at(found, 60, 80, 95) == pytest.approx([75, 95, 95], abs=1e-9)


def test_strikes_come_from_the_rules() -> None:
    found = made(
        Leg(position="long", right="put", strike=Delta(0.25)),
        Leg(position="short", right="call", strike=Mirrored(1)),
        Leg(position="long", right="put", strike=PremiumPercent(1.5)),
    )
    put, call, cheap = (option.strike for option in found.options)
    d1 = (math.log(100 / put) + (RATE + 0.02) * 0.25) / 0.1
    assert normal(-d1) == pytest.approx(0.25, rel=1e-10)
    assert call == pytest.approx((100 * 1.02**0.25) ** 2 / put, rel=1e-12)
    assert black_scholes("put", 100, cheap, 0.25) == pytest.approx(1.5, rel=1e-10)


def test_a_strike_without_a_solution_is_at_its_bound_and_said_to_be() -> None:
    dear = Leg(position="long", right="put", strike=PercentOfSpot(130))
    call = Leg(position="short", right="call", strike=Adjusted(rule=Financed(1.0), not_below=101))
    found = made(dear, call, crossed=True)
    assert found.options[1].strike == 101.0
    assert any("leg 2: lowest strike" in told for told in charts.payoff_caption(found))


# ---------------------------------------------------------------- different terms


def test_at_the_first_expiry_later_options_stand_at_their_model_value() -> None:
    found = made(PUT, MONTHLY_CALL)
    assert found.years == pytest.approx(1 / 12, rel=1e-15)
    net = black_scholes("put", 100, 95, 0.25) - black_scholes("call", 100, 110, 1 / 12)
    paid = net * 1.02 ** (1 / 12)
    expected = [end + black_scholes("put", end, 95, 1 / 6) - max(end - 110, 0) - paid for end in (60, 80, 100, 125)]
    assert at(found, 60, 80, 100, 125) == pytest.approx(expected, rel=1e-11)


def test_an_option_sold_before_its_expiry_is_shown_on_that_day_too() -> None:
    found = made(Leg(position="long", right="put", roll="quarter", term_months=12, strike=PercentOfSpot(95)))
    assert (found.years, found.replaced_years) == (1.0, 0.25)
    bought = black_scholes("put", 100, 95, 1.0)
    assert at(found, 60, 95, 140) == pytest.approx([95 - 1.02 * bought] * 2 + [140 - 1.02 * bought], rel=1e-12)
    assert found.replaced_values is not None
    places = np.searchsorted(found.ends, [60, 100, 140])
    expected = [end + black_scholes("put", end, 95, 0.75) - bought * 1.02**0.25 for end in (60, 100, 140)]
    assert found.replaced_values[places].tolist() == pytest.approx(expected, rel=1e-12)


def test_rolling_a_week_early_makes_an_option_a_week_longer() -> None:
    """It is bought 5 trading days before the cycle's date, and expires on the next one (C3)."""
    found = made(Leg(position="long", right="put", close_before=5, strike=PercentOfSpot(95)))
    assert found.years == pytest.approx(0.25 + 5 / 252, rel=1e-15)
    assert found.replaced_years == 0.25
    assert found.net_premium == pytest.approx(black_scholes("put", 100, 95, 0.25 + 5 / 252), rel=1e-12)


def test_a_roll_of_days_counts_21_to_the_month() -> None:
    found = made(Leg(position="long", right="put", roll="days", every=42, strike=PercentOfSpot(95)))
    assert found.years == pytest.approx(2 / 12, rel=1e-15)


# ---------------------------------------------------------------- what changes nothing, what cannot be


def test_tranches_gates_and_early_rules_change_no_number() -> None:
    plain = made(PUT, CALL)
    gate = Gate(condition=PriceMean(window=200, above=False))
    put = Leg(position="long", right="put", strike=PercentOfSpot(95), ladder=3, early=Early(value_above=4.0), gate=gate)
    other = made(put, Leg(position="short", right="call", strike=Adjusted(rule=PercentOfSpot(110), ratchet=True)))
    np.testing.assert_array_equal(other.values, plain.values)
    told = charts.payoff_caption(other)
    assert told[2:] == [
        "All tranches as if they were opened today.",
        "While the gate lets options be bought.",
        "Without early replacement.",
    ]
    assert charts.payoff_caption(plain)[2:] == []


def test_a_reference_lends_its_strike_and_is_not_held() -> None:
    lent = Leg(position="long", right="put", strike=PercentOfSpot(95), reference=True)
    found = made(lent, Leg(position="short", right="call", strike=Mirrored(1)))
    assert [option.number for option in found.options] == [2]
    assert found.options[0].strike == pytest.approx(100 * 100 * 1.02**0.5 / 95, rel=1e-12)
    with pytest.raises(OverlayError, match="no leg holds an option"):
        made(lent)


def test_a_vol_that_is_shifted_away_is_refused() -> None:
    with pytest.raises(OverlayError, match="leg 1 has no price at a vol of 20%"):
        made(PUT, volatility=Volatility(smile=FLAT, put_shift=-20.0))


# ---------------------------------------------------------------- the engine lives through it


@pytest.mark.parametrize("end", [62.0, 88.0, 100.0, 117.0, 139.0])
def test_a_replay_that_ends_at_a_price_has_the_wealth_of_the_picture(end: float) -> None:
    """In the cash account premiums earn or cost the rate, as here; what opens on the last day costs once more."""
    days = pd.bdate_range("2019-03-01", "2019-07-01", name="date")
    close = np.where(days <= "2019-03-15", 100.0, end)
    market = Market.from_frame(pd.DataFrame({"close": close, "vol": 0.2}, index=days), rate=0.02)
    legs = (
        PUT,
        Leg(position="short", right="call", roll="month", strike=Financed(0.8)),
        Leg(position="short", right="put", roll="month", ratio=0.5, strike=Delta(0.1)),
    )
    overlay = Overlay(legs=legs, account="cash", costs=Costs(settlement_fee=7.0, commission=1.0))
    lived = replay(market, overlay, volatility=Volatility(), start="2019-03-15", end="2019-04-19")
    assert str(lived.dates[0]) == "2019-03-15"
    opened_again = sum(leg.leg.ratio * leg.open_cost[1] for leg in lived.legs[1:]) / 100.0
    # 35 days to Friday the 19th of April, 98 to that of June
    found = payoff_at_expiry(overlay, Volatility(), lives=(98 / 365, 35 / 365, 35 / 365))
    for option, leg in zip(found.options, lived.legs, strict=True):
        assert option.strike == pytest.approx(leg.strike[0], rel=1e-12)
        assert option.premium == pytest.approx(leg.premium[0], rel=1e-12)
        assert option.cost == pytest.approx(leg.open_cost[0], rel=1e-12)
    assert at(found, end) == pytest.approx([100.0 * (lived.wealth[-1] + opened_again)], rel=1e-12)


# ---------------------------------------------------------------- the picture


def drawn(payoff: Payoff) -> dict[str, tuple[list[float], list[float]]]:
    axes = Figure().subplots()
    assert charts.payoff_at_expiry(axes, payoff=payoff) is axes
    return {str(line.get_label()): (list(line.get_xdata()), list(line.get_ydata())) for line in axes.lines}


def test_what_is_drawn() -> None:
    found = made(PUT, MONTHLY_CALL)
    lines = drawn(found)
    assert lines["stock alone"] == (found.ends.tolist(), found.ends.tolist())
    assert lines["stock and options at the first expiry, in 1 month"] == (found.ends.tolist(), list(found.values))
    assert "stock and options at expiry, in 3 months" in drawn(made(PUT, CALL))
    one_year = made(Leg(position="long", right="put", roll="quarter", term_months=12, strike=PercentOfSpot(95)))
    assert one_year.replaced_values is not None
    assert drawn(one_year)["at the first roll, in 3 months"][1] == one_year.replaced_values.tolist()


def test_strikes_are_marked_on_the_curve_and_named() -> None:
    figure = charts.payoff_figure(made(PUT, CALL, costs=Costs(), volatility=Volatility()), title="cost in $ and $")
    (axes,) = figure.axes
    # a 95 put of three months at 2.379 and 0.088 of half-spread, a 110 call at 0.574 less 0.078
    assert [text.get_text() for text in axes.texts] == ["95 put bought for 2.47", "110 call sold for 0.50"]
    dots = [(line.get_xdata()[0], line.get_ydata()[0]) for line in axes.lines if line.get_marker() == "o"]
    paid = 1.9709 * 1.02**0.25
    np.testing.assert_allclose(dots, [(95.0, 95 - paid), (110.0, 110 - paid)], atol=1e-4, rtol=0)
    figure.draw_without_rendering()
    assert figure.get_suptitle() == "cost in $ and $"


def test_a_strike_outside_of_the_picture_is_told_under_it() -> None:
    far = made(Leg(position="short", right="call", strike=PercentOfSpot(150)), PUT)
    assert "Outside the picture: 150 call sold for 0.00." in charts.payoff_caption(far)
    figure = charts.payoff_figure(far, title="far")
    assert [text.get_text()[:6] for text in figure.axes[0].texts] == ["95 put"]


def test_the_caption_says_what_was_assumed_and_the_net_premium() -> None:
    told = charts.payoff_caption(made(PUT, MONTHLY_CALL, costs=Costs(), volatility=Volatility()))
    assert told == [
        "For one share. Net premium paid 2.43% of the price, with interest, half-spreads included.",
        "Assumed: price 100, vol 20% at the money, smile index, rate 2%, no dividends.",
        "Options not expired yet stand at their model value, vols unchanged.",
    ]
    # 1.0430, by the formula above
    assert charts.payoff_caption(made(CALL))[0].startswith("For one share. Net premium received 1.04% of the price")
    free = made(PUT, Leg(position="short", right="call", strike=Financed(1.0)))
    assert charts.payoff_caption(free)[0] == "For one share. No net premium, half-spreads included."


@pytest.mark.parametrize("strikes", [(95, 110), (99, 100, 101, 102), (61, 80, 95), (120, 130, 139), (95, 95, 95)])
def test_words_overlap_neither_each_other_nor_a_line(strikes: tuple[float, ...]) -> None:
    legs = tuple(
        Leg(position="short" if strike > 100 else "long", right="call" if strike > 100 else "put",
            strike=PercentOfSpot(strike), ratio=0.25)
        for strike in strikes
    )  # fmt: skip
    figure = charts.payoff_figure(made(*legs), title="many strikes")
    figure.draw_without_rendering()
    (axes,) = figure.axes
    boxes = [text.get_window_extent() for text in axes.texts]
    assert len(boxes) == len(strikes)
    for place, box in enumerate(boxes):
        assert not any(box.overlaps(other) for other in boxes[place + 1 :])
        assert box.x1 <= figure.bbox.x1
        for line in axes.lines:
            points = axes.transData.transform(np.column_stack([line.get_xdata(), line.get_ydata()]))
            if len(points) == 2:  # a strike's line, from its foot up
                points = np.linspace(points[0], points[1], 200)
            assert not any(box.contains(x, y) for x, y in points)
