"""Combinations of rows that (nearly) vanish: the left null space of a sparse matrix, screened by singular values.

Rows are normalised to unit length first, so that the ratio of singular values measures how nearly parallel
gradients are and not in which units they are written.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy import linalg, sparse
from scipy.sparse.linalg import LinearOperator, eigsh, splu

from lmpgap.scenario.network import FloatArray

DENSE_UP_TO = 250
"""Matrices with more rows than this are screened sparsely; both take about 10 ms at this size."""

_REGULARISATION = 1e-14
"""Shift of the squared singular values, relative to the largest: far below the square of any threshold in use,
and large enough that the factorisation of an exactly singular system stands."""


@dataclass(frozen=True, kw_only=True)
class LeftNullSpace:
    """Result of the screen.

    Attributes
    ----------
    basis : (n_row, n_direction)
        Columns z with ``matrix.T @ z`` nearly zero; orthonormal in the normalised rows, and each the direction of one
        singular value.
    ratio : float
        Smallest over largest singular value that was found [-]; zero when there are more rows than columns.
    """

    basis: FloatArray
    ratio: float


def left_null_space(matrix: sparse.csr_array, threshold: float, *, dense_up_to: int = DENSE_UP_TO) -> LeftNullSpace:
    """Return the row combinations whose singular value is below a threshold relative to the largest.

    Parameters
    ----------
    matrix : sparse (n_row, n_column)
        Rows of zeros have no part in any combination.
    threshold
        [-]; thresholds below 1e-6 are beyond the accuracy of the sparse screen, which works on squared singular
        values (relative accuracy 1e-15, hence 3e-8 in the singular values).
    """
    length = np.sqrt(np.asarray(matrix.multiply(matrix).sum(axis=1)).ravel())
    rows = np.flatnonzero(length > 0.0)
    scaled = sparse.csr_array(sparse.diags_array(1.0 / length[rows]) @ matrix[rows])
    if rows.size == 0:
        return LeftNullSpace(basis=np.zeros((matrix.shape[0], 0)), ratio=1.0)
    directions, ratio = _dense(scaled, threshold) if rows.size <= dense_up_to else _sparse(scaled, threshold)
    basis = np.zeros((matrix.shape[0], directions.shape[1]))
    basis[rows] = directions / length[rows][:, None]
    return LeftNullSpace(basis=basis, ratio=ratio)


def _dense(scaled: sparse.csr_array, threshold: float) -> tuple[FloatArray, float]:
    left, singular, _ = linalg.svd(scaled.toarray(), full_matrices=True)
    full = np.zeros(scaled.shape[0])
    full[: singular.size] = singular
    return left[:, full < threshold * full[0]], float(full[-1] / full[0])


def _sparse(scaled: sparse.csr_array, threshold: float) -> tuple[FloatArray, float]:
    """Smallest eigenvalues of A A' by inverse iteration on [[I, A'], [A, -shift I]], twice as many until enough."""
    n_row, n_column = scaled.shape
    largest = float(eigsh(scaled @ scaled.T, k=1, return_eigenvectors=False, tol=1e-3, v0=np.ones(n_row))[0])
    shift = _REGULARISATION * largest
    system = sparse.block_array(
        [[sparse.eye_array(n_column), scaled.T], [scaled, -shift * sparse.eye_array(n_row)]], format="csc"
    )
    factor = splu(system, permc_spec="COLAMD")

    def inverse(vector: FloatArray) -> FloatArray:
        # (A A' + shift I) x = vector  <=>  the second block of the system's answer to (0, -vector)
        right = np.zeros(n_column + n_row)
        right[n_column:] = -vector.ravel()
        return np.asarray(factor.solve(right)[n_column:])

    count = 4
    while True:
        count = min(count, n_row - 1)
        operator = LinearOperator((n_row, n_row), matvec=inverse, dtype=np.float64)
        gram = LinearOperator((n_row, n_row), matvec=lambda z: scaled @ (scaled.T @ z), dtype=np.float64)
        squared, vectors = eigsh(gram, k=count, sigma=-shift, OPinv=operator, which="LM", v0=np.ones(n_row))
        singular = np.sqrt(np.maximum(squared, 0.0))
        small = singular < threshold * np.sqrt(largest)
        if not small.all() or count == n_row - 1:
            # One more inverse iteration: it brings A' z down to rounding, where the Lanczos vectors leave 1e-8.
            # Smallest first, so that the others are freed from what it amplifies most.
            order = np.argsort(singular[small], kind="stable")
            sharpened = [inverse(column) for column in vectors[:, small].T[order]]
            basis = np.linalg.qr(np.column_stack(sharpened))[0] if sharpened else vectors[:, small]
            return basis, float(singular.min() / np.sqrt(largest))
        count *= 2
