"""A leg in plain words: its short name, and one sentence that says all of it."""

from __future__ import annotations

from backtest import (
    Adjusted,
    Delta,
    Deviations,
    Early,
    Financed,
    Gate,
    Leg,
    Mirrored,
    OverlayError,
    PercentOfForward,
    PercentOfSpot,
    PremiumPercent,
    PriceMean,
    SignalOn,
    VolPercentile,
)
from backtest.cycles import DaysCycle
from backtest.strikes import StrikeRule

ROLL_ADVERBS = {"month": "monthly", "quarter": "quarterly", "half": "half-yearly", "year": "yearly"}
ROLL_NOUNS = {"month": "month", "quarter": "quarter", "half": "half-year", "year": "year"}


# ---------------------------------------------------------------- names


def describe_legs(legs: tuple[Leg, ...]) -> str:
    """A plain name for an overlay, such as ``quarterly 95 put, monthly call financing leg 1``."""
    return ", ".join(leg_name(leg) for leg in legs)


def leg_name(leg: Leg) -> str:
    """A plain name for a leg: roll, strike, right, and in brackets what is laid around them.

    Examples
    --------
    >>> leg_name(Leg(position="long", right="put", roll="month", strike=Delta(0.25), ladder=2, stagger=False))
    'monthly 25-delta put in 2 tranches at once'
    """
    ratio = "" if leg.ratio == 1 else f"{leg.ratio:g} x "
    adverb = f"{leg.every}-day" if leg.roll == "days" else ROLL_ADVERBS[leg.roll]
    before, after = _strike_name(leg.rule)
    unusual = {("short", "put"): "sold", ("long", "call"): "bought"}.get((leg.position, leg.right), "")
    tranches = "" if leg.ladder == 1 else f"in {leg.ladder} tranches" + ("" if leg.stagger else " at once")
    remarks = "; ".join(_remarks(leg))
    words = (ratio + adverb, before, unusual, leg.right, after, tranches, f"({remarks})" if remarks else "")
    return " ".join(word for word in words if word)


def _strike_name(rule: StrikeRule) -> tuple[str, str]:
    """What stands before the right, and what after it."""
    match rule:
        case PercentOfSpot():
            return f"{rule.percent:g}", ""
        case PercentOfForward():
            return f"{rule.percent:g} of forward", ""
        case Deviations():
            return f"{rule.deviations:g}-deviation", ""
        case Delta():
            return f"{100 * rule.delta:g}-delta", ""
        case PremiumPercent():
            return "", f"for {rule.percent:g}% of spot"
        case Financed():
            share = "" if rule.share == 1 else f"{100 * rule.share:g}% of "
            return "", f"financing {share}{_numbered(rule.legs)}"
        case Mirrored():
            return "", f"mirroring leg {rule.leg}"
    raise _unknown(rule)


def _remarks(leg: Leg) -> list[str]:
    said = []
    if isinstance(leg.strike, Adjusted):
        limits = leg.strike
        said += (
            [f"kept until spot has moved {limits.kept_until_moved:g}%"] if limits.kept_until_moved is not None else []
        )
        said += ["ratchet"] if limits.ratchet else []
        said += [f"not below {limits.not_below:g}"] if limits.not_below is not None else []
        said += [f"not above {limits.not_above:g}"] if limits.not_above is not None else []
        said += [f"not below leg {limits.not_below_leg}"] if limits.not_below_leg is not None else []
        said += [f"in steps of {limits.strike_step:g}"] if limits.strike_step is not None else []
    said += ["last trading day of the month"] if leg.roll_day == "last trading day" else []
    said += [f"rolled {_days(leg.close_before)} early"] if leg.close_before else []
    said += ["settled at the open"] if leg.settlement == "open" else []
    said += [f"replaced {' or '.join(early_words(leg.early))}"] if leg.early is not None else []
    said += [f"while {gate_words(leg.gate)}"] if leg.gate is not None else []
    return said + (["not held"] if leg.reference else [])


# ---------------------------------------------------------------- sentences


def leg_sentence(leg: Leg) -> str:
    """All that a leg says: what, when, at which strike, and what may happen on the way.

    Examples
    --------
    >>> leg_sentence(Leg(position="long", right="put", strike=PercentOfSpot(95)))
    'buys a put, 1 per share; every quarter on the third Friday, 3 months to expiry; struck at 95% of spot'
    """
    parts = [_what(leg), _when(leg), f"struck {_strike_sentence(leg)}"]
    if leg.ladder > 1:
        how = "one after the other" if leg.stagger else "all at once"
        parts.append(f"carried in {leg.ladder} tranches that roll {how}")
    parts += ["settled against the open of the day of expiry"] if leg.settlement == "open" else []
    if leg.early is not None:
        parts.append(
            f"replaced early, to the same expiry, {' or '.join(early_words(leg.early))}, with {leg.early.days_left} "
            "calendar days or more left"
        )
    return "; ".join([*parts, *([gate_sentence(leg.gate)] if leg.gate is not None else [])])


