"""CIM XML into a scenario folder, against a hand-made network and against the circuit in ohms."""

from __future__ import annotations

import cmath
import contextlib
import csv
import json
import math
import zipfile
from pathlib import Path

import numpy as np
import pytest
import typer
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from typer.testing import CliRunner

from lmpgap.cli.convert import convert as convert_command
from lmpgap.errors import DataError, LmpgapError
from lmpgap.scenario.convert import Conversion, convert
from lmpgap.scenario.read import read_scenario
from tests.scenario.cim import EQUIPMENT, HYPOTHESIS, document, item, named, terminals


def rows(done: Conversion, table: str) -> dict[str, dict[str, str]]:
    with (done.folder / f"{table}.csv").open(newline="") as file:
        return {next(iter(row.values())): row for row in csv.DictReader(file)}


@pytest.fixture
def equipment(tmp_path: Path) -> Conversion:
    (tmp_path / "network.xml").write_text(document(EQUIPMENT))
    return convert(tmp_path / "network.xml", tmp_path / "scenario")


@pytest.fixture
def both(tmp_path: Path) -> Conversion:
    (tmp_path / "eq.xml").write_text(document(EQUIPMENT))
    (tmp_path / "ssh.xml").write_text(document(HYPOTHESIS))
    return convert([tmp_path / "eq.xml", tmp_path / "ssh.xml"], tmp_path / "scenario")


def number(row: dict[str, str], name: str) -> float:
    return float(row[name]) if row[name] else math.nan


def test_the_folder_is_a_scenario_that_lacks_offers_only(equipment: Conversion) -> None:
    scenario = read_scenario(equipment.folder)
    assert equipment.counts == {"buses": 5, "branches": 5, "resources": 3, "loads": 2}
    kinds = {warning.kind for warning in scenario.warnings}
    assert "no offers" in kinds
    assert scenario.settings.name == "network"


def test_buses(equipment: Conversion) -> None:
    buses = rows(equipment, "buses")
    # a1 and a2 are one bus through the closed breaker; a3, behind an open one, has nothing at it but the switch.
    assert sorted(name[:6] for name in buses) == ["Node a", "Node b", "Node c", "Node d", "Statio"]
    first = next(row for row in buses.values() if row["map_x"])
    assert (first["zone"], first["base_kv"], first["map_x"], first["map_y"]) == (
        "Highlands",
        "220.0",
        "-115.5",
        "43.25",
    )
    assert number(first, "v_min_pu") == pytest.approx(0.95)
    assert number(first, "v_max_pu") == pytest.approx(1.1)


def test_line(equipment: Conversion) -> None:
    line = rows(equipment, "branches")["Ridge line"]
    z_base = 220**2 / 100
    assert number(line, "r_pu") == pytest.approx(4.84 / z_base)
    assert number(line, "x_pu") == pytest.approx(0.1)
    assert number(line, "charging_pu") == pytest.approx(1e-4 * z_base)
    assert number(line, "tap_ratio") == 1
    assert number(line, "normal_rating_mva") == pytest.approx(math.sqrt(3) * 220 * 0.8)
    # Of the temporary limits the one that may be used longest.
    assert number(line, "emergency_rating_mva") == pytest.approx(math.sqrt(3) * 220 * 0.96)
    c = rows(equipment, "buses")["Node c1"]
    assert number(c, "shunt_mw") == pytest.approx(0.5 * 2e-6 * 220**2)


def admittance(branch: dict[str, str]) -> np.ndarray:
    """Return the two-port of a table row in per unit: currents into the from and to end."""
    y = 1 / complex(number(branch, "r_pu"), number(branch, "x_pu"))
    half = 0.5j * number(branch, "charging_pu")
    t = cmath.rect(number(branch, "tap_ratio"), math.radians(number(branch, "phase_shift_deg")))
    return np.array([[(y + half) / abs(t) ** 2, -y / t.conjugate()], [-y / t, y + half]])


def in_siemens(two_port: np.ndarray, kv_from: float, kv_to: float, base_mva: float = 100.0) -> np.ndarray:
    kv = np.array([kv_from, kv_to])
    return two_port * base_mva / np.outer(kv, kv)


