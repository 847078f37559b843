"""Results folders: whole or not at all, numbered, and JSON that every reader takes.

Rung: identity (small folders whose outcome is worked out by hand).
"""

from __future__ import annotations

import hashlib
import json
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pyarrow.parquet as pq
import pytest
from hypothesis import example, given
from hypothesis import strategies as st

from studies.errors import ResultsError
from studies.results import (
    MANIFEST,
    check_replaceable,
    folder_name,
    free_folder,
    json_text,
    read_manifest,
    repeatable_part,
    sha256_of,
    write_folder,
    write_json,
    write_manifest,
    write_parquet,
)

HERE = {"kind": "prices", "file": "p.csv", "sha256": "aa"}


def manifest(**changes: Any) -> dict[str, Any]:
    """A manifest such as a replay writes, with some entries changed."""
    return {
        "schema": 1, "made_by": "rollband 0.1.0", "command": "rollband replay x", "inputs": [HERE],
        "settings": {"from": None, "rate": 3.0}, "seed": None,
    } | changes  # fmt: skip


def fill_with(text: str) -> Any:
    """What fills a folder with a manifest and one more file."""

    def fill(folder: Path) -> None:
        (folder / "summary.json").write_text(text)
        write_manifest(folder, manifest())

    return fill


def tree(folder: Path) -> dict[str, bytes | None]:
    """Every path below a folder, hidden ones too, with its bytes; None for folders."""
    return {
        str(path.relative_to(folder)): path.read_bytes() if path.is_file() else None
        for path in sorted(folder.rglob("*"))
    }


# ---------------------------------------------------------------- written whole or not at all


def test_a_new_folder_with_parents(tmp_path: Path) -> None:
    out = tmp_path / "a" / "b" / "out"
    write_folder(out, fill_with("one"))
    assert (out / "summary.json").read_text() == "one"
    assert sorted(tree(tmp_path)) == ["a", "a/b", "a/b/out", f"a/b/out/{MANIFEST}", "a/b/out/summary.json"]
    assert out.stat().st_mode & 0o777 == 0o755


def test_an_empty_folder_is_filled(tmp_path: Path) -> None:
    out = tmp_path / "out"
    out.mkdir()
    write_folder(out, fill_with("one"))
    assert sorted(tree(tmp_path)) == ["out", f"out/{MANIFEST}", "out/summary.json"]


def test_a_results_folder_is_replaced_whole(tmp_path: Path) -> None:
    out = tmp_path / "out"
    write_folder(out, fill_with("one"))
    write_folder(out, fill_with("two"))
    assert (out / "summary.json").read_text() == "two"
    assert sorted(tree(tmp_path)) == ["out", f"out/{MANIFEST}", "out/summary.json"]


@pytest.mark.parametrize("error", [ValueError("no"), RuntimeError("no"), KeyboardInterrupt(), MemoryError()])
@pytest.mark.parametrize("before", ["results", "empty", "absent"])
def test_a_fill_that_raises_changes_nothing(tmp_path: Path, error: BaseException, before: str) -> None:
    out = tmp_path / "out"
    if before == "results":
        write_folder(out, fill_with("one"))
    elif before == "empty":
        out.mkdir()
    was = tree(tmp_path)

    def fill(folder: Path) -> None:
        (folder / "summary.json").write_text("half")
        (folder / "sub").mkdir()
        raise error

    with pytest.raises(type(error)):
        write_folder(out, fill)
    assert tree(tmp_path) == was


def test_a_full_disk_is_an_error_of_ours(tmp_path: Path) -> None:
    out = tmp_path / "out"
    write_folder(out, fill_with("one"))
    was = tree(tmp_path)

    def fill(folder: Path) -> None:
        raise OSError(28, "No space left on device")

    with pytest.raises(ResultsError, match=r"cannot write .*out: .*No space left on device.*still there"):
        write_folder(out, fill)
    assert tree(tmp_path) == was


