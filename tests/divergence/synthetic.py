"""Random price sets in the tables of a run folder, whose components add up by construction."""

from __future__ import annotations

import numpy as np
import pandas as pd

from lmpgap.dispatch.result import constraint_name


def random_run(
    rng: np.random.Generator,
    formulation: str,
    *,
    n_interval: int = 3,
    n_bus: int = 5,
    n_constraint: int = 4,
    share_binding: float = 0.6,
    both_ends: bool = False,
    start: str = "2026-03-02T07:00:00Z",
) -> dict[str, pd.DataFrame]:
    """Return ``prices``, ``constraints`` and ``contributions`` of one formulation."""
    intervals = pd.date_range(start, periods=n_interval, freq="h").as_unit("us")
    buses = np.array([f"B{i}" for i in range(n_bus)])
    candidates = [
        (
            "contingency" if k % 3 == 2 else "thermal",
            f"loss of L{k}" if k % 3 == 2 else "",
            f"L{k // 2}",
            ("forward", "reverse")[k % 2],
        )
        for k in range(n_constraint)
    ]
    energy = rng.uniform(5.0, 60.0, n_interval)
    factor = rng.uniform(0.9, 1.1, (n_interval, n_bus))
    loss = energy[:, None] * (factor - 1.0)
    congestion = np.zeros((n_interval, n_bus))
    reactive = np.zeros((n_interval, n_bus))
    constraint_rows, contribution_rows = [], []
    for t, at in enumerate(intervals):
        for key in candidates:
            if rng.random() > share_binding:
                continue
            shadow = rng.uniform(0.1, 80.0)
            part = -shadow * rng.uniform(-1.0, 1.0, n_bus)
            congestion[t] += part
            shares = (0.25, 0.75) if both_ends else (1.0,)
            for share in shares:
                constraint_rows.append(
                    (at, formulation, constraint_name(*key), *key, 100.0, 100.0, "MW", share * shadow, False)
                )
                contribution_rows += [
                    (at, formulation, bus, constraint_name(*key), "congestion", share * amount)
                    for bus, amount in zip(buses, part, strict=True)
                ]
        if rng.random() < 0.5:
            part = rng.normal(0.0, 0.3, n_bus)
            reactive[t] += part
            contribution_rows += [
                (at, formulation, bus, "B1", "reactive", amount) for bus, amount in zip(buses, part, strict=True)
            ]
    lmp = energy[:, None] + loss + congestion + reactive
    prices = pd.DataFrame(
        {
            "interval_start": np.repeat(intervals, n_bus),
            "formulation": formulation,
            "bus": np.tile(buses, n_interval),
            "lmp": lmp.ravel(),
            "energy_component": np.repeat(energy, n_bus),
            "congestion_component": congestion.ravel(),
            "loss_component": loss.ravel(),
            "reactive_component": reactive.ravel(),
            "lmp_low": lmp.ravel(),
            "lmp_high": lmp.ravel(),
        }
    )
    constraints = pd.DataFrame(
        constraint_rows,
        columns=[
            "interval_start", "formulation", "constraint", "kind", "contingency", "monitored", "direction",
            "limit", "value", "unit", "shadow_price", "at_penalty",
        ],
    )  # fmt: skip
    contributions = pd.DataFrame(
        contribution_rows, columns=["interval_start", "formulation", "bus", "constraint", "component", "amount"]
    )
    return {"prices": prices, "constraints": constraints, "contributions": contributions}


def run_of(*parts: dict[str, pd.DataFrame]) -> dict[str, pd.DataFrame]:
    """Return several formulations as one run."""
    return {name: pd.concat([part[name] for part in parts], ignore_index=True) for name in parts[0]}
