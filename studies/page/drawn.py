"""The charts of comparison, cost, price and luck, each with the line it is read by."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
import numpy.typing as npt

from backtest import charts
from backtest.analytics.periods import Rolling
from backtest.analytics.resampling import TIE
from backtest.analytics.verdict import Difference

from ..findings import Findings
from ..path_names import PATHS
from ..replay_history import Answer
from .costs import Part, attribution_parts, steps, yearly_flows
from .pictures import COMPARED, Picture, decimated, new_figure, page_style, picture_of
from .words import counted, date, known, listed, number, percent, points, ratio, upper_first

Array = npt.NDArray[np.float64]

ROW_INCHES = 0.23
#: Rows of the chart of falls; the table has all.
MOST_SPANS = 8
ROLLING_POINTS = 420

#: The figures of the contest: name, title, unit on the axis, factor.
CONTEST = (
    ("annual_return", "return a year", "points a year", 100.0),
    ("sharpe", "Sharpe ratio", "Sharpe ratio", 1.0),
    ("max_drawdown", "maximum drawdown", "points", 100.0),
    ("expected_shortfall_monthly", "worst 5% of months", "points", 100.0),
)


def contest_figures(*, whole_span: bool) -> tuple[tuple[str, str, str, float], ...]:
    """As :data:`CONTEST`; under a year returns are totals."""
    return (("annual_return", "return, whole span", "points", 100.0), *CONTEST[1:]) if whole_span else CONTEST


def contest_picture(contest: Mapping[str, Mapping[str, Difference]], *, whole_span: bool) -> Picture | None:
    """Overlay less each comparison, in four figures."""
    names = [name for name, row in contest.items() if any(known(d.value) for d in row.values())]
    if not names:
        return None
    labels = [PATHS[name] for name in names]
    between = any(d.known for row in contest.values() for d in row.values())
    title = "Overlay less each comparison" + (", with its interval" if between else "")
    with page_style():
        figure = new_figure(2 * (0.75 + ROW_INCHES * len(names)))
        axes = figure.subplots(2, 2, sharey=True)
        for one, (field, name, unit, scale) in zip(axes.flat, contest_figures(whole_span=whole_span), strict=True):
            values, lows, highs = (
                np.array([getattr(contest[other][field], side) for other in names]) for side in ("value", "low", "high")
            )
            charts.interval_chart(one, labels, values, lows, highs, unit=unit, scale=scale)
            one.set_title(name, loc="left")
        return picture_of(figure, "contest", title, contest_reading(contest, names))


def contest_reading(contest: Mapping[str, Mapping[str, Difference]], names: list[str]) -> str:
    """How many differences are clear of zero, and to which side; right of zero is better for the overlay."""
    said = "Right of zero the overlay did better"
    with_interval = [d for name in names for d in contest[name].values() if d.known]
    if not with_interval:
        return f"{said}; no intervals were worked out."
    ahead, behind = sum(d.low > 0 for d in with_interval), sum(d.high < 0 for d in with_interval)
    rest = len(with_interval) - ahead - behind
    return (
        f"{said}. Of {len(with_interval)} differences {ahead} lie clear above zero, {behind} clear below, and "
        f"{rest} cannot be told from zero (hollow dots)."
    )


def spans_picture(findings: Findings, *, falls: bool) -> Picture | None:
    """Falls, or rises, of the hold and what the overlay and the same-beta mix did in them."""
    spans = findings.episodes if falls else findings.rallies
    if not spans:
        return None
    shown = spans[:MOST_SPANS]
    names = [name for name in COMPARED if name in shown[0].returns]
    series = {PATHS[name]: (COMPARED[name], np.array([s.returns[name] for s in shown])) for name in names}
    labels = (
        [f"{date(e.peak)[:7]} to {date(e.trough)[:7]}" for e in findings.episodes[:MOST_SPANS]]
        if falls
        else [f"{date(r.first)[:7]} to {date(r.last)[:7]}" for r in findings.rallies[:MOST_SPANS]]
    )
    with page_style():
        figure = new_figure(0.85 + ROW_INCHES * len(shown))
        charts.span_dots(figure.subplots(), labels, series, unit="return over the same days, percent")
        title = "The hold's falls, peak to trough" if falls else "The hold's rises, trough to peak"
        return picture_of(figure, "falls" if falls else "rises", title, _spans_reading(findings, falls=falls))


def _spans_reading(findings: Findings, *, falls: bool) -> str:
    spans = findings.episodes if falls else findings.rallies
    what = counted(len(spans), "fall" if falls else "rise")
    if "overlay" not in spans[0].returns:
        return f"{what} of the hold; the overlay's wealth ends before the history does."
    beaten = sum(s.returns["overlay"] > s.returns["hold"] + TIE for s in spans)
    gaps = [s.returns["overlay"] - s.returns["hold"] for s in spans]
    mean = float(np.mean(gaps))
    said = (
        f"The overlay did better than the hold in {beaten} of {what} ({points(abs(mean), sign=False)} points "
        f"{'better' if mean >= 0 else 'worse'} on average)"
    )
    if "mix_same_beta" in spans[0].returns:
        mixed = sum(s.returns["overlay"] > s.returns["mix_same_beta"] + TIE for s in spans)
        said += f", and better than holding less stock at the same beta in {mixed}"
    return f"{said}."


def waterfall_picture(found: Answer, findings: Findings) -> Picture | None:
    """From the hold's gain to the overlay's."""
    made = steps(findings.ledger, found)
    values = made.money[0]
    if not np.isfinite([*values, *findings.ledger.overlay]).all():
        return None
    with page_style():
        figure = new_figure(0.6 + ROW_INCHES * (len(values) + 1))
        charts.waterfall(
            figure.subplots(),
            made.labels,
            values,
            total="overlay",
            unit="gain in percent of starting wealth",
            scale=100,
        )
        worst = int(np.argmin(values[1:])) + 1 if len(values) > 1 else 0
        best = int(np.argmax(values[1:])) + 1 if len(values) > 1 else 0
        said = (
            f"The hold gained {percent(float(values[0]))} of starting wealth, the overlay "
            f"{percent(float(findings.ledger.overlay[0]))}"
        )
        turns = []
        if values[worst] < -TIE and worst:
            turns.append(f"Most was lost by {made.labels[worst]} ({percent(float(values[worst]), sign=True)})")
        if values[best] > TIE and best:
            turns.append(f"most brought by {made.labels[best]} ({percent(float(values[best]), sign=True)})")
        said = ". ".join([said, *([upper_first(", ".join(turns))] if turns else [])])
        return picture_of(figure, "waterfall", "From the hold to the overlay", f"{said}.")


def yearly_picture(found: Answer, findings: Findings) -> Picture | None:
    """What options and costs brought each year, in basis points."""
    flows = yearly_flows(findings, found)
    if not np.isfinite(flows.money).all() or len(findings.ledger_by_year.labels) < 2:
        return None
    columns = dict(zip(flows.labels, flows.money.T, strict=True))
    parts = {}
    for right, colour in (("put", charts.PUT), ("call", charts.CALL)):
        own = [money for label, money in columns.items() if label.startswith(right)]
        if own:
            parts[f"{right}s"] = (colour, np.sum(own, axis=0))
    if (fees := columns.get("spread and fees")) is not None:
        parts["spread and fees"] = (charts.COST, fees)
    if not parts:
        return None
    total = np.sum([values for _, values in parts.values()], axis=0)
    years = findings.ledger_by_year.labels
    with page_style():
        figure = new_figure(2.5)
        charts.yearly_bars(figure.subplots(), years, parts, total="together", unit="basis points of wealth")
        worst, best = int(np.argmin(total)), int(np.argmax(total))
        said = (
            f"Options and their costs brought money in {int(np.count_nonzero(total > 0))} of {len(years)} years; worst "
            f"{years[worst]} ({number(float(total[worst]), 0, sign=True)} basis points), best {years[best]} "
            f"({number(float(total[best]), 0, sign=True)})."
        )
        return picture_of(figure, "by-year", "Options and costs by year", said)


def attribution_picture(found: Answer) -> tuple[Picture | None, list[Part]]:
    """The parts of the excess return, a year."""
    if not np.isfinite(found.attribution.excess).all():
        return None, []
    parts = attribution_parts(found.attribution)
    with page_style():
        figure = new_figure(0.6 + ROW_INCHES * len(parts))
        charts.contribution_bars(
            figure.subplots(), [part.title for part in parts], np.array([part.annual for part in parts]),
            unit="points a year", scale=100,
        )  # fmt: skip
        passive, whole = parts[0], parts[-1]
        said = (
            f"Of {points(whole.annual, sign=False)} points of excess return a year, "
            f"{points(passive.annual, sign=False)} came from holding "
            f"stock at the mean delta"
        )
        if known(passive.risk_share):
            said += f", which was {percent(passive.risk_share, 0)} of the risk"
        return picture_of(figure, "attribution", "Where the excess return came from", f"{said}."), parts


def ladder_picture(found: Answer, findings: Findings) -> Picture | None:
    """Which side wins under which smile."""
    gains = findings.ladder_gains
    values = np.array(list(gains.values()))
    if not np.isfinite(values).any():
        return None
    names = list(gains)
    used = next((i for i, name in enumerate(names) if found.ladder[name].replay is found.replay), None)
    labels = [f"{name} (used here)" if i == used else name for i, name in enumerate(names)]
    with page_style():
        figure = new_figure(0.8 + 0.32 * len(names))
        charts.turning_bars(
            figure.subplots(), labels, values, marked=used, unit="Sharpe ratio, overlay less same-beta mix",
            sides=("holding less did better", "the overlay did better"),
        )  # fmt: skip
        return picture_of(figure, "smiles", "The same overlay under each smile", ladder_reading(gains))


def ladder_reading(gains: Mapping[str, float]) -> str:
    """Does the smile turn the comparison?"""
    ahead = [f"{name} ({ratio(gain, sign=True)})" for name, gain in gains.items() if gain > TIE]
    behind = [f"{name} ({ratio(gain, sign=True)})" for name, gain in gains.items() if gain < -TIE]
    if ahead and behind:
        return f"The smile decides it: the overlay is ahead under {listed(ahead)} and behind under {listed(behind)}."
    if not (ahead or behind):
        return "Overlay and same-beta mix are level, whatever the smile."
    side = "ahead of" if ahead else "behind"
    under = "under every smile" if len(ahead or behind) == len(gains) else "and under no smile on the other side"
    return f"The overlay is {side} its same-beta mix {under}: {listed(ahead or behind)}."


def luck_picture(found: Answer, findings: Findings) -> Picture | None:
    """Return, Sharpe ratio and drawdown by roll day."""
    luck = findings.luck
    panels = (
        (100 * luck.annual_return, 100 * luck.ladder_annual_return, "return, percent"),
        (luck.sharpe, luck.ladder_sharpe, "Sharpe ratio"),
        (100 * luck.max_drawdown, 100 * luck.ladder_max_drawdown, "drawdown, percent"),
    )
    if not all(np.isfinite(values).any() for values, _, _ in panels):
        return None
    with page_style():
        figure = new_figure(4.3)
        axes = figure.subplots(3, 1, sharex=True)
        for one, (values, ladder, unit) in zip(axes, panels, strict=True):
            charts.roll_day_dots(one, luck.offsets, values, ladder=ladder, unit=unit)
        charts.legend_above(axes[0], columns=3)
        axes[-1].set_xlabel("trading days by which every roll is later than yours")
        returns = luck.annual_return[np.isfinite(luck.annual_return)]
        said = (
            f"With the roll day alone the return ran from {percent(float(returns.min()))} to "
            f"{percent(float(returns.max()))}"
        )
        if known(float(luck.annual_return[0])):
            below = int(np.count_nonzero(returns < luck.annual_return[0]))
            said += f"; yours is {percent(float(luck.annual_return[0]))}, above {below} of {returns.size} roll days"
        if known(luck.ladder_annual_return):
            said += f"; all of them side by side gave {percent(luck.ladder_annual_return)}"
        return picture_of(figure, "roll-days", "The same rule on every roll day", f"{said}.")


def rolling_picture(found: Answer, findings: Findings, years: int) -> Picture | None:
    """Trailing figures of the three paths."""
    fields = (
        ("annual_return", "return, % a year", 100.0), ("volatility", "volatility, %", 100.0),
        ("max_drawdown", "drawdown, %", 100.0), ("beta", "beta", 1.0),
    )  # fmt: skip
    rolling = {name: by_years[years] for name, by_years in findings.rolling.items() if name in COMPARED}
    returns = [figures.annual_return for figures in rolling.values()]
    if not returns or not any(np.isfinite(r).any() for r in returns):
        return None
    dates = found.replay.dates
    first = int(np.argmax(np.isfinite(returns[0])))
    with page_style():
        figure = new_figure(5.0)
        axes = figure.subplots(len(fields), 1, sharex=True)
        for one, (field, unit, scale) in zip(axes, fields, strict=True):
            values = {name: scale * getattr(figures, field)[first:] for name, figures in rolling.items()}
            chosen = decimated(*values.values(), most=ROLLING_POINTS)
            series = {PATHS[name]: (COMPARED[name], v[chosen]) for name, v in values.items()}
            charts.rolling_lines(one, dates[first:][chosen], series, unit=unit)
        charts.legend_above(axes[0])
        figure.align_ylabels(axes)
        words = {1: "one year", 3: "three years"}[years]
        return picture_of(
            figure, f"rolling-{years}", f"Figures over the {words} before each day", _rolling_reading(rolling, words)
        )


def _rolling_reading(rolling: Mapping[str, Rolling], words: str) -> str:
    if "overlay" not in rolling:
        return "The overlay's wealth ends before the history does."
    own, hold = (rolling[name].annual_return for name in ("overlay", "hold"))
    both = np.isfinite(own) & np.isfinite(hold)
    more = float(np.mean(own[both] > hold[both] + TIE))
    return (
        f"Over {words} the overlay returned more than the hold on {percent(more, 0)} of days; its worst such stretch "
        f"was {percent(float(own[both].min()))} a year, the hold's {percent(float(hold[both].min()))}."
    )
