"""The second-order cone relaxation of the AC dispatch, ``soc``, in branch-flow variables.

"Branch Flow Model: Relaxations and Convexification", IEEE Transactions on Power Systems 28(3), 2013, eqs. (13) to
(17), with taps, shifts and charging. Per bus the squared voltage w; per branch the power P + jQ entering the series
element and its scaled squared current m = |z| l, which keeps branches of small impedance in proportion. With
u = w_from / tau^2:

    m u >= |z| (P^2 + Q^2)                        the cone; an equality in the AC model
    w_to = u - 2 (r P + x Q) + |z| m
    p_from = P                  q_from = Q - (charging/2) u
    p_to = -P + (r/|z|) m       q_to = -Q + (x/|z|) m - (charging/2) w_to
    c' = u - (r P + x Q)        s' = x P - r Q           products behind the transformer
    |p + jq| <= rating          at both ends
    tan(angle_min - shift) c' <= s' <= tan(angle_max - shift) c'

Parallel branches see the same pair of voltages, so their products W = tau exp(j shift) (c' + j s') are tied together.
What is relaxed: the cone may be slack, and angles need not close around loops.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from lmpgap.dispatch.angles import AngleFit
from lmpgap.dispatch.branch_model import BranchModel, operating_point
from lmpgap.dispatch.conic import ConicProgram, ConicSolution
from lmpgap.dispatch.convex import ConvexDispatch, ConvexModel, Reading, convex_model
from lmpgap.dispatch.limits import FlowLimits
from lmpgap.dispatch.live import LiveNetwork
from lmpgap.dispatch.options import DispatchOptions
from lmpgap.dispatch.program_builder import Affine, ProgramBuilder
from lmpgap.dispatch.result import BalanceMultipliers, OperatingPoint
from lmpgap.dispatch.soc_rows import angle_limits, soc_constraints
from lmpgap.dispatch.supply import (
    add_supply,
    fixed_withdrawal,
    placed,
    rated_branches,
    supply_costs,
    transmission_costs,
)
from lmpgap.scenario.network import BoolArray, FloatArray, IntArray, IntervalInputs, Network


class SocDispatch(ConvexDispatch):
    """Second-order cone dispatch of one topology, see `lmpgap.dispatch.formulation.Formulation`."""

    name: str = "soc"

    def __init__(self, network: Network, branch_in_service: BoolArray, options: DispatchOptions) -> None:
        super().__init__(network, branch_in_service, options)
        self._branches = BranchModel.of(network, branch_in_service)
        self._fit: tuple[LiveNetwork, AngleFit] | None = None

    def _build(self, live: LiveNetwork, inputs: IntervalInputs) -> ConvexModel:
        network, penalties = self.network, self.options.penalties
        r, x, half, tap = (
            values[live.branch] for values in (network.r, network.x, 0.5 * network.charging, network.tap)
        )
        z = np.hypot(r, x)
        builder = ProgramBuilder()
        injection = add_supply(builder, live, inputs, penalties)
        q = builder.variable("q", network.n_resource)
        w = builder.variable("w", live.n_bus, lower=network.v_min[live.bus] ** 2, upper=network.v_max[live.bus] ** 2)
        p_series = builder.variable("p series", live.n_branch)
        q_series = builder.variable("q series", live.n_branch)
        current = builder.variable("current", live.n_branch)

        u = w.mapped(live.from_incidence.T.tocsr()).scaled(1.0 / tap**2)
        w_to = w.mapped(live.to_incidence.T.tocsr())
        drop = p_series.scaled(r) + q_series.scaled(x)
        across = p_series.scaled(x) - q_series.scaled(r)
        p_from, q_from = p_series, q_series - u.scaled(half)
        p_to = current.scaled(r / z) - p_series
        q_to = current.scaled(x / z) - q_series - w_to.scaled(half)

        active = p_from.mapped(live.from_incidence) + p_to.mapped(live.to_incidence)
        reactive = q_from.mapped(live.from_incidence) + q_to.mapped(live.to_incidence)
        builder.equality("balance", injection - active - w.scaled(network.shunt_g[live.bus]))
        resource_bus = live.bus_position[network.resource_bus]
        q_injection = q.mapped(placed(resource_bus, live.n_bus)) + w.scaled(network.shunt_b[live.bus])
        builder.equality("reactive balance", q_injection - reactive)
        builder.equality("voltage drop", u - drop.scaled(2.0) + current.scaled(z) - w_to)

        c, s = _rotated(network, live, u - drop, across)
        leader = parallel_leaders(live)
        tied = np.flatnonzero(leader != np.arange(live.n_branch))
        turn = np.where(live.from_bus[tied] == live.from_bus[leader[tied]], 1.0, -1.0)
        builder.equality("tie real", c.take(tied) - c.take(leader[tied]))
        builder.equality("tie imaginary", s.take(tied) - s.take(leader[tied]).scaled(turn))
        # The cone of a tied branch is that of its leader: both say c^2 + s^2 <= w_from w_to.
        lead = np.flatnonzero(leader == np.arange(live.n_branch))
        root = np.sqrt(z[lead])
        builder.rotated_cone(
            "current",
            current.take(lead),
            u.take(lead),
            p_series.take(lead).scaled(root),
            q_series.take(lead).scaled(root),
        )

        rated = rated_branches(live)
        rating = Affine.fixed(network.normal_rating[live.branch[rated]])
        if penalties.transmission is not None:
            # One excess per branch: both ends give way together, so their shadow prices add up to the penalty.
            rating = rating + builder.variable("excess", rated.size, lower=0.0)
        builder.cone("thermal from", rating, p_from.take(rated), q_from.take(rated))
        builder.cone("thermal to", rating, p_to.take(rated), q_to.take(rated))

        for name, sign in (("upper", 1.0), ("lower", -1.0)):
            limited, tangent = angle_limits(network, live, name)
            row = across.take(limited) - (u - drop).take(limited).scaled(tangent)
            builder.at_most(f"angle {name}", row.scaled(sign), 0.0)
        return convex_model(
            live,
            builder,
            p_from,
            {
                "p_from": p_from,
                "q_from": q_from,
                "p_to": p_to,
                "q_to": q_to,
                "c": c,
                "s": s,
                "u": u,
                "p series": p_series,
                "q series": q_series,
                "current": current,
            },
        )

    def _fill(self, model: ConvexModel, inputs: IntervalInputs, flow_limits: FlowLimits) -> ConicProgram:
        live, penalties, network = model.live, self.options.penalties, self.network
        linear, quadratic, upper, fixed_cost = supply_costs(live, inputs, penalties)
        linear |= transmission_costs(model.template, network.base_mva, penalties)
        on = inputs.resource_in_service & (live.bus_position[network.resource_bus] >= 0)
        upper["q"] = np.where(on, network.q_max, 0.0)
        return model.template.fill(
            linear=linear,
            quadratic=quadratic,
            lower={"q": np.where(on, network.q_min, 0.0)},
            upper=upper,
            equality_rhs={
                "balance": fixed_withdrawal(live, inputs),
                "reactive balance": inputs.load_q[live.bus],
            },
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
        live, template, network = model.live, model.template, self.network
        value = model.read(solution.x)
        w = solution.x[template.variables["w"]]
        point, loop_angle_deg = self._point(live, value, w)
        multipliers = BalanceMultipliers(
            active=live.to_buses(solution.equality_dual[template.equalities["balance"]], np.nan),
            reactive=live.to_buses(solution.equality_dual[template.equalities["reactive balance"]], np.nan),
            squared_voltage=live.to_buses((solution.upper_dual - solution.lower_dual)[template.variables["w"]], np.nan),
        )
        r, z = network.r[live.branch], np.hypot(network.r, network.x)[live.branch]
        physical = (value["p series"] ** 2 + value["q series"] ** 2) / value["u"]
        return Reading(
            point=point,
            q=solution.x[template.variables["q"]].copy(),
            multipliers=multipliers,
            constraints=soc_constraints(network, model, program, solution, inputs, flow_limits, point, self.options),
            # |r|: behind a negative resistance a slack cone makes power instead of burning it.
            fictitious_loss=float(np.sum(np.abs(r) * (value["current"] / z - physical))),
            changes={
                "relaxed": True,
                "cone_slack": float(np.max(z**2 * (value["current"] / z - physical) * value["u"], initial=0.0)),
                "loop_angle_deg": loop_angle_deg,
            },
        )

    def _point(self, live: LiveNetwork, value: dict[str, FloatArray], w: FloatArray) -> tuple[OperatingPoint, float]:
        """Return the operating point and its largest loop angle [deg].

        Flows are the program's own, derivatives those of its products.
        """
        network = self.network
        c, s = live.to_branches(value["c"]), live.to_branches(value["s"])
        if self._fit is None or self._fit[0] is not live:
            self._fit = (live, AngleFit(network, live.branch))
        angle, loop_angle_deg = self._fit[1](c, s)
        point = operating_point(network, self._branches, live.to_buses(w, 0.0), c, s, angle)
        # Rebuilt from w, c and s the flows would carry the solver's residual times the admittance.
        own = replace(
            point,
            w=live.to_buses(w, np.nan),
            angle=live.to_buses(angle[live.bus], np.nan),
            **{name: live.to_branches(value[name]) for name in ("p_from", "q_from", "p_to", "q_to")},
        )
        return own, loop_angle_deg


def _rotated(network: Network, live: LiveNetwork, c: Affine, s: Affine) -> tuple[Affine, Affine]:
    """Return V_from conj(V_to) from the products behind the transformer."""
    tap, shift = network.tap[live.branch], network.shift[live.branch]
    cosine, sine = tap * np.cos(shift), tap * np.sin(shift)
    return c.scaled(cosine) - s.scaled(sine), c.scaled(sine) + s.scaled(cosine)


def parallel_leaders(live: LiveNetwork) -> IntArray:
    """Return for each live branch the first one between the same two buses, shape (n_live_branch,)."""
    low = np.minimum(live.from_bus, live.to_bus)
    high = np.maximum(live.from_bus, live.to_bus)
    _, first, group = np.unique(low * live.n_bus + high, return_index=True, return_inverse=True)
    return np.asarray(first[group.ravel()], dtype=np.int64)
