"""Valid files with random bytes changed: only errors of ours, never a traceback, never another number than is written.

Rung: twin. An oracle reads the changed file with Python's own `csv`, `strptime` and `float`, told the dialect that the
file was written in; where a load goes through, its days and values must be the oracle's, and rows that the oracle
cannot read must be among those that the load says it left out. Slow: thousands of files, within a bounded time.
"""

# ruff: noqa: E501  one file stays on one line

from __future__ import annotations

import contextlib
import csv
import io
import random
import re
import time
from collections.abc import Iterator
from dataclasses import dataclass, replace
from datetime import date, datetime, timedelta
from pathlib import Path

import pyarrow as pa
import pyarrow.parquet as pq
import pytest

from data_loaders import DataProblems, History, load_history
from tests.data_loaders.dialect_writer import Style, packed, write_table

SECONDS = 100.0
CASES = 6000
MISSING = {"", "-", "--", ".", "na", "n/a", "null", "none", "nil", "nd", "n.a.", "missing", "–", "—"}
KNOWN = ("date", "close", "open", "high", "low", "volume")
PIECES = [b"\n", b"\r", b",", b";", b"\t", b".", b'"', b"-", b"/", b" ", b"0", b"9", b"1", b"e", b"#", b"\0", b"\xff", b"\xa0", b"%", b"$", b"(", b"12"]  # fmt: skip


@dataclass(frozen=True)
class Base:
    """A valid file, the dialect it is in, and what the oracle needs to read its dates."""

    style: Style
    formats: tuple[str, ...]
    codec: str
    data: bytes
    packed: bool = False


def bases() -> list[Base]:
    start = date(2019, 11, 4)
    days = [start + timedelta(days=i) for i in range(60) if (start + timedelta(days=i)).weekday() < 5]
    draw = random.Random(5)
    closes: list[float | None] = [round(draw.uniform(900, 1400), 2) for _ in days]
    opens = [None if i == 7 else value for i, value in enumerate(closes)]
    volumes: list[float | None] = [float(draw.randrange(1_000_000, 90_000_000)) for _ in days]
    columns = {"Close": closes, "Open": opens, "Volume": volumes}
    styles = [
        (Style(), ("%Y-%m-%d",), "utf-8"),
        (Style(separator=";", decimal="comma", dates="day first points", thousands="."), ("%d.%m.%Y",), "utf-8"),
        (Style(separator=";", decimal="comma", dates="day first points", encoding="cp1252", above=("Währung: €", "")), ("%d.%m.%Y",), "cp1252"),
        (Style(quote_all=True, thousands=",", dates="long name", line_end="\r\n"), ("%B %d %Y", "%b %d %Y", "%B%d %Y"), "utf-8"),
        (Style(separator="\t", dates="month first", encoding="utf-16"), ("%m/%d/%Y",), "utf-16"),
        (Style(dates="compact", above=("Made up", "in points"), below=("", "Total,1,2,3", "Source: nobody.")), ("%Y%m%d",), "utf-8"),
        (Style(dates="name short", comment="# remark", blank_rows=True), ("%d %b %y", "%d%b %y", "%d %b%y"), "utf-8"),
        (Style(separator="|", dates="iso zone", line_end="\r", missing="N/A"), ("%Y-%m-%d",), "utf-8"),
        (Style(separator="\t", dates="day first", thousands=" ", decimal="comma", encoding="utf-8-sig"), ("%d/%m/%Y",), "utf-8-sig"),
    ]  # fmt: skip
    made = [Base(style, formats, codec, write_table(style, days, columns)) for style, formats, codec in styles]
    # three digits after the mark: most numbers alone could be read in two ways
    small = {"Close": [round(draw.uniform(10, 90), 3) for _ in days]}
    for style in (Style(separator="\t"), Style(separator=";", decimal="comma"), Style(quote_all=True, decimal="comma")):
        made.append(Base(style, ("%Y-%m-%d",), "utf-8", write_table(style, days, small)))
    # these carry a sum of what they hold; zstd as it is written here does not, and may unpack to other numbers unnoticed
    return made + [
        replace(made[0], data=packed(made[0].data, how), packed=True) for how in ("gzip", "zip", "xz", "bzip2")
    ]


