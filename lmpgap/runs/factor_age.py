"""How `dc-loss` prices move with the age of the operating point behind the factors."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import pandas as pd

from lmpgap.errors import DataError
from lmpgap.progress import Progress, silent
from lmpgap.runs.fingerprint import fingerprint
from lmpgap.runs.folder import RunFolder
from lmpgap.runs.given_losses import FrozenPoints
from lmpgap.runs.interval import solve_interval
from lmpgap.runs.plan import Plan, RunSettings
from lmpgap.scenario.network import FloatArray
from lmpgap.scenario.scenario import Scenario

TASK = "ageing factors"


def factor_age(
    scenario: Scenario, run: RunFolder, ages: Sequence[float], *, progress: Progress = silent
) -> pd.DataFrame:
    """Solve `dc-loss` with losses frozen at operating points of several ages, and compare prices.

    The comparison is with `dc-loss` with the losses of its own flows, over the intervals for which every age has an
    operating point.

    Parameters
    ----------
    run
        Run with operating points (of its most exact formulation) of the scenario's intervals.
    ages
        [h]

    Returns
    -------
    DataFrame
        age_hours, intervals, mean_absolute, percentile_95, largest (price against own losses), loss_component (mean
        absolute difference of the loss component) [$/MWh].

    Raises
    ------
    DataError
        When no interval has an operating point of every age.
    """
    sources = [FrozenPoints(scenario, run, age=pd.Timedelta(hours=age)) for age in ages]
    positions = [k for k in range(scenario.n_interval) if all(source.covers(k) for source in sources)]
    if not positions:
        raise DataError(
            f"{run.path} has no interval with operating points of every age from {min(ages)} to {max(ages)} h"
        )
    settings = RunSettings.of(scenario, uniqueness=False, audit=False)
    plans = [Plan(scenario, ("dc-loss",), settings, positions, losses) for losses in (None, *sources)]
    total = len(plans) * len(positions)
    network_key = fingerprint(scenario.network)
    solved: list[tuple[FloatArray, FloatArray]] = []
    progress(TASK, 0, total)
    for number, plan in enumerate(plans):
        lmp: list[FloatArray] = []
        loss: list[FloatArray] = []
        for count, position in enumerate(positions, start=1):
            (item,) = solve_interval(
                scenario.network, plan.interval(position), plan.settings, scenario.settings.hours, network_key
            )
            nothing = np.full(scenario.network.n_bus, np.nan)
            lmp.append(nothing if item.split is None else item.split.lmp)
            loss.append(nothing if item.split is None else item.split.loss)
            progress(TASK, number * len(positions) + count, total)
        solved.append((np.array(lmp), np.array(loss)))
    (own_lmp, own_loss), *aged = solved
    rows = []
    for age, (aged_lmp, aged_loss) in zip(ages, aged, strict=True):
        size = np.abs(aged_lmp - own_lmp)
        rows.append(
            {
                "age_hours": age,
                "intervals": int(np.isfinite(size).any(axis=1).sum()),
                "mean_absolute": float(np.nanmean(size)),
                "percentile_95": float(np.nanpercentile(size, 95)),
                "largest": float(np.nanmax(size)),
                "loss_component": float(np.nanmean(np.abs(aged_loss - own_loss))),
            }
        )
    return pd.DataFrame(rows)
