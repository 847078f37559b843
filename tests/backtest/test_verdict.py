"""The verdict's sentences.

Rung: hand-worked. Every branch of every rule with its exact sentence, the edges of each rule, figures that cannot be
had, and no advice anywhere.
"""

from __future__ import annotations

import re
from dataclasses import fields, replace
from typing import Any

import pytest

from backtest.analytics.robustness import BreakEven
from backtest.analytics.verdict import Clause, Difference, Evidence, verdict

NAN = float("nan")
TITLES = [
    "Protects", "Costs", "Beats holding less", "Holds under other smiles", "Holds on other roll days",
    "Holds without one crisis",
]  # fmt: skip
PROTECTS, COSTS, BEATS, SMILES, ROLL_DAYS, CRISES = range(6)


def difference(value: float, low: float, high: float) -> Difference:
    return Difference(value=value, low=low, high=high)


def turns_at(value: float | None, low: float = -20.0, high: float = 20.0) -> BreakEven:
    return BreakEven(value=value, searched=(low, high))


BASE = Evidence(
    years=18.4,
    put_payoffs=7,
    overlay_drawdown=-0.312,
    hold_drawdown=-0.552,
    probability_shallower=0.99,
    return_difference=difference(-0.0123, -0.0204, -0.0041),
    sharpe_difference=difference(0.114, 0.021, 0.207),
    same_delta_difference=difference(NAN, NAN, NAN),
    smile_differences={"flat": 0.21, "mild": 0.17, "index-like": 0.114, "steep": 0.05},
    used_smile="index-like",
    break_even=turns_at(1.74),
    roll_day_differences=[0.1, 0.2, 0.3, 0.05],
    roll_day_returns=[0.061, 0.0449, 0.07, 0.052],
    without_worst=[0.09, 0.02, 0.13],
)


def clause(number: int, **changes: Any) -> Clause:
    clauses = verdict(replace(BASE, **changes))
    assert [c.title for c in clauses] == TITLES
    return clauses[number]


def roll_days(same: int, of: int, own: float = 0.1) -> dict[str, Any]:
    """The user's own day and others: so many in all have its sign."""
    return {"roll_day_differences": [own] * same + [-own] * (of - same), "roll_day_returns": [0.02] * of}


PAID = " The bought puts paid off 7 separate times in 18 years: that is the size of the evidence."
# 55.2 less 31.2 is 24
TOOK = "It took 24.0 points off the deepest fall: -31.2% instead of -55.2%; the fall was shallower in"
DEEPER = {"overlay_drawdown": -0.6}
FELL = "Its deepest fall was -60.0%, the hold's -55.2%."
SHARPE = "that of holding less stock at the same beta (90% interval"
UNSETTLED = ": the history does not settle it."
ALONE = "a year with the roll day alone."


def on_roll_days(side: str, percent: int, of: int, span: str) -> str:
    same = f"On your roll day the overlay is {side} that mix, and so on {percent}% of the {of} possible ones"
    return f"{same}; the return ran from {span} {ALONE}"


def left_out(said: str, span: str, own: str) -> str:
    return f"It {said}: {span} in Sharpe ratio, {own} with all of them."


