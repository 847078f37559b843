"""What is asked beside a replay and changes nothing in it: a counterparty that fails, a sale of the shares instead."""

from __future__ import annotations

import datetime as dt
from collections.abc import Sequence
from dataclasses import dataclass

from .arguments import number
from .errors import OverlayError

#: The one day on which a default takes most: when the bought puts are worth most.
WORST_PUT_PAYOFF = "worst put payoff"


@dataclass(frozen=True, slots=True, kw_only=True)
class Counterparty:
    """Whoever owes the payoff of the bought options, and what is left of it after a default.

    Parameters
    ----------
    recovery : float
        Share of what is owed that is paid in a default, from 0 to 1; 0.4 is the usual assumption for senior unsecured
        debt (common practice).
    default : "worst put payoff" or sequence of date
        When it defaults: on the day that costs most, or on these days (dates, or ISO text); kept in order.

    Raises
    ------
    OverlayError

    Examples
    --------
    >>> Counterparty(default=["2008-10-10", "2008-09-15"]).default
    (datetime.date(2008, 9, 15), datetime.date(2008, 10, 10))
    """

    recovery: float = 0.4
    default: str | tuple[dt.date, ...] = WORST_PUT_PAYOFF

    def __post_init__(self) -> None:
        number("recovery", self.recovery, least=0.0, most=1.0, unit=" (0.4 is forty percent)")
        if self.default != WORST_PUT_PAYOFF:
            object.__setattr__(self, "default", _days(self.default))


@dataclass(frozen=True, slots=True, kw_only=True)
class Sale:
    """What it costs to sell the shares instead of protecting them.

    Parameters
    ----------
    gain_percent : float
        Percent of the shares' value that is a gain not taxed yet, from 0 to 100.
    tax_percent : float
        Percent of that gain that is paid as tax on a sale, from 0 to 100.
    cost_bps : float
        Cost of the sale, in hundredths of a percent of the value sold, from 0 to 1,000.

    Raises
    ------
    OverlayError
    """

    gain_percent: float = 0.0
    tax_percent: float = 0.0
    cost_bps: float = 0.0

    def __post_init__(self) -> None:
        number("gain_percent", self.gain_percent, least=0.0, most=100.0, unit=" (percent of the shares' value)")
        number("tax_percent", self.tax_percent, least=0.0, most=100.0, unit=" (percent of the gain)")
        number("cost_bps", self.cost_bps, least=0.0, most=1000.0, unit=" basis points")


def _days(given: object) -> tuple[dt.date, ...]:
    """Dates in order, each once."""
    if isinstance(given, str) or not isinstance(given, Sequence) or not given:
        raise OverlayError(
            f'default is {given!r}; it takes "{WORST_PUT_PAYOFF}", or a list of dates such as ["2008-10-10"]',
            field="default",
        )
    days = [_day(one) for one in given]
    twice = sorted({str(day) for day in days if days.count(day) > 1})
    if twice:
        raise OverlayError(f"default has {twice[0]} twice", field="default")
    return tuple(sorted(days))


def _day(given: object) -> dt.date:
    if isinstance(given, dt.date) and not isinstance(given, dt.datetime):
        return given
    try:
        # Python reads 20081010 and 2008-W41-5 as well
        if isinstance(given, str) and (day := dt.date.fromisoformat(given)).isoformat() == given:
            return day
    except ValueError:
        pass
    raise OverlayError(f"default holds {given!r}; it takes dates such as 2008-10-10", field="default")
