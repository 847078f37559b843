"""Where an unfinished study keeps its batches: beside the results folder, one file a batch, under a lock.

A batch is one file, moved into its place in one step: it is kept whole, or not at all. It ends with the sha256 of what
it holds; a file that is not as it was written (a disk that lies, a hand that edits) counts as not there, and the batch
is done again.
"""

from __future__ import annotations

import io
import json
import os
import shutil
from collections.abc import Callable, Iterator, Mapping
from contextlib import contextmanager
from hashlib import sha256
from pathlib import Path
from typing import Any, TextIO

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
PLAN, LOCK = "plan.json", "lock"
_BATCHES = "batch-*.kept"
#: Bytes of a sha256.
DIGEST = 32
#: Keys of a batch's number, and of its part of the tests, in the metadata of its file.
_NUMBER, _PART = b"rollband.batch", b"rollband.part"


class WorkingFolder:
    """The batches of one unfinished study; make one with :func:`working_folder`."""

    def __init__(self, path: Path) -> None:
        self.path = path

    def keep(self, number: int, columns: Columns, part: Partial | None) -> None:
        """Keep a batch.

        Raises
        ------
        StudyError
            If the disk refuses; what was kept before is still there.
        """
        metadata = {_NUMBER: str(number).encode()} | ({} if part is None else {_PART: _bytes_of(part)})
        written = io.BytesIO()
        pq.write_table(pa.table(columns).replace_schema_metadata(metadata), written)
        content = written.getvalue()
        try:
            _in_one_step(self.file(number), lambda path: path.write_bytes(content + sha256(content).digest()))
        except OSError as error:
            raise StudyError(
                f"batch {number + 1} cannot be kept in {self.path}: {_reason(error)}; what was done before is kept: "
                "make room and go on with --resume"
            ) from error

    def read(self, number: int) -> tuple[Columns, Partial | None] | None:
        """A kept batch; None if it is not there or cannot be read."""
        try:
            content = self.file(number).read_bytes()
        except OSError:
            return None
        content, digest = content[:-DIGEST], content[-DIGEST:]
        if sha256(content).digest() != digest:
            return None
        table = pq.read_table(io.BytesIO(content))
        metadata = table.schema.metadata
        if int(metadata[_NUMBER]) != number:
            return None
        columns: Columns = {name: table.column(name).to_numpy() for name in table.column_names}
        part = _partial_of(metadata[_PART]) if _PART in metadata else None
        for name, values in columns.items():
            if values.dtype.kind == "M":
                columns[name] = values.astype("datetime64[D]")
        return columns, part

    def kept(self) -> int:
        """Number of batches kept."""
        return len(list(self.path.glob(_BATCHES)))

    def file(self, number: int) -> Path:
        """Where a batch is kept."""
        return self.path / f"batch-{number:06d}.kept"

    def clear(self) -> None:
        """Remove all batches."""
        for path in self.path.glob(_BATCHES):
            path.unlink(missing_ok=True)


@contextmanager
def working_folder(out: Path, plan: dict[str, Any], *, resume: bool) -> Iterator[WorkingFolder]:
    """The working folder of the study that is to become ``out``, locked while it is used.

    It is left behind when the run stops early, for ``resume``, and removed by :func:`discard` once ``out`` is written.

    Raises
    ------
    ResultsError
        If another run holds it, or it holds batches that must not be mixed with these.
    """
    whole = out.resolve()  # the same folder by another name is the same folder
    path = whole.parent / f".{whole.name}.unfinished"
    try:
        handle = _locked(path)
    except BlockingIOError:
        raise ResultsError(f"another run is writing {out}: wait for it, or give another --out") from None
    except OSError as error:
        raise ResultsError(f"cannot write beside {out}: {_reason(error)}") from error
    with handle:
        folder = WorkingFolder(path)
        try:
            _check_plan(folder, plan, out=out, resume=resume)
        except OSError as error:
            raise ResultsError(f"cannot use {path}: {_reason(error)}") from error
        yield folder


def discard(folder: WorkingFolder) -> None:
    """Remove a working folder: the plan after the batches, so that none is ever left without the plan it is of."""
    try:
        folder.clear()
        (folder.path / PLAN).unlink(missing_ok=True)
    except OSError:
        return  # the results are there, and that is what counts
    shutil.rmtree(folder.path, ignore_errors=True)


