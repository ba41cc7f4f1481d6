"""Audit and repair of linear dispatches: closed forms on two buses, and the common facts on published networks."""

from dataclasses import replace

import numpy as np
import pytest
from scipy import sparse
from scipy.optimize import brentq

from lmpgap.dispatch.ac import AcDispatch
from lmpgap.dispatch.ac_audit import AcAudit, audit_dispatch
from lmpgap.dispatch.ac_repair import MOVEMENT_FACTOR, Repair, repair_dispatch
from lmpgap.dispatch.dc import DcDispatch
from lmpgap.dispatch.dc_loss import DcLossDispatch
from lmpgap.dispatch.limits import FlowLimits
from lmpgap.dispatch.options import DispatchOptions
from lmpgap.dispatch.result import DispatchResult, SolveStatus
from lmpgap.errors import SolveError
from lmpgap.scenario.network import BidSegments, IntervalInputs, Network
from tests.dispatch.small_networks import two_bus
from tests.support.networks import load_network, scale_load

NETWORKS = ("case3", "case5", "case14", "case30", "case118")


def linear(network: Network, inputs: IntervalInputs, *, losses: bool = False) -> DispatchResult:
    builder = DcLossDispatch if losses else DcDispatch
    dispatch = builder(network, inputs.branch_in_service, DispatchOptions())
    return dispatch.solve(inputs, FlowLimits.none(network.n_branch))


def optimum(network: Network, inputs: IntervalInputs) -> DispatchResult:
    dispatch = AcDispatch(network, inputs.branch_in_service, DispatchOptions())
    return dispatch.solve(inputs, FlowLimits.none(network.n_branch))


def audit(network: Network, inputs: IntervalInputs, result: DispatchResult, **choices: object) -> AcAudit:
    return audit_dispatch(network, inputs, result, FlowLimits.none(network.n_branch), **choices)  # type: ignore[arg-type]


def repair(network: Network, inputs: IntervalInputs, result: DispatchResult, price: float | None = None) -> Repair:
    dispatch = AcDispatch(network, inputs.branch_in_service, DispatchOptions())
    return repair_dispatch(network, inputs, result, FlowLimits.none(network.n_branch), dispatch, movement_price=price)


# --- common practice: facts of the trade that carry no source --------------------------------------


@pytest.mark.parametrize("name", NETWORKS)
def test_lossless_dispatch_never_satisfies_the_ac_balance(name: str) -> None:
    """Its generation equals load; the AC dispatch's exceeds it as soon as one lossy line carries power."""
    network, inputs = load_network(name)
    dc = linear(network, inputs)
    shunts = network.shunt_g.sum()  # at 1 pu in a linear dispatch
    assert dc.p.sum() == pytest.approx(inputs.load_p.sum() + shunts, abs=1e-6)
    assert optimum(network, inputs).p.sum() > inputs.load_p.sum() + 1e-3
    found = audit(network, inputs, dc)
    assert found.converged
    assert found.missing_mw > 0.1
    supplied = network.base_mva * dc.p.sum() + found.missing_mw
    assert supplied - network.base_mva * inputs.load_p.sum() == pytest.approx(found.losses_mw, abs=1e-5)
    assert found.slack_mw.sum() == pytest.approx(found.missing_mw)


def test_without_flow_linear_and_ac_dispatch_and_prices_coincide() -> None:
    """Every bus serves its own load at the same marginal cost, so that no line carries power."""
    network, inputs = two_bus(r=0.02, x=0.1, load_mw=150.0, load_mvar=40.0)
    inputs = replace(
        inputs,
        load_p=np.array([1.0, 1.5]),
        load_q=np.array([0.3, 0.4]),
        segments=replace(inputs.segments, price_start=np.array([20.0, 15.0]), price_end=np.array([70.0, 65.0])),
    )
    dc, ac = linear(network, inputs), optimum(network, inputs)
    np.testing.assert_allclose(100 * dc.p, [100.0, 150.0], atol=1e-3)
    np.testing.assert_allclose(100 * ac.p, 100 * dc.p, atol=1e-3)
    np.testing.assert_allclose(ac.multipliers.active / 100, [30.0, 30.0], atol=1e-3)
    np.testing.assert_allclose(dc.multipliers.active / 100, [30.0, 30.0], atol=1e-3)
    assert ac.objective == pytest.approx(dc.objective, rel=1e-6)
    assert abs(audit(network, inputs, dc).missing_mw) < 1e-3


