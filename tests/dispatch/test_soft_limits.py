"""Penalties: limits give way at their price, prices stop there, and the result says so."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from scipy import sparse

from lmpgap.dispatch.limits import FlowLimits
from lmpgap.dispatch.options import DispatchOptions
from lmpgap.dispatch.result import SolveStatus
from lmpgap.scenario.settings import Penalties
from tests.dispatch.grids import five_bus_growth, grid, prices, solve
from tests.support.networks import load_network

FREE = np.inf
CONVEX = ("dc", "dc-loss", "soc")
SOFT = DispatchOptions(penalties=Penalties(power_balance=3000.0, transmission=1500.0))


@pytest.mark.parametrize("name", CONVEX)
def test_scarcity_price_is_the_balance_penalty(name: str) -> None:
    network, inputs = grid([("1", "2", 0.0, 0.1, FREE)], [("1", 80.0, 20.0), ("2", 0.0, 0.0)], {"2": 100.0})
    assert solve(name, network, inputs).status is SolveStatus.INFEASIBLE
    result = solve(name, network, inputs, SOFT)
    assert result.status is SolveStatus.OPTIMAL
    assert result.unserved * 100 == pytest.approx([0.0, 20.0], abs=1e-5)
    assert result.surplus == pytest.approx([0.0, 0.0], abs=1e-7)
    assert prices(network, result) == pytest.approx([3000.0, 3000.0], abs=1e-2)
    assert result.objective == pytest.approx(80 * 20 + 20 * 3000, rel=1e-6)


@pytest.mark.parametrize("name", CONVEX)
def test_must_run_surplus_is_taken_away_at_the_penalty(name: str) -> None:
    network, inputs = grid([("1", "2", 0.0, 0.1, FREE)], [("1", 150.0, 20.0), ("2", 0.0, 0.0)], {"2": 100.0})
    forced = replace(
        inputs,
        p_min=np.array([1.5, 0.0]),
        segments=replace(inputs.segments, width=np.zeros(2)),
        fixed_cost=np.array([3000.0, 0.0]),
    )
    result = solve(name, network, forced, SOFT)
    assert result.surplus.sum() * 100 == pytest.approx(50.0, abs=1e-5)
    assert prices(network, result) == pytest.approx([-3000.0, -3000.0], abs=1e-2)
    assert result.objective == pytest.approx(3000 + 50 * 3000, rel=1e-6)


@pytest.mark.parametrize("name", CONVEX)
def test_rating_gives_way_at_the_transmission_penalty(name: str) -> None:
    network, inputs = grid([("1", "2", 0.0, 0.1, 60.0)], [("1", 500.0, 20.0), ("2", 10.0, 40.0)], {"2": 100.0})
    assert solve(name, network, inputs).status is SolveStatus.INFEASIBLE
    result = solve(name, network, inputs, SOFT)
    rows = result.constraints
    thermal = [i for i in range(rows.n_row) if rows.kind[i] == "thermal" and rows.multiplier[i] > 1.0]
    assert all(rows.at_penalty[i] for i in thermal)
    # Both ends give way together, so that their shadow prices add up to one penalty.
    assert sum(rows.multiplier[i] for i in thermal) / 100 == pytest.approx(1500.0, rel=1e-5)
    assert np.all(result.unserved < 1e-6)
    assert result.point.p_from[0] == pytest.approx(0.9, abs=1e-6)
    # One more MW at 2 raises the flow by one: 20 + 1500 in MW; the cone counts the reactive part of MVA as well.
    assert prices(network, result)[0] == pytest.approx(20.0, abs=1e-3)
    if name != "soc":
        assert prices(network, result)[1] == pytest.approx(1520.0, abs=1e-2)


@pytest.mark.parametrize("name", CONVEX)
def test_weighted_flows_give_way_at_the_penalty(name: str) -> None:
    network, inputs = grid(
        [("1", "2", 0.0, 0.1, FREE), ("1", "2", 0.0, 0.1, FREE)], [("1", 500.0, 20.0), ("2", 10.0, 40.0)], {"2": 100.0}
    )
    limits = FlowLimits(
        weights=sparse.csr_array(np.array([[1.0, 1.0], [-1.0, -1.0]])),
        limit=np.array([0.6, 0.6]),
        kind=("interface", "interface"),
        contingency=("", ""),
        monitored=("gate", "gate"),
        direction=("forward", "reverse"),
    )
    assert solve(name, network, inputs, flow_limits=limits).status is SolveStatus.INFEASIBLE
    result = solve(name, network, inputs, SOFT, limits)
    rows = result.constraints
    rows = rows.take(np.array([kind == "interface" for kind in rows.kind]))
    assert (rows.kind, rows.monitored, rows.direction) == (("interface",), ("gate",), ("forward",))
    assert rows.at_penalty.tolist() == [True]
    assert rows.multiplier / 100 == pytest.approx([1500.0], rel=1e-6)
    assert rows.value * 100 == pytest.approx([90.0], abs=1e-4)
    assert rows.limit * 100 == pytest.approx([60.0])
    assert rows.angle_gain.toarray()[0] == pytest.approx(result.point.dp_from)


@pytest.mark.parametrize("name", CONVEX)
def test_penalties_far_above_the_price_change_nothing(name: str) -> None:
    network, inputs = load_network("case30")
    hard, soft = solve(name, network, inputs), solve(name, network, inputs, SOFT)
    assert soft.objective == pytest.approx(hard.objective, rel=1e-6)
    assert prices(network, soft) == pytest.approx(prices(network, hard), abs=2e-3)
    assert not soft.constraints.at_penalty.any()


def test_load_at_a_dead_bus_is_unserved_and_has_no_price() -> None:
    network, inputs = grid(
        [("1", "2", 0.0, 0.1, FREE), ("3", "4", 0.0, 0.1, FREE)], [("1", 500.0, 20.0)], {"2": 100.0, "4": 10.0}
    )
    for name in CONVEX:
        result = solve(name, network.with_changes(q_max=np.array([9.0]), q_min=np.array([-9.0])), inputs, SOFT)
        if name == "soc":  # the unit at 1 alone cannot hold both voltages at 1 pu; free the band
            wide = network.with_changes(v_min=np.full(4, 0.9), v_max=np.full(4, 1.1))
            result = solve(name, wide, inputs, SOFT)
        assert result.status is SolveStatus.OPTIMAL
        assert result.unserved * 100 == pytest.approx([0.0, 0.0, 0.0, 10.0], abs=1e-5)
        assert result.objective == pytest.approx(100 * 20 + 10 * 3000, rel=1e-6)
        assert np.isnan(result.multipliers.active).tolist() == [False, False, True, True]


def test_growth_beyond_the_network_is_shed_at_the_penalty() -> None:
    network, inputs = five_bus_growth(1600.0)
    result = solve("dc", network, inputs, DispatchOptions(penalties=Penalties(power_balance=3000.0)))
    assert result.status is SolveStatus.OPTIMAL
    assert result.unserved.sum() * 100 == pytest.approx(1600 - 1484.06, abs=60.0)
    assert result.unserved.sum() > 0.0
    assert prices(network, result).max() == pytest.approx(3000.0)
