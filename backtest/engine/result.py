"""What a replay gives back: wealth at once, everything else when it is asked for."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from functools import cached_property
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

from ..market import Market
from ..overlay import Leg, Overlay
from ..volatility.sources import Volatility
from .exact_accounts import ExactAccount
from .families import FamilyReplay
from .leg_replay import LegReplay, counted, held, leg_labels, of_day
from .legs import held_days
from .plan import BookKey

if TYPE_CHECKING:
    import pandas as pd

    from ..analytics.greeks import Greeks
    from ..pricing.day_state import DayState

Array = npt.NDArray[np.float64]


class Replay:
    """One overlay replayed on one market.

    Attributes
    ----------
    market, overlay, volatility
        What was replayed.
    wealth : ndarray, shape (day,)
        Growth of 1 after each day's trades; exactly 1 on the first day, whose trading costs show in the
        next day's return. NaN from the day on which nothing is left.
    """

    def __init__(self, found: FamilyReplay, member: int, overlay: Overlay) -> None:
        self.market: Market = found.plan.market
        self.overlay = overlay
        self.volatility: Volatility = found.volatilities[member]
        self.wealth: Array = found.wealth[member]
        self._found = found
        self._plan = found.plan
        self._family = found.family
        self._state = found.state
        self._accounts = found.accounts
        self._member = member
        self._leg_paths = found.legs
        self._book_rolls = found.book_rolls

    def __len__(self) -> int:
        return len(self.wealth)

    def __repr__(self) -> str:
        name = self.overlay.name or "overlay"
        return f"<Replay {name}: {self.dates[0]} to {self.dates[-1]}, growth of 1 to {self.wealth[-1]:.4f}>"

    @property
    def window(self) -> slice:
        """The replay's days in the market's arrays."""
        return slice(self._plan.start, self._plan.end + 1)

    @property
    def dates(self) -> npt.NDArray[np.datetime64]:
        """Trading days from inception to the end, shape ``(day,)``."""
        return self._found.dates

    @property
    def spot(self) -> Array:
        """Closing prices, shape ``(day,)``."""
        return self._state.spot

    @property
    def hold(self) -> Array:
        """Growth of 1 in the share alone, dividends reinvested, shape ``(day,)`` (C10)."""
        return self._found.hold

    @property
    def rate_return(self) -> Array:
        """Return on cash of each day at the previous day's rate, shape ``(day,)``; zero on the first (C11)."""
        return self._found.rate_return

    @cached_property
    def units(self) -> Array:
        """Units held after each day's trades, per 1 of starting wealth, shape ``(day,)``."""
        return self._accounts.units[self._member].take(self._state.anchor_of_day)

    @cached_property
    def shares(self) -> Array:
        """Shares held after each day's trades, shape ``(day,)``."""
        if self.overlay.account == "resize":
            return self.units * self._state.shares
        return self._state.share_growth / self._state.spot[0]

    @cached_property
    def leg_count(self) -> Array:
        """Options of each leg held per 1 of starting wealth after each day's trades, shape ``(leg, day)``.

        Counted whether or not the leg has an option on that day; unsigned.
        """
        if self._exact is not None:
            return self._exact.count.take(self._state.anchor_of_day, axis=1)
        return np.array([held(leg.held_ratio, self.units) for leg in self.overlay.carried])

    @property
    def _exact(self) -> ExactAccount | None:
        return self._accounts.exact.get(self._member)

    @cached_property
    def cash(self) -> Array:
        """Cash after each day's trades, shape ``(day,)``; on the first day the trading costs have left it."""
        if self._exact is not None:
            return self._exact.cash
        total = np.zeros(len(self))
        for leg, number in zip(self.overlay.carried, self._rows, strict=True):
            total += held(leg.held_ratio, self._book_rolls[number].cash)
        return total * (self.units if self.overlay.account == "resize" else 1.0 / self._state.spot[0])

    @cached_property
    def option_value(self) -> Array:
        """Value of all options at mid after each day's trades, shape ``(day,)``."""
        return self.leg_value.sum(axis=0)

    @cached_property
    def leg_value(self) -> Array:
        """Signed value of each leg at mid after each day's trades, shape ``(leg, day)``."""
        return np.array([leg.leg.direction * counted(leg.count, leg.daily_mark) for leg in self.legs])

    @cached_property
    def leg_dollar_delta(self) -> Array:
        """Signed spot delta of each leg times spot, over wealth, shape ``(leg, day)``."""
        scale = self.spot / self.wealth
        return np.array([scale * leg.leg.direction * counted(leg.count, leg.daily_delta) for leg in self.legs])

    @cached_property
    def delta(self) -> Array:
        """Dollar delta of the whole package over wealth after each day's trades, shape ``(day,)``."""
        return self.shares * self.spot / self.wealth + self.leg_dollar_delta.sum(axis=0)

    @cached_property
    def greeks(self) -> Greeks:
        """Gamma, vega, theta and rho of the package and of each leg, per unit of wealth, after each day's trades."""
        from ..analytics.greeks import greeks_of

        return greeks_of(self)

    @cached_property
    def leg_profit(self) -> Array:
        """Profit at mid of each leg over each day, before costs, shape ``(leg, day)``; zero on the first."""
        profit = np.zeros((len(self.legs), len(self)))
        for row, leg in enumerate(self.legs):
            # the option held overnight is worth its mark, or what it settles or sells for on the day it is closed
            ending = leg.daily_mark.copy()
            ending[leg.opened] = 0.0
            ending[leg.closed[leg.done]] = leg.close_value[leg.done]
            profit[row, 1:] = leg.leg.direction * counted(leg.count[:-1], ending[1:] - leg.daily_mark[:-1])
        return profit

    @cached_property
    def stock_profit(self) -> Array:
        """Profit of the shares over each day, dividends included, shape ``(day,)``; zero on the first."""
        growth = self.hold
        profit = np.zeros(len(self))
        profit[1:] = self.shares[:-1] * self.spot[:-1] * (growth[1:] / growth[:-1] - 1.0)
        return profit

    @cached_property
    def interest(self) -> Array:
        """Interest on cash over each day, shape ``(day,)``; less what negative cash costs above the rate."""
        profit = np.zeros(len(self))
        profit[1:] = self.cash[:-1] * self.rate_return[1:]
        return profit - self.borrow_charge

    @property
    def borrow_charge(self) -> Array:
        """What negative cash cost over each day above the rate, shape ``(day,)``, positive."""
        return np.zeros(len(self)) if self._exact is None else self._exact.borrow_charge

    @cached_property
    def trading_cost(self) -> Array:
        """Spread, commission and stock cost paid on each day, shape ``(day,)``, positive."""
        cost = np.zeros(len(self))
        for leg in self.legs:
            cost[leg.opened] += counted(leg.count[leg.opened], leg.open_cost)
            closed = leg.closed[leg.done]
            cost[closed] += counted(leg.count[closed - 1], leg.exit_cost[leg.done])
        cost[self._state.anchor_day] += self._accounts.stock_cost[self._member]
        return cost

    @cached_property
    def legs(self) -> tuple[LegReplay, ...]:
        """The legs, in the overlay's order."""
        labels, legs = leg_labels(self.overlay), self.overlay.carried
        return tuple(
            self._leg(label, leg, number, count)
            for label, leg, number, count in zip(labels, legs, self._rows, self.leg_count, strict=True)
        )

    @property
    def _rows(self) -> tuple[int, ...]:
        return self._family.holdings[self._member]

    def held_days(self, leg: int) -> tuple[npt.NDArray[np.intp], DayState]:
        """The days on which a leg, counted from 0, holds an option after the day's trades, and their forward, discount,
        time to expiry and smile; each of shape ``(held day,)``.
        """
        return held_days(self._plan, self._leg_paths[self._key(self._rows[leg]).group])

    def _key(self, number: int) -> BookKey:
        return list(self._family.books)[number]

    def _leg(self, label: str, leg: Leg, number: int, count: Array) -> LegReplay:
        key = self._key(number)
        paths, rolls, row = self._leg_paths[key.group], self._book_rolls[number], key.row
        schedule = paths.schedule
        opened = schedule.opened - self._plan.start
        return LegReplay(
            label=label,
            leg=leg,
            schedule=schedule,
            opened=opened,
            closed=schedule.closed - self._plan.start,
            strike=paths.strike[row],
            strike_flags=paths.flags[row],
            forward=paths.forward_open,
            vol=paths.vol_open[row],
            premium=paths.premium[row],
            delta=paths.delta_open[row],
            open_cost=rolls.open_cost,
            close_value=paths.close_value[row],
            exit_cost=rolls.exit_cost,
            units=self.units[opened],
            count=count,
            flat=paths.roll_of_day < 0,
            daily_strike=of_day(paths.strike[row], paths.roll_of_day),
            daily_mark=paths.mark[row],
            daily_delta=paths.delta[row],
        )

    def to_frame(self) -> pd.DataFrame:
        """Daily paths as a pandas frame indexed by ``date`` (C14, without the mixes).

        Columns: ``overlay``, ``hold`` (growth of 1), ``delta`` (dollar delta over wealth), ``gamma``, ``vega``,
        ``theta``, ``rho`` (money per unit of wealth, for 1% of spot, 1 vol point, 1 calendar day and 1 percentage
        point of rate; see :class:`backtest.analytics.Greeks`), ``cash``, ``option_value``, ``shares``, ``units`` (per
        1 of starting wealth), and for each leg ``<leg>_strike`` and ``<leg>_mark`` in price.
        """
        import pandas as pd

        columns = {
            "overlay": self.wealth,
            "hold": self.hold,
            "delta": self.delta,
            **self.greeks.package(),
            "cash": self.cash,
            "option_value": self.option_value,
            "shares": self.shares,
            "units": self.units,
        }
        for leg in self.legs:
            columns[f"{leg.label}_strike"] = leg.daily_strike
            columns[f"{leg.label}_mark"] = leg.daily_mark
        return pd.DataFrame(columns, index=pd.DatetimeIndex(self.dates.astype("datetime64[ns]"), name="date"))

    def rolls_frame(self) -> pd.DataFrame:
        """A row per option opened, in order of opening then leg (C14).

        ``cost`` and ``exit_cost`` are per option, ``profit`` per unit, signed and after costs. An option
        still live has no ``closed``, ``spot_close`` or ``settled``; its mark stands in ``open_value``, and
        its profit is at that mark.
        """
        import pandas as pd

        frames = []
        for order, leg in enumerate(self.legs):
            live = leg.schedule.live
            closed = self.dates[leg.closed].astype("datetime64[ns]")
            closed[live] = np.datetime64("NaT")
            frames.append(
                pd.DataFrame(
                    {
                        "leg": leg.label,
                        "right": leg.leg.right,
                        "position": leg.leg.position,
                        "ratio": float(leg.leg.ratio),
                        "opened": self.dates[leg.opened].astype("datetime64[ns]"),
                        "expiry": leg.schedule.expiry_day.astype("datetime64[D]").astype("datetime64[ns]"),
                        "closed": closed,
                        "spot_open": self.spot[leg.opened],
                        "forward": leg.forward,
                        "strike": leg.strike,
                        "vol": leg.vol,
                        "premium": leg.premium,
                        "cost": leg.open_cost,
                        "units": leg.units,
                        **self._contracts(leg),
                        "delta": leg.delta,
                        "spot_close": np.where(live, np.nan, self.spot[leg.closed]),
                        "settled": np.where(live, np.nan, leg.close_value),
                        "exit_cost": np.where(live, np.nan, leg.exit_cost),
                        "open_value": np.where(live, leg.close_value, np.nan),
                        "profit": leg.profit,
                        "flag": leg.flags(),
                        "_order": order,
                    }
                )
            )
        rolls = pd.concat(frames, ignore_index=True).sort_values(["opened", "_order"], kind="stable")
        return rolls.drop(columns="_order").reset_index(drop=True)

    def _contracts(self, leg: LegReplay) -> dict[str, Array]:
        """Whole contracts held of each option from its open, where there is a portfolio."""
        if self.overlay.portfolio is None:
            return {}
        per_contract = self.overlay.costs.multiplier / self.overlay.portfolio
        return {"contracts": np.round(leg.count[leg.opened] / per_contract)}


class Replays(Sequence[Replay]):
    """The replays of many overlays, in the caller's order."""

    def __init__(self, replays: list[Replay]) -> None:
        self._replays = replays

    def __len__(self) -> int:
        return len(self._replays)

    def __getitem__(self, index):  # type: ignore[no-untyped-def]  # int or slice, as in any sequence
        found = self._replays[index]
        return Replays(found) if isinstance(index, slice) else found

    def __iter__(self) -> Iterator[Replay]:
        return iter(self._replays)

    def __repr__(self) -> str:
        return f"<Replays of {len(self)} overlays>"
