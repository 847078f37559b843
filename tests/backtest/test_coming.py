"""The coming roll worked by hand: dates, strikes, premiums, costs, what is live, contracts, gates.

Rungs: identity and independent library (a market at 20 vol that stands still, by Black's formula written out here with
scipy's normal distribution). The replay that carries the roll out is in ``test_coming_replayed.py``, the payoff at the
first expiry in ``test_coming_package.py``.
"""

from __future__ import annotations

import math
from typing import Any

import numpy as np
import pandas as pd
import pytest
from scipy.stats import norm

from backtest import (
    FLAT,
    Adjusted,
    Costs,
    Financed,
    Gate,
    Leg,
    Market,
    MarketError,
    Overlay,
    OverlayError,
    PercentOfForward,
    PercentOfSpot,
    PlanError,
    PriceMean,
    Volatility,
)
from backtest.engine.coming import coming_roll, for_holding

FLAT_VOL = Volatility(smile=FLAT)


def put(position: str = "long", **kw: Any) -> Leg:
    kw.setdefault("strike", PercentOfSpot(95))
    return Leg(position=position, right="put", **kw)  # type: ignore[arg-type]


def call(position: str = "short", **kw: Any) -> Leg:
    kw.setdefault("strike", PercentOfSpot(110))
    kw.setdefault("roll", "month")
    return Leg(position=position, right="call", **kw)  # type: ignore[arg-type]


def still(end: str = "2024-01-31", *, spot: float = 200.0, rate: float = 0.03, dividend_yield: float = 0.0) -> Market:
    """A share at one price under 20 vol."""
    days = pd.bdate_range("2022-06-01", end, name="date")
    frame = pd.DataFrame({"close": spot, "vol": 0.20}, index=days)
    return Market.from_frame(frame, rate=rate, dividend_yield=dividend_yield)


def black(
    sign: int, strike: float, days: int, *, spot: float = 200.0, rate: float, dividend_yield: float, vol: float = 0.20
) -> tuple[float, float]:
    """Value and spot delta, written out."""
    tau = days / 365
    growth, discount = (1 + dividend_yield) ** -tau, (1 + rate) ** -tau
    deviation = vol * math.sqrt(tau)
    d1 = math.log(spot * growth / discount / strike) / deviation + deviation / 2
    value = sign * (spot * growth * norm.cdf(sign * d1) - strike * discount * norm.cdf(sign * (d1 - deviation)))
    return value, sign * growth * norm.cdf(sign * d1)


# ---------------------------------------------------------------- by hand


def test_a_put_and_a_call_worked_by_hand() -> None:
    """The put rolls on 15 March for 21 June 2024, 98 days; the call on 16 February for 15 March, 28 days."""
    overlay = Overlay(legs=(put(), call(strike=PercentOfForward(104))), costs=Costs(half_spread_vol=0.7, commission=3))
    found = coming_roll(still(dividend_yield=0.02), overlay, volatility=FLAT_VOL)
    assert (str(found.newest), found.spot) == ("2024-01-31", 200.0)
    forward = 200.0 * (1.03 / 1.02) ** (28 / 365)
    expected = [
        # leg, sign, roll, expiry, days, strike
        (found.legs[0], -1, "2024-03-15", "2024-06-21", 98, 190.0),
        (found.legs[1], +1, "2024-02-16", "2024-03-15", 28, 1.04 * forward),
    ]
    for leg, sign, roll, expiry, days, strike in expected:
        option = leg.option
        assert option is not None
        assert (str(leg.roll), str(leg.expiry), leg.days, str(option.decided)) == (roll, expiry, days, roll)
        value, delta = black(sign, strike, days, rate=0.03, dividend_yield=0.02)
        dearer, _ = black(sign, strike, days, rate=0.03, dividend_yield=0.02, vol=0.207)
        assert option.strike == pytest.approx(strike, rel=1e-13)
        assert option.premium == pytest.approx(value, rel=1e-10)
        assert option.delta == pytest.approx(delta, rel=1e-12)
        assert option.vol == pytest.approx(0.20, rel=1e-12)
        assert option.forward == pytest.approx(200.0 * (1.03 / 1.02) ** (days / 365), rel=1e-14)
        # half a spread of 0.7 vol points, and 3 a contract of 100 shares
        assert option.cost == pytest.approx(dearer - value + 0.03, rel=1e-9)
        assert option.flags == ()
    bought, sold = (leg.option for leg in found.legs)
    assert bought is not None
    assert sold is not None
    assert found.legs[0].after_cost == bought.premium + bought.cost
    assert found.legs[1].after_cost == sold.premium - sold.cost
    # the call alone rolls first; the put that is live stays
    assert [leg.label for leg in found.rolling] == ["call"]
    assert found.net == pytest.approx(sold.premium - sold.cost, rel=1e-15)


