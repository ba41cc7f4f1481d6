# ruff: noqa: E501  (one case per line reads best)
"""Each kind of fault: what the message says, and where it points."""

from __future__ import annotations

import os
from pathlib import Path

import pandas as pd
import pytest

from lmpgap.errors import ScenarioError
from lmpgap.scenario.read import read_scenario
from tests.scenario.folder import BASE, append, faults, read, swap, write

MANY_COLUMNS = "resource, segment, from_mw, to_mw, price, end_price, interval_start"

CASES = [
    # --- files and columns
    ({"buses.csv": None}, "buses.csv: the table is missing: The nodes of the network.; allowed: a file with the columns bus, base_kv"),
    ({"scenario.toml": None}, "scenario.toml: the file is missing; allowed: at least [scenario] with name"),
    ({"buses.csv": ""}, "buses.csv: is empty: not even a header"),
    ({"buses.csv": "bus,base_kv,v_min_pu,v_max_pu\n"}, "buses.csv: has no rows: a network needs at least one bus"),
    (swap("buses.csv", "base_kv", "base_kw"), "buses.csv: there is no column 'base_kw' in this table; did you mean 'base_kv'?"),
    (swap("loads.csv", ",mw,", ",MW,"), "loads.csv: there is no column 'MW' in this table; did you mean 'mw'?"),
    (swap("offers.csv", "end_price", "owner"), f"offers.csv: there is no column 'owner' in this table; allowed: {MANY_COLUMNS}"),
    (swap("branches.csv", "x_pu,", "r_pu,"), "branches.csv, column r_pu: the column is there twice"),
    ({"offers.csv": "resource,segment,from_mw,to_mw\nGas,1,0,1\n"}, "offers.csv: the column 'price' is missing: marginal price at its start; allowed: a number [currency/MWh]"),
    (append("offers.csv", "Gas,2,120,150"), "offers.csv, line 5: has 4 fields where the header has 6; allowed: 6 fields separated by commas"),
    (append("offers.csv", "Gas,2,120,150,60,60,70"), "offers.csv, line 5: has 7 fields where the header has 6"),
    (append("offers.csv", 'Gas,2,120,150,"60,60'), "offers.csv, line 5: cannot be taken apart: a quote is opened and not closed"),
    ({"contingency.csv": "contingency,branch\n"}, "contingency.csv: is not a table of a scenario folder and is not read; did you mean 'contingencies'?"),
    ({"Loads.csv": BASE["loads.csv"], "loads.csv": None}, "Loads.csv: is not a table of a scenario folder and is not read; did you mean 'loads'?"),
    ({"bids.parquet": b"PAR1 this is not one"}, "bids.parquet: is not a readable Parquet file"),
    ({"bids.csv": "bus,segment,mw,price\nÖst,1,1,1\n".encode("latin-1")}, "bids.csv, line 2: is not UTF-8 text, so that names would be garbled"),
    ({"bids.csv": b"bus,segment\nNorth,\0\n"}, "bids.csv, line 2: is not a text file: it contains zero bytes"),
    # --- cells
    (swap("buses.csv", "East,Plain,230", "East,Plain,high"), "buses.csv, line 4, column base_kv: is not a number (found 'high'); allowed: a number above 0 [kV]"),
    (swap("buses.csv", "East,Plain,230", "East,Plain,"), "buses.csv, line 4, column base_kv: is empty; allowed: a number above 0 [kV]"),
    (swap("buses.csv", "East,Plain,230", "East,Plain,-1"), "buses.csv, line 4, column base_kv: is out of range (found '-1'); allowed: a number above 0 [kV]"),
    (swap("buses.csv", "East,Plain,230", "East,Plain,nan"), "buses.csv, line 4, column base_kv: is not a finite number (found 'nan')"),
    (swap("branches.csv", "120,150", "inf,150"), "branches.csv, line 2, column normal_rating_mva: is not a finite number; leave the cell empty for none (found 'inf')"),
    (swap("loads.csv", ",90,", ",9e99,"), "loads.csv, line 2, column mw: is too large to be meant (found '9e99')"),
    (swap("loads.csv", ",90,", ",9e999,"), "loads.csv, line 2, column mw: is not a finite number (found '9e999')"),
    (swap("loads.csv", ",90,", ",90 MW,"), "loads.csv, line 2, column mw: is not a number; leave units out (found '90 MW')"),
    (swap("loads.csv", ",90,", ",n/a,"), "loads.csv, line 2, column mw: is not a number; leave the cell empty for none (found 'n/a')"),
    (swap("loads.csv", ",90,", ',"1,090",'), "loads.csv, line 2, column mw: is not a number; leave thousands separators out (found '1,090')"),
    (swap("loads.csv", ",90,", ',"90,5",'), "loads.csv, line 2, column mw: is not a number; in a file separated by commas decimals have a point (found '90,5')"),
    (swap("loads.csv", ",90,", ",1_0,"), "loads.csv, line 2, column mw: is not a number (found '1_0')"),
    (swap("loads.csv", ",90,", ",\u0661,"), "loads.csv, line 2, column mw: is not a number (found '\u0661')"),
    (swap("offers.csv", "Gas,1,", "Gas,1.5,"), "offers.csv, line 4, column segment: is not a whole number (found '1.5')"),
    ({"outages.csv": "kind,id,first_interval,last_interval\nbranches,NS,2026-03-08T00:00Z,2026-03-08T00:00Z\n"}, "outages.csv, line 2, column kind: is not one of the choices; did you mean 'branch'? (found 'branches'); allowed: branch or resource"),
    ({"branches.csv": "branch,from_bus,to_bus,r_pu,x_pu,in_service\nA,North,South,0,1,maybe\nB,North,East,0,1,yes\n"}, "branches.csv, line 2, column in_service: is neither true nor false (found 'maybe'); allowed: true or false"),
    (swap("buses.csv", "East,", '"Ea\nst",'), "buses.csv, line 4, column bus: contains a line break or another character that cannot be shown"),
    # --- times
    (swap("loads.csv", "2026-03-08T01:00:00-07:00", "2026-03-08T01:00:00"), "loads.csv, line 4, column interval_start: has no offset, so that it may mean two different hours (found '2026-03-08T01:00:00'); allowed: ISO 8601 with an offset"),
    (swap("loads.csv", "2026-03-08T01:00:00-07:00", "3/8/2026 1:00"), "loads.csv, line 4, column interval_start: is not a time (found '3/8/2026 1:00')"),
    (swap("loads.csv", "2026-03-08T01:00:00-07:00", "0001-01-01T00:00:00+14:00"), "loads.csv, line 4, column interval_start: lies outside the years 1970 to 2200"),
    (swap("loads.csv", "2026-03-08T01:00:00-07:00", "2026-03-08T01:15:00-07:00"), "loads.csv, line 4, column interval_start: does not lie a whole number of intervals after the first one; the smallest step in the file is 15 min"),
    (swap("loads.csv", "2026-03-07T23:00:00-07:00,90", "1999-03-07T23:00:00-07:00,90") | {"scenario.toml": BASE["scenario.toml"].replace("minutes = 60", "minutes = 1")}, "loads.csv, column interval_start: runs from 1999-03-08T06:00:00.000000Z to"),
    # --- keys and references
    (append("buses.csv", "North,Hills,230,0.95,1.05,0,0,1,2"), "buses.csv, line 5, column bus: repeats line 2: bus must be there once (found 'North')"),
    (append("loads.csv", "South,2026-03-08T07:00:00Z,1,1"), "loads.csv, line 8: repeats line 3: bus, interval_start must be there once (found 'South, 2026-03-08T07:00:00.000000Z')"),
    (swap("branches.csv", "NS,North,South", "NS,North,Suoth"), "branches.csv, line 2, column to_bus: is not in buses; did you mean 'South'? (found 'Suoth')"),
    (swap("offers.csv", "Gas,", "Coal,"), "offers.csv, line 4, column resource: is not in resources (found 'Coal')"),
    ({"outages.csv": "kind,id,first_interval,last_interval\nresource,NS,2026-03-08T07:00Z,2026-03-08T07:00Z\n"}, "outages.csv, line 2, column id: is not in resources (found 'NS')"),
    ({"outages.csv": "kind,id,first_interval,last_interval\nbranch,NS,2026-03-08T07:00Z,2026-03-08T06:00Z\n"}, "outages.csv, line 2, column last_interval: is before first_interval"),
    ({"hubs.csv": "hub,bus,weight\nNorth,South,1\n"}, "hubs.csv, line 2, column hub: is the name of a bus too"),
    ({"hubs.csv": "hub,bus,weight\nMid,South,1\nMid,East,-1\n"}, "hubs.csv, line 2, column hub: weights sum to zero, so that they cannot be scaled to sum 1 (found 'Mid')"),
    ({"interface_limits.csv": "interface,limit_mw\nWest,10\n"}, "interface_limits.csv, line 2, column interface: is not in interfaces (found 'West')"),
    # --- what must hold between columns
    ({"interfaces.csv": "interface,branch,weight\nI,NS,1\n", "interface_limits.csv": "interface,limit_mw,reverse_limit_mw\nI,-50,40\n"}, "interface_limits.csv, line 2, column reverse_limit_mw: leaves no flow that is not above -50 and not below -40 MW (found '40')"),
    ({"branches.csv": "branch,from_bus,to_bus,r_pu,x_pu,angle_min_deg\nA,North,South,0,1,100\n"}, "branches.csv, line 2, column angle_min_deg: is out of range (found '100'); allowed: a number not above 90 [deg]"),
    (swap("buses.csv", "0.9,1.1", "1.1,0.9"), "buses.csv, line 4, column v_min_pu: is above v_max_pu = 0.9 (found '1.1'); allowed: not above v_max_pu"),
    (swap("branches.csv", "NS,North,South", "NS,North,North"), "branches.csv, line 2, column to_bus: connects a bus with itself (found 'North')"),
    (swap("branches.csv", "0.01,0.1,", "0,0,"), "branches.csv, line 2, column x_pu: is zero, and so is r_pu (found '0')"),
    (swap("branches.csv", "0.02,1,0,", "0.02,0,0,"), "branches.csv, line 2, column tap_ratio: is out of range (found '0'); allowed: a number above 0"),
    (swap("resources.csv", "20,200", "220,200"), "resources.csv, line 2, column eco_min_mw: is above eco_max_mw = 200 (found '220')"),
    (swap("offers.csv", "0,120,", "120,0,"), "offers.csv, line 4, column to_mw: is below from_mw = 120 (found '0')"),
    (swap("offers.csv", "100,200,20,30", "100,200,20,15"), "offers.csv, line 3, column end_price: is below price = 20: marginal prices never fall along a curve (found '15')"),
    (swap("offers.csv", "100,200,20", "110,200,20"), "offers.csv, line 3, column from_mw: leaves a gap: the segment before it ends at 100 MW (line 2) (found '110')"),
    (swap("offers.csv", "100,200,20", "90,200,20"), "offers.csv, line 3, column from_mw: overlaps the segment before it, which ends at 100 MW (line 2) (found '90')"),
    (swap("offers.csv", "100,200,20", "100,200,5"), "offers.csv, line 3, column price: is below the price before it, 10 (line 2): marginal prices never fall along a curve (found '5')"),
    # --- whether the intervals are covered
    (swap("offers.csv", "Gas,1,0,120,40,40\n", ""), "resources.csv, line 3, column resource: has no offer; give it one, with price 0 if it is free (found 'Gas')"),
    (swap("offers.csv", "Hydro,1,0,", "Hydro,1,30,"), "offers.csv, line 2, column from_mw: starts above the lowest output 20 MW: what lies between has no price (found '30')"),
    (swap("resources.csv", "Gas,East,0,150", "Gas,East,130,150"), "offers.csv, line 4, column to_mw: ends below the lowest output 130 MW (found '120')"),
    ({"offers.csv": "resource,segment,from_mw,to_mw,price,interval_start\nHydro,1,0,200,1,\nGas,1,0,150,1,2026-03-08T06:00Z\n"}, "resources.csv, line 3, column resource: has no offer in 2 of 3 intervals, first in the one that starts 2026-03-08T07:00:00+00:00"),
    ({"loads.csv": "bus,mw\nSouth,90\n", "availability.csv": "interval_start,resource,eco_max_mw\n2026-03-08T06:00Z,Gas,10\n"}, "availability.csv, line 2, column interval_start: is for one interval, but the loads have no interval_start"),
    # --- topology
    ({"contingencies.csv": "contingency,branch\nloss of all,NS\nloss of all,NE\nloss of NS,NS\n"}, "contingencies.csv, line 2, column contingency: would split the network by taking out NS, NE: there are no outage factors for that (found 'loss of all')"),
]  # fmt: skip


