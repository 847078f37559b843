"""A quoted surface on a market: interpolation, carry, strikes from deltas (C7).

Messages and replays are in ``test_surface_quotes.py``.

Rung: identity (points worked by hand, no look-ahead bit for bit), twin (plain loops over ragged grids
that share no code with the product), independent library (QuantLib's Black variance surface where its interpolation is
the same: at quoted strikes, between tenors; numpy's interpolation in one tenor).
"""

from __future__ import annotations

import datetime as dt
import math
from bisect import bisect_left
from collections import defaultdict
from itertools import pairwise
from typing import Any

import numpy as np
import numpy.typing as npt
import pandas as pd
import pytest
import QuantLib as ql
from scipy.optimize import brentq

from backtest import Market, Volatility
from backtest.volatility import ImpliedSurface, SurfaceQuotes

Array = npt.NDArray[np.float64]
Rows = list[tuple[Any, float, float, float]]  # date, days, strike as quoted, vol

SURFACE = Volatility(source=ImpliedSurface())
COLUMNS = ("percent_of_spot", "percent_of_forward", "delta")
DAYS = pd.bdate_range("2021-01-04", periods=4, name="date")


def quoted_market(rows: Rows, column: str, frame: pd.DataFrame | None = None, **constants: Any) -> Market:
    if frame is None:
        frame = pd.DataFrame({"close": 100.0}, index=DAYS)
    table = pd.DataFrame(rows, columns=["date", "days", column, "vol"])
    quotes = SurfaceQuotes.from_frame(table, frame.index.to_numpy())
    return Market.from_frame(frame, surface=quotes, **constants)


def vols(on: Market, day: list[int], tau_days: list[float], x: Any) -> Array:
    """Decimal vols; the last axis of ``x`` is the days."""
    tau = np.array(tau_days) / 365.0
    return np.sqrt(SURFACE.on(on).slice(np.array(day), tau).total_variance(np.array(x, dtype=float)) / tau)


# ---------------------------------------------------------------- by hand

# percents of forward whose logarithms are -.2, 0 and .1
LOW, MID, HIGH = 100 * math.exp(-0.2), 100.0, 100 * math.exp(0.1)
TWO_TENORS = [(DAYS[0], 30, LOW, 0.30), (DAYS[0], 30, MID, 0.20), (DAYS[0], 30, HIGH, 0.15), (DAYS[0], 90, MID, 0.24)]


@pytest.mark.parametrize(
    ("tau_days", "x", "expected"),
    [
        pytest.param(30, -0.2, 0.30, id="a quote"),
        pytest.param(30, -0.05, 0.225, id="a quarter of the way down"),
        pytest.param(30, 0.04, 0.18, id="towards the call"),
        pytest.param(30, -0.7, 0.30, id="low wing, flat"),
        pytest.param(30, 0.7, 0.15, id="high wing, flat"),
        pytest.param(10, -0.05, 0.225, id="before the first tenor, flat"),
        pytest.param(400, -0.2, 0.24, id="beyond the last, flat"),
        # total variances in vol^2 days: 1.2 and 5.184, half way 3.192; over 60 days
        pytest.param(60, 0.0, math.sqrt(3.192 / 60), id="between tenors"),
        # 2.7 and 5.184; a quarter of the way
        pytest.param(45, -0.2, math.sqrt((2.7 + 2.484 / 4) / 45), id="between tenors, below"),
    ],
)
def test_by_hand(tau_days: float, x: float, expected: float) -> None:
    on = quoted_market(TWO_TENORS, "percent_of_forward")
    assert vols(on, [0], [tau_days], [x])[0] == pytest.approx(expected, rel=1e-13)


def test_percent_of_spot_is_placed_by_the_forward_of_its_own_tenor() -> None:
    # rate 5% and yield 1%, a year: F = 100 x 1.05/1.01. A quote at 100% of spot lies at ln(1.01/1.05)
    rows = [(DAYS[0], 365, 90, 0.30), (DAYS[0], 365, 100, 0.20)]
    on = quoted_market(rows, "percent_of_spot", rate=0.05, dividend_yield=0.01)
    offset = math.log(1.01 / 1.05)
    middle = (math.log(0.9) + offset + offset) / 2
    np.testing.assert_allclose(
        vols(on, [0], [365], [[offset], [math.log(0.9) + offset], [middle]])[:, 0], [0.2, 0.3, 0.25], rtol=1e-13
    )


