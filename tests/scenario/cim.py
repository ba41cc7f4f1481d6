# ruff: noqa: E501
"""A small hand-made network in CIM XML: three substations, lines, transformers, machines; all names invented."""

from __future__ import annotations

HEAD = """<?xml version="1.0" encoding="UTF-8"?>
<rdf:RDF xmlns:rdf="http://www.w3.org/1999/02/22-rdf-syntax-ns#" xmlns:cim="http://iec.ch/TC57/CIM100#">
"""
KIND = "http://iec.ch/TC57/CIM100-European#LimitKind."


def item(kind: str, identifier: str, about: bool = False, **values: object) -> str:
    """Return one object; keys are property names with two underscores for the dot, references start with ``@``."""
    mark = f'rdf:about="#_{identifier}"' if about else f'rdf:ID="_{identifier}"'
    lines = [f"<cim:{kind} {mark}>"]
    for name, value in values.items():
        full, text = name.replace("__", "."), str(value)
        if text.startswith("@"):
            lines.append(f'  <cim:{full} rdf:resource="#_{text[1:]}"/>')
        elif "://" in text:
            lines.append(f'  <cim:{full} rdf:resource="{text}"/>')
        else:
            lines.append(f"  <cim:{full}>{text}</cim:{full}>")
    return "\n".join([*lines, f"</cim:{kind}>\n"])


def named(kind: str, identifier: str, name: str, **values: object) -> str:
    return item(kind, identifier, IdentifiedObject__name=name, **values)


def terminals(equipment: str, *nodes: str) -> str:
    return "".join(
        item(
            "Terminal",
            f"{equipment}.T{number}",
            Terminal__ConductingEquipment=f"@{equipment}",
            Terminal__ConnectivityNode=f"@{node}",
            ACDCTerminal__sequenceNumber=number,
        )
        for number, node in enumerate(nodes, start=1)
    )


def level(name: str, kv: float, low: float, high: float) -> str:
    return (
        item("BaseVoltage", f"BV{name}", BaseVoltage__nominalVoltage=kv)
        + named("Substation", f"S{name}", f"Station {name}", Substation__Region="@region")
        + named(
            "VoltageLevel",
            f"VL{name}",
            f"{name} {kv:g}",
            VoltageLevel__BaseVoltage=f"@BV{name}",
            VoltageLevel__Substation=f"@S{name}",
            VoltageLevel__lowVoltageLimit=low,
            VoltageLevel__highVoltageLimit=high,
        )
    )


def node(identifier: str, container: str) -> str:
    return named(
        "ConnectivityNode",
        identifier,
        f"Node {identifier}",
        ConnectivityNode__ConnectivityNodeContainer=f"@{container}",
    )


