"""Positions times prices: withdrawal pays, injection is paid.

An amount is mw x hours x price with mw positive for a withdrawal, so it is what the account pays; negative amounts are
received. The amount of a difference, posted minus reference, is what the account pays too much (or receives too
little).
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence

import numpy as np
import pandas as pd

from lmpgap.scenario.network import FloatArray, IntArray
from lmpgap.settlement.loss_error import ComponentError, PriceErrors
from lmpgap.settlement.options import COMPONENTS, SettlementOptions

COUNTED = "counted"
UNKNOWN_NODE = "node is not in the scenario"
OUTSIDE = "interval is not in the scenario"
SHIFT = "shift_"
"""Prefix of the columns with the effect of another operating point."""

SOURCES = ("rounding", "uniqueness_low", "uniqueness_high", "relaxation", "solver")
"""Columns with the half widths of an amount, in money."""

CONTRACT_COLUMNS = (
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
)


def gather_positions(positions: pd.DataFrame) -> pd.DataFrame:
    """Return positions with one row per account, interval and node, quantities of repeated rows added up.

    Returns
    -------
    DataFrame
        ``account, interval_start, node, mw`` [MW], sorted.
    """
    keys = ["account", "interval_start", "node"]
    return positions.groupby(keys, sort=True)["mw"].sum().reset_index()


def settle_amounts(
    positions: pd.DataFrame,
    component_prices: Mapping[str, FloatArray],
    intervals: pd.DatetimeIndex,
    nodes: Sequence[str],
    hours: float,
) -> pd.DataFrame:
    """Return what each position pays at given prices, by component.

    Parameters
    ----------
    positions
        ``account, interval_start, node, mw``.
    component_prices
        By component, (n_interval, n_node) [$/MWh].
    hours
        Length of an interval [h].

    Returns
    -------
    DataFrame
        ``account, interval_start, node, mw, component, price, amount``; ``nan`` where there is no price.
    """
    at, where = _locate(positions, intervals, nodes)
    parts = []
    for component, prices in component_prices.items():
        price = _pick(prices, at, where)
        parts.append(
            positions[["account", "interval_start", "node", "mw"]].assign(
                component=component, price=price, amount=positions["mw"].to_numpy(float) * hours * price
            )
        )
    return pd.concat(parts, ignore_index=True)


def settle_errors(
    positions: pd.DataFrame,
    errors: PriceErrors,
    intervals: pd.DatetimeIndex,
    nodes: Sequence[str],
    hours: float,
    options: SettlementOptions,
) -> pd.DataFrame:
    """Return what each position pays too much, by component, with its interval and what makes it up.

    Returns
    -------
    DataFrame
        The columns of the run table ``settlement``, then ``hours``, the half widths of `SOURCES` and one ``shift_``
        column per other operating point [$], the evidence ``energy_claim, factor_claim, factor_reference``, and
        ``status``: `COUNTED`, or why the row is left out (its amounts are ``nan``).
    """
    at, where = _locate(positions, intervals, nodes)
    known = where >= 0
    energy_mwh = positions["mw"].to_numpy(float) * hours
    reason = {
        True: np.where(known, _pick_text(errors.factor_reason, at, where), UNKNOWN_NODE),
        False: np.where(known, _pick_text(errors.reason, at, where), UNKNOWN_NODE),
    }
    evidence = {
        name: _pick(getattr(errors, name), at, where) for name in ("energy_claim", "factor_claim", "factor_reference")
    }
    parts = []
    for component in COMPONENTS:
        # Only the price itself needs no components.
        status = reason[component != "lmp"]
        money = _amounts(errors.components[component], at, where, energy_mwh, options)
        left_out = status != ""
        for column in ("amount", "amount_low", "amount_high"):
            money[column] = np.where(left_out, np.nan, money[column])
        parts.append(
            positions[["account", "interval_start", "node", "mw"]].assign(
                component=component, **money, hours=hours, **evidence, status=np.where(left_out, status, COUNTED)
            )
        )
    rows = pd.concat(parts, ignore_index=True)
    order = pd.Categorical(rows["component"], categories=COMPONENTS, ordered=True)
    return (
        rows.assign(_order=order.codes)
        .sort_values(["account", "interval_start", "node", "_order"], kind="stable", ignore_index=True)
        .drop(columns="_order")
    )


def unsettled_rows(positions: pd.DataFrame, status: str, hours: float) -> pd.DataFrame:
    """Return rows without amounts for positions that cannot be settled at all, so that none is dropped silently."""
    parts = [
        positions[["account", "interval_start", "node", "mw"]].assign(component=component, hours=hours, status=status)
        for component in COMPONENTS
    ]
    return pd.concat(parts, ignore_index=True)


def _amounts(
    error: ComponentError, at: IntArray, where: IntArray, energy_mwh: FloatArray, options: SettlementOptions
) -> dict[str, FloatArray]:
    posted, reference = _pick(error.posted, at, where), _pick(error.reference, at, where)
    amount = energy_mwh * (posted - reference)
    size, pays = np.abs(energy_mwh), energy_mwh >= 0.0
    # A position of nothing pays nothing, however far its price may range.
    down, up = (
        np.where(size == 0.0, 0.0, _pick(width, at, where)) for width in (error.uniqueness_down, error.uniqueness_up)
    )
    money = {
        "posted": posted,
        "reference": reference,
        "amount": amount,
        "rounding": size * _pick(error.rounding, at, where),
        # For an injection a higher difference of prices is a lower amount.
        "uniqueness_low": size * np.where(pays, down, up),
        "uniqueness_high": size * np.where(pays, up, down),
        "relaxation": size * _pick(error.relaxation, at, where),
        "solver": size * _pick(error.solver, at, where),
    }
    for name, shift in error.shift.items():
        money[f"{SHIFT}{name}"] = energy_mwh * _pick(shift, at, where)
    low, high = combined_interval(pd.DataFrame(money), options.combine)
    money["amount_low"], money["amount_high"] = low, high
    return money


def combined_interval(rows: pd.DataFrame, combine: str) -> tuple[FloatArray, FloatArray]:
    """Return the interval of each row's amount from its half widths, shape (n_row,) each [$].

    The other operating points give the row's amount several values: the furthest one below and above counts.
    """
    shifts = rows[[c for c in rows.columns if c.startswith(SHIFT)]].to_numpy(float)
    operating_low = np.maximum(-shifts, 0.0).max(axis=1, initial=0.0)
    operating_high = np.maximum(shifts, 0.0).max(axis=1, initial=0.0)
    common = rows[["rounding", "relaxation", "solver"]].to_numpy(float)
    low = np.column_stack([common, rows["uniqueness_low"], operating_low])
    high = np.column_stack([common, rows["uniqueness_high"], operating_high])
    amount = rows["amount"].to_numpy(float)
    if combine == "worst-case":
        return amount - low.sum(axis=1), amount + high.sum(axis=1)
    return amount - np.sqrt((low**2).sum(axis=1)), amount + np.sqrt((high**2).sum(axis=1))


def contract_table(rows: pd.DataFrame) -> pd.DataFrame:
    """Return the rows as the run table ``settlement``; left-out rows keep their place, with ``nan`` amounts."""
    return rows[list(CONTRACT_COLUMNS)]


def _locate(positions: pd.DataFrame, intervals: pd.DatetimeIndex, nodes: Sequence[str]) -> tuple[IntArray, IntArray]:
    at = intervals.get_indexer(pd.DatetimeIndex(positions["interval_start"]))
    where = pd.Index(list(nodes), dtype="object").get_indexer(pd.Index(positions["node"], dtype="object"))
    return at.astype(np.int64), where.astype(np.int64)


def _pick(values: FloatArray, at: IntArray, where: IntArray) -> FloatArray:
    inside = (at >= 0) & (where >= 0)
    return np.where(inside, values[np.maximum(at, 0), np.maximum(where, 0)], np.nan)


def _pick_text(values: np.ndarray, at: IntArray, where: IntArray) -> np.ndarray:
    return np.asarray(values[np.maximum(at, 0), np.maximum(where, 0)])
