"""The AC dispatch as a nonlinear program in polar voltages, built once per topology.

Variables, all per unit: bus angles and voltage magnitudes, output in each offer segment, reactive output, served
bids, and what penalties allow to give way. With V_i and theta_i the flows of a branch follow from its voltage
product V_f V_t exp(j(theta_f - theta_t)) by the same coefficients that every formulation uses.

    minimise    sum of segment costs - value of served bids + penalties                          [$/h]
    subject to  generation - bids + unserved - surplus - shunt - network(V, theta) = load        active, reactive
                P^2 + Q^2 <= (rating + slack)^2                                                  both ends
                angle_min <= theta_f - theta_t <= angle_max
                weights @ P_from - slack <= limit                                       contingencies, interfaces

Expressions are vectors over buses and branches; casadi derives exact sparse first and second derivatives once, and
an interval changes only bounds and parameters.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import Any

import casadi
import numpy as np
from scipy import sparse

from lmpgap.dispatch.branch_model import BranchModel, FlowCoefficients
from lmpgap.dispatch.formulation import DispatchOptions
from lmpgap.dispatch.live import LiveNetwork, live_network
from lmpgap.dispatch.supply import placed, rated_branches
from lmpgap.scenario.network import BoolArray, FloatArray, IntArray, Network, incidence


@dataclass(frozen=True, kw_only=True)
class AcShape:
    """Everything that decides the form of the program; intervals of the same shape share one program.

    Attributes
    ----------
    live : (n_bus,)
        True where the bus is energised.
    branch_in_service : (n_branch,)
    segment_resource : (n_segment,)
        Owner of each offer segment.
    bid_bus : (n_bid,)
        Bus of each bid.
    flow_weights : sparse (n_row, n_branch)
        Rows limited from above on active flows at the from ends.
    movement : bool
        True when a price on moving away from a given dispatch is part of the cost.
    """

    live: BoolArray
    branch_in_service: BoolArray
    segment_resource: IntArray
    bid_bus: IntArray
    flow_weights: sparse.csr_array
    movement: bool = False

    @property
    def key(self) -> tuple[object, ...]:
        """A value that is equal exactly for equal shapes."""
        weights = self.flow_weights
        return (
            self.live.tobytes(),
            self.branch_in_service.tobytes(),
            self.segment_resource.tobytes(),
            self.bid_bus.tobytes(),
            weights.shape,
            np.asarray(weights.indptr, np.int64).tobytes(),
            np.asarray(weights.indices, np.int64).tobytes(),
            np.asarray(weights.data, np.float64).tobytes(),
            self.movement,
        )


@dataclass(frozen=True, kw_only=True)
class AcLayout:
    """Where each block of variables, constraint rows and parameters stands.

    Attributes
    ----------
    variables, rows, parameters
        Slice by block name, in order.
    live
        The buses and branches that take part.
    rated, angle_limited : (n,)
        Branches, counted among the live ones, with a finite rating or angle limit.
    """

    variables: dict[str, slice]
    rows: dict[str, slice]
    parameters: dict[str, slice]
    live: LiveNetwork
    rated: IntArray
    angle_limited: IntArray

    @property
    def n_var(self) -> int:
        """Number of variables."""
        return _length(self.variables)

    @property
    def n_row(self) -> int:
        """Number of constraint rows."""
        return _length(self.rows)

    @property
    def n_parameter(self) -> int:
        """Number of parameters."""
        return _length(self.parameters)


def make_layout(network: Network, shape: AcShape, options: DispatchOptions) -> AcLayout:
    """Return where everything stands in the program of a shape."""
    live = live_network(network, shape.branch_in_service, network.islands(shape.branch_in_service), shape.live)
    rated = rated_branches(live)
    angle_min, angle_max = network.angle_min[live.branch], network.angle_max[live.branch]
    limited = np.flatnonzero(np.isfinite(angle_min) | np.isfinite(angle_max))
    n_segment, n_bid, n_flow = shape.segment_resource.size, shape.bid_bus.size, shape.flow_weights.shape[0]
    n_moved = network.n_resource + n_bid if shape.movement else 0
    soft_balance = live.n_bus if options.penalties.power_balance is not None else 0
    soft_flow = options.penalties.transmission is not None
    return AcLayout(
        variables=_slices(
            angle=live.n_bus,
            magnitude=live.n_bus,
            segment=n_segment,
            q=network.n_resource,
            bid=n_bid,
            unserved=soft_balance,
            surplus=soft_balance,
            # One excess per branch: both ends give way together, so their shadow prices add up to the penalty.
            excess=rated.size if soft_flow else 0,
            flow_excess=n_flow if soft_flow else 0,
            up=n_moved,
            down=n_moved,
        ),
        rows=_slices(
            active=live.n_bus,
            reactive=live.n_bus,
            thermal_from=rated.size,
            thermal_to=rated.size,
            angle=limited.size,
            flow=n_flow,
            movement=n_moved,
        ),
        parameters=_slices(price=n_segment, slope=n_segment, bid_price=n_bid, movement_price=1),
        live=live,
        rated=rated,
        angle_limited=limited,
    )


class AcProgram:
    """The program of one shape, with its solvers and its first derivatives.

    Parameters
    ----------
    network
    shape
        What the program is built for.
    options
        Penalties decide which limits may give way.
    """

    def __init__(self, network: Network, shape: AcShape, options: DispatchOptions) -> None:
        self.network = network
        self.shape = shape
        self.layout = make_layout(network, shape, options)
        self.objective_scale = options.tolerances.objective_scale
        self._options = options
        self._solvers: dict[tuple[tuple[str, object], ...], Any] = {}
        self._derivatives: dict[str, Any] = {}
        self._program = self._build()

    def _build(self) -> dict[str, Any]:
        network, layout, options = self.network, self.layout, self._options
        x = casadi.SX.sym("x", layout.n_var)
        parameter = casadi.SX.sym("parameter", layout.n_parameter)
        value = {name: x[place] for name, place in layout.variables.items()}
        price = {name: parameter[place] for name, place in layout.parameters.items()}
        model = BranchModel.of(network, self.shape.branch_in_service)
        live = layout.live
        branch, start, end = live.branch, live.from_bus, live.to_bus
        angle, magnitude = value["angle"], value["magnitude"]
        difference = _entries(angle, start) - _entries(angle, end)
        square = magnitude * magnitude
        square_from, square_to = _entries(square, start), _entries(square, end)
        product = _entries(magnitude, start) * _entries(magnitude, end)
        c, s = product * casadi.cos(difference), product * casadi.sin(difference)

        def flow(coefficients: FlowCoefficients, own: Any) -> Any:
            return (
                casadi.DM(coefficients.w[branch]) * own
                + casadi.DM(coefficients.c[branch]) * c
                + casadi.DM(coefficients.s[branch]) * s
            )

        p_from, q_from = flow(model.p_from, square_from), flow(model.q_from, square_from)
        p_to, q_to = flow(model.p_to, square_to), flow(model.q_to, square_to)

        resource_at = placed(live.bus_position[network.resource_bus], live.n_bus)
        bid_at = placed(live.bus_position[self.shape.bid_bus], live.n_bus)
        of_resource = incidence(self.shape.segment_resource, network.n_resource).T
        above_minimum = _times(of_resource, value["segment"])
        active = (
            _times(resource_at, above_minimum)
            - _times(bid_at, value["bid"])
            - casadi.DM(network.shunt_g[live.bus]) * square
            - _times(live.from_incidence, p_from)
            - _times(live.to_incidence, p_to)
        )
        reactive = (
            _times(resource_at, value["q"])
            + casadi.DM(network.shunt_b[live.bus]) * square
            - _times(live.from_incidence, q_from)
            - _times(live.to_incidence, q_to)
        )
        base = network.base_mva
        segment = value["segment"]
        cost = casadi.dot(price["price"], segment) + 0.5 * casadi.dot(price["slope"], segment * segment)
        cost -= casadi.dot(price["bid_price"], value["bid"])
        if options.penalties.power_balance is not None:
            active += value["unserved"] - value["surplus"]
            cost += options.penalties.power_balance * base * casadi.sum1(value["unserved"] + value["surplus"])

        rated = layout.rated
        rating = casadi.DM(network.normal_rating[branch[rated]])
        thermal_from = _entries(p_from, rated) ** 2 + _entries(q_from, rated) ** 2
        thermal_to = _entries(p_to, rated) ** 2 + _entries(q_to, rated) ** 2
        flow_rows = _times(self.shape.flow_weights[:, branch], p_from)
        if options.penalties.transmission is not None:
            # (rating + slack)^2 less rating^2, so that the row's bound is rating^2 with and without a penalty.
            eased = (2 * rating + value["excess"]) * value["excess"]
            thermal_from, thermal_to = thermal_from - eased, thermal_to - eased
            flow_rows -= value["flow_excess"]
            slack = casadi.sum1(value["excess"]) + casadi.sum1(value["flow_excess"])
            cost += options.penalties.transmission * base * slack
        movement = casadi.SX(0, 1)
        if self.shape.movement:
            movement = casadi.vertcat(above_minimum, value["bid"]) - value["up"] + value["down"]
            cost += price["movement_price"] * casadi.sum1(value["up"] + value["down"])
        rows = casadi.vertcat(
            active, reactive, thermal_from, thermal_to, _entries(difference, layout.angle_limited), flow_rows, movement
        )
        return {"x": x, "p": parameter, "f": self.objective_scale * cost, "g": casadi.densify(rows)}

    def solver(self, settings: dict[str, object]) -> Any:
        """Return the solver with these Ipopt settings; made once per set of settings.

        The derivative functions of the first solver serve all later ones.
        """
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
                **self._derivatives,
            }
            solver = casadi.nlpsol("ac_dispatch", "ipopt", self._program, choice)
            if not self._derivatives:
                self._derivatives = {
                    "grad_f": solver.get_function("nlp_grad_f"),
                    "jac_g": solver.get_function("nlp_jac_g"),
                    "hess_lag": solver.get_function("nlp_hess_l"),
                }
            self._solvers[key] = solver
        return self._solvers[key]

    def gradient(self, x: FloatArray, parameter: FloatArray) -> FloatArray:
        """Return the gradient of the cost [$/h per unit of the variable], shape (n_var,)."""
        _, gradient = self._derivatives["grad_f"](x, parameter)
        return np.asarray(gradient, dtype=float).ravel() / self.objective_scale

    def rows(self, x: FloatArray, parameter: FloatArray) -> tuple[FloatArray, sparse.csr_array]:
        """Return the values of the constraint rows, (n_row,), and their Jacobian, sparse (n_row, n_var)."""
        value, jacobian = self._derivatives["jac_g"](x, parameter)
        pattern = self._jacobian_pattern
        matrix = sparse.csc_array(
            (np.asarray(jacobian.nonzeros(), dtype=float), pattern[1], pattern[0]),
            shape=(self.layout.n_row, self.layout.n_var),
        )
        return np.asarray(value, dtype=float).ravel(), matrix.tocsr()

    @cached_property
    def _jacobian_pattern(self) -> tuple[IntArray, IntArray]:
        pattern = self._derivatives["jac_g"].sparsity_out(1)
        return np.asarray(pattern.colind(), np.int64), np.asarray(pattern.row(), np.int64)


def _slices(**sizes: int) -> dict[str, slice]:
    ends = np.cumsum(list(sizes.values())).tolist()
    return {name: slice(end - size, end) for (name, size), end in zip(sizes.items(), ends, strict=True)}


def _length(blocks: dict[str, slice]) -> int:
    return max((place.stop for place in blocks.values()), default=0)


def _entries(vector: Any, position: IntArray) -> Any:
    """Return a column of the chosen entries; casadi itself makes a row of no entries."""
    return vector[position.tolist()] if position.size else casadi.SX(0, 1)


def _times(matrix: sparse.sparray, vector: Any) -> Any:
    """Return matrix @ vector for a symbolic vector."""
    columns = sparse.csc_matrix(matrix)
    if 0 in columns.shape:
        return casadi.SX.zeros(columns.shape[0], 1)
    columns.sort_indices()
    pattern = casadi.Sparsity(columns.shape[0], columns.shape[1], columns.indptr.tolist(), columns.indices.tolist())
    return casadi.densify(casadi.mtimes(casadi.DM(pattern, columns.data), vector))
