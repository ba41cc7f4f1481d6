"""An independent statement of ``dc``, ``dc-loss`` and ``soc``, the way one would write them down by hand.

Nothing here is shared with the dispatch that prices a run but the network's arrays: other variables, another
modelling layer, and for the cone the bus-injection form in place of branch flows. It is the second opinion behind
the verification of an exhibit: slower, and for that easy to read and hard to get wrong in the same way twice.

Limits are hard here; penalties are left to the production path. All islands of the network are expected to have a
resource in service.
"""

from __future__ import annotations

import warnings
from dataclasses import dataclass
from typing import Any

import cvxpy
import numpy as np
from numpy.typing import NDArray
from scipy import sparse

from lmpgap.dispatch.limits import FlowLimits
from lmpgap.dispatch.result import SolveStatus
from lmpgap.errors import LmpgapError
from lmpgap.scenario.network import FloatArray, IntervalInputs, Network
from lmpgap.scenario.settings import DcConvention

cp: Any = cvxpy  # its functions are exported without types

_SCALE = 1e-3
"""Dollars are divided by a thousand, as an interior-point solver likes them."""


@dataclass(frozen=True, kw_only=True)
class Restated:
    """What the second opinion says.

    Attributes
    ----------
    status : SolveStatus
    objective : float
        [$/h]
    price : (n_bus,)
        Rise of cost per unit of load [$/MWh].
    p : (n_resource,)
        [MW]
    """

    status: SolveStatus
    objective: float
    price: FloatArray
    p: FloatArray


def restate(
    name: str,
    network: Network,
    inputs: IntervalInputs,
    flow_limits: FlowLimits | None = None,
    convention: DcConvention | None = None,
) -> Restated:
    """Solve one interval again, independently.

    Parameters
    ----------
    name
        ``"dc"``, ``"dc-loss"`` or ``"soc"``.
    flow_limits
        Limits on weighted sums of from-end flows.
    convention
        Of the linear formulations.

    Raises
    ------
    LmpgapError
        For any other name.
    """
    limits = FlowLimits.none(network.n_branch) if flow_limits is None else flow_limits
    rules = DcConvention() if convention is None else convention
    if name == "dc":
        return restate_dc(network, inputs, limits, rules)
    if name == "dc-loss":
        return restate_dc_loss(network, inputs, limits, rules)
    if name == "soc":
        return restate_soc(network, inputs, limits)
    raise LmpgapError(f"there is no independent statement of {name!r}; choose dc, dc-loss or soc")


def restate_dc(network: Network, inputs: IntervalInputs, limits: FlowLimits, convention: DcConvention) -> Restated:
    """Lossless: bus susceptance matrix times angles."""
    theta = cp.Variable(network.n_bus)
    injection, cost, p, constraints = _market(network, inputs)
    b, shift, _ = _series(network, inputs, convention)
    ends = _ends(network)
    flow = cp.multiply(b, ends @ theta - shift)
    balance = injection - ends.T @ flow == inputs.load_p + network.shunt_g
    rated = np.isfinite(network.normal_rating) & inputs.branch_in_service
    constraints += [balance, cp.abs(flow[rated]) <= network.normal_rating[rated]]
    constraints += [*_angle_band(network, inputs, ends @ theta), limits.weights @ flow <= limits.limit]
    return _solved(network, cost, constraints, balance, p)


def restate_dc_loss(network: Network, inputs: IntervalInputs, limits: FlowLimits, convention: DcConvention) -> Restated:
    """Loss at least conductance times squared angle, half at each end."""
    theta, loss = cp.Variable(network.n_bus), cp.Variable(network.n_branch)
    injection, cost, p, constraints = _market(network, inputs)
    b, shift, g = _series(network, inputs, convention)
    ends = _ends(network)
    across = ends @ theta - shift
    flow = cp.multiply(b, across)
    # Power entering at both ends: +-flow and half of the loss.
    balance = injection - ends.T @ flow - 0.5 * np.abs(ends).T @ loss == inputs.load_p + network.shunt_g
    rated = np.isfinite(network.normal_rating) & inputs.branch_in_service
    constraints += [
        balance,
        loss >= cp.multiply(g, cp.square(across)),
        cp.abs(flow[rated]) + 0.5 * loss[rated] <= network.normal_rating[rated],
        limits.weights @ (flow + 0.5 * loss) <= limits.limit,
    ]
    constraints += _angle_band(network, inputs, ends @ theta)
    return _solved(network, cost, constraints, balance, p)


