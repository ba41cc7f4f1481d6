"""The loss-component error: planted truth recovered, intervals that hold the truth, and what must not matter."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from lmpgap.errors import DataError
from lmpgap.settlement.common_reference import MEAN_REFERENCE, PARTIAL_REFERENCE
from lmpgap.settlement.options import SettlementOptions
from lmpgap.settlement.posted_reference import weighted_median
from lmpgap.settlement.result import Settlement
from lmpgap.settlement.settle import has_posted, settle
from tests.settlement.world import (
    FakeRun,
    World,
    hourly,
    make_world,
    position_frame,
    posted_frame,
    solve_frame,
    split_frame,
)

BUSES = tuple(f"N{i}" for i in range(12))
HOURS = 24
WEEK = hourly("2026-03-02", HOURS)


def known_world(seed: int) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Return energy price (hours,), delivery factors and congestion (hours, buses) on the equal-weight reference."""
    rng = np.random.default_rng(seed)
    shape = (len(WEEK), len(BUSES))
    energy = rng.uniform(18.0, 70.0, len(WEEK))
    factor = 1.0 + rng.normal(0.0, 0.03, shape)
    factor /= factor.mean(axis=1, keepdims=True)
    congestion = rng.normal(0.0, 4.0, shape)
    congestion -= factor * congestion.mean(axis=1, keepdims=True)
    return energy, factor, congestion


def on_weights(
    energy: np.ndarray, factor: np.ndarray, congestion: np.ndarray, weights: np.ndarray
) -> dict[str, np.ndarray]:
    """Return the same prices as published components on other weights, straight from the definition."""
    moved = factor / (factor @ weights)[:, None]
    lmp = energy[:, None] * factor + congestion
    new_energy = (lmp @ weights)[:, None]
    return {
        "energy": new_energy,
        "loss": new_energy * (moved - 1.0),
        "congestion": congestion - moved * (congestion @ weights)[:, None],
    }


def positions_of(rng: np.random.Generator) -> pd.DataFrame:
    held = [("load", b, float(rng.uniform(10, 200))) for b in BUSES[:6]]
    held += [("plant", b, -float(rng.uniform(10, 200))) for b in BUSES[4:8]]
    return position_frame([(a, s, b, mw) for s in WEEK for a, b, mw in held])


def ac_run(energy: np.ndarray, factor: np.ndarray, congestion: np.ndarray, width: float = 0.0) -> FakeRun:
    prices = split_frame(WEEK, BUSES, "ac", energy=energy, factor=factor, congestion=congestion, width=width)
    return FakeRun(prices, solve_frame(WEEK, "ac"))


def amounts(settlement: Settlement, component: str) -> pd.DataFrame:
    own = settlement.accounts[settlement.accounts["component"] == component]
    return own.set_index("account")


@pytest.mark.parametrize("seed", range(5))
def test_planted_loss_error_is_recovered_within_one_percent(seed: int) -> None:
    """Factors of another hour at three of twelve nodes, cents rounding; truth is the planted error in dollars."""
    rng = np.random.default_rng(100 + seed)
    energy, factor, congestion = known_world(seed)
    frozen = factor.copy()
    frozen[:, 2:5] = factor[7, 2:5] + 0.02
    positions = positions_of(rng)
    posted = posted_frame(
        WEEK,
        BUSES,
        {"energy": energy[:, None], "loss": energy[:, None] * (frozen - 1.0), "congestion": congestion},
    )
    settlement = settle(ac_run(energy, factor, congestion), make_world(BUSES, WEEK, positions=positions, posted=posted))
    assert settlement.options.posted_reference == "scenario"
    error = pd.DataFrame(energy[:, None] * (frozen - factor), index=WEEK, columns=list(BUSES)).stack()
    planted = (
        positions["mw"] * error.reindex(pd.MultiIndex.from_frame(positions[["interval_start", "node"]])).to_numpy()
    )
    truth = planted.groupby(positions["account"]).sum()
    for component in ("delivery-factor", "loss"):
        found = amounts(settlement, component)
        assert (found["amount"] / truth).to_numpy() == pytest.approx(1.0, abs=0.01)
        assert (found["amount_low"] <= truth).all()
        assert (truth <= found["amount_high"]).all()
        assert found["material"].all()
    # Only the accounts' faulty nodes carry the error; the others stay within their rounding.
    rows = settlement.rows[
        (settlement.rows["component"] == "delivery-factor") & settlement.rows["node"].isin(BUSES[5:8])
    ]
    assert ((rows["amount_low"] <= 0.0) & (rows["amount_high"] >= 0.0)).all()


