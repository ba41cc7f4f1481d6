"""What must hold of every solved interval, whatever features it has; each check raises on the first breach."""

from __future__ import annotations

from dataclasses import replace
from itertools import combinations

import numpy as np

from lmpgap.dispatch.limits import FlowLimits, interface_limits
from lmpgap.dispatch.restatement import restate
from lmpgap.divergence.compare import compare
from lmpgap.errors import NotIdentifiableError
from lmpgap.prices.money import BY_COMPONENTS, BY_CONSTRAINTS
from lmpgap.prices.reference import rereference
from lmpgap.runs.plan import PlannedInterval
from lmpgap.runs.rows import SolvedInterval, chunk_tables
from tests.integration.solving import Solver, live_buses, more_load

STEPS_MW = (0.05, 0.3, 0.01)
"""Cost differences carry the solver's error, divided by the step; larger steps run into the next kink."""
PRICE = 0.05
"""Prices against finite differences [$/MWh]."""


def check_components(solver: Solver, item: SolvedInterval) -> None:
    """Components add up, contributions add up to components, and the residual is a real check that passes."""
    split = item.split
    assert split is not None
    live = live_buses(item)
    total = split.energy + split.congestion + split.loss + split.reactive
    assert np.abs(split.lmp - total)[live].max() < 1e-6
    assert np.abs(split.multiplier_price - split.lmp)[live].max() == split.price_residual
    # A cone solver may stop short of it, with congestion at penalties behind a branch of next to no impedance; such a
    # price is refused by its certificate, and nothing else may be.
    refused = any(reason.startswith("price residual") for reason in item.certificate.reasons)
    assert split.price_residual < 1e-3 or (refused and item.certificate.verdict == "uncertified")
    assert np.abs(split.congestion_by_key.sum(axis=0) - split.congestion)[live].max() < 1e-6
    sources = split.reactive_sources
    assert sources is not None
    assert np.abs(sources.amount.sum(axis=0) - split.reactive)[live].max(initial=0.0) < 1e-6
    assert item.price_low is not None
    assert item.price_high is not None
    assert np.all(item.price_low[live] <= split.lmp[live])
    assert np.all(split.lmp[live] <= item.price_high[live])
    # The reference-weighted loss, congestion and reactive components are zero by definition of a reference.
    for part in (split.loss, split.congestion, split.reactive):
        by_island = np.bincount(split.island[live], (split.weights * part)[live])
        assert np.abs(by_island).max() < 1e-6 * max(1.0, np.abs(part[live]).max())


def check_balance(solver: Solver, planned: PlannedInterval, item: SolvedInterval) -> None:
    """At every live bus generation, load, shunts and branch flows add up; costs add up to the objective."""
    network, inputs, result = solver.scenario.network, planned.inputs, item.result
    live, base = live_buses(item), network.base_mva
    leaving = np.bincount(network.from_bus, result.point.p_from, network.n_bus)
    leaving += np.bincount(network.to_bus, result.point.p_to, network.n_bus)
    generated = np.bincount(network.resource_bus, result.p, network.n_bus)
    served = np.bincount(inputs.bids.bus, result.bid_served, network.n_bus)
    demand = inputs.load_p - result.unserved + result.surplus + served + network.shunt_g * result.point.w
    assert np.abs(generated - demand - leaving)[live].max() * base < 2e-3
    assert np.all(result.p >= inputs.p_min - 1e-5)
    assert np.all(result.p <= inputs.p_max + 1e-5)


def check_money(item: SolvedInterval) -> None:
    """Money closes to 1e-4 of what load pays, by components and by constraints."""
    amounts = {(basis, name): amount for name, basis, amount in item.money}
    total = {name: amount for (basis, name), amount in amounts.items() if basis == "total"}
    scale = max(abs(total["load payments"]), abs(total["generator receipts"]), 1.0)
    for basis in (BY_COMPONENTS, BY_CONSTRAINTS):
        assert abs(amounts[basis, "remainder"]) < 1e-4 * scale, (basis, amounts)


