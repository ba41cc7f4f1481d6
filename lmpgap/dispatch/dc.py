"""The lossless linear dispatch, ``dc``, and the frame that the linear formulations with losses share.

Model: flow = b (angle_from - angle_to - shift), voltages at 1 pu. It assumes r << x, flat voltages and small
angles; in return its prices are those of a linear program. Equations (P for power entering the branch):

    generation - load - shunts = sum of P_from + P_to        P_from = flow + loss/2,  P_to = -flow + loss/2

with no loss here. "DC Power Flow Revisited", IEEE Transactions on Power Systems 24(3), 2009, compares conventions.
"""

from __future__ import annotations

from functools import partial

import numpy as np
from scipy import sparse

from lmpgap.dispatch.conic import ConicProgram, ConicSolution
from lmpgap.dispatch.convex import ConvexDispatch, ConvexModel, Reading, convex_model
from lmpgap.dispatch.limits import FlowLimits
from lmpgap.dispatch.linear_model import linear_branches
from lmpgap.dispatch.live import LiveNetwork
from lmpgap.dispatch.options import DispatchOptions
from lmpgap.dispatch.program_builder import Affine, ProgramBuilder
from lmpgap.dispatch.result import BalanceMultipliers, ConstraintRows, OperatingPoint
from lmpgap.dispatch.rows import at_penalty, constraint_rows, flow_limit_rows, joined
from lmpgap.dispatch.supply import (
    add_supply,
    fixed_withdrawal,
    rated_branches,
    supply_costs,
    transmission_costs,
)
from lmpgap.scenario.network import BoolArray, FloatArray, IntervalInputs, Network


