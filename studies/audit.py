"""A results folder made again from its manifest and the inputs: the same, or what differs (C14)."""

from __future__ import annotations

import shutil
import tempfile
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt
import pandas as pd

from backtest.errors import BacktestError
from data_loaders import History, load_history
from data_loaders.names import history_file
from data_loaders.store import read_version
from data_loaders.versions import Version

from .answer_folder import DAILY, ROLLS, make_numbers_again
from .audited import DIFFERS, OTHER_DATA, SAME, Audit, Audited, ChangedInput, told
from .differences import Difference, NoTable, plain_text, read_table, rows_of
from .errors import ResultsError, StudyError, StudyFileError
from .expansion import points, window_from_value
from .overlay_files import OverlayFile, overlay_from_table
from .results import MANIFEST, SCHEMA, SUMMARY, write_json, write_parquet
from .runner import Group, Progress, StudyPlan, plan_study, run_plan
from .study import Study, study_from_table, study_to_table
from .study_answer import StudyAnswer, answer_study, overlay_names
from .study_folder import OVERLAYS, PERIODS, study_summary
from .toml_text import KeyPath, KeyProblem, key_words

__all__ = ["DIFFERS", "OTHER_DATA", "SAME", "SEED", "Audit", "ChangedInput", "audit_folder"]

Numbers = npt.NDArray[np.int64]

#: Of the rows that are drawn, unless the user says otherwise.
SEED = 1


def audit_folder(
    folder: Path,
    *,
    store: Path | None = None,
    inputs: Path | None = None,
    anyway: bool = False,
    sample: int | None = None,
    seed: int = SEED,
    workers: int = 1,
    telling: Callable[[str], None] = lambda step: None,
    progress: Progress = lambda done, of: None,
) -> Audit:
    """Make the numbers of a results folder again, and compare.

    Parameters
    ----------
    store : Path, optional
        Folder of stored histories, if not the one that was typed then.
    inputs : Path, optional
        Folder that now holds the input files, itself or in folders below.
    anyway : bool
        Go on with inputs that have changed.
    sample : int, optional
        Of a study, make only so many rows again, drawn with ``seed``.
    workers : int
        Processes, for a study.
    telling, progress : callable
        Told what is being done, and the overlays done and to do.

    Raises
    ------
    ResultsError
        If it cannot be had: no manifest or one that makes no sense, or inputs are gone.
    LoadError
        If inputs that have changed cannot be loaded.
    """
    if not folder.is_dir():
        raise ResultsError(f"there is no folder {folder}: give the results folder of a replay or a study")
    if not (folder / MANIFEST).exists():
        raise ResultsError(f"{folder} cannot be made again: it has no {MANIFEST}, so it is no results folder")
    try:
        manifest = read_table(folder / MANIFEST)
    except ResultsError as error:
        raise ResultsError(f"{folder} cannot be made again: its {MANIFEST} {error}") from None
    audited = Audited(folder, manifest, store=store, inputs=inputs, anyway=anyway)
    if manifest.get("schema") != SCHEMA or isinstance(manifest.get("schema"), bool):
        raise audited.cannot(f"is of schema {told(manifest.get('schema'))}; this version makes {SCHEMA} again")
    if manifest.get("kind") == "study":
        return _audit_study(audited, sample=sample, seed=seed, workers=workers, telling=telling, progress=progress)
    if sample is not None:
        raise ResultsError(f"{folder} holds one replay: --sample is for the many rows of a study")
    return _audit_replay(audited, telling)


# ---------------------------------------------------------------- a replay


