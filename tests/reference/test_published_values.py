"""Rung: published value. Printed figures of books and papers against the formulas that the engine uses (C5, C11).

Each row is good to half a unit of its last printed digit, and that is the tolerance. "Haug" is E. G. Haug, *The
Complete Guide to Option Pricing Formulas*, read in a published copy and worked again independently. "Hull" is J. C.
Hull, *Options, Futures, and Other Derivatives*, from memory: its rows stand only because they agree.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt
import pytest
from scipy.special import ndtri

from backtest.analytics.performance import leland, regression_beta
from backtest.pricing.black import EuropeanValues, black, european

Array = npt.NDArray[np.float64]


def half_a_digit(printed: str) -> float:
    """Half a unit of the last printed decimal: ``"2.1334"`` is good to 0.00005."""
    return 0.5 * 10.0 ** -len(printed.partition(".")[2])


def option(right: str, s: float, k: float, tau: float, r: float, q: float, vol: float) -> EuropeanValues:
    sign = {"call": 1.0, "put": -1.0}[right]
    return european(spot=s, strike=k, tau_years=tau, rate=r, dividend_yield=q, vol_annual=vol, sign=sign)


# an option on a future has its rate for a yield (b = 0), one on a currency the foreign rate

PRINTED = [
    # what and whose                          right   S     K     tau    r    q    vol    figure  printed
    ("Haug, Black-Scholes 1973",              "call", 60,   65,   0.25, .08, .00, .30, "value", "2.1334"),
    ("Haug, Merton 1973, stock index",        "put",  100,  95,   0.50, .10, .05, .20, "value", "2.4648"),
    ("Haug, Black 1976",                      "call", 19,   19,   0.75, .10, .10, .28, "value", "1.7011"),
    ("Haug, Black 1976",                      "put",  19,   19,   0.75, .10, .10, .28, "value", "1.7011"),
    ("Haug, Garman-Kohlhagen 1983, currency", "call", 1.56, 1.60, 0.50, .06, .08, .12, "value", "0.0291"),
    ("Haug, generalised",                     "put",  75,   70,   0.50, .10, .05, .35, "value", "4.0870"),
    ("Haug, generalised",                     "call", 42,   40,   0.75, .04, .08, .35, "value", "5.0975"),
    ("Haug, delta, future",                   "call", 105,  100,  0.50, .10, .10, .36, "delta", "0.5946"),
    ("Haug, delta, future",                   "put",  105,  100,  0.50, .10, .10, .36, "delta", "-0.3566"),
    ("Haug, gamma",                           "call", 55,   60,   0.75, .10, .00, .30, "gamma", "0.0278"),
    ("Haug, gamma",                           "put",  55,   60,   0.75, .10, .00, .30, "gamma", "0.0278"),
    ("Haug, vega",                            "call", 55,   60,   0.75, .10, .00, .30, "vega",  "18.9358"),
    ("Haug, vega",                            "put",  55,   60,   0.75, .10, .00, .30, "vega",  "18.9358"),
    ("Haug, theta a year",                    "put",  430,  405,  1/12, .07, .05, .20, "theta", "-31.1924"),
    ("Haug, rho",                             "call", 72,   75,   1.00, .09, .00, .19, "rho",   "38.7325"),
    ("Hull (from memory)",                    "call", 42,   40,   0.50, .10, .00, .20, "value", "4.76"),
    ("Hull (from memory)",                    "put",  42,   40,   0.50, .10, .00, .20, "value", "0.81"),
    ("Hull, 20 weeks (from memory)",          "call", 49,   50,  20/52, .05, .00, .20, "value", "2.40"),
    ("Hull, 20 weeks (from memory)",          "call", 49,   50,  20/52, .05, .00, .20, "delta", "0.522"),
    ("Hull, 20 weeks (from memory)",          "call", 49,   50,  20/52, .05, .00, .20, "gamma", "0.066"),
    ("Hull, 20 weeks (from memory)",          "call", 49,   50,  20/52, .05, .00, .20, "vega",  "12.1"),
    ("Hull, 20 weeks (from memory)",          "call", 49,   50,  20/52, .05, .00, .20, "theta", "-4.31"),
    ("Hull, 20 weeks (from memory)",          "call", 49,   50,  20/52, .05, .00, .20, "rho",   "8.91"),
]  # fmt: skip


@pytest.mark.parametrize(
    ("right", "s", "k", "tau", "r", "q", "vol", "figure", "printed"),
    [pytest.param(*row[1:], id=f"{row[0]}, {row[8]} of a {row[1]}") for row in PRINTED],
)
def test_european_options(
    right: str, s: float, k: float, tau: float, r: float, q: float, vol: float, figure: str, printed: str
) -> None:
    found = float(getattr(option(right, s, k, tau, r, q, vol), figure))
    assert found == pytest.approx(float(printed), abs=half_a_digit(printed), rel=0)


def test_the_same_table_in_one_call() -> None:
    """The rows as arrays give what they give one by one, bit for bit."""
    rows = [row for row in PRINTED if row[8] == "value"]
    right = np.where(np.array([row[1] for row in rows]) == "call", 1.0, -1.0)
    s, k, tau, r, q, vol = np.array([row[2:8] for row in rows], dtype=np.float64).T
    together = european(spot=s, strike=k, tau_years=tau, rate=r, dividend_yield=q, vol_annual=vol, sign=right)
    one_by_one = [option(*row[1:8]) for row in rows]
    for figure in EuropeanValues._fields:
        np.testing.assert_array_equal(getattr(together, figure), [getattr(one, figure) for one in one_by_one])


@pytest.mark.parametrize("sign", [1.0, -1.0], ids=["call", "put"])
def test_black_76_discounted_by_hand(sign: float) -> None:
    # Haug's row above from the bare formula: F = K = 19, vol .28, 9 months, discounted at 10%
    value = float(black(19.0, 19.0, 0.28 * 0.75**0.5, sign)) * np.exp(-0.075)
    assert value == pytest.approx(1.7011, abs=5e-5, rel=0)


# ---------------------------------------------------------------- Leland 1999

# Leland (1999), "Beyond mean-variance: performance measurement in a nonsymmetrical world", Financial Analysts Journal
# 55(1): a lognormal market of one year with mean 12% and deviation 15%, cash at 5%, every option at its fair price.
# Figures computed independently, four decimals (alphas five); b = 3.63027, and a fair package has no Leland alpha.
MEAN, DEVIATION, CASH = 0.12, 0.15, 0.05
PACKAGES = {
    # put bought, call sold: CAPM beta, CAPM alpha, Leland beta
    "at-the-money covered call": (None, 100.0, 0.1769, 0.00672, 0.2728),
    "stock plus 95 put": (95.0, None, 0.8993, -0.00418, 0.8396),
    "95/110 collar": (95.0, 110.0, 0.3138, 0.00427, 0.3749),
}


def one_year_market(points: int = 400_001) -> tuple[Array, float]:
    """Equally likely prices from 100, at the middles of slices of equal probability, and the variance of their logs."""
    variance = float(np.log1p((DEVIATION / (1.0 + MEAN)) ** 2))
    z = ndtri((np.arange(points) + 0.5) / points)
    return 100.0 * np.exp(np.log1p(MEAN) - 0.5 * variance + variance**0.5 * z), variance


def test_leland_power() -> None:
    # b = (ln 1.12 - ln 1.05) / ln(1 + (.15/1.12)^2), printed with five decimals
    _, variance = one_year_market(11)
    assert (np.log1p(MEAN) - np.log1p(CASH)) / variance == pytest.approx(3.63027, abs=5e-6, rel=0)


@pytest.mark.parametrize(
    ("put", "call", "capm_beta", "capm_alpha", "leland_beta"),
    [pytest.param(*row, id=name) for name, row in PACKAGES.items()],
)
def test_leland_1999(
    put: float | None, call: float | None, capm_beta: float, capm_alpha: float, leland_beta: float
) -> None:
    end, variance = one_year_market()
    paid, worth = 100.0, end.copy()
    for strike, right, held in ((put, "put", 1.0), (call, "call", -1.0)):
        if strike is not None:
            sign = {"call": 1.0, "put": -1.0}[right]
            fair = option(right, 100.0, strike, 1.0, np.log1p(CASH), 0.0, variance**0.5)
            paid += held * float(fair.value)
            worth += held * np.maximum(sign * (end - strike), 0.0)
    own, market, cash = worth / paid - 1.0, end / 100.0 - 1.0, np.full(end.shape, CASH)

    beta = regression_beta(own - CASH, market - CASH)
    assert beta == pytest.approx(capm_beta, abs=5e-5, rel=0)
    assert own.mean() - CASH - beta * (market.mean() - CASH) == pytest.approx(capm_alpha, abs=5e-6, rel=0)

    # the product takes monthly returns and gives a year's alpha: these are yearly ones
    beta, twelve_alphas = leland(own, market, cash)
    assert beta == pytest.approx(leland_beta, abs=5e-5, rel=0)
    # nil up to what the slices leave out of the tails
    assert twelve_alphas / 12.0 == pytest.approx(0.0, abs=5e-6)
