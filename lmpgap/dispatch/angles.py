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
    used = np.flatnonzero(branch_in_service & ((c != 0.0) | (s != 0.0)))
    return AngleFit(network, used)(c, s)


class AngleFit:
    """`recover_angles` for a given set of branches, with everything prepared that the products do not change.

    Parameters
    ----------
    used : (n_used,)
        Positions of the branches that count.
    """

    def __init__(self, network: Network, used: IntArray) -> None:
        self._used, self._n_bus = used, network.n_bus
        if used.size == 0:
            return
        start, end = network.from_bus[used], network.to_bus[used]
        impedance = np.hypot(network.r[used], network.x[used])
        self._stiffness = 1.0 / (impedance * network.tap[used])
        rows = np.arange(used.size)
        self._difference = sparse.csr_array(
            (
                np.concatenate([np.ones(used.size), -np.ones(used.size)]),
                (np.concatenate([rows, rows]), np.concatenate([start, end])),
            ),
            shape=(used.size, network.n_bus),
        )
        self._gather = sparse.csr_array(self._difference.T)
        self._reference = _references(start, end, network.n_bus)
        self._tree = _tree(start, end, impedance, network.n_bus)
        n_reference = self._reference.size
        ground = sparse.csr_array(
            (np.ones(n_reference), (np.arange(n_reference), self._reference)), shape=(n_reference, network.n_bus)
        )
        self._along_tree = splu(sparse.csc_matrix(sparse.vstack([self._difference[self._tree], ground])))

    def __call__(self, c: FloatArray, s: FloatArray) -> tuple[FloatArray, float]:
        """Return angles and the largest angle left open, see `recover_angles`."""
        if self._used.size == 0:
            return np.zeros(self._n_bus), 0.0
        branch_angle = np.arctan2(s[self._used], c[self._used])
        fixed = np.zeros(self._reference.size)
        along_tree = self._along_tree.solve(np.concatenate([branch_angle[self._tree], fixed]))
        expected = self._difference @ along_tree
        unwrapped = expected + _wrapped(branch_angle - expected)
        weight = np.hypot(c[self._used], s[self._used]) * self._stiffness
        weighted = self._difference.copy()
        weighted.data = weighted.data * np.repeat(weight, np.diff(weighted.indptr))
        hold = np.zeros(self._n_bus)
        hold[self._reference] = weight.max()
        normal = self._gather @ weighted + sparse.diags_array(hold, format="csr")
        angle = splu(sparse.csc_matrix(normal), permc_spec="MMD_AT_PLUS_A", diag_pivot_thresh=0.0).solve(
            self._gather @ (weight * unwrapped)
        )
        left_open = _wrapped(branch_angle - self._difference @ angle)
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
