"""Findings from the constraints behind posted congestion: reversed, not credible, or none at all."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np
import pandas as pd

from lmpgap.divergence.congestion_checks import (
    AT_LIMIT,
    NOT_CREDIBLE,
    SEPARATOR,
    SMALLEST,
    SMALLEST_SHARE,
    Explanation,
)
from lmpgap.divergence.findings import Finding
from lmpgap.divergence.labels import IntervalLabels, listed, stretches
from lmpgap.divergence.price_set import PriceSet, places


def congestion_findings(explanation: Explanation, posted: PriceSet, labels: IntervalLabels) -> Iterator[Finding]:
    """Yield reversed constraints, constraints that cannot have bound, and congestion that nothing explains."""
    recovered = explanation.recovered
    forward = recovered["direction"].isin(["forward", "upper"]).to_numpy()
    along = recovered["loading"].to_numpy(float) * np.where(forward, 1.0, -1.0)
    size = np.nanmax(np.where(np.isfinite(posted.congestion), np.abs(posted.congestion), 0.0), axis=1)
    floor = np.maximum(SMALLEST, SMALLEST_SHARE * size)[places(posted.intervals, recovered["interval_start"])]
    telling = np.abs(recovered["largest_effect"].to_numpy(float)) > floor
    reversed_rows = (along <= -AT_LIMIT) & telling
    doubtful = (np.abs(along) < NOT_CREDIBLE) & telling
    for name, rows in recovered[reversed_rows].groupby("constraint", sort=True):
        yield from _per_stretch(rows, str(name), "reversed-constraint", posted, labels)
    for name, rows in recovered[doubtful].groupby("constraint", sort=True):
        yield from _per_stretch(rows, str(name), "unexplained-congestion", posted, labels)
    yield from _rest_findings(explanation, posted, labels)


def _per_stretch(
    rows: pd.DataFrame, name: str, kind: str, posted: PriceSet, labels: IntervalLabels
) -> Iterator[Finding]:
    at = places(posted.intervals, rows["interval_start"])
    for first, last in stretches(at):
        part = rows[(at >= first) & (at <= last)]
        top = part.iloc[int(part["largest_effect"].abs().to_numpy().argmax())]
        effect, node = float(top["largest_effect"]), str(top["largest_at"])
        when = labels.stretch(posted.intervals[first], posted.intervals[last])
        alike = (
            f" (or {listed(str(top['alike']).split(SEPARATOR))}, which these prices cannot tell from it)"
            if top["alike"]
            else ""
        )
        price = f"a shadow price of up to {float(part['shadow_price'].max()):,.2f} $/MWh"
        flows = f"{abs(float(top['flow'])):,.0f} MW or {100.0 * abs(float(top['loading'])):.0f} % of the limit"
        if kind == "reversed-constraint":
            ahead = "forward" if float(top["flow"]) >= 0.0 else "in reverse"
            sentence = (
                f"{when}: the posted congestion is that of {name}{alike} with {price}, yet the flow runs {ahead} "
                f"({flows}): the direction seems reversed, {effect:+,.2f} $/MWh at {node}."
            )
        else:
            sentence = (
                f"{when}: the posted congestion would take the limit {name}{alike} with {price} to explain, yet it "
                f"carries {flows} at this operating point; {effect:+,.2f} $/MWh at {node}."
            )
        yield Finding(
            interval_start=posted.intervals[first],
            kind=kind,
            node=node,
            constraint=name,
            amount=effect,
            unit="$/MWh",
            sentence=sentence,
        )


def _rest_findings(
    explanation: Explanation, posted: PriceSet, labels: IntervalLabels, most_nodes: int = 8
) -> Iterator[Finding]:
    """Yield what is left at single nodes, or once for the interval where it is left at many."""
    rest = np.nan_to_num(explanation.rest)
    standing = np.abs(rest) > explanation.noise[:, None]
    crowded = standing.sum(axis=1) > most_nodes
    for node in np.flatnonzero((standing & ~crowded[:, None]).any(axis=0)).tolist():
        for first, last in stretches(np.flatnonzero(standing[:, node] & ~crowded)):
            part = rest[first : last + 1, node]
            amount = float(part[np.argmax(np.abs(part))])
            yield Finding(
                interval_start=posted.intervals[first],
                kind="unexplained-congestion",
                node=str(posted.buses[node]),
                amount=amount,
                unit="$/MWh",
                sentence=(
                    f"{labels.stretch(posted.intervals[first], posted.intervals[last])}: up to {abs(amount):,.2f} "
                    f"$/MWh of the congestion posted at {posted.buses[node]} is explained by no constraint."
                ),
            )
    for first, last in stretches(np.flatnonzero(crowded)):
        part = rest[first : last + 1]
        worst = np.unravel_index(int(np.argmax(np.abs(part))), part.shape)
        nodes = [str(posted.buses[i]) for i in np.argsort(-np.abs(part).max(axis=0), kind="stable")[:3]]
        count = int((np.abs(part) > explanation.noise[first : last + 1, None]).any(axis=0).sum()) or posted.n_bus
        yield Finding(
            interval_start=posted.intervals[first],
            kind="unexplained-congestion",
            amount=float(part[worst]),
            unit="$/MWh",
            sentence=(
                f"{labels.stretch(posted.intervals[first], posted.intervals[last])}: no set of constraints explains "
                f"the congestion posted at {count} nodes; up to {abs(float(part[worst])):,.2f} $/MWh are left, most at "
                f"{listed(nodes)}."
            ),
        )
