"""The electrical network and one interval's inputs, per unit, as plain arrays.

Everything here is numpy and scipy only: the dispatch works on these and never sees a table.
Powers are per unit of ``base_mva``, angles are radians, money is currency per hour, prices are
currency per MWh. Arrays are in the order of the tables; positions are zero-based.
"""

from __future__ import annotations

from dataclasses import dataclass, field, replace
from functools import cached_property
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

if TYPE_CHECKING:  # scipy.sparse takes a third of a second to import, and `lmpgap check` needs none of it
    from scipy import sparse

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
BoolArray = NDArray[np.bool_]

_TOPOLOGIES_KNOWN = 16
"""Topologies whose islands are remembered; a week has a few, a screening of outages has thousands."""


@dataclass(frozen=True, kw_only=True)
class Interfaces:
    """Weighted sums of branch flows that are limited together.

    Attributes
    ----------
    names : (n_interface,)
    weights : sparse (n_interface, n_branch)
        Weight of each branch's active flow at its from end [-].
    """

    names: tuple[str, ...]
    weights: sparse.csr_array


@dataclass(frozen=True, kw_only=True)
class Contingencies:
    """Sets of branches that go out together, and the branches they are checked on.

    Attributes
    ----------
    names : (n_contingency,)
    branches : (n_contingency,) of integer arrays
        Positions of the branches that go out.
    monitored : (n_branch,)
        True where a contingency is checked.
    """

    names: tuple[str, ...]
    branches: tuple[IntArray, ...]
    monitored: BoolArray


@dataclass(frozen=True, kw_only=True)
class Network:
    """A transmission network, per unit; pi-model branches with the ideal transformer at the from end.

    Attributes
    ----------
    base_mva : float
        Power base [MVA].
    buses : (n_bus,)
        Bus names.
    v_min, v_max : (n_bus,)
        Voltage band [pu].
    shunt_g, shunt_b : (n_bus,)
        Active power consumed and reactive power injected at 1 pu [pu].
    branches : (n_branch,)
        Branch names.
    from_bus, to_bus : (n_branch,)
        Positions of the end buses.
    r, x : (n_branch,)
        Series resistance and reactance [pu].
    charging : (n_branch,)
        Total charging susceptance [pu].
    tap : (n_branch,)
        Tap ratio at the from end [-]; 1 for a line.
    shift : (n_branch,)
        Phase shift at the from end [rad].
    normal_rating, emergency_rating : (n_branch,)
        Apparent-power limits [pu], ``inf`` where there is none.
    angle_min, angle_max : (n_branch,)
        Limits of the angle difference from minus to [rad], ``-inf`` and ``inf`` where there is none.
    resources : (n_resource,)
        Resource names.
    resource_bus : (n_resource,)
        Position of each resource's bus.
    q_min, q_max : (n_resource,)
        Reactive limits [pu], ``-inf`` and ``inf`` where there is none.
    """

    base_mva: float
    buses: tuple[str, ...]
    v_min: FloatArray
    v_max: FloatArray
    shunt_g: FloatArray
    shunt_b: FloatArray
    branches: tuple[str, ...]
    from_bus: IntArray
    to_bus: IntArray
    r: FloatArray
    x: FloatArray
    charging: FloatArray
    tap: FloatArray
    shift: FloatArray
    normal_rating: FloatArray
    emergency_rating: FloatArray
    angle_min: FloatArray
    angle_max: FloatArray
    resources: tuple[str, ...]
    resource_bus: IntArray
    q_min: FloatArray
    q_max: FloatArray
    interfaces: Interfaces | None = None
    contingencies: Contingencies | None = None

    @property
    def n_bus(self) -> int:
        """Number of buses."""
        return len(self.buses)

    @property
    def n_branch(self) -> int:
        """Number of branches, in service or not."""
        return len(self.branches)

    @property
    def n_resource(self) -> int:
        """Number of resources, in service or not."""
        return len(self.resources)

    def bus_to_resource(self) -> sparse.csr_array:
        """Return the (n_bus, n_resource) incidence: 1 where the resource injects at the bus."""
        return incidence(self.resource_bus, self.n_bus).T.tocsr()

    def from_incidence(self) -> sparse.csr_array:
        """Return the (n_branch, n_bus) incidence of from ends."""
        return incidence(self.from_bus, self.n_bus)

    def to_incidence(self) -> sparse.csr_array:
        """Return the (n_branch, n_bus) incidence of to ends."""
        return incidence(self.to_bus, self.n_bus)

    def islands(self, branch_in_service: BoolArray) -> IntArray:
        """Return the island number of each bus, shape (n_bus,), counting from zero; read only."""
        key = branch_in_service.tobytes()
        if key not in self._islands_known:
            while len(self._islands_known) >= _TOPOLOGIES_KNOWN:
                del self._islands_known[next(iter(self._islands_known))]
            self._islands_known[key] = self._find_islands(branch_in_service)
        return self._islands_known[key]

    @cached_property
    def _islands_known(self) -> dict[bytes, IntArray]:
        """Islands by topology: every step of an interval asks for them again."""
        return {}

    def _find_islands(self, branch_in_service: BoolArray) -> IntArray:
        from scipy import sparse
        from scipy.sparse import csgraph

        on = np.flatnonzero(branch_in_service)
        links = sparse.coo_array(
            (np.ones(on.size), (self.from_bus[on], self.to_bus[on])), shape=(self.n_bus, self.n_bus)
        )
        _, label = csgraph.connected_components(links, directed=False)
        island = np.asarray(label, dtype=np.int64)
        island.setflags(write=False)
        return island

    def with_changes(self, **changes: object) -> Network:
        """Return a copy with some arrays exchanged, e.g. another rating."""
        return replace(self, **changes)  # type: ignore[arg-type]


