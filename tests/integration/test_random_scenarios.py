"""Random small networks with all features mixed, held to everything that must be true of any solve."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pandas as pd
import pytest

from lmpgap.scenario.read import scenario_from_tables
from lmpgap.scenario.scenario import Scenario
from lmpgap.scenario.settings import ScenarioSettings
from tests.integration.checks import (
    check_finite_difference,
    check_interval,
    same_prices,
    scaled_offers,
    scaled_prices,
)
from tests.integration.random_scenarios import draw_scenario, draw_tables
from tests.integration.solving import Solver, live_buses

SEEDS = (1, 17, 20, 0, 10, 25, 34)
"""Few, and yet every feature (`test_the_few_seeds_have_every_feature`)."""
SWEEP = range(100, 300)

PRICE = 0.02
"""Two solves of the same problem written down differently [$/MWh]: both stop within their own tolerance."""


def features(scenario: Scenario) -> set[str]:
    """Return what a scenario has of the features that are drawn."""
    tables, settings = scenario.tables, scenario.settings
    branches, resources, offers = tables["branches"], tables["resources"], tables["offers"]
    ends = pd.Series([frozenset(pair) for pair in zip(branches["from_bus"], branches["to_bus"], strict=True)])
    contingencies = tables["contingencies"].groupby("contingency").size()
    islands = scenario.network.islands(np.ones(scenario.network.n_branch, dtype=bool))
    found = {
        "tap": (branches["tap_ratio"] != 1.0).any(),
        "phase shift": (branches["phase_shift_deg"] != 0.0).any(),
        "parallel branches": ends.duplicated().any(),
        "low impedance": (branches["x_pu"] < 2e-3 * settings.base_mva / 100).any(),
        "no resistance": (branches["r_pu"] == 0.0).any(),
        "charging": (branches["charging_pu"] > 0.0).any(),
        "angle limit": branches["angle_max_deg"].notna().any(),
        "rating": branches["normal_rating_mva"].notna().any(),
        "shunt conductance": (tables["buses"]["shunt_mw"] > 0.0).any(),
        "shunt susceptance": (tables["buses"]["shunt_mvar"] != 0.0).any(),
        "steps": (offers["price"] == offers["end_price"]).any(),
        "slopes": (offers["price"] != offers["end_price"]).any(),
        "negative offer": (offers["price"] < 0.0).any(),
        "lowest output": (resources["eco_min_mw"] > 0.0).any(),
        "no-load cost": (resources["no_load_cost"] > 0.0).any(),
        "bids": len(tables["bids"]) > 0,
        "penalties": settings.penalties.power_balance is not None,
        "hard limits": settings.penalties.power_balance is None,
        "interface": len(tables["interfaces"]) > 0,
        "single contingency": (contingencies == 1).any(),
        "double contingency": (contingencies == 2).any(),
        "outage": len(tables["outages"]) > 0,
        "dead bus": "Dead" in set(tables["buses"]["bus"]),
        "two islands": np.unique(islands[: len(tables["buses"]) - 1]).size > 1,
        "half hours": settings.interval_minutes == 30,
        "whole hours": settings.interval_minutes == 60,
        f"reference {settings.reference.kind}": True,
        f"susceptance {settings.dc.susceptance}": True,
        f"taps {settings.dc.taps}": True,
        f"base {settings.base_mva:g}": True,
    }
    return {name for name, there in found.items() if there}


def test_the_few_seeds_have_every_feature() -> None:
    few = set().union(*(features(draw_scenario(seed)) for seed in SEEDS))
    every = set().union(*(features(draw_scenario(seed)) for seed in range(40)))
    assert every - few == set()


@pytest.mark.parametrize("seed", SEEDS)
def test_whatever_is_solved_holds_together(seed: int) -> None:
    solver, rng = Solver.of(draw_scenario(seed)), np.random.default_rng(seed)
    planned = solver.interval(seed % 2)
    solved = check_interval(solver, planned, rng)
    assert any(item.split is not None for item in solved.values())
    for item in solved.values():
        if item.split is not None:
            assert item.certificate.verdict != "uncertified", item.certificate.reasons
            assert item.split.price_residual < 1e-3
            check_finite_difference(solver, planned, item, int(rng.choice(live_buses(item))))


@pytest.mark.parametrize("seed", SEEDS[:3])
def test_scaled_offers_scale_prices(seed: int) -> None:
    solver = Solver.of(draw_scenario(seed))
    planned = solver.interval(0)
    again = scaled_prices(solver, 3.0).solve(scaled_offers(planned, 3.0))
    for name, item in solver.solve(planned).items():
        same_prices(item, again[name], 3.0 * PRICE, factor=3.0)


def shuffled(seed: int) -> tuple[ScenarioSettings, dict[str, pd.DataFrame]]:
    """Return the scenario with the rows of every table in another order."""
    settings, tables = draw_tables(seed)
    return settings, {name: table.sample(frac=1.0, random_state=seed) for name, table in tables.items()}


def on_another_base(seed: int) -> tuple[ScenarioSettings, dict[str, pd.DataFrame]]:
    """Return the scenario on a power base twice as large."""
    settings, tables = draw_tables(seed)
    branches = tables["branches"].assign(
        r_pu=2.0 * tables["branches"]["r_pu"],
        x_pu=2.0 * tables["branches"]["x_pu"],
        charging_pu=tables["branches"]["charging_pu"] / 2.0,
    )
    return replace(settings, base_mva=2.0 * settings.base_mva), {**tables, "branches": branches}


@pytest.mark.parametrize("change", [shuffled, on_another_base])
@pytest.mark.parametrize("seed", SEEDS[:3])
def test_neither_the_order_of_rows_nor_the_power_base_matters(seed: int, change) -> None:  # type: ignore[no-untyped-def]
    first, second = Solver.of(draw_scenario(seed)), Solver.of(scenario_from_tables(*change(seed)))
    buses = [second.scenario.network.buses.index(bus) for bus in first.scenario.network.buses]
    again = second.solve(second.interval(0))
    for name, item in first.solve(first.interval(0)).items():
        same_prices(item, again[name], PRICE, place=buses)


@pytest.mark.parametrize("seed", [17, 41, 56, 86])
def test_losses_that_pay_only_while_they_are_free_settle(seed: int) -> None:
    """Negative prices in a pocket: with its cone a branch burns power, on its tangent losing costs."""
    solver = Solver.of(draw_scenario(seed))
    for position in range(solver.scenario.n_interval):
        item = solver.one(solver.interval(position), "dc-loss")
        assert item.result.loss_slack_open
        assert item.certificate.verdict == "certified", item.certificate.reasons


@pytest.mark.slow
@pytest.mark.parametrize("seed", SWEEP)
def test_sweep(seed: int) -> None:
    solver, rng = Solver.of(draw_scenario(seed)), np.random.default_rng(seed)
    for position in range(solver.scenario.n_interval):
        planned = solver.interval(position)
        solved = check_interval(solver, planned, rng)
        again = scaled_prices(solver, 3.0).solve(scaled_offers(planned, 3.0))
        for name, item in solved.items():
            same_prices(item, again[name], 3.0 * PRICE, factor=3.0)
            if item.split is not None and item.certificate.verdict != "uncertified":
                check_finite_difference(solver, planned, item, int(rng.choice(live_buses(item))))
    for change in (shuffled, on_another_base):
        other = Solver.of(scenario_from_tables(*change(seed)))
        buses = [other.scenario.network.buses.index(bus) for bus in solver.scenario.network.buses]
        again = other.solve(other.interval(1))
        for name, item in solver.solve(solver.interval(1)).items():
            same_prices(item, again[name], PRICE, place=buses)