@pytest.mark.parametrize("name", ["case14", "case118"])
def test_difference_in_generation_and_cost_grows_with_loading(name: str) -> None:
    network, inputs = load_network(name)
    generation, cost = [], []
    for factor in (0.6, 0.7, 0.8, 0.9, 1.0):
        scaled = scale_load(inputs, factor)
        dc, ac = linear(network, scaled), optimum(network, scaled)
        generation.append(ac.p.sum() - dc.p.sum())
        cost.append(ac.objective - dc.objective)
    assert np.all(np.diff(generation) > 0)
    assert np.all(np.diff(cost) > 0)


def test_angles_differ_even_at_equal_generation() -> None:
    """|sin a| < |a|, so the AC angle is the larger one; with conductance the sending end turns further still."""
    x, power = 0.1, 3.0
    network, inputs = two_bus(x=x, load_mw=100 * power)
    dc = linear(network, inputs)
    lossless = audit(network, inputs, dc)
    assert lossless.dispatch_angle_deg[0] == pytest.approx(np.rad2deg(power * x), abs=1e-6)
    assert lossless.angle_deg[0] == pytest.approx(np.rad2deg(np.arcsin(power * x)), abs=1e-6)
    assert lossless.largest_angle_error_deg == pytest.approx(np.rad2deg(np.arcsin(power * x) - power * x), abs=1e-6)
    assert abs(lossless.missing_mw) < 1e-6
    lossy = audit(network.with_changes(r=np.array([0.02])), inputs, dc, slack_bus="west")
    assert lossy.angle_deg[0] > lossless.angle_deg[0]


@pytest.mark.parametrize("name", NETWORKS)
def test_losses_estimated_leave_less_missing_than_losses_left_out(name: str) -> None:
    network, inputs = load_network(name)
    without = audit(network, inputs, linear(network, inputs))
    estimated = audit(network, inputs, linear(network, inputs, losses=True))
    assert abs(estimated.missing_mw) < 0.15 * without.missing_mw


# --- audit -----------------------------------------------------------------------------------------


def test_missing_power_of_one_line_in_closed_form() -> None:
    r, x, load = 0.02, 0.1, 2.0
    network, inputs = two_bus(r=r, x=x, load_mw=100 * load, rating_mva=200.0)
    dc = linear(network, inputs)
    found = audit(network, inputs, dc, slack_bus="west")
    g, b = r / (r * r + x * x), x / (r * r + x * x)
    angle = brentq(lambda t: g * (1 - np.cos(t)) - b * np.sin(t) + load, 0.0, 1.0)
    loss = 2 * g * (1 - np.cos(angle))
    assert found.missing_mw == pytest.approx(100 * loss, abs=1e-5)
    np.testing.assert_allclose(found.slack_mw, [100 * loss, 0.0], atol=1e-5)
    apparent = 2 * np.sin(angle / 2) / np.hypot(r, x)
    assert found.broken.kind == ("thermal",)
    assert found.broken.monitored == ("line",)
    assert found.broken.direction == ("forward",)
    assert found.broken.unit == ("MVA",)
    assert found.broken.limit == pytest.approx([200.0])
    assert found.broken.value == pytest.approx([100 * apparent], abs=1e-4)


def test_shared_slack_goes_by_capacity_and_breaks_output_ranges() -> None:
    network, inputs = two_bus(r=0.02, x=0.1, load_mw=200.0, capacity_mw=(200.0, 50.0))
    dc = linear(network, inputs)
    found = audit(network, inputs, dc)
    np.testing.assert_allclose(found.slack_mw, found.missing_mw * np.array([0.8, 0.2]), rtol=1e-9)
    assert found.broken.kind == ("output",)
    assert found.broken.monitored == ("west unit",)
    assert found.broken.value == pytest.approx([200.0 + 0.8 * found.missing_mw], abs=1e-6)


