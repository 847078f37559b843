"""Worker processes: what they give and raise, how they are lost, and that none is left.

Rung: behaviour. Calls are of the standard library, so that the workers need nothing of these tests.
"""

from __future__ import annotations

import math
import os
import signal
import sys
import threading
import time
from collections.abc import Iterator
from concurrent.futures import wait

import numpy as np
import pytest

from studies.errors import StudyError
from studies.local_workers import LocalWorkers, WorkerLost

from .small_studies import is_running


@pytest.fixture(scope="module")
def pool() -> Iterator[LocalWorkers]:
    with LocalWorkers(1) as workers:
        yield workers


def test_a_call_gives_its_result_in_another_process(pool: LocalWorkers) -> None:
    assert pool.submit(os.getpid).result(60) == pool.process_ids[0] != os.getpid()
    assert pool.up
    assert pool.submit(int, "11", base=2).result(60) == 3
    large = np.arange(1_000_000)  # more than a pipe holds, both ways
    np.testing.assert_array_equal(pool.submit(np.negative, large).result(60), -large)


def test_an_error_comes_back_as_it_is(pool: LocalWorkers) -> None:
    with pytest.raises(ValueError, match=r"math domain error|nonnegative"):
        pool.submit(math.sqrt, -1).result(60)
    with pytest.raises(MemoryError):
        pool.submit(bytes, 1 << 60).result(60)
    # an error that cannot be pickled, or not be made again from its pickle
    local = "(_ for _ in ()).throw(type('Odd', (Exception,), {'__reduce__': lambda self: 1 / 0})('what is wrong'))"
    with pytest.raises(RuntimeError, match="what is wrong"):
        pool.submit(eval, local).result(60)
    with pytest.raises(Exception, match="pickle"):
        pool.submit(eval, "lambda: 1").result(60)
    with pytest.raises(Exception, match="pickle"):
        pool.submit(lambda: 1).result(60)
    assert pool.submit(abs, -2).result(60) == 2


def test_what_a_call_prints_is_no_answer(pool: LocalWorkers) -> None:
    assert pool.submit(print, "between the answers", flush=True).result(60) is None
    assert pool.submit(os.write, 1, b"\x80\x04 neither is this").result(60) == 18
    assert pool.submit(abs, -2).result(60) == 2


def test_a_worker_sees_neither_ctrl_c_nor_more_than_one_thread(pool: LocalWorkers) -> None:
    os.kill(pool.process_ids[0], signal.SIGINT)
    assert pool.submit(os.getpid).result(60) == pool.process_ids[0]
    assert pool.submit(os.getpgid, 0).result(60) != os.getpgid(0)
    for name in ("OPENBLAS_NUM_THREADS", "OMP_NUM_THREADS", "MKL_NUM_THREADS"):
        assert pool.submit(os.getenv, name).result(60) == os.environ.get(name, "1")
    assert pool.submit(eval, "__import__('sys').path").result(60) == sys.path


def test_a_call_that_is_cancelled_is_not_made(pool: LocalWorkers) -> None:
    first = pool.submit(time.sleep, 0.3)
    second, third = pool.submit(time.sleep, 60), pool.submit(abs, -3)
    assert second.cancel()
    assert third.result(60) == 3
    assert first.done()


def test_all_calls_are_made_once_by_several_workers() -> None:
    with LocalWorkers(2) as workers:
        calls = [workers.submit(eval, f"({number}, __import__('os').getpid())") for number in range(200)]
        found = [call.result(60) for call in calls]
        assert [number for number, _ in found] == list(range(200))
        assert {process for _, process in found} <= set(workers.process_ids)


def test_a_worker_that_is_lost_takes_the_calls_with_it() -> None:
    threads = threading.active_count()
    with LocalWorkers(2) as workers:
        wait([workers.submit(time.sleep, 0.1) for _ in range(2)])
        running = [workers.submit(time.sleep, 60) for _ in range(2)]
        while not all(call.running() for call in running):  # each of them taken by a worker
            time.sleep(0.01)
        waiting = [workers.submit(abs, -1) for _ in range(5)]
        os.kill(workers.process_ids[0], signal.SIGKILL)
        for call in waiting:
            with pytest.raises(WorkerLost, match=r"^a worker process was killed by signal 9$"):
                call.result(60)
        assert sum(call.done() for call in running) == 1
        with pytest.raises(WorkerLost, match="signal 9"):
            workers.submit(abs, -1)
        left = workers.process_ids
    assert [process for process in left if is_running(process)] == []
    assert threading.active_count() == threads


def test_a_worker_that_ends_of_itself_is_lost() -> None:
    with LocalWorkers(1) as workers, pytest.raises(WorkerLost, match=r"^a worker process ended of itself$"):
        workers.submit(os._exit, 0).result(60)


def test_a_worker_is_up_when_its_modules_are_there() -> None:
    with LocalWorkers(1, modules=["graphlib"]) as workers:
        assert workers.submit(eval, "'graphlib' in __import__('sys').modules").result(60)
    with LocalWorkers(1, modules=["there_is_none"]) as workers, pytest.raises(WorkerLost, match="ended of itself"):
        workers.submit(abs, -1).result(60)


def test_workers_that_never_come_up_are_lost(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("studies.local_workers._START", "raise SystemExit(3)")
    with LocalWorkers(2) as workers:
        deadline = time.monotonic() + 60
        while not workers.up:
            assert time.monotonic() < deadline
            time.sleep(0.01)
        with pytest.raises(WorkerLost, match=r"^a worker process ended of itself$"):
            workers.submit(abs, -1).result(60)


def test_workers_are_ended_whatever_they_are_at() -> None:
    started = time.monotonic()
    with LocalWorkers(2) as workers:  # some may not even be up yet
        left = workers.process_ids
        call = workers.submit(time.sleep, 600)
    assert [process for process in left if is_running(process)] == []
    with pytest.raises(WorkerLost):
        call.result(60)
    assert time.monotonic() - started < 60


def test_processes_that_cannot_be_started(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(sys, "executable", "/nowhere/python")
    with pytest.raises(StudyError, match=r"^worker process 1 of 3 cannot be started: No such file or directory; give"):
        LocalWorkers(3)
