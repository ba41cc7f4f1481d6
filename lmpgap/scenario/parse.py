"""Raw columns into typed ones: every cell that does not hold what its definition asks for is a fault."""

from __future__ import annotations

from collections.abc import Callable
from datetime import UTC, datetime

import numpy as np

from lmpgap.scenario.cells import Place, as_text, flags_of
from lmpgap.scenario.columns import Column, Table
from lmpgap.scenario.faults import FaultLog, clip_text, nearest, suggestion
from lmpgap.scenario.files import RawTable
from lmpgap.scenario.number_cells import read_numbers, with_points
from lmpgap.scenario.typed import (
    NOT_A_TIME,
    AnyColumn,
    ColumnTable,
    RawColumn,
    TextColumn,
    TimeArray,
    default_column,
)

_FLAGS = {"true": True, "false": False, "1": True, "0": False, "yes": True, "no": False}
_YEARS = (1970, 2200)
UNKNOWN_COLUMNS = 100
"""Unknown columns that are named one by one."""


def to_typed(spec: Table, raw: RawTable, log: FaultLog) -> ColumnTable | None:
    """Return the typed table, or ``None`` when its columns cannot be made out; faults go to the log."""
    where, complete = _match_columns(spec, raw, log)
    if raw.comma_decimals:
        raw = with_points(spec, raw, where, log)
    columns: dict[str, AnyColumn] = {}
    for column in spec.columns:
        if column.name in where:
            columns[column.name] = _PARSERS[column.kind](
                column, raw.columns[where[column.name]], Place(raw.file, raw.lines, log)
            )
        else:
            columns[column.name] = default_column(column, raw.n_row)
    if not complete:
        return None
    return ColumnTable(spec, raw.file, raw.n_row, columns, frozenset(where), raw.lines)


def _match_columns(spec: Table, raw: RawTable, log: FaultLog) -> tuple[dict[str, int], bool]:
    """Return where each column of the definition stands, and whether all that must be there are."""
    where: dict[str, int] = {}
    known = spec.column_names
    complete = True
    unknown = []
    for i, name in enumerate(raw.names):
        if name in where:
            log.fault(raw.file, "the column is there twice", column=name, kind="column twice")
            complete = False
        elif name in known:
            where[name] = i
        elif name or _has_values(raw.columns[i]):
            unknown.append(name)
    free = [name for name in known if name not in where]
    misspelt = set()
    for name in unknown[:UNKNOWN_COLUMNS]:
        meant = nearest(name, free) if name else None
        if meant is None:
            hint = suggestion(name, known) if name else ""
        else:
            hint = f"; did you mean {meant!r}?"
            misspelt.add(meant)
        log.fault(
            raw.file,
            (f"there is no column {clip_text(name)!r} in this table" if name else "a column has no header") + hint,
            allowed=None if meant else ", ".join(known),
            kind="unknown column",
        )
    if len(unknown) > UNKNOWN_COLUMNS:
        rest = len(unknown) - UNKNOWN_COLUMNS
        log.fault(raw.file, f"and {rest:,} more columns that this table does not have", kind="unknown column (rest)")
    for column in spec.columns:
        if column.required and column.name not in where:
            complete = False
            if column.name not in misspelt:
                log.fault(
                    raw.file,
                    f"the column {column.name!r} is missing: {column.meaning}",
                    allowed=column.allowed,
                    kind="missing column",
                )
    return where, complete


def _has_values(raw: RawColumn) -> bool:
    return not bool(as_text(raw).is_value("").all())


def _parse_text(column: Column, raw: RawColumn, place: Place) -> AnyColumn:
    text = as_text(raw)
    place.empty(column, text.is_value(""))
    control = flags_of(text, [not value.isprintable() for value in text.values])
    if control.any():
        place.report(
            column,
            "control character",
            control,
            "contains a line break or another character that cannot be shown",
            lambda row: repr(text.at(row)),
        )
    return text


def _parse_choice(column: Column, raw: RawColumn, place: Place) -> AnyColumn:
    text = as_text(raw)
    default = str(column.default or "")
    values, bad = [], []
    for value in text.values:
        lower = value.casefold()
        chosen = default if not value else lower
        ok = chosen in column.choices and not (column.required and not value)
        values.append(chosen if ok else column.choices[0])
        bad.append(not ok and bool(value))
    place.empty(column, text.is_value(""))
    wrong = flags_of(text, bad)
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


def _parse_flag(column: Column, raw: RawColumn, place: Place) -> AnyColumn:
    text = as_text(raw)
    values = [_FLAGS.get(value.casefold()) if value else bool(column.default) for value in text.values]
    place.empty(column, text.is_value(""))
    place.report(column, "flag", flags_of(text, [v is None for v in values]), "is neither true nor false", text.at)
    return flags_of(text, [bool(v) for v in values])


def _parse_number(column: Column, raw: RawColumn, place: Place) -> AnyColumn:
    values, blank = read_numbers(column, raw, place)
    if column.default is not None:
        values[blank] = float(column.default)
    return values


def _parse_integer(column: Column, raw: RawColumn, place: Place) -> AnyColumn:
    values, blank = read_numbers(column, raw, place)
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


def _parse_time(column: Column, raw: RawColumn, place: Place) -> AnyColumn:
    if not isinstance(raw, TextColumn) and raw.dtype.kind == "M":
        return _check_times(column, raw.astype("M8[us]"), place)
    text = as_text(raw)
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
        flags_of(text, [bool(problem) for problem in problems]),
        lambda row: problems[text.codes[row]],
        text.at,
    )
    return times[text.codes] if text.values else np.zeros(0, dtype="M8[us]")


def _check_times(column: Column, times: TimeArray, place: Place) -> AnyColumn:
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


_PARSERS: dict[str, Callable[[Column, RawColumn, Place], AnyColumn]] = {
    "text": _parse_text,
    "choice": _parse_choice,
    "flag": _parse_flag,
    "number": _parse_number,
    "integer": _parse_integer,
    "time": _parse_time,
}
