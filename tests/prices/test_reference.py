"""Another reference: round trips, agreement with a fresh split, posted tables, and where it cannot be done."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from hypothesis.extra import numpy as hnp

from lmpgap.errors import NotIdentifiableError
from lmpgap.prices.components import split_prices
from lmpgap.prices.reference import island_weights, rereference
from tests.prices.test_components import made_result, unit_weight
from tests.support.networks import load_network


@pytest.fixture(scope="module")
def ac_split():
    network, inputs = load_network("case30")
    result, _ = made_result(network, inputs, 11)

    def split(weights):
        return split_prices(network, inputs.branch_in_service, result, weights, reactive_sources=None)

    return split


def moved(split, weights, **options):
    return rereference(
        split.energy, split.loss, split.congestion_by_key, split.reactive, weights, island=split.island, **options
    )


@pytest.mark.parametrize("seed", range(4))
def test_moving_equals_splitting_again(ac_split, seed):
    """No network is needed to move components; negative weights included."""
    rng = np.random.default_rng(seed)
    start = ac_split(unit_weight(30, int(rng.integers(30))))
    weights = 1.0 + rng.standard_normal(30) * (seed + 0.2)
    again = ac_split(weights)
    other = moved(start, weights)
    scale = np.abs(again.energy).max() + np.abs(again.lmp).max() + np.abs(again.congestion_by_key).max()
    np.testing.assert_allclose(other.energy, again.energy, atol=1e-10 * scale)
    np.testing.assert_allclose(other.loss, again.loss, atol=1e-10 * scale)
    np.testing.assert_allclose(other.congestion, again.congestion_by_key, atol=1e-10 * scale)
    np.testing.assert_allclose(other.reactive, again.reactive, atol=1e-10 * scale)
    np.testing.assert_allclose(other.delivery_factor, again.delivery_factor, atol=1e-10 * scale)
    assert not other.rounding_dominates.any()


def test_the_lossless_rule_is_wrong_with_losses(ac_split):
    """Moving congestion by its mean alone, without delivery factors, leaves an error that is not noise."""
    start, weights = ac_split(unit_weight(30, 0)), np.arange(30.0)
    share = weights / weights.sum()
    again = ac_split(weights)
    lossless_rule = start.congestion - share @ start.congestion
    assert np.abs(lossless_rule - again.congestion).max() > 0.01
    np.testing.assert_allclose(moved(start, weights).congestion.sum(axis=0), again.congestion, atol=1e-8)


prices = st.floats(-200, 200).map(lambda value: round(value, 6))


@settings(deadline=None, max_examples=60)
@given(
    n_bus=st.integers(2, 7),
    data=st.data(),
)
def test_round_trip(n_bus, data):
    """To other weights and back; a zero energy price on either side is no obstacle as such."""
    factor = data.draw(hnp.arrays(float, n_bus, elements=st.floats(0.7, 1.3)))
    congestion = data.draw(hnp.arrays(float, (3, n_bus), elements=prices))
    reactive = data.draw(hnp.arrays(float, n_bus, elements=prices))
    first = data.draw(hnp.arrays(float, n_bus, elements=st.floats(0.01, 1.0)))
    second = data.draw(hnp.arrays(float, n_bus, elements=st.floats(0.01, 1.0)))
    energy = data.draw(st.floats(1.0, 300.0))
    first, second = first / first.sum(), second / second.sum()
    factor = factor / (first @ factor)
    congestion = congestion - factor * (congestion @ first)[:, None]
    reactive = reactive - factor * (first @ reactive)
    loss = energy * (factor - 1.0)
    there = rereference(energy, loss, congestion, reactive, second)
    lmp = energy + loss + congestion.sum(axis=0) + reactive
    total = there.energy + there.loss + there.congestion.sum(axis=0) + there.reactive
    np.testing.assert_allclose(total, lmp, atol=1e-9)
    np.testing.assert_allclose(there.energy, second @ lmp, atol=1e-9)
    if abs(there.energy[0] + second @ there.loss) < 1.0 or abs(first @ there.delivery_factor) < 0.1:
        return
    if abs(there.energy[0] + first @ there.loss) < 1.0:
        return  # the way back would divide by noise
    back = rereference(there.energy, there.loss, there.congestion, there.reactive, first)
    np.testing.assert_allclose(back.energy, energy, atol=1e-7)
    np.testing.assert_allclose(back.loss, loss, atol=1e-6)
    np.testing.assert_allclose(back.congestion, congestion, atol=1e-6)
    np.testing.assert_allclose(back.reactive, reactive, atol=1e-6)


def test_a_table_of_intervals_is_moved_row_by_row(ac_split):
    start = [ac_split(unit_weight(30, bus)) for bus in (0, 4, 9)]
    weights = np.abs(np.sin(np.arange(30.0)))
    table = rereference(
        np.stack([s.energy for s in start]),
        np.stack([s.loss for s in start]),
        np.stack([s.congestion for s in start]),
        np.stack([s.reactive for s in start]),
        weights,
    )
    assert table.loss.shape == (3, 30)
    for row, split in enumerate(start):
        one = rereference(split.energy, split.loss, split.congestion, split.reactive, weights)
        np.testing.assert_allclose(table.loss[row], one.loss, atol=1e-12)
        np.testing.assert_allclose(table.congestion[row], one.congestion, atol=1e-12)
    by_key = rereference(
        table.energy, table.loss, np.stack([s.congestion_by_key for s in start]), table.reactive, weights
    )
    assert by_key.congestion.shape == (3, 3, 30)


def test_posted_row_with_the_opposite_congestion_sign():
    """New York's real-time row of 2022-08-08 (posted): 125.15 = 90.63 - (-26.64) + 7.88.

    With the sign turned on reading, the parts add up and a change of reference leaves the price alone.
    """
    posted_congestion, sign = -26.64, -1.0
    energy, loss = 90.63, np.array([0.0, 7.88])
    congestion = np.array([0.0, sign * posted_congestion])
    assert energy + loss[1] + congestion[1] == pytest.approx(125.15)
    other = rereference(energy, loss, congestion, None, np.array([0.5, 0.5]), rounding=0.005)
    np.testing.assert_allclose(other.energy + other.loss + other.congestion, [90.63, 125.15], atol=1e-9)
    assert other.energy[0] == pytest.approx((90.63 + 125.15) / 2)
    assert other.delivery_factor[1] / other.delivery_factor[0] == pytest.approx((90.63 + 7.88) / 90.63)


def test_energy_near_zero_is_not_identifiable():
    loss = np.array([[0.4, -0.2], [0.02, 0.0]])
    congestion = np.array([[3.0, -3.0], [3.0, -3.0]])
    energy = np.array([[20.0], [-0.01]])
    with pytest.raises(NotIdentifiableError, match="2 of 4 prices"):
        rereference(energy, loss, congestion, None, np.array([0.5, 0.5]))
    flagged = rereference(energy, loss, congestion, None, np.array([0.5, 0.5]), strict=False)
    np.testing.assert_array_equal(flagged.identifiable, [[True, True], [False, False]])
    assert np.isnan(flagged.loss[1]).all()
    assert np.isfinite(flagged.loss[0]).all()


def test_rounding_dominates_small_energies():
    factor = np.array([1.02, 0.99, 0.99])
    weights = np.array([1.0, 1.0, 1.0])

    def flags(energy: float):
        loss = np.round(energy * (factor - 1.0), 2)
        return rereference(energy, loss, np.zeros(3), None, weights, rounding=0.005, strict=False)

    assert not flags(30.0).rounding_dominates.any()
    assert flags(0.3).rounding_dominates.all()
    assert not flags(0.005).identifiable.any()


def test_rounding_uncertainty_bounds_the_error():
    rng = np.random.default_rng(0)
    factor, weights = rng.uniform(0.92, 1.05, 20), rng.uniform(0, 1, 20)
    factor /= rng.dirichlet(np.ones(20)) @ factor
    for energy in (3.0, 25.0, -12.0):
        loss, congestion = energy * (factor - 1.0), rng.normal(0, 8, 20)
        exact = rereference(energy, loss, congestion, None, weights)
        rounded = rereference(
            round(energy, 2), np.round(loss, 2), np.round(congestion, 2), None, weights, rounding=0.005
        )
        # The energy price itself moves by up to three roundings as well; its effect on the loss is DF' - 1.
        bound = rounded.loss_uncertainty + 0.015 * np.abs(rounded.delivery_factor - 1.0)
        assert (np.abs(rounded.loss - exact.loss) <= bound).all()


def test_missing_prices_only_matter_where_they_have_weight():
    loss, congestion = np.array([0.5, np.nan, -0.5]), np.array([1.0, np.nan, -1.0])
    other = rereference(20.0, loss, congestion, None, np.array([1.0, 0.0, 1.0]))
    assert np.isfinite(other.loss[[0, 2]]).all()
    assert np.isnan(other.loss[1])
    with pytest.raises(NotIdentifiableError, match="no price"):
        rereference(20.0, loss, congestion, None, np.array([1.0, 1.0, 1.0]))


def test_islands_are_moved_separately():
    island = np.array([0, 0, 1, 1])
    energy = np.array([20.0, 20.0, 40.0, 40.0])
    loss = np.array([0.0, 1.0, 0.0, -2.0])
    other = rereference(energy, loss, np.zeros(4), None, np.array([0.0, 1.0, 0.0, 0.0]), island=island)
    np.testing.assert_allclose(other.energy, [21.0, 21.0, 39.0, 39.0])
    np.testing.assert_allclose(other.loss, [-1.0, 0.0, 1.0, -1.0])


def test_island_weights():
    island, live = np.array([0, 0, 1, 1, 2]), np.array([True, True, True, True, False])
    np.testing.assert_allclose(
        island_weights(np.array([3.0, 1.0, 0.0, 0.0, 5.0]), island, live), [0.75, 0.25, 0.5, 0.5, 0.0]
    )
    with pytest.raises(NotIdentifiableError, match="finite"):
        island_weights(np.array([np.nan, 1.0, 0.0, 0.0, 5.0]), island, live)


def test_shapes_that_do_not_fit_are_refused():
    with pytest.raises(NotIdentifiableError, match="do not fit"):
        rereference(20.0, np.zeros(3), np.zeros(4), None, np.ones(3))
