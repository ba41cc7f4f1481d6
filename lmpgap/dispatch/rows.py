"""Turn multipliers of the convex formulations into constraint rows."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from scipy import sparse

from lmpgap.dispatch.limits import FlowLimits
from lmpgap.dispatch.result import ConstraintRows
from lmpgap.scenario.network import FloatArray, IntArray
from lmpgap.tolerances import Tolerances


def constraint_rows(
    *,
    kind: str,
    monitored: Sequence[str],
    direction: Sequence[str],
    unit: str,
    to_unit: float,
    limit: FloatArray,
    value: FloatArray,
    slack: FloatArray,
    multiplier: FloatArray,
    angle_gain: sparse.csr_array,
    tolerances: Tolerances,
    base_mva: float,
    at_penalty: np.ndarray | None = None,
) -> ConstraintRows:
    """Return the rows that have a shadow price or are active; all arrays have one entry per candidate.

    Parameters
    ----------
    slack : (n,)
        Distance to the limit, in internal units; negative where the limit gave way.
    """
    threshold = np.maximum(tolerances.active_slack_mw / base_mva, tolerances.active_slack_relative * np.abs(limit))
    shown: IntArray = np.flatnonzero((multiplier / to_unit > tolerances.shadow_price) | (slack <= threshold))
    return ConstraintRows(
        kind=(kind,) * shown.size,
        contingency=("",) * shown.size,
        monitored=tuple(monitored[i] for i in shown.tolist()),
        direction=tuple(direction[i] for i in shown.tolist()),
        unit=(unit,) * shown.size,
        to_unit=np.full(shown.size, to_unit),
        limit=limit[shown],
        value=value[shown],
        multiplier=np.maximum(multiplier[shown], 0.0),
        angle_gain=sparse.csr_array(angle_gain[shown]),
        at_penalty=np.zeros(shown.size, dtype=bool) if at_penalty is None else at_penalty[shown],
    )


def flow_limit_rows(
    flow_limits: FlowLimits,
    *,
    p_from: FloatArray,
    dp_from: FloatArray,
    multiplier: FloatArray,
    excess: FloatArray | None,
    penalty: float | None,
    tolerances: Tolerances,
    base_mva: float,
) -> ConstraintRows:
    """Return the rows of contingencies and interfaces.

    Parameters
    ----------
    p_from, dp_from : (n_branch,)
        Active flow at the from end and its derivative along the branch angle.
    multiplier : (n_row,)
        [$/h per pu]
    """
    value = np.asarray(flow_limits.weights @ p_from)
    slack = flow_limits.limit - value
    threshold = np.maximum(
        tolerances.active_slack_mw / base_mva, tolerances.active_slack_relative * np.abs(flow_limits.limit)
    )
    shown: IntArray = np.flatnonzero((multiplier / base_mva > tolerances.shadow_price) | (slack <= threshold))
    gave_way = at_penalty(multiplier, excess, penalty, tolerances, base_mva)
    return ConstraintRows(
        kind=tuple(flow_limits.kind[i] for i in shown),
        contingency=tuple(flow_limits.contingency[i] for i in shown),
        monitored=tuple(flow_limits.monitored[i] for i in shown),
        direction=tuple(flow_limits.direction[i] for i in shown),
        unit=("MW",) * shown.size,
        to_unit=np.full(shown.size, base_mva),
        limit=flow_limits.limit[shown],
        value=value[shown],
        multiplier=np.maximum(multiplier[shown], 0.0),
        angle_gain=sparse.csr_array(flow_limits.weights[shown] @ sparse.diags_array(dp_from, format="csr")),
        at_penalty=gave_way[shown],
    )


def at_penalty(
    multiplier: FloatArray,
    excess: FloatArray | None,
    penalty: float | None,
    tolerances: Tolerances,
    base_mva: float,
) -> np.ndarray:
    """Return True where a soft limit gave way or its shadow price stands at the penalty, shape (n,).

    Parameters
    ----------
    multiplier : (n,)
        Sum over the rows that share one excess variable [$/h per pu].
    excess : (n,) or None
        By how much the limit gave way [pu].
    penalty
        [$/MWh]
    """
    if penalty is None or excess is None:
        return np.zeros(multiplier.size, dtype=bool)
    price = multiplier / base_mva
    stands = np.abs(price - penalty) <= tolerances.penalty_match * abs(penalty)
    return np.asarray(stands | (excess > tolerances.active_slack_mw / base_mva))


def branch_gain(branch: IntArray, gain: FloatArray, n_branch: int) -> sparse.csr_array:
    """Return one row per entry with its gain at its own branch, shape (n, n_branch)."""
    return sparse.csr_array((gain, (np.arange(branch.size), branch)), shape=(branch.size, n_branch))
