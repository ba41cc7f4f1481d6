"""What the region's story claims, hour by hour, in all four formulations.

Figures are not published truth: they are what the invented region is built to show, so the assertions are about signs,
orders and names, not about decimals.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pandas as pd
import pytest

from lmpgap.dispatch.names import FORMULATIONS
from lmpgap.runs.price import price
from lmpgap.scenario.scenario import Scenario

WINDY_NIGHT = "2026-10-27T03:00:00-06:00"
SUNNY_NOON = "2026-10-26T13:00:00-06:00"
NOON_WITH_OUTAGE = "2026-10-28T13:00:00-06:00"
POCKET_EVENING = "2026-10-27T19:00:00-06:00"
WEEKEND_EVENING = "2026-11-01T19:00:00-07:00"
QUIET_MORNING = "2026-10-26T08:00:00-06:00"
AFTERNOON = "2026-10-29T15:00:00-06:00"
RAMP = "2026-10-29T18:00:00-06:00"
SECOND_ONE = "2026-11-01T01:00:00-07:00"
MARLPIT_RADIAL = "2026-10-30T12:00:00-06:00"
HOURS = (
    WINDY_NIGHT,
    SUNNY_NOON,
    NOON_WITH_OUTAGE,
    POCKET_EVENING,
    WEEKEND_EVENING,
    QUIET_MORNING,
    AFTERNOON,
    RAMP,
    SECOND_ONE,
    MARLPIT_RADIAL,
)


@dataclass(frozen=True)
class Solved:
    prices: pd.DataFrame
    constraints: pd.DataFrame
    solves: pd.DataFrame
    dispatch: pd.DataFrame
    points: pd.DataFrame

    def lmp(self, hour: str, formulation: str, bus: str) -> float:
        return float(self.prices.loc[(pd.Timestamp(hour), formulation, bus), "lmp"])

    def verdict(self, hour: str, formulation: str) -> str:
        return str(self.solves.loc[(pd.Timestamp(hour), formulation), "verdict"])

    def shadow_price(self, hour: str, formulation: str, constraint: str) -> float:
        rows = self.constraints
        chosen = (
            (rows["interval_start"] == pd.Timestamp(hour))
            & (rows["formulation"] == formulation)
            & (rows["constraint"] == constraint)
        )
        return float(rows.loc[chosen, "shadow_price"].sum())


@pytest.fixture(scope="module")
def solved(scenario: Scenario, tmp_path_factory: pytest.TempPathFactory) -> Solved:
    starts = list(scenario.interval_starts)
    positions = sorted(starts.index(pd.Timestamp(hour)) for hour in HOURS)
    run = price(scenario, tmp_path_factory.mktemp("story"), positions=positions)
    return Solved(
        prices=run.table("prices").set_index(["interval_start", "formulation", "bus"]),
        constraints=run.table("constraints"),
        solves=run.table("solves").set_index(["interval_start", "formulation"]),
        dispatch=run.table("dispatch").set_index(["interval_start", "formulation", "resource"]),
        points=run.table("operating_point"),
    )


def test_every_formulation_solves_and_no_limit_gives_way(solved: Solved):
    assert len(solved.solves) == len(HOURS) * len(FORMULATIONS)
    assert set(solved.solves["status"]) == {"optimal", "locally optimal"}
    assert not solved.constraints["at_penalty"].any()
    assert solved.prices["lmp"].between(-25.0, 300.0).all()


@pytest.mark.parametrize("formulation", FORMULATIONS)
def test_wind_is_curtailed_at_negative_prices_on_a_windy_night(solved: Solved, scenario: Scenario, formulation: str):
    assert solved.lmp(WINDY_NIGHT, formulation, "Gannet 138") < 0
    assert solved.lmp(WINDY_NIGHT, formulation, "Wrenhold 138") > 15
    table = scenario.tables["availability"]
    table = table[table["interval_start"] == pd.Timestamp(WINDY_NIGHT)].set_index("resource")["eco_max_mw"]
    wind = ["Gannet wind", "Skylark wind"]
    output = sum(solved.dispatch.loc[(pd.Timestamp(WINDY_NIGHT), formulation, w), "mw"] for w in wind)
    assert output < table[wind].sum() - 20


@pytest.mark.parametrize("formulation", FORMULATIONS)
@pytest.mark.parametrize("hour", [SUNNY_NOON, NOON_WITH_OUTAGE])
def test_export_corridor_congests_by_day(solved: Solved, formulation: str, hour: str):
    assert solved.shadow_price(hour, formulation, "interface Mesa export forward") > 10
    west, east = (solved.lmp(hour, formulation, bus) for bus in ("Dunmarrow 345", "Wrenhold 345"))
    assert west + 15 < east


@pytest.mark.parametrize("hour", [POCKET_EVENING, WEEKEND_EVENING])
def test_load_pocket_splits_off_only_where_voltages_count(solved: Solved, hour: str):
    gap = {
        name: solved.lmp(hour, name, "Brindle 138") - solved.lmp(hour, name, "Thornlea 345") for name in FORMULATIONS
    }
    assert abs(gap["dc"]) < 0.01
    assert 0 < gap["dc-loss"] < 0.2 * solved.lmp(hour, "dc-loss", "Thornlea 345")
    assert min(gap["soc"], gap["ac"]) > gap["dc-loss"] + 5
    # No flow limit is behind it: the local plant runs for its reactive power.
    rows = solved.constraints
    rows = rows[(rows["interval_start"] == pd.Timestamp(hour)) & (rows["formulation"] == "ac")]
    flows = rows[rows["kind"].isin(["thermal", "contingency", "interface"]) & (rows["shadow_price"] > 0.01)]
    assert flows.empty
    assert (rows["constraint"] == "voltage Sandpiper 69 lower").any()
    peaker = solved.dispatch["mw"].xs("Brindle peaker", level="resource").loc[pd.Timestamp(hour)]
    assert peaker["ac"] > peaker["dc"] + 5


@pytest.mark.parametrize("formulation", FORMULATIONS)
def test_evening_ramp_lifts_the_price(solved: Solved, formulation: str):
    before, after = (solved.lmp(hour, formulation, "Wrenhold 138") for hour in (AFTERNOON, RAMP))
    assert after > 1.5 * before


@pytest.mark.parametrize("formulation", FORMULATIONS)
def test_planned_outage_leaves_one_line_to_the_smelter_and_it_binds(solved: Solved, formulation: str):
    assert solved.shadow_price(MARLPIT_RADIAL, formulation, "Ashlatch-Marlpit forward") > 1
    assert solved.shadow_price(QUIET_MORNING, formulation, "Ashlatch-Marlpit forward") == 0


def test_relaxation_is_believed_in_a_quiet_hour_and_not_on_a_windy_night(solved: Solved):
    assert solved.verdict(QUIET_MORNING, "soc") in ("exact", "close")
    assert solved.verdict(POCKET_EVENING, "soc") in ("exact", "close")
    assert solved.verdict(WINDY_NIGHT, "soc") == "not a price"
    error = {
        hour: max(
            abs(solved.lmp(hour, "soc", bus) - solved.lmp(hour, "ac", bus))
            for bus in ("Hollowcrest 138", "Otterwick 138", "Wrenhold 138")
        )
        for hour in (QUIET_MORNING, WINDY_NIGHT)
    }
    assert error[QUIET_MORNING] < 0.5
    assert error[WINDY_NIGHT] > 5


def test_voltages_and_losses_are_those_of_a_sound_network(solved: Solved, scenario: Scenario):
    points = solved.points[solved.points["formulation"] == "ac"]
    assert points["v_pu"].between(0.95 - 1e-6, 1.05 + 1e-6).all()
    assert points.groupby("interval_start")["angle_deg"].agg(np.ptp).max() < 60
    losses = solved.solves["losses_mw"].xs("ac", level="formulation")
    load = points.groupby("interval_start")["load_mw"].sum()
    share = losses / load
    assert share.between(0.015, 0.07).all()


def test_hour_after_the_clocks_went_back_is_solved_on_its_own(solved: Solved, scenario: Scenario):
    stamps = [f"2026-11-01T01:00:00{offset}" for offset in ("-06:00", "-07:00")]
    label = scenario.hour_ending(pd.to_datetime(stamps, utc=True))
    assert label.iloc[0] != label.iloc[1]
    assert np.isfinite(solved.lmp(SECOND_ONE, "ac", "Wrenhold 138"))