SENTENCES: dict[tuple[int, str, str], tuple[dict[str, Any], str]] = {
    (PROTECTS, "yes", ""): ({}, f"{TOOK} 99% of the resampled histories.{PAID}"),
    (PROTECTS, "open", ""): ({"probability_shallower": 0.871}, f"{TOOK} 87% of the resampled histories.{PAID}"),
    (PROTECTS, "no", ""): (DEEPER, f"{FELL}{PAID}"),
    (PROTECTS, "no", "one payoff"): (DEEPER | {"put_payoffs": 1, "years": 4.0}, f"{FELL}{PAID}".replace(
        "7 separate times in 18", "1 time in 4")),
    (PROTECTS, "no", "no payoff"): (DEEPER | {"put_payoffs": 0}, f"{FELL} No bought put paid off in this history, so "
        "it says nothing about protection by puts."),
    (PROTECTS, "no", "no puts"): (DEEPER | {"put_payoffs": None}, FELL),
    (COSTS, "yes", ""): ({}, "It returned 1.2 points a year less than the hold (90% interval -2.0 to -0.4)."),
    (COSTS, "no", ""): ({"return_difference": difference(0.0211, 0.004, 0.0309)},
        "It returned 2.1 points a year more than the hold (90% interval +0.4 to +3.1)."),
    (COSTS, "open", "less"): ({"return_difference": difference(-0.011, -0.024, 0.006)},
        f"It returned 1.1 points a year less than the hold (90% interval -2.4 to +0.6){UNSETTLED}"),
    (COSTS, "open", "more"): ({"return_difference": difference(0.011, -0.024, 0.036)},
        f"It returned 1.1 points a year more than the hold (90% interval -2.4 to +3.6){UNSETTLED}"),
    (BEATS, "yes", ""): ({}, f"Its Sharpe ratio was 0.11 above {SHARPE} +0.02 to +0.21)."),
    (BEATS, "no", ""): ({"sharpe_difference": difference(-0.23, -0.31, -0.04)},
        f"Its Sharpe ratio was 0.23 below {SHARPE} -0.31 to -0.04)."),
    (BEATS, "open", ""): ({"sharpe_difference": difference(-0.03, -0.11, 0.09)},
        f"Its Sharpe ratio was 0.03 below {SHARPE} -0.11 to +0.09): the two cannot be told apart."),
    (SMILES, "yes", "turned by dearer options"): ({}, "The overlay is ahead under every smile: that difference in "
        "Sharpe ratio runs from +0.05 (steep) to +0.21 (flat). It turns where all option vols are 1.7 points higher."),
    (SMILES, "yes", "turned by nothing"): (
        {"break_even": turns_at(None, -11.4, 20.0), "smile_differences": {"flat": -0.3, "steep": -0.01}},
        "The overlay is behind under every smile: that difference in Sharpe ratio runs from -0.30 (flat) to -0.01 "
        "(steep). No error of all option vols from -11 to +20 points turns it."),
    (SMILES, "no", "turned by cheaper options"): (
        {"break_even": turns_at(-0.52), "smile_differences": {"flat": 0.3, "mild": 0.1, "steep": -0.02}},
        "The prices decide it: that difference in Sharpe ratio runs from -0.02 (steep) to +0.30 (flat); used: "
        "index-like. It turns where all option vols are 0.5 points lower."),
    (ROLL_DAYS, "yes", ""): ({}, on_roll_days("ahead of", 100, 4, "4.5% to 7.0%")),
    (ROLL_DAYS, "open", ""): (roll_days(3, 4), on_roll_days("ahead of", 75, 4, "2.0% to 2.0%")),
    (ROLL_DAYS, "no", ""): (roll_days(1, 4, own=-0.1), on_roll_days("behind", 25, 4, "2.0% to 2.0%")),
    (CRISES, "yes", ""): ({}, left_out("stays ahead of that mix without each of the 3 worst falls in turn",
        "+0.02 to +0.13", "+0.11")),
    (CRISES, "no", ""): ({"without_worst": [0.09, -0.02]},
        left_out("is behind that mix without 1 of the 2 worst falls, taken one by one",
        "-0.02 to +0.09", "+0.11")),
    (CRISES, "yes", "one fall"): ({"without_worst": [-0.2], "sharpe_difference": difference(-0.1, -0.3, 0.1)},
        left_out("stays behind that mix without the worst fall", "-0.20", "-0.10")),
    (CRISES, "no", "one fall"): ({"without_worst": [0.2], "sharpe_difference": difference(-0.1, -0.3, 0.1)},
        left_out("is ahead of that mix without the worst fall", "+0.20", "-0.10")),
    (BEATS, "yes", "no hindsight"): ({"same_delta_difference": difference(-0.098, -0.15, -0.05)},
        f"Its Sharpe ratio was 0.11 above {SHARPE} +0.02 to +0.21). Against holding each day as much stock as its own "
        "delta of the evening before, which takes no hindsight: -0.10 (-0.15 to -0.05)."),
    (BEATS, "open", "level"): ({"sharpe_difference": difference(0.004, 0.001, 0.009)},
        f"Its Sharpe ratio was {SHARPE} 0.00 to +0.01): the two cannot be told apart."),
    (CRISES, "open", ""): ({"without_worst": []}, "The hold had no fall over 10% to leave out."),
}  # fmt: skip


@pytest.mark.parametrize("case", SENTENCES, ids=lambda case: ", ".join(filter(None, (TITLES[case[0]], *case[1:]))))
def test_sentence(case: tuple[int, str, str]) -> None:
    number, finding, _ = case
    changes, sentence = SENTENCES[case]
    assert clause(number, **changes) == Clause(title=TITLES[number], finding=finding, sentence=sentence)


