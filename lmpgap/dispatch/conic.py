"""A convex program in standard blocks, its solution with signed multipliers, and its residuals.

The convex formulations fill these blocks directly with sparse matrices. That keeps three things on the very
matrices that were solved: rows that are added while screening contingencies, the certificate, and the
polyhedron of multipliers behind the uniqueness test.

    minimise    constant + linear @ x + 1/2 x @ diag(quadratic) @ x                       [$/h]
    subject to  equality @ x = equality_rhs                                               (y)
                inequality @ x <= inequality_rhs                                          (z >= 0)
                lower <= x <= upper                                                       (z_lower, z_upper >= 0)
                cone_rhs - cone @ x  in a product of second-order cones of cone_sizes      (u in the dual cones)

    stationarity:  linear + quadratic * x - equality.T y + inequality.T z - z_lower + z_upper + cone.T u = 0

so that y is the rise of cost per unit of right-hand side, and z the fall of cost per unit of relaxed limit.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy import sparse

from lmpgap.dispatch.result import SolveStatus
from lmpgap.scenario.network import FloatArray, IntArray


@dataclass(frozen=True, kw_only=True)
class ConicProgram:
    """The blocks of the module docstring; costs in $/h, variables per unit."""

    linear: FloatArray
    quadratic: FloatArray
    constant: float
    equality: sparse.csr_array
    equality_rhs: FloatArray
    inequality: sparse.csr_array
    inequality_rhs: FloatArray
    lower: FloatArray
    upper: FloatArray
    cone: sparse.csr_array
    cone_rhs: FloatArray
    cone_sizes: IntArray

    @property
    def n_var(self) -> int:
        """Number of variables."""
        return self.linear.size

    @property
    def is_linear(self) -> bool:
        """True when a linear-programming solver can take it."""
        return self.cone_sizes.size == 0 and not np.any(self.quadratic)

    def cost(self, x: FloatArray) -> float:
        """Return the cost at x [$/h]."""
        return float(self.constant + self.linear @ x + 0.5 * np.sum(self.quadratic * x * x))


@dataclass(frozen=True, kw_only=True)
class ConicSolution:
    """Solution and multipliers in the signs of the module docstring; ``nan`` arrays without a solution."""

    status: SolveStatus
    message: str
    solver: str
    seconds: float
    iterations: int
    x: FloatArray
    equality_dual: FloatArray
    inequality_dual: FloatArray
    lower_dual: FloatArray
    upper_dual: FloatArray
    cone_dual: FloatArray
