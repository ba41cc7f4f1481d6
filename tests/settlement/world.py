"""A small world with known delivery factors, congestion and prices, in the shapes the settlement works on.

Nothing is solved here: prices are put together from parts that the test chooses, so that every error is known.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any

import numpy as np
import pandas as pd

from lmpgap.scenario.network import IntervalInputs, Network, OfferSegments
from lmpgap.scenario.settings import ScenarioSettings, Settlement


def make_network(buses: tuple[str, ...]) -> Network:
    """Return a chain of lines through the buses; only names and islands matter here."""
    n, m = len(buses), len(buses) - 1
    return Network(
        base_mva=100.0,
        buses=buses,
        v_min=np.full(n, 0.9),
        v_max=np.full(n, 1.1),
        shunt_g=np.zeros(n),
        shunt_b=np.zeros(n),
        branches=tuple(f"L{i}" for i in range(m)),
        from_bus=np.arange(m),
        to_bus=np.arange(1, n),
        r=np.full(m, 0.01),
        x=np.full(m, 0.1),
        charging=np.zeros(m),
        tap=np.ones(m),
        shift=np.zeros(m),
        normal_rating=np.full(m, np.inf),
        emergency_rating=np.full(m, np.inf),
        angle_min=np.full(m, -np.inf),
        angle_max=np.full(m, np.inf),
        resources=(),
        resource_bus=np.zeros(0, np.int64),
        q_min=np.zeros(0),
        q_max=np.zeros(0),
    )


@dataclass
class World:
    """Stands in for a scenario: what the settlement reads of one."""

    buses: tuple[str, ...]
    interval_starts: pd.DatetimeIndex
    weights: np.ndarray
    loads: np.ndarray
    settings: ScenarioSettings
    tables: dict[str, pd.DataFrame]
    branch_in_service: np.ndarray | None = None
    hashes: dict[str, str] = field(default_factory=dict)
    network: Network = field(init=False)

    def __post_init__(self) -> None:
        self.network = make_network(self.buses)

    def inputs(self, position: int) -> IntervalInputs:
        """Return the loads and the topology."""
        n_branch = self.network.n_branch
        on = np.ones(n_branch, dtype=bool) if self.branch_in_service is None else self.branch_in_service[position]
        return IntervalInputs(
            start=str(self.interval_starts[position]),
            load_p=self.loads[position],
            load_q=np.zeros(len(self.buses)),
            branch_in_service=on,
            resource_in_service=np.zeros(0, dtype=bool),
            p_min=np.zeros(0),
            p_max=np.zeros(0),
            segments=OfferSegments(
                resource=np.zeros(0, np.int64), width=np.zeros(0), price_start=np.zeros(0), price_end=np.zeros(0)
            ),
            fixed_cost=np.zeros(0),
        )

    def reference_weights(self, position: int) -> np.ndarray:
        """Return the reference."""
        return self.weights


class FakeRun:
    """Stands in for a run folder: tables in memory."""

    def __init__(self, prices: pd.DataFrame, solves: pd.DataFrame) -> None:
        self.tables = {"prices": prices, "solves": solves}
        self.manifest: dict[str, Any] = {"settings": {}, "versions": {}}

    def table(self, name: str) -> pd.DataFrame:
        """Return a table."""
        return self.tables[name]

    def write(self, name: str, frame: pd.DataFrame) -> None:
        """Keep a table."""
        self.tables[name] = frame


def make_world(
    buses: tuple[str, ...],
    intervals: pd.DatetimeIndex,
    *,
    positions: pd.DataFrame,
    posted: pd.DataFrame | None = None,
    rights: pd.DataFrame | None = None,
    hubs: pd.DataFrame | None = None,
    zones: tuple[str, ...] | None = None,
    weights: np.ndarray | None = None,
    loads: np.ndarray | None = None,
    settlement: Settlement | None = None,
    time_zone: str = "UTC",
    minutes: int = 60,
) -> World:
    """Return a world; reference weights are equal unless told otherwise."""
    n = len(buses)
    tables = {
        "buses": pd.DataFrame({"bus": buses, "zone": zones or ("",) * n}),
        "hubs": hubs if hubs is not None else pd.DataFrame({"hub": [], "bus": [], "weight": []}),
        "posted": posted if posted is not None else posted_frame(intervals, (), {}),
        "positions": positions,
        "rights": rights
        if rights is not None
        else pd.DataFrame({c: [] for c in ("holder", "source", "sink", "mw", "kind", "interval_start")}),
    }
    return World(
        buses=buses,
        interval_starts=intervals,
        weights=np.full(n, 1 / n) if weights is None else weights,
        loads=np.ones((len(intervals), n)) if loads is None else loads,
        settings=ScenarioSettings(
            name="test",
            time_zone=time_zone,
            interval_minutes=minutes,
            settlement=settlement or Settlement(),
        ),
        tables=tables,
    )


def hourly(start: str, count: int, freq: str = "h") -> pd.DatetimeIndex:
    """Return interval starts in UTC, with the unit the tables have."""
    return pd.date_range(start, periods=count, freq=freq, tz="UTC").as_unit("us")


def split_frame(
    intervals: pd.DatetimeIndex,
    buses: tuple[str, ...],
    formulation: str,
    *,
    energy: np.ndarray | float,
    factor: np.ndarray,
    congestion: np.ndarray | float = 0.0,
    width: float = 0.0,
) -> pd.DataFrame:
    """Return run table rows from an energy price and delivery factors; ``width`` widens the price interval."""
    shape = (len(intervals), len(buses))
    e = np.broadcast_to(np.asarray(energy, float).reshape(-1, 1), shape)
    loss = e * (np.broadcast_to(factor, shape) - 1.0)
    c = np.broadcast_to(congestion, shape)
    lmp = e + loss + c
    return pd.DataFrame(
        {
            "interval_start": intervals.repeat(len(buses)),
            "formulation": formulation,
            "bus": np.tile(buses, len(intervals)),
            "lmp": lmp.ravel(),
            "energy_component": e.ravel(),
            "congestion_component": c.ravel(),
            "loss_component": loss.ravel(),
            "reactive_component": 0.0,
            "lmp_low": lmp.ravel() - width,
            "lmp_high": lmp.ravel() + width,
        }
    )


def solve_frame(
    intervals: pd.DatetimeIndex, formulation: str, verdict: str = "certified", residual: float = 0.0
) -> pd.DataFrame:
    """Return the rows of the table ``solves`` that matter here."""
    return pd.DataFrame(
        {
            "interval_start": intervals,
            "formulation": formulation,
            "verdict": verdict,
            "price_residual": residual,
        }
    )


def posted_frame(
    intervals: pd.DatetimeIndex, nodes: tuple[str, ...], parts: dict[str, np.ndarray], cents: bool = True
) -> pd.DataFrame:
    """Return posted rows from ``energy, congestion, loss`` grids, rounded to cents."""
    shape = (len(intervals), len(nodes))
    grids = {name: np.broadcast_to(parts.get(name, 0.0), shape).ravel() for name in ("energy", "congestion", "loss")}
    total = sum(grids.values(), np.zeros(shape).ravel())
    decimals = 2 if cents else 12
    return pd.DataFrame(
        {
            "interval_start": intervals.repeat(len(nodes)),
            "node": pd.Series(np.tile(nodes, len(intervals)) if nodes else [], dtype="str"),
            "lmp": np.round(total, decimals),
            "energy_component": np.round(grids["energy"], decimals),
            "congestion_component": np.round(grids["congestion"], decimals),
            "loss_component": np.round(grids["loss"], decimals),
            "version": 1,
            "published_at": pd.Series(pd.NaT, index=range(shape[0] * shape[1]), dtype="datetime64[us, UTC]"),
        }
    )


def position_frame(rows: list[tuple[str, Any, str, float]]) -> pd.DataFrame:
    """Return positions from ``(account, interval, node, mw)``."""
    frame = pd.DataFrame(rows, columns=["account", "interval_start", "node", "mw"])
    frame["interval_start"] = pd.to_datetime(frame["interval_start"], utc=True).astype("datetime64[us, UTC]")
    return frame
