"""Helpers for reading the cells of a column: text, distinct values, and reporting of faults."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc

from lmpgap.scenario.columns import Column
from lmpgap.scenario.faults import FaultLog, as_rows
from lmpgap.scenario.network import BoolArray
from lmpgap.scenario.typed import Lines, TextColumn


@dataclass(frozen=True)
class Place:
    """Where a column stands, for its faults."""

    file: str
    lines: Lines
    log: FaultLog

    def report(
        self,
        column: Column,
        kind: str,
        bad: BoolArray,
        message: str | Callable[[int], str],
        value: Callable[[int], str] | None,
    ) -> None:
        """Add a fault per marked row."""
        self.log.rows(
            self.file,
            kind,
            as_rows(bad),
            self.lines,
            message,
            column=column.name,
            value=value,
            allowed=column.allowed,
        )

    def empty(self, column: Column, blank: BoolArray) -> None:
        """Report empty cells of a column that must be filled."""
        if column.required and blank.any():
            self.report(column, "empty", blank, "is empty", None)


def as_text(array: pa.Array) -> pa.Array:
    """Return trimmed text, missing values as empty text; ``None`` in the array's place is not possible."""
    kind = array.type
    if pa.types.is_dictionary(kind):
        array = array.cast(kind.value_type)
        kind = array.type
    if pa.types.is_floating(kind):
        # A whole number stored as a float (a column with gaps) is the name "1", not "1.0".
        values = [
            None
            if v is None or v != v
            else (str(int(v)) if v == int(v) else repr(v))
            if abs(v) != float("inf")
            else str(v)
            for v in array.to_pylist()
        ]
        array = pa.array(values, type=pa.string())
    elif pa.types.is_binary(kind) or pa.types.is_large_binary(kind):
        array = pa.array([None if v is None else v.decode("utf-8", "replace") for v in array.to_pylist()], pa.string())
    elif not pa.types.is_string(kind):
        try:
            array = array.cast(pa.string())
        except (pa.ArrowException, ValueError):
            array = pa.array([None if v is None else str(v) for v in array.to_pylist()], type=pa.string())
    return pc.utf8_trim_whitespace(pc.fill_null(array, ""))


def distinct_text(array: pa.Array) -> TextColumn:
    """Return an Arrow column of any type as trimmed text by distinct value."""
    encoded = pc.dictionary_encode(as_text(array))
    return TextColumn(
        encoded.indices.to_numpy(zero_copy_only=False).astype(np.int64), tuple(encoded.dictionary.to_pylist())
    )


def flags_of(text: TextColumn, bad: list[bool]) -> BoolArray:
    """Return per row whether its distinct value is marked."""
    return np.asarray(bad, dtype=bool)[text.codes] if bad else np.zeros(0, dtype=bool)
