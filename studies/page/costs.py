"""Cost, ledger, attribution and roll tables of the page."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from backtest.analytics import Attribution
from backtest.analytics.ledger import Ledger
from backtest.volatility.realised import TRADING_DAYS

from ..findings import Findings
from ..replay_history import Answer
from .blocks import Table
from .tables import under_a_year
from .words import DASH, counted, date, known, number, percent, points

Array = npt.NDArray[np.float64]

#: With more legs than this, legs of one right are added up in charts and ledgers.
MOST_LEGS_APART = 3
#: ...and with more than this, in the attribution too.
MOST_LEGS_DRAWN = 8
FLOWS = ("premium", "settled", "live")
FLOW_WORDS = {
    "premium": {1.0: "premium paid", -1.0: "premium received"},
    "settled": {1.0: "settled or sold", -1.0: "settled or bought back"},
    "live": {1.0: "change in open value", -1.0: "change in open value"},
}


@dataclass(frozen=True, slots=True, kw_only=True)
class Steps:
    """Ledger lines as the page shows them: ``money`` of shape ``(span, line)``, the hold's gain first."""

    labels: tuple[str, ...]
    money: Array


def steps(ledger: Ledger, found: Answer) -> Steps:
    """The ledger's lines in words, with many legs added up by right; their sum stays that of the ledger."""
    legs = found.replay.legs
    groups: dict[str, str] = {"hold": "hold"}
    apart = len(legs) <= MOST_LEGS_APART
    for leg in legs:
        for flow in FLOWS:
            words = FLOW_WORDS[flow][leg.leg.direction] if apart else {"live": "change in open value"}.get(flow, flow)
            name = leg.label.replace("_", " ") if apart else f"{leg.leg.right}s"
            groups[f"{leg.label} {flow}"] = f"{name}: {words}"
    groups |= {"spread and fees": "spread and fees", "interest": "interest on cash", "shares": "fewer or more shares"}
    totals: dict[str, Array] = {label: np.zeros(len(ledger.labels)) for label in groups.values()}
    for column, line in enumerate(ledger.lines):
        totals[groups[line]] = totals[groups[line]] + ledger.money[:, column]
    kept = {label: money for label, money in totals.items() if label == "hold" or (money != 0).any()}
    return Steps(labels=tuple(kept), money=np.array(list(kept.values())).T)


def waterfall_table(found: Answer, findings: Findings) -> Table:
    """The bars of the waterfall, and that they sum."""
    made = steps(findings.ledger, found)
    values = made.money[0]
    rows = [[label, percent(float(v), 2, sign=True)] for label, v in zip(made.labels, values, strict=True)]
    rows.append(["overlay", percent(float(findings.ledger.overlay[0]), 2, sign=True)])
    miss = abs(float(values.sum() - findings.ledger.overlay[0]))
    checked = (
        f"The lines sum to the overlay's gain; what is left over is {miss:.0e} of starting wealth."
        if miss > 0
        else "The lines sum to the overlay's gain to the last digit."
    )
    return Table(
        caption="The bars, in percent of starting wealth", head=("", "gain"), rows=rows,
        strong=frozenset({len(rows) - 1}),
        notes=[
            "Premiums paid leave fewer shares to rise and fall; what those gained less than the hold's is the line "
            "'fewer or more shares'.",
            *([checked] if np.isfinite(miss) else []),
        ],
    )  # fmt: skip


def cost_table(found: Answer) -> Table:
    """What each leg's options cost and brought a year, in percent of spot."""
    rows = []
    for leg in found.costs.legs:
        years = found.costs.years
        settled = leg.rolls - leg.open_rolls
        back, premium = (
            leg.settled_received + leg.settled_paid + abs(leg.open_value),
            (leg.premium_paid + leg.premium_received),
        )
        values = (
            leg.premium_received - leg.premium_paid, leg.settled_received - leg.settled_paid, -leg.trading_cost,
            leg.open_value, leg.net,
        )  # fmt: skip
        rows.append(
            [
                leg.label.replace("_", " "), *(percent(v / years, 2, sign=True) for v in values),
                percent(back / premium, 0) if premium > 0 else DASH, f"{leg.paid_off} of {settled}",
            ]
        )  # fmt: skip
    return Table(
        caption="Options a year, in percent of spot",
        head=(
            "", "premium", "settled or sold", "spread and fees", "still open", "net", "share of premium that came back",
            "ended above zero",
        ),
        rows=rows,
        notes=[
            "A minus is out of the holder's pocket. For a sold option the share that came back is what went out again; "
            "what a sold call settled for is the rise above its strike that was given up."
        ],
    )  # fmt: skip


def price_of_protection(found: Answer) -> list[tuple[str, str]]:
    """Annual cost, drawdown removed, and the one over the other."""
    own, hold = found.figures["overlay"], found.figures["hold"]
    assert own is not None
    assert hold is not None
    cost, removed = hold.annual_return - own.annual_return, own.max_drawdown - hold.max_drawdown
    if not known(cost):
        return [("Cost", "cannot be had: the overlay's wealth ends before the history does")]
    less = "less" if cost >= 0 else "more"
    whole_span = under_a_year(found)
    each_year = "" if whole_span else " a year"
    what = "Cost, whole span" if whole_span else "Annual cost"
    items = [(what, f"{number(abs(1e4 * cost), 0)} basis points of wealth{each_year} {less} than the hold")]
    items.append(("Drawdown removed", f"{points(removed)} points off the deepest fall of the hold"))
    if removed > 0 and cost > 0:
        each = number(1e4 * cost / (100 * removed), 1)
        items.append(("Cost per point", f"{each} basis points{each_year} for each point of drawdown removed"))
    elif removed <= 0:
        items.append(("Cost per point", "there is none: no drawdown was removed"))
    else:
        items.append(("Cost per point", "there is none: the overlay returned no less than the hold"))
    return items