@pytest.mark.parametrize(("changes", "message"), CASES, ids=[message[:60] for _, message in CASES])
def test_message(tmp_path: Path, changes: dict[str, str | bytes | None], message: str) -> None:
    found = faults(tmp_path, changes)
    assert any(fault.startswith(message) for fault in found), "\n".join(found)


def test_base_folder_has_no_fault_and_no_warning(tmp_path: Path) -> None:
    assert read(tmp_path).warnings == ()


def test_all_faults_at_once(tmp_path: Path) -> None:
    found = faults(
        tmp_path,
        {
            **swap("buses.csv", "East,Plain,230", "East,Plain,high"),
            **swap("branches.csv", "NS,North,South,0.01", "NS,North,Suoth,low"),
            **swap("offers.csv", "Gas,1,0,120,40,40", "Gaz,1,0,120,40,39"),
            "scenario.toml": BASE["scenario.toml"] + "[dc]\ntap = true\n",
        },
    )
    starts = [fault.split(": ")[0] for fault in found]
    assert starts == [
        "scenario.toml, line 8",
        "buses.csv, line 4, column base_kv",
        "branches.csv, line 2, column r_pu",
        "branches.csv, line 2, column to_bus",
        "offers.csv, line 4, column resource",
        "offers.csv, line 4, column end_price",
    ]


