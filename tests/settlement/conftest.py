"""A five-bus scenario, solved once: the benchmark's network with three hours of load and a planted loss error."""

from __future__ import annotations

import shutil
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest

from lmpgap.runs.folder import RunFolder
from lmpgap.runs.price import price
from lmpgap.scenario.read import read_scenario
from lmpgap.scenario.scenario import Scenario
from tests.support.networks import NETWORKS

PLANTED = 0.5
"""What the posted loss component at bus B2 is too high by [$/MWh]."""

HOSTILE = '=HYPERLINK("<script>alert(1)</script>")'
RIGHT_TO_LEFT = "\u05d7\u05e9\u05d1\u05d5\u05df (\u05d0) 12"


@dataclass(frozen=True)
class Solved:
    """A solved scenario."""

    folder: Path
    run: RunFolder
    scenario: Scenario


@pytest.fixture(scope="session")
def solved(tmp_path_factory: pytest.TempPathFactory) -> Solved:
    """Return the five-bus scenario with posted prices made from its own AC prices, rounded to cents."""
    base = tmp_path_factory.mktemp("settlement")
    folder = base / "scenario"
    shutil.copytree(NETWORKS / "case5", folder, copy_function=shutil.copyfile)
    starts = pd.date_range("2026-03-07T20:00:00Z", periods=3, freq="h")
    loads = pd.read_csv(folder / "loads.csv")
    grown = [
        loads.assign(mw=loads["mw"] * f, mvar=loads["mvar"] * f, interval_start=start.isoformat())
        for start, f in zip(starts, (0.40, 0.45, 0.50), strict=True)
    ]
    pd.concat(grown).to_csv(folder / "loads.csv", index=False)
    held = [
        ("Vale Power", "B2", 120.0),
        (HOSTILE, "B5", -80.0),
        (RIGHT_TO_LEFT, "B1", 5.0),
        ("Vale Power", "Mid", 10.0),
    ]
    pd.DataFrame(
        [{"account": a, "interval_start": s.isoformat(), "node": n, "mw": mw} for s in starts for a, n, mw in held]
    ).to_csv(folder / "positions.csv", index=False)
    pd.DataFrame({"hub": "Mid", "bus": ["B2", "B3"], "weight": [1.0, 1.0]}).to_csv(folder / "hubs.csv", index=False)
    pd.DataFrame(
        {
            "holder": ["Vale Power", "Vale Power"],
            "source": ["B5", "B1"],
            "sink": ["B2", "Mid"],
            "mw": [50.0, 20.0],
            "kind": ["option", "obligation"],
        }
    ).to_csv(folder / "rights.csv", index=False)
    with open(folder / "scenario.toml", "a", encoding="utf-8") as file:
        file.write(
            '\n[settlement]\nmateriality = 1.0\ndeadline_days = 20\ncounted = "business"\nfrom = "interval"\n'
            'label = "our rule"\n'
        )
    run = price(read_scenario(folder), base / "run", formulations=("dc-loss", "ac"))
    prices = run.table("prices", formulation="ac")
    posted = pd.DataFrame(
        {
            "interval_start": [start.isoformat() for start in prices["interval_start"]],
            "node": prices["bus"],
            "energy_component": prices["energy_component"].round(2),
            "congestion_component": (prices["congestion_component"] + prices["reactive_component"]).round(2),
            "loss_component": (prices["loss_component"] + np.where(prices["bus"] == "B2", PLANTED, 0.0)).round(2),
        }
    )
    parts = posted["energy_component"] + posted["congestion_component"] + posted["loss_component"]
    posted.assign(lmp=parts.round(2)).to_csv(folder / "posted.csv", index=False)
    return Solved(folder=folder, run=run, scenario=read_scenario(folder))


@pytest.fixture(scope="session")
def stored(solved: Solved) -> Callable[..., Any]:
    """Return a stand-in for solving again: the run that is there, for tests in which no input that is solved
    changes."""

    def reprice(scenario: Scenario, run: Path, **_: Any) -> RunFolder:
        return solved.run

    return reprice
