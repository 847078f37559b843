"""What may be wrong with the open, high and low of a day, and on how many days it may be so.

Files of an index often hold the previous close as the open, and in early years one price for all four: such bars
say nothing of the day. Settlement at the open and the volatility estimators that read bars both look here.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

from .errors import MarketError

if TYPE_CHECKING:
    from .market import Market

Array = npt.NDArray[np.float64]
Flags = npt.NDArray[np.bool_]

#: Opens that equal the close before on more than this share of days are no opens; bars without a range no bars.
MOST_REPEATED_OPENS = 0.8


def repeated_opens(market: Market) -> Flags:
    """Days whose open just repeats the close before, shape ``(day,)``; the first day has none before it.

    Raises
    ------
    MarketError
        If the market has no opens.
    """
    if market.open is None:
        raise MarketError("the history has no column open")
    return np.concatenate([[False], market.open[1:] == market.spot[:-1]])


def bars(market: Market, needed: tuple[str, ...], why: str) -> dict[str, Array]:
    """The named ones of ``open``, ``high`` and ``low``; ``why`` begins the sentence of the error.

    Raises
    ------
    MarketError
        If the market lacks one of them.
    """
    found: dict[str, Array | None] = {name: getattr(market, name) for name in needed}
    if missing := [name for name, values in found.items() if values is None]:
        raise MarketError(
            f"{why} needs the columns {', '.join(needed)}, and the history has no {' and no '.join(missing)}"
        )
    return {name: values for name, values in found.items() if values is not None}


def broken_bars(market: Market, held: dict[str, Array]) -> Flags:
    """Days whose bar cannot be: a high below the low, or the close (or the open, where it is read) outside them.

    NaN is outside of nothing.
    """
    high, low = held["high"], held["low"]
    broken = high < low
    for inside in (market.spot, held.get("open")):
        if inside is not None:
            broken |= (inside > high) | (inside < low)
    return broken


def check_bars(market: Market, needed: tuple[str, ...], *, window: int, first: int, last: int, why: str) -> None:
    """Raise MarketError unless the bars of every trailing window are real; windows end on days ``first`` to ``last``.

    Parameters
    ----------
    needed : tuple of str
        What is read besides the close, ``high`` and ``low`` among it: opens are looked at only where they are read.
    window : int
        Bars in a window.
    why : str
        Begins the sentence of the error.
    """
    held = bars(market, needed, why)
    suspects = [("highs and lows", held["high"] == held["low"], "are one and the same price")]
    if "open" in needed:
        suspects.append(("opening prices", repeated_opens(market), "only repeat the close before"))
    # days before the first whole window have no value anyway
    ends = np.arange(max(first, window - 1), last + 1)
    for what, suspect, how in suspects:
        counted = np.concatenate([[0], np.cumsum(suspect)])
        share = (counted[ends + 1] - counted[ends + 1 - window]) / window
        if (found := np.flatnonzero(share > MOST_REPEATED_OPENS)).size:
            end = int(ends[found[0]])
            raise MarketError(
                f"{why} needs real {what}, and {share[found[0]]:.0%} of those from {market.dates[end - window + 1]} to "
                f"{market.dates[end]} {how}: choose another estimator, or a window with real ones"
            )
    earliest = max(first - window + 1, 0)
    if (found := np.flatnonzero(broken_bars(market, held)[earliest : last + 1])).size:
        day = earliest + int(found[0])
        prices = ", ".join(f"{name} {values[day]:g}" for name, values in {**held, "close": market.spot}.items())
        raise MarketError(f"{why} needs bars that can be, and that of {market.dates[day]} has {prices}: correct it")
