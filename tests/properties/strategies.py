"""Random markets and overlays for the properties, and what of a replay is compared.

A scenario is an invented market of 300 to 700 trading days (days missing, third Fridays closed, sometimes a
hole of weeks; changing rates, dividends, none to three vol columns), one overlay of one to four legs, a
volatility assumption and a window. Hypothesis draws the structure and a seed, and numpy the paths from the seed.
"""

from __future__ import annotations

from dataclasses import dataclass, field, replace
from typing import Any

import numpy as np
import numpy.typing as npt
import pandas as pd
from hypothesis import settings
from hypothesis import strategies as st

from backtest import (
    SMILE_LADDER,
    Costs,
    Leg,
    Market,
    Overlay,
    PercentOfForward,
    PercentOfSpot,
    RealisedVolatility,
    Replay,
    SSVISmile,
    Volatility,
    replay,
)
from backtest.cycles import ROLL_MONTHS

Array = npt.NDArray[np.float64]

# derandomize: the examples are a function of the test alone, so that every run repeats the last one
RICH = settings(max_examples=75, deadline=None, derandomize=True, database=None)
FEWER = settings(RICH, max_examples=40)

TENORS = [("vol",), ("vol_30", "vol_93", "vol_180"), ("vol_9", "vol_365"), ()]


@dataclass(frozen=True, kw_only=True)
class History:
    """A frame as ``Market.from_frame`` takes it, the constants beside it, and how it was drawn."""

    frame: pd.DataFrame = field(repr=False)
    drawn: dict[str, Any]
    rate: float | None = None
    dividend_yield: float | None = None

    def market(self) -> Market:
        return Market.from_frame(self.frame, rate=self.rate, dividend_yield=self.dividend_yield)


@dataclass(frozen=True, kw_only=True)
class Scenario:
    """One replay."""

    history: History
    overlay: Overlay
    volatility: Volatility
    window: dict[str, Any]

    def run(self, **changes: Any) -> Replay:
        """Replay with some of history, overlay, volatility and window changed."""
        case = replace(self, **changes)
        return replay(case.history.market(), case.overlay, volatility=case.volatility, **case.window)


# ---------------------------------------------------------------- markets


@st.composite
def histories(
    draw: st.DrawFn,
    *,
    least_days: int = 300,
    tenors: tuple[tuple[str, ...], ...] = tuple(TENORS),
    constant_rate: bool = False,
    payouts: tuple[str, ...] = ("none", "quarterly", "often", "yield"),
) -> History:
    drawn: dict[str, Any] = {
        "seed": draw(st.integers(0, 2**32 - 1)),
        "first": draw(st.dates(pd.Timestamp("1990-01-01").date(), pd.Timestamp("2015-12-31").date())),
        "days": draw(st.integers(least_days, 700)),
        "missing": draw(st.sampled_from([0.0, 0.03, 0.1])),
        "closed_fridays": draw(st.sampled_from([0.0, 0.4])),
        "hole": draw(st.sampled_from([0, 9, 45])),  # weekdays; 45 swallows two third Fridays
        "price": draw(st.sampled_from([4.0, 87.5, 3000.0])),
        "payout": draw(st.sampled_from(payouts)),
        "vol_columns": draw(st.sampled_from(tenors)),
    }
    rng = np.random.default_rng(drawn["seed"])
    frame = pd.DataFrame(index=_trading_days(rng, drawn))
    days = len(frame)
    vol = np.clip(0.2 * np.exp(_mean_reverting(rng, days, 0.97, 0.1)), 0.06, 1.2)
    returns = 0.0002 + vol / np.sqrt(252.0) * rng.standard_t(4, days) / np.sqrt(2.0)
    frame["close"] = drawn["price"] * np.exp(np.cumsum(returns))
    for number, name in enumerate(drawn["vol_columns"]):
        frame[name] = np.clip(vol * np.exp(-0.1 * number + 0.05 * rng.standard_normal(days)), 0.05, 1.5)
    rate = None
    if constant_rate:
        rate = draw(st.sampled_from([-0.005, 0.0, 0.03, 0.11]))
    else:
        frame["rate"] = np.clip(0.03 + 0.02 * _mean_reverting(rng, days, 0.99, 0.2), -0.02, 0.15)
    dividend_yield = None
    if drawn["payout"] == "yield":
        dividend_yield = draw(st.sampled_from([0.015, 0.06]))
    elif drawn["payout"] != "none":
        paid = rng.random(days) < {"quarterly": 1 / 63, "often": 1 / 10}[drawn["payout"]]
        share = np.where(rng.random(days) < 0.1, 0.08, rng.uniform(0.001, 0.01, days))  # now and then a special one
        frame["dividend"] = np.where(paid, share * frame["close"].to_numpy(), 0.0)
    return History(frame=frame, drawn=drawn, rate=rate, dividend_yield=dividend_yield)


def _trading_days(rng: np.random.Generator, drawn: dict[str, Any]) -> pd.DatetimeIndex:
    weekdays = pd.bdate_range(drawn["first"], periods=int(1.2 * drawn["days"]) + 60, name="date")
    friday = np.is_busday(weekdays.to_numpy().astype("datetime64[D]"), weekmask="Fri")
    third_friday = friday & (weekdays.day >= 15) & (weekdays.day <= 21)
    keep = rng.random(len(weekdays)) >= drawn["missing"]
    keep &= ~(third_friday & (rng.random(len(weekdays)) < drawn["closed_fridays"]))
    hole = rng.integers(1, drawn["days"])
    keep[hole : hole + drawn["hole"]] = False
    return weekdays[keep][: drawn["days"]]


