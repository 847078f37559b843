"""Strikes of the slow twin: every rule of C6, those that need it solved by Brent's method, and the wrapper around them.

Plain Python, borrowing nothing from ``backtest`` but the fields of its rules; see ``slow_twin.py``.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from datetime import date
from typing import Any

from scipy.optimize import brentq

from .slow_lines import Line, roll_months
from .slow_prices import Contract, Pricer

# Solved strikes are looked for between 1% and 1000% of spot; a rule without a solution takes one of these.
LOWEST, HIGHEST = 0.01, 10.0


@dataclass
class Linked:
    """The option that is live in a leg which a rule names, after the day's trades: its strike, and what it cost."""

    line: Line
    strike: float
    premium: float
    cost: float


@dataclass
class Wanted:
    """An option to be struck, as things stand on the decision day ``t``."""

    t: int
    line: Line
    expiry: date
    linked: Callable[[int], Linked | None]  # by the number of the leg; None where it holds no option
    pricer: Pricer
    costs: Any

    @property
    def spot(self) -> float:
        return self.pricer.history.close[self.t]

    @property
    def right(self) -> str:
        return self.line.leg.right

    def struck(self, strike: float) -> Contract:
        return Contract(self.right, self.expiry, strike)


def cheapest(right: str) -> float:
    """The end of the search, as a share of spot, at which an option is worth least."""
    return LOWEST if right == "put" else HIGHEST


def dearest(right: str) -> float:
    return HIGHEST if right == "put" else LOWEST


def solved(wanted: Wanted, figure: Callable[[Contract], float], target: float) -> tuple[float, bool]:
    """The strike at which a figure that grows with the option's value meets its target; whether there is one."""

    def excess(log_moneyness: float) -> float:
        return figure(wanted.struck(wanted.spot * math.exp(log_moneyness))) - target

    if excess(math.log(dearest(wanted.right))) < 0.0:  # even the dearest option has too little
        return wanted.spot * dearest(wanted.right), False
    if excess(math.log(cheapest(wanted.right))) > 0.0:  # even the cheapest has too much
        return wanted.spot * cheapest(wanted.right), False
    root = brentq(excess, math.log(LOWEST), math.log(HIGHEST), xtol=1e-16, rtol=1e-15)
    return wanted.spot * math.exp(root), True


def strike_of_rule(rule: Any, wanted: Wanted) -> tuple[float, bool]:
    """The strike of a rule without its wrapper, and whether the rule has a solution (C6)."""
    t, pricer, costs = wanted.t, wanted.pricer, wanted.costs
    forward = pricer.forward(t, wanted.expiry)
    name = type(rule).__name__
    if name == "PercentOfSpot":
        return wanted.spot * rule.percent / 100.0, True
    if name == "PercentOfForward":
        return forward * rule.percent / 100.0, True
    if name == "Deviations":
        deviation = pricer.sigma(t, wanted.struck(forward)) * math.sqrt(pricer.tau(t, wanted.expiry))
        away = -1.0 if wanted.right == "put" else 1.0
        return forward * math.exp(away * rule.deviations * deviation), True
    if name == "Delta":
        return solved(wanted, lambda option: abs(pricer.delta(t, option)), rule.delta)
    if name == "PremiumPercent":
        return solved(wanted, lambda option: pricer.mid(t, option), rule.percent / 100.0 * wanted.spot)
    if name == "Mirrored":
        other = wanted.linked(rule.leg)
        if other is None:
            return wanted.spot * cheapest(wanted.right), False
        return forward * forward / other.strike, True
    assert name == "Financed"
    target = rule.share * sum(to_finance(wanted, wanted.linked(number)) for number in rule.legs)
    if target <= 0.0:  # nothing to finance
        return wanted.spot * cheapest(wanted.right), False
    ratio = wanted.line.leg.ratio
    return solved(
        wanted, lambda option: ratio * (pricer.mid(t, option) - pricer.trading_cost(t, option, costs)), target
    )


def to_finance(wanted: Wanted, other: Linked | None) -> float:
    """What one option of the named leg cost with half-spread, per share, for the length of one roll of ours."""
    if other is None:
        return 0.0
    paid = other.line.leg.ratio * (other.line.sign * other.premium + other.cost)
    return paid * roll_months(wanted.line.leg) / roll_months(other.line.leg)


@dataclass
class Strike:
    """A strike as agreed: the spot at which the rule last set it, and what has to be said about it."""

    strike: float
    spot_ref: float
    flags: set[str]


def agreed_strike(wanted: Wanted, replaced: Strike | None) -> Strike:
    """The strike of a leg's rule with what is wrapped around it; ``replaced`` is what the leg held to this close."""
    rule, spot = wanted.line.leg.strike, wanted.spot
    is_wrapped = type(rule).__name__ == "Adjusted"
    strike, has_solution = strike_of_rule(rule.rule if is_wrapped else rule, wanted)
    agreed = Strike(strike, spot, set())
    if not has_solution:
        agreed.flags = {"no solution", "lowest strike" if strike < spot else "highest strike"}
    if is_wrapped:
        adjust(agreed, rule, wanted, replaced)
    return agreed


def adjust(agreed: Strike, rule: Any, wanted: Wanted, replaced: Strike | None) -> None:
    """What is wrapped around a rule, each in its turn on what the one before has left."""
    spot = wanted.spot
    if rule.kept_until_moved is not None and replaced is not None:
        moved = abs(spot / replaced.spot_ref - 1.0)
        if moved < rule.kept_until_moved / 100.0:
            agreed.strike, agreed.spot_ref, agreed.flags = replaced.strike, replaced.spot_ref, {"strike kept"}
    if rule.ratchet and replaced is not None:
        before = agreed.strike
        if wanted.right == "put" and replaced.strike < spot:
            agreed.strike = max(before, replaced.strike)
        if wanted.right == "call" and replaced.strike > spot:
            agreed.strike = min(before, replaced.strike)
        if agreed.strike != before:  # then it is no longer the end of the search that is taken
            agreed.flags = (agreed.flags - {"lowest strike", "highest strike"}) | {"ratchet"}
    if rule.not_below is not None and agreed.strike < spot * rule.not_below / 100.0:
        agreed.strike = spot * rule.not_below / 100.0
        agreed.flags.add("lowest strike")
    if rule.not_above is not None and agreed.strike > spot * rule.not_above / 100.0:
        agreed.strike = spot * rule.not_above / 100.0
        agreed.flags.add("highest strike")
    other = None if rule.not_below_leg is None else wanted.linked(rule.not_below_leg)
    if other is not None and agreed.strike < other.strike:
        agreed.strike = other.strike
        agreed.flags.add("lifted over the put")
    if rule.strike_step is not None:
        agreed.strike = nearest_listed(agreed.strike, rule.strike_step, spot)
        if other is not None and agreed.strike < other.strike * (1.0 - 1e-12):
            agreed.strike += rule.strike_step  # the nearest would lie under the put again
            agreed.flags.add("lifted over the put")


def nearest_listed(strike: float, step: float, spot: float) -> float:
    """The nearest multiple of a step, ties away from spot."""
    below = math.floor(strike / step) * step
    above = below + step
    if strike - below == above - strike:
        return below if below > 0.0 and strike < spot else above  # at spot itself: upwards
    return below if below > 0.0 and strike - below < above - strike else above
