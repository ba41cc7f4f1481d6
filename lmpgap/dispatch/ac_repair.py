"""From a linear dispatch to one that the AC network can carry, and what that costs.

Two repairs bound what a system operator may do:

- the **cheapest**: outputs move freely and the least total cost counts. What the linear dispatch would have cost is
  the same whatever is done next, so the cheapest redispatch from it is the AC optimum itself, and its movements are the
  differences between the two;
- the **nearest**: every MW moved away from the linear dispatch, up or down, costs a movement price besides, so that an
  output stays where the market put it unless the network needs the movement or it saves more than that price. The
  default price is ten times the spread of offers. The higher the price, the fewer MW move: at a very high one the
  voltages are even bent to lower the losses that somebody has to make up.

What the nearest costs over the cheapest is the price of keeping to the linear dispatch as far as physics allows.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from lmpgap.dispatch.ac import AcDispatch
from lmpgap.dispatch.ac_interval import Movement
from lmpgap.dispatch.limits import FlowLimits
from lmpgap.dispatch.result import DispatchResult
from lmpgap.errors import SolveError
from lmpgap.scenario.network import FloatArray, IntervalInputs, Network
from lmpgap.scenario.settings import Penalties

MOVEMENT_FACTOR = 10.0
"""Price of a MW moved, as a multiple of the spread of offers and bids. Moving a MW from the cheapest to the dearest
offer changes the cost by one spread; ten leave room for movements that relieve a limit with a small shift factor."""


@dataclass(frozen=True, kw_only=True)
class Redispatch:
    """One AC-feasible dispatch seen from the linear one; figures are ``nan`` without a solution.

    Attributes
    ----------
    result : DispatchResult
        The AC dispatch. The multipliers of the nearest redispatch contain the price of movement: they are no prices.
    change_mw : (n_resource,)
        Output less that of the linear dispatch [MW]: positive is up.
    bid_change_mw : (n_bid,)
        Served bids less those of the linear dispatch [MW].
    up_mw, down_mw : float
        Sums of the upward and of the downward changes of resources [MW]. They differ by the power that the linear
        dispatch left missing, and by bids.
    moved_mw : float
        Everything that moved, resources and bids, up and down [MW].
    cost : float
        Of the AC-feasible dispatch [$/h].
    cost_of_repair : float
        That less the cost of the linear dispatch [$/h].
    """

    result: DispatchResult
    change_mw: FloatArray
    bid_change_mw: FloatArray
    up_mw: float
    down_mw: float
    moved_mw: float
    cost: float
    cost_of_repair: float


@dataclass(frozen=True, kw_only=True)
class Repair:
    """The two repairs of a linear dispatch.

    Attributes
    ----------
    linear_cost : float
        What the linear dispatch believed to cost [$/h].
    cheapest, nearest : Redispatch
    cost_over_optimum : float
        Cost of the nearest redispatch less that of the AC optimum [$/h]. Both are local optima, so a small negative
        figure is possible; it is not rounded away.
    movement_price : float
        Price of movement in the search for the nearest redispatch [$/MWh].
    """

    linear_cost: float
    cheapest: Redispatch
    nearest: Redispatch
    cost_over_optimum: float
    movement_price: float


def repair_dispatch(
    network: Network,
    inputs: IntervalInputs,
    result: DispatchResult,
    flow_limits: FlowLimits,
    dispatch: AcDispatch,
    *,
    optimum: DispatchResult | None = None,
    start: DispatchResult | None = None,
    movement_price: float | None = None,
) -> Repair:
    """Return the cheapest and the nearest AC-feasible redispatch from a linear dispatch.

    Parameters
    ----------
    result
        The linear dispatch.
    flow_limits
        Contingency and interface limits that the redispatch has to keep as well.
    dispatch
        AC dispatch of the interval's topology; its penalties apply to the redispatch too.
    optimum
        AC optimum of the interval with the same limits, if it has been solved already.
    start
        Where to start where the optimum has to be solved here: best the cone solution of the interval.
    movement_price
        Price of each MW moved [$/MWh]; by default `MOVEMENT_FACTOR` times the spread of offers and bids, and at most
        the smallest penalty divided by the same factor.

    Returns
    -------
    Repair

    Raises
    ------
    SolveError
        When the linear dispatch has no solution.
    """
    if not result.status.has_solution:
        raise SolveError(
            f"interval {inputs.start}: a {result.formulation} dispatch that is {result.status.value} cannot be "
            "repaired: solve it first"
        )
    if optimum is None:
        optimum = dispatch.solve(inputs, flow_limits, start)
    price = _movement_price(inputs, dispatch.options.penalties) if movement_price is None else movement_price
    nearest = dispatch.solve_near(
        inputs,
        flow_limits,
        start=optimum,
        movement=Movement(p=result.p, bid_served=result.bid_served, price=price),
    )
    return Repair(
        linear_cost=result.objective,
        cheapest=_seen_from(network, result, optimum),
        nearest=_seen_from(network, result, nearest),
        cost_over_optimum=nearest.objective - optimum.objective,
        movement_price=price,
    )


def _movement_price(inputs: IntervalInputs, penalties: Penalties) -> float:
    wide = inputs.segments.width > 0.0
    prices = np.concatenate(
        [
            inputs.segments.price_start[wide],
            inputs.segments.price_end[wide],
            inputs.bids.price[inputs.bids.width > 0.0],
        ]
    )
    spread = float(np.ptp(prices)) if prices.size else 0.0
    # Far below every penalty: otherwise load would be shed, or a line overloaded, rather than an output moved.
    least = min((p for p in (penalties.power_balance, penalties.transmission) if p is not None), default=np.inf)
    return min(MOVEMENT_FACTOR * max(spread, 1.0), float(least) / MOVEMENT_FACTOR)


def _seen_from(network: Network, linear: DispatchResult, ac: DispatchResult) -> Redispatch:
    change = network.base_mva * (ac.p - linear.p)
    bid_change = network.base_mva * (ac.bid_served - linear.bid_served)
    return Redispatch(
        result=ac,
        change_mw=change,
        bid_change_mw=bid_change,
        up_mw=float(np.sum(np.maximum(change, 0.0))),
        down_mw=float(np.sum(np.maximum(-change, 0.0))),
        moved_mw=float(np.sum(np.abs(change)) + np.sum(np.abs(bid_change))),
        cost=ac.objective,
        cost_of_repair=ac.objective - linear.objective,
    )
