"""`areas`: hubs and zones on the terminal, as JSON, and in the run folder."""

import json
from pathlib import Path

import pandas as pd
import pytest

from lmpgap.runs.folder import RunFolder
from lmpgap.runs.price import price
from lmpgap.scenario.read import read_scenario
from tests.cli.test_command_line import run_main
from tests.support.scenarios import hourly_scenario


@pytest.fixture
def run(tmp_path: Path) -> Path:
    folder = hourly_scenario(tmp_path / "scenario", "case5", hours=30)
    table = pd.read_csv(folder / "buses.csv").assign(zone=["East", "East", "West", "West", "West"])
    table.to_csv(folder / "buses.csv", index=False)
    (folder / "hubs.csv").write_text("hub,bus,weight\nMid,B2,1\nMid,B4,1\n")
    price(read_scenario(folder), tmp_path / "run", formulations=("dc",))
    return tmp_path / "run"


def test_areas_are_printed_and_stored(run: Path) -> None:
    done = run_main("areas", str(run))
    assert done.returncode == 0, done.stderr
    for word in ("Mid", "East", "West", "2026-03-07", "weight_drift"):
        assert word in done.stdout
    assert set(RunFolder(run).table("areas")["area"]) == {"Mid", "East", "West"}
    assert len(RunFolder(run).table("drift")) == 2 * 5


def test_areas_as_json_with_parts_that_add_up(run: Path) -> None:
    answer = json.loads(run_main("areas", str(run), "--json").stdout)
    assert {row["area"] for row in answer["areas"]} == {"Mid", "East", "West"}
    for row in answer["drift"]:
        change = row["price_after"] - row["price_before"]
        assert row["price_change"] + row["weight_drift"] == pytest.approx(change, abs=1e-9)
    same = json.loads(run_main("areas", str(run), "--earlier", str(run), "--json").stdout)
    assert all(row["price_change"] == row["weight_drift"] == 0.0 for row in same["drift"])
