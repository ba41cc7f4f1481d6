"""What decides the form of the AC program, and where everything stands in it."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy import sparse

from lmpgap.dispatch.live import LiveNetwork, live_network
from lmpgap.dispatch.options import DispatchOptions
from lmpgap.dispatch.supply import rated_branches
from lmpgap.scenario.network import BoolArray, IntArray, Network


@dataclass(frozen=True, kw_only=True)
class AcShape:
    """Everything that decides the form of the program; intervals of the same shape share one program.

    Attributes
    ----------
    live : (n_bus,)
        True where the bus is energised.
    branch_in_service : (n_branch,)
    segment_resource : (n_segment,)
        Owner of each offer segment.
    bid_bus : (n_bid,)
        Bus of each bid.
    flow_weights : sparse (n_row, n_branch)
        Rows limited from above on active flows at the from ends.
    movement : bool
        True when a price on moving away from a given dispatch is part of the cost.
    """

    live: BoolArray
    branch_in_service: BoolArray
    segment_resource: IntArray
    bid_bus: IntArray
    flow_weights: sparse.csr_array
    movement: bool = False

    @property
    def key(self) -> tuple[object, ...]:
        """A value that is equal exactly for equal shapes."""
        weights = self.flow_weights
        return (
            self.live.tobytes(),
            self.branch_in_service.tobytes(),
            self.segment_resource.tobytes(),
            self.bid_bus.tobytes(),
            weights.shape,
            np.asarray(weights.indptr, np.int64).tobytes(),
            np.asarray(weights.indices, np.int64).tobytes(),
            np.asarray(weights.data, np.float64).tobytes(),
            self.movement,
        )


@dataclass(frozen=True, kw_only=True)
class AcLayout:
    """Where each block of variables, constraint rows and parameters stands.

    Attributes
    ----------
    variables, rows, parameters
        Slice by block name, in order.
    live
        The buses and branches that take part.
    rated, angle_limited : (n,)
        Branches, counted among the live ones, with a finite rating or angle limit.
    """

    variables: dict[str, slice]
    rows: dict[str, slice]
    parameters: dict[str, slice]
    live: LiveNetwork
    rated: IntArray
    angle_limited: IntArray

    @property
    def n_var(self) -> int:
        """Number of variables."""
        return _length(self.variables)

    @property
    def n_row(self) -> int:
        """Number of constraint rows."""
        return _length(self.rows)

    @property
    def n_parameter(self) -> int:
        """Number of parameters."""
        return _length(self.parameters)


def make_layout(network: Network, shape: AcShape, options: DispatchOptions) -> AcLayout:
    """Return where everything stands in the program of a shape."""
    live = live_network(network, shape.branch_in_service, network.islands(shape.branch_in_service), shape.live)
    rated = rated_branches(live)
    angle_min, angle_max = network.angle_min[live.branch], network.angle_max[live.branch]
    limited = np.flatnonzero(np.isfinite(angle_min) | np.isfinite(angle_max))
    n_segment, n_bid, n_flow = shape.segment_resource.size, shape.bid_bus.size, shape.flow_weights.shape[0]
    n_moved = network.n_resource + n_bid if shape.movement else 0
    soft_balance = live.n_bus if options.penalties.power_balance is not None else 0
    soft_flow = options.penalties.transmission is not None
    return AcLayout(
        variables=_slices(
            angle=live.n_bus,
            magnitude=live.n_bus,
            segment=n_segment,
            q=network.n_resource,
            bid=n_bid,
            unserved=soft_balance,
            surplus=soft_balance,
            # One excess per branch: both ends give way together, so their shadow prices add up to the penalty.
            excess=rated.size if soft_flow else 0,
            flow_excess=n_flow if soft_flow else 0,
            up=n_moved,
            down=n_moved,
        ),
        rows=_slices(
            active=live.n_bus,
            reactive=live.n_bus,
            thermal_from=rated.size,
            thermal_to=rated.size,
            angle=limited.size,
            flow=n_flow,
            movement=n_moved,
        ),
        parameters=_slices(price=n_segment, slope=n_segment, bid_price=n_bid, movement_price=1),
        live=live,
        rated=rated,
        angle_limited=limited,
    )


def _slices(**sizes: int) -> dict[str, slice]:
    ends = np.cumsum(list(sizes.values())).tolist()
    return {name: slice(end - size, end) for (name, size), end in zip(sizes.items(), ends, strict=True)}


def _length(blocks: dict[str, slice]) -> int:
    return max((place.stop for place in blocks.values()), default=0)
