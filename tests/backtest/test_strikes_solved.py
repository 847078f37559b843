"""Solved strikes of C6: delta, premium percent, financed.

Rung: identity (each strike put back into formulas written here from C5, C7 and C8 gives its target), independent
library (QuantLib's strike of a spot delta, and its Black formula for premiums), behaviour (no solution, order).
The solver itself is in ``test_strikes_solve.py``.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
import numpy.typing as npt
import pytest
import QuantLib as ql
from scipy.stats import norm

from backtest import FLAT, INDEX, STEEP, Costs, Delta, Financed, PremiumPercent, SSVISmile
from backtest.strikes import ABOVE_ALL, BELOW_ALL, OpenState
from tests.reference.open_states import linked_option, open_state

Array = npt.NDArray[np.float64]

EXACT = 1e-10  # C6
SMILES = {"flat": FLAT, "index": INDEX, "steep": STEEP, "call side": SSVISmile(rho=0.4, eta=0.9, gamma=0.3)}
RIGHTS = pytest.mark.parametrize("sign", [1.0, -1.0], ids=["call", "put"])
EACH_SMILE = pytest.mark.parametrize("smile", SMILES.values(), ids=SMILES)


@dataclass(frozen=True)
class Quotes:
    """Random rolls, and what an option is worth on them by the formulas of C5, C7 and C8, written out once more."""

    spot: Array
    rate: Array
    carry: Array
    tau: Array
    vol: Array
    smile: Any
    shift: float = 0.0

    @staticmethod
    def drawn(seed: int, smile: Any, size: int = 300, shift: float = 0.0) -> Quotes:
        rng = np.random.default_rng(seed)
        return Quotes(
            spot=np.exp(rng.uniform(0.0, 9.0, size)),
            rate=rng.uniform(-0.02, 0.15, size),
            carry=rng.uniform(-0.01, 0.08, size),
            tau=np.exp(rng.uniform(math.log(1 / 365), math.log(10.0), size)),
            vol=np.exp(rng.uniform(math.log(0.05), math.log(1.2), size)),
            smile=smile,
            shift=shift,
        )

    def state(self, sign: float, **more: Any) -> OpenState:
        given = {"spot": self.spot, "rate": self.rate, "carry": self.carry, "tau": self.tau, "vol": self.vol}
        return open_state(**given, smile=self.smile, vol_shift=self.shift, sign=sign, **more)

    def forward(self) -> Array:
        return self.spot * np.exp((self.rate - self.carry) * self.tau)

    def sigma(self, strike: Array) -> Array:
        """C7, with the shift of the vols."""
        if self.smile == FLAT:
            return self.vol + self.shift
        theta, x = self.vol**2 * self.tau, np.log(strike / self.forward())
        rho, eta, gamma = self.smile.rho, self.smile.eta, self.smile.gamma
        phi = eta / (theta**gamma * (1 + theta) ** (1 - gamma))
        w = theta / 2 * (1 + rho * phi * x + np.sqrt((phi * x + rho) ** 2 + 1 - rho**2))
        return np.sqrt(w / self.tau) + self.shift

    def delta(self, strike: Array, sign: float) -> Array:
        """C5: absolute spot delta."""
        stdev = self.sigma(strike) * np.sqrt(self.tau)
        return np.exp(-self.carry * self.tau) * norm.cdf(sign * (np.log(self.forward() / strike) / stdev + stdev / 2))

    def mid(self, strike: Array, sign: float, more_vol: float = 0.0) -> Array:
        """C5."""
        stdev, f = (self.sigma(strike) + more_vol) * np.sqrt(self.tau), self.forward()
        d1 = np.log(f / strike) / stdev + stdev / 2
        value = sign * (f * norm.cdf(sign * d1) - strike * norm.cdf(sign * (d1 - stdev)))
        return np.exp(-self.rate * self.tau) * value

    def cost(self, costs: Costs, strike: Array, sign: float) -> Array:
        """C8: the largest of three half-spreads, and the commission."""
        mid = self.mid(strike, sign)
        of_vol = self.mid(strike, sign, costs.half_spread_vol / 100) - mid
        largest = np.maximum(np.maximum(costs.half_spread_percent / 100 * mid, of_vol), costs.half_spread_min)
        return largest + costs.commission / costs.multiplier


def check_side(strike: Array, low: Array, high: Array, sign: float) -> Array:
    """Which rolls have a strike. Those without must have the end that is nearest to what was asked for.

    ``low`` and ``high`` are the figure less its target at 1% and 1000% of spot, where a put is worth least and most.
    """
    least, most = (low, high) if sign < 0.0 else (high, low)
    cheapest, dearest = (BELOW_ALL, ABOVE_ALL) if sign < 0.0 else (ABOVE_ALL, BELOW_ALL)
    expected = np.where(least > 0.0, cheapest, np.where(most < 0.0, dearest, np.nan))
    solved = np.isnan(expected)
    assert strike[~solved].tolist() == expected[~solved].tolist()
    return solved


# ---------------------------------------------------------------- delta

DELTAS = [0.001, 0.02, 0.1, 0.25, 0.5, 0.62, 0.9, 0.999]


@RIGHTS
@EACH_SMILE
@pytest.mark.parametrize("shift", [0.0, 0.03, -0.015], ids=["", "3 points up", "1.5 points down"])
def test_delta_is_the_one_asked_for(smile: Any, sign: float, shift: float) -> None:
    quotes = Quotes.drawn(1, smile, shift=shift)
    solved = 0
    for delta in DELTAS:
        strike = Delta(delta).strikes(quotes.state(sign))
        ends = [quotes.delta(quotes.spot * share, sign) - delta for share in (0.01, 10.0)]
        inside = check_side(strike, *ends, sign)
        found = replace_rolls(quotes, inside).delta(strike[inside], sign)
        np.testing.assert_allclose(found, delta, rtol=0.0, atol=EXACT)
        solved += int(inside.sum())
    assert solved > 0.75 * len(DELTAS) * len(quotes.spot)


def replace_rolls(quotes: Quotes, rolls: Array) -> Quotes:
    some = {name: getattr(quotes, name)[rolls] for name in ("spot", "rate", "carry", "tau", "vol")}
    return replace(quotes, **some)


@RIGHTS
def test_delta_by_quantlib(sign: float) -> None:
    """Spot delta without premium adjustment, flat vol; QuantLib inverts the normal distribution to about 1e-9."""
    quotes, right = Quotes.drawn(2, FLAT), ql.Option.Call if sign > 0 else ql.Option.Put
    for delta in (0.05, 0.25, 0.45):
        strike = Delta(delta).strikes(quotes.state(sign))
        for n in range(len(strike)):
            discount, growth = math.exp(-quotes.rate[n] * quotes.tau[n]), math.exp(-quotes.carry[n] * quotes.tau[n])
            stdev = quotes.vol[n] * math.sqrt(quotes.tau[n])
            black = ql.BlackDeltaCalculator(right, ql.DeltaVolQuote.Spot, quotes.spot[n], discount, growth, stdev)
            if not 0.01 < black.strikeFromDelta(sign * delta) / quotes.spot[n] < 10.0:
                continue
            assert strike[n] == pytest.approx(black.strikeFromDelta(sign * delta), rel=1e-8)
            # its delta of our strike has no such inverse in it
            assert sign * black.deltaFromStrike(strike[n]) == pytest.approx(delta, abs=EXACT)


def test_deltas_that_the_yield_leaves_no_room_for() -> None:
    # a yield of 5% over ten years leaves exp(-0.5) = 0.607 of a share: no strike has a delta of 0.7
    state = {"spot": [100.0, 100.0], "carry": 0.05, "tau": [10.0, 1.0]}
    calls, puts = (Delta(0.7).strikes(open_state(**state, sign=sign)) for sign in (1.0, -1.0))
    assert calls[0] == BELOW_ALL  # a call of ever lower strike comes nearest
    assert puts[0] == ABOVE_ALL
    assert 60.0 < calls[1] < 100.0 < puts[1] < 150.0


# ---------------------------------------------------------------- premium

PREMIUMS = [0.001, 0.05, 1.0, 4.0, 25.0, 90.0]


@RIGHTS
@EACH_SMILE
@pytest.mark.parametrize("shift", [0.0, 0.03, -0.015], ids=["", "3 points up", "1.5 points down"])
def test_premium_is_the_one_asked_for(smile: Any, sign: float, shift: float) -> None:
    quotes = Quotes.drawn(3, smile, shift=shift)
    solved = 0
    for percent in PREMIUMS:
        strike = PremiumPercent(percent).strikes(quotes.state(sign))
        ends = [quotes.mid(quotes.spot * share, sign) - percent / 100 * quotes.spot for share in (0.01, 10.0)]
        inside = check_side(strike, *ends, sign)
        rolls = replace_rolls(quotes, inside)
        error = np.abs(rolls.mid(strike[inside], sign) - percent / 100 * rolls.spot)
        assert (error <= EXACT * percent / 100 * rolls.spot).all()
        solved += int(inside.sum())
    assert solved > 0.7 * len(PREMIUMS) * len(quotes.spot)


@RIGHTS
def test_premium_by_quantlib(sign: float) -> None:
    quotes, right = Quotes.drawn(4, FLAT), ql.Option.Call if sign > 0 else ql.Option.Put
    forward, stdev = quotes.forward(), quotes.vol * np.sqrt(quotes.tau)
    discount = np.exp(-quotes.rate * quotes.tau)
    for percent in (0.1, 1.0, 3.0):
        strike = PremiumPercent(percent).strikes(quotes.state(sign))
        solved = np.flatnonzero(np.isfinite(strike) & (strike > 0.0))
        assert solved.size > 250
        for n in solved:
            value = ql.blackFormula(right, strike[n], forward[n], stdev[n], discount[n])
            assert value == pytest.approx(percent / 100 * quotes.spot[n], rel=EXACT)


# ---------------------------------------------------------------- financed

COSTS = {
    "none": Costs(half_spread_vol=0.0),
    "vol": Costs(half_spread_vol=0.8),
    "percent": Costs(half_spread_vol=0.0, half_spread_percent=7.0),
    "least": Costs(half_spread_vol=0.0, half_spread_min=0.05),
    "commission": Costs(half_spread_vol=0.0, commission=1.5, multiplier=10.0),
    "all": Costs(half_spread_vol=0.5, half_spread_percent=5.0, half_spread_min=0.02, commission=0.65),
    "dear": Costs(half_spread_vol=20.0, half_spread_percent=40.0),
}


@RIGHTS
@EACH_SMILE
@pytest.mark.parametrize("costs", COSTS.values(), ids=COSTS)
def test_financed_nets_to_its_target(smile: Any, sign: float, costs: Costs) -> None:
    quotes = Quotes.drawn(5, smile, size=120, shift=0.01 if costs.half_spread_percent else 0.0)
    rng = np.random.default_rng(6)
    size, solved = len(quotes.spot), 0
    for share in (0.2, 1.0, 3.0):
        premium, cost = (rng.uniform(0.0, top, size) * quotes.spot for top in (0.04, 0.003))
        sold = rng.uniform(0.0, 0.01, size) * quotes.spot
        linked = {
            2: linked_option(premium=premium, cost=cost, ratio=0.8, months=3.0),
            5: linked_option(premium=sold, cost=cost / 2, ratio=0.5, months=6.0, direction=-1.0),
        }
        strike = Financed(share, (2, 5)).strikes(quotes.state(sign, linked=linked, costs=costs, ratio=1.25, months=1.0))
        # 0.8 puts of three months, 0.5 sold of six, paid by 1.25 sold each month
        target = share * (0.8 * (premium + cost) / 3.0 + 0.5 * (cost / 2 - sold) / 6.0) / 1.25
        due = target > 0.0
        assert (strike[~due] == (ABOVE_ALL if sign > 0.0 else BELOW_ALL)).all()

        rolls, strike, target = replace_rolls(quotes, due), strike[due], target[due]
        ends = [
            rolls.mid(rolls.spot * end, sign) - rolls.cost(costs, rolls.spot * end, sign) - target
            for end in (0.01, 10.0)
        ]
        inside = check_side(strike, *ends, sign)
        rolls, strike, target = replace_rolls(rolls, inside), strike[inside], target[inside]
        net = rolls.mid(strike, sign) - rolls.cost(costs, strike, sign)
        assert (np.abs(net - target) <= EXACT * target).all()
        solved += len(net)
    assert solved > 200


@RIGHTS
def test_what_cannot_be_financed(sign: float) -> None:
    """More than any option brings: the dearest one; and all of the mid gone in costs: the same."""
    dearest = BELOW_ALL if sign > 0.0 else ABOVE_ALL
    paid = {1: linked_option(strike=[95.0, 95.0], premium=[2_000.0, 1.0], months=1.0)}
    state = open_state(spot=[100.0, 100.0], sign=sign, linked=paid, costs=COSTS["none"])
    found = Financed(1.0).strikes(state)
    assert found[0] == dearest
    assert 50.0 < found[1] < 200.0
    greedy = replace(state, costs=Costs(half_spread_percent=100.0))
    assert Financed(1.0).strikes(greedy).tolist() == [dearest, dearest]


@RIGHTS
def test_nothing_to_finance(sign: float) -> None:
    """No live option, one that cost nothing, and one that brought more than it cost: the cheapest option."""
    cheapest = ABOVE_ALL if sign > 0.0 else BELOW_ALL
    bought = {1: linked_option(strike=[math.nan, 95.0], premium=[math.nan, 0.0], cost=[math.nan, 0.0])}
    assert Financed(1.0).strikes(open_state(spot=[100.0, 100.0], sign=sign, linked=bought)).tolist() == [cheapest] * 2
    sold = {1: linked_option(premium=2.0, cost=0.1, direction=-1.0)}
    assert Financed(1.0).strikes(open_state(spot=100.0, sign=sign, linked=sold)).tolist() == [cheapest]


# ---------------------------------------------------------------- order, and legs solved together


def parameters(kind: str) -> list[float]:
    return {"delta": DELTAS, "premium": PREMIUMS, "financed": [0.01, 0.1, 0.5, 1.0, 2.0, 10.0]}[kind]


def rule_of(kind: str, value: float) -> Any:
    return {"delta": Delta, "premium": PremiumPercent, "financed": Financed}[kind](value)


@RIGHTS
@EACH_SMILE
@pytest.mark.parametrize("kind", ["delta", "premium", "financed"])
def test_more_is_asked_for_nearer_the_money_and_beyond(kind: str, smile: Any, sign: float) -> None:
    """A put's strike rises with the parameter, from no strike low enough to none high enough; a call's falls."""
    quotes = Quotes.drawn(7, smile)
    linked = {1: linked_option(premium=0.03 * quotes.spot, cost=0.001 * quotes.spot)}
    state = quotes.state(sign, linked=linked, costs=COSTS["all"])
    strikes = np.array([rule_of(kind, value).strikes(state) for value in parameters(kind)])
    before, after = (strikes[:-1], strikes[1:]) if sign < 0.0 else (strikes[1:], strikes[:-1])
    assert (before <= after).all()
    inside = np.isfinite(strikes) & (strikes > 0.0)
    assert (before < after)[inside[1:] & inside[:-1]].all()
    np.testing.assert_array_less(quotes.spot * 0.01 * (1 - 1e-12), np.where(inside, strikes, np.inf).min(axis=0))
    np.testing.assert_array_less(np.where(inside, strikes, 0.0).max(axis=0), quotes.spot * 10.0 * (1 + 1e-12))


@pytest.mark.parametrize("kind", ["delta", "premium", "financed"])
def test_legs_solved_together_are_the_single_ones_bit_for_bit(kind: str) -> None:
    quotes = Quotes.drawn(9, INDEX, size=40)
    rng = np.random.default_rng(10)
    rules, states = [], []
    for value in [*parameters(kind), *parameters(kind)] * 8:  # more legs than are solved in one array
        linked = {1: linked_option(premium=rng.uniform(0.0, 0.05, 40) * quotes.spot)}
        costs = COSTS["all"] if rng.random() < 0.5 else COSTS["none"]
        rules.append(rule_of(kind, value))
        states.append(
            quotes.state(float(rng.choice([1.0, -1.0])), linked=linked, costs=costs, ratio=rng.uniform(0.5, 2))
        )
    together = type(rules[0]).together(rules, states)
    assert together.shape == (len(rules), 40)
    for row, rule, state in zip(together, rules, states, strict=True):
        assert row.tolist() == rule.strikes(state).tolist()


@pytest.mark.parametrize("kind", ["delta", "premium", "financed"])
def test_without_a_vol_there_is_no_strike(kind: str) -> None:
    """25 points taken from a vol of 20 leave none: NaN, never a strike; the roll beside it has one."""
    state = open_state(spot=[100.0, 100.0], vol=[0.2, 0.4], vol_shift=-0.25, linked={1: linked_option(premium=3.0)})
    found = rule_of(kind, 0.25).strikes(state)
    assert np.isnan(found[0])
    assert 50.0 < found[1] < 100.0
