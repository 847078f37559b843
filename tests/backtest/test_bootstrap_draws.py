"""How the stationary bootstrap draws days, and what its intervals are worth (C13).

Rung: independent library (arch), published formula (Politis and Romano 1994, lemma 1) and hand-worked. The slow test
simulates how often the 90% intervals cover the truth. Every tolerance on drawn figures is four of its own Monte Carlo
standard errors, with the seeds fixed.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt
import pytest
from arch.bootstrap import StationaryBootstrap
from scipy import stats
from scipy.signal import lfilter

from backtest.analytics.performance import sharpe_ratio
from backtest.analytics.resampling import Inference, Interval, paired_bootstrap, stationary_indices
from backtest.analytics.sharpe_tests import SharpeDifference

Array = npt.NDArray[np.float64]


def autoregression(rho: float, days: int, seed: int) -> Array:
    return lfilter([1.0], [1.0, -rho], np.random.default_rng(seed).normal(size=days + 500))[500:]


def draws(days: int, block_length: float, count: int, seed: int = 5) -> npt.NDArray[np.int32]:
    return stationary_indices(days, block_length, count, np.random.default_rng(seed))


def fresh_starts(drawn: npt.NDArray[np.int32]) -> npt.NDArray[np.bool_]:
    """Where a day, from the second on, does not follow the day drawn before it."""
    return drawn[:, 1:] != (drawn[:, :-1] + 1) % drawn.shape[1]


def test_one_run_goes_round_the_end() -> None:
    drawn = draws(7, 1e15, 50)
    assert not fresh_starts(drawn).any()
    assert (np.sort(drawn, axis=1) == np.arange(7)).all()
    assert set(drawn[:, 0]) == set(range(7))
    turned = drawn[drawn[:, 0] == 5][0]
    assert turned.tolist() == [5, 6, 0, 1, 2, 3, 4]


@pytest.mark.parametrize("block_length", [1.0, 2.5, 20.0, 300.0])
def test_runs_are_geometric_with_the_mean_asked_for(block_length: float) -> None:
    days, count = 1000, 800
    drawn = draws(days, block_length, count)
    assert drawn.min() == 0
    assert drawn.max() == days - 1
    fresh = fresh_starts(drawn)
    # a fresh start that lands on the next day (one in 1000) is not seen
    chance = (1 - 1 / days) / block_length
    assert np.mean(fresh) == pytest.approx(chance, abs=4 * np.sqrt(chance * (1 - chance) / fresh.size))
    assert 1 / np.mean(fresh) == pytest.approx(block_length / (1 - 1 / days), rel=4 / np.sqrt(fresh.size * chance))
    # the first run of each resample is longer than k days with probability (1 - chance)^k
    for k in (1, 2, 5, 20, 100):
        longer = (1 - chance) ** k
        found = np.mean(~fresh[:, :k].any(axis=1))
        assert found == pytest.approx(longer, abs=4 * np.sqrt(longer * (1 - longer) / count) + 1e-15)
    # and whether a run ends does not depend on whether the one before it just began
    if block_length > 1:
        both = np.mean(fresh[:, 1:] & fresh[:, :-1])
        assert both == pytest.approx(chance**2, abs=4 * chance / np.sqrt(fresh.size))


def test_every_day_is_as_likely_everywhere() -> None:
    days, count = 40, 20_000
    drawn = draws(days, 6.0, count)
    for position in (0, 1, 20, 39):  # resamples are independent, so a chi-squared test holds at one position
        assert stats.chisquare(np.bincount(drawn[:, position], minlength=days)).pvalue > 0.001
    begun = drawn[:, 1:][fresh_starts(drawn)]
    assert stats.chisquare(np.bincount(begun, minlength=days)).pvalue > 0.001


@pytest.mark.parametrize(("rho", "block_length"), [(0.0, 4.0), (0.6, 12.0), (-0.4, 30.0)])
def test_spread_of_a_resampled_mean(rho: float, block_length: float) -> None:
    days, count = 300, 40_000
    series = autoregression(rho, days, 17)
    # Politis and Romano (1994), lemma 1: n times the variance of the resampled mean is
    # C(0) + 2 sum over i of (1 - i/n) (1 - p)^i C(i), C the autocovariance of the series bent into a circle
    centred = series - series.mean()
    circular = np.array([np.mean(centred * np.roll(centred, -lag)) for lag in range(days)])
    lags = np.arange(1, days)
    kept = (1 - lags / days) * (1 - 1 / block_length) ** lags
    exact = np.sqrt((circular[0] + 2 * np.sum(kept * circular[1:])) / days)
    means = series[draws(days, block_length, count)].mean(axis=1)
    assert np.std(means) == pytest.approx(exact, rel=4 / np.sqrt(2 * count))  # 1.4%
    assert np.mean(means) == pytest.approx(series.mean(), abs=4 * exact / np.sqrt(count))


def test_figures_scatter_as_under_arch() -> None:
    days, ours, theirs = 400, 8000, 4000
    hold = 0.0005 + 0.01 * autoregression(0.3, days, 23)
    other = 0.0003 + 0.5 * hold + 0.004 * np.random.default_rng(24).standard_t(5, size=days)

    def figures(a: Array, b: Array) -> Array:
        return np.array([a.mean(), sharpe_ratio(a), sharpe_ratio(a) - sharpe_ratio(b), np.corrcoef(a, b)[0, 1]])

    bootstrap = StationaryBootstrap(15, hold, other, seed=np.random.RandomState(3))
    arch = np.array([figures(np.asarray(data[0]), np.asarray(data[1])) for data, _ in bootstrap.bootstrap(theirs)])
    own = np.array([figures(hold[row], other[row]) for row in draws(days, 15.0, ours)])
    # standard error of a standard deviation: s / sqrt(2 N), a little more with fat tails; of both together 2.9% at 4
    assert np.std(own, axis=0) == pytest.approx(np.std(arch, axis=0), rel=4 * np.sqrt(0.5 / ours + 0.5 / theirs) * 1.2)
    apart = np.abs(np.mean(own, axis=0) - np.mean(arch, axis=0)) / np.std(arch, axis=0)
    assert (apart < 4 * np.sqrt(1 / ours + 1 / theirs)).all()
    for column in range(4):
        assert stats.ks_2samp(own[:, column], arch[:, column]).pvalue > 0.001

    # and the interval for the difference of Sharpe ratios lies where theirs does: the standard error of a 5% quantile
    # of a normal law is sqrt(.05 .95)/.1031 = 2.11 s / sqrt(N)
    found = infer(hold, other, seed=1, block_length=15.0, resamples=ours).comparisons["other"].sharpe
    reach = 4 * 2.11 * np.std(arch[:, 2]) * np.sqrt(1 / ours + 1 / theirs)
    assert [found.low, found.high] == pytest.approx(np.quantile(arch[:, 2], [0.05, 0.95]), abs=reach)


def infer(overlay: Array, other: Array, *, seed: int, block_length: float | None, resamples: int) -> Inference:
    return paired_bootstrap(
        overlay_returns=overlay,
        hold_excess=other,
        cash=np.zeros(len(overlay)),
        comparisons={"other": other},
        rng=np.random.default_rng(seed),
        block_length=block_length,
        resamples=resamples,
    )


@pytest.mark.slow
@pytest.mark.parametrize("rho", [0.0, 0.2], ids=["independent days", "autocorrelated days"])
def test_intervals_cover_the_truth_nine_times_in_ten(rho: float) -> None:
    # Normal first-order autoregressions, correlation .8, 1,000 days; block length chosen by the data. The truth: yearly
    # growth exp(252 E log(1+R)) - 1, the Sharpe ratio mean/spread sqrt(252), the beta .8 ratio of spreads.
    days, histories = 1000, 300
    means, spreads = np.array([0.0005, 0.0003]), np.array([0.010, 0.006])
    nodes, weights = np.polynomial.hermite_e.hermegauss(60)
    growth = [np.expm1(252 * np.log1p(m + s * nodes) @ weights / weights.sum()) for m, s in zip(means, spreads)]
    sharpes = means / spreads * np.sqrt(252)
    truth = {
        "return": growth[0] - growth[1],
        "sharpe": sharpes[0] - sharpes[1],
        "own sharpe": sharpes[0],
        "beta": 0.8 * spreads[0] / spreads[1],
        "ledoit-wolf": sharpes[0] - sharpes[1],
    }
    covered = dict.fromkeys(truth, 0)
    for seed in range(histories):
        rng = np.random.default_rng(10_000 + seed)
        shocks = rng.normal(size=(2, days + 200))
        shocks[1] = 0.8 * shocks[0] + 0.6 * shocks[1]
        standard = np.sqrt(1 - rho**2) * lfilter([1.0], [1.0, -rho], shocks, axis=1)[:, 200:]
        a, b = means[:, np.newaxis] + spreads[:, np.newaxis] * standard
        found = infer(a, b, seed=seed, block_length=None, resamples=300)
        less = found.comparisons["other"]
        intervals: dict[str, Interval | SharpeDifference] = {
            "return": less.annual_return, "sharpe": less.sharpe, "own sharpe": found.overlay.sharpe,
            "beta": found.overlay.beta, "ledoit-wolf": less.sharpe_test,
        }  # fmt: skip
        for name, interval in intervals.items():
            covered[name] += bool(interval.low <= truth[name] <= interval.high)
    shares = {name: count / histories for name, count in covered.items()}
    # 300 histories: a standard error of 1.7%, three of them 5.2%. The bootstrap takes autocorrelation a little short;
    # ends made of 300 resamples scatter: both cost a point or two.
    assert all(abs(share - 0.90) < 0.052 for share in shares.values()), shares
