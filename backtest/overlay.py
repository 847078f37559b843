"""The agreement: legs, account and costs. Nothing here knows how an option is priced.

Every class is frozen and checked when it is made, so that a bad number is named
where it was written and never reaches the engine.
"""

from __future__ import annotations

from dataclasses import dataclass, field, replace
from numbers import Integral

from .arguments import number, one_of
from .errors import OverlayError
from .gates import Gate
from .leg import Leg
from .strikes import Adjusted, PercentOfForward, PercentOfSpot, StrikeRule
from .strikes.linked import Financed, Mirrored

#: More legs than this are taken for a mistake, tranches counted one by one.
MOST_LEGS = 200


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
    borrow_spread : float
        Percent a year above the rate that is paid while cash is below zero.
    """

    half_spread_vol: float = 0.5
    half_spread_percent: float = 0.0
    half_spread_min: float = 0.0
    commission: float = 0.0
    multiplier: float = 100.0
    settlement_fee: float = 0.0
    stock_bps: float = 0.0
    borrow_spread: float = 0.0

    def __post_init__(self) -> None:
        number("half_spread_vol", self.half_spread_vol, least=0.0, most=100.0)
        number("half_spread_percent", self.half_spread_percent, least=0.0, most=100.0)
        number("half_spread_min", self.half_spread_min, least=0.0)
        number("commission", self.commission, least=0.0)
        number("settlement_fee", self.settlement_fee, least=0.0)
        number("stock_bps", self.stock_bps, least=0.0, most=1000.0)
        number("borrow_spread", self.borrow_spread, least=0.0, most=100.0, unit=" percent a year")
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
    decide_lag : {0, 1}
        With 1 all that is decided (strikes, early rules, gates) looks at the previous day and is traded at
        today's close (C4).
    portfolio : float, optional
        Money at inception; options are then held in whole contracts of ``costs.multiplier`` shares (C9).
    gate : Gate, optional
        For every leg that has no gate of its own.
    crossed : bool
        Consent to a sold call under a bought put.
    name : str

    Attributes
    ----------
    carried : tuple of Leg
        The plain legs that the engine holds: every ladder in its tranches, the overlay's gate on each leg.

    Raises
    ------
    OverlayError
        If a field is outside what is said above, or legs name legs that they cannot depend on.

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
    decide_lag: int = 0
    portfolio: float | None = None
    gate: Gate | None = None
    crossed: bool = False
    name: str = ""
    carried: tuple[Leg, ...] = field(init=False, repr=False, compare=False)
    anchor: Leg = field(init=False, repr=False, compare=False)

    def __post_init__(self) -> None:
        try:
            object.__setattr__(self, "legs", tuple(self.legs))
        except TypeError:
            raise OverlayError(f"legs is {self.legs!r}; give a tuple of backtest.Leg objects", field="leg") from None
        if not self.legs:
            raise OverlayError("an overlay needs at least one leg", field="leg")
        count, plain = 0, True
        for leg in self.legs:
            if not isinstance(leg, Leg):
                raise OverlayError(f"a leg is {leg!r}; give backtest.Leg objects", field="leg")
            count += leg.ladder
            plain = plain and leg.plain
        if count > MOST_LEGS:
            raise OverlayError(f"an overlay of {count} legs; the limit is {MOST_LEGS}", field="leg")
        one_of("account", self.account, ACCOUNTS)
        if not isinstance(self.costs, Costs):
            raise OverlayError(f"costs is {self.costs!r}; give a backtest.Costs object", field="costs")
        if (
            not isinstance(self.decide_lag, Integral)
            or isinstance(self.decide_lag, bool)
            or self.decide_lag not in (0, 1)
        ):
            raise OverlayError(f"decide_lag is {self.decide_lag!r}; it takes 0 or 1 (trading day)", field="decide_lag")
        if self.portfolio is not None:
            number("portfolio", self.portfolio, least=1.0, unit=" (money)")
        if self.gate is not None and not isinstance(self.gate, Gate):
            raise OverlayError(f"gate is {self.gate!r}; give a backtest.Gate", field="gate")
        if not isinstance(self.crossed, bool):
            raise OverlayError(f"crossed is {self.crossed!r}; it takes true or false", field="crossed")
        if not plain:
            _check_order(self.legs)
        if not self.crossed:
            _check_crossing(self)
        carried = self.legs if plain and self.gate is None else _carried(self)
        object.__setattr__(self, "carried", carried)
        object.__setattr__(self, "anchor", _anchor(carried))


def _anchor(legs: tuple[Leg, ...]) -> Leg:
    """The leg whose rolls resize the package: the longest roll, the first listed among equals (C3).

    A leg of ratio zero, or one that is never held, does not take part: it must change nothing.
    """
    live = [leg for leg in legs if leg.held_ratio > 0] or list(legs)
    return max(live, key=lambda leg: leg.cycle.length_months)


def _check_order(legs: tuple[Leg, ...]) -> None:
    """Legs that are named exist, hold as many tranches, and do not depend on the leg that names them."""
    needs = [set(leg.named_legs) for leg in legs]
    for own, (leg, named) in enumerate(zip(legs, needs, strict=True), start=1):
        ladders = {legs[other - 1].ladder for other in named if other <= len(legs)}
        for other in sorted(named):
            if other == own:
                raise OverlayError(f"leg {own} names itself; name another leg", field=f"leg {own}")
            if other > len(legs):
                raise OverlayError(f"leg {own} names leg {other}, and there are {len(legs)} leg(s)", field=f"leg {own}")
            if legs[other - 1].ladder not in (1, leg.ladder):
                raise OverlayError(
                    f"leg {own} of {leg.ladder} tranche(s) names leg {other} of {legs[other - 1].ladder}; give both "
                    "the same ladder, or none to the leg that is named",
                    field=f"leg {own}",
                )
        if len(ladders) > 1:
            raise OverlayError(
                f"leg {own} names legs of {' and '.join(map(str, sorted(ladders)))} tranche(s); give all that it names "
                "the same ladder",
                field=f"leg {own}",
            )
    known: set[int] = set()
    while len(known) < len(legs):
        ready = {one for one, named in enumerate(needs, start=1) if one not in known and named <= known}
        if not ready:
            circle = sorted(set(range(1, len(legs) + 1)) - known)
            raise OverlayError(
                f"legs {', '.join(map(str, circle))} wait for each other's strikes; one has to have a rule of its own",
                field=f"leg {circle[0]}",
            )
        known |= ready


def _check_crossing(overlay: Overlay) -> None:
    """A sold call struck under a bought put by the same rule is taken for a mistake, unless agreed to."""
    puts = [leg for leg in overlay.legs if leg.right == "put" and leg.position == "long" and leg.held_ratio > 0]
    calls = [leg for leg in overlay.legs if leg.right == "call" and leg.position == "short" and leg.held_ratio > 0]
    for put in puts:
        for call in calls:
            # one with limits around it may be lifted over the other, so only plain percents are compared
            if not isinstance(put.strike, (PercentOfSpot, PercentOfForward)) or not isinstance(
                call.strike, type(put.strike)
            ):
                continue
            if call.strike.percent < put.strike.percent:
                raise OverlayError(
                    f"the sold call at {call.strike.percent:g} lies under the bought put at {put.strike.percent:g}: "
                    "together they sell the stock forward. If that is meant, say crossed = true",
                    field=f"leg {overlay.legs.index(call) + 1}",
                )


def _carried(overlay: Overlay) -> tuple[Leg, ...]:
    """Plain legs in order, those that a leg names renumbered to the tranches that are meant."""
    if overlay.gate is None and all(leg.ladder == 1 for leg in overlay.legs):
        return overlay.legs
    legs = [leg if leg.gate is not None else replace(leg, gate=overlay.gate) for leg in overlay.legs]
    first = [1]
    for leg in legs:
        first.append(first[-1] + leg.ladder)
    carried = []
    for leg in legs:
        for tranche, plain in enumerate(leg.tranches()):
            places = {n: first[n - 1] + (tranche if legs[n - 1].ladder > 1 else 0) for n in leg.named_legs}
            # each tranche pays for its part of a leg that is not split
            part = 1.0 / leg.ladder if any(legs[n - 1].ladder == 1 for n in leg.named_legs) else 1.0
            carried.append(replace(plain, strike=_renumbered(plain.strike, places, part)) if places else plain)
    return tuple(carried)


def _renumbered(rule: StrikeRule, places: dict[int, int], part: float) -> StrikeRule:
    if isinstance(rule, Adjusted):
        limits = replace(rule, rule=_renumbered(rule.rule, places, part))
        if rule.not_below_leg is None:
            return limits
        return replace(limits, not_below_leg=places[rule.not_below_leg])
    if isinstance(rule, Financed):
        return replace(rule, share=rule.share * part, legs=tuple(places[leg] for leg in rule.legs))
    if isinstance(rule, Mirrored):
        return replace(rule, leg=places[rule.leg])
    for name in getattr(rule, "named_legs", ()):
        if places[name] != name:
            raise OverlayError(
                f"{rule!r} names leg {name} and does not go with ladders before that leg", field="strike"
            )
    return rule
