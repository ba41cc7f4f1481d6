"""Plants of the Larkspur Divide and what they offer."""

from __future__ import annotations

import pandas as pd

# resource: (bus, eco min, eco max, q min, q max, fuel, no-load cost $/h)
PLANTS: dict[str, tuple[str, float, float, float, float, str, float]] = {
    "Skylark wind": ("Skylark 138", 0.0, 260.0, -60.0, 60.0, "wind", 0.0),
    "Gannet wind": ("Gannet 138", 0.0, 300.0, -70.0, 70.0, "wind", 0.0),
    "Saltpan solar": ("Saltpan 138", 0.0, 320.0, -90.0, 90.0, "solar", 0.0),
    "Ochre solar": ("Ochre 138", 0.0, 180.0, -50.0, 50.0, "solar", 0.0),
    "Dunmarrow solar": ("Dunmarrow 345", 0.0, 260.0, -80.0, 80.0, "solar", 0.0),
    "Sablegate dam": ("Sablegate 345", 60.0, 430.0, -140.0, 160.0, "hydro", 0.0),
    "Otterwick dam": ("Otterwick 138", 20.0, 165.0, -50.0, 60.0, "hydro", 0.0),
    "Millrace dam": ("Millrace 138", 8.0, 70.0, -20.0, 25.0, "hydro", 0.0),
    "Copperfen steam 1": ("Copperfen 345", 95.0, 270.0, -80.0, 130.0, "coal", 410.0),
    "Copperfen steam 2": ("Copperfen 345", 95.0, 270.0, -80.0, 130.0, "coal", 425.0),
    "Brackwater gas": ("Brackwater 345", 150.0, 460.0, -140.0, 210.0, "gas", 690.0),
    "Quillmere gas": ("Quillmere 138", 90.0, 310.0, -80.0, 140.0, "gas", 520.0),
    "Wrenhold gas": ("Wrenhold 138", 60.0, 220.0, -60.0, 110.0, "gas", 380.0),
    "Lanthorn peaker": ("Lanthorn 138", 0.0, 120.0, -30.0, 50.0, "gas", 0.0),
    "Kilnside peaker": ("Kilnside 138", 0.0, 100.0, -25.0, 45.0, "gas", 0.0),
    "Quillmere peaker": ("Quillmere 138", 0.0, 130.0, -35.0, 55.0, "gas", 0.0),
    "Brindle peaker": ("Brindle 138", 0.0, 110.0, -20.0, 35.0, "gas", 0.0),
    # Spin without burning anything: reactive power only
    "Curlew condenser": ("Curlew 138", 0.0, 0.0, -45.0, 48.0, "condenser", 0.0),
    "Bramblecote condenser": ("Bramblecote 69", 0.0, 0.0, -18.0, 22.0, "condenser", 0.0),
    "Limpet diesel": ("Limpet 69", 0.0, 24.0, -6.0, 10.0, "oil", 0.0),
}

# resource: segments (from MW, to MW, price, end price); a different end price makes a slope
OFFERS: dict[str, tuple[tuple[float, float, float, float], ...]] = {
    "Skylark wind": ((0.0, 260.0, -24.0, -24.0),),
    "Gannet wind": ((0.0, 300.0, -17.5, -17.5),),
    "Saltpan solar": ((0.0, 320.0, -3.0, -3.0),),
    "Ochre solar": ((0.0, 180.0, 2.0, 2.0),),
    "Dunmarrow solar": ((0.0, 260.0, 4.0, 4.0),),
    "Sablegate dam": ((0.0, 250.0, 14.5, 14.5), (250.0, 340.0, 24.0, 30.0), (340.0, 430.0, 38.0, 46.0)),
    "Otterwick dam": ((0.0, 80.0, 12.0, 12.0), (80.0, 165.0, 27.5, 27.5)),
    "Millrace dam": ((0.0, 70.0, 19.0, 19.0),),
    "Copperfen steam 1": ((0.0, 150.0, 19.2, 19.2), (150.0, 270.0, 21.5, 25.0)),
    "Copperfen steam 2": ((0.0, 150.0, 19.8, 19.8), (150.0, 270.0, 22.4, 26.2)),
    "Brackwater gas": ((0.0, 250.0, 25.6, 25.6), (250.0, 400.0, 28.4, 28.4), (400.0, 460.0, 36.5, 36.5)),
    "Quillmere gas": ((0.0, 200.0, 30.2, 30.2), (200.0, 310.0, 33.0, 37.5)),
    "Wrenhold gas": ((0.0, 140.0, 34.1, 34.1), (140.0, 220.0, 41.0, 41.0)),
    "Lanthorn peaker": ((0.0, 60.0, 54.0, 54.0), (60.0, 120.0, 61.5, 61.5)),
    "Kilnside peaker": ((0.0, 100.0, 66.0, 74.0),),
    "Quillmere peaker": ((0.0, 65.0, 77.0, 77.0), (65.0, 130.0, 86.0, 94.0)),
    "Brindle peaker": ((0.0, 50.0, 68.0, 68.0), (50.0, 110.0, 83.0, 83.0)),
    "Limpet diesel": ((0.0, 24.0, 148.0, 148.0),),
}


def resources() -> pd.DataFrame:
    """Return the `resources` table."""
    columns = ("bus", "eco_min_mw", "eco_max_mw", "q_min_mvar", "q_max_mvar", "fuel", "no_load_cost")
    return pd.DataFrame([{"resource": name, **dict(zip(columns, row, strict=True))} for name, row in PLANTS.items()])


def offers() -> pd.DataFrame:
    """Return the `offers` table; the same curve holds all week."""
    return pd.DataFrame(
        [
            {
                "resource": name,
                "segment": number,
                "from_mw": start,
                "to_mw": end,
                "price": price,
                "end_price": end_price,
            }
            for name, segments in OFFERS.items()
            for number, (start, end, price, end_price) in enumerate(segments, start=1)
        ]
    )