def test_a_delta_is_placed_at_the_strike_that_has_it() -> None:
    """C5: spot deltas at the quote's own vol; a 25-delta put and a 25-delta call of a year, dividends in them."""
    rows = [(DAYS[0], 365, -0.25, 0.26), (DAYS[0], 365, 0.50, 0.20), (DAYS[0], 365, 0.25, 0.18)]
    on = quoted_market(rows, "delta", rate=0.04, dividend_yield=0.02)
    growth = math.log(1.02)
    for _, _, delta, vol in rows:
        x = placed_by_delta(delta, vol, 1.0, growth)
        assert vols(on, [0], [365], [x])[0] == pytest.approx(vol, rel=1e-12)
        assert abs(x) > 0.01


def placed_by_delta(delta: float, vol: float, tau: float, carry: float) -> float:
    """``ln(K/F)`` of a delta, looked for."""
    sign = math.copysign(1.0, delta)

    def missed(x: float) -> float:
        d1 = -x / (vol * math.sqrt(tau)) + vol * math.sqrt(tau) / 2
        return sign * math.exp(-carry * tau) * 0.5 * math.erfc(-sign * d1 / math.sqrt(2)) - delta

    return float(brentq(missed, -9.0, 9.0, xtol=1e-16, rtol=1e-15))


# ---------------------------------------------------------------- plain loops


def twin_vol(rows: Rows, column: str, market: Market, day: int, tau: float, x: float) -> float:
    """C7 in plain loops: the last surface of at most five days, each tenor by its neighbours, variance in time."""
    dates = [d.item() for d in market.dates]
    by_day: dict[dt.date, dict[float, list[tuple[float, float]]]] = defaultdict(lambda: defaultdict(list))
    for stamp, days, value, vol in rows:
        position = dates.index(stamp.date())
        r, q, years = float(market.rate[position]), float(market.dividend_yield[position]), days / 365.0
        if column == "percent_of_spot":
            at = math.log(value / 100.0) - (r - q) * years
        elif column == "percent_of_forward":
            at = math.log(value / 100.0)
        else:
            at = placed_by_delta(value, vol, years, q)
        by_day[stamp.date()][years].append((at, vol))
    seen = max((d for d in by_day if d <= dates[day]), default=None)
    if seen is None or (dates[day] - seen).days > 5:
        return math.nan
    terms = sorted((years, sorted(points)) for years, points in by_day[seen].items())

    def in_tenor(points: list[tuple[float, float]]) -> float:
        if x <= points[0][0]:
            return points[0][1]
        for (x0, v0), (x1, v1) in pairwise(points):
            if x <= x1:
                return v0 + (v1 - v0) * (x - x0) / (x1 - x0)
        return points[-1][1]

    place = bisect_left([years for years, _ in terms], tau)
    if place == 0 or place == len(terms):
        return in_tenor(terms[min(place, len(terms) - 1)][1])
    (t0, near), (t1, far) = terms[place - 1], terms[place]
    w0, w1 = in_tenor(near) ** 2 * t0, in_tenor(far) ** 2 * t1
    return math.sqrt((w0 + (w1 - w0) * (tau - t0) / (t1 - t0)) / tau)


def ragged(column: str, seed: int, days: int = 30) -> tuple[Rows, Market]:
    """Tenors and strikes of their own on every day, some days without quotes, a gap of more than five days."""
    rng = np.random.default_rng(seed)
    index = pd.bdate_range("2021-01-04", periods=days, name="date")
    rows: Rows = []
    for position, stamp in enumerate(index):
        if rng.random() < 0.3 or 12 <= position <= 18 or position < 2:
            continue
        for tenor in rng.choice([7, 14, 30, 61, 91, 182, 365, 700], rng.integers(1, 6), replace=False).tolist():
            count = int(rng.integers(1, 9))
            if column == "delta":
                values = np.unique(rng.uniform(0.03, 0.9, count).round(3)) * rng.choice([-1.0, 1.0])
            else:
                values = np.unique(rng.uniform(60, 140, count).round(2))
            rows += [(stamp, tenor, float(v), float(rng.uniform(0.1, 0.6))) for v in values]
    order = rng.permutation(len(rows)).tolist()
    frame = pd.DataFrame(
        {"close": 100 * np.exp(np.cumsum(rng.normal(0, 0.01, days))), "rate": rng.uniform(-0.01, 0.06, days)},
        index=index,
    )
    frame["dividend"] = np.where(np.arange(days) % 7 == 3, 0.5, 0.0)
    return [rows[i] for i in order], quoted_market([rows[i] for i in order], column, frame)


