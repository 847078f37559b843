"""Every problem a file can have: code, file, line, column, value and the numbers in its sentence.

Rung: identity (files of a few lines, outcomes worked out by hand).
"""

# ruff: noqa: E501  one case stays on one or two lines, so that the table can be read

from __future__ import annotations

import os
import pickle
from datetime import date
from pathlib import Path

import pytest

from data_loaders import DataProblems, LoadError, load_history
from data_loaders.errors import REASONS
from tests.data_loaders.dialect_cases import DIALECT_CASES, ELSEWHERE
from tests.data_loaders.problem_case import PRICES, VOL, Case, check, problems_of, vol, write

CASES = [
    Case("binary-file", {"prices": b"\xd0\xcf\x11\xe0rest"}, "prices", says=("a spreadsheet workbook of the old kind", "CSV")),
    Case("binary-file", {"prices": b"date,close\n2020-01-02,\x00\n"}, "prices", says=("binary data",)),
    Case("not-utf-8", {"prices": "date,close,é\n2020-01-02,1,\n".encode() + "2020-01-03,2,é\n".encode("latin-1")}, "prices", line=3, says=("0xe9", "UTF-8")),
    Case("not-utf-8", {"prices": b"date,close\n2020-01-02,1\n2020-01-03,2\x81\n"}, "prices", line=3, says=("0x81", "UTF-8")),
    Case("bad-date", {"prices": "date,close\n2020-01-02,1\ncafé,2\n".encode("latin-1")}, "prices", line=3, column="date", value="café"),
    Case("empty-file", {"prices": ""}, "prices", says=("empty", "header line")),
    Case("empty-file", {"prices": "\n \n\n"}, "prices", says=("empty",)),
    Case("no-rows", {"prices": "date,close"}, "prices", says=("header but no row",)),
    Case("no-rows", {"prices": "date,close\n\n,,\n \n"}, "prices", says=("header but no row",)),
    Case("unclosed-quote", {"prices": PRICES.replace(",101", ',"101')}, "prices", line=3, says=("never closed",)),
    Case("ragged-row", {"prices": PRICES.replace(",101", ",1,01")}, "prices", line=3, value="2020-01-03,1,01",
         says=("has 3 fields and the header has 2", "decimal comma")),
    Case("ragged-row", {"prices": PRICES + "2020-01-14\n"}, "prices", line=10, value="2020-01-14", says=("has 1 field and",)),
    Case("unreadable-csv", {"prices": b'date,close\n"' + (b"1" * 700_000 + b"\n") * 3 + b'",1\n'}, "prices", says=("in a pair of quotes, is longer than a mebibyte",)),
    Case("unreadable-csv", {"prices": b"d" * 70_000 + b"\n1\n"}, "prices", says=("header line is longer than 65,536 bytes",)),
    Case("missing-column", {"prices": "date,open\n2020-01-02,1\n"}, "prices", line=1,
         says=("no column for 'close' (the closing price)", "The header has 'date', 'open'", "Name it 'close'")),
    Case("missing-column", {"prices": "date,Adj Close\n2020-01-02,1\n"}, "prices", line=1,
         says=("'Adj Close' is adjusted for dividends and splits and is not taken",)),
    Case("missing-column", {"prices": "when,close\n2020-01-02,1\n"}, "prices", line=1, says=("no column for 'date'",)),
    Case("missing-column", {"prices": "\n\nwhen,close\n2020-01-02,1\n"}, "prices", line=3, says=("no column for 'date'",)),
    Case("missing-column", {"prices": PRICES, "vol": "date,a,b\n2020-01-02,1,2\n"}, "vol", line=1,
         says=("'vol' or by its tenor in days, such as '30'",)),
    Case("ambiguous-column", {"prices": "date,last,settle\n2020-01-02,1,2\n"}, "prices", line=1,
         says=("columns 'last', 'settle' could each be 'close'", "name the right one 'close'")),
    Case("ambiguous-column", {"prices": "date,close,Close\n2020-01-02,1,2\n"}, "prices", line=1, says=("'close', 'Close'",)),
    Case("ambiguous-column", {"prices": PRICES, "vol": "date,30,vol_30\n2020-01-02,20,20\n2020-01-07,20,20\n2020-01-10,20,20\n"}, "vol", line=1, says=("'30', 'vol_30'",)),
    Case("ambiguous-column", {"prices": PRICES, "vol": "date,30,vol\n2020-01-02,20,20\n2020-01-07,20,20\n2020-01-10,20,20\n"}, "vol", line=1, says=("'vol', '30'",)),
    Case("ambiguous-column", {"prices": PRICES, "dividends": "date,ex_date,amount\n2020-01-02,2020-01-03,1\n"}, "dividends", line=1,
         says=("'date', 'ex_date' could each be 'date' (the ex-date)",)),
    *(
        Case("bad-date", {"prices": PRICES.replace("2020-01-03", text)}, "prices", line=3, column="date", value=text.strip('"'),
             says=("is not a date of the form YYYY-MM-DD", shown))
        for text, shown in [
            ("03/01/2020", "'03/01/2020'"), ("2020-02-30", "'2020-02-30'"), ("2019-02-29", "'2019-02-29'"), ("1900-02-29", ""), ("2020-13-01", ""),
            ("2020-00-10", ""), ("2020-01-00", ""), ("20200103", ""), ("2020-1-3", ""), ("2020-01-03 16:00", ""),
            ("", "an empty cell"), ("20-01-03", ""), ("２020-01-03", ""), ("2020-01-03x", ""), ('"2020-01-03\nx"', r"'2020-01-03\nx'"),
        ]
    ),
    Case("date-out-of-range", {"prices": PRICES.replace("2020-01-03", "0020-01-03")}, "prices", line=3, column="date", value="0020-01-03",
         says=("outside 1800-01-01 to 2199-12-31",)),
    Case("date-out-of-range", {"prices": PRICES.replace("2020-01-03", "9999-12-31")}, "prices", line=3, column="date", value="9999-12-31"),
    Case("duplicate-date", {"prices": PRICES + "2020-01-03,101\n"}, "prices", line=10, column="date", value="2020-01-03",
         says=("already on line 3",)),
    Case("duplicate-date", {"prices": PRICES, "dividends": "date,dividend\n2020-01-07,0.08\n2020-01-07,3\n"}, "dividends",
         line=3, column="date", value="2020-01-07", says=("already on line 2", "If two dividends were paid that day, add them up")),
    *(
        Case("not-a-number", {"prices": PRICES.replace(",101", f',"{text}"')}, "prices", line=3, column="close", value=text,
             says=("is not a number", "without thousands separators"))
        for text in ("abc", "1,010,5", "101%", "101$$", "1 01", "1e", "0x10", "1_0", "--1", "+-1", "1.2.3", "١٠١", "e5", ".e1", "1d0", "true")
    ),
    Case("not-a-number", {"prices": PRICES, "rates": "date,rate\n2020-01-02,low\n2020-01-06,1\n2020-01-10,1\n"}, "rates",
         line=2, column="rate", value="low"),
    *(
        Case("not-finite", {"prices": PRICES.replace(",101", f",{text}")}, "prices", line=3, column="close", value=text,
             says=("is not a finite number",))
        for text in ("nan", "NaN", "inf", "-Infinity", "1e999")
    ),
    Case("not-finite", {"prices": PRICES, "vol": vol(d03="inf")}, "vol", line=3, column="vol", value="inf"),
    *(
        Case("missing-price", {"prices": PRICES.replace(",101", f",{text}")}, "prices", line=3, column="close", value=text,
             says=(shown, "Every row of the price file needs its close"))
        for text, shown in [("", "an empty cell"), ("N/A", "'N/A'"), (".", "'.'"), ("-", "'-'"), ("null", "'null'")]
    ),
    Case("missing-dividend", {"prices": PRICES, "dividends": "date,amount\n2020-01-07,\n"}, "dividends", line=2, column="amount",
         value="", says=("the amount is missing (found an empty cell)",)),
    Case("not-positive", {"prices": PRICES.replace(",101", ",0")}, "prices", line=3, column="close", value="0",
         says=("'0' is not above 0", "The closing price must be above 0")),
    Case("not-positive", {"prices": PRICES.replace(",101", ",-3.5")}, "prices", line=3, column="close", value="-3.5"),
    Case("not-positive", {"prices": "date,close,low\n2020-01-02,1,0\n"}, "prices", line=2, column="low", value="0",
         says=("The lowest price of the day",)),
    Case("not-positive", {"prices": PRICES, "vol": vol(d06="-26")}, "vol", line=4, column="vol", value="-26",
         says=("Implied volatility a year must be above 0",)),
    Case("negative", {"prices": "date,close,volume\n2020-01-02,1,-5\n"}, "prices", line=2, column="volume", value="-5",
         says=("'-5' is negative", "The traded volume must be 0 or more")),
    Case("negative", {"prices": "date,close,div\n2020-01-02,1,-0.5\n"}, "prices", line=2, column="div", value="-0.5"),
    Case("negative", {"prices": PRICES, "dividends": "ex_date,cash\n2020-01-07,-0.1\n"}, "dividends", line=2, column="cash", value="-0.1"),
    Case("vol-out-of-range", {"prices": PRICES, "vol": vol(d06="620")}, "vol", line=4, column="vol", value="620",
         says=("'620' read as percent is a vol of 620% a year", "between 0.1% and 500%")),
    Case("vol-out-of-range", {"prices": PRICES, "vol": "date,vol\n2020-01-02,0.2\n2020-01-07,15\n2020-01-10,0.2\n"}, "vol", line=3,
         column="vol", value="15", options={"vol_unit": "decimal"}, says=("'15' read as decimal is a vol of 1500% a year",)),
    Case("vol-out-of-range", {"prices": PRICES, "vol": "date,vol\n2020-01-02,0.05\n2020-01-07,0.2\n2020-01-10,0.2\n"}, "vol", line=2,
         column="vol", value="0.05", options={"vol_unit": "percent"}, says=("a vol of 0.05% a year",)),
    Case("vol-unit-mixed", {"prices": PRICES, "vol": VOL + "".join(f"2020-02-{d:02d},20\n" for d in range(1, 9)) + "2020-03-01,0.26\n"},
         "vol", line=18, column="vol", value="0.26", says=("does not fit a file in percent: below 1.5%", "--vol-unit percent")),
    Case("vol-unit-mixed", {"prices": PRICES, "vol": "date,vol\n" + "".join(f"2020-01-{d:02d},0.{d}\n" for d in range(10, 30)).replace("0.29", "4.5")
         + "2020-01-02,0.2\n2020-01-07,0.2\n"},
         "vol", line=21, column="vol", value="4.5", says=("does not fit a file in decimal: above 3, 300% a year",)),
    Case("vol-outlier", {"prices": PRICES, "vol": vol(d06="0.26")}, "vol", line=4, column="vol", value="0.26",
         options={"vol_unit": "percent"}, says=("106 times below the median vol of the file, 27.5", "more than 50 times")),
    Case("vol-unit-unclear", {"prices": PRICES, "vol": "date,vol\n2020-01-02,1.6\n2020-01-06,1.8\n2020-01-10,1.9\n"}, "vol",
         says=("3 values from 1.6 to 1.9, median 1.8", "--vol-unit percent", "--vol-unit decimal")),
    Case("vol-unit-unclear", {"prices": PRICES, "vol": "date,vol\n2020-01-02,20\n2020-01-06,0.2\n2020-01-10,22\n"}, "vol",
         says=("3 values from 0.2 to 22, median 20",)),
    Case("rate-out-of-range", {"prices": PRICES, "rates": "date,rate\n2020-01-02,-100\n2020-01-06,1\n2020-01-10,1\n"}, "rates", line=2,
         column="rate", value="-100", says=("above -100 and at most 100 percent",)),
    Case("rate-out-of-range", {"prices": PRICES, "rates": "date,rate\n2020-01-02,101\n2020-01-06,1\n2020-01-10,1\n"}, "rates", line=2,
         column="rate", value="101"),
    Case("no-rows-in-span", {"prices": PRICES}, "prices", options={"first_day": date(2021, 1, 1)},
         says=("2021-01-01 to the end", "runs from 2020-01-02 to 2020-01-13", "--from")),
    Case("no-values-in-span", {"prices": PRICES, "vol": "date,vol\n2019-01-02,20\n2019-01-03,21\n"}, "vol", column="vol",
         says=("on the trading days 2020-01-02 to 2020-01-13", "run from 2019-01-02 to 2019-01-03")),
    Case("no-values-in-span", {"prices": PRICES, "vol": "date,vol\n2020-02-03,20\n"}, "vol", column="vol", says=("2020-02-03",)),
    Case("empty-column", {"prices": PRICES, "rates": "date,rate\n2020-01-02,\n2020-01-03,.\n"}, "rates", column="rate", says=("no value at all",)),
    Case("empty-column", {"prices": PRICES, "vol": "date,30,93\n2020-01-02,20,\n2020-01-07,20,\n2020-01-10,20,\n"}, "vol", column="93",
         says=("Fill it, or remove the column",)),
    Case("gap-too-long", {"prices": PRICES, "vol": "date,vol\n2020-01-02,20\n2020-01-10,20\n"}, "vol", line=2, column="vol",
         says=("from 2020-01-02 to 2020-01-10, 8 calendar days", "leaves 2 trading days (the first 2020-01-08)", "at most 5 calendar days",
               "--from 2020-01-10")),
    Case("gap-too-long", {"prices": PRICES, "rates": "date,rate\n2020-01-02,2\n2020-01-06,2\n2020-01-07,\n"}, "rates", line=3, column="rate",
         says=("from 2020-01-06 to 2020-01-13, 7 calendar days", "leaves 1 trading day (the first 2020-01-13)", "end with --to 2020-01-10")),
    Case("never-together", {"prices": PRICES, "vol": "date,vol\n2020-01-02,20\n", "rates": "date,rate\n2020-01-09,2\n"}, "vol",
         options={"needed_to": date(2020, 1, 3)}, says=("'rate' from 2020-01-09 to 2020-01-13", "'vol' from 2020-01-02 to 2020-01-07")),
    Case("ex-date-not-a-trading-day", {"prices": PRICES, "dividends": "date,dividend\n2020-01-04,0.5\n"}, "dividends", line=2, column="date",
         value="2020-01-04", says=("not a trading day of the price file", "move the dividend to 2020-01-06")),
    Case("dividends-twice", {"prices": "date,close,Dividends\n2020-01-02,1,0\n", "dividends": "date,dividend\n2020-01-02,1\n"}, "dividends",
         says=("column 'Dividends' of the price file", "leave out --dividends")),
]  # fmt: skip


