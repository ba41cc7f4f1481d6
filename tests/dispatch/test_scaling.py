"""Networks whose figures lie many powers of ten apart must be priced as well as tidy ones.

Each is the IEEE 30-bus network with one thing done to it that changes no price, or next to none.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from lmpgap.dispatch.formulation import DispatchOptions, build_formulation
from lmpgap.dispatch.limits import FlowLimits
from lmpgap.dispatch.result import DispatchResult
from lmpgap.prices.certificate import certify
from lmpgap.prices.components import split_prices
from lmpgap.scenario.network import IntervalInputs, Network
from tests.support.networks import load_network

FORMULATIONS = ("dc", "dc-loss", "soc", "ac")


def certified(name: str, network: Network, inputs: IntervalInputs) -> DispatchResult:
    """Solve, and insist on a clean certificate."""
    limits = FlowLimits.none(network.n_branch)
    options = DispatchOptions()
    result = build_formulation(name, network, inputs.branch_in_service, options).solve(inputs, limits)
    assert result.status.has_solution, result.message
    split = split_prices(network, inputs.branch_in_service, result, inputs.load_p / inputs.load_p.sum())
    certificate = certify(network, inputs, result, split)
    assert certificate.verdict != "uncertified", certificate.reasons
    assert certificate.price_residual < 1e-3
    return result


def behind_a_switch(network: Network, inputs: IntervalInputs, bus: int, x: float) -> tuple[Network, IntervalInputs]:
    """Return the network with a bus's load moved to a new bus behind a branch of next to no impedance."""
    n_bus = network.n_bus

    def bus_column(values: np.ndarray, new: float | None = None) -> np.ndarray:
        return np.append(values, values[bus] if new is None else new)

    longer = replace(
        network,
        buses=(*network.buses, "behind the switch"),
        v_min=bus_column(network.v_min),
        v_max=bus_column(network.v_max),
        shunt_g=bus_column(network.shunt_g, 0.0),
        shunt_b=bus_column(network.shunt_b, 0.0),
        branches=(*network.branches, "switch"),
        from_bus=np.append(network.from_bus, bus),
        to_bus=np.append(network.to_bus, n_bus),
        **{
            name: np.append(getattr(network, name), value)
            for name, value in {
                "r": 0.1 * x,
                "x": x,
                "charging": 0.0,
                "tap": 1.0,
                "shift": 0.0,
                "normal_rating": np.inf,
                "emergency_rating": np.inf,
                "angle_min": -np.inf,
                "angle_max": np.inf,
            }.items()
        },
    )
    load_p, load_q = bus_column(inputs.load_p), bus_column(inputs.load_q)
    load_p[bus] = load_q[bus] = 0.0
    in_service = np.append(inputs.branch_in_service, True)
    return longer, replace(inputs, load_p=load_p, load_q=load_q, branch_in_service=in_service)


@pytest.mark.parametrize("x", [1e-5, 1e-7])
@pytest.mark.parametrize("name", FORMULATIONS)
def test_a_branch_of_next_to_no_impedance_is_a_closed_switch(name: str, x: float) -> None:
    network, inputs = load_network("case30")
    plain = certified(name, network, inputs)
    bus = int(np.argmax(inputs.load_p))
    switched = certified(name, *behind_a_switch(network, inputs, bus, x))
    price, other = plain.multipliers.active / network.base_mva, switched.multipliers.active / network.base_mva
    # The loss on the way is 0.1 x times the squared flow.
    assert other[:-1] == pytest.approx(price, abs=2e-3)
    assert other[-1] == pytest.approx(other[bus], abs=1e-2)
    assert switched.objective == pytest.approx(plain.objective, rel=1e-5)


@pytest.mark.parametrize("name", FORMULATIONS)
def test_ratings_from_a_megawatt_to_a_million(name: str) -> None:
    # A rating that can never bind, whether 100 or a million times the load, is no rating.
    network, inputs = load_network("case30")
    free = np.flatnonzero(np.isfinite(network.normal_rating))
    binding = certified(name, network, inputs).constraints
    held = {k for k, mult in zip(binding.monitored, binding.multiplier, strict=True) if mult > 0.0}
    loose = [k for k in free if network.branches[k] not in held]
    rating, huge = network.normal_rating.copy(), network.normal_rating.copy()
    rating[loose], huge[loose] = np.inf, 1e4 * 10.0 ** (np.arange(len(loose)) % 3 - 1)
    plain = certified(name, replace(network, normal_rating=rating), inputs)
    scaled = certified(name, replace(network, normal_rating=huge), inputs)
    assert scaled.objective == pytest.approx(plain.objective, rel=1e-6)
    assert scaled.multipliers.active == pytest.approx(plain.multipliers.active, abs=2e-3 * network.base_mva)


@pytest.mark.parametrize("name", ["soc", "ac"])
def test_reactive_ranges_given_as_nine_nines(name: str) -> None:
    # "No limit" is often written as 9999 or 99999 Mvar.
    network, inputs = load_network("case14")
    endless = np.full(network.n_resource, np.inf)
    free = certified(name, replace(network, q_min=-endless, q_max=endless), inputs)
    nines = certified(
        name, replace(network, q_min=np.full_like(endless, -999.99), q_max=np.full_like(endless, 999.99)), inputs
    )
    assert nines.objective == pytest.approx(free.objective, rel=1e-6)
    assert nines.multipliers.active == pytest.approx(free.multipliers.active, abs=2e-3 * network.base_mva)
