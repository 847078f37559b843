"""Small pieces of sentences."""

from __future__ import annotations

from .cells import Dates

#: Dates a sentence names before it says that there are more.
NAMED_DATES = 5


def counted(number: int, what: str) -> str:
    """A number and what it counts.

    >>> counted(1, "vol date"), counted(1234, "vol date")
    ('1 vol date', '1,234 vol dates')
    """
    return f"{number:,} {what}{'' if number == 1 else 's'}"


def some(dates: Dates) -> str:
    """The first few of some dates."""
    named = ", ".join(str(day) for day in dates[:NAMED_DATES])
    return named if len(dates) <= NAMED_DATES else f"{named}, ..."
