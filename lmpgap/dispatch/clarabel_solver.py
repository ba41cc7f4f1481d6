"""Quadratic and second-order cone programs through Clarabel: one thread, no warm start.

Clarabel solves ``minimise 1/2 x'Px + q'x subject to Ax + s = b, s in K`` with ``Px + q + A'z = 0``, z in the dual
of K. An interior-point method needs a strict interior, so variables whose bounds coincide are taken out first and
their multipliers are rebuilt from stationarity afterwards.
"""

from __future__ import annotations

import time
from dataclasses import dataclass, replace

import clarabel
import numpy as np
from scipy import sparse

from lmpgap.dispatch.conic import ConicProgram, ConicSolution, residuals, stationarity, without_solution
from lmpgap.dispatch.result import SolveStatus
from lmpgap.dispatch.sparse_rows import ScaledRows, stacked_rows
from lmpgap.scenario.network import BoolArray, FloatArray
from lmpgap.tolerances import Tolerances

_Outcome = clarabel.SolverStatus

STATUS: dict[str, SolveStatus] = {
    str(_Outcome.Solved): SolveStatus.OPTIMAL,
    str(_Outcome.AlmostSolved): SolveStatus.INACCURATE,
    str(_Outcome.InsufficientProgress): SolveStatus.INACCURATE,
    str(_Outcome.PrimalInfeasible): SolveStatus.INFEASIBLE,
    str(_Outcome.AlmostPrimalInfeasible): SolveStatus.INFEASIBLE,
    str(_Outcome.DualInfeasible): SolveStatus.UNBOUNDED,
    str(_Outcome.AlmostDualInfeasible): SolveStatus.UNBOUNDED,
    str(_Outcome.MaxIterations): SolveStatus.LIMIT_REACHED,
    str(_Outcome.MaxTime): SolveStatus.LIMIT_REACHED,
    str(_Outcome.NumericalError): SolveStatus.FAILED,
}
"""Status of every Clarabel outcome that is understood; any other means FAILED."""

_SETTLED = (SolveStatus.OPTIMAL, SolveStatus.INFEASIBLE, SolveStatus.UNBOUNDED)
"""Outcomes after which no further attempt is made."""

FIXED_WIDTH = 1e-9
"""Bounds closer than this [pu] leave no interior; the variable is held at its lower bound."""

NO_LIMIT = 1e30
"""Stands for an infinite right-hand side; Clarabel leaves out rows above 1e20."""


@dataclass(frozen=True, kw_only=True)
class _Attempt:
    """One way to call the solver; tried in the order of `_ATTEMPTS` until one succeeds."""

    label: str
    scale_factor: float = 1.0
    settings: tuple[tuple[str, object], ...] = ()


_ATTEMPTS = (
    # Solved each of nine networks of 118 to 6,515 buses at once; the solver's own defaults left two of them unfinished.
    _Attempt(
        label="firm regularisation",
        settings=(("static_regularization_constant", 1e-7), ("equilibrate_max_iter", 50)),
    ),
    _Attempt(label="standard settings"),
    _Attempt(
        label="no equilibration",
        settings=(("static_regularization_constant", 1e-7), ("equilibrate_enable", False)),
    ),
    _Attempt(label="a tenth of the cost scale", scale_factor=0.1),
)


def solver_name() -> str:
    """Return name and version, as written into results."""
    return f"Clarabel {clarabel.__version__}"


def status_of(outcome: object) -> SolveStatus:
    """Return the neutral status of a Clarabel status."""
    return STATUS.get(str(outcome), SolveStatus.FAILED)


def split_duals(
    z: FloatArray, n_equality: int, n_inequality: int, n_lower: int, n_upper: int
) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray, FloatArray]:
    """Return equation, limit, lower-bound, upper-bound and cone multipliers from Clarabel's stacked z.

    Rows are stacked in that order. Clarabel's z of an equation enters stationarity with a plus sign, the
    project's with a minus sign (rise of cost per unit of right-hand side); all others are taken as they are.
    """
    ends = np.cumsum([n_equality, n_inequality, n_lower, n_upper])
    equality, inequality, lower, upper, cone = np.split(z, ends)
    return -equality, inequality, lower, upper, cone


