"""Any valid table written as CSV reads back identical; cells agree with Python's own readers; carrying with a loop.

Rung: identity (hypothesis) and twin (``csv``, ``float``, ``date.fromisoformat``, a plain loop over days).
"""

from __future__ import annotations

import csv
import math
import tempfile
from datetime import date, timedelta
from pathlib import Path

import numpy as np
import pyarrow as pa
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from data_loaders import DataProblems, Reading, load_history, read_history, write_history
from data_loaders.alignment import carried_columns
from data_loaders.cells import dates_from_text, numbers_from_text
from data_loaders.checks import gaps, repeated, vol_unit
from data_loaders.errors import Problems
from data_loaders.tables import Table

DAYS = st.dates(date(1800, 1, 1), date(2199, 12, 31))
PRICES = st.floats(1e-6, 1e12)


@settings(max_examples=60, deadline=None)
@given(data=st.data())
def test_valid_tables_read_back_identical(data: st.DataObject) -> None:
    days = data.draw(st.lists(DAYS, unique=True, min_size=1, max_size=30))
    names = ["close", *data.draw(st.lists(st.sampled_from(["open", "high", "low", "volume", "dividend"]), unique=True))]
    table = {name: data.draw(st.lists(PRICES, min_size=len(days), max_size=len(days))) for name in names}
    columns = data.draw(st.permutations(["date", *names]))
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "prices.csv"
        with path.open("w", newline="") as file:
            quoting = data.draw(st.sampled_from([csv.QUOTE_MINIMAL, csv.QUOTE_ALL]))
            writer = csv.writer(file, quoting=quoting, lineterminator=data.draw(st.sampled_from(["\n", "\r\n"])))
            writer.writerow(data.draw(st.sampled_from([str.lower, str.upper, str.title]))(name) for name in columns)
            rows = {"date": days, **table}
            writer.writerows([rows[name][i] for name in columns] for i in range(len(days)))
        try:
            history = load_history(prices=path)
        except DataProblems as problems:
            # a file of nothing but 1.125 in quotes, say, may mean thousands
            if set(problems.totals) != {"decimal-unclear"}:
                raise
            history = load_history(prices=path, readings={"prices": Reading(decimal="point")})
        order = np.argsort(np.array(days, dtype="datetime64[D]"))
        assert history.frame.index.to_numpy().astype("datetime64[D]").tolist() == sorted(days)
        assert set(history.frame.columns) == set(names)
        for name in names:
            # the shortest text of a double reads back as the same double
            assert history.frame[name].tolist() == [table[name][i] for i in order]
        assert bool(history.repairs) == (sorted(days) != days)
        write_history(history, Path(folder), "h")
        assert read_history(Path(folder), "h") == history


@given(
    st.lists(
        st.one_of(st.floats().map(repr), st.integers().map(str), st.text("0123456789.+-eE", max_size=8)), max_size=20
    )
)
def test_numbers_are_what_float_says(cells: list[str]) -> None:
    values, missing, nan, infinite, other = numbers_from_text(pa.array(cells, pa.string()))
    for i, cell in enumerate(cells):
        assert int(missing[i]) + int(nan[i]) + int(infinite[i]) + int(other[i]) + int(math.isfinite(values[i])) == 1
        try:
            expected = float(cell)
        except ValueError:
            assert missing[i] or other[i]
            continue
        if math.isfinite(expected):
            assert values[i] == expected
            assert math.copysign(1.0, values[i]) == math.copysign(1.0, expected)
        else:
            assert nan[i] or infinite[i]


@given(
    st.lists(
        st.one_of(st.dates().map(str), st.from_regex(r"[0-2][0-9]{3}-[01][0-9]-[0-3][0-9]", fullmatch=True)),
        max_size=20,
    )
)
def test_dates_are_what_the_calendar_says(cells: list[str]) -> None:
    dates, bad, outside = dates_from_text(pa.array(cells, pa.string()))
    for i, cell in enumerate(cells):
        try:
            expected = date.fromisoformat(cell)
        except ValueError:
            assert bad[i] or cell.startswith("0000")
            continue
        assert not bad[i]
        assert dates[i].item() == expected
        assert outside[i] == (not date(1800, 1, 1) <= expected <= date(2199, 12, 31))