def test_transformer_with_two_windings_is_the_circuit_in_ohms(equipment: Conversion) -> None:
    # Winding 1 (225 kV, two steps of 1.5 %) with its impedance and shunt, an ideal transformer, winding 2 (115 kV) with
    # its own impedance and three steps of 1.5 degrees from its terminal inwards.
    branch = rows(equipment, "branches")["Grid transformer"]
    ratio = 225 * (1 + 2 * 0.015) / 115
    z = complex(0.6, 30) + complex(0.1, 0.5) * (225 / 115) ** 2
    y, half = 1 / z, -0.5j * 5e-6
    # Behind the ideal transformer winding 2 looks from winding 1 like v2 * ratio * exp(j 4.5 deg).
    a = cmath.rect(ratio, math.radians(4.5))
    circuit = np.array([[(y + half) * abs(a) ** 2, -y * a.conjugate()], [-y * a, y + half]])
    np.testing.assert_allclose(in_siemens(admittance(branch), 110, 220), circuit, rtol=1e-12)
    assert number(branch, "normal_rating_mva") == 180
    assert branch["emergency_rating_mva"] == ""


def test_tabular_and_symmetrical_tap_changers(tmp_path: Path) -> None:
    point = "PhaseTapChangerTablePoint"
    body = EQUIPMENT.replace("<cim:PhaseTapChangerLinear ", "<cim:PhaseTapChangerTabular ").replace(
        "</cim:PhaseTapChangerLinear>",
        '<cim:PhaseTapChangerTabular.PhaseTapChangerTable rdf:resource="#_table"/></cim:PhaseTapChangerTabular>',
    )
    for step, angle, ratio in ((12, 1, 1.1), (13, 7.5, 0.95)):
        values: dict[str, object] = {"TapChangerTablePoint__step": step, "TapChangerTablePoint__ratio": ratio}
        values |= {f"{point}__angle": angle, f"{point}__PhaseTapChangerTable": "@table"}
        body += item(point, f"p{step}", **values)
    (tmp_path / "t.xml").write_text(document(body))
    row = rows(convert(tmp_path / "t.xml", tmp_path / "tabular"), "branches")["Grid transformer"]
    assert number(row, "phase_shift_deg") == -7.5
    assert number(row, "tap_ratio") == pytest.approx((220 / 110) * (115 * 0.95) / (225 * 1.03))
    body = EQUIPMENT.replace("cim:PhaseTapChangerLinear ", "cim:PhaseTapChangerSymmetrical ").replace(
        "</cim:PhaseTapChangerLinear>",
        "<cim:PhaseTapChangerNonLinear.voltageStepIncrement>2</cim:PhaseTapChangerNonLinear.voltageStepIncrement>"
        "</cim:PhaseTapChangerSymmetrical>",
    )
    (tmp_path / "s.xml").write_text(document(body))
    row = rows(convert(tmp_path / "s.xml", tmp_path / "symmetrical"), "branches")["Grid transformer"]
    assert number(row, "phase_shift_deg") == pytest.approx(-math.degrees(2 * math.atan(3 * 0.02 / 2)))


def test_transformer_with_three_windings_is_the_star_in_ohms(equipment: Conversion) -> None:
    branches = rows(equipment, "branches")
    kv = {1: 220.0, 2: 110.0, 3: 20.0}
    rated = {1: 220.0, 2: 110.0, 3: 21.0}
    z = {1: complex(0.4, 20), 2: complex(0.1, 4), 3: complex(0.01, 0.2)}
    for k in (1, 2, 3):
        branch = branches[f"Station C transformer winding {k}"]
        assert branch["from_bus"] == "Station C transformer middle"
        a = rated[k] / 220.0  # the star point counted at the rated voltage of winding 1
        y = 1 / z[k]
        circuit = np.array([[y * a**2, -y * a], [-y * a, y]])
        np.testing.assert_allclose(in_siemens(admittance(branch), 220, kv[k]), circuit, rtol=1e-12)
    assert rows(equipment, "buses")["Station C transformer middle"]["base_kv"] == "220.0"


