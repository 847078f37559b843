"""What an overlay is worth at expiry, over all prices at which the stock may end, in an assumed market.

All options are opened today at the close, by the engine's own strike rules, prices and costs (C5 to C8): an overlay as
it begins, without a history. Per share, and with the account of C9 that keeps its shares: what the options cost, or
bring, is cash that pays or earns the rate until the day of the picture.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from ..errors import OverlayError
from ..leg import Leg
from ..overlay import Costs, Overlay
from ..pricing.day_state import DayState
from ..strikes import LinkedOption, OpenState, limit_strikes
from ..volatility import Volatility

Array = npt.NDArray[np.float64]

#: Prices at the end, in percent of today's: from, to, and how many steps between.
LOWEST_END, HIGHEST_END, STEPS = 60.0, 140.0, 320
#: Trading days of a year (C1).
TRADING_DAYS = 252
#: Years that are nothing: a part of a second.
NO_TIME = 1e-9


@dataclass(frozen=True, slots=True, kw_only=True)
class AssumedMarket:
    """A market that stands still: price, at-the-money vol of every term, annual effective rate; no dividends.

    ``vol`` and ``rate`` are decimals.
    """

    spot: float = 100.0
    vol: float = 0.20
    rate: float = 0.02

    @property
    def log_rate(self) -> float:
        """Continuously compounded annual rate (C5)."""
        return math.log1p(self.rate)

    def day_state(self, spot: Array, years: float, volatility: Volatility, right: str) -> DayState:
        """What pricing needs at some prices, shape ``(price,)``, for an expiry so many years away."""
        interest = np.full(spot.shape, self.log_rate * years)
        return DayState(
            spot=spot,
            forward=spot * np.exp(interest),
            log_forward=np.log(spot) + interest,
            discount=np.exp(-interest),
            growth=np.ones(spot.shape),
            tau_years=np.full(spot.shape, years),
            smile=volatility.smile.slice(np.full(spot.shape, self.vol**2 * years)),
            vol_shift=volatility.shift(right),
        )


#: The market of the pictures.
ASSUMED = AssumedMarket()


@dataclass(frozen=True, slots=True, kw_only=True)
class OpenedOption:
    """The option that one leg opens today.

    Attributes
    ----------
    number : int
        Of the leg, from 1. The tranches of a ladder are one option here: opened on the same day they are the same.
    strike, premium, cost : float
        In price; the mid, and the cost of trading one option (C8).
    life_years, held_years : float
        To its expiry, and to the roll at which it is replaced; the second is never longer.
    flags : int
        What happened to the strike on its way from the rule; see :func:`backtest.strikes.flag_words`.
    """

    leg: Leg
    number: int
    strike: float
    premium: float
    cost: float
    life_years: float
    held_years: float
    flags: int

    @property
    def paid(self) -> float:
        """What one option costs when it is opened, after the half-spread; below zero for what it brings."""
        return self.leg.direction * self.premium + self.cost


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Payoff:
    """What the stock alone and the stock with its options are worth, over prices at the end.

    Attributes
    ----------
    options : tuple of OpenedOption
        Those that are held, in the order of the legs.
    years : float
        From today to the picture, which is taken at the first expiry; later options stand at their model value then.
    ends, values : ndarray, shape (price,)
        Price at the end, and stock with options, both in percent of today's price. Strikes are among the ends.
    replaced_years : float or None
        From today to the first roll, where that comes before the first expiry; ``replaced_values`` are of that day.
    """

    overlay: Overlay
    volatility: Volatility
    market: AssumedMarket
    options: tuple[OpenedOption, ...]
    years: float
    ends: Array
    values: Array
    replaced_years: float | None = None
    replaced_values: Array | None = None

    @property
    def net_premium(self) -> float:
        """What all options cost today, half-spreads included, in percent of spot; below zero for what they bring."""
        return 100.0 * sum(option.leg.held_ratio * option.paid for option in self.options) / self.market.spot


def payoff_at_expiry(
    overlay: Overlay, volatility: Volatility, *, market: AssumedMarket = ASSUMED, lives: Sequence[float] | None = None
) -> Payoff:
    """Stock and stock with options at the first expiry.

    Gates are taken as open and early rules as silent; ratchets and kept strikes have nothing to go by yet.

    Parameters
    ----------
    lives : sequence of float, optional
        Years to the expiry of each leg's option, in place of the round terms (:func:`life_years`).

    Raises
    ------
    OverlayError
        If no option is held, or one has no price in the assumed market.

    Examples
    --------
    >>> from backtest import NO_COSTS, Leg, PercentOfSpot
    >>> put = Leg(position="long", right="put", roll="quarter", strike=PercentOfSpot(95))
    >>> found = payoff_at_expiry(Overlay(legs=(put,), costs=NO_COSTS), Volatility())
    >>> found.years, round(found.net_premium, 2), round(float(found.values[0]), 2)
    (0.25, 2.38, 92.61)
    """
    opened = open_options(overlay, volatility, market=market, lives=lives)
    held = tuple(option for option in opened if option.leg.held_ratio > 0.0)
    if not held:
        raise OverlayError("no leg holds an option: there is nothing to show", field="leg")
    strikes = np.array([option.strike for option in held]) * (100.0 / market.spot)
    shown = strikes[(strikes > LOWEST_END) & (strikes < HIGHEST_END)]
    ends = np.union1d(np.linspace(LOWEST_END, HIGHEST_END, STEPS + 1), shown)
    years = min(option.life_years for option in held)
    replaced = min(option.held_years for option in held)
    before = replaced < years - NO_TIME
    return Payoff(
        overlay=overlay,
        volatility=volatility,
        market=market,
        options=held,
        years=years,
        ends=ends,
        values=values_at(ends, held, volatility, years=years, costs=overlay.costs, market=market),
        replaced_years=replaced if before else None,
        replaced_values=values_at(ends, held, volatility, years=replaced, costs=overlay.costs, market=market)
        if before
        else None,
    )


def open_options(
    overlay: Overlay, volatility: Volatility, *, market: AssumedMarket = ASSUMED, lives: Sequence[float] | None = None
) -> tuple[OpenedOption, ...]:
    """The option of every leg, in their order; those that a strike depends on are opened before it.

    Raises
    ------
    OverlayError
        If one has no price.
    """
    opened: dict[int, OpenedOption] = {}
    waiting = dict(enumerate(overlay.legs, start=1))
    while waiting:
        # an overlay has no circles, so there is always one whose named legs are all open
        number = next(n for n, leg in waiting.items() if opened.keys() >= set(leg.named_legs))
        leg = waiting.pop(number)
        life = life_years(leg) if lives is None else lives[number - 1]
        opened[number] = _opened(overlay, number, life, opened, volatility, market)
    return tuple(opened[number] for number in sorted(opened))


def life_years(leg: Leg) -> float:
    """Years to expiry of a new option: its term, and the days before its cycle's date on which the leg rolls."""
    return leg.length_months / 12.0 + leg.close_before / TRADING_DAYS


