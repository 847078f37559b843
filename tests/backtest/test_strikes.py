"""Strike rules of C6.

Rung: identity (strikes worked by hand, alone and at the rolls of a replay) and behaviour (messages, the catalogue).
"""

from __future__ import annotations

import dataclasses
import math
from datetime import date
from itertools import pairwise
from typing import Any

import numpy as np
import numpy.typing as npt
import pandas as pd
import pytest

from backtest import FLAT, Leg, Market, Overlay, PercentOfForward, PercentOfSpot, Volatility, replay
from backtest.errors import OverlayError
from backtest.strikes import STRIKE_RULES, OpenState, StrikeRule

Array = npt.NDArray[np.float64]


def opens(sign: float = -1.0) -> OpenState:
    """Two rolls: spot 200 and 50, forward 202 and 49."""
    return OpenState(
        spot=np.array([200.0, 50.0]),
        forward=np.array([202.0, 49.0]),
        tau_years=np.array([0.25, 0.25]),
        smile=FLAT.slice(np.array([0.01, 0.01])),
        sign=sign,
    )


@pytest.mark.parametrize(
    ("rule", "expected"),
    [
        pytest.param(PercentOfSpot(95), [190.0, 47.5], id="95% of spot"),
        pytest.param(PercentOfSpot(100), [200.0, 50.0], id="at the money"),
        pytest.param(PercentOfSpot(107.5), [215.0, 53.75], id="107.5% of spot"),
        pytest.param(PercentOfForward(90), [181.8, 44.1], id="90% of forward"),
        pytest.param(PercentOfForward(100), [202.0, 49.0], id="at the money forward"),
        pytest.param(PercentOfForward(1), [2.02, 0.49], id="the smallest percent"),
        pytest.param(PercentOfSpot(1000.0), [2000.0, 500.0], id="the largest percent"),
    ],
)
@pytest.mark.parametrize("sign", [1.0, -1.0], ids=["call", "put"])
def test_percents(rule: StrikeRule, expected: list[float], sign: float) -> None:
    state = opens(sign)
    strikes = rule.strikes(state)
    np.testing.assert_allclose(strikes, expected, rtol=1e-15)
    # the state is shared by all rules: none may write into it
    strikes[:] = 0.0
    assert state.spot.tolist() == [200.0, 50.0]
    assert state.forward.tolist() == [202.0, 49.0]


@pytest.mark.parametrize(
    ("strike", "of_forward"),
    [
        pytest.param(PercentOfSpot(95), False, id="of spot"),
        pytest.param(PercentOfForward(95), True, id="of forward"),
    ],
)
def test_strikes_at_the_rolls_of_a_replay(strike: StrikeRule, of_forward: bool) -> None:
    # 5% a year effective and a 2% yield: F = S (1.05 / 1.02)^(days / 365), to the expiry three months ahead
    expiries = ["2021-03-19", "2021-06-18", "2021-09-17"]  # third Fridays, 91 days apart
    days = pd.bdate_range("2021-03-01", "2021-09-30")
    close = pd.Series(np.linspace(100.0, 130.0, len(days)), index=days)
    market = Market.from_frame(pd.DataFrame({"close": close, "vol": 0.2}), rate=0.05, dividend_yield=0.02)
    put = Leg(position="long", right="put", roll="quarter", strike=strike)
    rolls = replay(market, Overlay(legs=(put,)), volatility=Volatility(smile=FLAT)).rolls_frame()

    assert rolls["opened"].dt.strftime("%Y-%m-%d").tolist() == expiries
    assert [(date.fromisoformat(b) - date.fromisoformat(a)).days for a, b in pairwise(expiries)] == [91, 91]
    spot = close[expiries].to_numpy()[:2]
    growth = (1.05 / 1.02) ** (91 / 365) if of_forward else 1.0
    np.testing.assert_allclose(rolls["strike"].to_numpy()[:2], 0.95 * spot * growth, rtol=1e-14)


# ---------------------------------------------------------------- what a percent may be


@pytest.mark.parametrize("name", ["percent_of_spot", "percent_of_forward"])
@pytest.mark.parametrize(
    ("percent", "shown"),
    [
        pytest.param(0.95, "0.95", id="a fraction"),
        pytest.param(0, "0", id="zero"),
        pytest.param(-95, "-95", id="negative"),
        pytest.param(1000.5, "1000.5", id="too large"),
        pytest.param(math.nan, "nan", id="nan"),
        pytest.param(math.inf, "inf", id="infinite"),
        pytest.param(10**400, "1" + "0" * 400, id="too large for a float"),
        pytest.param("95", "'95'", id="text"),
        pytest.param(True, "True", id="a truth value"),
        pytest.param(None, "None", id="nothing"),
    ],
)
def test_percents_out_of_range(name: str, percent: Any, shown: str) -> None:
    with pytest.raises(OverlayError) as caught:
        STRIKE_RULES[name](percent)
    assert str(caught.value) == (
        f"{name} is {shown}; it takes a number from 1 to 1000, in percent (95 is five percent below)"
    )
    assert caught.value.field == name


# ---------------------------------------------------------------- the catalogue


def test_names_in_overlay_files() -> None:
    assert STRIKE_RULES["percent_of_spot"] is PercentOfSpot
    assert STRIKE_RULES["percent_of_forward"] is PercentOfForward


@pytest.mark.parametrize("name", ["percent_of_spot", "percent_of_forward"])
def test_rules_are_values(name: str) -> None:
    """Legs alike are priced once, so a rule compares and hashes by its number and cannot change."""
    rule = STRIKE_RULES[name]
    (only,) = dataclasses.fields(rule)
    assert rule(95) == rule(95.0)
    assert hash(rule(95)) == hash(rule(95.0))
    assert rule(95) != rule(96)
    with pytest.raises(dataclasses.FrozenInstanceError):
        setattr(rule(95), only.name, 96)


def test_rules_of_different_kinds_differ() -> None:
    assert PercentOfSpot(95) != PercentOfForward(95)
