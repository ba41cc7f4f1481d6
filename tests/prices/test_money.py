"""The money balance in special cases: losses in closed form, shifters, shunts, soft limits, bids, frozen factors."""

from __future__ import annotations

from dataclasses import fields, replace

import numpy as np
import pytest
from scipy import sparse

from lmpgap.dispatch.formulation import build_formulation
from lmpgap.dispatch.frozen import DeliveryFactorDispatch, FrozenLossDispatch
from lmpgap.dispatch.limits import FlowLimits
from lmpgap.dispatch.options import DispatchOptions
from lmpgap.prices.components import split_prices
from lmpgap.prices.money import MoneyBalance, money_balance
from lmpgap.scenario.settings import Penalties
from tests.prices.solved import loaded, solved, split
from tests.prices.support import lossless_dispatch, simple_inputs, small_network

FORMULATIONS = ("dc", "dc-loss", "soc", "ac")


def balance_of(network, inputs, result, *, hours: float = 1.0) -> MoneyBalance:
    assert result.status.has_solution, result.message
    parts = split_prices(network, inputs.branch_in_service, result, inputs.load_p)
    assert parts.price_residual < 1e-3
    return money_balance(network, inputs, result, parts, hours=hours)


def solve(name, network, inputs, *, limits=None, penalties=None):
    options = DispatchOptions(penalties=penalties or Penalties())
    formulation = build_formulation(name, network, inputs.branch_in_service, options)
    return formulation.solve(inputs, limits or FlowLimits.none(network.n_branch), None)


def test_two_buses_with_losses_in_closed_form():
    """Loss k F^2, half at each end: price ratio (1 + kF)/(1 - kF), F = D + kF^2/2.

    Closed form: 300 MW at $20 and k = 1e-4 per MW give 21.2568 $/MWh, 9.2806 MW of loss and an over-collection of
    loss times the mean of both prices, $191.44.
    """
    # k F^2 [MW, F in MW] with base 100: g/b^2 = k base; r = g/b^2 where b = 1/x.
    network = small_network(2, [(0, 1, 0.1, np.inf)], resource_bus=[0], resistance=1e-4 * 100)
    inputs = simple_inputs(network, [0, 300], [(0, 400, 20)])
    result = solve("dc-loss", network, inputs)
    parts = split_prices(network, inputs.branch_in_service, result, inputs.load_p)
    np.testing.assert_allclose(parts.lmp, [20.0, 21.2568], atol=1e-4)
    money = balance_of(network, inputs, result)
    assert money.surplus == pytest.approx(191.44, abs=0.01)
    assert money.by_constraints.losses == pytest.approx(191.44, abs=0.01)
    assert money.by_components.loss_surplus == pytest.approx(191.44, abs=0.01)
    assert 100 * result.p.sum() - 300 == pytest.approx(9.2806, abs=1e-3)


def test_quarter_hours():
    network, inputs = loaded("case5")
    hour = money_balance(network, inputs, solved("case5", "ac"), split("case5", "ac"))
    quarter = money_balance(network, inputs, solved("case5", "ac"), split("case5", "ac"), hours=0.25)
    for item in fields(hour.by_constraints):
        assert getattr(quarter.by_constraints, item.name) == pytest.approx(getattr(hour.by_constraints, item.name) / 4)
    assert quarter.surplus == pytest.approx(hour.surplus / 4)


@pytest.mark.parametrize("name", FORMULATIONS)
def test_shifters_taps_and_shunts(name):
    """Phase shifters and shunt conductances, with and without a binding limit beside them."""
    network, inputs = loaded("case30")
    shift = np.zeros(network.n_branch)
    shift[[0, 4, 11]] = np.deg2rad([3.0, -2.0, 4.0])
    shunt = network.shunt_g.copy()
    shunt[[3, 20]] = [0.02, 0.05]
    changed = network.with_changes(shift=shift, shunt_g=shunt)
    money = balance_of(changed, inputs, solve(name, changed, inputs))
    assert money.relative_remainder < 1e-6
    if name in ("dc", "dc-loss"):
        assert abs(money.by_constraints.phase_shifters) > 1.0
        assert money.by_constraints.shunts < -10.0