def test_nothing_is_claimed_without_a_fault() -> None:
    energy, factor, congestion = known_world(11)
    posted = posted_frame(
        WEEK,
        BUSES,
        {"energy": energy[:, None], "loss": energy[:, None] * (factor - 1.0), "congestion": congestion},
    )
    world = make_world(BUSES, WEEK, positions=positions_of(np.random.default_rng(1)), posted=posted)
    settlement = settle(ac_run(energy, factor, congestion), world)
    assert not settlement.accounts["material"].any()


@settings(max_examples=8, deadline=None)
@given(seed=st.integers(0, 10_000), reference=st.sampled_from(["scenario", "unknown"]))
def test_rounding_interval_holds_the_unrounded_amount(seed: int, reference: str) -> None:
    """Every row's interval must hold what the amount would be without rounding, in every component."""
    rng = np.random.default_rng(seed)
    energy, factor, congestion = known_world(seed)
    posted_factor = factor * (1.0 + rng.normal(0.0, 0.01, factor.shape))
    posted_energy = energy + rng.normal(0.0, 1.0, energy.shape)
    positions = positions_of(rng)
    parts = {
        "energy": posted_energy[:, None],
        "loss": posted_energy[:, None] * (posted_factor - 1.0),
        "congestion": congestion,
    }
    run = ac_run(energy, factor, congestion)
    options = SettlementOptions(posted_reference=reference)  # type: ignore[arg-type]
    rounded, exact = (
        settle(
            run,
            make_world(BUSES, WEEK, positions=positions, posted=posted_frame(WEEK, BUSES, parts, cents)),
            options=options,
        ).rows
        for cents in (True, False)
    )
    slack = 1e-6
    assert (rounded["amount_low"] <= exact["amount"] + slack).all()
    assert (exact["amount"] <= rounded["amount_high"] + slack).all()


@settings(max_examples=6, deadline=None)
@given(seed=st.integers(0, 10_000))
def test_claim_does_not_depend_on_the_posted_reference(seed: int) -> None:
    """The same posted prices on any other reference give the same claim once both sides are moved to one."""
    rng = np.random.default_rng(seed)
    energy, factor, congestion = known_world(seed)
    other = rng.uniform(0.0, 1.0, len(BUSES))
    other /= other.sum()
    posted_factor = factor * (1.0 + rng.normal(0.0, 0.01, factor.shape))
    positions = positions_of(rng)
    run = ac_run(energy, factor, congestion)
    options = SettlementOptions(posted_reference="unknown")
    tables = [
        settle(
            run,
            make_world(
                BUSES,
                WEEK,
                positions=positions,
                posted=posted_frame(WEEK, BUSES, on_weights(energy, posted_factor, congestion, weights), cents=False),
            ),
            options=options,
        ).accounts
        for weights in (np.full(len(BUSES), 1 / len(BUSES)), other)
    ]
    first, second = (table.set_index(["account", "component"])["amount"] for table in tables)
    pd.testing.assert_series_equal(first, second, atol=1e-5, rtol=1e-7)


def test_another_posted_reference_is_noticed() -> None:
    energy, factor, congestion = known_world(3)
    weights = np.zeros(len(BUSES))
    weights[3] = 1.0
    posted = posted_frame(WEEK, BUSES, on_weights(energy, factor, congestion, weights))
    world = make_world(BUSES, WEEK, positions=positions_of(np.random.default_rng(1)), posted=posted)
    settlement = settle(ac_run(energy, factor, congestion), world)
    assert settlement.options.posted_reference == "unknown"
    assert "both sides are moved" in settlement.notes[0]
    assert not settlement.accounts["material"].any()


def two_node_settlement(
    run: FakeRun, loss: float = 1.0, mw: float = 100.0, rounding: float = 0.0, **options: object
) -> pd.DataFrame:
    """Settle one hour at the second of two nodes; posted energy 40, no rounding unless told otherwise."""
    hour = WEEK[:1]
    posted = posted_frame(hour, ("A", "B"), {"energy": np.array([[40.0]]), "loss": np.array([[0.0, loss]])})
    world: World = make_world(("A", "B"), hour, positions=position_frame([("a", hour[0], "B", mw)]), posted=posted)
    chosen = SettlementOptions(posted_reference="scenario", rounding=rounding, **options)  # type: ignore[arg-type]
    return settle(run, world, options=chosen).accounts.set_index("component")


