"""Lines, transformers and the limits on their flows.

Lines take their impedance from length and voltage, with values that are ordinary for overhead lines of that
voltage; ratings are those of the conductor, or below it where a terminal limits.
"""

from __future__ import annotations

from dataclasses import dataclass
from math import hypot

import pandas as pd

from .calendar_week import STAMPS, position, span
from .sites import SITES

BASE_MVA = 100.0
ROUTE_FACTOR = 1.12
"""A line is longer than the straight distance."""


@dataclass(frozen=True)
class Conductor:
    """Per-kilometre values of a line: resistance and reactance [ohm/km], charging [uS/km]."""

    kv: float
    ohm_r: float
    ohm_x: float
    micro_siemens: float

    def per_unit(self, kilometres: float) -> tuple[float, float, float]:
        """Return r, x and total charging [pu] of a length."""
        base_ohm = self.kv**2 / BASE_MVA
        return (
            round(self.ohm_r * kilometres / base_ohm, 5),
            round(self.ohm_x * kilometres / base_ohm, 5),
            round(self.micro_siemens * 1e-6 * kilometres * base_ohm, 5),
        )


CONDUCTORS = {
    345: Conductor(345.0, 0.037, 0.370, 4.50),  # twin bundle
    138: Conductor(138.0, 0.100, 0.470, 3.50),
    69: Conductor(69.0, 0.210, 0.480, 3.40),
}

# (from, to, kV, circuits, normal MVA, emergency MVA)
LINES: tuple[tuple[str, str, int, str, float, float], ...] = (
    # The export corridor of the Mesa
    ("Dunmarrow", "Ashlatch", 345, "AB", 620.0, 720.0),
    ("Hollowcrest", "Otterwick", 138, "", 160.0, 190.0),
    # Backbone
    ("Ashlatch", "Copperfen", 345, "AB", 700.0, 820.0),
    ("Ashlatch", "Sablegate", 345, "", 700.0, 820.0),
    ("Ashlatch", "Wrenhold", 345, "", 700.0, 820.0),
    ("Sablegate", "Wrenhold", 345, "", 700.0, 820.0),
    ("Wrenhold", "Quillmere", 345, "", 700.0, 820.0),
    ("Copperfen", "Quillmere", 345, "", 700.0, 820.0),
    ("Copperfen", "Thornlea", 345, "", 700.0, 820.0),
    ("Brackwater", "Thornlea", 345, "", 700.0, 820.0),
    ("Brackwater", "Quillmere", 345, "", 700.0, 820.0),
    ("Quillmere", "Fallowgate", 345, "", 600.0, 700.0),
    ("Brackwater", "Fallowgate", 345, "", 600.0, 700.0),
    # Mesa, 138 kV
    ("Gannet", "Hollowcrest", 138, "", 240.0, 280.0),
    ("Skylark", "Hollowcrest", 138, "", 240.0, 280.0),
    ("Gannet", "Skylark", 138, "", 150.0, 180.0),
    ("Hollowcrest", "Dunmarrow", 138, "AB", 185.0, 215.0),
    ("Dunmarrow", "Saltpan", 138, "AB", 200.0, 235.0),
    ("Saltpan", "Ochre", 138, "", 170.0, 200.0),
    ("Dunmarrow", "Ochre", 138, "", 170.0, 200.0),
    # River, 138 kV
    ("Otterwick", "Sablegate", 138, "", 200.0, 235.0),
    ("Otterwick", "Millrace", 138, "", 170.0, 200.0),
    ("Millrace", "Sablegate", 138, "", 170.0, 200.0),
    ("Sablegate", "Heronford", 138, "", 170.0, 200.0),
    ("Heronford", "Wrenhold", 138, "", 170.0, 200.0),
    # Basin, 138 kV
    ("Ashlatch", "Tallow", 138, "", 170.0, 200.0),
    ("Tallow", "Kilnside", 138, "", 170.0, 200.0),
    ("Kilnside", "Wrenhold", 138, "", 200.0, 235.0),
    ("Kilnside", "Copperfen", 138, "", 170.0, 200.0),
    ("Ashlatch", "Marlpit", 138, "", 150.0, 165.0),
    ("Marlpit", "Copperfen", 138, "", 170.0, 200.0),
    ("Wrenhold", "Lanthorn", 138, "", 170.0, 200.0),
    ("Lanthorn", "Quillmere", 138, "", 170.0, 200.0),
    ("Quillmere", "Juniper", 138, "", 200.0, 235.0),
    ("Juniper", "Dovecot", 138, "", 150.0, 180.0),
    ("Quillmere", "Dovecot", 138, "", 200.0, 235.0),
    ("Dovecot", "Brackwater", 138, "", 170.0, 200.0),
    ("Brackwater", "Foxglove", 138, "", 170.0, 200.0),
    ("Foxglove", "Thornlea", 138, "", 170.0, 200.0),
    # Cove, 138 kV: heavy conductors, so that voltage and not heat is the limit
    ("Thornlea", "Saltmarsh", 138, "", 285.0, 350.0),
    ("Saltmarsh", "Brindle", 138, "", 285.0, 350.0),
    ("Thornlea", "Bellhook", 138, "", 285.0, 350.0),
    ("Bellhook", "Curlew", 138, "", 285.0, 350.0),
    ("Brindle", "Curlew", 138, "", 200.0, 240.0),
    # 69 kV
    ("Ochre", "Pikestone", 69, "AB", 60.0, 75.0),
    ("Heronford", "Withy", 69, "AB", 60.0, 75.0),
    ("Tallow", "Bramblecote", 69, "", 75.0, 90.0),
    ("Bramblecote", "Hazelden", 69, "", 75.0, 90.0),
    ("Hazelden", "Tallow", 69, "", 75.0, 90.0),
    ("Dovecot", "Peatling", 69, "AB", 60.0, 75.0),
    ("Curlew", "Limpet", 69, "", 75.0, 90.0),
    ("Limpet", "Sandpiper", 69, "", 60.0, 75.0),
    ("Sandpiper", "Curlew", 69, "", 75.0, 90.0),
)

