"""Overlays of the whole language: ladders, legs that name legs, gates, references, crossed strikes, anchors.

Rung: hand-worked (tranches, renumbered names, anchors) and behaviour (messages with their field). Fields that are
refused are in ``test_overlay_refusals.py``; plain legs, costs and overlays in ``test_overlay.py``.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Any

import pytest

from backtest import (
    Adjusted,
    Delta,
    Financed,
    Gate,
    Leg,
    Mirrored,
    Overlay,
    OverlayError,
    PercentOfForward,
    PercentOfSpot,
    PriceMean,
    SignalOn,
)
from backtest.strikes import OpenState

GATE = Gate(condition=SignalOn())
OTHER_GATE = Gate(condition=PriceMean(window=50, above=True), when_off="close")


def put(**fields: Any) -> Leg:
    return Leg(**{"position": "long", "right": "put", "strike": PercentOfSpot(95), **fields})


def call(**fields: Any) -> Leg:
    return Leg(**{"position": "short", "right": "call", "roll": "month", "strike": PercentOfSpot(105), **fields})


def strikes(overlay: Overlay) -> list[Any]:
    return [leg.strike for leg in overlay.carried]


def refusal(make: Any, *arguments: Any, **fields: Any) -> tuple[str, str | None]:
    with pytest.raises(OverlayError) as caught:
        make(*arguments, **fields)
    return str(caught.value), caught.value.field


# ---------------------------------------------------------------- ladders


@pytest.mark.parametrize(
    ("fields", "phases", "shifts"),
    [
        pytest.param({"roll": "quarter", "ladder": 3}, [0, 1, 2], [0, 0, 0], id="a quarter in three months"),
        pytest.param({"roll": "quarter", "ladder": 3, "phase": 1}, [1, 2, 0], [0, 0, 0], id="from a phase"),
        pytest.param({"roll": "half", "ladder": 2, "shift_days": -3}, [0, 3], [-3, -3], id="a half in two"),
        pytest.param({"roll": "half", "ladder": 6, "phase": 4}, [4, 5, 0, 1, 2, 3], [0] * 6, id="a half in six"),
        pytest.param({"roll": "year", "ladder": 4, "phase": 11}, [11, 2, 5, 8], [0] * 4, id="a year in quarters"),
        pytest.param({"roll": "month", "ladder": 2}, [0, 0], [0, 10], id="a month in two: round(10.5), to even"),
        pytest.param({"roll": "month", "ladder": 3, "shift_days": 2}, [0] * 3, [2, 9, 16], id="a month in three"),
        pytest.param({"roll": "quarter", "ladder": 2}, [0, 0], [0, 32], id="a quarter in two: round(31.5)"),
        pytest.param({"roll": "half", "ladder": 4, "phase": 5}, [5] * 4, [0, 32, 63, 94], id="a half in four"),
        pytest.param({"roll": "year", "ladder": 5}, [0] * 5, [0, 50, 101, 151, 202], id="a year in five"),
        pytest.param({"roll": "days", "every": 30, "ladder": 4}, [0, 8, 15, 22], [0] * 4, id="thirty days in four"),
        pytest.param(
            {"roll": "days", "every": 30, "ladder": 4, "phase": 11, "shift_days": 5},
            [11, 19, 26, 3],
            [5] * 4,
            id="from a phase, over the end",
        ),
        pytest.param({"roll": "days", "every": 2, "ladder": 3}, [0, 1, 1], [0] * 3, id="more tranches than days"),
        pytest.param({"roll": "quarter", "ladder": 3, "stagger": False}, [0] * 3, [0] * 3, id="all at once"),
        pytest.param({"roll": "days", "every": 9, "ladder": 2, "stagger": False}, [0, 0], [0, 0], id="days at once"),
    ],
)
def test_tranches(fields: dict[str, Any], phases: list[int], shifts: list[int]) -> None:
    leg = put(ratio=0.9, **fields)
    tranches = leg.tranches()
    assert [one.phase for one in tranches] == phases
    assert [one.shift_days for one in tranches] == shifts
    assert {one.ladder for one in tranches} == {1}
    assert [one.ratio for one in tranches] == [0.9 / leg.ladder] * leg.ladder
    # nothing else differs
    same = {"ladder": leg.ladder, "ratio": 0.9, "phase": leg.phase, "shift_days": leg.shift_days}
    assert [replace(one, **same) for one in tranches] == [leg] * leg.ladder
    overlay = Overlay(legs=(leg,))
    assert overlay.carried == tranches
    assert overlay.legs == (leg,)


def test_plain_legs_are_carried_as_they_are() -> None:
    overlay = Overlay(legs=(put(), call(strike=Financed(1.0))))
    assert overlay.carried is overlay.legs
    assert overlay.anchor is overlay.legs[0]
    assert put().tranches() == (put(),)


def test_the_overlays_gate_is_for_legs_without_one() -> None:
    overlay = Overlay(legs=(put(), call(gate=OTHER_GATE), put(ladder=2)), gate=GATE)
    assert [leg.gate for leg in overlay.carried] == [GATE, OTHER_GATE, GATE, GATE]
    assert [leg.gate for leg in overlay.legs] == [None, OTHER_GATE, None]


# ---------------------------------------------------------------- names


def test_names_of_a_ladder_go_rung_by_rung() -> None:
    overlay = Overlay(legs=(put(ladder=3), call(ladder=3, roll="quarter", strike=Financed(0.8))))
    assert strikes(overlay) == [PercentOfSpot(95)] * 3 + [Financed(0.8, (1,)), Financed(0.8, (2,)), Financed(0.8, (3,))]


def test_tranches_of_a_call_share_one_put() -> None:
    # a quarter of the put's cost for each quarter of the calls
    overlay = Overlay(legs=(put(), call(ladder=4, strike=Financed(0.8))))
    assert strikes(overlay)[1:] == [Financed(0.2, (1,))] * 4


def test_names_after_ladders_are_counted_anew() -> None:
    """Leg 1 has two tranches and leg 2 three, so that leg 3 is the sixth that is carried and leg 4 the seventh."""
    legs = (
        put(ladder=2),
        call(roll="quarter", ladder=3),
        put(roll="half"),
        call(strike=Adjusted(rule=Financed(1.0, (3,)), not_below_leg=3)),
        call(strike=Mirrored(3)),
        call(ladder=2, strike=Adjusted(rule=Financed(1.0, (1,)), not_below_leg=1, ratchet=True)),
        call(ladder=3, strike=Adjusted(rule=Mirrored(2), not_above=120)),
    )
    assert strikes(Overlay(legs=legs, crossed=True))[5:] == [
        PercentOfSpot(95),
        Adjusted(rule=Financed(1.0, (6,)), not_below_leg=6),
        Mirrored(6),
        Adjusted(rule=Financed(1.0, (1,)), not_below_leg=1, ratchet=True),
        Adjusted(rule=Financed(1.0, (2,)), not_below_leg=2, ratchet=True),
        Adjusted(rule=Mirrored(3), not_above=120),
        Adjusted(rule=Mirrored(4), not_above=120),
        Adjusted(rule=Mirrored(5), not_above=120),
    ]


def test_named_legs_may_come_later_and_name_others() -> None:
    legs = (call(strike=Financed(1.0, (3, 2))), call(strike=Mirrored(3)), put())
    assert Overlay(legs=legs).carried == legs


def naming(*names: int, **fields: Any) -> Leg:
    return call(strike=Financed(1.0, names), **fields)


@pytest.mark.parametrize(
    ("legs", "message", "field"),
    [
        ((put(), naming(2)), "leg 2 names itself; name another leg", "leg 2"),
        ((put(strike=Mirrored(1)),), "leg 1 names itself; name another leg", "leg 1"),
        (
            (call(strike=Adjusted(rule=Delta(0.3), not_below_leg=1)),),
            "leg 1 names itself; name another leg",
            "leg 1",
        ),
        ((naming(2),), "leg 1 names leg 2, and there are 1 leg(s)", "leg 1"),
        ((put(), naming(1, 9)), "leg 2 names leg 9, and there are 2 leg(s)", "leg 2"),
        (
            (put(strike=Mirrored(2)), naming(1)),
            "legs 1, 2 wait for each other's strikes; one has to have a rule of its own",
            "leg 1",
        ),
        (
            (put(), naming(3), call(strike=Mirrored(4)), naming(2)),
            "legs 2, 3, 4 wait for each other's strikes; one has to have a rule of its own",
            "leg 2",
        ),
        (
            (put(ladder=3), naming(1)),
            "leg 2 of 1 tranche(s) names leg 1 of 3; give both the same ladder, or none to the leg that is named",
            "leg 2",
        ),
        (
            (put(ladder=3), naming(1, ladder=2)),
            "leg 2 of 2 tranche(s) names leg 1 of 3; give both the same ladder, or none to the leg that is named",
            "leg 2",
        ),
        (
            (put(ladder=3), put(), naming(1, 2, ladder=3)),
            "leg 3 names legs of 1 and 3 tranche(s); give all that it names the same ladder",
            "leg 3",
        ),
    ],
)
def test_names_that_are_refused(legs: tuple[Leg, ...], message: str, field: str) -> None:
    assert refusal(Overlay, legs=legs) == (message, field)


@dataclass(frozen=True)
class Same:
    """A rule of the caller's own: the strike of another leg."""

    leg: int

    @property
    def named_legs(self) -> tuple[int, ...]:
        return (self.leg,)

    def strikes(self, state: OpenState) -> Any:
        return state.linked[self.leg].strike


