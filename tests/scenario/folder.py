"""A small valid scenario folder as text, for tests to change one thing at a time."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path

from lmpgap.errors import ScenarioError
from lmpgap.scenario.read import read_scenario
from lmpgap.scenario.scenario import Scenario

SETTINGS = """\
[scenario]
name = "Three buses"
currency = "USD"
time_zone = "America/Boise"
base_mva = 100.0
interval_minutes = 60
"""

BASE: dict[str, str] = {
    "scenario.toml": SETTINGS,
    "buses.csv": """\
bus,zone,base_kv,v_min_pu,v_max_pu,shunt_mw,shunt_mvar,map_x,map_y
North,Hills,230,0.95,1.05,0,0,1,2
South,Plain,230,0.95,1.05,1.5,20,1,1
East,Plain,230,0.9,1.1,,,,
""",
    "branches.csv": """\
branch,from_bus,to_bus,r_pu,x_pu,charging_pu,tap_ratio,phase_shift_deg,normal_rating_mva,emergency_rating_mva
NS,North,South,0.01,0.1,0.02,1,0,120,150
NE,North,East,0.01,0.1,0.02,0.98,5,,140
SE,South,East,0.02,0.2,0.02,,,100,
""",
    "resources.csv": """\
resource,bus,eco_min_mw,eco_max_mw,q_min_mvar,q_max_mvar,fuel,no_load_cost
Hydro,North,20,200,-50,60,water,100
Gas,East,0,150,,,gas,
""",
    "offers.csv": """\
resource,segment,from_mw,to_mw,price,end_price
Hydro,1,0,100,10,
Hydro,2,100,200,20,30
Gas,1,0,120,40,40
""",
    "loads.csv": """\
bus,interval_start,mw,mvar
South,2026-03-07T23:00:00-07:00,90,20
South,2026-03-08T00:00:00-07:00,80,18
South,2026-03-08T01:00:00-07:00,85,19
East,2026-03-07T23:00:00-07:00,30,5
East,2026-03-08T00:00:00-07:00,31,5
East,2026-03-08T01:00:00-07:00,32,5
""",
}

HOURS = ("2026-03-07T23:00:00-07:00", "2026-03-08T00:00:00-07:00", "2026-03-08T01:00:00-07:00")


def write(folder: Path, changes: Mapping[str, str | bytes | None] | None = None) -> Path:
    """Write the base folder with files added, exchanged or (``None``) left out."""
    folder.mkdir(parents=True, exist_ok=True)
    for name, content in {**BASE, **(changes or {})}.items():
        if isinstance(content, bytes):
            (folder / name).write_bytes(content)
        elif content is not None:
            (folder / name).write_text(content, encoding="utf-8", newline="")
    return folder


def read(folder: Path, changes: Mapping[str, str | bytes | None] | None = None) -> Scenario:
    """Write and read."""
    return read_scenario(write(folder, changes))


def faults(folder: Path, changes: Mapping[str, str | bytes | None]) -> list[str]:
    """Return the faults of a changed folder as text; there must be some."""
    try:
        read(folder, changes)
    except ScenarioError as error:
        return [str(fault) for fault in error.faults]
    raise AssertionError("the folder was read without a fault")


def warnings(folder: Path, changes: Mapping[str, str | bytes | None]) -> list[str]:
    """Return the warnings of a changed folder as text."""
    return [str(warning) for warning in read(folder, changes).warnings]


def swap(name: str, old: str, new: str) -> dict[str, str]:
    """Return the change of one file in which one text is exchanged."""
    assert BASE[name].count(old) >= 1, f"{old!r} is not in {name}"
    return {name: BASE[name].replace(old, new, 1)}


def append(name: str, *rows: str) -> dict[str, str]:
    """Return the change of one file to which rows are added."""
    return {name: BASE[name] + "".join(f"{row}\n" for row in rows)}
