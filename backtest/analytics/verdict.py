"""The verdict: a few sentences, made from the numbers by the rules below. It never recommends.

Each clause has a finding (``yes``, ``no`` or ``open``) and a sentence with its figure and its uncertainty.

=============================  ================================================================================
clause                         rule
=============================  ================================================================================
protects                       yes: the overlay's maximum drawdown is shallower than the hold's, and in at least
                               95% of the resamples; no: it is not shallower; open: otherwise
costs                          yes: it returned less a year than the hold, and all of the 90% interval of the
                               difference lies below zero; no: it returned as much or more and all of the
                               interval lies above zero; open: otherwise
beats the same-risk mix        yes: its Sharpe ratio is above the same-beta mix's and so is all of the 90%
                               interval of the difference; no: both lie below; open: otherwise
holds under other smiles       yes: the overlay is ahead of the same-beta mix in Sharpe ratio under every smile of
                               the ladder, or behind under every one; no: ahead under one and behind under another
holds on other roll days       yes: that difference has the sign of the user's own roll day on at least 90% of
                               the roll days; no: on at most half; open: between
holds without one crisis       yes: that difference keeps its sign when each of the worst falls is left out; no:
                               it changes
=============================  ================================================================================

A clause whose figures cannot be had is open, and says why; so is one on a difference that is no more than rounding.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass

from .robustness import BreakEven

SURE = 0.95
#: A difference no larger than this is none: rounding has no side.
TIE = 1e-9
#: The same for Sharpe ratios, which are shown with two digits.
SHARPE_TIE = 0.005
WORDS = {"ahead": "ahead of", "behind": "behind"}
TOO_SHORT = "The history is too short to say."
MOST_ROLL_DAYS, FEW_ROLL_DAYS = 0.90, 0.50


@dataclass(frozen=True, slots=True, kw_only=True)
class Difference:
    """A figure of the overlay less another's, with its 90% interval; NaN where it cannot be had."""

    value: float
    low: float
    high: float

    @property
    def known(self) -> bool:
        """Whether value and interval are all numbers."""
        return all(math.isfinite(x) for x in (self.value, self.low, self.high))


@dataclass(frozen=True, slots=True, kw_only=True)
class Evidence:
    """The numbers that the verdict is made from; decimals."""

    years: float
    put_payoffs: int | None
    overlay_drawdown: float
    hold_drawdown: float
    probability_shallower: float
    return_difference: Difference
    sharpe_difference: Difference
    same_delta_difference: Difference
    smile_differences: Mapping[str, float]
    used_smile: str
    break_even: BreakEven
    roll_day_differences: Sequence[float]
    roll_day_returns: Sequence[float]
    without_worst: Sequence[float]


@dataclass(frozen=True, slots=True, kw_only=True)
class Clause:
    """One clause of the verdict."""

    title: str
    finding: str
    sentence: str


def verdict(evidence: Evidence) -> tuple[Clause, ...]:
    """Apply the rules of this module, in the order of its table."""
    return (
        _protects(evidence),
        _costs(evidence),
        _beats(evidence),
        _smiles(evidence),
        _roll_days(evidence),
        _crises(evidence),
    )


def _protects(e: Evidence) -> Clause:
    title = "Protects"
    if not all(math.isfinite(x) for x in (e.overlay_drawdown, e.hold_drawdown)):
        return Clause(title=title, finding="open", sentence="No drawdown can be had for this replay.")
    gained = e.overlay_drawdown - e.hold_drawdown
    payoffs = _payoffs(e)
    if gained <= TIE:
        sentence = (
            f"Its deepest fall was {_percent(e.overlay_drawdown)}, the hold's {_percent(e.hold_drawdown)}.{payoffs}"
        )
        return Clause(title=title, finding="no", sentence=sentence)
    sentence = (
        f"It took {_points(gained)} off the deepest fall: {_percent(e.overlay_drawdown)} instead of "
        f"{_percent(e.hold_drawdown)}"
    )
    if not math.isfinite(e.probability_shallower):
        return Clause(
            title=title, finding="open", sentence=f"{sentence}; the history is too short to say how surely.{payoffs}"
        )
    sure = e.probability_shallower >= SURE
    sentence += f"; the fall was shallower in {100 * e.probability_shallower:.0f}% of the resampled histories.{payoffs}"
    return Clause(title=title, finding="yes" if sure else "open", sentence=sentence)


