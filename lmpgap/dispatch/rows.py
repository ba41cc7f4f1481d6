"""Turn multipliers into constraint rows, for all formulations."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from functools import lru_cache

import numpy as np
from scipy import sparse

from lmpgap.dispatch.limits import FlowLimits
from lmpgap.dispatch.result import ConstraintRows, OperatingPoint
from lmpgap.scenario.network import BoolArray, FloatArray, IntArray, Network
from lmpgap.tolerances import Tolerances


def constraint_rows(
    *,
    kind: str,
    names: Sequence[str],
    owner: IntArray,
    direction: str | BoolArray,
    unit: str,
    to_unit: float,
    limit: FloatArray,
    value: FloatArray,
    slack: FloatArray,
    multiplier: FloatArray,
    angle_gain: FloatArray | None,
    n_branch: int,
    tolerances: Tolerances,
    base_mva: float,
    gave_way: BoolArray | None = None,
) -> ConstraintRows:
    """Return the rows that have a shadow price or are active; all arrays have one entry per candidate.

    Parameters
    ----------
    names, owner
        Names of branches, buses or resources, and the position of each candidate's among them.
    direction
        One for all, or True where it is ``"forward"`` and False where it is ``"reverse"``.
    slack : (n,)
        Distance to the limit, in internal units; negative where the limit gave way.
    angle_gain : (n,) or None
        Derivative of the constrained quantity along the angle of the owner, a branch; ``None`` where it does not
        turn with an angle.
    gave_way : (n,) or None
        True where the limit gave way at a penalty.
    """
    threshold = np.maximum(tolerances.active_slack_mw / base_mva, tolerances.active_slack_relative * np.abs(limit))
    shown: IntArray = np.flatnonzero((multiplier / to_unit > tolerances.shadow_price) | (slack <= threshold))
    if shown.size == 0:
        return _no_rows(n_branch)
    if isinstance(direction, str):
        directions: tuple[str, ...] = (direction,) * shown.size
    else:
        directions = tuple("forward" if forward else "reverse" for forward in direction[shown].tolist())
    return ConstraintRows(
        kind=(kind,) * shown.size,
        contingency=("",) * shown.size,
        monitored=tuple(names[i] for i in owner[shown].tolist()),
        direction=directions,
        unit=(unit,) * shown.size,
        to_unit=np.full(shown.size, to_unit),
        limit=limit[shown],
        value=value[shown],
        multiplier=np.maximum(multiplier[shown], 0.0),
        angle_gain=_gain(owner[shown], None if angle_gain is None else angle_gain[shown], n_branch),
        at_penalty=np.zeros(shown.size, dtype=bool) if gave_way is None else gave_way[shown],
    )


def apparent_power_rows(
    network: Network,
    rated: IntArray,
    point: OperatingPoint,
    multiplier: Mapping[str, FloatArray],
    soft: BoolArray,
    tolerances: Tolerances,
) -> list[ConstraintRows]:
    """Return the rows of MVA ratings at both ends of branches.

    The direction is that of the active flow at the from end, so that both ends share a key.

    Parameters
    ----------
    rated : (n,)
        Positions of the branches with a rating.
    multiplier
        By end, ``"from"`` and ``"to"``: fall of cost per unit of rating, each (n,) [$/h per pu].
    soft : (n,)
        True where the branch's shadow price stands at its penalty.
    """
    base, limit = network.base_mva, network.normal_rating[rated]
    parts = []
    for end, p, q, dp, dq in (
        ("from", point.p_from, point.q_from, point.dp_from, point.dq_from),
        ("to", point.p_to, point.q_to, point.dp_to, point.dq_to),
    ):
        size = np.hypot(p[rated], q[rated])
        turn = p[rated] * dp[rated] + q[rated] * dq[rated]
        parts.append(
            constraint_rows(
                kind="thermal",
                names=network.branches,
                owner=rated,
                direction=point.p_from[rated] >= 0.0,
                unit="MVA",
                to_unit=base,
                limit=limit,
                value=size,
                slack=limit - size,
                multiplier=multiplier[end],
                angle_gain=np.divide(turn, size, out=np.zeros_like(size), where=size > 0.0),
                n_branch=network.n_branch,
                tolerances=tolerances,
                base_mva=base,
                gave_way=soft & ((multiplier[end] > tolerances.shadow_price * base) | (size >= limit)),
            )
        )
    return parts


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
    """Return the rows of contingencies and interfaces, where they have a shadow price or are active.

    Parameters
    ----------
    p_from, dp_from : (n_branch,)
        Active flow at the from end and its derivative along the branch angle.
    multiplier : (n_row,)
        [$/h per pu]
    """
    if flow_limits.n_row == 0:
        return _no_rows(p_from.size)
    value = np.asarray(flow_limits.weights @ p_from)
    slack = flow_limits.limit - value
    threshold = np.maximum(
        tolerances.active_slack_mw / base_mva, tolerances.active_slack_relative * np.abs(flow_limits.limit)
    )
    shown: IntArray = np.flatnonzero((multiplier / base_mva > tolerances.shadow_price) | (slack <= threshold))
    if shown.size == 0:
        return _no_rows(p_from.size)
    gave_way = at_penalty(multiplier, excess, penalty, tolerances, base_mva)
    return ConstraintRows(
        kind=tuple(flow_limits.kind[i] for i in shown.tolist()),
        contingency=tuple(flow_limits.contingency[i] for i in shown.tolist()),
        monitored=tuple(flow_limits.monitored[i] for i in shown.tolist()),
        direction=tuple(flow_limits.direction[i] for i in shown.tolist()),
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
) -> BoolArray:
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


def joined(parts: Sequence[ConstraintRows], n_branch: int) -> ConstraintRows:
    """Return all rows of the parts, most of which are empty in most intervals."""
    return ConstraintRows.concatenate([part for part in parts if part.n_row], n_branch)


@lru_cache(maxsize=8)
def _no_rows(n_branch: int) -> ConstraintRows:
    return ConstraintRows.none(n_branch)


def _gain(owner: IntArray, gain: FloatArray | None, n_branch: int) -> sparse.csr_array:
    """Return one row per entry with its gain at its own branch, or empty rows, shape (n, n_branch)."""
    if gain is None:
        return sparse.csr_array((owner.size, n_branch))
    return sparse.csr_array((gain, owner, np.arange(owner.size + 1)), shape=(owner.size, n_branch))