def _opened(
    overlay: Overlay,
    number: int,
    life: float,
    opened: dict[int, OpenedOption],
    volatility: Volatility,
    market: AssumedMarket,
) -> OpenedOption:
    leg = overlay.legs[number - 1]
    day = market.day_state(np.array([market.spot]), life, volatility, leg.right)
    state = OpenState(
        day=day,
        sign=leg.sign,
        follows=np.array([False]),
        linked={name: _linked(opened[name]) for name in leg.named_legs},
        costs=overlay.costs,
        ratio=leg.ratio,
        months=leg.cycle.length_months,
    )
    strike, flags = limit_strikes(leg.strike, leg.rule.strikes(state), state)
    premium, _ = day.value_and_delta(strike, leg.sign)
    cost = day.trading_cost(overlay.costs, premium, strike, leg.sign)
    if not np.isfinite(premium + cost).all():
        raise OverlayError(f"leg {number} has no price at a vol of {100 * market.vol:g}%", field=f"leg {number}")
    return OpenedOption(
        leg=leg,
        number=number,
        strike=float(strike[0]),
        premium=float(premium[0]),
        cost=float(cost[0]),
        life_years=life,
        held_years=min(life, leg.cycle.length_months / 12.0),
        flags=int(flags[0]),
    )


def _linked(option: OpenedOption) -> LinkedOption:
    """An option as a strike that depends on it sees it."""
    leg = option.leg
    strike, premium, cost = (np.array([value]) for value in (option.strike, option.premium, option.cost))
    return LinkedOption(
        strike=strike, premium=premium, cost=cost, direction=leg.direction, ratio=leg.ratio,
        months=leg.cycle.length_months,
    )  # fmt: skip


def values_at(
    ends: Array,
    options: Sequence[OpenedOption],
    volatility: Volatility,
    *,
    years: float,
    costs: Costs,
    market: AssumedMarket = ASSUMED,
) -> Array:
    """Stock, options and cash after so many years, in percent of today's price.

    Parameters
    ----------
    ends : ndarray, shape (price,)
        Price of the stock then, in percent of today's.
    options : sequence of OpenedOption
        Those that expire then settle, the others stand at mid under the same vol and smile; none has expired before.
    """
    spot = ends * (market.spot / 100.0)
    interest = math.exp(market.log_rate * years)
    total = spot.copy()
    for option in options:
        leg, left = option.leg, option.life_years - years
        if left > NO_TIME:
            state = market.day_state(spot, left, volatility, leg.right)
            value, _ = state.value_and_delta(np.array([option.strike]), leg.sign)
            fee = 0.0
        else:
            value = np.maximum(leg.sign * (spot - option.strike), 0.0)
            fee = costs.settlement_fee / costs.multiplier
        total += leg.held_ratio * (leg.direction * value - fee * (value > 0.0) - option.paid * interest)
    return total * (100.0 / market.spot)
