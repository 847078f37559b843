"""Columns of text cells -> dates and numbers, whole columns at a time."""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt
import pyarrow as pa
import pyarrow.compute as pc

from .schema import FIRST_DATE, INFINITE_TEXTS, LAST_DATE, MISSING_TEXTS, NAN_TEXTS

Dates = npt.NDArray[np.datetime64]
Floats = npt.NDArray[np.float64]
Mask = npt.NDArray[np.bool_]
Lines = npt.NDArray[np.int64]

_DATE_PATTERN = r"^\d{4}-\d{2}-\d{2}([T ]00:00(:00(\.0+)?)?)?$"
#: Plain numbers.
NUMBER_PATTERN = r"^[+-]?(\d+(\.\d*)?|\.\d+)([eE][+-]?\d+)?$"


def dates_from_text(column: pa.Array) -> tuple[Dates, Mask, Mask]:
    """ISO dates, with or without a time of midnight.

    Returns
    -------
    dates : ndarray of datetime64[D]
        1970-01-01 where there is no date.
    bad, outside : bool ndarrays
        Cells that are no such date; dates outside the range of the schema.
    """
    text = pc.utf8_trim_whitespace(column)
    shaped = to_numpy(pc.match_substring_regex(text, _DATE_PATTERN))
    good = text if shaped.all() else pc.if_else(pa.array(shaped), text, "1970-01-01")
    year, month, day = (
        to_numpy(pc.cast(pc.utf8_slice_codeunits(good, start, stop), pa.int64()))
        for start, stop in ((0, 4), (5, 7), (8, 10))
    )
    dates, impossible = civil_dates(year, month, day)
    bad = ~shaped | impossible
    dates[bad] = np.datetime64("1970-01-01")
    return dates, bad, ~bad & outside_range(dates)


def civil_dates(year: Lines, month: Lines, day: Lines) -> tuple[Dates, Mask]:
    """Dates of the calendar, and a mask of those that it does not have (the first of some month there).

    >>> import numpy as np
    >>> dates, impossible = civil_dates(np.array([2020, 2019]), np.array([2, 2]), np.array([29, 29]))
    >>> str(dates[0]), impossible.tolist()
    ('2020-02-29', [False, True])
    """
    in_year = (month >= 1) & (month <= 12)
    first = ((year - 1970) * 12 + np.where(in_year, month, 1) - 1).astype("datetime64[M]")
    length = ((first + 1).astype("datetime64[D]") - first.astype("datetime64[D]")).astype(np.int64)
    impossible = ~(in_year & (day >= 1) & (day <= length))
    return first.astype("datetime64[D]") + np.where(impossible, 1, day) - 1, impossible


def outside_range(dates: Dates) -> Mask:
    """Dates outside those that can be used."""
    return np.asarray((dates < np.datetime64(FIRST_DATE)) | (dates > np.datetime64(LAST_DATE)))


def numbers_from_text(column: pa.Array) -> tuple[Floats, Mask, Mask, Mask, Mask]:
    """Plain numbers: digits, point, sign, exponent.

    Returns
    -------
    values : ndarray of float64
        The nearest double; NaN where there is no finite number.
    missing, nan, infinite, other : bool ndarrays
        Cells that say there is no value, that say ``nan``, that are infinite or too large, that are no number.
    """
    text = pc.utf8_trim_whitespace(column)
    plain = to_numpy(pc.match_substring_regex(text, NUMBER_PATTERN))
    numeric = pc.utf8_ltrim(text, characters="+")
    if not plain.all():
        numeric = pc.if_else(pa.array(plain), numeric, pa.scalar(None, pa.string()))
    values = np.array(pc.cast(numeric, pa.float64()).to_numpy(zero_copy_only=False), dtype=np.float64)
    lower = pc.utf8_lower(text)
    missing, nan, infinite = (
        to_numpy(pc.is_in(lower, value_set=pa.array(texts))) for texts in (MISSING_TEXTS, NAN_TEXTS, INFINITE_TEXTS)
    )
    too_large = np.isinf(values)
    values[too_large] = np.nan
    return values, missing, nan, infinite | too_large, ~(plain | missing | nan | infinite)


def text_of(column: pa.Array, row: int) -> str:
    """Text of one cell, whatever the column is made of; empty if it holds nothing.

    >>> text_of(pa.array([1.5, None]), 0), text_of(pa.array([1.5, None]), 1)
    ('1.5', '')
    """
    try:
        value = column[int(row)].as_py()
    except (OverflowError, ValueError):  # a date that Python has no name for
        value = pc.cast(column[int(row) : int(row) + 1], pa.string())[0].as_py()
    return "" if value is None else str(value)


def to_numpy(column: pa.Array) -> npt.NDArray[Any]:
    """An array of pyarrow as one of numpy."""
    return np.asarray(column.to_numpy(zero_copy_only=False))
