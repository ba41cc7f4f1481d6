"""Raw columns into typed ones: every cell that does not hold what its definition asks for is a fault."""

from __future__ import annotations

import re
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from datetime import UTC, datetime

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc
from numpy.typing import NDArray

from lmpgap.scenario.columns import Column, Table
from lmpgap.scenario.faults import FaultLog, as_rows, suggestion
from lmpgap.scenario.files import Lines, RawTable, row_numbers
from lmpgap.scenario.network import BoolArray, FloatArray, IntArray

TimeArray = NDArray[np.datetime64]
NOT_A_TIME = np.datetime64("NaT", "us")

_NUMBER = re.compile(r"[+-]?(\d+\.?\d*|\.\d+)([eE][+-]?\d+)?", re.ASCII)
_COMMA_NUMBER = re.compile(r"[+-]?(\d+,?\d*|,\d+)([eE][+-]?\d+)?", re.ASCII)
_FLAGS = {"true": True, "false": False, "1": True, "0": False, "yes": True, "no": False}
_YEARS = (1970, 2200)
_LARGEST = 1e12
"""Numbers beyond this are no quantity of a power system; they would only overflow later."""


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
        """Number of rows."""
        return int(self.codes.size)

    def at(self, row: int) -> str:
        """Return the text of one row."""
        return self.values[self.codes[row]]

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
    def of(texts: list[str]) -> TextColumn:
        """Return a column of the given texts."""
        values = tuple(dict.fromkeys(texts))
        position = {value: i for i, value in enumerate(values)}
        return TextColumn(np.asarray([position[text] for text in texts], dtype=np.int64), values)


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
    columns: dict[str, AnyColumn] = {column.name: _filled(column, 0) for column in spec.columns}
    return ColumnTable(spec, f"{spec.name}.csv", 0, columns, frozenset(), row_numbers)


def to_typed(spec: Table, raw: RawTable, log: FaultLog) -> ColumnTable | None:
    """Return the typed table, or ``None`` when its columns cannot be made out; faults go to the log."""
    where = _match_columns(spec, raw, log)
    if where is None:
        return None
    if raw.comma_decimals:
        raw = _with_points(spec, raw, where, log)
    columns: dict[str, AnyColumn] = {}
    for column in spec.columns:
        if column.name in where:
            columns[column.name] = _PARSERS[column.kind](
                column, raw.columns[where[column.name]], _Place(raw.file, raw.lines, log)
            )
        else:
            columns[column.name] = _filled(column, raw.n_row)
    return ColumnTable(spec, raw.file, raw.n_row, columns, frozenset(where), raw.lines)


def _match_columns(spec: Table, raw: RawTable, log: FaultLog) -> dict[str, int] | None:
    where: dict[str, int] = {}
    known = spec.column_names
    usable = True
    unknown = []
    for i, name in enumerate(raw.names):
        if name in where:
            log.fault(raw.file, "the column is there twice", row=None, column=name, kind="column")
            usable = False
        elif name in known:
            where[name] = i
        elif name or _has_values(raw.columns[i]):
            unknown.append(name)
    free = [name for name in known if name not in where]
    for name in unknown:
        hint = suggestion(name, free) or suggestion(name, known)
        log.fault(
            raw.file,
            (f"there is no column {name!r} in this table" if name else "a column has no header") + hint,
            allowed=None if hint else ", ".join(known),
            kind="unknown column",
        )
    missing = [column for column in spec.columns if column.required and column.name not in where]
    for column in missing:
        log.fault(
            raw.file,
            f"the column {column.name!r} is missing: {column.meaning}",
            allowed=column.allowed,
            kind="missing column",
        )
    return where if usable and not missing else None


def _has_values(array: pa.Array) -> bool:
    if not pa.types.is_string(array.type):
        return bool(array.null_count < len(array))
    return bool(pc.any(pc.not_equal(pc.utf8_trim_whitespace(array), "")).as_py())


def _with_points(spec: Table, raw: RawTable, where: Mapping[str, int], log: FaultLog) -> RawTable:
    """Return the table with decimal points, where its numbers are written with decimal commas."""
    numeric = [where[c.name] for c in spec.columns if c.kind in ("number", "integer") and c.name in where]
    if not any(pc.any(pc.match_substring(raw.columns[i], ",")).as_py() for i in numeric):
        return raw
    columns = list(raw.columns)
    for i in numeric:
        column = pc.utf8_trim_whitespace(raw.columns[i])
        pointed = pc.match_substring(column, ".").to_numpy(zero_copy_only=False)
        log.rows(
            raw.file,
            "decimal mark",
            as_rows(pointed),
            raw.lines,
            "has a point in a file that writes decimals with a comma: it may be a thousands separator",
            column=raw.names[i],
            value=lambda row, column=column: str(column[row].as_py()),  # type: ignore[misc]
            allowed="one decimal mark in the whole file, and no thousands separators",
        )
        good = pc.and_(pc.match_substring_regex(column, f"^(?:{_COMMA_NUMBER.pattern})$"), pa.array(~pointed))
        swapped = pc.if_else(good, pc.replace_substring(column, ",", "."), column)
        # A pointed value already has its fault; zero keeps it from being reported twice.
        columns[i] = pc.if_else(pa.array(pointed), "0", swapped)
    return RawTable(raw.file, raw.names, tuple(columns), raw.lines, raw.comma_decimals)


