"""The AC dispatch as a nonlinear program in polar voltages, built once per topology.

Variables, all per unit: bus angles and voltage magnitudes, output in each offer segment, reactive output, served
bids, and what penalties allow to give way. With V_i and theta_i the flows of a branch follow from its voltage
product V_f V_t exp(j(theta_f - theta_t)) by the same coefficients that every formulation uses.

    minimise    sum of segment costs - value of served bids + penalties                          [$/h]
    subject to  generation - bids + unserved - surplus - shunt - network(V, theta) = load        active, reactive
                P^2 + Q^2 <= (rating + slack)^2                                                  both ends
                angle_min <= theta_f - theta_t <= angle_max
                weights @ P_from - slack <= limit                                       contingencies, interfaces

Expressions are vectors over buses and branches, first and second derivatives are exact and sparse, and an interval
changes only bounds and parameters.
"""

from __future__ import annotations

from functools import cached_property
from typing import Any

import casadi
import numpy as np
from scipy import sparse

from lmpgap.dispatch.ac_derivatives import derivative_functions
from lmpgap.dispatch.ac_flows import SymbolicFlows, entries, times
from lmpgap.dispatch.ac_layout import AcShape, make_layout
from lmpgap.dispatch.branch_model import BranchModel
from lmpgap.dispatch.options import DispatchOptions
from lmpgap.dispatch.supply import placed
from lmpgap.scenario.network import FloatArray, IntArray, Network, incidence


