"""The tables of the page: the answer's numbers as words in rows."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from backtest.analytics import Performance
from backtest.analytics.performance import years_between
from backtest.analytics.periods import CalendarTable
from backtest.analytics.robustness import BreakEven

from ..findings import Findings
from ..path_names import PATHS
from ..replay_history import SALE, Answer
from .blocks import Cell, Table
from .words import DASH, date, days, number, percent, points, ratio

Array = npt.NDArray[np.float64]

MONTHS = ("Jan", "Feb", "Mar", "Apr", "May", "Jun", "Jul", "Aug", "Sep", "Oct", "Nov", "Dec")

#: Every figure of C11: field, title, how it is written.
FIGURES = (
    ("annual_return", "return a year", percent),
    ("volatility", "volatility a year", percent),
    ("sharpe", "Sharpe ratio", ratio),
    ("sortino", "Sortino ratio", ratio),
    ("max_drawdown", "maximum drawdown", percent),
    ("max_drawdown_peak", "   its peak", date),
    ("max_drawdown_trough", "   its trough", date),
    ("max_drawdown_recovery", "   its recovery", date),
    ("calmar", "Calmar ratio", ratio),
    ("ulcer", "Ulcer index", percent),
    ("beta", "beta to the hold", ratio),
    ("alpha", "alpha a year", percent),
    ("leland_beta", "Leland beta", ratio),
    ("leland_alpha", "Leland alpha a year", percent),
    ("stutzer", "Stutzer index, monthly", ratio),
    ("capture_up", "capture, months the hold rose", ratio),
    ("capture_down", "capture, months the hold fell", ratio),
    ("expected_shortfall_daily", "mean of the worst 5% of days", percent),
    ("expected_shortfall_monthly", "mean of the worst 5% of months", percent),
    ("skewness", "skewness, monthly", ratio),
    ("excess_kurtosis", "excess kurtosis, monthly", ratio),
    ("months", "whole months counted", lambda value: number(float(value), 0)),
)


def under_a_year(found: Answer) -> bool:
    """Whether returns are totals (C11)."""
    return years_between(found.replay.dates) < 1


def return_title(found: Answer) -> str:
    """What a return column is called."""
    return "return, whole span" if under_a_year(found) else "return a year"


def dash_means(found: Answer, ordinary: str) -> str:
    """Why figures of the overlay are missing: ``ordinary``, unless its wealth ended."""
    if np.isfinite(found.replay.wealth).all():
        return ordinary
    return "the overlay's wealth ends before the history does, so neither it nor its mixes can be measured"


def headline_table(found: Answer) -> Table:
    """The figures that matter most, a row per path."""
    head = (
        "", return_title(found), "volatility a year", "Sharpe ratio", "maximum drawdown", "worst 5% of months", "beta",
        "stock share",
    )  # fmt: skip
    rows = []
    for name, title in PATHS.items():
        if name not in found.figures or (name in ("put_only", "call_only") and found.figures[name] is None):
            continue
        figures = found.figures[name]
        share = _share(found, name)
        if figures is None:
            rows.append([title, *[DASH] * 6, share])
            continue
        rows.append(
            [
                title, percent(figures.annual_return), percent(figures.volatility), ratio(figures.sharpe),
                percent(figures.max_drawdown), percent(figures.expected_shortfall_monthly), ratio(figures.beta), share,
            ]
        )  # fmt: skip
    notes = [
        "Mixes hold the stock share shown and keep the rest in cash. The first four shares were found with hindsight, "
        "so that one figure equals the overlay's; the same-delta mix holds, day by day, what the overlay's own delta "
        "was at the close before, and needs no hindsight (its mean share is shown)."
    ]
    return Table(
        caption="Overlay, hold and what holding less stock would have done", head=head, rows=rows, notes=notes,
        strong=frozenset({0}),
        dash_means=dash_means(found, "no such mix, or too few months or no variation to measure"),
    )  # fmt: skip


def _share(found: Answer, name: str) -> str:
    if name == "hold":
        return percent(1.0, 0)
    if not name.startswith("mix_"):
        return ""
    if name == SALE:
        return DASH if found.sale is None else percent(found.sale.share, 0)
    mix = dict(found.mixes.items())[name.removeprefix("mix_")]
    return DASH if mix is None else percent(mix.share, 0)


def full_table(found: Answer) -> Table:
    """All figures of C11, a column per path."""
    columns = {name: figures for name in PATHS if (figures := found.figures.get(name)) is not None}
    rows = []
    for name, title, written in FIGURES:
        shown = return_title(found) if name == "annual_return" else title
        rows.append([shown, *(_written(written, getattr(figures, name)) for figures in columns.values())])
    return Table(
        caption="All figures", head=("", *(PATHS[name] for name in columns)), rows=rows, dense=True,
        notes=["Alpha, beta and the capture ratios are against the hold. Monthly figures use whole calendar months."],
        dash_means=dash_means(
            found, "no fall, not recovered by the end, or too few months or no variation to measure"
        ),
    )  # fmt: skip


def _written(written: object, value: object) -> str:
    return written(value)  # type: ignore[operator]  # one of the formatters of FIGURES


def episode_tables(found: Findings) -> list[Table]:
    """Falls with everybody's returns; then the way back."""
    if not found.episodes:
        return []
    names = [name for name in PATHS if name in found.episodes[0].returns and not name.endswith("_only")]
    falls = [
        [
            date(e.peak), date(e.trough), *(percent(e.returns[n]) for n in names), points(e.put_profit),
            points(e.call_profit),
        ]
        for e in found.episodes
    ]  # fmt: skip
    three = [name for name in ("hold", "overlay", "mix_same_beta") if name in names]
    back = [
        [
            date(e.trough), "not by the end" if e.recovery is None else date(e.recovery),
            *(percent(e.recovery_returns[n]) for n in three), points(e.call_profit_in_recovery),
            *(days(e.days_under_water[n]) for n in three),
        ]
        for e in found.episodes
    ]  # fmt: skip
    return [
        Table(
            caption="Falls of the hold deeper than 10%, worst first: returns from peak to trough",
            words=frozenset({0, 1}), rows=falls,
            head=("peak", "trough", *(PATHS[n] for n in names), "puts' profit", "calls' profit"),
            notes=["Profits of puts and calls at mid, in points of the overlay's wealth at the peak."], dense=True,
        ),
        Table(
            caption="The way back: returns from trough to recovery, and days under water",
            head=(
                "trough", "hold recovered", *(f"{PATHS[n]}, trough to recovery" for n in three), "calls' profit",
                *(f"{PATHS[n]}, days under water" for n in three),
            ),
            rows=back, words=frozenset({0, 1}),
            notes=[
                "Calls' profit over the recovery, in points of the overlay's wealth at the trough: a minus is the rise "
                "above the sold strike that was given up. Days under water are calendar days from the hold's peak "
                "until a path is back at its own level of that day."
            ],
        ),
    ]  # fmt: skip


