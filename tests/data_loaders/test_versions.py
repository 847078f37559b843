"""Versions of stored histories: what was is kept to the byte, and what a load changed is said with its numbers.

Rung: identity (what is kept is what was, twin of plain loops for the changes) and behaviour (hand-worked changes).
"""

from __future__ import annotations

import datetime as dt
import math
import os
from dataclasses import replace
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from data_loaders import History, StoreError, history_names, read_history, write_history
from data_loaders.disk import sha256_of
from data_loaders.listing import list_histories, list_history
from data_loaders.revisions import Changes, Days, Revised, changes_between
from data_loaders.store import prune_versions, read_stored, read_version, store_histories, store_history
from data_loaders.versions import all_versions, current_version, find_version, former_versions
from tests.data_loaders.small_histories import NOTHING, history, walk


def content(store: Path) -> dict[str, bytes]:
    return {str(path.relative_to(store)): path.read_bytes() for path in store.rglob("*") if path.is_file()}


# ---------------------------------------------------------------- kept


def test_the_one_of_before_is_kept_to_the_byte(tmp_path: Path) -> None:
    first = store_history(walk(1), tmp_path, "spx")
    assert (first.written, first.former, first.changes) == (True, None, None)
    bytes_then = first.path.read_bytes()
    os.utime(first.path, (1_600_000_000, 1_600_000_000))  # 2020-09-13 12:26:40 UTC
    second = store_history(walk(2), tmp_path, "spx")
    assert second.path == first.path == tmp_path / "spx.parquet"
    assert second.former is not None
    sha256 = second.former.sha256
    kept = tmp_path / ".versions" / "spx" / f"000001-20200913T122640Z-{sha256}.parquet"
    assert second.former.path == kept
    assert second.former.loaded == dt.datetime(2020, 9, 13, 12, 26, 40, tzinfo=dt.UTC)
    assert kept.read_bytes() == bytes_then
    assert sha256_of(kept) == sha256
    assert sorted(content(tmp_path)) == [str(kept.relative_to(tmp_path)), "spx.parquet"]
    assert read_history(tmp_path, "spx") == walk(2)
    assert read_version(second.former) == walk(1)
    # versions are no histories of their own
    assert history_names(tmp_path) == ("spx",)


def test_an_equal_history_stays_as_it_is_and_counts_as_loaded(tmp_path: Path) -> None:
    path = write_history(walk(1), tmp_path, "spx")
    before = content(tmp_path)
    os.utime(path, (1_600_000_000, 1_600_000_000))
    again = store_history(walk(1), tmp_path, "spx")
    assert (again.written, again.former, again.changes) == (False, None, None)
    assert content(tmp_path) == before
    now = current_version(tmp_path, "spx")
    assert now is not None
    assert now.loaded.year > 2020


def test_many_loads_are_all_there_in_their_order(tmp_path: Path) -> None:
    sums = []
    for seed in range(12):
        sums.append(sha256_of(write_history(walk(seed), tmp_path, "spx")))
        write_history(walk(99), tmp_path, "other")
    versions = all_versions(tmp_path, "spx")
    assert [version.sha256 for version in versions] == sums
    assert [version.current for version in versions] == [False] * 11 + [True]
    assert [read_version(version) for version in versions] == [walk(seed) for seed in range(12)]
    assert len(all_versions(tmp_path, "other")) == 1
    for seed, sha256 in enumerate(sums):
        found = find_version(tmp_path, "spx", sha256)
        assert found is not None
        assert read_version(found) == walk(seed)
        assert find_version(tmp_path, "other", sha256) is None


def test_what_comes_back_is_kept_once(tmp_path: Path) -> None:
    for seed in (1, 2, 1, 2, 1):
        write_history(walk(seed), tmp_path, "spx")
    assert len(former_versions(tmp_path, "spx")) == 2
    assert [read_version(version) for version in all_versions(tmp_path, "spx")] == [walk(2), walk(1)]


def test_the_version_that_was_read_is_told_with_it(tmp_path: Path) -> None:
    path = write_history(walk(1), tmp_path, "spx")
    assert read_stored(tmp_path, "spx") == (walk(1), sha256_of(path))


