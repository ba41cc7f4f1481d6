"""All prices of the week as arrays: price set x component x bus x hour."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from lmpgap.report.view.hours import Hours
from lmpgap.report.view.nodes import Nodes

Matrix = NDArray[np.float32]

LADDER = ("dc", "dc-loss", "soc", "ac")
"""Formulations in the order in which assumptions fall away."""

POSTED = "posted"
"""Name of the price set that the operator published."""

COMPONENTS = ("lmp", "energy", "congestion", "loss", "reactive")
"""The price and its parts; the parts add up to the price."""

COMPONENT_WORDS = {
    "lmp": "whole price",
    "energy": "energy",
    "congestion": "congestion",
    "loss": "loss",
    "reactive": "reactive",
}


@dataclass(frozen=True, kw_only=True)
class PriceCube:
    """Prices by price set and component.

    Attributes
    ----------
    sets
        Price sets in ladder order, posted last.
    values
        By price set and component: (n_bus, n_hour) [currency/MWh], ``nan`` where there is no price.
    """

    sets: tuple[str, ...]
    values: Mapping[str, Mapping[str, Matrix]]

    def get(self, price_set: str, component: str = "lmp") -> Matrix:
        """Return one component of one price set, (n_bus, n_hour) [currency/MWh]."""
        return self.values[price_set][component]

    def difference(self, base: str, against: str, component: str = "lmp") -> Matrix:
        """Return ``against`` minus ``base``, (n_bus, n_hour) [currency/MWh]."""
        return self.get(against, component) - self.get(base, component)

    @property
    def formulations(self) -> tuple[str, ...]:
        """The price sets that were solved."""
        return tuple(name for name in self.sets if name != POSTED)


def make_cube(prices: pd.DataFrame, posted: Mapping[str, Matrix] | None, nodes: Nodes, hours: Hours) -> PriceCube:
    """Return the prices of the run, and the posted ones at buses, as arrays.

    Rows of unknown buses or intervals do not belong to this report and are left out.
    """
    columns = {name: "lmp" if name == "lmp" else f"{name}_component" for name in COMPONENTS}
    values: dict[str, Mapping[str, Matrix]] = {}
    present = prices["formulation"].astype(str)
    order = [name for name in LADDER if (present == name).any()]
    order += sorted(set(present.unique()) - set(order))
    for name in order:
        values[name] = _matrices(prices[present == name], "bus", columns, nodes, hours)
    if posted is not None:
        values[POSTED] = posted
    return PriceCube(sets=tuple(values), values=values)


def _matrices(
    frame: pd.DataFrame, place: str, columns: Mapping[str, str], nodes: Nodes, hours: Hours
) -> dict[str, Matrix]:
    row, column = nodes.position(frame[place]), hours.position(frame["interval_start"])
    known = (row >= 0) & (column >= 0)
    matrices: dict[str, Matrix] = {}
    for component, source in columns.items():
        matrix = np.full((nodes.n, hours.n), np.nan, dtype=np.float32)
        if source in frame.columns:
            figures = pd.to_numeric(frame[source], errors="coerce").to_numpy(dtype=np.float32)
            matrix[row[known], column[known]] = figures[known]
        matrices[component] = matrix
    return matrices