@dataclass(frozen=True)
class _Place:
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
        if column.required and blank.any():
            self.report(column, "empty", blank, "is empty", None)


def _filled(column: Column, n_row: int) -> AnyColumn:
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


def _as_text(array: pa.Array) -> pa.Array:
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


def _distinct(array: pa.Array) -> TextColumn:
    encoded = pc.dictionary_encode(_as_text(array))
    return TextColumn(
        encoded.indices.to_numpy(zero_copy_only=False).astype(np.int64), tuple(encoded.dictionary.to_pylist())
    )


def _flags_of(text: TextColumn, bad: list[bool]) -> BoolArray:
    """Return per row whether its distinct value is marked."""
    return np.asarray(bad, dtype=bool)[text.codes] if bad else np.zeros(0, dtype=bool)


def _parse_text(column: Column, array: pa.Array, place: _Place) -> AnyColumn:
    text = _distinct(array)
    place.empty(column, text.is_value(""))
    control = _flags_of(text, [not value.isprintable() for value in text.values])
    if control.any():
        place.report(
            column,
            "control character",
            control,
            "contains a line break or another character that cannot be shown",
            lambda row: repr(text.at(row)),
        )
    return text


def _parse_choice(column: Column, array: pa.Array, place: _Place) -> AnyColumn:
    text = _distinct(array)
    default = str(column.default or "")
    values, bad = [], []
    for value in text.values:
        lower = value.casefold()
        chosen = default if not value else lower
        ok = chosen in column.choices and not (column.required and not value)
        values.append(chosen if ok else column.choices[0])
        bad.append(not ok and bool(value))
    place.empty(column, text.is_value(""))
    wrong = _flags_of(text, bad)
    place.report(
        column,
        "choice",
        wrong,
        lambda row: "is not one of the choices" + suggestion(text.at(row), column.choices),
        text.at,
    )
    distinct = tuple(dict.fromkeys(values))
    recode = np.asarray([distinct.index(value) for value in values], dtype=np.int64)
    return TextColumn(recode[text.codes] if values else text.codes, distinct)


def _parse_flag(column: Column, array: pa.Array, place: _Place) -> AnyColumn:
    if pa.types.is_boolean(array.type):
        default = bool(column.default)
        return np.asarray(pc.fill_null(array, default).to_numpy(zero_copy_only=False), dtype=bool)
    text = _distinct(array)
    values = [_FLAGS.get(value.casefold()) if value else bool(column.default) for value in text.values]
    values = [{"1.0": True, "0.0": False}.get(text.values[i]) if v is None else v for i, v in enumerate(values)]
    place.empty(column, text.is_value(""))
    place.report(column, "flag", _flags_of(text, [v is None for v in values]), "is neither true nor false", text.at)
    return _flags_of(text, [bool(v) for v in values])


def _numbers(column: Column, array: pa.Array, place: _Place) -> tuple[FloatArray, BoolArray]:
    """Return the values, ``nan`` for empty cells and for faults, and where the cell was empty."""
    kind = array.type
    if pa.types.is_boolean(kind):
        array, kind = array.cast(pa.int8()), pa.int8()
    if pa.types.is_integer(kind) or pa.types.is_floating(kind) or pa.types.is_decimal(kind):
        blank = np.asarray(array.is_null().to_numpy(zero_copy_only=False))
        values = array.cast(pa.float64(), safe=False).to_numpy(zero_copy_only=False).astype(np.float64)
        # pandas writes a gap as a null or as nan; both are empty cells.
        blank = blank | np.isnan(values)
        text = None
    else:
        trimmed = _as_text(array)
        nulled = pc.if_else(pc.equal(trimmed, ""), None, trimmed)
        blank = nulled.is_null().to_numpy(zero_copy_only=False)
        try:
            values = nulled.cast(pa.float64()).to_numpy(zero_copy_only=False).astype(np.float64)
            text = trimmed
        except pa.ArrowInvalid:
            values, text = _slow_numbers(column, trimmed, blank, place), trimmed
    not_finite = ~np.isfinite(values) & ~blank
    reported = np.isnan(values) & ~blank if text is not None else np.zeros(values.size, dtype=bool)
    if text is not None:
        # Text that is no number was reported already; what is left is "nan", "inf" and numbers too large.
        told = pc.match_substring_regex(text, f"^(?:{_NUMBER.pattern})$").to_numpy(zero_copy_only=False)
        words = pc.match_substring_regex(text, "^[+-]?(nan|inf|infinity)$", ignore_case=True).to_numpy(
            zero_copy_only=False
        )
        reported = not_finite & ~told & ~words

    def show(row: int) -> str:
        return str(values[row]) if text is None else str(text[row].as_py())

    place.report(
        column,
        "not finite",
        not_finite & ~reported,
        "is not a finite number" if column.required else "is not a finite number; leave the cell empty for none",
        show,
    )
    huge = np.isfinite(values) & (np.abs(values) > _LARGEST)
    place.report(column, "huge", huge, "is too large to be meant", show)
    values[not_finite | huge] = np.nan
    place.empty(column, blank)
    _check_range(column, values, place, show)
    return values, blank


