"""Static arbitrage in a quoted surface, day by day.

Rung: identity (violations made by hand, with their depth worked out; a smile free of arbitrage), twin (plain loops over
ragged grids, prices by the standard library) and behaviour.
"""

from __future__ import annotations

import math
from itertools import pairwise
from typing import Any

import numpy as np
import pandas as pd
import pytest

from backtest import Market
from backtest.errors import MarketError
from backtest.volatility import INDEX, STEEP, SurfaceQuotes
from backtest.volatility.arbitrage import StaticArbitrage, static_arbitrage

DAYS = pd.bdate_range("2021-01-04", periods=6, name="date")
Rows = list[tuple[Any, float, float, float]]
#: Percents of forward whose logarithms are -.1, 0 and .1.
LOW, MID, HIGH = 100 * math.exp(-0.1), 100.0, 100 * math.exp(0.1)


def market(rows: Rows, column: str = "percent_of_forward", **columns: Any) -> Market:
    table = pd.DataFrame(rows, columns=["date", "days", column, "vol"])
    surface = SurfaceQuotes.from_frame(table, DAYS.to_numpy())
    return Market.from_frame(pd.DataFrame({"close": 100.0, **columns}, index=DAYS), surface=surface)


def report(rows: Rows) -> StaticArbitrage:
    return static_arbitrage(market(rows))


def call(strike: float, vol: float, days: float) -> float:
    """Undiscounted, ``F = 1``."""
    stdev = vol * math.sqrt(days / 365.0)
    d1 = -math.log(strike) / stdev + stdev / 2.0
    return 0.5 * math.erfc(-d1 / math.sqrt(2.0)) - strike * 0.5 * math.erfc(-(d1 - stdev) / math.sqrt(2.0))


def counts(found: StaticArbitrage, name: str) -> tuple[list[int], list[int]]:
    violations = getattr(found, name)
    return violations.compared.tolist(), violations.failed.tolist()


# ---------------------------------------------------------------- by hand


def test_total_variance_that_falls() -> None:
    # at the money 30% for 30 days is 2.7, 20% for 60 days 2.4, in squared vol times days: 60 days want 21.2%.
    # A day later all is well; nothing is quoted on the others
    rows = [(DAYS[0], 30, MID, 0.30), (DAYS[0], 60, MID, 0.20), (DAYS[2], 30, MID, 0.28), (DAYS[2], 60, MID, 0.20)]
    found = report(rows)
    assert found.dates.tolist() == [DAYS[0].date(), DAYS[2].date()]
    assert found.quotes.tolist() == [2, 2]
    # 28% for 30 days is 2.352, under 2.4
    assert counts(found, "calendar") == ([1, 1], [1, 0])
    assert found.calendar.depth.tolist() == pytest.approx([0.30 / math.sqrt(2.0) - 0.20, 0.0], rel=1e-12)
    assert (found.calendar.days, found.calendar.worst) == (1, 0)
    assert found.worst_date("calendar") == np.datetime64("2021-01-04")
    assert counts(found, "crossing") == ([0, 0], [0, 0])
    assert (found.crossing.worst, found.worst_date("butterfly")) == (None, None)


def test_tenors_are_compared_where_both_are_quoted() -> None:
    """At -.1 and 0 of the short one and at .05 of the long one; 0 is in both and counts once, .1 lies outside."""
    middle = 100 * math.exp(0.05)
    rows = [(DAYS[1], 30, k, v) for k, v in ((LOW, 0.4), (MID, 0.2), (HIGH, 0.3))]
    rows += [(DAYS[1], 120, k, 0.19) for k in (100 * math.exp(-0.2), MID, middle)]
    found = report(rows)
    # half of each short vol: 20%, 10% and, between 0 and .1, 12.5%
    assert counts(found, "calendar") == ([3], [1])
    assert found.calendar.depth[0] == pytest.approx(0.01, rel=1e-12)


