"""Small scenario folders from rows, for tests that go the whole way from files to run tables."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from pathlib import Path

import pandas as pd

from lmpgap.runs.folder import RunFolder
from lmpgap.runs.price import price
from lmpgap.scenario.read import read_scenario

Rows = Sequence[Mapping[str, object]]
HOURS = tuple(f"2026-03-09T{hour:02d}:00:00-06:00" for hour in range(24))
FORMULATIONS = ("dc", "dc-loss", "soc", "ac")


def write_scenario(folder: Path, settings: str = "", **tables: Rows) -> Path:
    """Write a scenario of the given tables and return its folder."""
    folder.mkdir(parents=True, exist_ok=True)
    (folder / "scenario.toml").write_text(
        '[scenario]\nname = "Small"\ncurrency = "USD"\ntime_zone = "America/Boise"\nbase_mva = 100.0\n'
        f"interval_minutes = 60\n{settings}"
    )
    for name, rows in tables.items():
        pd.DataFrame(list(rows)).to_csv(folder / f"{name}.csv", index=False)
    return folder


def buses(*names: str, low: float = 0.9, high: float = 1.1, **columns: object) -> Rows:
    return [{"bus": name, "base_kv": 230.0, "v_min_pu": low, "v_max_pu": high, **columns} for name in names]


def branch(name: str, ends: tuple[str, str], *, r: float = 0.0, x: float = 0.1, **columns: object) -> dict[str, object]:
    return {"branch": name, "from_bus": ends[0], "to_bus": ends[1], "r_pu": r, "x_pu": x, **columns}


def resource(name: str, bus: str, capacity: float, **columns: object) -> dict[str, object]:
    return {"resource": name, "bus": bus, "eco_min_mw": 0.0, "eco_max_mw": capacity, **columns}


def offer(name: str, capacity: float, dollars: float) -> dict[str, object]:
    return {"resource": name, "segment": 1, "from_mw": 0.0, "to_mw": capacity, "price": dollars}


def loads(mw: Mapping[str, Sequence[float]], mvar: float = 0.0) -> Rows:
    """One row per bus and hour; ``mvar`` is the reactive part of each MW."""
    return [
        {"bus": bus, "mw": value, "mvar": mvar * value, "interval_start": HOURS[hour]}
        for bus, values in mw.items()
        for hour, value in enumerate(values)
    ]


def run_of(folder: Path, formulations: tuple[str, ...] = FORMULATIONS) -> RunFolder:
    """Read and price a scenario folder, the run beside it."""
    return price(read_scenario(folder), folder.parent / f"{folder.name}-run", formulations=formulations, audit=False)


def at_hour(run: RunFolder, table: str, formulation: str, hour: int) -> pd.DataFrame:
    """Return the rows of one formulation in one hour."""
    frame = run.table(table, formulation=formulation)
    return frame[frame["interval_start"] == pd.Timestamp(HOURS[hour])]
