"""Hub and zone prices of a run, and what of a zone's change is weight drift."""

from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from lmpgap.errors import DataError
from lmpgap.runs.areas import area_tables, drift_between_runs, summarise_areas, write_areas
from lmpgap.runs.folder import RunFolder
from lmpgap.runs.price import price
from lmpgap.scenario.read import read_scenario
from lmpgap.scenario.scenario import Scenario
from tests.support.scenarios import hourly_scenario
from tests.support.small_scenarios import branch, buses, offer, resource, write_scenario

ZONE = "America/Boise"
PARTS = ("energy", "congestion", "loss", "reactive")
SHARES = (1.0, -0.5, 0.25, 0.25)


def region(folder: Path, days: list[str], zones: tuple[str, ...] = ("N", "N", "S", "")) -> Scenario:
    """Four buses in two zones and a hub; every hour of the days in local time."""
    starts = pd.date_range(days[0], pd.Timestamp(days[-1]) + pd.Timedelta(days=1), freq="h", tz=ZONE, inclusive="left")
    rows = [{**row, "zone": zone} for row, zone in zip(buses("A", "B", "C", "D"), zones, strict=True)]
    write_scenario(
        folder,
        buses=rows,
        branches=[branch("AB", ("A", "B")), branch("BC", ("B", "C")), branch("CD", ("C", "D"))],
        resources=[resource("Hydro", "A", 500.0)],
        offers=[offer("Hydro", 500.0, 20.0)],
        loads=[
            {"bus": bus, "mw": 50.0, "mvar": 0.0, "interval_start": t.isoformat()} for t in starts for bus in "ABCD"
        ],
        hubs=[{"hub": "H", "bus": "A", "weight": 1.0}, {"hub": "H", "bus": "C", "weight": 3.0}],
    )
    return read_scenario(folder)


def stored(scenario: Scenario, path: Path, lmp: np.ndarray, load: np.ndarray, verdict: str = "certified") -> RunFolder:
    """A run folder with these prices and served loads, (n_interval, n_bus); a quarter of each price is loss."""
    run = RunFolder(path, create=True)
    run.write_manifest({"scenario": {"folder": str(scenario.folder)}})
    n_interval, n_bus = lmp.shape
    frame = pd.DataFrame(
        {
            "interval_start": scenario.interval_starts[:n_interval].repeat(n_bus),
            "formulation": "dc",
            "bus": list(scenario.network.buses) * n_interval,
            "lmp": lmp.ravel(),
            **{f"{part}_component": share * lmp.ravel() for part, share in zip(PARTS, SHARES, strict=True)},
            "lmp_low": lmp.ravel(),
            "lmp_high": lmp.ravel(),
            "verdict": verdict,
            "v_pu": 1.0,
            "angle_deg": 0.0,
            "load_mw": load.ravel(),
        }
    )
    run.write("prices", frame[frame["lmp"].notna()])
    run.write("operating_point", frame)
    return run


def of(drift: pd.DataFrame, zone: str, component: str = "lmp") -> pd.Series:
    (row,) = drift[(drift["zone"] == zone) & (drift["component"] == component)].itertuples(index=False)
    return pd.Series(row._asdict())


def test_prices_of_hub_and_zones_by_hand(tmp_path: Path) -> None:
    scenario = region(tmp_path / "scenario", ["2026-03-09"])
    lmp = np.tile([20.0, 60.0, 100.0, 7.0], (24, 1))
    load = np.tile([75.0, 25.0, 10.0, 10.0], (24, 1))
    load[1] = [50.0, 50.0, 0.0, 10.0]
    made = write_areas(scenario, stored(scenario, tmp_path / "run", lmp, load))
    first = made.areas[made.areas["interval_start"] == scenario.interval_starts[0]].set_index("area")
    assert first["lmp"].to_dict() == pytest.approx({"H": 80.0, "N": 30.0, "S": 100.0})
    assert first["load_mw"].to_dict() == pytest.approx({"H": 85.0, "N": 100.0, "S": 10.0})
    assert first["kind"].to_dict() == {"H": "hub", "N": "zone", "S": "zone"}
    assert first["loss_component"].to_dict() == pytest.approx({"H": 20.0, "N": 7.5, "S": 25.0})
    second = made.areas[made.areas["interval_start"] == scenario.interval_starts[1]].set_index("area")
    assert second.loc["N", "lmp"] == pytest.approx(40.0)
    assert np.isnan(second.loc["S", "lmp"]), "no load, no load-weighted price"
    parts = made.areas[[f"{part}_component" for part in PARTS]].sum(axis=1, skipna=False)
    assert (parts - made.areas["lmp"]).abs().max() < 1e-12
    summary = summarise_areas(made.areas).set_index("area")
    assert summary.loc["N", "lmp"] == pytest.approx((23 * 30 + 40) / 24)
    assert summary.loc["S", "intervals"] == 23
    assert summary.loc["N", "load_share"] == pytest.approx(2400 / (2400 + 230))
    assert made.drift.empty, "one day has nothing before it"


