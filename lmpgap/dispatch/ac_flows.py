"""Branch flows in symbols, with first and second derivatives written out.

With d the branch angle and C = V_f V_t cos d, S = V_f V_t sin d, every flow is a V_own^2 + c C + s S. Write
m = c cos d + s sin d and t = s cos d - c sin d, its derivative along d; then, besides the part of a,

    along the angle:       V_f V_t t                            along V_f:   V_t m        along V_t:   V_f m
    second derivatives:    -V_f V_t m along the angle twice,    V_t t, V_f t along angle and a magnitude, m along both

General differentiation finds the same, but has to discover the structure: for 3,000 buses it takes longer than the
solve.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import casadi
import numpy as np
from scipy import sparse

from lmpgap.dispatch.branch_model import BranchModel, FlowCoefficients
from lmpgap.dispatch.live import LiveNetwork
from lmpgap.scenario.network import IntArray


@dataclass(frozen=True, kw_only=True)
class Entries:
    """Entries of a sparse symbolic matrix; entries at one place add up.

    Attributes
    ----------
    row, column : (n_entry,)
    value
        Symbolic column, (n_entry,).
    """

    row: IntArray
    column: IntArray
    value: Any


@dataclass(frozen=True, kw_only=True)
class Flow:
    """One of the four flows of every live branch, in symbols, each (n_live_branch,).

    Attributes
    ----------
    value
        The flow.
    along_angle, along_from, along_to
        Its derivatives along the branch angle and the magnitudes at the from and to end.
    shape, turned
        m and t of the module docstring.
    own
        Second derivative along the magnitude of the flow's own end.
    at_from
        True for a flow of the from end.
    """

    value: Any
    along_angle: Any
    along_from: Any
    along_to: Any
    shape: Any
    turned: Any
    own: Any
    at_from: bool


@dataclass(frozen=True, kw_only=True)
class SymbolicFlows:
    """The four flows and what their derivatives are made of.

    Attributes
    ----------
    difference : (n_live_branch,)
        Branch angle.
    magnitude
        Magnitudes at the from ends and at the to ends, each (n_live_branch,).
    angle_from, angle_to, magnitude_from, magnitude_to : (n_live_branch,)
        Positions of the four variables of each branch.
    """

    live: LiveNetwork
    difference: Any
    magnitude: tuple[Any, Any]
    p_from: Flow
    q_from: Flow
    p_to: Flow
    q_to: Flow
    angle_from: IntArray
    angle_to: IntArray
    magnitude_from: IntArray
    magnitude_to: IntArray

    @staticmethod
    def of(live: LiveNetwork, model: BranchModel, x: Any, angle: slice, magnitude: slice) -> SymbolicFlows:
        """Return the flows as functions of the variables x, whose angles and magnitudes stand where the slices say."""
        angle_from, angle_to = angle.start + live.from_bus, angle.start + live.to_bus
        magnitude_from, magnitude_to = magnitude.start + live.from_bus, magnitude.start + live.to_bus
        difference = entries(x, angle_from) - entries(x, angle_to)
        v_from, v_to = entries(x, magnitude_from), entries(x, magnitude_to)
        cosine, sine = casadi.cos(difference), casadi.sin(difference)

        def flow(k: FlowCoefficients, at_from: bool) -> Flow:
            w, c, s = (casadi.DM(values[live.branch]) for values in (k.w, k.c, k.s))
            shape, turned = c * cosine + s * sine, s * cosine - c * sine
            v_own = v_from if at_from else v_to
            own = 2 * w * v_own
            along_from, along_to = v_to * shape, v_from * shape
            return Flow(
                value=w * v_own * v_own + v_from * v_to * shape,
                along_angle=v_from * v_to * turned,
                along_from=along_from + own if at_from else along_from,
                along_to=along_to if at_from else along_to + own,
                shape=shape,
                turned=turned,
                own=2 * w,
                at_from=at_from,
            )

        return SymbolicFlows(
            live=live,
            difference=difference,
            magnitude=(v_from, v_to),
            p_from=flow(model.p_from, True),
            q_from=flow(model.q_from, True),
            p_to=flow(model.p_to, False),
            q_to=flow(model.q_to, False),
            angle_from=angle_from,
            angle_to=angle_to,
            magnitude_from=magnitude_from,
            magnitude_to=magnitude_to,
        )

    def gradient(self, flow: Flow, row: IntArray, branch: IntArray | None = None, factor: Any = 1.0) -> list[Entries]:
        """Return factor times the derivatives of chosen branches' flows, in the given rows of a Jacobian."""
        chosen = np.arange(self.live.n_branch) if branch is None else branch
        return [
            Entries(row=row, column=column[chosen], value=factor * entries(value, chosen))
            for column, value in (
                (self.angle_from, flow.along_angle),
                (self.angle_to, -flow.along_angle),
                (self.magnitude_from, flow.along_from),
                (self.magnitude_to, flow.along_to),
            )
        ]

    def curvature(self, weighted: list[tuple[Any, Flow]], squared: list[tuple[Any, Flow]]) -> list[Entries]:
        """Return second derivatives of sum(weight * flow) + sum(weight * flow^2), upper triangle.

        Parameters
        ----------
        weighted, squared
            Weights, (n_live_branch,), and flows.
        """
        v_from, v_to = self.magnitude
        total = list(weighted) + [(2 * weight * flow.value, flow) for weight, flow in squared]
        shape = sum(weight * flow.shape for weight, flow in total)
        turned = sum(weight * flow.turned for weight, flow in total)
        angle_twice = -v_from * v_to * shape
        angle_from, angle_to = v_to * turned, v_from * turned
        from_twice = sum(weight * flow.own for weight, flow in total if flow.at_from)
        to_twice = sum(weight * flow.own for weight, flow in total if not flow.at_from)
        both = shape
        for weight, flow in squared:
            twice = 2 * weight
            angle_twice += twice * flow.along_angle * flow.along_angle
            angle_from += twice * flow.along_angle * flow.along_from
            angle_to += twice * flow.along_angle * flow.along_to
            from_twice += twice * flow.along_from * flow.along_from
            to_twice += twice * flow.along_to * flow.along_to
            both += twice * flow.along_from * flow.along_to
        low_angle = np.minimum(self.angle_from, self.angle_to)
        high_angle = np.maximum(self.angle_from, self.angle_to)
        low_magnitude = np.minimum(self.magnitude_from, self.magnitude_to)
        high_magnitude = np.maximum(self.magnitude_from, self.magnitude_to)
        return [
            Entries(row=row, column=column, value=value)
            for row, column, value in (
                (self.angle_from, self.angle_from, angle_twice),
                (self.angle_to, self.angle_to, angle_twice),
                (low_angle, high_angle, -angle_twice),
                (self.angle_from, self.magnitude_from, angle_from),
                (self.angle_from, self.magnitude_to, angle_to),
                (self.angle_to, self.magnitude_from, -angle_from),
                (self.angle_to, self.magnitude_to, -angle_to),
                (self.magnitude_from, self.magnitude_from, from_twice),
                (self.magnitude_to, self.magnitude_to, to_twice),
                (low_magnitude, high_magnitude, both),
            )
        ]


