"""Typed columns: what a table holds once its cells have been read.

Plain numpy arrays, and text as codes into its distinct values; data frames are made from these when somebody
asks for one (`lmpgap.scenario.scenario.Scenario.tables`).
"""

from __future__ import annotations

from collections import defaultdict
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from lmpgap.scenario.columns import Column, Table
from lmpgap.scenario.network import BoolArray, FloatArray, IntArray

TimeArray = NDArray[np.datetime64]
NOT_A_TIME = np.datetime64("NaT", "us")

Lines = Callable[[IntArray], IntArray]
"""Gives the line in the file (a Parquet file: the row counted from 1) for zero-based rows."""


def row_numbers(rows: IntArray) -> IntArray:
    """Return rows counted from 1."""
    return np.asarray(rows + 1, dtype=np.int64)


@dataclass(frozen=True)
class TextColumn:
    """Text as codes into its distinct values.

    Attributes
    ----------
    codes : (n_row,)
    values
        Distinct values.
    """

    codes: IntArray
    values: tuple[str, ...]

    def __len__(self) -> int:
        """Return the number of rows."""
        return int(self.codes.size)

    def at(self, row: int) -> str:
        """Return the text of one row."""
        return self.values[int(self.codes[row])]

    def tolist(self) -> list[str]:
        """Return the text of every row."""
        return [self.values[code] for code in self.codes.tolist()]

    def positions(self, of: Mapping[str, int]) -> IntArray:
        """Return for each row the position of its text, -1 where it is unknown."""
        table = np.fromiter((of.get(value, -1) for value in self.values), np.int64, len(self.values))
        return table[self.codes] if self.values else np.zeros(0, np.int64)

    def is_value(self, text: str) -> BoolArray:
        """Return where the text is the given one."""
        if text not in self.values:
            return np.zeros(self.codes.size, dtype=bool)
        return np.asarray(self.codes == self.values.index(text))

    def take(self, rows: IntArray) -> TextColumn:
        """Return the chosen rows."""
        return TextColumn(self.codes[rows], self.values)

    @staticmethod
    def constant(text: str, n_row: int) -> TextColumn:
        """Return the same text in every row."""
        return TextColumn(np.zeros(n_row, np.int64), (text,))

    @staticmethod
    def of(texts: Sequence[str]) -> TextColumn:
        """Return a column of the given texts."""
        index: defaultdict[str, int] = defaultdict()
        index.default_factory = index.__len__
        codes = np.fromiter(map(index.__getitem__, texts), np.int64, len(texts))
        return TextColumn(codes, tuple(index))

    def trimmed(self) -> TextColumn:
        """Return the column without blanks around its texts."""
        stripped = [value.strip() for value in self.values]
        if tuple(stripped) == self.values:
            return self
        distinct = TextColumn.of(stripped)
        return TextColumn(distinct.codes[self.codes], distinct.values)


RawColumn = TextColumn | NDArray[np.float64] | NDArray[np.int64] | TimeArray
"""A column as a file holds it: text (all of a CSV file), or what a Parquet file has typed already."""

AnyColumn = TextColumn | NDArray[np.float64] | NDArray[np.int64] | NDArray[np.bool_] | TimeArray


@dataclass(frozen=True)
class ColumnTable:
    """A table with typed columns, defaults filled in.

    Attributes
    ----------
    spec
        Its definition.
    file
        File name, for messages.
    n_row
        Number of rows.
    columns
        By contract name; every column of the definition is there.
    given
        Columns that the file had.
    lines
        Line numbers of rows.
    """

    spec: Table
    file: str
    n_row: int
    columns: Mapping[str, AnyColumn]
    given: frozenset[str]
    lines: Lines

    def number(self, name: str) -> FloatArray:
        """Return a numeric column as floats."""
        return np.asarray(self.columns[name], dtype=np.float64)

    def text(self, name: str) -> TextColumn:
        """Return a text column."""
        column = self.columns[name]
        assert isinstance(column, TextColumn)
        return column

    def flag(self, name: str) -> BoolArray:
        """Return a column of true and false."""
        return np.asarray(self.columns[name], dtype=np.bool_)

    def time(self, name: str) -> TimeArray:
        """Return a time column in UTC; no time where the cell was empty."""
        return np.asarray(self.columns[name], dtype="M8[us]")

    def take(self, rows: IntArray) -> ColumnTable:
        """Return the chosen rows; they keep their line numbers."""
        columns: dict[str, AnyColumn] = {
            name: column.take(rows) if isinstance(column, TextColumn) else column[rows]
            for name, column in self.columns.items()
        }
        lines = self.lines
        return ColumnTable(self.spec, self.file, rows.size, columns, self.given, lambda chosen: lines(rows[chosen]))


def empty_table(spec: Table) -> ColumnTable:
    """Return the table without rows."""
    columns: dict[str, AnyColumn] = {column.name: default_column(column, 0) for column in spec.columns}
    return ColumnTable(spec, f"{spec.name}.csv", 0, columns, frozenset(), row_numbers)


def default_column(column: Column, n_row: int) -> AnyColumn:
    """Return the column's default in every row."""
    if column.kind in ("text", "choice"):
        return TextColumn.constant(str(column.default or ""), n_row)
    if column.kind == "time":
        return np.full(n_row, NOT_A_TIME)
    if column.kind == "flag":
        return np.full(n_row, bool(column.default))
    if column.kind == "integer":
        return np.full(n_row, int(column.default or 0), dtype=np.int64)
    return np.full(n_row, np.nan if column.default is None else float(column.default))
