"""Random overlays over the whole language, for hypothesis: every field of every class takes all kinds of values."""

from __future__ import annotations

from typing import Any

from hypothesis import strategies as st

from backtest import (
    FLAT,
    INDEX,
    MILD,
    STEEP,
    Adjusted,
    Costs,
    Delta,
    Deviations,
    Early,
    Financed,
    Gate,
    ImpliedSeries,
    Leg,
    Mirrored,
    Overlay,
    OverlayError,
    PercentOfForward,
    PercentOfSpot,
    PremiumPercent,
    PriceMean,
    RealisedVolatility,
    SignalOn,
    SSVISmile,
    Volatility,
    VolPercentile,
)
from backtest.beside import Counterparty, Sale
from backtest.volatility.realised import ESTIMATORS
from backtest.volatility.sources import ImpliedSurface
from studies.overlay_files import OverlayFile

MONTHS = {"month": 1, "quarter": 3, "half": 6, "year": 12}


def number(least: float, most: float) -> st.SearchStrategy[float]:
    """Numbers with and without a point."""
    return st.floats(least, most, allow_nan=False) | st.integers(int(least) + (least % 1 > 0), int(most))


def some_of(**fields: st.SearchStrategy[Any]) -> st.SearchStrategy[dict[str, Any]]:
    """Some of the fields, at least one."""
    return st.fixed_dictionaries({}, optional=fields).filter(bool)


CONDITIONS = st.one_of(
    st.just(SignalOn()),
    st.builds(VolPercentile, percent=number(0, 100), above=st.booleans(), window=st.integers(2, 2520)),
    st.builds(PriceMean, window=st.integers(2, 2520), above=st.booleans()),
)
GATES = st.builds(
    Gate, condition=CONDITIONS, when_off=st.sampled_from(["run out", "close"]),
    when_on=st.sampled_from(["next roll", "at once"]),
)  # fmt: skip
RULES = st.one_of(
    st.builds(PercentOfSpot, number(1, 1000)),
    st.builds(PercentOfForward, number(1, 1000)),
    st.builds(Deviations, number(-10, 10)),
    st.builds(Delta, st.floats(0.001, 0.999)),
    st.builds(PremiumPercent, number(1, 90) | st.floats(0.001, 1)),
)
EARLY = st.builds(
    lambda rules, days: Early(**rules, **days),
    some_of(
        delta_below=st.floats(0.001, 0.999), value_above=number(2, 1000) | st.floats(1.01, 2),
        value_below=st.floats(0.001, 0.99),
    ),
    st.fixed_dictionaries({}, optional={"days_left": st.integers(0, 3650)}),
)  # fmt: skip


@st.composite
def strikes(draw: st.DrawFn, *, position: str, named: list[int]) -> Any:
    """A rule, with or without limits; ``named`` are the legs that it may depend on."""
    rules = RULES
    if named:
        rules |= st.builds(Mirrored, st.sampled_from(named))
        if position == "short":
            several = st.lists(st.sampled_from(named), min_size=1, unique=True).map(tuple)
            rules |= st.builds(Financed, number(1, 10) | st.floats(0.01, 1), legs=several)
    rule = draw(rules)
    if draw(st.booleans()):
        return rule
    low, high = sorted([draw(number(1, 1000)), draw(number(1, 1000))])
    limits = {
        "kept_until_moved": number(0, 1000), "ratchet": st.just(True), "not_below": st.just(low),
        "not_above": st.just(high), "strike_step": number(1, 10**6) | st.floats(1e-6, 1),
    }  # fmt: skip
    if named:
        limits["not_below_leg"] = st.sampled_from(named)
    return Adjusted(rule=rule, **draw(some_of(**limits)))


