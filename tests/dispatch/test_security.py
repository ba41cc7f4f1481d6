"""Security-constrained dispatch against a program that writes every post-outage network out in full."""

from dataclasses import replace

import numpy as np
import pytest
from scipy import sparse
from scipy.optimize import linprog

from lmpgap.dispatch.formulation import DispatchOptions, build_formulation
from lmpgap.dispatch.limits import FlowLimits
from lmpgap.dispatch.outage_factors import OutageFactors, linear_susceptance
from lmpgap.dispatch.result import DispatchResult, SolveStatus
from lmpgap.dispatch.security import solve_secure
from lmpgap.scenario.network import Contingencies, IntervalInputs, Network, OfferSegments
from lmpgap.scenario.settings import DcConvention, Penalties
from lmpgap.tolerances import DEFAULT_TOLERANCES


def random_network(seed: int, n_bus: int = 12, n_branch: int = 22) -> tuple[Network, IntervalInputs]:
    """A ring with chords, so that no single outage splits it; three offer steps per resource."""
    rng = np.random.default_rng(seed)
    ring = np.arange(n_bus)
    chords = np.array([rng.choice(n_bus, 2, replace=False) for _ in range(n_branch - n_bus)])
    from_bus = np.concatenate([ring, chords[:, 0]])
    to_bus = np.concatenate([np.roll(ring, -1), chords[:, 1]])
    x = rng.uniform(0.05, 0.2, n_branch)
    resource_bus = rng.choice(n_bus, 5, replace=False)
    network = Network(
        base_mva=100.0,
        buses=tuple(f"N{i}" for i in range(n_bus)),
        v_min=np.full(n_bus, 0.9),
        v_max=np.full(n_bus, 1.1),
        shunt_g=np.zeros(n_bus),
        shunt_b=np.zeros(n_bus),
        branches=tuple(f"W{i}" for i in range(n_branch)),
        from_bus=from_bus,
        to_bus=to_bus,
        r=0.1 * x,
        x=x,
        charging=np.full(n_branch, 0.02),
        tap=np.ones(n_branch),
        shift=np.zeros(n_branch),
        normal_rating=np.full(n_branch, 1.6),
        emergency_rating=np.full(n_branch, 0.82),
        angle_min=np.full(n_branch, -np.inf),
        angle_max=np.full(n_branch, np.inf),
        resources=tuple(f"G{i}" for i in range(5)),
        resource_bus=resource_bus,
        q_min=np.full(5, -3.0),
        q_max=np.full(5, 3.0),
        contingencies=Contingencies(
            names=(*(f"loss of W{k}" for k in range(n_branch)), "loss of W0 and W13"),
            branches=(*(np.array([k]) for k in range(n_branch)), np.array([0, 13])),
            monitored=np.ones(n_branch, dtype=bool),
        ),
    )
    load = rng.uniform(0.2, 0.8, n_bus)
    segment_owner = np.repeat(np.arange(5), 3)
    price = np.sort(rng.uniform(10.0, 60.0, (5, 3)), axis=1).ravel()
    inputs = IntervalInputs(
        start="2026-01-01T00:00:00+00:00",
        load_p=load,
        load_q=0.2 * load,
        branch_in_service=np.ones(n_branch, dtype=bool),
        resource_in_service=np.ones(5, dtype=bool),
        p_min=np.zeros(5),
        p_max=np.full(5, 3.0),
        segments=OfferSegments(resource=segment_owner, width=np.ones(15), price_start=price, price_end=price),
        fixed_cost=np.zeros(5),
    )
    return network, inputs


