"""Commands that do what they are asked: load, replay, demo, and what they leave on disk.

Rung: identity (two ways to the same bytes; what is printed is what is written).
"""

from __future__ import annotations

import json
import re
import shlex
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pandas as pd
import pytest

from studies.assumptions import CAUTION
from studies.demo import DEMO_OVERLAY
from studies.results import repeatable_part

Run = Callable[..., Any]
BYTES = ("daily.parquet", "rolls.parquet", "summary.json")


def content(folder: Path, *names: str) -> dict[str, bytes]:
    return {name: (folder / name).read_bytes() for name in names or BYTES}


def read(folder: Path, name: str = "manifest.json") -> dict[str, Any]:
    return json.loads((folder / name).read_text(encoding="utf-8"))


def tree(folder: Path) -> list[str]:
    return sorted(str(path.relative_to(folder)) for path in folder.rglob("*") if path.is_file())


# ---------------------------------------------------------------- load


def test_load(rollband: Run, home: Path, files: list[object]) -> None:
    ran = rollband("load", "mine", *files)
    assert (ran.code, ran.err) == (0, "")
    assert tree(home) == ["histories/mine.parquet"]
    assert "  prices: 6330 rows, 1999-01-04 to 2023-12-29, from prices.csv\n" in ran.out
    assert "  changed: vol: percent a year turned into decimals\n" in ran.out
    assert "Stored as histories/mine.parquet\nNext: rollband replay mine --put 95 --call 110\n" in ran.out


def test_load_into_another_store(rollband: Run, home: Path, files: list[object]) -> None:
    ran = rollband("load", "mine", *files, "--store", "my store")
    assert tree(home) == ["my store/mine.parquet"]
    command = re.search(r"^Next: rollband (.*)$", ran.out, re.MULTILINE)
    assert command is not None
    # what it says to type next can be typed
    assert rollband(*shlex.split(command.group(1))).code == 0


def test_load_a_span(rollband: Run, home: Path, market: Path, files: list[object]) -> None:
    assert rollband("load", "mine", *files, "--from", "2005-01-01", "--to", "2006-12-31").code == 0
    kept = pd.read_parquet(home / "histories" / "mine.parquet")["date"].astype(str).str[:10].tolist()
    prices = pd.read_csv(market / "prices.csv", dtype=str)["date"]
    assert kept == prices[(prices >= "2005-01-01") & (prices <= "2006-12-31")].tolist()
    assert len(kept) > 480


def test_loading_again_says_that_it_replaces(stored: Run, market: Path) -> None:
    first = stored("load", "other", "--prices", market / "prices.csv")
    again = stored("load", "mine", "--prices", market / "prices.csv")
    assert "replaced" not in first.out
    assert "The history that was stored as mine before is replaced." in again.out


# ---------------------------------------------------------------- replay


def test_replay_writes_a_results_folder(stored: Run, home: Path) -> None:
    ran = stored("replay", "mine", "--put", 95, "--call", 110, "--call-roll", "month", "--vol-quote", "variance-swap")
    assert (ran.code, ran.err) == (0, "")
    folder = home / "results" / "mine-quarterly-95-put-monthly-110-call"
    assert tree(folder) == ["daily.parquet", "manifest.json", "report.html", "rolls.parquet", "summary.json"]
    assert f"Read {folder.relative_to(home)}/report.html\n" in ran.out
    summary = read(folder, "summary.json")
    assert (summary["schema"], summary["name"]) == (1, "quarterly 95 put, monthly 110 call")
    kinds = [(source["kind"], source["file"]) for source in read(folder)["inputs"]]
    assert kinds == [
        ("prices", "prices.csv"), ("vol", "vol.csv"), ("dividends", "dividends.csv"), ("rates", "rates.csv"),
    ]  # fmt: skip


