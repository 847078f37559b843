"""A results folder that is made again: what its manifest says, where its inputs are now, what differs.

Whatever a folder holds is foreign: a manifest that makes no sense is refused in a sentence, never followed.
"""

from __future__ import annotations

from dataclasses import dataclass
from importlib.metadata import version
from itertools import zip_longest
from pathlib import Path
from typing import Any

import pyarrow.parquet as pq

from data_loaders.errors import LoadError, StoreError
from data_loaders.names import history_file
from data_loaders.store import check_name, read_version
from data_loaders.versions import Version, current_version, find_version

from .differences import (
    Difference,
    NoTable,
    RowWords,
    column_types,
    different_keys,
    plain_text,
    read_like,
    read_table,
    table_difference,
)
from .errors import ResultsError
from .results import MANIFEST, SUMMARY, sha256_of, versions

#: What an audit says.
SAME, DIFFERS, OTHER_DATA = "same", "differs", "other data"
#: Of one file, as many keys that differ are told.
KEYS_TOLD = 5
#: Files a replay is made from.
KINDS = ("prices", "vol", "dividends", "rates", "signal")


@dataclass(frozen=True, slots=True, kw_only=True)
class ChangedInput:
    """An input whose bytes are not those that the results were made from; sha256, None where there was none."""

    file: str
    then: str | None
    now: str | None


@dataclass(frozen=True, slots=True, kw_only=True)
class KeptVersion:
    """A stored history that has been loaded anew since, and was made again from as it was then.

    Attributes
    ----------
    history, file : str
        Its name, and the file of the version of then in the store.
    sha256 : str
    loaded : str
        When that version was last loaded, UTC.
    now : str or None
        sha256 of the history as it is now; None if it is no longer there.
    """

    history: str
    file: str
    sha256: str
    loaded: str
    now: str | None


@dataclass(frozen=True, slots=True, kw_only=True)
class Audit:
    """What came of making a results folder again.

    Attributes
    ----------
    kind : {"replay", "study"}
    verdict : {"same", "differs", "other data"}
        ``other data`` where inputs have changed and nothing was made again.
    compared : tuple of str
        Files made again.
    changed : tuple of ChangedInput
    kept : tuple of KeptVersion
        Histories whose version of then was taken, which is not the one of now.
    differences : tuple of Difference
    sample : dict or None
        ``rows``, ``of`` and ``seed``, where only some rows of a study were made again.
    versions : dict
        Name -> version then and now, of those that differ.
    notes : tuple of str
    """

    folder: Path
    kind: str
    verdict: str
    compared: tuple[str, ...] = ()
    changed: tuple[ChangedInput, ...] = ()
    kept: tuple[KeptVersion, ...] = ()
    differences: tuple[Difference, ...] = ()
    sample: dict[str, int] | None = None
    versions: dict[str, tuple[str | None, str]]
    notes: tuple[str, ...] = ()


