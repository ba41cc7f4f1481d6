"""Whether the prices are the only ones that this dispatch admits, and the interval they may lie in if not.

At a degenerate solution (an offer exactly used up, a limit that is just reached) the optimality conditions admit a
whole polyhedron of multipliers, and the solver reports one of its points. With g the gradient of the cost and J the
gradients of equations and active limits at the solution, the polyhedron is

    g + J' z = 0,     z >= 0 on the limits

and the price at a bus may be anything between the smallest and the largest entry of z at its balance. The test is
on prices and not on multipliers as a whole: two identical parallel branches at their limit have shadow prices that
are not unique and prices that are.

Every admissible z is the solver's z plus a combination of directions N with J' N = 0, or nearly so at a solution that
is one only nearly. Mostly a bound shows that there is none (`lmpgap.prices.regular`). Otherwise the screen finds these
directions, and if they move prices, two linear programs per direction in which they do, in as few variables as there
are directions, give the interval.

Notes
-----
In a linear program the ends of the interval are the one-sided derivatives of the cost in the load: "A Note on Shadow
Prices in Linear Programming", Journal of the Operational Research Society 35(5), 1984. In the nonlinear formulations
the polyhedron is that of the linearisation at the solution, which is the set of multipliers itself.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from lmpgap.dispatch.result import StationaritySystem
from lmpgap.errors import NumericalError
from lmpgap.prices.components import multiplier_to_price
from lmpgap.prices.null_space import left_null_space
from lmpgap.prices.regular import independence
from lmpgap.scenario.network import BoolArray, FloatArray
from lmpgap.tolerances import DEFAULT_TOLERANCES, Tolerances

_NO_PART = 1e-6
"""A row whose entry in the directions is smaller than this, relative to the largest, has no part in them: what stands
there is the error of a gradient at an approximate solution."""


_ROUNDING = 1e-10
"""Directions are of length one in normalised rows; what they leave of the gradients below this is rounding."""


@dataclass(frozen=True, kw_only=True)
class PriceIntervals:
    """What the optimality conditions say about each price.

    Attributes
    ----------
    low, high : (n_bus,)
        Smallest and largest price [$/MWh]; equal where the price is unique, infinite where nothing bounds it, ``nan``
        at dead buses.
    unique : (n_bus,)
        True where there is only one price; False at dead buses.
    ratio : float
        Smallest over largest singular value of the normalised active gradients [-]: how near to degenerate. Where
        a bound on it settled the question, an estimate that is right to a factor of about two.
    n_direction : int
        Directions in which multipliers are free to move; not all of them move prices.
    """

    low: FloatArray
    high: FloatArray
    unique: BoolArray
    ratio: float
    n_direction: int

    @property
    def all_unique(self) -> bool:
        """Whether every live bus has only one price."""
        return bool(np.all(self.unique | np.isnan(self.low)))


def price_intervals(
    stationarity: StationaritySystem, base_mva: float, tolerances: Tolerances = DEFAULT_TOLERANCES
) -> PriceIntervals:
    """Return the interval in which each price may lie.

    Parameters
    ----------
    stationarity
        Active gradients at the solution with the solver's multipliers.
    base_mva
        [MVA]
    tolerances
        ``rank_ratio`` decides what counts as degenerate, ``interval_width`` from which width on an interval is
        reported.

    Raises
    ------
    NumericalError
        When the interval search fails.
    """
    live = stationarity.balance_rows >= 0
    price = np.full(live.size, np.nan)
    price[live] = multiplier_to_price(stationarity.multipliers[stationarity.balance_rows[live]], base_mva)
    bound, estimate = independence(stationarity.jacobian, stationarity.free, tolerances.rank_ratio)
    if bound >= tolerances.rank_ratio:
        return PriceIntervals(low=price, high=price.copy(), unique=live, ratio=estimate, n_direction=0)
    reduced = _merge_bounds(stationarity)
    found = left_null_space(reduced.jacobian, tolerances.rank_ratio)
    z, rows = reduced.multipliers, reduced.balance_rows
    low, high = price.copy(), price.copy()
    directions = found.basis
    size = np.linalg.norm(directions, axis=1)
    has_part = size > _NO_PART * np.max(size, initial=0.0)
    moving = np.flatnonzero(live & has_part[rows])
    left_open = np.abs(reduced.gradient + reduced.jacobian.T @ z)
    residual = np.max(left_open, initial=0.0) / base_mva
    if moving.size:
        limits = np.flatnonzero(has_part & ~reduced.free)
        # A direction that only nearly vanishes breaks stationarity when it is followed far: for each variable it may
        # do so by the floor, or by ten times what the solution itself leaves open.
        drift = np.abs(reduced.jacobian.T @ directions)
        allowed = np.maximum(base_mva * tolerances.stationarity_floor, 10.0 * left_open)
        with np.errstate(divide="ignore"):
            farthest = np.min(allowed[:, None] / drift, axis=0)
        near = np.flatnonzero(np.max(drift, axis=0) > _ROUNDING)
        box = np.eye(directions.shape[1])[near]
        sides = np.vstack([directions[limits], box, -box])
        slack = np.concatenate([z[limits], farthest[near], farthest[near]])
        if directions.shape[1] > 1:
            moving = moving[_may_move(directions[rows[moving]], sides, slack, base_mva * tolerances.interval_width)]
        down, up = _reach(directions[rows[moving]], sides, slack)
        low[moving] += multiplier_to_price(down, base_mva)
        high[moving] += multiplier_to_price(up, base_mva)
    # Below this width an interval says no more than the solver's own accuracy.
    wide = high - low > max(tolerances.interval_width, 1000.0 * residual)
    return PriceIntervals(
        low=np.where(wide, low, price),
        high=np.where(wide, high, price),
        unique=live & ~wide,
        ratio=found.ratio,
        n_direction=directions.shape[1],
    )


def _merge_bounds(system: StationaritySystem) -> StationaritySystem:
    """Return the system with the bounds of each variable in one row.

    A variable that cannot move stands at its lower and its upper bound, and the two multipliers can grow together
    without end. That says nothing about prices and would fill the screen with directions. Both together are one row
    without a sign.
    """
    jacobian = system.jacobian.copy()
    jacobian.sum_duplicates()
    jacobian.eliminate_zeros()
    bounds = np.flatnonzero((np.diff(jacobian.indptr) == 1) & ~system.free)
    column, entry = jacobian.indices[jacobian.indptr[bounds]], jacobian.data[jacobian.indptr[bounds]]
    _, first, which = np.unique(column, return_index=True, return_inverse=True)
    kept = bounds[first]
    upper, lower = np.zeros(kept.size, dtype=bool), np.zeros(kept.size, dtype=bool)
    upper[which[entry > 0]] = True
    lower[which[entry < 0]] = True
    multipliers = system.multipliers.copy()
    multipliers[kept] = np.bincount(which, weights=system.multipliers[bounds] * entry) / entry[first]
    free = system.free.copy()
    free[kept] = upper & lower
    keep = np.ones(free.size, dtype=bool)
    keep[np.setdiff1d(bounds, kept)] = False
    position = np.cumsum(keep) - 1
    return StationaritySystem(
        gradient=system.gradient,
        jacobian=jacobian[np.flatnonzero(keep)],
        free=free[keep],
        multipliers=multipliers[keep],
        balance_rows=np.where(system.balance_rows < 0, -1, position[system.balance_rows]),
    )


def _may_move(objective: FloatArray, limits: FloatArray, slack: FloatArray, least: float) -> BoolArray:
    """Return True where ``objective @ t`` may range over more than ``least``, from the range of each entry of t."""
    down, up = _reach(np.eye(objective.shape[1]), limits, slack)
    reach = np.where(objective == 0.0, 0.0, np.abs(objective) * (up - down)[None, :])
    return np.asarray(reach.sum(axis=1) > least)


def _reach(objective: FloatArray, limits: FloatArray, slack: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Return smallest and largest ``objective @ t`` over ``limits @ t + slack >= 0``, row by row.

    Parameters
    ----------
    objective : (n_objective, n_direction)
    limits : (n_limit, n_direction)
    slack : (n_limit,)
        The solver's multipliers; negative ones are its error and count as zero, so that t = 0 is admissible.
    """
    # Rows to unit length, and rows that are multiples of one another solved once.
    length = np.linalg.norm(objective, axis=1)
    ray = objective / length[:, None]
    lead = ray[np.arange(ray.shape[0]), np.argmax(np.abs(ray), axis=1)]
    sign = np.sign(lead)
    distinct, which = np.unique(np.round(ray * sign[:, None], 9), axis=0, return_inverse=True)
    which = which.reshape(-1)
    limit_length = np.linalg.norm(limits, axis=1)
    limits = limits / limit_length[:, None]
    slack = np.maximum(slack, 0.0) / limit_length
    scale = max(float(np.max(slack, initial=0.0)), 1.0)
    ends = np.array(
        [[_largest(side * row, limits, slack / scale) * scale for side in (-1, 1)] for row in distinct]
    ).reshape(-1, 2)
    below, above = -ends[which, 0], ends[which, 1]
    down = length * np.where(sign > 0, below, -above)
    up = length * np.where(sign > 0, above, -below)
    return np.minimum(down, 0.0), np.maximum(up, 0.0)


def _largest(direction: FloatArray, limits: FloatArray, slack: FloatArray) -> float:
    """Return the largest ``direction @ t`` over ``limits @ t + slack >= 0``; infinite where nothing bounds it."""
    if direction.size == 1:
        # One direction: the nearest limit in its way.
        pull = limits[:, 0] * np.sign(direction[0])
        against = pull < 0.0
        step = np.min(-slack[against] / pull[against], initial=np.inf)
        return float(np.abs(direction[0]) * step)
    # Here, because degenerate intervals are rare and the import takes longer than ten regular ones.
    from scipy.optimize import linprog

    answer = linprog(
        -direction, A_ub=-limits, b_ub=slack, bounds=(None, None), method="highs-ds", options={"presolve": False}
    )
    if answer.status == 3:
        return float("inf")
    if answer.status != 0:
        raise NumericalError(f"the search for the price interval failed: {answer.message}")
    return float(-answer.fun)
