"""May a relaxed dispatch be believed? An AC power flow at its dispatch and voltages, held against every limit.

Neither the slack of the cones nor the angle sum around loops nor the missing power alone tells a right relaxed price
from a wrong one: every limit of the model has to be looked at where the power flows really go.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from lmpgap.dispatch.ac_violations import limit_violations, net_injection, resource_buses, resource_totals
from lmpgap.dispatch.limits import FlowLimits
from lmpgap.dispatch.power_flow import nodal_mismatch, solve_power_flow
from lmpgap.dispatch.result import DispatchResult, constraint_name
from lmpgap.scenario.network import FloatArray, IntervalInputs, Network


@dataclass(frozen=True, kw_only=True)
class AcCheck:
    """Largest violations of an AC power flow at a relaxed dispatch.

    When the power flow did not converge, everything that rests on it is ``inf``.

    Attributes
    ----------
    converged : bool
    reason : str
        Why the power flow did not converge; empty when it did.
    iterations : int
        Newton steps.
    mismatch_mw : float
        Largest active power that the relaxed voltages and recovered angles leave unbalanced at a bus, before any
        Newton step [MW].
    missing_mw : float
        Power that the dispatch lacks (or has too much of) at the power flow's solution, summed over islands [MW].
    overload : float
        Largest excess over a thermal, contingency or interface limit, relative to the limit [-].
    overloaded : str
        Name of that constraint; empty when nothing is overloaded.
    voltage_pu : float
        Largest excursion out of a voltage band [pu].
    angle_deg : float
        Largest violation of an angle limit [deg].
    reactive_mvar : float
        Largest reactive power beyond what the resources of a bus can give [Mvar].
    active_mw : float
        Largest output beyond a resource's range, once the missing power is shared out [MW].
    """

    converged: bool
    reason: str
    iterations: int
    mismatch_mw: float
    missing_mw: float
    overload: float
    overloaded: str
    voltage_pu: float
    angle_deg: float
    reactive_mvar: float
    active_mw: float


def ac_check(network: Network, inputs: IntervalInputs, result: DispatchResult, flow_limits: FlowLimits) -> AcCheck:
    """Return what an AC power flow at a relaxed dispatch does to every limit.

    Buses with resources hold the voltage of the relaxed point, the missing power is shared by capacity, and Newton's
    method starts from the recovered angles. Reactive limits are not enforced but reported, so that the power flow stays
    at the voltages that the relaxation chose. Where a limit gave way at its penalty in the dispatch, only what goes
    beyond that counts.

    Parameters
    ----------
    result
        With a solution; its operating point has the recovered angles.

    Returns
    -------
    AcCheck
    """
    active, reactive = net_injection(network, inputs, result)
    magnitude = np.sqrt(np.where(np.isfinite(result.point.w) & (result.point.w > 0), result.point.w, 1.0))
    angle = np.nan_to_num(result.point.angle)
    unbalanced, _ = nodal_mismatch(
        network,
        inputs.branch_in_service,
        magnitude=magnitude,
        angle=angle,
        p_injection=active,
        q_injection=reactive,
    )
    holds = resource_buses(network, inputs)
    flow = solve_power_flow(
        network,
        inputs.branch_in_service,
        p_injection=active,
        q_injection=reactive,
        v_setpoint=magnitude,
        holds_voltage=holds,
        slack_share=resource_totals(network, inputs, np.maximum(inputs.p_max, 0.0)),
        magnitude_start=magnitude,
        angle_start=angle,
    )
    base = network.base_mva
    mismatch_mw = base * _largest(np.where(flow.dead, 0.0, unbalanced))
    if not flow.converged:
        endless = float("inf")
        return AcCheck(
            converged=False,
            reason=flow.reason,
            iterations=flow.iterations,
            mismatch_mw=mismatch_mw,
            missing_mw=endless,
            overload=endless,
            overloaded="",
            voltage_pu=endless,
            angle_deg=endless,
            reactive_mvar=endless,
            active_mw=endless,
        )
    found = limit_violations(network, inputs, flow_limits, flow, result.p, room=result)
    thermal, beyond = _relative(found.thermal, network.normal_rating), _relative(found.flow, flow_limits.limit)
    overload, name = 0.0, ""
    if _largest(thermal) > 0:
        k = int(np.argmax(thermal))
        forward = flow.point.p_from[k] >= flow.point.p_to[k]
        overload = _largest(thermal)
        name = constraint_name("thermal", "", network.branches[k], "forward" if forward else "reverse")
    if _largest(beyond) > overload:
        k = int(np.argmax(beyond))
        overload = _largest(beyond)
        name = constraint_name(
            flow_limits.kind[k], flow_limits.contingency[k], flow_limits.monitored[k], flow_limits.direction[k]
        )
    return AcCheck(
        converged=True,
        reason="",
        iterations=flow.iterations,
        mismatch_mw=mismatch_mw,
        missing_mw=float(np.sum(np.abs(flow.slack))) * base,
        overload=overload,
        overloaded=name,
        voltage_pu=_largest(found.voltage),
        angle_deg=float(np.rad2deg(_largest(found.angle))),
        reactive_mvar=_largest(found.reactive) * base,
        active_mw=_largest(found.active) * base,
    )


def _relative(excess: FloatArray, limit: FloatArray) -> FloatArray:
    """Return excess over limit, zero where nothing is exceeded and infinite over a limit of zero."""
    with np.errstate(divide="ignore"):
        return np.where(excess > 0.0, excess / np.maximum(np.abs(limit), 0.0), 0.0)


def _largest(values: FloatArray) -> float:
    return float(np.max(np.abs(values), initial=0.0))
