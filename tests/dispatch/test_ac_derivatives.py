"""The written-out derivatives of the AC program against casadi's general differentiation."""

from dataclasses import replace

import casadi
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import sparse

from lmpgap.dispatch.ac_layout import AcShape
from lmpgap.dispatch.ac_model import AcProgram
from lmpgap.dispatch.options import DispatchOptions
from lmpgap.scenario.network import IntervalInputs, Network
from lmpgap.scenario.settings import Penalties
from tests.support.networks import load_network

SOFT = Penalties(power_balance=3000.0, transmission=1500.0)


def program(
    network: Network, inputs: IntervalInputs, *, penalties: Penalties, movement: bool, seed: int, dead: bool = False
) -> AcProgram:
    rng = np.random.default_rng(seed)
    shape = (3, network.n_branch)
    live = np.ones(network.n_bus, dtype=bool)
    on = inputs.branch_in_service.copy()
    if dead:
        live[-1] = False
        on[(network.from_bus == network.n_bus - 1) | (network.to_bus == network.n_bus - 1)] = False
    return AcProgram(
        network,
        AcShape(
            live=live,
            branch_in_service=on,
            segment_resource=inputs.segments.resource,
            bid_bus=np.array([0, 1, 1]),
            flow_weights=sparse.csr_array(np.where(rng.random(shape) < 0.3, rng.normal(size=shape), 0.0)),
            movement=movement,
        ),
        DispatchOptions(penalties=penalties),
    )


def differences(subject: AcProgram, seed: int) -> tuple[float, float, float]:
    """Return the largest relative differences of gradient, Jacobian and Hessian at a random point."""
    rng = np.random.default_rng(seed)
    layout, symbols = subject.layout, subject.symbols
    x, p = rng.uniform(-0.5, 1.3, layout.n_var), rng.uniform(0.0, 5.0, layout.n_parameter)
    lam_f, lam_g = rng.uniform(0.5, 2.0), rng.normal(size=layout.n_row)
    weight, weights = casadi.SX.sym("weight"), casadi.SX.sym("weights", layout.n_row)
    lagrangian = weight * symbols["f"] + casadi.dot(weights, symbols["g"])
    known = casadi.Function(
        "known",
        [symbols["x"], symbols["p"], weight, weights],
        [
            casadi.gradient(symbols["f"], symbols["x"]),
            casadi.jacobian(symbols["g"], symbols["x"]),
            casadi.triu(casadi.hessian(lagrangian, symbols["x"])[0]),
        ],
    )
    functions = subject.derivatives
    found = (
        functions["grad_f"](x, p)[1],
        functions["jac_g"](x, p)[1],
        functions["hess_lag"](x, p, lam_f, lam_g),
    )
    errors = []
    for mine, theirs in zip(found, known(x, p, lam_f, lam_g), strict=True):
        size = max(1.0, np.abs(theirs.full()).max())
        errors.append(float(np.abs(mine.full() - theirs.full()).max()) / size)
    return errors[0], errors[1], errors[2]


@pytest.mark.parametrize("name", ["case5", "case14", "case30"])
@pytest.mark.parametrize("penalties", [Penalties(), SOFT], ids=["hard", "soft"])
@pytest.mark.parametrize("movement", [False, True])
def test_derivatives_are_exact(name: str, penalties: Penalties, movement: bool) -> None:
    network, inputs = load_network(name)
    subject = program(network, inputs, penalties=penalties, movement=movement, seed=1)
    assert max(differences(subject, seed=2)) < 1e-13


@settings(max_examples=15, deadline=None)
@given(seed=st.integers(0, 10_000), dead=st.booleans())
def test_derivatives_of_random_branches(seed: int, dead: bool) -> None:
    """Taps, shifts, charging, shunts, parallel branches and dead buses, none of them special to the formulas."""
    network, inputs = load_network("case5")
    rng = np.random.default_rng(seed)
    n = network.n_branch
    order = rng.integers(0, n, n)  # some branches double others
    network = replace(
        network,
        from_bus=network.from_bus[order],
        to_bus=network.to_bus[order],
        tap=rng.uniform(0.9, 1.1, n),
        shift=rng.uniform(-0.5, 0.5, n),
        charging=rng.uniform(0.0, 0.5, n),
        shunt_g=rng.normal(size=network.n_bus),
        shunt_b=rng.normal(size=network.n_bus),
        normal_rating=np.where(rng.random(n) < 0.5, np.inf, rng.uniform(1.0, 3.0, n)),
        angle_max=np.where(rng.random(n) < 0.5, np.inf, 0.5),
        angle_min=np.full(n, -np.inf),
    )
    subject = program(network, inputs, penalties=SOFT, movement=True, seed=seed, dead=dead)
    assert max(differences(subject, seed)) < 1e-13
