"""What a history holds: alignment, carrying, units, what was taken for what.

Rung: identity (files of a few lines, outcomes worked out by hand).
"""

from __future__ import annotations

import hashlib
from datetime import date
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from data_loaders import History, Repair, load_history

PRICES = """Date,Open,High,Low,Close,Volume
2020-01-02,99,101,98,100,1000
2020-01-03,100,102,99,101,1100
2020-01-06,101,103,100,102,1200
2020-01-07,102,104,101,103,1300
2020-01-08,103,105,102,104,1400
"""


def load(folder: Path, prices: str = PRICES, **texts: str) -> History:
    paths = {}
    for kind, text in {"prices": prices, **texts}.items():
        paths[kind] = folder / f"{kind}.csv"
        paths[kind].write_text(text)
    return load_history(**paths)


def test_frame_of_prices_alone(tmp_path: Path) -> None:
    history = load(tmp_path)
    index = pd.DatetimeIndex(
        ["2020-01-02", "2020-01-03", "2020-01-06", "2020-01-07", "2020-01-08"], dtype="datetime64[ns]", name="date"
    )
    expected = pd.DataFrame(
        {
            "close": [100.0, 101, 102, 103, 104],
            "open": [99.0, 100, 101, 102, 103],
            "high": [101.0, 102, 103, 104, 105],
            "low": [98.0, 99, 100, 101, 102],
            "volume": [1000.0, 1100, 1200, 1300, 1400],
        },
        index=index,
    )
    pd.testing.assert_frame_equal(history.frame, expected)
    assert history.usable_from == date(2020, 1, 2)
    assert history.repairs == ()
    assert history.notes == ()
    assert history.vol_columns == ()
    assert history.schema_version == 1


def test_sources_name_file_hash_rows_and_columns(tmp_path: Path) -> None:
    vol = "date,open,close\n2019-12-31,20,21\n2020-01-02,20,22\n2020-01-06,20,23\n"
    history = load(tmp_path, vol=vol)
    prices, vols = history.sources
    assert (prices.kind, prices.file, prices.rows) == ("prices", "prices.csv", 5)
    assert prices.sha256 == hashlib.sha256(PRICES.encode()).hexdigest()
    assert (prices.first, prices.last, prices.unit) == (date(2020, 1, 2), date(2020, 1, 8), None)
    assert prices.columns[:2] == (("date", "Date"), ("close", "Close"))
    assert (vols.kind, vols.sha256, vols.unit) == ("vol", hashlib.sha256(vol.encode()).hexdigest(), "percent")
    assert (vols.first, vols.columns) == (date(2019, 12, 31), (("date", "date"), ("vol", "close")))
    assert "vol.csv: column 'close' was taken as the vol." in history.notes
    assert "vol.csv: not used: column 'open'." in history.notes


def test_values_are_carried_forward_five_days_and_never_back(tmp_path: Path) -> None:
    prices = "date,close\n" + "".join(f"2020-01-{d:02d},100\n" for d in (1, 2, 3, 6, 7, 8, 9))
    # the value of Saturday the 4th serves Monday the 6th, and the 9th is 5 days after
    history = load(tmp_path, prices, vol="date,vol\n2020-01-02,20\n2020-01-04,30\n")
    np.testing.assert_array_equal(history.frame["vol"], [np.nan, 0.2, 0.2, 0.3, 0.3, 0.3, 0.3])
    assert history.usable_from == date(2020, 1, 2)
    assert history.notes == (
        "vol.csv: 1 vol date is not a trading day of the price file (2020-01-04); "
        "a value there serves only a next trading day without its own.",
        "vol.csv: 5 trading days without a vol of their own "
        "(2020-01-03, 2020-01-06, 2020-01-07, 2020-01-08, 2020-01-09) take the last one, at most 5 calendar days old.",
        "vol.csv: vol starts on 2020-01-02; 1 earlier trading day without one.",
    )


def test_value_from_before_the_prices_serves_the_first_day(tmp_path: Path) -> None:
    history = load(tmp_path, rates="date,rate\n2019-12-31,1.5\n2020-01-03,1.75\n2020-01-06,-0.25\n")
    np.testing.assert_allclose(history.frame["rate"], [0.015, 0.0175, -0.0025, -0.0025, -0.0025], rtol=1e-15)
    assert (
        "rates.csv: 1 rate date before 2020-01-02 or after 2020-01-08, outside the prices, not used." in history.notes
    )


def test_closed_days_without_prices_are_no_gap(tmp_path: Path) -> None:
    prices = "date,close\n2001-09-07,100\n2001-09-10,100\n2001-09-17,88\n2001-09-18,89\n"
    history = load(tmp_path, prices, vol="date,vol\n2001-09-07,30\n2001-09-10,31\n2001-09-17,41\n2001-09-18,38\n")
    assert history.frame["vol"].tolist() == [0.30, 0.31, 0.41, 0.38]
    assert len(history.notes) == 0


