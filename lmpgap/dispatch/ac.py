"""The AC dispatch: least cost over the full nonlinear network, a local optimum found by an interior-point method.

Polar voltages, exact derivatives from casadi, Ipopt with MUMPS inside: "On the implementation of an interior-point
filter line-search algorithm for large-scale nonlinear programming", Mathematical Programming 106, 2006. The problem is
not convex: the answer is a point that satisfies the first-order conditions, called locally optimal, never optimal.
"""

from __future__ import annotations

import importlib.metadata
import time
from collections import OrderedDict
from dataclasses import dataclass, replace

import numpy as np

from lmpgap.dispatch.ac_interval import (
    AcVectors,
    Movement,
    flat_start,
    interval_vectors,
    start_from,
    working_bounds,
)
from lmpgap.dispatch.ac_layout import AcShape
from lmpgap.dispatch.ac_model import AcProgram
from lmpgap.dispatch.ac_result import (
    AcDerivatives,
    AcSolution,
    balance_multipliers,
    outputs_of,
    point_of,
    residuals,
    resource_cost,
    stationarity_system,
)
from lmpgap.dispatch.ac_rows import ac_constraints
from lmpgap.dispatch.limits import FlowLimits
from lmpgap.dispatch.live import bus_list, live_buses
from lmpgap.dispatch.options import DispatchOptions
from lmpgap.dispatch.result import DispatchResult, SolveStatus, no_solution
from lmpgap.errors import SolveError
from lmpgap.scenario.network import BoolArray, FloatArray, IntervalInputs, Network

SOLVER = f"Ipopt with MUMPS (casadi {importlib.metadata.version('casadi')})"

STATUS = {
    "Solve_Succeeded": SolveStatus.LOCALLY_OPTIMAL,
    "Solved_To_Acceptable_Level": SolveStatus.INACCURATE,
    "Infeasible_Problem_Detected": SolveStatus.INFEASIBLE,
    "Maximum_Iterations_Exceeded": SolveStatus.LIMIT_REACHED,
    "Maximum_CpuTime_Exceeded": SolveStatus.LIMIT_REACHED,
    "Maximum_WallTime_Exceeded": SolveStatus.LIMIT_REACHED,
}
"""Ipopt's words for how it ended; every other word is `SolveStatus.FAILED`."""

_INFEASIBLE_TWICE = 2
"""Infeasible from this many starts counts as infeasible: the answer of one start says little, a third adds little."""

_MOST_ITERATIONS = 600
"""Per attempt: networks of 10,000 buses take fewer than 100, and a solve that wanders should not hold up a week."""

_WIDENED = 1e3
"""Factor on the working ranges of unlimited outputs where the first ones held an output back."""

_PROGRAMS_KEPT = 4
"""Programs kept per topology: the plain one, and the latest sets of added flow limits."""


@dataclass(frozen=True, kw_only=True)
class Attempt:
    """One rung of the ladder of attempts.

    Attributes
    ----------
    name
        What is tried, in words, for the notes of the result.
    from_start
        Start from the given solution, if there is one; flat otherwise.
    settings
        Ipopt settings besides the common ones.
    """

    name: str
    from_start: bool
    settings: dict[str, object]


LADDER = (
    Attempt(name="the given start", from_start=True, settings={"mu_init": 1e-2}),
    Attempt(name="a flat start", from_start=False, settings={}),
    Attempt(
        name="a flat start with an adaptive barrier",
        from_start=False,
        settings={"mu_strategy": "adaptive", "fixed_variable_treatment": "relax_bounds"},
    ),
    Attempt(
        name="the given start with an adaptive barrier",
        from_start=True,
        settings={"mu_strategy": "adaptive", "fixed_variable_treatment": "relax_bounds"},
    ),
)
"""Tried in this order until one succeeds; rungs that need a start are left out where none is given."""


