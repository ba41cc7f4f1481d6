"""Each fault is where the key says, nowhere else, and of the size that the key says.

Recomputed here from the written tables with plain arithmetic; finding the faults without the key is tested where
posted prices are checked.
"""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from tests.demo.conftest import ClearedWeek

KEY = ["interval_start", "node", "version"]
PARTS = ["lmp", "energy_component", "congestion_component", "loss_component"]


def posted(folder: Path) -> pd.DataFrame:
    return pd.read_parquet(folder / "posted.parquet").set_index(KEY)


def key(week: ClearedWeek) -> pd.DataFrame:
    return pd.read_csv(week.out / "larkspur_truth" / "planted.csv")


def changed(one: pd.DataFrame, other: pd.DataFrame, size: float = 1e-5) -> pd.DataFrame:
    """Return the rows of ``one`` in which any price differs."""
    assert one.index.equals(other.index)
    return one[(np.abs(one[PARTS] - other[PARTS]) > size).any(axis=1)]


@pytest.fixture(scope="module")
def clean(cleared_week: ClearedWeek) -> pd.DataFrame:
    folder = cleared_week.publish("none")
    assert key(cleared_week).empty
    assert pd.read_csv(cleared_week.out / "larkspur_truth" / "stale_factor_dollars.csv").empty
    return posted(folder)


def identity_error(table: pd.DataFrame) -> pd.Series:
    """Return lmp - (energy - congestion + loss): the operator's own convention."""
    return table["lmp"] - (table["energy_component"] - table["congestion_component"] + table["loss_component"])


def test_clean_week_adds_up_in_the_declared_convention(clean: pd.DataFrame):
    assert identity_error(clean).abs().max() < 2e-6
    assert clean["congestion_component"].abs().max() > 10
    assert not clean.index.duplicated().any()
    assert set(clean.index.get_level_values("version")) == {1}


def test_clean_week_is_on_the_declared_reference(cleared_week: ClearedWeek, clean: pd.DataFrame):
    """Load-weighted congestion and losses are zero, as [reference] kind = "load" says."""
    scenario = cleared_week.scenario
    for column in ("congestion_component", "loss_component"):
        wide = clean[column].unstack("node").groupby("interval_start").first()[list(scenario.network.buses)]
        wide.index = pd.to_datetime(wide.index, utc=True)
        wide = wide.sort_index()
        weights = np.array([scenario.reference_weights(hour) for hour in range(len(wide))])
        assert np.abs((wide.to_numpy() * weights).sum(axis=1)).max() < 1e-5


def test_hub_prices_are_weighted_means(clean: pd.DataFrame, cleared_week: ClearedWeek):
    wide = clean["lmp"].unstack("node")
    for hub, members in cleared_week.scenario.tables["hubs"].groupby("hub"):
        mean = sum(wide[row.bus] * row.weight for row in members.itertuples())
        assert np.abs(mean - wide[hub]).max() < 2e-6


def test_rounding_is_half_a_cent(cleared_week: ClearedWeek, clean: pd.DataFrame):
    rounded = posted(cleared_week.publish("rounding"))
    assert np.abs(rounded[PARTS] - clean[PARTS]).max().max() <= 0.005 + 1e-9
    assert np.abs(rounded[PARTS] * 100 - (rounded[PARTS] * 100).round()).max().max() < 1e-6
    # Four figures, each rounded by up to half a cent
    assert 0.005 < identity_error(rounded).abs().max() <= 0.02 + 1e-9


def test_stale_factors_touch_only_the_listed_nodes_and_hours(cleared_week: ClearedWeek, clean: pd.DataFrame):
    folder = cleared_week.publish("stale-factors")
    table, listed = posted(folder), key(cleared_week)
    assert set(listed["fault"]) == {"stale-factors"}
    rows = changed(table, clean)
    assert set(rows.index.get_level_values("node")) == set(listed["where"])
    hours = rows.index.get_level_values("interval_start")
    assert hours.min() >= listed["first_interval"].min()
    assert hours.max() <= listed["last_interval"].max()
    assert len(rows) > 0.95 * 48 * len(listed)
    # The published price was computed with the wrong factor: the identity holds, energy and congestion are right.
    assert identity_error(table).abs().max() < 2e-6
    same = ["energy_component", "congestion_component"]
    pd.testing.assert_frame_equal(table[same], clean[same])
    # What the operator says it used stands still while the other factors move.
    factors = pd.read_parquet(folder / "delivery_factors.parquet").pivot(
        index="interval_start", columns="bus", values="delivery_factor"
    )
    during = factors[(factors.index >= hours.min()) & (factors.index <= hours.max())]
    assert (during.nunique()[list(listed["where"])] == 1).all()
    assert during.nunique().drop(list(listed["where"])).min() > 40


