"""The bound on how far active gradients are from dependent, against singular values computed in full."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import linalg, sparse

from lmpgap.prices.regular import independence

WANTED = 1e-5


def normalised_ratio(matrix: np.ndarray) -> float:
    singular = linalg.svdvals(matrix / np.linalg.norm(matrix, axis=1)[:, None])
    return 0.0 if matrix.shape[0] > matrix.shape[1] else float(singular[-1] / singular[0])


def gradients(seed: int, n_row: int, n_column: int, n_bound: int) -> tuple[np.ndarray, np.ndarray]:
    """Random sparse rows in different units, then bounds of the last variables."""
    rng = np.random.default_rng(seed)
    dense = sparse.random_array((n_row, n_column), density=min(1.0, 4.0 / n_column), rng=rng).toarray()
    dense[np.arange(n_row), np.arange(n_row)] += 1.0
    dense *= 10.0 ** rng.uniform(-2.0, 2.0, n_row)[:, None]
    bounds = np.eye(n_column)[n_column - n_bound :] * rng.choice([-1.0, 1.0], n_bound)[:, None]
    free = np.arange(n_row + n_bound) < n_row
    return np.vstack([dense, bounds]), free


@settings(max_examples=60, deadline=None)
@given(seed=st.integers(0, 10_000), n_row=st.integers(1, 60), spare=st.integers(0, 20), n_bound=st.integers(0, 15))
def test_bound_holds(seed, n_row, spare, n_bound):
    matrix, free = gradients(seed, n_row, n_row + spare + n_bound, n_bound)
    truth = normalised_ratio(matrix)
    bound, estimate = independence(sparse.csr_array(matrix), free, WANTED)
    assert bound <= truth
    if truth >= 100.0 * WANTED:
        assert bound >= WANTED  # found out, not only not wrong
        assert truth / 10.0 <= estimate <= 2.0 * truth


@pytest.mark.parametrize("near", [0.0, 1e-9, 1e-7])
def test_dependent_rows_are_never_called_regular(near):
    matrix, free = gradients(3, 80, 120, 20)
    matrix[5] = 2.0 * matrix[9] - 0.5 * matrix[30] + near * np.random.default_rng(0).standard_normal(120)
    bound, _ = independence(sparse.csr_array(matrix), free, WANTED)
    assert bound < WANTED


def test_two_bounds_of_one_variable_count_once():
    matrix, free = gradients(4, 30, 50, 10)
    once = independence(sparse.csr_array(matrix), free, WANTED)
    both = np.vstack([matrix, -matrix[-4:]])
    assert independence(sparse.csr_array(both), np.append(free, [False] * 4), WANTED) == once


def test_an_equation_that_repeats_a_bound_is_dependent():
    matrix, free = gradients(4, 30, 50, 10)
    matrix = np.vstack([matrix, 3.0 * matrix[-1]])
    assert independence(sparse.csr_array(matrix), np.append(free, True), WANTED) == (0.0, 0.0)


def test_more_rows_than_columns_and_rows_of_zeros():
    matrix = np.array([[1.0, 1.0], [1.0, -1.0], [2.0, 1.0]])
    assert independence(sparse.csr_array(matrix), np.ones(3, dtype=bool), WANTED) == (0.0, 0.0)
    matrix = np.array([[1.0, 1.0], [0.0, 0.0]])
    assert independence(sparse.csr_array(matrix), np.ones(2, dtype=bool), WANTED) == (0.0, 0.0)


def test_same_answer_whatever_the_order_and_storage_of_entries():
    matrix, free = gradients(7, 40, 60, 10)
    plain = sparse.csr_array(matrix)
    untidy = sparse.csr_array((plain.data, plain.indices, plain.indptr), shape=plain.shape)
    for row in range(40):
        part = slice(untidy.indptr[row], untidy.indptr[row + 1])
        untidy.indices[part] = untidy.indices[part][::-1].copy()
        untidy.data[part] = untidy.data[part][::-1].copy()
    untidy.has_sorted_indices = False
    assert independence(untidy, free, WANTED) == independence(sparse.csr_array(matrix), free, WANTED)


def test_close_to_what_is_wanted_takes_more_powers():
    """A ratio of twice the threshold: the first powers cannot tell, later ones do or leave it to the full search."""
    matrix = np.eye(30, 40)
    matrix[0, :2] = [1.0, 2e-4]
    matrix[1, :2] = [1.0, -2e-4]
    truth = normalised_ratio(matrix)
    bound, estimate = independence(sparse.csr_array(matrix), np.ones(30, dtype=bool), truth / 20.0)
    assert truth / 20.0 <= bound <= truth
    assert bound <= estimate
