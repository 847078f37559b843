"""A stored history with the results of a replay on it, made once and copied to be spoilt; for tests of audits."""

from __future__ import annotations

import json
import shutil
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path
from typing import Any

import pandas as pd
import pytest

from data_loaders import History
from data_loaders.store import write_history
from studies.answer_folder import make_answer_folder, make_numbers_again
from studies.audit import Audit
from studies.overlay_files import OverlayFile, shorthand_overlay
from studies.results import sha256_of
from tests.studies.conftest import without_pictures

BAND = shorthand_overlay(put=95, call=110)


def two_years(history: History) -> History:
    """2020 and 2021 of the demo."""
    return replace(history, frame=history.frame.loc["2020":"2021"])


def make_home(home: Path, history: History) -> None:
    """A folder with a store and the results of a replay on it."""
    file = write_history(history, home / "histories", "demo")
    with pytest.MonkeyPatch.context() as patch:
        without_pictures(patch)
        make_answer_folder(
            history.frame, BAND, label="demo", inputs=inputs_of(history), notes=history.notes, out=home / "results",
            source={"history": "demo", "store": "histories", "sha256": sha256_of(file)}, resamples=100,
        )  # fmt: skip


def without_study_page(patch: pytest.MonkeyPatch) -> None:
    """Leave out a study's page and pictures; they are looked at in tests of their own."""
    patch.setattr("studies.page.study.build_study_page", lambda found, command: "page")
    patch.setattr("studies.page.study.study_figures", lambda found: {})
    patch.setattr("studies.page.study.save_figures", lambda figures, folder: None)


def copy_home(made: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    """A copy of it to stand in."""
    folder = tmp_path / "home"
    shutil.copytree(made, folder)
    monkeypatch.chdir(folder)
    return folder


def once(kept: Path) -> Callable[..., dict[str, Any]]:
    """Making numbers again, but what has been made once from the same is taken from there."""

    def again(frame: pd.DataFrame, agreed: OverlayFile, into: Path, *, progress: Any, **asked: Any) -> dict[str, Any]:
        place = kept / str(abs(hash(repr((agreed, sorted(asked.items()))))))
        if not place.exists():
            place.mkdir(parents=True)
            manifest = make_numbers_again(frame, agreed, place, **asked)
            (place / "manifest").write_text(json.dumps(manifest))
        shutil.copytree(place, into, dirs_exist_ok=True)
        return json.loads((place / "manifest").read_text())

    return again


def inputs_of(history: History) -> list[dict[str, Any]]:
    """The manifest's entries of a history's files."""
    return [{"kind": s.kind, "file": s.file, "sha256": s.sha256, "unit": s.unit} for s in history.sources]


def sentences(found: Audit) -> list[str]:
    """Everything that differs, in words."""
    return [str(one) for one in found.differences]


def edit(file: Path, *keys: str, value: Any) -> None:
    """Set one key of a JSON file."""
    table = json.loads(file.read_text())
    inner = table
    for key in keys[:-1]:
        inner = inner[key]
    inner[keys[-1]] = value
    file.write_text(json.dumps(table))