class Audited:
    """One results folder on its way to a verdict."""

    def __init__(
        self, folder: Path, manifest: dict[str, Any], *, store: Path | None, inputs: Path | None, anyway: bool
    ) -> None:
        self.folder, self.manifest = folder, manifest
        self.given_store, self.given_inputs, self.anyway = store, inputs, anyway
        self.changed: list[ChangedInput] = []
        self.kept: list[KeptVersion] = []
        self.differences: list[Difference] = []
        self.notes: list[str] = []
        self.sample: dict[str, int] | None = None

    def cannot(self, problem: str) -> ResultsError:
        """The manifest makes no sense."""
        return ResultsError(f"{self.folder} cannot be made again: its {MANIFEST} {problem}")

    def verdict(self, kind: str, compared: tuple[str, ...]) -> Audit:
        """What was found; nothing compared means that the data were others."""
        verdict = DIFFERS if self.differences else SAME if compared else OTHER_DATA
        return Audit(
            folder=self.folder, kind=kind, verdict=verdict, compared=compared, changed=tuple(self.changed),
            kept=tuple(self.kept), differences=tuple(self.differences), sample=self.sample,
            versions=self._other_versions(), notes=tuple(self.notes),
        )  # fmt: skip

    def _other_versions(self) -> dict[str, tuple[str | None, str]]:
        noted = self.manifest.get("versions")
        then = dict(noted) if isinstance(noted, dict) else {}
        then["rollband"] = str(self.manifest.get("made_by")).removeprefix("rollband ")
        now = {"rollband": version("rollband")} | versions()
        return {
            name: (plain_text(then[name]) if isinstance(then.get(name), str) else None, known)
            for name, known in now.items()
            if then.get(name) != known
        }

    # ------------------------------------------------------------ inputs

    @property
    def goes_on(self) -> bool:
        """Whether to make anything again with the inputs as they are."""
        return self.anyway or not self.changed

    def only(self, made_from: str, option: str) -> None:
        """Refuse the option that would do nothing here."""
        given = {"--store": self.given_store, "--inputs": self.given_inputs}
        for other, value in given.items():
            if other != option and value is not None:
                raise ResultsError(f"{self.folder} was made from {made_from}: give {option}, not {other}")

    def files(self, source: dict[str, Any]) -> dict[str, Path]:
        """Where each input file is now; those that changed are noted."""
        typed = self.table(source, "files", "source.files")
        if "prices" not in typed or not set(typed) <= set(KINDS):
            raise self.cannot(f"cannot be used: source.files takes {', '.join(KINDS)}, and prices at least")
        then = {entry.get("kind"): entry.get("sha256") for entry in self.noted_inputs()}
        found, gone = {}, []
        for kind in (kind for kind in KINDS if kind in typed):
            path = self._path(typed[kind], f"source.files.{kind}")
            hashes = {place: self._sha256(place) for place in (path, *self._below_inputs(path.name)) if _is_file(place)}
            if not hashes:
                gone.append(_shown_path(path))
                continue
            right = [place for place, now in hashes.items() if now == then.get(kind)]
            found[kind] = right[0] if right else next(iter(hashes))
            if not right:
                self._note_changed(str(found[kind]), then.get(kind), hashes[found[kind]])
        if gone:
            raise self._gone(gone, "--inputs DIR where the files are now")
        return found

    def _gone(self, files: list[str], option: str) -> ResultsError:
        also = f" (nor below {self.given_inputs})" if self.given_inputs is not None else ""
        return ResultsError(
            f"{self.folder} cannot be made again: there is no {' and no '.join(files)}{also}; go to the folder in "
            f"which it was made, or say with {option}"
        )

    def _below_inputs(self, name: str) -> list[Path]:
        if self.given_inputs is None:
            return []
        if not self.given_inputs.is_dir():
            raise ResultsError(f"--inputs {self.given_inputs} is no folder")
        return sorted(path for path in self.given_inputs.rglob("*") if path.name == name)

    def stored_version(self, store: Path, name: str, *, then: Any) -> Version:
        """A stored history as it was then, whatever has been loaded since; the one of now if it is not kept, noted."""
        file = history_file(store, name)
        try:
            now = current_version(store, name)
            found = find_version(store, name, then) if isinstance(then, str) else None
        except OSError as error:
            raise ResultsError(f"{_shown_path(file)} cannot be read: {error.strerror or error}") from None
        if found is not None:
            if not found.current:
                self.kept.append(
                    KeptVersion(
                        history=name, file=_shown_path(found.path), sha256=found.sha256,
                        loaded=f"{found.loaded:%Y-%m-%d %H:%M}", now=None if now is None else now.sha256,
                    )
                )  # fmt: skip
            return found
        if now is None:
            raise self._gone([_shown_path(file)], "--store DIR where the histories are now")
        self._note_changed(str(file), then, now.sha256)
        return now

    def name_changed_sources(self, version: Version) -> None:
        """Of a stored history that has changed, the files that it was loaded from then and now."""
        try:
            sources = read_version(version).sources
        except LoadError:
            return
        for kind in KINDS:
            then = [entry for entry in self.noted_inputs() if entry["kind"] == kind]
            now = [source for source in sources if source.kind == kind]
            for old, new in zip_longest(then, now):
                old_hash, new_hash = None if old is None else old.get("sha256"), None if new is None else new.sha256
                if old_hash != new_hash:
                    file = new.file if new is not None else str((old or {}).get("file"))
                    self._note_changed(file, old_hash, new_hash)

    def _note_changed(self, file: str, then: Any, now: str | None) -> None:
        known = plain_text(then) if isinstance(then, str) else None
        self.changed.append(ChangedInput(file=_shown_path(file), then=known, now=now))

    def _sha256(self, path: Path) -> str:
        try:
            return sha256_of(path)
        except OSError as error:
            raise ResultsError(f"{_shown_path(path)} cannot be read: {error.strerror or error}") from None

    # ------------------------------------------------------------ what the manifest says

    def table(self, above: dict[str, Any], key: str, words: str | None = None) -> dict[str, Any]:
        """The table under a key, which there must be."""
        found = above.get(key)
        if not isinstance(found, dict):
            raise self.cannot(f"has no table {words or key}")
        return found

    def noted_inputs(self) -> list[dict[str, Any]]:
        """The manifest's entries of inputs, each a table with its kind."""
        found = self.manifest.get("inputs")
        if not isinstance(found, list) or not all(isinstance(entry, dict) for entry in found):
            raise self.cannot("has no list of inputs")
        return [entry for entry in found if isinstance(entry.get("kind"), str)]

    def name_of(self, value: Any) -> str:
        """A name that leads out of no store."""
        try:
            return check_name(value if isinstance(value, str) else "")
        except StoreError:
            raise self.cannot(f"cannot be used: {told(value)} is no name of a stored history") from None

    def store_of(self, typed: Any) -> Path:
        """The store that is given, or the one that was typed then."""
        return self.given_store if self.given_store is not None else self._path(typed, "store")

    def _path(self, typed: Any, key: str) -> Path:
        if not isinstance(typed, str) or not typed or "\0" in typed:
            raise self.cannot(f"cannot be used: {key} is {told(typed)}, no path")
        return Path(typed)

    # ------------------------------------------------------------ comparing

    def compare_tables(self, file: str, then: dict[str, Any], now: dict[str, Any]) -> None:
        """Note the first keys that differ, and how many more do."""
        found = list(different_keys(then, now))
        for key, problem, old, new in found[:KEYS_TOLD]:
            self.differences.append(Difference(file=file, where=key, problem=problem, then=old, now=new))
        more = len(found) - KEYS_TOLD
        if more > 0:
            words = f"{more:,} more value{' differs' if more == 1 else 's differ'}"
            self.differences.append(Difference(file=file, problem=words))

    def compare_summary(self, again: Path) -> None:
        """Compare the summary with the one in ``again``, value by value."""
        try:
            then = read_table(self.folder / SUMMARY)
        except ResultsError as error:
            self.differences.append(Difference(file=SUMMARY, problem=str(error)))
            return
        before = len(self.differences)
        self.compare_tables(SUMMARY, then, read_table(again / SUMMARY))
        if len(self.differences) == before:
            self._note_bytes(SUMMARY, again)

    def compare_parquet(
        self, file: str, again: Path, row_words: RowWords, *, chosen: Any = None, rows: int | None = None
    ) -> None:
        """Bytes first, then values; ``chosen`` are the rows of the folder's table that were made again."""
        there, fresh = self.folder / file, again / file
        now = pq.ParquetFile(fresh).read().to_pandas()
        columns = column_types(pq.read_schema(fresh))
        try:
            if chosen is None:
                then = read_like(there, columns, len(now))
            else:
                then = read_like(there, columns, rows or 0, more=True).iloc[chosen].reset_index(drop=True)
                # blocks of days that only rows have which were not drawn
                now = now.reindex(columns=then.columns)
        except NoTable as problem:
            self.differences.append(Difference(file=file, problem=str(problem)))
            return
        found = table_difference(file, then, now, row_words)
        if found is not None:
            self.differences.append(found)
        elif chosen is None:
            self._note_bytes(file, again)

    def _note_bytes(self, file: str, again: Path) -> None:
        if (self.folder / file).read_bytes() != (again / file).read_bytes():
            self.notes.append(f"{file} holds the same values in other bytes")


def _is_file(path: Path) -> bool:
    try:
        return path.is_file()
    except (OSError, ValueError):
        return False


def told(value: Any) -> str:
    """A foreign value in a sentence."""
    return plain_text(repr(value))


def _shown_path(path: Path | str) -> str:
    return plain_text(str(path), 300)
