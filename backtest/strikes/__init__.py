"""Strike rules: one small frozen class per rule of C6, what may be laid around any of them, and their names in files.

A rule sees the state of the market when the options of one leg are struck, as arrays of shape ``(roll,)``, and
answers with a strike for each. A new rule is one class and one entry in :data:`STRIKE_RULES`; the engine asks
only for ``strikes``.
"""

from .adjusted import Adjusted, flag_words, limit_strikes, round_to_step
from .catalogue import STRIKE_KEYS, STRIKE_RULES, strike_from_table, strike_to_table
from .linked import Financed, Mirrored
from .percent import Deviations, PercentOfForward, PercentOfSpot
from .solved import Delta, PremiumPercent
from .state import ABOVE_ALL, BELOW_ALL, LinkedOption, OpenState, StrikeRule

__all__ = [
    "ABOVE_ALL",
    "BELOW_ALL",
    "STRIKE_KEYS",
    "STRIKE_RULES",
    "Adjusted",
    "Delta",
    "Deviations",
    "Financed",
    "LinkedOption",
    "Mirrored",
    "OpenState",
    "PercentOfForward",
    "PercentOfSpot",
    "PremiumPercent",
    "StrikeRule",
    "flag_words",
    "limit_strikes",
    "round_to_step",
    "strike_from_table",
    "strike_to_table",
]
