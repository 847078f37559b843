"""What may be laid around any strike rule: bounds, memory of the strike before, listed steps (C6)."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from ..arguments import number, whole_number
from ..errors import OverlayError
from .linked import HIGHEST_LEG
from .percent import check_percent
from .solved import HIGHEST, LOWEST
from .state import ABOVE_ALL, BELOW_ALL, OpenState, StrikeRule

Array = npt.NDArray[np.float64]
Flags = npt.NDArray[np.int64]

#: Two strikes as near as this, relative, are the same.
STRIKE_TOLERANCE = 1e-12
#: What happened to a strike on its way from the rule, as bits; an option may have several.
NOT_BELOW, NOT_ABOVE, NO_SOLUTION, RATCHET, KEPT, LIFTED = 1, 2, 4, 8, 16, 32
FLAG_WORDS = {
    NO_SOLUTION: "no solution",
    NOT_BELOW: "lowest strike",
    NOT_ABOVE: "highest strike",
    RATCHET: "ratchet",
    KEPT: "strike kept",
    LIFTED: "lifted over the put",
}


@dataclass(frozen=True, slots=True, kw_only=True)
class Adjusted:
    """A strike rule with limits around it (C6); applied roll by roll in the order of the parameters.

    Parameters
    ----------
    rule : StrikeRule
    kept_until_moved : float, optional
        The strike that is replaced is kept until spot has moved by this many percent since it was set.
    ratchet : bool
        A put is never struck below the one it replaces while that one is below spot; a call never above the one it
        replaces while that one is above spot.
    not_below, not_above : float, optional
        In percent of spot.
    not_below_leg : int, optional
        Never below the strike live in that leg (numbered from 1): a call that would sit under a live put is lifted.
    strike_step : float, optional
        Rounded to the nearest multiple of this, ties away from spot; to the next above where the nearest would lie
        under the leg of ``not_below_leg``.

    Examples
    --------
    >>> from backtest.strikes import Adjusted, Delta
    >>> Adjusted(rule=Delta(0.25), ratchet=True, not_below=80, strike_step=5).remembers
    True
    """

    rule: StrikeRule
    kept_until_moved: float | None = None
    ratchet: bool = False
    not_below: float | None = None
    not_above: float | None = None
    not_below_leg: int | None = None
    strike_step: float | None = None

    def __post_init__(self) -> None:
        if isinstance(self.rule, Adjusted):
            raise OverlayError("an Adjusted rule cannot be adjusted again; put all into one", field="strike")
        if not callable(getattr(self.rule, "strikes", None)) or isinstance(self.rule, type):
            raise OverlayError(f"rule is {self.rule!r}; give a strike rule such as Delta(0.25)", field="strike")
        if not isinstance(self.ratchet, bool):
            raise OverlayError(f"ratchet is {self.ratchet!r}; it takes true or false", field="ratchet")
        if self.kept_until_moved is not None:
            number("kept_until_moved", self.kept_until_moved, least=0.0, most=1000.0, unit=", in percent of spot")
        for name in ("not_below", "not_above"):
            if getattr(self, name) is not None:
                check_percent(name, getattr(self, name))
        if self.not_below is not None and self.not_above is not None and self.not_below > self.not_above:
            raise OverlayError(
                f"not_below is {self.not_below:g} and not_above {self.not_above:g}; no strike fits between",
                field="not_below",
            )
        if self.not_below_leg is not None:
            whole_number("not_below_leg", self.not_below_leg, least=1, most=HIGHEST_LEG, unit=" (the number of a leg)")
        if self.strike_step is not None:
            number("strike_step", self.strike_step, least=1e-6, most=1e6, unit=" (in price)")

    @property
    def remembers(self) -> bool:
        """Whether a strike depends on the one before."""
        return self.ratchet or self.kept_until_moved is not None

    @property
    def named_legs(self) -> tuple[int, ...]:
        """Numbers of the legs that rule and limits look at."""
        named = tuple(getattr(self.rule, "named_legs", ()))
        return named if self.not_below_leg is None else (*named, self.not_below_leg)

    def strikes(self, state: OpenState) -> Array:
        """Strike per roll, shape ``(roll,)``."""
        return limit_strikes(self, self.rule.strikes(state), state)[0]


def limit_strikes(rule: StrikeRule, raw: Array, state: OpenState) -> tuple[Array, Flags]:
    """Strikes from what a rule gave, and what happened to each, both of shape ``(roll,)``.

    A rule without limits of its own has the widest: 1 and 1,000 percent of spot.
    """
    limits = rule if isinstance(rule, Adjusted) else Adjusted(rule=rule)
    raw, found = _within_reach(raw, state.spot)
    if not limits.remembers:
        return _limit(limits, raw, state, slice(None), found)
    strike, flags = np.empty(len(raw)), np.zeros(len(raw), dtype=np.int64)
    spot, reference = state.spot, np.nan
    for roll in range(len(raw)):
        one = slice(roll, roll + 1)
        wanted, previous = raw[roll], strike[roll - 1] if state.follows[roll] else np.nan
        moved = abs(spot[roll] / reference - 1.0) * 100.0
        if limits.kept_until_moved is not None and not np.isnan(previous) and moved < limits.kept_until_moved:
            wanted = previous
            flags[roll] |= KEPT
        else:
            reference = spot[roll]
            flags[roll] |= found[roll]
        if limits.ratchet and not np.isnan(previous) and state.sign * (previous - spot[roll]) > 0.0:
            held = max(wanted, previous) if state.sign < 0 else min(wanted, previous)
            if held != wanted:
                # then it is no longer the end of the range that is taken
                flags[roll] = (flags[roll] & ~(NOT_BELOW | NOT_ABOVE)) | RATCHET
            wanted = held
        strike[one], flags[one] = _limit(limits, np.array([wanted]), state, one, flags[one])
    return strike, flags


def _limit(limits: Adjusted, raw: Array, state: OpenState, rolls: slice, flags: Flags) -> tuple[Array, Flags]:
    """Bounds, the leg not to be under, and the listed step."""
    spot, strike = state.spot[rolls], raw
    if limits.not_below is not None:
        low = spot * (limits.not_below / 100.0)
        strike, flags = np.maximum(strike, low), flags | np.where(strike < low, NOT_BELOW, 0)
    if limits.not_above is not None:
        high = spot * (limits.not_above / 100.0)
        strike, flags = np.minimum(strike, high), flags | np.where(strike > high, NOT_ABOVE, 0)
    if limits.not_below_leg is not None:
        other = state.linked[limits.not_below_leg].strike[rolls]
        lifted = strike < other
        strike, flags = np.where(lifted, other, strike), flags | np.where(lifted, LIFTED, 0)
    if limits.strike_step is not None:
        strike = round_to_step(strike, limits.strike_step, spot)
        if limits.not_below_leg is not None:
            # a listed strike under the other leg's would undo what it was lifted for
            under = strike < other * (1.0 - STRIKE_TOLERANCE)
            strike, flags = np.where(under, strike + limits.strike_step, strike), flags | np.where(under, LIFTED, 0)
    return strike, flags


def _within_reach(raw: Array, spot: Array) -> tuple[Array, Flags]:
    """What a rule gave, held to the widest range there is; a NaN, where the vol itself is unknown, stays one."""
    low, high = spot * (LOWEST / 100.0), spot * (HIGHEST / 100.0)
    flags: Flags = np.where((raw == BELOW_ALL) | (raw == ABOVE_ALL), NO_SOLUTION, 0)
    flags = flags | np.where(raw < low, NOT_BELOW, 0) | np.where(raw > high, NOT_ABOVE, 0)
    return np.clip(raw, low, high), flags.astype(np.int64)


def round_to_step(strike: Array, step: float, spot: Array) -> Array:
    """Nearest multiple of ``step``, ties away from spot; never zero.

    Examples
    --------
    >>> round_to_step(np.array([97.5, 102.5, 98.0]), 5.0, np.array([100.0, 100.0, 100.0])).tolist()
    [95.0, 105.0, 100.0]
    """
    steps = strike / step
    below = np.floor(steps)
    part = steps - below
    tie = np.abs(part - 0.5) < 1e-9
    up = np.where(tie, strike >= spot, part > 0.5)
    return np.asarray(np.maximum(below + up, 1.0) * step)


def flag_words(flags: int) -> list[str]:
    """The words of a flag, in a fixed order."""
    return [word for bit, word in FLAG_WORDS.items() if flags & bit]