def check_reference(solver: Solver, item: SolvedInterval, rng: np.random.Generator) -> None:
    """Moving to another reference leaves the price alone, and moving back is the identity."""
    split = item.split
    assert split is not None
    live = live_buses(item)
    other = rng.uniform(0.1, 1.0, split.lmp.size) * np.isfinite(split.lmp)
    label = np.unique(split.island, return_inverse=True)[1].astype(np.int64)
    try:
        moved = rereference(split.energy, split.loss, split.congestion_by_key, split.reactive, other, island=label)
        back = rereference(moved.energy, moved.loss, moved.congestion, moved.reactive, split.weights, island=label)
    except NotIdentifiableError:
        # An energy price of zero on either reference: the message says so, and there is nothing to move.
        assert min(np.abs(split.energy[live]).min(), np.abs(split.lmp[live]).min()) < 2.0
        return
    price = moved.energy + moved.loss + moved.congestion.sum(axis=0) + moved.reactive
    assert np.abs(price - split.lmp)[live].max() < 1e-6
    for mine, theirs in (
        (split.energy, back.energy),
        (split.loss, back.loss),
        (split.congestion_by_key, back.congestion),
        (split.reactive, back.reactive),
    ):
        assert np.abs(mine - theirs)[..., live].max(initial=0.0) < 1e-6


def check_finite_difference(solver: Solver, planned: PlannedInterval, item: SolvedInterval, bus: int) -> bool:
    """The price is the change of cost per MW of load; returns whether it was pinned down on both sides.

    The cost of a convex dispatch is convex in load, so that the price lies between the slopes on both sides for any
    step: tight where the cost is smooth, and the interval of all prices at a kink.
    """
    split, base = item.split, solver.scenario.network.base_mva
    assert split is not None
    price = float(split.lmp[bus])
    assert item.price_low is not None
    assert item.price_high is not None
    low, high = float(item.price_low[bus]), float(item.price_high[bus])
    if _all_unserved(solver, planned, item, bus):
        # What is not served is at most the load, so that the bound moves with it and the cost has a concave kink: one
        # more MW costs the penalty, although one MW injected is worth more to the rest of the network.
        assert price >= (solver.settings.penalties.power_balance or 0.0) - PRICE or low < high
        return False
    seen = []
    for step in STEPS_MW:
        up = solver.one(more_load(planned, bus, step / base), item.formulation).result
        down = solver.one(more_load(planned, bus, -step / base), item.formulation).result
        if not (up.status.has_solution and down.status.has_solution):
            seen.append((step, np.nan, np.nan))
            continue
        rise, fall = (up.objective - item.result.objective) / step, (item.result.objective - down.objective) / step
        seen.append((step, fall, rise))
        # The penalty for what is not served makes slopes of thousands; relative then.
        near = max(PRICE, 1e-4 * abs(price))
        left, right = min(fall, rise), max(fall, rise)
        if right - left <= near and abs(0.5 * (left + right) - price) <= near:
            return True
        if low - near <= left <= price + near and price - near <= right <= high + near and high - low > near:
            return True
    # A kink within every step: the price must still lie between the slopes on both sides.
    for step, fall, rise in seen:
        if np.isfinite(fall) and item.formulation != "ac":
            near = max(PRICE, 1e-4 * abs(price), 2e-3 / step)
            assert fall - near <= price <= rise + near, (item.formulation, bus, price, (low, high), seen)
    if all(np.isnan(fall) for _, fall, _ in seen):
        return False
    assert item.formulation != "ac" or not _smooth(seen), (item.formulation, bus, price, (low, high), seen)
    return False


def _all_unserved(solver: Solver, planned: PlannedInterval, item: SolvedInterval, bus: int) -> bool:
    """Whether no load of a bus is served, be it that there is none, where a price above the penalty keeps it so."""
    penalty, split = solver.settings.penalties.power_balance, item.split
    assert split is not None
    served = planned.inputs.load_p[bus] - item.result.unserved[bus]
    return penalty is not None and bool(served < 1e-6) and bool(split.lmp[bus] > penalty)


def _smooth(seen: list[tuple[float, float, float]]) -> bool:
    """Whether slopes on both sides and for all steps agree: then the price has no excuse."""
    slopes = [slope for _, fall, rise in seen for slope in (fall, rise)]
    return bool(np.ptp(slopes) <= PRICE)