TINY = 1e-9
EDGES: dict[str, tuple[int, dict[str, Any], str]] = {
    "95% sure": (PROTECTS, {"probability_shallower": 0.95}, "yes"),
    "just under 95% sure": (PROTECTS, {"probability_shallower": 0.95 - TINY}, "open"),
    "as deep as the hold": (PROTECTS, {"overlay_drawdown": -0.552}, "no"),
    "hardly shallower": (PROTECTS, {"overlay_drawdown": -0.552 + 1e-6}, "yes"),
    "shallower by rounding": (PROTECTS, {"overlay_drawdown": -0.552 + TINY}, "no"),
    "costs up to zero": (COSTS, {"return_difference": difference(-0.01, -0.02, 0.0)}, "open"),
    "costs just under zero": (COSTS, {"return_difference": difference(-0.01, -0.02, -TINY)}, "yes"),
    "gains from zero": (COSTS, {"return_difference": difference(0.01, 0.0, 0.02)}, "open"),
    "gains from just over zero": (COSTS, {"return_difference": difference(0.01, TINY, 0.02)}, "no"),
    # an interval need not hold the value itself
    "returned more, interval below": (COSTS, {"return_difference": difference(0.01, -0.02, -0.01)}, "open"),
    "returned as much, interval below": (COSTS, {"return_difference": difference(0.0, -0.02, -0.01)}, "open"),
    "returned less, interval above": (COSTS, {"return_difference": difference(-0.01, 0.01, 0.02)}, "open"),
    "returned as much, interval above": (COSTS, {"return_difference": difference(0.0, 0.01, 0.02)}, "no"),
    "above, interval from zero": (BEATS, {"sharpe_difference": difference(0.1, 0.0, 0.2)}, "open"),
    "above, interval from over zero": (BEATS, {"sharpe_difference": difference(0.1, TINY, 0.2)}, "yes"),
    "not above, interval above": (BEATS, {"sharpe_difference": difference(0.0, 0.01, 0.2)}, "open"),
    "interval up to zero": (BEATS, {"sharpe_difference": difference(-0.1, -0.2, 0.0)}, "open"),
    "interval up to under zero": (BEATS, {"sharpe_difference": difference(-0.1, -0.2, -TINY)}, "no"),
    "a smile at zero, another above": (SMILES, {"smile_differences": {"a": 0.0, "b": 0.1}}, "yes"),
    "a smile at zero, another below": (SMILES, {"smile_differences": {"a": -0.1, "b": 0.0}}, "yes"),
    "smiles either side": (SMILES, {"smile_differences": {"a": -0.0051, "b": 0.0051}}, "no"),
    "nothing that shows on either side": (SMILES, {"smile_differences": {"a": -0.005, "b": 0.005}}, "open"),
    "nothing that shows on one side": (SMILES, {"smile_differences": {"a": -0.005, "b": 0.0051}}, "yes"),
    "no interval, so no smiles": (SMILES, {"sharpe_difference": difference(0.1, NAN, NAN)}, "open"),
    "no interval, so no roll days": (ROLL_DAYS, {"sharpe_difference": difference(0.1, NAN, NAN)}, "open"),
    "no interval, so no crises": (CRISES, {"sharpe_difference": difference(0.1, NAN, NAN)}, "open"),
    "own roll day level": (ROLL_DAYS, roll_days(9, 10, own=0.005), "open"),
    "below, interval above": (BEATS, {"sharpe_difference": difference(-0.1, 0.01, 0.2)}, "open"),
    "90% of the roll days": (ROLL_DAYS, roll_days(18, 20), "yes"),
    "85% of the roll days": (ROLL_DAYS, roll_days(17, 20), "open"),
    "89.99% of the roll days": (ROLL_DAYS, roll_days(8999, 10000), "open"),
    "half of the roll days": (ROLL_DAYS, roll_days(10, 20), "no"),
    "just over half": (ROLL_DAYS, roll_days(5001, 10000), "open"),
    "below zero on most": (ROLL_DAYS, roll_days(9, 10, own=-0.1), "yes"),
    "a fall left out brings it to zero": (CRISES, {"without_worst": [0.1, 0.0]}, "no"),
    "from below to above": (CRISES, {"without_worst": [-0.1, 0.1], "sharpe_difference": difference(-1, -2, 1)}, "no"),
}


@pytest.mark.parametrize("name", EDGES)
def test_edge_of_a_rule(name: str) -> None:
    number, changes, finding = EDGES[name]
    assert clause(number, **changes).finding == finding


# ---------------------------------------------------------------- figures that cannot be had

