"""Settlement nodes: buses, hubs of fixed weights, and load-weighted zones.

A hub's price and each of its components is the weighted mean over its buses; so is its delivery factor, because a
loss component is linear in it. A zone is weighted with the loads of the interval, a hub with its own numbers.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
import pandas as pd

from lmpgap.prices.hubs import hub_weights, weighted, zone_weights
from lmpgap.scenario.network import FloatArray, IntArray
from lmpgap.settlement.price_set import PriceSet

_PARTS = ("lmp", "energy", "congestion", "loss", "reactive")

STRADDLES_ISLANDS = -1
"""Island number of a hub or zone whose buses lie in several islands: it has no one energy price."""


@dataclass(frozen=True, kw_only=True)
class NodeBasket:
    """Every settlement node as a mix of buses.

    Attributes
    ----------
    names : (n_node,)
        Buses first, then hubs, then zones; a name taken by an earlier kind is not repeated.
    n_bus : int
    hub_weights : (n_hub, n_bus)
        Rows sum to one.
    zone_of_bus : (n_bus,)
        Name of the zone that is a settlement node, else empty.
    """

    names: tuple[str, ...]
    n_bus: int
    hub_weights: FloatArray
    zone_of_bus: tuple[str, ...]

    @staticmethod
    def of(buses: pd.DataFrame, hubs: pd.DataFrame, bus_names: Sequence[str]) -> NodeBasket:
        """Return the basket of a scenario from its tables ``buses`` (``zone``) and ``hubs``."""
        bus_index = pd.Index(list(bus_names), dtype="object")
        taken = set(bus_names)
        hub_names = [name for name in dict.fromkeys(hubs["hub"].astype(str)) if name not in taken]
        taken |= set(hub_names)
        weights = np.zeros((len(hub_names), len(bus_index)))
        own = hubs[hubs["hub"].isin(hub_names)]
        rows = pd.Index(hub_names, dtype="object").get_indexer(pd.Index(own["hub"], dtype="object"))
        columns = bus_index.get_indexer(pd.Index(own["bus"], dtype="object"))
        np.add.at(weights, (rows, columns), own["weight"].to_numpy(float))

        listed = buses.set_index("bus")["zone"].reindex(bus_index) if "zone" in buses else pd.Series("", bus_index)
        zone_of_bus = tuple("" if zone in taken else zone for zone in listed.fillna("").astype(str))
        zone_names = tuple(dict.fromkeys(zone for zone in zone_of_bus if zone))
        return NodeBasket(
            names=(*bus_names, *hub_names, *zone_names),
            n_bus=len(bus_index),
            hub_weights=hub_weights(weights, hub_names),
            zone_of_bus=zone_of_bus,
        )

    def of_buses(self, values: FloatArray, load: FloatArray) -> FloatArray:
        """Return values at all nodes from values at buses.

        Parameters
        ----------
        values, load : (n_interval, n_bus)
            Load of the interval weights the zones [any unit].

        Returns
        -------
        (n_interval, n_node)
            ``nan`` where a bus with weight has no value, or a zone has no load.
        """
        return np.hstack([values, weighted(values, self.hub_weights), weighted(values, self._zone_weights(load))])

    def islands(self, bus_island: IntArray) -> IntArray:
        """Return the island of each node, shape (n_node,), or `STRADDLES_ISLANDS`."""
        zone_members = zone_weights(self.zone_of_bus, np.ones(self.n_bus))[1] > 0.0
        members = np.vstack([self.hub_weights != 0.0, zone_members])
        labels = np.where(members, bus_island[None, :], -1)
        first = labels.max(axis=1, initial=STRADDLES_ISLANDS)
        one = ~np.any(members & (bus_island[None, :] != first[:, None]), axis=1)
        return np.concatenate([bus_island, np.where(one, first, STRADDLES_ISLANDS)])

    def prices(self, at_buses: PriceSet, load: FloatArray) -> PriceSet:
        """Return computed prices at all nodes."""
        parts = {part: self.of_buses(getattr(at_buses, part), load) for part in _PARTS}
        # A negative weight turns a range around.
        weights = (self.hub_weights, self._zone_weights(load))
        low = np.hstack([at_buses.low, *(_mix_range(at_buses.low, at_buses.high, w)[0] for w in weights)])
        high = np.hstack([at_buses.high, *(_mix_range(at_buses.low, at_buses.high, w)[1] for w in weights)])
        changes: dict[str, Any] = {**parts, "low": low, "high": high}
        return replace(at_buses, nodes=self.names, **changes)

    def complete(self, posted: PriceSet, load: FloatArray) -> PriceSet:
        """Return posted prices with hubs and zones that are not posted made up from their buses."""
        changes: dict[str, Any] = {}
        for part in (*_PARTS, "low", "high"):
            values: FloatArray = getattr(posted, part)
            made = self.of_buses(values[:, : self.n_bus], load)
            changes[part] = np.where(np.isnan(posted.lmp), made, values)
        return replace(posted, **changes)

    def _zone_weights(self, load: FloatArray) -> FloatArray:
        """Return (n_interval, n_zone, n_bus) weights; ``nan`` for a zone without load."""
        return zone_weights(self.zone_of_bus, load)[1]


def _mix_range(low: FloatArray, high: FloatArray, weights: FloatArray) -> tuple[FloatArray, FloatArray]:
    up, down = np.maximum(weights, 0.0), np.minimum(weights, 0.0)
    return weighted(low, up) + weighted(high, down), weighted(high, up) + weighted(low, down)