class DcDispatch(ConvexDispatch):
    """Lossless linear dispatch of one topology, see `lmpgap.dispatch.formulation.Formulation`."""

    name: str = "dc"

    def __init__(self, network: Network, branch_in_service: BoolArray, options: DispatchOptions) -> None:
        super().__init__(network, branch_in_service, options)
        self.linear = linear_branches(network, options.dc, self._voltage_profile())

    def _voltage_profile(self) -> FloatArray | None:
        return None

    def _loss(self, builder: ProgramBuilder, flow: Affine, live: LiveNetwork) -> Affine:
        """Return the loss of each live branch as an expression."""
        return Affine.fixed(np.zeros(live.n_branch))

    def _loss_slope(self, live: LiveNetwork, flow: FloatArray) -> FloatArray:
        """Return the derivative of each live branch's loss along its angle [pu/rad]."""
        return np.zeros(live.n_branch)

    def _fictitious_loss(self, live: LiveNetwork, flow: FloatArray, loss: FloatArray) -> float:
        """Return the loss that the model carries beyond the physical one [pu]."""
        return 0.0

    def _balance(self, builder: ProgramBuilder, live: LiveNetwork, injection: Affine, leaving: Affine) -> None:
        """Add the balance of every bus."""
        builder.equality("balance", injection - leaving)

    def _extend(self, builder: ProgramBuilder, live: LiveNetwork, inputs: IntervalInputs) -> None:
        """Add what a derived formulation needs besides."""

    def _build(self, live: LiveNetwork, inputs: IntervalInputs) -> ConvexModel:
        network, penalties = self.network, self.options.penalties
        builder = ProgramBuilder()
        injection = add_supply(builder, live, inputs, penalties)
        reference = np.full(live.n_bus, np.inf)
        reference[live.references()] = 0.0
        angle = builder.variable("angle", live.n_bus, lower=-reference, upper=reference)
        flow = builder.variable("flow", live.n_branch)
        loss = self._loss(builder, flow, live)
        p_from, p_to = flow + loss.scaled(0.5), loss.scaled(0.5) - flow

        leaving = p_from.mapped(live.from_incidence) + p_to.mapped(live.to_incidence)
        self._balance(builder, live, injection, leaving)

        b, shift = self.linear.susceptance[live.branch], self.linear.shift[live.branch]
        scale = 1.0 / np.maximum(1.0, np.abs(b))  # keeps branches of small impedance in proportion
        across = angle.mapped(sparse.csr_array((live.from_incidence - live.to_incidence).T))
        builder.equality("branch", flow.scaled(scale) - across.scaled(b * scale), -b * scale * shift)

        rated = rated_branches(live)
        forward, reverse = p_from.take(rated), p_to.take(rated)
        if penalties.transmission is not None:
            # One excess per branch: both ends give way together, so their shadow prices add up to the penalty.
            excess = builder.variable("excess", rated.size, lower=0.0)
            forward, reverse = forward - excess, reverse - excess
        rating = network.normal_rating[live.branch[rated]]
        builder.at_most("thermal forward", forward, rating)
        builder.at_most("thermal reverse", reverse, rating)

        # Where the branch has a susceptance, its angle is a function of its flow alone: one entry per row, which
        # a solver turns into a bound.
        defined = (b != 0.0).astype(float)
        difference = flow.scaled(np.divide(1.0, b, out=np.zeros_like(b), where=b != 0.0)) + defined * shift
        difference = difference + across.scaled(1.0 - defined)
        for name, sign, limit in (
            ("angle upper", 1.0, network.angle_max[live.branch]),
            ("angle lower", -1.0, -network.angle_min[live.branch]),
        ):
            limited = np.flatnonzero(np.isfinite(limit))
            builder.at_most(name, difference.scaled(sign).take(limited), limit[limited])

        self._extend(builder, live, inputs)
        return convex_model(live, builder, p_from, {"flow": flow, "loss": loss, "difference": across})

    def _fill(self, model: ConvexModel, inputs: IntervalInputs, flow_limits: FlowLimits) -> ConicProgram:
        live, penalties = model.live, self.options.penalties
        linear, quadratic, upper, fixed_cost = supply_costs(live, inputs, penalties)
        linear |= transmission_costs(model.template, self.network.base_mva, penalties)
        return model.template.fill(
            linear=linear,
            quadratic=quadratic,
            upper=upper,
            equality_rhs={"balance": fixed_withdrawal(live, inputs) + self.network.shunt_g[live.bus]},
            inequality_rhs={"flow limit": flow_limits.limit},
            constant=fixed_cost,
        )

    def _read(
        self,
        model: ConvexModel,
        program: ConicProgram,
        solution: ConicSolution,
        inputs: IntervalInputs,
        flow_limits: FlowLimits,
    ) -> Reading:
        live, template, x = model.live, model.template, solution.x
        value = model.read(x)
        flow, loss, difference = value["flow"], value["loss"], value["difference"]
        slope = self._loss_slope(live, flow)
        susceptance = self.linear.susceptance[live.branch]
        none = np.zeros(self.network.n_branch)
        point = OperatingPoint(
            w=live.to_buses(np.ones(live.n_bus), np.nan),
            angle=live.to_buses(x[template.variables["angle"]], np.nan),
            c=live.to_branches(np.cos(difference)),
            s=live.to_branches(np.sin(difference)),
            p_from=live.to_branches(flow + 0.5 * loss),
            q_from=none,
            p_to=live.to_branches(-flow + 0.5 * loss),
            q_to=none,
            dp_from=live.to_branches(susceptance + 0.5 * slope),
            dq_from=none,
            dp_to=live.to_branches(-susceptance + 0.5 * slope),
            dq_to=none,
        )
        active = solution.equality_dual[template.equalities["balance"]]
        zero = np.zeros(live.n_bus)
        return Reading(
            point=point,
            q=np.zeros(self.network.n_resource),
            multipliers=BalanceMultipliers(
                active=live.to_buses(active, np.nan),
                reactive=live.to_buses(zero, np.nan),
                squared_voltage=live.to_buses(zero, np.nan),
            ),
            constraints=self._constraints(model, solution, flow_limits, point, difference),
            fictitious_loss=self._fictitious_loss(live, flow, loss),
        )

    def _constraints(
        self,
        model: ConvexModel,
        solution: ConicSolution,
        flow_limits: FlowLimits,
        point: OperatingPoint,
        difference: FloatArray,
    ) -> ConstraintRows:
        network, live, template = self.network, model.live, model.template
        tolerances, base, penalty = self.options.tolerances, network.base_mva, self.options.penalties.transmission
        dual = {name: solution.inequality_dual[rows] for name, rows in template.inequalities.items()}

        def excess(name: str) -> FloatArray | None:
            return solution.x[template.variables[name]] if name in template.variables else None

        rows = partial(
            constraint_rows,
            names=network.branches,
            n_branch=network.n_branch,
            tolerances=tolerances,
            base_mva=base,
        )
        parts: list[ConstraintRows] = []
        rated = live.branch[rated_branches(live)]
        rating = network.normal_rating[rated]
        soft = at_penalty(
            dual["thermal forward"] + dual["thermal reverse"], excess("excess"), penalty, tolerances, base
        )
        for direction, flow, gain in (
            ("forward", point.p_from[rated], point.dp_from[rated]),
            ("reverse", point.p_to[rated], point.dp_to[rated]),
        ):
            multiplier = dual[f"thermal {direction}"]
            held = multiplier > tolerances.shadow_price * base
            parts.append(
                rows(
                    kind="thermal",
                    owner=rated,
                    direction=direction,
                    unit="MW",
                    to_unit=base,
                    limit=rating,
                    value=flow,
                    slack=rating - flow,
                    multiplier=multiplier,
                    angle_gain=gain,
                    gave_way=soft & (held | (flow >= rating)),
                )
            )
        for direction, sign, limit in (
            ("upper", 1.0, network.angle_max[live.branch]),
            ("lower", -1.0, network.angle_min[live.branch]),
        ):
            limited = np.flatnonzero(np.isfinite(limit))
            parts.append(
                rows(
                    kind="angle",
                    owner=live.branch[limited],
                    direction=direction,
                    unit="deg",
                    to_unit=180.0 / np.pi,
                    limit=limit[limited],
                    value=difference[limited],
                    slack=sign * (limit[limited] - difference[limited]),
                    multiplier=dual[f"angle {direction}"],
                    angle_gain=np.full(limited.size, sign),
                )
            )
        parts.append(
            flow_limit_rows(
                flow_limits,
                p_from=point.p_from,
                dp_from=point.dp_from,
                multiplier=dual["flow limit"],
                excess=excess("flow limit excess"),
                penalty=penalty,
                tolerances=tolerances,
                base_mva=base,
            )
        )
        return joined(parts, network.n_branch)