def check_restatement(solver: Solver, planned: PlannedInterval, item: SolvedInterval) -> bool:
    """The independent statement with every contingency written out costs the same; returns whether it applies."""
    network, settings, result = solver.scenario.network, solver.scenario.settings, item.result
    penalised = settings.penalties.power_balance is not None or settings.penalties.transmission is not None
    if penalised or result.loss_slack_open or not np.isfinite(result.multipliers.active).all():
        # The restatement has hard limits, no repair of losses that pay, and no dead buses.
        return False
    limits = FlowLimits.concatenate(
        [interface_limits(network, planned.inputs), every_pair(solver, planned)], network.n_branch
    )
    again = restate(item.formulation, network, planned.inputs, limits, settings.dc)
    assert again.status.has_solution
    assert abs(again.objective - result.objective) <= 2e-5 * max(1.0, abs(result.objective)), item.formulation
    assert item.split is not None
    assert item.price_low is not None
    assert item.price_high is not None
    assert np.all(again.price >= item.price_low - PRICE)
    assert np.all(again.price <= item.price_high + PRICE)
    return True


def every_pair(solver: Solver, planned: PlannedInterval) -> FlowLimits:
    """Return all contingencies on all monitored branches, both directions, by dense algebra of their own.

    The flow after an outage is that of the base case plus the outaged flows times the generalised outage factors; here
    they are the change of the flows of a pair of unit injections between the network with and without the branches.
    """
    from scipy import sparse

    network, convention = solver.scenario.network, solver.scenario.settings.dc
    if network.contingencies is None:
        return FlowLimits.none(network.n_branch)
    on = planned.inputs.branch_in_service
    x, r = network.x, network.r
    susceptance = np.where(convention.susceptance == "reactance", 1.0 / x, x / (r * r + x * x))
    if convention.taps:
        susceptance = susceptance / network.tap
    susceptance = np.where(on, susceptance, 0.0)
    ends = (network.from_incidence() - network.to_incidence()).toarray()

    def sensitivity(b: np.ndarray) -> np.ndarray:
        return np.asarray(b[:, None] * ends @ np.linalg.pinv(ends.T @ (b[:, None] * ends)))

    rows, limits, keys = [], [], []
    for name, out in zip(network.contingencies.names, network.contingencies.branches, strict=True):
        out = out[on[out]]
        if not out.size:
            continue
        left = susceptance.copy()
        left[out] = 0.0
        # Without the branches their flow has to be carried from end to end by the rest.
        factors = sensitivity(left) @ ends[out].T
        for monitored in np.flatnonzero(network.contingencies.monitored & on):
            if monitored in out or not np.isfinite(network.emergency_rating[monitored]):
                continue
            row = np.zeros(network.n_branch)
            row[monitored] = 1.0
            row[out] += factors[monitored]
            for sign, direction in ((1.0, "forward"), (-1.0, "reverse")):
                rows.append(sign * row)
                limits.append(network.emergency_rating[monitored])
                keys.append((name, network.branches[monitored], direction))
    return FlowLimits(
        weights=sparse.csr_array(np.array(rows).reshape(len(rows), network.n_branch)),
        limit=np.array(limits),
        kind=("contingency",) * len(rows),
        contingency=tuple(key[0] for key in keys),
        monitored=tuple(key[1] for key in keys),
        direction=tuple(key[2] for key in keys),
    )


def check_secure(solver: Solver, planned: PlannedInterval, item: SolvedInterval) -> None:
    """No monitored flow is above its emergency rating after any contingency, unless it gave way at the penalty."""
    pairs = every_pair(solver, planned)
    if not pairs.n_row:
        return
    excess = pairs.weights @ item.result.point.p_from - pairs.limit
    if solver.scenario.settings.penalties.transmission is None:
        assert excess.max() < 2e-5
        return
    rows = item.result.constraints
    known = {
        (rows.contingency[i], rows.monitored[i], rows.direction[i]) for i in range(rows.n_row) if rows.at_penalty[i]
    }
    for i in np.flatnonzero(excess > 2e-5):
        assert (pairs.contingency[i], pairs.monitored[i], pairs.direction[i]) in known


def scaled_prices(solver: Solver, factor: float) -> Solver:
    """Return the solver with its penalties multiplied, to go with `scaled_offers`."""
    penalties = solver.settings.penalties
    scaled = replace(
        penalties,
        power_balance=penalties.power_balance and factor * penalties.power_balance,
        transmission=penalties.transmission and factor * penalties.transmission,
    )
    return replace(solver, settings=replace(solver.settings, penalties=scaled))


