"""The constraints that may stand behind posted congestion, with their shift factors and loading."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy import sparse

from lmpgap.dispatch.limits import FlowLimits, interface_limits
from lmpgap.dispatch.outage_factors import OutageFactors
from lmpgap.dispatch.result import OperatingPoint, constraint_name
from lmpgap.divergence.shift_factors import AngleResponse
from lmpgap.scenario.network import FloatArray, IntArray, IntervalInputs, Network

CONTINGENCY_LOADING = 0.8
"""Contingency pairs below this share of their emergency rating after the outage are no candidates [-]: they are many,
and a pair that binds in the operator's dispatch is not far from its limit at any sensible operating point."""


@dataclass(frozen=True, kw_only=True)
class Candidates:
    """Constraints of one interval, one entry for both directions.

    Attributes
    ----------
    kind, contingency, monitored : (n_candidate,)
        Key without the direction.
    gain : sparse (n_candidate, n_branch)
        Derivative of the forward flow with respect to the branch angles [pu/rad].
    response : AngleResponse
        Angle system of the interval.
    reverse_scale : (n_candidate,)
        Shadow price of the forward direction that has the effect of one unit in the reverse direction [-]; not
        exactly one where the ends of a branch differ.
    loading : (n_candidate,)
        Flow over limit, negative in the reverse direction [-]; ``nan`` without an operating point.
    flow_mw : (n_candidate,)
        Positive in the forward direction [MW or MVA].
    """

    kind: tuple[str, ...]
    contingency: tuple[str, ...]
    monitored: tuple[str, ...]
    gain: sparse.csr_array
    response: AngleResponse
    reverse_scale: FloatArray
    loading: FloatArray
    flow_mw: FloatArray

    @property
    def n_candidate(self) -> int:
        """Number of candidates."""
        return len(self.kind)

    def columns(self, candidates: IntArray) -> FloatArray:
        """Return the congestion per unit of shadow price of the forward direction, (n_chosen, n_bus) [-].

        Minus it is that of the reverse direction. Made when asked for: of very many candidates few are looked at.
        """
        return self.response.congestion(sparse.csr_array(self.gain[candidates]))

    def name(self, candidate: int, forward: bool) -> str:
        """Return the constraint's name as it stands in every table."""
        direction = "forward" if forward else "reverse"
        return constraint_name(self.kind[candidate], self.contingency[candidate], self.monitored[candidate], direction)

    def shadow_price(self, candidate: int, coefficient: float) -> float:
        """Return the shadow price behind a coefficient of the column [$/MWh], never negative."""
        return coefficient if coefficient >= 0.0 else -coefficient / float(self.reverse_scale[candidate])


def candidates_at(
    network: Network,
    inputs: IntervalInputs,
    point: OperatingPoint,
    response: AngleResponse,
    outages: OutageFactors | None = None,
) -> Candidates:
    """Return rated branches, interfaces and loaded contingency pairs with their effect on every bus price.

    Parameters
    ----------
    network, inputs
        Ratings, interface limits and topology of the interval.
    point, response
        Operating point and its angle system.
    outages
        Outage factors of the same topology; contingency pairs are left out without them.
    """
    base = network.base_mva
    rated = np.flatnonzero(
        inputs.branch_in_service
        & np.isfinite(network.normal_rating)
        & (network.normal_rating > 0.0)
        & (point.dp_from != 0.0)
    )
    thermal = _thermal(network, point, rated)
    limits = interface_limits(network, inputs)
    # One entry per interface: the forward row, or the reverse one turned round where forward is unlimited.
    rows = _one_per_pair(limits)
    if outages is not None and network.contingencies is not None:
        pairs = outages.screen(point.p_from / CONTINGENCY_LOADING, 0.0)
        pair_limits = outages.limits(pairs)
        rows = FlowLimits.concatenate([rows, _one_per_pair(pair_limits)], network.n_branch)
    sign = np.array([1.0 if direction == "forward" else -1.0 for direction in rows.direction])
    weights = sparse.csr_array(rows.weights.multiply(sign[:, None]))
    gain = sparse.csr_array(sparse.vstack([thermal.gain, weights.multiply(point.dp_from[None, :])], format="csr"))
    flow = np.concatenate([thermal.flow, weights @ point.p_from])
    limit = np.concatenate([network.normal_rating[rated], rows.limit])
    return Candidates(
        kind=("thermal",) * rated.size + rows.kind,
        contingency=("",) * rated.size + rows.contingency,
        monitored=tuple(network.branches[k] for k in rated) + rows.monitored,
        gain=gain,
        response=response,
        reverse_scale=np.concatenate([thermal.reverse_scale, np.ones(rows.n_row)]),
        loading=flow / limit,
        flow_mw=flow * base,
    )


@dataclass(frozen=True, kw_only=True)
class _Thermal:
    gain: sparse.csr_array
    reverse_scale: FloatArray
    flow: FloatArray


def _thermal(network: Network, point: OperatingPoint, rated: IntArray) -> _Thermal:
    """Return branch limits: the apparent power at the sending end, which in a linear dispatch is active power."""
    along_from, size_from = _apparent(point.p_from, point.q_from, point.dp_from, point.dq_from, rated)
    along_to, size_to = _apparent(point.p_to, point.q_to, point.dp_to, point.dq_to, rated)
    # Seen from the end that sends; the other end carries the limit in the other direction.
    forward = np.where(point.p_from[rated] >= 0.0, along_from, point.dp_from[rated])
    reverse = np.where(point.p_to[rated] >= 0.0, along_to, point.dp_to[rated])
    active = point.p_from[rated] - point.p_to[rated]
    size = np.maximum(size_from, size_to)
    gain = sparse.csr_array((forward, (np.arange(rated.size), rated)), shape=(rated.size, network.n_branch))
    with np.errstate(divide="ignore", invalid="ignore"):
        scale = np.abs(reverse / forward)
    return _Thermal(
        gain=gain,
        reverse_scale=np.where(np.isfinite(scale) & (scale > 0.0), scale, 1.0),
        flow=np.where(active >= 0.0, size, -size),
    )


def _apparent(
    p: FloatArray, q: FloatArray, dp: FloatArray, dq: FloatArray, rated: IntArray
) -> tuple[FloatArray, FloatArray]:
    """Return the derivative of the apparent power along the branch angle, and the apparent power."""
    p, q, dp, dq = p[rated], q[rated], dp[rated], dq[rated]
    size = np.hypot(p, q)
    along = np.where(size > 1e-9, (p * dp + q * dq) / np.maximum(size, 1e-9), dp)
    # Where reactive flow dominates, the apparent power hardly turns with the angle; the active flow tells more.
    return np.where(np.abs(along) > 0.05 * np.abs(dp), along, dp), size


def _one_per_pair(limits: FlowLimits) -> FlowLimits:
    """Return one row per (kind, contingency, monitored), the forward one where both directions are there."""
    chosen: dict[tuple[str, str, str], int] = {}
    keys = zip(limits.kind, limits.contingency, limits.monitored, strict=True)
    for row, key in enumerate(keys):
        if key not in chosen or limits.direction[row] == "forward":
            chosen[key] = row
    rows = np.array(sorted(chosen.values()), dtype=np.int64)
    return FlowLimits(
        weights=sparse.csr_array(limits.weights[rows]),
        limit=limits.limit[rows],
        kind=tuple(limits.kind[i] for i in rows),
        contingency=tuple(limits.contingency[i] for i in rows),
        monitored=tuple(limits.monitored[i] for i in rows),
        direction=tuple(limits.direction[i] for i in rows),
    )