# (site, upper kV, lower kV, units, r, x, tap ratio, normal MVA, emergency MVA)
TRANSFORMERS: tuple[tuple[str, int, int, str, float, float, float, float, float], ...] = (
    ("Dunmarrow", 345, 138, "AB", 0.0006, 0.0250, 1.000, 400.0, 460.0),
    ("Sablegate", 345, 138, "", 0.0006, 0.0250, 1.000, 400.0, 460.0),
    ("Ashlatch", 345, 138, "", 0.0007, 0.0300, 0.985, 330.0, 380.0),
    ("Copperfen", 345, 138, "", 0.0006, 0.0250, 0.985, 400.0, 460.0),
    ("Wrenhold", 345, 138, "AB", 0.0006, 0.0250, 0.980, 400.0, 460.0),
    ("Quillmere", 345, 138, "AB", 0.0006, 0.0250, 0.980, 400.0, 460.0),
    ("Brackwater", 345, 138, "", 0.0006, 0.0250, 0.985, 400.0, 460.0),
    ("Thornlea", 345, 138, "AB", 0.0006, 0.0250, 0.970, 400.0, 460.0),
    ("Ochre", 138, 69, "AB", 0.0030, 0.0900, 0.980, 100.0, 120.0),
    ("Heronford", 138, 69, "AB", 0.0030, 0.0900, 0.980, 100.0, 120.0),
    ("Tallow", 138, 69, "AB", 0.0030, 0.0900, 0.970, 100.0, 120.0),
    ("Dovecot", 138, 69, "AB", 0.0030, 0.0900, 0.975, 100.0, 120.0),
    ("Curlew", 138, 69, "AB", 0.0030, 0.0900, 0.975, 100.0, 120.0),
)

PHASE_SHIFTER_DEG = 5.0
"""Fixed setting that holds back the 138 kV path beside the export corridor."""

OUTAGES: tuple[tuple[str, str, tuple[str, int], tuple[str, int]], ...] = (
    ("branch", "Ashlatch-Copperfen B", ("Wed", 7), ("Thu", 18)),
    ("branch", "Marlpit-Copperfen", ("Fri", 6), ("Sat", 17)),
    ("resource", "Copperfen steam 2", ("Thu", 0), ("Fri", 21)),
)

CONTINGENCIES: dict[str, tuple[str, ...]] = {
    "loss of Dunmarrow-Ashlatch A": ("Dunmarrow-Ashlatch A",),
    "loss of Ashlatch-Copperfen A": ("Ashlatch-Copperfen A",),
    "loss of Ashlatch-Wrenhold": ("Ashlatch-Wrenhold",),
    "loss of Sablegate-Wrenhold": ("Sablegate-Wrenhold",),
    "loss of Wrenhold-Quillmere": ("Wrenhold-Quillmere",),
    "loss of Copperfen-Thornlea": ("Copperfen-Thornlea",),
    "loss of Brackwater-Quillmere": ("Brackwater-Quillmere",),
    "loss of Hollowcrest-Dunmarrow A": ("Hollowcrest-Dunmarrow A",),
    "loss of Thornlea-Saltmarsh": ("Thornlea-Saltmarsh",),
    "loss of Wrenhold transformer A": ("Wrenhold transformer A",),
    # Two circuits on one tower line
    "loss of the Lanthorn towers": ("Wrenhold-Lanthorn", "Wrenhold-Quillmere"),
}