class AcProgram:
    """The program of one shape, with its derivatives and solvers.

    Parameters
    ----------
    network
    shape
        What the program is built for.
    options
        Penalties decide which limits may give way.

    Attributes
    ----------
    layout : AcLayout
    objective_scale : float
        Factor between cost in $/h and the cost that the solver sees.
    symbols : dict
        ``x``, ``p``, and the expressions ``f`` (scaled cost) and ``g`` (rows) of them.
    derivatives : dict
        ``grad_f``, ``jac_g`` and ``hess_lag``, see `lmpgap.dispatch.ac_derivatives`.
    """

    def __init__(self, network: Network, shape: AcShape, options: DispatchOptions) -> None:
        self.network = network
        self.shape = shape
        self.layout = make_layout(network, shape, options)
        self.objective_scale = options.tolerances.objective_scale
        self._options = options
        self._solvers: dict[tuple[tuple[str, object], ...], Any] = {}
        self.symbols, flows = self._build()
        self.derivatives = derivative_functions(
            network, shape, self.layout, flows, self.symbols, objective_scale=self.objective_scale
        )

    def _build(self) -> tuple[dict[str, Any], SymbolicFlows]:
        network, layout, options = self.network, self.layout, self._options
        live, base = layout.live, network.base_mva
        x, parameter = casadi.SX.sym("x", layout.n_var), casadi.SX.sym("parameter", layout.n_parameter)
        value = {name: x[place] for name, place in layout.variables.items()}
        price = {name: parameter[place] for name, place in layout.parameters.items()}
        model = BranchModel.of(network, self.shape.branch_in_service)
        flows = SymbolicFlows.of(live, model, x, layout.variables["angle"], layout.variables["magnitude"])
        square = value["magnitude"] * value["magnitude"]

        resource_at = placed(live.bus_position[network.resource_bus], live.n_bus)
        bid_at = placed(live.bus_position[self.shape.bid_bus], live.n_bus)
        of_resource = incidence(self.shape.segment_resource, network.n_resource).T
        above_minimum = times(of_resource, value["segment"])
        active = (
            times(resource_at, above_minimum)
            - times(bid_at, value["bid"])
            - casadi.DM(network.shunt_g[live.bus]) * square
            - times(live.from_incidence, flows.p_from.value)
            - times(live.to_incidence, flows.p_to.value)
        )
        reactive = (
            times(resource_at, value["q"])
            + casadi.DM(network.shunt_b[live.bus]) * square
            - times(live.from_incidence, flows.q_from.value)
            - times(live.to_incidence, flows.q_to.value)
        )
        segment = value["segment"]
        cost = casadi.SX(0)
        if segment.numel():  # casadi knows no product of nothing with nothing: a scenario may be without offers
            cost += casadi.dot(price["price"], segment) + 0.5 * casadi.dot(price["slope"], segment * segment)
        if value["bid"].numel():
            cost -= casadi.dot(price["bid_price"], value["bid"])
        if options.penalties.power_balance is not None:
            active += value["unserved"] - value["surplus"]
            cost += options.penalties.power_balance * base * casadi.sum1(value["unserved"] + value["surplus"])

        rating = casadi.DM(network.normal_rating[live.branch[layout.rated]])
        thermal_from, thermal_to = (
            entries(p.value, layout.rated) ** 2 + entries(q.value, layout.rated) ** 2
            for p, q in ((flows.p_from, flows.q_from), (flows.p_to, flows.q_to))
        )
        flow_rows = times(self.shape.flow_weights[:, live.branch], flows.p_from.value)
        if options.penalties.transmission is not None:
            # (rating + excess)^2 less rating^2, so that the row's bound is rating^2 with and without a penalty.
            eased = (2 * rating + value["excess"]) * value["excess"]
            thermal_from, thermal_to = thermal_from - eased, thermal_to - eased
            flow_rows -= value["flow_excess"]
            excess = casadi.sum1(value["excess"]) + casadi.sum1(value["flow_excess"])
            cost += options.penalties.transmission * base * excess
        movement = casadi.SX(0, 1)
        if self.shape.movement:
            movement = casadi.vertcat(above_minimum, value["bid"]) - value["up"] + value["down"]
            cost += price["movement_price"] * casadi.sum1(value["up"] + value["down"])
        difference = entries(flows.difference, layout.angle_limited)
        rows = casadi.vertcat(active, reactive, thermal_from, thermal_to, difference, flow_rows, movement)
        symbols = {"x": x, "p": parameter, "f": self.objective_scale * cost, "g": casadi.densify(rows)}
        return symbols, flows

    def solver(self, settings: dict[str, object]) -> Any:
        """Return the solver with these Ipopt settings; made once per set of settings."""
        key = tuple(sorted(settings.items()))
        if key not in self._solvers:
            choice: dict[str, Any] = {
                "print_time": False,
                "show_eval_warnings": False,
                "calc_lam_p": False,
                "ipopt.print_level": 0,
                "ipopt.sb": "yes",
                "ipopt.tol": self._options.tolerances.nonlinear_tolerance,
                "ipopt.bound_relax_factor": self._options.tolerances.nonlinear_bound_relaxation,
                **{f"ipopt.{name}": value for name, value in settings.items()},
                **self.derivatives,
            }
            self._solvers[key] = casadi.nlpsol("ac_dispatch", "ipopt", self.symbols, choice)
        return self._solvers[key]

    def gradient(self, x: FloatArray, parameter: FloatArray) -> FloatArray:
        """Return the gradient of the cost [$/h per unit of the variable], shape (n_var,)."""
        _, gradient = self.derivatives["grad_f"](x, parameter)
        return np.asarray(gradient, dtype=float).ravel() / self.objective_scale

    def rows(self, x: FloatArray, parameter: FloatArray) -> tuple[FloatArray, sparse.csr_array]:
        """Return the values of the constraint rows, (n_row,), and their Jacobian, sparse (n_row, n_var)."""
        value, jacobian = self.derivatives["jac_g"](x, parameter)
        pattern = self._jacobian_pattern
        matrix = sparse.csc_array(
            (np.asarray(jacobian.nonzeros(), dtype=float), pattern[1], pattern[0]),
            shape=(self.layout.n_row, self.layout.n_var),
        )
        return np.asarray(value, dtype=float).ravel(), matrix.tocsr()

    @cached_property
    def _jacobian_pattern(self) -> tuple[IntArray, IntArray]:
        pattern = self.derivatives["jac_g"].sparsity_out(1)
        return np.asarray(pattern.colind(), np.int64), np.asarray(pattern.row(), np.int64)