class AcDispatch:
    """Least-cost dispatch over the nonlinear network, built once per topology.

    Parameters
    ----------
    network
    branch_in_service : (n_branch,)
        The topology.
    options
        Penalties, tolerances, and whether the active gradients are kept.

    Notes
    -----
    Starting from the cone solution of the same interval is quicker and reaches networks that a flat start does not; a
    solution of another interval is never used, so that a price does not depend on what was solved before.
    """

    name = "ac"

    def __init__(self, network: Network, branch_in_service: BoolArray, options: DispatchOptions) -> None:
        self._network = network
        self._branch_in_service = np.asarray(branch_in_service, dtype=bool)
        self._options = options
        self._island = network.islands(self._branch_in_service)
        self._programs: OrderedDict[object, AcProgram] = OrderedDict()

    @property
    def options(self) -> DispatchOptions:
        """Penalties and tolerances it was built with."""
        return self._options

    def solve(
        self, inputs: IntervalInputs, flow_limits: FlowLimits, start: DispatchResult | None = None
    ) -> DispatchResult:
        """Solve one interval.

        Parameters
        ----------
        inputs
            The interval; its topology must be the one the dispatch was built for.
        flow_limits
            Limits on weighted sums of from-end active flows.
        start
            A solution of the same interval, best of the cone relaxation; flat start otherwise.

        Returns
        -------
        DispatchResult
            A local optimum with `SolveStatus.LOCALLY_OPTIMAL`; otherwise the status and message of the last attempt,
            with the attempts in ``notes``. Infeasible means that no attempt found a point within the limits: Ipopt
            stopped where the violation could not be reduced further from there.

        Raises
        ------
        SolveError
            When the interval has another topology.
        """
        return self.solve_near(inputs, flow_limits, start=start, movement=None)

    def solve_near(
        self,
        inputs: IntervalInputs,
        flow_limits: FlowLimits,
        *,
        start: DispatchResult | None = None,
        movement: Movement | None = None,
    ) -> DispatchResult:
        """Solve one interval, with a price on moving away from a given dispatch if asked for.

        The objective of the result leaves the cost of movement out.
        """
        began = time.perf_counter()
        if not np.array_equal(inputs.branch_in_service, self._branch_in_service):
            raise SolveError(
                f"interval {inputs.start} has other branches in service than this dispatch was built for: build one "
                "dispatch per topology"
            )
        program = self._program(inputs, flow_limits, movement is not None)
        vectors = interval_vectors(program, inputs, flow_limits, self._options, movement)
        impossible = self._impossible(program, inputs, vectors)
        if impossible:
            return self._without_solution(inputs, SolveStatus.INFEASIBLE, impossible, 0.0, began, ())
        given = start if start is not None and start.status.has_solution else None
        best: tuple[SolveStatus, str, AcSolution] | None = None
        notes: list[str] = []
        seconds, infeasible = 0.0, 0
        status, words = SolveStatus.FAILED, ""
        for attempt in LADDER:
            if attempt.from_start and given is None:
                continue
            x = (
                start_from(program, vectors, inputs, given)
                if attempt.from_start and given is not None
                else flat_start(program, vectors)
            )
            status, words, solution, spent = _run(program, vectors, inputs, x, attempt)
            seconds += spent
            if solution is not None:
                best = status, words, solution
            if status is SolveStatus.LOCALLY_OPTIMAL:
                if notes:
                    notes.append(f"solved from {attempt.name}")
                break
            notes.append(f"from {attempt.name}: {words}")
            infeasible += status is SolveStatus.INFEASIBLE
            if infeasible == _INFEASIBLE_TWICE:
                break
        if best is None:
            return self._without_solution(inputs, status, words, seconds, began, tuple(notes))
        status, words, solution = best
        return self._result(program, vectors, inputs, flow_limits, status, words, solution, seconds, began, notes)

    def _impossible(self, program: AcProgram, inputs: IntervalInputs, vectors: AcVectors) -> str:
        """Return what rules out any dispatch before a solver sees it, in words; empty if nothing does."""
        dead = program.layout.live.dead()
        stranded = dead[inputs.load_p[dead] != 0.0]
        if stranded.size and self._options.penalties.power_balance is None:
            return f"no resource in service is connected to the load at {bus_list(self._network, stranded)}"
        if program.layout.live.n_bus == 0:
            return "no resource is in service anywhere"
        return "a lower limit lies above its upper limit" if vectors.contradictions() else ""

    def _program(self, inputs: IntervalInputs, flow_limits: FlowLimits, movement: bool) -> AcProgram:
        shape = AcShape(
            live=live_buses(self._network, self._island, inputs),
            branch_in_service=self._branch_in_service,
            segment_resource=inputs.segments.resource,
            bid_bus=inputs.bids.bus,
            flow_weights=flow_limits.weights,
            movement=movement,
        )
        key = shape.key
        if key in self._programs:
            self._programs.move_to_end(key)
        else:
            self._programs[key] = AcProgram(self._network, shape, self._options)
            while len(self._programs) > _PROGRAMS_KEPT:
                self._programs.popitem(last=False)
        return self._programs[key]

    def _without_solution(
        self,
        inputs: IntervalInputs,
        status: SolveStatus,
        words: str,
        seconds: float,
        began: float,
        notes: tuple[str, ...],
    ) -> DispatchResult:
        result = no_solution(
            self._network,
            formulation=self.name,
            status=status,
            message=f"interval {inputs.start}: {words}",
            solver=SOLVER,
            solver_seconds=seconds,
            total_seconds=time.perf_counter() - began,
            n_bid=inputs.bids.bus.size,
        )
        return replace(result, notes=notes)

    def _result(
        self,
        program: AcProgram,
        vectors: AcVectors,
        inputs: IntervalInputs,
        flow_limits: FlowLimits,
        status: SolveStatus,
        words: str,
        solution: AcSolution,
        seconds: float,
        began: float,
        notes: list[str],
    ) -> DispatchResult:
        network, live, options = self._network, program.layout.live, self._options
        base, penalties, dead = network.base_mva, options.penalties, live.dead()
        x, at = solution.x, program.layout.variables
        derivatives = AcDerivatives.at(program, vectors, solution)
        point = point_of(program, x)
        cost = resource_cost(program, inputs, x)
        unserved, surplus = np.zeros(network.n_bus), np.zeros(network.n_bus)
        objective = float(np.sum(cost) - base * (inputs.bids.price @ x[at["bid"]]))
        if penalties.power_balance is not None:
            unserved[live.bus], surplus[live.bus] = x[at["unserved"]], x[at["surplus"]]
            unserved[dead], surplus[dead] = np.maximum(inputs.load_p[dead], 0.0), np.maximum(-inputs.load_p[dead], 0.0)
            objective += penalties.power_balance * base * float(np.sum(unserved + surplus))
        if penalties.transmission is not None:
            excess = float(np.sum(x[at["excess"]]) + np.sum(x[at["flow_excess"]]))
            objective += penalties.transmission * base * excess
        if dead.size:
            notes = [*notes, f"no price at {bus_list(network, dead)}: no resource in service is connected"]
        return DispatchResult(
            formulation=self.name,
            status=status,
            message=words,
            solver=SOLVER,
            solver_seconds=seconds,
            total_seconds=time.perf_counter() - began,
            objective=objective,
            p=outputs_of(program, inputs, x),
            q=x[at["q"]].copy(),
            resource_cost=cost,
            bid_served=x[at["bid"]].copy(),
            unserved=unserved,
            surplus=surplus,
            point=point,
            multipliers=balance_multipliers(program, solution),
            constraints=ac_constraints(program, vectors, inputs, flow_limits, solution, point, options),
            residuals=residuals(program, vectors, solution, derivatives),
            stationarity=(
                stationarity_system(program, vectors, solution, derivatives, options)
                if options.keep_stationarity
                else None
            ),
            notes=tuple(notes),
        )


def _run(
    program: AcProgram, vectors: AcVectors, inputs: IntervalInputs, x: FloatArray, attempt: Attempt
) -> tuple[SolveStatus, str, AcSolution | None, float]:
    """Return the status, the solver's words, the solution where there is one, and the solver's seconds."""
    seconds = 0.0
    for widened in (1.0, _WIDENED):
        bounds = working_bounds(program, vectors, inputs, widened)
        status, words, solution, spent = _call(program, vectors, bounds, x, attempt)
        seconds += spent
        if solution is None or not _held_by_working_bounds(vectors, bounds, solution.x):
            break
    return status, words, solution, seconds


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
