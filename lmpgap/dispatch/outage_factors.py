"""Line outage distribution factors of single and multiple outages, and screening with them.

With b the susceptances of the linear model, A the (n_branch, n_bus) incidence and B = A' diag(b) A, the transfer of
one unit from the from to the to bus of branch o puts h_mo = b_m A_m B^-1 A_o' on branch m. Taking out the set O moves
its flows onto the rest by

    factors_{m,O} = h_{m,O} (I - h_{O,O})^-1            post-outage flow: F_m + factors_{m,O} F_O

"Generalized Line Outage Distribution Factors", IEEE Trans. Power Systems 22(2), 2007; for a single outage it is
the familiar h_mo / (1 - h_oo). I - h_{O,O} is singular exactly when the outage splits the network.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
from scipy import sparse
from scipy.sparse.linalg import SuperLU, splu

from lmpgap.dispatch.limits import FlowLimits
from lmpgap.dispatch.linear_model import linear_branches
from lmpgap.scenario.network import BoolArray, Contingencies, FloatArray, IntArray, Network
from lmpgap.scenario.settings import DcConvention

SINGULAR = 1e-8
"""An outage whose I - h_{O,O} has a determinant below this splits the network: on the 118-bus network the
splits leave rounding (below 1e-15), the weakest remaining path 0.05."""

_BLOCK_ELEMENTS = 16_000_000
"""Factors are made in blocks of at most this many numbers (128 MB), so that memory does not grow with the square."""

_CACHE_ELEMENTS = 64_000_000
"""All blocks together are kept for the next pass when they have at most this many numbers (512 MB)."""


def linear_susceptance(network: Network, branch_in_service: BoolArray, convention: DcConvention) -> FloatArray:
    """Return the susceptance of each branch in the linear model [pu], (n_branch,), zero when out of service."""
    return np.where(branch_in_service, linear_branches(network, convention).susceptance, 0.0)


@dataclass(frozen=True, kw_only=True)
class ViolatedPairs:
    """Post-outage flows above their limit.

    Attributes
    ----------
    contingency : (n_pair,)
        Position in the network's contingencies.
    monitored : (n_pair,)
        Position of the branch.
    sign : (n_pair,)
        +1 where the flow is too large from -> to, -1 the other way.
    excess : (n_pair,)
        Flow beyond the limit [pu].
    """

    contingency: IntArray
    monitored: IntArray
    sign: IntArray
    excess: FloatArray

    @property
    def n_pair(self) -> int:
        """Number of pairs."""
        return self.contingency.size


class OutageFactors:
    """Outage factors of a network's contingencies in one topology.

    Parameters
    ----------
    network
        With ``contingencies``; without any there is nothing to screen.
    branch_in_service : (n_branch,)
        Branches that are already out have no flow to shift, and are left out of a contingency.
    convention
        Susceptances of the linear model; outage factors are lossless in every formulation.

    Attributes
    ----------
    splitting : tuple of str
        Contingencies that would split the network in this topology. They are not screened; a reader must be told.
    """

    def __init__(self, network: Network, branch_in_service: BoolArray, convention: DcConvention) -> None:
        self._network = network
        self._b = linear_susceptance(network, branch_in_service, convention)
        self._incidence = sparse.csr_array(network.from_incidence() - network.to_incidence())
        self._factorised, self._kept = _factorise(network, branch_in_service, self._incidence, self._b)
        contingencies = network.contingencies
        names = contingencies.names if contingencies is not None else ()
        self._out = [
            branches[branch_in_service[branches]] for branches in (contingencies.branches if contingencies else ())
        ]
        self._monitored = (
            np.flatnonzero(contingencies.monitored & branch_in_service & np.isfinite(network.emergency_rating))
            if contingencies is not None
            else np.zeros(0, np.int64)
        )
        self._kept_blocks: list[tuple[IntArray, FloatArray]] | None = None
        self._kept_factors: dict[int, FloatArray] = {}
        self._singles, self._multiples, splitting = self._classify()
        self.splitting = tuple(names[k] for k in splitting)

    def factors(self, out: IntArray) -> FloatArray:
        """Return the factors of one outage on all branches, (n_branch, len(out)) [-].

        The outaged branches themselves have minus the identity: their post-outage flow is zero.

        Raises
        ------
        numpy.linalg.LinAlgError
            When the outage splits the network.
        """
        transfer = self._transfer(out)
        factors = transfer @ np.linalg.inv(np.eye(out.size) - transfer[out])
        factors[out] = -np.eye(out.size)
        return np.asarray(factors)

    def screen(self, flow_from: FloatArray, tolerance: float) -> ViolatedPairs:
        """Return every monitored flow that would exceed its emergency rating after an outage.

        Parameters
        ----------
        flow_from : (n_branch,)
            Active flows at the from ends [pu].
        tolerance
            Excess that still passes [pu].
        """
        before = flow_from[self._monitored]
        limit = self._network.emergency_rating[self._monitored]
        found = []
        for which, factors in self._all_blocks():
            post = self._post_outage_flows(which, factors, before, flow_from)
            excess = np.abs(post) - limit[:, None]
            row, column = np.nonzero(excess > tolerance)
            sign = np.where(post[row, column] > 0.0, 1, -1)
            found.append((which[column], self._monitored[row], sign, excess[row, column]))
        if not found:
            none = np.zeros(0, np.int64)
            return ViolatedPairs(contingency=none, monitored=none, sign=none, excess=np.zeros(0))
        contingency, monitored, sign, excess = (np.concatenate(parts) for parts in zip(*found, strict=True))
        return ViolatedPairs(contingency=contingency, monitored=monitored, sign=sign, excess=excess)

    def limits(self, pairs: ViolatedPairs) -> FlowLimits:
        """Return the pairs as limits on weighted sums of from-end flows."""
        network, contingencies = self._network, self._contingencies
        rows, columns, data = [], [], []
        needed = {int(k): self._factors_of(int(k)) for k in np.unique(pairs.contingency)}
        for row, (k, m, sign) in enumerate(zip(pairs.contingency, pairs.monitored, pairs.sign, strict=True)):
            out = self._out[k]
            rows.append(np.full(out.size + 1, row))
            columns.append(np.concatenate([[m], out]))
            data.append(sign * np.concatenate([[1.0], needed[int(k)][m]]))
        weights = (
            sparse.csr_array(
                (np.concatenate(data), (np.concatenate(rows), np.concatenate(columns))),
                shape=(pairs.n_pair, network.n_branch),
            )
            if pairs.n_pair
            else sparse.csr_array((0, network.n_branch))
        )
        return FlowLimits(
            weights=weights,
            limit=network.emergency_rating[pairs.monitored],
            kind=("contingency",) * pairs.n_pair,
            contingency=tuple(contingencies.names[k] for k in pairs.contingency),
            monitored=tuple(network.branches[m] for m in pairs.monitored),
            direction=tuple("forward" if sign > 0 else "reverse" for sign in pairs.sign),
        )

    def _factors_of(self, contingency: int) -> FloatArray:
        """Return the factors of one contingency; the same few are asked for hour after hour and are kept."""
        if contingency not in self._kept_factors:
            kept = sum(factors.size for factors in self._kept_factors.values())
            if kept + self._network.n_branch > _CACHE_ELEMENTS:
                self._kept_factors.clear()
            self._kept_factors[contingency] = self.factors(self._out[contingency])
        return self._kept_factors[contingency]

    @property
    def _contingencies(self) -> Contingencies:
        contingencies = self._network.contingencies
        if contingencies is None:
            raise ValueError("the network has no contingencies")
        return contingencies

    def _transfer(self, out: IntArray) -> FloatArray:
        """Return h_{:,O}, the flow on every branch per unit sent from each outaged branch's from to its to bus."""
        injection = self._incidence[out].T.toarray()[self._kept]
        angle = np.zeros((self._network.n_bus, out.size))
        angle[self._kept] = self._factorised.solve(injection)
        return np.asarray(self._b[:, None] * (self._incidence @ angle))

    def _classify(self) -> tuple[IntArray, IntArray, list[int]]:
        """Return the single and the multiple contingencies that can be screened, and those that split the network."""
        size = np.array([out.size for out in self._out], dtype=np.int64)
        multiples: list[int] = []
        singles, splitting = [np.zeros(0, np.int64)], list[int]()
        for which in _blocks(np.flatnonzero(size == 1), self._network.n_branch):
            out = self._concatenated(which)
            splits = np.abs(1.0 - self._transfer(out)[out, np.arange(out.size)]) < SINGULAR
            singles.append(which[~splits])
            splitting += which[splits].tolist()
        for k in np.flatnonzero(size > 1).tolist():
            out = self._out[k]
            splits = abs(np.linalg.det(np.eye(out.size) - self._transfer(out)[out])) < SINGULAR
            (splitting if splits else multiples).append(k)
        return np.concatenate(singles), np.array(multiples, dtype=np.int64), sorted(splitting)

    def _all_blocks(self) -> Iterator[tuple[IntArray, FloatArray]]:
        """Yield (contingencies, factors on the monitored branches) in blocks of bounded size."""
        if self._kept_blocks is not None:
            yield from self._kept_blocks
            return
        columns = self._singles.size + sum(self._out[k].size for k in self._multiples)
        keep: list[tuple[IntArray, FloatArray]] | None = (
            [] if columns * self._monitored.size <= _CACHE_ELEMENTS else None
        )
        for block in self._new_blocks():
            if keep is not None:
                keep.append(block)
            yield block
        self._kept_blocks = keep

    def _new_blocks(self) -> Iterator[tuple[IntArray, FloatArray]]:
        position = np.full(self._network.n_branch, -1)
        position[self._monitored] = np.arange(self._monitored.size)
        for which in _blocks(self._singles, self._network.n_branch):
            out = self._concatenated(which)
            transfer = self._transfer(out)
            factors = transfer[self._monitored] / (1.0 - transfer[out, np.arange(out.size)])
            gone = np.flatnonzero(position[out] >= 0)
            factors[position[out[gone]], gone] = -1.0
            yield which, factors
        for which in _blocks(self._multiples, self._network.n_branch):
            yield which, np.concatenate([self.factors(self._out[k])[self._monitored] for k in which], axis=1)

    def _post_outage_flows(
        self, which: IntArray, factors: FloatArray, before: FloatArray, flow_from: FloatArray
    ) -> FloatArray:
        """Return the flows on the monitored branches after each outage, (n_monitored, len(which)) [pu]."""
        width = np.array([self._out[k].size for k in which], dtype=np.int64)
        shift = factors * flow_from[self._concatenated(which)]
        if np.any(width > 1):
            shift = np.add.reduceat(shift, np.concatenate([[0], np.cumsum(width)[:-1]]), axis=1)
        return np.asarray(before[:, None] + shift)

    def _concatenated(self, which: IntArray) -> IntArray:
        return np.concatenate([self._out[k] for k in which])


def _blocks(which: IntArray, n_branch: int) -> Iterator[IntArray]:
    """Yield the contingencies in groups whose factors stay within the block size."""
    step = max(1, _BLOCK_ELEMENTS // max(1, n_branch))
    for first in range(0, which.size, step):
        yield which[first : first + step]


def _factorise(
    network: Network, branch_in_service: BoolArray, incidence: sparse.csr_array, b: FloatArray
) -> tuple[SuperLU, IntArray]:
    """Factorise B without one bus per island; return the factorisation and the buses that were kept."""
    laplacian = sparse.csc_array(incidence.T @ (sparse.diags_array(b) @ incidence))
    _, first = np.unique(network.islands(branch_in_service), return_index=True)
    kept = np.setdiff1d(np.arange(network.n_bus), first)
    return splu(sparse.csc_array(laplacian[kept][:, kept])), kept
