"""The demo market once for all, and no pictures: drawing them takes longer than everything else together."""

from __future__ import annotations

from typing import Any

import pytest

from data_loaders import History, load_history
from data_loaders.demo_market import write_demo_market
from studies.replay_history import Answer
from studies.report import Report, make_report


@pytest.fixture(autouse=True)
def _no_pictures(monkeypatch: pytest.MonkeyPatch) -> None:
    without_pictures(monkeypatch)


def without_pictures(monkeypatch: pytest.MonkeyPatch) -> None:
    """Leave out pictures, tables and page, and draw few histories; all of it is looked at in tests of its own."""

    def quick(found: Answer, *, resamples: int, **rest: Any) -> Report:
        return make_report(found, resamples=min(resamples, 100), **rest)

    monkeypatch.setattr("studies.answer_folder._write_pictures", lambda found, folder: None)
    monkeypatch.setattr("studies.answer_folder.make_report", quick)
    monkeypatch.setattr("studies.tables_csv.write_tables", lambda report, folder: folder.mkdir())
    monkeypatch.setattr("studies.page.build_report", lambda *parts, **named: "page")


@pytest.fixture(scope="session")
def demo_history(tmp_path_factory: pytest.TempPathFactory) -> History:
    """The invented market of the demo, through its CSV files."""
    files = write_demo_market(tmp_path_factory.mktemp("demo_market"))
    return load_history(prices=files.prices, vol=files.vol, dividends=files.dividends, rates=files.rates)
