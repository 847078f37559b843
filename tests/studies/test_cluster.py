"""A study on a Dask cluster of two worker processes: the same bytes as on this machine alone, and plain refusals.

Rung: identity (files of the results folder, byte for byte); behaviour.
"""

from __future__ import annotations

import os
import signal
import socket
import sys
import threading
import time
from collections.abc import Iterator
from concurrent.futures import Future
from dataclasses import replace
from pathlib import Path
from typing import Any

import pytest

from studies import cluster as cluster_module
from studies import jobs, runner
from studies.cluster import Cluster, ClusterLost, cluster
from studies.errors import StudyError
from studies.runner import plan_study, run_plan
from studies.study_folder import make_study_folder, run_study

from .small_studies import FailsAt, axis, bytes_of, grid, grid_text, store_history, write_tables
from .study_command import Here

distributed = pytest.importorskip("distributed", reason="the package distributed is not installed")

# what dask has to say of its own dependencies is not about us
pytestmark = pytest.mark.filterwarnings("default")

#: 5 puts x 4 calls x 2 windows on each of two histories, in 28 batches of at most 3.
PARTS: dict[str, Any] = {
    "histories": '"one", "two"',
    "head": "resamples = 30",
    "tail": axis("from", "window.from", '["2008-01-01", "2009-06-01"]'),
}
STUDY = grid(5, 4, **PARTS)


