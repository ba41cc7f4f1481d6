"""The tables that the report reads, with the columns it expects.

The run tables follow the run-folder contract. Three more are optional and described here:

``audit``
    An AC power flow at the linear dispatch, one row per finding, as the run folder defines it: ``finding``
    (``missing-power``, ``overload``, ``voltage``, ``angle``, ``reactive``, ``redispatch``, ``repair-cost``),
    ``element``, ``value``, ``limit``, ``unit``.
``money``
    Money balance per interval and formulation, one row per ``item`` and ``basis`` (components or constraints)
    with its ``amount`` [currency].
``sweep``
    One row per load factor and formulation: ``load_factor`` [-], ``mean_price``, ``price_error`` (mean absolute
    difference from ac) and ``loss_component_error`` [currency/MWh], ``cost`` [currency/h], ``losses_mw``, ``hours``
    [count of solved hours].
"""

from __future__ import annotations

from collections.abc import Mapping

import pandas as pd

from lmpgap.errors import DataError, Fault

EXPECTED: dict[str, tuple[str, ...]] = {
    "prices": (
        "interval_start",
        "formulation",
        "bus",
        "lmp",
        "energy_component",
        "congestion_component",
        "loss_component",
        "reactive_component",
        "lmp_low",
        "lmp_high",
    ),
    "constraints": (
        "interval_start",
        "formulation",
        "constraint",
        "kind",
        "contingency",
        "monitored",
        "direction",
        "limit",
        "value",
        "unit",
        "shadow_price",
        "at_penalty",
    ),
    "operating_point": ("interval_start", "formulation", "bus", "v_pu", "angle_deg", "load_mw"),
    "solves": (
        "interval_start",
        "formulation",
        "status",
        "objective",
        "losses_mw",
        "solver",
        "solver_seconds",
        "total_seconds",
        "primal_residual",
        "dual_residual",
        "duality_gap",
        "price_residual",
        "cone_slack",
        "loop_angle_deg",
        "cost_gap",
        "ac_mismatch_mw",
        "verdict",
    ),
    "differences": ("interval_start", "base", "against", "bus", "difference", "inside_interval"),
    "drivers": ("interval_start", "base", "against", "bus", "driver", "constraint", "amount"),
    "findings": ("interval_start", "kind", "node", "constraint", "amount", "unit", "sentence"),
    "settlement": (
        "account",
        "interval_start",
        "node",
        "mw",
        "component",
        "posted",
        "reference",
        "amount",
        "amount_low",
        "amount_high",
    ),
    "audit": ("interval_start", "formulation", "finding", "element", "value", "limit", "unit"),
    "money": ("interval_start", "formulation", "item", "basis", "amount"),
    "drift": (
        "formulation",
        "zone",
        "before",
        "after",
        "component",
        "price_before",
        "price_after",
        "price_change",
        "weight_drift",
    ),
    "sweep": (
        "load_factor",
        "formulation",
        "mean_price",
        "price_error",
        "loss_component_error",
        "cost",
        "losses_mw",
        "hours",
    ),
}
"""Columns read from each table."""


def checked_tables(tables: Mapping[str, pd.DataFrame]) -> dict[str, pd.DataFrame]:
    """Return every expected table; missing and empty ones as empty frames with the expected columns.

    Raises
    ------
    DataError
        A table with rows lacks columns that the report reads, or there are no prices at all.
    """
    faults = []
    checked: dict[str, pd.DataFrame] = {}
    for name, columns in EXPECTED.items():
        frame = tables.get(name)
        if frame is None or frame.empty:
            checked[name] = pd.DataFrame({column: pd.Series(dtype=object) for column in columns})
            continue
        missing = [column for column in columns if column not in frame.columns]
        faults += [Fault(table=name, column=column, message="column is missing") for column in missing]
        checked[name] = frame
    if checked["prices"].empty:
        faults.append(Fault(table="prices", message="has no rows; solve at least one hour before reporting"))
    if faults:
        raise DataError("The run folder cannot be reported.", faults)
    return checked
