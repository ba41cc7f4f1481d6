"""Prices as aligned arrays, intervals down and nodes across, from run tables or from the posted table."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from lmpgap.scenario.network import FloatArray, IntArray
from lmpgap.settlement.options import POSTED

TextArray = NDArray[np.object_]


@dataclass(frozen=True, kw_only=True)
class PriceSet:
    """One price set over some intervals and nodes; ``nan`` where there is no price.

    Attributes
    ----------
    name : str
        ``"posted"`` or a formulation.
    intervals : (n_interval,)
        Starts, UTC.
    nodes : (n_node,)
        Buses, hubs or zones.
    lmp, energy, congestion, loss, reactive : (n_interval, n_node)
        Price and components on the set's own reference [$/MWh]. In a posted set ``reactive`` is what the price holds
        beyond its published components: rounding, or a fault of the publication.
    low, high : (n_interval, n_node)
        Range of the price where it is not unique, else the price itself [$/MWh].
    rounding : float
        Half width of the rounding of each published figure; zero for computed prices [$/MWh].
    verdict : (n_interval,)
        Verdict of the solve; empty for posted prices and where there was no solve.
    residual : (n_interval,)
        Price residual of the solve; zero for posted prices [$/MWh].
    """

    name: str
    intervals: pd.DatetimeIndex
    nodes: tuple[str, ...]
    lmp: FloatArray
    energy: FloatArray
    congestion: FloatArray
    loss: FloatArray
    reactive: FloatArray
    low: FloatArray
    high: FloatArray
    rounding: float
    verdict: TextArray
    residual: FloatArray

    def usable(self, verdicts: Sequence[str]) -> NDArray[np.bool_]:
        """Return per interval whether a claim may rest on these prices, shape (n_interval,)."""
        if self.name == POSTED:
            return np.ones(len(self.intervals), dtype=bool)
        return np.isin(self.verdict.astype(str), list(verdicts))


def computed_prices(
    name: str,
    prices: pd.DataFrame,
    solves: pd.DataFrame,
    intervals: pd.DatetimeIndex,
    buses: Sequence[str],
) -> PriceSet:
    """Return the prices of one formulation from the run tables ``prices`` and ``solves``."""
    own = prices[prices["formulation"] == name]
    at, where = _positions(own, "bus", intervals, buses)
    shape = (len(intervals), len(buses))
    grid = {
        column: _grid(own[column], at, where, shape)
        for column in (
            "lmp",
            "energy_component",
            "congestion_component",
            "loss_component",
            "reactive_component",
            "lmp_low",
            "lmp_high",
        )
    }
    solved = solves[solves["formulation"] == name].drop_duplicates("interval_start", keep="last")
    solved = solved.set_index("interval_start").reindex(intervals)
    lmp = grid["lmp"]
    return PriceSet(
        name=name,
        intervals=intervals,
        nodes=tuple(buses),
        lmp=lmp,
        energy=grid["energy_component"],
        congestion=grid["congestion_component"],
        loss=grid["loss_component"],
        reactive=grid["reactive_component"],
        low=np.where(np.isnan(grid["lmp_low"]), lmp, grid["lmp_low"]),
        high=np.where(np.isnan(grid["lmp_high"]), lmp, grid["lmp_high"]),
        rounding=0.0,
        verdict=solved["verdict"].fillna("").to_numpy(dtype=object),
        residual=solved["price_residual"].fillna(0.0).to_numpy(float),
    )


def posted_prices(posted: pd.DataFrame, intervals: pd.DatetimeIndex, nodes: Sequence[str], rounding: float) -> PriceSet:
    """Return the posted prices, one version per interval and node, as the operator means them.

    Parameters
    ----------
    posted
        ``interval_start, node, lmp, energy_component, congestion_component, loss_component``, at most one row per
        interval and node (`lmpgap.divergence.posted.order_posted`), congestion with the sign used here.
    """
    at, where = _positions(posted, "node", intervals, nodes)
    shape = (len(intervals), len(nodes))
    lmp, energy, congestion, loss = (
        _grid(posted[column], at, where, shape)
        for column in ("lmp", "energy_component", "congestion_component", "loss_component")
    )
    return PriceSet(
        name=POSTED,
        intervals=intervals,
        nodes=tuple(nodes),
        lmp=lmp,
        energy=energy,
        congestion=congestion,
        loss=loss,
        reactive=lmp - energy - congestion - loss,
        low=lmp,
        high=lmp,
        rounding=rounding,
        verdict=np.full(len(intervals), "", dtype=object),
        residual=np.zeros(len(intervals)),
    )


def _positions(
    frame: pd.DataFrame, column: str, intervals: pd.DatetimeIndex, nodes: Sequence[str]
) -> tuple[IntArray, IntArray]:
    starts = pd.DatetimeIndex(frame["interval_start"])
    at = intervals.get_indexer(starts)
    where = pd.Index(list(nodes), dtype="object").get_indexer(pd.Index(frame[column], dtype="object"))
    return at.astype(np.int64), where.astype(np.int64)


def _grid(values: pd.Series, at: IntArray, where: IntArray, shape: tuple[int, int]) -> FloatArray:
    grid = np.full(shape, np.nan)
    inside = (at >= 0) & (where >= 0)
    grid[at[inside], where[inside]] = values.to_numpy(dtype=float, na_value=np.nan)[inside]
    return grid
