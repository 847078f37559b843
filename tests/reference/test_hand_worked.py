"""Rung: identity. Three rolls worked by hand: the put pays, the call pays, neither does.

Seventy weekdays of an invented index, no rate, no dividends (so the forward is spot), 20 vol at every
strike. A month's 95 put is bought and a month's 105 call sold. Third Fridays: 15 January, 19 February,
19 March and 16 April 2021, which is the last day; the terms are 35, 28 and 28 days. At the rolls the index
stands at

    15 January  100        put 95     call 105
    19 February  90        put 85.5   call 94.5     the put of January paid 95 - 90 = 5
    19 March     99        put 94.05  call 103.95   the call of February paid 99 - 94.5 = 4.5
    16 April    100.98                              between 94.05 and 103.95: neither paid

Premiums per 100 of spot, with s = 0.20 sqrt(days / 365), d1 = ln(100/K)/s + s/2, d2 = d1 - s, and the
normal distribution N from a table of twelve digits:

    35 days, s = 0.061932353729
      put   95: d1 =  0.859181016, d2 =  0.797248662
                95 N(-d2) - 100 N(-d1) =  95 (0.212653314656) - 100 (0.195120327641) = 0.690032128
      call 105: d1 = -0.756831496, d2 = -0.818763850
                100 N(d1) - 105 N(d2)  = 100 (0.224575410240) - 105 (0.206460579781) = 0.779180147
      bought less sold: 0.690032128 - 0.779180147 = -0.089148019
    28 days, s = 0.055393981177
      put   95: 95 (0.184519385467) - 100 (0.170125524582)  = 0.516789161
      call 105: 100 (0.196805367979) - 105 (0.181811924486) = 0.590284727
      bought less sold: -0.073495566
"""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest

from backtest import FLAT, NO_COSTS, Costs, Leg, Market, Overlay, PercentOfSpot, Replay, Volatility, replay

# the premiums above have nine decimals, in percent of spot
RTOL = 1e-10
ROLL_DAYS = ["2021-01-15", "2021-02-19", "2021-03-19", "2021-04-16"]
LEGS = (
    Leg(position="long", right="put", roll="month", strike=PercentOfSpot(95)),
    Leg(position="short", right="call", roll="month", strike=PercentOfSpot(105)),
)


def replayed(account: str, costs: Costs = NO_COSTS) -> Replay:
    days = pd.bdate_range("2021-01-11", "2021-04-16", name="date")
    assert len(days) == 70
    fixed = pd.Series([98.0, 100.0, 90.0, 99.0, 100.98], index=pd.to_datetime(["2021-01-11", *ROLL_DAYS]))
    frame = pd.DataFrame({"close": fixed.reindex(days).interpolate(), "vol": 0.20}, index=days)
    overlay = Overlay(legs=LEGS, account=account, costs=costs)
    return replay(Market.from_frame(frame), overlay, volatility=Volatility(smile=FLAT))


def on_rolls(result: Replay, values: np.ndarray) -> np.ndarray:
    days = result.dates.astype(str).tolist()
    return values[[days.index(day) for day in ROLL_DAYS]]


def test_wealth_when_resized_at_each_roll() -> None:
    result = replayed("resize")
    # 15 January: a package costs 100 - 0.089148019 = 99.910851981; 1 / 99.910851981 = 0.010008922756 of them
    # 19 February: each is the share at 90 and the put's 5, 95; 95 x 0.010008922756 = 0.950847661853
    #   a new one costs 90 (1 - 0.00073495566) = 89.933853991; 0.950847661853 / 89.933853991 = 0.010572744519
    # 19 March: the share at 99 less the call's 4.5, 94.5; 94.5 x 0.010572744519 = 0.999124357043
    #   a new one costs 99 (1 - 0.00073495566) = 98.927239390; 0.999124357043 / 98.927239390 = 0.010099587972
    # 16 April: the share alone, 100.98; 100.98 x 0.010099587972 = 1.019856393408
    expected = [1.0, 0.950847661853, 0.999124357043, 1.019856393408]
    np.testing.assert_allclose(on_rolls(result, result.wealth), expected, rtol=RTOL)
    units = [0.010008922756, 0.010572744519, 0.010099587972]
    np.testing.assert_allclose(on_rolls(result, result.units)[:3], units, rtol=RTOL)
    np.testing.assert_allclose(result.cash, 0.0, atol=1e-15)


