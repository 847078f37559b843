"""A study -> its rows: planned once, replayed in batches on any executor, each batch kept as soon as it is there.

Batches are cut by the study alone, and no figure depends on the batch it is worked out in; so the number of workers,
the order in which batches come back, and an interruption with a later ``resume`` change no byte of the answer.
"""

from __future__ import annotations

import os
import re
from collections import deque
from collections.abc import Callable, Generator, Iterable, Iterator, Sequence
from concurrent.futures import FIRST_COMPLETED, BrokenExecutor, CancelledError, Executor, Future, wait
from contextlib import closing
from dataclasses import dataclass
from importlib.metadata import version
from pathlib import Path
from time import perf_counter
from typing import Any

import numpy as np
import numpy.typing as npt

from backtest import Market
from backtest.analytics.reality_check import Partial, combine
from backtest.errors import BacktestError
from data_loaders.store import read_history

from .axes import SETTINGS
from .batches import ASKED, SPAN, Span, columns_of, common_span
from .errors import StudyError
from .expansion import Expansion, points
from .jobs import Columns, Context, Job, forget, frozen, history_file, market_at, of_history, run_job
from .local_workers import LocalWorkers
from .results import sha256_of
from .study import Study, study_to_table
from .working_folder import WorkingFolder

__all__ = [
    "SETTINGS", "Group", "Progress", "Rows", "StudyPlan", "default_workers", "history_file", "plan_study", "run_plan",
]  # fmt: skip

Progress = Callable[[int, int], None]
Batch = tuple[Columns, Partial | None]

#: Overlays of one batch. Part of the plan: a run that is resumed has the same batches.
BATCH = 2_500
#: Batches handed out for each worker: one at work and one to go on with.
IN_HAND = 2
#: Batches handed out to an executor of which we do not know how many workers it has.
IN_HAND_ELSEWHERE = 64
#: Seconds of work left for which it is worth while to start worker processes, which takes about one.
WORTH_STARTING = 3.0
#: Fields on which the first day of an overlay may depend, legs without their number; a ratio by whether it is zero.
DECIDES_THE_FIRST_DAY = (
    "decide_lag", "volatility.source", "volatility.window", "volatility.markup", "volatility.estimator",
    "volatility.half_life", "volatility.markup_points", "leg.roll", "leg.roll_day", "leg.every", "leg.phase",
    "leg.shift_days", "leg.close_before", "leg.ratio", "leg.ladder", "leg.stagger", "leg.reference",
)  # fmt: skip

_LEG = re.compile(r"^leg\.\d+\.")


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
            "program": f"rollband {version('rollband')}, numpy {np.__version__}",
            "study": study_to_table(self.study),
            "inputs": list(self.inputs),
            "batch": BATCH,
            # before, each overlay began on its own first roll day
            "days": "in common",
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
    LoadError, BacktestError, StudyError
        If a history is missing, or an overlay cannot be replayed on one (the message names the history).
    """
    expansion = Expansion(study)
    wanted = points(study)
    window_axes = [number for number, axis in enumerate(study.axes) if any(f.startswith("window") for f in axis.fields)]
    windows, window_of = np.unique(wanted[:, window_axes], axis=0, return_inverse=True)
    groups: list[Group] = []
    inputs: list[dict[str, str]] = []
    row = 0
    for history in study.histories:
        try:
            sha256 = sha256_of(history_file(store, history))
        except OSError:
            read_history(store, history)  # which says what is wrong with it
            raise
        market = market_at(store, history, sha256)
        inputs.append({"history": history, "sha256": sha256})
        for window in range(len(windows)):
            chosen = wanted[np.ravel(window_of) == window]
            try:
                span = common_span(market, expansion.many(_asked(study, chosen)), comparison=study.comparison)
            except BacktestError as error:
                raise of_history(error, history) from error
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
    return market_at(plan.store, group.history, _sums(plan)[group.history])


def _sums(plan: StudyPlan) -> dict[str, str]:
    """The sum of each history's file."""
    return {entry["history"]: entry["sha256"] for entry in plan.inputs}


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
        Local processes; one works in this process, and so does a study that is soon done.
    executor : Executor, optional
        Anything that has ``submit`` as :class:`concurrent.futures.Executor`, instead of local processes. Its workers
        read the histories from the store, unless it brings them (as :mod:`studies.cluster` does).
    folder : WorkingFolder, optional
        Where batches are kept; in memory alone without.
    progress : callable
        Called with the overlays done and to do.

    Raises
    ------
    StudyError
        If a worker is lost or memory runs out, or ``folder`` cannot be written; what was done is in ``folder``.
    """
    collected = _Collected(plan)
    missing = []
    for number in range(len(plan.batches)):
        kept = folder.read(number) if folder is not None else None
        if kept is None or not collected.fits(number, kept):
            missing.append(number)
        else:
            collected.add(number, kept)
    progress(collected.done, plan.overlays)
    try:
        # closed before an error goes up, so that no worker outlives the run
        with closing(_worked(plan, missing, workers=workers, executor=executor)) as worked:
            for number, batch in worked:
                if folder is not None:
                    folder.keep(number, *batch)
                collected.add(number, batch)
                progress(collected.done, plan.overlays)
    except (BrokenExecutor, CancelledError, MemoryError) as error:
        raise StudyError(_lost(error, kept=folder is not None)) from error
    finally:
        forget()
    return collected.rows()


def _lost(error: BaseException, *, kept: bool) -> str:
    """What to say of a run that lost a worker."""
    said = str(error)
    if isinstance(error, MemoryError):
        said = "memory ran out"
    elif isinstance(error, CancelledError):
        said = "the executor gave a batch up" + (f" ({said})" if said else "")
    again = "what was done is kept: go on with --resume" if kept else "run it again"
    few = "" if isinstance(error, CancelledError) else ", if memory is short with fewer --workers"
    return f"{said or 'a worker was lost'}; {again}{few}"


class _Collected:
    """The whole study's columns, filled as batches come, in whatever order."""

    def __init__(self, plan: StudyPlan) -> None:
        self.done = 0
        self._plan = plan
        self._partials: list[Partial | None] = [None] * len(plan.groups)
        # a group of fewer days has fewer blocks
        most = max((group.span for group in plan.groups), key=lambda span: len(span.edges))
        self._columns: Columns = {name: np.full(plan.overlays, np.nan) for name in columns_of(most)}
        self._columns |= {name: np.empty(plan.overlays, dtype="datetime64[D]") for name in SPAN}

    def fits(self, number: int, batch: Batch) -> bool:
        """Whether this can be the batch of that number, for one that comes from a disk."""
        columns, part = batch
        group, rows = self._plan.batches[number]
        span, count = self._plan.groups[group].span, rows.stop - rows.start
        if set(columns) != set(columns_of(span)) or any(len(values) != count for values in columns.values()):
            return False
        if self._plan.study.resamples == 0 or span.days < 2:
            return part is None
        return part is not None and part.tried == count

    def add(self, number: int, batch: Batch) -> None:
        """Put a batch in its place."""
        columns, part = batch
        group, rows = self._plan.batches[number]
        first = self._plan.groups[group].first_row
        for name, values in columns.items():
            self._columns[name][first + rows.start : first + rows.stop] = values
        if part is not None:
            before = self._partials[group]
            self._partials[group] = combine([part] if before is None else [before, part])
        self.done += rows.stop - rows.start

    def rows(self) -> Rows:
        return Rows(columns=self._columns, partials=tuple(self._partials))


