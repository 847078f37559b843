"""Realised volatility: the six estimators of C7a; as a source on a market see ``test_realised_market.py``.

Rung: published value (single bars and weights, recomputed independently of the product), identity (windows worked by
hand), independent library (pandas' rolling and exponentially weighted means) and behaviour (unbiased on simulated
geometric Brownian motion).
"""

from __future__ import annotations

import math
from collections.abc import Callable

import numpy as np
import numpy.typing as npt
import pandas as pd
import pytest

from backtest import Market
from backtest.volatility.realised import (
    ESTIMATORS,
    close_to_close,
    exponentially_weighted,
    garman_klass,
    garman_klass_bar,
    parkinson,
    parkinson_bar,
    realised_vol,
    rogers_satchell,
    rogers_satchell_bar,
    yang_zhang,
    yang_zhang_weight,
)

Array = npt.NDArray[np.float64]

HALF_LIFE = {name: 5 if name == "ewma" else None for name in ESTIMATORS}


def random_bars(count: int = 400, seed: int = 5) -> pd.DataFrame:
    """Bars that can be: nights and days of fat tails, ranges around them."""
    rng = np.random.default_rng(seed)
    night, day = 0.006 * rng.standard_t(4, count), 0.012 * rng.standard_t(4, count)
    close = np.log(100.0) + np.cumsum(night + day)
    open_ = close - day
    high = np.maximum(open_, close) + 0.005 * rng.random(count)
    low = np.minimum(open_, close) - 0.005 * rng.random(count)
    columns = {"open": open_, "high": high, "low": low, "close": close}
    return np.exp(pd.DataFrame(columns, index=pd.bdate_range("2021-01-04", periods=count)))


# ---------------------------------------------------------------- published values


def test_one_bar() -> None:
    """Open 100, high 105, low 98, close 103: recomputed from the three papers' formulas apart from the product."""
    o, h, l, c = (np.array(v) for v in (100.0, 105.0, 98.0, 103.0))  # noqa: E741
    assert float(parkinson_bar(h, l)) == pytest.approx(0.00171681, abs=5e-9)
    assert float(garman_klass_bar(o, h, l, c)) == pytest.approx(0.00204249, abs=5e-9)
    assert float(rogers_satchell_bar(o, h, l, c)) == pytest.approx(0.00194362, abs=5e-9)


@pytest.mark.parametrize(("window", "k"), [(10, 0.13270), (21, 0.13934), (63, 0.14332), (252, 0.14481)])
def test_weight_of_yang_and_zhang(window: int, k: float) -> None:
    assert yang_zhang_weight(window) == pytest.approx(k, abs=5e-6)


# ---------------------------------------------------------------- by hand, in logarithms of prices


def test_closes_by_hand() -> None:
    # log returns +.01 -.01 +.03: the first two have mean 0 and variance (.0001 + .0001) / 1, the last two mean .01
    # and variance .0004 + .0004
    close = np.exp([0.0, 0.01, 0.0, 0.03])
    expected = [np.nan, np.nan, (2e-4 * 252) ** 0.5, (8e-4 * 252) ** 0.5]
    np.testing.assert_allclose(close_to_close(close, window=2), expected, rtol=1e-12)


def test_exponential_weights_by_hand() -> None:
    # half-life 2: decay .5^(1/2). Squared returns in units of 1e-4: 1, 9 | 4, 0, 16. Start (1 + 9)/2 = 5; then
    # 5 d + 4 (1 - d), and so on
    close = np.exp([0.0, 0.01, -0.02, 0.0, 0.0, 0.04])
    d = math.sqrt(0.5)
    first = 5.0
    second = 5.0 * d + 4.0 * (1.0 - d)
    third = second * d
    fourth = third * d + 16.0 * (1.0 - d)
    found = exponentially_weighted(close, half_life=2, window=2)
    expected = [np.nan, np.nan, *(math.sqrt(v * 1e-4 * 252) for v in (first, second, third, fourth))]
    np.testing.assert_allclose(found, expected, rtol=1e-12)
    # two half-lives later a quarter of a shock is left
    quiet = exponentially_weighted(np.exp([0.0, 0.02, 0.02, 0.02]), half_life=1, window=1)
    assert (quiet[3] / quiet[1]) ** 2 == pytest.approx(0.25, rel=1e-12)


