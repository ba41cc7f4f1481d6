"""The demo week: the script's own parts, the committed folder, and the week cleared once per test run."""

from __future__ import annotations

import sys
from dataclasses import dataclass
from pathlib import Path
from types import ModuleType

import pytest

from lmpgap.scenario.read import read_scenario
from lmpgap.scenario.scenario import Scenario

SCENARIOS = Path(__file__).parent.parent.parent / "scenarios"
COMMITTED = SCENARIOS / "larkspur"
TRUTH = SCENARIOS / "larkspur_truth"


@pytest.fixture(scope="session")
def script() -> ModuleType:
    """The script, imported the way it finds its own parts when it is run."""
    sys.path.insert(0, str(SCENARIOS))
    try:
        import make_larkspur
    finally:
        sys.path.remove(str(SCENARIOS))
    return make_larkspur


@pytest.fixture(scope="session")
def scenario() -> Scenario:
    return read_scenario(COMMITTED)


@dataclass(frozen=True)
class ClearedWeek:
    """A freshly written folder of inputs, and the week cleared from it."""

    script: ModuleType
    out: Path
    scenario: Scenario
    cleared: dict
    first_try: dict

    def publish(self, faults: str) -> Path:
        """Write the operator's tables with the named faults; returns the scenario folder."""
        planted = self.script.Planted.parse(faults)
        self.script.write_outcome(self.out, self.scenario, self.cleared, self.first_try, planted)
        return self.out / "larkspur"


@pytest.fixture(scope="session")
def cleared_week(script: ModuleType, tmp_path_factory: pytest.TempPathFactory) -> ClearedWeek:
    out = tmp_path_factory.mktemp("demo")
    script.write_inputs(out / "larkspur")
    scenario = read_scenario(out / "larkspur")
    return ClearedWeek(script, out, scenario, *script.clear_week(scenario))