def rally_table(found: Findings) -> Table | None:
    """The strongest rises, with the same columns."""
    if not found.rallies:
        return None
    names = [name for name in PATHS if name in found.rallies[0].returns and not name.endswith("_only")]
    rows = [
        [
            date(r.first), date(r.last), *(percent(r.returns[n]) for n in names), points(r.put_profit),
            points(r.call_profit),
        ]
        for r in found.rallies
    ]  # fmt: skip
    return Table(
        caption="The hold's strongest rises between two such falls",
        head=("trough", "peak", *(PATHS[n] for n in names), "puts' profit", "calls' profit"), rows=rows,
        words=frozenset({0, 1}),
        notes=["Profits of puts and calls at mid, in points of the overlay's wealth at the start of the rise."],
        dense=True,
    )  # fmt: skip


def without_table(found: Findings) -> Table | None:
    """The sample without each of its worst falls."""
    if len(found.without_worst) < 2:
        return None
    names = [name for name in ("overlay", "hold", "mix_same_beta") if name in found.without_worst[0].sharpe]
    rows = []
    for one in found.without_worst:
        gap = one.sharpe.get("overlay", np.nan) - one.sharpe.get("mix_same_beta", np.nan)
        left = "all days" if one.left_out is None else f"without {date(one.left_out[0])} to {date(one.left_out[1])}"
        rows.append(
            [left, *(percent(one.mean_return[n]) for n in names), *(ratio(one.sharpe[n]) for n in names),
             ratio(gap, sign=True)]
        )  # fmt: skip
    return Table(
        caption="Each of the worst falls left out in turn",
        head=(
            "days counted", *(f"{PATHS[n]}, mean return" for n in names), *(f"{PATHS[n]}, Sharpe" for n in names),
            "Sharpe, overlay less mix",
        ),
        rows=rows, strong=frozenset({0}),
        notes=["Mean returns are arithmetic, a year, so that days can be left out; they differ from compound returns."],
    )  # fmt: skip


