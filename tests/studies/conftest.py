"""The demo market once for all, and no pictures: drawing them takes longer than everything else together."""

from __future__ import annotations

import pytest

from data_loaders import History, load_history
from data_loaders.demo_market import write_demo_market


@pytest.fixture(autouse=True)
def _no_pictures(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("studies.replay_history._write_pictures", lambda found, folder: None)


@pytest.fixture(scope="session")
def demo_history(tmp_path_factory: pytest.TempPathFactory) -> History:
    """The invented market of the demo, through its CSV files."""
    files = write_demo_market(tmp_path_factory.mktemp("demo_market"))
    return load_history(prices=files.prices, vol=files.vol, dividends=files.dividends, rates=files.rates)
