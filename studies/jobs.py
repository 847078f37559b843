"""One batch of a study as a job that can be done anywhere: in this process, in another, on another machine.

What the jobs of a study share (the history, its priced legs, the days drawn) is read or made once and kept until
:func:`forget`. A history is known by the sha256 of its stored file: a job never runs on another one of that name.
"""

from __future__ import annotations

import json
import tempfile
import threading
from dataclasses import dataclass, field
from functools import lru_cache
from pathlib import Path
from typing import Any
from weakref import WeakKeyDictionary

import numpy as np
import numpy.typing as npt

from backtest import Market
from backtest.analytics.reality_check import Draws, Partial
from backtest.engine.legs import PricedLegs
from backtest.errors import BacktestError
from data_loaders.store import read_history

from .batches import Span, replay_batch
from .errors import StudyError
from .expansion import Expansion
from .results import sha256_of
from .study import study_from_table

Columns = dict[str, npt.NDArray[np.generic]]


@dataclass(frozen=True, slots=True)
class Context:
    """What all jobs of a study share; small, since it goes along with each."""

    study: str
    store: str


@dataclass(frozen=True, slots=True, kw_only=True)
class Job:
    """One batch: overlays of one history and one window.

    Attributes
    ----------
    history, sha256 : str
        Name of the stored history, and the sum of its file.
    span : Span
    points : ndarray of int, shape (overlay, axis)
        Positions of the axis values.
    first_number : int
        Number of the first overlay in the whole study.
    """

    history: str
    sha256: str
    span: Span
    points: npt.NDArray[np.int32]
    first_number: int


@dataclass(frozen=True, slots=True)
class _Source:
    """Where a history is had from: its bytes if they came along, else the store. Told apart by the sum alone."""

    name: str
    sha256: str
    store: str = field(compare=False)
    content: bytes | None = field(compare=False)


def run_job(context: Context, job: Job, content: bytes | None = None) -> tuple[Columns, Partial | None]:
    """Replay one batch.

    Parameters
    ----------
    content : bytes, optional
        The history's stored file, where the store cannot be read from here.

    Raises
    ------
    StudyError
        If the history is not the one that was planned with.
    BacktestError, LoadError
        If an overlay cannot be replayed on it, or it cannot be read; the message names it.
    """
    expansion = _expansion(context.study)
    study = expansion.study
    priced = _priced(_Source(job.history, job.sha256, context.store, content))
    draws = None
    if study.resamples > 0 and job.span.days > 1:
        draws = _draws(job.span.days, job.span.block_length, study.resamples, study.seed)
    try:
        return replay_batch(
            priced.market,
            expansion.many(job.points),
            job.span,
            comparison=study.comparison,
            draws=draws,
            first_number=job.first_number,
            priced=priced,
        )
    except BacktestError as error:
        raise of_history(error, job.history) from error


def market_at(store: Path, name: str, sha256: str) -> Market:
    """A stored history as a market.

    Raises
    ------
    StudyError
        If its file is not the one with this sum.
    LoadError, MarketError
        If it cannot be used.
    """
    return _market(_Source(name, sha256, str(store), None))


def of_history(error: BacktestError, name: str) -> BacktestError:
    """The same error, its message with the name of the history."""
    return type(error)(f"history '{name}': {error}")


def forget() -> None:
    """Let go of priced legs and draws, which are large; the next job makes them again."""
    with _LOCK:
        _PRICED.clear()
        _draws.cache_clear()


@lru_cache(maxsize=2)
def _expansion(study: str) -> Expansion:
    return Expansion(study_from_table(json.loads(study)))


@lru_cache(maxsize=1)
def _draws(days: int, block_length: float, resamples: int, seed: int) -> Draws:
    return Draws(days, block_length, resamples, seed)


_LOCK = threading.Lock()
#: Legs are priced by each thread for itself: what one adds to must not be read by another in the middle of it.
_PRICED: WeakKeyDictionary[threading.Thread, tuple[_Source, PricedLegs]] = WeakKeyDictionary()


def _priced(source: _Source) -> PricedLegs:
    thread = threading.current_thread()
    with _LOCK:
        known = _PRICED.get(thread)
        if known is None or known[0] != source:
            known = (source, PricedLegs(_market(source)))
            _PRICED[thread] = known
    return known[1]


@lru_cache(maxsize=4)
def _market(source: _Source) -> Market:
    if source.content is not None:
        with tempfile.TemporaryDirectory(prefix="rollband-") as folder:
            Path(folder, f"{source.name}.parquet").write_bytes(source.content)
            return _market_in(Path(folder), source)
    return _market_in(Path(source.store), source)


def _market_in(store: Path, source: _Source) -> Market:
    frame = read_history(store, source.name).frame
    # after it was read: a file that is replaced meanwhile is noticed
    if sha256_of(history_file(store, source.name)) != source.sha256:
        raise StudyError(f"history '{source.name}' has changed while the study was at work: start again")
    try:
        return Market.from_frame(frame)
    except BacktestError as error:
        raise of_history(error, source.name) from error


def history_file(store: Path, name: str) -> Path:
    """The Parquet file of a stored history."""
    return store / f"{name}.parquet"


def frozen(table: dict[str, Any]) -> str:
    """Plain values as text that is equal for equal values."""
    return json.dumps(table, sort_keys=True)
