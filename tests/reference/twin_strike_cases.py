"""Replays of every strike rule, alone and wrapped, that engine and twin are compared on."""

from __future__ import annotations

from datetime import date

from backtest import (
    FLAT,
    Adjusted,
    Delta,
    Deviations,
    Financed,
    Gate,
    Mirrored,
    PercentOfForward,
    PercentOfSpot,
    PremiumPercent,
    SignalOn,
    Volatility,
)

from .twin_cases import SWAP, call, put
from .twin_language_markets import CRASH, DEAR, RISE, SP500, SP500_CRISIS, case

FINANCED = Financed(1.0)

STRIKE_RULES = [
    case(
        "deviations, three tenors",
        put(strike=Deviations(1.0), term_months=6),
        call(strike=Deviations(1.5)),
        market="demo tenors",
    ),
    case(
        "deviations on the other side of the forward, as a variance swap",
        put(strike=Deviations(-0.25), roll="half"),
        call(strike=Deviations(-0.5), ratio=0.5),
        volatility=SWAP,
        crossed=True,
    ),
    case("delta put and call", put(strike=Delta(0.25)), call(strike=Delta(0.15)), costs=DEAR),
    case(
        "delta on the S&P 500, twelve months held for three",
        put(strike=Delta(0.3), term_months=12),
        call(strike=Delta(0.2)),
        account="cash",
        **SP500,
    ),
    case(
        "delta of a flat smile",
        put(strike=Delta(0.4)),
        call("long", strike=Delta(0.05)),
        volatility=Volatility(smile=FLAT),
    ),
    case(
        "delta without a solution: the discount of the dividends alone is lower",
        put("short", strike=Adjusted(rule=Delta(0.995), not_above=106.0), roll="year", ratio=0.2),
        call("long", strike=Delta(0.996), roll="half", ratio=0.2),
        dividend_yield=0.03,
        crossed=True,
    ),
    case("premium percent put and call", put(strike=PremiumPercent(2.0)), call(strike=PremiumPercent(0.4)), costs=DEAR),
    case(
        "premium percent, a tiny one, and one that ten years of dividends put out of reach",
        put(strike=PremiumPercent(0.001)),
        call("long", strike=PremiumPercent(90.0), roll="half", term_months=120, ratio=0.1),
        window=CRASH,
        dividend_yield=0.03,
    ),
    case(
        "premium percent of the S&P 500",
        put(strike=PremiumPercent(1.5)),
        call(strike=PremiumPercent(0.5)),
        **SP500_CRISIS,
    ),
    case("financed: month call on quarter put, with costs", put(), call(strike=FINANCED), costs=DEAR, crossed=True),
    case(
        "financed in the cash account on the S&P 500",
        put(),
        call(strike=FINANCED),
        account="cash",
        crossed=True,
        **SP500,
    ),
    case(
        "financed by half, ratios of both legs",
        put(roll="half", term_months=12, ratio=0.75, strike=Delta(0.3)),
        call(roll="quarter", strike=Financed(0.5), ratio=0.5),
        volatility=SWAP,
    ),
    case(
        "financed: a put spread",
        put(),
        put("short", strike=PercentOfSpot(85)),
        call(strike=Financed(1.0, legs=(1, 2))),
        crossed=True,
    ),
    case(
        "financed: a sold put pays for the put above it",
        put("short", strike=Financed(0.6, legs=(2,)), roll="month"),
        put(strike=PercentOfSpot(97)),
        window=RISE,
    ),
    case(
        "financed cannot be: the floor binds, or there is no root at all",
        put(strike=PercentOfSpot(100), roll="half", term_months=12),
        call(strike=Adjusted(rule=Financed(1.0), not_below=104.0)),
        call(strike=Adjusted(rule=Financed(10.0), not_below=112.0), ratio=0.05),
    ),
    case("mirrored call", put(strike=PercentOfSpot(93)), call(strike=Mirrored(1), roll="quarter")),
    case(
        "mirrored month call of a quarter put on the S&P 500, and a put of that call",
        put("short", strike=Mirrored(2), roll="month", ratio=0.5),
        call(strike=Mirrored(3)),
        put(strike=Delta(0.2)),
        **SP500,
    ),
]