def test_reactive_limits_are_enforced_or_listed() -> None:
    network, inputs = two_bus(x=0.1, load_mw=300.0, q_mvar=(np.inf, 20.0), v=((0.95, 1.05), (0.99, 1.05)))
    dc = linear(network, inputs)
    enforced = audit(network, inputs, dc)
    assert list(enforced.at_reactive_limit) == [0, 1]
    assert enforced.broken.kind == ("voltage",)
    assert enforced.broken.direction == ("lower",)
    assert enforced.broken.value[0] < enforced.broken.limit[0] == 0.99
    listed = audit(network, inputs, dc, enforce_reactive=False)
    assert listed.broken.kind == ("reactive",)
    # Both ends of a lossless line at 1 pu supply half of what it takes.
    assert listed.broken.value == pytest.approx([100 * (1 - np.cos(np.arcsin(0.3))) / 0.1], abs=1e-5)
    assert listed.broken.limit == pytest.approx([20.0])


def test_shortage_of_reactive_power_is_named_as_the_cause() -> None:
    """Without reactive help at the far end the line carries at most 1/(2x) = 5 pu; with it up to 10 pu."""
    network, inputs = two_bus(x=0.1, load_mw=550.0, capacity_mw=(1200.0, 10.0), q_mvar=(np.inf, 1e-9))
    found = audit(network, inputs, linear(network, inputs))
    assert not found.converged
    assert "reactive power is what is short" in found.reason
    assert np.isnan(found.missing_mw)
    assert found.broken.n_row == 0
    inputs = scale_load(inputs, 1050 / 550)
    beyond = audit(network, inputs, linear(network, inputs))
    assert not beyond.converged
    assert "short" not in beyond.reason


def test_voltage_setpoints_are_those_given_or_nearest_to_one_per_unit() -> None:
    network, inputs = two_bus(x=0.1, load_mw=100.0, v=((1.02, 1.05), (0.9, 0.98)))
    dc = linear(network, inputs)
    np.testing.assert_allclose(audit(network, inputs, dc).flow.magnitude, [1.02, 0.98])
    given = audit(network, inputs, dc, voltage=np.array([1.03, 1.0]))
    np.testing.assert_allclose(given.flow.magnitude, [1.03, 1.0])
    assert given.broken.kind == ("voltage",)
    assert given.broken.monitored == ("east",)
    assert given.broken.direction == ("upper",)


def test_contingency_limits_are_looked_at_too() -> None:
    network, inputs = two_bus(x=0.1, load_mw=100.0)
    limits = FlowLimits(
        weights=sparse.csr_array(np.ones((1, 1))),
        limit=np.array([0.9]),
        kind=("contingency",),
        contingency=("loss of a twin",),
        monitored=("line",),
        direction=("forward",),
    )
    found = audit_dispatch(network, inputs, linear(network, inputs), limits)
    assert found.broken.kind == ("contingency",)
    assert found.broken.contingency == ("loss of a twin",)
    assert found.broken.value == pytest.approx([100.0], abs=1e-5)


def test_ac_dispatch_at_its_own_voltages_passes_its_audit() -> None:
    network, inputs = load_network("case118")
    ac = optimum(network, inputs)
    found = audit(network, inputs, ac, voltage=np.sqrt(ac.point.w))
    assert abs(found.missing_mw) < 1e-4
    assert found.broken.n_row == 0
    assert found.largest_angle_error_deg < 1e-6


def test_refusals_say_what_to_do() -> None:
    network, inputs = two_bus(load_mw=100.0)
    dc = linear(network, inputs)
    with pytest.raises(SolveError, match="no bus 'north'"):
        audit(network, inputs, dc, slack_bus="north")
    without = replace(dc, status=SolveStatus.INFEASIBLE)
    with pytest.raises(SolveError, match="cannot be audited"):
        audit(network, inputs, without)
    with pytest.raises(SolveError, match="cannot be repaired"):
        repair(network, inputs, without)


# --- repair ----------------------------------------------------------------------------------------


