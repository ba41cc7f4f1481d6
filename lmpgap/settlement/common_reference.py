"""Two or more price sets on one reference, and how far rounding and ambiguity can move their parts there.

Components may only be subtracted on one reference. The scenario's reference is used as far as its nodes are priced on
every side; where too little of it is, the plain mean of the nodes that are.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from lmpgap.prices.reference import ReferencedComponents, rereference
from lmpgap.scenario.network import FloatArray, IntArray
from lmpgap.settlement.nodes import STRADDLES_ISLANDS
from lmpgap.settlement.price_set import PriceSet

SCENARIO_REFERENCE = "scenario"
PARTIAL_REFERENCE = "scenario, nodes priced on both sides"
MEAN_REFERENCE = "plain mean of the nodes priced on both sides"


@dataclass(frozen=True, kw_only=True)
class CommonReference:
    """The reference that is common to the price sets.

    Attributes
    ----------
    weights : (n_interval, n_node)
        Sum to one per island and interval, zero elsewhere [-].
    island : (n_interval, n_node)
        Island number, or `STRADDLES_ISLANDS`.
    coverage : (n_interval,)
        Share of the scenario's weights on nodes that are priced on every side [-].
    kind : (n_interval,)
        `SCENARIO_REFERENCE`, `PARTIAL_REFERENCE` or `MEAN_REFERENCE`.
    """

    weights: FloatArray
    island: IntArray
    coverage: FloatArray
    kind: NDArray[np.object_]


@dataclass(frozen=True, kw_only=True)
class CommonPrices:
    """One price set on the common reference; all arrays (n_interval, n_node).

    Attributes
    ----------
    lmp, energy, congestion, loss, reactive
        [$/MWh]
    factor
        Delivery factor [-].
    factor_rounding
        How far rounding of the published figures can move the delivery factor [-].
    energy_rounding, loss_rounding, congestion_rounding
        The same for the components [$/MWh].
    energy_down, energy_up, lmp_down, lmp_up
        How far the price may lie below and above where it is not unique [$/MWh].
    """

    lmp: FloatArray
    energy: FloatArray
    congestion: FloatArray
    loss: FloatArray
    reactive: FloatArray
    factor: FloatArray
    factor_rounding: FloatArray
    energy_rounding: FloatArray
    loss_rounding: FloatArray
    congestion_rounding: FloatArray
    energy_down: FloatArray
    energy_up: FloatArray
    lmp_down: FloatArray
    lmp_up: FloatArray


def common_reference(
    price_sets: Sequence[PriceSet], weights: FloatArray, island: IntArray, minimum_coverage: float
) -> CommonReference:
    """Return a reference on which all price sets have components.

    Parameters
    ----------
    weights : (n_interval, n_node)
        Reference weights of the scenario; zero at hubs and zones.
    island : (n_interval, n_node)
    minimum_coverage
        Smallest share of the weights of an island that must be priced on every side; below it all nodes priced on
        every side count alike.
    """
    priced = np.ones(weights.shape, dtype=bool)
    for prices in price_sets:
        priced &= np.isfinite(prices.energy + prices.loss + prices.congestion)
    priced &= island != STRADDLES_ISLANDS
    n_island = int(island.max(initial=0)) + 1
    chosen = np.zeros(weights.shape)
    coverage = np.ones(len(weights))
    kind = np.full(len(weights), SCENARIO_REFERENCE, dtype=object)
    for number in range(n_island):
        member = island == number
        wanted = np.where(member, weights, 0.0)
        available = np.where(priced, wanted, 0.0)
        size = np.abs(wanted).sum(axis=1)
        share = np.divide(np.abs(available).sum(axis=1), size, out=np.zeros(size.size), where=size > 0.0)
        total = available.sum(axis=1)
        alike = (member & priced).astype(float)
        count = alike.sum(axis=1)
        # Weights of both signs may cancel once nodes are missing; the mean is then the honest choice.
        use = (share >= minimum_coverage) & (np.abs(total) > 1e-9 * np.maximum(size, 1e-300)) & (size > 0.0)
        mean = np.divide(alike, count[:, None], out=np.zeros(alike.shape), where=count[:, None] > 0)
        own = np.divide(available, total[:, None], out=np.zeros(alike.shape), where=use[:, None])
        chosen += np.where(use[:, None], own, mean)
        relevant = size > 0.0
        coverage = np.where(relevant, np.minimum(coverage, share), coverage)
        kind[relevant & use & (share < 1.0 - 1e-12) & (kind != MEAN_REFERENCE)] = PARTIAL_REFERENCE
        kind[relevant & ~use] = MEAN_REFERENCE
    return CommonReference(weights=chosen, island=island, coverage=coverage, kind=kind)


def as_published(prices: PriceSet, smallest_energy: float) -> CommonPrices:
    """Return a posted price set whose components stand on the common reference already, untouched.

    Notes
    -----
    DF_i = (e + L_i)/e, so d DF_i = (d L_i - (DF_i - 1) d e)/e; the other parts are off by their own rounding.
    """
    known = np.abs(prices.energy) >= smallest_energy
    factor = 1.0 + np.divide(prices.loss, prices.energy, out=np.full(prices.loss.shape, np.nan), where=known)
    half = np.full(prices.lmp.shape, prices.rounding)
    none = np.zeros(prices.lmp.shape)
    return CommonPrices(
        lmp=prices.lmp,
        energy=prices.energy,
        congestion=prices.congestion,
        loss=prices.loss,
        reactive=prices.reactive,
        factor=factor,
        factor_rounding=half * (1.0 + np.abs(factor - 1.0)) / np.where(known, np.abs(prices.energy), np.nan),
        energy_rounding=half,
        loss_rounding=half,
        congestion_rounding=half,
        energy_down=none,
        energy_up=none,
        lmp_down=none,
        lmp_up=none,
    )


def on_common_reference(prices: PriceSet, reference: CommonReference, smallest_energy: float) -> CommonPrices:
    """Return a price set on the common reference.

    Notes
    -----
    With D = e + sum_j v_j L_j, k = energy'/D and V = sum |v_j|, errors of the published figures enter as

        d DF_i = (d L_i - DF_i sum_j v_j d L_j + (1 - DF_i) d e) / D
        d loss'_i = (DF_i - 1) d energy' + energy' d DF_i
        d C'_i = d C_i - DF_i sum_j v_j d C_j - (sum_j v_j C_j) d DF_i

    and each figure is off by at most ``rounding``, the node's own share in the reference counted once.
    """
    moved = _rereference(prices, reference)
    v = np.abs(reference.weights)
    total = _island_sum(v, reference)
    arriving = prices.energy + _island_sum(
        np.where(reference.weights == 0, 0.0, reference.weights * prices.loss), reference
    )
    factor = np.where(np.abs(arriving) >= smallest_energy, moved.delivery_factor, np.nan)
    half = prices.rounding
    signed = reference.weights
    own = np.abs(1.0 - factor * signed) + np.abs(factor) * (total - v)
    with np.errstate(divide="ignore", invalid="ignore"):
        factor_rounding = half * (own + np.abs(1.0 - factor)) / np.abs(arriving)
    mean_congestion = _island_sum(np.where(signed == 0, 0.0, signed * prices.congestion), reference)
    energy_rounding = np.where(np.isnan(moved.energy), np.nan, half * total)
    down, up = prices.lmp - prices.low, prices.high - prices.lmp
    positive, negative = np.maximum(signed, 0.0), np.maximum(-signed, 0.0)

    def mean(values: FloatArray, weight: FloatArray) -> FloatArray:
        # A range may be endless where it has no weight.
        return _island_sum(weight * np.where(weight == 0.0, 0.0, values), reference)

    return CommonPrices(
        lmp=prices.lmp,
        energy=moved.energy,
        congestion=moved.congestion,
        loss=np.where(np.isnan(factor), np.nan, moved.loss),
        reactive=moved.reactive,
        factor=factor,
        factor_rounding=factor_rounding,
        energy_rounding=energy_rounding,
        loss_rounding=np.abs(factor - 1.0) * energy_rounding + np.abs(moved.energy) * factor_rounding,
        congestion_rounding=half * own + np.abs(mean_congestion) * factor_rounding,
        energy_down=mean(down, positive) + mean(up, negative),
        energy_up=mean(up, positive) + mean(down, negative),
        lmp_down=down,
        lmp_up=up,
    )


def _rereference(prices: PriceSet, reference: CommonReference) -> ReferencedComponents:
    """Re-reference interval by interval group: one call per distinct map of islands."""
    layouts, group = np.unique(reference.island, axis=0, return_inverse=True)
    parts: dict[str, FloatArray] = {}
    for number, layout in enumerate(layouts):
        rows = np.flatnonzero(group.reshape(-1) == number)
        # Nodes that straddle islands get an island of their own without weights, and so no components.
        label = np.where(layout == STRADDLES_ISLANDS, layout.max(initial=0) + 1, layout)
        moved = rereference(
            prices.energy[rows],
            np.where(layout == STRADDLES_ISLANDS, np.nan, prices.loss[rows]),
            prices.congestion[rows],
            prices.reactive[rows],
            reference.weights[rows],
            island=label,
            rounding=prices.rounding,
            strict=False,
        )
        for name in ("energy", "loss", "congestion", "reactive", "delivery_factor"):
            parts.setdefault(name, np.full(prices.lmp.shape, np.nan))[rows] = getattr(moved, name)
    empty = np.zeros(prices.lmp.shape)
    return ReferencedComponents(
        **parts,
        identifiable=np.isfinite(parts["delivery_factor"]),
        loss_uncertainty=empty,
        rounding_dominates=empty.astype(bool),
    )


def _island_sum(values: FloatArray, reference: CommonReference) -> FloatArray:
    """Return at each node the sum over the nodes of its island, (n_interval, n_node)."""
    out = np.zeros(values.shape)
    for number in range(int(reference.island.max(initial=0)) + 1):
        member = reference.island == number
        out = np.where(member, np.where(member, values, 0.0).sum(axis=1, keepdims=True), out)
    return out
