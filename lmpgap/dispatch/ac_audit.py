"""What an AC network does with a linear dispatch: a power flow at its outputs, and every limit that it breaks.

A linear dispatch serves the load and, at best, an estimate of the losses. In the AC network its outputs leave power
missing, flows go where the impedances send them, and reactive power has to come from somewhere. The audit says how
much is missing, who supplies it under the chosen rule, and which ratings, voltage bands, angle limits, reactive ranges
and output ranges are broken. `lmpgap.dispatch.ac_repair` says what it takes to mend it.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from lmpgap.dispatch.ac_violations import (
    LimitViolations,
    limit_violations,
    net_injection,
    resource_buses,
    resource_totals,
)
from lmpgap.dispatch.limits import FlowLimits
from lmpgap.dispatch.power_flow import PowerFlow, solve_power_flow
from lmpgap.dispatch.result import DispatchResult
from lmpgap.errors import SolveError
from lmpgap.scenario.network import FloatArray, IntArray, IntervalInputs, Network

_DUST_PU = 1e-6
"""Violations below this are rounding of the power flow and of the dispatch [pu, rad]."""


@dataclass(frozen=True, kw_only=True)
class BrokenLimits:
    """Limits broken in the power flow, one row each, worst first within a kind.

    Every field is a column of a table; key, unit and meaning are those of a run's table of constraints.

    Attributes
    ----------
    kind, contingency, monitored, direction : (n_row,)
        Key; kinds are thermal, contingency, interface, voltage, angle, reactive and ``"output"`` (the active range of
        a resource). ``monitored`` is a bus for voltage and reactive, a resource for output.
    unit : (n_row,)
        MVA, MW, pu, deg or Mvar.
    limit, value : (n_row,)
        In ``unit``.
    """

    kind: tuple[str, ...]
    contingency: tuple[str, ...]
    monitored: tuple[str, ...]
    direction: tuple[str, ...]
    unit: tuple[str, ...]
    limit: FloatArray
    value: FloatArray

    @property
    def n_row(self) -> int:
        """Number of rows."""
        return len(self.kind)


@dataclass(frozen=True, kw_only=True)
class AcAudit:
    """AC power flow at a dispatch's outputs; without convergence every figure is ``nan`` and no limit is listed.

    Attributes
    ----------
    converged : bool
    reason : str
        Why the power flow did not converge, and whether reactive limits are the cause; empty when it did.
    iterations : int
    missing_mw : float
        Power that the dispatch does not supply: load and losses less outputs [MW]. Negative where the dispatch supplies
        too much.
    losses_mw : float
        Loss on branches and in shunts [MW].
    slack_mw : (n_bus,)
        Who supplies what is missing [MW].
    at_reactive_limit : (n_bus,)
        1 where a bus lost its voltage to its upper reactive limit, -1 to the lower, 0 elsewhere.
    angle_deg, dispatch_angle_deg : (n_branch,)
        Angle difference from minus to, in the power flow and in the dispatch [deg]; zero out of service.
    largest_angle_error_deg : float
        Largest difference between the two [deg].
    broken : BrokenLimits
    flow : PowerFlow
    violations : LimitViolations or None
        The same by network position.
    """

    converged: bool
    reason: str
    iterations: int
    missing_mw: float
    losses_mw: float
    slack_mw: FloatArray
    at_reactive_limit: IntArray
    angle_deg: FloatArray
    dispatch_angle_deg: FloatArray
    largest_angle_error_deg: float
    broken: BrokenLimits
    flow: PowerFlow
    violations: LimitViolations | None


def audit_dispatch(
    network: Network,
    inputs: IntervalInputs,
    result: DispatchResult,
    flow_limits: FlowLimits,
    *,
    slack_bus: str | None = None,
    voltage: FloatArray | None = None,
    enforce_reactive: bool = True,
) -> AcAudit:
    """Return what an AC power flow makes of a dispatch's outputs.

    Parameters
    ----------
    result
        A dispatch with a solution, usually ``dc`` or ``dc-loss``; its outputs, served bids, unserved load and surplus
        are taken as they are.
    flow_limits
        Contingency and interface limits to look at besides the network's own.
    slack_bus
        Bus that supplies what is missing in its island; by default all resources in service do, by capacity.
    voltage : (n_bus,), optional
        Magnitudes that buses with resources hold [pu]; by default 1 pu, or the end of the band nearest to it.
    enforce_reactive
        Let buses lose their voltage when their resources run out of reactive power; otherwise the excess is listed as
        broken limits.

    Returns
    -------
    AcAudit

    Raises
    ------
    SolveError
        When the dispatch has no solution, or there is no bus of that name.
    """
    if not result.status.has_solution:
        raise SolveError(
            f"interval {inputs.start}: a {result.formulation} dispatch that is {result.status.value} "
            "cannot be audited: solve it first"
        )
    if slack_bus is not None and slack_bus not in network.buses:
        raise SolveError(f"there is no bus {slack_bus!r} to supply the missing power: name one of the network's buses")
    share = resource_totals(network, inputs, np.maximum(inputs.p_max, 0.0))
    if slack_bus is not None:
        island = network.islands(inputs.branch_in_service)
        position = network.buses.index(slack_bus)
        share[island == island[position]] = 0.0
        share[position] = 1.0
    band = np.clip(np.ones(network.n_bus), network.v_min, network.v_max) if voltage is None else voltage
    active, reactive = net_injection(network, inputs, result)
    limits = (
        resource_totals(network, inputs, network.q_min) - inputs.load_q,
        resource_totals(network, inputs, network.q_max) - inputs.load_q,
    )
    angle = np.nan_to_num(result.point.angle)

    def power_flow(enforced: bool) -> PowerFlow:
        return solve_power_flow(
            network,
            inputs.branch_in_service,
            p_injection=active,
            q_injection=reactive,
            v_setpoint=band,
            holds_voltage=resource_buses(network, inputs),
            slack_share=share,
            q_limits=limits if enforced else None,
            angle_start=angle,
        )

    flow = power_flow(enforce_reactive)
    if not flow.converged:
        cause = ""
        if enforce_reactive and power_flow(False).converged:
            cause = "; it converges when reactive limits are not enforced: reactive power is what is short"
        return _without_power_flow(network, flow, flow.reason + cause)
    found = limit_violations(network, inputs, flow_limits, flow, result.p)
    on = inputs.branch_in_service & ~flow.dead[network.from_bus]
    own, given = (
        np.rad2deg(np.where(on, values[network.from_bus] - values[network.to_bus], 0.0))
        for values in (flow.angle, angle)
    )
    shunts = network.shunt_g * flow.magnitude**2
    return AcAudit(
        converged=True,
        reason="",
        iterations=flow.iterations,
        missing_mw=flow.slack_mw,
        losses_mw=network.base_mva * float(np.sum(flow.point.loss) + np.sum(shunts)),
        slack_mw=network.base_mva * flow.slack,
        at_reactive_limit=flow.at_q_limit,
        angle_deg=own,
        dispatch_angle_deg=given,
        largest_angle_error_deg=float(np.max(np.abs(own - given), initial=0.0)),
        broken=_broken(network, inputs, flow_limits, flow, found),
        flow=flow,
        violations=found,
    )


def _broken(
    network: Network,
    inputs: IntervalInputs,
    flow_limits: FlowLimits,
    flow: PowerFlow,
    found: LimitViolations,
) -> BrokenLimits:
    base, degree = network.base_mva, float(np.rad2deg(1.0))
    q_min, q_max = (resource_totals(network, inputs, bound) for bound in (network.q_min, network.q_max))
    blank = ("",) * max(network.n_bus, network.n_branch, network.n_resource, flow_limits.n_row)
    forward = np.where(flow.point.p_from >= 0.0, "forward", "reverse")
    rows: list[tuple[str, str, str, str, str, float, float]] = []

    def add(
        kind: str,
        unit: str,
        to_unit: float,
        excess: FloatArray,
        names: tuple[str, ...],
        low: FloatArray,
        high: FloatArray,
        direction: tuple[str, ...] | None = None,
        contingency: tuple[str, ...] = blank,
        kinds: tuple[str, ...] | None = None,
    ) -> None:
        broken = np.flatnonzero(np.abs(excess) > _DUST_PU)
        for i in broken[np.argsort(-np.abs(excess[broken]), kind="stable")].tolist():
            limit = high[i] if excess[i] > 0 else low[i]
            way = direction[i] if direction is not None else "upper" if excess[i] > 0 else "lower"
            rows.append(
                (
                    kinds[i] if kinds is not None else kind,
                    contingency[i],
                    names[i],
                    way,
                    unit,
                    to_unit * float(limit),
                    to_unit * float(limit + excess[i]),
                )
            )

    rating = network.normal_rating
    add("thermal", "MVA", base, found.thermal, network.branches, rating, rating, tuple(forward.tolist()))
    add(
        "",
        "MW",
        base,
        found.flow,
        flow_limits.monitored,
        flow_limits.limit,
        flow_limits.limit,
        flow_limits.direction,
        flow_limits.contingency,
        flow_limits.kind,
    )
    add("voltage", "pu", 1.0, found.voltage, network.buses, network.v_min, network.v_max)
    add("angle", "deg", degree, found.angle, network.branches, network.angle_min, network.angle_max)
    add("reactive", "Mvar", base, found.reactive, network.buses, q_min, q_max)
    add("output", "MW", base, found.active, network.resources, inputs.p_min, inputs.p_max)
    columns = list(zip(*rows, strict=True)) if rows else [()] * 7
    return BrokenLimits(
        kind=columns[0],
        contingency=columns[1],
        monitored=columns[2],
        direction=columns[3],
        unit=columns[4],
        limit=np.array(columns[5], dtype=float),
        value=np.array(columns[6], dtype=float),
    )


def _without_power_flow(network: Network, flow: PowerFlow, reason: str) -> AcAudit:
    bus, branch = np.full(network.n_bus, np.nan), np.full(network.n_branch, np.nan)
    return AcAudit(
        converged=False,
        reason=reason,
        iterations=flow.iterations,
        missing_mw=float("nan"),
        losses_mw=float("nan"),
        slack_mw=bus,
        at_reactive_limit=flow.at_q_limit,
        angle_deg=branch,
        dispatch_angle_deg=branch,
        largest_angle_error_deg=float("nan"),
        broken=BrokenLimits(
            kind=(), contingency=(), monitored=(), direction=(), unit=(), limit=np.zeros(0), value=np.zeros(0)
        ),
        flow=flow,
        violations=None,
    )
