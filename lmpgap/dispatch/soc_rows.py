"""Constraint rows of the cone relaxation: ratings, angles, voltage bands, reactive ranges, weighted flows."""

from __future__ import annotations

import numpy as np

from lmpgap.dispatch.conic import ConicProgram, ConicSolution
from lmpgap.dispatch.convex import ConvexModel
from lmpgap.dispatch.limits import FlowLimits
from lmpgap.dispatch.live import LiveNetwork
from lmpgap.dispatch.options import DispatchOptions
from lmpgap.dispatch.result import ConstraintRows, OperatingPoint
from lmpgap.dispatch.rows import apparent_power_rows, at_penalty, constraint_rows, flow_limit_rows, joined
from lmpgap.dispatch.supply import rated_branches
from lmpgap.scenario.network import FloatArray, IntArray, IntervalInputs, Network

STEEPEST = 1e6
"""Largest tangent of an angle limit; one within a millionth of a right angle is no limit in the relaxation."""


def angle_limits(network: Network, live: LiveNetwork, side: str) -> tuple[IntArray, FloatArray]:
    """Return live branches with an angle limit on a side, and its tangent behind the phase shift.

    The relaxation knows only the half plane c' > 0: limits of a right angle or more are left out.
    """
    limit = (network.angle_max if side == "upper" else network.angle_min)[live.branch] - network.shift[live.branch]
    limited = np.flatnonzero(np.abs(limit) < np.arctan(STEEPEST))
    return limited, np.tan(limit[limited])


def soc_constraints(
    network: Network,
    model: ConvexModel,
    program: ConicProgram,
    solution: ConicSolution,
    inputs: IntervalInputs,
    flow_limits: FlowLimits,
    point: OperatingPoint,
    options: DispatchOptions,
) -> ConstraintRows:
    """Return all rows with a shadow price or active."""
    parts: list[ConstraintRows] = [
        *_thermal(network, model, solution, point, options),
        *_angle(network, model, solution, point, options),
        *_voltage(network, model, solution, point, options),
        *_reactive(network, model, program, solution, inputs, options),
    ]
    template = model.template
    excess = template.variables.get("flow limit excess")
    parts.append(
        flow_limit_rows(
            flow_limits,
            p_from=point.p_from,
            dp_from=point.dp_from,
            multiplier=solution.inequality_dual[template.inequalities["flow limit"]],
            excess=None if excess is None else solution.x[excess],
            penalty=options.penalties.transmission,
            tolerances=options.tolerances,
            base_mva=network.base_mva,
        )
    )
    return joined(parts, network.n_branch)


def _thermal(
    network: Network,
    model: ConvexModel,
    solution: ConicSolution,
    point: OperatingPoint,
    options: DispatchOptions,
) -> list[ConstraintRows]:
    """Ratings at both ends; the direction is that of the active flow at the from end, so that both ends share a key."""
    template, base = model.template, network.base_mva
    rated = model.live.branch[rated_branches(model.live)]
    head = {end: solution.cone_dual[template.cones[f"thermal {end}"]][::3] for end in ("from", "to")}
    excess = template.variables.get("excess")
    soft = at_penalty(
        head["from"] + head["to"],
        None if excess is None else solution.x[excess],
        options.penalties.transmission,
        options.tolerances,
        base,
    )
    return apparent_power_rows(network, rated, point, head, soft, options.tolerances)


def _angle(
    network: Network,
    model: ConvexModel,
    solution: ConicSolution,
    point: OperatingPoint,
    options: DispatchOptions,
) -> list[ConstraintRows]:
    """Angle limits: the row's multiplier times its derivative along the angle is the multiplier per radian."""
    parts: list[ConstraintRows] = []
    for side, sign, limit in (("upper", 1.0, network.angle_max), ("lower", -1.0, network.angle_min)):
        limited, tangent = angle_limits(network, model.live, side)
        branch = model.live.branch[limited]
        # Products behind the transformer: c' + j s' = W exp(-j shift) / tau.
        product = (point.c[branch] + 1j * point.s[branch]) * np.exp(-1j * network.shift[branch]) / network.tap[branch]
        steepness = product.real + tangent * product.imag
        value = np.angle(product) + network.shift[branch]
        parts.append(
            constraint_rows(
                kind="angle",
                names=network.branches,
                owner=branch,
                direction=side,
                unit="deg",
                to_unit=180.0 / np.pi,
                limit=limit[branch],
                value=value,
                slack=sign * (limit[branch] - value),
                multiplier=solution.inequality_dual[model.template.inequalities[f"angle {side}"]] * steepness,
                angle_gain=np.full(branch.size, sign),
                n_branch=network.n_branch,
                tolerances=options.tolerances,
                base_mva=network.base_mva,
            )
        )
    return parts


def _voltage(
    network: Network,
    model: ConvexModel,
    solution: ConicSolution,
    point: OperatingPoint,
    options: DispatchOptions,
) -> list[ConstraintRows]:
    """Voltage bands, per unit of magnitude: dw = 2 V dV."""
    bus, where = model.live.bus, model.template.variables["w"]
    magnitude = np.sqrt(np.maximum(point.w[bus], 0.0))
    return [
        constraint_rows(
            kind="voltage",
            names=network.buses,
            owner=bus,
            direction=side,
            unit="pu",
            to_unit=1.0,
            limit=limit[bus],
            value=magnitude,
            slack=sign * (limit[bus] - magnitude),
            multiplier=dual[where] * 2.0 * magnitude,
            angle_gain=None,
            n_branch=network.n_branch,
            tolerances=options.tolerances,
            base_mva=network.base_mva,
        )
        for side, sign, limit, dual in (
            ("upper", 1.0, network.v_max, solution.upper_dual),
            ("lower", -1.0, network.v_min, solution.lower_dual),
        )
    ]


def _reactive(
    network: Network,
    model: ConvexModel,
    program: ConicProgram,
    solution: ConicSolution,
    inputs: IntervalInputs,
    options: DispatchOptions,
) -> list[ConstraintRows]:
    """Reactive ranges of the resources in service."""
    where = model.template.variables["q"]
    q, base = solution.x[where], network.base_mva
    parts: list[ConstraintRows] = []
    for side, sign, limit, dual in (
        ("upper", 1.0, program.upper[where], solution.upper_dual[where]),
        ("lower", -1.0, program.lower[where], solution.lower_dual[where]),
    ):
        on = np.flatnonzero(
            inputs.resource_in_service & np.isfinite(limit) & (model.live.bus_position[network.resource_bus] >= 0)
        )
        parts.append(
            constraint_rows(
                kind="reactive",
                names=network.resources,
                owner=on,
                direction=side,
                unit="Mvar",
                to_unit=base,
                limit=limit[on],
                value=q[on],
                slack=sign * (limit[on] - q[on]),
                multiplier=dual[on],
                angle_gain=None,
                n_branch=network.n_branch,
                tolerances=options.tolerances,
                base_mva=base,
            )
        )
    return parts
