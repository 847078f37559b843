"""Figures of a batch: those of each overlay replayed by itself, and sums worked out plainly.

Rung: twin (``replay``, ``performance``, ``mix_wealth`` and ``roll_costs`` of one overlay at a time; plain formulas on
its daily series); hand-worked (spans).
"""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest

from backtest import Leg, Market, Overlay, PercentOfSpot, Volatility, replay
from backtest.analytics import performance, roll_costs
from backtest.analytics.block_length import optimal_block_length
from backtest.analytics.comparisons import mix_wealth
from backtest.analytics.headline import HEADLINE
from backtest.analytics.reality_check import Draws, check_batch, p_values
from backtest.engine.result import Replay
from data_loaders.store import read_history
from studies import runner
from studies.batches import BLOCK_COLUMNS, FIGURES, SPAN, columns_of, common_span, replay_batch
from studies.expansion import Expansion, Point, points
from studies.runner import Rows, StudyPlan, market_of, plan_study, run_plan
from studies.study import Study, parse_study

from .small_studies import LEGS, axis, store_history

#: Legs with other first days, accounts, anchors, smiles, costs and a window: 3 x 2 x 3 x 2 x 2 x 2 x 2 overlays.
AXES = "".join(
    [
        axis("put", "leg.1.strike", "[{percent_of_spot = 90}, {percent_of_forward = 95}, {percent_of_spot = 60}]"),
        axis("call roll", "leg.2.roll", '["month", "half"]'),
        axis("call ratio", "leg.2.ratio", "[0, 0.5, 1]"),
        axis("account", "account", '["resize", "cash"]'),
        axis("smile", "volatility.smile", '["flat", "index"]'),
        axis("spread", "costs.half_spread_percent", "[0, 5]"),
        axis("from", "window.from", '["2008-01-01", "2009-07-01"]'),
    ]
)  # fmt: skip


def study_of(text: str, *, comparison: str, resamples: int = 0) -> Study:
    head = f'question = "Which?"\nhistories = ["one"]\ncomparison = "{comparison}"\nresamples = {resamples}\n'
    return parse_study(head + text)


@dataclass(frozen=True)
class Ran:
    plan: StudyPlan
    rows: Rows

    def row(self, number: int) -> dict[str, Any]:
        return {name: values[number] for name, values in self.rows.columns.items()}

    def single(self, number: int) -> Replay:
        """The overlay of a row, replayed by itself."""
        group = next(g for g in self.plan.groups if g.first_row <= number < g.first_row + len(g.points))
        at = number - group.first_row
        (point,) = Expansion(self.plan.study).many(group.points[at : at + 1])
        return replay(
            market_of(self.plan, group), point.overlay, volatility=point.volatility, start=point.start, end=point.end
        )


@pytest.fixture(scope="module")
def store(tmp_path_factory: pytest.TempPathFactory) -> Path:
    folder = tmp_path_factory.mktemp("histories")
    store_history(folder, "one", years=4)
    return folder


@pytest.fixture(scope="module", params=["same-beta mix", "hold"], ids=["mix", "hold"])
def ran(request: pytest.FixtureRequest, store: Path) -> Ran:
    plan = plan_study(study_of(LEGS + AXES, comparison=request.param), store=store)
    return Ran(plan, run_plan(plan))


def sample(ran: Ran, count: int = 24) -> list[int]:
    return sorted(np.random.default_rng(11).choice(ran.plan.overlays, count, replace=False).tolist())


