"""The axis of intervals: a regular grid, what is missing on it, and rows that lie beside it."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np

from lmpgap.scenario.faults import FaultLog, as_rows, listing
from lmpgap.scenario.intervals import IntervalRows, interval_axis
from lmpgap.scenario.settings import ScenarioSettings
from lmpgap.scenario.times import hour_ending_labels
from lmpgap.scenario.typed import ColumnTable, TimeArray

_ON_THE_AXIS = ("offers", "bids", "availability", "interface_limits", "delivery_factors")
"""Tables whose rows have no effect beside the axis."""


def check_axis(tables: Mapping[str, ColumnTable], settings: ScenarioSettings, log: FaultLog) -> None:
    """Report starts off the grid (faults), missing intervals and rows without effect (warnings)."""
    loads = tables["loads"]
    starts = interval_axis(loads)
    times = loads.time("interval_start")
    timed = not np.all(np.isnat(times))
    if timed:
        _check_grid(loads, times, starts, settings, log)
        _check_missing_loads(loads, times, starts, log)
    for name in _ON_THE_AXIS:
        table = tables.get(name)
        if table is None or table.n_row == 0:
            continue
        outside = IntervalRows.of(table.time("interval_start"), starts).outside
        if outside.size == 0:
            continue
        if not timed:
            log.rows(
                table.file,
                "no time axis",
                outside,
                table.lines,
                "is for one interval, but the loads have no interval_start: without a time axis it never applies",
                column="interval_start",
            )
        else:
            log.warn(
                table.file,
                f"{outside.size:,} of {table.n_row:,} rows lie at intervals that have no loads and are not used",
                column="interval_start",
                row=int(table.lines(outside[:1])[0]),
                kind="outside",
            )
    if "outages" in tables and timed:
        _check_outage_times(tables["outages"], starts, settings, log)


def _check_grid(
    loads: ColumnTable, times: TimeArray, starts: TimeArray, settings: ScenarioSettings, log: FaultLog
) -> None:
    step = np.timedelta64(settings.interval_minutes, "m")
    off = (starts - starts[0]) % step != np.timedelta64(0, "us")
    if off.any():
        spacing = np.diff(starts).min()
        minutes = spacing / np.timedelta64(1, "m")
        rows = as_rows(np.isin(times, starts[off]))
        log.rows(
            loads.file,
            "off the grid",
            rows,
            loads.lines,
            f"does not lie a whole number of intervals after the first one; the smallest step in the file is "
            f"{minutes:g} min",
            column="interval_start",
            value=lambda row: f"{times[row]}Z",
            allowed=f"steps of [scenario] interval_minutes = {settings.interval_minutes}",
        )
        return
    grid = np.arange(starts[0], starts[-1] + step, step) if (starts[-1] - starts[0]) / step < 1e6 else starts
    missing = grid[~np.isin(grid, starts)]
    if missing.size:
        labels = hour_ending_labels(missing[:5], settings.time_zone, settings.interval_minutes)
        more = f" and {missing.size - 5:,} more" if missing.size > 5 else ""
        log.warn(
            loads.file,
            f"{missing.size:,} of {grid.size:,} intervals are missing and will not be solved: "
            f"{', '.join(labels)}{more}",
            column="interval_start",
            kind="missing interval",
        )
    elif (starts[-1] - starts[0]) / step >= 1e6:
        log.fault(
            loads.file,
            f"runs from {starts[0]}Z to {starts[-1]}Z, more than a million intervals: one of the two is wrong",
            column="interval_start",
        )


def _check_missing_loads(loads: ColumnTable, times: TimeArray, starts: TimeArray, log: FaultLog) -> None:
    bus = loads.text("bus")
    timed = ~np.isnat(times)
    count = np.bincount(bus.codes[timed], minlength=len(bus.values))
    static = np.zeros(len(bus.values), dtype=bool)
    static[bus.codes[~timed]] = True
    short = np.flatnonzero((count > 0) & (count < starts.size) & ~static)
    if short.size:
        names = [f"{bus.values[i]} ({starts.size - count[i]:,})" for i in short]
        log.warn(
            loads.file,
            f"{short.size:,} {'buses have' if short.size > 1 else 'bus has'} no row in some of the "
            f"{starts.size:,} intervals; load counts as zero there: {listing(names)}",
            column="bus",
            kind="missing load",
        )


def _check_outage_times(table: ColumnTable, starts: TimeArray, settings: ScenarioSettings, log: FaultLog) -> None:
    step = np.timedelta64(settings.interval_minutes, "m")
    for name in ("first_interval", "last_interval"):
        times = table.time(name)
        off = ~np.isnat(times) & ((times - starts[0]) % step != np.timedelta64(0, "us"))
        log.rows(
            table.file,
            "off the grid",
            as_rows(off),
            table.lines,
            "is not the start of an interval; only intervals that start within the outage are affected",
            column=name,
            value=lambda row, times=times: f"{times[row]}Z",  # type: ignore[misc]
            warning=True,
        )