def test_load_that_moves_is_drift_and_prices_that_move_are_not(tmp_path: Path) -> None:
    scenario = region(tmp_path / "scenario", ["2026-03-09", "2026-03-10"])
    lmp = np.tile([20.0, 60.0, 30.0, 7.0], (48, 1))
    load = np.tile([75.0, 25.0, 10.0, 10.0], (48, 1))
    load[24:, :2] = 50.0
    lmp[24:, 2] = 35.0
    drift = area_tables(scenario, stored(scenario, tmp_path / "run", lmp, load)).drift
    north, south = of(drift, "N"), of(drift, "S")
    assert (north["before"], north["after"]) == ("2026-03-09", "2026-03-10")
    assert (north["price_before"], north["price_after"]) == pytest.approx((30.0, 40.0))
    assert (north["price_change"], north["weight_drift"]) == pytest.approx((0.0, 10.0))
    assert (south["price_change"], south["weight_drift"]) == pytest.approx((5.0, 0.0))
    assert of(drift, "S", "loss")["price_change"] == pytest.approx(1.25)
    assert (drift["coverage"] == 1.0).all()


@pytest.mark.parametrize("days", [["2026-10-31", "2026-11-01"], ["2026-03-07", "2026-03-08", "2026-03-09"]])
def test_the_parts_add_up_over_changes_of_the_clock(tmp_path: Path, days: list[str]) -> None:
    """25 and 23 hours; the totals are those of all hours that both days have, formed here in another way."""
    scenario = region(tmp_path / "scenario", days)
    rng = np.random.default_rng(5)
    shape = (scenario.n_interval, 4)
    lmp, load = rng.normal(40.0, 30.0, shape), rng.uniform(0.0, 80.0, shape)
    drift = area_tables(scenario, stored(scenario, tmp_path / "run", lmp, load)).drift
    assert len(drift) == 2 * 5 * (len(days) - 1)
    change = drift["price_after"] - drift["price_before"]
    assert (drift["price_change"] + drift["weight_drift"] - change).abs().max() < 1e-12
    assert drift["weight_drift"].abs().max() > 0.1
    local = scenario.interval_starts.tz_convert(ZONE)
    date, clock = local.strftime("%Y-%m-%d"), local.strftime("%H:%M")
    for row in drift[drift["component"] == "lmp"].itertuples():
        columns = [0, 1] if row.zone == "N" else [2]
        common = set(clock[date == row.before]) & set(clock[date == row.after])
        for day, told in ((row.before, row.price_before), (row.after, row.price_after)):
            hours = np.flatnonzero((date == day) & clock.isin(list(common)))
            weight = load[np.ix_(hours, columns)]
            assert told == pytest.approx(float((weight * lmp[np.ix_(hours, columns)]).sum() / weight.sum()))


def test_hours_and_buses_without_a_price_on_one_side_are_left_out_and_told(tmp_path: Path) -> None:
    scenario = region(tmp_path / "scenario", ["2026-03-09", "2026-03-10"])
    lmp, load = np.full((48, 4), 20.0), np.full((48, 4), 50.0)
    lmp[24:, 0] = np.nan
    lmp[24:36] = np.nan
    lmp[:, 1] = 30.0
    lmp[24:36, 1] = np.nan
    drift = area_tables(scenario, stored(scenario, tmp_path / "run", lmp, load, verdict="not a price")).drift
    north = of(drift, "N")
    assert (north["price_before"], north["price_after"]) == pytest.approx((30.0, 30.0)), "bus B in twelve hours"
    assert north["price_change"] + north["weight_drift"] == pytest.approx(0.0)
    # Compared: 12 hours of one bus of two on both sides; held: 24 and 12 hours of both buses.
    assert north["coverage"] == pytest.approx(2 * 12 / (2 * (24 + 12)))
    assert north["usable"] == 0.0


def test_two_runs_hour_by_hour_or_by_weekday(tmp_path: Path) -> None:
    first = region(tmp_path / "one", ["2026-03-09", "2026-03-10"])
    later = region(tmp_path / "two", ["2026-03-16", "2026-03-17"])
    lmp, load = np.tile([20.0, 60.0, 30.0, 7.0], (48, 1)), np.full((48, 4), 50.0)
    base = stored(first, tmp_path / "base", lmp, load)
    revised = load.copy()
    revised[:, 0] = 150.0
    for scenario, name in ((first, "revised"), (later, "a week later")):
        north = of(drift_between_runs(scenario, base, stored(scenario, tmp_path / name, lmp, revised)), "N")
        assert (north["before"], north["after"]) == ("base", name)
        assert (north["price_change"], north["weight_drift"]) == pytest.approx((0.0, -10.0))
        assert north["coverage"] == 1.0
    other = region(tmp_path / "three", ["2026-03-20"])
    with pytest.raises(DataError, match="no formulation and interval in common"):
        drift_between_runs(other, base, stored(other, tmp_path / "friday", lmp[:24], load[:24]))
    bare = region(tmp_path / "four", ["2026-03-09"], zones=("", "", "", ""))
    with pytest.raises(DataError, match="no zones"):
        drift_between_runs(bare, base, base)


def test_a_solved_run_without_zones_and_hubs_has_empty_tables(tmp_path: Path) -> None:
    scenario = read_scenario(hourly_scenario(tmp_path / "scenario", hours=2))
    run = price(scenario, tmp_path / "run", formulations=("dc",))
    made = write_areas(scenario, run)
    assert made.areas.empty
    assert made.drift.empty
    assert list(run.table("areas").columns) == list(made.areas.columns)
    assert summarise_areas(made.areas).empty
