"""Gates: a leg is active only while a condition on past data holds; what happens when it goes off and on.

A condition sees the market and answers for every trading day, from data dated that day or earlier (C4). A new
condition is one class here and one entry in :data:`GATE_CONDITIONS`.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from fractions import Fraction
from typing import Any, Protocol

import numpy as np
import numpy.typing as npt

from .arguments import number, one_of, whole_number
from .errors import MarketError, OverlayError
from .market import Market

Flags = npt.NDArray[np.bool_]

WHEN_OFF = ("run out", "close")
WHEN_ON = ("next roll", "at once")
#: Ten years of trading days.
LONGEST_WINDOW = 2520
#: Three years of trading days.
VOL_WINDOW = 756
#: A close this near to its mean, relatively, is taken to be on it.
ROUNDING = 1e-12


class Condition(Protocol):
    """What the engine asks of a gate's condition."""

    def on(self, market: Market) -> Flags:
        """Whether it holds on each trading day, shape ``(day,)``."""
        ...


@dataclass(frozen=True, slots=True)
class SignalOn:
    """The user's own signal is on (see :attr:`Market.signal`)."""

    def on(self, market: Market) -> Flags:
        """Whether the signal is on, shape ``(day,)``.

        Raises
        ------
        MarketError
            If the history has no signal.
        """
        if market.signal is None:
            raise MarketError("a gate asks for a signal, and the history has none: give one with --signal FILE")
        return market.signal


@dataclass(frozen=True, slots=True, kw_only=True)
class VolPercentile:
    """The implied vol (of the shortest tenor) lies above, or below, a percentile of its own trailing window.

    Today is part of the window; off until the window is full.
    """

    percent: float
    above: bool
    window: int = VOL_WINDOW

    def __post_init__(self) -> None:
        name = f"vol_{'above' if self.above else 'below'}_percentile"
        number(name, self.percent, least=0.0, most=100.0)
        whole_number("window", self.window, least=2, most=LONGEST_WINDOW, unit=" trading days")

    def on(self, market: Market) -> Flags:
        """Whether it holds on each trading day, shape ``(day,)``.

        Raises
        ------
        MarketError
            If the history has no implied vol.
        """
        if not market.has_vol:
            raise MarketError("a gate asks for the vol level, and the history has no implied vols")
        vol = market.vol_quotes[0]
        held = np.zeros(len(vol), dtype=bool)
        if len(vol) < self.window:
            return held
        windows = np.lib.stride_tricks.sliding_window_view(vol, self.window)
        newest = windows[:, -1:]
        # today lies above the value at this place among the ordered ones if more than so many are less than today's:
        # counted, not interpolated, so that nothing is lost to rounding (or to sorting every window)
        place = Fraction(float(self.percent)) * (self.window - 1) / 100
        if self.above:
            on = np.count_nonzero(windows < newest, axis=1) > math.floor(place)
        else:
            on = np.count_nonzero(windows <= newest, axis=1) <= math.ceil(place)
        held[self.window - 1 :] = on & ~np.isnan(windows).any(axis=1)
        return held


@dataclass(frozen=True, slots=True, kw_only=True)
class PriceMean:
    """The close lies above, or below, the mean of the last ``window`` closes, today's among them; off until full."""

    window: int
    above: bool

    def __post_init__(self) -> None:
        name = f"price_{'above' if self.above else 'below'}_mean"
        whole_number(name, self.window, least=2, most=LONGEST_WINDOW, unit=" trading days")

    def on(self, market: Market) -> Flags:
        """Whether it holds on each trading day, shape ``(day,)``."""
        held = np.zeros(len(market), dtype=bool)
        if len(market) < self.window:
            return held
        mean = np.lib.stride_tricks.sliding_window_view(market.spot, self.window).mean(axis=1)
        newest = market.spot[self.window - 1 :]
        # by more than rounding: the mean of closes that are all alike is that close
        held[self.window - 1 :] = newest > mean * (1.0 + ROUNDING) if self.above else newest < mean * (1.0 - ROUNDING)
        return held


