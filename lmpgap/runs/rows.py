"""From solved intervals to the rows of the run tables; arrays in, arrow tables out, no data frames on the way."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, fields

import numpy as np
import pyarrow as pa

from lmpgap.dispatch.result import DispatchResult
from lmpgap.prices.certificate import Certificate
from lmpgap.prices.components import OTHER_SOURCES, PriceSplit
from lmpgap.prices.keys import KeyedConstraints
from lmpgap.runs.assemble import Columns, Labels, assemble
from lmpgap.runs.audit import AuditRow
from lmpgap.runs.schema import RUN_TABLES, SOLVED_TABLES
from lmpgap.scenario.network import FloatArray, IntervalInputs, Network


@dataclass(frozen=True, kw_only=True)
class SolvedInterval:
    """One interval under one formulation, priced and certified; prices are absent without a solution."""

    start: np.datetime64
    formulation: str
    inputs: IntervalInputs
    result: DispatchResult
    constraints: KeyedConstraints
    split: PriceSplit | None
    price_low: FloatArray | None
    price_high: FloatArray | None
    certificate: Certificate
    money: tuple[tuple[str, str, float], ...]
    power_balance_penalty: float
    audit: tuple[tuple[str, AuditRow], ...] = ()


def chunk_tables(network: Network, solved: Sequence[SolvedInterval]) -> dict[str, pa.Table]:
    """Return the tables of a chunk by name, rows in the order of the solves."""
    return {
        name: assemble(RUN_TABLES[name], [_keyed(item, _ROWS[name](network, item)) for item in solved])
        for name in SOLVED_TABLES
    }


def _keyed(item: SolvedInterval, columns: Columns) -> Columns:
    # The audit names the formulation it looked at; every other table that of the solve.
    return {"formulation": item.formulation, **columns, "interval_start": item.start}


def _prices(network: Network, item: SolvedInterval) -> Columns:
    split = item.split
    if split is None or item.price_low is None or item.price_high is None:
        return _none("prices")
    live = np.flatnonzero(np.isfinite(split.lmp))
    return {
        "bus": Labels(network.buses, live),
        "lmp": split.lmp[live],
        "energy_component": split.energy[live],
        "congestion_component": split.congestion[live],
        "loss_component": split.loss[live],
        "reactive_component": split.reactive[live],
        "lmp_low": item.price_low[live],
        "lmp_high": item.price_high[live],
        "verdict": item.certificate.verdict,
    }


def _constraints(network: Network, item: SolvedInterval) -> Columns:
    keyed = item.constraints
    return {
        "constraint": [key.name for key in keyed.keys],
        "kind": [key.kind for key in keyed.keys],
        "contingency": [key.contingency for key in keyed.keys],
        "monitored": [key.monitored for key in keyed.keys],
        "direction": [key.direction for key in keyed.keys],
        "limit": keyed.limit,
        "value": keyed.value,
        "unit": list(keyed.unit),
        "shadow_price": keyed.shadow_price,
        "at_penalty": keyed.at_penalty,
    }


def _contributions(network: Network, item: SolvedInterval) -> Columns:
    split = item.split
    if split is None:
        return _none("contributions")
    names, components = [key.name for key in split.keys], ["congestion"] * len(split.keys)
    amounts, sources = split.congestion_by_key, split.reactive_sources
    if sources is not None:
        names += ["other buses" if s == OTHER_SOURCES else network.buses[s] for s in sources.source]
        components += ["reactive"] * sources.source.size
        amounts = np.vstack([amounts, sources.amount])
    live = np.flatnonzero(np.isfinite(split.lmp))
    part = np.repeat(np.arange(len(names)), live.size)
    return {
        "bus": Labels(network.buses, np.tile(live, len(names))),
        "constraint": Labels(names, part),
        "component": Labels(components, part),
        "amount": amounts[:, live].ravel(),
    }


def _dispatch(network: Network, item: SolvedInterval) -> Columns:
    result, inputs, base = item.result, item.inputs, network.base_mva
    if not result.status.has_solution:
        return _none("dispatch")
    running = np.flatnonzero(inputs.resource_in_service)
    unserved, surplus = (np.flatnonzero(x > _DUST) for x in (result.unserved, result.surplus))
    names = [
        *(network.resources[i] for i in running),
        *(f"bid at {network.buses[bus]} {n}" for n, bus in enumerate(inputs.bids.bus, start=1)),
        *(f"unserved load at {network.buses[i]}" for i in unserved),
        *(f"surplus at {network.buses[i]}" for i in surplus),
    ]
    bids = result.bid_served * base
    penalty = item.power_balance_penalty
    quiet = np.zeros(bids.size + unserved.size + surplus.size)
    return {
        "resource": names,
        "mw": np.concatenate(
            [result.p[running] * base, -bids, result.unserved[unserved] * base, -result.surplus[surplus] * base]
        ),
        "mvar": np.concatenate([result.q[running] * base, quiet]),
        "cost": np.concatenate(
            [
                result.resource_cost[running],
                -bids * inputs.bids.price,
                result.unserved[unserved] * base * penalty,
                result.surplus[surplus] * base * penalty,
            ]
        ),
    }


def _operating_point(network: Network, item: SolvedInterval) -> Columns:
    result, inputs, base = item.result, item.inputs, network.base_mva
    if not result.status.has_solution:
        return _none("operating_point")
    served = inputs.load_p - result.unserved
    np.add.at(served, inputs.bids.bus, result.bid_served)
    return {
        "bus": Labels(network.buses, np.arange(network.n_bus)),
        "v_pu": np.sqrt(result.point.w),
        "angle_deg": np.rad2deg(result.point.angle),
        "load_mw": served * base,
    }


def _flows(network: Network, item: SolvedInterval) -> Columns:
    point, base = item.result.point, network.base_mva
    if not item.result.status.has_solution:
        return _none("flows")
    return {
        "branch": Labels(network.branches, np.arange(network.n_branch)),
        "mw_at_from": point.p_from * base,
        "mvar_at_from": point.q_from * base,
        "mw_at_to": point.p_to * base,
        "mvar_at_to": point.q_to * base,
        "loss_mw": point.loss * base,
    }


def _solves(network: Network, item: SolvedInterval) -> Columns:
    known = {field.name for field in fields(item.certificate)}
    columns = RUN_TABLES["solves"].columns[2:]
    row = {column.name: [getattr(item.certificate, column.name)] for column in columns if column.name in known}
    return {**row, "reasons": ["; ".join((*item.certificate.reasons, *item.result.notes))]}


def _money(network: Network, item: SolvedInterval) -> Columns:
    return {
        "item": [name for name, _, _ in item.money],
        "basis": [basis for _, basis, _ in item.money],
        "amount": [amount for _, _, amount in item.money],
    }


def _audit(network: Network, item: SolvedInterval) -> Columns:
    rows = [row for _, row in item.audit]
    return {
        "formulation": [name for name, _ in item.audit],
        "finding": [row.finding for row in rows],
        "element": [row.element for row in rows],
        "value": np.array([row.value for row in rows], dtype=float),
        "limit": np.array([row.limit for row in rows], dtype=float),
        "unit": [row.unit for row in rows],
    }


def _none(table: str) -> Columns:
    return dict.fromkeys((c.name for c in RUN_TABLES[table].columns[2:]), np.zeros(0, dtype=object))


_DUST = 1e-9
"""Unserved load or surplus below this is solver dust [pu], a tenth of a watt on a 100 MVA base."""

_ROWS: dict[str, Callable[[Network, SolvedInterval], Columns]] = {
    "prices": _prices,
    "constraints": _constraints,
    "contributions": _contributions,
    "dispatch": _dispatch,
    "operating_point": _operating_point,
    "flows": _flows,
    "solves": _solves,
    "money": _money,
    "audit": _audit,
}
