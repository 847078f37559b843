"""Checks of single arguments: each names the field, what came, and the rule with its limit."""

from __future__ import annotations

import math

from .errors import OverlayError


def one_of(name: str, value: object, allowed: tuple[str, ...]) -> None:
    """Raise OverlayError unless ``value`` is one of ``allowed``."""
    if value not in allowed:
        raise OverlayError(f"{name} is {value!r}; it takes one of: {', '.join(allowed)}", field=name)


def number(name: str, value: object, *, least: float, most: float = math.inf, unit: str = "") -> None:
    """Raise OverlayError unless ``value`` is a finite number from ``least`` to ``most``."""
    plain = isinstance(value, (int, float)) and not isinstance(value, bool)
    # an integer too large for a float is out of any range, and must not reach isfinite
    if not plain or not least <= value <= most or abs(value) > 1e300:  # type: ignore[arg-type,operator]
        limit = f"from {least:g} to {most:g}" if math.isfinite(most) else f"of at least {least:g}"
        raise OverlayError(f"{name} is {value!r}; it takes a number {limit}{unit}", field=name)


def whole_number(name: str, value: object, *, least: int, most: int, unit: str = "") -> None:
    """Raise OverlayError unless ``value`` is a whole number from ``least`` to ``most``."""
    if not isinstance(value, int) or isinstance(value, bool) or not least <= value <= most:
        raise OverlayError(f"{name} is {value!r}; it takes a whole number from {least} to {most}{unit}", field=name)
