"""Where, when and through what price sets diverge most: rankings and profiles of the difference table.

Differences that prices which are not unique explain by themselves (``inside_interval``) count as zero everywhere here:
they are not divergences.
"""

from __future__ import annotations

import numpy as np
import pandas as pd

from lmpgap.divergence.labels import IntervalLabels
from lmpgap.divergence.price_set import places

PAIR = ["base", "against"]


def divergence(differences: pd.DataFrame) -> pd.Series[float]:
    """Return the divergence of each row [$/MWh]: the difference, or zero where it is inside an interval."""
    return differences["difference"].where(~differences["inside_interval"], 0.0)


def rank_buses(differences: pd.DataFrame) -> pd.DataFrame:
    """Return buses by mean absolute divergence, largest first.

    Returns
    -------
    DataFrame
        base, against, bus, mean, mean_absolute, largest (signed, of the largest size) [$/MWh], largest_at (interval
        start), intervals (how many were compared).
    """
    return _ranked(differences, "bus", "interval_start", "largest_at")


def rank_intervals(differences: pd.DataFrame) -> pd.DataFrame:
    """Return intervals by mean absolute divergence over buses, largest first.

    Returns
    -------
    DataFrame
        base, against, interval_start, mean, mean_absolute, largest [$/MWh], largest_at (bus), buses.
    """
    return _ranked(differences, "interval_start", "bus", "largest_at").rename(columns={"intervals": "buses"})


def rank_constraints(drivers: pd.DataFrame, n_price: int | None = None) -> pd.DataFrame:
    """Return constraints by what they add to the divergence, largest first.

    Parameters
    ----------
    drivers
        Run table ``drivers``.
    n_price
        Number of compared bus prices; the means are over these, so that a constraint that acts in few hours or at few
        buses ranks by its weight in the whole. The number of different (interval, bus) in the table unless given.

    Returns
    -------
    DataFrame
        base, against, constraint, mean_absolute (of the constraint's drivers added up) and one column per driver
        (mean absolute) [$/MWh], largest (signed) [$/MWh], intervals (in which it matters).
    """
    rows = drivers[(drivers["constraint"] != "") & (drivers["driver"] != "reactive")]
    if rows.empty:
        return pd.DataFrame(columns=[*PAIR, "constraint", "mean_absolute", "largest", "intervals"])
    count = n_price or len(drivers[["interval_start", "bus"]].drop_duplicates())
    keys = [*PAIR, "constraint"]
    net = rows.groupby([*keys, "interval_start", "bus"], sort=False, observed=True)["amount"].sum().reset_index()
    net["size"] = net["amount"].abs()
    groups = net.groupby(keys, sort=False, observed=True)
    table = pd.DataFrame(
        {
            "mean_absolute": groups["size"].sum() / count,
            "largest": net.loc[groups["size"].idxmax()].set_index(keys)["amount"],
            "intervals": groups["interval_start"].nunique(),
        }
    )
    sizes = rows.assign(size=rows["amount"].abs())
    by_driver = sizes.groupby([*keys, "driver"], observed=True)["size"].sum().unstack("driver", fill_value=0) / count
    return (
        table.join(by_driver)
        .reset_index()
        .sort_values([*PAIR, "mean_absolute"], ascending=[True, True, False], ignore_index=True)
    )


def rank_money(
    differences: pd.DataFrame, positions: pd.DataFrame, hours: float, hubs: pd.DataFrame | None = None
) -> pd.DataFrame:
    """Return what each position pays more at the prices of ``against`` than at those of ``base``, largest first.

    Parameters
    ----------
    positions
        Table ``positions``: account, interval_start, node, mw; positive withdraws and pays.
    hours
        Length of one interval [h].
    hubs
        Table ``hubs``; a node that is a hub has the weighted difference of its buses.

    Returns
    -------
    DataFrame
        base, against, account, node, mwh (signed), amount [$], largest_at (interval of the largest single amount),
        intervals, unpriced (intervals of the position without a difference, which are not in the amount).
    """
    columns = [*PAIR, "account", "node", "mwh", "amount", "largest_at", "intervals", "unpriced"]
    if positions.empty or differences.empty:
        return pd.DataFrame(columns=columns)
    told = differences.assign(difference=divergence(differences))
    nodes = told.rename(columns={"bus": "node"})[["interval_start", *PAIR, "node", "difference"]]
    if hubs is not None and not hubs.empty:
        nodes = pd.concat([nodes, _hub_differences(nodes, hubs)], ignore_index=True)
    pairs = told[PAIR].drop_duplicates()
    wanted = positions.merge(pairs, how="cross")
    money = wanted.merge(nodes, on=["interval_start", *PAIR, "node"], how="left")
    money["amount"] = money["mw"] * hours * money["difference"]
    money["mwh"] = money["mw"] * hours
    money["size"] = money["amount"].abs().fillna(0.0)
    money["unpriced"] = money["difference"].isna()
    keys = [*PAIR, "account", "node"]
    groups = money.groupby(keys, sort=False)
    table = groups.agg(
        mwh=("mwh", "sum"), amount=("amount", "sum"), intervals=("size", "size"), unpriced=("unpriced", "sum")
    )
    table["largest_at"] = money.loc[groups["size"].idxmax()].set_index(keys)["interval_start"]
    table = table.reset_index()
    order = table["amount"].abs().sort_values(ascending=False, kind="stable").index
    return table.loc[order, columns].reset_index(drop=True)


