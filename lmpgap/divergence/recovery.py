"""Which constraints explain posted congestion: the smallest set whose shift factors add up to it.

Posted congestion at the nodes is, up to rounding, a combination with nonnegative shadow prices of the columns of the
constraints that bound in the operator's dispatch; few of very many. With both directions of a constraint as one column
of free sign, nonnegativity is the choice of direction, and the search is for the sparsest least-squares fit. It grows
sets one constraint at a time, keeps the best few of each size (a single greedy path can start on a column that
resembles the sum of two others and never come back), and stops at the first size whose rest is within the rounding.

The reference of the posted components need not be known: another reference adds a multiple of the delivery factors to
every congestion column, so that direction is fitted freely.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from lmpgap.scenario.network import BoolArray, FloatArray, IntArray

_BEAM = 12
"""Sets that are kept of each size; on 118 buses 4 already find all of four random constraints."""

_TWIN = 1e-4
"""Sine of the angle between a column and the others of its set below which it counts as made of them [-]: a
coefficient fitted in spite of that would be the rounding times ten thousand."""


@dataclass(frozen=True, kw_only=True)
class SparseFit:
    """A set of columns that explains posted congestion.

    Attributes
    ----------
    chosen : (n_chosen,)
        Positions of the columns, largest effect first.
    coefficient : (n_chosen,)
        Fitted, of either sign [$/MWh].
    free : (n_free,)
        Coefficients of the free columns.
    rest : (n_node,)
        What is not explained [$/MWh].
    explained : bool
        True when the rest is within the tolerance at every node.
    alike : (n_chosen,) of tuples
        For each chosen column the other columns that could take its place with the rest still within the tolerance:
        these data cannot tell them apart.
    """

    chosen: IntArray
    coefficient: FloatArray
    free: FloatArray
    rest: FloatArray
    explained: bool
    alike: tuple[tuple[int, ...], ...]


def sparse_fit(
    posted: FloatArray,
    columns: FloatArray,
    free: FloatArray,
    tolerance: float,
    *,
    most: int = 8,
    first: Sequence[int] = (),
    close: float = 0.0,
) -> SparseFit:
    """Return the smallest set of columns that explains posted congestion within a tolerance.

    Parameters
    ----------
    posted : (n_node,)
        Congestion components [$/MWh].
    columns : (n_column, n_node)
        Congestion per unit of coefficient.
    free : (n_free, n_node)
        Columns that may take any coefficient: the delivery factors.
    tolerance
        Largest rest at a node that rounding accounts for [$/MWh].
    most
        Largest size of a set.
    first
        A set to be tried first, such as that of the interval before; it is taken if it explains and none of its members
        is idle.

    close
        Largest rest with which a set will do if none explains [$/MWh].

    Returns
    -------
    SparseFit
        If no set up to ``most`` explains, the smallest one with a rest of at most ``close``, and if there is none
        either, the largest for which every member halves the rest on average.
    """
    problem = _Problem(posted, columns, free, tolerance)
    if first:
        tried = problem.fit(tuple(first))
        if tried.worst <= tolerance and not tried.idle:
            return problem.finished(tried)
    best = [problem.fit(())]
    beam = best
    while best[-1].worst > tolerance and len(best) <= min(most, problem.usable.size):
        beam = problem.grow(beam)
        if not beam:
            break
        explaining = [fit for fit in beam if fit.worst <= tolerance]
        best.append(min(explaining, key=lambda fit: fit.squares) if explaining else beam[0])
    if best[-1].worst <= tolerance:
        return problem.finished(problem.without_idle(best[-1]))
    near = [fit for fit in best if fit.worst <= close]
    if near:
        return problem.finished(near[0])
    return problem.finished(min(best, key=lambda fit: fit.squares * 4.0 ** len(fit.members)))


@dataclass(frozen=True)
class _Fit:
    members: tuple[int, ...]
    coefficient: FloatArray
    rest: FloatArray
    basis: FloatArray
    squares: float
    worst: float
    idle: bool


class _Problem:
    """Columns with the free directions taken out, and fits of sets of them."""

    def __init__(self, posted: FloatArray, columns: FloatArray, free: FloatArray, tolerance: float) -> None:
        self.posted, self.columns, self.free, self.tolerance = posted, columns, free, tolerance
        self._space = np.linalg.qr(free.T)[0]
        self.target = self._outside(posted[None, :])[0]
        projected = self._outside(columns)
        norm = np.linalg.norm(projected, axis=1)
        # A column that is all but a multiple of the free ones moves no price relative to another.
        self.usable = np.flatnonzero(norm > 1e-6 * np.linalg.norm(columns, axis=1).max(initial=1e-300))
        self.norm = norm
        self.unit = np.zeros_like(projected)
        self.unit[self.usable] = projected[self.usable] / norm[self.usable, None]

    def _outside(self, rows: FloatArray) -> FloatArray:
        return np.asarray(rows - (rows @ self._space) @ self._space.T)

    def fit(self, members: tuple[int, ...]) -> _Fit:
        """Return the least-squares fit of one set."""
        a = self.unit[list(members)].T
        basis, triangle = np.linalg.qr(a)
        # Twins in one set have no coefficients of their own; such a set explains nothing.
        if np.min(np.abs(np.diag(triangle)), initial=1.0) < _TWIN:
            return _Fit(members, np.zeros(len(members)), self.target, basis, np.inf, np.inf, True)
        along = basis.T @ self.target
        rest = self.target - basis @ along
        scaled = np.linalg.solve(triangle, along)
        return _Fit(
            members=members,
            coefficient=scaled / self.norm[list(members)],
            rest=rest,
            basis=basis,
            squares=float(rest @ rest),
            worst=float(np.max(np.abs(rest), initial=0.0)),
            # Idle: its whole effect is within the rounding.
            idle=bool((np.abs(scaled) * np.max(np.abs(a), axis=0, initial=0.0) <= self.tolerance).any()),
        )

    def reduction(self, fit: _Fit) -> FloatArray:
        """Return by how much each further column would reduce the sum of squares, (n_column,)."""
        left = 1.0 - np.sum((self.unit @ fit.basis) ** 2, axis=1)
        gain = (self.unit @ fit.rest) ** 2 / np.maximum(left, 1e-12)
        blocked = left < _TWIN**2
        blocked[list(fit.members)] = True
        usable = np.zeros(left.size, dtype=bool)
        usable[self.usable] = True
        return np.where(blocked | ~usable, 0.0, gain)

    def grow(self, beam: list[_Fit]) -> list[_Fit]:
        """Return the best sets with one column more, best first."""
        sets: dict[frozenset[int], float] = {}
        for fit in beam:
            gain = self.reduction(fit)
            for column in self._different(np.argsort(-gain, kind="stable"), gain):
                key = frozenset((*fit.members, column))
                sets[key] = max(sets.get(key, -np.inf), -(fit.squares - float(gain[column])))
        ranked = sorted(sets, key=lambda key: (-sets[key], sorted(key)))[:_BEAM]
        return sorted((self.fit(tuple(sorted(key))) for key in ranked), key=lambda fit: fit.squares)

    def _different(self, order: IntArray, gain: FloatArray) -> list[int]:
        """Return the leading columns, twins of one already taken left out so that they do not fill the beam."""
        taken: list[int] = []
        for column in order[: 4 * _BEAM]:
            if gain[column] <= 0.0 or len(taken) == _BEAM:
                break
            if not taken or np.max(np.abs(self.unit[taken] @ self.unit[column])) < 1.0 - 1e-9:
                taken.append(int(column))
        return taken

    def without_idle(self, fit: _Fit) -> _Fit:
        """Return the fit without members that it does not need."""
        for member in sorted(fit.members, key=lambda m: abs(fit.coefficient[fit.members.index(m)]) * self.norm[m]):
            smaller = self.fit(tuple(m for m in fit.members if m != member))
            if smaller.worst <= self.tolerance:
                fit = smaller
        return fit

    def alternatives(self, fit: _Fit) -> tuple[tuple[int, ...], ...]:
        """Return for each member the columns that could replace it."""
        found = []
        # A rest of `tolerance` everywhere would have this sum of squares; a cheap screen before the exact test.
        screen = max(self.tolerance**2 * self.target.size, 4.0 * fit.squares)
        for member in fit.members:
            others = self.fit(tuple(m for m in fit.members if m != member))
            near = np.flatnonzero(others.squares - self.reduction(others) <= screen)
            found.append(
                tuple(
                    int(column)
                    for column in near
                    if column != member and self.fit((*others.members, int(column))).worst <= self.tolerance
                )
            )
        return tuple(found)

    def finished(self, fit: _Fit) -> SparseFit:
        """Return the fit in terms of the original columns."""
        members = np.array(fit.members, dtype=np.int64)
        explained = fit.worst <= self.tolerance
        alike = self.alternatives(fit) if explained else tuple(() for _ in fit.members)
        order = np.argsort(-np.abs(fit.coefficient) * self.norm[members], kind="stable")
        left = self.posted - fit.coefficient @ self.columns[members]
        free = np.asarray(np.linalg.lstsq(self.free.T, left, rcond=None)[0], dtype=float)
        return SparseFit(
            chosen=members[order],
            coefficient=fit.coefficient[order],
            free=free,
            rest=fit.rest,
            explained=explained,
            alike=tuple(alike[i] for i in order),
        )


def choose_among_alike(fit: SparseFit, loading: FloatArray) -> tuple[IntArray, BoolArray]:
    """Return the members to name, each the most loaded of those that cannot be told apart, and whether it was in doubt.

    Parameters
    ----------
    loading : (n_column,)
        Size of the loading of each column's constraint; ``nan`` where it is not known.
    """
    size = np.nan_to_num(np.abs(loading), nan=0.0)
    named: list[int] = []
    for chosen, others in zip(fit.chosen.tolist(), fit.alike, strict=True):
        # Two members of one set never go by the same name.
        open_to = [j for j in (chosen, *others) if j == chosen or j not in (*named, *fit.chosen)]
        # The fitted one comes first, so it stays where none is loaded more.
        named.append(open_to[int(np.argmax(size[open_to]))])
    return np.array(named, dtype=np.int64), np.array([len(others) > 0 for others in fit.alike], dtype=bool)
