"""The best of many overlays: White's reality check and Hansen's test of superior predictive ability (C13).

Rung: independent library (arch), twin (Python's numbers in plain loops), identity (batches, order, scale, exact sums),
hand-worked, and behaviour (markets without skill, one skilled overlay, data that cannot be used).
"""

from __future__ import annotations

import math
from collections import Counter
from collections.abc import Iterator
from dataclasses import astuple, fields, replace

import numpy as np
import numpy.typing as npt
import pytest
from arch.bootstrap import SPA, StationaryBootstrap
from scipy import stats

from backtest.analytics import reality_check, resampling
from backtest.analytics.reality_check import Draws, Partial, check_batch, combine, p_values
from backtest.errors import BacktestError

Array = npt.NDArray[np.float64]
MAXIMA = ("white", "lower", "consistent", "upper")


def market(days: int, overlays: int, seed: int, *, worse: float = 0.0) -> Array:
    """Differences with a common part, autocorrelation and unlike volatilities; means from zero down to ``-worse``."""
    rng = np.random.default_rng(seed)
    shock = rng.standard_t(6, size=(days, overlays)) + rng.standard_t(6, size=(days, 1))
    shock[1:] += 0.3 * shock[:-1]
    scale = 0.002 * np.exp(rng.normal(size=overlays))
    return scale * (shock - shock.mean(axis=0) + 0.03 * rng.normal(size=overlays) - worse * rng.random(overlays))


def same(a: Partial, b: Partial) -> bool:
    """Equal to the last bit."""
    return all(np.array_equal(getattr(a, f.name), getattr(b, f.name)) for f in fields(Partial))


def whole(draws: Draws, differences: Array) -> Partial:
    return check_batch(draws, differences, np.arange(differences.shape[1]))


# ---- the draws


def test_every_resample_draws_as_many_days_as_there_are_and_more_resamples_are_the_same_and_some_more() -> None:
    few, many = Draws(90, 6.0, 13, 5), Draws(90, 6.0, 40, 5)
    assert few.weights.shape == (13, 90)
    assert (many.weights.sum(axis=1) == 90).all()
    np.testing.assert_array_equal(few.weights, many.weights[:13])
    assert not np.array_equal(few.weights, Draws(90, 6.0, 13, 6).weights)


def test_the_days_are_those_of_the_paired_bootstrap(monkeypatch: pytest.MonkeyPatch) -> None:
    drawn: list[Array] = []
    original = resampling.stationary_indices

    def spy(*args: object) -> Array:
        drawn.append(original(*args))  # type: ignore[arg-type]
        return drawn[-1]

    monkeypatch.setattr(resampling, "stationary_indices", spy)
    returns = 0.01 * np.random.default_rng(1).normal(size=(3, 80))
    resampling.paired_bootstrap(
        overlay_returns=returns[0],
        hold_excess=returns[1],
        cash=returns[2],
        comparisons={},
        rng=np.random.default_rng(9),
        resamples=24,
        block_length=4.0,
        workers=1,
    )
    counted = [[Counter(row)[day] for day in range(80)] for row in np.concatenate(drawn)[:24].tolist()]
    np.testing.assert_array_equal(Draws(80, 4.0, 24, 9).weights, counted)


# ---- against arch and plain loops


class Fed(StationaryBootstrap):
    """arch's bootstrap made to draw the days counted in ``weights``."""

    def feed(self, weights: Array) -> Fed:
        self.rows: Iterator[Array] = iter(weights)
        return self

    def update_indices(self) -> npt.NDArray[np.int64]:
        counts = next(self.rows)
        return np.repeat(np.arange(counts.size), counts.astype(int))  # the order does not matter for a mean


def arch_spa(differences: Array, *, block: int, resamples: int, weights: Array | None = None) -> SPA:
    """arch takes losses: a benchmark of nil and the differences' negatives. It does not studentise the statistic."""
    days = len(differences)
    spa = SPA(np.zeros(days), -differences, block_size=block, reps=resamples, studentize=True, seed=3)
    if weights is not None:
        spa.bootstrap = Fed(block, differences, seed=3).feed(weights)
    spa.compute()
    return spa


