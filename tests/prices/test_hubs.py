"""Hubs of fixed weights, load-weighted zones, and the part of a change that is weight drift."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from hypothesis.extra import numpy as hnp

from lmpgap.errors import NotIdentifiableError
from lmpgap.prices.components import split_prices
from lmpgap.prices.hubs import hub_prices, hub_weights, weight_drift, weighted, zone_weights
from tests.prices.test_components import made_result
from tests.support.networks import load_network


def test_hub_price_and_components_by_hand():
    weights = hub_weights(np.array([[1.0, 3.0, 0.0], [0.0, 1.0, 1.0]]), ("West", "East"))
    prices = hub_prices(
        np.full(3, 30.0),
        np.array([0.0, 4.0, -8.0]),
        np.array([0.4, -0.4, 0.0]),
        np.zeros(3),
        weights,
    )
    np.testing.assert_allclose(prices.energy, [30.0, 30.0])
    np.testing.assert_allclose(prices.congestion, [3.0, -2.0])
    np.testing.assert_allclose(prices.loss, [-0.2, -0.2])
    np.testing.assert_allclose(prices.lmp, [32.8, 27.8])


def test_zone_follows_the_load():
    names, weights = zone_weights(("N", "S", "N", ""), np.array([[10.0, 5.0, 30.0, 9.0], [20.0, 0.0, 20.0, 9.0]]))
    assert names == ("N", "S")
    np.testing.assert_allclose(weights[0], [[0.25, 0, 0.75, 0], [0, 1, 0, 0]])
    price = np.array([[40.0, 25.0, 20.0, 99.0], [40.0, 25.0, 20.0, 99.0]])
    zone = weighted(price, weights)
    np.testing.assert_allclose(zone[:, 0], [25.0, 30.0])
    assert np.isnan(zone[1, 1])  # no load, no load-weighted price


def test_zone_of_a_split_has_the_components_of_the_zone():
    """The zone's own loss component is its energy price times its delivery factor minus one."""
    network, inputs = load_network("case30")
    result, _ = made_result(network, inputs, 5)
    split = split_prices(network, inputs.branch_in_service, result, inputs.load_p)
    zones = ["a" if i < 12 else "b" for i in range(30)]
    names, weights = zone_weights(zones, inputs.load_p)
    prices = hub_prices(split.energy, split.congestion, split.loss, split.reactive, weights)
    assert names == ("a", "b")
    np.testing.assert_allclose(prices.lmp, weighted(split.lmp, weights))
    factor = weighted(split.delivery_factor, weights)
    np.testing.assert_allclose(prices.loss, split.energy[0] * (factor - 1.0), atol=1e-9)


def test_weight_drift_by_hand():
    """Prices stand still, load moves to the dear bus: all of the change is drift; and the other way round."""
    price = np.array([20.0, 60.0])
    before, after = np.array([[0.75, 0.25]]), np.array([[0.5, 0.5]])
    drift = weight_drift(price, before, price, after)
    np.testing.assert_allclose(drift.weight_drift, [10.0])
    np.testing.assert_allclose(drift.price_change, [0.0])
    hub = weight_drift(price, before, price + 5.0, before)
    np.testing.assert_allclose(hub.weight_drift, [0.0])
    np.testing.assert_allclose(hub.price_change, [5.0])


figures = st.floats(-500, 500)


@given(data=st.data(), n_bus=st.integers(1, 6), n_zone=st.integers(1, 3), n_interval=st.integers(1, 3))
def test_weight_drift_is_exactly_additive(data, n_bus, n_zone, n_interval):
    before, after = (
        data.draw(hnp.arrays(float, (n_interval, n_zone, n_bus), elements=st.floats(0, 1))) for _ in range(2)
    )
    start, end = (data.draw(hnp.arrays(float, (n_interval, n_bus), elements=figures)) for _ in range(2))
    drift = weight_drift(start, before, end, after)
    np.testing.assert_allclose(drift.total, weighted(end, after) - weighted(start, before), atol=1e-9)
    back = weight_drift(end, after, start, before)
    np.testing.assert_allclose(back.weight_drift, -drift.weight_drift, atol=1e-9)


def test_missing_prices():
    weights = hub_weights(np.array([[1.0, 1.0, 0.0]]), ("H",))
    assert weighted(np.array([10.0, 20.0, np.nan]), weights) == pytest.approx([15.0])
    assert np.isnan(weighted(np.array([10.0, np.nan, 30.0]), weights)).all()


def test_weights_that_cancel_are_refused_by_name():
    with pytest.raises(NotIdentifiableError, match="'East'"):
        hub_weights(np.array([[1.0, 1.0], [1.0, -1.0]]), ("West", "East"))
