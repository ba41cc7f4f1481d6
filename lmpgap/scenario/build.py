"""Tables into the per-unit network."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np

from lmpgap.scenario.network import Contingencies, FloatArray, Interfaces, Network
from lmpgap.scenario.typed import ColumnTable


def name_positions(tables: Mapping[str, ColumnTable]) -> dict[str, dict[str, int]]:
    """Return the positions by name of buses, branches, resources and interfaces."""
    positions = {
        kind: {name: i for i, name in enumerate(tables[table].text(kind).tolist())}
        for kind, table in (("bus", "buses"), ("branch", "branches"), ("resource", "resources"))
    }
    positions["interface"] = {name: i for i, name in enumerate(_distinct(tables["interfaces"], "interface"))}
    return positions


def build_network(
    tables: Mapping[str, ColumnTable], base_mva: float, positions: Mapping[str, Mapping[str, int]]
) -> Network:
    """Return the network of validated tables; a limit that is left out is infinite."""
    buses, branches, resources = tables["buses"], tables["branches"], tables["resources"]
    return Network(
        base_mva=base_mva,
        buses=tuple(buses.text("bus").tolist()),
        v_min=buses.number("v_min_pu"),
        v_max=buses.number("v_max_pu"),
        shunt_g=buses.number("shunt_mw") / base_mva,
        shunt_b=buses.number("shunt_mvar") / base_mva,
        branches=tuple(branches.text("branch").tolist()),
        from_bus=branches.text("from_bus").positions(positions["bus"]),
        to_bus=branches.text("to_bus").positions(positions["bus"]),
        r=branches.number("r_pu"),
        x=branches.number("x_pu"),
        charging=branches.number("charging_pu"),
        tap=branches.number("tap_ratio"),
        shift=np.deg2rad(branches.number("phase_shift_deg")),
        normal_rating=_limit(branches.number("normal_rating_mva"), np.inf) / base_mva,
        emergency_rating=_limit(branches.number("emergency_rating_mva"), np.inf) / base_mva,
        angle_min=_angle_limit(branches.number("angle_min_deg"), -np.inf),
        angle_max=_angle_limit(branches.number("angle_max_deg"), np.inf),
        resources=tuple(resources.text("resource").tolist()),
        resource_bus=resources.text("bus").positions(positions["bus"]),
        q_min=_limit(resources.number("q_min_mvar"), -np.inf) / base_mva,
        q_max=_limit(resources.number("q_max_mvar"), np.inf) / base_mva,
        interfaces=_build_interfaces(tables["interfaces"], positions),
        contingencies=build_contingencies(tables, positions["branch"]),
    )


def _limit(values: FloatArray, unlimited: float) -> FloatArray:
    return np.where(np.isnan(values), unlimited, values)


def _angle_limit(degrees: FloatArray, unlimited: float) -> FloatArray:
    """Return limits [rad]; a quarter turn and more says nothing, and its tangent would say something wrong."""
    nothing = np.isnan(degrees) | (degrees * np.sign(unlimited) >= 90.0)
    return np.where(nothing, unlimited, np.deg2rad(degrees))


def _distinct(table: ColumnTable, name: str) -> list[str]:
    return list(dict.fromkeys(table.text(name).tolist()))


def _build_interfaces(table: ColumnTable, positions: Mapping[str, Mapping[str, int]]) -> Interfaces | None:
    names = tuple(positions["interface"])
    if not names:
        return None
    from scipy import sparse

    weights = sparse.coo_array(
        (
            table.number("weight"),
            (
                table.text("interface").positions(positions["interface"]),
                table.text("branch").positions(positions["branch"]),
            ),
        ),
        shape=(len(names), len(positions["branch"])),
    )
    return Interfaces(names=names, weights=sparse.csr_array(weights))


def build_contingencies(tables: Mapping[str, ColumnTable], branch_positions: Mapping[str, int]) -> Contingencies | None:
    """Return the contingencies and where they are checked, or ``None`` without any."""
    table = tables["contingencies"]
    names = _distinct(table, "contingency")
    if not names:
        return None
    group = table.text("contingency").positions({name: i for i, name in enumerate(names)})
    branch = table.text("branch").positions(branch_positions)
    order = np.argsort(group, kind="stable")
    parts = np.split(branch[order], np.cumsum(np.bincount(group, minlength=len(names)))[:-1])
    monitored = tables["monitored"]
    if monitored.n_row:
        mask = np.zeros(len(branch_positions), dtype=bool)
        mask[monitored.text("branch").positions(branch_positions)] = True
    else:
        mask = np.isfinite(tables["branches"].number("emergency_rating_mva"))
    return Contingencies(names=tuple(names), branches=tuple(parts), monitored=mask)
