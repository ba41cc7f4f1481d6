"""Do the posted components stand on the scenario's reference? The delivery factors of the median node tell.

Delivery factors on two references differ by one common factor, and so do posted and recomputed ones if they are right.
The weighted median over nodes of posted over recomputed factor is that common factor as long as the factors at less
than half of the weight are wrong: 1 where the operator uses the scenario's reference.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from lmpgap.scenario.network import FloatArray
from lmpgap.settlement.common_reference import as_published, common_reference, on_common_reference
from lmpgap.settlement.options import SettlementOptions
from lmpgap.settlement.price_set import PriceSet

AGREEING_SHARE = 0.9
"""Share of the intervals in which the median factor must be 1: a few intervals of a week may be published with
faults."""


@dataclass(frozen=True, kw_only=True)
class ReferenceEvidence:
    """In how many intervals the posted components stand on the scenario's reference, within rounding.

    Attributes
    ----------
    name
        Formulation whose delivery factors the posted ones were held against.
    agreeing, compared
        Numbers of intervals.
    """

    name: str
    agreeing: int
    compared: int

    @property
    def share(self) -> float:
        """Share of the intervals that agree [-]."""
        return self.agreeing / self.compared if self.compared else 0.0

    @property
    def on_scenario(self) -> bool:
        """True when the posted components can be taken as published."""
        return self.compared > 0 and self.share >= AGREEING_SHARE

    def __add__(self, other: ReferenceEvidence) -> ReferenceEvidence:
        return replace(self, agreeing=self.agreeing + other.agreeing, compared=self.compared + other.compared)


def reference_evidence(
    posted: PriceSet, against: PriceSet, weights: FloatArray, island: np.ndarray, options: SettlementOptions
) -> ReferenceEvidence:
    """Compare posted and recomputed delivery factors of the median node, interval by interval.

    Parameters
    ----------
    weights, island : (n_interval, n_node)
        The scenario's reference, and the island of each node.
    """
    ours = as_published(posted, options.smallest_energy)
    own = common_reference([against], weights, island, options.minimum_coverage)
    theirs = on_common_reference(against, own, options.smallest_energy)
    with np.errstate(invalid="ignore", divide="ignore"):
        ratio = ours.factor / theirs.factor
        slack = ours.factor_rounding / np.abs(theirs.factor)
    usable = np.isfinite(ratio) & against.usable(options.usable_verdicts)[:, None]
    # Nodes without weight still tell about the common factor, so all count a little.
    weight = np.where(usable, np.abs(weights) + 1e-6, 0.0)
    compared = usable.any(axis=1)
    median = weighted_median(np.where(usable, ratio, 0.0), weight)
    margin = np.nanmax(np.where(usable, slack, 0.0), axis=1, initial=0.0)
    agreeing = compared & (np.abs(median - 1.0) <= margin + 1e-9)
    return ReferenceEvidence(name=against.name, agreeing=int(agreeing.sum()), compared=int(compared.sum()))


def weighted_median(values: FloatArray, weights: FloatArray) -> FloatArray:
    """Return the weighted median of each row; zero where a row has no weight."""
    order = np.argsort(values, axis=1, kind="stable")
    ranked = np.take_along_axis(weights, order, axis=1)
    passed = np.cumsum(ranked, axis=1)
    middle = np.argmax(passed >= 0.5 * passed[:, -1:], axis=1)
    chosen = np.take_along_axis(np.take_along_axis(values, order, axis=1), middle[:, None], axis=1)[:, 0]
    return np.where(passed[:, -1] > 0.0, chosen, 0.0)
