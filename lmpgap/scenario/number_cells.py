"""Reading numbers: each distinct text once."""

from __future__ import annotations

import re
from collections.abc import Callable, Mapping
from dataclasses import replace

import numpy as np

from lmpgap.scenario.cells import Place, flags_of
from lmpgap.scenario.columns import Column, Table
from lmpgap.scenario.faults import FaultLog, as_rows, clip_text
from lmpgap.scenario.files import RawTable
from lmpgap.scenario.network import BoolArray, FloatArray
from lmpgap.scenario.typed import RawColumn, TextColumn

_NUMBER = re.compile(r"[+-]?(\d+\.?\d*|\.\d+)([eE][+-]?\d+)?", re.ASCII)
_COMMA_NUMBER = re.compile(r"[+-]?(\d+,?\d*|,\d+)([eE][+-]?\d+)?", re.ASCII)
_NOT_FINITE = ("nan", "inf", "infinity")
_LONGEST = 64
"""Longer text is no number; patterns are not tried on it, for some take very long to fail."""
_LARGEST = 1e12
"""Numbers beyond this are no quantity of a power system; they would only overflow later."""


def with_points(spec: Table, raw: RawTable, where: Mapping[str, int], log: FaultLog) -> RawTable:
    """Return the table with decimal points, where its numbers are written with decimal commas."""
    numeric = [where[c.name] for c in spec.columns if c.kind in ("number", "integer") and c.name in where]
    texts = {i: column for i in numeric if isinstance(column := raw.columns[i], TextColumn)}
    if not any("," in value for column in texts.values() for value in column.values):
        return raw
    columns = list(raw.columns)
    for i, column in texts.items():
        pointed = ["." in value for value in column.values]
        log.rows(
            raw.file,
            "decimal mark",
            as_rows(flags_of(column, pointed)),
            raw.lines,
            "has a point in a file that writes decimals with a comma: it may be a thousands separator",
            column=raw.names[i],
            value=column.at,
            allowed="one decimal mark in the whole file, and no thousands separators",
        )
        # A value with a point has its fault by now; zero keeps it from being reported twice.
        values = [
            "0" if point else value.replace(",", ".") if _is_number(value, _COMMA_NUMBER) else value
            for value, point in zip(column.values, pointed, strict=True)
        ]
        columns[i] = TextColumn(column.codes, tuple(values))
    return replace(raw, columns=tuple(columns))


def _is_number(value: str, pattern: re.Pattern[str] = _NUMBER) -> bool:
    return len(value) <= _LONGEST and pattern.fullmatch(value) is not None


def read_numbers(column: Column, raw: RawColumn, place: Place) -> tuple[FloatArray, BoolArray]:
    """Return the values, ``nan`` for empty cells and for faults, and where the cell was empty."""
    if isinstance(raw, TextColumn):
        distinct = _distinct_numbers(column, raw, place)
        values = distinct[raw.codes] if distinct.size else np.zeros(0)
        blank = raw.is_value("")
        finite_or_told = flags_of(raw, [v.lstrip("+-").casefold() not in _NOT_FINITE for v in raw.values])
        strange = (np.isinf(values) | ~finite_or_told) & ~blank
    elif raw.dtype.kind == "M":
        values, blank = np.full(raw.size, np.nan), np.isnat(raw)
        strange = np.zeros(raw.size, dtype=bool)
        place.report(column, "not a number", ~blank, "is a time, not a number", lambda row: str(raw[row]))
    else:
        values = raw.astype(np.float64)
        # pandas writes a gap as a null or as nan; both are empty cells.
        blank = np.isnan(values)
        strange = np.isinf(values)

    def show(row: int) -> str:
        return raw.at(row) if isinstance(raw, TextColumn) else f"{raw[row]:.12g}"

    place.report(
        column,
        "not finite",
        strange,
        "is not a finite number" if column.required else "is not a finite number; leave the cell empty for none",
        show,
    )
    huge = np.isfinite(values) & (np.abs(values) > _LARGEST)
    place.report(column, "huge", huge, "is too large to be meant", show)
    values[strange | huge] = np.nan
    place.empty(column, blank)
    _check_range(column, values, place, show)
    return values, blank


def _distinct_numbers(column: Column, raw: TextColumn, place: Place) -> FloatArray:
    """Return the number of each distinct text, ``nan`` where it is none; those are reported."""
    joined = "".join(raw.values)
    if joined.isascii() and "_" not in joined:
        # float() takes nothing here that is not meant as a number, once underscores are ruled out.
        try:
            return np.asarray([float(value) if value else np.nan for value in raw.values])
        except ValueError:
            pass
    numbers = np.full(len(raw.values), np.nan)
    bad = [False] * len(raw.values)
    for i, value in enumerate(raw.values):
        if _is_number(value):
            numbers[i] = float(value)
        else:
            bad[i] = bool(value) and value.lstrip("+-").casefold() not in _NOT_FINITE
    place.report(
        column,
        "not a number",
        flags_of(raw, bad),
        lambda row: "is not a number" + _number_hint(raw.at(row)),
        lambda row: clip_text(raw.at(row)),
    )
    return numbers


def _number_hint(value: str) -> str:
    if len(value) > _LONGEST:
        return ""
    if re.fullmatch(r"[+-]?\d{1,3}(,\d{3})+(\.\d+)?", value):
        return "; leave thousands separators out"
    if _COMMA_NUMBER.fullmatch(value):
        return "; in a file separated by commas decimals have a point"
    if value.casefold() in ("na", "n/a", "null", "none", "-", "--"):
        return "; leave the cell empty for none"
    if re.match(r"[+-]?\d[\d.]*\s*[a-zA-Z%$]+$", value):
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
