"""Overlays in plain words: the names of legs, and the reading of a whole file.

Rung: identity (words written out for legs and files of a few lines).
"""

# ruff: noqa: E501  a sentence stays as it is read

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import pytest
from hypothesis import given

from backtest import (
    Adjusted,
    Delta,
    Deviations,
    Early,
    Financed,
    Gate,
    Leg,
    Mirrored,
    OverlayError,
    PercentOfForward,
    PercentOfSpot,
    PremiumPercent,
    PriceMean,
    SignalOn,
    VolPercentile,
)
from studies.leg_words import describe_legs, leg_name, leg_sentence
from studies.overlay_files import OverlayFile, parse_overlay
from studies.overlay_words import overlay_lines

from .overlay_strategies import OVERLAY_FILES


def leg(position: Any, right: Any, strike: Any, **more: Any) -> Leg:
    return Leg(position=position, right=right, strike=strike, **more)


def put(strike: Any = None, **more: Any) -> Leg:
    return leg("long", "put", strike or PercentOfSpot(95), **more)


def call(strike: Any = None, **more: Any) -> Leg:
    return leg("short", "call", strike or PercentOfSpot(110), **({"roll": "month"} | more))


# ---------------------------------------------------------------- names


def test_names_from_legs() -> None:
    """As they were before the language grew: results and manifests have them."""
    legs = (
        put(PercentOfForward(97.5), roll="half", ratio=0.5),
        leg("short", "put", PercentOfSpot(80), roll="year"),
        leg("long", "call", PercentOfSpot(120), roll="month"),
    )
    assert describe_legs(legs) == ("0.5 x half-yearly 97.5 of forward put, yearly 80 sold put, monthly 120 bought call")
    # neither of these was ever part of a name
    assert describe_legs((put(term_months=12, phase=1, shift_days=3), call())) == "quarterly 95 put, monthly 110 call"


NAMES: list[tuple[Leg, str]] = [
    (put(Delta(0.25), roll="month"), "monthly 25-delta put"),
    (put(Delta(0.125)), "quarterly 12.5-delta put"),
    (put(Delta(0.07)), "quarterly 7-delta put"),
    (put(Deviations(1.5)), "quarterly 1.5-deviation put"),
    (call(PremiumPercent(0.5)), "monthly call for 0.5% of spot"),
    (call(Financed(1)), "monthly call financing leg 1"),
    (call(Financed(0.5, legs=(1, 2))), "monthly call financing 50% of legs 1 and 2"),
    (call(Financed(1, legs=(1, 2, 4))), "monthly call financing legs 1, 2 and 4"),
    (call(Mirrored(1)), "monthly call mirroring leg 1"),
    (put(ladder=3), "quarterly 95 put in 3 tranches"),
    (put(ladder=3, stagger=False), "quarterly 95 put in 3 tranches at once"),
    (put(stagger=False), "quarterly 95 put"),
    (call(Financed(1), ladder=2, ratio=0.5), "0.5 x monthly call financing leg 1 in 2 tranches"),
    (put(roll="days", every=21), "21-day 95 put"),
    (leg("short", "put", Delta(0.1), roll="days", every=5), "5-day 10-delta sold put"),
    (put(Adjusted(rule=Delta(0.25), ratchet=True)), "quarterly 25-delta put (ratchet)"),
    (
        put(
            Adjusted(rule=Delta(0.25), kept_until_moved=5, not_below=80, not_above=99, not_below_leg=2, strike_step=2.5)
        ),
        "quarterly 25-delta put (kept until spot has moved 5%; not below 80; not above 99; not below leg 2; in steps of "
        "2.5)",
    ),
    (put(roll_day="last trading day"), "quarterly 95 put (last trading day of the month)"),
    (put(close_before=5), "quarterly 95 put (rolled 5 trading days early)"),
    (put(close_before=1), "quarterly 95 put (rolled 1 trading day early)"),
    (put(settlement="open"), "quarterly 95 put (settled at the open)"),
    (
        put(early=Early(delta_below=0.1, value_above=3, value_below=0.2)),
        "quarterly 95 put (replaced under a delta of 0.1 after a rise or over 3 times its premium or under 20% of its "
        "premium)",
    ),
    (put(gate=Gate(condition=SignalOn())), "quarterly 95 put (while the signal is on)"),
    (
        put(gate=Gate(condition=PriceMean(window=200, above=False))),
        "quarterly 95 put (while the price is below its 200-day mean)",
    ),
    (
        put(gate=Gate(condition=VolPercentile(percent=80, above=True))),
        "quarterly 95 put (while vol is above percentile 80 of its last 756 days)",
    ),
    (put(reference=True, ladder=3), "quarterly 95 put in 3 tranches (not held)"),
]