def test_a_misspelt_column_is_told_once(tmp_path: Path) -> None:
    found = faults(tmp_path, swap("buses.csv", "base_kv", "base_kw"))
    assert len(found) == 1


def test_faults_in_other_columns_are_told_beside_a_missing_column(tmp_path: Path) -> None:
    found = faults(tmp_path, {"loads.csv": "bus,mwh\nSouth,1\n,2\n"})
    assert any("did you mean 'mw'" in fault for fault in found)
    assert "loads.csv, line 3, column bus: is empty; allowed: a name" in found


def test_long_lists_are_cut_in_the_message_and_kept_in_the_object(tmp_path: Path) -> None:
    rows = "".join(f"X{i},1\n" for i in range(332))
    with pytest.raises(ScenarioError) as caught:
        read(tmp_path, {"loads.csv": "bus,mw\n" + rows})
    assert len(caught.value.faults) == 332
    text = str(caught.value)
    assert text.count("is not in buses") == 20
    assert text.endswith("loads.csv, column bus: and 312 more like the last one")


def test_faults_of_one_kind_are_counted_beyond_a_limit(tmp_path: Path) -> None:
    rows = "".join(f"South,{i}x\n" for i in range(10_012))
    with pytest.raises(ScenarioError) as caught:
        read(tmp_path, {"loads.csv": "bus,mw\n" + rows})
    numbers = [fault for fault in caught.value.faults if fault.column == "mw"]
    assert len(numbers) == 10_001
    assert numbers[-1].message == "and 12 more rows with this fault"