# three bars in logarithms: open, high, low, close
BARS = np.array(
    [
        [0.00, 0.02, -0.01, 0.01],
        [0.02, 0.03, 0.00, 0.00],
        [-0.01, 0.03, -0.01, 0.03],
    ]
)
O, H, L, C = np.exp(BARS.T)  # noqa: E741


def annual(*variances: float) -> list[float]:
    return [math.sqrt(v * 252.0) if v == v else math.nan for v in variances]


def test_parkinson_by_hand() -> None:
    # ranges .03, .03, .04: squares 9, 9, 16 in units of 1e-4
    four_ln_2 = 4.0 * math.log(2.0)
    expected = annual(math.nan, 9e-4 / four_ln_2, 12.5e-4 / four_ln_2)
    np.testing.assert_allclose(parkinson(H, L, window=2), expected, rtol=1e-12)


def test_garman_klass_by_hand() -> None:
    # open to close .01, -.02, .04: squares 1, 4, 16 in units of 1e-4
    c = 2.0 * math.log(2.0) - 1.0
    expected = annual(math.nan, (4.5 - c * 2.5) * 1e-4, (6.25 - c * 10.0) * 1e-4)
    np.testing.assert_allclose(garman_klass(O, H, L, C, window=2), expected, rtol=1e-12)


def test_rogers_satchell_by_hand() -> None:
    # (H-C)(H-O) + (L-C)(L-O) in units of 1e-4: 1*2 + 2*1 = 4; 3*1 + 0*2 = 3; 0*4 + 4*0 = 0
    expected = annual(math.nan, 3.5e-4, 1.5e-4)
    np.testing.assert_allclose(rogers_satchell(O, H, L, C, window=2), expected, rtol=1e-12)


def test_yang_zhang_by_hand() -> None:
    # window 2: k = .34 / (1.34 + 3). Nights .01 and -.01: variance 2e-4. Days -.02 and .04: mean .01, variance
    # 9e-4 + 9e-4. Rogers-Satchell of the last two bars 1.5e-4
    k = 0.34 / 4.34
    expected = annual(math.nan, math.nan, 2e-4 + k * 18e-4 + (1 - k) * 1.5e-4)
    np.testing.assert_allclose(yang_zhang(O, H, L, C, window=2), expected, rtol=1e-12)


# ---------------------------------------------------------------- pandas


def by_pandas(estimator: str, bars: pd.DataFrame, n: int) -> pd.Series:
    """Each estimator from the papers' formulas by the means of pandas."""
    log = np.log(bars)
    o, h, l, c = (log[name] for name in ("open", "high", "low", "close"))  # noqa: E741
    returns = c.diff()
    rs = ((h - c) * (h - o) + (l - c) * (l - o)).rolling(n).mean()
    k = 0.34 / (1.34 + (n + 1) / (n - 1))
    # the start, then the squares behind it, in pandas' own recursion
    squares = returns.pow(2)
    seeded = squares.copy()
    seeded.iloc[:n] = np.nan
    seeded.iloc[n] = squares.iloc[1 : n + 1].mean()
    variance = {
        "close": returns.rolling(n).var(ddof=1),
        "ewma": seeded.ewm(halflife=5, adjust=False).mean(),
        "parkinson": (h - l).pow(2).rolling(n).mean() / (4 * math.log(2)),
        "garman-klass": (0.5 * (h - l).pow(2) - (2 * math.log(2) - 1) * (c - o).pow(2)).rolling(n).mean(),
        "rogers-satchell": rs,
        "yang-zhang": (o - c.shift()).rolling(n).var(ddof=1) + k * (c - o).rolling(n).var(ddof=1) + (1 - k) * rs,
    }
    return (variance[estimator] * 252.0).pow(0.5)


@pytest.mark.parametrize("window", [2, 21, 63, 252])
@pytest.mark.parametrize("estimator", ESTIMATORS)
def test_against_pandas(estimator: str, window: int) -> None:
    bars = random_bars()
    found = realised_vol(Market.from_frame(bars), estimator, window, HALF_LIFE[estimator])
    # nothing before the window is full: where returns are read, the first of them needs one close more
    first = window - 1 if estimator in ("parkinson", "garman-klass", "rogers-satchell") else window
    assert np.isnan(found[:first]).all()
    assert np.isfinite(found[first:]).all()
    np.testing.assert_allclose(found, by_pandas(estimator, bars, window), rtol=1e-9)