def test_the_options_that_are_live() -> None:
    """Opened on 15 December 2023 and 19 January 2024; 44 and 16 days are left."""
    found = coming_roll(still(), Overlay(legs=(put(), call())), volatility=FLAT_VOL)
    for leg, sign, opened, expiry, days, strike in zip(
        found.legs,
        (-1, 1),
        ("2023-12-15", "2024-01-19"),
        ("2024-03-15", "2024-02-16"),
        (44, 16),
        (190, 220),
        strict=True,
    ):
        live = leg.live
        assert live is not None
        assert (str(live.opened), str(live.expiry)) == (opened, expiry)
        assert live.strike == pytest.approx(strike, rel=1e-15)
        value, delta = black(sign, strike, days, rate=0.03, dividend_yield=0.0)
        assert live.value == pytest.approx(value, rel=1e-9)
        assert live.delta == pytest.approx(delta, rel=1e-9)


def test_on_a_roll_date_the_newest_day_is_the_roll() -> None:
    """15 December 2023 rolls both; the call of that day is the coming one, not January's."""
    found = coming_roll(still("2023-12-15"), Overlay(legs=(put(), call())), volatility=FLAT_VOL)
    assert [str(leg.roll) for leg in found.legs] == ["2023-12-15"] * 2
    assert [str(leg.expiry) for leg in found.legs] == ["2024-03-15", "2024-01-19"]
    assert [leg.live for leg in found.legs] == [None, None]
    assert [leg.label for leg in found.rolling] == ["put", "call"]
    value, _ = black(-1, 190.0, 91, rate=0.03, dividend_yield=0.0)
    assert found.legs[0].option is not None
    assert found.legs[0].option.premium == pytest.approx(value, rel=1e-10)


def test_a_strike_is_rounded_as_listed_and_a_ratchet_sees_the_live_option() -> None:
    days = pd.bdate_range("2022-06-01", "2024-01-31", name="date")
    close = pd.Series(200.0, index=days)
    close["2024-01-22":] = 192.0  # after the roll of 19 January, at which the put was struck at 190
    market = Market.from_frame(pd.DataFrame({"close": close, "vol": 0.20}))
    plain, kept, stepped = (
        put(roll="month", strike=strike)
        for strike in (
            PercentOfSpot(95),
            Adjusted(rule=PercentOfSpot(95), ratchet=True),
            Adjusted(rule=PercentOfSpot(90), not_below=94, strike_step=5),
        )
    )
    found = coming_roll(market, Overlay(legs=(plain, kept, stepped)), volatility=FLAT_VOL)
    options = [leg.option for leg in found.legs if leg.option is not None]
    # 95% of 192; the 190 that is live; 94% of 192 is 180.48, the nearest multiple of 5 is 180
    assert [option.strike for option in options] == pytest.approx([182.4, 190.0, 180.0], rel=1e-14)
    assert [option.flags for option in options] == [(), ("ratchet",), ("lowest strike",)]


def test_contracts_and_money_of_a_holding() -> None:
    """a holding of 95,000 at 200 is 475 shares: 4 contracts of 100 for the put, 2 for half a call a share."""
    overlay = Overlay(legs=(put(), call(roll="quarter", ratio=0.5)), costs=Costs(half_spread_vol=0.5))
    found = coming_roll(still(), overlay, volatility=FLAT_VOL)
    bought, sold = (leg.option for leg in found.legs)
    assert bought is not None
    assert sold is not None
    holding = for_holding(found, 95_000.0)
    assert (holding.money, holding.shares, holding.multiplier) == (95_000.0, 475.0, 100.0)
    assert holding.contracts == (4, 2)
    paid, received = 400 * (bought.premium + bought.cost), 200 * (sold.premium - sold.cost)
    assert holding.cash == pytest.approx((-paid, received), rel=1e-14)
    assert holding.net == pytest.approx(received - paid, rel=1e-13)
    assert found.net == pytest.approx(0.5 * (sold.premium - sold.cost) - bought.premium - bought.cost, rel=1e-14)
    # exactly two contracts are two, one share less is one
    assert for_holding(found, 40_000.0).contracts == (2, 1)
    assert for_holding(found, 39_800.0).contracts == (1, 0)
    with pytest.raises(OverlayError, match="it takes a number of at least 1"):
        for_holding(found, 0.0)