def test_lines_are_counted_as_an_editor_does(tmp_path: Path) -> None:
    text = '\n\nbus,mw\n\n"South",90\n,,\n\nEast,\n'
    found = faults(tmp_path, {"loads.csv": text.replace(",,\n", ",\n")})
    assert found == ["loads.csv, line 8, column mw: is empty; allowed: a number [MW]"]


def test_lines_after_a_line_break_inside_quotes(tmp_path: Path) -> None:
    text = (
        BASE["buses.csv"].replace("North,Hills", '"North","Hills\nand dales"').replace("East,Plain,230", "East,Plain,x")
    )
    found = faults(tmp_path, {"buses.csv": text})
    assert "buses.csv, line 5, column base_kv: is not a number (found 'x'); allowed: a number above 0 [kV]" in found


def test_rows_of_a_parquet_file_are_called_rows(tmp_path: Path) -> None:
    write(tmp_path, {"loads.csv": None})
    pd.DataFrame({"bus": ["South", "Suoth"], "mw": [1.0, 2.0]}).to_parquet(tmp_path / "loads.parquet")
    with pytest.raises(
        ScenarioError, match=r"loads\.parquet, row 2, column bus: is not in buses; did you mean 'South'"
    ):
        read_scenario(tmp_path)


def test_two_files_for_one_table(tmp_path: Path) -> None:
    write(tmp_path)
    pd.DataFrame({"bus": ["South"], "mw": [1.0]}).to_parquet(tmp_path / "loads.parquet")
    with pytest.raises(ScenarioError, match=r"loads\.parquet: is there beside loads\.csv: keep one of the two"):
        read_scenario(tmp_path)


