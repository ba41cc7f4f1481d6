"""Which constraints stand behind the posted congestion, interval by interval, and what no constraint explains."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace

import numpy as np
import pandas as pd
from scipy import sparse

from lmpgap.divergence.candidates import Candidates
from lmpgap.divergence.operating_points import OperatingPoints
from lmpgap.divergence.price_set import PriceSet
from lmpgap.divergence.recovery import SparseFit, choose_among_alike, sparse_fit
from lmpgap.scenario.network import FloatArray, IntArray
from lmpgap.tolerances import DEFAULT_TOLERANCES, Tolerances

MODEL_DIFFERENCE = 0.05
"""Share of an interval's largest congestion that may be left everywhere before it is a finding [-]: congestion from
linear shift factors and from those of an AC operating point differ by a few percent. A rest at few nodes while all
others are met to the cent is a finding whatever its size."""

SMALLEST = 0.05
"""Congestion below this is not worth a finding [$/MWh]: posted figures are rounded to cents, and operating points
rebuilt from voltages repeat the flows of a cone solver to a few more."""

SMALLEST_SHARE = 0.02
"""The same for a single constraint, as a share of the interval's largest congestion [-]: small constraints are fitted
to the difference between this operating point and the operator's."""

FEW_NODES = 0.1
"""Share of the nodes that may be wrong in themselves while constraints explain all others [-]."""

AT_LIMIT = 0.9
"""Share of the limit from which a constraint counts as loaded when reasons for congestion are sought [-]; the
operator's dispatch and the operating point here need not agree to the megawatt."""

NOT_CREDIBLE = 0.7
"""A constraint loaded less than this in either direction cannot have bound [-]."""

RECOVERED_COLUMNS = [
    "interval_start", "constraint", "kind", "contingency", "monitored", "direction", "shadow_price", "largest_effect",
    "largest_at", "loading", "flow", "alike", "rest", "explained",
]  # fmt: skip


SEPARATOR = "; "
"""Between the names of constraints that cannot be told apart."""


@dataclass(frozen=True, kw_only=True)
class Explanation:
    """What explains the posted congestion of all intervals.

    Attributes
    ----------
    recovered : DataFrame
        One row per interval and constraint: `RECOVERED_COLUMNS`. ``shadow_price`` [$/MWh], ``largest_effect`` on a node
        (signed, at node ``largest_at``) [$/MWh], ``loading`` of the operating point [-] and ``flow`` [MW or MVA], both
        negative against the forward direction, ``alike``: constraints that explain as well (`SEPARATOR` between
        them), ``rest``: largest
        unexplained congestion of the interval [$/MWh], ``explained``: whether that is within the rounding.
    rest : (n_interval, n_node)
        Unexplained congestion [$/MWh]; ``nan`` where it was not looked at.
    noise : (n_interval,)
        Rest that is nothing to speak of: rounding, or the general difference between this operating point and the
        operator's [$/MWh].
    formulation : (n_interval,) of str
        Operating point that was used; empty where none was known.
    """

    recovered: pd.DataFrame
    rest: FloatArray
    noise: FloatArray
    formulation: tuple[str, ...]


def explain_congestion(
    posted: PriceSet,
    mix: sparse.csr_array,
    points: Mapping[str, OperatingPoints],
    tolerances: Tolerances = DEFAULT_TOLERANCES,
    *,
    probes: int = 10,
) -> Explanation:
    """Return the constraints that explain posted congestion.

    Parameters
    ----------
    posted
        Posted prices of the nodes; intervals as in ``points``.
    mix : sparse (n_node, n_bus)
        What each node is made of.
    points
        Operating points by formulation. Of their own shift factors, and the linear ones at the flows of a nonlinear
        one, those that explain the hours of largest congestion best are used throughout.
    probes
        Hours on which that is tried.
    """
    # Congestion is off by its rounding, and the fit spreads what it cannot meet over the other nodes.
    tolerance = 2.0 * tolerances.posted_rounding
    n_interval = posted.n_interval
    rest = np.full(posted.lmp.shape, np.nan)
    noise = np.full(n_interval, SMALLEST)
    exact, met, congested = (np.zeros(n_interval, dtype=bool) for _ in range(3))
    used = [""] * n_interval
    rows: list[tuple[object, ...]] = []
    tried = [*points.values(), *(p.with_linear_factors() for p in points.values() if p.formulation != "dc-loss")]
    chosen = _best_points(posted, mix, tried, tolerance, probes)
    if chosen is None:
        return Explanation(recovered=_recovered_table(rows), rest=rest, noise=noise, formulation=tuple(used))
    before: tuple[tuple[str, str, str], ...] = ()
    for position in range(n_interval):
        if not chosen.known(position):
            continue
        used[position] = chosen.name
        problem = _interval(posted, mix, chosen, position)
        if problem is None:
            continue
        fit = problem.explain(tolerance, before)
        rest[position, problem.nodes] = fit.rest
        exact[position] = fit.explained
        general = max(6.0 * float(np.median(np.abs(fit.rest))), MODEL_DIFFERENCE * problem.size)
        noise[position] = max(SMALLEST, general)
        met[position] = float(np.quantile(np.abs(fit.rest), 1.0 - FEW_NODES)) <= tolerance
        congested[position] = problem.size > SMALLEST
        told = problem.rows(fit, posted)
        before = tuple((str(row[2]), str(row[3]), str(row[4])) for row in told)
        rows += told
    # Where most hours are met to the cent this is the operator's own point, and a rest at few nodes is theirs.
    if np.count_nonzero(exact & congested) > 0.5 * np.count_nonzero(congested):
        noise[exact | met] = SMALLEST
    return Explanation(recovered=_recovered_table(rows), rest=rest, noise=noise, formulation=tuple(used))


