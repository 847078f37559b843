"""An answer and its report as a results folder (C14)."""

from __future__ import annotations

from collections.abc import Callable
from importlib.metadata import version
from pathlib import Path
from typing import TYPE_CHECKING, Any

import pandas as pd

from backtest import Market
from backtest.arguments import number, whole_number

from .overlay_files import OverlayFile, overlay_to_table
from .replay_history import Answer, answer, daily_frame, summary
from .report import RESAMPLES, SEED, Report, make_report, report_summary
from .results import (
    SCHEMA,
    SUMMARY,
    check_replaceable,
    folder_name,
    free_folder,
    plain,
    versions,
    write_folder,
    write_json,
    write_manifest,
    write_parquet,
)

if TYPE_CHECKING:
    from .page.health import DataHealth


#: Folder of the CSV tables in a results folder, and its Parquet tables.
TABLES = "tables"
DAILY, ROLLS = "daily.parquet", "rolls.parquet"


def whole_summary(report: Report) -> dict[str, Any]:
    """The summary of C14 with what the report adds, as plain values."""
    made = summary(report.answer)
    notes = {key: made.pop(key) for key in ("warnings", "history_notes")}
    return plain(made | report_summary(report) | notes)


def write_numbers(report: Report, folder: Path) -> None:
    """Write what the manifest gives again to the last digit: daily values, rolls and summary."""
    write_parquet(folder / DAILY, daily_frame(report.answer))
    write_parquet(folder / ROLLS, report.answer.replay.rolls_frame())
    write_json(folder / SUMMARY, whole_summary(report))


def write_answer(
    report: Report,
    folder: Path,
    manifest: dict[str, Any],
    *,
    history: str,
    data_health: DataHealth | None = None,
    pdf: bool = False,
) -> None:
    """Write all files of a results folder into an existing empty folder."""
    from .page import build_report
    from .page.pdf import write_pdf
    from .tables_csv import write_tables

    found = report.answer
    write_numbers(report, folder)
    _write_pictures(found, folder)
    write_tables(report, folder / TABLES)
    page = build_report(
        found,
        report.findings,
        report.inference,
        report.clauses,
        history=history,
        how_to_run=manifest["command"],
        data_health=data_health,
    )
    (folder / "report.html").write_text(page, encoding="utf-8", errors="backslashreplace")
    if pdf:
        write_pdf(report, folder / "report.pdf", history=history)
    write_manifest(folder, manifest)


def _write_pictures(found: Answer, folder: Path) -> None:
    from backtest.charts import replay_figures

    shown = {"overlay": found.replay.wealth, "hold": found.replay.hold}
    if found.mixes.same_beta is not None:
        shown["same-beta mix"] = found.mixes.same_beta.wealth
    pictures = replay_figures(
        dates=found.replay.dates, growth_paths=shown, replay=found.replay, title=found.replay.overlay.name
    )
    for name, figure in pictures.items():
        figure.savefig(folder / f"{name}.png", metadata={"Software": None})


