"""One interval of the AC dispatch as vectors: bounds, parameters and points to start from."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from lmpgap.dispatch.ac_model import AcProgram
from lmpgap.dispatch.limits import FlowLimits
from lmpgap.dispatch.options import DispatchOptions
from lmpgap.dispatch.result import DispatchResult
from lmpgap.scenario.network import FloatArray, IntervalInputs, OfferSegments

_WORKING_RANGE = 10.0
"""Unlimited reactive outputs are kept within this multiple of all load and charging while solving."""

_ROOM = 1e-9
"""Bounds that cross by less than this are rounding, not a contradiction [pu]."""


@dataclass(frozen=True, kw_only=True)
class Movement:
    """A dispatch to stay close to, and what leaving it costs.

    Attributes
    ----------
    p : (n_resource,)
        Output to stay close to [pu].
    bid_served : (n_bid,)
        Served part of each bid to stay close to [pu].
    price : float
        Cost of each MW up or down from it [$/MWh].
    """

    p: FloatArray
    bid_served: FloatArray
    price: float


@dataclass(frozen=True, kw_only=True)
class AcVectors:
    """Bounds on variables and rows, and the parameters, of one interval."""

    lower: FloatArray
    upper: FloatArray
    row_lower: FloatArray
    row_upper: FloatArray
    parameter: FloatArray

    def contradictions(self) -> int:
        """Return how many bounds leave nothing in between."""
        crossed = np.count_nonzero(self.lower > self.upper + _ROOM)
        return int(crossed + np.count_nonzero(self.row_lower > self.row_upper + _ROOM))


def interval_vectors(
    program: AcProgram,
    inputs: IntervalInputs,
    flow_limits: FlowLimits,
    options: DispatchOptions,
    movement: Movement | None = None,
) -> AcVectors:
    """Return the vectors of one interval for a program of its shape."""
    network, layout = program.network, program.layout
    base, live = network.base_mva, layout.live
    lower, upper = np.zeros(layout.n_var), np.full(layout.n_var, np.inf)
    at = layout.variables
    lower[at["angle"]] = -np.inf
    lower[at["angle"]][live.references()] = 0.0
    upper[at["angle"]][live.references()] = 0.0
    lower[at["magnitude"]], upper[at["magnitude"]] = network.v_min[live.bus], network.v_max[live.bus]
    upper[at["segment"]] = inputs.segments.width
    on = inputs.resource_in_service & (live.bus_position[network.resource_bus] >= 0)
    lower[at["q"]] = np.where(on, network.q_min, 0.0)
    upper[at["q"]] = np.where(on, network.q_max, 0.0)
    bid_live = live.bus_position[inputs.bids.bus] >= 0
    upper[at["bid"]] = np.where(bid_live, inputs.bids.width, 0.0)
    if options.penalties.power_balance is not None:
        upper[at["unserved"]] = np.maximum(inputs.load_p[live.bus], 0.0)

    row_lower, row_upper = np.full(layout.n_row, -np.inf), np.zeros(layout.n_row)
    rows = layout.rows
    minimum = network.bus_to_resource() @ inputs.p_min
    for block, amount in (("active", inputs.load_p - minimum), ("reactive", inputs.load_q)):
        row_lower[rows[block]] = row_upper[rows[block]] = amount[live.bus]
    row_upper[rows["thermal_from"]] = row_upper[rows["thermal_to"]] = (
        network.normal_rating[live.branch[layout.rated]] ** 2
    )
    limited = live.branch[layout.angle_limited]
    row_lower[rows["angle"]], row_upper[rows["angle"]] = network.angle_min[limited], network.angle_max[limited]
    row_upper[rows["flow"]] = flow_limits.limit

    parameter = np.zeros(layout.n_parameter)
    parameter[layout.parameters["price"]] = base * inputs.segments.price_start
    parameter[layout.parameters["slope"]] = base * segment_slope(inputs.segments)
    parameter[layout.parameters["bid_price"]] = base * inputs.bids.price
    if movement is not None:
        parameter[layout.parameters["movement_price"]] = base * movement.price
        target = np.concatenate([movement.p - inputs.p_min, movement.bid_served])
        row_lower[rows["movement"]] = row_upper[rows["movement"]] = target
    return AcVectors(lower=lower, upper=upper, row_lower=row_lower, row_upper=row_upper, parameter=parameter)


def working_bounds(
    program: AcProgram, vectors: AcVectors, inputs: IntervalInputs, widened: float = 1.0
) -> tuple[FloatArray, FloatArray]:
    """Return bounds for the solver in which every reactive output has a finite range, shape (n_var,) each.

    Two unlimited outputs at one bus, or a network without resistance, leave a direction along which neither cost nor
    balance changes. A barrier on a wide range gives it a curvature; without one the iterates drift off along it.

    Parameters
    ----------
    widened
        Factor on the range, for another try where it turned out to hold.
    """
    network, place = program.network, program.layout.variables["q"]
    size = float(np.sum(np.abs(inputs.load_p)) + np.sum(np.abs(inputs.load_q)) + np.sum(np.abs(network.charging)))
    span = _WORKING_RANGE * widened * (1.0 + size)
    lower, upper = vectors.lower.copy(), vectors.upper.copy()
    low, high = vectors.lower[place], vectors.upper[place]
    lower[place] = np.where(np.isneginf(low), np.minimum(high, 0.0) - span, low)
    upper[place] = np.where(np.isposinf(high), np.maximum(low, 0.0) + span, high)
    return lower, upper


def segment_slope(segments: OfferSegments) -> FloatArray:
    """Return how the marginal price rises along each segment [$/MWh per pu], zero for a step or an empty one."""
    rise = segments.price_end - segments.price_start
    return np.divide(rise, segments.width, out=np.zeros(rise.size), where=segments.width > 0)


def flat_start(program: AcProgram, vectors: AcVectors) -> FloatArray:
    """Return the point with no angles, 1 pu where the band allows it, and outputs in the middle."""
    layout = program.layout
    x = np.zeros(layout.n_var)
    finite = np.isfinite(vectors.lower) & np.isfinite(vectors.upper)
    x[finite] = 0.5 * (vectors.lower[finite] + vectors.upper[finite])
    x[layout.variables["magnitude"]] = 1.0
    for block in ("unserved", "surplus", "excess", "flow_excess"):
        x[layout.variables[block]] = 0.0
    return _with_movement(program, vectors, np.clip(x, vectors.lower, vectors.upper))


def start_from(program: AcProgram, vectors: AcVectors, inputs: IntervalInputs, result: DispatchResult) -> FloatArray:
    """Return the point of another formulation's solution of the same interval.

    Its angles are turned island by island so that the references stand at zero.
    """
    layout, live = program.layout, program.layout.live
    at = layout.variables
    x = flat_start(program, vectors)
    angle = result.point.angle[live.bus]
    turn = np.zeros(int(live.island.max(initial=-1)) + 1)
    turn[live.island[live.references()]] = angle[live.references()]
    x[at["angle"]] = angle - turn[live.island]
    x[at["magnitude"]] = np.sqrt(result.point.w[live.bus])
    x[at["segment"]] = fill_segments(inputs, result.p)
    x[at["q"]] = result.q
    x[at["bid"]] = result.bid_served
    if at["unserved"].stop > at["unserved"].start:
        x[at["unserved"]] = result.unserved[live.bus]
        x[at["surplus"]] = result.surplus[live.bus]
    return _with_movement(program, vectors, np.clip(np.where(np.isfinite(x), x, 0.0), vectors.lower, vectors.upper))


def _with_movement(program: AcProgram, vectors: AcVectors, x: FloatArray) -> FloatArray:
    """Return the point with the movement that its outputs and bids imply, in place."""
    if program.shape.movement:
        at, n_resource = program.layout.variables, program.network.n_resource
        output = np.bincount(program.shape.segment_resource, x[at["segment"]], n_resource)
        moved = np.concatenate([output, x[at["bid"]]]) - vectors.row_upper[program.layout.rows["movement"]]
        x[at["up"]], x[at["down"]] = np.maximum(moved, 0.0), np.maximum(-moved, 0.0)
    return x


def fill_segments(inputs: IntervalInputs, p: FloatArray) -> FloatArray:
    """Return the output in each segment [pu], filled in the order of the curve, at given outputs (n_resource,)."""
    segments = inputs.segments
    order = np.argsort(segments.resource, kind="stable")
    owner, width = segments.resource[order], segments.width[order]
    filled = np.cumsum(width) - width
    first = np.searchsorted(owner, owner)
    before = filled - filled[first]
    output = np.empty(width.size)
    output[order] = np.clip((p - inputs.p_min)[owner] - before, 0.0, width)
    return output
