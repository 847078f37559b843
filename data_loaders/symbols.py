"""Files that hold many series one below the other, told apart by a column of symbols."""

from __future__ import annotations

import difflib
import hashlib
import re
import shlex
from dataclasses import dataclass

import pyarrow as pa
import pyarrow.compute as pc

from .cells import Mask, to_numpy
from .csv_files import TextTable
from .names import LONGEST_NAME
from .reading import Reading
from .schema import SYMBOL_NAMES, Matched, normal_name, position_of
from .sources import Refused
from .words import counted

#: Symbols that a message names.
_NAMED = 5
_HASH_DIGITS = 8


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Symbols:
    """The symbols of a file.

    Attributes
    ----------
    at : int
        Position of the column.
    values : pyarrow array of string, shape (row,)
    wanted : bool ndarray, shape (row,)
        Rows of the one symbol that is asked for, or all.
    one : str or None
        That symbol.
    """

    at: int
    values: pa.Array
    wanted: Mask
    one: str | None


def find_symbols(text: TextTable, matched: Matched, reading: Reading, rows: Mask) -> Symbols | None:
    """The column of symbols, if there is one to be heeded.

    Of a price file it must be there if the user speaks of symbols. Other files may hold one series for all: there it
    counts only where it holds more than one symbol.

    Raises
    ------
    Refused
        If it cannot be found, if the symbol asked for is not in it, if a row has none, or if a file holds several
        symbols and nothing was said of them.
    """
    asked = reading.symbol is not None or reading.symbol_column is not None
    at = _position(text, matched, reading)
    if at is None:
        return None
    values = pc.utf8_trim_whitespace(pc.fill_null(pc.cast(text.columns[at], pa.string()), ""))
    given = values if rows.all() else values.filter(pa.array(rows))
    distinct = [symbol for symbol in pc.unique(given).to_pylist() if symbol]
    if len(distinct) <= 1 and (text.kind != "prices" or not asked):
        return None
    column = text.header[at]
    if not asked:
        raise Refused(
            "many-symbols", column=column, count=counted(len(distinct), "symbol"), symbols=_some(distinct),
            first=shlex.quote(distinct[0]), named=shlex.quote(column),
        )  # fmt: skip
    if reading.symbol is not None:
        wanted = rows & to_numpy(pc.equal(values, reading.symbol))
        if not wanted.any():
            nearest = difflib.get_close_matches(reading.symbol, distinct, n=1, cutoff=0.6)
            raise Refused(
                "unknown-symbol", column=column, symbol=reading.symbol, count=counted(len(distinct), "symbol"),
                symbols=_some(distinct), meant=f" Did you mean {nearest[0]!r}?" if nearest else "",
            )  # fmt: skip
        return Symbols(at=at, values=values, wanted=wanted, one=reading.symbol)
    without = rows & to_numpy(pc.equal(values, ""))
    if without.any():
        row = int(without.argmax())
        raise Refused("missing-symbol", column=column, line=int(text.lines[row]), value="", count=int(without.sum()))
    return Symbols(at=at, values=values, wanted=rows, one=None)


def _position(text: TextTable, matched: Matched, reading: Reading) -> int | None:
    if reading.symbol_column is not None:
        at = position_of(text.header, reading.symbol_column)
        if at is None and text.kind == "prices":
            raise Refused("no-symbol-column", named=f"column {reading.symbol_column!r}", header=_some(text.header))
        if at is not None:
            return at
    free = [at for at in range(len(text.header)) if at not in matched.taken.values()]
    found = [at for name in SYMBOL_NAMES for at in free if normal_name(text.header[at]) == name]
    if not found and reading.symbol is not None and text.kind == "prices":
        raise Refused("no-symbol-column", named="column of symbols", header=_some(text.header))
    return found[0] if found else None


def _some(names: list[str] | tuple[str, ...]) -> str:
    shown = ", ".join(repr(name[:40]) for name in names[:_NAMED])
    return shown + (", ..." if len(names) > _NAMED else "")


def history_name(prefix: str, symbol: str) -> str:
    """The name under which a symbol's history is stored: always one that :func:`~data_loaders.names.check_name` takes.

    Symbols of capital letters, digits, points and hyphens stay as they are. In any other, what may not stand in a name
    becomes ``_``, and the first digits of its sha256 follow: two symbols never share a name, not even on a disk that
    does not tell small letters from capitals.

    >>> history_name("us", "BRK.B"), history_name("us", "BRK/B")
    ('us-BRK.B', 'us-BRK_B-82f67012')
    >>> history_name("us", "../../etc/passwd")
    'us-______etc_passwd-3754d6cb'
    """
    name = f"{prefix}-{symbol}"
    if re.fullmatch(r"[A-Z0-9](?:[A-Z0-9.-]*[A-Z0-9])?", symbol) and len(name) <= LONGEST_NAME:
        return name
    digits = hashlib.sha256(symbol.encode(errors="surrogatepass")).hexdigest()[:_HASH_DIGITS]
    room = LONGEST_NAME - len(prefix) - len(digits) - 2
    return f"{prefix}-{re.sub(r'[^A-Za-z0-9-]', '_', symbol)[: max(room, 0)]}-{digits}"
