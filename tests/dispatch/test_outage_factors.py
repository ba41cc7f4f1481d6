"""Outage factors against published figures, and against solving the network again without the branch."""

from dataclasses import replace

import numpy as np
import pytest

from lmpgap.dispatch.outage_factors import OutageFactors, linear_susceptance
from lmpgap.scenario.network import Contingencies, Network
from lmpgap.scenario.settings import DcConvention
from tests.support.networks import load_network


def with_contingencies(network: Network, sets: list[list[int]], rating: float | None = None) -> Network:
    emergency = network.normal_rating if rating is None else np.full(network.n_branch, rating)
    return replace(
        network,
        emergency_rating=emergency,
        contingencies=Contingencies(
            names=tuple("loss of " + "+".join(network.branches[k] for k in out) for out in sets),
            branches=tuple(np.array(out, dtype=np.int64) for out in sets),
            monitored=np.ones(network.n_branch, dtype=bool),
        ),
    )


def flows(network: Network, on: np.ndarray, injection: np.ndarray) -> np.ndarray:
    """Lossless flows by a dense least-squares solve [pu]."""
    incidence = (network.from_incidence() - network.to_incidence()).toarray()
    b = linear_susceptance(network, on, DcConvention())
    angle = np.linalg.lstsq(incidence.T @ np.diag(b) @ incidence, injection, rcond=None)[0]
    return np.asarray(b * (incidence @ angle))


def balanced(network: Network, seed: int) -> np.ndarray:
    injection = np.random.default_rng(seed).normal(size=network.n_bus)
    return np.asarray(injection - injection.mean())


def test_five_bus_outage_factors() -> None:
    """Values computed from the five-bus network's reactances (tests/networks), four digits.

    Loss of 1-5 sends all of its flow to 4-5; of 4-5 on 1-2: -.3071, on 1-4: -.6929.
    """
    network, inputs = load_network("case5")
    outages = OutageFactors(network, inputs.branch_in_service, DcConvention())
    names = dict(zip(network.branches, range(6), strict=True))
    l1, l2, l3, l6 = names["L1"], names["L2"], names["L3"], names["L6"]
    assert outages.factors(np.array([l3]))[l6, 0] == pytest.approx(1.0, abs=1e-9)
    assert outages.factors(np.array([l6]))[[l1, l2], 0] == pytest.approx([-0.3071, -0.6929], abs=5e-5)


@pytest.mark.parametrize("out", [[0], [3], [3, 10], [20, 50, 30]])
def test_post_outage_flows_equal_a_new_solution(out: list[int]) -> None:
    network, inputs = load_network("case118")
    injection = balanced(network, 1)
    on = inputs.branch_in_service
    before = flows(network, on, injection)
    without = on.copy()
    without[out] = False
    factors = OutageFactors(network, on, DcConvention()).factors(np.array(out))
    assert before + factors @ before[out] == pytest.approx(flows(network, without, injection), abs=1e-9)


def test_screening_finds_exactly_the_overloads_of_new_solutions() -> None:
    network, inputs = load_network("case118")
    singles = [[k] for k in range(network.n_branch)]
    network = with_contingencies(network, [*singles, [3, 10], [50, 20, 30]], rating=1.2)
    on, injection = inputs.branch_in_service, balanced(network, 2)
    outages = OutageFactors(network, on, DcConvention())
    found = outages.screen(flows(network, on, injection), 1e-6)
    contingencies = network.contingencies
    assert contingencies is not None
    expected = set()
    for k, (name, out) in enumerate(zip(contingencies.names, contingencies.branches, strict=True)):
        if name in outages.splitting:
            continue
        without = on.copy()
        without[out] = False
        after = flows(network, without, injection)
        expected |= {(k, int(m), int(np.sign(after[m]))) for m in np.flatnonzero(np.abs(after) > 1.2 + 1e-6)}
    assert len(expected) > 100
    assert set(zip(found.contingency.tolist(), found.monitored.tolist(), found.sign.tolist(), strict=True)) == expected


def test_splitting_outages_are_named_and_not_screened() -> None:
    """A branch that is the only path to a bus: its outage splits the network (bridges found by a graph search)."""
    network, inputs = load_network("case118")
    network = with_contingencies(network, [[k] for k in range(network.n_branch)])
    outages = OutageFactors(network, inputs.branch_in_service, DcConvention())
    bridges = []
    for k in range(network.n_branch):
        without = inputs.branch_in_service.copy()
        without[k] = False
        if network.islands(without).max() > 0:
            bridges.append(f"loss of {network.branches[k]}")
    assert list(outages.splitting) == bridges
    assert bridges


def test_rows_carry_the_outaged_flows_weight() -> None:
    network, inputs = load_network("case5")
    network = with_contingencies(network, [[2], [0, 5]], rating=0.1)
    outages = OutageFactors(network, inputs.branch_in_service, DcConvention())
    flow = flows(network, inputs.branch_in_service, balanced(network, 3))
    pairs = outages.screen(flow, 0.0)
    limits = outages.limits(pairs)
    assert limits.n_row == pairs.n_pair > 2
    assert limits.weights @ flow - limits.limit == pytest.approx(pairs.excess, abs=1e-12)
    assert set(limits.contingency) == {"loss of L3", "loss of L1+L6"}


def test_a_branch_that_is_out_already_shifts_nothing() -> None:
    network, inputs = load_network("case14")
    network = with_contingencies(network, [[0], [0, 4]], rating=0.01)
    on = inputs.branch_in_service.copy()
    on[0] = False
    outages = OutageFactors(network, on, DcConvention())
    pairs = outages.screen(flows(network, on, balanced(network, 4)), 0.0)
    assert set(pairs.contingency.tolist()) == {1}
