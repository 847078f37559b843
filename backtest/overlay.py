"""The agreement: legs, account and costs. Nothing here knows how an option is priced.

Every class is frozen and checked when it is made, so that a bad number is named
where it was written and never reaches the engine.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Literal

from .arguments import number, one_of, whole_number
from .calendar import ROLL_MONTHS, ListedCycle
from .errors import OverlayError
from .strikes import StrikeRule

#: The longest term of an option, in months: ten years.
LONGEST_TERM_MONTHS = 120
#: More legs than this are taken for a mistake.
MOST_LEGS = 200


@dataclass(frozen=True, slots=True, kw_only=True)
class Leg:
    """One rolling option of an overlay (C3).

    Parameters
    ----------
    position : {"long", "short"}
        Bought or sold.
    right : {"put", "call"}
    strike : StrikeRule
        For example ``PercentOfSpot(95)``.
    roll : {"month", "quarter", "half", "year"}
        How often the option is replaced.
    term_months : int, optional
        Life of each option when opened, at least the roll; the roll itself if not given.
    phase : int
        Moves the roll months, from 0 to one less than the months of the roll.
    shift_days : int
        Moves every date of the cycle by that many trading days (C2).
    ratio : float
        Options per share, at least zero.

    Raises
    ------
    OverlayError
        If a field is outside what is said above.
    """

    position: Literal["long", "short"]
    right: Literal["put", "call"]
    strike: StrikeRule
    roll: str = "quarter"
    term_months: int | None = None
    phase: int = 0
    shift_days: int = 0
    ratio: float = 1.0
    cycle: ListedCycle = field(init=False, repr=False, compare=False)

    def __post_init__(self) -> None:
        one_of("position", self.position, ("long", "short"))
        one_of("right", self.right, ("put", "call"))
        one_of("roll", self.roll, tuple(ROLL_MONTHS))
        if isinstance(self.strike, type) or not callable(getattr(self.strike, "strikes", None)):
            raise OverlayError(
                f"strike is {self.strike!r}; give a strike rule such as PercentOfSpot(95)", field="strike"
            )
        cycle = ListedCycle(months=ROLL_MONTHS[self.roll], phase=self.phase, shift_days=self.shift_days)
        object.__setattr__(self, "cycle", cycle)
        if self.term_months is None:
            object.__setattr__(self, "term_months", self.cycle.months)
        whole_number(
            "term",
            self.term_months,
            least=self.cycle.months,
            most=LONGEST_TERM_MONTHS,
            unit=" months, at least its roll",
        )
        number("ratio", self.ratio, least=0.0, most=100.0)

    @property
    def direction(self) -> float:
        """+1.0 for a bought option, -1.0 for a sold one."""
        return 1.0 if self.position == "long" else -1.0

    @property
    def term(self) -> int:
        """Life of each option at its open, in months."""
        assert self.term_months is not None  # set in __post_init__
        return self.term_months


@dataclass(frozen=True, slots=True, kw_only=True)
class Costs:
    """What trading costs (C8).

    The cost of an option traded before expiry is the largest of the three
    half-spreads, plus the commission; it is paid at the open and at an early close.

    Parameters
    ----------
    half_spread_vol : float
        Points of vol (0.5 reprices the option half a vol point higher).
    half_spread_percent : float
        Percent of the option's mid.
    half_spread_min : float
        In price.
    commission : float
        Money per contract traded.
    multiplier : float
        Shares per contract.
    settlement_fee : float
        Money per contract for an option held to expiry that settles in the money.
    stock_bps : float
        Hundredths of a percent of the value of stock traded when packages are resized.
    """

    half_spread_vol: float = 0.5
    half_spread_percent: float = 0.0
    half_spread_min: float = 0.0
    commission: float = 0.0
    multiplier: float = 100.0
    settlement_fee: float = 0.0
    stock_bps: float = 0.0

    def __post_init__(self) -> None:
        number("half_spread_vol", self.half_spread_vol, least=0.0, most=100.0)
        number("half_spread_percent", self.half_spread_percent, least=0.0, most=100.0)
        number("half_spread_min", self.half_spread_min, least=0.0)
        number("commission", self.commission, least=0.0)
        number("settlement_fee", self.settlement_fee, least=0.0)
        number("stock_bps", self.stock_bps, least=0.0, most=1000.0)
        number("multiplier", self.multiplier, least=0.0)
        if self.multiplier == 0:
            raise OverlayError(
                "multiplier is 0; it takes a number above 0 (100 shares a contract is common)",
                field="multiplier",
            )


#: No spread, no commission, no stock cost.
NO_COSTS = Costs(half_spread_vol=0.0)

#: The accounts of C9: all wealth into whole packages at every anchor roll, or a fixed share count and cash.
ACCOUNTS = ("resize", "cash")


@dataclass(frozen=True, slots=True, kw_only=True)
class Overlay:
    """Legs around one share, an account to carry them, and what trading costs.

    Parameters
    ----------
    legs : tuple of Leg
        At least one.
    account : {"resize", "cash"}
        C9: whole packages at every anchor roll (the default), or a cash account.
    costs : Costs
    name : str

    Examples
    --------
    >>> from backtest import Leg, Overlay, PercentOfSpot
    >>> band = Overlay(
    ...     name="quarterly 95 put, monthly 110 call",
    ...     legs=(
    ...         Leg(position="long", right="put", roll="quarter", strike=PercentOfSpot(95)),
    ...         Leg(position="short", right="call", roll="month", strike=PercentOfSpot(110)),
    ...     ),
    ... )
    >>> band.anchor.roll
    'quarter'
    """

    legs: tuple[Leg, ...]
    account: str = "resize"
    costs: Costs = field(default_factory=Costs)
    name: str = ""

    def __post_init__(self) -> None:
        try:
            object.__setattr__(self, "legs", tuple(self.legs))
        except TypeError:
            raise OverlayError(f"legs is {self.legs!r}; give a tuple of backtest.Leg objects", field="leg") from None
        if not self.legs:
            raise OverlayError("an overlay needs at least one leg", field="leg")
        if len(self.legs) > MOST_LEGS:
            raise OverlayError(f"an overlay of {len(self.legs)} legs; the limit is {MOST_LEGS}", field="leg")
        for leg in self.legs:
            if not isinstance(leg, Leg):
                raise OverlayError(f"a leg is {leg!r}; give backtest.Leg objects", field="leg")
        one_of("account", self.account, ACCOUNTS)
        if not isinstance(self.costs, Costs):
            raise OverlayError(f"costs is {self.costs!r}; give a backtest.Costs object", field="costs")

    @property
    def anchor(self) -> Leg:
        """The leg whose rolls resize the package: the longest roll, the first listed among equals (C3).

        A leg of ratio zero does not take part: it must change nothing.
        """
        live = [leg for leg in self.legs if leg.ratio > 0] or list(self.legs)
        return max(live, key=lambda leg: leg.cycle.months)