def _table(days: list[int], values: list[float]) -> Table:
    dates = (np.datetime64("2020-01-01", "D") + np.array(days, dtype=np.int64)).astype("datetime64[D]")
    numbers = np.array(values, dtype=np.float64)
    return Table(
        file="v.csv", kind="vol", sha256="", dates=dates, lines=np.arange(2, len(days) + 2), numbers={"vol": numbers},
        missing={"vol": np.isnan(numbers)},
        names={"date": "date", "vol": "vol"}, ignored=(), guessed=None, blank_rows=0, texts={},
    )  # fmt: skip


@given(
    trading=st.sets(st.integers(0, 60), min_size=1, max_size=40),
    quoted=st.sets(st.integers(-10, 70), min_size=1, max_size=40),
    blank=st.sets(st.integers(-10, 70), max_size=5),
    until=st.integers(-5, 65),
)
def test_carrying_and_gaps_agree_with_a_plain_loop(
    trading: set[int], quoted: set[int], blank: set[int], until: int
) -> None:
    quotes = {day: math.nan if day in blank else 0.2 + day / 1000 for day in sorted(quoted)}
    known = {day: value for day, value in quotes.items() if not math.isnan(value)}
    start = np.datetime64("2020-01-01", "D")
    days = start + np.array(sorted(trading), dtype=np.int64)
    expected, bare = [], []
    for day in sorted(trading):
        earlier = [d for d in known if d <= day]
        fresh = bool(earlier) and day - max(earlier) <= 5
        expected.append(known[max(earlier)] if fresh else math.nan)
        if earlier and not fresh and day <= until:
            bare.append(day)
    problems, notes = Problems(), []
    table = _table(list(quotes), list(quotes.values()))
    columns = carried_columns(table, days, start + until, problems, notes)
    np.testing.assert_array_equal(columns["vol"], expected)
    if known and not all(map(math.isnan, expected)):
        value_days = table.dates[~table.missing["vol"]]
        holes = gaps(days[days <= start + until], value_days, 5)
        assert sum(hole.count for hole in holes) == len(bare)
        assert problems.totals["gap-too-long"] == len(holes)
        assert (len(holes) > 0) == (len(bare) > 0)


@given(st.lists(st.integers(0, 8), max_size=20))
def test_repeated_dates_point_at_their_first_row(numbers: list[int]) -> None:
    days = np.datetime64("2020-01-01", "D") + np.array(numbers, dtype=np.int64)
    rows, firsts = repeated(days.astype("datetime64[D]"))
    expected = [(i, numbers.index(n)) for i, n in enumerate(numbers) if n in numbers[:i]]
    assert list(zip(rows.tolist(), firsts.tolist())) == expected


@given(st.lists(st.floats(0.02, 0.999), min_size=1, max_size=30))
def test_the_same_vols_in_either_unit_are_told_apart(vols: list[float]) -> None:
    assert vol_unit(vols) == "decimal"
    percent = [100 * v for v in vols]
    if min(percent) > 2:
        assert vol_unit(percent) == "percent"


@pytest.mark.parametrize("days", [5, 6])
def test_five_days_are_carried_and_six_are_not(days: int) -> None:
    first = date(2020, 3, 2)
    table = _table([0], [0.2])
    trading = np.array([table.dates[0].item(), (date(2020, 1, 1) + timedelta(days=days))], dtype="datetime64[D]")
    problems = Problems()
    columns = carried_columns(table, trading, np.datetime64(first), problems, [])
    assert np.isnan(columns["vol"][1]) == (days == 6)
    assert problems.totals["gap-too-long"] == (1 if days == 6 else 0)
