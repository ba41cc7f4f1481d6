"""Read a benchmark network of tests/networks straight into arrays, without the project's own reader.

A second, independent reader on purpose: a fault in the scenario reader cannot hide behind itself.
"""

from __future__ import annotations

import tomllib
from dataclasses import replace
from pathlib import Path

import numpy as np
import pandas as pd

from lmpgap.scenario.network import IntervalInputs, Network, OfferSegments

NETWORKS = Path(__file__).parent.parent / "networks"


def load_network(name: str, folder: Path = NETWORKS) -> tuple[Network, IntervalInputs]:
    """Return the network and its single interval."""
    path = folder / name
    base = float(tomllib.loads((path / "scenario.toml").read_text())["scenario"]["base_mva"])
    buses, branches, resources, offers, loads = (
        pd.read_csv(path / f"{table}.csv") for table in ("buses", "branches", "resources", "offers", "loads")
    )
    position = {bus: i for i, bus in enumerate(buses["bus"])}
    n_bus, n_branch, n_resource = len(buses), len(branches), len(resources)
    rating, emergency = (
        branches.get(f"{kind}_rating_mva", pd.Series(np.inf, index=branches.index)).fillna(np.inf) / base
        for kind in ("normal", "emergency")
    )
    network = Network(
        base_mva=base,
        buses=tuple(buses["bus"]),
        v_min=buses["v_min_pu"].to_numpy(float),
        v_max=buses["v_max_pu"].to_numpy(float),
        shunt_g=buses["shunt_mw"].to_numpy(float) / base,
        shunt_b=buses["shunt_mvar"].to_numpy(float) / base,
        branches=tuple(branches["branch"]),
        from_bus=branches["from_bus"].map(position).to_numpy(np.int64),
        to_bus=branches["to_bus"].map(position).to_numpy(np.int64),
        r=branches["r_pu"].to_numpy(float),
        x=branches["x_pu"].to_numpy(float),
        charging=branches["charging_pu"].to_numpy(float),
        tap=branches["tap_ratio"].to_numpy(float),
        shift=np.deg2rad(branches["phase_shift_deg"].to_numpy(float)),
        normal_rating=rating.to_numpy(float),
        emergency_rating=emergency.to_numpy(float),
        angle_min=np.deg2rad(branches["angle_min_deg"].to_numpy(float)),
        angle_max=np.deg2rad(branches["angle_max_deg"].to_numpy(float)),
        resources=tuple(resources["resource"]),
        resource_bus=resources["bus"].map(position).to_numpy(np.int64),
        q_min=resources["q_min_mvar"].to_numpy(float) / base,
        q_max=resources["q_max_mvar"].to_numpy(float) / base,
    )
    load_p, load_q = np.zeros(n_bus), np.zeros(n_bus)
    np.add.at(load_p, loads["bus"].map(position).to_numpy(), loads["mw"].to_numpy(float) / base)
    np.add.at(load_q, loads["bus"].map(position).to_numpy(), loads["mvar"].to_numpy(float) / base)
    p_min = resources["eco_min_mw"].to_numpy(float) / base
    p_max = resources["eco_max_mw"].to_numpy(float) / base
    owner = offers["resource"].map({r: i for i, r in enumerate(resources["resource"])}).to_numpy(np.int64)
    # One segment per resource in these networks: clip it to the range, move the cost below p_min to fixed_cost.
    start, end = offers["from_mw"].to_numpy(float) / base, offers["to_mw"].to_numpy(float) / base
    price, end_price = offers["price"].to_numpy(float), offers["end_price"].to_numpy(float)
    slope = np.divide(end_price - price, end - start, out=np.zeros(len(offers)), where=end > start)
    low, high = np.maximum(start, p_min[owner]), np.minimum(end, p_max[owner])
    high = np.maximum(low, high)
    fixed = resources["no_load_cost"].to_numpy(float).copy()
    np.add.at(fixed, owner, base * (price * (low - start) + 0.5 * slope * (low - start) ** 2))
    inputs = IntervalInputs(
        start="2026-01-01T00:00:00+00:00",
        load_p=load_p,
        load_q=load_q,
        branch_in_service=np.ones(n_branch, dtype=bool),
        resource_in_service=np.ones(n_resource, dtype=bool),
        p_min=p_min,
        p_max=p_max,
        segments=OfferSegments(
            resource=owner,
            width=high - low,
            price_start=price + slope * (low - start),
            price_end=price + slope * (high - start),
        ),
        fixed_cost=fixed,
    )
    return network, inputs


def scale_load(inputs: IntervalInputs, factor: float) -> IntervalInputs:
    """Return the interval with active and reactive load multiplied."""
    return replace(inputs, load_p=factor * inputs.load_p, load_q=factor * inputs.load_q)