@pytest.mark.parametrize(("block", "worse", "seed"), [(1, 0.0, 1), (7, 0.1, 2), (20, 0.4, 3)])
def test_arch_with_the_same_days(block: int, worse: float, seed: int) -> None:
    """White's test is arch's upper value. Hansen's are arch's once each column is divided by its deviation.

    The deviation is arch's own, by lags (``_loss_diff_var``); after it the statistics are arch's means.
    """
    d = market(150, 30, seed, worse=worse)
    draws = Draws(150, block, 200, seed)
    ours = whole(draws, d)
    found = p_values(ours)
    assert ours.best_statistic > 0  # otherwise Hansen's statistic is nil, which arch does not have
    raw = arch_spa(d, block=block, resamples=200, weights=draws.weights)
    units = d / np.sqrt(raw._loss_diff_var)
    spa = arch_spa(units, block=block, resamples=200, weights=draws.weights)
    assert found.white == raw.pvalues["upper"]
    assert [found.spa_lower, found.spa_consistent, found.spa_upper] == spa.pvalues.tolist()
    assert ours.best_statistic == pytest.approx(math.sqrt(150) * units.mean(axis=0).max(), rel=1e-12)
    for level in (0.05, 0.3, 0.8):
        assert np.quantile(ours.white, 1 - level) == pytest.approx(raw.critical_values(level)["upper"], abs=1e-15)
        for name in MAXIMA[1:]:
            critical = math.sqrt(150) * spa.critical_values(level)[name]
            assert np.quantile(getattr(ours, name), 1 - level) == pytest.approx(critical, abs=1e-12)
    if worse > 0.3:  # the three recentrings do differ here
        assert found.spa_lower < found.spa_consistent < found.spa_upper


def test_arch_with_its_own_days() -> None:
    """Shares of 1,000 resamples, drawn twice: four standard errors of the difference are sqrt(8 p (1 - p) / 250)."""
    d = market(200, 20, 4, worse=0.2)
    found = p_values(whole(Draws(200, 5.0, 1000, 0), d))
    raw = arch_spa(d, block=5, resamples=1000)
    spa = arch_spa(d / np.sqrt(raw._loss_diff_var), block=5, resamples=1000)
    theirs = [raw.pvalues["upper"], *spa.pvalues]
    for ours, other in zip(astuple(found)[:4], theirs, strict=True):
        assert 0.02 < other < 0.98
        assert abs(ours - other) < 4 * math.sqrt(2 * other * (1 - other) / 1000)


def twin(draws: Draws, differences: Array) -> dict[str, list[float]]:
    """Maxima of every resample (first) and of the sample: Hansen (2005), equations of section 3, day by day."""
    n, stay = draws.days, 1 - 1 / draws.block_length
    out: dict[str, list[float]] = {name: [-math.inf] * (draws.resamples + 1) for name in MAXIMA}
    for column in differences.T.tolist():
        mean = math.fsum(column) / n
        variance = math.fsum((x - mean) ** 2 for x in column) / n
        for i in range(1, n):
            weight = (n - i) / n * stay**i + i / n * stay ** (n - i)
            variance += 2 * weight * math.fsum((column[j] - mean) * (column[j + i] - mean) for j in range(n - i)) / n
        if variance < 1e-20:
            continue
        root = math.sqrt(n / variance)
        invalid = root * mean < -math.sqrt(2 * math.log(math.log(n)))
        centre = {"lower": max(mean, 0.0), "consistent": 0.0 if invalid else mean, "upper": mean}
        for b, row in enumerate(draws.weights.tolist()):
            again = math.fsum(w * x for w, x in zip(row, column)) / n
            out["white"][b] = max(out["white"][b], again - mean)
            for name, c in centre.items():
                out[name][b] = max(out[name][b], root * (again - c))
        out["white"][-1] = max(out["white"][-1], mean)
        for name in centre:
            out[name][-1] = max(out[name][-1], root * mean)
    return out


@pytest.mark.parametrize(("days", "block", "worse"), [(61, 1.0, 0.3), (64, 3.7, 0.3), (75, 75.0, 0.0), (3, 1.5, 0.1)])
def test_plain_loops(days: int, block: float, worse: float) -> None:
    draws, d = Draws(days, block, 12, 8), market(days, 9, days, worse=worse)
    ours, plain = whole(draws, d), twin(draws, d)
    assert ours.best_mean == pytest.approx(plain["white"].pop(), abs=1e-15)
    np.testing.assert_allclose(ours.white, plain["white"], rtol=0, atol=1e-15)
    for name in MAXIMA[1:]:
        assert ours.best_statistic == pytest.approx(plain[name].pop(), rel=1e-11)
        np.testing.assert_allclose(getattr(ours, name), plain[name], rtol=1e-11, atol=1e-11)


