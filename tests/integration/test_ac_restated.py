"""The AC dispatch against a second statement of it: complex power, a general-purpose solver, no code in common.

Sequential quadratic programming, "A Software Package for Sequential Quadratic Programming", DFVLR-FB 88-28, 1988, as
scipy has it; voltages in rectangular form, where the dispatch has them in polar form.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from scipy.optimize import minimize

from lmpgap.dispatch.formulation import build_formulation
from lmpgap.dispatch.limits import FlowLimits
from lmpgap.dispatch.options import DispatchOptions
from lmpgap.scenario.network import IntervalInputs, Network
from tests.support.networks import load_network, scale_load


class Restated:
    """The dispatch of linear offers as a nonlinear program in (real, imaginary, p, q), per unit."""

    def __init__(self, network: Network, inputs: IntervalInputs) -> None:
        self.network, self.inputs = network, inputs
        y = 1.0 / (network.r + 1j * network.x)
        ratio = network.tap * np.exp(1j * network.shift)
        own = y + 0.5j * network.charging
        self.from_from, self.from_to = own / np.abs(ratio) ** 2, -y / np.conj(ratio)
        self.to_from, self.to_to = -y / ratio, own
        price = np.zeros(network.n_resource)
        price[inputs.segments.resource] = inputs.segments.price_start
        self.price = price * network.base_mva

    def split(self, x: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Return complex voltages and complex outputs."""
        n, m = self.network.n_bus, self.network.n_resource
        return x[:n] + 1j * x[n : 2 * n], x[2 * n : 2 * n + m] + 1j * x[2 * n + m :]

    def flows(self, v: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Return complex power entering the branches at both ends."""
        v_from, v_to = v[self.network.from_bus], v[self.network.to_bus]
        at_from = v_from * np.conj(self.from_from * v_from + self.from_to * v_to)
        return at_from, v_to * np.conj(self.to_from * v_from + self.to_to * v_to)

    def balance(self, x: np.ndarray) -> np.ndarray:
        """Return what must be zero: the power left over at each bus, and the angle of the first."""
        network, (v, s) = self.network, self.split(x)
        left = -(self.inputs.load_p + 1j * self.inputs.load_q) - (network.shunt_g - 1j * network.shunt_b) * abs(v) ** 2
        np.add.at(left, network.resource_bus, s)
        for ends, flow in zip((network.from_bus, network.to_bus), self.flows(v), strict=True):
            np.subtract.at(left, ends, flow)
        return np.concatenate([left.real, left.imag, [v[0].imag]])

    def slack(self, x: np.ndarray) -> np.ndarray:
        """Return what must not be negative: ratings, angles and the voltage band."""
        network, (v, _) = self.network, self.split(x)
        turned = v[network.from_bus] * np.conj(v[network.to_bus])
        rated = np.isfinite(network.normal_rating)
        return np.concatenate(
            [
                *(network.normal_rating[rated] ** 2 - np.abs(flow[rated]) ** 2 for flow in self.flows(v)),
                (np.tan(network.angle_max) * turned.real - turned.imag),
                (turned.imag - np.tan(network.angle_min) * turned.real),
                network.v_max**2 - np.abs(v) ** 2,
                np.abs(v) ** 2 - network.v_min**2,
            ]
        )

    def cost(self) -> float:
        """Return the smallest cost found from a flat start [$/h]."""
        network, inputs = self.network, self.inputs
        n = network.n_bus
        bounds = [(-2.0, 2.0)] * (2 * n)
        bounds += list(zip(inputs.p_min, inputs.p_max, strict=True)) + list(
            zip(network.q_min, network.q_max, strict=True)
        )
        start = np.concatenate([np.ones(n), np.zeros(n), 0.5 * (inputs.p_min + inputs.p_max), 0 * network.q_min])
        m = network.n_resource
        gradient = np.concatenate([np.zeros(2 * n), self.price, np.zeros(m)]) / 1e4
        found = minimize(
            lambda x: float(gradient @ x),
            start,
            jac=lambda _: gradient,
            bounds=bounds,
            constraints=[{"type": "eq", "fun": self.balance}, {"type": "ineq", "fun": self.slack}],
            method="SLSQP",
            options={"maxiter": 500, "ftol": 1e-12},
        )
        assert found.success, found.message
        assert np.abs(self.balance(found.x)).max() < 1e-8
        return 1e4 * float(found.fun)


@pytest.mark.parametrize("factor", [1.0, 0.7])
def test_cost_and_prices_of_five_buses(factor: float) -> None:
    """At 1.0 the published cost of the benchmark library, arXiv:1908.02788: 1.7552e4 $/h."""
    network, inputs = load_network("case5")
    inputs = scale_load(inputs, factor)
    dispatch = build_formulation("ac", network, inputs.branch_in_service, DispatchOptions())
    result = dispatch.solve(inputs, FlowLimits.none(network.n_branch), None)
    cost = Restated(network, inputs).cost()
    assert cost == pytest.approx(result.objective, rel=1e-6)
    if factor == 1.0:
        assert cost == pytest.approx(1.7552e4, rel=1e-4)
    price = result.multipliers.active / network.base_mva
    for bus in (1, 2, 3):
        load = inputs.load_p.copy()
        load[bus] += 0.005
        more = Restated(network, replace(inputs, load_p=load)).cost()
        load = load.copy()
        load[bus] -= 0.01
        less = Restated(network, replace(inputs, load_p=load)).cost()
        assert more - less == pytest.approx(price[bus] * 0.01 * network.base_mva, abs=0.05)
