"""Parquet -> columns as they are stored; rows take the place of lines."""

from __future__ import annotations

from collections.abc import Iterable, Iterator
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc
import pyarrow.parquet as pq

from .cells import Dates, Floats, Mask, to_numpy
from .csv_files import TextTable
from .dialect import Dialect
from .schema import Kind
from .sources import LARGEST_FILE, Refused, Source, in_units

#: A file says beforehand how many rows it has; more than these are not tried.
MOST_ROWS = 100_000_000
_BATCH = 65_536
#: Bounds on what the description of the columns may take.
_DESCRIPTION = 16 << 20


def read_parquet(source: Source, kind: Kind) -> TextTable:
    """The flat columns of a Parquet file; text in them is handled like that of a CSV file.

    Raises
    ------
    Refused
        If it is damaged, too large, or has no rows.
    """
    try:
        file = _opened(source, [])
        if file.metadata.num_rows > MOST_ROWS:
            raise Refused("file-too-large", size=f"{file.metadata.num_rows:,} rows", limit=f"{MOST_ROWS:,}", packed="")
        flat = [field.name for field in file.schema_arrow if not pa.types.is_nested(field.type)]
        # text that repeats is kept once while it is read: a few bytes could stand for gigabytes
        text = [field.name for field in file.schema_arrow if _is_text(field.type)]
        batches = list(_within_bounds(_opened(source, text).iter_batches(batch_size=_BATCH, columns=flat)))
        if not any(batch.num_rows for batch in batches):
            raise Refused("no-rows")
        table = pa.Table.from_batches(batches)
        table.validate(full=True)
        columns = [_plain(column.combine_chunks()) for column in table.columns]
    except (pa.ArrowException, OSError, ValueError, MemoryError) as error:
        reason = str(error).splitlines()[0] if str(error) else type(error).__name__
        raise Refused("damaged-file", what="a Parquet file", reason=reason) from None
    return TextTable(
        file=source.file,
        kind=kind,
        sha256=source.sha256,
        header=tuple(table.column_names),
        header_line=None,
        columns=tuple(columns),
        lines=np.arange(1, table.num_rows + 1),
        ragged=(),
        dialect=Dialect(separator=None),
    )


def _opened(source: Source, read_dictionary: list[str]) -> pq.ParquetFile:
    return pq.ParquetFile(
        pa.BufferReader(pa.py_buffer(source.data)),
        read_dictionary=read_dictionary,
        thrift_string_size_limit=_DESCRIPTION,
        thrift_container_size_limit=_DESCRIPTION // 16,
        page_checksum_verification=True,
    )


def _within_bounds(batches: Iterable[pa.RecordBatch]) -> Iterator[pa.RecordBatch]:
    """The same batches, as long as they are not too much together."""
    size = 0
    dictionaries: set[int] = set()
    for batch in batches:
        for column in batch.columns:
            if not pa.types.is_dictionary(column.type):
                size += column.nbytes
                continue
            size += column.indices.nbytes
            # batches share a dictionary
            if (address := column.dictionary.buffers()[-1].address) not in dictionaries:
                dictionaries.add(address)
                size += column.dictionary.nbytes
        if size > LARGEST_FILE:
            raise _too_large()
        yield batch


def dates_of(column: pa.Array) -> tuple[Dates, Mask]:
    """Dates of a column of dates or timestamps, and where there is none; a zone's own date is taken."""
    if pa.types.is_timestamp(column.type) and column.type.tz is not None:
        column = pc.local_timestamp(column)
    known = to_numpy(pc.is_valid(column))
    days = pc.cast(column, pa.date32(), safe=False) if not pa.types.is_date32(column.type) else column
    number = to_numpy(pc.fill_null(pc.cast(days, pa.int32()), 0)).astype(np.int64)
    return number.astype("datetime64[D]"), ~known


def is_temporal(kind: pa.DataType) -> bool:
    """Whether a column holds dates, or times of which the date can be taken."""
    return bool(pa.types.is_date(kind) or pa.types.is_timestamp(kind))


def is_number(kind: pa.DataType) -> bool:
    """Whether a column holds numbers."""
    return bool(
        pa.types.is_integer(kind) or pa.types.is_floating(kind) or pa.types.is_decimal(kind) or pa.types.is_null(kind)
    )


def floats_of(column: pa.Array) -> tuple[Floats, Mask, Mask]:
    """Values, where there is none (empty, or not a number), and where they are infinite."""
    if pa.types.is_decimal(column.type):
        column = pc.cast(column, pa.string())  # the nearest double, which the direct way does not always give
    values = np.array(to_numpy(pc.cast(column, pa.float64(), safe=False)), dtype=np.float64)
    infinite = np.isinf(values)
    values[infinite] = np.nan
    return values, np.isnan(values) & ~infinite, infinite


def _too_large() -> Refused:
    limit = in_units(LARGEST_FILE)
    return Refused("file-too-large", size=f"more than {limit}", limit=limit, packed=" when it is unpacked")


def _plain(column: Any) -> pa.Array:
    """Text as text, once it is known that it is not too much."""
    if pa.types.is_dictionary(column.type):
        lengths = pc.take(pc.binary_length(column.dictionary), column.indices)
        if (pc.sum(lengths).as_py() or 0) > LARGEST_FILE:
            raise _too_large()
        column = column.dictionary_decode()
    if _is_text(column.type):
        return pc.fill_null(pc.cast(column, pa.string()), "")
    return column


def _is_text(kind: pa.DataType) -> bool:
    return bool(pa.types.is_string(kind) or pa.types.is_large_string(kind))
