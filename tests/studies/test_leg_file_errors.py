"""What the wider language of overlay files may not say: every message with its line, key, what came and the limit.

Rung: identity (a file of a few lines whose lines are counted by hand).
"""

# ruff: noqa: E501  one case stays on one or two lines, so that the table can be read

from __future__ import annotations

from typing import Any

import pytest

from studies.errors import OverlayFileError
from studies.overlay_files import parse_overlay

# lines counted from 1: the legs begin on lines 3 and 8
TWO_LEGS = """\
name = "two"

[[leg]]
position = "long"
right = "put"
strike = { percent_of_spot = 95 }

[[leg]]
position = "short"
right = "call"
roll = "month"
strike = { financed_share = 1, of_legs = [1] }
"""
FIRST, SECOND = "{ percent_of_spot = 95 }", "{ financed_share = 1, of_legs = [1] }"
RULES = "percent_of_spot, percent_of_forward, deviations, delta, premium_percent, financed_share, mirrored_leg"
LIMITS = "of_legs, kept_until_moved, ratchet, not_below, not_above, not_below_leg, strike_step"


def wrong(case: str, text: str, line: int | None, key: str | None, *says: str) -> Any:
    return pytest.param(text, line, key, says, id=case)


def swap(old: str, new: str) -> str:
    assert TWO_LEGS.count(old) == 1
    return TWO_LEGS.replace(old, new)


def strike(case: str, written: str, key: str | None, *says: str, second: bool = True) -> Any:
    """Another strike of the second leg, on line 12, or of the first, on line 6."""
    old, line, leg = (SECOND, 12, 2) if second else (FIRST, 6, 1)
    place = f"leg.{leg}.strike" + ("" if key is None else f".{key}")
    return wrong(f"strike {case}", swap(old, f"{{ {written} }}"), line, place, *says)


def more(case: str, lines: str, line: int | None, key: str, *says: str) -> Any:
    """The two legs with lines 13, 14, ... added."""
    return wrong(case, f"{TWO_LEGS}{lines}\n", line, key, *says)


def top(case: str, lines: str, key: str, *says: str, line: int = 1) -> Any:
    """Lines before all else."""
    return wrong(case, f"{lines}\n{TWO_LEGS}", line, key, *says)


