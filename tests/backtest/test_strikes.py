"""Strike rules of C6 that need no solving: percents, deviations, mirrored; what each number may be.

Rung: identity (strikes worked by hand, alone and at the rolls of a replay) and behaviour (messages).
Rules that are solved are in ``test_strikes_solved.py``, limits around rules in ``test_strikes_adjusted.py``.
"""

from __future__ import annotations

import dataclasses
import math
from datetime import date
from itertools import pairwise
from statistics import NormalDist
from typing import Any

import numpy as np
import numpy.typing as npt
import pandas as pd
import pytest

from backtest import (
    FLAT,
    INDEX,
    Delta,
    Deviations,
    Financed,
    Leg,
    Market,
    Mirrored,
    Overlay,
    PercentOfForward,
    PercentOfSpot,
    PremiumPercent,
    Volatility,
    replay,
)
from backtest.errors import OverlayError
from backtest.strikes import ABOVE_ALL, BELOW_ALL, STRIKE_RULES, OpenState, StrikeRule
from tests.reference.open_states import linked_option, open_state

Array = npt.NDArray[np.float64]


def opens(sign: float = -1.0, smile: Any = FLAT, vol_shift: float = 0.0) -> OpenState:
    """Two rolls: spot 200 and 50, forward 202 and 49, three months at 20 vol: a deviation of 0.2 sqrt(0.25) = 0.1."""
    rate = np.log(np.array([202.0 / 200.0, 49.0 / 50.0])) / 0.25
    return open_state(spot=[200.0, 50.0], rate=rate, smile=smile, vol_shift=vol_shift, sign=sign)


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
        pytest.param(Deviations(0), [202.0, 49.0], id="no deviation"),
    ],
)
@pytest.mark.parametrize("sign", [1.0, -1.0], ids=["call", "put"])
def test_percents(rule: StrikeRule, expected: list[float], sign: float) -> None:
    state = opens(sign)
    spot, forward = state.spot.tolist(), state.forward.tolist()
    strikes = rule.strikes(state)
    np.testing.assert_allclose(strikes, expected, rtol=1e-14)
    # the state is shared by all rules: none may write into it
    strikes[:] = 0.0
    assert state.spot.tolist() == spot
    assert state.forward.tolist() == forward


@pytest.mark.parametrize("smile", [FLAT, INDEX], ids=["flat", "index"])
@pytest.mark.parametrize(
    ("deviations", "sign", "factor"),
    [
        pytest.param(1.0, -1.0, math.exp(-0.1), id="put one below"),
        pytest.param(1.0, 1.0, math.exp(0.1), id="call one above"),
        pytest.param(-0.5, -1.0, math.exp(0.05), id="put in the money"),
        pytest.param(-0.5, 1.0, math.exp(-0.05), id="call in the money"),
        pytest.param(2.5, -1.0, math.exp(-0.25), id="put two and a half below"),
    ],
)
def test_deviations_count_at_the_money_vol_whatever_the_smile(
    smile: Any, deviations: float, sign: float, factor: float
) -> None:
    found = Deviations(deviations).strikes(opens(sign, smile))
    np.testing.assert_allclose(found, [202.0 * factor, 49.0 * factor], rtol=1e-14)


def test_deviations_see_the_shift_of_the_vols() -> None:
    # two points more: 0.22 sqrt(0.25) = 0.11
    found = Deviations(1.0).strikes(opens(-1.0, vol_shift=0.02))
    np.testing.assert_allclose(found, [202.0 * math.exp(-0.11), 49.0 * math.exp(-0.11)], rtol=1e-14)


def test_deviations_of_each_options_own_time() -> None:
    # 0.2 sqrt(1) = 0.2 and 0.4 sqrt(0.25) = 0.2; 0.3 sqrt(0.04) = 0.06
    state = open_state(spot=100.0, tau=[1.0, 0.25, 0.04], vol=[0.2, 0.4, 0.3], sign=1.0)
    found = Deviations(1.0).strikes(state)
    np.testing.assert_allclose(found, 100.0 * np.exp([0.2, 0.2, 0.06]), rtol=1e-14)


# ---------------------------------------------------------------- mirrored


@pytest.mark.parametrize("sign", [1.0, -1.0], ids=["call", "put"])
def test_mirrored(sign: float) -> None:
    # 202 * 202 / 190 = 214.752..., 49 * 49 / 51 = 47.078...
    state = dataclasses.replace(opens(sign), linked={3: linked_option(strike=[190.0, 51.0])})
    found = Mirrored(3).strikes(state)
    np.testing.assert_allclose(found, [40804.0 / 190.0, 2401.0 / 51.0], rtol=1e-14)