def entries(vector: Any, position: IntArray) -> Any:
    """Return a column of the chosen entries; casadi itself makes a row of no entries."""
    return vector[position.tolist()] if position.size else casadi.SX(0, 1)


def times(matrix: sparse.sparray, vector: Any) -> Any:
    """Return matrix @ vector for a symbolic vector, as a dense column."""
    columns = sparse.csc_matrix(matrix)
    if 0 in columns.shape:
        return casadi.SX.zeros(columns.shape[0], 1)
    columns.sort_indices()
    pattern = casadi.Sparsity(columns.shape[0], columns.shape[1], columns.indptr.tolist(), columns.indices.tolist())
    return casadi.densify(casadi.mtimes(casadi.DM(pattern, columns.data), vector))


def gather(parts: list[Entries], shape: tuple[int, int]) -> Any:
    """Return the sparse symbolic matrix of all entries, those at one place added up."""
    row = np.concatenate([part.row for part in parts])
    column = np.concatenate([part.column for part in parts])
    place, where = np.unique(column * shape[0] + row, return_inverse=True)
    collect = sparse.csr_array((np.ones(row.size), (where.ravel(), np.arange(row.size))), shape=(place.size, row.size))
    starts = np.searchsorted(place // max(shape[0], 1), np.arange(shape[1] + 1))
    pattern = casadi.Sparsity(shape[0], shape[1], starts.tolist(), (place % max(shape[0], 1)).tolist())
    return casadi.SX(pattern, times(collect, casadi.vertcat(*[part.value for part in parts])))
