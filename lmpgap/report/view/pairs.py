"""Differences between price sets: how far, where, when; and which formulation tracks AC best."""

from __future__ import annotations

from collections.abc import Mapping
from itertools import pairwise

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from lmpgap.prices.certificate import USABLE_VERDICTS
from lmpgap.report.text import number, percent
from lmpgap.report.view.cube import COMPONENTS, LADDER, POSTED, Matrix, PriceCube
from lmpgap.report.view.hours import Hours
from lmpgap.report.view.model import DriverBlock, PairView, Table, TrustView
from lmpgap.report.view.nodes import Nodes
from lmpgap.scenario.network import BoolArray, FloatArray

PairKey = tuple[str, str]
_ROWS = 12


def pair_keys(cube: PriceCube, differences: pd.DataFrame) -> tuple[PairKey, ...]:
    """Return the pairs to report, the main one first: dc against ac, the ladder, compared pairs, posted.

    The main pair is dc against ac if both were solved, else the two ends of what was solved.
    """
    solved = cube.formulations
    pairs: list[PairKey] = []
    if len(solved) >= 2:
        pairs.append((solved[0], "ac" if "ac" in solved and solved[0] != "ac" else solved[-1]))
        pairs += list(pairwise(solved))
        if "ac" in solved:
            pairs += [(name, "ac") for name in solved if name != "ac"]
    if POSTED in cube.sets:
        pairs += [(POSTED, name) for name in reversed(solved)]
    if not differences.empty:
        compared = differences[["base", "against"]].astype(str).drop_duplicates()
        pairs += [
            (base, against)
            for base, against in compared.itertuples(index=False)
            if base in cube.sets and against in cube.sets
        ]
    if not pairs:
        pairs = [(solved[0], solved[0])]
    return tuple(dict.fromkeys(pairs))


def inside_cells(differences: pd.DataFrame, nodes: Nodes, hours: Hours) -> dict[PairKey, NDArray[np.uint32]]:
    """Return the cells of each pair whose difference lies inside a price interval."""
    if differences.empty:
        return {}
    chosen = differences[differences["inside_interval"].astype(bool)]
    cells: dict[PairKey, NDArray[np.uint32]] = {}
    for (base, against), part in chosen.groupby(["base", "against"], observed=True):
        row, column = nodes.position(part["bus"]), hours.position(part["interval_start"])
        known = (row >= 0) & (column >= 0)
        cells[str(base), str(against)] = np.sort(row[known] * hours.n + column[known]).astype(np.uint32)
    return cells


def pair_view(
    key: PairKey,
    cube: PriceCube,
    inside: Mapping[PairKey, NDArray[np.uint32]],
    drivers: Mapping[PairKey, DriverBlock],
) -> PairView:
    """Return the figures of one pair."""
    base, against = key
    difference = cube.difference(base, against).astype(float)
    size = np.abs(difference)
    counted = int(np.isfinite(size).sum())
    worst_bus = worst_hour = -1
    largest = mean = typical = bias = float("nan")
    if counted:
        worst_bus, worst_hour = (int(i) for i in np.unravel_index(np.nanargmax(size), size.shape))
        largest = float(difference[worst_bus, worst_hour])
        mean, bias = float(np.nanmean(size)), float(np.nanmean(difference))
        typical = float(np.nanpercentile(size, 95))
    parts = {name: cube.difference(base, against, name) for name in COMPONENTS[1:]}
    return PairView(
        base=base,
        against=against,
        mean_absolute=mean,
        typical_95=typical,
        largest=largest,
        bias=bias,
        worst_bus=worst_bus,
        worst_hour=worst_hour,
        not_unique=len(inside.get(key, ())),
        counted=counted,
        by_component={
            name: float(np.nanmean(np.abs(part))) if np.isfinite(part).any() else float("nan")
            for name, part in parts.items()
        },
        drivers=_driver_means(drivers[key], counted) if key in drivers else {},
    )


def _driver_means(block: DriverBlock, counted: int) -> dict[str, float]:
    """Return the mean absolute amount of each kind of driver over all bus-hours [currency/MWh]."""
    if not counted:
        return {}
    kinds, kind_of_key = np.unique(np.asarray(block.kinds, dtype=str), return_inverse=True)
    totals = np.bincount(kind_of_key[block.key], weights=np.abs(block.amount), minlength=len(kinds))
    return {str(kind): float(total) / counted for kind, total in zip(kinds, totals, strict=True)}


def ladder_keys(cube: PriceCube) -> tuple[PairKey, ...]:
    """Return the steps of the ladder among the solved formulations."""
    present = [name for name in LADDER if name in cube.sets]
    return tuple(pairwise(present))


