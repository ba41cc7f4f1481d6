"""Build a convex program from named variables and named rows, so that a formulation reads like its equations.

The matrices are built once per topology. `ProgramTemplate.fill` exchanges right-hand sides, bounds and costs of
named blocks for one interval and leaves every matrix as it is.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, replace

import numpy as np
from scipy import sparse

from lmpgap.dispatch.conic import ConicProgram
from lmpgap.errors import LmpgapError
from lmpgap.scenario.network import FloatArray

Values = Mapping[str, FloatArray | float]


@dataclass(frozen=True)
class Affine:
    """A vector of affine functions of named variables: ``constant + sum of terms[name] @ variable``.

    Attributes
    ----------
    constant : (n_row,)
    terms : mapping of variable name to sparse (n_row, n)
    """

    constant: FloatArray
    terms: dict[str, sparse.csr_array] = field(default_factory=dict)

    @property
    def size(self) -> int:
        """Number of rows."""
        return self.constant.size

    def __add__(self, other: Affine | FloatArray | float) -> Affine:
        if not isinstance(other, Affine):
            return Affine(self.constant + other, self.terms)
        if other.size != self.size:
            raise LmpgapError(f"cannot add {other.size} rows to {self.size} rows")
        terms = dict(self.terms)
        for name, matrix in other.terms.items():
            terms[name] = terms[name] + matrix if name in terms else matrix
        return Affine(self.constant + other.constant, terms)

    def __sub__(self, other: Affine | FloatArray | float) -> Affine:
        return self + (-other)

    def __neg__(self) -> Affine:
        return Affine(-self.constant, {name: -matrix for name, matrix in self.terms.items()})

    def scaled(self, factor: FloatArray | float) -> Affine:
        """Return each row multiplied by its factor."""
        diagonal = sparse.diags_array(np.broadcast_to(np.asarray(factor, float), (self.size,)), format="csr")
        return self.mapped(diagonal)

    def mapped(self, matrix: sparse.csr_array) -> Affine:
        """Return ``matrix @ self``."""
        return Affine(
            np.asarray(matrix @ self.constant),
            {name: sparse.csr_array(matrix @ term) for name, term in self.terms.items()},
        )

    def take(self, rows: np.ndarray) -> Affine:
        """Return the chosen rows."""
        return Affine(self.constant[rows], {name: term[rows] for name, term in self.terms.items()})

    @staticmethod
    def fixed(value: FloatArray) -> Affine:
        """Return rows without variables."""
        return Affine(np.asarray(value, float))

    def value(self, template: ProgramTemplate, x: FloatArray) -> FloatArray:
        """Return the values at a solution, shape (n_row,)."""
        result = self.constant.copy()
        for name, term in self.terms.items():
            result += term @ x[template.variables[name]]
        return result


@dataclass(frozen=True, kw_only=True)
class ProgramTemplate:
    """A program whose matrices stand, and where each named block is in it.

    Attributes
    ----------
    program
        With the values given while building.
    variables, equalities, inequalities, cones
        Slice of each named block; ``cones`` are row slices of the cone block.
    equality_constant, inequality_constant
        Constants of the rows' left sides, which are subtracted from every right side.
    """

    program: ConicProgram
    variables: dict[str, slice]
    equalities: dict[str, slice]
    inequalities: dict[str, slice]
    cones: dict[str, slice]
    equality_constant: FloatArray
    inequality_constant: FloatArray

    def fill(
        self,
        *,
        linear: Values | None = None,
        quadratic: Values | None = None,
        lower: Values | None = None,
        upper: Values | None = None,
        equality_rhs: Values | None = None,
        inequality_rhs: Values | None = None,
        constant: float = 0.0,
    ) -> ConicProgram:
        """Return the program of one interval: the named blocks exchanged, everything else as built.

        Right-hand sides are those of the rows as they were written; constants on their left are taken care of.
        """
        program = self.program
        return replace(
            program,
            constant=constant,
            linear=_exchanged(program.linear, self.variables, linear),
            quadratic=_exchanged(program.quadratic, self.variables, quadratic),
            lower=_exchanged(program.lower, self.variables, lower),
            upper=_exchanged(program.upper, self.variables, upper),
            equality_rhs=_exchanged(program.equality_rhs, self.equalities, equality_rhs, self.equality_constant),
            inequality_rhs=_exchanged(
                program.inequality_rhs, self.inequalities, inequality_rhs, self.inequality_constant
            ),
        )

    def with_limits(
        self, name: str, left: sparse.csr_array, constant: FloatArray, right: FloatArray, *, excess: str | None
    ) -> ProgramTemplate:
        """Return the template with one more block of limits ``left @ x + constant <= right`` below the others.

        Everything else keeps its place, so that limits which come and go cost no rebuilding.

        Parameters
        ----------
        left : sparse (n_row, n_var)
            Over this template's variables, or as many of them as it has columns.
        excess
            Name of a new block of variables by which each row may give way; ``None`` for hard limits.
        """
        program, n_row, n_var = self.program, left.shape[0], self.program.n_var
        n_more = 0 if excess is None else n_row
        rows = _widened(left, n_var)
        if n_more:
            rows = sparse.csr_array(sparse.hstack([rows, -sparse.eye_array(n_row)], format="csr"))
        n_all = n_var + n_more
        variables = dict(self.variables)
        if excess is not None:
            variables[excess] = slice(n_var, n_all)
        place = slice(program.inequality_rhs.size, program.inequality_rhs.size + n_row)
        extended = program
        if n_row:
            extended = replace(
                program,
                linear=np.append(program.linear, np.zeros(n_more)),
                quadratic=np.append(program.quadratic, np.zeros(n_more)),
                lower=np.append(program.lower, np.zeros(n_more)),
                upper=np.append(program.upper, np.full(n_more, np.inf)),
                equality=_widened(program.equality, n_all),
                inequality=sparse.csr_array(sparse.vstack([_widened(program.inequality, n_all), rows], format="csr")),
                inequality_rhs=np.append(program.inequality_rhs, right - constant),
                cone=_widened(program.cone, n_all),
                workspace={},
            )
        return replace(
            self,
            program=extended,
            variables=variables,
            inequalities={**self.inequalities, name: place},
            inequality_constant=np.append(self.inequality_constant, constant),
        )


class ProgramBuilder:
    """Collects variables and rows, then stacks them into one `ProgramTemplate`."""

    def __init__(self) -> None:
        self._size = 0
        self._variables: dict[str, slice] = {}
        self._lower: list[FloatArray] = []
        self._upper: list[FloatArray] = []
        self._equalities: dict[str, tuple[Affine, FloatArray]] = {}
        self._inequalities: dict[str, tuple[Affine, FloatArray]] = {}
        self._cones: dict[str, list[Affine]] = {}

    def variable(
        self, name: str, size: int, lower: FloatArray | float = -np.inf, upper: FloatArray | float = np.inf
    ) -> Affine:
        """Add a block of variables and return it as an expression."""
        self._variables[name] = slice(self._size, self._size + size)
        self._size += size
        self._lower.append(np.broadcast_to(np.asarray(lower, float), (size,)))
        self._upper.append(np.broadcast_to(np.asarray(upper, float), (size,)))
        return Affine(np.zeros(size), {name: sparse.eye_array(size, format="csr")})

    def equality(self, name: str, left: Affine, right: FloatArray | float = 0.0) -> None:
        """Add ``left = right``; its multiplier is the rise of cost per unit of ``right``."""
        self._equalities[name] = (left, np.broadcast_to(np.asarray(right, float), (left.size,)))

    def at_most(self, name: str, left: Affine, right: FloatArray | float) -> None:
        """Add ``left <= right``; its multiplier is the fall of cost per unit of ``right``."""
        self._inequalities[name] = (left, np.broadcast_to(np.asarray(right, float), (left.size,)))

    def cone(self, name: str, head: Affine, *parts: Affine) -> None:
        """Add one second-order cone per row: ``|(parts)| <= head``."""
        self._cones[name] = [head, *parts]

    def rotated_cone(self, name: str, first: Affine, second: Affine, *parts: Affine) -> None:
        """Add one rotated cone per row: ``first * second >= |(parts)|^2``, both factors nonnegative.

        Written as ``|(first - second, 2 parts)| <= first + second``.
        """
        self.cone(name, first + second, first - second, *(part.scaled(2.0) for part in parts))

    def build(self) -> ProgramTemplate:
        """Return the stacked program."""
        equality, equality_rhs, equalities = self._stack(self._equalities)
        inequality, inequality_rhs, inequalities = self._stack(self._inequalities)
        cone, cone_rhs, cone_sizes, cones = self._stack_cones()
        program = ConicProgram(
            linear=np.zeros(self._size),
            quadratic=np.zeros(self._size),
            constant=0.0,
            equality=equality,
            equality_rhs=equality_rhs,
            inequality=inequality,
            inequality_rhs=inequality_rhs,
            lower=np.concatenate(self._lower) if self._lower else np.zeros(0),
            upper=np.concatenate(self._upper) if self._upper else np.zeros(0),
            cone=cone,
            cone_rhs=cone_rhs,
            cone_sizes=cone_sizes,
        )
        return ProgramTemplate(
            program=program,
            variables=dict(self._variables),
            equalities=equalities,
            inequalities=inequalities,
            cones=cones,
            equality_constant=_constants(self._equalities),
            inequality_constant=_constants(self._inequalities),
        )

    def readout(self, quantities: dict[str, Affine]) -> tuple[sparse.csr_array, FloatArray, dict[str, slice]]:
        """Return coefficients, constants and row slices of quantities to be read from a solution."""
        matrix, rhs, slices = self._stack({name: (q, np.zeros(q.size)) for name, q in quantities.items()})
        return matrix, -rhs, slices

    def _matrix(self, expression: Affine) -> sparse.coo_array:
        """Return the expression's coefficients over all variables."""
        rows, columns, data = [], [], []
        for name, term in expression.terms.items():
            block = sparse.coo_array(term)
            rows.append(block.row)
            columns.append(block.col + self._variables[name].start)
            data.append(block.data)
        if not rows:
            return sparse.coo_array((expression.size, self._size))
        coordinates = (np.concatenate(rows), np.concatenate(columns))
        return sparse.coo_array((np.concatenate(data), coordinates), shape=(expression.size, self._size))

    def _stack(
        self, blocks: dict[str, tuple[Affine, FloatArray]]
    ) -> tuple[sparse.csr_array, FloatArray, dict[str, slice]]:
        """Return matrix, right-hand side with the expressions' constants moved over, and row slices."""
        slices, position = {}, 0
        for name, (left, _) in blocks.items():
            slices[name] = slice(position, position + left.size)
            position += left.size
        if position == 0:
            return sparse.csr_array((0, self._size)), np.zeros(0), slices
        matrix = sparse.vstack([self._matrix(left) for left, _ in blocks.values()], format="csr")
        rhs = np.concatenate([right - left.constant for left, right in blocks.values()])
        return _without_zeros(matrix), rhs, slices

    def _stack_cones(self) -> tuple[sparse.csr_array, FloatArray, np.ndarray, dict[str, slice]]:
        slices, position = {}, 0
        matrices, constants, sizes = [], [], []
        for name, parts in self._cones.items():
            depth, n_cone = len(parts), parts[0].size
            # Row k of every part belongs to cone k: bring the rows of one cone together.
            order = np.arange(depth * n_cone).reshape(depth, n_cone).T.ravel()
            stacked = sparse.vstack([self._matrix(part) for part in parts], format="csr")
            matrices.append(-stacked[order])
            constants.append(np.concatenate([part.constant for part in parts])[order])
            sizes.append(np.full(n_cone, depth, dtype=np.int64))
            slices[name] = slice(position, position + depth * n_cone)
            position += depth * n_cone
        if position == 0:
            return sparse.csr_array((0, self._size)), np.zeros(0), np.zeros(0, np.int64), slices
        matrix = _without_zeros(sparse.csr_array(sparse.vstack(matrices, format="csr")))
        return matrix, np.concatenate(constants), np.concatenate(sizes), slices


def _exchanged(
    base: FloatArray, slices: dict[str, slice], values: Values | None, constant: FloatArray | None = None
) -> FloatArray:
    """Return a copy of ``base`` with the named blocks exchanged, less the constants where there are any."""
    if not values:
        return base
    result = base.copy()
    for name, value in values.items():
        result[slices[name]] = value if constant is None else value - constant[slices[name]]
    return result


def _widened(matrix: sparse.csr_array, n_column: int) -> sparse.csr_array:
    """Return the matrix with empty columns added on the right."""
    if matrix.shape[1] == n_column:
        return matrix
    return sparse.csr_array((matrix.data, matrix.indices, matrix.indptr), shape=(matrix.shape[0], n_column))


def _constants(blocks: dict[str, tuple[Affine, FloatArray]]) -> FloatArray:
    return np.concatenate([np.zeros(0), *(left.constant for left, _ in blocks.values())])


def _without_zeros(matrix: sparse.csr_array) -> sparse.csr_array:
    matrix.sum_duplicates()
    matrix.eliminate_zeros()
    return matrix
