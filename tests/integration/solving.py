"""Solve a scenario's intervals in memory, and solve them again with something changed."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from lmpgap.dispatch.names import FORMULATIONS
from lmpgap.runs.fingerprint import fingerprint
from lmpgap.runs.interval import solve_interval
from lmpgap.runs.plan import Plan, PlannedInterval, RunSettings
from lmpgap.runs.rows import SolvedInterval
from lmpgap.scenario.scenario import Scenario


@dataclass(frozen=True)
class Solver:
    """The way a run solves, without a run folder."""

    scenario: Scenario
    settings: RunSettings
    plan: Plan
    network_key: str

    @staticmethod
    def of(scenario: Scenario, formulations: tuple[str, ...] = FORMULATIONS) -> Solver:
        """Return a solver of the scenario's own settings; the AC audit of linear dispatches is not looked at here."""
        settings = RunSettings.of(scenario, audit=False, reactive_sources=None)
        plan = Plan(scenario, formulations, settings)
        return Solver(scenario, settings, plan, fingerprint(scenario.network))

    def interval(self, position: int) -> PlannedInterval:
        """Return an interval to solve."""
        return self.plan.interval(position)

    def solve(self, planned: PlannedInterval) -> dict[str, SolvedInterval]:
        """Return the interval solved, by formulation."""
        network, hours = self.scenario.network, self.scenario.settings.hours
        solved = solve_interval(network, planned, self.settings, hours, self.network_key)
        return {item.formulation: item for item in solved}

    def one(self, planned: PlannedInterval, formulation: str) -> SolvedInterval:
        """Return the interval solved under one formulation."""
        only = replace(planned, keys={formulation: planned.keys[formulation]})
        return self.solve(only)[formulation]


def more_load(planned: PlannedInterval, bus: int, amount: float) -> PlannedInterval:
    """Return the interval with ``amount`` more active load at a bus [pu]."""
    load = planned.inputs.load_p.copy()
    load[bus] += amount
    return replace(planned, inputs=replace(planned.inputs, load_p=load))


def live_buses(item: SolvedInterval) -> np.ndarray:
    """Return the positions of the buses that have a price."""
    assert item.split is not None
    return np.flatnonzero(np.isfinite(item.split.lmp))
