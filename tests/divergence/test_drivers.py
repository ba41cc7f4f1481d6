"""Drivers explain every difference exactly, and name the right cause."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pandas as pd
import pytest
from hypothesis import assume, given, settings
from hypothesis import strategies as st

from lmpgap.divergence.compare import compare, compare_sets
from lmpgap.divergence.drivers import DRIVER_COLUMNS, DRIVERS
from lmpgap.divergence.price_set import KEY_COLUMNS
from lmpgap.divergence.price_tables import price_set
from lmpgap.errors import DataError
from tests.divergence.synthetic import random_run, run_of

EXACT = 1e-6  # $/MWh; the figure the account is promised to


def leftover(comparison) -> float:
    keys = ["interval_start", "base", "against", "bus"]
    explained = comparison.drivers.groupby(keys)["amount"].sum()
    wanted = comparison.differences.set_index(keys)["difference"]
    return float((wanted - explained.reindex(wanted.index).fillna(0.0)).abs().max())


@settings(max_examples=60, deadline=None)
@given(
    seed=st.integers(0, 2**32 - 1),
    n_constraint=st.integers(0, 6),
    share=st.floats(0.0, 1.0),
    both_ends=st.booleans(),
    reference=st.booleans(),
)
def test_drivers_add_up_on_random_price_sets(seed, n_constraint, share, both_ends, reference):
    rng = np.random.default_rng(seed)
    run = run_of(
        random_run(rng, "dc", n_constraint=n_constraint, share_binding=share),
        random_run(rng, "ac", n_constraint=n_constraint, share_binding=share, both_ends=both_ends),
    )
    weights = pd.Series(rng.dirichlet(np.ones(5)), index=[f"B{i}" for i in range(5)]) if reference else None
    comparison = compare(run, run, base="dc", against="ac", reference_weights=weights)
    assert len(comparison.differences) == 15
    assert tuple(comparison.drivers.columns) == DRIVER_COLUMNS
    assert leftover(comparison) < EXACT
    assert set(comparison.drivers["driver"]) <= set(DRIVERS) - {"congestion", "unsplit"}


@settings(max_examples=20, deadline=None)
@given(seed=st.integers(0, 2**32 - 1))
def test_exchanging_the_sets_changes_every_sign_and_the_side(seed):
    rng = np.random.default_rng(seed)
    run = run_of(random_run(rng, "dc"), random_run(rng, "ac"))
    there = compare(run, run, base="dc", against="ac").drivers
    back = compare(run, run, base="ac", against="dc").drivers
    sides = {"binds only in base": "binds only in against", "binds only in against": "binds only in base"}
    back = back.assign(driver=back["driver"].replace(sides), amount=-back["amount"])
    keys = ["interval_start", "bus", "driver", "constraint"]
    pd.testing.assert_series_equal(
        there.set_index(keys)["amount"].sort_index(), back.set_index(keys)["amount"].sort_index()
    )


def one_bus(formulation: str, energy: float, loss: float, parts: list[tuple[tuple[str, str, str, str], float, float]]):
    """One interval, one bus; parts are (key, shadow price, shift factor)."""
    at = pd.Timestamp("2026-03-02T07:00:00Z")
    congestion = -sum(mu * factor for _, mu, factor in parts)
    names = [" ".join((*key, formulation)) for key, _, _ in parts]  # a solver's own row names
    return {
        "prices": pd.DataFrame(
            [
                {
                    "interval_start": at,
                    "formulation": formulation,
                    "bus": "Fernhill",
                    "lmp": energy + loss + congestion,
                    "energy_component": energy,
                    "congestion_component": congestion,
                    "loss_component": loss,
                    "reactive_component": 0.0,
                }
            ]
        ),
        "constraints": pd.DataFrame(
            [
                (at, formulation, name, *key, mu)
                for name, (key, mu, _) in zip(names, parts, strict=True)
            ],
            columns=["interval_start", "formulation", "constraint", *KEY_COLUMNS, "shadow_price"],
        ),
        "contributions": pd.DataFrame(
            [
                (at, formulation, "Fernhill", name, "congestion", -mu * factor)
                for name, (_, mu, factor) in zip(names, parts, strict=True)
            ],
            columns=["interval_start", "formulation", "bus", "constraint", "component", "amount"],
        ),
    }  # fmt: skip


def amounts(base, against) -> dict[tuple[str, str], float]:
    run = run_of(base, against)
    rows = compare(run, run, base="dc", against="ac").drivers
    return {(row.driver, row.constraint): row.amount for row in rows.itertuples()}


FORWARD = ("thermal", "", "L6", "forward")
REVERSE = ("thermal", "", "L6", "reverse")


def test_energy_and_delivery_factor_by_hand():
    # Energy 20 -> 30, factor 1.05 -> 1.10: d loss = 0.075 x 10 + 25 x 0.05.
    found = amounts(one_bus("dc", 20.0, 1.0, []), one_bus("ac", 30.0, 3.0, []))
    assert found == pytest.approx({("energy price", ""): 10.0 + 0.75, ("delivery factor", ""): 1.25})


def test_shadow_price_and_shift_factor_by_hand():
    # Shadow price 40 -> 60, shift factor -0.5 -> -0.4: +0.45 x 20 and -50 x 0.1.
    found = amounts(
        one_bus("dc", 20.0, 0.0, [(FORWARD, 40.0, -0.5)]), one_bus("ac", 20.0, 0.0, [(FORWARD, 60.0, -0.4)])
    )
    assert found == pytest.approx({("shadow price", "L6 forward"): 9.0, ("shift factor", "L6 forward"): -5.0})


def test_both_ends_of_a_branch_are_one_constraint():
    """Rows of one key add up, whatever names the rows carry: else all would bind on one side only."""
    found = amounts(
        one_bus("dc", 20.0, 0.0, [(FORWARD, 40.0, -0.5)]),
        one_bus("ac", 20.0, 0.0, [(FORWARD, 15.0, -0.5), (FORWARD, 25.0, -0.5)]),
    )
    assert found == {}


def test_a_reversed_direction_is_another_constraint():
    found = amounts(one_bus("dc", 20.0, 0.0, [(FORWARD, 40.0, -0.5)]), one_bus("ac", 20.0, 0.0, [(REVERSE, 40.0, 0.5)]))
    assert found == pytest.approx(
        {("binds only in base", "L6 forward"): -20.0, ("binds only in against", "L6 reverse"): -20.0}
    )


def test_a_shadow_price_of_dust_does_not_bind():
    found = amounts(
        one_bus("dc", 20.0, 0.0, [(FORWARD, 1e-7, -0.5)]), one_bus("ac", 20.0, 0.0, [(FORWARD, 40.0, -0.5)])
    )
    assert set(found) == {("binds only in against", "L6 forward")}


def test_an_energy_price_near_zero_has_no_delivery_factor():
    found = amounts(one_bus("dc", 0.01, 0.4, []), one_bus("ac", 10.01, 0.5, []))
    assert found == pytest.approx({("energy price", ""): 10.0, ("delivery factor", ""): 0.1})


def test_congestion_without_constraints_and_prices_without_components_are_named():
    rng = np.random.default_rng(3)
    run = run_of(random_run(rng, "dc", share_binding=1.0), random_run(rng, "posted", share_binding=1.0))
    bare = {"prices": run["prices"]}
    comparison = compare(run, bare, base="dc", against="posted")
    assert leftover(comparison) < EXACT
    assert "congestion" in set(comparison.drivers["driver"])
    none = bare["prices"].drop(columns=["energy_component", "congestion_component", "loss_component"])
    comparison = compare(run, {"prices": none}, base="dc", against="posted")
    assert leftover(comparison) < EXACT
    assert set(comparison.drivers["driver"]) == {"unsplit"}
    # A posted price that its components do not add up to: the rest is named, not spread.
    wrong = bare["prices"].assign(lmp=bare["prices"]["lmp"] + 1.5)
    comparison = compare(run, {"prices": wrong}, base="dc", against="posted")
    unsplit = comparison.drivers.query("driver == 'unsplit'")["amount"]
    assert leftover(comparison) < EXACT
    assert len(unsplit) == 15
    assert unsplit.to_numpy() == pytest.approx(1.5)


def test_a_difference_inside_the_interval_of_admissible_prices_is_no_divergence():
    base, against = one_bus("dc", 12.0, 0.0, []), one_bus("ac", 13.0, 0.0, [])
    base["prices"] = base["prices"].assign(lmp_low=10.0, lmp_high=14.0)
    run = run_of(base, against)
    assert compare(run, run, base="dc", against="ac").differences["inside_interval"].tolist() == [True]
    base["prices"] = base["prices"].assign(lmp_low=10.0, lmp_high=12.9)
    run = run_of(base, against)
    assert compare(run, run, base="dc", against="ac").differences["inside_interval"].tolist() == [False]
    same = run_of(one_bus("dc", 12.0, 0.0, []), one_bus("ac", 12.0, 0.0, []))
    assert compare(same, same, base="dc", against="ac").differences["inside_interval"].tolist() == [False]


@settings(max_examples=40, deadline=None)
@given(seed=st.integers(0, 2**32 - 1), negative=st.booleans())
def test_another_reference_moves_no_price_and_comes_back(seed, negative):
    rng = np.random.default_rng(seed)
    prices = price_set(random_run(rng, "ac"), "ac")
    first = rng.dirichlet(np.ones(5))
    second = first + np.array([0.4, -0.4, 0.0, 0.0, 0.0]) if negative else rng.dirichlet(np.ones(5))
    on_first, identified = prices.rereferenced(first)
    on_second, also = on_first.rereferenced(second)
    back, returned = on_second.rereferenced(first)
    assume((identified & also & returned).all())
    for moved, weights in ((on_first, first), (on_second, second)):
        total = moved.energy + moved.congestion + moved.loss + moved.reactive
        np.testing.assert_allclose(total, moved.lmp, atol=1e-9)
        for part in (moved.congestion, moved.loss, moved.reactive):
            np.testing.assert_allclose(part @ weights, 0.0, atol=1e-9)
        np.testing.assert_allclose(moved.congestion_parts.summed(3), moved.congestion, atol=1e-9)
    np.testing.assert_allclose(back.loss, on_first.loss, atol=1e-9)
    np.testing.assert_allclose(back.congestion, on_first.congestion, atol=1e-9)


def test_an_interval_without_a_reference_keeps_its_own_and_is_listed():
    rng = np.random.default_rng(5)
    prices = price_set(random_run(rng, "dc", n_constraint=0), "dc")
    energy = prices.energy.copy()
    energy[1] = 0.0
    flat = replace(prices, energy=energy, loss=np.where([[False], [True], [False]], 0.0, prices.loss))
    flat = replace(flat, lmp=flat.energy + flat.loss + flat.congestion + flat.reactive)
    weights = pd.Series(0.2, index=prices.buses)
    comparison = compare_sets(
        flat, replace(flat, name="ac", lmp=flat.lmp + 1.0, energy=flat.energy + 1.0), reference_weights=weights
    )
    assert list(comparison.own_reference) == [prices.intervals[1]]
    assert leftover(comparison) < EXACT


def test_components_of_a_hub_are_weighted_sums():
    rng = np.random.default_rng(6)
    prices = price_set(random_run(rng, "ac"), "ac")
    hubs = pd.DataFrame({"hub": ["West", "West", "Lost"], "bus": ["B0", "B3", "B99"], "weight": [3.0, 1.0, 1.0]})
    wide = prices.with_hubs(hubs)
    assert list(wide.buses) == [*prices.buses, "West"]
    np.testing.assert_allclose(wide.lmp[:, -1], 0.75 * prices.lmp[:, 0] + 0.25 * prices.lmp[:, 3])
    np.testing.assert_allclose(wide.congestion_parts.summed(3), wide.congestion, atol=1e-9)


def test_missing_and_repeated_prices_are_told():
    run = random_run(np.random.default_rng(7), "dc")
    with pytest.raises(DataError, match="holds no prices of 'ac'"):
        price_set(run, "ac")
    run["prices"] = pd.concat([run["prices"], run["prices"].head(1)])
    with pytest.raises(DataError, match=r"bus B0 at .* stands twice"):
        price_set(run, "dc")


def test_a_reference_without_a_price_gives_way_to_the_mean_of_those_that_are_there():
    """Prices posted at a few nodes, components on another bus: the price differences need no reference at all."""
    rng = np.random.default_rng(3)
    base, against = (random_run(rng, name) for name in ("dc", "ac"))
    bus = sorted(set(base["prices"]["bus"]))
    elsewhere = pd.Series({"another bus": 1.0})
    found = compare(base, against, base="dc", against="ac", reference_weights=elsewhere)
    mean = compare(base, against, base="dc", against="ac", reference_weights=pd.Series(1.0, index=bus))
    pd.testing.assert_frame_equal(found.differences, mean.differences)
    pd.testing.assert_frame_equal(found.drivers, mean.drivers)