def explicit_cost(network: Network, inputs: IntervalInputs) -> float:
    """Cost of the lossless dispatch with the angles of every post-outage network as variables [$/h]."""
    contingencies = network.contingencies
    assert contingencies is not None
    states = [np.zeros(0, np.int64), *contingencies.branches]
    n_bus, n_segment = network.n_bus, inputs.segments.resource.size
    at_bus = sparse.csr_array(
        (np.ones(n_segment), (network.resource_bus[inputs.segments.resource], np.arange(n_segment))),
        shape=(n_bus, n_segment),
    )
    incidence = network.from_incidence() - network.to_incidence()
    balances, rights, limits, limit_rights = [], [], [], []
    for k, out in enumerate(states):
        on = inputs.branch_in_service.copy()
        on[out] = False
        flow = sparse.diags_array(linear_susceptance(network, on, DcConvention())) @ incidence
        blocks = [sparse.csr_array((n_bus, n_bus)) for _ in states]
        blocks[k] = -(incidence.T @ flow)
        balances.append(sparse.hstack([at_bus, *blocks]))
        rights.append(inputs.load_p)
        rating = network.normal_rating if k == 0 else network.emergency_rating
        for sign in (1.0, -1.0):
            rows = [sparse.csr_array((network.n_branch, n_bus)) for _ in states]
            rows[k] = sign * flow
            limits.append(sparse.hstack([sparse.csr_array((network.n_branch, n_segment)), *rows]))
            limit_rights.append(rating)
    solution = linprog(
        np.concatenate([100.0 * inputs.segments.price_start, np.zeros(len(states) * n_bus)]),
        A_ub=sparse.vstack(limits),
        b_ub=np.concatenate(limit_rights),
        A_eq=sparse.vstack(balances),
        b_eq=np.concatenate(rights),
        bounds=[(0.0, w) for w in inputs.segments.width] + [(None, None)] * (len(states) * n_bus),
        method="highs",
    )
    assert solution.status == 0, solution.message
    return float(solution.fun)


def secure(
    network: Network, inputs: IntervalInputs, name: str, penalties: Penalties | None = None
) -> tuple[DispatchResult, FlowLimits]:
    options = DispatchOptions(penalties=penalties or Penalties())
    formulation = build_formulation(name, network, inputs.branch_in_service, options)
    outages = OutageFactors(network, inputs.branch_in_service, options.dc)
    start = secure(network, inputs, "soc", penalties)[0] if name == "ac" else None
    return solve_secure(formulation, inputs, FlowLimits.none(network.n_branch), outages, DEFAULT_TOLERANCES, start)


@pytest.mark.parametrize("seed", [2, 3, 6, 8])
def test_cost_equals_the_explicit_formulation(seed: int) -> None:
    network, inputs = random_network(seed)
    result, limits = secure(network, inputs, "dc")
    assert result.status is SolveStatus.OPTIMAL
    assert limits.n_row > 0, "the case must need security constraints"
    assert result.objective == pytest.approx(explicit_cost(network, inputs), rel=1e-9)


@pytest.mark.parametrize("name", ["dc", "dc-loss", "soc", "ac"])
def test_no_pair_is_violated_at_the_solution(name: str) -> None:
    network, inputs = random_network(7)
    result, _ = secure(network, inputs, name)
    assert result.status.has_solution
    outages = OutageFactors(network, inputs.branch_in_service, DcConvention())
    assert outages.screen(result.point.p_from, 2e-5).n_pair == 0
    binding = [k for k in range(result.constraints.n_row) if result.constraints.kind[k] == "contingency"]
    assert result.constraints.multiplier[binding].max() > 1.0
    assert any("pairs enforced" in note for note in result.notes)


def test_security_costs_and_only_costs() -> None:
    network, inputs = random_network(3)
    free = build_formulation("dc", network, inputs.branch_in_service, DispatchOptions())
    without = free.solve(inputs, FlowLimits.none(network.n_branch))
    assert secure(network, inputs, "dc")[0].objective > without.objective + 1.0


def test_a_soft_pair_stops_at_the_penalty() -> None:
    network, inputs = random_network(2)
    network = replace(network, emergency_rating=0.25 * network.emergency_rating)
    hard, _ = secure(network, inputs, "dc")
    assert hard.status is SolveStatus.INFEASIBLE
    soft, _ = secure(network, inputs, "dc", Penalties(transmission=500.0))
    assert soft.status is SolveStatus.OPTIMAL
    shadow_price = soft.constraints.multiplier / network.base_mva
    at_penalty = soft.constraints.at_penalty
    assert at_penalty.any()
    assert shadow_price[at_penalty] == pytest.approx(500.0, rel=1e-6)
    assert shadow_price.max() <= 500.0 * (1 + 1e-9)
