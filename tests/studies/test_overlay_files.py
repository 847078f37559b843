"""Overlay files: what they say.

Rung: identity (small files and the objects they mean).
"""

from __future__ import annotations

import datetime as dt
from dataclasses import fields
from pathlib import Path
from typing import Any

import pytest

from backtest import (
    FLAT,
    INDEX,
    MILD,
    STEEP,
    Adjusted,
    Costs,
    Delta,
    Early,
    Gate,
    ImpliedSeries,
    Leg,
    Overlay,
    OverlayError,
    PercentOfForward,
    PercentOfSpot,
    RealisedVolatility,
    SignalOn,
    SSVISmile,
    Volatility,
    VolPercentile,
)
from backtest.beside import Counterparty, Sale
from backtest.volatility.sources import ImpliedSurface
from studies.leg_files import LEG_KEYS
from studies.overlay_files import (
    TOP_KEYS,
    VOLATILITY_KEYS,
    OverlayFile,
    parse_overlay,
    read_overlay_file,
    shorthand_overlay,
    smile_from_option,
)

BAND = """\
name = "quarterly 95 put, monthly 110 call"
account = "resize"            # or "cash"

[[leg]]
position = "long"
right = "put"
roll = "quarter"
strike = { percent_of_spot = 95 }

[[leg]]
position = "short"
right = "call"
roll = "month"
strike = { percent_of_spot = 110 }

[costs]
half_spread_vol = 0.5

[volatility]
smile = "index"               # flat, mild, index, steep, or { rho = , eta = , gamma = }
quote = "variance swap"       # or "at the money"
"""

PUT = Leg(position="long", right="put", roll="quarter", strike=PercentOfSpot(95))
CALL = Leg(position="short", right="call", roll="month", strike=PercentOfSpot(110))


# ---------------------------------------------------------------- what a file says


def test_the_band_of_the_readme() -> None:
    found = parse_overlay(BAND)
    assert found == OverlayFile(
        overlay=Overlay(
            name="quarterly 95 put, monthly 110 call",
            account="resize",
            legs=(PUT, CALL),
            costs=Costs(half_spread_vol=0.5),
        ),
        volatility=Volatility(source=None, smile=INDEX, quote="variance swap"),
    )


def test_every_key_is_read() -> None:
    found = parse_overlay("""
name = "all of them"
account = "cash"
decide_lag = 1
portfolio = 250_000
crossed = true
gate = { signal = true, when_off = "close" }
[[leg]]
position = "short"
right = "put"
roll = "half"
roll_day = "last trading day"
term = 9
phase = 5
shift_days = -3
close_before = 5
settlement = "open"
ratio = 0.25
ladder = 4
stagger = false
strike = { percent_of_forward = 82.5 }
early = { delta_below = 0.1, value_above = 3, value_below = 0.2, days_left = 20 }
gate = { vol_below_percentile = 80, window = 252, when_off = "close", when_on = "at once" }
[[leg]]
position = "long"
right = "call"
roll = "days"
every = 63
term_days = 126
ladder = 4
reference = true
[leg.strike]
delta = 0.25
kept_until_moved = 5
ratchet = true
not_below = 90
not_above = 120
not_below_leg = 1
strike_step = 5
[costs]
half_spread_vol = 1.5
half_spread_percent = 2
half_spread_min = 0.05
commission = 1.25
multiplier = 10
settlement_fee = 3
stock_bps = 4
borrow_spread = 1.5
[volatility]
smile = { rho = -0.5, eta = 1, gamma = 0.25 }
quote = "at the money"
source = "realised"
window = 21
markup = 1.2
estimator = "ewma"
half_life = 11
markup_points = 0.5
put_shift = 2
call_shift = -1
term_structure = "mean reverting"
kappa = 1.5
[counterparty]
recovery = 0.25
default = ["2008-09-15", 2008-10-10]
[sale]
gain_percent = 60
tax_percent = 25
cost_bps = 5
""")
    assert found == OverlayFile(
        overlay=Overlay(
            name="all of them",
            account="cash",
            decide_lag=1,
            portfolio=250_000,
            crossed=True,
            gate=Gate(condition=SignalOn(), when_off="close"),
            legs=(
                Leg(
                    position="short", right="put", roll="half", roll_day="last trading day", term_months=9, phase=5,
                    shift_days=-3, close_before=5, settlement="open", ratio=0.25, ladder=4, stagger=False,
                    strike=PercentOfForward(82.5),
                    early=Early(delta_below=0.1, value_above=3, value_below=0.2, days_left=20),
                    gate=Gate(
                        condition=VolPercentile(percent=80, above=False, window=252), when_off="close",
                        when_on="at once",
                    ),
                ),
                Leg(
                    position="long", right="call", roll="days", every=63, term_days=126, ladder=4, reference=True,
                    strike=Adjusted(
                        rule=Delta(0.25), kept_until_moved=5, ratchet=True, not_below=90, not_above=120,
                        not_below_leg=1, strike_step=5,
                    ),
                ),
            ),
            costs=Costs(
                half_spread_vol=1.5, half_spread_percent=2, half_spread_min=0.05, commission=1.25, multiplier=10,
                settlement_fee=3, stock_bps=4, borrow_spread=1.5,
            ),
        ),
        volatility=Volatility(
            source=RealisedVolatility(window=21, markup=1.2, estimator="ewma", half_life=11, markup_points=0.5),
            smile=SSVISmile(rho=-0.5, eta=1, gamma=0.25),
            quote="at the money",
            put_shift=2,
            call_shift=-1,
            term_structure="mean reverting",
            kappa=1.5,
        ),
        counterparty=Counterparty(recovery=0.25, default=(dt.date(2008, 9, 15), dt.date(2008, 10, 10))),
        sale=Sale(gain_percent=60, tax_percent=25, cost_bps=5),
    )  # fmt: skip


