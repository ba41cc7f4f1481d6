"""Drivers of the differences, packed cell by cell for the page, and ranked for the table."""

from __future__ import annotations

import numpy as np
import pandas as pd

from lmpgap.divergence.drivers import REACTIVE
from lmpgap.report.text import number, percent
from lmpgap.report.view.cube import COMPONENTS, PriceCube
from lmpgap.report.view.hours import Hours
from lmpgap.report.view.model import DriverBlock, PairView, Table
from lmpgap.report.view.nodes import Nodes
from lmpgap.scenario.network import BoolArray, FloatArray, IntArray

MOST_ROWS = 1_200_000
"""Driver rows that the page may hold over all pairs; 4 to 5 bytes each before encoding."""

PAGE_BYTES, FIXED_BYTES = 38e6, 7e6
"""Size the page is held to, and what is not prices or drivers: drawing library, figures, tables [byte]."""

ROW_BYTES, BASE64 = 5, 4 / 3
"""Size of a driver row, and the growth of bytes as text."""

DUST = 0.005
"""Drivers below half a cent are left out of the page, which shows their sum as smaller drivers [currency/MWh]."""


def driver_blocks(
    drivers: pd.DataFrame, nodes: Nodes, hours: Hours, most_rows: int = MOST_ROWS
) -> dict[tuple[str, str], DriverBlock]:
    """Return the drivers of each explained pair; of a large region only the largest differences.

    Parameters
    ----------
    drivers
        Run table ``drivers``.
    most_rows
        Rows allowed over all pairs. Where there are more, whole cells are kept in the order of the size of
        their difference.
    """
    if drivers.empty:
        return {}
    groups = list(drivers.groupby(["base", "against"], observed=True, sort=False))
    return {
        (str(base), str(against)): _block(str(base), str(against), part, nodes, hours, most_rows // len(groups))
        for (base, against), part in groups
    }


def _block(base: str, against: str, part: pd.DataFrame, nodes: Nodes, hours: Hours, most_rows: int) -> DriverBlock:
    row, column = nodes.position(part["bus"]), hours.position(part["interval_start"])
    amount = part["amount"].to_numpy(dtype=float)
    code, unique = _keys(part)
    n_cell = nodes.n * hours.n
    cell, code, amount = _summed(row * hours.n + column, code, amount, (row >= 0) & (column >= 0), len(unique))
    complete = len(cell) <= most_rows
    if not complete:
        size = np.abs(np.bincount(cell, weights=amount, minlength=n_cell))
        count = np.bincount(cell, minlength=n_cell)
        order = np.argsort(-size, kind="stable")
        fits = np.zeros(n_cell, dtype=bool)
        fits[order[np.cumsum(count[order]) <= most_rows]] = True
        chosen = fits[cell]
        cell, code, amount = cell[chosen], code[chosen], amount[chosen]
    order = np.lexsort((-np.abs(amount), cell))
    counts = np.bincount(cell, minlength=n_cell)
    return DriverBlock(
        base=base,
        against=against,
        kinds=tuple(str(kind) for kind, _ in unique),
        constraints=tuple(str(name) for _, name in unique),
        start=np.concatenate([[0], np.cumsum(counts)]).astype(np.uint32),
        key=code[order].astype(np.uint16),
        amount=amount[order].astype(np.float32),
        complete=complete,
        kept_cells=int((counts > 0).sum()),
    )


def _keys(part: pd.DataFrame) -> tuple[IntArray, list[tuple[str, str]]]:
    """Return the key of each row and the keys as (driver, constraint); reactive drivers are one key."""
    driver_code, drivers = pd.factorize(part["driver"])
    constraint_code, constraints = pd.factorize(part["constraint"].fillna(""))
    constraint_code = np.where(np.asarray(drivers == REACTIVE)[driver_code], -1, constraint_code)
    combined = driver_code * (len(constraints) + 1) + constraint_code + 1
    unique, code = np.unique(combined, return_inverse=True)
    names = ["", *(str(name) for name in constraints)]
    return np.asarray(code, dtype=np.int64), [
        (str(drivers[one // len(names)]), names[one % len(names)]) for one in unique.tolist()
    ]


def _summed(
    cell: IntArray, code: IntArray, amount: FloatArray, known: BoolArray, n_key: int
) -> tuple[IntArray, IntArray, FloatArray]:
    """Return one row per cell and key, dust left out."""
    place = (cell * n_key + code)[known]
    amount = amount[known]
    order = np.argsort(place, kind="stable")
    place, amount = place[order], amount[order]
    first = np.flatnonzero(np.r_[True, place[1:] != place[:-1]]) if place.size else np.zeros(0, np.int64)
    total = np.add.reduceat(amount, first) if place.size else amount
    kept = np.abs(total) >= DUST
    place, total = place[first][kept], total[kept]
    return place // n_key, place % n_key, total


def room_for_drivers(cube: PriceCube) -> int:
    """Return how many driver rows keep a page with these prices below its size limit, at most `MOST_ROWS`."""
    parts = [cube.get(name, part) for name in cube.sets for part in COMPONENTS]
    # the price itself is the sum of its parts on the page; parts that are zero or the same everywhere cost nothing
    full = sum(bool(part.any()) and bool(np.ptp(np.nan_to_num(part), axis=0).any()) for part in parts) - len(cube.sets)
    prices = full * parts[0].nbytes * BASE64
    return int(np.clip((PAGE_BYTES - FIXED_BYTES - prices) / (ROW_BYTES * BASE64), 50_000, MOST_ROWS))


def driver_words(kind: str, base: str, against: str) -> str:
    """Return a driver as the report names it: sides by their price set."""
    return {"binds only in base": f"binds only in {base}", "binds only in against": f"binds only in {against}"}.get(
        kind, kind
    )


def why_table(block: DriverBlock | None, pair: PairView, currency: str, rows: int = 12) -> Table:
    """Return the drivers of the main pair ranked by their mean size over all buses and hours."""
    body: list[tuple[str, ...]] = []
    note = "The drivers of each bus and hour add up to its difference exactly."
    if block is not None and pair.counted:
        n_key = len(block.kinds)
        size = np.bincount(block.key, weights=np.abs(block.amount), minlength=n_key)
        signed = np.bincount(block.key, weights=block.amount, minlength=n_key)
        cells = np.repeat(np.arange(len(block.start) - 1), np.diff(block.start))
        n_hour_of = [len(np.unique(cells[block.key == key])) for key in np.argsort(-size)[:rows]]
        for key, n_cell in zip(np.argsort(-size)[:rows], n_hour_of, strict=True):
            body.append(
                (
                    driver_words(block.kinds[key], block.base, block.against),
                    block.constraints[key],
                    number(size[key] / pair.counted),
                    number(signed[key] / pair.counted, signed=True),
                    percent(size[key] / size.sum()) if size.sum() else "",
                    f"{n_cell:,}",
                )
            )
        if not block.complete:
            note += f" Kept for the {block.kept_cells:,} bus-hours with the largest differences."
    return Table(
        caption=f"Why {pair.against} differs from {pair.base}, {currency}/MWh",
        columns=("Driver", "Constraint", "Mean size", "Mean", "Share", "Bus-hours"),
        numeric=(False, False, True, True, True, True),
        rows=tuple(body),
        note=note,
    )
