"""Worker processes of this machine, as an executor.

Each worker is a fresh interpreter that works off calls from its standard input. It does not see Ctrl-C, holds none of
the parent's files (a lock among them), keeps numpy to one thread, as there is a worker for each core, and ends at once
when the parent is gone, however that came about.
"""

from __future__ import annotations

import json
import os
import pickle
import queue
import signal
import subprocess
import sys
import threading
import traceback
from collections.abc import Callable, Iterator, Sequence
from concurrent.futures import BrokenExecutor, Executor, Future
from contextlib import contextmanager, suppress
from types import FrameType
from typing import Any, ParamSpec, TypeVar

from .errors import StudyError

P = ParamSpec("P")
T = TypeVar("T")
Call = tuple[Callable[..., Any], tuple[Any, ...], dict[str, Any]]

_START = """
import importlib, json, sys
sys.path[:], modules = json.loads(sys.argv[1])
from studies.local_workers import serve
serve(lambda: [importlib.import_module(name) for name in modules])
"""
#: Threads of the libraries that numpy may be built on; what the user has set stays.
_ONE_THREAD = dict.fromkeys(
    ("OPENBLAS_NUM_THREADS", "OMP_NUM_THREADS", "MKL_NUM_THREADS", "VECLIB_MAXIMUM_THREADS", "BLIS_NUM_THREADS"), "1"
)


class WorkerLost(BrokenExecutor):
    """A worker process has ended of itself."""


class LocalWorkers(Executor):
    """So many worker processes, until the ``with`` block is left; then all are ended, whatever they are at.

    Functions, arguments and results are pickled. A worker that is lost takes all calls with it that have not begun.

    Parameters
    ----------
    count : int
    modules : sequence of str
        Imported by each worker before it is up.

    Raises
    ------
    StudyError
        If a process cannot be started.
    """

    def __init__(self, count: int, *, modules: Sequence[str] = ()) -> None:
        self._calls: queue.SimpleQueue[tuple[Future[Any], Call] | None] = queue.SimpleQueue()
        self._lock = threading.Lock()
        self._lost: WorkerLost | None = None
        self._up = threading.Event()
        self._processes: list[subprocess.Popen[bytes]] = []
        self._threads: list[threading.Thread] = []
        try:
            with _interrupts_held():
                for _ in range(count):
                    self._processes.append(_start(modules))
                for process in self._processes:
                    thread = threading.Thread(target=self._attend, args=(process,), daemon=True)
                    self._threads.append(thread)
                    thread.start()
        except OSError as error:
            started = len(self._processes)
            self.shutdown()
            raise StudyError(
                f"worker process {started + 1} of {count} cannot be started: {error.strerror or error}; "
                "give fewer --workers"
            ) from error
        except BaseException:
            self.shutdown()
            raise

    @property
    def up(self) -> bool:
        """Whether a worker has started and takes calls, or is lost."""
        return self._up.is_set()

    @property
    def process_ids(self) -> list[int]:
        """Of the workers."""
        return [process.pid for process in self._processes]

    def submit(self, fn: Callable[P, T], /, *args: P.args, **kwargs: P.kwargs) -> Future[T]:
        """Have a worker call a function; see :meth:`concurrent.futures.Executor.submit`."""
        future: Future[T] = Future()
        with self._lock:
            if self._lost is not None:
                raise self._lost
            self._calls.put((future, (fn, args, kwargs)))
        return future

    def shutdown(self, wait: bool = True, *, cancel_futures: bool = False) -> None:
        """End all workers at once."""
        with _interrupts_held():
            self._lose(WorkerLost("the workers were ended"))
            for process in self._processes:
                process.kill()
            for _ in self._threads:
                self._calls.put(None)
            for thread in self._threads:
                thread.join()
            for process in self._processes:
                process.wait()
                for pipe in (process.stdin, process.stdout):
                    with suppress(OSError):  # what it was still to be told
                        pipe.close()  # type: ignore[union-attr]

    def _attend(self, process: subprocess.Popen[bytes]) -> None:
        """Hand calls to one worker, one after the other (a thread for each)."""
        assert process.stdin is not None
        future: Future[Any] | None = None
        try:
            _receive(process)
            self._up.set()
            while (taken := self._calls.get()) is not None:
                future, call = taken
                if not future.set_running_or_notify_cancel():
                    continue
                try:
                    text = pickle.dumps(call)
                except Exception as error:  # noqa: BLE001  whatever a function or an argument of the caller raises
                    future.set_exception(error)
                    continue
                process.stdin.write(text)
                process.stdin.flush()
                worked, value = _receive(process)
                if worked:
                    future.set_result(value)
                else:
                    future.set_exception(value)
        except (OSError, EOFError, pickle.UnpicklingError):
            code = process.wait()
            lost = WorkerLost(f"a worker process {f'was killed by signal {-code}' if code < 0 else 'ended of itself'}")
            if future is not None and not future.done():
                future.set_exception(lost)
            self._lose(lost)

    def _lose(self, lost: WorkerLost) -> None:
        """Take no more calls, and let those go that nobody has begun."""
        with self._lock:
            self._lost = self._lost or lost
        self._up.set()
        while True:
            try:
                waiting = self._calls.get_nowait()
            except queue.Empty:
                return
            if waiting is not None and waiting[0].set_running_or_notify_cancel():
                waiting[0].set_exception(self._lost)


