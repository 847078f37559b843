"""The study command: options -> a study run, written and told."""

from __future__ import annotations

import shlex
import sys
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path

import typer

from .errors import StudyError
from .results import folder_name
from .runner import default_workers
from .study import read_study
from .study_folder import make_study_folder
from .study_terminal import show_study
from .wiring import say

#: Exit code of a run stopped by the user, as shells have it.
STOPPED = 130
MOST_WORKERS = 256


def study_and_write(
    file: Path, *, store: Path, out: Path | None, workers: int | None, resume: bool, command: list[str]
) -> None:
    """Run a study file, write its results folder and tell what it found."""
    asked = read_study(file)
    if workers is not None and not 1 <= workers <= MOST_WORKERS:
        raise StudyError(f"--workers is {workers}; it takes a whole number from 1 to {MOST_WORKERS}")
    folder = out if out is not None else Path("results") / folder_name(file.stem)
    with _progress(asked.question) as (progress, telling):
        try:
            found = make_study_folder(
                asked, folder, store=store, workers=workers or default_workers(), resume=resume,
                command=shlex.join(command), progress=progress, telling=telling,
            )  # fmt: skip
        except KeyboardInterrupt:
            typer.echo("\nrollband: stopped; what was done is kept: go on with --resume", err=True)
            raise SystemExit(STOPPED) from None
    show_study(found)
    say("")
    say(f"Results in {folder}: summary.json, overlays.parquet, periods.parquet, manifest.json")


@contextmanager
def _progress(question: str) -> Iterator[tuple[Callable[[int, int], None], Callable[[str], None]]]:
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