def _payoffs(e: Evidence) -> str:
    if e.put_payoffs is None:
        return ""
    if e.put_payoffs == 0:
        return " No bought put paid off in this history, so it says nothing about protection by puts."
    times = "time" if e.put_payoffs == 1 else "separate times"
    years = f" in {e.years:.0f} years" if e.years >= 1.5 else ""
    return f" The bought puts paid off {e.put_payoffs} {times}{years}: that is the size of the evidence."


def _costs(e: Evidence) -> Clause:
    title, d = "Costs", e.return_difference
    if not math.isfinite(d.value):
        return Clause(title=title, finding="open", sentence="No return can be had for this replay.")
    less = "less" if d.value < 0 else "more"
    sentence = f"It returned {_points(abs(d.value))}{_a_year(e)} {less} than the hold"
    if abs(d.value) <= TIE:
        sentence = "It returned as much as the hold"
    if not d.known:
        return Clause(title=title, finding="open", sentence=f"{sentence}; the history is too short for an interval.")
    sentence += f" (90% interval {_signed_points(d.low)} to {_signed_points(d.high)})"
    if d.value < -TIE and d.high < 0:
        return Clause(title=title, finding="yes", sentence=f"{sentence}.")
    if d.value >= -TIE and d.low > 0:
        return Clause(title=title, finding="no", sentence=f"{sentence}.")
    return Clause(title=title, finding="open", sentence=f"{sentence}: the history does not settle it.")


def _beats(e: Evidence) -> Clause:
    title, d = "Beats holding less", e.sharpe_difference
    if not math.isfinite(d.value):
        return Clause(title=title, finding="open", sentence="No Sharpe ratio can be had for overlay and same-beta mix.")
    mix = "that of holding less stock at the same beta"
    sentence = f"Its Sharpe ratio was {abs(d.value):.2f} {'above' if d.value >= 0 else 'below'} {mix}"
    if abs(d.value) <= SHARPE_TIE:
        sentence = f"Its Sharpe ratio was {mix}"
    if not d.known:
        return Clause(title=title, finding="open", sentence=f"{sentence}; the history is too short for an interval.")
    sentence += f" (90% interval {_signed(d.low, 2)} to {_signed(d.high, 2)})"
    finding = "open"
    if abs(d.value) > SHARPE_TIE:
        finding = "yes" if d.low > 0 and d.value > 0 else "no" if d.high < 0 and d.value < 0 else "open"
    apart = ": the two cannot be told apart" if finding == "open" else ""
    return Clause(title=title, finding=finding, sentence=f"{sentence}{apart}.{_without_hindsight(e)}")


def _without_hindsight(e: Evidence) -> str:
    """The mix that can be held without knowing the end; the same-beta mix's share is found with hindsight."""
    d = e.same_delta_difference
    if not d.known:
        return ""
    return (
        f" Against holding each day as much stock as its own delta of the evening before, which takes no hindsight: "
        f"{_signed(d.value, 2)} ({_signed(d.low, 2)} to {_signed(d.high, 2)})."
    )


def _smiles(e: Evidence) -> Clause:
    title = "Holds under other smiles"
    known = {name: d for name, d in e.smile_differences.items() if math.isfinite(d)}
    if len(known) < 2:
        return Clause(title=title, finding="open", sentence="The overlay cannot be compared under several smiles.")
    if not e.sharpe_difference.known:
        return Clause(title=title, finding="open", sentence=TOO_SHORT)
    low, high = min(known, key=lambda n: known[n]), max(known, key=lambda n: known[n])
    if max(abs(known[low]), abs(known[high])) <= SHARPE_TIE:
        return Clause(title=title, finding="open", sentence="Under no smile is it told from holding less stock.")
    span = f"from {_signed(known[low], 2)} ({low}) to {_signed(known[high], 2)} ({high})"
    turn = _turn(e.break_even)
    if known[low] < -SHARPE_TIE and known[high] > SHARPE_TIE:
        sentence = f"The prices decide it: that difference in Sharpe ratio runs {span}; used: {e.used_smile}.{turn}"
        return Clause(title=title, finding="no", sentence=sentence)
    side = "ahead" if known[high] > SHARPE_TIE else "behind"
    sentence = f"The overlay is {side} under every smile: that difference in Sharpe ratio runs {span}.{turn}"
    return Clause(title=title, finding="yes", sentence=sentence)


