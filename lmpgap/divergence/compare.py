"""Compare two price sets: where they differ, by how much, and why."""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from typing import Any, Protocol

import numpy as np
import pandas as pd

from lmpgap.divergence.differences import differences
from lmpgap.divergence.drivers import drivers
from lmpgap.divergence.price_set import PriceSet, common_ground
from lmpgap.divergence.price_tables import price_set
from lmpgap.divergence.ranking import rank_buses, rank_constraints, rank_intervals, rank_money
from lmpgap.errors import DataError
from lmpgap.scenario.network import FloatArray
from lmpgap.tolerances import DEFAULT_TOLERANCES, Tolerances

ReferenceWeights = pd.Series | pd.DataFrame
"""Weight by bus, or one row per interval start and one column per bus."""


@dataclass(frozen=True, kw_only=True)
class Comparison:
    """Where and why two price sets differ.

    Attributes
    ----------
    differences, drivers : DataFrame
        The tables of the run folder by these names.
    own_reference : DatetimeIndex
        Intervals whose components could not be brought to the common reference and stand on their own; their
        differences are right, the split between energy price, delivery factor and constraints is not.
    """

    differences: pd.DataFrame
    drivers: pd.DataFrame
    own_reference: pd.DatetimeIndex

    def rankings(
        self,
        most: int = 10,
        *,
        positions: pd.DataFrame | None = None,
        hours: float = 1.0,
        hubs: pd.DataFrame | None = None,
    ) -> dict[str, pd.DataFrame]:
        """Return the largest divergences by bus, interval, constraint and money, each with at most so many rows.

        Parameters
        ----------
        positions
            Table ``positions``; without any the ranking by money is left out.
        hours
            Length of one interval [h].
        hubs
            Table ``hubs``, for positions at hubs.
        """
        found = {
            "buses": rank_buses(self.differences).head(most),
            "intervals": rank_intervals(self.differences).head(most),
            "constraints": rank_constraints(self.drivers, len(self.differences)).head(most),
        }
        if positions is not None and not positions.empty:
            found["positions"] = rank_money(self.differences, positions, hours, hubs).head(most)
        return found


class RunTables(Protocol):
    """What a comparison needs of a run folder."""

    def table(self, name: str) -> pd.DataFrame:
        """Return a table of the run."""
        ...

    def write(self, name: str, frame: pd.DataFrame) -> Any:
        """Store a table."""
        ...


def compare(
    tables_base: Mapping[str, pd.DataFrame],
    tables_against: Mapping[str, pd.DataFrame],
    *,
    base: str,
    against: str,
    base_name: str | None = None,
    against_name: str | None = None,
    reference_weights: ReferenceWeights | None = None,
    tolerances: Tolerances = DEFAULT_TOLERANCES,
) -> Comparison:
    """Explain every difference between two price sets given as run tables.

    Parameters
    ----------
    tables_base, tables_against
        Run tables (``prices``, ``constraints``, ``contributions``) by name; the same mapping twice for two
        formulations of one run, `lmpgap.divergence.posted.posted_tables` for posted prices.
    base, against
        Which ``formulation`` of each.
    base_name, against_name
        How the sets are called in the result; needed for the same formulation of two runs.
    reference_weights
        Brings both sets to this reference first. Needed when their references differ, since components
        may only be compared on one.

    Returns
    -------
    Comparison
        ``difference`` is price of ``against`` minus price of ``base`` [$/MWh].

    Raises
    ------
    DataError
        If a set is empty or both share nothing.
    """
    return compare_sets(
        price_set(tables_base, base, name=base_name),
        price_set(tables_against, against, name=against_name),
        reference_weights=reference_weights,
        tolerances=tolerances,
    )


