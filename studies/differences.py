"""What differs between two tables, and between two trees of plain values; the first of it in words.

One side is trusted (made here, just now), the other is whatever a results folder holds.
"""

from __future__ import annotations

import json
import math
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import asdict, dataclass
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt
import pandas as pd
import pyarrow as pa
import pyarrow.parquet as pq

from .errors import ResultsError

#: Text of a file as a message repeats it.
LONGEST_SHOWN = 80
#: Larger JSON files are taken for a mistake: a study of a million values of one axis has about half of it.
LARGEST_JSON_BYTES = 200_000_000
#: Tables in tables of a manifest or a summary; ours are six deep.
DEEPEST = 30

RowWords = Callable[[pd.DataFrame, int], str]


@dataclass(frozen=True, slots=True, kw_only=True)
class Difference:
    """One thing that differs in one file.

    Attributes
    ----------
    file : str
    where : str or None
        A key, or a column and a row in words; None where it is the whole file.
    problem : str or None
        What is wrong, where it is not one value against another.
    then, now : object
        The value in the folder and the value made again.
    values : int or None
        Of a table: how many of its values differ.
    largest, largest_where : float and str, or None
        Of a table: the largest difference of numbers.
    """

    file: str
    where: str | None = None
    problem: str | None = None
    then: Any = None
    now: Any = None
    values: int | None = None
    largest: float | None = None
    largest_where: str | None = None

    def __str__(self) -> str:
        if self.problem is not None:
            return f"{self.file}: {self.problem if self.where is None else f'{self.where} {self.problem}'}"
        said = f"{self.file}: {self.where} is {shown(self.then)} in the folder, {shown(self.now)} made again"
        if self.values is not None:
            said += f"; {self.values:,} value{' differs' if self.values == 1 else 's differ'}"
        if self.largest is not None:
            said += f", the largest difference is {self.largest:.3g} ({self.largest_where})"
        return said

    def as_dict(self) -> dict[str, Any]:
        """Plain values; a table or a list as words."""
        return asdict(self) | {key: _word(getattr(self, key)) for key in ("then", "now")}


def shown(value: Any) -> str:
    """A plain value in a sentence: numbers to the last digit, long text cut, tables and lists as such."""
    word = _word(value)
    if word is None or isinstance(word, bool):
        return {None: "nothing", True: "true", False: "false"}[word]
    return f'"{word}"' if isinstance(value, str) else str(word)


def _word(value: Any) -> Any:
    if isinstance(value, dict):
        return "a table"
    if isinstance(value, list | tuple):
        return "a list"
    if isinstance(value, np.generic):
        value = value.item()
    if isinstance(value, float) and not math.isfinite(value):
        return None
    return value if value is None or isinstance(value, bool | int | float) else plain_text(str(value))


def plain_text(text: str, longest: int = LONGEST_SHOWN) -> str:
    """Foreign text for a message: what does not print escaped, cut if long."""
    text = "".join(one if one.isprintable() else repr(one)[1:-1] for one in text[: longest + 1])
    return text if len(text) <= longest else f"{text[: longest - 3]}..."


# ---------------------------------------------------------------- JSON


def read_table(path: Path) -> dict[str, Any]:
    """A JSON file that holds a table, of a depth and with numbers that can be worked with.

    Raises
    ------
    ResultsError
        With what is wrong, without the name of the file.
    """
    try:
        if not path.is_file():
            raise ResultsError("is missing")
        if path.stat().st_size > LARGEST_JSON_BYTES:
            raise ResultsError(f"is larger than {LARGEST_JSON_BYTES:,} bytes")
        found = json.loads(path.read_text(encoding="utf-8"), parse_constant=_no_number)
    except RecursionError:
        raise ResultsError(f"holds tables in tables, more than {DEEPEST} deep") from None
    except (OSError, ValueError) as error:
        raise ResultsError(f"cannot be read: {plain_text(str(error))}") from None
    if not isinstance(found, dict):
        raise ResultsError("cannot be read: it holds no table")
    _check_sound(found)
    return found


def _no_number(word: str) -> None:
    raise ValueError(f"{word} is no number in JSON")


def _check_sound(found: dict[str, Any]) -> None:
    waiting: list[tuple[int, Any]] = [(1, found)]
    while waiting:
        depth, value = waiting.pop()
        if isinstance(value, dict | list):
            if depth > DEEPEST:
                raise ResultsError(f"holds tables in tables, more than {DEEPEST} deep")
            waiting += [(depth + 1, item) for item in (value.values() if isinstance(value, dict) else value)]
        elif isinstance(value, int) and abs(value) >= 2**63:
            raise ResultsError("holds a whole number of 20 digits or more")
        elif isinstance(value, float) and not math.isfinite(value):
            raise ResultsError("holds a number too large for any computer")


