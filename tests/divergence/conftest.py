"""Solved runs that several tests of this folder look at."""

from __future__ import annotations

from pathlib import Path

import pytest

from lmpgap.runs.folder import RunFolder
from lmpgap.runs.price import price
from lmpgap.scenario.read import read_scenario
from lmpgap.scenario.scenario import Scenario
from tests.support.networks import NETWORKS

DEMO = Path(__file__).parents[2] / "scenarios" / "larkspur"


@pytest.fixture(scope="session")
def demo_week(tmp_path_factory) -> tuple[Scenario, RunFolder]:
    """The demo week under the formulation its operator clears with."""
    scenario = read_scenario(DEMO)
    return scenario, price(scenario, tmp_path_factory.mktemp("demo") / "run", formulations=("dc-loss",))


@pytest.fixture(scope="session", params=["case5", "case118"])
def solved_network(request, tmp_path_factory) -> tuple[Scenario, RunFolder]:
    """One interval of a benchmark network under all four formulations."""
    scenario = read_scenario(NETWORKS / request.param)
    return scenario, price(scenario, tmp_path_factory.mktemp(request.param) / "run")
