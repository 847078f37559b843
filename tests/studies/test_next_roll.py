"""The coming roll as plain values and in words: gates, flags, live options, last rolls, money, warnings.

Rungs: identity (sums of the replay's own rolls, sentences written out here), behaviour (nothing is wider than the
terminal). The numbers themselves are in ``tests/backtest/test_coming.py``.
"""

from __future__ import annotations

import io
import json
import re
from typing import Any

import numpy as np
import pandas as pd
import pytest
from rich.cells import cell_len
from rich.console import Console

from backtest import (
    FLAT,
    Adjusted,
    Costs,
    Early,
    Financed,
    Gate,
    Leg,
    Market,
    Overlay,
    PercentOfSpot,
    PriceMean,
    RealisedVolatility,
    Volatility,
)
from backtest.engine.coming import coming_roll, for_holding
from studies.assumptions import CAUTION
from studies.next_roll import MODEL_VALUES, last_rolls, next_roll, show_next, stretch_words
from studies.results import json_text

FLAT_VOL = Volatility(smile=FLAT, quote="variance swap")


def put(**kw: Any) -> Leg:
    kw.setdefault("strike", PercentOfSpot(95))
    return Leg(position="long", right="put", **kw)


def call(**kw: Any) -> Leg:
    kw.setdefault("strike", PercentOfSpot(110))
    kw.setdefault("roll", "month")
    return Leg(position="short", right="call", **kw)


def market(*, falls: float = 0.0, end: str = "2024-01-31", spot: float = 200.0) -> Market:
    """A price that swings by a tenth, at 200 on every day of 2024; it may fall at last."""
    days = pd.bdate_range("2019-06-03", "2024-01-31", name="date")
    close = pd.Series(spot * (1 + 0.1 * np.sin(np.arange(len(days)) / 40)), index=days)
    close["2024-01-01":] = spot
    close["2024-01-30":] = spot - falls
    frame = pd.DataFrame({"close": close, "vol": 0.20}, index=days).loc[:end]
    return Market.from_frame(frame, rate=0.03)


def told_of(*legs: Leg, money: float | None = None, on: Market | None = None, **agreed: Any) -> dict[str, Any]:
    agreed.setdefault("name", "a band")
    found = coming_roll(on or market(), Overlay(legs=legs, **agreed), volatility=FLAT_VOL)
    return next_roll(found, history="mine", holding=None if money is None else for_holding(found, money))


def lines_of(told: dict[str, Any], width: int = 80, picture: str | None = None) -> list[str]:
    console = Console(file=io.StringIO(), width=width)
    show_next(console, told, picture=picture)
    assert isinstance(console.file, io.StringIO)
    return [line.rstrip() for line in console.file.getvalue().splitlines()]


def test_the_plain_values_are_json_with_nothing_left_out() -> None:
    told = told_of(put(), call(), money=1e6)
    again = json.loads(json_text(told))
    assert again == told
    assert (told["name"], told["history"], told["newest"], told["spot"]) == ("a band", "mine", "2024-01-31", 200.0)
    assert told["rate"] == pytest.approx(0.03, rel=1e-14)
    assert told["roll"] == "2024-02-16"
    bought, sold = told["legs"]
    assert (bought["roll"], bought["expiry"], bought["days"], bought["opens"]) == ("2024-03-15", "2024-06-21", 98, True)
    assert bought["option"]["strike_of_spot"] == 0.95
    assert (bought["live"]["stays"], sold["live"]["stays"]) == (True, False)
    assert told["package"]["opened"] == ["call"]
    assert told["package"]["at_model_value"] == []  # both expire on 15 March
    assert told["package"]["against_stock"][-1]["to"] is None
    assert told["holding"]["contracts"] == {"put": 50, "call": 50}
    received = 5000 * (sold["option"]["premium"] - sold["option"]["cost"])
    assert told["holding"]["net"] == pytest.approx(received, rel=1e-14)
    assert told["package"]["net_of_spot"] == pytest.approx(received / 5000 / 200, rel=1e-14)


