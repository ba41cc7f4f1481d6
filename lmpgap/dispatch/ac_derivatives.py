"""First and second derivatives of the AC program, assembled from those of the branch flows."""

from __future__ import annotations

from typing import Any

import casadi
import numpy as np
from scipy import sparse

from lmpgap.dispatch.ac_flows import Entries, SymbolicFlows, entries, gather, times
from lmpgap.dispatch.ac_layout import AcLayout, AcShape
from lmpgap.scenario.network import IntArray, Network, incidence


def derivative_functions(
    network: Network,
    shape: AcShape,
    layout: AcLayout,
    flows: SymbolicFlows,
    program: dict[str, Any],
    *,
    objective_scale: float,
) -> dict[str, Any]:
    """Return the functions that casadi's solver interface takes in place of its own derivatives.

    Parameters
    ----------
    program
        Symbols ``x`` and ``p``, and expressions ``f`` and ``g`` of them.

    Returns
    -------
    dict
        ``grad_f``: (x, p) to cost and gradient; ``jac_g``: (x, p) to rows and Jacobian; ``hess_lag``: (x, p, lam_f,
        lam_g) to the upper triangle of the Hessian of lam_f f + lam_g g.
    """
    x, p = program["x"], program["p"]
    lam_f, lam_g = casadi.SX.sym("lam_f"), casadi.SX.sym("lam_g", layout.n_row)
    jacobian = gather(_jacobian(network, shape, layout, flows, x), (layout.n_row, layout.n_var))
    hessian = gather(
        _hessian(network, shape, layout, flows, p, objective_scale * lam_f, lam_g), (layout.n_var, layout.n_var)
    )
    return {
        "grad_f": casadi.Function(
            "nlp_grad_f", [x, p], [program["f"], casadi.gradient(program["f"], x)], ["x", "p"], ["f", "grad_f_x"]
        ),
        "jac_g": casadi.Function("nlp_jac_g", [x, p], [program["g"], jacobian], ["x", "p"], ["g", "jac_g_x"]),
        "hess_lag": casadi.Function(
            "nlp_hess_l", [x, p, lam_f, lam_g], [hessian], ["x", "p", "lam_f", "lam_g"], ["triu_hess_gamma_x_x"]
        ),
    }


def _jacobian(network: Network, shape: AcShape, layout: AcLayout, flows: SymbolicFlows, x: Any) -> list[Entries]:
    live, at, rows = layout.live, layout.variables, layout.rows
    parts: list[Entries] = []

    def constant(row: IntArray, column: IntArray, value: float) -> None:
        parts.append(Entries(row=row, column=column, value=casadi.SX.ones(row.size, 1) * value))

    def every(block: str) -> IntArray:
        return np.arange(at[block].start, at[block].stop)

    for block, ends in (
        ("active", ((flows.p_from, live.from_bus), (flows.p_to, live.to_bus))),
        ("reactive", ((flows.q_from, live.from_bus), (flows.q_to, live.to_bus))),
    ):
        for flow, bus in ends:
            parts += flows.gradient(flow, rows[block].start + bus, factor=-1.0)
    magnitude = x[at["magnitude"]]
    for block, shunt in (("active", -network.shunt_g[live.bus]), ("reactive", network.shunt_b[live.bus])):
        there = np.flatnonzero(shunt)
        value = 2 * casadi.DM(shunt[there]) * entries(magnitude, there)
        parts.append(Entries(row=rows[block].start + there, column=at["magnitude"].start + there, value=value))
    for block, name, bus, sign in (
        ("active", "segment", live.bus_position[network.resource_bus[shape.segment_resource]], 1.0),
        ("active", "bid", live.bus_position[shape.bid_bus], -1.0),
        ("reactive", "q", live.bus_position[network.resource_bus], 1.0),
    ):
        on = np.flatnonzero(bus >= 0)
        constant(rows[block].start + bus[on], at[name].start + on, sign)
    for name, sign in (("unserved", 1.0), ("surplus", -1.0)):
        constant(rows["active"].start + np.arange(every(name).size), every(name), sign)

    for block, flow_p, flow_q in (
        ("thermal_from", flows.p_from, flows.q_from),
        ("thermal_to", flows.p_to, flows.q_to),
    ):
        place = np.arange(rows[block].start, rows[block].stop)
        for flow in (flow_p, flow_q):
            parts += flows.gradient(flow, place, layout.rated, 2 * entries(flow.value, layout.rated))
        if every("excess").size:
            rating = casadi.DM(network.normal_rating[live.branch[layout.rated]])
            parts.append(Entries(row=place, column=every("excess"), value=-2 * (rating + x[at["excess"]])))
    place = np.arange(rows["angle"].start, rows["angle"].stop)
    constant(place, flows.angle_from[layout.angle_limited], 1.0)
    constant(place, flows.angle_to[layout.angle_limited], -1.0)

    weights = sparse.coo_array(shape.flow_weights[:, live.branch])
    parts += flows.gradient(
        flows.p_from, rows["flow"].start + weights.row, weights.col.astype(np.int64), casadi.DM(weights.data)
    )
    constant(rows["flow"].start + np.arange(every("flow_excess").size), every("flow_excess"), -1.0)
    if shape.movement:
        first = rows["movement"].start
        constant(first + shape.segment_resource, every("segment"), 1.0)
        constant(first + network.n_resource + np.arange(shape.bid_bus.size), every("bid"), 1.0)
        constant(np.arange(first, rows["movement"].stop), every("up"), -1.0)
        constant(np.arange(first, rows["movement"].stop), every("down"), 1.0)
    return parts


def _hessian(
    network: Network,
    shape: AcShape,
    layout: AcLayout,
    flows: SymbolicFlows,
    parameter: Any,
    lam_cost: Any,
    lam_g: Any,
) -> list[Entries]:
    live, at = layout.live, layout.variables
    lam = {name: lam_g[place] for name, place in layout.rows.items()}
    weights = sparse.csr_array(shape.flow_weights[:, live.branch])
    linear = [
        (times(weights.T, lam["flow"]) - entries(lam["active"], live.from_bus), flows.p_from),
        (-entries(lam["active"], live.to_bus), flows.p_to),
        (-entries(lam["reactive"], live.from_bus), flows.q_from),
        (-entries(lam["reactive"], live.to_bus), flows.q_to),
    ]
    to_branch = incidence(layout.rated, live.n_branch).T
    at_from, at_to = times(to_branch, lam["thermal_from"]), times(to_branch, lam["thermal_to"])
    squared = [(at_from, flows.p_from), (at_from, flows.q_from), (at_to, flows.p_to), (at_to, flows.q_to)]
    parts = flows.curvature(linear, squared)

    def diagonal(block: str, value: Any) -> None:
        place = np.arange(at[block].start, at[block].stop)
        if place.size:
            parts.append(Entries(row=place, column=place, value=value))

    shunt_g, shunt_b = casadi.DM(network.shunt_g[live.bus]), casadi.DM(network.shunt_b[live.bus])
    diagonal("magnitude", 2 * (shunt_b * lam["reactive"] - shunt_g * lam["active"]))
    diagonal("segment", lam_cost * parameter[layout.parameters["slope"]])
    diagonal("excess", -2 * (lam["thermal_from"] + lam["thermal_to"]))
    return parts
