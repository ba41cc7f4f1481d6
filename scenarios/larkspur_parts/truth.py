"""What was planted, in words and in dollars: the key to the exercise. lmpgap never reads it."""

from __future__ import annotations

import numpy as np
import pandas as pd

from .calendar_week import STAMPS
from .faults import (
    FAULTS,
    FORGOTTEN_OUTAGE,
    NEW_NAME,
    RENAMED_HOURS,
    RENAMED_NODE,
    REVERSED_HOURS,
    REVERSED_INTERFACE,
    REVISED_HOURS,
    STALE_HOURS,
    STALE_NODES,
    STALE_SOURCE,
    WRONG_SIGN_HOURS,
    Planted,
)
from .posting import Publisher


def planted_table(planted: Planted) -> pd.DataFrame:
    """Return one row per planted fault and thing it touches."""
    every = range(len(STAMPS))
    rows: list[tuple[str, str, range, str]] = [
        ("stale-factors", node, STALE_HOURS, f"delivery factor of {STAMPS[STALE_SOURCE]} held") for node in STALE_NODES
    ]
    rows += [
        ("reversed-interface", REVERSED_INTERFACE, REVERSED_HOURS, "its congestion has the wrong sign"),
        ("renamed-node", RENAMED_NODE, RENAMED_HOURS, f"published as {NEW_NAME}"),
        ("revised-day", "every node", REVISED_HOURS, f"version 1 cleared with {FORGOTTEN_OUTAGE} in service"),
        ("wrong-sign", "every node", WRONG_SIGN_HOURS, "congestion published as lmp = energy + congestion + loss"),
        ("rounding", "every node", every, "published in whole cents"),
    ]
    assert {name for name, *_ in rows} == FAULTS.keys()
    return pd.DataFrame(
        [
            {
                "fault": name,
                "where": where,
                "first_interval": STAMPS[hours[0]],
                "last_interval": STAMPS[hours[-1]],
                "what": what,
            }
            for name, where, hours, what in rows
            if name in planted
        ],
        columns=["fault", "where", "first_interval", "last_interval", "what"],
    )


def stale_dollars(publisher: Publisher, positions: pd.DataFrame) -> pd.DataFrame:
    """Return what the stale factors cost each account at each node.

    ``amount`` is the sum over the hours of mw x (published loss component - right loss component), before
    rounding: positive where the account paid too much or was paid too little.
    """
    error = np.zeros((len(STAMPS), len(publisher.nodes)))
    for hour in STALE_HOURS:
        error[hour] = publisher.mix @ (publisher.loss(hour) - publisher.cleared[hour].loss)
    by_hour = {stamp: hour for hour, stamp in enumerate(STAMPS)}
    by_node = {node: column for column, node in enumerate(publisher.nodes)}
    table = positions.copy()
    table["error"] = error[table["interval_start"].map(by_hour), table["node"].map(by_node)]
    table = table[table["error"] != 0.0]
    table["amount"] = table["mw"] * table["error"]
    dollars = table.groupby(["account", "node"], as_index=False).agg(
        hours=("mw", "size"), mwh=("mw", "sum"), amount=("amount", "sum")
    )
    dollars["mwh"] = dollars["mwh"].round(1)
    dollars["amount"] = dollars["amount"].round(2)
    return dollars
