"""Numbers to matplotlib charts; reads no files and sets no global style."""

from .comparisons import (
    contribution_bars,
    interval_chart,
    roll_day_dots,
    rolling_lines,
    span_dots,
    spread_bars,
    turning_bars,
    waterfall,
    yearly_bars,
)
from .paths import CLOSE_YEARS, band_chart, drawdown_chart, exposure_chart, growth_chart, last_years, replay_figures
from .style import CALL, COST, DASHES, HOLD, MARKERS, MIX, OVERLAY, PUT, legend_above, plain, signed

__all__ = [
    "CALL",
    "CLOSE_YEARS",
    "COST",
    "DASHES",
    "HOLD",
    "MARKERS",
    "MIX",
    "OVERLAY",
    "PUT",
    "band_chart",
    "contribution_bars",
    "drawdown_chart",
    "exposure_chart",
    "growth_chart",
    "interval_chart",
    "last_years",
    "legend_above",
    "plain",
    "replay_figures",
    "roll_day_dots",
    "rolling_lines",
    "signed",
    "span_dots",
    "spread_bars",
    "turning_bars",
    "waterfall",
    "yearly_bars",
]