def test_every_row_is_the_overlay_replayed_by_itself(ran: Ran) -> None:
    assert ran.plan.overlays == 3 * 2 * 3 * 2 * 2 * 2 * 2
    assert list(ran.rows.columns) == [*columns_of(max((g.span for g in ran.plan.groups), key=lambda s: len(s.edges)))]
    for number in sample(ran):
        row, found = ran.row(number), ran.single(number)
        assert row["inception"] == found.dates[0]
        assert row["end"] == found.dates[-1]
        shared: dict[str, Any] = {"dates": found.dates, "rate_return": found.rate_return, "hold": found.hold}
        own, hold = performance(found.wealth, **shared), performance(found.hold, **shared)
        market = found.hold[1:] / found.hold[:-1] - 1 - found.rate_return[1:]
        mix = performance(mix_wealth(own.beta, market, found.rate_return[1:]), **shared)
        expected = {name: getattr(own, name) for name in HEADLINE}
        expected |= {
            f"hold_{name}": getattr(hold, name) for name in ("annual_return", "volatility", "sharpe", "max_drawdown")
        }
        expected |= {
            "options_net_a_year": roll_costs(found).net_a_year,
            "mix_annual_return": mix.annual_return,
            "mix_sharpe": mix.sharpe,
            "return_less_hold": own.annual_return - hold.annual_return,
            "sharpe_less_hold": own.sharpe - hold.sharpe,
            "drawdown_removed": own.max_drawdown - hold.max_drawdown,
            "return_less_mix": own.annual_return - mix.annual_return,
            "sharpe_less_mix": own.sharpe - mix.sharpe,
        }
        assert {*expected, "information_ratio"} == set(FIGURES)
        for name, value in expected.items():
            # differences of ratios are small beside them
            least = 1e-12 if name.startswith(("options", "mix", "return_less", "sharpe_less", "drawdown")) else 1e-13
            assert row[name] == pytest.approx(value, rel=1e-9, abs=least, nan_ok=True), (number, name)


def test_the_information_ratio_is_that_of_the_daily_differences(ran: Ran) -> None:
    for number in sample(ran):
        row, found = ran.row(number), ran.single(number)
        excess = found.wealth[1:] / found.wealth[:-1] - 1 - found.rate_return[1:]
        market = found.hold[1:] / found.hold[:-1] - 1 - found.rate_return[1:]
        share = 1.0
        if ran.plan.study.comparison == "same-beta mix":
            share = np.cov(excess, market)[0, 1] / np.var(market, ddof=1)
        difference = excess - share * market
        plain = difference.mean() / difference.std(ddof=1) * np.sqrt(252)
        assert row["information_ratio"] == pytest.approx(plain, rel=1e-9), number


def test_block_sums_are_sums_over_the_common_days(ran: Ran) -> None:
    for number in sample(ran, 12):
        row, found = ran.row(number), ran.single(number)
        span = next(g.span for g in reversed(ran.plan.groups) if g.first_row <= number)
        assert found.dates[0] <= span.first
        assert found.dates[-1] == span.last
        offset = list(found.dates).index(span.first)
        wealth, rate = found.wealth[offset:], found.rate_return[offset:]
        assert span.days == len(wealth) - 1
        for block, (begin, end) in enumerate(zip(span.edges[:-1], span.edges[1:], strict=True), start=1):
            excess = [wealth[day + 1] / wealth[day] - 1 - rate[day + 1] for day in range(begin, end)]
            assert row[f"growth_{block}"] == wealth[end] / wealth[begin]
            assert row[f"total_{block}"] == pytest.approx(sum(excess), rel=1e-9, abs=1e-13)
            assert row[f"square_{block}"] == pytest.approx(sum(x * x for x in excess), rel=1e-9)
        # a window of fewer days may have fewer blocks
        beyond = [name for name in ran.rows.columns if name.rsplit("_", 1)[0] in BLOCK_COLUMNS]
        assert all(np.isnan(row[name]) for name in beyond if int(name.rsplit("_", 1)[1]) >= len(span.edges))


def test_nothing_is_ruined_and_some_overlays_beat_their_comparison(ran: Ran) -> None:
    """So the sample above is not of NaNs, and of both signs."""
    ratios = ran.rows.columns["information_ratio"].astype(float)
    assert np.isfinite(ratios).all()
    assert ratios.min() < 0 < ratios.max()
    assert len(set(ran.rows.columns["inception"].tolist())) > 2


# ---------------------------------------------------------------- the tests that allow for the search


