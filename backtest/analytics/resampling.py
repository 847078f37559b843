"""Is it luck: the overlay and what it is compared with, drawn again and again from the same days (C13).

Everything is drawn together: a drawn day brings the overlay's return, every comparison's and the cash rate of that
day. The figures of a resampled history are those of C11, except that it has no calendar:

- annual return: 252 days are a year (under one year it is the total return, not annualised);
- the tail is the mean of the worst 5% of its returns over 21 days, laid end to end, not over calendar months.

The sample's own value beside each interval is computed in the same way.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from ..errors import BacktestError
from ..volatility.realised import TRADING_DAYS
from .block_length import optimal_block_length
from .performance import TAIL, annual_volatility, regression_beta, sharpe_ratio
from .sharpe_tests import SharpeDifference, ledoit_wolf_sharpe_difference

Array = npt.NDArray[np.float64]

#: Fewer days than this and nothing is resampled.
FEWEST_DAYS = 60
#: Trading days of the stretches whose worst 5% make the tail: about a month.
TAIL_DAYS = 21
#: Resamples drawn from one child generator and worked out together; few, so that they stay in the processor's cache.
#: Changing it changes every drawn number, as a seed does.
RESAMPLES_PER_STREAM = 10
#: A difference no larger than this is rounding, and counts as a tie.
TIE = 1e-12

#: Figures of every path, in the order of the arrays below, and those only the overlay has.
_SHARED = ("annual_return", "sharpe", "max_drawdown", "shortfall_21_day")
_OWN = ("volatility", "beta", "alpha")


@dataclass(frozen=True, slots=True, kw_only=True)
class Interval:
    """A figure of the sample and its percentile interval; all NaN where it cannot be had."""

    value: float
    low: float
    high: float


@dataclass(frozen=True, slots=True, kw_only=True)
class OverlayInference:
    """The overlay's own figures; decimals. ``beta`` and the annual ``alpha`` are to the hold."""

    annual_return: Interval
    volatility: Interval
    sharpe: Interval
    max_drawdown: Interval
    shortfall_21_day: Interval
    beta: Interval
    alpha: Interval


@dataclass(frozen=True, slots=True, kw_only=True)
class ComparisonInference:
    """Overlay less one comparison, decimals; a positive difference speaks for the overlay in all four figures.

    ``max_drawdown`` and ``shortfall_21_day`` are negative when losses, so their difference is positive when the
    overlay lost less. The probabilities are shares of the resamples; a tie does not count. ``sharpe_test`` is the test
    of Ledoit and Wolf (2008) on the same days. ``reason`` says why figures are NaN, None when none is.
    """

    annual_return: Interval
    sharpe: Interval
    max_drawdown: Interval
    shortfall_21_day: Interval
    probability_higher_return: float
    probability_higher_sharpe: float
    probability_shallower: float
    sharpe_test: SharpeDifference
    reason: str | None = None


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Inference:
    """What :func:`paired_bootstrap` found.

    ``block_length`` is the mean length drawn, in days; ``block_lengths`` what each series asked for (empty when the
    caller set the length). ``reason`` says why nothing could be resampled, or why figures of the overlay itself are
    NaN; None when neither is the case.
    """

    overlay: OverlayInference
    comparisons: Mapping[str, ComparisonInference]
    level: float
    resamples: int
    days: int
    block_length: float
    block_lengths: Mapping[str, float]
    reason: str | None = None


def stationary_indices(days: int, block_length: float, count: int, rng: np.random.Generator) -> npt.NDArray[np.int32]:
    """Days drawn by the stationary bootstrap, shape ``(count, days)``, from 0 to ``days - 1``.

    Politis and Romano (1994), "The stationary bootstrap", Journal of the American Statistical Association 89(428):
    every day goes on from the one before (after the last day comes the first), or, with probability
    ``1 / block_length``, starts anew on any day.

    Parameters
    ----------
    block_length : float
        Mean days in a row, at least 1 (which is the plain bootstrap of single days).

    Examples
    --------
    >>> (np.diff(stationary_indices(5, 1e9, 2, np.random.default_rng(0))) % 5).tolist()
    [[1, 1, 1, 1], [1, 1, 1, 1]]
    """
    restart = rng.random((count, days)) < 1.0 / block_length
    restart[:, 0] = True
    begin = np.flatnonzero(restart)  # positions in the rows laid end to end; a run never goes over a row's end
    length = np.diff(begin, append=count * days)
    first = rng.integers(days, size=begin.size, dtype=np.int32)
    offset = np.repeat(first - (begin % days).astype(np.int32), length).reshape(count, days)
    drawn = np.add(offset, np.arange(days), dtype=np.int32)
    drawn[drawn >= days] -= days
    return drawn


