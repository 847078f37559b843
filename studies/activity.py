"""What an overlay did besides rolling: replaced early, stood aside, rounded to contracts, took a bound for a strike."""

from __future__ import annotations

from typing import Any

import numpy as np

from backtest import LegReplay, Replay
from backtest.calendar import BY_DELTA, BY_GATE, BY_LOW_VALUE, BY_PROFIT
from backtest.strikes import flag_words

EARLY_WORDS = {BY_DELTA: "delta low", BY_PROFIT: "profit taken", BY_LOW_VALUE: "value low"}


def activity_of(found: Replay) -> dict[str, Any]:
    """Plain values by leg, for the summary; what no leg did is left out.

    ``time_off``: share of days without an option; ``early``: options replaced before their roll date, by reason;
    ``closed_by_gate``; ``strike_flags``: options whose strike is not what the rule alone gave, by what happened;
    ``contracts``: fewest and most held, where there is a portfolio.
    """
    made: dict[str, dict[str, Any]] = {}
    for leg in found.legs:
        if leg.leg.reference:
            continue
        reason = leg.schedule.reason
        flags = [word for bits in leg.strike_flags.tolist() for word in flag_words(bits)]
        told = {
            "time_off": float(leg.flat.mean()) if leg.flat.any() else None,
            "early": _counts([EARLY_WORDS[one] for one in reason.tolist() if one in EARLY_WORDS]),
            "closed_by_gate": int(np.count_nonzero(reason == BY_GATE)),
            "strike_flags": _counts(flags),
            "contracts": _contracts(found, leg),
        }
        for name, value in told.items():
            if value:
                made.setdefault(name, {})[leg.label] = value
    return made


def activity_words(told: dict[str, Any]) -> dict[str, str]:
    """The same in words, for "what this stands on"."""
    said = {}
    if "time_off" in told:
        said["time_off"] = _each(told["time_off"], lambda share: f"without an option on {share:.0%} of days")
    if "early" in told:
        said["replaced_early"] = _each(told["early"], _counted)
    if "closed_by_gate" in told:
        said["closed_by_gate"] = _each(told["closed_by_gate"], lambda count: f"{count} times")
    if "strike_flags" in told:
        said["strikes_not_by_the_rule_alone"] = _each(told["strike_flags"], _counted)
    if "contracts" in told:
        said["contracts"] = _each(
            told["contracts"],
            lambda one: (
                f"{one['fewest']:,} to {one['most']:,} held, up to {one['largest_rounding']:.2%} fewer options "
                "than without rounding"
            ),
        )
    return said


def _counts(words: list[str]) -> dict[str, int]:
    return {word: words.count(word) for word in dict.fromkeys(words)}


def _contracts(found: Replay, leg: LegReplay) -> dict[str, Any] | None:
    """Contracts of a leg, and by how much rounding made its options fewer at most."""
    overlay, wanted = found.overlay, found.units * leg.leg.held_ratio
    known = np.isfinite(leg.count) & (wanted > 0.0)
    if overlay.portfolio is None or not known.any():
        return None
    held = np.round(leg.count[known] * overlay.portfolio / overlay.costs.multiplier).astype(np.int64)
    rounding = float(np.max(1.0 - leg.count[known] / wanted[known]))
    return {"fewest": int(held.min()), "most": int(held.max()), "largest_rounding": max(rounding, 0.0)}


def _each(values: dict[str, Any], words: Any) -> str:
    return "; ".join(f"{label.replace('_', ' ')}: {words(value)}" for label, value in values.items())


def _counted(counts: dict[str, int]) -> str:
    return ", ".join(f"{word} {count} time{'' if count == 1 else 's'}" for word, count in counts.items())
