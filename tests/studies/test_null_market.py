"""A market in which no overlay has any skill: what an honest p-value says there, and what a naive one says.

Rung: simulation with a known truth. Prices are a lognormal path that drifts at the riskless rate, every option is
priced at the true volatility and nothing costs anything: so every overlay earns what its comparison does, on average,
and the best of many is luck alone. White's test then gives p-values that are spread evenly; the naive p-value of the
best, which forgets that it was searched for, is small far too often. So is Hansen's where strikes lie so far out that
few options ever pay (it counts in units of a deviation that has not shown yet): the larger of the two is what counts.
"""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from scipy import stats

from backtest.analytics.performance import TRADING_DAYS
from data_loaders import load_history
from data_loaders.store import write_history
from studies.runner import plan_study, run_plan
from studies.study import parse_study
from studies.study_answer import answer_study

VOL, RATE, DAYS = 0.16, 0.02, 4 * 252
STUDY = """
question = "Is there any skill where there is none?"
histories = [{histories}]
comparison = "hold"
resamples = 200
[[overlay.leg]]
position = "long"
right = "put"
strike = {{ percent_of_forward = 95 }}
[[overlay.leg]]
position = "short"
right = "call"
strike = {{ percent_of_forward = 105 }}
[overlay.costs]
half_spread_vol = 0
[overlay.volatility]
smile = "flat"
[[axis]]
name = "put strike"
field = "leg.1.strike.percent_of_forward"
values = {{ from = {low}, to = 100, step = {step} }}
[[axis]]
name = "call strike"
field = "leg.2.strike.percent_of_forward"
values = {{ from = 100, to = {high}, step = {step} }}
[[axis]]
name = "roll"
fields = ["leg.1.roll", "leg.2.roll"]
values = ["month", "quarter"]
"""


def store_fair_market(folder: Path, name: str, rng: np.random.Generator) -> None:
    """A path at the riskless drift, on calendar time, with its true vol beside it."""
    dates = pd.bdate_range("2001-01-01", periods=DAYS)
    years = np.diff(dates.to_numpy()).astype("timedelta64[D]").astype(float) / 365
    drift = (np.log1p(RATE) - VOL**2 / 2) * years
    steps = drift + VOL * np.sqrt(years) * rng.standard_normal(DAYS - 1)
    close = 100 * np.exp(np.concatenate([[0.0], np.cumsum(steps)]))
    days = dates.strftime("%Y-%m-%d")
    pd.DataFrame({"date": days, "close": close}).to_csv(folder / "p.csv", index=False)
    pd.DataFrame({"date": days, "vol": VOL}).to_csv(folder / "v.csv", index=False)
    pd.DataFrame({"date": days, "rate": 100 * RATE}).to_csv(folder / "r.csv", index=False)
    history = load_history(prices=folder / "p.csv", vol=folder / "v.csv", rates=folder / "r.csv", vol_unit="decimal")
    write_history(history, folder, name)


def p_values_of(folder: Path, markets: int, *, widest: int) -> np.ndarray:
    """White's, Hansen's consistent, the larger of them, and the naive p-value of the best, a row a market."""
    rng = np.random.default_rng(2024)
    names = [f"m{number}" for number in range(markets)]
    for name in names:
        store_fair_market(folder, name, rng)
    spans = {"low": 100 - widest, "high": 100 + widest, "step": widest / 7}
    study = parse_study(STUDY.format(histories=", ".join(f'"{name}"' for name in names), **spans))
    plan = plan_study(study, store=folder)
    found = answer_study(plan, run_plan(plan))
    rows = []
    for group in found.groups:
        assert group.check is not None
        assert group.best is not None
        assert group.tried == 128
        ratio = found.overlays["information_ratio"].iloc[group.best]
        days = plan.groups[0].span.days
        naive = stats.norm.sf(ratio / np.sqrt(TRADING_DAYS) * np.sqrt(days))  # of the mean difference, one-sided
        rows.append((group.check.white, group.check.spa_consistent, group.check.luck, naive))
    return np.array(rows)


def at_or_under(level: float, found: np.ndarray) -> np.ndarray:
    """Share of markets, a column each."""
    return np.mean(found <= level, axis=0)


def test_in_a_few_fair_markets_the_search_is_seen_through(tmp_path: Path) -> None:
    found = p_values_of(tmp_path, 12, widest=14)
    # by the binomial law more than 4 of 12 at or under 0.1 have a chance of under 0.5%
    assert at_or_under(0.1, found)[2] <= 4 / 12
    # the best of 128 is never the naive test's even chance
    assert np.median(found[:, 3]) < 0.2


@pytest.mark.slow
@pytest.mark.parametrize("widest", [7, 14])
def test_in_many_fair_markets_honest_p_values_are_even_and_the_naive_one_is_not(tmp_path: Path, widest: int) -> None:
    found = p_values_of(tmp_path, 200, widest=widest)
    white, hansen, larger, naive = at_or_under(0.05, found)
    print(f"\nshare at or under 5%: White {white:.3f}, Hansen {hansen:.3f}, larger {larger:.3f}, naive {naive:.3f}")
    assert stats.kstest(found[:, 0], "uniform").pvalue > 1e-3
    # 5%, with a binomial error of 1.5% at 200 markets
    assert larger <= white < 0.10
    assert naive > 0.10
    if widest == 7:
        assert hansen < 0.12  # 8% when this was written
    else:
        assert hansen > 0.25  # and here 43%: why it is not believed alone
