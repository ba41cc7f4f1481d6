"""Marginal cost against price at units and bids that run strictly inside one of their segments.

Such a unit can move both ways, so at an optimum its marginal cost is the price of its bus. This check uses neither
the network nor the multipliers of any limit: it sees an answer that satisfies the split of prices but is no
optimum, as at an infeasible point or with a loss that was burnt for nothing.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from lmpgap.dispatch.result import DispatchResult
from lmpgap.scenario.network import BoolArray, FloatArray, IntervalInputs, Network
from lmpgap.tolerances import DEFAULT_TOLERANCES, Tolerances


@dataclass(frozen=True, kw_only=True)
class MarginalCosts:
    """Where the dispatch stands on the offer segments.

    Attributes
    ----------
    filled : (n_segment,)
        Output in each segment [pu].
    marginal_cost : (n_segment,)
        Marginal cost at that output [$/MWh].
    interior : (n_segment,)
        True where the output is strictly inside the segment, so that marginal cost and price must agree.
    error : (n_segment,)
        Marginal cost minus price of the bus where ``interior``, else zero [$/MWh].
    bid_error : (n_bid,)
        Value of the bid minus price of the bus where the bid is partly served, else zero [$/MWh].
    """

    filled: FloatArray
    marginal_cost: FloatArray
    interior: BoolArray
    error: FloatArray
    bid_error: FloatArray

    @property
    def largest_error(self) -> float:
        """Largest absolute difference between marginal cost and price [$/MWh]; zero when nothing is interior."""
        return float(max(np.max(np.abs(self.error), initial=0.0), np.max(np.abs(self.bid_error), initial=0.0)))


def marginal_costs(
    network: Network,
    inputs: IntervalInputs,
    result: DispatchResult,
    price: FloatArray,
    tolerances: Tolerances = DEFAULT_TOLERANCES,
) -> MarginalCosts:
    """Compare marginal cost and price at interior units.

    Parameters
    ----------
    price : (n_bus,)
        [$/MWh]; ``nan`` at dead buses, whose units are left out.
    tolerances
        ``active_slack_mw`` is the distance from the ends of a segment that counts as inside.

    Notes
    -----
    Segments of one resource fill in the order of their prices, which never fall; the output says how far.
    """
    segments, bids = inputs.segments, inputs.bids
    order = np.lexsort((np.arange(segments.width.size), segments.price_start, segments.resource))
    owner = segments.resource[order]
    upto = np.cumsum(segments.width[order])
    before = upto - segments.width[order]
    # Subtract what the resources before this one have in the running sum.
    _, first = np.unique(owner, return_index=True)
    start = np.zeros(network.n_resource)
    start[owner[first]] = before[first]
    filled = np.zeros(segments.width.size)
    above = (result.p - inputs.p_min)[owner]
    filled[order] = np.clip(above - (before - start[owner]), 0.0, segments.width[order])

    width = segments.width
    share = np.divide(filled, width, out=np.zeros_like(width), where=width > 0.0)
    marginal = segments.price_start + (segments.price_end - segments.price_start) * share
    inside = tolerances.active_slack_mw / network.base_mva
    bus_price = price[network.resource_bus[segments.resource]]
    running = inputs.resource_in_service[segments.resource] & np.isfinite(bus_price)
    interior = (filled > inside) & (filled < width - inside) & running
    served = result.bid_served
    bid_price = price[bids.bus]
    partly = (served > inside) & (served < bids.width - inside) & np.isfinite(bid_price)
    return MarginalCosts(
        filled=filled,
        marginal_cost=marginal,
        interior=interior,
        error=np.where(interior, marginal - bus_price, 0.0),
        bid_error=np.where(partly, bids.price - bid_price, 0.0),
    )
