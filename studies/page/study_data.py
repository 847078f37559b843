"""The figures of a study for the map that the reader turns: bounded, rounded, and safe inside a page."""

from __future__ import annotations

import json
from collections.abc import Sequence
from typing import Any

import numpy as np
import numpy.typing as npt
from markupsafe import Markup

from .study_pictures import figure_title
from .study_view import (
    DRAWDOWN,
    INFORMATION,
    REMOVED,
    RETURN,
    RETURN_GAIN,
    RETURN_MIX,
    SHARPE,
    SHARPE_GAIN,
    View,
)
from .words import upper_first

Array = npt.NDArray[np.float64]

#: What can be chosen, the first at the start.
EXPLORED = (SHARPE_GAIN, RETURN_GAIN, REMOVED, INFORMATION, RETURN_MIX, SHARPE, RETURN, DRAWDOWN)
#: Overlays of all groups together, and bytes, beyond which there is no map to turn.
MOST_EXPLORED, MOST_BYTES = 12_000, 1_000_000
SIGNIFICANT = 4
#: What would end the element that holds the data, or a line of a script.
UNSAFE = {"<": "\\u003c", ">": "\\u003e", "&": "\\u0026", "\u2028": "\\u2028", "\u2029": "\\u2029"}


def key_of(view: View) -> str:
    """Under which a view's figures are in the data."""
    return f"g{view.number}"


def explorer_data(views: Sequence[View]) -> Markup | None:
    """The data as JSON; None if there is nothing to turn, or more than a page should hold."""
    shown = [view for view in views if len(view.axes) > 1]
    if not shown or sum(map(len, shown)) > MOST_EXPLORED:
        return None
    table = {
        "figures": [
            {
                "field": figure.field,
                "title": upper_first(figure_title(figure, shown[0])),
                "unit": "%" if figure.unit == "percent" else " points" if figure.unit.startswith("points") else "",
                "scale": figure.scale,
                "digits": figure.digits,
                "sign": figure.sign,
            }
            for figure in EXPLORED
        ],
        "groups": {key_of(view): _group(view) for view in shown},
    }
    text = json.dumps(table, separators=(",", ":"), ensure_ascii=False, allow_nan=False)
    for letter, written in UNSAFE.items():
        text = text.replace(letter, written)
    # nothing in it can end the element any more
    return Markup(text) if len(text.encode("utf-8")) <= MOST_BYTES else None


def _group(view: View) -> dict[str, Any]:
    """``at`` is the place of each overlay among all combinations of the axes, the last axis the fastest."""
    sizes = [len(axis.values) for axis in view.axes]
    places = np.ravel_multi_index(tuple(view.positions.T), sizes)
    whole = len(places) == np.prod(sizes) and bool((places == np.arange(len(places))).all())
    return {
        "axes": [{"name": axis.name, "labels": list(axis.labels)} for axis in view.axes],
        "at": None if whole else places.tolist(),
        "own": view.own,
        "best": view.best,
        "values": {figure.field: rounded(view.figure(figure.field)) for figure in EXPLORED},
    }


def rounded(values: Array) -> list[float | None]:
    """Four significant digits; None for what cannot be had.

    Examples
    --------
    >>> rounded(np.array([0.123456, -12.3456, float("nan"), 0.0]))
    [0.1235, -12.35, None, 0.0]
    """
    return [float(f"{value:.{SIGNIFICANT}g}") if np.isfinite(value) else None for value in values.tolist()]
