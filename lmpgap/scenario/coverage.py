"""Whether offers, loads and limits cover what the intervals will ask of them."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np

from lmpgap.scenario.faults import FaultLog, as_rows, listing, rows_in_words
from lmpgap.scenario.intervals import IntervalSource, start_label
from lmpgap.scenario.settings import ScenarioSettings
from lmpgap.scenario.typed import ColumnTable

_TOLERANCE_MW = 1e-6


def check_coverage(
    tables: Mapping[str, ColumnTable], source: IntervalSource, settings: ScenarioSettings, log: FaultLog
) -> None:
    """Report output without a price (faults) and intervals or limits that will not do anything (warnings)."""
    if tables["offers"].n_row == 0 and tables["resources"].n_row:
        log.warn(
            tables["offers"].file,
            "there are no offers: nothing can be dispatched, and only posted prices can be checked",
            kind="no offers",
        )
    else:
        _check_offered(tables["resources"], source, log)
        _check_curve_range(tables, source, log)
    _check_lowered_minimum(tables, log)
    _check_load(tables["loads"], source, settings, log)
    contingencies, branches = tables["contingencies"], tables["branches"]
    if contingencies.n_row:
        monitored = tables["monitored"]
        rated = np.isfinite(branches.number("emergency_rating_mva"))
        if monitored.n_row:
            known = {name: i for i, name in enumerate(branches.text("branch").tolist())}
            unlimited = ~rated[monitored.text("branch").positions(known)]
            log.rows(
                monitored.file,
                "no emergency rating",
                as_rows(unlimited),
                monitored.lines,
                "has no emergency_rating_mva, so that no contingency can ever bind on it",
                column="branch",
                value=monitored.text("branch").at,
                warning=True,
            )
        elif not rated.any():
            log.warn(
                contingencies.file,
                "no branch has an emergency_rating_mva: no contingency can ever bind",
                kind="no emergency rating",
            )
    _check_intervals_of(tables, source, log)
    interfaces, limits = tables["interfaces"], tables["interface_limits"]
    limited = set(limits.text("interface").values)
    free = [name for name in dict.fromkeys(interfaces.text("interface").tolist()) if name not in limited]
    if free:
        log.warn(interfaces.file, f"no limit in interface_limits: {listing(free)}", column="interface")


def _check_offered(resources: ColumnTable, source: IntervalSource, log: FaultLog) -> None:
    """Report resources that can vary their output without a price on it."""
    curves = source.curves
    names = resources.text("resource")
    varies = (resources.number("eco_max_mw") > resources.number("eco_min_mw") + _TOLERANCE_MW) & (
        source.resource_in_service
    )
    without = curves.last < 0
    log.rows(
        resources.file,
        "no offer",
        as_rows(varies & without),
        resources.lines,
        "has no offer; give it one, with price 0 if it is free",
        column="resource",
        value=names.at,
    )
    # Resources with offers in single intervals only must have one in each.
    timed_only = np.flatnonzero(varies & ~without & np.isinf(curves.static_end))
    if timed_only.size == 0:
        return
    at_last = curves.slot == curves.last[curves.resource[curves.slot]]
    interval = np.repeat(np.arange(source.n_interval), np.diff(curves.pointer))[at_last]
    owner = curves.resource[curves.slot[at_last]]
    count = np.bincount(owner, minlength=resources.n_row)
    for resource in timed_only[count[timed_only] < source.n_interval]:
        have = np.zeros(source.n_interval, dtype=bool)
        have[interval[owner == resource]] = True
        first = int(np.flatnonzero(~have)[0])
        log.fault(
            resources.file,
            f"has no offer in {source.n_interval - count[resource]:,} of {source.n_interval:,} intervals, first "
            f"in the one that starts {start_label(source.starts[first])}; a row of offers without "
            "interval_start holds in all others",
            row=int(resources.lines(np.array([resource]))[0]),
            column="resource",
            value=names.at(int(resource)),
            kind="no offer",
        )


def _check_intervals_of(tables: Mapping[str, ColumnTable], source: IntervalSource, log: FaultLog) -> None:
    """Warn of tables that are of no interval of the loads, and so are held against nothing.

    Posted prices of a longer time than the scenario's are common and do no harm; of a position each row is money.
    """
    for name in ("posted", "posted_constraints", "delivery_factors", "positions"):
        table = tables[name]
        outside = int(np.count_nonzero(~np.isin(table.time("interval_start"), source.starts)))
        if outside == table.n_row > 0 or (outside and name == "positions"):
            count = "none of the rows is" if outside == table.n_row else f"{outside:,} of {table.n_row:,} rows are not"
            log.warn(
                table.file,
                f"{count} of an interval of {tables['loads'].file}: nothing is held against them",
                column="interval_start",
                kind="outside the intervals",
            )


def _check_curve_range(tables: Mapping[str, ColumnTable], source: IntervalSource, log: FaultLog) -> None:
    """Report curves that start above, or end below, the lowest output of their resource."""
    offers, resources, availability = tables["offers"], tables["resources"], tables["availability"]
    place = {name: i for i, name in enumerate(resources.text("resource").tolist())}
    lowest = resources.number("eco_min_mw").copy()
    highest_minimum = lowest.copy()
    stated = availability.number("eco_min_mw")
    given = np.isfinite(stated)
    item = availability.text("resource").positions(place)[given]
    np.minimum.at(lowest, item, stated[given])
    owner = offers.text("resource").positions(place)
    start, end = offers.number("from_mw"), offers.number("to_mw")
    segment = np.asarray(offers.columns["segment"])
    times = offers.time("interval_start")
    order = np.lexsort((segment, times, owner))
    joined = np.zeros(order.size, dtype=bool)
    joined[1:] = (owner[order][1:] == owner[order][:-1]) & (
        times[order][1:].view(np.int64) == times[order][:-1].view(np.int64)
    )
    head = order[~joined]
    tail = order[np.append(~joined[1:], True)] if order.size else order
    on = source.resource_in_service
    late = head[(start[head] > lowest[owner[head]] + _TOLERANCE_MW) & on[owner[head]]]
    log.rows(
        offers.file,
        "curve start",
        np.sort(late),
        offers.lines,
        lambda row: f"starts above the lowest output {lowest[owner[row]]:g} MW: what lies between has no price",
        column="from_mw",
        value=lambda row: f"{start[row]:g}",
        allowed="not above eco_min_mw",
    )
    short = tail[(end[tail] < highest_minimum[owner[tail]] - _TOLERANCE_MW) & on[owner[tail]]]
    log.rows(
        offers.file,
        "curve end",
        np.sort(short),
        offers.lines,
        lambda row: f"ends below the lowest output {highest_minimum[owner[row]]:g} MW",
        column="to_mw",
        value=lambda row: f"{end[row]:g}",
        allowed="not below eco_min_mw",
    )


def _check_lowered_minimum(tables: Mapping[str, ColumnTable], log: FaultLog) -> None:
    availability, resources = tables["availability"], tables["resources"]
    if availability.n_row == 0:
        return
    name = availability.text("resource")
    place = {resource: i for i, resource in enumerate(resources.text("resource").tolist())}
    minimum = resources.number("eco_min_mw")[name.positions(place)]
    lowered = np.isnan(availability.number("eco_min_mw")) & (availability.number("eco_max_mw") < minimum)
    rows = as_rows(lowered)
    if rows.size:
        names = list(dict.fromkeys(name.at(int(row)) for row in rows[:1000]))
        log.warn(
            availability.file,
            f"eco_max_mw is below the resource's eco_min_mw, which is lowered with it, in {rows_in_words(rows.size)}: "
            f"{listing(names)}; state eco_min_mw, or use outages, if something else is meant",
            row=int(availability.lines(rows[:1])[0]),
            column="eco_max_mw",
            kind="lowered minimum",
        )


def _check_load(loads: ColumnTable, source: IntervalSource, settings: ScenarioSettings, log: FaultLog) -> None:
    totals = total_load(source)
    if settings.reference.kind == "load":
        none = np.flatnonzero(totals <= 0)
        if none.size:
            log.warn(
                loads.file,
                f"no load to weight the reference by in {none.size:,} of {totals.size:,} intervals, first in the one "
                f"that starts {start_label(source.starts[none[0]])}; all buses weigh the same there",
                column="mw",
                kind="no load",
            )


def total_load(source: IntervalSource) -> np.ndarray[tuple[int], np.dtype[np.float64]]:
    """Return the fixed load of each interval, shape (n_interval,) [pu]."""
    load = source.load
    change = load.values[0] - load.static[0][load.item]
    added = np.bincount(load.index.interval_of_row, weights=change, minlength=source.n_interval)
    return np.asarray(load.static[0].sum() + added)
