"""Financial transmission rights settle on congestion components only; they do not hedge losses.

A right from a source to a sink is paid mw x hours x (congestion at the sink - congestion at the source), an option
only where that is positive. With losses the difference depends on the reference of the components, so the posted and
the re-solved congestion are compared on a common one, and the settlement on the components as published stands beside
it. The loss part of the path is shown as what the right leaves open. Tariffs vary; this is the common form.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import pandas as pd

from lmpgap.scenario.network import FloatArray
from lmpgap.settlement.loss_error import PriceErrors
from lmpgap.settlement.positions import COUNTED, UNKNOWN_NODE
from lmpgap.settlement.price_set import PriceSet

OBLIGATION = "obligation"
OPTION = "option"

RIGHTS_COLUMNS = (
    "holder",
    "interval_start",
    "source",
    "sink",
    "kind",
    "mw",
    "posted",
    "reference",
    "amount_published",
    "amount_posted",
    "amount_reference",
    "difference",
    "losses_left_open",
    "status",
)


def settle_rights(
    rights: pd.DataFrame,
    claim: PriceSet,
    errors: PriceErrors,
    hours: float,
) -> pd.DataFrame:
    """Return what each right is paid in each interval, on posted and on reference congestion.

    Parameters
    ----------
    rights
        ``holder, source, sink, mw, kind, interval_start``; a right without a time holds in every interval, one without
        a kind is an obligation.
    claim
        Prices of the claim at all nodes, with components as published.
    errors
        Components on the common reference.
    hours
        [h]

    Returns
    -------
    DataFrame
        Per right and interval: ``posted`` and ``reference``, congestion at the sink less that at the source on the
        common reference [$/MWh]; ``amount_published`` on the components as published, ``amount_posted`` and
        ``amount_reference`` on the common reference, ``difference`` = posted less reference, and ``losses_left_open``,
        mw x hours x the posted loss component at the sink less that at the source [$]; ``status`` as for positions.
    """
    if rights.empty:
        return pd.DataFrame({column: pd.Series(dtype=object) for column in RIGHTS_COLUMNS})
    expanded = _every_interval(rights, claim.intervals)
    at = claim.intervals.get_indexer(pd.DatetimeIndex(expanded["interval_start"]))
    nodes: Sequence[str] = claim.nodes
    index = pd.Index(list(nodes), dtype="object")
    source = index.get_indexer(pd.Index(expanded["source"], dtype="object"))
    sink = index.get_indexer(pd.Index(expanded["sink"], dtype="object"))
    known = (source >= 0) & (sink >= 0)

    def spread(values: FloatArray) -> FloatArray:
        difference = values[at, np.maximum(sink, 0)] - values[at, np.maximum(source, 0)]
        return np.where(known, difference, np.nan)

    quantity = expanded["mw"].to_numpy(float) * hours
    option = (expanded["kind"] == OPTION).to_numpy()

    def paid(difference: FloatArray) -> FloatArray:
        # An option is floored by its own sign: a negative quantity is a right sold, which never pays to its seller.
        value = np.where(option, np.maximum(difference, 0.0), difference)
        return np.where(np.isnan(difference), np.nan, quantity * value)

    congestion = errors.components["congestion"]
    posted, reference = spread(congestion.posted), spread(congestion.reference)
    reason_sink = errors.factor_reason[at, np.maximum(sink, 0)]
    reason_source = errors.factor_reason[at, np.maximum(source, 0)]
    reason = np.where(reason_sink != "", reason_sink, reason_source)
    status = np.where(~known, UNKNOWN_NODE, np.where(reason != "", reason, COUNTED))
    usable = status == COUNTED
    amounts = {
        "amount_published": paid(spread(claim.congestion)),
        "amount_posted": np.where(usable, paid(posted), np.nan),
        "amount_reference": np.where(usable, paid(reference), np.nan),
        "losses_left_open": quantity * spread(claim.loss),
    }
    return expanded.assign(
        posted=posted,
        reference=reference,
        **amounts,
        difference=amounts["amount_posted"] - amounts["amount_reference"],
        status=status,
    )[list(RIGHTS_COLUMNS)]


def by_holder(settled: pd.DataFrame) -> pd.DataFrame:
    """Return one row per holder: ``rights`` amounts added up over the counted rows, and the rows left out."""
    columns = ["amount_published", "amount_posted", "amount_reference", "difference", "losses_left_open"]
    if settled.empty:
        return pd.DataFrame(columns=["holder", "rows", "left_out", *columns])
    everyone = settled.groupby("holder")["status"].size()
    counted = settled[settled["status"] == COUNTED]
    total = counted.groupby("holder")[columns].sum().astype(float).reindex(everyone.index, fill_value=0.0)
    total.insert(0, "rows", counted.groupby("holder")["status"].size().reindex(everyone.index, fill_value=0))
    total.insert(1, "left_out", everyone - total["rows"])
    return total.reset_index()


def _every_interval(rights: pd.DataFrame, intervals: pd.DatetimeIndex) -> pd.DataFrame:
    kind = rights["kind"] if "kind" in rights else pd.Series("", index=rights.index)
    own = rights.assign(kind=kind.fillna("").replace("", OBLIGATION))
    starts = own["interval_start"] if "interval_start" in own else pd.Series(pd.NaT, index=own.index)
    timed = own[starts.notna()]
    always = own[starts.isna()].drop(columns="interval_start", errors="ignore")
    repeated = always.merge(pd.DataFrame({"interval_start": intervals}), how="cross")
    both = pd.concat([timed[timed["interval_start"].isin(intervals)], repeated], ignore_index=True)
    columns = ["holder", "interval_start", "source", "sink", "kind", "mw"]
    return both[columns].sort_values(columns[:5], kind="stable", ignore_index=True)