def test_mirrored_is_as_far_from_the_forward_in_logarithms() -> None:
    rng = np.random.default_rng(3)
    for _ in range(200):
        rate, tau = rng.uniform(-0.02, 0.15), rng.uniform(1 / 365, 10.0)
        spot, other = np.exp(rng.uniform(0.0, 8.0, 20)), np.exp(rng.uniform(0.0, 8.0, 20))
        state = open_state(spot=spot, rate=rate, tau=tau, linked={1: linked_option(strike=other)})
        forward = spot * math.exp(rate * tau)
        found = np.log(Mirrored(1).strikes(state) / forward)
        np.testing.assert_allclose(found, -np.log(other / forward), rtol=0.0, atol=1e-14)


@pytest.mark.parametrize(("sign", "nothing"), [(1.0, ABOVE_ALL), (-1.0, BELOW_ALL)], ids=["call", "put"])
def test_mirrored_without_the_other_option(sign: float, nothing: float) -> None:
    state = dataclasses.replace(opens(sign), linked={1: linked_option(strike=[math.nan, 50.0])})
    assert Mirrored(1).strikes(state).tolist() == pytest.approx([nothing, 2401.0 / 50.0], rel=1e-14)


# ---------------------------------------------------------------- at the rolls of a replay


def closed_form_delta(delta: float, sign: float, tau: float) -> float:
    """Strike over forward at a flat 20 vol and a 2% yield, by the inverse of the normal distribution (C5)."""
    stdev = 0.2 * math.sqrt(tau)
    d1 = sign * NormalDist().inv_cdf(delta * 1.02**tau)
    return math.exp(0.5 * stdev**2 - d1 * stdev)


TAU = 91 / 365
ROLL_CASES = [
    pytest.param("put", PercentOfSpot(95), 0.95 * (1.02 / 1.05) ** TAU, id="of spot"),
    pytest.param("put", PercentOfForward(95), 0.95, id="of forward"),
    pytest.param("put", Deviations(1.5), math.exp(-1.5 * 0.2 * math.sqrt(TAU)), id="deviations, put"),
    pytest.param("call", Deviations(1.5), math.exp(1.5 * 0.2 * math.sqrt(TAU)), id="deviations, call"),
    pytest.param("put", Delta(0.25), closed_form_delta(0.25, -1.0, TAU), id="delta, put"),
    pytest.param("call", Delta(0.25), closed_form_delta(0.25, 1.0, TAU), id="delta, call"),
    pytest.param("call", Delta(0.8), closed_form_delta(0.8, 1.0, TAU), id="delta, call in the money"),
]


@pytest.mark.parametrize(("right", "strike", "of_forward"), ROLL_CASES)
def test_strikes_at_the_rolls_of_a_replay(right: Any, strike: StrikeRule, of_forward: float) -> None:
    # 5% a year effective and a 2% yield: F = S (1.05 / 1.02)^(days / 365), to the expiry three months ahead
    expiries = ["2021-03-19", "2021-06-18", "2021-09-17"]  # third Fridays, 91 days apart
    days = pd.bdate_range("2021-03-01", "2021-09-30")
    close = pd.Series(np.linspace(100.0, 130.0, len(days)), index=days)
    market = Market.from_frame(pd.DataFrame({"close": close, "vol": 0.2}), rate=0.05, dividend_yield=0.02)
    leg = Leg(position="long", right=right, roll="quarter", strike=strike)
    rolls = replay(market, Overlay(legs=(leg,)), volatility=Volatility(smile=FLAT)).rolls_frame()

    assert rolls["opened"].dt.strftime("%Y-%m-%d").tolist() == expiries
    assert [(date.fromisoformat(b) - date.fromisoformat(a)).days for a, b in pairwise(expiries)] == [91, 91]
    forward = close[expiries].to_numpy()[:2] * (1.05 / 1.02) ** TAU
    np.testing.assert_allclose(rolls["strike"].to_numpy()[:2], forward * of_forward, rtol=1e-13)


# ---------------------------------------------------------------- what the number of a rule may be

