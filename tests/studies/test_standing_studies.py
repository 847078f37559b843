"""The studies that go along in the package: what each asks, and that each can be run.

Rung: identity (their axes and the reader's own overlay written out) and behaviour (run on a short invented market).
"""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

import studies
from studies.batches import FIGURES
from studies.expansion import Expansion, points
from studies.leg_words import describe_legs
from studies.runner import plan_study, run_plan
from studies.study import parse_study, read_study, study_to_toml

from .small_studies import store_history

FOLDER = Path(studies.__file__).parent
BAND = "quarterly 95 put, monthly 110 call"
STANDING: list[tuple[str, dict[str, int], tuple[int, ...], str]] = [
    ("moneyness", {"put strike": 20, "call strike": 20}, (15, 9), BAND),
    ("roll_frequency", {"put roll": 4, "call roll": 4, "put strike": 2, "call strike": 2}, (1, 0, 1, 1), BAND),
    ("roll_day", {"roll day": 63}, (0,), BAND),
    ("smile_and_cost", {"smile": 4, "half-spread": 5, "put strike": 2}, (2, 2, 1), BAND),
    ("delta_rules", {"put strike": 10, "call strike": 10}, (2, 2), "monthly 95 put, monthly 105 call"),
    ("ladder", {"tranches": 4, "put roll": 2, "roll day": 10}, (0, 0, 0), BAND),
    ("gates", {"put gate": 9, "call gate": 3, "put strike": 2}, (0, 0, 1), BAND),
]


@pytest.mark.parametrize(("name", "sizes", "own", "legs"), STANDING, ids=[name for name, *_ in STANDING])
def test_standing_studies(name: str, sizes: dict[str, int], own: tuple[int, ...], legs: str) -> None:
    study = read_study(FOLDER / f"{name}.toml")
    assert study.histories == ("demo",)
    assert {axis.name: len(axis.values) for axis in study.axes} == sizes
    assert study.own_point == own
    assert parse_study(study_to_toml(study)) == study
    # the reader's own is the band of the demo, or one of months where all are of months
    (mine,) = Expansion(study).many([own])
    assert describe_legs(mine.overlay.legs) == legs
    assert (mine.volatility.quote, mine.volatility.smile.name) == ("variance swap", "index")
    assert len(points(study)) == np.prod(list(sizes.values()))


def test_standing_studies_are_all_tested_and_go_along_in_the_package() -> None:
    assert {path.stem for path in FOLDER.glob("*.toml")} == {name for name, *_ in STANDING}


#: The first and the last overlay of those that came with the wider language.
ENDS = {
    "delta_rules": ("monthly 90 put, monthly 101 call", "monthly 40-delta put, monthly 5-delta call"),
    "ladder": (BAND, "half-yearly 95 put in 6 tranches, monthly 110 call"),
    "gates": (
        "quarterly 90 put, monthly 110 call",
        "quarterly 95 put (while vol is above percentile 50 of its last 252 days), "
        "monthly 110 call (while vol is above percentile 50 of its last 252 days)",
    ),
}


@pytest.mark.parametrize("name", ENDS)
def test_from_the_first_overlay_to_the_last(name: str) -> None:
    study = read_study(FOLDER / f"{name}.toml")
    all_of_them = points(study)
    ends = Expansion(study).many([all_of_them[0], all_of_them[-1]])
    assert tuple(describe_legs(one.overlay.legs) for one in ends) == ENDS[name]


@pytest.fixture(scope="module")
def store(tmp_path_factory: pytest.TempPathFactory) -> Path:
    folder = tmp_path_factory.mktemp("histories")
    store_history(folder, "demo", years=4)
    return folder


@pytest.mark.parametrize("name", [name for name, *_ in STANDING])
def test_each_runs_on_an_invented_market(store: Path, name: str) -> None:
    study = read_study(FOLDER / f"{name}.toml")
    plan = plan_study(study, store=store)
    rows = run_plan(plan)
    assert plan.overlays == len(points(study))
    for figure in FIGURES:
        assert np.isfinite(rows.columns[figure].astype(np.float64)).all(), figure
    # no two of them come to the same
    returns = rows.columns["annual_return"]
    assert len(np.unique(returns)) == plan.overlays
