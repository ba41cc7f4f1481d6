"""A readable place for every bus when the scenario gives no map coordinates.

Distances in hops from a few far-apart pivots give a global picture; a few rounds of springs along branches and
short-range repulsion then pull close buses apart. Brandes and Pich, "Eigensolver Methods for Progressive
Multidimensional Scaling of Large Data", 2007; Fruchterman and Reingold, "Graph Drawing by Force-directed
Placement", 1991.
"""

from __future__ import annotations

import numpy as np
from scipy import sparse
from scipy.sparse.csgraph import connected_components, dijkstra
from scipy.spatial import cKDTree

from lmpgap.scenario.network import FloatArray, IntArray

_PIVOTS = 40
_ROUNDS = 90


def automatic_layout(n_bus: int, from_bus: IntArray, to_bus: IntArray) -> FloatArray:
    """Return positions in the unit square, shape (n_bus, 2); the same for the same network.

    Parameters
    ----------
    n_bus
        Number of buses.
    from_bus, to_bus : (n_branch,)
        Positions of the end buses.
    """
    weights = np.ones(len(from_bus))
    graph = sparse.coo_array((weights, (from_bus, to_bus)), shape=(n_bus, n_bus)).tocsr()
    graph = sparse.csr_array((graph + graph.T) > 0).astype(float)
    n_island, island = connected_components(graph, directed=False)
    sizes = np.bincount(island, minlength=n_island)
    place = np.zeros((n_bus, 2))
    offset = 0.0
    for number in np.argsort(-sizes, kind="stable"):
        members = np.flatnonzero(island == number)
        width = float(np.sqrt(len(members)))
        local = _island_layout(sparse.csr_array(graph[members][:, members]))
        place[members] = local * width + np.array([offset, 0.0])
        offset += width * 1.15 + 0.3
    return _to_unit_square(place)


def _island_layout(graph: sparse.csr_array) -> FloatArray:
    """Return positions of one connected part in the unit square."""
    n = graph.shape[0]
    if n == 1:
        return np.full((1, 2), 0.5)
    distance = _pivot_distances(graph, min(_PIVOTS, n))
    centred = distance**2
    centred = -0.5 * (centred - centred.mean(axis=0) - centred.mean(axis=1, keepdims=True) + centred.mean())
    left, values, _ = np.linalg.svd(centred, full_matrices=False)
    left = left * np.where(left[np.abs(left).argmax(axis=0), np.arange(left.shape[1])] < 0, -1.0, 1.0)
    place = np.zeros((n, 2))
    kept = min(2, left.shape[1])
    place[:, :kept] = left[:, :kept] * np.sqrt(values[:kept])
    angle = np.arange(n) * 2.399963  # a golden-angle spiral keeps coinciding buses apart, without chance
    place = _to_unit_square(place) + 1e-3 * np.column_stack([np.cos(angle), np.sin(angle)])
    return _to_unit_square(_relax(place, graph))


def _pivot_distances(graph: sparse.csr_array, n_pivot: int) -> FloatArray:
    """Return hops from every bus to pivots that are chosen as far apart as possible, (n, n_pivot)."""
    n = graph.shape[0]
    columns = np.zeros((n, n_pivot))
    nearest = np.full(n, np.inf)
    pivot = int(np.argmax(np.diff(graph.indptr)))
    for k in range(n_pivot):
        columns[:, k] = dijkstra(graph, directed=False, unweighted=True, indices=pivot)
        nearest = np.minimum(nearest, columns[:, k])
        pivot = int(np.argmax(nearest))
    return columns


def _relax(place: FloatArray, graph: sparse.csr_array) -> FloatArray:
    """Return positions after some rounds of springs along branches and repulsion at short range."""
    n = len(place)
    ideal = 1.0 / np.sqrt(n)
    rows, cols = sparse.triu(graph).nonzero()
    step = 0.12
    for _ in range(_ROUNDS):
        force = np.zeros_like(place)
        along = place[rows] - place[cols]
        length = np.linalg.norm(along, axis=1, keepdims=True)
        pull = along * (length / ideal)
        np.add.at(force, rows, -pull)
        np.add.at(force, cols, pull)
        pairs = cKDTree(place).query_pairs(3.0 * ideal, output_type="ndarray")
        if len(pairs):
            apart = place[pairs[:, 0]] - place[pairs[:, 1]]
            squared = np.maximum((apart**2).sum(axis=1, keepdims=True), 1e-9)
            push = apart * (ideal**2 / squared)
            np.add.at(force, pairs[:, 0], push)
            np.add.at(force, pairs[:, 1], -push)
        size = np.maximum(np.linalg.norm(force, axis=1, keepdims=True), 1e-12)
        place = place + force / size * np.minimum(size, step * ideal * 4)
        step *= 0.97
    return place


def _to_unit_square(place: FloatArray) -> FloatArray:
    """Return positions scaled by one factor into the unit square and centred there."""
    low, high = place.min(axis=0), place.max(axis=0)
    span = float(np.max(high - low))
    if span <= 0.0:
        return np.full_like(place, 0.5)
    return np.asarray((place - (low + high) / 2.0) / span + 0.5)
