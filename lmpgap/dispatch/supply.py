"""What all convex formulations share on the market side: offers, bids, penalties, and flow limits."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy import sparse

from lmpgap.dispatch.limits import FlowLimits
from lmpgap.dispatch.live import LiveNetwork
from lmpgap.dispatch.program_builder import Affine, ProgramBuilder, ProgramTemplate
from lmpgap.scenario.network import FloatArray, IntArray, IntervalInputs, incidence
from lmpgap.scenario.settings import Penalties


@dataclass(frozen=True, kw_only=True)
class SupplyResult:
    """Market side of a solution, at all resources, bids and buses [pu, $/h]."""

    p: FloatArray
    resource_cost: FloatArray
    bid_served: FloatArray
    unserved: FloatArray
    surplus: FloatArray


def pattern_key(inputs: IntervalInputs) -> tuple[bytes, ...]:
    """Return what the matrices of a program depend on besides topology, live buses and flow limits."""
    return inputs.segments.resource.tobytes(), inputs.bids.bus.tobytes()


def add_supply(builder: ProgramBuilder, live: LiveNetwork, inputs: IntervalInputs, penalties: Penalties) -> Affine:
    """Add segments, bids and the power balance penalty; return their net injection, one row per live bus.

    Output above ``p_min`` only: the fixed part goes to the right-hand side, see `fixed_withdrawal`.
    """
    segments, bids = inputs.segments, inputs.bids
    owner_bus = live.bus_position[live.network.resource_bus[segments.resource]]
    injection = builder.variable("segment", segments.resource.size, lower=0.0).mapped(placed(owner_bus, live.n_bus))
    served = builder.variable("bid", bids.bus.size, lower=0.0)
    injection = injection - served.mapped(placed(live.bus_position[bids.bus], live.n_bus))
    if penalties.power_balance is not None:
        injection = injection + builder.variable("unserved", live.n_bus, lower=0.0)
        injection = injection - builder.variable("surplus", live.n_bus, lower=0.0)
    return injection


def rated_branches(live: LiveNetwork) -> IntArray:
    """Return the live positions of branches with a rating."""
    return np.flatnonzero(np.isfinite(live.network.normal_rating[live.branch]))


def placed(bus: IntArray, n_bus: int) -> sparse.csr_array:
    """Return the (n_bus, n) incidence of positions; a dead position (-1) injects nowhere."""
    live = (bus >= 0).astype(float)
    matrix = incidence(np.maximum(bus, 0), n_bus)
    return sparse.csr_array((sparse.diags_array(live, format="csr") @ matrix).T)


def fixed_withdrawal(live: LiveNetwork, inputs: IntervalInputs) -> FloatArray:
    """Return load minus must-run output at each live bus [pu], shape (n_live_bus,)."""
    must_run = np.bincount(live.network.resource_bus, weights=inputs.p_min, minlength=live.network.n_bus)
    return np.asarray((inputs.load_p - must_run)[live.bus])


def supply_costs(
    live: LiveNetwork, inputs: IntervalInputs, penalties: Penalties
) -> tuple[dict[str, FloatArray | float], dict[str, FloatArray | float], dict[str, FloatArray | float], float]:
    """Return linear costs, quadratic costs and upper bounds of the supply blocks, and the fixed cost [$/h]."""
    base = live.network.base_mva
    segments, bids = inputs.segments, inputs.bids
    dead_bid = live.bus_position[bids.bus] < 0
    linear: dict[str, FloatArray | float] = {"segment": base * segments.price_start, "bid": -base * bids.price}
    quadratic: dict[str, FloatArray | float] = {"segment": base * _slope(inputs)}
    upper: dict[str, FloatArray | float] = {
        "segment": segments.width,
        "bid": np.where(dead_bid, 0.0, bids.width),
    }
    if penalties.power_balance is not None:
        linear |= {"unserved": base * penalties.power_balance, "surplus": base * penalties.power_balance}
        upper["unserved"] = np.maximum(inputs.load_p[live.bus], 0.0)
    fixed_cost = float(inputs.fixed_cost.sum())
    if penalties.power_balance is not None:
        fixed_cost += base * penalties.power_balance * float(np.abs(inputs.load_p[live.dead()]).sum())
    return linear, quadratic, upper, fixed_cost


def _slope(inputs: IntervalInputs) -> FloatArray:
    """Return the rise of the marginal price along each segment [$/MWh per pu]."""
    segments = inputs.segments
    rise = segments.price_end - segments.price_start
    return np.divide(rise, segments.width, out=np.zeros_like(rise), where=segments.width > 0.0)


def read_supply(template: ProgramTemplate, live: LiveNetwork, inputs: IntervalInputs, x: FloatArray) -> SupplyResult:
    """Return the market side of a solution."""
    network, segments = live.network, inputs.segments
    output = x[template.variables["segment"]]
    above = np.bincount(segments.resource, weights=output, minlength=network.n_resource)
    cost = network.base_mva * output * (segments.price_start + 0.5 * _slope(inputs) * output)
    resource_cost = inputs.fixed_cost + np.bincount(segments.resource, weights=cost, minlength=network.n_resource)

    dead = live.dead()

    def at_buses(name: str, at_dead: FloatArray) -> FloatArray:
        values = np.zeros(network.n_bus)
        if name in template.variables:
            values[live.bus] = x[template.variables[name]]
            values[dead] = np.maximum(at_dead, 0.0)
        return values

    return SupplyResult(
        p=inputs.p_min + above,
        resource_cost=resource_cost,
        bid_served=x[template.variables["bid"]].copy(),
        unserved=at_buses("unserved", inputs.load_p[dead]),
        surplus=at_buses("surplus", -inputs.load_p[dead]),
    )


def with_flow_limits(
    template: ProgramTemplate,
    live: LiveNetwork,
    flow_limits: FlowLimits,
    p_from: tuple[sparse.csr_array, FloatArray],
    penalties: Penalties,
) -> ProgramTemplate:
    """Return the template with the limits on weighted sums of from-end flows, soft at the transmission penalty.

    Parameters
    ----------
    p_from
        Coefficients (n_live_branch, n_var) and constants (n_live_branch,) of the flows.
    """
    weights = sparse.csr_array(flow_limits.weights[:, live.branch])
    return template.with_limits(
        "flow limit",
        sparse.csr_array(weights @ p_from[0]),
        np.asarray(weights @ p_from[1]),
        flow_limits.limit,
        excess=None if penalties.transmission is None else "flow limit excess",
    )


def transmission_costs(
    template: ProgramTemplate, base_mva: float, penalties: Penalties
) -> dict[str, FloatArray | float]:
    """Return the penalty costs of the transmission limits that may give way."""
    if penalties.transmission is None:
        return {}
    cost = base_mva * penalties.transmission
    return {name: cost for name in ("excess", "flow limit excess") if name in template.variables}
