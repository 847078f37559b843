"""What a study file may not say: every message with its file, line, key and limit.

Rung: identity (a file of a few lines whose lines are counted by hand).
"""

# ruff: noqa: E501  one case stays on one or two lines, so that the table can be read

from __future__ import annotations

import pickle
import time
import tracemalloc
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path
from typing import Any

import pytest

from studies.cli import _exit_code
from studies.errors import StudyError, StudyFileError
from studies.overlay_files import LARGEST_FILE_BYTES
from studies.study import Axis, Study, parse_study, read_study, study_from_table, study_to_table

# lines counted from 1: the axes begin on lines 16, 21 and 26
GRID = """\
question = "Which strikes?"
histories = ["demo", "other"]
leave_out = ["put strike >= call strike"]

[[overlay.leg]]
position = "long"
right = "put"
strike = { percent_of_spot = 95 }

[[overlay.leg]]
position = "short"
right = "call"
roll = "month"
strike = { percent_of_spot = 110 }

[[axis]]
name = "put strike"
field = "leg.1.strike.percent_of_spot"
values = { from = 80, to = 99, step = 1 }

[[axis]]
name = "call strike"
field = "leg.2.strike.percent_of_spot"
values = [101, 105, 110]

[[axis]]
name = "both rolls"
fields = ["leg.1.roll", "leg.2.roll"]
values = ["month", "quarter"]

[own]
"put strike" = 95
"call strike" = 110
"both rolls" = "quarter"
"""
ROLLS = 'values = ["month", "quarter"]'
LADDER = "{ from = 80, to = 99, step = 1 }"
RULE = '"put strike >= call strike"'
AXES = "Axes: put strike, call strike, both rolls"


def swap(old: str, new: str) -> str:
    assert GRID.count(old) == 1
    return GRID.replace(old, new)


def without_own(text: str = GRID) -> str:
    return text[: text.index("[own]")]


def more(*lines: str) -> str:
    """The file without [own] and with lines 31, 32, ... added."""
    return without_own() + "\n".join(lines) + "\n"


def wrong(case: str, text: str, line: int | None, key: str | None, *says: str) -> Any:
    return pytest.param(text, line, key, says, id=case)


def rule(case: str, text: str, *says: str) -> Any:
    shown = repr(text)
    return wrong(f"rule {case}", swap(RULE, f"'''{text}'''"), 3, "leave_out.1", f"in {shown}: ", *says)


def of_axis(case: str, field: str, values: str, *says: str, key: str = "axis.4.values") -> Any:
    """A fourth axis on lines 31 to 34: header, name, field, values."""
    line = {"axis.4.values": 34, "axis.4.field": 33}.get(key)
    return wrong(case, more("[[axis]]", 'name = "x"', f'field = "{field}"', f"values = {values}"), line, key, *says)