def where_table(pair: PairView, cube: PriceCube, nodes: Nodes, hours: Hours, currency: str) -> Table:
    """Return the buses with the largest mean absolute difference of the main pair."""
    difference = cube.difference(pair.base, pair.against).astype(float)
    size = np.abs(difference)
    priced = np.isfinite(size).any(axis=1)
    mean = _row_mean(size)
    order = np.argsort(np.where(priced, -mean, np.inf), kind="stable")[: min(_ROWS, int(priced.sum()))]
    signed = _row_mean(difference)
    rows, chooses = [], []
    for bus in order:
        hour = int(np.nanargmax(size[bus]))
        chooses.append((int(bus), hour))
        rows.append(
            (
                nodes.name[bus],
                nodes.zone[bus],
                number(mean[bus]),
                number(signed[bus], signed=True),
                number(difference[bus, hour], signed=True),
                hours.label[hour],
                number(nodes.load_mw[bus], 0),
            )
        )
    return Table(
        caption=f"Where {pair.against} and {pair.base} lie furthest apart, {currency}/MWh",
        columns=("Bus", "Zone", "Mean size", "Mean", "Largest", "in hour", "Mean load, MW"),
        numeric=(False, False, True, True, True, False, True),
        rows=tuple(rows),
        note=f"{len(rows)} of {nodes.n} buses.",
        chooses=tuple(chooses),
    )


def when_table(pair: PairView, cube: PriceCube, nodes: Nodes, hours: Hours, currency: str) -> Table:
    """Return the hours with the largest mean absolute difference of the main pair."""
    difference = cube.difference(pair.base, pair.against).astype(float)
    size = np.abs(difference)
    priced = np.isfinite(size).any(axis=0)
    mean = _row_mean(size.T)
    order = np.argsort(np.where(priced, -mean, np.inf), kind="stable")[: min(_ROWS, int(priced.sum()))]
    rows, chooses = [], []
    for hour in order:
        bus = int(np.nanargmax(size[:, hour]))
        chooses.append((bus, int(hour)))
        rows.append(
            (
                hours.label[hour],
                number(mean[hour]),
                number(difference[bus, hour], signed=True),
                nodes.name[bus],
                number(float(cube.get(pair.base)[bus, hour])),
                number(float(cube.get(pair.against)[bus, hour])),
            )
        )
    return Table(
        caption=f"When {pair.against} and {pair.base} lie furthest apart, {currency}/MWh",
        columns=("Hour", "Mean size", "Largest", "at bus", f"{pair.base} there", f"{pair.against} there"),
        numeric=(False, True, True, False, True, True),
        rows=tuple(rows),
        note=f"{len(rows)} of {hours.n} intervals.",
        chooses=tuple(chooses),
    )


def tracking_table(cube: PriceCube, load_mw: FloatArray, trust: TrustView, currency: str) -> Table:
    """Return how closely each other price set follows the AC prices; no rows without AC.

    A formulation with hours whose prices should not be used has a second row over its usable hours only.
    """
    rows: list[tuple[float, tuple[str, ...]]] = []
    if "ac" in cube.sets:
        for name in (name for name in cube.sets if name != "ac"):
            error = cube.difference("ac", name).astype(float)
            rows += _tracking_row(name, error, cube.get("ac"), load_mw)
            usable = _usable_hours(trust, name)
            if usable is not None and usable.any() and not usable.all():
                part = np.where(usable[None, :], error, np.nan)
                rows += _tracking_row(f"{name}, usable hours", part, cube.get("ac"), load_mw)
        rows.sort(key=lambda row: row[0])
    return Table(
        caption=f"Which price set follows the AC prices best this week, {currency}/MWh",
        columns=(
            "Price set",
            "Mean error",
            "of AC price",
            "Load-weighted",
            "Bias",
            "95 % within",
            "Within 1.00",
            "Hours",
        ),
        numeric=(False, True, True, True, True, True, True, True),
        rows=tuple(text for _, text in rows),
        note="Error is the size of the difference from the AC price at the same bus and hour; best first.",
    )


def _usable_hours(trust: TrustView, formulation: str) -> BoolArray | None:
    if formulation not in trust.code or not trust.words:
        return None
    usable = np.append([word in USABLE_VERDICTS for word in trust.words], False)  # position -1: not solved
    return np.asarray(usable[trust.code[formulation]], dtype=bool)


def _tracking_row(name: str, error: FloatArray, ac: Matrix, load_mw: FloatArray) -> list[tuple[float, tuple[str, ...]]]:
    """Return mean error and the texts of one row; nothing where no price can be compared."""
    finite = np.isfinite(error)
    if not finite.any():
        return []
    size = np.abs(error[finite])
    mean = float(size.mean())
    level = float(np.abs(ac[finite]).mean())
    load = np.broadcast_to(load_mw[:, None], error.shape)[finite]
    weighted = float(size @ load / load.sum()) if load.sum() else float("nan")
    texts = (
        name,
        number(mean),
        percent(mean / level) if level else "",
        number(weighted),
        number(float(error[finite].mean()), signed=True),
        number(float(np.percentile(size, 95))),
        percent(float((size <= 1.0).mean())),
        f"{int(finite.any(axis=0).sum())}",
    )
    return [(mean, texts)]


def _row_mean(values: FloatArray) -> FloatArray:
    """Return the mean of each row over its numbers; nan for a row without any."""
    finite = np.isfinite(values)
    count = finite.sum(axis=1)
    total = np.where(finite, values, 0.0).sum(axis=1)
    return np.asarray(np.divide(total, count, out=np.full(len(values), np.nan), where=count > 0))
