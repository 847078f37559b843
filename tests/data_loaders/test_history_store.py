"""Histories in and out of Parquet: equality, names, atomic replacement, damage.

Rung: identity (what is read is what was written; a failing write leaves the old file).
"""

from __future__ import annotations

import json
import os
from dataclasses import replace
from pathlib import Path

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.parquet as pq
import pytest

from data_loaders import (
    History,
    Reading,
    StoreError,
    check_name,
    history_names,
    load_history,
    read_history,
    readings,
    write_history,
)


@pytest.fixture
def history(tmp_path: Path) -> History:
    prices, vol, rates = (tmp_path / f"{kind}.csv" for kind in ("prices", "vol", "rates"))
    prices.write_text("date,open,close,div,x\n2020-01-06,3,102,0.25,\n2020-01-03,,101,,\n2020-01-02,1,100,,\n")
    vol.write_text("date,30,93\n2020-01-03,20,21\n2020-01-04,22,23\n")
    rates.write_text("date,rate_naïve\n2020-01-02,1.5\n")
    made = load_history(prices=prices, vol=vol, rates=rates)
    assert len(made.notes) > 3
    assert len(made.repairs) == 3
    return made


def test_round_trip(history: History, tmp_path: Path) -> None:
    path = write_history(history, tmp_path / "new" / "store", "spx.1")
    assert path == tmp_path / "new" / "store" / "spx.1.parquet"
    back = read_history(tmp_path / "new" / "store", "spx.1")
    assert back == history
    pd.testing.assert_frame_equal(back.frame, history.frame)
    assert back.frame.index.dtype == "datetime64[ns]"
    back.frame["close"] += 1.0  # the frame is the reader's own


def test_equal_histories_give_equal_bytes(history: History, tmp_path: Path) -> None:
    first = write_history(history, tmp_path, "a").read_bytes()
    assert write_history(read_history(tmp_path, "a"), tmp_path, "b").read_bytes() == first
    changed = replace(history, notes=(*history.notes, "one more"))
    assert write_history(changed, tmp_path, "c").read_bytes() != first


def test_metadata_can_be_read_without_us(history: History, tmp_path: Path) -> None:
    schema = pq.read_schema(write_history(history, tmp_path, "spx"))
    facts = json.loads(schema.metadata[b"rollband.history"])
    assert facts["schema_version"] == 1
    assert [source["sha256"] for source in facts["sources"]] == [s.sha256 for s in history.sources]
    assert facts["usable_from"] == "2020-01-03"
    assert schema.names[0] == "date"
    assert pd.read_parquet(tmp_path / "spx.parquet")["close"].tolist() == [100, 101, 102]