def one_hour(formulation: str, *, factor: float = 0.0, verdict: str = "certified", **parts: float) -> FakeRun:
    hour = WEEK[:1]
    return FakeRun(
        split_frame(
            hour,
            ("A", "B"),
            formulation,
            energy=parts.get("energy", 40.0),
            factor=np.array([1.0 - factor, 1.0 + factor]),
            width=parts.get("width", 0.0),
        ),
        solve_frame(hour, formulation, verdict, parts.get("residual", 0.0)),
    )


def joined(*runs: FakeRun) -> FakeRun:
    return FakeRun(
        pd.concat([run.tables["prices"] for run in runs], ignore_index=True),
        pd.concat([run.tables["solves"] for run in runs], ignore_index=True),
    )


def test_uniqueness_widens_by_the_energy_range() -> None:
    """By hand: prices free within 2 $/MWh, factor 1.02: the loss component moves by 0.02 x 2, the factors not at
    all."""
    by = two_node_settlement(one_hour("ac", factor=0.02, width=2.0))
    assert by.loc["loss", "amount_high"] - by.loc["loss", "amount"] == pytest.approx(100 * 0.02 * 2.0)
    assert by.loc["lmp", "amount"] - by.loc["lmp", "amount_low"] == pytest.approx(100 * 2.0)
    assert by.loc["delivery-factor", "amount_high"] == pytest.approx(by.loc["delivery-factor", "amount"])


@pytest.mark.filterwarnings("error")
@pytest.mark.parametrize("mw", [100.0, -100.0, 0.0])
@pytest.mark.parametrize("factor", [0.0, 1e-15, 0.02])
def test_a_price_that_nothing_bounds_leaves_no_undefined_amount(factor: float, mw: float) -> None:
    """Zero times an endless range is none of it: a bound is a figure, or endless, and never undefined."""
    by = two_node_settlement(one_hour("ac", factor=factor, width=np.inf), mw=mw)
    bounds = by[["amount", "amount_low", "amount_high", "independent_low", "independent_high"]]
    assert not bounds.isna().any(axis=None)
    assert (by["amount_low"] <= by["amount"]).all()
    assert (by["amount"] <= by["amount_high"]).all()
    if mw == 0.0:
        assert (bounds == 0.0).all(axis=None)
    else:
        assert np.isfinite(bounds.loc["loss"]).all() == (factor < 1e-9)


def test_solver_residual_widens() -> None:
    by = two_node_settlement(one_hour("ac", residual=1e-3))
    assert by.loc["loss", "amount_high"] - by.loc["loss", "amount"] == pytest.approx(100 * 1e-3)


def test_other_operating_point_widens_on_its_side_only() -> None:
    """By hand: dc-loss has the factor at B 0.01 higher, so the claim could be 100 MW x 40 $/MWh x 0.01 = 40 $ lower."""
    by = two_node_settlement(joined(one_hour("ac"), one_hour("dc-loss", factor=0.01)))
    claim = by.loc["delivery-factor"]
    assert claim["amount"] == pytest.approx(100.0)
    assert claim["amount_low"] == pytest.approx(60.0)
    assert claim["amount_high"] == pytest.approx(100.0)
    without = two_node_settlement(joined(one_hour("ac"), one_hour("dc-loss", factor=0.01)), operating_points=("ac",))
    assert without.loc["delivery-factor", "amount_low"] == pytest.approx(100.0)


def test_unusable_operating_point_adds_nothing_and_is_told() -> None:
    run = joined(one_hour("ac"), one_hour("dc-loss", factor=0.01, verdict="uncertified"))
    by = two_node_settlement(run)
    assert by.loc["delivery-factor", "amount_low"] == pytest.approx(100.0)
    hour = WEEK[:1]
    posted = posted_frame(hour, ("A", "B"), {"energy": np.array([[40.0]])})
    world = make_world(("A", "B"), hour, positions=position_frame([("a", hour[0], "B", 1.0)]), posted=posted)
    assert any("dc-loss has no usable solve" in note for note in settle(run, world).notes)


