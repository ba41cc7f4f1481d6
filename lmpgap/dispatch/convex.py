"""The frame of the convex formulations: build once per topology, fill and solve per interval, read back."""

from __future__ import annotations

import time
from abc import ABC, abstractmethod
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from scipy import sparse

from lmpgap.dispatch.conic import ConicProgram, ConicSolution, residuals, stationarity_system
from lmpgap.dispatch.limits import FlowLimits
from lmpgap.dispatch.live import LiveNetwork, bus_list, live_buses, live_network
from lmpgap.dispatch.options import DispatchOptions
from lmpgap.dispatch.program_builder import Affine, ProgramBuilder, ProgramTemplate
from lmpgap.dispatch.program_solver import solve_program
from lmpgap.dispatch.result import (
    BalanceMultipliers,
    ConstraintRows,
    DispatchResult,
    OperatingPoint,
    SolveStatus,
    no_solution,
)
from lmpgap.dispatch.supply import SupplyResult, pattern_key, read_supply, with_flow_limits
from lmpgap.errors import LmpgapError
from lmpgap.scenario.network import BoolArray, FloatArray, IntArray, IntervalInputs, Network


@dataclass(frozen=True, kw_only=True)
class ConvexModel:
    """Matrices of one topology, pattern of offers and set of flow limits.

    Attributes
    ----------
    p_from
        Coefficients (n_live_branch, n_var) and constants (n_live_branch,) of the active flows at the from ends.
    readout : sparse (n_row, n_var)
        Coefficients of all quantities to read back from a solution, one below the other.
    readout_constant : (n_row,)
    readout_rows
        Slice of each named quantity.
    """

    live: LiveNetwork
    template: ProgramTemplate
    p_from: tuple[sparse.csr_array, FloatArray]
    readout: sparse.csr_array
    readout_constant: FloatArray
    readout_rows: dict[str, slice]

    def read(self, x: FloatArray) -> dict[str, FloatArray]:
        """Return the named quantities at a solution."""
        # Variables of flow limits come last and have no part in them.
        values = self.readout @ x[: self.readout.shape[1]] + self.readout_constant
        return {name: values[rows] for name, rows in self.readout_rows.items()}


def convex_model(
    live: LiveNetwork, builder: ProgramBuilder, p_from: Affine, quantities: dict[str, Affine]
) -> ConvexModel:
    """Return the finished program without flow limits, and how to read the named quantities from its solution."""
    readout, constant, rows = builder.readout(quantities)
    flows, flows_constant, _ = builder.readout({"p_from": p_from})
    return ConvexModel(
        live=live,
        template=builder.build(),
        p_from=(flows, flows_constant),
        readout=readout,
        readout_constant=constant,
        readout_rows=rows,
    )


@dataclass(frozen=True, kw_only=True)
class Reading:
    """What a formulation reads from a solution besides the market side."""

    point: OperatingPoint
    q: np.ndarray
    multipliers: BalanceMultipliers
    constraints: ConstraintRows
    fictitious_loss: float = 0.0
    changes: dict[str, Any] | None = None


