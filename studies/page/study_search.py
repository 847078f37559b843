"""How far the search alone explains the best: the section, in plain words, and its tables (C13)."""

from __future__ import annotations

import numpy as np

from backtest.analytics.performance import TRADING_DAYS
from backtest.analytics.reality_check import RealityCheck

from ..study_answer import LEVEL, StudyAnswer
from .blocks import Definitions, Prose, Table
from .study_blocks import Part, StudyBlock
from .study_view import INFORMATION, View
from .words import counted, date, known, percent, ratio, typographic


def search(found: StudyAnswer, view: View, prefix: str) -> Part:
    """How far the search alone explains the best."""
    group, study = view.group, found.plan.study
    mix = "its same-beta mix" if study.comparison == "same-beta mix" else "the hold"
    blocks: list[StudyBlock] = []
    if group.tried > 1:
        blocks.append(
            Prose(
                f"{group.tried:,} overlays were tried. The best of many looks good even where none "
                "is, so its own figures say little. What follows asks what luck alone would have brought."
            )
        )
    blocks.append(Definitions(_items(view, mix)))
    check = group.check
    if check is None:
        why = "the study asks for no draws (resamples = 0)" if study.resamples == 0 else "the days are too few"
        blocks.append(Prose(f"The tests that draw the history again were left out: {why}."))
    elif check.reason is not None or not known(check.white):
        reason = check.reason or "the days are too few"
        blocks.append(Prose(f"The tests that draw the history again cannot be had: {typographic(reason)}."))
    else:
        blocks.append(tests_table(check))
    walk = walk_table(view, mix)
    if walk is not None:
        blocks += [walk, Prose(_walked(view))]
    elif group.tried > 1:
        blocks.append(Prose("There is no walk-forward: the days are too few, or no overlay has figures."))
    return Part(
        anchor=f"{prefix}search", title="How far the search alone explains it",
        question="Is the best good, or only the best of many?", blocks=blocks,
    )  # fmt: skip


def _items(view: View, mix: str) -> list[tuple[str, str]]:
    """What was tried, the best of it, and the chances of that."""
    group, several = view.group, view.group.tried > 1
    tried = counted(group.tried, "overlay")
    items = [("Tried", f"{tried}; {group.ruined:,} lost everything" if group.ruined else tried)]
    information = view.worth(INFORMATION.field, view.best)
    if known(information):
        which = "Information ratio of the best" if several else "Information ratio"
        items.append((which, f"{ratio(information, sign=True)}, of its daily differences to {mix}"))
    if known(group.deflated.hurdle) and several:
        hurdle = ratio(float(np.sqrt(TRADING_DAYS)) * group.deflated.hurdle, sign=True)
        items.append(("Hurdle", f"{hurdle}: what the best of so many reaches on average when none has any advantage"))
    items.append(("Probability of an advantage", _probability(view)))
    check = group.check
    if check is not None and known(check.luck):
        wide = " for a search as wide as this" if several else ""
        said = f"{chance(check.luck, check.resamples)}{wide} (the larger of White 2000 and Hansen 2005)"
        said += f"; {percent(LEVEL, 0)} and less would be convincing."
        knows = " It knows how much the overlays resemble each other." if several else ""
        items.append(("Chance of as good by luck", said + knows))
    return items


def _probability(view: View) -> str:
    found = view.group.deflated.probability
    if not known(found):
        return "cannot be had: there is no best, or the days are too few"
    convincing = f"{percent(1 - LEVEL, 0)} and more would be convincing."
    if view.group.tried == 1:
        return f"{percent(found, 0)}, with no search to allow for (Bailey and Lopez de Prado 2012); {convincing}"
    return (
        f"{percent(found, 0)} once the number tried is allowed for (deflated Sharpe ratio, Bailey and Lopez de Prado "
        f"2014); {convincing} Every overlay counts as a trial of its own, which is strict where neighbours resemble "
        "each other."
    )


def walk_table(view: View, comparison: str) -> Table | None:
    """Chosen on the days before, judged on the days after; None where there was no choice."""
    steps = view.group.steps
    if not steps or view.group.tried == 1:
        return None
    rows = [
        [
            f"{date(step.chosen_from)} to {date(step.chosen_to)}", date(step.judged_to),
            ratio(step.inside, sign=True), ratio(step.outside, sign=True), ratio(step.median_out, sign=True),
            percent(step.better_out, 0), view.all_names[step.chosen],
        ]
        for step in steps
    ]  # fmt: skip
    return Table(
        caption="Walk-forward: Sharpe ratio less the hold's, inside and outside",
        head=("chosen on", "judged up to", "inside", "outside", "median outside", "did better", "chosen"),
        rows=rows, words=frozenset({0, 1, 6}), dense=True,
        notes=[
            "Each time the overlay that was best so far is chosen and followed over the next part of the days. Beside "
            "it stand the median of all overlays there, and the share of them that did better.",
            "Best so far is the one with the highest Sharpe ratio less the hold's on the days before.",
            "Sharpe ratios, here and in the pictures, need no share of stock found with hindsight, since every mix of "
            "stock and cash has the hold's; the best of all days is the one with the highest information ratio "
            f"against {comparison}, which is made of the daily differences that the tests look at.",
        ],
    )  # fmt: skip


def _walked(view: View) -> str:
    steps = view.group.steps
    beaten = sum(step.outside > step.median_out for step in steps)
    inside = sum(step.inside for step in steps) / len(steps)
    outside = sum(step.outside for step in steps) / len(steps)
    return (
        f"Chosen on the days before and judged on the days after, {counted(len(steps), 'time')}: on average "
        f"{ratio(inside, sign=True)} inside and {ratio(outside, sign=True)} outside; "
        f"better than the median overlay {counted(beaten, 'time')}."
    )


def tests_table(check: RealityCheck) -> Table:
    """P-values of the tests that allow for the search."""
    rows = [
        ["reality check (White 2000)", chance(check.white, check.resamples), "highest mean difference"],
        [
            "superior predictive ability (Hansen 2005)", chance(check.spa_consistent, check.resamples),
            "the same in units of its own error",
        ],
        ["   its lower bound", chance(check.spa_lower, check.resamples), "overlays that did badly count for nothing"],
        ["   its upper bound", chance(check.spa_upper, check.resamples), "every overlay counts as a serious rival"],
    ]  # fmt: skip
    return Table(
        caption="Chance that luck alone brings a best as good as this one", head=("", "chance", "what it looks at"),
        rows=rows, words=frozenset({0, 2}),
        notes=[
            "The larger of the first two counts: an option that has seldom paid yet looks steady, and in units of its "
            "own error takes luck for skill.",
            f"{check.resamples:,} histories drawn from the {check.days:,} daily differences to the comparison, in runs "
            f"of {counted(round(check.block_length), 'day')} on average, all overlays together, and centred so that "
            "none is any better than its comparison."
        ],
    )  # fmt: skip


def chance(value: float, resamples: int) -> str:
    """A p-value; none is below one draw."""
    return f"under {100 / resamples:.2g}%" if value < 1 / resamples else percent(value, 0)