@pytest.mark.parametrize("failing", [1, 2])
def test_a_rename_that_fails_changes_nothing(tmp_path: Path, monkeypatch: pytest.MonkeyPatch, failing: int) -> None:
    # replacing takes two renames: the old folder aside, the fresh one in; a third would bring the old one back
    out = tmp_path / "out"
    write_folder(out, fill_with("one"))
    was = tree(tmp_path)
    rename, calls = Path.rename, []

    def rename_or_not(self: Path, target: Path) -> Path:
        calls.append(self)
        if len(calls) == failing:
            raise OSError(16, "Device or resource busy")
        return rename(self, target)

    monkeypatch.setattr(Path, "rename", rename_or_not)
    with pytest.raises(ResultsError, match="Device or resource busy"):
        write_folder(out, fill_with("two"))
    monkeypatch.undo()
    assert calls
    assert tree(tmp_path) == was


def test_the_working_folder_itself(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    # it cannot be moved aside: either it is filled all the same, or the error leaves nothing behind
    monkeypatch.chdir(tmp_path)
    try:
        write_folder(Path(), fill_with("one"))
    except ResultsError:
        assert tree(tmp_path) == {}
    else:
        assert sorted(tree(tmp_path)) == [MANIFEST, "summary.json"]


# ---------------------------------------------------------------- what may be replaced


def test_what_may_be_replaced(tmp_path: Path) -> None:
    check_replaceable(tmp_path / "absent")
    (tmp_path / "empty").mkdir()
    check_replaceable(tmp_path / "empty")
    write_folder(tmp_path / "results", fill_with("one"))
    check_replaceable(tmp_path / "results")


@pytest.mark.parametrize(
    ("name", "says"),
    [
        ("foreign", r"foreign holds other files and no manifest\.json of ours: give an empty or a new folder as --out"),
        ("hidden", r"hidden holds other files and no manifest\.json"),
        ("manifest folder", r"holds other files and no manifest\.json"),
        ("file", r"file is not a folder: give another --out"),
        ("link", r"link is not a folder: give another --out"),
    ],
)
def test_what_may_not(tmp_path: Path, name: str, says: str) -> None:
    out = tmp_path / name
    if name == "file":
        out.write_text("mine")
    elif name == "link":
        write_folder(tmp_path / "results", fill_with("one"))
        out.symlink_to(tmp_path / "results")
    elif name == "manifest folder":
        (out / MANIFEST).mkdir(parents=True)
    else:
        out.mkdir()
        (out / (".hidden" if name == "hidden" else "thesis.docx")).write_text("mine")
    was = tree(tmp_path)
    with pytest.raises(ResultsError, match=says):
        write_folder(out, fill_with("two"))
    assert tree(tmp_path) == was


def test_below_a_file_is_an_error_of_ours(tmp_path: Path) -> None:
    (tmp_path / "file").write_text("mine")
    with pytest.raises(ResultsError, match="cannot write beside"):
        write_folder(tmp_path / "file" / "out", fill_with("one"))


# ---------------------------------------------------------------- numbering


def make(parent: Path, name: str, written: dict[str, Any]) -> Path:
    folder = free_folder(parent, name, written)
    write_folder(folder, lambda fresh: write_json(fresh / MANIFEST, written))
    return folder


def test_numbering_and_reuse(tmp_path: Path) -> None:
    results = tmp_path / "results"
    first, second, third = manifest(), manifest(settings={"rate": 4.0}), manifest(inputs=[HERE | {"sha256": "bb"}])
    assert [make(results, "band", m).name for m in (first, second, third)] == ["band", "band-2", "band-3"]
    # the same again goes where it was, however the command was spelled, the file called or the inputs ordered
    assert make(results, "band", manifest(settings={"rate": 4.0}, command="other")).name == "band-2"
    assert make(results, "band", manifest(inputs=[HERE | {"file": "renamed.csv"}])).name == "band"
    assert make(results, "band", manifest(versions={"numpy": "9"})).name == "band"
    assert make(results, "band", manifest(schema=2)).name == "band-4"
    assert make(results, "other", first).name == "other"


def test_order_of_inputs_does_not_matter() -> None:
    vol = {"kind": "vol", "file": "v.csv", "sha256": "cc"}
    assert repeatable_part(manifest(inputs=[HERE, vol])) == repeatable_part(manifest(inputs=[vol, HERE]))
    assert repeatable_part(manifest(inputs=[HERE])) != repeatable_part(manifest(inputs=[HERE, vol]))
    assert repeatable_part(None) is None


@pytest.mark.parametrize("there", ["foreign folder", "empty folder", "file", "broken manifest", "a list"])
def test_numbering_goes_round_what_is_not_ours(tmp_path: Path, there: str) -> None:
    band = tmp_path / "band"
    if there == "file":
        band.write_text("mine")
    else:
        band.mkdir()
        content = {"broken manifest": "{", "a list": "[1]", "foreign folder": "x"}.get(there)
        if content is not None:
            (band / ("thesis.docx" if there == "foreign folder" else MANIFEST)).write_text(content)
    was = tree(tmp_path)
    assert read_manifest(band) is None
    assert free_folder(tmp_path, "band", manifest()) == tmp_path / "band-2"
    assert tree(tmp_path) == was


def test_settings_survive_json(tmp_path: Path) -> None:
    # what is compared has been through JSON: floats, whole numbers and None come back as they were
    settings = {
        "rate": 0.1 + 0.2,
        "from": None,
        "overlay": {"leg": [{"ratio": 1.0, "term": 3, "name": "Ü\n\x7f\u2028"}]},
    }
    folder = make(tmp_path, "band", manifest(settings=settings))
    assert free_folder(tmp_path, "band", manifest(settings=settings)) == folder
    found = read_manifest(folder)
    assert found is not None
    assert found["settings"] == settings


# ---------------------------------------------------------------- JSON


def test_json_of_everything_a_summary_holds(tmp_path: Path) -> None:
    value = {
        "nan": float("nan"),
        "inf": float("inf"),
        "minus": -np.inf,
        "numpy nan": np.float64("nan"),
        "float": np.float64(0.1),
        "int": np.int64(3),
        "bool": np.bool_(True),
        "none": None,
        "day": np.datetime64("2008-03-20"),
        "nested": [{"a": (1, np.float32(0.5), float("nan"))}],
        "text": "Ü – 日本 \u2028",
        3: "key",
    }
    file = tmp_path / "x.json"
    write_json(file, value)
    text = file.read_text(encoding="utf-8")
    assert text == json_text(value) + "\n"

    def refuse(word: str) -> float:
        raise AssertionError(f"{word} is no JSON")

    assert json.loads(text, parse_constant=refuse) == {
        "nan": None, "inf": None, "minus": None, "numpy nan": None, "float": 0.1, "int": 3, "bool": True, "none": None,
        "day": "2008-03-20", "nested": [{"a": [1, 0.5, None]}], "text": "Ü – 日本 \u2028", "3": "key",
    }  # fmt: skip
    assert next(iter(json.loads(text))) == "nan"
    assert "Ü – 日本" in text


def test_a_missing_day_is_null() -> None:
    assert json.loads(json_text({"day": np.datetime64("NaT")})) == {"day": None}


@given(st.floats())
def test_floats_come_back_exactly(value: float) -> None:
    found = json.loads(json_text(np.float64(value)))
    assert found == value if np.isfinite(value) else found is None


# ---------------------------------------------------------------- Parquet and sums


def test_parquet_bytes_depend_on_the_values_alone(tmp_path: Path) -> None:
    days = pd.date_range("2020-01-01", periods=3)
    frame = pd.DataFrame({"date": days, "x": [1.0, np.nan, 3.0], "leg": ["put", "call", "put"]})
    other = frame.set_axis([7, 8, 9]).assign(date=days.astype("datetime64[s]"))
    other.attrs["note"] = "not a value"
    write_parquet(tmp_path / "one", frame)
    write_parquet(tmp_path / "two", other)
    assert (tmp_path / "one").read_bytes() == (tmp_path / "two").read_bytes()
    table = pq.read_table(tmp_path / "one")
    assert table.column_names == ["date", "x", "leg"]
    assert str(table.schema.field("date").type) == "timestamp[ms]"
    back = pd.read_parquet(tmp_path / "one")
    assert back["date"].tolist() == days.tolist()
    np.testing.assert_array_equal(back["x"], frame["x"])


def test_sha256(tmp_path: Path) -> None:
    content = b"abc" * 1_000_000
    (tmp_path / "f").write_bytes(content)
    assert sha256_of(tmp_path / "f") == hashlib.sha256(content).hexdigest()
    # FIPS 180-4, the published digest of "abc"
    (tmp_path / "f").write_bytes(b"abc")
    assert sha256_of(tmp_path / "f") == "ba7816bf8f01cfea414140de5dae2223b00361a396177a9cb410ff61f20015ad"


# ---------------------------------------------------------------- names of folders


@pytest.mark.parametrize(
    ("parts", "expected"),
    [
        (("mine", "quarterly 95 put, monthly 110 call"), "mine-quarterly-95-put-monthly-110-call"),
        (("../../etc", "passwd"), "etc-passwd"),
        (("/", "\\", ".."), "replay"),
        (("日本", "😀"), "replay"),
        (("", ""), "replay"),
        (("C:\\con", "a\x00b\nc"), "c-con-a-b-c"),
        (("x" * 300,), "x" * 80),
        (("x" * 79 + " y",), "x" * 79),
    ],
)
def test_folder_names(parts: tuple[str, ...], expected: str) -> None:
    assert folder_name(*parts) == expected


@given(st.lists(st.text(), min_size=1, max_size=3))
@example(["..", "."])
@example(["a/../../b", "~", "-rf"])
@example(["\x00", "İ", "ß", "ﬁ"])
def test_folder_names_are_never_paths(parts: list[str]) -> None:
    name = folder_name(*parts)
    assert 0 < len(name) <= 80
    assert set(name) <= set("abcdefghijklmnopqrstuvwxyz0123456789-")
    assert not name.startswith("-")
    assert not name.endswith("-")
    assert (Path("results") / name).parent == Path("results")
    assert (Path("/results") / name).resolve() == Path("/results") / name


# ---------------------------------------------------------------- what of a folder may be replaced


def filled(folder: Path, *names: str, made_by: str = "rollband 0.1.0") -> Path:
    folder.mkdir()
    for name in names:
        (folder / name).write_text("old")
    write_manifest(folder, {"schema": 1, "made_by": made_by})
    return folder


def test_a_manifest_names_the_files_of_its_folder(tmp_path: Path) -> None:
    out = filled(tmp_path / "out", "summary.json", "daily.parquet")
    assert read_manifest(out)["files"] == ["daily.parquet", "manifest.json", "summary.json"]
    check_replaceable(out)


def test_a_file_of_the_users_own_among_results_is_not_lost(tmp_path: Path) -> None:
    out = filled(tmp_path / "out", "summary.json")
    (out / "notes.txt").write_text("mine")
    with pytest.raises(ResultsError, match=r"holds results, and also notes\.txt, which would be lost: move that away"):
        write_folder(out, lambda fresh: None)
    assert (out / "notes.txt").read_text() == "mine"


@pytest.mark.parametrize("text", ['{"name": "my app"}', '{"made_by": 3}', "[]", "{", '{"made_by": "another program"}'])
def test_a_folder_with_a_manifest_of_somebody_else_is_not_touched(tmp_path: Path, text: str) -> None:
    out = tmp_path / "out"
    out.mkdir()
    (out / "manifest.json").write_text(text)
    (out / "index.js").write_text("mine")
    with pytest.raises(ResultsError, match=r"holds other files and no manifest\.json of ours"):
        write_folder(out, lambda fresh: None)
    assert (out / "index.js").read_text() == "mine"


def test_results_of_another_kind_are_not_replaced(tmp_path: Path) -> None:
    out = filled(tmp_path / "out", "summary.json")
    check_replaceable(out, kind="replay")
    with pytest.raises(ResultsError, match="holds the results of a replay, not of a study: give another --out"):
        check_replaceable(out, kind="study")