def changed(data: bytes, draw: random.Random) -> bytes:
    """The file with one to three things done to its bytes."""
    made = bytearray(data)
    for _ in range(draw.choice([1, 1, 1, 2, 3])):
        at = draw.randrange(len(made))
        match draw.randrange(8):
            case 0 | 1 | 2:
                made[at : at + 1] = draw.choice(PIECES)
            case 3:
                made[at : at + 1] = bytes([draw.randrange(256)])
            case 4:
                made[at:at] = draw.choice(PIECES)
            case 5:
                del made[at : at + draw.choice([1, 1, 2, 5, 40])]
            case 6:
                made[at:at] = made[at : at + draw.choice([1, 3, 30, 60])]
            case 7:
                made = made[: draw.choice([at, len(made) - 1])] or bytearray(b"x")
    return bytes(made)


# ---------------------------------------------------------------- the oracle


def read_number(text: str, style: Style) -> float | None:
    """The number of a cell, None where it says that there is none; ValueError where it is none."""
    text = text.strip().strip("\u00a0")
    if text.lower() in MISSING:
        return None
    text = text.replace("−", "-")
    text = re.sub(r"^([+-]?) *[$€£¥₹] *", r"\1", text)
    text = re.sub(r"(?<=\d) *[$€£¥₹]$", "", text)
    mark, other = (".", ",") if style.decimal == "point" else (",", ".")
    whole, _, rest = text.lstrip("+-").partition(mark)
    for group in (other, " ", "'", "’", "\u00a0", "\u2009", "\u202f"):
        parts = whole.split(group)
        if (
            len(parts) > 1
            and re.fullmatch("[1-9][0-9]{0,2}", parts[0])
            and all(re.fullmatch(r"[0-9]{3}", part) for part in parts[1:])
        ):
            if not re.fullmatch("[0-9]*", rest):
                raise ValueError(text)
            text = text.replace(group, "")
            break
    if mark == ",":
        if "." in text:
            raise ValueError(text)
        text = text.replace(",", ".")
    if not re.fullmatch(r"[+-]?([0-9]+\.?[0-9]*|\.[0-9]+)([eE][+-]?[0-9]+)?", text):
        raise ValueError(text)
    return float(text)


def read_day(text: str, base: Base) -> date:
    """The day of a cell; between the parts of a date with a name any marks may stand, and a time may follow."""
    text = re.sub(r"(?<=\d)(T| )[0-2]?\d:[0-5]\d.*$", "", text.strip()) if "iso" in base.style.dates else text
    if "name" in base.style.dates:
        text = re.sub(r"[ ,./-]+", " ", text.strip())
    for form in base.formats:
        try:
            return datetime.strptime(text.strip(), form).date()
        except ValueError:
            continue
    raise ValueError(text)


@dataclass(frozen=True)
class Seen:
    """What the oracle makes of a file: days with their values, and rows it cannot read, by their position."""

    header: list[str]
    rows: dict[date, dict[str, float | None]]
    unread: list[int]
    last: int


def oracle(text: str, base: Base) -> Seen | None:
    """None where there is no header, or a day stands twice."""
    table = list(
        csv.reader(io.StringIO(text.replace("\r\n", "\n").replace("\r", "\n")), delimiter=base.style.separator)
    )
    names = [[re.sub(r"[\s_./-]+", " ", cell).strip("# ").lower() for cell in row] for row in table]
    # a column without a name may be the dates
    at = next((i for i, row in enumerate(names) if "close" in row and ("date" in row or "" in row)), None)
    if at is None:
        return None
    header = names[at]
    rows: dict[date, dict[str, float | None]] = {}
    unread, last = [], -1
    for i, row in enumerate(table[at + 1 :]):
        if not any(cell.strip() for cell in row) or row[0].lstrip().startswith("#") or names[at + 1 + i] == header:
            continue
        try:
            if len(row) != len(header):
                raise ValueError(row)
            day = read_day(row[header.index("date" if "date" in header else "")], base)
            values = {
                name: read_number(cell, base.style)
                for name, cell in zip(header, row)
                if name in KNOWN and name != "date"
            }
        except ValueError:
            unread.append(i)
            continue
        if day in rows:
            return None
        rows[day] = values
        last = i
    return Seen(header, rows, unread, last)


