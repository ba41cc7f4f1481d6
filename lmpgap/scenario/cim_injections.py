"""Machines, loads, shunts and converters of a CIM model: what stands at the buses."""

from __future__ import annotations

import math
from collections import Counter, defaultdict
from dataclasses import dataclass

from lmpgap.scenario.cim_nodes import Bus, Nodes
from lmpgap.scenario.cim_objects import CimModel, CimObject

_FUELS = {
    "ThermalGeneratingUnit": "thermal",
    "HydroGeneratingUnit": "hydro",
    "NuclearGeneratingUnit": "nuclear",
    "WindGeneratingUnit": "wind",
    "SolarGeneratingUnit": "solar",
    "GeneratingUnit": "",
}
_CONSUMERS = ("EnergyConsumer", "ConformLoad", "NonConformLoad", "StationSupply")
_FIXED_INJECTIONS = {
    "AsynchronousMachine": "RotatingMachine",
    "EquivalentInjection": "EquivalentInjection",
    "ExternalNetworkInjection": "ExternalNetworkInjection",
    "EnergySource": "EnergySource",
    "CsConverter": "ACDCConverter",
    "VsConverter": "ACDCConverter",
}
"""Classes whose injection is taken as it stands, and the class that carries their p and q."""
_FIXED_NAMES = {"EnergySource": ("activePower", "reactivePower")}


@dataclass
class Resource:
    """One machine on its way into the table `resources`."""

    name: str
    bus: Bus
    eco_min_mw: float
    eco_max_mw: float
    q_min_mvar: float
    q_max_mvar: float
    fuel: str
    in_service: bool


