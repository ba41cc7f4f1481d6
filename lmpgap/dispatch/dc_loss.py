"""The linear dispatch with self-consistent losses, ``dc-loss``.

One loss variable per lossy branch, half of it withdrawn at each end:

    loss >= k flow^2   (k flow^2 = g d^2 with d the angle across the branch)

a rotated cone, so that the program is convex and its prices carry marginal losses in one solve. The limit is on the
larger end, |flow +- loss/2|.

Where prices are negative, burning power pays and the inequality opens ("Fictitious losses in the DCOPF with a
piecewise linear approximation of losses", IEEE PES General Meeting, 2013). That is detected, and the interval is
solved again with the losses of those branches held to the physical ones (`lmpgap.dispatch.open_losses`).
"""

from __future__ import annotations

import time
from dataclasses import replace

import numpy as np

from lmpgap.dispatch.dc import DcDispatch
from lmpgap.dispatch.limits import FlowLimits
from lmpgap.dispatch.live import LiveNetwork
from lmpgap.dispatch.program_builder import Affine, ProgramBuilder
from lmpgap.dispatch.result import DispatchResult
from lmpgap.scenario.network import FloatArray, IntervalInputs, incidence


class DcLossDispatch(DcDispatch):
    """Linear dispatch with losses of one topology, see `lmpgap.dispatch.formulation.Formulation`."""

    name: str = "dc-loss"

    def solve(
        self, inputs: IntervalInputs, flow_limits: FlowLimits, start: DispatchResult | None = None
    ) -> DispatchResult:
        """Solve one interval; ``start`` is ignored.

        Where more than the tolerated loss is fictitious, the result is that of the dispatch with losses held to those
        of its own flows, and says so in ``loss_slack_open`` and ``notes``.
        """
        return self.finish(self.draft(inputs, flow_limits), inputs, flow_limits)

    def draft(self, inputs: IntervalInputs, flow_limits: FlowLimits) -> DispatchResult:
        """Return the dispatch with relaxed losses, which may be fictitious."""
        return super().solve(inputs, flow_limits)

    def finish(self, draft: DispatchResult, inputs: IntervalInputs, flow_limits: FlowLimits) -> DispatchResult:
        """Return the dispatch with physical losses: the draft itself unless it holds too much fictitious loss."""
        tolerated = self.options.tolerances.fictitious_loss_mw / self.network.base_mva
        if not draft.status.has_solution or draft.fictitious_loss <= tolerated:
            return draft
        from lmpgap.dispatch.open_losses import resolve_open_slack

        began = time.perf_counter()
        result = resolve_open_slack(self, draft, inputs, flow_limits)
        return replace(
            result,
            solver_seconds=draft.solver_seconds + result.solver_seconds,
            total_seconds=draft.total_seconds + time.perf_counter() - began,
        )

    def _voltage_profile(self) -> FloatArray | None:
        return self.options.voltage_profile

    def _loss(self, builder: ProgramBuilder, flow: Affine, live: LiveNetwork) -> Affine:
        factor = self.linear.loss_factor[live.branch]
        lossy = np.flatnonzero(factor > 0.0)
        loss = builder.variable("loss", lossy.size)
        one = Affine.fixed(np.ones(lossy.size))
        builder.rotated_cone("loss", loss, one, flow.take(lossy).scaled(np.sqrt(factor[lossy])))
        return loss.mapped(incidence(lossy, live.n_branch).T.tocsr())

    def _loss_slope(self, live: LiveNetwork, flow: FloatArray) -> FloatArray:
        # d(g d^2)/dd = 2 g d, with g d = k b^2 d = k b flow
        return 2.0 * self.linear.loss_factor[live.branch] * self.linear.susceptance[live.branch] * flow

    def _fictitious_loss(self, live: LiveNetwork, flow: FloatArray, loss: FloatArray) -> float:
        return float(np.sum(loss - self.linear.loss_factor[live.branch] * flow**2))