def paired_bootstrap(
    *,
    overlay_returns: Array,
    hold_excess: Array,
    cash: Array,
    comparisons: Mapping[str, Array],
    rng: np.random.Generator,
    resamples: int = 10_000,
    block_length: float | None = None,
    level: float = 0.90,
    workers: int = 2,
    progress: Callable[[int, int], None] | None = None,
) -> Inference:
    """Intervals for the overlay and for its differences to the comparisons, all from the same draws.

    Parameters
    ----------
    overlay_returns, cash : ndarray, shape (day,)
        Daily simple returns of the overlay, and of cash on the same days.
    hold_excess : ndarray, shape (day,)
        The hold's returns less cash, for the overlay's beta and alpha.
    comparisons : mapping of str to ndarray, shape (day,)
        Daily simple returns of each comparison. Which of them there are changes no draw, only, through
        ``block_lengths``, how long the runs are.
    rng : numpy.random.Generator
        Must know its seed (``numpy.random.default_rng(seed)`` does): child generators are spawned from it, one per
        ``RESAMPLES_PER_STREAM`` resamples. So the numbers depend on the seed, not on ``workers``, and more
        resamples are the same ones and some more.
    block_length : float, optional
        Mean days in a row, at least 1. Default: the longest that :func:`optimal_block_length` gives for the returns
        and for the squared returns (about their mean) of the overlay, of each comparison and of each difference.
        The squares are there because spells of high volatility last far longer than any autocorrelation of returns,
        and drawdown and tail depend on them; so do hedges, whose delta carries over from day to day.
    level : float
        Coverage of the percentile intervals.
    workers : int
        Threads. Each needs about ``60 * RESAMPLES_PER_STREAM`` bytes per day of history (3 MB for 20 years), whatever
        ``resamples`` is; the drawn figures take 32 bytes per resample and series.
    progress : callable, optional
        Called in this thread with the number of resamples done and to do.

    Raises
    ------
    BacktestError
        Shapes differ, or a setting is out of its range. Data that are too short, missing or flat give NaN and a
        reason instead.
    """
    names = tuple(comparisons)
    paths = np.stack(
        [np.asarray(r, dtype=np.float64) for r in _same_shape(overlay_returns, hold_excess, cash, comparisons)]
    )
    market, cash = paths[1], paths[2]
    returns = np.delete(paths, (1, 2), axis=0)
    _check_settings(resamples=resamples, block_length=block_length, level=level, workers=workers)
    usable: npt.NDArray[np.bool_] = np.all(np.isfinite(returns) & (returns > -1.0), axis=-1)
    days = cash.size
    reason = _why_nothing(days, returns[0], market, cash)
    lengths: dict[str, float] = {}
    drawn = np.full((1 + len(names), len(_SHARED), resamples), np.nan)
    own_drawn = np.full((len(_OWN), resamples), np.nan)
    value, own_value = drawn[..., :1].copy(), own_drawn[:, :1].copy()
    if reason is None:
        if block_length is None:
            lengths = _wanted_lengths(returns[usable], ["overlay", *(n for n, u in zip(names, usable[1:]) if u)])
            block_length = max([1.0, *(x for x in lengths.values() if np.isfinite(x))])
        sample = _Sample(returns[usable], cash=cash, market=market)
        value[usable], own_value = sample.figures(np.arange(days)[np.newaxis])
        done = 0
        for figures, own in _resampled(sample, block_length, resamples, rng, workers):
            span = slice(done, done + own.shape[-1])
            drawn[usable, :, span], own_drawn[:, span] = figures, own
            done = span.stop
            if progress is not None:
                progress(done, resamples)
        if not np.isfinite(own_drawn).all() or not np.isfinite(drawn[0]).all():
            reason = "the overlay's or the hold's excess return does not vary, in the history or in a resample of it"
    with np.errstate(invalid="ignore"):  # infinite less infinite: the test below says that returns are missing
        excess = returns - cash
    return Inference(
        overlay=_overlay_inference(value[0, :, 0], drawn[0], own_value[:, 0], own_drawn, level),
        comparisons={
            name: _comparison_inference(
                value[0, :, 0] - value[row, :, 0],
                drawn[0] - drawn[row],
                level=level,
                sharpe_test=ledoit_wolf_sharpe_difference(excess[0], excess[row], level=level),
                reason=reason if np.isnan(drawn[0]).any() else _why_not_compared(returns[row], drawn[row]),
            )
            for row, name in enumerate(names, start=1)
        },
        level=level,
        resamples=resamples,
        days=days,
        block_length=float("nan") if block_length is None else float(block_length),
        block_lengths=lengths,
        reason=reason,
    )