def test_the_table_a_portfolio_manager_reads(stored: Run, home: Path) -> None:
    ran = stored("replay", "mine", "--put", 95, "--call", 110, "--call-roll", "month", "--out", "o")
    summary = read(home / "o", "summary.json")
    for name, title in (
        ("overlay", "overlay"),
        ("hold", "hold"),
        ("mix_same_beta", "same-beta mix"),
        ("put_only", "put only"),
    ):
        figures = summary[name]
        row = [
            f"{100 * figures['annual_return']:.1f}%", f"{100 * figures['volatility']:.1f}%", f"{figures['sharpe']:.2f}",
            f"{100 * figures['max_drawdown']:.1f}%", f"{100 * figures['expected_shortfall_monthly']:.1f}%",
            f"{figures['beta']:.2f}",
        ]  # fmt: skip
        assert re.search(rf"^{title} +{' +'.join(map(re.escape, row))} *$", ran.out, re.MULTILINE)
    # the ladder stands under the table, all four smiles in order, the one used marked
    ladder = ran.out[ran.out.index("priced under other smiles") :]
    places = [ladder.index(f"\n{name} ") for name in ("flat", "mild", "index (used)", "steep")]
    assert places == sorted(places)
    for name, rung in summary["smile_ladder"].items():
        title = f"{name} (used)" if rung["used"] else name
        gain = rung["sharpe"] - rung["mix_same_beta_sharpe"]
        row = [
            f"{100 * rung['annual_return']:.1f}%",
            f"{rung['sharpe']:.2f}",
            f"{rung['mix_same_beta_sharpe']:.2f}",
            f"{gain:+.2f}",
        ]
        assert re.search(rf"^{re.escape(title)} +{' +'.join(map(re.escape, row))} ", ladder, re.MULTILINE)
    assert " ".join(ran.out.split()).count(CAUTION) == 1
    assert "rate: " in ran.out
    for warning in summary["warnings"]:
        assert f"  {warning}\n" in ran.out


def test_json_alone_on_standard_output(stored: Run, home: Path) -> None:
    ran = stored("replay", "mine", "--put", 90, "--json", "--out", "o")
    assert ran.code == 0
    assert json.loads(ran.out) == read(home / "o", "summary.json")
    assert ran.out == (home / "o" / "summary.json").read_text(encoding="utf-8")
    assert ran.err == "Results: o\n"


def test_files_directly_are_the_stored_history_bit_for_bit(stored: Run, home: Path, files: list[object]) -> None:
    options = ["--put", 95, "--call", 110, "--call-roll", "month", "--put-term", 6, "--stock-bps", 2]
    assert stored("replay", "mine", *options, "--out", "stored").code == 0
    assert stored("replay", *files, *options, "--out", "direct").code == 0
    assert content(home / "stored") == content(home / "direct")
    assert read(home / "stored")["inputs"] == read(home / "direct")["inputs"]


def test_prices_alone(rollband: Run, home: Path, market: Path) -> None:
    ran = rollband("replay", "--prices", market / "prices.csv", "--put", 90, "--rate", 2, "--dividend-yield", 1.5)
    assert ran.code == 0
    summary = read(home / "results" / "prices-quarterly-90-put", "summary.json")
    assert summary["assumptions"]["volatility"] == (
        "realised close-to-close of 63 trading days, taken as the at-the-money vol"
    )
    assert summary["assumptions"]["rate"] == "2.00% throughout"
    # 63 returns are full on the 64th day, in April: the next quarterly roll is in June
    assert summary["inception"] == "1999-06-18"


def test_from_and_to(stored: Run, home: Path, files: list[object]) -> None:
    window = ["--from", "2005-01-01", "--to", "2010-03-01"]
    assert stored("replay", "mine", "--put", 95, *window, "--out", "o").code == 0
    summary = read(home / "o", "summary.json")
    assert (summary["inception"], summary["end"]) == ("2005-03-18", "2010-03-01")
    settings = read(home / "o")["settings"]
    assert (settings["from"], settings["to"]) == ("2005-01-01", "2010-03-01")
    assert stored("replay", *files, "--put", 95, *window, "--out", "direct").code == 0
    assert content(home / "o") == content(home / "direct")


# ---------------------------------------------------------------- overlay files and options