def _audit_replay(audited: Audited, telling: Callable[[str], None]) -> Audit:
    manifest = audited.manifest
    settings = audited.table(manifest, "settings")
    agreed = _overlay_of(audited, settings.get("overlay"))
    start, end = _window_of(audited, settings)
    if not isinstance(manifest.get("source"), dict):
        raise audited.cannot("does not say where its data are: replay again, and audit that")
    telling("reading the inputs")
    history, label = _history_of(audited, manifest["source"], end)
    if history is None:
        return audited.verdict("replay", ())
    inputs = [{"kind": s.kind, "file": s.file, "sha256": s.sha256, "unit": s.unit} for s in history.sources]
    seed: Any = manifest.get("seed")
    resamples: Any = settings.get("resamples")
    inputs += [entry for entry in audited.noted_inputs() if entry["kind"] == "overlay"]
    with tempfile.TemporaryDirectory(prefix="rollband-audit-") as temporary:
        again = Path(temporary)
        try:
            fresh = make_numbers_again(
                history.frame, agreed, again, label=label, inputs=inputs, notes=history.notes,
                rate=settings.get("rate"), dividend_yield=settings.get("dividend_yield"), start=start, end=end,
                seed=seed, resamples=resamples, progress=telling,
            )  # fmt: skip
        except BacktestError as error:
            raise audited.cannot(f"asks for what cannot be replayed: {plain_text(str(error), 300)}") from None
        telling("comparing")
        kept = ("history", "settings", "seed") if audited.changed else ("history", "inputs", "settings", "seed")
        audited.compare_tables(
            MANIFEST, {key: manifest[key] for key in kept if key in manifest}, {key: fresh[key] for key in kept}
        )
        audited.compare_parquet(DAILY, again, lambda frame, row: f"on {frame['date'].iloc[row].date()}")
        audited.compare_parquet(ROLLS, again, _roll_words)
        audited.compare_summary(again)
    return audited.verdict("replay", (DAILY, ROLLS, SUMMARY))


def _overlay_of(audited: Audited, table: Any) -> OverlayFile:
    if not isinstance(table, dict):
        raise audited.cannot("has no table settings.overlay")
    try:
        return overlay_from_table(table)
    except KeyProblem as problem:
        raise audited.cannot(_unusable(("settings", "overlay", *problem.path), problem)) from None


def _window_of(audited: Audited, settings: dict[str, Any]) -> tuple[str | None, str | None]:
    try:
        return window_from_value({key: settings[key] for key in ("from", "to") if settings.get(key) is not None})
    except KeyProblem as problem:
        raise audited.cannot(_unusable(("settings", *problem.path[1:]), problem)) from None


def _unusable(path: KeyPath, problem: KeyProblem) -> str:
    return f"cannot be used: {key_words(path)}: {plain_text(problem.problem, 300)}"


def _history_of(audited: Audited, source: dict[str, Any], end: str | None) -> tuple[History | None, str]:
    """The history and its name; None where its inputs have changed and nothing is to be made again."""
    if "history" in source:
        audited.only("a stored history", "--store")
        name = audited.name_of(source["history"])
        store = audited.store_of(source.get("store"))
        used = audited.stored_version(store, name, then=source.get("sha256"))
        if audited.changed:
            audited.name_changed_sources(used)
        return (read_version(used) if audited.goes_on else None), name
    audited.only("files", "--inputs")
    unit = source.get("vol_unit")
    if unit not in (None, "percent", "decimal"):
        raise audited.cannot(f"cannot be used: source.vol_unit is {told(unit)}")
    found = audited.files(source)
    if not audited.goes_on:
        return None, ""
    history = load_history(
        prices=found["prices"], vol=found.get("vol"), dividends=found.get("dividends"), rates=found.get("rates"),
        signal=found.get("signal"),
        vol_unit=unit, needed_to=None if end is None else pd.Timestamp(end).date(),
    )  # fmt: skip
    return history, found["prices"].stem


def _roll_words(frame: pd.DataFrame, row: int) -> str:
    one = frame.iloc[row]
    return f"of row {row + 1} ({one['leg']}, opened {one['opened'].date()})"


# ---------------------------------------------------------------- a study


