"""Linear dispatches that take losses or delivery factors as given, the way a market clears.

Two forms. `FrozenLossDispatch` linearises the loss of every branch around a base dispatch with branch angles d0:

    loss = 2 g d0 d - g d0^2                                                 half at each end

`DeliveryFactorDispatch` knows a table of delivery factors DF only. With p the net injection of each bus and the
total loss L withdrawn in the shares E:

    p = generation - load - shunts          (multiplier: the price)
    A flow = p - E L                        (alpha)
    DF' p = c0                              (lambda)             price_i = lambda DF_i + alpha_i

The offset c0 = Loss0 - (1 - DF)' p0 makes DF' p = c0 the linearisation of "generation = load + losses". Leaving it out
buys the losses about twice: DF' p = 0 asks for the marginal losses, which are about twice the average ones. The
split into energy, loss and congestion prices with given factors is that of "Marginal Loss Modeling in LMP
Calculation", IEEE PES Power Systems Conference and Exposition, 2004, where the distributed loss is "fictitious nodal
demand".
"""

from __future__ import annotations

import time
from dataclasses import replace

import numpy as np
from scipy import sparse

from lmpgap.dispatch.conic import ConicProgram, ConicSolution
from lmpgap.dispatch.convex import ConvexModel, Reading
from lmpgap.dispatch.dc import DcDispatch
from lmpgap.dispatch.limits import FlowLimits
from lmpgap.dispatch.live import LiveNetwork
from lmpgap.dispatch.options import DispatchOptions
from lmpgap.dispatch.program_builder import Affine, ProgramBuilder
from lmpgap.dispatch.result import DispatchResult, FrozenFactors
from lmpgap.dispatch.supply import SupplyResult
from lmpgap.errors import LmpgapError
from lmpgap.scenario.network import BoolArray, FloatArray, IntervalInputs, Network, incidence

FACTOR_PASSES = 40
"""Passes of adjusting the loss offset; measured: 2 to 12 suffice."""


class FrozenLossDispatch(DcDispatch):
    """Linear dispatch with branch losses linearised around a base dispatch.

    At its own base the linearised dispatch is not unique while its prices are, so deviations from the base
    output cost ``1/2 proximal |p - p0|^2`` (not part of the reported cost).

    Parameters
    ----------
    base
        A solution whose angles and outputs are the base; of any formulation and any interval.
    proximal
        Weight of the deviations [$/MWh per MW]; ``tolerances.proximal_away`` unless given. Use
        ``tolerances.proximal_at_base`` when this very interval is solved again around its own solution.

    Raises
    ------
    LmpgapError
        When the base has no solution.
    """

    name: str = "dc-loss"

    def __init__(
        self,
        network: Network,
        branch_in_service: BoolArray,
        options: DispatchOptions,
        base: DispatchResult,
        *,
        proximal: float | None = None,
    ) -> None:
        if not base.status.has_solution:
            raise LmpgapError(f"losses cannot be frozen around a dispatch without a solution ({base.message})")
        super().__init__(network, branch_in_service, options)
        angle = np.nan_to_num(base.point.angle)
        across = angle[network.from_bus] - angle[network.to_bus] - self.linear.shift
        self.base_flow = self.linear.susceptance * across
        self.base_p = base.p
        self.proximal = options.tolerances.proximal_away if proximal is None else proximal

    def _voltage_profile(self) -> FloatArray | None:
        return self.options.voltage_profile

    def _loss(self, builder: ProgramBuilder, flow: Affine, live: LiveNetwork) -> Affine:
        # With k flow^2 = g d^2: 2 g d0 d - g d0^2 = 2 k flow0 flow - k flow0^2
        factor, base = self.linear.loss_factor[live.branch], self.base_flow[live.branch]
        return flow.scaled(2.0 * factor * base) - factor * base**2

    def _loss_slope(self, live: LiveNetwork, flow: FloatArray) -> FloatArray:
        linear = self.linear
        return 2.0 * (linear.loss_factor * linear.susceptance * self.base_flow)[live.branch]

    def _fictitious_loss(self, live: LiveNetwork, flow: FloatArray, loss: FloatArray) -> float:
        return float(np.sum(loss - self.linear.loss_factor[live.branch] * flow**2))

    def _extend(self, builder: ProgramBuilder, live: LiveNetwork, inputs: IntervalInputs) -> None:
        owner = incidence(inputs.segments.resource, self.network.n_resource).T.tocsr()
        above = Affine(np.zeros(self.network.n_resource), {"segment": owner})  # output above p_min as a sum of segments
        output = builder.variable("output", self.network.n_resource)
        builder.equality("output", output - above)

    def _fill(self, model: ConvexModel, inputs: IntervalInputs, flow_limits: FlowLimits) -> ConicProgram:
        program = super()._fill(model, inputs, flow_limits)
        where = model.template.variables["output"]
        weight = self.proximal * self.network.base_mva**2
        quadratic, linear = program.quadratic.copy(), program.linear.copy()
        quadratic[where] = weight
        linear[where] = weight * (inputs.p_min - self.base_p)
        constant = program.constant + 0.5 * weight * float(np.sum((inputs.p_min - self.base_p) ** 2))
        return replace(program, quadratic=quadratic, linear=linear, constant=constant)

    def _objective(self, program: ConicProgram, solution: ConicSolution, supply: SupplyResult) -> float:
        moved = supply.p - self.base_p
        return program.cost(solution.x) - 0.5 * self.proximal * self.network.base_mva**2 * float(moved @ moved)


