"""What is told beside the replay itself: margin, a counterparty that defaults, a sale instead."""

from __future__ import annotations

from backtest.analytics.counterparty import Stress

from ..replay_history import SALE, Answer
from .blocks import Block, Prose, Section, Table
from .tables import return_title
from .words import counted, date, listed, percent, points, upper_first

BROKERS_RULE = (
    "By the simple rule of the exchanges' margin manuals: the option's price, and 20% of spot less the amount out of "
    "the money, or 10% of spot (of the strike for a put) where that is more; a sold put beside a bought one at most "
    "the difference of their strikes. Your broker's own rule holds, and may ask for more. Index options sold against a "
    "portfolio of stocks mostly find no cover in it: then the second row counts."
)
TAX_IS_YOUR_OWN = (
    "Gain, tax and cost are your own statements: no tax rule of any country is in here, nor when tax is due, what may "
    "be set against it, or how options beside the holding are taxed."
)


def margin_table(found: Answer) -> Table | None:
    """The largest requirement of the sold options; None where nothing is sold."""
    if found.margin is None:
        return None
    rows = [
        [title, percent(peak.share), "never" if peak.share == 0 else date(peak.day)]
        for title, peak in (
            ("with the shares as cover for sold calls", found.margin.peak_covered),
            ("with none of the shares counted", found.margin.peak_alone),
        )
    ]
    return Table(
        caption="Margin that the sold options may require, at its highest",
        head=("", "of that day's wealth", "on"), rows=rows, words=frozenset({0, 2}), notes=[BROKERS_RULE],
    )  # fmt: skip


def sale_words(found: Answer) -> Prose | None:
    """What the sale instead is, under the table of comparisons; None where none was asked for."""
    if SALE not in found.figures:
        return None
    sale = found.sale
    if sale is None:
        said = "Sale instead cannot be had: there is no same-beta mix to take its share from, or nothing is left of it"
    elif sale.share == 1.0:
        said = "Sale instead sells nothing here, since the same-beta mix holds no less than all"
    else:
        said = (
            f"Sale instead keeps the same-beta mix's {percent(sale.share, 0)} in shares and sells the rest at once; "
            f"{percent(sale.charge, 2)} of what is sold goes in cost and tax on the first day, and nothing is "
            "rebalanced afterwards, so the stock share drifts"
        )
    return Prose(f"{said}. {TAX_IS_YOUR_OWN}")


def counterparty_section(found: Answer) -> Section | None:
    """What a default of the counterparty takes; None where none was asked about."""
    stress = found.counterparty
    if stress is None:
        return None
    blocks: list[Block] = [Prose(_how(stress))]
    if stress.outside:
        days = listed(date(day) for day in stress.outside)
        verb = "lies" if len(stress.outside) == 1 else "lie"
        blocks.append(Prose(f"{days} {verb} outside the days on which this replay has wealth: nothing happens then."))
    if stress.events:
        blocks += [_events(stress), _outcome(found, stress)]
    else:
        blocks.append(Prose(f"{upper_first(why_no_default(stress))}: the figures stay what they are."))
    return Section(
        anchor="counterparty", title="If the counterparty defaults",
        question="An option dealt off-exchange is a promise. What if it is not kept?", blocks=blocks,
    )  # fmt: skip


def why_no_default(stress: Stress) -> str:
    """Why there is none, without an end."""
    if isinstance(stress.asked.default, str):
        return "no bought put that ended in this window paid off"
    return "none of the dates asked about falls into this replay"


def _how(stress: Stress) -> str:
    if isinstance(stress.asked.default, str):
        when = "at the close at which a bought put paid most"
    else:
        when = f"on {counted(len(stress.asked.default), 'date')} that you gave"
    return (
        f"All options are with one counterparty, which defaults {when}. What they are worth together at that close, "
        f"sold against bought, is owed without collateral; {percent(stress.asked.recovery, 0)} of it is recovered, by "
        "your assumption. The loss is met by selling part of everything in proportion, and the options are dealt anew "
        "elsewhere at the model's price."
    )


def _events(stress: Stress) -> Table:
    return Table(
        caption="Defaults, in percent of the wealth just before", head=("on", "owed", "lost"),
        rows=[[date(one.date), percent(one.exposure, 2), percent(one.loss, 2)] for one in stress.events],
        notes=[
            "Where the holder owes, nothing is lost. A date without trading is the next trading day.",
            *(["Each default takes its share of what the one before it left."] if len(stress.events) > 1 else []),
        ],
    )  # fmt: skip


def _outcome(found: Answer, stress: Stress) -> Table:
    own = found.figures["overlay"]
    assert own is not None
    rows = (
        (return_title(found), own.annual_return, stress.annual_return, stress.annual_return_difference),
        ("maximum drawdown", own.max_drawdown, stress.max_drawdown, stress.max_drawdown_difference),
    )
    return Table(
        caption="The overlay without and with it", head=("", "as it was", "with default", "difference, points"),
        rows=[[title, percent(was), percent(now), points(change, 2)] for title, was, now, change in rows],
        dash_means="all is lost before the history ends",
    )  # fmt: skip