def test_no_folder(tmp_path: Path) -> None:
    with pytest.raises(ScenarioError, match="there is no scenario folder at"):
        read_scenario(tmp_path / "missing")
    with pytest.raises(ScenarioError, match="there is no scenario folder at"):
        read_scenario("a\0b")


def test_links_out_of_the_folder_are_not_followed(tmp_path: Path) -> None:
    outside = tmp_path / "outside.csv"
    outside.write_text("bus,mw\nSouth,1\n")
    folder = write(tmp_path / "scenario", {"loads.csv": None})
    (folder / "loads.csv").symlink_to(outside)
    with pytest.raises(ScenarioError, match=r"loads\.csv: is a link that leads outside the scenario folder"):
        read_scenario(folder)


def test_settings_are_not_read_from_outside(tmp_path: Path) -> None:
    outside = tmp_path / "outside.toml"
    outside.write_text(BASE["scenario.toml"])
    folder = write(tmp_path / "scenario", {"scenario.toml": None})
    (folder / "scenario.toml").symlink_to(outside)
    with pytest.raises(ScenarioError, match=r"scenario\.toml: is a link that leads outside"):
        read_scenario(folder)


def test_links_within_the_folder_are_fine(tmp_path: Path) -> None:
    folder = write(tmp_path / "scenario", {"loads.csv": None, "loads_v2.txt": BASE["loads.csv"]})
    (folder / "loads.csv").symlink_to("loads_v2.txt")
    assert read_scenario(folder).n_interval == 3


@pytest.mark.skipif(not hasattr(os, "mkfifo"), reason="this system has no named pipes")
def test_a_link_to_itself_and_a_pipe_do_not_hang(tmp_path: Path) -> None:
    folder = write(tmp_path / "scenario", {"loads.csv": None, "offers.csv": None})
    (folder / "loads.csv").symlink_to("loads.csv")
    os.mkfifo(folder / "offers.csv")
    with pytest.raises(ScenarioError) as caught:
        read_scenario(folder)
    assert "loads.csv: cannot be read" in str(caught.value)
    assert "offers.csv: is not a plain file" in str(caught.value)


def test_a_folder_in_the_place_of_a_table(tmp_path: Path) -> None:
    folder = write(tmp_path, {"loads.csv": None})
    (folder / "loads.csv").mkdir()
    with pytest.raises(ScenarioError, match=r"loads\.csv: is not a plain file"):
        read_scenario(folder)
