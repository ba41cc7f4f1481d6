"""Hand-made dispatch results: a small lossless dispatch by scipy's own solver, and consistent AC-like points.

Written from the definitions, with dense matrices and complex arithmetic, and sharing no code with what is tested.
"""

from __future__ import annotations

import numpy as np
from scipy import sparse
from scipy.optimize import linprog

from lmpgap.dispatch.result import (
    BalanceMultipliers,
    ConstraintRows,
    DispatchResult,
    OperatingPoint,
    SolverResiduals,
    SolveStatus,
    StationaritySystem,
)
from lmpgap.scenario.network import BidSegments, FloatArray, IntervalInputs, Network, OfferSegments


def small_network(
    n_bus: int,
    branches: list[tuple[int, int, float, float]],
    *,
    base_mva: float = 100.0,
    resource_bus: list[int] | None = None,
    resistance: float = 0.0,
) -> Network:
    """Return a network from (from, to, reactance [pu], rating [MW]) and the buses of its resources."""
    end_from, end_to, x, rating = (np.array(column) for column in zip(*branches, strict=True))
    resource_bus = resource_bus or []
    n_branch, n_resource = len(branches), len(resource_bus)
    return Network(
        base_mva=base_mva,
        buses=tuple(f"N{i + 1}" for i in range(n_bus)),
        v_min=np.full(n_bus, 0.9),
        v_max=np.full(n_bus, 1.1),
        shunt_g=np.zeros(n_bus),
        shunt_b=np.zeros(n_bus),
        branches=tuple(f"L{i + 1}" for i in range(n_branch)),
        from_bus=end_from.astype(np.int64),
        to_bus=end_to.astype(np.int64),
        r=np.full(n_branch, resistance),
        x=x.astype(float),
        charging=np.zeros(n_branch),
        tap=np.ones(n_branch),
        shift=np.zeros(n_branch),
        normal_rating=rating.astype(float) / base_mva,
        emergency_rating=np.full(n_branch, np.inf),
        angle_min=np.full(n_branch, -np.inf),
        angle_max=np.full(n_branch, np.inf),
        resources=tuple(f"G{i + 1}" for i in range(n_resource)),
        resource_bus=np.array(resource_bus, dtype=np.int64),
        q_min=np.full(n_resource, -np.inf),
        q_max=np.full(n_resource, np.inf),
    )


def simple_inputs(
    network: Network,
    load_mw: list[float],
    offers: list[tuple[int, float, float]],
    bids: list[tuple[int, float, float]] | None = None,
) -> IntervalInputs:
    """Return inputs from loads [MW] and offers (resource, width [MW], price), dearer ones last per resource."""
    owner, width, price = (np.array(column) for column in zip(*offers, strict=True))
    p_max = np.bincount(owner.astype(int), weights=width, minlength=network.n_resource) / network.base_mva
    segments = OfferSegments(
        resource=owner.astype(np.int64),
        width=width / network.base_mva,
        price_start=price.astype(float),
        price_end=price.astype(float),
    )
    bid_segments = BidSegments.none()
    if bids:
        bus, bid_width, bid_price = (np.array(column) for column in zip(*bids, strict=True))
        bid_segments = BidSegments(
            bus=bus.astype(np.int64), width=bid_width / network.base_mva, price=bid_price.astype(float)
        )
    return IntervalInputs(
        start="2026-01-01T00:00:00+00:00",
        load_p=np.array(load_mw, dtype=float) / network.base_mva,
        load_q=np.zeros(network.n_bus),
        branch_in_service=np.ones(network.n_branch, dtype=bool),
        resource_in_service=np.ones(network.n_resource, dtype=bool),
        p_min=np.zeros(network.n_resource),
        p_max=p_max,
        segments=segments,
        fixed_cost=np.zeros(network.n_resource),
        bids=bid_segments,
    )


