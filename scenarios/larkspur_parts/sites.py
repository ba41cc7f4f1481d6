"""Places of the Larkspur Divide and their buses. Every name is invented.

Coordinates are kilometres on a flat map, east and north; they also give the lines their lengths.
"""

from __future__ import annotations

import pandas as pd

SITES: dict[str, tuple[float, float]] = {
    # Mesa: wind in the north-west, sun in the south-west
    "Skylark": (52.0, 288.0),
    "Gannet": (22.0, 262.0),
    "Hollowcrest": (62.0, 240.0),
    "Dunmarrow": (88.0, 168.0),
    "Saltpan": (42.0, 132.0),
    "Ochre": (98.0, 96.0),
    "Pikestone": (62.0, 68.0),
    # River: three dams
    "Otterwick": (150.0, 252.0),
    "Millrace": (182.0, 292.0),
    "Sablegate": (208.0, 262.0),
    "Heronford": (258.0, 284.0),
    "Withy": (292.0, 270.0),
    # Basin: cities, industry, steam, the export tie in the east
    "Ashlatch": (166.0, 164.0),
    "Marlpit": (192.0, 122.0),
    "Copperfen": (238.0, 132.0),
    "Tallow": (212.0, 186.0),
    "Bramblecote": (196.0, 210.0),
    "Hazelden": (180.0, 196.0),
    "Kilnside": (246.0, 178.0),
    "Wrenhold": (258.0, 208.0),
    "Lanthorn": (296.0, 198.0),
    "Quillmere": (336.0, 186.0),
    "Juniper": (368.0, 212.0),
    "Dovecot": (374.0, 158.0),
    "Peatling": (398.0, 140.0),
    "Fallowgate": (414.0, 186.0),
    "Brackwater": (322.0, 112.0),
    "Foxglove": (292.0, 92.0),
    # Cove: the load pocket in the south
    "Thornlea": (256.0, 78.0),
    "Saltmarsh": (224.0, 42.0),
    "Bellhook": (286.0, 44.0),
    "Brindle": (244.0, 6.0),
    "Curlew": (290.0, 2.0),
    "Limpet": (318.0, -14.0),
    "Sandpiper": (334.0, 12.0),
}

ZONES: dict[str, tuple[str, ...]] = {
    "Mesa": ("Skylark", "Gannet", "Hollowcrest", "Dunmarrow", "Saltpan", "Ochre", "Pikestone"),
    "River": ("Otterwick", "Millrace", "Sablegate", "Heronford", "Withy"),
    "Cove": ("Thornlea", "Saltmarsh", "Bellhook", "Brindle", "Curlew", "Limpet", "Sandpiper"),
}
"""Sites that are in no other zone are in the Basin."""

LEVELS: dict[str, tuple[int, ...]] = {
    "Dunmarrow": (345, 138),
    "Sablegate": (345, 138),
    "Ashlatch": (345, 138),
    "Copperfen": (345, 138),
    "Wrenhold": (345, 138),
    "Quillmere": (345, 138),
    "Brackwater": (345, 138),
    "Thornlea": (345, 138),
    "Fallowgate": (345,),
    "Ochre": (138, 69),
    "Heronford": (138, 69),
    "Tallow": (138, 69),
    "Dovecot": (138, 69),
    "Curlew": (138, 69),
    "Pikestone": (69,),
    "Withy": (69,),
    "Bramblecote": (69,),
    "Hazelden": (69,),
    "Peatling": (69,),
    "Limpet": (69,),
    "Sandpiper": (69,),
}
"""Voltage levels of a site [kV]; 138 where nothing is said."""

SHUNTS_MVAR: dict[str, float] = {
    "Dunmarrow 345": -60.0,  # reactors: long lines, lightly loaded at night
    "Fallowgate 345": -50.0,
    "Ochre 69": 6.0,
    "Pikestone 69": 6.0,
    "Hollowcrest 138": 20.0,
    "Heronford 138": 25.0,
    "Withy 69": 6.0,
    "Wrenhold 138": 60.0,
    "Kilnside 138": 40.0,
    "Marlpit 138": 30.0,
    "Tallow 69": 15.0,
    "Bramblecote 69": 6.0,
    "Hazelden 69": 6.0,
    "Quillmere 138": 50.0,
    "Juniper 138": 20.0,
    "Dovecot 69": 8.0,
    "Peatling 69": 8.0,
    "Brindle 138": 16.0,
    "Curlew 138": 12.0,
    "Curlew 69": 12.0,
    "Sandpiper 69": 6.0,
}
"""Capacitors (positive) and reactors (negative), injected at 1 pu [Mvar]."""


def zone_of(site: str) -> str:
    """Return the zone that a site lies in."""
    return next((zone for zone, members in ZONES.items() if site in members), "Basin")


def buses() -> pd.DataFrame:
    """Return the `buses` table, one row per site and voltage level."""
    rows = []
    for site, (east, north) in SITES.items():
        for step, level in enumerate(LEVELS.get(site, (138,))):
            bus = f"{site} {level}"
            rows.append(
                {
                    "bus": bus,
                    "name": f"{site} {level} kV",
                    "zone": zone_of(site),
                    "base_kv": float(level),
                    "v_min_pu": 0.95,
                    "v_max_pu": 1.05,
                    "shunt_mw": 0.0,
                    "shunt_mvar": SHUNTS_MVAR.get(bus, 0.0),
                    # Two levels of one site are drawn a little apart.
                    "map_x": east + 5.0 * step,
                    "map_y": north - 7.0 * step,
                }
            )
    return pd.DataFrame(rows)
