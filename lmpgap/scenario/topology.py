"""Islands, dead buses, and outages that would split the network.

Plain lists and numpy, so that checking a scenario imports nothing else.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Protocol

import numpy as np

from lmpgap.scenario.faults import FaultLog, clip_text, listing
from lmpgap.scenario.intervals import IntervalSource, start_label
from lmpgap.scenario.network import BoolArray, Contingencies, IntArray
from lmpgap.scenario.typed import ColumnTable


class Ends(Protocol):
    """What tells where branches lead; a `Network` has it."""

    @property
    def n_bus(self) -> int:
        """Number of buses."""

    @property
    def from_bus(self) -> IntArray:
        """Positions of the from ends, (n_branch,)."""

    @property
    def to_bus(self) -> IntArray:
        """Positions of the to ends, (n_branch,)."""


@dataclass(frozen=True)
class BranchEnds:
    """Where branches lead, without the rest of the network."""

    n_bus: int
    from_bus: IntArray
    to_bus: IntArray


@dataclass(frozen=True)
class _Forest:
    """A spanning forest: buses in an order in which parents come first.

    Attributes
    ----------
    order
        All buses, island by island.
    parent, parent_branch
        Bus above each bus and the branch to it, -1 for the first bus of an island.
    island : (n_bus,)
        Number of the island, counted from zero.
    """

    order: list[int]
    parent: list[int]
    parent_branch: list[int]
    island: IntArray


def _spanning_forest(ends: Ends, branch_in_service: BoolArray) -> _Forest:
    on = np.flatnonzero(branch_in_service)
    neighbours: list[list[tuple[int, int]]] = [[] for _ in range(ends.n_bus)]
    for branch, a, b in zip(on.tolist(), ends.from_bus[on].tolist(), ends.to_bus[on].tolist(), strict=True):
        neighbours[a].append((b, branch))
        neighbours[b].append((a, branch))
    parent, parent_branch, island = [-1] * ends.n_bus, [-1] * ends.n_bus, [-1] * ends.n_bus
    order: list[int] = []
    n_island = 0
    for root in range(ends.n_bus):
        if island[root] >= 0:
            continue
        island[root] = n_island
        tree = [root]
        for bus in tree:  # grows while it is walked through
            for other, branch in neighbours[bus]:
                if island[other] < 0:
                    island[other], parent[other], parent_branch[other] = n_island, bus, branch
                    tree.append(other)
        order += tree
        n_island += 1
    return _Forest(order, parent, parent_branch, np.asarray(island, dtype=np.int64))


def islands(ends: Ends, branch_in_service: BoolArray) -> IntArray:
    """Return the island of each bus, shape (n_bus,), counted from zero in the order of their first buses."""
    return _spanning_forest(ends, branch_in_service).island


def cut_labels(ends: Ends, branch_in_service: BoolArray) -> IntArray:
    """Return a 62-bit label per branch, shape (n_branch,): sets of branches that XOR to zero are cuts.

    Every branch outside a spanning forest gets a random label; a branch of the forest gets the XOR of the
    labels of all other branches across the cut that it defines. A set of branches contains a cut exactly if
    some of its labels XOR to zero, up to a chance of 2^-62 for each subset; the random numbers are seeded, so
    that the answer is always the same. Branches out of service have the label -1.

    Notes
    -----
    Cycle-space sampling: D. Pritchard and R. Thurimella, "Fast computation of small cuts via cycle space
    sampling", ACM Transactions on Algorithms 7(4), 2011, section 2.
    """
    forest = _spanning_forest(ends, branch_in_service)
    labels = np.random.default_rng(20110101).integers(1, 2**62, size=branch_in_service.size, dtype=np.int64)
    in_forest = np.asarray(forest.parent_branch, dtype=np.int64)
    labels[in_forest[in_forest >= 0]] = 0
    labels[~branch_in_service] = 0
    carried = np.zeros(ends.n_bus, dtype=np.int64)
    np.bitwise_xor.at(carried, ends.from_bus, labels)
    np.bitwise_xor.at(carried, ends.to_bus, labels)
    # From the leaves up: what a subtree carries is what leaves it beside the branch above it.
    above: list[int] = carried.tolist()
    for bus in reversed(forest.order):
        if forest.parent[bus] >= 0:
            above[forest.parent[bus]] ^= above[bus]
            labels[forest.parent_branch[bus]] = above[bus]
    labels[~branch_in_service] = -1
    return labels


def splitting(labels: IntArray, contingencies: Contingencies, out: IntArray | None = None) -> BoolArray:
    """Return which contingencies would split the network, shape (n_contingency,).

    Parameters
    ----------
    labels : (n_branch,)
        As from `cut_labels`.
    out
        Branches that are out before the contingency, although the labels count them as in service. A
        contingency then splits the network if it completes a cut together with some of them.
    """
    basis = _basis([] if out is None else labels[out].tolist())
    reduced = labels.copy()
    usable = labels >= 0
    for top in sorted(basis, reverse=True):
        hit = usable & ((reduced >> (top - 1)) & 1 == 1)
        reduced[hit] ^= basis[top]
    if out is not None:
        reduced[out] = -1
    size = np.asarray([branches.size for branches in contingencies.branches])
    found = np.zeros(size.size, dtype=bool)
    single = np.flatnonzero(size == 1)
    if single.size:
        found[single] = reduced[np.concatenate([contingencies.branches[i] for i in single])] == 0
    for i in np.flatnonzero(size > 1).tolist():
        together = [label for label in reduced[contingencies.branches[i]].tolist() if label >= 0]
        found[i] = len(_basis(together)) < len(together)
    return found


def _basis(labels: list[int]) -> dict[int, int]:
    """Return independent combinations of the labels by their highest bit: Gaussian elimination over bits."""
    basis: dict[int, int] = {}
    for label in labels:
        while label > 0:
            top = label.bit_length()
            if top not in basis:
                basis[top] = label
                break
            label ^= basis[top]
    return basis


def islanding_contingencies(ends: Ends, branch_in_service: BoolArray, contingencies: Contingencies) -> BoolArray:
    """Return which contingencies would split the network, shape (n_contingency,).

    Parameters
    ----------
    branch_in_service : (n_branch,)
        The topology before the contingency; branches that are out already are no part of it.
    """
    return splitting(cut_labels(ends, branch_in_service), contingencies)


def check_topology(
    tables: Mapping[str, ColumnTable],
    positions: Mapping[str, Mapping[str, int]],
    contingencies: Contingencies | None,
    source: IntervalSource,
    log: FaultLog,
) -> None:
    """Report contingencies that split the network (faults), and islands and dead buses (warnings)."""
    buses, branches = tables["buses"], tables["branches"]
    ends = BranchEnds(
        buses.n_row,
        branches.text("from_bus").positions(positions["bus"]),
        branches.text("to_bus").positions(positions["bus"]),
    )
    if contingencies is not None:
        _check_contingencies(tables, ends, source, contingencies, log)
    island = islands(ends, source.branch_in_service)
    has_source = np.zeros(buses.n_row, dtype=bool)
    resource_bus = tables["resources"].text("bus").positions(positions["bus"])
    has_source[resource_bus[source.resource_in_service]] = True
    alive = np.unique(island[has_source])
    dead = np.flatnonzero(~np.isin(island, alive))
    if dead.size:
        names = buses.text("bus")
        log.warn(
            buses.file,
            f"{dead.size:,} {'buses' if dead.size > 1 else 'bus'} in islands without a resource will have no price: "
            f"{listing([names.at(int(i)) for i in dead[:5]], total=dead.size)}",
            row=int(buses.lines(dead[:1])[0]),
            column="bus",
            kind="dead bus",
        )
    if alive.size > 1:
        log.warn(
            branches.file,
            f"the network falls into {alive.size:,} islands with resources; each has an energy price of its own",
            kind="islands",
        )


def _check_contingencies(
    tables: Mapping[str, ColumnTable],
    ends: Ends,
    source: IntervalSource,
    contingencies: Contingencies,
    log: FaultLog,
) -> None:
    table, branch = tables["contingencies"], tables["branches"].text("branch")
    first = {name: row for row, name in reversed(list(enumerate(table.text("contingency").tolist())))}
    normal = source.branch_in_service
    labels = cut_labels(ends, normal)
    refused = splitting(labels, contingencies)

    def line(name: str) -> int:
        return int(table.lines(np.array([first[name]]))[0])

    def branches(positions: IntArray) -> str:
        return listing([branch.at(int(position)) for position in positions])

    for i in np.flatnonzero(refused).tolist():
        name = contingencies.names[i]
        log.fault(
            table.file,
            f"would split the network by taking out {branches(contingencies.branches[i])}: there are no outage "
            "factors for that",
            row=line(name),
            column="contingency",
            value=clip_text(name),
            allowed="contingencies that leave the network in one piece; leave this one out",
            kind="islanding contingency",
        )
    # During a planned outage more contingencies can split the network: those are left out while it lasts.
    spans = source.branch_outages
    changes = np.unique(np.concatenate([spans.first, spans.end]))
    for position in changes[changes < source.n_interval].tolist():
        out = np.flatnonzero(normal & ~spans.apply(normal, position))
        if out.size == 0:
            continue
        for i in np.flatnonzero(splitting(labels, contingencies, out) & ~refused).tolist():
            name = contingencies.names[i]
            refused[i] = True
            log.warn(
                table.file,
                f"would split the network while {branches(out)} {'are' if out.size > 1 else 'is'} out; it is not "
                f"checked in such intervals, the first of which starts {start_label(source.starts[position])}",
                row=line(name),
                column="contingency",
                value=clip_text(name),
                kind="islanding contingency",
            )