def test_a_rule_of_the_callers_own_keeps_its_numbers() -> None:
    """Where ladders before the leg that it names would count it anew, it is refused: nobody knows how to tell it."""
    assert Overlay(legs=(put(), call(strike=Same(1)), put(ladder=2))).carried[1].strike == Same(1)
    message, field = refusal(Overlay, legs=(put(ladder=2), put(), call(strike=Same(2))))
    assert message == "Same(leg=2) names leg 2 and does not go with ladders before that leg"
    assert field == "strike"


# ---------------------------------------------------------------- crossed


CROSSED = (
    "the sold call at 90 lies under the bought put at 95: together they sell the stock forward. If that is meant, "
    "say crossed = true"
)
UNDER = call(strike=PercentOfSpot(90))


@pytest.mark.parametrize(
    ("legs", "field"),
    [
        ((put(), UNDER), "leg 2"),
        ((UNDER, put()), "leg 1"),
        ((put(), call(), UNDER), "leg 3"),
        ((put(strike=PercentOfForward(95)), call(strike=PercentOfForward(90))), "leg 2"),
        ((put(ladder=3), UNDER), "leg 2"),
        ((put(roll="year"), replace(UNDER, roll="quarter", term_months=None)), "leg 2"),
    ],
)
def test_a_sold_call_under_a_bought_put_needs_consent(legs: tuple[Leg, ...], field: str) -> None:
    assert refusal(Overlay, legs=legs) == (CROSSED, field)
    assert Overlay(legs=legs, crossed=True).legs == legs


