"""One price set as arrays: what a formulation, another run or the operator says each bus costs, and why.

The tables of a run folder are long; everything in this folder works on the arrays made here. Constraints are
keyed by (kind, contingency, monitored, direction), never by the name under which a solver or a table knows
them: rows of one key (both ends of one branch) add up, and the two directions of a branch are two keys.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Any

import numpy as np
import pandas as pd

from lmpgap.dispatch.result import constraint_name
from lmpgap.errors import DataError
from lmpgap.prices.reference import ReferencedComponents, rereference
from lmpgap.scenario.network import BoolArray, FloatArray, IntArray
from lmpgap.tolerances import DEFAULT_TOLERANCES, Tolerances

KEY_COLUMNS = ["kind", "contingency", "monitored", "direction"]
COMPONENTS = ("energy", "congestion", "loss", "reactive")


@dataclass(frozen=True, kw_only=True)
class ContributionBlock:
    """What each constraint adds to each bus price, one row per interval and constraint.

    Attributes
    ----------
    interval : (n_row,)
        Position of the interval.
    label : (n_row,)
        Position in ``labels``.
    labels : MultiIndex of (kind, contingency, monitored, direction)
    amount : (n_row, n_bus)
        Part of the component [$/MWh].
    shadow_price : (n_row,)
        Sum over the rows of one key [$/MWh or $/MVAh]; ``nan`` where it is not known.
    """

    interval: IntArray
    label: IntArray
    labels: pd.MultiIndex
    amount: FloatArray
    shadow_price: FloatArray

    @staticmethod
    def none(n_bus: int) -> ContributionBlock:
        """Return an empty block."""
        return ContributionBlock(
            interval=np.zeros(0, np.int64),
            label=np.zeros(0, np.int64),
            labels=pd.MultiIndex.from_arrays([[], [], [], []], names=KEY_COLUMNS),
            amount=np.zeros((0, n_bus)),
            shadow_price=np.zeros(0),
        )

    def summed(self, n_interval: int) -> FloatArray:
        """Return the sum over constraints, shape (n_interval, n_bus) [$/MWh]."""
        total = np.zeros((n_interval, self.amount.shape[1]))
        np.add.at(total, self.interval, self.amount)
        return total

    def names(self) -> list[str]:
        """Return the name of each label, as it stands in every table."""
        return names_of(self.labels)


@dataclass(frozen=True, kw_only=True)
class PriceSet:
    """Prices of one origin by interval and bus.

    Attributes
    ----------
    name : str
        How the set is called in every table and sentence: a formulation, ``"posted"``, or a name the analyst gave.
    intervals : (n_interval,)
        Starts of the intervals, UTC, ascending.
    buses : (n_bus,)
        Buses or other pricing nodes.
    lmp, energy, congestion, loss, reactive, low, high : (n_interval, n_bus)
        [$/MWh]; ``nan`` where there is no price. ``low`` and ``high`` bound the prices that the dispatch admits.
    congestion_parts, reactive_parts : ContributionBlock
        The components by constraint, as far as they are known.
    """

    name: str
    intervals: pd.DatetimeIndex
    buses: pd.Index[str]
    lmp: FloatArray
    energy: FloatArray
    congestion: FloatArray
    loss: FloatArray
    reactive: FloatArray
    low: FloatArray
    high: FloatArray
    congestion_parts: ContributionBlock
    reactive_parts: ContributionBlock

    @property
    def n_interval(self) -> int:
        """Number of intervals."""
        return len(self.intervals)

    @property
    def n_bus(self) -> int:
        """Number of buses."""
        return len(self.buses)

    def restricted(self, intervals: pd.DatetimeIndex, buses: pd.Index[str]) -> PriceSet:
        """Return the set on the given intervals and buses, all of which it must hold, in the given order."""
        rows = _positions(self.intervals, intervals, self.name, "interval")
        columns = _positions(self.buses, buses, self.name, "bus")
        if np.array_equal(rows, np.arange(self.n_interval)) and np.array_equal(columns, np.arange(self.n_bus)):
            return self
        chosen = np.ix_(rows, columns)
        moved = np.full(self.n_interval, -1, dtype=np.int64)
        moved[rows] = np.arange(rows.size)

        def restrict(block: ContributionBlock) -> ContributionBlock:
            kept = np.flatnonzero(moved[block.interval] >= 0)
            return replace(
                block,
                interval=moved[block.interval[kept]],
                label=block.label[kept],
                amount=block.amount[np.ix_(kept, columns)],
                shadow_price=block.shadow_price[kept],
            )

        return replace(
            self,
            intervals=intervals,
            buses=buses,
            congestion_parts=restrict(self.congestion_parts),
            reactive_parts=restrict(self.reactive_parts),
            lmp=self.lmp[chosen],
            energy=self.energy[chosen],
            congestion=self.congestion[chosen],
            loss=self.loss[chosen],
            reactive=self.reactive[chosen],
            low=self.low[chosen],
            high=self.high[chosen],
        )

    def rereferenced(
        self,
        weights: FloatArray,
        *,
        island: IntArray | None = None,
        tolerances: Tolerances = DEFAULT_TOLERANCES,
    ) -> tuple[PriceSet, BoolArray]:
        """Return the same prices with their components on another reference.

        Parameters
        ----------
        weights : (n_bus,) or (n_interval, n_bus)
            Reference weights [-]; buses without a price must weigh nothing.
        island : (n_bus,)
            Island number of each bus; one island unless given.

        Returns
        -------
        PriceSet
            Prices are untouched. Intervals that cannot be moved keep their own reference.
        identified : (n_interval,)
            False where the components do not determine those on the new reference, or where the energy component
            differs between buses although no islands are known.
        """
        v = np.broadcast_to(np.asarray(weights, dtype=float), self.lmp.shape)

        def moved(rows: IntArray | slice, congestion: FloatArray, reactive: FloatArray) -> ReferencedComponents:
            return rereference(
                self.energy[rows], self.loss[rows], congestion, reactive, v[rows],
                island=island, strict=False, tolerances=tolerances,
            )  # fmt: skip

        whole = moved(slice(None), self.congestion, self.reactive)
        priced = np.isfinite(self.energy + self.loss)
        identified = np.all(whole.identifiable | ~priced, axis=1) & priced.any(axis=1)
        if island is None:
            ends = [np.where(priced, self.energy, fill).T for fill in (-np.inf, np.inf)]
            spread = np.max(ends[0], axis=0) - np.min(ends[1], axis=0)
            identified &= spread <= 4.0 * tolerances.posted_rounding
        keep = ~identified[:, None]

        def block(part: ContributionBlock) -> ContributionBlock:
            if part.interval.size == 0:
                return part
            amount = moved(part.interval, part.amount, np.zeros_like(part.amount)).congestion
            return replace(part, amount=np.where(keep[part.interval], part.amount, amount))

        return replace(
            self,
            energy=np.where(keep, self.energy, whole.energy),
            loss=np.where(keep, self.loss, whole.loss),
            congestion=np.where(keep, self.congestion, whole.congestion),
            reactive=np.where(keep, self.reactive, whole.reactive),
            congestion_parts=block(self.congestion_parts),
            reactive_parts=block(self.reactive_parts),
        ), identified

    def with_hubs(self, hubs: pd.DataFrame) -> PriceSet:
        """Return the set with a column for each hub of the table ``hubs`` (hub, bus, weight).

        Components, and their parts by constraint, are the weighted sums of those of the hub's buses. A hub with
        a bus that this set does not know is left out.
        """
        known = hubs[hubs.groupby("hub")["bus"].transform(lambda bus: bus.isin(self.buses).all())]
        names = pd.Index(known["hub"].unique(), dtype="str").difference(self.buses, sort=False)
        if names.empty:
            return self
        known = known[known["hub"].isin(names)]
        weight = np.zeros((self.n_bus, len(names)))
        np.add.at(weight, (places(self.buses, known["bus"]), places(names, known["hub"])), known["weight"])
        weight /= weight.sum(axis=0)

        def widened(part: FloatArray) -> FloatArray:
            return np.hstack(
                [part, np.nan_to_num(part) @ weight + np.where(np.isnan(part), np.nan, 0.0) @ (weight != 0)]
            )

        return replace(
            self,
            buses=self.buses.append(names),
            lmp=widened(self.lmp),
            energy=widened(self.energy),
            congestion=widened(self.congestion),
            loss=widened(self.loss),
            reactive=widened(self.reactive),
            low=widened(self.low),
            high=widened(self.high),
            congestion_parts=replace(self.congestion_parts, amount=widened(self.congestion_parts.amount)),
            reactive_parts=replace(self.reactive_parts, amount=widened(self.reactive_parts.amount)),
        )


def names_of(keys: pd.MultiIndex) -> list[str]:
    """Return the name of each key; a key without a kind is only a name."""
    return [constraint_name(*map(str, key)) if key[0] else str(key[2]) for key in keys]


def common_ground(base: PriceSet, against: PriceSet) -> tuple[PriceSet, PriceSet]:
    """Return both sets on the intervals and buses that both hold.

    Raises
    ------
    DataError
        If they share no interval or no bus.
    """
    intervals = base.intervals.intersection(against.intervals)
    buses = base.buses[base.buses.isin(against.buses)]
    if intervals.empty or buses.empty:
        what = "interval" if intervals.empty else "bus"
        raise DataError(f"{base.name} and {against.name} share no {what}: nothing can be compared")
    return base.restricted(intervals, buses), against.restricted(intervals, buses)


def places(index: pd.Index[str] | pd.DatetimeIndex, values: pd.Series[Any]) -> IntArray:
    """Return where each value stands in an index, -1 where it does not."""
    return np.asarray(index.get_indexer(pd.Index(values)), dtype=np.int64)


def _positions(
    index: pd.Index[str] | pd.DatetimeIndex, wanted: pd.Index[str] | pd.DatetimeIndex, name: str, what: str
) -> IntArray:
    found = np.asarray(index.get_indexer(wanted), dtype=np.int64)
    if (found < 0).any():
        raise DataError(f"{name} has no {what} {wanted[int(np.argmin(found))]}")
    return found