@pytest.mark.parametrize(
    ("option", "old", "new"),
    [
        (["--account", "cash"], 'account = "resize" ', 'account = "cash" '),
        (["--smile", "flat"], 'smile = "index" ', 'smile = "flat" '),
        (["--smile", "-0.5,1,0.4"], 'smile = "index" ', "smile = { rho = -0.5, eta = 1, gamma = 0.4 } "),
        (["--vol-quote", "atm"], 'quote = "variance swap" ', 'quote = "at the money" '),
        (["--half-spread-vol", "1.5"], "half_spread_vol = 0.5 ", "half_spread_vol = 1.5 "),
        (["--half-spread-percent", "4"], "half_spread_vol = 0.5 ", "half_spread_vol = 0.5\nhalf_spread_percent = 4 "),
        (["--commission", "3"], "half_spread_vol = 0.5 ", "half_spread_vol = 0.5\ncommission = 3 "),
        (["--commission", "3", "--multiplier", "10"], "half_spread_vol = 0.5 ",
         "half_spread_vol = 0.5\ncommission = 3\nmultiplier = 10 "),
        (["--stock-bps", "20"], "half_spread_vol = 0.5 ", "half_spread_vol = 0.5\nstock_bps = 20 "),
    ],
)  # fmt: skip
def test_options_replace_what_the_file_says(stored: Run, home: Path, option: list[str], old: str, new: str) -> None:
    assert DEMO_OVERLAY.count(old) == 1
    (home / "band.toml").write_text(DEMO_OVERLAY)
    (home / "changed.toml").write_text(DEMO_OVERLAY.replace(old, new))
    assert stored("replay", "mine", "--overlay", "band.toml", "--out", "plain").code == 0
    assert stored("replay", "mine", "--overlay", "band.toml", *option, "--out", "option").code == 0
    assert stored("replay", "mine", "--overlay", "changed.toml", "--out", "file").code == 0
    assert content(home / "option", "daily.parquet") == content(home / "file", "daily.parquet")
    assert content(home / "option", "daily.parquet") != content(home / "plain", "daily.parquet")
    assert read(home / "option")["settings"] == read(home / "file")["settings"]


def test_shorthand_is_the_file(stored: Run, home: Path) -> None:
    (home / "band.toml").write_text(DEMO_OVERLAY)
    assert stored("replay", "mine", "--overlay", "band.toml", "--out", "file").code == 0
    shorthand = ["--put", 95, "--call", 110, "--put-roll", "quarter", "--call-roll", "month"]
    assert stored("replay", "mine", *shorthand, "--vol-quote", "variance-swap", "--out", "short").code == 0
    assert content(home / "file") == content(home / "short")


def test_roll_is_of_both_unless_one_has_its_own(stored: Run, home: Path) -> None:
    assert (
        stored(
            "replay",
            "mine",
            "--put",
            95,
            "--call",
            110,
            "--roll",
            "half",
            "--call-roll",
            "month",
            "--put-term",
            9,
            "--out",
            "o",
        ).code
        == 0
    )
    legs = read(home / "o")["settings"]["overlay"]["leg"]
    assert [(leg["roll"], leg["term"]) for leg in legs] == [("half", 9), ("month", 1)]


# ---------------------------------------------------------------- results folders


def test_the_same_again_goes_to_the_same_folder(stored: Run, home: Path) -> None:
    for options in (["--put", 95], ["--put", 95, "--smile", "flat"], ["--put", 95]):
        assert stored("replay", "mine", *options).code == 0
    assert sorted(path.name for path in (home / "results").iterdir()) == [
        "mine-quarterly-95-put", "mine-quarterly-95-put-2",
    ]  # fmt: skip
    assert read(home / "results" / "mine-quarterly-95-put-2")["settings"]["overlay"]["volatility"]["smile"] == "flat"


