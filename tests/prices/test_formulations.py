"""The split, its residual and the money balance on solved networks, all four formulations."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from scipy import sparse

from lmpgap.prices.components import split_prices
from lmpgap.prices.money import money_balance
from lmpgap.prices.reference import rereference
from tests.prices.solved import CASES, FORMULATIONS, certified, loaded, solved, split

RESIDUAL = {"dc": 1e-6, "dc-loss": 1.5e-4, "soc": 1e-4, "ac": 1e-5}
"""Ceilings of the price residual [$/MWh]; measured at 5e-10, 1e-4, 2e-5 and 1e-6, and 1e-3 is what is asked for."""


@pytest.mark.parametrize("name", FORMULATIONS)
@pytest.mark.parametrize("case", CASES)
def test_price_residual_and_sum(case, name):
    parts = split(case, name)
    assert parts.price_residual < RESIDUAL[name]
    total = parts.energy + parts.congestion + parts.loss + parts.reactive
    np.testing.assert_allclose(total, parts.lmp, atol=1e-9)
    by_key = parts.congestion_by_key.sum(axis=0)
    np.testing.assert_allclose(by_key, parts.congestion, atol=1e-9)
    assert parts.reactive_sources is not None
    np.testing.assert_allclose(parts.reactive_sources.amount.sum(axis=0), parts.reactive, atol=1e-9)


@pytest.mark.parametrize(
    ("case", "name", "prices", "tolerance"),
    [
        # Computed from the data of arXiv:1908.02788; objectives agree with its published table.
        ("case5", "dc", [16.9774, 26.3845, 30.0, 39.9427, 10.0], 6e-5),
        ("case5", "soc", [29.5212, 29.9859, 30.0, 29.8838, 29.4079], 2e-4),
        ("case5", "ac", [16.9351, 26.5499, 30.0, 39.7121, 10.0], 6e-5),
        ("case3", "ac", [37.5747, 30.1011, 45.5365], 6e-5),
        ("case3", "soc", [33.8762, 32.9284, 36.2895], 2e-4),
        ("case3", "dc", [36.7533, 30.2133, 41.2587], 6e-5),
    ],
)
def test_prices_of_the_benchmark_networks(case, name, prices, tolerance):
    np.testing.assert_allclose(split(case, name).lmp, prices, atol=tolerance)


def test_losses_and_voltages_alone_on_14_buses():
    """Nothing binds on flows: no congestion, in dc one price, in ac losses and reactive parts only."""
    ac = [7.9210, 8.4676, 9.1365, 8.9088, 8.7528, 8.7655, 8.9108, 8.9108, 8.9121, 8.9383, 8.8819, 8.9102, 8.9599]
    np.testing.assert_allclose(split("case14", "ac").lmp, [*ac, 9.1239], atol=6e-5)
    np.testing.assert_allclose(split("case14", "dc").lmp, 7.920951, atol=1e-6)
    for name in FORMULATIONS:
        assert split("case14", name).keys == ()
    assert np.abs(split("case14", "ac").loss).max() > 0.5
    assert np.abs(split("case14", "ac").reactive).max() > 1e-3
    np.testing.assert_array_equal(split("case14", "dc-loss").reactive, 0.0)


@pytest.mark.parametrize("name", FORMULATIONS)
@pytest.mark.parametrize("case", ["case5", "case118"])
def test_moving_the_reference_equals_splitting_again(case, name):
    network, inputs = loaded(case)
    parts = split(case, name)
    weights = 1.0 + np.cos(np.arange(network.n_bus) * 2.1)
    again = split_prices(network, inputs.branch_in_service, solved(case, name), weights)
    moved = rereference(parts.energy, parts.loss, parts.congestion_by_key, parts.reactive, weights)
    # The split takes its energy price from the multipliers, the move from the components: the residual is between.
    accuracy = 10.0 * parts.price_residual + 1e-9
    np.testing.assert_allclose(moved.energy, again.energy, atol=accuracy)
    np.testing.assert_allclose(moved.loss, again.loss, atol=accuracy)
    np.testing.assert_allclose(moved.congestion, again.congestion_by_key, atol=accuracy)
    np.testing.assert_allclose(moved.reactive, again.reactive, atol=accuracy)


@pytest.mark.parametrize("name", ["soc", "ac"])
def test_a_dropped_reactive_price_is_seen(name):
    network, inputs = loaded("case118")
    result = solved("case118", name)
    wrong = replace(
        result, multipliers=replace(result.multipliers, reactive=np.zeros_like(result.multipliers.reactive))
    )
    assert split_prices(network, inputs.branch_in_service, wrong, inputs.load_p).price_residual > 0.05


@pytest.mark.parametrize("name", FORMULATIONS)
def test_a_flipped_sign_is_seen(name):
    network, inputs = loaded("case5")
    result = solved("case5", name)
    rows = result.constraints
    gain = sparse.csr_array(-rows.angle_gain)
    wrong = replace(result, constraints=replace(rows, angle_gain=gain))
    # In soc the limit is worth 0.12 $/MVAh only, elsewhere 62.
    least = 0.05 if name == "soc" else 0.5
    assert split_prices(network, inputs.branch_in_service, wrong, inputs.load_p).price_residual > least


@pytest.mark.parametrize("name", FORMULATIONS)
@pytest.mark.parametrize("case", CASES)
def test_a_price_off_by_a_cent_at_one_bus_is_seen(case, name):
    network, inputs = loaded(case)
    result = solved(case, name)
    active = result.multipliers.active.copy()
    active[1] += 0.01 * network.base_mva
    wrong = replace(result, multipliers=replace(result.multipliers, active=active))
    residual = split_prices(network, inputs.branch_in_service, wrong, inputs.load_p).price_residual
    assert residual > 0.005
    assert certified(case, name).price_residual < 1e-3


@pytest.mark.parametrize("name", FORMULATIONS)
@pytest.mark.parametrize("case", CASES)
def test_money_balance_closes(case, name):
    network, inputs = loaded(case)
    money = money_balance(network, inputs, solved(case, name), split(case, name))
    assert money.load_payments > 0.0
    assert money.relative_remainder < 1e-6  # asked for: 1e-4; measured: 2e-7
    assert money.by_components.total == pytest.approx(money.surplus, abs=1e-6)
    if name == "dc":
        assert money.congestion_difference == pytest.approx(0.0, abs=1e-6)
        assert money.by_components.loss_surplus == pytest.approx(0.0, abs=1e-6)
    else:
        assert money.by_components.loss_surplus > 0.0


def test_congestion_by_components_is_not_the_rent_with_losses():
    """118 buses in ac, computed: 3,296 on the load-weighted reference (3,649 on another) against 3,261 of rent."""
    network, inputs = loaded("case118")
    money = money_balance(network, inputs, solved("case118", "ac"), split("case118", "ac"))
    assert money.by_constraints.congestion_rent == pytest.approx(3261, abs=1)
    assert money.by_components.congestion == pytest.approx(3296, abs=1)
    assert money.congestion_difference == pytest.approx(35, abs=2)


def test_congestion_rent_of_five_buses():
    """Shadow price 62.3220 times 240 MW, computed from the published data."""
    network, inputs = loaded("case5")
    money = money_balance(network, inputs, solved("case5", "dc"), split("case5", "dc"))
    assert money.by_constraints.congestion_rent == pytest.approx(14_957.29, abs=0.01)
    assert money.surplus == pytest.approx(14_957.29, abs=0.01)
