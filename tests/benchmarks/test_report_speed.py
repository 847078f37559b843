"""Where the time of a report goes: a replay of 20 years to the finished page, stage by stage.

Rung: measurement; nothing is asserted in seconds. Run with ``-s`` to see it.
"""

from __future__ import annotations

import time
from pathlib import Path

from backtest import Market
from data_loaders import load_history
from data_loaders.demo_market import write_demo_market
from studies.answer_folder import _write_pictures
from studies.demo import DEMO_OVERLAY
from studies.findings import find
from studies.overlay_files import parse_overlay
from studies.page import build_report
from studies.replay_history import answer
from studies.report import RESAMPLES, infer, make_report
from studies.tables_csv import write_tables

MANY = 10_000


def test_where_the_time_goes(tmp_path: Path) -> None:
    files = write_demo_market(tmp_path)
    history = load_history(prices=files.prices, vol=files.vol, dividends=files.dividends, rates=files.rates)
    frame = history.frame.loc["2003-12-19":]  # 20 years from a quarterly roll day on
    agreed = parse_overlay(DEMO_OVERLAY, file="demo.toml")
    spent: dict[str, float] = {}
    clock = time.perf_counter()

    def done(stage: str) -> None:
        nonlocal clock
        spent[stage] = time.perf_counter() - clock
        clock = time.perf_counter()

    found = answer(Market.from_frame(frame), agreed.overlay, volatility=agreed.volatility)
    done("replay, mixes, smile ladder")
    findings = find(found)
    done("falls, periods, ledger, roll days, break-evens")
    inference = infer(found, seed=1, resamples=RESAMPLES)
    done(f"{RESAMPLES:,} resamples of {len(found.replay):,} days, 6 comparisons")
    page = build_report(found, findings, inference, history="demo", how_to_run="rollband")
    done("page with 15 charts")
    _write_pictures(found, tmp_path)
    done("three PNG files")
    report = make_report(found, resamples=100)
    clock = time.perf_counter()
    write_tables(report, tmp_path / "tables")
    done("CSV tables")
    total = sum(spent.values())
    infer(found, seed=1, resamples=MANY)
    done(f"(apart: {MANY:,} resamples)")
    print("\n" + "\n".join(f"{seconds:6.2f} s  {stage}" for stage, seconds in spent.items()))
    print(f"{total:6.2f} s  together")
    assert page.count("<svg") >= 12
    assert inference.resamples == RESAMPLES