DAYS = 'roll = "month"'
WRONG = [
    # strikes
    strike("rule unknown", "detla = 0.25", "detla", "unknown key; did you mean delta?", f"Known here: {RULES}, {LIMITS}"),
    strike("limit unknown", "delta = 0.25, not_under = 3", "not_under", "unknown key"),
    strike("no rule", "ratchet = true", None, f"is {{'ratchet': True}}; it takes one rule, such as {{ percent_of_spot = 95 }}; rules: {RULES}"),
    strike("two rules", "delta = 0.25, deviations = 1", None, "is {'delta': 0.25, 'deviations': 1}; it takes one rule"),
    strike("delta", "delta = 25", "delta", "delta is 25; it takes a number from 0.001 to 0.999 (0.25 is a 25-delta option)"),
    strike("deviations", "deviations = 11", "deviations", "deviations is 11; it takes a number from -10 to 10"),
    strike("premium", "premium_percent = 0", "premium_percent", "premium_percent is 0; it takes a number from 0.001 to 90"),
    strike("share", "financed_share = 0", "financed_share", "financed_share is 0; it takes a number from 0.0001 to 10"),
    strike("legs no list", "financed_share = 1, of_legs = 1", "of_legs", "of_legs is 1; it takes numbers of legs, such as [1]"),
    strike("legs a text", 'financed_share = 1, of_legs = "1"', "of_legs", "of_legs is '1'; it takes numbers of legs"),
    strike("legs none", "financed_share = 1, of_legs = []", "of_legs", "of_legs is []; it takes numbers of legs, such as [1]"),
    strike("leg nought", "financed_share = 1, of_legs = [0]", "of_legs", "of_legs is 0; it takes a whole number from 1 to 200 (the number of a leg)"),
    strike("leg twice", "financed_share = 1, of_legs = [1, 1]", "of_legs", "of_legs is [1, 1]; each leg once"),
    strike("legs of another", "delta = 0.25, of_legs = [1]", "of_legs", "of_legs belongs to financed_share; leave it out beside delta"),
    strike("mirrored", "mirrored_leg = 1.0", "mirrored_leg", "mirrored_leg is 1.0; it takes a whole number from 1 to 200"),
    strike("ratchet", "delta = 0.25, ratchet = 1", "ratchet", "ratchet is 1; it takes true or false"),
    strike("ratchet none", 'delta = 0.25, ratchet = "none"', "ratchet", "ratchet is 'none'; it takes true or false"),
    strike("not below", "delta = 0.25, not_below = 0.9", "not_below", "not_below is 0.9; it takes a number from 1 to 1000"),
    strike("not above", "delta = 0.25, not_above = 1001", "not_above", "not_above is 1001; it takes a number from 1 to 1000"),
    strike("bounds crossed", "delta = 0.25, not_above = 90, not_below = 95", "not_below", "not_below is 95 and not_above 90; no strike fits between"),
    strike("not below leg", "delta = 0.25, not_below_leg = -1", "not_below_leg", "not_below_leg is -1; it takes a whole number from 1 to 200"),
    strike("kept", "delta = 0.25, kept_until_moved = -1", "kept_until_moved", "kept_until_moved is -1; it takes a number from 0 to 1000, in percent of spot"),
    strike("step", "delta = 0.25, strike_step = 0", "strike_step", "strike_step is 0; it takes a number from 1e-06 to 1e+06 (in price)"),
    strike("of the first leg", "delta = 0.25, not_below = -80", "not_below", "not_below is -80", second=False),
    # the same key stands in both legs: the one that is wrong is pointed at
    wrong("strike in a table", swap(f"strike = {SECOND}", "[leg.strike]\ndelta = 0.25\nnot_below_leg = 1\nnot_below = -3"), 15,
          "leg.2.strike.not_below", "not_below is -3; it takes a number from 1 to 1000"),
    wrong("strike of the second leg", swap(FIRST, "{ delta = 0.25, not_below = 80 }").replace(SECOND, "{ delta = 0.25, not_below = -80 }"), 12,
          "leg.2.strike.not_below", "not_below is -80"),
    wrong("financed and bought", swap('"short"', '"long"'), 12, "leg.2.strike", "only a sold leg can finance another; this one is bought"),
    wrong("financed of ratio nought", TWO_LEGS + "ratio = 0\n", 13, "leg.2.ratio", "a financed leg of ratio 0 can pay for nothing"),
    # legs that name each other
    wrong("a leg that is not there", swap("[1]", "[1, 3]"), 8, "leg.2", "leg 2 names leg 3, and there are 2 leg(s)"),
    wrong("a leg that names itself", swap("[1]", "[2]"), 8, "leg.2", "leg 2 names itself; name another leg"),
    wrong("legs in a circle", swap(FIRST, "{ mirrored_leg = 2 }"), 3, "leg.1", "legs 1, 2 wait for each other's strikes"),
    wrong("unlike ladders", swap(FIRST, f"{FIRST}\nladder = 3"), 9, "leg.2", "leg 2 of 1 tranche(s) names leg 1 of 3"),
    wrong("a call under the put", swap(SECOND, "{ percent_of_spot = 90 }"), 8, "leg.2",
          "the sold call at 90 lies under the bought put at 95", "say crossed = true"),
    wrong("many tranches", swap(FIRST, f"{FIRST}\nladder = 60") + "ladder = 60\n" + f"[[leg]]\nposition = \"long\"\nright = \"put\"\nstrike = {FIRST}\nladder = 60\n" * 2, 3, "leg",
          "an overlay of 240 legs; the limit is 200"),
    # days on which a leg rolls
    more("roll day", 'roll_day = "monday"', 13, "leg.2.roll_day", "roll_day is 'monday'; it takes one of: third friday, last trading day"),
    more("days of a month", "every = 21", 13, "leg.2.every", 'every belongs to roll = "days"; leave it out beside "month"'),
    more("term of days of a month", "term_days = 21", 13, "leg.2.term_days", 'term_days belongs to roll = "days"'),
    wrong("days not said", swap(DAYS, 'roll = "days"'), 8, "leg.2.every", 'roll is "days"; say how many with every, such as every = 21'),
    wrong("every", swap(DAYS, 'roll = "days"\nevery = 505'), 12, "leg.2.every", "every is 505; it takes a whole number from 1 to 504 trading days"),
    wrong("days with months", swap(DAYS, 'roll = "days"\nevery = 21\nterm = 3'), 13, "leg.2.term", 'term is in months; beside roll = "days" give term_days'),
    wrong("days with a day", swap(DAYS, 'roll = "days"\nroll_day = "last trading day"\nevery = 21'), 12, "leg.2.roll_day", "roll_day is a day of the month"),
    wrong("short days", swap(DAYS, 'roll = "days"\nevery = 21\nterm_days = 20'), 13, "leg.2.term_days",
          "term_days is 20; it takes a whole number from 21 to 2520 trading days, at least its roll"),
    wrong("phase of days", swap(DAYS, 'roll = "days"\nevery = 21\nphase = 21'), 13, "leg.2.phase", "phase is 21; it takes a whole number from 0 to 20 for a cycle of 21 days"),
    more("close before", "close_before = 16", 13, "leg.2.close_before", "close_before is 16; it takes a whole number from 0 to 15 trading days"),
    more("settlement", 'settlement = "noon"', 13, "leg.2.settlement", "settlement is 'noon'; it takes one of: close, open"),
    # tranches and words
    more("ladder", "ladder = 0", 13, "leg.2.ladder", "ladder is 0; it takes a whole number from 1 to 60 tranches"),
    wrong("tranches too far", swap(DAYS, 'roll = "year"\nladder = 5\nshift_days = 100'), 13, "leg.2.shift_days",
          "shift_days is 100, and the last of 5 staggered tranches comes 202 trading days later; together at most 252"),
    more("stagger", 'stagger = "yes"', 13, "leg.2.stagger", "stagger is 'yes'; it takes true or false"),
    more("reference", "reference = 0", 13, "leg.2.reference", "reference is 0; it takes true or false"),
    # early rules
    more("early no table", "early = 3", 13, "leg.2.early", "is 3; it takes a table with keys: delta_below, value_above, value_below, days_left"),
    more("early key", "early = { delta_under = 0.1 }", 13, "leg.2.early.delta_under", "unknown key; did you mean delta_below?"),
    more("early without a rule", "early = { days_left = 3 }", 13, "leg.2.early", "early names no rule; it takes delta_below, value_above or value_below"),
    more("early delta", "early = { delta_below = 10 }", 13, "leg.2.early.delta_below", "delta_below is 10; it takes a number from 0.001 to 0.999"),
    more("early high value", "early = { value_above = 1 }", 13, "leg.2.early.value_above", "value_above is 1; it takes a number from 1.01 to 1000 (times the premium)"),
    more("early low value", "[leg.early]\nvalue_above = 3\nvalue_below = 1", 15, "leg.2.early.value_below", "value_below is 1; it takes a number from 0.001 to 0.99"),
    more("days left", "early = { value_above = 3, days_left = -1 }", 13, "leg.2.early.days_left", "days_left is -1; it takes a whole number from 0 to 3650"),
    wrong("early and ratchet", swap(SECOND, "{ delta = 0.25, ratchet = true }\nearly = { value_above = 3 }"), 13, "leg.2.early",
          "leave out ratchet and kept_until_moved beside them"),
    # gates
    more("gate no table", "gate = 200", 13, "leg.2.gate", "is 200; it takes a table with keys: signal, vol_above_percentile, vol_below_percentile, price_above_mean, price_below_mean, window, when_off, when_on"),
    more("gate key", "gate = { price_under_mean = 200 }", 13, "leg.2.gate.price_under_mean", "unknown key; did you mean price_"),
    more("gate without condition", 'gate = { when_off = "close" }', 13, "leg.2.gate", "names no condition; a gate takes one of: signal, vol_above_percentile"),
    more("gate of two", "gate = { signal = true, price_above_mean = 200 }", 13, "leg.2.gate", "names signal and price_above_mean; a gate takes one of"),
    more("gate mean", "gate = { price_below_mean = 1 }", 13, "leg.2.gate.price_below_mean", "price_below_mean is 1; it takes a whole number from 2 to 2520 trading days"),
    more("gate percent", "gate = { vol_above_percentile = 101 }", 13, "leg.2.gate.vol_above_percentile", "vol_above_percentile is 101; it takes a number from 0 to 100"),
    more("gate window", "[leg.gate]\nvol_above_percentile = 80\nwindow = 0", 15, "leg.2.gate.window", "window is 0; it takes a whole number from 2 to 2520"),
    more("gate mean and window", "gate = { price_below_mean = 200, window = 3 }", 13, "leg.2.gate.window", "window belongs to vol percentiles; leave it out beside price_below_mean"),
    more("gate signal", "gate = { signal = false }", 13, "leg.2.gate.signal", "signal is False; it takes true, the signal itself comes with --signal"),
    more("gate off", 'gate = { signal = true, when_off = "sell" }', 13, "leg.2.gate.when_off", "when_off is 'sell'; it takes one of: run out, close"),
    more("gate on", 'gate = { signal = true, when_on = "soon" }', 13, "leg.2.gate.when_on", "when_on is 'soon'; it takes one of: next roll, at once"),
    top("gate of all", "gate = { price_below_mean = 1 }", "gate.price_below_mean", "price_below_mean is 1; it takes a whole number"),
    wrong("gate of all in a table", "[gate]\nprice_below_mean = 200\nwhen_on = 3\n" + TWO_LEGS.removeprefix('name = "two"\n'), 3, "gate.when_on", "when_on is 3; it takes one of"),
    # the top of the file
    top("lag", "decide_lag = 2", "decide_lag", "decide_lag is 2; it takes a whole number from 0 to 1 (trading day)"),
    top("lag with a point", "decide_lag = 1.0", "decide_lag", "decide_lag is 1.0; it takes a whole number from 0 to 1"),
    top("lag true", "decide_lag = true", "decide_lag", "decide_lag is True; it takes a whole number from 0 to 1"),
    top("portfolio", "portfolio = 0", "portfolio", "portfolio is 0; it takes a number of at least 1 (money)"),
    top("portfolio a text", 'portfolio = "much"', "portfolio", "portfolio is 'much'; it takes a number of at least 1 (money)"),
    top("crossed", 'crossed = "yes"', "crossed", "crossed is 'yes'; it takes true or false"),
    more("borrow spread", "[costs]\nborrow_spread = 101", 14, "costs.borrow_spread", "borrow_spread is 101; it takes a number from 0 to 100 percent a year"),
    more("half-life alone", '[volatility]\nsource = "realised"\nhalf_life = 11', 15, "volatility.half_life", "half_life belongs to estimator = \"ewma\", and the estimator is 'close': leave it out"),
    more("half-life missed", '[volatility]\nsource = "realised"\nestimator = "ewma"', 13, "volatility.half_life", "half_life is None; it takes a whole number from 1 to 2520 trading days"),
    more("estimator", '[volatility]\nsource = "realised"\nestimator = "Parkinson"', 15, "volatility.estimator", "estimator is 'Parkinson'; it takes one of: close, ewma, parkinson, garman-klass, rogers-satchell, yang-zhang"),
    more("estimator alone", '[volatility]\nestimator = "parkinson"', 14, "volatility.estimator", 'belongs to realised vol; add source = "realised" or leave it out'),
    more("term structure", '[volatility]\nterm_structure = "steep"', 14, "volatility.term_structure", "term_structure is 'steep'; it takes one of: flat, mean reverting"),
    more("kappa", "[volatility]\nkappa = 0", 14, "volatility.kappa", "kappa is 0; it takes a number from 0.01 to 100 a year"),
    more("surface as a swap", '[volatility]\nsource = "surface"\nquote = "variance swap"', 15, "volatility.quote", "quote is 'variance swap', and a quoted surface has a vol for each strike and expiry: leave it out"),
    # beside the overlay
    more("counterparty no table", "[[counterparty]]", 13, "counterparty", "is [{}]; it takes a table with keys: recovery, default"),
    more("counterparty key", "[counterparty]\nrecover = 0.4", 14, "counterparty.recover", "unknown key; did you mean recovery? Known here: recovery, default"),
    more("recovery", "[counterparty]\nrecovery = 40", 14, "counterparty.recovery", "recovery is 40; it takes a number from 0 to 1 (0.4 is forty percent)"),
    more("default", '[counterparty]\nrecovery = 0\ndefault = "2008-10-10"', 15, "counterparty.default",
         'default is \'2008-10-10\'; it takes "worst put payoff", or a list of dates such as ["2008-10-10"]'),
    more("defaults none", "[counterparty]\ndefault = []", 14, "counterparty.default", "default is []; it takes"),
    more("defaults no date", '[counterparty]\ndefault = [\n  "2008-10-10",\n  "2008-02-30",\n]', 14, "counterparty.default", "default holds '2008-02-30'; it takes dates such as 2008-10-10"),
    more("default twice", '[counterparty]\ndefault = ["2008-10-10", 2008-10-10]', 14, "counterparty.default", "default has 2008-10-10 twice"),
    more("sale key", "[sale]\ntax = 25", 14, "sale.tax", "unknown key. Known here: gain_percent, tax_percent, cost_bps"),
    more("gain", "[sale]\ngain_percent = -1", 14, "sale.gain_percent", "gain_percent is -1; it takes a number from 0 to 100 (percent of the shares' value)"),
    more("tax", "[sale]\ntax_percent = 101", 14, "sale.tax_percent", "tax_percent is 101; it takes a number from 0 to 100 (percent of the gain)"),
    more("cost of the sale", "[sale]\n\n\ncost_bps = 1001", 16, "sale.cost_bps", "cost_bps is 1001; it takes a number from 0 to 1000 basis points"),
]  # fmt: skip


@pytest.mark.parametrize(("text", "line", "key", "says"), WRONG)
def test_what_is_wrong_and_where(text: str, line: int | None, key: str | None, says: tuple[str, ...]) -> None:
    with pytest.raises(OverlayFileError) as caught:
        parse_overlay(text, file="band.toml")
    error = caught.value
    assert (error.line, error.key) == (line, key)
    for piece in says:
        assert piece in str(error)


def test_the_file_itself_is_right() -> None:
    assert parse_overlay(TWO_LEGS).overlay.name == "two"
