"""The same-risk contest, and what drawing the history again says of it."""

from __future__ import annotations

from collections.abc import Mapping
from typing import TypeAlias

import numpy as np

from backtest.analytics.resampling import TIE, Inference, Interval, independent_payoffs
from backtest.analytics.roll_costs import payoffs_at_close
from backtest.analytics.verdict import Difference

from ..path_names import PATHS
from ..replay_history import SALE, Answer
from .blocks import Block, Prose, Table
from .drawn import CONTEST, contest_figures
from .tables import return_title
from .words import DASH, counted, known, number, percent, ratio, typographic, upper_first

#: By comparison, then by figure of the contest.
Contest: TypeAlias = "Mapping[str, Mapping[str, Difference]]"
NAN = float("nan")

#: Figures of the contest as resampling names them.
DRAWN_NAMES = {"expected_shortfall_monthly": "shortfall_21_day"}


def contest_of(found: Answer, inference: Inference | None) -> Contest:
    """Overlay less every comparison, as resampling measures it with its interval; else from the headline figures."""
    own = found.figures["overlay"]
    assert own is not None
    made: dict[str, dict[str, Difference]] = {}
    for name, other in found.figures.items():
        if other is None or name == SALE or not (name == "hold" or name.startswith("mix_")):
            continue
        drawn = None if inference is None else inference.comparisons.get(name)
        row = {}
        for field, _, _, _ in CONTEST:
            interval = None if drawn is None else getattr(drawn, DRAWN_NAMES.get(field, field))
            if interval is not None and known(interval.value):
                ends = (interval.value, interval.low, interval.high)
            else:
                ends = (getattr(own, field) - getattr(other, field), NAN, NAN)
            # rounding is no difference: it would count as one clear of zero
            value, low, high = (0.0 if abs(end) < TIE else end for end in ends)
            row[field] = Difference(value=value, low=low, high=high)
        made[name] = row
    return made


def contest_table(contest: Contest, inference: Inference | None, *, whole_span: bool) -> Table | None:
    """Each difference with its interval."""
    if not any(known(d.value) for row in contest.values() for d in row.values()):
        return None
    rows = [
        [f"less {PATHS[name]}", *(_with_interval(row[field], scale) for field, _, _, scale in CONTEST)]
        for name, row in contest.items()
    ]
    notes = [
        "A plus means that the overlay did better: more return, a higher Sharpe ratio, a shallower fall, a lighter "
        "tail. In the figure that a mix was made to share, the difference is zero but for rounding and definition."
    ]
    between = ""
    if inference is not None and any(d.known for row in contest.values() for d in row.values()):
        between = f", with {percent(inference.level, 0)} intervals in brackets"
        notes.append(
            "Measured as in the resampled histories, which have no calendar: a year is 252 days, and a month 21 days "
            "in a row; so returns and tails can differ a little from the headline table."
        )
    return Table(
        caption=f"Overlay less each comparison{between}",
        head=("", *(t if unit == t else f"{t}, points" for _, t, unit, _ in contest_figures(whole_span=whole_span))),
        rows=rows, notes=notes, dense=True,
    )  # fmt: skip


def _with_interval(d: Difference, scale: float) -> str:
    digits = 1 if scale == 100 else 2
    text = number(scale * d.value, digits, sign=True)
    if not d.known:
        return text
    return f"{text} ({number(scale * d.low, digits, sign=True)} to {number(scale * d.high, digits, sign=True)})"


def bootstrap_blocks(found: Answer, inference: Inference | None) -> list[Block]:
    """What resampling found: how it was drawn, chances, the test of the Sharpe ratios, the overlay's own intervals."""
    blocks: list[Block] = []
    if (evidence := payoff_words(found)) is not None:
        blocks.append(Prose(evidence))
    if inference is None:
        return [*blocks, Prose("The history was not drawn again for this page: there are no intervals.")]
    if inference.reason is not None:
        blocks.append(Prose(f"Drawing the history again gives no figures here: {typographic(inference.reason)}."))
    if not known(inference.block_length):
        return blocks
    blocks.append(Prose(_how_drawn(inference)))
    return [*blocks, _chances(inference), _own_intervals(inference, return_title(found))]