WRAPPERS = [
    case(
        "ratchet with strike step",
        put(strike=Adjusted(rule=PercentOfSpot(92), ratchet=True, strike_step=25.0), roll="month"),
        call(strike=Adjusted(rule=PercentOfSpot(107), strike_step=50.0)),
        window=RISE,
    ),
    case(
        "ratchet down a fall: let go once above spot",
        put(strike=Adjusted(rule=Delta(0.3), ratchet=True), roll="month", term_months=3),
        call(strike=Adjusted(rule=Delta(0.2), ratchet=True)),
    ),
    case(
        "kept until moved",
        put(strike=Adjusted(rule=PercentOfSpot(95), kept_until_moved=4.0), roll="month"),
        call(strike=Adjusted(rule=Deviations(1.2), kept_until_moved=2.5), roll="month", term_months=2),
        window=CRASH,
    ),
    case(
        "kept until moved under a ratchet, bounds and a step, decided a day before",
        put(
            strike=Adjusted(
                rule=Delta(0.3), kept_until_moved=5.0, ratchet=True, not_below=88.0, not_above=97.0, strike_step=10.0
            ),
            roll="month",
        ),
        decide_lag=1,
    ),
    case(
        "bounds of both kinds",
        put(strike=Adjusted(rule=Deviations(1.0), not_below=90.0, not_above=95.0)),
        call(strike=Adjusted(rule=PremiumPercent(0.5), not_below=104.0, not_above=108.0)),
    ),
    case(
        "a financed call not below the put",
        put(strike=PercentOfSpot(100)),
        call(strike=Adjusted(rule=Financed(1.0), not_below_leg=1, not_above=120.0)),
        costs=DEAR,
    ),
    case(
        "a listed call not below the put",
        put(strike=PercentOfSpot(100)),
        call(strike=Adjusted(rule=PercentOfSpot(101), not_below_leg=1, strike_step=50.0)),
    ),
    case(
        "strike steps as wide as the band",
        put(strike=Adjusted(rule=PercentOfSpot(100), strike_step=300.0), roll="month"),
        call(strike=Adjusted(rule=PercentOfForward(100), strike_step=0.5)),
        crossed=True,
    ),
    case(
        "strikes half-way between listed ones, away from spot",
        put(strike=Adjusted(rule=PercentOfSpot(95), strike_step=1.0), roll="month"),
        call(strike=Adjusted(rule=PercentOfSpot(105), strike_step=5.0)),
        put("short", strike=Adjusted(rule=PercentOfSpot(105), strike_step=1.0), roll="month"),
        market="demo in tens",
        window=RISE,
    ),
    case(
        "no solution, and a ratchet that has a strike to offer",
        put(strike=PercentOfSpot(100), gate=Gate(condition=SignalOn(), when_off="close")),
        put("short", roll="month", strike=Adjusted(rule=Financed(0.5), ratchet=True)),
        window=RISE,
    ),
    case(
        "no solution, and a strike that is kept",
        put(gate=Gate(condition=SignalOn(), when_off="close")),
        call(strike=Adjusted(rule=FINANCED, kept_until_moved=8.0)),
        crossed=True,
    ),
]

DECIDED_BEFORE = [
    case(
        "decided a day before: on a file that begins on a roll date, which has no day before",
        put(strike=Delta(0.25), close_before=2),
        call("long", strike=Mirrored(1)),
        put("short", roll="month", strike=Adjusted(rule=Financed(0.5, legs=(1,)), strike_step=5.0)),
        market="sp500 index vol from 2014-03-19",
        window=(date(2014, 3, 1), date(2016, 9, 2)),
        decide_lag=1,
    ),
    case(
        "decided a day before: begun between two rolls",
        put(strike=Adjusted(rule=Delta(0.25), ratchet=True)),
        call(strike=FINANCED, roll="days", every=10, term_days=15),
        inception=date(2007, 1, 3),
        decide_lag=1,
        crossed=True,
    ),
    case(
        "decided a day before: percent of spot and of forward",
        put(),
        call(strike=PercentOfForward(104)),
        decide_lag=1,
        costs=DEAR,
    ),
    case(
        "decided a day before: delta and financed",
        put(strike=Delta(0.25)),
        call(strike=FINANCED),
        decide_lag=1,
        crossed=True,
    ),
    case(
        "decided a day before: mirrored, premium percent, cash, S&P 500",
        put(strike=PremiumPercent(1.5), roll="month"),
        call(strike=Mirrored(1), roll="quarter"),
        account="cash",
        decide_lag=1,
        **SP500,
    ),
]