PERCENT = "takes a number from 1 to 1000, in percent (95 is five percent below)"
LIMITS: dict[str, tuple[list[Any], str]] = {
    "percent_of_spot": ([0.95, 0, -95, 1000.5], PERCENT),
    "percent_of_forward": ([0.95, 0, -95, 1000.5], PERCENT),
    "deviations": ([-10.5, 10.5], "takes a number from -10 to 10 (at-the-money standard deviations)"),
    "delta": ([0, 0.0009, 0.9991, 1, 25, -0.25], "takes a number from 0.001 to 0.999 (0.25 is a 25-delta option)"),
    "premium_percent": ([0, 0.0009, 90.5, -1], "takes a number from 0.001 to 90 (percent of spot)"),
    "financed_share": ([0, 0.00009, 10.5, -1], "takes a number from 0.0001 to 10 (1 pays for all of it)"),
    "mirrored_leg": ([0, -1, 201, 1.5, 1.0], "takes a whole number from 1 to 200 (the number of a leg)"),
}
NO_NUMBERS = [math.nan, math.inf, -math.inf, 10**400, "95", True, None, [95]]


@pytest.mark.parametrize(
    ("name", "number"),
    [(name, number) for name, (outside, _) in LIMITS.items() for number in [*outside, *NO_NUMBERS]],
    ids=lambda value: str(value)[:20],
)
def test_numbers_that_are_none(name: str, number: Any) -> None:
    with pytest.raises(OverlayError) as caught:
        STRIKE_RULES[name](number)
    assert str(caught.value) == f"{name} is {number!r}; it {LIMITS[name][1]}"
    assert caught.value.field == name


@pytest.mark.parametrize(
    ("kind", "ends"),
    [
        (PercentOfSpot, (1, 1000)),
        (PercentOfForward, (1, 1000)),
        (Deviations, (-10, 10)),
        (Delta, (0.001, 0.999)),
        (PremiumPercent, (0.001, 90)),
        (Financed, (0.0001, 10)),
        (Mirrored, (1, 200)),
    ],
)
def test_numbers_at_their_limits(kind: Any, ends: tuple[float, float]) -> None:
    (first, *_) = dataclasses.fields(kind)
    for end in (*ends, np.int64(ends[1]) if kind is Mirrored else np.float64(ends[1])):
        assert getattr(kind(end), first.name) == end


@pytest.mark.parametrize(
    ("legs", "message"),
    [
        ((), "of_legs is (); it takes numbers of legs, such as [1]"),
        (1, "of_legs is 1; it takes numbers of legs, such as [1]"),
        ("12", "of_legs is '12'; it takes numbers of legs, such as [1]"),
        (None, "of_legs is None; it takes numbers of legs, such as [1]"),
        ({1}, "of_legs is {1}; it takes numbers of legs, such as [1]"),
        ((0,), "of_legs is 0; it takes a whole number from 1 to 200 (the number of a leg)"),
        ((1, 201), "of_legs is 201; it takes a whole number from 1 to 200 (the number of a leg)"),
        ((1, "2"), "of_legs is '2'; it takes a whole number from 1 to 200 (the number of a leg)"),
        ((1, [2]), "of_legs is [2]; it takes a whole number from 1 to 200 (the number of a leg)"),
        ((True,), "of_legs is True; it takes a whole number from 1 to 200 (the number of a leg)"),
        ((1, 2, 1), "of_legs is [1, 2, 1]; each leg once"),
    ],
)
def test_legs_that_cannot_be_financed(legs: Any, message: str) -> None:
    with pytest.raises(OverlayError) as caught:
        Financed(1.0, legs)
    assert (str(caught.value), caught.value.field) == (message, "of_legs")


# ---------------------------------------------------------------- rules are values


@pytest.mark.parametrize(("name", "number"), [("delta", 0.25), ("deviations", 2), ("percent_of_spot", 95)])
def test_rules_are_values(name: str, number: float) -> None:
    """Legs alike are priced once, so a rule compares and hashes by its number and cannot change."""
    rule = STRIKE_RULES[name]
    (only,) = dataclasses.fields(rule)
    assert rule(number) == rule(float(number))
    assert hash(rule(number)) == hash(rule(float(number)))
    assert rule(number) != rule(number * 1.01)
    with pytest.raises(dataclasses.FrozenInstanceError):
        setattr(rule(number), only.name, number)
    assert not hasattr(rule(number), "__dict__")


def test_rules_of_different_kinds_differ() -> None:
    assert len({PercentOfSpot(9), PercentOfForward(9), Deviations(9), Financed(9), Mirrored(9), PremiumPercent(9)}) == 6


def test_financed_legs_of_any_sequence_become_a_tuple() -> None:
    rule: Any = Financed(1.0, [2, np.int64(1)])  # type: ignore[arg-type]
    assert rule.legs == rule.named_legs == (2, 1)
    assert rule == Financed(1.0, (2, 1)) != Financed(1.0, (1, 2))
    assert Financed(1.0).legs == (1,)
    assert Mirrored(4).named_legs == (4,)