@pytest.mark.parametrize("name", ["dc", "dc-loss"])
@pytest.mark.parametrize("reversed_branch", [False, True])
def test_a_lower_angle_limit_is_worth_as_much_as_the_upper_one_of_the_branch_turned_round(name, reversed_branch):
    """$10 in the west, $30 in the east, one line of x = 0.1 held to 2 deg: rent (30 - 10) x 34.907 MW."""
    limit = np.deg2rad(2.0)
    ends = (1, 0) if reversed_branch else (0, 1)
    network = small_network(2, [(*ends, 0.1, np.inf)], resource_bus=[0, 1]).with_changes(
        angle_min=np.array([-limit]), angle_max=np.array([limit])
    )
    inputs = simple_inputs(network, [0, 100], [(0, 400, 10), (1, 400, 30)])
    result = solve(name, network, inputs)
    (binding,) = np.flatnonzero(result.constraints.multiplier > 1e-3)
    assert result.constraints.direction[binding] == ("lower" if reversed_branch else "upper")
    money = balance_of(network, inputs, result)
    assert money.by_constraints.congestion_rent == pytest.approx(20.0 * 100.0 * limit / 0.1, rel=1e-6)
    assert money.relative_remainder < 1e-6


@pytest.mark.parametrize("name", FORMULATIONS)
def test_weighted_flow_limits(name):
    """A limit on a weighted sum of flows, as interfaces and contingencies are."""
    network, inputs = loaded("case118")
    flow = solved("case118", name).point.p_from
    weights = np.zeros((1, network.n_branch))
    weights[0, [7, 20, 40]] = [1.0, -1.0, 0.5]
    value = float(weights[0] @ flow)
    weights *= np.sign(value)
    limits = FlowLimits(
        weights=sparse.csr_array(weights),
        limit=np.array([0.8 * abs(value)]),
        kind=("interface",),
        contingency=("",),
        monitored=("West",),
        direction=("forward",),
    )
    result = solve(name, network, inputs, limits=limits)
    money = balance_of(network, inputs, result)
    assert "interface" in result.constraints.kind
    assert result.constraints.multiplier[result.constraints.kind.index("interface")] > 1.0
    assert money.relative_remainder < 1e-6


@pytest.mark.parametrize("name", FORMULATIONS)
def test_soft_limits_and_unserved_load(name):
    """A limit that gives way at its penalty, and load behind it that is not served at its own."""
    network, inputs = loaded("case5")
    tight = network.with_changes(normal_rating=0.3 * network.normal_rating)
    penalties = Penalties(power_balance=2000.0, transmission=120.0)
    result = solve(name, tight, inputs, penalties=penalties)
    money = balance_of(tight, inputs, result)
    assert result.constraints.at_penalty.any()
    assert money.by_constraints.beyond_limits > 100.0
    assert money.relative_remainder < 1e-6
    hard = solve(name, tight, inputs, penalties=Penalties(power_balance=2000.0))
    money = balance_of(tight, inputs, hard)
    assert hard.unserved.sum() > 0.1
    assert money.unserved_load > 1000.0
    assert money.relative_remainder < 1e-6


@pytest.mark.parametrize("name", FORMULATIONS)
def test_bids_pay_like_load(name):
    network = small_network(3, [(0, 1, 0.1, 60.0), (1, 2, 0.2, 90.0), (0, 2, 0.1, 70.0)], resource_bus=[0, 2])
    network = network.with_changes(q_min=np.full(2, -3.0), q_max=np.full(2, 3.0), r=np.full(3, 0.01))
    inputs = simple_inputs(network, [0, 60, 60], [(0, 200, 20), (1, 200, 50)], bids=[(1, 40, 45.0), (2, 30, 52.0)])
    result = solve(name, network, inputs)
    assert result.bid_served.sum() > 0.0
    money = balance_of(network, inputs, result)
    assert money.relative_remainder < 1e-6


