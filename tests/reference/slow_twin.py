"""The slow, readable twin of the engine: one day after another, one option at a time, in plain Python.

It is written from the conventions alone and borrows nothing from ``backtest`` but the fields of the objects
that say what was agreed (``Overlay``, ``Leg``, ``Costs``, ``Volatility``): calendar, prices, smile, vol
conversion (``slow_prices.py``), costs, interest and accounts (here) are all worked out anew, so that the
two can be wrong only independently. Clauses are cited as C1, C2, ...; read it from :func:`replay_slowly`.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, field
from datetime import date
from typing import Any

from .slow_prices import MONTHS_IN_ROLL, Calendar, History, Vols, black, normal


@dataclass
class Option:
    """An option of one leg, from its open to its close."""

    label: str
    leg: Any
    expiry: date
    closes: date
    stub: bool
    strike: float = math.nan
    row: dict[str, Any] = field(default_factory=dict)

    @property
    def signed_ratio(self) -> float:
        return self.leg.ratio if self.leg.position == "long" else -self.leg.ratio

    @property
    def price_to_open(self) -> float:
        """Per unit: mid plus cost of a bought option, less mid plus cost of a sold one (C8)."""
        return self.signed_ratio * self.row["premium"] + self.leg.ratio * self.row["cost"]


@dataclass
class Pricer:
    """Values of options on a day, from the day's own data (C4, C5, C7, C8)."""

    history: History
    vols: Vols

    def tau(self, t: int, option: Option) -> float:
        return (option.expiry - self.history.days[t]).days / 365.0

    def forward(self, t: int, option: Option) -> float:
        h = self.history
        return h.close[t] * math.exp((h.rate[t] - h.dividend_yield[t]) * self.tau(t, option))

    def sigma(self, t: int, option: Option) -> float:
        return self.vols.sigma(t, self.tau(t, option), self.forward(t, option), option.strike)

    def at_vol(self, t: int, option: Option, sigma: float) -> float:
        tau = self.tau(t, option)
        value = black(option.leg.right, self.forward(t, option), option.strike, sigma * math.sqrt(tau))
        return math.exp(-self.history.rate[t] * tau) * value

    def mid(self, t: int, option: Option) -> float:
        if option.expiry == self.history.days[t]:
            return self.intrinsic(t, option)
        return self.at_vol(t, option, self.sigma(t, option))

    def intrinsic(self, t: int, option: Option) -> float:
        return black(option.leg.right, self.history.close[t], option.strike, 0.0)

    def delta(self, t: int, option: Option) -> float:
        tau, forward = self.tau(t, option), self.forward(t, option)
        stdev = self.sigma(t, option) * math.sqrt(tau)
        d1 = math.log(forward / option.strike) / stdev + 0.5 * stdev
        sign = 1.0 if option.leg.right == "call" else -1.0
        return sign * math.exp(-self.history.dividend_yield[t] * tau) * normal(sign * d1)

    def trading_cost(self, t: int, option: Option, costs: Any) -> float:
        """C8: per option, for bought and sold alike."""
        mid, sigma = self.mid(t, option), self.sigma(t, option)
        half_spread = max(
            costs.half_spread_percent / 100.0 * mid,
            self.at_vol(t, option, sigma + costs.half_spread_vol / 100.0) - mid,
            costs.half_spread_min,
        )
        return half_spread + costs.commission / costs.multiplier


@dataclass
class TwinReplay:
    """Daily lists from inception to the end, and a row per option opened, in order of opening then leg."""

    days: list[date] = field(default_factory=list)
    wealth: list[float] = field(default_factory=list)
    cash: list[float] = field(default_factory=list)
    shares: list[float] = field(default_factory=list)
    units: list[float] = field(default_factory=list)
    option_value: list[float] = field(default_factory=list)
    delta: list[float] = field(default_factory=list)
    rolls: list[dict[str, Any]] = field(default_factory=list)


