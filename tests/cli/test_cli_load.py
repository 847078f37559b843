"""Loading files of any dialect from the command line: what is told, what is remembered, many symbols at once.

Rung: behaviour.
"""

from __future__ import annotations

import json
import re
from pathlib import Path

import pyarrow.parquet as pq
import pytest

from data_loaders import history_names, read_history
from tests.cli.conftest import Run

GERMAN = "Kurse eines Index\n\nDatum;Schluss;Adj. Schluss\n" + "".join(
    f"{day:02d}.01.2020;1.{200 + day},5;600\n" for day in (13, 14, 15, 16, 17)
)
LONG = "date,ticker,close\n" + "".join(
    f"2020-01-{day},{symbol},{price + day}\n"
    for symbol, price in (("AAA", 100), ("../b", 200), ("BRK.B", 300))
    for day in (15, 13, 14)
)


@pytest.fixture
def german(home: Path) -> str:
    (home / "kurse.csv").write_text(GERMAN, encoding="cp1252")
    return "kurse.csv"


@pytest.fixture
def long(home: Path) -> str:
    (home / "long.csv").write_text(LONG)
    return "long.csv"


def test_what_was_taken_for_what_is_told_before_the_counts(rollband: Run, german: str) -> None:
    ran = rollband("load", "dax", "--prices", german, "--map", "date=Datum", "--map", "close=Schluss")
    assert ran.code == 0
    assert ran.out.splitlines()[:6] == [
        "  kurse.csv  text      UTF-8, columns separated by semicolons, decimal comma (settled by '1.213,5'), "
        "point between thousands",
        "             dates     DD.MM.YYYY, settled by '13.01.2020'",
        "             columns   date from 'Datum', close from 'Schluss'",
        "             not used  'Adj. Schluss' (adjusted for splits or dividends; prices are those traded)",
        "             left out  1 line above the header ('Kurse eines Index')",
        "  prices: 5 rows, 2020-01-13 to 2020-01-17, from kurse.csv",
    ]
    # what the table says is not said again
    assert "note" not in ran.out
    assert read_history(Path("histories"), "dax").frame["close"].tolist() == [1213.5, 1214.5, 1215.5, 1216.5, 1217.5]


def test_names_of_columns_are_remembered(rollband: Run, german: str, home: Path) -> None:
    assert rollband("load", "dax", "--prices", german, "--map", "date=Datum", "--map", "close=Schluss").code == 0
    (source,) = read_history(Path("histories"), "dax").sources
    assert source.reading.columns == (("date", "Datum"), ("close", "Schluss"))
    facts = json.loads(pq.read_schema(home / "histories" / "dax.parquet").metadata[b"rollband.history"])
    assert facts["sources"][0]["reading"]["columns"] == [["date", "Datum"], ["close", "Schluss"]]
    (home / german).write_text(GERMAN + "20.01.2020;1.220,5;600\n")
    ran = rollband("load", "dax", "--prices", german, "--append")
    assert (ran.code, ran.err) == (0, "")
    assert "Appended to dax, days: 1 (2020-01-20)" in ran.out
    assert read_history(Path("histories"), "dax").frame["close"].tolist()[-1] == 1220.5


def test_a_date_that_could_be_two_is_asked_about(rollband: Run, home: Path) -> None:
    (home / "p.csv").write_text("date;close\n03/02/2020;1,5\n04/02/2020;1,6\n")
    ran = rollband("load", "x", "--prices", "p.csv")
    assert ran.code == 3
    assert "Say which it is: rollband load ... --date-format DD/MM/YYYY or --date-format MM/DD/YYYY." in ran.err
    assert not (home / "histories").exists()
    assert rollband("load", "x", "--prices", "p.csv", "--date-format", "dd/mm/yyyy").code == 0
    assert str(read_history(Path("histories"), "x").frame.index[0].date()) == "2020-02-03"
    ran = rollband("load", "x", "--prices", "p.csv", "--date-format", "MM/DD/YYYY", "--decimal", "point")
    assert ran.code == 3
    assert "'1,5' is not a number. Write plain numbers with a point as decimal mark" in ran.err


def test_one_symbol_of_many(rollband: Run, long: str) -> None:
    ran = rollband("load", "x", "--prices", long)
    assert ran.code == 3
    assert "--symbol AAA for one of them, or --symbol-column ticker to make a history of each" in ran.err
    ran = rollband("load", "x", "--prices", long, "--symbol", "../b")
    assert ran.code == 0
    assert "prices: 3 rows, 2020-01-13 to 2020-01-15" in ran.out
    assert read_history(Path("histories"), "x").frame["close"].tolist() == [213, 214, 215]
    assert history_names(Path("histories")) == ("x",)


