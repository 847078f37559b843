"""Block length of the stationary bootstrap (C13).

Rung: independent library (arch), hand-worked (the closed form for a first-order autoregression; a series of eleven
numbers) and behaviour (degenerate series).
"""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt
import pytest
from arch.bootstrap import optimal_block_length as arch_block_length
from scipy.signal import lfilter

from backtest.analytics.block_length import block_length_formula, optimal_block_length

Array = npt.NDArray[np.float64]


def autoregression(rho: float, days: int, seed: int) -> Array:
    noise = np.random.default_rng(seed).normal(size=days + 500)
    return lfilter([1.0], [1.0, -rho], noise)[500:]


def clustered(days: int, seed: int) -> Array:
    rng = np.random.default_rng(seed)
    return 0.01 * np.exp(0.5 * lfilter([0.2], [1.0, -0.98], rng.normal(size=days))) * rng.standard_t(5, size=days)


SERIES = {
    "white noise, 200": np.random.default_rng(1).normal(size=200),
    "white noise, 5040": np.random.default_rng(2).normal(size=5040),
    "AR(1) .7, 200": autoregression(0.7, 200, 3),
    "AR(1) .3, 800": autoregression(0.3, 800, 4),
    "AR(1) -.5, 1000": autoregression(-0.5, 1000, 5),
    "AR(1) .98, 5040": autoregression(0.98, 5040, 6),
    "differences of noise, 200": np.diff(np.random.default_rng(10).normal(size=201)),
    "differences of noise, 30": np.diff(np.random.default_rng(0).normal(size=31)),
    "random walk, 300": np.cumsum(np.random.default_rng(7).normal(size=300)),
    "daily returns, 5040": clustered(5040, 8),
    "their squares": clustered(5040, 8) ** 2,
    "sine, 100": np.sin(np.arange(100.0) ** 2),
    "eleven days": np.random.default_rng(9).normal(size=11),
    "trend, 50": np.arange(50.0) ** 1.5,
    "one step": np.repeat([0.0, 1e-4], [250, 250]),
}


@pytest.mark.parametrize("name", SERIES)
def test_against_arch(name: str) -> None:
    expected = float(arch_block_length(SERIES[name])["stationary"].iloc[0])
    assert optimal_block_length(SERIES[name]) == pytest.approx(expected, rel=1e-10)


def test_against_arch_on_many_short_series() -> None:
    # short series stop at another lag with every small change of the rule
    rng = np.random.default_rng(12)
    for rho in np.repeat([-0.6, 0.0, 0.4, 0.9, 0.99], 80):
        series = autoregression(rho, int(rng.integers(11, 120)), int(rng.integers(2**31)))
        expected = float(arch_block_length(series)["stationary"].iloc[0])
        assert optimal_block_length(series) == pytest.approx(expected, rel=1e-9)


def test_the_series_cover_both_ends_of_the_rule() -> None:
    # or the comparison above would not see the ceiling, nor a length under a day
    lengths = {name: optimal_block_length(series) for name, series in SERIES.items()}
    assert lengths["differences of noise, 200"] == np.ceil(3 * np.sqrt(200))
    assert lengths["differences of noise, 30"] == 30 / 3
    assert min(lengths.values()) < 1
    assert len({round(length, 6) for length in lengths.values()}) > 8


@pytest.mark.parametrize(
    ("rho", "days", "printed"), [(0.7, 200, 11.47), (0.3, 800, 7.03)], ids=["rho .7, 200 days", "rho .3, 800 days"]
)
def test_closed_form_of_an_autoregression(rho: float, days: int, printed: float) -> None:
    # R(k) = rho^k gives g = 2 rho/(1-rho)^2 and s = (1+rho)/(1-rho), so (2 g^2 / (2 s^2) n)^(1/3) is
    # (2 rho/(1-rho^2))^(2/3) n^(1/3): 2.74510^(2/3) 200^(1/3) = 11.465; .65934^(2/3) 800^(1/3) = 7.033.
    # The constants before the correction of 2009 have another d and give other lengths.
    exact = (2 * rho / (1 - rho**2)) ** (2 / 3) * days ** (1 / 3)
    assert exact == pytest.approx(printed, abs=0.006)
    # the flat-top window is 1 up to half of its lags: with 400 of them nothing of rho^k is cut off
    assert block_length_formula(rho ** np.arange(401.0), days) == pytest.approx(exact, rel=1e-12)


def test_flat_top_window_by_hand() -> None:
    # lags 0 to 4, R = 1, .5, .25, .2, .1; h = 1, 1, 1, 2 (1 - 3/4) = .5, 0
    # g = 2 (1 .5 + 2 .25 + 3 .5 .2) = 2.6; s = 1 + 2 (.5 + .25 + .5 .2) = 2.7; 27 days: 3 (2.6/2.7)^(2/3)
    found = block_length_formula(np.array([1.0, 0.5, 0.25, 0.2, 0.1]), 27)
    assert found == pytest.approx(3 * (2.6 / 2.7) ** (2 / 3), rel=1e-14)


def test_no_length_is_long_enough_for_a_mean_without_error() -> None:
    # s = 1 + 2 (-.5) = 0
    assert block_length_formula(np.array([1.0, -0.5, 0.0]), 100) == float("inf")


@pytest.mark.parametrize("scale", [1e-160, 1e-8, 1e6, 1e150])
def test_neither_level_nor_scale_matters(scale: float) -> None:
    series = autoregression(0.5, 500, 11)
    expected = optimal_block_length(series)
    assert optimal_block_length(scale * series) == pytest.approx(expected, rel=1e-9)
    assert optimal_block_length(-scale * (series - 3.0)) == pytest.approx(expected, rel=1e-9)


DEGENERATE: dict[str, Any] = {
    "empty": [],
    "one day": [0.1],
    "ten days": np.random.default_rng(0).normal(size=10),
    "all zero": np.zeros(500),
    "constant, not a binary fraction": np.full(500, 0.1),
    "a day missing": np.append(np.random.default_rng(0).normal(size=500), np.nan),
    "a day infinite": np.append(np.random.default_rng(0).normal(size=500), np.inf),
}


@pytest.mark.parametrize("name", DEGENERATE)
def test_no_length_and_no_warning(name: str) -> None:
    assert np.isnan(optimal_block_length(np.asarray(DEGENERATE[name], dtype=np.float64)))
