"""Hubs, the analyst's positions and transmission rights. Every account is invented."""

from __future__ import annotations

import numpy as np
import pandas as pd

from .calendar_week import STAMPS, STARTS
from .demand import hourly

# hub: weights by bus
HUBS: dict[str, dict[str, float]] = {
    "Mesa Hub": {"Dunmarrow 345": 0.50, "Hollowcrest 138": 0.25, "Ochre 138": 0.25},
    "Basin Hub": {
        "Wrenhold 345": 0.30,
        "Quillmere 345": 0.30,
        "Copperfen 345": 0.20,
        "Kilnside 138": 0.20,
    },
    "Cove Hub": {"Thornlea 138": 0.40, "Brindle 138": 0.35, "Curlew 138": 0.25},
}

UTILITY = "Hazel & Tallow Light Cooperative"
OWNER = "Three Dams Water Trust"
DESK = "Cinderpath Trading"

# Share of a bus's load that the cooperative serves
SERVED: dict[str, float] = {
    "Tallow 138": 0.80,
    "Tallow 69": 1.00,
    "Hazelden 69": 1.00,
    "Bramblecote 69": 1.00,
    "Kilnside 138": 0.45,
    "Wrenhold 138": 0.20,
    "Brindle 138": 0.60,
    "Curlew 138": 0.50,
    "Limpet 69": 1.00,
    "Sandpiper 69": 1.00,
    "Pikestone 69": 1.00,
}

# What the trust owns: plants whose cleared output it is paid for
OWNED: tuple[str, ...] = ("Sablegate dam", "Otterwick dam", "Millrace dam", "Gannet wind")

# holder, source, sink, MW, kind
RIGHTS: tuple[tuple[str, str, str, float, str], ...] = (
    (UTILITY, "Sablegate 345", "Tallow 138", 90.0, "obligation"),
    (UTILITY, "Basin Hub", "Cove Hub", 80.0, "obligation"),
    (OWNER, "Gannet 138", "Basin Hub", 120.0, "option"),
    (OWNER, "Sablegate 345", "Basin Hub", 150.0, "obligation"),
    (DESK, "Mesa Hub", "Basin Hub", 200.0, "option"),
    (DESK, "Dunmarrow 345", "Fallowgate 345", 75.0, "obligation"),
    (DESK, "Basin Hub", "Mesa Hub", 50.0, "option"),
)


def hubs() -> pd.DataFrame:
    """Return the `hubs` table."""
    return pd.DataFrame(
        [{"hub": hub, "bus": bus, "weight": weight} for hub, members in HUBS.items() for bus, weight in members.items()]
    )


def rights() -> pd.DataFrame:
    """Return the `rights` table; every right holds all week."""
    return pd.DataFrame(RIGHTS, columns=["holder", "source", "sink", "mw", "kind"])


def positions(output: pd.DataFrame, plant_bus: dict[str, str]) -> pd.DataFrame:
    """Return the `positions` table.

    Parameters
    ----------
    output
        Cleared output [MW], one row per hour, one column per plant.
    plant_bus
        Bus of each plant.

    Notes
    -----
    The cooperative withdraws its share of the loads, the trust injects what its plants were cleared for, and the
    desk carries a spread: short the Mesa and long the Basin by day, the reverse on windy nights, with a standing
    purchase at Skylark that it resells at Quillmere.
    """
    frames = [_position(UTILITY, bus, np.round(share * hourly(bus), 1)) for bus, share in SERVED.items()]
    frames += [_position(OWNER, plant_bus[plant], -np.round(output[plant].to_numpy(), 1)) for plant in OWNED]
    clock = np.array([start.hour for start in STARTS])
    day = (clock >= 9) & (clock < 19)
    night = (clock < 7) | (clock >= 22)
    frames += [
        _position(DESK, "Mesa Hub", np.where(day, -60.0, np.where(night, 45.0, 0.0))),
        _position(DESK, "Basin Hub", np.where(day, 60.0, np.where(night, -45.0, 0.0))),
        _position(DESK, "Skylark 138", np.full(clock.size, -150.0)),
        _position(DESK, "Quillmere 138", np.full(clock.size, 150.0)),
    ]
    table = pd.concat(frames, ignore_index=True)
    return table[table["mw"] != 0.0].reset_index(drop=True)


def _position(account: str, node: str, mw: np.ndarray) -> pd.DataFrame:
    return pd.DataFrame({"account": account, "interval_start": STAMPS, "node": node, "mw": mw})