def test_standard_error_by_hand() -> None:
    """Differences 4, 2, 0, -2: mean 1, autocovariances 5, 1.25, -1.5 and -2.25.

    Block length 2 on 4 days: weights .75 .5 + .25 .125 = .40625, .25 and .40625 again; variance
    5 + 2 (.40625 1.25 - .25 1.5 - .40625 2.25) = 3.4375. Block length 1: the plain variance, 5.
    """
    d = np.array([[4.0], [2.0], [0.0], [-2.0]])
    assert whole(Draws(4, 2.0, 1, 0), d).best_statistic == pytest.approx(2 / math.sqrt(3.4375), rel=1e-14)
    assert whole(Draws(4, 1.0, 1, 0), d).best_statistic == pytest.approx(2 / math.sqrt(5.0), rel=1e-14)


HAND = Partial(
    days=100,
    block_length=2.0,
    resamples=4,
    seed=0,
    tried=3,
    missing=0,
    constant=0,
    best=7,
    best_mean=0.25,
    best_studentised=5,
    best_statistic=1.0,
    white=np.array([0.1, 0.25, 0.3, 0.4]),
    lower=np.array([-1.0, 0.5, 0.6, 0.7]),
    consistent=np.array([-1.0, 1.0, 0.6, 1.5]),
    upper=np.array([0.9, 1.0, 1.5, 1.7]),
)


def test_p_values_by_hand() -> None:
    """What is above or equal counts: 3 of 4, 0 of 4, 2 of 4 and 3 of 4."""
    found = p_values(HAND)
    assert astuple(found)[:8] == (0.75, 0.0, 0.5, 0.75, 7, 0.25, 5, 1.0)
    assert (found.tried, found.resamples, found.block_length, found.days, found.reason) == (3, 4, 2.0, 100, None)


@pytest.mark.parametrize("statistic", [0.0, -0.5])
def test_a_statistic_not_above_nil_is_never_significant(statistic: float) -> None:
    """Hansen's statistic is then max(., 0) = 0, and so are the lowest of the resamples'."""
    found = p_values(replace(HAND, best_statistic=statistic, best_mean=-0.1, white=np.array([-0.2, 0.1, 0.0, -0.15])))
    assert astuple(found)[:4] == (0.5, 1.0, 1.0, 1.0)


# ---- batches


def test_batches_in_any_order_give_the_same_bits(monkeypatch: pytest.MonkeyPatch) -> None:
    d = market(97, 530, 11, worse=0.2)
    d[:, 40] = np.nan
    d[:, 41] = 0.0
    d[:, [3, 300, 500]] = d[:, [np.nanargmax(d.mean(axis=0))]]  # equals: the lowest place is the best
    draws = Draws(97, 4.0, 33, 2)
    at_once = whole(draws, d)
    assert at_once.best == min(3, int(np.nanargmax(d.mean(axis=0))))
    rng = np.random.default_rng(0)
    for most in (1, 7, 50, 400):
        monkeypatch.setattr(reality_check, "OVERLAYS_AT_ONCE", most)
        order = rng.permutation(530)
        cuts = np.sort(rng.integers(0, 531, size=12))  # some batches are empty, some of one overlay
        partials = [check_batch(draws, d[:, part], part) for part in np.split(order, cuts)]
        assert same(combine(iter(partials)), at_once)
        assert same(combine([combine(partials[6:]), combine(partials[:6])]), at_once)
        assert same(check_batch(draws, np.asfortranarray(d), range(530)), at_once)
    assert (at_once.tried, at_once.missing, at_once.constant) == (530, 1, 1)
    assert same(whole(Draws(97, 4.0, 33, 2), d), at_once)
    assert not same(whole(Draws(97, 4.0, 33, 3), d), at_once)


def test_sums_have_no_rounding() -> None:
    """Whole numbers under 2^34 and sums of them in Python: no library's order of adding can change the means."""
    numbers = np.random.default_rng(3).integers(-(2**34), 2**34, size=300)
    draws = Draws(300, 9.0, 20, 0)
    ours = check_batch(draws, np.ldexp(numbers[:, np.newaxis].astype(float), -40), [0])
    mean = math.ldexp(sum(numbers.tolist()), -40) / 300
    assert ours.best_mean == mean
    for row, highest in zip(draws.weights, ours.white.tolist()):
        total = sum(int(w) * x for w, x in zip(row.tolist(), numbers.tolist()))
        assert highest == math.ldexp(total, -40) / 300 - mean


