"""``rollband overlays``: the list, a file printed, copied and drawn, and what it refuses.

Rung: behaviour (exit codes, the words, what is on the disk afterwards).
"""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest

from studies.ready_made import READY_MADE, ready_made_text

Run = Callable[..., Any]


def tree(folder: Path) -> list[str]:
    return sorted(str(path.relative_to(folder)) for path in folder.rglob("*") if path.is_file())


def test_the_list_comes_without_any_word_and_by_its_own(rollband: Run, home: Path) -> None:
    alone, by_word = rollband("overlays"), rollband("overlays", "list")
    assert (alone.code, alone.err) == (0, "")
    assert alone.out == by_word.out
    lines = alone.out.splitlines()
    assert [line.split()[0] for line in lines[: len(READY_MADE)]] == list(READY_MADE)
    assert lines[2].split(maxsplit=1)[1] == (
        "The standing band: a put 5% below each quarter, a call 10% above each month."
    )
    assert lines[len(READY_MADE)] == ""
    assert tree(home) == []


@pytest.mark.parametrize("name", ["band", "low-vol-put"])
def test_a_name_prints_the_file_to_the_byte(rollband: Run, name: str) -> None:
    short, long = rollband("overlays", name), rollband("overlays", "show", name)
    assert (short.code, short.err) == (0, "")
    assert short.out == long.out == ready_made_text(name)


@pytest.mark.parametrize("words", [("band", "--copy"), ("show", "band", "--out"), ("show", "band", "--copy")])
def test_a_copy_is_the_file_and_is_never_written_over(rollband: Run, home: Path, words: tuple[str, ...]) -> None:
    ran = rollband("overlays", *words, "my band.toml")
    assert (ran.code, ran.err) == (0, "")
    assert ran.out == "Written: my band.toml\nNext: rollband replay HISTORY --overlay 'my band.toml'\n"
    assert (home / "my band.toml").read_text(encoding="utf-8") == ready_made_text("band")
    (home / "my band.toml").write_text("mine", encoding="utf-8")
    again = rollband("overlays", *words, "my band.toml")
    assert (again.code, again.out) == (5, "")
    assert "my band.toml is there already and stays as it is" in again.err
    assert (home / "my band.toml").read_text(encoding="utf-8") == "mine"


def test_a_copy_can_be_checked_and_replayed(stored: Run, home: Path) -> None:
    assert stored("overlays", "zero-cost-band", "--copy", "zero.toml").code == 0
    checked = stored("overlays", "check", "zero.toml")
    assert (checked.code, checked.out.splitlines()[0]) == (0, "zero.toml: quarterly 95 put, call paying for it")
    assert stored("replay", "mine", "--overlay", "zero.toml", "--vol-quote", "variance-swap", "--out", "out").code == 0
    assert (home / "out" / "summary.json").is_file()


@pytest.mark.parametrize(
    ("file", "begins"), [("p.png", b"\x89PNG"), ("p.SVG", b"<?xml"), ("p.pdf", b"%PDF")], ids=["png", "svg", "pdf"]
)
def test_a_picture(rollband: Run, home: Path, file: str, begins: bytes) -> None:
    ran = rollband("overlays", "zero-cost-band", "--picture", file)
    assert (ran.code, ran.err) == (0, "")
    lines = ran.out.splitlines()
    assert lines[0] == "95 put bought for 2.47"
    assert lines[1].endswith(" call sold for 2.47")
    assert lines[2:] == [
        "For one share. No net premium, half-spreads included.",
        "Assumed: price 100, vol 20% at the money, smile index, rate 2%, no dividends.",
        f"Picture: {file}",
    ]
    assert (home / file).read_bytes().startswith(begins)
    assert tree(home) == [file]
    # drawn again over itself
    assert rollband("overlays", "zero-cost-band", "--picture", file).code == 0


def test_picture_and_copy_together_and_a_file_of_ones_own(rollband: Run, home: Path) -> None:
    assert rollband("overlays", "put-only", "--picture", "p.png", "--copy", "own.toml").code == 0
    assert tree(home) == ["own.toml", "p.png"]
    text = (home / "own.toml").read_text(encoding="utf-8").replace("= 95", "= 88")
    (home / "own.toml").write_text(text + '\n[volatility]\nsmile = "flat"\n', encoding="utf-8")
    ran = rollband("overlays", "own.toml", "--picture", "q.png")
    assert ran.code == 0
    assert ran.out.startswith("88 put bought for 0.")
    assert "smile flat" in ran.out


@pytest.mark.parametrize(
    ("code", "words", "said"),
    [
        (2, ["bnd"], "bnd: no ready-made overlay has this name; did you mean band?"),
        (2, ["xyzzy", "--picture", "p.png"], "xyzzy: no ready-made overlay has this name; there are: put-only"),
        (2, ["show"], "Missing argument"),
        (2, ["chek", "band.toml"], "No such command 'chek'"),
        (2, ["band", "more"], "Got unexpected extra argument"),
        (2, ["no.toml"], "no.toml: there is no such file"),
        (2, ["broken.toml", "--picture", "p.png"], "broken.toml, line 1, leg: "),
        (2, ["band", "--picture", "p.jpg"], "p.jpg ends in none of .png, .svg, .pdf"),
        (2, ["band", "--picture", "p.jpg", "--copy", "own.toml"], "p.jpg ends in none of"),
        (5, ["band", "--picture", "no folder/p.png", "--copy", "own.toml"], "cannot write no folder/p.png"),
        (5, ["band", "--picture", "p.png", "--copy", "broken.toml"], "broken.toml is there already"),
    ],
)
def test_refused_and_nothing_written(rollband: Run, home: Path, code: int, words: list[str], said: str) -> None:
    (home / "broken.toml").write_text("leg = 5\n", encoding="utf-8")
    ran = rollband("overlays", *words)
    assert (ran.code, ran.out) == (code, "")
    assert said in " ".join(ran.err.split())
    assert tree(home) == ["broken.toml"]
    assert (home / "broken.toml").read_text(encoding="utf-8") == "leg = 5\n"


def test_help_says_all_forms(rollband: Run) -> None:
    said = " ".join(rollband("overlays", "--help").out.split())
    assert "rollband overlays [OPTIONS] [NAME | COMMAND]" in said
    for word in ("list", "show", "check", "--copy FILE", "--picture FILE", "rollband replay HISTORY --overlay FILE"):
        assert word in said
    assert "--picture" in rollband("overlays", "band", "--help").out
