"""Figures from wealth paths (C10 to C12). The last axis is time."""

from .attribution import Attribution, attribute
from .comparisons import Mixes, mixes
from .drawdowns import Drawdown, deepest_drawdown, drawdown_path
from .greeks import Greeks, greeks_of
from .performance import Performance, performance
from .roll_costs import LegCosts, RollCosts, roll_costs

__all__ = [
    "Attribution",
    "Drawdown",
    "Greeks",
    "LegCosts",
    "Mixes",
    "Performance",
    "RollCosts",
    "attribute",
    "deepest_drawdown",
    "drawdown_path",
    "greeks_of",
    "mixes",
    "performance",
    "roll_costs",
]
