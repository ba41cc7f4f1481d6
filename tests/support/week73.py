"""A real week for a 73-bus system, as a scenario folder; for benchmarks and slow tests.

Source: the test system of "The IEEE Reliability Test System: A Proposed 2019 Update", IEEE Trans. Power Systems
35(1), 2020, with a year of hourly load, wind, sun and water, from a data-only package (extra `published`; data of
DOE/NREL/ALLIANCE, provided as is). Load is spread over the buses of a region in proportion to their static load; units
are offered at fuel cost from zero output, since there is no unit commitment here; storage and the two-terminal DC link
are left out.
"""

from __future__ import annotations

from importlib.resources import files
from pathlib import Path

import numpy as np
import pandas as pd

ZONE = "America/Phoenix"
_WEATHER = {"Hydro": "hydro", "PV": "pv", "RTPV": "rtpv", "WIND": "wind"}


def write_week(folder: Path, first_day: str = "2020-07-20", days: int = 7) -> Path:
    """Write the scenario folder and return it."""
    data = files("dispatches_data.packages.rts_gmlc")

    def source(path: str) -> pd.DataFrame:
        with (data / path).open("rb") as handle:
            return pd.read_csv(handle)

    folder.mkdir(parents=True, exist_ok=True)
    buses, lines, units = (source(f"SourceData/{name}.csv") for name in ("bus", "branch", "gen"))
    name_of = {number: f"B{number}" for number in buses["Bus ID"]}
    (folder / "scenario.toml").write_text(
        '[scenario]\nname = "73 buses, one week"\n'
        f'time_zone = "{ZONE}"\nbase_mva = 100.0\n[dc]\nsusceptance = "impedance"\n'
    )
    pd.DataFrame(
        {
            "bus": buses["Bus ID"].map(name_of),
            "zone": "area " + buses["Area"].astype(str),
            "base_kv": buses["BaseKV"],
            "v_min_pu": 0.95,
            "v_max_pu": 1.05,
            "shunt_mw": buses["MW Shunt G"],
            "shunt_mvar": buses["MVAR Shunt B"],
            "map_x": buses["lng"],
            "map_y": buses["lat"],
        }
    ).to_csv(folder / "buses.csv", index=False)
    pd.DataFrame(
        {
            "branch": lines["UID"],
            "from_bus": lines["From Bus"].map(name_of),
            "to_bus": lines["To Bus"].map(name_of),
            "r_pu": lines["R"],
            "x_pu": lines["X"],
            "charging_pu": lines["B"],
            "tap_ratio": lines["Tr Ratio"].where(lines["Tr Ratio"] > 0, 1.0),
            "normal_rating_mva": lines["Cont Rating"],
            "emergency_rating_mva": lines["STE Rating"],
        }
    ).to_csv(folder / "branches.csv", index=False)

    kept = units[~units["Unit Type"].isin(["STORAGE", "CSP"])].reset_index(drop=True)
    pd.DataFrame(
        {
            "resource": kept["GEN UID"],
            "bus": kept["Bus ID"].map(name_of),
            "eco_min_mw": 0.0,
            "eco_max_mw": kept["PMax MW"],
            "q_min_mvar": kept["QMin MVAR"],
            "q_max_mvar": kept["QMax MVAR"],
            "fuel": kept["Fuel"],
        }
    ).to_csv(folder / "resources.csv", index=False)
    _offers(kept).to_csv(folder / "offers.csv", index=False)

    hours = pd.date_range(first_day, periods=24 * days, freq="h", tz=ZONE)
    regional = _at(source("timeseries_data_files/Load/DAY_AHEAD_regional_Load.csv"), hours)
    share = buses["MW Load"] / buses.groupby("Area")["MW Load"].transform("sum")
    loaded = np.flatnonzero(buses["MW Load"] > 0)
    area = buses["Area"].astype(str).to_numpy()
    mw = np.stack([regional[area[i]].to_numpy() * share[i] for i in loaded], axis=1)
    ratio = (buses["MVAR Load"] / buses["MW Load"].where(buses["MW Load"] > 0)).to_numpy()[loaded]
    pd.DataFrame(
        {
            "bus": np.tile(buses["Bus ID"].map(name_of).to_numpy()[loaded], hours.size),
            "mw": mw.ravel().round(4),
            "mvar": (mw * ratio).ravel().round(4),
            "interval_start": np.repeat([t.isoformat() for t in hours], loaded.size),
        }
    ).to_csv(folder / "loads.csv", index=False)

    parts = []
    for sub, suffix in _WEATHER.items():
        table = _at(source(f"timeseries_data_files/{sub}/DAY_AHEAD_{suffix}.csv"), hours)
        for unit in [u for u in table.columns if u in set(kept["GEN UID"])]:
            most = float(kept.loc[kept["GEN UID"] == unit, "PMax MW"].iloc[0])
            parts.append(
                pd.DataFrame(
                    {
                        "interval_start": [t.isoformat() for t in hours],
                        "resource": unit,
                        "eco_max_mw": table[unit].clip(0.0, most).to_numpy(),
                    }
                )
            )
    pd.concat(parts).to_csv(folder / "availability.csv", index=False)
    return folder


def _offers(units: pd.DataFrame) -> pd.DataFrame:
    """Incremental heat rate times fuel price per block of output; blocks never get cheaper."""
    rows = []
    for _, unit in units.iterrows():
        blocks = [unit[f"Output_pct_{k}"] for k in range(5)]
        rates = [unit["HR_avg_0"], *(unit[f"HR_incr_{k}"] for k in range(1, 5))]
        blocks = [b for b in blocks if pd.notna(b)] or [1.0]
        start, price, segment = 0.0, 0.0, 0
        for block, rate in zip(blocks, rates, strict=False):
            end = round(float(block) * float(unit["PMax MW"]), 4)
            if end <= start:
                continue
            cost = 0.0 if pd.isna(rate) else float(rate) / 1000.0 * float(unit["Fuel Price $/MMBTU"])
            price, segment = max(price, round(cost + float(unit["VOM"] or 0.0), 4)), segment + 1
            rows.append((unit["GEN UID"], segment, start, end, price))
            start = end
        if segment == 0:
            rows.append((unit["GEN UID"], 1, 0.0, float(unit["PMax MW"]), 0.0))
    return pd.DataFrame(rows, columns=["resource", "segment", "from_mw", "to_mw", "price"])


def _at(table: pd.DataFrame, hours: pd.DatetimeIndex) -> pd.DataFrame:
    """Rows of a table keyed by year, month, day and hour of day (from 1), in local time."""
    start = pd.to_datetime(table[["Year", "Month", "Day"]].set_axis(["year", "month", "day"], axis=1))
    stamped = table.set_index((start + pd.to_timedelta(table["Period"] - 1, unit="h")).dt.tz_localize(ZONE))
    return stamped.loc[hours]
