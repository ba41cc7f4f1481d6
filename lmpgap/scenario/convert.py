"""An open-standard network file into a scenario folder: CIM XML of IEC 61970-301, -452, -456 and -552.

Carried over: nodes (topological nodes, or connectivity nodes joined by closed switches) with nominal voltage, band,
region and position; lines, series compensators, equivalent branches; transformers with two or three windings, their
ratio tap changers and their linear, symmetrical and tabular phase tap changers; permanent and temporary current and
apparent-power limits; machines with their ranges; loads; shunts; static compensators.

Not carried over, because the standard or the scenario has no place for it: offers and costs (the standard has none),
outages, contingencies and interfaces; the dependence of reactive limits on active power; vector groups; asymmetrical
phase tap changers off their neutral step; control targets; the inside of direct-current systems, whose converters
become fixed loads. What a particular file holds of these is named in `Conversion.notes`.
"""

from __future__ import annotations

import csv
import io
import math
import os
import shutil
import tempfile
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

from lmpgap.errors import DataError
from lmpgap.scenario.cim_branches import Branches
from lmpgap.scenario.cim_injections import Injections
from lmpgap.scenario.cim_nodes import Nodes
from lmpgap.scenario.cim_objects import CimModel, read_cim

BASE_MVA = 100.0

_NO_PLACE = {
    "ControlArea": "control areas",
    "RegulatingControl": "control targets",
    "TapChangerControl": "tap changer targets",
    "DCLineSegment": "the inside of direct-current lines",
    "LoadResponseCharacteristic": "the dependence of loads on voltage",
    "ReactiveCapabilityCurve": "the dependence of reactive limits on active power; the widest range was taken",
    "ActivePowerLimit": "active-power limits",
    "GrossToNetActivePowerCurve": "own consumption of generating units",
    "MutualCoupling": "mutual coupling",
}
"""Classes that the scenario has no place for, in words."""


@dataclass(frozen=True, kw_only=True)
class Conversion:
    """What was written.

    Attributes
    ----------
    folder
        The scenario folder.
    counts
        Rows by table.
    notes
        What was assumed or not carried over, in words.
    """

    folder: Path
    counts: dict[str, int]
    notes: tuple[str, ...]


def convert(files: Path | str | Sequence[Path | str], folder: Path | str, *, name: str | None = None) -> Conversion:
    """Write a scenario folder from CIM XML files.

    Parameters
    ----------
    files
        One file, or several files or zip archives that describe one model (equipment, hypothesis, topology, state).
    folder
        Scenario folder to make; it must not exist, or be empty.
    name
        Name of the scenario; that of the first file unless given.

    Raises
    ------
    DataError
        For a file that is no CIM XML or describes no network, and for a folder that holds something.
    """
    paths = [Path(files)] if isinstance(files, str | Path) else [Path(file) for file in files]
    if not paths:
        raise DataError("there is no file to convert")
    folder = Path(folder)
    if folder.exists() and (not folder.is_dir() or any(folder.iterdir())):
        raise DataError(f"{folder} exists already and is not an empty folder; nothing was written")
    tables, notes = _tables(read_cim(paths))
    settings = f"[scenario]\nname = {_quoted(name or paths[0].stem)}\nbase_mva = {BASE_MVA}\n"
    _write(folder, settings, tables)
    return Conversion(folder=folder, counts={table: len(rows) - 1 for table, rows in tables.items()}, notes=notes)


def _tables(model: CimModel) -> tuple[dict[str, list[list[object]]], tuple[str, ...]]:
    nodes = Nodes(model)
    branches = Branches(model, nodes, BASE_MVA)
    injections = Injections(model, nodes)
    if not nodes.buses:
        raise DataError(
            "the files describe no network node: the equipment profile with connectivity nodes, or the topology "
            "profile beside it, is needed"
        )
    tables: dict[str, list[list[object]]] = {
        "buses": [
            ["bus", "zone", "base_kv", "v_min_pu", "v_max_pu", "shunt_mw", "shunt_mvar", "map_x", "map_y"],
            *(
                [b.name, b.zone, b.base_kv, b.v_min_pu, b.v_max_pu, b.shunt_mw, b.shunt_mvar, b.map_x, b.map_y]
                for b in nodes.buses.values()
            ),
        ],
        "branches": [
            [
                "branch",
                "from_bus",
                "to_bus",
                "r_pu",
                "x_pu",
                "charging_pu",
                "tap_ratio",
                "phase_shift_deg",
                "normal_rating_mva",
                "emergency_rating_mva",
                "in_service",
            ],
            *(
                [
                    b.name,
                    b.from_bus.name,
                    b.to_bus.name,
                    b.r_pu,
                    b.x_pu,
                    b.charging_pu,
                    b.tap_ratio,
                    b.phase_shift_deg,
                    b.normal_rating_mva,
                    b.emergency_rating_mva,
                    b.in_service,
                ]
                for b in branches.rows
            ),
        ],
        "resources": [
            ["resource", "bus", "eco_min_mw", "eco_max_mw", "q_min_mvar", "q_max_mvar", "fuel", "in_service"],
            *(
                [r.name, r.bus.name, r.eco_min_mw, r.eco_max_mw, r.q_min_mvar, r.q_max_mvar, r.fuel, r.in_service]
                for r in injections.resources
            ),
        ],
        "loads": [["bus", "mw", "mvar"], *([bus, p, q] for bus, (p, q) in injections.loads.items())],
    }
    missing = [f"not carried over: {words}" for kind, words in _NO_PLACE.items() if model.of(kind)]
    notes = [
        *nodes.notes,
        *branches.notes,
        *injections.notes,
        *missing,
        "offers.csv has to be added: CIM has no prices",
    ]
    return tables, tuple(dict.fromkeys(notes))


def _cell(value: object) -> str:
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, float):
        return repr(value) if math.isfinite(value) else ""
    return "".join(letter if letter.isprintable() else " " for letter in str(value)).strip()


def _quoted(text: str) -> str:
    clean = "".join(letter if letter.isprintable() else " " for letter in text)
    return '"' + clean.replace("\\", "\\\\").replace('"', '\\"') + '"'


def _write(folder: Path, settings: str, tables: dict[str, list[list[object]]]) -> None:
    """Write all files beside the folder first, so that a folder that is there is complete."""
    folder.parent.mkdir(parents=True, exist_ok=True)
    made = Path(tempfile.mkdtemp(prefix=f".{folder.name}.", dir=folder.parent))
    try:
        (made / "scenario.toml").write_text(settings, encoding="utf-8")
        for table, rows in tables.items():
            text = io.StringIO(newline="")
            csv.writer(text, lineterminator="\n").writerows([_cell(value) for value in row] for row in rows)
            (made / f"{table}.csv").write_text(text.getvalue(), encoding="utf-8")
        made.chmod(0o755)
        if folder.exists():
            folder.rmdir()
        os.replace(made, folder)
    except BaseException:
        shutil.rmtree(made, ignore_errors=True)
        raise
