"""Positions times prices: hand-computed tables, signs, hubs, zones, and what cannot be settled."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from lmpgap.errors import DataError
from lmpgap.settlement.options import COMPONENTS, PRICE_COMPONENTS, SettlementOptions
from lmpgap.settlement.positions import COUNTED, OUTSIDE, UNKNOWN_NODE, gather_positions, settle_amounts
from lmpgap.settlement.settle import settle
from tests.settlement.world import (
    FakeRun,
    hourly,
    make_world,
    position_frame,
    posted_frame,
    solve_frame,
    split_frame,
)

BUSES = ("West", "Mid", "East")


def test_withdrawal_pays_and_injection_is_paid() -> None:
    """By hand: 10 MW at 20 $/MWh for a quarter of an hour is 50 $; 4 MW injected at 30 $/MWh is 30 $ received."""
    intervals = hourly("2026-01-01", 1, "15min")
    positions = position_frame([("a", intervals[0], "West", 10.0), ("a", intervals[0], "East", -4.0)])
    rows = settle_amounts(positions, {"lmp": np.array([[20.0, 25.0, 30.0]])}, intervals, BUSES, 0.25)
    assert rows["amount"].tolist() == [50.0, -30.0]


def test_two_bus_over_collection_published() -> None:
    """Load pays 18,232 $, generation costs 18,110 $, 122 $ are left over.

    "Pricing the Grid: Comparing Transmission Rates of US ISOs", Public Utilities Fortnightly, February 2000:
    generators at 20 $ west and 21 $ east, loads of 500 and 392 MW, loss 1e-4 F^2 at the mid-line flow of 250 MW, half
    of it at each end.
    """
    loss = 1e-4 * 250.0**2
    west, east = 500.0 + 250.0 + loss / 2, 392.0 - 250.0 + loss / 2
    intervals = hourly("2000-02-01", 1)
    positions = position_frame(
        [
            ("load", intervals[0], "West", 500.0),
            ("load", intervals[0], "East", 392.0),
            ("generation", intervals[0], "West", -west),
            ("generation", intervals[0], "East", -east),
        ]
    )
    rows = settle_amounts(positions, {"lmp": np.array([[20.0, 21.0]])}, intervals, ("West", "East"), 1.0)
    paid = rows.groupby("account")["amount"].sum()
    assert loss == 6.25
    assert round(paid["load"], 2) == 18_232.00
    assert round(-paid["generation"], 2) == 18_110.12  # 18,110.125: published as 18,110
    assert round(rows["amount"].sum()) == 122
    assert rows["amount"].sum() == pytest.approx(121.875, abs=1e-9)
    # Published marginal loss rates on the load-weighted reference, relative to the western price.
    mean = (500.0 * 20.0 + 392.0 * 21.0) / 892.0
    assert [round((mean - p) / 20.0, 5) for p in (20.0, 21.0)] == [0.02197, -0.02803]


def test_hand_computed_settlement() -> None:
    """Everything by hand on one hour: energy 40, factors 0.95/1/1.05, posted loss at East 1.00 $/MWh too high."""
    intervals = hourly("2026-01-01", 1)
    factor = np.array([0.95, 1.0, 1.05])
    posted = posted_frame(
        intervals,
        BUSES,
        {
            "energy": np.array([[40.0]]),
            "loss": np.array([[-2.0, 0.0, 3.0]]),
            "congestion": np.array([[-1.0, 0.0, 1.0]]),
        },
    )
    positions = position_frame([("buyer", intervals[0], "East", 100.0), ("seller", intervals[0], "East", -10.0)])
    world = make_world(BUSES, intervals, positions=positions, posted=posted)
    run = FakeRun(
        split_frame(intervals, BUSES, "ac", energy=40.0, factor=factor, congestion=np.array([-1.0, 0.0, 1.0])),
        solve_frame(intervals, "ac"),
    )
    settlement = settle(run, world)
    by = settlement.accounts.set_index(["account", "component"])
    assert by.loc[("buyer", "loss"), "amount"] == pytest.approx(100.0, abs=1e-9)
    assert by.loc[("buyer", "delivery-factor"), "amount"] == pytest.approx(100.0, abs=1e-9)
    assert by.loc[("buyer", "lmp"), "amount"] == pytest.approx(100.0, abs=1e-9)
    assert by.loc[("seller", "loss"), "amount"] == pytest.approx(-10.0, abs=1e-9)
    assert by.loc[("buyer", "energy"), "amount"] == pytest.approx(0.0, abs=1e-9)
    # Half a cent on the loss component; and on energy times |factor gap| and |factor - 1| in the other reading.
    assert by.loc[("buyer", "loss"), "amount_low"] == pytest.approx(100.0 - 0.5, abs=1e-9)
    gap, posted_factor = 43.0 / 40.0 - 1.05, 43.0 / 40.0
    half = 0.005 * (gap + 1.0 + (posted_factor - 1.0))
    assert by.loc[("buyer", "delivery-factor"), "amount_high"] == pytest.approx(100.0 + 100.0 * half, abs=1e-9)
    pd.testing.assert_frame_equal(run.table("settlement"), settlement.table)


def test_components_add_up_to_the_price() -> None:
    rng = np.random.default_rng(5)
    intervals = hourly("2026-01-01", 6)
    factor = rng.uniform(0.9, 1.1, (6, 3))
    factor /= factor.mean(axis=1, keepdims=True)
    congestion = rng.normal(0.0, 5.0, (6, 3))
    congestion -= factor * congestion.mean(axis=1, keepdims=True)
    posted = posted_frame(
        intervals, BUSES, {"energy": np.full((6, 1), 33.0), "loss": rng.normal(0, 2, (6, 3)), "congestion": congestion}
    )
    positions = position_frame([("a", s, b, float(rng.normal(0, 50))) for s in intervals for b in BUSES])
    world = make_world(BUSES, intervals, positions=positions, posted=posted)
    prices = split_frame(intervals, BUSES, "ac", energy=rng.uniform(20, 50, 6), factor=factor, congestion=congestion)
    for reference in ("scenario", "unknown"):
        options = SettlementOptions(posted_reference=reference)
        amounts = settle(FakeRun(prices, solve_frame(intervals, "ac")), world, options=options).accounts
        amounts = amounts.set_index("component")["amount"]
        assert amounts[[c for c in PRICE_COMPONENTS if c != "lmp"]].sum() == pytest.approx(amounts["lmp"], abs=1e-8)


@settings(max_examples=12, deadline=None)
@given(
    shares=st.lists(st.floats(-300, 300), min_size=2, max_size=5),
    loss=st.floats(-5, 5),
    reference=st.sampled_from(["scenario", "unknown"]),
)
def test_splitting_a_position_conserves_dollars(shares: list[float], loss: float, reference: str) -> None:
    intervals = hourly("2026-01-01", 1)
    posted = posted_frame(intervals, BUSES, {"energy": np.array([[40.0]]), "loss": np.array([[0.0, 0.0, loss]])})
    run = FakeRun(
        split_frame(intervals, BUSES, "ac", energy=38.0, factor=np.array([0.98, 1.0, 1.02])),
        solve_frame(intervals, "ac"),
    )
    options = SettlementOptions(posted_reference=reference)

    def total(positions: pd.DataFrame) -> pd.Series:
        world = make_world(BUSES, intervals, positions=positions, posted=posted)
        return settle(run, world, options=options).accounts.groupby("component")["amount"].sum()

    split = total(position_frame([(f"a{i}", intervals[0], "East", mw) for i, mw in enumerate(shares)]))
    whole = total(position_frame([("a", intervals[0], "East", sum(shares))]))
    pd.testing.assert_series_equal(split, whole, atol=1e-7, rtol=1e-9)


def test_repeated_positions_are_added_up() -> None:
    start = hourly("2026-01-01", 1)[0]
    gathered = gather_positions(position_frame([("a", start, "West", 1.0), ("a", start, "West", 2.5)]))
    assert gathered["mw"].tolist() == [3.5]


def test_hub_and_zone_positions_settle_on_weighted_prices() -> None:
    """A hub of West and East, half each, and a zone of Mid and East with loads 1 and 3."""
    intervals = hourly("2026-01-01", 1)
    hubs = pd.DataFrame({"hub": ["Hub", "Hub"], "bus": ["West", "East"], "weight": [2.0, 2.0]})
    positions = position_frame([("h", intervals[0], "Hub", 10.0), ("z", intervals[0], "South", 10.0)])
    posted = posted_frame(intervals, BUSES, {"energy": np.array([[40.0]]), "loss": np.array([[1.0, 2.0, 6.0]])})
    world = make_world(
        BUSES,
        intervals,
        positions=positions,
        posted=posted,
        hubs=hubs,
        zones=("", "South", "South"),
        loads=np.array([[5.0, 1.0, 3.0]]),
    )
    run = FakeRun(split_frame(intervals, BUSES, "ac", energy=40.0, factor=np.ones(3)), solve_frame(intervals, "ac"))
    by = settle(run, world, options=SettlementOptions(posted_reference="scenario")).accounts
    amount = by.set_index(["account", "component"])["amount"]
    assert amount[("h", "loss")] == pytest.approx(10.0 * (1.0 + 6.0) / 2)
    assert amount[("z", "loss")] == pytest.approx(10.0 * (2.0 * 1 + 6.0 * 3) / 4)


def test_posted_hub_price_stands_before_the_one_made_up() -> None:
    intervals = hourly("2026-01-01", 1)
    hubs = pd.DataFrame({"hub": ["Hub", "Hub"], "bus": ["West", "East"], "weight": [1.0, 1.0]})
    posted = posted_frame(
        intervals, (*BUSES, "Hub"), {"energy": np.array([[40.0]]), "loss": np.array([[0.0, 0, 0, 7.0]])}
    )
    world = make_world(
        BUSES, intervals, positions=position_frame([("h", intervals[0], "Hub", 1.0)]), posted=posted, hubs=hubs
    )
    run = FakeRun(split_frame(intervals, BUSES, "ac", energy=40.0, factor=np.ones(3)), solve_frame(intervals, "ac"))
    by = settle(run, world, options=SettlementOptions(posted_reference="scenario")).accounts.set_index("component")
    assert by.loc["loss", "amount"] == pytest.approx(7.0)


def test_what_cannot_be_settled_is_kept_and_told() -> None:
    intervals = hourly("2026-01-01", 3)
    positions = position_frame(
        [
            ("a", intervals[0], "Nowhere", 1.0),
            ("a", hourly("2025-06-01", 1)[0], "West", 1.0),
            ("a", intervals[1], "West", 1.0),
            ("a", intervals[2], "West", 1.0),
            ("a", intervals[0], "West", 1.0),
        ]
    )
    posted = posted_frame(intervals[:2], BUSES, {"energy": np.array([[40.0]])})
    posted.loc[posted["interval_start"] == intervals[1], ["energy_component", "loss_component"]] = np.nan
    world = make_world(BUSES, intervals, positions=positions, posted=posted)
    run = FakeRun(split_frame(intervals, BUSES, "ac", energy=40.0, factor=np.ones(3)), solve_frame(intervals, "ac"))
    settlement = settle(run, world, options=SettlementOptions(posted_reference="scenario"))
    rows = settlement.rows[settlement.rows["component"] == "loss"]
    status = dict(zip(zip(rows["node"], rows["interval_start"], strict=True), rows["status"], strict=True))
    assert len(settlement.rows) == len(COMPONENTS) * len(positions)
    assert status[("Nowhere", intervals[0])] == UNKNOWN_NODE
    assert status[("West", hourly("2025-06-01", 1)[0])] == OUTSIDE
    assert status[("West", intervals[1])] == "posted components are missing"
    assert status[("West", intervals[2])] == "no posted price"
    assert status[("West", intervals[0])] == COUNTED
    assert rows.loc[rows["status"] != COUNTED, ["amount", "amount_low", "amount_high"]].isna().all().all()
    # The price itself needs no components, so that row counts.
    prices = settlement.accounts.set_index("component")
    assert (prices.loc["lmp", "rows"], prices.loc["loss", "rows"]) == (2, 1)
    assert (prices.loc["lmp", "left_out"], prices.loc["loss", "left_out"]) == (3, 4)
    assert settlement.left_out["rows"].sum() == settlement.accounts["left_out"].sum()


@pytest.mark.parametrize("verdict", ["uncertified", "not a price", "not verified"])
def test_no_claim_rests_on_a_solve_that_may_not_be_used(verdict: str) -> None:
    intervals = hourly("2026-01-01", 2)
    posted = posted_frame(intervals, BUSES, {"energy": np.array([[40.0]]), "loss": np.array([[1.0, 1.0, 1.0]])})
    positions = position_frame([("a", s, "East", 10.0) for s in intervals])
    solves = solve_frame(intervals, "ac")
    solves.loc[1, "verdict"] = verdict
    run = FakeRun(split_frame(intervals, BUSES, "ac", energy=40.0, factor=np.ones(3)), solves)
    world = make_world(BUSES, intervals, positions=positions, posted=posted)
    settlement = settle(run, world, options=SettlementOptions(posted_reference="scenario"))
    claim = settlement.claims.iloc[0]
    assert (claim["rows"], claim["left_out"]) == (1, 1)
    assert claim["amount"] == pytest.approx(10.0)
    assert set(settlement.left_out["status"]) == {f"reference ac is {verdict}"}


def test_latest_version_counts() -> None:
    intervals = hourly("2026-01-01", 1)
    first = posted_frame(intervals, BUSES, {"energy": np.array([[40.0]]), "loss": np.array([[9.0, 9.0, 9.0]])})
    second = posted_frame(intervals, BUSES, {"energy": np.array([[40.0]]), "loss": np.array([[1.0, 1.0, 1.0]])}).assign(
        version=2
    )
    positions = position_frame([("a", intervals[0], "East", 10.0)])
    run = FakeRun(split_frame(intervals, BUSES, "ac", energy=40.0, factor=np.ones(3)), solve_frame(intervals, "ac"))
    world = make_world(BUSES, intervals, positions=positions, posted=pd.concat([second, first], ignore_index=True))
    settlement = settle(run, world, options=SettlementOptions(posted_reference="scenario"))
    assert settlement.claims["amount"].tolist() == [pytest.approx(10.0)]


@pytest.mark.parametrize(
    ("change", "message"),
    [
        ({"claim": "ac"}, "nothing can differ"),
        ({"against": "dc"}, "no loss component"),
        ({"against": "dc-loss"}, "run holds no prices of dc-loss"),
        ({"accounts": ["b"]}, "unknown account"),
    ],
)
def test_wrong_questions_are_answered_in_words(change: dict[str, object], message: str) -> None:
    intervals = hourly("2026-01-01", 1)
    world = make_world(
        BUSES,
        intervals,
        positions=position_frame([("a", intervals[0], "East", 10.0)]),
        posted=posted_frame(intervals, BUSES, {"energy": np.array([[40.0]])}),
    )
    run = FakeRun(split_frame(intervals, BUSES, "ac", energy=40.0, factor=np.ones(3)), solve_frame(intervals, "ac"))
    with pytest.raises(DataError, match=message):
        settle(run, world, **change)


def test_without_positions_or_posted_prices_the_message_says_what_to_add() -> None:
    intervals = hourly("2026-01-01", 1)
    run = FakeRun(split_frame(intervals, BUSES, "ac", energy=40.0, factor=np.ones(3)), solve_frame(intervals, "ac"))
    with pytest.raises(DataError, match=r"add positions\.csv"):
        settle(run, make_world(BUSES, intervals, positions=position_frame([])))
    with pytest.raises(DataError, match=r"add posted\.csv"):
        settle(run, make_world(BUSES, intervals, positions=position_frame([("a", intervals[0], "East", 1.0)])))
