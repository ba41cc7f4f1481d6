"""The operator's own files: its column names, signs, shapes and clock, turned into the contract's tables."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from datetime import datetime

import numpy as np

from lmpgap.scenario.cells import as_text
from lmpgap.scenario.clock import ClockRule, Resolved, resolve
from lmpgap.scenario.columns import Table
from lmpgap.scenario.faults import FaultLog, as_rows, clip_text, listing
from lmpgap.scenario.files import RawTable
from lmpgap.scenario.network import IntArray
from lmpgap.scenario.parse import to_typed
from lmpgap.scenario.settings import ScenarioSettings
from lmpgap.scenario.typed import ColumnTable, RawColumn, TextColumn
from lmpgap.scenario.wide import widen_to_long

_SERIES = {
    "posted": ("node", "version", "published_at"),
    "posted_constraints": ("constraint", "contingency", "direction"),
}
"""Columns that tell one series of times from another, by table."""

_SIGNED = {
    "posted": ("congestion_component", "congestion_sign"),
    "posted_constraints": ("shadow_price", "shadow_price_sign"),
}


def read_posted(spec: Table, raw: RawTable, settings: ScenarioSettings, log: FaultLog) -> ColumnTable | None:
    """Return `posted` or `posted_constraints` in the contract's form, or ``None`` with faults.

    `[posted]` says how the file differs: own column names, signs, wide shape, hour-ending or local times.
    """
    form = settings.posted
    own = {name: theirs for name, theirs in form.columns.items() if theirs in raw.names or name not in raw.names}
    if form.shape == "wide" and spec.name == "posted":
        long = widen_to_long(raw, own, log)
        if long is None:
            return None
        raw, own = long, {}
    local_columns = {**{name: name for name in ("date", "hour")}, **own}
    times_differ = form.local or form.clock != "start"
    if "interval_start" not in raw.names and local_columns["date"] in raw.names:
        raw = _join_date_and_hour(raw, local_columns, own)
        times_differ = True
    if times_differ:
        resolved = _resolve_times(spec, raw, own, settings, log)
        if resolved is None:
            return None
        raw = resolved
    table = to_typed(*_in_own_names(spec, raw, own, log), log)
    if table is None:
        return None
    theirs = {own.get(name, name): name for name in spec.column_names}
    columns = {theirs[name]: column for name, column in table.columns.items()}
    given = frozenset(theirs[name] for name in table.given)
    signed, sign = _SIGNED[spec.name]
    if getattr(form, sign) == -1:
        columns[signed] = -np.asarray(columns[signed], dtype=np.float64)
    return replace(table, spec=spec, columns=columns, given=given)


def _in_own_names(spec: Table, raw: RawTable, own: dict[str, str], log: FaultLog) -> tuple[Table, RawTable]:
    """Return the definition with the operator's names, and the table without columns that nobody mapped."""
    if not own:
        return spec, raw
    renamed = replace(
        spec,
        columns=tuple(replace(column, name=own.get(column.name, column.name)) for column in spec.columns),
        key=(),
    )
    known = set(renamed.column_names)
    extra = [name for name in raw.names if name not in known]
    if extra:
        log.warn(
            raw.file,
            "columns that [posted.columns] does not map are not read: "
            + listing([name or "(no name)" for name in extra]),
            kind="unmapped column",
        )
    keep = [i for i, name in enumerate(raw.names) if name in known]
    return renamed, replace(raw, names=tuple(raw.names[i] for i in keep), columns=tuple(raw.columns[i] for i in keep))


def _join_date_and_hour(raw: RawTable, columns: dict[str, str], own: dict[str, str]) -> RawTable:
    """Return the table with ``interval_start`` made of a date and an hour column."""
    dates = as_text(raw.columns[raw.names.index(columns["date"])]).tolist()
    parts = [dates]
    used = {columns["date"]}
    if columns["hour"] in raw.names:
        parts.append(as_text(raw.columns[raw.names.index(columns["hour"])]).tolist())
        used.add(columns["hour"])
    joined = TextColumn.of([" ".join(texts).strip() for texts in zip(*parts, strict=True)])
    keep = [i for i, name in enumerate(raw.names) if name not in used]
    return replace(
        raw,
        names=(*(raw.names[i] for i in keep), own.get("interval_start", "interval_start")),
        columns=(*(raw.columns[i] for i in keep), joined),
    )


