"""What an overlay file may not say: every message with its file, line, key and limit.

Rung: identity (files of a few lines whose lines are counted by hand).
"""

# ruff: noqa: E501  one case stays on one or two lines, so that the table can be read

from __future__ import annotations

from pathlib import Path
from typing import Any

import pytest

from backtest import INDEX, OverlayError, SSVISmile
from studies.demo import DEMO_OVERLAY
from studies.errors import OverlayFileError
from studies.overlay_files import LARGEST_FILE_BYTES, parse_overlay, read_overlay_file, smile_from_option

# three legs' worth of lines, numbered from 1: the second leg begins on line 10
TWO_LEGS = """\
# a comment, ratio = 7
name = "two"

[[leg]]
position = "long"   # ratio = 9
right = "put"
strike = { percent_of_spot = 95 }
term = 6

[[leg]]
position = "short"
right = "call"
roll = "month"
strike = { percent_of_forward = 105 }
"""
LEG_KEYS = (
    "Known here: position, right, strike, roll, roll_day, every, term, term_days, phase, shift_days, close_before, "
    "settlement, ratio, ladder, stagger, early, gate, reference"
)
COST_KEYS = (
    "Known here: half_spread_vol, half_spread_percent, half_spread_min, commission, multiplier, settlement_fee, "
    "stock_bps, borrow_spread"
)
RULES = "takes one rule, such as { percent_of_spot = 95 }; rules: percent_of_spot, percent_of_forward"
SMILES = "takes one of: flat, mild, index, steep, or { rho = , eta = , gamma = }"


def wrong(case: str, text: str, line: int | None, key: str | None, *says: str) -> Any:
    return pytest.param(text, line, key, says, id=case)


def swap(old: str, new: str) -> str:
    assert TWO_LEGS.count(old) == 1
    return TWO_LEGS.replace(old, new)


def more(*lines: str) -> str:
    """The two legs with lines 15, 16, ... added."""
    return TWO_LEGS + "\n".join(lines) + "\n"


