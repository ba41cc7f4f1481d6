"""Intervals settled a chunk at a time, so that memory does not grow with their number."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
import pandas as pd

from lmpgap.scenario.network import FloatArray, IntArray
from lmpgap.settlement.common_reference import common_reference
from lmpgap.settlement.loss_error import PriceErrors, price_errors
from lmpgap.settlement.nodes import NodeBasket
from lmpgap.settlement.options import FACTOR_COMPONENT, POSTED, SettlementOptions
from lmpgap.settlement.positions import settle_errors
from lmpgap.settlement.posted_reference import ReferenceEvidence, reference_evidence
from lmpgap.settlement.price_set import PriceSet, computed_prices, posted_prices
from lmpgap.settlement.rights import settle_rights

if TYPE_CHECKING:
    from lmpgap.scenario.scenario import Scenario

WITH_LOSSES = ("ac", "dc-loss", "soc")
"""Formulations whose delivery factors differ from one; only these can be held against a loss component."""


@dataclass(frozen=True, kw_only=True)
class Chunk:
    """The prices of some intervals at all nodes."""

    price_sets: Mapping[str, PriceSet]
    basket: NodeBasket
    intervals: pd.DatetimeIndex
    weights: FloatArray
    island: IntArray
    options: SettlementOptions

    @staticmethod
    def of(
        scenario: Scenario,
        basket: NodeBasket,
        intervals: pd.DatetimeIndex,
        prices: pd.DataFrame,
        solves: pd.DataFrame,
        posted: pd.DataFrame,
        options: SettlementOptions,
        held: Sequence[str],
    ) -> Chunk:
        """Gather some intervals: ``held`` names the formulations of the run, ``posted`` is one version per price."""
        at = pd.DatetimeIndex(scenario.interval_starts).get_indexer(intervals)
        inputs = [scenario.inputs(int(position)) for position in at]
        load = np.array([one.load_p for one in inputs])
        layouts: dict[bytes, IntArray] = {}
        island = []
        for one in inputs:
            key = one.branch_in_service.tobytes()
            if key not in layouts:
                layouts[key] = basket.islands(scenario.network.islands(one.branch_in_service))
            island.append(layouts[key])
        extra = len(basket.names) - basket.n_bus
        weights = np.array([scenario.reference_weights(int(position)) for position in at])
        sets = {}
        own = prices[prices["interval_start"].isin(intervals)]
        for name in held:
            at_buses = computed_prices(name, own, solves, intervals, scenario.network.buses)
            sets[name] = basket.prices(at_buses, load)
        if not posted.empty:
            published = posted_prices(posted, intervals, basket.names, options.rounding)
            sets[POSTED] = basket.complete(published, load)
        return Chunk(
            price_sets=sets,
            basket=basket,
            intervals=intervals,
            weights=np.hstack([weights, np.zeros((len(intervals), extra))]),
            island=np.array(island),
            options=options,
        )

    def evidence(self, against: str) -> ReferenceEvidence:
        """Return whether the posted components stand on the scenario's reference."""
        return reference_evidence(
            self.price_sets[POSTED], self.price_sets[against], self.weights, self.island, self.options
        )

    def errors(self, claim: str, against: str) -> tuple[PriceErrors, pd.DataFrame]:
        """Compare two of the price sets; also return the reference that was used."""
        ours, theirs = self.price_sets[claim], self.price_sets[against]
        as_published = claim == POSTED and self.options.posted_reference == "scenario"
        sides = [theirs] if as_published else [ours, theirs]
        reference = common_reference(sides, self.weights, self.island, self.options.minimum_coverage)
        others = {
            name: prices
            for name, prices in self.price_sets.items()
            if name not in (claim, against, POSTED) and name in WITH_LOSSES
        }
        errors = price_errors(ours, theirs, others, reference, self.options)
        used = pd.DataFrame(
            {"interval_start": self.intervals, "reference": reference.kind, "coverage": reference.coverage}
        )
        return errors, used


class Collected:
    """What the chunks add up to."""

    def __init__(self) -> None:
        self.rows: list[pd.DataFrame] = []
        self.rights: list[pd.DataFrame] = []
        self.reference: list[pd.DataFrame] = []
        self.baselines: dict[str, list[pd.DataFrame]] = {}
        self.without_alternative: dict[str, int] = {}
        self.evidence: ReferenceEvidence | None = None

    def add(
        self,
        chunk: Chunk,
        positions: pd.DataFrame,
        rights: pd.DataFrame,
        claim: str,
        against: str,
        baselines: Sequence[str],
        hours: float,
    ) -> None:
        """Settle one chunk."""
        own = positions[positions["interval_start"].isin(chunk.intervals)]
        nodes = chunk.basket.names
        for name in dict.fromkeys([against, *baselines]):
            errors, used = chunk.errors(claim, name)
            rows = settle_errors(own, errors, chunk.intervals, nodes, hours, chunk.options)
            readings = rows[rows["component"].isin(["loss", FACTOR_COMPONENT])]
            self.baselines.setdefault(name, []).append(readings)
            if name != against:
                continue
            self.rows.append(rows)
            self.reference.append(used)
            for other, count in errors.without_alternative.items():
                self.without_alternative[other] = self.without_alternative.get(other, 0) + count
            if not rights.empty:
                self.rights.append(settle_rights(rights, chunk.price_sets[claim], errors, hours))
