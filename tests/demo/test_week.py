"""The committed folder: its week, its completeness, and what the network looks like to an engineer."""

from __future__ import annotations

import itertools

import numpy as np
import pandas as pd
import pytest

from lmpgap.scenario.scenario import Scenario
from tests.demo.conftest import COMMITTED, TRUTH

HOURS = 7 * 24 + 1  # one Sunday of 25 hours


def test_every_file_is_small():
    files = [*COMMITTED.iterdir(), *TRUTH.iterdir()]
    assert files
    assert max(file.stat().st_size for file in files) < 1_000_000


def test_the_only_warning_is_the_renamed_node(scenario: Scenario):
    assert len(scenario.warnings) == 1
    assert "Juniper East 138" in str(scenario.warnings[0])


def test_monday_to_sunday_with_the_clock_change(scenario: Scenario):
    local = scenario.interval_starts.tz_convert("America/Boise")
    assert len(local) == HOURS
    assert (local[0].isoformat(), local[-1].isoformat()) == (
        "2026-10-26T00:00:00-06:00",
        "2026-11-01T23:00:00-07:00",
    )
    per_day = pd.Series(local.date).value_counts(sort=False).to_list()
    assert per_day == [24] * 6 + [25]
    ones = [t.isoformat() for t in local if t.date().isoformat() == "2026-11-01" and t.hour == 1]
    assert ones == ["2026-11-01T01:00:00-06:00", "2026-11-01T01:00:00-07:00"]
    assert scenario.hour_ending(scenario.interval_starts).nunique() == HOURS


def test_every_hour_has_every_hourly_row(scenario: Scenario):
    tables = scenario.tables
    every = set(scenario.interval_starts)
    for table, column in (
        ("loads", "bus"),
        ("availability", "resource"),
        ("interface_limits", "interface"),
        ("delivery_factors", "bus"),
    ):
        for _, rows in tables[table].groupby(column):
            assert set(rows["interval_start"]) == every
            assert len(rows) == HOURS
    assert set(tables["delivery_factors"]["bus"]) == set(tables["buses"]["bus"])
    nodes = tables["posted"].groupby("interval_start")["node"].nunique()
    assert set(nodes.index) == every
    assert (nodes == len(tables["buses"]) + tables["hubs"]["hub"].nunique()).all()


def test_size_zones_hubs_and_map(scenario: Scenario):
    buses, hubs = scenario.tables["buses"], scenario.tables["hubs"]
    assert 40 <= len(buses) <= 60
    assert buses["zone"].nunique() == 4
    assert buses[["map_x", "map_y"]].notna().all().all()
    assert not buses.duplicated(["map_x", "map_y"]).any()
    assert hubs["hub"].nunique() == 3
    assert hubs.groupby("hub")["weight"].sum().to_numpy() == pytest.approx(1.0)
    assert 5 <= len(scenario.network.contingencies.names) <= 15


def test_impedances_are_ordinary_for_their_voltage(scenario: Scenario):
    table = scenario.tables["branches"].merge(
        scenario.tables["buses"][["bus", "base_kv"]], left_on="from_bus", right_on="bus"
    )
    line = table["charging_pu"] > 0
    for kv, low, high in ((345.0, 8.0, 12.0), (138.0, 4.0, 6.0), (69.0, 2.0, 3.0)):
        ratio = (table["x_pu"] / table["r_pu"])[line & (table["base_kv"] == kv)]
        assert len(ratio) > 5
        assert ratio.between(low, high).all()
    transformer = table[~line]
    assert (transformer["x_pu"] / transformer["r_pu"] > 20).all()
    assert transformer["tap_ratio"].between(0.95, 1.05).all()
    assert (transformer["tap_ratio"] != 1.0).any()
    assert (table["emergency_rating_mva"] > table["normal_rating_mva"]).all()
    assert (table["phase_shift_deg"] != 0).sum() == 1


def test_parallel_branches_exist_and_are_never_identical(scenario: Scenario):
    table = scenario.tables["branches"]
    sizes = []
    for _, twins in table.groupby(["from_bus", "to_bus"]):
        sizes.append(len(twins))
        assert twins["x_pu"].is_unique
    assert sizes.count(2) >= 5


def test_connected_with_every_outage_and_contingency(scenario: Scenario):
    network = scenario.network
    topologies = {
        scenario.inputs(hour).branch_in_service.tobytes(): scenario.inputs(hour).branch_in_service
        for hour in range(HOURS)
    }
    assert len(topologies) == 3  # all in service, and each of the two line outages
    for in_service in topologies.values():
        assert network.islands(in_service).max() == 0
        for out in network.contingencies.branches:
            after = in_service.copy()
            after[out] = False
            assert network.islands(after).max() == 0


def test_no_contingency_takes_out_what_is_planned_out(scenario: Scenario):
    outages = scenario.tables["outages"]
    planned = set(outages.loc[outages["kind"] == "branch", "id"])
    assert len(planned) == 2
    assert not planned & set(scenario.tables["contingencies"]["branch"])
    length = pd.to_datetime(outages["last_interval"]) - pd.to_datetime(outages["first_interval"])
    assert (length < pd.Timedelta(days=5)).all()


def test_supply_covers_the_peak_and_the_valley_takes_the_minimum(scenario: Scenario):
    for hour in range(HOURS):
        inputs = scenario.inputs(hour)
        load = inputs.load_p.sum()
        assert inputs.p_max.sum() > 1.05 * load
        assert inputs.p_min.sum() < 0.75 * load


def test_offers_include_steps_slopes_and_negative_prices(scenario: Scenario):
    offers = scenario.tables["offers"]
    assert (offers["end_price"] > offers["price"]).any()
    assert (offers.groupby("resource").size() > 1).any()
    assert offers.loc[offers["resource"].str.endswith("wind"), "price"].max() < 0
    assert (scenario.tables["resources"]["no_load_cost"] > 0).any()
    assert len(scenario.tables["bids"]) >= 3


def test_positions_and_rights_are_at_known_nodes(scenario: Scenario):
    tables = scenario.tables
    nodes = {*tables["buses"]["bus"], *tables["hubs"]["hub"]}
    positions, rights = tables["positions"], tables["rights"]
    assert set(positions["node"]) <= nodes
    assert set(rights["source"]) | set(rights["sink"]) <= nodes
    assert set(rights["kind"]) == {"obligation", "option"}
    net = positions.groupby("account")["mw"].sum().sort_values()
    assert len(net) == 3
    assert net.iloc[0] < -1e4  # the owner injects
    assert net.iloc[-1] > 1e4  # the cooperative withdraws
    assert net.iloc[1] == pytest.approx(0.0)  # the desk is flat


def test_cooperative_never_withdraws_more_than_the_load(scenario: Scenario):
    positions, loads = scenario.tables["positions"], scenario.tables["loads"]
    served = positions[positions["account"].str.contains("Cooperative")].merge(
        loads, left_on=["node", "interval_start"], right_on=["bus", "interval_start"], suffixes=("", "_load")
    )
    assert len(served) > HOURS
    assert (served["mw"] <= served["mw_load"] + 0.1).all()


def test_names_are_unique_whatever_their_case(scenario: Scenario):
    names = [*scenario.network.buses, *scenario.network.branches, *scenario.network.resources]
    assert len(set(names)) == len(names)
    assert not any(a == b for a, b in itertools.pairwise(sorted(name.casefold() for name in names)))
    assert np.isfinite(scenario.network.normal_rating).all()
