"""Binding constraints hour by hour and formulation by formulation."""

from __future__ import annotations

import numpy as np
import pandas as pd

from lmpgap.report.text import number
from lmpgap.report.view.cube import PriceCube
from lmpgap.report.view.hours import Hours
from lmpgap.report.view.model import ConstraintsView, Table

MOST_CONSTRAINTS = 150
"""Constraints kept for the pictures; the rest are counted."""

_TABLE_ROWS = 12

VOLTAGE_KINDS = ("voltage", "reactive")
"""Kinds whose shadow price is not per MW or MVA of a flow."""

FIRST_FLOWS, FIRST_OTHERS = 8, 4
"""How many of each stand first."""


def constraints_view(constraints: pd.DataFrame, cube: PriceCube, hours: Hours, currency: str) -> ConstraintsView:
    """Return the constraints with the largest sums of shadow prices, as matrices over hours."""
    if constraints.empty:
        return _nothing(cube, currency)
    frame = constraints.assign(
        position=hours.position(constraints["interval_start"]),
        shadow_price=pd.to_numeric(constraints["shadow_price"], errors="coerce").fillna(0.0),
        formulation=constraints["formulation"].astype(str),
        constraint=constraints["constraint"].astype(str),
    )
    frame = frame[(frame["position"] >= 0) & (frame["shadow_price"] > 0.0)]
    if frame.empty:
        return _nothing(cube, currency)
    totals = frame.groupby("constraint")["shadow_price"].sum().sort_values(ascending=False, kind="stable")
    first = frame.drop_duplicates("constraint").set_index("constraint")
    names = _ordered(list(totals.index), dict(zip(first.index, first["kind"].astype(str), strict=True)))[
        :MOST_CONSTRAINTS
    ]
    code = pd.Index(names).get_indexer(pd.Index(frame["constraint"]))
    shadow, penalty = {}, {}
    for formulation in cube.formulations:
        chosen = ((frame["formulation"] == formulation) & (code >= 0)).to_numpy()
        rows, columns = code[chosen], frame["position"].to_numpy()[chosen]
        matrix = np.zeros((len(names), hours.n), dtype=np.float32)
        np.add.at(matrix, (rows, columns), frame["shadow_price"].to_numpy(dtype=np.float32)[chosen])
        at_penalty = np.zeros(matrix.shape, dtype=bool)
        at_penalty[rows, columns] |= frame["at_penalty"].to_numpy(dtype=bool)[chosen]
        shadow[formulation], penalty[formulation] = matrix, at_penalty
    kinds = tuple(str(first.at[name, "kind"]) for name in names)
    units = tuple(str(first.at[name, "unit"]) for name in names)
    rows_text = []
    for row, name in enumerate(names[:_TABLE_ROWS]):
        cells = [name, kinds[row], units[row]]
        for formulation in cube.formulations:
            matrix = shadow[formulation]
            binding = int((matrix[row] > 0).sum())
            mean = float(matrix[row].sum()) / binding if binding else float("nan")
            soft = int(penalty[formulation][row].sum())
            cells.append(
                f"{binding} h, {number(mean)}" + (f", {soft} h at penalty" if soft else "") if binding else "0 h"
            )
        rows_text.append(tuple(cells))
    return ConstraintsView(
        name=tuple(names),
        kind=kinds,
        unit=units,
        shadow=shadow,
        at_penalty=penalty,
        table=_table(
            cube,
            currency,
            tuple(rows_text),
            f"{len(rows_text)} of {len(totals)} binding constraints; limits on flows first.",
        ),
        left_out=len(totals) - len(names),
    )


def _ordered(names: list[str], kinds: dict[str, str]) -> list[str]:
    """Return the names so that the first ones hold limits on flows and limits on voltages, each in their order.

    Shadow prices per MW and per unit of voltage cannot be ranked in one list: the largest flow limits come first,
    then the largest others, then the rest.
    """
    flows = [name for name in names if kinds[name] not in VOLTAGE_KINDS]
    others = [name for name in names if kinds[name] in VOLTAGE_KINDS]
    first_flows = max(FIRST_FLOWS, FIRST_FLOWS + FIRST_OTHERS - len(others))
    first_others = FIRST_FLOWS + FIRST_OTHERS - min(len(flows), first_flows)
    return flows[:first_flows] + others[:first_others] + flows[first_flows:] + others[first_others:]


def _nothing(cube: PriceCube, currency: str) -> ConstraintsView:
    return ConstraintsView(
        name=(), kind=(), unit=(), shadow={}, at_penalty={}, table=_table(cube, currency, (), ""), left_out=0
    )


def _table(cube: PriceCube, currency: str, rows: tuple[tuple[str, ...], ...], note: str) -> Table:
    formulations = cube.formulations
    return Table(
        caption=f"Hours in which each constraint binds, and its mean shadow price there, {currency} per unit and hour",
        columns=("Constraint", "Kind", "Unit", *formulations),
        numeric=(False, False, False, *(True,) * len(formulations)),
        rows=rows,
        note=note,
    )