def test_wealth_with_a_cash_account() -> None:
    result = replayed("cash")
    # one share of 100 for 1 of wealth is 0.01 shares, kept throughout
    # 15 January: cash 0.01 x 0.089148019                              = 0.00089148019
    # 19 February: + 0.01 x 5                                          = 0.05089148019
    #   wealth 0.01 x 90 + 0.05089148019 = 0.95089148019
    #   premiums received 0.01 x 90 x 0.00073495566 = 0.00066146009, cash 0.05155294028
    # 19 March: - 0.01 x 4.5, cash                                       0.00655294028
    #   wealth 0.01 x 99 + 0.00655294028 = 0.99655294028
    #   premiums received 0.01 x 99 x 0.00073495566 = 0.00072760610, cash 0.00728054638
    # 16 April: wealth 0.01 x 100.98 + 0.00728054638 = 1.01708054638
    expected = [1.0, 0.95089148019, 0.99655294028, 1.01708054638]
    np.testing.assert_allclose(on_rolls(result, result.wealth), expected, rtol=RTOL)
    cash = [0.00089148019, 0.05155294028, 0.00728054638]
    np.testing.assert_allclose(on_rolls(result, result.cash)[:3], cash, rtol=0.0, atol=1e-11)
    np.testing.assert_allclose(result.shares, 0.01, rtol=1e-15)


def test_first_roll_with_costs() -> None:
    costs = Costs(half_spread_vol=0.0, half_spread_min=0.25, settlement_fee=20.0, multiplier=100.0, stock_bps=10.0)
    result = replayed("resize", costs)
    # 15 January: a package and the spread on its two options cost 99.910851981 + 0.25 + 0.25 = 100.410851981, more
    #   than the 100 of the share there is for each: stock is sold, at 100 x 10 / 10000 = 0.1 a share.
    #   units 100.410851981 = 1 - 0.1 (0.01 - units), so units = 0.999 / 100.310851981 = 0.009959042120
    # 19 February: the share 90 and the put's 5 less its fee 20 / 100, 94.8; 94.8 x 0.009959042120 = 0.944117193001
    #   a new package and its spread 89.933853991 + 0.5 = 90.433853991, so shares are bought at 0.09 each:
    #   units 90.433853991 = 0.944117193001 - 0.09 (units - 0.009959042120)
    #   units = (0.944117193001 + 0.000896313791) / 90.523853991 = 0.010439386583
    #   wealth after the trades 0.010439386583 x 89.933853991 = 0.938854268708
    np.testing.assert_allclose(on_rolls(result, result.units)[:2], [0.009959042120, 0.010439386583], rtol=RTOL)
    np.testing.assert_allclose(on_rolls(result, result.wealth)[:2], [1.0, 0.938854268708], rtol=RTOL)


def test_each_option() -> None:
    rolls = replayed("resize").rolls_frame()
    assert rolls["leg"].tolist() == ["put", "call"] * 4
    assert rolls["opened"].dt.strftime("%Y-%m-%d").tolist() == [day for day in ROLL_DAYS for _ in LEGS]
    # in the next month the third Friday is 21 May, after the last price: open, at its premium
    expiries = [*ROLL_DAYS[1:], "2021-05-21"]
    assert rolls["expiry"].dt.strftime("%Y-%m-%d").tolist() == [day for day in expiries for _ in LEGS]
    assert rolls["closed"].isna().tolist() == [False] * 6 + [True] * 2
    assert rolls["flag"].tolist() == [""] * 6 + ["open"] * 2

    np.testing.assert_allclose(rolls["strike"][:6], [95.0, 105.0, 85.5, 94.5, 94.05, 103.95], rtol=1e-14)
    settled = [5.0, 0.0, 0.0, 4.5, 0.0, 0.0]
    np.testing.assert_allclose(rolls["settled"][:6], settled, rtol=1e-13, atol=0.0)
    # premiums: of 100, 90 and 99; 0.9 x 0.516789161 = 0.465110245, 0.9 x 0.590284727 = 0.531256254,
    #   0.99 x 0.516789161 = 0.511621270, 0.99 x 0.590284727 = 0.584381880
    premium = [0.690032128, 0.779180147, 0.465110245, 0.531256254, 0.511621270, 0.584381880]
    np.testing.assert_allclose(rolls["premium"][:6], premium, rtol=0.0, atol=1e-9)
    # bought: settled less premium; sold: premium less settled
    profit = [5.0 - 0.690032128, 0.779180147, -0.465110245, 0.531256254 - 4.5, -0.511621270, 0.584381880]
    np.testing.assert_allclose(rolls["profit"][:6], profit, rtol=0.0, atol=1e-9)
    assert rolls["profit"].tolist()[6:] == pytest.approx([0.0, 0.0], abs=1e-15)
