"""Random overlays of the whole language, on the random markets of ``strategies.py``.

One to four legs; each may be struck by any rule (a later leg by the strike or the cost of an earlier one), with limits
around it, in any cycle, split into a ladder, with early rules, gates and a decision on the day before.
"""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np
import pandas as pd
from hypothesis import strategies as st

from backtest import (
    Adjusted,
    Costs,
    Delta,
    Deviations,
    Early,
    Financed,
    Gate,
    Leg,
    Mirrored,
    Overlay,
    PremiumPercent,
    PriceMean,
    SignalOn,
    VolPercentile,
)
from backtest.cycles import ROLL_MONTHS

from .strategies import TENORS, History, Scenario, costs, histories, strike_rules, volatilities, windows

#: Fields of a leg that say when it rolls.
ROLL_FIELDS = (
    "roll", "roll_day", "every", "term_months", "term_days", "phase", "shift_days", "close_before", "gate", "early",
)  # fmt: skip
WITH_VOLS = tuple(columns for columns in TENORS if columns)


def maybe(values: st.SearchStrategy[Any]) -> st.SearchStrategy[Any]:
    return st.none() | values


# ---------------------------------------------------------------- markets


def with_signal(history: History) -> History:
    """The history with opens and a signal, both drawn from its own seed; the signal begins late and has gaps."""
    rng = np.random.default_rng([history.drawn["seed"], 1])
    days = len(history.frame)
    signal = np.where(rng.random(days) < 0.1, rng.choice([0.0, 1.0, -2.0], days), np.nan)
    opens = history.frame["close"].to_numpy() * np.exp(rng.normal(0.0, 0.005, days))
    return replace(history, frame=history.frame.assign(signal=signal, open=opens))


# ---------------------------------------------------------------- strikes


@st.composite
def strikes(draw: st.DrawFn, named: list[int], *, sold: bool, steps: bool = True, remembers: bool = True) -> Any:
    """A rule, often with limits; ``named`` are the legs that it may look at."""
    rules: list[st.SearchStrategy[Any]] = [
        strike_rules(),
        st.floats(-0.5, 2.5).map(Deviations),
        st.floats(0.03, 0.7).map(Delta),
        st.floats(0.02, 6.0).map(PremiumPercent),
    ]
    if named:
        rules.append(st.sampled_from(named).map(Mirrored))
    if named and sold:
        some = st.lists(st.sampled_from(named), min_size=1, unique=True).map(tuple)
        rules += [st.builds(Financed, st.floats(0.2, 1.5), some)] * 2
    rule = draw(st.one_of(rules))
    if draw(st.booleans()):
        return rule
    return Adjusted(
        rule=rule,
        kept_until_moved=draw(maybe(st.floats(0.5, 8.0))) if remembers else None,
        ratchet=draw(st.booleans()) if remembers else False,
        not_below=draw(maybe(st.floats(70.0, 95.0))),
        not_above=draw(maybe(st.floats(105.0, 130.0))),
        not_below_leg=draw(maybe(st.sampled_from(named))) if named else None,
        strike_step=draw(maybe(st.sampled_from([0.25, 5.0]))) if steps else None,
    )


# ---------------------------------------------------------------- when


@st.composite
def cycles(draw: st.DrawFn, *, longest: int = 3) -> dict[str, Any]:
    """Fields of a leg that say when it rolls."""
    roll = draw(st.sampled_from(["month", "month", "quarter", "half", "days", "days"]))
    if roll == "days":
        every = draw(st.sampled_from([1, 3, 10, 21, 63]))
        fields: dict[str, Any] = {
            "every": every,
            "term_days": every + draw(st.sampled_from([0, 0, 5, 40])),
            "phase": draw(st.integers(0, every - 1)),
            "close_before": min(draw(st.sampled_from([0, 0, 1, 4])), every - 1),
        }
    else:
        months = ROLL_MONTHS[roll]
        fields = {
            "term_months": months + draw(st.sampled_from([0, 0, 1, longest])),
            "phase": draw(st.integers(0, months - 1)),
            "roll_day": draw(st.sampled_from(["third friday", "last trading day"])),
            "close_before": draw(st.sampled_from([0, 0, 1, 5])),
        }
    return {"roll": roll, "shift_days": draw(st.sampled_from([0, 0, -4, 3])), **fields}


def early_rules() -> st.SearchStrategy[Early]:
    return st.builds(
        Early,
        delta_below=maybe(st.floats(0.02, 0.3)),
        value_above=maybe(st.floats(1.2, 3.0)),
        value_below=st.floats(0.1, 0.7),
        days_left=st.sampled_from([0, 10, 30]),
    )


