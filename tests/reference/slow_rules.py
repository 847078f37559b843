"""Gates and early replacements of the slow twin.

Plain Python, borrowing nothing from ``backtest`` but the fields of its rules; see ``slow_twin.py``.
"""

from __future__ import annotations

import math
from fractions import Fraction
from typing import Any

from .slow_prices import Contract, History, Pricer

# ---------------------------------------------------------------- gates


def gate_is_on(condition: Any, history: History, t: int) -> bool:
    """Whether a gate's condition holds at the close of day ``t``."""
    if condition is None:
        return True
    name = type(condition).__name__
    if name == "SignalOn":
        assert history.signal is not None
        so_far = [value for value in history.signal[: t + 1] if not math.isnan(value)]
        return bool(so_far) and so_far[-1] != 0.0
    if name == "PriceMean":
        window = history.close[max(t + 1 - condition.window, 0) : t + 1]
        level = math.fsum(window) / len(window)
    else:
        assert name == "VolPercentile"
        shortest = history.vols[min(history.vols)]
        window = shortest[max(t + 1 - condition.window, 0) : t + 1]
        level = percentile(window, condition.percent)
    if len(window) < condition.window or any(math.isnan(value) for value in window):
        return False
    return window[-1] > level if condition.above else window[-1] < level


def percentile(values: list[float], percent: float) -> float:
    """Linear between order statistics: the k-th of n (from 0) is at ``100 k / (n - 1)`` percent."""
    ordered = sorted(values)
    place = Fraction(percent) / 100 * (len(ordered) - 1)  # exact, so that a whole place is one
    below = math.floor(place)
    share = float(place - below)
    above = min(below + 1, len(ordered) - 1)
    return ordered[below] + share * (ordered[above] - ordered[below])


# ---------------------------------------------------------------- early replacement


def early_reason(early: Any, t: int, pricer: Pricer, option: Contract, premium: float, spot_open: float) -> str | None:
    """The first of the conditions that hold at the close of day ``t``, if any does."""
    if early is None or (option.expiry - pricer.history.days[t]).days < early.days_left:
        return None
    mid = pricer.mid(t, option)
    if early.delta_below is not None:
        has_risen = pricer.history.close[t] > spot_open
        if has_risen and abs(pricer.delta(t, option)) < early.delta_below:
            return "replaced, delta low"
    if early.value_above is not None and mid > early.value_above * premium:
        return "replaced, profit taken"
    if early.value_below is not None and mid < early.value_below * premium:
        return "replaced, value low"
    return None
