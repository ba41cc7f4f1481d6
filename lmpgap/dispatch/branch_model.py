"""The pi-model of a branch: flows and their derivatives from voltage products.

With W = V_f conj(V_t) = c + j s, every flow is a1 w_f + a2 w_t + a3 c + a4 s with constant coefficients. Turning
the branch angle (from minus to) leaves w alone and turns W, so dc = -s and ds = c, and the derivative of a flow is
-a3 s + a4 c. All four flows of all branches are handled by the same coefficient vectors.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from lmpgap.dispatch.result import OperatingPoint
from lmpgap.scenario.network import BoolArray, FloatArray, Network


@dataclass(frozen=True, kw_only=True)
class FlowCoefficients:
    """Coefficients of one flow of every branch [pu], each of shape (n_branch,).

    ``w`` multiplies the squared voltage at the flow's own end, ``c`` and ``s`` the parts of W.
    """

    w: FloatArray
    c: FloatArray
    s: FloatArray


@dataclass(frozen=True, kw_only=True)
class BranchModel:
    """The four flows of every branch; branches out of service have zero coefficients."""

    p_from: FlowCoefficients
    q_from: FlowCoefficients
    p_to: FlowCoefficients
    q_to: FlowCoefficients

    @staticmethod
    def of(network: Network, branch_in_service: BoolArray) -> BranchModel:
        """Return the model of a network.

        With y = g + jb = 1/(r + jx), half the charging at each end, ratio tau and shift phi at the from end::

            S_f = (conj(y) - j half)/tau^2 w_f - conj(y) exp(-j phi)/tau W
            S_t = (conj(y) - j half)       w_t - conj(y) exp(+j phi)/tau conj(W)
        """
        on = branch_in_service.astype(float)
        z2 = network.r**2 + network.x**2
        g = on * network.r / z2
        b = -on * network.x / z2
        half = 0.5 * on * network.charging
        tau = network.tap
        cos, sin = np.cos(network.shift), np.sin(network.shift)
        real_from, imag_from = (g * cos - b * sin) / tau, (g * sin + b * cos) / tau
        real_to, imag_to = (g * cos + b * sin) / tau, (b * cos - g * sin) / tau
        return BranchModel(
            p_from=FlowCoefficients(w=g / tau**2, c=-real_from, s=-imag_from),
            q_from=FlowCoefficients(w=-(b + half) / tau**2, c=imag_from, s=-real_from),
            p_to=FlowCoefficients(w=g, c=-real_to, s=imag_to),
            q_to=FlowCoefficients(w=-(b + half), c=imag_to, s=real_to),
        )


def voltage_products(network: Network, magnitude: FloatArray, angle: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Return c and s of every branch, each (n_branch,), from voltage magnitudes [pu] and angles [rad]."""
    difference = angle[network.from_bus] - angle[network.to_bus]
    product = magnitude[network.from_bus] * magnitude[network.to_bus]
    return product * np.cos(difference), product * np.sin(difference)


def operating_point(
    network: Network, model: BranchModel, w: FloatArray, c: FloatArray, s: FloatArray, angle: FloatArray
) -> OperatingPoint:
    """Return flows and their angle derivatives at given voltage products.

    Parameters
    ----------
    w : (n_bus,)
        Squared voltage magnitudes [pu].
    c, s : (n_branch,)
        Voltage products [pu]; they need not belong to a set of angles (a relaxation).
    angle : (n_bus,)
        Voltage angles [rad], carried through.
    """
    own = {"from": w[network.from_bus], "to": w[network.to_bus]}

    def flow(k: FlowCoefficients, end: str) -> tuple[FloatArray, FloatArray]:
        return k.w * own[end] + k.c * c + k.s * s, -k.c * s + k.s * c

    p_from, dp_from = flow(model.p_from, "from")
    q_from, dq_from = flow(model.q_from, "from")
    p_to, dp_to = flow(model.p_to, "to")
    q_to, dq_to = flow(model.q_to, "to")
    return OperatingPoint(
        w=w,
        angle=angle,
        c=c,
        s=s,
        p_from=p_from,
        q_from=q_from,
        p_to=p_to,
        q_to=q_to,
        dp_from=dp_from,
        dq_from=dq_from,
        dp_to=dp_to,
        dq_to=dq_to,
    )
