"""Rung: published value. Printed American values against the lattice, and against the formulas that printed them (C5).

"Haug" is E. G. Haug, *The Complete Guide to Option Pricing Formulas*. His tables of Barone-Adesi and Whaley (1987) and
Bjerksund and Stensland (1993) are of approximations. So each row is checked twice: the approximation in
``slow_american.py`` gives the printed figure, and the lattice, which has no such error, lies where that one's known
error allows. Rows "from memory" stand only because they agree.
"""

from __future__ import annotations

import numpy as np
import pytest

from backtest.pricing.american import CashDividends, american
from tests.reference.slow_american import (
    barone_adesi_whaley,
    bjerksund_stensland,
    call_with_one_dividend,
    cox_ross_rubinstein,
    leisen_reimer,
)

RIGHT = {1.0: "call", -1.0: "put"}


def lattice(
    s: float, k: float, tau: float, r: float, q: float, vol: float, sign: float,
    dividends: tuple[tuple[float, float], ...] = (),
) -> float:  # fmt: skip
    known = None
    if dividends:
        years, cash = np.array(dividends).T
        known = CashDividends(years=years, amounts=cash)
    found = american(
        spot=s, strike=k, tau_years=tau, rate=r, dividend_yield=q, total_stdev=vol * tau**0.5, sign=sign,
        dividends=known,
    )  # fmt: skip
    return float(found.value)


# ---------------------------------------------------------------- options on futures, Barone-Adesi and Whaley

# K 100, r .10, b 0, at S = 90, 100 and 110; read in a published copy of Haug
FUTURES = [
    (1.0, 0.1, 0.15, (0.0206, 1.8771, 10.0089)),
    (1.0, 0.5, 0.25, (2.7437, 6.8015, 13.0170)),
    (1.0, 0.5, 0.35, (5.0063, 9.5106, 15.5689)),
    (-1.0, 0.1, 0.25, (10.2533, 3.1277, 0.4562)),
    (-1.0, 0.5, 0.25, (12.4419, 6.8014, 3.3226)),
    (-1.0, 0.5, 0.35, (14.6945, 9.5104, 5.8823)),
]


@pytest.mark.parametrize(
    ("sign", "tau", "vol", "s", "printed"),
    [
        pytest.param(sign, tau, vol, s, value, id=f"{RIGHT[sign]} {tau} years vol {vol} at {s:.0f}")
        for sign, tau, vol, row in FUTURES
        for s, value in zip((90.0, 100.0, 110.0), row)
    ],
)
def test_futures_by_barone_adesi_and_whaley(sign: float, tau: float, vol: float, s: float, printed: float) -> None:
    # 0.003: what the table's own search for the price at which exercise begins leaves open
    assert barone_adesi_whaley(s, 100.0, tau, 0.10, 0.0, vol, sign) == pytest.approx(printed, abs=3e-3, rel=0)
    # A tree of 2,001 steps says that the approximation is up to 0.037 above or 0.007 below. The lattice sides with the
    # tree, to a hundred-thousandth of the strike.
    exact = leisen_reimer(s, 100.0, tau, 0.10, 0.10, vol, sign, 2001)
    assert lattice(s, 100.0, tau, 0.10, 0.10, vol, sign) == pytest.approx(exact, abs=1e-3, rel=0)
    assert -0.037 < exact - printed < 0.007


# ---------------------------------------------------------------- Bjerksund and Stensland

BJERKSUND_STENSLAND = [
    # S   K     tau   r    b     vol  sign  printed, read in Haug and worked again
    (42., 40., 0.75, .04, -.04, .35,  1.0, 5.2704),
    (36., 40., 1.00, .06,  .06, .20, -1.0, 4.4531),
]  # fmt: skip


@pytest.mark.parametrize(
    ("s", "k", "tau", "r", "b", "vol", "sign", "printed"), BJERKSUND_STENSLAND, ids=["call", "put"]
)
def test_bjerksund_and_stensland_1993(
    s: float, k: float, tau: float, r: float, b: float, vol: float, sign: float, printed: float
) -> None:
    assert bjerksund_stensland(s, k, tau, r, b, vol, sign) == pytest.approx(printed, abs=5e-5, rel=0)
    # exercise at one fixed price is one of the holder's choices: the best is worth more, and here not 1% more
    assert printed < lattice(s, k, tau, r, r - b, vol, sign) < 1.01 * printed


def test_above_bjerksund_and_stensland_everywhere() -> None:
    rng = np.random.default_rng(41)
    for _ in range(150):
        s, tau, vol = rng.uniform(80, 120), rng.uniform(0.02, 2.0), rng.uniform(0.1, 0.6)
        r, q, sign = rng.uniform(0.005, 0.1), rng.uniform(0.005, 0.08), rng.choice([-1.0, 1.0])
        bound = bjerksund_stensland(s, 100.0, tau, r, r - q, vol, sign)
        # 0.005: the lattice's worst error
        assert lattice(s, 100.0, tau, r, q, vol, sign) > bound - 5e-3


# ---------------------------------------------------------------- trees


@pytest.mark.parametrize(
    ("k", "vol", "tau", "printed"),
    [
        (40.0, 0.2, 0.0833, 0.8522), (40.0, 0.2, 0.3333, 1.5798), (40.0, 0.2, 0.5833, 1.9904),
        (45.0, 0.4, 0.0833, 5.2868), (45.0, 0.4, 0.3333, 6.5098), (45.0, 0.4, 0.5833, 7.3829),
    ],
)  # fmt: skip
def test_puts_of_geske_and_johnson(k: float, vol: float, tau: float, printed: float) -> None:
    # S 40, r .0488, the options of Geske and Johnson (1984): values of a converged Leisen-Reimer tree, good to 0.0002
    assert lattice(40.0, k, tau, 0.0488, 0.0, vol, -1.0) == pytest.approx(printed, abs=2e-4, rel=0)


def test_cox_ross_rubinstein() -> None:
    # Haug: 4.9192 with five steps; and what more and more steps lead to, 0.0003 being three millionths of the strike
    option = (100.0, 95.0, 0.5, 0.08, 0.0, 0.30, -1.0)
    assert cox_ross_rubinstein(*option, 5) == pytest.approx(4.9192, abs=5e-5, rel=0)
    assert lattice(*option) == pytest.approx(4.6915, abs=3e-4, rel=0)


def test_hull_put_with_a_dividend() -> None:
    # Hull, from memory: S 52, K 50, 5 months, r 10%, vol 40%, 2.06 after 3 1/2 months: 4.44 with five steps.
    # The lattice gives what 5,000 lead to.
    option, dividends = (52.0, 50.0, 5 / 12, 0.10, 0.0, 0.40, -1.0), ((3.5 / 12, 2.06),)
    assert cox_ross_rubinstein(*option, 5, dividends) == pytest.approx(4.44, abs=5e-3, rel=0)
    assert lattice(*option, dividends) == pytest.approx(cox_ross_rubinstein(*option, 5000, dividends), abs=3e-4, rel=0)


def test_roll_geske_whaley() -> None:
    # Haug, from memory: S 80, K 82, 4 months, r 6%, vol 30%, 4 after 3 months: 4.3860
    exact = call_with_one_dividend(80.0, 82.0, 1 / 3, 0.06, 0.30, 0.25, 4.0)
    assert exact == pytest.approx(4.3860, abs=5e-5, rel=0)
    assert lattice(80.0, 82.0, 1 / 3, 0.06, 0.0, 0.30, 1.0, ((0.25, 4.0),)) == pytest.approx(exact, abs=1e-4, rel=0)
