"""Results folders: written whole or not at all, with a manifest that says how to make them again (C14)."""

from __future__ import annotations

import hashlib
import json
import math
import platform
import re
import shutil
import tempfile
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from importlib.metadata import version
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.parquet as pq

from .errors import ResultsError

#: Version of the results schema (C14).
SCHEMA = 1
MANIFEST = "manifest.json"
SUMMARY = "summary.json"


def write_folder(out: Path, fill: Callable[[Path], None]) -> None:
    """Write a results folder atomically: ``fill`` writes a fresh folder beside ``out``, which then takes its place.

    Raises
    ------
    ResultsError
        If ``out`` exists and is not a results folder, or cannot be written.
    """
    check_replaceable(out)
    try:
        out.parent.mkdir(parents=True, exist_ok=True)
        fresh = Path(tempfile.mkdtemp(prefix=f".{out.name}.", dir=out.parent))
    except OSError as error:
        raise ResultsError(f"cannot write beside {out}: {error}") from None
    try:
        fill(fresh)
        fresh.chmod(0o755)
        with _moved_aside(out):
            fresh.rename(out)
    except OSError as error:
        raise ResultsError(f"cannot write {out}: {error}; what was there before is still there") from None
    finally:
        shutil.rmtree(fresh, ignore_errors=True)


def check_replaceable(out: Path, *, kind: str | None = None) -> None:
    """Raise ResultsError unless ``out`` is absent, an empty folder, or results (of this ``kind`` if given)."""
    if out.resolve() == Path.cwd() and not any(out.iterdir()):
        raise ResultsError(f"{out} is the folder you stand in: give a new folder as --out")
    if out.is_symlink() or (out.exists() and not out.is_dir()):
        raise ResultsError(f"{out} is not a folder: give another --out")
    if not out.is_dir() or not any(out.iterdir()):
        return
    manifest = read_manifest(out)
    if manifest is None or not str(manifest.get("made_by", "")).startswith("rollband "):
        raise ResultsError(f"{out} holds other files and no {MANIFEST} of ours: give an empty or a new folder as --out")
    there = manifest.get("kind", "replay")
    if kind not in (None, there):
        raise ResultsError(f"{out} holds the results of a {there}, not of a {kind}: give another --out")
    written = manifest.get("files")
    ours = {MANIFEST, *(written if isinstance(written, list) else [])}
    others = sorted(path.name for path in out.iterdir() if path.name not in ours)
    if others:
        raise ResultsError(
            f"{out} holds results, and also {', '.join(others[:5])}{' ...' if len(others) > 5 else ''}, which would be "
            "lost: move that away, or give a new folder as --out"
        )


@contextmanager
def _moved_aside(out: Path) -> Iterator[None]:
    """Move an existing folder aside, and back if what follows fails."""
    if not out.exists():
        yield
        return
    aside = Path(tempfile.mkdtemp(prefix=f".{out.name}.old.", dir=out.parent))
    former = aside / out.name
    try:
        out.rename(former)
        try:
            yield
        except BaseException:
            former.rename(out)
            raise
    finally:
        shutil.rmtree(aside, ignore_errors=True)


def free_folder(parent: Path, name: str, manifest: dict[str, Any]) -> Path:
    """``parent/name``, or the first of ``name-2``, ``name-3``, ... that is free or was made from the same manifest."""
    wanted = repeatable_part(manifest)
    number = 1
    while True:
        folder = parent / (name if number == 1 else f"{name}-{number}")
        if not folder.exists() or repeatable_part(read_manifest(folder)) == wanted:
            return folder
        number += 1


def repeatable_part(manifest: dict[str, Any] | None) -> Any:
    """What of a manifest decides the numbers: inputs by content and the settings, not the command's spelling."""
    if manifest is None:
        return None
    inputs = sorted(json.dumps({**entry, "file": ""}, sort_keys=True) for entry in manifest.get("inputs", []))
    return inputs, manifest.get("settings"), manifest.get("seed"), manifest.get("schema")


def read_manifest(folder: Path) -> dict[str, Any] | None:
    """The manifest of a folder, None if it has none that can be read."""
    try:
        found = json.loads((folder / MANIFEST).read_text(encoding="utf-8"))
    except (OSError, ValueError):
        return None
    return found if isinstance(found, dict) else None


def read_summary(folder: Path) -> dict[str, Any]:
    """The summary of a results folder.

    Raises
    ------
    ResultsError
        If there is none, or one of another schema.
    """
    file = folder / SUMMARY
    try:
        found = json.loads(file.read_text(encoding="utf-8"))
    except FileNotFoundError:
        raise ResultsError(f"{folder} is no results folder: it has no {SUMMARY}") from None
    except (OSError, ValueError) as error:
        raise ResultsError(f"cannot read {file}: {error}") from None
    schema = found.get("schema") if isinstance(found, dict) else None
    if schema != SCHEMA:
        raise ResultsError(f"{file} is of schema {schema!r}; this version reads {SCHEMA}")
    return found


def write_manifest(folder: Path, manifest: dict[str, Any]) -> None:
    """Write the manifest of a folder that is otherwise complete, with the names of all files in it."""
    files = sorted({path.name for path in folder.iterdir()} | {MANIFEST})
    write_json(folder / MANIFEST, manifest | {"files": files})


def versions() -> dict[str, str]:
    """Versions of what decides the last digits."""
    return {name: version(name) for name in ("numpy", "pandas", "pyarrow", "scipy")} | {
        "python": platform.python_version()
    }


def write_json(path: Path, value: Any) -> None:
    """Write plain JSON, sorted as given; a figure that cannot be had is null."""
    # a file name that is no text is escaped, as JSON has it
    path.write_text(json_text(value) + "\n", encoding="utf-8", errors="backslashreplace")


def json_text(value: Any) -> str:
    """JSON text; dates as ISO, NaN and infinities as null, numpy numbers as plain ones."""
    return json.dumps(plain(value), indent=2, ensure_ascii=False, allow_nan=False)


def plain(value: Any) -> Any:
    """Nested plain values for JSON."""
    if isinstance(value, dict):
        return {str(key): plain(item) for key, item in value.items()}
    if isinstance(value, (list, tuple)):
        return [plain(item) for item in value]
    if isinstance(value, np.datetime64):
        return None if np.isnat(value) else str(value.astype("datetime64[D]"))
    if isinstance(value, np.generic):
        value = value.item()
    if isinstance(value, float) and not math.isfinite(value):
        return None
    return value


def write_parquet(path: Path, frame: pd.DataFrame) -> None:
    """Write a frame as Parquet whose bytes depend on the values alone."""
    table = pa.Table.from_pandas(frame, preserve_index=False)
    # milliseconds hold every date, and every reader knows them
    for position, column in enumerate(table.schema):
        if pa.types.is_timestamp(column.type):
            table = table.set_column(position, column.name, table.column(position).cast(pa.timestamp("ms")))
    pq.write_table(table.replace_schema_metadata(None), path, compression="zstd")


def sha256_of(path: Path) -> str:
    """Hexadecimal sha256 of a file, read in pieces."""
    digest = hashlib.sha256()
    with path.open("rb") as file:
        while piece := file.read(1 << 20):
            digest.update(piece)
    return digest.hexdigest()


def folder_name(*parts: str) -> str:
    """A short safe folder name from any text: letters, digits and hyphens."""
    words = re.sub(r"[^a-z0-9]+", "-", " ".join(parts).lower()).strip("-")
    return words[:80].rstrip("-") or "replay"
