"""Rows of the run table ``audit``: what a linear dispatch would do to the AC grid, and what repairing it takes.

The audit belongs to the AC solve of an interval: it needs that solve's limits and optimum.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np

from lmpgap.dispatch.ac import AcDispatch
from lmpgap.dispatch.ac_audit import audit_dispatch
from lmpgap.dispatch.ac_repair import repair_dispatch
from lmpgap.dispatch.formulation import Formulation
from lmpgap.dispatch.limits import FlowLimits
from lmpgap.dispatch.result import DispatchResult, constraint_name
from lmpgap.scenario.network import IntervalInputs, Network

AUDITED = ("dc", "dc-loss")
"""Formulations whose dispatch is put on the AC grid."""

MOVED_MW = 0.01
"""Redispatch of a resource below this is left out of the table [MW]."""

_FINDING = {
    "thermal": "overload",
    "contingency": "overload",
    "interface": "overload",
    "voltage": "voltage",
    "angle": "angle",
    "reactive": "reactive",
    "output": "output",
}


class AuditRow(NamedTuple):
    """One row: what was found, where, its value and limit, and their unit."""

    finding: str
    element: str
    value: float
    limit: float
    unit: str


def audit_rows(
    network: Network,
    inputs: IntervalInputs,
    linear: DispatchResult,
    limits: FlowLimits,
    optimum: DispatchResult,
    dispatch: Formulation | None,
    currency: str = "$",
) -> list[AuditRow]:
    """Return the audit of one linear dispatch.

    Parameters
    ----------
    linear
        The dispatch whose outputs are put on the AC grid.
    limits
        Contingency and interface limits of the AC dispatch.
    optimum
        AC optimum of the interval.
    dispatch
        AC dispatch of the topology, to search the nearest AC-feasible redispatch with; ``None`` leaves that out.

    Returns
    -------
    list of AuditRow
        ``missing-power`` and ``losses`` [MW]; ``overload``, ``voltage``, ``angle``, ``reactive`` and ``output`` with
        value and limit; ``no-power-flow`` where the AC equations have no solution near the dispatch; and of the
        repair ``redispatch`` per resource, ``moved`` [MW] and ``repair-cost`` over the AC optimum [$/h].
    """
    audit = audit_dispatch(network, inputs, linear, limits)
    nothing = float("nan")
    if not audit.converged:
        return [AuditRow("no-power-flow", audit.reason, nothing, nothing, "")]
    rows = [
        AuditRow("missing-power", "", audit.missing_mw, nothing, "MW"),
        AuditRow("losses", "", audit.losses_mw, nothing, "MW"),
        AuditRow("angle-error", "", audit.largest_angle_error_deg, nothing, "deg"),
    ]
    broken = audit.broken
    for k in range(broken.n_row):
        name = constraint_name(broken.kind[k], broken.contingency[k], broken.monitored[k], broken.direction[k])
        rows.append(
            AuditRow(
                _FINDING[broken.kind[k]],
                broken.monitored[k] if broken.kind[k] in ("voltage", "reactive", "output") else name,
                float(broken.value[k]),
                float(broken.limit[k]),
                broken.unit[k],
            )
        )
    if isinstance(dispatch, AcDispatch):
        rows += _repair_rows(network, inputs, linear, limits, optimum, dispatch, currency)
    return rows


def _repair_rows(
    network: Network,
    inputs: IntervalInputs,
    linear: DispatchResult,
    limits: FlowLimits,
    optimum: DispatchResult,
    dispatch: AcDispatch,
    currency: str,
) -> list[AuditRow]:
    repair = repair_dispatch(network, inputs, linear, limits, dispatch, optimum=optimum)
    nearest, nothing = repair.nearest, float("nan")
    if not nearest.result.status.has_solution:
        return [AuditRow("no-repair", nearest.result.message, nothing, nothing, "")]
    moved = np.flatnonzero(np.abs(nearest.change_mw) > MOVED_MW)
    return [
        AuditRow("moved", "", nearest.moved_mw, nothing, "MW"),
        AuditRow("repair-cost", "", repair.cost_over_optimum, nothing, f"{currency}/h"),
        *(AuditRow("redispatch", network.resources[i], float(nearest.change_mw[i]), nothing, "MW") for i in moved),
    ]
