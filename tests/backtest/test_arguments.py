"""Checks of arguments.

Rung: behaviour.
"""

from __future__ import annotations

from fractions import Fraction

import numpy as np
import pytest

from backtest import Leg, OverlayError, PercentOfSpot
from backtest.arguments import number, one_of, whole_number


@pytest.mark.parametrize("value", [1, 2.5, np.int64(3), np.float32(2.5), np.float64(4), Fraction(7, 2), 4])
def test_numbers_of_python_and_numpy_inside_the_limits_pass(value: object) -> None:
    number("width", value, least=1, most=4)
    with pytest.raises(OverlayError, match="it takes a number from 5 to 6"):  # the same value, outside others
        number("width", value, least=5, most=6)


@pytest.mark.parametrize(
    "value",
    [0.999, 4.001, np.float32(0.5), float("nan"), float("inf"), 10**400, -(10**400), True, np.True_, "2", None, 1j],
)
def test_anything_else_is_refused_with_the_limits(value: object) -> None:
    with pytest.raises(OverlayError) as caught:
        number("width", value, least=1, most=4, unit=" metres")
    assert str(caught.value).startswith(f"width is {value!r}; it takes a number from 1 to 4 metres")
    assert caught.value.field == "width"


def test_a_number_without_an_upper_limit_is_still_finite() -> None:
    number("width", 1e300, least=0)
    for value in (np.inf, 1.1e300, 10**301):
        with pytest.raises(OverlayError, match="it takes a number of at least 0"):
            number("width", value, least=0)


@pytest.mark.parametrize("value", [2.0, np.float64(2), True, np.True_, 0, 6, "2", None])
def test_whole_numbers_are_whole_and_inside_the_limits(value: object) -> None:
    for fine in (1, 5, np.int64(3), np.uint8(2)):
        whole_number("count", fine, least=1, most=5)
    with pytest.raises(OverlayError, match="it takes a whole number from 1 to 5"):
        whole_number("count", value, least=1, most=5)


def test_words_are_of_the_list() -> None:
    one_of("account", "cash", ("resize", "cash"))
    with pytest.raises(OverlayError, match="account is 'bank'; it takes one of: resize, cash"):
        one_of("account", "bank", ("resize", "cash"))


def test_a_grid_over_numpy_numbers_makes_legs() -> None:
    legs = [
        Leg(position="long", right="put", strike=PercentOfSpot(p), ratio=np.float64(0.5)) for p in np.arange(80, 83)
    ]
    assert [leg.strike.percent for leg in legs] == [80, 81, 82]