def test_a_version_is_known_by_its_content(tmp_path: Path) -> None:
    sha256 = sha256_of(write_history(walk(1), tmp_path, "spx"))
    write_history(walk(2), tmp_path, "spx")
    (kept,) = former_versions(tmp_path, "spx")
    kept.path.write_bytes(b"something else")
    assert find_version(tmp_path, "spx", sha256) is None
    # what cannot be read again is kept anew, beside it
    write_history(walk(1), tmp_path, "spx")
    write_history(walk(3), tmp_path, "spx")
    found = find_version(tmp_path, "spx", sha256)
    assert found is not None
    assert found.path.name.startswith("000003-")
    for foreign in ("x.parquet", f"1-20200101T000000Z-{sha256}.parquet", f"000009-20209901T000000Z-{sha256}.parquet"):
        (kept.path.parent / foreign).write_bytes(found.path.read_bytes())
    (kept.path.parent / f"000010-20200101T000000Z-{sha256}.parquet").mkdir()
    assert len(former_versions(tmp_path, "spx")) == 3


def test_a_damaged_history_is_kept_as_it_is(tmp_path: Path) -> None:
    path = write_history(walk(1), tmp_path, "spx")
    path.write_bytes(path.read_bytes()[:100])
    half = path.read_bytes()
    stored = store_history(walk(2), tmp_path, "spx")
    assert stored.changes is None
    assert stored.unreadable is not None
    assert stored.unreadable.startswith(f"history 'spx' ({path}) cannot be read: ")
    assert stored.former is not None
    assert stored.former.path.read_bytes() == half
    assert read_history(tmp_path, "spx") == walk(2)


