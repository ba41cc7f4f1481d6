"""From the nonlinear solver's vectors to the neutral result: signs, units, residuals and the active gradients.

casadi's Lagrangian is cost + multipliers @ rows + bound multipliers @ x, with multipliers positive at an upper and
negative at a lower limit. Balances are written generation - load - network, hence the price of load is minus the
multiplier. The MVA rows limit S^2; per unit of rating the multiplier is 2 (rating + slack) times that of the row.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from scipy import sparse

from lmpgap.dispatch.ac_interval import AcVectors, segment_slope
from lmpgap.dispatch.ac_model import AcProgram
from lmpgap.dispatch.branch_model import BranchModel, operating_point, voltage_products
from lmpgap.dispatch.options import DispatchOptions
from lmpgap.dispatch.result import (
    BalanceMultipliers,
    OperatingPoint,
    SolverResiduals,
    StationaritySystem,
)
from lmpgap.dispatch.sparse_rows import ScaledRows, stacked_rows
from lmpgap.scenario.network import BoolArray, FloatArray, IntervalInputs, incidence


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


@dataclass(frozen=True, kw_only=True)
class AcDerivatives:
    """Rows and derivatives of the program at a point.

    Attributes
    ----------
    gradient : (n_var,)
        Of the cost [$/h per internal unit].
    value : (n_row,)
    jacobian : sparse (n_row, n_var)
    """

    gradient: FloatArray
    value: FloatArray
    jacobian: sparse.csr_array

    @staticmethod
    def at(program: AcProgram, vectors: AcVectors, solution: AcSolution) -> AcDerivatives:
        """Return the derivatives at a solution."""
        value, jacobian = program.rows(solution.x, vectors.parameter)
        gradient = program.gradient(solution.x, vectors.parameter)
        return AcDerivatives(gradient=gradient, value=value, jacobian=jacobian)


def residuals(
    program: AcProgram, vectors: AcVectors, solution: AcSolution, derivatives: AcDerivatives
) -> SolverResiduals:
    """Return how far a solution is from the conditions of a local optimum, from the functions themselves.

    ``primal`` is the largest violation of a row or bound [pu], ``dual`` the largest entry of the
    Lagrangian's gradient or of a multiplier that points away from any limit [$/h per pu], ``gap`` the sum of
    multiplier times slack [$/h].
    """
    stationarity = derivatives.gradient + derivatives.jacobian.T @ solution.row_multiplier + solution.bound_multiplier
    primal, gap, stray = 0.0, 0.0, 0.0
    for point, low, high, multiplier, unit in (
        (
            derivatives.value,
            vectors.row_lower,
            vectors.row_upper,
            solution.row_multiplier,
            row_units(program, vectors),
        ),
        (solution.x, vectors.lower, vectors.upper, solution.bound_multiplier, np.ones(solution.x.size)),
    ):
        primal = max(primal, float(np.max(np.maximum(low - point, point - high) / unit, initial=0.0)))
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


def row_units(program: AcProgram, vectors: AcVectors) -> FloatArray:
    """Return by what a row must be divided to be per unit, shape (n_row,): twice the rating for S^2, 1 elsewhere."""
    unit = np.ones(program.layout.n_row)
    for block in ("thermal_from", "thermal_to"):
        rows = program.layout.rows[block]
        unit[rows] = 2.0 * np.sqrt(np.maximum(vectors.row_upper[rows], 1e-12))
    return unit


def point_of(program: AcProgram, x: FloatArray) -> OperatingPoint:
    """Return the operating point; voltages are ``nan`` at dead buses, whose branches carry nothing."""
    network, live, at = program.network, program.layout.live, program.layout.variables
    magnitude, angle = live.to_buses(x[at["magnitude"]], 0.0), live.to_buses(x[at["angle"]], 0.0)
    c, s = voltage_products(network, magnitude, angle)
    c, s = live.to_branches(c[live.branch]), live.to_branches(s[live.branch])
    model = BranchModel.of(network, program.shape.branch_in_service)
    point = operating_point(network, model, magnitude**2, c, s, angle)
    return replace(point, w=live.to_buses(point.w[live.bus], np.nan), angle=live.to_buses(angle[live.bus], np.nan))


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
    layout, live = program.layout, program.layout.live
    magnitude = layout.variables["magnitude"]
    squared = solution.bound_multiplier[magnitude] / (2.0 * solution.x[magnitude])
    return BalanceMultipliers(
        active=live.to_buses(-solution.row_multiplier[layout.rows["active"]], np.nan),
        reactive=live.to_buses(-solution.row_multiplier[layout.rows["reactive"]], np.nan),
        squared_voltage=live.to_buses(squared, np.nan),
    )


def stationarity_system(
    program: AcProgram,
    vectors: AcVectors,
    solution: AcSolution,
    derivatives: AcDerivatives,
    options: DispatchOptions,
) -> StationaritySystem:
    """Return the active gradients, in the signs that `StationaritySystem` states.

    MVA rows are divided by twice the apparent power, so that their multiplier is per unit of rating.
    """
    layout, base = program.layout, program.network.base_mva
    tolerances = options.tolerances
    parts: list[ScaledRows] = []
    multipliers: list[FloatArray] = []
    free: list[BoolArray] = []
    # The active balances come first among the equations, so their rows are their own positions.
    balance = np.full(program.network.n_bus, -1, dtype=np.int64)
    balance[layout.live.bus] = np.arange(layout.live.n_bus)
    for matrix, point, low, high, multiplier, unit in (
        (
            derivatives.jacobian,
            derivatives.value,
            vectors.row_lower,
            vectors.row_upper,
            solution.row_multiplier,
            row_units(program, vectors),
        ),
        (None, solution.x, vectors.lower, vectors.upper, solution.bound_multiplier, np.ones(layout.n_var)),
    ):
        equation = low == high
        parts.append(ScaledRows(matrix, np.flatnonzero(equation), -1.0))
        multipliers.append(-multiplier[equation])
        free.append(np.ones(np.count_nonzero(equation), dtype=bool))
        for sign, bound in ((1.0, high), (-1.0, low)):
            room = np.maximum(
                tolerances.active_slack_mw / base,
                tolerances.active_slack_relative * np.where(np.isfinite(bound), np.abs(bound / unit), 0.0),
            )
            active = ~equation & (sign * (bound - point) / unit <= room)
            rows = np.flatnonzero(active)
            parts.append(ScaledRows(matrix, rows, sign / unit[rows]))
            multipliers.append(np.maximum(sign * multiplier[rows], 0.0) * unit[rows])
            free.append(np.zeros(rows.size, dtype=bool))
    return StationaritySystem(
        gradient=derivatives.gradient,
        jacobian=stacked_rows(parts, layout.n_var),
        free=np.concatenate(free),
        multipliers=np.concatenate(multipliers),
        balance_rows=balance,
    )