WRONG = [
    # the top of the file
    wrong("top key", swap("question =", "qeustion ="), 1, "qeustion", "unknown key; did you mean question? Known here: question, histories, comparison, seed, resamples, leave_out, overlay, axis, own"),
    wrong("no question", swap('question = "Which strikes?"\n', ""), None, None, "there is no question; a study needs question, histories, overlay and axis"),
    wrong("empty question", swap('"Which strikes?"', '" "'), 1, "question", 'is " "; it takes a text in quotes'),
    wrong("question no text", swap('"Which strikes?"', "2010-01-01"), 1, "question", "is 2010-01-01; it takes a text in quotes"),
    wrong("histories a text", swap('["demo", "other"]', '"demo"'), 2, "histories", "is 'demo'; it takes a list of names of stored histories, such as [\"demo\"]"),
    wrong("no histories", swap('["demo", "other"]', "[]"), 2, "histories", "is empty; a study needs the name of a stored history"),
    wrong("history twice", swap('"other"', '"demo"'), 2, "histories.2", "has demo twice"),
    wrong("history no name", swap('"other"', '"../other"'), 2, "histories.2", "'../other' (8 characters) cannot be the name of a history"),
    wrong("history a number", swap('"other"', "7"), 2, "histories.2", "is 7; it takes a text in quotes"),
    wrong("comparison", 'comparison = "cash"\n' + GRID, 1, "comparison", "is 'cash'; it takes one of: same-beta mix, hold"),
    wrong("seed", "seed = -1\n" + GRID, 1, "seed", "is -1; it takes a whole number from 0 to 4294967295"),
    wrong("seed true", "seed = true\n" + GRID, 1, "seed", "is True; it takes a whole number from 0"),
    wrong("resamples", "resamples = 10_001\n" + GRID, 1, "resamples", "is 10001; it takes a whole number from 0 to 10000"),
    wrong("resamples less", "resamples = -1\n" + GRID, 1, "resamples", "is -1; it takes a whole number from 0 to 10000"),
    wrong("resamples broken", "resamples = 0.5\n" + GRID, 1, "resamples", "is 0.5; it takes a whole number from 0 to 10000"),
    wrong("digits", "seed = 0x" + "f" * 5000 + "\n" + GRID, 1, "seed", "is a whole number of more than 1,000 digits"),
    wrong("depth", "seed." + "a." * 500 + "a = 1\n" + GRID, 1, "seed", "holds tables in tables, more than 20 deep"),
    wrong("no TOML", swap("[own]", "[own"), 31, None, "not valid TOML"),
    # the overlay
    wrong("overlay a text", 'question = "x"\nhistories = ["demo"]\noverlay = "band"\naxis = [1]\n', 3, "overlay", "is no table; write the overlay under [overlay] and [[overlay.leg]]"),
    wrong("overlay key", swap('right = "call"', 'rihgt = "call"'), 12, "overlay.leg.2.rihgt", "unknown key; did you mean right?"),
    wrong("overlay value", swap('roll = "month"\n', 'roll = "month"\nratio = -1\n'), 14, "overlay.leg.2.ratio", "ratio is -1; it takes a number from 0 to 100"),
    wrong("overlay cost", swap("[[axis]]\nname = \"put strike\"", "[overlay.costs]\ncommission = -1\n[[axis]]\nname = \"put strike\""), 17, "overlay.costs.commission", "of at least 0"),
    wrong("no strike", swap("strike = { percent_of_spot = 95 }\n", ""), 5, "overlay.leg.1", "has no strike; a leg needs position, right and strike"),
    # the shape of an axis
    wrong("no axis", GRID[: GRID.index("[[axis]]")], None, None, "there is no axis; a study needs question, histories, overlay and axis"),
    wrong("axes empty", "axis = []\n" + GRID[: GRID.index("[[axis]]")], 1, "axis", "a study needs at least one [[axis]]"),
    wrong("axis key", swap('field = "leg.2.s', 'feild = "leg.2.s'), 23, "axis.2.feild", "unknown key; did you mean field? Known here: name, field, fields, values, labels"),
    wrong("axis no name", swap('name = "call strike"\n', ""), 21, "axis.2", "there is no name; an axis needs name and values"),
    wrong("axis no values", swap("values = [101, 105, 110]\n", ""), 21, "axis.2", "there is no values; an axis needs name and values"),
    wrong("no field", swap('field = "leg.2.strike.percent_of_spot"\n', ""), 21, "axis.2", "takes either field, with one path, or fields, with a list of them"),
    wrong("field and fields", swap("fields = [", 'field = "account"\nfields = ['), 26, "axis.3", "takes either field, with one path, or fields"),
    wrong("field no text", swap('"leg.2.strike.percent_of_spot"', "2"), 23, "axis.2.field", "is 2; it takes a text in quotes"),
    wrong("fields a text", swap('["leg.1.roll", "leg.2.roll"]', '"leg.1.roll"'), 28, "axis.3.fields", "is 'leg.1.roll'; it takes a list of fields"),
    wrong("fields empty", swap('["leg.1.roll", "leg.2.roll"]', "[]"), 28, "axis.3.fields", "is empty; an axis needs a field"),
    wrong("name twice", swap('"both rolls"\nfields', '"put strike"\nfields'), 27, "axis.3.name", "put strike is also the name of axis 1"),
    wrong("name empty", swap('name = "both rolls"', 'name = ""'), 27, "axis.3.name", "is ''; it takes a few words in quotes"),
    wrong("name padded", swap('name = "both rolls"', 'name = "rolls "'), 27, "axis.3.name", "is 'rolls '; it takes a few words in quotes"),
    wrong("name long", swap('name = "both rolls"', f'name = "{"x" * 61}"'), 27, "axis.3.name", "has 61 characters; the limit is 60"),
    # fields
    of_axis("unknown field", "leg.1.strikes", "[1]", "there is no field leg.1.strikes; did you mean leg.1.strike? Known here: account, decide_lag, portfolio, gate (.signal, .vol_above_percentile, ", "leg.1 to leg.2 (.position, .right, .strike, .roll,", key="axis.4.field"),
    of_axis("leg beyond", "leg.3.ratio", "[1]", "there is no field leg.3.ratio; did you mean leg.2.ratio?", "leg.1 to leg.2", key="axis.4.field"),
    of_axis("leg nought", "leg.0.ratio", "[1]", "there is no field leg.0.ratio", key="axis.4.field"),
    of_axis("name of the overlay", "name", '["a"]', "there is no field name", key="axis.4.field"),
    of_axis("whole table", "costs", "[{ commission = 1 }]", "there is no field costs", key="axis.4.field"),
    of_axis("same field", "leg.1.roll", '["half"]', "leg.1.roll is set already by axis both rolls, as leg.1.roll", key="axis.4.field"),
    of_axis("field inside", "leg.1.strike", "[{ percent_of_forward = 95 }]", "leg.1.strike is set already by axis put strike, as leg.1.strike.percent_of_spot", key="axis.4.field"),
    wrong("window inside", more("[[axis]]", 'name = "x"', 'fields = ["window", "window.to"]', 'values = ["2001-01-01"]'), 33, "axis.4.fields", "window.to is set already by this axis, as window"),
    # values
    wrong("values empty", swap("[101, 105, 110]", "[]"), 24, "axis.2.values", "is empty; an axis needs a value"),
    wrong("values a number", swap("[101, 105, 110]", "101"), 24, "axis.2.values", "is 101; it takes a list, or { from = 80, to = 99, step = 1 }"),
    wrong("value twice", swap("[101, 105, 110]", "[101, 105, 101.0]"), 24, "axis.2.values", "holds 101.0 twice"),
    of_axis("table twice", "window", '[{ from = 2001-01-01 }, { from = "2001-01-01" }]', 'holds { from = "2001-01-01" } twice'),
    of_axis("value a list", "leg.1.ratio", "[[1, 2]]", "holds [1, 2]; a value is a number, a text or a table"),
    wrong("value a time", more("[[axis]]", 'name = "x"', 'field = "window.from"', "values = [2001-01-01T00:00:00]"), 34, "axis.4.values.1", "it takes a text, a number, a date"),
    of_axis("huge", "costs.commission", "[1e301]", "holds 1e+301; it takes numbers of at most 1e+300"),
    of_axis("nan", "costs.commission", "[nan]", "holds nan; it takes numbers of at most 1e+300"),
    wrong("labels few", swap(ROLLS, ROLLS + '\nlabels = ["m"]'), 30, "axis.3.labels", "has 1 labels for 2 values"),
    wrong("labels twice", swap(ROLLS, ROLLS + '\nlabels = ["m", "m"]'), 30, "axis.3.labels", 'has "m" twice'),
    wrong("labels crossed", swap(ROLLS, ROLLS + '\nlabels = ["quarter", "q"]'), 30, "axis.3.labels", 'has "quarter" for "month", and it is a value too'),
    wrong("labels no list", swap(ROLLS, ROLLS + '\nlabels = "m"'), 30, "axis.3.labels", "is 'm'; it takes a list of texts, one for each value"),
    wrong("label a number", swap(ROLLS, ROLLS + '\nlabels = ["m", 3]'), 30, "axis.3.labels.2", "is 3; it takes a text in quotes"),
    wrong("label empty", swap(ROLLS, ROLLS + '\nlabels = ["m", ""]'), 30, "axis.3.labels", "holds an empty label"),
    wrong("labels alike", swap("[101, 105, 110]", '[101, "101"]'), 21, "axis.2.labels", 'has "101" twice; give labels that tell the values apart'),
    # ranges
    wrong("no step", swap(LADDER, "{ from = 80, to = 99 }"), 19, "axis.1.values", "has no step; a range needs from, to and step"),
    wrong("range key", swap(LADDER, "{ from = 80, to = 99, stpe = 1 }"), 19, "axis.1.values.stpe", "unknown key; did you mean step? Known here: from, to, step"),
    wrong("step nought", swap(LADDER, "{ from = 80, to = 99, step = 0 }"), 19, "axis.1.values.step", "is 0; it takes a step from one value to the next"),
    wrong("step down", swap(LADDER, "{ from = 80, to = 99, step = -1 }"), 19, "axis.1.values.step", "is -1, but from 80 to 99 it goes up"),
    wrong("step up", swap(LADDER, "{ from = 99, to = 80, step = 0.5 }"), 19, "axis.1.values.step", "is 0.5, but from 99 to 80 it goes down"),
    wrong("step text", swap(LADDER, '{ from = 80, to = 99, step = "1" }'), 19, "axis.1.values.step", 'is "1"; it takes a number'),
    wrong("from true", swap(LADDER, "{ from = true, to = 99, step = 1 }"), 19, "axis.1.values.from", "is true; it takes a number"),
    wrong("to inf", swap(LADDER, "{ from = 80, to = inf, step = 1 }"), 19, "axis.1.values.to", "is inf; it takes a number"),
    # how many: 1,001 x 3 x 2 is fine, 166,667 x 3 x 2 = 1,000,002 is not
    wrong("two too many", swap(LADDER, "{ from = 1, to = 166667, step = 1 }"), 16, "axis", "166,667 x 3 x 2 = 1,000,002 combinations; the limit is 1,000,000, before any are left out"),
    wrong("beyond counting", swap(LADDER, "{ from = -1e150, to = 1e150, step = 1e-150 }"), 16, "axis", "about 10^300 x 3 x 2 = about 10^301 combinations"),
    wrong("many axes", without_own() + "".join(f'[[axis]]\nname = "a{n}"\nfield = "account"\nvalues = ["cash"]\n' for n in range(18)), 16, "axis", "there are 21 axes; the limit is 20"),
    # values that make no overlay
    wrong("strike", swap("from = 80", "from = 0"), 19, "axis.1.values", "axis put strike, value 0: leg.1.strike.percent_of_spot: percent_of_spot is 0; it takes a number from 1 to 1000, in percent"),
    wrong("roll of one leg of two", swap('["month", "quarter"]', '["month", "weekly"]'), 29, "axis.3.values", 'axis both rolls, value "weekly": leg.1.roll: roll is \'weekly\'; it takes one of: month, quarter, half, year, days'),
    wrong("account", more("[[axis]]", 'name = "x"', 'field = "account"', 'values = ["cash", "margin"]'), 34, "axis.4.values", "axis x, value \"margin\": account: account is 'margin'; it takes one of: resize, cash"),
    of_axis("cost", "costs.commission", "[0, -1]", "axis x, value -1: costs.commission: commission is -1; it takes a number of at least 0"),
    of_axis("truth", "leg.2.ratio", "[0, true]", "axis x, value true: leg.2.ratio: ratio is True; it takes a number from 0 to 100"),
    of_axis("whole numbers", "leg.2.shift_days", "{ from = 0, to = 1, step = 0.5 }", "axis x, value 0.0: leg.2.shift_days: shift_days is 0.0; it takes a whole number from -252 to 252"),
    of_axis("smile", "volatility.smile", '["flat", "steeper"]', "axis x, value \"steeper\": volatility.smile: is 'steeper'; it takes one of: flat, mild, index, steep"),
    of_axis("inside a word", "volatility.smile.rho", "[-0.5]", "axis x, value -0.5: volatility.smile: is \"index\", which has no rho to set; write it as a table in [overlay]"),
    of_axis("realised only", "volatility.window", "[21, 63]", "volatility.window: belongs to realised vol; add source = \"realised\" or leave it out"),
    wrong("other rule", without_own(swap('"leg.2.strike.percent_of_spot"', '"leg.2.strike.percent_of_forward"')), 24, "axis.2.values", "axis call strike, value 101: leg.2.strike: is {'percent_of_spot': 110, 'percent_of_forward': 101}; it takes one rule"),
    of_axis("window key", "window", "[{ form = 2001-01-01 }]", "axis x, value { form = \"2001-01-01\" }: window.form: unknown key; did you mean from? Known here: from, to"),
    of_axis("window a text", "window", '["2001"]', "axis x, value \"2001\": window: is '2001'; it takes a table with keys: from, to"),
    of_axis("no day", "window.to", '["2001-02-29"]', "axis x, value \"2001-02-29\": window.to: is \"2001-02-29\"; it takes a date such as 2009-12-31"),
    of_axis("a compact day", "window.to", '["20010228"]', "window.to: is \"20010228\"; it takes a date such as 2009-12-31"),
    of_axis("window backwards", "window", "[{ from = 2001-01-01, to = 2001-01-01 }]", "window: ends on 2001-01-01, and begins on 2001-01-01; it takes a first day before its last"),
    # 3 months are enough for a quarter, not for a half: two axes are to blame, the ratio is not
    wrong("term under its roll", without_own(swap('["month", "quarter"]', '["quarter", "half"]')) + '[[axis]]\nname = "term"\nfield = "leg.1.term"\nvalues = [3, 12]\n[[axis]]\nname = "ratio"\nfield = "leg.1.ratio"\nvalues = [0.5, 1]\n', 29, "axis.3.values",
          'axis both rolls, value "half" with axis term, value 3: leg.1.term: term is 3; it takes a whole number from 6 to 120 months, at least its roll; or leave the combination out with leave_out'),
    # leaving out
    rule("unknown name", "put strik >= call strike", f"there is no axis put strik; did you mean put strike? {AXES}; a text is put in quotes"),
    rule("half a name", "strike >= 3", "there is no axis strike", AXES),
    rule("unknown after and", "put strike > 90 and rolls == 'month'", "there is no axis rolls", AXES),
    rule("one equals sign", "put strike = 95", "after put strike comes = 95, and not one of < <= > >= == !="),
    rule("no comparison", "put strike", "after put strike comes nothing, and not one of"),
    rule("one side", "put strike >=", "one side of a comparison is missing; it takes an axis, a number or a text in quotes"),
    rule("other side", ">= 3", "one side of a comparison is missing"),
    rule("nothing", " ", "one side of a comparison is missing"),
    rule("chain", "80 < put strike < 90", "after 80 < put strike comes < 90; comparisons are joined by and"),
    rule("or", "put strike < 90 or put strike > 95", "there is no axis 90 or put strike"),
    rule("program", "__import__('os').system('x') == 1", "there is no axis __import__('os').system('x')"),
    rule("no axis in it", "1 < 2", "a comparison names at least one axis"),
    rule("order of a text", "put strike < 'x'", "< compares numbers, but 'x' is a text; use == or !="),
    rule("order of texts", "both rolls >= 'month'", ">= compares numbers, but the values of both rolls are no numbers; use == or !="),
    rule("order of two axes", "put strike > both rolls", "> compares numbers, but the values of both rolls are no numbers"),
    rule("text with number", "both rolls == 3", "the values of both rolls are no numbers; compare it with a text in quotes"),
    rule("unlike axes", "both rolls == put strike", "the values of both rolls are no numbers; compare it with a text in quotes"),
    rule("no such value", "both rolls == 'quater'", "'quater' is no value of both rolls; it has month, quarter"),
    rule("no such label", "put strike == 'x'", "'x' is no value of put strike; it has 80, 81, 82, 83, 84, 85, ..., 99 (20 values)"),
    wrong("second rule", swap(RULE, RULE + ', "x == 1"'), 3, "leave_out.2", "in 'x == 1': there is no axis x"),
    wrong("long rule", swap(RULE, '"put strike' + " " * 1000 + '> 3"'), 3, "leave_out.1", "a rule of 1,013 characters; the limit is 1,000"),
    wrong("rules a text", swap(f"[{RULE}]", RULE), 3, "leave_out", "is 'put strike >= call strike'; it takes a list of texts, such as [\"put strike >= call strike\"]"),
    wrong("all left out", swap(RULE, '"put strike < 100"'), 3, "leave_out", "leaves out all of the 120 combinations"),
    # the reader's own
    wrong("own axis", swap('"both rolls" = "quarter"', '"both rols" = "quarter"'), 34, "own.both rols", f"there is no such axis; did you mean both rolls? {AXES}"),
    wrong("own lacks", swap('"call strike" = 110\n', ""), 31, "own", "has no call strike; it takes a value for each axis: put strike, call strike, both rolls"),
    wrong("own value", swap('"call strike" = 110', '"call strike" = 111'), 33, "own.call strike", "is 111, no value of this axis: 101, 105, 110"),
    wrong("own no table", "own = 3\n" + without_own(), 1, "own", "is 3; it takes a table with a value for each axis"),
    wrong("own left out", swap(RULE, '"put strike == 95 and both rolls == \'quarter\'"'), 31, "own", "is a combination that leave_out leaves out"),
]  # fmt: skip


