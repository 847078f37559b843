"""Figures from wealth paths (C10 to C12). The last axis is time."""

from .attribution import Attribution, attribute
from .comparisons import Mixes, mixes
from .drawdowns import Drawdown, deepest_drawdown, drawdown_path
from .performance import Performance, performance
from .roll_costs import LegCosts, RollCosts, roll_costs

__all__ = [
    "Attribution",
    "Drawdown",
    "LegCosts",
    "Mixes",
    "Performance",
    "RollCosts",
    "attribute",
    "deepest_drawdown",
    "drawdown_path",
    "mixes",
    "performance",
    "roll_costs",
]
