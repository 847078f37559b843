"""Daily attribution (C12).

Rung: hand-worked (two days of a put), identity (parts sum to the excess return at machine precision, many legs, both
accounts) and independent library (covariance shares of numpy, regressions of statsmodels).
"""

from __future__ import annotations

from statistics import NormalDist

import numpy as np
import numpy.typing as npt
import pandas as pd
import pytest
import statsmodels.api as sm  # type: ignore[import-untyped]

from backtest import FLAT, NO_COSTS, Costs, Leg, Market, Overlay, PercentOfSpot, Replay, Volatility, replay
from backtest.analytics import Attribution, attribute

Array = npt.NDArray[np.float64]

TIGHT = 1e-12

# ---------------------------------------------------------------- two days by hand

# A 95 put is bought on 15 January 2021 at 100, 35 days before it expires; 98 on the 18th, 99 on the 19th. Vol 20 at
# every strike, cash at 5% a year, 0.25 of half-spread. One share of 100 per 1 of wealth: 0.01 shares and puts.
SPOT = [100.0, 98.0, 99.0]
LEFT = [35, 32, 31]
# cash over three days and one: 1.05^(3/365) - 1, 1.05^(1/365) - 1
RF = [0.000401095465, 0.000133680617]


def put(spot: float, days: int) -> tuple[float, float]:
    """Value and delta of the 95 put by Black and Scholes, with the normal distribution of the standard library."""
    tau, rate, normal = days / 365, np.log(1.05), NormalDist()
    stdev = 0.20 * tau**0.5
    d1 = (np.log(spot / 95) + rate * tau) / stdev + stdev / 2
    value = 95 * np.exp(-rate * tau) * normal.cdf(stdev - d1) - spot * normal.cdf(-d1)
    return float(value), -normal.cdf(-d1)


def two_days(costs: Costs) -> Attribution:
    days = pd.to_datetime(["2021-01-15", "2021-01-18", "2021-01-19"])
    market = Market.from_frame(pd.DataFrame({"close": SPOT, "vol": 0.20}, index=days), rate=0.05)
    leg = Leg(position="long", right="put", roll="month", strike=PercentOfSpot(95))
    overlay = Overlay(legs=(leg,), account="cash", costs=costs)
    return attribute(replay(market, overlay, volatility=Volatility(smile=FLAT)))


def test_two_days_of_a_put_by_hand() -> None:
    (p0, d0), (p1, d1), (p2, _) = (put(s, t) for s, t in zip(SPOT, LEFT, strict=True))
    # the same from QuantLib's BlackCalculator
    assert [p0, p1, p2] == pytest.approx([0.600497834571, 0.965808360856, 0.703733994957], abs=1e-12)
    assert [d0, d1] == pytest.approx([-0.174965468605, -0.265377174239], abs=1e-12)
    found = two_days(Costs(half_spread_vol=0.0, half_spread_min=0.25))
    # cash after the trade is -0.01 (p0 + 0.25); wealth is 1 before it
    w1 = 0.98 + 0.01 * p1 - 0.01 * (p0 + 0.25) * (1 + RF[0])
    w2 = 0.99 + 0.01 * p2 - 0.01 * (p0 + 0.25) * (1 + RF[0]) * (1 + RF[1])
    e = [-0.02 - RF[0], 1 / 98 - RF[1]]  # 98 / 100 and 99 / 98
    # dollar delta over wealth: 0.01 shares and 0.01 puts of that delta, times spot
    delta = [1.0 + d0, 0.98 * (1.0 + d1) / w1]
    mean = (delta[0] + delta[1]) / 2
    by_hand = {
        "excess_return": [w1 / 1.0 - 1 - RF[0], w2 / w1 - 1 - RF[1]],
        "passive_equity": [mean * e[0], mean * e[1]],
        "equity_timing": [(delta[0] - mean) * e[0], (delta[1] - mean) * e[1]],
        "volatility_put": [
            0.01 * (p1 - p0) - RF[0] * 0.01 * p0 - d0 * e[0],
            (0.01 * (p2 - p1) - RF[1] * 0.01 * p1 - 0.98 * d1 * e[1]) / w1,
        ],
        # the first day's 0.0025, with its three days of interest
        "cost": [-0.0025 * (1 + RF[0]), 0.0],
    }
    parts = found.parts()
    assert list(parts) == ["passive_equity", "equity_timing", "volatility_put", "cost", "excess_return"]
    for name, values in by_hand.items():
        np.testing.assert_allclose(parts[name], values, rtol=0.0, atol=2e-12, err_msg=name)  # RF has twelve digits
    # and a year of 252 such days
    assert found.annual() == pytest.approx({name: 126 * sum(values) for name, values in by_hand.items()}, abs=6e-10)