def test_the_partial_is_that_of_plain_differences(store: Path) -> None:
    plan = plan_study(study_of(LEGS + AXES, comparison="same-beta mix", resamples=60), store=store)
    ran = Ran(plan, run_plan(plan))
    for group, part in zip(plan.groups, ran.rows.partials, strict=True):
        assert part is not None
        span = group.span
        columns = []
        numbers = np.arange(group.first_row, group.first_row + len(group.points))
        for number in numbers.tolist():
            found = ran.single(number)
            market = found.hold[1:] / found.hold[:-1] - 1.0 - found.rate_return[1:]
            excess = found.wealth[1:] / found.wealth[:-1] - 1.0 - found.rate_return[1:]
            # beta is of all days of the overlay, the differences of the common ones
            columns.append((excess - ran.row(number)["beta"] * market)[len(market) - span.days :])
        draws = Draws(span.days, span.block_length, 60, plan.study.seed)
        plain = check_batch(draws, np.column_stack(columns), numbers)
        assert p_values(part) == p_values(plain)
        for name in ("white", "lower", "consistent", "upper"):
            np.testing.assert_array_equal(getattr(part, name), getattr(plain, name))


# ---------------------------------------------------------------- spans


def market_from(first: str, days: int) -> Market:
    index = pd.bdate_range(first, periods=days, name="date")
    rng = np.random.default_rng(3)
    close = 100 * np.exp(np.cumsum(rng.normal(0, 0.01, days)))
    return Market.from_frame(pd.DataFrame({"close": close, "vol": 0.2}, index=index), rate=0.02)


def put(roll: str, **more: object) -> Leg:
    return Leg(position="long", right="put", roll=roll, strike=PercentOfSpot(95), **more)  # type: ignore[arg-type]


def point(*legs: Leg) -> Point:
    return Point(overlay=Overlay(legs=legs), volatility=Volatility())


