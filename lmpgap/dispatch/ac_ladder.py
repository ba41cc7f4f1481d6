"""The ways in which the AC dispatch is tried, in a stated order, and one call of the nonlinear solver.

An interior-point method finds a local optimum from where it starts, or none. Measured on 40 networks of 1,354 to
13,659 buses: from the cone solution all but one are solved at once. On that one (8,387 buses) the cone is 64 % off in
cost, and its angles, closed as well as they can be, overload a branch of little impedance many times over; from there
and from a flat start the solver crawls, while the linear dispatch with losses leads to the optimum in 65 steps.
"""

from __future__ import annotations

import time
from dataclasses import dataclass
from enum import Enum

import numpy as np

from lmpgap.dispatch.ac_interval import AcVectors, working_bounds
from lmpgap.dispatch.ac_model import AcProgram
from lmpgap.dispatch.ac_result import AcDerivatives, AcSolution, point_of, residuals
from lmpgap.dispatch.result import SolveStatus
from lmpgap.scenario.network import FloatArray, IntervalInputs
from lmpgap.tolerances import Tolerances

STATUS = {
    "Solve_Succeeded": SolveStatus.LOCALLY_OPTIMAL,
    "Solved_To_Acceptable_Level": SolveStatus.INACCURATE,
    "Infeasible_Problem_Detected": SolveStatus.INFEASIBLE,
    "Maximum_Iterations_Exceeded": SolveStatus.LIMIT_REACHED,
    "Maximum_CpuTime_Exceeded": SolveStatus.LIMIT_REACHED,
    "Maximum_WallTime_Exceeded": SolveStatus.LIMIT_REACHED,
}
"""Ipopt's words for how it ended; every other word is `SolveStatus.FAILED`."""

_MOST_ITERATIONS = 600
"""Per attempt: networks of 10,000 buses take fewer than 100, and a solve that wanders should not hold up a week."""

_WIDENED = 1e3
"""Factor on the working ranges of unlimited outputs where the first ones held an output back."""

FAR_OVERLOAD = 1000.0
"""A start whose apparent power squared exceeds that of a rating by more than this is not begun with [pu^2]: 6,000 where
the solver crawled, 100 on the worst of the others."""


class Start(Enum):
    """Where an attempt begins."""

    GIVEN = "given"
    LINEAR = "linear"
    FLAT = "flat"


@dataclass(frozen=True, kw_only=True)
class Attempt:
    """One rung of the ladder of attempts.

    Attributes
    ----------
    name
        What is tried, in words, for the notes of the result.
    start
        The given solution, the linear dispatch with losses, or the flat point.
    settings
        Ipopt settings besides the common ones.
    """

    name: str
    start: Start
    settings: dict[str, object]


LADDER = (
    Attempt(name="the given start", start=Start.GIVEN, settings={"mu_init": 1e-2}),
    Attempt(name="the linear dispatch with losses", start=Start.LINEAR, settings={}),
    Attempt(name="a flat start", start=Start.FLAT, settings={}),
    Attempt(
        name="a flat start with an adaptive barrier",
        start=Start.FLAT,
        settings={"mu_strategy": "adaptive", "fixed_variable_treatment": "relax_bounds"},
    ),
    Attempt(
        name="the given start with an adaptive barrier",
        start=Start.GIVEN,
        settings={"mu_strategy": "adaptive", "fixed_variable_treatment": "relax_bounds"},
    ),
)
"""Tried in this order until one succeeds, where a start is given."""


def ladder(*, given: bool, far: bool) -> tuple[Attempt, ...]:
    """Return the attempts in their order.

    Parameters
    ----------
    given
        Whether a start is given; without one the flat start comes first.
    far
        Whether the given start is far from any operating point; it then comes last.
    """
    order: tuple[Start, ...] = (Start.FLAT, Start.LINEAR)
    if given:
        order = (Start.LINEAR, Start.FLAT, Start.GIVEN) if far else (Start.GIVEN, Start.LINEAR, Start.FLAT)
    plain = [attempt for start in order for attempt in LADDER[:3] if attempt.start is start]
    return (*plain, *(attempt for attempt in LADDER[3:] if attempt.start in order))