def test_a_call_that_costs_more_at_a_higher_strike() -> None:
    # 30 days: 20% at 110.5% of the forward, 35% at 115% of it
    rows = [(DAYS[0], 30, MID, 0.2), (DAYS[0], 30, HIGH, 0.2), (DAYS[0], 30, 115.0, 0.35)]
    found = report(rows)
    assert counts(found, "crossing") == ([2], [1])
    expected = call(1.15, 0.35, 30) - call(math.exp(0.1), 0.2, 30)
    assert found.crossing.depth[0] == pytest.approx(expected, rel=1e-10)
    assert expected > 0.003


def test_a_put_that_costs_more_at_a_lower_strike() -> None:
    rows = [(DAYS[0], 30, 85.0, 0.45), (DAYS[0], 30, LOW, 0.2), (DAYS[0], 30, MID, 0.2)]
    found = report(rows)
    assert counts(found, "crossing") == ([2], [1])
    low, high = (call(k, v, 30) - 1.0 + k for k, v in ((0.85, 0.45), (math.exp(-0.1), 0.2)))
    assert found.crossing.depth[0] == pytest.approx(low - high, rel=1e-10)
    assert low - high > 0.0049


def test_a_price_that_is_not_convex() -> None:
    """A bump of the middle vol: no crossing yet, but two of the wings cost less than two of the body."""
    rows = [(DAYS[3], 91, 90.0, 0.20), (DAYS[3], 91, 95.0, 0.26), (DAYS[3], 91, 105.0, 0.20), (DAYS[3], 91, 110.0, 0.2)]
    found = report(rows)
    assert counts(found, "crossing") == ([3], [0])
    assert counts(found, "butterfly") == ([2], [1])
    c90, c95, c105 = (call(k, v, 91) for k, v in ((0.90, 0.20), (0.95, 0.26), (1.05, 0.20)))
    # 95 is a third of the way from 90 to 105
    assert found.butterfly.depth[0] == pytest.approx(c95 - (2.0 * c90 + c105) / 3.0, rel=1e-10)
    assert found.worst_date("butterfly") == np.datetime64("2021-01-07")


def test_the_worst_day() -> None:
    rows: Rows = []
    for day, vol in ((DAYS[0], 0.21), (DAYS[2], 0.30), (DAYS[4], 0.22)):
        rows += [(day, 60, 95.0, 0.20), (day, 60, 100.0, vol), (day, 60, 105.0, 0.20), (day, 60, 110.0, 0.20)]
    found = report(rows).butterfly
    assert found.failed.tolist() == [0, 1, 0]
    # ten points more on the last day, and both fail: 32% is further off than 30%
    rows = [(d, t, k, v + 0.1 if (d == DAYS[4] and k == 100.0) else v) for d, t, k, v in rows]
    worse = static_arbitrage(market(rows))
    assert worse.butterfly.days == 2
    assert worse.worst_date("butterfly") == np.datetime64("2021-01-08")
    assert worse.butterfly.depth[2] > worse.butterfly.depth[1] > 0.0


# ---------------------------------------------------------------- a surface without any


@pytest.mark.parametrize("smile", [INDEX, STEEP], ids=["index", "steep"])
def test_a_smile_free_of_arbitrage(smile: Any) -> None:
    """SSVI of the ladder, on a fine grid in percents of forward: nothing is found among thousands of places."""
    percents = np.arange(50.0, 151.0, 2.5)
    rows: Rows = []
    for day, vol in zip(DAYS, (0.08, 0.12, 0.2, 0.3, 0.5, 0.8)):
        for tenor in (7, 30, 91, 182, 365):
            w = smile.slice(np.array(vol**2 * tenor / 365)).total_variance(np.log(percents / 100))
            rows += [(day, tenor, p, s) for p, s in zip(percents.tolist(), np.sqrt(w * 365 / tenor).tolist())]
    found = report(rows)
    assert [v.days for v in (found.calendar, found.crossing, found.butterfly)] == [0, 0, 0]
    assert (found.calendar.compared == 4 * 41).all()
    assert (found.crossing.compared == 5 * 40).all()
    assert (found.butterfly.compared == 5 * 39).all()
    assert (found.quotes == 5 * 41).all()


