"""Hourly loads, price-sensitive bids and the interface limits of the week."""

from __future__ import annotations

import numpy as np
import pandas as pd

from .calendar_week import STAMPS, STARTS
from .grid import hours_out
from .weather import FloatArray, smooth_noise

# bus: (peak MW, kind, power factor)
LOADS: dict[str, tuple[float, str, float]] = {
    "Hollowcrest 138": (22.0, "homes", 0.97),
    "Dunmarrow 138": (42.0, "shops", 0.97),
    "Saltpan 138": (16.0, "works", 0.95),
    "Ochre 69": (48.0, "works", 0.94),
    "Pikestone 69": (36.0, "homes", 0.97),
    "Sablegate 138": (26.0, "homes", 0.97),
    "Millrace 138": (44.0, "works", 0.95),
    "Heronford 138": (62.0, "shops", 0.97),
    "Heronford 69": (40.0, "homes", 0.97),
    "Withy 69": (44.0, "homes", 0.97),
    "Ashlatch 138": (52.0, "homes", 0.97),
    "Marlpit 138": (135.0, "works", 0.95),
    "Copperfen 138": (36.0, "works", 0.95),
    "Tallow 138": (90.0, "homes", 0.97),
    "Tallow 69": (38.0, "homes", 0.97),
    "Bramblecote 69": (42.0, "homes", 0.97),
    "Hazelden 69": (36.0, "homes", 0.97),
    "Kilnside 138": (155.0, "shops", 0.97),
    "Wrenhold 138": (335.0, "shops", 0.97),
    "Lanthorn 138": (110.0, "homes", 0.97),
    "Quillmere 138": (270.0, "shops", 0.97),
    "Juniper 138": (95.0, "homes", 0.97),
    "Dovecot 138": (72.0, "shops", 0.97),
    "Dovecot 69": (46.0, "homes", 0.97),
    "Peatling 69": (40.0, "homes", 0.97),
    "Brackwater 138": (30.0, "works", 0.95),
    "Foxglove 138": (42.0, "homes", 0.97),
    "Fallowgate 345": (110.0, "export", 1.0),
    "Thornlea 138": (52.0, "homes", 0.97),
    "Saltmarsh 138": (44.0, "homes", 0.96),
    "Bellhook 138": (40.0, "homes", 0.96),
    "Brindle 138": (84.0, "cannery", 0.95),
    "Curlew 138": (58.0, "homes", 0.96),
    "Curlew 69": (40.0, "homes", 0.96),
    "Limpet 69": (28.0, "homes", 0.96),
    "Sandpiper 69": (34.0, "homes", 0.96),
}


def _percent(text: str) -> tuple[float, ...]:
    """Return 24 shares from 24 whole percentages."""
    shares = tuple(int(word) / 100.0 for word in text.split())
    if len(shares) != 24:
        raise ValueError(f"{len(shares)} hours in a day")
    return shares


# Percent of the peak by hour of the clock, midnight first: weekday, weekend.
SHAPES: dict[str, tuple[tuple[float, ...], tuple[float, ...]]] = {
    "homes": (
        _percent("52 49 47 47 50 58 72 81 77 71 67 65 64 63 64 68 76 87 97 100 96 87 73 60"),
        _percent("54 50 48 47 48 52 60 69 75 77 76 74 72 70 70 72 78 87 95 97 92 83 71 60"),
    ),
    "shops": (
        _percent("56 54 53 53 55 61 71 82 89 92 93 93 93 92 92 92 94 98 100 98 91 81 69 61"),
        _percent("54 52 51 51 51 53 57 62 69 75 78 80 80 79 79 80 83 89 92 90 84 75 65 58"),
    ),
    "works": (
        _percent("86 86 85 85 86 89 94 98 100 100 100 99 98 99 100 99 97 95 93 92 91 90 88 87"),
        _percent("80 " * 24),
    ),
    "cannery": (
        _percent("60 58 58 58 60 66 74 84 90 93 94 94 93 93 93 94 96 99 100 100 98 92 80 68"),
        _percent("50 49 48 48 49 51 55 60 64 66 67 67 66 66 66 68 72 78 82 82 79 72 62 55"),
    ),
    "export": (_percent("45 " * 7 + "100 " * 15 + "45 " * 2), _percent("45 " * 24)),
}

# Monday to Sunday: cold evenings draw more
DAY_FACTOR = (0.98, 1.00, 0.99, 0.99, 0.96, 0.97, 0.99)

# bus, segment, MW, price
BIDS: tuple[tuple[str, int, float, float], ...] = (
    ("Fallowgate 345", 1, 120.0, 38.0),
    ("Fallowgate 345", 2, 100.0, 24.5),
    ("Fallowgate 345", 3, 100.0, 17.0),
    ("Marlpit 138", 1, 45.0, 92.0),  # smelter that can pause
    ("Saltpan 138", 1, 30.0, 8.0),  # brine works that run on cheap power
)


def hourly(bus: str) -> FloatArray:
    """Return the active load of a bus [MW], shape (n_hours,)."""
    peak, kind, _ = LOADS[bus]
    weekday, weekend = SHAPES[kind]
    noise = smooth_noise(100 + list(LOADS).index(bus), len(STARTS))
    shape = np.array([(weekend if t.weekday() >= 5 else weekday)[t.hour] for t in STARTS])
    if kind == "export":
        return np.round(peak * shape, 1)
    day = np.array([DAY_FACTOR[t.weekday()] for t in STARTS])
    return np.round(peak * shape * day * (1.0 + 0.012 * noise), 1)


def loads() -> pd.DataFrame:
    """Return the `loads` table, one row per bus and hour."""
    frames = []
    for bus, (_, _, factor) in LOADS.items():
        mw = hourly(bus)
        ratio = np.sqrt(1.0 / factor**2 - 1.0)
        frames.append(pd.DataFrame({"bus": bus, "interval_start": STAMPS, "mw": mw, "mvar": np.round(mw * ratio, 1)}))
    return pd.concat(frames, ignore_index=True)


def bids() -> pd.DataFrame:
    """Return the `bids` table; the same bids hold all week."""
    return pd.DataFrame(BIDS, columns=["bus", "segment", "mw", "price"])


def mesa_export_limit(hour: int, *, with_outage: bool = True) -> float:
    """Return what the Mesa may export in an hour [MW].

    Less in the warm sunny hours, and much less while one Ashlatch-Copperfen circuit is out.

    Parameters
    ----------
    hour
        Position in the week.
    with_outage
        ``False`` gives the limit that would hold if that circuit were in service.
    """
    if with_outage and hour in hours_out("Ashlatch-Copperfen B"):
        return 450.0
    return 610.0 if 10 <= STARTS[hour].hour <= 17 else 700.0


def interface_limits() -> pd.DataFrame:
    """Return the `interface_limits` table.

    The Cove's limit is set where thermal studies put it, well above what voltages allow in the evening.
    """
    rows = []
    for hour, stamp in enumerate(STAMPS):
        for name, limit, reverse in (("Mesa export", mesa_export_limit(hour), 500.0), ("Cove import", 420.0, 200.0)):
            rows.append({"interface": name, "interval_start": stamp, "limit_mw": limit, "reverse_limit_mw": reverse})
    return pd.DataFrame(rows)
