"""The charts of paths: growth, drawdown, the band and the exposure over time, each with the line it is read by."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np

from backtest import charts

from ..path_names import PATHS
from ..replay_history import Answer
from .pictures import COMPARED, Picture, decimated, new_figure, page_style, picture_of
from .words import known, listed, number, percent


def growth_pictures(found: Answer) -> Iterator[Picture]:
    """Growth of 1 and drawdown of overlay, hold and same-beta mix."""
    paths = {name: path for name, path in found.paths.items() if name in COMPARED}
    chosen = decimated(*paths.values())
    dates = found.replay.dates[chosen]
    series = {PATHS[name]: (COMPARED[name], path[chosen]) for name, path in paths.items()}
    with page_style():
        figure = new_figure(2.9)
        charts.growth_chart(figure.subplots(), dates=dates, series=series)
        yield picture_of(figure, "growth", "Growth of 1", _growth_reading(found))
        figure = new_figure(2.6)
        charts.drawdown_chart(figure.subplots(), dates=dates, series=series)
        yield picture_of(figure, "drawdown", "Fall from the former peak", _drawdown_reading(found))


def band_pictures(found: Answer) -> Iterator[Picture]:
    """Price between the strikes: all years, then the last few where one cannot tell the rolls apart."""
    replay = found.replay
    close = charts.last_years(replay.dates)
    chosen = decimated(replay.spot)
    with page_style():
        figure = new_figure(3.1)
        charts.band_chart(figure.subplots(), replay=replay, days=chosen)
        yield picture_of(figure, "band", "Price and strikes", _band_reading(found))
        if close:
            figure = new_figure(2.9)
            charts.band_chart(figure.subplots(), replay=replay, first=close)
            title = f"Price and strikes, the last {charts.CLOSE_YEARS} years"
            yield picture_of(figure, "band-close", title, "The same lines and colours as above, nearer.")


def exposure_picture(found: Answer) -> Picture | None:
    """Dollar delta and vega of the package over time; none where the overlay's wealth ends before the history does."""
    replay = found.replay
    if not np.isfinite(replay.wealth).all():
        return None
    delta, vega = 100 * replay.delta, 10_000 * replay.greeks.package()["vega"]
    chosen = decimated(delta, vega)
    with page_style():
        figure = new_figure(3.6)
        upper, lower = figure.subplots(2, 1, sharex=True)
        for axes, values, unit in ((upper, delta, "delta, percent"), (lower, vega, "vega, basis points")):
            charts.exposure_chart(axes, dates=replay.dates[chosen], values=values[chosen], unit=unit)
        said = (
            f"Delta is what moves with the share, in percent of wealth: from {number(float(delta.min()), 0)} to "
            f"{number(float(delta.max()), 0)}, {number(float(delta.mean()), 0)} on average. Vega is what one more "
            f"point on every option vol brings, in basis points of wealth: from {number(float(vega.min()), 1)} to "
            f"{number(float(vega.max()), 1)}."
        )
        return picture_of(figure, "exposure", "Exposure over time", said)


def _growth_reading(found: Answer) -> str:
    paths = found.paths
    grown = {name: float(paths[name][-1]) for name in COMPARED if name in paths}
    ends = [f"{number(end) if known(end) else 'nothing'} in the {PATHS[name]}" for name, end in grown.items()]
    return f"1.00 became {listed(ends)}."


def _drawdown_reading(found: Answer) -> str:
    own, hold = found.figures["overlay"], found.figures["hold"]
    if hold is None:
        return "No drawdown can be had."
    said = f"The hold fell {percent(abs(hold.max_drawdown))} at its deepest"
    if own is None or not known(own.max_drawdown):
        return f"{said}; the overlay's wealth ends before the history does."
    return f"{said}, the overlay {percent(abs(own.max_drawdown))}."


def _band_reading(found: Answer) -> str:
    said = []
    for leg in found.replay.legs:
        settled = leg.schedule.settles & ~leg.schedule.live
        name = f"{'bought' if leg.leg.direction > 0 else 'sold'} {leg.label.replace('_', ' ')}"
        ended = int(np.count_nonzero(settled & (leg.close_value > 0)))
        said.append(f"{ended} of {int(np.count_nonzero(settled)):,} of the {name}")
    return f"A line an option, from its roll to its end. Of those that settled, in the money ended {listed(said)}."