@pytest.mark.parametrize(("text", "line", "key", "says"), WRONG)
def test_what_is_wrong_and_where(
    tmp_path: Path, text: str, line: int | None, key: str | None, says: tuple[str, ...]
) -> None:
    file = tmp_path / "grid.toml"
    file.write_text(text, encoding="utf-8")
    with pytest.raises(StudyFileError) as caught:
        read_study(file)
    error = caught.value
    assert (error.file, error.line, error.key) == ("grid.toml", line, key)
    place = "grid.toml" + ("" if line is None else f", line {line}") + ("" if key is None else f", {key}")
    assert str(error).startswith(f"{place}: ")
    assert str(tmp_path) not in str(error)
    for piece in says:
        assert piece in str(error)


def test_the_file_itself_is_right() -> None:
    assert parse_study(GRID).combinations == 20 * 3 * 2


def test_every_value_is_right_where_it_is_wrong_only_elsewhere() -> None:
    """A term of 3 months with a roll of half a year is no overlay; left out, it is no error."""
    text = without_own(swap('["month", "quarter"]', '["quarter", "half"]'))
    text += '[[axis]]\nname = "term"\nfield = "leg.1.term"\nvalues = [3, 12]\n'
    with pytest.raises(StudyFileError, match='value "half" with axis term, value 3'):
        parse_study(text)
    with pytest.raises(StudyFileError, match='value "half" with axis term, value 3'):  # left out for one call only
        parse_study(text.replace(RULE, "\"both rolls == 'half' and term == 3 and call strike == 101\""))
    kept = parse_study(text.replace(RULE, "\"both rolls == 'half' and term == 3\""))
    assert kept.combinations == 20 * 3 * 2 * 2