def independent_payoffs(settled: Array) -> int:
    """How many times a put paid, counting rolls in a row that paid as one.

    Two payoffs are told apart only by a roll without one between them: a slide that pays in three quarters running
    is one event, and the sample knows no more about such events than their number.

    Parameters
    ----------
    settled : ndarray, shape (roll,)
        Payoff of each roll in order of time; above zero when it paid. NaN (not settled yet) is left out.

    Examples
    --------
    >>> independent_payoffs(np.array([0.0, 3.0, 1.0, 0.0, 0.0, 2.0, np.nan]))
    2
    """
    settled = np.asarray(settled, dtype=np.float64)
    paid = settled[~np.isnan(settled)] > 0.0
    return int(np.count_nonzero(paid[1:] & ~paid[:-1])) + int(paid[:1].sum())


class _Sample:
    """The returns that are drawn from, logarithms taken once; row 0 is the overlay's."""

    def __init__(self, returns: Array, *, cash: Array, market: Array) -> None:
        self.returns, self.market = returns, market
        self.excess, self.logs = returns - cash, np.log1p(returns)

    def figures(self, drawn: npt.NDArray[np.integer]) -> tuple[Array, Array]:
        """Figures of the histories drawn: shapes ``(path, shared figure, resample)`` and ``(own figure, resample)``."""
        position = drawn.astype(np.intp)
        shared = np.empty((len(self.returns), len(_SHARED), len(position)))
        for row, (excess, logs) in enumerate(zip(self.excess, self.logs)):
            # every position is in range; "clip" spares numpy the check
            shared[row, 0], shared[row, 2], shared[row, 3] = _path_figures(np.take(logs, position, mode="clip"))
            taken = np.take(excess, position, mode="clip")
            shared[row, 1] = sharpe_ratio(taken)
            if row == 0:
                own_excess = taken
        market = np.take(self.market, position, mode="clip")
        beta = np.array([regression_beta(x, m) for x, m in zip(own_excess, market)])
        alpha = TRADING_DAYS * (np.mean(own_excess, axis=-1) - beta * np.mean(market, axis=-1))
        volatility = annual_volatility(np.take(self.returns[0], position, mode="clip"))
        return shared, np.stack([volatility, beta, alpha])


def _path_figures(logs: Array) -> tuple[Array, Array, Array]:
    """Annual return, maximum drawdown and 21-day tail of each row of daily log returns."""
    count, days = logs.shape
    path = np.zeros((count, days + 1))
    np.cumsum(logs, axis=-1, out=path[:, 1:])
    annual = np.expm1(path[:, -1] * (TRADING_DAYS / max(days, TRADING_DAYS)))
    stretches = np.diff(path[:, ::TAIL_DAYS], axis=-1)
    worst = int(np.ceil(TAIL * stretches.shape[-1] - 1e-9))
    tail = np.mean(np.expm1(np.partition(stretches, worst - 1, axis=-1)[:, :worst]), axis=-1)
    peak = np.maximum.accumulate(path, axis=-1)
    return annual, np.expm1(np.min(np.subtract(path, peak, out=peak), axis=-1)), tail


