"""Delivery factors implied by posted prices against those of an operating point, and how old they are.

Posted energy e and loss L imply the factor DF = (e + L)/e on the posted reference. Factors on two references differ by
one number per interval; it is taken as the median ratio over the nodes, so that neither the posted reference need be
known nor a minority of wrong factors matters. A factor that stands still while the one of the operating point moves was
not computed from the flows of its interval.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass

import numpy as np
import pandas as pd

from lmpgap.divergence.findings import Finding
from lmpgap.divergence.labels import IntervalLabels
from lmpgap.divergence.price_set import PriceSet
from lmpgap.scenario.network import FloatArray, IntArray
from lmpgap.tolerances import DEFAULT_TOLERANCES, Tolerances

STILL_INTERVALS = 8
"""A factor must stand still for this many intervals in a row: loads can stand still for a few hours of the night."""

MOVEMENT = 6.0
"""The operating point's factor must move meanwhile by this many times the rounding of the implied one [-]. Two
references or two loss models make them move by different amounts, yet not by a factor of six."""


@dataclass(frozen=True, kw_only=True)
class FactorComparison:
    """Implied and recomputed delivery factors, all (n_interval, n_node).

    Attributes
    ----------
    implied
        From the posted components [-]; ``nan`` where the energy price is too near zero.
    uncertainty
        How far rounding can have moved it [-].
    recomputed
        Of the operating point, on the posted reference [-].
    """

    implied: FloatArray
    uncertainty: FloatArray
    recomputed: FloatArray


@dataclass(frozen=True, kw_only=True)
class StaleStretch:
    """One node whose implied factor stands still, or repeats another day, while the operating point moves.

    Attributes
    ----------
    node, first, last : int
        Positions.
    value
        The factor that stands [-]; ``nan`` where another day is repeated.
    source
        Position of the interval whose factors these are, -1 where none was found. Of a repeated day, the interval that
        ``first`` repeats.
    """

    node: int
    first: int
    last: int
    value: float
    source: int


def compare_factors(
    posted: PriceSet, recomputed: FloatArray, tolerances: Tolerances = DEFAULT_TOLERANCES
) -> FactorComparison:
    """Return implied and recomputed factors on the posted reference.

    Parameters
    ----------
    posted
        Posted prices of the nodes.
    recomputed : (n_interval, n_node)
        Delivery factors of the operating point on any reference [-].
    """
    energy, loss, rounding = posted.energy, posted.loss, tolerances.posted_rounding
    usable = np.abs(energy) >= tolerances.smallest_energy_price
    with np.errstate(divide="ignore", invalid="ignore"):
        implied = np.where(usable, 1.0 + loss / energy, np.nan)
        uncertainty = rounding * (1.0 + np.abs(loss / energy)) / np.abs(energy)
        ratio = implied / recomputed
    known = np.isfinite(ratio)
    scale = np.ones(len(ratio))
    rows = known.any(axis=1)
    scale[rows] = np.nanmedian(np.where(known[rows], ratio[rows], np.nan), axis=1)
    return FactorComparison(
        implied=implied, uncertainty=np.where(usable, uncertainty, np.nan), recomputed=recomputed * scale[:, None]
    )


def stale_stretches(factors: FactorComparison, per_day: int, least: int = STILL_INTERVALS) -> list[StaleStretch]:
    """Return where implied factors stand still or repeat those of another day.

    Parameters
    ----------
    factors
        Of consecutive intervals.
    per_day
        Intervals in a day.
    least
        Shortest stretch [intervals].
    """
    low, high = factors.implied - factors.uncertainty, factors.implied + factors.uncertainty
    # Where nothing is implied, nothing contradicts standing still.
    low, high = np.where(np.isnan(low), -np.inf, low), np.where(np.isnan(high), np.inf, high)
    longest = _longest_still(low, high)
    stale = []
    taken = np.zeros(low.shape, dtype=bool)
    for node in np.flatnonzero((longest >= least).any(axis=0)).tolist():
        for first, last in _apart(longest[:, node], least):
            if not _moves_less(factors, node, first, last):
                continue
            bounds = low[first : last + 1, node].max(), high[first : last + 1, node].min()
            stale.append(StaleStretch(node=node, first=first, last=last, value=float(np.mean(bounds)), source=-1))
            taken[first : last + 1, node] = True
    return [_with_source(item, factors, taken) for item in stale] + _repeated_days(factors, taken, per_day, least)


def stale_findings(
    stretches_found: Sequence[StaleStretch],
    factors: FactorComparison,
    posted: PriceSet,
    labels: IntervalLabels,
    point_name: str,
) -> Iterator[Finding]:
    """Yield a finding per stale stretch, with the mean error it puts into the loss component [$/MWh]."""
    for item in stretches_found:
        rows = slice(item.first, item.last + 1)
        error = posted.energy[rows, item.node] * (
            factors.implied[rows, item.node] - factors.recomputed[rows, item.node]
        )
        meant = factors.recomputed[rows, item.node]
        known = np.isfinite(error)
        mean, count = float(error[known].mean()), item.last - item.first + 1
        node = str(posted.buses[item.node])
        when = labels.stretch(posted.intervals[item.first], posted.intervals[item.last])
        source = "" if item.source < 0 else labels.label(posted.intervals[item.source])
        if np.isfinite(item.value):
            what = f"the posted delivery factor of {node} stands still at {item.value:.4f}"
            origin = f"; it is that of {source}" if source else ""
        else:
            what = f"the posted delivery factors of {node} repeat another day"
            origin = f", from {source} on"
        yield Finding(
            interval_start=posted.intervals[item.first],
            kind="stale-factors",
            node=node,
            amount=mean,
            unit="$/MWh",
            sentence=(
                f"{when}: {what} for {count} intervals{origin}, while that of the {point_name} operating point moves "
                f"between {np.nanmin(meant):.4f} and {np.nanmax(meant):.4f}. The loss component is off by {mean:+,.2f} "
                f"$/MWh on average, at most by {float(np.abs(error[known]).max()):,.2f}."
            ),
        )


def _longest_still(low: FloatArray, high: FloatArray) -> IntArray:
    """Return for each interval how many from it on admit one constant value, (n_interval, n_node)."""
    n_interval = len(low)
    length = np.ones(low.shape, dtype=np.int64)
    top, bottom = low.copy(), high.copy()
    alive = np.ones(low.shape, dtype=bool)
    for width in range(2, n_interval + 1):
        end = n_interval - width + 1
        top, bottom, alive = top[:end], bottom[:end], alive[:end]
        top = np.maximum(top, low[width - 1 :])
        bottom = np.minimum(bottom, high[width - 1 :])
        alive = alive & (top <= bottom)
        if not alive.any():
            break
        length[:end][alive] = width
    return length


def _apart(length: IntArray, least: int) -> list[tuple[int, int]]:
    """Return stretches of at least this length that do not overlap, the longest chosen first."""
    free = np.ones(length.size, dtype=bool)
    chosen = []
    for first in np.argsort(-length, kind="stable").tolist():
        last = first + int(length[first]) - 1
        if length[first] < least:
            break
        if free[first : last + 1].all():
            free[first : last + 1] = False
            chosen.append((first, last))
    return sorted(chosen)


def _moves_less(factors: FactorComparison, node: int, first: int, last: int) -> bool:
    """Return whether the operating point's factor moves far more than rounding hides of the implied one."""
    rows = slice(first, last + 1)
    known = np.isfinite(factors.implied[rows, node]) & np.isfinite(factors.recomputed[rows, node])
    if np.count_nonzero(known) < STILL_INTERVALS:
        return False
    meant = factors.recomputed[rows, node][known]
    hidden = float(np.median(factors.uncertainty[rows, node][known]))
    return bool(np.ptp(meant) > MOVEMENT * 2.0 * hidden)


