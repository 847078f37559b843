"""``rollband next``: a newcomer's run on the demo market, the picture, JSON, and what is refused.

Rung: behaviour (words, files, exit codes), with the numbers of the JSON taken for those that are printed.
"""

from __future__ import annotations

import json
import re
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest

from studies.demo import DEMO_OVERLAY

Run = Callable[..., Any]

GATE = 'gate = { price_above_mean = 200, when_off = "close" }\n'
#: The demo market ends on 29 December 2023, far above its mean of a year.
BELOW = 'gate = { price_below_mean = 252, when_off = "close" }\n'


@pytest.fixture
def band(home: Path) -> Path:
    (home / "band.toml").write_text(DEMO_OVERLAY)
    return home / "band.toml"


def test_a_newcomer_asks_what_the_coming_roll_costs(stored: Run, band: Path) -> None:
    ran = stored("next", "mine", "--overlay", "band.toml", "--money", "1e6")
    assert (ran.code, ran.err) == (0, "")
    assert "quarterly 95 put, monthly 110 call, on mine: the coming roll\n" in ran.out
    assert "Newest data: 2023-12-29, close 3,601.63" in ran.out
    assert re.search(r"^put +2024-03-15 +2024-06-21 +3,421\.55 +95\.0% ", ran.out, re.MULTILINE)
    assert re.search(r"^call +2024-01-19 +2024-02-16 +3,961\.79 +110\.0% ", ran.out, re.MULTILINE)
    # 1,000,000 / 3,601.63 are 277.65 shares
    assert "For 1,000,000: 277.7 shares; contracts of 100, put: 2, call: 2; net credit" in ran.out
    assert "At the first expiry, 2024-02-16, put at model value under unchanged vols:" in ran.out
    assert ran.out.count("sum of 10") == 2
    assert ran.out.count("check them against") == 1
    assert "Ask a" in ran.out
    assert not (band.parent / "results").exists()


def test_json_has_the_same_numbers_and_nothing_else(stored: Run, band: Path) -> None:
    told = json.loads(stored("next", "mine", "--overlay", "band.toml", "--json").out)
    shown = stored("next", "mine", "--overlay", "band.toml").out
    option = told["legs"][0]["option"]
    for number in (option["strike"], option["premium"], option["after_cost"]):
        assert f" {number:,.2f}" in shown
    assert told["holding"] is None
    assert "contracts of" not in shown
    # bought at mid and cost
    assert option["after_cost"] == pytest.approx(option["premium"] + option["cost"], rel=1e-15)


def test_shorthands_and_options_are_those_of_the_replay(stored: Run) -> None:
    plain = json.loads(stored("next", "mine", "--put", 95, "--call", 110, "--json").out)
    assert plain["name"] == "quarterly 95 put, quarterly 110 call"
    assert [leg["roll"] for leg in plain["legs"]] == ["2024-03-15", "2024-03-15"]
    assert any("read as at-the-money vol" in warning for warning in plain["warnings"])
    other = json.loads(
        stored(
            "next", "mine", "--put", 95, "--call", 110, "--roll", "half", "--call-roll", "month", "--call-term", 2,
            "--smile", "flat", "--vol-quote", "variance-swap", "--rate", 2, "--dividend-yield", 1,
            "--half-spread-vol", 0, "--json",
        ).out
    )  # fmt: skip
    assert [(leg["roll"], leg["expiry"]) for leg in other["legs"]] == [
        ("2024-06-21", "2024-12-20"), ("2024-01-19", "2024-03-15"),
    ]  # fmt: skip
    assert (other["rate"], other["dividend_yield"]) == (pytest.approx(0.02), pytest.approx(0.01))
    assert other["legs"][0]["option"]["cost"] == 0.0
    assert other["legs"][0]["option"]["vol"] == pytest.approx(other["legs"][1]["option"]["vol"], rel=1e-12)


def test_the_portfolio_of_the_file_is_the_holding_unless_money_is_given(stored: Run, band: Path) -> None:
    band.write_text(DEMO_OVERLAY.replace("[[leg]]", "portfolio = 2_000_000\n\n[[leg]]", 1))
    told = json.loads(stored("next", "mine", "--overlay", "band.toml", "--multiplier", 10, "--json").out)
    # 555.3 shares
    assert told["holding"]["contracts"] == {"put": 55, "call": 55}
    told = json.loads(stored("next", "mine", "--overlay", "band.toml", "--money", "4e5", "--json").out)
    assert (told["holding"]["money"], told["holding"]["contracts"]) == (400_000.0, {"put": 1, "call": 1})