def restate_soc(network: Network, inputs: IntervalInputs, limits: FlowLimits) -> Restated:
    """Bus-injection form: one product c + js per pair of buses, |c + js|^2 <= w_i w_j.

    "Radial Distribution Load Flow Using Conic Programming", IEEE Transactions on Power Systems 21(3), 2006.
    """
    on = np.flatnonzero(inputs.branch_in_service)
    start, end = network.from_bus[on], network.to_bus[on]
    low, high = np.minimum(start, end), np.maximum(start, end)
    pair, pair_of = np.unique(np.stack([low, high]), axis=1, return_inverse=True)
    pair_of = pair_of.ravel()
    turn = np.where(start == low, 1.0, -1.0)
    w, real, imaginary = cp.Variable(network.n_bus), cp.Variable(pair.shape[1]), cp.Variable(pair.shape[1])
    q = cp.Variable(network.n_resource)
    injection, cost, p, constraints = _market(network, inputs)
    c, s = real[pair_of], cp.multiply(turn, imaginary[pair_of])
    y = 1.0 / (network.r[on] + 1j * network.x[on])
    ratio = network.tap[on] * np.exp(1j * network.shift[on])
    own = np.conj(y) - 0.5j * network.charging[on]
    across_from, across_to = -np.conj(y) / ratio, -np.conj(y) / np.conj(ratio)

    def power(
        self_admittance: NDArray[np.complex128], square: Any, mutual: NDArray[np.complex128], sign: float
    ) -> tuple[Any, Any]:
        # S = self w + mutual (c + sign j s)
        active = cp.multiply(self_admittance.real, square) + cp.multiply(mutual.real, c)
        reactive = cp.multiply(self_admittance.imag, square) + cp.multiply(mutual.imag, c)
        return (
            active - sign * cp.multiply(mutual.imag, s),
            reactive + sign * cp.multiply(mutual.real, s),
        )

    p_from, q_from = power(own / network.tap[on] ** 2, w[start], across_from, 1.0)
    p_to, q_to = power(own, w[end], across_to, -1.0)
    at_start, at_end = network.from_incidence()[on].T, network.to_incidence()[on].T
    balance = injection - at_start @ p_from - at_end @ p_to - cp.multiply(network.shunt_g, w) == inputs.load_p
    running = inputs.resource_in_service
    constraints += [
        balance,
        network.bus_to_resource() @ q - at_start @ q_from - at_end @ q_to + cp.multiply(network.shunt_b, w)
        == inputs.load_q,
        w >= network.v_min**2,
        w <= network.v_max**2,
        q[~running] == 0.0,
        cp.SOC(
            w[pair[0]] + w[pair[1]],
            cp.vstack([2.0 * real, 2.0 * imaginary, w[pair[0]] - w[pair[1]]]),
        ),
        limits.weights[:, on] @ p_from <= limits.limit,
    ]
    below = running & np.isfinite(network.q_max)
    above = running & np.isfinite(network.q_min)
    constraints += [q[below] <= network.q_max[below], q[above] >= network.q_min[above]]
    rated = np.flatnonzero(np.isfinite(network.normal_rating[on]))
    if rated.size:
        rating = network.normal_rating[on[rated]]
        constraints += [
            cp.norm(cp.vstack([p_from[rated], q_from[rated]]), axis=0) <= rating,
            cp.norm(cp.vstack([p_to[rated], q_to[rated]]), axis=0) <= rating,
        ]
    # Angle limits as half planes behind the phase shifter.
    behind_c = cp.multiply(np.cos(network.shift[on]), c) + cp.multiply(np.sin(network.shift[on]), s)
    behind_s = cp.multiply(np.cos(network.shift[on]), s) - cp.multiply(np.sin(network.shift[on]), c)
    for limit, sign in ((network.angle_max[on], 1.0), (network.angle_min[on], -1.0)):
        limited = np.flatnonzero(np.abs(limit - network.shift[on]) < np.pi / 2 - 1e-6)
        tangent = np.tan((limit - network.shift[on])[limited])
        if limited.size:
            constraints.append(sign * (behind_s[limited] - cp.multiply(tangent, behind_c[limited])) <= 0.0)
    return _solved(network, cost, constraints, balance, p)