def test_scale_changes_nothing_but_the_means() -> None:
    d, draws = market(80, 12, 5, worse=0.2), Draws(80, 3.0, 50, 1)
    a, b = whole(draws, d), whole(draws, 8.0 * d)  # a power of two: same bits
    assert same(replace(b, best_mean=b.best_mean / 8, white=b.white / 8), a)
    uneven = whole(draws, d * np.linspace(0.5, 20.0, 12))  # each overlay's own unit: Hansen's do not change
    assert astuple(p_values(uneven))[1:4] == astuple(p_values(a))[1:4]
    assert astuple(p_values(uneven))[6] == astuple(p_values(a))[6]


# ---- behaviour


def null_p_values(markets: int, days: int, overlays: int, resamples: int, block: float) -> Array:
    """White's, Hansen's consistent and upper, and the naive p-value of the best, in markets without skill.

    Half of each difference is common to all; spells of volatility, no autocorrelation.
    """
    out = []
    for seed in range(markets):
        rng = np.random.default_rng(1000 + seed)
        noise = rng.normal(size=(days, overlays)) + rng.normal(size=(days, 1))
        d = 0.003 * noise * np.exp(0.5 * np.sin(np.arange(days) / 15 + seed))[:, np.newaxis]
        found = p_values(whole(Draws(days, block, resamples, seed), d))
        naive = stats.ttest_1samp(d[:, found.best], 0.0, alternative="greater").pvalue
        out.append([found.white, found.spa_consistent, found.spa_upper, naive])
    return np.array(out)


def check_uniform(found: Array) -> None:
    """Shares at or under 10% and 50% within the binomial's central 99.99%; the naive one far outside."""
    markets = len(found)
    for level in (0.1, 0.5):
        low, high = stats.binom.ppf([5e-5, 1 - 5e-5], markets, level)
        for column in range(3):
            assert low <= np.count_nonzero(found[:, column] <= level) <= high, (level, column)
        assert np.count_nonzero(found[:, 3] <= level) > high


def test_without_skill_the_p_values_are_even_and_the_naive_one_is_not() -> None:
    check_uniform(null_p_values(150, 200, 40, 199, 2.0))


@pytest.mark.slow
def test_without_skill_in_many_markets() -> None:
    found = null_p_values(400, 500, 150, 399, 3.0)
    check_uniform(found)
    assert np.mean(found[:, 3] <= 0.05) > 0.5  # 150 overlays, correlated 1/2: the best looks good in most markets
    for column in range(3):
        assert stats.kstest(found[:, column], "uniform").pvalue > 1e-3


def test_one_skilled_overlay_is_found_among_many() -> None:
    d = market(800, 300, 20)
    d -= d.mean(axis=0)
    d[:, 123] += 6.0 / math.sqrt(800) * d[:, 123].std() * 1.3  # six plain standard errors
    d[:, 123] *= 3.0 * d.std(axis=0).max() / d[:, 123].std()  # and the highest mean too
    found = p_values(whole(Draws(800, 3.0, 300, 0), d))
    assert (found.best, found.best_studentised) == (123, 123)
    assert found.spa_upper < 0.01
    assert found.white < 0.01


def test_hopeless_wild_overlays_drown_whites_test_and_not_hansens() -> None:
    """Hansen (2005): poor and irrelevant alternatives take the reality check's power away."""
    rng = np.random.default_rng(7)
    d = 0.002 * rng.normal(size=(400, 101))
    d -= d.mean(axis=0)
    d[:, 0] += 0.0003  # three standard errors, of chance 0.13%
    d[:, 1:] = 20.0 * d[:, 1:] - 0.02  # ten standard errors under nil, twenty times as volatile
    found = p_values(whole(Draws(400, 1.0, 200, 0), d))
    assert found.best == 0
    assert found.white > 0.9
    assert found.spa_consistent == found.spa_lower < 0.01
    assert 0.02 < found.spa_upper < 0.3  # the best of 101: 1 - (1 - 0.0013)^101 = 0.13


def test_a_single_resample_gives_none_or_all() -> None:
    assert set(astuple(p_values(whole(Draws(60, 2.0, 1, 0), market(60, 5, 0))))[:4]) <= {0.0, 1.0}


def test_one_overlay() -> None:
    """White's and Hansen's are the same test but for the unit, and one with a mean above nil has no recentring."""
    d = 0.01 * np.random.default_rng(2).normal(size=(120, 1)) + 0.0005
    found = p_values(check_batch(Draws(120, 3.0, 200, 0), d, [77]))
    assert (found.best, found.best_studentised, found.tried) == (77, 77, 1)
    assert found.white == found.spa_lower == found.spa_consistent == found.spa_upper
    assert 0.0 < found.white < 1.0


