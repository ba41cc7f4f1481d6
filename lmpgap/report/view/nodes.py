"""The places of the report: buses with name, zone, load and position; branches; hubs."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pandas as pd

from lmpgap.report.view.inputs import ReportScenario
from lmpgap.report.view.layout import automatic_layout
from lmpgap.scenario.network import FloatArray, IntArray


@dataclass(frozen=True, kw_only=True)
class Nodes:
    """Buses and branches as the report draws them.

    Attributes
    ----------
    bus, name, zone : (n_bus,)
        Identifier, display name (the identifier where there is none) and zone (may be empty).
    load_mw : (n_bus,)
        Mean load over the week [MW].
    x, y : (n_bus,)
        Position in the picture [any unit].
    automatic : bool
        True when the positions were worked out from the branches.
    branch : (n_branch,)
    from_bus, to_bus : (n_branch,)
        Positions of the end buses.
    """

    bus: tuple[str, ...]
    name: tuple[str, ...]
    zone: tuple[str, ...]
    load_mw: FloatArray
    x: FloatArray
    y: FloatArray
    automatic: bool
    branch: tuple[str, ...]
    from_bus: IntArray
    to_bus: IntArray

    @property
    def n(self) -> int:
        """Number of buses."""
        return len(self.bus)

    def position(self, buses: pd.Series) -> IntArray:
        """Return the position of each bus identifier, -1 where it is unknown."""
        if isinstance(buses.dtype, pd.CategoricalDtype):
            code = np.asarray(buses.cat.codes, dtype=np.int64)
            place = np.append(self.position(buses.cat.categories.to_series()), -1)
            return np.asarray(place[code])
        return np.asarray(pd.Index(self.bus).get_indexer(pd.Index(buses.astype(str))), dtype=np.int64)


@dataclass(frozen=True, kw_only=True)
class Hubs:
    """Fixed-weight hubs.

    Attributes
    ----------
    name : (n_hub,)
    weights : (n_hub, n_bus)
        Share of each bus; rows sum to one.
    """

    name: tuple[str, ...]
    weights: FloatArray


def make_nodes(scenario: ReportScenario, operating_point: pd.DataFrame) -> Nodes:
    """Return the buses in table order with positions from the map columns, or an automatic layout.

    The map columns are used only if every bus has both; half a map would put the rest in a heap.
    """
    buses = scenario.tables["buses"]
    identifiers = tuple(buses["bus"].astype(str))
    index = pd.Index(identifiers)
    branches = scenario.tables["branches"]
    from_bus = np.asarray(index.get_indexer(pd.Index(branches["from_bus"].astype(str))), dtype=np.int64)
    to_bus = np.asarray(index.get_indexer(pd.Index(branches["to_bus"].astype(str))), dtype=np.int64)
    known = (from_bus >= 0) & (to_bus >= 0)
    x, y = _numbers(buses, "map_x"), _numbers(buses, "map_y")
    automatic = bool(np.isnan(x).any() or np.isnan(y).any() or np.ptp(x) + np.ptp(y) == 0.0)
    if automatic:
        place = automatic_layout(len(identifiers), from_bus[known], to_bus[known])
        x, y = place[:, 0], place[:, 1]
    names = _words(buses, "name")
    return Nodes(
        bus=identifiers,
        name=tuple(name or bus for name, bus in zip(names, identifiers, strict=True)),
        zone=_words(buses, "zone"),
        load_mw=_mean_load(index, operating_point),
        x=x,
        y=y,
        automatic=automatic,
        branch=tuple(branches["branch"].astype(str)[known]),
        from_bus=from_bus[known],
        to_bus=to_bus[known],
    )


def make_hubs(scenario: ReportScenario, nodes: Nodes) -> Hubs:
    """Return the scenario's hubs with weights that sum to one; rows of unknown buses do not count."""
    frame = scenario.tables.get("hubs")
    if frame is None or frame.empty:
        return Hubs(name=(), weights=np.zeros((0, nodes.n)))
    position = nodes.position(frame["bus"])
    names, row = np.unique(frame["hub"].astype(str).to_numpy(dtype=object).astype(str), return_inverse=True)
    weights = np.zeros((len(names), nodes.n))
    known = position >= 0
    np.add.at(weights, (row[known], position[known]), frame["weight"].to_numpy(dtype=float)[known])
    total = weights.sum(axis=1)
    usable = total != 0.0
    return Hubs(name=tuple(str(name) for name in names[usable]), weights=weights[usable] / total[usable][:, None])


def _numbers(frame: pd.DataFrame, column: str) -> FloatArray:
    if column not in frame.columns:
        return np.full(len(frame), np.nan)
    return np.asarray(pd.to_numeric(frame[column], errors="coerce"), dtype=float)


def _words(frame: pd.DataFrame, column: str) -> tuple[str, ...]:
    if column not in frame.columns:
        return ("",) * len(frame)
    return tuple("" if pd.isna(value) else str(value) for value in frame[column])


def _mean_load(index: pd.Index, operating_point: pd.DataFrame) -> FloatArray:
    """Return the mean load of each bus over the week, from the first formulation that has one [MW]."""
    if operating_point.empty:
        return np.zeros(len(index))
    first = operating_point[operating_point["formulation"] == operating_point["formulation"].iloc[0]]
    means = first.groupby("bus", observed=True)["load_mw"].mean()
    return np.asarray(means.reindex(index).fillna(0.0), dtype=float)