def _locked(path: Path) -> TextIO:
    """The open lock of a folder, which is made if need be.

    Raises
    ------
    BlockingIOError
        If another process holds it.
    """
    while True:
        path.mkdir(parents=True, exist_ok=True)
        handle = (path / LOCK).open("w", encoding="utf-8")
        try:
            if fcntl is None:
                return handle
            try:
                fcntl.flock(handle, fcntl.LOCK_EX | fcntl.LOCK_NB)
            except BlockingIOError:
                raise
            except OSError:
                return handle  # a file system without locks
            if _is_still(handle, path / LOCK):
                return handle
        except BaseException:
            handle.close()
            raise
        # the run before removed its folder between our opening and our locking
        handle.close()


def _is_still(handle: TextIO, path: Path) -> bool:
    try:
        return os.path.samestat(os.fstat(handle.fileno()), path.stat())
    except FileNotFoundError:
        return False


def _check_plan(folder: WorkingFolder, plan: dict[str, Any], *, out: Path, resume: bool) -> None:
    file, text = folder.path / PLAN, json_text(plan)
    try:
        there = file.read_text(encoding="utf-8", errors="replace")
    except FileNotFoundError:
        folder.clear()  # of a plan that nobody knows
        there = None
    kept = folder.kept()
    if kept and there != text:
        raise ResultsError(
            f"{folder.path} holds an unfinished run ({_counted(kept)}) that differs from this one in "
            f"{', '.join(_differences(there or '', plan))}: put that back and go on with --resume, delete the folder, "
            "or give another --out"
        )
    if kept and not resume:
        raise ResultsError(
            f"there is an unfinished run of this study for {out} ({_counted(kept)}): go on with --resume, or delete "
            f"{folder.path}"
        )
    if there != text:
        _in_one_step(file, lambda path: path.write_text(text, encoding="utf-8"))


def _counted(kept: int) -> str:
    return "1 batch is done" if kept == 1 else f"{kept:,} batches are done"


def _differences(there: str, plan: dict[str, Any]) -> list[str]:
    """In what two plans differ, in words."""
    new = json.loads(json_text(plan))
    try:
        old = json.loads(there)
    except ValueError:
        old = None
    if not isinstance(old, dict):
        return ["everything, as its plan cannot be read"]
    differing = [key for key in new if old.get(key) != new[key]]
    said = []
    if "study" in differing:
        before, now = old.get("study"), new["study"]
        keys = dict.fromkeys([*now, *(before if isinstance(before, dict) else {})])
        parts = [key for key in keys if not isinstance(before, dict) or before.get(key) != now.get(key)]
        said.append(f"the study's {' and '.join(parts)}")
    if "inputs" in differing:
        before = old["inputs"] if isinstance(old.get("inputs"), list) else []
        changed = [entry["history"] for entry in new["inputs"] if entry not in before]
        # which histories there are is the study's, and said with it
        if changed and "study" not in differing:
            said.append(" and ".join(f"history '{name}', which has been stored anew" for name in changed))
    words = {"program": f"the program (then {old.get('program')})", "batch": "the size of batches"}
    said += [words[key] for key in words if key in differing]
    # the days follow from the study and the histories
    return said or ["the days"]


def _in_one_step(path: Path, write: Callable[[Path], Any]) -> None:
    """Write beside the file, flush, and move it into its place."""
    fresh = path.with_name(f".{path.name}.{os.getpid()}")
    try:
        write(fresh)
        with fresh.open("r+b") as file:
            os.fsync(file.fileno())
        fresh.replace(path)
    finally:
        fresh.unlink(missing_ok=True)


def _reason(error: OSError) -> str:
    return error.strerror or str(error)


#: Stands for no position in a file.
NOBODY = -1


def _bytes_of(part: Partial) -> bytes:
    values = {name: getattr(part, name) for name in part.__slots__}
    arrays: dict[str, Any] = {name: np.asarray(NOBODY if value is None else value) for name, value in values.items()}
    file = io.BytesIO()
    np.savez(file, **arrays)
    return file.getvalue()


def _partial_of(stored: bytes) -> Partial:
    with np.load(io.BytesIO(stored), allow_pickle=False) as arrays:
        return _partial_from(arrays)


def _partial_from(arrays: Mapping[str, npt.NDArray[np.generic]]) -> Partial:
    values: dict[str, Any] = {}
    for name in Partial.__slots__:
        value = arrays[name]
        values[name] = value if value.ndim else value.item()
    for name in ("best", "best_studentised"):
        values[name] = None if values[name] == NOBODY else values[name]
    return Partial(**values)