def _with_source(item: StaleStretch, factors: FactorComparison, taken: np.ndarray) -> StaleStretch:
    """Name the interval whose own factor is the value that stands; the nodes that stand with it must agree."""
    together = np.flatnonzero(taken[item.first : item.last + 1].all(axis=0))
    value = np.nanmean(factors.implied[item.first : item.last + 1, together], axis=0)
    distance = np.abs(factors.implied[:, together] - value)
    with np.errstate(invalid="ignore"):
        fits = np.where(taken[:, together], False, distance <= 2.0 * factors.uncertainty[:, together]).all(axis=1)
    candidates = np.flatnonzero(fits)
    if candidates.size == 0:
        return item
    nearest = candidates[np.argmin(distance[candidates].sum(axis=1))]
    return StaleStretch(node=item.node, first=item.first, last=item.last, value=item.value, source=int(nearest))


def _repeated_days(factors: FactorComparison, taken: np.ndarray, per_day: int, least: int) -> list[StaleStretch]:
    """Return stretches whose implied factors repeat those of an earlier day, hour by hour, while flows differ."""
    n_interval = len(taken)
    found = []
    for shift in range(per_day, n_interval, per_day):
        now, then = slice(shift, n_interval), slice(0, n_interval - shift)
        hidden = factors.uncertainty[now] + factors.uncertainty[then]
        with np.errstate(invalid="ignore"):
            same = np.abs(factors.implied[now] - factors.implied[then]) <= hidden
            moved = np.abs(factors.recomputed[now] - factors.recomputed[then]) > MOVEMENT * hidden
        same &= ~taken[now]
        run = np.zeros(same.shape[1], dtype=np.int64)
        length = np.zeros(same.shape, dtype=np.int64)
        for row in range(len(same) - 1, -1, -1):
            run = np.where(same[row], run + 1, 0)
            length[row] = run
        for node in np.flatnonzero((length >= least).any(axis=0)).tolist():
            for first, last in _apart(length[:, node], least):
                if np.mean(moved[first : last + 1, node]) < 0.5 or taken[shift + first : shift + last + 1, node].any():
                    continue
                found.append(
                    StaleStretch(node=node, first=shift + first, last=shift + last, value=float("nan"), source=first)
                )
                taken[shift + first : shift + last + 1, node] = True
    return found


def factor_table(factors: FactorComparison, posted: PriceSet) -> pd.DataFrame:
    """Return implied and recomputed factors as a long table, for pictures.

    Returns
    -------
    DataFrame
        interval_start, node, implied, recomputed, uncertainty [-], error (what the difference puts into the loss
        component [$/MWh]).
    """
    at, node = np.nonzero(np.isfinite(factors.implied) & np.isfinite(factors.recomputed))
    implied, recomputed = factors.implied[at, node], factors.recomputed[at, node]
    return pd.DataFrame(
        {
            "interval_start": posted.intervals.take(at),
            "node": pd.Series(posted.buses.take(node), dtype="str"),
            "implied": implied,
            "recomputed": recomputed,
            "uncertainty": factors.uncertainty[at, node],
            "error": posted.energy[at, node] * (implied - recomputed),
        }
    )
