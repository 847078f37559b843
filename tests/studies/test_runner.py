"""However a study is cut into batches and whoever does them in whatever order: the same bytes.

Rung: identity (files of the results folder, byte for byte).
"""

from __future__ import annotations

from collections.abc import Callable
from concurrent.futures import Executor, ThreadPoolExecutor
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from studies import jobs, runner
from studies.errors import StudyError
from studies.local_workers import LocalWorkers
from studies.runner import plan_study, run_plan
from studies.study import Study
from studies.study_folder import make_study_folder, run_study

from .small_studies import FailsAt, Shuffling, axis, bytes_of, grid, is_running, store_history, write_tables

WINDOWS = axis("from", "window.from", '["2008-01-01", "2009-06-01"]')
#: 5 puts x 4 calls x 2 windows on each of two histories: four groups of 20 rows.
STUDY = grid(5, 4, histories='"one", "two"', head="resamples = 30", tail=WINDOWS)


@pytest.fixture(autouse=True)
def _tables_only(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("studies.study_folder.write_study", write_tables)


@pytest.fixture(scope="module")
def store(tmp_path_factory: pytest.TempPathFactory) -> Path:
    folder = tmp_path_factory.mktemp("histories")
    store_history(folder, "one")
    store_history(folder, "two", seed=7)
    return folder


@pytest.fixture(scope="module")
def usual(store: Path, tmp_path_factory: pytest.TempPathFactory) -> dict[str, bytes]:
    """The bytes of a run in one process and in whole batches."""
    out = tmp_path_factory.mktemp("usual") / "out"
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr("studies.study_folder.write_study", write_tables)
        make_study_folder(STUDY, out, store=store)
    return bytes_of(out)


def made(out: Path, store: Path, **more: Any) -> dict[str, bytes]:
    make_study_folder(STUDY, out, store=store, **more)
    assert not list(out.parent.glob(".*")), "nothing is left beside the results"
    return bytes_of(out)


@pytest.mark.parametrize("size", [1, 7, 19, 20])
def test_the_size_of_batches_does_not_matter(
    monkeypatch: pytest.MonkeyPatch, tmp_path: Path, store: Path, usual: dict[str, bytes], size: int
) -> None:
    monkeypatch.setattr(runner, "BATCH", size)
    assert len(plan_study(STUDY, store=store).batches) == 4 * -(-20 // size)
    assert made(tmp_path / "out", store) == usual


def count_calls(monkeypatch: pytest.MonkeyPatch) -> list[int]:
    """A list that grows with each call of a local worker: by the number of workers."""
    handed_out: list[int] = []
    usual_submit = LocalWorkers.submit

    def submit(self: LocalWorkers, *args: Any) -> Any:
        handed_out.append(len(self.process_ids))
        return usual_submit(self, *args)

    monkeypatch.setattr(LocalWorkers, "submit", submit)
    return handed_out


@pytest.mark.parametrize("workers", [2, 3])
def test_the_number_of_processes_does_not_matter(
    monkeypatch: pytest.MonkeyPatch, tmp_path: Path, store: Path, usual: dict[str, bytes], workers: int
) -> None:
    handed_out = count_calls(monkeypatch)
    monkeypatch.setattr(LocalWorkers, "up", True)  # so that this process does not do all of it meanwhile
    monkeypatch.setattr(runner, "WORTH_STARTING", -1.0)
    monkeypatch.setattr(runner, "BATCH", 6)
    assert made(tmp_path / "out", store, workers=workers) == usual
    # the first of 16 batches is done here, to see how long one takes
    assert handed_out == [workers] * 15


def test_this_process_goes_on_until_the_workers_are_up(
    monkeypatch: pytest.MonkeyPatch, tmp_path: Path, store: Path, usual: dict[str, bytes]
) -> None:
    handed_out = count_calls(monkeypatch)
    monkeypatch.setattr(LocalWorkers, "up", False)
    monkeypatch.setattr(runner, "WORTH_STARTING", -1.0)
    monkeypatch.setattr(runner, "BATCH", 6)
    assert made(tmp_path / "out", store, workers=2) == usual
    # two batches in hand for each worker, and this process does the other 11
    assert handed_out == [2] * 4


def test_no_worker_outlives_a_run_that_fails(monkeypatch: pytest.MonkeyPatch, store: Path) -> None:
    """Not even while its error is looked at."""
    started: list[int] = []

    def progress(done: int, of: int) -> None:
        if done > 12:
            started.extend(pools[0].process_ids)
            raise OSError("whatever the caller's own code raises")

    def start(*args: Any, **more: Any) -> LocalWorkers:
        pools.append(LocalWorkers(*args, **more))
        return pools[0]

    pools: list[LocalWorkers] = []
    monkeypatch.setattr(runner, "LocalWorkers", start)
    monkeypatch.setattr(runner, "WORTH_STARTING", -1.0)
    monkeypatch.setattr(runner, "BATCH", 6)
    with pytest.raises(OSError, match="whatever") as raised:
        run_study(STUDY, store=store, workers=2, progress=progress)
    assert raised.tb is not None
    assert len(started) == 2
    assert [process for process in started if is_running(process)] == []


def test_no_process_is_started_for_what_is_soon_done(monkeypatch: pytest.MonkeyPatch, store: Path) -> None:
    def refuse(count: int, **more: Any) -> None:
        raise AssertionError(f"{count} processes were started")

    monkeypatch.setattr(runner, "LocalWorkers", refuse)
    monkeypatch.setattr(runner, "BATCH", 30)
    assert len(run_study(STUDY, store=store, workers=8).overlays) == len(run_study(STUDY, store=store).overlays) > 30


@pytest.mark.parametrize(
    "make", [lambda: ThreadPoolExecutor(1), lambda: ThreadPoolExecutor(4), lambda: Shuffling(1), lambda: Shuffling(2)],
    ids=["one-thread", "threads", "shuffled", "shuffled-otherwise"],
)  # fmt: skip
def test_the_order_in_which_batches_come_back_does_not_matter(
    monkeypatch: pytest.MonkeyPatch, tmp_path: Path, store: Path, usual: dict[str, bytes], make: Callable[[], Executor]
) -> None:
    monkeypatch.setattr(runner, "BATCH", 3)
    executor = make()
    assert made(tmp_path / "out", store, executor=executor) == usual
    if isinstance(executor, Shuffling):
        assert sorted(executor.order) == list(range(4 * 7))
        assert executor.order != sorted(executor.order)


@pytest.mark.parametrize("after", range(8))
def test_stopped_after_any_batch_and_resumed(
    monkeypatch: pytest.MonkeyPatch, tmp_path: Path, store: Path, usual: dict[str, bytes], after: int
) -> None:
    monkeypatch.setattr(runner, "BATCH", 10)
    monkeypatch.setattr(runner, "IN_HAND_ELSEWHERE", 1)  # one after the other
    out = tmp_path / "out"
    with pytest.raises(KeyboardInterrupt):
        make_study_folder(STUDY, out, store=store, executor=FailsAt(after, KeyboardInterrupt()))
    assert not out.exists()
    assert len(list((tmp_path / ".out.unfinished").glob("batch-*"))) == after
    told: list[tuple[int, int]] = []
    executor = FailsAt(8 - after, AssertionError("a batch is done twice"))
    resumed = made(out, store, executor=executor, resume=True, progress=lambda done, of: told.append((done, of)))
    assert resumed == usual
    assert told == [(10 * number, 80) for number in range(after, 9)]


@pytest.mark.parametrize("size", [400, 50, 7])
def test_a_grid_prices_each_leg_once(
    monkeypatch: pytest.MonkeyPatch, tmp_path: Path, store: Path, size: int
) -> None:  # fmt: skip
    priced: list[int] = []
    monkeypatch.setattr(runner, "BATCH", size)
    monkeypatch.setattr(runner, "forget", lambda: priced.extend(legs.priced for _, legs in jobs._PRICED.values()))
    jobs.forget()
    rows = run_plan(plan_study(grid(20, 20, head="resamples = 0"), store=store))
    assert len(rows.columns["sharpe"]) == 400
    assert priced == [20 + 20]
    jobs.forget()
    assert not jobs._PRICED


def test_a_grid_on_a_history_and_a_window_has_the_rows_that_it_has_alone(store: Path) -> None:
    """Four groups: two windows on two histories; each is the study of that history and window alone."""
    found = run_study(STUDY, store=store)
    assert [(group.history, str(group.first)[:4]) for group in found.groups] == [
        ("one", "2008"), ("one", "2009"), ("two", "2008"), ("two", "2009"),
    ]  # fmt: skip
    assert found.overlays["number"].tolist() == list(range(80))
    for group in found.groups:
        mine = found.overlays.iloc[group.rows]
        (start,) = set(mine["from"])
        alone: Study = grid(
            5,
            4,
            histories=f'"{group.history}"',
            head="resamples = 30",
            tail=axis("from", "window.from", f'["{start}"]'),
        )
        other = run_study(alone, store=store)
        for name in mine.columns.drop("number"):
            np.testing.assert_array_equal(mine[name].to_numpy(), other.overlays[name].to_numpy(), err_msg=name)
        for name in ("white", "spa_lower", "spa_consistent", "spa_upper", "block_length"):
            assert getattr(group.check, name) == getattr(other.groups[0].check, name)
        assert group.deflated == other.groups[0].deflated
    assert len(found.overlays.drop(columns=["number", "history"]).drop_duplicates()) == 80


def test_settings_and_figures_stand_in_the_row_of_their_overlay(store: Path) -> None:
    """A put nearer to the spot costs more, as does a call nearer to it bring: by the settings of the rows."""
    found = run_study(grid(5, 4, head="resamples = 0"), store=store).overlays
    assert found[["put", "call"]].values.tolist() == [[p, c] for p in range(95, 100) for c in range(101, 105)]
    again = run_study(
        grid(5, 4, head='resamples = 0\nleave_out = ["put < 97", "call == 102"]'), store=store
    ).overlays  # fmt: skip
    chosen = found[(found["put"] >= 97) & (found["call"] != 102)]
    assert again["number"].tolist() == list(range(9))
    for name in found.columns.drop("number"):
        np.testing.assert_array_equal(again[name].to_numpy(), chosen[name].to_numpy(), err_msg=name)


def test_a_history_that_is_stored_anew_is_read_anew(tmp_path: Path) -> None:
    study = grid(2, 2, head="resamples = 0")
    store_history(tmp_path, "one", seed=1)
    first = run_study(study, store=tmp_path).overlays["annual_return"].tolist()
    store_history(tmp_path, "one", seed=7)
    second = run_study(study, store=tmp_path).overlays["annual_return"].tolist()
    store_history(tmp_path, "seven", seed=7)
    other = run_study(grid(2, 2, histories='"seven"', head="resamples = 0"), store=tmp_path)
    assert first != second
    assert second == other.overlays["annual_return"].tolist()


def test_a_history_that_changes_under_a_run_stops_it(tmp_path: Path) -> None:
    store_history(tmp_path, "one", seed=1)
    plan = plan_study(grid(2, 2, head="resamples = 0"), store=tmp_path)
    store_history(tmp_path, "one", seed=7)
    jobs._market.cache_clear()  # as in a worker that has just started
    with pytest.raises(StudyError, match=r"^history 'one' has changed while the study was at work: start again$"):
        run_plan(plan)


def test_a_history_can_come_along_as_bytes(store: Path) -> None:
    plan = plan_study(grid(2, 2, head="resamples = 5"), store=store)

    class Carrier(FailsAt):
        def submit(self, fn: Any, /, context: Any, job: Any) -> Any:  # type: ignore[override]
            jobs._market.cache_clear()
            jobs.forget()
            nowhere = jobs.Context(study=context.study, store=str(store / "is not here"))
            content = (store / f"{job.history}.parquet").read_bytes()
            return super().submit(fn, nowhere, job, content)

    found = run_plan(plan, executor=Carrier(99, AssertionError()))
    np.testing.assert_array_equal(found.columns["sharpe"], run_plan(plan).columns["sharpe"])