def _market(network: Network, inputs: IntervalInputs) -> tuple[Any, Any, Any, list[Any]]:
    """Return injection per bus, cost [$/h], output per resource, and the bounds of offers and bids."""
    segments, bids, base = inputs.segments, inputs.bids, network.base_mva
    output, served = cp.Variable(segments.resource.size), cp.Variable(bids.bus.size)
    owner = sparse.csr_array(
        (np.ones(segments.resource.size), (segments.resource, np.arange(segments.resource.size))),
        shape=(network.n_resource, segments.resource.size),
    )
    p = inputs.p_min + owner @ output
    taker = sparse.csr_array(
        (np.ones(bids.bus.size), (bids.bus, np.arange(bids.bus.size))), shape=(network.n_bus, bids.bus.size)
    )
    width = np.maximum(segments.width, 1e-12)
    rise = base * (segments.price_end - segments.price_start) / width
    cost = (
        base * segments.price_start @ output
        + 0.5 * cp.sum(cp.multiply(rise, cp.square(output)))
        - base * bids.price @ served
        + float(np.sum(inputs.fixed_cost))
    )
    limits = [output >= 0.0, output <= segments.width, served >= 0.0, served <= bids.width]
    return network.bus_to_resource() @ p - taker @ served, cost, p, limits


def _series(
    network: Network, inputs: IntervalInputs, convention: DcConvention
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Return susceptance, shift and conductance of every branch; zero out of service."""
    if np.any(network.x == 0.0):
        raise LmpgapError("the linear formulations are restated for branches with a reactance only")
    if convention.susceptance == "impedance":
        admittance = 1.0 / (network.r + 1j * network.x)
        b, g = -admittance.imag, admittance.real
    else:
        b, g = 1.0 / network.x, network.r / network.x**2
    on = inputs.branch_in_service
    if not convention.taps:
        return on * b, np.zeros(network.n_branch), on * g
    return on * b / network.tap, network.shift, on * g / network.tap**2


def _ends(network: Network) -> sparse.csr_array:
    """Return the (n_branch, n_bus) matrix that takes angles to differences."""
    return sparse.csr_array(network.from_incidence() - network.to_incidence())


def _angle_band(network: Network, inputs: IntervalInputs, difference: Any) -> list[Any]:
    upper = inputs.branch_in_service & np.isfinite(network.angle_max)
    lower = inputs.branch_in_service & np.isfinite(network.angle_min)
    return [difference[upper] <= network.angle_max[upper], difference[lower] >= network.angle_min[lower]]


def _solved(
    network: Network,
    cost: Any,
    constraints: list[Any],
    balance: Any,
    p: Any,
) -> Restated:
    """Solve and return prices: in a minimisation the price is minus the multiplier of generation - load = 0."""
    problem = cp.Problem(cp.Minimize(_SCALE * cost), constraints)
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", UserWarning)  # an inaccurate answer is told by its status
        problem.solve(solver=cp.CLARABEL, warm_start=False, tol_gap_abs=1e-9, tol_gap_rel=1e-9, tol_feas=1e-9)
    status = {
        cp.OPTIMAL: SolveStatus.OPTIMAL,
        cp.OPTIMAL_INACCURATE: SolveStatus.INACCURATE,
        cp.INFEASIBLE: SolveStatus.INFEASIBLE,
        cp.INFEASIBLE_INACCURATE: SolveStatus.INFEASIBLE,
        cp.UNBOUNDED: SolveStatus.UNBOUNDED,
        cp.UNBOUNDED_INACCURATE: SolveStatus.UNBOUNDED,
    }.get(problem.status, SolveStatus.FAILED)
    if not status.has_solution:
        nan = np.full(network.n_bus, np.nan)
        return Restated(status=status, objective=float("nan"), price=nan, p=np.full(network.n_resource, np.nan))
    return Restated(
        status=status,
        objective=float(problem.value) / _SCALE,
        price=-np.asarray(balance.dual_value) / network.base_mva / _SCALE,
        p=np.asarray(p.value) * network.base_mva,
    )