def overload_at(program: AcProgram, vectors: AcVectors, x: FloatArray) -> float:
    """Return the largest excess of squared apparent power over a squared rating at a point [pu^2]."""
    layout, point = program.layout, point_of(program, x)
    rated = layout.live.branch[layout.rated]
    limit = vectors.row_upper[layout.rows["thermal_from"]]
    ends = ((point.p_from, point.q_from), (point.p_to, point.q_to))
    return max(float(np.max(p[rated] ** 2 + q[rated] ** 2 - limit, initial=0.0)) for p, q in ends)


def run_attempt(
    program: AcProgram,
    vectors: AcVectors,
    inputs: IntervalInputs,
    x: FloatArray,
    attempt: Attempt,
    tolerances: Tolerances,
) -> tuple[SolveStatus, str, AcSolution | None, float]:
    """Return the status, the solver's words, the solution where there is one, and the solver's seconds."""
    seconds = 0.0
    for widened in (1.0, _WIDENED):
        bounds = working_bounds(program, vectors, inputs, widened)
        status, words, solution, spent = _call(program, vectors, bounds, x, attempt)
        seconds += spent
        if solution is None or not _held_by_working_bounds(vectors, bounds, solution.x):
            break
    if solution is not None and status is SolveStatus.INACCURATE and _confirmed(program, vectors, solution, tolerances):
        status, words = SolveStatus.LOCALLY_OPTIMAL, f"{words}, confirmed by its residuals"
    return status, words, solution, seconds


def _confirmed(program: AcProgram, vectors: AcVectors, solution: AcSolution, tolerances: Tolerances) -> bool:
    """Return whether a point that the solver calls acceptable is as good as a certificate asks, ten times over.

    With multipliers of 1e4 and more the solver runs out of digits before it reaches its own tolerance.
    """
    base = program.network.base_mva
    measured = residuals(program, vectors, solution, AcDerivatives.at(program, vectors, solution))
    return (
        10.0 * measured.primal * base <= tolerances.primal_residual_mw
        and 10.0 * measured.dual / base <= tolerances.price_residual
    )


def _held_by_working_bounds(vectors: AcVectors, bounds: tuple[FloatArray, FloatArray], x: FloatArray) -> bool:
    """Return whether a bound that is none of the dispatch's stands in the way."""
    lower, upper = bounds
    half = 0.5 * (upper - lower)  # the middle half of a working range is well inside it
    low = np.isinf(vectors.lower) & np.isfinite(lower) & (x - lower < 0.5 * half)
    high = np.isinf(vectors.upper) & np.isfinite(upper) & (upper - x < 0.5 * half)
    return bool(np.any(low | high))


def _call(
    program: AcProgram,
    vectors: AcVectors,
    bounds: tuple[FloatArray, FloatArray],
    x: FloatArray,
    attempt: Attempt,
) -> tuple[SolveStatus, str, AcSolution | None, float]:
    lower, upper = bounds
    solver = program.solver({"max_iter": _MOST_ITERATIONS, **attempt.settings})
    began = time.perf_counter()
    try:
        answer = solver(
            x0=x,
            p=vectors.parameter,
            lbx=lower,
            ubx=np.maximum(lower, upper),
            lbg=vectors.row_lower,
            ubg=np.maximum(vectors.row_lower, vectors.row_upper),
        )
    except RuntimeError as failure:
        # casadi turns whatever its plugin throws into this; one interval must not end a run.
        return SolveStatus.FAILED, str(failure).strip().splitlines()[-1], None, time.perf_counter() - began
    seconds = time.perf_counter() - began
    words = str(solver.stats()["return_status"])
    status = STATUS.get(words, SolveStatus.FAILED)
    vector = {name: np.asarray(answer[name], dtype=float).ravel() for name in ("x", "lam_x", "lam_g")}
    if status.has_solution and not all(np.all(np.isfinite(values)) for values in vector.values()):
        status = SolveStatus.FAILED
    solution = AcSolution(
        x=vector["x"],
        bound_multiplier=vector["lam_x"] / program.objective_scale,
        row_multiplier=vector["lam_g"] / program.objective_scale,
    )
    return status, words.replace("_", " ").lower(), solution if status.has_solution else None, seconds