def test_frozen_losses_around_another_dispatch():
    network, inputs = loaded("case30")
    base = solved("case30", "dc-loss", 0.8)
    frozen = FrozenLossDispatch(network, inputs.branch_in_service, DispatchOptions(), base)
    money = balance_of(network, inputs, frozen.solve(inputs, FlowLimits.none(network.n_branch), None))
    assert money.by_constraints.losses > 10.0
    assert money.relative_remainder < 1e-6


def test_given_delivery_factors():
    network, inputs = loaded("case30")
    factors = split("case30", "ac", 0.8).delivery_factor
    dispatch = DeliveryFactorDispatch(
        network,
        inputs.branch_in_service,
        DispatchOptions(),
        delivery_factor=factors,
        loss_distribution=inputs.load_p / inputs.load_p.sum(),
    )
    result = dispatch.solve(inputs, FlowLimits.none(network.n_branch), None)
    parts = split_prices(network, inputs.branch_in_service, result, inputs.load_p)
    assert result.frozen is not None
    np.testing.assert_allclose(parts.delivery_factor, factors, atol=1e-9)  # the same reference
    money = balance_of(network, inputs, result)
    assert money.by_constraints.congestion_rent > 1.0
    assert money.by_components.loss_surplus > 1.0
    assert money.relative_remainder < 1e-6


def test_a_wrong_shadow_price_leaves_a_remainder():
    network = small_network(2, [(0, 1, 0.1, 40.0)], resource_bus=[0, 1])
    inputs = simple_inputs(network, [0, 100], [(0, 200, 20), (1, 200, 60)])
    result = lossless_dispatch(network, inputs)
    rows = replace(result.constraints, multiplier=1.1 * result.constraints.multiplier)
    parts = split_prices(network, inputs.branch_in_service, result, inputs.load_p)
    money = money_balance(network, inputs, replace(result, constraints=rows), parts)
    assert money.remainder_by_constraints == pytest.approx(-0.1 * 40 * 40)
    assert money.relative_remainder > 1e-3


def test_rows_of_each_basis_add_up_to_the_surplus():
    network, inputs = loaded("case14")
    money = money_balance(network, inputs, solved("case14", "ac"), split("case14", "ac"))
    rows = list(money.rows())
    for basis in ("components", "constraints"):
        assert sum(amount for _, b, amount in rows if b == basis) == pytest.approx(money.surplus)
    total = {item: amount for item, basis, amount in rows if basis == "total"}
    assert total["load payments"] - total["generator receipts"] == pytest.approx(total["surplus"])
    split_by = {(item, basis): amount for item, basis, amount in rows}
    assert total["congestion by components less congestion rent"] == pytest.approx(
        split_by["congestion", "components"] - split_by["congestion rent", "constraints"]
    )


def test_given_delivery_factors_in_two_islands():
    """Each island has its own energy price, reference and loss, and the money still closes."""
    network = small_network(
        5, [(0, 1, 0.1, 40.0), (1, 2, 0.1, np.inf), (3, 4, 0.1, np.inf)], resource_bus=[0, 2, 3], resistance=0.02
    )
    inputs = simple_inputs(network, [0, 60, 0, 0, 80], [(0, 200, 20), (1, 200, 50), (2, 200, 30)])
    dispatch = DeliveryFactorDispatch(
        network,
        inputs.branch_in_service,
        DispatchOptions(),
        delivery_factor=np.array([0.97, 1.0, 1.01, 0.96, 1.0]),
        loss_distribution=inputs.load_p,
    )
    result = dispatch.solve(inputs, FlowLimits.none(network.n_branch), None)
    parts = split_prices(network, inputs.branch_in_service, result, inputs.load_p)
    np.testing.assert_allclose(parts.lmp[[0, 2, 3]], [20.0, 50.0, 30.0], atol=1e-6)
    assert parts.energy[0] != pytest.approx(parts.energy[3], abs=1.0)
    np.testing.assert_allclose(parts.delivery_factor, [0.97, 1.0, 1.01, 0.96, 1.0])
    np.testing.assert_allclose(parts.congestion[3:], 0.0, atol=1e-9)
    money = balance_of(network, inputs, result)
    assert money.relative_remainder < 1e-6
