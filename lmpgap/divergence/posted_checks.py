"""Checks of posted prices that need no network: versions, nodes, intervals, and whether components add up."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from difflib import get_close_matches

import numpy as np
import pandas as pd

from lmpgap.divergence.findings import Finding
from lmpgap.divergence.labels import IntervalLabels, listed, stretches
from lmpgap.divergence.posted import COMPONENT_COLUMNS, PostedPrices
from lmpgap.divergence.price_set import places
from lmpgap.scenario.network import BoolArray, IntArray
from lmpgap.tolerances import DEFAULT_TOLERANCES, Tolerances


def revision_findings(posted: PostedPrices, intervals: pd.DatetimeIndex, labels: IntervalLabels) -> Iterator[Finding]:
    """Yield one finding per stretch of intervals in which a version changed posted prices."""
    revisions = posted.revisions
    changes = [f"{name}_change" for name in ("lmp", "energy", "congestion", "loss")]
    changed = revisions[(revisions[changes].abs() > 1e-9).any(axis=1)]
    for pair, rows in changed.groupby(["version", "replaces"], sort=True):
        version, replaces = (float(str(number)) for number in pair)
        at = places(intervals, rows["interval_start"])
        for first, last in stretches(at):
            part = rows[(at >= first) & (at <= last)]
            largest = part["node"].iloc[int(part[changes].abs().max(axis=1).to_numpy().argmax())]
            amount = float(part["lmp_change"].abs().max())
            issued = part["published_at"].max()
            when = "" if pd.isna(issued) else f", published {_moment(issued, labels)},"
            nodes = part["node"].nunique()
            yield Finding(
                interval_start=intervals[first],
                kind="revised",
                node=str(part["node"].iloc[0]) if nodes == 1 else "",
                amount=amount,
                unit="$/MWh",
                sentence=(
                    f"{labels.stretch(intervals[first], intervals[last])}: version {version:g}{when} replaces version "
                    f"{replaces:g} at {nodes} node{'s' * (nodes != 1)}; the largest change of a price is {amount:,.2f} "
                    f"$/MWh, at {largest}."
                ),
            )


def repeated_findings(posted: PostedPrices, intervals: pd.DatetimeIndex, labels: IntervalLabels) -> Iterator[Finding]:
    """Yield one finding per stretch of intervals that stand more than once in one version."""
    at = places(intervals, posted.repeated["interval_start"])
    for first, last in stretches(at):
        part = posted.repeated[(at >= first) & (at <= last)]
        spread = float(part["spread"].max())
        differ = f"; the copies differ by up to {spread:,.2f} $/MWh" if spread > 0.0 else "; the copies agree"
        yield Finding(
            interval_start=intervals[first],
            kind="repeated-interval",
            node=str(part["node"].iloc[0]) if part["node"].nunique() == 1 else "",
            amount=float(len(part)),
            unit="prices",
            sentence=(
                f"{labels.stretch(intervals[first], intervals[last])}: {len(part)} prices stand more than once in the "
                f"same version{differ}. The last row of the file was used."
            ),
        )


def node_findings(
    posted: PostedPrices, known_nodes: Sequence[str], intervals: pd.DatetimeIndex, labels: IntervalLabels
) -> Iterator[Finding]:
    """Yield a finding per unknown node and per stretch of missing intervals.

    An unknown node whose intervals are just those in which a known node is missing is probably that node under a new
    name, and the sentence says so.
    """
    latest = posted.latest
    gaps = {str(node): places(intervals, rows["interval_start"]) for node, rows in posted.missing.groupby("node")}
    every = np.arange(len(intervals))
    unknown = {node: places(intervals, latest.loc[latest["node"] == node, "interval_start"]) for node in posted.unknown}
    for node, at in unknown.items():
        twins = [
            other
            for other, gap in gaps.items()
            if other not in unknown and np.array_equal(np.unique(gap), np.unique(at))
        ]
        close = get_close_matches(node, [*twins, *known_nodes], n=1, cutoff=0.6)
        twin = close[0] if close and close[0] in twins else (twins[0] if len(twins) == 1 else None)
        if twin is not None:
            hint = f"{twin} is missing in just these intervals, so it was probably renamed"
        elif close:
            hint = f"the nearest known name is {close[0]}"
        else:
            hint = "no known name is near it"
        yield Finding(
            interval_start=intervals[int(at.min())],
            kind="unknown-node",
            node=node,
            amount=float(at.size),
            unit="prices",
            sentence=(
                f"{node} is neither a bus nor a hub; its {at.size} prices "
                f"({labels.stretch(intervals[int(at.min())], intervals[int(at.max())])}) are kept and not used; {hint}."
            ),
        )
    # Nodes that share a gap are told together; an unknown node is not expected anywhere else.
    told: dict[tuple[int, int], list[str]] = {}
    for node, gap in gaps.items():
        if node not in unknown:
            for stretch in stretches(gap):
                told.setdefault(stretch, []).append(node)
    if latest.empty and every.size:
        return
    for (first, last), nodes in sorted(told.items()):
        count = last - first + 1
        yield Finding(
            interval_start=intervals[first],
            kind="missing-interval",
            node=nodes[0] if len(nodes) == 1 else "",
            amount=float(count),
            unit="intervals",
            sentence=(
                f"{labels.stretch(intervals[first], intervals[last])}: no posted price for {listed(nodes)} "
                f"({count} interval{'s' * (count != 1)})."
            ),
        )


def identity_findings(
    posted: PostedPrices,
    intervals: pd.DatetimeIndex,
    labels: IntervalLabels,
    tolerances: Tolerances = DEFAULT_TOLERANCES,
) -> tuple[list[Finding], pd.DataFrame]:
    """Check that each posted price is the sum of its components, and with which signs.

    Returns
    -------
    list of Finding
        ``sign`` where the identity holds once one component changes its sign, ``identity`` where it does not hold
        at all or the energy component differs between nodes.
    DataFrame
        ``posted.latest`` with the signs put right where there was a ``sign`` finding, for the checks that follow.
    """
    latest = posted.latest.copy()
    parts = latest[COMPONENT_COLUMNS].to_numpy(float)
    lmp = latest["lmp"].to_numpy(float)
    # The price and each of the components is off by at most the rounding.
    within = (1 + len(COMPONENT_COLUMNS)) * tolerances.posted_rounding + 1e-9
    rest = lmp - parts.sum(axis=1)
    broken = np.abs(rest) > within
    at = places(intervals, latest["interval_start"])
    findings: list[Finding] = []
    for i, column in ((1, "congestion"), (2, "loss"), (0, "energy")):
        turned = broken & (np.abs(rest + 2.0 * parts[:, i]) <= within)
        # One price may fit by accident; a sign is wrong where it is wrong for all that is broken in the interval.
        rows = turned & ~_shared(broken & ~turned, at, len(intervals))
        for first, last in stretches(at[rows]):
            inside = rows & (at >= first) & (at <= last)
            findings.append(_sign_finding(latest[inside], column, intervals[first], intervals[last], labels))
        # Where the component is small its sign does not show; it goes with the others of the interval.
        small = _shared(rows, at, len(intervals)) & (np.abs(rest + 2.0 * parts[:, i]) <= within)
        latest.loc[small, COMPONENT_COLUMNS[i]] = -parts[small, i]
        broken &= ~rows
    for first, last in stretches(at[broken]):
        inside = np.flatnonzero(broken & (at >= first) & (at <= last))
        worst = inside[np.argmax(np.abs(rest[inside]))]
        nodes = list(latest["node"].iloc[inside].drop_duplicates())
        findings.append(
            Finding(
                interval_start=intervals[first],
                kind="identity",
                node=nodes[0] if len(nodes) == 1 else "",
                amount=float(rest[worst]),
                unit="$/MWh",
                sentence=(
                    f"{labels.stretch(intervals[first], intervals[last])}: the components of {inside.size} prices at "
                    f"{listed(nodes)} do not add up to the price; the largest rest is {rest[worst]:+,.2f} $/MWh, at "
                    f"{latest['node'].iloc[worst]}."
                ),
            )
        )
    findings += _energy_findings(latest, at, intervals, labels, tolerances)
    return findings, latest


def _sign_finding(
    rows: pd.DataFrame, component: str, first: pd.Timestamp, last: pd.Timestamp, labels: IntervalLabels
) -> Finding:
    size = rows[f"{component}_component"].abs().to_numpy(float)
    nodes = list(rows["node"].drop_duplicates())
    return Finding(
        interval_start=first,
        kind="sign",
        node=nodes[0] if len(nodes) == 1 else "",
        amount=size.max(),
        unit="$/MWh",
        sentence=(
            f"{labels.stretch(first, last)}: the {component} component is posted with the other sign at {len(nodes)} "
            f"node{'s' * (len(nodes) != 1)}; with its sign changed all {len(rows)} prices add up. The largest is "
            f"{size.max():,.2f} $/MWh, at {rows['node'].iloc[int(size.argmax())]}."
        ),
    )


def _shared(rows: BoolArray, at: IntArray, n_interval: int) -> BoolArray:
    """Return for each row whether any of the chosen rows is in its interval."""
    return np.asarray(np.bincount(at[rows], minlength=n_interval)[at] > 0)


def _energy_findings(
    latest: pd.DataFrame,
    at: IntArray,
    intervals: pd.DatetimeIndex,
    labels: IntervalLabels,
    tolerances: Tolerances,
) -> Iterator[Finding]:
    """Yield where the energy component is not the same at every node: components are then on no one reference."""
    energy = latest["energy_component"].groupby(at)
    typical = energy.transform("median").to_numpy(float)
    off = np.abs(latest["energy_component"].to_numpy(float) - typical)
    # An energy component by subtraction carries the rounding of all four figures.
    wrong = off > 2.0 * (1 + len(COMPONENT_COLUMNS)) * tolerances.posted_rounding + 1e-9
    for first, last in stretches(at[wrong]):
        inside = np.flatnonzero(wrong & (at >= first) & (at <= last))
        worst = inside[np.argmax(off[inside])]
        nodes = list(latest["node"].iloc[inside].drop_duplicates())
        yield Finding(
            interval_start=intervals[first],
            kind="identity",
            node=nodes[0] if len(nodes) == 1 else "",
            amount=float(off[worst]),
            unit="$/MWh",
            sentence=(
                f"{labels.stretch(intervals[first], intervals[last])}: the energy component of {listed(nodes)} is not "
                f"that of the other nodes (off by up to {off[worst]:,.2f} $/MWh, at {latest['node'].iloc[worst]}); "
                f"these components are not on one reference."
            ),
        )


def _moment(moment: pd.Timestamp, labels: IntervalLabels) -> str:
    local = moment.tz_convert(labels.time_zone)
    return f"{local.day} {local:%b %H:%M}"