def test_needed_to_limits_the_gap_check_only(tmp_path: Path) -> None:
    prices = "date,close\n" + "".join(f"2020-01-{d:02d},100\n" for d in (2, 3, 6, 7, 8, 9, 10))
    (tmp_path / "p.csv").write_text(prices)
    (tmp_path / "v.csv").write_text("date,vol\n2020-01-02,20\n2020-01-03,21\n")
    history = load_history(prices=tmp_path / "p.csv", vol=tmp_path / "v.csv", needed_to=date(2020, 1, 8))
    np.testing.assert_array_equal(history.frame["vol"], [0.2, 0.21, 0.21, 0.21, 0.21, np.nan, np.nan])
    assert history.notes[-1] == "v.csv: vol serves up to 2020-01-08; 2 later trading days without one."


def test_span_keeps_only_its_prices(tmp_path: Path) -> None:
    (tmp_path / "p.csv").write_text(PRICES)
    (tmp_path / "v.csv").write_text("date,vol\n2020-01-02,20\n2020-01-03,21\n2020-01-06,22\n")
    history = load_history(
        prices=tmp_path / "p.csv", vol=tmp_path / "v.csv", first_day=date(2020, 1, 3), last_day=date(2020, 1, 7)
    )
    assert history.frame.index.strftime("%d").tolist() == ["03", "06", "07"]
    assert history.frame["vol"].tolist() == [0.21, 0.22, 0.22]
    assert history.sources[0].rows == 5


def test_blank_vols_and_rates_are_absent_and_counted(tmp_path: Path) -> None:
    history = load(
        tmp_path,
        vol="date,vol\n2020-01-02,20\n2020-01-03,\n2020-01-06,n/a\n2020-01-07,24\n",
        rates="observation_date,X3MO\n2020-01-02,1\n2020-01-03,.\n2020-01-06,NaN\n2020-01-07,2\n",
    )
    np.testing.assert_array_equal(history.frame["vol"], [0.2, 0.2, 0.2, 0.24, 0.24])
    np.testing.assert_array_equal(history.frame["rate"], [0.01, 0.01, 0.01, 0.02, 0.02])
    assert "vol.csv: column 'vol' has no value in 2 rows." in history.notes
    assert "rates.csv: column 'X3MO' has no value in 2 rows." in history.notes
    assert "rates.csv: its only other column, 'X3MO', was taken as the rate." in history.notes


def test_tenor_columns_are_sorted_by_days_and_carried_one_by_one(tmp_path: Path) -> None:
    history = load(
        tmp_path, vol="180d,Date,vol_93,30\n0.3,2020-01-02,0.25,0.2\n,2020-01-03,0.26,0.21\n0.31,2020-01-06,,0.22\n"
    )
    assert history.vol_columns == ("vol_30", "vol_93", "vol_180")
    assert history.frame["vol_30"].tolist() == [0.2, 0.21, 0.22, 0.22, 0.22]
    assert history.frame["vol_93"].tolist() == [0.25, 0.26, 0.26, 0.26, 0.26]
    assert history.frame["vol_180"].tolist() == [0.3, 0.3, 0.31, 0.31, 0.31]
    assert history.repairs == ()


def test_percent_becomes_decimal_and_is_recorded(tmp_path: Path) -> None:
    history = load(tmp_path, vol="date,vol\n2020-01-02,150.19\n2020-01-06,17.24\n")
    assert history.frame["vol"].iloc[0] == 150.19 / 100
    assert history.repairs == (
        Repair(file="vol.csv", kind="unit", rows=2, what="vol: percent a year turned into decimals"),
    )


@pytest.mark.parametrize(("unit", "expected"), [("percent", 0.018), ("decimal", 1.8)])
def test_unit_given_where_it_is_not_plain(tmp_path: Path, unit: str, expected: float) -> None:
    (tmp_path / "p.csv").write_text(PRICES)
    (tmp_path / "v.csv").write_text("date,vol\n2020-01-02,1.8\n2020-01-06,1.8\n")
    history = load_history(prices=tmp_path / "p.csv", vol=tmp_path / "v.csv", vol_unit=unit)  # type: ignore[arg-type]
    np.testing.assert_allclose(history.frame["vol"], expected, rtol=1e-15)


def test_unit_asked_for_against_the_look_of_the_values_is_remarked_on(tmp_path: Path) -> None:
    (tmp_path / "p.csv").write_text(PRICES)
    (tmp_path / "v.csv").write_text("date,vol\n2020-01-02,0.18\n2020-01-06,0.2\n")
    history = load_history(prices=tmp_path / "p.csv", vol=tmp_path / "v.csv", vol_unit="percent")
    assert history.frame["vol"].iloc[0] == 0.18 / 100
    assert "v.csv: the vols were read as percent, as asked, but look like decimal (median 0.19)." in history.notes


def test_newest_first_is_sorted_and_recorded(tmp_path: Path) -> None:
    head, *rows = PRICES.splitlines()
    history = load(tmp_path, "\n".join([head, *reversed(rows)]))
    pd.testing.assert_frame_equal(history.frame, load(tmp_path).frame)
    assert history.repairs == (
        Repair(file="prices.csv", kind="sorted", rows=4, what="rows were newest first; sorted by date, oldest first"),
    )
    mixed = "\n".join([head, rows[1], rows[0], *rows[2:]])
    assert load(tmp_path, mixed).repairs[0].what == "rows were out of order; sorted by date, oldest first"
    assert load(tmp_path, mixed).repairs[0].rows == 2


