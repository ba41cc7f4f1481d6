"""Angles recovered from voltage products."""

from __future__ import annotations

from itertools import pairwise

import numpy as np
import pytest

from lmpgap.dispatch.angles import recover_angles
from lmpgap.dispatch.branch_model import voltage_products
from tests.dispatch.grids import grid, solve
from tests.support.networks import load_network

FREE = np.inf


@pytest.mark.parametrize("name", ["case5", "case30", "case118"])
def test_angles_of_a_voltage_profile_are_found_again(name: str) -> None:
    network, inputs = load_network(name)
    rng = np.random.default_rng(7)
    # Differences along lines stay below half a turn, the angles themselves go round more than once.
    angle = 0.2 * np.cumsum(rng.random(network.n_bus)) if name == "case5" else 0.5 * rng.random(network.n_bus)
    magnitude = 0.95 + 0.1 * rng.random(network.n_bus)
    c, s = voltage_products(network, magnitude, angle)
    found, loop = recover_angles(network, inputs.branch_in_service, c, s)
    assert found == pytest.approx(angle - angle[0], abs=1e-9)
    assert loop == pytest.approx(0.0, abs=1e-9)


def test_a_long_chain_unwraps_beyond_full_turns() -> None:
    buses = [str(i) for i in range(40)]
    network, inputs = grid([(a, b, 0.01, 0.1, FREE) for a, b in pairwise(buses)], [("0", 1.0, 1.0)], {"39": 0.0})
    angle = -0.5 * np.arange(40.0)
    found, loop = recover_angles(network, inputs.branch_in_service, *voltage_products(network, np.ones(40), angle))
    assert found == pytest.approx(angle, abs=1e-9)
    assert loop == pytest.approx(0.0, abs=1e-9)


def test_what_does_not_close_is_spread_by_weight_and_measured() -> None:
    # A triangle whose branch angles add up to 0.03 rad; equal weights share it equally.
    network, inputs = grid(
        [("1", "2", 0, 0.1, FREE), ("2", "3", 0, 0.1, FREE), ("3", "1", 0, 0.1, FREE)], [("1", 1.0, 1.0)], {"3": 0.0}
    )
    branch_angle = np.array([0.10, 0.05, -0.12])
    found, loop = recover_angles(network, inputs.branch_in_service, np.cos(branch_angle), np.sin(branch_angle))
    assert loop == pytest.approx(np.rad2deg(0.01))
    assert found == pytest.approx([0.0, -0.09, -0.13])


def test_islands_and_branches_without_products() -> None:
    network, _ = grid(
        [("1", "2", 0, 0.1, FREE), ("3", "4", 0, 0.1, FREE), ("5", "6", 0, 0.1, FREE)], [("1", 1.0, 1.0)], {"2": 0.0}
    )
    c, s = np.array([np.cos(0.1), np.cos(-0.2), 0.0]), np.array([np.sin(0.1), np.sin(-0.2), 0.0])
    found, loop = recover_angles(network, np.array([True, True, True]), c, s)
    assert found == pytest.approx([0.0, -0.1, 0.0, 0.2, 0.0, 0.0])
    assert loop == pytest.approx(0.0, abs=1e-12)
    nothing, loop = recover_angles(network, np.zeros(3, dtype=bool), c, s)
    assert nothing == pytest.approx(np.zeros(6))
    assert loop == 0.0


# Measured for the relaxation (sum around a loop): 3 buses 6.7 deg, 5 buses 0.6, 14 buses 1.4, 118 buses 13.
@pytest.mark.parametrize(("name", "loop"), [("case3", 6.7), ("case5", 0.6), ("case14", 1.4)])
def test_loop_angles_of_the_relaxation(name: str, loop: float) -> None:
    network, inputs = load_network(name)
    point = solve("soc", network, inputs).point
    _, found = recover_angles(network, inputs.branch_in_service, point.c, point.s)
    assert found == pytest.approx(loop, rel=0.1)