class Injections:
    """All injections of a model; shunts are added to the buses.

    Attributes
    ----------
    resources
        Machines.
    loads
        Active and reactive load by bus name [MW, Mvar].
    notes
        What had to be assumed, in words.
    """

    def __init__(self, model: CimModel, nodes: Nodes) -> None:
        self._model, self._nodes = model, nodes
        self.resources: list[Resource] = []
        self.loads: dict[str, tuple[float, float]] = defaultdict(lambda: (0.0, 0.0))
        self.notes: list[str] = []
        self._names: Counter[str] = Counter()
        self._flows = {flow.text("SvPowerFlow.Terminal"): flow for flow in model.of("SvPowerFlow")}
        self._sections = {
            item.text("SvShuntCompensatorSections.ShuntCompensator"): item.number("SvShuntCompensatorSections.sections")
            for item in model.of("SvShuntCompensatorSections")
        }
        self._curves = defaultdict(list)
        for point in model.of("CurveData"):
            self._curves[point.text("CurveData.Curve")].append(point)
        self._add_machines()
        for consumer in model.of(*_CONSUMERS):
            self._add_load(
                consumer, ("EnergyConsumer.p", "EnergyConsumer.pfixed"), ("EnergyConsumer.q", "EnergyConsumer.qfixed")
            )
        for kind, prefix in _FIXED_INJECTIONS.items():
            p, q = _FIXED_NAMES.get(kind, ("p", "q"))
            fixed = model.of(kind)
            for injection in fixed:
                if injection.kind != "AsynchronousMachine" or not injection.text("RotatingMachine.GeneratingUnit"):
                    self._add_load(injection, (f"{prefix}.{p}",), (f"{prefix}.{q}",))
            if fixed:
                self.notes.append(f"{len(fixed)} {kind} were taken as fixed load at their given power")
        self._add_shunts()

    def _place(self, equipment: CimObject) -> tuple[Bus, CimObject] | None:
        terminals = self._nodes.terminals(equipment)
        bus = self._nodes.bus(terminals[0]) if terminals else None
        if bus is None:
            self.notes.append(f"{equipment.kind} {equipment.name!r} is not at a node and was left out")
            return None
        return bus, terminals[0]

    def _in_service(self, equipment: CimObject, terminal: CimObject) -> bool:
        return self._nodes.connected(terminal) and equipment.flag(
            "Equipment.inService", "Equipment.normallyInService", default=True
        )

    def _add_machines(self) -> None:
        machines = [
            machine
            for machine in self._model.of("SynchronousMachine", "AsynchronousMachine")
            if machine.kind == "SynchronousMachine" or machine.text("RotatingMachine.GeneratingUnit")
        ]
        of_unit = Counter(machine.text("RotatingMachine.GeneratingUnit") for machine in machines)
        for machine in machines:
            place = self._place(machine)
            if place is None:
                continue
            bus, terminal = place
            unit = self._model.get(machine.text("RotatingMachine.GeneratingUnit"))
            low = high = 0.0
            if unit is not None:
                # Machines on one shaft share its range.
                share = 1.0 / of_unit[unit.identifier]
                high = share * unit.number("GeneratingUnit.maxOperatingP", "GeneratingUnit.nominalP", default=0.0)
                low = share * unit.number("GeneratingUnit.minOperatingP", default=0.0)
                if low > high:
                    self.notes.append(
                        f"{unit.kind} {unit.name!r} has its lowest above its highest output; both were swapped"
                    )
                    low, high = high, low
            q_min, q_max = self._reactive_range(machine)
            self._names[machine.name] += 1
            number = self._names[machine.name]
            self.resources.append(
                Resource(
                    machine.name if number == 1 else f"{machine.name} ({number})",
                    bus,
                    low,
                    high,
                    q_min,
                    q_max,
                    _FUELS.get(unit.kind, "") if unit is not None else "condenser",
                    self._in_service(machine, terminal),
                )
            )
        for compensator in self._model.of("StaticVarCompensator"):
            self._add_static_compensator(compensator)

    def _reactive_range(self, machine: CimObject) -> tuple[float, float]:
        low = machine.number("SynchronousMachine.minQ")
        high = machine.number("SynchronousMachine.maxQ")
        points = self._curves.get(machine.text("SynchronousMachine.InitialReactiveCapabilityCurve"), [])
        if points:
            # The widest part of the curve: a table of limits cannot hold how they depend on active power.
            low = min(point.number("CurveData.y1value", default=0.0) for point in points)
            high = max(point.number("CurveData.y2value", default=0.0) for point in points)
        if low > high:
            low, high = high, low
        return low, high

    def _add_static_compensator(self, compensator: CimObject) -> None:
        place = self._place(compensator)
        if place is None:
            return
        bus, terminal = place
        # Ratings are reactances at rated voltage; the capacitive one is given positive, the inductive one negative.
        reach = [
            bus.base_kv**2 / x if x else 0.0
            for x in (
                compensator.number("StaticVarCompensator.inductiveRating", default=0.0),
                compensator.number("StaticVarCompensator.capacitiveRating", default=0.0),
            )
        ]
        self.resources.append(
            Resource(
                compensator.name,
                bus,
                0.0,
                0.0,
                min(*reach, 0.0),
                max(*reach, 0.0),
                "compensator",
                self._in_service(compensator, terminal),
            )
        )

    def _add_load(self, equipment: CimObject, active: tuple[str, ...], reactive: tuple[str, ...]) -> None:
        place = self._place(equipment)
        if place is None:
            return
        bus, terminal = place
        if not self._in_service(equipment, terminal):
            return
        p, q = equipment.number(*active), equipment.number(*reactive, default=0.0)
        if math.isnan(p):
            flow = self._flows.get(terminal.identifier)
            if flow is None:
                self.notes.append(
                    f"{equipment.kind} {equipment.name!r} has no power in the files and was taken as zero"
                )
                return
            p, q = flow.number("SvPowerFlow.p", default=0.0), flow.number("SvPowerFlow.q", default=0.0)
        before = self.loads[bus.name]
        self.loads[bus.name] = (before[0] + p, before[1] + q)

    def _add_shunts(self) -> None:
        points = self._model.referring("NonlinearShuntCompensatorPoint.NonlinearShuntCompensator")
        for shunt in self._model.of("LinearShuntCompensator", "NonlinearShuntCompensator", "EquivalentShunt"):
            place = self._place(shunt)
            if place is None or not self._in_service(shunt, place[1]):
                continue
            bus = place[0]
            sections = shunt.number(
                "ShuntCompensator.sections",
                default=self._sections.get(
                    shunt.identifier, shunt.number("ShuntCompensator.normalSections", default=0.0)
                ),
            )
            if shunt.kind == "LinearShuntCompensator":
                g = sections * shunt.number("LinearShuntCompensator.gPerSection", default=0.0)
                b = sections * shunt.number("LinearShuntCompensator.bPerSection", default=0.0)
            elif shunt.kind == "EquivalentShunt":
                g = shunt.number("EquivalentShunt.g", default=0.0)
                b = shunt.number("EquivalentShunt.b", default=0.0)
            else:
                name = "NonlinearShuntCompensatorPoint"
                used = [
                    point
                    for point in points.get(shunt.identifier, [])
                    if point.number(f"{name}.sectionNumber", default=math.inf) <= sections
                ]
                g = sum(point.number(f"{name}.g", default=0.0) for point in used)
                b = sum(point.number(f"{name}.b", default=0.0) for point in used)
            bus.shunt_mw += g * bus.base_kv**2
            bus.shunt_mvar += b * bus.base_kv**2
