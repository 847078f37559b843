"""The legs of overlay files: what strikes, gates and early rules in them mean.

Rung: identity (lines of a file and the objects they mean).
"""

from __future__ import annotations

from typing import Any

import pytest

from backtest import (
    Adjusted,
    Delta,
    Deviations,
    Early,
    Financed,
    Gate,
    Mirrored,
    PercentOfForward,
    PercentOfSpot,
    PremiumPercent,
    PriceMean,
    SignalOn,
    VolPercentile,
)
from studies.overlay_files import parse_overlay

STRIKES: list[tuple[str, Any]] = [
    ("percent_of_spot = 95", PercentOfSpot(95)),
    ("percent_of_forward = 95", PercentOfForward(95)),
    ("deviations = 1.5", Deviations(1.5)),
    ("delta = 0.25", Delta(0.25)),
    ("premium_percent = 0.5", PremiumPercent(0.5)),
    ("financed_share = 0.5", Financed(0.5)),
    ("financed_share = 1, of_legs = [1, 2]", Financed(1, legs=(1, 2))),
    ("mirrored_leg = 2", Mirrored(2)),
    ("strike_step = 5, delta = 0.25", Adjusted(rule=Delta(0.25), strike_step=5)),
    ("mirrored_leg = 1, not_below_leg = 2", Adjusted(rule=Mirrored(1), not_below_leg=2)),
    # off by name is the same as not named
    ("delta = 0.25, ratchet = false, not_above = 120", Adjusted(rule=Delta(0.25), not_above=120)),
    ('delta = 0.25, not_below = "none", not_above = 120', Adjusted(rule=Delta(0.25), not_above=120)),
    ('delta = 0.25, not_below = "none", strike_step = "none"', Delta(0.25)),
]


@pytest.mark.parametrize(("written", "strike"), STRIKES, ids=[written for written, _ in STRIKES])
def test_strikes(written: str, strike: Any) -> None:
    two = '[[leg]]\nposition = "long"\nright = "put"\nstrike = { delta = 0.1 }\n' * 2
    third = f'{two}[[leg]]\nposition = "short"\nright = "call"\n'
    assert parse_overlay(f"{third}strike = {{ {written} }}\n").overlay.legs[2].strike == strike
    # and as a table of its own
    lines = written.replace(", ", "\n").replace("[1\n2]", "[1, 2]")
    assert parse_overlay(f"{third}[leg.strike]\n{lines}\n").overlay.legs[2].strike == strike


GATES: list[tuple[str, Gate | None]] = [
    ("{ signal = true }", Gate(condition=SignalOn())),
    ("{ vol_above_percentile = 80 }", Gate(condition=VolPercentile(percent=80, above=True, window=756))),
    (
        "{ vol_below_percentile = 50, window = 252 }",
        Gate(condition=VolPercentile(percent=50, above=False, window=252)),
    ),
    (
        '{ price_above_mean = 50, when_off = "close" }',
        Gate(condition=PriceMean(window=50, above=True), when_off="close"),
    ),
    (
        '{ price_below_mean = 200, when_on = "at once" }',
        Gate(condition=PriceMean(window=200, above=False), when_on="at once"),
    ),
    ('"none"', None),
]
PLAIN = 'position = "long"\nright = "put"\nstrike = { percent_of_spot = 95 }\n'


@pytest.mark.parametrize(("written", "gate"), GATES, ids=[written for written, _ in GATES])
def test_gates_of_a_leg_and_of_all_of_them(written: str, gate: Gate | None) -> None:
    of_leg = parse_overlay(f"[[leg]]\n{PLAIN}gate = {written}\n").overlay
    assert (of_leg.legs[0].gate, of_leg.gate) == (gate, None)
    of_all = parse_overlay(f"gate = {written}\n[[leg]]\n{PLAIN}").overlay
    assert (of_all.legs[0].gate, of_all.gate) == (None, gate)


def test_none_is_what_is_left_out() -> None:
    said = 'every = "none"\nterm = "none"\nterm_days = "none"\nearly = "none"\ngate = "none"\n'
    plain = parse_overlay(f"[[leg]]\n{PLAIN}")
    assert parse_overlay(f'portfolio = "none"\ngate = "none"\n[[leg]]\n{PLAIN}{said}') == plain
    early = '\nearly = { delta_below = "none", value_above = 3 }\n'
    assert parse_overlay(f"[[leg]]\n{PLAIN}{early}").overlay.legs[0].early == Early(value_above=3)


def test_a_roll_of_days_and_its_term() -> None:
    days = f'[[leg]]\n{PLAIN}roll = "days"\nevery = 21\n'
    legs = parse_overlay(f"{days}{days}term_days = 42\n").overlay.legs
    assert [(leg.every, leg.term_days, leg.term_months) for leg in legs] == [(21, 21, None), (21, 42, None)]