def wrong(history: History, base: Base, data: bytes) -> str | None:
    """What is wrong with a load that went through, or None."""
    try:
        text = data.decode(base.codec)
    except UnicodeDecodeError:
        text = data.decode("cp1252", errors="replace")
    seen = oracle(text.removeprefix("\ufeff"), base)
    if seen is None:
        return "the oracle finds no header"
    days = [stamp.date() for stamp in history.frame.index]
    if days != sorted(seen.rows):
        return f"days differ: {sorted(set(days) ^ set(seen.rows))}"
    for name in history.frame.columns:
        for day, value in zip(days, history.frame[name].tolist()):
            expected = seen.rows[day].get(name)
            if not (value == expected or (value != value and expected is None)):
                return f"{name} on {day}: read {value}, written {expected}"
    if any(i < seen.last for i in seen.unread):
        return "a row among the days was lost"
    told = dict(history.sources[0].taken).get("left out", "")
    if seen.unread and "below the last row" not in told:
        return f"{len(seen.unread)} rows were lost and not told"
    return None


def cases(draw: random.Random) -> Iterator[tuple[Base, bytes]]:
    all_bases = bases()
    for i in range(CASES):
        base = all_bases[i % len(all_bases)]
        yield base, changed(base.data, draw)


def test_the_oracle_agrees_on_the_files_as_they_are(tmp_path: Path) -> None:
    for base in bases():
        path = tmp_path / "p.csv"
        path.write_bytes(base.data)
        history = load_history(prices=path)
        assert wrong(history, base, under_packing(base, base.data)) is None
        assert len(history.frame) == 44


def under_packing(base: Base, data: bytes) -> bytes:
    """What a file holds: of a packed one nothing else than it was packed from may ever come out."""
    return bases()[0].data if base.packed else data


@pytest.mark.slow
@pytest.mark.parametrize("how", ["zstd", "parquet"])
def test_changed_files_without_sums_give_our_errors(how: str, tmp_path: Path) -> None:
    """Their numbers may change unnoticed; nothing else than problems of ours may be raised."""
    draw = random.Random(3)
    days = [date(2020, 1, 1) + timedelta(days=i) for i in range(40)]
    into = io.BytesIO()
    table = pa.table({"date": days, "close": [100.5 + i for i in range(40)], "text": [f"a{i}" for i in range(40)]})
    pq.write_table(table, into)
    data = into.getvalue() if how == "parquet" else packed(bases()[0].data, "zstd")
    path = tmp_path / "p"
    loaded = 0
    for _ in range(1500):
        path.write_bytes(changed(data, draw))
        with contextlib.suppress(DataProblems):
            load_history(prices=path)
            loaded += 1
    assert 0 < loaded < 1500


@pytest.mark.slow
@pytest.mark.parametrize("seed", [1, 2])
def test_changed_files_give_our_errors_or_the_numbers_that_are_written(seed: int, tmp_path: Path) -> None:
    draw = random.Random(seed)
    path = tmp_path / "p.csv"
    started = time.perf_counter()
    tried = loaded = 0
    for base, data in cases(draw):
        path.write_bytes(data)
        # anything else than problems of ours is raised
        with contextlib.suppress(DataProblems):
            history = load_history(prices=path)
            fault = wrong(history, base, under_packing(base, data))
            assert fault is None, f"{fault}\n{base.style}\n{data!r}"
            loaded += 1
        tried += 1
        if time.perf_counter() - started > SECONDS:
            break
    assert tried > 1000
    assert loaded > tried // 20