def compare_sets(
    base: PriceSet,
    against: PriceSet,
    *,
    reference_weights: ReferenceWeights | None = None,
    tolerances: Tolerances = DEFAULT_TOLERANCES,
) -> Comparison:
    """Explain every difference between two price sets; see `compare`."""
    base, against = common_ground(base, against)
    own = np.zeros(base.n_interval, dtype=bool)
    if reference_weights is not None:
        weights = weights_for(base, reference_weights)
        moved_base, identified_base = base.rereferenced(weights, tolerances=tolerances)
        moved_against, identified_against = against.rereferenced(weights, tolerances=tolerances)
        base, against = moved_base, moved_against
        own = ~(identified_base & identified_against)
    return Comparison(
        differences=differences(base, against, tolerances),
        drivers=drivers(base, against, tolerances),
        own_reference=base.intervals[own],
    )


def weights_for(prices: PriceSet, reference_weights: ReferenceWeights) -> FloatArray:
    """Return reference weights on the intervals and buses of a price set, (n_interval, n_bus), each row adding to one.

    Buses that the set does not hold drop out and the others share their weight in proportion: the reference is
    then the same for every set on these buses, which is what a comparison needs. Where none of them has weight, as when
    prices are posted at a few nodes and the reference is another bus, it is the plain mean over the buses with a price.
    """
    if isinstance(reference_weights, pd.Series):
        row = reference_weights.reindex(prices.buses).fillna(0.0).to_numpy(float)
        weights = np.broadcast_to(row, prices.lmp.shape)
    else:
        grid = reference_weights.reindex(index=prices.intervals, columns=prices.buses)
        weights = grid.fillna(0.0).to_numpy(float)
    weights = np.where(np.isfinite(prices.lmp), weights, 0.0)
    total = weights.sum(axis=1)
    if (total == 0.0).any():
        priced = np.isfinite(prices.lmp)
        # An interval without any price keeps equal weights; there is nothing to move in it.
        empty = np.all(~priced, axis=1, keepdims=True)
        mean = (priced | empty).astype(float)
        weights = np.where(total[:, None] == 0.0, mean, weights)
        total = weights.sum(axis=1)
    return np.asarray(weights / total[:, None])


def compare_run(
    run: RunTables,
    pairs: Iterable[tuple[str, str]],
    *,
    extra: Sequence[PriceSet] = (),
    hubs: pd.DataFrame | None = None,
    reference_weights: ReferenceWeights | None = None,
    tolerances: Tolerances = DEFAULT_TOLERANCES,
) -> Comparison:
    """Compare price sets of one run pair by pair and store the tables ``differences`` and ``drivers``.

    Parameters
    ----------
    run
        A run folder.
    pairs
        (base, against) by name: formulations of the run or names in ``extra``.
    extra
        Other price sets, such as posted prices; brought to ``reference_weights`` with the run's.
    hubs
        Table ``hubs``; needed where an extra set prices hubs.
    reference_weights
        Of the run's components; used for pairs with an extra set, whose reference may be another one.
    """
    tables = {name: run.table(name) for name in ("prices", "constraints", "contributions")}
    known: dict[str, PriceSet] = {prices.name: prices for prices in extra}
    foreign = set(known)
    results = []
    for names in pairs:
        for name in names:
            if name not in known:
                known[name] = price_set(tables, name)
                if hubs is not None and not hubs.empty and foreign:
                    known[name] = known[name].with_hubs(hubs)
        other_reference = foreign.intersection(names)
        results.append(
            compare_sets(
                known[names[0]],
                known[names[1]],
                reference_weights=reference_weights if other_reference else None,
                tolerances=tolerances,
            )
        )
    if not results:
        raise DataError("nothing to compare: give at least one pair of price sets")
    together = Comparison(
        differences=pd.concat([result.differences for result in results], ignore_index=True),
        drivers=pd.concat([result.drivers for result in results], ignore_index=True),
        own_reference=pd.DatetimeIndex(
            sorted({start for result in results for start in result.own_reference}), tz="UTC"
        ),
    )
    run.write("differences", together.differences)
    run.write("drivers", together.drivers)
    return together
