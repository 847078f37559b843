"""Many overlays at once: plan, price, account, one family after the other.

A family is a matrix of wealth paths, ``(overlay, day)``: what a study needs. :func:`backtest.replay_many` makes
single replays of it.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass, replace

import numpy as np
import numpy.typing as npt

from ..errors import OverlayError
from ..market import Market
from ..overlay import Overlay
from ..volatility.sources import Volatility
from .accounts import Accounts, BookRolls, FamilyState, keep_books, settle_accounts
from .checks import as_day
from .exact_accounts import ExactAccount, carry, held_legs, is_exact
from .legs import LegPaths, PricedLegs, price_groups
from .plan import BookKey, Family, Plan, make_plans

Array = npt.NDArray[np.float64]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class FamilyReplay:
    """Overlays of one inception, anchor and account, replayed together."""

    plan: Plan
    family: Family
    state: FamilyState
    accounts: Accounts
    legs: list[LegPaths]
    book_rolls: list[BookRolls]
    ratio: Array
    volatilities: list[Volatility]  # of each overlay of the family

    @property
    def numbers(self) -> list[int]:
        """Positions of the overlays in the caller's list."""
        return self.family.members

    @property
    def wealth(self) -> Array:
        """Growth of 1, shape ``(overlay, day)``."""
        return self.accounts.wealth

    @property
    def dates(self) -> npt.NDArray[np.datetime64]:
        """Trading days from inception to the end, shape ``(day,)``."""
        return self.plan.market.dates[self.plan.start : self.plan.end + 1]

    @property
    def hold(self) -> Array:
        """Growth of 1 in the share alone, dividends reinvested, shape ``(day,)`` (C10)."""
        return self.state.hold

    @property
    def rate_return(self) -> Array:
        """Return on cash of each day at the previous day's rate, shape ``(day,)``; zero on the first (C11)."""
        return self.state.rate_return

    def options_net(self) -> Array:
        """What all options of each overlay brought after costs, in spots at their opens, shape ``(overlay,)``.

        Summed over the whole replay as :func:`backtest.analytics.roll_costs` does: per share, live options at mark.
        """
        by_book = np.array([rolls.net for rolls in self.book_rolls])
        brought = np.zeros(self.ratio.shape)
        for member, rows in enumerate(self.family.holdings):
            brought[member, : len(rows)] = by_book[list(rows)]
        return np.sum(np.where(self.ratio == 0.0, 0.0, brought * self.ratio), axis=1)


def replay_families(
    market: Market,
    overlays: Sequence[Overlay],
    *,
    volatility: Volatility | Sequence[Volatility] | None = None,
    start: object = None,
    end: object = None,
    inception: object = None,
    priced: PricedLegs | None = None,
    at_once: int | None = None,
) -> Iterator[FamilyReplay]:
    """Replay many overlays, a family at a time; parameters and errors as :func:`backtest.replay_many`.

    Parameters
    ----------
    priced : PricedLegs, optional
        Legs priced by earlier calls on the same market, and the place to keep those of this one: a grid replayed in
        batches prices each of its legs once.
    at_once : int, optional
        Overlays that are given back together at most, a family in several parts then. Few of them stay in a core's
        cache until their figures are taken.
    """
    overlays = list(overlays)
    if volatility is None or isinstance(volatility, Volatility):
        volatilities = [volatility or Volatility()] * len(overlays)
    else:
        volatilities = list(volatility)
        if len(volatilities) != len(overlays):
            raise OverlayError(
                f"{len(volatilities)} volatilities for {len(overlays)} overlays; give one, or one for each"
            )
    plans = make_plans(
        market,
        overlays,
        volatilities,
        start=as_day(start, "start"),
        end=as_day(end, "end"),
        inception=as_day(inception, "inception"),
    )
    for plan in plans:
        legs = price_groups(plan, priced)
        for family in plan.families:
            state, books, book_rolls = keep_books(plan, family, legs)
            for part in _parts(family, at_once):
                rows, ratio, stock_bps = _holdings(part, overlays)
                accounts = settle_accounts(state, books, part.account, rows, ratio, stock_bps)
                yield FamilyReplay(
                    plan=plan,
                    family=part,
                    state=state,
                    accounts=accounts.replaced(_carried(plan, state, part, overlays, legs, book_rolls)),
                    legs=legs,
                    book_rolls=book_rolls,
                    ratio=ratio,
                    volatilities=[volatilities[number] for number in part.members],
                )


def _carried(
    plan: Plan,
    state: FamilyState,
    family: Family,
    overlays: Sequence[Overlay],
    legs: list[LegPaths],
    book_rolls: list[BookRolls],
) -> dict[int, ExactAccount]:
    """Those overlays of a family that need an account of their own, by row."""
    found = {}
    keys: list[BookKey] = []
    for row, (number, held) in enumerate(zip(family.members, family.holdings, strict=True)):
        overlay = overlays[number]
        if is_exact(overlay):
            keys = keys or list(family.books)
            costs = [(book_rolls[one].open_cost, book_rolls[one].exit_cost) for one in held]
            holding = held_legs(plan, overlay, legs, [keys[one] for one in held], costs)
            found[row] = carry(plan, state, overlay, holding)
    return found


def _parts(family: Family, at_once: int | None) -> Iterator[Family]:
    """A family in parts of so many members, all with the books of the whole."""
    step = at_once or len(family.members)
    for first in range(0, len(family.members), step):
        some = slice(first, first + step)
        yield replace(family, members=family.members[some], holdings=family.holdings[some])


def _holdings(family: Family, overlays: Sequence[Overlay]) -> tuple[npt.NDArray[np.intp], Array, Array]:
    """Book rows and ratios per slot, padded with ratio zero, and each member's stock cost."""
    slots = max(len(rows) for rows in family.holdings)
    rows = np.zeros((len(family.members), slots), dtype=np.intp)
    ratio = np.zeros((len(family.members), slots))
    for member, (number, held) in enumerate(zip(family.members, family.holdings, strict=True)):
        rows[member, : len(held)] = held
        ratio[member, : len(held)] = [leg.held_ratio for leg in overlays[number].carried]
    stock_bps = np.array([overlays[number].costs.stock_bps for number in family.members])
    return rows, ratio, stock_bps
