"""Charts of what an overlay is worth over prices of the stock."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from ..analytics.payoff import HIGHEST_END, LOWEST_END, NO_TIME, OpenedOption, Payoff
from ..strikes import Adjusted, flag_words
from .style import CALL, HOLD, OVERLAY, PUT, bare, legend_above, plain

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

#: Height of a line of strike labels, as a share of the axes.
LABEL_STEP = 0.062
#: Letters to a line of the caption.
CAPTION_LETTERS = 140


def payoff_at_expiry(axes: Axes, *, payoff: Payoff) -> Axes:
    """Stock alone and stock with its options at the first expiry, over prices of the stock then; strikes marked.

    Where options are replaced before that, a thinner line shows the same on the day of the first roll.
    """
    ends = payoff.ends
    axes.plot(ends, ends, color=HOLD, linewidth=1.2, linestyle=(0, (1.5, 1.0)), label="stock alone")
    when = "at the first expiry" if _some_live_on(payoff) else "at expiry"
    axes.plot(
        ends, payoff.values, color=OVERLAY, linewidth=2.0, label=f"stock and options {when}, in {months(payoff.years)}"
    )
    if payoff.replaced_years is not None and payoff.replaced_values is not None:
        axes.plot(
            ends, payoff.replaced_values, color=OVERLAY, linewidth=1.1, linestyle=(0, (5.0, 1.5)),
            label=f"at the first roll, in {months(payoff.replaced_years)}",
        )  # fmt: skip
    axes.set_xlim(LOWEST_END, HIGHEST_END)
    axes.set_xlabel("price of the stock then, in percent of today's")
    axes.set_ylabel("worth, in percent of today's price")
    _mark_strikes(axes, payoff)
    legend_above(axes, columns=3)
    return bare(axes, keep=("left", "bottom"))


def payoff_figure(payoff: Payoff, *, title: str) -> Figure:
    """The picture with its title, and with all that was assumed under it; ``title`` may be any text."""
    from matplotlib import rc_context
    from matplotlib.figure import Figure

    with rc_context({"text.parse_math": False, "font.size": 10.0}):  # a name with dollar signs is a name
        figure = Figure(figsize=(9.0, 5.4), dpi=150, layout="constrained")
        payoff_at_expiry(figure.subplots(), payoff=payoff)
        shortened = title if len(title) <= 95 else title[:94] + "…"
        figure.suptitle(shortened, x=0.01, ha="left", fontsize=12.0)
        figure.supxlabel(_lines(payoff_caption(payoff)), x=0.01, ha="left", fontsize=8.6)
    return figure


def payoff_caption(payoff: Payoff) -> list[str]:
    """What has to be known to read the picture, a sentence each."""
    market, net = payoff.market, payoff.net_premium
    said = f"Net premium {'paid' if net > 0 else 'received'} {plain(abs(net), 2)}% of the price, with interest"
    told = [
        f"For one share. {said if abs(net) >= 0.005 else 'No net premium'}, half-spreads included.",
        f"Assumed: price {market.spot:g}, vol {100 * market.vol:g}% at the money, smile "
        f"{payoff.volatility.smile.name}, rate {100 * market.rate:g}%, no dividends.",
    ]
    if payoff.replaced_years is not None or _some_live_on(payoff):
        told.append("Options not expired yet stand at their model value, vols unchanged.")
    legs = [option.leg for option in payoff.options]
    outside = [option_words(option) for option in payoff.options if not _inside(option, payoff)]
    told += [f"Outside the picture: {', '.join(outside)}."] if outside else []
    for option in payoff.options:
        if option.flags:
            told.append(f"Strike of leg {option.number}: {', '.join(flag_words(option.flags))}.")
    if any(leg.ladder > 1 for leg in legs):
        told.append("All tranches as if they were opened today.")
    if payoff.overlay.gate is not None or any(leg.gate is not None for leg in legs):
        told.append("While the gate lets options be bought.")
    if any(leg.early is not None for leg in legs):
        told.append("Without early replacement.")
    if any(isinstance(leg.strike, Adjusted) and leg.strike.strike_step is not None for leg in legs):
        told.append(f"The step between strikes is taken at a price of {market.spot:g}.")
    return told


def option_words(option: OpenedOption) -> str:
    """An option and what it costs or brings after the half-spread, such as ``95 put bought for 2.52``."""
    leg = option.leg
    many = "" if leg.ratio == 1 else f"{leg.ratio:g} × "
    what = f"{many}{strike_words(option.strike)} {leg.right}"
    return f"{what} {'bought' if leg.direction > 0 else 'sold'} for {plain(leg.direction * option.paid, 2)}"


def strike_words(strike: float) -> str:
    """A strike to a tenth, whole ones without.

    Examples
    --------
    >>> strike_words(95.0), strike_words(104.23)
    ('95', '104.2')
    """
    return f"{strike:.1f}".removesuffix(".0")


def months(years: float) -> str:
    """A span in months.

    Examples
    --------
    >>> months(0.25), months(1 / 12), months(0.25 + 5 / 252)
    ('3 months', '1 month', '3.2 months')
    """
    number = f"{12.0 * years:.1f}".removesuffix(".0")
    return f"{number} month" if number == "1" else f"{number} months"


def _some_live_on(payoff: Payoff) -> bool:
    return any(option.life_years > payoff.years + NO_TIME for option in payoff.options)


def _inside(option: OpenedOption, payoff: Payoff) -> bool:
    return LOWEST_END <= 100.0 * option.strike / payoff.market.spot <= HIGHEST_END


def _mark_strikes(axes: Axes, payoff: Payoff) -> None:
    """A line down from the curve at each strike, its words at the foot.

    The feet rise with the strikes and the words stand on their right, so that no line runs through them.
    """
    shown = sorted((option for option in payoff.options if _inside(option, payoff)), key=lambda one: one.strike)
    low, high = axes.get_ylim()
    axes.set_ylim(low, high)
    for place, option in enumerate(shown):
        strike = 100.0 * option.strike / payoff.market.spot
        foot = low + (high - low) * LABEL_STEP * (place + 0.5)
        top = float(np.interp(strike, payoff.ends, payoff.values))
        colour = PUT if option.leg.right == "put" else CALL
        dashes = "-" if option.leg.direction > 0 else (0, (4.0, 1.0))
        axes.plot([strike, strike], [foot, top], color=colour, linewidth=1.3, linestyle=dashes, zorder=1.8)
        axes.plot(strike, top, "o", color=colour, markersize=4.6, zorder=3.2)
        axes.annotate(
            option_words(option), (strike, foot), xytext=(5, 0), textcoords="offset points", va="center", ha="left",
            fontsize=9.0, annotation_clip=False, bbox={"facecolor": _paper(), "edgecolor": "none", "pad": 0.8},
        )  # fmt: skip


def _paper() -> str:
    """The colour behind the axes under the style in force, so that no grid line runs through a word."""
    from matplotlib import rcParams

    return str(rcParams["axes.facecolor"])


def _lines(sentences: list[str]) -> str:
    """Sentences in lines of a length."""
    import textwrap

    return "\n".join(textwrap.wrap(" ".join(sentences), CAPTION_LETTERS))