def _mean_reverting(rng: np.random.Generator, days: int, pull: float, size: float) -> Array:
    path = np.zeros(days)
    for day, shock in enumerate(size * rng.standard_normal(days)):
        path[day] = pull * path[day - 1] + shock
    return path


# ---------------------------------------------------------------- overlays


def strike_rules() -> st.SearchStrategy[PercentOfSpot | PercentOfForward]:
    percent = st.floats(75.0, 125.0).map(lambda p: round(p, 2))
    return st.one_of(percent.map(PercentOfSpot), percent.map(PercentOfForward))


@st.composite
def legs(draw: st.DrawFn, *, ratio: float | None = None) -> Leg:
    roll = draw(st.sampled_from(["month", "month", "quarter", "half", "year"]))
    months = ROLL_MONTHS[roll]
    return Leg(
        position=draw(st.sampled_from(["long", "short"])),
        right=draw(st.sampled_from(["put", "call"])),
        strike=draw(strike_rules()),
        roll=roll,
        term_months=months + draw(st.sampled_from([0, 0, 1, 3, 12])),
        phase=draw(st.integers(0, months - 1)),
        shift_days=draw(st.sampled_from([0, 0, -4, 3])),
        ratio=draw(st.sampled_from([1.0, 0.25, 0.5, 0.7, 1.3])) if ratio is None else ratio,
    )


def costs() -> st.SearchStrategy[Costs]:
    return st.builds(
        Costs,
        half_spread_vol=st.sampled_from([0.0, 0.5, 2.0]),
        half_spread_percent=st.sampled_from([0.0, 5.0]),
        half_spread_min=st.sampled_from([0.0, 0.05]),
        commission=st.sampled_from([0.0, 1.5]),
        multiplier=st.sampled_from([100.0, 10.0]),
        settlement_fee=st.sampled_from([0.0, 2.0]),
        stock_bps=st.sampled_from([0.0, 7.0]),
    )


def overlays(*, ratio: float | None = None) -> st.SearchStrategy[Overlay]:
    return st.builds(
        Overlay,
        legs=st.lists(legs(ratio=ratio), min_size=1, max_size=4).map(tuple),
        account=st.sampled_from(["resize", "cash"]),
        costs=costs(),
        crossed=st.just(True),
    )


def volatilities(*, shifts: bool = True) -> st.SearchStrategy[Volatility]:
    shift = st.sampled_from([0.0, 0.0, -1.0, 2.5]) if shifts else st.just(0.0)
    return st.builds(
        Volatility,
        source=st.sampled_from([None, None, None, RealisedVolatility(window=21, markup=1.2)]),
        smile=st.sampled_from([*SMILE_LADDER.values(), SSVISmile(rho=0.2, eta=0.9, gamma=0.3)]),
        quote=st.sampled_from(["at the money", "variance swap"]),
        put_shift=shift,
        call_shift=shift,
    )


@st.composite
def windows(draw: st.DrawFn, history: History) -> dict[str, Any]:
    """None, an early end, or an inception on any day from the first full realised window on."""
    kind = draw(st.sampled_from(["whole", "whole", "ended", "begun on a day"]))
    days = history.frame.index
    if kind == "ended":
        return {"end": days[int(len(days) * 0.9)].date()}
    if kind == "begun on a day":
        return {"inception": days[draw(st.integers(63, 150))].date()}
    return {}


@st.composite
def scenarios(draw: st.DrawFn, *, ratio: float | None = None) -> Scenario:
    overlay = draw(overlays(ratio=ratio))
    # a year's roll must come around once after a realised vol of 63 days has begun
    history = draw(histories(least_days=420 if overlay.anchor.roll == "year" else 300))
    return Scenario(history=history, overlay=overlay, volatility=draw(volatilities()), window=draw(windows(history)))


# ---------------------------------------------------------------- what is compared


def daily_outputs(found: Replay) -> dict[str, Array]:
    """Every daily path of a replay, the last axis being the day."""
    paths = {
        name: np.asarray(getattr(found, name))
        for name in (
            "wealth", "hold", "delta", "units", "shares", "cash", "option_value", "rate_return",
            "stock_profit", "interest", "trading_cost",
        )
    }  # fmt: skip
    return paths | found.greeks.package()


def leg_outputs(found: Replay) -> list[dict[str, Array]]:
    """The daily paths of each leg."""
    return [
        {
            "strike": leg.daily_strike,
            "mark": leg.daily_mark,
            "leg delta": leg.daily_delta,
            "leg value": found.leg_value[row],
            "leg dollar delta": found.leg_dollar_delta[row],
            "leg profit": found.leg_profit[row],
        }
        for row, leg in enumerate(found.legs)
    ]


def assert_same_bits(actual: npt.ArrayLike, expected: npt.ArrayLike, name: str) -> None:
    """Equal to the last bit: also the sign of a zero, and where a NaN is."""
    found, wanted = (np.ascontiguousarray(values, dtype=np.float64) for values in (actual, expected))
    assert found.shape == wanted.shape, name
    different = found.view(np.int64) != wanted.view(np.int64)
    assert not different.any(), f"{name} differs first at {np.argwhere(different)[0]}: {found[different][0]!r}"


def solvent_days(*replays: Replay) -> slice:
    """The days before wealth first falls under a tenth of its start in any of the replays.

    Near ruin wealth is a small difference of large positions, and rounding shows.
    """
    low = np.logical_or.reduce([~(found.wealth > 0.1) for found in replays])
    return slice(0, int(np.argmax(low)) if low.any() else len(low))