INTERFACES: dict[str, dict[str, float]] = {
    "Mesa export": {
        "Dunmarrow-Ashlatch A": 1.0,
        "Dunmarrow-Ashlatch B": 1.0,
        "Hollowcrest-Otterwick": 1.0,
        "Ochre-Ashlatch": 1.0,
    },
    "Cove import": {"Thornlea-Saltmarsh": 1.0, "Thornlea-Bellhook": 1.0},
}


def kilometres(first: str, second: str) -> float:
    """Return the route length of a line between two sites [km]."""
    (x1, y1), (x2, y2) = SITES[first], SITES[second]
    return ROUTE_FACTOR * hypot(x2 - x1, y2 - y1)


def branches() -> pd.DataFrame:
    """Return the `branches` table: lines, the phase shifter's line, transformers."""
    rows = []
    for first, second, kv, circuits, normal, emergency in LINES:
        r, x, charging = CONDUCTORS[kv].per_unit(kilometres(first, second))
        for step, circuit in enumerate(circuits or ("",)):
            name = f"{first}-{second} {circuit}".rstrip()
            # The second circuit was built later with a lighter conductor: never two identical lines.
            longer = 1.0 + 0.04 * step
            rows.append(
                _branch(name, f"{first} {kv}", f"{second} {kv}", r * longer, x * longer, charging, normal, emergency)
            )
    r, x, charging = CONDUCTORS[138].per_unit(kilometres("Ochre", "Ashlatch"))
    rows.append(
        _branch(
            "Ochre-Ashlatch",
            "Ochre 138",
            "Ashlatch 138",
            r + 0.0012,
            x + 0.030,  # the shifter's own impedance
            charging,
            150.0,
            175.0,
            shift=PHASE_SHIFTER_DEG,
        )
    )
    for site, upper, lower, units, r, x, tap, normal, emergency in TRANSFORMERS:
        for step, unit in enumerate(units or ("",)):
            name = f"{site} transformer {unit}".rstrip()
            rows.append(
                _branch(
                    name,
                    f"{site} {upper}",
                    f"{site} {lower}",
                    r * (1.0 + 0.05 * step),
                    x * (1.0 + 0.05 * step),
                    0.0,
                    normal,
                    emergency,
                    tap=tap,
                )
            )
    return pd.DataFrame(rows)


def _branch(
    name: str,
    from_bus: str,
    to_bus: str,
    r: float,
    x: float,
    charging: float,
    normal: float,
    emergency: float,
    *,
    tap: float = 1.0,
    shift: float = 0.0,
) -> dict[str, object]:
    return {
        "branch": name,
        "from_bus": from_bus,
        "to_bus": to_bus,
        "r_pu": round(r, 5),
        "x_pu": round(x, 5),
        "charging_pu": round(charging, 5),
        "tap_ratio": tap,
        "phase_shift_deg": shift,
        "normal_rating_mva": normal,
        "emergency_rating_mva": emergency,
        "angle_min_deg": -40.0,
        "angle_max_deg": 40.0,
    }


def outages() -> pd.DataFrame:
    """Return the `outages` table."""
    return pd.DataFrame(
        [
            {
                "kind": kind,
                "id": name,
                "first_interval": STAMPS[position(*first)],
                "last_interval": STAMPS[position(*last)],
            }
            for kind, name, first, last in OUTAGES
        ]
    )


def hours_out(name: str) -> range:
    """Return the hours in which something is out, as positions in the week."""
    return next(span(first, last) for _, item, first, last in OUTAGES if item == name)


def contingencies() -> pd.DataFrame:
    """Return the `contingencies` table."""
    return pd.DataFrame(
        [{"contingency": name, "branch": branch} for name, out in CONTINGENCIES.items() for branch in out]
    )


def monitored() -> pd.DataFrame:
    """Return the `monitored` table: every line and transformer of 138 kV and above."""
    table = branches()
    low = table["from_bus"].str.endswith(" 69") | table["to_bus"].str.endswith(" 69")
    return pd.DataFrame({"branch": table.loc[~low, "branch"].to_list()})


def interfaces() -> pd.DataFrame:
    """Return the `interfaces` table."""
    return pd.DataFrame(
        [
            {"interface": name, "branch": branch, "weight": weight}
            for name, parts in INTERFACES.items()
            for branch, weight in parts.items()
        ]
    )
