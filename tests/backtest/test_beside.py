"""What is asked beside a replay: a counterparty and a sale, as they are written, and what is refused.

Rung: hand-worked (every message and value written out).
"""

from __future__ import annotations

import dataclasses
import datetime as dt
import math
from typing import Any

import numpy as np
import pytest

from backtest import OverlayError
from backtest.beside import Counterparty, Sale


def refusal(make: Any, **fields: Any) -> tuple[str, str | None]:
    with pytest.raises(OverlayError) as caught:
        make(**fields)
    return str(caught.value), caught.value.field


def test_defaults() -> None:
    assert dataclasses.asdict(Counterparty()) == {"recovery": 0.4, "default": "worst put payoff"}
    assert dataclasses.asdict(Sale()) == {"gain_percent": 0.0, "tax_percent": 0.0, "cost_bps": 0.0}
    with pytest.raises(dataclasses.FrozenInstanceError):
        Sale().cost_bps = 5.0  # type: ignore[misc]


@pytest.mark.parametrize(
    "given",
    [
        ["2008-10-10", "2001-09-21"],
        ("2001-09-21", "2008-10-10"),
        [dt.date(2008, 10, 10), "2001-09-21"],
    ],
)
def test_days_of_default_are_kept_in_order(given: Any) -> None:
    made = Counterparty(default=given)
    assert made.default == (dt.date(2001, 9, 21), dt.date(2008, 10, 10))
    assert hash(made) == hash(Counterparty(default=made.default))


TAKES = 'it takes "worst put payoff", or a list of dates such as ["2008-10-10"]'


@pytest.mark.parametrize(
    ("given", "message"),
    [
        ("worst", f"default is 'worst'; {TAKES}"),
        ("2008-10-10", f"default is '2008-10-10'; {TAKES}"),
        ([], f"default is []; {TAKES}"),
        (None, f"default is None; {TAKES}"),
        (dt.date(2008, 10, 10), f"default is datetime.date(2008, 10, 10); {TAKES}"),
        ({"2008-10-10": 1}, f"default is {{'2008-10-10': 1}}; {TAKES}"),
        (["20081010"], "default holds '20081010'; it takes dates such as 2008-10-10"),
        (["2008-W41-5"], "default holds '2008-W41-5'; it takes dates such as 2008-10-10"),
        (["2008-02-30"], "default holds '2008-02-30'; it takes dates such as 2008-10-10"),
        ([20081010], "default holds 20081010; it takes dates such as 2008-10-10"),
        (
            [dt.datetime(2008, 10, 10, 16)],
            "default holds datetime.datetime(2008, 10, 10, 16, 0); it takes dates such as 2008-10-10",
        ),
        (["2008-10-10", dt.date(2008, 10, 10)], "default has 2008-10-10 twice"),
    ],
)
def test_days_that_are_none(given: Any, message: str) -> None:
    assert refusal(Counterparty, default=given) == (message, "default")


LIMITS = [
    (Counterparty, "recovery", 1, "from 0 to 1 (0.4 is forty percent)"),
    (Sale, "gain_percent", 100, "from 0 to 100 (percent of the shares' value)"),
    (Sale, "tax_percent", 100, "from 0 to 100 (percent of the gain)"),
    (Sale, "cost_bps", 1000, "from 0 to 1000 basis points"),
]


@pytest.mark.parametrize(("make", "field", "most", "takes"), LIMITS)
def test_numbers_and_their_limits(make: Any, field: str, most: int, takes: str) -> None:
    for value in (0, most, 0.5, np.float64(0.25)):
        assert getattr(make(**{field: value}), field) == value
    for wrong in (-0.01, most + 0.01, math.nan, math.inf, "1", None, True):
        assert refusal(make, **{field: wrong}) == (f"{field} is {wrong!r}; it takes a number {takes}", field)
