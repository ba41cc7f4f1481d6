"""A convex program in standard blocks, its solution with signed multipliers, and its residuals.

The convex formulations fill these blocks directly with sparse matrices. That keeps three things on the very
matrices that were solved: rows that are added while screening contingencies, the certificate, and the
polyhedron of multipliers behind the uniqueness test.

    minimise    constant + linear @ x + 1/2 x @ diag(quadratic) @ x                       [$/h]
    subject to  equality @ x = equality_rhs                                               (y)
                inequality @ x <= inequality_rhs                                          (z >= 0)
                lower <= x <= upper                                                       (z_lower, z_upper >= 0)
                cone_rhs - cone @ x  in a product of second-order cones of cone_sizes      (u in the dual cones)

    stationarity:  linear + quadratic * x - equality.T y + inequality.T z - z_lower + z_upper + cone.T u = 0

so that y is the rise of cost per unit of right-hand side, and z the fall of cost per unit of relaxed limit.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from scipy import sparse

from lmpgap.dispatch.result import SolverResiduals, SolveStatus, StationaritySystem
from lmpgap.dispatch.sparse_rows import ScaledRows, stacked_rows
from lmpgap.scenario.network import FloatArray, IntArray
from lmpgap.tolerances import Tolerances


@dataclass(frozen=True, kw_only=True)
class ConicProgram:
    """The blocks of the module docstring; costs in $/h, variables per unit.

    ``workspace`` holds matrices that were derived from the blocks (transposes, a solver's stacking). It is handed on
    by `dataclasses.replace`, so that programs that differ in vectors only share it; whoever reads it checks that the
    blocks are still the ones it was made from.
    """

    linear: FloatArray
    quadratic: FloatArray
    constant: float
    equality: sparse.csr_array
    equality_rhs: FloatArray
    inequality: sparse.csr_array
    inequality_rhs: FloatArray
    lower: FloatArray
    upper: FloatArray
    cone: sparse.csr_array
    cone_rhs: FloatArray
    cone_sizes: IntArray
    workspace: dict[str, Any] = field(default_factory=dict, repr=False, compare=False)

    @property
    def blocks(self) -> tuple[sparse.csr_array, sparse.csr_array, sparse.csr_array]:
        """The three matrices."""
        return self.equality, self.inequality, self.cone

    def derived(self, name: str, key: object, make: Callable[[], Any]) -> Any:
        """Return what ``make`` derives from the matrices, made anew only where they or the key changed."""
        kept = self.workspace.get(name)
        if kept is None or kept[1] != key or any(a is not b for a, b in zip(kept[0], self.blocks, strict=True)):
            kept = (self.blocks, key, make())
            self.workspace[name] = kept
        return kept[2]

    @property
    def n_var(self) -> int:
        """Number of variables."""
        return self.linear.size

    @property
    def is_linear(self) -> bool:
        """True when a linear-programming solver can take it."""
        return self.cone_sizes.size == 0 and not np.any(self.quadratic)

    def cost(self, x: FloatArray) -> float:
        """Return the cost at x [$/h]."""
        return float(self.constant + self.linear @ x + 0.5 * np.sum(self.quadratic * x * x))


@dataclass(frozen=True, kw_only=True)
class ConicSolution:
    """Solution and multipliers in the signs of the module docstring; ``nan`` arrays without a solution."""

    status: SolveStatus
    message: str
    solver: str
    seconds: float
    iterations: int
    x: FloatArray
    equality_dual: FloatArray
    inequality_dual: FloatArray
    lower_dual: FloatArray
    upper_dual: FloatArray
    cone_dual: FloatArray


def without_solution(
    program: ConicProgram, *, status: SolveStatus, message: str, solver: str, seconds: float, iterations: int = 0
) -> ConicSolution:
    """Return a solution record without figures."""
    return ConicSolution(
        status=status,
        message=message,
        solver=solver,
        seconds=seconds,
        iterations=iterations,
        x=np.full(program.n_var, np.nan),
        equality_dual=np.full(program.equality_rhs.size, np.nan),
        inequality_dual=np.full(program.inequality_rhs.size, np.nan),
        lower_dual=np.full(program.n_var, np.nan),
        upper_dual=np.full(program.n_var, np.nan),
        cone_dual=np.full(program.cone_rhs.size, np.nan),
    )


def cone_reduce(ufunc: np.ufunc, values: FloatArray, cone_sizes: IntArray) -> FloatArray:
    """Return one figure per cone from one per row, e.g. a sum."""
    if cone_sizes.size == 0:
        return np.zeros(0)
    return np.asarray(ufunc.reduceat(values, cone_starts(cone_sizes)))


def cone_starts(cone_sizes: IntArray) -> IntArray:
    """Return the first row of each cone."""
    return np.concatenate([[0], np.cumsum(cone_sizes)[:-1]]).astype(np.int64)[: cone_sizes.size]


def cone_tail_norm(values: FloatArray, cone_sizes: IntArray) -> FloatArray:
    """Return the Euclidean norm of everything but the head of each cone."""
    if cone_sizes.size == 0:
        return np.zeros(0)
    tail = values.copy()
    tail[cone_starts(cone_sizes)] = 0.0
    # hypot keeps small tails beside large ones that a sum of squares would lose.
    return np.asarray(np.hypot.reduceat(tail, cone_starts(cone_sizes)))


def stationarity(program: ConicProgram, solution: ConicSolution) -> FloatArray:
    """Return the left side of the stationarity condition, shape (n_var,) [$/h per unit of the variable]."""
    equality, inequality, cone = program.derived(
        "transposed", None, lambda: tuple(sparse.csr_array(block.T) for block in program.blocks)
    )
    return np.asarray(
        program.linear
        + program.quadratic * solution.x
        - equality @ solution.equality_dual
        + inequality @ solution.inequality_dual
        - solution.lower_dual
        + solution.upper_dual
        + cone @ solution.cone_dual
    )


def residuals(program: ConicProgram, solution: ConicSolution) -> SolverResiduals:
    """Return how far a solution is from optimality, from the matrices rather than the solver's word.

    Multipliers of the wrong sign, or outside the dual cone, count as dual violations. The gap is the sum of the
    products of slack and multiplier: it equals primal minus dual objective at a stationary feasible point, and
    unlike that difference it does not cancel.
    """
    if not solution.status.has_solution:
        return SolverResiduals(primal=np.inf, dual=np.inf, gap=np.inf)
    x = solution.x
    slack_inequality = program.inequality_rhs - program.inequality @ x
    slack_lower, slack_upper = x - program.lower, program.upper - x
    cone = program.cone_rhs - program.cone @ x
    starts, sizes = cone_starts(program.cone_sizes), program.cone_sizes
    slack_cone = cone[starts] - cone_tail_norm(cone, sizes)
    dual_cone = solution.cone_dual[starts] - cone_tail_norm(solution.cone_dual, sizes)
    primal = _largest(
        np.abs(program.equality_rhs - program.equality @ x), -slack_inequality, -slack_lower, -slack_upper, -slack_cone
    )
    dual = _largest(
        np.abs(stationarity(program, solution)),
        -solution.inequality_dual,
        -solution.lower_dual,
        -solution.upper_dual,
        -dual_cone,
    )
    gap = (
        _slack_gap(slack_inequality, solution.inequality_dual)
        + _slack_gap(slack_lower, solution.lower_dual)
        + _slack_gap(slack_upper, solution.upper_dual)
        + np.sum(np.abs(cone_reduce(np.add, cone * solution.cone_dual, sizes)))
    )
    return SolverResiduals(primal=primal, dual=dual, gap=float(gap))


def stationarity_system(
    program: ConicProgram,
    solution: ConicSolution,
    balance_rows: IntArray,
    tolerances: Tolerances,
    base_mva: float,
) -> StationaritySystem:
    """Return the gradients of all equations and active limits at the solution.

    Parameters
    ----------
    balance_rows : (n_bus,)
        Equality row of each bus's active balance, -1 at a dead bus. The row must be written as generation -
        network = load.
    base_mva
        For the activity tolerance, which is given in MW.

    Returns
    -------
    StationaritySystem
        Equations are turned into load + network - generation = 0, so that their multipliers keep their meaning.
    """
    absolute = tolerances.active_slack_mw / base_mva

    def active(slack: FloatArray, limit: FloatArray) -> IntArray:
        size = np.where(np.isfinite(limit), np.abs(limit), 0.0)
        return np.flatnonzero(slack <= np.maximum(absolute, tolerances.active_slack_relative * size))

    x = solution.x
    rows = active(program.inequality_rhs - program.inequality @ x, program.inequality_rhs)
    at_lower = active(x - program.lower, program.lower)
    at_upper = active(program.upper - x, program.upper)
    cone = program.cone_rhs - program.cone @ x
    starts = cone_starts(program.cone_sizes)
    tail = cone_tail_norm(cone, program.cone_sizes)
    cones = active(cone[starts] - tail, cone[starts])
    # Boundary |v| - t = 0 with (t, v) = rhs - cone @ x: weight -1 on the head row, v/|v| on the others, so that
    # the gradient is -(weight @ cone).
    owner = np.repeat(np.arange(starts.size), program.cone_sizes)
    weight = cone / np.where(tail > 0.0, tail, 1.0)[owner]
    weight[starts] = -1.0
    jacobian = stacked_rows(
        [
            ScaledRows(program.equality, np.arange(program.equality_rhs.size), -1.0),
            ScaledRows(program.inequality, rows, 1.0),
            ScaledRows(None, at_lower, -1.0),
            ScaledRows(None, at_upper, 1.0),
            ScaledRows(_boundary_gradients(program, cones, owner, weight), np.arange(cones.size), 1.0),
        ],
        program.n_var,
    )
    multipliers = np.concatenate(
        [
            solution.equality_dual,
            solution.inequality_dual[rows],
            solution.lower_dual[at_lower],
            solution.upper_dual[at_upper],
            solution.cone_dual[starts][cones],
        ]
    )
    return StationaritySystem(
        gradient=program.linear + program.quadratic * x,
        jacobian=jacobian,
        free=np.arange(multipliers.size) < program.equality_rhs.size,
        multipliers=multipliers,
        balance_rows=balance_rows,
    )


def _boundary_gradients(
    program: ConicProgram, cones: IntArray, owner: IntArray, weight: FloatArray
) -> sparse.csr_array:
    """Return minus the weighted sum of the rows of each chosen cone, sparse (n_chosen, n_var)."""
    chosen = np.zeros(program.cone_sizes.size, dtype=bool)
    chosen[cones] = True
    used = np.flatnonzero(chosen[owner])
    position = np.cumsum(chosen) - 1
    gather = sparse.csr_array((-weight[used], (position[owner[used]], used)), shape=(cones.size, owner.size))
    return sparse.csr_array(gather @ program.cone)


def _largest(*parts: FloatArray) -> float:
    return max(0.0, *(float(part.max()) for part in parts if part.size)) if any(p.size for p in parts) else 0.0


def _slack_gap(slack: FloatArray, dual: FloatArray) -> float:
    """Return the complementarity sum; an infinite limit has no multiplier."""
    finite = np.isfinite(slack)
    return float(np.abs(slack[finite]) @ np.abs(dual[finite]))
