"""From solved intervals to the rows of the run tables; arrays in, arrow tables out, no data frames on the way."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, fields
from typing import Any

import numpy as np
import pyarrow as pa

from lmpgap.dispatch.result import DispatchResult
from lmpgap.prices.certificate import Certificate
from lmpgap.prices.components import OTHER_SOURCES, PriceSplit, constraints_of
from lmpgap.runs.schema import RUN_TABLES, SOLVED_TABLES
from lmpgap.scenario.network import FloatArray, IntervalInputs, Network


@dataclass(frozen=True, kw_only=True)
class SolvedInterval:
    """One interval under one formulation, priced and certified; prices are absent without a solution."""

    start: np.datetime64
    formulation: str
    inputs: IntervalInputs
    result: DispatchResult
    split: PriceSplit | None
    price_low: FloatArray | None
    price_high: FloatArray | None
    certificate: Certificate
    money: tuple[tuple[str, str, float], ...]
    power_balance_penalty: float


Columns = dict[str, Any]


def chunk_tables(network: Network, solved: Sequence[SolvedInterval]) -> dict[str, pa.Table]:
    """Return the tables of a chunk by name, rows in the order of the solves."""
    return {
        name: pa.concat_tables(
            [RUN_TABLES[name].to_arrow(_keyed(item, _ROWS[name](network, item))) for item in solved]
            or [RUN_TABLES[name].arrow_schema.empty_table()]
        )
        for name in SOLVED_TABLES
    }


def _keyed(item: SolvedInterval, columns: Columns) -> Columns:
    length = len(next(iter(columns.values())))
    return {
        "interval_start": np.full(length, item.start, dtype="datetime64[us]"),
        "formulation": np.full(length, item.formulation, dtype=object),
        **columns,
    }


def _prices(network: Network, item: SolvedInterval) -> Columns:
    split = item.split
    if split is None or item.price_low is None or item.price_high is None:
        return dict.fromkeys((c.name for c in RUN_TABLES["prices"].columns[2:]), np.zeros(0, dtype=object))
    live = np.isfinite(split.lmp)
    names = np.array(network.buses, dtype=object)
    return {
        "bus": names[live],
        "lmp": split.lmp[live],
        "energy_component": split.energy[live],
        "congestion_component": split.congestion[live],
        "loss_component": split.loss[live],
        "reactive_component": split.reactive[live],
        "lmp_low": item.price_low[live],
        "lmp_high": item.price_high[live],
        "verdict": np.full(int(live.sum()), item.certificate.verdict, dtype=object),
    }


def _constraints(network: Network, item: SolvedInterval) -> Columns:
    keyed = constraints_of(item.result)
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
    names = np.array(network.buses, dtype=object)
    buses, constraints, components, amounts = [], [], [], []
    if split is not None:
        live = np.flatnonzero(np.isfinite(split.lmp))
        sources = split.reactive_sources
        parts = [(key.name, "congestion", row) for key, row in zip(split.keys, split.congestion_by_key, strict=True)]
        if sources is not None:
            labels = ["other buses" if s == OTHER_SOURCES else network.buses[s] for s in sources.source]
            parts += [(label, "reactive", row) for label, row in zip(labels, sources.amount, strict=True)]
        for label, component, row in parts:
            buses.append(names[live])
            constraints.append(np.full(live.size, label, dtype=object))
            components.append(np.full(live.size, component, dtype=object))
            amounts.append(row[live])
    return {
        "bus": _joined(buses, object),
        "constraint": _joined(constraints, object),
        "component": _joined(components, object),
        "amount": _joined(amounts, np.float64),
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
        "bus": list(network.buses),
        "v_pu": np.sqrt(result.point.w),
        "angle_deg": np.rad2deg(result.point.angle),
        "load_mw": served * base,
    }


def _flows(network: Network, item: SolvedInterval) -> Columns:
    point, base = item.result.point, network.base_mva
    if not item.result.status.has_solution:
        return _none("flows")
    return {
        "branch": list(network.branches),
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


def _none(table: str) -> Columns:
    return dict.fromkeys((c.name for c in RUN_TABLES[table].columns[2:]), np.zeros(0, dtype=object))


def _joined(parts: list[Any], dtype: Any) -> Any:
    return np.concatenate(parts) if parts else np.zeros(0, dtype=dtype)


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
}
