"""Solve, price and certify intervals; this is what a worker process runs."""

from __future__ import annotations

from collections import OrderedDict
from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace

import numpy as np
import pyarrow as pa
from threadpoolctl import threadpool_limits

from lmpgap.dispatch.ac_check import ac_check
from lmpgap.dispatch.diagnosis import diagnose
from lmpgap.dispatch.formulation import Formulation, build_formulation
from lmpgap.dispatch.frozen import DeliveryFactorDispatch, FrozenLossDispatch
from lmpgap.dispatch.limits import FlowLimits, interface_limits
from lmpgap.dispatch.options import DispatchOptions
from lmpgap.dispatch.outage_factors import OutageFactors
from lmpgap.dispatch.result import DispatchResult, SolveStatus
from lmpgap.dispatch.security import solve_secure
from lmpgap.prices.certificate import certify
from lmpgap.prices.components import PriceSplit, constraints_of, split_prices
from lmpgap.prices.money import money_balance
from lmpgap.prices.uniqueness import price_intervals
from lmpgap.runs.audit import AUDITED, AuditRow, audit_rows
from lmpgap.runs.fingerprint import fingerprint
from lmpgap.runs.given_losses import GivenLosses
from lmpgap.runs.plan import PlannedInterval, RunSettings
from lmpgap.runs.rows import SolvedInterval, chunk_tables
from lmpgap.scenario.network import BoolArray, FloatArray, IntArray, IntervalInputs, Network

_TOPOLOGIES_KEPT = 8
_workspaces: OrderedDict[str, Workspace] = OrderedDict()


@dataclass
class Workspace:
    """What is built once per topology and used for every interval with it."""

    network: Network
    branch_in_service: BoolArray
    island: IntArray
    options: DispatchOptions
    outages: OutageFactors | None
    formulations: dict[str, Formulation]

    def formulation(self, name: str) -> Formulation:
        """Return a formulation, built on first use."""
        if name not in self.formulations:
            self.formulations[name] = build_formulation(name, self.network, self.branch_in_service, self.options)
        return self.formulations[name]


def workspace(network: Network, inputs: IntervalInputs, settings: RunSettings, network_key: str) -> Workspace:
    """Return the workspace of an interval's topology, kept for the next interval of this process."""
    key = fingerprint(network_key, inputs.branch_in_service, settings.as_dict())
    if key in _workspaces:
        _workspaces.move_to_end(key)
        return _workspaces[key]
    made = Workspace(
        network=network,
        branch_in_service=inputs.branch_in_service,
        island=network.islands(inputs.branch_in_service),
        options=DispatchOptions(
            dc=settings.dc,
            penalties=settings.penalties,
            keep_stationarity=settings.uniqueness,
            tolerances=settings.tolerances,
        ),
        outages=None
        if network.contingencies is None
        else OutageFactors(network, inputs.branch_in_service, settings.dc),
        formulations={},
    )
    _workspaces[key] = made
    while len(_workspaces) > _TOPOLOGIES_KEPT:
        _workspaces.popitem(last=False)
    return made


def solve_interval(
    network: Network, planned: PlannedInterval, settings: RunSettings, hours: float, network_key: str
) -> list[SolvedInterval]:
    """Solve one interval under its formulations and return each with prices and certificate.

    The AC dispatch starts from the cone solution of the same interval, which is therefore solved even when it was
    not asked for: the AC result must not depend on which other formulations are in the run.
    """
    space = workspace(network, planned.inputs, settings, network_key)
    results: dict[str, tuple[DispatchResult, FlowLimits]] = {}
    for name in planned.keys:
        if name == "ac" and "soc" not in results:
            results["soc"] = solve_planned(space, "soc", planned, None)
        start = results["soc"][0] if name == "ac" else None
        results[name] = solve_planned(space, name, planned, start)
    ac = results["ac"][0] if "ac" in results else None
    solved = [
        _priced(space, planned, name, *results[name], ac=ac, settings=settings, hours=hours) for name in planned.keys
    ]
    if not settings.audit:
        return solved
    return [
        replace(item, audit=_audited(space, planned, results, settings)) if item.formulation == "ac" else item
        for item in solved
    ]