def solve_conic(program: ConicProgram, tolerances: Tolerances) -> tuple[ConicSolution, tuple[str, ...]]:
    """Solve a convex program; where the solver is not satisfied, try again in a stated order.

    Returns
    -------
    solution : ConicSolution
        The first one the solver calls solved (or proves infeasible or unbounded); failing that, the one with the
        smallest residuals as computed from the matrices.
    notes : tuple of str
        Which further attempts were made, if any.
    """
    name = solver_name()
    fixed = program.upper - program.lower <= FIXED_WIDTH
    if np.any(program.lower > program.upper + FIXED_WIDTH):
        message = "a lower bound lies above its upper bound"
        return (
            without_solution(program, status=SolveStatus.INFEASIBLE, message=message, solver=name, seconds=0.0),
            (),
        )
    stacked = _stack(program, fixed)
    answers: list[ConicSolution] = []
    for attempt in _ATTEMPTS:
        answers.append(_confirmed(program, _solve_once(program, fixed, stacked, tolerances, attempt), tolerances))
        if answers[-1].status in _SETTLED:
            break
    settled = answers[-1].status in _SETTLED
    best = answers[-1] if settled else min(answers, key=lambda answer: _error(program, answer))
    notes: tuple[str, ...] = ()
    if len(answers) > 1:
        tried = ", then ".join(attempt.label for attempt in _ATTEMPTS[: len(answers)])
        notes = (f"{name} was asked {len(answers)} times: {tried}; taken: {best.message}",)
    return replace(best, seconds=sum(answer.seconds for answer in answers)), notes


def _confirmed(program: ConicProgram, solution: ConicSolution, tolerances: Tolerances) -> ConicSolution:
    """Return an answer the solver calls inaccurate as optimal where its residuals say that it is.

    They are computed from the matrices and held against ten times the tolerance that the solver was given, in its
    own measure: relative to the sizes of right-hand side, cost coefficients and cost. That is still far below what a
    price needs; the solver stops there because the factorisation has no more digits to give.
    """
    if solution.status is not SolveStatus.INACCURATE:
        return solution
    measured = residuals(program, solution)
    tolerance = 10.0 * tolerances.conic_feasibility
    price = 1.0 + float(np.abs(program.linear).max(initial=0.0))
    # The solver's objective leaves the constant out, which may be the larger part of either.
    cost = program.cost(solution.x)
    size = 1.0 + max(abs(cost), abs(cost - program.constant))
    good = (
        measured.primal <= tolerance * (1.0 + float(np.abs(program.equality_rhs).max(initial=0.0)))
        and measured.dual <= tolerance * price
        and measured.gap <= tolerance * size
    )
    return (
        replace(solution, status=SolveStatus.OPTIMAL, message=f"{solution.message}, confirmed by its residuals")
        if good
        else solution
    )


def _error(program: ConicProgram, solution: ConicSolution) -> float:
    """Return one figure to choose between unsatisfying answers: relative gap plus both violations."""
    if not solution.status.has_solution:
        return np.inf
    r = residuals(program, solution)
    scale = 1.0 + abs(program.cost(solution.x))
    price = 1.0 + float(np.abs(program.linear).max(initial=0.0))
    return r.primal + r.dual / price + r.gap / scale


@dataclass(frozen=True, kw_only=True)
class _Stacked:
    """The program in Clarabel's form without its fixed variables."""

    free: BoolArray
    a: sparse.csc_matrix
    b: FloatArray
    keep_equality: BoolArray
    lower: BoolArray
    upper: BoolArray
    contradiction: bool


def _stack(program: ConicProgram, fixed: BoolArray) -> _Stacked:
    free = ~fixed
    lower = free & np.isfinite(program.lower)
    upper = free & np.isfinite(program.upper)

    def matrices() -> tuple[sparse.csc_matrix, BoolArray]:
        equality, inequality, cone = program.blocks
        # An equation whose variables are all fixed is either true or a contradiction; the solver needs neither.
        row = np.repeat(np.arange(equality.shape[0]), np.diff(equality.indptr))
        keep = np.bincount(row[free[equality.indices]], minlength=equality.shape[0]) > 0
        stacked = stacked_rows(
            [
                ScaledRows(equality, np.flatnonzero(keep), 1.0),
                ScaledRows(inequality, np.arange(inequality.shape[0]), 1.0),
                ScaledRows(None, np.flatnonzero(lower), -1.0),
                ScaledRows(None, np.flatnonzero(upper), 1.0),
                ScaledRows(cone, np.arange(cone.shape[0]), 1.0),
            ],
            program.n_var,
        ).tocsc()
        return sparse.csc_matrix(stacked[:, np.flatnonzero(free)] if fixed.any() else stacked), keep

    key = (fixed.tobytes(), lower.tobytes(), upper.tobytes())
    a, keep = program.derived("clarabel", key, matrices)
    held = np.where(fixed, program.lower, 0.0)
    equality_rhs = program.equality_rhs - program.equality @ held
    b = np.concatenate(
        [
            equality_rhs[keep],
            np.minimum(program.inequality_rhs, NO_LIMIT) - program.inequality @ held,
            -program.lower[lower],
            program.upper[upper],
            program.cone_rhs - program.cone @ held,
        ]
    )
    return _Stacked(
        free=free,
        a=a,
        b=b,
        keep_equality=keep,
        lower=lower,
        upper=upper,
        contradiction=bool(np.any(np.abs(equality_rhs[~keep]) > 1e-7)),
    )