WRONG = [
    # unknown keys
    wrong("top key", swap("name =", "nmae ="), 2, "nmae", "unknown key; did you mean name? Known here: name, account, decide_lag, portfolio, crossed, gate, leg, costs"),
    wrong("leg key", swap("term = 6", "trem = 6"), 8, "leg.1.trem", "did you mean term?", LEG_KEYS),
    wrong("key of the second leg", swap("roll =", "rol ="), 13, "leg.2.rol", "did you mean roll?", LEG_KEYS),
    wrong("cost key", more("[costs]", "stock_bsp = 1"), 16, "costs.stock_bsp", "did you mean stock_bps?", COST_KEYS),
    wrong("volatility key", more("[volatility]", "smiles = 1"), 16, "volatility.smiles", "did you mean smile?",
          "Known here: smile, quote, source, window, markup, estimator, half_life, markup_points, put_shift, call_shift, term_structure, kappa"),
    wrong("table", more("[cost]", "commission = 1"), 15, "cost", "unknown key; did you mean costs?"),
    wrong("strike rule", swap("percent_of_forward", "percent_of_foward"), 14, "leg.2.strike.percent_of_foward",
          "did you mean percent_of_forward? Known here: percent_of_spot, percent_of_forward"),
    wrong("smile key", more("[volatility]", "smile = { rho = 0, eta = 1, gama = 0.5 }"), 16, "volatility.smile.gama",
          "did you mean gamma? Known here: rho, eta, gamma"),
    wrong("nothing near", more("zzz = 1"), 15, "leg.2.zzz", "unknown key. " + LEG_KEYS),
    wrong("quoted key", more("[costs]", '"commision" = 1'), 16, "costs.commision", "did you mean commission?"),
    # what a leg needs
    wrong("no legs", 'name = "x"\n', None, "leg", "at least one [[leg]]"),
    wrong("legs no list", 'leg = "put"\n', 1, "leg", "at least one [[leg]]"),
    wrong("empty legs", "\nleg = []\n", 2, "leg", "at least one [[leg]]"),
    wrong("a leg no table", "leg = [3]\n", 1, "leg.1", "is 3; it takes a table with keys: position, right, strike, roll"),
    wrong("no strike", swap("strike = { percent_of_forward = 105 }", ""), 10, "leg.2",
          "has no strike; a leg needs position, right and strike"),
    wrong("no right", swap('right = "put"', ""), 4, "leg.1", "has no right; a leg needs position, right and strike"),
    wrong("no position", swap('position = "short"', ""), 10, "leg.2", "has no position"),
    wrong("two rules", swap("= 105 }", "= 105, percent_of_spot = 95 }"), 14, "leg.2.strike",
          "is {'percent_of_forward': 105, 'percent_of_spot': 95}; it " + RULES),
    wrong("no rule", swap("{ percent_of_spot = 95 }", "{}"), 7, "leg.1.strike", "is {}; it " + RULES),
    wrong("a bare strike", swap("{ percent_of_spot = 95 }", "95"), 7, "leg.1.strike", "is 95; it " + RULES),
    # wrong words and types
    wrong("position", swap('"short"', '"sold"'), 11, "leg.2.position", "position is 'sold'; it takes one of: long, short"),
    wrong("right", swap('"put"', "1"), 6, "leg.1.right", "right is 1; it takes one of: put, call"),
    wrong("roll", swap('"month"', '"weekly"'), 13, "leg.2.roll", "'weekly'; it takes one of: month, quarter, half, year, days"),
    wrong("roll a list", swap('"month"', '["month"]'), 13, "leg.2.roll", "it takes one of: month, quarter, half, year, days"),
    wrong("account", swap('name = "two"', 'account = "margin"'), 2, "account", "'margin'; it takes one of: resize, cash"),
    wrong("name", swap('"two"', "2"), 2, "name", "is 2; it takes a text in quotes"),
    wrong("costs no table", "costs = 3\n" + TWO_LEGS, 1, "costs", "is 3; it takes a table with keys: half_spread_vol"),
    wrong("volatility no table", "volatility = 20\n" + TWO_LEGS, 1, "volatility", "is 20; it takes a table with keys: smile"),
    wrong("quote", more("[volatility]", 'quote = "atm"'), 16, "volatility.quote", "one of: at the money, variance swap"),
    wrong("source", more("[volatility]", "source = 1"), 16, "volatility.source", "is 1; it takes one of: auto, implied, surface, realised"),
    wrong("smile word", more("[volatility]", 'smile = "steeper"'), 16, "volatility.smile", "is 'steeper'; it " + SMILES),
    wrong("smile number", more("[volatility]", "smile = 1"), 16, "volatility.smile", "is 1; it " + SMILES),
    wrong("smile lacks", more("[volatility]", "smile = { eta = 1 }"), 16, "volatility.smile", "lacks rho, gamma"),
    wrong("smile text", more("[volatility]", 'smile = { rho = "a", eta = 1, gamma = 0.5 }'), 16, "volatility.smile.rho",
          "is 'a'; it takes a number"),
    # numbers outside their limits
    wrong("low percent", swap("= 95 }", "= 0.95 }"), 7, "leg.1.strike.percent_of_spot", "percent_of_spot is 0.95; it takes a number from 1 to 1000"),
    wrong("high percent", swap("= 105 }", "= 1000.5 }"), 14, "leg.2.strike.percent_of_forward", "percent_of_forward is 1000.5", "from 1 to 1000"),
    wrong("percent a text", swap("= 95 }", '= "95" }'), 7, "leg.1.strike.percent_of_spot", "percent_of_spot is '95'; it takes a number"),
    wrong("percent nan", swap("= 95 }", "= nan }"), 7, "leg.1.strike.percent_of_spot", "percent_of_spot is nan", "from 1 to 1000"),
    wrong("percent inf", swap("= 95 }", "= inf }"), 7, "leg.1.strike.percent_of_spot", "percent_of_spot is inf", "from 1 to 1000"),
    wrong("percent true", swap("= 95 }", "= true }"), 7, "leg.1.strike.percent_of_spot", "percent_of_spot is True", "from 1 to 1000"),
    wrong("short term", swap("term = 6", "term = 2"), 8, "leg.1.term", "term is 2; it takes a whole number from 3 to 120 months"),
    wrong("long term", swap("term = 6", "term = 121"), 8, "leg.1.term", "term is 121", "from 3 to 120 months"),
    wrong("broken term", swap("term = 6", "term = 6.5"), 8, "leg.1.term", "term is 6.5; it takes a whole number"),
    wrong("date term", swap("term = 6", "term = 2020-01-01"), 8, "leg.1.term", "it takes a whole number from 3 to 120 months"),
    wrong("phase", more("phase = 1"), 15, "leg.2.phase", "phase is 1; it takes a whole number from 0 to 0 for a cycle of 1"),
    wrong("shift", more("shift_days = -253"), 15, "leg.2.shift_days", "-253; it takes a whole number from -252 to 252"),
    wrong("ratio", more("ratio = -0.5"), 15, "leg.2.ratio", "ratio is -0.5; it takes a number from 0 to 100"),
    wrong("ratio high", more("ratio = 1e3"), 15, "leg.2.ratio", "ratio is 1000.0; it takes a number from 0 to 100"),
    wrong("spread", more("[costs]", "", "half_spread_vol = 101"), 17, "costs.half_spread_vol", "is 101; it takes a number from 0 to 100"),
    wrong("spread percent", more("[costs]", "half_spread_percent = -1"), 16, "costs.half_spread_percent", "from 0 to 100"),
    wrong("least spread", more("[costs]", "half_spread_min = -1"), 16, "costs.half_spread_min", "is -1; it takes a number of at least 0"),
    wrong("commission", more("[costs]", "commission = nan"), 16, "costs.commission", "is nan; it takes a number of at least 0"),
    wrong("fee", more("[costs]", 'settlement_fee = "1"'), 16, "costs.settlement_fee", "is '1'; it takes a number of at least 0"),
    wrong("bps", more("[costs]", "stock_bps = 1001"), 16, "costs.stock_bps", "is 1001; it takes a number from 0 to 1000"),
    wrong("multiplier", more("[costs]", "multiplier = 0"), 16, "costs.multiplier", "is 0; it takes a number above 0"),
    wrong("inline costs", "costs = { commission = -1 }\n" + TWO_LEGS, 1, "costs.commission", "is -1", "at least 0"),
    wrong("rho", more("[volatility]", "smile = { rho = -1, eta = 1, gamma = 0.5 }"), 16, "volatility.smile",
          "rho is -1; a smile takes rho above -1 and below 1"),
    wrong("eta", more("[volatility]", "smile = { rho = 0, eta = 0, gamma = 0.5 }"), 16, "volatility.smile",
          "eta is 0; a smile takes eta above 0"),
    wrong("gamma", more("[volatility]", "smile = { rho = 0, eta = 1, gamma = 0.51 }"), 16, "volatility.smile",
          "gamma is 0.51; a smile takes gamma above 0 and at most 0.5"),
    wrong("wings", more("[volatility]", "smile = { rho = -0.5, eta = 1.4, gamma = 0.5 }"), 16, "volatility.smile",
          "eta (1 + |rho|) is 2.1; a smile takes at most 2"),
    wrong("window alone", more("[volatility]", "window = 21"), 16, "volatility.window", 'add source = "realised"'),
    wrong("markup alone", more("[volatility]", 'source = "implied"', "markup = 2"), 17, "volatility.markup", "belongs to realised vol"),
    wrong("window", more("[volatility]", 'source = "realised"', "window = 1"), 17, "volatility.window", "from 2 to 2520 trading days"),
    wrong("markup", more("[volatility]", 'source = "realised"', "markup = 0"), 17, "volatility.markup", "is 0; it takes a number from 0.01 to 10"),
    wrong("too many legs", TWO_LEGS * 1 + TWO_LEGS[TWO_LEGS.index("[[leg]]"):] * 100, 4, "leg", "202 legs; the limit is 200"),
    # no TOML
    wrong("unclosed header", "\n[[leg]\n", 2, None, "not valid TOML", "line 2"),
    wrong("twice", more('roll = "month"'), 15, None, "not valid TOML", "Cannot overwrite a value"),
    wrong("no value", swap("term = 6", "term ="), 8, None, "not valid TOML", "Invalid value"),
    wrong("unclosed text", 'name = "x', None, None, "not valid TOML", "end of document"),
    wrong("a table of numbers", "date,close\n2020-01-02,100\n", 1, None, "not valid TOML"),
]  # fmt: skip


