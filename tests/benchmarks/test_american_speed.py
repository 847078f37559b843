"""Daily marks of one American option leg against European ones.

Rung: measurement. Processor seconds are printed, with the ratio to Black's formula for as many options; what is asked
is that 5,000 marks take less than a second on one core. Run with ``-s``.
"""

from __future__ import annotations

import time
from collections.abc import Callable

import numpy as np
import pytest

from backtest.pricing.american import CashDividends, american_value_and_delta
from backtest.pricing.black import black_with_delta
from backtest.pricing.implied import implied_stdev

DAYS = 5_000
TERM = 365
QUARTER = 91


def best_seconds(*functions: Callable[[], object], rounds: int = 5) -> list[float]:
    """Least processor seconds of each function, taken in turns."""
    best = [float("inf")] * len(functions)
    for _ in range(rounds):
        for number, function in enumerate(functions):
            began = time.process_time()
            function()
            best[number] = min(best[number], time.process_time() - began)
    return best


@pytest.mark.parametrize("sign", [-1.0, 1.0], ids=["put", "call"])
def test_daily_marks_of_a_leg(sign: float) -> None:
    """Options of up to a year one after another, a dividend a quarter, another rate and vol every day."""
    rng = np.random.default_rng(1)
    today = np.arange(float(DAYS))
    spot = 100.0 * np.exp(np.cumsum(rng.normal(0.0, 0.01, DAYS)))
    strike = np.repeat(spot[::TERM], TERM)[:DAYS]
    tau = (TERM - today % TERM) / 365.0
    rate, vol = rng.uniform(0.01, 0.06, DAYS), rng.uniform(0.15, 0.35, DAYS)
    stdev = vol * np.sqrt(tau)
    known = CashDividends.on_days(
        ex_days=np.arange(30.0, DAYS + TERM, QUARTER), amounts=0.01 * spot[:, None], today=today
    )
    forward = spot * np.exp(rate * tau)

    def american() -> object:
        return american_value_and_delta(spot, strike, tau, rate, 0.0, stdev, sign, known)

    def european() -> object:
        return black_with_delta(forward, strike, np.log(strike / forward), stdev, np.asarray(sign))

    price, _ = black_with_delta(forward, strike, np.log(strike / forward), stdev, np.asarray(sign))
    slow, fast, back = best_seconds(american, european, lambda: implied_stdev(price, forward, strike, sign))
    print(
        f"\n{DAYS:,} American marks {slow:.2f} s, {slow / fast:,.0f} times Black's {1e3 * fast:.2f} ms;"
        f" implied deviations {1e3 * back:.1f} ms"
    )
    assert slow < 1.0