class DeliveryFactorDispatch(DcDispatch):
    """Linear dispatch with a table of delivery factors.

    Scaling the factors (another reference) moves no price: they are brought to ``E' DF = 1`` first.

    Parameters
    ----------
    delivery_factor : (n_bus,)
        Power delivered to the reference per power injected, at the margin [-].
    loss_distribution : (n_bus,)
        Shares in which the total loss is withdrawn; brought to a sum of one per island. It moves prices, so it
        belongs to the settings of a run.
    base
        The dispatch behind the factors; its losses and injections give the offset c0. Without one, c0 is adjusted
        until the losses bought are those of the flows found.

    Raises
    ------
    LmpgapError
        When the factors or shares of an island cancel, or the base has no solution.
    """

    name: str = "dc-loss"

    def __init__(
        self,
        network: Network,
        branch_in_service: BoolArray,
        options: DispatchOptions,
        *,
        delivery_factor: FloatArray,
        loss_distribution: FloatArray,
        base: DispatchResult | None = None,
    ) -> None:
        super().__init__(network, branch_in_service, options)
        if base is not None and not base.status.has_solution:
            raise LmpgapError(f"delivery factors need a base dispatch with a solution ({base.message})")
        self.delivery_factor, self.loss_distribution = _normalised(
            network, self._island, delivery_factor, loss_distribution
        )
        self._base = base
        self._offset: FloatArray = np.zeros(int(self._island.max(initial=-1)) + 1)
        self._next_offset = self._offset
        self._by_island = incidence(self._island, self._offset.size).T.tocsr()

    def solve(
        self, inputs: IntervalInputs, flow_limits: FlowLimits, start: DispatchResult | None = None
    ) -> DispatchResult:
        """Solve one interval; ``start`` is ignored."""
        began = time.perf_counter()
        if self._base is not None:
            point = self._base.point
            self._offset = self._offset_at(point.p_from, point.p_to)
            return super().solve(inputs, flow_limits)
        # Start from the lossless dispatch: its flows cost losses, its injections add up to none.
        lossless = DcDispatch(self.network, self.branch_in_service, self.options).solve(inputs, flow_limits)
        if not lossless.status.has_solution:
            return replace(lossless, formulation=self.name)
        point, seconds = lossless.point, lossless.solver_seconds
        loss = self._by_island @ np.bincount(
            self.network.from_bus, self.linear.loss_factor * point.p_from**2, self.network.n_bus
        )
        self._offset = loss + self._offset_at(point.p_from, point.p_to)
        tolerated = 1e-3 * self.options.tolerances.fictitious_loss_mw / self.network.base_mva
        passes, done = 0, False
        while not done:
            passes += 1
            result = super().solve(inputs, flow_limits)
            seconds += result.solver_seconds
            settled = not result.status.has_solution or abs(result.fictitious_loss) <= tolerated
            done = settled or passes == FACTOR_PASSES
            self._offset = self._next_offset
        notes = result.notes
        if result.status.has_solution:
            notes += (f"loss offset of the delivery factors found in {passes} passes",)
            if abs(result.fictitious_loss) > tolerated:
                left = result.fictitious_loss * self.network.base_mva
                notes += (f"the loss bought differs from that of the flows by {left:.4g} MW",)
        return replace(result, solver_seconds=seconds, total_seconds=time.perf_counter() - began, notes=notes)

    def _offset_at(self, p_from: FloatArray, p_to: FloatArray) -> FloatArray:
        """Return c0 = loss - (1 - DF)' p of each island, with p the injections that flows add up to."""
        network = self.network
        injection = np.bincount(network.from_bus, p_from, network.n_bus)
        injection += np.bincount(network.to_bus, p_to, network.n_bus)
        # Injections into a lossy network add up to its loss, so that loss - sum(p) vanishes and DF' p is left.
        return np.asarray(self._by_island @ (self.delivery_factor * injection))

    def _voltage_profile(self) -> FloatArray | None:
        return self.options.voltage_profile

    def _balance(self, builder: ProgramBuilder, live: LiveNetwork, injection: Affine, leaving: Affine) -> None:
        n_island = self._offset.size
        island = incidence(live.island, n_island)
        net = builder.variable("net injection", live.n_bus)
        loss = builder.variable("total loss", n_island)
        builder.equality("balance", injection - net)
        share = sparse.csr_array(sparse.diags_array(self.loss_distribution[live.bus], format="csr") @ island)
        builder.equality("network", net - leaving - loss.mapped(share))
        factor = sparse.csr_array(sparse.diags_array(self.delivery_factor[live.bus], format="csr") @ island)
        # Islands without live buses have no loss: keep their rows from being empty.
        dead = np.ones(n_island)
        dead[live.island] = 0.0
        builder.equality("delivered", net.mapped(factor.T.tocsr()) + loss.scaled(dead))

    def _fill(self, model: ConvexModel, inputs: IntervalInputs, flow_limits: FlowLimits) -> ConicProgram:
        program = super()._fill(model, inputs, flow_limits)
        rhs = program.equality_rhs.copy()
        dead = np.ones(self._offset.size, dtype=bool)
        dead[model.live.island] = False
        rhs[model.template.equalities["delivered"]] = np.where(dead, 0.0, self._offset)
        return replace(program, equality_rhs=rhs)

    def _read(
        self,
        model: ConvexModel,
        program: ConicProgram,
        solution: ConicSolution,
        inputs: IntervalInputs,
        flow_limits: FlowLimits,
    ) -> Reading:
        reading = super()._read(model, program, solution, inputs, flow_limits)
        live, template = model.live, model.template
        flow = reading.point.p_from
        loss = self.linear.loss_factor * flow**2
        bought = solution.x[template.variables["total loss"]]
        network, net = self.network, solution.x[template.variables["net injection"]]
        physical = np.bincount(self._island[network.from_bus], loss, self._offset.size)
        # The next offset: loss of these flows less (1 - DF)' p.
        island = incidence(live.island, self._offset.size).T.tocsr()
        self._next_offset = physical - island @ ((1.0 - self.delivery_factor[live.bus]) * net)
        multiplier = solution.equality_dual[template.equalities["delivered"]]
        return replace(
            reading,
            # The dispatch limits and prices lossless flows; the losses of its branches are those of these flows.
            point=replace(reading.point, p_from=flow + 0.5 * loss, p_to=-flow + 0.5 * loss),
            fictitious_loss=float(np.sum(bought - physical)),
            changes={
                "frozen": FrozenFactors(
                    delivery_factor=self.delivery_factor,
                    loss_distribution=self.loss_distribution,
                    energy_multiplier=multiplier[self._island],
                )
            },
        )