@pytest.mark.parametrize(("name", "begins"), [("p.png", b"\x89PNG\r\n"), ("in/p.svg", b"<?xml")])
def test_the_picture_is_written_and_the_same_again(stored: Run, home: Path, name: str, begins: bytes) -> None:
    ran = stored("next", "mine", "--put", 95, "--call", 105, "--picture", name)
    assert ran.code == 0
    assert f"  Picture: {name}\n" in ran.out
    first = (home / name).read_bytes()
    assert first.startswith(begins)
    ran = stored("next", "mine", "--put", 95, "--call", 105, "--picture", name, "--json")
    assert ran.err == f"Picture: {name}\n"
    json.loads(ran.out)
    assert (home / name).read_bytes() == first
    assert [path.name for path in (home / name).parent.iterdir() if path.name.startswith(".")] == []


def test_a_gate_that_is_off_leaves_nothing_to_draw(stored: Run, home: Path, band: Path) -> None:
    band.write_text(BELOW + DEMO_OVERLAY)
    ran = stored("next", "mine", "--overlay", "band.toml")
    assert ran.code == 0
    assert "By today's data nothing would be opened." in ran.out
    assert "put: its gate is off (it opens while the price is below its 252-day mean)" in ran.out
    ran = stored("next", "mine", "--overlay", "band.toml", "--picture", "p.png")
    assert (ran.code, ran.out) == (5, "")
    assert ran.err == "rollband: cannot draw p.png: by today's data nothing would be opened; leave out --picture\n"
    assert not (home / "p.png").exists()
    band.write_text(GATE + DEMO_OVERLAY)
    assert "nothing would be opened" not in stored("next", "mine", "--overlay", "band.toml").out


@pytest.mark.parametrize(
    ("code", "arguments", "says"),
    [
        (2, ["mine"], "say what to replay: --put 95, --call 110, both, or --overlay FILE"),
        (2, [], "Missing argument"),
        (2, ["mine", "--overlay", "band.toml", "--put", 95], "leave out --put"),
        (2, ["mine", "--overlay", "no.toml"], "rollband: no.toml: there is no such file"),
        (2, ["mine", "--put", 95, "--call-roll", "month"], "there is no --call for it"),
        (2, ["mine", "--put", 95, "--money", 0.5], "--money is 0.5; it takes a number of at least 1"),
        (2, ["mine", "--put", 95, "--money", "nan"], "--money is nan; it takes a number of at least 1"),
        (2, ["mine", "--put", 95, "--rate", 500], "--rate is 500.0; it takes a number from -99 to 100"),
        (2, ["mine", "--put", 95, "--picture", "p.jpg"], "p.jpg ends in neither of .png, .svg"),
        (2, ["mine", "--put", 95, "--smile", "skew"], "--smile is 'skew'"),
        (3, ["nime", "--put", 95], "there is no history 'nime'"),
        (5, ["mine", "--put", 95, "--picture", "band.toml/p.png"], "cannot write band.toml/p.png"),
    ],
)
def test_what_cannot_be_done(
    stored: Run, home: Path, band: Path, code: int, arguments: list[object], says: str
) -> None:
    before = sorted(path.name for path in home.iterdir())
    ran = stored("next", *arguments)
    assert (ran.code, ran.out) == (code, "")
    assert says in " ".join(ran.err.replace("│", " ").split())
    assert "Traceback" not in ran.err
    assert sorted(path.name for path in home.iterdir()) == before


def test_a_history_without_a_roll_of_the_longest_leg(rollband: Run, home: Path) -> None:
    rows = "".join(f"2020-01-{day:02d},{100 + day}\n" for day in range(2, 32))
    (home / "p.csv").write_text("date,close\n" + rows)
    assert rollband("load", "short", "--prices", "p.csv").code == 0
    ran = rollband("next", "short", "--put", 95)
    assert (ran.code, ran.out) == (5, "")
    assert ran.err.startswith("rollband: no day before 2020-01-31 has price, vol and rate together")
