"""Stack chosen rows of sparse matrices, each times a factor, without an intermediate matrix per step."""

from __future__ import annotations

from collections.abc import Sequence
from typing import NamedTuple

import numpy as np
from scipy import sparse

from lmpgap.scenario.network import FloatArray, IntArray


class ScaledRows(NamedTuple):
    """Rows of a matrix, each times its factor.

    Attributes
    ----------
    matrix : sparse (n, n_column) or None
        ``None`` stands for the identity.
    rows : (n_row,)
    factor : (n_row,) or float
    """

    matrix: sparse.csr_array | None
    rows: IntArray
    factor: FloatArray | float


def stacked_rows(parts: Sequence[ScaledRows], n_column: int) -> sparse.csr_array:
    """Return all rows of the parts, one below the other, (n_row, n_column)."""
    data, indices, counts = [], [], []
    for matrix, rows, factor in parts:
        factors = np.broadcast_to(np.asarray(factor, dtype=float), rows.shape)
        if matrix is None:
            data.append(factors)
            indices.append(rows)
            counts.append(np.ones(rows.size, dtype=np.int64))
            continue
        first = matrix.indptr[rows]
        count = matrix.indptr[rows + 1] - first
        # Entry k of the part stands at first[row of k] + (k - entries of the rows before).
        before = np.cumsum(count) - count
        entry = np.arange(int(count.sum())) + np.repeat(first - before, count)
        data.append(matrix.data[entry] * np.repeat(factors, count))
        indices.append(matrix.indices[entry])
        counts.append(count)
    pointer = np.concatenate([[0], np.cumsum(np.concatenate(counts))])
    size = (pointer.size - 1, n_column)
    return sparse.csr_array((np.concatenate(data), np.concatenate(indices).astype(np.int32), pointer), shape=size)
