"""Posted prices put in order: which version stands, what is missing, repeated or unknown.

Signs and column names are the reader's business; what arrives here has the columns of the table `posted`, congestion
as a part of the price. Nothing is dropped silently: superseded versions, rows that stand twice and nodes that nobody
knows are all kept and listed.
"""

from __future__ import annotations

from collections.abc import Collection
from dataclasses import dataclass

import numpy as np
import pandas as pd

from lmpgap.divergence.price_set import places

POSTED = "posted"
COMPONENT_COLUMNS = ["energy_component", "congestion_component", "loss_component"]
_PLACE = ["interval_start", "node"]


@dataclass(frozen=True, kw_only=True)
class PostedPrices:
    """Posted prices of the intervals that are looked at.

    Attributes
    ----------
    latest : DataFrame
        interval_start, node, lmp, energy_component, congestion_component, loss_component, version, published_at, known:
        one row per interval and node. A component that was not published is the rest of the price.
    superseded : DataFrame
        The same columns: earlier versions and earlier copies of repeated rows.
    revisions : DataFrame
        interval_start, node, version, published_at, replaces (version), and ``*_change`` of price and components
        [$/MWh]: one row per price that a later version replaced, changed or not.
    repeated : DataFrame
        interval_start, node, copies, spread (largest minus smallest price among them [$/MWh]): rows of one version that
        stand more than once. The last one in the file counts.
    missing : DataFrame
        interval_start, node: intervals in which a node that is posted otherwise is not.
    unknown : tuple of str
        Nodes that are neither buses nor hubs.
    completed : tuple of str
        Components that were filled in by subtraction, wholly or in part.
    """

    latest: pd.DataFrame
    superseded: pd.DataFrame
    revisions: pd.DataFrame
    repeated: pd.DataFrame
    missing: pd.DataFrame
    unknown: tuple[str, ...]
    completed: tuple[str, ...]

    def tables(self) -> dict[str, pd.DataFrame]:
        """Return the latest prices of known nodes as run tables of a formulation called ``"posted"``."""
        known = self.latest[self.latest["known"]]
        prices = known[["interval_start", "lmp", *COMPONENT_COLUMNS]].assign(
            formulation=POSTED, bus=known["node"], reactive_component=0.0
        )
        return {"prices": prices.reset_index(drop=True)}


def order_posted(posted: pd.DataFrame, known_nodes: Collection[str], intervals: pd.DatetimeIndex) -> PostedPrices:
    """Return posted prices with one row per interval and node, and all that was set aside.

    Parameters
    ----------
    posted
        Table `posted`. The latest version wins: the one published last, among equals the one with the highest number,
        among equals again the last row of the file.
    known_nodes
        Buses and hubs.
    intervals
        The intervals to be held against the posted prices; rows of others are left out.
    """
    rows = _with_all_columns(posted)
    rows = rows[rows["interval_start"].isin(intervals)].reset_index(drop=True)
    rows, completed = _completed(rows)
    rows["known"] = rows["node"].isin(list(known_nodes))
    rows["order"] = np.arange(len(rows))
    # A row without a time of publication counts as published first.
    early = pd.Timestamp("1970-01-01", tz="UTC")
    rows["issued"] = rows["published_at"].fillna(early)
    rows = rows.sort_values([*_PLACE, "issued", "version", "order"], kind="stable", ignore_index=True)
    last_copy = ~rows.duplicated([*_PLACE, "issued", "version"], keep="last")
    latest = ~rows.duplicated(_PLACE, keep="last")
    shown = ["interval_start", "node", "lmp", *COMPONENT_COLUMNS, "version", "published_at", "known"]
    return PostedPrices(
        latest=rows.loc[latest].sort_values("order")[shown].reset_index(drop=True),
        superseded=rows.loc[~latest].sort_values("order")[shown].reset_index(drop=True),
        revisions=_revisions(rows[last_copy]),
        repeated=_repeated(rows),
        missing=_missing(rows, intervals),
        unknown=tuple(rows.loc[~rows["known"], "node"].drop_duplicates()),
        completed=completed,
    )


def _with_all_columns(posted: pd.DataFrame) -> pd.DataFrame:
    rows = posted.copy()
    for column in COMPONENT_COLUMNS:
        if column not in rows:
            rows[column] = np.nan
    if "version" not in rows:
        rows["version"] = 1.0
    if "published_at" not in rows:
        rows["published_at"] = pd.NaT
    rows["published_at"] = pd.to_datetime(rows["published_at"], utc=True)
    return rows


def _completed(rows: pd.DataFrame) -> tuple[pd.DataFrame, tuple[str, ...]]:
    """Fill the one component that is missing; with two missing the price stays unsplit."""
    absent = rows[COMPONENT_COLUMNS].isna().to_numpy()
    one = absent.sum(axis=1) == 1
    rest = rows["lmp"].to_numpy(float) - rows[COMPONENT_COLUMNS].sum(axis=1).to_numpy(float)
    completed = []
    for i, column in enumerate(COMPONENT_COLUMNS):
        fill = absent[:, i] & one & np.isfinite(rest)
        if fill.any():
            rows[column] = np.where(fill, rest, rows[column].to_numpy(float))
            completed.append(column)
    return rows, tuple(completed)


def _revisions(rows: pd.DataFrame) -> pd.DataFrame:
    """Return what each version changed against the one before; rows are in order of place and version."""
    values = ["lmp", *COMPONENT_COLUMNS]
    before = rows.groupby(_PLACE, sort=False)[[*values, "version"]].shift(1)
    later = rows.duplicated(_PLACE, keep="first").to_numpy()
    table = rows.loc[later, [*_PLACE, "version", "published_at"]].assign(replaces=before.loc[later, "version"])
    for value in values:
        table[f"{value.removesuffix('_component')}_change"] = (rows[value] - before[value])[later]
    return table.reset_index(drop=True)


def _repeated(rows: pd.DataFrame) -> pd.DataFrame:
    twice = rows[rows.duplicated([*_PLACE, "issued", "version"], keep=False)]
    groups = twice.groupby([*_PLACE, "issued", "version"], sort=False)["lmp"]
    table = pd.DataFrame({"copies": groups.size(), "spread": groups.max() - groups.min()})
    return table.reset_index().drop(columns=["issued", "version"])


def _missing(rows: pd.DataFrame, intervals: pd.DatetimeIndex) -> pd.DataFrame:
    nodes = pd.Index(rows["node"].unique(), dtype="str")
    present = np.zeros((len(intervals), len(nodes)), dtype=bool)
    priced = rows[rows["lmp"].notna()]
    present[places(intervals, priced["interval_start"]), places(nodes, priced["node"])] = True
    at, node = np.nonzero(~present)
    return pd.DataFrame({"interval_start": intervals.take(at), "node": pd.Series(nodes.take(node), dtype="str")})
