"""Infeasible intervals and the sentence that says why."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from scipy import sparse

from lmpgap.dispatch.diagnosis import diagnose
from lmpgap.dispatch.limits import FlowLimits
from lmpgap.dispatch.options import DispatchOptions
from lmpgap.dispatch.result import SolveStatus
from lmpgap.scenario.network import IntervalInputs, Network
from lmpgap.scenario.settings import Penalties
from tests.dispatch.grids import five_bus_growth, grid, solve
from tests.support.networks import load_network, scale_load

FREE = np.inf
CONVEX = ("dc", "dc-loss", "soc")
OPTIONS = DispatchOptions()


def why(name: str, network: Network, inputs: IntervalInputs, limits: FlowLimits | None = None):  # type: ignore[no-untyped-def]
    flow_limits = FlowLimits.none(network.n_branch) if limits is None else limits
    assert solve(name, network, inputs, OPTIONS, flow_limits).status is SolveStatus.INFEASIBLE
    return diagnose(name, network, inputs, flow_limits, OPTIONS)


@pytest.mark.parametrize("name", CONVEX)
def test_missing_capacity(name: str) -> None:
    network, inputs = grid([("1", "2", 0.0, 0.1, FREE)], [("1", 80.0, 20.0), ("2", 0.0, 0.0)], {"2": 100.0})
    found = why(name, network, inputs)
    assert [(r.kind, r.name, r.unit) for r in found.relaxations] == [("unserved", "2", "MW")] or (
        sum(r.amount for r in found.relaxations) == pytest.approx(20.0, abs=1e-2)
    )
    assert found.sentence.startswith("capacity in service is 80 MW and fixed load 100 MW. The smallest change")
    assert sum(r.amount for r in found.relaxations) == pytest.approx(20.0, abs=1e-2)


def test_rating_in_the_way_is_named_with_the_amount() -> None:
    network, inputs = grid([("1", "2", 0.0, 0.1, 60.0), ("2", "3", 0.0, 0.1, 60.0)], [("1", 500.0, 20.0)], {"3": 100.0})
    # One MW of load less frees both lines: cheaper than widening both ratings.
    found = why("dc", network, inputs)
    assert [(r.kind, r.name) for r in found.relaxations] == [("unserved", "3")]
    assert found.sentence == "The smallest change that makes it feasible: 40 MW of load at 3 is not served"
    single, inputs = grid([("1", "2", 0.0, 0.1, 60.0), ("1", "2", 0.0, 0.1, FREE)], [("1", 500.0, 20.0)], {"2": 180.0})
    # With two equal lines 1 MW of rating is worth 2 MW of load.
    found = why("dc", single, inputs)
    assert [(r.kind, r.name, r.unit) for r in found.relaxations] == [("thermal", "L1 forward", "MW")]
    assert found.relaxations[0].amount == pytest.approx(30.0)
    assert found.sentence.endswith("the limit L1 forward is widened by 30 MW")


def test_rating_in_apparent_power_is_named() -> None:
    network, inputs = grid(
        [("1", "2", 0.01, 0.1, 60.0), ("1", "2", 0.01, 0.1, FREE)],
        [("1", 500.0, 20.0), ("2", 0.0, 0.0)],
        {"2": 180.0},
        v=(0.95, 1.05),
    )
    found = why("soc", network, inputs)
    assert {r.kind for r in found.relaxations} == {"thermal"}
    assert "the limit L1 is widened by" in found.sentence


def test_interface_is_named() -> None:
    network, inputs = grid([("1", "2", 0.0, 0.1, FREE), ("1", "2", 0.0, 0.1, FREE)], [("1", 500.0, 20.0)], {"2": 100.0})
    limits = FlowLimits(
        weights=sparse.csr_array(np.array([[0.5, 0.0]])),
        limit=np.array([0.2]),
        kind=("interface",),
        contingency=("",),
        monitored=("gate",),
        direction=("forward",),
    )
    found = why("dc", network, inputs, limits)
    assert found.sentence.endswith("the limit interface gate forward is widened by 5 MW")


def test_angle_limit_is_named_in_degrees() -> None:
    network, inputs = grid([("1", "2", 0.0, 0.5, FREE)], [("1", 500.0, 20.0)], {"2": 100.0})
    # A weak line (2 pu per rad): the angle limit is the smaller change in its own measure only if weighted below b.
    limited = network.with_changes(angle_max=np.array([0.45]), x=np.array([0.05]))
    assert solve("dc", limited, inputs).status is SolveStatus.OPTIMAL
    stiff = network.with_changes(angle_max=np.array([0.04]), x=np.array([0.05]))
    found = why("dc", stiff, inputs)
    assert found.relaxations[0].kind == "angle"
    assert found.relaxations[0].unit == "deg"
    assert found.relaxations[0].amount == pytest.approx(np.rad2deg(0.01))


def test_voltage_band_or_reactive_power_is_named() -> None:
    network, inputs = grid(
        [("1", "2", 0.02, 0.2, FREE)], [("1", 500.0, 20.0), ("2", 0.0, 0.0)], {"2": 60.0}, v=(0.98, 1.02)
    )
    network = network.with_changes(q_min=np.array([-9.0, 0.0]), q_max=np.array([9.0, 0.0]))
    found = why("soc", network, replace(inputs, load_q=np.array([0.0, 0.5])))
    assert {r.kind for r in found.relaxations} <= {"voltage", "reactive shortage", "unserved"}
    assert found.relaxations
    assert found.sentence.startswith("The smallest change that makes it feasible: ")


def test_must_run_surplus_is_named() -> None:
    network, inputs = grid([("1", "2", 0.0, 0.1, FREE)], [("1", 150.0, 20.0)], {"2": 100.0})
    forced = replace(inputs, p_min=np.array([1.5]), segments=replace(inputs.segments, width=np.zeros(1)))
    found = why("dc", network, forced)
    assert {r.kind for r in found.relaxations} == {"surplus"}
    assert sum(r.amount for r in found.relaxations) == pytest.approx(50.0)


def test_stranded_load_is_named() -> None:
    network, inputs = grid(
        [("1", "2", 0.0, 0.1, FREE), ("3", "4", 0.0, 0.1, FREE)], [("1", 500.0, 20.0)], {"2": 100.0, "4": 10.0}
    )
    found = why("dc", network, inputs)
    assert found.sentence == "no resource in service is connected to the load at 4"
    assert found.relaxations[0].amount == pytest.approx(10.0)


def test_growth_beyond_the_last_step() -> None:
    # 1600 MW against the published last step at 1484.06 MW.
    found = why("dc", *five_bus_growth(1600.0))
    total = sum(r.amount for r in found.relaxations)
    assert total > 0.0
    assert any(r.kind == "unserved" for r in found.relaxations)
    assert "fixed load 1600 MW" in found.sentence


@pytest.mark.parametrize("name", CONVEX)
def test_the_named_changes_do_make_it_feasible(name: str) -> None:
    network, inputs = load_network("case30")
    heavy = scale_load(inputs, 1.35)
    found = why(name, network, heavy)
    load_p, load_q = heavy.load_p.copy(), heavy.load_q.copy()
    rating = network.normal_rating.copy()
    extra = {"voltage": 0.0, "angle": 0.0}
    for r in found.relaxations:
        if r.kind in ("unserved", "surplus"):
            load_p[network.buses.index(r.name)] -= (r.amount if r.kind == "unserved" else -r.amount) / 100
        elif r.kind.startswith("reactive"):
            load_q[network.buses.index(r.name)] -= (r.amount if "shortage" in r.kind else -r.amount) / 100
        elif r.kind == "thermal":
            rating[network.branches.index(r.name.split(" ")[0])] += r.amount / 100
        else:
            extra[r.kind] = max(extra[r.kind], r.amount)
    eased = network.with_changes(
        normal_rating=rating + 1e-4,
        v_min=network.v_min - extra["voltage"],
        v_max=network.v_max + extra["voltage"] + 1e-6,
    )
    relieved = replace(heavy, load_p=load_p - 1e-5 * (load_p > 0), load_q=load_q - 1e-5 * (load_q > 0))
    assert solve(name, eased, relieved).status is SolveStatus.OPTIMAL


def test_feasible_interval_says_so() -> None:
    network, inputs = load_network("case5")
    none = FlowLimits.none(network.n_branch)
    assert diagnose("dc", network, inputs, none, OPTIONS).sentence == "the limits can all be satisfied"
    assert "no limit is proven too tight" in diagnose("ac", network, inputs, none, OPTIONS).sentence


def test_penalties_that_do_not_reach_far_enough() -> None:
    network, inputs = grid([("1", "2", 0.0, 0.1, 60.0)], [("1", 500.0, 20.0)], {"2": 100.0})
    soft = DispatchOptions(penalties=Penalties(transmission=1500.0))
    found = diagnose("dc", network, scale_load(inputs, 6.0), FlowLimits.none(1), soft)
    assert any(r.kind == "unserved" for r in found.relaxations)


def test_with_a_balance_penalty_only_hard_limits_are_in_the_way() -> None:
    """20 MW are forced through the line, 10 MW can be produced: what the penalty allows anyway is no cause."""
    network, inputs = grid([("1", "2", 0.0, 0.1, FREE)], [("1", 10.0, 20.0)], {"2": 5.0})
    forced = network.with_changes(angle_min=np.array([0.02]))
    soft = DispatchOptions(penalties=Penalties(power_balance=2000.0))
    none = FlowLimits.none(network.n_branch)
    assert solve("dc", forced, inputs, soft, none).status is SolveStatus.INFEASIBLE
    found = diagnose("dc", forced, inputs, none, soft)
    assert (
        found.sentence == "The smallest change that makes it feasible: the limit angle L1 lower is widened by 0.573 deg"
    )
