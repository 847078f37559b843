"""Headline figures of many paths: those of the readable single-path functions.

Rung: twin (``performance`` and ``mix_wealth`` of one path at a time).
"""

from __future__ import annotations

import numpy as np
import pytest

from backtest.analytics.comparisons import mix_wealth
from backtest.analytics.headline import HEADLINE, MOMENTS, SameBetaMixes, headline_figures
from backtest.analytics.performance import annual_return, daily_excess, performance, sharpe_ratio


def made(days: int, overlays: int = 40, seed: int = 3) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
    """Paths that hold between nothing and one and a half of a hold, with noise of their own."""
    rng = np.random.default_rng(seed)
    dates = np.busday_offset("2001-03-16", np.arange(days), roll="forward")
    rate = np.concatenate([[0.0], 1e-4 + 5e-5 * np.sin(np.arange(days - 1) / 50)])
    market = 0.012 * rng.standard_t(4, days - 1) / np.sqrt(2) + 2e-4
    share = np.linspace(-0.2, 1.5, overlays)[:, np.newaxis]
    noise = 0.002 * rng.standard_normal((overlays, days - 1))
    grown = 1 + rate[1:] + share * (market - rate[1:]) + noise
    one = np.ones((overlays, 1))
    wealth = np.concatenate([one, np.cumprod(grown, axis=1)], axis=1)
    return wealth, np.concatenate([[1.0], np.cumprod(1 + market)]), rate, dates


@pytest.mark.parametrize("days", [3, 20, 252, 600, 5040])
def test_every_figure_is_that_of_the_single_path(days: int) -> None:
    wealth, hold, rate, dates = made(days)
    found = headline_figures(wealth, hold=hold, rate_return=rate, dates=dates)
    assert tuple(found) == HEADLINE + MOMENTS
    for row, path in enumerate(wealth):
        single = performance(path, dates=dates, rate_return=rate, hold=hold)
        for name in HEADLINE:
            # alpha and the ratios are small differences of larger sums
            assert found[name][row] == pytest.approx(getattr(single, name), rel=1e-9, abs=1e-13, nan_ok=True), name
        excess = daily_excess(path, rate)
        assert found["excess_mean"][row] == pytest.approx(excess.mean(), rel=1e-9, abs=1e-16)
        assert found["excess_deviation"][row] == pytest.approx(excess.std(ddof=1), rel=1e-9)


def test_it_does_not_matter_which_paths_stand_beside_it() -> None:
    wealth, hold, rate, dates = made(900, overlays=97)
    together = headline_figures(wealth, hold=hold, rate_return=rate, dates=dates)
    alone = headline_figures(wealth[41:42], hold=hold, rate_return=rate, dates=dates)
    for name in HEADLINE:
        assert together[name][41] == alone[name][0], name


def test_a_ruined_path_has_no_figures_and_spoils_no_other() -> None:
    wealth, hold, rate, dates = made(400, overlays=5)
    ruined = wealth.copy()
    ruined[2, 200:] = np.nan
    found = headline_figures(ruined, hold=hold, rate_return=rate, dates=dates)
    whole = headline_figures(wealth, hold=hold, rate_return=rate, dates=dates)
    for name in HEADLINE:
        assert np.isnan(found[name][2]), name
        keep = [0, 1, 3, 4]
        np.testing.assert_array_equal(found[name][keep], whole[name][keep], err_msg=name)


def test_cash_alone_has_no_ratio_and_no_fall() -> None:
    _, hold, rate, dates = made(400, overlays=1)
    cash = np.cumprod(1 + rate)[np.newaxis]
    found = headline_figures(cash, hold=hold, rate_return=rate, dates=dates)
    for name in ("sharpe", "sortino", "calmar"):
        assert np.isnan(found[name][0]), name
    assert found["max_drawdown"][0] == found["ulcer"][0] == 0
    assert abs(found["beta"][0]) < 1e-12
    # a hold that never moves against cash has no beta to be had
    flat = headline_figures(cash, hold=cash[0], rate_return=rate, dates=dates)
    assert np.isnan(flat["beta"][0])
    assert np.isnan(flat["alpha"][0])


@pytest.mark.parametrize("count", [3, 500])
@pytest.mark.parametrize("widest", [1.2, 6.0])
def test_the_same_beta_mix_is_that_of_its_path(count: int, widest: float) -> None:
    # by interpolation where many shares are far from ruin, else by sums
    _, hold, rate, dates = made(2600)
    shares = np.linspace(-0.3, widest, count)
    shares[-1] = np.nan
    found = SameBetaMixes(hold=hold, rate_return=rate, dates=dates).figures(shares)
    excess = daily_excess(hold, rate)
    for share, annual, sharpe in zip(shares[:-1], found["annual_return"], found["sharpe"], strict=False):
        path = mix_wealth(share, excess, rate[1:])
        if path.min() <= 0:
            assert np.isnan(annual)
            continue
        assert annual == pytest.approx(annual_return(path, dates), abs=1e-12)
        if abs(share) > 1e-3:
            assert sharpe == pytest.approx(float(sharpe_ratio(daily_excess(path, rate))), rel=1e-8)
    assert np.isnan(found["annual_return"][-1])
    assert np.isnan(found["sharpe"][-1])
