"""Helpers for reading the cells of a column: text, distinct values, and reporting of faults."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from lmpgap.scenario.columns import Column
from lmpgap.scenario.faults import FaultLog, as_rows
from lmpgap.scenario.network import BoolArray
from lmpgap.scenario.typed import Lines, RawColumn, TextColumn


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


def as_text(column: RawColumn) -> TextColumn:
    """Return a raw column as trimmed text by distinct value; what is missing is empty text.

    Numbers, times and flags of a Parquet file become text as a CSV file would hold it: a whole number that is
    stored as a float, because the column has gaps, is the name "1" and not "1.0".
    """
    if isinstance(column, TextColumn):
        return column
    if column.dtype.kind == "M":
        distinct, codes = np.unique(column, return_inverse=True)
        texts = ["" if np.isnat(time) else f"{time}+00:00" for time in distinct]
    else:
        distinct, codes = np.unique(column, return_inverse=True)
        texts = [_number_text(float(number)) if column.dtype.kind == "f" else str(number) for number in distinct]
    return TextColumn(np.asarray(codes, dtype=np.int64).reshape(-1), tuple(texts)).trimmed()


def _number_text(number: float) -> str:
    if number != number:
        return ""
    return str(int(number)) if abs(number) < 2**53 and number == int(number) else repr(number)


def flags_of(text: TextColumn, bad: list[bool]) -> BoolArray:
    """Return per row whether its distinct value is marked."""
    return np.asarray(bad, dtype=bool)[text.codes] if bad else np.zeros(0, dtype=bool)
