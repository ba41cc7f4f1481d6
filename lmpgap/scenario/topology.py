"""Islands, dead buses, and outages that would split the network."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np

from lmpgap.scenario.faults import FaultLog, clip_text, listing
from lmpgap.scenario.intervals import IntervalSource, start_label
from lmpgap.scenario.network import BoolArray, Contingencies, IntArray, Network
from lmpgap.scenario.typed import ColumnTable


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
    normal = source.branch_in_service
    if network.contingencies is not None:
        _check_contingencies(tables, network, source, network.contingencies, log)
    has_source = np.zeros(network.n_bus, dtype=bool)
    has_source[network.resource_bus[source.resource_in_service]] = True
    dead = np.flatnonzero(dead_buses(network, normal, has_source))
    if dead.size:
        log.warn(
            tables["buses"].file,
            f"{dead.size:,} {'buses' if dead.size > 1 else 'bus'} in islands without a resource have no price: "
            f"{listing([network.buses[i] for i in dead[:5]], total=dead.size)}",
            row=int(tables["buses"].lines(dead[:1])[0]),
            column="bus",
            kind="dead bus",
        )
    island = network.islands(normal)
    alive = np.unique(island[has_source])
    if alive.size > 1:
        log.warn(
            tables["branches"].file,
            f"the network falls into {alive.size:,} islands with resources; each has an energy price of its own",
            kind="islands",
        )


def _check_contingencies(
    tables: Mapping[str, ColumnTable],
    network: Network,
    source: IntervalSource,
    contingencies: Contingencies,
    log: FaultLog,
) -> None:
    table = tables["contingencies"]
    first = {name: row for row, name in reversed(list(enumerate(table.text("contingency").tolist())))}
    refused = islanding_contingencies(network, source.branch_in_service)

    def line(name: str) -> int:
        return int(table.lines(np.array([first[name]]))[0])

    for i in np.flatnonzero(refused).tolist():
        name = contingencies.names[i]
        log.fault(
            table.file,
            f"would split the network by taking out {listing([network.branches[b] for b in contingencies.branches[i]])}"
            ": there are no outage factors for that",
            row=line(name),
            column="contingency",
            value=clip_text(name),
            allowed="contingencies that leave the network in one piece; leave this one out",
            kind="islanding contingency",
        )
    # During a planned outage more contingencies can split the network: those are left out while it lasts.
    spans = source.branch_outages
    for position in np.unique(np.clip(np.concatenate([spans.first, spans.end]), 0, source.n_interval - 1)):
        on = spans.apply(source.branch_in_service, int(position))
        if np.array_equal(on, source.branch_in_service):
            continue
        for i in np.flatnonzero(islanding_contingencies(network, on) & ~refused).tolist():
            name = contingencies.names[i]
            refused[i] = True
            out = [network.branches[b] for b in np.flatnonzero(source.branch_in_service & ~on)]
            log.warn(
                table.file,
                f"would split the network while {listing(out)} {'are' if len(out) > 1 else 'is'} out; it is not "
                f"checked in such intervals, the first of which starts {start_label(source.starts[position])}",
                row=line(name),
                column="contingency",
                value=clip_text(name),
                kind="islanding contingency",
            )