@st.composite
def legs(draw: st.DrawFn, earlier: dict[int, Leg]) -> Leg:
    """A leg that may name the ones that were made before it, by their numbers."""
    position = draw(st.sampled_from(["long", "short"]))
    ladder = draw(st.just(1) | st.integers(1, 12))
    # the legs that it names have all its tranches, or all have none
    of_them = draw(st.sampled_from([1, ladder]))
    named = [one for one, leg in earlier.items() if leg.ladder == of_them]
    strike = draw(strikes(position=position, named=named))
    roll = draw(st.sampled_from([*MONTHS, "days"]))
    # staggered tranches move on by a cycle at most, and no cycle moves by more than 252 days
    if roll == "days":
        every = draw(st.integers(1, 504))
        own: dict[str, Any] = {"every": every, "term_days": draw(st.none() | st.integers(every, 2520))}
        phases, most_shift, most_before = every, 252, min(every - 1, 60)
    else:
        months = MONTHS[roll]
        own = {
            "roll_day": draw(st.sampled_from(["third friday", "last trading day"])),
            "term_months": draw(st.none() | st.integers(months, 120)),
        }
        phases, most_shift, most_before = months, 252 - 21 * months, min(15 * months, 60)
    remembers = isinstance(strike, Adjusted) and strike.remembers
    financed = isinstance(strike.rule if isinstance(strike, Adjusted) else strike, Financed)
    return Leg(
        position=position,
        right=draw(st.sampled_from(["put", "call"])),
        strike=strike,
        roll=roll,
        phase=draw(st.integers(0, phases - 1)),
        shift_days=draw(st.integers(-252, most_shift)),
        close_before=draw(st.integers(0, most_before)),
        settlement=draw(st.sampled_from(["close", "open"])),
        # less than this is nothing once it is split into tranches
        ratio=draw(number(0, 100).filter(lambda ratio: ratio > 1e-300 or (ratio == 0 and not financed))),
        ladder=ladder,
        stagger=draw(st.booleans()),
        early=None if remembers else draw(st.none() | EARLY),
        gate=draw(st.none() | GATES),
        reference=draw(st.booleans()),
        **own,
    )


@st.composite
def smiles(draw: st.DrawFn) -> Any:
    if draw(st.booleans()):
        return draw(st.sampled_from([FLAT, MILD, INDEX, STEEP]))
    rho = draw(st.floats(-0.999, 0.999))
    return SSVISmile(
        rho=rho,
        eta=draw(st.floats(0, 1.99 / (1 + abs(rho)), exclude_min=True)),
        gamma=draw(st.floats(0, 0.5, exclude_min=True)),
    )


COSTS = st.builds(
    Costs,
    half_spread_vol=number(0, 100), half_spread_percent=number(0, 100), half_spread_min=number(0, 1e300),
    commission=number(0, 1e9), multiplier=st.floats(0, 1e9, exclude_min=True) | st.integers(1, 10**9),
    settlement_fee=number(0, 1e9), stock_bps=number(0, 1000), borrow_spread=number(0, 100),
)  # fmt: skip
SOURCES = st.one_of(
    st.none(),
    st.just(ImpliedSeries()),
    st.builds(
        lambda estimator, half_life, **rest: RealisedVolatility(
            estimator=estimator, half_life=half_life if estimator == "ewma" else None, **rest
        ),
        estimator=st.sampled_from([*ESTIMATORS]),
        half_life=st.integers(1, 2520),
        window=st.integers(2, 2520),
        markup=st.floats(0.01, 10),
        markup_points=number(-100, 100),
    ),
)
SHIFTS = {"put_shift": number(-100, 100), "call_shift": number(-100, 100)}
VOLATILITIES = st.builds(
    Volatility, source=SOURCES, smile=smiles(), quote=st.sampled_from(["at the money", "variance swap"]),
    term_structure=st.sampled_from(["flat", "mean reverting"]), kappa=number(1, 100) | st.floats(0.01, 1), **SHIFTS,
) | st.builds(Volatility, source=st.just(ImpliedSurface()), smile=smiles(), **SHIFTS)  # fmt: skip


@st.composite
def overlays(draw: st.DrawFn) -> Overlay:
    count = draw(st.integers(1, 4))
    # legs are made in any order: the first one may name the last
    made: dict[int, Leg] = {}
    for place in draw(st.permutations(range(1, count + 1))):
        made[place] = draw(legs(made))
    fields: dict[str, Any] = {
        "legs": tuple(made[place] for place in sorted(made)),
        "name": draw(st.text(max_size=40)),
        "account": draw(st.sampled_from(["resize", "cash"])),
        "costs": draw(COSTS),
        "decide_lag": draw(st.sampled_from([0, 1])),
        "portfolio": draw(st.none() | number(1, 1e15)),
        "gate": draw(st.none() | GATES),
    }
    try:
        return Overlay(crossed=draw(st.booleans()), **fields)
    except OverlayError:  # a call under a put
        return Overlay(crossed=True, **fields)


OVERLAY_FILES = st.builds(
    OverlayFile,
    overlay=overlays(),
    volatility=VOLATILITIES,
    counterparty=st.none()
    | st.builds(
        Counterparty,
        recovery=st.floats(0, 1) | st.integers(0, 1),
        default=st.just("worst put payoff") | st.lists(st.dates(), min_size=1, max_size=5, unique=True),
    ),
    sale=st.none() | st.builds(Sale, gain_percent=number(0, 100), tax_percent=number(0, 100), cost_bps=number(0, 1000)),
)
