"""Where a replay may begin, and what it needs on every day: found before money moves (C3, C4)."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from ..bars import MOST_REPEATED_OPENS, repeated_opens
from ..calendar import inception_position
from ..errors import MarketError, OverlayError, PlanError
from ..market import Market
from ..overlay import Overlay
from ..volatility.sources import BoundVolatility, ImpliedSeries, Volatility

#: C7: beyond about four months one short-dated vol is not enough.
LONG_TERM_MONTHS = 4
SHORT_TENOR_DAYS = 120


def long_term_warning(market: Market, overlay: Overlay, volatility: Volatility) -> str | None:
    """The caution of C7 for a long option priced off a single short-dated vol as it stands, or None."""
    longest = max(leg.length_months for leg in overlay.legs)
    source = volatility.source_for(market)
    if longest <= LONG_TERM_MONTHS or not isinstance(source, ImpliedSeries):
        return None
    if volatility.term_structure == "mean reverting":
        return None
    if len(market.vol_tenor_days) > 1 or int(market.vol_tenor_days[0]) > SHORT_TENOR_DAYS:
        return None
    return (
        f"an option of {longest:.3g} months is priced off a single vol of {int(market.vol_tenor_days[0])} days; beyond "
        f"about {LONG_TERM_MONTHS} months one short-dated number is not enough, and in quiet times such options come "
        "out too cheap"
    )


def last_position(market: Market, end: np.datetime64 | None) -> int:
    """Position of the window's last day."""
    if end is None:
        return len(market) - 1
    last = int(np.searchsorted(market.dates, end, side="right")) - 1
    if last < 0:
        raise PlanError(f"the window ends on {end}, before the first price on {market.dates[0]}")
    return last


def first_position(
    market: Market,
    overlay: Overlay,
    volatility: BoundVolatility,
    *,
    start: np.datetime64 | None,
    last: int,
    inception: np.datetime64 | None,
) -> int:
    """Position of the overlay's first day (C3)."""
    lag = overlay.decide_lag
    if inception is not None:
        first = int(np.searchsorted(market.dates, inception))
        if first >= last or market.dates[first] != inception:
            raise PlanError(f"inception {inception} is not a trading day before {market.dates[last]}")
        if first < lag:
            raise PlanError(f"inception {inception} is the first price: with decide_lag = 1 a day before it is needed")
        return first
    if start is not None and start > market.dates[last]:
        raise PlanError(f"the window begins on {start}, after it ends on {market.dates[last]}")
    earliest = 0 if start is None else int(np.searchsorted(market.dates, start))
    if earliest >= last:
        raise PlanError(
            f"the window from {start if start is not None else market.dates[0]} to {market.dates[last]} holds no two "
            f"trading days; the prices run from {market.dates[0]} to {market.dates[-1]}"
        )
    rate_known = np.flatnonzero(~np.isnan(market.rate))
    first_rate = int(rate_known[0]) if rate_known.size else len(market)
    usable = max(earliest, volatility.first_day + lag, first_rate + lag, lag)
    if usable >= last:
        raise PlanError(
            f"no day before {market.dates[last]} has price, vol and rate together: "
            f"{_begins(market, 'vol', volatility.first_day)}, {_begins(market, 'rate', first_rate)} (realised vol "
            "needs the prices of its whole window first)"
        )
    cycle = overlay.anchor.cycle.moved(-overlay.anchor.close_before)
    return inception_position(market.dates, cycle=cycle, earliest=usable, latest=last)


def check_data(market: Market, volatility: BoundVolatility, first: int, last: int) -> None:
    """Raise MarketError unless every day from ``first`` to ``last`` has a vol and a rate."""
    unknown = np.flatnonzero(np.isnan(market.rate[first : last + 1]))
    missing_rate = first + int(unknown[0]) if unknown.size else None
    for what, position in (("vol", volatility.missing(first, last)), ("rate", missing_rate)):
        if position is not None:
            raise MarketError(
                f"no {what} on {market.dates[position]}, inside the window from {market.dates[first]} to "
                f"{market.dates[last]}: fill it or choose a window without it"
            )


def check_opens(market: Market, first: int, last: int) -> None:
    """Raise MarketError unless the days from ``first`` to ``last`` have real opens."""
    if market.open is None:
        raise MarketError('settlement = "open" needs opening prices, and the history has no column open')
    opens = market.open[first : last + 1]
    missing = np.flatnonzero(np.isnan(opens))
    if missing.size:
        raise MarketError(
            f'settlement = "open" needs opening prices, and {market.dates[first + int(missing[0])]} has none'
        )
    share = float(np.mean(repeated_opens(market)[first + 1 : last + 1]))
    if share > MOST_REPEATED_OPENS:
        raise MarketError(
            f'settlement = "open" needs real opening prices, and {share:.0%} of those from {market.dates[first]} to '
            f"{market.dates[last]} only repeat the close before"
        )


def _begins(market: Market, what: str, position: int) -> str:
    return f"the {what} begins on {market.dates[position]}" if position < len(market) else f"no day has a {what}"


def as_day(value: object, name: str) -> np.datetime64 | None:
    """A date in any usual form as ``datetime64[D]``; None stays None.

    Raises
    ------
    OverlayError
        If it is not a date.
    """
    if value is None:
        return None
    try:
        day: npt.NDArray[np.datetime64] = np.array(value, dtype="datetime64[D]")
        if day.shape == () and not np.isnat(day):
            return np.datetime64(day.item(), "D")
    except (TypeError, ValueError):
        pass
    raise OverlayError(f"{name} is {value!r}; it takes a date such as 2008-03-20", field=name)
