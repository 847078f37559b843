"""What every chart shares: colours, number words, a bare axes, and where its legend goes."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING, Literal

if TYPE_CHECKING:
    from matplotlib.axes import Axes

#: Colours that stay apart for the colour-blind (Okabe and Ito, 2008), by what they stand for.
OVERLAY, HOLD, MIX = "#0072b2", "#767676", "#d55e00"
PUT, CALL, COST = "#009e73", "#cc79a7", "#a6761d"
#: Marker and dash tell series apart where colour does not.
MARKERS = {OVERLAY: "o", HOLD: "s", MIX: "D"}
DASHES: dict[str, tuple[int, tuple[float, ...]]] = {OVERLAY: (0, ()), HOLD: (0, (1.5, 1.0)), MIX: (0, (5.0, 1.5))}
MINUS = "−"


def signed(value: float, digits: int) -> str:
    """A number with its sign, a real minus, and no sign on zero.

    Examples
    --------
    >>> signed(-0.204, 2), signed(0.15, 2), signed(-0.001, 2)
    ('−0.20', '+0.15', '0.00')
    """
    text = f"{value:+.{digits}f}"
    if not any(digit in text for digit in "123456789"):
        return text[1:]
    return text.replace("-", MINUS)


def plain(value: float, digits: int = 0) -> str:
    """As :func:`signed` without the plus."""
    return signed(value, digits).removeprefix("+")


def legend_above(axes: Axes, *, columns: int = 4) -> None:
    """The names of all series on one line over the axes."""
    handles, labels = axes.get_legend_handles_labels()
    if handles:
        axes.legend(
            handles, labels, loc="lower left", bbox_to_anchor=(-0.01, 1.0), ncols=columns, frameon=False,
            handlelength=1.6, columnspacing=1.4, borderaxespad=0.2,
        )  # fmt: skip


def bare(axes: Axes, *, keep: Sequence[str]) -> Axes:
    """No box, a faint grid along the value axis, a real minus on the ticks."""
    for side, spine in axes.spines.items():
        spine.set_visible(side in keep)
    value_axis: Literal["x", "y"] = "y" if "left" in keep else "x"
    axes.grid(axis=value_axis, color=HOLD, alpha=0.22, linewidth=0.6)
    axes.set_axisbelow(True)
    axes.tick_params(length=0 if "left" not in keep else 3, axis="y")
    return axes


def plain_ink() -> str:
    """The colour of text under the style in force."""
    from matplotlib import rcParams

    return str(rcParams["text.color"])


def time_axis(axes: Axes) -> None:
    """Few, short date ticks: years alone where the axes spans years."""
    from matplotlib.dates import AutoDateLocator, ConciseDateFormatter

    ticks = AutoDateLocator(minticks=3, maxticks=8)
    axes.xaxis.set_major_locator(ticks)
    axes.xaxis.set_major_formatter(ConciseDateFormatter(ticks))
