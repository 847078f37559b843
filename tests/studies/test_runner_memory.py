"""A large study needs little memory, however many resamples: what is held is one batch, not the study.

Rung: behaviour (the most that a process of its own has held).
"""

from __future__ import annotations

import subprocess
import sys
from pathlib import Path

import pytest

from .small_studies import axis, grid_text, store_history

RUN = """
import resource, sys
from pathlib import Path
from studies.runner import plan_study, run_plan
from studies.study import read_study
plan = plan_study(read_study(Path("which.toml")), store=Path("."))
assert plan.overlays == 10_000, plan.overlays
assert plan.groups[0].span.days > 5_000, plan.groups[0].span.days
run_plan(plan)
print(resource.getrusage(resource.RUSAGE_SELF).ru_maxrss)
"""


@pytest.mark.slow
@pytest.mark.parametrize("resamples", [0, 500])
def test_ten_thousand_overlays_of_five_thousand_days(tmp_path: Path, resamples: int) -> None:
    store_history(tmp_path, "one", first_year=1999, years=20)
    ratios = axis("ratio", "leg.2.ratio", "{ from = 0.01, to = 0.25, step = 0.01 }")
    (tmp_path / "which.toml").write_text(grid_text(20, 20, head=f"resamples = {resamples}", tail=ratios))
    ran = subprocess.run(
        [sys.executable, "-c", RUN], cwd=tmp_path, capture_output=True, text=True, timeout=600, check=True
    )
    # 0.28 and 0.35 GB when this was written, of which 0.15 are the libraries
    assert int(ran.stdout) * 1024 < 600e6