@pytest.mark.parametrize("case", CASES, ids=lambda case: case.code)
def test_problem_is_the_only_one_and_says_where_and_what(case: Case, tmp_path: Path) -> None:
    check(case, tmp_path)


def test_missing_file_folder_and_pipe(tmp_path: Path) -> None:
    pipe = tmp_path / "pipe.csv"
    os.mkfifo(pipe)
    absent = tmp_path / "absent.csv"
    with pytest.raises(DataProblems) as caught:
        load_history(prices=absent, vol=tmp_path, rates=pipe)
    first, second, third = caught.value.problems
    assert (first.code, first.file) == ("missing-file", "absent.csv")
    assert str(absent) in first.message
    assert (second.code, second.file) == ("not-a-file", tmp_path.name)
    assert "a folder, not a regular file" in second.message
    assert (third.code, third.file) == ("not-a-file", "pipe.csv")
    assert "a pipe, socket or device" in third.message


def test_unreadable_file(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    def refuse(path: Path, flags: int) -> int:
        raise PermissionError(13, "Permission denied")

    paths = write(tmp_path, {"prices": PRICES})
    monkeypatch.setattr(os, "open", refuse)
    with pytest.raises(DataProblems) as caught:
        load_history(**paths)
    (problem,) = caught.value.problems
    assert problem.code == "unreadable-file"
    assert "Permission denied" in problem.message


def test_every_reason_has_a_case() -> None:
    elsewhere = {"missing-file", "not-a-file", "unreadable-file"} | ELSEWHERE
    assert {case.code for case in [*CASES, *DIALECT_CASES]} | elsewhere == set(REASONS)


def test_all_files_are_reported_at_once_in_order(tmp_path: Path) -> None:
    files: dict[str, str | bytes] = {
        "prices": PRICES.replace(",102", ",x").replace(",101", ",-1") + "2020-01-32,5\n",
        "vol": vol(d06="-1", d08="text"),
        "dividends": "date,dividend\n2020-01-06,-1\nsoon,1\n",
        "rates": "",
    }
    found = [(p.kind, p.line, p.code) for p in problems_of(tmp_path, files)]
    assert found == [
        ("prices", 3, "not-positive"),
        ("prices", 4, "not-a-number"),
        ("prices", 10, "bad-date"),
        ("vol", 4, "not-positive"),
        ("vol", 6, "not-a-number"),
        ("dividends", 2, "negative"),
        ("dividends", 3, "bad-date"),
        ("rates", None, "empty-file"),
    ]


def test_price_file_comes_first_even_if_its_problem_is_found_last(tmp_path: Path) -> None:
    found = problems_of(tmp_path, {"prices": PRICES, "vol": vol(d06="-1")}, first_day=date(2021, 1, 1))
    assert [(p.kind, p.code) for p in found] == [("prices", "no-rows-in-span"), ("vol", "not-positive")]


def test_text_of_the_error_lists_place_and_message(tmp_path: Path) -> None:
    with pytest.raises(LoadError) as caught:
        load_history(**write(tmp_path, {"prices": PRICES.replace(",101", ",-1"), "vol": vol(d06="abc")}))
    lines = str(caught.value).splitlines()
    assert lines[0] == "2 problems in 2 files; nothing was loaded."
    assert lines[1].startswith("  prices.csv, line 3, column close: '-1' is not above 0.")
    assert lines[2].startswith("  vol.csv, line 4, column vol: 'abc' is not a number.")
    assert len(lines) == 3


def test_long_lists_are_capped_with_a_count(tmp_path: Path) -> None:
    rows = "".join(f"{1900 + i // 300}-{1 + i // 25 % 12:02d}-{1 + i % 25:02d},x\n" for i in range(1500))
    with pytest.raises(DataProblems) as caught:
        load_history(**write(tmp_path, {"prices": "date,close\n" + rows}))
    error = caught.value
    assert error.totals == {"not-a-number": 1500}
    assert len(error.problems) == 1000
    lines = str(error).splitlines()
    assert lines[0] == "1,500 problems in 1 file; nothing was loaded."
    assert len(lines) == 22
    assert lines[-1] == "  and 1,480 more of the same kind (not-a-number)"
    assert str(pickle.loads(pickle.dumps(error))) == str(error)


def test_long_and_unprintable_values_are_shown_safely(tmp_path: Path) -> None:
    (problem,) = problems_of(tmp_path, {"prices": PRICES.replace(",101", ",\x1b[31m" + "y" * 500)})
    assert problem.value == "\x1b[31m" + "y" * 500
    assert "\x1b" not in problem.message
    assert len(problem.message) < 250


def test_lines_below_a_quoted_line_break_are_right(tmp_path: Path) -> None:
    text = 'date,close,note\n2020-01-02,1,"two\nlines"\n2020-01-03,x,\n"2020-01-06",2,a,b\n2020-01-07,0,\n'
    found = [(p.line, p.code) for p in problems_of(tmp_path, {"prices": text})]
    assert found == [(4, "not-a-number"), (5, "ragged-row"), (6, "not-positive")]


def test_lines_far_down_the_file_are_right(tmp_path: Path) -> None:
    # more than one block of the parser
    rows = [f"{1800 + i // 336}-{1 + i // 28 % 12:02d}-{1 + i % 28:02d},{i + 1}.25" for i in range(100_000)]
    rows[99_000] = "1,2,3"
    rows[99_500] = rows[99_500].split(",", maxsplit=1)[0] + ",0"
    found = [(p.line, p.code) for p in problems_of(tmp_path, {"prices": "date,close\n" + "\n".join(rows)})]
    assert found == [(99_002, "ragged-row"), (99_502, "not-positive")]


def test_prices_outside_the_span_are_not_judged_but_their_dates_are(tmp_path: Path) -> None:
    text = PRICES.replace(",100", ",0").replace(",101", ",x")
    (problem,) = problems_of(tmp_path, {"prices": text}, first_day=date(2020, 1, 6))
    assert problem.code == "not-a-number"  # text in a number is a fault of the file, wherever it stands
    history = load_history(**write(tmp_path, {"prices": PRICES.replace(",100", ",0")}), first_day=date(2020, 1, 6))
    assert history.frame["close"].tolist() == [102, 103, 104, 105, 106, 107]
    (problem,) = problems_of(tmp_path, {"prices": PRICES + "2020-01-02,1\n"}, first_day=date(2020, 1, 6))
    assert problem.code == "duplicate-date"


def test_unreadable_rows_make_no_false_gaps(tmp_path: Path) -> None:
    files = {"prices": PRICES, "vol": "date,vol\n2020-01-02,20\n2020/01/06,20\n2020-01-10,20\n"}
    assert [p.code for p in problems_of(tmp_path, files)] == ["bad-date"]
    files = {"prices": PRICES.replace("2020-01-07", "bad"), "dividends": "date,dividend\n2020-01-07,1\n"}
    assert [p.code for p in problems_of(tmp_path, files)] == ["bad-date"]


def test_unknown_unit_is_a_programming_error(tmp_path: Path) -> None:
    with pytest.raises(ValueError, match="vol_unit is 'points'; it must be 'percent', 'decimal' or None"):
        load_history(**write(tmp_path, {"prices": PRICES}), vol_unit="points")  # type: ignore[arg-type]
