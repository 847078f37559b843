"""Figures of a batch: those of each overlay replayed by itself, and sums worked out plainly.

Rung: twin (``replay``, ``performance``, ``mix_wealth`` and ``roll_costs`` of one overlay at a time; plain formulas on
its daily series). Which days those are: ``test_common_days.py``.
"""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from backtest import Market, replay
from backtest.analytics import performance, roll_costs
from backtest.analytics.comparisons import mix_wealth
from backtest.analytics.headline import HEADLINE
from backtest.analytics.reality_check import Draws, check_batch, p_values
from backtest.engine.result import Replay
from data_loaders.store import read_history
from studies.batches import BLOCK_COLUMNS, FIGURES, SPAN, columns_of, common_span, replay_batch
from studies.expansion import Expansion, points
from studies.runner import Group, Rows, StudyPlan, market_of, plan_study, run_plan
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

    def group(self, number: int) -> Group:
        return next(g for g in self.plan.groups if g.first_row <= number < g.first_row + len(g.points))

    def single(self, number: int) -> Replay:
        """The overlay of a row, replayed by itself from the first of the common days on."""
        group = self.group(number)
        at = number - group.first_row
        (point,) = Expansion(self.plan.study).many(group.points[at : at + 1])
        market = market_of(self.plan, group)
        return replay(market, point.overlay, volatility=point.volatility, end=point.end, inception=group.span.first)


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
        assert row["inception"] == found.dates[0] == ran.group(number).span.first
        assert row["end"] == found.dates[-1] == ran.group(number).span.last
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
        span, wealth, rate = ran.group(number).span, found.wealth, found.rate_return
        assert (found.dates[0], found.dates[-1], len(wealth) - 1) == (span.first, span.last, span.days)
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
            assert len(excess) == span.days
            columns.append(excess - ran.row(number)["beta"] * market)
        draws = Draws(span.days, span.block_length, 60, plan.study.seed)
        plain = check_batch(draws, np.column_stack(columns), numbers)
        assert p_values(part) == p_values(plain)
        for name in ("white", "lower", "consistent", "upper"):
            np.testing.assert_array_equal(getattr(part, name), getattr(plain, name))


# ---------------------------------------------------------------- overlays with fewer figures


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