def different_keys(then: Any, now: Any, path: str = "") -> Iterator[tuple[str, str | None, Any, Any]]:
    """Where two trees of plain values differ, in the order of the second: key, problem, both values.

    Numbers are compared exactly; 1 is 1.0 but not true.

    Examples
    --------
    >>> list(different_keys({"a": {"b": 1}, "c": 2}, {"a": {"b": 1.5}}))
    [('a.b', None, 1, 1.5), ('c', 'is not there when made again', 2, None)]
    """
    if isinstance(then, dict) and isinstance(now, dict):
        for key, value in now.items():
            below = f"{path}.{key}" if path else key
            if key in then:
                yield from different_keys(then[key], value, below)
            else:
                yield below, "is not in the folder", None, value
        for key in then:
            if key not in now:
                below = f"{path}.{key}" if path else key
                yield plain_text(below), "is not there when made again", then[key], None
    elif isinstance(then, list) and isinstance(now, list) and len(then) == len(now):
        for number, (one, other) in enumerate(zip(then, now, strict=True), start=1):
            yield from different_keys(one, other, f"{path}.{number}")
    elif isinstance(then, list) and isinstance(now, list):
        yield path, f"has {len(then):,} entries in the folder, {len(now):,} made again", None, None
    elif isinstance(then, bool) != isinstance(now, bool) or then != now:
        yield path, None, then, now


# ---------------------------------------------------------------- Parquet


class NoTable(Exception):
    """A file is no Parquet table that can be compared; the message is a problem of :class:`Difference`."""


def read_like(path: Path, columns: dict[str, str], rows: int, *, more: bool = False) -> pd.DataFrame:
    """A Parquet file, if it has these columns, with types as :func:`column_types` names them, and rows.

    Parameters
    ----------
    more : bool
        Whether further columns of numbers may stand among them.

    Raises
    ------
    NoTable
    """
    with _opened(path) as file:
        there = column_types(file.schema_arrow)
        _check_columns(there, columns, more=more)
        if file.metadata.num_rows != rows:
            raise NoTable(f"has {file.metadata.num_rows:,} rows in the folder, {rows:,} made again")
        return file.read().to_pandas()


def rows_of(path: Path) -> int:
    """Rows of a Parquet file, from its foot.

    Raises
    ------
    NoTable
    """
    with _opened(path) as file:
        return file.metadata.num_rows


def table_types(path: Path) -> dict[str, str]:
    """Names and types of the columns of a Parquet file.

    Raises
    ------
    NoTable
    """
    with _opened(path) as file:
        return column_types(file.schema_arrow)


@contextmanager
def _opened(path: Path) -> Iterator[pq.ParquetFile]:
    """A Parquet file; whatever goes wrong with it is a NoTable."""
    try:
        if not path.is_file():
            raise NoTable("is missing")
        with pq.ParquetFile(path) as file:
            yield file
    except (OSError, ValueError, TypeError, pa.ArrowException) as error:
        raise NoTable(f"cannot be read: {plain_text((str(error).splitlines() or [''])[0])}") from None


def column_types(schema: pa.Schema) -> dict[str, str]:
    """Names and types; text is text, however it is held."""
    if len(set(schema.names)) < len(schema.names):
        raise NoTable("has two columns of one name")
    return {field.name: "text" if pa.types.is_large_string(field.type) else _type(field.type) for field in schema}


def _type(kind: pa.DataType) -> str:
    if pa.types.is_string(kind):
        return "text"
    if pa.types.is_nested(kind):
        return "lists"
    return "date" if pa.types.is_timestamp(kind) and kind.tz is None else str(kind)


def _check_columns(there: dict[str, str], columns: dict[str, str], *, more: bool) -> None:
    for name, kind in columns.items():
        if name not in there:
            raise NoTable(f"has no column '{name}', which is there when made again")
        if there[name] != kind:
            raise NoTable(f"column '{name}' holds {plain_text(there[name])} in the folder, {kind} made again")
    for name, kind in there.items():
        if name not in columns and not (more and kind == "double"):
            raise NoTable(f"has a column '{plain_text(name)}', which is not there when made again")
    if [name for name in there if name in columns] != list(columns):
        raise NoTable("has its columns in another order than made again")


def table_difference(file: str, then: pd.DataFrame, now: pd.DataFrame, row_words: RowWords) -> Difference | None:
    """The first difference of two tables of the same columns and rows, how many there are, and the largest."""
    first: tuple[str, int] | None = None
    values, largest, at = 0, -1.0, ""
    for name in now.columns:
        old, new = then[name].to_numpy(), now[name].to_numpy()
        differs = unequal(old, new)
        if not differs.any():
            continue
        values += int(differs.sum())
        row = int(np.argmax(differs))
        first = first or (name, row)
        if new.dtype.kind in "iuf":
            with np.errstate(invalid="ignore", over="ignore"):
                size = np.abs(old.astype(np.float64) - new.astype(np.float64))
            if np.isfinite(size).any() and (biggest := float(np.nanmax(size[np.isfinite(size)]))) > largest:
                largest, at = biggest, f"'{name}' {row_words(now, int(np.flatnonzero(size == biggest)[0]))}"
    if first is None:
        return None
    name, row = first
    return Difference(
        file=file,
        where=f"'{name}' {row_words(now, row)}",
        then=_cell(then[name].to_numpy()[row]),
        now=_cell(now[name].to_numpy()[row]),
        values=values,
        largest=largest if largest > 0 else None,
        largest_where=at if largest > 0 else None,
    )


def unequal(one: npt.NDArray[Any], other: npt.NDArray[Any]) -> npt.NDArray[np.bool_]:
    """Where two columns differ; what is missing in both does not."""
    return np.asarray((one != other) & ~(pd.isna(one) & pd.isna(other)), dtype=np.bool_)


def _cell(value: Any) -> Any:
    if isinstance(value, np.datetime64):
        day = value.astype("datetime64[D]")
        return None if np.isnat(value) else str(day if day == value else value)
    return None if pd.isna(value) else value