def payoff_words(found: Answer) -> str | None:
    """How many separate times the bought puts paid, in words; None without a bought put."""
    puts = [leg for leg in found.replay.legs if leg.leg.right == "put" and leg.leg.direction > 0]
    if not puts:
        return None
    said = []
    for leg in puts:
        settled = payoffs_at_close(found.replay, leg)
        times = independent_payoffs(settled)
        name = "bought put" if len(puts) == 1 else leg.label.replace("_", " ")
        if not len(settled):
            said.append(f"the {name} finished no roll")
            continue
        if not times:
            said.append(f"the {name} never paid off in {counted(len(settled), 'finished roll')}")
            continue
        rolls = counted(int(np.count_nonzero(settled > 0)), "roll")
        said.append(
            f"the {name} paid off in {rolls} of {len(settled)}, {counted(times, 'separate time')} when rolls in a row "
            "count once"
        )
    return upper_first("; ".join(said)) + ": protection can be judged on no more evidence than that."


def _how_drawn(inference: Inference) -> str:
    said = (
        f"{inference.resamples:,} histories of {inference.days:,} days were drawn from the days of this one, overlay "
        f"and comparisons together, in runs of {counted(round(inference.block_length), 'day')} on average"
    )
    lengths = {name: length for name, length in inference.block_lengths.items() if known(length)}
    if lengths:
        longest = max(lengths, key=lambda name: lengths[name])
        series = longest
        for name, title in PATHS.items():
            series = series.replace(name, title)
        said += f", the longest that any series asked for ({series})"
    return f"{said}. Intervals cover {percent(inference.level, 0)}."


def _chances(inference: Inference) -> Table:
    rows = []
    for name, one in inference.comparisons.items():
        test = one.sharpe_test
        span = DASH if not known(test.low) else f"{ratio(test.low, sign=True)} to {ratio(test.high, sign=True)}"
        rows.append(
            [
                f"than {PATHS.get(name, name)}", percent(one.probability_higher_return, 0),
                percent(one.probability_higher_sharpe, 0), percent(one.probability_shallower, 0),
                ratio(test.difference, sign=True), span,
                "below 0.001" if test.p_value < 0.001 else number(test.p_value, 3),
            ]
        )  # fmt: skip
    reasons = sorted({one.reason for one in inference.comparisons.values() if one.reason})
    return Table(
        caption="Share of the drawn histories in which the overlay did better",
        head=(
            "", "higher return", "higher Sharpe ratio", "shallower fall", "Sharpe difference",
            f"its {percent(inference.level, 0)} interval", "p-value",
        ),
        rows=rows,
        notes=[
            "The last three columns test the Sharpe ratios on the history itself (Ledoit and Wolf, 2008); a p-value is "
            "the chance of so large a difference if there were none.",
            *(f"{upper_first(typographic(reason))}." for reason in reasons),
        ],
    )  # fmt: skip


def _own_intervals(inference: Inference, return_words: str) -> Table:
    own = inference.overlay
    rows: list[list[str]] = []
    for title, interval, written in (
        (return_words, own.annual_return, percent), ("volatility a year", own.volatility, percent),
        ("Sharpe ratio", own.sharpe, ratio), ("maximum drawdown", own.max_drawdown, percent),
        ("mean of the worst 5% of 21-day stretches", own.shortfall_21_day, percent),
        ("beta to the hold", own.beta, ratio),
        ("alpha a year", own.alpha, percent),
    ):  # fmt: skip
        rows.append([title, *(written(value) for value in _three(interval))])
    return Table(
        caption=f"The overlay's own figures with their {percent(inference.level, 0)} intervals",
        head=("", "this history", "from", "to"), rows=rows,
    )  # fmt: skip


def _three(interval: Interval) -> tuple[float, float, float]:
    return interval.value, interval.low, interval.high
