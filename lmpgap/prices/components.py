"""The one split of a nodal price into energy, congestion, loss and reactive parts.

At a solution the cost does not change when the bus angles are turned. With the Jacobians of the network's
injections at the operating point, P_theta (active) and Q_theta (reactive), and the gradients H_theta of the
limits, that stationarity reads

    P_theta' lambda + Q_theta' nu + H_theta' mu = 0

whatever the formulation: it is linear in the branch angle sensitivities, which every result carries. Hence

    lambda = energy DF + sum_k C_k + R
    P_theta' DF  = 0                  v' DF  = 1        delivery factor; loss = energy (DF - 1)
    P_theta' C_k = -H_k' mu_k         v' C_k = 0        congestion, one column per constraint
    P_theta' R   = -Q_theta' nu       v' R   = 0        reactive

on any reference v whose weights sum to one. The columns of P_theta' sum to zero, so one equation per island is
redundant and gives way to the reference. The system is factorised with a single bus as reference, which keeps
it sparse, and the parts are then moved to the weights by exact re-referencing (`lmpgap.prices.reference`).

The left side comes from the solver, the right side from the limits' multipliers, the reactive prices and one
number per island. Their difference, the price residual, is therefore a real check of the solver's answer.

Notes
-----
For the split on a reference and the independence of the total from it: "Marginal Loss Modeling in LMP Calculation",
IEEE Trans. Power Systems 19(2), 2004. The same stationarity holds pair by pair in the cone relaxation, slack cones
included, because turning one product W leaves |W| and so every cone alone.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy import sparse

from lmpgap.dispatch.result import DispatchResult
from lmpgap.errors import NotIdentifiableError
from lmpgap.prices.keys import ConstraintKey, KeyedConstraints, merge_by_key
from lmpgap.prices.reference import island_weights
from lmpgap.prices.turning import Turning
from lmpgap.scenario.network import BoolArray, FloatArray, IntArray, Network
from lmpgap.tolerances import DEFAULT_TOLERANCES, Tolerances

OTHER_SOURCES = -1
"""Stands for the bus in `ReactiveSources.source` where the small sources are gathered."""

_CANDIDATES = 250
"""With more reactive sources than this, the strongest so many (four times as many as are listed, at least) are computed
exactly; the strength of a source is the sum of what it puts on the right-hand side. All of 2,000 would take three times
as long as the solve."""


@dataclass(frozen=True, kw_only=True)
class ReactiveSources:
    """The reactive component by the bus whose reactive price causes it.

    Attributes
    ----------
    source : (n_source,)
        Bus position; the last entry is `OTHER_SOURCES`, the sum of all sources that are not listed, when there
        are any.
    amount : (n_source, n_bus)
        Part of the reactive component at each bus; the rows add up to it [$/MWh].
    """

    source: IntArray
    amount: FloatArray


@dataclass(frozen=True, kw_only=True)
class PriceSplit:
    """Nodal prices of one interval and their parts on one reference.

    Attributes
    ----------
    lmp : (n_bus,)
        Sum of the four components; ``nan`` at a dead bus [$/MWh].
    energy : (n_bus,)
        Reference-weighted price of the bus's island [$/MWh].
    congestion, loss, reactive : (n_bus,)
        [$/MWh]
    delivery_factor : (n_bus,)
        Power that arrives at the reference per power injected, at the margin [-].
    island : (n_bus,)
        Island number of each bus.
    weights : (n_bus,)
        The reference in force; sums to one in every live island [-].
    keys : (n_key,)
        Constraints with a shadow price that bind flows or angles; voltage and reactive limits show in the reactive
        component.
    unit : (n_key,)
        Unit of each constraint's limit.
    shadow_price : (n_key,)
        Fall of cost per unit of relaxed limit, never negative [$/h per unit, $/MWh for a limit in MW].
    shift_factor : (n_key, n_bus)
        Change of the constrained quantity per MW injected at the bus and withdrawn at the reference, with the
        losses on the way made up there [unit/MW].
    congestion_by_key : (n_key, n_bus)
        ``-shadow_price * shift_factor``; the rows add up to ``congestion`` [$/MWh].
    reactive_sources : ReactiveSources or None
        Where asked for.
    multiplier_price : (n_bus,)
        The solver's own multiplier of the active balance as a price [$/MWh].
    reactive_price : (n_bus,)
        The solver's multiplier of the reactive balance as a price [$/Mvarh].
    price_residual : float
        Largest difference between ``multiplier_price`` and ``lmp`` [$/MWh].
    """

    lmp: FloatArray
    energy: FloatArray
    congestion: FloatArray
    loss: FloatArray
    reactive: FloatArray
    delivery_factor: FloatArray
    island: IntArray
    weights: FloatArray
    keys: tuple[ConstraintKey, ...]
    unit: tuple[str, ...]
    shadow_price: FloatArray
    shift_factor: FloatArray
    congestion_by_key: FloatArray
    reactive_sources: ReactiveSources | None
    multiplier_price: FloatArray
    reactive_price: FloatArray
    price_residual: float


def multiplier_to_price(multiplier: FloatArray, base_mva: float) -> FloatArray:
    """Return the price of a balance multiplier; the one place where multipliers become prices.

    Parameters
    ----------
    multiplier
        Rise of cost per unit of additional load [$/h per pu].
    base_mva
        [MVA]

    Returns
    -------
    price
        Positive where more load costs more [$/MWh].
    """
    return multiplier / base_mva


def split_prices(
    network: Network,
    branch_in_service: BoolArray,
    result: DispatchResult,
    weights: FloatArray,
    tolerances: Tolerances = DEFAULT_TOLERANCES,
    *,
    reactive_sources: int | None = 0,
    island: IntArray | None = None,
    keyed: KeyedConstraints | None = None,
) -> PriceSplit:
    """Split the nodal prices of a solve on a reference.

    Parameters
    ----------
    network
    branch_in_service : (n_branch,)
    result
        Any formulation's result; it must have a solution.
    weights : (n_bus,)
        Reference weights, negative ones allowed; normalised within each island. An island without any weight
        takes the plain mean over its live buses.
    tolerances
        Shadow prices up to ``shadow_price`` are left out of the constraints (and show in the residual).
    reactive_sources
        How many sources of the reactive component to list by bus: 0 for none, ``None`` for all.
    island : (n_bus,), optional
        Island numbers, where the caller has them already.
    keyed : optional
        The result's constraints (`constraints_of`), where the caller has them already.

    Returns
    -------
    PriceSplit
        ``nan`` everywhere when the result has no solution.

    Raises
    ------
    NotIdentifiableError
        When an island's weights cancel.
    NumericalError
        When the operating point leaves an island's angles undetermined.
    """
    island = network.islands(branch_in_service) if island is None else island
    live = np.isfinite(result.multipliers.active)
    multiplier_price = multiplier_to_price(result.multipliers.active, network.base_mva)
    reactive_price = multiplier_to_price(result.multipliers.reactive, network.base_mva)
    keyed = merge_by_key(result.constraints) if keyed is None else keyed
    # Voltage and reactive limits do not turn with the angles: they act through the reactive prices.
    turns = np.diff(keyed.angle_gain.indptr) > 0
    keep = np.flatnonzero(turns & (keyed.shadow_price > tolerances.shadow_price))
    reference = island_weights(weights, island, live)
    if not live.any():
        return _nothing(network, island, reference, multiplier_price, reactive_price)

    turning = Turning.of(network, result, island, live)
    # Shift factors per unit of the constraint and per MW: gain [unit/rad], injection [pu] of base_mva [MW].
    shift_factor = turning.solve(turning.at_buses(keyed.angle_gain[keep])) / network.base_mva
    reactive_source = turning.reactive_source(np.where(live, reactive_price, 0.0))
    reactive = -turning.solve(np.asarray(reactive_source @ np.ones(network.n_bus))[:, None])[:, 0]

    delivery_factor = turning.null_vector() if result.frozen is None else result.frozen.delivery_factor
    reducer = _Reducer(reference, island, delivery_factor)
    shadow_price = keyed.shadow_price[keep]
    if result.frozen is None:
        energy = reducer.mean(np.where(live, multiplier_price, 0.0))
    else:
        # The dispatch took the factors as given: lambda = lam DF + alpha with alpha = congestion on the loss
        # distribution as reference. Everything on the right side is known, no number is borrowed from lambda.
        distribution = _Reducer(
            island_weights(result.frozen.loss_distribution, island, live), island, turning.null_vector()
        )
        shift_factor, reactive = distribution.move(shift_factor), distribution.move(reactive)
        alpha = reactive - shift_factor @ shadow_price
        system = multiplier_to_price(np.asarray(result.frozen.energy_multiplier), network.base_mva)
        energy = reducer.mean(np.where(live, system * result.frozen.delivery_factor + alpha, 0.0))

    dead = np.where(live, 1.0, np.nan)
    shift_factor = reducer.move(shift_factor).T * dead
    congestion_by_key = -shadow_price[:, None] * shift_factor
    congestion = congestion_by_key.sum(axis=0) * dead
    reactive = reducer.move(reactive) * dead
    energy = energy * dead
    factor = reducer.delivery_factor * dead
    loss = energy * (factor - 1.0)
    lmp = energy + congestion + loss + reactive
    return PriceSplit(
        lmp=lmp,
        energy=energy,
        congestion=congestion,
        loss=loss,
        reactive=reactive,
        delivery_factor=factor,
        island=island,
        weights=reference,
        keys=tuple(keyed.keys[k] for k in keep),
        unit=tuple(keyed.unit[k] for k in keep),
        shadow_price=shadow_price,
        shift_factor=shift_factor,
        congestion_by_key=congestion_by_key,
        reactive_sources=_sources(turning, reducer, reactive_source, reactive, dead, reactive_sources),
        multiplier_price=multiplier_price,
        reactive_price=reactive_price,
        price_residual=float(np.max(np.abs(multiplier_price - lmp)[live])),
    )


def constraints_of(result: DispatchResult) -> KeyedConstraints:
    """Return the constraints of a result under one key each, binding or not; for the constraint table."""
    return merge_by_key(result.constraints)


class _Reducer:
    """Moves columns from one reference to the weights, island by island; (n_bus,) or (n_bus, n_column)."""

    def __init__(self, weights: FloatArray, island: IntArray, delivery_factor: FloatArray) -> None:
        self._gather = sparse.csr_array((weights, (island, np.arange(island.size))))
        self._island = island
        arriving = self.mean(delivery_factor)
        weightless = self.mean(np.ones(island.size)) == 0.0
        if np.any(np.abs(arriving[~weightless]) < 1e-9):
            raise NotIdentifiableError(
                "the reference weights receive nothing at the margin (weighted delivery factor 0), so the "
                "components are not defined on them; choose another reference"
            )
        self.delivery_factor = delivery_factor / np.where(weightless, 1.0, arriving)

    def mean(self, values: FloatArray) -> FloatArray:
        """Return the weighted mean of each bus's island, in the shape of the values."""
        return np.asarray((self._gather @ values)[self._island])

    def move(self, values: FloatArray) -> FloatArray:
        """Return the columns with their weighted mean removed along the delivery factors."""
        factor = self.delivery_factor if values.ndim == 1 else self.delivery_factor[:, None]
        return values - factor * self.mean(values)


