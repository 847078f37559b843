"""Every problem of how a file is written: code, file, line, column, value and what its sentence says."""

# ruff: noqa: E501  one case stays on one or two lines, so that the table can be read

from __future__ import annotations

import bz2
import gzip
import io
import zipfile
from datetime import date
from typing import Any

import pyarrow as pa
import pyarrow.parquet as pq

from data_loaders import readings
from tests.data_loaders.problem_case import PRICES, VOL, Case

#: Codes whose cases are too large, or of a load of many histories.
ELSEWHERE = {"file-too-large", "missing-symbol"}


def zipped(**files: str) -> bytes:
    into = io.BytesIO()
    with zipfile.ZipFile(into, "w") as archive:
        for name, text in files.items():
            archive.writestr(name, text)
    return into.getvalue()


def parquet(columns: dict[str, Any]) -> bytes:
    into = io.BytesIO()
    pq.write_table(pa.table(columns), into)
    return into.getvalue()


def said(**options: Any) -> dict[str, Any]:
    return {"readings": readings(**options)}


LONG = "date,ticker,close\n2020-01-02,AB C,1\n2020-01-03,AB C,1\n2020-01-02,XYZ,2\n2020-01-03,XYZ,2\n"
DAYS = [date(2020, 1, 2), date(2020, 1, 3)]

