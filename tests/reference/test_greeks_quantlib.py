"""Rung: independent library. The package's greeks, day by day, against QuantLib's analytic European engine.

Each option held is priced by QuantLib with its own dates. Its vol is worked out here from the raw columns by the plain
Python of ``slow_prices.py`` (C7), rate and yield likewise (C5): nothing of the engine but the strikes, the expiries and
how many options it holds.
"""

from __future__ import annotations

import math

import numpy as np
import numpy.typing as npt
import pytest
import QuantLib as ql  # type: ignore[import-untyped]

from backtest import LegReplay, Replay

from .greek_cases import CASES, GreekCase
from .slow_prices import Contract, Pricer, Vols, history_from_frame, smile_total_variance

Array = npt.NDArray[np.float64]

#: Every so many days are priced one by one; of the first, and of those before an expiry, all.
STEP = 3
TODAY = ql.Date(2, 1, 2020)
COUNT = ql.Actual365Fixed()
GREEKS = ("delta", "gamma", "vega", "theta", "rho")


class QuantLibPrices:
    """One option at a time, in QuantLib."""

    def __init__(self) -> None:
        ql.Settings.instance().evaluationDate = TODAY
        self.spot, self.rate, self.carry, self.vol = (ql.SimpleQuote(0.1) for _ in range(4))
        process = ql.BlackScholesMertonProcess(
            ql.QuoteHandle(self.spot),
            ql.YieldTermStructureHandle(ql.FlatForward(TODAY, ql.QuoteHandle(self.carry), COUNT)),
            ql.YieldTermStructureHandle(ql.FlatForward(TODAY, ql.QuoteHandle(self.rate), COUNT)),
            ql.BlackVolTermStructureHandle(
                ql.BlackConstantVol(TODAY, ql.NullCalendar(), ql.QuoteHandle(self.vol), COUNT)
            ),
        )
        self.engine = ql.AnalyticEuropeanEngine(process)

    def money(self, right: str, strike: float, days: int, spot: float, rate: float, carry: float, vol: float) -> Array:
        """Delta of 100%, gamma of 1%, vega of a point, theta of a day, rho of a percentage point, of one option."""
        for quote, value in ((self.spot, spot), (self.rate, rate), (self.carry, carry), (self.vol, vol)):
            quote.setValue(value)
        kind = ql.Option.Call if right == "call" else ql.Option.Put
        option = ql.VanillaOption(ql.PlainVanillaPayoff(kind, strike), ql.EuropeanExercise(TODAY + days))
        option.setPricingEngine(self.engine)
        up = 0.01 * spot
        return np.array(
            [
                option.delta() * spot, option.gamma() * up * spot, option.vega() / 100, option.thetaPerDay(),
                option.rho() / 100,
            ]
        )  # fmt: skip


def mean_reverting(case: GreekCase, vols: Vols, t: int, tau: float) -> float:
    """C7's at-the-money total variance; the mean is that of all days so far, which are fewer than ten years."""
    so_far = [vols.atm_variances(day)[0][1] for day in range(t + 1)]
    mean, kappa = math.fsum(so_far) / len(so_far), case.volatility.kappa
    return tau * (mean + (so_far[-1] - mean) * (1 - math.exp(-kappa * tau)) / (kappa * tau))


def vol_of(case: GreekCase, pricer: Pricer, t: int, option: Contract) -> float:
    tau, shift = pricer.tau(t, option.expiry), case.volatility.shift(option.right)
    if case.volatility.term_structure == "flat":
        return pricer.sigma(t, option) + shift
    x = math.log(option.strike / pricer.forward(t, option.expiry))
    theta = mean_reverting(case, pricer.vols, t, tau)
    return math.sqrt(smile_total_variance(case.volatility.smile, theta, x) / tau) + shift


def looked_at(found: Replay) -> list[int]:
    ends = {int(day) - 1 for leg in found.legs for day in leg.closed}
    return sorted({*range(0, len(found), STEP), *ends} - {-1})


def held_on(found: Replay, leg: LegReplay, day: int) -> int | None:
    """The number of the option that the leg holds after the day's trades."""
    for roll in np.flatnonzero(leg.opened <= day)[::-1].tolist():
        live = leg.closed[roll] > day or (leg.schedule.live[roll] and leg.closed[roll] >= day)
        return roll if live else None
    return None


@pytest.mark.parametrize("case", CASES, ids=lambda case: case.name)
def test_greeks_of_the_package(case: GreekCase) -> None:
    found, prices = case.run(), QuantLibPrices()
    raw = history_from_frame(case.frame)
    pricer = Pricer(raw, Vols(raw, case.volatility))
    expected, largest = [], np.zeros(5)
    for day in looked_at(found):
        t, total = found.window.start + day, np.zeros(5)
        for leg, count in zip(found.legs, found.leg_count[:, day], strict=True):
            roll = held_on(found, leg, day)
            if roll is None or count == 0.0:
                continue
            expiry = leg.schedule.expiry_day[roll].astype("datetime64[D]").item()
            option = Contract(leg.leg.right, expiry, float(leg.strike[roll]))
            one = prices.money(
                option.right, option.strike, (expiry - raw.days[t]).days, raw.close[t], raw.rate[t],
                raw.dividend_yield[t], vol_of(case, pricer, t, option),
            )  # fmt: skip
            total += (count if leg.leg.position == "long" else -count) * one / found.wealth[day]
            largest = np.maximum(largest, np.abs(one * count))
        total[0] += found.shares[day] * raw.close[t] / found.wealth[day]
        expected.append(total)
    frame = found.to_frame().iloc[looked_at(found)]
    for number, name in enumerate(GREEKS):
        # a sum of options that cancel is as good as its parts
        np.testing.assert_allclose(
            frame[name], np.array(expected)[:, number], rtol=1e-10, atol=1e-11 * largest[number], err_msg=name
        )
    assert (largest > [0.1, 0.02, 0.0003, 0.0001, 0.0003]).all()
