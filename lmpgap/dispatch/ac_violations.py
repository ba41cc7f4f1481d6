"""Every limit of the model held against an AC power flow."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from lmpgap.dispatch.limits import FlowLimits
from lmpgap.dispatch.power_flow import PowerFlow
from lmpgap.dispatch.result import DispatchResult
from lmpgap.scenario.network import BoolArray, FloatArray, IntervalInputs, Network


@dataclass(frozen=True, kw_only=True)
class LimitViolations:
    """What an AC power flow does to each limit; zero where the limit is kept.

    Attributes
    ----------
    apparent : (n_branch,)
        Apparent power at the more loaded end [pu].
    thermal : (n_branch,)
        Apparent power beyond the rating [pu].
    flow : (n_row,)
        Weighted flow beyond its limit, for contingencies and interfaces [pu].
    voltage : (n_bus,)
        Magnitude above the band (positive) or below it (negative) [pu].
    angle : (n_branch,)
        Angle difference above its limit (positive) or below it (negative) [rad].
    reactive : (n_bus,)
        Reactive power of the bus's resources above (positive) or below (negative) what they can give [pu].
    active : (n_resource,)
        Output with its part of the missing power, above or below the resource's range [pu].
    """

    apparent: FloatArray
    thermal: FloatArray
    flow: FloatArray
    voltage: FloatArray
    angle: FloatArray
    reactive: FloatArray
    active: FloatArray


def resource_totals(network: Network, inputs: IntervalInputs, values: FloatArray) -> FloatArray:
    """Return the sum over the in-service resources of each bus, shape (n_bus,)."""
    on = inputs.resource_in_service
    return np.bincount(network.resource_bus[on], values[on], network.n_bus).astype(float)


def net_injection(network: Network, inputs: IntervalInputs, result: DispatchResult) -> tuple[FloatArray, FloatArray]:
    """Return generation less served load of a dispatch, active and reactive, each (n_bus,) [pu]."""
    served = np.bincount(inputs.bids.bus, result.bid_served, network.n_bus)
    active = resource_totals(network, inputs, result.p) - inputs.load_p - served + result.unserved - result.surplus
    return active, resource_totals(network, inputs, result.q) - inputs.load_q


def resource_buses(network: Network, inputs: IntervalInputs) -> BoolArray:
    """Return True at buses with a resource in service that can give or take reactive power, shape (n_bus,).

    Where an island has none of them, every bus with a resource in service counts, so that something holds it.
    """
    on = inputs.resource_in_service
    able, any_resource = np.zeros(network.n_bus, dtype=bool), np.zeros(network.n_bus, dtype=bool)
    able[network.resource_bus[on & (network.q_max > network.q_min)]] = True
    any_resource[network.resource_bus[on]] = True
    island = network.islands(inputs.branch_in_service)
    held = np.zeros(int(island.max(initial=-1)) + 1, dtype=bool)
    held[island[able]] = True
    return able | (any_resource & ~held[island])


def limit_violations(
    network: Network,
    inputs: IntervalInputs,
    flow_limits: FlowLimits,
    flow: PowerFlow,
    p: FloatArray,
    *,
    room: DispatchResult | None = None,
) -> LimitViolations:
    """Return what a converged power flow does to each limit.

    Parameters
    ----------
    p : (n_resource,)
        Outputs before the missing power is shared out [pu]; a bus's part is split over its resources by capacity.
    room
        A dispatch whose own flows are allowed where they exceed a limit: what gave way at a penalty is part of the
        dispatch, not a fault of the power flow.
    """
    point = flow.point
    apparent = np.maximum(np.hypot(point.p_from, point.q_from), np.hypot(point.p_to, point.q_to))
    rating, limit = network.normal_rating, flow_limits.limit
    if room is not None:
        given = room.point
        allowed = np.maximum(np.hypot(given.p_from, given.q_from), np.hypot(given.p_to, given.q_to))
        rating, limit = np.maximum(rating, allowed), np.maximum(limit, flow_limits.weights @ given.p_from)
    live = ~flow.dead
    on = inputs.branch_in_service & live[network.from_bus]
    difference = np.where(on, flow.angle[network.from_bus] - flow.angle[network.to_bus], 0.0)
    q = flow.q_at_bus + inputs.load_q
    q_min, q_max = (resource_totals(network, inputs, bound) for bound in (network.q_min, network.q_max))
    capacity = np.maximum(np.where(inputs.resource_in_service, inputs.p_max, 0.0), 0.0)
    at_bus = resource_totals(network, inputs, capacity)[network.resource_bus]
    count = resource_totals(network, inputs, np.ones(network.n_resource))[network.resource_bus]
    part = np.divide(capacity, at_bus, out=np.divide(1.0, np.maximum(count, 1.0)), where=at_bus > 0)
    output = p + np.where(inputs.resource_in_service, part * flow.slack[network.resource_bus], 0.0)
    return LimitViolations(
        apparent=apparent,
        thermal=np.where(on, np.maximum(apparent - rating, 0.0), 0.0),
        flow=np.maximum(flow_limits.weights @ point.p_from - limit, 0.0),
        voltage=np.where(live, _beyond(flow.magnitude, network.v_min, network.v_max), 0.0),
        angle=np.where(on, _beyond(difference, network.angle_min, network.angle_max), 0.0),
        reactive=np.where(live, _beyond(q, q_min, q_max), 0.0),
        active=_beyond(output, inputs.p_min, inputs.p_max),
    )


def _beyond(value: FloatArray, low: FloatArray, high: FloatArray) -> FloatArray:
    """Return how far a value lies above (positive) or below (negative) its range."""
    return np.asarray(np.maximum(value - high, 0.0) - np.maximum(low - value, 0.0))
