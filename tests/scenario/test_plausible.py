# ruff: noqa: E501  (one case per line reads best)
"""Slips of units are allowed values that get a warning with its reason."""

from __future__ import annotations

import re
from pathlib import Path

import numpy as np
import pytest

from tests.scenario.folder import BASE, HOURS, read, swap, warnings


def scaled(name: str, column: str, factor: float) -> dict[str, str]:
    """Return one file with a column multiplied."""
    header, *rows = BASE[name].splitlines()
    place = header.split(",").index(column)
    lines = [header]
    for row in rows:
        cells = row.split(",")
        if cells[place]:
            cells[place] = repr(float(cells[place]) * factor)
        lines.append(",".join(cells))
    return {name: "\n".join(lines) + "\n"}


ANGLES = {
    "branches.csv": "branch,from_bus,to_bus,r_pu,x_pu,angle_min_deg,angle_max_deg\n"
    "NS,North,South,0.01,0.1,-0.5236,0.5236\nNE,North,East,0.01,0.1,,\nSE,South,East,0.01,0.1,-0.5236,0.5236\n"
}

CASES = [
    (scaled("buses.csv", "base_kv", 1000), r"buses.csv, line 2, column base_kv: no grid has such a voltage in kV: is it in V\? \(3 rows like it\) \(found '230000'\)"),
    (scaled("buses.csv", "v_max_pu", 100), r"buses.csv, line 2, column v_max_pu: twice nominal voltage and more, which is no limit: is it in percent or kV"),
    ({**scaled("buses.csv", "v_max_pu", 230)}, r"column v_max_pu: twice nominal voltage"),
    (scaled("branches.csv", "x_pu", 100), r"branches.csv, line 2, column x_pu: half of all branches have more than 1 pu: are they in percent or ohms"),
    (scaled("branches.csv", "r_pu", -1), r"branches.csv, line 2, column r_pu: a negative resistance creates power"),
    (scaled("branches.csv", "r_pu", 50), r"branches.csv, column r_pu: half of all branches have more than twice as much resistance as reactance: are r_pu and x_pu swapped"),
    (scaled("branches.csv", "charging_pu", 1000), r"column charging_pu: half of all branches have more than 10 pu"),
    (swap("branches.csv", "0.98", "98"), r"branches.csv, line 3, column tap_ratio: is far from 1: is it in percent, or a ratio of kV"),
    (ANGLES, r"branches.csv, line 2, column angle_min_deg: all limits are below pi/2: are they in radians\? \(2 rows like it\)"),
    (ANGLES, r"branches.csv, line 2, column angle_max_deg: all limits are below pi/2: are they in radians"),
    (swap("branches.csv", "0.98,5,", "0.98,0.5236,"), r"branches.csv, line 3, column phase_shift_deg: is pi/6 or pi/12: is it in radians"),
    (scaled("branches.csv", "normal_rating_mva", 1000), r"column normal_rating_mva: half of all ratings are above 50,000 MVA: are they in kVA"),
    (swap("branches.csv", "120,150", "0,150"), r"branches.csv, line 2, column normal_rating_mva: a rating of zero lets nothing through; leave the cell empty"),
    (swap("branches.csv", "120,150", "120,110"), r"branches.csv, line 2, column emergency_rating_mva: is below the normal rating"),
    ({"branches.csv": BASE["branches.csv"].replace("120,", "0.3,").replace(",100,", ",0.3,").replace("SE,", "S2,South,East,0.02,0.2,,,,0.3,\nSE,")}, r"branches.csv, column normal_rating_mva: the largest rating is 0.3 MVA where the load is 120 MW: are ratings in kA or pu"),
    (scaled("loads.csv", "mw", 1000), r"loads.csv, column mw: the highest load is 120,000 MW and resources can give 350 MW: is one of the two not in MW"),
    (scaled("loads.csv", "mw", 10000), r"loads.csv, line 2, column mw: is more than any single bus takes: is it in kW"),
    (scaled("loads.csv", "mw", 4), r"loads.csv, column mw: the load is above everything the resources can give \(350 MW\) in 3 of 3 intervals, at most 480 MW"),
    (scaled("loads.csv", "mw", 0.001), r"resources.csv, column eco_max_mw: resources can give 350 MW and the highest load is 0 MW: is one of the two not in MW"),
    (scaled("loads.csv", "mvar", 1000), r"loads.csv, column mvar: reactive load is more than three times the active load: are mw and mvar swapped"),
    ({"offers.csv": "resource,segment,from_mw,to_mw,price\nHydro,1,0,200,0.01\nGas,1,0,120,0.04\nGas,2,120,150,0.05\n"}, r"offers.csv, column price: the highest price is 0.05 per MWh: is it per kWh"),
    ({"offers.csv": "resource,segment,from_mw,to_mw,price\nHydro,1,0,200,10000\nGas,1,0,150,40000\n"}, r"offers.csv, line 2, column price: half of all prices are beyond 5,000 per MWh: are they in cents"),
    ({"scenario.toml": BASE["scenario.toml"] + "[penalties]\ntransmission = 35\n"}, r"scenario.toml, column \[penalties\] transmission: is below the highest offer, 40: the limit gives way before"),
    ({"delivery_factors.csv": f"interval_start,bus,delivery_factor\n{HOURS[0]},North,0.02\n"}, r"column delivery_factor: is far from 1: is it a loss factor \(1 - delivery factor\), or in percent"),
    ({"positions.csv": f"account,interval_start,node,mw\nA,{HOURS[0]},North,250000\n"}, r"positions.csv, line 2, column mw: is more than any single bus takes: is it in kW"),
]  # fmt: skip