def test_machines_loads_and_shunts(equipment: Conversion) -> None:
    resources = rows(equipment, "resources")
    first = resources["Old Mill 1"]
    # Two machines share the unit's range.
    assert (first["eco_min_mw"], first["eco_max_mw"]) == ("20.0", "100.0")
    assert (first["q_min_mvar"], first["q_max_mvar"], first["fuel"]) == ("-30.0", "50.0", "thermal")
    condenser = resources["Condenser"]
    assert (condenser["eco_max_mw"], condenser["q_max_mvar"], condenser["fuel"]) == ("0.0", "25.0", "condenser")
    loads = rows(equipment, "loads")
    assert (number(loads["Node b1"], "mw"), number(loads["Node b1"], "mvar")) == (100, 31)
    assert number(loads["Node c1"], "mw") == -5
    bank = rows(equipment, "buses")["Node b1"]
    assert number(bank, "shunt_mvar") == pytest.approx(2 * 1e-3 * 110**2)
    assert number(bank, "shunt_mw") == pytest.approx(2 * 1e-5 * 110**2)


def test_what_is_not_carried_over_is_said(equipment: Conversion) -> None:
    notes = equipment.notes
    assert "NonConformLoad 'Farm' has no power in the files and was taken as zero" in notes
    assert "1 EquivalentInjection were taken as fixed load at their given power" in notes
    assert "not carried over: control areas" in notes
    assert notes[-1] == "offers.csv has to be added: CIM has no prices"


def test_the_hypothesis_profile_wins(both: Conversion) -> None:
    loads = rows(both, "loads")
    # Town as in the hypothesis, the works disconnected.
    assert (number(loads["Node b1"], "mw"), number(loads["Node b1"], "mvar")) == (95, 31)
    assert number(loads["Node d1"], "mw") == 7
    assert rows(both, "resources")["Old Mill 2"]["in_service"] == "false"
    tap = number(rows(both, "branches")["Grid transformer"], "tap_ratio")
    assert tap == pytest.approx((220 / 110) * 115 / (225 * (1 - 4 * 0.015)))


def test_topological_nodes_and_state_variables(tmp_path: Path) -> None:
    topology = "".join(
        named("TopologicalNode", f"T{x}", f"Bus {x}", TopologicalNode__BaseVoltage=f"@BV{x}",
              TopologicalNode__ConnectivityNodeContainer=f"@VL{x}")
        for x in "ABCD"
    )  # fmt: skip
    at = {"line.T1": "A", "line.T2": "C", "trafo.T1": "A", "trafo.T2": "B", "three.T1": "C", "three.T2": "B",
          "three.T3": "D", "m1.T1": "A", "m2.T1": "A", "cond.T1": "C", "town.T1": "B", "farm.T1": "D"}  # fmt: skip
    topology += "".join(item("Terminal", t, about=True, Terminal__TopologicalNode=f"@T{x}") for t, x in at.items())
    state = item("SvPowerFlow", "f", SvPowerFlow__Terminal="@farm.T1", SvPowerFlow__p=3.5, SvPowerFlow__q=0.5)
    state += item("SvTapStep", "s", SvTapStep__TapChanger="@tap", SvTapStep__position=1)
    files = {"eq.xml": EQUIPMENT, "tp.xml": topology, "sv.xml": state}
    with zipfile.ZipFile(tmp_path / "model.zip", "w") as archive:
        for name, body in files.items():
            archive.writestr(f"profiles/{name}", document(body))
    done = convert(tmp_path / "model.zip", tmp_path / "scenario", name='Model "x"')
    assert list(rows(done, "buses")) == ["Bus A", "Bus C", "Bus B", "Bus D", "Station C transformer middle"]
    assert number(rows(done, "loads")["Bus D"], "mw") == 3.5
    tap = number(rows(done, "branches")["Grid transformer"], "tap_ratio")
    assert tap == pytest.approx((220 / 110) * 115 / (225 * 1.015))
    assert read_scenario(done.folder).settings.name == 'Model "x"'