@pytest.mark.parametrize(("named", "name"), NAMES, ids=[name for _, name in NAMES])
def test_names_of_the_whole_language(named: Leg, name: str) -> None:
    assert leg_name(named) == name
    assert describe_legs((put(), named)) == f"quarterly 95 put, {name}"


# ---------------------------------------------------------------- sentences

SENTENCES: list[tuple[Leg, str]] = [
    (put(), "buys a put, 1 per share; every quarter on the third Friday, 3 months to expiry; struck at 95% of spot"),
    (
        call(PercentOfForward(105), roll_day="last trading day", ratio=0.5),
        "sells a call, 0.5 per share; every month on the last trading day, 1 month to expiry; struck at 105% of the "
        "forward",
    ),
    (
        put(Deviations(1.5), roll="year", phase=1, shift_days=-1, close_before=5),
        "buys a put, 1 per share; every year on the third Friday, 1 month later in the year, 1 trading day earlier, 12 "
        "months to expiry; replaced 5 trading days before each of these dates; struck 1.5 at-the-money deviations below "
        "the forward",
    ),
    (
        call(Deviations(1), roll="days", every=21, phase=2, shift_days=3, term_days=42),
        "sells a call, 1 per share; every 21 trading days, from day 3 of the prices on, 3 trading days later, 42 trading "
        "days to expiry; struck 1 at-the-money deviations above the forward",
    ),
    (
        put(Deviations(-1)),
        "buys a put, 1 per share; every quarter on the third Friday, 3 months to expiry; struck 1 at-the-money "
        "deviations above the forward",
    ),
    (
        put(
            Adjusted(rule=Delta(0.25), kept_until_moved=5, ratchet=True, not_below=80, not_above=99, not_below_leg=2,
                     strike_step=5)
        ),
        "buys a put, 1 per share; every quarter on the third Friday, 3 months to expiry; struck at a delta of 0.25, kept "
        "until spot has moved 5% since it was set, never below the strike it replaces while that one is below spot, not "
        "below 80% of spot, not above 99% of spot, not below the strike of leg 2, rounded to steps of 5",
    ),
    (
        call(Adjusted(rule=PremiumPercent(0.5), ratchet=True), ladder=3, stagger=False, settlement="open"),
        "sells a call, 1 per share; every month on the third Friday, 1 month to expiry; struck where its premium is 0.5% "
        "of spot, never above the strike it replaces while that one is above spot; carried in 3 tranches that roll all "
        "at once; settled against the open of the day of expiry",
    ),
    (
        call(Financed(0.5), ladder=2),
        "sells a call, 1 per share; every month on the third Friday, 1 month to expiry; struck where it pays 50% of what "
        "leg 1 costs; carried in 2 tranches that roll one after the other",
    ),
    (
        call(Financed(1, legs=(1, 2))),
        "sells a call, 1 per share; every month on the third Friday, 1 month to expiry; struck where it pays 100% of "
        "what legs 1 and 2 cost",
    ),
    (
        put(Mirrored(2), early=Early(delta_below=0.1, value_above=3)),
        "buys a put, 1 per share; every quarter on the third Friday, 3 months to expiry; struck as far from the forward "
        "as leg 2, on the other side; replaced early, to the same expiry, under a delta of 0.1 after a rise or over 3 "
        "times its premium, with 10 calendar days or more left",
    ),
    (
        put(reference=True, gate=Gate(condition=SignalOn(), when_off="close", when_on="at once")),
        "a put that is never held and only lends its strike and cost; every quarter on the third Friday, 3 months to "
        "expiry; struck at 95% of spot; active while the signal is on: what is live when that ends is closed at once, it "
        "opens again at once",
    ),
]  # fmt: skip


@pytest.mark.parametrize(("said", "sentence"), SENTENCES, ids=[str(number) for number in range(len(SENTENCES))])
def test_sentences(said: Leg, sentence: str) -> None:
    assert leg_sentence(said) == sentence


def test_a_rule_that_no_file_can_name_has_no_words() -> None:
    @dataclass(frozen=True)
    class Own:
        def strikes(self, state: Any) -> Any:
            return state.spot

    for words in (leg_name, leg_sentence):
        with pytest.raises(OverlayError, match="has no words"):
            words(put(Own()))


# ---------------------------------------------------------------- whole files

LEG = '[[leg]]\nposition = "long"\nright = "put"\nstrike = { percent_of_spot = 95 }\n'
READS = "leg 1: buys a put, 1 per share; every quarter on the third Friday, 3 months to expiry; struck at 95% of spot; costs "


