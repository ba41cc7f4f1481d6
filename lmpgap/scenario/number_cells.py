"""Reading numbers: as Arrow reads them where every cell is one, else cell by distinct cell."""

from __future__ import annotations

import re
from collections.abc import Callable, Mapping

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc

from lmpgap.scenario.cells import Place, as_text, distinct_text, flags_of
from lmpgap.scenario.columns import Column, Table
from lmpgap.scenario.faults import FaultLog, as_rows
from lmpgap.scenario.files import RawTable
from lmpgap.scenario.network import BoolArray, FloatArray

_NUMBER = re.compile(r"[+-]?(\d+\.?\d*|\.\d+)([eE][+-]?\d+)?", re.ASCII)
_COMMA_NUMBER = re.compile(r"[+-]?(\d+,?\d*|,\d+)([eE][+-]?\d+)?", re.ASCII)
_LONGEST = 64
"""Longer text is no number; patterns are not tried on it, for some take very long to fail."""
_LARGEST = 1e12
"""Numbers beyond this are no quantity of a power system; they would only overflow later."""


def with_points(spec: Table, raw: RawTable, where: Mapping[str, int], log: FaultLog) -> RawTable:
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


def read_numbers(column: Column, array: pa.Array, place: Place) -> tuple[FloatArray, BoolArray]:
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
        trimmed = as_text(array)
        nulled = pc.if_else(pc.equal(trimmed, ""), None, trimmed)
        blank = nulled.is_null().to_numpy(zero_copy_only=False)
        try:
            values = nulled.cast(pa.float64()).to_numpy(zero_copy_only=False).astype(np.float64)
            text = trimmed
        except pa.ArrowInvalid:
            values, text = _slow_numbers(column, trimmed, blank, place), trimmed
    not_finite = ~np.isfinite(values) & ~blank
    reported = np.zeros(values.size, dtype=bool)
    if text is not None and not_finite.any():
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


def _slow_numbers(column: Column, text: pa.Array, blank: BoolArray, place: Place) -> FloatArray:
    """Return the numbers of a column in which some cell is none, each such cell reported."""
    distinct = distinct_text(text)
    parsed = np.full(len(distinct.values), np.nan)
    bad = [False] * len(distinct.values)
    for i, value in enumerate(distinct.values):
        if len(value) <= _LONGEST and _NUMBER.fullmatch(value):
            parsed[i] = float(value)
        elif value and value.lstrip("+-").casefold() not in ("nan", "inf", "infinity"):
            bad[i] = True
    place.report(
        column,
        "not a number",
        flags_of(distinct, bad),
        lambda row: "is not a number" + _number_hint(distinct.at(row)),
        distinct.at,
    )
    return parsed[distinct.codes] if parsed.size else np.zeros(0)


def _number_hint(value: str) -> str:
    if len(value) > _LONGEST:
        return ""
    if re.fullmatch(r"[+-]?\d{1,3}(,\d{3})+(\.\d+)?", value):
        return "; leave thousands separators out"
    if _COMMA_NUMBER.fullmatch(value):
        return "; in a file separated by commas decimals have a point"
    if value.casefold() in ("na", "n/a", "null", "none", "-", "--"):
        return "; leave the cell empty for none"
    if re.fullmatch(r"[^\d]*[+-]?[\d.,]+[^\d]+", value):
        return "; leave units out"
    return ""


def _check_range(column: Column, values: FloatArray, place: Place, show: Callable[[int], str]) -> None:
    bad = np.zeros(values.size, dtype=bool)
    with np.errstate(invalid="ignore"):
        if column.minimum is not None:
            bad |= values < column.minimum
        if column.maximum is not None:
            bad |= values > column.maximum
        if column.above is not None:
            bad |= values <= column.above
    place.report(column, "range", bad, "is out of range", show)