def test_a_thousand_million_combinations_are_counted_and_not_made() -> None:
    """1,000 x 1,000 x 1,000, and an axis of 10^9 values: the answer takes no time and no memory."""
    cube = without_own()
    for old in (LADDER, "[101, 105, 110]", '["month", "quarter"]'):
        cube = cube.replace(old, "{ from = 1, to = 1000, step = 1 }")
    line = GRID.replace(LADDER, "{ from = 1, to = 1_000_000_000, step = 1 }")
    for text, says in (
        (cube, "1,000 x 1,000 x 1,000 = 1,000,000,000"),
        (line, "1,000,000,000 x 3 x 2 = 6,000,000,000"),
    ):
        tracemalloc.start()
        began = time.perf_counter()
        with pytest.raises(StudyFileError, match=says):
            parse_study(text)
        seconds, (_, peak) = time.perf_counter() - began, tracemalloc.get_traced_memory()
        tracemalloc.stop()
        assert seconds < 0.5  # a few milliseconds; making them would take minutes
        assert peak < 2_000_000


# ---------------------------------------------------------------- files that cannot be read


def test_files_that_cannot_be_read(tmp_path: Path) -> None:
    with pytest.raises(StudyFileError, match=r"^missing\.toml: there is no such file$"):
        read_study(tmp_path / "missing.toml")
    with pytest.raises(StudyFileError, match=r": is a folder, not a file$"):
        read_study(tmp_path)
    huge = tmp_path / "huge.toml"
    huge.write_text(GRID + "#" * LARGEST_FILE_BYTES, encoding="utf-8")
    with pytest.raises(StudyFileError, match=r"^huge\.toml: larger than 1,000,000 bytes: no study file$"):
        read_study(huge)
    latin = tmp_path / "latin.toml"
    latin.write_bytes(GRID.encode() + b"# caf\xe9\n")
    with pytest.raises(StudyFileError, match=r"^latin\.toml: cannot be read: .*0xe9"):
        read_study(latin)