def hour_profile(differences: pd.DataFrame, labels: IntervalLabels) -> pd.DataFrame:
    """Return the divergence by local hour of the day.

    Returns
    -------
    DataFrame
        base, against, hour_ending (1 to 24), mean, mean_absolute [$/MWh], prices (how many).
    """
    rows = differences[PAIR].assign(
        hour_ending=labels.hour_ending(differences["interval_start"]), value=divergence(differences)
    )
    rows["size"] = rows["value"].abs()
    return (
        rows.groupby([*PAIR, "hour_ending"], observed=True)
        .agg(mean=("value", "mean"), mean_absolute=("size", "mean"), prices=("size", "size"))
        .reset_index()
    )


def duration_curve(differences: pd.DataFrame, points: int = 201) -> pd.DataFrame:
    """Return how much of the week and the network lies beyond a divergence.

    Returns
    -------
    DataFrame
        base, against, share (0 to 1), divergence [$/MWh]: this share of all bus prices diverges by at least so much.
    """
    share = np.linspace(0.0, 1.0, points)
    parts = []
    for (base, against), rows in differences.groupby(PAIR, sort=False, observed=True):
        size = np.quantile(divergence(rows).abs().to_numpy(), 1.0 - share)
        parts.append(pd.DataFrame({"base": base, "against": against, "share": share, "divergence": size}))
    if not parts:
        return pd.DataFrame(columns=[*PAIR, "share", "divergence"])
    return pd.concat(parts, ignore_index=True)


def _ranked(differences: pd.DataFrame, by: str, across: str, largest_at: str) -> pd.DataFrame:
    keys = [*PAIR, by]
    rows = differences[[*keys, across]].assign(value=divergence(differences)).reset_index(drop=True)
    if rows.empty:
        return pd.DataFrame(columns=[*keys, "mean", "mean_absolute", "largest", largest_at, "intervals"])
    rows["size"] = rows["value"].abs()
    groups = rows.groupby(keys, sort=False, observed=True)
    table = groups.agg(mean=("value", "mean"), mean_absolute=("size", "mean"), intervals=("size", "size"))
    top = rows.loc[groups["size"].idxmax()].set_index(keys)
    table["largest"], table[largest_at] = top["value"], top[across]
    table = table.reset_index()[[*keys, "mean", "mean_absolute", "largest", largest_at, "intervals"]]
    return table.sort_values([*PAIR, "mean_absolute"], ascending=[True, True, False], ignore_index=True)


def _hub_differences(nodes: pd.DataFrame, hubs: pd.DataFrame) -> pd.DataFrame:
    """Return differences of hubs whose buses all have one, weights brought to a sum of one."""
    share = hubs["weight"] / hubs.groupby("hub")["weight"].transform("sum")
    known = hubs.assign(weight=share, members=hubs.groupby("hub")["bus"].transform("size"))
    known = known[places(pd.Index(nodes["node"].unique(), dtype="str"), known["hub"]) < 0]
    joined = known.merge(nodes, left_on="bus", right_on="node")
    joined["difference"] = joined["weight"] * joined["difference"]
    keys = ["interval_start", *PAIR, "hub"]
    totals = joined.groupby(keys, sort=False).agg(
        difference=("difference", "sum"), found=("difference", "count"), members=("members", "first")
    )
    whole = totals[totals["found"] == totals["members"]].reset_index().rename(columns={"hub": "node"})
    return whole[["interval_start", *PAIR, "node", "difference"]]