def test_overlays_without_variance_or_with_missing_days_are_left_out_and_counted() -> None:
    d = market(100, 6, 3)
    draws = Draws(100, 2.0, 20, 0)
    noise = 1e-17 * (1.0 + 0.1 * np.random.default_rng(0).normal(size=(100, 1)))  # rounding, ten errors above nil
    flat, high = np.zeros((100, 1)), np.full((100, 1), 0.1)
    ruined, endless = d[:, :1].copy(), d[:, :1].copy()
    ruined[60:], endless[5] = np.nan, np.inf
    alone, among = whole(draws, d), whole(draws, np.hstack([d, noise, flat, high, ruined, endless]))
    assert (among.tried, among.missing, among.constant) == (11, 2, 3)
    assert (among.best, among.best_mean) == (8, pytest.approx(0.1, rel=1e-13))  # White's looks at the mean alone
    assert (among.best_studentised, among.best_statistic) == (alone.best_studentised, alone.best_statistic)
    np.testing.assert_array_equal(among.white, np.maximum(alone.white, 0.0))
    for name in MAXIMA[1:]:
        np.testing.assert_array_equal(getattr(among, name), getattr(alone, name))


@pytest.mark.parametrize(
    ("differences", "reason", "best"),
    [
        (np.zeros((80, 0)), "no overlay was tried", None),
        (np.full((80, 2), np.nan), "each of the 2 overlays tried has missing differences", None),
        (np.array([[0.01], [0.02]]), "2 days of differences are too few to resample; at least 60 are needed", 0),
    ],
    ids=["nothing", "all ruined", "two days"],
)
def test_no_p_values_and_why(differences: Array, reason: str, best: int | None) -> None:
    found = p_values(whole(Draws(len(differences), 2.0, 5, 0), differences))
    assert np.isnan(astuple(found)[:4]).all()
    assert (found.reason, found.best) == (reason, best)
    assert math.isnan(found.best_mean) == (best is None)


def test_only_constant_differences_have_no_standard_errors() -> None:
    """White's: the comparison itself is not above itself, nor is rounding."""
    found = p_values(whole(Draws(70, 2.0, 5, 0), np.zeros((70, 2))))
    noise = p_values(whole(Draws(70, 2.0, 5, 0), 1e-17 * np.random.default_rng(0).normal(size=(70, 1)) + 1e-17))
    assert (noise.white, noise.best_studentised) == (1.0, None)
    assert (found.white, found.best, found.best_mean, found.best_studentised) == (1.0, 0, 0.0, None)
    assert np.isnan([found.spa_lower, found.spa_consistent, found.spa_upper, found.best_statistic]).all()
    assert (
        found.reason
        == "no overlay differs from its comparison by more than a constant, so there are no standard errors"
    )


@pytest.mark.parametrize(
    ("settings", "message"),
    [
        ((0, 1.0, 5, 0), "days is 0; there must be at least 1"),
        ((80, 0.5, 5, 0), r"block_length is 0\.5; it must be at least 1 day and at most the 80"),
        ((80, 81.0, 5, 0), r"block_length is 81\.0; it must be at least 1 day and at most the 80"),
        ((80, float("nan"), 5, 0), "block_length is nan"),
        ((80, 2.0, 0, 0), "resamples is 0; it must be at least 1"),
        ((80, 2.0, 5, -1), "seed is -1; it must be a whole number from 0"),
    ],
)
def test_settings_out_of_range(settings: tuple[int, float, int, int], message: str) -> None:
    with pytest.raises(BacktestError, match=message):
        Draws(*settings)


def test_shapes_and_draws_that_do_not_fit() -> None:
    draws, d = Draws(80, 2.0, 5, 0), np.zeros((80, 3))
    with pytest.raises(BacktestError, match=r"differences has shape \(79, 3\); it must be \(80, overlays\)"):
        check_batch(draws, d[1:], [0, 1, 2])
    with pytest.raises(BacktestError, match=r"differences has shape \(80,\)"):
        check_batch(draws, d[:, 0], [0])
    with pytest.raises(BacktestError, match=r"positions has shape \(2,\); give one for each of 3 overlays"):
        check_batch(draws, d, [0, 1])
    with pytest.raises(BacktestError, match="different draws cannot be combined"):
        combine([check_batch(draws, d, [0, 1, 2]), check_batch(Draws(80, 2.0, 5, 1), d, [0, 1, 2])])
    with pytest.raises(BacktestError, match="no partial results to combine"):
        combine([])