def _normalised(
    network: Network, island: np.ndarray, delivery_factor: FloatArray, loss_distribution: FloatArray
) -> tuple[FloatArray, FloatArray]:
    """Return shares that add up to one in each island, and factors with a mean of one over them.

    An island without shares spreads its loss evenly.
    """
    if delivery_factor.shape != (network.n_bus,) or loss_distribution.shape != (network.n_bus,):
        raise LmpgapError(
            f"delivery factors and loss distribution need one figure per bus ({network.n_bus}), found "
            f"{delivery_factor.shape} and {loss_distribution.shape}"
        )
    n_island = int(island.max(initial=-1)) + 1
    total = np.bincount(island, loss_distribution, n_island)
    empty = np.bincount(island, np.abs(loss_distribution), n_island) == 0.0
    share = np.where(empty[island], 1.0, loss_distribution)
    total = np.where(empty, np.bincount(island, minlength=n_island), total)
    if np.any(np.abs(total) < 1e-9):
        raise LmpgapError("the loss distribution of an island adds up to zero; give shares that add up to one")
    share = share / total[island]
    mean = np.bincount(island, share * delivery_factor, n_island)
    if np.any(np.abs(mean) < 1e-9):
        raise LmpgapError("the delivery factors of an island average to zero over the loss distribution")
    return delivery_factor / mean[island], share