def _worked(
    plan: StudyPlan, numbers: Sequence[int], *, workers: int, executor: Executor | None
) -> Generator[tuple[int, Batch], None, None]:
    """Batches as they are done."""
    context, sums = Context(study=frozen(study_to_table(plan.study)), store=str(plan.store)), _sums(plan)
    waiting = deque(numbers)

    def next_job() -> tuple[int, Job]:
        number = waiting.popleft()
        group, rows = plan.batches[number]
        of = plan.groups[group]
        first_number = of.first_row + int(rows.start)
        return number, Job(
            history=of.history, sha256=sums[of.history], span=of.span, points=of.points[rows], first_number=first_number
        )

    def jobs() -> Iterator[tuple[int, Job]]:
        while waiting:
            yield next_job()

    if executor is not None:
        yield from _handed_out(context, jobs(), executor, most=getattr(executor, "in_hand", IN_HAND_ELSEWHERE))
        return
    started = perf_counter()
    for done, (number, job) in enumerate(jobs(), start=1):
        yield number, run_job(context, job)
        if workers > 1 and (perf_counter() - started) / done * len(waiting) > WORTH_STARTING:
            break
    if not waiting:
        return
    with LocalWorkers(min(workers, len(waiting)), modules=[run_job.__module__]) as pool:
        yield from _handed_out(context, jobs(), pool, most=IN_HAND * workers, until=lambda: pool.up)


def _handed_out(
    context: Context,
    jobs: Iterable[tuple[int, Job]],
    executor: Executor,
    *,
    most: int,
    until: Callable[[], bool] = lambda: True,
) -> Iterator[tuple[int, Batch]]:
    """Batches as an executor has done them, never more than ``most`` in hand; done here ``until`` it is up.

    What is done comes before an error.
    """
    waiting = iter(jobs)
    running: dict[Future[Batch], int] = {}
    try:
        while True:
            while len(running) < most and (taken := next(waiting, None)) is not None:
                number, job = taken
                running[executor.submit(run_job, context, job)] = number
            if not until() and (taken := next(waiting, None)) is not None:
                number, job = taken
                yield number, run_job(context, job)
                continue
            if not running:
                return
            finished, _ = wait(running, return_when=FIRST_COMPLETED)
            for future in sorted(finished, key=lambda future: future.cancelled() or future.exception() is not None):
                yield running.pop(future), future.result()
    except BrokenExecutor:
        for future, number in list(running.items()):
            if future.done() and not future.cancelled() and future.exception() is None:
                yield number, future.result()
        raise
    finally:
        for future in running:
            future.cancel()


def default_workers() -> int:
    """As many as there are cores for this process."""
    return len(os.sched_getaffinity(0)) if hasattr(os, "sched_getaffinity") else os.cpu_count() or 1


def _asked(study: Study, chosen: npt.NDArray[np.int32]) -> npt.NDArray[np.int32]:
    """An overlay for each first day that the study may have, and a few more spread over all."""
    deciding = []
    for number, axis in enumerate(study.axes):
        fields = {_LEG.sub("leg.", field) for field in axis.fields} & {*DECIDES_THE_FIRST_DAY}
        if fields:
            column = chosen[:, number]
            if fields == {"leg.ratio"}:
                column = np.array([value == 0 for value in axis.values])[column]
            deciding.append(column)
    _, one_each = np.unique(np.column_stack([np.zeros(len(chosen)), *deciding]), axis=0, return_index=True)
    spread = np.linspace(0, len(chosen) - 1, min(ASKED, len(chosen))).astype(np.intp)
    return chosen[np.unique(np.concatenate([one_each, spread]))]
