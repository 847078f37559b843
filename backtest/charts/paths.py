"""Charts of paths over time: growth of 1, drawdown, exposure, and the band of strikes around the price."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

from ..analytics.drawdowns import drawdown_path
from ..engine.leg_replay import LegReplay
from ..engine.result import Replay
from .style import CALL, DASHES, HOLD, MINUS, MIX, OVERLAY, PUT, bare, legend_above, plain, plain_ink, time_axis

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

Array = npt.NDArray[np.float64]
Dates = npt.NDArray[np.datetime64]

#: Names of paths beside an axes are kept this far apart, as a share of its height.
LABEL_STEP = 0.065
#: A band over more years than this is drawn twice, the second time its last years alone.
BAND_YEARS = 6
CLOSE_YEARS = 3


def growth_chart(axes: Axes, *, dates: Dates, series: Mapping[str, tuple[str, Array]]) -> Axes:
    """Growth of 1 on a log scale, each path named at its end.

    Parameters
    ----------
    axes : matplotlib Axes
    dates : ndarray of datetime64, shape (day,)
    series : mapping
        Name of a path to its colour and its growth of 1, shape ``(day,)``; the first is drawn on top and thickest.
        A path may end in NaN.
    """
    _lines(axes, dates, series)
    axes.set_yscale("log")
    _plain_log_ticks(axes)
    axes.set_ylabel("growth of 1, log scale")
    _name_ends(axes, series)
    return bare(axes, keep=("left", "bottom"))


def drawdown_chart(axes: Axes, *, dates: Dates, series: Mapping[str, tuple[str, Array]]) -> Axes:
    """Fall from the highest close so far, in percent, of each path; ``series`` as in :func:`growth_chart`."""
    falls = {name: (colour, 100 * drawdown_path(values)) for name, (colour, values) in series.items()}
    colour, own = next(iter(falls.values()))
    axes.fill_between(dates, own, 0.0, color=colour, alpha=0.18, linewidth=0)
    _lines(axes, dates, falls)
    axes.set_ylim(top=0.0)
    axes.yaxis.set_major_formatter(lambda value, _: plain(value))
    axes.set_ylabel("percent below the former peak")
    legend_above(axes)
    return bare(axes, keep=("left", "bottom"))


def exposure_chart(axes: Axes, *, dates: Dates, values: Array, unit: str) -> Axes:
    """One exposure of the overlay over time, such as its delta, with a line at zero.

    Parameters
    ----------
    axes : matplotlib Axes
    dates : ndarray of datetime64, shape (day,)
    values : ndarray, shape (day,)
        In ``unit``, which is written beside the axis; may end in NaN.
    """
    axes.plot(dates, values, color=OVERLAY, linewidth=1.0)
    axes.axhline(0.0, color=plain_ink(), linewidth=0.6)
    axes.margins(x=0.0)
    time_axis(axes)
    axes.yaxis.set_major_formatter(lambda value, _: f"{value:g}".replace("-", MINUS))
    axes.set_ylabel(unit)
    return bare(axes, keep=("left", "bottom"))


def band_chart(axes: Axes, *, replay: Replay, first: int = 0, days: npt.NDArray[np.intp] | None = None) -> Axes:
    """The price between the strikes: a line an option from its roll to its end, a tick at each roll.

    Parameters
    ----------
    axes : matplotlib Axes
    replay : Replay
    first : int
        The day to begin on, counted from inception; options still live then are drawn from it.
    days : ndarray of int, optional
        Days of the price line to draw, from ``first`` on if not given. The legend is left out where ``first`` is not
        0: the chart then stands below another one.
    """
    shown = np.arange(first, len(replay)) if days is None else days[days >= first]
    axes.plot(replay.dates[shown], replay.spot[shown], color=OVERLAY, linewidth=1.0, label="price at the close")
    named: set[str] = set()
    settled: str | None = "settled in the money"
    for leg in replay.legs:
        if leg.signed_ratio == 0.0:
            continue
        name = f"{leg.leg.right} {'bought' if leg.signed_ratio > 0 else 'sold'}"
        if _strikes(axes, replay, leg, first=first, name=None if name in named else name, settled=settled):
            settled = None
        named.add(name)
    axes.set_yscale("log")
    _plain_log_ticks(axes)
    axes.set_ylabel("price, log scale")
    axes.margins(x=0.01)
    time_axis(axes)
    if first == 0:
        legend_above(axes, columns=3)
    return bare(axes, keep=("left", "bottom"))


def last_years(dates: Dates, years: int = CLOSE_YEARS) -> int:
    """Position of the first day of the last ``years`` years, or 0 where the dates span :data:`BAND_YEARS` or less.

    Examples
    --------
    >>> dates = np.arange("2001-01-01", "2011-01-01", dtype="datetime64[D]")
    >>> str(dates[last_years(dates)])
    '2008-01-01'
    >>> last_years(dates[:700])
    0
    """
    span = (dates[-1] - dates[0]).astype("timedelta64[D]").astype(int) / 365.25
    if span <= BAND_YEARS:
        return 0
    return int(np.searchsorted(dates, dates[-1] - np.timedelta64(round(years * 365.25) - 1, "D")))


def replay_figures(*, dates: Dates, growth_paths: Mapping[str, Array], replay: Replay, title: str) -> dict[str, Figure]:
    """The three pictures of a results folder: ``growth``, ``drawdown`` and ``band``.

    Parameters
    ----------
    dates : ndarray of datetime64, shape (day,)
    growth_paths : mapping
        Name to growth of 1, shape ``(day,)``: the overlay first, then the hold, then a mix if there is one.
    replay : Replay
    title : str
        The overlay's name; any text will do.
    """
    from matplotlib import rc_context
    from matplotlib.figure import Figure

    series = {
        name: (colour, path) for (name, path), colour in zip(growth_paths.items(), (OVERLAY, HOLD, MIX), strict=False)
    }
    with rc_context(
        {"text.parse_math": False, "font.size": 10.0, "axes.titlesize": 10.0}
    ):  # a name with dollar signs is a name
        made = {}
        for name, chart, words in (("growth", growth_chart, "growth of 1"), ("drawdown", drawdown_chart, "drawdown")):
            made[name] = Figure(figsize=(9.0, 4.6), dpi=150, layout="constrained")
            chart(made[name].subplots(), dates=dates, series=series)
            _entitle(made[name], title, words)
        close = last_years(dates)
        made["band"] = Figure(figsize=(9.0, 8.4 if close else 4.6), dpi=150, layout="constrained")
        panels = made["band"].subplots(2 if close else 1, squeeze=False)[:, 0]
        band_chart(panels[0], replay=replay)
        if close:
            band_chart(panels[1], replay=replay, first=close).set_title(f"the last {CLOSE_YEARS} years", loc="left")
        _entitle(made["band"], title, "price and strikes")
    return made


def _entitle(figure: Figure, title: str, words: str) -> None:
    shortened = title if len(title) <= 70 else title[:69] + "…"
    figure.suptitle(f"{shortened or 'overlay'}: {words}", x=0.01, ha="left", fontsize=12.0)


def _lines(axes: Axes, dates: Dates, series: Mapping[str, tuple[str, Array]]) -> None:
    """The first path on top and thickest."""
    for order, (name, (colour, values)) in enumerate(series.items()):
        axes.plot(
            dates, values, color=colour, label=name, zorder=3.0 - 0.1 * order, linewidth=1.2 if order else 1.8,
            linestyle=DASHES.get(colour, (0, ())),
        )  # fmt: skip
    axes.margins(x=0.0)
    time_axis(axes)


def _strikes(axes: Axes, replay: Replay, leg: LegReplay, *, first: int, name: str | None, settled: str | None) -> bool:
    """A line per option at its strike, a tick at its roll, a dot where it settled in the money; whether any did."""
    shown = leg.closed > first
    if not shown.any():
        return False
    dates, strike = replay.dates, leg.strike[shown]
    colour = PUT if leg.leg.right == "put" else CALL
    bought = leg.signed_ratio > 0
    start, end = dates[np.maximum(leg.opened[shown], first)], dates[leg.closed[shown]]
    axes.hlines(
        strike,
        start,
        end,
        color=colour,
        linewidth=1.4,
        linestyle="-" if bought else (0, (4.0, 1.0)),
        label=name or "_unnamed",
    )
    rolled = leg.opened[shown] >= first
    axes.plot(start[rolled], strike[rolled], "|", color=colour, markersize=5.0, markeredgewidth=1.0)
    paid = (leg.close_value[shown] > 0) & ~leg.schedule.live[shown] & leg.schedule.settles[shown]
    if settled is not None and paid.any():
        # one entry for all legs, in the colour of none
        axes.plot([], [], "o", color=plain_ink(), markersize=3.6, label=settled)
    axes.plot(end[paid], strike[paid], "o", color=colour, markersize=3.6, zorder=2.8)
    return bool(paid.any())


def _plain_log_ticks(axes: Axes) -> None:
    """Ticks at 1, 2, 5 and so on, closer where the range is small, written as plain numbers."""
    from matplotlib.ticker import FuncFormatter, LogLocator, MaxNLocator, NullFormatter, NullLocator

    low, high = axes.get_ylim()
    if high / low < 3.0:
        axes.yaxis.set_major_locator(MaxNLocator(nbins=6, steps=[1, 2, 2.5, 5, 10]))
    else:
        between = (1.0, 1.5, 2.0, 3.0, 5.0, 7.0) if high / low < 15.0 else (1.0, 2.0, 5.0)
        axes.yaxis.set_major_locator(LogLocator(base=10.0, subs=between))
    axes.yaxis.set_major_formatter(FuncFormatter(lambda value, _: f"{value:,.10g}"))
    axes.yaxis.set_minor_locator(NullLocator())
    axes.yaxis.set_minor_formatter(NullFormatter())


def _name_ends(axes: Axes, series: Mapping[str, tuple[str, Array]]) -> None:
    """The name of each path right of the axes at the height of its last value, names kept apart."""
    low, high = np.log(axes.get_ylim())
    ends = {}
    for name, (colour, values) in series.items():
        known = values[np.isfinite(values) & (values > 0)]
        if known.size:
            ends[name] = (colour, float(known[-1]), float((np.log(known[-1]) - low) / (high - low)))
    names = sorted(ends, key=lambda name: ends[name][2])
    for name, height in zip(names, spread([ends[name][2] for name in names], LABEL_STEP), strict=True):
        colour, value, _ = ends[name]
        axes.annotate(
            f"{name} {value:,.2f}", (1.0, height), xycoords="axes fraction", xytext=(5, 0), textcoords="offset points",
            color=colour, va="center", ha="left", annotation_clip=False,
        )  # fmt: skip


def spread(heights: Sequence[float], step: float) -> list[float]:
    """Rising heights moved as little as is simple, so that neighbours are at least ``step`` apart.

    Examples
    --------
    >>> [round(h, 2) for h in spread([0.2, 0.5, 0.52], 0.06)]
    [0.2, 0.48, 0.54]
    """
    placed: list[list[float]] = []  # runs of labels that touch, each centred on its members
    for height in heights:
        placed.append([height])
        while len(placed) > 1 and _bottom(placed[-1], step) - _top(placed[-2], step) < step:
            last = placed.pop()
            placed[-1] = placed[-1] + last
    return [_bottom(run, step) + order * step for run in placed for order in range(len(run))]


def _bottom(run: list[float], step: float) -> float:
    return sum(run) / len(run) - step * (len(run) - 1) / 2


def _top(run: list[float], step: float) -> float:
    return _bottom(run, step) + step * (len(run) - 1)
