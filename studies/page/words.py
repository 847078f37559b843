"""Numbers, dates and names as the page writes them. Whatever cannot be had is one dash."""

from __future__ import annotations

import math
import re
from collections.abc import Iterable

import numpy as np

from backtest.analytics.performance import DAYS_IN_CALENDAR_YEAR

DASH = "–"
MINUS = "−"

# a hyphen is a minus before a digit, unless a letter, a digit or a hyphen stands in front of it
_HYPHEN_MINUS = re.compile(r"(?<![\w.\-])-(?=[\d.])")


def known(value: float | None) -> bool:
    """Whether there is a finite number."""
    return value is not None and math.isfinite(value)


def number(value: float | None, digits: int = 2, *, sign: bool = False, unit: str = "") -> str:
    """A number with fixed digits, a real minus and no sign on zero.

    Examples
    --------
    >>> number(-0.204), number(0.15, sign=True), number(-0.001), number(float("nan"))
    ('−0.20', '+0.15', '0.00', '–')
    """
    if value is None or not math.isfinite(value):
        return DASH
    text = f"{value:+,.{digits}f}" if sign else f"{value:,.{digits}f}"
    if not any(digit in text for digit in "123456789"):
        text = text.lstrip("+-")
    return text.replace("-", MINUS) + unit


def percent(value: float | None, digits: int = 1, *, sign: bool = False) -> str:
    """A decimal in percent."""
    return number(None if value is None else 100 * value, digits, sign=sign, unit="%")


def points(value: float | None, digits: int = 1, *, sign: bool = True) -> str:
    """A decimal in percentage points, without the word."""
    return number(None if value is None else 100 * value, digits, sign=sign)


def ratio(value: float | None, *, sign: bool = False) -> str:
    """A ratio with two digits."""
    return number(value, 2, sign=sign)


def date(value: object) -> str:
    """An ISO date; a dash for none."""
    if value is None or value != value:  # not-a-time is not equal to itself
        return DASH
    text = str(np.datetime64(value, "D"))  # type: ignore[call-overload]
    return DASH if text == "NaT" else text


def days(value: int | None) -> str:
    """Calendar days; None means that the end came first."""
    return "not by the end" if value is None else f"{value:,}"


def span(first: np.datetime64, last: np.datetime64) -> str:
    """A length of time: years, or days when there are less than one."""
    length = int((last - first) / np.timedelta64(1, "D"))
    years = length / DAYS_IN_CALENDAR_YEAR
    return f"{years:.1f} years" if years >= 1 else counted(length, "day")


def counted(count: int, one: str, many: str | None = None) -> str:
    """``1 roll``, ``2 rolls``."""
    return f"{count:,} {one if count == 1 else many or one + 's'}"


def listed(words: Iterable[str]) -> str:
    """``a, b and c``."""
    parts = list(words)
    return parts[0] if len(parts) == 1 else ", ".join(parts[:-1]) + (" and " if parts else "") + "".join(parts[-1:])


def typographic(text: str) -> str:
    """Sentences of other modules with real minus signs; dates and compound words stay as they are.

    Examples
    --------
    >>> typographic("from -0.20 to +0.10 since 2004-06-11, a same-beta mix")
    'from −0.20 to +0.10 since 2004-06-11, a same-beta mix'
    """
    return _HYPHEN_MINUS.sub(MINUS, text)


def upper_first(text: str) -> str:
    """The first letter in upper case, the rest as it is."""
    return text[:1].upper() + text[1:]