def ladder_table(found: Answer, findings: Findings) -> Table:
    """The same overlay under every smile."""
    used = [name for name, rung in found.ladder.items() if rung.replay is found.replay]
    rows, strong = [], []
    for row, (name, rung) in enumerate(found.ladder.items()):
        mix: Performance | None = rung.same_beta_figures
        if name in used:
            strong.append(row)
        rows.append(
            [
                f"{name} (used here)" if name in used else name, percent(rung.figures.annual_return),
                percent(rung.figures.max_drawdown), ratio(rung.figures.sharpe),
                ratio(None if mix is None else mix.sharpe), ratio(findings.ladder_gains[name], sign=True),
                percent(rung.costs.net_a_year, 2, sign=True),
            ]
        )  # fmt: skip
    return Table(
        caption="One overlay under each smile",
        head=(
            "smile", return_title(found), "maximum drawdown", "Sharpe ratio", "same-beta mix, Sharpe ratio",
            "overlay less mix", "options net a year, of spot",
        ),
        rows=rows, strong=frozenset(strong),
    )  # fmt: skip


def break_even_table(found: Answer, findings: Findings, *, has_put: bool) -> Table:
    """Where the answer turns."""
    turning = findings.break_evens
    own = found.replay.overlay.costs.half_spread_vol
    puts = [_turn(turning.sharpe_puts), _turn(turning.return_puts)] if has_put else ["there is no put"] * 2
    rows = [
        ["All options", _turn(turning.sharpe_all_legs), _turn(turning.return_all_legs)],
        ["The puts alone", *puts],
        [
            f"Half-spread, {number(own, 2)} used",
            _turn_of_spread(turning.sharpe_half_spread),
            _turn_of_spread(turning.return_half_spread),
        ],
    ]
    return Table(
        caption="Break-even: the price error at which the answer turns",
        head=("", "overlay's Sharpe ratio equals the same-beta mix's", "overlay's return equals the hold's"), rows=rows,
        words=frozenset({0, 1, 2}),
        notes=["In points of vol, on every option alike; the nearest break-even is given where there are several."],
    )  # fmt: skip


def _turn(turn: BreakEven) -> str:
    if turn.value is None and turn.searched[0] == turn.searched[1]:
        return "could not be searched"
    if turn.value is None:
        low, high = (_dearer(value, 1) for value in turn.searched)
        return f"none from {low} to {high}"
    return _dearer(turn.value, 2)


def _dearer(shift: float, digits: int) -> str:
    return f"{number(abs(shift), digits)} points {'dearer' if shift >= 0 else 'cheaper'}"


def _turn_of_spread(turn: BreakEven) -> str:
    low, high = turn.searched
    if turn.value is None and low == high:
        return "could not be searched"
    if turn.value is None:
        return f"none from {number(low, 1)} to {number(high, 1)} points"
    return f"{number(turn.value, 2)} points"


