"""Drivers of the differences, packed cell by cell for the page, and ranked for the table."""

from __future__ import annotations

import numpy as np
import pandas as pd

from lmpgap.report.text import number, percent
from lmpgap.report.view.hours import Hours
from lmpgap.report.view.model import DriverBlock, PairView, Table
from lmpgap.report.view.nodes import Nodes

MOST_ROWS = 1_200_000
"""Driver rows that the page may hold over all pairs; 6 bytes each before encoding."""

DUST = 0.0005
"""Drivers below a twentieth of a cent are left out of the page [currency/MWh]."""


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
    kept = (row >= 0) & (column >= 0) & (np.abs(amount) >= DUST)
    constraint = part["constraint"].astype(object).where(part["constraint"].notna(), "").astype(str)
    keys = pd.MultiIndex.from_arrays([part["driver"].astype(str), constraint])
    code, unique = pd.factorize(keys, sort=True)
    cell = (row * hours.n + column)[kept]
    code, amount = np.asarray(code)[kept], amount[kept]
    n_cell = nodes.n * hours.n
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