@pytest.mark.parametrize(("text", "line", "key", "says"), WRONG)
def test_what_is_wrong_and_where(
    tmp_path: Path, text: str, line: int | None, key: str | None, says: tuple[str, ...]
) -> None:
    file = tmp_path / "band.toml"
    file.write_text(text, encoding="utf-8")
    with pytest.raises(OverlayFileError) as caught:
        read_overlay_file(file)
    error = caught.value
    assert (error.file, error.line, error.key) == ("band.toml", line, key)
    place = "band.toml" + ("" if line is None else f", line {line}") + ("" if key is None else f", {key}")
    assert str(error).startswith(f"{place}: ")
    assert str(tmp_path) not in str(error)
    for piece in says:
        assert piece in str(error)


# Ways of writing TOML that are rarer, and where the line must be right all the same.
RARE = [
    wrong("dotted key", "costs.half_spread_vol = -1\n" + TWO_LEGS, 1, "costs.half_spread_vol", "from 0 to 100"),
    wrong("dotted strike", swap("strike = { percent_of_spot = 95 }", "strike.percent_of_spot = 0.95"), 7, "leg.1.strike.percent_of_spot",
          "from 1 to 1000"),
    wrong("strike as a table", swap("strike = { percent_of_forward = 105 }", "[leg.strike]\npercent_of_forward = 0.95"), 15,
          "leg.2.strike.percent_of_forward", "from 1 to 1000"),
    wrong("quoted header", more('["costs"]', "commission = -1"), 16, "costs.commission", "at least 0"),
    wrong("spaces in a header", more("[ costs ]", "commission = -1"), 16, "costs.commission", "at least 0"),
    wrong("a name with a line separator", swap('"two"', '"a\u2028b\u0085c"') + "ratio = -1\n", 15, "leg.2.ratio", "from 0 to 100"),
    wrong("a text that looks like a table", swap('"two"', '"""\n[costs]\ncommission = 3\n"""') + "[costs]\ncommission = -3\n",
          19, "costs.commission", "at least 0"),
]  # fmt: skip