def luck_table(found: Answer, findings: Findings) -> Table:
    """Spread of the figures over all roll days."""
    luck = findings.luck
    rows = []
    for name, title, written, ladder in (
        ("annual_return", return_title(found), percent, luck.ladder_annual_return),
        ("sharpe", "Sharpe ratio", ratio, luck.ladder_sharpe),
        ("sharpe_gain", "Sharpe ratio less same-beta mix", ratio, None),
        ("max_drawdown", "maximum drawdown", percent, luck.ladder_max_drawdown),
    ):
        values: Array = getattr(luck, name)
        finite = values[np.isfinite(values)]
        if finite.size == 0:
            rows.append([title, *[DASH] * 6])
            continue
        own = float(values[0])
        lower = f"{int(np.count_nonzero(finite < own))} of {finite.size}" if np.isfinite(own) else DASH
        spread = (float(np.min(finite)), float(np.median(finite)), float(np.max(finite)))
        rows.append([title, written(own), lower, *(written(v) for v in spread), written(ladder)])
    return Table(
        caption="The same rule on every possible roll day",
        head=("", "your day", "days with less", "lowest", "median", "highest", "all days side by side"), rows=rows,
        notes=["The last column splits the money over all roll days in equal parts."],
        dash_means="not worked out, or cannot be had",
    )  # fmt: skip


def year_table(findings: Findings) -> Table | None:
    """Calendar years of overlay, hold and mix side by side."""
    calendars = findings.calendar
    if not calendars:
        return None
    names = [name for name in ("overlay", "hold", "mix_same_beta") if name in calendars]
    rows: list[list[str | Cell]] = []
    first = calendars[names[0]]
    for row, year in enumerate(first.years.tolist()):
        values = [float(calendars[n].yearly[row]) for n in names]
        part = " (part)" if not first.whole_month[row].all() else ""
        cells = [_toned(v, 0.1) for v in values]
        gap = points(values[0] - values[1], sign=True) if "overlay" in names else DASH
        rows.append([f"{year}{part}", *cells, gap])
    return Table(
        caption="Calendar years", head=("year", *(PATHS[n] for n in names), "overlay less hold, points"), rows=rows
    )


def month_table(calendar: CalendarTable, title: str) -> Table:
    """Months of one path by year; an unfinished month is marked."""
    rows: list[list[str | Cell]] = []
    unfinished = False
    for row, year in enumerate(calendar.years.tolist()):
        cells: list[str | Cell] = [str(year)]
        for value, whole in zip(calendar.monthly[row], calendar.whole_month[row], strict=True):
            if not np.isfinite(value):
                cells.append("")
                continue
            unfinished |= not whole
            cell = _toned(float(value), 0.03, unit=False)
            cells.append(cell if whole else Cell(f"{cell.text}*", cell.tone))
        cells.append(_toned(float(calendar.yearly[row]), 0.1, unit=False))
        rows.append(cells)
    notes = ["* part of a month."] if unfinished else []
    return Table(caption=f"{title}, percent", head=("year", *MONTHS, "year"), rows=rows, notes=notes, dense=True)


def _toned(value: float, step: float, *, unit: bool = True) -> Cell:
    """A return with a shade: one for each multiple of ``step`` up to three."""
    size = min(3, int(abs(value) / step) + 1) if np.isfinite(value) and abs(value) >= step / 4 else 0
    tone = f"{'up' if value > 0 else 'down'}{size}" if size else ""
    return Cell(percent(value) if unit else points(value, sign=False), tone)


def extremes_table(findings: Findings) -> Table | None:
    """Best and worst month, quarter and twelve months."""
    rows: list[list[str]] = []
    for name, stretches in findings.extremes.items():
        for length, pair in stretches.items():
            if pair is None:
                rows.append([PATHS[name], length, DASH, "", DASH, ""])
                continue
            best, worst = pair
            rows.append(
                [
                    PATHS[name], length, percent(worst.value), f"{date(worst.first)} to {date(worst.last)}",
                    percent(best.value), f"{date(best.first)} to {date(best.last)}",
                ]
            )  # fmt: skip
    if not rows:
        return None
    return Table(
        caption="Best and worst stretches of whole calendar months",
        head=("", "length", "worst", "from month-end to month-end", "best", "from month-end to month-end"), rows=rows,
        words=frozenset({0, 1, 3, 5}), dash_means="too few whole months",
    )  # fmt: skip
