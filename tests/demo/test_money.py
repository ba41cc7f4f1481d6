"""Money balances in the demo week, whatever binds: by components and by constraints, in every formulation."""

from __future__ import annotations

from pathlib import Path

import pandas as pd
import pytest

from lmpgap.runs.folder import RunFolder
from lmpgap.runs.price import price
from lmpgap.scenario.scenario import Scenario

OF_PAYMENTS = 1e-4
"""Largest remainder relative to what load pays [-]."""

CHOSEN = [0, 12, 26, 42, 66]
"""A quiet night, an interface at its limit by day, a windy night behind a contingency, two scarce evenings."""


def relative_remainders(run: RunFolder) -> pd.DataFrame:
    """Remainder by basis relative to the load payments, one row per interval and formulation."""
    money = run.table("money").set_index(["interval_start", "formulation", "basis", "item"])["amount"]
    amounts = money.unstack("item")
    payments = amounts.xs("total", level="basis")["load payments"].abs()
    surplus = amounts.xs("total", level="basis")["surplus"]
    assert surplus.abs().max() > 100.0
    found = {}
    for basis in ("components", "constraints"):
        items = amounts.xs(basis, level="basis")
        # Every item added up here, so that the remainder is not taken at the table's word.
        parts = items.drop(columns=["remainder", *amounts.xs("total", level="basis").dropna(axis=1, how="all").columns])
        found[basis] = (surplus - parts.sum(axis=1)).abs() / payments
    return pd.DataFrame(found)


def test_money_balances_in_chosen_hours(scenario: Scenario, tmp_path: Path) -> None:
    run = price(scenario, tmp_path / "run", positions=CHOSEN, audit=False, uniqueness=False)
    constraints = run.table("constraints")
    binding = constraints[constraints["shadow_price"] > 0.5]
    for name, mine in binding.groupby("formulation"):
        assert {"contingency", "interface"} <= set(mine["kind"]), name
    remainders = relative_remainders(run)
    assert len(remainders) == 4 * len(CHOSEN)
    assert remainders.max().max() <= OF_PAYMENTS


@pytest.mark.slow
def test_money_balances_in_every_hour(scenario: Scenario, tmp_path: Path) -> None:
    run = price(scenario, tmp_path / "run", workers=2, audit=False, uniqueness=False)
    remainders = relative_remainders(run)
    assert len(remainders) == 4 * scenario.n_interval
    assert remainders.max().max() <= OF_PAYMENTS