def test_relaxation_widens_by_its_distance_to_the_ac_price() -> None:
    """Against soc with the AC price in the run: 100 MW x 40 $/MWh x 0.004; without it 4 % of the energy price."""
    soc, ac = one_hour("soc", factor=0.004, verdict="close"), one_hour("ac")
    hour = WEEK[:1]
    posted = posted_frame(hour, ("A", "B"), {"energy": np.array([[40.0]]), "loss": np.array([[0.0, 1.0]])})
    world = make_world(("A", "B"), hour, positions=position_frame([("a", hour[0], "B", 100.0)]), posted=posted)
    options = SettlementOptions(posted_reference="scenario", rounding=0.0)
    for run, width in ((joined(soc, ac), 100 * 40 * 0.004), (soc, 100 * 0.04 * 40.0)):
        by = settle(run, world, against="soc", options=options).accounts.set_index("component")
        claim = by.loc["delivery-factor"]
        assert claim["amount"] == pytest.approx(100 * (1.0 - 40 * 0.004))
        assert claim["amount_high"] - claim["amount"] == pytest.approx(width)
        assert claim["amount"] - claim["amount_low"] == pytest.approx(width)


def test_root_sum_square_is_narrower_than_worst_case() -> None:
    run = joined(one_hour("ac", residual=0.01), one_hour("dc-loss", factor=0.01))
    worst = two_node_settlement(run, rounding=0.005).loc["loss"]
    squares = two_node_settlement(run, rounding=0.005, combine="root-sum-square").loc["loss"]
    assert worst["amount"] - worst["amount_low"] == pytest.approx(100 * (0.005 + 0.01 + 0.4))
    assert squares["amount"] - squares["amount_low"] == pytest.approx(100 * np.sqrt(0.005**2 + 0.01**2 + 0.4**2))


def test_independent_rounding_grows_with_the_root_of_the_hours() -> None:
    """24 equal hours: worst case 24 half widths, independent rounding the root of 24 of them."""
    posted = posted_frame(WEEK, ("A", "B"), {"energy": np.array([[40.0]]), "loss": np.array([[0.0, 1.0]])})
    world = make_world(("A", "B"), WEEK, positions=position_frame([("a", s, "B", 100.0) for s in WEEK]), posted=posted)
    run = FakeRun(split_frame(WEEK, ("A", "B"), "ac", energy=40.0, factor=np.ones(2)), solve_frame(WEEK, "ac"))
    by = settle(run, world, options=SettlementOptions(posted_reference="scenario")).accounts.set_index("component")
    claim = by.loc["loss"]
    assert claim["amount_high"] - claim["amount"] == pytest.approx(HOURS * 0.5)
    assert claim["independent_high"] - claim["amount"] == pytest.approx(np.sqrt(HOURS) * 0.5)


@pytest.mark.parametrize(("materiality", "material"), [(99.0, True), (100.0, False), (150.0, False)])
def test_materiality_needs_size_and_an_interval_without_zero(materiality: float, material: bool) -> None:
    assert two_node_settlement(one_hour("ac"), materiality=materiality).loc["loss", "material"] == material
    unsure = joined(one_hour("ac"), one_hour("dc-loss", factor=0.03))
    assert not two_node_settlement(unsure, materiality=0.0).loc["delivery-factor", "material"]


def test_reference_follows_the_nodes_that_are_priced() -> None:
    """Posted prices at few nodes: the scenario's weights on those, or the plain mean where they hold too little."""
    energy, factor, congestion = known_world(4)
    parts = {"energy": energy[:, None], "loss": energy[:, None] * (factor - 1.0), "congestion": congestion}
    full = posted_frame(WEEK, BUSES, parts)
    positions = positions_of(np.random.default_rng(2))
    run = ac_run(energy, factor, congestion)
    options = SettlementOptions(posted_reference="unknown")
    for kept, kind in ((BUSES[:9], PARTIAL_REFERENCE), (BUSES[:5], MEAN_REFERENCE)):
        posted = full[full["node"].isin(kept)].reset_index(drop=True)
        settlement = settle(run, make_world(BUSES, WEEK, positions=positions, posted=posted), options=options)
        assert set(settlement.reference["reference"]) == {kind}
        assert settlement.reference["coverage"].tolist() == pytest.approx([len(kept) / 12] * len(WEEK))
        assert not settlement.accounts["material"].any()


