"""The AC check of relaxed dispatches against figures found beforehand with separate code on the same networks."""

from dataclasses import replace

import numpy as np
import pytest

from lmpgap.dispatch.ac import AcDispatch
from lmpgap.dispatch.ac_check import ac_check
from lmpgap.dispatch.limits import FlowLimits
from lmpgap.dispatch.options import DispatchOptions
from lmpgap.dispatch.soc import SocDispatch
from lmpgap.scenario.settings import Penalties
from tests.dispatch.small_networks import two_bus
from tests.support.networks import load_network, scale_load

# Network, load factor, largest nodal mismatch [MW], largest overload [%]: computed before this code was written.
KNOWN = [
    ("case3", 1.0, 0.4, 20),
    ("case5", 1.0, 0.3, 18),
    ("case5", 0.5, 0.002, 0),
    ("case5", 0.7, 0.04, 3),
    ("case14", 1.0, 0.4, 0),
    ("case30", 1.0, 2.2, 31),
    ("case118", 1.0, 8.0, 17),
]


@pytest.mark.parametrize(("name", "factor", "mismatch_mw", "overload_percent"), KNOWN)
def test_mismatch_and_overload(name: str, factor: float, mismatch_mw: float, overload_percent: float) -> None:
    network, inputs = load_network(name)
    inputs = scale_load(inputs, factor)
    none = FlowLimits.none(network.n_branch)
    result = SocDispatch(network, inputs.branch_in_service, DispatchOptions()).solve(inputs, none)
    check = ac_check(network, inputs, result, none)
    assert check.converged
    assert check.iterations <= 4
    assert check.mismatch_mw == pytest.approx(mismatch_mw, rel=0.12)
    assert 100 * check.overload == pytest.approx(overload_percent, abs=0.5)
    assert (check.overloaded != "") == (overload_percent > 0)


@pytest.mark.parametrize("name", ["case3", "case14", "case118"])
def test_nothing_is_found_at_an_ac_dispatch(name: str) -> None:
    network, inputs = load_network(name)
    none = FlowLimits.none(network.n_branch)
    result = AcDispatch(network, inputs.branch_in_service, DispatchOptions()).solve(inputs, none)
    check = ac_check(network, inputs, result, none)
    assert check.mismatch_mw < 1e-4
    assert check.missing_mw < 1e-4
    assert check.overload < 1e-6
    assert check.voltage_pu < 1e-7
    assert check.reactive_mvar < 1e-4
    assert check.active_mw < 1e-3


def test_every_limit_is_seen() -> None:
    """An AC dispatch checked against a network with tighter limits breaks each of them by the known amount."""
    network, inputs = load_network("case5")
    none = FlowLimits.none(network.n_branch)
    result = AcDispatch(network, inputs.branch_in_service, DispatchOptions()).solve(inputs, none)
    turn = result.point.angle[network.from_bus] - result.point.angle[network.to_bus]
    tight = network.with_changes(
        v_max=network.v_max - 0.01,
        q_max=np.full(network.n_resource, -10.0),
        q_min=np.full(network.n_resource, -10.1),
        angle_max=np.where(np.arange(network.n_branch) == 0, turn - np.deg2rad(1.5), np.inf),
    )
    check = ac_check(tight, replace(inputs, p_max=inputs.p_max - 0.5), result, none)
    assert check.voltage_pu == pytest.approx(np.sqrt(result.point.w).max() - 1.09, abs=1e-6)
    assert check.angle_deg == pytest.approx(1.5, abs=1e-6)
    assert check.active_mw == pytest.approx(50.0, abs=1e-2)
    at_bus = np.bincount(network.resource_bus, result.q, network.n_bus)
    count = np.bincount(network.resource_bus, minlength=network.n_bus)
    excess = np.where(count > 0, at_bus + 10.0 * count, 0.0)
    assert check.reactive_mvar == pytest.approx(100 * excess.max(), rel=1e-6)


def test_what_gave_way_at_a_penalty_is_part_of_the_dispatch() -> None:
    network, inputs = two_bus(load_mw=300.0, rating_mva=200.0, capacity_mw=(500.0, 50.0))
    options = DispatchOptions(penalties=Penalties(transmission=1500.0))
    none = FlowLimits.none(network.n_branch)
    result = AcDispatch(network, inputs.branch_in_service, options).solve(inputs, none)
    assert result.point.p_from[0] > 2.4
    assert ac_check(network, inputs, result, none).overload < 1e-6


def test_power_flow_without_solution_is_told() -> None:
    network, inputs = two_bus(load_mw=100.0)
    none = FlowLimits.none(network.n_branch)
    result = AcDispatch(network, inputs.branch_in_service, DispatchOptions()).solve(inputs, none)
    weak = network.with_changes(x=np.array([2.0]))
    check = ac_check(weak, inputs, replace(result, p=np.array([3.0, 0.0])), none)
    assert not check.converged
    assert check.reason
    assert check.overload == np.inf
