"""The answer as tables on the terminal, for somebody who holds the portfolio."""

from __future__ import annotations

import math

from rich.console import Console
from rich.table import Table

from backtest.analytics import Performance
from backtest.analytics.performance import years_between

from .assumptions import CAUTION
from .replay_history import Answer, SmileRung

NOT_TO_BE_HAD = "–"

ROW_TITLES = {
    "overlay": "overlay",
    "hold": "hold",
    "mix_same_beta": "same-beta mix",
    "mix_same_volatility": "same-volatility mix",
    "mix_same_return": "same-return mix",
    "mix_same_drawdown": "same-drawdown mix",
    "mix_same_delta": "same-delta mix",
    "put_only": "put only",
    "call_only": "call only",
}


def percent(value: float | None, digits: int = 1) -> str:
    """A decimal as a percent; a dash when it cannot be had."""
    if value is None or not math.isfinite(value):
        return NOT_TO_BE_HAD
    return f"{100 * value + 0.0:.{digits}f}%"


def ratio(value: float | None) -> str:
    """A plain ratio with two digits."""
    return NOT_TO_BE_HAD if value is None or not math.isfinite(value) else f"{value + 0.0:.2f}"


def show_answer(console: Console, found: Answer, *, history: str) -> None:
    """Print headline figures, roll costs, the smile ladder, assumptions and cautions."""

    def say(text: str, style: str | None = None) -> None:
        console.print(text, style=style, highlight=False, markup=False, soft_wrap=True)

    replay = found.replay
    options = sum(len(leg.opened) for leg in replay.legs)
    still_open = sum(int(leg.schedule.live.sum()) for leg in replay.legs)
    say("")
    say(f"{replay.overlay.name}, on {history}", style="bold")
    say(
        f"{replay.dates[0]} to {replay.dates[-1]}, {years_between(replay.dates):.1f} years; "
        f"{options} options opened, {still_open} still open at the end"
    )
    say("")
    console.print(_headline_table(found))
    for name in ("overlay", "hold"):
        say(_fall(name, found.figures[name]))
    say("")
    say("Options, a year, in percent of spot (minus: out of your pocket)", style="bold")
    console.print(_cost_table(found))
    for leg in found.costs.legs:
        say(f"{leg.label}: {leg.paid_off} of {leg.rolls - leg.open_rolls} settled or sold above zero")
    say("")
    say("The same overlay priced under other smiles, against its own same-beta mix", style="bold")
    console.print(_ladder_table(found))
    say(_ladder_reading(found))
    say("")
    say("What this stands on", style="bold")
    for what, words in found.assumptions.items():
        say(f"  {what.replace('_', ' ')}: {words}")
    if found.warnings or found.history_notes:
        say("Mind", style="bold")
    for warning in found.warnings:
        say(f"  {warning}")
    if found.history_notes:
        say(f"  {len(found.history_notes)} notes on the history itself are in summary.json")
    console.print()
    console.print(CAUTION, style="dim", highlight=False, markup=False)


def _headline_table(found: Answer) -> Table:
    under_a_year = years_between(found.replay.dates) < 1
    table = Table(box=None, padding=(0, 2, 0, 0))
    table.add_column("", no_wrap=True)
    titles = (
        "return, whole" if under_a_year else "return a year",
        "volatility",
        "Sharpe ratio",
        "maximum drawdown",
        "worst 5% of months",
        "beta",
    )
    for title in titles:
        table.add_column(title, justify="right", min_width=len(max(title.split(), key=len)))
    for name, title in ROW_TITLES.items():
        figures = found.figures.get(name)
        if figures is None:
            continue
        table.add_row(
            title,
            percent(figures.annual_return),
            percent(figures.volatility),
            ratio(figures.sharpe),
            percent(figures.max_drawdown),
            percent(figures.expected_shortfall_monthly),
            ratio(figures.beta),
            style="bold" if name == "overlay" else None,
        )
    return table


def _fall(name: str, figures: Performance | None) -> str:
    if figures is None or figures.max_drawdown_peak is None:
        return f"{name}: no fall from a peak"
    again = figures.max_drawdown_recovery
    recovered = "not recovered by the end" if again is None else f"recovered by {again}"
    return (
        f"{name}: deepest fall {percent(figures.max_drawdown)}, {figures.max_drawdown_peak} to "
        f"{figures.max_drawdown_trough}, {recovered}"
    )


def _cost_table(found: Answer) -> Table:
    years = found.costs.years
    table = Table(box=None, padding=(0, 2, 0, 0))
    for title in ("", "premium", "settled or sold", "spread, fees", "still open", "net"):
        table.add_column(title, justify="right" if title else "left", no_wrap=not title)
    for leg in found.costs.legs:
        sums = (
            leg.premium_received - leg.premium_paid,
            leg.settled_received - leg.settled_paid,
            -leg.trading_cost,
            leg.open_value,
            leg.net,
        )
        table.add_row(leg.label, *(_signed_percent(value / years) for value in sums))
    return table


def _ladder_table(found: Answer) -> Table:
    table = Table(box=None, padding=(0, 2, 0, 0))
    titles = ("smile", "return a year", "Sharpe ratio", "mix: Sharpe ratio", "overlay less mix", "options net")
    for title in titles:
        table.add_column(title, justify="left" if title == "smile" else "right", no_wrap=title == "smile")
    for name, rung in found.ladder.items():
        used = rung.replay is found.replay
        table.add_row(
            f"{name} (used)" if used else name,
            percent(rung.figures.annual_return),
            ratio(rung.figures.sharpe),
            ratio(None if rung.same_beta_figures is None else rung.same_beta_figures.sharpe),
            _signed(sharpe_gain(rung)),
            _signed_percent(rung.costs.net_a_year),
            style="bold" if used else None,
        )
    return table


def _ladder_reading(found: Answer) -> str:
    """One line under the ladder: does the smile turn the comparison?"""
    gains = {name: sharpe_gain(rung) for name, rung in found.ladder.items()}
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


def sharpe_gain(rung: SmileRung) -> float | None:
    """Sharpe ratio of the overlay less that of its same-beta mix."""
    mix = rung.same_beta_figures
    return None if mix is None else rung.figures.sharpe - mix.sharpe


def _signed(value: float | None) -> str:
    return NOT_TO_BE_HAD if value is None or not math.isfinite(value) else f"{value + 0.0:+.2f}"


def _signed_percent(value: float) -> str:
    return NOT_TO_BE_HAD if value == 0 or not math.isfinite(value) else f"{100 * value:+.2f}%"