def lossless_dispatch(
    network: Network, inputs: IntervalInputs, *, transmission_penalty: float | None = None, active_mw: float = 1e-6
) -> DispatchResult:
    """Solve b = 1/(x tap) with stepped offers by scipy's linear-programming interface.

    Variables: segments, bids, angles and, with a penalty, one relief per limit.
    """
    base = network.base_mva
    segments, bids = inputs.segments, inputs.bids
    n_segment, n_bid, n_bus, n_branch = segments.width.size, bids.width.size, network.n_bus, network.n_branch
    on = inputs.branch_in_service
    b = np.where(on, 1.0 / (network.x * network.tap), 0.0)
    difference = np.zeros((n_branch, n_bus))
    difference[np.arange(n_branch), network.from_bus] += 1.0
    difference[np.arange(n_branch), network.to_bus] -= 1.0
    limited = np.flatnonzero(np.isfinite(network.normal_rating) & on)
    limit = np.concatenate([network.normal_rating[limited]] * 2)
    n_limit = limit.size
    n_relief = n_limit if transmission_penalty is not None else 0

    # load + network - generation = 0
    balance = np.zeros((n_bus, n_segment + n_bid + n_bus + n_relief))
    balance[network.resource_bus[segments.resource], np.arange(n_segment)] = -1.0
    balance[bids.bus, n_segment + np.arange(n_bid)] = 1.0
    angles = slice(n_segment + n_bid, n_segment + n_bid + n_bus)
    balance[:, angles] = difference.T @ (b[:, None] * difference)
    p_fixed = np.bincount(network.resource_bus, weights=inputs.p_min, minlength=n_bus)
    shifter = difference.T @ (-b * network.shift)
    right = p_fixed - inputs.load_p - network.shunt_g - shifter
    rows = np.zeros((n_limit, balance.shape[1]))
    flow = b[:, None] * difference
    rows[:, angles] = np.vstack([flow[limited], -flow[limited]])
    offset = -b * network.shift
    limit_right = limit - np.concatenate([offset[limited], -offset[limited]])
    if n_relief:
        rows[:, -n_relief:] = -np.eye(n_relief)
    cost = np.zeros(balance.shape[1])
    cost[:n_segment] = base * segments.price_start
    cost[n_segment : n_segment + n_bid] = -base * bids.price
    if n_relief:
        cost[-n_relief:] = base * float(transmission_penalty or 0.0)
    islands = network.islands(on)
    references = {int(np.flatnonzero(islands == k)[0]) for k in np.unique(islands)}
    bounds = (
        [(0.0, w) for w in segments.width]
        + [(0.0, w) for w in bids.width]
        + [(0.0, 0.0) if i in references else (None, None) for i in range(n_bus)]
        + [(0.0, None)] * n_relief
    )
    answer = linprog(cost, A_ub=rows, b_ub=limit_right, A_eq=balance, b_eq=right, bounds=bounds, method="highs")
    assert answer.status == 0, answer.message

    x = answer.x
    theta = x[angles]
    f = flow @ theta + offset
    dp = b
    point = OperatingPoint(
        w=np.ones(n_bus),
        angle=theta,
        c=on.astype(float),
        s=np.where(on, difference @ theta, 0.0),
        p_from=f,
        q_from=np.zeros(n_branch),
        p_to=-f,
        q_to=np.zeros(n_branch),
        dp_from=dp,
        dq_from=np.zeros(n_branch),
        dp_to=-dp,
        dq_to=np.zeros(n_branch),
    )
    multiplier = -answer.ineqlin.marginals
    value = np.concatenate([f[limited], -f[limited]])
    relief = x[-n_relief:] if n_relief else np.zeros(n_limit)
    gain = sparse.csr_array(np.vstack([np.diag(b)[limited], -np.diag(b)[limited]]))
    constraints = ConstraintRows(
        kind=("thermal",) * n_limit,
        contingency=("",) * n_limit,
        monitored=tuple(network.branches[i] for i in limited) * 2,
        direction=("forward",) * limited.size + ("reverse",) * limited.size,
        unit=("MW",) * n_limit,
        to_unit=np.full(n_limit, base),
        limit=limit,
        value=value,
        multiplier=multiplier,
        angle_gain=gain,
        at_penalty=relief > 1e-9,
    )
    # Active gradients: balances, reference angles, active limits, active bounds.
    slack = limit_right - rows @ x
    active_limit = np.flatnonzero(slack * base <= active_mw)
    lower, upper = np.array([(-np.inf if lo is None else lo, np.inf if hi is None else hi) for lo, hi in bounds]).T
    fixed = np.flatnonzero(lower == upper)
    at_lower = np.flatnonzero((x - lower) * base <= active_mw)
    at_upper = np.flatnonzero((upper - x) * base <= active_mw)
    at_lower, at_upper = (np.setdiff1d(a, fixed) for a in (at_lower, at_upper))
    unit = np.eye(x.size)
    jacobian = np.vstack([balance, unit[fixed], rows[active_limit], -unit[at_lower], unit[at_upper]])
    reduced = answer.lower.marginals + answer.upper.marginals
    multipliers = np.concatenate(
        [
            -answer.eqlin.marginals,
            -reduced[fixed],
            multiplier[active_limit],
            answer.lower.marginals[at_lower],
            -answer.upper.marginals[at_upper],
        ]
    )
    n_free = n_bus + fixed.size
    p = inputs.p_min + np.bincount(segments.resource, weights=x[:n_segment], minlength=network.n_resource)
    return DispatchResult(
        formulation="dc",
        status=SolveStatus.OPTIMAL,
        message="optimal",
        solver="scipy",
        solver_seconds=0.0,
        total_seconds=0.0,
        objective=float(answer.fun + inputs.fixed_cost.sum()),
        p=p,
        q=np.zeros(network.n_resource),
        resource_cost=np.zeros(network.n_resource),
        bid_served=x[n_segment : n_segment + n_bid],
        unserved=np.zeros(n_bus),
        surplus=np.zeros(n_bus),
        point=point,
        multipliers=BalanceMultipliers(
            active=-answer.eqlin.marginals, reactive=np.zeros(n_bus), squared_voltage=np.zeros(n_bus)
        ),
        constraints=constraints,
        residuals=SolverResiduals(primal=0.0, dual=0.0, gap=0.0),
        stationarity=StationaritySystem(
            gradient=cost,
            jacobian=sparse.csr_array(jacobian),
            free=np.arange(jacobian.shape[0]) < n_free,
            multipliers=multipliers,
            balance_rows=np.arange(n_bus),
        ),
    )