def test_repair_of_one_line_in_closed_form() -> None:
    """301 MVA carry 300 MW in the linear model, but less active power at the angle where both ends reach 301 MVA."""
    network, inputs = two_bus(x=0.1, load_mw=300.0, rating_mva=301.0)
    dc = linear(network, inputs)
    np.testing.assert_allclose(100 * dc.p, [300.0, 0.0], atol=1e-6)
    carried = 100 * np.sin(2 * np.arcsin(0.1 * 3.01 / 2)) / 0.1
    found = repair(network, inputs, dc)
    for way in (found.cheapest, found.nearest):
        np.testing.assert_allclose(way.change_mw, [carried - 300.0, 300.0 - carried], atol=1e-4)
        assert way.up_mw == pytest.approx(300.0 - carried, abs=1e-4)
        assert way.down_mw == pytest.approx(300.0 - carried, abs=1e-4)
        assert way.moved_mw == pytest.approx(2 * (300.0 - carried), abs=1e-4)
        assert way.cost_of_repair == pytest.approx(30.0 * (300.0 - carried), abs=1e-2)
    assert found.linear_cost == pytest.approx(6000.0, abs=1e-4)
    assert abs(found.cost_over_optimum) < 1e-2
    assert found.movement_price == MOVEMENT_FACTOR * 30.0


@pytest.mark.parametrize(("price", "moves"), [(14.0, True), (16.0, False)])
def test_movement_happens_when_it_saves_more_than_its_price(price: float, moves: bool) -> None:
    """Shifting a MW from 50 to 20 $/MWh moves two MW and saves 30 $."""
    network, inputs = two_bus(x=0.1, load_mw=300.0)
    dc = replace(linear(network, inputs), p=np.array([1.0, 2.0]), objective=20.0 * 100 + 50.0 * 200)
    found = repair(network, inputs, dc, price)
    np.testing.assert_allclose(found.nearest.result.p, [3.0, 0.0] if moves else [1.0, 2.0], atol=1e-5)
    np.testing.assert_allclose(found.cheapest.change_mw, [200.0, -200.0], atol=1e-3)
    assert found.cost_over_optimum == pytest.approx(0.0 if moves else 6000.0, abs=0.1)


def test_bids_count_as_movement() -> None:
    network, inputs = two_bus(x=0.1, load_mw=100.0)
    inputs = replace(inputs, bids=BidSegments(bus=np.array([1]), width=np.array([1.0]), price=np.array([30.0])))
    dc = linear(network, inputs)
    assert dc.bid_served == pytest.approx([1.0])
    altered = replace(dc, p=dc.p - np.array([0.5, 0.0]), bid_served=np.array([0.5]))
    found = repair(network, inputs, altered)
    assert found.nearest.bid_change_mw == pytest.approx([0.0], abs=1e-4)
    assert found.nearest.moved_mw < 1e-3
    assert found.cheapest.bid_change_mw == pytest.approx([50.0], abs=1e-3)
    # Half a bid of 100 MW at 30 $/MWh that could have been served at 20 $/MWh.
    assert found.cost_over_optimum == pytest.approx(500.0, abs=0.1)


@pytest.mark.parametrize("name", NETWORKS)
@pytest.mark.parametrize("losses", [False, True])
def test_repair_of_published_networks(name: str, losses: bool) -> None:
    network, inputs = load_network(name)
    dispatch = linear(network, inputs, losses=losses)
    found = repair(network, inputs, dispatch)
    ac = optimum(network, inputs)
    assert found.cheapest.cost == pytest.approx(ac.objective, rel=1e-7)
    assert found.nearest.result.status is SolveStatus.LOCALLY_OPTIMAL
    # The nearest moves no more and costs no less than the cheapest.
    assert found.nearest.moved_mw <= found.cheapest.moved_mw + 1e-3
    assert found.cost_over_optimum > -1e-6 * ac.objective
    for way in (found.cheapest, found.nearest):
        net = network.base_mva * (way.result.p.sum() - dispatch.p.sum())
        assert way.up_mw - way.down_mw == pytest.approx(net, abs=1e-6)
        assert way.cost_of_repair == pytest.approx(way.cost - dispatch.objective)
        # What was repaired passes the audit at its own voltages.
        after = audit(network, inputs, way.result, voltage=np.sqrt(way.result.point.w))
        assert after.broken.n_row == 0
        assert abs(after.missing_mw) < 1e-3


def test_repair_without_a_solution_has_no_figures() -> None:
    network, inputs = load_network("case5")
    dc = linear(network, inputs)
    found = repair(network, scale_load(inputs, 3.0), dc)
    assert found.cheapest.result.status is SolveStatus.INFEASIBLE
    assert np.isnan(found.cost_over_optimum)
    assert np.isnan(found.nearest.moved_mw)