def test_a_history_of_each_symbol_stays_inside_the_store(rollband: Run, long: str, home: Path) -> None:
    ran = rollband("load", "us", "--prices", long, "--symbol-column", "ticker", "--store", "s")
    assert (ran.code, ran.err) == (0, "")
    (odd,) = [name for name in history_names(Path("s")) if name not in ("us-AAA", "us-BRK.B")]
    assert re.fullmatch(r"us-___b-[0-9a-f]{8}", odd)
    assert f"  ../b: 3 days, 2020-01-13 to 2020-01-15, stored as {odd}" in ran.out
    assert "Stored 3 histories in s" in ran.out
    assert "Next: rollband replay" in ran.out
    assert [read_history(Path("s"), name).frame["close"].tolist() for name in ("us-AAA", odd, "us-BRK.B")] == [
        [113, 114, 115], [213, 214, 215], [313, 314, 315],
    ]  # fmt: skip
    (source,) = read_history(Path("s"), odd).sources
    assert (source.rows, source.reading.symbol, source.reading.symbol_column) == (3, "../b", "ticker")
    assert sorted(path.name for path in home.iterdir()) == ["long.csv", "s"]


def test_many_symbols_are_stored_together_or_not_at_all(rollband: Run, long: str, home: Path) -> None:
    (home / long).write_text(LONG.replace("BRK.B,314", "BRK.B,-1").replace("AAA,115", "AAA,nan"))
    ran = rollband("load", "us", "--prices", long, "--symbol-column", "ticker")
    assert ran.code == 3
    assert "2 problems in 1 file; nothing was loaded." not in ran.err  # a cell that is no number comes first
    assert "long.csv, line 2, column close: 'nan' is not a finite number." in ran.err
    (home / long).write_text(LONG.replace("BRK.B,314", "BRK.B,-1").replace("AAA,115", "AAA,-2"))
    ran = rollband("load", "us", "--prices", long, "--symbol-column", "ticker")
    assert ran.code == 3
    assert "2 problems in 1 file; nothing was loaded." in ran.err
    assert "long.csv, symbol AAA, line 2, column close: '-2' is not above 0." in ran.err
    assert "long.csv, symbol BRK.B, line 10, column close: '-1' is not above 0." in ran.err
    assert not (home / "histories").exists()


def test_vols_of_each_symbol_and_rates_for_all(rollband: Run, long: str, home: Path) -> None:
    (home / "v.csv").write_text(
        "date,symbol,vol\n" + "".join(f"2020-01-13,{symbol},{vol}\n" for symbol, vol in (("AAA", 20), ("../b", 30)))
    )
    (home / "r.csv").write_text("date,rate\n2020-01-13,1.5\n")
    (home / "d.csv").write_text("date,symbol,dividend\n2020-01-14,AAA,0.5\n2020-01-15,../b,0.25\n")
    arguments = ("load", "us", "--prices", long, "--symbol-column", "ticker", "--vol", "v.csv", "--rates", "r.csv")
    ran = rollband(*arguments)
    assert ran.code == 3
    assert "v.csv, symbol BRK.B, column symbol: no row has symbol 'BRK.B'." in ran.err
    (home / long).write_text("".join(line for line in LONG.splitlines(keepends=True) if "BRK" not in line))
    assert rollband(*arguments, "--dividends", "d.csv").code == 0
    frame = read_history(Path("histories"), "us-AAA").frame
    assert frame[["vol", "rate", "dividend"]].to_numpy().tolist() == [
        [0.2, 0.015, 0.0], [0.2, 0.015, 0.5], [0.2, 0.015, 0.0],
    ]  # fmt: skip


def test_a_symbol_without_dividends_had_none(rollband: Run, long: str, home: Path) -> None:
    (home / "d.csv").write_text("date,symbol,dividend\n2020-01-14,AAA,0.5\n2020-01-15,../b,0.25\n")
    assert rollband("load", "us", "--prices", long, "--symbol-column", "ticker", "--dividends", "d.csv").code == 0
    assert read_history(Path("histories"), "us-BRK.B").frame["dividend"].tolist() == [0, 0, 0]


@pytest.mark.parametrize(
    ("options", "says"),
    [
        (["--map", "close"], "'close' has to be ROLE=NAME"),
        (["--date-format", "soon"], "'soon' is no form of dates"),
        (["--decimal", "dot"], "the decimal mark is 'point' or 'comma', not 'dot'"),
        (["--symbol", " "], "a symbol is not empty"),
        (["--symbol-column", "ticker", "--append"], "append one symbol at a time"),
    ],
)
def test_options_that_make_no_sense(options: list[str], says: str, rollband: Run, long: str, home: Path) -> None:
    ran = rollband("load", "x", "--prices", long, *options)
    assert ran.code == 2
    assert says in " ".join(ran.err.replace("│", " ").split())
    assert not (home / "histories").exists()


def test_a_long_name_leaves_no_room_for_symbols(rollband: Run, long: str) -> None:
    ran = rollband("load", "x" * 41, "--prices", long, "--symbol-column", "ticker")
    assert ran.code == 2
    assert "it can have at most 40 characters" in " ".join(ran.err.replace("│", " ").split())
