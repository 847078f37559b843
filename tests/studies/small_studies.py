"""Short invented histories, small studies on them, and executors that do what a test wants of them."""

from __future__ import annotations

import random
import time
from collections.abc import Callable
from concurrent.futures import Executor, Future, ThreadPoolExecutor
from contextlib import suppress
from pathlib import Path
from typing import Any

from data_loaders import load_history
from data_loaders.demo_market import write_demo_market
from data_loaders.store import write_history
from studies.results import MANIFEST, SUMMARY, write_json, write_parquet
from studies.study import Study, parse_study
from studies.study_answer import StudyAnswer
from studies.study_folder import OVERLAYS, PERIODS, study_manifest, study_summary

#: Files of a study's results folder that depend on nothing but the study and its histories.
SAME_BYTES = (OVERLAYS, PERIODS, SUMMARY)

LEGS = """
[[overlay.leg]]
position = "long"
right = "put"
roll = "quarter"
strike = { percent_of_spot = 95 }
[[overlay.leg]]
position = "short"
right = "call"
roll = "month"
strike = { percent_of_spot = 110 }
"""


def store_history(folder: Path, name: str, *, seed: int = 1, first_year: int = 2008, years: int = 3) -> None:
    """Store an invented history under a name."""
    files = write_demo_market(folder / "csv" / name, seed=seed, first_year=first_year, years=years)
    history = load_history(prices=files.prices, vol=files.vol, dividends=files.dividends, rates=files.rates)
    write_history(history, folder, name)


def axis(name: str, fields: str | list[str], values: str) -> str:
    """The lines of an axis."""
    fields = [fields] if isinstance(fields, str) else fields
    return f"[[axis]]\nname = {name!r}\nfields = {fields!r}\nvalues = {values}\n"


def grid_text(puts: int, calls: int, *, histories: str = '"one"', head: str = "", tail: str = "") -> str:
    """The text of a grid of put strikes by call strikes."""
    put = axis("put", "leg.1.strike.percent_of_spot", f"{{ from = {100 - puts}, to = 99, step = 1 }}")
    call = axis("call", "leg.2.strike.percent_of_spot", f"{{ from = 101, to = {100 + calls}, step = 1 }}")
    return f'question = "Which?"\nhistories = [{histories}]\n{head}\n{LEGS}\n{put}{call}{tail}'


def grid(puts: int, calls: int, **more: str) -> Study:
    """A grid of put strikes by call strikes."""
    return parse_study(grid_text(puts, calls, **more))


def bytes_of(folder: Path) -> dict[str, bytes]:
    """The files of a results folder that must always be the same."""
    return {name: (folder / name).read_bytes() for name in SAME_BYTES}


def write_tables(found: StudyAnswer, folder: Path, *, command: str) -> None:
    """In place of ``write_study``: its tables without page and pictures, which take longer than all else."""
    write_parquet(folder / OVERLAYS, found.overlays)
    write_parquet(folder / PERIODS, found.periods)
    write_json(folder / SUMMARY, study_summary(found))
    write_json(folder / MANIFEST, study_manifest(found, command=command))


class Shuffling(Executor):
    """Does calls one by one, each time one of those that wait, drawn from a seed; ``order`` is that of their ends."""

    def __init__(self, seed: int) -> None:
        self._random = random.Random(seed)
        self._waiting: list[tuple[int, Future[Any], Callable[[], Any]]] = []
        self._thread = ThreadPoolExecutor(1)
        self._count = 0
        self.order: list[int] = []

    def submit(self, fn: Callable[..., Any], /, *args: Any, **kwargs: Any) -> Future[Any]:
        future: Future[Any] = Future()
        self._waiting.append((self._count, future, lambda: fn(*args, **kwargs)))
        self._count += 1
        self._thread.submit(self._do_one)
        return future

    def _do_one(self) -> None:
        time.sleep(0.005)  # until others wait as well
        number, future, call = self._waiting.pop(self._random.randrange(len(self._waiting)))
        self.order.append(number)
        future.set_result(call())


class FailsAt(Executor):
    """Does every call at once, and raises at the ``number``-th."""

    def __init__(self, number: int, error: BaseException) -> None:
        self._left, self._error = number, error

    def submit(self, fn: Callable[..., Any], /, *args: Any, **kwargs: Any) -> Future[Any]:
        future: Future[Any] = Future()
        self._left -= 1
        if self._left < 0:
            future.set_exception(self._error)
        else:
            future.set_result(fn(*args, **kwargs))
        return future


def is_running(process: int) -> bool:
    """Whether there is a process of this number that has not ended (one that nobody waited for has)."""
    try:
        return _stat(process)[0] not in "ZX"
    except OSError:
        return False


def children_of(parent: int) -> list[int]:
    """Numbers of the processes that another has started and that have not ended."""
    found = []
    for path in Path("/proc").glob("[0-9]*"):
        with suppress(OSError):
            state, owner = _stat(int(path.name))
            if owner == parent and state not in "ZX":
                found.append(int(path.name))
    return found


def _stat(process: int) -> tuple[str, int]:
    """State and parent of a process."""
    state, parent = Path(f"/proc/{process}/stat").read_text().rpartition(")")[2].split()[:2]
    return state, int(parent)