def test_a_leg_that_is_not_held_is_told_and_costs_nothing() -> None:
    overlay = Overlay(legs=(put(reference=True), call(strike=Financed(1.0), roll="quarter")), crossed=True)
    found = coming_roll(still(), overlay, volatility=FLAT_VOL)
    assert [leg.is_opened for leg in found.legs] == [False, True]
    assert found.legs[0].option is not None
    assert found.legs[0].cash == 0.0
    assert for_holding(found, 1e6).contracts == (0, 50)
    assert found.package is not None
    assert [option.label for option in found.package.held] == ["call"]
    # the call brings after its cost what the put would cost with its own
    assert found.legs[1].after_cost == pytest.approx(found.legs[0].after_cost, rel=1e-10)


# ---------------------------------------------------------------- gates, and what cannot be


def test_a_gate_that_is_off_opens_nothing_by_todays_data() -> None:
    """The close has fallen under its mean of 20 days on the newest day; what is live runs out."""
    days = pd.bdate_range("2022-06-01", "2024-01-31", name="date")
    close = pd.Series(np.linspace(150.0, 200.0, len(days)), index=days)
    close["2024-01-31"] = 170.0
    market = Market.from_frame(pd.DataFrame({"close": close, "vol": 0.20}))
    gate = Gate(condition=PriceMean(window=20, above=True))
    gated = coming_roll(market, Overlay(legs=(put(gate=gate), call(gate=gate))), volatility=FLAT_VOL)
    assert [leg.option for leg in gated.legs] == [None, None]
    assert [str(leg.roll) for leg in gated.legs] == ["2024-03-15", "2024-02-16"]
    assert [leg.live is not None for leg in gated.legs] == [True, True]
    assert (gated.package, gated.rolling, gated.net) == (None, (), 0.0)
    assert math.isnan(gated.legs[0].after_cost)
    assert for_holding(gated, 1e6).cash == (0.0, 0.0)
    # only the put is gated: the call rolls, and finances nothing once that put is gone
    later = call(roll="quarter", close_before=0, strike=Adjusted(rule=Financed(1.0), not_above=120.0))
    half = coming_roll(market, Overlay(legs=(put(gate=gate), later), crossed=True), volatility=FLAT_VOL)
    assert half.legs[0].option is None
    assert half.legs[1].option is not None
    assert half.legs[1].option.flags == ("no solution", "highest strike")
    assert half.package is not None
    assert [option.label for option in half.package.held] == ["call"]
    # the monthly call on 16 February comes while the put is still live
    before = coming_roll(
        market, Overlay(legs=(put(gate=gate), call(strike=Financed(0.1))), crossed=True), volatility=FLAT_VOL
    )
    assert before.package is not None
    assert [(one.label, one.is_new) for one in before.package.held] == [("put", False), ("call", True)]


def test_what_cannot_be_is_refused_as_by_the_replay() -> None:
    days = pd.bdate_range("2022-06-01", "2024-01-31", name="date")
    frame = pd.DataFrame({"close": 200.0, "vol": 0.20}, index=days)
    short = Market.from_frame(frame.iloc[-20:])
    with pytest.raises(PlanError, match="no roll date of the longest leg"):
        coming_roll(short, Overlay(legs=(put(),)))
    frame.loc["2024-01-30":, "vol"] = np.nan
    with pytest.raises(MarketError, match="no vol on 2024-01-30"):
        coming_roll(Market.from_frame(frame), Overlay(legs=(put(),)))


def test_the_replay_may_begin_later() -> None:
    found = coming_roll(still(), Overlay(legs=(put(),)), start="2023-01-01")
    assert str(found.replay.dates[0]) == "2023-03-17"
