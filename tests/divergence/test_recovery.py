"""Recovery names the constraints behind congestion that is published in cents."""

from __future__ import annotations

import numpy as np
import pytest

from lmpgap.divergence.candidates import candidates_at
from lmpgap.divergence.recovery import sparse_fit
from lmpgap.divergence.shift_factors import AngleResponse, point_from_voltages
from lmpgap.scenario.settings import DcConvention
from tests.support.networks import load_network

ROUNDING = 0.005
TOLERANCE = 2.0 * ROUNDING


def response_and_candidates(name: str, formulation: str = "dc", angle_scale: float = 0.0, seed: int = 0):
    network, inputs = load_network(name)
    rng = np.random.default_rng(seed)
    angle = angle_scale * rng.normal(size=network.n_bus)
    point = point_from_voltages(
        network, inputs.branch_in_service, formulation, np.ones(network.n_bus), angle, DcConvention()
    )
    response = AngleResponse.of(network, inputs.branch_in_service, point)
    candidates = candidates_at(network, inputs, point, response)
    return network, response, candidates, candidates.columns(np.arange(candidates.n_candidate))


def test_shift_factors_of_five_buses_as_published():
    """Shift factors of the five-bus network with reference bus 4 and buses 1, 2, 3, 5 (computed with b = 1/x)."""
    network, response, candidates, columns = response_and_candidates("case5")
    expected = {
        ("B1", "B2"): (0.1939, -0.4759, -0.3490, 0.1595),
        ("B1", "B4"): (0.4376, 0.2583, 0.1895, 0.3600),
        ("B1", "B5"): (0.3685, 0.2176, 0.1595, -0.5195),
        ("B4", "B5"): (-0.3685, -0.2176, -0.1595, -0.4805),
    }
    np.testing.assert_allclose(response.delivery_factor, 1.0, atol=1e-12)
    for (start, end), values in expected.items():
        branch = next(
            i for i in range(network.n_branch)
            if (network.buses[network.from_bus[i]], network.buses[network.to_bus[i]]) == (start, end)
        )  # fmt: skip
        row = -columns[candidates.monitored.index(network.branches[branch])]
        row = row - row[3]
        assert row[[0, 1, 2, 4]] == pytest.approx(values, abs=5e-5)


def test_random_sets_of_constraints_are_named_from_cents():
    """Fifty cases with one to four known binding constraints: at least 95 % named, doubtful ones flagged."""
    _, response, candidates, columns = response_and_candidates("case118", "dc-loss", 0.1)
    rng = np.random.default_rng(118)
    free = response.delivery_factor[None, :]
    named = doubtful = 0
    for case in range(50):
        size = 1 + case % 4
        truth = rng.choice(candidates.n_candidate, size, replace=False)
        shadow = rng.uniform(5.0, 60.0, size) * rng.choice([-1.0, 1.0], size)
        exact = shadow @ columns[truth] + rng.normal() * response.delivery_factor
        fit = sparse_fit(np.round(exact, 2), columns, free, TOLERANCE)
        assert fit.explained
        found = dict(zip(fit.chosen.tolist(), fit.coefficient, strict=True))
        if any(fit.alike):
            # Parallel branches, or three branches whose columns span a plane: the truth is among what is offered.
            doubtful += 1
            assert set(truth) <= set(found) | {other for group in fit.alike for other in group}
        elif set(found) == set(truth):
            named += 1
            assert [found[column] for column in truth] == pytest.approx(shadow, abs=0.2)
    assert named >= 0.95 * (50 - doubtful)
    assert doubtful <= 15  # 14 of the 186 branches have a parallel twin


def test_the_reference_of_the_posted_components_need_not_be_known():
    _, response, _, columns = response_and_candidates("case30", "dc-loss", 0.1)
    exact = 20.0 * columns[3] - 8.0 * columns[11]
    for shift in (0.0, 7.0, -30.0):
        fit = sparse_fit(
            exact + shift * response.delivery_factor, columns, response.delivery_factor[None, :], TOLERANCE
        )
        assert set(fit.chosen) == {3, 11}
        assert fit.coefficient[fit.chosen == 11] == pytest.approx(-8.0, abs=1e-6)


def test_identical_parallel_branches_are_flagged_as_alike():
    network, inputs = load_network("case5")
    twin = {name: np.append(getattr(network, name), getattr(network, name)[0]) for name in (
        "from_bus", "to_bus", "r", "x", "charging", "tap", "shift",
        "normal_rating", "emergency_rating", "angle_min", "angle_max",
    )}  # fmt: skip
    network = network.with_changes(branches=(*network.branches, "twin"), **twin)
    inputs = type(inputs)(**{**inputs.__dict__, "branch_in_service": np.ones(network.n_branch, dtype=bool)})
    flat = np.ones(network.n_bus)
    point = point_from_voltages(network, inputs.branch_in_service, "dc", flat, 0.0 * flat, DcConvention())
    response = AngleResponse.of(network, inputs.branch_in_service, point)
    candidates = candidates_at(network, inputs, point, response)
    columns = candidates.columns(np.arange(candidates.n_candidate))
    twins = {0, candidates.monitored.index("twin")}
    fit = sparse_fit(np.round(30.0 * columns[0], 2), columns, response.delivery_factor[None, :], TOLERANCE)
    assert fit.explained
    assert len(fit.chosen) == 1
    assert {int(fit.chosen[0]), *fit.alike[0]} >= twins


def test_nothing_is_explained_by_nothing():
    _, response, _, columns = response_and_candidates("case30")
    rng = np.random.default_rng(1)
    fit = sparse_fit(rng.uniform(-ROUNDING, ROUNDING, 30), columns, response.delivery_factor[None, :], TOLERANCE)
    assert fit.explained
    assert fit.chosen.size == 0


def test_congestion_that_no_constraint_explains_is_left_as_the_rest():
    _, response, _, columns = response_and_candidates("case30", "dc-loss", 0.1)
    noise = np.random.default_rng(2).normal(0.0, 0.3, 30)
    exact = 40.0 * columns[5]
    fit = sparse_fit(exact + noise, columns, response.delivery_factor[None, :], TOLERANCE, most=4)
    assert not fit.explained
    assert 5 in fit.chosen
    assert np.abs(fit.rest).max() > 0.1


def test_the_set_of_the_hour_before_is_tried_first_and_dropped_when_idle():
    _, response, _, columns = response_and_candidates("case30", "dc-loss", 0.1)
    free = response.delivery_factor[None, :]
    posted = np.round(20.0 * columns[3], 2)
    assert set(sparse_fit(posted, columns, free, TOLERANCE, first=(3,)).chosen) == {3}
    assert set(sparse_fit(posted, columns, free, TOLERANCE, first=(3, 7)).chosen) == {3}