def _audited(
    space: Workspace,
    planned: PlannedInterval,
    results: dict[str, tuple[DispatchResult, FlowLimits]],
    settings: RunSettings,
) -> tuple[tuple[str, AuditRow], ...]:
    """Return the audit of the linear dispatches, which are solved for it where they are not in the run."""
    optimum, limits = results["ac"]
    rows: list[tuple[str, AuditRow]] = []
    for name in AUDITED:
        linear = (results[name] if name in results else solve_planned(space, name, planned, None))[0]
        if not (linear.status.has_solution and optimum.status.has_solution):
            continue
        repairer = space.formulation("ac") if name in settings.repaired else None
        found = audit_rows(space.network, planned.inputs, linear, limits, optimum, repairer)
        rows += [(name, row) for row in found]
    return tuple(rows)


def solve_planned(
    space: Workspace, name: str, planned: PlannedInterval, start: DispatchResult | None = None
) -> tuple[DispatchResult, FlowLimits]:
    """Solve one interval under one formulation, contingencies included; return the limits it was solved with."""
    inputs = planned.inputs
    limits = interface_limits(space.network, inputs)
    given = planned.given if name == "dc-loss" else None
    formulation = space.formulation(name) if given is None else _with_given_losses(space, given, planned.weights)
    if space.outages is None:
        result = formulation.solve(inputs, limits, start)
    else:
        result, limits = solve_secure(formulation, inputs, limits, space.outages, space.options.tolerances, start)
    if result.status is SolveStatus.INFEASIBLE:
        found = diagnose(name, space.network, inputs, limits, space.options)
        result = replace(result, message=f"{result.message}: {found.sentence}")
    return result, limits


def _with_given_losses(space: Workspace, given: GivenLosses, weights: FloatArray) -> Formulation:
    """Return `dc-loss` with losses frozen at a base dispatch, with given delivery factors, or at given voltages."""
    network, on = space.network, space.branch_in_service
    options = replace(space.options, voltage_profile=given.voltage)
    if given.delivery_factor is not None:
        return DeliveryFactorDispatch(
            network, on, options, delivery_factor=given.delivery_factor, loss_distribution=weights
        )
    if given.angle is None:
        return build_formulation("dc-loss", network, on, options)
    proximal = options.tolerances.proximal_at_base if given.same_interval else options.tolerances.proximal_away
    return FrozenLossDispatch(network, on, options, given.base(network), proximal=proximal)


def _priced(
    space: Workspace,
    planned: PlannedInterval,
    name: str,
    result: DispatchResult,
    limits: FlowLimits,
    *,
    ac: DispatchResult | None,
    settings: RunSettings,
    hours: float,
) -> SolvedInterval:
    network, inputs, tolerances = space.network, planned.inputs, settings.tolerances
    keyed = constraints_of(result)
    split: PriceSplit | None = None
    low: FloatArray | None = None
    high: FloatArray | None = None
    money: tuple[tuple[str, str, float], ...] = ()
    if result.status.has_solution:
        split = split_prices(
            network,
            inputs.branch_in_service,
            result,
            planned.weights,
            tolerances,
            reactive_sources=settings.reactive_sources,
            island=space.island,
            keyed=keyed,
        )
        low = high = split.lmp
        if result.stationarity is not None:
            found = price_intervals(result.stationarity, network.base_mva, tolerances)
            # The interval contains the price that is reported, whatever the tolerance of the search.
            low, high = np.fmin(found.low, split.lmp), np.fmax(found.high, split.lmp)
        money = tuple(money_balance(network, inputs, result, split, hours=hours).rows())
    check = ac_check(network, inputs, result, limits) if result.relaxed and result.status.has_solution else None
    # Only a relaxation is judged by the AC cost: other solves do not depend on whether `ac` is in the run.
    certificate = certify(
        network, inputs, result, split, ac=ac if result.relaxed else None, check=check, tolerances=tolerances
    )
    return SolvedInterval(
        start=planned.start,
        formulation=name,
        inputs=inputs,
        result=result,
        constraints=keyed,
        split=split,
        price_low=low,
        price_high=high,
        certificate=certificate,
        money=money,
        power_balance_penalty=settings.penalties.power_balance or 0.0,
    )


def solve_chunk(
    network: Network,
    planned: Sequence[PlannedInterval],
    settings: RunSettings,
    hours: float,
    network_key: str,
    finished: Callable[[int], None] | None = None,
) -> dict[str, pa.Table]:
    """Solve a chunk of intervals and return its tables.

    One thread per process: with several, the sums of a factorisation depend on how many there are, and results
    would not be bit-identical for any number of workers.
    """
    solved: list[SolvedInterval] = []
    with threadpool_limits(limits=1):
        for count, interval in enumerate(planned, start=1):
            solved += solve_interval(network, interval, settings, hours, network_key)
            if finished is not None:
                finished(count)
    return chunk_tables(network, solved)
