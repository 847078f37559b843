"""An existing Dask cluster as the executor of a study.

The workers need the same version of this program, and nothing else of this machine: each history goes to them once,
as the bytes of its stored file, and is kept there for as long as the study runs.
"""

from __future__ import annotations

import asyncio
import re
import sys
from collections.abc import Callable, Iterator
from concurrent.futures import BrokenExecutor, Executor, Future
from contextlib import contextmanager, suppress
from importlib.metadata import version
from pathlib import Path
from typing import Any

from .errors import StudyError
from .jobs import Context, Job, forget, history_file, run_job

#: Seconds in which the scheduler must answer.
PATIENCE = 5.0
ADDRESS = re.compile(r"[a-z]+://\S+:\d{1,5}")
#: Batches handed out for each thread of the cluster, and in any case.
IN_HAND, LEAST_IN_HAND = 2, 16
#: Of these the workers must have the version that is here: with another, the last digits may differ.
SAME_VERSIONS = ("rollband", "numpy", "scipy")


class ClusterLost(BrokenExecutor):
    """No worker of the cluster lives through a job."""


@contextmanager
def cluster(address: str) -> Iterator[Cluster]:
    """The cluster of a scheduler, to be given to a run as its executor.

    Parameters
    ----------
    address : str
        Such as ``tcp://10.0.0.5:8786``.

    Raises
    ------
    StudyError
        If ``distributed`` is not installed here, the scheduler does not answer, it has no workers, or they do not
        have this program in the same version.
    """
    try:
        from distributed import Client
        from distributed.comm import connect
    except ImportError:
        raise StudyError(
            "for --scheduler the package distributed is needed: install rollband[cluster], or leave --scheduler out"
        ) from None
    if not ADDRESS.fullmatch(address):
        raise StudyError(f"--scheduler is {address!r}; it takes an address such as tcp://10.0.0.5:8786")

    async def knock() -> None:
        comm = await connect(address, timeout=PATIENCE)
        await comm.close()

    try:
        asyncio.run(knock())  # a client that was never connected is hard to be rid of
        client = Client(address, timeout=PATIENCE, set_as_default=False)
    except Exception as error:  # what answers there may be anything
        raise StudyError(
            f"the scheduler {address} cannot be reached within {PATIENCE:g} seconds: {_first_line(error)}; check that "
            "it runs, and its address, such as tcp://10.0.0.5:8786"
        ) from error
    try:
        _check_workers(client, address)
        yield Cluster(client)
    finally:
        with suppress(Exception):  # what is left behind there is forgotten with the next study
            client.run(forget)
        client.close(timeout=PATIENCE)


class Cluster(Executor):
    """Jobs of a study on the workers of a Dask client; a job's history goes along once.

    Parameters
    ----------
    client : distributed.Client
    """

    def __init__(self, client: Any) -> None:
        self.in_hand = max(IN_HAND * sum(client.nthreads().values()), LEAST_IN_HAND)
        self._client = client
        self._executor = client.get_executor(pure=False)
        self._sent: dict[tuple[str, str], Any] = {}

    def submit(self, fn: Callable[..., Any], /, *args: Any, **kwargs: Any) -> Future[Any]:
        """Have a worker call a function; see :meth:`concurrent.futures.Executor.submit`."""
        if fn is run_job and len(args) == 2:
            args = (*args, self._content(*args))
        future: Future[Any] = Future()
        inner: Future[Any] = self._executor.submit(fn, *args, **kwargs)
        inner.add_done_callback(lambda done: _pass_on(done, future))
        future.add_done_callback(lambda done: inner.cancel() if done.cancelled() else None)
        return future

    def _content(self, context: Context, job: Job) -> Any:
        """The history of a job, already on its way to every worker."""
        key = (job.history, job.sha256)
        if key not in self._sent:
            try:
                content = history_file(Path(context.store), job.history).read_bytes()
            except OSError as error:
                raise StudyError(f"history '{job.history}' cannot be read: {error.strerror or error}") from error
            self._sent[key] = self._client.scatter([content], broadcast=True, hash=False)[0]
        return self._sent[key]


def _pass_on(done: Future[Any], future: Future[Any]) -> None:
    """The outcome of one future to another; a worker that was lost too often becomes an error of ours."""
    if done.cancelled():
        if future.cancel():
            future.set_running_or_notify_cancel()
        return
    if not future.set_running_or_notify_cancel():
        return
    error = done.exception()
    if error is None:
        future.set_result(done.result())
    elif type(error).__name__ == "KilledWorker":
        future.set_exception(ClusterLost("the cluster lost its workers time and again (killed, or out of memory)"))
    else:
        future.set_exception(error)


def _check_workers(client: Any, address: str) -> None:
    """Raise StudyError unless there are workers that can do the jobs."""
    if not client.nthreads():
        raise StudyError(f"the scheduler {address} has no workers: start some, with rollband installed")
    here = versions()
    try:
        there: dict[str, dict[str, str]] = client.run(versions)
    except Exception as error:
        raise StudyError(
            f"the workers of {address} cannot run rollband {here['rollband']}: {_first_line(error)}; install it there "
            "in the same version"
        ) from error
    for worker, found in there.items():
        differing = [f"{name} {found[name]} (here {here[name]})" for name in here if found[name] != here[name]]
        if differing:
            raise StudyError(f"worker {worker} has {', '.join(differing)}: install the same there as here")


def versions() -> dict[str, str]:
    """Versions of what makes the numbers."""
    return {"Python": ".".join(map(str, sys.version_info[:2])), **{name: version(name) for name in SAME_VERSIONS}}


def _first_line(error: BaseException) -> str:
    return (str(error).splitlines() or [type(error).__name__])[0]
