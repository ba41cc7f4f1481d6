"""Posted prices as one more price set of the report, on the reference of the others where that can be told."""

from __future__ import annotations

import numpy as np
import pandas as pd

from lmpgap.divergence.posted import order_posted
from lmpgap.divergence.price_set import PriceSet
from lmpgap.prices.reference import rereference
from lmpgap.report.view.cube import COMPONENTS, Matrix
from lmpgap.report.view.hours import Hours
from lmpgap.report.view.inputs import ReportScenario
from lmpgap.report.view.nodes import Nodes
from lmpgap.scenario.network import FloatArray
from lmpgap.tolerances import DEFAULT_TOLERANCES

_PARTS = ("energy", "congestion", "loss", "reactive")


def latest_posted(scenario: ReportScenario) -> pd.DataFrame:
    """Return the posted price that stands for each interval and node; empty without posted prices."""
    posted = scenario.tables.get("posted")
    if posted is None or posted.empty:
        return pd.DataFrame(columns=["interval_start", "node", "lmp"])
    hubs = scenario.tables.get("hubs")
    known = set(scenario.tables["buses"]["bus"]) | (set() if hubs is None or hubs.empty else set(hubs["hub"]))
    return order_posted(posted, known, pd.DatetimeIndex(scenario.interval_starts)).latest


def posted_matrices(
    scenario: ReportScenario, posted: PriceSet | None, nodes: Nodes, hours: Hours
) -> dict[str, Matrix] | None:
    """Return the posted price and its components at buses, each (n_bus, n_hour) [$/MWh]; ``None`` without any.

    Parameters
    ----------
    posted
        Posted prices with their signs put right, from the checks; the scenario's own table is used without it.

    Notes
    -----
    Components are moved to the scenario's reference in the intervals in which every weighted bus has a posted price;
    elsewhere they stay on the operator's own.
    """
    wide = _from_set(posted, nodes, hours) if posted is not None else _from_table(scenario, nodes, hours)
    if np.isnan(wide["lmp"]).all():
        return None
    weights = _weights(scenario, nodes, hours)
    if weights is not None:
        moved = rereference(
            wide["energy"].T,
            wide["loss"].T,
            wide["congestion"].T,
            wide["reactive"].T,
            weights,
            rounding=DEFAULT_TOLERANCES.posted_rounding,
            strict=False,
        )
        known = moved.identifiable.all(axis=1)
        for name in _PARTS:
            wide[name][:, known] = getattr(moved, name)[known].T
    return {name: wide[name].astype(np.float32) for name in COMPONENTS}


def _from_set(posted: PriceSet, nodes: Nodes, hours: Hours) -> dict[str, FloatArray]:
    row, column = nodes.position(pd.Series(posted.buses)), hours.position(pd.Series(posted.intervals))
    here = np.ix_(row[row >= 0], column[column >= 0])
    there = np.ix_(column >= 0, row >= 0)
    wide = {}
    for name in COMPONENTS:
        wide[name] = np.full((nodes.n, hours.n), np.nan)
        wide[name][here] = getattr(posted, name)[there].T
    return wide


def _from_table(scenario: ReportScenario, nodes: Nodes, hours: Hours) -> dict[str, FloatArray]:
    latest = latest_posted(scenario)
    wide = {name: np.full((nodes.n, hours.n), np.nan) for name in COMPONENTS}
    row, column = nodes.position(latest["node"]), hours.position(latest["interval_start"])
    known = (row >= 0) & (column >= 0)
    for name in COMPONENTS:
        source = "lmp" if name == "lmp" else f"{name}_component"
        if source in latest.columns:
            wide[name][row[known], column[known]] = latest[source].to_numpy(dtype=float)[known]
    wide["reactive"][np.isfinite(wide["lmp"])] = 0.0
    return wide


def _weights(scenario: ReportScenario, nodes: Nodes, hours: Hours) -> FloatArray | None:
    """Return the reference weights, (n_hour, n_bus); ``None`` where the report's hours are not the scenario's."""
    starts = pd.DatetimeIndex(scenario.interval_starts)
    place = starts.get_indexer(hours.starts)
    if (place < 0).any():
        return None
    return np.array([scenario.reference_weights(int(position)) for position in place]).reshape(hours.n, nodes.n)
