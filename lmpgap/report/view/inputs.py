"""What the report needs to know of a scenario; satisfied by `lmpgap.scenario.scenario.Scenario`."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any, Protocol

import pandas as pd

from lmpgap.scenario.network import FloatArray
from lmpgap.scenario.settings import ScenarioSettings


class ReportScenario(Protocol):
    """Settings, tables, times and hashes of the inputs."""

    @property
    def settings(self) -> ScenarioSettings:
        """All of `scenario.toml`."""
        ...

    @property
    def tables(self) -> Mapping[str, pd.DataFrame]:
        """Every input table of the contract; empty where there is none."""
        ...

    @property
    def interval_starts(self) -> pd.DatetimeIndex:
        """Start of each interval, UTC."""
        ...

    @property
    def hashes(self) -> Mapping[str, str]:
        """SHA-256 of each input file by its name."""
        ...

    def reference_weights(self, position: int) -> FloatArray:
        """Return the weights of the price reference in one interval, (n_bus,), sum 1 [-]."""
        ...

    @property
    def warnings(self) -> tuple[Any, ...]:
        """What the check found doubtful; each prints as a sentence."""
        ...
