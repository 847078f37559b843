"""Overlay files: what they say, and the exact round trip through the normal form.

Rung: identity (round trip under hypothesis; small files and the objects they mean).
"""

from __future__ import annotations

import tomllib
from dataclasses import fields
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from hypothesis import example, given
from hypothesis import strategies as st

from backtest import (
    FLAT,
    INDEX,
    MILD,
    STEEP,
    Costs,
    ImpliedSeries,
    Leg,
    Overlay,
    OverlayError,
    PercentOfForward,
    PercentOfSpot,
    RealisedVolatility,
    SSVISmile,
    Volatility,
)
from studies.overlay_files import (
    OverlayFile,
    describe_legs,
    overlay_from_table,
    overlay_to_table,
    overlay_to_toml,
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
[[leg]]
position = "short"
right = "put"
roll = "half"
term = 9
phase = 5
shift_days = -3
ratio = 0.25
strike = { percent_of_forward = 82.5 }
[costs]
half_spread_vol = 1.5
half_spread_percent = 2
half_spread_min = 0.05
commission = 1.25
multiplier = 10
settlement_fee = 3
stock_bps = 4
[volatility]
smile = { rho = -0.5, eta = 1, gamma = 0.25 }
quote = "at the money"
source = "realised"
window = 21
markup = 1.2
""")
    assert found.overlay == Overlay(
        name="all of them",
        account="cash",
        legs=(
            Leg(
                position="short", right="put", roll="half", term_months=9, phase=5, shift_days=-3, ratio=0.25,
                strike=PercentOfForward(82.5),
            ),
        ),
        costs=Costs(
            half_spread_vol=1.5, half_spread_percent=2, half_spread_min=0.05, commission=1.25, multiplier=10,
            settlement_fee=3, stock_bps=4,
        ),
    )  # fmt: skip
    assert found.volatility == Volatility(
        source=RealisedVolatility(window=21, markup=1.2),
        smile=SSVISmile(rho=-0.5, eta=1, gamma=0.25),
        quote="at the money",
    )


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


def test_names_from_legs() -> None:
    legs = (
        Leg(position="long", right="put", roll="half", ratio=0.5, strike=PercentOfForward(97.5)),
        Leg(position="short", right="put", roll="year", strike=PercentOfSpot(80)),
        Leg(position="long", right="call", roll="month", strike=PercentOfSpot(120)),
    )
    assert describe_legs(legs) == ("0.5 x half-yearly 97.5 of forward put, yearly 80 sold put, monthly 120 bought call")


# ---------------------------------------------------------------- the normal form


def number(least: float, most: float) -> st.SearchStrategy[float]:
    return st.floats(least, most, allow_nan=False) | st.integers(int(least) + (least % 1 > 0), int(most))


@st.composite
def legs(draw: st.DrawFn) -> Leg:
    roll, months = draw(st.sampled_from([("month", 1), ("quarter", 3), ("half", 6), ("year", 12)]))
    rule = draw(st.sampled_from([PercentOfSpot, PercentOfForward]))
    return Leg(
        position=draw(st.sampled_from(["long", "short"])),
        right=draw(st.sampled_from(["put", "call"])),
        strike=rule(draw(number(1, 1000))),
        roll=roll,
        term_months=draw(st.none() | st.integers(months, 120)),
        phase=draw(st.integers(0, months - 1)),
        shift_days=draw(st.integers(-252, 252)),
        ratio=draw(number(0, 100)),
    )


@st.composite
def smiles(draw: st.DrawFn) -> Any:
    if draw(st.booleans()):
        return draw(st.sampled_from([FLAT, MILD, INDEX, STEEP]))
    rho = draw(st.floats(-0.999, 0.999))
    return SSVISmile(
        rho=rho,
        eta=draw(st.floats(0, 1.99 / (1 + abs(rho)), exclude_min=True)),
        gamma=draw(st.floats(0, 0.5, exclude_min=True)),
    )


COSTS = st.builds(
    Costs,
    half_spread_vol=number(0, 100), half_spread_percent=number(0, 100), half_spread_min=number(0, 1e300),
    commission=number(0, 1e9), multiplier=st.floats(0, 1e9, exclude_min=True) | st.integers(1, 10**9),
    settlement_fee=number(0, 1e9), stock_bps=number(0, 1000),
)  # fmt: skip
SOURCES = st.one_of(
    st.none(),
    st.just(ImpliedSeries()),
    st.builds(RealisedVolatility, window=st.integers(2, 2520), markup=st.floats(0.01, 10)),
)
VOLATILITIES = st.builds(
    Volatility, source=SOURCES, smile=smiles(), quote=st.sampled_from(["at the money", "variance swap"])
)
OVERLAYS = st.builds(
    Overlay,
    name=st.text(min_size=1, max_size=40),
    legs=st.lists(legs(), min_size=1, max_size=4),
    account=st.sampled_from(["resize", "cash"]),
    costs=COSTS,
)


@given(overlay=OVERLAYS, volatility=VOLATILITIES)
def test_normal_form_round_trip(overlay: Overlay, volatility: Volatility) -> None:
    expected = OverlayFile(overlay=overlay, volatility=volatility)
    text = overlay_to_toml(overlay, volatility)
    found = parse_overlay(text)
    assert found == expected
    assert overlay_from_table(overlay_to_table(overlay, volatility)) == expected
    assert overlay_to_toml(found.overlay, found.volatility) == text


@given(name=st.text(min_size=1))
@example(name='"')
@example(name='"""')
@example(name="'''")
@example(name="\\")
@example(name="\\u0041 \\n")
@example(name="two\nlines\r\nand\ttabs")
@example(name='x"\n[costs]\nhalf_spread_vol = 50\n#')
@example(name="\x00\x01\x08\x0b\x0c\x1b\x1f\x7f")
@example(name="\x80\x85\x9f\xa0\xad")
@example(name="line\u2028paragraph\u2029mark\ufeff")
@example(name="right to left \u202e and \u200b nothing")
@example(name="日本語 Ünïcödé 😀 👨‍👩‍👧")
@example(name="../../etc/passwd")
@example(name=" ")
@example(name="x" * 300)
def test_hostile_names_come_back(name: str) -> None:
    overlay = Overlay(name=name, legs=(PUT,))
    assert parse_overlay(overlay_to_toml(overlay, Volatility())).overlay == overlay


def test_hostile_names_come_back_from_disk(tmp_path: Path) -> None:
    overlay = Overlay(name="Ü\r\n\u2028\x7f\x00😀" * 40, legs=(PUT, CALL))
    file = tmp_path / "hostile.toml"
    file.write_text(overlay_to_toml(overlay, Volatility()), encoding="utf-8")
    assert read_overlay_file(file).overlay == overlay


def test_an_overlay_without_a_name_comes_back_without_one() -> None:
    overlay = Overlay(legs=(PUT, CALL))
    assert overlay.name == ""
    assert parse_overlay(overlay_to_toml(overlay, Volatility())).overlay == overlay


def test_numbers_of_numpy_come_back() -> None:
    percent, ratio = np.linspace(90.0, 95.0, 2)[1], np.float64(0.5)
    overlay = Overlay(
        name="numpy",
        legs=(Leg(position="long", right="put", strike=PercentOfSpot(percent), ratio=ratio),),
        costs=Costs(half_spread_vol=np.float64(0.25)),
    )
    assert parse_overlay(overlay_to_toml(overlay, Volatility())).overlay == overlay


def test_vol_shifts_are_not_lost() -> None:
    volatility = Volatility(put_shift=2.0, call_shift=-1.5)
    assert parse_overlay(overlay_to_toml(Overlay(name="x", legs=(PUT,)), volatility)).volatility == volatility


def test_normal_form_names_every_field() -> None:
    text = overlay_to_toml(Overlay(name="band", legs=(PUT, CALL)), Volatility())
    table = tomllib.loads(text)
    assert list(table) == ["name", "account", "leg", "costs", "volatility"]
    assert [list(leg) for leg in table["leg"]] == [
        ["position", "right", "roll", "term", "phase", "shift_days", "ratio", "strike"],
    ] * 2  # fmt: skip
    assert table["leg"][0]["strike"] == {"percent_of_spot": 95}
    assert list(table["costs"]) == [field.name for field in fields(Costs)]
    assert set(table["volatility"]) >= {"smile", "quote", "source"}
    # a file that names every field says the same as one that leaves the usual ones out
    assert text.startswith('name = "band"\naccount = "resize"\n\n[[leg]]\nposition = "long"\n')