def test_another_unit_is_another_folder(rollband: Run, home: Path, market: Path) -> None:
    # 1.55 to 1.95 may be percents or decimals; which one decides the numbers, so the answers may not share a folder
    prices = pd.read_csv(market / "prices.csv").iloc[:400]
    prices.to_csv("p.csv", index=False)
    prices[["date"]].assign(vol=[1.55 + 0.001 * i for i in range(400)]).to_csv("v.csv", index=False)
    asked = rollband("replay", "--prices", "p.csv", "--vol", "v.csv", "--put", 95)
    assert asked.code == 3
    assert "--vol-unit percent" in asked.err
    for unit in ("percent", "decimal"):
        assert rollband("replay", "--prices", "p.csv", "--vol", "v.csv", "--put", 95, "--vol-unit", unit).code == 0
    assert len(list((home / "results").iterdir())) == 2


def test_another_span_of_the_same_files_is_another_manifest(rollband: Run, home: Path, files: list[object]) -> None:
    # the same files and settings, but fewer days of them: other numbers, so the manifest must tell them apart
    for number, span in enumerate(([], ["--from", "2005-01-01"])):
        assert rollband("load", "mine", *files, *span).code == 0
        assert rollband("replay", "mine", "--put", 95, "--out", f"o{number}").code == 0
    assert content(home / "o0", "daily.parquet") != content(home / "o1", "daily.parquet")
    assert repeatable_part(read(home / "o0")) != repeatable_part(read(home / "o1"))


def test_out_is_replaced_when_it_is_a_results_folder(stored: Run, home: Path) -> None:
    assert stored("replay", "mine", "--put", 95, "--out", "o").code == 0
    before = content(home / "o")
    assert stored("replay", "mine", "--put", 90, "--out", "o").code == 0
    assert content(home / "o") != before
    assert stored("replay", "mine", "--put", 95, "--out", "o").code == 0
    assert content(home / "o") == before


def test_the_command_of_the_manifest_gives_the_same_folder(stored: Run, home: Path, market: Path) -> None:
    strange = home / "my prices; $(rm -rf) 'x'.csv"
    strange.write_bytes((market / "prices.csv").read_bytes())
    options = [
        "--put",
        92.5,
        "--call",
        108,
        "--smile",
        "-0.5,1,0.4",
        "--rate",
        2.5,
        "--from",
        "2012-01-01",
        "--out",
        "a b",
    ]
    assert stored("replay", "--prices", strange.name, *options).code == 0
    before = content(home / "a b", *BYTES, "manifest.json")
    command = shlex.split(read(home / "a b")["command"])
    assert command[0] == "rollband"
    (home / "a b").rename(home / "kept")
    assert stored(*command[1:]).code == 0
    assert content(home / "a b", *BYTES, "manifest.json") == before


@pytest.mark.parametrize("name", ["../../evil", "/etc/passwd", "a\\nb\\u0000", "😀", "x" * 300, "-rf", "..", "\\u202e"])
def test_hostile_overlay_names_stay_in_the_results(stored: Run, home: Path, tmp_path: Path, name: str) -> None:
    (home / "band.toml").write_text(
        DEMO_OVERLAY.replace('name = "quarterly 95 put, monthly 110 call"', f'name = "{name}"')
    )
    ran = stored("replay", "mine", "--overlay", "band.toml")
    assert (ran.code, ran.err) == (0, "")
    assert sorted(path.name for path in tmp_path.iterdir()) == ["home"]
    assert sorted(path.name for path in home.iterdir()) == ["band.toml", "histories", "results"]
    (folder,) = (home / "results").iterdir()
    assert re.fullmatch(r"mine[a-z0-9-]*", folder.name)
    assert len(tree(folder)) == 5


# ---------------------------------------------------------------- demo


def test_demo(rollband: Run, home: Path) -> None:
    ran = rollband("demo", "here")
    assert (ran.code, ran.err) == (0, "")
    assert tree(home / "here") == [
        "dividends.csv", "histories/demo.parquet", "overlay.toml", "prices.csv", "rates.csv", "results/daily.parquet",
        "results/manifest.json", "results/report.html", "results/rolls.parquet", "results/summary.json", "study.toml",
        "vol.csv",
    ]  # fmt: skip
    before = content(home / "here" / "results", *BYTES, "manifest.json")
    assert rollband("demo", "here").code == 0
    assert content(home / "here" / "results", *BYTES, "manifest.json") == before
    # and what its manifest says gives the same again
    command = shlex.split(read(home / "here" / "results")["command"])
    (home / "here" / "results").rename(home / "kept")
    assert rollband(*command[1:]).code == 0
    assert content(home / "here" / "results", *BYTES, "manifest.json") == before