def _slow_numbers(column: Column, text: pa.Array, blank: BoolArray, place: _Place) -> FloatArray:
    """Return the numbers of a column in which some cell is none, each such cell reported."""
    distinct = _distinct(text)
    parsed = np.full(len(distinct.values), np.nan)
    bad = [False] * len(distinct.values)
    for i, value in enumerate(distinct.values):
        if _NUMBER.fullmatch(value):
            parsed[i] = float(value)
        elif value and value.lstrip("+-").casefold() not in ("nan", "inf", "infinity"):
            bad[i] = True
    place.report(
        column,
        "not a number",
        _flags_of(distinct, bad),
        lambda row: "is not a number" + _number_hint(distinct.at(row)),
        distinct.at,
    )
    return parsed[distinct.codes] if parsed.size else np.zeros(0)


def _number_hint(value: str) -> str:
    if re.fullmatch(r"[+-]?\d{1,3}(,\d{3})+(\.\d+)?", value):
        return "; leave thousands separators out"
    if _COMMA_NUMBER.fullmatch(value):
        return "; in a file separated by commas decimals have a point"
    if value.casefold() in ("na", "n/a", "null", "none", "-", "--"):
        return "; leave the cell empty for none"
    if re.fullmatch(r"[^\d]*[+-]?[\d.,]+[^\d]+", value):
        return "; leave units out"
    return ""


def _check_range(column: Column, values: FloatArray, place: _Place, show: Callable[[int], str]) -> None:
    bad = np.zeros(values.size, dtype=bool)
    with np.errstate(invalid="ignore"):
        if column.minimum is not None:
            bad |= values < column.minimum
        if column.maximum is not None:
            bad |= values > column.maximum
        if column.above is not None:
            bad |= values <= column.above
    place.report(column, "range", bad, "is out of range", show)


def _parse_number(column: Column, array: pa.Array, place: _Place) -> AnyColumn:
    values, blank = _numbers(column, array, place)
    if column.default is not None:
        values[blank] = float(column.default)
    return values


def _parse_integer(column: Column, array: pa.Array, place: _Place) -> AnyColumn:
    values, blank = _numbers(column, array, place)
    values[blank] = float(column.default or 0)
    broken = np.isfinite(values) & (values != np.round(values))
    place.report(column, "whole number", broken, "is not a whole number", lambda row: str(values[row]))
    values[~np.isfinite(values)] = 0.0
    return np.asarray(np.round(values), dtype=np.int64)


def parse_time(value: str) -> datetime | str:
    """Return the time in UTC, or what is wrong with the text."""
    try:
        time = datetime.fromisoformat(value)
    except ValueError:
        return "is not a time"
    if time.tzinfo is None:
        return "has no offset, so that it may mean two different hours"
    if not _YEARS[0] < time.year < _YEARS[1]:
        return f"lies outside the years {_YEARS[0]} to {_YEARS[1]}"
    return time.astimezone(UTC)


def _parse_time(column: Column, array: pa.Array, place: _Place) -> AnyColumn:
    if pa.types.is_timestamp(array.type) and array.type.tz is not None:
        return _parse_timestamps(column, array, place)
    text = _distinct(array)
    times = np.full(len(text.values), NOT_A_TIME)
    problems = [""] * len(text.values)
    for i, value in enumerate(text.values):
        if value:
            parsed = parse_time(value)
            if isinstance(parsed, str):
                problems[i] = parsed
            else:
                times[i] = np.datetime64(parsed.replace(tzinfo=None), "us")
    place.empty(column, text.is_value(""))
    place.report(
        column,
        "time",
        _flags_of(text, [bool(problem) for problem in problems]),
        lambda row: problems[text.codes[row]],
        text.at,
    )
    return times[text.codes] if text.values else np.zeros(0, dtype="M8[us]")


def _parse_timestamps(column: Column, array: pa.Array, place: _Place) -> AnyColumn:
    values = array.cast(pa.timestamp("us", tz="UTC"), safe=False).to_numpy(zero_copy_only=False)
    times = values.astype("M8[us]")
    place.empty(column, np.isnat(times))
    years = times.astype("M8[Y]").astype(np.int64) + 1970
    outside = ~np.isnat(times) & ((years <= _YEARS[0]) | (years >= _YEARS[1]))
    place.report(
        column,
        "time",
        outside,
        f"lies outside the years {_YEARS[0]} to {_YEARS[1]}",
        lambda row: str(times[row]),
    )
    return np.where(outside, NOT_A_TIME, times)


_PARSERS: dict[str, Callable[[Column, pa.Array, _Place], AnyColumn]] = {
    "text": _parse_text,
    "choice": _parse_choice,
    "flag": _parse_flag,
    "number": _parse_number,
    "integer": _parse_integer,
    "time": _parse_time,
}