def test_without_costs_there_is_none() -> None:
    free, dear = two_days(NO_COSTS), two_days(Costs(half_spread_vol=0.0, half_spread_min=0.25))
    assert (free.cost == 0.0).all()
    # wealth on the first day is 1 either way: all that day's parts but the cost are the same
    assert free.volatility[0, 0] == dear.volatility[0, 0]
    assert dear.excess[0] - free.excess[0] == pytest.approx(dear.cost[0], abs=1e-15)


# ---------------------------------------------------------------- many legs

LEGS = (
    Leg(position="long", right="put", roll="half", strike=PercentOfSpot(96)),
    Leg(position="short", right="put", roll="quarter", term_months=6, strike=PercentOfSpot(82), ratio=0.8),
    Leg(position="short", right="call", roll="month", strike=PercentOfSpot(103), ratio=0.6),
    Leg(position="long", right="call", roll="quarter", phase=2, strike=PercentOfSpot(110), ratio=0.3),
    Leg(position="long", right="put", roll="month", strike=PercentOfSpot(99), ratio=0.1),
)
LABELS = ["put_1", "put_2", "call_1", "call_2", "put_3"]


def wandering(account: str) -> Replay:
    rng = np.random.default_rng(17)
    days = pd.bdate_range("2014-05-05", "2017-06-30", name="date")
    count = len(days)
    frame = pd.DataFrame(
        {
            "close": 100 * np.exp(np.cumsum(rng.normal(0.0002, 0.011, count))),
            "vol": 0.14 + 0.1 * np.abs(np.sin(np.arange(count) / 80)),
            "rate": 0.02 + 0.02 * np.sin(np.arange(count) / 200),
            "dividend": np.where(np.arange(count) % 63 == 20, 0.55, 0.0),
        },
        index=days,
    )
    costs = Costs(half_spread_percent=2.0, commission=2.0, settlement_fee=5.0, stock_bps=10.0)
    return replay(Market.from_frame(frame), Overlay(legs=LEGS, account=account, costs=costs))


@pytest.fixture(scope="module", params=["resize", "cash"])
def found(request: pytest.FixtureRequest) -> Replay:
    return wandering(request.param)


def test_parts_sum_to_the_excess_return_of_every_day(found: Replay) -> None:
    parts = attribute(found).parts()
    assert list(parts) == [
        "passive_equity", "equity_timing", *(f"volatility_{label}" for label in LABELS), "cost", "excess_return",
    ]  # fmt: skip
    whole = parts.pop("excess_return")
    returns = pd.Series(found.wealth).pct_change().to_numpy()[1:]
    np.testing.assert_allclose(whole, returns - found.rate_return[1:], rtol=0.0, atol=1e-15)
    np.testing.assert_allclose(sum(parts.values()), whole, rtol=0.0, atol=TIGHT)


