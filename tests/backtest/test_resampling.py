"""Paired stationary bootstrap (C13).

Rung: twin (every resample worked out one at a time with the single-path figures of C11), identity (pairing, seeds),
hand-worked and behaviour. How the days are drawn is tested in test_bootstrap_draws.py.
"""

from __future__ import annotations

import tracemalloc
from dataclasses import asdict, replace
from typing import Any

import numpy as np
import numpy.typing as npt
import pytest
from scipy.signal import lfilter

from backtest.analytics import deepest_drawdown
from backtest.analytics.block_length import optimal_block_length
from backtest.analytics.performance import (
    annual_return,
    annual_volatility,
    expected_shortfall,
    regression_beta,
    sharpe_ratio,
)
from backtest.analytics.resampling import (
    FEWEST_DAYS,
    RESAMPLES_PER_STREAM,
    Inference,
    independent_payoffs,
    paired_bootstrap,
    stationary_indices,
)
from backtest.analytics.sharpe_tests import ledoit_wolf_sharpe_difference
from backtest.errors import BacktestError

Array = npt.NDArray[np.float64]
FIGURES = ("annual_return", "sharpe", "max_drawdown", "shortfall_21_day")
NAN = float("nan")


def history(days: int, seed: int = 0) -> dict[str, Array]:
    """Hold, overlay, a mix and cash with fat tails, spells of volatility and cash returns that change."""
    rng = np.random.default_rng(seed)
    spell = np.exp(0.5 * lfilter([0.3], [1.0, -0.95], rng.normal(size=days)))
    hold = 0.0004 + 0.008 * spell * rng.standard_t(6, size=days)
    cash = 0.0001 * (1.0 + np.sin(np.arange(days) / 40.0))
    overlay = cash + 0.5 * (hold - cash) + 0.002 * rng.normal(size=days) - 0.0001
    return {"hold": hold, "overlay": overlay, "cash": cash, "mix": cash + 0.5 * (hold - cash)}


def infer(data: dict[str, Array], *, seed: int = 1, **settings: Any) -> Inference:
    settings = {
        "comparisons": {"hold": data["hold"], "mix": data["mix"]},
        "resamples": 40,
        "block_length": 15.0,
        **settings,
    }
    return paired_bootstrap(
        overlay_returns=data["overlay"],
        hold_excess=data["hold"] - data["cash"],
        cash=data["cash"],
        rng=np.random.default_rng(seed),
        **settings,
    )