def yearly_flows(findings: Findings, found: Answer) -> Steps:
    """By year, basis points of the overlay's wealth at the start of each: shares together, then each flow."""
    ledger = findings.ledger_by_year
    made = steps(ledger, found)
    columns = dict(zip(made.labels, (1e4 * made.money / ledger.start_wealth[:, np.newaxis]).T, strict=True))
    shares = columns.pop("hold") + columns.pop("fewer or more shares", 0.0)
    merged = {"its shares": shares, **columns}
    return Steps(labels=tuple(merged), money=np.array(list(merged.values())).T)


def yearly_table(findings: Findings, found: Answer) -> Table:
    """Where each year's return came from."""
    ledger, flows = findings.ledger_by_year, yearly_flows(findings, found)
    own = 1e4 * ledger.overlay / ledger.start_wealth
    hold = 1e4 * ledger.money[:, ledger.lines.index("hold")] / ledger.start_hold
    rows = [
        [year, *(number(float(v), 0) for v in (*flows.money[row], own[row], hold[row], own[row] - hold[row]))]
        for row, year in enumerate(ledger.labels)
    ]
    return Table(
        caption="Ledger by year, basis points of the overlay's wealth at the start of each year",
        head=("year", *flows.labels, "overlay", "hold", "overlay less hold"), rows=rows, dense=True,
        notes=["The columns up to 'overlay' sum to it. The hold's is its own return."],
    )  # fmt: skip


@dataclass(frozen=True, slots=True, kw_only=True)
class Part:
    """One part of the excess return: a year, its own volatility, and its share of the variance."""

    title: str
    annual: float
    volatility: float
    risk_share: float


def attribution_parts(attribution: Attribution) -> list[Part]:
    """The parts of C12 with their volatility and share of the risk."""
    rows: list[tuple[str, Array]] = [
        ("passive equity", attribution.passive_equity),
        ("equity timing", attribution.equity_timing),
        *_by_leg(attribution),
        ("cost", attribution.cost),
        ("excess return", attribution.excess),
    ]
    return [
        Part(
            title=title,
            annual=float(np.mean(part) * TRADING_DAYS),
            volatility=float(np.std(part, ddof=1) * np.sqrt(TRADING_DAYS)) if part.size > 1 else float("nan"),
            risk_share=attribution.risk_share(part),
        )
        for title, part in rows
    ]


def _by_leg(attribution: Attribution) -> list[tuple[str, Array]]:
    legs = list(zip(attribution.labels, attribution.volatility, strict=True))
    if len(legs) <= MOST_LEGS_DRAWN:
        return [(f"volatility, {label.replace('_', ' ')}", part) for label, part in legs]
    rights = dict.fromkeys(label.split("_")[0] for label, _ in legs)
    return [
        (f"volatility, {right}s", np.sum([part for label, part in legs if label.split("_")[0] == right], axis=0))
        for right in rights
    ]


def attribution_table(parts: Sequence[Part]) -> Table:
    """Contribution, its volatility and its share of the risk."""
    rows = [
        [part.title, points(part.annual, 2), percent(part.volatility), percent(part.risk_share, 0)] for part in parts
    ]
    return Table(
        caption="Parts of the excess return", head=("", "points a year", "volatility a year", "share of risk"),
        rows=rows, strong=frozenset({len(rows) - 1}),
        notes=[
            "Passive equity is the mean delta at work all the time; timing is the delta above and below its mean; "
            "volatility is what each leg gained or lost beyond its delta; parts sum to the whole every day."
        ],
    )  # fmt: skip


def rolls_table(found: Answer) -> Table:
    """Every option opened."""
    frame = found.replay.rolls_frame()
    digits = 2 if float(np.median(found.replay.spot)) >= 20 else 4
    rows = []
    one: Any  # a row of the frame, its columns by name
    for one in frame.itertuples(index=False):
        closed = date(one.closed)
        rows.append(
            [
                f"{one.position} {str(one.leg).replace('_', ' ')}", date(one.opened), date(one.expiry),
                "open" if closed == DASH else closed, number(one.spot_open, digits), number(one.strike, digits),
                percent(one.strike / one.spot_open), percent(one.vol), number(one.premium, digits),
                percent(one.premium / one.spot_open, 2), number(one.cost, digits),
                number(one.open_value if closed == DASH else one.settled, digits),
                number(one.profit, digits, sign=True), one.flag,
            ]
        )  # fmt: skip
    return Table(
        caption=f"{counted(len(rows), 'option')} opened",
        head=(
            "option", "opened", "expiry", "closed", "spot", "strike", "of spot", "vol", "premium", "of spot",
            "half-spread, fees", "settled, sold or worth", "profit", "remark",
        ),
        rows=rows, words=frozenset({0, 1, 2, 3, 13}), dense=True,
        notes=["Prices per option at mid; profit per unit held, signed, after costs, an open one at its mark."],
    )  # fmt: skip
