"""Move price components from one reference to another, exactly and without the network.

A price does not depend on the reference of its components, the components do: two price sets can only be
compared part by part on one reference. With energy e, loss L_i, congestion C_ik and reactive part R_i on any
reference, the parts on weights v are

    DF'_i   = (e + L_i) / (e + sum_j v_j L_j)
    energy' = sum_j v_j lambda_j              loss'_i = energy' (DF'_i - 1)
    C'_ik   = C_ik - DF'_i sum_j v_j C_jk     R'_i    = R_i - DF'_i sum_j v_j R_j

because e + L_i is the old energy price times the old delivery factor, and delivery factors on two references
differ by one common factor. No division by the old energy price is needed, which may be zero or negative.
Dropping DF' from the last line (the rule of a lossless dispatch) is wrong as soon as there are losses.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy import sparse

from lmpgap.errors import NotIdentifiableError
from lmpgap.scenario.network import BoolArray, FloatArray, IntArray
from lmpgap.tolerances import DEFAULT_TOLERANCES, Tolerances


@dataclass(frozen=True, kw_only=True)
class ReferencedComponents:
    """Components on the new reference; leading axes (intervals) as they came.

    Attributes
    ----------
    energy, loss : (..., n_bus)
        [$/MWh]
    congestion, reactive : (..., n_bus) or (..., n_part, n_bus)
        In the shape they came in: totals, or one row per constraint or source [$/MWh].
    delivery_factor : (..., n_bus)
        [-]
    identifiable : (..., n_bus)
        False where the delivery factors cannot be told from the prices (weighted energy plus loss near zero, or
        no price at a weighted bus); the components are ``nan`` there.
    loss_uncertainty : (..., n_bus)
        How far rounding of the incoming components can move the new loss component; zero for exact data
        [$/MWh].
    rounding_dominates : (..., n_bus)
        True where that uncertainty is larger than the loss components of the island themselves, by root mean
        square.
    """

    energy: FloatArray
    loss: FloatArray
    congestion: FloatArray
    reactive: FloatArray
    delivery_factor: FloatArray
    identifiable: BoolArray
    loss_uncertainty: FloatArray
    rounding_dominates: BoolArray


def island_weights(weights: FloatArray, island: IntArray, live: BoolArray) -> FloatArray:
    """Return reference weights that sum to one over the live buses of every live island.

    Parameters
    ----------
    weights : (n_bus,)
        Any scale, negative ones allowed.
    island : (n_bus,)
        Island number of each bus.
    live : (n_bus,)
        False at dead buses, which get no weight.

    Returns
    -------
    weights : (n_bus,)
        An island without any weight gets the plain mean over its live buses, so that it has an energy price
        although the reference does not speak of it.

    Raises
    ------
    NotIdentifiableError
        When the weights of an island are not all zero but cancel.
    """
    if not np.all(np.isfinite(weights[live])):
        raise NotIdentifiableError("reference weights must be finite at every bus that has a price")
    return _normalised(np.where(live, weights, 0.0), island, live.astype(float))


def rereference(
    energy: FloatArray | float,
    loss: FloatArray,
    congestion: FloatArray,
    reactive: FloatArray | None,
    weights: FloatArray,
    *,
    island: IntArray | None = None,
    rounding: float = 0.0,
    strict: bool = True,
    tolerances: Tolerances = DEFAULT_TOLERANCES,
) -> ReferencedComponents:
    """Return price components on other reference weights; works on computed and on posted prices.

    Parameters
    ----------
    energy
        Anything that broadcasts to the shape of ``loss``; constant within an island and interval [$/MWh].
    loss : (..., n_bus)
        Leading axes, such as intervals, are carried through; ``nan`` where a price is missing [$/MWh].
    congestion : (..., n_bus) or (..., n_part, n_bus)
        Total, or one row per constraint [$/MWh].
    reactive
        Like ``congestion``, or ``None`` where there is none [$/MWh].
    weights : (n_bus,) or (..., n_bus)
        Negative ones allowed; normalised within each island.
    island : (n_bus,) or None
        Island number of each bus; ``None`` is one island.
    rounding
        Half the rounding step of the incoming components [$/MWh]: half a cent for posted prices.
    strict
        Raise where the delivery factors are not identifiable, instead of returning ``nan`` and a flag.
    tolerances
        ``reference_energy`` is the smallest weighted energy plus loss that is divided by.

    Returns
    -------
    ReferencedComponents

    Raises
    ------
    NotIdentifiableError
        See ``strict``; and always when weights cancel or shapes do not fit.
    """
    loss = np.asarray(loss, dtype=float)
    congestion = np.asarray(congestion, dtype=float)
    reactive = np.zeros(loss.shape) if reactive is None else np.asarray(reactive, dtype=float)
    energy = np.broadcast_to(np.asarray(energy, dtype=float), loss.shape)
    n_bus = loss.shape[-1]
    for part in (congestion, reactive):
        if part.shape != loss.shape and (part.shape[:-2], part.shape[-1]) != (loss.shape[:-1], n_bus):
            raise NotIdentifiableError(
                f"components of shape {part.shape} do not fit losses of shape {loss.shape}: expected the same "
                "shape, or one more axis before the buses for the constraints"
            )
    label = np.zeros(n_bus, dtype=np.int64) if island is None else island
    share = np.broadcast_to(_normalised(np.asarray(weights, dtype=float), label, np.ones(n_bus)), loss.shape)

    def mean(values: FloatArray, weight: FloatArray) -> FloatArray:
        # A missing price does no harm where it has no weight.
        return _island_sum(np.where(weight == 0.0, 0.0, values * weight), label)

    def own_shape(part: FloatArray, values: FloatArray) -> FloatArray:
        return values if part.ndim == loss.ndim else np.expand_dims(values, -2)

    arriving = energy + mean(loss, share)
    # Rounded energy and loss are each off by up to `rounding`; below twice that even the sign is unknown.
    floor = max(tolerances.reference_energy, 2.0 * rounding)
    with np.errstate(invalid="ignore"):
        identifiable = np.abs(arriving) > floor
    refused = ~identifiable & np.isfinite(energy + loss)  # a dead bus has nothing to refuse
    if strict and refused.any():
        raise NotIdentifiableError(
            f"energy plus reference-weighted loss is within {floor:g} $/MWh of zero (or a weighted node has no "
            f"price) at {int(np.count_nonzero(refused))} of {refused.size} prices: their delivery "
            "factors cannot be told from these components; leave these intervals out or take the factors from "
            "an operating point"
        )
    factor = (energy + loss) / np.where(identifiable, arriving, np.nan)

    def moved(part: FloatArray) -> FloatArray:
        return part - own_shape(part, factor) * mean(part, own_shape(part, share))

    total = energy + loss
    for part in (congestion, reactive):
        total = total + (part if part.ndim == loss.ndim else part.sum(axis=-2))
    new_energy = np.where(np.isfinite(factor), mean(total, share), np.nan)
    new_loss = new_energy * (factor - 1.0)
    with np.errstate(divide="ignore", invalid="ignore"):
        uncertainty = np.abs(new_energy / arriving) * 2.0 * rounding * (1.0 + np.abs(factor))
    known = np.isfinite(new_loss)
    loss_power = _island_sum(np.where(known, new_loss, 0.0) ** 2, label)
    uncertainty_power = _island_sum(np.where(known, uncertainty, 0.0) ** 2, label)
    return ReferencedComponents(
        energy=new_energy,
        loss=new_loss,
        congestion=moved(congestion),
        reactive=moved(reactive),
        delivery_factor=factor,
        identifiable=identifiable,
        loss_uncertainty=uncertainty,
        rounding_dominates=uncertainty_power > loss_power,
    )


def _island_sum(values: FloatArray, island: IntArray) -> FloatArray:
    """Return the sum over each bus's island, in the shape of the values (..., n_bus)."""
    n_bus = values.shape[-1]
    if values.ndim == 1:
        return np.asarray(np.bincount(island, values)[island], dtype=float)
    member = sparse.csr_array((np.ones(n_bus), (np.arange(n_bus), island)))
    flat = values.reshape(-1, n_bus)
    return np.asarray((flat @ member)[:, island]).reshape(values.shape)


def _normalised(weights: FloatArray, island: IntArray, when_none: FloatArray) -> FloatArray:
    """Return weights (..., n_bus) that sum to one per island; an island without any takes ``when_none``."""
    own = np.where(_island_sum(np.abs(weights), island) == 0.0, when_none, weights)
    total, size = _island_sum(own, island), _island_sum(np.abs(own), island)
    cancelling = (size > 0.0) & (np.abs(total) <= 1e-9 * size)
    if cancelling.any():
        raise NotIdentifiableError(
            f"the reference weights cancel (sum 0) for {int(np.count_nonzero(cancelling))} bus(es), so an average "
            "on them has no meaning; choose weights whose sum is not zero"
        )
    return np.asarray(own / np.where(total == 0.0, 1.0, total))
