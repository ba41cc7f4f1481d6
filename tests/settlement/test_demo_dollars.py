"""The loss error planted in the demo week, in dollars: the truth lies beside the script that plants it."""

from __future__ import annotations

from pathlib import Path

import pandas as pd
import pytest

from lmpgap.runs.price import price
from lmpgap.scenario.read import read_scenario
from lmpgap.settlement.settle import settle

DEMO = Path(__file__).parents[2] / "scenarios" / "larkspur"
TRUTH = DEMO.parent / "larkspur_truth"


def test_planted_dollars_are_recovered_within_one_percent(tmp_path: Path) -> None:
    """Delivery factors of seven nodes were frozen for two days; the operator clears with the dc-loss dispatch."""
    scenario = read_scenario(DEMO)
    planted = pd.read_csv(TRUTH / "planted.csv")
    stale = planted[planted["fault"] == "stale-factors"]
    first, last = (pd.to_datetime(stale[c], utc=True).iloc[0] for c in ("first_interval", "last_interval"))
    starts = pd.DatetimeIndex(scenario.interval_starts)
    hours = [i for i, start in enumerate(starts) if first <= start <= last]
    run = price(scenario, tmp_path / "run", formulations=("dc-loss",), positions=hours, uniqueness=False)
    settlement = settle(run, scenario, against="dc-loss", write=False)
    assert settlement.options.posted_reference == "scenario"
    truth = pd.read_csv(TRUTH / "stale_factor_dollars.csv").set_index(["account", "node"])["amount"]
    for component in ("delivery-factor", "loss"):
        rows = settlement.rows[settlement.rows["component"] == component]
        found = rows.groupby(["account", "node"])[["amount", "amount_low", "amount_high"]].sum()
        own = found.loc[truth.index]
        assert (own["amount"] / truth).to_numpy() == pytest.approx(1.0, abs=0.01)
        assert ((own["amount_low"] <= truth) & (truth <= own["amount_high"])).all()
        # Nodes whose factors were not touched carry no error beyond rounding.
        other = found.drop(truth.index)
        assert ((other["amount_low"] <= 0.0) & (other["amount_high"] >= 0.0)).all()
    claims = settlement.claims.set_index("account")
    total = truth.groupby("account").sum()
    assert (claims.loc[total.index, "amount"] / total).to_numpy() == pytest.approx(1.0, abs=0.01)
    assert claims.loc[total.index, "material"].all()
