"""The benchmark networks, read by the project's reader and by an independent one."""

from __future__ import annotations

import dataclasses
from typing import Any

import numpy as np
import pytest

from lmpgap.scenario.network import incidence
from lmpgap.scenario.read import read_scenario
from tests.support.networks import NETWORKS, load_network

NAMES = sorted(path.name for path in NETWORKS.iterdir() if path.is_dir())


def assert_equal(mine: Any, other: Any, path: str = "") -> None:
    for item in dataclasses.fields(mine):
        a, b, name = getattr(mine, item.name), getattr(other, item.name), path + item.name
        if dataclasses.is_dataclass(a):
            assert_equal(a, b, f"{name}.")
        elif isinstance(a, np.ndarray):
            np.testing.assert_array_equal(a, b, err_msg=name, strict=True)
        else:
            assert a == b, name


@pytest.mark.parametrize("name", NAMES)
def test_arrays_equal_those_of_an_independent_reader(name: str) -> None:
    scenario = read_scenario(NETWORKS / name)
    network, inputs = load_network(name)
    assert_equal(scenario.network, network)
    assert_equal(scenario.inputs(0), inputs)
    assert scenario.n_interval == 1
    assert scenario.warnings == ()


def test_tables_hold_what_the_files_hold() -> None:
    scenario = read_scenario(NETWORKS / "case118")
    branches = scenario.tables["branches"]
    assert len(branches) == 186
    assert list(branches.columns[:5]) == ["branch", "from_bus", "to_bus", "r_pu", "x_pu"]
    assert branches["emergency_rating_mva"].isna().all()
    assert branches["in_service"].all()
    assert set(scenario.hashes) == {f"{name}.csv" for name in ("branches", "buses", "loads", "offers", "resources")} | {
        "scenario.toml"
    }
    assert incidence(scenario.network.from_bus, 118).shape == (186, 118)
