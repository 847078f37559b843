"""A study of 10,000 overlays against the least that it could take.

Rung: measurement. The floor is bare numpy pricing of its 200 legs over all days, and for each overlay one pass of sum,
ratio, running maximum and standard deviation over its days. Both sides work on one core; seconds are printed, ratios
asserted. Run with ``-s``.
"""

from __future__ import annotations

import resource
import subprocess
import sys
import time
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from scipy.special import ndtr

from data_loaders import load_history
from data_loaders.demo_market import write_demo_market
from data_loaders.store import write_history
from studies.local_workers import LocalWorkers
from studies.runner import plan_study, run_plan
from studies.study import Study, parse_study

LEGS = 100
STUDY = f"""
question = "Which strikes?"
histories = ["demo"]
resamples = 0
[[overlay.leg]]
position = "long"
right = "put"
roll = "quarter"
strike = {{ percent_of_spot = 95 }}
[[overlay.leg]]
position = "short"
right = "call"
roll = "month"
strike = {{ percent_of_spot = 110 }}
[overlay.volatility]
quote = "variance swap"
[[axis]]
name = "put strike"
field = "leg.1.strike.percent_of_spot"
values = {{ from = {100 - LEGS / 4}, to = 99.75, step = 0.25 }}
[[axis]]
name = "call strike"
field = "leg.2.strike.percent_of_spot"
values = {{ from = 100.25, to = {100 + LEGS / 4}, step = 0.25 }}
[[axis]]
name = "days"
field = "window"
values = [{{ from = "2003-12-19" }}]
"""


@pytest.fixture(scope="module")
def store(tmp_path_factory: pytest.TempPathFactory) -> Path:
    folder = tmp_path_factory.mktemp("store")
    files = write_demo_market(folder / "csv")
    history = load_history(prices=files.prices, vol=files.vol, dividends=files.dividends, rates=files.rates)
    write_history(history, folder, "demo")
    return folder


@pytest.fixture(scope="module")
def study() -> Study:
    return parse_study(STUDY)


def bare_pricing(days: int) -> None:
    """Black's formula for 200 strikes on every day, handed forward, strike and total deviation."""
    rng = np.random.default_rng(1)
    forward = 100 * np.exp(np.cumsum(rng.normal(0, 0.01, days)))
    stdev = np.full(days, 0.1)
    for strike in np.linspace(75, 125, 2 * LEGS):
        d1 = np.log(forward / strike) / stdev + 0.5 * stdev
        forward * ndtr(d1) - strike * ndtr(d1 - stdev)


def bare_passes(paths: np.ndarray, overlays: int) -> None:
    for number in range(overlays):
        path = paths[number % len(paths)]
        path.sum()
        ratio = path[1:] / path[:-1]
        np.maximum.accumulate(path)
        ratio.std()


def seconds(function, rounds: int = 3) -> float:
    best = float("inf")
    for _ in range(rounds):
        began = time.perf_counter()
        function()
        best = min(best, time.perf_counter() - began)
    return best


def test_ten_thousand_overlays_against_the_floor(study: Study, store: Path) -> None:
    plan = plan_study(study, store=store)
    assert plan.overlays == LEGS * LEGS
    days = plan.groups[0].span.days + 1
    rng = np.random.default_rng(2)
    paths = np.cumprod(1 + rng.normal(0, 0.01, (64, days)), axis=1)
    floor = full = float("inf")
    for _ in range(3):  # in turns, so that a noisy machine slows both sides
        floor = min(floor, seconds(lambda: (bare_pricing(days), bare_passes(paths, plan.overlays)), rounds=1))
        full = min(full, seconds(lambda: run_plan(plan), rounds=1))
    print(
        f"\n{plan.overlays:,} overlays, {days:,} days: {full:.2f} s, the floor {floor:.2f} s: {full / floor:.2f} times"
    )
    assert full / floor <= 3


def test_time_grows_with_overlays_no_faster_than_their_number(study: Study, store: Path) -> None:
    put, *rest = study.axes
    quarter = replace(study, axes=(replace(put, values=put.values[::4], labels=put.labels[::4]), *rest))
    small, large = (plan_study(one, store=store) for one in (quarter, study))
    assert large.overlays == 4 * small.overlays
    times = {one.overlays: float("inf") for one in (small, large)}
    for _ in range(3):
        for one in (small, large):
            times[one.overlays] = min(times[one.overlays], seconds(lambda one=one: run_plan(one), rounds=1))
    growth = times[large.overlays] / times[small.overlays]
    print(f"\n4 times the overlays take {growth:.2f} times as long")
    assert growth <= 4.4  # a tenth for the noise of the machine


@pytest.mark.parametrize("resamples", [0, 500])
def test_memory_stays_under_a_gibibyte(store: Path, tmp_path: Path, resamples: int) -> None:
    file = tmp_path / "study.toml"
    file.write_text(STUDY.replace("resamples = 0", f"resamples = {resamples}"))
    command = [
        sys.executable,
        "-c",
        "from studies.cli import main; main()",
        "study",
        str(file),
        "--store",
        str(store),
        "--workers",
        "1",
    ]
    subprocess.run([*command, "--out", str(tmp_path / "out")], check=True, capture_output=True, cwd=tmp_path)
    peak = resource.getrusage(resource.RUSAGE_CHILDREN).ru_maxrss / 2**20
    print(f"\n10,000 overlays with {resamples} resamples, page and all: at most {peak:.2f} GiB")
    assert peak < 1


def test_a_second_worker(store: Path) -> None:
    # a study long enough for the start of the processes, about a second, not to count
    text = STUDY.replace("step = 0.25", "step = 0.0625")
    plan = plan_study(parse_study(text.replace("100.25,", "100.0625,").replace("99.75,", "99.9375,")), store=store)
    # one worker process against two: a single worker is otherwise this process, which need not be started
    times = {1: float("inf"), 2: float("inf")}
    for _ in range(2):
        for workers in times:
            with LocalWorkers(workers, modules=["studies.jobs"]) as executor:
                began = time.perf_counter()
                run_plan(plan, executor=executor)
                times[workers] = min(times[workers], time.perf_counter() - began)
    gain = times[1] / times[2]
    print(f"\n{plan.overlays:,} overlays: one worker {times[1]:.1f} s, two {times[2]:.1f} s: {gain:.2f} times")
    assert gain >= 1.7
