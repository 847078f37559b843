"""Columns of text -> numbers, whatever way they are written; the decimal mark is found from the whole file.

``1,234`` is 1234 where the point is the decimal mark, and 1.234 where the comma is. Cells that only one of the two can
read (``12.5``, ``1,234.50``, ``1.234.567``) decide for all number columns of the file together. Where none does,
no reading is taken. Most files are plain, and pass without any of this.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc

from .cells import NUMBER_PATTERN, Floats, Mask, numbers_from_text, to_numpy
from .reading import Decimal

#: Marks that may part thousands, besides the one of point and comma that is no decimal mark.
_SPACES = (" ", "\u00a0", "\u2009", "\u202f", "'", "\u2019")
_SIGN = r"^[+-]?"
_POWER = r"(?:[eE][+-]?\d+)?$"
_CURRENCIES = "$€£¥₹"
#: Spaces that may stand between a number and its sign of percent or money.
_GAP = "[ \u00a0\u2009\u202f]*"

#: A number that is another one with the other decimal mark: one group of three digits, or the digits of a fraction.
_OPEN = _SIGN + r"[1-9]\d{{0,2}}{mark}\d{{3}}$"
#: Cells looked at before all are.
_FIRST = 1000

#: Marks for thousands as a person calls them.
MARK_NAMES = {
    ",": "comma", ".": "point", " ": "space", "\u00a0": "no-break space", "\u2009": "thin space",
    "\u202f": "narrow no-break space", "'": "apostrophe", "\u2019": "apostrophe",
}  # fmt: skip


def _grouped(mark: str) -> str:
    escaped = r"\." if mark == "." else mark
    return rf"[1-9]\d{{0,2}}(?:{escaped}\d{{3}})+"


def _pattern(point: str, comma: str) -> str:
    """Numbers with `point` for a decimal mark; thousands in threes, with one and the same mark in a number."""
    groups = "|".join(_grouped(mark) for mark in (comma, *_SPACES))
    return rf"{_SIGN}(?:(?:\d+(?:{point}\d*)?|{point}\d+){_POWER}|(?:{groups})(?:{point}\d*)?$)"


_PATTERNS: Mapping[Decimal, str] = {"point": _pattern(r"\.", ","), "comma": _pattern(",", ".")}


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class NumbersRead:
    """A column of numbers.

    Attributes
    ----------
    values : ndarray of float64
        The nearest double; NaN where there is no finite number.
    missing, nan, infinite, other : bool ndarray
        Cells that say there is no value, that say ``nan``, that are infinite or too large, that are no number.
    doubtful : bool ndarray
        Cells such as ``123,456`` for 123456 in a column whose other large numbers have no mark for thousands.
    thousands : tuple of str
        Marks between thousands that were found.
    """

    values: Floats
    missing: Mask
    nan: Mask
    infinite: Mask
    other: Mask
    doubtful: Mask
    thousands: tuple[str, ...]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class NumberCells:
    """The cells of one number column before it is settled what they are.

    Attributes
    ----------
    text, bare : pyarrow array of string
        As the file has them, trimmed; and without signs of percent and money.
    percent : bool ndarray
        Cells that had a percent sign.
    currency : pyarrow array of string
        The sign of money of each cell, empty if it has none.
    plain : NumbersRead or None
        What they are with a decimal point, where every cell is a plain number (digits, point, exponent) or says that
        there is none.
    """

    role: str
    text: pa.Array
    bare: pa.Array
    percent: Mask
    currency: pa.Array | None
    plain: NumbersRead | None


@dataclass(frozen=True, slots=True, kw_only=True)
class DecimalMark:
    """The decimal mark of a file.

    ``mark`` is None where no cell has one, and where two readings are possible: then ``unclear`` names a column and
    a row. ``settled_by`` names the column and row of a cell that only this mark can read.
    """

    mark: Decimal | None
    settled_by: tuple[str, int] | None = None
    unclear: tuple[str, int] | None = None


def number_cells(role: str, column: pa.Array, *, percent: bool, money: bool) -> NumberCells:
    """Look at a column of text; `percent` and `money` say which signs may stand at its numbers."""
    text = pc.utf8_trim_whitespace(column)
    none = np.zeros(len(text), dtype=np.bool_)
    values, missing, nan, infinite, other = numbers_from_text(text)
    if not other.any():
        plain = NumbersRead(
            values=values, missing=missing, nan=nan, infinite=infinite, other=other, doubtful=none, thousands=()
        )
        return NumberCells(role=role, text=text, bare=text, percent=none, currency=None, plain=plain)
    bare = pc.replace_substring(text, "\u2212", "-")
    signs = none
    if percent:
        signs = to_numpy(pc.match_substring_regex(bare, rf"\d{_GAP}%$"))
        bare = pc.replace_substring_regex(bare, rf"(\d){_GAP}%$", r"\1")
    currency = None
    if money:
        found = pc.extract_regex(
            bare, rf"{_SIGN}{_GAP}(?P<before>[{_CURRENCIES}]?).*?\d{_GAP}(?P<after>[{_CURRENCIES}]?)$"
        )
        before, after = (pc.fill_null(pc.struct_field(found, i), "") for i in (0, 1))
        currency = pc.if_else(pc.equal(before, ""), after, before)
        bare = pc.replace_substring_regex(bare, rf"^([+-]?){_GAP}[{_CURRENCIES}]{_GAP}([+-]?[\d.,])", r"\1\2")
        bare = pc.replace_substring_regex(bare, rf"(\d){_GAP}[{_CURRENCIES}]$", r"\1")
    return NumberCells(role=role, text=text, bare=bare, percent=signs, currency=currency, plain=None)


def decimal_mark(columns: Sequence[NumberCells], *, usual: Decimal | None) -> DecimalMark:
    """The decimal mark of all number columns of a file together.

    Parameters
    ----------
    usual : {"point", "comma"} or None
        Taken for numbers such as ``1.234`` that nothing in the file settles, unless whole numbers of three digits stand
        in the same column: ``987`` and ``1.234`` look like thousands. A file with commas between its columns has the
        point: a decimal comma would have had to be quoted. A quoted ``1,234`` stays unclear there too.
    """
    if usual == "point" and all(cells.plain is not None for cells in columns):
        for cells in columns:
            # nearly always the first number tells
            if _reads(cells.bare[:_FIRST])["point"].any():
                return DecimalMark(mark="point")
    votes: dict[Decimal, int] = {"point": 0, "comma": 0}
    firsts: dict[Decimal, tuple[str, int]] = {}
    open_cells: list[tuple[str, int]] = []
    for cells in columns:
        only = _reads(cells.bare)
        for mark in _PATTERNS:
            votes[mark] += int(np.count_nonzero(only[mark]))
            if only[mark].any():
                firsts.setdefault(mark, (cells.role, int(np.argmax(only[mark]))))
        points = to_numpy(pc.match_substring_regex(cells.bare, _OPEN.format(mark=r"\.")))
        commas = to_numpy(pc.match_substring_regex(cells.bare, _OPEN.format(mark=",")))
        whole = to_numpy(pc.match_substring_regex(cells.bare, rf"{_SIGN}\d{{3,}}$"))
        unsettled = commas | points if usual is None or whole.any() else commas
        if unsettled.any():
            open_cells.append((cells.role, int(np.argmax(unsettled))))
    if votes["point"] != votes["comma"]:
        winner: Decimal = "point" if votes["point"] > votes["comma"] else "comma"
        return DecimalMark(mark=winner, settled_by=firsts[winner])
    if votes["point"]:
        # as many say the one as the other: whichever is taken, the others are no numbers
        return DecimalMark(mark="point", settled_by=firsts["point"])
    if open_cells:
        return DecimalMark(mark=None, unclear=open_cells[0])
    has_point = any(to_numpy(pc.match_substring_regex(cells.bare, r"\d\.|\.\d")).any() for cells in columns)
    return DecimalMark(mark=usual if has_point else None)


def _reads(bare: pa.Array) -> dict[Decimal, Mask]:
    """Cells that only one of the marks can read."""
    reads = {mark: to_numpy(pc.match_substring_regex(bare, pattern)) for mark, pattern in _PATTERNS.items()}
    return {"point": reads["point"] & ~reads["comma"], "comma": reads["comma"] & ~reads["point"]}


def read_numbers(cells: NumberCells, mark: Decimal) -> NumbersRead:
    """All cells of a column with one decimal mark."""
    if cells.plain is not None and mark == "point":
        return cells.plain
    thousands_mark = "," if mark == "point" else "."
    good = to_numpy(pc.match_substring_regex(cells.bare, _PATTERNS[mark]))
    clean = pc.replace_substring_regex(cells.bare, f"[{thousands_mark}{''.join(_SPACES)}]", "")
    clean = pc.replace_substring(clean, ",", ".") if mark == "comma" else clean
    # what is no number stays as the file has it: it may be 'n/a', or text to complain of; but 12.5 is none beside 12,75
    stays = pc.if_else(pc.match_substring_regex(cells.text, NUMBER_PATTERN), "other mark", cells.text)
    values, missing, nan, infinite, other = numbers_from_text(pc.if_else(pa.array(good), clean, stays))
    found = tuple(
        one for one in (thousands_mark, *_SPACES) if to_numpy(pc.match_substring(cells.bare, one))[good].any()
    )
    return NumbersRead(
        values=values, missing=missing, nan=nan, infinite=infinite, other=other,
        doubtful=good & _doubtful(cells.bare, thousands_mark), thousands=found,
    )  # fmt: skip


def _doubtful(bare: pa.Array, thousands_mark: str) -> Mask:
    """Cells that the other decimal mark could read too, where other large numbers show that thousands have no mark."""
    mark = r"\." if thousands_mark == "." else thousands_mark
    lone = to_numpy(pc.match_substring_regex(bare, rf"{_SIGN}[1-9]\d{{0,2}}{mark}\d{{3}}$"))
    if not lone.any():
        return lone
    if to_numpy(pc.match_substring_regex(bare, rf"{_SIGN}\d{{5,}}")).any():
        return lone
    if to_numpy(pc.match_substring_regex(bare, rf"{_SIGN}\d{{4}}(?:[^\d]|$)")).any():
        # some countries write 1234 and 12 345
        return lone & to_numpy(pc.match_substring_regex(bare, rf"{_SIGN}\d{mark}"))
    return np.zeros_like(lone)