class ConvexDispatch(ABC):
    """A convex formulation of the dispatch, see `lmpgap.dispatch.formulation.Formulation`.

    A result depends on the interval alone: nothing is carried from one solve to the next but matrices.
    """

    name: str

    def __init__(self, network: Network, branch_in_service: BoolArray, options: DispatchOptions) -> None:
        self.network = network
        self.branch_in_service = branch_in_service.copy()
        self.options = options
        self._island: IntArray = network.islands(branch_in_service)
        self._plain: tuple[tuple[bytes, ...], ConvexModel] | None = None
        self._limited: tuple[tuple[bytes, ...], ConvexModel] | None = None

    def solve(
        self, inputs: IntervalInputs, flow_limits: FlowLimits, start: DispatchResult | None = None
    ) -> DispatchResult:
        """Solve one interval; ``start`` is ignored."""
        began = time.perf_counter()
        model = self._model_for(inputs, flow_limits)
        stranded = model.live.dead()[inputs.load_p[model.live.dead()] != 0.0]
        if stranded.size and self.options.penalties.power_balance is None:
            return no_solution(
                self.network,
                formulation=self.name,
                status=SolveStatus.INFEASIBLE,
                message=f"no resource in service is connected to the load at {bus_list(self.network, stranded)}",
                solver="",
                solver_seconds=0.0,
                total_seconds=time.perf_counter() - began,
                n_bid=inputs.bids.bus.size,
            )
        program = self._fill(model, inputs, flow_limits)
        solution, notes = solve_program(program, self.options.tolerances)
        if not solution.status.has_solution:
            return no_solution(
                self.network,
                formulation=self.name,
                status=solution.status,
                message=solution.message,
                solver=solution.solver,
                solver_seconds=solution.seconds,
                total_seconds=time.perf_counter() - began,
                n_bid=inputs.bids.bus.size,
            )
        return self._result(model, program, solution, inputs, flow_limits, notes, began)

    def program(self, inputs: IntervalInputs, flow_limits: FlowLimits) -> tuple[ConvexModel, ConicProgram]:
        """Return the model and the filled program of one interval, as they are solved."""
        model = self._model_for(inputs, flow_limits)
        return model, self._fill(model, inputs, flow_limits)

    @abstractmethod
    def _build(self, live: LiveNetwork, inputs: IntervalInputs) -> ConvexModel:
        """Return the matrices for a live network and a pattern of offers, without flow limits."""

    @abstractmethod
    def _fill(self, model: ConvexModel, inputs: IntervalInputs, flow_limits: FlowLimits) -> ConicProgram:
        """Return the program of one interval."""

    @abstractmethod
    def _read(
        self,
        model: ConvexModel,
        program: ConicProgram,
        solution: ConicSolution,
        inputs: IntervalInputs,
        flow_limits: FlowLimits,
    ) -> Reading:
        """Return operating point, multipliers and constraint rows of a solution."""

    def _objective(self, program: ConicProgram, solution: ConicSolution, supply: SupplyResult) -> float:
        """Return the cost of a solution [$/h]."""
        return program.cost(solution.x)

    def _model_for(self, inputs: IntervalInputs, flow_limits: FlowLimits) -> ConvexModel:
        """Return the matrices, built anew only where their pattern changed."""
        if not np.array_equal(inputs.branch_in_service, self.branch_in_service):
            raise LmpgapError(
                f"interval {inputs.start}: its branches in service differ from the topology this {self.name} "
                "dispatch was built for; build one formulation per topology"
            )
        bus_live = live_buses(self.network, self._island, inputs)
        key = (bus_live.tobytes(), *pattern_key(inputs))
        if self._plain is None or key != self._plain[0]:
            live = live_network(self.network, self.branch_in_service, self._island, bus_live)
            self._plain, self._limited = (key, self._build(live, inputs)), None
        plain = self._plain[1]
        weights = flow_limits.weights
        pattern = (weights.indptr.tobytes(), weights.indices.tobytes(), weights.data.tobytes())
        if self._limited is None or pattern != self._limited[0]:
            template = with_flow_limits(plain.template, plain.live, flow_limits, plain.p_from, self.options.penalties)
            self._limited = pattern, replace(plain, template=template)
        return self._limited[1]

    def _result(
        self,
        model: ConvexModel,
        program: ConicProgram,
        solution: ConicSolution,
        inputs: IntervalInputs,
        flow_limits: FlowLimits,
        notes: tuple[str, ...],
        began: float,
    ) -> DispatchResult:
        live, template, options = model.live, model.template, self.options
        supply = read_supply(template, live, inputs, solution.x)
        reading = self._read(model, program, solution, inputs, flow_limits)
        stationarity = None
        if options.keep_stationarity:
            rows = template.equalities["balance"].start + live.bus_position
            stationarity = stationarity_system(
                program,
                solution,
                np.where(live.bus_position >= 0, rows, -1),
                options.tolerances,
                self.network.base_mva,
            )
        return DispatchResult(
            formulation=self.name,
            status=solution.status,
            message=solution.message,
            solver=solution.solver,
            solver_seconds=solution.seconds,
            objective=self._objective(program, solution, supply),
            p=supply.p,
            q=reading.q,
            resource_cost=supply.resource_cost,
            bid_served=supply.bid_served,
            unserved=supply.unserved,
            surplus=supply.surplus,
            point=reading.point,
            multipliers=reading.multipliers,
            constraints=reading.constraints,
            residuals=residuals(program, solution),
            fictitious_loss=reading.fictitious_loss,
            stationarity=stationarity,
            notes=(*notes, *_dead_note(self.network, live)),
            total_seconds=time.perf_counter() - began,
            **(reading.changes or {}),
        )


def _dead_note(network: Network, live: LiveNetwork) -> tuple[str, ...]:
    dead = live.dead()
    if dead.size == 0:
        return ()
    return (f"no price at {bus_list(network, dead)}: no resource in service is connected",)
