"""The audit command: options -> a results folder made again, told, and its exit code."""

from __future__ import annotations

import sys
from dataclasses import asdict
from pathlib import Path
from typing import Any

import typer

from data_loaders.versions import SHORT

from .audit import DIFFERS, OTHER_DATA, SAME, SEED, Audit, audit_folder
from .audited import KeptVersion
from .results import SCHEMA, json_text
from .runner import default_workers
from .wiring import say
from .wiring_study import MOST_WORKERS, study_progress

#: Exit code of an audit that finds something.
DIFFERENT = 4
#: What has no numbers of its own.
NOT_COMPARED = "Not compared: pages, pictures and what else is in the folder."
NOT_COMPARED_IN_A_SAMPLE = "Not compared: summary.json, pages, pictures and what else is in the folder."


def audit_and_tell(
    folder: Path, *, store: Path | None, inputs: Path | None, anyway: bool, sample: int | None, seed: int | None,
    workers: int | None, as_json: bool,
) -> None:  # fmt: skip
    """Make a results folder again, say what differs, and leave with its exit code."""
    if seed is not None and sample is None:
        raise typer.BadParameter("it is of the rows that --sample draws; there is no --sample", param_hint="--seed")
    if workers is not None and not 1 <= workers <= MOST_WORKERS:
        raise typer.BadParameter(f"it takes a whole number from 1 to {MOST_WORKERS}", param_hint="--workers")
    with study_progress() as (progress, telling):
        found = audit_folder(
            folder, store=store, inputs=inputs, anyway=anyway, sample=sample, seed=SEED if seed is None else seed,
            workers=workers or default_workers(), telling=telling, progress=progress,
        )  # fmt: skip
    if as_json:
        typer.echo(json_text(verdict_table(found)))
    else:
        for line in verdict_lines(found):
            say(line)
    if found.verdict != SAME:
        sys.exit(DIFFERENT)


def verdict_table(found: Audit) -> dict[str, Any]:
    """The verdict of an audit as plain values."""
    return {
        "schema": SCHEMA,
        "folder": str(found.folder),
        "kind": found.kind,
        "verdict": found.verdict,
        "compared": list(found.compared),
        "sample": found.sample,
        "changed_inputs": [asdict(one) for one in found.changed],
        "kept_versions": [asdict(one) for one in found.kept],
        "differences": [{**one.as_dict(), "sentence": str(one)} for one in found.differences],
        "other_versions": {name: {"then": then, "now": now} for name, (then, now) in found.versions.items()},
        "notes": list(found.notes),
    }


def verdict_lines(found: Audit) -> list[str]:
    """The verdict of an audit in words."""
    changed = [f"  {one.file}: sha256 was {one.then or 'none'}, is {one.now or 'none'}" for one in found.changed]
    if found.verdict == OTHER_DATA:
        return [
            f"Other data: {found.folder} was made from inputs that have changed since.",
            *changed,
            "Nothing was made again; --anyway does so with the inputs of now.",
        ]
    said = ["Made again with inputs that have changed since:", *changed] if changed else []
    files = f"{', '.join(found.compared[:-1])} and {found.compared[-1]}"
    if found.sample is not None:
        files = (
            f"{found.sample['rows']:,} of {found.sample['of']:,} rows of {files} (drawn with --seed "
            f"{found.sample['seed']})"
        )
    if found.verdict == SAME:
        said.append(f"Same: {files} of {found.folder} come out again, value for value.")
    else:
        said.append(f"Different: {found.folder} does not come out again from its manifest.")
        if found.sample is not None:
            said.append(f"Compared: {files}.")
    said += [_kept_words(one) for one in found.kept]
    said += [f"  {one}" for one in found.differences]
    said += [f"  note: {note}" for note in found.notes]
    if found.versions and (found.verdict == DIFFERS or found.notes):
        other = "; ".join(f"{name} {then or 'not noted'}, now {now}" for name, (then, now) in found.versions.items())
        said.append(f"Versions differ: {other}.")
    return [*said, NOT_COMPARED if found.sample is None else NOT_COMPARED_IN_A_SAMPLE]


def _kept_words(one: KeptVersion) -> str:
    """That a history was taken as it was then."""
    since = (
        f"has been loaded anew since ({one.now[:SHORT]} now)" if one.now is not None else "is no longer there itself"
    )
    return (
        f"  history: version {one.sha256[:SHORT]} of {one.history}, loaded {one.loaded} UTC, which the store has kept; "
        f"{one.history} {since}"
    )