def test_the_reading_of_a_plain_file() -> None:
    assert overlay_lines(parse_overlay(LEG)) == [
        f"{READS}a half-spread of 0.5 vol points",
        "account: all wealth into whole packages at every roll of the longest leg",
        "decided: at the close at which it is traded",
        "volatility: smile index on implied vol, or realised where there is none, read as at-the-money vol",
    ]


def test_the_reading_of_a_file_that_says_everything() -> None:
    text = """
account = "cash"
decide_lag = 1
portfolio = 2_500_000
crossed = true
gate = { price_below_mean = 200 }
[[leg]]
position = "long"
right = "put"
strike = { percent_of_spot = 95 }
[[leg]]
position = "long"
right = "put"
strike = { percent_of_spot = 95 }
gate = { signal = true }
[costs]
half_spread_percent = 2
half_spread_min = 0.05
commission = 1.25
multiplier = 10
settlement_fee = 3
stock_bps = 4
borrow_spread = 1.5
[volatility]
smile = { rho = -0.5, eta = 1, gamma = 0.25 }
source = "realised"
window = 21
markup = 1.2
put_shift = 2
[counterparty]
recovery = 0.25
default = ["2008-10-10", "2008-09-15"]
[sale]
gain_percent = 60
tax_percent = 25
cost_bps = 5
"""
    cost = (
        "a half-spread of the largest of 0.5 vol points, 2% of mid, 0.05 in price; 1.25 a contract besides; 3 a contract "
        "when exercised"
    )
    runs_out = "what is live when that ends runs out, it opens again at its next roll"
    assert overlay_lines(parse_overlay(text)) == [
        f"{READS}{cost}",
        f"{READS.replace('leg 1', 'leg 2').removesuffix('costs ')}active while the signal is on: {runs_out}; costs {cost}",
        f"gate of leg 1: active while the price is below its 200-day mean: {runs_out}",
        "account: fixed shares, premiums and settlements through a cash account; 2,500,000 at inception, options in "
        "whole contracts of 10 shares; stock traded costs 4 basis points; cash below zero pays 1.5% a year over the rate",
        "decided: at the close before the trade",
        "crossed: a sold call may lie under a bought put",
        "volatility: smile of one's own (rho -0.5, eta 1, gamma 0.25) on realised vol of 21 days times 1.2; puts +2 vol "
        "points",
        "counterparty: defaults on 2008-09-15, 2008-10-10 and pays 25%",
        "sale instead: 60% of the shares' value is gain, taxed at 25%; selling costs 5 basis points",
    ]


@pytest.mark.parametrize(
    ("lines", "says"),
    [
        ("[counterparty]", "counterparty: defaults on the day on which the bought puts are worth most and pays 40%"),
        ('[volatility]\nsource = "implied"\nquote = "variance swap"', "volatility: smile index on implied vol, read as a variance-swap quote"),
        ("[volatility]\nsmile = \"flat\"\ncall_shift = -1.5", "volatility: smile flat on implied vol, or realised where there is none, read as at-the-money vol; calls -1.5 vol points"),
        ('[volatility]\nsource = "surface"\nsmile = "flat"', "volatility: the quoted surface, with its own smile"),
        ('[volatility]\nsource = "realised"\nestimator = "ewma"\nhalf_life = 11\nmarkup_points = 1', "volatility: smile index on realised vol of 63 days (ewma, half-life 11 days) +1 vol points"),
        ('[volatility]\nsource = "realised"\nestimator = "parkinson"\nmarkup = 1.1', "volatility: smile index on realised vol of 63 days (parkinson) times 1.1"),
        ('[volatility]\nterm_structure = "mean reverting"', "volatility: smile index on implied vol, or realised where there is none, read as at-the-money vol; longer options return to the mean vol at 2 a year"),
    ],
)  # fmt: skip
def test_single_lines(lines: str, says: str) -> None:
    assert says in overlay_lines(parse_overlay(LEG + lines))


def test_a_gate_for_nobody() -> None:
    said = parse_overlay(f"gate = {{ signal = true }}\n{LEG}gate = {{ price_above_mean = 50 }}\n")
    assert overlay_lines(said)[1].startswith("gate of no leg, as each has its own: ")
    both = parse_overlay(f"gate = {{ signal = true }}\n{LEG}{LEG}")
    assert overlay_lines(both)[2].startswith("gate of legs 1 and 2: active while the signal is on")


@given(said=OVERLAY_FILES)
def test_everything_has_words(said: OverlayFile) -> None:
    lines = overlay_lines(said)
    assert len(lines) >= len(said.overlay.legs) + 3
    assert all("\n" not in line and "None" not in line and "  " not in line for line in lines)
    assert describe_legs(said.overlay.legs)
