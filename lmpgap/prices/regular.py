"""A quick certificate that active gradients are linearly independent by a margin, so that prices are unique.

Most intervals are regular, and finding the smallest singular value of their gradients to several digits costs more
than the solve. A lower bound on it settles the question: with the rows normalised to unit length, and the rows that
touch a single variable (bounds) set apart,

    A = [[I, 0], [C, D]]        sigma_min(A) >= delta / sqrt(delta^2 + (1 + c)^2)

where delta bounds sigma_min(D) from below and c bounds the norm of C from above. For delta, powers of B = (D D')^-1
are applied to a few vectors v of independent normal entries. With u the direction in which B is largest,

    |B^p v| >= |B|^p |u'v|

and u'v is a standard normal number: that all of them are smaller than a thousandth has a probability of 1e-12.
So |B| <= (1000 max |B^p v|)^(1/p), and delta = |B|^(-1/2).

Notes
-----
After "Estimating the Largest Eigenvalue by the Power and Lanczos Algorithms with a Random Start", SIAM Journal on
Matrix Analysis and Applications 13(4), 1992. The vectors come from a fixed seed: the same gradients give the same
answer on every run.
"""

from __future__ import annotations

from collections.abc import Iterator
from functools import lru_cache

import numpy as np
from scipy import sparse
from scipy.sparse.linalg import splu

from lmpgap.scenario.network import BoolArray, FloatArray, IntArray

_VECTORS = 4
_POWERS = range(1, 17)
"""The bound is below the truth by a factor of about 30 at power 4, of 5 at power 8 and of 2 at power 16."""
_POWERS_OF_NORM = 3
_ALL_BUT_SURE = 4
"""From this power on it pays to bound the norm of C by itself, and not by that of the whole."""
_UNLUCKY = 1e-3
"""A standard normal number is smaller than this in one of 1,250 cases; for all vectors together: 4e-13."""


def independence(matrix: sparse.csr_array, equation: BoolArray, wanted: float) -> tuple[float, float]:
    """Return a lower bound and an estimate of smallest over largest singular value, rows normalised.

    Two bounds of one variable count as one row: a variable that cannot move stands at both.

    Parameters
    ----------
    matrix : sparse (n_row, n_column)
        Gradients.
    equation : (n_row,)
        True for rows that are equations and no bounds.
    wanted
        The search ends as soon as the bound is this large [-].

    Returns
    -------
    bound : float
        Zero where nothing was shown [-].
    estimate : float
        Above the bound by a factor of a few [-]; zero where nothing was shown.
    """
    nothing = 0.0, 0.0
    if not matrix.has_canonical_format:
        matrix = matrix.copy()
        matrix.sum_duplicates()
    n_row, n_column = matrix.shape
    row = np.repeat(np.arange(n_row), np.diff(matrix.indptr))
    data, column = matrix.data, matrix.indices
    if not data.all():
        used = data != 0.0
        row, column, data = row[used], column[used], data[used]
    count = np.bincount(row, minlength=n_row)
    if n_row == 0 or not count.all():
        return nothing
    data = data / np.sqrt(np.bincount(row, data**2, minlength=n_row))[row]

    single = count == 1
    bounded = np.zeros(n_column, dtype=bool)
    bounded[column[single[row]]] = True
    of_equations = column[(single & equation)[row]]
    if of_equations.size and _doubled(column, row, single, of_equations):
        return nothing
    rest, free = np.flatnonzero(~single), np.flatnonzero(~bounded)
    if rest.size == 0:
        return 1.0, 1.0
    if rest.size > free.size:
        return nothing
    in_rest = ~single[row]
    row, column, data = row[in_rest], column[in_rest], data[in_rest]
    rows = _matrix(row, column, data, rest, np.arange(n_column), matrix.shape)
    largest = _norm_bound(rows, np.ones(n_column), bounded)
    c = largest
    kept = ~bounded[column]
    block = _matrix(row[kept], column[kept], data[kept], rest, free, matrix.shape)
    bound = estimate = 0.0
    for power, (smallest, guess) in enumerate(_smallest(block)):
        if power == _ALL_BUT_SURE:
            c = _norm_bound(rows, bounded, np.zeros(n_column))
        bound = smallest / (np.hypot(smallest, 1.0 + c) * largest)
        estimate = max(bound, min(guess, 1.0) / largest)
        # A guess is never below the truth, and no bound gets beyond it.
        if bound >= wanted or guess / largest < wanted:
            break
    return float(bound), float(estimate)


def _norm_bound(rows: sparse.csr_array, used: FloatArray | BoolArray, diagonal: FloatArray | BoolArray) -> float:
    """Return an upper bound of the norm of [diag(diagonal); rows diag(used)], close to it for mostly local couplings.

    For a matrix M without negative entries and any x > 0 the largest eigenvalue is at most max (M x)_i / x_i
    (Collatz and Wielandt); M = |A|'|A| here, and a few powers make the bound tight.
    """
    absolute = sparse.csr_array((np.abs(rows.data), rows.indices, rows.indptr), shape=rows.shape)
    across = absolute.T
    x, bound = np.ones(rows.shape[1]), np.inf
    for _ in range(_POWERS_OF_NORM):
        product = diagonal * x + used * (across @ (absolute @ (used * x)))
        bound = min(bound, float(np.max(product / x)))
        x = np.maximum(product / product.max(initial=1e-300), 1e-12)
    return float(np.sqrt(bound))


def _doubled(column: IntArray, row: IntArray, single: BoolArray, of_equations: IntArray) -> bool:
    """Return whether an equation in one variable shares it with another row in that variable alone."""
    n_single = np.bincount(column[single[row]], minlength=int(column.max()) + 1)
    return bool(np.any(n_single[of_equations] > 1))


def _matrix(
    row: IntArray, column: IntArray, data: FloatArray, rest: IntArray, free: IntArray, shape: tuple[int, int]
) -> sparse.csr_array:
    """Return the chosen rows and columns, from the coordinates of their entries."""
    new_row, new_column = np.zeros(shape[0], dtype=np.int32), np.zeros(shape[1], dtype=np.int32)
    new_row[rest], new_column[free] = np.arange(rest.size), np.arange(free.size)
    pointer = np.zeros(rest.size + 1, dtype=np.int32)
    np.cumsum(np.bincount(new_row[row], minlength=rest.size), out=pointer[1:])
    return sparse.csr_array((data, new_column[column], pointer), shape=(rest.size, free.size))


def _smallest(block: sparse.csr_array) -> Iterator[tuple[float, float]]:
    """Yield lower bound and estimate of the smallest singular value, the bound better with each power."""
    gram = block @ block.T
    try:
        factor = splu(
            sparse.csc_array((gram.data, gram.indices, gram.indptr), shape=gram.shape),  # symmetric
            permc_spec="MMD_AT_PLUS_A",
            diag_pivot_thresh=0.0,
            options={"SymmetricMode": True},
        )
    except RuntimeError:
        return
    vectors = _start(gram.shape[0])
    log_growth = np.zeros(_VECTORS)
    for power in _POWERS:
        vectors = factor.solve(vectors)
        length = np.linalg.norm(vectors, axis=0)
        if not np.all(np.isfinite(length)) or not length.all():
            return
        vectors /= length
        log_growth += np.log(length)
        if power > 1:
            bound = np.exp(-0.5 * (log_growth.max() - np.log(_UNLUCKY)) / power)
            yield float(bound), float(length.max() ** -0.5)


@lru_cache(maxsize=64)
def _start(size: int) -> FloatArray:
    return np.random.default_rng(1992).standard_normal((size, _VECTORS))
