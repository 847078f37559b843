"""Checks: pure functions from columns to offending rows. They judge, they never change data.

The small ones return masks or positions; :func:`judge` runs the ones a schema declares over a table and notes
what they find.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

import numpy as np
import numpy.typing as npt

from .cells import Dates, Floats, Lines, Mask
from .errors import Problems
from .schema import FILES, RATE_PERCENT_RANGE, VOL_PERCENT_RANGE
from .tables import Table, columns_of

Unit = Literal["percent", "decimal"]

#: A median vol above the first can only be percent, below the second only decimal: in between it may be 100% a year
#: and more, or 1% of something else.
PERCENT_MEDIAN, DECIMAL_MEDIAN = 2.0, 1.0
#: In a percent file no value is below the first, in a decimal file none above the second.
LEAST_PERCENT, LARGEST_DECIMAL = 1.5, 3.0
#: Share of values that must agree for the unit to be plain; the others are then problems of their own.
UNIT_SHARE = 0.9
#: A vol this many times above or below the file's median is taken for the other unit (100 apart).
VOL_OUTLIER = 50.0


@dataclass(frozen=True, slots=True, kw_only=True)
class Gap:
    """Trading days without a usable value: last value before, next value after (None at the end), days concerned."""

    before: np.datetime64
    after: np.datetime64 | None
    first: np.datetime64
    last: np.datetime64
    count: int


def repeated(dates: Dates) -> tuple[Lines, Lines]:
    """Rows whose date stands on an earlier row too, and that earlier row.

    >>> import numpy as np
    >>> days = np.array(["2020-01-02", "2020-01-01", "2020-01-02"], dtype="datetime64[D]")
    >>> [rows.tolist() for rows in repeated(days)]
    [[2], [0]]
    """
    order = np.argsort(dates, kind="stable")
    day = dates[order]
    new = np.concatenate([[True], day[1:] != day[:-1]])[: len(day)]
    group_start = np.maximum.accumulate(np.where(new, np.arange(len(day)), 0)) if len(day) else order
    rows, firsts = order[~new], order[group_start[~new]]
    by_row = np.argsort(rows)
    return rows[by_row], firsts[by_row]


def not_positive(values: Floats) -> Mask:
    """Values at or below zero; NaN is left to the check for missing ones."""
    return np.asarray(values <= 0)


def negative(values: Floats) -> Mask:
    """Values below zero."""
    return np.asarray(values < 0)


def outside(values: Floats, low: float, high: float, *, low_open: bool = False) -> Mask:
    """Values outside ``[low, high]``, or ``(low, high]``; NaN is not outside."""
    below = values <= low if low_open else values < low
    return np.asarray(below | (values > high))


def off_calendar(dates: Dates, trading_days: Dates) -> Mask:
    """Dates inside the span of the trading days that are none of them."""
    inside = (dates >= trading_days[0]) & (dates <= trading_days[-1])
    return inside & ~np.isin(dates, trading_days)


def gaps(trading_days: Dates, value_days: Dates, limit_days: int) -> list[Gap]:
    """Trading days more than `limit_days` calendar days after the last value, one entry per hole.

    Both arrays increase. Days before the first value are no gap. Time without trading days is none either:
    the four closed days of September 2001 leave seven days between values and no trading day bare.
    """
    position = np.searchsorted(value_days, trading_days, side="right") - 1
    started = position >= 0
    days, position = trading_days[started], position[started]
    bare = (days - value_days[position]).astype(np.int64) > limit_days
    found = []
    for hole in np.unique(position[bare]):
        concerned = days[bare & (position == hole)]
        after = value_days[hole + 1] if hole + 1 < len(value_days) else None
        found.append(
            Gap(before=value_days[hole], after=after, first=concerned[0], last=concerned[-1], count=len(concerned))
        )
    return found


def vol_unit(values: npt.ArrayLike) -> Unit | None:
    """Unit of a file's vols where it is plain, else None.

    Of the positive values: percent if the median is above 2 (a typical vol of 200% is absurd) and at least 90%
    of them are 1.5 or more; decimal if the median is below 1 and at least 90% are 3 or less. The few that
    do not fit are left to :func:`judge`.

    >>> vol_unit([17.2, 18.1, 150.2]), vol_unit([0.172, 0.181, 1.502]), vol_unit([1.6, 1.8, 1.9])
    ('percent', 'decimal', None)
    """
    given = np.asarray(values, dtype=np.float64)
    given = given[given > 0]
    if given.size == 0:
        return None
    median = float(np.median(given))
    if median > PERCENT_MEDIAN and np.mean(given >= LEAST_PERCENT) >= UNIT_SHARE:
        return "percent"
    if median < DECIMAL_MEDIAN and np.mean(given <= LARGEST_DECIMAL) >= UNIT_SHARE:
        return "decimal"
    return None


def judge(table: Table, problems: Problems, *, rows: Mask | None = None) -> None:
    """Repeated dates, missing values and signs, as the schema of the table's kind declares them.

    Parameters
    ----------
    rows : bool ndarray, optional
        Rows whose values matter; dates are judged on all.
    """
    again, first = repeated(table.dates)
    several = " If two dividends were paid that day, add them up." if table.kind == "dividends" else ""
    for row, first_row in zip(again, first):
        table.report(
            problems, "duplicate-date", "date", np.array([row]), first_line=int(table.lines[first_row]), hint=several
        )
    matters = np.ones(len(table.dates), dtype=np.bool_) if rows is None else rows
    for role, column in columns_of(FILES[table.kind], table):
        values, missing = table.numbers[role], table.missing[role] & matters
        if column.missing in ("missing-price", "missing-dividend"):
            table.report(problems, column.missing, role, missing)
        elif column.required and len(values) and table.missing[role].all():
            problems.add("empty-column", file=table.file, kind=table.kind, column=table.names[role])
        meaning = column.meaning[0].upper() + column.meaning[1:]
        if column.sign == "positive":
            table.report(problems, "not-positive", role, not_positive(values) & matters, meaning=meaning)
        elif column.sign == "not negative":
            table.report(problems, "negative", role, negative(values) & matters, meaning=meaning)
    if table.kind == "rates":
        low, high = RATE_PERCENT_RANGE
        for role, values in table.numbers.items():
            wrong = outside(values, low, high, low_open=True)
            table.report(problems, "rate-out-of-range", role, wrong, low=low, high=high)


def judge_vol(table: Table, problems: Problems, unit: Unit | None) -> Unit | None:
    """Settle the unit of a vol file and check that every value is plausible in it.

    With a `unit` given by the user a value must lie between 0.1% and 500% and within a factor 50 of the median.
    With a unit found by :func:`vol_unit` the values must also keep to its side: at least 1.5 in percent, at
    most 3 in decimals. Returns the unit, None if it is not plain (noted as ``vol-unit-unclear``).
    """
    given = np.concatenate([values[values > 0] for values in table.numbers.values()] or [np.empty(0)])
    if given.size == 0:
        return unit
    median = float(np.median(given))
    found = unit or vol_unit(given)
    if found is None:
        problems.add(
            "vol-unit-unclear", file=table.file, kind=table.kind, count=f"{given.size:,}", low=float(given.min()),
            high=float(given.max()), median=median,
        )  # fmt: skip
        return None
    scale = 1.0 if found == "percent" else 100.0
    low, high = VOL_PERCENT_RANGE
    for role, values in table.numbers.items():
        positive = values > 0
        wrong = positive & outside(values * scale, low, high)
        for row in np.flatnonzero(wrong):
            table.report(
                problems, "vol-out-of-range", role, np.array([row]), unit=found, percent=float(values[row] * scale),
                low=low, high=high,
            )  # fmt: skip
        mixed = np.zeros_like(wrong)
        if unit is None:
            mixed = values < LEAST_PERCENT if found == "percent" else values > LARGEST_DECIMAL
            rule = (
                f"below {LEAST_PERCENT:g}%"
                if found == "percent"
                else f"above {LARGEST_DECIMAL:g}, {LARGEST_DECIMAL:.0%} a year"
            )
            mixed &= positive & ~wrong
            table.report(problems, "vol-unit-mixed", role, mixed, unit=found, rule=rule)
        far = positive & ~wrong & ~mixed & outside(values, median / VOL_OUTLIER, median * VOL_OUTLIER)
        for row in np.flatnonzero(far):
            ratio = float(values[row]) / median
            table.report(
                problems, "vol-outlier", role, np.array([row]), times=max(ratio, 1 / ratio),
                side="above" if ratio > 1 else "below", median=median, limit=VOL_OUTLIER,
            )  # fmt: skip
    return found