def _solve_once(
    program: ConicProgram, fixed: BoolArray, stacked: _Stacked, tolerances: Tolerances, attempt: _Attempt
) -> ConicSolution:
    name = solver_name()
    if stacked.contradiction:
        return without_solution(
            program,
            status=SolveStatus.INFEASIBLE,
            message="an equation holds nothing but fixed quantities and they do not add up",
            solver=name,
            seconds=0.0,
        )
    scale = tolerances.objective_scale * attempt.scale_factor
    free = stacked.free
    n_equality = int(stacked.keep_equality.sum())
    n_inequality, n_lower, n_upper = program.inequality_rhs.size, int(stacked.lower.sum()), int(stacked.upper.sum())
    cones = [
        clarabel.ZeroConeT(n_equality),
        clarabel.NonnegativeConeT(n_inequality + n_lower + n_upper),
        *[clarabel.SecondOrderConeT(int(size)) for size in program.cone_sizes],
    ]
    quadratic = _diagonal(scale * program.quadratic[free])
    start = time.perf_counter()
    settings = _settings(tolerances, attempt)
    if program.cone_sizes.size == 0:
        settings.tol_gap_abs = settings.tol_gap_rel = tolerances.quadratic_gap
    solver = clarabel.DefaultSolver(quadratic, scale * program.linear[free], stacked.a, stacked.b, cones, settings)
    answer = solver.solve()
    seconds = time.perf_counter() - start
    status = status_of(answer.status)
    message = f"{answer.status} with {attempt.label}"
    if not status.has_solution:
        return without_solution(
            program,
            status=status,
            message=message,
            solver=name,
            seconds=seconds,
            iterations=int(answer.iterations),
        )
    x = np.where(fixed, program.lower, 0.0)
    x[free] = np.array(answer.x)
    duals = split_duals(np.array(answer.z) / scale, n_equality, n_inequality, n_lower, n_upper)
    equality_dual = np.zeros(program.equality_rhs.size)
    equality_dual[stacked.keep_equality] = duals[0]
    lower_dual, upper_dual = np.zeros(program.n_var), np.zeros(program.n_var)
    lower_dual[stacked.lower], upper_dual[stacked.upper] = duals[2], duals[3]
    solution = ConicSolution(
        status=status,
        message=message,
        solver=name,
        seconds=seconds,
        iterations=int(answer.iterations),
        x=x,
        equality_dual=equality_dual,
        inequality_dual=duals[1],
        lower_dual=lower_dual,
        upper_dual=upper_dual,
        cone_dual=duals[4],
    )
    if not fixed.any():
        return solution
    # A fixed variable's bounds carry whatever stationarity leaves over, one of them or the other.
    rest = np.where(fixed, stationarity(program, solution), 0.0)
    return replace(
        solution, lower_dual=lower_dual + np.maximum(rest, 0.0), upper_dual=upper_dual + np.maximum(-rest, 0.0)
    )


def _settings(tolerances: Tolerances, attempt: _Attempt) -> clarabel.DefaultSettings:
    settings = clarabel.DefaultSettings()
    settings.verbose = False
    settings.max_threads = 1
    settings.direct_solve_method = "qdldl"
    settings.tol_gap_abs = tolerances.conic_feasibility
    settings.tol_gap_rel = tolerances.conic_feasibility
    settings.tol_feas = tolerances.conic_feasibility
    for key, value in attempt.settings:
        setattr(settings, key, value)
    return settings


def _diagonal(values: FloatArray) -> sparse.csc_matrix:
    """Return the diagonal matrix of the values without stored zeros."""
    used = np.flatnonzero(values)
    pointer = np.searchsorted(used, np.arange(values.size + 1))
    return sparse.csc_matrix((values[used], used, pointer), shape=(values.size, values.size))
