"""Operating points of a run, interval by interval, as flows and factorised angle systems."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field, replace

import numpy as np
import pandas as pd
from scipy import sparse

from lmpgap.dispatch.outage_factors import OutageFactors
from lmpgap.dispatch.result import OperatingPoint
from lmpgap.divergence.candidates import Candidates, candidates_at
from lmpgap.divergence.price_set import places
from lmpgap.divergence.shift_factors import AngleResponse, linear_point_at, point_from_voltages
from lmpgap.scenario.network import FloatArray, IntervalInputs, Network
from lmpgap.scenario.settings import DcConvention


@dataclass(frozen=True, kw_only=True)
class OperatingPoints:
    """Voltages of every interval under one formulation.

    Attributes
    ----------
    formulation : str
        Whose flow equations hold.
    network, inputs, convention
        The network, the inputs by position, and the convention of linear flows.
    magnitude, angle : (n_interval, n_bus)
        [pu], [rad]; ``nan`` where there is no solution.
    linear_factors : bool
        Take shift and loss factors from the linear flow equations at these flows.
    """

    formulation: str
    network: Network
    inputs: Callable[[int], IntervalInputs]
    convention: DcConvention
    magnitude: FloatArray
    angle: FloatArray
    linear_factors: bool = False
    _outages: dict[bytes, OutageFactors] = field(default_factory=dict)

    @property
    def name(self) -> str:
        """How the operating point is called in sentences and tables."""
        return f"{self.formulation}, linear factors" if self.linear_factors else self.formulation

    def with_linear_factors(self) -> OperatingPoints:
        """Return the same flows with linear shift and loss factors, as a market takes them from an AC solution."""
        return replace(self, linear_factors=True)

    def known(self, position: int) -> bool:
        """Return whether the interval has an operating point."""
        return bool(np.isfinite(self.angle[position]).any())

    def at(self, position: int) -> tuple[OperatingPoint, AngleResponse]:
        """Return flows and the factorised angle system of one interval."""
        service = self.inputs(position).branch_in_service
        point = point_from_voltages(
            self.network, service, self.formulation, self.magnitude[position], self.angle[position], self.convention
        )
        if self.linear_factors:
            point = linear_point_at(self.network, point, self.convention)
        return point, AngleResponse.of(self.network, service, point)

    def candidates(self, position: int) -> tuple[Candidates, FloatArray]:
        """Return the constraints of one interval that may bind, and its delivery factors (n_bus,)."""
        inputs = self.inputs(position)
        point, response = self.at(position)
        outages = None
        if self.network.contingencies is not None:
            key = inputs.branch_in_service.tobytes()
            if key not in self._outages:
                self._outages[key] = OutageFactors(self.network, inputs.branch_in_service, self.convention)
            outages = self._outages[key]
        return candidates_at(self.network, inputs, point, response, outages), response.delivery_factor

    def delivery_factors(self) -> FloatArray:
        """Return the delivery factors of all intervals, (n_interval, n_bus) [-]; ``nan`` without a solution."""
        factors = np.full(self.angle.shape, np.nan)
        for position in range(len(self.angle)):
            if self.known(position):
                factors[position] = self.at(position)[1].delivery_factor
        return factors


def operating_points(
    operating_point: pd.DataFrame,
    network: Network,
    inputs: Callable[[int], IntervalInputs],
    intervals: pd.DatetimeIndex,
    convention: DcConvention,
) -> dict[str, OperatingPoints]:
    """Return the operating points of a run by formulation.

    Parameters
    ----------
    operating_point
        Run table ``operating_point``.
    inputs
        Inputs of an interval by its position in ``intervals``.
    """
    buses = pd.Index(network.buses, dtype="str")
    found = {}
    for formulation, rows in operating_point.groupby("formulation", sort=False):
        at, bus = places(intervals, rows["interval_start"]), places(buses, rows["bus"])
        inside = (at >= 0) & (bus >= 0)
        magnitude, angle = (np.full((len(intervals), len(buses)), np.nan) for _ in range(2))
        magnitude[at[inside], bus[inside]] = rows["v_pu"].to_numpy(float)[inside]
        angle[at[inside], bus[inside]] = np.deg2rad(rows["angle_deg"].to_numpy(float)[inside])
        found[str(formulation)] = OperatingPoints(
            formulation=str(formulation),
            network=network,
            inputs=inputs,
            convention=convention,
            magnitude=magnitude,
            angle=angle,
        )
    return found


def node_mix(network: Network, hubs: pd.DataFrame | None, nodes: pd.Index[str]) -> sparse.csr_array:
    """Return what each node is made of, sparse (n_node, n_bus): a bus of itself, a hub of its weighted buses.

    Rows of nodes that are neither are empty.
    """
    buses = pd.Index(network.buses, dtype="str")
    at = np.asarray(buses.get_indexer(nodes), dtype=np.int64)
    row = np.flatnonzero(at >= 0)
    column, weight = at[row], np.ones(row.size)
    if hubs is not None and not hubs.empty:
        hub, member = places(nodes, hubs["hub"]), places(buses, hubs["bus"])
        # A bus of the same name comes first.
        used = np.flatnonzero((hub >= 0) & (member >= 0) & (at[hub] < 0))
        total = hubs.groupby("hub")["weight"].transform("sum").to_numpy(float)
        row, column = np.concatenate([row, hub[used]]), np.concatenate([column, member[used]])
        weight = np.concatenate([weight, (hubs["weight"].to_numpy(float) / total)[used]])
    return sparse.csr_array((weight, (row, column)), shape=(len(nodes), len(buses)))
