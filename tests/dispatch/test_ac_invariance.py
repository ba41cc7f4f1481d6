"""What must not change the AC dispatch: names, order, direction and units."""

from dataclasses import replace

import numpy as np
from hypothesis import given, settings
from hypothesis import strategies as st

from lmpgap.dispatch.ac import AcDispatch
from lmpgap.dispatch.limits import FlowLimits
from lmpgap.dispatch.options import DispatchOptions
from lmpgap.dispatch.result import DispatchResult
from lmpgap.scenario.network import IntervalInputs, Network
from tests.support.networks import load_network

PRICE = 1e-4
"""Two solves of one problem in another order differ by what the stopping tolerance leaves [$/MWh]."""


def solve(network: Network, inputs: IntervalInputs) -> DispatchResult:
    dispatch = AcDispatch(network, inputs.branch_in_service, DispatchOptions())
    return dispatch.solve(inputs, FlowLimits.none(network.n_branch))


NETWORK, INPUTS = load_network("case14")
BEFORE = solve(NETWORK, INPUTS)
PRICES = BEFORE.multipliers.active / NETWORK.base_mva


@settings(max_examples=5, deadline=None)
@given(seed=st.integers(0, 10_000))
def test_order_of_buses(seed: int) -> None:
    order = np.random.default_rng(seed).permutation(NETWORK.n_bus)
    place = np.argsort(order)
    network = replace(
        NETWORK,
        buses=tuple(NETWORK.buses[i] for i in order),
        **{name: getattr(NETWORK, name)[order] for name in ("v_min", "v_max", "shunt_g", "shunt_b")},
        **{name: place[getattr(NETWORK, name)] for name in ("from_bus", "to_bus", "resource_bus")},
    )
    after = solve(network, replace(INPUTS, load_p=INPUTS.load_p[order], load_q=INPUTS.load_q[order]))
    np.testing.assert_allclose(after.multipliers.active / network.base_mva, PRICES[order], atol=PRICE)
    np.testing.assert_allclose(after.objective, BEFORE.objective, rtol=1e-7)


@settings(max_examples=5, deadline=None)
@given(base=st.floats(10.0, 1000.0))
def test_base_power(base: float) -> None:
    """Per-unit powers fall and impedances rise with the base; admittances fall with it."""
    k = base / NETWORK.base_mva
    network = replace(
        NETWORK,
        base_mva=base,
        **{name: getattr(NETWORK, name) * k for name in ("r", "x")},
        **{
            name: getattr(NETWORK, name) / k
            for name in ("charging", "shunt_g", "shunt_b", "normal_rating", "q_min", "q_max")
        },
    )
    segments = replace(INPUTS.segments, width=INPUTS.segments.width / k)
    powers = {name: getattr(INPUTS, name) / k for name in ("load_p", "load_q", "p_min", "p_max")}
    after = solve(network, replace(INPUTS, segments=segments, **powers))
    np.testing.assert_allclose(after.multipliers.active / base, PRICES, atol=PRICE)
    np.testing.assert_allclose(after.objective, BEFORE.objective, rtol=1e-6)


@settings(max_examples=5, deadline=None)
@given(factor=st.floats(0.1, 10.0))
def test_scale_of_cost(factor: float) -> None:
    segments = replace(
        INPUTS.segments,
        price_start=factor * INPUTS.segments.price_start,
        price_end=factor * INPUTS.segments.price_end,
    )
    after = solve(NETWORK, replace(INPUTS, segments=segments, fixed_cost=factor * INPUTS.fixed_cost))
    np.testing.assert_allclose(
        after.multipliers.active / NETWORK.base_mva, factor * PRICES, atol=factor * PRICE + PRICE
    )


@settings(max_examples=5, deadline=None)
@given(seed=st.integers(0, 10_000))
def test_direction_of_lines(seed: int) -> None:
    """A branch without tap or shift may be entered either way round."""
    plain = (NETWORK.tap == 1.0) & (NETWORK.shift == 0.0)
    turned = plain & (np.random.default_rng(seed).random(NETWORK.n_branch) < 0.5)
    network = replace(
        NETWORK,
        from_bus=np.where(turned, NETWORK.to_bus, NETWORK.from_bus),
        to_bus=np.where(turned, NETWORK.from_bus, NETWORK.to_bus),
        angle_min=np.where(turned, -NETWORK.angle_max, NETWORK.angle_min),
        angle_max=np.where(turned, -NETWORK.angle_min, NETWORK.angle_max),
    )
    after = solve(network, INPUTS)
    np.testing.assert_allclose(after.multipliers.active / NETWORK.base_mva, PRICES, atol=PRICE)
    np.testing.assert_allclose(after.point.p_from[turned], BEFORE.point.p_to[turned], atol=1e-5)
