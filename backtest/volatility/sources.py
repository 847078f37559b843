"""Where the at-the-money volatility comes from, and the surface made of it (C7).

:class:`Volatility` is the agreement (source, quote, smile); ``volatility.on(market)``
binds it to a history. What it gives back answers one question, ``slice(day, tau)``:
the smile on given days for given times to expiry. A quoted surface, which has its own
smile and term structure (``quoted.py``), answers the same question.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Protocol, TypeAlias

import numpy as np
import numpy.typing as npt

from ..arguments import number, one_of, whole_number
from ..errors import MarketError, OverlayError
from ..market import DAYS_IN_YEAR, Market
from .quoted import bind
from .realised import ESTIMATORS, check_windows, realised_vol
from .smile import INDEX, FlatSmile, SmileSlice, SSVISmile
from .surface import SurfaceQuotes
from .term_structure import long_run_variance, mean_reverting

Array = npt.NDArray[np.float64]
Days: TypeAlias = "npt.NDArray[np.intp] | slice"

#: How a vol quote is read: as the at-the-money-forward vol, or as the square root of a fair variance.
QUOTES = ("at the money", "variance swap")
#: What a single vol says of other times to expiry: the same vol, or a return to its own mean.
TERM_STRUCTURES = ("flat", "mean reverting")


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
        """Position of the first day without a volatility from ``first`` to ``last``, or None.

        Raises MarketError where the prices of those days are not what the source takes them for.
        """
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
class ImpliedSurface:
    """The quoted surface of the history, ``Market.surface``: it brings its own smile and term structure."""

    def quoted(self, market: Market) -> SurfaceQuotes:
        """The quotes."""
        if market.surface is None:
            raise MarketError("the history has no quoted surface: load one, or use another source of vol")
        return market.surface


@dataclass(frozen=True, slots=True, kw_only=True)
class RealisedVolatility:
    """Realised volatility of the prices in place of a quote (C7a).

    Parameters
    ----------
    window : int
        Trading days, at least 2.
    markup : float
        Factor on the realised vol, since options are commonly dearer than the past was volatile.
    estimator : {"close", "ewma", "parkinson", "garman-klass", "rogers-satchell", "yang-zhang"}
        From closes, equally or exponentially weighted; from highs and lows; the last three from opens too. See
        ``realised.py`` for what each of them sees of a day.
    half_life : int, optional
        Of the weights in trading days, for ``ewma`` and only for it.
    markup_points : float
        Vol points added after the factor. Where nothing is left of a vol the day has none.

    Raises
    ------
    OverlayError
        For an unknown estimator, a number outside its limits, or a half-life without its estimator.
    """

    window: int = 63
    markup: float = 1.0
    estimator: str = "close"
    half_life: int | None = None
    markup_points: float = 0.0

    def __post_init__(self) -> None:
        whole_number("window", self.window, least=2, most=2520, unit=" trading days")
        number("markup", self.markup, least=0.01, most=10.0, unit=" (a factor)")
        one_of("estimator", self.estimator, tuple(ESTIMATORS))
        number("markup_points", self.markup_points, least=-100.0, most=100.0, unit=" vol points")
        if self.estimator == "ewma":
            whole_number("half_life", self.half_life, least=1, most=2520, unit=" trading days (11 is a common one)")
        elif self.half_life is not None:
            raise OverlayError(
                f'half_life belongs to estimator = "ewma", and the estimator is {self.estimator!r}: leave it out',
                field="half_life",
            )

    def quotes(self, market: Market) -> tuple[npt.NDArray[np.int64], Array]:
        """One row, which serves every tenor; NaN until the window is full."""
        vol = realised_vol(market, self.estimator, self.window, self.half_life)[np.newaxis] * self.markup
        if self.markup_points:
            vol += self.markup_points / 100.0
            vol[vol <= 0.0] = np.nan
        return np.array([30]), vol

    def check(self, market: Market, first: int, last: int) -> None:
        """Raise MarketError unless the bars read for the days from ``first`` to ``last`` are real ones."""
        check_windows(market, self.estimator, self.window, first, last)


#: Where a volatility may come from.
Source: TypeAlias = ImpliedSeries | ImpliedSurface | RealisedVolatility


@dataclass(frozen=True, slots=True, kw_only=True)
class Volatility:
    """How options are priced from what the market holds.

    Parameters
    ----------
    source : ImpliedSeries, ImpliedSurface or RealisedVolatility, optional
        If not given, the vol series of the history where it has any, else realised vol of 63 days. A quoted surface is
        used where it is asked for.
    smile : FlatSmile or SSVISmile
        Index-like unless given (C7); laid on a series or on realised vol, while a surface has its own.
    quote : {"at the money", "variance swap"}
        How an implied series is read. Realised vol is always read at the money.
    put_shift, call_shift : float
        Vol points added to every vol at which puts, or calls, are priced: how far does an answer lean on
        the prices? Where nothing is left of a vol the option has no price, and the wealth becomes NaN.
    term_structure : {"flat", "mean reverting"}
        What a single vol says of other times to expiry: the same vol, or
        ``theta(T)/T = L + (sigma^2 - L) (1 - exp(-kappa T)) / (kappa T)`` (C7). There ``sigma`` is the at-the-money vol
        of the day as priced without it (a variance-swap quote is converted first, at its own tenor; realised vol has
        its markup in it), and ``L`` the mean of its square over the ten years up to the day. ``sigma`` is thus the vol
        of the shortest options: at the tenor of the quote itself the variance already lies nearer to ``L``, by
        ``1 - (1 - exp(-kappa T)) / (kappa T)`` of the gap, 8% at 30 days and the usual kappa. Several tenors have a
        term structure of their own, and are refused.
    kappa : float
        Speed of that return, per year.

    Raises
    ------
    OverlayError
        For a word or a number outside its limits, or a surface together with what it has of its own.
    """

    source: Source | None = None
    smile: FlatSmile | SSVISmile = field(default=INDEX)
    quote: str = "at the money"
    put_shift: float = 0.0
    call_shift: float = 0.0
    term_structure: str = "flat"
    kappa: float = 2.0

    def __post_init__(self) -> None:
        one_of("quote", self.quote, QUOTES)
        number("put_shift", self.put_shift, least=-100.0, most=100.0, unit=" vol points")
        number("call_shift", self.call_shift, least=-100.0, most=100.0, unit=" vol points")
        if not isinstance(self.smile, (FlatSmile, SSVISmile)):
            raise OverlayError(f"smile is {self.smile!r}; give one of the ladder or an SSVISmile", field="smile")
        one_of("term_structure", self.term_structure, TERM_STRUCTURES)
        number("kappa", self.kappa, least=0.01, most=100.0, unit=" a year")
        if isinstance(self.source, ImpliedSurface):
            for name, plain in (("quote", "at the money"), ("term_structure", "flat")):
                if (given := getattr(self, name)) != plain:
                    raise OverlayError(
                        f"{name} is {given!r}, and a quoted surface has a vol for each strike and expiry: leave it out",
                        field=name,
                    )

    def shift(self, right: str) -> float:
        """What is added to the vols of puts or of calls, decimal."""
        return (self.call_shift if right == "call" else self.put_shift) / 100.0

    def source_for(self, market: Market) -> Source:
        """The source that will be used on this market."""
        if self.source is not None:
            return self.source
        return ImpliedSeries() if market.has_vol else RealisedVolatility()

    def on(self, market: Market) -> BoundVolatility:
        """Bind to a market; a variance-swap quote is converted here, each at its own tenor."""
        source = self.source_for(market)
        if isinstance(source, ImpliedSurface):
            return bind(source.quoted(market), market)
        tenor_days, quotes = source.quotes(market)
        tenor_years = tenor_days / DAYS_IN_YEAR
        variance = quotes * quotes
        if self.quote == "variance swap" and isinstance(source, ImpliedSeries):
            tau = tenor_years[:, np.newaxis]
            variance = self.smile.atm_variance_of_swap(variance * tau) / tau
        bars = (source, market) if isinstance(source, RealisedVolatility) else None
        if self.term_structure == "flat":
            return _TenorSurface(tenor_years=tenor_years, variance=variance, smile=self.smile, bars=bars)
        if len(tenor_days) > 1:
            raise MarketError(
                'term_structure = "mean reverting" is for a single vol, and the history has vols of '
                f"{', '.join(map(str, tenor_days.tolist()))} days, which are a term structure: leave it out"
            )
        return _MeanRevertingSurface(
            tenor_years=tenor_years,
            variance=variance,
            smile=self.smile,
            bars=bars,
            long_run=long_run_variance(market.day_number, variance[0]),
            kappa=self.kappa,
        )


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _TenorSurface:
    """At-the-money variances per tenor, a smile laid on top; ``bars`` are to be real where realised vol reads them."""

    tenor_years: Array
    variance: Array  # (tenor, day), annual
    smile: FlatSmile | SSVISmile
    bars: tuple[RealisedVolatility, Market] | None = None

    @property
    def first_day(self) -> int:
        known = np.isfinite(self.variance).all(axis=0)
        return int(np.argmax(known)) if known.any() else self.variance.shape[1]

    def missing(self, first: int, last: int) -> int | None:
        if self.bars is not None:
            source, market = self.bars
            source.check(market, first, last)
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


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _MeanRevertingSurface(_TenorSurface):
    """A single variance that returns to its own long-run mean."""

    long_run: Array  # (day,), annual
    kappa: float

    def _theta(self, day: Days, tau: Array) -> Array:
        return mean_reverting(self.variance[0, day], self.long_run[day], self.kappa, tau)