def test_the_last_window_by_numpy() -> None:
    close = random_bars()["close"].to_numpy()
    for window in (2, 21, 63, 252):
        expected = np.std(np.diff(np.log(close[-window - 1 :])), ddof=1) * 252**0.5
        assert close_to_close(close, window)[-1] == pytest.approx(expected, rel=1e-12)


# ---------------------------------------------------------------- simulated


class Simulated:
    """Bars of geometric Brownian motion with exact highs and lows: between steps those of a bridge are drawn."""

    variance = 1.2e-4
    night = 0.4e-4

    def __init__(self, days: int, drift: float = 0.0, steps: int = 64) -> None:
        rng = np.random.default_rng(11)
        step = self.variance / steps
        moves = rng.normal(drift / steps, math.sqrt(step), (days, steps))
        path = np.concatenate([np.zeros((days, 1)), np.cumsum(moves, axis=1)], axis=1)
        a, b = path[:, :-1], path[:, 1:]
        reach = np.sqrt((b - a) ** 2 - 2.0 * step * np.log(rng.random((2, days, steps))))
        nights = rng.normal(0.0, math.sqrt(self.night), days)
        opens = np.cumsum(nights + path[:, -1]) - path[:, -1]
        self.open = np.exp(opens)
        self.close = np.exp(opens + path[:, -1])
        self.high = np.exp(opens + ((a + b + reach[0]) / 2).max(axis=1))
        self.low = np.exp(opens + ((a + b - reach[1]) / 2).min(axis=1))

    @property
    def bars(self) -> tuple[Array, Array, Array, Array]:
        return self.open, self.high, self.low, self.close


DAYS = 30_000


def assert_mean(values: Array, expected: float) -> None:
    """Within four standard errors, which are themselves under a fiftieth of the value: 10% off would show."""
    error = values.std(ddof=1) / math.sqrt(len(values))
    assert error < expected / 50
    assert abs(values.mean() - expected) < 4 * error


@pytest.mark.parametrize(
    ("bar", "drift"),
    [
        (lambda s: parkinson_bar(s.high, s.low), 0.0),
        (lambda s: garman_klass_bar(*s.bars), 0.0),
        (lambda s: rogers_satchell_bar(*s.bars), 0.0),
        (lambda s: rogers_satchell_bar(*s.bars), 0.01),
    ],
    ids=["parkinson", "garman-klass", "rogers-satchell", "rogers-satchell with drift"],
)
def test_bars_are_unbiased(bar: Callable[[Simulated], Array], drift: float) -> None:
    """They measure the hours of trading: the night is not in them. The drift is about a daily deviation."""
    assert_mean(bar(Simulated(DAYS, drift)), Simulated.variance)


def test_a_drift_lifts_those_that_take_none() -> None:
    simulated = Simulated(DAYS, drift=0.01)
    assert parkinson_bar(simulated.high, simulated.low).mean() > 1.3 * Simulated.variance
    assert garman_klass_bar(*simulated.bars).mean() > 1.02 * Simulated.variance


@pytest.mark.parametrize("drift", [0.0, 0.01])
def test_yang_zhang_is_unbiased_and_sees_the_night(drift: float) -> None:
    window = 10
    apart = yang_zhang(*Simulated(DAYS, drift).bars, window)[window::window]
    assert_mean(apart**2 / 252.0, Simulated.variance + Simulated.night)


def test_closes_are_unbiased() -> None:
    window = 10
    close = Simulated(DAYS, drift=0.01).close
    assert_mean(close_to_close(close, window)[window::window] ** 2 / 252.0, Simulated.variance + Simulated.night)
    # far from the start, with weights that spread over some fifteen days
    weighted = exponentially_weighted(Simulated(DAYS).close, 10, window)[60::60]
    assert_mean(weighted**2 / 252.0, Simulated.variance + Simulated.night)


def test_yang_zhang_errs_least() -> None:
    """What it is for: of ten days it makes as much as closes of several times as many."""
    window, simulated = 10, Simulated(DAYS)
    yz = yang_zhang(*simulated.bars, window)[window::window] ** 2
    closes = close_to_close(simulated.close, window)[window::window] ** 2
    assert closes.var() > 3 * yz.var()
