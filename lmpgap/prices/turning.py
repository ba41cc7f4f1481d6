"""Jacobians of the bus injections for a turn of the bus angles, and the factorised system of the price split."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy import sparse
from scipy.sparse.linalg import SuperLU, splu

from lmpgap.dispatch.result import DispatchResult
from lmpgap.errors import NumericalError
from lmpgap.scenario.network import BoolArray, FloatArray, IntArray, Network


@dataclass(frozen=True, kw_only=True)
class Turning:
    """Jacobians of the injections for a turn of the bus angles, and the factorised system.

    Transposed Jacobians are written by their coordinates, (turned bus, bus that injects), four per branch.
    """

    from_bus: IntArray
    to_bus: IntArray
    coordinates: tuple[IntArray, IntArray]
    reactive: FloatArray
    factor: SuperLU
    pinned: BoolArray
    live: BoolArray

    @staticmethod
    def of(network: Network, result: DispatchResult, island: IntArray, live: BoolArray) -> Turning:
        """Return the factorised system at a result's operating point.

        Raises
        ------
        NumericalError
            When the operating point leaves an island's angles undetermined.
        """
        point, n_bus = result.point, network.n_bus
        start, end = network.from_bus, network.to_bus
        turned, injecting = np.concatenate([start, end, start, end]), np.concatenate([start, start, end, end])
        active = np.concatenate([point.dp_from, -point.dp_from, point.dp_to, -point.dp_to])
        # One bus per island, the one with the stiffest connection, takes the place of the redundant equation.
        own = np.bincount(start, point.dp_from, n_bus) - np.bincount(end, point.dp_to, n_bus)
        stiffness = np.where(live, np.abs(own), -1.0)
        order = np.lexsort((-stiffness, island))
        _, first = np.unique(island[order], return_index=True)
        pinned = np.zeros(n_bus, dtype=bool)
        pinned[order[first]] = True
        fixed = pinned | ~live
        held = np.flatnonzero(fixed)
        kept = ~fixed[turned]
        system = sparse.csc_array(
            (
                np.concatenate([active[kept], np.ones(held.size)]),
                (np.concatenate([turned[kept], held]), np.concatenate([injecting[kept], held])),
            ),
            shape=(n_bus, n_bus),
        )
        try:
            factor = splu(system)
        except RuntimeError as error:
            raise NumericalError(
                f"{result.formulation}: the flows do not determine the angles of an island (a branch in service "
                "whose flow does not turn with its angle), so prices cannot be split; check branch reactances"
            ) from error
        return Turning(
            from_bus=start,
            to_bus=end,
            coordinates=(turned, injecting),
            reactive=np.concatenate([point.dq_from, -point.dq_from, point.dq_to, -point.dq_to]),
            factor=factor,
            pinned=pinned,
            live=live,
        )

    def at_buses(self, angle_gain: sparse.csr_array) -> FloatArray:
        """Return gains with each branch angle as gains with each bus angle, (n_bus, n_row)."""
        row = np.repeat(np.arange(angle_gain.shape[0]), np.diff(angle_gain.indptr))
        gain = np.zeros((self.live.size, angle_gain.shape[0]))
        np.add.at(gain, (self.from_bus[angle_gain.indices], row), angle_gain.data)
        np.add.at(gain, (self.to_bus[angle_gain.indices], row), -angle_gain.data)
        return gain

    def reactive_source(self, reactive_price: FloatArray) -> sparse.csc_array:
        """Return Q_theta' with each bus's column times its reactive price, (n_bus, n_bus)."""
        used = np.flatnonzero(reactive_price[self.coordinates[1]] * self.reactive)
        turned, injecting = self.coordinates[0][used], self.coordinates[1][used]
        n_bus = self.live.size
        return sparse.csc_array(
            (self.reactive[used] * reactive_price[injecting], (turned, injecting)), shape=(n_bus, n_bus)
        )

    def solve(self, right_side: FloatArray) -> FloatArray:
        """Return the columns X of P_theta' X = right side that vanish at the pinned buses, (n_bus, n_column)."""
        if right_side.shape[1] == 0:
            return np.zeros(right_side.shape)
        free = (~self.pinned & self.live)[:, None]
        return np.asarray(self.factor.solve(np.ascontiguousarray(right_side * free)))

    def null_vector(self) -> FloatArray:
        """Return the vector of P_theta' DF = 0 that is one at the pinned buses, (n_bus,)."""
        return np.asarray(self.factor.solve(self.pinned.astype(float)))