def _start(modules: Sequence[str]) -> subprocess.Popen[bytes]:
    return subprocess.Popen(
        [sys.executable, "-c", _START, json.dumps([sys.path, list(modules)])],
        stdin=subprocess.PIPE,
        stdout=subprocess.PIPE,
        env=_ONE_THREAD | os.environ,
        # Ctrl-C reaches every process of a terminal's group; only the parent may act on it
        start_new_session=os.name == "posix",
    )


@contextmanager
def _interrupts_held() -> Iterator[None]:
    """Ctrl-C acts after the block, not in it: a process that is half started would be left to nobody."""
    usual = signal.getsignal(signal.SIGINT)
    if threading.current_thread() is not threading.main_thread() or not callable(usual):
        yield
        return
    held: list[tuple[int, FrameType | None]] = []
    signal.signal(signal.SIGINT, lambda number, frame: held.append((number, frame)))
    try:
        yield
    finally:
        signal.signal(signal.SIGINT, usual)
    if held:
        usual(*held[0])


def _receive(process: subprocess.Popen[bytes]) -> Any:
    assert process.stdout is not None
    return pickle.load(process.stdout)


# ---------------------------------------------------------------- in a worker


def serve(prepare: Callable[[], object]) -> None:
    """Work off calls from standard input, once all is prepared; the process ends with it."""
    signal.signal(signal.SIGINT, signal.SIG_IGN)
    answers = os.fdopen(os.dup(1), "wb")
    os.dup2(2, 1)  # what a call prints must not get between the answers
    calls: queue.SimpleQueue[Call] = queue.SimpleQueue()
    threading.Thread(target=_listen, args=(calls,), daemon=True).start()
    prepare()
    pickle.dump("up", answers)
    answers.flush()
    while True:
        function, args, kwargs = calls.get()
        answers.write(_answer(function, args, kwargs))
        answers.flush()


def _listen(calls: queue.SimpleQueue[Call]) -> None:
    """Take in calls while others are worked on, so that the end of the parent is noticed at any time."""
    with os.fdopen(os.dup(0), "rb") as source:
        try:
            while True:
                calls.put(pickle.load(source))
        except EOFError:
            os._exit(0)
        except BaseException:  # noqa: BLE001  the other thread would wait for ever
            traceback.print_exc()
            os._exit(1)


def _answer(function: Callable[..., Any], args: tuple[Any, ...], kwargs: dict[str, Any]) -> bytes:
    """What a call gives or raises, pickled."""
    try:
        return pickle.dumps((True, function(*args, **kwargs)))
    except Exception as error:  # noqa: BLE001  it is raised in the parent
        try:
            pickle.loads(text := pickle.dumps((False, error)))
        except Exception:  # noqa: BLE001  any error at all, of any class
            return pickle.dumps((False, RuntimeError("".join(traceback.format_exception(error)))))
        return text