def _audit_study(
    audited: Audited, *, sample: int | None, seed: int, workers: int, telling: Callable[[str], None], progress: Progress
) -> Audit:
    audited.only("stored histories", "--store")
    settings = audited.table(audited.manifest, "settings")
    table = audited.table(settings, "study", "settings.study")
    try:
        asked = study_from_table(table)
    except StudyFileError as error:
        problem = KeyProblem(("settings", "study", *error.path), error.problem)
        raise audited.cannot(_unusable(problem.path, problem)) from None
    telling("reading the inputs")
    store = audited.store_of(settings.get("store"))
    then = {told(entry.get("history")): entry.get("sha256") for entry in audited.noted_inputs()}
    used = [audited.stored_version(store, name, then=then.get(told(name))) for name in asked.histories]
    if not audited.goes_on:
        return audited.verdict("study", ())
    audited.compare_tables(
        MANIFEST,
        {"seed": audited.manifest.get("seed"), "settings": {"study": table}},
        {"seed": asked.seed, "settings": {"study": study_to_table(asked)}},
    )
    rows = len(points(asked)) * len(asked.histories)
    if not _rows_are(audited, rows):
        return audited.verdict("study", (OVERLAYS, PERIODS))
    chosen = None
    if sample is not None and sample < rows:
        chosen = np.sort(np.random.default_rng(seed).choice(rows, size=sample, replace=False))
        audited.sample = {"rows": sample, "of": rows, "seed": seed}
    telling("planning")
    with _store_of(used, store) as store_then:
        found = _run_again(audited, asked, store_then, chosen, workers=workers, progress=progress)
    telling("comparing")
    return _compare_study(audited, found, chosen, rows)


@contextmanager
def _store_of(used: Sequence[Version], store: Path) -> Iterator[Path]:
    """A store in which each history is the version that is used; the given one where it is as it was then."""
    if all(version.current for version in used):
        yield store
        return
    with tempfile.TemporaryDirectory(prefix="rollband-audit-") as folder:
        for version in used:
            shutil.copyfile(version.path, history_file(Path(folder), version.name))
        yield Path(folder)


def _rows_are(audited: Audited, rows: int) -> bool:
    """Whether both tables have as many rows as the study has overlays; else there is no need to run it."""
    fits = True
    for file in (OVERLAYS, PERIODS):
        try:
            there = rows_of(audited.folder / file)
            if there != rows:
                raise NoTable(f"has {there:,} rows, and the study in {MANIFEST} has {rows:,}")
        except NoTable as problem:
            audited.differences.append(Difference(file=file, problem=str(problem)))
            fits = False
    return fits


def _run_again(
    audited: Audited, asked: Study, store: Path, chosen: Numbers | None, *, workers: int, progress: Progress
) -> StudyAnswer:
    try:
        plan = plan_study(asked, store=store)
    except (BacktestError, StudyError) as error:
        raise audited.cannot(f"asks for what cannot be replayed: {plain_text(str(error), 300)}") from None
    part = plan if chosen is None else _part_of(plan, chosen)
    return answer_study(part, run_plan(part, workers=workers, progress=progress))


def _part_of(plan: StudyPlan, chosen: Numbers) -> StudyPlan:
    """The plan of some rows, each as it is in the whole: the days in common stay those of all."""
    groups: list[Group] = []
    batches: list[tuple[int, slice]] = []
    first_row = 0
    for number, group in enumerate(plan.groups):
        mine = chosen[(chosen >= group.first_row) & (chosen < group.first_row + len(group.points))] - group.first_row
        if not len(mine):
            continue
        most = max(rows.stop - rows.start for of, rows in plan.batches if of == number)
        batches += [(len(groups), slice(first, min(first + most, len(mine)))) for first in range(0, len(mine), most)]
        groups.append(replace(group, points=group.points[mine], first_row=first_row))
        first_row += len(mine)
    # the tests that allow for the search are of all rows or of none
    study = replace(plan.study, resamples=0)
    return replace(plan, study=study, groups=tuple(groups), batches=tuple(batches))


def _compare_study(audited: Audited, found: StudyAnswer, chosen: Numbers | None, rows: int) -> Audit:
    names, histories = overlay_names(found), found.overlays["history"]
    numbers = np.arange(rows) if chosen is None else chosen

    def words(frame: pd.DataFrame, row: int) -> str:
        return f"of row {numbers[row]:,} ({histories.iloc[row]}, {plain_text(names[row])})"

    with tempfile.TemporaryDirectory(prefix="rollband-audit-") as temporary:
        again = Path(temporary)
        for file, frame in ((OVERLAYS, found.overlays), (PERIODS, found.periods)):
            write_parquet(again / file, frame.assign(number=numbers))
            audited.compare_parquet(file, again, words, chosen=chosen, rows=rows)
        if chosen is not None:
            return audited.verdict("study", (OVERLAYS, PERIODS))
        write_json(again / SUMMARY, study_summary(found))
        audited.compare_summary(again)
    return audited.verdict("study", (OVERLAYS, PERIODS, SUMMARY))
