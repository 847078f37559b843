"""Rows of a file that are none of its table: comments, headers again, notes and totals below the last day.

They are left out and told. What could be a day whose date cannot be read is not among them: it stays a problem.
"""

from __future__ import annotations

import re
from dataclasses import dataclass

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc

from .cells import Mask, text_of, to_numpy
from .csv_files import Ragged, TextTable

#: Rows below the last day that may be notes and totals; more are no notes.
MOST_BELOW = 100
_TOTALS = re.compile(
    r"(?:grand )?(?:totals?|sub-?totals?|sum|average|avg|mean|median|min(?:imum)?|max(?:imum)?|count|"
    r"st(?:andard )?dev(?:iation)?|std|stdev|change|high|low)\b.*",
    re.IGNORECASE | re.DOTALL,
)
_NUMBER = re.compile(r"[-+($€£¥₹]*\s*[\d.,'’\s]*\d[\d.,'’\s]*([eE][-+]?\d+)?\s*[)%$€£¥₹]*")
_DATE = re.compile(r"\d{1,4}\s*[-/.]\s*\d.*|\d{5,8}.*", re.DOTALL)
#: Several words, and no digit: no date that went wrong.
_PROSE = re.compile(r"\W*[^\W\d]{2,}\W+[^\W\d]{2,}\D*", re.DOTALL)
_MONTH_OR_WEEKDAY = re.compile(
    r"(jan|feb|mar|apr|may|jun|jul|aug|sep|oct|nov|dec|mon|tue|wed|thu|fri|sat|sun)", re.IGNORECASE
)


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class ExtraRows:
    """Rows that are left out.

    Attributes
    ----------
    rows : bool ndarray, shape (row,)
    ragged : set of int
        Positions among the ragged rows.
    texts : tuple of str
        Their words.
    """

    rows: Mask
    ragged: frozenset[int]
    texts: tuple[str, ...]


def comments(text: TextTable) -> ExtraRows:
    """Rows that begin with ``#``."""
    rows = np.zeros(len(text.lines), dtype=np.bool_)
    if text.columns and pa.types.is_string(text.columns[0].type):
        rows = to_numpy(pc.starts_with(pc.utf8_ltrim_whitespace(text.columns[0]), "#"))
    ragged = {i for i, row in enumerate(text.ragged) if row.text is not None and row.text.lstrip().startswith("#")}
    texts = [_row_text(text, int(i)) for i in np.flatnonzero(rows)[:MOST_BELOW]]
    texts += [""] * (int(np.count_nonzero(rows)) - len(texts))
    texts += [text.ragged[i].text or "" for i in sorted(ragged)]
    return ExtraRows(rows=rows, ragged=frozenset(ragged), texts=tuple(texts))


def repeated_headers(text: TextTable, date_at: int) -> Mask:
    """Rows that are the header again, as where files have been put one after the other."""
    rows = np.zeros(len(text.lines), dtype=np.bool_)
    if not pa.types.is_string(text.columns[date_at].type):
        return rows
    rows = to_numpy(pc.equal(text.columns[date_at], text.header[date_at]))
    if rows.any():
        for name, column in zip(text.header, text.columns):
            rows = rows & to_numpy(pc.equal(column, name))
    return rows


def rows_below(text: TextTable, dated: Mask, separator: str | None) -> ExtraRows:
    """Notes and totals below the last row with a date.

    A note begins with several words, or has no number and no date in it, nor begins like a date. A total begins with
    a word such as `Total` or `Average`, whatever follows.
    """
    none = ExtraRows(rows=np.zeros(len(text.lines), dtype=np.bool_), ragged=frozenset(), texts=())
    if separator is None or not dated.any():
        return none
    last = int(np.flatnonzero(dated)[-1])
    rows = range(last + 1, len(text.lines))
    ragged = [i for i, row in enumerate(text.ragged) if row.line > text.lines[last]]
    if not 0 < len(rows) + len(ragged) <= MOST_BELOW:
        return none
    found: list[tuple[int, str]] = []
    mask, loose = none.rows.copy(), set()
    for i in rows:
        cells = [text_of(column, i) for column in text.columns]
        if _is_extra(cells):
            mask[i] = True
            found.append((int(text.lines[i]), _row_text(text, i)))
    for i in ragged:
        row: Ragged = text.ragged[i]
        if row.text is not None and _is_extra(row.text.split(separator)):
            loose.add(i)
            found.append((row.line, row.text))
    return ExtraRows(rows=mask, ragged=frozenset(loose), texts=tuple(words for _, words in sorted(found)))


def _is_extra(cells: list[str]) -> bool:
    filled = [cell.strip().strip('"').strip() for cell in cells]
    filled = [cell for cell in filled if cell]
    if not filled:
        return True
    if _TOTALS.fullmatch(filled[0]):
        return True
    if filled[0][0].isdigit() or _MONTH_OR_WEEKDAY.match(filled[0]):
        return False
    if _PROSE.fullmatch(filled[0]):
        return True
    return not any(_NUMBER.fullmatch(cell) or _DATE.fullmatch(cell) for cell in filled)


def _row_text(text: TextTable, row: int) -> str:
    cells = [text_of(column, row).strip() for column in text.columns]
    return " ".join(cell for cell in cells if cell)