# ---------------------------------------------------------------- studies made without a file

STUDY = parse_study(GRID)
WORD: Any = "band"
NO_AXES: Any = ("put",)


@pytest.mark.parametrize(
    ("make", "key", "says"),
    [
        pytest.param(lambda: replace(STUDY, seed=-1), "seed", "is -1", id="replaced"),
        pytest.param(lambda: replace(STUDY, axes=()), "axis", "at least one", id="no axes"),
        pytest.param(lambda: replace(STUDY, axes=NO_AXES), "axis.1", "it takes an Axis", id="no Axis"),
        pytest.param(lambda: replace(STUDY, overlay=WORD), "overlay", "is no table", id="no table"),
        pytest.param(lambda: Axis(name="x", fields=("account",), values=()), "values", "is empty", id="axis"),
        pytest.param(lambda: Axis(name="x", fields=("account",), values=WORD), "values", "a list", id="values"),
        pytest.param(lambda: study_from_table({**study_to_table(STUDY), "axis": [1]}), "axis.1", "is 1", id="table"),
        pytest.param(lambda: study_from_table({}), None, "there is no question", id="nothing"),
    ],
)
def test_an_error_without_a_file(make: Callable[[], Study | Axis], key: str | None, says: str) -> None:
    with pytest.raises(StudyFileError, match=says) as caught:
        make()
    assert (caught.value.file, caught.value.line, caught.value.key) == ("study", None, key)


def test_family_exit_code_and_the_way_through_another_process() -> None:
    with pytest.raises(StudyFileError) as caught:
        parse_study(GRID.replace("Which strikes?", ""), file="grid.toml")
    error = caught.value
    assert isinstance(error, StudyError)
    assert _exit_code(error) == 2
    again = pickle.loads(pickle.dumps(error))
    assert str(again) == str(error) == 'grid.toml, line 1, question: is ""; it takes a text in quotes'
    assert again.path == ("question",)