@pytest.mark.parametrize("seed", [1, 2, 3])
@pytest.mark.parametrize("column", COLUMNS)
def test_plain_loops_on_ragged_grids(column: str, seed: int) -> None:
    rows, on = ragged(column, seed)
    rng = np.random.default_rng(seed)
    tau_days = rng.choice([3.0, 30.0, 45.5, 91.0, 200.0, 365.0, 1000.0], len(on))
    x = rng.normal(0.0, 0.2, (6, len(on)))
    found = vols(on, list(range(len(on))), tau_days.tolist(), x)
    expected = [
        [twin_vol(rows, column, on, day, tau_days[day] / 365.0, float(x[leg, day])) for day in range(len(on))]
        for leg in range(len(x))
    ]
    np.testing.assert_allclose(found, expected, rtol=1e-12)
    assert 0 < np.isnan(found[0]).sum() < len(on) / 2
    # a slice of days, and one strike for all of them
    bound, tau = SURFACE.on(on), tau_days / 365.0
    one = np.array([[0.05]])
    np.testing.assert_array_equal(
        bound.slice(slice(4, 9), tau[4:9]).total_variance(one),
        bound.slice(np.arange(4, 9), tau[4:9]).total_variance(np.full((1, 5), 0.05)),
    )


@pytest.mark.parametrize("count", [1, 2, 32, 33, 40, 255, 257, 2100])
def test_one_tenor_of_many_strikes_against_numpy(count: int) -> None:
    """However many strikes there are: few are counted, many are counted in eights and halved."""
    rng = np.random.default_rng(count)
    x = (np.arange(count) + rng.uniform(0.0, 0.5, count)) / count - 0.5
    quoted = rng.uniform(0.1, 0.4, count)
    rows = [(DAYS[0], 30, 100 * math.exp(a), v) for a, v in zip(x, quoted)]
    rows += [(DAYS[1], 30, 100.0, 0.2)]  # a day of one strike beside it
    on = quoted_market(rows, "percent_of_forward")
    asked = np.concatenate([rng.uniform(-0.7, 0.7, 300), x])
    found = vols(on, [0, 1], [30, 30], np.stack([asked, asked], axis=-1))
    np.testing.assert_allclose(found[:, 0], np.interp(asked, x, quoted), rtol=1e-11)
    np.testing.assert_allclose(found[:, 1], 0.2, rtol=1e-14)


# ---------------------------------------------------------------- QuantLib


def test_quantlib_between_tenors_at_quoted_strikes() -> None:
    """Its surface is linear in time in total variance too, at each strike; without rates a strike is an ``x``."""
    strikes, tenors = [70.0, 80.0, 90.0, 95.0, 100.0, 105.0, 115.0], [14, 30, 91, 182, 365]
    grid = np.random.default_rng(4).uniform(0.15, 0.25, (len(strikes), len(tenors)))
    grid *= np.linspace(1.0, 1.3, len(tenors))[::-1] * np.linspace(1.4, 0.9, len(strikes))[:, np.newaxis]
    today = ql.Date(4, 1, 2021)
    ql.Settings.instance().evaluationDate = today
    matrix = ql.Matrix(grid.tolist())
    library = ql.BlackVarianceSurface(
        today, ql.TARGET(), [today + days for days in tenors], strikes, matrix, ql.Actual365Fixed()
    )
    library.enableExtrapolation()
    rows = [(DAYS[0], t, k, grid[i, j]) for i, k in enumerate(strikes) for j, t in enumerate(tenors)]
    on = quoted_market(rows, "percent_of_spot")
    asked = [1.0, 7.0, 14.0, 20.0, 30.0, 33.3, 91.0, 100.0, 300.0, 365.0, 1000.0]
    x = np.log(np.array(strikes) / 100)[:, np.newaxis] * np.ones(len(asked))
    found = vols(on, [0] * len(asked), asked, x)
    expected = [[library.blackVol(days / 365.0, k, True) for days in asked] for k in strikes]
    np.testing.assert_allclose(found, expected, rtol=1e-10)


