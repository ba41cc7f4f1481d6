"""Islands, dead buses, and outages that would split the network."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np

from lmpgap.scenario.faults import FaultLog, listing
from lmpgap.scenario.intervals import IntervalSource
from lmpgap.scenario.network import BoolArray, Contingencies, IntArray, Network
from lmpgap.scenario.parse import ColumnTable


def dead_buses(network: Network, branch_in_service: BoolArray, has_source: BoolArray) -> BoolArray:
    """Return the buses of islands in which nothing can generate, shape (n_bus,).

    Parameters
    ----------
    has_source : (n_bus,)
        True where a resource in service is connected.
    """
    island = network.islands(branch_in_service)
    alive = np.zeros(int(island.max(initial=-1)) + 1, dtype=bool)
    alive[island[has_source]] = True
    return ~alive[island]


def cut_labels(network: Network, branch_in_service: BoolArray) -> IntArray:
    """Return a 64-bit label per branch: a set of branches whose labels can be XOR-ed to zero is a cut.

    Every branch outside a spanning forest gets a random label; a branch of the forest gets the XOR of the
    labels of all other branches across the cut it defines. A set of branches separates two parts of the
    network exactly if some of its labels XOR to zero (up to a chance of 2^-60 for sets of a few branches).
    Branches out of service have label -1 and are never part of a cut.

    Notes
    -----
    Cycle-space sampling: D. Pritchard and R. Thurimella, "Fast computation of small cuts via cycle space
    sampling", ACM Transactions on Algorithms 7(4), 2011, section 2.
    """
    on = np.flatnonzero(branch_in_service)
    ends = np.stack([network.from_bus[on], network.to_bus[on]])
    order, parent, parent_branch = _spanning_forest(network.n_bus, ends)
    in_forest = np.zeros(on.size, dtype=bool)
    in_forest[parent_branch[parent_branch >= 0]] = True
    random = np.random.default_rng(20110101).integers(1, 2**62, size=on.size, dtype=np.int64)
    label = np.where(in_forest, 0, random)
    carried = np.zeros(network.n_bus, dtype=np.int64)
    np.bitwise_xor.at(carried, ends[0], label)
    np.bitwise_xor.at(carried, ends[1], label)
    # From the leaves up: what a subtree carries is what leaves it besides the branch above it.
    above = carried.tolist()
    for bus in reversed(order):
        if parent[bus] >= 0:
            above[parent[bus]] ^= above[bus]
            label[parent_branch[bus]] = above[bus]
    labels = np.full(network.n_branch, -1, dtype=np.int64)
    labels[on] = label
    return labels


def _spanning_forest(n_bus: int, ends: IntArray) -> tuple[list[int], list[int], IntArray]:
    """Return buses in an order in which parents come first, each one's parent, and the branch to it."""
    neighbours: list[list[tuple[int, int]]] = [[] for _ in range(n_bus)]
    for branch, (a, b) in enumerate(zip(ends[0].tolist(), ends[1].tolist(), strict=True)):
        neighbours[a].append((b, branch))
        neighbours[b].append((a, branch))
    parent = [-1] * n_bus
    parent_branch = np.full(n_bus, -1, dtype=np.int64)
    seen = [False] * n_bus
    order: list[int] = []
    for root in range(n_bus):
        if seen[root]:
            continue
        seen[root] = True
        tree = [root]
        for bus in tree:
            for other, branch in neighbours[bus]:
                if not seen[other]:
                    seen[other] = True
                    parent[other] = bus
                    parent_branch[other] = branch
                    tree.append(other)
        order += tree
    return order, parent, parent_branch


def islanding_contingencies(
    network: Network, branch_in_service: BoolArray, contingencies: Contingencies | None = None
) -> BoolArray:
    """Return which contingencies would split the network, shape (n_contingency,).

    Parameters
    ----------
    branch_in_service : (n_branch,)
        The topology before the contingency; branches already out are no part of it.
    contingencies
        Those of the network unless given.
    """
    contingencies = network.contingencies if contingencies is None else contingencies
    if contingencies is None:
        return np.zeros(0, dtype=bool)
    labels = cut_labels(network, branch_in_service)
    return np.asarray([_dependent(labels[branches].tolist()) for branches in contingencies.branches], dtype=bool)


def _dependent(labels: list[int]) -> bool:
    """Return whether some of the labels XOR to zero: Gaussian elimination over bits."""
    basis: dict[int, int] = {}
    for label in labels:
        if label < 0:
            continue
        while label:
            top = label.bit_length()
            if top not in basis:
                basis[top] = label
                break
            label ^= basis[top]
        else:
            return True
    return False


def check_topology(tables: Mapping[str, ColumnTable], network: Network, source: IntervalSource, log: FaultLog) -> None:
    """Report contingencies that split the network (faults), and islands and dead buses (warnings)."""
    contingencies = network.contingencies
    if contingencies is not None:
        table = tables["contingencies"]
        first = {name: row for row, name in reversed(list(enumerate(table.text("contingency").tolist())))}
        for i in np.flatnonzero(islanding_contingencies(network, source.branch_in_service)):
            name = contingencies.names[i]
            out = [network.branches[b] for b in contingencies.branches[i]]
            log.fault(
                table.file,
                f"would split the network by taking out {listing(out)}: outage factors do not exist",
                row=int(table.lines(np.array([first[name]]))[0]),
                column="contingency",
                value=name,
                allowed="outages that leave every bus connected as before; leave this one out",
                kind="islanding contingency",
            )
