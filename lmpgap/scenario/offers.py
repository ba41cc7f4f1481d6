"""Offer curves in a fixed layout of segments, clipped to the range of each interval."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from lmpgap.scenario.network import BoolArray, FloatArray, IntArray, OfferSegments
from lmpgap.scenario.typed import ColumnTable, TimeArray


@dataclass(frozen=True)
class OfferCurves:
    """Offer curves of all intervals; every interval has the same segments, some of them of no width.

    Attributes
    ----------
    resource : (n_segment,)
        Position of the resource that owns the segment; ascending.
    last : (n_resource,)
        Last segment of each resource; -1 without one.
    static : (6, n_segment)
        Start and end of the segment [pu], marginal price at both [$/MWh], slope between them [$/MWh per pu], and the
        point of the segment that is nearest to zero output [pu].
    static_end : (n_resource,)
        Where the curve ends [pu]; ``inf`` for a resource without a curve.
    slot, values, pointer
        Segments that differ in an interval: those of interval k are ``[pointer[k]:pointer[k + 1]]``.
    """

    resource: IntArray
    last: IntArray
    static: FloatArray
    static_end: FloatArray
    slot: IntArray
    values: FloatArray
    pointer: IntArray

    def at(self, position: int) -> tuple[FloatArray, FloatArray]:
        """Return the segments (6, n_segment) and the ends of the curves (n_resource,) of an interval."""
        rows = slice(int(self.pointer[position]), int(self.pointer[position + 1]))
        if rows.stop == rows.start:
            return self.static, self.static_end
        segments, end = self.static.copy(), self.static_end.copy()
        segments[:, self.slot[rows]] = self.values[:, rows]
        changed = self.resource[self.slot[rows]]
        end[changed] = segments[1, self.last[changed]]
        return segments, end

    def clip(
        self, position: int, p_min: FloatArray, p_max: FloatArray, in_service: BoolArray, base_mva: float
    ) -> tuple[FloatArray, OfferSegments, FloatArray]:
        """Return the range, the segments above ``p_min`` and the offered cost of ``p_min``.

        Parameters
        ----------
        p_min, p_max : (n_resource,)
            Range before the curve has its say [pu].

        Returns
        -------
        p_max : (n_resource,)
            Not above the end of the curve [pu].
        segments : OfferSegments
        fixed_cost : (n_resource,)
            Integral of the marginal price from zero to ``p_min``, as far as the curve reaches [$/h]; negative
            where ``p_min`` is negative and prices are not.
        """
        (start, end, price, _, slope, zero), curve_end = self.at(position)
        p_max = np.maximum(p_min, np.minimum(p_max, curve_end))
        owner = self.resource
        first = np.minimum(np.maximum(p_min[owner], start), end)
        past = np.minimum(np.maximum(p_max[owner], first), end)
        # Signed area between zero and p_min: positive for p_min > 0, negative for p_min < 0.
        area = price * (first - zero) + 0.5 * slope * ((first - start) ** 2 - (zero - start) ** 2)
        fixed = base_mva * np.bincount(owner, weights=area, minlength=p_min.size)
        on = in_service[owner]
        segments = OfferSegments(
            resource=owner,
            width=np.where(on, past - first, 0.0),
            price_start=price + slope * (first - start),
            price_end=price + slope * (past - start),
        )
        return p_max, segments, np.where(in_service, fixed, 0.0)


def build_offer_curves(
    table: ColumnTable, starts: TimeArray, base_mva: float, positions: Mapping[str, int]
) -> OfferCurves:
    """Return the curves of a validated `offers` table.

    A resource with rows for an interval has that curve in it, and its curve without a time in all others.
    """
    n_resource = len(positions)
    owner = table.text("resource").positions(positions)
    times = table.time("interval_start")
    place = np.searchsorted(starts, times)
    place[place == starts.size] = 0
    static = np.isnat(times)
    used = static | (starts[place] == times)
    interval = np.where(static, -1, place)
    order = np.lexsort((np.asarray(table.columns["segment"]), owner, interval))
    order = order[used[order]]
    owner, interval = owner[order], interval[order]
    price, end_price = table.number("price")[order], table.number("end_price")[order]
    values = np.stack(
        [
            table.number("from_mw")[order] / base_mva,
            table.number("to_mw")[order] / base_mva,
            price,
            np.where(np.isnan(end_price), price, end_price),
        ]
    )
    new_curve = np.ones(order.size, dtype=bool)
    new_curve[1:] = (owner[1:] != owner[:-1]) | (interval[1:] != interval[:-1])
    first_row = np.flatnonzero(new_curve)
    length = np.diff(np.append(first_row, order.size))
    curve_owner, curve_interval = owner[first_row], interval[first_row]

    # The layout: as many segments per resource as its longest curve has.
    n_slot = np.zeros(n_resource, dtype=np.int64)
    np.maximum.at(n_slot, curve_owner, length)
    offset = np.cumsum(n_slot) - n_slot
    resource = np.repeat(np.arange(n_resource), n_slot)

    # Each curve padded to its resource's number of segments by empty ones at its end.
    width = n_slot[curve_owner]
    begin = np.cumsum(width) - width
    rank = np.arange(int(width.sum())) - np.repeat(begin, width)
    reach = np.repeat(length, width)
    row = np.repeat(first_row, width) + np.minimum(rank, reach - 1)
    padded = values[:, row]
    pad = rank >= reach
    padded[0, pad], padded[2, pad] = padded[1, pad], padded[3, pad]
    slot = np.repeat(offset[curve_owner], width) + rank

    of_static = np.repeat(curve_interval, width) < 0
    span = padded[1] - padded[0]
    slope = np.divide(padded[3] - padded[2], span, out=np.zeros_like(span), where=span > 0)
    padded = np.concatenate([padded, [slope, np.clip(0.0, padded[0], padded[1])]])

    static_values = np.zeros((6, resource.size))
    static_values[:, slot[of_static]] = padded[:, of_static]
    last = np.where(n_slot > 0, offset + n_slot - 1, -1)
    static_end = np.full(n_resource, np.inf)
    with_static = curve_owner[curve_interval < 0]
    static_end[with_static] = static_values[1, last[with_static]]
    timed = ~of_static
    pointer = np.searchsorted(np.repeat(curve_interval, width)[timed], np.arange(starts.size + 1))
    return OfferCurves(
        resource=resource,
        last=last,
        static=static_values,
        static_end=static_end,
        slot=slot[timed],
        values=np.ascontiguousarray(padded[:, timed]),
        pointer=pointer.astype(np.int64),
    )
