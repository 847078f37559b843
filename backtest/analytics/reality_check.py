"""Is the best of many overlays more than the luck of having tried so many (White 2000, Hansen 2005; C13).

Each overlay is judged by its daily differences, its return less that of its own comparison (the mix of the same beta).
Under the null hypothesis no overlay is better than its comparison on average. The days of all overlays are drawn
together by the stationary bootstrap, and the best of the sample is held against the best of every resample.

- White (2000), "A reality check for data snooping", Econometrica 68(5): the highest mean; every overlay's resampled
  mean less its mean in the sample.
- Hansen (2005), "A test for superior predictive ability", Journal of Business & Economic Statistics 23(4): the highest
  mean in units of its own standard error, or nil if that is higher. Three p-values differ in the overlays that are
  worse than their comparisons: *upper* takes all as just as good, *consistent* those that are not far worse (less
  than ``sqrt(2 log log days)`` standard errors), *lower* none. So lower <= consistent <= upper. The variance is his,
  a sum of autocovariances with the weights that the stationary bootstrap implies.

Batches of overlays are worked out one by one (:func:`check_batch`) and put together (:func:`combine`): all that is kept
of one is a maximum per resample. The result is the same to the last bit however the overlays are cut into batches, in
whatever order, by however many threads: the matrix product of counts and differences is exact (:func:`_fixed_point`),
and everything else is done overlay by overlay.
"""

from __future__ import annotations

import functools
import math
from collections.abc import Iterable
from dataclasses import dataclass, field

import numpy as np
import numpy.typing as npt

from ..errors import BacktestError
from .resampling import FEWEST_DAYS, RESAMPLES_PER_STREAM, TIE, stationary_indices

Array = npt.NDArray[np.float64]

#: Overlays worked out at once, whatever the size of a batch; bounds the memory and changes no number.
OVERLAYS_AT_ONCE = 256
#: Differences whose (long-run) deviation is no larger than this a day do not vary: the rest is rounding.
NO_DEVIATION = 1e-10
#: Bits of the fixed-point numbers; one less than a float has.
_BITS = 52


@dataclass(frozen=True, eq=False)
class Draws:
    """The days drawn in every resample, the same for all batches.

    They are the days that :func:`~backtest.analytics.resampling.paired_bootstrap` draws from ``default_rng(seed)``
    with this block length; more resamples are the same ones and some more.

    Parameters
    ----------
    days : int
    block_length : float
        Mean days in a row, from 1 to ``days``. It has to be settled before the first batch.
    resamples : int
    seed : int

    Attributes
    ----------
    weights : ndarray, shape (resample, day)
        How often each day is drawn. 8 bytes each: 20 MB for 500 resamples of 20 years.

    Raises
    ------
    BacktestError
        A setting is out of its range.

    Examples
    --------
    >>> Draws(days=5, block_length=2.0, resamples=3, seed=0).weights.sum(axis=1).tolist()
    [5.0, 5.0, 5.0]
    """

    days: int
    block_length: float
    resamples: int
    seed: int
    weights: Array = field(init=False, repr=False)
    spectrum: Array = field(init=False, repr=False)

    def __post_init__(self) -> None:
        if self.days < 1:
            raise BacktestError(f"days is {self.days}; there must be at least 1 day to draw from.")
        if not 1.0 <= self.block_length <= self.days:
            raise BacktestError(
                f"block_length is {self.block_length}; it must be at least 1 day and at most the {self.days} there are."
            )
        if self.resamples < 1:
            raise BacktestError(f"resamples is {self.resamples}; it must be at least 1 (1000 is usual).")
        if self.seed < 0:
            raise BacktestError(f"seed is {self.seed}; it must be a whole number from 0.")
        object.__setattr__(self, "weights", _counts(self))
        object.__setattr__(self, "spectrum", _variance_spectrum(self.days, self.block_length))


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Partial:
    """What is kept of a batch of overlays, or of several.

    Positions are the caller's, None where no overlay counts; of equals the lowest position is the best. Means are a
    day's; statistics are means in units of their standard errors. The four arrays hold the maximum over the overlays
    in each resample (minus infinity where none counts): ``white`` of means, the others of statistics, not yet held
    against nil. ``missing`` overlays have a difference that is not a number and are in no maximum; ``constant`` ones
    do not vary and are in ``white`` only. Both are among the ``tried``.
    """

    days: int
    block_length: float
    resamples: int
    seed: int
    tried: int
    missing: int
    constant: int
    best: int | None
    best_mean: float
    best_studentised: int | None
    best_statistic: float
    white: Array
    lower: Array
    consistent: Array
    upper: Array