@pytest.fixture(autouse=True)
def _small(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("studies.study_folder.write_study", write_tables)
    monkeypatch.setattr(runner, "BATCH", 3)


@pytest.fixture(scope="module")
def store(tmp_path_factory: pytest.TempPathFactory) -> Path:
    folder = tmp_path_factory.mktemp("histories")
    store_history(folder, "one")
    store_history(folder, "two", seed=7)
    return folder


@pytest.fixture
def here(
    tmp_path: Path, store: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> Here:  # fmt: skip
    (tmp_path / "histories").symlink_to(store)
    (tmp_path / "which.toml").write_text(grid_text(2, 2))
    return Here(tmp_path, monkeypatch, capsys)


@pytest.fixture(scope="module")
def local(store: Path, tmp_path_factory: pytest.TempPathFactory) -> dict[str, bytes]:
    out = tmp_path_factory.mktemp("local") / "out"
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr("studies.study_folder.write_study", write_tables)
        make_study_folder(STUDY, out, store=store)
    return bytes_of(out)


@pytest.fixture(scope="module")
def dask_cluster() -> Iterator[Any]:
    with distributed.LocalCluster(
        n_workers=2, threads_per_worker=2, processes=True, dashboard_address=":0", silence_logs=50
    ) as started:
        yield started


@pytest.fixture
def address(dask_cluster: Any) -> str:
    return str(dask_cluster.scheduler_address)


# ---------------------------------------------------------------- in a worker


def count_reads() -> None:
    """Have this process note from which folders it reads histories."""
    if not hasattr(jobs, "_usual_read"):
        jobs._usual_read = jobs.read_history  # type: ignore[attr-defined]
    jobs._reads = []  # type: ignore[attr-defined]

    def read(folder: Path, name: str) -> Any:
        jobs._reads.append((str(folder), name))  # type: ignore[attr-defined]
        return jobs._usual_read(folder, name)  # type: ignore[attr-defined]

    jobs.read_history = read
    jobs._market.cache_clear()


def reads() -> list[tuple[str, str]]:
    return list(jobs._reads)  # type: ignore[attr-defined]


def kept_legs() -> int:
    return len(jobs._PRICED)


# ---------------------------------------------------------------- the same


def test_the_bytes_are_those_of_a_local_run(
    monkeypatch: pytest.MonkeyPatch, tmp_path: Path, store: Path, local: dict[str, bytes], address: str
) -> None:
    scattered = []
    usual = distributed.Client.scatter

    def scatter(self: Any, data: list[bytes], **more: Any) -> Any:
        scattered.append((len(data), more.get("broadcast")))
        return usual(self, data, **more)

    monkeypatch.setattr(distributed.Client, "scatter", scatter)
    with distributed.Client(address, set_as_default=False) as client:
        client.run(count_reads)
        with cluster(address) as executor:
            make_study_folder(STUDY, tmp_path / "out", store=store, executor=executor)
        found = client.run(reads)
        assert client.run(kept_legs) == dict.fromkeys(found, 0), "priced legs are let go of at the end"
    assert bytes_of(tmp_path / "out") == local
    # each history goes out once for 14 batches, and a worker reads it once, from what came along
    assert scattered == [(1, True)] * 2
    assert len(found) == 2
    for read in found.values():
        assert sorted(name for _, name in read) == ["one", "two"]
        assert not any(str(store) in folder for folder, _ in read)


def test_the_executor_of_a_client_does_as_well(
    store: Path, tmp_path: Path, local: dict[str, bytes], address: str
) -> None:
    with distributed.Client(address, set_as_default=False) as client:
        make_study_folder(STUDY, tmp_path / "out", store=store, executor=client.get_executor())
        found = run_study(STUDY, store=store, executor=client.get_executor(pure=False))
    assert bytes_of(tmp_path / "out") == local
    assert len(found.overlays) == 80


def test_by_the_command_line(here: Here, store: Path, local: dict[str, bytes], address: str) -> None:
    here.home.joinpath("which.toml").write_text(grid_text(5, 4, **PARTS))
    ran = here("--scheduler", address, workers=None)
    assert (ran.code, ran.err) == (0, "")
    assert bytes_of(here.home / "out") == local


def test_a_worker_of_the_cluster_is_killed(
    store: Path, tmp_path: Path, local: dict[str, bytes], address: str
) -> None:  # fmt: skip
    """The scheduler gives its batches to another."""
    with cluster(address) as executor:
        victims = list(executor._client.run(os.getpid).values())

        def progress(done: int, of: int) -> None:
            if done > 3 and victims:
                os.kill(victims[0], signal.SIGKILL)
                victims.clear()

        make_study_folder(STUDY, tmp_path / "out", store=store, executor=executor, progress=progress)
    assert not victims
    assert bytes_of(tmp_path / "out") == local


def test_stopped_and_resumed_elsewhere(store: Path, tmp_path: Path, local: dict[str, bytes], address: str) -> None:
    def progress(done: int, of: int) -> None:
        if done > 10:
            raise KeyboardInterrupt

    with pytest.raises(KeyboardInterrupt), cluster(address) as executor:
        make_study_folder(STUDY, tmp_path / "out", store=store, executor=executor, progress=progress)
    kept = len(list((tmp_path / ".out.unfinished").glob("batch-*")))
    assert 4 <= kept < 28
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr("studies.study_folder.write_study", write_tables)
        make_study_folder(
            STUDY, tmp_path / "out", store=store, resume=True, executor=FailsAt(28 - kept, AssertionError())
        )
    assert bytes_of(tmp_path / "out") == local


# ---------------------------------------------------------------- what goes wrong


def test_an_error_in_a_worker_is_that_of_a_local_run(store: Path, address: str) -> None:
    plan = plan_study(grid(2, 2, head="resamples = 0"), store=store)
    bad = replace(plan, inputs=({"history": "one", "sha256": "0" * 64},))
    with cluster(address) as executor, pytest.raises(StudyError, match=r"^history 'one' has changed while the study"):
        run_plan(bad, executor=executor)


def test_a_history_that_is_gone(tmp_path: Path, address: str) -> None:
    store_history(tmp_path, "one")
    plan = plan_study(grid(2, 2, head="resamples = 0"), store=tmp_path)
    (tmp_path / "one.parquet").unlink()
    with cluster(address) as executor, pytest.raises(StudyError, match=r"^history 'one' cannot be read: No such file"):
        run_plan(plan, executor=executor)


def test_without_the_package(monkeypatch: pytest.MonkeyPatch, here: Here) -> None:
    monkeypatch.setitem(sys.modules, "distributed", None)
    ran = here("--scheduler", "tcp://127.0.0.1:8786", workers=None)
    assert (ran.code, ran.out) == (5, "")
    assert ran.err == (
        "rollband: for --scheduler the package distributed is needed: install rollband[cluster], or leave --scheduler "
        "out\n"
    )


def free_port() -> int:
    with socket.socket() as probe:
        probe.bind(("127.0.0.1", 0))
        return int(probe.getsockname()[1])


def test_a_scheduler_that_does_not_answer(monkeypatch: pytest.MonkeyPatch, here: Here) -> None:
    monkeypatch.setattr(cluster_module, "PATIENCE", 1.0)
    address = f"tcp://127.0.0.1:{free_port()}"
    started = time.monotonic()
    ran = here("--scheduler", address, workers=None)
    assert time.monotonic() - started < 15
    assert (ran.code, ran.out) == (5, "")
    assert ran.err.startswith(f"rollband: the scheduler {address} cannot be reached within 1 seconds: ")
    assert ran.err.endswith("; check that it runs, and its address, such as tcp://10.0.0.5:8786\n")
    assert len(ran.err.splitlines()) == 1


def test_something_else_that_answers(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(cluster_module, "PATIENCE", 1.0)
    with socket.create_server(("127.0.0.1", 0)) as server:

        def answer() -> None:
            while True:
                try:
                    connection, _ = server.accept()
                except OSError:
                    return
                connection.sendall(b"HTTP/1.0 400 Bad Request\r\n\r\n")
                connection.close()

        threading.Thread(target=answer, daemon=True).start()
        address = f"tcp://127.0.0.1:{server.getsockname()[1]}"
        with (
            pytest.raises(StudyError, match=f"^the scheduler {address} cannot be reached within 1 sec"),
            cluster(address),
        ):
            raise AssertionError
        server.shutdown(socket.SHUT_RDWR)


@pytest.mark.parametrize("address", ["", "10.0.0.5", "10.0.0.5:8786", "tcp://10.0.0.5", "tcp://:8786", "a b"])
def test_what_is_no_address(address: str) -> None:
    with pytest.raises(StudyError, match=r"^--scheduler is '.*'; it takes an address such as tcp://"), cluster(address):
        raise AssertionError


def test_a_scheduler_without_workers() -> None:
    with (
        distributed.LocalCluster(n_workers=0, processes=True, dashboard_address=":0", silence_logs=50) as empty,
        pytest.raises(StudyError, match=r"^the scheduler .* has no workers: start some, with rollband installed$"),
        cluster(empty.scheduler_address),
    ):
        raise AssertionError


def test_workers_of_another_version(monkeypatch: pytest.MonkeyPatch, address: str) -> None:
    usual = cluster_module.versions()
    monkeypatch.setattr(cluster_module, "version", lambda name: "0.0" if name == "numpy" else usual[name])
    with (
        pytest.raises(
            StudyError, match=rf"^worker tcp://\S+ has numpy {usual['numpy']} \(here 0.0\): install the same"
        ),
        cluster(address),
    ):
        raise AssertionError


def test_workers_without_the_program(monkeypatch: pytest.MonkeyPatch, address: str) -> None:
    def missing() -> None:
        raise ModuleNotFoundError("No module named 'studies'")

    here = cluster_module.versions()
    calls: list[int] = []

    def run(self: Any, function: Any, *args: Any, **more: Any) -> Any:
        calls.append(1)
        return usual(self, missing if len(calls) == 1 else function, *args, **more)

    usual = distributed.Client.run
    monkeypatch.setattr(distributed.Client, "run", run)
    said = rf"^the workers of {address} cannot run rollband {here['rollband']}: No module named 'studies'; install it"
    with pytest.raises(StudyError, match=said), cluster(address):
        raise AssertionError


class Deaf:
    """A client whose executor gives futures that the test settles."""

    def __init__(self) -> None:
        self.given: list[Future[Any]] = []

    def nthreads(self) -> dict[str, int]:
        return {"one": 40}

    def get_executor(self, **more: object) -> Deaf:
        return self

    def submit(self, fn: object, *args: object) -> Future[Any]:
        self.given.append(Future())
        return self.given[-1]


class KilledWorker(Exception):
    """By the name that distributed gives it."""


def test_workers_that_are_lost_time_and_again() -> None:
    client = Deaf()
    executor = Cluster(client)
    assert executor.in_hand == 80
    done, lost, cancelled, given_up = (executor.submit(abs, -1) for _ in range(4))
    client.given[0].set_result(5)
    client.given[1].set_exception(KilledWorker())
    assert cancelled.cancel()
    client.given[3].cancel()
    client.given[3].set_running_or_notify_cancel()
    assert done.result(1) == 5
    with pytest.raises(
        ClusterLost, match=r"^the cluster lost its workers time and again \(killed, or out of memory\)$"
    ):
        lost.result(1)
    assert client.given[2].cancelled()
    assert given_up.cancelled()


def test_a_run_on_lost_workers_says_so(store: Path) -> None:
    plan = plan_study(grid(2, 2, head="resamples = 0"), store=store)
    with pytest.raises(StudyError, match=r"^the cluster lost its workers; run it again, if memory is short with fewer"):
        run_plan(plan, executor=FailsAt(1, ClusterLost("the cluster lost its workers")))
