"""What each modelling assumption costs, and which formulation comes closest to the AC prices."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from itertools import pairwise

import numpy as np
import pandas as pd

from lmpgap.divergence.drivers import DRIVERS
from lmpgap.divergence.ranking import PAIR, divergence

NOT_CERTIFIED = ("uncertified",)
"""Verdicts that bar a solve from every average. A relaxed price with the verdict ``not a price`` is an accurate
solve of its own problem; how far it is from AC is what the averages are to show."""

STEP_ASSUMPTION: Mapping[tuple[str, str], str] = {
    ("dc", "dc-loss"): "losses are left out",
    ("dc-loss", "soc"): "voltages are flat and reactive power is left out",
    ("soc", "ac"): "angles need not close around loops",
}
"""What the first formulation of a step assumes and the second does not."""


def certified_intervals(solves: pd.DataFrame, formulations: Sequence[str]) -> pd.DatetimeIndex:
    """Return the intervals in which every one of the formulations has a certified solve.

    Parameters
    ----------
    solves
        Run table ``solves``.
    """
    rows = solves[solves["formulation"].isin(list(formulations))]
    good = rows[~rows["verdict"].isin(NOT_CERTIFIED) & rows["objective"].notna()]
    count = good.groupby("interval_start")["formulation"].nunique()
    starts = count.index[count == len(set(formulations))]
    return pd.DatetimeIndex(starts).sort_values()


def ladder(
    differences: pd.DataFrame,
    drivers: pd.DataFrame,
    solves: pd.DataFrame,
    formulations: Sequence[str] = ("dc", "dc-loss", "soc", "ac"),
) -> pd.DataFrame:
    """Return what each step from one formulation to the next adds to prices.

    Parameters
    ----------
    differences, drivers
        Run tables that hold the steps (dc against dc-loss, and so on); a step that was not compared is missing.
    solves
        Intervals in which one of the formulations is not certified are left out of every step, so that the steps are
        over the same prices.

    Returns
    -------
    DataFrame
        base, against, assumption (what base assumes and against does not), intervals, mean, mean_absolute, largest
        (size) [$/MWh], and one column per driver: mean absolute amount [$/MWh].
    """
    present = [name for name in formulations if name in set(differences["base"]) | set(differences["against"])]
    intervals = certified_intervals(solves, present)
    rows = []
    for base, against in pairwise(present):
        step = _of_pair(differences, base, against, intervals)
        if step.empty:
            continue
        size = divergence(step).abs()
        told = _of_pair(drivers, base, against, intervals)
        # Within one driver the sources (constraints, buses) of one price are netted before sizes are taken.
        net = told.groupby(["interval_start", "bus", "driver"], observed=True, sort=False)["amount"].sum().abs()
        by_driver = net.groupby("driver", observed=True).sum() / len(step)
        rows.append(
            {
                "base": base,
                "against": against,
                "assumption": STEP_ASSUMPTION.get((base, against), "several assumptions"),
                "intervals": step["interval_start"].nunique(),
                "mean": divergence(step).mean(),
                "mean_absolute": size.mean(),
                "largest": size.max(),
                **{driver: float(by_driver.get(driver, 0.0)) for driver in DRIVERS},
            }
        )
    columns = [*PAIR, "assumption", "intervals", "mean", "mean_absolute", "largest", *DRIVERS]
    return pd.DataFrame(rows, columns=columns)


_NO_LEVEL = 0.005
"""Prices that round to zero cents on average are no measure for an error [$/MWh]."""


def closest_to(
    prices: pd.DataFrame, solves: pd.DataFrame, truth: str = "ac", formulations: Sequence[str] | None = None
) -> pd.DataFrame:
    """Return how far each formulation's prices are from those of ``truth``, closest first.

    Parameters
    ----------
    prices, solves
        Run tables. All formulations are judged on the same intervals: those in which all of them are certified.

    Returns
    -------
    DataFrame
        formulation, intervals, excluded (intervals left out), mean_absolute_error, largest_error [$/MWh], relative
        (mean absolute error over the mean size of the prices of ``truth``) [-], best_intervals (in how many it is the
        closest).
    """
    columns = [
        "formulation", "intervals", "excluded", "mean_absolute_error", "largest_error", "relative", "best_intervals",
    ]  # fmt: skip
    found = list(dict.fromkeys(prices["formulation"]))
    others = [name for name in (formulations or found) if name in found and name != truth]
    if truth not in found or not others:
        return pd.DataFrame(columns=columns)
    intervals = certified_intervals(solves, [*others, truth])
    every = prices["interval_start"].nunique()
    wide = prices[prices["interval_start"].isin(intervals)].pivot(
        index=["interval_start", "bus"], columns="formulation", values="lmp"
    )
    # Without an interval in which all are certified the pivot has no columns at all.
    wide = wide.reindex(columns=[*others, truth]).dropna()
    if wide.empty:
        return pd.DataFrame(columns=columns)
    error = wide[others].sub(wide[truth], axis=0).abs()
    level = float(wide[truth].abs().mean())
    by_interval = error.groupby(level="interval_start").mean()
    best = by_interval.idxmin(axis=1).value_counts()
    table = pd.DataFrame(
        {
            "formulation": others,
            "intervals": len(by_interval),
            "excluded": every - len(by_interval),
            "mean_absolute_error": error.mean().to_numpy(),
            "largest_error": error.max().to_numpy(),
            "relative": error.mean().to_numpy() / level if level > _NO_LEVEL else np.nan,
            "best_intervals": [int(best.get(name, 0)) for name in others],
        }
    )
    return table.sort_values("mean_absolute_error", ignore_index=True, kind="stable")[columns]


def _of_pair(frame: pd.DataFrame, base: str, against: str, intervals: pd.DatetimeIndex) -> pd.DataFrame:
    return frame[(frame["base"] == base) & (frame["against"] == against) & frame["interval_start"].isin(intervals)]