def labels(legs: Any) -> list[str]:
    """``put`` and ``call``, numbered where a right occurs more than once."""
    rights = [leg.right for leg in legs]
    return [r if rights.count(r) == 1 else f"{r}_{rights[: i + 1].count(r)}" for i, r in enumerate(rights)]


def anchor_of(overlay: Any) -> Any:
    """The leg with the longest roll, the first listed among equals (C3); a leg of ratio zero takes no part."""
    anchor = None
    for leg in overlay.legs:
        longer = anchor is None or MONTHS_IN_ROLL[leg.roll] > MONTHS_IN_ROLL[anchor.roll]
        if leg.ratio > 0 and longer:
            anchor = leg
    return anchor


def packages(wealth: float, per_unit: float, spot: float, shares: float, stock_bps: float) -> float:
    """C9 resize: ``units * per_unit = wealth - stock cost``, the cost being that of the shares bought or sold."""
    fee = stock_bps / 1e4 * spot
    bought = (wealth + fee * shares) / (per_unit + fee)  # if shares are bought: fee * (units - shares)
    sold = (wealth - fee * shares) / (per_unit - fee)  # if shares are sold: fee * (shares - units)
    return bought if bought >= shares else sold


def replay_slowly(
    history: History,
    overlay: Any,
    volatility: Any,
    start: date | None = None,
    end: date | None = None,
    inception: date | None = None,
) -> TwinReplay:
    """Replay one overlay day by day."""
    calendar, vols = Calendar(history.days), Vols(history, volatility)
    anchor_dates = {calendar.expiry(m) for m in calendar.roll_months(anchor_of(overlay))}

    # C3: inception is the first roll date of the anchor in the window on which price, vol and rate are known
    def may_begin(t: int) -> bool:
        day = history.days[t]
        wanted = day == inception if inception else day in anchor_dates and (start is None or day >= start)
        return wanted and vols.known(t) and not math.isnan(history.rate[t])

    days = range(len(history.days))
    first = next(t for t in days if may_begin(t))
    last = max(t for t in days if end is None or history.days[t] <= end)

    holder = Holder(overlay, calendar, Pricer(history, vols), shares=1.0 / history.close[first])
    for t in range(first, last + 1):
        if t > first:
            holder.earn(t)
        holder.settle(t)
        opening = holder.choose(t)
        if t == first or history.days[t] in anchor_dates:
            holder.resize(t, opening)
        holder.buy_and_sell(opening)
        holder.mark(t, is_first=t == first)
    holder.mark_open_rolls(last)
    return holder.out


