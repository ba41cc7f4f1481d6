"""Linear programs through HiGHS: one thread, no warm start, so that a result depends on its input alone."""

from __future__ import annotations

import time

import highspy
import numpy as np

from lmpgap.dispatch.conic import ConicProgram, ConicSolution, without_solution
from lmpgap.dispatch.result import SolveStatus
from lmpgap.errors import LmpgapError, NumericalError
from lmpgap.scenario.network import FloatArray

_Model = highspy.HighsModelStatus

STATUS: dict[object, SolveStatus] = {
    _Model.kOptimal: SolveStatus.OPTIMAL,
    _Model.kModelEmpty: SolveStatus.OPTIMAL,
    _Model.kInfeasible: SolveStatus.INFEASIBLE,
    _Model.kUnbounded: SolveStatus.UNBOUNDED,
    _Model.kTimeLimit: SolveStatus.LIMIT_REACHED,
    _Model.kIterationLimit: SolveStatus.LIMIT_REACHED,
    _Model.kMemoryLimit: SolveStatus.LIMIT_REACHED,
}
"""Status of every HiGHS outcome that is understood; any other means FAILED."""


def solver_name() -> str:
    """Return name and version, as written into results."""
    return f"HiGHS {highspy.HIGHS_VERSION_MAJOR}.{highspy.HIGHS_VERSION_MINOR}.{highspy.HIGHS_VERSION_PATCH}"


def status_of(outcome: object) -> SolveStatus:
    """Return the neutral status of a HiGHS model status."""
    return STATUS.get(outcome, SolveStatus.FAILED)


def split_row_duals(row_dual: FloatArray, n_equality: int) -> tuple[FloatArray, FloatArray]:
    """Return the multipliers of equations and of limits from HiGHS row duals.

    HiGHS reports the rise of cost per unit of right-hand side: never positive for a row that is limited from
    above, whose multiplier here is the fall of cost.
    """
    return row_dual[:n_equality].copy(), np.maximum(-row_dual[n_equality:], 0.0)


def split_reduced_costs(
    reduced_cost: FloatArray, lower: FloatArray, upper: FloatArray
) -> tuple[FloatArray, FloatArray]:
    """Return the multipliers of lower and upper bounds from reduced costs.

    A reduced cost is positive where the lower bound holds the variable and negative where the upper one does;
    at an infinite bound there is nothing to hold and the rest stays visible as a dual residual.
    """
    lower_dual = np.where(np.isfinite(lower), np.maximum(reduced_cost, 0.0), 0.0)
    upper_dual = np.where(np.isfinite(upper), np.maximum(-reduced_cost, 0.0), 0.0)
    return lower_dual, upper_dual


def solve_linear(program: ConicProgram) -> ConicSolution:
    """Solve a linear program to a vertex.

    Raises
    ------
    LmpgapError
        For a program with quadratic costs or cones.
    """
    if not program.is_linear:
        raise LmpgapError("HiGHS is used for linear programs only; this program has quadratic costs or cones")
    name = solver_name()
    if np.any(program.lower > program.upper):
        return without_solution(
            program,
            status=SolveStatus.INFEASIBLE,
            message="a lower bound lies above its upper bound",
            solver=name,
            seconds=0.0,
        )
    highs, seconds = _run(program, presolve=True)
    outcome = highs.getModelStatus()
    if outcome in (_Model.kUnboundedOrInfeasible, _Model.kUnknown, _Model.kNotset):
        # Presolve stops as soon as it knows that there is no optimum; the simplex method tells which of the two.
        highs, more = _run(program, presolve=False)
        seconds += more
        outcome = highs.getModelStatus()
    status = status_of(outcome)
    message = str(highs.modelStatusToString(outcome))
    iterations = int(highs.getInfo().simplex_iteration_count)
    if not status.has_solution:
        return without_solution(
            program, status=status, message=message, solver=name, seconds=seconds, iterations=iterations
        )
    solution = highs.getSolution()
    equality_dual, inequality_dual = split_row_duals(np.array(solution.row_dual), program.equality_rhs.size)
    lower_dual, upper_dual = split_reduced_costs(np.array(solution.col_dual), program.lower, program.upper)
    return ConicSolution(
        status=status,
        message=message,
        solver=name,
        seconds=seconds,
        iterations=iterations,
        x=np.array(solution.col_value),
        equality_dual=equality_dual,
        inequality_dual=inequality_dual,
        lower_dual=lower_dual,
        upper_dual=upper_dual,
        cone_dual=np.zeros(0),
    )


def _run(program: ConicProgram, *, presolve: bool) -> tuple[highspy.Highs, float]:
    """Return the solver after its run, and its seconds, handing over the program included."""
    start = time.perf_counter()
    highs = _model(program, presolve=presolve)
    highs.run()
    return highs, time.perf_counter() - start


def _model(program: ConicProgram, *, presolve: bool) -> highspy.Highs:
    """Return a HiGHS instance that holds the program."""
    highs = highspy.Highs()  # type: ignore[no-untyped-call]
    highs.setOptionValue("output_flag", False)
    highs.setOptionValue("threads", 1)
    highs.setOptionValue("parallel", "off")
    highs.setOptionValue("solver", "simplex")
    highs.setOptionValue("presolve", "on" if presolve else "off")
    equality, inequality = program.equality, program.inequality
    n_equality, n_inequality = program.equality_rhs.size, program.inequality_rhs.size
    passed = highs.passModel(
        program.n_var,
        n_equality + n_inequality,
        equality.nnz + inequality.nnz,
        int(highspy.MatrixFormat.kRowwise),
        int(highspy.ObjSense.kMinimize),
        0.0,
        program.linear,
        program.lower,
        program.upper,
        np.concatenate([program.equality_rhs, np.full(n_inequality, -np.inf)]),
        np.concatenate([program.equality_rhs, program.inequality_rhs]),
        np.concatenate([equality.indptr, equality.nnz + inequality.indptr[1:]]).astype(np.int32),
        np.concatenate([equality.indices, inequality.indices]).astype(np.int32),
        np.concatenate([equality.data, inequality.data]),
        np.zeros(program.n_var, dtype=np.int32),
    )
    if passed == highspy.HighsStatus.kError:
        raise NumericalError("HiGHS refused the program: a coefficient is not a number or too large")
    return highs
