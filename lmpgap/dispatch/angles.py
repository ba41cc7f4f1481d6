"""Bus angles behind the voltage products of a relaxation, and by how much they fail to close around loops."""

from __future__ import annotations

import numpy as np
from scipy import sparse
from scipy.sparse.linalg import splu

from lmpgap.scenario.network import BoolArray, FloatArray, IntArray, Network


def recover_angles(
    network: Network, branch_in_service: BoolArray, c: FloatArray, s: FloatArray
) -> tuple[FloatArray, float]:
    """Return bus angles that fit the branch angles of the products W = c + j s best.

    Branch angles are known up to full turns. They are unwrapped along the spanning tree of largest admittances,
    where angle differences are smallest, and then fitted by least squares weighted by ``|W| |y| / tap``, the
    synchronising power of the branch. In a relaxation the angles around a loop need not add up to zero; the
    "phase recovery condition" of "Branch Flow Model: Relaxations and Convexification", IEEE Transactions on Power
    Systems 28(3), 2013, is that they do.

    Parameters
    ----------
    branch_in_service : (n_branch,)
    c, s : (n_branch,)
        Real and imaginary part of V_from conj(V_to) [pu]; branches with both zero do not count.

    Returns
    -------
    angle : (n_bus,)
        [rad]; zero at the first bus of each island.
    loop_angle_deg : float
        Largest angle by which a branch misses the fitted angles of its ends [deg]: what the loops leave open, as the
        fit spreads it over their branches. Zero if and only if the angles around every loop add up.
    """
    magnitude = np.hypot(c, s)
    used = np.flatnonzero(branch_in_service & (magnitude > 0.0))
    if used.size == 0:
        return np.zeros(network.n_bus), 0.0
    start, end = network.from_bus[used], network.to_bus[used]
    difference = np.arctan2(s[used], c[used])
    impedance = np.hypot(network.r[used], network.x[used])
    n_bus, rows = network.n_bus, np.arange(used.size)
    difference_of = sparse.csr_array(
        (
            np.concatenate([np.ones(used.size), -np.ones(used.size)]),
            (np.concatenate([rows, rows]), np.concatenate([start, end])),
        ),
        shape=(used.size, n_bus),
    )
    tree = _tree(start, end, impedance, n_bus)
    reference = _references(start, end, n_bus)
    ground = sparse.csr_array(
        (np.ones(reference.size), (np.arange(reference.size), reference)), shape=(reference.size, n_bus)
    )
    along_tree = splu(sparse.csc_matrix(sparse.vstack([difference_of[tree], ground]))).solve(
        np.concatenate([difference[tree], np.zeros(reference.size)])
    )
    expected = difference_of @ along_tree
    closing = _wrapped(difference - expected)
    weight = magnitude[used] / (impedance * network.tap[used])
    normal = difference_of.T @ sparse.diags_array(weight) @ difference_of
    hold = np.zeros(n_bus)
    hold[reference] = weight.max()
    angle = splu(sparse.csc_matrix(normal + sparse.diags_array(hold))).solve(
        difference_of.T @ (weight * (expected + closing))
    )
    left_open = _wrapped(difference - difference_of @ angle)
    return angle, float(np.rad2deg(np.abs(left_open).max()))


def _wrapped(angle: FloatArray) -> FloatArray:
    """Return angles brought into (-pi, pi]."""
    return np.asarray(np.pi - np.mod(np.pi - angle, 2.0 * np.pi))


def _tree(start: IntArray, end: IntArray, impedance: FloatArray, n_bus: int) -> IntArray:
    """Return the branches of the spanning forest with the smallest impedances."""
    low, high = np.minimum(start, end), np.maximum(start, end)
    # Of parallel branches only the one with the smallest impedance can be in the tree.
    order = np.lexsort((impedance, high, low))
    pair = low[order] * n_bus + high[order]
    first = np.ones(order.size, dtype=bool)
    first[1:] = pair[1:] != pair[:-1]
    branch = order[first]
    branch = branch[low[branch] != high[branch]]
    graph = sparse.csr_array((impedance[branch], (low[branch], high[branch])), shape=(n_bus, n_bus))
    forest = sparse.coo_array(sparse.csgraph.minimum_spanning_tree(graph))
    chosen = np.isin(low[branch] * n_bus + high[branch], forest.row.astype(np.int64) * n_bus + forest.col)
    return np.asarray(branch[chosen], dtype=np.int64)


def _references(start: IntArray, end: IntArray, n_bus: int) -> IntArray:
    """Return the first bus of each island."""
    links = sparse.coo_array((np.ones(start.size), (start, end)), shape=(n_bus, n_bus))
    _, label = sparse.csgraph.connected_components(links, directed=False)
    return np.asarray(np.unique(label, return_index=True)[1], dtype=np.int64)
