"""What the checks of posted prices found, as rows of one table with a sentence each."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass

import pandas as pd

FINDING_COLUMNS = ["interval_start", "kind", "node", "constraint", "amount", "unit", "sentence"]

KINDS = (
    "identity",
    "sign",
    "stale-factors",
    "unexplained-congestion",
    "reversed-constraint",
    "unknown-node",
    "missing-interval",
    "repeated-interval",
    "revised",
)


@dataclass(frozen=True, kw_only=True)
class Finding:
    """One thing that is wrong, or worth knowing, with the posted prices.

    Attributes
    ----------
    interval_start
        First interval of the stretch that the sentence speaks of.
    kind
        One of `KINDS`.
    node, constraint
        Empty where several or none are meant; the sentence says which.
    amount, unit
        Size: $/MWh, or a count of intervals or prices.
    sentence
        The finding in words, with its figures.
    """

    interval_start: pd.Timestamp
    kind: str
    sentence: str
    node: str = ""
    constraint: str = ""
    amount: float
    unit: str


def findings_table(findings: Iterable[Finding]) -> pd.DataFrame:
    """Return findings as the run table of that name, in order of kinds and time."""
    rows = [tuple(getattr(finding, column) for column in FINDING_COLUMNS) for finding in findings]
    table = pd.DataFrame(rows, columns=FINDING_COLUMNS).astype(
        {
            "kind": "str",
            "node": "str",
            "constraint": "str",
            "amount": "float64",
            "unit": "str",
            "sentence": "str",
        }
    )
    table["interval_start"] = pd.to_datetime(table["interval_start"], utc=True).astype("datetime64[us, UTC]")
    rank = table["kind"].map({kind: i for i, kind in enumerate(KINDS)})
    order = table.assign(rank=rank).sort_values(["rank", "interval_start", "node"], kind="stable").index
    return table.loc[order].reset_index(drop=True)