@dataclass(frozen=True, kw_only=True)
class OfferSegments:
    """Offer curves of one interval, clipped to the range each resource may run in.

    A segment covers ``width`` of output; its marginal price runs from ``price_start`` to ``price_end``
    (equal for a step). Marginal prices never fall along one resource's segments.

    Attributes
    ----------
    resource : (n_segment,)
        Position of the resource that owns the segment.
    width : (n_segment,)
        Largest output in the segment [pu]; zero for a segment that is out of range this interval.
    price_start, price_end : (n_segment,)
        Marginal price at the start and at the end of the segment [$/MWh].
    """

    resource: IntArray
    width: FloatArray
    price_start: FloatArray
    price_end: FloatArray


@dataclass(frozen=True, kw_only=True)
class BidSegments:
    """Load that is served only below its price; unity power factor.

    Attributes
    ----------
    bus : (n_bid,)
        Position of the bus.
    width : (n_bid,)
        Largest load [pu].
    price : (n_bid,)
        Value of the load [$/MWh].
    """

    bus: IntArray
    width: FloatArray
    price: FloatArray

    @staticmethod
    def none() -> BidSegments:
        """Return an empty set of bids."""
        return BidSegments(bus=np.zeros(0, np.int64), width=np.zeros(0), price=np.zeros(0))


@dataclass(frozen=True, kw_only=True)
class IntervalInputs:
    """What changes from one interval to the next.

    Attributes
    ----------
    start : str
        Start of the interval, ISO 8601 with offset; a label for messages and keys.
    load_p, load_q : (n_bus,)
        Fixed load [pu].
    branch_in_service : (n_branch,)
    resource_in_service : (n_resource,)
    p_min, p_max : (n_resource,)
        Range of active output [pu]; both zero when out of service.
    segments : OfferSegments
        Output above ``p_min``: ``p = p_min + sum of the resource's segments``.
    fixed_cost : (n_resource,)
        No-load cost plus the offered cost of ``p_min`` [$/h]; zero when out of service.
    bids : BidSegments
    interface_limit, interface_reverse_limit : (n_interface,)
        Limits in and against the interface's direction [pu], ``inf`` where there is none.
    """

    start: str
    load_p: FloatArray
    load_q: FloatArray
    branch_in_service: BoolArray
    resource_in_service: BoolArray
    p_min: FloatArray
    p_max: FloatArray
    segments: OfferSegments
    fixed_cost: FloatArray
    bids: BidSegments = field(default_factory=BidSegments.none)
    interface_limit: FloatArray = field(default_factory=lambda: np.zeros(0))
    interface_reverse_limit: FloatArray = field(default_factory=lambda: np.zeros(0))


def incidence(column: IntArray, n_column: int) -> sparse.csr_array:
    """Return a (len(column), n_column) matrix with a single one per row."""
    from scipy import sparse

    n_row = column.size
    return sparse.csr_array((np.ones(n_row), column.astype(np.int64), np.arange(n_row + 1)), shape=(n_row, n_column))