def replay_of(
    frame: pd.DataFrame,
    agreed: OverlayFile,
    *,
    label: str,
    inputs: list[dict[str, Any]],
    notes: tuple[str, ...] = (),
    rate: float | None = None,
    dividend_yield: float | None = None,
    start: str | None = None,
    end: str | None = None,
    command: str = "",
    source: dict[str, Any] | None = None,
    seed: int = SEED,
    resamples: int = RESAMPLES,
) -> tuple[Answer, dict[str, Any]]:
    """Replay one overlay on a history's frame; the answer, and the manifest that gives it again.

    Parameters are those of :func:`make_answer_folder`.

    Raises
    ------
    BacktestError
    """
    for option, value, least in (("--rate", rate, -99.0), ("--dividend-yield", dividend_yield, -49.0)):
        if value is not None:
            number(option, value, least=least, most=100.0, unit=" percent a year")
    whole_number("--seed", seed, least=0, most=2**32 - 1)
    whole_number("--resamples", resamples, least=100, most=1_000_000)
    market = Market.from_frame(
        frame,
        rate=None if rate is None else rate / 100.0,
        dividend_yield=None if dividend_yield is None else dividend_yield / 100.0,
    )
    found = answer(
        market, agreed.overlay, volatility=agreed.volatility, start=start, end=end, history_notes=notes,
        counterparty=agreed.counterparty, sale=agreed.sale,
    )  # fmt: skip
    manifest = {
        "schema": SCHEMA,
        "made_by": f"rollband {version('rollband')}",
        "versions": versions(),
        "command": command,
        "history": label,
        "source": source,
        "inputs": inputs,
        "settings": {
            "overlay": overlay_to_table(
                agreed.overlay, agreed.volatility, counterparty=agreed.counterparty, sale=agreed.sale
            ),
            "from": start,
            "to": end,
            "rate": rate,
            "dividend_yield": dividend_yield,
            "resamples": resamples,
            "history": {"first": str(frame.index[0].date()), "last": str(frame.index[-1].date()), "days": len(frame)},
        },
        "seed": seed,
    }
    return found, manifest


def make_numbers_again(
    frame: pd.DataFrame,
    agreed: OverlayFile,
    folder: Path,
    *,
    seed: int,
    resamples: int,
    progress: Callable[[str], None] = lambda step: None,
    **rest: Any,
) -> dict[str, Any]:
    """Write the numbers of a results folder and nothing else; its manifest. ``rest`` is for :func:`replay_of`."""
    progress("replaying")
    found, manifest = replay_of(frame, agreed, seed=seed, resamples=resamples, **rest)
    write_numbers(make_report(found, seed=seed, resamples=resamples, progress=progress), folder)
    return manifest


def make_answer_folder(
    frame: pd.DataFrame,
    agreed: OverlayFile,
    *,
    label: str,
    inputs: list[dict[str, Any]],
    notes: tuple[str, ...] = (),
    rate: float | None = None,
    dividend_yield: float | None = None,
    start: str | None = None,
    end: str | None = None,
    out: Path | None = None,
    results: Path = Path("results"),
    command: str = "",
    source: dict[str, Any] | None = None,
    data_health: DataHealth | None = None,
    seed: int = SEED,
    resamples: int = RESAMPLES,
    pdf: bool = False,
    progress: Callable[[str], None] = lambda step: None,
) -> tuple[Report, Path]:
    """Replay one overlay on a history's frame, report on it, and write its results folder.

    Parameters
    ----------
    frame : DataFrame
        As :meth:`backtest.Market.from_frame` takes it.
    inputs : list of dict
        What the numbers were made from: ``kind``, ``file``, ``sha256``, and how it was read.
    rate, dividend_yield : float, optional
        Constant, percent a year.
    start, end : str, optional
        ISO dates of the window.
    out : Path, optional
        The folder; a free one under ``results``, named after history and overlay, if not given.
    command : str
        What gives the same folder again, for manifest and page.
    source : dict, optional
        Where the history came from: ``history`` and ``store`` with the stored file's ``sha256``, or ``files`` by kind
        and ``vol_unit``; paths as they were typed.
    seed, resamples : int
        Of the resampling.
    pdf : bool
        Whether the pictures are also wanted as one PDF file.
    progress : callable
        Told what is being done.

    Raises
    ------
    BacktestError, ResultsError
    """
    if out is not None:
        check_replaceable(out, kind="replay")
    progress("replaying")
    found, manifest = replay_of(
        frame, agreed, label=label, inputs=inputs, notes=notes, rate=rate, dividend_yield=dividend_yield, start=start,
        end=end, command=command, source=source, seed=seed, resamples=resamples,
    )  # fmt: skip
    folder = out if out is not None else free_folder(results, folder_name(label, agreed.overlay.name), manifest)
    report = make_report(found, seed=seed, resamples=resamples, progress=progress)
    progress("writing tables, pictures and page")
    write_folder(
        folder,
        lambda fresh: write_answer(report, fresh, manifest, history=label, data_health=data_health, pdf=pdf),
    )
    return report, folder