def scaled_offers(planned: PlannedInterval, factor: float) -> PlannedInterval:
    """Return the interval with every price and cost multiplied."""
    inputs = planned.inputs
    segments, bids = inputs.segments, inputs.bids
    return replace(
        planned,
        inputs=replace(
            inputs,
            segments=replace(
                segments, price_start=factor * segments.price_start, price_end=factor * segments.price_end
            ),
            bids=replace(bids, price=factor * bids.price),
            fixed_cost=factor * inputs.fixed_cost,
        ),
    )


def same_prices(
    first: SolvedInterval,
    second: SolvedInterval,
    tolerance: float,
    *,
    factor: float = 1.0,
    place: list[int] | None = None,
) -> None:
    """Prices agree at every bus, or one lies within the interval of the other where they are not unique.

    ``place`` has the position in the second solve of each bus of the first.
    """
    assert first.result.status.has_solution == second.result.status.has_solution
    if first.split is None or second.split is None:
        return
    assert first.price_low is not None
    assert first.price_high is not None
    assert second.price_low is not None
    assert second.price_high is not None
    scale = factor * (abs(first.result.objective) + 1.0)
    assert abs(first.result.objective * factor - second.result.objective) <= 1e-5 * scale
    at = np.arange(first.split.lmp.size) if place is None else np.asarray(place)
    live = live_buses(first)
    assert np.array_equal(live, np.flatnonzero(np.isfinite(second.split.lmp[at])))
    mine, theirs = factor * first.split.lmp[live], second.split.lmp[at][live]
    # Prices of a thousand dollars, at penalties, are as good as their size allows.
    near = np.maximum(tolerance, 1e-4 * np.abs(mine))
    in_mine = (factor * first.price_low[live] - near <= theirs) & (theirs <= factor * first.price_high[live] + near)
    in_theirs = (second.price_low[at][live] - near <= mine) & (mine <= second.price_high[at][live] + near)
    apart = ~(in_mine | in_theirs)
    assert not apart.any(), (first.formulation, np.flatnonzero(apart), mine[apart], theirs[apart])


def check_drivers(solver: Solver, solved: dict[str, SolvedInterval]) -> None:
    """The drivers of the difference between every two formulations add up to it at every bus."""
    tables = {
        name: table.to_pandas()
        for name, table in chunk_tables(solver.scenario.network, list(solved.values())).items()
        if name in ("prices", "constraints", "contributions")
    }
    held = [name for name, item in solved.items() if item.split is not None]
    for base, against in combinations(held, 2):
        found = compare(tables, tables, base=base, against=against)
        place = ["interval_start", "bus"]
        total = found.drivers.groupby(place, observed=True)["amount"].sum()
        difference = found.differences.set_index(place)["difference"]
        off = difference - total.reindex(difference.index, fill_value=0.0)
        # Drivers below 1e-9 are left out of the table.
        assert off.abs().max() < 1e-6, (base, against, off.abs().max())
        prices = tables["prices"].pivot(index="bus", columns="formulation", values="lmp")
        told = found.differences.set_index("bus")["difference"]
        assert (told - (prices[against] - prices[base])).abs().max() < 1e-9


def check_verdict(solved: dict[str, SolvedInterval]) -> None:
    """A relaxed price that may be used is within 5 % of the AC price on average."""
    soc, ac = solved.get("soc"), solved.get("ac")
    if soc is None or ac is None or soc.split is None or ac.split is None:
        return
    if soc.certificate.verdict in ("exact", "close"):
        level = np.nanmean(np.abs(ac.split.lmp))
        assert np.nanmean(np.abs(soc.split.lmp - ac.split.lmp)) <= 0.05 * level


def check_interval(solver: Solver, planned: PlannedInterval, rng: np.random.Generator) -> dict[str, SolvedInterval]:
    """Run every check on one interval under all formulations, and return the solves."""
    solved = solver.solve(planned)
    check_drivers(solver, solved)
    check_verdict(solved)
    for name, item in solved.items():
        if item.split is None:
            continue
        check_components(solver, item)
        check_balance(solver, planned, item)
        check_money(item)
        check_reference(solver, item, rng)
        check_secure(solver, planned, item)
        if name != "ac":
            check_restatement(solver, planned, item)
    return solved
