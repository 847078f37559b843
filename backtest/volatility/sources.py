"""Where the at-the-money volatility comes from, and the surface made of it (C7).

:class:`Volatility` is the agreement (source, quote, smile); ``volatility.on(market)``
binds it to a history. What it gives back answers one question, ``slice(day, tau)``:
the smile on given days for given times to expiry. A source of another kind (a quoted
surface, say) need only answer the same question.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Protocol, TypeAlias

import numpy as np
import numpy.typing as npt

from ..arguments import number, one_of, whole_number
from ..errors import MarketError, OverlayError
from ..market import DAYS_IN_YEAR, Market
from .realised import close_to_close
from .smile import INDEX, FlatSmile, SmileSlice, SSVISmile

Array = npt.NDArray[np.float64]
Days: TypeAlias = "npt.NDArray[np.intp] | slice"

#: How a vol quote is read: as the at-the-money-forward vol, or as the square root of a fair variance.
QUOTES = ("at the money", "variance swap")


class BoundVolatility(Protocol):
    """A volatility assumption on a market's days."""

    @property
    def first_day(self) -> int:
        """Position of the first day that has a volatility; ``len(market)`` if none has."""
        ...

    def slice(self, day: Days, tau_years: Array) -> SmileSlice:
        """The smile on each day for its time to expiry; positions or a slice of them, and an array as long."""
        ...

    def missing(self, first: int, last: int) -> int | None:
        """Position of the first day without a volatility from ``first`` to ``last``, or None."""
        ...


@dataclass(frozen=True, slots=True, kw_only=True)
class ImpliedSeries:
    """The vol quotes of the history, one tenor or several."""

    def quotes(self, market: Market) -> tuple[npt.NDArray[np.int64], Array]:
        """Tenors in days, shape ``(tenor,)``, and decimal quotes, shape ``(tenor, day)``."""
        if not market.has_vol:
            raise MarketError("the history has no implied vols: load a vol file, or use realised volatility")
        return market.vol_tenor_days, market.vol_quotes


@dataclass(frozen=True, slots=True, kw_only=True)
class RealisedVolatility:
    """Realised close-to-close volatility in place of a quote (C7a).

    Parameters
    ----------
    window : int
        Trading days, at least 2.
    markup : float
        Factor on the realised vol, since options are commonly dearer than the past was volatile.
    """

    window: int = 63
    markup: float = 1.0

    def __post_init__(self) -> None:
        whole_number("window", self.window, least=2, most=2520, unit=" trading days")
        number("markup", self.markup, least=0.01, most=10.0, unit=" (a factor)")

    def quotes(self, market: Market) -> tuple[npt.NDArray[np.int64], Array]:
        """One row, which serves every tenor; NaN until the window is full."""
        return np.array([30]), close_to_close(market.spot, self.window)[np.newaxis] * self.markup


@dataclass(frozen=True, slots=True, kw_only=True)
class Volatility:
    """How options are priced from what the market holds.

    Parameters
    ----------
    source : ImpliedSeries or RealisedVolatility, optional
        If not given, the implied vols of the history where it has any, else realised vol of 63 days.
    smile : FlatSmile or SSVISmile
        Index-like unless given (C7).
    quote : {"at the money", "variance swap"}
        How an implied series is read. Realised vol is always read at the money.
    put_shift, call_shift : float
        Vol points added to every vol at which puts, or calls, are priced: how far does an answer lean on
        the prices? Where nothing is left of a vol the option has no price, and the wealth becomes NaN.

    Raises
    ------
    OverlayError
        For an unknown quote.
    """

    source: ImpliedSeries | RealisedVolatility | None = None
    smile: FlatSmile | SSVISmile = field(default=INDEX)
    quote: str = "at the money"
    put_shift: float = 0.0
    call_shift: float = 0.0

    def __post_init__(self) -> None:
        one_of("quote", self.quote, QUOTES)
        number("put_shift", self.put_shift, least=-100.0, most=100.0, unit=" vol points")
        number("call_shift", self.call_shift, least=-100.0, most=100.0, unit=" vol points")
        if not isinstance(self.smile, (FlatSmile, SSVISmile)):
            raise OverlayError(f"smile is {self.smile!r}; give one of the ladder or an SSVISmile", field="smile")

    def shift(self, right: str) -> float:
        """What is added to the vols of puts or of calls, decimal."""
        return (self.call_shift if right == "call" else self.put_shift) / 100.0

    def source_for(self, market: Market) -> ImpliedSeries | RealisedVolatility:
        """The source that will be used on this market."""
        if self.source is not None:
            return self.source
        return ImpliedSeries() if market.has_vol else RealisedVolatility()

    def on(self, market: Market) -> BoundVolatility:
        """Bind to a market; a variance-swap quote is converted here, each at its own tenor."""
        source = self.source_for(market)
        tenor_days, quotes = source.quotes(market)
        tenor_years = tenor_days / DAYS_IN_YEAR
        variance = quotes * quotes
        if self.quote == "variance swap" and isinstance(source, ImpliedSeries):
            tau = tenor_years[:, np.newaxis]
            variance = self.smile.atm_variance_of_swap(variance * tau) / tau
        return _TenorSurface(tenor_years=tenor_years, variance=variance, smile=self.smile)


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _TenorSurface:
    """At-the-money variances per tenor, a smile laid on top."""

    tenor_years: Array
    variance: Array  # (tenor, day), annual
    smile: FlatSmile | SSVISmile

    @property
    def first_day(self) -> int:
        known = np.isfinite(self.variance).all(axis=0)
        return int(np.argmax(known)) if known.any() else self.variance.shape[1]

    def missing(self, first: int, last: int) -> int | None:
        unknown = np.flatnonzero(~np.isfinite(self.variance[:, first : last + 1]).all(axis=0))
        return first + int(unknown[0]) if unknown.size else None

    def slice(self, day: Days, tau_years: Array) -> SmileSlice:
        return self.smile.slice(self._theta(day, tau_years))

    def _theta(self, day: Days, tau: Array) -> Array:
        """At-the-money total variance: linear in tau between tenors, vol flat beyond the first and last."""
        variance, tenors = self.variance, self.tenor_years
        last = len(tenors) - 1
        if last == 0:
            return variance[0, day] * tau
        if isinstance(day, slice):
            day = np.arange(day.start, day.stop)
        lower = np.clip(np.searchsorted(tenors, tau, side="right") - 1, 0, last - 1)
        near, far = tenors[lower], tenors[lower + 1]
        theta_near, theta_far = variance[lower, day] * near, variance[lower + 1, day] * far
        between = theta_near + (theta_far - theta_near) * (tau - near) / (far - near)
        return np.where(
            tau <= tenors[0],
            variance[0, day] * tau,
            np.where(tau >= tenors[last], variance[last, day] * tau, between),
        )
