"""Posted prices in order: versions, nodes, gaps, and components that do not add up."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest

from lmpgap.divergence.check_posted import check_posted_prices
from lmpgap.divergence.findings import FINDING_COLUMNS, KINDS, findings_table
from lmpgap.divergence.labels import IntervalLabels
from lmpgap.divergence.operating_points import operating_points
from lmpgap.divergence.posted import order_posted
from lmpgap.divergence.posted_checks import (
    identity_findings,
    node_findings,
    repeated_findings,
    revision_findings,
)
from lmpgap.divergence.price_tables import price_set
from lmpgap.scenario.settings import DcConvention
from tests.support.networks import load_network

HOURS = pd.date_range("2026-03-02T07:00:00Z", periods=6, freq="h").as_unit("us")
LABELS = IntervalLabels(time_zone="America/Boise")


def posted_week(nodes: tuple[str, ...] = ("A", "B", "C"), seed: int = 0) -> pd.DataFrame:
    """Clean posted prices in cents."""
    rng = np.random.default_rng(seed)
    n = len(HOURS) * len(nodes)
    energy = np.repeat(np.round(rng.uniform(20.0, 40.0, len(HOURS)), 2), len(nodes))
    congestion, loss = rng.normal(0.0, 8.0, n), rng.normal(0.0, 1.0, n)
    return pd.DataFrame(
        {
            "interval_start": np.repeat(HOURS, len(nodes)),
            "node": pd.Series(list(nodes) * len(HOURS), dtype="str"),
            "lmp": np.round(energy + congestion + loss, 2),
            "energy_component": energy,
            "congestion_component": np.round(congestion, 2),
            "loss_component": np.round(loss, 2),
            "version": 1.0,
            "published_at": pd.Timestamp("2026-03-03T14:00:00Z"),
        }
    )


def order(rows: pd.DataFrame, known=("A", "B", "C")):
    return order_posted(rows, known, HOURS)


def all_findings(rows: pd.DataFrame, known=("A", "B", "C")) -> pd.DataFrame:
    posted = order(rows, known)
    return findings_table(
        [
            *revision_findings(posted, HOURS, LABELS),
            *repeated_findings(posted, HOURS, LABELS),
            *node_findings(posted, known, HOURS, LABELS),
            *identity_findings(posted, HOURS, LABELS)[0],
        ]
    )


def test_clean_prices_in_cents_have_no_finding():
    for seed in range(20):
        found = all_findings(posted_week(seed=seed))
        assert found.empty
        assert list(found.columns) == FINDING_COLUMNS


def test_the_latest_version_wins_and_the_others_are_kept():
    rows = posted_week()
    second = rows[rows["interval_start"].isin(HOURS[2:4])].assign(
        lmp=lambda t: t["lmp"] + 5.0,
        congestion_component=lambda t: t["congestion_component"] + 5.0,
        version=2.0,
        published_at=pd.Timestamp("2026-03-08T23:00:00Z"),
    )
    # A higher number that was published earlier does not win.
    early = second.assign(lmp=0.0, version=3.0, published_at=pd.Timestamp("2026-03-02T00:00:00Z"))
    posted = order(pd.concat([second, early, rows], ignore_index=True))
    assert len(posted.latest) == len(rows)
    assert len(posted.superseded) == 12
    assert posted.latest.set_index("version")["lmp"].loc[2.0].tolist() == second["lmp"].tolist()
    changes = posted.revisions.query("version == 2")
    assert changes["replaces"].eq(1.0).all()
    assert changes["lmp_change"].to_numpy() == pytest.approx(5.0)
    found = all_findings(pd.concat([rows, second]))
    assert found["kind"].tolist() == ["revised"]
    assert found["amount"].tolist() == pytest.approx([5.0])
    assert "Mon HE03 to HE04: version 2, published 8 Mar 17:00, replaces version 1 at 3 nodes" in found["sentence"][0]


def test_an_equal_reissue_is_no_finding():
    rows = posted_week()
    assert all_findings(pd.concat([rows, rows.assign(version=2.0)])).empty


def test_repeated_rows_are_told_and_the_last_counts():
    rows = posted_week()
    copy = rows[(rows["interval_start"] == HOURS[1]) & (rows["node"] == "B")].assign(
        lmp=lambda t: t["lmp"] + 1.0, loss_component=lambda t: t["loss_component"] + 1.0
    )
    both = pd.concat([rows, copy], ignore_index=True)
    found = all_findings(both)
    assert found["kind"].tolist() == ["repeated-interval"]
    assert found["node"].tolist() == ["B"]
    assert "differ by up to 1.00 $/MWh" in found["sentence"][0]
    latest = order(both).latest.set_index(["interval_start", "node"])
    assert latest.loc[(HOURS[1], "B"), "lmp"] == copy["lmp"].iloc[0]


def test_a_renamed_node_is_kept_listed_and_recognised():
    rows = posted_week()
    rows.loc[(rows["interval_start"] >= HOURS[4]) & (rows["node"] == "C"), "node"] = "C East"
    found = all_findings(rows)
    assert found["kind"].tolist() == ["unknown-node", "missing-interval"]
    assert found["node"].tolist() == ["C East", "C"]
    assert "C is missing in just these intervals, so it was probably renamed" in found["sentence"][0]
    assert "Mon HE05 to HE06: no posted price for C (2 intervals)" in found["sentence"][1]
    posted = order(rows)
    assert posted.unknown == ("C East",)
    assert len(posted.latest) == len(rows)
    assert "C East" not in set(posted.tables()["prices"]["bus"])


def test_an_hour_that_is_missing_everywhere_is_one_finding():
    rows = posted_week()
    found = all_findings(rows[rows["interval_start"] != HOURS[2]])
    assert found["kind"].tolist() == ["missing-interval"]
    assert found["amount"].tolist() == [1.0]
    assert "Mon HE03: no posted price for A, B and C" in found["sentence"][0]


def test_the_published_new_york_row_shows_congestion_with_the_other_sign():
    """A posted real-time row of 2022-08-08: 125.15 = 90.63 - (-26.64) + 7.88 (New York's own sign convention)."""
    row = pd.DataFrame(
        {
            "interval_start": HOURS[:1],
            "node": ["A"],
            "lmp": [125.15],
            "energy_component": [90.63],
            "congestion_component": [-26.64],
            "loss_component": [7.88],
        }
    )
    posted = order_posted(row, ["A"], HOURS[:1])
    found, corrected = identity_findings(posted, HOURS[:1], LABELS)
    assert [finding.kind for finding in found] == ["sign"]
    assert "the congestion component is posted with the other sign" in found[0].sentence
    assert found[0].amount == pytest.approx(26.64)
    parts = corrected[["energy_component", "congestion_component", "loss_component"]]
    assert parts.sum(axis=1).iloc[0] == pytest.approx(125.15)


def test_a_sign_that_changes_for_some_hours_is_found_there_alone():
    rows = posted_week()
    wrong = rows["interval_start"].isin(HOURS[1:3])
    rows.loc[wrong, "congestion_component"] *= -1.0
    found = all_findings(rows)
    assert found["kind"].tolist() == ["sign"]
    assert found["interval_start"].tolist() == [HOURS[1]]
    assert found["sentence"][0].startswith("Mon HE02 to HE03: ")


def test_components_that_do_not_add_up_are_told_with_the_largest_rest():
    rows = posted_week()
    rows.loc[(rows["interval_start"] == HOURS[3]) & (rows["node"] == "B"), "lmp"] += 0.5
    found = all_findings(rows)
    assert found["kind"].tolist() == ["identity"]
    assert found["node"].tolist() == ["B"]
    assert found["amount"].tolist() == pytest.approx([0.5], abs=0.021)


def test_an_energy_component_of_its_own_is_told():
    rows = posted_week()
    odd = (rows["interval_start"] == HOURS[0]) & (rows["node"] == "C")
    rows.loc[odd, "energy_component"] += 1.0
    rows.loc[odd, "loss_component"] -= 1.0
    found = all_findings(rows)
    assert found["kind"].tolist() == ["identity"]
    assert "not on one reference" in found["sentence"][0]


def test_a_missing_component_is_the_rest_of_the_price():
    rows = posted_week().drop(columns=["energy_component", "version", "published_at"])
    posted = order(rows)
    assert posted.completed == ("energy_component",)
    parts = posted.latest[["energy_component", "congestion_component", "loss_component"]].sum(axis=1)
    np.testing.assert_allclose(parts, posted.latest["lmp"])
    assert all_findings(rows).empty
    bare = order(rows.drop(columns=["loss_component"]))
    assert bare.completed == ()
    assert price_set(bare.tables(), "posted").energy.shape == (6, 3)
    assert np.isnan(price_set(bare.tables(), "posted").energy).all()


def test_kinds_are_those_of_the_contract():
    assert set(KINDS) == {
        "identity", "sign", "stale-factors", "unexplained-congestion", "reversed-constraint",
        "unknown-node", "missing-interval", "repeated-interval", "revised",
    }  # fmt: skip


def test_nothing_posted_and_no_operating_point_are_no_error():
    network, inputs = load_network("case5")
    nothing = posted_week().iloc[:0]
    check = check_posted_prices(nothing, network, HOURS, LABELS, {})
    assert check.findings.empty
    assert check.prices is None
    # Without an operating point the checks that need none are made.
    rows = posted_week(nodes=network.buses)
    rows.loc[0, "lmp"] += 2.0
    check = check_posted_prices(rows, network, HOURS, LABELS, {})
    assert check.findings["kind"].tolist() == ["identity"]
    assert check.recovered.empty
    empty = pd.DataFrame(columns=["interval_start", "formulation", "bus", "v_pu", "angle_deg", "load_mw"])
    assert operating_points(empty, network, lambda _: inputs, HOURS, DcConvention()) == {}


def test_posted_prices_with_gaps_and_foreign_hours_are_checked_where_they_are():
    network, inputs = load_network("case5")
    flat = pd.DataFrame(
        [(hour, "dc", bus, 1.0, 0.0) for hour in HOURS[:2] for bus in network.buses],
        columns=["interval_start", "formulation", "bus", "v_pu", "angle_deg"],
    )
    points = operating_points(flat, network, lambda _: inputs, HOURS, DcConvention())
    rows = posted_week(nodes=network.buses).assign(congestion_component=0.0, loss_component=0.0)
    rows["lmp"] = rows["energy_component"]
    rows = rows[rows["interval_start"] != HOURS[3]]
    elsewhere = rows.head(5).assign(interval_start=pd.Timestamp("2027-01-01T00:00:00Z"))
    check = check_posted_prices(pd.concat([rows, elsewhere]), network, HOURS, LABELS, points)
    assert check.findings["kind"].tolist() == ["missing-interval"]
    assert np.isnan(check.prices.lmp[3]).all()
