"""The demo week: every planted fault is found, and nothing is found where nothing was planted."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from lmpgap.divergence.check_posted import PostedCheck, check_posted, check_posted_prices
from lmpgap.divergence.labels import IntervalLabels
from lmpgap.divergence.operating_points import operating_points

TRUTH = Path(__file__).parents[2] / "scenarios" / "larkspur_truth"
PARTS = ["energy_component", "congestion_component", "loss_component"]


def clean_posted(scenario, run) -> pd.DataFrame:
    """The week as an operator without fault would publish it: in cents, hubs included."""
    prices = run.table("prices").rename(columns={"bus": "node"})[["interval_start", "node", "lmp", *PARTS]]
    hubs = scenario.tables["hubs"]
    joined = hubs.merge(prices, left_on="bus", right_on="node")
    joined[["lmp", *PARTS]] = joined[["lmp", *PARTS]].mul(joined["weight"], axis=0)
    of_hubs = joined.groupby(["hub", "interval_start"])[["lmp", *PARTS]].sum().reset_index()
    rows = pd.concat([prices, of_hubs.rename(columns={"hub": "node"})], ignore_index=True)
    rows[["lmp", *PARTS]] = rows[["lmp", *PARTS]].round(2)
    return rows.astype({"node": "str"})


def check(scenario, run, posted: pd.DataFrame) -> PostedCheck:
    intervals, settings = scenario.interval_starts, scenario.settings
    points = operating_points(run.table("operating_point"), scenario.network, scenario.inputs, intervals, settings.dc)
    labels = IntervalLabels.of(intervals, settings.time_zone, settings.interval_minutes)
    return check_posted_prices(
        posted, scenario.network, intervals, labels, points, hubs=scenario.tables["hubs"], factors_from="dc-loss"
    )


@pytest.fixture(scope="module")
def planted(demo_week) -> tuple[pd.DataFrame, pd.DataFrame]:
    scenario, run = demo_week
    truth = pd.read_csv(TRUTH / "planted.csv")
    for column in ("first_interval", "last_interval"):
        truth[column] = pd.to_datetime(truth[column], utc=True)
    return check_posted(scenario, {"operating_point": run.table("operating_point")}).findings, truth


def test_every_stale_node_is_found_with_its_hours_and_source(planted):
    findings, truth = planted
    wanted = truth[truth["fault"] == "stale-factors"]
    found = findings[findings["kind"] == "stale-factors"]
    assert set(found["node"]) == set(wanted["where"])
    assert (found["interval_start"] == wanted["first_interval"].iloc[0]).all()
    assert found["sentence"].str.contains("for 48 intervals; it is that of Tue HE14").all()


def test_the_reversed_interface_is_found(planted):
    findings, truth = planted
    wanted = truth[truth["fault"] == "reversed-interface"].iloc[0]
    (found,) = findings[findings["kind"] == "reversed-constraint"].to_dict("records")
    assert found["constraint"] == f"interface {wanted['where']} reverse"
    assert found["interval_start"] == wanted["first_interval"]
    assert "Tue HE11 to HE16" in found["sentence"]


def test_the_wrong_sign_is_found(planted):
    findings, truth = planted
    wanted = truth[truth["fault"] == "wrong-sign"].iloc[0]
    (found,) = findings[findings["kind"] == "sign"].to_dict("records")
    assert found["interval_start"] == wanted["first_interval"]
    assert "Sun HE11 to HE14: the congestion component" in found["sentence"]


def test_the_renamed_node_and_the_revised_day_are_found(planted):
    findings, truth = planted
    renamed = truth[truth["fault"] == "renamed-node"].iloc[0]
    (unknown,) = findings[findings["kind"] == "unknown-node"].to_dict("records")
    assert unknown["interval_start"] == renamed["first_interval"]
    assert unknown["node"] in renamed["what"]
    assert f"{renamed['where']} is missing in just these intervals" in unknown["sentence"]
    (missing,) = findings[findings["kind"] == "missing-interval"].to_dict("records")
    assert missing["node"] == renamed["where"]
    revised = truth[truth["fault"] == "revised-day"].iloc[0]
    rows = findings[findings["kind"] == "revised"]
    assert rows["interval_start"].between(revised["first_interval"], revised["last_interval"]).all()
    assert len(rows) >= 1


def test_nothing_else_is_found(planted):
    findings, _ = planted
    assert findings["kind"].value_counts().drop("revised").to_dict() == {
        "stale-factors": 7,
        "reversed-constraint": 1,
        "sign": 1,
        "unknown-node": 1,
        "missing-interval": 1,
    }


def test_nothing_is_found_in_the_same_week_without_faults(demo_week):
    scenario, run = demo_week
    found = check(scenario, run, clean_posted(scenario, run))
    assert found.findings.empty
    # Every limit behind more than a few cents is named.
    bound = run.table("constraints").query("shadow_price > 0.5")[["interval_start", "constraint"]]
    named = found.recovered[["interval_start", "constraint"]]
    assert len(bound.merge(named)) >= 0.97 * len(bound)


def test_congestion_wrong_at_one_node_is_told_there(demo_week):
    scenario, run = demo_week
    posted = clean_posted(scenario, run)
    hours = scenario.interval_starts[60:63]
    wrong = (posted["node"] == "Thornlea 345") & posted["interval_start"].isin(hours)
    assert wrong.sum() == 3
    posted.loc[wrong, ["lmp", "congestion_component"]] += 1.3
    found = check(scenario, run, posted).findings
    assert found["kind"].tolist() == ["unexplained-congestion"]
    assert found["node"].tolist() == ["Thornlea 345"]
    assert found["interval_start"].tolist() == [hours[0]]
    assert found["amount"].to_numpy() == pytest.approx(1.3, abs=0.1)


def test_losses_repeated_from_another_day_are_told(demo_week):
    scenario, run = demo_week
    posted = clean_posted(scenario, run).set_index(["node", "interval_start"]).sort_index()
    node, day = "Gannet 138", scenario.interval_starts[72:96]
    before = day - pd.Timedelta(days=1)
    rows = posted.loc[[node]]
    factor = 1.0 + rows["loss_component"] / rows["energy_component"]
    old = factor.loc[[(node, at) for at in before]].to_numpy()
    energy = posted.loc[[(node, at) for at in day], "energy_component"].to_numpy()
    loss = np.round(energy * (old - 1.0), 2)
    index = [(node, at) for at in day]
    posted.loc[index, "lmp"] += loss - posted.loc[index, "loss_component"].to_numpy()
    posted.loc[index, "loss_component"] = loss
    found = check(scenario, run, posted.reset_index()).findings
    assert found["kind"].tolist() == ["stale-factors"]
    assert found["node"].tolist() == [node]
    assert "repeat another day" in found["sentence"][0]