def test_key_has_the_dollars_of_the_stale_factors(cleared_week: ClearedWeek, clean: pd.DataFrame):
    """From cents, as an analyst would see them, within one percent per account."""
    folder = cleared_week.publish("stale-factors,rounding")
    error = (posted(folder)["loss_component"] - clean["loss_component"]).droplevel("version")
    error[error.abs() <= 0.005 + 1e-9] = 0.0
    positions = pd.read_parquet(folder / "positions.parquet")
    index = pd.MultiIndex.from_frame(positions[["interval_start", "node"]])
    positions["amount"] = positions["mw"] * error.reindex(index).to_numpy()
    recomputed = positions.groupby("account")["amount"].sum()
    truth = pd.read_csv(cleared_week.out / "larkspur_truth" / "stale_factor_dollars.csv")
    planted = truth.groupby("account")["amount"].sum()
    assert len(planted) == 3
    assert planted.abs().min() > 500
    assert recomputed[planted.index].to_numpy() == pytest.approx(planted.to_numpy(), rel=0.01)


def test_reversed_interface_turns_one_contribution_around(cleared_week: ClearedWeek, clean: pd.DataFrame):
    folder = cleared_week.publish("reversed-interface")
    table, listed = posted(folder), key(cleared_week)
    rows = changed(table, clean)
    hours = set(rows.index.get_level_values("interval_start"))
    assert min(hours) == listed["first_interval"][0]
    assert max(hours) == listed["last_interval"][0]
    assert identity_error(table).abs().max() < 2e-6
    # Nothing else bound in those hours, so the whole congestion changed its sign.
    assert rows["congestion_component"].to_numpy() == pytest.approx(
        -clean.loc[rows.index, "congestion_component"].to_numpy(), abs=2e-6
    )
    assert rows["congestion_component"].abs().max() > 5
    constraints = pd.read_csv(folder / "posted_constraints.csv")
    listed_rows = constraints[constraints["interval_start"].isin(hours)]
    assert set(listed_rows["constraint"]) == {"Mesa export"}
    assert set(listed_rows["direction"]) == {"forward"}


def test_renamed_node_keeps_its_prices_under_another_name(cleared_week: ClearedWeek, clean: pd.DataFrame):
    table = posted(cleared_week.publish("renamed-node"))
    old, new = "Juniper 138", "Juniper East 138"
    names = table.index.get_level_values("node")
    first = key(cleared_week)["first_interval"][0]
    renamed = table[names == new]
    assert renamed.index.get_level_values("interval_start").min() == first
    assert len(renamed) + (names == old).sum() == 169
    restored = table.rename(index={new: old}, level="node")
    assert changed(restored, clean).empty


def test_revised_day_has_two_versions_and_the_second_is_right(cleared_week: ClearedWeek, clean: pd.DataFrame):
    table = posted(cleared_week.publish("revised-day"))
    listed = key(cleared_week)
    versions = table.index.get_level_values("version")
    first = table[versions == 1]
    second = table[versions == 2].droplevel("version")
    hours = second.index.get_level_values("interval_start").unique()
    assert len(hours) == 24
    assert (hours.min(), hours.max()) == (listed["first_interval"][0], listed["last_interval"][0])
    pd.testing.assert_frame_equal(second[PARTS], clean.droplevel("version").loc[second.index, PARTS])
    rows = changed(first, clean, 1.0)
    assert set(rows.index.get_level_values("interval_start")) <= set(hours)
    assert len(rows) > 100
    assert identity_error(table).abs().max() < 2e-6
    when = pd.to_datetime(table["published_at"].to_numpy(), utc=True)
    assert when[versions == 2].min() > when[versions == 1].max()


def test_wrong_sign_breaks_the_identity_by_twice_the_congestion(cleared_week: ClearedWeek, clean: pd.DataFrame):
    table = posted(cleared_week.publish("wrong-sign"))
    listed = key(cleared_week)
    rows = changed(table, clean)
    hours = rows.index.get_level_values("interval_start")
    assert (hours.min(), hours.max()) == (listed["first_interval"][0], listed["last_interval"][0])
    pd.testing.assert_series_equal(rows["lmp"], clean.loc[rows.index, "lmp"])
    error = identity_error(rows).to_numpy()
    assert error == pytest.approx(2.0 * rows["congestion_component"].to_numpy(), abs=3e-6)
    assert np.abs(error).max() > 10
