"""The second opinion agrees with the run, and says so when it does not."""

from pathlib import Path

import numpy as np
import pytest

from lmpgap.dispatch import restatement
from lmpgap.errors import LmpgapError
from lmpgap.runs import second_opinion as module
from lmpgap.runs.second_opinion import second_opinion
from lmpgap.scenario.read import read_scenario
from tests.support.scenarios import change_load, hourly_scenario

DEMO = Path(__file__).parents[2] / "scenarios" / "larkspur"


def test_the_demo_with_contingencies_and_interfaces_agrees() -> None:
    table = second_opinion(read_scenario(DEMO), [20])
    assert list(table["formulation"]) == ["dc", "dc-loss", "soc"]
    assert table["agrees"].all(), table.to_string()
    assert (table["cost_difference"] < 1e-7).all()


def test_a_wrong_price_is_seen(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    scenario = read_scenario(hourly_scenario(tmp_path / "scenario", "case5", hours=1))
    real = restatement.restate

    def off_by_a_dime(*arguments):
        told = real(*arguments)
        return restatement.Restated(
            status=told.status, objective=told.objective, price=told.price + np.eye(5)[2] * 0.1, p=told.p
        )

    monkeypatch.setattr(module, "restate", off_by_a_dime)
    table = second_opinion(scenario, [0], formulations=("dc",))
    assert not table["agrees"].any()
    assert table["largest_price_difference"].iloc[0] == pytest.approx(0.1, abs=1e-6)


def test_what_cannot_be_restated_says_why(tmp_path: Path) -> None:
    folder = hourly_scenario(tmp_path / "scenario", "case5", hours=2)
    change_load(folder, hour=1, factor=20.0)
    table = second_opinion(read_scenario(folder), [1], formulations=("dc",))
    assert table["remark"].str.startswith("no solution").all()
    with pytest.raises(LmpgapError, match="no independent statement of ac"):
        second_opinion(read_scenario(folder), [0], formulations=("ac",))