EQUIPMENT = "".join(
    [
        named("SubGeographicalRegion", "region", "Highlands"),
        level("A", 220, 209, 242),
        level("B", 110, 99, 121),
        level("C", 220, 209, 242),
        level("D", 20, 18, 22),
        node("a1", "VLA"),
        node("a2", "VLA"),
        node("a3", "VLA"),
        node("b1", "VLB"),
        node("c1", "VLC"),
        node("d1", "VLD"),
        # Two busbars of station A are one bus through the closed breaker; the third stands behind an open one.
        named("Breaker", "br1", "Coupler", Switch__normalOpen="false"),
        terminals("br1", "a1", "a2"),
        named("Breaker", "br2", "Spare", Switch__normalOpen="true"),
        terminals("br2", "a1", "a3"),
        named("ACLineSegment", "line", "Ridge line", ACLineSegment__r=4.84, ACLineSegment__x=48.4, ACLineSegment__bch=1e-4,
              ACLineSegment__gch=2e-6),
        terminals("line", "a2", "c1"),
        item("OperationalLimitType", "patl", OperationalLimitType__kind=KIND + "patl"),
        item("OperationalLimitType", "tatl", OperationalLimitType__kind=KIND + "tatl",
             OperationalLimitType__acceptableDuration=900),
        item("OperationalLimitType", "short", OperationalLimitType__kind=KIND + "tatl",
             OperationalLimitType__acceptableDuration=60),
        item("OperationalLimitSet", "set1", OperationalLimitSet__Terminal="@line.T1"),
        *(
            item("CurrentLimit", f"limit{kind}", CurrentLimit__value=value, OperationalLimit__OperationalLimitSet="@set1",
                 OperationalLimit__OperationalLimitType=f"@{kind}")
            for kind, value in (("patl", 800), ("tatl", 960), ("short", 1200))
        ),
        named("PowerTransformer", "trafo", "Grid transformer"),
        terminals("trafo", "a1", "b1"),
        item("PowerTransformerEnd", "e1", PowerTransformerEnd__PowerTransformer="@trafo", TransformerEnd__Terminal="@trafo.T1",
             TransformerEnd__endNumber=1, PowerTransformerEnd__ratedU=225, PowerTransformerEnd__r=0.6,
             PowerTransformerEnd__x=30, PowerTransformerEnd__b=-5e-6, PowerTransformerEnd__g=1e-6),
        item("PowerTransformerEnd", "e2", PowerTransformerEnd__PowerTransformer="@trafo", TransformerEnd__Terminal="@trafo.T2",
             TransformerEnd__endNumber=2, PowerTransformerEnd__ratedU=115, PowerTransformerEnd__r=0.1,
             PowerTransformerEnd__x=0.5),
        item("RatioTapChanger", "tap", RatioTapChanger__TransformerEnd="@e1", TapChanger__neutralStep=0,
             TapChanger__normalStep=2, RatioTapChanger__stepVoltageIncrement=1.5),
        item("PhaseTapChangerLinear", "shift", PhaseTapChanger__TransformerEnd="@e2", TapChanger__neutralStep=10,
             TapChanger__normalStep=13, PhaseTapChangerLinear__stepPhaseShiftIncrement=1.5),
        item("OperationalLimitSet", "set2", OperationalLimitSet__Equipment="@trafo"),
        item("ApparentPowerLimit", "mva", ApparentPowerLimit__value=180, OperationalLimit__OperationalLimitSet="@set2",
             OperationalLimit__OperationalLimitType="@patl"),
        named("PowerTransformer", "three", "Station C transformer"),
        terminals("three", "c1", "b1", "d1"),
        *(
            item("PowerTransformerEnd", f"w{k}", PowerTransformerEnd__PowerTransformer="@three",
                 TransformerEnd__Terminal=f"@three.T{k}", TransformerEnd__endNumber=k, PowerTransformerEnd__ratedU=u,
                 PowerTransformerEnd__r=r, PowerTransformerEnd__x=x)
            for k, u, r, x in ((1, 220, 0.4, 20), (2, 110, 0.1, 4), (3, 21, 0.01, 0.2))
        ),
        named("ThermalGeneratingUnit", "unit", "Old Mill unit", GeneratingUnit__minOperatingP=40,
              GeneratingUnit__maxOperatingP=200),
        *(
            named("SynchronousMachine", f"m{k}", f"Old Mill {k}", RotatingMachine__GeneratingUnit="@unit",
                  SynchronousMachine__minQ=-30, SynchronousMachine__maxQ=50) + terminals(f"m{k}", "a1")
            for k in (1, 2)
        ),
        named("SynchronousMachine", "cond", "Condenser", SynchronousMachine__minQ=-20, SynchronousMachine__maxQ=25),
        terminals("cond", "c1"),
        named("ConformLoad", "town", "Town", EnergyConsumer__pfixed=90, EnergyConsumer__qfixed=30),
        terminals("town", "b1"),
        named("EnergyConsumer", "works", "Works", EnergyConsumer__pfixed=10, EnergyConsumer__qfixed=1),
        terminals("works", "b1"),
        named("NonConformLoad", "farm", "Farm"),
        terminals("farm", "d1"),
        named("LinearShuntCompensator", "bank", "Bank", ShuntCompensator__normalSections=2,
              LinearShuntCompensator__bPerSection=1e-3, LinearShuntCompensator__gPerSection=1e-5),
        terminals("bank", "b1"),
        named("EquivalentInjection", "border", "Border", EquivalentInjection__p=-5),
        terminals("border", "c1"),
        item("Location", "loc", Location__PowerSystemResources="@SA"),
        item("PositionPoint", "point", PositionPoint__Location="@loc", PositionPoint__sequenceNumber=1,
             PositionPoint__xPosition=-115.5, PositionPoint__yPosition=43.25),
        item("ControlArea", "area"),
    ]
)  # fmt: skip

HYPOTHESIS = "".join(
    [
        item("ConformLoad", "town", about=True, EnergyConsumer__p=95, EnergyConsumer__q=31),
        item("NonConformLoad", "farm", about=True, EnergyConsumer__p=7, EnergyConsumer__q=2),
        item("RatioTapChanger", "tap", about=True, TapChanger__step=-4),
        item("Breaker", "br2", about=True, Switch__open="false"),
        item("SynchronousMachine", "m2", about=True, Equipment__inService="false"),
        item("Terminal", "works.T1", about=True, ACDCTerminal__connected="false"),
    ]
)


def document(body: str) -> str:
    return f"{HEAD}{body}</rdf:RDF>\n"