def gates(*, on_vol: bool) -> st.SearchStrategy[Gate]:
    conditions: list[st.SearchStrategy[Any]] = [
        st.just(SignalOn()),
        st.builds(PriceMean, window=st.sampled_from([2, 20, 60]), above=st.booleans()),
    ]
    if on_vol:
        conditions.append(
            st.builds(
                VolPercentile, percent=st.floats(10.0, 90.0), above=st.booleans(), window=st.sampled_from([5, 40])
            )
        )
    return st.builds(
        Gate,
        condition=st.one_of(conditions),
        when_off=st.sampled_from(["run out", "close"]),
        when_on=st.sampled_from(["next roll", "at once"]),
    )


# ---------------------------------------------------------------- overlays


@st.composite
def language_legs(draw: st.DrawFn, *, on_vol: bool, steps: bool, laddered: bool, gated: bool) -> tuple[Leg, ...]:
    rungs = draw(st.sampled_from([1, 1, 2, 3])) if laddered else 1
    legs: list[Leg] = []
    for _ in range(draw(st.integers(1, 4))):
        ladder = draw(st.sampled_from([1, rungs]))
        # a leg names legs of one ladder only: its own, or none
        of = draw(st.sampled_from([1, ladder]))
        named = [number for number, leg in enumerate(legs, start=1) if leg.ladder == of]
        position = draw(st.sampled_from(["long", "short"]))
        early = draw(maybe(early_rules()))
        legs.append(
            Leg(
                position=position,
                right=draw(st.sampled_from(["put", "call"])),
                strike=draw(strikes(named, sold=position == "short", steps=steps, remembers=early is None)),
                ratio=draw(st.sampled_from([1.0, 0.5, 0.7, 1.3])),
                ladder=ladder,
                stagger=draw(st.booleans()),
                early=early,
                gate=draw(maybe(gates(on_vol=on_vol))) if gated else None,
                settlement=draw(st.sampled_from(["close", "close", "open"])),
                reference=draw(st.sampled_from([False, False, False, True])),
                **draw(cycles()),
            )
        )
    return tuple(legs)


@st.composite
def language_overlays(
    draw: st.DrawFn,
    *,
    on_vol: bool,
    steps: bool = True,
    laddered: bool = True,
    gated: bool = True,
    exact: bool = True,
    decide_lag: int | None = None,
) -> Overlay:
    """``exact``: also in whole contracts and with a spread on borrowed cash."""
    priced = draw(costs())
    return Overlay(
        legs=draw(language_legs(on_vol=on_vol, steps=steps, laddered=laddered, gated=gated)),
        account=draw(st.sampled_from(["resize", "cash"])),
        costs=Costs(
            **{name: getattr(priced, name) for name in Costs.__slots__ if name != "borrow_spread"},
            borrow_spread=draw(st.sampled_from([0.0, 0.0, 3.0])) if exact else 0.0,
        ),
        decide_lag=draw(st.sampled_from([0, 1])) if decide_lag is None else decide_lag,
        portfolio=draw(st.sampled_from([None, None, 250_000.0])) if exact else None,
        gate=draw(maybe(gates(on_vol=on_vol))) if gated else None,
        crossed=True,
    )


@st.composite
def language_scenarios(draw: st.DrawFn, **fields: Any) -> Scenario:
    history = draw(histories(tenors=WITH_VOLS).map(with_signal) | histories(tenors=((),)).map(with_signal))
    overlay = draw(language_overlays(on_vol=bool(history.drawn["vol_columns"]), **fields))
    window = draw(windows(history))
    if "inception" in window and overlay.decide_lag:
        # the first full realised window ends a day too late for what is decided the day before
        days = history.frame.index
        window = {"inception": days[days.get_loc(pd.Timestamp(window["inception"])) + 1].date()}
    return Scenario(history=history, overlay=overlay, volatility=draw(volatilities()), window=window)


@st.composite
def financed_scenarios(draw: st.DrawFn, *, decide_lag: int, exact: bool = True) -> Scenario:
    """Up to three legs of any kind and a sold one that pays for some of them, often on the same days as the first."""
    base = draw(language_scenarios(laddered=False, decide_lag=decide_lag, steps=False, exact=exact))
    paid = base.overlay.legs[:3]
    some = draw(st.lists(st.integers(1, len(paid)), min_size=1, unique=True).map(tuple))
    first = {name: getattr(paid[0], name) for name in ROLL_FIELDS}
    seller = Leg(
        position="short",
        right=draw(st.sampled_from(["put", "call"])),
        strike=Financed(draw(st.floats(0.1, 2.0)), some),
        ratio=draw(st.sampled_from([1.0, 0.5, 1.3])),
        **draw(st.one_of(st.just(first), cycles())),
    )
    return replace(base, overlay=replace(base.overlay, legs=(*paid, seller)))