@dataclass
class Holder:
    """Somebody who holds shares, cash and options, and does each day what was agreed."""

    overlay: Any
    calendar: Calendar
    pricer: Pricer
    shares: float
    cash: float = 0.0
    units: float = 0.0
    live: dict[str, Option] = field(default_factory=dict)
    out: TwinReplay = field(default_factory=TwinReplay)

    def earn(self, t: int) -> None:
        """Interest at the rate of the previous day (C11); dividends into shares at the ex-date close (C9)."""
        h = self.pricer.history
        self.cash *= math.exp(h.rate[t - 1] * (h.days[t] - h.days[t - 1]).days / 365.0)
        self.shares *= 1.0 + h.dividend[t] / h.close[t]

    def settle(self, t: int) -> None:
        """Settle what expires today, buy or sell back what is replaced before its expiry (C3, C8)."""
        today, costs = self.pricer.history.days[t], self.overlay.costs
        for name, option in list(self.live.items()):
            if option.closes != today:
                continue
            value = self.pricer.mid(t, option)
            if option.expiry == today:
                exit_cost = costs.settlement_fee / costs.multiplier if value > 0.0 else 0.0
            else:
                exit_cost = self.pricer.trading_cost(t, option, costs)
            self.cash += self.units * (option.signed_ratio * value - option.leg.ratio * exit_cost)
            row = option.row
            row.update(closed=today, spot_close=self.pricer.history.close[t], settled=value, exit_cost=exit_cost)
            row["profit"] = option.signed_ratio * (value - row["premium"])
            row["profit"] -= option.leg.ratio * (row["cost"] + exit_cost)
            del self.live[name]

    def choose(self, t: int) -> dict[str, Option]:
        """Strike and price an option for every leg that has none: all of them on inception (C3, C6)."""
        today, spot = self.pricer.history.days[t], self.pricer.history.close[t]
        opening: dict[str, Option] = {}
        for name, leg in zip(labels(self.overlay.legs), self.overlay.legs):
            if name in self.live:
                continue
            expiry, closes, stub = self.calendar.terms(leg, today)
            option = Option(label=name, leg=leg, expiry=expiry, closes=closes, stub=stub)
            forward = self.pricer.forward(t, option)
            option.strike = (forward if "Forward" in type(leg.strike).__name__ else spot) * leg.strike.percent / 100.0
            option.row = {"leg": name, "right": leg.right, "position": leg.position, "ratio": leg.ratio, "stub": stub}
            option.row.update(opened=today, expiry=expiry, closed=None, spot_open=spot, forward=forward)
            option.row.update(
                strike=option.strike, vol=self.pricer.sigma(t, option), delta=self.pricer.delta(t, option)
            )
            option.row["premium"] = self.pricer.mid(t, option)
            option.row["cost"] = self.pricer.trading_cost(t, option, self.overlay.costs)
            opening[name] = option
            self.out.rolls.append(option.row)
        return opening

    def resize(self, t: int, opening: dict[str, Option]) -> None:
        """The anchor's roll: all wealth into packages, or as many options as there are shares (C9)."""
        spot, stock_bps = self.pricer.history.close[t], self.overlay.costs.stock_bps
        live_per_unit = math.fsum(o.signed_ratio * self.pricer.mid(t, o) for o in self.live.values())
        if self.overlay.account == "resize":
            wealth = self.shares * spot + self.cash + self.units * live_per_unit
            per_unit = spot + live_per_unit + math.fsum(o.price_to_open for o in opening.values())
            units = packages(wealth, per_unit, spot, self.shares, stock_bps)
            traded = units - self.shares
            self.cash -= traded * spot + stock_bps / 1e4 * spot * abs(traded)
            self.shares = units
        else:
            units = self.shares
        self.cash -= (units - self.units) * live_per_unit  # legs still live change their count at mid, without cost
        self.units = units

    def buy_and_sell(self, opening: dict[str, Option]) -> None:
        """Open what was chosen: mid plus cost for a bought option, mid minus cost for a sold one (C8)."""
        for name, option in opening.items():
            self.cash -= self.units * option.price_to_open
            option.row["units"] = self.units
            self.live[name] = option

    def mark(self, t: int, *, is_first: bool) -> None:
        """Wealth after the day's trades (C9); 1 on the first day, before them; NaN once nothing is left."""
        spot, live, out = self.pricer.history.close[t], self.live.values(), self.out
        option_value = self.units * math.fsum(o.signed_ratio * self.pricer.mid(t, o) for o in live)
        option_delta = self.units * math.fsum(o.signed_ratio * self.pricer.delta(t, o) for o in live)
        wealth = 1.0 if is_first else self.shares * spot + self.cash + option_value
        if not wealth > 0.0 or (out.wealth and math.isnan(out.wealth[-1])):
            wealth = math.nan
        out.days.append(self.pricer.history.days[t])
        out.wealth.append(wealth)
        out.cash.append(self.cash)
        out.shares.append(self.shares)
        out.units.append(self.units)
        out.option_value.append(option_value)
        out.delta.append((self.shares + option_delta) * spot / wealth)

    def mark_open_rolls(self, t: int) -> None:
        """An option still live at the end is reported open at its mark, never as settled (C3)."""
        for option in self.live.values():
            row = option.row
            row["open_value"] = self.pricer.mid(t, option)
            row["profit"] = option.signed_ratio * (row["open_value"] - row["premium"]) - option.leg.ratio * row["cost"]
