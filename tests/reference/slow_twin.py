"""The slow, readable twin of the engine: one day after another, one option at a time, in plain Python.

It is written from the conventions alone and borrows nothing from ``backtest`` but the fields of the objects
that say what was agreed (``Overlay``, ``Leg``, strike rules, ``Gate``, ``Early``, ``Costs``, ``Volatility``), so
that the two can be wrong only independently. Everything else is worked out anew: dates in ``slow_calendar.py``,
prices, smile and vol conversion in ``slow_prices.py``, ladders in ``slow_lines.py``, strikes in ``slow_strikes.py``,
gates and early replacements in ``slow_rules.py``, money in ``slow_accounts.py``, the day itself here. Clauses are
cited as C1, C2, ...; read it from :func:`replay_slowly`.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, field
from datetime import date
from typing import Any

from .slow_accounts import Account, Option
from .slow_calendar import Calendar, Cycle
from .slow_lines import Line, anchor_of, lines_of, linked_line, named_legs
from .slow_prices import History, Pricer, Vols
from .slow_rules import early_reason, gate_is_on
from .slow_strikes import Linked, Wanted, agreed_strike


@dataclass
class TwinReplay:
    """Daily lists from inception to the end, and a row per option opened, in order of opening then line."""

    days: list[date] = field(default_factory=list)
    wealth: list[float] = field(default_factory=list)
    cash: list[float] = field(default_factory=list)
    shares: list[float] = field(default_factory=list)
    units: list[float] = field(default_factory=list)
    option_value: list[float] = field(default_factory=list)
    delta: list[float] = field(default_factory=list)
    rolls: list[dict[str, Any]] = field(default_factory=list)


def replay_slowly(
    history: History,
    overlay: Any,
    volatility: Any,
    start: date | None = None,
    end: date | None = None,
    inception: date | None = None,
) -> TwinReplay:
    """Replay one overlay day by day."""
    calendar, vols, lines = Calendar(history.days), Vols(history, volatility), lines_of(overlay)
    cycles = {line.label: Cycle(calendar, line) for line in lines}
    anchor_dates = cycles[anchor_of(lines).label].roll_dates
    lag = overlay.decide_lag

    # C3: inception is the first roll date of the anchor in the window on which price, vol and rate are known,
    # and on the day before if that is the day on which strikes are decided
    def may_begin(t: int) -> bool:
        day = history.days[t]
        wanted = day == inception if inception else day in anchor_dates and (start is None or day >= start)
        return wanted and t >= lag and all(vols.known(d) and not math.isnan(history.rate[d]) for d in {t, t - lag})

    days = range(len(history.days))
    first = next(t for t in days if may_begin(t))
    last = max(t for t in days if end is None or history.days[t] <= end)

    account = Account(overlay, lines, shares=1.0 / history.close[first])
    holder = Holder(overlay, lines, cycles, Pricer(history, vols), account)
    for t in range(first, last + 1):
        today, spot = history.days[t], history.close[t]
        if t > first:
            # interest at the rate of the previous day (C11)
            account.earn(history.rate[t - 1], (today - history.days[t - 1]).days / 365.0, history.dividend[t], spot)
        leaving = holder.close_options(t)
        opening = holder.choose(t, leaving, is_first=t == first)
        if t == first or today in anchor_dates:
            live = [(o.line, holder.pricer.mid(t, o.contract)) for o in holder.live.values()]
            account.anchor_roll(spot, live, list(opening.values()))
        holder.open_options(opening)
        holder.mark(t, is_first=t == first)
    holder.mark_open_rolls(last)
    return holder.out


AS_SCHEDULED, BY_ITS_GATE = "as scheduled", "closed by its gate"


@dataclass
class Leaving:
    """An option that a line held up to today's close, and whether it is replaced before its time."""

    option: Option
    early: bool


