"""Lines, series compensators and transformers of a CIM model as branches, with their ratings."""

from __future__ import annotations

import math
from collections import defaultdict
from dataclasses import dataclass

from lmpgap.scenario.cim_nodes import Bus, Nodes
from lmpgap.scenario.cim_objects import CimModel, CimObject

_LINES = ("ACLineSegment", "SeriesCompensator", "EquivalentBranch")
_PHASE_TAPS = (
    "PhaseTapChangerLinear", "PhaseTapChangerSymmetrical", "PhaseTapChangerTabular", "PhaseTapChangerAsymmetrical",
)  # fmt: skip


@dataclass
class Branch:
    """One branch on its way into the table `branches`; impedances in per unit."""

    name: str
    from_bus: Bus
    to_bus: Bus
    r_pu: float
    x_pu: float
    charging_pu: float
    tap_ratio: float
    phase_shift_deg: float
    normal_rating_mva: float
    emergency_rating_mva: float
    in_service: bool


class Branches:
    """All branches of a model.

    Attributes
    ----------
    rows
        The branches.
    notes
        What could not be carried over, in words.
    """

    def __init__(self, model: CimModel, nodes: Nodes, base_mva: float) -> None:
        self._model, self._nodes, self._base = model, nodes, base_mva
        self.rows: list[Branch] = []
        self.notes: list[str] = []
        self._names: set[str] = set()
        self._limits = _Limits(model)
        self._ends = model.referring("PowerTransformerEnd.PowerTransformer")
        self._ratio_taps = {t.text("RatioTapChanger.TransformerEnd"): t for t in model.of("RatioTapChanger")}
        self._phase_taps = {t.text("PhaseTapChanger.TransformerEnd"): t for t in model.of(*_PHASE_TAPS)}
        self._positions = {
            step.text("SvTapStep.TapChanger"): step.number("SvTapStep.position") for step in model.of("SvTapStep")
        }
        self._points = {
            kind: model.referring(f"{kind}.{kind.removesuffix('Point')}")
            for kind in ("RatioTapChangerTablePoint", "PhaseTapChangerTablePoint")
        }
        for line in model.of(*_LINES):
            self._add_line(line)
        for transformer in model.of("PowerTransformer"):
            self._add_transformer(transformer)

    def _add_line(self, line: CimObject) -> None:
        terminals = self._nodes.terminals(line)
        buses = [self._nodes.bus(terminal) for terminal in terminals]
        if len(buses) != 2 or buses[0] is None or buses[1] is None:
            self.notes.append(f"{line.kind} {line.name!r} does not connect two nodes and was left out")
            return
        start, end = buses[0], buses[1]
        if start is end:
            self.notes.append(f"{line.kind} {line.name!r} connects a bus with itself and was left out")
            return
        # Per unit of the to end; where the ends differ in nominal voltage a tap ratio makes up for it.
        z_base = end.base_kv**2 / self._base
        r = line.number(f"{line.kind}.r", default=0.0)
        x = line.number(f"{line.kind}.x", default=0.0)
        g = line.number("ACLineSegment.gch", default=0.0)
        for bus in (start, end):
            bus.shunt_mw += 0.5 * g * bus.base_kv**2
        self._add(
            line,
            terminals,
            start,
            end,
            r / z_base,
            x / z_base,
            line.number("ACLineSegment.bch", default=0.0) * z_base,
            end.base_kv / start.base_kv,
            0.0,
        )

    def _add_transformer(self, transformer: CimObject) -> None:
        ends = sorted(
            self._ends.get(transformer.identifier, []),
            key=lambda end: end.number("TransformerEnd.endNumber", default=1),
        )
        terminals = [self._model.get(end.text("TransformerEnd.Terminal")) for end in ends]
        buses = [None if terminal is None else self._nodes.bus(terminal) for terminal in terminals]
        known = [terminal for terminal in terminals if terminal is not None]
        if len(ends) not in (2, 3) or any(bus is None for bus in buses):
            self.notes.append(f"PowerTransformer {transformer.name!r} does not connect two or three nodes; left out")
            return
        places = [bus for bus in buses if bus is not None]
        rated = [end.number("PowerTransformerEnd.ratedU") for end in ends]
        if not all(voltage > 0 for voltage in rated):
            self.notes.append(f"PowerTransformer {transformer.name!r} has no rated voltage and was left out")
            return
        taps = [self._tap(end) for end in ends]
        z = [
            (end.number("PowerTransformerEnd.r", default=0.0), end.number("PowerTransformerEnd.x", default=0.0))
            for end in ends
        ]
        b = [end.number("PowerTransformerEnd.b", default=0.0) for end in ends]
        for end, bus in zip(ends, places, strict=True):
            bus.shunt_mw += end.number("PowerTransformerEnd.g", default=0.0) * bus.base_kv**2
        if len(ends) == 2:
            # Impedance stands at winding 1, the ideal transformer between it and winding 2: from winding 2 to 1.
            first, second = places
            square = (rated[0] / rated[1]) ** 2
            z_base = first.base_kv**2 / self._base
            ratio = (first.base_kv / second.base_kv) * (rated[1] * taps[1][0]) / (rated[0] * taps[0][0])
            self._add(
                transformer,
                known,
                second,
                first,
                (z[0][0] + z[1][0] * square) / z_base,
                (z[0][1] + z[1][1] * square) / z_base,
                (b[0] + b[1] / square) * z_base,
                ratio,
                taps[0][1] - taps[1][1],
            )
            return
        middle = self._nodes.new_bus(
            f"{transformer.identifier}/middle",
            Bus(
                f"{transformer.name} middle",
                places[0].zone,
                rated[0],
                0.5,
                1.5,
                map_x=places[0].map_x,
                map_y=places[0].map_y,
            ),
        )
        for number, (end, bus) in enumerate(zip(ends, places, strict=True)):
            z_base = bus.base_kv**2 / self._base
            self._add(
                transformer,
                [known[number]],
                middle,
                bus,
                z[number][0] / z_base,
                z[number][1] / z_base,
                b[number] * z_base,
                (bus.base_kv / middle.base_kv) * rated[0] / (rated[number] * taps[number][0]),
                taps[number][1],
                suffix=f" winding {int(end.number('TransformerEnd.endNumber', default=number + 1))}",
            )

    def _tap(self, end: CimObject) -> tuple[float, float]:
        """Return the winding's voltage over its rated one, and the angle from the terminal inwards [deg]."""
        ratio, angle = 1.0, 0.0
        tap = self._ratio_taps.get(end.identifier)
        if tap is not None:
            step = self._step(tap)
            point = self._table_point(tap, "RatioTapChanger.RatioTapChangerTable", "RatioTapChangerTablePoint", step)
            if point is not None:
                ratio = point.number("TapChangerTablePoint.ratio", default=1.0)
            else:
                neutral = tap.number("TapChanger.neutralStep", default=0.0)
                increment = tap.number("RatioTapChanger.stepVoltageIncrement", default=0.0)
                ratio = 1.0 + (step - neutral) * increment / 100.0
        tap = self._phase_taps.get(end.identifier)
        if tap is not None:
            step, neutral = self._step(tap), tap.number("TapChanger.neutralStep", default=0.0)
            if tap.kind == "PhaseTapChangerLinear":
                angle = (step - neutral) * tap.number("PhaseTapChangerLinear.stepPhaseShiftIncrement", default=0.0)
            elif tap.kind == "PhaseTapChangerSymmetrical":
                increment = tap.number("PhaseTapChangerNonLinear.voltageStepIncrement", default=0.0)
                angle = math.degrees(2 * math.atan((step - neutral) * increment / 200.0))
            elif tap.kind == "PhaseTapChangerTabular":
                point = self._table_point(
                    tap, "PhaseTapChangerTabular.PhaseTapChangerTable", "PhaseTapChangerTablePoint", step
                )
                if point is not None:
                    ratio *= point.number("TapChangerTablePoint.ratio", default=1.0)
                    angle = point.number("PhaseTapChangerTablePoint.angle", default=0.0)
            if tap.kind == "PhaseTapChangerAsymmetrical" and step != neutral:
                self.notes.append(f"asymmetrical phase tap changer {tap.name!r} was left at its neutral step")
        return ratio, angle

    def _step(self, tap: CimObject) -> float:
        fallback = tap.number("TapChanger.normalStep", "TapChanger.neutralStep", default=0.0)
        return tap.number("TapChanger.step", default=self._positions.get(tap.identifier, fallback))

    def _table_point(self, tap: CimObject, table_name: str, kind: str, step: float) -> CimObject | None:
        table = tap.text(table_name)
        if not table:
            return None
        points = self._points[kind].get(table, [])
        return next((point for point in points if point.number("TapChangerTablePoint.step") == step), None)

    def _add(
        self,
        equipment: CimObject,
        terminals: list[CimObject],
        start: Bus,
        end: Bus,
        r: float,
        x: float,
        charging: float,
        tap: float,
        shift: float,
        suffix: str = "",
    ) -> None:
        if x == 0:
            # A jumper of the model: small, and far above what would spoil the numbers.
            x = 1e-4
            self.notes.append(f"{equipment.kind} {equipment.name!r} has no reactance and was given 0.0001 pu")
        normal, emergency = math.inf, math.inf
        for terminal in terminals:
            bus = self._nodes.bus(terminal)
            kv = end.base_kv if bus is None else bus.base_kv
            at_end = self._limits.ratings(terminal, equipment, kv)
            normal, emergency = min(normal, at_end[0]), min(emergency, at_end[1])
        self.rows.append(
            Branch(
                self._free_name(equipment.name + suffix),
                start,
                end,
                r,
                x,
                charging,
                tap,
                shift,
                normal,
                max(emergency, normal) if math.isfinite(normal) and math.isfinite(emergency) else emergency,
                equipment.flag("Equipment.inService", "Equipment.normallyInService", default=True)
                and all(self._nodes.connected(terminal) for terminal in terminals),
            )
        )

    def _free_name(self, name: str) -> str:
        free, number = name, 2
        while free in self._names:
            free, number = f"{name} ({number})", number + 1
        self._names.add(free)
        return free