def _sources(
    turning: Turning,
    reducer: _Reducer,
    reactive_source: sparse.csc_array,
    reactive: FloatArray,
    dead: FloatArray,
    wanted: int | None,
) -> ReactiveSources | None:
    """Return the largest sources of the reactive component, the rest gathered in one row."""
    if wanted == 0:
        return None
    strength = np.asarray(abs(reactive_source).sum(axis=0)).ravel()
    candidates = np.flatnonzero(strength > 0.0)
    limit = candidates.size if wanted is None else wanted
    computed = max(_CANDIDATES, 4 * limit)
    if candidates.size > computed:
        candidates = np.sort(candidates[np.argsort(-strength[candidates], kind="stable")[:computed]])
    amount = -reducer.move(turning.solve(reactive_source[:, candidates].toarray())).T * dead
    largest = np.nanmax(np.abs(amount), axis=1, initial=0.0)
    chosen = np.sort(np.argsort(-largest, kind="stable")[:limit])
    source, amount = candidates[chosen], amount[chosen]
    if np.count_nonzero(strength) > chosen.size:
        source = np.append(source, OTHER_SOURCES)
        amount = np.vstack([amount, reactive - amount.sum(axis=0)])
    return ReactiveSources(source=source.astype(np.int64), amount=amount)


def _nothing(
    network: Network,
    island: IntArray,
    weights: FloatArray,
    multiplier_price: FloatArray,
    reactive_price: FloatArray,
) -> PriceSplit:
    """Return a split without a single live bus."""
    nan = np.full(network.n_bus, np.nan)
    return PriceSplit(
        lmp=nan,
        energy=nan,
        congestion=nan,
        loss=nan,
        reactive=nan,
        delivery_factor=nan,
        island=island,
        weights=weights,
        keys=(),
        unit=(),
        shadow_price=np.zeros(0),
        shift_factor=np.zeros((0, network.n_bus)),
        congestion_by_key=np.zeros((0, network.n_bus)),
        reactive_sources=None,
        multiplier_price=multiplier_price,
        reactive_price=reactive_price,
        price_residual=float("inf"),
    )