def gate_sentence(gate: Gate) -> str:
    """When a gated leg is active, and what happens when the gate goes off and on."""
    off = {"run out": "what is live when that ends runs out", "close": "what is live when that ends is closed at once"}
    on = {"next roll": "it opens again at its next roll", "at once": "it opens again at once"}
    return f"active while {gate_words(gate)}: {off[gate.when_off]}, {on[gate.when_on]}"


def gate_words(gate: Gate) -> str:
    """The condition of a gate, such as ``the price is below its 200-day mean``."""
    match gate.condition:
        case SignalOn():
            return "the signal is on"
        case VolPercentile(percent=percent, above=above, window=window):
            return f"vol is {_side(above)} percentile {percent:g} of its last {window} days"
        case PriceMean(window=window, above=above):
            return f"the price is {_side(above)} its {window}-day mean"
    raise OverlayError(f"gate condition {gate.condition!r} has no words", field="gate")


def early_words(early: Early) -> list[str]:
    """The early rules, each such as ``under a delta of 0.1``."""
    said = []
    if early.delta_below is not None:
        said.append(f"under a delta of {early.delta_below:g} after a rise")
    if early.value_above is not None:
        said.append(f"over {early.value_above:g} times its premium")
    if early.value_below is not None:
        said.append(f"under {100 * early.value_below:g}% of its premium")
    return said


def _what(leg: Leg) -> str:
    if leg.reference:
        return f"a {leg.right} that is never held and only lends its strike and cost"
    verb = "buys" if leg.position == "long" else "sells"
    return f"{verb} a {leg.right}, {leg.ratio:g} per share"


def _when(leg: Leg) -> str:
    moved = []
    if isinstance(leg.cycle, DaysCycle):
        when = f"every {_days(leg.cycle.every)}"
        moved += [f"from day {leg.phase + 1} of the prices on"] if leg.phase else []
    else:
        when = f"every {ROLL_NOUNS[leg.roll]} on the {leg.roll_day.replace('friday', 'Friday')}"
        moved += [f"{leg.phase} month{'' if leg.phase == 1 else 's'} later in the year"] if leg.phase else []
    if leg.shift_days:
        moved.append(f"{_days(abs(leg.shift_days))} {'later' if leg.shift_days > 0 else 'earlier'}")
    expiry = _days(leg.term) if leg.roll == "days" else f"{leg.term} month{'' if leg.term == 1 else 's'}"
    before = f"; replaced {_days(leg.close_before)} before each of these dates" if leg.close_before else ""
    return f"{', '.join([when, *moved])}, {expiry} to expiry{before}"


def _strike_sentence(leg: Leg) -> str:
    said = [_rule_sentence(leg.rule, leg.right)]
    if isinstance(leg.strike, Adjusted):
        limits = leg.strike
        if limits.kept_until_moved is not None:
            said.append(f"kept until spot has moved {limits.kept_until_moved:g}% since it was set")
        if limits.ratchet:
            side = "below" if leg.right == "put" else "above"
            said.append(f"never {side} the strike it replaces while that one is {side} spot")
        said += [f"not below {limits.not_below:g}% of spot"] if limits.not_below is not None else []
        said += [f"not above {limits.not_above:g}% of spot"] if limits.not_above is not None else []
        said += [f"not below the strike of leg {limits.not_below_leg}"] if limits.not_below_leg is not None else []
        said += [f"rounded to steps of {limits.strike_step:g}"] if limits.strike_step is not None else []
    return ", ".join(said)


def _rule_sentence(rule: StrikeRule, right: str) -> str:
    match rule:
        case PercentOfSpot():
            return f"at {rule.percent:g}% of spot"
        case PercentOfForward():
            return f"at {rule.percent:g}% of the forward"
        case Deviations():
            above = (right == "call") == (rule.deviations >= 0)
            return f"{abs(rule.deviations):g} at-the-money deviations {_side(above)} the forward"
        case Delta():
            return f"at a delta of {rule.delta:g}"
        case PremiumPercent():
            return f"where its premium is {rule.percent:g}% of spot"
        case Financed():
            return (
                f"where it pays {100 * rule.share:g}% of what {_numbered(rule.legs)} cost{'s' * (len(rule.legs) == 1)}"
            )
        case Mirrored():
            return f"as far from the forward as leg {rule.leg}, on the other side"
    raise _unknown(rule)


def _unknown(rule: StrikeRule) -> OverlayError:
    return OverlayError(f"strike rule {rule!r} has no words", field="strike")


def _numbered(legs: tuple[int, ...]) -> str:
    if len(legs) == 1:
        return f"leg {legs[0]}"
    return f"legs {', '.join(map(str, legs[:-1]))} and {legs[-1]}"


def _days(count: int) -> str:
    return f"{count} trading day{'' if count == 1 else 's'}"


def _side(above: bool) -> str:
    return "above" if above else "below"
