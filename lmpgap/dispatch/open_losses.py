"""The linear dispatch with losses where burning power pays, so that relaxed losses leave the physical ones.

Losses relaxed to ``loss >= k flow^2`` are physical wherever a loss costs money. Where a branch is better off losing
more, as between negative prices, the inequality opens ("Fictitious losses in the DCOPF with a piecewise linear
approximation of losses", IEEE PES General Meeting, 2013), and what keeps the loss honest is the other half of the
equation, ``loss <= k flow^2``. That one is not convex; it is replaced by its tangent at the flow found last,

    loss = 2 k flow0 flow - k flow0^2  <=  k flow^2

which lies within it, and the tangent is moved until it touches: "Variations and extension of the convex-concave
procedure", Optimization and Engineering 17, 2016. All other branches keep their cones, so that near the end the
dispatch stands still by itself, nothing has to hold it in place, and its prices are those of its marginal costs.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from lmpgap.dispatch.conic import ConicProgram, ConicSolution
from lmpgap.dispatch.convex import ConvexModel, Reading
from lmpgap.dispatch.dc import DcDispatch
from lmpgap.dispatch.frozen import FrozenLossDispatch
from lmpgap.dispatch.limits import FlowLimits
from lmpgap.dispatch.live import LiveNetwork
from lmpgap.dispatch.options import DispatchOptions
from lmpgap.dispatch.program_builder import Affine, ProgramBuilder
from lmpgap.dispatch.result import DispatchResult
from lmpgap.scenario.network import BoolArray, FloatArray, IntervalInputs, Network, incidence

PASSES = 40
"""Passes of moving tangents before the best one is taken; measured: 2 to 3 suffice."""

_NEARLY = 0.005
"""Once further losses have opened, those that cost less than this share of the median price are put on tangents
before they open [-]; four times as much each time."""

SETTLED = 1e-3
"""Share of the tolerated fictitious loss at which tangents count as touching: the loss is off by k (flow - flow0)^2,
so that slope and price are then right to a thousandth of a dollar."""


class TangentLossDispatch(DcDispatch):
    """Linear dispatch in which the losses of some branches lie on a tangent, all others in their cone.

    Parameters
    ----------
    on_tangent : (n_branch,)
        True where the tangent takes the place of the cone.
    base_flow : (n_branch,)
        Where the tangents touch [pu].

    Attributes
    ----------
    loss_value : (n_branch,)
        After a solve: what one unit of loss on a branch with a tangent costs; negative where losing pays, zero on
        all other branches [$/h per pu].
    excess : (n_branch,)
        After a solve: loss beyond the physical one [pu].
    """

    name: str = "dc-loss"

    def __init__(
        self,
        network: Network,
        branch_in_service: BoolArray,
        options: DispatchOptions,
        *,
        on_tangent: BoolArray,
        base_flow: FloatArray,
    ) -> None:
        super().__init__(network, branch_in_service, options)
        self._on_tangent, self._base_flow = on_tangent, base_flow
        self.loss_value: FloatArray = np.zeros(network.n_branch)
        self.excess: FloatArray = np.zeros(network.n_branch)

    def _voltage_profile(self) -> FloatArray | None:
        return self.options.voltage_profile

    def _loss(self, builder: ProgramBuilder, flow: Affine, live: LiveNetwork) -> Affine:
        factor, base = self.linear.loss_factor[live.branch], self._base_flow[live.branch]
        lossy = np.flatnonzero(factor > 0.0)
        tangent = self._on_tangent[live.branch[lossy]]
        loss = builder.variable("loss", lossy.size)
        cone = lossy[~tangent]
        one = Affine.fixed(np.ones(cone.size))
        own = flow.take(cone).scaled(np.sqrt(factor[cone]))
        builder.rotated_cone("loss", loss.take(np.flatnonzero(~tangent)), one, own)
        on = lossy[tangent]
        slope = flow.take(on).scaled(2.0 * factor[on] * base[on])
        builder.equality("tangent", loss.take(np.flatnonzero(tangent)) - slope, -factor[on] * base[on] ** 2)
        return loss.mapped(incidence(lossy, live.n_branch).T.tocsr())

    def _loss_slope(self, live: LiveNetwork, flow: FloatArray) -> FloatArray:
        at = np.where(self._on_tangent[live.branch], self._base_flow[live.branch], flow)
        return 2.0 * (self.linear.loss_factor * self.linear.susceptance)[live.branch] * at

    def _fictitious_loss(self, live: LiveNetwork, flow: FloatArray, loss: FloatArray) -> float:
        self.excess = live.to_branches(loss - self.linear.loss_factor[live.branch] * flow**2)
        # A tangent that does not touch lies below; it must not hide what another branch burns.
        return float(np.sum(np.abs(self.excess)))

    def _read(
        self,
        model: ConvexModel,
        program: ConicProgram,
        solution: ConicSolution,
        inputs: IntervalInputs,
        flow_limits: FlowLimits,
    ) -> Reading:
        reading = super()._read(model, program, solution, inputs, flow_limits)
        branch = model.live.branch
        on = branch[self._on_tangent[branch] & (self.linear.loss_factor[branch] > 0.0)]
        self.loss_value = np.zeros(self.network.n_branch)
        self.loss_value[on] = solution.equality_dual[model.template.equalities["tangent"]]
        return reading


def resolve_open_slack(
    formulation: DcDispatch, relaxed: DispatchResult, inputs: IntervalInputs, flow_limits: FlowLimits
) -> DispatchResult:
    """Return the dispatch with physical losses, for an interval whose relaxed losses are fictitious.

    Parameters
    ----------
    formulation
        What ``relaxed`` was solved with.
    relaxed
        A solution whose losses are open on some branches.

    Returns
    -------
    DispatchResult
        With ``loss_slack_open``, and a note on what was burnt and how many passes it took; without a solution when
        nothing but burning power makes the interval feasible. The dispatch with physical losses is not convex: the
        result is a local optimum of it.
    """
    network, options = formulation.network, formulation.options
    base_mva = network.base_mva
    tolerated = options.tolerances.fictitious_loss_mw / base_mva
    opens_from = SETTLED * tolerated
    burnt = relaxed.fictitious_loss * base_mva
    flow = _mid_flow(relaxed)
    frozen = FrozenLossDispatch(
        network, formulation.branch_in_service, options, relaxed, proximal=options.tolerances.proximal_at_base
    ).solve(inputs, flow_limits)
    # Closing only what is open moves the burning to the next branch, pass after pass. With all losses on tangents near
    # the relaxed dispatch nothing can be burnt, and the prices show where losing would pay.
    on_tangent = _opened(formulation, relaxed, opens_from) | _nearly_pays(formulation, frozen, 0.0)
    # A branch on which losing pays only while its loss is free: its cone opens, on its tangent losing costs. One that
    # opens again after it left its tangent stays there, or it would go in and out for ever.
    held = returned = np.zeros(network.n_branch, dtype=bool)
    best: DispatchResult | None = None
    nearly, apart = 0.0, np.inf
    seconds, passes, settled = frozen.solver_seconds, 0, False
    while not settled and passes < PASSES:
        passes += 1
        dispatch = TangentLossDispatch(
            network, formulation.branch_in_service, options, on_tangent=on_tangent, base_flow=flow
        )
        result = dispatch.solve(inputs, flow_limits)
        seconds += result.solver_seconds
        if not result.status.has_solution:
            break
        if best is None or result.fictitious_loss < best.fictitious_loss:
            best = result
        flow = _mid_flow(result)
        # A cone whose loss is all but free keeps some of the solver's slack, which more passes do not take away.
        opened = ~on_tangent & (dispatch.excess > opens_from) & (result.fictitious_loss > tolerated)
        held, returned = held | on_tangent, returned | (opened & held)
        before, apart = apart, float(np.sum(np.abs(dispatch.excess[on_tangent])))
        settled = apart <= SETTLED * tolerated and not opened.any()
        if opened.any():
            nearly = max(4.0 * nearly, _NEARLY)
            opened |= _nearly_pays(formulation, result, nearly)
        elif apart > 0.5 * before:
            # Too many tangents where losing costs: nothing holds their flows.
            nearly *= 0.25
        # Where losing costs clearly the cone is right; the distance between the two thresholds keeps branches from
        # going in and out for ever.
        on_tangent = (on_tangent & _nearly_pays(formulation, result, 3.0 * nearly)) | opened | returned
    if best is None or not (result.status.has_solution or frozen.status.has_solution):
        # With physical losses the limits cannot be met: neither near the relaxed dispatch nor where tangents led.
        message = f"feasible only by burning {burnt:.4g} MW that no flow causes; without it: {result.message}"
        return replace(result, message=message, loss_slack_open=True, solver_seconds=seconds)
    note = (
        f"the relaxed losses held {burnt:.4g} MW that no flow causes; solved again with losses held to those of its "
        f"own flows ({passes} pass{'es' if passes > 1 else ''}"
    )
    left = best.fictitious_loss * base_mva
    note += ")" if best.fictitious_loss <= tolerated else f"; {left:.4g} MW of loss differ from them)"
    return replace(best, loss_slack_open=True, solver_seconds=seconds, notes=(*best.notes, note))


def _opened(formulation: DcDispatch, result: DispatchResult, opens_from: float) -> BoolArray:
    """Return True where a loss is beyond that of its flow, shape (n_branch,)."""
    physical = formulation.linear.loss_factor * _mid_flow(result) ** 2
    return np.asarray(result.point.loss - physical > opens_from, dtype=bool)


def _nearly_pays(formulation: DcDispatch, result: DispatchResult, nearly: float) -> BoolArray:
    """Return True where losing pays, or costs less than a share of the usual price, shape (n_branch,)."""
    network = formulation.network
    if not result.status.has_solution:
        return np.zeros(network.n_branch, dtype=bool)
    price = result.multipliers.active
    usual = float(np.nanmedian(np.abs(price)))
    between = 0.5 * (price[network.from_bus] + price[network.to_bus])
    # A rating counts the loss at its own end, so that losing costs the shadow price as well.
    thermal = np.array([kind == "thermal" for kind in result.constraints.kind], dtype=bool)
    rows = result.constraints.take(np.flatnonzero(thermal))
    rated = np.asarray(abs(rows.angle_gain).sign().T @ (0.5 * rows.multiplier))
    return np.asarray(formulation.branch_in_service & (np.nan_to_num(between) + rated < nearly * usual), dtype=bool)


def _mid_flow(result: DispatchResult) -> FloatArray:
    """Return the flow that causes the loss, between the two ends [pu], shape (n_branch,)."""
    return 0.5 * (result.point.p_from - result.point.p_to)
