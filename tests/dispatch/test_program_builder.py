"""Named blocks and affine expressions."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import sparse

from lmpgap.dispatch.program_builder import Affine, ProgramBuilder
from lmpgap.errors import LmpgapError


def test_expressions_follow_matrix_algebra() -> None:
    builder = ProgramBuilder()
    x, y = builder.variable("x", 2), builder.variable("y", 2, lower=0.0, upper=np.array([1.0, 2.0]))
    matrix = sparse.csr_array(np.array([[1.0, 2.0]]))
    expression = (x.scaled(np.array([2.0, 3.0])) - y + 1.0).mapped(matrix)
    builder.equality("row", expression, 10.0)
    template = builder.build()
    values = np.array([1.0, 2.0, 3.0, 4.0])
    expected = matrix @ (np.array([2.0, 6.0]) - np.array([3.0, 4.0]) + 1.0)
    assert expression.value(template, values) == pytest.approx(expected)
    # Constants move to the right-hand side.
    assert template.program.equality @ values - template.program.equality_rhs == pytest.approx(expected - 10.0)
    assert template.program.upper == pytest.approx([np.inf, np.inf, 1.0, 2.0])
    assert template.variables == {"x": slice(0, 2), "y": slice(2, 4)}


def test_fill_exchanges_named_blocks_and_keeps_constants_on_the_left() -> None:
    builder = ProgramBuilder()
    x = builder.variable("x", 2)
    builder.equality("first", x.take(np.array([0])) + 5.0, 7.0)
    builder.equality("second", x.take(np.array([1])))
    builder.at_most("limit", x - 1.0, 3.0)
    template = builder.build()
    program = template.fill(
        equality_rhs={"first": 9.0}, inequality_rhs={"limit": np.array([4.0, 5.0])}, linear={"x": 2.0}, constant=1.5
    )
    assert program.equality_rhs == pytest.approx([4.0, 0.0])
    assert program.inequality_rhs == pytest.approx([5.0, 6.0])
    assert program.cost(np.array([1.0, 1.0])) == pytest.approx(5.5)
    assert template.program.equality_rhs == pytest.approx([2.0, 0.0])  # the template stands


def test_cones_are_stacked_cone_by_cone() -> None:
    builder = ProgramBuilder()
    x = builder.variable("x", 2)
    builder.cone("disc", Affine.fixed(np.array([3.0, 4.0])), x, x.scaled(10.0))
    builder.rotated_cone("rotated", x, Affine.fixed(np.ones(2)), x.scaled(0.5))
    template = builder.build()
    program, values = template.program, np.array([1.0, 2.0])
    inside = program.cone_rhs - program.cone @ values
    assert inside[template.cones["disc"]] == pytest.approx([3, 1, 10, 4, 2, 20])
    # first * second >= part^2 as |(first - second, 2 part)| <= first + second
    assert inside[template.cones["rotated"]] == pytest.approx([2, 0, 1, 3, 1, 2])
    assert program.cone_sizes.tolist() == [3, 3, 3, 3]


def test_rows_of_different_length_do_not_add_up() -> None:
    builder = ProgramBuilder()
    with pytest.raises(LmpgapError, match="cannot add 3 rows to 2 rows"):
        _ = builder.variable("x", 2) + builder.variable("y", 3)