# ---------------------------------------------------------------- days without quotes, days to come


def test_carried_for_five_calendar_days() -> None:
    """Quotes of a Wednesday are seen on Monday, five days on, at their own x and tenor, and on Tuesday no more."""
    index = pd.bdate_range("2021-01-04", periods=12, name="date")
    rows = [(index[2], 30, 90.0, 0.30), (index[2], 30, 110.0, 0.20), (index[9], 30, 100.0, 0.4)]
    frame = pd.DataFrame({"close": 100.0, "rate": 0.05}, index=index)
    frame.loc[index[3:], ["close", "rate"]] = [50.0, 0.10]
    on = quoted_market(rows, "percent_of_spot", frame)
    bound = SURFACE.on(on)
    assert (bound.first_day, bound.missing(2, 5), bound.missing(2, 11), bound.missing(9, 11)) == (2, None, 6, None)
    assert (str(on.dates[5]), str(on.dates[6])) == ("2021-01-11", "2021-01-12")
    # neither the price nor the rate of the days after moves x: with the Wednesday's 5% at 90% of spot
    x = [math.log(0.9) - math.log(1.05) * 30 / 365] * 4
    np.testing.assert_allclose(vols(on, [2, 3, 4, 5], [30] * 4, x), 0.3, rtol=1e-13)
    assert np.isnan(vols(on, [1, 6, 8], [30] * 3, [0.0] * 3)).all()


def test_a_later_surface_takes_the_place_of_a_carried_one_whole() -> None:
    # a single tenor of the second day: nothing is left of the two of the first
    on = quoted_market([*TWO_TENORS, (DAYS[1], 60, 100.0, 0.5)], "percent_of_forward")
    np.testing.assert_array_equal(vols(on, [1, 2], [30, 90], [-0.2, 0.0]), [0.5, 0.5])


@pytest.mark.parametrize("column", COLUMNS)
def test_no_look_ahead(column: str) -> None:
    rows, on = ragged(column, 5)
    cut = on.dates[10].item()
    changed = [
        (d, days + (9 if d.date() > cut else 0), value, vol * (1.3 if d.date() > cut else 1.0))
        for d, days, value, vol in rows
        if d.date() <= cut or days > 20
    ]
    frame = pd.DataFrame({"close": on.spot * 1.0, "rate": np.expm1(on.rate), "dividend": on.dividend}, index=on.dates)
    frame.iloc[11:] *= 1.1
    other = quoted_market(changed, column, frame)
    day, tau = list(range(len(on))), [60.0] * len(on)
    x = np.linspace(-0.3, 0.2, 5)[:, np.newaxis] * np.ones(len(on))
    a, b = vols(on, day, tau, x), vols(other, day, tau, x)
    np.testing.assert_array_equal(a[:, :11], b[:, :11])
    assert not np.array_equal(a[:, 11:], b[:, 11:])


def test_days_without_a_rate() -> None:
    """Percents of spot want a forward, so the quotes of such days are nobody's; percents of forward need none."""
    frame = pd.DataFrame({"close": 100.0, "rate": [np.nan, 0.03, 0.03, 0.03]}, index=DAYS)
    rows: Rows = [(DAYS[0], 30, 100.0, 0.2), (DAYS[2], 30, 100.0, 0.3)]
    assert SURFACE.on(quoted_market(rows, "percent_of_spot", frame)).first_day == 2
    assert SURFACE.on(quoted_market(rows, "percent_of_forward", frame)).first_day == 0
    nothing = SURFACE.on(quoted_market(rows[:1], "percent_of_spot", frame))
    assert (nothing.first_day, nothing.missing(0, 3)) == (4, 0)
