"""Replays of cycles, ladders, early rules, gates and accounts that engine and twin are compared on.

Those of the strike rules are in ``twin_strike_cases.py``. Windows are of two to four years, chosen so that what is
under test happens in them (``test_twin_language.py`` counts it).
"""

from __future__ import annotations

from datetime import date

from backtest import (
    Adjusted,
    Costs,
    Delta,
    Deviations,
    Early,
    Financed,
    Gate,
    Mirrored,
    PercentOfSpot,
    PriceMean,
    SignalOn,
    VolPercentile,
)

from .twin_cases import call, put
from .twin_language_markets import CRASH, DEAR, RISE, SP500, SP500_CRISIS, case
from .twin_strike_cases import DECIDED_BEFORE, FINANCED, STRIKE_RULES, WRAPPERS

CYCLES = [
    case(
        "days: put of 63 every 21, call every 5", put(roll="days", every=21, term_days=63), call(roll="days", every=5)
    ),
    case(
        "days with phase and shift, beside a quarter",
        put(roll="days", every=10, term_days=126, phase=7, shift_days=4, strike=Delta(0.2)),
        call(roll="quarter", strike=Financed(0.5)),
        account="cash",
        **SP500,
    ),
    case(
        "days that end beyond the file",
        put(roll="days", every=63, term_days=252),
        call(roll="days", every=21, shift_days=-5, term_days=42),
        market="sp500 to 2008-03-20",
        window=(date(2006, 1, 3), date(2008, 3, 20)),
        rate=0.03,
    ),
    case(
        "last trading day",
        put(roll_day="last trading day"),
        call(roll_day="last trading day", strike=FINANCED),
        crossed=True,
    ),
    case(
        "last trading day with a third Friday, on a file that ends within a month",
        put(roll_day="last trading day", term_months=6, phase=1),
        call(),
        market="sp500 to 2008-03-20",
        window=(date(2006, 1, 3), date(2008, 3, 20)),
        rate=0.03,
    ),
    case(
        "last trading day shifted back and closed before",
        put(roll_day="last trading day", shift_days=-3, close_before=2),
        call(roll_day="last trading day", shift_days=6, close_before=1),
    ),
    case("shifted third Fridays", put(shift_days=17), call(shift_days=-4, term_months=2), window=CRASH),
    case("close before: five days, and one", put(close_before=5), call(close_before=1), costs=DEAR),
    case(
        "close before, longer terms, cash",
        put(close_before=5, term_months=6, strike=Delta(0.3)),
        call(roll="days", every=15, term_days=30, close_before=4),
        account="cash",
        **SP500,
    ),
    case("morning settlement", put(settlement="open"), call(settlement="open"), costs=Costs(settlement_fee=25.0)),
    case(
        "morning settlement of the put alone, S&P 500, cash",
        put(settlement="open", strike=PercentOfSpot(100), roll="month"),
        call(strike=PercentOfSpot(102)),
        account="cash",
        **SP500,
    ),
    case(
        "morning settlement with a term of two rolls and days",
        put(settlement="open", roll="days", every=20, term_days=40, strike=PercentOfSpot(103)),
        call(settlement="open", roll="days", every=20, strike=PercentOfSpot(98)),
        crossed=True,
    ),
]

LADDERS = [
    case("ladder of three, resize", put(ladder=3), call(), costs=DEAR),
    case("ladder of three, cash", put(ladder=3, term_months=6), call(ladder=3), account="cash"),
    case("ladder of two months' calls, half-way between", put(), call(ladder=2, shift_days=1)),
    case("ladder of four quarters, by trading days", put(ladder=4, strike=Delta(0.25)), window=CRASH),
    case("ladder not staggered", put(ladder=3, stagger=False), call(ladder=2, stagger=False, close_before=2)),
    case(
        "ladder of days",
        put(roll="days", every=30, term_days=60, ladder=4, phase=11),
        call(roll="days", every=7, ladder=3),
    ),
    case(
        "ladders linked rung by rung",
        put(ladder=3, strike=PercentOfSpot(94)),
        call(ladder=3, roll="quarter", strike=Adjusted(rule=Financed(1.0), not_below_leg=1, ratchet=True)),
        crossed=True,
    ),
    case(
        "ladder of calls that finance one put",
        put(),
        call(ladder=2, strike=FINANCED),
        crossed=True,
        **SP500,
    ),
    case(
        "ladder of puts in a half-year with a ratchet",
        put(roll="half", ladder=6, strike=Adjusted(rule=Delta(0.3), ratchet=True)),
        **SP500_CRISIS,
    ),
]

