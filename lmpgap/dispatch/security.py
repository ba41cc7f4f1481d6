"""Security-constrained dispatch: add the violated contingency pairs until none is left.

Works with every formulation: a solve, one vectorised screening pass over all pairs, the worst violated pairs as
additional limits, and again. Which pairs are added depends on this interval alone, so that a result never depends
on what was solved before.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from lmpgap.dispatch.formulation import DraftedFormulation, Formulation
from lmpgap.dispatch.limits import FlowLimits
from lmpgap.dispatch.outage_factors import OutageFactors, ViolatedPairs
from lmpgap.dispatch.result import DispatchResult
from lmpgap.scenario.network import IntArray, IntervalInputs
from lmpgap.tolerances import Tolerances

_NAMED = 10
"""Contingencies that a note names."""


def solve_secure(
    formulation: Formulation,
    inputs: IntervalInputs,
    base_limits: FlowLimits,
    outages: OutageFactors,
    tolerances: Tolerances,
    start: DispatchResult | None = None,
) -> tuple[DispatchResult, FlowLimits]:
    """Solve one interval so that no monitored flow exceeds its emergency rating after any contingency.

    Parameters
    ----------
    base_limits
        Limits that hold from the beginning, e.g. interfaces.
    start
        Starting point of a nonlinear solve. Contingency pairs that bind there are limits from the beginning,
        which saves rounds.

    Returns
    -------
    result, limits
        The last solve, with a note on the rounds and pairs added, and all limits it was solved with. When the
        bound on rounds is reached with violated pairs left, the note says so and names the worst.
    """
    limits = base_limits
    added = 0
    known: set[tuple[int, int, int]] = set()
    notes = _splitting_note(outages.splitting)
    if start is not None and start.status.has_solution:
        pairs = _not_known(outages.screen(start.point.p_from, -tolerances.active_slack_mw), known)
        pairs = _worst(pairs, tolerances.pairs_per_round)
        limits, added = _extend(limits, outages, pairs, known, inputs), pairs.n_pair
    stage = _Stages(formulation, inputs, start)
    result = stage.solve(limits)
    for round_number in range(1, tolerances.security_rounds + 1):
        if not result.status.has_solution:
            break
        pairs = _violated(outages, result, known, tolerances)
        if pairs.n_pair == 0 and not stage.finished:
            result = stage.finish(result, limits)
            if not result.status.has_solution:
                break
            pairs = _violated(outages, result, known, tolerances)
        if pairs.n_pair == 0:
            notes += (f"contingencies: {added} pairs enforced after {round_number} round(s)",) if added else ()
            break
        if round_number == tolerances.security_rounds:
            notes += (
                f"contingencies: {pairs.n_pair} pairs still violated after {round_number} rounds, "
                f"by up to {pairs.excess.max():.4g} pu",
            )
            result = stage.finish(result, limits)
            break
        limits, added = _extend(limits, outages, pairs, known, inputs), added + pairs.n_pair
        result = stage.solve(limits)
    return (
        replace(
            result,
            solver_seconds=stage.solver_seconds,
            total_seconds=stage.total_seconds,
            notes=result.notes + notes,
        ),
        limits,
    )


class _Stages:
    """Solves of one interval; where a formulation has drafts, only the last of them is finished."""

    def __init__(self, formulation: Formulation, inputs: IntervalInputs, start: DispatchResult | None) -> None:
        self._formulation, self._inputs, self._start = formulation, inputs, start
        self.finished = True
        self.solver_seconds = self.total_seconds = 0.0

    def solve(self, limits: FlowLimits) -> DispatchResult:
        if isinstance(self._formulation, DraftedFormulation):
            result = self._formulation.draft(self._inputs, limits)
            self.finished = False
        else:
            result = self._formulation.solve(self._inputs, limits, self._start)
        self._spent(result, 1.0)
        return result

    def finish(self, draft: DispatchResult, limits: FlowLimits) -> DispatchResult:
        if self.finished or not isinstance(self._formulation, DraftedFormulation):
            return draft
        result = self._formulation.finish(draft, self._inputs, limits)
        self.finished = True
        self._spent(draft, -1.0)
        self._spent(result, 1.0)
        return result

    def _spent(self, result: DispatchResult, sign: float) -> None:
        self.solver_seconds += sign * result.solver_seconds
        self.total_seconds += sign * result.total_seconds


def _violated(
    outages: OutageFactors, result: DispatchResult, known: set[tuple[int, int, int]], tolerances: Tolerances
) -> ViolatedPairs:
    """Return the worst violated pairs that are not enforced yet."""
    violated = outages.screen(result.point.p_from, tolerances.security_excess)
    return _worst(_not_known(violated, known), tolerances.pairs_per_round)


def _splitting_note(names: tuple[str, ...]) -> tuple[str, ...]:
    """Return one sentence about the contingencies that no outage factor describes; names of the first few."""
    if not names:
        return ()
    more = f" and {len(names) - _NAMED} more" if len(names) > _NAMED else ""
    return (f"not enforced, would split the network in this interval: {', '.join(names[:_NAMED])}{more}",)


def _extend(
    limits: FlowLimits,
    outages: OutageFactors,
    pairs: ViolatedPairs,
    known: set[tuple[int, int, int]],
    inputs: IntervalInputs,
) -> FlowLimits:
    if pairs.n_pair == 0:
        return limits
    known.update(_keys(pairs))
    return FlowLimits.concatenate([limits, outages.limits(pairs)], inputs.branch_in_service.size)


def _keys(pairs: ViolatedPairs) -> list[tuple[int, int, int]]:
    return list(zip(pairs.contingency.tolist(), pairs.monitored.tolist(), pairs.sign.tolist(), strict=True))


def _not_known(pairs: ViolatedPairs, known: set[tuple[int, int, int]]) -> ViolatedPairs:
    """Leave out the pairs that are enforced already (soft ones may stay violated)."""
    return _take(pairs, np.array([i for i, key in enumerate(_keys(pairs)) if key not in known], dtype=np.int64))


def _worst(pairs: ViolatedPairs, most: int) -> ViolatedPairs:
    """Keep the worst few contingencies of each monitored flow, then the worst overall.

    Pairs on one flow are nearly parallel: enforcing the worst mostly mends the others.
    """
    order = np.argsort(-pairs.excess, kind="stable")
    flow = pairs.monitored[order] * 2 + (pairs.sign[order] > 0)
    rank = np.zeros(order.size, np.int64)
    by_flow = np.argsort(flow, kind="stable")
    sorted_flow = flow[by_flow]
    first = np.searchsorted(sorted_flow, sorted_flow, side="left")
    rank[by_flow] = np.arange(order.size) - first
    return _take(pairs, order[rank < 3][:most])


def _take(pairs: ViolatedPairs, rows: IntArray) -> ViolatedPairs:
    return ViolatedPairs(
        contingency=pairs.contingency[rows],
        monitored=pairs.monitored[rows],
        sign=pairs.sign[rows],
        excess=pairs.excess[rows],
    )
