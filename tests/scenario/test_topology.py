"""Islands, dead buses, and contingencies that would split the network; checked on random graphs."""

from __future__ import annotations

from pathlib import Path

import numpy as np
from hypothesis import given, settings
from hypothesis import strategies as st

from lmpgap.scenario.network import Contingencies
from lmpgap.scenario.read import read_scenario
from lmpgap.scenario.topology import BranchEnds, cut_labels, islanding_contingencies, islands, splitting
from tests.scenario.folder import BASE, HOURS, append, faults, warnings
from tests.support.networks import NETWORKS


@st.composite
def graphs(draw: st.DrawFn) -> tuple[BranchEnds, np.ndarray, list[np.ndarray]]:
    n_bus = draw(st.integers(2, 12))
    pairs = st.tuples(st.integers(0, n_bus - 1), st.integers(0, n_bus - 1)).filter(lambda pair: pair[0] != pair[1])
    branches = np.asarray(draw(st.lists(pairs, min_size=1, max_size=24)), dtype=np.int64)
    on = np.asarray(draw(st.lists(st.booleans(), min_size=len(branches), max_size=len(branches))))
    outage = st.lists(st.integers(0, len(branches) - 1), min_size=1, max_size=4, unique=True)
    outages = [np.asarray(out, dtype=np.int64) for out in draw(st.lists(outage, min_size=1, max_size=8))]
    return BranchEnds(n_bus, branches[:, 0], branches[:, 1]), on, outages


def count(ends: BranchEnds, on: np.ndarray) -> int:
    return int(islands(ends, on).max()) + 1


@given(graphs())
@settings(max_examples=300)
def test_islanding_contingencies_are_those_that_add_an_island(
    case: tuple[BranchEnds, np.ndarray, list[np.ndarray]],
) -> None:
    ends, on, outages = case
    contingencies = Contingencies(
        names=tuple(map(str, range(len(outages)))), branches=tuple(outages), monitored=np.ones(on.size, dtype=bool)
    )
    found = islanding_contingencies(ends, on, contingencies)
    for out, split in zip(outages, found, strict=True):
        after = on.copy()
        after[out] = False
        assert split == (count(ends, after) > count(ends, on))


@given(graphs())
@settings(max_examples=300)
def test_contingencies_during_outages(case: tuple[BranchEnds, np.ndarray, list[np.ndarray]]) -> None:
    # The labels of the whole network tell also what splits it while other branches are out.
    ends, on, outages = case
    contingencies = Contingencies(
        names=tuple(map(str, range(len(outages)))), branches=tuple(outages), monitored=np.ones(on.size, dtype=bool)
    )
    everything = np.ones(on.size, dtype=bool)
    found = splitting(cut_labels(ends, everything), contingencies, np.flatnonzero(~on))
    np.testing.assert_array_equal(found, islanding_contingencies(ends, on, contingencies))


def test_islands_agree_with_those_of_the_network() -> None:
    network = read_scenario(NETWORKS / "case118").network
    on = np.ones(network.n_branch, dtype=bool)
    on[np.arange(0, network.n_branch, 3)] = False
    mine, other = islands(network, on), network.islands(on)
    # The same partition, whatever the numbers are.
    assert (
        len(set(zip(mine.tolist(), other.tolist(), strict=True))) == len(set(mine.tolist())) == len(set(other.tolist()))
    )


def test_bridges_of_118_buses() -> None:
    # Single outages that split the network, by removing each branch in turn.
    network = read_scenario(NETWORKS / "case118").network
    on = np.ones(network.n_branch, dtype=bool)
    single = Contingencies(
        names=network.branches, branches=tuple(np.array([b]) for b in range(network.n_branch)), monitored=on
    )
    found = islanding_contingencies(network, on, single)
    expected = []
    for branch in range(network.n_branch):
        after = on.copy()
        after[branch] = False
        expected.append(network.islands(after).max() > 0)
    assert found.tolist() == expected
    assert 0 < found.sum() < 20


def test_dead_buses_and_islands_are_warnings(tmp_path: Path) -> None:
    changes = {**append("buses.csv", "Lost,,230,0.9,1.1,,,,", "Gone,,230,0.9,1.1,,,,")}
    assert warnings(tmp_path / "dead", changes) == [
        "buses.csv, line 5, column bus: 2 buses in islands without a resource will have no price: Lost, Gone"
    ]
    changes |= append("resources.csv", "Other,Lost,0,0,,,,")
    found = warnings(tmp_path / "islands", changes)
    assert "branches.csv: the network falls into 2 islands with resources; each has an energy price of its own" in found


def test_all_islanding_contingencies_are_named(tmp_path: Path) -> None:
    branches = BASE["branches.csv"] + "stub,South,End,0,0.1,,,,,\n"
    changes = {
        "branches.csv": branches,
        **append("buses.csv", "End,,230,0.9,1.1,,,,"),
        "contingencies.csv": "contingency,branch\nA,NS\nB,stub\nC,NS\nC,NE\n",
    }
    found = faults(tmp_path, changes)
    assert [fault.split(" (found ")[1].split("'")[1] for fault in found] == ["B", "C"]


def test_a_contingency_that_splits_during_an_outage_is_a_warning(tmp_path: Path) -> None:
    changes = {
        "contingencies.csv": "contingency,branch\nloss of NS,NS\nloss of SE,SE\n",
        "outages.csv": f"kind,id,first_interval,last_interval\nbranch,NE,{HOURS[1]},{HOURS[1]}\n",
    }
    found = warnings(tmp_path, changes)
    assert found == [
        f"contingencies.csv, line {line}, column contingency: would split the network while NE is out; it is not "
        f"checked in such intervals, the first of which starts 2026-03-08T07:00:00+00:00 (found 'loss of {name}')"
        for line, name in ((2, "NS"), (3, "SE"))
    ]