DIALECT_CASES = [
    Case("line-too-long", {"prices": b"date,close\n2020-01-02," + b"1" * 1_100_000 + b"\n"}, "prices", line=2, says=("longer than 1,048,576 bytes",)),
    Case("line-too-long", {"prices": gzip.compress(b"1" * 5_000_000)}, "prices", line=1, says=("longer than 1,048,576 bytes",)),
    Case("grows-too-much", {"prices": bz2.compress(b"date,close\n" + b"\n" * (66 << 20))}, "prices",
         says=("unpacks to more than 65 MiB, over 100 times as much", "the rest was not unpacked")),
    Case("many-members", {"prices": zipped(**{"a.csv": PRICES, "b.csv": PRICES})}, "prices", says=("holds 2 files ('a.csv', 'b.csv')", "an archive of one file")),
    Case("many-members", {"prices": zipped(**{f"{i}.csv": "" for i in range(1001)})}, "prices", says=("holds 1,001 or more files",)),
    Case("damaged-file", {"prices": gzip.compress(PRICES.encode())[:-9]}, "prices", says=("a file packed with gzip", "(it ends early)", "Get the file again")),
    Case("damaged-file", {"prices": b"PK\x03\x04rest"}, "prices", says=("a file packed with zip", "it has no directory; it may have been cut off")),
    Case("damaged-file", {"prices": b"PAR1rest"}, "prices", says=("a Parquet file",)),
    Case("damaged-text", {"prices": PRICES.encode("utf-16")[:-1]}, "prices", line=9, says=("UTF-16 (little-endian) by its first bytes",)),
    Case("binary-file", {"prices": gzip.compress(bz2.compress(PRICES.encode()))}, "prices", says=("bzip2 inside gzip",)),
    Case("binary-file", {"prices": zipped(**{"[Content_Types].xml": "", "xl/workbook.xml": ""})}, "prices", says=("a spreadsheet workbook", "plain CSV")),
    Case("binary-file", {"prices": gzip.compress(b"x" * 257 + b"ustar" + b"x" * 300)}, "prices", says=("a tar archive",)),
    Case("rows-in-quotes", {"prices": 'date,close,note\n2020-01-02,1,"a\n2020-01-03,2,b\n2020-01-06,3,"\n'}, "prices", line=2, column="note",
         value="a\n2020-01-03,2,b\n2020-01-06,3,", says=("whole rows stand inside a pair of double quotes", "Remove the quote")),
    Case("no-header", {"prices": PRICES.split("\n", 1)[1]}, "prices", line=1, value="2020-01-02,100",
         says=("the first row, '2020-01-02,100', is data", "such as date and close")),
    Case("no-header", {"prices": "\n02.01.2020;1,5\n03.01.2020;1,6\n"}, "prices", line=2, value="02.01.2020;1,5"),
    Case("rows-above-header", {"prices": "2019-12-30,99\n" + PRICES}, "prices", line=1, value="2019-12-30,99",
         says=("looks like a row of data but stands above the header on line 2",)),
    Case("no-separator", {"prices": "date close\n2020-01-02 1\n"}, "prices", line=1, says=("one single column, 'date close'", "commas, semicolons, tabs or vertical bars")),
    Case("unknown-column", {"prices": PRICES}, "prices", line=1, options=said(columns=["open=Eröffnung"]),
         says=("no column 'Eröffnung', or more than one, for --map open=Eröffnung", "The header has 'date', 'close'")),
    Case("unknown-column", {"prices": PRICES, "vol": VOL}, "vol", line=1, options=said(columns=["vol.vol=IV"]), says=("--map vol.vol=IV",)),
    Case("unknown-column", {"prices": "date,close,x,X\n2020-01-02,1,2,3\n"}, "prices", line=1, options=said(columns=["open= x_"]), says=("or more than one",)),
    Case("missing-column", {"prices": "Tag;Kurs\n13.01.2020;1,5\n"}, "prices", line=1, options=said(columns=["date=Tag"]),
         says=("The header has 'Tag', 'Kurs'", "rollband load ... --map close=NAME")),
    Case("ambiguous-column", {"prices": PRICES, "rates": "date,yield,rf\n2020-01-02,1,2\n2020-01-07,1,2\n2020-01-10,1,2\n"}, "rates", line=1,
         says=("rollband load ... --map rates.rate=NAME",)),
    Case("column-type", {"prices": parquet({"date": DAYS, "close": [True, False]})}, "prices", column="close", says=("holds bool, not numbers",)),
    Case("column-type", {"prices": parquet({"date": [True, False], "close": [1.0, 2.0]})}, "prices", column="date", says=("holds bool, not dates",)),
    Case("many-symbols", {"prices": LONG}, "prices", column="ticker",
         says=("holds 2 symbols ('AB C', 'XYZ')", "--symbol 'AB C' for one of them", "--symbol-column ticker to make a history of each")),
    Case("many-symbols", {"prices": PRICES, "dividends": "date,symbol,cash\n2020-01-02,A,1\n2020-01-02,B,1\n"}, "dividends", column="symbol"),
    Case("no-symbol-column", {"prices": PRICES}, "prices", options=said(symbol="A"), says=("there is no column of symbols", "The header has 'date', 'close'")),
    Case("no-symbol-column", {"prices": PRICES}, "prices", options=said(symbol="A", symbol_column="name"), says=("there is no column 'name'",)),
    Case("unknown-symbol", {"prices": LONG}, "prices", column="ticker", options=said(symbol="XYY"),
         says=("no row has symbol 'XYY'. The column holds 2 symbols: 'AB C', 'XYZ'. Did you mean 'XYZ'?", "Write it as it stands there")),
    Case("date-form-unclear", {"prices": "date,close\n01/02/2020,1\n01/03/2020,1\n"}, "prices", line=2, column="date", value="01/02/2020",
         says=("fit DD/MM/YYYY and MM/DD/YYYY alike: '01/02/2020' is 2020-02-01 or 2020-01-02", "--date-format DD/MM/YYYY or --date-format MM/DD/YYYY")),
    Case("date-form-unclear", {"prices": "date,close\n42378,1\n42381,1\n42382,1\n"}, "prices", line=2, column="date", value="42378",
         says=("SERIAL and SERIAL-1904", "2016-01-09 or 2020-01-10")),
    Case("date-forms-mixed", {"prices": "date,close\n13/01/2020,1\n01/14/2020,1\n"}, "prices", line=2, column="date", value="13/01/2020",
         says=("'13/01/2020' can only be DD/MM/YYYY, and '01/14/2020' on line 3 only MM/DD/YYYY",)),
    Case("bad-date", {"prices": "date,close\n13/01/2020,1\n14/01/2020,1\n31/02/2020,1\n"}, "prices", line=4, column="date", value="31/02/2020",
         says=("not a date of the form DD/MM/YYYY (for example 20/03/2008)",)),
    Case("bad-date", {"prices": "date,close\n3-Jan-20,1\n6-Jän-20,1\n7-Jan-20,1\n"}, "prices", line=3, column="date", value="6-Jän-20",
         says=("of the form DD-MON-YY (for example 20-MAR-08)",)),
    Case("ragged-row", {"prices": "date,close\n3 Jan 2020,1\n6 Jan 2020,2\n7 Ja"}, "prices", line=4, value="7 Ja", says=("has 1 field and",)),
    Case("not-a-number", {"prices": 'date,close,note\r2020-01-02,1,"two\rlines"\r2020-01-03,x,\r'}, "prices", line=4, column="close", value="x"),
    Case("bad-date", {"prices": "date,close\n61,1\n60,1\n"}, "prices", line=3, column="date", value="60", options=said(date_formats=["SERIAL"]),
         says=("of the form SERIAL (for example 39527)",)),
    Case("two-digit-year", {"prices": "date,close\n30/12/99,1\n29/12/68,1\n"}, "prices", line=3, column="date", value="29/12/68",
         says=("read as 2068-12-29 is yet to come", "from 69 on are of the 1900s", "Write the years with four digits")),
    Case("decimal-unclear", {"prices": "date;close\n2020-01-02;1.234\n2020-01-03;7\n"}, "prices", line=2, column="close", value="1.234",
         says=("is 1.234 with a decimal point and 1234 with a decimal comma", "--decimal point or --decimal comma")),
    Case("decimal-unclear", {"prices": 'date,close\n2020-01-02,"1,234"\n'}, "prices", line=2, column="close", value="1,234",
         says=("is 1234 with a decimal point and 1.234 with a decimal comma",)),
    Case("not-a-number", {"prices": "date;close\n2020-01-02;12,5\n2020-01-03;12.5\n2020-01-06;12,75\n"}, "prices", line=3, column="close", value="12.5",
         says=("with a comma as decimal mark",)),
    Case("thousands-mixed", {"prices": "date\tclose\n2020-01-02\t1234.5\n2020-01-03\t1,236\n2020-01-06\t1235.5\n"}, "prices", line=3, column="close", value="1,236",
         says=("has a comma between thousands", "meant for the decimal point")),
    Case("percent-mixed", {"prices": PRICES, "vol": VOL.replace("29\n", "29%\n")}, "vol", line=7, column="vol", value="29%",
         says=("do not agree on whether there is a percent sign",)),
    Case("percent-unit", {"prices": PRICES, "vol": VOL.replace("\n", "%\n").replace("vol%", "vol")}, "vol", options={"vol_unit": "decimal"},
         says=("have percent signs, and --vol-unit decimal",)),
    Case("currency-mixed", {"prices": "date,close\n2020-01-02,$1\n2020-01-03,$1\n2020-01-06,£1\n"}, "prices", line=4, column="close", value="£1",
         says=("'£1' is in £, and the value on line 2 in $", "in one money")),
    Case("duplicate-date", {"prices": parquet({"date": [DAYS[0], DAYS[1], DAYS[0]], "close": [1.0, 2.0, 3.0]})}, "prices", line=3, column="date",
         value="2020-01-02", says=("is already on row 1",)),
]  # fmt: skip
