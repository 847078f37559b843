"""New days put after a stored history: what agrees, what is refused and how each difference is told.

Rung: identity (a history cut in two and put together is the whole; what was stored stays to the last bit) and
behaviour (hand-worked differences, every sentence asserted).
"""

from __future__ import annotations

import datetime as dt
from dataclasses import replace
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from data_loaders import History, StoreError, read_history, write_history
from data_loaders.appending import TOLERANCE, appended
from data_loaders.errors import AppendRefused
from data_loaders.repairs import Repair
from data_loaders.revisions import Days
from data_loaders.store import append_history
from data_loaders.versions import former_versions
from tests.data_loaders.small_histories import NOTHING, history, walk

#: 1 to 5 January 2020.
FORMER = history(
    {
        "close": [100.0, 101.0, 102.0, 103.0, 104.0],
        "open": [99.0, NOTHING, 101.0, 102.0, 103.0],
        "vol": [0.2, 0.21, 0.22, 0.23, 0.24],
    },
    notes=("a note of the first load",),
)


def later(first: str, *, notes: tuple[str, ...] = (), **columns: list[float]) -> History:
    return history(columns, first=first, sha256="cd" * 32, notes=notes)


def part(whole: History, rows: slice) -> History:
    frame = whole.frame.iloc[rows]
    return replace(
        whole,
        frame=frame,
        sources=tuple(replace(source, last=frame.index[-1].date()) for source in whole.sources),
        usable_from=frame.index[0].date(),
    )


# ---------------------------------------------------------------- what agrees


@settings(max_examples=60, deadline=None)
@given(st.integers(1, 59), st.integers(0, 59), st.integers(1, 60))
def test_a_history_cut_in_two_and_put_together_is_the_whole(end: int, start: int, last: int) -> None:
    whole = walk(5, days=60)
    start, last = min(start, end), max(last, end, start + 1)
    found = appended(part(whole, slice(0, end)), part(whole, slice(start, last)), name="spx")
    pd.testing.assert_frame_equal(found.history.frame, whole.frame.iloc[:last], check_exact=True)
    assert found.added == Days.of(whole.frame.index[end:last].to_numpy().astype("datetime64[D]"))
    assert (found.in_common, found.replaced, found.left_out) == (end - start, (), ())
    assert found.nothing_new == (end == last)
    assert found.history.usable_from == whole.usable_from


def test_what_was_stored_stays_to_the_last_bit(tmp_path: Path) -> None:
    write_history(FORMER, tmp_path, "spx")
    near = 104.0 * (1.0 + 0.9 * TOLERANCE)
    new = later("2020-01-05", close=[near, 105.0], open=[103.0, NOTHING], vol=[0.24, 0.25])
    stored, found = append_history(new, tmp_path, "spx")
    assert (stored.written, found.in_common) == (True, 1)
    assert found.added == Days(count=1, first=dt.date(2020, 1, 6), last=dt.date(2020, 1, 6))
    back = read_history(tmp_path, "spx")
    assert back == found.history
    assert back.frame["close"].tolist() == [100.0, 101.0, 102.0, 103.0, 104.0, 105.0]
    np.testing.assert_array_equal(back.frame["open"], [99.0, NOTHING, 101.0, 102.0, 103.0, NOTHING])
    assert back.frame["vol"].tolist() == [0.2, 0.21, 0.22, 0.23, 0.24, 0.25]
    # the one of before is kept
    assert stored.changes is not None
    assert stored.changes.lines()[0] == "rows: 1 (2020-01-06) added, none gone"
    assert len(former_versions(tmp_path, "spx")) == 1


def test_what_is_told_of_where_it_came_from(tmp_path: Path) -> None:
    write_history(FORMER, tmp_path, "spx")
    unit = Repair(file="vol.csv", kind="unit", rows=1, what="vol: percent a year turned into decimals")
    for day in range(5, 12):
        new = later(
            f"2020-01-{day:02d}", close=[day + 99.0, day + 100.0], open=[103.0, 103.0], vol=[0.24, 0.24],
            notes=(f"note of day {day}",),
        )  # fmt: skip
        append_history(replace(new, repairs=(unit,)), tmp_path, "spx")
    back = read_history(tmp_path, "spx")
    # of the first load all, of the seven later ones the last
    assert [(source.kind, source.sha256[:2], source.last.day) for source in back.sources] == [
        ("prices", "ab", 5), ("vol", "ab", 5), ("prices", "cd", 12), ("vol", "cd", 12),
    ]  # fmt: skip
    assert back.notes == ("a note of the first load", "Appended: note of day 11")
    what = "7 days from 2020-01-06 on came later and were appended"
    assert back.repairs == (Repair(file="prices.csv", kind="appended", rows=7, what=what), unit)