def _resampled(
    sample: _Sample, block_length: float, resamples: int, rng: np.random.Generator, workers: int
) -> Iterator[tuple[Array, Array]]:
    """Figures of every stream, in order."""
    counts = [RESAMPLES_PER_STREAM] * (resamples // RESAMPLES_PER_STREAM)
    if resamples % RESAMPLES_PER_STREAM:
        counts.append(resamples % RESAMPLES_PER_STREAM)
    days = sample.logs.shape[-1]

    def one(count: int, child: np.random.Generator) -> tuple[Array, Array]:
        # a whole stream is drawn, even where the last resamples of it are not wanted
        return sample.figures(stationary_indices(days, block_length, RESAMPLES_PER_STREAM, child)[:count])

    # threads, not processes: numpy lets go of the interpreter lock in all that takes time here
    with ThreadPoolExecutor(max_workers=workers) as pool:
        yield from pool.map(one, counts, rng.spawn(len(counts)))


def _wanted_lengths(returns: Array, names: list[str]) -> dict[str, float]:
    """Block length that each series asks for, by its name."""
    series = dict(zip(names, returns))
    series |= {f"overlay less {name}": returns[0] - other for name, other in zip(names[1:], returns[1:])}
    lengths = {}
    for name, values in series.items():
        lengths[name] = optimal_block_length(values)
        lengths[f"{name}, squared"] = optimal_block_length((values - np.mean(values)) ** 2)
    return lengths


def _interval(value: float, drawn: Array, level: float) -> Interval:
    if not np.isfinite(value) or not np.isfinite(drawn).all():
        return Interval(value=float("nan"), low=float("nan"), high=float("nan"))
    low, high = np.quantile(drawn, [0.5 - level / 2.0, 0.5 + level / 2.0])
    return Interval(value=float(value), low=float(low), high=float(high))


def _overlay_inference(
    value: Array, drawn: Array, own_value: Array, own_drawn: Array, level: float
) -> OverlayInference:
    figures = zip((*_SHARED, *_OWN), (*value, *own_value), (*drawn, *own_drawn))
    return OverlayInference(**{name: _interval(v, d, level) for name, v, d in figures})


def _comparison_inference(
    value: Array, difference: Array, *, level: float, sharpe_test: SharpeDifference, reason: str | None
) -> ComparisonInference:
    higher = [float(np.mean(d > TIE)) if np.isfinite(d).all() else float("nan") for d in difference]
    return ComparisonInference(
        **{name: _interval(v, d, level) for name, v, d in zip(_SHARED, value, difference)},
        probability_higher_return=higher[0],
        probability_higher_sharpe=higher[1],
        probability_shallower=higher[2],
        sharpe_test=sharpe_test,
        reason=reason,
    )


def _why_nothing(days: int, overlay: Array, market: Array, cash: Array) -> str | None:
    if days < FEWEST_DAYS:
        counted = "1 day of returns is" if days == 1 else f"{days} days of returns are"
        return f"{counted} too few to resample; at least {FEWEST_DAYS} are needed"
    if not (np.isfinite(overlay).all() and np.isfinite(market).all() and np.isfinite(cash).all()):
        return "some returns of the overlay, of the hold or of cash are missing"
    if (overlay <= -1.0).any():
        return "the overlay loses everything on one day, so its growth cannot be chained"
    return None


def _why_not_compared(returns: Array, drawn: Array) -> str | None:
    if not np.isfinite(returns).all():
        return "some returns of the comparison are missing"
    if (returns <= -1.0).any():
        return "the comparison loses everything on one day, so its growth cannot be chained"
    if not np.isfinite(drawn).all():
        return "the comparison's excess return does not vary, so it has no Sharpe ratio"
    return None


def _same_shape(overlay: Array, market: Array, cash: Array, comparisons: Mapping[str, Array]) -> list[Array]:
    named = [("overlay_returns", overlay), ("hold_excess", market), ("cash", cash), *comparisons.items()]
    days = np.shape(overlay)
    for name, values in named:
        if np.ndim(values) != 1 or np.shape(values) != days:
            raise BacktestError(
                f"{name} has shape {np.shape(values)}; all series must be one-dimensional and of the length of "
                f"overlay_returns, {days}. Pass returns of the same days."
            )
    return [values for _, values in named]


def _check_settings(*, resamples: int, block_length: float | None, level: float, workers: int) -> None:
    if resamples < 1:
        raise BacktestError(f"resamples is {resamples}; it must be at least 1 (10000 is usual).")
    if block_length is not None and not 1.0 <= block_length < np.inf:
        raise BacktestError(f"block_length is {block_length}; it must be at least 1 day, or None to have it chosen.")
    if not 0.0 < level < 1.0:
        raise BacktestError(f"level is {level}; it must lie between 0 and 1 (0.90 is usual).")
    if workers < 1:
        raise BacktestError(f"workers is {workers}; it must be at least 1.")