@pytest.mark.parametrize(
    "legs",
    [
        (put(), call(strike=PercentOfSpot(95))),
        (put(position="short"), UNDER),
        (put(), replace(UNDER, position="long")),
        (put(ratio=0.0), UNDER),
        (put(), replace(UNDER, ratio=0.0)),
        (put(reference=True), UNDER),
        (put(), replace(UNDER, reference=True)),
        (put(strike=PercentOfForward(95)), UNDER),
        (put(strike=Delta(0.9)), call(strike=Delta(0.9))),
        (put(), call(strike=Adjusted(rule=PercentOfSpot(90), not_below_leg=1))),
        (put(), call(strike=Adjusted(rule=PercentOfSpot(90), not_below=100))),
    ],
    ids=[
        "at the same strike", "a sold put", "a bought call", "no put", "no call", "a put that is not held",
        "a call that is not held", "other kinds of percent", "deltas", "lifted over the put", "lifted by its bound",
    ],
)  # fmt: skip
def test_nothing_crosses(legs: tuple[Leg, ...]) -> None:
    assert Overlay(legs=legs).legs == legs


# ---------------------------------------------------------------- anchors


@pytest.mark.parametrize(
    ("legs", "anchor"),
    [
        pytest.param((call(), put(roll="days", every=22)), 1, id="22 days are longer than a month"),
        pytest.param((call(), put(roll="days", every=21)), 0, id="21 are a month: the first listed"),
        pytest.param((put(), put(roll="days", every=62)), 0, id="62 are shorter than a quarter"),
        pytest.param((put(reference=True), call()), 1, id="a reference takes no part"),
        pytest.param((call(), put(ladder=3, phase=1)), 1, id="the first tranche of a ladder"),
        pytest.param((call(), put(roll="half", gate=GATE)), 1, id="a gate does not matter"),
        pytest.param((put(reference=True), call(reference=True)), 0, id="none held: the longest"),
    ],
)
def test_anchor(legs: tuple[Leg, ...], anchor: int) -> None:
    overlay = Overlay(legs=legs)
    assert overlay.anchor is overlay.carried[anchor]