def test_nothing_new(tmp_path: Path) -> None:
    path = write_history(FORMER, tmp_path, "spx")
    before = path.read_bytes()
    stored, found = append_history(part(FORMER, slice(2, 5)), tmp_path, "spx")
    assert (stored.written, found.nothing_new, found.in_common) == (False, True, 3)
    assert path.read_bytes() == before
    assert former_versions(tmp_path, "spx") == ()


def test_columns_that_the_history_does_not_have_are_left_out() -> None:
    new = later("2020-01-06", close=[105.0], open=[104.0], vol=[0.25], volume=[7.0])
    found = appended(FORMER, new, name="spx")
    assert found.left_out == ("volume",)
    assert list(found.history.frame.columns) == ["close", "open", "vol"]
    assert found.in_common == 0


def test_a_series_of_the_files_may_begin_after_their_first_day() -> None:
    new = later("2020-01-04", close=[103.0, 104.0, 105.0], open=[102.0, 103.0, 104.0], vol=[NOTHING, NOTHING, 0.25])
    assert appended(FORMER, new, name="spx").history.frame["vol"].tolist() == [0.2, 0.21, 0.22, 0.23, 0.24, 0.25]
    # once begun, it may not pause
    new = later("2020-01-03", close=[102.0, 103.0, 104.0], open=[101.0, 102.0, 103.0], vol=[NOTHING, 0.23, NOTHING])
    assert refused(new).differences == (("vol", "2020-01-05 vol: stored 0.24, in the files nothing"),)


def test_what_was_carried_gives_way_to_its_own(tmp_path: Path) -> None:
    """The vol file had ended on the 3rd: the vols of the 4th and the 5th had been carried from there."""
    carried = history(
        {"close": [100.0, 101.0, 102.0, 103.0, 104.0], "vol": [0.2, 0.21, 0.22, 0.22, 0.22]}, ends={"vol": "2020-01-03"}
    )  # fmt: skip
    write_history(carried, tmp_path, "spx")
    new = later("2020-01-03", close=[102.0, 103.0, 104.0, 105.0], vol=[0.22, 0.23, 0.22, 0.25])
    stored, found = append_history(new, tmp_path, "spx")
    assert found.replaced == ("vol on 2020-01-04: carried there as 0.22, 0.23 of its own",)
    assert read_history(tmp_path, "spx").frame["vol"].tolist() == [0.2, 0.21, 0.22, 0.23, 0.22, 0.25]
    assert stored.changes is not None
    assert stored.changes.lines()[1] == "vol: 1 value revised, on 2020-01-04 from 0.22 to 0.23"
    # now it has its own, and stays
    again = later("2020-01-04", close=[103.0, 104.0, 105.0], vol=[0.24, 0.22, 0.25])
    with pytest.raises(AppendRefused, match=r"2020-01-04 vol: stored 0\.23, in the files 0\.24"):
        append_history(again, tmp_path, "spx")
    # of a later day without a new row
    write_history(carried, tmp_path, "spx")
    own = later("2020-01-03", close=[102.0, 103.0, 104.0], vol=[0.22, 0.23, 0.22])
    stored, found = append_history(own, tmp_path, "spx")
    assert (stored.written, found.added.count, len(found.replaced)) == (True, 0, 1)
    assert read_history(tmp_path, "spx").repairs == (
        Repair(file="prices.csv", kind="appended", rows=0, what="vols or rates of the last days came later"),
    )


# ---------------------------------------------------------------- what is refused


def refused(new: History, former: History = FORMER) -> AppendRefused:
    with pytest.raises(AppendRefused) as caught:
        appended(former, new, name="spx")
    return caught.value


AGAIN = (
    "the files do not agree with what is stored as spx; nothing was written. If the files are right, load the whole "
    "history again without --append."
)


def test_every_difference_is_told() -> None:
    new = history(
        {"close": [101.5, 103.0, 104.0, 105.0, 106.0], "open": [100.0, NOTHING, 103.0, 1.0, 1.0],
         "vol": [0.21, 0.23, 0.34, 0.25, 0.26]},
        days=["2020-01-02", "2020-01-04", "2020-01-05", "2020-01-06", "2020-01-07"],
    )  # fmt: skip
    assert str(refused(new)).splitlines() == [
        AGAIN,
        "  2020-01-03 is stored and not in the files, which run from 2020-01-02 to 2020-01-07",
        "  2020-01-02 close: stored 101, in the files 101.5",
        "  2020-01-02 open: stored nothing, in the files 100",
        "  2020-01-04 open: stored 102, in the files nothing",
        "  2020-01-05 vol: stored 0.24, in the files 0.34",
    ]


