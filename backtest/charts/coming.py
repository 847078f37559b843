"""The coming roll as a chart: share, and share with its options, over prices at the first expiry."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from ..engine.coming_package import SHOWN_FROM, SHOWN_TO, HeldOption, Package
from .style import CALL, HOLD, MIX, OVERLAY, PUT, bare, legend_above, plain, plain_ink

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

#: Letters of a title that are shown.
LONGEST_TITLE = 70
#: Letters to a line of the caption.
CAPTION_LETTERS = 126


def coming_chart(axes: Axes, *, package: Package) -> Axes:
    """Share alone, and share with options less what they cost, at the first expiry; strikes and break-evens marked.

    Both in percent of the newest close, over prices from 60 to 140 percent of it.
    """
    ends, percent = package.shown_ends, 100.0 / package.spot
    axes.plot(percent * ends, percent * ends, color=HOLD, linewidth=1.2, linestyle=(0, (1.5, 1.0)), label="share alone")
    axes.plot(percent * ends, percent * package.value(ends), color=OVERLAY, linewidth=1.8, label="share and options")
    level = np.array([stretch.high for stretch in package.against_stock()[:-1]]) * percent
    level = level[(level >= SHOWN_FROM) & (level <= SHOWN_TO)]
    if level.size:
        axes.plot(
            level, level, "o", color=MIX, markerfacecolor="none", markersize=6.5, zorder=3.4,
            label="level with the share alone",
        )  # fmt: skip
    axes.set_xlim(SHOWN_FROM, SHOWN_TO)
    axes.set_xlabel(f"price of the share on {package.expiry}, in percent of the newest close")
    axes.set_ylabel("worth then, in percent of the newest close")
    _mark_strikes(axes, package)
    legend_above(axes, columns=3)
    return bare(axes, keep=("left", "bottom"))


def coming_figure(package: Package, *, title: str) -> Figure:
    """The chart with its title, any text, and what has to be known to read it."""
    from matplotlib import rc_context
    from matplotlib.figure import Figure

    shortened = title if len(title) <= LONGEST_TITLE else title[: LONGEST_TITLE - 1] + "…"
    newest = package.market.dates[-1]
    with rc_context({"text.parse_math": False, "font.size": 10.0}):  # a name with dollar signs is a name
        figure = Figure(figsize=(9.0, 5.4), dpi=150, layout="constrained")
        coming_chart(figure.subplots(), package=package)
        figure.suptitle(f"{shortened or 'overlay'}: the roll of {package.date}", x=0.01, ha="left", fontsize=12.0)
        figure.supxlabel(_caption(package, newest), x=0.01, ha="left", fontsize=8.6)
    return figure


def option_words(option: HeldOption) -> str:
    """An option as it is named in the chart, such as ``put 95.00 bought``."""
    side = "bought" if option.leg.direction > 0 else "sold"
    return f"{option.leg.right} {option.strike:,.2f} {side}"


def _caption(package: Package, newest: np.datetime64) -> str:
    import textwrap

    low, high = (100.0 * end / package.spot for end in package.lowest_and_highest)
    said = [
        f"By the data of {newest}, close {package.spot:,.2f}: model values from past vols, to be checked against live "
        "quotes.",
        f"Share and options are worth {plain(low, 1)} to {plain(high, 1)} then. What the options cost counts with "
        "interest, those already live at their model value; without dividends.",
    ]
    if package.later:
        later = ", ".join(f"{option_words(one)} (to {one.expiry})" for one in package.later[:3])
        more = f" and {len(package.later) - 3} more" if len(package.later) > 3 else ""
        said.append(f"At model value under the same vols, as they expire later: {later}{more}.")
    return "\n".join(textwrap.wrap(" ".join(said), CAPTION_LETTERS))


def _mark_strikes(axes: Axes, package: Package) -> None:
    """A line down from the curve at each strike, its words at the foot; feet rise with the strikes."""
    percent = 100.0 / package.spot
    shown = [one for one in package.held if SHOWN_FROM < one.strike * percent < SHOWN_TO]
    low, high = axes.get_ylim()
    axes.set_ylim(low, high)
    # few enough lines of words for the height
    step = min(0.062, 0.55 / max(len(shown), 1))
    for place, option in enumerate(sorted(shown, key=lambda one: one.strike)):
        foot = low + (high - low) * step * (place + 0.5)
        top = percent * float(package.value(np.array([option.strike]))[0])
        colour = PUT if option.leg.right == "put" else CALL
        dashes = "-" if option.leg.direction > 0 else (0, (4.0, 1.0))
        strike = option.strike * percent
        axes.plot([strike, strike], [foot, top], color=colour, linewidth=1.3, linestyle=dashes, zorder=1.8)
        axes.plot(strike, top, "o", color=colour, markersize=4.6, zorder=3.2)
        axes.annotate(
            f"{option_words(option)}, {plain(strike, 1)}%", (strike, foot), xytext=(5, 0), textcoords="offset points",
            va="center", ha="left", fontsize=9.0, color=plain_ink(), annotation_clip=False,
        )  # fmt: skip
