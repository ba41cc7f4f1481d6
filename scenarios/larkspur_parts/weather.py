"""Wind, sun, water and temperature of the week: what plants can give and what people need.

All draws come from one seeded generator per subject, so that changing one subject leaves the others alone.
"""

from __future__ import annotations

from datetime import UTC

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from .calendar_week import STAMPS, STARTS
from .fleet import PLANTS

SEED = 20261026
FloatArray = NDArray[np.float64]

SOLAR_OFFSET_HOURS = -7.55
"""Sun time of the region against UTC; clocks do not move the sun."""
DAYLIGHT_HOURS = 10.4

# Monday to Sunday: how clear the sky, how windy the night (share of capacity)
CLEARNESS = (0.97, 0.93, 0.99, 0.72, 0.96, 0.55, 0.90)
NIGHT_WIND = (0.62, 0.90, 0.42, 0.30, 0.52, 0.86, 0.64)
DAY_WIND = (0.22, 0.34, 0.17, 0.26, 0.30, 0.42, 0.28)


def smooth_noise(key: int, n: int, persistence: float = 0.8) -> FloatArray:
    """Return an autoregressive series of unit variance, shape (n,)."""
    draws = np.random.default_rng([SEED, key]).standard_normal(n)
    series = np.empty(n)
    series[0] = draws[0]
    step = np.sqrt(1.0 - persistence**2)
    for h in range(1, n):
        series[h] = persistence * series[h - 1] + step * draws[h]
    return series


def sun_share(key: int) -> FloatArray:
    """Return the share of capacity that a solar plant can give, shape (n_hours,)."""
    share = np.zeros(len(STARTS))
    noise = smooth_noise(key, len(STARTS), 0.6)
    for h, start in enumerate(STARTS):
        utc = start.astimezone(UTC)
        sun_time = (utc.hour + 0.5 + SOLAR_OFFSET_HOURS) % 24.0
        height = np.cos(np.pi * (sun_time - 12.0) / DAYLIGHT_HOURS)
        if abs(sun_time - 12.0) < DAYLIGHT_HOURS / 2.0:
            cloud = CLEARNESS[start.weekday()]
            share[h] = cloud * height**0.8 * (1.0 + 0.25 * (1.0 - cloud) * noise[h])
    return np.clip(share, 0.0, 1.0)


def wind_share(key: int, lead_hours: float) -> FloatArray:
    """Return the share of capacity that a wind farm can give, shape (n_hours,).

    Wind rises after dusk and is strongest before dawn; the second farm feels the front ``lead_hours`` later.
    """
    share = np.empty(len(STARTS))
    noise = smooth_noise(key, len(STARTS), 0.85)
    for h, start in enumerate(STARTS):
        clock = start.hour - lead_hours
        night = 0.5 * (1.0 + np.cos(2.0 * np.pi * (clock - 2.5) / 24.0))
        # The night belongs to the day it ends in before noon and to the next day after.
        today = start.weekday()
        night_level = NIGHT_WIND[today] if start.hour < 13 else NIGHT_WIND[(today + 1) % 7]
        share[h] = DAY_WIND[today] * (1.0 - night) + night_level * night + 0.05 * noise[h]
    return np.clip(share, 0.0, 1.0)


def availability() -> pd.DataFrame:
    """Return the `availability` table: hourly ceilings of wind, sun and water."""
    ceilings: dict[str, FloatArray] = {
        "Skylark wind": PLANTS["Skylark wind"][2] * wind_share(11, 0.0),
        "Gannet wind": PLANTS["Gannet wind"][2] * wind_share(12, 1.0),
        "Saltpan solar": PLANTS["Saltpan solar"][2] * sun_share(21),
        "Ochre solar": PLANTS["Ochre solar"][2] * sun_share(22),
        "Dunmarrow solar": PLANTS["Dunmarrow solar"][2] * sun_share(23),
    }
    # Water: the dams fill their forebays at night and are freer by evening.
    clock = np.array([start.hour for start in STARTS])
    weekend = np.array([start.weekday() >= 5 for start in STARTS])
    evening = np.exp(-(((clock - 19.0) / 4.0) ** 2))
    sablegate = 330.0 + 100.0 * evening - 30.0 * weekend + 6.0 * smooth_noise(31, clock.size)
    otterwick = 120.0 + 45.0 * evening - 10.0 * weekend + 3.0 * smooth_noise(32, clock.size)
    ceilings["Sablegate dam"] = np.clip(sablegate, 200.0, PLANTS["Sablegate dam"][2])
    ceilings["Otterwick dam"] = np.clip(otterwick, 60.0, PLANTS["Otterwick dam"][2])
    frames = [
        pd.DataFrame({"interval_start": STAMPS, "resource": name, "eco_max_mw": np.round(values, 1)})
        for name, values in ceilings.items()
    ]
    return pd.concat(frames, ignore_index=True)
