"""A summary as tables on the terminal, for somebody who holds the portfolio."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from typing import Any

from rich.console import Console
from rich.table import Table
from rich.text import Text

from .assumptions import CAUTION
from .path_names import PATHS

#: Notes on the history that are printed; the others are counted.
MOST_NOTES = 5
NOT_TO_BE_HAD = "–"


def percent(value: float | None, digits: int = 1) -> str:
    """A decimal as a percent; a dash when it cannot be had."""
    if value is None or not math.isfinite(value):
        return NOT_TO_BE_HAD
    return _without_zero_sign(f"{100 * value:.{digits}f}%")


def ratio(value: float | None) -> str:
    """A plain ratio with two digits."""
    return NOT_TO_BE_HAD if value is None or not math.isfinite(value) else _without_zero_sign(f"{value:.2f}")


def _without_zero_sign(text: str) -> str:
    """No sign before what is shown as zero."""
    return text if any(digit in text for digit in "123456789") else text.lstrip("+-")


def show_summary(console: Console, told: Mapping[str, Any], *, history: str) -> None:
    """Print headline figures, verdict, roll costs, smile ladder, assumptions and cautions of a summary (C14)."""

    def say(text: str, style: str | None = None) -> None:
        console.print(text, style=style, highlight=False, markup=False, soft_wrap=True)

    say("")
    say(f"{told['name']}, on {history}", style="bold")
    say(
        f"{told['inception']} to {told['end']}, {told['years']:.1f} years; "
        f"{told['rolls']} options opened, {told['open_legs']} still open at the end"
    )
    say("")
    console.print(_headline_table(told))
    for name in ("overlay", "hold"):
        say(_fall(name, told[name]))
    if told.get("verdict"):
        say("")
        say("Verdict", style="bold")
        console.print(_verdict_table(told["verdict"]))
    say("")
    say("Options, a year, in percent of spot (minus: out of your pocket)", style="bold")
    console.print(_cost_table(told["roll_cost"]))
    for label, leg in told["roll_cost"]["legs"].items():
        say(f"{label}: {leg['paid_off']} of {leg['rolls'] - leg['open_rolls']} settled or sold above zero")
    for line in (_margin(told), _default(told), _sale(told)):
        if line is not None:
            say(line)
    say("")
    say("The same overlay priced under other smiles, against its own same-beta mix", style="bold")
    console.print(_ladder_table(told["smile_ladder"], whole=told["years"] < 1))
    say(_ladder_reading(told["smile_ladder"]))
    say("")
    say("What this stands on", style="bold")
    for what, words in told["assumptions"].items():
        say(f"  {what.replace('_', ' ')}: {words}")
    if told["warnings"] or told["history_notes"]:
        say("Mind", style="bold")
    for warning in told["warnings"]:
        say(f"  {warning}")
    notes = told["history_notes"]
    for note in notes[:MOST_NOTES]:
        say(f"  {note}")
    if len(notes) > MOST_NOTES:
        say(f"  and {len(notes) - MOST_NOTES} more on the history itself, in summary.json")
    console.print()
    console.print(CAUTION, style="dim", highlight=False, markup=False)


def _headline_table(told: Mapping[str, Any]) -> Table:
    table = _table(
        "",
        "return, whole" if told["years"] < 1 else "return a year",
        "volatility",
        "Sharpe ratio",
        "maximum drawdown",
        "worst 5% of months",
        "beta",
    )
    for name, title in PATHS.items():
        figures = told.get(name)
        if figures is None:
            continue
        table.add_row(
            title,
            percent(figures["annual_return"]),
            percent(figures["volatility"]),
            ratio(figures["sharpe"]),
            percent(figures["max_drawdown"]),
            percent(figures["expected_shortfall_monthly"]),
            ratio(figures["beta"]),
            style="bold" if name == "overlay" else None,
        )
    return table


def _fall(name: str, figures: Mapping[str, Any] | None) -> str:
    if figures is None or figures["max_drawdown"] is None:
        return f"{name}: no figures, its wealth is lost on the way"
    if figures["max_drawdown_peak"] is None:
        return f"{name}: no fall from a peak"
    again = figures["max_drawdown_recovery"]
    recovered = "not recovered by the end" if again is None else f"recovered by {again}"
    return (
        f"{name}: deepest fall {percent(figures['max_drawdown'])}, {figures['max_drawdown_peak']} to "
        f"{figures['max_drawdown_trough']}, {recovered}"
    )


def _verdict_table(clauses: Sequence[Mapping[str, str]]) -> Table:
    table = Table(box=None, padding=(0, 2, 0, 0), show_header=False)
    table.add_column(no_wrap=True)
    table.add_column(no_wrap=True)
    table.add_column()
    for clause in clauses:
        # text, not markup: nothing in it is to be read as a style
        table.add_row(*(Text(clause[part]) for part in ("title", "finding", "sentence")))
    return table


def _cost_table(costs: Mapping[str, Any]) -> Table:
    table = _table("", "premium", "settled or sold", "spread, fees", "still open", "net")
    for label, leg in costs["legs"].items():
        year = leg["a_year"]
        sums = (
            year["premium_received"] - year["premium_paid"],
            year["settled_received"] - year["settled_paid"],
            -year["trading_cost"],
            year["open_value"],
            year["net"],
        )
        table.add_row(label, *(_signed_percent(value) for value in sums))
    return table


def _margin(told: Mapping[str, Any]) -> str | None:
    """What sold options may require; None where nothing is sold."""
    if (margin := told.get("margin")) is None:
        return None
    covered, alone = (margin[name] for name in ("shares_as_cover", "no_shares_counted"))
    return (
        f"margin, by the exchanges' simple rule (your broker's own holds): {_peak(covered)} with the shares as cover, "
        f"{_peak(alone)} with none of them counted"
    )


def _peak(peak: Mapping[str, Any]) -> str:
    if peak["day"] is None:
        return "nothing" if peak["peak"] == 0 else "not to be had"
    return f"at most {percent(peak['peak'])} of wealth ({peak['day']})"


def _default(told: Mapping[str, Any]) -> str | None:
    """What a default of the counterparty takes; None where none was asked about."""
    if (stress := told.get("counterparty")) is None:
        return None
    events, outside = stress["events"], stress["outside"]
    missed = f"; outside the replay: {', '.join(outside)}" if outside else ""
    if not events:
        why = "no bought put that ended paid off, " if isinstance(stress["default"], str) else ""
        return f"if the counterparty defaults: {why}nothing changes{missed}"
    lost = 1.0 - math.prod(1.0 - min(one["loss"], 1.0) for one in events)
    when = events[0]["date"] if len(events) == 1 else f"{len(events)} times from {events[0]['date']}"
    unit = "points of return, whole" if told["years"] < 1 else "points of return a year"
    return (
        f"if the counterparty defaults {when}, {percent(stress['recovery'], 0)} recovered: {percent(lost)} of wealth "
        f"lost, {_points(stress['annual_return_difference'])} {unit}, "
        f"{_points(stress['max_drawdown_difference'])} on the maximum drawdown{missed}"
    )


def _points(value: float | None) -> str:
    return NOT_TO_BE_HAD if value is None or not math.isfinite(value) else _without_zero_sign(f"{100 * value:+.2f}")


def _sale(told: Mapping[str, Any]) -> str | None:
    """What the sale instead is; None where none was asked for."""
    if "mix_sale" not in told:
        return None
    sale = told["mix_sale"]
    if sale is None:
        return "sale instead: cannot be had, there is no same-beta mix to take its share from"
    return (
        f"sale instead: {percent(sale['share_of_stock'], 0)} of the shares kept, the rest sold at once; "
        f"{percent(sale['charge'], 2)} of that goes in cost and tax as you stated them (no tax rule is in here)"
    )


def _ladder_table(ladder: Mapping[str, Any], *, whole: bool) -> Table:
    table = _table(
        "smile",
        "return, whole" if whole else "return a year",
        "Sharpe ratio",
        "mix: Sharpe ratio",
        "overlay less mix",
        "options net",
    )
    for name, rung in ladder.items():
        table.add_row(
            f"{name} (used)" if rung["used"] else name,
            percent(rung["annual_return"]),
            ratio(rung["sharpe"]),
            ratio(rung["mix_same_beta_sharpe"]),
            _signed(sharpe_gain(rung)),
            _signed_percent(rung["net_roll_cost_a_year"]),
            style="bold" if rung["used"] else None,
        )
    return table


def _table(first: str, *titles: str) -> Table:
    table = Table(box=None, padding=(0, 2, 0, 0))
    table.add_column(first, no_wrap=True)
    for title in titles:
        table.add_column(title, justify="right", min_width=len(max(title.split(), key=len)))
    return table


def _ladder_reading(ladder: Mapping[str, Any]) -> str:
    """One line under the ladder: does the smile turn the comparison?"""
    gains = {name: sharpe_gain(rung) for name, rung in ladder.items()}
    known = {name: gain for name, gain in gains.items() if gain is not None and math.isfinite(gain)}
    if not known:
        return "No Sharpe ratio can be had here."
    best = max(known, key=lambda name: known[name])
    worst = min(known, key=lambda name: known[name])
    if known[best] > 0 > known[worst]:
        turn = f"{_signed(known[best])} under {best}, {_signed(known[worst])} under {worst}"
        return f"The smile turns the comparison: {turn}."
    side = "ahead of" if known[worst] >= 0 else "behind"
    return f"The overlay's Sharpe ratio is {side} its same-beta mix under every smile here."


def sharpe_gain(rung: Mapping[str, Any]) -> float | None:
    """Sharpe ratio of the overlay less that of its same-beta mix, of one rung of a summary's ladder."""
    own, mix = rung["sharpe"], rung["mix_same_beta_sharpe"]
    return None if own is None or mix is None else own - mix


def _signed(value: float | None) -> str:
    return NOT_TO_BE_HAD if value is None or not math.isfinite(value) else _without_zero_sign(f"{value:+.2f}")


def _signed_percent(value: float | None) -> str:
    return (
        NOT_TO_BE_HAD
        if value is None or value == 0 or not math.isfinite(value)
        else _without_zero_sign(f"{100 * value:+.2f}%")
    )