def test_the_words_of_an_ordinary_roll() -> None:
    told = told_of(put(), call(), money=1e6)
    lines = lines_of(told)
    assert lines[1] == "a band, on mine: the coming roll"
    option = told["legs"][0]["option"]
    row = rf"put +2024-03-15 2024-06-21 190\.00 +95\.0% 20\.0% -0\.\d\d +{option['premium']:.2f} +"
    assert any(re.match(rf"{row}{option['premium'] + option['cost']:.2f}$", line) for line in lines)
    assert any(re.match(r"put +2023-12-15 2024-03-15 .* stays live$", line) for line in lines)
    assert any(re.match(r"call +2024-01-19 2024-02-16 220\.00 .* ends 2024-02-16$", line) for line in lines)
    net = told["package"]["net"]
    assert f"  Net credit {net:.2f} a share, {100 * net / 200:.2f}% of spot: call brings {net:.2f}" in lines
    money = f"{5000 * net:,.0f}"
    assert f"  For 1,000,000: 5,000.0 shares; contracts of 100, put: 50, call: 50; net credit {money}" in lines
    assert "  At the first expiry, 2024-03-15:" in lines
    assert "  Picture: not written; --picture FILE.png (or .svg) draws it" in lines
    whole = " ".join(" ".join(lines).split())
    assert whole.count(MODEL_VALUES) == 1
    assert whole.endswith(CAUTION)
    assert "  Picture: a.png" in lines_of(told, picture="a.png")


def test_a_later_expiry_is_said_to_stand_at_its_model_value() -> None:
    lines = lines_of(told_of(put(term_months=6), call()))
    assert "  At the first expiry, 2024-03-15, put at model value under unchanged vols:" in lines


def test_the_newest_day_as_a_roll_date_is_said() -> None:
    lines = lines_of(told_of(put(), call(), on=market(end="2023-12-15")))
    assert "The newest day is itself a roll date (put, call): that day's roll is shown." in lines
    assert "Live now" not in lines
    other = lines_of(told_of(put(), call(), on=market(end="2024-01-19")))
    assert "The newest day is itself a roll date (call): that day's roll is shown." in other
    assert any(re.match(r"put +2023-12-15 .* stays live$", line) for line in other)


def test_a_gate_that_is_off() -> None:
    gate = Gate(condition=PriceMean(window=20, above=True))
    fallen = market(falls=20.0)
    told = told_of(put(gate=gate), call(gate=gate), money=1e6, on=fallen)
    assert (told["roll"], told["package"]) == (None, None)
    assert [leg["option"] for leg in told["legs"]] == [None, None]
    assert told["holding"]["net"] == 0.0
    lines = lines_of(told)
    assert "By today's data nothing would be opened." in lines
    said = (
        "put: its gate is off (it opens while the price is above its 20-day mean): by today's data nothing would be "
        "opened."
    )
    assert said in lines
    assert any(re.match(r"put +2024-03-15 2024-06-21 +– +– +– +– +– +–$", line) for line in lines)
    assert not any(line.startswith("Share and options after") for line in lines)
    # with the call alone left to open
    half = lines_of(told_of(put(gate=gate), call(), on=fallen))
    assert said in half
    assert "By today's data nothing would be opened." not in half
    assert any("gates are looked at again" in line for line in half)


def test_flags_lags_and_legs_that_are_not_held() -> None:
    stepped = put(strike=Adjusted(rule=PercentOfSpot(90), not_below=93, strike_step=5), reference=True)
    lines = lines_of(told_of(stepped, call(strike=Financed(1.0)), decide_lag=1, crossed=True))
    assert "put: not held, it only lends its strike and cost." in lines
    assert "put: lowest strike." in lines
    assert "Strikes are decided on the close of the trading day before each roll." in lines
    assert "call: the newest close decides its strike." not in lines
    eve = lines_of(told_of(put(), call(), decide_lag=1, on=market(end="2024-01-18")))
    assert "call: the newest close decides its strike." in eve
    assert "put: the newest close decides its strike." not in eve


