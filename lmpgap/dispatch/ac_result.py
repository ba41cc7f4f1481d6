"""From the nonlinear solver's vectors to the neutral result: signs, units, residuals and the active gradients.

casadi's Lagrangian is cost + multipliers @ rows + bound multipliers @ x, with multipliers positive at an upper and
negative at a lower limit. Balances are written generation - load - network, hence the price of load is minus the
multiplier. The MVA rows limit S^2; per unit of rating the multiplier is 2 (rating + slack) times that of the row.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy import sparse

from lmpgap.dispatch.ac_interval import AcVectors, segment_slope
from lmpgap.dispatch.ac_model import AcProgram
from lmpgap.dispatch.branch_model import BranchModel, operating_point, voltage_products
from lmpgap.dispatch.formulation import DispatchOptions
from lmpgap.dispatch.limits import FlowLimits
from lmpgap.dispatch.result import (
    BalanceMultipliers,
    ConstraintRows,
    OperatingPoint,
    SolverResiduals,
    StationaritySystem,
)
from lmpgap.scenario.network import BoolArray, FloatArray, IntArray, IntervalInputs, incidence


@dataclass(frozen=True, kw_only=True)
class AcSolution:
    """A point of the program with its multipliers in casadi's signs, in $/h per internal unit.

    Attributes
    ----------
    x, bound_multiplier : (n_var,)
    row_multiplier : (n_row,)
    """

    x: FloatArray
    bound_multiplier: FloatArray
    row_multiplier: FloatArray


def residuals(program: AcProgram, vectors: AcVectors, solution: AcSolution) -> SolverResiduals:
    """Return how far a solution is from the conditions of a local optimum, from the functions themselves.

    ``primal`` is the largest violation of a row or bound [pu; pu^2 for MVA rows], ``dual`` the largest entry of the
    Lagrangian's gradient or of a multiplier that points away from any limit [$/h per pu], ``gap`` the sum of
    multiplier times slack [$/h].
    """
    value, jacobian = program.rows(solution.x, vectors.parameter)
    gradient = program.gradient(solution.x, vectors.parameter)
    stationarity = gradient + jacobian.T @ solution.row_multiplier + solution.bound_multiplier
    primal, gap, stray = 0.0, 0.0, 0.0
    for point, low, high, multiplier in (
        (value, vectors.row_lower, vectors.row_upper, solution.row_multiplier),
        (solution.x, vectors.lower, vectors.upper, solution.bound_multiplier),
    ):
        primal = max(primal, float(np.max(np.maximum(low - point, point - high), initial=0.0)))
        up, down = np.maximum(multiplier, 0.0), np.maximum(-multiplier, 0.0)
        slack_up, slack_down = high - point, point - low
        stray = max(stray, float(np.max(np.where(np.isinf(slack_up), up, 0.0), initial=0.0)))
        stray = max(stray, float(np.max(np.where(np.isinf(slack_down), down, 0.0), initial=0.0)))
        limited = low < high
        with np.errstate(invalid="ignore"):
            gap += float(np.sum(np.where(limited & np.isfinite(slack_up), up * np.abs(slack_up), 0.0)))
            gap += float(np.sum(np.where(limited & np.isfinite(slack_down), down * np.abs(slack_down), 0.0)))
    dual = max(float(np.max(np.abs(stationarity), initial=0.0)), stray)
    return SolverResiduals(primal=primal, dual=dual, gap=gap)


def point_of(program: AcProgram, x: FloatArray) -> OperatingPoint:
    """Return the operating point; dead buses have w = 0 and angle 0."""
    network, layout = program.network, program.layout
    magnitude, angle = np.zeros(network.n_bus), np.zeros(network.n_bus)
    magnitude[layout.bus] = x[layout.variables["magnitude"]]
    angle[layout.bus] = x[layout.variables["angle"]]
    on = np.zeros(network.n_branch, dtype=bool)
    on[layout.branch] = True
    c, s = voltage_products(network, magnitude, angle)
    return operating_point(
        network, BranchModel.of(network, on), magnitude**2, np.where(on, c, 0.0), np.where(on, s, 0.0), angle
    )


def outputs_of(program: AcProgram, inputs: IntervalInputs, x: FloatArray) -> FloatArray:
    """Return active output per resource [pu], shape (n_resource,)."""
    owner = incidence(inputs.segments.resource, program.network.n_resource)
    return np.asarray(inputs.p_min + owner.T @ x[program.layout.variables["segment"]])


def resource_cost(program: AcProgram, inputs: IntervalInputs, x: FloatArray) -> FloatArray:
    """Return the cost of each resource [$/h], shape (n_resource,)."""
    segments = inputs.segments
    output = x[program.layout.variables["segment"]]
    cost = program.network.base_mva * (segments.price_start * output + 0.5 * segment_slope(segments) * output**2)
    return np.asarray(inputs.fixed_cost + incidence(segments.resource, program.network.n_resource).T @ cost)


def balance_multipliers(program: AcProgram, solution: AcSolution) -> BalanceMultipliers:
    """Return the prices of active and reactive load and of the squared voltage, `nan` at dead buses."""
    layout = program.layout
    active, reactive, squared = (np.full(program.network.n_bus, np.nan) for _ in range(3))
    active[layout.bus] = -solution.row_multiplier[layout.rows["active"]]
    reactive[layout.bus] = -solution.row_multiplier[layout.rows["reactive"]]
    magnitude = layout.variables["magnitude"]
    squared[layout.bus] = solution.bound_multiplier[magnitude] / (2.0 * solution.x[magnitude])
    return BalanceMultipliers(active=active, reactive=reactive, squared_voltage=squared)


def constraint_rows(
    program: AcProgram,
    inputs: IntervalInputs,
    flow_limits: FlowLimits,
    solution: AcSolution,
    point: OperatingPoint,
    options: DispatchOptions,
) -> ConstraintRows:
    """Return the limits that are active or priced, with keys, values and multipliers."""
    network, layout, base = program.network, program.layout, program.network.base_mva
    tolerances = options.tolerances
    at, rows = layout.variables, layout.rows
    penalty = options.penalties.transmission
    row = solution.row_multiplier
    parts: list[ConstraintRows] = []

    def add(
        *,
        kind: tuple[str, ...] | str,
        contingency: tuple[str, ...] | None = None,
        monitored: tuple[str, ...],
        direction: tuple[str, ...] | str,
        unit: str,
        to_unit: float,
        limit: FloatArray,
        value: FloatArray,
        slack: FloatArray,
        multiplier: FloatArray,
        gain: sparse.csr_array | None = None,
        at_penalty: BoolArray | None = None,
    ) -> None:
        size = limit.size
        room = np.maximum(tolerances.active_slack_mw / base, tolerances.active_slack_relative * np.abs(limit))
        keep = (slack <= room) | (multiplier > tolerances.shadow_price * base)
        keep &= np.isfinite(limit)
        every = ConstraintRows(
            kind=(kind,) * size if isinstance(kind, str) else kind,
            contingency=contingency or ("",) * size,
            monitored=monitored,
            direction=(direction,) * size if isinstance(direction, str) else direction,
            unit=(unit,) * size,
            to_unit=np.full(size, to_unit),
            limit=limit,
            value=value,
            multiplier=multiplier,
            angle_gain=gain if gain is not None else sparse.csr_array((size, network.n_branch)),
            at_penalty=at_penalty if at_penalty is not None else np.zeros(size, dtype=bool),
        )
        parts.append(every.take(keep))

    rated = layout.rated
    rating = network.normal_rating[rated]
    eased = rating + solution.x[at["overload"]] if penalty is not None else rating
    names = tuple(network.branches[i] for i in rated)
    forward = tuple("forward" if p >= 0 else "reverse" for p in point.p_from[rated] - point.p_to[rated])
    ends = {}
    for end, p, q, dp, dq in (
        ("thermal_from", point.p_from, point.q_from, point.dp_from, point.dq_from),
        ("thermal_to", point.p_to, point.q_to, point.dp_to, point.dq_to),
    ):
        apparent = np.hypot(p[rated], q[rated])
        turn = (p * dp + q * dq)[rated] / np.maximum(apparent, 1e-12)
        ends[end] = apparent, turn, 2.0 * eased * np.maximum(row[rows[end]], 0.0)
    total = ends["thermal_from"][2] + ends["thermal_to"][2]
    for apparent, turn, multiplier in ends.values():
        add(
            kind="thermal",
            monitored=names,
            direction=forward,
            unit="MVA",
            to_unit=base,
            limit=rating,
            value=apparent,
            slack=rating - apparent,
            multiplier=multiplier,
            gain=_on_branches(rated, turn, network.n_branch),
            at_penalty=_at_penalty(total, penalty, options, base) & (multiplier > 0),
        )

    limited = layout.angle_limited
    difference = point.angle[network.from_bus[limited]] - point.angle[network.to_bus[limited]]
    for sign, bound, direction in ((1.0, network.angle_max, "upper"), (-1.0, network.angle_min, "lower")):
        add(
            kind="angle",
            monitored=tuple(network.branches[i] for i in limited),
            direction=direction,
            unit="deg",
            to_unit=float(np.rad2deg(1.0)),
            limit=bound[limited],
            value=difference,
            slack=sign * (bound[limited] - difference),
            multiplier=np.maximum(sign * row[rows["angle"]], 0.0),
            gain=_on_branches(limited, np.full(limited.size, sign), network.n_branch),
        )

    value = flow_limits.weights @ point.p_from
    multiplier = np.maximum(row[rows["flow"]], 0.0)
    turning = sparse.diags_array(point.dp_from, format="csr")
    add(
        kind=flow_limits.kind,
        contingency=flow_limits.contingency,
        monitored=flow_limits.monitored,
        direction=flow_limits.direction,
        unit="MW",
        to_unit=base,
        limit=flow_limits.limit,
        value=value,
        slack=flow_limits.limit - value,
        multiplier=multiplier,
        gain=sparse.csr_array(flow_limits.weights @ turning),
        at_penalty=_at_penalty(multiplier, penalty, options, base),
    )

    bus = layout.bus
    on = np.flatnonzero(inputs.resource_in_service)
    for kind, names, low, high, block, unit, to_unit in (
        ("voltage", network.buses, network.v_min[bus], network.v_max[bus], "magnitude", "pu", 1.0),
        ("reactive", network.resources, network.q_min[on], network.q_max[on], "q", "Mvar", base),
    ):
        items = bus if kind == "voltage" else on
        where = np.arange(bus.size) if kind == "voltage" else on
        value = solution.x[at[block]][where]
        bound = solution.bound_multiplier[at[block]][where]
        for sign, limit, direction in ((1.0, high, "upper"), (-1.0, low, "lower")):
            add(
                kind=kind,
                monitored=tuple(names[i] for i in items),
                direction=direction,
                unit=unit,
                to_unit=to_unit,
                limit=limit,
                value=value,
                slack=sign * (limit - value),
                multiplier=np.maximum(sign * bound, 0.0),
            )
    return ConstraintRows.concatenate(parts, network.n_branch)


def _at_penalty(multiplier: FloatArray, penalty: float | None, options: DispatchOptions, base: float) -> BoolArray:
    if penalty is None:
        return np.zeros(multiplier.size, dtype=bool)
    return np.asarray(multiplier >= penalty * base * (1.0 - options.tolerances.penalty_match), dtype=bool)


def _on_branches(branch: IntArray, gain: FloatArray, n_branch: int) -> sparse.csr_array:
    return sparse.csr_array((gain, branch, np.arange(branch.size + 1)), shape=(branch.size, n_branch))


def stationarity_system(
    program: AcProgram, vectors: AcVectors, solution: AcSolution, options: DispatchOptions
) -> StationaritySystem:
    """Return the active gradients, in the signs that `StationaritySystem` states.

    MVA rows are divided by twice the apparent power, so that their multiplier is per unit of rating.
    """
    layout, base = program.layout, program.network.base_mva
    tolerances = options.tolerances
    value, jacobian = program.rows(solution.x, vectors.parameter)
    scale = np.ones(layout.n_row)
    for block in ("thermal_from", "thermal_to"):
        scale[layout.rows[block]] = 2.0 * np.sqrt(np.maximum(vectors.row_upper[layout.rows[block]], 1e-12))
    parts: list[sparse.csr_array] = []
    multipliers: list[FloatArray] = []
    free: list[BoolArray] = []
    balance = np.full(program.network.n_bus, -1, dtype=np.int64)
    identity = sparse.eye_array(layout.n_var, format="csr")
    for matrix, point, low, high, multiplier, unit in (
        (jacobian, value, vectors.row_lower, vectors.row_upper, solution.row_multiplier, scale),
        (
            identity,
            solution.x,
            vectors.lower,
            vectors.upper,
            solution.bound_multiplier,
            np.ones(layout.n_var),
        ),
    ):
        equation = low == high
        if not parts:
            # The active balances come first among the equations, so their rows are their own positions.
            balance[layout.bus] = np.arange(layout.bus.size)
        parts.append(-matrix[equation])
        multipliers.append(-multiplier[equation])
        free.append(np.ones(np.count_nonzero(equation), dtype=bool))
        for sign, bound in ((1.0, high), (-1.0, low)):
            room = np.maximum(
                tolerances.active_slack_mw / base,
                tolerances.active_slack_relative * np.where(np.isfinite(bound), np.abs(bound / unit), 0.0),
            )
            active = ~equation & (sign * (bound - point) / unit <= room)
            rows = np.flatnonzero(active)
            parts.append(sparse.csr_array(sparse.diags_array(sign / unit[rows]) @ matrix[rows]))
            multipliers.append(np.maximum(sign * multiplier[rows], 0.0) * unit[rows])
            free.append(np.zeros(rows.size, dtype=bool))
    return StationaritySystem(
        gradient=program.gradient(solution.x, vectors.parameter),
        jacobian=sparse.csr_array(sparse.vstack(parts, format="csr")),
        free=np.concatenate(free),
        multipliers=np.concatenate(multipliers),
        balance_rows=balance,
    )