def test_each_part_by_its_definition(found: Replay) -> None:
    parts, daily = attribute(found).parts(), found.to_frame()
    e = daily["hold"].pct_change().to_numpy()[1:] - found.rate_return[1:]
    delta = daily["delta"].to_numpy()[:-1]
    mean = delta.mean()
    np.testing.assert_allclose(parts["passive_equity"], mean * e, rtol=0.0, atol=TIGHT)
    np.testing.assert_allclose(parts["equity_timing"], (delta - mean) * e, rtol=0.0, atol=TIGHT)
    # no bill on a day without a trade, one on each day with
    traded = np.zeros(len(found), dtype=bool)
    for leg in found.legs:
        traded[leg.opened] = True
    traded[1] |= traded[0]  # the first day's is charged to the first return
    assert ((parts["cost"] < 0) == traded[1:]).all()
    # what is left of each leg when cash on its value and stock for its delta are taken off, day by day
    for row, label in enumerate(LABELS):
        leg, part = found.legs[row], parts[f"volatility_{label}"]
        ends = dict(zip(leg.opened[1:].tolist(), leg.close_value[:-1].tolist(), strict=True))
        for day in range(1, len(found), 7):
            held = found.units[day - 1] * leg.signed_ratio / found.wealth[day - 1]
            mark = leg.daily_mark[day - 1]
            gain = ends.get(day, leg.daily_mark[day]) - mark - found.rate_return[day] * mark
            hedge = leg.daily_delta[day - 1] * found.spot[day - 1] * e[day - 1]
            assert part[day - 1] == pytest.approx(held * (gain - hedge), abs=TIGHT)


def test_the_first_days_costs(found: Replay) -> None:
    rolls = found.rolls_frame()
    first = rolls[rolls["opened"] == found.dates[0].astype("datetime64[ns]")]
    paid = float((first["units"] * first["ratio"] * first["cost"]).sum())
    if found.overlay.account == "resize":  # and stock traded, at 10 hundredths of a percent of its value
        paid += 0.001 * found.spot[0] * abs(found.shares[0] - 1 / found.spot[0])
    assert attribute(found).cost[0] == pytest.approx(-paid * (1 + found.rate_return[1]), abs=1e-15)


def test_annual_figures_add_up(found: Replay) -> None:
    made = attribute(found)
    annual = made.annual()
    assert annual["excess_return"] == pytest.approx(np.mean(made.excess) * 252, rel=1e-14)
    assert sum(annual.values()) == pytest.approx(2 * annual["excess_return"], abs=1e-12)
    # the timing part is an average of deltas about their mean with the market: a covariance
    delta, e = found.delta[:-1], attribute(found).passive_equity / np.mean(found.delta[:-1])
    assert annual["equity_timing"] == pytest.approx(252 * np.cov(delta, e, ddof=0)[0, 1], abs=1e-12)


def test_risk_shares_are_shares_of_the_covariance(found: Replay) -> None:
    made = attribute(found)
    shares, parts = made.risk_shares(), made.parts()
    assert list(shares) == list(parts)
    whole = parts["excess_return"]
    assert shares.pop("excess_return") == pytest.approx(1.0, rel=1e-13)
    assert sum(shares.values()) == pytest.approx(1.0, abs=TIGHT)
    for name, share in shares.items():
        table = np.cov(parts[name], whole, ddof=1)
        assert share == pytest.approx(table[0, 1] / table[1, 1], abs=TIGHT)
        # the slope of the part on the whole
        assert share == pytest.approx(sm.OLS(parts[name], sm.add_constant(whole)).fit().params[1], abs=1e-10)
    half = made.risk_share(made.volatility[:2].sum(axis=0))
    assert half == pytest.approx(shares["volatility_put_1"] + shares["volatility_put_2"], abs=TIGHT)


def test_nothing_varies() -> None:
    days = pd.bdate_range("2021-01-11", "2021-05-28")
    market = Market.from_frame(pd.DataFrame({"close": 100.0, "vol": 0.20}, index=days))
    leg = Leg(position="long", right="put", roll="month", strike=PercentOfSpot(95), ratio=0.0)
    made = attribute(replay(market, Overlay(legs=(leg,))))
    assert all(np.isnan(share) for share in made.risk_shares().values())
    assert set(made.annual().values()) == {0.0}
