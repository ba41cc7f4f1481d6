"""Scenario folders made from the benchmark networks: the same network, hour after hour."""

from __future__ import annotations

import shutil
from pathlib import Path

import numpy as np
import pandas as pd

from tests.support.networks import NETWORKS


def hourly_scenario(folder: Path, network: str = "case14", hours: int = 30, seed: int = 0) -> Path:
    """Write a scenario whose load follows a daily shape with noise, and return its folder."""
    shutil.copytree(NETWORKS / network, folder)
    loads = pd.read_csv(folder / "loads.csv")
    rng = np.random.default_rng(seed)
    starts = pd.date_range("2026-03-07T00:00:00-07:00", periods=hours, freq="h")
    daily = 0.75 + 0.25 * np.sin((np.arange(hours) - 9) / 24 * 2 * np.pi)
    shape = daily[:, None] * rng.uniform(0.97, 1.03, (hours, len(loads)))
    pd.DataFrame(
        {
            "bus": np.tile(loads["bus"].to_numpy(), hours),
            "mw": (shape * loads["mw"].to_numpy()).ravel().round(4),
            "mvar": (shape * loads["mvar"].to_numpy()).ravel().round(4),
            "interval_start": np.repeat([t.isoformat() for t in starts], len(loads)),
        }
    ).to_csv(folder / "loads.csv", index=False)
    return folder


def change_load(folder: Path, hour: int, factor: float) -> None:
    """Multiply one hour's load, as a corrected input file would."""
    loads = pd.read_csv(folder / "loads.csv")
    start = loads["interval_start"].unique()[hour]
    loads.loc[loads["interval_start"] == start, "mw"] *= factor
    loads.to_csv(folder / "loads.csv", index=False)