class _Limits:
    """Permanent and temporary limits of terminals and equipment."""

    def __init__(self, model: CimModel) -> None:
        sets: dict[str, list[str]] = defaultdict(list)
        for limit_set in model.of("OperationalLimitSet"):
            for name in ("OperationalLimitSet.Terminal", "OperationalLimitSet.Equipment"):
                if owner := limit_set.text(name):
                    sets[owner].append(limit_set.identifier)
        self._sets = sets
        self._model = model
        self._of_set: dict[str, list[CimObject]] = defaultdict(list)
        for limit in model.of("CurrentLimit", "ApparentPowerLimit"):
            self._of_set[limit.text("OperationalLimit.OperationalLimitSet")].append(limit)

    def ratings(self, terminal: CimObject, equipment: CimObject, kv: float) -> tuple[float, float]:
        """Return the permanent limit and the temporary limit of the longest duration [MVA]."""
        permanent, temporary, longest = math.inf, math.inf, -1.0
        for owner in (terminal.identifier, equipment.identifier):
            for limit_set in self._sets.get(owner, []):
                for limit in self._of_set.get(limit_set, []):
                    value = limit.number(f"{limit.kind}.value", f"{limit.kind}.normalValue")
                    if limit.kind == "CurrentLimit":
                        value *= math.sqrt(3.0) * kv / 1000.0
                    if not value > 0:
                        continue
                    duration = self._duration(limit)
                    if math.isinf(duration):
                        permanent = min(permanent, value)
                    elif duration > longest or (duration == longest and value < temporary):
                        temporary, longest = value, duration
        return permanent, temporary

    def _duration(self, limit: CimObject) -> float:
        """Return how long a limit may be used [s]; ``inf`` for a permanent one."""
        kind = self._model.get(limit.text("OperationalLimit.OperationalLimitType"))
        if kind is None:
            return math.inf
        word = kind.text("OperationalLimitType.limitType", "OperationalLimitType.kind").rpartition(".")[2].lower()
        if word == "patl" or kind.flag("OperationalLimitType.isInfiniteDuration", default=False):
            return math.inf
        if word in ("tatl", "") and "OperationalLimitType.acceptableDuration" in kind.values:
            return kind.number("OperationalLimitType.acceptableDuration")
        return math.inf if not word else 0.0