NO_INTERVAL = difference(-0.011, NAN, NAN)
NO_ROLL_DAYS = "The overlay cannot be compared on other roll days."
UNKNOWN: dict[str, tuple[int, dict[str, Any], str]] = {
    "own drawdown": (PROTECTS, {"overlay_drawdown": NAN}, "No drawdown can be had for this replay."),
    "the hold's drawdown": (PROTECTS, {"hold_drawdown": NAN}, "No drawdown can be had for this replay."),
    "how surely": (PROTECTS, {"probability_shallower": NAN}, "It took 24.0 points off the deepest fall: -31.2% instead "
        f"of -55.2%; the history is too short to say how surely.{PAID}"),
    "return": (COSTS, {"return_difference": difference(NAN, NAN, NAN)}, "No return can be had for this replay."),
    "return's interval": (COSTS, {"return_difference": NO_INTERVAL},
        "It returned 1.1 points a year less than the hold; the history is too short for an interval."),
    "Sharpe ratio": (BEATS, {"sharpe_difference": difference(NAN, -1.0, 1.0)},
        "No Sharpe ratio can be had for overlay and same-beta mix."),
    "Sharpe ratio's interval": (BEATS, {"sharpe_difference": difference(0.25, 0.01, NAN)}, "Its Sharpe ratio was 0.25 "
        "above that of holding less stock at the same beta; the history is too short for an interval."),
    "all smiles but one": (SMILES, {"smile_differences": {"flat": 0.1, "steep": NAN}},
        "The overlay cannot be compared under several smiles."),
    "own roll day": (ROLL_DAYS, {"roll_day_differences": [NAN, 0.1, 0.1]}, NO_ROLL_DAYS),
    "all other roll days": (ROLL_DAYS, {"roll_day_differences": [0.1, NAN, NAN]}, NO_ROLL_DAYS),
    "no roll days": (ROLL_DAYS, {"roll_day_differences": [], "roll_day_returns": []}, NO_ROLL_DAYS),
}  # fmt: skip


@pytest.mark.parametrize("name", UNKNOWN)
def test_what_cannot_be_had_is_open_and_says_why(name: str) -> None:
    number, changes, sentence = UNKNOWN[name]
    assert clause(number, **changes) == Clause(title=TITLES[number], finding="open", sentence=sentence)


@pytest.mark.parametrize(
    "changes",
    [{"without_worst": [NAN, NAN]}, {"sharpe_difference": difference(NAN, NAN, NAN)}],
    ids=["without any of the falls", "with all of them"],
)
def test_falls_whose_figures_cannot_be_had_are_not_denied(changes: dict[str, Any]) -> None:
    found = clause(CRISES, **changes)
    assert found.finding == "open"
    assert "had no fall" not in found.sentence  # there were falls


def test_some_roll_days_unknown() -> None:
    found = clause(ROLL_DAYS, roll_day_differences=[0.1, NAN, 0.2, -0.1], roll_day_returns=[0.01, NAN, 0.03, 0.02])
    assert "and so on 67% of the 3 possible ones" in found.sentence
    assert found.sentence.endswith("from 1.0% to 3.0% a year with the roll day alone.")


def blanked(name: str) -> Evidence:
    """Every number of one figure replaced by NaN."""
    value = getattr(BASE, name)
    nothing: Any = NAN
    if isinstance(value, Difference):
        nothing = difference(NAN, NAN, NAN)
    elif isinstance(value, dict):
        nothing = dict.fromkeys(value, NAN)
    elif isinstance(value, list):
        nothing = [NAN] * len(value)
    return replace(BASE, **{name: nothing})


NUMBERS = [
    f.name
    for f in fields(Evidence)
    if f.name not in ("put_payoffs", "used_smile", "break_even", "same_delta_difference")
]
NEVER = r"\b(nan|inf|none|should|ought|must|recommend\w*|advi[cs]\w*|suggest\w*|buy\w*|sell\w*|worthwhile)\b"


@pytest.mark.parametrize("name", NUMBERS)
def test_a_missing_figure_never_shows(name: str) -> None:
    clauses = verdict(blanked(name))
    assert [c.sentence for c in clauses if re.search(NEVER, c.sentence, re.IGNORECASE)] == []
    # the years only say how much evidence there is: no rule stands on them
    assert name == "years" or any(c.finding == "open" for c in clauses)


def test_never_advice() -> None:
    cases = [case[0] for case in SENTENCES.values()] + [case[1] for case in (*EDGES.values(), *UNKNOWN.values())]
    for changes in cases:
        for found in verdict(replace(BASE, **changes)):
            assert found.finding in ("yes", "no", "open")
            assert not re.search(NEVER, found.sentence, re.IGNORECASE), found.sentence
            assert found.sentence.endswith(".")