@dataclass(frozen=True, slots=True, kw_only=True)
class RealityCheck:
    """P-values of the best of all that were tried; small ones speak for skill, 0 means under ``1 / resamples``.

    ``best`` has the highest mean daily difference (White), ``best_studentised`` the highest mean in units of its
    standard error (Hansen). ``missing`` and ``constant`` as in :class:`Partial`. ``reason`` says why p-values are NaN,
    None when none is.
    """

    white: float
    spa_lower: float
    spa_consistent: float
    spa_upper: float
    best: int | None
    best_mean: float
    best_studentised: int | None
    best_statistic: float
    tried: int
    missing: int
    constant: int
    days: int
    resamples: int
    block_length: float
    reason: str | None = None

    @property
    def luck(self) -> float:
        """Chance that the search alone brings a best as good: the larger of White's and Hansen's consistent p-value.

        In units of its own standard error an option that has not paid yet looks like skill: a call sold far out earns
        a little every month, with next to no deviation, until the month that pays. In simulated fair markets Hansen's
        test, which studentises, then takes luck for skill in far more than its level; White's, which does not, holds
        it (``tests/studies/test_null_market.py``). NaN where Hansen's cannot be had.
        """
        return float(np.fmax(self.white, self.spa_consistent)) if math.isfinite(self.spa_consistent) else math.nan


def check_batch(draws: Draws, differences: Array, positions: npt.ArrayLike) -> Partial:
    """Best and maxima of one batch of overlays.

    Parameters
    ----------
    differences : ndarray, shape (day, overlay)
        Daily return of each overlay less that of its comparison.
    positions : array of int, shape (overlay,)
        By which the best is told, such as its place among all overlays of a study.

    Raises
    ------
    BacktestError
        Shapes do not fit. Missing differences do not raise; such overlays are left out and counted.
    """
    differences = np.asarray(differences, dtype=np.float64)
    if differences.ndim != 2 or len(differences) != draws.days:
        raise BacktestError(
            f"differences has shape {differences.shape}; it must be ({draws.days}, overlays), a row for each day drawn."
        )
    place = np.asarray(positions, dtype=np.int64)
    if place.shape != differences.shape[1:]:
        raise BacktestError(f"positions has shape {place.shape}; give one for each of {differences.shape[1]} overlays.")
    cuts = range(0, place.size, OVERLAYS_AT_ONCE)
    blocks = (slice(start, start + OVERLAYS_AT_ONCE) for start in cuts)
    return combine([_nothing(draws), *(_check_block(draws, differences[:, b].T, place[b]) for b in blocks)])


def combine(partials: Iterable[Partial]) -> Partial:
    """Several batches as one. No overlay may be in two of them.

    Raises
    ------
    BacktestError
        There are none, or they are of different draws.
    """
    found = functools.reduce(_join, partials, None)
    if found is None:
        raise BacktestError("there are no partial results to combine; give at least one.")
    return found