@pytest.mark.parametrize(("text", "line", "key", "says"), RARE)
def test_the_line_of_rarer_spellings(text: str, line: int, key: str, says: tuple[str, ...]) -> None:
    with pytest.raises(OverlayFileError) as caught:
        parse_overlay(text, file="band.toml")
    assert all(piece in str(caught.value) for piece in says)
    assert (caught.value.line, caught.value.key) == (line, key)


@pytest.mark.parametrize(
    "text",
    [
        pytest.param(more("ratio = " + "9" * 400), id="a whole number beyond floats"),
        pytest.param(more("[costs]", "commission = " + "9" * 400), id="a cost beyond floats"),
        pytest.param(more("[volatility]", f"smile = {{ rho = 0, eta = {'9' * 400}, gamma = 0.5 }}"), id="a smile beyond floats"),
        pytest.param(more("ratio = " + "9" * 5000), id="more digits than Python reads"),
        pytest.param("x = " + "[" * 20_000, id="nested too deep"),
    ],
)  # fmt: skip
def test_absurd_files_are_errors_of_ours(text: str) -> None:
    with pytest.raises(OverlayFileError, match=r"^absurd\.toml"):
        parse_overlay(text, file="absurd.toml")


def test_a_key_with_a_line_break_stays_on_one_line() -> None:
    with pytest.raises(OverlayFileError) as caught:
        parse_overlay('"a\\nb" = 1\n' + TWO_LEGS)
    assert "\n" not in str(caught.value)


# ---------------------------------------------------------------- files that cannot be read


def test_no_such_file(tmp_path: Path) -> None:
    with pytest.raises(OverlayFileError, match=r"^missing\.toml: there is no such file$"):
        read_overlay_file(tmp_path / "missing.toml")


def test_a_folder(tmp_path: Path) -> None:
    (tmp_path / "folder.toml").mkdir()
    with pytest.raises(OverlayFileError, match=r"^folder\.toml: .*(folder|directory)"):
        read_overlay_file(tmp_path / "folder.toml")


def test_a_huge_file(tmp_path: Path) -> None:
    file = tmp_path / "huge.toml"
    file.write_text(DEMO_OVERLAY + "#" * LARGEST_FILE_BYTES, encoding="utf-8")
    with pytest.raises(OverlayFileError, match=r"^huge\.toml: larger than 1,000,000 bytes"):
        read_overlay_file(file)


def test_the_largest_file_is_read(tmp_path: Path) -> None:
    file = tmp_path / "large.toml"
    file.write_text(DEMO_OVERLAY + "#" * (LARGEST_FILE_BYTES - len(DEMO_OVERLAY)), encoding="utf-8")
    assert read_overlay_file(file) == parse_overlay(DEMO_OVERLAY)


def test_not_text(tmp_path: Path) -> None:
    file = tmp_path / "latin.toml"
    file.write_bytes(DEMO_OVERLAY.encode() + b"# caf\xe9\n")
    with pytest.raises(OverlayFileError, match=r"^latin\.toml: cannot be read: .*0xe9"):
        read_overlay_file(file)


# ---------------------------------------------------------------- the smile as an option


def test_three_numbers_as_a_smile() -> None:
    assert smile_from_option("-0.6,1.1,0.4") == SSVISmile(rho=-0.6, eta=1.1, gamma=0.4)
    assert smile_from_option("-0.6, 1.1, 0.5") == INDEX


@pytest.mark.parametrize(
    ("text", "says"),
    [
        ("skewed", "--smile is 'skewed'; it takes one of: flat, mild, index, steep, or three numbers RHO,ETA,GAMMA"),
        ("", "--smile is ''; it takes one of"),
        ("1,2", "--smile is '1,2'; it takes one of"),
        ("a,b,c", "--smile is 'a,b,c'; it takes one of"),
        ("-0.6,1.1,0.9", "--smile gamma is 0.9; a smile takes gamma above 0 and at most 0.5"),
        ("nan,1,0.5", "--smile rho is nan; it takes a number"),
    ],
)
def test_no_smile(text: str, says: str) -> None:
    with pytest.raises(OverlayError) as caught:
        smile_from_option(text)
    assert str(caught.value).startswith(says)