def test_the_last_ten_rolls_of_each_leg_and_their_sum() -> None:
    found = coming_roll(market(), Overlay(legs=(put(), call(ratio=0.5))), volatility=FLAT_VOL)
    past = last_rolls(found)
    assert list(past) == ["put", "call"]
    for name, position, ratio in (("put", 1, 1.0), ("call", -1, 0.5)):
        leg = found.replay.legs[["put", "call"].index(name)]
        done = np.flatnonzero(~leg.schedule.live)[-10:]
        rolls = past[name]["rolls"]
        assert len(rolls) == 10
        spot = found.replay.spot[leg.opened[done]]
        settled = np.maximum(-position * (found.replay.spot[leg.closed[done]] - leg.strike[done]), 0.0)
        brought = ratio * (position * (settled - leg.premium[done]) - leg.open_cost[done]) / spot
        np.testing.assert_allclose([roll["settled"] for roll in rolls], settled, atol=1e-12)
        np.testing.assert_allclose([roll["profit_of_spot"] for roll in rolls], brought, rtol=1e-12)
        assert past[name]["sum_of_spot"] == pytest.approx(brought.sum(), rel=1e-12)
        assert rolls[-1]["closed"] == str(found.replay.dates[leg.closed[done[-1]]])
    # something was paid, something was not
    assert len({roll["settled"] > 0 for roll in past["put"]["rolls"]}) == 2
    lines = lines_of(next_roll(found, history="mine"))
    sums = [line.split()[-1] for line in lines if line.lstrip().startswith("sum of 10")]
    assert sums == [f"{100 * past[name]['sum_of_spot']:+.2f}%" for name in ("put", "call")]


def test_fewer_rolls_than_ten_and_none() -> None:
    short = market(end="2019-10-10")
    assert len(told_of(call(), on=short)["past"]["call"]["rolls"]) == 3  # opened 21 June, 19 July, 16 August
    told = told_of(put(roll="half"), on=short)
    assert told["past"]["put"] == {"rolls": [], "sum_of_spot": 0.0}
    assert "put: no option has ended yet" in lines_of(told)


def test_what_may_mislead() -> None:
    told = told_of(
        put(early=Early(value_above=3.0)), call(strike=PercentOfSpot(150)), money=15_000.0,
        costs=Costs(half_spread_min=0.2, settlement_fee=10.0),
    )  # fmt: skip
    assert told["warnings"] == [
        "early rules may replace an option before its roll date; that is not foreseen here",
        "the call that is sold brings less than it costs to trade",
        "a holding of 15,000 is too small for one contract of 100 (put)",
        "a holding of 15,000 is too small for one contract of 100 (call)",
        "settlement fees are left out of break-evens and end values",
    ]
    realised = coming_roll(
        market(), Overlay(legs=(put(),)), volatility=Volatility(source=RealisedVolatility(), smile=FLAT)
    )
    (warning,) = next_roll(realised, history="mine")["warnings"]
    assert warning.startswith("options are priced off realised volatility")


@pytest.mark.parametrize("spot", [0.8, 200.0, 41_234.0])
def test_tables_fit_a_terminal_of_80_letters(spot: float) -> None:
    told = told_of(put(ladder=3), call(ladder=12), on=market(spot=spot))
    lines = lines_of(told)
    tables = [line for line in lines if re.match(r"(put|call) \d+ +\d{4}-| +\d{4}-\d\d-\d\d \d{4}-", line)]
    assert len(tables) > 100
    for line in tables:
        assert cell_len(line) <= 80
        assert "…" not in line
        assert len(re.findall(r"\d{4}-\d\d-\d\d", line)) >= 2


def test_stretches_in_words() -> None:
    def words(*parts: tuple[float, float | None, int]) -> str:
        return stretch_words([{"from": low, "to": high, "ahead": side} for low, high, side in parts], 200.0)

    assert words((0.0, None, 0)) == "level at every price"
    assert words((0.0, 190.0, 1), (190.0, 220.0, 0), (220.0, None, -1)) == (
        "ahead below 190.00 (-5.0%), level from there to 220.00 (+10.0%), behind above"
    )
