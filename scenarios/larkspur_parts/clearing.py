"""Clear the week as the invented operator does: a linear dispatch with marginal losses, hour by hour.

The same linear dispatch is what lmpgap calls `dc-loss`, so prices posted from it without a planted fault agree with
lmpgap's own to the rounding.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from lmpgap.dispatch.formulation import Formulation, build_formulation
from lmpgap.dispatch.limits import interface_limits
from lmpgap.dispatch.options import DispatchOptions
from lmpgap.dispatch.outage_factors import OutageFactors
from lmpgap.dispatch.security import solve_secure
from lmpgap.prices.components import split_prices
from lmpgap.prices.keys import ConstraintKey
from lmpgap.scenario.network import IntervalInputs
from lmpgap.scenario.scenario import Scenario
from lmpgap.tolerances import DEFAULT_TOLERANCES

from .demand import mesa_export_limit
from .weather import FloatArray


@dataclass(frozen=True)
class ClearedHour:
    """One cleared hour on the operator's reference.

    Attributes
    ----------
    energy
        Energy price [$/MWh].
    congestion, loss, delivery_factor : (n_bus,)
        Congestion as lmpgap signs it: part of the price [$/MWh].
    keys, shadow_price, congestion_by_key
        Binding constraints: (n_key,), (n_key,) and (n_key, n_bus).
    output : (n_resource,)
        [MW]
    """

    energy: float
    congestion: FloatArray
    loss: FloatArray
    delivery_factor: FloatArray
    keys: tuple[ConstraintKey, ...]
    shadow_price: FloatArray
    congestion_by_key: FloatArray
    output: FloatArray


def clear(scenario: Scenario, hours: range, ignore_outage_of: str = "") -> dict[int, ClearedHour]:
    """Return the cleared hours by position in the week.

    Parameters
    ----------
    ignore_outage_of
        A branch that the operator believed to be in service in these hours.
    """
    network, settings = scenario.network, scenario.settings
    options = DispatchOptions(dc=settings.dc, penalties=settings.penalties)
    built: dict[bytes, tuple[Formulation, OutageFactors]] = {}
    cleared = {}
    for hour in hours:
        inputs = scenario.inputs(hour)
        if ignore_outage_of:
            inputs = _as_without_outage(scenario, hour, ignore_outage_of)
        topology = inputs.branch_in_service
        if topology.tobytes() not in built:
            built[topology.tobytes()] = (
                build_formulation("dc-loss", network, topology, options),
                OutageFactors(network, topology, settings.dc),
            )
        formulation, outages = built[topology.tobytes()]
        result, _ = solve_secure(formulation, inputs, interface_limits(network, inputs), outages, DEFAULT_TOLERANCES)
        if not result.status.has_solution:
            raise SystemExit(f"hour {inputs.start} did not clear: {result.message}")
        weights = scenario.reference_weights(hour)
        split = split_prices(network, topology, result, weights, DEFAULT_TOLERANCES)
        cleared[hour] = ClearedHour(
            energy=float(split.energy[0]),
            congestion=split.congestion,
            loss=split.loss,
            delivery_factor=split.delivery_factor,
            keys=split.keys,
            shadow_price=split.shadow_price,
            congestion_by_key=split.congestion_by_key,
            output=result.p * network.base_mva,
        )
    return cleared


def _as_without_outage(scenario: Scenario, hour: int, branch: str) -> IntervalInputs:
    """Put a branch back into service, with the export limit that goes with it."""
    network, inputs = scenario.network, scenario.inputs(hour)
    in_service = np.array(inputs.branch_in_service)
    in_service[network.branches.index(branch)] = True
    limit = np.array(inputs.interface_limit)
    assert network.interfaces is not None
    limit[network.interfaces.names.index("Mesa export")] = mesa_export_limit(hour, with_outage=False) / network.base_mva
    return replace(inputs, branch_in_service=in_service, interface_limit=limit)
