"""How a branch becomes a susceptance and a loss coefficient in the linear formulations."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from lmpgap.dispatch.live import SMALLEST_IMPEDANCE
from lmpgap.scenario.network import FloatArray, Network
from lmpgap.scenario.settings import DcConvention


@dataclass(frozen=True, kw_only=True)
class LinearBranches:
    """Coefficients of ``flow = susceptance * (angle_from - angle_to - shift)`` and ``loss = loss_factor * flow^2``.

    Attributes
    ----------
    susceptance : (n_branch,)
        [pu/rad]
    shift : (n_branch,)
        [rad]; zero where the convention leaves phase shifts out.
    loss_factor : (n_branch,)
        Loss per squared flow [1/pu].
    """

    susceptance: FloatArray
    shift: FloatArray
    loss_factor: FloatArray


def linear_branches(
    network: Network, convention: DcConvention, voltage_profile: FloatArray | None = None
) -> LinearBranches:
    """Return the coefficients of all branches under a convention.

    With ``"impedance"`` the series element is g + jb = conj(1/(r + jx)), with ``"reactance"`` b = 1/x and
    g = r/x^2. Its loss at a given flow is (g/b^2) flow^2 at 1 pu; at other voltages the same flow needs a current
    that falls with the voltage, so the factor is divided by the product of the voltages at both ends of the series
    element. A tap ratio divides the susceptance and leaves the loss of a given flow alone. Negative resistances, as
    in star equivalents of three-winding transformers, count as lossless: a loss that falls with flow is not convex.
    A branch without reactance, which these formulations cannot describe, counts as one whose reactance is its
    impedance.

    Parameters
    ----------
    voltage_profile : (n_bus,) or None
        Voltage magnitudes [pu]; ``None`` is 1 pu at every series element.
    """
    r, x = network.r, network.x
    # A branch without reactance still connects its ends: let it count with its whole impedance.
    reactance = np.where(x == 0.0, np.maximum(np.abs(r), SMALLEST_IMPEDANCE), x)
    square = np.where(x == 0.0, 0.0, r**2) + reactance**2 if convention.susceptance == "impedance" else reactance**2
    susceptance = reactance / square
    loss_factor = np.maximum(r, 0.0) * square / reactance**2
    tap = network.tap if convention.taps else np.ones_like(network.tap)
    if voltage_profile is not None:
        product = voltage_profile[network.from_bus] / tap * voltage_profile[network.to_bus]
        loss_factor = loss_factor / product
    return LinearBranches(
        susceptance=susceptance / tap,
        shift=network.shift if convention.taps else np.zeros_like(network.shift),
        loss_factor=loss_factor,
    )
