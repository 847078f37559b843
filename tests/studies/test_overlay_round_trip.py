"""The normal form of overlay files: everything comes back exactly, through text and through a manifest.

Rung: identity (round trip under hypothesis, over random overlays of the whole language).
"""

from __future__ import annotations

import json
import tomllib
from dataclasses import fields
from pathlib import Path

import numpy as np
import pytest
from hypothesis import example, given
from hypothesis import strategies as st

from backtest import (
    Adjusted,
    Costs,
    Delta,
    Early,
    Financed,
    Gate,
    Leg,
    Overlay,
    PercentOfSpot,
    PriceMean,
    Volatility,
    VolPercentile,
)
from backtest.beside import Counterparty, Sale
from studies.overlay_files import (
    OverlayFile,
    overlay_from_table,
    overlay_to_table,
    overlay_to_toml,
    parse_overlay,
    read_overlay_file,
)

from .overlay_strategies import OVERLAY_FILES

PUT = Leg(position="long", right="put", roll="quarter", strike=PercentOfSpot(95))
CALL = Leg(position="short", right="call", roll="month", strike=PercentOfSpot(110))


def written(said: OverlayFile) -> str:
    return overlay_to_toml(said.overlay, said.volatility, counterparty=said.counterparty, sale=said.sale)


@given(said=OVERLAY_FILES)
def test_normal_form_round_trip(said: OverlayFile) -> None:
    text = written(said)
    found = parse_overlay(text)
    assert found == said
    assert written(found) == text
    table = overlay_to_table(said.overlay, said.volatility, counterparty=said.counterparty, sale=said.sale)
    # a manifest is JSON
    assert overlay_from_table(json.loads(json.dumps(table))) == said
    assert tomllib.loads(text) == table


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


def test_what_is_asked_beside_a_replay_is_not_lost() -> None:
    beside = {"counterparty": Counterparty(default=["2008-10-10"]), "sale": Sale(gain_percent=60, tax_percent=25)}
    text = overlay_to_toml(Overlay(legs=(PUT,)), Volatility(), **beside)  # type: ignore[arg-type]
    assert text.endswith(
        '\n[counterparty]\nrecovery = 0.4\ndefault = ["2008-10-10"]\n'
        "\n[sale]\ngain_percent = 60\ntax_percent = 25\ncost_bps = 0.0\n"
    )
    found = parse_overlay(text)
    assert {"counterparty": found.counterparty, "sale": found.sale} == beside


def test_normal_form_names_every_field() -> None:
    """Those that play a part: a roll of months has a day of the month, one of days has its days."""
    text = overlay_to_toml(Overlay(name="band", legs=(PUT, CALL)), Volatility())
    table = tomllib.loads(text)
    assert list(table) == ["name", "account", "decide_lag", "leg", "costs", "volatility"]
    named = [
        "position", "right", "strike", "roll", "roll_day", "term", "phase", "shift_days", "close_before", "settlement",
        "ratio", "ladder", "stagger", "reference",
    ]  # fmt: skip
    assert [list(leg) for leg in table["leg"]] == [named] * 2
    assert table["leg"][0]["strike"] == {"percent_of_spot": 95}
    assert list(table["costs"]) == [field.name for field in fields(Costs)]
    assert list(table["volatility"]) == [
        "smile", "quote", "source", "put_shift", "call_shift", "term_structure", "kappa",
    ]  # fmt: skip
    assert text.startswith('name = "band"\naccount = "resize"\ndecide_lag = 0\n\n[[leg]]\nposition = "long"\n')


def test_what_is_named_only_where_it_is_given() -> None:
    leg = Leg(
        position="short",
        right="call",
        roll="days",
        every=21,
        strike=Adjusted(rule=Financed(0.5), ratchet=False, not_below=101),
        early=Early(value_below=0.2),
        gate=Gate(condition=PriceMean(window=200, above=True)),
    )  # fmt: skip
    overlay = Overlay(
        legs=(PUT, leg),
        portfolio=1e6,
        crossed=True,
        gate=Gate(condition=VolPercentile(percent=80, above=False), when_off="close"),
    )
    table = overlay_to_table(overlay, Volatility())
    assert list(table) == [
        "name",
        "account",
        "decide_lag",
        "portfolio",
        "crossed",
        "gate",
        "leg",
        "costs",
        "volatility",
    ]
    assert table["gate"] == {
        "vol_below_percentile": 80, "window": 756, "when_off": "close", "when_on": "next roll"
    }  # fmt: skip
    assert table["leg"][1] == {
        "position": "short", "right": "call",
        "strike": {"financed_share": 0.5, "of_legs": [1], "not_below": 101},
        "roll": "days", "every": 21, "term_days": 21, "phase": 0, "shift_days": 0, "close_before": 0,
        "settlement": "close", "ratio": 1.0, "ladder": 1, "stagger": True,
        "early": {"value_below": 0.2, "days_left": 10},
        "gate": {"price_above_mean": 200, "when_off": "run out", "when_on": "next roll"},
        "reference": False,
    }  # fmt: skip


def test_the_normal_form_of_before_still_means_the_same() -> None:
    """As manifests have it that were written before the language grew."""
    legs = [
        {"position": "long", "right": "put", "roll": "quarter", "term": 3, "phase": 0, "shift_days": 0, "ratio": 1.0,
         "strike": {"percent_of_spot": 95}},
        {"position": "short", "right": "call", "roll": "month", "term": 1, "phase": 0, "shift_days": 0, "ratio": 1.0,
         "strike": {"percent_of_spot": 110}},
    ]  # fmt: skip
    costs = {
        "half_spread_vol": 0.5, "half_spread_percent": 0.0, "half_spread_min": 0.0, "commission": 0.0,
        "multiplier": 100.0, "settlement_fee": 0.0, "stock_bps": 0.0,
    }  # fmt: skip
    vol = {"smile": "index", "quote": "variance swap", "source": "auto", "put_shift": 0.0, "call_shift": 0.0}
    found = overlay_from_table({"name": "band", "account": "resize", "leg": legs, "costs": costs, "volatility": vol})
    band = Overlay(name="band", legs=(PUT, CALL))
    assert found == OverlayFile(overlay=band, volatility=Volatility(quote="variance swap"))


@pytest.mark.parametrize("ladder", [1, 3])
def test_a_rule_without_limits_is_written_as_the_rule(ladder: int) -> None:
    """Nothing laid around a rule is the rule itself, so that is what comes back."""
    leg = Leg(position="long", right="put", strike=Adjusted(rule=Delta(0.25)), ladder=ladder)
    (found,) = parse_overlay(overlay_to_toml(Overlay(legs=(leg,)), Volatility())).overlay.legs
    assert found == Leg(position="long", right="put", strike=Delta(0.25), ladder=ladder)
