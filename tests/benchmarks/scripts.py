"""What an analyst would write in an afternoon: each hour's problem stated anew in a modelling layer, prices from duals.

For the convex formulations that is the project's own independent restatement in cvxpy. For AC it is below, in casadi:
polar voltages, one problem per hour, a flat start. Neither splits a price, certifies anything or writes a table.
"""

from __future__ import annotations

import casadi
import numpy as np
from scipy import sparse

from lmpgap.dispatch.restatement import restate
from lmpgap.scenario.network import FloatArray, IntervalInputs, Network
from lmpgap.scenario.settings import DcConvention


def prices_by_script(
    name: str, network: Network, inputs: IntervalInputs, convention: DcConvention
) -> tuple[float, FloatArray]:
    """Return cost [$/h] and prices [$/MWh] of one hour."""
    if name == "ac":
        return ac_by_script(network, inputs)
    answer = restate(name, network, inputs, convention=convention)
    return answer.objective, answer.price


def ac_by_script(network: Network, inputs: IntervalInputs) -> tuple[float, FloatArray]:
    """State and solve the AC dispatch of one hour; hard limits, no bids."""
    n_bus, base = network.n_bus, network.base_mva
    on = np.flatnonzero(inputs.branch_in_service)
    start, end = network.from_bus[on].tolist(), network.to_bus[on].tolist()
    v, angle = casadi.SX.sym("v", n_bus), casadi.SX.sym("angle", n_bus)
    segments = inputs.segments
    output, q = casadi.SX.sym("output", segments.width.size), casadi.SX.sym("q", network.n_resource)

    series = 1.0 / (network.r[on] + 1j * network.x[on])
    ratio = network.tap[on]
    own = series + 0.5j * network.charging[on]
    vf, vt = v[start], v[end]
    across = angle[start] - angle[end] - network.shift[on]
    c, s = vf * vt * casadi.cos(across) / ratio, vf * vt * casadi.sin(across) / ratio
    g, b = series.real, series.imag
    p_from = own.real / ratio**2 * vf**2 - g * c - b * s
    q_from = -own.imag / ratio**2 * vf**2 + b * c - g * s
    p_to = own.real * vt**2 - g * c + b * s
    q_to = -own.imag * vt**2 + b * c + g * s

    def summed(position: list[int], size: int) -> casadi.DM:
        columns = np.arange(len(position))
        return casadi.DM(sparse.csc_matrix((np.ones(columns.size), (position, columns)), shape=(size, columns.size)))

    at_start, at_end = summed(start, n_bus), summed(end, n_bus)
    at_resource = summed(network.resource_bus.tolist(), n_bus)
    p = casadi.DM(inputs.p_min) + summed(segments.resource.tolist(), network.n_resource) @ output
    active = at_resource @ p - inputs.load_p - network.shunt_g * v**2 - at_start @ p_from - at_end @ p_to
    reactive = at_resource @ q - inputs.load_q + network.shunt_b * v**2 - at_start @ q_from - at_end @ q_to
    rated = np.flatnonzero(np.isfinite(network.normal_rating[on])).tolist()
    rating = network.normal_rating[on][rated]
    width = np.maximum(segments.width, 1e-9)
    slope = (segments.price_end - segments.price_start) / width
    cost = base * casadi.sum1(segments.price_start * output + 0.5 * slope * output**2) + float(inputs.fixed_cost.sum())
    rows = casadi.vertcat(
        active,
        reactive,
        p_from[rated] ** 2 + q_from[rated] ** 2,
        p_to[rated] ** 2 + q_to[rated] ** 2,
        angle[start] - angle[end],
    )
    free = np.full(n_bus, np.inf)
    free[0] = 0.0
    running = inputs.resource_in_service
    zero, endless = np.zeros(2 * n_bus), np.full(2 * rating.size, -np.inf)
    solver = casadi.nlpsol(
        "hour",
        "ipopt",
        {"x": casadi.vertcat(v, angle, output, q), "f": 1e-3 * cost, "g": rows},
        {"print_time": False, "ipopt.print_level": 0, "ipopt.sb": "yes"},
    )
    answer = solver(
        x0=np.concatenate([np.ones(n_bus), np.zeros(n_bus), 0.5 * segments.width, np.zeros(network.n_resource)]),
        lbx=np.concatenate(
            [network.v_min, -free, np.zeros(segments.width.size), np.where(running, network.q_min, 0.0)]
        ),
        ubx=np.concatenate([network.v_max, free, segments.width, np.where(running, network.q_max, 0.0)]),
        lbg=np.concatenate([zero, endless, network.angle_min[on]]),
        ubg=np.concatenate([zero, rating**2, rating**2, network.angle_max[on]]),
    )
    prices = -np.asarray(answer["lam_g"]).ravel()[:n_bus] / 1e-3 / base
    return float(answer["f"]) / 1e-3, prices