def p_values(partial: Partial) -> RealityCheck:
    """Shares of resamples whose best is at least the best of the sample; a tie speaks against the overlay.

    So Hansen's p-values are 1 where no mean is above nil: his statistic is nil then, and that of no resample is lower.
    """
    values = dict.fromkeys(("white", "spa_lower", "spa_consistent", "spa_upper"), float("nan"))
    reason = _why_nothing(partial)
    if reason is None:
        values["white"] = float(np.mean(partial.white >= partial.best_mean - TIE))
        if partial.best_studentised is None:
            reason = "no overlay differs from its comparison by more than a constant, so there are no standard errors"
        else:
            for name in ("lower", "consistent", "upper"):
                drawn = np.maximum(getattr(partial, name), 0.0)  # which need not be done to the sample too
                values[f"spa_{name}"] = float(np.mean(drawn >= partial.best_statistic - TIE))
    return RealityCheck(
        **values,
        best=partial.best,
        best_mean=partial.best_mean if partial.best is not None else float("nan"),
        best_studentised=partial.best_studentised,
        best_statistic=partial.best_statistic if partial.best_studentised is not None else float("nan"),
        tried=partial.tried,
        missing=partial.missing,
        constant=partial.constant,
        days=partial.days,
        resamples=partial.resamples,
        block_length=partial.block_length,
        reason=reason,
    )


def _counts(draws: Draws) -> Array:
    """How often each day is drawn, stream by stream as in ``paired_bootstrap``."""
    weights = np.empty((draws.resamples, draws.days))
    starts = range(0, draws.resamples, RESAMPLES_PER_STREAM)
    row = np.arange(RESAMPLES_PER_STREAM)[:, np.newaxis] * draws.days
    for start, child in zip(starts, np.random.default_rng(draws.seed).spawn(len(starts))):
        # a whole stream is drawn, even where the last resamples of it are not wanted
        drawn = stationary_indices(draws.days, draws.block_length, RESAMPLES_PER_STREAM, child) + row
        counts = np.bincount(drawn.ravel(), minlength=row.size * draws.days).reshape(row.size, draws.days)
        weights[start : start + row.size] = counts[: draws.resamples - start]
    return weights


