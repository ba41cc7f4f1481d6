"""Delivery factors and shift factors of an operating point: what a price set must be made of, without any offer.

Turning the bus angles at an operating point, with P(theta) the injections into the network, the factors of any
dispatch that is optimal there solve

    P_theta' DF = 0          delivery factors, one set per island up to scale
    P_theta' C  = - H'       congestion at every bus per unit of shadow price of a limit with gradient H

so one sparse factorisation per interval gives all of them; minus C is the shift factor.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy import sparse
from scipy.sparse.linalg import SuperLU, splu

from lmpgap.dispatch.branch_model import BranchModel, operating_point, voltage_products
from lmpgap.dispatch.linear_model import linear_branches
from lmpgap.dispatch.result import OperatingPoint
from lmpgap.errors import NumericalError
from lmpgap.scenario.network import BoolArray, FloatArray, IntArray, Network
from lmpgap.scenario.settings import DcConvention

LINEAR = ("dc", "dc-loss")


def point_from_voltages(
    network: Network,
    branch_in_service: BoolArray,
    formulation: str,
    magnitude: FloatArray,
    angle: FloatArray,
    convention: DcConvention,
) -> OperatingPoint:
    """Return flows and their derivatives at given voltages, under the flow equations of a formulation.

    Parameters
    ----------
    formulation
        ``"dc"`` and ``"dc-loss"`` take their own linear flows at these angles; anything else the AC flows.
    magnitude, angle : (n_bus,)
        [pu], [rad]; ``nan`` at a dead bus.
    """
    live = np.isfinite(magnitude) & np.isfinite(angle)
    on = branch_in_service & live[network.from_bus] & live[network.to_bus]
    angle = np.where(live, angle, 0.0)
    magnitude = np.where(live, magnitude, 1.0)
    if formulation not in LINEAR:
        c, s = voltage_products(network, magnitude, angle)
        return operating_point(network, BranchModel.of(network, on), magnitude**2, c, s, angle)
    model = linear_branches(network, convention)
    difference = angle[network.from_bus] - angle[network.to_bus] - model.shift
    flow = np.where(on, model.susceptance, 0.0) * difference
    return _linear(network, on, convention, flow, angle, lossy=formulation == "dc-loss")


def linear_point_at(network: Network, point: OperatingPoint, convention: DcConvention) -> OperatingPoint:
    """Return the linear flow equations with losses at the active flows of another operating point.

    Markets take shift factors from susceptances and loss factors from the flows of an AC solution; this is the point
    that such prices belong to when only the AC solution is at hand.
    """
    on = point.dp_from != 0.0
    flow = 0.5 * (point.p_from - point.p_to)
    return _linear(network, on, convention, flow, point.angle, lossy=True)


def _linear(
    network: Network, on: BoolArray, convention: DcConvention, flow: FloatArray, angle: FloatArray, *, lossy: bool
) -> OperatingPoint:
    model = linear_branches(network, convention)
    b = np.where(on, model.susceptance, 0.0)
    factor = model.loss_factor if lossy else np.zeros_like(b)
    loss, slope = factor * flow**2, 2.0 * factor * b * flow
    none = np.zeros_like(b)
    difference = np.divide(flow, b, out=np.zeros_like(b), where=b != 0.0)
    return OperatingPoint(
        w=np.ones(network.n_bus),
        angle=angle,
        c=np.cos(difference),
        s=np.sin(difference),
        p_from=flow + 0.5 * loss,
        q_from=none,
        p_to=-flow + 0.5 * loss,
        q_to=none,
        dp_from=b + 0.5 * slope,
        dq_from=none,
        dp_to=-b + 0.5 * slope,
        dq_to=none,
    )


@dataclass(frozen=True, kw_only=True)
class AngleResponse:
    """The factorised angle system of one operating point.

    Attributes
    ----------
    delivery_factor : (n_bus,)
        [-]; 1 at one bus of each island, so defined up to a factor per island. ``nan`` at a bus on its own.
    island : (n_bus,)
        Island number.
    """

    delivery_factor: FloatArray
    island: IntArray
    _factor: SuperLU
    _pinned: BoolArray
    _difference: sparse.csr_array

    @staticmethod
    def of(network: Network, branch_in_service: BoolArray, point: OperatingPoint) -> AngleResponse:
        """Factorise P_theta' of an operating point.

        Raises
        ------
        NumericalError
            If the flows do not determine the angles.
        """
        ends_from, ends_to = network.from_incidence(), network.to_incidence()
        difference = sparse.csr_array(ends_from - ends_to)
        gains = ends_from.multiply(point.dp_from[:, None]) + ends_to.multiply(point.dp_to[:, None])
        turning = sparse.csr_array(gains.T @ difference)
        island = network.islands(branch_in_service & (point.dp_from != 0.0))
        # The stiffest bus of each island stands in for the equation that the others imply.
        order = np.lexsort((-np.abs(turning.diagonal()), island))
        _, first = np.unique(island[order], return_index=True)
        pinned = np.zeros(network.n_bus, dtype=bool)
        pinned[order[first]] = True
        system = sparse.csc_array(
            turning.T.multiply((~pinned).astype(float)[:, None]) + sparse.diags_array(pinned.astype(float))
        )
        try:
            factor = splu(system)
        except RuntimeError as error:
            raise NumericalError(
                "the flows at this operating point do not determine the bus angles, so it has no shift factors; check "
                "branch reactances"
            ) from error
        alone = np.bincount(island)[island] == 1
        delivery_factor = np.where(alone, np.nan, factor.solve(pinned.astype(float)))
        return AngleResponse(
            delivery_factor=delivery_factor,
            island=island,
            _factor=factor,
            _pinned=pinned,
            _difference=difference,
        )

    def congestion(self, gain: sparse.csr_array) -> FloatArray:
        """Return the congestion at every bus per unit of shadow price, (n_row, n_bus) [-].

        Parameters
        ----------
        gain : sparse (n_row, n_branch)
            Derivative of each limited quantity with respect to the branch angles [pu/rad].
        """
        right = -(gain @ self._difference).toarray().T
        right[self._pinned] = 0.0
        return np.asarray(self._factor.solve(np.ascontiguousarray(right)).T)
