"""Rows to accounts: what an account's claim is worth, and between which figures it lies.

Two intervals stand side by side:

worst case
    The rows' intervals added up: every rounding, every ambiguity and the operating point at its worst in every row.
    The claim rests on it.
independent rounding
    Rounding errors of different intervals are independent, so their half widths (added up within an interval) are
    combined as the root of the sum of their squares: about 1.7 standard deviations of evenly spread rounding.
    Everything systematic is still added up, but another operating point is taken for the whole claim at once. A likely
    range, not a bound.
"""

from __future__ import annotations

import numpy as np
import pandas as pd

from lmpgap.settlement.options import COMPONENTS
from lmpgap.settlement.positions import COUNTED, SHIFT, SOURCES

ACCOUNT_COLUMNS = (
    "account",
    "component",
    "rows",
    "left_out",
    "mwh",
    "amount",
    "amount_low",
    "amount_high",
    "independent_low",
    "independent_high",
    "material",
)


def by_account(rows: pd.DataFrame, materiality: float) -> pd.DataFrame:
    """Return one row per account and component.

    Parameters
    ----------
    rows
        From `lmpgap.settlement.positions.settle_errors`.
    materiality
        Size an amount must exceed to be material [$].

    Returns
    -------
    DataFrame
        ``account, component, rows`` (counted), ``left_out``, ``mwh`` (net withdrawal of the counted rows), ``amount``,
        its worst-case interval ``amount_low, amount_high`` and the one under independent rounding [$], and
        ``material``: the worst-case interval excludes zero and the amount exceeds the threshold.
    """
    keys = ["account", "component"]
    shifts = [column for column in rows.columns if column.startswith(SHIFT)]
    counted = rows[rows["status"] == COUNTED]
    money = ["amount", "amount_low", "amount_high", *SOURCES, *shifts]
    everyone = rows.groupby(keys)["status"].size()
    total = counted.assign(mwh=counted["mw"] * counted["hours"]).groupby(keys)[["mwh", *money]].sum()
    total = total.reindex(everyone.index, fill_value=0.0)
    total["rows"] = counted.groupby(keys)["status"].size().reindex(everyone.index, fill_value=0)
    total["left_out"] = everyone - total["rows"]

    per_interval = counted.groupby([*keys, "interval_start"])["rounding"].sum()
    rounding = np.sqrt((per_interval**2).groupby(level=keys).sum()).reindex(everyone.index, fill_value=0.0)
    operating = total[shifts].to_numpy(float)
    systematic = total["relaxation"] + total["solver"] + rounding
    total["independent_low"] = (
        total["amount"] - systematic - total["uniqueness_low"] - np.maximum(-operating, 0.0).max(axis=1, initial=0.0)
    )
    total["independent_high"] = (
        total["amount"] + systematic + total["uniqueness_high"] + np.maximum(operating, 0.0).max(axis=1, initial=0.0)
    )
    total["material"] = is_material(total, materiality)
    table = total.reset_index()
    table["_order"] = pd.Categorical(table["component"], categories=COMPONENTS, ordered=True).codes
    return table.sort_values(["account", "_order"], ignore_index=True)[list(ACCOUNT_COLUMNS)]


def is_material(total: pd.DataFrame, materiality: float) -> pd.Series:
    """Return whether each amount's interval excludes zero and its size exceeds the threshold."""
    excludes_zero = (total["amount_low"] > 0.0) | (total["amount_high"] < 0.0)
    return excludes_zero & (total["amount"].abs() > materiality)


def by_reason(rows: pd.DataFrame) -> pd.DataFrame:
    """Return what was left out and why: ``account, component, status, rows, mwh`` (absolute)."""
    left_out = rows[rows["status"] != COUNTED]
    return (
        left_out.assign(mwh=(left_out["mw"] * left_out["hours"]).abs())
        .groupby(["account", "component", "status"], as_index=False, sort=True)
        .agg(rows=("status", "size"), mwh=("mwh", "sum"))
    )


def by_day(rows: pd.DataFrame, time_zone: str) -> pd.DataFrame:
    """Return ``account, component, operating_date, amount`` of the counted rows, by local date."""
    counted = rows[rows["status"] == COUNTED]
    local = pd.DatetimeIndex(counted["interval_start"]).tz_convert(time_zone).tz_localize(None).normalize()
    return (
        counted.assign(operating_date=local)
        .groupby(["account", "component", "operating_date"], sort=True)["amount"]
        .sum()
        .reset_index()
    )
