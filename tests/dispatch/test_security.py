"""Security-constrained dispatch against a program that writes every post-outage network out in full."""

from dataclasses import replace

import cvxpy as cp
import numpy as np
import pytest
from scipy import sparse

from lmpgap.dispatch.formulation import build_formulation
from lmpgap.dispatch.limits import FlowLimits
from lmpgap.dispatch.options import DispatchOptions
from lmpgap.dispatch.outage_factors import OutageFactors, linear_susceptance
from lmpgap.dispatch.result import DispatchResult, SolveStatus
from lmpgap.dispatch.security import solve_secure
from lmpgap.scenario.network import Contingencies, IntervalInputs, Network, OfferSegments
from lmpgap.scenario.settings import DcConvention, Penalties
from lmpgap.tolerances import DEFAULT_TOLERANCES
from tests.support.networks import load_network


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


def explicit_cost(network: Network, inputs: IntervalInputs, splitting: tuple[str, ...] = ()) -> float:
    """Cost of the lossless dispatch with the angles of every post-outage network as variables [$/h].

    Written with cvxpy, which the dispatch itself does not use, and without any outage factor.
    """
    contingencies = network.contingencies
    assert contingencies is not None
    assert not np.any(network.shift)
    segments, base = inputs.segments, network.base_mva
    rise = np.divide(
        segments.price_end - segments.price_start,
        segments.width,
        out=np.zeros(segments.width.size),
        where=segments.width > 0,
    )
    output = cp.Variable(segments.width.size, nonneg=True)
    at_bus = sparse.csr_array(
        (np.ones(output.size), (network.resource_bus[segments.resource], np.arange(output.size))),
        shape=(network.n_bus, output.size),
    )
    withdrawal = inputs.load_p + network.shunt_g
    withdrawal -= np.bincount(network.resource_bus, weights=inputs.p_min, minlength=network.n_bus)
    incidence = network.from_incidence() - network.to_incidence()
    states = [
        np.zeros(0, np.int64),
        *(out for name, out in zip(contingencies.names, contingencies.branches, strict=True) if name not in splitting),
    ]
    limits = [output <= segments.width]
    for k, out in enumerate(states):
        on = inputs.branch_in_service.copy()
        on[out] = False
        b = linear_susceptance(network, on, DcConvention())
        angle, flow = cp.Variable(network.n_bus), cp.Variable(network.n_branch)
        rating = network.normal_rating if k == 0 else network.emergency_rating
        # Flows as variables of their own: rounding stays away from the large susceptances.
        limits += [flow == cp.multiply(b, incidence @ angle), at_bus @ output - incidence.T @ flow == withdrawal]
        limits += [cp.abs(flow) <= rating, angle[0] == 0.0]
    cost = base * (segments.price_start @ output + 0.5 * rise @ cp.square(output))
    problem = cp.Problem(cp.Minimize(1e-3 * cost), limits)
    problem.solve(solver=cp.CLARABEL, tol_gap_abs=1e-9, tol_gap_rel=1e-9, tol_feas=1e-9)
    assert problem.status == "optimal", problem.status
    return 1e3 * float(problem.value) + float(inputs.fixed_cost.sum())


def benchmark_24() -> tuple[Network, IntervalInputs]:
    """The 24-bus reliability test system with every single outage and the pairs of circuits on common towers.

    "IEEE Reliability Test System", IEEE Transactions on Power Apparatus and Systems 98(6), 1979, with the costs of
    the benchmark library. It withstands every single outage as published, so its emergency ratings are cut to 70 %.
    """
    network, inputs = load_network("case24")
    pairs = [("L25", "L26"), ("L32", "L33"), ("L34", "L35"), ("L36", "L37")]
    out = [*((branch,) for branch in network.branches), *pairs]
    position = {branch: k for k, branch in enumerate(network.branches)}
    network = replace(
        network,
        emergency_rating=0.7 * network.emergency_rating,
        contingencies=Contingencies(
            names=tuple(f"loss of {' and '.join(branches)}" for branches in out),
            branches=tuple(np.array([position[b] for b in branches], dtype=np.int64) for branches in out),
            monitored=np.ones(network.n_branch, dtype=bool),
        ),
    )
    return network, inputs


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
    assert result.objective == pytest.approx(explicit_cost(network, inputs), rel=1e-7)


def test_cost_equals_the_explicit_formulation_on_the_benchmark() -> None:
    network, inputs = benchmark_24()
    result, limits = secure(network, inputs, "dc")
    assert result.status is SolveStatus.OPTIMAL
    assert "not enforced, would split the network in this interval: loss of L11" in result.notes
    free = build_formulation("dc", network, inputs.branch_in_service, DispatchOptions())
    unsecured = free.solve(inputs, FlowLimits.none(network.n_branch)).objective
    # Published (benchmark library, baseline table): DC 6.1001e4 $/h without contingencies and without taps.
    assert unsecured == pytest.approx(6.1001e4, rel=1e-4)
    assert limits.n_row > 0
    assert result.objective > 1.01 * unsecured
    explicit = explicit_cost(network, inputs, splitting=("loss of L11",))
    assert result.objective == pytest.approx(explicit, rel=1e-7)


@pytest.mark.parametrize("name", ["dc", "dc-loss", "soc", "ac"])
def test_the_benchmark_is_secure_in_every_formulation(name: str) -> None:
    network, inputs = benchmark_24()
    result, limits = secure(network, inputs, name)
    assert result.status.has_solution
    assert limits.n_row > 0
    outages = OutageFactors(network, inputs.branch_in_service, DcConvention())
    assert outages.screen(result.point.p_from, 2e-5).n_pair == 0
    free = build_formulation(name, network, inputs.branch_in_service, DispatchOptions())
    unsecured = free.solve(inputs, FlowLimits.none(network.n_branch)).objective
    assert result.objective >= unsecured * (1 - 1e-8)
    assert result.objective > unsecured + 1.0


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


@pytest.mark.parametrize("seed", [3, 8])
def test_drafts_with_fictitious_losses_leave_no_pair_violated(seed: int) -> None:
    """At negative prices the draft burns hundreds of MW: pairs found on it alone would not secure the dispatch."""
    network, inputs = random_network(seed)
    segments = inputs.segments
    below_zero = replace(segments, price_start=segments.price_start - 100.0, price_end=segments.price_end - 100.0)
    inputs = replace(inputs, segments=below_zero)
    result, limits = secure(network, inputs, "dc-loss")
    assert result.loss_slack_open
    assert abs(result.fictitious_loss) < 1e-5
    outages = OutageFactors(network, inputs.branch_in_service, DcConvention())
    assert outages.screen(result.point.p_from, 2e-5).n_pair == 0
    directly = build_formulation("dc-loss", network, inputs.branch_in_service, DispatchOptions()).solve(inputs, limits)
    assert result.objective == pytest.approx(directly.objective, rel=1e-9)
    np.testing.assert_allclose(result.multipliers.active, directly.multipliers.active, rtol=1e-6)