def _resolve_times(
    spec: Table, raw: RawTable, own: dict[str, str], settings: ScenarioSettings, log: FaultLog
) -> RawTable | None:
    """Return the table with interval starts in UTC; rows in an hour that does not exist are left out."""
    name = own.get("interval_start", "interval_start")
    if name not in raw.names:
        return raw  # Reading the columns reports it.
    index = raw.names.index(name)
    labels = as_text(raw.columns[index])
    rule = ClockRule(
        zone=settings.time_zone if settings.posted.local else "UTC",
        hour_ending=settings.posted.clock == "hour_ending",
        interval_minutes=settings.interval_minutes,
    )
    resolved = resolve(labels, _series(spec, raw, own), rule)
    bad = resolved.unreadable.copy()
    if not settings.posted.local and labels.values:
        # Without `local` a clock time says nothing, only one with an offset does.
        bad |= np.asarray([not _has_offset(value) for value in labels.values], dtype=bool)[labels.codes]

    def message(row: int) -> str:
        if not labels.at(row):
            return "is empty"
        if resolved.unreadable[row]:
            return "is not a time"
        return "has no offset; say local = true in [posted] if local clock time is meant"

    log.rows(
        raw.file,
        "time",
        as_rows(bad),
        raw.lines,
        message,
        column=name,
        value=lambda row: clip_text(labels.at(row)),
        allowed="2026-11-01T02:00, 2026-11-01 24:00, 2026-11-01 HE02 or HE02* for the second of two equal hours",
    )
    if bad.any():
        return None
    _report_clock(raw, resolved, labels.at, name, log)
    keep = np.flatnonzero(~resolved.missing_hour).astype(np.int64)
    columns: list[RawColumn] = [
        column.take(keep) if isinstance(column, TextColumn) else column[keep] for column in raw.columns
    ]
    columns[index] = resolved.times[keep]
    published = own.get("published_at", "published_at")
    if settings.posted.local and published in raw.names:
        place = raw.names.index(published)
        columns[place] = _local_instants(columns[place], settings.time_zone)
    lines = raw.lines
    return replace(raw, columns=tuple(columns), lines=lambda rows: lines(keep[rows]))


def _local_instants(column: RawColumn, zone: str) -> RawColumn:
    """Return clock times as instants; what is no time stays as it is, for reading to report it."""
    labels = as_text(column)
    rule = ClockRule(zone=zone, hour_ending=False, interval_minutes=0)
    # Each row is a series of its own: equal times of publication are not two different hours.
    resolved = resolve(labels, np.arange(len(labels)), rule)
    if not np.any(resolved.unreadable & ~labels.is_value("")):
        return resolved.times
    return TextColumn.of(
        [
            text if np.isnat(time) else f"{time}+00:00"
            for text, time in zip(labels.tolist(), resolved.times, strict=True)
        ]
    )


def _has_offset(value: str) -> bool:
    try:
        return datetime.fromisoformat(value).tzinfo is not None
    except ValueError:
        return False


def _series(spec: Table, raw: RawTable, own: dict[str, str]) -> IntArray:
    series = np.zeros(raw.n_row, dtype=np.int64)
    for name in _SERIES[spec.name]:
        theirs = own.get(name, name)
        if theirs in raw.names:
            column = as_text(raw.columns[raw.names.index(theirs)])
            series = series * max(len(column.values), 1) + column.codes
            _, series = np.unique(series, return_inverse=True)
            series = np.asarray(series, dtype=np.int64).reshape(-1)
    return series


def _report_clock(raw: RawTable, resolved: Resolved, label: Callable[[int], str], column: str, log: FaultLog) -> None:
    for mask, kind, words in (
        (
            resolved.missing_hour,
            "missing hour",
            "in the hour that clocks skip in spring; such an hour does not exist, and the rows are left out",
        ),
        (
            resolved.assumed_first,
            "repeated hour",
            "in the hour that occurs twice in autumn, but is there once; taken as the first of the two",
        ),
    ):
        rows = as_rows(mask)
        if rows.size:
            log.warn(
                raw.file,
                f"{rows.size:,} {'rows are' if rows.size > 1 else 'row is'} {words}",
                row=int(raw.lines(rows[:1])[0]),
                column=column,
                value=clip_text(label(int(rows[0]))),
                kind=kind,
            )
