"""What may be laid around a strike rule (C6): bounds, ratchet, a strike kept, another leg, listed steps.

Rung: identity (every limit worked by hand, alone and in the order of the parameters; what a ratchet promises, with
hypothesis) and behaviour (messages). Names of files are in ``test_strikes_catalogue.py``.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from backtest import Adjusted, Delta, Financed, Mirrored, OverlayError, PercentOfSpot
from backtest.strikes import ABOVE_ALL, BELOW_ALL, OpenState, flag_words, limit_strikes, round_to_step
from tests.reference.open_states import linked_option, open_state

Array = npt.NDArray[np.float64]
NAN = math.nan


@dataclass(frozen=True)
class Given:
    """A rule that gives these strikes, whatever the state."""

    values: tuple[float, ...]

    def strikes(self, state: OpenState) -> Array:
        return np.array(self.values, dtype=np.float64)


def limited(
    raw: list[float],
    spot: list[float],
    *,
    sign: float = -1.0,
    follows: list[bool] | None = None,
    other: list[float] | None = None,
    **limits: Any,
) -> tuple[list[float], list[str]]:
    """Strikes and their flags in words."""
    linked = {} if other is None else {2: linked_option(strike=other)}
    state = open_state(spot=spot, sign=sign, follows=follows, linked=linked)
    rule = Adjusted(rule=Given(tuple(raw)), **limits)
    strike, flags = limit_strikes(rule, np.array(raw), state)
    assert rule.strikes(state).tolist() == pytest.approx(strike.tolist(), nan_ok=True)
    return strike.tolist(), ["; ".join(flag_words(one)) for one in flags.tolist()]


# ---------------------------------------------------------------- bounds


def test_bounds_in_percent_of_each_rolls_spot() -> None:
    strike, flags = limited([95.0, 79.0, 111.0, 100.0], [100.0, 100.0, 100.0, 200.0], not_below=80, not_above=110)
    assert strike == pytest.approx([95.0, 80.0, 110.0, 160.0], rel=1e-15)
    assert flags == ["", "lowest strike", "highest strike", "lowest strike"]


def test_one_bound_alone() -> None:
    assert limited([20.0, 900.0], [100.0, 100.0], not_below=80) == ([80.0, 900.0], ["lowest strike", ""])
    assert limited([20.0, 900.0], [100.0, 100.0], not_above=120) == ([20.0, 120.0], ["", "highest strike"])


def test_a_strike_on_its_bound_is_not_flagged() -> None:
    spots = [99.99, 1234.5, 3.3, 7e4]
    for percent in (80, 95.3, 107.7):
        raw = PercentOfSpot(percent).strikes(open_state(spot=spots)).tolist()
        assert limited(raw, spots, not_below=percent) == (raw, [""] * 4)
        assert limited(raw, spots, not_above=percent) == (raw, [""] * 4)


def test_no_solution_takes_the_bound_of_its_side_and_says_so() -> None:
    raw, spot = [BELOW_ALL, ABOVE_ALL], [100.0, 200.0]
    flags = ["no solution; lowest strike", "no solution; highest strike"]
    assert limited(raw, spot) == ([1.0, 2000.0], flags)
    assert limited(raw, spot, not_below=85, not_above=120) == ([85.0, 240.0], flags)
    # the same for a rule by itself
    strike, found = limit_strikes(Delta(0.25), np.array(raw), open_state(spot=spot))
    assert strike.tolist() == [1.0, 2000.0]
    assert ["; ".join(flag_words(one)) for one in found.tolist()] == flags


def test_where_the_vol_is_unknown_the_strike_is() -> None:
    everything: dict[str, Any] = {
        "kept_until_moved": 5, "ratchet": True, "not_below": 80, "not_above": 120, "strike_step": 5,
    }  # fmt: skip
    strike, flags = limited([NAN, 95.0, NAN, 90.0], [100.0] * 4, **everything)
    assert np.isnan(strike).tolist() == [True, False, False, False]
    # kept at 95 once it was set; nothing is kept of a strike that is unknown
    assert strike[1:] == [95.0, 95.0, 95.0]
    assert flags == ["", "", "strike kept", "strike kept"]
    assert np.isnan(limited([NAN], [100.0], not_below=80, strike_step=5)[0]).all()


# ---------------------------------------------------------------- kept until moved


def test_a_strike_is_kept_until_spot_has_moved_since_it_was_set() -> None:
    # set at 100; 3 and 4.9 percent away from it keep 95; 5.1 does not; 110 is 4.7 percent away from 105.1; 99 is 5.8
    spot = [100.0, 103.0, 104.9, 105.1, 104.0, 110.0, 99.0]
    strike, flags = limited([0.95 * s for s in spot], spot, kept_until_moved=5)
    expected = [95.0, 95.0, 95.0, 99.845, 99.845, 99.845, 94.05]
    assert strike == pytest.approx(expected, rel=1e-14)
    assert flags == ["", "strike kept", "strike kept", "", "strike kept", "strike kept", ""]


def test_a_move_of_just_as_much_sets_the_strike_anew() -> None:
    # 125/100 and 75/100 are exact in binary
    assert limited([90.0, 91.0], [100.0, 125.0], kept_until_moved=25)[0] == [90.0, 91.0]
    assert limited([90.0, 91.0], [100.0, 75.0], kept_until_moved=25)[0] == [90.0, 91.0]
    assert limited([90.0, 91.0], [100.0, 124.99], kept_until_moved=25)[0] == [90.0, 90.0]
    assert limited([90.0, 91.0], [100.0, 100.0], kept_until_moved=0)[0] == [90.0, 91.0]


def test_nothing_is_kept_after_a_pause() -> None:
    # the third option takes the place of none: it is set by the rule, and from its own spot on
    strike, flags = limited(
        [90.0, 91.0, 92.0, 93.0], [100.0, 101.0, 102.0, 106.0], follows=[False, True, False, True], kept_until_moved=5
    )
    assert strike == [90.0, 90.0, 92.0, 92.0]
    assert flags == ["", "strike kept", "", "strike kept"]


def test_what_is_kept_is_the_strike_that_was_held_bounds_and_all() -> None:
    # 80 is lifted to 85 percent of 100; kept at 85 until 85 percent of 104 is more, and then that is kept
    strike, flags = limited([80.0, 80.0, 80.0], [100.0, 104.0, 100.0], kept_until_moved=5, not_below=85)
    assert strike == pytest.approx([85.0, 88.4, 88.4])
    assert flags == ["lowest strike", "lowest strike; strike kept", "strike kept"]


# ---------------------------------------------------------------- ratchet


def test_a_put_is_never_struck_below_the_one_it_replaces_while_that_is_below_spot() -> None:
    spot = [100.0, 96.0, 94.0, 110.0, 104.5, 104.5]
    # 95 holds at 96, not at 94 where it is in the money; 104.5 is not below 104.5
    strike, flags = limited([95.0, 91.2, 89.3, 104.5, 99.0, 98.0], spot, ratchet=True)
    assert strike == [95.0, 95.0, 89.3, 104.5, 99.0, 99.0]
    assert flags == ["", "ratchet", "", "", "", "ratchet"]


def test_a_call_is_never_struck_above_the_one_it_replaces_while_that_is_above_spot() -> None:
    spot = [100.0, 104.0, 106.0, 90.0, 95.0]
    strike, flags = limited([105.0, 109.0, 111.0, 95.0, 99.0], spot, sign=1.0, ratchet=True)
    assert strike == [105.0, 105.0, 111.0, 95.0, 99.0]
    assert flags == ["", "ratchet", "", "", ""]


def test_a_ratchet_has_no_memory_over_a_pause() -> None:
    strike, flags = limited([95.0, 90.0, 80.0], [100.0] * 3, follows=[False, False, True], ratchet=True)
    assert strike == [95.0, 90.0, 90.0]
    assert flags == ["", "", "ratchet"]


@pytest.mark.parametrize(("sign", "raw"), [(-1.0, BELOW_ALL), (1.0, ABOVE_ALL)], ids=["put", "call"])
def test_a_ratchet_does_not_hide_that_there_was_no_solution(sign: float, raw: float) -> None:
    held = 100.0 + 5.0 * sign
    strike, flags = limited([held, raw], [100.0, 100.0], sign=sign, ratchet=True)
    assert strike == [held, held]
    assert flags == ["", "no solution; ratchet"]


@settings(max_examples=300, deadline=None, derandomize=True, database=None)
@given(
    rolls=st.lists(st.tuples(st.floats(50.0, 150.0), st.floats(0.8, 1.2), st.booleans()), min_size=1, max_size=12),
    sign=st.sampled_from([1.0, -1.0]),
    step=st.sampled_from([None, 1.0, 5.0]),
)
def test_what_a_ratchet_promises(rolls: list[tuple[float, float, bool]], sign: float, step: float | None) -> None:
    spot = [s for s, _, _ in rolls]
    raw = [s * share for s, share, _ in rolls]
    follows = [number > 0 and after for number, (_, _, after) in enumerate(rolls)]
    strike, flags = limited(raw, spot, sign=sign, follows=follows, strike_step=step, ratchet=True)
    plain, _ = limited(raw, spot, sign=sign, strike_step=step)
    for roll in range(len(rolls)):
        replaced = strike[roll - 1]
        if follows[roll] and sign * (replaced - spot[roll]) > 0.0:
            assert sign * (strike[roll] - replaced) <= 0.0  # a put's never falls, a call's never rises
            assert strike[roll] == (max if sign < 0.0 else min)(plain[roll], replaced)
        else:
            assert strike[roll] == plain[roll]
        assert (flags[roll] == "ratchet") <= (strike[roll] == replaced)


# ---------------------------------------------------------------- another leg, listed steps


def test_a_strike_under_another_legs_is_lifted_to_it() -> None:
    strike, flags = limited([100.0, 100.0, 100.0], [100.0] * 3, sign=1.0, other=[99.0, 103.0, NAN], not_below_leg=2)
    assert strike == [100.0, 103.0, 100.0]
    assert flags == ["", "lifted over the put", ""]


@pytest.mark.parametrize(
    ("strike", "step", "spot", "listed"),
    [
        pytest.param(98.0, 5.0, 100.0, 100.0, id="up"),
        pytest.param(97.4, 5.0, 100.0, 95.0, id="down"),
        pytest.param(97.5, 5.0, 100.0, 95.0, id="a tie below spot goes down"),
        pytest.param(102.5, 5.0, 100.0, 105.0, id="a tie above spot goes up"),
        pytest.param(97.5, 5.0, 97.5, 100.0, id="a tie at spot goes up"),
        pytest.param(97.5, 5.0, 90.0, 100.0, id="a tie above a low spot goes up"),
        pytest.param(95.0, 5.0, 100.0, 95.0, id="listed already"),
        pytest.param(0.35, 0.1, 1.0, 0.3, id="a tie that binary fractions blur, below"),
        pytest.param(1.15, 0.1, 1.0, 1.2, id="and above"),
        pytest.param(2.0, 5.0, 100.0, 5.0, id="never zero"),
        pytest.param(2.5, 5.0, 100.0, 5.0, id="not by a tie either"),
        pytest.param(7.0, 25.0, 10.0, 25.0, id="a step beyond spot"),
        pytest.param(1234.567, 0.01, 1000.0, 1234.57, id="cents"),
    ],
)
def test_listed_steps(strike: float, step: float, spot: float, listed: float) -> None:
    found = round_to_step(np.array([strike]), step, np.array([spot]))
    assert found[0] == pytest.approx(listed, rel=1e-14)
    assert limited([strike], [spot], strike_step=step)[0][0] == found[0]
    # what is listed stays as it is
    assert round_to_step(found, step, np.array([spot]))[0] == found[0]


# ---------------------------------------------------------------- the order of the parameters


@pytest.mark.parametrize(
    ("limits", "strike", "flags"),
    [
        pytest.param({}, 85.0, "", id="the rule"),
        pytest.param({"kept_until_moved": 20}, 93.0, "strike kept", id="kept"),
        pytest.param({"ratchet": True}, 93.0, "ratchet", id="ratchet"),
        pytest.param({"kept_until_moved": 20, "ratchet": True}, 93.0, "strike kept", id="kept, then nothing to hold"),
        pytest.param({"kept_until_moved": 20, "not_below": 95}, 104.5, "lowest strike; strike kept", id="kept, bound"),
        pytest.param(
            {"not_below": 80, "not_below_leg": 2}, 101.0, "lowest strike; lifted over the put", id="bound, leg"
        ),
        pytest.param({"not_above": 85, "not_below_leg": 2}, 101.0, "lifted over the put", id="the leg above the bound"),
        pytest.param(
            {"not_below_leg": 2, "strike_step": 5}, 105.0, "lifted over the put", id="the next step above the leg"
        ),
        pytest.param({"ratchet": True, "strike_step": 10}, 90.0, "ratchet", id="the step after the ratchet"),
        pytest.param({"not_below": 83, "strike_step": 10}, 90.0, "lowest strike", id="the step after the bound"),
    ],
)
def test_order(limits: dict[str, Any], strike: float, flags: str) -> None:
    """A put of 93 at a spot of 100 is replaced at 110, where its rule says 85 and the other leg is at 101."""
    found, said = limited([93.0, 85.0], [100.0, 110.0], other=[NAN, 101.0], **limits)
    assert found[1] == pytest.approx(strike, rel=1e-14)
    assert said[1] == flags


def test_a_bound_comes_after_the_ratchet() -> None:
    # 95 is held at a spot of 98, and is more than 96 percent of it
    strike, flags = limited([95.0, 90.0], [100.0, 98.0], ratchet=True, not_above=96)
    assert strike == pytest.approx([95.0, 94.08], rel=1e-15)
    assert flags == ["", "highest strike; ratchet"]


def test_spot_is_that_of_the_decision() -> None:
    """The state holds the day of the decision and no other spot, so there is none to be confused with."""
    state = open_state(spot=[100.0, 110.0])
    assert state.spot is state.day.spot


# ---------------------------------------------------------------- what an Adjusted refuses

PERCENT = "it takes a number from 1 to 1000, in percent (95 is five percent below)"


@pytest.mark.parametrize(
    ("fields", "message", "field"),
    [
        ({"rule": 95}, "rule is 95; give a strike rule such as Delta(0.25)", "strike"),
        ({"rule": Adjusted(rule=Delta(0.25))}, "an Adjusted rule cannot be adjusted again; put all into one", "strike"),
        ({"ratchet": 1}, "ratchet is 1; it takes true or false", "ratchet"),
        (
            {"kept_until_moved": -1},
            "kept_until_moved is -1; it takes a number from 0 to 1000, in percent of spot",
            "kept_until_moved",
        ),
        ({"not_below": 0.8}, f"not_below is 0.8; {PERCENT}", "not_below"),
        ({"not_above": 1001}, f"not_above is 1001; {PERCENT}", "not_above"),
        (
            {"not_below": 90, "not_above": 80},
            "not_below is 90 and not_above 80; no strike fits between",
            "not_below",
        ),
        (
            {"not_below_leg": 0},
            "not_below_leg is 0; it takes a whole number from 1 to 200 (the number of a leg)",
            "not_below_leg",
        ),
        ({"strike_step": 0}, "strike_step is 0; it takes a number from 1e-06 to 1e+06 (in price)", "strike_step"),
    ],
)
def test_limits_that_are_none(fields: dict[str, Any], message: str, field: str) -> None:
    with pytest.raises(OverlayError) as caught:
        Adjusted(**{"rule": Delta(0.25), **fields})
    assert (str(caught.value), caught.value.field) == (message, field)


def test_a_class_is_no_rule() -> None:
    with pytest.raises(OverlayError, match=r"^rule is <class 'backtest.strikes.solved.Delta'>; give a strike rule"):
        Adjusted(rule=Delta)  # type: ignore[arg-type]


def test_what_an_adjusted_rule_needs() -> None:
    assert not Adjusted(rule=Delta(0.25), not_below=80, strike_step=5).remembers
    assert Adjusted(rule=Delta(0.25), ratchet=True).remembers
    assert Adjusted(rule=Delta(0.25), kept_until_moved=0).remembers
    assert Adjusted(rule=Delta(0.25)).named_legs == ()
    assert Adjusted(rule=Financed(1.0, (2, 3)), not_below_leg=1).named_legs == (2, 3, 1)
    assert Adjusted(rule=Mirrored(4)).named_legs == (4,)
    assert Adjusted(rule=Delta(0.25), not_below=90, not_above=90).not_above == 90