@pytest.mark.parametrize(
    ("content", "message"),
    [
        ("", "is not well-formed XML"),
        ("<a/>", "is not CIM XML: its root is 'a' and not rdf:RDF"),
        (document(""), "there are no CIM objects in the file"),
        (document(item("ControlArea", "x")), "the files describe no network node"),
        ('<!DOCTYPE x [<!ENTITY a "aaaa">]>' + document(EQUIPMENT).split("\n", 1)[1], "declares a document type"),
        (document(EQUIPMENT).replace("48.4", "many"), "ACLineSegment 'Ridge line' has a property that is no number"),
        (document(EQUIPMENT).replace("48.4", "nan"), "ACLineSegment 'Ridge line' has a property that is no number"),
    ],
)
def test_no_cim(tmp_path: Path, content: str, message: str) -> None:
    (tmp_path / "x.xml").write_text(content)
    with pytest.raises(DataError, match=message):
        convert(tmp_path / "x.xml", tmp_path / "scenario")
    assert not (tmp_path / "scenario").exists()
    assert [path.name for path in tmp_path.iterdir()] == ["x.xml"]


def test_a_folder_that_holds_something_is_left_alone(tmp_path: Path) -> None:
    (tmp_path / "x.xml").write_text(document(EQUIPMENT))
    folder = tmp_path / "scenario"
    folder.mkdir()
    convert(tmp_path / "x.xml", folder)
    with pytest.raises(DataError, match="exists already and is not an empty folder; nothing was written"):
        convert(tmp_path / "x.xml", folder)
    with pytest.raises(DataError, match="cannot be read"):
        convert(tmp_path / "missing.xml", tmp_path / "other")


def test_equipment_that_leads_nowhere_is_named(tmp_path: Path) -> None:
    body = EQUIPMENT + named("ACLineSegment", "stub", "Stub") + terminals("stub", "a1")
    body += named("ACLineSegment", "loop", "Loop", ACLineSegment__x=1) + terminals("loop", "a1", "a2")
    body += named("SeriesCompensator", "zero", "Zero") + terminals("zero", "a1", "c1")
    body += named("PowerTransformer", "lost", "Lost")
    body += named("ConformLoad", "gone", "Gone", EnergyConsumer__pfixed=5)
    (tmp_path / "x.xml").write_text(document(body))
    notes = convert(tmp_path / "x.xml", tmp_path / "scenario").notes
    for note in (
        "ACLineSegment 'Stub' does not connect two nodes and was left out",
        "ACLineSegment 'Loop' connects a bus with itself and was left out",
        "SeriesCompensator 'Zero' has no reactance and was given 0.0001 pu",
        "PowerTransformer 'Lost' does not connect two or three nodes; left out",
        "ConformLoad 'Gone' is not at a node and was left out",
    ):
        assert note in notes


@settings(max_examples=60, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(st.data())
def test_damaged_files_end_in_words(tmp_path_factory: pytest.TempPathFactory, data: st.DataObject) -> None:
    folder = tmp_path_factory.mktemp("cim")
    content = bytearray(document(EQUIPMENT).encode())
    for _ in range(data.draw(st.integers(1, 4))):
        place = data.draw(st.integers(0, len(content)))
        junk = data.draw(st.one_of(st.binary(max_size=4), st.sampled_from([b"0", b"-", b"", b"a", b"9" * 9, b"nan"])))
        content[place : place + data.draw(st.integers(0, 5))] = junk
    (folder / "x.xml").write_bytes(bytes(content))
    # Anything but an error of the project's own fails the test.
    with contextlib.suppress(LmpgapError):
        read_scenario(convert(folder / "x.xml", folder / "scenario").folder)


def test_command(tmp_path: Path) -> None:
    app = typer.Typer()
    app.command()(convert_command)
    for name, body in (("eq.xml", EQUIPMENT), ("ssh.xml", HYPOTHESIS)):
        (tmp_path / name).write_text(document(body))
    files = [str(tmp_path / "eq.xml"), str(tmp_path / "scenario"), "--with", str(tmp_path / "ssh.xml")]
    result = CliRunner().invoke(app, files)
    assert result.exit_code == 0, result.output
    assert result.output.splitlines()[0] == "5 buses, 5 branches, 3 resources, 3 loads"
    assert "next: add offers.csv, then lmpgap check" in result.output
    files[1] = str(tmp_path / "second")
    page = json.loads(CliRunner().invoke(app, [*files, "--json"]).output)
    assert page["rows"] == {"buses": 5, "branches": 5, "resources": 3, "loads": 3}
