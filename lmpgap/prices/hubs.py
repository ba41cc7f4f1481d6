"""Prices of hubs and zones, and how much of a zone's change is only a change of its weights.

A hub has fixed weights, a zone is weighted with the loads of the interval. Every component of their price is the
weighted mean of the component over their buses, and so is the delivery factor, because the loss component is linear
in it.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from lmpgap.errors import NotIdentifiableError
from lmpgap.scenario.network import FloatArray


@dataclass(frozen=True, kw_only=True)
class HubPrices:
    """Prices and components, (..., n_hub) each [$/MWh]; ``nan`` where a bus with weight has no price."""

    lmp: FloatArray
    energy: FloatArray
    congestion: FloatArray
    loss: FloatArray
    reactive: FloatArray


@dataclass(frozen=True, kw_only=True)
class WeightDrift:
    """A change of a weighted price in its two parts, (..., n_hub) each [$/MWh].

    Attributes
    ----------
    price_change : (..., n_hub)
        The part from prices that changed, at the mean of both weights.
    weight_drift : (..., n_hub)
        The part from weights that moved, at the mean of both prices: zero for a hub.
    """

    price_change: FloatArray
    weight_drift: FloatArray

    @property
    def total(self) -> FloatArray:
        """The whole change [$/MWh], shape (..., n_hub)."""
        return self.price_change + self.weight_drift


def hub_weights(weights: FloatArray, names: Sequence[str]) -> FloatArray:
    """Return hub weights that sum to one.

    Parameters
    ----------
    weights : (n_hub, n_bus)
        Any scale, zero where a bus is no part of the hub; negative ones allowed.
    names : (n_hub,)
        For the message.

    Raises
    ------
    NotIdentifiableError
        Naming every hub whose weights sum to zero.
    """
    total = weights.sum(axis=-1, keepdims=True)
    empty = np.abs(total[:, 0]) <= 1e-9 * np.abs(weights).sum(axis=-1)
    if empty.any():
        listed = ", ".join(repr(name) for name, bad in zip(names, empty, strict=True) if bad)
        raise NotIdentifiableError(f"the weights of {listed} sum to zero, so there is no average on them")
    return np.asarray(weights / total)


def zone_weights(zone_of_bus: Sequence[str], load: FloatArray) -> tuple[tuple[str, ...], FloatArray]:
    """Return the zones in order of first appearance and their load weights.

    Parameters
    ----------
    zone_of_bus : (n_bus,)
        Empty where a bus is in no zone.
    load : (..., n_bus)
        Load of each interval [any unit].

    Returns
    -------
    names : (n_zone,)
    weights : (..., n_zone, n_bus)
        Sum to one per zone; ``nan`` throughout for a zone without load, which has no load-weighted price.
    """
    names = tuple(dict.fromkeys(zone for zone in zone_of_bus if zone))
    zone: NDArray[np.object_] = np.array(list(zone_of_bus), dtype=object)
    member = np.array([zone == name for name in names], dtype=float).reshape(len(names), zone.size)
    own = member * load[..., None, :]
    total = own.sum(axis=-1, keepdims=True)
    size = np.abs(own).sum(axis=-1, keepdims=True)
    has_load = np.abs(total) > 1e-9 * size
    return names, np.divide(own, total, out=np.full(own.shape, np.nan), where=np.broadcast_to(has_load, own.shape))


def weighted(values: FloatArray, weights: FloatArray) -> FloatArray:
    """Return weighted sums over buses; a missing value counts only where it has weight.

    Parameters
    ----------
    values : (..., n_bus)
    weights : (n_hub, n_bus) or (..., n_hub, n_bus)

    Returns
    -------
    (..., n_hub)
    """
    spread = values[..., None, :]
    return np.asarray(np.where(weights == 0.0, 0.0, spread * weights).sum(axis=-1))


def hub_prices(
    energy: FloatArray, congestion: FloatArray, loss: FloatArray, reactive: FloatArray, weights: FloatArray
) -> HubPrices:
    """Return prices of hubs or zones with their components.

    Parameters
    ----------
    energy, congestion, loss, reactive : (..., n_bus)
        [$/MWh]
    weights : (n_hub, n_bus) or (..., n_hub, n_bus)
        From `hub_weights` or `zone_weights`.
    """
    parts = {
        "energy": weighted(energy, weights),
        "congestion": weighted(congestion, weights),
        "loss": weighted(loss, weights),
        "reactive": weighted(reactive, weights),
    }
    return HubPrices(lmp=parts["energy"] + parts["congestion"] + parts["loss"] + parts["reactive"], **parts)


def weight_drift(
    price_before: FloatArray, weights_before: FloatArray, price_after: FloatArray, weights_after: FloatArray
) -> WeightDrift:
    """Return what of a zone's change comes from prices and what from its weights.

    Works between two intervals and between two price sets, and for each component as for the whole price.

    Parameters
    ----------
    price_before, price_after : (..., n_bus)
        [$/MWh]
    weights_before, weights_after : (..., n_hub, n_bus)

    Notes
    -----
    With both weights w and prices p, ``w1 p1 - w0 p0 = (w0 + w1)/2 (p1 - p0) + (w1 - w0) (p0 + p1)/2`` exactly, and
    neither side is preferred: the symmetric decomposition of Bennet, "The Theory of Measurement of Changes in Cost
    of Living", Journal of the Royal Statistical Society 83(3), 1920.
    """
    # A bus that has weight on one side only must have a price on both, else the parts are not defined.
    return WeightDrift(
        price_change=weighted(price_after - price_before, 0.5 * (weights_before + weights_after)),
        weight_drift=weighted(0.5 * (price_before + price_after), weights_after - weights_before),
    )