# ---------------------------------------------------------------- plain loops


def by_loops(rows: Rows, carry: float) -> dict[Any, dict[str, tuple[int, int, float]]]:
    """Places, failures and depth of each day; percents of spot with ``ln F/S = carry tau``."""
    found: dict[Any, dict[str, tuple[int, int, float]]] = {}
    for day in sorted({row[0] for row in rows}):
        tenors: dict[float, list[tuple[float, float]]] = {}
        for _, days, value, vol in sorted(r for r in rows if r[0] == day):
            tenors.setdefault(days, []).append((math.log(value / 100) - carry * days / 365, vol))
        gaps: dict[str, list[float]] = {"calendar": [], "crossing": [], "butterfly": []}
        terms = sorted(tenors)
        for days in terms:
            points = [(math.exp(x), call(math.exp(x), vol, days)) for x, vol in tenors[days]]
            for (k0, c0), (k1, c1) in pairwise(points):
                gaps["crossing"].append(max(c1 - c0, (c0 - 1 + k0) - (c1 - 1 + k1)))
            for (k0, c0), (k1, c1), (k2, c2) in zip(points, points[1:], points[2:]):
                gaps["butterfly"].append(c1 - (c0 * (k2 - k1) + c2 * (k1 - k0)) / (k2 - k0))
        for near, far in pairwise(terms):
            (near_x, near_vol), (far_x, far_vol) = (list(zip(*tenors[t])) for t in (near, far))
            low, high = max(near_x[0], far_x[0]), min(near_x[-1], far_x[-1])
            for x in sorted({x for x in (*near_x, *far_x) if low <= x <= high}):
                a, b = float(np.interp(x, near_x, near_vol)), float(np.interp(x, far_x, far_vol))
                gaps["calendar"].append(math.sqrt(a * a * near / far) - b)
        found[day] = {
            name: (len(g), sum(v > 1e-12 for v in g), max([0.0, *(v for v in g if v > 1e-12)]))
            for name, g in gaps.items()
        }
    return found


@pytest.mark.parametrize("seed", [1, 2, 3, 4])
def test_plain_loops_on_ragged_grids(seed: int) -> None:
    rng = np.random.default_rng(seed)
    rows: Rows = []
    for day in DAYS[[0, 1, 3, 5]]:
        for tenor in rng.choice([7, 14, 30, 61, 91, 182], rng.integers(1, 6), replace=False).tolist():
            percents = np.unique(rng.uniform(70, 130, rng.integers(1, 8)).round(1)).tolist()
            rows += [(day, tenor, p, 0.22 - 0.2 * math.log(p / 100) + 0.05 * rng.random()) for p in percents]
    order = rng.permutation(len(rows)).tolist()
    found = static_arbitrage(market([rows[i] for i in order], "percent_of_spot", rate=math.exp(0.05) - 1))
    expected = by_loops(rows, 0.05)
    assert found.dates.tolist() == [day.date() for day in expected]
    for name in ("calendar", "crossing", "butterfly"):
        violations = getattr(found, name)
        wanted = [expected[day][name] for day in expected]
        assert violations.compared.tolist() == [places for places, _, _ in wanted]
        assert violations.failed.tolist() == [failures for _, failures, _ in wanted]
        np.testing.assert_allclose(violations.depth, [depth for _, _, depth in wanted], rtol=1e-9, atol=1e-15)
    assert sum(expected[day]["butterfly"][1] for day in expected) > 0


def test_without_a_surface() -> None:
    with pytest.raises(MarketError, match=r"^the history has no quoted surface: load one$"):
        static_arbitrage(Market.from_frame(pd.DataFrame({"close": 100.0}, index=DAYS)))