@dataclass(frozen=True, kw_only=True)
class _Interval:
    """The recovery problem of one interval."""

    start: pd.Timestamp
    nodes: IntArray
    congestion: FloatArray
    mix: sparse.csr_array
    free: FloatArray
    candidates: Candidates

    def columns(self, candidates: IntArray) -> FloatArray:
        """Return the effect of candidates on the nodes, without their share along the delivery factors.

        That share is a matter of the reference, and fitted freely; without it an effect can be read as such.
        """
        at_nodes = (self.mix @ self.candidates.columns(candidates).T).T
        factor = self.free[0]
        return np.asarray(at_nodes - np.outer(at_nodes @ factor / (factor @ factor), factor))

    def explain(self, tolerance: float, before: tuple[tuple[str, str, str], ...]) -> SparseFit:
        """Return the explanation by loaded constraints if there is one, else by any."""
        keys = list(zip(self.candidates.kind, self.candidates.contingency, self.candidates.monitored, strict=True))
        where = {key: i for i, key in enumerate(keys)}
        first = tuple(where[key] for key in before if key in where) if len(before) > 0 else ()
        loaded = np.flatnonzero(np.abs(self.candidates.loading) >= AT_LIMIT)
        first_loaded = tuple(int(np.searchsorted(loaded, k)) for k in first if k in loaded)
        if len(first_loaded) != len(first):
            first_loaded = ()
        close = MODEL_DIFFERENCE * self.size
        fit = _widened(
            sparse_fit(self.congestion, self.columns(loaded), self.free, tolerance, first=first_loaded, close=close),
            loaded,
        )
        if fit.explained:
            return fit
        apart = self._but_few_nodes(fit, tolerance)
        if apart is not None:
            return apart
        if np.max(np.abs(fit.rest)) <= close:
            return fit
        every = np.arange(self.candidates.n_candidate)
        wide = sparse_fit(self.congestion, self.columns(every), self.free, tolerance, close=close)
        # Enough constraints that do not bind fit anything; few that leave much less are worth telling.
        much_better = np.max(np.abs(wide.rest)) < 0.25 * np.max(np.abs(fit.rest))
        return wide if much_better and wide.chosen.size <= fit.chosen.size + 2 else fit

    @property
    def size(self) -> float:
        """Largest congestion of the interval [$/MWh]."""
        return float(np.max(np.abs(self.congestion), initial=0.0))

    def _but_few_nodes(self, fit: SparseFit, tolerance: float) -> SparseFit | None:
        """Return the same constraints fitted to all nodes but a few, if that explains the others."""
        columns = np.vstack([self.columns(fit.chosen), self.free])
        kept = np.arange(self.nodes.size)
        rest = fit.rest
        for _ in range(int(FEW_NODES * self.nodes.size)):
            kept = np.delete(kept, np.argmax(np.abs(rest[kept])))
            coefficient = np.linalg.lstsq(columns[:, kept].T, self.congestion[kept], rcond=None)[0]
            rest = self.congestion - coefficient @ columns
            if np.max(np.abs(rest[kept])) <= tolerance:
                size = fit.chosen.size
                return replace(
                    fit, coefficient=np.asarray(coefficient[:size]), free=np.asarray(coefficient[size:]), rest=rest
                )
        return None

    def rows(self, fit: SparseFit, posted: PriceSet) -> list[tuple[object, ...]]:
        """Return the rows of the recovered constraints."""
        candidates = self.candidates
        told: list[tuple[object, ...]] = []
        named, _ = choose_among_alike(fit, candidates.loading)
        worst = float(np.max(np.abs(fit.rest), initial=0.0))
        needed = sorted({*fit.chosen.tolist(), *named.tolist(), *(j for group in fit.alike for j in group)})
        column = dict(zip(needed, self.columns(np.array(needed, dtype=np.int64)), strict=True))
        for member, chosen, coefficient, alike in zip(named, fit.chosen, fit.coefficient, fit.alike, strict=True):
            # What is named instead has the effect of what was fitted, with its own shadow price.
            effect = coefficient * column[int(chosen)]
            own = column[int(member)]
            scaled = coefficient if member == chosen else float(own @ effect / (own @ own))
            forward = scaled >= 0.0
            top = int(np.argmax(np.abs(effect - effect.mean())))
            others = [
                candidates.name(int(j), float(column[j] @ effect) >= 0.0)
                for j in sorted({int(chosen), *alike} - {int(member)})
            ]
            told.append(
                (
                    self.start,
                    candidates.name(int(member), forward),
                    candidates.kind[member],
                    candidates.contingency[member],
                    candidates.monitored[member],
                    "forward" if forward else "reverse",
                    candidates.shadow_price(int(member), scaled),
                    float(effect[top]),
                    str(posted.buses[self.nodes[top]]),
                    float(candidates.loading[member]),
                    float(candidates.flow_mw[member]),
                    SEPARATOR.join(others),
                    worst,
                    fit.explained,
                )
            )
        return told


