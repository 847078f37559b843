"""A study -> its rows: planned once, replayed in batches on any executor, each batch kept as soon as it is there.

Batches are cut by the study alone, and no figure depends on the batch it is worked out in; so the number of workers,
the order in which batches come back, and an interruption with a later ``resume`` change no byte of the answer.
"""

from __future__ import annotations

import os
import signal
from collections.abc import Callable, Iterator, Sequence
from concurrent.futures import FIRST_COMPLETED, Executor, Future, ProcessPoolExecutor, wait
from concurrent.futures.process import BrokenProcessPool
from dataclasses import dataclass
from functools import lru_cache
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt

from backtest import Market
from backtest.analytics.reality_check import Draws, Partial, combine
from backtest.engine.legs import PricedLegs
from backtest.errors import BacktestError
from data_loaders.store import read_history

from .batches import ASKED, Span, common_span, replay_batch
from .errors import StudyError
from .expansion import Expansion, points
from .results import sha256_of
from .study import Study, study_from_table, study_to_table
from .working_folder import WorkingFolder

Columns = dict[str, npt.NDArray[np.generic]]
Progress = Callable[[int, int], None]

#: Overlays of one batch. Part of the plan: a run that is resumed has the same batches.
BATCH = 1_000
#: Batches handed out for each worker: one at work and one to go on with.
IN_HAND = 2


@dataclass(frozen=True, slots=True, kw_only=True)
class Group:
    """Overlays of one history and one window, in the order of the study's rows from ``first_row`` on."""

    history: str
    points: npt.NDArray[np.int32]
    first_row: int
    span: Span


@dataclass(frozen=True, slots=True, kw_only=True)
class StudyPlan:
    """What is to be run.

    ``batches`` are group number and rows of that group.
    """

    study: Study
    store: Path
    groups: tuple[Group, ...]
    batches: tuple[tuple[int, slice], ...]
    inputs: tuple[dict[str, str], ...]

    @property
    def overlays(self) -> int:
        """Rows of the study: overlays times histories."""
        return sum(len(group.points) for group in self.groups)

    def as_table(self) -> dict[str, Any]:
        """Plain values that are the same exactly when the batches and their inputs are."""
        return {
            "study": study_to_table(self.study),
            "inputs": list(self.inputs),
            "batch": BATCH,
            "groups": [
                {
                    "history": group.history,
                    "overlays": len(group.points),
                    "first": str(group.span.first),
                    "last": str(group.span.last),
                    "block_length": group.span.block_length,
                }
                for group in self.groups
            ],
        }


@dataclass(frozen=True, slots=True, kw_only=True)
class Rows:
    """The rows of a whole study: columns in the plan's order, and a partial of the tests for each group."""

    columns: Columns
    partials: tuple[Partial | None, ...]


def plan_study(study: Study, *, store: Path) -> StudyPlan:
    """Expand a study, read its histories, and find the days that its overlays have in common.

    Raises
    ------
    StudyError, LoadError, BacktestError
        If a history is missing, or an overlay cannot be replayed on one.
    """
    expansion = Expansion(study)
    wanted = points(study)
    window_axes = [number for number, axis in enumerate(study.axes) if any(f.startswith("window") for f in axis.fields)]
    windows, window_of = np.unique(wanted[:, window_axes], axis=0, return_inverse=True)
    groups: list[Group] = []
    inputs: list[dict[str, str]] = []
    row = 0
    for history in study.histories:
        market = _market(str(store), history)
        inputs.append({"history": history, "sha256": sha256_of(history_file(store, history))})
        for window in range(len(windows)):
            chosen = wanted[np.ravel(window_of) == window]
            try:
                span = common_span(market, expansion.many(_asked(study, chosen)), comparison=study.comparison)
            except BacktestError as error:
                raise StudyError(f"history '{history}': {error}") from error
            groups.append(Group(history=history, points=chosen, first_row=row, span=span))
            row += len(chosen)
    batches = tuple(
        (number, slice(first, min(first + BATCH, len(group.points))))
        for number, group in enumerate(groups)
        for first in range(0, len(group.points), BATCH)
    )
    return StudyPlan(study=study, store=store, groups=tuple(groups), batches=batches, inputs=tuple(inputs))


def market_of(plan: StudyPlan, group: Group) -> Market:
    """The market of a group, read once."""
    return _market(str(plan.store), group.history)


def history_file(store: Path, name: str) -> Path:
    """The Parquet file of a stored history."""
    return store / f"{name}.parquet"


def run_plan(
    plan: StudyPlan,
    *,
    workers: int = 1,
    executor: Executor | None = None,
    folder: WorkingFolder | None = None,
    progress: Progress = lambda done, of: None,
) -> Rows:
    """Run all batches, those apart that ``folder`` holds already.

    Parameters
    ----------
    workers : int
        Local processes; one works in this process.
    executor : Executor, optional
        Anything that has ``submit`` as :class:`concurrent.futures.Executor`, instead of local processes.
    folder : WorkingFolder, optional
        Where batches are kept; in memory without.
    progress : callable
        Called with the overlays done and to do.

    Raises
    ------
    StudyError
        If a worker is lost; what was done is in ``folder``.
    """
    kept: dict[int, tuple[Columns, Partial | None]] = {}
    missing = list(range(len(plan.batches)))
    if folder is not None:
        missing = [number for number in missing if not folder.has(number)]
    sizes = [rows.stop - rows.start for _, rows in plan.batches]
    done = plan.overlays - sum(sizes[number] for number in missing)
    progress(done, plan.overlays)
    for number, (columns, part) in _worked(plan, missing, workers=workers, executor=executor):
        if folder is None:
            kept[number] = (columns, part)
        else:
            folder.keep(number, columns, part)
        done += sizes[number]
        progress(done, plan.overlays)
    found = [folder.read(number) if folder is not None else kept[number] for number in range(len(plan.batches))]
    partials: list[Partial | None] = []
    for group in range(len(plan.groups)):
        parts = [
            part for (of, _), (_, part) in zip(plan.batches, found, strict=True) if of == group and part is not None
        ]
        partials.append(combine(parts) if parts else None)
    # a group of fewer days has fewer blocks
    names = list(dict.fromkeys(name for columns, _ in found for name in columns))
    return Rows(
        columns={name: _column(name, [columns for columns, _ in found]) for name in names},
        partials=tuple(partials),
    )