EARLY = [
    case(
        "early: delta put that has risen out of reach",
        put(roll="half", strike=Delta(0.3), early=Early(delta_below=0.1)),
        call(),
        window=RISE,
        costs=DEAR,
    ),
    case(
        "early: take profit",
        put(roll="half", strike=PercentOfSpot(95), early=Early(value_above=2.5)),
        call(strike=PercentOfSpot(106)),
    ),
    case(
        "early: a sold call that has lost four fifths",
        put(),
        call(roll="quarter", strike=Delta(0.25), early=Early(value_below=0.2, days_left=20)),
    ),
    case(
        "early: all of them, in both legs, on the S&P 500",
        put(roll="half", strike=Delta(0.3), early=Early(delta_below=0.12, value_above=2.5, value_below=0.15)),
        call(roll="quarter", strike=FINANCED, early=Early(value_above=2.0, value_below=0.3, days_left=5)),
        crossed=True,
        account="cash",
        **SP500_CRISIS,
    ),
    case(
        "early: decided a day before",
        put(strike=Delta(0.25), early=Early(delta_below=0.1, value_above=2.0)),
        call(strike=FINANCED, early=Early(value_below=0.25)),
        decide_lag=1,
        crossed=True,
    ),
    case(
        "early: with a ladder, days and a close before",
        put(
            ladder=3,
            roll="days",
            every=63,
            term_days=90,
            close_before=3,
            early=Early(value_above=2.5, delta_below=0.08),
        ),
        call(),
        window=CRASH,
    ),
]

ON_A_DAY_OF_FALL = Gate(condition=PriceMean(window=2, above=False), when_on="at once")

GATES = [
    case("gate: signal, run out, next roll", put(gate=Gate(condition=SignalOn())), call()),
    case(
        "gate: signal, close, at once",
        put(gate=Gate(condition=SignalOn(), when_off="close", when_on="at once")),
        call(),
        costs=DEAR,
    ),
    case(
        "gate: signal, run out, at once",
        put(),
        call(gate=Gate(condition=SignalOn(), when_on="at once")),
        account="cash",
    ),
    case("gate: signal, close, next roll", put(), call(gate=Gate(condition=SignalOn(), when_off="close")), **SP500),
    case(
        "gate: vol above its percentile",
        put(
            gate=Gate(
                condition=VolPercentile(percent=60.0, above=True, window=252), when_off="close", when_on="at once"
            ),
            roll="month",
        ),
        call(),
        market="demo tenors",
    ),
    case(
        "gate: vol below its percentile, put financed by a call that is not there",
        put(),
        call("short", gate=Gate(condition=VolPercentile(percent=70.0, above=False)), strike=FINANCED),
        crossed=True,
    ),
    case(
        "gate: price below its mean, on all legs, one with its own",
        put(strike=Delta(0.3)),
        call(strike=Adjusted(rule=FINANCED, not_above=115.0)),
        put(
            "short", strike=PercentOfSpot(80), gate=Gate(condition=PriceMean(window=60, above=True), when_on="at once")
        ),
        gate=Gate(condition=PriceMean(window=200, above=False), when_off="close", when_on="at once"),
        crossed=True,
    ),
    case(
        "gate: not on before its window is full or its first signal has come",
        put(gate=Gate(condition=PriceMean(window=100, above=True))),
        put("short", strike=PercentOfSpot(85), gate=Gate(condition=SignalOn(), when_on="at once")),
        call(gate=Gate(condition=VolPercentile(percent=50.0, above=True, window=150), when_on="at once")),
        market="sp500 index vol",
        window=(date(2014, 1, 3), date(2016, 12, 30)),
    ),
    case(
        "gate: decided a day before, with a ladder and an early rule",
        put(ladder=3, strike=Delta(0.3), early=Early(value_above=2.0, delta_below=0.1)),
        call(strike=Adjusted(rule=Delta(0.2), ratchet=True)),
        gate=Gate(condition=SignalOn(), when_off="close", when_on="at once"),
        decide_lag=1,
    ),
    case(
        "gate: mirrored, financed and bounded by legs that are not there",
        put(strike=Adjusted(rule=Delta(0.3), strike_step=5.0)),
        put(roll="month", strike=PercentOfSpot(90)),
        call(strike=Mirrored(1), roll="quarter", gate=Gate(condition=PriceMean(window=10, above=True))),
        call(strike=Adjusted(rule=Financed(0.7, legs=(1, 2)), not_below_leg=1, not_above=125.0), gate=ON_A_DAY_OF_FALL),
        gate=Gate(condition=SignalOn(), when_off="close", when_on="at once"),
        crossed=True,
    ),
    case(
        "gate: one that never comes on, and a call that it leaves nothing to finance, decided a day before",
        put(gate=Gate(condition=PriceMean(window=2520, above=True))),
        call(strike=Adjusted(rule=FINANCED, not_above=110.0)),
        window=RISE,
        decide_lag=1,
    ),
    case(
        "gate: run out with an early rule",
        put(
            roll="half",
            strike=Delta(0.3),
            early=Early(value_above=1.5, value_below=0.4),
            gate=Gate(condition=SignalOn()),
        ),
        call(),
    ),
]

