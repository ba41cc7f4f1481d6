"""The part of a network that is alive in an interval, with its own numbering.

A bus is dead when its island has no resource in service: nothing can hold its voltage or serve another MW, so there
is no price. Dead buses and branches out of service are left out of every program and put back as ``nan`` and zero.
Load at a dead bus goes unserved at the power balance penalty; without a penalty the interval is infeasible.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy import sparse

from lmpgap.errors import DataError, Fault
from lmpgap.scenario.network import BoolArray, FloatArray, IntArray, IntervalInputs, Network, incidence

SMALLEST_IMPEDANCE = 1e-9
"""Series impedances below this [pu] are refused: a branch needs a finite admittance."""


@dataclass(frozen=True, kw_only=True)
class LiveNetwork:
    """Positions and incidences of what takes part.

    Attributes
    ----------
    bus : (n_live_bus,)
        Positions in the network's buses.
    branch : (n_live_branch,)
        Positions in the network's branches.
    from_bus, to_bus : (n_live_branch,)
        End buses, counted among the live ones.
    from_incidence, to_incidence : sparse (n_live_bus, n_live_branch)
        1 where the branch leaves from, or arrives at, the bus.
    island : (n_live_bus,)
        Island number.
    bus_position : (n_bus,)
        Live position of each bus of the network; -1 where dead.
    """

    network: Network
    bus: IntArray
    branch: IntArray
    from_bus: IntArray
    to_bus: IntArray
    from_incidence: sparse.csr_array
    to_incidence: sparse.csr_array
    island: IntArray
    bus_position: IntArray

    @property
    def n_bus(self) -> int:
        """Number of live buses."""
        return self.bus.size

    @property
    def n_branch(self) -> int:
        """Number of branches in service between live buses."""
        return self.branch.size

    def references(self) -> IntArray:
        """Return the first bus of each island, counted among the live ones."""
        return np.unique(self.island, return_index=True)[1].astype(np.int64)

    def to_buses(self, values: FloatArray, dead: float) -> FloatArray:
        """Return values of live buses at all buses, shape (n_bus,)."""
        result = np.full(self.network.n_bus, dead)
        result[self.bus] = values
        return result

    def to_branches(self, values: FloatArray) -> FloatArray:
        """Return values of live branches at all branches, shape (n_branch,), zero elsewhere."""
        result = np.zeros(self.network.n_branch)
        result[self.branch] = values
        return result

    def dead(self) -> IntArray:
        """Return the positions of the dead buses."""
        return np.flatnonzero(self.bus_position < 0)


def live_buses(network: Network, island: IntArray, inputs: IntervalInputs) -> BoolArray:
    """Return True at each bus whose island has a resource in service, shape (n_bus,)."""
    fed = np.zeros(int(island.max(initial=-1)) + 1, dtype=bool)
    fed[island[network.resource_bus[inputs.resource_in_service]]] = True
    return np.asarray(fed[island], dtype=bool)


def live_network(network: Network, branch_in_service: BoolArray, island: IntArray, bus_live: BoolArray) -> LiveNetwork:
    """Return the live part of a network.

    Raises
    ------
    DataError
        Naming every branch in service without impedance.
    """
    bus = np.flatnonzero(bus_live)
    position = np.full(network.n_bus, -1, dtype=np.int64)
    position[bus] = np.arange(bus.size)
    branch = np.flatnonzero(branch_in_service & bus_live[network.from_bus])
    impedance = np.hypot(network.r[branch], network.x[branch])
    if np.any(impedance < SMALLEST_IMPEDANCE):
        raise DataError(
            "branches without impedance cannot be solved",
            [
                Fault(
                    table="branches",
                    message=f"branch {network.branches[k]!r} has no series impedance",
                    column="x_pu",
                    value=str(network.x[k]),
                    allowed="an impedance, e.g. 1e-4, or one bus in place of the two",
                )
                for k in branch[impedance < SMALLEST_IMPEDANCE]
            ],
        )
    from_bus, to_bus = position[network.from_bus[branch]], position[network.to_bus[branch]]
    return LiveNetwork(
        network=network,
        bus=bus,
        branch=branch,
        from_bus=from_bus,
        to_bus=to_bus,
        from_incidence=sparse.csr_array(incidence(from_bus, bus.size).T),
        to_incidence=sparse.csr_array(incidence(to_bus, bus.size).T),
        island=island[bus],
        bus_position=position,
    )


def bus_list(network: Network, positions: IntArray) -> str:
    """Return bus names for a message, ten at most."""
    names = ", ".join(network.buses[i] for i in positions[:10].tolist())
    return names + (f" and {positions.size - 10} more" if positions.size > 10 else "")