def _column(name: str, batches: Sequence[Columns]) -> npt.NDArray[np.generic]:
    return np.concatenate(
        [columns[name] if name in columns else np.full(len(columns["inception"]), np.nan) for columns in batches]
    )


def _worked(
    plan: StudyPlan, numbers: Sequence[int], *, workers: int, executor: Executor | None
) -> Iterator[tuple[int, tuple[Columns, Partial | None]]]:
    """Batches as they are done, never more than a few in hand."""
    context = _Context(study=_frozen(study_to_table(plan.study)), store=str(plan.store))

    def job(number: int) -> _Job:
        group, rows = plan.batches[number]
        of = plan.groups[group]
        return _Job(
            history=of.history, span=of.span, points=of.points[rows], first_number=of.first_row + int(rows.start)
        )

    if executor is None and workers == 1:
        for number in numbers:
            yield number, run_batch(context, job(number))
        return
    own = executor is None
    pool = executor or ProcessPoolExecutor(max_workers=workers, initializer=_leave_interrupts_to_the_parent)
    most = IN_HAND * max(workers, 1)
    waiting = list(reversed(numbers))
    running: dict[Future[tuple[Columns, Partial | None]], int] = {}
    try:
        while waiting or running:
            while waiting and len(running) < most:
                number = waiting.pop()
                running[pool.submit(run_batch, context, job(number))] = number
            finished, _ = wait(running, return_when=FIRST_COMPLETED)
            for future in finished:
                yield running.pop(future), future.result()
    except BrokenProcessPool:
        raise StudyError(
            "a worker was lost (killed, or out of memory): start again with --resume, and perhaps with fewer --workers"
        ) from None
    finally:
        for future in running:
            future.cancel()
        if own:
            pool.shutdown(wait=True, cancel_futures=True)


# ---------------------------------------------------------------- in a worker


@dataclass(frozen=True, slots=True)
class _Context:
    """What all batches of a study share; small, and the same object of a worker's caches."""

    study: str
    store: str


@dataclass(frozen=True, slots=True, kw_only=True)
class _Job:
    history: str
    span: Span
    points: npt.NDArray[np.int32]
    first_number: int


def run_batch(context: _Context, job: _Job) -> tuple[Columns, Partial | None]:
    """Replay one batch; histories, priced legs and draws are read or made once in each worker."""
    expansion = _expansion(context.study)
    study = expansion.study
    market = _market(context.store, job.history)
    draws = None
    if study.resamples > 0 and job.span.days > 1:
        draws = _draws(job.span.days, job.span.block_length, study.resamples, study.seed)
    return replay_batch(
        market,
        expansion.many(job.points),
        job.span,
        comparison=study.comparison,
        draws=draws,
        first_number=job.first_number,
        priced=_priced(context.store, job.history),
    )


@lru_cache(maxsize=2)
def _expansion(frozen: str) -> Expansion:
    import json

    return Expansion(study_from_table(json.loads(frozen)))


@lru_cache(maxsize=4)
def _market(store: str, name: str) -> Market:
    return Market.from_frame(read_history(Path(store), name).frame)


@lru_cache(maxsize=1)
def _priced(store: str, name: str) -> PricedLegs:
    return PricedLegs(_market(store, name))


@lru_cache(maxsize=2)
def _draws(days: int, block_length: float, resamples: int, seed: int) -> Draws:
    return Draws(days, block_length, resamples, seed)


def _leave_interrupts_to_the_parent() -> None:
    """Ctrl-C reaches every process of a terminal; only the parent may act on it."""
    signal.signal(signal.SIGINT, signal.SIG_IGN)


def _frozen(table: dict[str, Any]) -> str:
    import json

    return json.dumps(table, sort_keys=True)


def default_workers() -> int:
    """As many as there are cores for this process."""
    return len(os.sched_getaffinity(0)) if hasattr(os, "sched_getaffinity") else os.cpu_count() or 1


def _asked(study: Study, chosen: npt.NDArray[np.int32]) -> npt.NDArray[np.int32]:
    """An overlay for each roll calendar and volatility of the study, and a few more spread over all."""
    deciding = [
        number
        for number, axis in enumerate(study.axes)
        if any(f.startswith("volatility") or f.rsplit(".", 1)[-1] in DECIDES_THE_FIRST_DAY for f in axis.fields)
    ]
    _, one_each = np.unique(chosen[:, deciding], axis=0, return_index=True)
    spread = np.linspace(0, len(chosen) - 1, min(ASKED, len(chosen))).astype(np.intp)
    return chosen[np.unique(np.concatenate([one_each, spread]))]


#: Fields of a leg on which the first day of an overlay depends: that of its longest roll.
DECIDES_THE_FIRST_DAY = ("roll", "phase", "shift_days", "ratio")