def branch_flows(network: Network, on: np.ndarray, voltage: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Return the complex power entering each branch at its from and at its to end."""
    y = np.where(on, 1.0 / (network.r + 1j * network.x), 0.0)
    half = 0.5j * np.where(on, network.charging, 0.0)
    ratio = network.tap * np.exp(1j * network.shift)
    v_from, v_to = voltage[network.from_bus], voltage[network.to_bus]
    i_from = (y + half) * v_from / (ratio * ratio.conj()) - y * v_to / ratio.conj()
    i_to = (y + half) * v_to - y * v_from / ratio
    return v_from * i_from.conj(), v_to * i_to.conj()


def injections(network: Network, on: np.ndarray, voltage: np.ndarray) -> np.ndarray:
    """Return the complex power entering the branches at each bus."""
    s_from, s_to = branch_flows(network, on, voltage)
    total = np.zeros(network.n_bus, dtype=complex)
    np.add.at(total, network.from_bus, s_from)
    np.add.at(total, network.to_bus, s_to)
    return total


def jacobian_by_difference(function, angle: FloatArray, step: float = 1e-5) -> FloatArray:
    """Return the derivative of function(angle) for each angle by central differences of fourth order."""
    columns = []
    for i in range(angle.size):
        unit = np.zeros(angle.size)
        unit[i] = step
        near = function(angle + unit) - function(angle - unit)
        far = function(angle + 2 * unit) - function(angle - 2 * unit)
        columns.append((8 * near - far) / (12 * step))
    return np.column_stack(columns)
