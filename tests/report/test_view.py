"""The view model against the tables it is made from."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pandas as pd
import pytest

from lmpgap.errors import DataError
from lmpgap.report.text import number
from lmpgap.report.view import WeeklyView, build_view
from lmpgap.report.view.cube import COMPONENTS
from lmpgap.report.view.drivers import DUST, driver_blocks
from lmpgap.report.view.hours import REPEATED_MARK, make_hours
from lmpgap.report.view.layout import automatic_layout
from tests.report.conftest import view_of
from tests.report.synthetic import SyntheticRun, synthetic_run


def merged(run: SyntheticRun, base: str, against: str) -> pd.DataFrame:
    """Return both prices side by side, straight from the table."""
    prices = run.tables["prices"]
    sides = [
        prices[prices["formulation"] == name].set_index(["bus", "interval_start"])["lmp"].rename(name)
        for name in (base, against)
    ]
    return pd.concat(sides, axis=1)


# --- hours ------------------------------------------------------------------------------------------------------


def test_a_week_with_the_autumn_change_has_a_marked_repeated_hour(view: WeeklyView) -> None:
    assert view.hours.n == 169
    sunday = [label for label in view.hours.label if label.startswith("Sun 1 Nov")]
    assert len(sunday) == 25
    assert sunday[:4] == ["Sun 1 Nov HE01", "Sun 1 Nov HE02", f"Sun 1 Nov HE02 {REPEATED_MARK}", "Sun 1 Nov HE03"]
    assert len(set(view.hours.label)) == 169


def test_the_spring_day_has_23_hours_and_no_hour_ending_03() -> None:
    starts = pd.date_range("2026-03-08", "2026-03-09", freq="h", tz="America/Boise", inclusive="left")
    hours = make_hours(starts.tz_convert("UTC"), "America/Boise", 60)
    assert hours.n == 23
    assert "Sun 8 Mar HE03" not in hours.label
    assert not hours.repeated.any()


def test_quarter_hours_are_named_by_their_start() -> None:
    starts = pd.date_range("2026-03-01T18:00Z", periods=4, freq="15min")
    assert make_hours(starts, "UTC", 15).label[1] == "Sun 1 Mar HE19 from 18:15"


# --- figures against the tables ---------------------------------------------------------------------------------


def test_main_pair_matches_the_price_table(run: SyntheticRun, view: WeeklyView) -> None:
    sides = merged(run, "dc", "ac")
    difference = sides["ac"] - sides["dc"]
    assert (view.main.base, view.main.against) == ("dc", "ac")
    assert view.main.mean_absolute == pytest.approx(difference.abs().mean(), abs=1e-5)
    assert view.main.bias == pytest.approx(difference.mean(), abs=1e-5)
    worst = difference.abs().idxmax()
    assert view.nodes.bus[view.main.worst_bus] == worst[0]
    assert view.hours.starts[view.main.worst_hour] == worst[1]
    assert view.main.largest == pytest.approx(difference[worst], abs=1e-4)


def test_cube_holds_every_row_of_the_price_table(run: SyntheticRun, view: WeeklyView) -> None:
    prices = run.tables["prices"].sample(200, random_state=1)
    for row in prices.itertuples():
        bus = view.nodes.bus.index(row.bus)
        hour = view.hours.starts.get_loc(row.interval_start)
        assert view.cube.get(row.formulation)[bus, hour] == pytest.approx(row.lmp, abs=1e-4)
        assert view.cube.get(row.formulation, "loss")[bus, hour] == pytest.approx(row.loss_component, abs=1e-4)


def test_drivers_of_each_cell_add_up_to_its_difference(view: WeeklyView) -> None:
    for block in view.drivers:
        cells = np.repeat(np.arange(len(block.start) - 1), np.diff(block.start))
        total = np.bincount(cells, weights=block.amount, minlength=view.nodes.n * view.hours.n)
        expected = view.cube.difference(block.base, block.against).ravel()
        assert block.complete
        # what is left out is at most a few drivers below DUST each
        np.testing.assert_allclose(total, expected, atol=7 * DUST)


def test_where_and_when_are_sorted_and_lead_to_their_cell(view: WeeklyView) -> None:
    difference = view.cube.difference("dc", "ac")
    for table, axis in ((view.where, 0), (view.when, 1)):
        sizes = [float(row[2 if axis == 0 else 1]) for row in table.rows]
        assert sizes == sorted(sizes, reverse=True)
        for row, (bus, hour) in zip(table.rows, table.chooses, strict=True):
            assert number(float(difference[bus, hour]), signed=True) in row


def test_stakes_add_up_the_settlement_table(run: SyntheticRun, view: WeeklyView) -> None:
    sums = run.tables["settlement"].groupby("account")["amount"].sum()
    assert {total.account: pytest.approx(total.amount) for total in view.accounts} == sums.to_dict()
    sizes = [abs(total.amount) for total in view.accounts]
    assert sizes == sorted(sizes, reverse=True)


def test_hours_without_a_usable_verdict_are_listed_with_their_reason(run: SyntheticRun, view: WeeklyView) -> None:
    solves = run.tables["solves"]
    bad = solves[~solves["verdict"].isin(["certified", "exact", "close"])]
    assert sum(int(row[1]) for row in view.trust.left_out.rows) == len(bad) == 14
    assert any("cost gap" in row[5] for row in view.trust.left_out.rows)
    assert sum(int(cell) for row in view.trust.summary.rows for cell in row[1:]) == 4 * 169


def test_consecutive_hours_left_out_are_one_stretch(run: SyntheticRun) -> None:
    solves = run.tables["solves"].copy()
    own = (solves["formulation"] == "ac") & solves["interval_start"].isin(run.scenario.interval_starts[38:44])
    solves.loc[own, ["verdict", "reasons"]] = ["uncertified", "one; two; three; four"]
    gone = (solves["formulation"] == "dc") & (solves["interval_start"] == run.scenario.interval_starts[0])
    view = build_view({**run.tables, "solves": solves[~gone]}, run.scenario, {}, ["One sentence."])
    rows = [row for row in view.trust.left_out.rows if row[2] in ("ac", "dc")]
    assert rows[0][:4] == ("Mon 26 Oct HE01", "1", "dc", "not solved")
    assert rows[1] == (
        "Tue 27 Oct HE15 to Tue 27 Oct HE20", "6", "ac", "uncertified", "locally optimal", "one; two; three; and 1 more"
    )  # fmt: skip


def test_hub_means_are_weighted_means_of_the_buses(run: SyntheticRun, view: WeeklyView) -> None:
    hubs = run.scenario.tables["hubs"]
    ac = run.tables["prices"].query("formulation == 'ac'").groupby("bus", observed=True)["lmp"].mean()
    for place, name in enumerate(view.hubs.hubs.name):
        part = hubs[hubs["hub"] == name]
        expected = (part["weight"] * ac.loc[part["bus"]].to_numpy()).sum() / part["weight"].sum()
        assert view.hubs.means["ac"]["lmp"][place] == pytest.approx(expected, abs=1e-4)


def test_tracking_ranks_the_price_sets_by_their_error(view: WeeklyView) -> None:
    errors = [float(row[1]) for row in view.tracking.rows]
    assert errors == sorted(errors)
    assert {row[0] for row in view.tracking.rows} == {"dc", "dc-loss", "soc", "soc, usable hours", "posted"}
    assert {row[0]: row[-1] for row in view.tracking.rows}["soc, usable hours"] == "156"


def test_constraint_matrix_holds_the_shadow_prices(run: SyntheticRun, view: WeeklyView) -> None:
    table = run.tables["constraints"]
    for row in table.sample(60, random_state=2).itertuples():
        place = view.constraints.name.index(row.constraint)
        hour = view.hours.starts.get_loc(row.interval_start)
        assert view.constraints.shadow[row.formulation][place, hour] == pytest.approx(row.shadow_price, rel=1e-5)
    assert sum(int((matrix > 0).sum()) for matrix in view.constraints.shadow.values()) == len(table)


def test_stale_delivery_factors_lie_off_the_diagonal(view: WeeklyView) -> None:
    factors = view.factors
    assert factors is not None
    gap = np.abs(factors.posted - factors.recomputed)
    planted = np.isin(factors.bus, [0, 1])
    assert np.median(gap[planted]) > 5 * np.median(gap[~planted])
    # the findings name the interval from which the factor stands still
    assert set(factors.bus[factors.stale]) == {0, 1}
    assert set(factors.hour[factors.stale]) == set(range(30, 169))


# --- absent and broken inputs -------------------------------------------------------------------------------------


def test_everything_but_prices_may_be_missing(run: SyntheticRun) -> None:
    view = build_view({"prices": run.tables["prices"]}, run.scenario, {}, ["One sentence."])
    assert view.settlement.rows == view.audit.rows == view.findings.rows == view.constraints.name == ()
    assert view.sweep is None
    assert view.drivers == ()


def test_one_formulation_alone_is_reported(run: SyntheticRun) -> None:
    prices = run.tables["prices"].query("formulation == 'dc'")
    scenario = replace(run.scenario, tables={**run.scenario.tables, "posted": pd.DataFrame()})
    view = build_view({"prices": prices}, scenario, {}, ["One sentence."])
    assert view.cube.sets == ("dc",)
    assert view.ladder == ()


def test_missing_columns_are_told_all_at_once(run: SyntheticRun) -> None:
    tables = {"prices": run.tables["prices"].drop(columns=["lmp", "bus"]), "solves": run.tables["solves"][["status"]]}
    with pytest.raises(DataError) as caught:
        build_view(tables, run.scenario, {}, ["One sentence."])
    text = str(caught.value)
    assert "prices, column lmp" in text
    assert "prices, column bus" in text
    assert "solves, column verdict" in text


@pytest.mark.parametrize("sentences", [[], ["  "]])
def test_a_report_needs_a_summary(run: SyntheticRun, sentences: list[str]) -> None:
    with pytest.raises(DataError, match="at least one sentence"):
        build_view(run.tables, run.scenario, {}, sentences)


def test_no_prices_is_an_error_in_words(run: SyntheticRun) -> None:
    with pytest.raises(DataError, match="solve at least one hour"):
        build_view({}, run.scenario, {}, ["One sentence."])


def test_hours_that_were_not_priced_stay_on_the_axis(run: SyntheticRun) -> None:
    late = run.tables["prices"]["interval_start"] > run.scenario.interval_starts[20]
    view = build_view({"prices": run.tables["prices"][late]}, run.scenario, {}, ["One sentence."])
    assert view.hours.n == 169
    assert np.isnan(view.cube.get("ac")[:, :21]).all()
    assert np.isfinite(view.cube.get("ac")[:, 21:]).all()


# --- parts --------------------------------------------------------------------------------------------------------


def test_the_latest_posted_version_wins(run: SyntheticRun) -> None:
    posted = run.scenario.tables["posted"]
    newer = posted.assign(lmp=posted["lmp"] + 5.0, energy_component=posted["energy_component"] + 5.0, version=2.0)
    scenario = replace(run.scenario, tables={**run.scenario.tables, "posted": pd.concat([newer, posted])})
    old = build_view(run.tables, run.scenario, {}, ["One sentence."]).cube.get("posted")
    np.testing.assert_allclose(build_view(run.tables, scenario, {}, ["S."]).cube.get("posted"), old + 5.0, atol=1e-4)


def test_posted_components_are_brought_to_the_reference_of_the_run(run: SyntheticRun) -> None:
    """Moved to another reference, the AC prices must come back as they were (identity of re-referencing)."""
    prices = run.tables["prices"].query("formulation == 'ac'")
    at = prices.set_index(["interval_start", "bus"])
    first = at.xs(run.scenario.tables["buses"]["bus"].iloc[3], level="bus").reindex(prices["interval_start"])
    energy = prices["energy_component"].to_numpy()
    factor = (energy + prices["loss_component"].to_numpy()) / (energy + first["loss_component"].to_numpy())
    posted = pd.DataFrame(
        {
            "interval_start": prices["interval_start"],
            "node": prices["bus"].astype(str),
            "lmp": prices["lmp"],
            "energy_component": first["lmp"].to_numpy(),
            "loss_component": first["lmp"].to_numpy() * (factor - 1.0),
        }
    )
    posted["congestion_component"] = posted["lmp"] - posted["energy_component"] - posted["loss_component"]
    scenario = replace(run.scenario, tables={**run.scenario.tables, "posted": posted})
    cube = build_view(run.tables, scenario, {}, ["One sentence."]).cube
    # no reactive part is posted, so the energy component differs by its weighted mean; the factors do not
    ours = (cube.get("ac", "energy") + cube.get("ac", "loss")) / cube.get("ac", "energy")
    theirs = (cube.get("posted", "energy") + cube.get("posted", "loss")) / cube.get("posted", "energy")
    np.testing.assert_allclose(theirs, ours, atol=2e-5)


def test_a_large_region_keeps_the_drivers_of_its_largest_differences(run: SyntheticRun, view: WeeklyView) -> None:
    blocks = driver_blocks(run.tables["drivers"], view.nodes, view.hours, most_rows=2000)
    for (base, against), block in blocks.items():
        assert not block.complete
        assert len(block.amount) <= 500
        size = np.abs(view.cube.difference(base, against)).ravel()
        kept = np.diff(block.start) > 0
        assert size[kept].min() >= np.partition(size, -block.kept_cells - 5)[-block.kept_cells - 5] - 7 * DUST


def test_automatic_layout_is_readable_and_repeatable() -> None:
    n = 400
    grid = np.arange(n).reshape(20, 20)
    ends = np.concatenate(
        [np.c_[grid[:, :-1].ravel(), grid[:, 1:].ravel()], np.c_[grid[:-1].ravel(), grid[1:].ravel()]]
    )
    place = automatic_layout(n + 3, ends[:, 0], ends[:, 1])
    again = automatic_layout(n + 3, ends[:, 0], ends[:, 1])
    np.testing.assert_array_equal(place, again)
    assert np.isfinite(place).all()
    assert place.min() >= -1e-9
    assert place.max() <= 1 + 1e-9
    length = np.linalg.norm(place[ends[:, 0]] - place[ends[:, 1]], axis=1)
    apart = np.linalg.norm(place[:, None] - place[None, :], axis=2)
    np.fill_diagonal(apart, np.inf)
    # neighbours lie near each other and nobody lies on top of another
    assert np.median(length) < 0.3 * np.median(apart)
    assert apart.min() > 1e-3


def test_buses_without_coordinates_get_an_automatic_layout() -> None:
    view = view_of(synthetic_run(coordinates=False))
    assert view.nodes.automatic
    assert np.unique(np.column_stack([view.nodes.x, view.nodes.y]), axis=0).shape == (12, 2)


def test_components_add_up_in_the_cube(view: WeeklyView) -> None:
    for name in view.cube.formulations:
        total = sum(view.cube.get(name, part) for part in COMPONENTS[1:])
        np.testing.assert_allclose(total, view.cube.get(name), atol=1e-4)