def test_islands_have_a_reference_each() -> None:
    """Two islands with energy prices of their own; a hub over both has no one energy price and is left out."""
    hour = WEEK[:1]
    buses = ("A", "B", "C", "D")
    energy = np.array([[30.0, 30.0, 50.0, 50.0]])
    factor = np.array([[0.98, 1.02, 0.97, 1.03]])
    loss = energy * (factor - 1.0)
    prices = pd.DataFrame(
        {
            "interval_start": hour.repeat(4),
            "formulation": "ac",
            "bus": buses,
            "lmp": (energy + loss).ravel(),
            "energy_component": energy.ravel(),
            "congestion_component": 0.0,
            "loss_component": loss.ravel(),
            "reactive_component": 0.0,
            "lmp_low": (energy + loss).ravel(),
            "lmp_high": (energy + loss).ravel(),
        }
    )
    world = make_world(
        buses,
        hour,
        positions=position_frame([("a", hour[0], node, 100.0) for node in ("B", "D", "Both")]),
        posted=posted_frame(hour, buses, {"energy": energy, "loss": loss + np.array([[0, 0.5, 0, 0.25]])}),
        hubs=pd.DataFrame({"hub": ["Both", "Both"], "bus": ["A", "C"], "weight": [1.0, 1.0]}),
    )
    world.branch_in_service = np.array([[True, False, True]])
    # On the mean of its island half of a node's error is the reference's own; as published it is all the node's.
    for reference, share in (("scenario", 1.0), ("unknown", 0.5)):
        options = SettlementOptions(posted_reference=reference)  # type: ignore[arg-type]
        table = settle(FakeRun(prices, solve_frame(hour, "ac")), world, options=options).rows
        rows = table[table["component"] == "delivery-factor"].set_index("node")
        assert rows.loc["B", "amount"] == pytest.approx(share * 100 * 0.5, rel=0.03)
        assert rows.loc["D", "amount"] == pytest.approx(share * 100 * 0.25, rel=0.03)
        assert rows.loc["Both", "status"].endswith("delivery factor cannot be told")


def test_factors_are_not_read_from_prices_near_zero() -> None:
    by = two_node_settlement(one_hour("ac", energy=0.2))
    assert by.loc["delivery-factor", "left_out"] == 1
    assert by.loc["lmp", "rows"] == 1


def test_weighted_median_by_hand() -> None:
    values = np.array([[3.0, 1.0, 2.0], [5.0, 9.0, 7.0], [1.0, 2.0, 3.0]])
    weights = np.array([[1.0, 1.0, 1.0], [0.1, 5.0, 0.1], [0.0, 0.0, 0.0]])
    assert weighted_median(values, weights).tolist() == [2.0, 9.0, 0.0]


def test_options_survive_the_record_and_reject_nonsense() -> None:
    from lmpgap.errors import DataError

    options = SettlementOptions(materiality=5.0, basis="loss")
    assert SettlementOptions.from_dict(options.as_dict()) == options
    for change in ({"basis": "rumour"}, {"rounding": -1.0}, {"rounding": "x"}, {"operating_points": "ac"}, {"new": 1}):
        with pytest.raises(DataError, match="cannot be used"):
            SettlementOptions.from_dict({**options.as_dict(), **change})


@pytest.mark.parametrize("shift", ["another week", "another node"])
def test_posted_prices_that_fit_no_interval_or_node_are_told(shift: str) -> None:
    """They are in the scenario, so that nothing looks missing; each used to end elsewhere."""
    intervals = hourly("2026-03-02T08:00", 2)
    times = intervals + pd.Timedelta(weeks=1) if shift == "another week" else intervals
    nodes = ("N1", "N2") if shift == "another week" else ("M1", "M2")
    world = make_world(
        ("N1", "N2"),
        intervals,
        positions=position_frame([("Co-op", intervals[0], "N1", 10.0)]),
        posted=posted_frame(times, nodes, {"energy": np.array(30.0)}),
    )
    assert not has_posted(world)
    run = FakeRun(
        split_frame(intervals, ("N1", "N2"), "ac", energy=30.0, factor=np.array([1.0, 1.1])),
        solve_frame(intervals, "ac"),
    )
    with pytest.raises(DataError, match="none of the posted prices is of an interval and a node of the scenario"):
        settle(run, world, "posted", "ac", write=False)
