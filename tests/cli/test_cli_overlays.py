"""``rollband overlays``: what an overlay file means, in words, or what is wrong in it.

Rung: behaviour (exit codes, the words on standard output, messages on standard error, nothing written).
"""

# ruff: noqa: E501  a sentence stays as it is read

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest

from studies.demo import DEMO_OVERLAY

Run = Callable[..., Any]

ZERO_COST = """\
decide_lag = 1

[[leg]]
position = "long"
right = "put"
roll = "half"
ladder = 2
strike = { delta = 0.25, ratchet = true }

[[leg]]
position = "short"
right = "call"
roll = "month"
strike = { financed_share = 1, of_legs = [1], not_below = 102 }
gate = { price_above_mean = 200, when_off = "close" }

[[leg]]
position = "short"
right = "put"
roll = "month"
ladder = 2
strike = { percent_of_spot = 80 }
"""


def test_what_a_file_means(rollband: Run, home: Path) -> None:
    (home / "band.toml").write_text(DEMO_OVERLAY)
    ran = rollband("overlays", "check", "band.toml")
    assert (ran.code, ran.err) == (0, "")
    assert ran.out.splitlines() == [
        "band.toml: quarterly 95 put, monthly 110 call",
        "  leg 1: buys a put, 1 per share; every quarter on the third Friday, 3 months to expiry; struck at 95% of spot; "
        "costs a half-spread of 0.5 vol points",
        "  leg 2: sells a call, 1 per share; every month on the third Friday, 1 month to expiry; struck at 110% of spot; "
        "costs a half-spread of 0.5 vol points",
        "  account: all wealth into whole packages at every roll of the longest leg",
        "  decided: at the close at which it is traded",
        "  volatility: smile index on implied vol, or realised where there is none, read as a variance-swap quote",
    ]
    assert [path.name for path in home.iterdir()] == ["band.toml"]


def test_a_file_of_the_wider_language_without_a_name(rollband: Run, home: Path) -> None:
    (home / "zero.toml").write_text(ZERO_COST.replace("[1]", "[3]").replace("ladder = 2\n", "", 2))
    ran = rollband("overlays", "check", "zero.toml")
    assert (ran.code, ran.err) == (0, "")
    said = ran.out.splitlines()
    assert said[0] == (
        "zero.toml: half-yearly 25-delta put (ratchet), monthly call financing leg 3 (not below 102; while the price is "
        "above its 200-day mean), monthly 80 sold put"
    )
    assert said[2] == (
        "  leg 2: sells a call, 1 per share; every month on the third Friday, 1 month to expiry; struck where it pays "
        "100% of what leg 3 costs, not below 102% of spot; active while the price is above its 200-day mean: what is live "
        "when that ends is closed at once, it opens again at its next roll; costs a half-spread of 0.5 vol points"
    )
    assert "  decided: at the close before the trade" in said


def test_a_file_with_an_empty_name(rollband: Run, home: Path) -> None:
    (home / "band.toml").write_text(DEMO_OVERLAY.replace("quarterly 95 put, monthly 110 call", ""))
    assert rollband("overlays", "check", "band.toml").out.startswith("band.toml: an overlay without a name\n")


@pytest.mark.parametrize(
    ("text", "says"),
    [
        (
            ZERO_COST,
            "band.toml, line 10, leg.2: leg 2 of 1 tranche(s) names leg 1 of 2; give both the same ladder, or none to "
            "the leg that is named",
        ),
        (
            ZERO_COST.replace("0.25", "25"),
            "band.toml, line 8, leg.1.strike.delta: delta is 25; it takes a number from 0.001 to 0.999 (0.25 is a "
            "25-delta option)",
        ),
        (
            ZERO_COST.replace("price_above_mean", "price_over_mean"),
            "band.toml, line 15, leg.2.gate.price_over_mean: unknown key; did you mean price_above_mean? Known here: "
            "signal, vol_above_percentile, vol_below_percentile, price_above_mean, price_below_mean, window, when_off, "
            "when_on",
        ),
        ("[[leg]\n", "band.toml, line 1: not valid TOML: "),
    ],
    ids=["legs", "strike", "gate", "no-toml"],
)
def test_what_is_wrong_in_a_file(rollband: Run, home: Path, text: str, says: str) -> None:
    (home / "band.toml").write_text(text)
    ran = rollband("overlays", "check", "band.toml")
    assert (ran.code, ran.out) == (2, "")
    assert ran.err.startswith(f"rollband: {says}")
    assert len(ran.err.splitlines()) == 1


def test_no_such_file(rollband: Run, home: Path) -> None:
    ran = rollband("overlays", "check", "none.toml")
    assert (ran.code, ran.out, ran.err) == (2, "", "rollband: none.toml: there is no such file\n")


def test_help_names_the_commands(rollband: Run) -> None:
    assert "overlays" in rollband("--help").out
    said = rollband("overlays", "--help")
    assert said.code == 0
    assert "check" in said.out


def test_a_checked_file_is_one_that_can_be_replayed(stored: Run, home: Path) -> None:
    (home / "band.toml").write_text(DEMO_OVERLAY)
    (home / "wrong.toml").write_text(DEMO_OVERLAY.replace("= 110 }", "= 90 }"))
    assert stored("replay", "mine", "--overlay", "band.toml", "--out", "out").code == 0
    checked, replayed = (
        stored(*command)
        for command in (("overlays", "check", "wrong.toml"), ("replay", "mine", "--overlay", "wrong.toml"))
    )
    assert (checked.code, checked.err) == (replayed.code, replayed.err)
    assert checked.err.startswith("rollband: wrong.toml, line 11, leg.2: the sold call at 90 lies under the bought put")
