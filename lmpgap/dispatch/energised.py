"""Which buses are energised in an interval."""

from __future__ import annotations

import numpy as np

from lmpgap.scenario.network import BoolArray, IntervalInputs, Network


def energised_buses(network: Network, inputs: IntervalInputs) -> BoolArray:
    """Return which buses belong to an island with a resource in service, shape (n_bus,).

    Nothing can hold the voltage of the other islands: their buses are dead, carry no flow, serve no load and have
    no price.
    """
    island = network.islands(inputs.branch_in_service)
    fed = np.zeros(int(island.max(initial=-1)) + 1, dtype=bool)
    fed[island[network.resource_bus[inputs.resource_in_service]]] = True
    return np.asarray(fed[island], dtype=bool)