@pytest.mark.parametrize("folder", ["demo", "my demo"])
def test_what_the_demo_says_to_type_next(rollband: Run, home: Path, folder: str) -> None:
    ran = rollband("demo", folder)
    assert (home / folder / "results" / "summary.json").is_file()
    commands = [shlex.split(line)[1:] for line in ran.out.splitlines() if line.startswith("  rollband ")]
    assert [command[0] for command in commands] == ["replay", "replay", "study", "load"]
    for command in commands[:3]:
        assert rollband(*command).code == 0
    (home / "my_prices.csv").write_bytes((home / folder / "prices.csv").read_bytes())
    (home / "my_vols.csv").write_bytes((home / folder / "vol.csv").read_bytes())
    assert rollband(*commands[3]).code == 0


def test_demo_beside_files_of_ones_own(rollband: Run, home: Path) -> None:
    (home / "notes.txt").write_text("mine")
    assert rollband("demo", ".").code == 0
    assert (home / "notes.txt").read_text() == "mine"
    assert (home / "results" / "summary.json").is_file()


# ---------------------------------------------------------------- show


def test_show_prints_what_replay_printed(stored: Run, home: Path) -> None:
    first = stored("replay", "mine", "--put", 95, "--call", 110, "--out", "o")
    again = stored("show", "o")
    assert (again.code, again.err) == (0, "")
    # all but the lines that say where the results are
    assert again.out.strip() == first.out[: first.out.index("Read o")].strip()
    assert "Verdict" in again.out
    assert "on mine" in again.out


def test_show_as_json_is_the_summary(stored: Run, home: Path) -> None:
    told = stored("replay", "mine", "--put", 95, "--out", "o", "--json")
    assert stored("show", "o", "--json").out == told.out == (home / "o" / "summary.json").read_text(encoding="utf-8")


@pytest.mark.parametrize(
    ("text", "said"),
    [
        (None, "rollband: o is no results folder: it has no summary.json"),
        ("{", "rollband: cannot read o/summary.json: "),
        ('{"schema": 2}', "rollband: o/summary.json is of schema 2; this version reads 1"),
        ("[1]", "rollband: o/summary.json is of schema None; this version reads 1"),
    ],
)
def test_show_refuses_what_is_no_results_folder(rollband: Run, home: Path, text: str | None, said: str) -> None:
    if text is not None:
        (home / "o").mkdir()
        (home / "o" / "summary.json").write_text(text)
    ran = rollband("show", "o")
    assert (ran.code, ran.out) == (5, "")
    assert ran.err.startswith(said)


def test_the_same_seed_gives_the_same_intervals_and_another_does_not(stored: Run, home: Path) -> None:
    def inference(out: str, *options: object) -> dict[str, Any]:
        stored("replay", "mine", "--put", 95, "--from", "2018-01-01", "--out", out, "--json", *options)
        assert read(home / out)["seed"] == (7 if options else 1)
        return read(home / out, "summary.json")["inference"]

    assert inference("a") == inference("b")
    assert inference("c", "--seed", 7)["overlay"] != inference("a")["overlay"]


@pytest.mark.parametrize(
    ("option", "value", "rule"),
    [
        ("--resamples", 99, "--resamples is 99; it takes a whole number from 100 to 1000000"),
        ("--seed", -1, "--seed is -1; it takes a whole number from 0 to 4294967295"),
    ],
)
def test_draws_out_of_range_are_refused(stored: Run, home: Path, option: str, value: int, rule: str) -> None:
    ran = stored("replay", "mine", "--put", 95, option, value)
    assert ran.code == 2
    assert rule in ran.err
    assert not (home / "results").exists()
