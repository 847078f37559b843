"""Problems of how a file is written, and files that are meant to do harm: a clear sentence, soon, in little memory.

Rung: identity (files of a few lines, outcomes worked out by hand) and behaviour (time and memory of harmful files).
"""

from __future__ import annotations

import gzip
import json
import subprocess
import sys
import zipfile
from datetime import date
from pathlib import Path

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest

from data_loaders import DataProblems, ReadingError, dates, load_histories, load_history, readings, sources
from tests.data_loaders.dialect_cases import DIALECT_CASES, LONG
from tests.data_loaders.problem_case import PRICES, Case, check, problems_of, write

MIB = 1 << 20


@pytest.mark.parametrize("case", DIALECT_CASES, ids=lambda case: case.code)
def test_problem_is_the_only_one_and_says_where_and_what(case: Case, tmp_path: Path) -> None:
    check(case, tmp_path)


def test_a_row_of_a_file_without_lines_is_called_a_row(tmp_path: Path) -> None:
    pq.write_table(pa.table({"date": ["2020-01-02", "soon"], "close": [1.0, 2.0]}), tmp_path / "prices.csv")
    with pytest.raises(DataProblems) as caught:
        load_history(prices=tmp_path / "prices.csv")
    assert str(caught.value.problems[0]).startswith("prices.csv, row 2, column date: 'soon' is not a date")


def test_a_row_without_a_symbol_cannot_be_given_to_one(tmp_path: Path) -> None:
    paths = write(tmp_path, {"prices": LONG.replace("2020-01-03,XYZ", "2020-01-03,")})
    with pytest.raises(DataProblems) as caught:
        load_histories(**paths, readings=readings(symbol_column="ticker"))
    (problem,) = caught.value.problems
    assert (problem.code, problem.line, problem.column) == ("missing-symbol", 5, "ticker")
    assert problem.message == "the row has no symbol, as 1 in all. Put it in, or remove the row."


