"""A study run to the end and written as a results folder, resumable on the way."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from concurrent.futures import Executor
from importlib.metadata import version
from pathlib import Path
from typing import TYPE_CHECKING, Any

from backtest.analytics.reality_check import RealityCheck

from .assumptions import CAUTION
from .results import (
    SCHEMA,
    SUMMARY,
    check_replaceable,
    versions,
    write_folder,
    write_json,
    write_manifest,
    write_parquet,
)
from .runner import Progress, plan_study, run_plan
from .study import Study, study_to_table
from .study_answer import GroupAnswer, StudyAnswer, answer_study, overlay_names, sentence_of
from .working_folder import discard, working_folder

if TYPE_CHECKING:
    from .against import Other

#: Tables of a study's results folder.
OVERLAYS, PERIODS = "overlays.parquet", "periods.parquet"
#: The page of a study.
PAGE = "study.html"
#: How a study compares with another, where it was asked to.
AGAINST = "against.json"
#: Overlays named in the summary, from the best down.
BEST_NAMED = 10


def run_study(
    study: Study,
    *,
    store: Path = Path("histories"),
    workers: int = 1,
    executor: Executor | None = None,
    progress: Progress = lambda done, of: None,
) -> StudyAnswer:
    """Run a study and judge it; nothing is written.

    Parameters
    ----------
    study : Study
    store : Path
        Folder of stored histories.
    workers : int
        Local processes.
    executor : Executor, optional
        Anything with ``submit`` as in :mod:`concurrent.futures`, instead of local processes.
    progress : callable
        Called with the overlays done and to do.

    Returns
    -------
    StudyAnswer
        ``overlays`` and ``periods`` are frames with a row an overlay.

    Raises
    ------
    StudyError, BacktestError, LoadError
    """
    plan = plan_study(study, store=store)
    return answer_study(plan, run_plan(plan, workers=workers, executor=executor, progress=progress))


def make_study_folder(
    study: Study,
    out: Path,
    *,
    store: Path,
    workers: int = 1,
    executor: Executor | None = None,
    resume: bool = False,
    command: str = "",
    against: Other | None = None,
    progress: Progress = lambda done, of: None,
    telling: Callable[[str], None] = lambda step: None,
    noting: Callable[[str], None] = lambda note: None,
) -> StudyAnswer:
    """Run a study and write its results folder; batches are kept on the way.

    Parameters
    ----------
    out : Path
        The results folder; it appears when all is done. What is unfinished is kept beside it.
    resume : bool
        Go on with an unfinished run of the same study.
    command : str
        For manifest and page.
    against : Other, optional
        Another study, from :func:`studies.against.read_other`; how this one compares is written beside the tables.
    telling : callable
        Told what is being done before and after the batches.
    noting : callable
        Told what the user should know before a long run: that ``resume`` finds nothing to go on with.

    Raises
    ------
    ResultsError
        If ``out`` cannot be written, another run is writing it, or an unfinished run stands in the way.
    StudyError
        If a worker is lost or the disk is full; ``resume`` goes on from there.
    """
    check_replaceable(out, kind="study")
    telling("planning")
    plan = plan_study(study, store=store)
    with working_folder(out, plan.as_table(), resume=resume) as folder:
        if resume and not folder.kept():
            noting(f"there is no unfinished run for {out} to go on with: starting afresh")
        rows = run_plan(plan, workers=workers, executor=executor, folder=folder, progress=progress)
        telling("judging")
        found = answer_study(plan, rows)
        telling("writing tables, pictures and page")

        def write(fresh: Path) -> None:
            if against is not None:
                from .against import compare

                write_json(fresh / AGAINST, compare(found, against))
            # the manifest is last: it names all files
            write_study(found, fresh, command=command)

        write_folder(out, write)
        discard(folder)
    return found


def write_study(found: StudyAnswer, folder: Path, *, command: str) -> None:
    """Write all files of a study into an existing empty folder: tables, summary, page, pictures and manifest."""
    from .page.study import build_study_page, save_figures, study_figures

    write_parquet(folder / OVERLAYS, found.overlays)
    write_parquet(folder / PERIODS, found.periods)
    write_json(folder / SUMMARY, study_summary(found))
    (folder / PAGE).write_text(build_study_page(found, command=command), encoding="utf-8")
    save_figures(study_figures(found), folder)
    write_manifest(folder, study_manifest(found, command=command))


def study_manifest(found: StudyAnswer, *, command: str) -> dict[str, Any]:
    """What gives the same folder again."""
    plan = found.plan
    return {
        "schema": SCHEMA,
        "kind": "study",
        "made_by": f"rollband {version('rollband')}",
        "versions": versions(),
        "command": command,
        "inputs": [{"kind": "history", **entry} for entry in plan.inputs],
        "settings": {"study": study_to_table(plan.study), "store": str(plan.store)},
        "seed": plan.study.seed,
    }


def study_summary(found: StudyAnswer) -> dict[str, Any]:
    """What a study found, as nested plain values; decimals, not percents."""
    study = found.plan.study
    names = overlay_names(found)
    return {
        "schema": SCHEMA,
        "kind": "study",
        "question": study.question,
        "comparison": study.comparison,
        "overlays": found.plan.overlays,
        "axes": {axis.name: list(axis.labels) for axis in study.axes},
        "groups": [_group_summary(found, group, names) for group in found.groups],
        "caution": CAUTION,
    }


def _group_summary(found: StudyAnswer, group: GroupAnswer, names: Sequence[str]) -> dict[str, Any]:
    rows = found.overlays.iloc[group.rows]
    ranked = rows.dropna(subset=["information_ratio"]).sort_values(
        ["information_ratio", "number"], ascending=[False, True], kind="stable"
    )
    return {
        "history": group.history,
        "first": group.first,
        "last": group.last,
        "tried": group.tried,
        "ruined": group.ruined,
        "sentence": sentence_of(group, names),
        "distinguished": group.distinguished,
        "best": [_row(found, int(number), names) for number in ranked["number"][:BEST_NAMED]],
        "own": None if group.own is None else _row(found, group.own, names),
        "deflated_sharpe": {"hurdle": group.deflated.hurdle, "probability": group.deflated.probability},
        "reality_check": None if group.check is None else _check_summary(group.check),
        "walk_forward": [
            {name: getattr(step, name) for name in step.__slots__} | {"chosen": names[step.chosen]}
            for step in group.steps
        ],
        "rank_correlation": {
            f"{one.first_name} to {one.second_name}": one.rank_correlation for one in (group.halves, *group.decades)
        },
    }


def _row(found: StudyAnswer, number: int, names: Sequence[str]) -> dict[str, Any]:
    row = found.overlays.iloc[number]
    shown = ("annual_return", "sharpe", "max_drawdown", "return_less_hold", "sharpe_less_mix", "information_ratio")
    return {"number": number, "settings": names[number]} | {name: row[name] for name in shown}


def _check_summary(check: RealityCheck) -> dict[str, Any]:
    return {name: getattr(check, name) for name in check.__slots__} | {"luck": check.luck}
