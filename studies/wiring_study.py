"""The study command: options -> a study run, written and told."""

from __future__ import annotations

import shlex
import sys
from collections.abc import Callable, Iterator
from contextlib import contextmanager, nullcontext
from pathlib import Path

import typer

from .against import read_other
from .against_terminal import show_against
from .cluster import cluster
from .differences import read_table
from .results import folder_name
from .runner import default_workers
from .study import read_study
from .study_folder import AGAINST, PAGE, make_study_folder
from .study_terminal import show_study
from .wiring import say

#: Exit code of a run stopped by the user, as shells have it.
STOPPED = 130
MOST_WORKERS = 256


def study_and_write(
    file: Path, *, store: Path, out: Path | None, workers: int | None, resume: bool, command: list[str],
    scheduler: str | None = None, against: Path | None = None,
) -> None:  # fmt: skip
    """Run a study file, write its results folder and tell what it found."""
    if workers is not None and scheduler is not None:
        raise typer.BadParameter("the scheduler has its own workers; leave --workers out", param_hint="--scheduler")
    if workers is not None and not 1 <= workers <= MOST_WORKERS:
        raise typer.BadParameter(f"{workers} is not a number from 1 to {MOST_WORKERS}", param_hint="--workers")
    asked = read_study(file)
    other = None if against is None else read_other(against)
    folder = out if out is not None else Path("results") / folder_name(file.stem)
    with study_progress() as (progress, telling):
        try:
            with cluster(scheduler) if scheduler is not None else nullcontext() as executor:
                found = make_study_folder(
                    asked, folder, store=store, workers=workers or default_workers(), executor=executor, resume=resume,
                    command=shlex.join(command), progress=progress, telling=telling, noting=_note, against=other,
                )  # fmt: skip
        except KeyboardInterrupt:
            typer.echo("\nrollband: stopped; what was done is kept: go on with --resume", err=True)
            raise SystemExit(STOPPED) from None
    show_study(found)
    if other is not None:
        show_against(read_table(folder / AGAINST))
    say("")
    more = "" if other is None else f", {AGAINST}"
    say(f"Read {folder / PAGE}")
    say(f"Results in {folder}: {PAGE}, pictures, summary.json, overlays.parquet, periods.parquet, manifest.json{more}")


def _note(text: str) -> None:
    """One line on standard error; written to it as it is now, so that a bar in progress moves down."""
    sys.stderr.write(f"rollband: {text}\n")


@contextmanager
def study_progress() -> Iterator[tuple[Callable[[int, int], None], Callable[[str], None]]]:
    """A bar with the time left on standard error, where a person looks on."""
    if not sys.stderr.isatty():
        yield (lambda done, of: None), (lambda step: None)
        return
    from rich.console import Console
    from rich.progress import BarColumn, MofNCompleteColumn, Progress, TextColumn, TimeRemainingColumn

    columns = (TextColumn("{task.description}"), BarColumn(), MofNCompleteColumn(), TimeRemainingColumn())
    with Progress(*columns, console=Console(stderr=True)) as bar:
        task = bar.add_task("planning", total=None)

        def progress(done: int, of: int) -> None:
            bar.update(task, completed=done, total=of, description="overlays")

        yield progress, lambda step: bar.update(task, description=step)