ACCOUNTS = [
    case("whole contracts, resize", put(), call(ratio=0.5), portfolio=1_000_000.0),
    case("whole contracts, cash", put(), call(ratio=0.5), portfolio=1_000_000.0, account="cash"),
    case(
        "whole contracts of ten, two thirds of a put, an inner roll and a gate",
        put(ratio=2 / 3, strike=Delta(0.3)),
        call(
            ratio=0.8,
            gate=Gate(condition=SignalOn(), when_off="close", when_on="at once"),
            early=Early(value_below=0.2),
        ),
        portfolio=50_000.0,
        costs=Costs(multiplier=10.0, commission=2.0, settlement_fee=3.0, stock_bps=2.0),
    ),
    case(
        "whole contracts of a ladder, some rungs too small for one",
        put(ladder=4, term_months=6),
        call(ladder=2, ratio=0.4),
        portfolio=700_000.0,
        costs=DEAR,
    ),
    case(
        "whole contracts, reference put, cash, S&P 500",
        put(reference=True),
        call(strike=FINANCED),
        portfolio=333_333.0,
        account="cash",
        **SP500,
    ),
    case(
        "borrowing below zero, cash account",
        put(strike=PercentOfSpot(100), roll="half"),
        call(strike=PercentOfSpot(103)),
        account="cash",
        costs=Costs(borrow_spread=2.5),
        window=RISE,
    ),
    case(
        "borrowing below zero between resizes, whole contracts",
        put(roll="half", strike=PercentOfSpot(97)),
        put(roll="month", strike=PercentOfSpot(99), ratio=0.5),
        call(strike=PercentOfSpot(104), roll="quarter"),
        costs=Costs(borrow_spread=4.0),
        portfolio=900_000.0,
    ),
    case("borrowing below zero between resizes", put(roll="half"), put(roll="month"), costs=Costs(borrow_spread=3.0)),
    case("a reference put and the call it finances", put(reference=True), call(strike=FINANCED), costs=DEAR),
    case(
        "a reference call under gate and lag, the put alone",
        put(strike=Adjusted(rule=Mirrored(2), not_below=85.0)),
        call(roll="year", strike=Deviations(1.0), reference=True),
        gate=Gate(condition=PriceMean(window=100, above=True), when_on="at once"),
        decide_lag=1,
    ),
]

CASES = STRIKE_RULES + WRAPPERS + DECIDED_BEFORE + CYCLES + LADDERS + EARLY + GATES + ACCOUNTS
