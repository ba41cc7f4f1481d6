"""All checks of posted prices in one call: from a scenario and the operating points of a run to findings."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
import pandas as pd

from lmpgap.divergence.congestion_checks import RECOVERED_COLUMNS, explain_congestion
from lmpgap.divergence.congestion_findings import congestion_findings
from lmpgap.divergence.factors import compare_factors, factor_table, stale_findings, stale_stretches
from lmpgap.divergence.findings import findings_table
from lmpgap.divergence.labels import IntervalLabels
from lmpgap.divergence.operating_points import OperatingPoints, node_mix, operating_points
from lmpgap.divergence.posted import POSTED, PostedPrices, order_posted
from lmpgap.divergence.posted_checks import (
    identity_findings,
    node_findings,
    repeated_findings,
    revision_findings,
)
from lmpgap.divergence.price_set import PriceSet
from lmpgap.divergence.price_tables import price_set
from lmpgap.scenario.network import Network
from lmpgap.tolerances import DEFAULT_TOLERANCES, Tolerances

if TYPE_CHECKING:
    from lmpgap.scenario.scenario import Scenario


@dataclass(frozen=True, kw_only=True)
class PostedCheck:
    """What the checks found, and what they went by.

    Attributes
    ----------
    findings : DataFrame
        Run table ``findings``.
    posted : PostedPrices
        Versions, gaps, unknown nodes.
    prices : PriceSet or None
        The latest posted prices of known nodes on all intervals, signs put right where one was found to be wrong;
        ``None`` without posted prices.
    recovered : DataFrame
        Constraints behind the posted congestion, see `lmpgap.divergence.congestion_checks.Explanation`.
    factors : DataFrame
        Implied and recomputed delivery factors, see `lmpgap.divergence.factors.factor_table`.
    """

    findings: pd.DataFrame
    posted: PostedPrices
    prices: PriceSet | None
    recovered: pd.DataFrame
    factors: pd.DataFrame


def check_posted(
    scenario: Scenario,
    tables: Mapping[str, pd.DataFrame],
    *,
    factors_from: str = "ac",
    tolerances: Tolerances = DEFAULT_TOLERANCES,
) -> PostedCheck:
    """Check the posted prices of a scenario against its network and the operating points of a run.

    Parameters
    ----------
    tables
        Run tables; only ``operating_point`` is used. Without it the checks that need no network are made.
    factors_from
        Formulation whose operating point gives the delivery factors that the implied ones are held against; another one
        of the run if it holds no such solution.
    """
    points = operating_points(
        tables["operating_point"],
        scenario.network,
        scenario.inputs,
        scenario.interval_starts,
        scenario.settings.dc,
    )
    labels = IntervalLabels.of(
        scenario.interval_starts, scenario.settings.time_zone, scenario.settings.interval_minutes
    )
    return check_posted_prices(
        scenario.tables["posted"],
        scenario.network,
        scenario.interval_starts,
        labels,
        points,
        hubs=scenario.tables["hubs"],
        factors_from=factors_from,
        tolerances=tolerances,
    )


def check_posted_prices(
    posted: pd.DataFrame,
    network: Network,
    intervals: pd.DatetimeIndex,
    labels: IntervalLabels,
    points: Mapping[str, OperatingPoints],
    *,
    hubs: pd.DataFrame | None = None,
    factors_from: str = "ac",
    tolerances: Tolerances = DEFAULT_TOLERANCES,
) -> PostedCheck:
    """Check posted prices against a network and operating points; no offers are needed.

    Parameters
    ----------
    posted
        Table `posted`.
    points
        Operating points by formulation; may be empty.

    See Also
    --------
    check_posted : The same from a scenario and a run.
    """
    known = [*network.buses, *([] if hubs is None or hubs.empty else hubs["hub"].unique())]
    ordered = order_posted(posted, known, intervals)
    found = [
        *revision_findings(ordered, intervals, labels),
        *repeated_findings(ordered, intervals, labels),
        *node_findings(ordered, known, intervals, labels),
    ]
    wrong, corrected = identity_findings(ordered, intervals, labels, tolerances)
    found += wrong
    prices = _on_all_intervals(ordered, corrected, intervals)
    nothing = pd.DataFrame(columns=RECOVERED_COLUMNS)
    if prices is None or not points:
        return PostedCheck(
            findings=findings_table(found),
            posted=ordered,
            prices=prices,
            recovered=nothing,
            factors=pd.DataFrame(),
        )
    mix = node_mix(network, hubs, prices.buses)
    source = points.get(factors_from) or next(iter(points.values()))
    recomputed = np.asarray((mix @ source.delivery_factors().T).T)
    factors = compare_factors(prices, recomputed, tolerances)
    per_day = max(1, round(24 * 60 / labels.interval_minutes))
    found += stale_findings(stale_stretches(factors, per_day), factors, prices, labels, source.formulation)
    explanation = explain_congestion(prices, mix, points, tolerances)
    found += congestion_findings(explanation, prices, labels)
    return PostedCheck(
        findings=findings_table(found),
        posted=ordered,
        prices=prices,
        recovered=explanation.recovered,
        factors=factor_table(factors, prices),
    )


def _on_all_intervals(ordered: PostedPrices, corrected: pd.DataFrame, intervals: pd.DatetimeIndex) -> PriceSet | None:
    """Return the latest prices of known nodes on the intervals asked for, ``nan`` where nothing is posted."""
    known = corrected[corrected["known"]]
    if known.empty:
        return None
    # A row without a price for each interval puts gaps in their place.
    gaps = pd.DataFrame({"interval_start": intervals, "node": known["node"].iloc[0]})
    present = known[known["node"] == known["node"].iloc[0]]["interval_start"]
    filled = pd.concat([known, gaps[~gaps["interval_start"].isin(present)]], ignore_index=True)
    rows = filled.assign(formulation=POSTED, bus=filled["node"], reactive_component=0.0)
    prices = price_set({"prices": rows}, POSTED)
    unsplit = np.isnan(prices.lmp)
    return prices if not unsplit.all() else None
