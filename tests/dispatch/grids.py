"""Build small grids in a line or two, and solve them."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import replace

import numpy as np

from lmpgap.dispatch.formulation import build_formulation
from lmpgap.dispatch.limits import FlowLimits
from lmpgap.dispatch.options import DispatchOptions
from lmpgap.dispatch.result import DispatchResult
from lmpgap.scenario.network import FloatArray, IntervalInputs, Network, OfferSegments

Line = tuple[str, str, float, float, float]  # from, to, r [pu], x [pu], rating [MVA]
Unit = tuple[str, float, float]  # bus, capacity [MW], price [$/MWh]


def grid(
    lines: Sequence[Line],
    units: Sequence[Unit],
    loads: Mapping[str, float],
    *,
    base: float = 100.0,
    q_mvar: float = np.inf,
    v: tuple[float, float] = (1.0, 1.0),
) -> tuple[Network, IntervalInputs]:
    """Return a grid with one offer step per unit; buses in order of first mention by lines, units, loads."""
    mentioned = [bus for line in lines for bus in line[:2]] + [unit[0] for unit in units] + list(loads)
    buses = tuple(dict.fromkeys(mentioned))
    at = {bus: i for i, bus in enumerate(buses)}
    n_line, n_unit = len(lines), len(units)
    network = Network(
        base_mva=base,
        buses=buses,
        v_min=np.full(len(buses), v[0]),
        v_max=np.full(len(buses), v[1]),
        shunt_g=np.zeros(len(buses)),
        shunt_b=np.zeros(len(buses)),
        branches=tuple(f"L{k + 1}" for k in range(n_line)),
        from_bus=np.array([at[line[0]] for line in lines], dtype=np.int64),
        to_bus=np.array([at[line[1]] for line in lines], dtype=np.int64),
        r=np.array([line[2] for line in lines]),
        x=np.array([line[3] for line in lines]),
        charging=np.zeros(n_line),
        tap=np.ones(n_line),
        shift=np.zeros(n_line),
        normal_rating=np.array([line[4] / base for line in lines]),
        emergency_rating=np.full(n_line, np.inf),
        angle_min=np.full(n_line, -np.inf),
        angle_max=np.full(n_line, np.inf),
        resources=tuple(f"G{k + 1}" for k in range(n_unit)),
        resource_bus=np.array([at[unit[0]] for unit in units], dtype=np.int64),
        q_min=np.full(n_unit, -q_mvar / base),
        q_max=np.full(n_unit, q_mvar / base),
    )
    capacity = np.array([unit[1] / base for unit in units])
    price = np.array([unit[2] for unit in units], dtype=float)
    load = np.zeros(len(buses))
    for bus, mw in loads.items():
        load[at[bus]] += mw / base
    inputs = IntervalInputs(
        start="2026-01-01T00:00:00+00:00",
        load_p=load,
        load_q=np.zeros(len(buses)),
        branch_in_service=np.ones(n_line, dtype=bool),
        resource_in_service=np.ones(n_unit, dtype=bool),
        p_min=np.zeros(n_unit),
        p_max=capacity,
        segments=OfferSegments(
            resource=np.arange(n_unit, dtype=np.int64), width=capacity, price_start=price, price_end=price
        ),
        fixed_cost=np.zeros(n_unit),
    )
    return network, inputs


def solve(
    name: str,
    network: Network,
    inputs: IntervalInputs,
    options: DispatchOptions | None = None,
    flow_limits: FlowLimits | None = None,
) -> DispatchResult:
    """Solve one interval under one formulation."""
    formulation = build_formulation(
        name, network, inputs.branch_in_service, DispatchOptions() if options is None else options
    )
    return formulation.solve(inputs, FlowLimits.none(network.n_branch) if flow_limits is None else flow_limits)


def prices(network: Network, result: DispatchResult) -> FloatArray:
    """Return the multipliers of the active balances [$/MWh], (n_bus,)."""
    return result.multipliers.active / network.base_mva


def add_load(network: Network, inputs: IntervalInputs, bus: int, mw: float) -> IntervalInputs:
    """Return the interval with more load at one bus."""
    load = inputs.load_p.copy()
    load[bus] += mw / network.base_mva
    return replace(inputs, load_p=load)


def finite_difference_price(
    name: str,
    network: Network,
    inputs: IntervalInputs,
    bus: int,
    step_mw: float = 0.1,
    options: DispatchOptions | None = None,
) -> float:
    """Return the central difference of cost in load at one bus [$/MWh]."""
    high, low = (
        solve(name, network, add_load(network, inputs, bus, sign * step_mw), options).objective for sign in (1.0, -1.0)
    )
    return (high - low) / (2.0 * step_mw)


def five_bus_growth(total_mw: float) -> tuple[Network, IntervalInputs]:
    """Return the five-bus network whose prices step with load.

    "DCOPF-Based LMP Simulation: Algorithm, Comparison With ACOPF, and Sensitivity", IEEE Transactions on Power
    Systems 22(4), 2007, with data of "Small Test Systems for Power System Economic Studies", IEEE PES General
    Meeting, 2010; load in equal thirds at B, C and D. Two limits: A-B 400 MW and D-E 240 MW.
    """
    free = np.inf
    return grid(
        [
            ("A", "B", 0.0, 0.0281, 400.0),
            ("A", "D", 0.0, 0.0304, free),
            ("A", "E", 0.0, 0.0064, free),
            ("B", "C", 0.0, 0.0108, free),
            ("C", "D", 0.0, 0.0297, free),
            ("D", "E", 0.0, 0.0297, 240.0),
        ],
        [("A", 40.0, 14.0), ("A", 170.0, 15.0), ("C", 520.0, 30.0), ("D", 200.0, 35.0), ("E", 600.0, 10.0)],
        {"B": total_mw / 3, "C": total_mw / 3, "D": total_mw / 3},
    )
