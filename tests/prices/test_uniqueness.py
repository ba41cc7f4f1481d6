"""Price intervals at degenerate dispatches, by hand and against one-sided derivatives of the cost."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from scipy import sparse

from lmpgap.dispatch.formulation import build_formulation
from lmpgap.dispatch.limits import FlowLimits
from lmpgap.dispatch.options import DispatchOptions
from lmpgap.dispatch.result import DispatchResult, StationaritySystem
from lmpgap.prices.components import constraints_of, split_prices
from lmpgap.prices.null_space import left_null_space
from lmpgap.prices.uniqueness import PriceIntervals, price_intervals
from lmpgap.scenario.network import IntervalInputs, Network, OfferSegments
from lmpgap.scenario.settings import Penalties
from tests.prices.support import lossless_dispatch, simple_inputs, small_network
from tests.support.networks import load_network

EVERY_FORMULATION = ("dc", "dc-loss", "soc", "ac")
EXACT = 1e-3
"""Figures to reach for the kink and the parallel branches [$/MWh]."""


def solve(
    name: str, network: Network, inputs: IntervalInputs, penalties: Penalties | None = None
) -> tuple[DispatchResult, PriceIntervals]:
    options = DispatchOptions(keep_stationarity=True, penalties=penalties or Penalties())
    formulation = build_formulation(name, network, inputs.branch_in_service, options)
    result = formulation.solve(inputs, FlowLimits.none(network.n_branch), None)
    assert result.status.has_solution, result.message
    assert result.stationarity is not None
    return result, price_intervals(result.stationarity, network.base_mva)


def growth_network() -> Network:
    """Network of "DCOPF-Based LMP Simulation", IEEE Trans. Power Systems 22(4), 2007.

    Data of "Small Test Systems for Power System Economic Studies", IEEE PES General Meeting 2010; the resistance is
    left out, so that all formulations have the same prices where nothing else binds.
    """
    branches = [
        (0, 1, 0.0281, np.inf),
        (0, 3, 0.0304, np.inf),
        (0, 4, 0.0064, np.inf),
        (1, 2, 0.0108, np.inf),
        (2, 3, 0.0297, np.inf),
        (3, 4, 0.0297, 240.0),
    ]
    network = small_network(5, branches, resource_bus=[0, 0, 2, 3, 4])
    return network.with_changes(q_min=np.full(5, -6.0), q_max=np.full(5, 6.0))


def growth_inputs(network: Network, load_mw: float) -> IntervalInputs:
    offers = [(0, 40, 14), (1, 170, 15), (2, 520, 30), (3, 200, 35), (4, 600, 10)]
    return simple_inputs(network, [0, load_mw / 3, load_mw / 3, load_mw / 3, 0], offers)


@pytest.mark.parametrize("name", EVERY_FORMULATION)
def test_kink_at_600_mw(name):
    """At 600 MW the $10 unit is exactly used up and the $14 unit not yet called: any price in [10, 14] is right.

    The step at 600 MW is published in the paper's load growth figure.
    """
    network = growth_network()
    result, found = solve(name, network, growth_inputs(network, 600.0))
    np.testing.assert_allclose(found.low, 10.0, atol=EXACT)
    np.testing.assert_allclose(found.high, 14.0, atol=EXACT)
    assert not found.unique.any()
    price = result.multipliers.active / network.base_mva
    assert (price > 10.0 - EXACT).all()
    assert (price < 14.0 + EXACT).all()


@pytest.mark.parametrize("name", EVERY_FORMULATION)
@pytest.mark.parametrize("load", [590.0, 610.0, 800.0])
def test_prices_next_to_the_kink_are_unique(name, load):
    network = growth_network()
    result, found = solve(name, network, growth_inputs(network, load))
    assert found.all_unique
    if name == "dc":
        assert found.n_direction == 0
    np.testing.assert_allclose(found.low, result.multipliers.active / network.base_mva, atol=1e-9)
    np.testing.assert_array_equal(found.low, found.high)


@pytest.mark.parametrize("load", [600.0, 640.0, 711.8096, 742.7999, 963.9413])
def test_interval_is_the_pair_of_one_sided_derivatives(load):
    """The ends are the left and right derivatives of the cost in the load of each bus, by solving again."""
    network = growth_network()
    inputs = growth_inputs(network, load)
    # Move to the exact step with a fine search where the published load is rounded.
    result = lossless_dispatch(network, inputs, active_mw=0.02)
    assert result.stationarity is not None
    found = price_intervals(result.stationarity, network.base_mva)
    step = 0.1  # MW, larger than the rounding of the published loads
    for bus in range(network.n_bus):
        costs = []
        for move in (-2 * step, -step, step, 2 * step):
            moved = inputs.load_p.copy()
            moved[bus] += move / network.base_mva
            costs.append(lossless_dispatch(network, replace(inputs, load_p=moved)).objective)
        left, right = (costs[1] - costs[0]) / step, (costs[3] - costs[2]) / step
        assert found.low[bus] == pytest.approx(min(left, right), abs=1e-6)
        assert found.high[bus] == pytest.approx(max(left, right), abs=1e-6)


@pytest.mark.parametrize("name", EVERY_FORMULATION)
def test_parallel_branches_at_their_limit(name):
    """Two identical branches at their limit: prices and the sum of shadow prices are unique, the split is not."""
    network = small_network(2, [(0, 1, 0.1, 30.0), (0, 1, 0.1, 30.0)], resource_bus=[0, 1])
    inputs = simple_inputs(network, [0, 100], [(0, 200, 20), (1, 200, 60)])
    result, found = solve(name, network, inputs)
    assert found.all_unique
    np.testing.assert_allclose(found.low, [20.0, 60.0], atol=EXACT)
    assert result.stationarity is not None
    if name in ("dc", "dc-loss"):
        assert found.n_direction >= 1  # multipliers can move, prices cannot
        # One MW more on both lets two MW through, each worth 60 - 20.
        assert constraints_of(result).shadow_price.sum() == pytest.approx(80.0, abs=EXACT)


@pytest.mark.parametrize("name", EVERY_FORMULATION)
def test_bus_behind_a_branch_that_is_just_full(name):
    """Load 50 MW behind 50 MW of branch: beyond it the local unit at $45 would run, below it the one at $20 does.

    Reactive power is left out of the load and the branch carries its limit at unit power factor in the AC models
    only up to what its own reactance takes, so that the limit there is set to the apparent power at 50 MW.
    """
    network = small_network(2, [(0, 1, 0.1, 50.0)], resource_bus=[0, 1])
    inputs = simple_inputs(network, [10, 50], [(0, 200, 20), (1, 200, 45)])
    if name in ("soc", "ac"):
        free = network.with_changes(normal_rating=np.array([np.inf]))
        # Least apparent power at 50 MW: found by pricing the branch's capacity in a dispatch of its own.
        rating = _least_rating(name, free, inputs)
        network = network.with_changes(normal_rating=np.array([rating]))
    _, found = solve(name, network, inputs)
    assert found.unique[0]
    assert found.low[0] == pytest.approx(20.0, abs=EXACT)
    if name in ("dc", "dc-loss"):
        assert found.low[1] == pytest.approx(20.0, abs=EXACT)
        assert found.high[1] == pytest.approx(45.0, abs=EXACT)
    else:
        assert 20.0 - EXACT <= found.low[1] <= found.high[1] <= 45.0 + EXACT


def _least_rating(name: str, network: Network, inputs: IntervalInputs) -> float:
    """Return the smallest rating at which the local unit does not run, by bisection."""
    low, high = 0.49, 0.55
    for _ in range(30):
        middle = 0.5 * (low + high)
        tried = network.with_changes(normal_rating=np.array([middle]))
        options = DispatchOptions()
        result = build_formulation(name, tried, inputs.branch_in_service, options).solve(
            inputs, FlowLimits.none(network.n_branch), None
        )
        if result.p[1] > 1e-6:
            low = middle
        else:
            high = middle
    return high


@pytest.mark.parametrize(
    ("penalties", "top"),
    [
        (Penalties(), np.inf),
        (Penalties(power_balance=3000.0), 3000.0),
        (Penalties(transmission=100.0), 120.0),
        (Penalties(power_balance=3000.0, transmission=100.0), 120.0),
    ],
)
@pytest.mark.parametrize("name", ["dc", "dc-loss"])
def test_soft_limits_bound_the_interval(name, penalties, top):
    """No unit behind the full branch: nothing bounds the price but the penalties."""
    network = small_network(2, [(0, 1, 0.1, 50.0)], resource_bus=[0])
    inputs = simple_inputs(network, [0, 50], [(0, 200, 20)])
    _, found = solve(name, network, inputs, penalties)
    np.testing.assert_allclose(found.low, 20.0, atol=EXACT)
    np.testing.assert_allclose(found.high, [20.0, top], atol=EXACT * 10)


@pytest.mark.parametrize("name", EVERY_FORMULATION)
def test_sloped_offers(name):
    """Slopes 10 to 12 and 15 to 20, the first used up: [12, 15]; half used: 11 and unique."""
    network = small_network(2, [(0, 1, 0.1, np.inf)], resource_bus=[0, 1])
    inputs = simple_inputs(network, [0, 100], [(0, 100, 10), (1, 100, 15)])
    slopes = OfferSegments(
        resource=inputs.segments.resource,
        width=inputs.segments.width,
        price_start=np.array([10.0, 15.0]),
        price_end=np.array([12.0, 20.0]),
    )
    inputs = replace(inputs, segments=slopes)
    _, found = solve(name, network, inputs)
    np.testing.assert_allclose(found.low, 12.0, atol=EXACT)
    np.testing.assert_allclose(found.high, 15.0, atol=EXACT)
    half = replace(inputs, load_p=0.5 * inputs.load_p)
    _, found = solve(name, network, half)
    assert found.all_unique
    np.testing.assert_allclose(found.low, 11.0, atol=EXACT)


def test_partly_served_bid_settles_the_price():
    network = small_network(2, [(0, 1, 0.1, np.inf)], resource_bus=[0])
    inputs = simple_inputs(network, [0, 60], [(0, 100, 10)], bids=[(1, 80, 33.0)])
    _, found = solve("dc", network, inputs)
    assert found.all_unique
    np.testing.assert_allclose(found.low, 33.0)
    # The bid takes exactly what the offer has left: the price is between offer and bid.
    inputs = simple_inputs(network, [0, 60], [(0, 100, 10)], bids=[(1, 40, 33.0)])
    _, found = solve("dc", network, inputs)
    assert found.low == pytest.approx([10.0, 10.0])
    assert found.high == pytest.approx([33.0, 33.0])


def test_islands_and_pockets_have_intervals_of_their_own():
    """Three islands: one at a kink, one regular, one dead; the directions do not mix."""
    network = small_network(
        6, [(0, 1, 0.1, np.inf), (2, 3, 0.1, np.inf), (4, 5, 0.1, np.inf)], resource_bus=[0, 0, 2, 3]
    )
    inputs = simple_inputs(network, [0, 50, 0, 60, 0, 0], [(0, 50, 20), (1, 50, 30), (2, 100, 25), (3, 100, 70)])
    _, found = solve("dc", network, inputs)
    np.testing.assert_allclose(found.low, [20, 20, 25, 25, np.nan, np.nan])
    np.testing.assert_allclose(found.high, [30, 30, 25, 25, np.nan, np.nan])
    np.testing.assert_array_equal(found.unique, [False, False, True, True, False, False])
    assert not found.all_unique


def test_two_directions_at_once():
    """A pocket behind a full branch while the $20 unit is exactly used up: the two intervals stack.

    Bus 1 may be anywhere in [20, 30]. Bus 2 is at least as dear and at most its own unit's 45.
    """
    network = small_network(2, [(0, 1, 0.1, 50.0)], resource_bus=[0, 0, 1])
    inputs = simple_inputs(network, [10, 50], [(0, 60, 20), (1, 60, 30), (2, 60, 45)])
    _, found = solve("dc", network, inputs)
    assert found.n_direction == 2
    np.testing.assert_allclose(found.low, [20.0, 20.0], atol=1e-9)
    np.testing.assert_allclose(found.high, [30.0, 45.0], atol=1e-9)


@pytest.mark.parametrize("name", EVERY_FORMULATION)
@pytest.mark.parametrize("case", ["case3", "case5", "case14", "case30", "case118"])
def test_benchmark_networks_have_unique_prices(case, name):
    network, inputs = load_network(case)
    result, found = solve(name, network, inputs)
    assert found.all_unique
    assert found.ratio > 1e-4
    split = split_prices(network, inputs.branch_in_service, result, inputs.load_p)
    np.testing.assert_allclose(found.low, split.lmp, atol=1e-3)


# --- the screen ----------------------------------------------------------------------------------------


@pytest.mark.parametrize("near", [0.0, 1e-5])
def test_sparse_screen_agrees_with_the_dense_one(near):
    rng = np.random.default_rng(5)
    matrix = sparse.random_array((300, 340), density=0.02, rng=rng, format="csr") + sparse.eye_array(300, 340)
    matrix = matrix.toarray() * rng.uniform(0.1, 100.0, 300)[:, None]
    matrix[7] = matrix[3] * 2.0 - matrix[150] + near * rng.standard_normal(340)
    matrix[200] = 0.3 * matrix[11] + near * rng.standard_normal(340)
    matrix = sparse.csr_array(matrix)
    dense = left_null_space(matrix, 1e-5, dense_up_to=10_000)
    thin = left_null_space(matrix, 1e-5, dense_up_to=0)
    assert dense.basis.shape == thin.basis.shape == (300, 2)
    if near:
        assert thin.ratio == pytest.approx(dense.ratio, rel=0.05)
    else:
        assert thin.ratio < 1e-7
        assert dense.ratio < 1e-12
    # The same plane: projecting one basis on the other loses nothing.
    length = np.sqrt(matrix.multiply(matrix).sum(axis=1))
    first, second = dense.basis * length[:, None], thin.basis * length[:, None]
    np.testing.assert_allclose(np.linalg.svd(first.T @ second, compute_uv=False), 1.0, atol=1e-5)


def test_screen_with_more_rows_than_columns_and_zero_rows():
    matrix = sparse.csr_array(np.array([[1.0, 0.0], [0.0, 2.0], [1.0, 1.0], [0.0, 0.0]]))
    for dense_up_to in (0, 100):
        found = left_null_space(matrix, 1e-5, dense_up_to=dense_up_to)
        assert found.basis.shape == (4, 1)
        np.testing.assert_allclose(matrix.T @ found.basis, 0.0, atol=1e-7)
        assert found.basis[3, 0] == 0.0
        assert found.ratio < 1e-7


@pytest.mark.parametrize(("apart", "unique"), [(0.0, False), (9e-6, True)])
def test_nearly_parallel_gradients_are_not_parallel(apart, unique):
    """Steep gradients that differ by more than the solution leaves open: following them would break stationarity.

    Price 20 $/MWh, a limit with a multiplier of 15: if both gradients were one, the price could rise to 35 or fall
    without end.
    """
    steep = 1000.0
    jacobian = sparse.csr_array(steep * np.array([[1.0, 0.0], [1.0, apart]]))
    z = np.array([2000.0, 1500.0])
    system = StationaritySystem(
        gradient=-(jacobian.T @ z),
        jacobian=jacobian,
        free=np.array([True, False]),
        multipliers=z,
        balance_rows=np.array([0, -1]),
    )
    found = price_intervals(system, 100.0)
    assert found.n_direction == 1
    assert found.unique[0] == unique
    assert np.isnan(found.low[1])
    if unique:
        assert found.low[0] == found.high[0] == 20.0
    else:
        np.testing.assert_allclose([found.low[0], found.high[0]], [-np.inf, 35.0])
