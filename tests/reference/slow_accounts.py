"""The money of the slow twin: shares, cash and counts of options, in both accounts and in whole contracts (C9).

Plain Python, borrowing nothing from ``backtest`` but the fields of its objects; see ``slow_twin.py``. All amounts
are per 1 of the wealth at inception.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, field
from datetime import date
from typing import Any

from .slow_lines import Line
from .slow_prices import Contract
from .slow_strikes import Strike


@dataclass
class Option:
    """An option of one line, from its open to its close."""

    line: Line
    contract: Contract
    opened: date
    closes: date  # as scheduled
    agreed: Strike
    premium: float
    cost: float
    spot_open: float
    row: dict[str, Any] = field(default_factory=dict)

    @property
    def price_to_open(self) -> float:
        """Of one option: mid plus cost if bought, less mid plus cost if sold (C8)."""
        return self.line.sign * self.premium + self.cost


def packages(wealth: float, per_unit: float, spot: float, shares: float, stock_bps: float) -> float:
    """C9 resize: ``units * per_unit = wealth - stock cost``, the cost being that of the shares bought or sold."""
    fee = stock_bps / 1e4 * spot
    bought = (wealth + fee * shares) / (per_unit + fee)  # if shares are bought: fee * (units - shares)
    sold = (wealth - fee * shares) / (per_unit - fee)  # if shares are sold: fee * (shares - units)
    return bought if bought >= shares else sold


@dataclass
class Account:
    """What is held: shares, cash, and of each line so many options (their sign is the line's)."""

    overlay: Any
    lines: list[Line]
    shares: float
    cash: float = 0.0
    units: float = 0.0
    counts: dict[str, float] = field(default_factory=dict)

    def earn(self, rate: float, years: float, dividend: float, spot: float) -> None:
        """Interest on cash, dearer below zero; dividends into shares at the ex-date close (C9)."""
        if self.cash < 0.0:
            rate += math.log(1.0 + self.overlay.costs.borrow_spread / 100.0)
        self.cash *= math.exp(rate * years)
        self.shares *= 1.0 + dividend / spot

    def pay_for(self, option: Option) -> None:
        self.cash -= self.counts[option.line.label] * option.price_to_open

    def receive(self, line: Line, value: float, exit_cost: float) -> None:
        """An option is settled, sold or bought back."""
        self.cash += self.counts[line.label] * (line.sign * value - exit_cost)

    def value_of(self, marks: list[tuple[Line, float]]) -> float:
        """Of the options held, or their delta in shares, given one option's."""
        return math.fsum(self.counts[line.label] * line.sign * mark for line, mark in marks)

    def anchor_roll(self, spot: float, live: list[tuple[Line, float]], opening: list[Option]) -> None:
        """All wealth into packages, or as many as there are shares; then options are counted anew (C9).

        ``live`` are the lines whose option stays, with its mid; its count changes at mid, without cost.
        """
        if self.overlay.account == "resize":
            stock_bps = self.overlay.costs.stock_bps
            wealth = self.shares * spot + self.cash + self.value_of(live)
            per_unit = spot + math.fsum(line.held * line.sign * mid for line, mid in live)
            per_unit += math.fsum(option.line.held * option.price_to_open for option in opening)
            self.units = packages(wealth, per_unit, spot, self.shares, stock_bps)
            traded = self.units - self.shares
            self.cash -= traded * spot + stock_bps / 1e4 * spot * abs(traded)
            self.shares = self.units
        else:
            self.units = self.shares
        before = self.value_of(live)
        self.counts = {line.label: self.count(line) for line in self.lines}
        self.cash -= self.value_of(live) - before

    def count(self, line: Line) -> float:
        """Options of a line until the next anchor roll."""
        portfolio, multiplier = self.overlay.portfolio, self.overlay.costs.multiplier
        if portfolio is None:
            return self.units * line.held
        contracts = math.floor(self.shares * portfolio * line.held / multiplier)
        return contracts * multiplier / portfolio
