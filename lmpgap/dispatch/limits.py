"""Limits that all formulations share: weighted sums of active branch flows, and what makes them up."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy import sparse

from lmpgap.dispatch.sparse_rows import ScaledRows, stacked_rows
from lmpgap.scenario.network import FloatArray, IntervalInputs, Network


@dataclass(frozen=True, kw_only=True)
class FlowLimits:
    """Upper limits on weighted sums of active flows at the from ends: ``weights @ p_from <= limit``.

    Contingencies and interfaces come as these, so that one piece of code per formulation serves both. With a
    transmission penalty every row may give way at that price.

    Attributes
    ----------
    weights : sparse (n_row, n_branch)
        [-]; already signed for the direction.
    limit : (n_row,)
        [pu]
    kind, contingency, monitored, direction : (n_row,)
        Key of the row, as in `lmpgap.dispatch.result.ConstraintRows`.
    """

    weights: sparse.csr_array
    limit: FloatArray
    kind: tuple[str, ...]
    contingency: tuple[str, ...]
    monitored: tuple[str, ...]
    direction: tuple[str, ...]

    @property
    def n_row(self) -> int:
        """Number of rows."""
        return len(self.kind)

    @staticmethod
    def none(n_branch: int) -> FlowLimits:
        """Return an empty set."""
        return FlowLimits(
            weights=sparse.csr_array((0, n_branch)),
            limit=np.zeros(0),
            kind=(),
            contingency=(),
            monitored=(),
            direction=(),
        )

    @staticmethod
    def concatenate(parts: list[FlowLimits], n_branch: int) -> FlowLimits:
        """Return all rows of the parts, one after the other."""
        if not parts:
            return FlowLimits.none(n_branch)
        return FlowLimits(
            weights=sparse.csr_array(sparse.vstack([part.weights for part in parts], format="csr")),
            limit=np.concatenate([part.limit for part in parts]),
            kind=tuple(x for part in parts for x in part.kind),
            contingency=tuple(x for part in parts for x in part.contingency),
            monitored=tuple(x for part in parts for x in part.monitored),
            direction=tuple(x for part in parts for x in part.direction),
        )


def interface_limits(network: Network, inputs: IntervalInputs) -> FlowLimits:
    """Return the interface limits of one interval, both directions, unlimited ones left out."""
    interfaces = network.interfaces
    if interfaces is None:
        return FlowLimits.none(network.n_branch)
    forward = np.flatnonzero(np.isfinite(inputs.interface_limit))
    reverse = np.flatnonzero(np.isfinite(inputs.interface_reverse_limit))
    n_row = forward.size + reverse.size
    return FlowLimits(
        weights=stacked_rows(
            [ScaledRows(interfaces.weights, forward, 1.0), ScaledRows(interfaces.weights, reverse, -1.0)],
            network.n_branch,
        ),
        limit=np.concatenate([inputs.interface_limit[forward], inputs.interface_reverse_limit[reverse]]),
        kind=("interface",) * n_row,
        contingency=("",) * n_row,
        monitored=tuple(interfaces.names[i] for i in (*forward.tolist(), *reverse.tolist())),
        direction=("forward",) * forward.size + ("reverse",) * reverse.size,
    )