def _turn(at: BreakEven) -> str:
    if at.value is None or not math.isfinite(at.value):
        low, high = at.searched
        return f" No error of all option vols from {_signed(low, 0)} to {_signed(high, 0)} points turns it."
    side = "higher" if at.value > 0 else "lower"
    return f" It turns where all option vols are {abs(at.value):.1f} points {side}."


def _roll_days(e: Evidence) -> Clause:
    title = "Holds on other roll days"
    known = [d for d in e.roll_day_differences if math.isfinite(d)]
    returns = [r for r in e.roll_day_returns if math.isfinite(r)]
    if len(known) < 2 or not returns or not math.isfinite(e.roll_day_differences[0]):
        return Clause(title=title, finding="open", sentence="The overlay cannot be compared on other roll days.")
    if not e.sharpe_difference.known:
        return Clause(title=title, finding="open", sentence=TOO_SHORT)
    own = e.roll_day_differences[0]
    if abs(own) <= SHARPE_TIE:
        return Clause(title=title, finding="open", sentence="On your roll day it is not told from holding less stock.")
    side = "ahead" if own > 0 else "behind"
    same = sum((d > 0) == (own > 0) for d in known) / len(known)
    finding = "yes" if same >= MOST_ROLL_DAYS else "no" if same <= FEW_ROLL_DAYS else "open"
    sentence = (
        f"On your roll day the overlay is {WORDS[side]} that mix, and so on {100 * same:.0f}% of the {len(known)} "
        f"possible ones; the return ran from {_percent(min(returns))} to {_percent(max(returns))}{_a_year(e)} with the "
        "roll day alone."
    )
    return Clause(title=title, finding=finding, sentence=sentence)


def _crises(e: Evidence) -> Clause:
    title = "Holds without one crisis"
    own = e.sharpe_difference.value
    known = [d for d in e.without_worst if math.isfinite(d)]
    if not e.without_worst:
        return Clause(title=title, finding="open", sentence="The hold had no fall over 10% to leave out.")
    if not known or not math.isfinite(own):
        return Clause(
            title=title, finding="open", sentence="The overlay cannot be compared without the worst falls of the hold."
        )
    if not e.sharpe_difference.known:
        return Clause(title=title, finding="open", sentence=TOO_SHORT)
    if abs(own) <= SHARPE_TIE:
        return Clause(title=title, finding="open", sentence="With all falls it is not told from holding less stock.")
    side, other = ("ahead", "behind") if own > 0 else ("behind", "ahead")
    turned = sum((d > 0) != (own > 0) for d in known)
    which = "the worst fall" if len(known) == 1 else f"each of the {len(known)} worst falls in turn"
    said = f"It stays {WORDS[side]} that mix without {which}"
    if turned:
        some = "the worst fall" if len(known) == 1 else f"{turned} of the {len(known)} worst falls, taken one by one"
        said = f"It is {WORDS[other]} that mix without {some}"
    span = _signed(min(known), 2) + (f" to {_signed(max(known), 2)}" if len(known) > 1 else "")
    return Clause(
        title=title,
        finding="no" if turned else "yes",
        sentence=f"{said}: {span} in Sharpe ratio, {_signed(own, 2)} with all of them.",
    )


def _a_year(e: Evidence) -> str:
    """Under a year returns are totals (C11)."""
    return " a year" if e.years >= 1 else ""


def _percent(value: float) -> str:
    return f"{round(100 * value, 1) + 0.0:.1f}%"


def _points(value: float) -> str:
    return f"{round(100 * value, 1) + 0.0:.1f} points"


def _signed_points(value: float) -> str:
    return _signed(100 * value, 1)


def _signed(value: float, digits: int) -> str:
    """With its sign, and none on what is shown as zero."""
    text = f"{value:+.{digits}f}"
    return text if any(digit in text for digit in "123456789") else text[1:]