@pytest.mark.parametrize(("packed", "how"), [(False, ""), (True, " when it is unpacked")])
def test_too_large_a_file(packed: bool, how: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(sources, "LARGEST_FILE", 4 * MIB)
    data = b"date,close\n" + b"2020-01-02,12345.6789\n" * 300_000
    (problem,) = problems_of(tmp_path, {"prices": gzip.compress(data) if packed else data})
    assert problem.code == "file-too-large"
    size = "more than 4 MiB" if packed else "6.3 MiB"
    assert problem.message == (
        f"the file holds {size}{how}; at most 4 MiB can be read. Split it, by years or by symbols, and load the parts."
    )


# ---------------------------------------------------------------- harm


def in_little_memory(path: Path, limit: int) -> tuple[str, float]:
    """The code of the one problem and the seconds it took, in a process of its own that may not grow by more bytes."""
    program = f"""
import json, resource, sys, time
from pathlib import Path
from data_loaders import DataProblems, load_history
before = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
started = time.perf_counter()
try:
    load_history(prices=Path({str(path)!r}))
    code = "loaded"
except DataProblems as problems:
    (code,) = problems.totals
grown = (resource.getrusage(resource.RUSAGE_SELF).ru_maxrss - before) * 1024
json.dump([code, time.perf_counter() - started, grown], sys.stdout)
"""
    ran = subprocess.run([sys.executable, "-c", program], capture_output=True, text=True, check=True, timeout=120)
    code, seconds, grown = json.loads(ran.stdout)
    assert grown < limit
    return code, seconds


def test_a_line_of_two_gigabytes(tmp_path: Path) -> None:
    path = tmp_path / "p.csv"
    with path.open("wb") as file:
        file.write(b"date,close\n2020-01-02,")
        file.truncate(2 << 30)  # zeros that take no room on the disk
    assert in_little_memory(path, 64 * MIB) == ("file-too-large", pytest.approx(0, abs=5))


def test_a_line_of_half_a_gigabyte(tmp_path: Path) -> None:
    path = tmp_path / "p.csv"
    with path.open("wb") as file:
        for _ in range(512):
            file.write(b"1" * MIB)
    assert in_little_memory(path, 64 * MIB) == ("line-too-long", pytest.approx(0, abs=5))


def test_zeros_of_a_gigabyte(tmp_path: Path) -> None:
    path = tmp_path / "p.csv"
    path.touch()
    with path.open("r+b") as file:
        file.truncate(1 << 30)
    assert in_little_memory(path, 64 * MIB) == ("binary-file", pytest.approx(0, abs=5))


def test_an_archive_that_unpacks_to_a_gigabyte(tmp_path: Path) -> None:
    path = tmp_path / "p.csv"
    row = b"2020-01-02,100.00\n" * 60_000
    with zipfile.ZipFile(path, "w", zipfile.ZIP_DEFLATED) as archive, archive.open("p.csv", "w") as file:
        for _ in range(1000):
            file.write(row)
    assert in_little_memory(path, 700 * MIB) == ("grows-too-much", pytest.approx(0, abs=20))


def test_text_that_stands_for_a_terabyte_in_parquet(tmp_path: Path) -> None:
    path = tmp_path / "p.parquet"
    million = 1_000_000
    text = pa.DictionaryArray.from_arrays(pa.array(np.zeros(million, dtype=np.int32)), pa.array(["x" * million]))
    pq.write_table(pa.table({"date": text, "close": pa.array(np.ones(million))}), path)
    assert path.stat().st_size < MIB
    assert in_little_memory(path, 400 * MIB) == ("file-too-large", pytest.approx(0, abs=20))


# ---------------------------------------------------------------- options


@pytest.mark.parametrize(
    ("options", "option", "says"),
    [
        ({"columns": ["close"]}, "--map", "'close' has to be ROLE=NAME, for example close=Schluss or vol.vol=IV"),
        ({"columns": ["close="]}, "--map", "has to be ROLE=NAME"),
        ({"columns": ["fx.rate=X"]}, "--map", "there is no file 'fx'; it is one of prices, vol, dividends, rates"),
        ({"columns": ["vol=IV"]}, "--map", "no 'vol' (of the vol file it would be vol.vol=...)"),
        ({"columns": ["vol.last=IV"]}, "--map", "the vol file has date, vol, or a tenor in days such as 30, no 'last'"),
        ({"columns": ["close=A", "close=B"]}, "--map", "'close' of the prices file is already 'A'"),
        ({"columns": ["close=A", "open=A"]}, "--map", "'A' of the prices file is already its 'close'"),
        ({"date_formats": ["DD/YYYY/MM"]}, "--date-format", "'DD/YYYY/MM' is no form of dates"),
        ({"date_formats": ["%d/%q"]}, "--date-format", "is no form of dates"),
        ({"date_formats": ["ISO", "DD/MM/YYYY"]}, "--date-format", "'DD/MM/YYYY': it is given twice"),
        ({"date_formats": ["fx=ISO"]}, "--date-format", "there is no file 'fx'"),
        ({"decimals": ["vol=comma", "vol=point"]}, "--decimal", "'vol=point': it is given twice for vol"),
        ({"decimals": ["dot"]}, "--decimal", "the decimal mark is 'point' or 'comma', not 'dot'"),
    ],
)
def test_options_that_make_no_sense(options: dict[str, list[str]], option: str, says: str) -> None:
    with pytest.raises(ReadingError) as caught:
        readings(**options)  # type: ignore[arg-type]
    assert caught.value.option == option
    assert says in str(caught.value)


def test_a_column_of_symbols_without_a_symbol_is_for_many_histories(tmp_path: Path) -> None:
    with pytest.raises(ValueError, match="a column of symbols without a symbol is for load_histories"):
        load_history(**write(tmp_path, {"prices": PRICES}), readings=readings(symbol_column="ticker"))


def test_a_column_is_the_one_that_is_spelt_so(tmp_path: Path) -> None:
    paths = write(tmp_path, {"prices": "date,x,X\n2020-01-02,1,2\n"})
    assert load_history(**paths, readings=readings(columns=["close=X"])).frame["close"].tolist() == [2]
    assert load_history(**paths, readings=readings(columns=["close=x"])).frame["close"].tolist() == [1]


# ---------------------------------------------------------------- days that are still to come


def test_years_still_to_come_settle_what_a_two_digit_year_is(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    paths = write(tmp_path, {"prices": "date,close\n30/01/20,1\n31/01/20,2\n"})
    # on that day 30/01/20 could not yet be 20 January 2030
    monkeypatch.setattr(dates, "_today", lambda: date(2026, 1, 1))
    history = load_history(**paths)
    assert [str(day.date()) for day in history.frame.index] == ["2020-01-30", "2020-01-31"]
    assert dict(history.sources[0].taken)["dates"].startswith("DD/MM/YY, settled by '30/01/20'")
    monkeypatch.setattr(dates, "_today", lambda: date(2040, 1, 1))
    (problem,) = problems_of(tmp_path, {"prices": paths["prices"].read_bytes()})
    assert problem.code == "date-form-unclear"


def test_a_date_that_has_no_name(tmp_path: Path) -> None:
    days = pa.array([18263, 2_000_000_000], pa.int32()).cast(pa.date32())
    pq.write_table(pa.table({"date": days, "close": [1.0, 2.0]}), tmp_path / "prices.csv")
    with pytest.raises(DataProblems) as caught:
        load_history(prices=tmp_path / "prices.csv")
    (problem,) = caught.value.problems
    assert (problem.code, problem.line) == ("date-out-of-range", 2)