def drawn_days(days: int, block_length: float, resamples: int, seed: int = 1) -> npt.NDArray[np.int32]:
    streams = np.random.default_rng(seed).spawn(-(-resamples // RESAMPLES_PER_STREAM))
    rows = [stationary_indices(days, block_length, RESAMPLES_PER_STREAM, child) for child in streams]
    return np.concatenate(rows)[:resamples]


def plain_figures(returns: Array, cash: Array) -> tuple[float, float, float, float]:
    """Figures of C11 of one path, its days so laid that 252 of them are a year of 365.25 days."""
    wealth = np.concatenate([[1.0], np.cumprod(1.0 + returns)])
    span = len(returns) / 252 * 365.25 * 86_400
    dates = np.datetime64("2000-01-01T00:00:00") + np.array([0, round(span)]).astype("timedelta64[s]")
    months = wealth[21::21] / wealth[:-21:21] - 1.0
    return (
        annual_return(wealth[[0, -1]], dates),
        float(sharpe_ratio(returns - cash)),
        deepest_drawdown(wealth).depth,
        expected_shortfall(months[: len(returns) // 21]),
    )


@pytest.mark.parametrize(("resamples", "level"), [(1, 0.9), (37, 0.9), (40, 0.5)], ids=["one", "part", "whole"])
@pytest.mark.parametrize("days", [200, 1260], ids=["under a year", "five years"])
def test_every_resample_has_the_figures_of_a_single_path(days: int, resamples: int, level: float) -> None:
    data = history(days)
    found = infer(data, resamples=resamples, level=level)
    market = data["hold"] - data["cash"]
    own: dict[str, list[float]] = {name: [] for name in ("volatility", "beta", "alpha")}
    plain: dict[str, list[tuple[float, ...]]] = {name: [] for name in ("overlay", "hold", "mix")}
    rows = drawn_days(days, 15.0, resamples)
    for row in (np.arange(days), *rows):  # the history itself first
        for name, paths in plain.items():
            paths.append(plain_figures(data[name][row], data["cash"][row]))
        excess = (data["overlay"] - data["cash"])[row]
        own["volatility"].append(float(annual_volatility(data["overlay"][row])))
        own["beta"].append(regression_beta(excess, market[row]))
        own["alpha"].append(252 * float(np.mean(excess) - own["beta"][-1] * np.mean(market[row])))
    ends = [(1 - level) / 2, (1 + level) / 2]

    def check(interval: Any, figures: Array) -> None:
        expected = [figures[0], *np.quantile(figures[1:], ends)]
        assert [interval.value, interval.low, interval.high] == pytest.approx(expected, rel=1e-10, abs=1e-12)

    for name, values in own.items():
        check(getattr(found.overlay, name), np.array(values))
    of = {name: np.array(paths) for name, paths in plain.items()}
    for column, name in enumerate(FIGURES):
        check(getattr(found.overlay, name), of["overlay"][:, column])
        for other in ("hold", "mix"):
            check(getattr(found.comparisons[other], name), (of["overlay"] - of[other])[:, column])
    for other in ("hold", "mix"):
        share = np.mean((of["overlay"] - of[other])[1:] > 0, axis=0)
        one = found.comparisons[other]
        assert one.probability_higher_return == share[0]
        assert one.probability_higher_sharpe == share[1]
        assert one.probability_shallower == share[2]
        assert one.sharpe_test == ledoit_wolf_sharpe_difference(
            data["overlay"] - data["cash"], data[other] - data["cash"], level=level
        )
    assert (found.days, found.resamples, found.level, found.reason) == (days, resamples, level, None)


def test_signs_and_figures_by_hand() -> None:
    # 63 days: hold loses 10% once and then gains 1% once; the overlay half of that; cash earns nothing. Blocks so
    # long that every resample is the history turned round: the total, not annualised, is the same in all of them.
    hold = np.zeros(63)
    hold[[10, 40]] = -0.10, 0.01
    data = {"hold": hold, "overlay": hold / 2, "mix": hold, "cash": np.zeros(63)}
    found = infer(data, block_length=1e15)
    less = found.comparisons["hold"]
    # .95 1.005 - .9 1.01 = .95475 - .909; drawdowns .05 and .10, or, the other way round, the same;
    # of three stretches one is averaged: -.05 against -.10, in the history
    assert [less.annual_return.value, less.annual_return.low, less.annual_return.high] == pytest.approx([0.04575] * 3)
    assert [less.max_drawdown.value, less.max_drawdown.low, less.max_drawdown.high] == pytest.approx([0.05] * 3)
    assert found.overlay.max_drawdown.value == pytest.approx(-0.05, rel=1e-13)
    assert less.shortfall_21_day.value == pytest.approx(0.05, rel=1e-13)
    assert (less.probability_higher_return, less.probability_shallower) == (1.0, 1.0)


def test_all_series_and_cash_are_drawn_together() -> None:
    # the overlay is the mix in other words: drawn apart, beta, alpha and Sharpe ratios would scatter
    data = history(500)
    data["overlay"] = data["cash"] + 0.5 * (data["hold"] - data["cash"])
    found = infer(data)
    for interval, value in ((found.overlay.beta, 0.5), (found.overlay.alpha, 0.0)):
        assert [interval.value, interval.low, interval.high] == pytest.approx([value] * 3, abs=1e-14)
    for other in ("hold", "mix"):
        sharpe = found.comparisons[other].sharpe
        assert [sharpe.value, sharpe.low, sharpe.high] == pytest.approx([0.0] * 3, abs=1e-12)
        assert found.comparisons[other].probability_higher_sharpe == 0.0
    assert found.overlay.sharpe.high - found.overlay.sharpe.low > 0.2


def test_equal_but_for_rounding_is_a_tie() -> None:
    data = history(500)
    data["overlay"] = (1.0 + data["hold"]) * (1.0 + 2e-16 * np.tile([1.0, -1.0], 250)) - 1.0
    assert not np.array_equal(data["overlay"], data["hold"])
    one = infer(data).comparisons["hold"]
    assert (one.probability_higher_return, one.probability_higher_sharpe, one.probability_shallower) == (0.0, 0.0, 0.0)


def test_same_seed_same_numbers_bit_for_bit() -> None:
    data = history(300)
    first = infer(data, resamples=45)
    assert asdict(infer(data, resamples=45)) == asdict(first)
    for workers in (1, 3):
        assert asdict(infer(data, resamples=45, workers=workers)) == asdict(first)
    assert infer(data, resamples=45, seed=2).overlay.sharpe != first.overlay.sharpe


def test_other_comparisons_change_no_draw() -> None:
    data = history(300)
    both = infer(data)
    turned = infer(data, comparisons={"mix": data["mix"], "cash": data["cash"], "hold": data["hold"]})
    assert turned.overlay == both.overlay
    assert turned.comparisons["hold"] == both.comparisons["hold"]
    assert infer(data, comparisons={}).overlay == both.overlay  # nor does one that shares a name with an input


def test_length_drawn_is_the_longest_asked_for() -> None:
    data = history(1000)
    found = infer(data, block_length=None)
    overlay, hold, mix = data["overlay"], data["hold"], data["mix"]
    series = {"overlay": overlay, "hold": hold, "mix": mix}
    series |= {"overlay less hold": overlay - hold, "overlay less mix": overlay - mix}
    series |= {f"{name}, squared": (values - values.mean()) ** 2 for name, values in series.items()}
    assert found.block_lengths == {name: pytest.approx(optimal_block_length(v)) for name, v in series.items()}
    assert found.block_length == max(found.block_lengths.values()) == found.block_lengths["overlay less hold, squared"]
    assert asdict(infer(data, block_length=found.block_length)) == asdict(replace(found, block_lengths={}))


def test_progress_is_told_in_order() -> None:
    told: list[tuple[int, int]] = []
    infer(history(100), resamples=25, progress=lambda done, of: told.append((done, of)))
    assert told == [(10, 25), (20, 25), (25, 25)]


def test_memory_does_not_grow_with_the_resamples() -> None:
    data = history(2000)
    peaks = []
    for resamples in (100, 1100):
        tracemalloc.start()
        infer(data, resamples=resamples, workers=1)
        peaks.append(tracemalloc.get_traced_memory()[1])
        tracemalloc.stop()
    # each further resample keeps 4 figures of 3 series and 3 of the overlay, twice over; its days alone would be 16 kB
    assert peaks[1] - peaks[0] < 1000 * 700
    assert peaks[0] < 100 * RESAMPLES_PER_STREAM * 2000


SHORT = history(FEWEST_DAYS - 1)
FULL = history(300)
MISSING = np.where(np.arange(300) == 7, np.nan, FULL["overlay"])
TOO_SHORT = "59 days of returns are too few to resample; at least 60 are needed"
GONE = "some returns of the overlay, of the hold or of cash are missing"
FLAT = "the overlay's or the hold's excess return does not vary, in the history or in a resample of it"


def numbers(found: Any) -> list[float]:
    """All numbers of nested figures, the test of the Sharpe ratios left out."""
    if isinstance(found, dict):
        return [x for name, value in found.items() if name != "sharpe_test" for x in numbers(value)]
    return [found] if isinstance(found, float) else []


@pytest.mark.parametrize(
    ("data", "reason"),
    [
        ({name: values[:0] for name, values in FULL.items()}, TOO_SHORT.replace("59", "0")),
        (SHORT, TOO_SHORT),
        ({**FULL, "overlay": MISSING}, GONE),
        ({**FULL, "hold": np.where(MISSING > 0, FULL["hold"], np.inf)}, GONE),
        ({**FULL, "cash": np.full(300, np.nan)}, GONE),
        ({**FULL, "overlay": np.full(300, np.inf), "cash": np.full(300, np.inf)}, GONE),
        (
            {**FULL, "overlay": np.where(np.isnan(MISSING), -1.0, MISSING)},
            "the overlay loses everything on one day, so its growth cannot be chained",
        ),
    ],
    ids=["empty", "short", "overlay missing", "hold infinite", "cash missing", "all infinite", "ruin"],
)
def test_nothing_but_a_reason(data: dict[str, Array], reason: str) -> None:
    found = infer(data, block_length=None)
    assert found.reason == reason
    assert np.isnan(numbers(asdict(found.overlay))).all()
    assert np.isnan(found.block_length)
    for one in found.comparisons.values():
        assert one.reason == reason
        assert np.isnan(numbers(asdict(one))).all()


@pytest.mark.parametrize(
    ("mix", "reason"),
    [
        (MISSING, "some returns of the comparison are missing"),
        (
            np.where(np.isnan(MISSING), -1.5, MISSING),
            "the comparison loses everything on one day, so its growth cannot be chained",
        ),
        (FULL["cash"], "the comparison's excess return does not vary, so it has no Sharpe ratio"),
    ],
    ids=["missing", "ruin", "cash itself"],
)  # fmt: skip
def test_one_bad_comparison_leaves_the_others_alone(mix: Array, reason: str) -> None:
    found = infer({**FULL, "mix": mix})
    assert found.reason is None
    assert found.overlay == infer(FULL).overlay
    assert found.comparisons["hold"] == infer(FULL).comparisons["hold"]
    assert found.comparisons["mix"].reason == reason
    assert np.isnan(found.comparisons["mix"].sharpe.low)
    assert np.isnan(found.comparisons["mix"].probability_higher_sharpe)
    assert np.isfinite(found.comparisons["mix"].annual_return.low) == ("vary" in reason)


def test_flat_series() -> None:
    still = infer({**FULL, "hold": FULL["cash"]})
    assert still.reason == FLAT
    assert np.isnan([still.overlay.beta.value, still.overlay.alpha.low]).all()
    assert np.isfinite([still.overlay.sharpe.low, still.comparisons["mix"].sharpe.high]).all()
    assert still.comparisons["mix"].reason is None
    in_cash = infer({**FULL, "overlay": FULL["cash"]}, block_length=None)
    assert in_cash.reason == in_cash.comparisons["hold"].reason == FLAT
    assert np.isnan(in_cash.comparisons["hold"].sharpe.value)
    assert np.isfinite(in_cash.comparisons["hold"].max_drawdown.low)
    assert in_cash.overlay.max_drawdown.value == 0.0
    nothing = {name: np.zeros(100) for name in FULL}
    assert infer(nothing, block_length=None).block_length == 1.0


@pytest.mark.parametrize(
    ("settings", "message"),
    [
        ({"resamples": 0}, "resamples is 0; it must be at least 1"),
        ({"block_length": 0.9}, "block_length is 0.9; it must be at least 1 day"),
        ({"block_length": NAN}, "block_length is nan"),
        ({"level": 1.0}, "level is 1.0; it must lie between 0 and 1"),
        ({"workers": 0}, "workers is 0; it must be at least 1"),
        ({"comparisons": {"other": np.zeros(7)}}, r"other has shape \(7,\); all series must .* \(300,\)"),
    ],
    ids=["resamples", "block", "block not a number", "level", "workers", "shape"],
)  # fmt: skip
def test_settings_out_of_range(settings: dict[str, Any], message: str) -> None:
    with pytest.raises(BacktestError, match=message):
        infer(FULL, **settings)


@pytest.mark.parametrize(
    ("settled", "times"),
    [
        ([], 0), ([0, 0], 0), ([1], 1), ([1, 2, 3], 1), ([1, 0, 1, 0], 2), ([0, 1, 1, 0, 0, 2, 0, 5, 6], 3),
        ([0, 1e-9], 1), ([1, NAN], 1), ([NAN], 0), ([0, NAN], 0),
    ],
    ids=str,
)  # fmt: skip
def test_independent_payoffs(settled: list[float], times: int) -> None:
    assert independent_payoffs(np.array(settled, dtype=np.float64)) == times
