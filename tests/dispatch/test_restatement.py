"""The production path against the independent statement, and against the invariances of the problem."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import sparse

from lmpgap.dispatch.limits import FlowLimits
from lmpgap.dispatch.options import DispatchOptions
from lmpgap.dispatch.restatement import restate
from lmpgap.dispatch.result import SolveStatus
from lmpgap.errors import LmpgapError
from lmpgap.scenario.network import BidSegments, IntervalInputs, Network
from lmpgap.scenario.settings import DcConvention
from tests.dispatch.grids import grid, prices, solve
from tests.support.networks import load_network, scale_load

CONVEX = ("dc", "dc-loss", "soc")


def agree(
    name: str,
    network: Network,
    inputs: IntervalInputs,
    flow_limits: FlowLimits | None = None,
    convention: DcConvention | None = None,
) -> None:
    options = DispatchOptions(dc=DcConvention() if convention is None else convention)
    ours = solve(name, network, inputs, options, flow_limits)
    theirs = restate(name, network, inputs, flow_limits, convention)
    assert ours.status is SolveStatus.OPTIMAL
    assert theirs.status.has_solution
    assert ours.objective == pytest.approx(theirs.objective, rel=1e-6)
    assert prices(network, ours) == pytest.approx(theirs.price, abs=1e-3)


@pytest.mark.parametrize("case", ["case3", "case5", "case14", "case30", "case118"])
@pytest.mark.parametrize("name", CONVEX)
def test_cost_and_prices_agree(name: str, case: str) -> None:
    network, inputs = load_network(case)
    agree(name, network, inputs)


@pytest.mark.parametrize("name", ["dc", "dc-loss"])
@pytest.mark.parametrize("taps", [False, True])
def test_conventions_agree(name: str, taps: bool) -> None:
    network, inputs = load_network("case30")
    agree(name, network, inputs, convention=DcConvention(susceptance="impedance", taps=taps))


@pytest.mark.parametrize("name", CONVEX)
def test_outages_bids_shifts_and_weighted_flows_agree(name: str) -> None:
    network, inputs = load_network("case14")
    out = inputs.branch_in_service.copy()
    out[4] = False
    running = inputs.resource_in_service.copy()
    running[3] = False
    width = inputs.segments.width.copy()
    width[3] = 0.0
    changed = replace(
        inputs,
        branch_in_service=out,
        resource_in_service=running,
        segments=replace(inputs.segments, width=width),
        bids=BidSegments(bus=np.array([3, 8]), width=np.array([0.3, 0.2]), price=np.array([9.0, 5.0])),
    )
    shift = np.zeros(20)
    shift[7] = 0.05
    weights = np.zeros((2, 20))
    weights[0, [1, 2]] = 1.0, 0.5
    weights[1, 9] = -1.0
    point = solve(name, network.with_changes(shift=shift), changed).point
    flows = point.p_from
    angle_max = np.full(20, np.inf)
    angle_max[0] = 0.97 * np.arctan2(point.s[0], point.c[0])
    limits = FlowLimits(
        weights=sparse.csr_array(weights),
        limit=np.array([0.95 * (weights @ flows)[0], 5.0]),
        kind=("interface", "interface"),
        contingency=("", ""),
        monitored=("a", "b"),
        direction=("forward", "forward"),
    )
    agree(name, network.with_changes(shift=shift), changed, limits)
    agree(name, network.with_changes(shift=shift, angle_max=angle_max), changed)


@pytest.mark.parametrize("name", CONVEX)
def test_infeasible_in_both(name: str) -> None:
    network, inputs = load_network("case5")
    assert restate(name, network, scale_load(inputs, 3.0)).status is SolveStatus.INFEASIBLE
    assert solve(name, network, scale_load(inputs, 3.0)).status is SolveStatus.INFEASIBLE


def test_other_formulations_have_no_restatement() -> None:
    with pytest.raises(LmpgapError, match="no independent statement of 'ac'"):
        restate("ac", *load_network("case3"))


# --- invariances -----------------------------------------------------------------------------------------------


@st.composite
def small_grids(draw: st.DrawFn) -> tuple[Network, IntervalInputs]:
    """Draw a connected grid of 3 to 6 buses with enough capacity and limits that may bind."""
    n = draw(st.integers(3, 6))
    seed = draw(st.integers(0, 2**32 - 1))
    rng = np.random.default_rng(seed)
    lines = [
        (str(rng.integers(0, i)), str(i), 0.02 * rng.random(), 0.05 + 0.1 * rng.random(), 60 + 200 * rng.random())
        for i in range(1, n)
    ]
    lines += [
        (str(a), str(b), 0.02 * rng.random(), 0.05 + 0.1 * rng.random(), 60 + 200 * rng.random())
        for a, b in rng.integers(0, n, (2, 2))
        if a != b
    ]
    loads = {str(i): float(30 * rng.random()) for i in range(n)}
    units = [(str(i), 40.0 + 100 * rng.random(), 10 + 40 * rng.random()) for i in range(n)]
    return grid(lines, units, loads, v=(0.9, 1.1), q_mvar=200.0)


@settings(max_examples=15, deadline=None)
@given(small_grids(), st.sampled_from(CONVEX))
def test_random_grids_agree_with_the_restatement(case: tuple[Network, IntervalInputs], name: str) -> None:
    network, inputs = case
    ours, theirs = solve(name, network, inputs), restate(name, network, inputs)
    assert ours.status.has_solution == theirs.status.has_solution
    if ours.status.has_solution:
        assert ours.objective == pytest.approx(theirs.objective, rel=1e-6, abs=1e-4)


@settings(max_examples=15, deadline=None)
@given(small_grids(), st.sampled_from(CONVEX), st.randoms(use_true_random=False))
def test_order_of_buses_and_branches_does_not_matter(
    case: tuple[Network, IntervalInputs], name: str, random: object
) -> None:
    network, inputs = case
    new = list(range(network.n_bus))
    random.shuffle(new)  # type: ignore[attr-defined]
    order = np.array(new)
    back = np.argsort(order)  # new position of each old bus
    line_order = np.array(random.sample(range(network.n_branch), network.n_branch))  # type: ignore[attr-defined]
    shuffled = network.with_changes(
        buses=tuple(network.buses[i] for i in order),
        v_min=network.v_min[order],
        v_max=network.v_max[order],
        branches=tuple(network.branches[k] for k in line_order),
        from_bus=back[network.from_bus][line_order],
        to_bus=back[network.to_bus][line_order],
        resource_bus=back[network.resource_bus],
        **{f: getattr(network, f)[line_order] for f in ("r", "x", "charging", "tap", "shift", "normal_rating")},
    )
    moved = replace(inputs, load_p=inputs.load_p[order], load_q=inputs.load_q[order])
    one, other = solve(name, network, inputs), solve(name, shuffled, moved)
    assert one.status is other.status
    if one.status.has_solution:
        assert other.objective == pytest.approx(one.objective, rel=1e-7, abs=1e-5)
        assert other.p == pytest.approx(one.p, abs=5e-4)


@settings(max_examples=15, deadline=None)
@given(small_grids(), st.sampled_from(CONVEX), st.sampled_from([10.0, 1000.0]))
def test_power_base_does_not_matter(case: tuple[Network, IntervalInputs], name: str, base: float) -> None:
    network, inputs = case
    k = network.base_mva / base  # power in pu falls, impedance in pu rises with the base
    other_network = network.with_changes(
        base_mva=base,
        r=network.r / k,
        x=network.x / k,
        normal_rating=network.normal_rating * k,
        q_min=network.q_min * k,
        q_max=network.q_max * k,
    )
    other_inputs = replace(
        inputs,
        load_p=inputs.load_p * k,
        load_q=inputs.load_q * k,
        p_max=inputs.p_max * k,
        segments=replace(inputs.segments, width=inputs.segments.width * k),
    )
    one, other = solve(name, network, inputs), solve(name, other_network, other_inputs)
    assert one.status is other.status
    if one.status.has_solution:
        assert other.objective == pytest.approx(one.objective, rel=1e-6, abs=1e-4)


@settings(max_examples=15, deadline=None)
@given(small_grids(), st.sampled_from(CONVEX), st.sampled_from([0.1, 7.0]))
def test_prices_scale_with_cost(case: tuple[Network, IntervalInputs], name: str, factor: float) -> None:
    network, inputs = case
    segments = inputs.segments
    scaled = replace(
        inputs,
        segments=replace(segments, price_start=factor * segments.price_start, price_end=factor * segments.price_end),
    )
    one, other = solve(name, network, inputs), solve(name, network, scaled)
    assert one.status is other.status
    if one.status.has_solution:
        assert other.objective == pytest.approx(factor * one.objective, rel=1e-6, abs=1e-4)