def test_a_disk_without_links(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    then = write_history(walk(1), tmp_path, "spx").read_bytes()

    def refuse(*paths: object, **options: object) -> None:
        raise PermissionError(1, "Operation not permitted")

    monkeypatch.setattr(os, "link", refuse)
    stored = store_history(walk(2), tmp_path, "spx")
    assert stored.former is not None
    assert stored.former.path.read_bytes() == then
    assert len(content(tmp_path)) == 2


def test_without_room_for_the_version_nothing_is_replaced(tmp_path: Path) -> None:
    then = write_history(walk(1), tmp_path, "spx").read_bytes()
    (tmp_path / ".versions").write_text("in the way")
    with pytest.raises(StoreError, match=r"history 'spx' could not be written to .*spx\.parquet: .*; check the folder"):
        write_history(walk(2), tmp_path, "spx")
    assert content(tmp_path) == {"spx.parquet": then, ".versions": b"in the way"}


def test_many_at_once(tmp_path: Path) -> None:
    told = []
    many = [(f"s{number}", walk(number, days=20)) for number in range(150)]
    # the same name twice, near and far: the first is not lost
    twice = [*many[:5], ("s3", walk(998, days=20)), *many[5:], ("s3", walk(999, days=20))]
    stored = store_histories(twice, tmp_path, progress=told.append)
    assert [one.path.name for one in stored] == [f"{name}.parquet" for name, _ in twice]
    assert told == sorted(told)
    assert told[-1] == 152
    for number in (0, 64, 149):
        assert read_history(tmp_path, f"s{number}") == walk(number, days=20)
    assert [read_version(version) for version in all_versions(tmp_path, "s3")] == [
        walk(3, days=20), walk(998, days=20), walk(999, days=20),
    ]  # fmt: skip
    with pytest.raises(StoreError, match="cannot be the name of a history"):
        store_histories([("a", walk(1)), ("../b", walk(2))], tmp_path / "store")
    assert not (tmp_path / "b.parquet").exists()


# ---------------------------------------------------------------- let go


def test_prune(tmp_path: Path) -> None:
    for seed in range(6):
        for name in ("spx", "dax"):
            write_history(walk(seed), tmp_path, name)
    gone = prune_versions(tmp_path, ["spx"], 2)
    assert [read_history(tmp_path, "spx"), *map(read_version, former_versions(tmp_path, "spx"))] == [
        walk(5), walk(3), walk(4),
    ]  # fmt: skip
    assert [version.path.name[:7] for version in gone] == ["000001-", "000002-", "000003-"]
    assert len(former_versions(tmp_path, "dax")) == 5
    assert prune_versions(tmp_path, ["spx"], 2) == []
    assert len(prune_versions(tmp_path, ["spx", "dax"], 0)) == 7
    assert read_history(tmp_path, "dax") == walk(5)
    # with none left, numbers begin anew
    write_history(walk(1), tmp_path, "dax")
    write_history(walk(2), tmp_path, "dax")
    assert [version.path.name[:7] for version in former_versions(tmp_path, "dax")] == ["000001-", "000002-"]


# ---------------------------------------------------------------- listed


def test_list(tmp_path: Path) -> None:
    assert list_histories(tmp_path / "no") == ()
    write_history(history({"close": [1.0, 2.0], "dividend": [0, 0], "vol_30": [0.2] * 2, "vol_93": [0.2] * 2}),
                  tmp_path, "b")  # fmt: skip
    write_history(history({"close": [1.0] * 3, "volume": [5.0] * 3, "rate": [0.01] * 3}, first="2019-12-30"),
                  tmp_path, "a")  # fmt: skip
    write_history(walk(1), tmp_path, "a")
    write_history(walk(1), tmp_path, "gone")
    write_history(walk(2), tmp_path, "gone")
    (tmp_path / "gone.parquet").unlink()
    (tmp_path / "odd.parquet").write_bytes(b"no such thing")
    (tmp_path / ".versions" / "empty").mkdir()
    a, b, gone, odd = list_histories(tmp_path)
    assert [one.name for one in (a, b, gone, odd)] == ["a", "b", "gone", "odd"]
    assert a.told is not None
    assert (a.told.first, a.told.last, a.told.days) == (dt.date(2020, 1, 1), dt.date(2020, 10, 26), 300)
    assert a.told.holds == "prices (close), vol"
    assert a.told.files == (("prices", "prices.csv", "ab" * 32), ("vol", "vol.csv", "ab" * 32))
    assert [version.current for version in a.versions] == [False, True]
    assert b.told is not None
    assert b.told.holds == "prices (close), dividends, vol of 30 and 93 days"
    assert list_history(tmp_path, "b") == b
    assert (gone.told, gone.current, len(gone.versions)) == (None, None, 1)
    assert gone.problem == "gone is no longer there, only former versions of it are"
    assert odd.told is None
    assert odd.problem is not None
    assert odd.problem.startswith(f"{tmp_path / 'odd.parquet'} cannot be read as a history (")
    write_history(replace(walk(1), schema_version=2), tmp_path, "odd")
    assert list_history(tmp_path, "odd").problem == (
        f"{tmp_path / 'odd.parquet'} has schema version 2 and this program reads 1: load it again"
    )


# ---------------------------------------------------------------- what is different

FORMER = history({
    "close": [100.0, 101.0, 102.0, 103.0, 104.0], "open": [99.0, NOTHING, 101.0, 102.0, NOTHING],
    "volume": [1.0] * 5, "vol": [0.20, 0.21, 0.22, 0.23, 0.24],
})  # fmt: skip
NEW = history(
    {
        # 2 January is gone; 6 and 7 January are new; the close of the 3rd is 3 lower, that of the 4th 3 higher
        "close": [100.0, 99.0, 106.0, 104.5, 105.0, 106.0], "open": [NOTHING, 101.0, 102.0, 103.0, 104.0, 105.0],
        "vol": [0.20, 0.22, 0.23, 0.24, 0.25, 0.26], "rate": [0.01] * 6,
    },
    days=["2020-01-01", "2020-01-03", "2020-01-04", "2020-01-05", "2020-01-06", "2020-01-07"],
    notes=("a note",), sha256="cd" * 32,
)  # fmt: skip


def test_changes_worked_out_by_hand() -> None:
    assert changes_between(FORMER, NEW) == Changes(
        added=Days(count=2, first=dt.date(2020, 1, 6), last=dt.date(2020, 1, 7)),
        gone=Days(count=1, first=dt.date(2020, 1, 2), last=dt.date(2020, 1, 2)),
        columns_added=("rate",),
        columns_gone=("volume",),
        revised=(
            # -3 on the 3rd, +3 on the 4th, +0.5 on the 5th: of the two largest the first
            Revised(column="close", changed=3, appeared=0, vanished=0, day=dt.date(2020, 1, 3), was=102.0, now=99.0),
            Revised(column="open", changed=0, appeared=1, vanished=1),
        ),
        other_facts=("files", "notes"),
    )
    assert changes_between(FORMER, NEW).lines() == [
        "rows: 2 (2020-01-06 to 2020-01-07) added, 1 (2020-01-02) gone",
        "new: rate",
        "no longer there: volume",
        "close: 3 values revised, the largest on 2020-01-03 from 102 to 99",
        "open: 1 where there was none; 1 gone",
    ]


def test_one_value_and_no_value() -> None:
    closes = [100.0, 101.0, 102.0, 103.0, np.nextafter(104.0, 105.0)]
    one = replace(FORMER, frame=FORMER.frame.assign(close=closes))
    # the last bit counts
    assert changes_between(FORMER, one).lines() == [
        "close: 1 value revised, on 2020-01-05 from 104.0 to 104.00000000000001"
    ]
    assert changes_between(FORMER, FORMER).lines() == []
    assert changes_between(FORMER, FORMER).same_values
    noted = replace(FORMER, notes=("x",), usable_from=dt.date(2020, 1, 2))
    assert changes_between(FORMER, noted).lines() == ["all values are the same; others are notes, first usable day"]
    assert not changes_between(FORMER, NEW).same_values


VALUES = st.one_of(st.just(NOTHING), st.sampled_from([1.0, 1.5, 2.0, -3.0, 0.0]))


@st.composite
def some_history(draw: st.DrawFn) -> History:
    days = sorted(draw(st.sets(st.integers(1, 28), min_size=1, max_size=12)))
    names = draw(st.lists(st.sampled_from(["close", "open", "vol", "rate"]), unique=True, min_size=1))
    columns = {name: draw(st.lists(VALUES, min_size=len(days), max_size=len(days))) for name in names}
    return history(columns, days=[f"2020-02-{day:02d}" for day in days])


@settings(max_examples=200, deadline=None)
@given(some_history(), some_history())
def test_changes_are_those_of_plain_loops(former: History, new: History) -> None:
    found = changes_between(former, new)
    before: dict[dt.date, dict[str, float]] = {}
    after: dict[dt.date, dict[str, float]] = {}
    for table, one in ((before, former), (after, new)):
        for day, row in one.frame.iterrows():
            assert isinstance(day, pd.Timestamp)
            table[day.date()] = dict(row)
    added, gone = [day for day in after if day not in before], [day for day in before if day not in after]
    assert (found.added.count, found.gone.count) == (len(added), len(gone))
    assert (found.added.first, found.added.last) == ((added[0], added[-1]) if added else (None, None))
    assert (found.gone.first, found.gone.last) == ((gone[0], gone[-1]) if gone else (None, None))
    expected = {}
    for name in new.frame.columns:
        if name not in former.frame.columns:
            continue
        counts, size, largest = [0, 0, 0], 0.0, None
        for day in after:
            if day not in before:
                continue
            was, now = before[day][name], after[day][name]
            if math.isnan(was) and not math.isnan(now):
                counts[1] += 1
            elif math.isnan(now) and not math.isnan(was):
                counts[2] += 1
            elif was != now and not math.isnan(was):
                counts[0] += 1
                if abs(now - was) > size:
                    size, largest = abs(now - was), (day, was, now)
        if any(counts):
            expected[name] = (*counts, *(largest or (None, None, None)))
    assert {
        one.column: (one.changed, one.appeared, one.vanished, one.day, one.was, one.now) for one in found.revised
    } == expected
