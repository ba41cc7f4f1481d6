"""Buses of a CIM model: its topological nodes, or else connectivity nodes joined by closed switches."""

from __future__ import annotations

import math
from collections import defaultdict
from dataclasses import dataclass

from lmpgap.scenario.cim_objects import CimModel, CimObject

SWITCHES = (
    "Switch", "Breaker", "Disconnector", "LoadBreakSwitch", "ProtectedSwitch", "Fuse", "Jumper", "GroundDisconnector",
    "DisconnectingCircuitBreaker", "Cut",
)  # fmt: skip
DEFAULT_BAND = (0.9, 1.1)


@dataclass
class Bus:
    """One bus on its way into the table `buses`."""

    name: str
    zone: str
    base_kv: float
    v_min_pu: float
    v_max_pu: float
    shunt_mw: float = 0.0
    shunt_mvar: float = 0.0
    map_x: float = math.nan
    map_y: float = math.nan


class Nodes:
    """Which bus each terminal is at.

    Attributes
    ----------
    buses
        By the identifier of their node.
    notes
        What had to be assumed, in words.
    """

    def __init__(self, model: CimModel) -> None:
        self._model = model
        self.notes: list[str] = []
        self.buses: dict[str, Bus] = {}
        self._names: set[str] = set()
        self._terminals = model.referring("Terminal.ConductingEquipment")
        self._node_of_terminal = self._by_topology() or self._by_switches()
        self._default_band: list[str] = []
        positions = self._positions()
        switches = {switch.identifier for switch in model.of(*SWITCHES)}
        # A node at which there are only switches, all of them open, is no bus.
        used = (
            self._node_of_terminal.get(terminal.identifier)
            for equipment, terminals in self._terminals.items()
            if equipment not in switches
            for terminal in terminals
        )
        for node in dict.fromkeys(used):
            if node is not None:
                self._add_bus(node, positions)
        if self._default_band:
            self.notes.append(
                f"{len(self._default_band)} buses have no voltage limits in the file and were given "
                f"{DEFAULT_BAND[0]} to {DEFAULT_BAND[1]} pu"
            )

    def terminals(self, equipment: CimObject) -> list[CimObject]:
        """Return the terminals of an equipment in the order of their sequence numbers."""
        found = self._terminals.get(equipment.identifier, [])
        return sorted(
            found, key=lambda item: item.number("ACDCTerminal.sequenceNumber", "Terminal.sequenceNumber", default=1)
        )

    def bus(self, terminal: CimObject) -> Bus | None:
        """Return the bus of a terminal, ``None`` for one that leads nowhere."""
        return self.buses.get(self._node_of_terminal.get(terminal.identifier, ""))

    def connected(self, terminal: CimObject) -> bool:
        """Return whether a terminal is connected."""
        return terminal.flag("ACDCTerminal.connected", "Terminal.connected", default=True)

    def new_bus(self, key: str, bus: Bus) -> Bus:
        """Add a bus that the model does not have, such as the middle of a transformer with three windings."""
        bus.name = self._free_name(bus.name)
        self.buses[key] = bus
        return bus

    def _by_topology(self) -> dict[str, str]:
        return {
            terminal.identifier: node
            for terminals in self._terminals.values()
            for terminal in terminals
            if self._model.get(node := terminal.text("Terminal.TopologicalNode")) is not None
        }

    def _by_switches(self) -> dict[str, str]:
        root: dict[str, str] = {}

        def find(node: str) -> str:
            while root.setdefault(node, node) != node:
                root[node] = root[root[node]]
                node = root[node]
            return node

        for switch in self._model.of(*SWITCHES):
            ends = [t.text("Terminal.ConnectivityNode") for t in self.terminals(switch) if self.connected(t)]
            is_open = switch.flag("Switch.open", "Switch.normalOpen", default=False)
            if len(ends) == 2 and all(ends) and not is_open:
                root[find(ends[0])] = find(ends[1])
        return {
            terminal.identifier: find(node)
            for terminals in self._terminals.values()
            for terminal in terminals
            if (node := terminal.text("Terminal.ConnectivityNode"))
        }

    def _add_bus(self, identifier: str, positions: dict[str, tuple[float, float]]) -> None:
        node = self._model.get(identifier)
        if node is None:
            return
        container = self._model.get(
            node.text("TopologicalNode.ConnectivityNodeContainer", "ConnectivityNode.ConnectivityNodeContainer")
        )
        if container is not None and container.kind == "Bay":
            container = self._model.get(container.text("Bay.VoltageLevel"))
        base = self._model.get(
            node.text("TopologicalNode.BaseVoltage")
            or (container.text("VoltageLevel.BaseVoltage") if container else "")
        )
        kv = math.nan if base is None else base.number("BaseVoltage.nominalVoltage")
        if not kv > 0:
            self.notes.append(
                f"node {node.name!r} has no nominal voltage and was left out with what is connected to it"
            )
            return
        substation = self._model.get(container.text("VoltageLevel.Substation")) if container else None
        region = self._model.get(substation.text("Substation.Region")) if substation else None
        low = container.number("VoltageLevel.lowVoltageLimit") if container else math.nan
        high = container.number("VoltageLevel.highVoltageLimit") if container else math.nan
        if not (low > 0 and high > 0 and low <= high):
            low, high = kv * DEFAULT_BAND[0], kv * DEFAULT_BAND[1]
            self._default_band.append(identifier)
        x, y = positions.get(substation.identifier, (math.nan, math.nan)) if substation else (math.nan, math.nan)
        self.buses[identifier] = Bus(
            name=self._free_name(node.name),
            zone=region.name if region else "",
            base_kv=kv,
            v_min_pu=low / kv,
            v_max_pu=high / kv,
            map_x=x,
            map_y=y,
        )

    def _free_name(self, name: str) -> str:
        free, number = name, 2
        while free in self._names:
            free, number = f"{name} ({number})", number + 1
        self._names.add(free)
        return free

    def _positions(self) -> dict[str, tuple[float, float]]:
        """Return the first position point of each substation."""
        points: dict[str, list[CimObject]] = defaultdict(list)
        for point in self._model.of("PositionPoint"):
            points[point.text("PositionPoint.Location")].append(point)
        found = {}
        for location in self._model.of("Location"):
            of_location = points.get(location.identifier)
            owner = location.text("Location.PowerSystemResources")
            if of_location and owner:
                first = min(of_location, key=lambda p: p.number("PositionPoint.sequenceNumber", default=1))
                found[owner] = (first.number("PositionPoint.xPosition"), first.number("PositionPoint.yPosition"))
        return found