def test_new_days_must_follow() -> None:
    holed = part(FORMER, slice(0, 5))
    holed = replace(holed, frame=holed.frame.drop(pd.Timestamp("2020-01-03")))
    new = later("2019-12-31", close=[98.0, 100.0, 101.0, 102.0, 103.0, 104.0], open=[1.0, 99.0, NOTHING, 1.0, 102, 103],
                vol=[0.1, 0.2, 0.21, 0.22, 0.23, 0.24])  # fmt: skip
    assert str(refused(new, holed)).splitlines() == [
        AGAIN,
        "  2019-12-31 is in the files and not stored, and does not follow the last stored day, 2020-01-05",
        "  2020-01-03 is in the files and not stored, and does not follow the last stored day, 2020-01-05",
    ]


@pytest.mark.parametrize(("apart", "agrees"), [(0.99, True), (1.01, False), (-0.99, True), (-1.01, False)])
def test_the_tolerance_is_what_is_stated(apart: float, agrees: bool) -> None:
    assert TOLERANCE == 1e-6
    # a part of the larger of the two
    close = 104.0 * (1 + apart * 1e-6) if apart > 0 else 104.0 / (1 - apart * 1e-6)
    new = later("2020-01-05", close=[close, 105.0], open=[103.0, 104.0], vol=[0.24, 0.25])
    if agrees:
        assert appended(FORMER, new, name="spx").history.frame["close"].iloc[4] == 104.0
    else:
        assert [column for column, _ in refused(new).differences] == ["close"]


def test_an_adjusted_history_is_recognised() -> None:
    new = later(
        "2020-01-03", close=[51.0, 51.5, 52.0, 52.5], open=[50.5, 51.0, 51.5, 52.0], vol=[0.22, 0.23, 0.24, 0.2]
    )
    assert str(refused(new)).splitlines()[0] == (
        AGAIN + " Every close is 0.5 times the one stored: the prices have been adjusted, as after a split."
    )
    one = later("2020-01-05", close=[52.0, 52.5], open=[103.0, 52.0], vol=[0.24, 0.2])
    assert str(refused(one)).splitlines()[0] == AGAIN


def test_many_differences_are_counted_and_all_are_kept() -> None:
    whole = walk(3, days=60)
    new = replace(whole, frame=whole.frame.assign(close=whole.frame["close"] + np.arange(60) % 2))
    error = refused(new, whole)
    assert len(error.differences) == 30
    lines = str(error).splitlines()
    assert len(lines) == 1 + 20 + 1
    assert lines[-1] == "  and 10 more of close"
    assert error.differences[-1][1].startswith("2020-02-29 close: stored ")


@pytest.mark.parametrize(
    ("former", "wanted"),
    [
        (["vol_30", "vol_93"], "spx holds vol_30, vol_93, and the files do not: give a file with them (--vol)"),
        (["rate"], "spx holds rate, and the files do not: give a file with it (--rates)"),
        (["dividend"], "spx holds dividend, and the files do not: give a file with it (--dividends)"),
        (
            ["open", "dividend", "vol"],
            "spx holds open, dividend, vol, and the files do not: give a file with them (--prices, --dividends, --vol)",
        ),
    ],
)
def test_a_column_that_is_missing(former: list[str], wanted: str) -> None:
    stored = history({"close": [100.0], **{name: [0.5] for name in former}})
    assert str(refused(later("2020-01-02", close=[101.0]), stored)) == f"{wanted}; nothing was written"


def test_a_new_day_without_a_vol() -> None:
    new = later("2020-01-05", close=[104.0, 105.0, 106.0, 107.0], open=[103.0] * 4, vol=[NOTHING] * 3 + [0.3])
    assert str(refused(new)) == (
        "vol has no value on 2020-01-06 and 1 more new day: give a file with it (--vol) that begins on that day or "
        "before; nothing was written"
    )


def test_refused_is_untouched_and_unknown_is_not_made(tmp_path: Path) -> None:
    with pytest.raises(StoreError, match=r"there is no history 'spx': .* make one with 'rollband load spx"):
        append_history(FORMER, tmp_path / "store", "spx")
    assert not (tmp_path / "store").exists()
    path = write_history(FORMER, tmp_path, "spx")
    before = path.read_bytes()
    new = later("2020-01-05", close=[99.0, 105.0], open=[103.0, 104.0], vol=[0.24, 0.25])
    with pytest.raises(AppendRefused):
        append_history(new, tmp_path, "spx")
    assert [file.name for file in tmp_path.iterdir()] == ["spx.parquet"]
    assert path.read_bytes() == before
