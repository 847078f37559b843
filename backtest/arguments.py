"""Checks of single arguments: each names the field, what came, and the rule with its limit."""

from __future__ import annotations

import math
from numbers import Integral, Real

from .errors import OverlayError


def one_of(name: str, value: object, allowed: tuple[str, ...]) -> None:
    """Raise OverlayError unless ``value`` is one of ``allowed``."""
    if value not in allowed:
        raise OverlayError(f"{name} is {value!r}; it takes one of: {', '.join(allowed)}", field=name)


def number(name: str, value: object, *, least: float, most: float = math.inf, unit: str = "") -> None:
    """Raise OverlayError unless ``value`` is a finite number from ``least`` to ``most``, of Python or numpy."""
    if not least <= _as_float(value) <= min(most, 1e300):
        limit = f"from {least:g} to {most:g}" if math.isfinite(most) else f"of at least {least:g}"
        raise OverlayError(f"{name} is {value!r}; it takes a number {limit}{unit}", field=name)


def whole_number(name: str, value: object, *, least: int, most: int, unit: str = "") -> None:
    """Raise OverlayError unless ``value`` is a whole number from ``least`` to ``most``, of Python or numpy."""
    if not isinstance(value, Integral) or not least <= _as_float(value) <= most:
        raise OverlayError(f"{name} is {value!r}; it takes a whole number from {least} to {most}{unit}", field=name)


def _as_float(value: object) -> float:
    """NaN, which is in no range, for what is no number; True and False are none."""
    if not isinstance(value, Real) or isinstance(value, bool):
        return math.nan
    try:
        return float(value)
    except OverflowError:  # an integer too large for a float
        return math.nan