@pytest.mark.parametrize(("changes", "pattern"), CASES, ids=[pattern[:60] for _, pattern in CASES])
def test_slip_of_units_is_told(tmp_path: Path, changes: dict[str, str], pattern: str) -> None:
    found = warnings(tmp_path, changes)
    assert any(re.search(pattern, warning) for warning in found), found


def test_unknown_nodes_are_kept_and_told_once_per_name(tmp_path: Path) -> None:
    rows = [f"A,{hour},Nort,1" for hour in HOURS] + [f"A,{HOURS[0]},Hub,1", f"A,{HOURS[0]},Mid,1"]
    changes = {
        "positions.csv": "account,interval_start,node,mw\n" + "\n".join(rows) + "\n",
        "hubs.csv": "hub,bus,weight\nMid,North,1\n",
    }
    assert warnings(tmp_path, changes) == [
        "positions.csv, line 2, column node: is not in buses or hubs; did you mean 'North'? (kept; 3 rows) (found 'Nort')",
        "positions.csv, line 5, column node: is not in buses or hubs (kept; 1 row) (found 'Hub')",
    ]


def test_other_files_beside_the_tables(tmp_path: Path) -> None:
    changes = {"README.md": "text", "xyz.csv": "a,b\n", "loads_old.csv": "x\n", "~$loads.csv": "", "._loads.csv": ""}
    assert warnings(tmp_path, changes) == [
        f"{name}.csv: is not a table of a scenario folder and is not read" for name in ("loads_old", "xyz")
    ]


def test_a_quarter_turn_is_no_limit(tmp_path: Path) -> None:
    text = (
        "branch,from_bus,to_bus,r_pu,x_pu,angle_min_deg,angle_max_deg\n"
        "NS,North,South,0.01,0.1,-360,360\nNE,North,East,0.01,0.1,-90,89\nSE,South,East,0.01,0.1,-30,30\n"
    )
    scenario = read(tmp_path, {"branches.csv": text})
    np.testing.assert_allclose(scenario.network.angle_min, [-np.inf, -np.inf, np.deg2rad(-30)])
    np.testing.assert_allclose(scenario.network.angle_max, [np.inf, np.deg2rad(89), np.deg2rad(30)])
    assert [str(warning) for warning in scenario.warnings] == [
        "branches.csv, line 3, column angle_min_deg: is taken as no limit: a quarter turn is beyond what a branch can "
        "carry (found '-90')"
    ]


def test_a_reference_bus_without_effect(tmp_path: Path) -> None:
    changes = {"scenario.toml": BASE["scenario.toml"] + '[reference]\nbus = "North"\n'}
    assert warnings(tmp_path, changes) == [
        "scenario.toml, column [reference] bus: has no effect with kind = \"load\" (found 'North')"
    ]