def _variance_spectrum(days: int, block_length: float) -> Array:
    """Weights of a series' squared Fourier terms in the variance of ``sqrt(days)`` times its mean.

    Hansen (2005), section 3: ``g(0) + 2 sum k(i) g(i)`` over lags 1 to ``days - 1``, ``g`` the autocovariances and
    ``k(i) = (1 - i/n) (1 - q)^i + i/n (1 - q)^(n - i)``, ``q = 1 / block_length``. As ``k(i) = k(n - i)``, this is a
    sum over the lags of the series laid in a circle, and a circular sum is a plain one of Fourier terms.
    """
    lag = np.arange(days)
    stay = 1.0 - 1.0 / block_length
    kernel = (1.0 - lag / days) * stay**lag + lag / days * stay ** (days - lag)
    weights = np.maximum(np.fft.rfft(kernel).real, 0.0) / days**2
    weights[1 : (days + 1) // 2] *= 2.0  # each stands for itself and its mirror image
    return weights


def _fixed_point(rows: Array) -> tuple[Array, npt.NDArray[np.int64]]:
    """Each row as whole numbers and the exponent of two by which it was multiplied.

    Whole numbers so small that no sum over as many days as there are reaches 2^53: so sums and matrix products with
    counts have no rounding at all, and do not depend on the order in which a library adds. What is cut off is less
    than ``days * 2^-52`` of the largest difference, 1e-12 of it for 20 years.
    """
    exponent = _BITS - np.frexp(np.max(np.abs(rows), axis=-1) * rows.shape[-1])[1].astype(np.int64)
    return np.rint(np.ldexp(rows, exponent[:, np.newaxis])), exponent


def _check_block(draws: Draws, rows: Array, place: npt.NDArray[np.int64]) -> Partial:
    """A few overlays, one in each row."""
    usable = np.isfinite(rows).all(axis=-1)
    tried, place = place.size, place[usable]
    if not place.size:
        return _nothing(draws, tried=tried, missing=tried)
    whole, exponent = _fixed_point(np.ascontiguousarray(rows[usable]))
    mean = np.ldexp(np.sum(whole, axis=-1), -exponent) / draws.days
    drawn = np.ldexp(whole @ draws.weights.T, -exponent[:, np.newaxis]) / draws.days
    series = np.ldexp(whole, -exponent[:, np.newaxis]) - mean[:, np.newaxis]
    terms = np.fft.rfft(series, axis=-1)
    deviation = np.sqrt(np.sum((terms.real**2 + terms.imag**2) * draws.spectrum, axis=-1))
    best = _best(mean, place)
    white = np.max(drawn - mean[:, np.newaxis], axis=0)

    varies = deviation > NO_DEVIATION
    mean, drawn = mean[varies], drawn[varies]
    error = deviation[varies] / math.sqrt(draws.days)
    statistic = mean / error
    far_worse = statistic < -math.sqrt(2.0 * math.log(math.log(max(draws.days, 3))))
    centres = {"lower": np.maximum(mean, 0.0), "consistent": np.where(far_worse, 0.0, mean), "upper": mean}
    best_studentised = _best(statistic, place[varies])
    return Partial(
        **_settings(draws),
        tried=tried,
        missing=tried - place.size,
        constant=place.size - mean.size,
        best=best[0],
        best_mean=best[1],
        best_studentised=best_studentised[0],
        best_statistic=best_studentised[1],
        white=white,
        **{
            name: np.max((drawn - centre[:, np.newaxis]) / error[:, np.newaxis], axis=0, initial=-np.inf)
            for name, centre in centres.items()
        },
    )


def _best(values: Array, place: npt.NDArray[np.int64]) -> tuple[int | None, float]:
    if not values.size:
        return None, -math.inf
    highest = np.max(values)
    return int(np.min(place[values == highest])), float(highest)


def _nothing(draws: Draws, *, tried: int = 0, missing: int = 0) -> Partial:
    none = np.full(draws.resamples, -np.inf)
    return Partial(
        **_settings(draws),
        tried=tried,
        missing=missing,
        constant=0,
        best=None,
        best_mean=-math.inf,
        best_studentised=None,
        best_statistic=-math.inf,
        white=none,
        lower=none,
        consistent=none,
        upper=none,
    )


def _settings(x: Draws | Partial) -> dict:
    return {name: getattr(x, name) for name in ("days", "block_length", "resamples", "seed")}


def _join(a: Partial | None, b: Partial) -> Partial:
    if a is None:
        return b
    if _settings(a) != _settings(b):
        raise BacktestError(
            f"partial results of different draws cannot be combined: {_settings(a)} and {_settings(b)}. "
            "Use the same Draws for every batch."
        )
    best, best_mean = _better((a.best, a.best_mean), (b.best, b.best_mean))
    best_studentised, best_statistic = _better(
        (a.best_studentised, a.best_statistic), (b.best_studentised, b.best_statistic)
    )
    return Partial(
        **_settings(a),
        tried=a.tried + b.tried,
        missing=a.missing + b.missing,
        constant=a.constant + b.constant,
        best=best,
        best_mean=best_mean,
        best_studentised=best_studentised,
        best_statistic=best_statistic,
        **{n: np.maximum(getattr(a, n), getattr(b, n)) for n in ("white", "lower", "consistent", "upper")},
    )


def _better(a: tuple[int | None, float], b: tuple[int | None, float]) -> tuple[int | None, float]:
    """The higher of two; of equals the lower position."""
    if a[0] is None or b[0] is None:
        return a if b[0] is None else b
    return min(a, b, key=lambda x: (-x[1], x[0]))


def _why_nothing(partial: Partial) -> str | None:
    if not partial.tried:
        return "no overlay was tried"
    if partial.best is None:
        return f"each of the {partial.tried} overlays tried has missing differences"
    if partial.days < FEWEST_DAYS:
        return f"{partial.days} days of differences are too few to resample; at least {FEWEST_DAYS} are needed"
    return None