def test_dividends_of_a_file_and_of_a_column_agree(tmp_path: Path) -> None:
    file = load(tmp_path, dividends="Ex-Date,Amount\n2020-01-07,0.5\n2020-01-03,0.0\n2019-05-01,9\n2021-05-01,9\n")
    assert file.frame["dividend"].tolist() == [0, 0, 0, 0.5, 0]
    assert (
        "dividends.csv: 2 dividends before 2020-01-02 or after 2020-01-08, outside the prices, not used." in file.notes
    )
    rows = [f"{row}," for row in PRICES.splitlines()]
    rows[0] += "Dividends"
    rows[4] += "0.5"
    column = load(tmp_path, "\n".join(rows))
    assert column.frame["dividend"].tolist() == [0, 0, 0, 0.5, 0]
    assert list(column.frame.columns) == ["close", "open", "high", "low", "volume", "dividend"]
    assert "dividend" not in load(tmp_path).frame.columns


def test_missing_optional_prices_are_absent_and_counted(tmp_path: Path) -> None:
    history = load(tmp_path, PRICES.replace("01-02,99,", "01-02,,").replace("1400", ""))
    assert np.isnan(history.frame["open"].iloc[0])
    assert np.isnan(history.frame["volume"].iloc[-1])
    assert history.notes == (
        "prices.csv: column 'Open' has no value in 1 row.",
        "prices.csv: column 'Volume' has no value in 1 row.",
    )


def test_order_of_columns(tmp_path: Path) -> None:
    history = load(
        tmp_path,
        vol="date,30\n2020-01-02,20\n2020-01-06,20\n",
        rates="date,rate\n2020-01-02,1\n2020-01-06,1\n",
        dividends="date,dividend\n2020-01-02,1\n",
    )
    assert list(history.frame.columns) == ["close", "open", "high", "low", "volume", "dividend", "rate", "vol_30"]
    assert (history.frame.dtypes == np.float64).all()


@pytest.mark.parametrize("name", ["Close", "PX_LAST", "price", "Settle", "Close/Last", " closing price "])
def test_synonyms_of_the_close(tmp_path: Path, name: str) -> None:
    history = load(tmp_path, f"Trade Date,{name},adj_close,ticker\n2020-01-02,100,50,X\n")
    assert history.frame["close"].tolist() == [100.0]
    assert "prices.csv: column 'Trade Date' was taken as the date." in history.notes
    assert "prices.csv: not used: columns 'adj_close', 'ticker'." in history.notes


def test_exact_name_goes_before_synonyms(tmp_path: Path) -> None:
    history = load(tmp_path, "date,last,close\n2020-01-02,1,2\n")
    assert history.frame["close"].tolist() == [2.0]
    assert history.notes == ("prices.csv: not used: column 'last'.",)


@pytest.mark.parametrize(
    "text",
    [
        "\ufeff" + PRICES,
        PRICES.replace("\n", "\r\n"),
        PRICES.replace("\n", "\r"),
        PRICES.rstrip(),
        PRICES.replace(",", " , "),
        "".join('"' + line.replace(",", '","') + '"\n' for line in PRICES.splitlines()),
        PRICES.replace("-02,", "-02 00:00:00,").replace("-03,", "-03T00:00,").replace("-06,", "-06T00:00:00.000,"),
    ],
    ids=["BOM", "CRLF", "CR", "no last line break", "spaces", "quoted", "midnight"],
)
def test_same_content_in_other_clothes(tmp_path: Path, text: str) -> None:
    (tmp_path / "prices.csv").write_bytes(text.encode())
    history = load_history(prices=tmp_path / "prices.csv")
    pd.testing.assert_frame_equal(history.frame, load(tmp_path).frame)


def test_blank_rows_are_left_out_and_counted(tmp_path: Path) -> None:
    text = "\n\n" + PRICES.replace("2020-01-06", "\n,,,,,\n2020-01-06") + "\n,,\n"
    history = load(tmp_path, text)
    pd.testing.assert_frame_equal(history.frame, load(tmp_path).frame)
    assert history.notes == ("prices.csv: 4 blank rows left out.",)


def test_rates_that_may_be_decimals_are_remarked_on(tmp_path: Path) -> None:
    history = load(tmp_path, rates="date,rate\n2020-01-02,0.05\n2020-01-06,0.052\n")
    assert (
        "rates.csv: the largest rate is 0.052 and was read as 0.052 percent a year; "
        "if the file holds decimals, multiply them by 100." in history.notes
    )
    assert history.frame["rate"].iloc[0] == pytest.approx(0.0005, rel=1e-15)


def test_equality_looks_at_frame_and_facts(tmp_path: Path) -> None:
    assert load(tmp_path) == load(tmp_path)
    assert load(tmp_path) != load(tmp_path, PRICES.replace(",104,1400", ",104.5,1400"))
    assert load(tmp_path) != "history"
    with pytest.raises(TypeError, match="unhashable"):
        hash(load(tmp_path))
