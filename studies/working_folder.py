"""Where an unfinished study keeps its batches: beside the results folder, one file a batch, under a lock.

A batch counts as kept when its Parquet file is there; that file is moved into its place last, in one step. So a run
that is killed at any moment has only whole batches to go on with.
"""

from __future__ import annotations

import json
import os
import shutil
from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt
import pyarrow as pa
import pyarrow.parquet as pq

from backtest.analytics.reality_check import Partial

from .errors import ResultsError, StudyError
from .results import json_text

try:
    import fcntl
except ImportError:  # not on every system; two runs into one folder are then on the user
    fcntl = None  # type: ignore[assignment]

Columns = dict[str, npt.NDArray[np.generic]]
PLAN = "plan.json"


class WorkingFolder:
    """The batches of one unfinished study; make one with :func:`working_folder`."""

    def __init__(self, path: Path) -> None:
        self.path = path

    def has(self, number: int) -> bool:
        """Whether a batch is kept."""
        return self._rows(number).is_file()

    def keep(self, number: int, columns: Columns, part: Partial | None) -> None:
        """Keep a batch.

        Raises
        ------
        StudyError
            If the disk refuses; what was kept before is still there.
        """
        try:
            if part is not None:
                _in_one_step(self._part(number), lambda path: _write_arrays(path, _arrays_of(part)))
            _in_one_step(self._rows(number), lambda path: pq.write_table(pa.table(columns), path))
        except OSError as error:
            raise StudyError(
                f"batch {number + 1} cannot be kept in {self.path}: {error.strerror or error}; what was done before is "
                "kept: make room and start again with --resume"
            ) from error

    def read(self, number: int) -> tuple[Columns, Partial | None]:
        """A kept batch."""
        table = pq.read_table(self._rows(number))
        columns: Columns = {name: table.column(name).to_numpy() for name in table.column_names}
        for name, values in columns.items():
            if values.dtype.kind == "M":
                columns[name] = values.astype("datetime64[D]")
        part = None
        if self._part(number).is_file():
            with np.load(self._part(number), allow_pickle=False) as arrays:
                part = _partial_of(arrays)
        return columns, part

    def kept(self) -> int:
        """Number of batches kept."""
        return len(list(self.path.glob("batch-*.parquet")))

    def _rows(self, number: int) -> Path:
        return self.path / f"batch-{number:06d}.parquet"

    def _part(self, number: int) -> Path:
        return self.path / f"batch-{number:06d}.npz"


@contextmanager
def working_folder(out: Path, plan: dict[str, Any], *, resume: bool) -> Iterator[WorkingFolder]:
    """The working folder of the study that is to become ``out``, locked while it is used.

    It is left behind when the run stops early, for ``resume``, and removed by :func:`discard` once ``out`` is written.

    Raises
    ------
    ResultsError
        If another run holds it, or it holds batches that must not be mixed with these.
    """
    path = out.parent / f".{out.name}.unfinished"
    try:
        path.mkdir(parents=True, exist_ok=True)
        handle = (path / "lock").open("w", encoding="utf-8")
    except OSError as error:
        raise ResultsError(f"cannot write beside {out}: {error.strerror or error}") from None
    with handle:
        if fcntl is not None:
            try:
                fcntl.flock(handle, fcntl.LOCK_EX | fcntl.LOCK_NB)
            except OSError:
                raise ResultsError(f"another run is writing {out}: wait for it, or give another --out") from None
        folder = WorkingFolder(path)
        _check_plan(folder, plan, out=out, resume=resume)
        yield folder


def discard(folder: WorkingFolder) -> None:
    """Remove a working folder."""
    shutil.rmtree(folder.path, ignore_errors=True)


def _check_plan(folder: WorkingFolder, plan: dict[str, Any], *, out: Path, resume: bool) -> None:
    file = folder.path / PLAN
    text = json_text(plan)
    there = file.read_text(encoding="utf-8") if file.is_file() else None
    if there is None:
        _in_one_step(file, lambda path: path.write_text(text, encoding="utf-8"))
        return
    if there != text:
        raise ResultsError(
            f"{folder.path} holds an unfinished run that differs in {', '.join(_differences(there, plan))}: delete it, "
            "or give another --out"
        )
    if not resume and folder.kept():
        raise ResultsError(
            f"there is an unfinished run of this study for {out} ({folder.kept()} batches are done): go on with "
            f"--resume, or delete {folder.path}"
        )


def _differences(there: str, plan: dict[str, Any]) -> list[str]:
    """Which parts of two plans differ."""
    try:
        old = json.loads(there)
    except ValueError:
        return ["a plan that cannot be read"]
    new = json.loads(json_text(plan))
    words = {"study": "the study", "inputs": "the histories", "groups": "the days", "batch": "the size of batches"}
    return [words.get(key, key) for key in new if not isinstance(old, dict) or old.get(key) != new[key]]


def _in_one_step(path: Path, write: Any) -> None:
    """Write beside the file, flush, and move it into its place."""
    fresh = path.with_name(f".{path.name}.{os.getpid()}")
    try:
        write(fresh)
        with fresh.open("rb") as file:
            os.fsync(file.fileno())
        fresh.replace(path)
    finally:
        fresh.unlink(missing_ok=True)


#: Stands for no position in a file.
NOBODY = -1


def _arrays_of(part: Partial) -> dict[str, Any]:
    values = {name: getattr(part, name) for name in part.__slots__}
    return {name: np.asarray(NOBODY if value is None else value) for name, value in values.items()}


def _partial_of(arrays: Mapping[str, npt.NDArray[np.generic]]) -> Partial:
    values: dict[str, Any] = {}
    for name in Partial.__slots__:
        value = arrays[name]
        values[name] = value if value.ndim else value.item()
    for name in ("best", "best_studentised"):
        values[name] = None if values[name] == NOBODY else values[name]
    return Partial(**values)


def _write_arrays(path: Path, arrays: dict[str, Any]) -> None:
    with path.open("wb") as file:
        np.savez(file, **arrays)
