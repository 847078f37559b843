"""Rung: identity. What the greeks of each option must be to one another, on random overlays of the whole language.

Black and Scholes's equation ties theta to gamma, delta and value, at the option's own vol; vega is gamma times vol and
time; rho is time times what the option borrows. All three are relations of prices, whatever the account holds.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt
from hypothesis import event, given
from hypothesis import strategies as st

from backtest import Replay

from .language_strategies import language_scenarios
from .strategies import FEWER, RICH, Scenario, scenarios, solvent_days
from .test_invariance import in_another_unit

Array = npt.NDArray[np.float64]
TIGHT = 1e-12


def own_vols(found: Replay, row: int) -> tuple[Array, Array, Array]:
    """Days on which a leg holds an option; years to its expiry, and the vol of its strike."""
    days, state = found.held_days(row)
    return days, state.tau_years, state.stdev(found.legs[row].daily_strike[days]) / np.sqrt(state.tau_years)


@RICH
@given(scenario=st.one_of(scenarios(), language_scenarios()))
def test_the_greeks_of_every_leg_fit_together(scenario: Scenario) -> None:
    found = scenario.run()
    solvent = np.zeros(len(found), dtype=bool)
    solvent[solvent_days(found)] = True
    rate, carry = (values[found.window] for values in (found.market.rate, found.market.dividend_yield))
    greeks = found.greeks
    for row, leg in enumerate(found.legs):
        days, years, vol = own_vols(found, row)
        inside = solvent[days]
        days, years, vol = days[inside], years[inside], vol[inside]
        assert (years > 0).all()
        gamma, vega, theta, rho = (getattr(greeks, name)[row, days] for name in ("gamma", "vega", "theta", "rho"))
        delta, value = found.leg_dollar_delta[row, days], found.leg_value[row, days] / found.wealth[days]
        count = np.abs(leg.count[days] * found.spot[days] / found.wealth[days])
        r, q = rate[days], carry[days]
        bend = 100 * gamma  # S^2 V'' over wealth
        known = ~np.isnan(vol)
        event("flat days" if leg.flat.any() else "never flat")

        def check(actual: Array, expected: Array, floor: Array, known: Array = known) -> None:
            excess = np.abs(actual - expected) - TIGHT * np.abs(expected) - TIGHT * floor
            assert (excess[known] <= 0).all()

        check(365 * theta, r * value - (r - q) * delta - 0.5 * vol**2 * bend, vol**2 * np.abs(bend) + count)
        # products, which need no floor but that of the smallest numbers there are
        check(100 * vega, vol * years * bend, np.full(len(days), 1e-280))
        check(100 * rho, years * (delta - value), years * count)
        side = np.sign(leg.leg.direction * leg.count[days])
        assert (side * gamma >= 0).all()
        assert (side * vega >= 0).all()
        assert (side * leg.leg.sign * rho >= 0).all()
        for name in ("gamma", "vega", "theta", "rho"):
            assert not getattr(greeks, name)[row, leg.flat & solvent].any()
            if leg.leg.held_ratio == 0.0:
                assert not getattr(greeks, name)[row, solvent].any()


@FEWER
@given(scenario=scenarios(), factor=st.sampled_from([0.01, 10.0, 731.0]))
def test_prices_times_a_factor_change_no_greek(scenario: Scenario, factor: float) -> None:
    """They are money per unit of wealth, so the unit of the prices is in none of them."""
    one, other = scenario.run(), in_another_unit(scenario, factor).run()
    days = solvent_days(one)
    for name, values in one.greeks.package().items():
        scale = max(np.max(np.abs(getattr(one.greeks, name)[:, days]), initial=0.0), 1e-12)
        # an option on its last day turns within a fraction of a percent: roundings of the strike weigh there
        np.testing.assert_allclose(other.greeks.package()[name][days], values[days], rtol=1e-9, atol=1e-9 * scale)