def test_the_common_days_begin_with_the_last_inception_and_are_cut_at_decades() -> None:
    # from Monday 2009-06-01: a monthly overlay begins on Friday 2009-06-19, a yearly one on 2009-12-18
    market = market_from("2009-06-01", 600)
    span = common_span(market, [point(put("month")), point(put("year"))], comparison="hold")
    assert (str(span.first), str(span.last)) == ("2009-12-18", str(market.dates[-1]))
    days = int(np.count_nonzero(market.dates > span.first))
    assert span.days == days
    # 8 equal parts, and 9 weekday returns (12-21 to 12-31) before the first one over a day of 2010
    equal = [days * part // 8 for part in range(9)]
    assert span.edges.tolist() == sorted({*equal, 9})
    assert [span.edges[place] for place in span.equal] == equal
    assert span.decades == (("2000s", 0, 1), ("2010s", 1, 9))


def test_the_block_length_is_the_longest_of_the_differences_over_the_common_days() -> None:
    market = market_from("2009-06-01", 600)
    asked = [point(put("month")), point(put("year")), point(put("quarter", ratio=2.0))]
    span = common_span(market, asked, comparison="hold")
    lengths = []
    for one in asked:
        found = replay(market, one.overlay)
        difference = np.diff(found.wealth) / found.wealth[:-1] - np.diff(found.hold) / found.hold[:-1]
        lengths.append(optimal_block_length(difference[-span.days :]))
    assert span.block_length == pytest.approx(max(lengths), rel=1e-9)
    assert max(lengths) > 1.0


@pytest.mark.parametrize("at_once", [1, 2, 500])
def test_how_many_are_asked_at_once_does_not_matter(monkeypatch: pytest.MonkeyPatch, at_once: int) -> None:
    market = market_from("2009-06-01", 600)
    asked = [point(put("month")), point(put("year")), point(put("quarter", ratio=2.0))]
    whole = common_span(market, asked, comparison="same-beta mix")
    monkeypatch.setattr("studies.batches.ASKED_AT_ONCE", at_once)
    part = common_span(market, asked, comparison="same-beta mix")
    assert (part.first, part.last, part.block_length) == (whole.first, whole.last, whole.block_length)
    np.testing.assert_array_equal(part.edges, whole.edges)


def test_an_overlay_that_begins_after_the_common_days_is_no_figure_but_an_error() -> None:
    market = market_from("2009-06-01", 600)
    span = common_span(market, [point(put("month"))], comparison="hold")
    with pytest.raises(AssertionError, match="begins on 2009-12-18, after the common days do, on 2009-06-19"):
        replay_batch(market, [point(put("year"))], span, comparison="hold", draws=None)


@pytest.mark.parametrize(
    ("lines", "rare"),
    [
        (axis("roll", "leg.1.roll", '["month", "quarter", "year"]'), "roll == 'year'"),
        (axis("phase", "leg.1.phase", "[0, 1, 2]"), "phase == 0"),
        (axis("shift", ["leg.1.shift_days", "leg.2.shift_days"], "[-3, 0, 3]"), "shift == 3"),
        # of the quarterly put nothing is held in the others: the monthly call opens first
        (axis("ratio", "leg.1.ratio", "[0, 0.5]"), "ratio == 0.5"),
        (axis("vol", "volatility.source", '["implied", "realised"]'), "vol == 'realised'"),
    ],
    ids=["roll", "phase", "shift", "ratio", "source"],
)
def test_the_common_days_allow_for_every_overlay_of_the_study(store: Path, lines: str, rare: str) -> None:
    """An overlay for each first day is asked when the study is planned, also where one alone begins so late."""
    many = axis("put", "leg.1.strike.percent_of_spot", "{ from = 60, to = 99, step = 1 }")
    study = study_of(f'leave_out = ["{rare} and put != 83"]\n' + LEGS + many + lines, comparison="hold")
    plan = plan_study(study, store=store)
    begins = run_plan(plan).columns["inception"]
    last = np.flatnonzero(begins == begins.max())
    assert len(last) == 1
    assert plan.groups[0].span.first == begins.max()
    # it is not among those that are asked for the block length, spread evenly over all
    assert last[0] not in np.linspace(0, len(begins) - 1, 12).astype(int)


def test_not_every_overlay_is_asked_when_a_study_is_planned(store: Path) -> None:
    many = axis("put", "leg.1.strike.percent_of_spot", "{ from = 80, to = 99, step = 1 }")
    ratios = axis("ratio", "leg.1.ratio", "{ from = 0, to = 1, step = 0.1 }")
    smiles = axis("smile", "volatility.smile", '["flat", "mild", "index", "steep"]')
    study = study_of(LEGS + many + ratios + smiles, comparison="hold")
    # of 880: one with a put and one without, and the 12 for the block length
    assert len(points(study)) == 880
    assert len(runner._asked(study, points(study))) <= 14


def test_a_ruined_overlay_has_no_figures_and_spoils_no_other(store: Path) -> None:
    legs = LEGS.replace("110", "102")
    calls = axis("ratio", "leg.2.ratio", "[1, 60]") + axis("put", "leg.1.strike.percent_of_spot", "[90, 95]")
    plan = plan_study(study_of(legs + calls, comparison="same-beta mix", resamples=20), store=store)
    found = run_plan(plan)
    ruined = np.isnan(found.columns["annual_return"].astype(float))
    assert ruined.tolist() == [False, False, True, True]
    assert all(np.isnan(found.columns[name][2:].astype(float)).all() for name in ("sharpe", "information_ratio"))
    assert set(SPAN) <= set(found.columns)
    part = found.partials[0]
    assert part is not None
    assert (part.tried, part.missing) == (4, 2)
    calm = study_of(legs + calls.replace("[1, 60]", "[1]"), comparison="same-beta mix", resamples=20)
    alone = run_plan(plan_study(calm, store=store))
    for name in FIGURES:
        np.testing.assert_array_equal(found.columns[name][:2], alone.columns[name], err_msg=name)


def test_there_is_no_mix_of_a_beta_under_zero(tmp_path: Path) -> None:
    """Three puts at 105 against one share are short of the market: no mix of stock and cash is."""
    store_history(tmp_path, "one")
    market = Market.from_frame(read_history(tmp_path, "one").frame)
    short = parse_study(
        'question = "Which?"\nhistories = ["one"]\nresamples = 0\n'
        '[[overlay.leg]]\nposition = "long"\nright = "put"\nratio = 3\nstrike = { percent_of_spot = 105 }\n'
        + axis("put", "leg.1.strike.percent_of_spot", "[80, 105]")
    )
    asked = Expansion(short).many(points(short))
    span = common_span(market, asked, comparison="same-beta mix")
    columns, _ = replay_batch(market, asked, span, comparison="same-beta mix", draws=None)
    assert columns["beta"][0] > 0 > columns["beta"][1]
    for name in ("mix_annual_return", "mix_sharpe", "return_less_mix", "sharpe_less_mix"):
        assert np.isfinite(columns[name]).tolist() == [True, False], name
    assert np.isfinite(columns["information_ratio"]).all()
