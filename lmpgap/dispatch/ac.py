"""The AC dispatch: least cost over the full nonlinear network, a local optimum found by an interior-point method.

Polar voltages, exact derivatives from casadi, Ipopt with MUMPS inside: "On the implementation of an interior-point
filter line-search algorithm for large-scale nonlinear programming", Mathematical Programming 106, 2006. The problem is
not convex: the answer is a point that satisfies the first-order conditions, called locally optimal, never optimal.
"""

from __future__ import annotations

import importlib.metadata
import time
from collections import OrderedDict
from dataclasses import replace

import numpy as np

from lmpgap.dispatch.ac_interval import AcVectors, Movement, flat_start, interval_vectors, start_from
from lmpgap.dispatch.ac_ladder import FAR_OVERLOAD, Attempt, Start, ladder, overload_at, run_attempt
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
from lmpgap.dispatch.dc_loss import DcLossDispatch
from lmpgap.dispatch.limits import FlowLimits
from lmpgap.dispatch.live import bus_list, live_buses
from lmpgap.dispatch.options import DispatchOptions
from lmpgap.dispatch.result import DispatchResult, SolveStatus, no_solution
from lmpgap.errors import SolveError
from lmpgap.scenario.network import BoolArray, FloatArray, IntervalInputs, Network

SOLVER = f"Ipopt with MUMPS (casadi {importlib.metadata.version('casadi')})"

_INFEASIBLE_TWICE = 2
"""Infeasible from this many starts counts as infeasible: the answer of one start says little, a third adds little."""

_PROGRAMS_KEPT = 4
"""Programs kept per topology: the plain one, and the latest sets of added flow limits."""


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
        first = None if given is None else start_from(program, vectors, inputs, given)
        far = first is not None and overload_at(program, vectors, first) > FAR_OVERLOAD
        if far:
            notes.append("the given start overloads a branch many times over")
        for attempt in ladder(given=first is not None, far=far):
            x, spent = self._start(program, vectors, inputs, flow_limits, attempt, first)
            seconds += spent
            if x is None:
                continue
            status, words, solution, spent = run_attempt(program, vectors, inputs, x, attempt, self._options.tolerances)
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

    def _start(
        self,
        program: AcProgram,
        vectors: AcVectors,
        inputs: IntervalInputs,
        flow_limits: FlowLimits,
        attempt: Attempt,
        first: FloatArray | None,
    ) -> tuple[FloatArray | None, float]:
        """Return the point an attempt starts from, if there is one, and the seconds of a solver it took."""
        if attempt.start is Start.GIVEN:
            return first, 0.0
        if attempt.start is Start.FLAT:
            return flat_start(program, vectors), 0.0
        linear = DcLossDispatch(
            self._network, self._branch_in_service, replace(self._options, keep_stationarity=False)
        ).solve(inputs, flow_limits)
        found = linear.status.has_solution
        return start_from(program, vectors, inputs, linear) if found else None, linear.solver_seconds

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
