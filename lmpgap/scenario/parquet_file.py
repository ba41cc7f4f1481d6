"""Parquet files as raw columns.

The buffers are read directly: every other way from Arrow to numpy imports pandas, which takes longer than the rest
of `lmpgap check`.
"""

from __future__ import annotations

from typing import Any

import numpy as np
import pyarrow as pa
from numpy.typing import NDArray

from lmpgap.scenario.network import BoolArray, IntArray
from lmpgap.scenario.typed import RawColumn, TextColumn

_NUMPY_NAMES = {"float": "float32", "double": "float64"}


def read_parquet(content: bytes) -> tuple[list[str], list[RawColumn]]:
    """Return names and raw columns of a Parquet file.

    Raises
    ------
    pyarrow.ArrowException, OSError, ValueError
        For a file that cannot be read.
    """
    from pyarrow import parquet

    schema = parquet.ParquetFile(pa.BufferReader(content)).schema_arrow
    texts = [field.name for field in schema if pa.types.is_string(field.type) or pa.types.is_large_string(field.type)]
    table = parquet.ParquetFile(pa.BufferReader(content), read_dictionary=texts).read()
    return columns_of(table)


def columns_of(table: pa.Table) -> tuple[list[str], list[RawColumn]]:
    """Return names and raw columns of an Arrow table, without the index that pandas stores beside the columns."""
    names = [name for name in table.column_names if not name.startswith("__index_level_")]
    kept = [i for i, name in enumerate(table.column_names) if not name.startswith("__index_level_")]
    return names, [_column(table.column(i)) for i in kept]


def _column(column: pa.ChunkedArray) -> RawColumn:
    chunks = [chunk for chunk in column.chunks if len(chunk)]
    kind = column.type
    if pa.types.is_dictionary(kind) and pa.types.is_string(kind.value_type):
        return _dictionary(chunks)
    if pa.types.is_integer(kind) or (pa.types.is_floating(kind) and kind.bit_width >= 32):
        return _numbers(chunks, np.dtype(_NUMPY_NAMES.get(str(kind), str(kind))))
    if pa.types.is_boolean(kind):
        return _flags(chunks)
    if pa.types.is_timestamp(kind) and kind.tz is not None:
        return _times(chunks, kind.unit)
    return TextColumn.of([_as_text(value) for chunk in chunks for value in chunk.to_pylist()]).trimmed()


def _as_text(value: Any) -> str:
    if value is None:
        return ""
    if isinstance(value, bytes):
        return value.decode("utf-8", "replace")
    return str(value)


def _valid(chunk: pa.Array) -> BoolArray:
    bits = chunk.buffers()[0]
    if bits is None:
        return np.ones(len(chunk), dtype=bool)
    return _bits(bits, chunk.offset, len(chunk))


def _bits(buffer: pa.Buffer, offset: int, length: int) -> BoolArray:
    unpacked = np.unpackbits(np.frombuffer(buffer, np.uint8), bitorder="little")
    return unpacked[offset : offset + length].astype(bool)


def _fixed(chunk: pa.Array, kind: np.dtype[Any]) -> NDArray[Any]:
    return np.frombuffer(chunk.buffers()[1], kind, count=len(chunk), offset=chunk.offset * kind.itemsize)


def _numbers(chunks: list[pa.Array], kind: np.dtype[Any]) -> RawColumn:
    if not chunks:
        return np.zeros(0)
    values = np.concatenate([_fixed(chunk, kind) for chunk in chunks])
    valid = np.concatenate([_valid(chunk) for chunk in chunks])
    if values.dtype.kind in "iu" and valid.all():
        return values.astype(np.int64) if kind != np.uint64 else values.astype(np.float64)
    numbers = values.astype(np.float64)
    numbers[~valid] = np.nan
    return numbers


def _flags(chunks: list[pa.Array]) -> RawColumn:
    texts = [{True: "true", False: "false", None: ""}[value] for chunk in chunks for value in chunk.to_pylist()]
    return TextColumn.of(texts)


def _times(chunks: list[pa.Array], unit: str) -> RawColumn:
    if not chunks:
        return np.zeros(0, dtype="M8[us]")
    values = np.concatenate([_fixed(chunk, np.dtype(np.int64)) for chunk in chunks])
    valid = np.concatenate([_valid(chunk) for chunk in chunks])
    # Seconds and milliseconds beyond the range of microseconds would wrap around.
    factor = {"s": 1_000_000, "ms": 1_000, "us": 1, "ns": 1}[unit]
    in_range = np.abs(values.astype(np.float64)) * factor < 9.2e18
    if unit == "ns":
        values = values // 1000
    times = np.where(in_range, values, 0) * factor
    result = times.astype("M8[us]")
    result[~in_range] = np.datetime64(10**18, "us")
    result[~valid] = np.datetime64("NaT")
    return result


def _dictionary(chunks: list[pa.Array]) -> RawColumn:
    index: dict[str, int] = {"": 0}
    parts: list[IntArray] = []
    for chunk in chunks:
        values = [_as_text(value) for value in chunk.dictionary.to_pylist()]
        recode = np.asarray([index.setdefault(value, len(index)) for value in values] or [0], dtype=np.int64)
        # The validity bits of a dictionary column are those of its indices.
        codes = _fixed(chunk.indices, np.dtype(str(chunk.type.index_type)))
        valid = _valid(chunk.indices)
        parts.append(np.where(valid, recode[np.where(valid, codes, 0)], 0))
    codes = np.concatenate(parts) if parts else np.zeros(0, np.int64)
    return TextColumn(codes.astype(np.int64), tuple(index)).trimmed()