def _widened(fit: SparseFit, positions: IntArray) -> SparseFit:
    """Return a fit on some of the columns in terms of all."""
    return SparseFit(
        chosen=positions[fit.chosen],
        coefficient=fit.coefficient,
        free=fit.free,
        rest=fit.rest,
        explained=fit.explained,
        alike=tuple(tuple(int(positions[j]) for j in group) for group in fit.alike),
    )


def _interval(posted: PriceSet, mix: sparse.csr_array, points: OperatingPoints, position: int) -> _Interval | None:
    candidates, factor = points.candidates(position)
    congestion = posted.congestion[position]
    node_factor = mix @ np.nan_to_num(factor)
    nodes = np.flatnonzero(np.isfinite(congestion) & np.isfinite(node_factor) & (node_factor != 0.0))
    if nodes.size < 3 or candidates.n_candidate == 0:
        return None
    return _Interval(
        start=posted.intervals[position],
        nodes=nodes,
        congestion=congestion[nodes],
        mix=sparse.csr_array(mix[nodes]),
        free=node_factor[nodes][None, :],
        candidates=candidates,
    )


def _best_points(
    posted: PriceSet, mix: sparse.csr_array, points: Sequence[OperatingPoints], tolerance: float, probes: int
) -> OperatingPoints | None:
    """Return the operating points that leave the least congestion unexplained in the most congested intervals."""
    if len(points) <= 1:
        return next(iter(points), None)
    size = np.nanmax(np.where(np.isfinite(posted.congestion), np.abs(posted.congestion), 0.0), axis=1)
    tried = [
        position
        for position in np.argsort(-size, kind="stable").tolist()
        if size[position] > tolerance and all(each.known(position) for each in points)
    ][:probes]
    if not tried:
        return points[0]

    def left(each: OperatingPoints) -> float:
        total = 0.0
        for position in tried:
            problem = _interval(posted, mix, each, position)
            if problem is not None:
                total += float(np.median(np.abs(problem.explain(tolerance, ()).rest)))
        return total

    return min(points, key=left)


def _recovered_table(rows: list[tuple[object, ...]]) -> pd.DataFrame:
    table = pd.DataFrame(rows, columns=RECOVERED_COLUMNS)
    text = ["constraint", "kind", "contingency", "monitored", "direction", "largest_at", "alike"]
    number = ["shadow_price", "largest_effect", "loading", "flow", "rest"]
    table = table.astype({**dict.fromkeys(text, "str"), **dict.fromkeys(number, "float64"), "explained": "bool"})
    table["interval_start"] = pd.to_datetime(table["interval_start"], utc=True).astype("datetime64[us, UTC]")
    return table