def test_every_field_has_a_key() -> None:
    """A field that is added to the language and to no file would be lost on the way through a manifest."""
    of_leg = {field.name for field in fields(Leg) if field.init}
    assert {"term_months" if key == "term" else key for key in LEG_KEYS} == of_leg
    of_overlay = {field.name for field in fields(Overlay) if field.init}
    assert {"legs" if key == "leg" else key for key in TOP_KEYS} - {"volatility", "counterparty", "sale"} == of_overlay
    of_volatility = [field.name for kind in (Volatility, RealisedVolatility) for field in fields(kind)]
    assert sorted(VOLATILITY_KEYS) == sorted(of_volatility)


@pytest.mark.parametrize(
    ("word", "source"),
    [
        ("auto", None),
        ("implied", ImpliedSeries()),
        ("surface", ImpliedSurface()),
        ("realised", RealisedVolatility()),
    ],
)
def test_where_vols_come_from(word: str, source: Any) -> None:
    plain = BAND.replace('quote = "variance swap"', f'source = "{word}"')
    assert parse_overlay(plain).volatility == Volatility(source=source)


def test_what_is_asked_beside_a_replay() -> None:
    plain = parse_overlay(BAND)
    assert (plain.counterparty, plain.sale) == (None, None)
    asked = parse_overlay(BAND + "[counterparty]\n[sale]\n")
    assert asked.counterparty == Counterparty(recovery=0.4, default="worst put payoff")
    assert asked.sale == Sale(gain_percent=0, tax_percent=0, cost_bps=0)
    assert asked.overlay == plain.overlay


def test_what_is_left_out_has_the_defaults() -> None:
    found = parse_overlay('[[leg]]\nposition = "long"\nright = "put"\nstrike = { percent_of_spot = 90 }\n')
    leg = Leg(position="long", right="put", strike=PercentOfSpot(90))
    assert (leg.roll, leg.term, leg.phase, leg.shift_days, leg.ratio) == ("quarter", 3, 0, 0, 1.0)
    assert found.overlay == Overlay(name="quarterly 90 put", legs=(leg,), account="resize", costs=Costs())
    assert found.volatility == Volatility(source=None, smile=INDEX, quote="at the money")


@pytest.mark.parametrize(("smile", "expected"), [("flat", FLAT), ("mild", MILD), ("index", INDEX), ("steep", STEEP)])
def test_the_words_for_smiles(smile: str, expected: object) -> None:
    assert parse_overlay(BAND.replace('"index"  ', f'"{smile}"  ')).volatility.smile == expected
    assert smile_from_option(smile) == expected


def test_a_file_with_a_byte_order_mark_and_windows_line_ends(tmp_path: Path) -> None:
    file = tmp_path / "band.toml"
    file.write_bytes(b"\xef\xbb\xbf" + BAND.replace("\n", "\r\n").encode())
    assert read_overlay_file(file) == parse_overlay(BAND)


def test_shorthand_is_the_file() -> None:
    found = shorthand_overlay(put=95, call=110, put_roll="quarter", call_roll="month")
    assert found.overlay == parse_overlay(BAND).overlay
    assert found.volatility == Volatility()
    assert shorthand_overlay(put=None, call=105, call_term=6).overlay.legs == (
        Leg(position="short", right="call", roll="quarter", term_months=6, strike=PercentOfSpot(105)),
    )
    with pytest.raises(OverlayError, match="at least one leg"):
        shorthand_overlay(put=None, call=None)