@dataclass(frozen=True, slots=True, kw_only=True)
class Gate:
    """When a leg is active.

    Parameters
    ----------
    condition : SignalOn, VolPercentile or PriceMean
        An option is opened only while it holds.
    when_off : {"run out", "close"}
        An option that is live when the condition ends is held to its roll date, or closed at once.
    when_on : {"next roll", "at once"}
        A leg without an option waits for its next roll date, or opens at once, with the expiry it would be holding.
    """

    condition: Condition
    when_off: str = "run out"
    when_on: str = "next roll"

    def __post_init__(self) -> None:
        if isinstance(self.condition, type) or not callable(getattr(self.condition, "on", None)):
            raise OverlayError(
                f"condition is {self.condition!r}; give one such as PriceMean(window=200, above=False)", field="gate"
            )
        one_of("when_off", self.when_off, WHEN_OFF)
        one_of("when_on", self.when_on, WHEN_ON)


#: Key of each condition in an overlay file -> the condition of its value and window.
GATE_CONDITIONS: dict[str, Any] = {
    "signal": lambda value, window: _signal(value),
    "vol_above_percentile": lambda value, window: VolPercentile(percent=value, above=True, window=window),
    "vol_below_percentile": lambda value, window: VolPercentile(percent=value, above=False, window=window),
    "price_above_mean": lambda value, window: PriceMean(window=value, above=True),
    "price_below_mean": lambda value, window: PriceMean(window=value, above=False),
}
#: All keys of a gate in an overlay file.
GATE_KEYS = (*GATE_CONDITIONS, "window", "when_off", "when_on")


def _signal(value: object) -> SignalOn:
    if value is not True:
        raise OverlayError(f"signal is {value!r}; it takes true, the signal itself comes with --signal", field="signal")
    return SignalOn()


def gate_from_table(table: dict[str, Any]) -> Gate:
    """A gate from its table in an overlay file.

    Raises
    ------
    OverlayError
        With ``field``: the key that is wrong.

    Examples
    --------
    >>> gate_from_table({"price_below_mean": 200, "when_off": "close"}).condition
    PriceMean(window=200, above=False)
    """
    named = [key for key in table if key in GATE_CONDITIONS]
    if len(named) != 1:
        what = f"names {' and '.join(named)}" if named else "names no condition"
        raise OverlayError(f"{what}; a gate takes one of: {', '.join(GATE_CONDITIONS)}")
    for key in table:
        if key not in GATE_KEYS:
            raise OverlayError(f"{key} is no key of a gate", field=key)
    if "window" in table and not named[0].startswith("vol_"):
        raise OverlayError(f"window belongs to vol percentiles; leave it out beside {named[0]}", field="window")
    condition = GATE_CONDITIONS[named[0]](table[named[0]], table.get("window", VOL_WINDOW))
    return Gate(condition=condition, **{key: table[key] for key in ("when_off", "when_on") if key in table})


def gate_to_table(gate: Gate) -> dict[str, Any]:
    """The table of a gate, every field named.

    Raises
    ------
    OverlayError
        If its condition has no name in an overlay file.
    """
    condition = gate.condition
    table: dict[str, Any]
    if isinstance(condition, SignalOn):
        table = {"signal": True}
    elif isinstance(condition, VolPercentile):
        side = "above" if condition.above else "below"
        table = {f"vol_{side}_percentile": condition.percent, "window": condition.window}
    elif isinstance(condition, PriceMean):
        table = {f"price_{'above' if condition.above else 'below'}_mean": condition.window}
    else:
        raise OverlayError(f"gate condition {condition!r} has no name in an overlay file", field="gate")
    return table | {"when_off": gate.when_off, "when_on": gate.when_on}