@dataclass
class Holder:
    """Somebody who holds options beside an account, and does each day what was agreed."""

    overlay: Any
    lines: list[Line]
    cycles: dict[str, Cycle]
    pricer: Pricer
    account: Account
    live: dict[str, Option] = field(default_factory=dict)
    out: TwinReplay = field(default_factory=TwinReplay)

    def decision_day(self, t: int) -> int:
        """The day whose data decide what is traded at today's close (C4)."""
        return t - self.overlay.decide_lag

    def gate_is_on(self, line: Line, t: int) -> bool:
        return line.gate is None or gate_is_on(line.gate.condition, self.pricer.history, self.decision_day(t))

    # ------------------------------------------------------------ closing

    def close_options(self, t: int) -> dict[str, Leaving]:
        """Settle what expires today; sell or buy back what is replaced before, or what a gate closes (C3, C8)."""
        leaving = {}
        for label, option in list(self.live.items()):
            reason = self.reason_to_close(option, t)
            if reason is None:
                continue
            self.close(t, option)
            if reason != AS_SCHEDULED:
                option.row["flag"].add(reason)
            leaving[label] = Leaving(option, early=reason not in (AS_SCHEDULED, BY_ITS_GATE))
            del self.live[label]
        return leaving

    def reason_to_close(self, option: Option, t: int) -> str | None:
        line, decided = option.line, self.decision_day(t)
        if option.closes == self.pricer.history.days[t]:
            return AS_SCHEDULED
        if not self.gate_is_on(line, t):  # then it runs out as it is, without being replaced early, or is closed
            return BY_ITS_GATE if line.gate.when_off == "close" else None
        if option.opened < self.pricer.history.days[decided]:  # an early rule is looked at from the day after the open
            rule, contract = line.leg.early, option.contract
            return early_reason(rule, decided, self.pricer, contract, option.premium, option.spot_open)
        return None

    def close(self, t: int, option: Option) -> None:
        h, costs, line, row = self.pricer.history, self.overlay.costs, option.line, option.row
        today = h.days[t]
        value = self.pricer.mid(t, option.contract)
        if option.contract.expiry == today:
            if line.leg.settlement == "open":
                assert h.open is not None
                to_pay = h.open[t] - option.contract.strike
                value = max(to_pay if line.leg.right == "call" else -to_pay, 0.0)
            exit_cost = costs.settlement_fee / costs.multiplier if value > 0.0 else 0.0
        else:
            exit_cost = self.pricer.trading_cost(t, option.contract, costs)
        self.account.receive(line, value, exit_cost)
        row.update(closed=today, spot_close=h.close[t], settled=value, exit_cost=exit_cost)
        row["profit"] = line.held * (line.sign * (value - option.premium) - option.cost - exit_cost)

    # ------------------------------------------------------------ opening

    def choose(self, t: int, leaving: dict[str, Leaving], *, is_first: bool) -> dict[str, Option]:
        """Strike and price an option for every line that opens one, after the lines that its strike needs (C3, C6)."""
        waiting = [line for line in self.lines if self.opens(line, t, leaving, is_first=is_first)]
        opening: dict[str, Option] = {}
        while waiting:
            line = next(x for x in waiting if not any(other in waiting for other in self.named_by(x)))
            waiting.remove(line)
            opening[line.label] = self.new_option(line, t, leaving.get(line.label), opening)
        in_order = {line.label: opening[line.label] for line in self.lines if line.label in opening}
        self.out.rolls += [option.row for option in in_order.values()]
        return in_order

    def named_by(self, line: Line) -> list[Line]:
        return [linked_line(self.lines, line, number) for number in named_legs(line.leg.strike)]

    def opens(self, line: Line, t: int, leaving: dict[str, Leaving], *, is_first: bool) -> bool:
        """Whether a line opens an option today: on inception, on its roll, early, or as its gate comes on again."""
        if line.label in self.live or not self.gate_is_on(line, t):
            return False
        replaced_early = line.label in leaving and leaving[line.label].early
        rolls = self.pricer.history.days[t] in self.cycles[line.label].roll_dates
        comes_on = line.gate is not None and line.gate.when_on == "at once"
        return is_first or rolls or replaced_early or comes_on

    def new_option(self, line: Line, t: int, leaving: Leaving | None, opening: dict[str, Option]) -> Option:
        today, spot, decided = self.pricer.history.days[t], self.pricer.history.close[t], self.decision_day(t)
        if leaving is not None and leaving.early:
            expiry, closes, stub = leaving.option.contract.expiry, leaving.option.closes, False
        else:
            expiry, closes, stub = self.cycles[line.label].terms(today)

        def linked(number: int) -> Linked | None:
            other = linked_line(self.lines, line, number)
            if other.label in self.live:
                option = self.live[other.label]
                return Linked(other, option.contract.strike, option.premium, option.cost)
            if other.label not in opening:
                return None
            contract = opening[other.label].contract  # opened today as well: as it was worth when this was decided
            cost = self.pricer.trading_cost(decided, contract, self.overlay.costs)
            return Linked(other, contract.strike, self.pricer.mid(decided, contract), cost)

        wanted = Wanted(decided, line, expiry, linked, self.pricer, self.overlay.costs)
        agreed = agreed_strike(wanted, None if leaving is None else leaving.option.agreed)
        contract = wanted.struck(agreed.strike)
        premium = self.pricer.mid(t, contract)
        cost = self.pricer.trading_cost(t, contract, self.overlay.costs)
        flags = agreed.flags | ({"stub"} if stub else set())
        if line.sign < 0.0 and premium < cost:
            flags.add("proceeds below zero")
        row = {"leg": line.label, "right": line.leg.right, "position": line.leg.position, "ratio": line.ratio}
        row["flag"] = flags
        row.update(opened=today, expiry=expiry, closed=None, spot_open=spot, forward=self.pricer.forward(t, expiry))
        row.update(strike=agreed.strike, vol=self.pricer.sigma(t, contract), delta=self.pricer.delta(t, contract))
        row.update(premium=premium, cost=cost)
        row.update(spot_close=math.nan, settled=math.nan, exit_cost=math.nan, open_value=math.nan)
        return Option(line, contract, today, closes, agreed, premium, cost, spot, row)

    def open_options(self, opening: dict[str, Option]) -> None:
        """Mid plus cost for a bought option, mid minus cost for a sold one (C8)."""
        for label, option in opening.items():
            self.account.pay_for(option)
            option.row["units"] = self.account.units
            self.live[label] = option

    # ------------------------------------------------------------ marking

    def mark(self, t: int, *, is_first: bool) -> None:
        """Wealth after the day's trades (C9); 1 on the first day, before them; NaN once nothing is left."""
        spot, out, account = self.pricer.history.close[t], self.out, self.account
        options = [(o.line, o.contract) for o in self.live.values()]
        option_value = account.value_of([(line, self.pricer.mid(t, contract)) for line, contract in options])
        option_delta = account.value_of([(line, self.pricer.delta(t, contract)) for line, contract in options])
        wealth = 1.0 if is_first else account.shares * spot + account.cash + option_value
        if not wealth > 0.0 or (out.wealth and math.isnan(out.wealth[-1])):
            wealth = math.nan
        out.days.append(self.pricer.history.days[t])
        out.wealth.append(wealth)
        out.cash.append(account.cash)
        out.shares.append(account.shares)
        out.units.append(account.units)
        out.option_value.append(option_value)
        out.delta.append((account.shares + option_delta) * spot / wealth)

    def mark_open_rolls(self, t: int) -> None:
        """An option still live at the end is reported open at its mark, never as settled (C3)."""
        for option in self.live.values():
            line, row = option.line, option.row
            row["open_value"] = self.pricer.mid(t, option.contract)
            row["profit"] = line.held * (line.sign * (row["open_value"] - option.premium) - option.cost)
            row["flag"].add("open")