def test_failing_write_leaves_the_old_file_and_nothing_else(
    history: History, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    store = tmp_path / "store"
    old = write_history(history, store, "spx").read_bytes()
    changed = replace(history, notes=())

    def half(table: pa.Table, file: object, **options: object) -> None:
        file.write(b"PAR1 half a file")  # type: ignore[attr-defined]
        raise OSError(28, "No space left on device")

    with monkeypatch.context() as patch:
        patch.setattr(pq, "write_table", half)
        with pytest.raises(
            StoreError, match=r"history 'spx' could not be written to .*spx.parquet: No space left on device"
        ):
            write_history(changed, store, "spx")
    with monkeypatch.context() as patch:
        patch.setattr(os, "fsync", lambda handle: (_ for _ in ()).throw(KeyboardInterrupt))
        with pytest.raises(KeyboardInterrupt):
            write_history(changed, store, "spx")
    assert [path.name for path in store.iterdir()] == ["spx.parquet"]
    assert (store / "spx.parquet").read_bytes() == old


def test_store_that_is_no_folder(history: History, tmp_path: Path) -> None:
    (tmp_path / "file").write_text("")
    with pytest.raises(StoreError, match="could not be written"):
        write_history(history, tmp_path / "file", "spx")
    assert history_names(tmp_path / "file") == ()
    with pytest.raises(StoreError, match="cannot be read: "):
        read_history(tmp_path / "file", "spx")


def test_unknown_name_lists_the_known_and_the_nearest(history: History, tmp_path: Path) -> None:
    store = tmp_path / "store"
    with pytest.raises(
        StoreError, match=r"no history 'spx': .* holds none yet; make one with 'rollband load spx --prices FILE'"
    ):
        read_history(store, "spx")
    write_history(history, store, "spx-1990")
    write_history(history, store, "dax")
    (store / ".dax.0123.tmp").write_bytes(b"")
    (store / ".hidden.parquet").write_bytes(b"")
    (store / "folder.parquet").mkdir()
    assert history_names(store) == ("dax", "spx-1990")
    with pytest.raises(
        StoreError, match=r"no history 'spx-1991' in .*; did you mean 'spx-1990'\? It holds: dax, spx-1990"
    ):
        read_history(store, "spx-1991")
    with pytest.raises(StoreError, match=r"no history 'zzz' in [^;]*store\. It holds: dax, spx-1990"):
        read_history(store, "zzz")


@pytest.mark.parametrize("name", ["a", "spx", "SPX_1990-2020", "a.b.c", "-x", "_", "0", "x" * 64])
def test_names_that_can_be_used(name: str) -> None:
    assert check_name(name) == name


@pytest.mark.parametrize(
    "name",
    [
        "",
        ".",
        "..",
        ".a",
        "a.",
        "a/b",
        "../a",
        "/a",
        "a\\b",
        "C:a",
        "a b",
        "a\n",
        "a\0",
        "é",
        "x" * 65,
        "a%2fb",
        "~",
        "*",
    ],
)
def test_names_that_would_be_paths_or_worse(name: str, history: History, tmp_path: Path) -> None:
    for use in (
        lambda: check_name(name),
        lambda: write_history(history, tmp_path / "store", name),
        lambda: read_history(tmp_path / "store", name),
    ):
        with pytest.raises(
            StoreError, match=rf"\({len(name)} characters\) cannot be the name of a history: .* at most 64 characters"
        ):
            use()
    assert not (tmp_path / "store").exists()


def test_damaged_and_foreign_files(history: History, tmp_path: Path) -> None:
    path = write_history(history, tmp_path, "spx")
    data = path.read_bytes()
    path.write_bytes(data[: len(data) // 2])
    with pytest.raises(
        StoreError, match=r"history 'spx' \(.*spx.parquet\) cannot be read: .*; load it again from its CSV files"
    ):
        read_history(tmp_path, "spx")
    path.write_bytes(b"")
    with pytest.raises(StoreError, match="cannot be read"):
        read_history(tmp_path, "spx")
    pq.write_table(pa.table({"date": [1]}), path)
    with pytest.raises(StoreError, match="is a Parquet file but not a history"):
        read_history(tmp_path, "spx")


@pytest.mark.parametrize("text", ["{}", "[]", "not json", '{"schema_version": 1}'])
def test_damaged_metadata(text: str, history: History, tmp_path: Path) -> None:
    path = write_history(history, tmp_path, "spx")
    table = pq.read_table(path).replace_schema_metadata({b"rollband.history": text.encode()})
    pq.write_table(table, path)
    with pytest.raises(StoreError, match=r"history 'spx' .* is damaged \(\w+: .*\); load it again"):
        read_history(tmp_path, "spx")


def test_other_schema_version(history: History, tmp_path: Path) -> None:
    write_history(replace(history, schema_version=2), tmp_path, "spx")
    with pytest.raises(StoreError, match=r"has schema version 2 and this program reads version 1; load it again"):
        read_history(tmp_path, "spx")


def test_nan_survives(history: History, tmp_path: Path) -> None:
    write_history(history, tmp_path, "spx")
    np.testing.assert_array_equal(read_history(tmp_path, "spx").frame["open"], [1, np.nan, 3])


def test_what_was_said_and_found_of_a_file_survives_and_may_be_missing(tmp_path: Path) -> None:
    (tmp_path / "p.csv").write_text("Tag;Kurs\n13.01.2020;1.000,5\n")
    said = readings(columns=["date=Tag", "close=Kurs"], decimals=["comma"])
    history = load_history(prices=tmp_path / "p.csv", readings=said)
    path = write_history(history, tmp_path, "dax")
    (source,) = read_history(tmp_path, "dax").sources
    assert source.reading == Reading(columns=(("date", "Tag"), ("close", "Kurs")), decimal="comma")
    assert source.taken == history.sources[0].taken
    assert (
        dict(source.taken)["text"] == "UTF-8, columns separated by semicolons, decimal comma, point between thousands"
    )
    # histories stored before files of other dialects were read
    table = pq.read_table(path)
    facts = json.loads(table.schema.metadata[b"rollband.history"])
    for entry in facts["sources"]:
        del entry["reading"], entry["taken"]
    pq.write_table(table.replace_schema_metadata({b"rollband.history": json.dumps(facts).encode()}), path)
    (source,) = read_history(tmp_path, "dax").sources
    assert (source.reading, source.taken) == (Reading(), ())
