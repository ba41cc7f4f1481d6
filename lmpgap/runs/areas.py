"""Prices of hubs and zones over a run, and what of a zone's change is only a change of its weights.

A hub has the fixed weights of the table `hubs`, a zone is weighted with the load served in the interval. Between two
days, or two runs, the load-weighted price of a zone moves because prices move and because load moves between its buses
and hours: both parts are told, and they add up exactly (`lmpgap.prices.hubs.weight_drift`). A hub has no drift.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from itertools import pairwise
from typing import Any

import numpy as np
import pandas as pd

from lmpgap.dispatch.names import FORMULATIONS
from lmpgap.errors import DataError
from lmpgap.prices.certificate import USABLE_VERDICTS
from lmpgap.prices.hubs import hub_prices, hub_weights, weight_drift, weighted, zone_weights
from lmpgap.runs.folder import RunFolder
from lmpgap.runs.schema import RUN_TABLES
from lmpgap.scenario.network import FloatArray, IntArray
from lmpgap.scenario.scenario import Scenario

COMPONENTS = ("energy", "congestion", "loss", "reactive")
_PRICES = ("lmp", *(f"{part}_component" for part in COMPONENTS))


@dataclass(frozen=True, kw_only=True)
class Areas:
    """What the prices of hubs and zones are made of.

    Attributes
    ----------
    areas : DataFrame
        Run table ``areas``.
    drift : DataFrame
        Run table ``drift``.
    """

    areas: pd.DataFrame
    drift: pd.DataFrame


@dataclass(frozen=True, kw_only=True)
class _Grid:
    """Prices and served load of one formulation on a grid of intervals and buses, ``nan`` where there is none.

    ``verdict`` has one entry per interval.
    """

    starts: pd.DatetimeIndex
    price: Mapping[str, FloatArray]
    load: FloatArray
    verdict: np.ndarray[Any, Any]


def area_tables(scenario: Scenario, run: RunFolder) -> Areas:
    """Return hub and zone prices of every interval and formulation, and the drift from each day to the next."""
    areas, drift = [RUN_TABLES["areas"].empty()], [RUN_TABLES["drift"].empty()]
    zones, hubs = _zones(scenario), _hubs(scenario)
    for name, grid in _grids(scenario, run):
        areas += [frame.assign(formulation=name) for frame in _areas(grid, zones, hubs)]
        drift += [frame.assign(formulation=name) for frame in _from_day_to_day(grid, zones, scenario)]
    return Areas(areas=_joined("areas", areas), drift=_joined("drift", drift))


def write_areas(scenario: Scenario, run: RunFolder) -> Areas:
    """Store `area_tables` in the run folder, which the caller holds for writing, and return them."""
    made = area_tables(scenario, run)
    run.write("areas", made.areas)
    run.write("drift", made.drift)
    return made


def drift_between_runs(scenario: Scenario, before: RunFolder, after: RunFolder) -> pd.DataFrame:
    """Return what of each zone's change from one run to another is price change, and what weight drift.

    Parameters
    ----------
    scenario
        Of ``after``; its zones and time zone hold for both.
    before, after
        Runs of the same intervals are compared interval by interval, runs of other days by weekday and local time.

    Returns
    -------
    DataFrame
        Columns of the run table ``drift``; ``before`` and ``after`` are the names of the run folders.

    Raises
    ------
    DataError
        When no formulation has intervals in common.
    """
    zones = _zones(scenario)
    if not any(zones):
        raise DataError(f"the buses of {scenario.folder} have no zones, so there is no drift to tell")
    earlier = dict(_grids(scenario, before))
    frames = [RUN_TABLES["drift"].empty()]
    for name, later in _grids(scenario, after):
        if name not in earlier:
            continue
        old = earlier[name]
        same = bool(old.starts.isin(later.starts).any())
        keys = [grid.starts if same else _clock(grid.starts, scenario, "%w %H:%M") for grid in (old, later)]
        labels = (before.path.name, after.path.name)
        if labels[0] == labels[1]:
            labels = (str(before.path), str(after.path))
        frames += [frame.assign(formulation=name) for frame in _drift(old, later, keys, labels, zones)]
    if len(frames) == 1:
        raise DataError(f"{before.path} and {after.path} have no formulation and interval in common")
    return _joined("drift", frames)


def summarise_areas(areas: pd.DataFrame) -> pd.DataFrame:
    """Return one row per formulation and area: mean price and components, and the range.

    The mean of a hub is over intervals, that of a zone is weighted with its load.

    Returns
    -------
    DataFrame
        formulation, area, kind, intervals, usable (intervals whose prices may be used), lmp, energy_component,
        congestion_component, loss_component, reactive_component, lowest, highest [$/MWh], load_share (of the zone in
        all zones) [-].
    """
    rows = []
    priced = areas[areas["lmp"].notna()]
    total = priced[priced["kind"] == "zone"].groupby("formulation")["load_mw"].sum().to_dict()
    for (name, kind, area), frame in priced.groupby(["formulation", "kind", "area"], sort=False):
        load = frame["load_mw"].to_numpy(float)
        weight = load if kind == "zone" and load.sum() > 0.0 else np.ones(len(frame))
        rows.append(
            {
                "formulation": name,
                "area": area,
                "kind": kind,
                "intervals": len(frame),
                "usable": int(frame["verdict"].isin(USABLE_VERDICTS).sum()),
                **{column: float(np.average(frame[column].to_numpy(float), weights=weight)) for column in _PRICES},
                "lowest": frame["lmp"].min(),
                "highest": frame["lmp"].max(),
                "load_share": load.sum() / total[name] if kind == "zone" else np.nan,
            }
        )
    return pd.DataFrame(rows)


# --- areas --------------------------------------------------------------------------------------------------------


def _areas(grid: _Grid, zones: Sequence[str], hubs: tuple[tuple[str, ...], FloatArray]) -> Iterator[pd.DataFrame]:
    load = np.nan_to_num(grid.load)
    names, weights = zone_weights(zones, load)
    zone_of: np.ndarray[Any, Any] = np.array(zones, dtype=object)
    member = np.array([zone_of == name for name in names], dtype=float).reshape(len(names), load.shape[1])
    hub_names, fixed = hubs
    for kind, labels, weight, part in (
        ("hub", hub_names, fixed, (fixed != 0.0).astype(float)),
        ("zone", names, weights, member),
    ):
        if not labels:
            continue
        energy, congestion, loss, reactive = (grid.price[f"{name}_component"] for name in COMPONENTS)
        found = hub_prices(energy, congestion, loss, reactive, weight)
        n_interval, n_area = found.lmp.shape
        yield pd.DataFrame(
            {
                "interval_start": grid.starts.repeat(n_area),
                "area": list(labels) * n_interval,
                "kind": kind,
                "lmp": found.lmp.ravel(),
                **{f"{name}_component": getattr(found, name).ravel() for name in COMPONENTS},
                "load_mw": (load @ part.T).ravel(),
                "verdict": grid.verdict.repeat(n_area),
            }
        )


def _zones(scenario: Scenario) -> tuple[str, ...]:
    """Return the zone of each bus, empty without one."""
    return tuple(str(zone) if isinstance(zone, str) else "" for zone in scenario.tables["buses"]["zone"])


def _hubs(scenario: Scenario) -> tuple[tuple[str, ...], FloatArray]:
    """Return the names and weights of the hubs, weights (n_hub, n_bus)."""
    table = scenario.tables["hubs"]
    names = tuple(dict.fromkeys(table["hub"]))
    weights = np.zeros((len(names), scenario.network.n_bus))
    bus = pd.Index(scenario.network.buses).get_indexer(pd.Index(table["bus"]))
    np.add.at(weights, (pd.Index(names).get_indexer(pd.Index(table["hub"])), bus), table["weight"].to_numpy(float))
    return names, hub_weights(weights, names) if names else weights


# --- drift --------------------------------------------------------------------------------------------------------


def _from_day_to_day(grid: _Grid, zones: Sequence[str], scenario: Scenario) -> Iterator[pd.DataFrame]:
    """Yield the drift between days that follow each other in the run, on their common local times."""
    days, clock = (_clock(grid.starts, scenario, form) for form in ("%Y-%m-%d", "%H:%M"))
    of_day = [(day, np.flatnonzero(days == day)) for day in days.unique()]
    for (day, rows), (next_day, next_rows) in pairwise(of_day):
        keys = [clock[rows], clock[next_rows]]
        yield from _drift(_taken(grid, rows), _taken(grid, next_rows), keys, (str(day), str(next_day)), zones)


def _drift(
    before: _Grid, after: _Grid, keys: Sequence[pd.Index[Any]], labels: tuple[str, str], zones: Sequence[str]
) -> Iterator[pd.DataFrame]:
    """Yield the parts of each component's change, over the cells of key and bus that have a price on both sides.

    A key that stands twice, as an hour does when clocks go back, is one cell with the load of both.
    """
    common = keys[0].unique().intersection(keys[1].unique(), sort=False)
    if common.empty:
        return
    folded = [
        _folded(grid, common.get_indexer(key), len(common)) for grid, key in zip((before, after), keys, strict=True)
    ]
    both = np.isfinite(folded[0].price["lmp"]) & np.isfinite(folded[1].price["lmp"])
    cells = list(zones) * len(common)
    weights: list[FloatArray] = []
    for grid in folded:
        names, weight = zone_weights(cells, np.where(both, grid.load, 0.0).ravel())
        weights.append(weight)
    if not names:
        return
    certain = both & (folded[0].verdict & folded[1].verdict).astype(bool)[:, None]
    whole = _zone_load([np.nan_to_num(grid.load) for grid in (before, after)], zones, names)
    shares = {}
    for label, cell in (("coverage", both), ("usable", certain)):
        load = _zone_load([np.where(cell, grid.load, 0.0) for grid in folded], zones, names)
        shares[label] = np.divide(load, whole, out=np.zeros(len(names)), where=whole > 0.0)
    for column in _PRICES:
        sides = [np.where(both, grid.price[column], 0.0).ravel() for grid in folded]
        parts = weight_drift(sides[0], weights[0], sides[1], weights[1])
        yield pd.DataFrame(
            {
                "zone": names,
                "before": labels[0],
                "after": labels[1],
                "component": column.removesuffix("_component"),
                "price_before": weighted(sides[0], weights[0]),
                "price_after": weighted(sides[1], weights[1]),
                "price_change": parts.price_change,
                "weight_drift": parts.weight_drift,
                **shares,
            }
        )


def _folded(grid: _Grid, place: IntArray, n_key: int) -> _Grid:
    """Return a grid with one row per key: loads added up, prices weighted with them, ``verdict`` True where usable."""
    used = np.flatnonzero(place >= 0)
    shape = (n_key, grid.load.shape[1])
    load, count = np.zeros(shape), np.zeros(shape)
    known = np.isfinite(grid.price["lmp"][used])
    mine = np.where(known, np.nan_to_num(grid.load[used]), 0.0)
    np.add.at(load, place[used], mine)
    np.add.at(count, place[used], known)
    price = {}
    for name, values in grid.price.items():
        held = np.where(known, values[used], 0.0)
        by_load, plain = np.zeros(shape), np.zeros(shape)
        np.add.at(by_load, place[used], held * mine)
        np.add.at(plain, place[used], held)
        # A bus without load has no weight in its zone; its plain mean keeps the cell priced.
        mean = np.divide(plain, count, out=np.full(shape, np.nan), where=count > 0)
        price[name] = np.divide(by_load, load, out=mean, where=load != 0.0)
    usable = np.ones(n_key, dtype=bool)
    np.logical_and.at(usable, place[used], np.isin(grid.verdict[used], USABLE_VERDICTS))
    return _Grid(starts=grid.starts[:0], price=price, load=load, verdict=usable)


def _zone_load(loads: Sequence[FloatArray], zones: Sequence[str], names: Sequence[str]) -> FloatArray:
    """Return the load of each zone, all intervals and sides added up, (n_zone,)."""
    at_bus = np.sum([load.sum(axis=0) for load in loads], axis=0)
    zone: np.ndarray[Any, Any] = np.array(zones, dtype=object)
    return np.array([float(at_bus[zone == name].sum()) for name in names])


# --- reading ------------------------------------------------------------------------------------------------------


def _grids(scenario: Scenario, run: RunFolder) -> Iterator[tuple[str, _Grid]]:
    """Yield the grid of each formulation with prices."""
    held = set(run.table("prices", columns=["formulation"])["formulation"])
    buses = pd.Index(scenario.network.buses)
    for name in [formulation for formulation in FORMULATIONS if formulation in held]:
        prices = run.table("prices", columns=["interval_start", "bus", *_PRICES, "verdict"], formulation=name)
        loads = run.table("operating_point", columns=["interval_start", "bus", "load_mw"], formulation=name)
        verdicts = prices.groupby("interval_start")["verdict"].first().sort_index()
        starts = pd.DatetimeIndex(verdicts.index)

        def on_grid(
            frame: pd.DataFrame, columns: Sequence[str], starts: pd.DatetimeIndex = starts
        ) -> dict[str, FloatArray]:
            row = starts.get_indexer(pd.Index(frame["interval_start"]))
            column = buses.get_indexer(pd.Index(frame["bus"]))
            known = (row >= 0) & (column >= 0)
            made = {}
            for field in columns:
                made[field] = np.full((len(starts), len(buses)), np.nan)
                made[field][row[known], column[known]] = frame[field].to_numpy(float)[known]
            return made

        yield (
            name,
            _Grid(
                starts=starts,
                price=on_grid(prices, _PRICES),
                load=on_grid(loads, ["load_mw"])["load_mw"],
                verdict=verdicts.to_numpy(dtype=object),
            ),
        )


def _taken(grid: _Grid, rows: IntArray) -> _Grid:
    return _Grid(
        starts=grid.starts[rows],
        price={name: values[rows] for name, values in grid.price.items()},
        load=grid.load[rows],
        verdict=grid.verdict[rows],
    )


def _clock(starts: pd.DatetimeIndex, scenario: Scenario, form: str) -> pd.Index[Any]:
    return starts.tz_convert(scenario.settings.time_zone).strftime(form)


def _joined(table: str, frames: list[pd.DataFrame]) -> pd.DataFrame:
    columns = [column.name for column in RUN_TABLES[table].columns]
    full = [frame for frame in frames if len(frame)] or frames[:1]
    return pd.concat(full, ignore_index=True)[columns]
