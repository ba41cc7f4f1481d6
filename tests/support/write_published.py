"""Write a network of the benchmark library as a scenario folder: how the folders of tests/networks are made.

    python -m tests.support.write_published case24_ieee_rts tests/networks/case24

Source: "The Power Grid Library for Benchmarking AC Optimal Power Flow Algorithms", arXiv:1908.02788, data CC BY 4.0.
"""

from __future__ import annotations

import sys
from pathlib import Path

import numpy as np
import pandas as pd

from tests.support.published import bus_voltages, load_published

WORTHLESS_MW = 1e-6
"""Length of the segment of a resource without a range: a curve needs one."""


def write_published(name: str, folder: Path) -> None:
    """Write the network and its single interval; quadratic costs become one sloped segment from zero."""
    network, inputs = load_published(name)
    base = network.base_mva
    folder.mkdir(parents=True, exist_ok=True)
    buses = np.array(network.buses, dtype=object)
    resources = np.array(network.resources, dtype=object)
    tables = {
        "buses": {
            "bus": buses,
            "base_kv": bus_voltages(name),
            "v_min_pu": network.v_min,
            "v_max_pu": network.v_max,
            "shunt_mw": network.shunt_g * base,
            "shunt_mvar": network.shunt_b * base,
        },
        "branches": {
            "branch": network.branches,
            "from_bus": buses[network.from_bus],
            "to_bus": buses[network.to_bus],
            "r_pu": network.r,
            "x_pu": network.x,
            "charging_pu": network.charging,
            "tap_ratio": network.tap,
            "phase_shift_deg": np.rad2deg(network.shift),
            "normal_rating_mva": _or_empty(network.normal_rating * base),
            "emergency_rating_mva": _or_empty(network.emergency_rating * base),
            "angle_min_deg": _or_empty(np.rad2deg(network.angle_min)),
            "angle_max_deg": _or_empty(np.rad2deg(network.angle_max)),
            "in_service": inputs.branch_in_service,
        },
        "resources": {
            "resource": resources,
            "bus": buses[network.resource_bus],
            "eco_min_mw": inputs.p_min * base,
            "eco_max_mw": inputs.p_max * base,
            "q_min_mvar": _or_empty(network.q_min * base),
            "q_max_mvar": _or_empty(network.q_max * base),
            "no_load_cost": 0.0,
            "in_service": inputs.resource_in_service,
        },
    }
    segments = inputs.segments
    owner, low, width = segments.resource, base * inputs.p_min[segments.resource], base * segments.width
    slope = np.divide(
        segments.price_end - segments.price_start, width, out=np.zeros_like(width), where=width > WORTHLESS_MW
    )
    start = segments.price_start - slope * low
    top = np.maximum(low + width, WORTHLESS_MW)
    tables["resources"]["no_load_cost"] = inputs.fixed_cost - (start * low + 0.5 * slope * low**2)
    tables["offers"] = {
        "resource": resources[owner],
        "segment": np.ones(owner.size, dtype=int),
        "from_mw": np.zeros(owner.size),
        "to_mw": top,
        "price": start,
        "end_price": start + slope * top,
    }
    loaded = np.flatnonzero((inputs.load_p != 0.0) | (inputs.load_q != 0.0))
    tables["loads"] = {
        "bus": buses[loaded],
        "mw": inputs.load_p[loaded] * base,
        "mvar": inputs.load_q[loaded] * base,
    }
    for table, columns in tables.items():
        if np.all(columns.get("in_service", False)):
            del columns["in_service"]
        # Ten digits: what scaling to per unit and back leaves behind is rounding.
        frame = pd.DataFrame(columns).map(lambda value: float(f"{value:.10g}") if isinstance(value, float) else value)
        frame.to_csv(folder / f"{table}.csv", index=False)
    (folder / "scenario.toml").write_text(
        f'[scenario]\nname = "{name}"\ncurrency = "USD"\ntime_zone = "UTC"\nbase_mva = {base}\n'
        f'interval_minutes = 60\n[reference]\nkind = "bus"\nbus = "{buses[0]}"\n'
        '[dc]\nsusceptance = "impedance"\ntaps = true\n'
    )


def _or_empty(values: np.ndarray) -> np.ndarray:
    return np.where(np.isfinite(values), values, np.nan)


if __name__ == "__main__":
    write_published(sys.argv[1], Path(sys.argv[2]))
