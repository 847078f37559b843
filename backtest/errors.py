"""The errors of the engine, one small family.

    BacktestError
    ├── MarketError    the price, vol, rate or dividend arrays cannot be used
    ├── OverlayError   the overlay itself makes no sense (a negative ratio, a term under its roll)
    └── PlanError      overlay and market are fine, but not together (no roll date in the window)

Every message says what came, the rule with its limit, and what to do.
"""

from __future__ import annotations


class BacktestError(ValueError):
    """Base of every error that ``backtest`` raises on purpose."""


class MarketError(BacktestError):
    """The arrays of a market cannot be used."""


class OverlayError(BacktestError):
    """An overlay, a leg, a cost or a volatility assumption makes no sense.

    Parameters
    ----------
    message : str
        The sentence for the reader.
    field : str, optional
        The name of the offending field, so that a file reader can point at the line.
    """

    def __init__(self, message: str, *, field: str | None = None) -> None:
        super().__init__(message)
        self.field = field


class PlanError(BacktestError):
    """The overlay cannot be replayed on this market in this window."""
