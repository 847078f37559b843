"""Rung: behaviour. What an overlay did besides rolling, counted anew from its daily and roll tables."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest

from backtest import (
    Adjusted,
    Early,
    Financed,
    Gate,
    Leg,
    Market,
    Overlay,
    PercentOfSpot,
    PriceMean,
    Replay,
    replay,
)
from backtest.analytics.roll_costs import payoffs_at_close
from studies.activity import activity_of, activity_words
from studies.assumptions import assumptions_of, warnings_of

DAYS = pd.bdate_range("2015-01-01", "2018-12-31", name="date")
RNG = np.random.default_rng(11)
CLOSE = 100 * np.exp(np.cumsum(RNG.normal(0.0002, 0.012, len(DAYS))))
MARKET = Market.from_frame(pd.DataFrame({"close": CLOSE, "vol": 0.2}, index=DAYS), rate=0.02)
NOT_BELOW = 104.1
PUT = {"position": "long", "right": "put", "strike": PercentOfSpot(97)}
GATE = Gate(condition=PriceMean(window=50, above=False), when_off="close", when_on="at once")


def played(*legs: Leg, **fields: object) -> Replay:
    return replay(MARKET, Overlay(legs=legs, **fields))  # type: ignore[arg-type]


def test_a_plain_overlay_did_nothing_else() -> None:
    found = played(Leg(**PUT))  # type: ignore[arg-type]
    assert activity_of(found) == {}
    assert not {"time_off", "contracts", "replaced_early"} & set(assumptions_of(found))


def test_time_off_is_the_share_of_days_without_an_option() -> None:
    found = played(Leg(**PUT, gate=GATE))  # type: ignore[arg-type]
    told = activity_of(found)
    days = found.to_frame()
    flat = float(days["put_strike"].isna().mean())
    assert 0.2 < flat < 0.8
    assert told["time_off"] == {"put": pytest.approx(flat, abs=1e-15)}
    assert (days.loc[days["put_strike"].isna(), "put_mark"] == 0.0).all()
    closed = found.rolls_frame()["flag"].str.contains("closed by its gate").sum()
    assert told["closed_by_gate"] == {"put": closed}
    words = activity_words(told)
    assert words["time_off"] == f"put: without an option on {flat:.0%} of days"
    assert words["closed_by_gate"] == f"put: {closed} times"


def test_early_replacements_by_reason() -> None:
    found = played(Leg(**PUT, early=Early(delta_below=0.1, value_above=2.0)))  # type: ignore[arg-type]
    flags = found.rolls_frame()["flag"]
    low, profit = (int(flags.str.contains(word).sum()) for word in ("delta low", "profit taken"))
    assert low > 2
    assert profit > 2
    told = activity_of(found)
    assert told["early"]["put"] == {"delta low": low, "profit taken": profit}
    both = {f"delta low {low} times", f"profit taken {profit} times"}
    assert set(activity_words(told)["replaced_early"].removeprefix("put: ").split(", ")) == both


def test_a_bound_that_was_taken_is_counted() -> None:
    call = Leg(
        position="short", right="call", roll="month", strike=Adjusted(rule=Financed(0.5), not_below=NOT_BELOW)
    )  # fmt: skip
    found = played(Leg(**PUT), call)  # type: ignore[arg-type]
    rolls = found.rolls_frame()
    at_bound = rolls["leg"].eq("call") & np.isclose(rolls["strike"], NOT_BELOW / 100 * rolls["spot_open"], rtol=1e-12)
    assert 0 < at_bound.sum() < rolls["leg"].eq("call").sum()
    assert activity_of(found)["strike_flags"] == {"call": {"lowest strike": int(at_bound.sum())}}


@pytest.mark.parametrize("account", ["resize", "cash"])
def test_contracts_and_what_rounding_left_out(account: str) -> None:
    found = played(Leg(**PUT, ratio=0.5), account=account, portfolio=130_000.0)  # type: ignore[arg-type]
    told = activity_of(found)["contracts"]["put"]
    held = found.rolls_frame()["contracts"]
    assert (told["fewest"], told["most"]) == (held.min(), held.max())
    assert told["most"] <= 7  # 130,000 buys 1,300 shares at most near 100, half of them covered: six contracts or so
    # wanted and held at each roll, in shares of the portfolio
    wanted = found.rolls_frame()["units"] * 0.5 * 130_000.0 / 100.0
    assert told["largest_rounding"] == pytest.approx((1.0 - held / wanted).max(), abs=1e-12)
    assert "whole contracts of 100" in assumptions_of(found)["account"]


def test_a_put_of_which_no_contract_was_held_paid_nobody() -> None:
    put = Leg(**PUT)  # type: ignore[arg-type]
    whole, none = played(put), played(put, portfolio=5_000.0)
    assert payoffs_at_close(whole, whole.legs[0]).max() > 0.0
    assert none.leg_count.max() == 0.0
    assert payoffs_at_close(none, none.legs[0]).tolist() == [0.0] * int(none.legs[0].done.sum())
    assert any("too small for one contract of the put on" in said for said in warnings_of(none))
