"""What changes from interval to interval, precomputed so that one interval is assembled in microseconds.

Rows of a table are sorted by interval once; an interval then takes its own slice. Nothing is spread out over
intervals that do not differ, so that a year of hours needs the memory of its own rows only.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from datetime import UTC

import numpy as np

from lmpgap.scenario.network import (
    BidSegments,
    BoolArray,
    FloatArray,
    IntArray,
    IntervalInputs,
)
from lmpgap.scenario.offers import OfferCurves, build_offer_curves
from lmpgap.scenario.typed import ColumnTable, TimeArray

STATIC_START = np.datetime64("2026-01-01T00:00:00", "us")
"""Label of the one interval of a scenario whose loads have no `interval_start`."""


@dataclass(frozen=True)
class IntervalRows:
    """Rows of a table by interval: those of interval k are ``rows[pointer[k]:pointer[k + 1]]``.

    Attributes
    ----------
    rows
        Rows that lie on the axis, in the order of the intervals.
    pointer : (n_interval + 1,)
    static
        Rows without a time.
    outside
        Rows whose time is not on the axis.
    """

    rows: IntArray
    pointer: IntArray
    static: IntArray
    outside: IntArray

    @staticmethod
    def of(times: TimeArray, starts: TimeArray) -> IntervalRows:
        """Sort rows by the interval they belong to."""
        timed = ~np.isnat(times)
        place = np.searchsorted(starts, times)
        place[place == starts.size] = 0
        on_axis = timed & (starts[place] == times)
        rows = np.flatnonzero(on_axis)
        rows = rows[np.argsort(place[rows], kind="stable")]
        pointer = np.searchsorted(place[rows], np.arange(starts.size + 1))
        return IntervalRows(
            rows.astype(np.int64),
            pointer.astype(np.int64),
            np.flatnonzero(~timed).astype(np.int64),
            np.flatnonzero(timed & ~on_axis).astype(np.int64),
        )

    def of_interval(self, position: int) -> slice:
        """Return the slice of the sorted rows that belongs to an interval."""
        return slice(int(self.pointer[position]), int(self.pointer[position + 1]))

    @property
    def interval_of_row(self) -> IntArray:
        """Interval of each sorted row."""
        return np.repeat(np.arange(self.pointer.size - 1), np.diff(self.pointer))


@dataclass(frozen=True)
class TimedValues:
    """One or more values per item (bus, resource, interface), static with changes in single intervals.

    Attributes
    ----------
    static : (n_value, n_item)
    index
        Rows by interval.
    item : (n_row,)
        Position of the item, in the order of the sorted rows.
    values : (n_value, n_row)
    """

    static: FloatArray
    index: IntervalRows
    item: IntArray
    values: FloatArray

    @staticmethod
    def of(items: IntArray, values: FloatArray, times: TimeArray, starts: TimeArray, base: FloatArray) -> TimedValues:
        """Sort rows; ``base`` (n_value, n_item) holds what is true without a row."""
        index = IntervalRows.of(times, starts)
        static = base.copy()
        static[:, items[index.static]] = values[:, index.static]
        return TimedValues(static, index, items[index.rows], np.ascontiguousarray(values[:, index.rows]))

    def at(self, position: int) -> FloatArray:
        """Return the values of an interval, shape (n_value, n_item); a fresh array."""
        values = self.static.copy()
        rows = self.index.of_interval(position)
        if rows.stop > rows.start:
            values[:, self.item[rows]] = self.values[:, rows]
        return values


@dataclass(frozen=True)
class OutageSpans:
    """Items out of service over spans of intervals."""

    item: IntArray
    first: IntArray
    end: IntArray

    def apply(self, in_service: BoolArray, position: int) -> BoolArray:
        """Return a copy of the mask with what is out in this interval switched off."""
        mask = in_service.copy()
        mask[self.item[(self.first <= position) & (position < self.end)]] = False
        return mask


@dataclass(frozen=True)
class IntervalSource:
    """Everything that `Scenario.inputs` needs, as sorted arrays."""

    starts: TimeArray
    base_mva: float
    load: TimedValues
    branch_in_service: BoolArray
    branch_outages: OutageSpans
    resource_in_service: BoolArray
    resource_outages: OutageSpans
    p_range: TimedValues
    no_load_cost: FloatArray
    curves: OfferCurves
    bid_bus: IntArray
    bids: TimedValues
    interface_limits: TimedValues

    @property
    def n_interval(self) -> int:
        """Number of intervals."""
        return int(self.starts.size)

    def at(self, position: int) -> IntervalInputs:
        """Return the inputs of one interval."""
        if not 0 <= position < self.n_interval:
            raise IndexError(f"there are {self.n_interval} intervals, not one at position {position}")
        load = self.load.at(position)
        on = self.resource_outages.apply(self.resource_in_service, position)
        p_min, p_max = self.p_range.at(position)
        # An hour's lower maximum without a minimum of its own pulls the minimum down with it.
        p_min = np.where(on, np.minimum(p_min, p_max), 0.0)
        p_max = np.where(on, p_max, 0.0)
        p_max, segments, fixed_cost = self.curves.clip(position, p_min, p_max, on, self.base_mva)
        bids = self.bids.at(position)
        limits = self.interface_limits.at(position)
        return IntervalInputs(
            start=start_label(self.starts[position]),
            load_p=load[0],
            load_q=load[1],
            branch_in_service=self.branch_outages.apply(self.branch_in_service, position),
            resource_in_service=on,
            p_min=p_min,
            p_max=p_max,
            segments=segments,
            fixed_cost=fixed_cost + np.where(on, self.no_load_cost, 0.0),
            bids=BidSegments(bus=self.bid_bus, width=bids[0], price=bids[1]),
            interface_limit=limits[0],
            interface_reverse_limit=limits[1],
        )


def start_label(start: np.datetime64) -> str:
    """Return ISO 8601 with the offset of UTC."""
    return str(start.astype("M8[us]").item().replace(tzinfo=UTC).isoformat())


def interval_axis(loads: ColumnTable) -> TimeArray:
    """Return the distinct interval starts of the loads, or the one static start, shape (n_interval,)."""
    times = loads.time("interval_start")
    starts = np.unique(times[~np.isnat(times)])
    return starts if starts.size else np.array([STATIC_START])


def build_intervals(
    tables: Mapping[str, ColumnTable], starts: TimeArray, base_mva: float, positions: Mapping[str, Mapping[str, int]]
) -> IntervalSource:
    """Return the interval source of validated tables.

    Parameters
    ----------
    positions
        Positions by name of ``"bus"``, ``"branch"``, ``"resource"`` and ``"interface"``.
    """
    resources, loads = tables["resources"], tables["loads"]
    n_bus, n_interface = len(positions["bus"]), len(positions["interface"])
    load = TimedValues.of(
        loads.text("bus").positions(positions["bus"]),
        np.stack([loads.number("mw"), loads.number("mvar")]) / base_mva,
        loads.time("interval_start"),
        starts,
        np.zeros((2, n_bus)),
    )
    p_static = np.stack([resources.number("eco_min_mw"), resources.number("eco_max_mw")]) / base_mva
    bid_bus, bids = _build_bids(tables["bids"], starts, base_mva, positions["bus"])
    limits = tables["interface_limits"]
    interface_limits = TimedValues.of(
        limits.text("interface").positions(positions["interface"]),
        np.stack(
            [
                np.nan_to_num(limits.number("limit_mw"), nan=np.inf),
                np.nan_to_num(limits.number("reverse_limit_mw"), nan=np.inf),
            ]
        )
        / base_mva,
        limits.time("interval_start"),
        starts,
        np.full((2, n_interface), np.inf),
    )
    return IntervalSource(
        starts=starts,
        base_mva=base_mva,
        load=load,
        branch_in_service=tables["branches"].flag("in_service"),
        branch_outages=_build_outages(tables["outages"], "branch", positions["branch"], starts),
        resource_in_service=resources.flag("in_service"),
        resource_outages=_build_outages(tables["outages"], "resource", positions["resource"], starts),
        p_range=_build_range(tables["availability"], starts, base_mva, positions["resource"], p_static),
        no_load_cost=resources.number("no_load_cost"),
        curves=build_offer_curves(tables["offers"], starts, base_mva, positions["resource"]),
        bid_bus=bid_bus,
        bids=bids,
        interface_limits=interface_limits,
    )


def _build_range(
    table: ColumnTable, starts: TimeArray, base_mva: float, positions: Mapping[str, int], static: FloatArray
) -> TimedValues:
    item = table.text("resource").positions(positions)
    high = table.number("eco_max_mw") / base_mva
    low = table.number("eco_min_mw") / base_mva
    low = np.where(np.isnan(low), static[0][item] if item.size else low, low)
    return TimedValues.of(item, np.stack([low, high]), table.time("interval_start"), starts, static)


def _build_outages(table: ColumnTable, kind: str, positions: Mapping[str, int], starts: TimeArray) -> OutageSpans:
    rows = np.flatnonzero(table.text("kind").is_value(kind))
    return OutageSpans(
        table.text("id").positions(positions)[rows],
        np.searchsorted(starts, table.time("first_interval")[rows], side="left"),
        np.searchsorted(starts, table.time("last_interval")[rows], side="right"),
    )


def _build_bids(
    table: ColumnTable, starts: TimeArray, base_mva: float, positions: Mapping[str, int]
) -> tuple[IntArray, TimedValues]:
    """Return the bus of each bid slot and its width and price by interval.

    A slot is a (bus, segment) pair. A bus with rows for an interval has no other bids in it, so slots of that
    bus without a row are given an explicit zero there.
    """
    bus = table.text("bus").positions(positions)
    slot_keys, slot = np.unique(np.stack([bus, np.asarray(table.columns["segment"])]), axis=1, return_inverse=True)
    slot = np.asarray(slot).reshape(-1)
    slot_bus = np.asarray(slot_keys[0], dtype=np.int64)
    values = np.stack([table.number("mw") / base_mva, table.number("price")])
    timed = TimedValues.of(slot, values, table.time("interval_start"), starts, np.zeros((2, slot_bus.size)))
    if timed.item.size == 0:
        return slot_bus, timed
    # Expand each (interval, bus) that has rows to all slots of the bus.
    interval = timed.index.interval_of_row
    pairs, pair_of_row = np.unique(np.stack([interval, slot_bus[timed.item]]), axis=1, return_inverse=True)
    pair_of_row = np.asarray(pair_of_row).reshape(-1)
    first = np.searchsorted(slot_bus, pairs[1], side="left")
    count = np.searchsorted(slot_bus, pairs[1], side="right") - first
    offset = np.cumsum(count) - count
    item = np.repeat(first - offset, count) + np.arange(int(count.sum()))
    expanded = np.zeros((2, item.size))
    expanded[1] = timed.static[1][item]
    expanded[:, offset[pair_of_row] + timed.item - first[pair_of_row]] = timed.values
    pointer = np.searchsorted(np.repeat(pairs[0], count), np.arange(starts.size + 1))
    index = IntervalRows(np.arange(item.size), pointer, timed.index.static, timed.index.outside)
    return slot_bus, TimedValues(timed.static, index, item, expanded)
